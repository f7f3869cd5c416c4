"""The area-level model against another package, a published analysis, and a direct maximisation of the likelihood."""

from __future__ import annotations

import json
from pathlib import Path
from typing import Any

import numpy as np
import pytest
from estimate_frames import cases
from hypothesis import given, settings
from hypothesis import strategies as st
from scipy.optimize import minimize_scalar

from landcarbon.errors import UserError
from landcarbon.estimate.composite_model import fit_to_scale
from landcarbon.estimate.small_area import (
    METHODS,
    FayHerriot,
    fit_fay_herriot,
    fit_with_variance,
    independent_columns,
    predict_areas,
)

QUICK = settings(max_examples=15, deadline=None, derandomize=True)


def milk(reference: Path, name: str) -> dict[str, Any]:
    folder = reference / "facts" / "statistics"
    for file in ("published_cases_more.json", "computed_cases.json"):
        for case in json.loads((folder / file).read_text(encoding="utf-8"))["cases"]:
            if case["id"] == name:
                return case
    raise KeyError(name)


def milk_tables(case: dict[str, Any]) -> tuple[np.ndarray, np.ndarray, np.ndarray]:
    inputs = case["inputs"]
    area = np.array(inputs["MajorArea"])
    design = np.column_stack([np.ones(len(area)), *((area == level).astype(float) for level in (2, 3, 4))])
    return np.array(inputs["yi"]), np.array(inputs["SD"]) ** 2, design


def parcels(seed: int, count: int = 30, groups: int = 3, spread: float = 12.0) -> tuple[np.ndarray, ...]:
    """Invented parcels: groups, one covariate, unequal sampling variances."""
    rng = np.random.default_rng(seed)
    code = np.concatenate([np.arange(groups), rng.integers(0, groups, count - groups)])
    x = rng.normal(20, 5, count)
    design = np.column_stack([code == level for level in range(groups)] + [x]).astype(float)
    variance = rng.uniform(40, 400, count)
    truth = 60.0 + 10 * code + 2 * x + rng.normal(0, spread, count)
    return truth + rng.normal(0, np.sqrt(variance)), variance, design


def dense_parts(refvar: float, y: np.ndarray, psi: np.ndarray, x: np.ndarray) -> tuple[np.ndarray, np.ndarray, float]:
    """Coefficients, their covariance and the restricted likelihood by full matrices, for comparison."""
    inverse = np.linalg.inv(np.diag(psi + refvar))
    cov = np.linalg.inv(x.T @ inverse @ x)
    beta = cov @ x.T @ inverse @ y
    left = y - x @ beta
    value = -0.5 * (np.log(psi + refvar).sum() - np.linalg.slogdet(cov)[1] + left @ inverse @ left)
    return beta, cov, float(value)


@pytest.mark.parametrize("method", ["REML", "ML", "FH"])
def test_nine_parcels_as_another_package_has_them(method: str) -> None:
    case = cases("computed")["A-FH-1"]  # independent: R 4.2.2, package sae 1.3, functions eblupFH and mseFH
    inputs, expected = case["inputs"], case["expected"][method]
    design = np.column_stack([np.ones(9), inputs["mean_x"]])
    fit = fit_fay_herriot(np.array(inputs["direct"]), np.array(inputs["se_direct"]) ** 2, design, method=method)
    for name, value in (
        ("beta", fit.beta),
        ("se_beta", fit.beta_se),
        ("refvar", fit.refvar[0]),
        ("gamma", fit.gamma),
        ("eblup", fit.eblup),
        ("mse", fit.mse),
    ):
        np.testing.assert_allclose(value, expected[name], rtol=1e-6, err_msg=name)


def test_milk_areas_as_another_package_has_them(reference: Path) -> None:
    case = milk(reference, "A-FH-2")  # independent: R 4.2.2, package sae 1.3
    y, psi, design = milk_tables(case)
    for expected in case["expected"]:
        fit = fit_fay_herriot(y, psi, design, method=expected["method"])
        for name, value in (("beta", fit.beta), ("refvar", fit.refvar[0]), ("eblup", fit.eblup), ("mse", fit.mse)):
            np.testing.assert_allclose(value, expected[name], rtol=1e-6, err_msg=f"{expected['method']} {name}")


