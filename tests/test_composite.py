"""Composite figures of parcels: they add up, say how they came about, err less than direct ones, and end well."""

from __future__ import annotations

from collections.abc import Mapping, Sequence
from pathlib import Path
from typing import Any

import numpy as np
import pandas as pd
import pytest
from estimate_frames import NAME, change, pick, stocks
from hypothesis import given, settings
from hypothesis import strategies as st

from landcarbon.api import open_inventory
from landcarbon.constants import CARBON_TO_CO2
from landcarbon.demo import copy_demo
from landcarbon.errors import UserError
from landcarbon.estimate.composite import REPLACED_RULES, composite_change, composite_parcels
from landcarbon.estimate.composite_core import sum_of_pools
from landcarbon.estimate.composite_plots import Places, plot_evidence
from landcarbon.estimate.small_area import fit_fay_herriot
from landcarbon.findings import FINDING_COLUMNS
from landcarbon.statements import state_change, state_stocks

QUICK = settings(max_examples=5, deadline=None, derandomize=True)
SUMS = {"above_ground": ["above_ground"], "soil": ["soil"], "all": ["above_ground", "soil"]}
FIGURES = ["density_t_c_ha", "density_se", "density_low", "density_high", "stock_t_c", "df"]


def woodland(
    seed: int,
    *,
    strata: int = 3,
    each: int = 10,
    hectares_per_plot: float = 5.0,
    spread: float = 20.0,
    skewed: bool = False,
) -> dict[str, Any]:
    """Invented parcels with known truth, and plots put on them at random by area; two surveys of the same plots."""
    rng = np.random.default_rng(seed)
    count = strata * each
    stratum = np.repeat(np.arange(strata), each)
    area = rng.lognormal(2.5, 0.5, count)
    x = rng.normal(0, 1, count)
    truth = np.linspace(80, 180, strata)[stratum] + spread * (0.9 * x + np.sqrt(0.19) * rng.normal(size=count))
    grown = 12 + 4 * rng.normal(size=count)
    number = max(int(area.sum() / hectares_per_plot), 1)
    at = rng.choice(count, number, p=area / area.sum())
    noise = rng.normal(size=(number, 3))
    if skewed:
        noise[:, 0] = (rng.lognormal(0, 0.6, number) - np.exp(0.18)) / np.sqrt((np.exp(0.36) - 1) * np.exp(0.36))
    wood = truth[at] + 50 * noise[:, 0]
    earth = 0.4 * truth[at] + 12 * (0.6 * noise[:, 0] + 0.8 * noise[:, 1])
    later = wood + grown[at] + 6 * noise[:, 2]
    common = {
        "plot": [f"p{i:04d}" for i in range(number)],
        "parcel": [f"P{i:03d}" for i in at],
        "stratum": [f"S{i}" for i in stratum[at]],
        "size": 1.0,
        "inside": True,
    }
    frames = [
        pd.DataFrame({**common, "survey": survey, "date": pd.Timestamp(date), "above_ground": above, "soil": earth})
        for survey, date, above in (("t1", "2014-07-01", wood), ("t2", "2024-07-01", later))
    ]
    plots = pd.concat(frames, ignore_index=True)
    labels = [f"P{i:03d}" for i in range(count)]
    parcels = pd.DataFrame({"parcel": labels, "stratum": [f"S{i}" for i in stratum], "area_ha": area})
    return {
        "plots": plots.assign(all=plots["above_ground"] + plots["soil"]),
        "parcels": parcels,
        "strata": parcels.groupby("stratum", as_index=False)["area_ha"].sum(),
        "truth": pd.DataFrame({"above_ground": truth, "soil": 0.4 * truth, "all": 1.4 * truth}, index=labels),
        "grown": pd.Series(grown, index=labels),
        "rasters": pd.DataFrame({"survey": "t1", "parcel": labels, "height": 15 + 3 * x}),
    }


def compose(land: Mapping[str, Any], **options: Any) -> tuple[pd.DataFrame, pd.DataFrame, Any, pd.DataFrame]:
    direct, _ = stocks(land["plots"], land["strata"], land["parcels"], ["t1"], ["above_ground", "soil"], sums=SUMS)
    plots = land["plots"][land["plots"]["survey"] == "t1"]
    made, detail, found = composite_parcels(direct, land["parcels"], plots, SUMS, confidence=0.95, **options)
    return direct, made, detail, found


def compose_change(
    land: Mapping[str, Any], pools: Sequence[str] = ("above_ground",), **options: Any
) -> tuple[Any, ...]:
    sums = {pool: [pool] for pool in pools} | {"all": list(pools)}
    direct, _ = change(land["plots"], land["strata"], land["parcels"], pools=pools, sums=sums)
    made, detail, found = composite_change(direct, land["parcels"], land["plots"], sums, confidence=0.95, **options)
    return direct, made, detail, found


