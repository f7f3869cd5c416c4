"""Rates as ratios where intervals differ, and densities at a common date."""

from __future__ import annotations

import numpy as np
import pandas as pd
import pytest
from estimate_frames import POOL, cases, change, parcel_table, pick, plot_table, strata_table, survey_a_tables, whole
from hypothesis import given, settings
from hypothesis import strategies as st
from test_change_sums import SUMS, divided

from landcarbon.errors import UserError
from landcarbon.estimate.visit_times import MOVED, common_dates, plot_rates, to_common_date

DAYS = 365.25


def repeated(
    first: np.ndarray, second: np.ndarray, early: np.ndarray, late: np.ndarray, **columns: object
) -> pd.DataFrame:
    """Plots measured twice, `early` and `late` days after a first day."""
    start = pd.Timestamp("2000-01-01")
    return pd.concat(
        [
            plot_table(values, survey=name, date=start + pd.to_timedelta(days, unit="D"), **columns)
            for name, values, days in (("t1", first, early), ("t2", second, late))
        ],
        ignore_index=True,
    )


def test_ratio_of_sums_by_hand() -> None:
    """Published form: ratio of means of paired values (Lohr 2022, ch. 4: SE = s_e / (sqrt(n) mean x)), numpy."""
    first = np.array([50.0, 80, 120, 90, 60])
    gain = np.array([10.0, 30, 8, 25, 12])
    years = np.array([5.0, 12, 4, 10, 6])
    row = whole(change(repeated(first, first + gain, np.zeros(5), years * DAYS), strata_table({"S": 1}))[0])
    ratio = gain.sum() / years.sum()
    assert row["change_t_c_ha_yr"] == pytest.approx(ratio, rel=1e-9)
    residual = gain - ratio * years
    se = np.sqrt((residual**2).sum() / 4 / 5) / years.mean()
    assert row["change_t_c_ha_yr_se"] == pytest.approx(se, rel=1e-9)
    assert row["change_se"] == pytest.approx(gain.std(ddof=1) / np.sqrt(5))


def test_ratio_of_seedlings() -> None:
    """Published: case PS-08 (seedlings of 1994 per seedling of 1992; printed 0.2961 and 0.115, from memory).

    Elapsed "time" of a plot is its count of 1992 in days, its change the count of 1994.
    """
    x = np.array([1.0, 0, 8, 2, 76, 60, 25, 2, 1, 31])
    y = np.array([0.0, 0, 1, 2, 10, 15, 3, 2, 1, 27])
    row = whole(change(repeated(np.zeros(10), y, np.zeros(10), x), strata_table({"S": 1}))[0])
    assert round(row["change_t_c_ha_yr"] / DAYS, 4) == 0.2961
    assert round(row["change_t_c_ha_yr_se"] / DAYS, 3) == 0.115


def test_equal_intervals_give_the_error_of_change_over_time() -> None:
    """Identity: dates differ between plots, intervals do not."""
    rng = np.random.default_rng(1)
    first, early = rng.normal(100, 20, 30), rng.integers(0, 700, 30)
    stratum, parcel = rng.choice(list("ab"), 30), rng.choice(list("xy"), 30)
    table = repeated(first, first + rng.normal(9, 4, 30), early, early + 3650, stratum=stratum, parcel=parcel)
    frame, _ = change(table, strata_table({"a": 3, "b": 1}), parcel_table({"x": 1, "y": 2}))
    np.testing.assert_allclose(
        frame["change_t_c_ha_yr_se"], frame["change_se"] / frame["area_ha"] / frame["years"], rtol=1e-9
    )


def test_the_same_dates_for_all_change_nothing() -> None:
    """Identity: partly repeated plots, one date for each survey."""
    for sums in (None, SUMS):
        table, strata, parcels = survey_a_tables()
        table = divided(table) if sums else table
        frame, _ = change(table, strata, parcels, pools=list(sums or [POOL]), sums=sums)
        np.testing.assert_allclose(
            frame["change_t_c_ha_yr_se"], frame["change_se"] / frame["area_ha"] / frame["years"], rtol=1e-12
        )


