"""The pools measured beside the trees: each module in turn, and its rows joined to the table of plots."""

from __future__ import annotations

from dataclasses import dataclass, replace
from typing import TYPE_CHECKING

import numpy as np
import pandas as pd

from allometry.assign import assign
from allometry.catalogue import Catalogue
from landcarbon.constants import M2_PER_HECTARE
from landcarbon.factors.carbon import carbon_fraction
from landcarbon.findings import join_findings, make_findings
from landcarbon.inventory.measured import measured_parts
from landcarbon.plots import DESIGN_COLUMNS, PlotDesign
from landcarbon.pool_options import (
    down_wood_options,
    litter_options,
    sapling_options,
    soil_options,
    stump_options,
    vegetation_options,
)
from landcarbon.pools.defaults import default_rows
from landcarbon.pools.down_wood import down_wood, logs
from landcarbon.pools.frames import ground_vegetation, litter
from landcarbon.pools.parts import PARTS, RowShares, column_name, empty_parts, wide_parts
from landcarbon.pools.saplings import saplings
from landcarbon.pools.soil import soil
from landcarbon.pools.stumps import stumps

if TYPE_CHECKING:
    from landcarbon.inputs import Inputs
    from landcarbon.inventory import Settings

__all__ = ["join_parts", "keep_declared", "pool_sums", "sample_parts"]

_LINE_PARTS = ("down_coarse", "down_fine")

# Parts that rows of a table can end in; the first stands for them all where no row is left.
_FEEDS = {
    "lines": ("dead_wood", _LINE_PARTS),
    "pieces": ("dead_wood", _LINE_PARTS),
    "logs": ("dead_wood", ("down_coarse",)),
    "stumps": ("dead_wood", ("stumps",)),
    "litter": ("litter", ("litter", "duff")),
    "ground_vegetation": ("above_ground", ("ground_vegetation",)),
    "saplings": ("above_ground", ("saplings",)),
    "soil": ("soil", ("soil",)),
}


@dataclass(frozen=True)
class _Place:
    """Climate domain and plot design, and where the shares of the rows go."""

    domain: str
    design: PlotDesign
    shares: RowShares


def sample_parts(
    inputs: Inputs,
    settings: Settings,
    assignments: pd.DataFrame,
    catalogue: Catalogue,
    *,
    domain: str,
    design: PlotDesign,
    shares: RowShares | None = None,
) -> tuple[pd.DataFrame, pd.DataFrame]:
    """Work out every part that is measured on samples, or given by a default factor.

    Parameters
    ----------
    inputs : Inputs
        Checked tables.
    settings : Settings
        The project file.
    assignments : DataFrame
        Equation, wood density and group of every species code.
    catalogue : Catalogue
        The published equations, for saplings.
    domain : str
        Climate domain of the carbon fractions.
    design : PlotDesign
        Gives the area for logs and stumps where the file states none.
    shares : RowShares, optional
        Takes what each row brings into the figure of its plot.

    Returns
    -------
    parts, findings : DataFrame
    """
    shares = RowShares() if shares is None else shares
    place = _Place(domain, design, shares)
    inputs, outside = _inside(inputs)
    wanted = measured_parts(settings)
    dead = wanted.get("dead_wood", ())
    on_lines, line_findings = _wood_on_lines(inputs, settings, assignments, dead, place)
    coarse = empty_parts() if on_lines is None else on_lines[on_lines["part"] == "down_coarse"]
    steps = [
        (on_lines, line_findings),
        _wood_on_area(inputs, settings, assignments, dead, coarse[["survey", "plot"]], place),
        _frames(inputs, settings, wanted, shares),
        _saplings(inputs, settings, assignments, catalogue, wanted, place),
        _soil(inputs, settings, wanted, shares),
        (_defaults(inputs, settings), None),
        (None, outside),
    ]
    parts = [table for table, _ in steps if table is not None and len(table)]
    findings = [found for _, found in steps if found is not None]
    table = pd.concat(parts, ignore_index=True) if parts else empty_parts()
    named = pd.Series(list(zip(table["pool"], table["part"], strict=True)), dtype="object")
    counted = {(pool, part) for pool, chosen in wanted.items() for part in (*chosen, "default")}
    counted |= {(pool, "default") for pool in PARTS}
    return table[named.isin(counted).to_numpy()].reset_index(drop=True), join_findings(findings)


