"""Functions for planning a survey and for figures without plots: allocation, sample size, map areas, errors, log bias.

Worked examples and computed cases of these functions stand in test_reference_cases.py; here are identities, edges and
independent recomputations.
"""

from __future__ import annotations

import numpy as np
import pytest
from scipy import optimize, stats

from allometry.errors import AllometryError
from allometry.log_bias import fit_log_linear, normal_factor, ratio_factor, smearing_factor
from landcarbon.errors import UserError
from landcarbon.estimate.allocation import (
    anticipated_se,
    cost_optimal,
    neyman,
    proportional,
    repeated_share,
    repeated_variance,
    rounded,
    whole_plots,
)
from landcarbon.estimate.error_combination import (
    Combined,
    as_percent,
    combine_difference,
    combine_product,
    combine_sum,
    ratio_of_estimates,
)
from landcarbon.estimate.map_areas import adjusted_areas, area_by_grid, area_by_proportion
from landcarbon.estimate.sample_size import (
    finite_population_factor,
    normal_quantile,
    plots_in_area,
    relative_size,
    simple_size,
    stratified_size,
    student_size,
)

SIZE, SD = np.array([412.5, 1280.0, 236.25, 71.25]), np.array([21.0, 30.0, 12.0, 16.0])
COST = np.array([120.0, 150.0, 260.0, 410.0])


# ---------------------------------------------------------------- allocation


def test_neyman_is_the_best_of_many_allocations() -> None:
    """Identity: no random allocation of the same number of plots promises less error."""
    best = anticipated_se(SIZE, SD, neyman(60, SIZE, SD))
    rng = np.random.default_rng(3)
    others = [anticipated_se(SIZE, SD, 60 * rng.dirichlet([4, 4, 4, 4])) for _ in range(200)]
    assert min(others) > best
    assert anticipated_se(SIZE, SD, proportional(60, SIZE)) > best


def test_cost_optimum_is_a_minimum() -> None:
    """Independent: scipy.optimize over allocations that spend the same budget."""
    plots = cost_optimal(SIZE, SD, COST, budget=9000)
    assert (plots * COST).sum() == pytest.approx(9000)
    spent = lambda share: 9000 * np.exp(share) / np.exp(share).sum() / COST  # noqa: E731
    found = optimize.minimize(lambda share: anticipated_se(SIZE, SD, spent(share)), np.zeros(4), method="BFGS")
    np.testing.assert_allclose(spent(found.x), plots, rtol=1e-3)
    assert found.fun >= anticipated_se(SIZE, SD, plots) * (1 - 1e-9)


def test_equal_costs_are_neyman() -> None:
    np.testing.assert_allclose(cost_optimal(SIZE, SD, np.full(4, 7.0), plots=60), neyman(60, SIZE, SD))


@pytest.mark.parametrize("rule", ["remainder", "largest"])
@pytest.mark.parametrize("total", [8, 17, 60, 401])
def test_whole_plots_add_up(rule: str, total: int) -> None:
    plots = whole_plots(neyman(total, SIZE, SD), total, rule=rule, least=2)
    assert plots.sum() == total
    assert plots.min() >= 2


def test_rounding_by_remainder() -> None:
    """Identity: the seats of two remainders go to the two largest."""
    assert list(whole_plots([2.6, 3.3, 1.7, 0.4], 8)) == [3, 3, 2, 0]
    assert list(whole_plots([2.6, 3.3, 1.7, 0.4], 8, least=1)) == [3, 2, 2, 1]
    assert list(rounded([2.5, 3.49, 0.5])) == [3, 3, 1]


@pytest.mark.parametrize(
    ("call", "message"),
    [
        (lambda: neyman(10, [0.0, 0.0], [1.0, 2.0]), "nothing to share plots out by"),
        (lambda: proportional(10, [1.0, -2.0]), "stratum sizes must be numbers that are not negative"),
        (lambda: neyman(10, [1.0, 2.0], [1.0, np.nan]), "standard deviations must be numbers"),
        (lambda: cost_optimal(SIZE, SD, COST), "needs a limit"),
        (lambda: cost_optimal(SIZE, SD, COST, budget=1.0, plots=2.0), "needs a limit"),
        (lambda: whole_plots([1.0, 2.0], 3, rule="up"), "rule 'up' of rounding is not known"),
        (lambda: whole_plots([1.0, 2.0], 3, least=2), "3 plots do not reach for 2 in each of 2 strata"),
    ],
)
def test_allocations_that_are_refused(call, message: str) -> None:
    with pytest.raises(UserError, match=message):
        call()


