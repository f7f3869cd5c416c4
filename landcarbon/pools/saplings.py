"""Tallies of small stems: count by class, mass per stem, area of the tally plot."""

from __future__ import annotations

from collections.abc import Iterator
from dataclasses import dataclass

import numpy as np
import pandas as pd

from landcarbon.constants import KG_PER_T, M2_PER_HECTARE
from landcarbon.errors import SettingsError
from landcarbon.findings import join_findings, make_findings
from landcarbon.pools.parts import RowShares, empty_parts, make_parts

__all__ = ["SaplingOptions", "saplings"]

TABLE = "saplings"


@dataclass(frozen=True)
class SaplingOptions:
    """How tallies of small stems are turned into densities.

    Attributes
    ----------
    area_m2 : float or None
        Area of a tally plot where the row gives none [m2].
    known : {"read", "secondary", "memory"}
        How the weakest of the equations and factors behind the mass per stem is known.
    equations : str
        A few words on the equations, for the method in the outputs.
    """

    area_m2: float | None = None
    known: str = "read"
    equations: str = "biomass equations by species"


def saplings(
    samples: pd.DataFrame,
    plan_biomass_kg: np.ndarray,
    carbon_fraction: np.ndarray,
    options: SaplingOptions,
    *,
    shares: RowShares | None = None,
) -> tuple[pd.DataFrame, pd.DataFrame]:
    """Work out the carbon of small stems tallied on small plots.

    Parameters
    ----------
    samples : DataFrame
        Canonical table ``saplings``: row_id, file, row, survey, plot, subplot, used, count, area_m2 [m2] and the
        species and sizes the caller has evaluated. One row per stem or per class of like stems.
    plan_biomass_kg : ndarray
        Above-ground dry mass of one stem of each row [kg]; not looked at where the count is zero.
    carbon_fraction : ndarray
        t C per t dry matter, per row.
    options : SaplingOptions
        Area where the rows give none; marks of the equations.
    shares : RowShares, optional
        Takes what each row brings in.

    Returns
    -------
    parts : DataFrame
        Part ``saplings`` of the pool above_ground, one row per plot and survey with a tally; samples counts stems.
    findings : DataFrame
        Rows set aside and what else was seen.

    Raises
    ------
    SettingsError
        If the area in the options is not above zero.

    Notes
    -----
    A tally plot is one (survey, plot, subplot). Value of a plot = sum over its tally plots of mass / sum of their
    areas: two tally plots of 12.57 m2 count as one of 25.14 m2. A tally plot without stems needs a row with count 0, or
    its area is not known to have been searched. Where rows of one tally plot give different areas (small stems on an
    inner, larger ones on an outer circle), each row is expanded by its own area and the largest is the weight of the
    tally plot. Without a column of counts every row is one stem. A row whose stem cannot be evaluated is left out as a
    tree is: the area of its tally plot stays as long as another row there counts, so the plot comes out too low.

    Common practice, no source; expansion by fixed area as for trees.
    """
    area_default = _checked_area(options)
    if samples.empty:
        return empty_parts(), join_findings([])
    biomass = np.asarray(plan_biomass_kg, dtype=float)
    fraction = np.asarray(carbon_fraction, dtype=float)
    count, area = _counts(samples), _numbers(samples, "area_m2")
    area = np.where(np.isnan(area), area_default, area)
    empty = count == 0.0
    used, findings = _set_aside(samples, count, area, np.where(empty, 0.0, biomass), np.where(empty, 0.0, fraction))
    negative = used & ~empty & (biomass < 0)
    findings.append(
        make_findings(
            "negative biomass",
            samples.loc[negative],
            severity="warning",
            table=TABLE,
            column="dbh_cm",
            message="The equation turns negative at this size; the stems count as zero.",
            remedy="Choose another equation for small stems in [equations.species].",
        )
    )
    mass = np.where(empty | negative, 0.0, count * biomass)[used] / area[used]
    carbon = np.where(empty[used], 0.0, mass * fraction[used])
    rows = samples.loc[used, ["survey", "plot", "subplot"]].astype("str")
    rows = rows.assign(count=count[used], area=area[used], mass=mass, carbon=carbon)
    measured, mixed, weight = _by_plot(rows)
    if shares is not None:
        shares.add(TABLE, samples.loc[used], carbon * weight)
    findings.append(_mixed_areas(mixed))
    method = f"tally plots: stems x mass per stem ({options.equations}) over the area tallied"
    parts = make_parts(measured, pool="above_ground", part="saplings", method=method, known=options.known)
    return parts, join_findings(findings)


