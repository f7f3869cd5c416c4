"""Checks of single tree rows. All data are invented; each test states what the rule must do with them."""

from __future__ import annotations

import numpy as np
import pandas as pd
import pytest
from builders import make_inputs, make_settings

from landcarbon.check import run_checks
from landcarbon.check.places import plots_of_rows, rows_left, visits_of_rows
from landcarbon.check.stems import (
    design_limits,
    diameters,
    diameters_of_kind,
    doubles,
    expansions,
    heights,
    tally_limit,
    weights,
)

CENSUS = make_settings()


def aside(outcome) -> list[int]:
    return np.flatnonzero(outcome.aside).tolist()


def rules(outcome) -> list[str]:
    return outcome.findings["rule"].tolist()


def test_rows_without_a_known_plot_are_set_aside():
    trees = [{"plot": "A"}, {"plot": ""}, {"plot": "Q"}, {"plot": "B"}]
    inputs = make_inputs(trees=trees, plots=[{"plot": "A"}, {"plot": "B", "inside": False}])
    outcome = plots_of_rows(inputs, CENSUS)
    assert aside(outcome) == [1, 2, 3]
    found = outcome.findings.set_index("rule")
    assert found.index.tolist() == ["plot blank", "plot unknown", "plot outside"]
    assert found.loc["plot unknown", "value"] == "Q"
    assert found.loc["plot unknown", "severity"] == "error"
    assert found.loc["plot outside", "severity"] == "note"
    assert not found["used"].any()
    assert found["row_id"].tolist() == [1, 2, 3]
    assert found["row"].tolist() == [3, 4, 5]  # line of the file, header counted as 1


def test_no_plots_at_all_sets_every_row_aside():
    inputs = make_inputs(trees=[{"plot": "A"}], plots=[])
    outcome = plots_of_rows(inputs, CENSUS)
    assert rules(outcome) == ["plot unknown"]


def test_trees_on_a_plot_not_visited_are_set_aside():
    trees = [{"plot": "A", "survey": "2014"}, {"plot": "A", "survey": "2019"}, {"plot": "B", "survey": "2014"}]
    visits = [{"survey": "2014", "plot": "A"}, {"survey": "2019", "plot": "A", "visited": False}]
    outcome = visits_of_rows(make_inputs(trees=trees, visits=visits), CENSUS)
    assert aside(outcome) == [1, 2]  # B has no visit at all
    assert rules(outcome) == ["plot not visited", "plot not visited"]


def test_trees_of_an_unusable_visit_say_so():
    checked = run_checks(make_inputs(trees=[{"plot": "A"}], visits=[{"plot": "A", "share_inside": 0.0}]), CENSUS)
    found = checked.findings.set_index("rule")
    assert not checked.trees["used"].any()
    assert not checked.visits["visited"].any()
    assert found.loc["visit unusable", "row_id"] == 0
    assert "visits table" in found.loc["visit unusable", "message"]


@pytest.mark.parametrize(
    ("status", "dbh", "expected"),
    [
        ("live", np.nan, "dbh missing"),
        ("live", 0.0, "dbh zero"),
        ("live", -3.0, "dbh negative"),
        ("dead", -3.0, "dbh negative"),
        ("dead", 0.0, "dead without diameter"),
        ("dead", np.nan, "dead without diameter"),
        ("live", np.inf, "dbh impossible"),
        ("live", 1e300, "dbh impossible"),
        ("live", -np.inf, "dbh negative"),
    ],
)
def test_diameters_that_cannot_be_counted(status, dbh, expected):
    outcome = diameters(make_inputs(trees=[{"status": status, "dbh_cm": dbh}, {}]), CENSUS)
    assert rules(outcome) == [expected]
    assert aside(outcome) == [0]


@pytest.mark.parametrize("dbh", [np.nan, 0.0, -1.0, 1e9])
def test_the_diameter_of_an_absent_tree_does_not_matter(dbh):
    outcome = diameters(make_inputs(trees=[{"status": "absent", "dbh_cm": dbh}]), CENSUS)
    assert rules(outcome) == []
    assert aside(outcome) == []


