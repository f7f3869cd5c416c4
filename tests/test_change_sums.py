"""Change of pools that are sums of parts on different plots."""

from __future__ import annotations

import numpy as np
import pandas as pd
import pytest
from estimate_frames import cases, change, parcel_table, pick, strata_table, survey_a_tables, whole
from test_estimate_sums import PARTS, SUMS, parts_table

CASES = {name: case["expected"] for name, case in cases("computed").items()}
CLOSED_FORM = 1e-9
AMOUNTS = ["change_t_c", "change_se", "change_low", "change_high"]
RATES = ["change_t_c_yr", "change_t_c_ha_yr", "change_t_c_ha_yr_se", "co2_t_yr"]


def two_dates(first: dict[str, list[float]], second: dict[str, list[float]], **columns: object) -> pd.DataFrame:
    return pd.concat(
        [
            parts_table(values, survey=survey, date=pd.Timestamp(date), **columns)
            for values, survey, date in ((first, "t1", "2010-01-01"), (second, "t2", "2020-01-01"))
        ],
        ignore_index=True,
    )


def run(table: pd.DataFrame, areas: dict[str, float], parcels: dict[str, float] | None = None):
    given = None if parcels is None else parcel_table(parcels)
    return change(table, strata_table(areas), given, pools=list(SUMS), sums=SUMS)


def inventory(frame: pd.DataFrame) -> pd.DataFrame:
    return frame[frame["by"] == "inventory"].set_index("pool")


def divided(table: pd.DataFrame) -> pd.DataFrame:
    """Each value of above-ground carbon in four parts of random size."""
    rng = np.random.default_rng(7)
    share = rng.dirichlet(np.ones(len(PARTS)), len(table))
    return table.assign(**{part: share[:, i] * table["above_ground"] for i, part in enumerate(PARTS)})


def test_repeated_plots_in_parts() -> None:
    """Independent: case A-CHG-1 (package and call stand there), its values cut in parts at random."""
    expected = CASES["A-CHG-1"]
    table, strata, _ = survey_a_tables("paired")
    frame, _ = change(divided(table), strata, pools=list(SUMS), sums=SUMS)
    row = whole(frame)
    assert row["change_t_c"] == pytest.approx(expected["total_change"], rel=CLOSED_FORM)
    assert row["change_se"] == pytest.approx(expected["se_total"], rel=CLOSED_FORM)
    assert row["method"] == "difference of ratio means, paired"


def test_repeated_plots_in_parts_by_parcel() -> None:
    expected = CASES["A-CHG-2"]["parcels"]
    table, strata, parcels = survey_a_tables("paired")
    frame, _ = change(divided(table), strata, parcels, pools=list(SUMS), sums=SUMS)
    rows = pick(frame, "parcel")
    np.testing.assert_allclose(rows["change_t_c"], expected["total_known_area"], rtol=CLOSED_FORM)
    np.testing.assert_allclose(rows["change_se"], expected["se_total_known_area"], rtol=CLOSED_FORM)


@pytest.mark.parametrize("panel", ["", "paired"])
def test_same_results_as_columns_where_every_part_is_on_every_plot(panel: str) -> None:
    """Identity: also for partly repeated plots, for df, texts and findings."""
    table, strata, parcels = survey_a_tables(panel)
    table = divided(table).assign(size=np.random.default_rng(2).uniform(0.3, 1.0, len(table)))
    for pool, parts in SUMS.items():
        table[pool] = table[parts].sum(axis=1)
    table["all"] = table[list(SUMS)].sum(axis=1)
    plain, said = change(table, strata, parcels, pools=list(SUMS))
    frame, about = change(table, strata, parcels, pools=list(SUMS), sums=SUMS)
    pd.testing.assert_frame_equal(frame, plain, rtol=1e-8)
    assert list(about["rule"]) == list(said["rule"])