def assert_sums(table: pd.DataFrame, parcels: pd.DataFrame, value: str, keys: list[str]) -> None:
    """Parcels add up to their stratum, strata to the inventory, pools to ``all``, to 1e-9."""
    stratum = parcels.set_index("parcel")["stratum"].astype(str)
    rows = table[table["by"] == "parcel"]
    added = rows.groupby([*keys, "pool", rows["unit"].map(stratum).rename("unit")])[value].sum(min_count=1)
    published = table[table["by"] == "stratum"].set_index([*keys, "pool", "unit"])[value].reindex(added.index)
    scale = published.abs().max()
    np.testing.assert_allclose(added, published, rtol=1e-9, atol=1e-12 * scale)
    whole = table[table["by"] == "inventory"].set_index([*keys, "pool"])[value]
    added = rows.groupby([*keys, "pool"])[value].sum(min_count=1).reindex(whole.index)
    np.testing.assert_allclose(added, whole, rtol=1e-9, atol=1e-12 * scale)
    pools = rows[rows["pool"] != "all"].groupby([*keys, "unit"])[value].sum(min_count=1)
    every = rows[rows["pool"] == "all"].set_index([*keys, "unit"])[value].reindex(pools.index)
    np.testing.assert_allclose(pools, every, rtol=1e-9, atol=1e-12 * scale)


# ---- the demo


@pytest.fixture(scope="module")
def demo(tmp_path_factory: pytest.TempPathFactory) -> dict[str, Any]:
    stage = open_inventory(copy_demo(Path(tmp_path_factory.mktemp("small") / "demo"))).stage
    parcels = pd.DataFrame(stage.inputs.parcels.drop(columns="geometry"))
    options = {"strata": stage.inputs.strata, "parcels": parcels, "confidence": 0.95, "inventory_name": NAME}
    surveys = [str(name) for name in stage.inputs.surveys["survey"]]
    pairs = [(surveys[0], surveys[1]), (surveys[0], surveys[-1])]
    return {
        "parcels": parcels,
        "plots": stage.plot_parts,
        "sums": stage.sums,
        "stocks": state_stocks(stage.plot_parts, stage.sums, surveys, **options)[0],
        "change": pd.concat(
            [state_change(stage.plot_parts, stage.sums, *pair, **options)[0] for pair in pairs], ignore_index=True
        ),
    }


def test_stocks_of_the_demo_add_up_at_all_levels(demo: dict[str, Any]) -> None:
    made, detail, found = composite_parcels(
        demo["stocks"], demo["parcels"], demo["plots"], demo["sums"], confidence=0.95
    )
    assert_sums(made, demo["parcels"], "stock_t_c", ["survey"])
    rows = made[(made["by"] == "parcel") & (made["pool"] == "all")]
    assert rows[FIGURES].notna().all(axis=None)
    assert rows["method"].str.contains("; benchmarked").all()
    kept = made["by"] != "parcel"
    pd.testing.assert_frame_equal(made[kept], demo["stocks"][kept])
    assert list(found.columns) == FINDING_COLUMNS
    assert len(detail.parcels) == int((made["by"] == "parcel").sum())
    assert detail.models["parcels"].between(1, len(demo["parcels"])).all()


def test_a_parcel_of_the_demo_without_two_plots_gets_a_figure(demo: dict[str, Any]) -> None:
    before = demo["stocks"][demo["stocks"]["by"] == "parcel"]
    lacking = before[before["density_t_c_ha"].isna() & (before["pool"] == "all")]
    assert len(lacking)
    made, _, _ = composite_parcels(demo["stocks"], demo["parcels"], demo["plots"], demo["sums"], confidence=0.95)
    now = made.loc[lacking.index]
    assert (now["density_se"] > 0).all()
    assert now["method"].str.startswith(("composite: sum of pools", "synthetic: ")).all()


def test_change_of_the_demo_adds_up_and_its_columns_agree(demo: dict[str, Any]) -> None:
    made, _, _ = composite_change(demo["change"], demo["parcels"], demo["plots"], demo["sums"], confidence=0.95)
    assert_sums(made, demo["parcels"], "change_t_c", ["since", "until"])
    rows = made[(made["by"] == "parcel") & made["change_t_c"].notna()]
    np.testing.assert_allclose(rows["change_t_c_yr"], rows["change_t_c_ha_yr"] * rows["area_ha"], rtol=1e-12)
    np.testing.assert_allclose(rows["co2_t_yr"], -CARBON_TO_CO2 * rows["change_t_c_yr"], rtol=1e-12, atol=1e-12)
    pools = rows[rows["pool"] != "all"]
    np.testing.assert_allclose(pools["change_t_c_yr"], pools["change_t_c"] / pools["years"], rtol=1e-12)
    added = pools.groupby(["since", "until", "unit"])["change_t_c_yr"].sum()
    every = rows[rows["pool"] == "all"].set_index(["since", "until", "unit"])["change_t_c_yr"].reindex(added.index)
    np.testing.assert_allclose(added, every, rtol=1e-9)
    assert made["years"][made["by"] == "parcel"].notna().any()


# ---- simulated