def test_a_missing_diameter_of_a_live_tree_weighs_more_than_that_of_a_dead_one():
    rows = [{"dbh_cm": 0.0}, {"dbh_cm": 0.0, "status": "dead"}]
    assert diameters(make_inputs(trees=rows), CENSUS).findings["severity"].tolist() == ["note", "error"]


def test_a_very_large_diameter_is_pointed_at_and_kept():
    outcome = diameters_of_kind(make_inputs(trees=[{"dbh_cm": 301.0}, {"dbh_cm": 299.0}]), CENSUS)
    assert rules(outcome) == ["dbh very large"]
    assert outcome.aside is None
    assert outcome.findings["value"].tolist() == ["301"]


def test_a_diameter_far_from_those_of_its_species():
    small = [{"species": "HAZEL", "dbh_cm": 3.0 + 0.1 * at} for at in range(25)]
    rows = [*small, {"species": "HAZEL", "dbh_cm": 41.0}, {"species": "OAK", "dbh_cm": 41.0}]
    outcome = diameters_of_kind(make_inputs(trees=rows), CENSUS)
    assert rules(outcome) == ["dbh far from its kind"]
    assert outcome.findings["row_id"].tolist() == [25]


def test_below_the_smallest_circle_limit():
    nested = make_settings(kind="nested", dbh_min_cm=[5.0, 20.0])
    outcome = tally_limit(make_inputs(trees=[{"dbh_cm": 4.9}, {"dbh_cm": 5.0}, {"dbh_cm": 12.0}]), nested)
    assert aside(outcome) == [0]
    assert "below 5 cm" in outcome.findings["message"].iloc[0]
    assert design_limits(nested.plots.design) == [5.0, 20.0]
    assert tally_limit(make_inputs(trees=[{"dbh_cm": 0.1}]), CENSUS).aside is None


def test_expansion_factors_are_needed_by_the_weighted_design_only():
    rows = [{"expansion_per_ha": value} for value in (100.0, 0.0, -1.0, np.nan, np.inf)]
    assert aside(expansions(make_inputs(trees=rows), make_settings(kind="weighted"))) == [1, 2, 3, 4]
    assert expansions(make_inputs(trees=rows), CENSUS).aside is None


def test_weights():
    rows = [{"weight": value} for value in (1.0, 0.5, 0.0, -1.0, np.nan)]
    assert aside(weights(make_inputs(trees=rows), CENSUS)) == [3, 4]


def test_heights_that_cannot_be_are_ignored_and_the_row_kept():
    rows = [{"height_m": value, "dbh_cm": 20.0} for value in (15.0, 1.3, 0.0, -4.0, 150.0, np.nan)]
    rows += [{"height_m": 3.0, "dbh_cm": 50.0}, {"height_m": 40.0, "dbh_cm": 6.0}]  # 6 and 667 m/m
    checked = run_checks(make_inputs(trees=rows), CENSUS)
    assert checked.trees["used"].all()
    assert checked.trees["height_m"].notna().tolist() == [True] + [False] * 7
    found = checked.findings
    assert (found["rule"] == "height impossible").sum() == 4
    assert found.loc[found["rule"] == "height against diameter", "value"].tolist() == ["3 m at 50 cm", "40 m at 6 cm"]


def test_unusual_heights_are_counted_in_one_note():
    # 14 and 233 m/m; the last is a sapling, for which the ratio says little
    rows = [{"height_m": 7.0, "dbh_cm": 50.0}, {"height_m": 14.0, "dbh_cm": 6.0}, {"height_m": 3.0, "dbh_cm": 1.0}]
    outcome = heights(make_inputs(trees=rows), CENSUS)
    assert rules(outcome) == ["height unusual"]
    assert not outcome.height_ignored.any()
    assert outcome.findings["message"].iloc[0].endswith("(metres over metres): 2. Their heights are used.")


def test_short_snags_are_no_fault():
    outcome = heights(make_inputs(trees=[{"height_m": 3.0, "dbh_cm": 60.0, "status": "dead"}]), CENSUS)
    assert rules(outcome) == []


