"""Stocks: order of rows, what cannot be estimated, what is left out, and what is said about it."""

from __future__ import annotations

import numpy as np
import pandas as pd
import pytest
from estimate_frames import (
    NAME,
    POOL,
    parcel_table,
    pick,
    plot_table,
    stocks,
    strata_table,
    survey_a_tables,
    whole,
)

from landcarbon.errors import UserError
from landcarbon.estimate.stocks import STOCK_COLUMNS

FIGURES = ["density_t_c_ha", "density_se", "density_low", "density_high", "stock_t_c", "stock_se", "df"]


def two_strata(**columns: object) -> pd.DataFrame:
    return plot_table([10.0, 20.0, 30.0, 60.0, 80.0], stratum=["a", "a", "a", "b", "b"], **columns)


def rules(findings: pd.DataFrame) -> set[str]:
    return set(findings["rule"])


def test_rows_come_in_a_fixed_order() -> None:
    table, strata, parcels = survey_a_tables()
    table["soil"] = table["above_ground"]
    frame, _ = stocks(table, strata, parcels, surveys=["t2", "t1"], pools=["soil", POOL])
    assert list(frame.columns) == STOCK_COLUMNS
    expected = [
        (by, unit, survey, pool)
        for by, units in (
            ("inventory", [NAME]),
            ("stratum", ["S1", "S2", "S3", "S4"]),
            ("parcel", ["P1", "P2", "P3", "P4", "P5"]),
        )
        for unit in units
        for survey in ("t2", "t1")  # the order of the list is the order of time
        for pool in (POOL, "soil", "all")
    ]
    assert list(frame[["by", "unit", "survey", "pool"]].itertuples(index=False, name=None)) == expected
    assert str(frame["plots"].dtype) == "int64"


def test_surveys_may_be_a_table() -> None:
    table, strata, parcels = survey_a_tables()
    frame, _ = stocks(table, strata, parcels, surveys=["t1", "t2"])
    same, _ = stocks(table, strata, parcels, surveys=pd.DataFrame({"survey": ["t1", "t2"]}))
    pd.testing.assert_frame_equal(frame, same)


def test_without_parcels_there_are_no_parcel_rows() -> None:
    frame, _ = stocks(two_strata(), strata_table({"a": 10, "b": 5}))
    assert list(frame["by"].unique()) == ["inventory", "stratum"]


def test_stratum_listed_without_plots() -> None:
    frame, findings = stocks(two_strata(), strata_table({"a": 10, "b": 5, "c": 7}))
    row, empty = whole(frame), pick(frame, "stratum").loc["c"]
    assert row["area_ha"] == 15
    assert row["plots"] == 5
    assert empty["method"] == "not estimable: 0 plot(s)"
    assert np.isnan(empty[FIGURES].astype(float)).all()
    assert empty["area_ha"] == 7
    loud = findings[findings["rule"] == "stratum not estimable"]
    assert list(loud["severity"]) == ["error"]
    assert "7.00 ha of 22.00 ha" in loud["message"].iloc[0]


def test_no_stratum_is_estimable() -> None:
    frame, findings = stocks(plot_table([5.0, 6.0], stratum=["a", "b"]), strata_table({"a": 1, "b": 2}))
    row = whole(frame)
    assert row["area_ha"] == 0
    assert row["plots"] == 0
    assert np.isnan(row[FIGURES].astype(float)).all()
    assert row["method"] == "not estimable: 0 plot(s)"
    assert (findings["rule"] == "stratum not estimable").sum() == 2


def test_areas_unknown_give_densities_per_stratum_and_no_total() -> None:
    frame, findings = stocks(two_strata(), strata_table({"a": 10, "b": np.nan}))
    assert "inventory" not in set(frame["by"])
    rows = pick(frame, "stratum")
    assert rows.loc["a", "stock_t_c"] == 200
    assert rows.loc["b", "density_t_c_ha"] == 70
    assert np.isfinite(rows.loc["b", "density_se"])
    assert np.isnan(rows.loc["b", ["area_ha", "stock_t_c", "stock_se", "stock_low"]].astype(float)).all()
    finding = findings[findings["rule"] == "area unknown"].iloc[0]
    assert "no figure for the whole inventory" in finding["message"]
    assert finding["value"] == "b"


def test_stratum_that_only_plots_name_has_no_area() -> None:
    frame, findings = stocks(two_strata(), strata_table({"a": 10}))
    assert "inventory" not in set(frame["by"])
    assert list(pick(frame, "stratum").index) == ["a", "b"]
    assert "area unknown" in rules(findings)


