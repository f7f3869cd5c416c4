"""Checks of plots, visits, strata and parcels. All data are invented."""

from __future__ import annotations

import numpy as np
import pytest
from builders import make_inputs, make_settings

from landcarbon.check import run_checks
from landcarbon.check.plots import coordinates, plot_doubles, strata_of_plots, too_few_plots, unused_parcels
from landcarbon.check.visits import dates, plot_areas, shares_inside, slopes, subplots

CENSUS = make_settings()


def rules(outcome) -> list[str]:
    return outcome.findings["rule"].tolist()


def visits(**columns) -> list[dict]:
    """One plot per value of the column given."""
    ((name, values),) = columns.items()
    return [{"plot": f"P{at}", name: value} for at, value in enumerate(values)]


@pytest.mark.parametrize(
    ("check", "column", "values", "bad"),
    [
        (shares_inside, "share_inside", [1.0, 0.5, 0.0, -0.1, 1.01, 80.0, np.nan], [2, 3, 4, 5, 6]),
        (plot_areas, "plot_area_ha", [np.nan, 0.04, 0.0, -1.0, np.inf], [2, 3, 4]),
        (slopes, "slope_deg", [0.0, 45.0, 89.0, 90.0, -1.0, np.nan], [3, 4, 5]),
        (subplots, "n_subplots", [1, 0, 2], [1]),
    ],
)
def test_visits_that_cannot_be_used(check, column, values, bad):
    inputs = make_inputs(visits=visits(**{column: values}))
    outcome = check(inputs, CENSUS)
    assert np.flatnonzero(outcome.visit_unusable).tolist() == bad
    errors = outcome.findings[outcome.findings["severity"] == "error"]
    assert errors["plot"].tolist() == [f"P{at}" for at in bad]
    assert not errors["used"].any()


def test_a_visit_that_did_not_take_place_is_not_judged():
    inputs = make_inputs(visits=[{"visited": False, "share_inside": 0.0, "slope_deg": 99.0}])
    checked = run_checks(inputs, CENSUS)
    assert checked.findings["rule"].tolist() == ["no visit"]


def test_more_subplots_than_the_design_are_pointed_at():
    outcome = subplots(make_inputs(visits=visits(n_subplots=[1, 5, 6])), make_settings(subplots=5))
    assert not outcome.visit_unusable.any()
    assert rules(outcome) == ["subplots above design"]
    assert outcome.findings["value"].tolist() == ["6"]


def test_steep_slopes_are_pointed_at():
    outcome = slopes(make_inputs(visits=visits(slope_deg=[59.0, 61.0])), CENSUS)
    assert rules(outcome) == ["slope very steep"]
    assert not outcome.visit_unusable.any()


def test_a_visit_dated_before_the_one_before():
    rows = [
        {"survey": "2014", "plot": "A", "date": "2014-07-01"},
        {"survey": "2019", "plot": "A", "date": "2012-07-01"},
        {"survey": "2014", "plot": "B", "date": "2014-07-01"},
        {"survey": "2019", "plot": "B", "date": "2014-07-01"},
        {"survey": "2014", "plot": "C", "date": "2014-07-01"},
        {"survey": "2019", "plot": "C", "date": "2019-07-01"},
    ]
    outcome = dates(make_inputs(visits=rows, surveys=[{"survey": "2014"}, {"survey": "2019"}]), CENSUS)
    found = outcome.findings
    assert rules(outcome) == ["date before last survey"] * 2
    assert found["plot"].tolist() == ["A", "B"]
    assert found["value"].tolist() == ["2012-07-01, before 2014-07-01", "2014-07-01, before 2014-07-01"]


def test_dates_outside_the_window_of_the_survey():
    window = [{"survey": "2014", "since": "2014-05-01", "until": "2014-10-31"}]
    rows = visits(date=["2014-04-30", "2014-05-01", "2014-10-31", "2014-11-01", None])
    outcome = dates(make_inputs(visits=rows, surveys=window), CENSUS)
    outside = outcome.findings[outcome.findings["rule"] == "date outside window"]
    assert outside["plot"].tolist() == ["P0", "P3"]
    missing = outcome.findings[outcome.findings["rule"] == "date missing"]
    assert missing["message"].iloc[0].startswith("Visits of survey 2014 without a date: 1 of 5")


