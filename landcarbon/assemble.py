"""Put the outcome of one run together, ready to be published or looked at."""

from __future__ import annotations

from collections.abc import Callable, Sequence
from dataclasses import replace
from typing import TYPE_CHECKING, Any

import pandas as pd

from allometry.roots import level, root_models
from landcarbon.check.run import reconcile
from landcarbon.errors import UserError
from landcarbon.findings import join_findings
from landcarbon.marks import area_marks, part_marks, pool_marks, row_marks, tree_marks
from landcarbon.pipeline import (
    PlotStage,
    carbon_domain,
    estimation_plan,
    measure_trees,
    read_and_check,
    root_model,
)
from landcarbon.pools.parts import RowShares
from landcarbon.publish.results import RasterRequest, Results
from landcarbon.raster.coefficients import INTERCEPT
from landcarbon.read.raster_files import RasterFile
from landcarbon.reckon import reckon
from landcarbon.reckon_notes import reckoning_marks
from landcarbon.reckon_plan import Plan
from landcarbon.statements import measured_columns

if TYPE_CHECKING:
    from landcarbon.inventory import Settings

__all__ = ["assemble", "long_plots", "refuse_nothing", "run_stage"]

STANDING_DEAD_NOTE = (
    "Standing dead trees stand at the dry mass of a live tree of their size: without deductions for decay or lost tops "
    "that is an upper figure."
)


def run_stage(settings: Settings, *, progress: Callable[[str], None] = lambda _: None) -> PlotStage:
    """Read, check, and take the trees to plot densities.

    Parameters
    ----------
    settings : Settings
        The project file.
    progress : callable
        Told, in a few words, what is being done.

    Raises
    ------
    UserError
        For whatever the user can mend.
    """
    progress("reading and checking the files")
    inputs = read_and_check(settings)
    progress("working out trees and plots")
    return measure_trees(inputs, settings)


def assemble(stage: PlotStage, settings: Settings) -> Results:
    """Estimate from the plots and gather everything that is published."""
    plan = estimation_plan(stage, settings)
    figures = reckon(plan)
    stocks = figures.stocks
    inputs = stage.inputs
    all_findings = join_findings([inputs.findings, figures.findings])
    counts = reconcile(inputs)
    return Results(
        settings_summary=_summary(settings),
        stocks=stocks,
        change=figures.change,
        findings=all_findings,
        trees=inputs.trees,
        plots=long_plots(
            replace(stage, plot_parts=plan.plot_parts), settings, None if plan.assisted is None else plan.used_parts
        ),
        parcels=inputs.parcels,
        plot_points=inputs.plots[["plot", "parcel", "stratum", "lon", "lat", "inside"]],
        surveys=inputs.surveys,
        reconciliation=counts,
        run={"inputs": _files_read(stage, plan), "equations": _equations_used(stage)},
        crs=inputs.crs,
        area_method=inputs.area_method,
        further=figures.further,
        rasters=raster_request(plan),
        samples=_samples(inputs.samples, all_findings, stage.shares),
        marks=[
            *_marks(stage, settings, stocks, all_findings, counts),
            *reckoning_marks(plan.dates, moving=plan.moving, composite=plan.composite),
        ],
    )


def raster_request(plan: Plan) -> RasterRequest | None:
    """Say what the rasters of the results are made from; None where none are wanted."""
    cell_m = plan.settings.estimation.map_cell_m
    parcels, auxiliary, assisted = plan.inputs.parcels, plan.auxiliary, plan.assisted
    if parcels is None or (cell_m is None and auxiliary is None):
        return None
    if auxiliary is None or assisted is None:
        return _checked(RasterRequest(plan.settings.inventory.name, parcels, plan.place, cell_m=cell_m))
    lines = assisted.models[assisted.models["of"] == "all"]
    coefficients = _mapped(lines, auxiliary.files).rename(columns={"coefficient": "value"})
    return _checked(
        RasterRequest(plan.settings.inventory.name, parcels, plan.place, auxiliary.files, coefficients, cell_m=cell_m)
    )


def _checked(request: RasterRequest) -> RasterRequest:
    """Refuse cells that are too small before the long work begins."""
    from landcarbon.publish.rasters import raster_grid

    raster_grid(request)
    return request