@pytest.mark.parametrize("correlation", [0.3, 0.7, 0.95])
def test_best_share_of_repeated_plots_is_a_minimum(correlation: float) -> None:
    """Independent: generalised least squares with known variances, over all numbers of repeated plots out of 200."""
    plots = 200
    variance = []
    for repeated in range(1, plots):
        within = np.array([[1.0, correlation], [correlation, 1.0]]) / repeated
        covariance = np.zeros((4, 4))  # repeated and other plots of the first date, then of the second
        covariance[np.ix_([0, 2], [0, 2])] = within
        covariance[1, 1] = covariance[3, 3] = 1.0 / (plots - repeated)
        means = np.array([[1.0, 0.0], [1.0, 0.0], [0.0, 1.0], [0.0, 1.0]])
        variance.append(np.linalg.inv(means.T @ np.linalg.solve(covariance, means))[1, 1])
    ours = repeated_variance(correlation, np.arange(1, plots) / plots) / plots
    np.testing.assert_allclose(variance, ours, rtol=1e-9)
    assert (np.argmin(variance) + 1) / plots == pytest.approx(repeated_share(correlation), abs=1 / plots)
    assert repeated_variance(correlation) == pytest.approx(repeated_variance(correlation, repeated_share(correlation)))


# ---------------------------------------------------------------- sample size


def test_sizes_give_the_error_asked_for() -> None:
    """Identity: put back into the standard error, the number of plots gives the half width."""
    z = normal_quantile(0.95)
    plots = simple_size(27.0, 5.0, quantile=z, population=800.0)
    assert z * 27.0 * np.sqrt(finite_population_factor(plots, 800.0) / plots) == pytest.approx(5.0)
    number = stratified_size(SIZE, SD, 4.0, quantile=2.0)
    assert 2 * anticipated_se(SIZE, SD, neyman(number, SIZE, SD)) == pytest.approx(4.0)
    fit = plots_in_area(SIZE, 0.04)
    number = stratified_size(SIZE, SD, 4.0, quantile=2.0, population=fit.sum())
    shared = neyman(number, SIZE, SD)
    assert 2 * anticipated_se(SIZE, SD, shared, population=fit) == pytest.approx(4.0)


def test_sizes_take_arrays() -> None:
    plots = relative_size([0.3, 0.5], 0.1, quantile=2.0, population=[np.inf, 150.0])
    np.testing.assert_allclose(plots, [36.0, 1 / (1 / 100 + 1 / 150)])
    assert stratified_size(np.stack([SIZE, SIZE]), np.stack([SD, 2 * SD]), 4.0, quantile=2.0).shape == (2,)


@pytest.mark.parametrize("population", [np.inf, 40.0])
def test_student_size_is_the_least_that_suffices(population: float) -> None:
    """Independent: scipy.stats.t over all numbers of plots."""
    sd, error = np.array([27.0, 10.0, 1.0]), np.array([10.0, 4.0, 50.0])
    n = np.arange(2.0, 2000.0)[:, None]
    finite = np.maximum(1 - n / population, 0)
    wide = stats.t.ppf(0.95, n - 1) * sd * np.sqrt(finite / n)
    expected = n[(wide <= error).argmax(axis=0), 0]
    np.testing.assert_array_equal(student_size(sd, error, confidence=0.9, population=population), expected)


@pytest.mark.parametrize(
    "call", [lambda: simple_size(1.0, 0.0, quantile=2.0), lambda: student_size(1.0, -1.0, confidence=0.9)]
)
def test_half_width_must_be_above_zero(call) -> None:
    with pytest.raises(UserError, match="half width wanted is not above zero"):
        call()


def test_plot_area_must_be_above_zero() -> None:
    with pytest.raises(UserError, match="plot area 0 ha is not above zero"):
        plots_in_area(10.0, 0)


# ---------------------------------------------------------------- areas behind a map


def test_perfect_map_keeps_its_areas() -> None:
    result = adjusted_areas(np.diag([30, 40]), [10.0, 90.0])
    np.testing.assert_allclose(result.area, [10.0, 90.0])
    np.testing.assert_allclose(result.area_se, 0.0)
    assert (result.overall, result.overall_se) == (1.0, 0.0)


def test_areas_add_up_and_two_classes_err_together() -> None:
    """Identity: the areas sum to the map; with two classes what one gains the other loses."""
    result = adjusted_areas([[45, 5], [8, 92]], [120.0, 380.0])
    assert result.area.sum() == pytest.approx(500.0)
    assert result.area_se[0] == pytest.approx(result.area_se[1])
    assert result.proportions.sum() == pytest.approx(1.0)


@pytest.mark.parametrize(
    ("matrix", "areas", "message"),
    [
        ([[1, 2, 3], [4, 5, 6]], [1.0, 2.0], "error matrix of shape"),
        ([[5, 1], [1, 5]], [1.0], "with 1 mapped areas"),
        ([[5, 1], [1, 0]], [1.0, 2.0], "map class in row 2 has fewer than 2 points"),
        ([[5, -1], [1, 5]], [1.0, 2.0], "must not be negative"),
    ],
)
def test_tables_that_are_refused(matrix, areas, message: str) -> None:
    with pytest.raises(UserError, match=message):
        adjusted_areas(matrix, areas)


