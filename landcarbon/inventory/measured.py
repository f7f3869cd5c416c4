"""Which parts of which pools are measured, and in which tables."""

from __future__ import annotations

from landcarbon.inventory.models import SAMPLE_TABLES, Settings

__all__ = ["PART_TABLES", "chosen_parts", "counted_tables", "measured_parts", "surveys_with_trees", "tables_given"]

#: Parts a user may name for each pool, and the tables any one of which they need (none: the tree table).
PART_TABLES: dict[str, dict[str, tuple[str, ...]]] = {
    "above_ground": {"trees": (), "saplings": ("saplings",), "ground_vegetation": ("ground_vegetation",)},
    "dead_wood": {
        "standing": (),
        "stumps": ("stumps",),
        "down": ("pieces", "logs"),
        "down_coarse": ("pieces", "logs"),
        "down_fine": ("pieces",),
    },
    "litter": {"litter": ("litter",), "duff": ("litter",)},
    "soil": {"soil": ("soil",)},
}

# Words of the project file that stand for more than one part, or for none of their own.
_MEANS = {"down": ("down_coarse", "down_fine")}
_DEFAULTS = {"dead_wood": ("standing", "stumps", "down")}


def tables_given(settings: Settings) -> tuple[str, ...]:
    """Return the sample tables the project file names, for all surveys or for some."""
    holders = [settings.samples, *settings.surveys.values()]
    return tuple(table for table in SAMPLE_TABLES if any(getattr(holder, table) for holder in holders))


def surveys_with_trees(settings: Settings) -> set[str]:
    """Return the surveys at which trees were tallied; at the others only samples were taken."""
    shared = bool(settings.trees.file)
    return {name for name, survey in settings.surveys.items() if survey.trees or shared}


def chosen_parts(settings: Settings, pool: str) -> tuple[str, ...]:
    """Return the parts of a measured pool in the words of the project file.

    Parameters
    ----------
    settings : Settings
        The project file.
    pool : str
        A pool with parts.

    Returns
    -------
    tuple of str
        As named there, or those that have a table.
    """
    named = getattr(settings.pools, pool).parts
    if named is not None:
        return tuple(named)
    known = PART_TABLES[pool]
    given = tables_given(settings)
    usual = _DEFAULTS.get(pool, tuple(known))
    trees = bool(surveys_with_trees(settings))
    return tuple(part for part in usual if (set(known[part]) & set(given) if known[part] else trees))


def counted_tables(settings: Settings) -> set[str]:
    """Return the sample tables whose contents enter a pool, were they given."""
    found = {"lines"}
    for pool, parts in PART_TABLES.items():
        if getattr(settings.pools, pool).how == "measured":
            found |= {table for part in chosen_parts(settings, pool) for table in parts[part]}
    return found


def measured_parts(settings: Settings) -> dict[str, tuple[str, ...]]:
    """Return the parts of every measured pool under the names of the program, e.g. ``down_coarse``.

    Parameters
    ----------
    settings : Settings
        The project file.

    Returns
    -------
    dict
        Pool to parts, in canonical order; only pools that are measured. Roots of dead trees are among the parts if
        they are counted.
    """
    found = {}
    for pool in PART_TABLES:
        if getattr(settings.pools, pool).how != "measured":
            continue
        parts = [name for part in chosen_parts(settings, pool) for name in _MEANS.get(part, (part,))]
        if pool == "dead_wood" and settings.dead_wood.roots == "dead_wood":
            parts.append("dead_roots")
        found[pool] = tuple(dict.fromkeys(parts))
    return found
