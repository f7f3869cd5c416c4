"""Vector files: polygons of parcels, points of plots, and the areas of polygons."""

from __future__ import annotations

import warnings
import zipfile

import geopandas as gpd
import numpy as np
import pandas as pd
import pyarrow as pa
import pyogrio
import shapely
from pyogrio.errors import DataSourceError
from pyproj import CRS

from landcarbon.errors import InputFileError
from landcarbon.inventory.nearest import suggestion
from landcarbon.read.crs import parse_crs
from landcarbon.read.source import Source
from landcarbon.read.table import RawTable, unique_names

__all__ = ["geodesic_area_m2", "mend_polygons", "read_vector"]

# First bytes of each kind of file. GDAL goes by content, so a file that only calls itself a GeoPackage could be one
# that points elsewhere, even to the network.
_MAGIC = {
    ".gpkg": (b"SQLite format 3\x00",),
    ".shp": (b"\x00\x00\x27\x0a",),
    ".zip": (b"PK",),
    ".parquet": (b"PAR1",),
    ".geoparquet": (b"PAR1",),
}


def read_vector(source: Source, *, layer: str | None = None, crs: str | None = None) -> tuple[gpd.GeoSeries, RawTable]:
    """Read geometries and attributes.

    Parameters
    ----------
    source : Source
        GeoPackage, GeoJSON, Shapefile (may be zipped) or GeoParquet.
    layer : str, optional
        Layer, if the file holds several.
    crs : str, optional
        Coordinate system from the settings.

    Returns
    -------
    GeoSeries, RawTable
        Geometries with a coordinate system, and the attributes; both in the order of the file.

    Raises
    ------
    InputFileError
        If the file is not what its name says, has no such layer or no coordinate system.
    """
    _check_magic(source)
    frame = _read_parquet(source) if source.suffix in (".parquet", ".geoparquet") else _read_gdal(source, layer)
    if not len(frame):
        raise InputFileError(
            f"the file has no features, but {source.role} are wanted", where=source.name, remedy="Is it the right file?"
        )
    if not isinstance(frame, gpd.GeoDataFrame):
        raise InputFileError("the file holds no geometries", where=source.name)
    geometry = frame.geometry
    geometry = gpd.GeoSeries(shapely.force_2d(geometry.to_numpy()), crs=_settle_crs(geometry.crs, crs, source))
    attributes = pd.DataFrame(frame.drop(columns=frame.geometry.name))
    return geometry, _attributes(attributes, source)


def _check_magic(source: Source) -> None:
    with source.path.open("rb") as file:
        start = file.read(64)
    wanted = _MAGIC.get(source.suffix)
    is_text = source.suffix in (".geojson", ".json")
    good = start.lstrip(b"\xef\xbb\xbf \t\r\n").startswith(b"{") if is_text else start.startswith(wanted or b"")
    if not good:
        raise InputFileError(f"not a {source.suffix} file, whatever its name says", where=source.name)


def _read_parquet(source: Source) -> gpd.GeoDataFrame:
    try:
        return gpd.read_parquet(source.path)
    except (ValueError, OSError, pa.ArrowInvalid) as error:
        raise InputFileError(f"not a readable GeoParquet file ({error})", where=source.name) from error


def _read_gdal(source: Source, layer: str | None) -> gpd.GeoDataFrame:
    path = _gdal_path(source)
    try:
        with warnings.catch_warnings():
            # Rings that are not closed or wound wrongly are mended and told by our own check of polygons.
            warnings.simplefilter("ignore", RuntimeWarning)
            layers = [str(name) for name in pyogrio.list_layers(path)[:, 0]]
            chosen = _layer(layers, layer or source.part if source.suffix != ".zip" else layer, source)
            return pyogrio.read_dataframe(path, layer=chosen, on_invalid="fix")
    except (DataSourceError, ValueError, shapely.errors.GEOSException) as error:
        if isinstance(error, InputFileError):
            raise
        raise InputFileError(f"cannot be read as a vector file ({error})", where=source.name) from error


def _gdal_path(source: Source) -> str:
    if source.suffix != ".zip":
        return str(source.path)
    try:
        with zipfile.ZipFile(source.path) as archive:
            inside = [name for name in archive.namelist() if name.lower().endswith(".shp")]
    except zipfile.BadZipFile as error:
        raise InputFileError(f"the archive is damaged ({error})", where=source.name) from error
    if source.part:
        inside = [name for name in inside if name == source.part]
    if len(inside) != 1:
        told = "holds no Shapefile" if not inside else f"holds several Shapefiles: {', '.join(inside)}"
        raise InputFileError(f"the archive {told}", where=source.name, remedy="Name one as file.zip#name.shp.")
    return f"/vsizip/{{{source.path}}}/{inside[0]}"


