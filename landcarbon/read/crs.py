"""Coordinate systems: parsing, choice of that of the results, and moving points."""

from __future__ import annotations

import numpy as np
from pyproj import CRS, Transformer
from pyproj.aoi import AreaOfInterest
from pyproj.database import query_utm_crs_info
from pyproj.exceptions import CRSError

from landcarbon.errors import SettingsError

__all__ = ["WGS84", "crs_text", "is_metric", "metric_crs", "move_points", "parse_crs", "utm_for"]

WGS84 = "EPSG:4326"


def parse_crs(text: str, where: str) -> CRS:
    """Return a coordinate system from its code or text.

    Raises
    ------
    SettingsError
        If it is not known.
    """
    try:
        return CRS.from_user_input(text)
    except CRSError as error:
        raise SettingsError(
            f"{text!r} is no coordinate system", where=where, remedy="Write it as e.g. 'EPSG:25832'."
        ) from error


def crs_text(crs: CRS) -> str:
    """Return the shortest text that names a coordinate system: its code, else its definition."""
    authority = crs.to_authority(min_confidence=70)
    return ":".join(authority) if authority else crs.to_wkt()


def is_metric(crs: CRS) -> bool:
    """Tell whether a coordinate system is projected and counts in metres."""
    return bool(crs.is_projected) and all(axis.unit_name == "metre" for axis in crs.axis_info[:2])


def utm_for(lon: np.ndarray, lat: np.ndarray) -> CRS:
    """Return the UTM zone (WGS 84) at the middle of some points.

    Raises
    ------
    SettingsError
        If the points lie where no zone is.
    """
    west, east = float(np.nanmin(lon)), float(np.nanmax(lon))
    south, north = float(np.nanmin(lat)), float(np.nanmax(lat))
    middle_lon, middle_lat = (west + east) / 2, (south + north) / 2
    area = AreaOfInterest(middle_lon, middle_lat, middle_lon, middle_lat)
    found = query_utm_crs_info(datum_name="WGS 84", area_of_interest=area)
    if not found:
        raise SettingsError(
            f"no UTM zone at longitude {middle_lon:.3f}, latitude {middle_lat:.3f}",
            where="[inventory] crs",
            remedy="Check the coordinates, or give crs under [inventory].",
        )
    return CRS.from_epsg(int(found[0].code))


def metric_crs(text: str) -> CRS:
    """Return the coordinate system wanted for the results.

    Raises
    ------
    SettingsError
        If it is not known, or not a map grid in metres.
    """
    crs = parse_crs(text, "[inventory] crs")
    if not is_metric(crs):
        raise SettingsError(
            f"{text!r} ({crs.name}) is no map grid in metres",
            where="[inventory] crs",
            remedy="Name a projected one, such as a UTM zone, or leave the key out.",
        )
    return crs


def move_points(x: np.ndarray, y: np.ndarray, source: CRS, target: CRS) -> tuple[np.ndarray, np.ndarray]:
    """Transform points; what has no image becomes NaN.

    Parameters
    ----------
    x, y : ndarray
        Easting and northing, or longitude and latitude, in ``source``.
    source, target : CRS
        Coordinate systems.
    """
    if source.equals(target, ignore_axis_order=True):
        return x, y
    transformer = Transformer.from_crs(source, target, always_xy=True)
    moved_x, moved_y = transformer.transform(x, y)
    moved_x, moved_y = np.asarray(moved_x, dtype="float64"), np.asarray(moved_y, dtype="float64")
    lost = ~np.isfinite(moved_x) | ~np.isfinite(moved_y)
    return np.where(lost, np.nan, moved_x), np.where(lost, np.nan, moved_y)
