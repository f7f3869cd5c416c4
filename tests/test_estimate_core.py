"""The array code: group sums, linearisation against the jackknife, degrees of freedom of small domains, speed."""

from __future__ import annotations

import subprocess
import sys
from dataclasses import replace
from time import perf_counter

import numpy as np
import pandas as pd
import pytest
from estimate_frames import change, parcel_table, stocks, strata_table

from landcarbon.estimate.difference import Difference, difference_of_ratios
from landcarbon.estimate.groups import group_sum, label_codes
from landcarbon.estimate.interval import check_confidence, satterthwaite, t_half_width
from landcarbon.estimate.pairs import pool_covariance
from landcarbon.estimate.ratio import Sample, counts, ratio_of_means

AREA_HA = np.array([120.0, 40.0])
ALLOWED = np.ones((2, 1), dtype=bool)


def make_sample(rng: np.random.Generator, count: int, pools: int = 1) -> tuple[Sample, np.ndarray]:
    """Plots of unequal size in two strata, and three domains (one of them -1) that cut across."""
    sample = Sample(
        plot=np.arange(count),
        stratum=rng.integers(0, 2, count),
        parcel=np.full(count, -1),
        size=rng.uniform(0.3, 1.0, count),
        value=rng.gamma(4.0, 20.0, (count, pools)),
        used=np.ones((count, pools), dtype=bool),
        day=np.full(count, np.nan),
    )
    return sample, rng.integers(-1, 2, count)


def without(sample: Sample, row: int) -> Sample:
    given = {name: value for name, value in vars(sample).items() if value is not None}
    return replace(sample, **{name: np.delete(value, row, axis=0) for name, value in given.items()})


def test_group_sum_counts_and_adds() -> None:
    values = np.array([[1.0, 10.0], [2.0, 20.0], [4.0, 40.0]])
    np.testing.assert_array_equal(group_sum(values, np.array([2, 0, 2]), 3), [[2, 20], [0, 0], [5, 50]])
    np.testing.assert_array_equal(group_sum(values > 3, np.array([0, 0, 0]), 1), [[1, 3]])
    empty = group_sum(np.zeros((0, 2)), np.zeros(0, dtype=np.int64), 2)
    assert empty.dtype == float
    np.testing.assert_array_equal(empty, np.zeros((2, 2)))


@pytest.mark.parametrize("kind", ["str", "object", "category"])
def test_label_codes(kind: str) -> None:
    column = pd.Series(["b", "a", None, "z"], dtype=kind)
    np.testing.assert_array_equal(label_codes(column, ["a", "b"]), [1, 0, -1, -1])
    np.testing.assert_array_equal(label_codes(pd.Series([2014, 2024]), ["2024", "2014"]), [1, 0])


def test_satterthwaite_by_hand() -> None:
    # by hand: (4 + 1)^2 / (16 / 8 + 1 / 2) = 10; one component keeps its own; zeros add up
    variance = np.array([[4.0], [1.0], [7.0], [0.0], [0.0]])
    df = np.array([[8.0], [2.0], [3.0], [2.0], [5.0]])
    result = satterthwaite(variance, df, np.array([0, 0, 1, 2, 2]), 4)
    np.testing.assert_allclose(result[:3, 0], [10, 3, 7])
    assert np.isnan(result[3, 0])


def test_t_half_width_against_printed_quantiles() -> None:
    # published: Student's table as printed in any statistics text, two-sided 95 % (three decimals; from memory)
    half = t_half_width(np.ones(4), np.array([1.0, 4.0, 10.0, 30.0]), 0.95)
    np.testing.assert_allclose(half, [12.706, 2.776, 2.228, 2.042], atol=5e-4)
    check_confidence(0.9)


@pytest.mark.parametrize("seed", [1, 2, 3])
def test_linearised_variance_of_domains_agrees_with_the_jackknife(seed: int) -> None:
    """Independent: leave out one plot at a time, stratum by stratum; the two agree as samples grow."""
    rng = np.random.default_rng(seed)
    sample, domain = make_sample(rng, 300)
    result = ratio_of_means(sample, domain, 2, AREA_HA, ALLOWED)
    number = np.bincount(sample.stratum)
    jackknife = np.zeros(2)
    for row in range(300):
        left = ratio_of_means(without(sample, row), np.delete(domain, row), 2, AREA_HA, ALLOWED)
        n = number[sample.stratum[row]]
        jackknife += (n - 1) / n * (left.density - result.density)[:, 0] ** 2
    np.testing.assert_allclose(result.variance[:, 0], jackknife, rtol=0.06)


def change_and_jackknife(share: float, seed: int, count: int) -> tuple[np.ndarray, np.ndarray]:
    """Variance of change of two domains, ours and by leaving out one plot at both dates at a time."""
    rng = np.random.default_rng(seed)
    both, domain = make_sample(rng, count)
    later = replace(
        both, value=both.value * 1.1 + rng.normal(5, 6, both.value.shape), size=rng.uniform(0.3, 1.0, count)
    )
    once, twice = rng.random(count) < share, rng.random(count) < share
    one = replace(both, used=(once | ~twice)[:, None])
    two = replace(later, used=(twice | ~once)[:, None])

    def estimate(first: Sample, second: Sample, codes: np.ndarray) -> Difference:
        return difference_of_ratios((first, second), (codes, codes), 2, AREA_HA, ALLOWED)

    result = estimate(one, two, domain)
    number = np.bincount(both.stratum)
    jackknife = np.zeros(2)
    for row in range(count):
        left = estimate(without(one, row), without(two, row), np.delete(domain, row))
        n = number[both.stratum[row]]
        jackknife += (n - 1) / n * (left.density - result.density)[:, 0] ** 2
    return result.variance[:, 0], jackknife