def test_figures_err_less_than_direct_ones_and_intervals_hold() -> None:
    squares, direct_squares, held, synthetic = [], [], [], []
    for seed in range(16):
        land = woodland(seed, skewed=seed % 2 == 1)
        direct, made, _, _ = compose(land)
        for pool in ("above_ground", "all"):
            truth = land["truth"][pool]
            one, two = pick(made, "parcel", pool), pick(direct, "parcel", pool)
            known = two["density_t_c_ha"].notna()
            error = one["density_t_c_ha"] - truth
            squares.append((error[known] ** 2).mean())
            direct_squares.append(((two["density_t_c_ha"] - truth)[known] ** 2).mean())
            inside = (one["density_low"] <= truth) & (truth <= one["density_high"])
            held.append(inside.mean())
            synthetic.append(inside[~known])
    # simulated, seeded: plots shared among 30 parcels that differ by 20 t C/ha, plots by 50
    assert np.mean(squares) < 0.5 * np.mean(direct_squares)
    assert 0.90 <= np.mean(held) <= 0.98
    assert 0.88 <= pd.concat(synthetic).mean() <= 1.0


def test_intervals_hold_if_parcels_do_not_differ() -> None:
    held, zero = [], 0
    for seed in range(8):
        land = woodland(seed, spread=0.0)
        _, made, detail, _ = compose(land)
        truth = land["truth"]["above_ground"]
        rows = pick(made, "parcel", "above_ground")
        held.append(((rows["density_low"] <= truth) & (truth <= rows["density_high"])).mean())
        zero += int((detail.models["method"] == "adjusted REML").sum())
        assert (rows["density_se"] > 0).all()
    assert zero > 0
    assert np.mean(held) > 0.93  # simulated, seeded


def uneven(seed: int, means: Sequence[float], changing: Sequence[float], each: int) -> dict[str, Any]:
    """Invented strata of very different density: parcels differ by 20 % of it, their plots by 45 %, with a skew.

    Growth is a fifth of the density; that of plots in the same parcel differs by ``changing`` of it.
    """
    rng = np.random.default_rng(seed)
    stratum = np.repeat(np.arange(len(means)), each)
    count = len(stratum)
    level = np.asarray(means)[stratum]
    truth = level * (1 + 0.2 * rng.normal(size=count)).clip(0.2)
    growth = 0.2 * level * (1 + 0.3 * rng.normal(size=count))
    area = rng.lognormal(2.0, 0.3, count)
    number = rng.integers(2, 7, count)
    at = np.repeat(np.arange(count), number)
    shape = 1 / 0.45**2
    wood = truth[at] * rng.gamma(shape, 1 / shape, len(at))
    later = wood + growth[at] + 0.2 * level[at] * np.asarray(changing)[stratum[at]] * rng.normal(size=len(at))
    common = {
        "plot": [f"p{i:04d}" for i in range(len(at))],
        "parcel": [f"P{i:03d}" for i in at],
        "stratum": [f"S{i}" for i in stratum[at]],
        "size": 1.0,
        "inside": True,
    }
    frames = [
        pd.DataFrame({**common, "survey": survey, "date": pd.Timestamp(date), "above_ground": value, "all": value})
        for survey, date, value in (("t1", "2014-07-01", wood), ("t2", "2024-07-01", later))
    ]
    labels = [f"P{i:03d}" for i in range(count)]
    parcels = pd.DataFrame({"parcel": labels, "stratum": [f"S{i}" for i in stratum], "area_ha": area})
    return {
        "plots": pd.concat(frames, ignore_index=True),
        "parcels": parcels,
        "strata": parcels.groupby("stratum", as_index=False)["area_ha"].sum(),
        "truth": pd.Series(truth, index=labels),
        "grown": pd.Series(growth, index=labels),
    }


def by_stratum(
    means: Sequence[float], changing: Sequence[float], seeds: int, *, of_change: bool, each: int = 6
) -> pd.DataFrame:
    """Share of intervals that hold, errors, and stated errors to those of direct figures, by stratum."""
    found = []
    sums = {"above_ground": ["above_ground"], "all": ["above_ground"]}
    for seed in range(seeds):
        land = uneven(seed, means, changing, each)
        area = land["parcels"].set_index("parcel")["area_ha"]
        if of_change:
            direct, made, _, _ = compose_change(land)
            truth, names = land["grown"] * area, ("change_t_c", "change_se", "change_low", "change_high")
        else:
            plots = land["plots"][land["plots"]["survey"] == "t1"]
            direct, _ = stocks(plots, land["strata"], land["parcels"], ["t1"], ["above_ground"], sums=sums)
            made, _, _ = composite_parcels(direct, land["parcels"], plots, sums, confidence=0.95)
            truth, names = land["truth"], ("density_t_c_ha", "density_se", "density_low", "density_high")
        one, two = (pick(frame, "parcel", "above_ground") for frame in (made, direct))
        value, se, low, high = names
        unit = area if of_change else pd.Series(1.0, index=area.index)
        found.append(
            pd.DataFrame(
                {
                    "stratum": land["parcels"].set_index("parcel")["stratum"],
                    "held": (one[low] <= truth) & (truth <= one[high]),
                    "square": ((one[value] - truth) / unit) ** 2,
                    "direct_square": ((two[value] - truth) / unit) ** 2,
                    "se": one[se] / unit,
                    "direct_se": two[se] / unit,
                }
            )
        )
    mean = pd.concat(found).astype({"held": float}).groupby("stratum").mean()
    return mean.assign(error=np.sqrt(mean["square"] / mean["direct_square"]), stated=mean["se"] / mean["direct_se"])