def join_parts(trees: pd.DataFrame, parts: pd.DataFrame, inputs: Inputs) -> pd.DataFrame:
    """Put the parts beside the tree parts, one row per plot and survey.

    Parameters
    ----------
    trees : DataFrame
        Table of plots from the trees, with the columns of their parts.
    parts : DataFrame
        From :func:`sample_parts`.
    inputs : Inputs
        For the place of plots on which no trees were measured, only samples taken.

    Returns
    -------
    DataFrame
        The columns of ``trees`` and one per further part; NaN where a part was not measured.
    """
    wide = wide_parts(parts)
    table = trees.merge(wide, on=["survey", "plot"], how="outer", indicator=True)
    lone = (table.pop("_merge") == "right_only").to_numpy()
    if lone.any():
        place = inputs.plots.set_index("plot").reindex(table.loc[lone, "plot"])
        for name in ("parcel", "stratum", "inside", *(name for name in DESIGN_COLUMNS if name in table)):
            table.loc[lone, name] = place[name].to_numpy()
        table.loc[lone, "size"] = 1.0
        table["inside"] = table["inside"].astype(bool)
        dates = inputs.visits.assign(
            survey=inputs.visits["survey"].astype("str"), plot=inputs.visits["plot"].astype("str")
        )
        known = dates.set_index(["survey", "plot"])["date"]
        keys = pd.MultiIndex.from_frame(table.loc[lone, ["survey", "plot"]])
        table.loc[lone, "date"] = known.reindex(keys).to_numpy()
        for name in ("trees", "biomass_t_ha"):
            table.loc[lone, name] = np.nan
    order = {survey: at for at, survey in enumerate(inputs.surveys["survey"].astype("str"))}
    place_of = {plot: at for at, plot in enumerate(inputs.plots["plot"].astype("str"))}
    rank = table["survey"].map(order).to_numpy() * len(place_of) + table["plot"].map(place_of).to_numpy()
    return table.iloc[np.argsort(rank, kind="stable")].reset_index(drop=True)


def pool_sums(table: pd.DataFrame) -> dict[str, list[str]]:
    """Columns that make up each pool, and ``all``, in canonical order.

    A pool of which nothing is left keeps its columns, so that it is stated as not estimable and not passed over.
    """
    sums: dict[str, list[str]] = {}
    for pool, names in PARTS.items():
        columns = [name for name in (column_name(pool, part) for part in names) if name in table]
        present = [column for column in columns if table[column].notna().any()]
        if columns:
            sums[pool] = present or columns
    return {**sums, "all": [column for columns in sums.values() for column in columns]}


def keep_declared(table: pd.DataFrame, settings: Settings, inputs: Inputs) -> tuple[pd.DataFrame, pd.DataFrame]:
    """Keep a column for every part that is declared and has rows, though all of them were set aside.

    Returns
    -------
    table : DataFrame
        With a column of NaN for such a part.
    findings : DataFrame
        One error per table and survey of which no row is left.
    """
    wanted = measured_parts(settings)
    lost, findings = {}, []
    for name, rows in inputs.samples.items():
        pool, parts = _FEEDS[name]
        declared = [part for part in parts if part in wanted.get(pool, ())]
        if not declared or rows.empty:
            continue
        columns = [column_name(pool, part) for part in declared]
        known = [column for column in columns if column in table]
        for survey in rows["survey"].astype("str").unique():  # over surveys
            at = table[(table["survey"] == survey) & table["inside"]]
            if not any(at[column].notna().any() for column in known):
                findings.append(_nothing_left(name, pool, survey, int((rows["survey"].astype("str") == survey).sum())))
        if not known:
            lost[columns[0]] = np.nan
    return table.assign(**lost), join_findings(findings)


def _nothing_left(name: str, pool: str, survey: str, count: int) -> pd.DataFrame:
    return make_findings(
        "no usable rows",
        severity="error",
        table=name,
        survey=survey,
        value=str(count),
        message=f"None of the {count} rows of {name} gives a figure at survey {survey}: {pool} lacks them there.",
        remedy="See the other findings of this table for why; a wrong unit of a column is the usual cause.",
    )


def _inside(inputs: Inputs) -> tuple[Inputs, pd.DataFrame]:
    """Set aside samples of plots outside all parcels, as is done with their trees."""
    lone = set(inputs.plots.loc[~inputs.plots["inside"].to_numpy(dtype=bool), "plot"].astype("str"))
    out_then = _out_at_survey(inputs)
    if not lone and not out_then:
        return inputs, join_findings([])
    unplaced = inputs.plots[["x", "y"]].isna().any(axis=1)
    lost = set(inputs.plots.loc[unplaced, "plot"].astype("str"))
    samples, findings = {}, []
    for name, rows in inputs.samples.items():
        away = rows["plot"].astype("str").isin(lone)
        if out_then:
            away |= pd.MultiIndex.from_frame(rows[["survey", "plot"]].astype("str")).isin(out_then)
        away &= rows["used"]
        nowhere = rows["plot"].astype("str").isin(lost)
        samples[name] = rows[~away].reset_index(drop=True)
        findings += [_outside(rows[away & nowhere], name, nowhere=True), _outside(rows[away & ~nowhere], name)]
    return replace(inputs, samples=samples), join_findings(findings)


