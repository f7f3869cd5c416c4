"""Follow a published figure back to the plots, trees and samples it was worked out from."""

from __future__ import annotations

from collections.abc import Iterable
from dataclasses import dataclass, field

import numpy as np
import pandas as pd

from allometry.roots import level
from landcarbon.constants import KG_PER_T
from landcarbon.errors import UserError
from landcarbon.inventory.measured import PART_TABLES
from landcarbon.inventory.models import SAMPLE_TABLES
from landcarbon.inventory.nearest import suggestion
from landcarbon.publish.results import Results, parts_of_plots, sums_of_plots

__all__ = ["Trace", "composition_of", "match_name", "trace_unit", "tree_shares"]

_MOST_NAMES = 12
#: Parts of pools that are worked out from trees.
_TREE_PARTS = {"above_ground": ("trees",), "below_ground": ("roots",), "dead_wood": ("standing", "dead_roots")}
_TREES = "trees"


@dataclass(frozen=True)
class Trace:
    """What stands behind one row of the stocks table.

    Attributes
    ----------
    row : Series
        The published row.
    plots : DataFrame
        Plots of the unit at that survey: plot, stratum, date, size, density_t_c_ha (the plot's figure), then the
        figures named in ``columns``.
    columns : dict
        Further columns of ``plots`` and their heading, e.g. ``trees_t_c_ha``, the sum of the trees listed.
    trees : DataFrame
        Tree rows that belong to the pool, largest contribution first: the columns of the published trees and pool,
        part, mass_kg (dry), mass_t_ha (of the plot) and density_t_c_ha, the row's own contribution [t C per ha of its
        plot], NaN where the pool is not worked out tree by tree.
    set_aside : DataFrame
        Findings of rows on those plots that were set aside: rows of the tables the pool rests on, and of none that
        holds a single pool, such as visits.
    notes : tuple of str
        How the figures of the plots come about where trees alone do not explain them.
    samples : dict of DataFrame
        By table, the sample rows of that survey on those plots behind the parts of the pool, used or not, plot by plot.
    one_plot : bool
        Whether one plot was asked for.
    composition : DataFrame
        How the figure of a parcel is composed, pool by pool: pool, plots, direct, weight_direct, synthetic, composite,
        adjustment, density, density_se [t C/ha]; without rows where it is not.
    """

    row: pd.Series
    plots: pd.DataFrame
    columns: dict[str, str]
    trees: pd.DataFrame
    set_aside: pd.DataFrame
    notes: tuple[str, ...] = ()
    samples: dict[str, pd.DataFrame] = field(default_factory=dict)
    one_plot: bool = False
    composition: pd.DataFrame = field(default_factory=pd.DataFrame)


def trace_unit(
    results: Results,
    *,
    parcel: str | None = None,
    stratum: str | None = None,
    survey: str | None = None,
    pool: str = "above_ground",
    plot: str | None = None,
) -> Trace:
    """Gather what one figure rests on.

    Parameters
    ----------
    results : Results
        An opened results folder.
    parcel, stratum : str, optional
        The unit; the whole inventory if neither is given.
    survey : str, optional
        Default: the last.
    pool : str
        A pool of the stocks table.
    plot : str, optional
        Only this plot of the unit.

    Raises
    ------
    UserError
        If both units are given, or there is no such row.

    Notes
    -----
    Names match without regard to case where that leaves one.
    """
    if parcel is not None and stratum is not None:
        raise UserError("a parcel and a stratum were given", remedy="Name one of them.")
    row = _published(results, parcel, stratum, survey, pool)
    by, unit, when, pool = (str(row[name]) for name in ("by", "unit", "survey", "pool"))
    here = results.plots[(results.plots["survey"].astype("str") == when) & results.plots["inside"].astype(bool)]
    if by != "inventory":
        here = here[here[by].astype("str") == unit]
    plots = sums_of_plots(here, pool).reset_index(drop=True)
    if plot is not None:
        named = match_name(plot, plots["plot"].astype("str"), f"plot of {by} {unit}, survey {when},")
        here, plots = here[here["plot"].astype("str") == named], plots[plots["plot"].astype("str") == named]
    names = plots["plot"].astype("str")
    trees = results.trees
    trees = trees[trees["used"] & (trees["survey"].astype("str") == when) & trees["plot"].astype("str").isin(names)]
    model = str(results.settings_summary.get("root_model") or "")
    shares = tree_shares(trees, pool, _counted(here), model)
    findings = results.findings
    tables = _tables(pool, here)
    foreign = {_TREES, *SAMPLE_TABLES} - set(tables)
    aside = findings[~findings["used"] & (findings["survey"] == when) & findings["plot"].isin(names)]
    aside = aside[~aside["table"].astype("str").isin(foreign)]
    table, columns = _with_figures(plots.reset_index(drop=True), here, pool, shares)
    composition = composition_of(results, row, "stocks") if plot is None else pd.DataFrame()
    return Trace(
        row,
        table,
        columns,
        shares,
        aside.reset_index(drop=True),
        (*_model_note(results, row, composition), *_notes(pool, here, model)),
        samples=_samples(results, tables, when, names),
        one_plot=plot is not None,
        composition=composition,
    )