def test_soil_on_part_of_the_repeated_plots() -> None:
    """By hand: three plots bring in the change of trees and soil together, two that of trees alone."""
    trees = np.array([[30.0, 50, 10, 80, 40], [36.0, 54, 19, 83, 41]])
    soil = np.array([[60.0, 90, 45], [61.0, 85, 47]])
    first, second = ({"above_ground.trees": list(trees[i]), "soil.soil": [*soil[i], np.nan, np.nan]} for i in range(2))
    frame, _ = run(two_dates(first, second), {"S": 10.0})
    grown, lost = trees[1] - trees[0], soil[1] - soil[0]
    rows = inventory(frame)
    assert rows.loc["all", "change_t_c"] == pytest.approx(10 * (grown.mean() + lost.mean()))
    variance = 2 * grown.var(ddof=1) / 25 + 3 * (grown[:3] / 5 + lost / 3).var(ddof=1)
    assert (rows.loc["all", "change_se"] / 10) ** 2 == pytest.approx(variance)
    assert list(rows["plots_paired"]) == [5, 5, 3, 3]
    assert rows.loc["all", "method"] == "difference of ratio means, paired, parts on different plots"


def test_single_repeated_plot_counts_as_two() -> None:
    """As for one column: a single repeated plot says nothing about how the dates go together."""
    first, second = [10.0, 20, 30], [12.0, 21, 35]
    table = two_dates({"above_ground.trees": first}, {"above_ground.trees": second})
    table["plot"] = ["a", "b", "c", "c", "d", "e"]
    row = whole(run(table, {"S": 1.0})[0])
    assert row["change_se"] ** 2 == pytest.approx(np.var(first, ddof=1) / 3 + np.var(second, ddof=1) / 3)


def test_pool_measured_once_has_no_change() -> None:
    values = {"above_ground.trees": [10.0, 20, 40], "soil.soil": [50.0, 60, 90]}
    table = two_dates(
        {**values, "soil.soil": [np.nan] * 3}, {**values, "above_ground.trees": [15.0, 22, 48]}, parcel="x"
    )
    frame, findings = run(table, {"S": 10.0}, {"x": 5.0})
    for by in ("inventory", "stratum", "parcel"):
        rows = frame[frame["by"] == by].set_index("pool")
        assert rows.loc["soil", AMOUNTS + RATES].isna().all()
        assert rows.loc["soil", "method"] == "not estimable: soil measured in t2 only"
        assert rows.loc["all", "change_t_c"] == pytest.approx(rows.loc["above_ground", "change_t_c"])
        assert rows.loc["all", "change_se"] == pytest.approx(rows.loc["above_ground", "change_se"])
        assert rows.loc["all", "method"] == "difference of ratio means, paired; without soil: measured in t2 only"
    told = findings.set_index("rule").loc["pool left out of the sum"]
    assert "soil, t1 to t2: measured in t2 only. It has no change there" in told["message"]
    assert "stratum not estimable" not in set(findings["rule"])


def test_part_measured_once_takes_its_pool_out() -> None:
    """Standing dead wood alone at one date and with down wood at the other are not the same thing."""
    values = {"above_ground.trees": [10.0, 20, 40], "dead_wood.standing": [1.0, 2, 4], "dead_wood.down": [3.0, 3, 8]}
    table = two_dates(values, {**values, "dead_wood.down": [np.nan] * 3})
    rows = inventory(run(table, {"S": 10.0})[0])
    assert rows.loc["dead_wood", "method"] == "not estimable: dead_wood.down measured in t1 only"
    assert np.isnan(rows.loc["dead_wood", "change_t_c"])
    assert rows.loc["all", "method"].endswith("; without dead_wood: dead_wood.down measured in t1 only")