def _out_at_survey(inputs: Inputs) -> list[tuple[str, str]]:
    """Surveys and plots that were out of the inventory then, where boundaries change."""
    if inputs.parcel_of is None:
        return []
    out = inputs.parcel_of[~inputs.parcel_of["inside"].to_numpy(dtype=bool)]
    return list(zip(out["survey"].astype("str"), out["plot"].astype("str"), strict=True))


def _outside(rows: pd.DataFrame, table: str, *, nowhere: bool = False) -> pd.DataFrame:
    if nowhere:
        message = "The plot has no usable coordinates and names no parcel, so it lies in no known parcel; the row is "
        remedy = "Enter the coordinates of the plot, or name its parcel in the plots table."
    else:
        message = "The plot lies outside every parcel, so it says nothing about the land of the inventory; the row is "
        remedy = "Nothing if this is so; otherwise correct the coordinates of the plot or name its parcel."
    return make_findings(
        "plot without place" if nowhere else "plot outside",
        rows,
        severity="error" if nowhere else "note",
        table=table,
        column="plot",
        used=False,
        message=message + "not counted.",
        remedy=remedy,
    )


def _species(assignments: pd.DataFrame) -> pd.DataFrame:
    wanted = ["species", "accepted_name", "conifer", "wood_density_g_cm3", "wood_density_known"]
    table = assignments[wanted].rename(columns={"accepted_name": "scientific_name"})
    return table[table["species"] != ""].reset_index(drop=True)


def _area_m2(design: PlotDesign) -> float:
    return max(design.area_ha) * M2_PER_HECTARE if design.area_ha else float("nan")


def _visited(inputs: Inputs, table: str, area_m2: float) -> pd.DataFrame:
    """Return the plots visited at the surveys that have rows in a sample table, with the area searched [m2]."""
    surveys = set(inputs.samples[table]["survey"].astype("str"))
    visits = inputs.visits[inputs.visits["visited"].to_numpy(dtype=bool)]
    keys = visits[["survey", "plot"]].astype("str")
    keys["area_m2"] = area_m2 * visits["share_inside"].to_numpy(dtype=float)
    return keys[keys["survey"].isin(surveys)].reset_index(drop=True)


def _wood_on_lines(
    inputs: Inputs,
    settings: Settings,
    assignments: pd.DataFrame,
    wanted: tuple[str, ...],
    place: _Place,
) -> tuple[pd.DataFrame | None, pd.DataFrame | None]:
    if not set(wanted) & set(_LINE_PARTS) or "lines" not in inputs.samples:
        return None, None
    options = down_wood_options(settings, area_m2=_area_m2(place.design), domain=place.domain)
    listed, pieces, lines = _species(assignments), inputs.samples["pieces"], inputs.samples["lines"]
    return down_wood(pieces, lines, options, listed, shares=place.shares)


def _wood_on_area(
    inputs: Inputs,
    settings: Settings,
    assignments: pd.DataFrame,
    wanted: tuple[str, ...],
    on_lines: pd.DataFrame,
    place: _Place,
) -> tuple[pd.DataFrame | None, pd.DataFrame | None]:
    parts, findings = [], []
    area, domain, listed = _area_m2(place.design), place.domain, _species(assignments)
    if "down_coarse" in wanted and "logs" in inputs.samples:
        options = down_wood_options(settings, area_m2=area, domain=domain)
        visited = _visited(inputs, "logs", options.log_area_m2)
        rows = inputs.samples["logs"]
        table, found = logs(rows, visited, options, listed, on_lines=on_lines, shares=place.shares)
        parts.append(table)
        findings.append(found)
    if "stumps" in wanted and "stumps" in inputs.samples:
        stump = stump_options(settings, area_m2=area, domain=domain)
        visited = _visited(inputs, "stumps", stump.log_area_m2)
        table, found = stumps(inputs.samples["stumps"], visited, stump, listed, shares=place.shares)
        parts.append(table)
        findings.append(found)
    return (pd.concat(parts, ignore_index=True) if parts else None), join_findings(findings)


