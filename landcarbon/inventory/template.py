"""The project file to start from."""

from __future__ import annotations

from importlib.resources import files

__all__ = ["template_text"]


def template_text() -> str:
    """Return a commented project file."""
    return files("landcarbon").joinpath("inventory", "template.toml").read_text(encoding="utf-8")