@pytest.mark.parametrize("of_change", [False, True])
@pytest.mark.parametrize("means", [(90.0, 50.0, 6.0), (90.0, 6.0)])
def test_each_of_few_uneven_strata_keeps_its_own_error(means: tuple[float, ...], of_change: bool) -> None:
    found = by_stratum(means, [0.5] * len(means), 40, of_change=of_change)
    # simulated, seeded: 240 parcels a stratum, so that the share is told to 1.4 %
    assert found["held"].between(0.90, 0.98).all()
    assert (found["error"] <= 1.0).all()
    assert (found["stated"] <= 1.5).all()


def test_few_parcels_of_uneven_strata_keep_their_own_error() -> None:
    """Without a model parcels are taken to differ as much as single plots of their own stratum do."""
    found = by_stratum((90.0, 6.0), (0.5, 0.5), 40, of_change=False, each=2)
    assert (found["held"] >= 0.88).all()  # simulated, seeded: 80 parcels a stratum
    assert (found["error"] <= 1.0).all()
    assert (found["stated"] <= 1.5).all()


def test_bare_land_does_not_make_woods_certain() -> None:
    found = by_stratum((90.0, 0.0), (0.5, 0.5), 20, of_change=False)
    assert 0.90 <= found.loc["S0", "held"] <= 0.99  # simulated, seeded: 120 parcels
    assert found.loc["S0", "error"] <= 1.0
    assert found.loc["S1", "held"] == 1.0
    assert 0 < found.loc["S1", "se"] < 0.05 * found.loc["S0", "se"]


def test_a_calm_stratum_does_not_take_the_error_of_an_unruly_one() -> None:
    found = by_stratum((90.0, 90.0), (5.0, 0.3), 12, of_change=True)
    # simulated, seeded: change differs between plots 17 times as much in one stratum as in the other of equal density
    assert (found["held"] >= 0.90).all()
    assert (found["error"] <= 1.05).all()
    assert (found["stated"] <= 2.2).all()


def test_strata_of_one_density_are_modelled_as_one() -> None:
    land = woodland(2)
    plots = land["plots"][land["plots"]["survey"] == "t1"]
    above = plots["above_ground"].clip(lower=1.0)
    above = above * 100 / above.groupby(plots["stratum"]).transform("mean")
    plots = plots.assign(above_ground=above, all=above)
    sums = {"above_ground": ["above_ground"], "all": ["above_ground"]}
    direct, _ = stocks(plots, land["strata"], land["parcels"], ["t1"], ["above_ground"], sums=sums)
    _, detail, _ = composite_parcels(direct, land["parcels"], plots, sums, confidence=0.95)
    rows = detail.parcels[(detail.parcels["pool"] == "above_ground") & (detail.parcels["weight_direct"] > 0)]
    code = rows["parcel"].map(land["parcels"].set_index("parcel")["stratum"]).to_numpy()
    groups = (code[:, None] == np.unique(code)).astype(float)
    given = rows["direct"].to_numpy(), rows["smoothed_se"].to_numpy() ** 2, groups
    plain = fit_fay_herriot(*given)
    plain = plain if plain.refvar[0] > 0 else fit_fay_herriot(*given, method="adjusted REML")
    np.testing.assert_allclose(rows["composite"], plain.eblup, rtol=1e-7)  # identity: one variance for all parcels
    assert detail.models.loc[0, "model_variance"] == pytest.approx(plain.refvar[0], rel=1e-7)


def test_change_errs_less_than_direct_change() -> None:
    squares, direct_squares, held = [], [], []
    for seed in range(10):
        land = woodland(seed)
        direct, made, _, _ = compose_change(land)
        area = land["parcels"].set_index("parcel")["area_ha"]
        one, two = (pick(frame, "parcel", "above_ground") for frame in (made, direct))
        known = two["change_t_c"].notna()
        truth = land["grown"] * area
        squares.append((((one["change_t_c"] - truth) / area)[known] ** 2).mean())
        direct_squares.append((((two["change_t_c"] - truth) / area)[known] ** 2).mean())
        held.append(((one["change_low"] <= truth) & (truth <= one["change_high"])).mean())
        assert_sums(made, land["parcels"], "change_t_c", ["since", "until"])
    assert np.mean(squares) < 0.8 * np.mean(direct_squares)  # simulated, seeded
    assert 0.90 <= np.mean(held) <= 0.99


def test_a_raster_that_tells_parcels_apart_helps() -> None:
    plain, helped = [], []
    for seed in range(5):
        land = woodland(seed, each=20)
        truth = land["truth"]["above_ground"]
        for into, options in ((plain, {}), (helped, {"covariates": land["rasters"]})):
            _, made, detail, _ = compose(land, **options)
            rows = pick(made, "parcel", "above_ground")
            into.append(((rows["density_t_c_ha"] - truth) ** 2).mean())
            assert_sums(made, land["parcels"], "stock_t_c", ["survey"])
        assert "strata and rasters" in set(detail.models["model"])
        assert rows["method"].str.contains("stratum and raster model").all()
    assert np.mean(helped) < 0.8 * np.mean(plain)  # simulated, seeded


