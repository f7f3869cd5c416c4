"""Variance from neighbouring plots: published and computed values, identities, and a simulated grid."""

from __future__ import annotations

import numpy as np
import pandas as pd
import pytest
from estimate_frames import NAME, POOL, cases, parcel_table, pick, plot_table, strata_table, whole

from landcarbon.change import estimate_change
from landcarbon.errors import UserError
from landcarbon.estimate.difference import difference_of_ratios
from landcarbon.estimate.stocks import estimate_stocks
from landcarbon.estimate.systematic import (
    neighbour_pairs,
    neighbour_variance,
    square_contrast_variance,
    successive_difference_variance,
)
from landcarbon.estimate.tables import read_plots

LINE = cases("computed")["A-SYS-1"]
OPTIONS = {"pools": [POOL], "confidence": 0.95, "inventory_name": NAME}


def near_stocks(table: pd.DataFrame, strata: pd.DataFrame, parcels: pd.DataFrame | None = None, **more: object):
    return estimate_stocks(table, strata, parcels, ["2014"], variance="neighbours", **OPTIONS, **more)[0]


def test_line() -> None:
    """A-SYS-1, independent: base R, Wolter (2007) v2; plots on an oblique line, rows mixed."""
    value, expected = np.array(LINE["inputs"]["y_in_line_order"]), LINE["expected"]
    assert successive_difference_variance(value) == pytest.approx(expected["var_successive_differences"], rel=1e-12)
    along = np.arange(len(value))
    table = plot_table(value, x=500.0 + 30.0 * along, y=100.0 + 40.0 * along).sample(frac=1.0, random_state=3)
    row = whole(near_stocks(table, strata_table({"S": 50.0})))
    assert row["density_se"] == pytest.approx(expected["se_successive_differences"], rel=1e-9)
    assert row["density_t_c_ha"] == pytest.approx(expected["mean"], rel=1e-12)
    assert row["method"] == "stratified ratio of means, neighbour differences"
    # von Neumann's mean square successive difference: 2 (n - 1)^2 / (3 n - 4)
    assert row["df"] == pytest.approx(2 * 23**2 / (3 * 24 - 4))
    plain = whole(estimate_stocks(table, strata_table({"S": 50.0}), None, ["2014"], **OPTIONS)[0])
    assert plain["density_se"] == pytest.approx(expected["se_as_srs"], rel=1e-9)


def test_square_grid_after_matern() -> None:
    """PM-15, published: Brus (2022) sections 5.1 and 5.2."""
    given, printed = cases("published")["PM-15"]["inputs"], cases("published")["PM-15"]["printed"]
    value = square_contrast_variance(np.array(given["column"]), np.array(given["row"]), np.array(given["z"]))
    assert value == pytest.approx(printed["var_matern"]["value"], abs=0.5e-5)


def test_pairs_of_a_square_grid() -> None:
    """Identity: a by b nodes have a (b - 1) + b (a - 1) pairs, whatever the turn and a little jitter."""
    column, row = (axis.ravel() for axis in np.meshgrid(np.arange(7.0), np.arange(5.0)))
    turn = np.array([[np.cos(0.4), -np.sin(0.4)], [np.sin(0.4), np.cos(0.4)]])
    place = 100.0 * np.stack([column, row], axis=1) @ turn.T
    jitter = np.random.default_rng(1).uniform(-3.0, 3.0, place.shape)
    for shift in (0.0, 1.0):
        pairs = neighbour_pairs(place + shift * jitter)
        assert len(pairs) == 7 * 4 + 5 * 6
        apart = np.abs(column[pairs[:, 0]] - column[pairs[:, 1]]) + np.abs(row[pairs[:, 0]] - row[pairs[:, 1]])
        assert (apart == 1.0).all()


