"""Checks of the same tree between surveys. Data are invented; published limits are named beside the test."""

from __future__ import annotations

import numpy as np
import pytest
from builders import make_inputs, make_settings

from landcarbon.check import run_checks
from landcarbon.check.pairs import shrink_limit_cm
from landcarbon.check.remeasured import between_surveys

CENSUS = make_settings()


def tree(number: int | str, survey: str, dbh: float, **fields) -> dict:
    return {"tree": str(number), "survey": survey, "dbh_cm": dbh, "date": f"{survey}-07-01", **fields}


def found(rows, rule, settings=CENSUS, **tables):
    checked = run_checks(make_inputs(trees=rows, **tables), settings)
    return checked.findings[checked.findings["rule"] == rule]


def test_shrink_limit_as_published():
    # published, secondary: Condit et al. (2004) screening rule, 4 * (0.9036 + 0.006214 * 300) = 11.07 mm for 300 mm,
    # printed in the facts as "limit -11.1 mm"
    assert shrink_limit_cm(np.array([30.0])) == pytest.approx(1.11, abs=0.005)


@pytest.mark.parametrize(("later", "expected"), [(28.88, ["shrank"]), (28.90, ["shrank a little"]), (30.0, [])])
def test_loss_of_diameter(later, expected):
    # 30 cm may lose 1.107 cm (see above): to 28.893 cm
    outcome = between_surveys(make_inputs(trees=[tree(1, "2014", 30.0), tree(1, "2019", later)]), CENSUS)
    assert outcome.findings["rule"].tolist() == expected
    assert not outcome.aside.any()


def test_growth_beyond_75_mm_a_year():
    # published, secondary: Condit et al. (2004), 75 mm a year; 2014-07-01 to 2019-07-01 is 4.999 years
    rows = [tree(1, "2014", 30.0), tree(1, "2019", 67.6), tree(2, "2014", 30.0), tree(2, "2019", 67.4)]
    fast = found(rows, "grew too fast")
    assert fast["tree"].tolist() == ["1"]
    assert fast["survey"].tolist() == ["2019"]
    assert fast["value"].tolist() == ["30 -> 67.6 cm, 75 mm/yr"]
    assert fast["used"].all()


def test_years_come_from_visits_where_trees_have_no_dates():
    rows = [{"tree": "1", "survey": "a", "dbh_cm": 30.0}, {"tree": "1", "survey": "b", "dbh_cm": 45.0}]
    visits = [{"survey": "a", "date": "2014-07-01"}, {"survey": "b", "date": "2015-07-01"}]
    surveys = [{"survey": "a"}, {"survey": "b"}]
    assert len(found(rows, "grew too fast", visits=visits, surveys=surveys)) == 1
    visits[1]["date"] = "2019-07-01"
    assert len(found(rows, "grew too fast", visits=visits, surveys=surveys)) == 0
    # nothing known about time: growth is not judged
    assert len(found(rows, "grew too fast", surveys=surveys)) == 0


def test_surveys_are_taken_in_the_order_of_time_not_of_names():
    rows = [{"tree": "1", "survey": "first", "dbh_cm": 40.0}, {"tree": "1", "survey": "again", "dbh_cm": 30.0}]
    shrunk = found(rows, "shrank", surveys=[{"survey": "first"}, {"survey": "again"}])
    assert shrunk["survey"].tolist() == ["again"]


@pytest.mark.parametrize(
    ("before", "after", "at_fault"), [(30.0, 312.0, 1), (30.0, 3.1, 1), (305.0, 31.2, 0), (3.0, 31.0, 0)]
)
def test_slip_of_a_decimal(before, after, at_fault):
    others = [tree(n, year, 20.0 + n) for n in range(2, 12) for year in ("2014", "2019")]
    rows = [tree(1, "2014", before), tree(1, "2019", after), *others]
    checked = run_checks(make_inputs(trees=rows), CENSUS)
    slip = checked.findings[checked.findings["rule"] == "diameter slip"]
    assert slip["row_id"].tolist() == [at_fault]
    assert slip["severity"].tolist() == ["error"]
    assert slip["value"].tolist() == [f"{before:g} -> {after:g} cm"]
    assert np.flatnonzero(~checked.trees["used"]).tolist() == [at_fault]