def test_plots_adjusted_by_rasters_are_shifted_to_their_parcel() -> None:
    land = woodland(3, hectares_per_plot=15.0)
    offset = pd.Series(np.linspace(-20, 20, 30), index=land["parcels"]["parcel"])
    table = pd.DataFrame(
        {"survey": "t1", "by": "parcel", "unit": offset.index, "part": "above_ground", "offset": offset.to_numpy()}
    )
    plots = land["plots"][land["plots"]["survey"] == "t1"]
    direct, _ = stocks(land["plots"], land["strata"], land["parcels"], ["t1"], ["above_ground", "soil"], sums=SUMS)
    _, before, _ = composite_parcels(direct, land["parcels"], plots, SUMS, confidence=0.95)
    _, after, _ = composite_parcels(direct, land["parcels"], plots, SUMS, offsets=table, confidence=0.95)
    one, two = (d.parcels[d.parcels["pool"] == "above_ground"].set_index("parcel") for d in (before, after))
    single = one["plots"] == 1
    assert single.any()
    np.testing.assert_allclose((two["direct"] - one["direct"])[single], offset[single], rtol=1e-9)
    assert (two["direct"] == one["direct"])[one["plots"] > 1].all()  # as published


# ---- identities


@QUICK
@given(seed=st.integers(0, 10_000))
def test_order_of_parcels_and_plots_does_not_matter(seed: int) -> None:
    land = woodland(seed)
    _, made, _, _ = compose(land)
    rng = np.random.default_rng(seed)
    mixed = {
        **land,
        "plots": land["plots"].iloc[rng.permutation(len(land["plots"]))].reset_index(drop=True),
        "parcels": land["parcels"].iloc[rng.permutation(len(land["parcels"]))].reset_index(drop=True),
    }
    _, again, _, _ = compose(mixed)
    for pool in ("above_ground", "soil", "all"):
        one, two = pick(made, "parcel", pool), pick(again, "parcel", pool)
        np.testing.assert_allclose(two.reindex(one.index)[FIGURES], one[FIGURES], rtol=1e-6)
        assert (two.reindex(one.index)["method"] == one["method"]).all()


@QUICK
@given(seed=st.integers(0, 10_000), scale=st.sampled_from([1e-3, 44 / 12, 1000.0]))
def test_the_unit_does_not_matter(seed: int, scale: float) -> None:
    land = woodland(seed)
    columns = ["above_ground", "soil", "all"]
    larger = {**land, "plots": land["plots"].assign(**{name: scale * land["plots"][name] for name in columns})}
    _, made, _, _ = compose(land)
    _, again, _, _ = compose(larger)
    rows = made["by"] == "parcel"
    np.testing.assert_allclose(
        again.loc[rows, "density_t_c_ha"], scale * made.loc[rows, "density_t_c_ha"], rtol=1e-6, atol=1e-6 * scale
    )
    np.testing.assert_allclose(again.loc[rows, "density_se"], scale * made.loc[rows, "density_se"], rtol=1e-5)


@QUICK
@given(seed=st.integers(0, 10_000), share=st.floats(0.1, 0.9))
def test_a_pool_may_be_split_into_parts(seed: int, share: float) -> None:
    """A pool of two parts that are always measured together has the figure of their sum, however it is split."""
    land = woodland(seed)
    plots = land["plots"][land["plots"]["survey"] == "t1"]
    direct, whole, _, _ = compose(land)
    parts = plots.assign(trees=share * plots["above_ground"], shrubs=(1 - share) * plots["above_ground"])
    sums = {"above_ground": ["trees", "shrubs"], "soil": ["soil"]}
    made, _, _ = composite_parcels(direct, land["parcels"], parts, sums, confidence=0.95)
    np.testing.assert_allclose(made[FIGURES], whole[FIGURES], rtol=1e-6)
    # with a plot that lacks a part they are kept apart, and the sums still hold
    parts.loc[parts.index[0], "shrubs"] = np.nan
    direct, _ = stocks(parts, land["strata"], land["parcels"], ["t1"], ["above_ground", "soil"], sums=sums)
    made, _, _ = composite_parcels(direct, land["parcels"], parts, sums, confidence=0.95)
    assert_sums(made, land["parcels"], "stock_t_c", ["survey"])


@QUICK
@given(seed=st.integers(0, 10_000))
def test_error_of_the_sum_is_between_none_and_full_correlation(seed: int) -> None:
    _, made, _, _ = compose(woodland(seed))
    parts = {pool: pick(made, "parcel", pool)["density_se"] for pool in ("above_ground", "soil", "all")}
    assert (parts["all"] <= parts["above_ground"] + parts["soil"] + 1e-9).all()
    # invented plots rich in one pool are rich in the other: quadrature would be too small
    assert (parts["all"] > np.hypot(parts["above_ground"], parts["soil"])).all()


def test_sum_of_pools_by_hand() -> None:
    value, mse = np.array([[10.0, 20.0, 5.0]]), np.array([[9.0, 16.0, np.nan]])
    correlation = np.array([[1.0, 0.5, 1.0], [0.5, 1.0, 1.0], [1.0, 1.0, 1.0]])
    total, spread, df = sum_of_pools(value, mse, np.array([[8.0, 4.0, np.nan]]), np.ones((1, 3), bool), correlation)
    assert total[0] == 35
    assert spread[0] == pytest.approx(9 + 16 + 2 * 0.5 * 12)  # by hand
    assert df[0] == pytest.approx(25 / (9 / 8 + 16 / 4))
    lacking = sum_of_pools(value, mse, mse, np.array([[True, False, False]]), correlation)
    assert lacking[0][0] == 10
    missing = sum_of_pools(np.array([[10.0, np.nan, 5.0]]), mse, mse, np.ones((1, 3), bool), correlation)
    assert np.isnan(missing[0][0])


