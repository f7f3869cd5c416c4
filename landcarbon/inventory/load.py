"""Load and check a project file."""

from __future__ import annotations

import re
import tomllib
from pathlib import Path
from typing import Any

from pydantic import ValidationError

from landcarbon.errors import SettingsError
from landcarbon.inventory.cross import column_faults, settings_faults
from landcarbon.inventory.faults import Fault, faults_of, raise_faults
from landcarbon.inventory.locate import key_lines
from landcarbon.inventory.models import Settings
from landcarbon.inventory.nearest import suggestion

__all__ = ["load_settings", "parse_settings"]


def load_settings(path: str | Path) -> Settings:
    """Read a project file and check it as a whole.

    Parameters
    ----------
    path : str or Path
        The file, or the folder that holds an ``inventory.toml``.

    Returns
    -------
    Settings
        Typed, with every default filled in.

    Raises
    ------
    SettingsError
        Naming file, line and key of every fault.
    """
    path = Path(path)
    if path.is_dir() and (path / "inventory.toml").is_file():
        path = path / "inventory.toml"
    return parse_settings(_text(path), path)


def parse_settings(text: str, path: str | Path = "inventory.toml") -> Settings:
    """Check the text of a project file.

    Parameters
    ----------
    text : str
        TOML.
    path : str or Path
        Where the text stands; paths inside are relative to its folder.

    Raises
    ------
    SettingsError
        Naming file, line and key of every fault.
    """
    path = Path(path)
    raw = _toml(text, path)
    lines = key_lines(text)
    faults = column_faults(raw)
    settings: Settings | None = None
    try:
        settings = Settings.model_validate(raw)
    except ValidationError as error:
        faults = faults_of(error, raw) + faults
    if settings is not None:
        faults += settings_faults(settings)
    raise_faults(_distinct(faults), path.name, lines)
    if settings is None:
        raise SettingsError("the settings cannot be used", where=path.name)
    settings._path = path.absolute()
    return settings


def _distinct(faults: list[Fault]) -> list[Fault]:
    return list(dict.fromkeys(faults))


def _text(path: Path) -> str:
    if path.is_dir():
        raise SettingsError("this is a folder without an inventory.toml", where=str(path), remedy="Name a file.")
    if not path.exists():
        others = [p.name for p in path.parent.glob("*.toml")] if path.parent.is_dir() else []
        hint = suggestion(path.name, others) or (f"Found there: {', '.join(sorted(others))}." if others else "")
        raise SettingsError(
            "no such file", where=str(path), remedy=hint or "'landcarbon new' writes one to start from."
        )
    try:
        data = path.read_bytes()
    except OSError as error:
        raise SettingsError(f"cannot be read ({error.strerror})", where=str(path)) from error
    try:
        text = data.decode("utf-8-sig")
    except UnicodeDecodeError as error:
        line = data.count(b"\n", 0, error.start) + 1
        raise SettingsError(
            f"line {line} is not UTF-8 text", where=path.name, remedy="Save the file as UTF-8."
        ) from error
    if not text.strip():
        raise SettingsError("the file is empty", where=path.name, remedy="'landcarbon new' writes one to start from.")
    return text


def _toml(text: str, path: Path) -> dict[str, Any]:
    try:
        return tomllib.loads(text)
    except tomllib.TOMLDecodeError as error:
        told = str(error)
        place = re.search(r"\(at line (\d+), column (\d+)\)|\(at end of document\)", told)
        what = told[: place.start()].strip() if place else told
        line = int(place[1]) if place and place[1] else text.rstrip().count("\n") + 1
        shown = text.splitlines()[line - 1].strip() if line <= len(text.splitlines()) else ""
        raise SettingsError(
            f"not readable as TOML: {what[:1].lower()}{what[1:]} in {shown!r}",
            where=f"{path.name}, line {line}",
            remedy="Text stands in double quotes, a key may stand only once, and a path on Windows needs / or '...'.",
        ) from error
