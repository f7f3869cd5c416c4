"""The rungs of the assignment ladder and how they are walked; the public face is :mod:`allometry.assign`."""

from __future__ import annotations

from collections.abc import Callable, Iterable, Iterator, Sequence
from dataclasses import dataclass, replace
from functools import cache
from math import inf, isnan
from typing import NamedTuple

import pandas as pd

from allometry._data import read_data
from allometry._groups import Listed, family_groups, species_groups
from allometry.names import parse_names

__all__ = ["WHOLE", "Choice", "Index", "Row", "Tree", "Wishes", "build_index", "missing_inputs", "walk"]

WHOLE = {"agb": 0, "agb_no_stump": 1, "agb_woody": 2}
"""Components that stand for the tree above ground, the more complete first."""
LACKS = {"agb_no_stump": "the stump is missing from it", "agb_woody": "foliage is missing from it"}
HEIGHT, STRESS = "height_m", "stress"
ALWAYS = frozenset({"dbh_cm", "wood_density_g_cm3"})
"""Inputs every tree has: a diameter, and a wood density from its name."""
UNKNOWN = "unknown"
TAXON_SEPARATOR = ";"
"""Between the names of an equation published for several species."""


class Row(NamedTuple):
    """What the ladder needs to know of an equation."""

    equation_id: str
    source_key: str
    taxon: str
    rank: str
    accepted_names: tuple[str, ...]
    genera: tuple[str, ...]
    family: str
    region: str
    country: str
    component: str
    inputs: frozenset[str]
    dbh_max_cm: float
    n_trees: float
    known: str
    eligible: bool

    @property
    def uses_height(self) -> bool:
        """Whether the equation needs a height."""
        return HEIGHT in self.inputs

    @property
    def documented(self) -> bool:
        """Whether the diameter range or the sample size was published."""
        return not (isnan(self.dbh_max_cm) and isnan(self.n_trees))


@dataclass(frozen=True)
class Tree:
    """One species code after its name was read."""

    accepted_name: str
    genus: str
    family: str
    group: str
    density: float
    has_height: bool


@dataclass(frozen=True)
class Wishes:
    """What the user asked for, and which rows a walk may use."""

    region: str
    country: str = ""
    use_height: str | bool = "auto"
    has_stress: bool = False
    source: str = ""
    memory: bool = False

    def allows(self, row: Row, tree: Tree) -> bool:
        """Whether a row may be taken on this walk for this tree."""
        if not row.eligible or (self.source and row.source_key != self.source):
            return False
        if row.known == "memory" and not self.memory:
            return False
        if self.use_height is True and not row.uses_height:
            return False
        return not missing_inputs(row, tree, self)

    def local(self, row: Row) -> bool:
        """Whether a row was published for the region."""
        return row.region in (self.region, "any")


class Choice(NamedTuple):
    """An equation, the rung it stands on, and why it was taken."""

    row: Row
    rung: str
    reason: str


@dataclass(frozen=True)
class Index:
    """The equations of above-ground mass, by what they were published for."""

    by_id: dict[str, Row]
    by_species: dict[str, list[Row]]
    by_genus: dict[str, list[Row]]
    by_congener: dict[str, list[Row]]
    by_family: dict[str, list[Row]]


def missing_inputs(row: Row, tree: Tree, wishes: Wishes) -> list[str]:
    """List inputs a row needs and the trees of a species do not have."""
    available = set(ALWAYS)
    if tree.has_height and wishes.use_height is not False:
        available.add(HEIGHT)
    if wishes.has_stress:
        available.add(STRESS)
    return sorted(row.inputs - available)


@cache
def _limits() -> dict[str, float]:
    table = read_data("ladder_rules", numbers=("value",))
    return dict(zip(table["rule"], table["value"], strict=True))


@cache
def _updates() -> dict[str, str]:
    table = read_data("publication_order")
    return dict(zip(table["source_key"], table["replaced_by"], strict=True))


class _Generic(NamedTuple):
    equation_id: str
    reason: str


@cache
def _generics() -> dict[tuple[str, str], list[_Generic]]:
    table = read_data("generics", numbers=("order",)).sort_values("order", kind="stable")
    found: dict[tuple[str, str], list[_Generic]] = {}
    for region, group, equation, reason in zip(
        table["region"], table["group"], table["equation_id"], table["reason"], strict=True
    ):
        found.setdefault((region, group), []).append(_Generic(equation, reason))
    return found


