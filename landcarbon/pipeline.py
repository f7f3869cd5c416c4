"""The one way data flows: inputs -> checks -> trees -> plots -> estimates -> change -> results.

Every step is a function from tables to tables; this module only calls them in order.
"""

from __future__ import annotations

from dataclasses import dataclass, replace
from typing import TYPE_CHECKING, Any

import numpy as np
import pandas as pd

from allometry.assign import assign
from allometry.catalogue import load_catalogue
from allometry.heights import impute, published_height
from allometry.roots import default_model, level
from landcarbon.check.equations import memory_findings, range_findings, species_findings
from landcarbon.check.run import run_checks
from landcarbon.check.seasons import season_findings
from landcarbon.check.stand import stand_findings
from landcarbon.columns import with_columns
from landcarbon.errors import UserError
from landcarbon.estimate.common_area import place_by_survey
from landcarbon.findings import empty_findings, join_findings, make_findings
from landcarbon.inventory.measured import measured_parts, surveys_with_trees
from landcarbon.plots import TREE_PARTS, PlotDesign, expansion_factors, plot_parts, plot_sums, visit_index
from landcarbon.pool_options import standing_options
from landcarbon.pools.parts import RowShares, column_name
from landcarbon.pools.trees import (
    TreePlan,
    combine_stems,
    dead_trees,
    label_trees,
    make_tree_plan,
    tree_biomass,
    tree_findings,
)
from landcarbon.read.auxiliary import read_auxiliary, read_post_strata
from landcarbon.read.load import load_inputs
from landcarbon.reckon import Figures, reckon
from landcarbon.reckon_plan import Plan, make_plan
from landcarbon.sample_pools import join_parts, keep_declared, pool_sums, sample_parts

if TYPE_CHECKING:
    from landcarbon.inputs import Inputs
    from landcarbon.inventory import Settings

__all__ = [
    "PlotStage",
    "carbon_domain",
    "design_of",
    "estimate",
    "estimation_plan",
    "measure_trees",
    "read_and_check",
    "root_model",
    "tree_parts",
]


@dataclass(frozen=True)
class PlotStage:
    """What the tree and plot steps hand on.

    Attributes
    ----------
    inputs : Inputs
        With trees evaluated and every finding so far.
    plan : TreePlan
        Equation and factors per species code.
    plot_parts : DataFrame
        One row per plot and survey with a column per part of a pool; NaN where the part was not measured.
    sample_parts : DataFrame
        The parts that are not from trees, with mass, number of samples, method and known mark.
    shares : RowShares
        What each row of the sample tables brings into the figure of its plot.
    """

    inputs: Inputs
    plan: TreePlan
    plot_parts: pd.DataFrame
    sample_parts: pd.DataFrame
    shares: RowShares

    @property
    def sums(self) -> dict[str, list[str]]:
        """Columns that make up each pool, and ``all``."""
        return pool_sums(self.plot_parts)


def read_and_check(settings: Settings) -> Inputs:
    """Read the files of an inventory and check them."""
    return run_checks(load_inputs(settings), settings)


def design_of(settings: Settings) -> PlotDesign:
    """Turn the design keys of the project file into areas and limits."""
    given = settings.plots.design
    options: dict[str, Any] = {
        "on_slope": settings.plots.slope_correction == "design on slope",
        "subplots": settings.plots.subplots,
    }
    if given.kind == "circle":
        return PlotDesign.circles([given.radius_m], [0.0], **options)
    if given.kind == "nested":
        radii = [circle.radius_m for circle in given.circles]
        return PlotDesign.circles(radii, [circle.dbh_min_cm for circle in given.circles], **options)
    if given.kind == "rectangle":
        return PlotDesign.rectangle(given.width_m, given.length_m, **options)
    if given.kind == "angle_count":
        return PlotDesign.angle_count(given.basal_area_factor, given.unit, **options)
    if given.kind == "census":
        area = (given.area_ha,) if given.area_ha else ()
        return PlotDesign("census", area_ha=area, **options)
    return PlotDesign("weighted", **options)