def _layer(layers: list[str], wanted: str | None, source: Source) -> str:
    if not layers:
        raise InputFileError("the file holds no layer", where=source.name)
    if wanted:
        if wanted in layers:
            return wanted
        hint = suggestion(wanted, layers)
        raise InputFileError(
            f"no layer {wanted!r}", where=source.name, remedy=f"Layers: {', '.join(layers)}. {hint}".strip()
        )
    if len(layers) > 1:
        raise InputFileError(
            f"the file holds {len(layers)} layers", where=source.name, remedy=f"Name one by layer: {', '.join(layers)}."
        )
    return layers[0]


def _settle_crs(stated: CRS | None, given: str | None, source: Source) -> CRS:
    if given is None:
        if stated is None:
            raise InputFileError(
                "the file does not state its coordinate system",
                where=source.name,
                remedy="Give crs, e.g. crs = 'EPSG:25832', beside the file in the settings.",
            )
        return CRS.from_user_input(stated)
    wanted = parse_crs(given, f"crs of {source.role}")
    # GeoJSON is taken as longitude and latitude unless it says otherwise, so that statement does not weigh.
    if (
        stated is None
        or source.suffix in (".geojson", ".json")
        or CRS.from_user_input(stated).equals(wanted, ignore_axis_order=True)
    ):
        return wanted
    raise InputFileError(
        f"the file states {CRS.from_user_input(stated).name}, the settings say {wanted.name}",
        where=source.name,
        remedy="Leave crs out of the settings, or mend the file.",
    )


def _attributes(frame: pd.DataFrame, source: Source) -> RawTable:
    names, repeated = unique_names(list(frame.columns))
    columns = {}
    for name, column in zip(names, frame.columns, strict=True):
        try:
            columns[name] = _array(frame[column])
        except (pa.ArrowInvalid, pa.ArrowTypeError):
            columns[name] = pa.array(frame[column].astype("str"), pa.string())
    lines = np.arange(1, len(frame) + 1, dtype="int32")
    return RawTable(source.name, names, repeated, columns, lines, np.zeros(len(frame), dtype=bool), comma_decimals=True)


def _array(column: pd.Series) -> pa.Array:
    array = pa.array(column, from_pandas=True)
    return array.combine_chunks() if isinstance(array, pa.ChunkedArray) else array


def mend_polygons(geometry: gpd.GeoSeries) -> tuple[gpd.GeoSeries, np.ndarray]:
    """Make polygons valid and drop whatever is no area.

    Returns
    -------
    GeoSeries, ndarray of bool
        Polygons, and which of them were mended; something without an area becomes an empty polygon.
    """
    shapes = geometry.to_numpy().copy()
    missing = shapely.is_missing(shapes)
    shapes[missing] = shapely.Polygon()
    invalid = ~shapely.is_valid(shapes)
    shapes[invalid] = shapely.make_valid(shapes[invalid])
    flat = ~np.isin(shapely.get_type_id(shapes), (3, 6))  # 3 polygon, 6 multipolygon
    shapes[flat] = [_polygonal(shape) for shape in shapes[flat]]
    return gpd.GeoSeries(shapes, crs=geometry.crs), invalid


def _polygonal(shape: shapely.Geometry) -> shapely.Geometry:
    parts = shapely.get_parts(shapely.get_parts(shape))
    kept = [part for part in parts if part.geom_type == "Polygon"]
    return shapely.union_all(kept) if kept else shapely.Polygon()


def geodesic_area_m2(geometry: gpd.GeoSeries) -> np.ndarray:
    """Return the area of polygons on the ellipsoid of their coordinate system.

    Parameters
    ----------
    geometry : GeoSeries
        Valid polygons in any coordinate system.

    Returns
    -------
    ndarray
        m2.

    Notes
    -----
    Karney, C.F.F. (2013) Algorithms for geodesics, Journal of Geodesy 87: 43-55, as implemented in PROJ. Vertices are
    taken to longitude and latitude of the same datum; edges become geodesics.
    """
    crs = CRS.from_user_input(geometry.crs)
    geod = crs.get_geod()
    if geod is None or crs.geodetic_crs is None:
        raise InputFileError(f"the coordinate system {crs.name} has no ellipsoid", remedy="Use another one.")
    on_ellipsoid = geometry.to_crs(crs.geodetic_crs)
    return np.array([_polygon_area(geod, shape) for shape in on_ellipsoid], dtype="float64")


def _polygon_area(geod: object, shape: shapely.Geometry) -> float:
    total = 0.0
    for polygon in shapely.get_parts(shape):
        total += _ring_area(geod, polygon.exterior) - sum(_ring_area(geod, ring) for ring in polygon.interiors)
    return total


def _ring_area(geod: object, ring: shapely.LinearRing) -> float:
    lon, lat = shapely.get_coordinates(ring).T
    area, _ = geod.polygon_area_perimeter(lon, lat)  # type: ignore[attr-defined]
    return abs(area)
