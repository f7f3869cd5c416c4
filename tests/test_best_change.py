"""Change as best combination through ``estimate_change``: sums, fall-backs, properties, degenerate inputs."""

from __future__ import annotations

import numpy as np
import pandas as pd
import pytest
from estimate_frames import NAME, POOL, parcel_table, pick, plot_table, strata_table, survey_a_tables, whole
from hypothesis import given, settings
from hypothesis import strategies as st
from test_change_sums import SUMS, divided

from landcarbon.change import estimate_change
from landcarbon.errors import UserError

FIGURES = ["change_t_c", "change_se", "change_low", "change_high", "change_t_c_ha_yr", "change_t_c_ha_yr_se"]
BEST = "best combination"


def run(table, strata, parcels=None, *, change=BEST, pools=(POOL,), sums=None, surveys=("t1", "t2")):
    return estimate_change(
        table,
        strata,
        parcels,
        since=surveys[0],
        until=surveys[1],
        pools=pools,
        confidence=0.95,
        inventory_name=NAME,
        sums=sums,
        change=change,
    )


def made_up(seed: int = 0, plots: int = 60, soil: float = 1.0) -> tuple[pd.DataFrame, pd.DataFrame, pd.DataFrame]:
    """Two pools, three strata, four parcels across them; of the plots a quarter at either date only."""
    rng = np.random.default_rng(seed)
    stratum, parcel = rng.integers(0, 3, plots), rng.integers(0, 4, plots)
    first = rng.gamma(4, 25, plots)
    kind = rng.permutation(np.arange(plots) % 4)
    parts = []
    for name, date, value, here in (
        ("t1", "2010-06-01", first, kind != 3),
        ("t2", "2020-06-01", 0.9 * first + rng.gamma(4, 5, plots), kind != 2),
    ):
        frame = plot_table(
            value[here],
            survey=name,
            plot=np.array([f"q{i:03d}" for i in range(plots)])[here],
            stratum=np.array(list("abc"))[stratum[here]],
            parcel=np.array(list("wxyz"))[parcel[here]],
            date=pd.Timestamp(date) + pd.to_timedelta(rng.integers(-50, 50, here.sum()), unit="D"),
            size=rng.uniform(0.4, 1.0, here.sum()),
            soil=np.where(rng.uniform(size=here.sum()) < soil, rng.normal(70, 10, here.sum()), np.nan),
        )
        parts.append(frame.assign(all=frame[POOL] + frame["soil"]))
    areas = strata_table({"a": 100, "b": 50, "c": 25})
    return pd.concat(parts, ignore_index=True), areas, parcel_table({"w": 40, "x": 60, "y": 50, "z": 25})


def added_up(frame: pd.DataFrame, pools: list[str]) -> None:
    for name in ("change_t_c", "co2_t_yr", "change_t_c_yr"):
        wide = frame.pivot(index=["by", "unit"], columns="pool", values=name)
        np.testing.assert_allclose(wide[pools].sum(axis=1), wide["all"], rtol=1e-9, atol=1e-9)
        strata = frame[frame["by"] == "stratum"].groupby("pool")[name].sum()
        total = frame[frame["by"] == "inventory"].set_index("pool")[name]
        if name == "change_t_c":
            np.testing.assert_allclose(strata[total.index], total, rtol=1e-9, atol=1e-9)


@pytest.mark.parametrize("seed", [0, 1, 2])
def test_pools_and_strata_add_up(seed: int) -> None:
    """Identity: ``all`` is the sum of the pools at every level, the inventory the sum of the strata."""
    frame, _ = run(*made_up(seed), pools=(POOL, "soil"))
    added_up(frame, [POOL, "soil"])
    assert frame.loc[frame["by"] == "inventory", "method"].str.startswith("best combination: ").all()


def test_parts_on_different_plots_add_up() -> None:
    table, strata, parcels = made_up(4, plots=90, soil=0.6)
    sums = {POOL: [POOL], "soil": ["soil"]}
    frame, _ = run(table, strata, parcels, pools=(POOL, "soil"), sums=sums)
    added_up(frame, [POOL, "soil"])
    row = whole(frame)
    assert row["method"].startswith("best combination: ")
    assert "parts on different plots" in row["method"]


def test_weights_are_in_the_method() -> None:
    table, strata, _ = survey_a_tables()
    row = whole(run(table, strata)[0])
    words = row["method"].split(" ")
    assert row["method"].startswith("best combination: ")
    assert row["method"].endswith("in t2")
    shares = [float(word.strip("%,")) for word in words if word.endswith("%")]
    assert all(80 < share < 100 for share in shares)


def test_sums_path_gives_the_same_as_columns() -> None:
    """Identity: values cut in parts, each on every plot."""
    table, strata, parcels = survey_a_tables()
    table = divided(table)
    for pool, parts in SUMS.items():
        table[pool] = table[parts].sum(axis=1)
    table["all"] = table[list(SUMS)].sum(axis=1)
    plain, _ = run(table, strata, parcels, pools=list(SUMS))
    frame, _ = run(table, strata, parcels, pools=list(SUMS), sums=SUMS)
    pd.testing.assert_frame_equal(frame, plain, rtol=1e-7)