def test_a_parcel_with_a_hundred_plots_keeps_its_own_figure() -> None:
    land = woodland(1, strata=2, each=8, hectares_per_plot=0.05)
    direct, made, detail, _ = compose(land)
    weight = detail.parcels.loc[detail.parcels["pool"] == "above_ground", "weight_direct"]
    assert weight.min() > 0.9
    one, two = pick(made, "parcel", "above_ground"), pick(direct, "parcel", "above_ground")
    assert ((one["density_t_c_ha"] - two["density_t_c_ha"]).abs() < two["density_se"]).all()
    np.testing.assert_allclose(one["density_se"], two["density_se"], rtol=0.3)


# ---- what may be missing


def small(
    values: Sequence[float],
    parcel: Sequence[str],
    areas: Mapping[str, float],
    stratum_of: Mapping[str, str] | None = None,
    strata: Mapping[str, float] | None = None,
    plot_strata: Sequence[str] | None = None,
) -> dict[str, Any]:
    """A few plots in a few parcels; everything in stratum S unless told otherwise."""
    of = {name: "S" for name in areas} if stratum_of is None else stratum_of
    parcels = pd.DataFrame({"parcel": list(areas), "stratum": [of[name] for name in areas], "area_ha": areas.values()})
    known = parcels.groupby("stratum")["area_ha"].sum().to_dict() if strata is None else strata
    count = len(values)
    frames = [
        pd.DataFrame(
            {
                "survey": survey,
                "plot": [f"p{i}" for i in range(count)],
                "parcel": parcel,
                "stratum": plot_strata if plot_strata is not None else [of.get(name, "S") for name in parcel],
                "date": pd.Timestamp(date),
                "size": 1.0,
                "inside": True,
                "above_ground": np.asarray(values, dtype=float) * growth,
            }
        )
        for survey, date, growth in (("t1", "2014-07-01", 1.0), ("t2", "2024-07-01", 1.2))
    ]
    plots = pd.concat(frames, ignore_index=True)
    return {
        "plots": plots.assign(all=plots["above_ground"]),
        "parcels": parcels.astype({"area_ha": float}),
        "strata": pd.DataFrame({"stratum": list(known), "area_ha": [float(area) for area in known.values()]}),
    }


def both(land: Mapping[str, Any]) -> tuple[pd.DataFrame, pd.DataFrame]:
    """Rows of ``all`` of the parcels, of stocks and of change."""
    sums = {"above_ground": ["above_ground"]}
    table, _ = stocks(land["plots"], land["strata"], land["parcels"], ["t1"])
    made, _, found = composite_parcels(table, land["parcels"], land["plots"], sums, confidence=0.95)
    assert not set(found["rule"]) & set(REPLACED_RULES)
    _, later, _, _ = compose_change(land)
    return pick(made, "parcel"), pick(later, "parcel")


AREAS = {"A": 10.0, "B": 20.0, "C": 5.0}
SIX = [81.0, 120.0, 95.0, 140.0, 66.0, 101.0]


def test_all_plots_in_one_parcel() -> None:
    made, later = both(small(SIX, ["A"] * 6, AREAS))
    assert made[FIGURES].notna().all(axis=None)
    assert made.loc["A", "method"].startswith("composite: 86 % from 6 plots, rest stratum mean (too few parcels")
    assert made.loc["B", "method"].startswith("synthetic: no plots, stratum mean")
    assert made.loc["B", "density_se"] > 2 * made.loc["A", "density_se"]
    assert later[["change_t_c", "change_se", "years", "co2_t_yr"]].notna().all(axis=None)


def test_one_parcel_only_is_its_stratum() -> None:
    land = small(SIX, ["A"] * 6, {"A": 10.0})
    made, later = both(land)
    table, _ = stocks(land["plots"], land["strata"], land["parcels"], ["t1"])
    np.testing.assert_allclose(
        made.loc["A", FIGURES].astype(float), pick(table, "stratum").loc["S", FIGURES].astype(float)
    )
    assert made.loc["A", "method"] == "direct: the parcel is its whole stratum; benchmarked"
    direct, _ = change(land["plots"], land["strata"], land["parcels"])
    row = pick(direct, "stratum").loc["S"]
    for name in ("change_t_c", "change_se", "change_low", "change_high"):
        assert later.loc["A", name] == pytest.approx(row[name], rel=1e-6)


@pytest.mark.parametrize("value", [0.0, 50.0])
def test_equal_values_claim_no_error(value: float) -> None:
    made, later = both(small([value] * 6, ["A", "A", "B", "B", "C", "C"], AREAS))
    np.testing.assert_allclose(made["density_t_c_ha"], value)
    assert made["density_se"].isna().all()
    assert (made["method"] == "the same on all plots; its error cannot be told").all()
    np.testing.assert_allclose(later["change_t_c"], 0.2 * value * later["area_ha"])


