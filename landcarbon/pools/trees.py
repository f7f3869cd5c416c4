"""From a stem to its dry mass and carbon.

A :class:`TreePlan` fixes, before any tree is touched, the equation, wood density and carbon fraction of every species
code. :func:`tree_biomass` then is a pure function of a batch of trees: the same for a frame in memory and for batches
from disk.
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
import pandas as pd

from allometry.catalogue import Catalogue
from allometry.roots import tree_roots
from landcarbon.columns import with_columns
from landcarbon.factors.carbon import carbon_fraction
from landcarbon.findings import empty_findings, join_findings, make_findings
from landcarbon.pools.standing_dead import StandingOptions, dead_biomass

__all__ = [
    "TreePlan",
    "combine_stems",
    "dead_trees",
    "has_status",
    "label_trees",
    "make_tree_plan",
    "tree_biomass",
    "tree_findings",
]


@dataclass(frozen=True)
class TreePlan:
    """What is fixed per species code before trees are evaluated.

    Attributes
    ----------
    catalogue : Catalogue
        The published equations.
    assignments : DataFrame
        One row per species code, as returned by ``allometry.assign.assign``.
    equation_code : ndarray of int, shape (species,)
        Row of the equation in the catalogue; -1 where there is none.
    wood_density : ndarray of float, shape (species,)
        Wood density [g/cm3].
    conifer : ndarray of bool, shape (species,)
        Conifer or not.
    live_fraction, dead_fraction : ndarray of float, shape (species,)
        Carbon fraction of dry matter of live and of dead trees.
    out_of_range : str
        "flag" evaluates and flags, "cap" evaluates at the nearest bound of the equation's diameter range.
    stress : float or None
        Bioclimatic stress E of the pantropical height-free equation.
    tree_root_model : str
        Tree-level root ratio, empty if roots are worked out per plot or not counted.
    """

    catalogue: Catalogue
    assignments: pd.DataFrame
    equation_code: np.ndarray
    wood_density: np.ndarray
    conifer: np.ndarray
    live_fraction: np.ndarray
    dead_fraction: np.ndarray
    out_of_range: str = "flag"
    stress: float | None = None
    tree_root_model: str = ""

    def positions(self, species: pd.Series) -> np.ndarray:
        """Row of ``assignments`` for each tree (shape of ``species``)."""
        known = pd.Index(self.assignments["species"])
        if isinstance(species.dtype, pd.CategoricalDtype):
            by_category = known.get_indexer(species.cat.categories)
            return by_category[species.cat.codes.to_numpy()]
        return known.get_indexer(species)


def make_tree_plan(
    assignments: pd.DataFrame,
    catalogue: Catalogue,
    *,
    carbon_domain: str,
    out_of_range: str = "flag",
    stress: float | None = None,
    tree_root_model: str = "",
) -> TreePlan:
    """Fix equation, density and carbon fraction of every species code.

    Parameters
    ----------
    assignments : DataFrame
        From ``allometry.assign.assign``.
    catalogue : Catalogue
        The published equations.
    carbon_domain : str
        Climate domain of the carbon fractions (IPCC 2006 Vol 4 Table 4.3).
    out_of_range, stress, tree_root_model
        See :class:`TreePlan`.
    """
    conifer = assignments["conifer"].to_numpy(dtype=bool)
    group = np.where(conifer, "conifer", "broadleaf").astype(object)
    codes = pd.Index(catalogue.table["equation_id"]).get_indexer(assignments["equation_id"])
    return TreePlan(
        catalogue=catalogue,
        assignments=assignments.reset_index(drop=True),
        equation_code=codes.astype(np.int64),
        wood_density=assignments["wood_density_g_cm3"].to_numpy(dtype=float),
        conifer=conifer,
        live_fraction=carbon_fraction(group, domain=carbon_domain, pool="above_ground"),
        dead_fraction=carbon_fraction(group, domain=carbon_domain, pool="dead_wood"),
        out_of_range=out_of_range,
        stress=stress,
        tree_root_model=tree_root_model,
    )


def combine_stems(trees: pd.DataFrame) -> pd.DataFrame:
    """Give each multi-stemmed tree one diameter: the root of the sum of squares of its live stems.

    The first stem of a tree carries the combined diameter and the largest height; the others keep their row with
    ``dbh_cm`` zero, so that no row is lost. Rows without a tree id are left alone.

    Notes
    -----
    d = sqrt(sum d_j^2): the diameter of one stem of the same basal area, as field guides print it for trees measured
    at the root collar. It gives more biomass than the sum of the stems does, since biomass rises faster than d squared.
    """
    whole = trees["used"] & (trees["status"] == "live") & (trees["tree"].astype("str") != "") & trees["dbh_cm"].notna()
    part = trees.loc[whole]
    keys = part.groupby(["survey", "plot", "subplot", "tree"], observed=True, sort=False)
    group = keys.ngroup().to_numpy()
    if not len(group):
        return trees
    dbh = part["dbh_cm"].to_numpy()
    count = int(group.max()) + 1
    combined = np.sqrt(np.bincount(group, weights=dbh**2, minlength=count))
    first = np.zeros(len(part), dtype=bool)
    first[np.unique(group, return_index=True)[1]] = True
    tallest = keys["height_m"].transform("max").to_numpy()
    result = trees.copy()
    result.loc[whole, "dbh_cm"] = np.where(first, combined[group], 0.0)
    result.loc[whole, "height_m"] = np.where(first, tallest, part["height_m"].to_numpy())
    return result


def tree_biomass(trees: pd.DataFrame, plan: TreePlan) -> pd.DataFrame:
    """Add dry mass and carbon to a batch of trees.

    Parameters
    ----------
    trees : DataFrame
        Canonical trees; rows set aside are evaluated too, so that the carbon at stake is known.
    plan : TreePlan
        Equation and factors per species code.

    Returns
    -------
    DataFrame
        ``trees`` with biomass_kg (above ground, dry), root_kg (NaN without a tree-level root model), carbon_fraction,
        carbon_kg and out_of_range. Rows with status absent have zero biomass; rows that cannot be
        evaluated have NaN.
    """
    position = plan.positions(trees["species"])
    code = plan.equation_code[position]
    dbh = trees["dbh_cm"].to_numpy(dtype=float)
    density = plan.wood_density[position]
    height = trees["height_m"].to_numpy(dtype=float)
    stress = None if plan.stress is None else np.full(1, plan.stress)
    evaluated = plan.catalogue.clip_to_range(code, dbh) if plan.out_of_range == "cap" else dbh
    biomass, beyond = plan.catalogue.evaluate_codes(code, evaluated, height, density, stress)
    if plan.out_of_range == "cap":
        beyond = np.isfinite(dbh) & (evaluated != dbh)
    dead, absent = has_status(trees["status"], "dead"), has_status(trees["status"], "absent")
    nothing = absent | (dbh == 0.0)
    biomass[nothing] = 0.0
    both = np.concatenate([plan.live_fraction, plan.dead_fraction])  # one look-up for live and dead
    fraction = both[np.where(dead, position + len(plan.live_fraction), position)]
    beyond[nothing] = False
    added = {
        "biomass_kg": biomass,
        "carbon_fraction": fraction,
        "carbon_kg": biomass * fraction,
        "out_of_range": beyond,
    }
    if plan.tree_root_model:
        roots = tree_roots(plan.tree_root_model, biomass, dbh_cm=dbh, conifer=plan.conifer[position])
        added["root_kg"] = np.where(nothing | dead, 0.0, roots)
    return with_columns(trees, added)


def dead_trees(trees: pd.DataFrame, plan: TreePlan, options: StandingOptions) -> tuple[pd.DataFrame, pd.DataFrame]:
    """Turn the mass of standing dead trees into dead wood: by decay class, or as the options say.

    Parameters
    ----------
    trees : DataFrame
        From :func:`tree_biomass`; biomass_kg of a dead tree is that of a live tree of its size.
    plan : TreePlan
        Gives group and equation.
    options : StandingOptions
        Method and choices.

    Returns
    -------
    trees : DataFrame
        With dead_wood_kg, dead_how and, if counted, dead_root_carbon_kg; carbon_kg of dead trees follows dead_wood_kg.
    findings : DataFrame
        Faults of the dead trees.
    """
    position = plan.positions(trees["species"])
    component = plan.catalogue.table.set_index("equation_id")["component"]
    of_species = component.reindex(plan.assignments["equation_id"])
    told = with_columns(
        trees,
        {
            "conifer": plan.conifer[position],
            "component": _labels(of_species, position),
            "wood_density_g_cm3": plan.wood_density[position],
            "live_height_m": trees["height_m"].to_numpy(),
        },
    )
    told, findings = dead_biomass(told, options)
    counted = has_status(trees["status"], "dead") & told["used"].to_numpy()
    fraction = trees["carbon_fraction"].to_numpy()
    carbon = np.where(counted, told["dead_wood_kg"].to_numpy() * fraction, trees["carbon_kg"].to_numpy())
    told = told.assign(carbon_kg=carbon)
    if options.roots == "dead_wood":
        told = told.assign(dead_root_carbon_kg=np.where(counted, told["dead_root_kg"].to_numpy() * fraction, 0.0))
    return told.drop(columns=["component", "dead_root_kg", "wood_density_g_cm3", "live_height_m"]), findings


def label_trees(trees: pd.DataFrame, plan: TreePlan) -> pd.DataFrame:
    """Add accepted name, equation, rung of the ladder and ``known`` mark: what each tree row rests on."""
    position = plan.positions(trees["species"])
    named = {"scientific_name": "accepted_name", "equation": "equation_id", "rung": "rung", "known": "known"}
    return with_columns(trees, {ours: _labels(plan.assignments[theirs], position) for ours, theirs in named.items()})


def tree_findings(trees: pd.DataFrame, plan: TreePlan) -> tuple[pd.DataFrame, pd.DataFrame]:
    """Set aside live or dead trees whose equation gave nothing usable, and say so.

    Returns
    -------
    trees : DataFrame
        With ``used`` updated and negative biomass set to zero.
    findings : DataFrame
        One row per tree set aside or set to zero.
    """
    biomass = trees["biomass_kg"].to_numpy()
    used = trees["used"].to_numpy()
    failed = used & ~np.isfinite(biomass)
    negative = used & (biomass < 0)
    if not failed.any() and not negative.any():
        return trees, empty_findings()
    findings = [
        make_findings(
            "no biomass",
            trees.loc[failed],
            severity="error",
            table="trees",
            column="dbh_cm",
            used=False,
            message="The equation needs a value this row does not have; the tree is left out.",
            remedy="Measure the height, set [heights] missing, or choose a diameter-only equation.",
        ),
        make_findings(
            "negative biomass",
            trees.loc[negative],
            severity="warning",
            table="trees",
            column="dbh_cm",
            message="The equation turns negative at this diameter; the tree counts as zero.",
            remedy="Choose another equation for small trees in [equations.species].",
        ),
    ]
    mended = np.where(negative, 0.0, biomass)
    carbon = mended * trees["carbon_fraction"].to_numpy()
    trees = trees.assign(biomass_kg=mended, carbon_kg=carbon, used=used & ~failed)
    return trees, join_findings(findings)


def has_status(status: pd.Series, name: str) -> np.ndarray:
    """Whether each row of a categorical status has this name; quicker than comparing labels."""
    names = [str(label) for label in status.cat.categories]
    return status.cat.codes.to_numpy() == (names.index(name) if name in names else -2)


def _labels(values: pd.Series, position: np.ndarray) -> pd.Categorical:
    codes, labels = pd.factorize(values.astype("object"))
    picked = np.where(position >= 0, codes[position], -1)
    return pd.Categorical.from_codes(picked, categories=pd.Index(labels).astype("str"))
