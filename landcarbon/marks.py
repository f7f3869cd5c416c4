"""Sentences that stand on every output: what the figures rest on, and what is not in them."""

from __future__ import annotations

from collections.abc import Mapping

import numpy as np
import pandas as pd

__all__ = ["area_marks", "part_marks", "pool_marks", "row_marks", "tree_marks"]


def tree_marks(trees: pd.DataFrame, assignments: pd.DataFrame, catalogue: pd.DataFrame) -> list[str]:
    """Say what share of the live above-ground biomass rests on something weaker than a fitting published equation.

    Parameters
    ----------
    trees : DataFrame
        Trees after the tree step: survey, status, used, biomass_kg, expansion [1/ha], out_of_range, height_source and
        equation.
    assignments : DataFrame
        species, equation_id, rung, known, name_known, one row per species code.
    catalogue : DataFrame
        equation_id, component, inputs, country.

    Returns
    -------
    list of str
        One sentence per weakness, with the share at every survey where it is not zero.
    """
    rows = trees[trees["used"] & (trees["status"] == "live") & trees["biomass_kg"].gt(0)]
    mass = rows["biomass_kg"].to_numpy() * rows["expansion"].to_numpy()
    survey = rows["survey"].astype("str").to_numpy()
    flags = _flags(rows, assignments, catalogue)
    sentences = {
        "beyond": "of the above-ground biomass stands in trees beyond the diameter range of their equation",
        "memory": "of the above-ground biomass rests on equations known only from memory; check them against print "
        "before any claim",
        "curve": "of the above-ground biomass rests on heights from a curve instead of measured ones",
        "woody": "of the above-ground biomass rests on equations without foliage",
        "generic": "of the above-ground biomass rests on a generic equation, because none serves the species, its "
        "genus or its group",
        "unknown": "of the above-ground biomass belongs to species names that are not known",
    }
    marks = []
    for name, words in sentences.items():
        shares = _shares(survey, mass, flags[name])
        if shares:
            marks.append(f"{shares} {words}.")
    return marks


def row_marks(findings: pd.DataFrame, reconciliation: pd.DataFrame) -> list[str]:
    """Say how many rows were set aside for a fault, since the figures lack what they tell.

    Parameters
    ----------
    findings : DataFrame
        All findings; notes do not count as faults.
    reconciliation : DataFrame
        survey, rows_read.
    """
    aside = findings[~findings["used"] & (findings["severity"] != "note")]
    faults = aside.dropna(subset="row_id").drop_duplicates(["table", "row_id"])
    counts: dict[str, list[str]] = {}
    for table, survey, read in zip(
        reconciliation["table"], reconciliation["survey"].astype("str"), reconciliation["rows_read"], strict=True
    ):
        count = int(((faults["table"] == table) & (faults["survey"] == survey)).sum())
        if count:
            counts.setdefault(survey or "no survey", []).append(f"{count} of {read} {table.replace('_', ' ')}")
    if not counts:
        return []
    text = "; ".join(f"{survey}: {', '.join(rows)}" for survey, rows in counts.items())
    return [f"Rows set aside for a fault and missing from the figures (see findings.csv): {text}."]


def area_marks(stocks: pd.DataFrame) -> list[str]:
    """Say which strata could not be estimated, and how many hectares that is.

    Parameters
    ----------
    stocks : DataFrame
        The stocks table.
    """
    strata = stocks[(stocks["by"] == "stratum") & (stocks["pool"] != "all")]
    known = strata["density_t_c_ha"].notna()
    strata = strata[known.groupby([strata["survey"], strata["pool"]]).transform("any")]  # not measured then: no matter
    none = strata["density_t_c_ha"].isna()
    lost = strata.assign(lost=none).groupby(["survey", "unit"], sort=False)["lost"].transform("all")
    whole = strata[lost].drop_duplicates(["survey", "unit"])
    marks = _lost_strata(whole)
    for pool, rows in strata[none & ~lost].groupby("pool", sort=False):
        where = "; ".join(f"{name} at {', '.join(part['survey'])}" for name, part in rows.groupby("unit", sort=False))
        marks.append(
            f"Pool {pool} could not be estimated in stratum {where}: the sum of all pools there is without it."
        )
    return marks


