"""GeoTIFF files written and read by windows."""

from __future__ import annotations

from collections.abc import Callable, Iterable, Iterator
from contextlib import contextmanager
from dataclasses import dataclass, field
from pathlib import Path

import numpy as np
import rasterio
from rasterio.errors import RasterioError
from rasterio.windows import Window as Block

from landcarbon.errors import ResultsError
from landcarbon.raster.grid import Grid, Window
from landcarbon.read.raster_files import CACHE_BYTES, grid_transform

__all__ = ["TiffLabel", "read_grid", "read_tiff", "write_tiff"]

_TILE = 256


@dataclass(frozen=True)
class TiffLabel:
    """What a file says about itself.

    Attributes
    ----------
    quantity, unit : str
        Of the band.
    tags : dict
        Further entries.
    """

    quantity: str
    unit: str
    tags: dict[str, str] = field(default_factory=dict)


def write_tiff(
    path: Path,
    grid: Grid,
    crs: str,
    label: TiffLabel,
    parts: Iterable[tuple[Window, np.ndarray]],
    *,
    double: bool,
) -> None:
    """Write cells; windows that do not come stay without data.

    Parameters
    ----------
    path : Path
        The file.
    grid : Grid
        Cells.
    crs : str
        Coordinate system.
    label : TiffLabel
        Description, unit and tags.
    parts : iterable
        Windows, starting at edges of tiles, with their values; NaN for no data.
    double : bool
        Whether in double precision, for values that cancel out; single is enough for others.

    Raises
    ------
    ResultsError
        If the file cannot be written.
    """
    options = {
        "driver": "GTiff",
        "count": 1,
        "dtype": "float64" if double else "float32",
        "width": grid.columns,
        "height": grid.rows,
        "crs": crs,
        "transform": grid_transform(grid),
        "nodata": np.nan,
        "tiled": True,
        "blockxsize": _TILE,
        "blockysize": _TILE,
        "compress": "deflate",
        "predictor": 3,
        "bigtiff": "if_safer",
    }
    try:
        with rasterio.Env(GDAL_CACHEMAX=CACHE_BYTES), rasterio.open(path, "w", **options) as dataset:
            dataset.set_band_description(1, label.quantity)
            dataset.set_band_unit(1, label.unit)
            dataset.update_tags(**label.tags, AREA_OR_POINT="Area")
            for window, values in parts:
                block = Block(window.column, window.row, window.columns, window.rows)
                dataset.write(values.astype(options["dtype"]), 1, window=block)
    except (RasterioError, OSError) as error:
        raise ResultsError(
            f"the raster could not be written ({error})", where=path.name, remedy="See that the disk has room."
        ) from error


@contextmanager
def read_tiff(path: Path) -> Iterator[Callable[[Window], np.ndarray]]:
    """Open a file of ours; yields a function that returns a window as float64 with NaN for no data."""
    with rasterio.Env(GDAL_CACHEMAX=CACHE_BYTES), rasterio.open(path, driver="GTiff") as dataset:

        def read(window: Window) -> np.ndarray:
            block = Block(window.column, window.row, window.columns, window.rows)
            return dataset.read(1, window=block, out_dtype="float64")

        yield read


def read_grid(path: Path) -> Grid:
    """Return the cells of a file."""
    with rasterio.open(path, driver="GTiff") as dataset:
        transform = dataset.transform
        return Grid(transform.c, transform.f, transform.a, -transform.e, dataset.height, dataset.width)
