"""Auxiliary rasters opened on a grid of the inventory's coordinate system and read window by window.

A raster on the same lines is read as it is; any other is warped window by window, so that memory is bounded by the
window however large the file. Missing cells (nodata value, mask, alpha band, not a number) come as NaN.
"""

from __future__ import annotations

import math
from collections.abc import Iterator
from contextlib import contextmanager
from dataclasses import dataclass
from pathlib import Path
from typing import Any

import numpy as np
import rasterio
from pyproj import CRS
from pyproj.exceptions import CRSError
from rasterio import Affine
from rasterio.enums import MaskFlags, Resampling
from rasterio.errors import RasterioError
from rasterio.io import DatasetReader
from rasterio.warp import calculate_default_transform, reproject, transform_bounds
from rasterio.windows import Window as Block

from landcarbon.errors import InputFileError
from landcarbon.raster.grid import Bounds, Grid, Window
from landcarbon.raster.limits import raster_limit
from landcarbon.read.crs import parse_crs
from landcarbon.read.source import Source, find_source

__all__ = [
    "CACHE_BYTES",
    "WINDOW_COLUMNS",
    "WINDOW_ROWS",
    "OpenRaster",
    "RasterFile",
    "find_raster",
    "grid_transform",
    "open_raster",
]

# Windows are wide and low, so that files stored in rows are unpacked once; a multiple of the tiles written.
WINDOW_ROWS = 256
WINDOW_COLUMNS = 4096
# GDAL keeps blocks it has unpacked; its own limit grows with the machine. A fixed one bounds the memory and makes
# written files, whose tiles leave the cache in the order they came in, the same on every machine.
CACHE_BYTES = 256 * 2**20

# Formats read, by their first bytes in lower case. GDAL goes by content, and some formats point to other files or even
# to the network.
_FORMATS = {
    "GTiff": ("GeoTIFF", (b"ii*\x00", b"mm\x00*", b"ii+\x00", b"mm\x00+")),
    "HFA": ("ERDAS Imagine", (b"ehfa_header_tag",)),
    "JP2OpenJPEG": ("JPEG 2000", (b"\x00\x00\x00\x0cjp  ", b"\xff\x4f\xff\x51")),
    "AAIGrid": ("Arc/Info ASCII grid", (b"ncols",)),
}
_START = 64
# Share of a source cell by which positions may be off when points between are interpolated in warping.
_WARP_TOLERANCE = 0.01
# A target cell this many times wider than the source's takes the average of the cells under it.
_COARSER = 1.5
# Source cells held at once when warping: a window over a much finer raster is worked in parts.
_SOURCE_CELLS = 2**24


@dataclass(frozen=True)
class RasterFile:
    """An auxiliary raster as named in the settings.

    Attributes
    ----------
    name : str
        What the raster is called in models and tables, e.g. ``canopy_height``.
    survey : str
        Survey it belongs to; blank if it serves all.
    path : str
        File, relative to the folder of the project file.
    band : int
        Band, from 1.
    crs : str
        Coordinate system, for files that state none; blank otherwise.
    """

    name: str
    survey: str
    path: str
    band: int = 1
    crs: str = ""


