"""Checks of plots, strata and parcels."""

from __future__ import annotations

from typing import TYPE_CHECKING

import numpy as np
import pandas as pd

from landcarbon.check.keys import positions, visit_positions
from landcarbon.check.rules import Outcome, joined, rule

if TYPE_CHECKING:
    from landcarbon.inputs import Inputs
    from landcarbon.inventory import Settings

__all__ = ["coordinates", "plot_doubles", "strata_of_plots", "too_few_plots", "unused_parcels"]

_WHOLE = "(whole inventory)"
_DEGREES = "EPSG:4326"


def plot_doubles(inputs: Inputs, settings: Settings) -> Outcome:
    """Leave out plots that stand twice in the plots table.

    Parameters
    ----------
    inputs : Inputs
        Canonical tables.
    settings : Settings
        The project file (not used).

    Returns
    -------
    Outcome
        Plot rows dropped and findings.
    """
    again = inputs.plots["plot"].duplicated().to_numpy()
    return Outcome(rule("duplicate plot").found(inputs.plots[again]), plot_dropped=again)


def coordinates(inputs: Inputs, settings: Settings) -> Outcome:
    """Point at plots without coordinates and at plots outside all parcels.

    Parameters
    ----------
    inputs : Inputs
        Canonical tables.
    settings : Settings
        The project file (not used).

    Returns
    -------
    Outcome
        Findings only.
    """
    plots = inputs.plots
    place = plots[["x", "y"]].to_numpy(dtype=float)
    lost = ~np.isfinite(place).all(axis=1)
    inside = plots["inside"].to_numpy(dtype=bool)
    outside = ~inside & ~lost
    parts = [
        _many_outside(inputs, outside, int((~lost).sum())),
        rule("plot outside parcels").found(plots[outside], value=_place_text(place[outside])),
        rule("plot in no parcel").found(plots[~inside & lost]),
    ]
    # an inventory that places no plot at all (stated strata, no map) needs no line per plot
    if not lost.all():
        parts.append(rule("coordinates missing").found(plots[inside & lost]))
    return Outcome(joined(parts))


def _many_outside(inputs: Inputs, outside: np.ndarray, placed: int) -> pd.DataFrame:
    """Tell once that so many plots lie outside that a slip common to all is likely."""
    many = rule("many plots outside parcels")
    count = int(outside.sum())
    if count < many.limits["plots"] or count <= many.limits["share"] * placed:
        return joined([])
    words = {"count": count, "total": placed, "guess": _guess(inputs, outside)}
    return many.found(fill=words, value=f"{count} of {placed} plots")


def _guess(inputs: Inputs, outside: np.ndarray) -> str:
    """Name the usual slip, if any, that undone brings most of the plots into the box around the parcels."""
    if inputs.parcels is None or inputs.parcels.crs is None:
        return ""
    west, south, east, north = inputs.parcels.geometry.to_crs(_DEGREES).total_bounds
    lon, lat = (inputs.plots.loc[outside, name].to_numpy(dtype=float) for name in ("lon", "lat"))
    slips = {
        "with the other sign of the longitude": (-lon, lat),
        "with the other sign of the latitude": (lon, -lat),
        "with longitude and latitude exchanged": (lat, lon),
    }
    for words, (x, y) in slips.items():
        within = int(((x >= west) & (x <= east) & (y >= south) & (y <= north)).sum())
        if 2 * within > len(lon):
            return f" {words[0].upper()}{words[1:]} {within} of them would lie among the parcels."
    return ""


def strata_of_plots(inputs: Inputs, settings: Settings) -> Outcome:
    """Point at plots without a stratum where other plots have one.

    Parameters
    ----------
    inputs : Inputs
        Canonical tables.
    settings : Settings
        The project file (not used).

    Returns
    -------
    Outcome
        Findings only.
    """
    plots = inputs.plots[inputs.plots["inside"].to_numpy(dtype=bool)]
    blank = (plots["stratum"] == "").to_numpy(dtype=bool)
    if blank.all():
        return Outcome()
    return Outcome(rule("stratum missing").found(plots[blank]))


def too_few_plots(inputs: Inputs, settings: Settings) -> Outcome:
    """Point at strata with fewer usable plots in a survey than a variance needs, with the area concerned.

    Parameters
    ----------
    inputs : Inputs
        Canonical tables after the checks of plots and visits.
    settings : Settings
        The project file: ``strata.merge``.

    Returns
    -------
    Outcome
        Findings only.
    """
    few = rule("too few plots")
    counts, empty = _visited_plots(inputs, dict(getattr(settings.strata, "merge", None) or {}))
    nobody = joined(_no_visit(inputs, survey) for survey in empty)
    areas = inputs.strata.groupby("stratum")["area_ha"].sum(min_count=1)
    short = counts[counts["plots"] < few.limits["plots"]]
    names = short["stratum"].where(short["stratum"] != "", _WHOLE).to_numpy(dtype=object)
    words = [
        {"stratum": name, "survey": survey, "count": int(count), "area": _area_text(area)}
        for name, survey, count, area in zip(
            names, short["survey"], short["plots"], areas.reindex(short["stratum"]), strict=True
        )
    ]
    parts = [nobody, few.found_each(short[["survey"]], words, value=names)]
    return Outcome(joined(parts))


