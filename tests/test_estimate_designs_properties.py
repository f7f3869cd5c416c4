"""Identities of designs: clusters, weights, order of rows, and pools that add up."""

from __future__ import annotations

import numpy as np
import pandas as pd
from estimate_frames import NAME, POOL, parcel_table, pick, stocks, strata_table
from hypothesis import given, settings
from hypothesis import strategies as st

from landcarbon.estimate.difference import Difference, difference_of_ratios
from landcarbon.estimate.stocks import estimate_stocks
from landcarbon.estimate.tables import read_plots

STRATA = {"a": 120.0, "b": 40.5, "c": 7.25}
PARCELS = {"w": 50.0, "x": 61.0, "y": 30.0, "z": 26.75}
POOLS = [POOL, "soil"]
QUICK = settings(max_examples=10, deadline=None, derandomize=True)
FIGURES = ["density_t_c_ha", "density_se", "stock_t_c", "stock_se", "df", "plots"]


@st.composite
def plot_tables(draw: st.DrawFn) -> pd.DataFrame:
    """Plots of two surveys in clusters that parcels cut; soil is missing on some."""
    rng = np.random.default_rng(draw(st.integers(0, 2**32 - 1)))
    count = draw(st.integers(18, 60))
    cluster = np.arange(count) // draw(st.integers(1, 4))
    stratum = np.array(list(STRATA))[cluster % 3]
    base = 80.0 + rng.normal(0, 20, count)[cluster]
    frames = []
    for survey in ("t1", "t2"):
        above, soil = base + rng.normal(0, 8, count), rng.normal(60, 9, count)
        frame = pd.DataFrame(
            {
                "survey": survey,
                "plot": [f"p{number:02d}" for number in range(count)],
                "parcel": rng.choice(list(PARCELS), count) if survey == "t1" else frames[0]["parcel"],
                "stratum": stratum,
                "cluster": [f"k{number}" for number in cluster],
                "date": pd.Timestamp("2014-06-01") + pd.to_timedelta(3652 * (survey == "t2"), "D"),
                "size": rng.uniform(0.3, 1.0, count),
                "weight": rng.uniform(0.5, 4.0, count),
                "inside": True,
                POOL: above,
                "soil": np.where(rng.random(count) < 0.2, np.nan, soil),
            }
        )
        frames.append(frame.assign(all=frame[POOL] + frame["soil"]))
    return pd.concat(frames, ignore_index=True)


def run(table: pd.DataFrame, parts: bool = False) -> pd.DataFrame:
    sums = {name: [name] for name in POOLS} if parts else None
    tables = strata_table(STRATA), parcel_table(PARCELS)
    return stocks(table, *tables, surveys=["t1", "t2"], pools=POOLS, sums=sums)[0]


def run_change(table: pd.DataFrame) -> Difference:
    plots = read_plots(table, strata_table(STRATA), parcel_table(PARCELS), POOLS)
    samples = plots.sample("t1"), plots.sample("t2")
    allowed = np.ones((len(plots.units.strata), 3), dtype=bool)
    domains = samples[0].parcel, samples[1].parcel
    return difference_of_ratios(samples, domains, len(PARCELS), plots.units.stratum_area_ha, allowed)


@QUICK
@given(plot_tables(), st.booleans())
def test_clusters_of_one_plot_are_no_clusters(table: pd.DataFrame, parts: bool) -> None:
    alone = table.assign(cluster=table["plot"])
    plain = table.drop(columns="cluster")
    np.testing.assert_allclose(run(alone, parts)[FIGURES], run(plain, parts)[FIGURES], rtol=1e-9)
    assert list(run(alone, parts)["method"]) == list(run(plain, parts)["method"])
    blank = run(table.assign(cluster=" "), parts)
    pd.testing.assert_frame_equal(blank, run(plain, parts), check_exact=True)
    one, two = run_change(alone), run_change(plain)
    np.testing.assert_allclose(one.variance, two.variance, rtol=1e-8)
    np.testing.assert_allclose(one.df, two.df, rtol=1e-6)
    np.testing.assert_array_equal(one.paired, two.paired)