def test_degrees_of_freedom_are_those_of_the_quadratic_form() -> None:
    """Independent: twice the squared mean over the variance, simulated for independent normal values."""
    rng = np.random.default_rng(6)
    column, row = (axis.ravel() for axis in np.meshgrid(np.arange(6.0), np.arange(4.0)))
    place, cell = np.stack([column, row], axis=1), np.zeros(24, dtype=np.int64)
    drawn = [neighbour_variance(rng.normal(size=24), place, cell, 1, np.array([True])).variance[0] for _ in range(4000)]
    made = neighbour_variance(rng.normal(size=24), place, cell, 1, np.array([True]))
    assert np.mean(drawn) == pytest.approx(1.0, abs=0.02)
    assert made.df[0] == pytest.approx(2.0 * np.mean(drawn) ** 2 / np.var(drawn), rel=0.08)


def test_random_positions_give_the_variance_of_a_random_sample_on_average() -> None:
    rng = np.random.default_rng(2)
    value = rng.gamma(3, 20, 30)
    table = plot_table(value)
    random = whole(estimate_stocks(table, strata_table({"S": 1.0}), None, ["2014"], **OPTIONS)[0])["density_se"] ** 2
    drawn = [
        whole(near_stocks(table.assign(x=rng.uniform(size=30), y=rng.uniform(size=30)), strata_table({"S": 1.0})))[
            "density_se"
        ]
        ** 2
        for _ in range(150)
    ]
    assert np.mean(drawn) == pytest.approx(random, rel=0.06)


def grid(seed: int, side: int = 10) -> pd.DataFrame:
    """Two strata side by side on one grid, with a slope across the land."""
    rng = np.random.default_rng(seed)
    column, row = (axis.ravel() for axis in np.meshgrid(np.arange(float(side)), np.arange(float(side))))
    value = 60.0 + 5.0 * column + 3.0 * row + rng.normal(0, 4, side * side)
    stratum = np.where(column < side / 2, "west", "east")
    parcel = np.where(row < 2, "south", "")
    return plot_table(value, x=200.0 * column, y=200.0 * row, stratum=stratum, parcel=parcel)


@pytest.mark.parametrize("sums", [None, {POOL: [POOL]}])
def test_strata_add_up_and_parcels_stay(sums: dict[str, list[str]] | None) -> None:
    table, strata, parcels = grid(1), strata_table({"west": 200.0, "east": 150.0}), parcel_table({"south": 60.0})
    near = near_stocks(table, strata, parcels, sums=sums)
    plain = estimate_stocks(table, strata, parcels, ["2014"], sums=sums, **OPTIONS)[0]
    rows, row = pick(near, "stratum"), whole(near)
    assert row["stock_se"] == pytest.approx(np.sqrt((rows["stock_se"] ** 2).sum()), rel=1e-12)
    assert (rows["density_se"] < 0.6 * pick(plain, "stratum")["density_se"]).all()
    np.testing.assert_array_equal(near["density_t_c_ha"], plain["density_t_c_ha"])
    pd.testing.assert_frame_equal(pick(near, "parcel"), pick(plain, "parcel"))
    assert set(rows["method"]) == {"ratio of means, neighbour differences"}


def test_falls_back_and_says_so() -> None:
    table, strata = grid(2), strata_table({"west": 200.0, "east": 150.0})
    lost = table.assign(x=table["x"].where((table["stratum"] != "west") | (table["plot"] != "p000")))
    near, plain = near_stocks(lost, strata), estimate_stocks(lost, strata, None, ["2014"], **OPTIONS)[0]
    told = "random variance (fewer than 8 plots, or plots without a position)"
    assert pick(near, "stratum").loc["west", "method"] == f"ratio of means, {told}"
    assert pick(near, "stratum").loc["west", "density_se"] == pytest.approx(
        pick(plain, "stratum").loc["west", "density_se"], rel=1e-12
    )
    assert whole(near)["method"] == "stratified ratio of means, neighbour differences in part"
    few = plot_table([1.0, 5.0, 2.0], x=[0.0, 1.0, 2.0], y=0.0)
    assert whole(near_stocks(few, strata_table({"S": 1.0})))["method"].endswith(told)
    assert whole(near_stocks(few.drop(columns=["x", "y"]), strata_table({"S": 1.0})))["method"].endswith(told)


