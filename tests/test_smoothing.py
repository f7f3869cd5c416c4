"""Smoothed sampling variances: pooled variances, variance function, shares of plots, correlations."""

from __future__ import annotations

import tomllib
from dataclasses import replace
from pathlib import Path

import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st
from scipy.optimize import minimize

import landcarbon.estimate.smoothing as smoothing
from landcarbon.estimate.smoothing import (
    Layer,
    parcel_variance,
    power_of_mean,
    rule,
    shrink_to_function,
    smooth_variance,
    unit_variance,
)

QUICK = settings(max_examples=20, deadline=None, derandomize=True)


def layer_of(value: np.ndarray, parcel: np.ndarray, stratum: np.ndarray, size: np.ndarray | None = None) -> Layer:
    """Plots with the shares they have in the mean of their parcel."""
    used = np.isfinite(value)
    weight = np.where(used, 1.0 if size is None else size[:, None], 0.0)
    total = np.zeros((max(parcel.max() + 1, 1), value.shape[1]))
    np.add.at(total, parcel[parcel >= 0], weight[parcel >= 0])
    with np.errstate(invalid="ignore", divide="ignore"):
        share = np.where(used & (parcel >= 0)[:, None], weight / total[np.maximum(parcel, 0)], 0.0)
    plain = np.where(used, value, 0.0)
    return Layer(parcel, stratum, int(stratum.max()) + 1, plain, used, weight, share, np.abs(plain))


def plots(seed: int, count: int = 60, strata: int = 2, columns: int = 2) -> Layer:
    rng = np.random.default_rng(seed)
    stratum = rng.integers(0, strata, count)
    parcel = stratum * 5 + rng.integers(0, 5, count)
    common = rng.normal(size=(count, 1))
    value = 100 + 30 * stratum[:, None] + 20 * (0.8 * common + 0.6 * rng.normal(size=(count, columns)))
    return layer_of(value, parcel, stratum)


def test_rules_state_where_they_come_from() -> None:
    path = Path(smoothing.__file__).with_name("small_area.toml")
    for name, row in tomllib.loads(path.read_text(encoding="utf-8")).items():
        assert set(row) == {"value", "unit", "what", "source", "known"}, name
        assert row["known"] in ("read", "secondary", "memory", "rule")
        assert rule(name) == row["value"]


def test_pooled_variance_is_the_mean_square_within_parcels() -> None:
    layer = plots(1)
    layer = replace(layer, level=np.ones_like(layer.level))
    unit = unit_variance(layer)
    trust = rule("stratum_variance_df")
    for column in range(2):
        within, df = [], []
        for stratum in (0, 1):
            square, free = 0.0, 0
            for parcel in np.unique(layer.parcel[layer.stratum == stratum]):
                mine = layer.value[layer.parcel == parcel, column]
                square += ((mine - mine.mean()) ** 2).sum()
                free += len(mine) - 1
            within.append(square)
            df.append(free)
        # identity: analysis of variance; strata of one level have one variance, so the function is the pooled variance
        pooled = sum(within) / sum(df)
        expected = [(square + trust * pooled) / (free + trust) for square, free in zip(within, df, strict=True)]
        np.testing.assert_allclose(unit.variance[:2, column], expected, rtol=1e-10)
        assert unit.variance[2, column] == pytest.approx(max(expected))
        np.testing.assert_allclose(unit.function[:, column], pooled)
    assert unit.within.all()


def test_without_two_plots_in_a_parcel_they_are_compared_within_strata() -> None:
    rng = np.random.default_rng(2)
    layer = layer_of(rng.normal(100, 20, (12, 1)), np.arange(12), np.zeros(12, dtype=int))
    unit = unit_variance(layer)
    assert not unit.within.any()
    assert unit.variance[0, 0] == pytest.approx(layer.value[:, 0].var(ddof=1))  # identity
    np.testing.assert_allclose(unit.total, unit.variance)


def test_pairs_of_equal_plots_do_not_make_the_variance_zero() -> None:
    value = np.repeat([80.0, 100.0, 95.0, 120.0, 70.0, 110.0, 90.0, 85.0, 105.0, 99.0], 2)[:, None]
    layer = layer_of(value, np.repeat(np.arange(10), 2), np.zeros(20, dtype=int))
    unit = unit_variance(layer)
    assert not unit.within.any()
    assert unit.variance[0, 0] > 100