def test_a_third_survey_settles_which_figure_has_slipped():
    # the species is small, so its median would blame the good figures
    small = [tree(n, year, 3.0 + 0.01 * n) for n in range(2, 30) for year in ("2009", "2014", "2019")]
    rows = [tree(1, "2009", 30.0), tree(1, "2014", 3.1), tree(1, "2019", 31.5), *small]
    slip = found(rows, "diameter slip")
    assert slip["row_id"].tolist() == [1]


def test_a_slip_below_the_tally_limit_is_told_as_a_slip():
    nested = make_settings(kind="nested", dbh_min_cm=[7.0])
    rows = [tree(1, "2014", 41.0), tree(1, "2019", 4.2), tree(2, "2014", 12.0), tree(2, "2019", 12.5)]
    slip = found(rows, "diameter slip", nested)
    assert slip["row_id"].tolist() == [1]
    assert found(rows, "below tally limit", nested).empty


def test_a_fast_sapling_is_no_slip():
    # 1.2 to 12 cm in five years is 22 mm a year
    assert found([tree(1, "2014", 1.2), tree(1, "2019", 12.0)], "diameter slip").empty


def test_a_new_shoot_after_a_gap_is_no_slip():
    rows = [tree(1, "2009", 21.7), tree(1, "2014", np.nan, status="absent"), tree(1, "2019", 2.5)]
    assert found(rows, "diameter slip").empty
    assert found(rows, "shrank")["row_id"].tolist() == [2]


def test_a_broken_snag_is_no_slip():
    rows = [tree(1, "2014", 30.0), tree(1, "2019", 3.0, status="dead")]
    assert found(rows, "diameter slip").empty


@pytest.mark.parametrize(
    ("factor", "words"), [(10.0, "millimetres"), (0.1, "centimetres"), (1 / 2.54, "inches"), (3.14159, "girths")]
)
def test_a_whole_survey_in_another_unit(factor, words):
    rows = [tree(n, "2014", 20.0 + n) for n in range(30)] + [tree(n, "2019", (20.5 + n) * factor) for n in range(30)]
    checked = run_checks(make_inputs(trees=rows), CENSUS)
    unit = checked.findings[checked.findings["rule"] == "unit of a survey"]
    assert len(unit) == 1
    assert words in unit["message"].iloc[0]
    # one fault of the file, not thirty of the trees
    assert not checked.findings["rule"].isin(["diameter slip", "shrank", "grew too fast"]).any()
    assert checked.trees["used"].all()


def test_numbers_given_anew_in_each_survey_are_recognised():
    generator = np.random.default_rng(5)
    species = ["OAK", "BEECH", "ASH"]
    rows = [
        tree(n, year, float(generator.uniform(10, 50)), species=species[generator.integers(3)])
        for year in ("2014", "2019")
        for n in range(60)
    ]
    checked = run_checks(make_inputs(trees=rows), CENSUS)
    note = checked.findings[checked.findings["rule"] == "tree numbers not permanent"]
    assert len(note) == 1
    assert "another species" in note["message"].iloc[0]
    assert not checked.findings["rule"].isin(["diameter slip", "shrank", "species changed", "vanished"]).any()
    assert checked.trees["used"].all()


def test_species_changed():
    rows = [tree(1, "2014", 30.0, species="OAK"), tree(1, "2019", 31.0, species="ASH")]
    changed = found(rows, "species changed")
    assert changed["value"].tolist() == ["OAK -> ASH"]
    assert changed["used"].all()


@pytest.mark.parametrize("dbh", [30.0, 0.0, np.nan])
def test_alive_again(dbh):
    # a dead row without a diameter is set aside, and still tells that the tree was dead
    rows = [tree(1, "2014", dbh, status="dead"), tree(1, "2019", 31.0)]
    assert found(rows, "alive again")["row_id"].tolist() == [1]