def _mapped(lines: pd.DataFrame, files: Sequence[RasterFile]) -> pd.DataFrame:
    """Put the mean effect of classes of known area into the intercept: no map says in which cells they lie."""
    mapped = {INTERCEPT, *(file.name for file in files), *(f"{file.name} {file.survey}" for file in files)}
    classes = ~lines["term"].isin(mapped)
    effect = lines["coefficient"].where(classes, 0.0) * lines["centre"].fillna(0.0)
    total = effect.groupby([lines["survey"], lines["stratum"]]).transform("sum")
    shifted = lines["coefficient"] + total.where(lines["term"] == INTERCEPT, 0.0)
    return lines.assign(coefficient=shifted).loc[~classes, ["survey", "stratum", "term", "coefficient"]]


def _files_read(stage: PlotStage, plan: Plan) -> list[dict[str, Any]]:
    """Tables and rasters with their checksums."""
    rasters = [] if plan.auxiliary is None else [plan.auxiliary.sources]
    table = pd.concat([stage.inputs.files, *rasters], ignore_index=True)
    return [{str(name): value for name, value in row.items()} for row in table.to_dict(orient="records")]


def _samples(samples: dict[str, pd.DataFrame], findings: pd.DataFrame, shares: RowShares) -> dict[str, pd.DataFrame]:
    """Sample tables with ``used`` as it ended (modules of the pools set rows aside) and what each row brings in."""
    aside = findings[~findings["used"]].dropna(subset="row_id")
    ended = {}
    for name, rows in samples.items():
        lost = rows["row_id"].isin(aside.loc[aside["table"] == name, "row_id"])
        used = rows["used"].to_numpy(dtype=bool) & ~lost.to_numpy(dtype=bool)
        ended[name] = rows.assign(used=used, density_t_c_ha=shares.of(name, rows))
    return ended


def refuse_nothing(results: Results) -> None:
    """Stop before results without any figure take the place of earlier ones.

    Raises
    ------
    UserError
        If no unit could be estimated at any survey; the worst findings are named.
    """
    if results.stocks["density_t_c_ha"].notna().any():
        return
    errors = results.findings[results.findings["severity"] == "error"]
    counts = errors["rule"].value_counts()
    worst = ", ".join(f"{rule} ({count})" for rule, count in counts.head(5).items())
    raise UserError(
        "nothing can be estimated: no stratum has two plots that count at any survey",
        where=results.settings_summary["project_file"],
        remedy=f"Findings: {worst or 'none of severity error'}. Run landcarbon check to see them all.",
    )


def long_plots(stage: PlotStage, settings: Settings, adjusted: pd.DataFrame | None = None) -> pd.DataFrame:
    """Give one row per survey, plot, pool and part; a pool as a whole, and ``all``, have a blank part.

    A pool stands for a plot only where all its parts were measured there that were measured at the survey at all.
    ``adjusted`` holds the values that the estimates take where rasters assist; they have a column of their own.
    """
    table, sums = stage.plot_parts, stage.sums
    columns = sums["all"]
    keys = [name for name in table.columns if name not in columns]
    there = measured_columns(table)
    asked = pd.DataFrame(
        {name: table["survey"].map({survey: name in found for survey, found in there.items()}) for name in columns}
    )
    blocks = []
    for pool, parts in sums.items():
        lacking = (table[parts].isna() & asked[parts]).any(axis=1) | ~asked[parts].any(axis=1)
        sums_of = {"density_t_c_ha": table, **({} if adjusted is None else {"adjusted_t_c_ha": adjusted})}
        totals = {name: values[parts].sum(axis=1).mask(lacking) for name, values in sums_of.items()}
        blocks.append(table[keys].assign(pool=pool, part="", **totals))
        if pool != "all":
            blocks += [
                table[keys].assign(
                    pool=pool, part=column.split(".", 1)[1], **{name: v[column] for name, v in sums_of.items()}
                )
                for column in parts
            ]
    rows = pd.concat(blocks, ignore_index=True)
    first = ["survey", "plot", "pool", "part", "density_t_c_ha", *(["adjusted_t_c_ha"] if adjusted is not None else [])]
    rows = rows[first + [name for name in keys if name not in first]]
    told = stage.sample_parts[["survey", "plot", "pool", "part", "mass_t_ha", "samples", "method", "known"]]
    rows = rows.merge(told, on=["survey", "plot", "pool", "part"], how="left")
    for column, (method, known) in _tree_methods(settings).items():
        pool, part = column.split(".")
        here = (rows["pool"] == pool) & (rows["part"] == part) & rows["density_t_c_ha"].notna()
        rows.loc[here, ["method", "known"]] = [method, known]
    return rows


