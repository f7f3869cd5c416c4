"""Which equation serves which species: a ladder, walked the same way every time.

Rungs, from the most to the least specific:

1. ``explicit``: named by the user for a species code, a species or a genus;
2. ``species``: published for the species;
3. ``genus``: published for the genus;
4. ``group``: a published group that names the species or holds its genus, by wood density where the group is told so;
5. ``genus`` again: published for another species of the genus, with its diameter range or its sample size told;
6. ``family``: published for the family;
7. ``generic``: many species of the region (``data/generics.csv``).

A group comes before another species of the genus because its authors placed the species there: a southern pine is
nearer to the pines of its own wood density than to a northern pine that happens to be in the catalogue.

On each rung the choice goes by: whole above-ground mass before mass without stump, and that before mass without
foliage; an equation whose publication was updated gives way to the update (``data/publication_order.csv``); equations
that reach beyond small trees and rest on more than a handful of trees first; country, if the sample is not small
(``data/ladder_rules.csv``); height if it is measured; the larger greatest diameter, known before unknown; the larger
sample; the id. The result does not depend on the order of the rows.

Trust: the ladder is walked with the publications the user prefers, one after the other, then with all. Each walk
takes rows that were read or are quoted elsewhere; rows known from memory serve only if nothing else covers the tree,
or if the user names the equation or its publication. Equations set aside by the screening of the catalogue are never
taken unless the user names them.
"""

from __future__ import annotations

from collections.abc import Mapping, Sequence
from difflib import get_close_matches
from functools import cache

import pandas as pd

from allometry._data import read_data
from allometry._ladder import WHOLE, Choice, Index, Row, Tree, Wishes, build_index, missing_inputs, walk
from allometry.catalogue import load_catalogue
from allometry.density import wood_density
from allometry.errors import AllometryError
from allometry.names import parse_names

__all__ = ["ASSIGN_COLUMNS", "REGIONS", "assign"]

REGIONS = ("north_america", "europe", "tropics", "mangrove", "australia")
"""Regions a user may name."""

ASSIGN_COLUMNS = [
    "species",
    "scientific_name",
    "accepted_name",
    "genus",
    "family",
    "conifer",
    "equation_id",
    "rung",
    "known",
    "reason",
    "wood_density_g_cm3",
    "wood_density_rank",
    "wood_density_known",
    "name_known",
    "suggestion",
]
"""Columns of :func:`assign`."""


def assign(
    species: pd.DataFrame,
    *,
    region: str,
    country: str | None = None,
    sources: Sequence[str] = (),
    explicit: Mapping[str, str] | None = None,
    use_height: str | bool = "auto",
    overrides: Mapping[str, float] | None = None,
    has_stress: bool = False,
) -> pd.DataFrame:
    """Give every species code an equation for above-ground mass.

    Parameters
    ----------
    species : DataFrame
        Columns ``species`` (the code, unique), ``scientific_name`` (as the user has it) and ``has_height`` (True
        where the trees of the code have, or will be given, a height).
    region : str
        One of :data:`REGIONS`.
    country : str, optional
        Sharpens the choice where several equations serve a species.
    sources : sequence of str
        Keys of publications to be used first, in this order.
    explicit : mapping, optional
        Species code or scientific name (a genus stands for all its species) -> equation id. A code goes before a
        species, a species before a genus.
    use_height : {"auto", True, False}
        "auto": prefer an equation with height where the species has heights; True: only such; False: none.
    overrides : mapping, optional
        Own wood densities [g/cm3] by scientific name.
    has_stress : bool
        Whether the bioclimatic stress of the site is given, which one tropical equation needs.

    Returns
    -------
    DataFrame
        One row per species code with the columns :data:`ASSIGN_COLUMNS`. ``rung`` is explicit, species, genus,
        family, group or generic; ``known`` is read, secondary or memory for the coefficients of the equation;
        ``reason`` says in one sentence why it was taken.

    Raises
    ------
    AllometryError
        If the region or a publication is not known, a code is given twice, an equation named by the user cannot be
        computed or is not one of above-ground mass, or ``use_height`` is True and a species has no height.
    UnknownEquationError
        If an equation named by the user is not in the catalogue.

    Examples
    --------
    >>> frame = pd.DataFrame({"species": ["PA"], "scientific_name": ["Picea abies"], "has_height": [False]})
    >>> assign(frame, region="europe")[["rung", "known"]].to_numpy().tolist()
    [['species', 'secondary']]
    """
    index = _index()
    wishes = _wishes(region, country, use_height, has_stress)
    _check_sources(sources)
    table = _read_species(species)
    names = parse_names(table["scientific_name"])
    density = wood_density(table["scientific_name"], overrides, region=region)
    trees = [
        Tree(*values)
        for values in zip(
            names["accepted_name"],
            names["genus"],
            names["family"],
            names["group"],
            density["wood_density_g_cm3"],
            table["has_height"],
            strict=True,
        )
    ]
    _check_heights(table, wishes)
    named = _named(table, names, explicit)
    choices = [
        _explicit(index, wanted, tree, wishes, code) if wanted else _ladder(index, tree, wishes, tuple(sources), code)
        for code, tree, wanted in zip(table["species"], trees, named, strict=True)
    ]
    return _result(table, names, density, choices)


