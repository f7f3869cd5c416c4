"""Sampling with partial replacement against computed and printed cases, theory, and general-purpose references."""

from __future__ import annotations

import numpy as np
import pandas as pd
import pytest
import statsmodels.api as sm
from estimate_frames import cases, survey_a_tables
from hypothesis import given, settings
from hypothesis import strategies as st

from landcarbon.estimate.ratio import Sample
from landcarbon.estimate.replacement import (
    Combination,
    best_weights,
    choose_weights,
    combine_panels,
    panels,
    room,
    small_sample_factor,
    sum_of_strata,
)
from landcarbon.estimate.tables import read_plots

COMPUTED = {name: case["expected"] for name, case in cases("computed").items()}
PUBLISHED = cases("published")
CLOSED_FORM = 1e-9
CONTRASTS = np.array([[-1.0, 1, 0, 0], [0, 0, -1, 1]])
MATCHED = np.array([[1.0, 0, 0, 0], [0, 0, 1, 0]])
DESIGN = np.array([[1.0, 0], [1, 0], [0, 1], [0, 1]])


def survey_a(variances: str, by: str) -> tuple[Combination, np.ndarray, np.ndarray]:
    """Combination of survey_A over all strata at once or by stratum, its elementary estimates, and the areas."""
    table, strata, _ = survey_a_tables()
    plots = read_plots(table, strata, None, ["above_ground"])
    samples = (plots.sample("t1"), plots.sample("t2"))
    number = 4 if by == "stratum" else 1
    domains = tuple(s.stratum if by == "stratum" else np.zeros_like(s.stratum) for s in samples)
    area = plots.units.stratum_area_ha
    made = panels(samples, domains, number, area, np.ones((4, 2), dtype=bool), variances=variances)
    scale = np.tile([0.0, 1.0], (1, number, 1))
    return combine_panels(made, scale, choose_weights(made, scale[0])), made.mean[:, :, 1], area


def check(made: Combination, expected: dict[str, float]) -> None:
    spread = made.covariance[0, 0]
    assert made.means[0, 0] == pytest.approx([expected["mean_t1"], expected["mean_t2"]], rel=CLOSED_FORM)
    assert np.sqrt(np.diag(spread)) == pytest.approx([expected["se_t1"], expected["se_t2"]], rel=CLOSED_FORM)
    assert spread[0, 1] == pytest.approx(expected["cov_t1_t2"], rel=CLOSED_FORM)
    assert spread[1, 0] == pytest.approx(expected["cov_t1_t2"], rel=CLOSED_FORM)
    assert made.change[0, 0] == pytest.approx(expected["change"], rel=CLOSED_FORM)
    assert np.sqrt(made.variance[0, 0]) == pytest.approx(expected["se_change"], rel=CLOSED_FORM)


def test_combined_over_strata() -> None:
    """Independent: case A-SPR-1 (package and call stand there)."""
    made, mean, _ = survey_a("own", "whole")
    case = COMPUTED["A-SPR-1"]
    assert mean[0] == pytest.approx(case["elementary_estimates"]["value"], rel=CLOSED_FORM)
    check(made, case["gls_combined_over_strata"])
    weights = made.weights[0, 1] - made.weights[0, 0]
    assert weights == pytest.approx(case["gls_combined_over_strata"]["weights_for_change"], rel=CLOSED_FORM)


@pytest.mark.parametrize(
    ("variances", "name"),
    [("own", "gls_per_stratum_own_panel_variances"), ("pooled", "gls_per_stratum_pooled_variances")],
)
def test_separate_per_stratum(variances: str, name: str) -> None:
    """Independent: case A-SPR-1."""
    made, _, area = survey_a(variances, "stratum")
    check(sum_of_strata(made, area), COMPUTED["A-SPR-1"][name])


def test_default_variances_lie_between() -> None:
    """Identity: the same estimates by weights of their own, so means stay within what the two reference forms span."""
    made, _, area = survey_a("shared", "stratum")
    forms = [survey_a(form, "stratum") for form in ("own", "pooled")]
    total = sum_of_strata(made, area).change[0, 0]
    low, high = sorted(sum_of_strata(one, area).change[0, 0] for one, _, _ in forms)
    assert low < total < high


