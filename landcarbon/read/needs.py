"""What a table of samples has to hold so that its pool can be worked out, where more than one column or key may do."""

from __future__ import annotations

from collections.abc import Collection
from dataclasses import dataclass

from landcarbon.errors import SettingsError
from landcarbon.inventory.measured import counted_tables
from landcarbon.inventory.models import Settings
from landcarbon.read.mapping import class_column

__all__ = ["refuse_lacking"]


@dataclass(frozen=True)
class _Lack:
    """Something no column tells: the column it would stand in, what it is, and what else would do."""

    column: str
    what: str
    otherwise: str = ""


def refuse_lacking(given: Collection[str], table: str, settings: Settings, file: str) -> None:
    """Refuse a table of samples that lacks what the settings do not give either.

    Parameters
    ----------
    given : collection of str
        Which of our columns the file has.
    table : str
        Its canonical name.
    settings : Settings
        The project file.
    file : str
        Name of the file, for the message.

    Raises
    ------
    SettingsError
        Naming the column that would tell it, and the key that may do so instead.
    """
    lack = _always(set(given), settings, table)
    if lack is None and table in _CHECKS and _counts_for(table) <= counted_tables(settings):
        lack = _CHECKS[table](set(given), settings, table)
    if lack:
        raise SettingsError(
            f"{file} does not tell {lack.what}",
            where=f"{settings.path.name}, columns.{table}.{lack.column}",
            remedy=f"Map {lack.column} under [columns.{table}]"
            + (f", or give {lack.otherwise}." if lack.otherwise else "."),
        )


def _counts_for(table: str) -> set[str]:
    """Return the tables that have to be counted for this one to matter: lines by themselves hold nothing."""
    return {"pieces"} if table == "lines" else {table}


def _always(given: set[str], settings: Settings, table: str) -> _Lack | None:
    """Find areas that nothing tells, and soil without carbon, whether or not the table is counted."""
    if table in ("litter", "ground_vegetation"):
        if "frame_area" not in given and getattr(settings, table).frame_area_m2 is None:
            return _Lack("frame_area", "the area of the frames", f"frame_area_m2 under [{table}]")
    elif table == "saplings":
        if "area" not in given and settings.saplings.area_m2 is None:
            return _Lack("area", "the area they were counted on", "area_m2 under [saplings]")
    elif table == "soil":
        if not given & {"organic_carbon", "organic_matter", "total_carbon"}:
            return _Lack("organic_carbon", "the carbon", "organic_matter or total_carbon there")
        if not given & {"organic_carbon", "total_carbon"} and settings.soil.organic_matter_per_carbon is None:
            what = "the carbon, but only organic matter"
            return _Lack("organic_carbon", what, "organic_matter_per_carbon under [soil]")
    return None


def _lines(given: set[str], settings: Settings, table: str) -> _Lack | None:
    wood = settings.dead_wood
    # Lengths may stand with the pieces or the classes as well; those are told line by line where they are missing.
    elsewhere = wood.line_m is not None or settings.columns.get("pieces", {}).get("line_length")
    if "length" in given or elsewhere or any(one.line_m is not None for one in wood.classes.values()):
        return None
    return _Lack("length", "how long the lines are", "line_m under [dead_wood] if all are of one length")


def _pieces(given: set[str], settings: Settings, table: str) -> _Lack | None:
    classes = [name for name in settings.dead_wood.classes if class_column(name) in given]
    if classes or "count" not in given or given & {"diameter", "size_class"}:
        return None
    return _Lack("diameter", "how thick the pieces counted are", "size_class there and the classes in [dead_wood]")


def _logs(given: set[str], settings: Settings, table: str) -> _Lack | None:
    if given & {"large", "middle", "small"}:
        return None
    return _Lack("middle", "any diameter of the logs", "large and small there")


def _frames(given: set[str], settings: Settings, table: str) -> _Lack | None:
    options = getattr(settings, table)
    by_layer = table == "litter" and (options.forest_floor is not None or bool(options.bulk_densities))
    by_depth = "depth" in given and ("bulk_density" in given or by_layer)
    if "dry" in given or by_depth:
        return None
    if "fresh" not in given:
        return _Lack("dry", "the mass of the samples", "fresh with sub_fresh and sub_dry there")
    if {"sub_fresh", "sub_dry"} <= given or options.dry_share is not None:
        return None
    return _Lack(
        "sub_dry", "how much of the fresh mass is dry", f"sub_fresh beside it there, or dry_share under [{table}]"
    )


def _saplings(given: set[str], settings: Settings, table: str) -> _Lack | None:
    if not given & {"dbh", "height"}:
        return _Lack("dbh", "how large the stems are", "height there, if there are equations with height alone")
    return None


def _soil(given: set[str], settings: Settings, table: str) -> _Lack | None:
    if "bulk_density" not in given and settings.soil.pedotransfer is None:
        return _Lack("bulk_density", "the bulk density", "pedotransfer under [soil]")
    return None


_CHECKS = {
    "lines": _lines,
    "pieces": _pieces,
    "logs": _logs,
    "litter": _frames,
    "ground_vegetation": _frames,
    "saplings": _saplings,
    "soil": _soil,
}
