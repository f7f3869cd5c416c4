"""Figures of the stand and slips of units. All data are invented."""

from __future__ import annotations

import numpy as np
import pandas as pd
import pytest
from builders import make_inputs, make_settings

from landcarbon.check import run_checks
from landcarbon.check.stand import stand_figures, stand_findings
from landcarbon.check.stems import tally_limit


def inputs_of(dbh, expansion, *, plots=("A", "B"), survey="2014", **columns):
    """Live trees spread over plots in turn, each standing for ``expansion`` stems per hectare."""
    rows = [
        {"survey": survey, "plot": plots[at % len(plots)], "tree": str(at), "dbh_cm": size, **columns}
        for at, size in enumerate(dbh)
    ]
    inputs = make_inputs(trees=rows, plots=[{"plot": name} for name in plots], surveys=[{"survey": survey}])
    return inputs, inputs.trees.assign(expansion=expansion)


def told(dbh, expansion, **columns):
    inputs, trees = inputs_of(dbh, expansion, **columns)
    return stand_findings(trees, inputs.visits, inputs.surveys, inputs.plots).set_index("rule")


def test_the_three_figures():
    inputs, trees = inputs_of([20.0, 30.0, 20.0, 30.0], 100.0)
    figures = stand_figures(trees, inputs.visits, "2014")
    # identity: on each plot 100 trees of 20 cm and 100 of 30 cm per hectare; pi/4 (0.2^2 + 0.3^2) 100 = 10.21 m2/ha,
    # the quadratic mean of 20 and 30 cm is 25.495 cm
    assert figures.basal_area_m2_ha == pytest.approx(np.pi / 4 * 13)
    assert figures.quadratic_mean_cm == pytest.approx(np.sqrt((20.0**2 + 30.0**2) / 2))
    assert (figures.stems_ha, figures.median_cm, figures.trees, figures.plots) == (200.0, 25.0, 4, 2)


def test_basal_area_by_its_definition():
    # identity: stems of 35.68 cm have a section of 0.1 m2 each, so 100 of them on a hectare hold 10 m2
    inputs, trees = inputs_of([200 * np.sqrt(0.1 / np.pi)] * 10, 10.0, plots=("A",))
    assert stand_figures(trees, inputs.visits, "2014").basal_area_m2_ha == pytest.approx(10.0)


def test_one_note_per_survey():
    found = told([24.0] * 40, 31.0)
    assert found.index.tolist() == ["stand in figures"]
    note = found.iloc[0]
    assert (note["severity"], note["survey"], note["value"]) == ("note", "2014", "28 m2/ha")
    assert note["message"] == (
        "Mean basal area 28 m2/ha, quadratic mean diameter 24 cm, 620 stems/ha (live trees, 2 plots): check against "
        "what you know of the stand."
    )


def test_empty_plots_count_and_plots_outside_do_not():
    inputs, trees = inputs_of([20.0, 20.0], 100.0, plots=("A", "B"))
    empty = pd.concat([inputs.visits, inputs.visits.iloc[[0]].assign(plot="C")], ignore_index=True)
    assert stand_figures(trees, empty, "2014").stems_ha == pytest.approx(200 / 3)
    outside = inputs.plots.assign(inside=[True, False])
    assert stand_figures(trees, empty, "2014", outside).stems_ha == 100.0


def test_a_plot_half_inside_weighs_half():
    # identity: 100/ha on the whole plot, 200/ha on the half one: (100 + 0.5 x 200) / 1.5
    inputs, trees = inputs_of([20.0, 20.0], np.array([100.0, 200.0]))
    visits = inputs.visits.assign(share_inside=[1.0, 0.5])
    assert stand_figures(trees, visits, "2014").stems_ha == pytest.approx(200 / 1.5)


def test_only_live_trees_in_use_count():
    inputs, trees = inputs_of([20.0] * 4, 100.0)
    trees["used"] = [True, True, False, True]
    trees["status"] = pd.Categorical(["live", "live", "live", "dead"])
    figures = stand_figures(trees, inputs.visits, "2014")
    assert (figures.stems_ha, figures.trees) == (100.0, 3)


def test_millimetres_read_as_centimetres():
    found = told([240.0] * 40, 31.0)
    # identity: a hundred times the basal area of 28 m2/ha
    high = found.loc["basal area implausibly high"]
    assert (high["severity"], high["value"]) == ("warning", "2,805 m2/ha")
    assert "diameters in mm read as cm" in high["remedy"]
    assert "ten times too large" in found.loc["diameters implausibly thick", "remedy"]


def test_centimetres_read_as_millimetres():
    found = told([2.4] * 40, 31.0)
    low = found.loc["basal area implausibly low"]
    assert low["message"].startswith("The mean basal area of survey 2014 is 0.28 m2/ha although 40 live trees")
    assert "diameters in cm read as mm" in low["remedy"]
    assert "diameters implausibly thin" not in found.index


def test_metres_read_as_centimetres():
    assert "diameters implausibly thin" in told([0.24] * 40, 31.0).index


@pytest.mark.parametrize(("dbh", "expansion", "trees"), [(2.4, 31.0, 20), (24.0, 31.0, 40), (50.0, 25.0, 40)])
def test_sparse_and_dense_stands_are_let_be(dbh, expansion, trees):
    # 20 thin trees are too few to judge; 50 cm x 500 stems/ha is 98 m2/ha
    assert told([dbh] * trees, expansion).index.tolist() == ["stand in figures"]


def test_nothing_to_say_without_trees_or_visits():
    inputs, trees = inputs_of([], 1.0)
    assert stand_findings(trees, inputs.visits, inputs.surveys).empty
    inputs, trees = inputs_of([20.0] * 30, 50.0)
    assert stand_findings(trees, inputs.visits.assign(visited=False), inputs.surveys).empty
    # all rows set aside: no figures of a stand, but a warning
    aside = stand_findings(trees.assign(used=False), inputs.visits, inputs.surveys)
    assert aside["rule"].tolist() == ["basal area implausibly low"]


def test_limits_carry_their_source():
    from landcarbon.check.rules import load_rules

    rules = load_rules()
    for name in ("basal area implausibly high", "basal area implausibly low", "diameters implausibly thin"):
        assert rules[name].known in ("memory", "no source")
        assert rules[name].source


@pytest.mark.parametrize(("below", "warned"), [(11, True), (10, False)])
def test_trees_mostly_below_the_tally_limit(below, warned):
    rows = [{"tree": str(at), "dbh_cm": 2.4 if at < below else 24.0} for at in range(20)]
    outcome = tally_limit(make_inputs(trees=rows), make_settings(kind="nested", dbh_min_cm=[5.0, 20.0]))
    found = outcome.findings[outcome.findings["rule"] == "mostly below tally limit"]
    assert len(found) == warned
    assert outcome.aside.sum() == below
    if warned:
        assert found["message"].iloc[0].startswith("11 of 20 live trees of survey 2014 lie below 5 cm")
        assert "read as mm" in found["remedy"].iloc[0]


def test_few_trees_below_the_tally_limit_are_no_sign():
    rows = [{"tree": str(at), "dbh_cm": 2.4} for at in range(19)]
    checked = run_checks(make_inputs(trees=rows), make_settings(kind="nested", dbh_min_cm=[5.0]))
    assert "mostly below tally limit" not in set(checked.findings["rule"])
