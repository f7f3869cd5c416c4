"""Checks of the project file about the pools that look at more than one key."""

from __future__ import annotations

from landcarbon.inventory.faults import Fault
from landcarbon.inventory.locate import Path
from landcarbon.inventory.measured import PART_TABLES, chosen_parts, surveys_with_trees, tables_given
from landcarbon.inventory.models import POOL_NAMES, SAMPLE_TABLES, Settings
from landcarbon.inventory.nearest import suggestion

__all__ = ["pool_faults"]

# What this version can do for each pool; anything else would be promised and not kept.
_HOW = {
    "above_ground": ("measured", "not counted"),
    "below_ground": ("ratio", "not counted"),
    "dead_wood": ("measured", "default", "not counted"),
    "litter": ("measured", "default", "not counted"),
    "soil": ("measured", "default", "not counted"),
    "harvested_wood": ("not counted",),
}

# The share of coarse fragments has to be known for these kinds of bulk density; the third has it inside.
_WITH_COARSE = ("fine per fine volume", "whole per whole volume")

_TREES = "Give trees = 'FILE' under a survey, or file = 'FILE' under [trees]."
_NO_TREES = "Without trees say {pool} = {{ how = 'not counted', reason = '...' }} under [pools]."

_BOLE_ONLY = "3"  # status of dead mangroves beyond those with a share of the mass lost: nothing left but the bole


def pool_faults(settings: Settings) -> list[Fault]:
    """Check how the pools are obtained against the tables and figures given.

    Parameters
    ----------
    settings : Settings
        Sound settings.
    """
    return [
        *_how_faults(settings),
        *_part_faults(settings),
        *_root_faults(settings),
        *_table_faults(settings),
        *_line_faults(settings),
        *_class_faults(settings),
        *_soil_faults(settings),
    ]


def _measured(settings: Settings, pool: str) -> bool:
    return bool(getattr(settings.pools, pool).how == "measured")


def _how_faults(settings: Settings) -> list[Fault]:
    faults = []
    for name in POOL_NAMES:
        how = getattr(settings.pools, name).how
        if how not in _HOW[name]:
            accepted = ", ".join(f"'{word}'" for word in _HOW[name])
            faults.append(Fault(("pools", name), f"{how!r} is not available for this pool", f"Accepted: {accepted}."))
    return faults


def _part_faults(settings: Settings) -> list[Fault]:
    """Check that the parts named exist and have a table, and that there is any part at all."""
    given, trees = tables_given(settings), surveys_with_trees(settings)
    faults = []
    for pool, known in PART_TABLES.items():
        named = getattr(settings.pools, pool).parts
        if not _measured(settings, pool):
            continue
        for place, part in enumerate(named or ()):
            path: Path = ("pools", pool, "parts", place)
            if part not in known:
                remedy = f"{suggestion(part, known)} Parts of {pool}: {', '.join(known)}.".strip()
                faults.append(Fault(path, f"no part {part!r} of {pool}", remedy))
            elif known[part] and not set(known[part]) & set(given):
                faults.append(Fault(path, f"the part {part!r} has no table", _give(known[part])))
            elif not known[part] and not trees:
                faults.append(Fault(path, f"the part {part!r} has no tree table", _TREES))
        if named is None and not chosen_parts(settings, pool):
            tables = tuple(dict.fromkeys(table for names in known.values() for table in names))
            told = _NO_TREES.format(pool=pool) + " " if () in known.values() and not trees else ""
            what = "measured, but there is no table of measurements"
            faults.append(Fault(("pools", pool), what, told + _give(tables)))
    return faults


def _root_faults(settings: Settings) -> list[Fault]:
    if settings.pools.below_ground.how != "ratio" or surveys_with_trees(settings):
        return []
    what = "roots are a ratio to the biomass of trees, but there is no tree table"
    return [Fault(("pools", "below_ground"), what, _NO_TREES.format(pool="below_ground"))]


def _give(tables: tuple[str, ...]) -> str:
    wanted = " or ".join(f"{table} = 'FILE'" for table in tables)
    return f"Give {wanted} under a survey or under [samples]."


