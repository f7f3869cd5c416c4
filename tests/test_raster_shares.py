"""Shares of cells in polygons against two general libraries: shapely, cell by cell, and exactextract."""

from __future__ import annotations

import numpy as np
import pytest
import shapely
from hypothesis import given, settings
from hypothesis import strategies as st

from landcarbon.raster.grid import Grid
from landcarbon.raster.shares import cell_shares
from landcarbon.raster.zones import Zones, ZoneSums

NUMBERS = st.floats(-3, 13, allow_nan=False)


def boxes(grid):
    """Every cell as a polygon, row by row."""
    row, column = (part.ravel() for part in np.indices((grid.rows, grid.columns)))
    left, top = grid.left + column * grid.cell_x, grid.top - row * grid.cell_y
    return shapely.box(left, top - grid.cell_y, left + grid.cell_x, top)


def by_shapely(grid, shape):
    return shapely.area(shapely.intersection(boxes(grid), shape)) / grid.cell_area


def dense(grid, cover, zone):
    kept = cover.zone == zone
    assert len(np.unique(cover.cell[kept])) == kept.sum()
    values = np.zeros(grid.cells)
    values[cover.cell[kept]] = cover.share[kept]
    return values


@st.composite
def polygons(draw):
    """Valid polygons, some in parts, some with holes, some with edges on the lines of the grid."""
    points = draw(st.lists(st.tuples(NUMBERS, NUMBERS), min_size=3, max_size=9))
    shape = shapely.make_valid(shapely.Polygon(points))
    corner = draw(st.tuples(st.integers(-2, 8), st.integers(-2, 8)))
    size = draw(st.tuples(st.integers(1, 6), st.integers(1, 6)))
    whole = shapely.box(*corner, corner[0] + size[0], corner[1] + size[1])
    hole = shapely.Point(draw(NUMBERS), draw(NUMBERS)).buffer(draw(st.floats(0.1, 3)))
    joined = draw(st.sampled_from([shape, whole, shape.union(whole), whole.difference(hole), shape.difference(hole)]))
    parts = [part for part in shapely.get_parts(joined) if part.geom_type == "Polygon"]
    return shapely.union_all(parts) if parts else shapely.Polygon()


@st.composite
def grids(draw):
    left, top = draw(st.floats(-1, 2)), draw(st.floats(7, 11))
    if draw(st.booleans()):
        left, top = round(left), round(top)
    size = draw(st.sampled_from([(1.0, 1.0), (0.7, 1.3), (2.5, 0.4)]))
    return Grid(float(left), float(top), *size, draw(st.integers(1, 9)), draw(st.integers(1, 9)))


@settings(max_examples=300, deadline=None)
@given(grids(), st.lists(polygons(), min_size=1, max_size=4))
def test_shares_are_those_of_intersections(grid, shapes):
    """Independent: areas of intersections by shapely (GEOS)."""
    cover = Zones(np.array(shapes, dtype=object)).cover(grid)
    for zone, shape in enumerate(shapes):
        assert dense(grid, cover, zone) == pytest.approx(by_shapely(grid, shape), abs=2e-9)


@settings(max_examples=60, deadline=None)
@given(grids(), polygons(), st.integers(1, 4), st.integers(1, 4))
def test_windows_hold_the_same_cells(grid, shape, rows, columns):
    """Identity: windows put together give the cells of the whole grid."""
    zones = Zones(np.array([shape], dtype=object))
    whole, joined = dense(grid, zones.cover(grid), 0), np.zeros((grid.rows, grid.columns))
    for window in grid.windows(rows, columns):
        part = dense(grid.part(window), zones.cover(grid.part(window)), 0)
        place = slice(window.row, window.row + window.rows), slice(window.column, window.column + window.columns)
        joined[place] = part.reshape(window.rows, window.columns)
    assert joined.ravel() == pytest.approx(whole, abs=1e-9)