def test_milk_areas_as_printed(reference: Path) -> None:
    case = milk(reference, "PM-22")  # published: Molina & Marhuenda (2015), The R Journal 7(1), 81-98; from memory
    y, psi, design = milk_tables(case)
    fit = fit_fay_herriot(y, psi, design)
    np.testing.assert_allclose(fit.beta, case["printed"]["beta"]["value"], rtol=0, atol=6e-7)
    # the printed variance stopped at a relative precision of 1e-4 (the package's default), so six digits agree
    np.testing.assert_allclose(fit.refvar[0], case["printed"]["refvar"]["value"], rtol=1e-5)


@pytest.mark.parametrize("seed", range(4))
def test_reml_is_the_maximum_of_the_restricted_likelihood(seed: int) -> None:
    y, psi, x = parcels(seed)
    fit = fit_fay_herriot(y, psi, x)
    # independent: bounded scalar search of scipy over the likelihood written with full matrices
    best = minimize_scalar(
        lambda a: -dense_parts(a, y, psi, x)[2], bounds=(0, 5000), method="bounded", options={"xatol": 1e-9}
    )
    assert fit.refvar[0] == pytest.approx(best.x, rel=1e-4, abs=1e-3)
    beta, cov, _ = dense_parts(fit.refvar[0], y, psi, x)
    np.testing.assert_allclose(fit.beta, beta, rtol=1e-9)
    np.testing.assert_allclose(fit.beta_cov, cov, rtol=1e-8)


def test_mean_squared_error_by_its_parts() -> None:
    y, psi, x = parcels(5)
    fit = fit_fay_herriot(y, psi, x)
    refvar = fit.refvar[0]
    _, cov, _ = dense_parts(refvar, y, psi, x)
    share = psi / (psi + refvar)
    g1 = refvar * share
    g2 = share**2 * np.einsum("ij,jk,ik->i", x, cov, x)
    g3 = psi**2 / (psi + refvar) ** 3 * 2 / ((psi + refvar) ** -2.0).sum()
    # identity: Prasad & Rao (1990), Datta & Lahiri (2000): g1 + g2 + 2 g3
    np.testing.assert_allclose(fit.mse, g1 + g2 + 2 * g3, rtol=1e-10)
    value, mse = predict_areas(fit, x)
    np.testing.assert_allclose(value, fit.synthetic, rtol=1e-12)
    np.testing.assert_allclose(mse, refvar + np.einsum("ij,jk,ik->i", x, cov, x), rtol=1e-10)


def test_variance_of_zero_keeps_an_error() -> None:
    y, psi, x = parcels(2, spread=0.0)
    y = x @ np.array([60.0, 70.0, 80.0, 2.0]) + 0.2 * (y - x @ np.array([60.0, 70.0, 80.0, 2.0]))  # less than psi says
    for method in ("REML", "ML", "FH"):
        fit = fit_fay_herriot(y, psi, x, method=method)
        assert fit.refvar[0] == 0
        np.testing.assert_allclose(fit.eblup, fit.synthetic)
    reml = fit_fay_herriot(y, psi, x)
    _, cov, _ = dense_parts(0.0, y, psi, x)
    g3 = 2 / psi / (psi**-2.0).sum()
    np.testing.assert_allclose(reml.mse, np.einsum("ij,jk,ik->i", x, cov, x) + 2 * g3, rtol=1e-9)  # identity
    assert (reml.mse > 0).all()