def test_dates_of_trees_outside_the_window_are_counted():
    window = [{"survey": "2014", "since": "2014-05-01", "until": "2014-10-31"}]
    trees = [{"date": day} for day in ("2013-05-01", "2014-06-01", "2015-01-01", None)]
    outcome = dates(make_inputs(trees=trees, surveys=window), CENSUS)
    found = outcome.findings.set_index("rule").loc["tree dates outside window"]
    assert found["value"] == "2013-05-01 to 2015-01-01"
    assert found["message"].startswith("Rows of survey 2014 dated outside its window: 2")


def test_plots_that_stand_twice():
    inputs = make_inputs(
        trees=[{"plot": "A"}], plots=[{"plot": "A"}, {"plot": "B"}, {"plot": "A", "x": 1.0}], visits=[{}]
    )
    assert rules(plot_doubles(inputs, CENSUS)) == ["duplicate plot"]
    checked = run_checks(inputs, CENSUS)
    assert checked.plots["plot"].tolist() == ["A", "B"]
    assert checked.plots["x"].tolist() == [500_000.0, 500_000.0]


def test_plots_without_coordinates():
    plots = [{"plot": "A"}, {"plot": "B", "x": np.nan}, {"plot": "C", "y": np.inf}]
    outcome = coordinates(make_inputs(plots=plots), CENSUS)
    assert rules(outcome) == ["coordinates missing"] * 2
    # an inventory without any positions is told about by reading, not plot by plot
    nowhere = [{"plot": "A", "x": np.nan, "y": np.nan}]
    assert rules(coordinates(make_inputs(plots=nowhere), CENSUS)) == []


def test_plots_outside_all_parcels():
    outcome = coordinates(make_inputs(plots=[{"plot": "A"}, {"plot": "B", "inside": False}]), CENSUS)
    assert rules(outcome) == ["plot outside parcels"]
    assert outcome.findings["value"].tolist() == ["500000.0, 5300000.0"]
    assert outcome.findings["severity"].tolist() == ["warning"]
    assert not outcome.findings["used"].any()


def plots_at(lon, lat, outside, total=9):
    """Plots of which the first ones lie outside, at one place in degrees."""
    return [
        {"plot": f"P{at}", "inside": at >= outside} | ({"lon": lon, "lat": lat} if at < outside else {})
        for at in range(total)
    ]


@pytest.mark.parametrize(("outside", "told"), [(1, 0), (2, 0), (3, 1), (9, 1)])
def test_many_plots_outside_are_told_once(outside, told):
    # limit of the rules: more than a third, and at least two
    plots = plots_at(-9.0, 47.85, outside, total=8 if outside < 9 else 9)
    outcome = coordinates(make_inputs(plots=plots, parcels=[{}]), CENSUS)
    assert rules(outcome) == ["many plots outside parcels"] * told + ["plot outside parcels"] * outside


@pytest.mark.parametrize(
    ("slip", "said"),
    [
        (lambda lon, lat: (-lon, lat), "With the other sign of the longitude 9 of them would lie among the parcels."),
        (lambda lon, lat: (lon, -lat), "With the other sign of the latitude 9 of them"),
        (lambda lon, lat: (lat, lon), "With longitude and latitude exchanged 9 of them"),
        (lambda lon, lat: (lon + 3, lat + 3), "may say little about the land."),
    ],
)
def test_the_slip_that_fits_is_named(slip, said):
    # independent: pyproj turns the middle of the parcel of the builder (one hectare, UTM zone 32) into degrees
    from pyproj import Transformer

    place = Transformer.from_crs("EPSG:32632", "EPSG:4326", always_xy=True).transform(500_050, 5_300_050)
    inputs = make_inputs(plots=plots_at(*slip(*place), outside=9), parcels=[{}])
    found = coordinates(inputs, CENSUS).findings.iloc[0]
    assert found["rule"] == "many plots outside parcels"
    assert (found["severity"], found["value"]) == ("error", "9 of 9 plots")
    assert said in found["message"]
    assert "sign of the longitude" in found["remedy"]


def test_plots_that_cannot_be_placed_are_not_said_to_lie_outside():
    plots = [{"plot": "A"}, {"plot": "B", "x": np.nan, "inside": False}, {"plot": "C", "y": np.nan, "parcel": "P1"}]
    outcome = coordinates(make_inputs(plots=plots), CENSUS)
    assert rules(outcome) == ["plot in no parcel", "coordinates missing"]
    assert outcome.findings["severity"].tolist() == ["error", "warning"]
    assert outcome.findings["used"].tolist() == [False, True]


