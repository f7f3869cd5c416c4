"""Sums of parts on different plots, simulated: the variance is right on average and intervals hold what they say.

Each of many strata is one sample from the same normal population, so one call estimates them all.
"""

from __future__ import annotations

import numpy as np
import pytest

from landcarbon.estimate.combine import Plan, SumEstimate, estimate_sums, plan_sums
from landcarbon.estimate.interval import t_half_width
from landcarbon.estimate.joint import MOST_SETS
from landcarbon.estimate.ratio import Sample
from landcarbon.estimate.sums import read_sums

REPEATS = 4000
POOLS = ["above_ground", "dead_wood", "litter", "soil"]
SPREAD = np.array([30.0, 10.0, 15.0, 40.0])


def samples_of(masks: list[np.ndarray], correlation: float, repeat: float, seed: int) -> tuple[Sample, ...]:
    """Values of mean 0 on the plots each mask (plots x parts, one per date) says."""
    rng = np.random.default_rng(seed)
    plots, parts = masks[0].shape
    root = np.linalg.cholesky(np.full((parts, parts), correlation) + (1 - correlation) * np.eye(parts))

    def draw() -> np.ndarray:
        return rng.normal(size=(REPEATS, plots, parts)) @ root.T * SPREAD[:parts]

    first = draw()
    values = [first, repeat * first + np.sqrt(1 - repeat**2) * draw()]
    samples = []
    for mask, value in zip(masks, values, strict=False):
        there = mask.any(axis=1)
        count = int(there.sum())
        used = np.tile(mask[there], (REPEATS, 1))
        samples.append(
            Sample(
                plot=(np.arange(REPEATS)[:, None] * plots + np.flatnonzero(there)).ravel(),
                stratum=np.repeat(np.arange(REPEATS), count),
                parcel=np.full(REPEATS * count, -1),
                size=np.ones(REPEATS * count),
                value=np.where(used, value[:, there].reshape(-1, parts), 0.0),
                used=used,
                day=np.full(REPEATS * count, np.nan),
            )
        )
    return tuple(samples)


def plan_of(samples: tuple[Sample, ...]) -> Plan:
    pools = POOLS[: samples[0].value.shape[1]]
    return plan_sums(samples, read_sums({name: [f"{name}.part"] for name in pools}, pools), np.ones(REPEATS))


def estimate(masks: list[np.ndarray], correlation: float, repeat: float = 0.0, seed: int = 0) -> SumEstimate:
    samples = samples_of(masks, correlation, repeat, seed)
    return estimate_sums(samples, tuple(sample.stratum for sample in samples), REPEATS, plan_of(samples))


def coverage(found: SumEstimate) -> np.ndarray:
    half = t_half_width(np.sqrt(found.variance), found.df, 0.95)
    return (np.abs(found.density) <= half).mean(axis=0)


def true_variance(masks: list[np.ndarray], correlation: float, repeat: float = 0.0) -> float:
    """Theory: every plot brings in the variance of what was measured on it, divided by the plots of each part."""
    parts = masks[0].shape[1]
    one = np.outer(SPREAD[:parts], SPREAD[:parts]) * (
        np.full((parts, parts), correlation) + (1 - correlation) * np.eye(parts)
    )
    total = 0.0
    signs = [1.0] if len(masks) == 1 else [-1.0, 1.0]
    per_plot = [sign * mask / mask.sum(axis=0) for sign, mask in zip(signs, masks, strict=True)]
    for date, left in enumerate(per_plot):
        for other, right in enumerate(per_plot):
            total += np.einsum("ik,kl,il->", left, one, right) * (1.0 if date == other else repeat)
    return float(total)


def mask(plots: int, **missing: slice) -> np.ndarray:
    table = np.ones((plots, len(POOLS)), dtype=bool)
    for name, rows in missing.items():
        table[rows, POOLS.index(name)] = False
    return table


@pytest.mark.parametrize("correlation", [0.8, 0.3, 0.0, -0.25])
def test_parts_on_subsets(correlation: float) -> None:
    """Soil on 6 of 20 plots, litter on 8 others, dead wood on 14: no bias, coverage as promised."""
    masks = [mask(20, soil=slice(6, 20), litter=slice(0, 12), dead_wood=slice(4, 10))]
    found, expected = estimate(masks, correlation), true_variance(masks, correlation)
    assert found.density[:, -1].var() == pytest.approx(expected, rel=0.08)
    assert found.variance[:, -1].mean() == pytest.approx(expected, rel=0.04)
    assert found.variance.min() > 0
    assert (coverage(found) > 0.94).all()
    assert (coverage(found) < 0.965).all()


