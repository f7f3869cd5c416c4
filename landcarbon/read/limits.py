"""Limits of the checks made while reading, from ``limits.toml``."""

from __future__ import annotations

import tomllib
from functools import cache
from importlib.resources import files

__all__ = ["limit"]


@cache
def _limits() -> dict[str, dict[str, float]]:
    return tomllib.loads(files("landcarbon.read").joinpath("limits.toml").read_text(encoding="utf-8"))


def limit(group: str, name: str) -> float:
    """Return one limit.

    Parameters
    ----------
    group, name : str
        Table and key of the data file, which also states the unit.
    """
    return float(_limits()[group][name])
