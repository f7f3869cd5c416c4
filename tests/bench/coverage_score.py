"""Estimates of many samples against the truth."""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import asdict, dataclass, replace
from typing import Any

import numpy as np
import pandas as pd
from coverage_draws import Draws, plot_table, strata_table
from coverage_stands import Stand

from landcarbon.change import estimate_change
from landcarbon.estimate.interval import limits
from landcarbon.estimate.stocks import estimate_stocks


@dataclass(frozen=True)
class Made:
    """One estimate per sample, all in t C/ha; NaN where a sample gives none."""

    value: np.ndarray
    se: np.ndarray
    low: np.ndarray
    high: np.ndarray
    df: np.ndarray

    def log(self, confidence: float) -> Made:
        """Return the same estimates with intervals by way of the logarithm."""
        found = limits(self.value, self.se, self.df, confidence=confidence, kind="log")
        return replace(self, low=found.low, high=found.high)


@dataclass(frozen=True)
class Score:
    """How estimates compare with the truth.

    Attributes
    ----------
    samples : int
        That gave an estimate.
    lost : int
        That gave none.
    bias, bias_error, rmse : float
        In t C/ha; ``bias_error`` is the Monte Carlo standard error of the bias.
    spread : float
        Standard deviation of the estimates.
    se_ratio : float
        Root mean square of the standard errors by ``spread``.
    coverage, coverage_error : float
        Share of intervals that hold the truth and its Monte Carlo standard error.
    below, above : float
        Share of intervals that lie wholly below the truth, wholly above it.
    """

    samples: int
    lost: int
    bias: float
    bias_error: float
    rmse: float
    spread: float
    se_ratio: float
    coverage: float
    coverage_error: float
    below: float
    above: float


def score(made: Made, truth: float) -> Score:
    """Compare; samples without an estimate are counted apart."""
    known = np.isfinite(made.value) & np.isfinite(made.se)
    value, se, low, high = (array[known] for array in (made.value, made.se, made.low, made.high))
    count = len(value)
    spread = float(value.std(ddof=1))
    below, above = float((high < truth).mean()), float((low > truth).mean())
    held = 1.0 - below - above
    return Score(
        samples=count,
        lost=int((~known).sum()),
        bias=float(value.mean() - truth),
        bias_error=spread / np.sqrt(count),
        rmse=float(np.sqrt(((value - truth) ** 2).mean())),
        spread=spread,
        se_ratio=float(np.sqrt((se**2).mean()) / spread),
        coverage=held,
        coverage_error=float(np.sqrt(held * (1.0 - held) / count)),
        below=below,
        above=above,
    )


def stocks(
    stand: Stand, draws: Draws, density: np.ndarray, size: np.ndarray, confidence: float, **options: Any
) -> Made:
    """Stock of every sample by the program; ``density`` of one date."""
    table = plot_table(draws, density, size, "t1", np.arange(len(size)))
    found, _ = estimate_stocks(
        table,
        strata_table(draws.samples, stand.area_ha),
        None,
        ["t1"],
        pools=["above_ground"],
        confidence=confidence,
        inventory_name="simulated",
        **options,
    )
    return by_sample(found, draws.samples, ("density_t_c_ha", "density_se", "density_low", "density_high", "df"), 1.0)


def change(stand: Stand, tables: list[pd.DataFrame], samples: int, confidence: float, **options: Any) -> Made:
    """Change of every sample by the program; ``tables`` of the surveys t1 and t2.

    Each sample is a stratum and a parcel that fills it: what an inventory settles for all its strata together, such as
    the weights of the best combination, it settles for a parcel alone.
    """
    strata = strata_table(samples, stand.area_ha)
    both = pd.concat(tables, ignore_index=True)
    found, _ = estimate_change(
        both.assign(parcel=both["stratum"]),
        strata,
        strata.rename(columns={"stratum": "parcel"}),
        since="t1",
        until="t2",
        pools=["above_ground"],
        confidence=confidence,
        inventory_name="simulated",
        **options,
    )
    columns = ("change_t_c", "change_se", "change_low", "change_high", "df")
    found = found.assign(df=np.nan) if "df" not in found else found
    return by_sample(found, samples, columns, stand.area_ha, "parcel" if options else "stratum")


def by_sample(found: pd.DataFrame, samples: int, columns: Sequence[str], area_ha: float, by: str = "stratum") -> Made:
    """Take the rows of one level in the order of the samples; all columns but the last are divided by the area."""
    rows = found[(found["by"] == by) & (found["pool"] == "all")]
    rows = rows.set_index(rows["unit"].astype(int)).reindex(np.arange(samples))
    value, se, low, high, df = (rows[name].to_numpy(dtype=float) for name in columns)
    return Made(value / area_ha, se / area_ha, low / area_ha, high / area_ha, df)


def rows_of(made: Made, truth: float, against: float | None = None, **labels: Any) -> dict[str, Any]:
    """Make one row of the result table, in percent of ``against`` (default: the truth)."""
    found = asdict(score(made, truth))
    scale = 100.0 / (truth if against is None else against)
    for name in ("bias", "bias_error", "rmse", "spread"):
        found[name] *= scale
    return labels | found
