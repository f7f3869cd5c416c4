"""Pools taken from a default factor, and the tables the factors of litter and of default stocks are read from."""

from __future__ import annotations

from collections.abc import Hashable, Iterable
from difflib import get_close_matches
from functools import cache
from importlib import resources
from typing import Any

import numpy as np
import pandas as pd

from landcarbon.errors import SettingsError
from landcarbon.pools.parts import PARTS, make_parts

__all__ = [
    "KNOWN",
    "carbon_sets",
    "default_fraction",
    "default_rows",
    "default_stock",
    "default_stock_table",
    "floor_density",
    "floor_types",
    "forest_floor_table",
    "fraction_rows",
    "largest_density",
    "largest_fraction",
    "litter_carbon_table",
    "weakest",
]

#: How a factor is known, from the firmest to the weakest.
KNOWN = ("read", "secondary", "memory")

LIMIT = "limit"  # name of the rows that hold the limit of a table, not a factor


@cache
def _table(name: str) -> pd.DataFrame:
    text = {"edition": "str", "note": "str"}
    with resources.files("landcarbon.factors").joinpath(name).open(encoding="utf-8") as handle:
        return pd.read_csv(handle, dtype=text, keep_default_na=False, na_values=[""])


def default_stock_table() -> pd.DataFrame:
    """Return the default stocks of litter, dead wood and soil.

    Returns
    -------
    DataFrame
        edition ("2006", "2019"), pool, climate (zone, or climate and forest zone, as printed), type (forest type; soil
        class for soil), value [t C/ha; soil: in 0-30 cm; NaN where none is printed], low, high [t C/ha], range (what
        low and high are), uncertainty_percent, uncertainty (what it is), n, unit, source, where, known, note.

    References
    ----------
    IPCC 2006 Guidelines Vol 4 and 2019 Refinement Vol 4, Tables 2.2 (litter, dead wood) and 2.3 (soil under native
    vegetation).
    """
    return _table("default_stocks.csv").copy()


def litter_carbon_table() -> pd.DataFrame:
    """Return carbon fractions of litter, duff and ground vegetation.

    Returns
    -------
    DataFrame
        set (name of the set of factors), pool, layer, basis ("dry matter": of the whole dry mass with its ash;
        "organic matter": of the dry mass less ash), value, low, high, unit, source, where, known, note. The set
        "limit" holds the largest fraction taken for plausible.
    """
    return _table("litter_carbon.csv").copy()


def forest_floor_table() -> pd.DataFrame:
    """Return bulk densities of the forest floor: type, layer (as printed), part, value [g/cm3], source, known."""
    return _table("forest_floor_density.csv").copy()


def carbon_sets() -> list[str]:
    """Names of the sets of default fractions of litter and duff."""
    table = _table("litter_carbon.csv")
    return list(dict.fromkeys(table.loc[(table["pool"] == "litter") & table["value"].notna(), "set"]))


def floor_types() -> list[str]:
    """Types of forest floor with a bulk density."""
    return [str(name) for name in dict.fromkeys(_table("forest_floor_density.csv")["type"]) if name != LIMIT]


def fraction_rows(pool: str, layer: str, basis: str, chosen: str = "") -> pd.DataFrame:
    """Rows of the carbon fractions that fit; of several sets the chosen one, or the first."""
    table = _table("litter_carbon.csv")
    fits = table["pool"].isin([pool, "any"]) & table["layer"].isin([layer, "any"]) & (table["basis"] == basis)
    rows = table[fits & table["value"].notna() & (table["set"] != LIMIT)]
    own = rows[rows["set"] == chosen]
    return (rows if own.empty else own).iloc[:1]


def default_fraction(pool: str, layer: str, basis: str, chosen: str = "") -> float:
    """Return the default carbon fraction of a layer [g/g].

    Parameters
    ----------
    pool, layer : str
        As in the table: litter with litter or duff, above_ground with ground_vegetation.
    basis : {"dry matter", "organic matter"}
        What it refers to.
    chosen : str
        Set of factors; the first that fits if blank.

    References
    ----------
    IPCC 2006 Guidelines Vol 4 Eq 2.19, p. 2.23 (0.37 for litter); Chojnacky et al. 2009, abstract (0.45 and 0.37 for
    litter and duff of hardwoods); IPCC 2019 Refinement Vol 4 Table 5.8 (0.47 for herbs); Pribyl 2010, abstract (half of
    the organic matter).
    """
    return float(fraction_rows(pool, layer, basis, chosen)["value"].iloc[0])


def floor_density(kind: str, part: str) -> float:
    """Bulk density of a part of the forest floor [g/cm3]; NaN where none is tabled."""
    table = _table("forest_floor_density.csv")
    rows = table.loc[(table["type"] == kind) & (table["part"] == part), "value"]
    return float(rows.iloc[0]) if len(rows) and kind != LIMIT else np.nan