@dataclass
class OpenRaster:
    """A raster seen through a grid.

    Attributes
    ----------
    file : RasterFile
        What was asked for.
    grid : Grid
        Cells in the coordinate system of the inventory, cut to the area of interest.
    warped : bool
        Whether cells are interpolated, because coordinate system or lines differ.
    """

    file: RasterFile
    grid: Grid
    warped: bool
    _dataset: DatasetReader
    _own: Grid | None
    _crs: tuple[CRS, CRS]
    _method: Resampling

    def read(self, window: Window) -> np.ndarray:
        """Return the values of a window as float64, shape (rows, columns); NaN where there is none.

        Raises
        ------
        InputFileError
            If the file is damaged there.
        """
        try:
            if not self.warped and self._own is not None:
                down, along = self._own.offset(self.grid) or (0, 0)
                block = Window(window.row + down, window.column + along, window.rows, window.columns)
                return self._block(block)
            return self._warp(self.grid.part(window))
        except RasterioError as error:
            raise InputFileError(
                f"the raster cannot be read at row {window.row}, column {window.column} of its grid ({error})",
                where=self.file.path,
                remedy="The file is damaged or incomplete: get it again.",
            ) from error

    def _block(self, window: Window) -> np.ndarray:
        """Read a window that may reach beyond the file; what lies outside is NaN."""
        values = np.full((window.rows, window.columns), np.nan)
        top, left = max(window.row, 0), max(window.column, 0)
        bottom = min(window.row + window.rows, self._dataset.height)
        right = min(window.column + window.columns, self._dataset.width)
        if bottom <= top or right <= left:
            return values
        block = Block(left, top, right - left, bottom - top)
        part = _plain(self._dataset, self.file.band, block)
        values[top - window.row : bottom - window.row, left - window.column : right - window.column] = part
        return values

    def _warp(self, target: Grid) -> np.ndarray:
        dataset, (own, wanted) = self._dataset, self._crs
        values = np.full((target.rows, target.columns), np.nan)
        block = _source_block(dataset, own, wanted, target)
        if block is None:
            return values
        if block.width * block.height > _SOURCE_CELLS and target.cells > 1:
            return np.concatenate(
                [self._warp(half) for half in _halves(target)], axis=int(target.columns >= target.rows)
            )
        part = _plain(dataset, self.file.band, block)
        transform = dataset.window_transform(block)
        reproject(
            part,
            values,
            src_transform=transform,
            src_crs=own.to_wkt(),
            src_nodata=np.nan,
            dst_transform=grid_transform(target),
            dst_crs=wanted.to_wkt(),
            dst_nodata=np.nan,
            resampling=self._method,
            tolerance=_WARP_TOLERANCE,
        )
        values[~np.isfinite(values)] = np.nan
        return values


def find_raster(file: RasterFile, folder: Path, *, allow_outside: bool = False) -> Source:
    """Resolve the file of a raster.

    Raises
    ------
    SettingsError
        If it lies outside the folder of the project file.
    InputFileError
        If it is missing or empty.
    """
    survey = f" {file.survey}" if file.survey else ""
    return find_source(file.path, folder, f"raster {file.name}{survey}", allow_outside=allow_outside)


@contextmanager
def open_raster(
    file: RasterFile,
    folder: Path,
    crs: str,
    *,
    bounds: Bounds,
    grid: Grid | None = None,
    allow_outside: bool = False,
) -> Iterator[OpenRaster]:
    """Open a raster for the area of interest.

    Parameters
    ----------
    file : RasterFile
        Which one.
    folder : Path
        Folder of the project file.
    crs : str
        Coordinate system of the inventory, a map grid in metres.
    bounds : tuple
        Area of interest in it: left, bottom, right, top.
    grid : Grid, optional
        Cells wanted; those of the raster itself, or as near to them as its coordinate system allows, if left out.
    allow_outside : bool
        Whether the file may lie outside ``folder``.

    Yields
    ------
    OpenRaster

    Raises
    ------
    InputFileError
        If it is no raster, has no coordinate system, lacks the band, holds complex numbers, or lies elsewhere.
    """
    source = find_raster(file, folder, allow_outside=allow_outside)
    wanted = parse_crs(crs, "coordinate system of the inventory")
    with rasterio.Env(GDAL_CACHEMAX=CACHE_BYTES), _open(source) as dataset:
        own = _crs_of(dataset, file, source)
        _check_band(dataset, file, source)
        _check_overlap(dataset, own, wanted, bounds, source)
        lines = _lines(dataset) if _same(own, wanted) else None
        if grid is None:
            grid = lines.around(bounds) if lines else _target(dataset, own, wanted, bounds)
        warped = lines is None or not _upright(dataset) or lines.offset(grid) is None
        method = _resampling(dataset, own, wanted, grid)
        yield OpenRaster(file, grid, warped, dataset, lines, (own, wanted), method)