@pytest.mark.parametrize("number", range(9))
def test_theory_with_known_variances(number: int) -> None:
    """Independent: case A-SPR-2, the covariance matrix written down from n, m and rho."""
    case = pd.DataFrame(COMPUTED["A-SPR-2"]["results"]).iloc[number]
    n, m, rho, spread = case["n"], case["m"], case["rho"], case["S1"]
    matrix = spread**2 * np.diag([1 / m, 1 / (n - m), 1 / m, 1 / (n - m)])
    matrix[0, 2] = matrix[2, 0] = rho * spread**2 / m
    first, second = (best_weights(matrix, base, CONTRASTS) for base in MATCHED)
    change = second - first
    assert second @ matrix @ second == pytest.approx(case["var_current_mean"], rel=CLOSED_FORM)
    assert change @ matrix @ change == pytest.approx(case["var_change"], rel=CLOSED_FORM)
    assert second[2] == pytest.approx(case["weight_matched_t2"], rel=CLOSED_FORM)
    assert second[0] == pytest.approx(case["weight_matched_t1"], rel=CLOSED_FORM)
    by_plots = np.array([-m, m - n, m, n - m]) / n
    assert by_plots @ matrix @ by_plots == pytest.approx(case["var_change_difference_of_means"], rel=CLOSED_FORM)
    assert (MATCHED[1] - MATCHED[0]) @ matrix @ (MATCHED[1] - MATCHED[0]) == pytest.approx(
        case["var_change_paired_only"]
    )


def current_variance(matched: float, rho: float) -> float:
    """Variance of the later mean, in units of that of a plain mean, for a share of plots matched."""
    matrix = np.diag([1 / matched, 1 / (1 - matched)] * 2)
    matrix[0, 2] = matrix[2, 0] = rho / matched
    weights = best_weights(matrix, MATCHED[1], CONTRASTS)
    return float(weights @ matrix @ weights)


def test_best_share_of_matched_plots() -> None:
    """Published: case PS-12 (Cochran 1977, section 12.11, from memory): best share matched and gain, whole percents."""
    case = PUBLISHED["PS-12"]
    shares = np.arange(1, 1000) / 1000
    for rho, share, gain in zip(
        case["inputs"]["rho"],
        case["printed"]["optimum_percent_matched"]["value"],
        case["printed"]["percent_gain_at_optimum"]["value"],
        strict=True,
    ):
        variance = np.array([current_variance(one, rho) for one in shares])
        best = int(np.argmin(variance))
        assert round(100 * shares[best]) == pytest.approx(share, abs=0.51)
        assert round(100 * (1 / variance[best] - 1)) == pytest.approx(gain, abs=0.51)


def random_covariance(rng: np.random.Generator, size: int) -> np.ndarray:
    root = rng.normal(size=(size, size + 2))
    return root @ root.T


def test_weights_are_those_of_generalised_least_squares() -> None:
    """Independent: statsmodels GLS with the same covariance matrix."""
    rng = np.random.default_rng(3)
    for _ in range(20):
        matrix, values = random_covariance(rng, 4), rng.normal(50, 10, 4)
        fit = sm.GLS(values, DESIGN, sigma=matrix).fit()
        weights = np.stack([best_weights(matrix, base, CONTRASTS) for base in MATCHED])
        np.testing.assert_allclose(weights @ values, fit.params, rtol=1e-8)
        np.testing.assert_allclose(weights @ matrix @ weights.T, fit.normalized_cov_params, rtol=1e-8)


@settings(max_examples=60, deadline=None)
@given(st.integers(0, 10_000), st.sampled_from([1e-9, 1.0, 1e9]), st.integers(0, 4))
def test_singular_matrices_give_unbiased_weights_no_worse_than_the_base(seed: int, unit: float, rank: int) -> None:
    rng = np.random.default_rng(seed)
    root = rng.normal(size=(4, rank)) * unit
    matrix = root @ root.T
    for base in MATCHED:
        weights = best_weights(matrix, base, CONTRASTS)
        assert np.isfinite(weights).all()
        assert DESIGN.T @ weights == pytest.approx(DESIGN.T @ base, abs=1e-5)
        assert weights @ matrix @ weights <= base @ matrix @ base * (1 + 1e-6) + 1e-9 * unit**2


