"""Put the outcome of one run together, ready to be published or looked at."""

from __future__ import annotations

from collections.abc import Callable
from typing import TYPE_CHECKING, Any

import pandas as pd

from landcarbon.check.run import reconcile
from landcarbon.findings import join_findings
from landcarbon.marks import output_marks
from landcarbon.pipeline import (
    PlotStage,
    carbon_domain,
    counted_pools,
    estimate,
    measure_trees,
    read_and_check,
    root_model,
)
from landcarbon.publish.results import Results

if TYPE_CHECKING:
    from landcarbon.inventory import Settings

__all__ = ["assemble", "long_plots", "run_stage"]

STANDING_DEAD_NOTE = (
    "Dead wood holds standing dead trees only, at the dry mass of a live tree of their diameter: without deductions "
    "for decay or lost tops it is an upper figure."
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
    stocks, change, findings = estimate(stage, settings)
    inputs = stage.inputs
    return Results(
        settings_summary=_summary(settings),
        stocks=stocks,
        change=change,
        findings=join_findings([inputs.findings, findings]),
        trees=inputs.trees,
        plots=long_plots(stage.plot_pools, counted_pools(settings)),
        parcels=inputs.parcels,
        plot_points=inputs.plots[["plot", "parcel", "stratum", "lon", "lat", "inside"]],
        surveys=inputs.surveys,
        reconciliation=reconcile(inputs),
        run={"inputs": inputs.files.to_dict(orient="records"), "equations": _equations_used(stage)},
        crs=inputs.crs,
        area_method=inputs.area_method,
        marks=output_marks(stage.plot_pools, _pool_ways(settings), _notes(settings)),
    )


def long_plots(plot_pools: pd.DataFrame, pools: list[str]) -> pd.DataFrame:
    """One row per survey, plot and pool, from the wide table of plots."""
    keys = [name for name in plot_pools.columns if name not in [*pools, "all"]]
    order = [*pools, "all"]
    table = plot_pools.melt(id_vars=keys, value_vars=order, var_name="pool", value_name="density_t_c_ha")
    first = ["survey", "plot", "pool", "density_t_c_ha"]
    return table[first + [name for name in keys if name not in first]]


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
        ways[name] = f"not counted: {pool.reason}" if pool.how == "not counted" else pool.how
    return ways


def _notes(settings: Settings) -> list[str]:
    return [STANDING_DEAD_NOTE] if "dead_wood" in counted_pools(settings) else []


def _equations_used(stage: PlotStage) -> list[dict[str, Any]]:
    trees = stage.inputs.trees
    used = trees.loc[trees["used"], "species"].astype("str")
    counts = used.value_counts()
    table = stage.plan.assignments
    table = table[table["species"].isin(counts.index)]
    wanted = ["species", "accepted_name", "equation_id", "rung", "known", "reason", "wood_density_g_cm3"]
    rows = table[wanted].assign(trees=table["species"].map(counts).astype(int)).to_dict(orient="records")
    return [{str(name): value for name, value in row.items()} for row in rows]