@cache
def _index() -> Index:
    return build_index(load_catalogue().table)


def _wishes(region: str, country: str | None, use_height: str | bool, has_stress: bool) -> Wishes:
    if region not in REGIONS:
        raise AllometryError(f"region {region!r} is not known; accepted: {', '.join(REGIONS)}.")
    if not (isinstance(use_height, bool) or use_height == "auto"):
        raise AllometryError(f'use_height {use_height!r} is not known; accepted: "auto", true, false.')
    aliases = read_data("country_names").set_index("alias")["country"]
    given = (country or "").strip()
    return Wishes(region, str(aliases.get(given.lower(), given)), use_height, has_stress)


def _check_sources(sources: Sequence[str]) -> None:
    known = sorted(load_catalogue().table["source_key"].unique())
    for source in sources:
        if source not in known:
            near = get_close_matches(source, known, n=3, cutoff=0.5)
            hint = f"near: {', '.join(near)}" if near else f"known: {', '.join(known)}"
            raise AllometryError(f"publication {source!r} is not in the catalogue; {hint}.")


def _read_species(species: pd.DataFrame) -> pd.DataFrame:
    missing = {"species", "scientific_name", "has_height"} - set(species.columns)
    if missing:
        raise AllometryError(f"the species table lacks the columns {', '.join(sorted(missing))}.")
    table = species[["species", "scientific_name", "has_height"]].copy()
    for column in ("species", "scientific_name"):
        values = table[column].astype("object")
        table[column] = values.where(values.notna(), "").astype(str)
    table["has_height"] = table["has_height"].astype(bool)
    twice = table.loc[table["species"].duplicated(), "species"].unique()
    if len(twice):
        raise AllometryError(f"species codes given more than once: {', '.join(map(repr, sorted(twice)))}.")
    return table


def _check_heights(table: pd.DataFrame, wishes: Wishes) -> None:
    if wishes.use_height is True and not table["has_height"].all():
        codes = table.loc[~table["has_height"], "species"]
        shown = ", ".join(map(repr, sorted(codes)[:10]))
        raise AllometryError(
            f"equations with height are asked for, but {len(codes)} species have no height ({shown}); "
            'measure or impute heights, or set use_height = "auto".'
        )


def _named(table: pd.DataFrame, names: pd.DataFrame, explicit: Mapping[str, str] | None) -> list[str]:
    """Equation the user names for each code, "" where none."""
    if not explicit:
        return [""] * len(table)
    codes = {str(key).strip(): str(value) for key, value in explicit.items()}
    taxa = {
        accepted: value
        for accepted, value in zip(parse_names(list(codes))["accepted_name"], codes.values(), strict=True)
        if accepted
    }
    return [
        codes.get(code) or codes.get(given.strip()) or taxa.get(accepted) or taxa.get(genus) or ""
        for code, given, accepted, genus in zip(
            table["species"], table["scientific_name"], names["accepted_name"], names["genus"], strict=True
        )
    ]


def _explicit(index: Index, equation_id: str, tree: Tree, wishes: Wishes, code: str) -> Choice:
    equation = load_catalogue().row(equation_id)
    row: Row | None = index.by_id.get(equation.equation_id)
    if row is None:
        raise AllometryError(
            f"equation {equation_id!r}, named for species {code!r}, gives {equation.component!r}, "
            f"not the mass above ground; accepted components: {', '.join(WHOLE)}."
        )
    missing = missing_inputs(row, tree, wishes)
    if missing:
        raise AllometryError(
            f"equation {equation_id!r}, named for species {code!r}, needs {', '.join(missing)}, "
            "which its trees do not have."
        )
    remarks = [f"{row.equation_id}, named by the user", equation.usable_reason]
    if equation.screened:
        remarks.append(f"it was set aside by the screening ({equation.screen_ratio:.2g} times the others of its genus)")
    if row.known == "memory":
        remarks.append("its coefficients are recalled, not read")
    return Choice(row, "explicit", "; ".join(filter(None, remarks)))


def _ladder(index: Index, tree: Tree, wishes: Wishes, sources: tuple[str, ...], code: str) -> Choice:
    choice = walk(index, tree, wishes, sources)
    if choice is None:
        raise AllometryError(
            f"no equation can be computed for species {code!r} in region {wishes.region!r} with the inputs at hand; "
            "name one for it, or relax use_height."
        )
    return choice


def _result(table: pd.DataFrame, names: pd.DataFrame, density: pd.DataFrame, choices: list[Choice]) -> pd.DataFrame:
    result = pd.DataFrame(
        {
            "species": table["species"],
            "scientific_name": table["scientific_name"],
            "accepted_name": names["accepted_name"],
            "genus": names["genus"],
            "family": names["family"],
            "conifer": names["group"] == "conifer",
            "equation_id": [choice.row.equation_id for choice in choices],
            "rung": [choice.rung for choice in choices],
            "known": [choice.row.known for choice in choices],
            "reason": [choice.reason for choice in choices],
            "wood_density_g_cm3": density["wood_density_g_cm3"],
            "wood_density_rank": density["wood_density_rank"],
            "wood_density_known": density["wood_density_known"],
            "name_known": names["known_name"],
            "suggestion": names["suggestion"],
        }
    )
    return result[ASSIGN_COLUMNS]