def test_variance_of_change_agrees_with_the_jackknife() -> None:
    """Independent: all plots were measured at both dates."""
    ours, jackknife = change_and_jackknife(1.0, 7, 400)
    np.testing.assert_allclose(ours, jackknife, rtol=0.06)


def test_variance_of_change_with_single_plots_agrees_with_the_jackknife_on_average() -> None:
    """Independent: the jackknife takes the spread of the single plots from themselves, we from all plots of the date.

    One sample of skewed values may differ by half; over many samples the two come to the same.
    """
    pairs = [change_and_jackknife(0.6, seed, 150) for seed in range(40)]
    ours, jackknife = (np.mean(values, axis=0) for values in zip(*pairs, strict=True))
    np.testing.assert_allclose(ours, jackknife, rtol=0.12)


def test_covariance_between_pools_is_that_of_their_sum() -> None:
    """Identity: the variance of the per-plot sum is the sum of the covariance matrix, in every domain."""
    rng = np.random.default_rng(3)
    sample, domain = make_sample(rng, 60, pools=4)
    allowed = np.ones((2, 4), dtype=bool)
    matrix = pool_covariance(sample, domain, 2, AREA_HA, allowed)
    total = replace(sample, value=sample.value.sum(axis=1, keepdims=True), used=sample.used[:, :1])
    variance = ratio_of_means(total, domain, 2, AREA_HA, ALLOWED).variance[:, 0]
    np.testing.assert_allclose(matrix.sum(axis=(1, 2)), variance, rtol=1e-12)
    diagonal = ratio_of_means(sample, domain, 2, AREA_HA, allowed).variance
    np.testing.assert_allclose(np.diagonal(matrix, axis1=1, axis2=2), diagonal, rtol=1e-12)
    np.testing.assert_array_equal(matrix, matrix.transpose(0, 2, 1))


@pytest.mark.parametrize(("plots", "expected"), [(2, 0.929), (3, 0.928), (5, 0.932)])
def test_interval_of_small_parcels_holds_about_what_it_says(plots: int, expected: float) -> None:
    """Simulation: 8,000 parcels of normal values in one large stratum; 95 % interval by t with plots - 1.

    ``expected`` is exact: the linearised variance of a domain of n plots is (n - 1) / n of s^2 / n, so the coverage is
    P(|t| < t_0.975 sqrt((n - 1) / n)) with n - 1 degrees of freedom. With the degrees of freedom of the stratum it
    would be 60 % for two plots.
    """
    parcels = 8000
    rng = np.random.default_rng(plots)
    domain = np.repeat(np.arange(parcels), plots)
    count = len(domain)
    sample = Sample(
        plot=np.arange(count),
        stratum=np.zeros(count, dtype=np.int64),
        parcel=domain,
        size=np.ones(count),
        value=rng.normal(100.0, 15.0, (count, 1)),
        used=np.ones((count, 1), dtype=bool),
        day=np.full(count, np.nan),
    )
    result = ratio_of_means(sample, domain, parcels, np.ones(1), np.ones((1, 1), dtype=bool))
    half = t_half_width(np.sqrt(result.variance), result.df, 0.95)
    coverage = float((np.abs(result.density - 100.0) <= half).mean())
    assert coverage == pytest.approx(expected, abs=0.01)
    np.testing.assert_allclose(result.df, plots - 1)


def test_counts() -> None:
    sample, _ = make_sample(np.random.default_rng(1), 20)
    sample.used[3] = False
    assert counts(sample, 2).sum() == 19


def large_table(plots: int, parcels: int, surveys: list[str]) -> pd.DataFrame:
    rng = np.random.default_rng(1)
    pools = ["above_ground", "below_ground", "dead_wood", "litter", "soil", "harvested_wood"]
    parcel = rng.integers(0, parcels, plots)
    parts = []
    for number, survey in enumerate(surveys):
        values = rng.gamma(4.0, 20.0, (plots, len(pools)))
        part = pd.DataFrame(values, columns=pools).assign(all=values.sum(axis=1))
        part["survey"] = survey
        part["plot"] = pd.Categorical.from_codes(np.arange(plots), [f"p{i}" for i in range(plots)])
        part["parcel"] = [f"c{i}" for i in parcel]
        part["stratum"] = [f"s{i}" for i in parcel % 8]
        part["date"] = pd.Timestamp(f"{2010 + 5 * number}-06-01")
        parts.append(part.assign(size=1.0, inside=True))
    return pd.concat(parts, ignore_index=True)


def test_many_plots_and_parcels_take_seconds() -> None:
    """A tenth of the intended load, with a generous limit: no loop over plots, parcels or pools has crept in."""
    table = large_table(20_000, 2_000, ["2010", "2015"])
    strata = strata_table({f"s{i}": 1000.0 for i in range(8)})
    parcels = parcel_table({f"c{i}": 4.0 for i in range(2_000)})
    pools = ["above_ground", "below_ground", "dead_wood", "litter", "soil", "harvested_wood"]
    began = perf_counter()
    frame, _ = stocks(table, strata, parcels, surveys=["2010", "2015"], pools=pools)
    moved, _ = change(table, strata, parcels, surveys=("2010", "2015"), pools=pools)
    assert perf_counter() - began < 10
    assert len(frame) == 2 * 7 * 2009
    assert len(moved) == 7 * 2009


def test_import_needs_no_heavy_package() -> None:
    code = (
        "import sys; import landcarbon.estimate.stocks, landcarbon.change; "
        "print([name for name in ('scipy', 'geopandas', 'matplotlib') if name in sys.modules])"
    )
    done = subprocess.run([sys.executable, "-c", code], capture_output=True, text=True, check=True)
    assert done.stdout.strip() == "[]"