def test_absent_in_between():
    rows = [tree(1, "2009", 30.0), tree(1, "2014", np.nan, status="absent"), tree(1, "2019", 31.0)]
    rows += [tree(2, "2009", np.nan, status="absent"), tree(2, "2014", 1.0), tree(2, "2019", 2.0)]
    once = found(rows, "missed once")
    assert len(once) == 1
    assert once["message"].iloc[0].endswith("in between: 1. The stock in between lacks them.")


def test_vanished_trees_are_counted_by_plot():
    rows = [tree(n, "2014", 20.0) for n in range(1, 9)] + [
        tree(1, "2019", 21.0),
        tree(2, "2019", np.nan, status="absent"),
    ]
    vanished = found(rows, "vanished")
    assert vanished["plot"].tolist() == ["A"]
    assert (
        vanished["message"]
        .iloc[0]
        .startswith("Live trees of survey 2014 without a row in survey 2019 although the plot was visited: 6 (num")
    )
    assert "6 (numbers 3, 4, 5, 6, 7, …)" in vanished["message"].iloc[0]
    assert vanished["value"].tolist() == ["6 trees"]
    # file and line of the first of them, in the survey it was last seen
    assert vanished[["file", "row"]].to_numpy().tolist() == [["trees.csv", 4]]
    assert vanished["row_id"].isna().all()


def test_trees_of_a_plot_that_was_not_visited_have_not_vanished():
    rows = [tree(1, "2014", 20.0), tree(1, "2024", 22.0), tree(2, "2014", 20.0)]
    visits = [
        {"survey": "2014", "plot": "A"},
        {"survey": "2019", "plot": "A", "visited": False},
        {"survey": "2024", "plot": "A"},
    ]
    vanished = found(rows, "vanished", visits=visits, surveys=[{"survey": y} for y in ("2014", "2019", "2024")])
    assert vanished["survey"].tolist() == ["2024"]
    assert vanished["value"].tolist() == ["1 tree"]
    assert "1 (numbers 2)" in vanished["message"].iloc[0]


def test_a_tree_set_aside_has_not_vanished():
    rows = [tree(1, "2014", 20.0), tree(1, "2019", np.nan)]
    assert found(rows, "vanished").empty


def test_a_thick_newcomer_was_missed_before():
    # 75 mm a year for five years from the tally limit of 7 cm: up to 44.5 cm could have grown in
    nested = make_settings(kind="nested", dbh_min_cm=[7.0])
    rows = [tree(1, "2014", 20.0), tree(1, "2019", 21.0), tree(2, "2019", 50.0), tree(3, "2019", 44.0)]
    missed = found(rows, "missed before", nested)
    assert "2019 and are too thick to have grown in since 2014: 1 (numbers 2)" in missed["message"].iloc[0]
    assert missed["row"].tolist() == [4]


def test_a_copied_sheet():
    rows = [tree(n, year, 20.0 + n) for n in range(6) for year in ("2014", "2019")]
    rows += [
        tree(n, year, 20.0 + n + (year == "2019") * 0.1 * n, plot="B") for n in range(6) for year in ("2014", "2019")
    ]
    same = found(rows, "same diameters")
    assert same["plot"].tolist() == ["A"]
    assert same["survey"].tolist() == ["2019"]


def test_one_survey_has_nothing_to_compare():
    outcome = between_surveys(make_inputs(trees=[tree(1, "2014", 20.0)]), CENSUS)
    assert outcome.findings.empty
    assert outcome.aside is None


def test_stems_that_share_a_number_are_not_compared():
    rows = [tree(1, "2014", 30.0), tree(1, "2014", 12.0), tree(1, "2019", 12.5), tree(1, "2019", 30.5)]
    checked = run_checks(make_inputs(trees=rows), CENSUS)
    assert not checked.findings["rule"].isin(["shrank", "grew too fast", "diameter slip"]).any()
