"""Time and memory of the raster steps on a raster far larger than a window.

Run from the repository root: ``python tests/bench/large_raster.py [CELLS_PER_SIDE] [PARCELS_PER_SIDE]``. A synthetic
raster is written to a temporary folder, then read wall to wall, turned into a density map calibrated to invented
stocks, and checked. Printed beside the seconds: their ratio to one plain pass over the file by windows, and the peak
memory.
"""

from __future__ import annotations

import resource
import sys
import tempfile
import time
from collections.abc import Callable
from pathlib import Path

import geopandas as gpd
import numpy as np
import pandas as pd
import rasterio
import shapely
from rasterio import Affine
from rasterio.windows import Window as Block

from landcarbon.publish.rasters import RasterRequest, check_raster_sums, raster_grid, write_density
from landcarbon.read.footprints import Footprint
from landcarbon.read.raster_files import WINDOW_COLUMNS, WINDOW_ROWS, open_raster
from landcarbon.read.rasters import RasterFile, RasterPlace, plot_values, unit_means

CRS = "EPSG:32632"
CELL_M = 10.0
LEFT, TOP = 400_000.0, 5_900_000.0


def write_raster(path: Path, side: int, generator: np.random.Generator) -> None:
    """Write heights of some 20 m with noise, tile by tile."""
    noise = generator.gamma(4.0, 5.0, (512, 512)).astype("float32")
    options = {"driver": "GTiff", "dtype": "float32", "count": 1, "width": side, "height": side, "crs": CRS}
    options |= {"tiled": True, "blockxsize": 512, "blockysize": 512, "nodata": -1.0}
    with rasterio.open(path, "w", transform=Affine(CELL_M, 0, LEFT, 0, -CELL_M, TOP), **options) as dataset:
        for row in range(0, side, 512):
            for column in range(0, side, 512):
                rows, columns = min(512, side - row), min(512, side - column)
                dataset.write(noise[:rows, :columns], 1, window=Block(column, row, columns, rows))


def make_parcels(side: int, count: int) -> gpd.GeoDataFrame:
    """Make a lattice of parcels, turned a little against the cells, over most of the raster."""
    width = side * CELL_M
    edge = np.linspace(0.05 * width, 0.95 * width, count + 1)
    x, y = np.meshgrid(edge[:-1], edge[:-1])
    step = edge[1] - edge[0]
    squares = shapely.box(x.ravel(), y.ravel(), x.ravel() + step, y.ravel() + step)
    angle, middle = np.radians(2.0), width / 2
    turn = np.array([[np.cos(angle), -np.sin(angle)], [np.sin(angle), np.cos(angle)]])
    place = np.array([LEFT + middle, TOP - middle])
    shapes = shapely.transform(squares, lambda points: (points - middle) @ turn.T + place)
    frame = pd.DataFrame({"parcel": [f"P{k}" for k in range(len(shapes))], "stratum": "all"})
    return gpd.GeoDataFrame(frame.assign(area_ha=shapely.area(shapes) / 1e4), geometry=shapes, crs=CRS)


def told(name: str, step: Callable[[], object], floor: float = float("nan")) -> tuple[object, float]:
    """Run a step and print its time and the peak memory so far."""
    start = time.perf_counter()
    result = step()
    seconds = time.perf_counter() - start
    peak = resource.getrusage(resource.RUSAGE_SELF).ru_maxrss / 1024
    print(f"{name:34s} {seconds:8.1f} s   {seconds / floor:6.1f} x one pass   peak {peak:6.0f} MB", flush=True)  # noqa: T201
    return result, seconds


def main(side: int = 20_000, count: int = 45) -> None:
    """Run the benchmark."""
    generator = np.random.default_rng(1)
    with tempfile.TemporaryDirectory() as name:
        folder = Path(name)
        write_raster(folder / "height.tif", side, generator)
        parcels = make_parcels(side, count)
        print(f"{side} x {side} cells ({side * side * 8 / 2**20:.0f} MB as float64), {len(parcels)} parcels")  # noqa: T201
        place, file = RasterPlace(folder, CRS), RasterFile("height", "", "height.tif")
        coefficients = pd.DataFrame(
            {"survey": "1", "stratum": "", "term": ["intercept", "height"], "value": [20.0, 4.0]}
        )
        request = RasterRequest("bench", parcels, place, [file], coefficients)
        stock = generator.uniform(20, 200, len(parcels)) * parcels["area_ha"].to_numpy()

        def one_pass() -> float:
            total, bounds = 0.0, tuple(parcels.total_bounds)
            with open_raster(file, folder, CRS, bounds=bounds) as raster:
                for window in raster.grid.windows(WINDOW_ROWS, WINDOW_COLUMNS):
                    total += float(np.nansum(raster.read(window)))
            return total

        _, floor = told("one pass over the file", one_pass)
        plots = pd.DataFrame({"plot": np.arange(200_000).astype(str)})
        plots["x"] = LEFT + generator.uniform(0.1, 0.9, len(plots)) * side * CELL_M
        plots["y"] = TOP - generator.uniform(0.1, 0.9, len(plots)) * side * CELL_M
        told("200,000 plots", lambda: plot_values([file], ["1"], plots, Footprint(radius_m=12.6), place), floor)
        told("wall-to-wall means", lambda: unit_means([file], ["1"], parcels, place, inventory="bench"), floor)
        grid, path = raster_grid(request), folder / "density_1.tif"
        told("density map, written and checked", lambda: write_density(path, request, grid, "1", stock), floor)
        off, _ = told("check once more", lambda: check_raster_sums(path, parcels, stock), floor)
        print(f"largest relative difference of a parcel {off:.1e}; file of {path.stat().st_size / 2**20:.0f} MB")  # noqa: T201


if __name__ == "__main__":
    main(*(int(word) for word in sys.argv[1:]))