def test_proportions_need_two_points_for_an_error() -> None:
    area, se = area_by_proportion([1, 0], 10.0)
    assert list(area) == [10.0, 0.0]
    assert np.isnan(se).all()
    with pytest.raises(UserError, match="must not be negative or all zero"):
        area_by_proportion([0, 0], 10.0)
    np.testing.assert_allclose(area_by_grid([15, 1], 500.0), [375.0, 25.0])


# ---------------------------------------------------------------- combining errors


def test_full_correlation_adds_half_widths() -> None:
    """Identity: errors that move together add, or cancel in a difference."""
    assert combine_sum([100.0, 50.0], [10.0, 20.0], 1.0).half_width == pytest.approx(20.0)
    assert combine_sum([100.0, 50.0], [10.0, 20.0], [[1, -1], [-1, 1]]).half_width == pytest.approx(0.0)
    assert combine_product([100.0, 50.0], [10.0, 20.0], 1.0).percent == pytest.approx(30.0)
    same = Combined(100.0, 10.0, 10.0)
    assert combine_difference(same, Combined(120.0, 10.0, np.nan), 1.0).half_width == pytest.approx(0.0)


def test_change_near_zero_has_no_percentage() -> None:
    change = combine_difference(Combined(208.0, 17.0, 8.2), Combined(217.0, 18.0, 8.3))
    assert change.half_width == pytest.approx(np.hypot(17.0, 18.0))
    assert np.isnan(change.percent)
    assert np.isnan(as_percent(3.0, 0.0, across_zero=True))
    np.testing.assert_allclose(as_percent([25.0, 5.0], [-10.0, -10.0], across_zero=True), [250.0, 50.0])
    np.testing.assert_allclose(as_percent([25.0, 5.0], [-10.0, -10.0]), [np.nan, 50.0])


def test_exact_product_against_simulation() -> None:
    """Simulated: variance of a product of two independent normal factors with 40 % and 30 % half widths."""
    rng = np.random.default_rng(5)
    z = normal_quantile(0.95)
    product = rng.normal(1, 0.40 / z, 400_000) * rng.normal(1, 0.30 / z, 400_000)
    exact = combine_product([1.0, 1.0], [40.0, 30.0], exact=True)
    assert exact.half_width == pytest.approx(z * product.std(), rel=5e-3)
    assert exact.half_width > combine_product([1.0, 1.0], [40.0, 30.0]).half_width


def test_combinations_that_are_refused() -> None:
    with pytest.raises(UserError, match="holds for independent factors"):
        combine_product([1.0, 2.0], [3.0, 4.0], 0.5, exact=True)
    with pytest.raises(UserError, match=r"correlations of shape \(\) for 2 values"):
        combine_sum([1.0, 2.0], [3.0, 4.0], 1.5)
    with pytest.raises(UserError, match=r"correlations of shape \(3, 3\) for 2 values"):
        combine_sum([1.0, 2.0], [3.0, 4.0], np.eye(3))


def test_ratio_of_an_estimate_with_itself_is_certain() -> None:
    ratio, se = ratio_of_estimates([5.0, 5.0], [5.0, 0.0], 2.0, 2.0, 2.0)
    assert (ratio[0], se[0]) == (1.0, 0.0)
    assert np.isnan([ratio[1], se[1]]).all()


# ---------------------------------------------------------------- log bias


def test_factors_on_simulated_trees() -> None:
    """Simulated: each factor brings the sum of predictions near the sum of the trees (residual sd 0.4)."""
    rng = np.random.default_rng(2)
    x = rng.uniform(5, 50, 4000)
    y = 0.1 * x**2.4 * np.exp(rng.normal(0, 0.4, x.size))
    fit = fit_log_linear(x, y)
    expected = np.exp(0.4**2 / 2)  # identity: mean of the log-normal distribution
    predicted = fit.predict(x)
    assert normal_factor(np.sqrt(fit.residual_ms)) == pytest.approx(expected, rel=0.01)
    assert smearing_factor(fit.residual) == pytest.approx(expected, rel=0.01)
    assert ratio_factor(y, predicted) == pytest.approx(expected, rel=0.02)
    assert (ratio_factor(y, predicted) * predicted).sum() == pytest.approx(y.sum())


def test_base_ten_is_the_same_factor() -> None:
    """Identity: standard deviations of log10 and ln differ by ln 10."""
    sd = 0.31
    assert normal_factor(sd / np.log(10.0), base=10.0) == pytest.approx(normal_factor(sd))
    residual = np.array([0.2, -0.3, 0.1])
    assert smearing_factor(residual / np.log(10.0), base=10.0) == pytest.approx(smearing_factor(residual))


def test_line_through_logarithms_needs_data() -> None:
    with pytest.raises(AllometryError, match="at least three pairs of values above zero"):
        fit_log_linear([1.0, 2.0, 0.0], [1.0, 2.0, 3.0])
    with pytest.raises(AllometryError, match="x values that differ"):
        fit_log_linear([2.0, 2.0, 2.0], [1.0, 2.0, 3.0])