def test_a_tie_of_two_plots_claims_no_certainty() -> None:
    made, _ = both(small([90, 90, 120, 100, 95], ["A", "A", "B", "B", "C"], AREAS))
    assert made.loc["A", "density_se"] > 0.8 * made.loc["B", "density_se"]
    tie, _ = both(small([90, 90], ["A", "A"], AREAS))
    assert tie["density_se"].isna().all()
    assert (tie["density_t_c_ha"] == 90).all()


def test_a_parcel_of_no_area() -> None:
    made, later = both(small(SIX, ["A", "A", "B", "B", "C", "C"], {**AREAS, "C": 0.0}))
    assert made[FIGURES].notna().all(axis=None)
    assert made.loc["C", "stock_t_c"] == 0
    assert made["stock_t_c"].sum() == pytest.approx(30 * np.mean(SIX), rel=1e-12)
    assert later.loc["C", "change_t_c_ha_yr"] > 0


def test_a_stratum_without_plots_has_no_figure() -> None:
    land = small(SIX, ["A", "A", "B", "B", "B", "B"], {**AREAS, "D": 3.0}, {"A": "S", "B": "S", "C": "S", "D": "T"})
    made, later = both(land)
    assert made.loc[["A", "B", "C"], FIGURES].notna().all(axis=None)
    assert np.isnan(made.loc["D", "density_t_c_ha"])
    assert made.loc["D", "method"] == "not estimable: its stratum is not estimable: 0 plot(s)"
    assert np.isnan(later.loc["D", "change_t_c"])


def test_parcels_of_a_stratum_with_one_plot_are_not_benchmarked() -> None:
    of = {"A": "S", "B": "S", "C": "S", "D": "T", "E": "T"}
    made, later = both(small(SIX, ["A", "A", "B", "B", "C", "D"], {**AREAS, "D": 3.0, "E": 4.0}, of))
    assert made.loc[["D", "E"], "method"].str.endswith("; not benchmarked: stratum T is not estimable").all()
    assert (made.loc[["D", "E"], "density_se"] > made.loc["B", "density_se"]).all()
    assert made.loc["E", "density_se"] > made.loc["D", "density_se"]
    assert later[["change_t_c", "change_se", "years"]].notna().all(axis=None)


def test_one_plot_in_all() -> None:
    made, later = both(small([100.0], ["A"], AREAS))
    assert made["density_t_c_ha"].isna().all()
    assert made["method"].str.startswith("not estimable").all()
    assert later["method"].str.startswith("not estimable").all()


def test_plots_outside_all_parcels_speak_for_their_stratum() -> None:
    made, _ = both(small(SIX, [""] * 6, AREAS))
    np.testing.assert_allclose(made["density_t_c_ha"], np.mean(SIX))
    assert (made["method"] == "synthetic: mean of the stratum, none of its parcels has plots; benchmarked").all()
    assert (made["density_se"] > np.std(SIX, ddof=1)).all()  # as much as single plots differ, and more


def test_parcels_that_do_not_fill_their_stratum_stay_as_they_are() -> None:
    made, _ = both(small(SIX, ["A", "A", "B", "B", "C", "C"], AREAS, strata={"S": 50.0}))
    assert made["method"].str.endswith("not benchmarked: the areas of the parcels are not that of stratum S").all()
    assert made[FIGURES].notna().all(axis=None)


def test_an_unknown_area_leaves_densities() -> None:
    made, _ = both(small(SIX, ["A", "A", "B", "B", "C", "C"], {**AREAS, "C": np.nan}, strata={"S": 50.0}))
    assert made["density_t_c_ha"].notna().all()
    assert np.isnan(made.loc["C", "stock_t_c"])
    assert made["method"].str.contains("not benchmarked").all()


def test_parcels_without_a_stratum_of_their_own_add_up_to_the_inventory() -> None:
    land = small(
        [*SIX, 90.0, 70.0],
        ["A", "A", "B", "B", "C", "A", "B", "B"],
        AREAS,
        {"A": "", "B": "", "C": ""},
        {"S": 20.0, "T": 15.0},
        ["S", "T"] * 4,
    )
    made, later = both(land)
    table, _ = stocks(land["plots"], land["strata"], land["parcels"], ["t1"])
    assert made["stock_t_c"].sum() == pytest.approx(pick(table, "inventory").loc[NAME, "stock_t_c"], rel=1e-12)
    assert made["method"].str.endswith("; benchmarked").all()
    assert later["change_t_c"].notna().all()


def test_a_pool_sampled_on_one_plot_stays_out() -> None:
    land = woodland(4)
    plots = land["plots"].copy()
    plots.loc[plots.index[1:], "soil"] = np.nan
    _, made, _, _ = compose({**land, "plots": plots})
    soil, whole = pick(made, "parcel", "soil"), pick(made, "parcel")
    assert soil["density_t_c_ha"].isna().all()
    above = pick(made, "parcel", "above_ground")
    np.testing.assert_allclose(whole["density_t_c_ha"], above["density_t_c_ha"])
    assert whole["method"].str.contains("; without soil: ").all()