def largest_fraction() -> float:
    """Carbon fraction above which a value is an error [g/g]."""
    table = _table("litter_carbon.csv")
    return float(table.loc[table["set"] == LIMIT, "value"].iloc[0])


def largest_density() -> float:
    """Bulk density above which a value is an error [g/cm3]."""
    table = _table("forest_floor_density.csv")
    return float(table.loc[table["type"] == LIMIT, "value"].iloc[0])


def weakest(marks: Iterable[Any]) -> str:
    """Return the weakest of several marks "read", "secondary", "memory"; "read" if there are none."""
    worst = max((KNOWN.index(str(mark)) for mark in marks), default=0)
    return KNOWN[worst]


def default_stock(pool: str, climate: str, kind: str, *, edition: str = "2019") -> dict[Hashable, Any]:
    """Look up one default stock.

    Parameters
    ----------
    pool : {"litter", "dead_wood", "soil"}
        Pool.
    climate : str
        As printed in the table, upper or lower case.
    kind : str
        Forest type, or soil class for soil.
    edition : {"2006", "2019"}
        Which edition of the guidelines.

    Returns
    -------
    dict
        The row of :func:`default_stock_table`, with ``text``, the source in words for the outputs.

    Raises
    ------
    SettingsError
        If the table has no such row, or prints no value in it.
    """
    table = _table("default_stocks.csv")
    for column, given in (("edition", edition), ("pool", pool), ("climate", climate), ("type", kind)):
        names = list(dict.fromkeys(table[column]))
        table = table[table[column].str.casefold() == given.strip().casefold()]
        if table.empty:
            raise SettingsError(f"no default stock with {column} {given!r}", remedy=_accepted(given, names))
    row = table.iloc[0].to_dict()
    if not np.isfinite(row["value"]):
        raise SettingsError(
            f"{_cite(row)} prints no value for {row['climate']}, {row['type']} ({row['note']})",
            remedy="Take another row or edition, measure the pool, or do not count it and say why.",
        )
    return {**row, "text": f"{_cite(row)}, {row['climate']}, {row['type']}"}


def default_rows(
    visits: pd.DataFrame, pool: str, value: float, source: str, *, part: str | None = None, known: str = "read"
) -> pd.DataFrame:
    """Give every visited plot the same carbon density.

    Parameters
    ----------
    visits : DataFrame
        survey, plot and, where not every row was visited, visited (bool).
    pool : str
        Pool the factor stands for, as a whole.
    value : float
        Carbon density [t C/ha], zero or more.
    source : str
        Where the factor comes from; printed with the results.
    part : str, optional
        Part under which it is carried; if not given the part ``default`` of the pool, or its first part.
    known : {"read", "secondary", "memory"}
        How the factor is known.

    Returns
    -------
    DataFrame
        Rows of parts; samples zero, mass_t_ha NaN (a carbon figure does not say what dry mass it sits in).

    Raises
    ------
    SettingsError
        If the value is no usable density or the source is blank.

    Notes
    -----
    One figure on every plot does not vary between plots, so the standard error of the pool is zero whatever the factor
    is worth, and its change between surveys is zero. The method says so.
    """
    if pool not in PARTS:
        raise SettingsError(f"unknown pool {pool!r}", remedy=f"Choose one of: {', '.join(PARTS)}")
    if not (np.isfinite(value) and value >= 0):
        raise SettingsError(
            f"default factor {value!r} of {pool} is not a carbon density",
            where=f"[pools] {pool}",
            remedy="Give t C per hectare, zero or more.",
        )
    if not source.strip():
        raise SettingsError(
            f"the default factor of {pool} has no source",
            where=f"[pools] {pool}",
            remedy="Name the publication, table and row it comes from.",
        )
    visited = visits[visits["visited"].astype(bool)] if "visited" in visits else visits
    rows = visited[["survey", "plot"]].drop_duplicates()
    usual = "default" if "default" in PARTS[pool] else PARTS[pool][0]
    rows = rows.assign(density_t_c_ha=float(value), mass_t_ha=np.nan, samples=0)
    method = (
        f"default factor: {value:g} t C/ha on every plot ({source.strip()}); "
        "not measured, its uncertainty is not in the interval"
    )
    return make_parts(rows, pool=pool, part=part or usual, method=method, known=known)


def _cite(row: dict[Hashable, Any]) -> str:
    publication = "IPCC 2006 Guidelines" if row["edition"] == "2006" else "IPCC 2019 Refinement"
    return f"{publication} {row['where']}"


def _accepted(given: str, names: list[str]) -> str:
    near = get_close_matches(given, names, n=1)
    hint = f"Did you mean {near[0]!r}? " if near else ""
    return f"{hint}Printed there: {'; '.join(names)}"