def _checked_area(options: SaplingOptions) -> float:
    area = np.nan if options.area_m2 is None else float(options.area_m2)
    if area <= 0 or np.isinf(area):
        raise SettingsError(
            f"area_m2 = {area:g} is not an area", where=f"[{TABLE}] area_m2", remedy="Give square metres above zero."
        )
    return area


def _numbers(samples: pd.DataFrame, column: str) -> np.ndarray:
    if column not in samples:
        return np.full(len(samples), np.nan)
    return samples[column].to_numpy(dtype=float)


def _counts(samples: pd.DataFrame) -> np.ndarray:
    count = _numbers(samples, "count")
    return np.ones(len(samples)) if np.isnan(count).all() else count


def _set_aside(
    samples: pd.DataFrame, count: np.ndarray, area: np.ndarray, biomass: np.ndarray, fraction: np.ndarray
) -> tuple[np.ndarray, list[pd.DataFrame]]:
    used = samples["used"].to_numpy(dtype=bool)
    findings = []
    for rule, fault, column, message, remedy in _faults(count, area, biomass, fraction):
        hit = used & fault
        used = used & ~fault
        findings.append(
            make_findings(
                rule,
                samples.loc[hit],
                severity="error",
                table=TABLE,
                column=column,
                used=False,
                message=message,
                remedy=remedy,
            )
        )
    return used, findings


def _faults(
    count: np.ndarray, area: np.ndarray, biomass: np.ndarray, fraction: np.ndarray
) -> Iterator[tuple[str, np.ndarray, str, str, str]]:
    yield (
        "count missing",
        np.isnan(count),
        "count",
        "The row has no count while others have one; its stems are left out and the plot may come out too low.",
        "Enter the count; 0 says that none was found.",
    )
    yield (
        "count negative",
        count < 0,
        "count",
        "A negative number of stems; the row is left out.",
        "Correct the count.",
    )
    yield (
        "tally area missing",
        np.isnan(area),
        "area_m2",
        "The area on which the stems were counted is not known; the row is left out.",
        "Map the column area, or set [saplings] area_m2.",
    )
    yield (
        "tally area not above zero",
        (area <= 0) | np.isinf(area),
        "area_m2",
        "The area on which the stems were counted is zero, negative or endless; the row is left out.",
        "Correct the area of the tally plot.",
    )
    yield (
        "no biomass",
        ~np.isfinite(biomass) | ~np.isfinite(fraction),
        "dbh_cm",
        "No mass per stem could be worked out for this row; its stems are left out and the plot comes out too low.",
        "Enter the size the equation needs, or choose an equation for the species in [equations.species].",
    )


def _by_plot(rows: pd.DataFrame) -> tuple[pd.DataFrame, pd.DataFrame, np.ndarray]:
    """Figures of plots, tally plots with several areas, and what a kg per m2 of each row weighs in its plot."""
    keys = ["survey", "plot", "subplot"]
    tally = rows.groupby(keys, as_index=False, sort=False).agg(
        count=("count", "sum"),
        area=("area", "max"),
        least=("area", "min"),
        mass=("mass", "sum"),
        carbon=("carbon", "sum"),
    )
    mixed = tally.loc[tally["least"] != tally["area"]]
    weighed = tally.assign(mass=tally["mass"] * tally["area"], carbon=tally["carbon"] * tally["area"])
    totals = weighed.groupby(["survey", "plot"], as_index=False, sort=True)[["count", "area", "mass", "carbon"]].sum()
    to_t_ha = M2_PER_HECTARE / KG_PER_T
    measured = totals[["survey", "plot"]].assign(
        density_t_c_ha=totals["carbon"] / totals["area"] * to_t_ha,
        mass_t_ha=totals["mass"] / totals["area"] * to_t_ha,
        samples=np.rint(totals["count"]).astype("int64"),
    )
    whole = rows[["survey", "plot"]].merge(totals[["survey", "plot", "area"]], how="left", on=["survey", "plot"])
    own = rows[keys].merge(tally[[*keys, "area"]], how="left", on=keys)
    return measured, mixed, own["area"].to_numpy() / whole["area"].to_numpy() * to_t_ha


def _mixed_areas(mixed: pd.DataFrame) -> pd.DataFrame:
    low, high = (mixed[name].map("{:g}".format).astype("str") for name in ("least", "area"))
    spans = low + " to " + high
    return make_findings(
        "tally areas differ",
        mixed,
        severity="note",
        table=TABLE,
        column="area_m2",
        value=spans,
        message="Rows of one tally plot give different areas; each row is expanded by its own.",
        remedy="Nothing if small and large stems were tallied on circles of two sizes; otherwise correct the area.",
    )
