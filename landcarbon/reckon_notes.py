"""What is to be said about how the figures were reckoned: findings and sentences for every output."""

from __future__ import annotations

from collections.abc import Mapping

import pandas as pd

from landcarbon.estimate.common_area import CommonArea
from landcarbon.findings import empty_findings, make_findings

__all__ = [
    "direct_because_of_clusters",
    "many_replaced",
    "rasters_with_moving_boundaries",
    "reckoning_marks",
    "units_without_change",
]

_FEW = 3  # plots given up and new ones, from which a hint is worth while


def rasters_with_moving_boundaries() -> pd.DataFrame:
    """Say that rasters do not assist where boundaries change."""
    return make_findings(
        "rasters not used",
        severity="warning",
        table="rasters",
        message="Rasters and classes of known area assist only where boundaries stay the same; these estimates rest on "
        "the plots alone.",
        remedy="Leave out valid_from and valid_to, or the rasters.",
    )


def direct_because_of_clusters() -> pd.DataFrame:
    """Say that parcels are stated from their own plots alone where plots stand in clusters."""
    return make_findings(
        "parcels from own plots",
        severity="note",
        table="estimate",
        message="Plots stand in clusters: parcels are stated from their own plots alone, as composite figures would "
        "take plots of one cluster for independent ones. They do not sum to their strata.",
        remedy="Nothing if the clusters are right; few plots make wide intervals.",
    )


def units_without_change(common: CommonArea | None, change: pd.DataFrame) -> pd.DataFrame:
    """Name strata and parcels of one survey that have no row of change, as no land of theirs is in both.

    Parameters
    ----------
    common : CommonArea or None
        Land of both surveys; None where boundaries stay.
    change : DataFrame
        Change between them.
    """
    if common is None:
        return empty_findings()
    there = set(zip(change["by"], change["unit"], strict=True))
    areas = common.areas[common.areas["by"] != "inventory"]
    lost = areas[[pair not in there for pair in zip(areas["by"], areas["unit"], strict=True)]]
    if lost.empty:
        return empty_findings()
    names = ", ".join(f"{by} {unit}" for by, unit in zip(lost["by"], lost["unit"], strict=True))
    return make_findings(
        "unit without change",
        severity="note",
        table="change",
        survey=f"{common.since} to {common.until}",
        value=names,
        message=f"No land of {names} was in the unit both in {common.since} and in {common.until}: it has no row of "
        "change, and its land counts in the change of the inventory only. See area_effect.csv.",
        remedy="Nothing if the boundaries are right.",
    )


def many_replaced(change: pd.DataFrame, since: str, until: str) -> pd.DataFrame:
    """Hint at the best combination where plots were replaced and the plain difference is stated.

    Parameters
    ----------
    change : DataFrame
        Change between two surveys.
    since, until : str
        The surveys.
    """
    rows = change[(change["by"] == "inventory") & (change["pool"] == "all")]
    if rows.empty:
        return empty_findings()
    row = rows.iloc[0]
    paired = int(row["plots_paired"])
    gone, new = (int(row[name]) - paired for name in ("plots_since", "plots_until"))
    if min(gone, new, paired) < _FEW:
        return empty_findings()
    return make_findings(
        "plots replaced",
        severity="note",
        table="change",
        survey=f"{since} to {until}",
        value=str(gone + new),
        message=f"Between {since} and {until} {paired} plots were repeated, {gone} given up and {new} new. Change is "
        "stated as the difference of the two means, in which the single plots weigh as much as the repeated ones.",
        remedy='change = "best combination" under [estimation] weighs each by what it tells, and is mostly more '
        "precise.",
    )


def reckoning_marks(dates: Mapping[str, pd.Timestamp], *, moving: bool, composite: bool) -> list[str]:
    """Say on every output what the figures refer to, where that is not plain.

    Parameters
    ----------
    dates : mapping
        Common date of each survey, where densities were brought to one.
    moving : bool
        Whether boundaries change between the surveys.
    composite : bool
        Whether parcels have composite figures.
    """
    marks = []
    if dates:
        told = ", ".join(f"{survey}: {day:%Y-%m-%d}" for survey, day in dates.items())
        marks.append(
            f"Densities were brought to one date per survey ({told}) between each plot's own visits; plots whose "
            "visits do not lie on both sides of it keep the value of their visit (date_kind in plots.parquet)."
        )
    if moving:
        marks.append(
            "Boundaries change between the surveys: figures of a survey refer to the boundaries of its day, change to "
            "the land in the unit at both; the map and parcels.gpkg draw the boundaries of the latest survey."
        )
    if composite:
        marks.append(
            "Figures of parcels are composed of their own plots and the level of their stratum, and sum to the "
            "stratum: see method, and parcel_detail.csv before one parcel is relied on."
        )
    return marks