def _tree_methods(settings: Settings) -> dict[str, tuple[str, str]]:
    """How the parts that trees give are obtained, and how the weakest factor of the plot step is known."""
    methods = {
        "above_ground.trees": ("equation of each tree x carbon fraction x expansion factor; see trees.parquet", "read"),
        "dead_wood.standing": ("standing dead trees, tree by tree; see trees.parquet", "read"),
        "dead_wood.dead_roots": ("roots of standing dead trees, by decay class", "read"),
    }
    model = root_model(settings)
    if model:
        words = "per plot, from its shoot biomass per hectare" if level(model) == "stand" else "tree by tree"
        methods["below_ground.roots"] = (f"root model {model}, {words}", root_known(model))
    return methods


def root_is_memory(settings: Settings) -> bool:
    """Whether roots rest on a model known only from memory."""
    model = root_model(settings)
    return bool(model) and root_known(model) == "memory"


def root_known(model: str) -> str:
    """How the coefficients of a root model are known."""
    table = root_models().set_index("model_id")
    return str(table.loc[model, "known"])


def _summary(settings: Settings) -> dict[str, Any]:
    summary: dict[str, Any] = settings.model_dump(mode="json")
    return {
        "name": settings.inventory.name,
        "confidence": settings.inventory.confidence,
        "seed": settings.inventory.seed,
        "project_file": settings.path.name,
        "root_model": root_model(settings),
        "carbon_domain": carbon_domain(settings),
        "keys": summary,
    }


def _pool_ways(settings: Settings) -> dict[str, str]:
    ways = {}
    for name in type(settings.pools).model_fields:
        pool = getattr(settings.pools, name)
        words = {
            "not counted": f"not counted: {pool.reason}",
            "default": f"default factor {pool.value_t_c_ha} t C/ha, {pool.source}",
        }
        ways[name] = words.get(pool.how, pool.how)
    return ways


def _marks(
    stage: PlotStage, settings: Settings, stocks: pd.DataFrame, findings: pd.DataFrame, counts: pd.DataFrame
) -> list[str]:
    there = measured_columns(stage.plot_parts)
    surveys = [str(name) for name in stage.inputs.surveys["survey"]]
    sums = {pool: columns for pool, columns in stage.sums.items() if pool != "all"}
    short = {}
    for pool, columns in sums.items():
        alike = len({tuple(column in there.get(name, ()) for name in surveys) for column in columns}) == 1
        short.update({column: pool if alike else column for column in columns})
    measured = {
        name: list(dict.fromkeys(short[column] for column in short if column in there.get(name, ())))
        for name in surveys
    }
    whole = stage.inputs.trees.get("dead_how")
    standing = (
        "dead_wood.standing" in stage.plot_parts and whole is not None and "whole tree" in set(whole.astype("str"))
    )
    return [
        *row_marks(findings, counts),
        *area_marks(stocks),
        *tree_marks(stage.inputs.trees, stage.plan.assignments, stage.plan.catalogue.table),
        *part_marks(stage.sample_parts, root_model(settings) if root_is_memory(settings) else ""),
        *pool_marks(_pool_ways(settings), measured),
        *([STANDING_DEAD_NOTE] if standing else []),
    ]


def _equations_used(stage: PlotStage) -> list[dict[str, Any]]:
    trees = stage.inputs.trees
    used = trees.loc[trees["used"], "species"].astype("str")
    counts = used.value_counts()
    table = stage.plan.assignments
    table = table[table["species"].isin(counts.index)]
    wanted = ["species", "accepted_name", "equation_id", "rung", "known", "reason", "wood_density_g_cm3"]
    rows = table[wanted].assign(trees=table["species"].map(counts).astype(int)).to_dict(orient="records")
    return [{str(name): value for name, value in row.items()} for row in rows]
