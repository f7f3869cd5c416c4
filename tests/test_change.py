"""Change: pairing, elapsed time, common area, signs, and what is said where there is no figure."""

from __future__ import annotations

import numpy as np
import pandas as pd
import pytest
from estimate_frames import NAME, POOL, change, parcel_table, pick, plot_table, strata_table, survey_a_tables, whole

from landcarbon.change import CHANGE_COLUMNS
from landcarbon.errors import UserError

RATES = ["change_t_c_yr", "change_t_c_ha_yr", "change_t_c_ha_yr_se", "co2_t_yr"]
AMOUNTS = ["change_t_c", "change_se", "change_low", "change_high"]


def two_dates(
    first: list[float],
    second: list[float],
    dates: tuple[object, object] = ("2010-01-01", "2020-01-01"),
    **columns: object,
) -> pd.DataFrame:
    """The same plots at two surveys."""
    parts = [
        plot_table(values, survey=survey, date=pd.to_datetime(date), **columns)
        for values, survey, date in zip((first, second), ("t1", "t2"), dates, strict=True)
    ]
    return pd.concat(parts, ignore_index=True)


def test_rows_and_signs() -> None:
    table = two_dates([10.0, 20.0, 30.0], [13.0, 25.0, 34.0], parcel="x")
    frame, findings = change(table, strata_table({"S": 100}), parcel_table({"x": 50}))
    assert list(frame.columns) == CHANGE_COLUMNS
    assert list(frame[["by", "unit", "pool"]].itertuples(index=False, name=None)) == [
        (by, unit, pool)
        for by, unit in (("inventory", NAME), ("stratum", "S"), ("parcel", "x"))
        for pool in (POOL, "all")
    ]
    row = whole(frame)
    assert row["change_t_c"] == pytest.approx(400)  # mean of 3, 5 and 4 on 100 ha, by hand
    assert row["change_se"] == pytest.approx(100 / np.sqrt(3))
    years = 3652 / 365.25  # ten calendar years with two leap days
    assert row["years"] == pytest.approx(years)
    assert row["change_t_c_yr"] == pytest.approx(400 / years)
    assert row["change_t_c_ha_yr"] == pytest.approx(4 / years)
    # published: IPCC 2006, vol. 4, section 2.2.3: 44/12, a gain of the land is a removal and negative
    assert row["co2_t_yr"] == pytest.approx(-44 / 12 * 400 / years)
    assert findings.empty


def test_elapsed_time_of_repeated_plots_is_their_own() -> None:
    dates = (["2010-01-01", "2011-01-01", "2012-01-01"], ["2020-01-01", "2021-01-01", "2026-01-01"])
    row = whole(change(two_dates([1.0, 2, 3], [2.0, 3, 5], dates), strata_table({"S": 1}))[0])
    own = np.array(dates[1], dtype="datetime64[D]") - np.array(dates[0], dtype="datetime64[D]")
    assert row["years"] == pytest.approx(own.astype(float).mean() / 365.25)


def test_elapsed_time_of_other_plots_is_between_mean_dates() -> None:
    table = two_dates([1.0, 2, 3], [2.0, 3, 5])
    table["plot"] = [f"n{number}" for number in range(6)]
    table["date"] = pd.to_datetime(["2010-01-01", "2010-01-01", "2010-01-04", "2011-01-01", "2011-01-03", "2011-01-02"])
    row = whole(change(table, strata_table({"S": 1}))[0])
    assert row["years"] == pytest.approx(365 / 365.25)


def test_elapsed_time_is_weighted_by_area() -> None:
    table = two_dates([1.0, 2, 3, 4], [2.0, 3, 5, 6], stratum=["a", "a", "b", "b"])
    table["date"] = pd.to_datetime(["2010-01-01"] * 4 + ["2011-01-01"] * 2 + ["2015-01-01"] * 2)
    frame, _ = change(table, strata_table({"a": 30, "b": 10}))
    by_stratum = pick(frame, "stratum")["years"]
    assert whole(frame)["years"] == pytest.approx(0.75 * by_stratum["a"] + 0.25 * by_stratum["b"])