@contextmanager
def _open(source: Source) -> Iterator[DatasetReader]:
    with source.path.open("rb") as file:
        start = file.read(_START).lstrip(b" \t\r\n").lower()
    drivers = [name for name, (_, marks) in _FORMATS.items() if start.startswith(marks)]
    try:
        if not drivers:
            raise RasterioError("unknown first bytes")
        dataset = rasterio.open(source.path, driver=drivers[0])
    except RasterioError as error:
        raise InputFileError(
            "not a raster file that can be read, whatever its name says",
            where=source.name,
            remedy=f"Formats read: {', '.join(told for told, _ in _FORMATS.values())}.",
        ) from error
    with dataset:
        if not dataset.count:
            raise InputFileError("the file holds no band", where=source.name)
        yield dataset


def _crs_of(dataset: DatasetReader, file: RasterFile, source: Source) -> CRS:
    if file.crs:
        return _flat(parse_crs(file.crs, f"crs of raster {file.name}"))
    if dataset.crs is None or not dataset.crs.to_wkt():
        raise InputFileError(
            "the raster does not state its coordinate system",
            where=source.name,
            remedy="Give crs, e.g. crs = 'EPSG:25832', beside the file in the settings.",
        )
    try:
        return _flat(CRS.from_wkt(dataset.crs.to_wkt()))
    except CRSError as error:
        raise InputFileError(f"its coordinate system cannot be understood ({error})", where=source.name) from error


def _flat(crs: CRS) -> CRS:
    """Leave a vertical part aside."""
    return crs.sub_crs_list[0] if crs.is_compound else crs


def _same(own: CRS, wanted: CRS) -> bool:
    if own.equals(wanted, ignore_axis_order=True):
        return True
    code = own.to_authority(min_confidence=70)
    return code is not None and code == wanted.to_authority(min_confidence=70)


def _check_band(dataset: DatasetReader, file: RasterFile, source: Source) -> None:
    if not 1 <= file.band <= dataset.count:
        bands = "1 band" if dataset.count == 1 else f"{dataset.count} bands"
        raise InputFileError(f"there is no band {file.band}: the file has {bands}", where=source.name)
    kind = dataset.dtypes[file.band - 1]
    if "complex" in kind:
        raise InputFileError(
            f"band {file.band} holds complex numbers ({kind})",
            where=source.name,
            remedy="Convert it to amplitude, backscatter or the like first.",
        )


def _check_overlap(dataset: DatasetReader, own: CRS, wanted: CRS, bounds: Bounds, source: Source) -> None:
    there = _moved(bounds, wanted, own)
    extent = _extent(dataset)
    if there is None or not _overlap(there, extent):
        shown = ", ".join(f"{value:.6g}" for value in extent)
        raise InputFileError(
            f"the raster does not overlap the inventory: left, bottom, right, top are {shown} in {own.name}",
            where=source.name,
            remedy="Is it the right file, and is its coordinate system stated rightly?",
        )


def _extent(dataset: DatasetReader) -> Bounds:
    x, y = _apply(dataset.transform, np.array([0, dataset.width] * 2), np.repeat([0, dataset.height], 2))
    return float(x.min()), float(y.min()), float(x.max()), float(y.max())


def _apply(transform: Affine, x: np.ndarray, y: np.ndarray) -> tuple[np.ndarray, np.ndarray]:
    return transform.a * x + transform.b * y + transform.c, transform.d * x + transform.e * y + transform.f


def _overlap(one: Bounds, other: Bounds) -> bool:
    return one[0] < other[2] and other[0] < one[2] and one[1] < other[3] and other[1] < one[3]


def _moved(bounds: Bounds, source: CRS, target: CRS) -> Bounds | None:
    """Return bounds in another coordinate system, or None where it has no place for them."""
    try:
        moved = transform_bounds(source.to_wkt(), target.to_wkt(), *bounds)
    except (RasterioError, ValueError):
        return None
    return moved if all(math.isfinite(value) for value in moved) else None


def _upright(dataset: DatasetReader) -> bool:
    return bool(dataset.transform.is_rectilinear and dataset.transform.a > 0 and dataset.transform.e < 0)


