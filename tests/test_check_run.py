"""All checks together: nothing is lost, the order of rows does not matter, every rule has its words and source."""

from __future__ import annotations

import time
from dataclasses import replace
from pathlib import Path

import numpy as np
import pandas as pd
import pytest
from builders import make_inputs, make_settings, make_trees
from hypothesis import HealthCheck, given, settings
from hypothesis import strategies as st

from landcarbon.check import reconcile, run_checks
from landcarbon.check.rules import load_rules, rules_page
from landcarbon.errors import LandcarbonError
from landcarbon.findings import SEVERITIES, join_findings, make_findings

CENSUS = make_settings()
NESTED = make_settings(kind="nested", dbh_min_cm=[5.0, 20.0])
KNOWN = {"read", "secondary", "memory", "no source", "none"}

ROWS = st.lists(
    st.fixed_dictionaries(
        {
            "survey": st.sampled_from(["2014", "2019"]),
            "plot": st.sampled_from(["A", "B", "C", "", "Q"]),
            "tree": st.sampled_from(["", "1", "2", "3"]),
            "stem": st.sampled_from(["", "1"]),
            "species": st.sampled_from(["OAK", "ASH", ""]),
            "status": st.sampled_from(["live", "live", "dead", "absent"]),
            "dbh_cm": st.sampled_from([20.0, 21.5, 205.0, 2.0, 0.0, -1.0, np.nan, np.inf, 5000.0]),
            "height_m": st.sampled_from([np.nan, 15.0, 0.5, 999.0]),
            "weight": st.sampled_from([1.0, 1.0, -1.0]),
        }
    ),
    max_size=25,
)
PLOTS = [{"plot": "A"}, {"plot": "B", "inside": False}, {"plot": "C"}]
VISITS = [{"survey": s, "plot": p, "visited": (s, p) != ("2019", "C")} for s in ("2014", "2019") for p in "ABC"]
SURVEYS = [{"survey": "2014"}, {"survey": "2019"}]


def inputs_of(rows):
    return make_inputs(trees=rows, plots=PLOTS, visits=VISITS, surveys=SURVEYS)


@settings(max_examples=25, deadline=None, suppress_health_check=[HealthCheck.too_slow])
@given(rows=ROWS, design=st.sampled_from([CENSUS, NESTED]))
def test_nothing_is_lost(rows, design):
    checked = run_checks(inputs_of(rows), design)
    balance = reconcile(checked)
    assert set(balance["table"]) <= {"trees"}
    assert balance["rows_read"].sum() == len(rows)
    assert (balance["used"] + balance["set_aside"]).equals(balance["rows_read"])
    assert (balance["balance"] == 0).all()
    assert balance["set_aside"].sum() == (~checked.trees["used"]).sum()
    aside = checked.findings[~checked.findings["used"] & checked.findings["row_id"].notna()]
    assert sorted(aside["row_id"]) == checked.trees.loc[~checked.trees["used"], "row_id"].tolist()
    counted = checked.trees[checked.trees["used"] & (checked.trees["status"] != "absent")]
    assert (counted["dbh_cm"] > 0).all()
    assert np.isfinite(counted["dbh_cm"]).all()


@settings(max_examples=12, deadline=None, suppress_health_check=[HealthCheck.too_slow])
@given(rows=ROWS, seed=st.integers(0, 1000))
def test_the_order_of_rows_in_the_table_does_not_matter(rows, seed):
    inputs = inputs_of(rows)
    order = np.random.default_rng(seed).permutation(len(rows))
    shuffled = replace(inputs, trees=inputs.trees.iloc[order].reset_index(drop=True))
    one, other = run_checks(inputs, CENSUS), run_checks(shuffled, CENSUS)
    assert set(one.trees.loc[~one.trees["used"], "row_id"]) == set(other.trees.loc[~other.trees["used"], "row_id"])
    assert sorted(one.findings["rule"]) == sorted(other.findings["rule"])


@settings(max_examples=8, deadline=None, suppress_health_check=[HealthCheck.too_slow])
@given(rows=ROWS)
def test_checking_twice_sets_nothing_more_aside(rows):
    once = run_checks(inputs_of(rows), NESTED)
    twice = run_checks(once, NESTED)
    assert twice.trees["used"].tolist() == once.trees["used"].tolist()


