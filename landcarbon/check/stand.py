"""Does a survey look like a forest at all: basal area, mean diameter and stems per hectare, and slips of units."""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
import pandas as pd

from landcarbon.check.keys import positions, visit_positions
from landcarbon.check.rules import joined, rule

__all__ = ["StandFigures", "stand_figures", "stand_findings"]

_CM_PER_M = 100.0


@dataclass(frozen=True)
class StandFigures:
    """What foresters know a stand by.

    Attributes
    ----------
    basal_area_m2_ha : float
        Cross-sections of the live trees at breast height; NaN without a visited plot.
    quadratic_mean_cm : float
        Diameter of the tree of mean basal area; NaN without trees.
    stems_ha : float
        Live trees per hectare.
    median_cm : float
        Middle diameter of the live rows, whether they count or not; NaN without one.
    trees : int
        Live rows with a diameter.
    plots : int
        Visited plots.
    """

    basal_area_m2_ha: float
    quadratic_mean_cm: float
    stems_ha: float
    median_cm: float
    trees: int
    plots: int


def stand_findings(
    trees: pd.DataFrame, visits: pd.DataFrame, surveys: pd.DataFrame, plots: pd.DataFrame | None = None
) -> pd.DataFrame:
    """Tell basal area, mean diameter and stems per hectare of every survey, and warn where they cannot be.

    Parameters
    ----------
    trees : DataFrame
        Tree table after the checks: survey, plot, status, used, dbh_cm [cm], expansion [1/ha].
    visits : DataFrame
        Canonical visits table.
    surveys : DataFrame
        Surveys in the order of time.
    plots : DataFrame, optional
        Canonical plots table; those outside all parcels are left out.

    Returns
    -------
    DataFrame
        One note per survey with a visited plot and a live tree, and warnings that name likely slips of units.
    """
    parts = []
    for survey in surveys["survey"].astype("object"):
        figures = stand_figures(trees, visits, str(survey), plots)
        if figures.trees:
            parts += _findings(str(survey), figures)
    return joined(parts)


def stand_figures(
    trees: pd.DataFrame, visits: pd.DataFrame, survey: str, plots: pd.DataFrame | None = None
) -> StandFigures:
    """Work out the figures of one survey.

    Parameters
    ----------
    trees, visits, plots : DataFrame
        As for :func:`stand_findings`.
    survey : str
        The survey.

    Notes
    -----
    Means over the visited plots, empty ones among them, weighted by the share inside and the number of subplots.
    """
    visited = visits[(visits["survey"] == survey).to_numpy(dtype=bool) & visits["visited"].to_numpy(dtype=bool)]
    if plots is not None:
        inside = plots.loc[plots["inside"].to_numpy(dtype=bool), "plot"]
        visited = visited[positions(visited["plot"], inside) >= 0]
    of_survey = (trees["survey"] == survey).to_numpy(dtype=bool) & (trees["status"] == "live").to_numpy(dtype=bool)
    dbh = trees["dbh_cm"].to_numpy(dtype=float)
    sized = of_survey & (dbh > 0) & np.isfinite(dbh)
    at = visit_positions(trees, visited)
    per_ha = trees["expansion"].to_numpy(dtype=float)
    counted = np.flatnonzero(sized & trees["used"].to_numpy(dtype=bool) & (at >= 0) & np.isfinite(per_ha))
    section_m2 = np.pi / 4 * (dbh[counted] / _CM_PER_M) ** 2
    weight = visited["share_inside"].to_numpy(dtype=float) * visited["n_subplots"].to_numpy(dtype=float)
    basal_area = _mean(section_m2 * per_ha[counted], at[counted], weight)
    stems = _mean(per_ha[counted], at[counted], weight)
    mean_section = basal_area / stems if stems > 0 else np.nan
    return StandFigures(
        basal_area_m2_ha=basal_area,
        quadratic_mean_cm=float(np.sqrt(mean_section * 4 / np.pi)) * _CM_PER_M,
        stems_ha=stems,
        median_cm=float(np.median(dbh[sized])) if sized.any() else np.nan,
        trees=int(sized.sum()),
        plots=len(visited),
    )


def _mean(values: np.ndarray, at: np.ndarray, weight: np.ndarray) -> float:
    """Mean of sums by plot, weighted."""
    total = weight.sum()
    return float((np.bincount(at, weights=values, minlength=len(weight)) * weight).sum() / total) if total else np.nan


def _findings(survey: str, figures: StandFigures) -> list[pd.DataFrame]:
    thin, thick = rule("diameters implausibly thin"), rule("diameters implausibly thick")
    high, low = rule("basal area implausibly high"), rule("basal area implausibly low")
    parts = []
    words = {
        "survey": survey,
        "trees": f"{figures.trees:,}",
        "plots": f"{figures.plots:,}",
        "median": _shown(figures.median_cm),
        "basal_area": _shown(figures.basal_area_m2_ha),
        "diameter": _shown(figures.quadratic_mean_cm),
        "stems": f"{figures.stems_ha:,.0f}",
    }
    if np.isfinite(figures.basal_area_m2_ha):
        value = f"{words['basal_area']} m2/ha"
        if figures.stems_ha > 0:
            parts.append(rule("stand in figures").found(fill=words, survey=survey, value=value))
        if figures.basal_area_m2_ha > high.limits["m2_ha"] and figures.trees >= high.limits["trees"]:
            parts.append(high.found(fill=words, survey=survey, value=value))
        if figures.basal_area_m2_ha < low.limits["m2_ha"] and figures.trees > low.limits["trees"]:
            parts.append(low.found(fill=words, survey=survey, value=value))
    value = f"{words['median']} cm"
    if figures.median_cm < thin.limits["median_cm"] and figures.trees > thin.limits["trees"]:
        parts.append(thin.found(fill=words, survey=survey, value=value))
    if figures.median_cm > thick.limits["median_cm"] and figures.trees > thick.limits["trees"]:
        parts.append(thick.found(fill=words, survey=survey, value=value))
    return parts


def _shown(value: float) -> str:
    """Write two figures, and every figure before the decimal point."""
    return f"{value:,.0f}" if value >= 10 else f"{value:.2g}"
