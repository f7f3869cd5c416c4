"""Checks of the project file that look at more than one key."""

from __future__ import annotations

from typing import Any

from landcarbon.inventory.columns import table_columns, table_names
from landcarbon.inventory.faults import Fault
from landcarbon.inventory.ids import id_faults
from landcarbon.inventory.models import SAMPLE_TABLES, Settings
from landcarbon.inventory.nearest import suggestion
from landcarbon.inventory.pool_cross import pool_faults
from landcarbon.inventory.units import accepted_units, dimension_of

__all__ = ["column_faults", "settings_faults"]


def column_faults(raw: dict[str, Any]) -> list[Fault]:
    """Check the table, column and unit names under ``[columns]`` and ``[units]``.

    Parameters
    ----------
    raw : dict
        Settings as read from the file, whether or not the rest of them is sound.
    """
    faults: list[Fault] = []
    for section in ("columns", "units"):
        tables = raw.get(section)
        for table, entries in tables.items() if isinstance(tables, dict) else ():
            faults += _table_faults(section, table, entries)
    return faults


def _table_faults(section: str, table: str, entries: Any) -> list[Fault]:
    if table not in table_names():
        remedy = suggestion(table, table_names()) or f"Known tables: {', '.join(table_names())}."
        return [Fault((section, table), "unknown table", remedy)]
    if not isinstance(entries, dict):
        return []
    known = table_columns(table)
    faults = []
    for column, value in entries.items():
        path = (section, table, column)
        if column not in known:
            hint = suggestion(column, known)
            faults.append(Fault(path, "unknown column", f"{hint} Columns of {table}: {', '.join(known)}.".strip()))
        elif section == "units" and isinstance(value, str):
            faults += _unit_faults(path, value, known[column].unit)
    return faults


def _unit_faults(path: tuple[str, ...], unit: str, canonical: str) -> list[Fault]:
    if not canonical:
        return [Fault(path, "this column has no unit", "Leave the key out.")]
    accepted = accepted_units(canonical)
    if unit in accepted:
        return []
    kind = dimension_of(canonical)
    return [Fault(path, f"{unit!r} is not a unit of {kind}", f"Accepted: {', '.join(accepted)}.")]


def settings_faults(settings: Settings) -> list[Fault]:
    """Check what has to agree between the sections of sound settings."""
    return [
        *_survey_faults(settings),
        *_strata_faults(settings),
        *pool_faults(settings),
        *_design_faults(settings),
        *id_faults(settings),
    ]


def _survey_faults(settings: Settings) -> list[Fault]:
    faults = []
    shared = settings.trees.file is not None
    for name, survey in settings.surveys.items():
        sampled = any(getattr(holder, table) for holder in (survey, settings.samples) for table in SAMPLE_TABLES)
        if survey.trees is None and not shared and not sampled:
            what = (
                "no tree table: neither this survey names one nor does [trees] give one for all surveys, and there is "
                "no table of samples either"
            )
            told = "Give trees = 'FILE' or a table of samples, such as soil = 'FILE', here, or file = 'FILE' under "
            faults.append(Fault(("surveys", name), what, told + "[trees]."))
        if survey.trees is not None and shared:
            what = "tree tables are given both here and under [trees]"
            faults.append(Fault(("surveys", name, "trees"), what, "Keep one of the two."))
        if not name.strip():
            faults.append(Fault(("surveys", name), "a survey needs a name"))
    return faults


def _strata_faults(settings: Settings) -> list[Fault]:
    strata = settings.strata
    faults = []
    accepted = accepted_units("ha")
    if strata.unit not in accepted:
        faults.append(
            Fault(("strata", "unit"), f"{strata.unit!r} is not a unit of area", f"Accepted: {', '.join(accepted)}.")
        )
    if strata.file and strata.areas:
        faults.append(Fault(("strata", "file"), "the areas are given both here and in a file", "Keep one of the two."))
    for small, large in strata.merge.items():
        if large in strata.merge:
            what = f"{large!r} is itself folded into another stratum" if large != small else "folded into itself"
            faults.append(Fault(("strata", "merge", small), what, "Name the stratum that remains."))
        elif strata.areas and large not in strata.areas:
            remedy = suggestion(large, strata.areas) or f"Strata with an area: {', '.join(strata.areas)}."
            faults.append(Fault(("strata", "merge", small), f"no stratum {large!r} under areas", remedy))
    return faults


def _design_faults(settings: Settings) -> list[Fault]:
    kind = settings.plots.design.kind
    faults = []
    if kind == "weighted" and not settings.columns.get("trees", {}).get("expansion"):
        what = "the weighted design needs the column of trees per hectare"
        faults.append(Fault(("plots", "design"), what, "Give expansion = 'THEIR COLUMN' under [columns.trees]."))
    if settings.plots.design.kind == "census" and settings.plots.design.area_ha is None:
        named = settings.columns.get("plots", {}).get("area") or settings.units.get("plots", {}).get("area")
        if not named:
            what = "the census design needs the area of the plots"
            told = "Give area_ha here, or area = 'THEIR COLUMN' under [columns.plots] and its unit under [units.plots]."
            faults.append(Fault(("plots", "design"), what, told))
    if settings.plots.slope_correction != "none" and kind in ("angle_count", "weighted", "census"):
        what = f"a plot of kind {kind!r} has no lengths laid out along the slope"
        faults.append(Fault(("plots", "slope_correction"), what, "Leave the key out."))
    return faults