def linearised(table: pd.DataFrame, inside: np.ndarray) -> float:
    """Brute force: variance of the rate of a domain of one stratum, all plots repeated, sizes alike (numpy)."""
    one, two = (table[table["survey"] == name].reset_index(drop=True) for name in ("t1", "t2"))
    gain = (two[POOL] - one[POOL]).to_numpy()
    years = (two["date"] - one["date"]).dt.days.to_numpy() / DAYS
    share = inside.astype(float)
    rate = (share * gain).sum() / (share * years).sum()
    residual = share * (gain - rate * years)
    n = len(gain)
    return n / (n - 1) * ((residual - residual.mean()) ** 2).sum() / (share * years).sum() ** 2


@settings(max_examples=15, deadline=None)
@given(st.integers(0, 1000))
def test_domains_against_brute_force(seed: int) -> None:
    rng = np.random.default_rng(seed)
    first = rng.normal(100, 20, 25)
    parcel = rng.choice(list("xyz"), 25)
    early, late = rng.integers(0, 900, 25), rng.integers(2000, 5000, 25)
    table = repeated(first, first + rng.normal(9, 4, 25), early, late, parcel=parcel)
    frame, _ = change(table, strata_table({"S": 3}), parcel_table({"x": 1, "y": 2, "z": 1}))
    rows = pick(frame, "parcel")
    for name in "xyz":
        if (parcel == name).sum() > 1:
            expected = np.sqrt(linearised(table, parcel == name))
            assert rows.loc[name, "change_t_c_ha_yr_se"] == pytest.approx(expected, rel=1e-8)
    expected = np.sqrt(linearised(table, np.ones(25, dtype=bool)))
    assert whole(frame)["change_t_c_ha_yr_se"] == pytest.approx(expected, rel=1e-9)


def test_sums_of_parts_agree_with_columns() -> None:
    """Identity: values cut in parts, intervals that differ."""
    table, strata, parcels = survey_a_tables()
    rng = np.random.default_rng(3)
    table["date"] += pd.to_timedelta(rng.integers(-700, 700, len(table)), unit="D")
    table = divided(table)
    for pool, parts in SUMS.items():
        table[pool] = table[parts].sum(axis=1)
    table["all"] = table[list(SUMS)].sum(axis=1)
    plain, _ = change(table, strata, parcels, pools=list(SUMS))
    frame, _ = change(table, strata, parcels, pools=list(SUMS), sums=SUMS)
    pd.testing.assert_frame_equal(frame, plain, rtol=1e-7)
    naive = plain["change_se"] / plain["area_ha"] / plain["years"]
    assert (np.abs(plain["change_t_c_ha_yr_se"] / naive - 1) > 0.001).any()


def test_growth_in_step_with_time_has_an_exact_rate() -> None:
    """Identity: every plot grows by 2 t C/ha/yr, whatever its interval: an error of the change, none of the rate."""
    rng = np.random.default_rng(4)
    first, years = rng.normal(100, 20, 12), rng.uniform(3, 14, 12)
    row = whole(change(repeated(first, first + 2 * years, np.zeros(12), years * DAYS), strata_table({"S": 1}))[0])
    assert row["change_t_c_ha_yr"] == pytest.approx(2)
    assert row["change_t_c_ha_yr_se"] == pytest.approx(0, abs=1e-9)
    assert row["change_se"] > 1


def test_mean_of_plot_rates_is_another_thing() -> None:
    table = repeated(np.array([50.0, 50]), np.array([60.0, 70]), np.zeros(2), np.array([2, 20]) * DAYS)
    rates = plot_rates(table, since="t1", until="t2")
    assert list(rates["plot"]) == ["p000", "p001"]
    assert rates[POOL].to_list() == pytest.approx([5.0, 1.0], rel=1e-3)
    row = whole(change(table, strata_table({"S": 1}))[0])
    assert row["change_t_c_ha_yr"] == pytest.approx(30 / 22, rel=1e-3)


def test_plot_rates_know_what_is_missing() -> None:
    table = repeated(np.array([5.0, 6, np.nan]), np.array([6.0, 8, 9]), np.zeros(3), np.array([0, 730.5, 730.5]))
    table.loc[0, "date"] = pd.NaT
    table = table[~((table["survey"] == "t2") & (table["plot"] == "p001"))]
    rates = plot_rates(table, since="t1", until="t2").set_index("plot")
    assert list(rates.index) == ["p000", "p002"]
    assert rates[POOL].isna().all()
    assert rates.loc["p002", "years"] == pytest.approx(2)