def test_variance_of_one_stratum_leans_on_the_others() -> None:
    rng = np.random.default_rng(4)
    value = np.concatenate([rng.normal(100, 20, 40), [100.0, 100.0]])[:, None]
    stratum = np.repeat([0, 1], [40, 2])
    parcel = np.concatenate([np.arange(40) % 8, [8, 8]])
    unit = unit_variance(layer_of(value, parcel, stratum))
    assert 0.5 * unit.variance[0, 0] < unit.variance[1, 0] < unit.variance[0, 0]


@pytest.mark.parametrize("power", [0.5, 1.0, 1.7])
def test_power_of_the_mean_is_the_best_of_the_penalised_likelihood(power: float) -> None:
    rng = np.random.default_rng(7)
    level = rng.uniform(20, 200, 12)
    df = rng.integers(5, 40, 12).astype(float)
    squares = 2 * level**power * rng.chisquare(df)
    function, found = power_of_mean(squares[:, None], df[:, None], level[:, None])

    def loss(given: np.ndarray) -> float:
        log_fit = given[0] + given[1] * np.log(level)
        apart = (given[1] - rule("expected_power")) / rule("expected_power_sd")
        return float((df * (log_fit + squares / df / np.exp(log_fit))).sum()) + apart**2

    # independent: scipy's minimiser of the gamma quasi-likelihood and the penalty
    best = minimize(loss, [0.0, 1.0], method="Nelder-Mead", options={"xatol": 1e-8, "fatol": 1e-10, "maxiter": 4000})
    assert found[0] == pytest.approx(np.clip(best.x[1], 0, rule("greatest_power")), abs=0.02)
    np.testing.assert_allclose(function[:, 0], np.exp(best.x[0]) * level ** best.x[1], rtol=0.03)


def test_strata_of_one_level_are_pooled_and_an_empty_one_leans_on_them() -> None:
    squares, df = np.array([[300.0], [100.0], [0.0]]), np.array([[3.0], [5.0], [0.0]])
    function, power = power_of_mean(squares, df, np.array([[80.0], [80.0], [0.0]]))
    np.testing.assert_allclose(function[:, 0], 50.0)  # by hand: 400 / 8
    assert power[0] == pytest.approx(rule("expected_power"))
    np.testing.assert_allclose(shrink_to_function(squares, df, function)[2], 50.0)


def test_one_stratum_alone_tells_the_others_by_the_expected_power() -> None:
    squares, df = np.array([[900.0], [0.0]]), np.array([[9.0], [0.0]])
    function, power = power_of_mean(squares, df, np.array([[90.0], [10.0]]))
    assert power[0] == pytest.approx(rule("expected_power"))
    np.testing.assert_allclose(function[:, 0], [100.0, 100.0 / 9 ** rule("expected_power")])  # by hand


@pytest.mark.parametrize("factor", [1e-3, 44 / 12, 1e4])
def test_power_does_not_depend_on_the_unit(factor: float) -> None:
    squares, df = np.array([[30000.0], [9000.0], [150.0]]), np.array([[12.0], [9.0], [11.0]])
    level = np.array([[90.0], [50.0], [6.0]])
    function, power = power_of_mean(squares, df, level)
    again, same = power_of_mean(factor**2 * squares, df, factor * level)
    assert same[0] == power[0]
    np.testing.assert_allclose(again, factor**2 * function, rtol=1e-10)


def test_two_strata_of_very_different_density_keep_their_variances() -> None:
    rng = np.random.default_rng(12)
    stratum = np.repeat([0, 1], 12)
    mean = np.array([90.0, 6.0])[stratum]
    value = (mean * (1 + 0.45 * rng.normal(size=24)))[:, None]
    unit = unit_variance(layer_of(value, np.arange(24), stratum))
    own = [value[stratum == code].var(ddof=1) for code in (0, 1)]
    # simulated, seeded: a common variance would be 60 times that of the low stratum
    np.testing.assert_allclose(unit.variance[:2, 0], own, rtol=0.25)
    assert 1.0 <= unit.power[0] <= 2.0


def test_plots_without_anything_have_a_small_variance_but_some() -> None:
    rng = np.random.default_rng(13)
    value = np.concatenate([rng.normal(90, 40, 12), np.zeros(9)])[:, None]
    unit = unit_variance(layer_of(value, np.arange(21), np.repeat([0, 1], [12, 9])))
    assert 0 < unit.variance[1, 0] < 0.03 * unit.variance[0, 0]
    one = unit_variance(layer_of(value[:13], np.arange(13), np.repeat([0, 1], [12, 1])))
    assert one.variance[1, 0] > 10 * unit.variance[1, 0]  # one plot says far less than nine


