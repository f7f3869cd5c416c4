"""From trees to plots: expansion factors and carbon density per plot, survey and pool.

All areas are horizontal. A plot that was visited and holds no tree is a zero; a plot that was not visited is missing.
"""

from __future__ import annotations

from dataclasses import dataclass, field

import numpy as np
import pandas as pd

from allometry.roots import stand_roots
from landcarbon.constants import HECTARES_PER_ACRE, KG_PER_T, M2_PER_FT2, M2_PER_HECTARE
from landcarbon.errors import SettingsError
from landcarbon.findings import empty_findings, join_findings, make_findings
from landcarbon.pools.trees import has_status

__all__ = [
    "DESIGN_COLUMNS",
    "TREE_PARTS",
    "PlotDesign",
    "PlotSums",
    "expansion_factors",
    "plot_parts",
    "plot_sums",
    "visit_index",
]

TREE_PARTS = ("above_ground.trees", "below_ground.roots", "dead_wood.standing", "dead_wood.dead_roots")
#: Columns of the plots that say how they were drawn; handed on where there are any.
DESIGN_COLUMNS = ("x", "y", "cluster", "weight", "post_stratum")
_CM_PER_M = 100.0


@dataclass(frozen=True)
class PlotDesign:
    """How trees were tallied on a plot.

    Attributes
    ----------
    kind : str
        "area" (one or several nested areas), "angle_count", "census" (area given per plot) or "weighted" (expansion
        factor given per tree row).
    dbh_min_cm : tuple of float
        Lower diameter limit of each nested area, increasing; (0,) for a single one.
    area_ha : tuple of float
        Horizontal area belonging to each limit [ha].
    basal_area_factor : float
        Angle count: basal area one counted tree stands for [m2/ha].
    on_slope : bool
        True if the plot was laid out along the slope, so that its horizontal area is smaller by the cosine.
    subplots : int
        Number of subplots of a complete plot.
    """

    kind: str
    dbh_min_cm: tuple[float, ...] = (0.0,)
    area_ha: tuple[float, ...] = ()
    basal_area_factor: float = float("nan")
    on_slope: bool = False
    subplots: int = 1

    @classmethod
    def circles(cls, radii_m: list[float], dbh_min_cm: list[float], **options: object) -> PlotDesign:
        """Make a design of one or several concentric circles, smallest first."""
        areas = tuple(np.pi * r**2 / M2_PER_HECTARE for r in radii_m)
        return cls("area", tuple(dbh_min_cm), areas, **options)  # type: ignore[arg-type]

    @classmethod
    def rectangle(cls, width_m: float, length_m: float, **options: object) -> PlotDesign:
        """Make a design of one rectangle."""
        return cls("area", (0.0,), (width_m * length_m / M2_PER_HECTARE,), **options)  # type: ignore[arg-type]

    @classmethod
    def angle_count(cls, factor: float, unit: str = "m2/ha", **options: object) -> PlotDesign:
        """Make an angle-count design; ``unit`` is m2/ha or ft2/ac."""
        if unit not in ("m2/ha", "ft2/ac"):
            raise SettingsError(f"unit {unit!r} of the basal area factor", remedy="Use m2/ha or ft2/ac")
        metric = factor if unit == "m2/ha" else factor * M2_PER_FT2 / HECTARES_PER_ACRE
        return cls("angle_count", basal_area_factor=metric, **options)  # type: ignore[arg-type]


@dataclass(frozen=True)
class PlotSums:
    """Sums over trees per visit; batches of whole plots add up.

    Every array has the length of the visits table. Units are t per ha of the area sampled, or counts.
    """

    biomass: np.ndarray
    carbon: np.ndarray
    conifer: np.ndarray
    roots: np.ndarray
    dead_carbon: np.ndarray
    dead_root_carbon: np.ndarray
    trees: np.ndarray = field(default_factory=lambda: np.zeros(0))

    def __add__(self, other: PlotSums) -> PlotSums:
        """Add the sums of another batch."""
        names = self.__dataclass_fields__
        return PlotSums(**{name: getattr(self, name) + getattr(other, name) for name in names})


def visit_index(trees: pd.DataFrame, visits: pd.DataFrame) -> np.ndarray:
    """Row of the visits table each tree belongs to; -1 where there is none.

    Parameters
    ----------
    trees, visits : DataFrame
        Canonical tables with the columns survey and plot.

    Returns
    -------
    ndarray of int
        Shape (trees,).
    """
    survey, surveys = pd.factorize(visits["survey"].astype("str"))
    plot, plots = pd.factorize(visits["plot"].astype("str"))
    table = np.full((len(surveys) + 1, len(plots) + 1), -1, dtype=np.int64)
    table[survey, plot] = np.arange(len(visits))
    return table[_positions(trees["survey"], surveys), _positions(trees["plot"], plots)]