def _lines(dataset: DatasetReader) -> Grid | None:
    """Return the cells of a raster that is not turned, from its north-west corner."""
    transform = dataset.transform
    if transform.b or transform.d:
        return None
    left, _, _, top = _extent(dataset)
    return Grid(left, top, abs(transform.a), abs(transform.e), dataset.height, dataset.width)


def _target(dataset: DatasetReader, own: CRS, wanted: CRS, bounds: Bounds) -> Grid:
    """Return square cells about as fine as those of the raster in the area of interest."""
    around = _moved(bounds, wanted, own) or _extent(dataset)
    extent = _extent(dataset)
    common = (
        max(around[0], extent[0]),
        max(around[1], extent[1]),
        min(around[2], extent[2]),
        min(around[3], extent[3]),
    )
    size_x, size_y = _cell_of(dataset)
    columns = max(1, round((common[2] - common[0]) / size_x))
    rows = max(1, round((common[3] - common[1]) / size_y))
    transform, _, _ = calculate_default_transform(own.to_wkt(), wanted.to_wkt(), columns, rows, *common)
    size = abs(transform.a)
    return Grid(0.0, 0.0, size, size, 1, 1).around(bounds)


def _cell_of(dataset: DatasetReader) -> tuple[float, float]:
    transform = dataset.transform
    return math.hypot(transform.a, transform.d), math.hypot(transform.b, transform.e)


def _source_block(dataset: DatasetReader, own: CRS, wanted: CRS, target: Grid) -> Block | None:
    """Return the cells of the file that a target window draws on, with a margin."""
    there = _moved(target.bounds, wanted, own)
    if there is None:
        return None
    left, bottom, right, top = there
    column, row = _apply(~dataset.transform, np.array([left, right] * 2), np.repeat([top, bottom], 2))
    margin = math.ceil(raster_limit("footprint_extra_cells")) * (1 + math.ceil(np.ptp(column) / target.columns))
    first, last = max(math.floor(column.min()) - margin, 0), min(math.ceil(column.max()) + margin, dataset.width)
    upper, lower = max(math.floor(row.min()) - margin, 0), min(math.ceil(row.max()) + margin, dataset.height)
    if last <= first or lower <= upper:
        return None
    return Block(first, upper, last - first, lower - upper)


def _resampling(dataset: DatasetReader, own: CRS, wanted: CRS, target: Grid) -> Resampling:
    there = _moved(target.bounds, wanted, own)
    if there is None:
        return Resampling.bilinear
    size_x, size_y = _cell_of(dataset)
    ratio = math.sqrt((there[2] - there[0]) / size_x * (there[3] - there[1]) / size_y / target.cells)
    return Resampling.average if ratio > _COARSER else Resampling.bilinear


def _halves(target: Grid) -> tuple[Grid, Grid]:
    rows, columns = target.rows, target.columns
    if columns >= rows:
        half = columns // 2
        return target.part(Window(0, 0, rows, half)), target.part(Window(0, half, rows, columns - half))
    half = rows // 2
    return target.part(Window(0, 0, half, columns)), target.part(Window(half, 0, rows - half, columns))


def grid_transform(grid: Grid) -> Affine:
    """Return what takes columns and rows of a grid to coordinates."""
    return Affine(grid.cell_x, 0.0, grid.left, 0.0, -grid.cell_y, grid.top)


def _plain(dataset: DatasetReader, band: int, block: Block) -> np.ndarray:
    """Read cells as numbers with scale and offset applied; NaN where the file holds none."""
    flags: Any = dataset.mask_flag_enums[band - 1]
    values = dataset.read(band, window=block, out_dtype="float64")
    if MaskFlags.all_valid not in flags:
        values[dataset.read_masks(band, window=block) == 0] = np.nan
    values[~np.isfinite(values)] = np.nan
    scale, offset = dataset.scales[band - 1], dataset.offsets[band - 1]
    return values if (scale, offset) == (1.0, 0.0) else values * scale + offset