def test_no_variance_at_all_leaves_the_base() -> None:
    assert best_weights(np.zeros((4, 4)), MATCHED[0], CONTRASTS) == pytest.approx(MATCHED[0])


def test_factor_of_estimated_weights_against_simulation() -> None:
    """Theory of covariances estimated from normal values (Rao 1967, from memory), and a simulation of it."""
    rng = np.random.default_rng(11)
    df, size, repeats = 12, 4, 20_000
    root = np.linalg.cholesky(random_covariance(rng, size))
    true = root @ root.T
    values = rng.normal(size=(repeats, df + 1, size)) @ root.T
    estimate = values.mean(axis=1)
    apart = values - estimate[:, None]
    matrix = np.einsum("rni,rnj->rij", apart, apart) / df / (df + 1)
    free = np.broadcast_to(CONTRASTS, (repeats, 2, 4))
    weights = best_weights(matrix, np.tile(MATCHED[1] - MATCHED[0], (repeats, 1)), free)
    made = (weights * estimate).sum(axis=1)
    stated = np.einsum("re,ref,rf->r", weights, matrix, weights)
    assert made.var() == pytest.approx(stated.mean() * small_sample_factor(np.array(df), np.array(2)), rel=0.03)
    best = best_weights(true / (df + 1), MATCHED[1] - MATCHED[0], CONTRASTS)
    assert made.var() > best @ true @ best / (df + 1)


def test_factor_at_its_ends() -> None:
    assert small_sample_factor(np.array(5.0), np.array(0)) == 1
    assert np.isinf(small_sample_factor(np.array([2.0, 3.0]), np.array(2))).all()
    assert small_sample_factor(np.array(1e6), np.array(2)) == pytest.approx(1, abs=1e-5)
    assert room(np.array([1.0, 9.0]), np.array([0.0, 4.0])) == pytest.approx([0.0, 11.0])


REPEATS = 3000


def many_samples(m: int, alone: int, rho: float, rng: np.random.Generator) -> tuple[Sample, Sample]:
    """Many pairs of normal samples, each in a stratum of its own: m plots of both dates, `alone` more at either."""
    number = m + 2 * alone
    first = rng.normal(size=(REPEATS, number))
    second = rho * first + np.sqrt(1 - rho**2) * rng.normal(size=first.shape)
    plot = np.arange(first.size).reshape(first.shape)
    made = []
    for values, columns in ((first, np.arange(m + alone)), (second, np.r_[0:m, m + alone : number])):
        size = REPEATS * (m + alone)
        made.append(
            Sample(
                plot=plot[:, columns].ravel(),
                stratum=np.repeat(np.arange(REPEATS), m + alone),
                parcel=np.full(size, -1),
                size=np.ones(size),
                value=values[:, columns].reshape(-1, 1),
                used=np.ones((size, 1), dtype=bool),
                day=np.full(size, np.nan),
            )
        )
    return made[0], made[1]


@pytest.mark.parametrize(("m", "alone", "rho"), [(20, 10, 0.9), (10, 10, 0.5), (8, 4, 0.95), (5, 5, 0.8)])
def test_intervals_hold_what_they_say(m: int, alone: int, rho: float) -> None:
    """Simulation: no bias, a variance not below the true one, and 93 to 98.5 % of 95 % intervals hold the change."""
    from landcarbon.estimate.best_change import best_change
    from landcarbon.estimate.interval import t_half_width

    samples = many_samples(m, alone, rho, np.random.default_rng(m))
    strata = (samples[0].stratum, samples[1].stratum)
    one = np.ones((REPEATS, 1), dtype=bool)
    made = best_change(samples, strata, np.ones(REPEATS), one, np.ones((1, REPEATS, 1)))
    assert made.used.all()
    assert abs(made.density.mean()) < 4 * made.density.std() / np.sqrt(REPEATS)
    assert made.variance.mean() > 0.95 * made.density.var()
    half = t_half_width(np.sqrt(made.variance), made.df, 0.95)
    assert 0.93 <= (np.abs(made.density) <= half).mean() <= 0.985
    plain = samples[1].value.reshape(REPEATS, -1).mean(axis=1) - samples[0].value.reshape(REPEATS, -1).mean(axis=1)
    if rho >= 0.8:
        assert made.density.var() < 0.75 * plain.var()