def test_single_stratum_without_area_still_has_a_density() -> None:
    frame, findings = stocks(plot_table([10.0, 20.0, 30.0]), strata_table({"S": np.nan}))
    row = whole(frame)
    assert row["density_t_c_ha"] == 20
    assert row["density_se"] == pytest.approx(10 / np.sqrt(3))
    assert np.isnan(row[["area_ha", "stock_t_c", "stock_se"]].astype(float)).all()
    assert "stocks are not" in findings.loc[findings["rule"] == "area unknown", "message"].iloc[0]


def test_parcel_with_one_plot() -> None:
    table = two_strata(parcel=["x", "x", "y", "x", ""])
    frame, findings = stocks(table, strata_table({"a": 10, "b": 5}), parcel_table({"x": 6, "y": 4, "z": 3}))
    rows = pick(frame, "parcel")
    assert list(rows["plots"]) == [3, 1, 0]
    assert np.isfinite(rows.loc["x", FIGURES].astype(float)).all()
    assert np.isnan(rows.loc[["y", "z"], FIGURES].astype(float)).all(axis=None)
    assert list(rows["method"]) == [
        "domain ratio of means",
        "not estimable: 1 plot(s)",
        "not estimable: 0 plot(s)",
    ]
    finding = findings[findings["rule"] == "parcel not estimable"].iloc[0]
    assert finding["value"] == "2"
    assert "(7.00 ha)" in finding["message"]
    assert "y, z" in finding["message"]


def test_parcel_in_strata_of_unknown_area() -> None:
    table = two_strata(parcel=["x", "x", "y", "y", "y"])
    strata = strata_table({"a": np.nan, "b": np.nan})
    rows = pick(stocks(table, strata, parcel_table({"x": 6, "y": 4}))[0], "parcel")
    assert rows.loc["x", "density_t_c_ha"] == 15  # one stratum only: its area does not matter
    assert rows.loc["x", "stock_t_c"] == 90
    assert np.isnan(rows.loc["y", FIGURES].astype(float)).all()
    assert rows.loc["y", "method"] == "not estimable: area of its strata unknown"


def test_parcel_that_loses_plots_with_their_stratum() -> None:
    table = plot_table([10.0, 20.0, 30.0, 60.0], stratum=["a", "a", "a", "b"], parcel=["x", "x", "", "x"])
    frame, findings = stocks(table, strata_table({"a": 10, "b": 5}), parcel_table({"x": 6}))
    assert pick(frame, "parcel").loc["x", "plots"] == 2
    assert "parcel without part of its plots" in rules(findings)


def test_equal_values_in_a_parcel_give_zero_and_a_warning() -> None:
    table = plot_table([0.1, 0.1, 0.1, 0.7, 0.9], parcel=["x", "x", "x", "y", "y"])
    frame, findings = stocks(table, strata_table({"S": 10}), parcel_table({"x": 6, "y": 4}))
    row = pick(frame, "parcel").loc["x"]
    assert row["density_t_c_ha"] == 0.1
    assert row["density_se"] == 0
    assert row["density_low"] == row["density_high"] == 0.1
    finding = findings[findings["rule"] == "zero variance"]
    assert set(finding["value"]) == {"x"}
    assert set(finding["column"]) == {POOL, "all"}


def test_plots_left_out_are_reported() -> None:
    table = two_strata(inside=[True, True, True, True, False])
    more = plot_table([1.0, 2.0], plot=["q1", "q2"], stratum=["", "b"], size=[1.0, np.nan])
    frame, findings = stocks(pd.concat([table, more]), strata_table({"a": 10, "b": 5}))
    assert pick(frame, "stratum").loc["b", "plots"] == 1
    told = findings.set_index("rule")
    for rule, plot in (("plot outside", "p004"), ("plot without stratum", "q1"), ("plot without area", "q2")):
        assert told.loc[rule, "value"] == "1"
        assert plot in told.loc[rule, "message"]
        assert not told.loc[rule, "used"]


def test_a_stratum_may_be_listed_without_a_name() -> None:
    row = whole(stocks(plot_table([1.0, 3.0], stratum=""), strata_table({"": 4}))[0])
    assert row["stock_t_c"] == 8