def test_parcel_without_a_part_takes_the_change_of_its_stratum() -> None:
    trees = [[30.0, 50, 10, 80, 40, 55], [33.0, 58, 12, 85, 42, 61]]
    soil = np.array([[60.0, 90, 45, 70], [61.0, 93, 45, 69]])
    first, second = ({"above_ground.trees": trees[i], "soil.soil": [np.nan, np.nan, *soil[i]]} for i in range(2))
    table = two_dates(first, second, parcel=["x"] * 3 + ["y"] * 3)
    frame, findings = run(table, {"S": 10.0}, {"x": 4.0, "y": 6.0})
    rows = frame[(frame["by"] == "parcel") & (frame["unit"] == "x")].set_index("pool")
    moved = soil[1] - soil[0]
    spread = moved.var(ddof=1) * (1 + 1 / 4)
    assert rows.loc["soil", "change_t_c"] == pytest.approx(4 * moved.mean())
    assert (rows.loc["soil", "change_se"] / 4) ** 2 == pytest.approx(spread)
    assert rows.loc["soil", "method"] == "soil: change of its stratum (one plot of its own)"
    own = rows.loc["above_ground", "change_se"] / 4
    assert (rows.loc["all", "change_se"] / 4) ** 2 == pytest.approx(own**2 + spread)
    assert rows.loc["all", "years"] == pytest.approx(3652 / 365.25)
    assert "stratum mean for a parcel" in set(findings["rule"])


def test_each_part_has_its_own_elapsed_time() -> None:
    """By hand: soil over five years on two plots, trees over ten on the others; the rates add up."""
    nan = np.nan
    table = two_dates(
        {"above_ground.trees": [10.0, 20, nan, nan], "soil.soil": [nan, nan, 50.0, 60]},
        {"above_ground.trees": [15.0, 27, nan, nan], "soil.soil": [nan, nan, 51.0, 62]},
    )
    for part in ("dead_wood.standing", "dead_wood.down"):
        table.loc[table["above_ground.trees"].isna(), part] = nan
    soil_plots = (table["survey"] == "t2") & table["soil.soil"].notna()
    table.loc[soil_plots, "date"] = pd.Timestamp("2015-01-01")
    rows = inventory(run(table, {"S": 1.0})[0])
    ten, five = 3652 / 365.25, 1826 / 365.25
    assert rows.loc["above_ground", "years"] == pytest.approx(ten)
    assert rows.loc["soil", "years"] == pytest.approx(five)
    assert rows.loc["all", "change_t_c_yr"] == pytest.approx(6 / ten + 1.5 / five)
    np.testing.assert_allclose(rows["co2_t_yr"].iloc[:3].sum(), rows.loc["all", "co2_t_yr"])
    assert rows.loc["all", "years"] == pytest.approx((3 * ten + five) / 4)


def test_common_area_by_pool() -> None:
    table = two_dates(
        {"above_ground.trees": [1.0, 2, 3, 5], "soil.soil": [5.0, 6, 7, 8]},
        {"above_ground.trees": [2.0, 4, 5, 6], "soil.soil": [5.0, 7, 7, np.nan]},
        stratum=list("aabb"),
    )
    frame, findings = run(table, {"a": 8.0, "b": 2.0})
    rows, short = inventory(frame), frame[frame["unit"] == "b"].set_index("pool")
    assert list(rows["area_ha"]) == [10, 10, 8, 10]
    assert rows.loc["all", "change_t_c"] == pytest.approx(rows["change_t_c"].iloc[:3].sum())
    assert short.loc["soil", "method"] == "not estimable: 2 plot(s) in t1, 1 in t2"
    assert short.loc["all", "method"].endswith("; without soil: 2 plot(s) in t1, 1 in t2")
    assert rows.loc["all", "method"].endswith("; soil on 8.00 of 10.00 ha")
    assert "with soil" in findings.set_index("rule").loc["stratum not estimable", "message"]


def test_equal_differences_give_zero_and_a_warning() -> None:
    first = {"above_ground.trees": [10.1, 20.2, 30.3, 7.7], "soil.soil": [50.3, 60.1, np.nan, np.nan]}
    second = {name: [value + 0.1 for value in values] for name, values in first.items()}
    frame, findings = run(two_dates(first, second), {"S": 1.0})
    assert whole(frame)["change_se"] == 0
    assert set(findings["rule"]) == {"zero variance"}
