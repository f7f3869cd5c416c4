"""Findings on the equations in effect: unknown names, equations from memory, trees beyond an equation's diameters."""

from __future__ import annotations

import numpy as np
import pandas as pd

from landcarbon.check.keys import positions
from landcarbon.check.rules import joined, rule

__all__ = ["memory_findings", "range_findings", "species_findings"]


def species_findings(assignments: pd.DataFrame, trees: pd.DataFrame) -> pd.DataFrame:
    """Point at species names that are not known, with the nearest known name.

    Parameters
    ----------
    assignments : DataFrame
        One row per species code: species, scientific_name, equation_id, rung, name_known, suggestion.
    trees : DataFrame
        Tree table; only rows in use count.

    Returns
    -------
    DataFrame
        One finding per name, table ``species``.
    """
    counts = _rows_of_species(assignments["species"], trees)
    table = assignments.assign(count=counts)[counts > 0]
    blank = (table["species"].astype("object") == "").to_numpy(dtype=bool)
    unknown = ~blank & ~table["name_known"].to_numpy(dtype=bool)
    code, name = (table[column].astype("object").map(str) for column in ("species", "scientific_name"))
    value = code.where(code == name, code + " (" + name + ")")[unknown].to_numpy(dtype=object)
    return joined(
        [
            rule("species unknown").found_each(table.loc[unknown, []], _name_words(table[unknown]), value=value),
            rule("species blank").found_each(table.loc[blank, []], _name_words(table[blank])),
        ]
    )


def _name_words(table: pd.DataFrame) -> list[dict[str, object]]:
    columns = (table[name] for name in ("count", "equation_id", "rung", "suggestion"))
    return [
        {
            "count": int(count),
            "equation": equation,
            "rung": rung,
            "suggestion": f" Did you mean {suggestion}?" if suggestion else "",
        }
        for count, equation, rung, suggestion in zip(*columns, strict=True)
    ]


def memory_findings(assignments: pd.DataFrame, trees: pd.DataFrame) -> pd.DataFrame:
    """Point at equations in effect that are known from memory only.

    Parameters
    ----------
    assignments : DataFrame
        One row per species code: species, accepted_name, equation_id, known.
    trees : DataFrame
        Tree table; with ``biomass_kg`` the share of the biomass is named too.

    Returns
    -------
    DataFrame
        One finding per equation, table ``equations``.
    """
    counts = _rows_of_species(assignments["species"], trees)
    held = (assignments["known"].astype("object") == "memory").to_numpy(dtype=bool) & (counts > 0)
    if not held.any():
        return joined([])
    biomass = _biomass_of_species(assignments["species"], trees)
    table = assignments.assign(count=counts, biomass=biomass)[held]
    total = float(np.nansum(biomass))
    parts = []
    for equation, rows in table.groupby("equation_id", sort=True):
        share = f", with {rows['biomass'].sum() / total:.1%} of the biomass of all surveys" if total > 0 else ""
        fill = {"species": _listed(rows["accepted_name"]), "count": int(rows["count"].sum()), "share": share}
        parts.append(rule("equation from memory").found(fill=fill, value=str(equation)))
    return joined(parts)


def range_findings(trees: pd.DataFrame) -> pd.DataFrame:
    """Say how many trees, and how much biomass, lie beyond the diameter range of their equation.

    Parameters
    ----------
    trees : DataFrame
        Tree table after the tree step (survey, scientific_name, equation, biomass_kg, out_of_range, used, status),
        expanded per hectare by ``expansion`` where that column is there.

    Returns
    -------
    DataFrame
        One warning per species and equation with such trees.
    """
    rows = trees[_counted(trees)]
    beyond = rows["out_of_range"].to_numpy(dtype=bool)
    if not beyond.any():
        return joined([])
    mass = _expanded(rows)
    table = pd.DataFrame(
        {
            "survey": rows["survey"].astype("object").to_numpy(),
            "species": rows["scientific_name"].astype("object").to_numpy(),
            "equation": rows["equation"].astype("object").to_numpy(),
            "trees": 1,
            "beyond": beyond,
            "biomass": mass,
            "biomass_beyond": np.where(beyond, mass, 0.0),
        }
    )
    by_kind = _summed(table, ["species", "equation"])
    words = [
        {"species": species, "count": int(count), "total": int(total), "share": share}
        for species, count, total, share in zip(
            by_kind["species"], by_kind["beyond"], by_kind["trees"], _shares(by_kind), strict=True
        )
    ]
    return joined([rule("beyond diameter range").found_each(by_kind[[]], words, value=by_kind["equation"].to_numpy())])


def _summed(table: pd.DataFrame, by: list[str]) -> pd.DataFrame:
    sums = table.groupby(by, sort=True)[["trees", "beyond", "biomass", "biomass_beyond"]].sum().reset_index()
    return sums[sums["beyond"] > 0]


def _shares(sums: pd.DataFrame) -> np.ndarray:
    pairs = zip(sums["biomass_beyond"], sums["biomass"], strict=True)
    return np.array([f"{part / whole:.1%}" if whole > 0 else "none" for part, whole in pairs], dtype=object)


def _counted(trees: pd.DataFrame) -> np.ndarray:
    result: np.ndarray = trees["used"].to_numpy(dtype=bool) & (trees["status"] != "absent").to_numpy(dtype=bool)
    return result


def _expanded(rows: pd.DataFrame) -> np.ndarray:
    mass = np.nan_to_num(rows["biomass_kg"].to_numpy(dtype=float))
    if "expansion" not in rows:
        return mass
    result: np.ndarray = mass * np.nan_to_num(rows["expansion"].to_numpy(dtype=float))
    return result


def _rows_of_species(codes: pd.Series, trees: pd.DataFrame) -> np.ndarray:
    at = positions(trees["species"], codes)[_counted(trees)]
    return np.bincount(at[at >= 0], minlength=len(codes))


def _biomass_of_species(codes: pd.Series, trees: pd.DataFrame) -> np.ndarray:
    if "biomass_kg" not in trees:
        return np.zeros(len(codes))
    rows = trees[_counted(trees)]
    at = positions(rows["species"], codes)
    return np.bincount(at[at >= 0], weights=_expanded(rows)[at >= 0], minlength=len(codes))


def _listed(names: pd.Series) -> str:
    shown = 4  # the full list is in the table of equations
    distinct = sorted(set(names.astype("object").map(str)))
    more = f" and {len(distinct) - shown} more" if len(distinct) > shown else ""
    return ", ".join(distinct[:shown]) + more
