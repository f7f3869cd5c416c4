"""Ground covered by plots, as polygons."""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
import shapely

from landcarbon.constants import M2_PER_HECTARE
from landcarbon.raster.limits import raster_limit

__all__ = ["Footprint", "footprint_polygons"]

# Segments per quarter of a circle; the polygon is widened so that its area is that of the circle.
_SEGMENTS = 8


@dataclass(frozen=True)
class Footprint:
    """Outline of a plot around its point: a circle, or a rectangle with its sides along the axes of the map grid.

    Attributes
    ----------
    radius_m : float
        Of a circle; NaN otherwise.
    width_m, length_m : float
        Of a rectangle, west to east and south to north; NaN otherwise.
    area_ha : float
        Of a circle, for plots laid out in another way; NaN if unknown.
    """

    radius_m: float = float("nan")
    width_m: float = float("nan")
    length_m: float = float("nan")
    area_ha: float = float("nan")

    def radius(self, area_ha: np.ndarray) -> np.ndarray:
        """Return the radius of the circle for each plot [m]; NaN where neither radius nor area is known.

        Parameters
        ----------
        area_ha : ndarray
            Own area of each plot, which goes before that of the design; NaN if it has none.
        """
        design = self.radius_m if np.isfinite(self.radius_m) else float(np.sqrt(self.area_ha * M2_PER_HECTARE / np.pi))
        own = np.sqrt(np.where(area_ha > 0, area_ha, np.nan) * M2_PER_HECTARE / np.pi)
        return np.where(np.isfinite(own), own, design)


def footprint_polygons(
    x: np.ndarray, y: np.ndarray, footprint: Footprint, area_ha: np.ndarray | None = None
) -> tuple[np.ndarray, int]:
    """Return the ground of each plot.

    Parameters
    ----------
    x, y : ndarray
        Middle of the plots [m]; NaN gives an empty polygon.
    footprint : Footprint
        Of the design. Nested plots: their largest circle. Subplots are not told apart: one circle of their area.
    area_ha : ndarray, optional
        Area of each plot where plots differ.

    Returns
    -------
    ndarray of Polygon, int
        Polygons, and how many placed plots have no area of their own and are taken as points.
    """
    own = np.full(len(x), np.nan) if area_ha is None else np.asarray(area_ha, dtype="float64")
    placed = np.isfinite(x) & np.isfinite(y)
    shapes = np.full(len(x), shapely.Polygon(), dtype=object)
    boxed = placed & ~(own > 0) & np.isfinite(footprint.width_m * footprint.length_m)
    half_x, half_y = footprint.width_m / 2, footprint.length_m / 2
    shapes[boxed] = shapely.box(x[boxed] - half_x, y[boxed] - half_y, x[boxed] + half_x, y[boxed] + half_y)
    radius = footprint.radius(own)
    points = placed & ~boxed & ~np.isfinite(radius)
    radius = np.where(np.isfinite(radius), radius, raster_limit("point_radius_m"))
    round_ = placed & ~boxed
    shapes[round_] = _circles(x[round_], y[round_], radius[round_])
    return shapes, int(points.sum())


def _circles(x: np.ndarray, y: np.ndarray, radius: np.ndarray) -> np.ndarray:
    if not len(x):
        return np.zeros(0, dtype=object)
    corners = 4 * _SEGMENTS
    angle = np.arange(corners) * (2 * np.pi / corners)
    wide = radius * np.sqrt(2 * np.pi / (corners * np.sin(2 * np.pi / corners)))  # equal area
    ring = np.stack([x[:, None] + wide[:, None] * np.cos(angle), y[:, None] + wide[:, None] * np.sin(angle)], axis=-1)
    return shapely.polygons(ring)
