"""Cells that add up to the figures of parcels; sums are taken anew with areas of intersections by shapely."""

from __future__ import annotations

import numpy as np
import pandas as pd
import pytest
import shapely
from hypothesis import example, given, settings
from hypothesis import strategies as st
from scipy.optimize import linprog

from landcarbon.raster.calibrate import CellSums, calibrate
from landcarbon.raster.coefficients import model_of
from landcarbon.raster.grid import Grid
from landcarbon.raster.predict import LinearModel, predict
from landcarbon.raster.zones import Zones

GRID = Grid(0.0, 20.0, 1.0, 1.0, 20, 20)


def cells_as_polygons(grid):
    row, column = (part.ravel() for part in np.indices((grid.rows, grid.columns)))
    return shapely.box(column, grid.top - row - 1, column + 1, grid.top - row)


def parcels(seed, count=8):
    points = shapely.MultiPoint(np.random.default_rng(seed).uniform(1, 19, (count, 2)))
    shapes = shapely.get_parts(shapely.voronoi_polygons(points, extend_to=shapely.box(0, 0, 20, 20)))
    return shapely.intersection(shapes, shapely.box(0.3, 0.6, 19.2, 19.9))


def calibrated(shapes, prediction, figure, *, signed, size=7):
    """Run both passes by windows; return cell values and the calibration."""
    zones, sums = Zones(shapes), CellSums.zero(len(shapes))

    def windows():
        for window in GRID.windows(size, size):
            cover = zones.cover(GRID.part(window))
            row, column = np.divmod(cover.cell, window.columns)
            yield window, cover, (row + window.row) * GRID.columns + column + window.column

    for _, cover, number in windows():
        sums.add(cover, prediction[number], number)
    found = calibrate(sums, figure, GRID.cell_area, signed=signed, ease=10)
    values = np.full((GRID.rows, GRID.columns), np.nan)
    for window, cover, number in windows():
        part = found.apply(cover, prediction[number], number, window.cells)
        place = slice(window.row, window.row + window.rows), slice(window.column, window.column + window.columns)
        values[place] = part.reshape(window.rows, window.columns)
    return values.ravel(), found


def added_up(shapes, values):
    area = np.array([shapely.area(shapely.intersection(cells_as_polygons(GRID), shape)) for shape in shapes])
    return area @ np.nan_to_num(values), area


@settings(max_examples=60, deadline=None)
@given(st.integers(0, 10_000), st.booleans(), st.floats(0, 0.5))
@example(741, False, 0.0)
@example(273, False, 0.0)
def test_cells_add_up_to_parcels(seed, signed, gaps):
    generator = np.random.default_rng(seed)
    shapes = parcels(seed)
    prediction = generator.gamma(3, 30, GRID.cells) - (90 if signed else 0)
    prediction[generator.random(GRID.cells) < gaps] = np.nan
    density = generator.normal(0, 50, len(shapes)) if signed else generator.choice([0, 3, 60, 250], len(shapes))
    figure = density * shapely.area(shapes)
    values, found = calibrated(shapes, prediction, figure, signed=signed)
    sums, area = added_up(shapes, values)
    # Independent: linear programming says whether any cells from zero upwards add up to all parcels. A small parcel
    # beside bare ones may not have room for its carbon; it is told as not met, the others still add up.
    possible = signed or linprog(np.zeros(area.shape[1]), A_eq=area, b_eq=figure, bounds=(0, None)).status == 0
    assert bool(found.met.all()) == possible
    assert sums[found.met] == pytest.approx(figure[found.met], rel=1e-8, abs=1e-7)
    assert np.isfinite(values[area.sum(axis=0) > 1e-6]).all()
    if not signed:
        assert np.nanmin(values) >= 0


def test_a_parcel_of_little_keeps_its_inside_beside_one_of_much():
    """The mean of both at the edge is more than the young stand can bear; the edge yields, not the inside."""
    shapes = np.array([shapely.box(0, 0, 10.5, 20), shapely.box(10.5, 0, 20, 20)])
    values, found = calibrated(shapes, np.full(GRID.cells, 80.0), np.array([1.0, 200.0]) * [210, 190], signed=False)
    grid = values.reshape(20, 20)
    assert found.met.all()
    assert grid[:, :10] == pytest.approx(1.0, abs=0.5)
    assert grid[:, 11:] == pytest.approx(200.0, rel=0.1)
    assert (grid[:, 10] < 100).all()


def test_shift_where_it_can_be_ratio_where_it_must():
    shapes = np.array([shapely.box(0, 0, 10, 20), shapely.box(10, 0, 20, 20)])  # on the lines: no shared cells
    prediction = np.tile(np.r_[np.linspace(50, 100, 10), np.linspace(0, 100, 10)], 20)
    values, _ = calibrated(shapes, prediction, np.array([70.0, 30.0]) * 200, signed=False)
    grid, told = values.reshape(20, 20), prediction.reshape(20, 20)
    assert np.ptp(grid[:, :10] - told[:, :10]) == pytest.approx(0, abs=1e-9)
    assert grid[:, 11:] / told[:, 11:] == pytest.approx(30 / 50)