def composition_of(results: Results, row: pd.Series, of: str) -> pd.DataFrame:
    """Find what a composite figure of a parcel is made of.

    Parameters
    ----------
    results : Results
        An opened results folder.
    row : Series
        A published row.
    of : {"stocks", "change"}
        The table it is from.
    """
    detail = results.further.get("parcel_detail")
    if detail is None or row["by"] != "parcel" or not str(row["method"]).startswith(("composite", "synthetic")):
        return pd.DataFrame()
    dates = {"stocks": ["survey"], "change": ["since", "until"]}[of]
    wanted_keys = {"of": of, "parcel": str(row["unit"]), **{name: str(row[name]) for name in dates}}
    mine = (detail[list(wanted_keys)].astype("str") == pd.Series(wanted_keys)).all(axis=1)
    pools = detail["pool"].astype("str")
    wanted = pools != "all" if row["pool"] == "all" else pools == row["pool"]
    return detail[mine & wanted].reset_index(drop=True)


def _model_note(results: Results, row: pd.Series, composition: pd.DataFrame) -> tuple[str, ...]:
    """Say where the model part of a composite figure comes from."""
    if composition.empty or results.parcels is None:
        return ()
    own = results.parcels.loc[results.parcels["parcel"].astype("str") == str(row["unit"]), "stratum"]
    name = str(own.iloc[0]) if len(own) else ""
    return (
        f"The model is the level of stratum {name} (trace it with --stratum), and of the rasters where they serve: its "
        "terms are in parcel_models.csv, the spread of the own plots and the weight in parcel_detail.csv.",
    )


def tree_shares(trees: pd.DataFrame, pool: str, counted: Iterable[str], root_model: str = "") -> pd.DataFrame:
    """Contribution of each tree row to the plot figures of a pool.

    Parameters
    ----------
    trees : DataFrame
        Published trees that are used.
    pool : str
        A pool, or ``all``: then a tree has one row for each pool it belongs to.
    counted : iterable of str
        Pools that are counted.
    root_model : str
        Root model in effect; one for stands gives trees no carbon of their own but their shoot biomass.

    Returns
    -------
    DataFrame
        As ``Trace.trees``. Roots by a tree-level ratio take the carbon fraction of the plot's live trees, as the
        plot figures do.
    """
    wanted = set(counted) if pool == "all" else {pool}
    # Roots of stands are no property of a tree: with the other pools they would only repeat the live trees.
    per_stand = bool(root_model) and level(root_model) == "stand"
    if pool == "all" and per_stand:
        wanted.discard("below_ground")
    status = trees["status"].astype("str")
    live, dead = trees[status == "live"], trees[status == "dead"]
    parts = []
    if "above_ground" in wanted:
        parts.append(_share(live, "above_ground", "trees", live["biomass_kg"], live["carbon_fraction"]))
    if "below_ground" in wanted and root_model:
        mass = live["biomass_kg"] if per_stand else live["root_kg"]
        fraction = live["carbon_fraction"] if per_stand else _plot_fraction(live)
        shares = _share(live, "below_ground", "roots", mass, fraction)
        parts.append(shares.assign(density_t_c_ha=np.nan) if per_stand else shares)
    if "dead_wood" in wanted:
        mass = dead["dead_wood_kg"] if "dead_wood_kg" in dead else dead["biomass_kg"]
        parts.append(_share(dead, "dead_wood", "standing", mass, dead["carbon_fraction"]))
        if "dead_root_carbon_kg" in dead:
            mass = dead["dead_root_carbon_kg"] / dead["carbon_fraction"]
            parts.append(_share(dead, "dead_wood", "dead_roots", mass, dead["carbon_fraction"]))
    if not parts:
        parts = [_share(live.iloc[:0], pool, "", live["biomass_kg"].iloc[:0], live["carbon_fraction"].iloc[:0])]
    table = pd.concat(parts, ignore_index=True)
    largest = np.argsort(-table["density_t_c_ha"].fillna(table["mass_t_ha"]).to_numpy(), kind="stable")
    return table.iloc[largest].reset_index(drop=True)


