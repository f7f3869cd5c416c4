"""Every key of the project file with its type, default and meaning, taken from the models themselves."""

from __future__ import annotations

import types
from dataclasses import dataclass
from typing import Any, Literal, Union, get_args, get_origin

from pydantic import BaseModel
from pydantic.fields import FieldInfo
from pydantic_core import PydanticUndefined

from landcarbon.inventory.base import Section
from landcarbon.inventory.locate import Path
from landcarbon.inventory.models import Settings

__all__ = ["KeyInfo", "choices_of", "keys_below", "keys_of_kinds", "places_of", "settings_reference"]


@dataclass(frozen=True)
class KeyInfo:
    """One key of the project file.

    Attributes
    ----------
    key : str
        Dotted; capitals stand for a name of the user's choice.
    kind : str
        Type in plain words.
    default : str
        Default as written in the file, ``needed`` or blank for an empty table.
    meaning : str
        One line.
    only_for : str
        Plot design the key belongs to, if it is not a key of every design.
    """

    key: str
    kind: str
    default: str
    meaning: str
    only_for: str = ""


def settings_reference() -> list[KeyInfo]:
    """Return every key of the project file in the order of the models."""
    return _walk(Settings, ())


def _walk(model: type[BaseModel], prefix: Path, only_for: str = "") -> list[KeyInfo]:
    rows: list[KeyInfo] = []
    for name, field in model.model_fields.items():
        path = (*prefix, name)
        if path == ("species", "names"):
            rows.append(KeyInfo("species.CODE", "text", "", field.description or ""))
            continue
        rows += _key(path, field, only_for)
    return rows


def _key(path: Path, field: FieldInfo, only_for: str) -> list[KeyInfo]:
    dotted = ".".join(str(part) for part in path)
    sections = _sections(field.annotation)
    own = KeyInfo(dotted, _plain(field.annotation), _default(field), field.description or "", only_for)
    if path == ("plots", "design"):
        rows = [own]
        for section in sections:
            kind = get_args(section.model_fields["kind"].annotation)[0]
            rows += _walk(section, path, kind)
        return rows
    if not sections:
        return [own]
    if path[0] == "pools" and len(path) > 1:
        return [own]
    if path[0] == "pools":
        pool = _sections(sections[0].model_fields["above_ground"].annotation)[0]
        return [own, *_walk(sections[0], path), *_walk(pool, ("pools", "POOL"))]
    inner = (*path, "NAME") if get_origin(field.annotation) is dict else path
    return [own, *_walk(sections[0], inner, only_for)]


def _sections(annotation: Any) -> list[type[Section]]:
    """Return the models inside a type."""
    if isinstance(annotation, type) and issubclass(annotation, Section):
        return [annotation]
    return [section for part in get_args(annotation) for section in _sections(part)]


def _plain(annotation: Any) -> str:
    origin, parts = get_origin(annotation), get_args(annotation)
    if origin in (Union, types.UnionType):
        return " or ".join(dict.fromkeys(_plain(part) for part in parts if part is not type(None)))
    if origin is Literal:
        return " or ".join(f'"{part}"' for part in parts)
    if origin is dict:
        return "table"
    if origin is list:
        return f"list of {_plain(parts[0])}s" if not _sections(parts[0]) else "list of tables"
    if hasattr(annotation, "__metadata__"):
        return _plain(parts[0])
    if _sections(annotation):
        return "table"
    words: dict[Any, str] = {str: "text", float: "number", int: "whole number", bool: "true or false"}
    return words.get(annotation, "date")


def _default(field: FieldInfo) -> str:
    if field.is_required():
        return "needed"
    value = field.get_default(call_default_factory=True)
    if value is None or value in ({}, []) or value is PydanticUndefined:
        return ""
    if isinstance(value, Section):
        return str(getattr(value, "how", ""))
    if isinstance(value, bool):
        return str(value).lower()
    return f'"{value}"' if isinstance(value, str) else str(value)


def keys_of_kinds() -> dict[str, list[str]]:
    """Return the keys of the plot design by its kind, without ``kind`` itself."""
    found: dict[str, list[str]] = {}
    for row in settings_reference():
        parts = row.key.split(".")
        if row.only_for and parts[:-1] == ["plots", "design"]:
            keys = found.setdefault(row.only_for, [])
            keys += [parts[-1]] if parts[-1] != "kind" else []
    return found


def choices_of(path: Path) -> str:
    """Return the words accepted for a key, as written in the file; blank if it takes no fixed words."""
    dotted = ".".join(str(part) for part in path)
    return next((row.kind for row in settings_reference() if row.key == dotted and row.kind.startswith('"')), "")


def keys_below(path: Path) -> list[str]:
    """Return the keys known directly under a table of the project file.

    Parameters
    ----------
    path : tuple
        Path of the table; names of the user's choice and numbers in lists may stand in it.
    """
    rows = settings_reference()
    names = tuple(str(part) for part in path if not isinstance(part, int))
    found = []
    for row in rows:
        parts = tuple(row.key.split("."))
        if len(parts) == len(names) + 1 and all(a == b or a.isupper() for a, b in zip(parts, names, strict=False)):
            found.append(parts[-1])
    return [name for name in dict.fromkeys(found) if not name.isupper()]


def places_of(word: str) -> list[str]:
    """Return the tables in which a key of this name is known."""
    found = [row.key.rpartition(".")[0] for row in settings_reference() if row.key.rpartition(".")[2] == word]
    return [place for place in dict.fromkeys(found) if place]