def test_nothing_known_stays_unknown() -> None:
    unit = unit_variance(layer_of(np.array([[90.0]]), np.array([0]), np.array([0])))
    assert np.isnan(unit.variance).all()


def test_variance_of_a_parcel_is_that_of_its_mean() -> None:
    layer = plots(5, columns=1)
    unit = unit_variance(layer)
    found = parcel_variance(layer, unit, np.array([[True]]), 10)
    for parcel in range(10):
        mine = layer.parcel == parcel
        expected = unit.variance[layer.stratum[mine][0], 0] / mine.sum()  # identity: s^2 / n
        assert found[parcel, 0] == pytest.approx(expected)


@QUICK
@given(seed=st.integers(0, 10_000))
def test_parts_on_the_same_plots_add_up_with_their_correlation(seed: int) -> None:
    layer = plots(seed, columns=3, strata=1)
    member = np.ones((1, 3), dtype=bool)
    unit = unit_variance(layer)
    apart = parcel_variance(layer, unit, member, 5)
    deviation = np.sqrt(unit.variance[0])
    whole = deviation @ unit.correlation @ deviation
    number = np.bincount(layer.parcel, minlength=5)
    np.testing.assert_allclose(apart[number > 0, 0], whole / number[number > 0], rtol=1e-8)
    # in one stratum this is close to the variance of the sum of the parts, plot by plot
    assert whole == pytest.approx(unit_variance(layer.summed(member)).variance[0, 0], rel=1e-6)


def test_correlations_are_those_within_parcels() -> None:
    layer = plots(8, count=400)
    matrix = unit_variance(layer).correlation
    assert matrix[0, 1] == pytest.approx(0.64, abs=0.08)  # 0.8^2, by construction of the invented plots
    raw = np.corrcoef(layer.value.T)[0, 1]
    assert raw > matrix[0, 1]  # strata of different level would raise it


def test_pools_rarely_measured_together_count_as_fully_correlated() -> None:
    rng = np.random.default_rng(9)
    value = rng.normal(50, 10, (20, 2))
    value[:16, 1] = np.nan
    assert unit_variance(layer_of(value, np.arange(20) % 4, np.zeros(20, dtype=int))).correlation[0, 1] == 1.0


@QUICK
@given(seed=st.integers(0, 10_000), missing=st.floats(0, 0.7))
def test_correlations_make_no_negative_variance(seed: int, missing: float) -> None:
    rng = np.random.default_rng(seed)
    value = rng.normal(size=(25, 5))
    value[rng.random(value.shape) < missing] = np.nan
    matrix = unit_variance(layer_of(value, np.arange(25) % 3, np.zeros(25, dtype=int))).correlation
    np.testing.assert_allclose(np.diag(matrix), 1.0, atol=1e-9)
    assert np.linalg.eigvalsh(matrix)[0] > -1e-9
    assert np.abs(matrix).max() <= 1


def test_two_plots_are_hardly_trusted() -> None:
    trust = rule("own_variance_df")
    function = np.full((3, 1), 100.0)
    own = np.array([[0.0], [np.nan], [400.0]])
    smoothed, scale = smooth_variance(own, np.array([[1.0], [0.0], [1.0]]), function, np.ones((3, 1)))
    # by hand: two variances of 1 df with the ratios 0 and 4, drawn to 1 with the trust in the function
    expected = (0 + 4 + trust) / (2 + trust)
    assert scale[0] == pytest.approx(expected)
    assert smoothed[0, 0] == pytest.approx(trust * expected * 100 / (1 + trust))
    assert smoothed[1, 0] == pytest.approx(expected * 100)
    assert smoothed[0, 0] > 50  # a tie of two plots claims no certainty


def test_many_plots_are_trusted() -> None:
    smoothed, _ = smooth_variance(np.array([[25.0]]), np.array([[2000.0]]), np.array([[30.0]]), np.ones((1, 1)))
    assert smoothed[0, 0] == pytest.approx(25.0, rel=0.01)


def test_a_better_design_scales_the_function() -> None:
    function = np.full((50, 1), 100.0)
    own = np.full((50, 1), 40.0)  # as with a raster that explains 60 %
    _, scale = smooth_variance(own, np.full((50, 1), 4.0), function, np.ones((50, 1)))
    assert 0.40 < scale[0] < 0.46