def test_pool_missing_on_some_plots() -> None:
    table = two_strata(soil=[5.0, np.nan, 7.0, 8.0, 9.0], all=[15.0, np.nan, 37.0, 68.0, 89.0])
    frame, findings = stocks(table, strata_table({"a": 10, "b": 5}), pools=[POOL, "soil"])
    rows = frame[frame["by"] == "inventory"].set_index("pool")
    assert list(rows["plots"]) == [5, 4, 4]
    note = findings[findings["rule"] == "pool not measured"]
    assert list(note["value"]) == ["1"]
    assert "soil, all" in note["message"].iloc[0]


def test_pool_measured_in_one_stratum_only_shrinks_its_area() -> None:
    table = two_strata(soil=[5.0, 6.0, 7.0, np.nan, np.nan])
    frame, findings = stocks(table, strata_table({"a": 10, "b": 5}), pools=[POOL, "soil"])
    rows = frame[frame["by"] == "inventory"].set_index("pool")
    assert list(rows["area_ha"]) == [15, 10, 15]
    loud = findings[findings["rule"] == "stratum not estimable"].iloc[0]
    assert "with soil" in loud["message"]


def test_unknown_surveys_and_parcels_are_reported() -> None:
    table = pd.concat([two_strata(parcel="nowhere"), two_strata(survey="1999")])
    _, findings = stocks(table, strata_table({"a": 10, "b": 5}), parcel_table({"x": 6}))
    told = findings.set_index("rule")
    assert told.loc["survey not listed", "value"] == "1999"
    assert told.loc["parcel not listed", "value"] == "nowhere"


def test_survey_without_plots_and_empty_table() -> None:
    strata = strata_table({"a": 10, "b": 5})
    frame, _ = stocks(two_strata(), strata, surveys=["2014", "2024"])
    rows = frame[frame["survey"] == "2024"]
    assert np.isnan(rows[FIGURES].astype(float)).all(axis=None)
    assert (rows["plots"] == 0).all()
    frame, findings = stocks(two_strata().iloc[:0], strata, parcel_table({"x": 6}))
    assert len(frame) == 2 * (1 + 2 + 1)
    assert (findings["rule"] == "stratum not estimable").sum() == 2


def test_categories_do_as_well_as_text() -> None:
    table, strata, parcels = survey_a_tables()
    plain, _ = stocks(table, strata, parcels, surveys=["t1", "t2"])
    typed = table.astype({name: "category" for name in ("survey", "plot", "parcel", "stratum")})
    pd.testing.assert_frame_equal(stocks(typed, strata, parcels, surveys=["t1", "t2"])[0], plain)


def test_area_of_zero() -> None:
    row = whole(stocks(two_strata(), strata_table({"a": 10, "b": 0}))[0])
    assert row["density_t_c_ha"] == 20
    assert row["stock_t_c"] == 200
    frame, _ = stocks(two_strata(parcel="x"), strata_table({"a": 10, "b": 5}), parcel_table({"x": 0}))
    assert pick(frame, "parcel").loc["x", "stock_t_c"] == 0


@pytest.mark.parametrize(
    ("table", "strata", "options", "message"),
    [
        (two_strata().drop(columns="size"), {"a": 1}, {}, "no column size"),
        (two_strata(), {"a": 1}, {"pools": ["timber"]}, "'timber' is not a pool"),
        (two_strata(), {"a": 1}, {"pools": ["soil"]}, "no column soil"),
        (two_strata(), {"a": 1}, {"confidence": 95}, "confidence 95 is not a probability"),
        (two_strata(), {"a": -1}, {}, "stratum 'a' has a negative area"),
        (two_strata(plot="same"), {"a": 1}, {}, "plot 'same' occurs more than once in survey '2014'"),
    ],
)
def test_wrong_calls_say_what_to_do(table: pd.DataFrame, strata: dict, options: dict, message: str) -> None:
    with pytest.raises(UserError, match=message):
        stocks(table, strata_table(strata), **options)


def test_labels_listed_twice() -> None:
    with pytest.raises(UserError, match="stratum 'a' is listed twice"):
        stocks(two_strata(), pd.concat([strata_table({"a": 1})] * 2))
    with pytest.raises(UserError, match="parcel 'x' is listed twice"):
        stocks(two_strata(), strata_table({"a": 1}), pd.concat([parcel_table({"x": 1})] * 2))


def test_input_tables_are_left_as_they_are() -> None:
    table, strata, parcels = survey_a_tables()
    copies = [frame.copy(deep=True) for frame in (table, strata, parcels)]
    stocks(table, strata, parcels, surveys=["t1", "t2"])
    for frame, copy in zip((table, strata, parcels), copies, strict=True):
        pd.testing.assert_frame_equal(frame, copy)