def _frames(
    inputs: Inputs, settings: Settings, wanted: dict[str, tuple[str, ...]], shares: RowShares
) -> tuple[pd.DataFrame | None, pd.DataFrame | None]:
    parts, findings = [], []
    if wanted.get("litter") and "litter" in inputs.samples:
        table, found = litter(inputs.samples["litter"], litter_options(settings), shares=shares)
        parts.append(table)
        findings.append(found)
    if "ground_vegetation" in wanted.get("above_ground", ()) and "ground_vegetation" in inputs.samples:
        rows = inputs.samples["ground_vegetation"]
        table, found = ground_vegetation(rows, vegetation_options(settings), shares=shares)
        parts.append(table)
        findings.append(found)
    return (pd.concat(parts, ignore_index=True) if parts else None), join_findings(findings)


def _saplings(
    inputs: Inputs,
    settings: Settings,
    assignments: pd.DataFrame,
    catalogue: Catalogue,
    wanted: dict[str, tuple[str, ...]],
    place: _Place,
) -> tuple[pd.DataFrame | None, pd.DataFrame | None]:
    if "saplings" not in wanted.get("above_ground", ()) or "saplings" not in inputs.samples:
        return None, None
    rows = inputs.samples["saplings"]
    codes = pd.Index(rows["species"].astype("str").unique())
    listed = assignments.set_index("species").reindex(codes)
    lacking = set(rows.loc[rows["height_m"].isna(), "species"].astype("str"))
    names = listed["scientific_name"].fillna(pd.Series(codes, index=codes)).to_numpy()
    table = pd.DataFrame({"species": codes, "scientific_name": names})
    options = settings.equations
    chosen = assign(
        table.assign(has_height=[code not in lacking for code in codes]),
        region=options.region,
        country=options.country or None,
        sources=tuple(options.sources),
        explicit=dict(options.species),
        use_height="auto" if options.use_height is True else options.use_height,
        overrides=dict(options.wood_density),
        has_stress=options.stress is not None,
    )
    position = pd.Index(chosen["species"]).get_indexer(rows["species"].astype("str"))
    code = pd.Index(catalogue.table["equation_id"]).get_indexer(chosen["equation_id"])[position]
    density = chosen["wood_density_g_cm3"].to_numpy(dtype=float)[position]
    stress = None if options.stress is None else np.full(1, options.stress)
    mass, beyond = catalogue.evaluate_codes(
        code, rows["dbh_cm"].to_numpy(dtype=float), rows["height_m"].to_numpy(dtype=float), density, stress
    )
    group = np.where(chosen["conifer"].to_numpy(dtype=bool), "conifer", "broadleaf").astype(object)
    fraction = carbon_fraction(group, domain=place.domain)[position]
    marks = [str(mark) for mark in chosen["known"]]
    known = next((mark for mark in ("memory", "secondary") if mark in marks), "read")
    parts, findings = saplings(rows, mass, fraction, sapling_options(settings, known=known), shares=place.shares)
    return parts, join_findings([findings, _beyond(rows[beyond], chosen["equation_id"].to_numpy()[position[beyond]])])


def _beyond(rows: pd.DataFrame, equations: np.ndarray) -> pd.DataFrame:
    """Point at saplings below or above the diameters of their equation, one finding per equation."""
    counts = pd.Series(equations).value_counts(sort=False)
    return join_findings(
        make_findings(
            "saplings beyond diameter range",
            severity="warning",
            table="saplings",
            column="dbh_cm",
            value=str(name),
            message=f"{count} rows of saplings lie outside the diameter range of the equation {name}.",
            remedy="Choose an equation made for small stems in [equations.species], if there is one.",
        )
        for name, count in counts.items()
    )


def _soil(
    inputs: Inputs, settings: Settings, wanted: dict[str, tuple[str, ...]], shares: RowShares
) -> tuple[pd.DataFrame | None, pd.DataFrame | None]:
    if not wanted.get("soil") or "soil" not in inputs.samples:
        return None, None
    return soil(inputs.samples["soil"], soil_options(settings), shares=shares)


def _defaults(inputs: Inputs, settings: Settings) -> pd.DataFrame | None:
    tables = []
    visits = inputs.visits.astype({"survey": "str", "plot": "str"})
    for name in type(settings.pools).model_fields:
        pool = getattr(settings.pools, name)
        if pool.how == "default":
            tables.append(default_rows(visits, name, pool.value_t_c_ha, pool.source, part="default"))
    return pd.concat(tables, ignore_index=True) if tables else None
