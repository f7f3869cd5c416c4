"""Variance of raster means that are themselves estimated from a first phase of points (double sampling)."""

from __future__ import annotations

from collections.abc import Mapping, Sequence
from itertools import combinations_with_replacement

import numpy as np
import pandas as pd

from landcarbon.estimate.assist_lines import Lines

__all__ = ["PHASE_COLUMNS", "first_phase_variances"]

PHASE_COLUMNS = ["since", "until", "by", "unit", "pool", "variance"]


def first_phase_variances(
    lines: Mapping[str, Lines], points: pd.DataFrame, sums: Mapping[str, Sequence[str]], area: np.ndarray
) -> pd.DataFrame:
    """Variance that a mean over points brings into densities and their changes.

    Parameters
    ----------
    lines : mapping
        Lines of each survey.
    points : DataFrame
        survey, stratum (code), points: number of points that the raster means of a stratum rest on; strata known wall
        to wall are left out.
    sums : mapping
        Columns of each pool, and ``all``.
    area : ndarray
        Of the strata [ha].

    Returns
    -------
    DataFrame
        ``PHASE_COLUMNS``: since and until are the same survey for a stock; variance [(t C/ha)^2] of strata and of the
        inventory (unit "").

    Notes
    -----
    With f the part of the plot values that the rasters explain, of the later date less the earlier one for a change,
    and s_f^2 its variance over the plots of a stratum, the mean over m points has the variance s_f^2 / m. Plots and
    points are taken as samples of the stratum, the plots as a part of the points; then s_f^2 = s_y^2 - s_e^2, with
    s_e^2 the residual sum of squares over n - 1, and this is the textbook form of double sampling for regression. The
    points of two surveys are taken to be the same.
    """
    blocks = []
    for since, until in combinations_with_replacement(lines, 2):
        number = np.zeros(len(area))
        for survey in {since, until}:
            rows = points[points["survey"] == survey]
            here = np.zeros(len(area))
            here[rows["stratum"].to_numpy(dtype=np.int64)] = rows["points"].to_numpy(dtype=float)
            number = np.where((number > 0) & (here > 0), np.minimum(number, here), np.maximum(number, here))
        if not (number > 0).any():
            continue
        code, explained = _explained(lines[since], lines[until])
        for pool, names in sums.items():  # over pools
            value = explained[:, [lines[until].columns.index(name) for name in names]].sum(axis=1)
            blocks.append(_rows(value, code, number, area, lines[until].labels).assign(
                since=since, until=until, pool=pool
            ))  # fmt: skip
    return pd.concat(blocks, ignore_index=True)[PHASE_COLUMNS] if blocks else pd.DataFrame(columns=PHASE_COLUMNS)


def _explained(since: Lines, until: Lines) -> tuple[np.ndarray, np.ndarray]:
    """Stratum and explained part, or its change, of the plots of both surveys that kept their stratum."""
    if since is until:
        return until.code, until.explained()
    _, one, two = np.intersect1d(since.plot, until.plot, return_indices=True)
    same = since.code[one] == until.code[two]
    return until.code[two[same]], until.explained()[two[same]] - since.explained()[one[same]]


def _rows(value: np.ndarray, code: np.ndarray, number: np.ndarray, area: np.ndarray, labels: list[str]) -> pd.DataFrame:
    strata = len(labels)
    plots = np.bincount(code, minlength=strata).astype(float)
    mean = np.bincount(code, weights=value, minlength=strata) / np.maximum(plots, 1.0)
    squares = np.bincount(code, weights=(value - mean[code]) ** 2, minlength=strata)
    spread = squares / np.maximum(plots - 1.0, 1.0)
    variance = np.divide(spread, number, out=np.zeros(strata), where=number > 0)
    share = area / area.sum() if np.isfinite(area).all() else np.full(strata, 1.0 if strata == 1 else np.nan)
    return pd.DataFrame(
        {
            "by": ["inventory"] + ["stratum"] * strata,
            "unit": ["", *labels],
            "variance": np.append((share**2 * variance).sum(), variance),
        }
    )