@pytest.mark.parametrize("seed", range(3))
def test_adjusted_likelihood_is_never_zero(seed: int) -> None:
    y, psi, x = parcels(seed, spread=0.0)
    fit = fit_fay_herriot(y, psi, x, method="adjusted REML")
    # independent: scalar search over log A of A times the likelihood (Li & Lahiri 2010)
    best = minimize_scalar(
        lambda a: -a - dense_parts(np.exp(a), y, psi, x)[2], bounds=(-10, 10), method="bounded", options={"xatol": 1e-9}
    )
    assert fit.refvar[0] == pytest.approx(np.exp(best.x), rel=1e-5)
    assert fit.refvar[0] > fit_fay_herriot(y, psi, x).refvar[0]


@pytest.mark.parametrize("method", METHODS)
@QUICK
@given(seed=st.integers(0, 10_000), scale=st.sampled_from([1e-6, 0.3, 44 / 12, 1e8]))
def test_order_and_unit_do_not_matter(method: str, seed: int, scale: float) -> None:
    y, psi, x = parcels(seed, count=14)
    plain = fit_fay_herriot(y, psi, x, method=method)
    order = np.random.default_rng(seed).permutation(len(y))
    mixed = fit_fay_herriot(scale * y[order], scale**2 * psi[order], x[order], method=method)
    limit = 1e-6 * np.median(psi)
    assert mixed.refvar[0] / scale**2 == pytest.approx(plain.refvar[0], rel=1e-6, abs=limit)
    np.testing.assert_allclose(mixed.eblup / scale, plain.eblup[order], rtol=1e-5)
    np.testing.assert_allclose(mixed.mse / scale**2, plain.mse[order], rtol=1e-4, atol=limit)


@QUICK
@given(seed=st.integers(0, 10_000))
def test_groups_may_be_written_as_contrasts(seed: int) -> None:
    y, psi, x = parcels(seed, count=16)
    contrasts = np.column_stack([np.ones(len(y)), x[:, 1:]])
    one, two = fit_fay_herriot(y, psi, x), fit_fay_herriot(y, psi, contrasts)
    np.testing.assert_allclose(one.eblup, two.eblup, rtol=1e-7)
    np.testing.assert_allclose(one.mse, two.mse, rtol=1e-5, atol=1e-6 * np.median(psi))


@pytest.mark.parametrize("seed", range(3))
def test_variance_proportional_to_a_scale(seed: int) -> None:
    y, psi, x = parcels(seed, spread=25.0)
    scale = x[:, :3] @ np.array([1.5, 0.8, 0.1])
    fit = fit_to_scale(y, psi, x, scale, 3)

    def parts(refvar: float) -> tuple[np.ndarray, np.ndarray, float]:
        return dense_parts(0.0, y, psi + refvar * scale**2, x)

    # independent: bounded scalar search of scipy over the restricted likelihood with V = A scale^2 + psi
    best = minimize_scalar(lambda a: -parts(a)[2], bounds=(0, 20000), method="bounded", options={"xatol": 1e-9})
    refvar = fit.refvar / scale**2
    np.testing.assert_allclose(refvar, refvar[0], rtol=1e-12)
    assert refvar[0] == pytest.approx(best.x, rel=1e-4)
    beta, cov, _ = parts(refvar[0])
    np.testing.assert_allclose(fit.beta, beta, rtol=1e-8)
    np.testing.assert_allclose(fit.beta_cov, cov, rtol=1e-7)
    gamma = refvar[0] * scale**2 / (refvar[0] * scale**2 + psi)
    np.testing.assert_allclose(fit.eblup, gamma * y + (1 - gamma) * (x @ beta), rtol=1e-8)
    # identity: g1 + g2 + 2 g3, with the derivatives of g by A in g3
    relative = psi / scale**2
    asymptotic = 2 / ((relative + refvar[0]) ** -2.0).sum()
    g2 = (1 - gamma) ** 2 * np.einsum("ij,jk,ik->i", x, cov, x)
    g3 = relative**2 / (relative + refvar[0]) ** 3 * asymptotic * scale**2
    np.testing.assert_allclose(fit.mse, gamma * psi + g2 + 2 * g3, rtol=1e-8)