def measure_trees(inputs: Inputs, settings: Settings) -> PlotStage:
    """Run the tree and plot steps.

    Raises
    ------
    UserError
        If trees lie beyond the diameter range of their equation and the policy is "stop".
    """
    catalogue = load_catalogue()
    trees = combine_stems(inputs.trees) if settings.trees.stems == "combined" else inputs.trees
    trees, height_findings = _fill_heights(trees, settings)
    assignments = _assign(trees, inputs.species, settings)
    root = root_model(settings)
    plan = make_tree_plan(
        assignments,
        catalogue,
        carbon_domain=carbon_domain(settings),
        out_of_range=settings.equations.out_of_range,
        stress=settings.equations.stress,
        tree_root_model=root if root and level(root) == "tree" else "",
    )
    trees, biomass_findings = tree_findings(label_trees(tree_biomass(trees, plan), plan), plan)
    _stop_beyond_range(trees, settings)
    wanted = tree_parts(settings)
    dead_findings = empty_findings()
    if any(part.startswith("dead_wood") for part in wanted):
        trees, dead_findings = dead_trees(trees, plan, standing_options(settings))
    design = design_of(settings)
    index = visit_index(trees, inputs.visits)
    trees = with_columns(trees, {"expansion": expansion_factors(trees, inputs.visits, index, design)})
    position = plan.positions(trees["species"])
    sums = plot_sums(trees, index, len(inputs.visits), conifer=plan.conifer[position])
    table, plot_findings = plot_parts(
        inputs.visits,
        inputs.plots,
        sums,
        parts=wanted,
        design=design,
        root_model=root if root and level(root) == "stand" else "",
    )
    shares = RowShares()
    table = _without_tally(table, settings)
    parts, part_findings = sample_parts(
        inputs, settings, assignments, catalogue, domain=carbon_domain(settings), design=design, shares=shares
    )
    findings = join_findings(
        [
            _carbon_at_stake(inputs.findings, trees),
            height_findings,
            species_findings(assignments, trees),
            memory_findings(assignments, trees),
            range_findings(trees),
            stand_findings(trees, inputs.visits, inputs.surveys, inputs.plots),
            season_findings(inputs.visits, inputs.surveys),
            biomass_findings,
            dead_findings,
            plot_findings,
            part_findings,
        ]
    )
    joined = join_parts(table, parts, inputs)
    if inputs.parcel_of is not None:
        joined = place_by_survey(joined, inputs.parcel_of)
    joined, lost = keep_declared(joined, settings, inputs)
    inputs = replace(inputs, trees=trees, findings=join_findings([findings, lost]))
    return PlotStage(inputs, plan, joined, parts, shares)


def _without_tally(table: pd.DataFrame, settings: Settings) -> pd.DataFrame:
    """Take away the zeros of tree parts at surveys without a tree table: nothing was looked for there."""
    untallied = ~table["survey"].isin(list(surveys_with_trees(settings)))
    if not untallied.any():
        return table
    columns = [name for name in (*TREE_PARTS, "trees", "biomass_t_ha") if name in table]
    return table.assign(**{name: table[name].mask(untallied) for name in columns})


def estimation_plan(stage: PlotStage, settings: Settings) -> Plan:
    """Prepare what the figures are reckoned from, rasters read.

    Raises
    ------
    UserError
        If a raster cannot be used, or classes and their areas do not go together.
    """
    auxiliary = read_auxiliary(settings, stage.inputs)
    classes = read_post_strata(settings, stage.inputs)
    return make_plan(stage.inputs, settings, stage.plot_parts, stage.sums, auxiliary, classes)


def estimate(stage: PlotStage, settings: Settings) -> Figures:
    """Estimate stocks at every survey, change between them, and what else the project file asks for."""
    return reckon(estimation_plan(stage, settings))


def tree_parts(settings: Settings) -> list[str]:
    """Columns of the parts that trees give, as far as they are counted."""
    wanted = {column_name(pool, part) for pool, parts in measured_parts(settings).items() for part in parts}
    if settings.pools.below_ground.how != "not counted":
        wanted.add("below_ground.roots")
    return [column for column in TREE_PARTS if column in wanted]


def root_model(settings: Settings) -> str:
    """Root model in effect; empty if below-ground biomass is not counted."""
    pool = settings.pools.below_ground
    if pool.how == "not counted":
        return ""
    return pool.model or str(default_model(settings.equations.region)["model_id"])


def carbon_domain(settings: Settings) -> str:
    """Climate domain of the carbon fractions: as stated, else by region."""
    if settings.carbon.domain:
        return settings.carbon.domain
    tropical = {"tropics", "mangrove"}
    return "tropical and subtropical" if settings.equations.region in tropical else "temperate and boreal"