def _positions(values: pd.Series, index: pd.Index) -> np.ndarray:
    """Position of each value in ``index``; len(index), a spare last cell, where it is missing."""
    lookup = pd.Index(index)
    if isinstance(values.dtype, pd.CategoricalDtype):
        by_category = np.append(lookup.get_indexer(values.cat.categories.astype("str")), -1)
        found = by_category[values.cat.codes.to_numpy()]
    else:
        found = lookup.get_indexer(values.astype("str"))
    return np.where(found < 0, len(lookup), found)


def expansion_factors(trees: pd.DataFrame, visits: pd.DataFrame, index: np.ndarray, design: PlotDesign) -> np.ndarray:
    """Stems per hectare that one tallied tree stands for.

    Parameters
    ----------
    trees : DataFrame
        Canonical trees.
    visits : DataFrame
        Canonical visits.
    index : ndarray of int
        From :func:`visit_index`.
    design : PlotDesign
        How trees were tallied.

    Returns
    -------
    ndarray of float
        1/ha of the horizontal area sampled in the population; NaN where the tree belongs to no visit or lies below
        the smallest diameter limit.

    Notes
    -----
    Area plots: 1/(n a c w), n subplots visited, a the area of the ring class of the tree's diameter, c the cosine of
    the slope if the plot was laid out along it, w the share of the plot inside the population. Angle count:
    k / (n g) with g the cross-section of the stem, so 40 000 k / (pi d^2 n) with d in cm. Common practice; printed
    factors of national inventories and of the Sourcebook of Pearson, Walker & Brown (2005) are among the tests.
    """
    weight = trees["weight"].to_numpy(dtype=float)
    inside = index >= 0
    at = np.where(inside, index, 0)
    if design.kind == "weighted":
        return np.where(inside, trees["expansion_per_ha"].to_numpy(dtype=float) * weight, np.nan)
    per_visit = 1.0 / visits["n_subplots"].to_numpy(dtype=float)
    dbh = trees["dbh_cm"].to_numpy(dtype=float)
    if design.kind == "angle_count":
        with np.errstate(divide="ignore", invalid="ignore"):
            section_m2 = np.pi * (dbh / (2 * _CM_PER_M)) ** 2
            factor = np.where(dbh > 0, design.basal_area_factor / section_m2, 0.0)
        return np.where(inside, factor * weight * per_visit[at], np.nan)
    share = visits["share_inside"].to_numpy(dtype=float)
    per_visit = per_visit / np.where(share > 0, share, np.nan)  # a check has set such visits aside
    if design.on_slope:
        per_visit = per_visit / np.cos(np.radians(visits["slope_deg"].to_numpy(dtype=float)))
    if design.kind == "census":
        area = visits["plot_area_ha"].to_numpy(dtype=float)
        if design.area_ha:
            area = np.where(np.isfinite(area), area, design.area_ha[0])
        return np.where(inside, weight * (per_visit / area)[at], np.nan)
    factor = weight * per_visit[at]
    if len(design.area_ha) == 1:
        factor /= design.area_ha[0]
    else:
        # Position -1, below the smallest limit, takes the last entry: none.
        per_ring = np.append(1.0 / np.asarray(design.area_ha), np.nan)
        factor *= per_ring[np.searchsorted(np.asarray(design.dbh_min_cm), dbh, side="right") - 1]
    factor[~inside] = np.nan
    return factor


def plot_sums(trees: pd.DataFrame, index: np.ndarray, count: int, *, conifer: np.ndarray) -> PlotSums:
    """Sum the trees of a batch over visits.

    Parameters
    ----------
    trees : DataFrame
        Trees with biomass_kg, carbon_kg, expansion and used; root_kg and dead_root_carbon_kg where roots are per tree.
    index : ndarray of int
        Visit of each tree.
    count : int
        Number of visits.
    conifer : ndarray of bool
        Per tree.
    """
    counts = trees["used"].to_numpy() & (index >= 0)
    live = counts & has_status(trees["status"], "live")
    dead = counts & has_status(trees["status"], "dead")
    per_ha = trees["expansion"].to_numpy() / KG_PER_T
    at = np.where(counts, index, 0)
    mass = np.multiply(trees["biomass_kg"].to_numpy(), per_ha, out=np.zeros(len(trees)), where=live)
    carbon = trees["carbon_kg"].to_numpy() * per_ha

    def total(values: np.ndarray, where: np.ndarray) -> np.ndarray:
        # Mostly a small share of the trees: gathering them first is cheaper than summing zeros.
        rows = np.flatnonzero(where)
        return np.bincount(at[rows], weights=values[rows], minlength=count)

    def rooted(name: str, where: np.ndarray) -> np.ndarray:
        return total(trees[name].to_numpy() * per_ha, where) if name in trees else np.zeros(count)

    return PlotSums(
        biomass=np.bincount(at, weights=mass, minlength=count),
        carbon=np.bincount(at, weights=_where(carbon, live), minlength=count),
        conifer=total(mass, live & conifer),
        roots=rooted("root_kg", live),
        dead_carbon=total(carbon, dead),
        dead_root_carbon=rooted("dead_root_carbon_kg", dead),
        trees=np.bincount(at, weights=live | dead, minlength=count),
    )