def test_one_scale_for_all_is_the_plain_model() -> None:
    y, psi, x = parcels(4)
    plain, scaled = fit_fay_herriot(y, psi, x), fit_to_scale(y, psi, x, np.ones(len(y)), 3)
    for name in ("beta", "beta_cov", "refvar", "gamma", "synthetic", "eblup", "mse", "total"):
        np.testing.assert_array_equal(getattr(scaled, name), getattr(plain, name), err_msg=name)


def test_a_given_variance_is_kept() -> None:
    y, psi, x = parcels(1)
    own = np.linspace(10, 90, len(y))
    fit = fit_with_variance(y, psi, x, own)
    inverse = np.diag(1 / (psi + own))
    cov = np.linalg.inv(x.T @ inverse @ x)
    np.testing.assert_allclose(fit.beta, cov @ x.T @ inverse @ y, rtol=1e-9)  # identity: generalised least squares
    gamma = own / (own + psi)
    np.testing.assert_allclose(fit.gamma, gamma)
    g2 = (1 - gamma) ** 2 * np.einsum("ij,jk,ik->i", x, cov, x)
    np.testing.assert_allclose(fit.mse, gamma * psi + g2, rtol=1e-9)
    assert fit.residual_df == len(y) - 4


def test_a_parcel_alone_in_its_group_keeps_its_figure() -> None:
    fit = fit_with_variance(np.array([50.0, 80.0]), np.array([9.0, 16.0]), np.eye(2), 100.0)
    np.testing.assert_allclose(fit.eblup, [50, 80])
    np.testing.assert_allclose(fit.mse, [9, 16])  # identity: g1 + g2 is the sampling variance


def test_independent_columns() -> None:
    rng = np.random.default_rng(3)
    groups = np.kron(np.eye(3), np.ones((5, 1)))
    x = rng.normal(size=15)
    design = np.column_stack([groups, np.ones(15), x, 2 * x + 3, np.zeros(15), groups[:, 0] * x])
    assert independent_columns(design).tolist() == [0, 1, 2, 4, 7]
    assert independent_columns(np.zeros((4, 2))).tolist() == []


@pytest.mark.parametrize(
    ("change", "words"),
    [
        ({"method": "guess"}, "not a way to find the variance"),
        ({"variance": np.zeros(9)}, "not above 0"),
        ({"direct": np.full(9, np.nan)}, "is missing"),
        ({"design": np.ones((9, 2))}, "linear combinations"),
        ({"design": np.ones((8, 1))}, "differ in length"),
        ({"design": np.eye(9)}, "too few"),
    ],
)
def test_what_cannot_be_fitted_is_refused(change: dict[str, Any], words: str) -> None:
    given = {"direct": np.arange(9.0), "variance": np.ones(9), "design": np.ones((9, 1)), "method": "REML"} | change
    with pytest.raises(UserError, match=words):
        fit_fay_herriot(given["direct"], given["variance"], given["design"], method=given["method"])


def test_a_negative_given_variance_is_refused() -> None:
    with pytest.raises(UserError, match="negative"):
        fit_with_variance(np.arange(3.0), np.ones(3), np.ones((3, 1)), -1.0)


def coverage(fit: FayHerriot, truth: np.ndarray) -> float:
    return float((np.abs(fit.eblup - truth) <= 1.96 * np.sqrt(fit.mse)).mean())


def test_stated_error_is_the_true_one_on_average() -> None:
    rng = np.random.default_rng(11)
    squares, stated, held = [], [], []
    for _ in range(150):
        psi = rng.uniform(50, 300, 40)
        x = np.column_stack([np.ones(40), rng.normal(size=40)])
        truth = x @ np.array([100.0, 10.0]) + rng.normal(0, 10, 40)
        fit = fit_fay_herriot(truth + rng.normal(0, np.sqrt(psi)), psi, x)
        squares.append(((fit.eblup - truth) ** 2).mean())
        stated.append(fit.mse.mean())
        held.append(coverage(fit, truth))
    # simulated, seeded: the mean squared error is unbiased to the second order
    assert np.mean(stated) == pytest.approx(np.mean(squares), rel=0.06)
    assert 0.92 < np.mean(held) < 0.98