def visits(*rows: tuple[str, str, str, float], **columns: object) -> pd.DataFrame:
    survey, plot, date, value = zip(*rows, strict=True)
    table = plot_table(list(value), survey=list(survey), plot=list(plot), date=pd.to_datetime(list(date)), **columns)
    return table.rename(columns={POOL: "above_ground.trees"}).drop(columns="all")


TREES = "above_ground.trees"


def test_interpolation_between_own_visits() -> None:
    """By hand: halfway and a quarter of the way between two visits."""
    table = visits(
        ("t1", "a", "2010-01-01", 100), ("t2", "a", "2020-01-01", 140),
        ("t1", "b", "2011-01-01", 50), ("t2", "b", "2012-01-01", 60),
        ("t1", "c", "2010-01-01", 10), ("t2", "c", "2010-12-31", 10),
    )  # fmt: skip
    moved, findings = to_common_date(table, {"t1": "2011-07-02"})
    rows = moved[moved["survey"] == "t1"].set_index("plot")
    day = (pd.Timestamp("2011-07-02") - pd.Timestamp("2010-01-01")).days
    assert rows.loc["a", TREES] == pytest.approx(100 + 40 * day / 3652)
    assert rows.loc["b", TREES] == pytest.approx(50 + 10 * 182 / 365)
    assert rows.loc["c", TREES] == 10
    assert rows["date_kind"].to_list() == ["interpolated", "interpolated", "not moved"]
    assert rows["date"].to_list() == [pd.Timestamp("2011-07-02")] * 2 + [pd.Timestamp("2010-01-01")]
    same = moved[moved["survey"] == "t2"]
    assert set(same["date_kind"]) == {"as visited"}
    pd.testing.assert_frame_equal(same[table.columns], table[table["survey"] == "t2"])
    told = findings.set_index("rule")
    assert "2 of 3 plots of survey t1" in told.loc["moved to a common date", "message"]
    assert told.loc["not moved to the common date", "message"].endswith("two visits of theirs: c.")


def test_never_beyond_the_visits_without_saying_so() -> None:
    table = visits(("t1", "a", "2010-01-01", 100), ("t2", "a", "2020-01-01", 140), ("t2", "b", "2019-01-01", 30))
    kept, _ = to_common_date(table, {"t2": "2021-01-01"})
    assert kept[TREES].to_list() == [100, 140, 30]
    assert kept["date_kind"].to_list() == ["as visited", "not moved", "not moved"]
    drawn, findings = to_common_date(table, {"t2": "2021-01-01", "t1": "1900-01-01"}, extrapolate=True)
    assert drawn[TREES].to_list() == pytest.approx([0.0, 140 + 40 * 366 / 3652, 30])  # no stock below zero
    assert drawn["date_kind"].to_list() == ["extrapolated", "extrapolated", "not moved"]
    rules = findings[["survey", "rule"]].itertuples(index=False, name=None)
    assert set(rules) == {
        ("t1", "beyond the visits of a plot"),
        ("t2", "beyond the visits of a plot"),
        ("t2", "not moved to the common date"),
    }


def test_a_visit_on_the_common_date_stays() -> None:
    table = visits(("t1", "a", "2010-01-01", 100), ("t2", "a", "2020-01-01", 140))
    moved, findings = to_common_date(table, {"t1": pd.Timestamp("2010-01-01")})
    assert moved["date_kind"].to_list() == ["as visited", "as visited"]
    assert findings.empty


def test_parts_measured_once_keep_their_values() -> None:
    table = visits(("t1", "a", "2010-01-01", 100), ("t2", "a", "2012-01-01", 120))
    table["soil.soil"] = [70.0, np.nan]
    moved, findings = to_common_date(table, {"t1": "2011-01-01"})
    assert moved[TREES].to_list() == pytest.approx([110, 120])
    assert moved.loc[0, "soil.soil"] == 70
    assert np.isnan(moved.loc[1, "soil.soil"])
    assert "part measured once" in set(findings["rule"])


def test_a_part_missing_at_the_neighbouring_visit_uses_the_next() -> None:
    table = visits(*[(f"t{i}", "a", f"{2010 + 2 * i}-01-01", 10.0 * i) for i in range(4)])
    table["soil.soil"] = [0.0, np.nan, np.nan, 60]
    moved, _ = to_common_date(table, {"t0": "2011-01-01"})
    assert moved.loc[0, "soil.soil"] == pytest.approx(60 * 365 / 2191)
    assert moved["soil.soil"].isna().to_list() == [False, True, True, False]