def test_all_plots_repeated_is_the_paired_difference() -> None:
    table, strata, parcels = survey_a_tables("paired")
    plain, _ = run(table, strata, parcels, change="difference")
    frame, findings = run(table, strata, parcels)
    pd.testing.assert_frame_equal(frame, plain)
    assert "no best combination" in set(findings["rule"])


def test_no_plot_repeated_is_the_difference() -> None:
    table, strata, parcels = survey_a_tables()
    later = table["survey"] == "t2"
    table = table.assign(plot=table["plot"].where(~later, "new " + table["plot"]))
    plain, _ = run(table, strata, parcels, change="difference")
    frame, findings = run(table, strata, parcels)
    pd.testing.assert_frame_equal(frame, plain)
    assert "no best combination" in set(findings["rule"])


def pairs_and_others(pairs: int, others: int, seed: int = 5) -> pd.DataFrame:
    rng = np.random.default_rng(seed)
    first, growth = rng.normal(100, 20, pairs + others), rng.normal(10, 2, pairs)
    names = [f"p{i}" for i in range(pairs)]
    one = plot_table(first, survey="t1", plot=names + [f"o{i}" for i in range(others)])
    two = np.concatenate([first[:pairs] + growth, rng.normal(110, 20, others)])
    date = pd.Timestamp("2024-07-01")
    return pd.concat([one, plot_table(two, survey="t2", plot=names + [f"n{i}" for i in range(others)], date=date)])


@pytest.mark.parametrize("pairs", [0, 1, 2])
def test_few_pairs_keep_the_difference(pairs: int) -> None:
    table = pairs_and_others(pairs, 6)
    plain, _ = run(table, strata_table({"S": 1}), change="difference")
    pd.testing.assert_frame_equal(run(table, strata_table({"S": 1}))[0], plain)


def test_enough_pairs_and_others_are_combined() -> None:
    row = whole(run(pairs_and_others(12, 6), strata_table({"S": 1}))[0])
    plain = whole(run(pairs_and_others(12, 6), strata_table({"S": 1}), change="difference")[0])
    assert row["change_se"] < 0.5 * plain["change_se"]
    assert abs(row["change_t_c"] - 10) < 3 * row["change_se"]


def test_stratum_short_of_pairs_goes_by_difference() -> None:
    good = pairs_and_others(15, 8).assign(stratum="a")
    short = pairs_and_others(2, 6, seed=6).assign(stratum="b")
    short["plot"] = "b" + short["plot"]
    table, strata = pd.concat([good, short]), strata_table({"a": 10, "b": 10})
    frame, _ = run(table, strata)
    rows, plain = pick(frame, "stratum"), pick(run(table, strata, change="difference")[0], "stratum")
    assert rows.loc["a", "method"].startswith("best combination")
    assert rows.loc["b", "method"] == "difference of ratio means, partly paired"
    for name in FIGURES:
        assert rows.loc["b", name] == pytest.approx(plain.loc["b", name])
    row = whole(frame)
    assert row["method"].endswith("(1 of 2 strata, the others by difference)")
    assert row["change_t_c"] == pytest.approx(rows["change_t_c"].sum())
    assert row["change_se"] ** 2 == pytest.approx((rows["change_se"] ** 2).sum())


def test_parcels_weigh_their_own_plots() -> None:
    """Identity: a parcel that is the whole inventory has the figures of the inventory."""
    table = pairs_and_others(12, 8).assign(parcel="x")
    frame, _ = run(table, strata_table({"S": 7}), parcel_table({"x": 7}))
    row, parcel = whole(frame), pick(frame, "parcel").loc["x"]
    for name in ("change_t_c", "change_t_c_ha_yr"):
        assert parcel[name] == pytest.approx(row[name], rel=1e-9)
    assert parcel["change_se"] == pytest.approx(row["change_se"], rel=1e-9)
    assert parcel["method"] == row["method"]


def test_areas_unknown_give_each_stratum_its_own_weights() -> None:
    good = pairs_and_others(15, 8).assign(stratum="a")
    other = pairs_and_others(15, 8, seed=8).assign(stratum="b")
    other["plot"] = "b" + other["plot"]
    frame, _ = run(pd.concat([good, other]), strata_table({"a": np.nan, "b": np.nan}))
    assert pick(frame, "stratum")["method"].str.startswith("best combination").all()
    alone = run(good, strata_table({"a": np.nan}))[0]
    assert pick(frame, "stratum").loc["a", "change_t_c_ha_yr"] == pytest.approx(whole(alone)["change_t_c_ha_yr"])