def test_sound_data_have_no_findings():
    rows = [
        {"plot": plot, "tree": str(n), "survey": year, "dbh_cm": 20.0 + n + grown, "height_m": 18.0}
        for plot in "AB"
        for n in range(5)
        for year, grown in (("2014", 0.0), ("2019", 1.1 + 0.1 * n))
    ]
    visits = [{"survey": s, "plot": p, "date": f"{s}-07-01"} for s in ("2014", "2019") for p in "AB"]
    checked = run_checks(make_inputs(trees=rows, visits=visits), CENSUS)
    assert checked.findings.empty
    assert checked.trees["used"].all()


@pytest.mark.parametrize("survey_count", [1, 3])
def test_no_rows_at_all(survey_count):
    surveys = [{"survey": str(2000 + at)} for at in range(survey_count)]
    checked = run_checks(make_inputs(surveys=surveys), NESTED)
    assert reconcile(checked)["rows_read"].tolist() == [0] * survey_count
    assert (checked.findings["rule"] == "no visit").sum() == survey_count


def test_findings_of_reading_stay_in_front():
    before = make_findings("number expected", severity="error", table="trees", message="made up")
    checked = run_checks(make_inputs(trees=[{"dbh_cm": -1.0}], findings=before), CENSUS)
    assert checked.findings["rule"].tolist()[0] == "number expected"
    assert len(checked.findings) > 1


def test_rows_set_aside_by_reading_are_left_alone():
    trees = make_trees([{"dbh_cm": np.nan, "used": False, "survey": ""}, {}])
    read = make_findings(
        "unknown survey", trees.iloc[:1], severity="error", table="trees", used=False, message="made up"
    )
    inputs = make_inputs(trees=trees, surveys=[{"survey": "2014"}], findings=read)
    checked = run_checks(inputs, CENSUS)
    assert (checked.findings["row_id"] == 0).sum() == 1
    balance = reconcile(checked).set_index("survey")
    assert balance.loc["", "set_aside"] == 1
    assert balance.loc["2014", "live"] == 1


def test_a_row_set_aside_without_a_finding_is_our_fault():
    inputs = make_inputs(trees=[{"used": False}])
    with pytest.raises(LandcarbonError, match="1 tree rows were set aside without a finding, first row_id 0"):
        reconcile(inputs)


def test_a_status_outside_the_three_is_our_fault():
    with pytest.raises(LandcarbonError, match="do not add up"):
        reconcile(make_inputs(trees=[{"status": "asleep"}]))


def sample_rows(surveys, used):
    """Rows of a sample table on plot A."""
    count = len(surveys)
    return pd.DataFrame(
        {
            "row_id": np.arange(count),
            "file": "stumps.csv",
            "row": np.arange(count) + 2,
            "survey": pd.Series(surveys, dtype="str"),
            "plot": pd.Series(["A"] * count, dtype="str"),
            "used": used,
        }
    )


def aside(rows, table):
    return make_findings("made up", rows, severity="error", table=table, used=False, message="made up")


def test_rows_of_samples_are_counted_by_table_and_survey():
    stumps = sample_rows(["2014", "2014", "2019", ""], [True, True, True, False])
    soil = sample_rows(["2019"], [True])
    # the last row was set aside by reading, the second by the module of its pool, which cannot mark it
    findings = join_findings([aside(stumps.iloc[[3]], "stumps"), aside(stumps.iloc[[1]], "stumps")])
    inputs = make_inputs(
        trees=[{"survey": "2014"}, {"survey": "2019"}], findings=findings, samples={"stumps": stumps, "soil": soil}
    )
    balance = reconcile(inputs)
    assert balance["table"].tolist() == ["trees", "trees", "stumps", "stumps", "stumps", "soil"]
    assert balance["survey"].tolist() == ["2014", "2019", "2014", "2019", "", "2019"]
    assert balance["rows_read"].tolist() == [1, 1, 2, 1, 1, 1]
    assert balance["used"].tolist() == [1, 1, 1, 1, 0, 1]
    assert balance["set_aside"].tolist() == [0, 0, 1, 0, 1, 0]
    assert (balance["balance"] == 0).all()
    assert balance.loc[balance["table"] != "trees", ["live", "dead", "absent"]].isna().all(axis=None)


