"""Units of the user's figures, and their conversion to ours.

The factors are in ``units.csv``, each with its definition.
"""

from __future__ import annotations

import csv
from dataclasses import dataclass
from functools import cache
from importlib.resources import files

import numpy as np

__all__ = ["accepted_units", "convert", "dimension_of", "unit_table"]


@dataclass(frozen=True)
class _Unit:
    """One spelling of a unit; ``factor`` times a value gives the canonical unit (None: not a plain factor)."""

    name: str
    dimension: str
    factor: float | None


@cache
def unit_table() -> dict[tuple[str, str], _Unit]:
    """Return the units by dimension and spelling."""
    text = files("landcarbon").joinpath("read", "units.csv").read_text(encoding="utf-8")
    table = {}
    for line in csv.DictReader(text.splitlines()):
        factor = float(line["factor"]) if line["factor"] else None
        table[line["dimension"], line["unit"]] = _Unit(line["unit"], line["dimension"], factor)
    return table


def dimension_of(unit: str) -> str:
    """Return the dimension of one of our own units, e.g. ``length`` of ``cm``.

    Raises
    ------
    KeyError
        If the unit is not in the table.
    """
    for dimension, name in unit_table():
        if name == unit:
            return dimension
    raise KeyError(unit)


def accepted_units(canonical: str) -> list[str]:
    """Return the spellings accepted where a figure is carried in the unit ``canonical``."""
    dimension = dimension_of(canonical)
    return [name for kind, name in unit_table() if kind == dimension]


def convert(values: np.ndarray, unit: str, canonical: str) -> np.ndarray:
    """Convert figures to our unit.

    Parameters
    ----------
    values : ndarray
        Figures in ``unit``.
    unit : str
        Spelling of the user's unit; blank means ``canonical``.
    canonical : str
        Unit wanted.

    Returns
    -------
    ndarray
        Figures in ``canonical``; NaN stays NaN.

    Raises
    ------
    KeyError
        If the unit is unknown or of another dimension.
    """
    if not unit or unit == canonical:
        return values
    dimension = dimension_of(canonical)
    source, target = unit_table()[dimension, unit], unit_table()[dimension, canonical]
    if source.factor is None:  # slope in percent, the only unit that is not a plain factor
        return np.degrees(np.arctan(values / 100.0))
    if source.factor == target.factor:
        return values
    if target.factor is None:
        raise KeyError(canonical)
    ratio = source.factor / target.factor
    inverse = target.factor / source.factor
    # Division by a whole number rounds once, multiplication by its inverse twice: 279 mm are 27.9 cm, to the last bit.
    return values / round(inverse) if ratio < 1 and abs(inverse - round(inverse)) < 1e-9 * inverse else values * ratio
