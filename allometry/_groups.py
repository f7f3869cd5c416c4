"""Published species groups: which group of which publication a species belongs to.

Joined on names only. The numeric species codes printed beside the names were given to other species since.
"""

from __future__ import annotations

from collections.abc import Callable, Iterator
from functools import cache
from math import isnan
from typing import NamedTuple

from allometry._data import read_data
from allometry.names import parse_names

__all__ = ["Listed", "family_groups", "species_groups"]


class Listed(NamedTuple):
    """An equation of a publication for a group of species, and why the species belongs there."""

    source_key: str
    equation_id: str
    why: str


@cache
def _listed() -> dict[str, list[Listed]]:
    """Map accepted names (a genus alone for ``spp.``) to the groups that list them.

    Groups whose diameter is that of the root collar are left out: a diameter at breast height does not fit them.
    """
    table = read_data("species_groups")
    table = table[table["measured_at"] == "dbh"]
    found: dict[str, list[Listed]] = {}
    for name, source, equation, group in zip(
        parse_names(table["scientific_name"])["accepted_name"],
        table["source_key"],
        table["equation_id"],
        table["group_name"],
        strict=True,
    ):
        if name:
            found.setdefault(name, []).append(Listed(source, equation, f"its group {group!r} lists {name}"))
    return found


@cache
def _by_genus() -> dict[str, list[Listed]]:
    """Map genera to groups ordered by how many of its species they list (ties by equation id)."""
    counts: dict[str, dict[tuple[str, str], int]] = {}
    for name, groups in _listed().items():
        for listed in groups:
            seen = counts.setdefault(name.split()[0], {})
            key = (listed.source_key, listed.equation_id)
            seen[key] = seen.get(key, 0) + 1
    return {
        genus: [
            Listed(source, equation, f"its group lists {number} taxa of {genus}")
            for (source, equation), number in sorted(seen.items(), key=lambda item: (-item[1], item[0]))
        ]
        for genus, seen in counts.items()
    }


class _Rule(NamedTuple):
    source_key: str
    equation_id: str
    density_from: float
    density_below: float


@cache
def _rules() -> dict[tuple[str, str], list[_Rule]]:
    table = read_data("group_rules", numbers=("density_from", "density_below"))
    rules: dict[tuple[str, str], list[_Rule]] = {}
    bounds = table[["density_from", "density_below"]].to_numpy(dtype=float)
    for row, (low, high) in zip(table.itertuples(index=False), bounds, strict=True):
        source, equation, rank, taxon = (
            str(getattr(row, name)) for name in ("source_key", "equation_id", "rank", "taxon")
        )
        rules.setdefault((rank, taxon), []).append(_Rule(source, equation, low, high))
    return rules


def _by_rule(rank: str, name: str, density: float) -> list[Listed]:
    """List the groups told by name and class of wood density.

    Classes are printed with two decimals and gaps (0.30-0.39, then 0.40 and more): a class ends where the next begins.
    """
    found = []
    for rule in _rules().get((rank, name), []):
        if density < rule.density_from or density >= rule.density_below:
            continue
        by_density = not (isnan(rule.density_from) and isnan(rule.density_below))
        words = f"its group holds {name}" + (f" of wood density {density:.2f} g/cm3" if by_density else "")
        found.append(Listed(rule.source_key, rule.equation_id, words))
    return found


def species_groups(
    accepted_name: str, genus: str, family: str, density: float, allowed: Callable[[str], bool]
) -> list[Listed]:
    """Find for each publication the most telling of its groups for a species.

    Parameters
    ----------
    accepted_name, genus, family : str
        The species after its name was read; "" where not known.
    density : float
        Wood density [g/cm3], for publications that split by it.
    allowed : callable
        Whether an equation id may be used at all.

    Returns
    -------
    list of Listed
        At most one per publication: by the name of the species, else by a rule for the species, the genus, or the
        family of a genus the publication treats, else by its ``spp.`` entry, else the group with most species of the
        genus.
    """
    if not genus:
        return []
    treated = {listed.source_key for listed in _by_genus().get(genus, [])}
    ways: Iterator[list[Listed]] = iter(
        [
            _listed().get(accepted_name, []) if accepted_name != genus else [],
            _by_rule("species", accepted_name, density),
            _by_rule("genus", genus, density),
            [listed for listed in _by_rule("family", family, density) if listed.source_key in treated],
            _listed().get(genus, []),
            _by_genus().get(genus, []),
        ]
    )
    return _first_of_each(ways, allowed)


def family_groups(family: str, density: float, allowed: Callable[[str], bool]) -> list[Listed]:
    """Find for each publication its group for a family, by class of wood density.

    Parameters
    ----------
    family : str
        Family name.
    density : float
        Wood density [g/cm3].
    allowed : callable
        Whether an equation id may be used at all.

    Returns
    -------
    list of Listed
        At most one per publication.
    """
    return _first_of_each(iter([_by_rule("family", family, density)]), allowed) if family else []


def _first_of_each(ways: Iterator[list[Listed]], allowed: Callable[[str], bool]) -> list[Listed]:
    found: dict[str, Listed] = {}
    for way in ways:
        for listed in way:
            if allowed(listed.equation_id):
                found.setdefault(listed.source_key, listed)
    return list(found.values())
