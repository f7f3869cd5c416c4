"""Exact shares of cells inside polygons, worked out along the edges of the polygons.

Every edge is cut where it crosses a line of the grid. A piece within a cell adds the area to its right: partly in its
own cell, over its whole height in the cells further right, for which a running sum is kept along the row. So the work
goes with the length of the edges, cells inside come as runs of equal share, and shares are in double precision, which
sums of gains and losses that nearly cancel out need.
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
import shapely

from landcarbon.raster.grid import Grid

__all__ = ["Cover", "cell_shares"]

# Slivers below this share of a cell come from rounding of coordinates.
_SLIVER = 1e-9
_ROUNDING = 1e-12


@dataclass(frozen=True)
class Cover:
    """Cells of a window and the polygons they lie in; a cell in several polygons has several entries.

    Attributes
    ----------
    cell : ndarray of int
        Position in the window, row by row.
    zone : ndarray of int
        Index of the polygon; entries of a polygon stand together.
    share : ndarray of float
        Share of the cell inside the polygon, above 0 and at most 1.
    """

    cell: np.ndarray
    zone: np.ndarray
    share: np.ndarray


def cell_shares(grid: Grid, shapes: np.ndarray, zone: np.ndarray) -> Cover:
    """Return every cell of a grid that lies in a polygon, with its share.

    Parameters
    ----------
    grid : Grid
        Cells.
    shapes : ndarray of Polygon or MultiPolygon
        Valid polygons; they may reach beyond the grid.
    zone : ndarray of int
        Index to give for each.

    Returns
    -------
    Cover
        In the order of ``shapes``, then of cells.
    """
    start, end, owner, sign = _edges(grid, shapes)
    start, end, owner, sign = _cut_to(grid, start, end, owner, sign)
    first, last, number = _pieces(start, end)
    middle = (first + last) / 2
    row = np.clip(np.floor(middle[:, 1]).astype(np.int64), 0, grid.rows - 1)
    column = np.clip(np.floor(middle[:, 0]).astype(np.int64), 0, grid.columns)
    rise = (last[:, 1] - first[:, 1]) * sign[number]
    width = grid.columns + 1  # one more column, for edges at the right border
    key = (owner[number] * grid.rows + row) * width + column
    return _collect(grid, key, rise, rise * (column + 1 - middle[:, 0]), width, zone)


def _edges(grid: Grid, shapes: np.ndarray) -> tuple[np.ndarray, np.ndarray, np.ndarray, np.ndarray]:
    """Return the edges in units of cells, down and right from the corner, with polygon and sign of their area."""
    polygons, owner = shapely.get_parts(shapes, return_index=True)
    rings, polygon = shapely.get_rings(polygons, return_index=True)
    points, ring = shapely.get_coordinates(rings, return_index=True)
    if not len(points):
        return np.zeros((0, 2)), np.zeros((0, 2)), np.zeros(0, np.int64), np.zeros(0)
    place = np.column_stack([(points[:, 0] - grid.left) / grid.cell_x, (grid.top - points[:, 1]) / grid.cell_y])
    joined = ring[1:] == ring[:-1]
    start, end, ring = place[:-1][joined], place[1:][joined], ring[:-1][joined]
    outer = np.r_[True, polygon[1:] != polygon[:-1]]  # the first ring of a polygon is its outline, others are holes
    sign = np.where(outer == shapely.is_ccw(rings), 1.0, -1.0)
    return start, end, owner[polygon[ring]], sign[ring]


def _cut_to(
    grid: Grid, start: np.ndarray, end: np.ndarray, owner: np.ndarray, sign: np.ndarray
) -> tuple[np.ndarray, np.ndarray, np.ndarray, np.ndarray]:
    """Cut edges to the rows of the grid; what lies beside it is moved to its left or right border."""
    low, high = np.minimum(start[:, 1], end[:, 1]), np.maximum(start[:, 1], end[:, 1])
    kept = (high > 0) & (low < grid.rows) & (high > low)
    start, end, owner, sign = start[kept], end[kept], owner[kept], sign[kept]
    run = end - start
    limits = np.array([0.0, float(grid.rows)])
    at = np.clip((limits[None, :] - start[:, 1:]) / run[:, 1:], 0.0, 1.0)
    enter, leave = at.min(axis=1), at.max(axis=1)
    with np.errstate(divide="ignore", invalid="ignore"):
        sides = (np.array([0.0, float(grid.columns)])[None, :] - start[:, :1]) / run[:, :1]
    sides = np.sort(np.where(np.isfinite(sides), sides, 0.0), axis=1)
    cuts = np.column_stack([enter, np.clip(sides, enter[:, None], leave[:, None]), leave])
    first, last = cuts[:, :-1].ravel(), cuts[:, 1:].ravel()
    edge = np.repeat(np.arange(len(start)), cuts.shape[1] - 1)
    real = last > first
    first, last, edge = first[real], last[real], edge[real]
    most = np.array([grid.columns, grid.rows], dtype="float64")
    begin = np.clip(start[edge] + first[:, None] * run[edge], 0.0, most)
    stop = np.clip(start[edge] + last[:, None] * run[edge], 0.0, most)
    return begin, stop, owner[edge], sign[edge]


def _pieces(start: np.ndarray, end: np.ndarray) -> tuple[np.ndarray, np.ndarray, np.ndarray]:
    """Cut edges at the lines of the grid; return both ends of each piece and the edge it belongs to."""
    count = len(start)
    edges, places = [np.arange(count), np.arange(count)], [np.zeros(count), np.ones(count)]
    for axis in (0, 1):
        one, other = start[:, axis], end[:, axis]
        low = np.floor(np.minimum(one, other)).astype(np.int64) + 1
        lines = np.maximum(np.ceil(np.maximum(one, other)).astype(np.int64) - low, 0)
        edge = np.repeat(np.arange(count), lines)
        line = low[edge] + _running(lines)
        edges.append(edge)
        places.append(np.clip((line - one[edge]) / (other - one)[edge], 0.0, 1.0))
    edge, place = np.concatenate(edges), np.concatenate(places)
    order = np.lexsort((place, edge))
    edge, place = edge[order], place[order]
    point = start[edge] + place[:, None] * (end - start)[edge]
    same = edge[1:] == edge[:-1]
    return point[:-1][same], point[1:][same], edge[:-1][same]


def _collect(grid: Grid, key: np.ndarray, rise: np.ndarray, area: np.ndarray, width: int, zone: np.ndarray) -> Cover:
    """Sum the pieces per cell, run along the rows, and add the runs of whole cells between."""
    order = np.argsort(key, kind="stable")
    key, rise, area = key[order], rise[order], area[order]
    starts = np.flatnonzero(np.r_[True, key[1:] != key[:-1]]) if len(key) else np.zeros(0, np.int64)
    if not len(starts):
        return Cover(np.zeros(0, np.int64), np.zeros(0, np.int64), np.zeros(0))
    key, rise, area = key[starts], np.add.reduceat(rise, starts), np.add.reduceat(area, starts)
    line, column = np.divmod(key, width)  # a line is a row of one polygon
    fresh = np.r_[True, line[1:] != line[:-1]]
    after = _restarted(rise, fresh)
    beyond = np.where(fresh, grid.columns, column)[1:]
    gap = np.r_[beyond, grid.columns] - column - 1
    run = np.minimum(np.where(after > 1 - _ROUNDING, 1.0, after), 1.0)
    lengths = np.column_stack([column < grid.columns, np.where(run > _SLIVER, np.maximum(gap, 0), 0)]).ravel()
    share = np.column_stack([np.clip(after - rise + area, 0.0, 1.0), run]).ravel()
    owner, row = np.divmod(line, grid.rows)
    cell = row * grid.columns + column
    first = np.column_stack([cell, cell + 1]).ravel()
    cells = np.repeat(first, lengths) + _running(lengths)
    share, owner = np.repeat(share, lengths), np.repeat(np.repeat(owner, 2), lengths)
    kept = share > _SLIVER
    return Cover(cells[kept], zone[owner[kept]], share[kept])


def _running(lengths: np.ndarray) -> np.ndarray:
    """Return 0, 1, ... within each run."""
    total = int(lengths.sum())
    return np.arange(total) - np.repeat(np.cumsum(lengths) - lengths, lengths)


def _restarted(values: np.ndarray, fresh: np.ndarray) -> np.ndarray:
    """Return running sums that start anew wherever ``fresh`` is set."""
    total = np.cumsum(values)
    before = (total - values)[fresh]
    return total - np.repeat(before, np.diff(np.r_[np.flatnonzero(fresh), len(values)]))