def _table_faults(settings: Settings) -> list[Fault]:
    faults = []
    for name, survey in settings.surveys.items():
        for table in SAMPLE_TABLES:
            if getattr(survey, table) and getattr(settings.samples, table):
                what = f"tables of {table} are given both here and under [samples]"
                faults.append(Fault(("surveys", name, table), what, "Keep one of the two."))
    given = tables_given(settings)
    if "lines" in given and "pieces" not in given:
        owner = next((name for name, survey in settings.surveys.items() if survey.lines), None)
        path: Path = ("samples", "lines") if owner is None else ("surveys", owner, "lines")
        faults.append(Fault(path, "a table of lines, but none of the pieces found on them", _give(("pieces",))))
    return faults


def _line_faults(settings: Settings) -> list[Fault]:
    """Check that the lengths of the lines can be known."""
    wood, mapped = settings.dead_wood, settings.columns.get("pieces", {})
    if not _measured(settings, "dead_wood") or wood.line_m is not None or mapped.get("line_length"):
        return []
    classes = wood.classes.values()
    if classes and all(one.line_m is not None for one in classes):
        return []
    for name, survey in settings.surveys.items():
        pieces = survey.pieces or settings.samples.pieces
        if pieces and not (survey.lines or settings.samples.lines):
            path: Path = ("surveys", name, "pieces") if survey.pieces else ("samples", "pieces")
            told = "Give a table of lines, or line_m under [dead_wood] if all lines are of one length."
            return [Fault(path, "nothing tells how long the lines are on which the pieces were found", told)]
    return []


def _class_faults(settings: Settings) -> list[Fault]:
    """Check that the decay class of rows without one is among the classes in use: of down wood, of standing trees."""
    wood = settings.dead_wood
    if wood.missing_class is None:
        return []
    from landcarbon.factors.dead_wood import decay_classes, status_loss

    path: Path = ("dead_wood", "missing_class")
    sets = {"class_density": list(wood.class_density)} if wood.class_density else {"down wood": decay_classes()}
    if _measured(settings, "dead_wood") and "standing" in chosen_parts(settings, "dead_wood"):
        statuses = [*status_loss(), _BOLE_ONLY]
        standing = {"decay class": decay_classes(), "mangrove status": statuses}.get(wood.standing or "")
        sets.update({"standing dead trees": standing} if standing else {})
    faults = []
    for name, known in sets.items():
        if wood.missing_class not in known:
            near = suggestion(wood.missing_class, known)
            remedy = f"{near} Classes of {name}: {', '.join(known)}.".strip()
            faults.append(Fault(path, f"{wood.missing_class!r} is not among the decay classes of {name}", remedy))
    return faults[:1]


def _soil_faults(settings: Settings) -> list[Fault]:
    if not _measured(settings, "soil"):
        return []
    soil = settings.soil
    mapped, units = settings.columns.get("soil", {}), settings.units.get("soil", {})
    faults = []
    if soil.bulk_density is None:
        told = "Accepted: 'fine per whole volume', 'fine per fine volume', 'whole per whole volume'."
        what = "this key is missing; stocks differ by more than half between the kinds where the soil is stony"
        faults.append(Fault(_soil_key(settings, "bulk_density"), what, told))
    if soil.depth_cm is None and soil.mass_t_ha is None:
        told = "Give depth_cm, the reference depth, or mass_t_ha, the reference mass of fine soil."
        faults.append(Fault(_soil_key(settings, "depth_cm"), "no reference depth or mass is given", told))
    if soil.depth_cm is not None and soil.mass_t_ha is not None:
        what = "a reference depth and a reference mass are given"
        faults.append(Fault(("soil", "mass_t_ha"), what, "Keep one of the two."))
    has_coarse = bool(mapped.get("coarse") or ("coarse" in units and "coarse" not in mapped))
    if soil.coarse is None and has_coarse and soil.bulk_density in _WITH_COARSE:
        what = "this key is missing: the column of coarse fragments may hold shares by volume or by mass"
        faults.append(Fault(_soil_key(settings, "coarse"), what, "Accepted: 'volume', 'mass'."))
    carbon = [name for name in ("organic_carbon", "total_carbon") if mapped.get(name)]
    if mapped.get("organic_matter") and not carbon and soil.organic_matter_per_carbon is None:
        what = "this key is missing: organic matter is mapped, but nothing tells how much of it is carbon"
        faults.append(Fault(_soil_key(settings, "organic_matter_per_carbon"), what, "State the factor, e.g. 1.9."))
    return faults


def _soil_key(settings: Settings, key: str) -> Path:
    """Return the path of a missing key, so that the message points at [soil] or, without that table, at the pool."""
    return ("soil", key) if "soil" in settings.model_fields_set else ("pools", "soil")
