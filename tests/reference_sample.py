"""Samples and tables for the answers to the reference cases."""

from __future__ import annotations

from collections.abc import Mapping
from dataclasses import dataclass
from typing import Any

import numpy as np
import pandas as pd
from estimate_frames import plot_table, stocks, strata_table, whole

from landcarbon.estimate.pairs import pool_covariance
from landcarbon.estimate.ratio import Sample, ratio_of_means
from landcarbon.estimate.sample_size import finite_population_factor

FINITE = "with the program's finite population factor; default: none"
UNIT = {"S": 1.0}


@dataclass(frozen=True)
class Joint:
    """Stratified means of several variables of the same plots, with their covariance matrix."""

    mean: np.ndarray
    cov: np.ndarray

    @property
    def se(self) -> np.ndarray:
        return np.sqrt(np.diag(self.cov))


def joint(
    columns: Mapping[str, Any],
    stratum: Any = None,
    area: Mapping[str, float] | None = None,
    population: Mapping[str, float] | None = None,
) -> Joint:
    """Means of columns of a stratified sample, by the program's estimator with all plots of one size.

    Each stratum is a domain of its own; ``population`` brings in the finite population factor.
    """
    value = np.column_stack([np.asarray(column, dtype=float) for column in columns.values()])
    area = UNIT if area is None else area
    names = list(area)
    codes = np.zeros(len(value), dtype=np.int64)
    if stratum is not None:
        codes = pd.Categorical(np.asarray(stratum).astype(str), categories=names).codes.astype(np.int64)
    sample = Sample(
        plot=np.arange(len(value)),
        stratum=codes,
        parcel=np.zeros(len(value), dtype=np.int64),
        size=np.ones(len(value)),
        value=value,
        used=np.ones(value.shape, dtype=bool),
        day=np.full(len(value), np.nan),
    )
    hectares = np.array([float(area[name]) for name in names])
    allowed = np.ones((len(names), value.shape[1]), dtype=bool)
    whole_area = np.zeros(len(value), dtype=np.int64)
    mean = ratio_of_means(sample, whole_area, 1, hectares, allowed).density[0]
    if population is None:
        return Joint(mean, pool_covariance(sample, whole_area, 1, hectares, allowed)[0])
    parts = pool_covariance(sample, codes, len(names), hectares, allowed)
    fit = np.array([float(population[name]) for name in names])
    factor = (hectares / hectares.sum()) ** 2 * finite_population_factor(np.bincount(codes), fit)
    return Joint(mean, np.einsum("h,hjk->jk", factor, parts))


def one_row(values: Any, area: float = 1.0, **columns: Any) -> pd.Series:
    """Inventory row of a simple random sample."""
    return whole(stocks(plot_table(values, **columns), strata_table({"S": area}))[0])


def finite(plots: Any, population: Any) -> Any:
    """Root of the finite population factor."""
    return np.sqrt(finite_population_factor(plots, population))


def sample_with(n: int, mean: float, variance: float) -> np.ndarray:
    """Values with exactly this mean and variance: half above, half below, an odd one in the middle."""
    pairs = n // 2
    step = np.sqrt(variance * (n - 1) / (2 * pairs))
    return np.concatenate([np.full(pairs, mean + step), np.full(pairs, mean - step), np.full(n - 2 * pairs, mean)])