def _fill_heights(trees: pd.DataFrame, settings: Settings) -> tuple[pd.DataFrame, pd.DataFrame]:
    measured = trees["height_m"].to_numpy(dtype=float)
    source = np.where(np.isfinite(measured), "measured", "none")
    how = settings.heights.missing
    usable = (trees["used"] & (trees["status"] != "absent")).to_numpy()
    if how == "none" or settings.equations.use_height is False:
        return trees.assign(height_source=pd.Categorical(source)), empty_findings()
    dbh = trees["dbh_cm"].to_numpy(dtype=float)
    if how != "curve":
        filled = published_height(how, dbh, stress=settings.equations.stress)
        heights = np.where(np.isfinite(measured), measured, filled)
        source = np.where(np.isfinite(measured), "measured", np.where(np.isfinite(filled), "published", "none"))
        return trees.assign(height_m=heights, height_source=pd.Categorical(source)), empty_findings()
    heights, source, curves = impute(
        dbh,  # rows set aside get a height too, so that the carbon at stake is known; they do not shape the curve
        np.where(usable, measured, np.nan),
        trees["species"],
        form=settings.heights.form,
        trees_needed=settings.heights.trees_needed,
    )
    heights = np.where(np.isfinite(measured), measured, heights)
    imputed = int((source == "curve").sum())
    findings = empty_findings()
    if imputed:
        served = curves[curves["n"] > 0].drop_duplicates(["parameters", "n"], keep=False)
        pooled = curves[curves["n"] > 0].drop(served.index).drop_duplicates(["parameters", "n"])
        told = [
            (str(name), n, rmse) for name, n, rmse in zip(served["species"], served["n"], served["rmse_m"], strict=True)
        ]
        told += [("all other species together", n, rmse) for n, rmse in zip(pooled["n"], pooled["rmse_m"], strict=True)]
        fitted = ", ".join(f"{name or 'no species'} (n {n}, RMSE {rmse:.1f} m)" for name, n, rmse in told)
        findings = make_findings(
            "height from curve",
            severity="note",
            table="trees",
            column="height_m",
            value=str(imputed),
            message=f"{imputed} heights were filled from curves fitted to the measured trees: {fitted}.",
            remedy="Measure more heights where the curve is weak, or set [heights] missing.",
        )
    return trees.assign(height_m=heights, height_source=pd.Categorical(source)), findings


def _assign(trees: pd.DataFrame, species: pd.DataFrame, settings: Settings) -> pd.DataFrame:
    counted = trees["used"] & (trees["status"] != "absent") & trees["dbh_cm"].notna()
    lacking = set(trees.loc[counted & trees["height_m"].isna(), "species"].astype("str"))
    table = species.assign(has_height=[code not in lacking for code in species["species"]])
    options = settings.equations
    return assign(
        table,
        region=options.region,
        country=options.country or None,
        sources=tuple(options.sources),
        explicit=dict(options.species),
        use_height=options.use_height,
        overrides=dict(options.wood_density),
        has_stress=options.stress is not None,
    )


def _stop_beyond_range(trees: pd.DataFrame, settings: Settings) -> None:
    if settings.equations.out_of_range != "stop":
        return
    beyond = trees["used"] & trees["out_of_range"]
    if beyond.any():
        first = trees.loc[beyond].iloc[0]
        raise UserError(
            f"{int(beyond.sum())} trees lie beyond the diameter range of their equation, the first "
            f"{first['dbh_cm']:g} cm with {first['equation']}",
            where=f"{first['file']} line {first['row']}",
            remedy='Set [equations] out_of_range to "flag" or "cap", or choose other equations.',
        )


def _carbon_at_stake(findings: pd.DataFrame, trees: pd.DataFrame) -> pd.DataFrame:
    """Fill in the carbon of the tree rows that findings are about."""
    known = findings["row_id"].notna() & (findings["table"] == "trees")
    if not known.any():
        return findings
    carbon = trees.set_index("row_id")["carbon_kg"]
    at_stake = findings.loc[known, "row_id"].astype(np.int64).map(carbon)
    return findings.assign(carbon_kg=findings["carbon_kg"].where(~known, at_stake.reindex(findings.index)))