def test_findings_of_another_table_set_no_sample_aside():
    stumps = sample_rows(["2014"], [True])
    inputs = make_inputs(trees=[{"used": False}], findings=aside(stumps, "trees"), samples={"stumps": stumps})
    balance = reconcile(inputs).set_index("table")
    assert balance.loc["stumps", "used"] == 1
    assert balance.loc["trees", "set_aside"] == 1


def test_a_sample_set_aside_without_a_finding_is_our_fault():
    inputs = make_inputs(samples={"stumps": sample_rows(["2014", "2014"], [True, False])})
    with pytest.raises(LandcarbonError, match="1 rows of stumps were set aside without a finding"):
        reconcile(inputs)


def test_a_table_of_samples_without_rows_has_no_line():
    balance = reconcile(make_inputs(samples={"stumps": sample_rows([], [])}))
    assert set(balance["table"]) == {"trees"}


def test_every_rule_is_complete():
    rules = load_rules()
    assert len(rules) > 50
    for rule in rules.values():
        assert rule.severity in SEVERITIES
        assert rule.known in KNOWN
        assert rule.message
        assert rule.remedy or rule.severity == "note"
        # a figure needs a source, a source needs to say how it is known
        assert not rule.limits or rule.source
        assert (rule.known == "none") or rule.source
        # a row set aside is an error, unless there was nothing to count; some of these are worth a look all the same
        looked_at = ("below tally limit", "duplicate row", "plot outside parcels")
        assert rule.used or rule.severity in ("error", "note") or rule.name in looked_at


def test_limits_of_publications_as_printed():
    # published, secondary: growth screening rule after Condit et al. (2004), as quoted in the facts (QA-19, QA-20)
    rules = load_rules()
    assert rules["grew too fast"].limits == {"mm_per_year": 75.0}
    assert rules["shrank"].limits == {"multiple": 4.0, "sd_mm": 0.9036, "sd_mm_per_mm": 0.006214}


def test_published_limits_agree_with_the_facts(reference):
    table = pd.read_csv(reference / "facts" / "field" / "measurement_error_and_qa.csv").set_index("id")
    assert float(table.loc["QA-19", "value"]) == load_rules()["grew too fast"].limits["mm_per_year"]
    assert table.loc["QA-20", "value"] == "SD = 0.9036 + 0.006214*dbh1"
    assert "dbh1 - 4*SD" in table.loc["QA-20", "statistic"]


def test_the_page_of_rules_is_up_to_date():
    page = Path(__file__).resolve().parent.parent / "docs" / "findings.md"
    if not page.exists():
        pytest.skip("the docs folder is not beside the tests")
    assert page.read_text(encoding="utf-8") == rules_page()


def test_a_large_census_is_checked_quickly():
    # limit set for a slow machine; 220,000 rows take a little over a second on one core of 2024
    number, plots = 110_000, 640
    generator = np.random.default_rng(1)
    dbh = generator.lognormal(2.0, 0.8, number) + 1.0
    tree = np.arange(number).astype(str)
    base = {"plot": np.char.add("P", (np.arange(number) % plots).astype(str)), "tree": tree}
    then = {"dbh_cm": dbh, "status": np.where(dbh < 2.0, "dead", "live")}
    now = {"dbh_cm": np.where(dbh < 3.0, 0.0, dbh + 0.4), "status": np.where(dbh < 3.0, "dead", "live")}
    frames = [pd.DataFrame({**base, "survey": "2014", **then}), pd.DataFrame({**base, "survey": "2019", **now})]
    table = pd.concat(frames, ignore_index=True)
    sound = make_trees([{}])
    table = table.assign(**{name: sound[name].iloc[0] for name in sound.columns if name not in table})
    table["row_id"] = np.arange(len(table))
    inputs = make_inputs(trees=table)
    start = time.perf_counter()
    checked = run_checks(inputs, CENSUS)
    assert time.perf_counter() - start < 10.0
    assert (checked.findings["rule"] == "dead without diameter").sum() > 5_000
    assert len(join_findings([checked.findings])) == len(checked.findings)