@pytest.mark.parametrize("seed", range(5))
def test_sums_agree_with_exactextract(seed):
    """Independent: exactextract 0.3, which keeps shares in single precision (6e-8)."""
    exactextract = pytest.importorskip("exactextract")
    import geopandas as gpd

    generator = np.random.default_rng(seed)
    points = shapely.MultiPoint(generator.uniform(0, 40, (12, 2)))
    shapes = shapely.get_parts(shapely.voronoi_polygons(points, extend_to=shapely.box(-5, -5, 45, 45)))
    grid = Grid(0.0, 36.0, 1.5, 0.9, 40, 25)
    values = generator.normal(50, 20, (grid.rows, grid.columns))
    values[generator.random(values.shape) < 0.1] = np.nan
    left, bottom, right, top = grid.bounds
    source = exactextract.raster.NumPyRasterSource(values, left, bottom, right, top)
    told = exactextract.exact_extract(
        source, gpd.GeoDataFrame(geometry=shapes, crs=25832), ["sum", "count", "min", "max"], output="pandas"
    )
    sums, zones = ZoneSums.zero(len(shapes)), Zones(shapes)
    for window in grid.windows(7, 6):
        block = values[window.row : window.row + window.rows, window.column : window.column + window.columns]
        sums.add(zones.cover(grid.part(window)), block)
    assert sums.total == pytest.approx(told["sum"].to_numpy(), rel=1e-6)
    assert sums.weight == pytest.approx(told["count"].to_numpy(), rel=1e-6)
    touched = sums.weight > 0
    assert sums.least[touched] == pytest.approx(told["min"].to_numpy()[touched], rel=1e-12)
    assert sums.most[touched] == pytest.approx(told["max"].to_numpy()[touched], rel=1e-12)


def test_parcels_side_by_side_fill_every_cell():
    """Identity: shares of a partition add up to one, far from the origin and at any angle."""
    generator = np.random.default_rng(3)
    points = shapely.MultiPoint(generator.uniform(0, 4000, (300, 2)) + np.array([3_500_000, 5_800_000]))
    shapes = shapely.get_parts(shapely.voronoi_polygons(points))
    grid = Grid(3_501_000.0, 5_803_000.0, 20.0, 20.0, 90, 90)
    cover = Zones(shapes).cover(grid)
    assert np.bincount(cover.cell, cover.share, minlength=grid.cells) == pytest.approx(np.ones(grid.cells), abs=1e-8)


@pytest.mark.parametrize(
    "shape",
    [
        shapely.Polygon(),
        shapely.box(20, 20, 30, 30),  # beside the grid, to the north-east
        shapely.box(-9, 2, -1, 5),  # to the left, on the same rows
        shapely.box(11, 2, 15, 5),  # to the right
        shapely.box(2, -5, 5, 0),  # touches the lower border
    ],
)
def test_nothing_lies_in_a_polygon_elsewhere(shape):
    cover = cell_shares(Grid(0.0, 10.0, 1.0, 1.0, 10, 10), np.array([shape], dtype=object), np.array([0]))
    assert len(cover.cell) == 0


def test_many_corners_are_worked_in_batches(monkeypatch):
    """Identity: the same entries in the same order, whatever fits at once."""
    shapes = np.array([shapely.Point(x, 5).buffer(2) for x in range(10)], dtype=object)
    grid = Grid(0.0, 10.0, 1.0, 1.0, 10, 10)
    whole = Zones(shapes).cover(grid)
    monkeypatch.setattr("landcarbon.raster.zones._CORNERS_AT_ONCE", 70)
    parts = Zones(shapes).cover(grid)
    for name in ("cell", "zone", "share"):
        assert np.array_equal(getattr(whole, name), getattr(parts, name))


@pytest.mark.parametrize("bounds", [(2.2, 3.1, 5.9, 7.7), (2.0, 3.0, 6.0, 8.0), (-3.5, -2.0, 14.0, 12.5)])
def test_cells_around_bounds_stay_on_the_lines(bounds):
    grid = Grid(0.0, 10.0, 0.5, 0.25, 40, 20)
    around = grid.around(bounds)
    left, bottom, right, top = around.bounds
    assert left <= bounds[0] < left + 0.5
    assert right - 0.5 < bounds[2] <= right
    assert bottom <= bounds[1] < bottom + 0.25
    assert top - 0.25 < bounds[3] <= top
    assert grid.offset(around) == (round((10 - top) / 0.25), round(left / 0.5))


def test_other_lines_have_no_offset():
    grid = Grid(0.0, 10.0, 1.0, 1.0, 10, 10)
    assert grid.offset(Grid(0.3, 10.0, 1.0, 1.0, 5, 5)) is None
    assert grid.offset(Grid(0.0, 10.0, 2.0, 2.0, 5, 5)) is None