def test_the_same_row_twice():
    rows = [{"tree": "7"}, {"tree": "7"}, {"tree": "8"}, {"tree": "7", "survey": "2019"}, {"tree": "7", "plot": "B"}]
    outcome = doubles(make_inputs(trees=rows), CENSUS)
    assert aside(outcome) == [1]
    assert rules(outcome) == ["duplicate row"]


def test_the_same_stem_number_twice_with_other_values():
    rows = [{"tree": "7", "stem": "1"}, {"tree": "7", "stem": "2"}, {"tree": "7", "stem": "1", "dbh_cm": 9.0}]
    outcome = doubles(make_inputs(trees=rows), CENSUS)
    assert aside(outcome) == [2]
    assert rules(outcome) == ["duplicate key"]


def test_stems_without_numbers_are_kept():
    rows = [{"tree": "7", "dbh_cm": 20.0}, {"tree": "7", "dbh_cm": 9.0}, {"tree": "7", "dbh_cm": 5.0}]
    outcome = doubles(make_inputs(trees=rows), CENSUS)
    assert aside(outcome) == []
    assert rules(outcome) == ["tree number repeated"]
    assert "without stem numbers: 2." in outcome.findings["message"].iloc[0]
    assert rules(doubles(make_inputs(trees=rows), make_settings(stems="combined"))) == []


def test_a_standing_row_goes_before_an_absent_one():
    rows = [{"tree": "7", "stem": "1", "status": "absent", "dbh_cm": np.nan}, {"tree": "7", "stem": "1"}]
    assert aside(doubles(make_inputs(trees=rows), CENSUS)) == [0]


def test_rows_without_tree_numbers_are_never_taken_for_doubles():
    outcome = doubles(make_inputs(trees=[{}, {}, {}]), CENSUS)
    assert aside(outcome) == []
    assert rules(outcome) == []


def test_a_sheet_entered_twice():
    sheet = [{"plot": "A", "dbh_cm": 10.0 + at} for at in range(4)]
    once = [{"plot": "B", "dbh_cm": 10.0 + at} for at in range(8)]
    outcome = doubles(make_inputs(trees=[*sheet, *once, *sheet]), CENSUS)
    assert rules(outcome) == ["plot entered twice"]
    assert outcome.findings["plot"].tolist() == ["A"]
    assert outcome.findings["row_id"].isna().all()
    assert not outcome.aside.any()


def test_visited_plots_without_trees():
    trees = [{"plot": "A"}, {"plot": "B", "status": "absent"}, {"plot": "C", "dbh_cm": np.nan}]
    trees += [{"plot": "D", "dbh_cm": np.nan, "status": "dead"}]
    plots = [{"plot": name} for name in "ABCDE"]
    checked = run_checks(make_inputs(trees=trees, plots=plots), CENSUS)
    found = checked.findings
    assert found.loc[found["rule"] == "no rows", "plot"].tolist() == ["B", "D", "E"]
    lost = found[found["rule"] == "all rows set aside"]
    assert lost["plot"].tolist() == ["C"]
    assert lost["severity"].tolist() == ["error"]
    assert rows_left(make_inputs(trees=[{"plot": "A"}]), CENSUS).findings.empty


def test_a_row_is_set_aside_once_by_the_first_rule_it_meets():
    checked = run_checks(make_inputs(trees=[{"plot": "Q", "dbh_cm": -1.0}], plots=[{"plot": "A"}]), CENSUS)
    found = checked.findings[~checked.findings["used"]]
    assert found["rule"].tolist() == ["plot unknown"]


def test_values_are_written_without_the_noise_of_unit_conversion():
    outcome = diameters(make_inputs(trees=[{"dbh_cm": -175.8 / 10 + 0.0}]), CENSUS)
    assert outcome.findings["value"].tolist() == ["-17.58"]


def test_tables_given_are_not_changed():
    inputs = make_inputs(trees=[{"dbh_cm": -1.0, "height_m": 0.0}, {"height_m": 0.0}])
    before = inputs.trees.copy()
    run_checks(inputs, CENSUS)
    pd.testing.assert_frame_equal(inputs.trees, before)
