"""Published equations against trees that were felled and weighed."""

from __future__ import annotations

import numpy as np
import pandas as pd

from allometry.catalogue import Catalogue

__all__ = ["COLUMNS", "compare"]

COLUMNS = ["group", "equation_id", "n", "mean_kg", "bias_percent", "rmse_kg", "rmse_percent"]


def compare(catalogue: Catalogue, trees: pd.DataFrame, pairs: pd.DataFrame) -> pd.DataFrame:
    """Compare predicted with weighed mass, per group of trees and equation.

    Parameters
    ----------
    catalogue
        The catalogue.
    trees
        One row per weighed tree: ``group``, ``dbh_cm`` [cm], ``height_m`` [m] and ``mass_kg`` [kg, oven-dry].
    pairs
        Which equation to try on which group: ``group``, ``equation_id``.

    Returns
    -------
    DataFrame
        One row per pair, in the order of ``pairs``: number of trees, mean weighed mass [kg], bias (sum of predicted
        over sum of weighed, minus one) [percent], root mean square error with divisor n [kg, and percent of the
        mean]. Trees without a prediction or a weight are left out; a pair without trees gives NaN.
    """
    groups = {str(name): part for name, part in trees.groupby("group", observed=True)}
    rows = [_one(catalogue, groups.get(str(g)), str(g), str(e)) for g, e in pairs[["group", "equation_id"]].to_numpy()]
    return pd.DataFrame(rows, columns=COLUMNS)


def _one(catalogue: Catalogue, trees: pd.DataFrame | None, group: str, equation_id: str) -> tuple[object, ...]:
    if trees is None:
        return (group, equation_id, 0, np.nan, np.nan, np.nan, np.nan)
    predicted = catalogue.evaluate(equation_id, trees["dbh_cm"], trees["height_m"])["biomass_kg"].to_numpy()
    weighed = trees["mass_kg"].to_numpy(dtype=float)
    both = np.isfinite(predicted) & np.isfinite(weighed)
    if not both.any():
        return (group, equation_id, 0, np.nan, np.nan, np.nan, np.nan)
    error = predicted[both] - weighed[both]
    mean = float(weighed[both].mean())
    rmse = float(np.sqrt(np.mean(error**2)))
    bias = 100.0 * float(error.sum() / weighed[both].sum())
    return (group, equation_id, int(both.sum()), mean, bias, rmse, 100.0 * rmse / mean)