def test_trees_of_a_plot_that_cannot_be_placed():
    plots = [{"plot": "A", "x": np.nan, "inside": False}, {"plot": "B", "inside": False}, {"plot": "C"}]
    trees = [{"plot": name} for name in "ABC"]
    checked = run_checks(make_inputs(trees=trees, plots=plots), CENSUS)
    found = checked.findings[checked.findings["table"] == "trees"]
    assert found["rule"].tolist() == ["plot outside", "plot without place"]
    assert found["plot"].tolist() == ["B", "A"]
    assert found["message"].iloc[1].startswith("The plot has no usable coordinates")
    assert checked.trees["used"].tolist() == [False, False, True]


def test_plots_without_a_stratum():
    assert rules(strata_of_plots(make_inputs(plots=[{"plot": "A"}, {"plot": "B"}]), CENSUS)) == []
    mixed = [{"plot": "A", "stratum": "oak"}, {"plot": "B"}]
    assert rules(strata_of_plots(make_inputs(plots=mixed), CENSUS)) == ["stratum missing"]


def test_strata_with_fewer_than_two_plots():
    plots = [{"plot": f"O{at}", "stratum": "oak"} for at in range(3)] + [{"plot": "L", "stratum": "larch"}]
    strata = [
        {"stratum": "oak", "area_ha": 40.0},
        {"stratum": "larch", "area_ha": 12.5},
        {"stratum": "scree", "area_ha": 3.0},
    ]
    surveys = [{"survey": "2014"}, {"survey": "2019"}]
    rows = [
        {"survey": s, "plot": p["plot"], "visited": not (s == "2019" and p["plot"] in ("O0", "O1"))}
        for s in ("2014", "2019")
        for p in plots
    ]
    inputs = make_inputs(plots=plots, strata=strata, surveys=surveys, visits=rows)
    found = too_few_plots(inputs, CENSUS).findings
    assert list(zip(found["survey"], found["value"], strict=True)) == [
        ("2014", "larch"), ("2014", "scree"), ("2019", "larch"), ("2019", "oak"), ("2019", "scree"),
    ]  # fmt: skip
    assert "12.50 ha" in found["message"].iloc[0]
    assert set(found["severity"]) == {"note"}  # the estimate says it loudly
    merged = too_few_plots(inputs, make_settings(merge={"larch": "oak", "scree": "oak"})).findings
    assert merged.empty


def test_an_inventory_without_strata_needs_two_plots_as_well():
    found = too_few_plots(make_inputs(plots=[{"plot": "A"}]), CENSUS).findings
    assert found["value"].tolist() == ["(whole inventory)"]
    assert "area unknown" in found["message"].iloc[0]
    assert too_few_plots(make_inputs(plots=[{"plot": "A"}, {"plot": "B"}]), CENSUS).findings.empty


def test_plots_outside_do_not_count_for_the_stratum():
    plots = [{"plot": "A"}, {"plot": "B", "inside": False}]
    assert rules(too_few_plots(make_inputs(plots=plots), CENSUS)) == ["too few plots"]


def test_a_survey_nobody_went_to():
    inputs = make_inputs(plots=[{"plot": "A"}, {"plot": "B"}], surveys=[{"survey": "2014"}], visits=[])
    assert rules(too_few_plots(inputs, CENSUS)) == ["no visit"]


def test_a_survey_whose_plots_all_lie_outside_blames_the_plots():
    plots = [{"plot": "A", "inside": False}, {"plot": "B", "inside": False}]
    found = too_few_plots(make_inputs(plots=plots, surveys=[{"survey": "2014"}]), CENSUS).findings
    assert found["rule"].tolist() == ["no plot inside"]
    assert found["message"].iloc[0].startswith("The plots visited in survey 2014 (2) all lie outside every parcel")
    assert "plots table" in found["remedy"].iloc[0]


def test_parcels_without_plots():
    parcels = [{"parcel": "P1", "area_ha": 2.0}, {"parcel": "P2", "area_ha": 3.5}]
    inputs = make_inputs(plots=[{"plot": "A", "parcel": "P1"}], parcels=parcels)
    found = unused_parcels(inputs, CENSUS).findings
    assert found["value"].tolist() == ["P2"]
    assert found["severity"].tolist() == ["note"]
    assert "3.50 ha" in found["message"].iloc[0]
    assert rules(unused_parcels(make_inputs(), CENSUS)) == []
