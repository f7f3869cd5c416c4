"""The canonical columns of every input table, read from ``columns.csv``."""

from __future__ import annotations

import csv
from dataclasses import dataclass
from functools import cache
from importlib.resources import files

__all__ = ["ColumnSpec", "column_specs", "table_columns", "table_names"]


@dataclass(frozen=True)
class ColumnSpec:
    """One canonical column.

    Attributes
    ----------
    table, column : str
        Our names, as written in ``[columns.TABLE]``.
    kind : str
        id, text, number, date or flag.
    unit : str
        Unit the user's figures are in unless ``[units.TABLE]`` says otherwise, and the unit they are carried in.
    needed : bool
        True if the table cannot be used without it.
    by_name : bool
        True if a column of this name is taken without being mapped.
    essential : bool
        True if a row counts no more where this cell cannot be read; otherwise the cell is taken as blank.
    becomes : str
        Name of the column in the tables of the program.
    meaning : str
        One line for people.
    """

    table: str
    column: str
    kind: str
    unit: str
    needed: bool
    by_name: bool
    essential: bool
    becomes: str
    meaning: str


@cache
def column_specs() -> tuple[ColumnSpec, ...]:
    """Return every canonical column, in the order of the data file."""
    text = files("landcarbon").joinpath("read", "columns.csv").read_text(encoding="utf-8")
    specs = []
    for line in csv.DictReader(text.splitlines()):
        needed, by_name, essential = (line.pop(name) == "yes" for name in ("needed", "by_name", "essential"))
        specs.append(ColumnSpec(needed=needed, by_name=by_name, essential=essential, **line))
    return tuple(specs)


def table_names() -> list[str]:
    """Return the names of the input tables."""
    return list(dict.fromkeys(spec.table for spec in column_specs()))


def table_columns(table: str) -> dict[str, ColumnSpec]:
    """Return the columns of one table by name.

    Parameters
    ----------
    table : str
        One of :func:`table_names`.
    """
    return {spec.column: spec for spec in column_specs() if spec.table == table}