def test_true_predictions_stay_as_they_are():
    """Identity: predictions that add up already are not touched, at edges either."""
    shapes = parcels(5)
    prediction = np.random.default_rng(1).uniform(20, 100, GRID.cells)
    _, area = added_up(shapes, prediction)
    for signed in (False, True):
        values, _ = calibrated(shapes, prediction, area @ prediction, signed=signed)
        inside = np.isfinite(values)
        assert values[inside] == pytest.approx(prediction[inside], rel=1e-9)


def test_without_predictions_every_parcel_has_its_mean():
    shapes = np.array([shapely.box(0, 0, 10, 20), shapely.box(10, 0, 20, 13)])
    values, found = calibrated(shapes, np.full(GRID.cells, np.nan), np.array([400.0, 260.0]), signed=False)
    grid = values.reshape(20, 20)
    assert grid[:, :10] == pytest.approx(2.0)
    assert grid[7:, 10:] == pytest.approx(2.0)
    assert np.isnan(grid[:7, 10:]).all()
    assert found.met.all()


def test_parcels_within_one_cell_cannot_differ():
    """Two parcels that share all their cells and nothing else have the same cells; the others still add up."""
    small = [shapely.box(5.1, 5.1, 5.5, 5.9), shapely.box(5.5, 5.1, 5.9, 5.9)]
    shapes = np.array([shapely.box(0, 0, 20, 20).difference(shapely.box(5.1, 5.1, 5.9, 5.9)), *small])
    figure = np.array([10.0, 10.0, 90.0]) * shapely.area(shapes)
    for signed in (False, True):
        values, found = calibrated(shapes, np.full(GRID.cells, 20.0), figure, signed=signed)
        sums, _ = added_up(shapes, values)
        assert found.met.tolist() == [True, False, False]
        assert sums[0] == pytest.approx(figure[0], rel=1e-9)


def test_a_parcel_made_of_shared_cells_only_is_met_if_it_can_be():
    strip = shapely.box(0, 9.3, 20, 10.6)
    shapes = np.array([strip, shapely.box(0, 0, 20, 9.3), shapely.box(0, 10.6, 20, 20)])
    figure = np.array([20.0, 100.0, 150.0]) * shapely.area(shapes)
    for signed in (False, True):
        values, found = calibrated(shapes, np.full(GRID.cells, 80.0), figure, signed=signed)
        assert found.met.all()
        assert added_up(shapes, values)[0] == pytest.approx(figure, rel=1e-8)


def test_overlapping_parcels_add_up_too():
    shapes = np.array([shapely.box(0, 0, 12, 20), shapely.box(8, 0, 20, 20)])
    figure = np.array([50.0, 120.0]) * shapely.area(shapes)
    values, found = calibrated(shapes, np.full(GRID.cells, 80.0), figure, signed=False)
    assert found.met.all()
    assert added_up(shapes, values)[0] == pytest.approx(figure, rel=1e-8)


def test_prediction_is_linear_and_blank_where_a_raster_is():
    model = LinearModel(("height", "red"), np.array([10.0, 20.0]), np.array([[2.0, -1.0], [3.0, 0.5]]))
    values = [np.array([5.0, 5.0, np.nan, 5.0]), np.array([4.0, 4.0, 4.0, 4.0])]
    told = predict(model, values, np.array([0, 1, 0, -1]))
    assert told[:2] == pytest.approx([10 + 10 - 4, 20 + 15 + 2])
    assert np.isnan(told[2:]).all()


def test_a_stratum_without_a_model_takes_the_common_one():
    table = pd.DataFrame(
        {
            "survey": ["1"] * 4 + ["2"],
            "stratum": ["", "", "oak", "oak", "oak"],
            "term": ["intercept", "height", "intercept", "height", "intercept"],
            "value": [1.0, 2.0, 3.0, 4.0, 5.0],
        }
    )
    strata = np.array(["oak", "pine"], dtype=object)
    model, variant = model_of(table, "1", strata)
    assert model.intercept[variant].tolist() == [3.0, 1.0]
    assert model.coefficients[variant, 0].tolist() == [4.0, 2.0]
    assert model_of(table, "2", strata)[1].tolist() == [0, -1]
    assert model_of(table, "3", strata) is None


def test_a_raster_without_slope_is_not_asked_for():
    table = pd.DataFrame(
        {"survey": "1", "stratum": "", "term": ["intercept", "height", "red"], "value": [1.0, 2.0, 0.0]}
    )
    model, _ = model_of(table, "1", np.array(["oak"], dtype=object))
    assert model.names == ("height",)