def test_quadrature_would_be_wrong() -> None:
    masks = [mask(20, soil=slice(6, 20))]
    expected = true_variance(masks, 0.8)
    found = estimate(masks, 0.8)
    assert found.variance[:, :-1].sum(axis=1).mean() < 0.7 * expected
    assert found.variance[:, -1].mean() == pytest.approx(expected, rel=0.04)


@pytest.mark.parametrize("repeat", [0.0, 0.6, 0.95])
def test_change_of_parts_on_subsets(repeat: float) -> None:
    """Plots replaced, soil on few, dead wood on other plots at either date."""
    masks = [
        mask(24, soil=slice(8, 24), dead_wood=slice(12, 20)),
        mask(24, soil=slice(8, 24), dead_wood=slice(8, 16)),
    ]
    masks[0][20:], masks[1][:2] = False, False
    found, expected = estimate(masks, 0.5, repeat), true_variance(masks, 0.5, repeat)
    assert found.density[:, -1].var() == pytest.approx(expected, rel=0.08)
    assert found.variance[:, -1].mean() == pytest.approx(expected, rel=0.04)
    assert found.variance.min() > 0
    assert (coverage(found) > 0.94).all()
    assert (coverage(found) < 0.98).all()


def test_lone_plots_overstate_rather_than_understate() -> None:
    """Every plot has parts missing in its own way: what is not told by the plots is bounded."""
    rng = np.random.default_rng(6)
    for seed in range(4):
        masks = [rng.random((9, 4)) < 0.6]
        masks[0][:2] = True
        found, expected = estimate(masks, 0.5, seed=seed), true_variance(masks, 0.5)
        assert found.variance[:, -1].mean() > 0.95 * expected
        assert coverage(found)[-1] > 0.93


def test_more_sets_than_are_told_apart(monkeypatch: pytest.MonkeyPatch) -> None:
    """Rare sets of parts are bounded together; with few rare ones the variance hardly differs."""
    assert MOST_SETS >= 64
    rng = np.random.default_rng(3)
    masks = [rng.random((30, 4)) < 0.9]
    plain, expected = estimate(masks, 0.5), true_variance(masks, 0.5)
    monkeypatch.setattr("landcarbon.estimate.joint.MOST_SETS", 3)
    found = estimate(masks, 0.5)
    np.testing.assert_array_equal(found.density, plain.density)
    assert 0.97 * expected < found.variance[:, -1].mean() < 1.25 * expected


def test_stratum_mean_for_a_parcel_covers() -> None:
    """Parcels of 3 plots without soil: the interval of trees and soil together holds the parcel's own sum.

    The parcel's own mean of soil is that of the plots not measured; it varies less than single plots, so the interval
    holds it more often than promised.
    """
    from landcarbon.estimate.combine import stratum_means

    rng = np.random.default_rng(5)
    strata, plots = 500, 12
    number = strata * plots
    trees, soil = rng.normal(100, 30, number), rng.normal(60, 40, number)
    place = np.tile(np.arange(plots), strata)
    used = np.stack([np.ones(number, dtype=bool), place >= 3], axis=1)
    sample = Sample(
        plot=np.arange(number),
        stratum=np.repeat(np.arange(strata), plots),
        parcel=np.where(place < 3, np.repeat(np.arange(strata), plots), -1),
        size=np.ones(number),
        value=np.where(used, np.stack([trees, soil], axis=1), 0.0),
        used=used,
        day=np.full(number, np.nan),
    )
    names = ["above_ground", "soil"]
    plan = plan_sums((sample,), read_sums({name: [f"{name}.part"] for name in names}, names), np.ones(strata))
    means = stratum_means((sample,), plan)
    found = estimate_sums((sample,), (sample.parcel,), strata, plan, means=means)
    half = t_half_width(np.sqrt(found.variance), found.df, 0.95)
    own = soil.reshape(strata, plots)[:, :3].mean(axis=1)
    assert (np.abs(found.density[:, 1] - own) <= half[:, 1]).mean() > 0.97
    assert (np.abs(found.density[:, 2] - (100 + own)) <= half[:, 2]).mean() > 0.95