def test_a_row_moves_as_a_whole_or_not_at_all() -> None:
    table = visits(*[(f"t{i}", "a", f"{2010 + 2 * i}-01-01", 10.0 * i) for i in range(3)])
    table["soil.soil"] = [5.0, 6, np.nan]
    moved, _ = to_common_date(table, {"t1": "2013-01-01"})  # trees lie between visits, soil does not
    assert moved.loc[1, "date_kind"] == "not moved"
    assert moved.loc[1, [TREES, "soil.soil"]].to_list() == [10, 6]


def test_missing_dates_are_named() -> None:
    table = visits(("t1", "a", "2010-01-01", 100), ("t2", "a", "2012-01-01", 120))
    table.loc[0, "date"] = pd.NaT
    moved, findings = to_common_date(table, {"t1": "2011-01-01"})
    assert moved.loc[0, TREES] == 100
    assert pd.isna(moved.loc[0, "date"])
    assert set(findings["rule"]) == {"visit without a date"}


def test_wrong_date() -> None:
    with pytest.raises(UserError, match="common date 'soon' of survey 't1' is not a date"):
        to_common_date(visits(("t1", "a", "2010-01-01", 1)), {"t1": "soon"})


def test_common_dates_are_mean_dates() -> None:
    table = visits(("t1", "a", "2010-01-01", 1), ("t1", "b", "2010-01-03", 1), ("t2", "a", "2012-01-01", 2))
    table.loc[2, "date"] = pd.NaT
    assert common_dates(table, ["t1", "t2", "t9"]) == {"t1": pd.Timestamp("2010-01-02")}


def test_empty_table() -> None:
    table = visits(("t1", "a", "2010-01-01", 1)).iloc[:0]
    moved, findings = to_common_date(table, {"t1": "2010-01-01"})
    assert len(moved) == 0
    assert findings.empty


@settings(max_examples=25, deadline=None)
@given(st.integers(0, 10_000))
def test_straight_growth_is_kept_and_bounds_hold(seed: int) -> None:
    """Plots that grow in a straight line lie on it at the common date; values stay between those of the visits."""
    rng = np.random.default_rng(seed)
    plots, surveys = 15, 4
    days = np.sort(rng.integers(0, 7000, (plots, surveys)), axis=1)
    start, rate = rng.uniform(10, 100, plots), rng.uniform(0, 0.01, plots)
    keep = rng.uniform(size=days.shape) < 0.8
    plot, survey = np.nonzero(keep)
    table = plot_table(
        (start[:, None] + rate[:, None] * days)[keep],
        survey=[f"t{i}" for i in survey],
        plot=[f"p{i}" for i in plot],
        date=pd.Timestamp("2000-01-01") + pd.to_timedelta(days[keep], unit="D"),
    ).rename(columns={POOL: TREES})
    table = table.drop(columns="all").sample(frac=1, random_state=seed)
    target = {f"t{i}": pd.Timestamp("2000-01-01") + pd.Timedelta(days=1000 + 1500 * i) for i in range(surveys)}
    moved, _ = to_common_date(table, target)
    assert moved.index.equals(table.index)
    assert set(moved["date_kind"].astype(str)) <= set(MOVED)
    here = moved["date_kind"].astype(str) == "interpolated"
    number = moved["plot"].str[1:].astype(int).to_numpy()
    day = (moved["date"] - pd.Timestamp("2000-01-01")).dt.days.to_numpy()
    np.testing.assert_allclose(moved[TREES], start[number] + rate[number] * day, rtol=1e-9)
    ends = table.groupby("plot")[TREES].agg(["min", "max"])
    assert (moved[TREES] >= moved["plot"].map(ends["min"]) - 1e-9).all()
    assert (moved[TREES] <= moved["plot"].map(ends["max"]) + 1e-9).all()
    assert (moved.loc[here, "date"] == moved.loc[here, "survey"].map(target)).all()


def test_reference_case_is_there() -> None:
    """The sample of the tests above: 61 plots of survey_A, dates as given there."""
    assert "A-CHG-1" in cases("computed")