def test_a_default_factor_passes_through() -> None:
    land = woodland(5)
    plots = land["plots"].assign(soil=70.0)
    direct, _ = stocks(plots, land["strata"], land["parcels"], ["t1"], ["above_ground", "soil"], sums=SUMS)
    flat = direct["pool"] == "soil"
    blank = ["density_se", "density_low", "density_high", "stock_se", "stock_low", "stock_high", "df"]
    direct.loc[flat, blank] = np.nan
    told = "default factor, the same on every plot; its uncertainty is not stated"
    direct.loc[flat & direct["density_t_c_ha"].notna(), "method"] = told
    made, _, _ = composite_parcels(direct, land["parcels"], plots, SUMS, confidence=0.95)
    soil, whole = pick(made, "parcel", "soil"), pick(made, "parcel")
    np.testing.assert_allclose(soil["density_t_c_ha"], 70.0)
    assert soil["density_se"].isna().all()
    assert (soil["method"] == told).all()
    np.testing.assert_allclose(whole["density_se"], pick(made, "parcel", "above_ground")["density_se"])
    assert_sums(made, land["parcels"], "stock_t_c", ["survey"])


@pytest.mark.parametrize("kind", ["constant", "collinear", "half missing", "missing"])
def test_rasters_that_cannot_serve(kind: str) -> None:
    land = woodland(6)
    rasters = land["rasters"].copy()
    if kind == "constant":
        rasters["height"] = 3.0
    if kind == "collinear":
        rasters["twice"] = 2 * rasters["height"] + 1
    if kind == "half missing":
        rasters.loc[rasters.index[::2], "height"] = np.nan
    if kind == "missing":
        rasters["height"] = np.nan
    _, made, detail, found = compose(land, covariates=rasters)
    assert_sums(made, land["parcels"], "stock_t_c", ["survey"])
    assert pick(made, "parcel")[FIGURES].notna().all(axis=None)
    assert ("raster tells nothing new" in set(found["rule"])) == (kind in ("collinear", "constant"))
    used = "strata and rasters" in set(detail.models["model"])
    assert used == (kind in ("collinear", "half missing"))


def test_clusters_count_as_one_plot() -> None:
    land = woodland(7)
    plots = land["plots"][land["plots"]["survey"] == "t1"]
    twice = pd.concat([plots, plots.assign(plot="x" + plots["plot"])], ignore_index=True)
    twice = twice.assign(cluster=np.tile(plots["plot"].to_numpy(), 2))
    direct, _ = stocks(plots, land["strata"], land["parcels"], ["t1"], ["above_ground", "soil"], sums=SUMS)
    one, _, _ = composite_parcels(direct, land["parcels"], plots, SUMS, confidence=0.95)
    two, _, _ = composite_parcels(direct, land["parcels"], twice, SUMS, confidence=0.95)
    np.testing.assert_allclose(two[FIGURES], one[FIGURES], rtol=1e-9)


def test_a_cluster_over_several_parcels_repeats_in_each_of_them() -> None:
    """Identity: with one plot of a cluster in each parcel, its plots are units of their own within parcels."""
    land = woodland(7)
    plots, parcels, strata = land["plots"], land["parcels"], land["strata"]
    apart = plots.assign(cluster="c" + plots.groupby(["survey", "parcel"]).cumcount().astype("str"))
    names = list(strata["stratum"])
    places = Places(
        parcels=list(parcels["parcel"]),
        strata=names,
        stratum=pd.Index(names).get_indexer(pd.Index(parcels["stratum"])),
        area_ha=parcels["area_ha"].to_numpy(dtype=float),
        stratum_area_ha=strata["area_ha"].to_numpy(dtype=float),
    )
    pools = ["above_ground", "soil"]
    one, two = (plot_evidence(frame, SUMS, ["t1", "t2"], places, pools) for frame in (plots, apart))
    for name in ("density", "plots", "variance", "between", "df", "correlation"):
        np.testing.assert_allclose(getattr(two, name), getattr(one, name), rtol=1e-9, err_msg=name)


def test_log_intervals_stay_above_zero() -> None:
    land = woodland(8)
    _, made, _, _ = compose(land, interval="log")
    rows = pick(made, "parcel")
    assert (rows["density_low"] > 0).all()
    up, down = rows["density_high"] - rows["density_t_c_ha"], rows["density_t_c_ha"] - rows["density_low"]
    assert (up > down).all()


def test_without_parcels_nothing_changes() -> None:
    land = woodland(9)
    direct, _ = stocks(land["plots"], land["strata"], None, ["t1"], ["above_ground", "soil"], sums=SUMS)
    made, detail, found = composite_parcels(direct, None, land["plots"], SUMS, confidence=0.95)
    pd.testing.assert_frame_equal(made, direct)
    assert detail.parcels.empty
    assert found.empty


def test_a_wrong_table_is_refused() -> None:
    land = woodland(10)
    direct, _, _, _ = compose(land)
    with pytest.raises(UserError, match="no column area_ha"):
        composite_parcels(direct, land["parcels"].drop(columns="area_ha"), land["plots"], SUMS, confidence=0.95)
    with pytest.raises(UserError, match="no column parcel"):
        compose(land, covariates=pd.DataFrame({"survey": ["t1"], "height": [1.0]}))