def build_index(table: pd.DataFrame) -> Index:
    """Sort the catalogue's rows of above-ground mass by taxon.

    Parameters
    ----------
    table : DataFrame
        ``Catalogue.table``.

    Returns
    -------
    Index
        Rows that are not usable, were screened out, or reach only saplings are in ``by_id`` but on no rung.
    """
    table = table[table["component"].isin(list(WHOLE))].sort_values("equation_id")
    taxa = table["taxon"].where(table["rank"].isin(["species", "genus"]), "").str.split(TAXON_SEPARATOR)
    names = parse_names(taxa.explode())
    accepted = names["accepted_name"].groupby(names.index, sort=False).agg(tuple)
    genera = names["genus"].groupby(names.index, sort=False).agg(_distinct)
    eligible = table["usable"] & ~table["screened"] & ~(table["dbh_max_cm"] < _limits()["sapling_limit"])
    rows = [
        Row(
            equation_id=str(given.equation_id),
            source_key=str(given.source_key),
            taxon=str(given.taxon),
            rank=str(given.rank),
            accepted_names=accepted_names,
            genera=genus_names,
            family=str(given.family),
            region=str(given.region),
            country=str(given.country),
            component=str(given.component),
            inputs=frozenset(part for part in str(given.inputs).split(";") if part),
            dbh_max_cm=float(str(given.dbh_max_cm)),
            n_trees=float(str(given.n_trees)),
            known=str(given.known),
            eligible=bool(may),
        )
        for given, accepted_names, genus_names, may in zip(
            table[_COLUMNS].itertuples(), accepted.loc[table.index], genera.loc[table.index], eligible, strict=True
        )
    ]
    return Index(
        {row.equation_id: row for row in rows},
        _grouped(rows, "species", lambda row: row.accepted_names),
        _grouped(rows, "genus", lambda row: row.genera),
        _grouped(rows, "species", lambda row: row.genera),
        _grouped(rows, "family", lambda row: (row.family,)),
    )


def _distinct(names: pd.Series) -> tuple[str, ...]:
    return tuple(dict.fromkeys(names))


_COLUMNS = [
    "equation_id",
    "source_key",
    "taxon",
    "rank",
    "family",
    "region",
    "country",
    "component",
    "inputs",
    "dbh_max_cm",
    "n_trees",
    "known",
]


def _grouped(rows: Iterable[Row], rank: str, keys: Callable[[Row], tuple[str, ...]]) -> dict[str, list[Row]]:
    found: dict[str, list[Row]] = {}
    for row in rows:
        if row.rank == rank and row.eligible:
            for name in filter(None, keys(row)):
                found.setdefault(name, []).append(row)
    return found


def walk(index: Index, tree: Tree, wishes: Wishes, sources: Sequence[str]) -> Choice | None:
    """Find the equation of a species.

    Parameters
    ----------
    index : Index
        The equations.
    tree : Tree
        The species.
    wishes : Wishes
        Region, country and inputs.
    sources : sequence of str
        Publications to be used first, in this order.

    Returns
    -------
    Choice or None
        None if no rung of any walk has an equation that can be computed.
    """
    for source in sources:
        for memory in (False, True):
            choice = _climb(index, tree, replace(wishes, source=source, memory=memory), [tree.group or UNKNOWN])
            if choice is not None:
                note = f"; {source} was named first by the user"
                return choice._replace(reason=choice.reason + note)
    for groups in _group_orders(tree):
        for memory in (False, True):
            choice = _climb(index, tree, replace(wishes, memory=memory), groups)
            if choice is not None:
                return choice
    return None


def _group_orders(tree: Tree) -> Iterator[list[str]]:
    """Yield the growth groups whose generic equations may serve, own group first."""
    if tree.group:
        yield [tree.group]
    yield [UNKNOWN]


def _climb(index: Index, tree: Tree, wishes: Wishes, groups: list[str]) -> Choice | None:
    for rung, candidates, why in _rungs(index, tree, wishes):
        usable = [row for row in candidates if wishes.allows(row, tree)]
        if usable:
            return _best(rung, usable, why, wishes, tree)
    return _generic(index, tree, wishes, groups)