def _share(rows: pd.DataFrame, pool: str, part: str, mass: pd.Series, fraction: pd.Series) -> pd.DataFrame:
    mass_t_ha = mass * rows["expansion"] / KG_PER_T
    return rows.assign(
        pool=pool,
        part=part,
        mass_kg=mass,
        carbon_fraction=fraction,
        mass_t_ha=mass_t_ha,
        density_t_c_ha=mass_t_ha * fraction,
    )


def _plot_fraction(live: pd.DataFrame) -> pd.Series:
    """Carbon fraction of the live trees of a plot together."""
    mass = live["biomass_kg"] * live["expansion"]
    plot = live["plot"].astype("str")
    return (mass * live["carbon_fraction"]).groupby(plot).transform("sum") / mass.groupby(plot).transform("sum")


def _tables(pool: str, here: pd.DataFrame) -> list[str]:
    """Tables of rows that the parts of a pool rest on: trees, then samples in canonical order."""
    found: set[str] = set()
    for name in _counted(here) if pool == "all" else [pool]:
        parts = set(parts_of_plots(here, name)["part"].astype("str"))
        own = _TREE_PARTS.get(name, ())
        if own and (not parts or parts & set(own)):
            found.add(_TREES)
        found.update(table for part in parts for table in PART_TABLES.get(name, {}).get(part, ()))
    if "pieces" in found:
        found.add("lines")
    return [table for table in (_TREES, *SAMPLE_TABLES) if table in found]


def _samples(results: Results, tables: list[str], when: str, names: pd.Series) -> dict[str, pd.DataFrame]:
    """Sample rows of the plots, in the order of the plots and then of the file."""
    place = {name: number for number, name in enumerate(names)}
    found = {}
    for table in tables:
        rows = results.samples.get(table)
        if rows is None:
            continue
        here = rows["plot"].astype("str").map(place).astype("float64")
        keep = here.notna() & rows["survey"].astype("str").eq(when)
        order = here[keep].sort_values(kind="stable").index
        if len(order):
            found[table] = rows.loc[order].reset_index(drop=True)
    return found


def _counted(plots: pd.DataFrame) -> list[str]:
    return [name for name in plots["pool"].astype("str").drop_duplicates() if name != "all"]


def _with_figures(
    plots: pd.DataFrame, here: pd.DataFrame, pool: str, shares: pd.DataFrame
) -> tuple[pd.DataFrame, dict[str, str]]:
    """Add what the figure of each plot is made of: pools, parts, trees, or the shoot biomass that roots rest on."""
    names = plots["plot"].astype("str")
    columns: dict[str, str] = {}
    figures: dict[str, pd.Series] = {}

    def add(column: str, heading: str, values: pd.Series) -> None:
        figures[column] = names.map(values)
        columns[column] = heading

    if pool == "all":
        for name in _counted(here):
            rows = sums_of_plots(here, name)
            add(name, name.replace("_", " "), rows.set_index(rows["plot"].astype("str"))["density_t_c_ha"])
    else:
        parts = parts_of_plots(here, pool)
        for part, rows in parts.groupby(parts["part"].astype("str"), sort=False):
            add(f"{pool}.{part}", str(part), rows.set_index(rows["plot"].astype("str"))["density_t_c_ha"])
    if "adjusted_t_c_ha" in plots and (plots["adjusted_t_c_ha"] - plots["density_t_c_ha"]).abs().gt(0).any():
        columns["adjusted_t_c_ha"] = "by raster"
    by_plot = shares.groupby(shares["plot"].astype("str"))
    if len(shares) and shares["density_t_c_ha"].isna().all():
        shoot = by_plot["mass_t_ha"].sum()
        carbon = (shares["mass_t_ha"] * shares["carbon_fraction"]).groupby(shares["plot"].astype("str")).sum()
        add("shoot_t_ha", "shoot t/ha", shoot)
        add("carbon_fraction", "C fraction", carbon / shoot)
    elif len(shares):
        add("tree_rows", "tree rows", by_plot.size())
        add("trees_t_c_ha", "from trees", by_plot["density_t_c_ha"].sum())
    for column in {"shoot_t_ha", "tree_rows", "trees_t_c_ha"} & set(figures):
        figures[column] = figures[column].fillna(0)  # a plot visited without such a tree
    return plots.assign(**figures), columns


