"""Seasons of visits, and surveys longer than a year."""

from __future__ import annotations

import numpy as np
import pandas as pd
import pytest
from hypothesis import given
from hypothesis import strategies as st

from landcarbon.check.seasons import months_apart, season_findings
from landcarbon.findings import FINDING_COLUMNS

SURVEYS = pd.DataFrame({"survey": ["2014", "2019", "2024"]})


def visit_table(**dates: list[str | None]) -> pd.DataFrame:
    """Visits of plots a, b, c, ... at the surveys named by keywords y2014, y2019, ..."""
    parts = [
        pd.DataFrame({"survey": name[1:], "plot": list("abcdefghijkl")[: len(days)], "date": pd.to_datetime(days)})
        for name, days in dates.items()
    ]
    return pd.concat(parts, ignore_index=True).assign(visited=True)


def test_may_against_october() -> None:
    visits = visit_table(y2014=["2014-05-10", "2014-05-12", "2014-05-20"], y2019=["2019-10-12", "2019-05-15", None])
    found = season_findings(visits, SURVEYS)
    assert list(found.columns) == FINDING_COLUMNS
    assert list(found["rule"]) == ["seasons differ"]
    row = found.iloc[0]
    assert row["survey"] == "2014 to 2019"
    assert row["value"] == "1 of 2"
    assert "a (2014-05-10, 2019-10-12)" in row["message"]
    assert row["used"]


def test_round_the_year() -> None:
    """Common sense: late December and early January are the same season; so is the other hemisphere's summer."""
    visits = visit_table(y2014=["2014-12-28", "2015-01-05"], y2019=["2020-01-08", "2019-12-20"])
    assert season_findings(visits, SURVEYS).empty


def test_every_pair_of_surveys() -> None:
    visits = visit_table(y2014=["2014-04-01"], y2019=["2019-06-15"], y2024=["2024-09-30"])
    assert list(season_findings(visits, SURVEYS)["survey"]) == ["2014 to 2019", "2014 to 2024", "2019 to 2024"]


def test_many_plots_are_counted_and_a_few_named() -> None:
    visits = visit_table(y2014=["2014-05-01"] * 12, y2019=[f"2019-09-{day:02d}" for day in range(1, 13)])
    message = season_findings(visits, SURVEYS)["message"].iloc[0]
    assert message.count("2014-05-01") == 5
    assert "and 7 more" in message
    assert "l (2014-05-01, 2019-09-12)" in message  # the furthest apart come first


def test_long_survey() -> None:
    visits = visit_table(y2014=["2013-05-01", "2014-07-01"], y2019=["2019-05-01", "2019-08-01"])
    found = season_findings(visits, SURVEYS)
    row = found[found["rule"] == "survey longer than a year"].iloc[0]
    assert row["survey"] == "2014"
    assert "from 2013-05-01 to 2014-07-01, 1.2 years" in row["message"]


def test_other_plots_and_plots_not_visited_do_not_count() -> None:
    visits = visit_table(y2014=["2014-05-01", "2014-05-01"], y2019=["2019-10-01", "2019-10-01"])
    visits.loc[visits["survey"] == "2019", "plot"] = ["x", "b"]
    visits.loc[(visits["survey"] == "2019") & (visits["plot"] == "b"), "visited"] = False
    assert season_findings(visits, SURVEYS).empty


def test_nothing_to_look_at() -> None:
    empty = visit_table(y2014=["2014-05-01"]).iloc[:0]
    assert season_findings(empty, SURVEYS).empty
    assert season_findings(visit_table(y2014=[None, None]), SURVEYS).empty
    assert season_findings(visit_table(y2014=["2014-05-01"]).drop(columns="visited"), SURVEYS.iloc[:1]).empty


def test_categories_serve() -> None:
    visits = visit_table(y2014=["2014-05-10"], y2019=["2019-10-12"])
    visits = visits.astype({"survey": "category", "plot": "category"})
    assert len(season_findings(visits, SURVEYS)) == 1


@given(st.dates(pd.Timestamp("1950-01-01").date(), pd.Timestamp("2090-01-01").date()), st.integers(-40000, 40000))
def test_months_on_the_circle(day, shift: int) -> None:
    """Between 0 and 6, symmetric, and the same for a shift of whole years."""
    first = pd.Series([pd.Timestamp(day)])
    second = first + pd.Timedelta(days=shift)
    apart = months_apart(first, second)[0]
    assert 0 <= apart <= 6
    assert months_apart(second, first)[0] == pytest.approx(apart)
    later = first + pd.DateOffset(years=4)
    assert months_apart(first, later)[0] < 0.05
    assert np.isnan(months_apart(first, pd.Series([pd.NaT]))[0])
