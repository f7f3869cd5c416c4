"""Basic wood density (oven-dry mass over green volume) of a tree by its name."""

from __future__ import annotations

from collections.abc import Iterable, Mapping
from functools import cache

import pandas as pd

from allometry._data import read_data
from allometry.errors import AllometryError
from allometry.names import parse_names

__all__ = ["DENSITY_COLUMNS", "density_table", "wood_density"]

DENSITY_COLUMNS = [
    "wood_density_g_cm3",
    "wood_density_rank",
    "wood_density_source",
    "wood_density_known",
    "wood_density_taxon",
]
"""Columns of :func:`wood_density`."""

_LOWEST, _HIGHEST = 0.05, 1.5
"""Bounds outside which a value given by a user is refused [g/cm3]: the lightest and heaviest woods lie between
them."""


@cache
def _table() -> pd.DataFrame:
    values = read_data("wood_density", numbers=("density_g_cm3", "n", "min", "max"))
    listed = read_data("species_groups", numbers=("wood_density_g_cm3",))
    listed = listed[listed["wood_density_g_cm3"].notna()].rename(
        columns={"scientific_name": "taxon", "wood_density_g_cm3": "density_g_cm3"}
    )
    listed = listed[["taxon", "density_g_cm3", "source_key", "where", "known"]].assign(
        rank="", group="temperate_boreal"
    )
    table = pd.concat([values, listed], ignore_index=True)
    is_plant = ~table["rank"].isin(["family", "region", "global"])
    names = parse_names(table["taxon"].where(is_plant, ""))
    table["accepted_name"] = names["accepted_name"].where(is_plant, table["taxon"])
    table["genus"] = names["genus"]
    table["family"] = names["family"]
    table.loc[is_plant, "rank"] = names["epithet"].ne("").map({True: "species", False: "genus"})[is_plant]
    table = table[table["accepted_name"] != ""]
    order = read_data("wood_density_order", numbers=("order",)).set_index("source_key")["order"]
    table["memory"] = table["known"].eq("memory")
    table["order"] = table["source_key"].map(order)
    # The same species may stand in one table under two names or in two groups: the first row as printed counts.
    table = table.sort_values(["memory", "order"], kind="stable")
    return table.drop_duplicates(["rank", "accepted_name"]).drop(columns=["memory", "order"]).reset_index(drop=True)


def density_table() -> pd.DataFrame:
    """List the values in use, one row per species, genus, family, region and for the globe.

    Returns
    -------
    DataFrame
        Columns accepted_name, rank, density_g_cm3, n, source_key, where, known, note and those of
        ``data/wood_density.csv``.

    Notes
    -----
    Where several publications give a value for one name, rows that were read or quoted come before recalled ones,
    then the order of ``data/wood_density_order.csv`` decides.
    """
    return _table().copy()


@cache
def _by_rank() -> dict[str, dict[str, tuple[float, str, str]]]:
    """Rank -> name -> (density, source, known)."""
    table = _table()
    found: dict[str, dict[str, tuple[float, str, str]]] = {}
    for rank, part in table.groupby("rank", sort=False):
        found[str(rank)] = {
            name: (value, source, known)
            for name, value, source, known in zip(
                part["accepted_name"], part["density_g_cm3"], part["source_key"], part["known"], strict=True
            )
        }
    species = table[table["rank"].eq("species") & table["known"].ne("memory")]
    for rank in ("genus", "family"):
        published = found.setdefault(rank, {})
        for name, part in species[species[rank] != ""].groupby(rank):
            sources = "+".join(sorted(part["source_key"].unique()))
            mean = round(float(part["density_g_cm3"].mean()), 3)
            published.setdefault(str(name), (mean, f"mean of listed species, {sources}", "read"))
    return found


@cache
def _region_taxon(region: str) -> str:
    table = read_data("wood_density_regions").set_index("region")["taxon"]
    return str(table.get(region, ""))


def _overrides(given: Mapping[str, float] | None) -> dict[str, float]:
    """User values by accepted name and by the name as given."""
    if not given:
        return {}
    values: dict[str, float] = {}
    accepted = parse_names(list(given))["accepted_name"]
    for (name, value), short in zip(given.items(), accepted, strict=True):
        number = float(value)
        if not _LOWEST <= number <= _HIGHEST:
            raise AllometryError(
                f"wood density {value!r} for {name!r} is not between {_LOWEST} and {_HIGHEST} g/cm3; "
                "give oven-dry mass over green volume in g/cm3 (divide kg/m3 by 1000)."
            )
        values[str(name).strip()] = number
        if short:
            values[short] = number
    return values


def wood_density(
    names: Iterable[str], overrides: Mapping[str, float] | None = None, *, region: str | None = None
) -> pd.DataFrame:
    """Wood density of each name by the nearest rank that has a value.

    Parameters
    ----------
    names : Series or iterable of str
        Scientific names as written.
    overrides : mapping, optional
        Own values [g/cm3] by species or genus; they come first.
    region : str, optional
        north_america, europe, tropics, mangrove or australia; its mean serves where species, genus and family have
        none.

    Returns
    -------
    DataFrame
        On the index of ``names``: wood_density_g_cm3, wood_density_rank (given, species, genus, family, region,
        global), wood_density_source (key of the publication), wood_density_known (read, secondary, memory; "given"
        for own values) and wood_density_taxon (the name the value stands under).

    Raises
    ------
    AllometryError
        If an own value is outside what wood can be.

    Notes
    -----
    A genus or family without a published mean takes the plain mean of its listed species, marked so in the source.
    """
    parsed = parse_names(names)
    own = _overrides(overrides)
    as_given = (
        names.astype(str) if isinstance(names, pd.Series) else pd.Series([str(n) for n in names], index=parsed.index)
    )
    keys = pd.MultiIndex.from_arrays([as_given.str.strip(), parsed["accepted_name"], parsed["genus"], parsed["family"]])
    codes, distinct = pd.factorize(keys)
    rows = [_lookup(tuple(key), own, region) for key in distinct]
    result = pd.DataFrame(rows, columns=DENSITY_COLUMNS).take(codes)
    result.index = parsed.index
    result["wood_density_g_cm3"] = result["wood_density_g_cm3"].astype("float64")
    return result


def _lookup(
    key: tuple[str, str, str, str], own: dict[str, float], region: str | None
) -> tuple[float, str, str, str, str]:
    given, accepted, genus, family = key
    for name in (given, accepted, genus):
        if name and name in own:
            return own[name], "given", "given", "given", name
    tables = _by_rank()
    ladder = [("species", accepted), ("genus", genus), ("family", family)]
    if region is not None:
        ladder.append(("region", _region_taxon(region)))
    for rank, name in ladder:
        found = tables.get(rank, {}).get(name) if name else None
        if found is not None:
            value, source, known = found
            return value, rank, source, known, name
    (name, (value, source, known)) = next(iter(tables["global"].items()))
    return value, "global", source, known, name