def test_without_dates_there_is_no_rate() -> None:
    table = pairs_and_others(12, 8).assign(date=pd.NaT)
    row = whole(run(table, strata_table({"S": 1}))[0])
    assert np.isfinite(row["change_se"])
    assert np.isnan(row["change_t_c_yr"])


def test_some_dates_missing_fall_back_to_the_elapsed_time_of_all() -> None:
    table = pairs_and_others(12, 8).reset_index(drop=True)
    table.loc[0, "date"] = pd.NaT
    row = whole(run(table, strata_table({"S": 1}))[0])
    assert row["years"] == pytest.approx(3653 / 365.25)  # ten calendar years with three leap days
    assert row["change_t_c_yr"] == pytest.approx(row["change_t_c"] / row["years"])


def test_wrong_choice() -> None:
    with pytest.raises(UserError, match="change 'pairs' is not known"):
        run(pairs_and_others(12, 8), strata_table({"S": 1}), change="pairs")


@settings(max_examples=12, deadline=None)
@given(st.integers(0, 500))
def test_reversed_dates_flip_the_sign(seed: int) -> None:
    table, strata, parcels = made_up(seed)
    there = run(table, strata, parcels, pools=(POOL, "soil"))[0]
    back = run(table, strata, parcels, pools=(POOL, "soil"), surveys=("t2", "t1"))[0]
    np.testing.assert_allclose(back["change_t_c"], -there["change_t_c"], rtol=1e-8)
    np.testing.assert_allclose(back["change_se"], there["change_se"], rtol=1e-8)
    np.testing.assert_allclose(back["change_t_c_ha_yr"], there["change_t_c_ha_yr"], rtol=1e-8)
    np.testing.assert_allclose(back["change_t_c_ha_yr_se"], there["change_t_c_ha_yr_se"], rtol=1e-7)


@settings(max_examples=12, deadline=None)
@given(st.integers(0, 500))
def test_order_of_rows_does_not_matter(seed: int) -> None:
    table, strata, parcels = made_up(seed)
    frame, _ = run(table, strata, parcels)
    mixed, _ = run(table.sample(frac=1.0, random_state=seed), strata, parcels)
    pd.testing.assert_frame_equal(mixed, frame, rtol=1e-9)


@settings(max_examples=10, deadline=None)
@given(st.integers(0, 500), st.floats(0.01, 100))
def test_units_scale(seed: int, unit: float) -> None:
    table, strata, _ = made_up(seed)
    frame, _ = run(table, strata)
    scaled, _ = run(table.assign(**{name: table[name] * unit for name in (POOL, "all")}), strata)
    for name in FIGURES:
        np.testing.assert_allclose(scaled[name], frame[name] * unit, rtol=1e-6)


def test_zero_change_gives_zero_for_repeated_plots() -> None:
    """The best combination of a change without variance is the repeated plots alone: zero, with a warning."""
    table = pairs_and_others(12, 8)
    same = table.set_index(["survey", "plot"])
    for i in range(12):
        same.loc[("t2", f"p{i}"), [POOL, "all"]] = same.loc[("t1", f"p{i}"), [POOL, "all"]].to_numpy()
    row = whole(run(same.reset_index(), strata_table({"S": 1}))[0])
    assert row["change_t_c"] == pytest.approx(0, abs=1e-6)
    assert row["change_se"] == pytest.approx(0, abs=1e-3)


def test_equal_values_everywhere() -> None:
    table = pairs_and_others(12, 8)
    table[[POOL, "all"]] = 50.0
    frame, findings = run(table, strata_table({"S": 1}))
    assert whole(frame)["change_t_c"] == pytest.approx(0)
    assert whole(frame)["change_se"] == 0
    assert "zero variance" in set(findings["rule"])


def test_one_plot_in_all() -> None:
    table = pd.concat([plot_table([5.0], survey="t1"), plot_table([6.0], survey="t2")])
    frame, _ = run(table, strata_table({"S": 1}), parcel_table({"x": 0}))
    assert frame["change_t_c"].isna().all()
    assert frame["method"].str.startswith("not estimable").all()


def test_stratum_without_plots_and_parcel_without_area() -> None:
    table = pairs_and_others(12, 8).assign(parcel="x")
    frame, _ = run(table, strata_table({"S": 10, "empty": 5}), parcel_table({"x": 0, "bare": 3}))
    rows = pick(frame, "parcel")
    assert rows.loc["x", "change_t_c"] == 0
    assert np.isnan(rows.loc["bare", "change_t_c"])
    assert whole(frame)["area_ha"] == 10


def test_equal_strata_can_be_merged() -> None:
    """Identity: two strata that are copies of each other change as one of them does."""
    one = pairs_and_others(15, 9).assign(stratum="a")
    two = one.assign(stratum="b", plot="b" + one["plot"])
    both = run(pd.concat([one, two]), strata_table({"a": 5, "b": 5}))[0]
    alone = run(one, strata_table({"a": 10}))[0]
    assert whole(both)["change_t_c"] == pytest.approx(whole(alone)["change_t_c"], rel=1e-9)