def test_a_missing_date_takes_its_pair_out_of_the_elapsed_time() -> None:
    table = two_dates([1.0, 2, 3], [2.0, 3, 5])
    table.loc[0, "date"] = pd.NaT
    table.loc[3, "date"] = pd.Timestamp("2050-01-01")  # its partner has no date, so this one does not count
    frame, findings = change(table, strata_table({"S": 1}))
    assert whole(frame)["years"] == pytest.approx(3652 / 365.25)
    assert whole(frame)["plots_paired"] == 3
    assert findings.empty


def test_without_dates_there_is_change_but_no_rate() -> None:
    table = two_dates([1.0, 2, 3], [2.0, 3, 5], ("2010-01-01", pd.NaT))
    frame, findings = change(table, strata_table({"S": 1}))
    row = whole(frame)
    assert np.isfinite(row[AMOUNTS].astype(float)).all()
    assert np.isnan(row[["years", *RATES]].astype(float)).all()
    assert set(findings["rule"]) == {"no rate of change"}
    assert findings["message"].str.contains("visits without a date").all()


def test_one_stratum_without_dates_leaves_the_others_their_rates() -> None:
    table = two_dates([1.0, 2, 3, 4], [2.0, 3, 5, 7], stratum=["a", "a", "b", "b"])
    table.loc[table["stratum"] == "a", "date"] = pd.NaT
    frame, _ = change(table, strata_table({"a": 1, "b": 1}))
    rows = pick(frame, "stratum")
    assert np.isnan(rows.loc["a", "years"])
    assert rows.loc["b", "years"] == pytest.approx(3652 / 365.25)
    assert np.isnan(whole(frame)["years"])


def test_no_time_between_the_visits() -> None:
    table = two_dates([1.0, 2, 3], [2.0, 3, 5], ("2010-01-01", "2010-01-01"))
    frame, findings = change(table, strata_table({"S": 1}))
    assert whole(frame)["years"] == 0
    assert np.isnan(whole(frame)[RATES].astype(float)).all()
    assert findings["message"].str.contains("no time between the visits").all()


def test_common_area() -> None:
    """A stratum short of plots at one date is out at both, and the finding says how many hectares that is."""
    table = two_dates([1.0, 2, 30, 40], [2.0, 3, 50, 70], stratum=["a", "a", "b", "b"])
    frame, findings = change(table.iloc[:-1], strata_table({"a": 8, "b": 2}))
    row, rows = whole(frame), pick(frame, "stratum")
    assert row["area_ha"] == 8
    assert (row["plots_since"], row["plots_until"], row["plots_paired"]) == (2, 2, 2)
    assert row["change_t_c"] == pytest.approx(8)
    assert rows.loc["b", "method"] == "not estimable: 2 plot(s) in t1, 1 in t2"
    assert np.isnan(rows.loc["b", AMOUNTS + RATES].astype(float)).all()
    loud = findings[findings["rule"] == "stratum not estimable"].iloc[0]
    assert loud["severity"] == "error"
    assert "2.00 ha of 10.00 ha" in loud["message"]
    assert "2 plot(s) in t1 and 1 plot(s) in t2" in loud["message"]


def test_areas_unknown() -> None:
    table = two_dates([1.0, 2, 3, 4], [2.0, 3, 5, 7], stratum=["a", "a", "b", "b"])
    frame, _ = change(table, strata_table({"a": np.nan, "b": 1}))
    assert "inventory" not in set(frame["by"])
    row = pick(frame, "stratum").loc["a"]
    assert np.isnan(row[["area_ha", *AMOUNTS, "change_t_c_yr", "co2_t_yr"]].astype(float)).all()
    assert row["change_t_c_ha_yr"] == pytest.approx(365.25 / 3652)
    row = whole(change(two_dates([1.0, 2, 3], [2.0, 3, 5]), strata_table({"S": np.nan}))[0])
    assert np.isfinite(row["change_t_c_ha_yr"])
    assert np.isnan(row["change_t_c"])


def test_parcels_short_of_plots() -> None:
    table = two_dates([1.0, 2, 3, 4], [2.0, 3, 5, 7], parcel=["x", "x", "y", ""])
    frame, findings = change(table, strata_table({"S": 1}), parcel_table({"x": 1, "y": 2}))
    rows = pick(frame, "parcel")
    assert rows.loc["x", "change_t_c"] == pytest.approx(1)
    assert rows.loc["y", "method"] == "not estimable: 1 plot(s) in t1, 1 in t2"
    assert (
        "fewer than two plots at one of the dates"
        in findings.loc[findings["rule"] == "parcel not estimable", "message"].iloc[0]
    )