def unused_parcels(inputs: Inputs, settings: Settings) -> Outcome:
    """Point at parcels in which no plot lies.

    Parameters
    ----------
    inputs : Inputs
        Canonical tables.
    settings : Settings
        The project file (not used).

    Returns
    -------
    Outcome
        Findings only.
    """
    if inputs.parcels is None:
        return Outcome()
    parcels = pd.DataFrame(inputs.parcels[["parcel", "area_ha"]])
    held = inputs.plots.loc[inputs.plots["inside"].to_numpy(dtype=bool), "parcel"]
    unused = parcels[positions(parcels["parcel"], held) < 0]
    words = [{"area": _area_text(area)} for area in unused["area_ha"].astype(float)]
    found = rule("parcel without plots").found_each(unused[[]], words, value=unused["parcel"].to_numpy(dtype=object))
    return Outcome(found)


def _no_visit(inputs: Inputs, survey: str) -> pd.DataFrame:
    """Tell a survey in which no plot was visited from one whose visited plots all lie outside."""
    visits = inputs.visits
    visited = visits["visited"].to_numpy(dtype=bool) & (visits["survey"] == survey).to_numpy(dtype=bool)
    name = "no plot inside" if visited.any() else "no visit"
    return rule(name).found(fill={"survey": survey, "count": int(visited.sum())}, survey=survey, value=survey)


def _visited_plots(inputs: Inputs, merge: dict[str, str]) -> tuple[pd.DataFrame, list[str]]:
    """Count usable plots by stratum and survey; name the surveys that have none at all."""
    plots = inputs.plots[inputs.plots["inside"].to_numpy(dtype=bool)]
    visits = inputs.visits[inputs.visits["visited"].to_numpy(dtype=bool)]
    if inputs.parcel_of is not None:
        return _visited_within(visits, inputs)
    at = positions(visits["plot"], plots["plot"])
    stratum = plots["stratum"].astype("object").map(lambda name: merge.get(name, name)).to_numpy()
    visits = pd.DataFrame({"survey": visits["survey"].astype("object")})[at >= 0].assign(stratum=stratum[at[at >= 0]])
    listed = [merge.get(name, name) for name in inputs.strata["stratum"].astype("object")]
    strata = sorted({*listed, *stratum})
    if len(strata) > 1:
        strata = [name for name in strata if name != ""]
    surveys = [str(name) for name in inputs.surveys["survey"]]
    every = pd.MultiIndex.from_product([surveys, strata], names=["survey", "stratum"])
    counts = visits.groupby(["survey", "stratum"]).size().reindex(every, fill_value=0).rename("plots").reset_index()
    seen = set(visits["survey"])
    empty = [name for name in surveys if name not in seen]
    return counts[~counts["survey"].isin(empty)], empty


def _visited_within(visits: pd.DataFrame, inputs: Inputs) -> tuple[pd.DataFrame, list[str]]:
    """Count usable plots within the boundaries of each survey, for the strata that have land or a plot at it."""
    places, versions, in_force = inputs.parcel_of, inputs.parcel_versions, inputs.parcels_in_force
    if places is None or versions is None or in_force is None:
        return pd.DataFrame({"survey": [], "stratum": [], "plots": []}), []
    places = places[places["inside"].to_numpy(dtype=bool)]
    there = places[visit_positions(places, visits) >= 0]
    land = pd.DataFrame({"survey": in_force["survey"], "stratum": versions["stratum"].to_numpy()[in_force["row"]]})
    every = pd.MultiIndex.from_frame(pd.concat([land, there[["survey", "stratum"]]]).drop_duplicates())
    counts = there.groupby(["survey", "stratum"]).size().reindex(every, fill_value=0).rename("plots").reset_index()
    empty = [str(name) for name in inputs.surveys["survey"] if name not in set(there["survey"])]
    return counts[~counts["survey"].isin(empty)], empty


def _area_text(area_ha: float) -> str:
    return "area unknown" if np.isnan(area_ha) else f"{area_ha:,.2f} ha"


def _place_text(place: np.ndarray) -> np.ndarray | str:
    if len(place) == 0:
        return ""
    return np.array([f"{x:.1f}, {y:.1f}" for x, y in place], dtype=object)