def _where(values: np.ndarray, mask: np.ndarray) -> np.ndarray:
    """Values where the mask holds, else zero."""
    return values if mask.all() else np.where(mask, values, 0.0)


def plot_parts(
    visits: pd.DataFrame,
    plots: pd.DataFrame,
    sums: PlotSums,
    *,
    parts: list[str],
    design: PlotDesign,
    root_model: str = "",
) -> tuple[pd.DataFrame, pd.DataFrame]:
    """Carbon density of every visited plot, one column per part of a pool that trees give.

    Parameters
    ----------
    visits, plots : DataFrame
        Canonical tables.
    sums : PlotSums
        Sums over trees, in the order of ``visits``.
    parts : list of str
        Columns wanted, of ``TREE_PARTS``.
    design : PlotDesign
        Gives the planned number of subplots, for the relative area sampled.
    root_model : str
        Stand-level root model, applied to the shoot biomass per hectare of each plot; empty if roots come per tree.

    Returns
    -------
    table : DataFrame
        survey, plot, parcel, stratum, inside, date, size, those of ``DESIGN_COLUMNS`` that the plots have, the parts
        [t C/ha], and trees, biomass_t_ha.
    findings : DataFrame
        Plots whose biomass lies outside the range of the root model.

    Notes
    -----
    Roots take the carbon fraction of the plot's own above-ground biomass.
    """
    with np.errstate(invalid="ignore", divide="ignore"):
        fraction = np.where(sums.biomass > 0, sums.carbon / sums.biomass, 0.0)
        share = np.where(sums.biomass > 0, sums.conifer / sums.biomass, 0.0)
    outside = np.zeros(len(visits), dtype=bool)
    roots = sums.roots
    if root_model and "below_ground.roots" in parts:
        roots, outside = stand_roots(root_model, sums.biomass, conifer_share=share)
    values = {
        "above_ground.trees": sums.carbon,
        "below_ground.roots": np.where(sums.biomass > 0, roots * fraction, 0.0),
        "dead_wood.standing": sums.dead_carbon,
        "dead_wood.dead_roots": sums.dead_root_carbon,
    }
    # Kept as columns of text: turning them into arrays of objects and back costs more than the arithmetic.
    names = visits[["survey", "plot"]].astype("str").reset_index(drop=True)
    where = plots.set_index("plot").reindex(names["plot"]).reset_index(drop=True)
    subplots = visits["n_subplots"].to_numpy(dtype=float)
    size = visits["share_inside"].to_numpy(dtype=float) * subplots / design.subplots
    if design.kind == "census":
        area = visits["plot_area_ha"].to_numpy(dtype=float)
        known = area[np.isfinite(area)]
        size = size * np.where(np.isfinite(area), area / known.mean() if len(known) else 1.0, 1.0)
    table = pd.DataFrame(
        {
            "survey": names["survey"],
            "plot": names["plot"],
            "parcel": where["parcel"],
            "stratum": where["stratum"],
            "inside": where["inside"].to_numpy(dtype=bool),
            "date": visits["date"].to_numpy(),
            "size": size,
            **{name: where[name] for name in DESIGN_COLUMNS if name in where},
            **{part: values[part] for part in parts},
        }
    )
    table["trees"] = sums.trees
    table["biomass_t_ha"] = sums.biomass
    visited = visits["visited"].to_numpy(dtype=bool)
    return table[visited].reset_index(drop=True), _root_findings(table, visited & outside, root_model)


def _root_findings(table: pd.DataFrame, flagged: np.ndarray, root_model: str) -> pd.DataFrame:
    if not flagged.any():
        return empty_findings()
    rows = table.loc[flagged]
    return join_findings(
        [
            make_findings(
                "roots outside model range",
                rows,
                severity="warning",
                table="plots",
                column="biomass_t_ha",
                message=f"Shoot biomass per hectare lies outside the range of the root model {root_model}.",
                remedy="Choose a root model made for such stands, or state the uncertainty.",
            )
        ]
    )
