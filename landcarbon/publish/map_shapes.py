"""Outlines of the map page: simplified for display, in geographic coordinates, and where a name goes."""

from __future__ import annotations

import json
import math
from typing import TYPE_CHECKING, Any

import numpy as np

if TYPE_CHECKING:
    import geopandas as gpd

__all__ = ["DEGREE_DECIMALS", "display_tolerance", "metric", "name_places", "outlines"]

DEGREE_DECIMALS = 6  # about a tenth of a metre
_GEOGRAPHIC = "EPSG:4326"
_LEAST_TOLERANCE_M = 0.5
_TOLERANCE_SHARE = 1 / 20_000  # of the extent: well below a pixel when the whole map is in view


def display_tolerance(parcels: gpd.GeoDataFrame) -> float:
    """Return by how much outlines may be simplified for display.

    Parameters
    ----------
    parcels : GeoDataFrame
        In a projected system with metres.

    Returns
    -------
    float
        Metres: half a metre, or a small share of the extent where that is wide.
    """
    left, bottom, right, top = parcels.total_bounds
    extent = max(right - left, top - bottom)
    return max(_LEAST_TOLERANCE_M, float(f"{extent * _TOLERANCE_SHARE:.1g}")) if math.isfinite(extent) else 0.0


def metric(parcels: gpd.GeoDataFrame) -> gpd.GeoDataFrame:
    """Return the parcels in a projected system with metres."""
    crs = parcels.crs
    if crs is not None and crs.is_projected and crs.axis_info[0].unit_name == "metre":
        return parcels
    return parcels.to_crs(parcels.estimate_utm_crs())


def outlines(parcels: gpd.GeoDataFrame | None) -> dict[str, Any]:
    """Return the outlines as GeoJSON; each knows the number of its parcel.

    Parameters
    ----------
    parcels : GeoDataFrame or None
        With their coordinate system.

    Returns
    -------
    dict
        A feature collection.
    """
    import shapely

    features: list[dict[str, Any]] = []
    if parcels is not None and len(parcels):
        flat = metric(parcels)
        simple = flat.geometry.simplify(display_tolerance(flat), preserve_topology=True)
        degrees = shapely.transform(simple.to_crs(_GEOGRAPHIC).to_numpy(), lambda xy: np.round(xy, DEGREE_DECIMALS))
        features = [
            {"type": "Feature", "properties": {"i": number}, "geometry": json.loads(text)}
            for number, text in enumerate(shapely.to_geojson(degrees))
            if text is not None
        ]
    return {"type": "FeatureCollection", "features": features}


def name_places(parcels: gpd.GeoDataFrame) -> list[list[float] | None]:
    """Return where the name of each parcel goes: its centre of gravity, or a point inside if that lies outside.

    Parameters
    ----------
    parcels : GeoDataFrame
        With their coordinate system.

    Returns
    -------
    list
        Latitude and longitude [deg], None for a parcel without outline.
    """
    if not len(parcels):
        return []
    flat = metric(parcels).geometry
    centre = flat.centroid
    places = centre.where(centre.within(flat), flat.representative_point()).to_crs(_GEOGRAPHIC)
    known = ~(places.isna() | places.is_empty)
    return [
        [round(point.y, DEGREE_DECIMALS), round(point.x, DEGREE_DECIMALS)] if there else None
        for point, there in zip(places, known, strict=True)
    ]