def _rungs(index: Index, tree: Tree, wishes: Wishes) -> Iterator[tuple[str, list[Row], dict[str, str]]]:
    """Yield the name of a rung, its candidates, and for group equations why the species belongs to them."""
    if tree.accepted_name and tree.accepted_name != tree.genus:
        yield "species", _local(index.by_species.get(tree.accepted_name, []), wishes), {}
    if tree.genus:
        yield "genus", _local(index.by_genus.get(tree.genus, []), wishes), {}

    def allowed(equation_id: str) -> bool:
        row = index.by_id.get(equation_id)
        return row is not None and wishes.local(row) and wishes.allows(row, tree)

    listed = species_groups(tree.accepted_name, tree.genus, tree.family, tree.density, allowed)
    yield "group", _rows(index, listed), {item.equation_id: item.why for item in listed}
    if tree.genus:
        # Lent to another species, an equation must at least say on what it rests.
        congeners = [row for row in index.by_congener.get(tree.genus, []) if row.documented]
        yield "genus", _local(congeners, wishes), {}
    if tree.family:
        listed = family_groups(tree.family, tree.density, allowed)
        of_family = _local(index.by_family.get(tree.family, []), wishes)
        yield "family", of_family + _rows(index, listed), {item.equation_id: item.why for item in listed}


def _local(rows: list[Row], wishes: Wishes) -> list[Row]:
    return [row for row in rows if wishes.local(row)]


def _rows(index: Index, listed: list[Listed]) -> list[Row]:
    return [index.by_id[item.equation_id] for item in listed]


def _best(rung: str, candidates: list[Row], why: dict[str, str], wishes: Wishes, tree: Tree) -> Choice:
    sources = {row.source_key for row in candidates}
    current = [row for row in candidates if _updates().get(row.source_key) not in sources]
    completest = min(WHOLE[row.component] for row in current)
    complete = [row for row in current if WHOLE[row.component] == completest]
    row = min(complete, key=lambda row: _order(row, wishes, tree))
    return Choice(row, rung, _reason(row, rung, len(candidates) - 1, why.get(row.equation_id, ""), tree))


def _order(row: Row, wishes: Wishes, tree: Tree) -> tuple[bool, bool, bool, bool, float, float, str]:
    limits = _limits()
    # A handful of trees from the right country is no better than a large sample from the next one.
    is_home = row.country.lower() == wishes.country.lower() and row.n_trees >= limits["local_trees_limit"]
    return (
        row.dbh_max_cm < limits["small_tree_limit"],
        row.n_trees < limits["few_trees_limit"],
        not is_home,
        tree.has_height and wishes.use_height is not False and not row.uses_height,
        -row.dbh_max_cm if not isnan(row.dbh_max_cm) else inf,
        -row.n_trees if not isnan(row.n_trees) else inf,
        row.equation_id,
    )


def _generic(index: Index, tree: Tree, wishes: Wishes, groups: list[str]) -> Choice | None:
    for group in groups:
        offered = [
            (index.by_id[generic.equation_id], generic.reason)
            for generic in _generics().get((wishes.region, group), [])
            if generic.equation_id in index.by_id
        ]
        usable = [(row, reason) for row, reason in offered if wishes.allows(row, tree)]
        if usable:
            row, reason = usable[0]
            taken = _told(row)
            return Choice(row, "generic", f"{_need(tree, group)}: {taken}, {reason}{_remark(row)}")
    return None


def _need(tree: Tree, group: str) -> str:
    name = tree.accepted_name or tree.family
    if not name:
        return f"species not known{f', but a {tree.group}' if tree.group else ''}".replace("_", " ")
    text = f"no equation at hand for {name}"
    return text if group == tree.group else f"{text} nor for a {tree.group.replace('_', ' ')} of the region"


def _told(row: Row) -> str:
    place = row.country or row.region.replace("_", " ")
    return f"{row.equation_id}, published for {row.taxon} ({place})"


def _remark(row: Row) -> str:
    parts = []
    if row.component in LACKS:
        parts.append(LACKS[row.component])
    if row.known == "memory":
        parts.append("its coefficients are recalled, not read")
    return "".join(f"; {part}" for part in parts)


def _reason(row: Row, rung: str, others: int, why: str, tree: Tree) -> str:
    text = _told(row)
    if why:
        text += f"; {why}"
    elif rung == "genus" and row.rank == "species":
        text += f"; another species of the genus, as none is at hand for {tree.accepted_name or tree.genus}"
    if row.uses_height:
        text += "; uses height"
    if others:
        text += f"; {others} other equation{'s' if others > 1 else ''} on this rung passed over"
    return text + _remark(row)