def test_parts_on_a_coarser_grid() -> None:
    """Soil on every fourth plot: its own error alone is that of the coarser grid as a survey of its own."""
    table = grid(3)
    coarse = (table["x"] % 400 == 0) & (table["y"] % 400 == 0)
    soil = 70.0 + 0.01 * table["x"] + np.random.default_rng(3).normal(0, 3, len(table))
    table = table.assign(soil=np.where(coarse, soil, np.nan))
    strata = strata_table({"west": 200.0, "east": 150.0})
    options = OPTIONS | {"pools": [POOL, "soil"], "sums": {POOL: [POOL], "soil": ["soil"]}, "variance": "neighbours"}
    both = estimate_stocks(table, strata, None, ["2014"], **options)[0]
    alone = near_stocks(table[coarse].assign(**{POOL: soil[coarse], "all": soil[coarse]}), strata)
    np.testing.assert_allclose(
        pick(both, "stratum", "soil")["density_se"], pick(alone, "stratum")["density_se"], rtol=1e-12
    )
    rows = pick(both, "inventory", "all").iloc[0]
    assert "neighbour differences" in rows["method"]
    assert "parts on different plots" in rows["method"]
    assert rows["density_se"] > 0


def test_change_on_a_grid_is_the_level_of_differences() -> None:
    """Identity: with all plots repeated, change has the neighbour variance of the differences."""
    one = grid(4).assign(survey="t1")
    growth = 0.02 * one["y"] + np.random.default_rng(5).normal(0, 1, len(one))
    two = one.assign(survey="t2", **{POOL: one[POOL] + growth, "all": one[POOL] + growth})
    strata = strata_table({"west": 200.0, "east": 150.0})
    plots = read_plots(pd.concat([one, two]), strata, None, [POOL])
    samples = plots.sample("t1"), plots.sample("t2")
    domains = samples[0].stratum, samples[1].stratum
    made = difference_of_ratios(samples, domains, 2, np.array([200.0, 150.0]), np.ones((2, 2), dtype=bool), near=True)
    expected = pick(near_stocks(one.assign(survey="2014", **{POOL: growth, "all": growth}), strata), "stratum")
    np.testing.assert_allclose(np.sqrt(made.variance[:, 0]), expected["density_se"], rtol=1e-9)
    np.testing.assert_allclose(made.df[:, 0], expected["df"], rtol=1e-9)
    np.testing.assert_array_equal(made.near, 1.0)


def test_change_table_on_a_grid() -> None:
    one = grid(4).assign(survey="t1")
    growth = 0.02 * one["y"] + np.random.default_rng(5).normal(0, 1, len(one))
    two = one.assign(
        survey="t2", date=pd.Timestamp("2024-07-01"), **{POOL: one[POOL] + growth, "all": one[POOL] + growth}
    )
    strata, parcels = strata_table({"west": 200.0, "east": 150.0}), parcel_table({"south": 60.0})
    for sums in (None, {POOL: [POOL]}):
        options = {"since": "t1", "until": "t2", "sums": sums, **OPTIONS}
        near = estimate_change(pd.concat([one, two]), strata, parcels, variance="neighbours", **options)[0]
        plain = estimate_change(pd.concat([one, two]), strata, parcels, **options)[0]
        rows, row = pick(near, "stratum"), whole(near)
        expected = pick(near_stocks(one.assign(survey="2014", **{POOL: growth, "all": growth}), strata), "stratum")
        np.testing.assert_allclose(rows["change_se"], expected["stock_se"], rtol=1e-9)
        assert row["change_se"] == pytest.approx(np.sqrt((rows["change_se"] ** 2).sum()), rel=1e-9)
        assert row["method"] == "difference of ratio means, paired, neighbour differences"
        pd.testing.assert_frame_equal(pick(near, "parcel"), pick(plain, "parcel"))


def test_unknown_word() -> None:
    with pytest.raises(UserError, match="random or neighbours"):
        estimate_stocks(grid(1), strata_table({"west": 1.0}), None, ["2014"], variance="nearest", **OPTIONS)