def _lost_strata(rows: pd.DataFrame) -> list[str]:
    missing: dict[tuple[str, str], list[str]] = {}
    for survey, part in rows.groupby("survey", sort=False):
        area = part["area_ha"].sum(min_count=1)
        size = "an unknown area" if pd.isna(area) else f"{area:.1f} ha"
        missing.setdefault((", ".join(part["unit"].astype("str")), size), []).append(str(survey))
    return [
        f"Survey {', '.join(surveys)}: stratum {names} could not be estimated; {size} not in the total of the "
        "inventory."
        for (names, size), surveys in missing.items()
    ]


def part_marks(parts: pd.DataFrame, memory_root_model: str) -> list[str]:
    """Say which parts rest on factors known only from memory.

    Parameters
    ----------
    parts : DataFrame
        pool, part, known of the parts measured on samples.
    memory_root_model : str
        Root model in effect if it is known from memory only, else empty.
    """
    weak = parts.loc[parts["known"] == "memory", ["pool", "part"]].drop_duplicates()
    names = [f"{pool} ({part})" for pool, part in zip(weak["pool"], weak["part"], strict=True)]
    if memory_root_model:
        names.append(f"below_ground (root model {memory_root_model})")
    if not names:
        return []
    return [f"Some factors are known only from memory; check them against print before any claim: {', '.join(names)}."]


def pool_marks(ways: Mapping[str, str], measured: Mapping[str, list[str]]) -> list[str]:
    """Say which pools are not counted, and which were measured at some surveys only.

    Parameters
    ----------
    ways : mapping
        Pool -> how it was obtained, or "not counted: reason".
    measured : mapping
        Survey -> pools, or parts of pools, measured there.
    """
    marks = []
    missing = [f"{pool} ({how.removeprefix('not counted: ')})" for pool, how in ways.items() if "not counted" in how]
    if missing:
        marks.append("Pools not counted: " + "; ".join(missing) + ".")
    every = set().union(*measured.values()) if measured else set()
    partial = sorted(pool for pool in every if any(pool not in pools for pools in measured.values()))
    if partial:
        where = {pool: [survey for survey, pools in measured.items() if pool in pools] for pool in partial}
        text = "; ".join(f"{pool} at {', '.join(surveys)} only" for pool, surveys in where.items())
        marks.append(
            f"Measured at some surveys only: {text}. Stocks of all counted pools hold what was measured then: take "
            "change from the table of change, never by subtracting such stocks."
        )
    defaults = [f"{pool} ({how})" for pool, how in ways.items() if how.startswith("default")]
    if defaults:
        marks.append("Default factors, whose own uncertainty is not in the intervals: " + "; ".join(defaults) + ".")
    return marks


def _flags(rows: pd.DataFrame, assignments: pd.DataFrame, catalogue: pd.DataFrame) -> dict[str, np.ndarray]:
    table = assignments.merge(catalogue[["equation_id", "component", "inputs"]], on="equation_id", how="left")
    position = pd.Index(table["species"]).get_indexer(rows["species"].astype("object"))

    def per_tree(values: pd.Series) -> np.ndarray:
        return values.to_numpy(dtype=bool)[position]

    uses_height = per_tree(table["inputs"].astype("str").str.contains("height_m"))
    return {
        "beyond": rows["out_of_range"].to_numpy(dtype=bool),
        "memory": per_tree(table["known"] == "memory"),
        "curve": uses_height & (rows["height_source"].astype("str") != "measured").to_numpy(),
        "woody": per_tree(table["component"] == "agb_woody"),
        "generic": per_tree(table["rung"] == "generic"),
        "unknown": per_tree(~table["name_known"].astype(bool)),
    }


def _shares(survey: np.ndarray, mass: np.ndarray, flag: np.ndarray) -> str:
    totals = pd.Series(mass).groupby(survey).sum()
    parts = pd.Series(np.where(flag, mass, 0.0)).groupby(survey).sum() / totals
    parts = parts[parts > 0]
    return ", ".join(f"{share:.1%} ({name})" for name, share in parts.items())
