"""The shipped demo woodland, and the template of a project file."""

from __future__ import annotations

import shutil
from importlib import resources
from importlib.resources.abc import Traversable
from pathlib import Path

from landcarbon.errors import ResultsError
from landcarbon.inventory import template_text

__all__ = ["copy_demo", "demo_source", "write_template"]


def demo_source() -> Traversable:
    """Folder of the demo files: inside the installed package, or beside it in a checkout."""
    inside = resources.files("landcarbon").joinpath("demo_parcels")
    if inside.is_dir():
        return inside
    return Path(__file__).resolve().parent.parent / "demo_parcels"


def copy_demo(folder: Path) -> Path:
    """Copy the demo inventory into ``folder`` and return its project file.

    Files of an earlier demo are overwritten; nothing else in the folder is touched.

    Raises
    ------
    ResultsError
        If the folder cannot be made or holds something that is not a demo.
    """
    if folder.exists() and not folder.is_dir():
        raise ResultsError(f"{folder} is a file", remedy="Name a folder for the demo.")
    source = demo_source()
    names = [entry for entry in source.iterdir() if entry.is_file() and not entry.name.endswith(".py")]
    if folder.is_dir() and any(folder.iterdir()) and not (folder / "inventory.toml").exists():
        raise ResultsError(f"{folder} holds other files", remedy="Name an empty or a new folder for the demo.")
    try:
        folder.mkdir(parents=True, exist_ok=True)
        for entry in names:
            with entry.open("rb") as given, (folder / entry.name).open("wb") as target:
                shutil.copyfileobj(given, target)
    except OSError as error:
        raise ResultsError(
            f"cannot write the demo to {folder}: {error.strerror}", remedy="Name another folder."
        ) from error
    return folder / "inventory.toml"


def write_template(folder: Path) -> Path:
    """Write a commented project file into ``folder``; an existing one is never overwritten.

    Raises
    ------
    ResultsError
        If there is a project file already, or the folder cannot be written.
    """
    path = folder / "inventory.toml"
    if path.exists():
        raise ResultsError(f"{path} exists already", remedy="It is left as it is; name another folder.")
    try:
        folder.mkdir(parents=True, exist_ok=True)
        path.write_text(template_text(), encoding="utf-8", newline="\n")
    except OSError as error:
        raise ResultsError(f"cannot write {path}: {error.strerror}", remedy="Name another folder.") from error
    return path