@QUICK
@given(plot_tables(), st.floats(0.001, 1000.0), st.floats(0.001, 1000.0))
def test_scale_of_weights_does_not_matter_in_a_stratum(table: pd.DataFrame, one: float, two: float) -> None:
    factor = table["stratum"].map({"a": one, "b": two, "c": 1.0})
    scaled = table.assign(weight=table["weight"] * factor)
    for parts in (False, True):
        np.testing.assert_allclose(run(scaled, parts)[FIGURES], run(table, parts)[FIGURES], rtol=1e-8)
    np.testing.assert_allclose(run_change(scaled).variance, run_change(table).variance, rtol=1e-7)
    equal = run(table.assign(weight=3.0))
    np.testing.assert_allclose(equal[FIGURES], run(table.drop(columns="weight"))[FIGURES], rtol=1e-9)


@QUICK
@given(plot_tables(), st.integers(0, 1000), st.sampled_from(["random", "neighbours"]))
def test_order_of_rows_does_not_matter_to_the_last_bit(table: pd.DataFrame, seed: int, variance: str) -> None:
    table = table.assign(x=np.arange(len(table)) % 7 * 10.0, y=np.arange(len(table)) // 7 * 10.0)
    options = {"pools": POOLS, "confidence": 0.95, "inventory_name": NAME, "variance": variance}
    for sums in (None, {name: [name] for name in POOLS}):
        one, two = (
            estimate_stocks(rows, strata_table(STRATA), parcel_table(PARCELS), ["t1", "t2"], sums=sums, **options)[0]
            for rows in (table, table.sample(frac=1.0, random_state=seed))
        )
        pd.testing.assert_frame_equal(one, two, check_exact=True)


@QUICK
@given(plot_tables())
def test_pools_add_up_with_clusters_and_weights(table: pd.DataFrame) -> None:
    frame = run(table, parts=True)
    wide = frame.pivot(index=["by", "unit", "survey"], columns="pool", values="stock_t_c")
    there = wide.notna().all(axis=1)
    np.testing.assert_allclose((wide[POOL] + wide["soil"])[there], wide["all"][there], rtol=1e-10)
    for survey in ("t1", "t2"):
        rows = pick(frame, "stratum", "all", survey=survey)
        row = pick(frame, "inventory", "all", survey=survey).iloc[0]
        np.testing.assert_allclose(rows["stock_t_c"].sum(), row["stock_t_c"], rtol=1e-10)
        np.testing.assert_allclose(np.sqrt((rows["stock_se"] ** 2).sum()), row["stock_se"], rtol=1e-10)


@QUICK
@given(st.integers(0, 2**32 - 1), st.integers(2, 5))
def test_plots_alike_within_clusters_count_as_one(seed: int, times: int) -> None:
    """Fully correlated: every plot of a cluster says the same, so nothing is gained by more of them."""
    rng = np.random.default_rng(seed)
    one = pd.DataFrame(
        {
            "survey": "t1",
            "plot": [f"p{number:02d}" for number in range(24)],
            "parcel": rng.choice(list(PARCELS), 24),
            "stratum": np.array(list(STRATA))[np.arange(24) % 3],
            "date": pd.Timestamp("2014-06-01"),
            "size": rng.uniform(0.3, 1.0, 24),
            "inside": True,
            POOL: rng.gamma(3, 20, 24),
            "soil": rng.normal(60, 9, 24),
        }
    )
    one = one.assign(all=one[POOL] + one["soil"])
    many = pd.concat([one.assign(plot=one["plot"] + f"-{copy}", cluster=one["plot"]) for copy in range(times)])
    tables, names = (strata_table(STRATA), parcel_table(PARCELS)), FIGURES[:-1]
    for sums in (None, {name: [name] for name in POOLS}):
        single = stocks(one, *tables, surveys=["t1"], pools=POOLS, sums=sums)[0]
        copied = stocks(many, *tables, surveys=["t1"], pools=POOLS, sums=sums)[0]
        # a parcel with one plot stays without a figure, and one cluster is still one unit
        np.testing.assert_allclose(copied[names], single[names], rtol=1e-8)
        np.testing.assert_array_equal(copied["plots"], times * single["plots"])