def test_equal_differences_give_zero_and_a_warning() -> None:
    first = [10.1, 20.2, 30.3]
    frame, findings = change(two_dates(first, [value + 0.1 for value in first]), strata_table({"S": 1}))
    row = whole(frame)
    assert row["change_se"] == 0
    assert row["change_low"] == row["change_high"] == row["change_t_c"]
    assert set(findings["rule"]) == {"zero variance"}


def test_single_repeated_plot_counts_as_independent() -> None:
    first = plot_table([10.0, 20, 30], survey="t1", plot=["a", "b", "c"])
    second = plot_table([12.0, 21, 35], survey="t2", plot=["c", "d", "e"], date=pd.Timestamp("2020-07-01"))
    frame, findings = change(pd.concat([first, second]), strata_table({"S": 1}))
    row = whole(frame)
    variance = np.var([10, 20, 30], ddof=1) / 3 + np.var([12, 21, 35], ddof=1) / 3
    assert row["change_se"] == pytest.approx(np.sqrt(variance))
    assert row["plots_paired"] == 1
    assert set(findings["rule"]) == {"single repeated plot"}


def test_few_repeated_plots_cannot_make_the_variance_negative() -> None:
    """Two wild plots that repeat among many quiet ones: their covariance alone exceeds the two variances."""
    quiet = np.linspace(49, 51, 30)
    first = plot_table([0.0, 100.0, *quiet], survey="t1", plot=["a", "b", *[f"m{i}" for i in range(30)]])
    second = plot_table(
        [0.0, 100.0, *quiet],
        survey="t2",
        plot=["a", "b", *[f"n{i}" for i in range(30)]],
        date=pd.Timestamp("2020-07-01"),
    )
    row = whole(change(pd.concat([first, second]), strata_table({"S": 1}))[0])
    assert row["change_se"] > 0
    # by hand: the wild plots did not change; the 30 single ones of either date each add the mean square of all 32
    squares = ((quiet - 50) ** 2).sum() + 2 * 50**2
    expected = 2 * (30 / 32) * squares / (32 * 31)
    assert row["change_se"] ** 2 == pytest.approx(expected)


def test_plot_that_moved_to_another_parcel_does_not_pair_there() -> None:
    table = two_dates([1.0, 2, 3, 4, 5], [2.0, 3, 5, 7, 8], parcel=["x", "x", "x", "y", "y"])
    table.loc[7, "parcel"] = "y"  # plot p002 at the later date
    frame, _ = change(table, strata_table({"S": 1}), parcel_table({"x": 1, "y": 1}))
    rows = pick(frame, "parcel")
    assert list(rows["plots_since"]) == [3, 2]
    assert list(rows["plots_until"]) == [2, 3]
    assert list(rows["plots_paired"]) == [2, 2]
    assert whole(frame)["method"] == "difference of ratio means, paired"


def test_surveys_far_apart_and_pools() -> None:
    table, strata, parcels = survey_a_tables()
    middle = table[table["survey"] == "t1"].assign(survey="t1b")
    table = pd.concat([table, middle])
    table["soil"] = np.where(table["survey"] == "t2", 5.0, 4.0) + np.arange(len(table)) % 3
    frame, _ = change(table, strata, parcels, pools=["soil", POOL])
    assert list(frame["pool"].unique()) == [POOL, "soil", "all"]
    assert set(frame["since"]) == {"t1"}
    assert set(frame["until"]) == {"t2"}


def test_wrong_surveys() -> None:
    table = two_dates([1.0, 2, 3], [2.0, 3, 5])
    with pytest.raises(UserError, match="change from 't1' to itself"):
        change(table, strata_table({"S": 1}), surveys=("t1", "t1"))
    with pytest.raises(UserError, match=r"survey 't9' has no plots.*Surveys with plots: t1, t2"):
        change(table, strata_table({"S": 1}), surveys=("t1", "t9"))
