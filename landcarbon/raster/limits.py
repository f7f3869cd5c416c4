"""Working limits of the raster steps, from ``limits.csv`` where each has unit, source and reason."""

from __future__ import annotations

import csv
from functools import cache
from importlib.resources import files

__all__ = ["raster_limit"]


@cache
def _limits() -> dict[str, float]:
    text = files("landcarbon.raster").joinpath("limits.csv").read_text(encoding="utf-8")
    return {row["name"]: float(row["value"]) for row in csv.DictReader(text.splitlines())}


def raster_limit(name: str) -> float:
    """Return one limit, in the unit stated in the data file."""
    return _limits()[name]