def _notes(pool: str, here: pd.DataFrame, model: str) -> tuple[str, ...]:
    wanted = _counted(here) if pool == "all" else [pool]
    notes = []
    if "below_ground" in wanted and model:
        if level(model) == "stand":
            notes.append(
                "Below-ground biomass is not a sum over trees: it is worked out per plot from the shoot biomass per "
                f"hectare (live trees, dry) with the stand-level root model {model}, then times the carbon fraction of "
                "the plot's live trees."
            )
        else:
            notes.append(
                f"Below-ground biomass comes tree by tree from the root ratio {model}, times the carbon fraction of "
                "the plot's live trees."
            )
    others = [text for text in (_without_trees(name, here) for name in wanted) if text]
    if others:
        notes.append(f"Not from trees but from samples or a default factor, plot by plot: {'; '.join(others)}.")
    notes += [text for name in wanted for text in _methods(name, here)]
    if sums_of_plots(here, pool)["density_t_c_ha"].isna().any():
        notes.append(
            "A plot without a figure was not measured for every part of it; each part is estimated from the plots it "
            "was measured on, and the parts are added."
        )
    return tuple(notes)


def _without_trees(pool: str, here: pd.DataFrame) -> str:
    """Name what of a pool does not come from trees; empty if all does."""
    parts = parts_of_plots(here, pool)["part"].astype("str").unique()
    others = [part for part in parts if part not in _TREE_PARTS.get(pool, ())]
    if pool not in _TREE_PARTS:
        return pool
    return f"{pool} ({', '.join(others)})" if others else ""


def _methods(pool: str, here: pd.DataFrame) -> list[str]:
    """Say how the parts that do not come from trees were worked out."""
    parts = parts_of_plots(here, pool)
    if "method" not in parts:
        return []
    told = parts[["part", "method", "known"]].astype("object")
    told = told[told["method"].notna() & ~told["part"].isin(_TREE_PARTS.get(pool, ()))].drop_duplicates()
    return [
        f"{pool} ({row.part}): {row.method}{'; a factor from memory' if row.known == 'memory' else ''}."
        for row in told.itertuples(index=False)
    ]


def _published(results: Results, parcel: str | None, stratum: str | None, survey: str | None, pool: str) -> pd.Series:
    rows = results.stocks
    by, given = ("parcel", parcel) if parcel is not None else ("stratum", stratum)
    if given is None:
        by, unit = "inventory", results.name
    else:
        unit = match_name(given, rows.loc[rows["by"] == by, "unit"], by)
    surveys = [str(name) for name in results.surveys["survey"]]
    when = surveys[-1] if survey is None else match_name(str(survey), surveys, "survey")
    named = match_name(pool.replace("-", "_"), rows["pool"].astype("str"), "pool")
    found = rows[(rows["by"] == by) & (rows["unit"] == unit) & (rows["survey"] == when) & (rows["pool"] == named)]
    if found.empty:
        raise UserError(
            f"there is no figure for {by} {unit!r}, survey {when!r}, pool {named!r}",
            remedy="See stocks.csv and findings.csv for what could be worked out.",
        )
    return found.iloc[0]


def match_name(given: str, known: Iterable[str], what: str) -> str:
    """Return the name meant: as written, else the only one that differs in case or outer blanks alone."""
    names = list(dict.fromkeys(str(name) for name in known))
    if given in names:
        return given
    alike = [name for name in names if name.strip().casefold() == given.strip().casefold()]
    if len(alike) == 1:
        return alike[0]
    if not names:
        raise UserError(f"there is no {what} in these results", remedy="Leave it out to see the whole inventory.")
    shown = ", ".join(names[:_MOST_NAMES]) + (f", … ({len(names)})" if len(names) > _MOST_NAMES else "")
    hint = suggestion(given, names)
    raise UserError(f"there is no {what} {given!r}", remedy=f"{hint} There are: {shown}.".strip())
