"""What every column of the results means, from ``columns.csv``."""

from __future__ import annotations

import csv
import re
from collections.abc import Iterable
from dataclasses import dataclass, replace
from functools import cache
from importlib import resources

from landcarbon.inventory.columns import table_columns
from landcarbon.inventory.models import SAMPLE_TABLES

__all__ = ["Column", "columns_of", "describe", "described_tables"]

_PLACE = re.compile(r"\{(survey|pair)\}")
# Rows of columns.csv that hold for every file of samples; what else these hold is described as it is for reading.
_SAMPLES = "samples_{table}.parquet"
_FIRST = ("row_id", "file", "row")
_SHOWN = {"survey": "SURVEY", "pair": "SINCE_UNTIL"}


@dataclass(frozen=True)
class Column:
    """One line of the description.

    Attributes
    ----------
    table : str
        File, or file and layer.
    column : str
        Name; ``{survey}`` and ``{pair}`` stand for a survey and for two surveys.
    unit : str
        Unit, empty if it has none.
    meaning : str
        What it holds; ``{interval}`` stands for the name of the interval.
    """

    table: str
    column: str
    unit: str
    meaning: str

    @property
    def shown(self) -> str:
        """Name with its places in capitals."""
        return _PLACE.sub(lambda found: _SHOWN[found[1]], self.column)

    def covers(self, name: str) -> bool:
        """Whether a written column is this one."""
        head = _PLACE.split(self.column)[0]
        return name == self.column or (head != self.column and name.startswith(head) and len(name) > len(head))


@cache
def _rows() -> tuple[Column, ...]:
    text = resources.files("landcarbon.publish").joinpath("columns.csv").read_text(encoding="utf-8")
    rows = [Column(**row) for row in csv.DictReader(text.splitlines())]
    common = {row.column: row for row in rows if row.table == _SAMPLES}
    plain = [row for row in rows if row.table != _SAMPLES]
    samples = [row for table in SAMPLE_TABLES for row in _sample_rows(table, common)]
    return (*plain, *samples)


def _sample_rows(table: str, common: dict[str, Column]) -> list[Column]:
    """Describe one file of samples: numbers are in the units the canonical tables carry them in."""
    file = _SAMPLES.format(table=table)
    own = {}
    for spec in table_columns(table).values():
        unit = "" if spec.unit == "1" else spec.unit
        own[spec.becomes] = Column(file, spec.becomes, unit, spec.meaning[:1].lower() + spec.meaning[1:])
    names = dict.fromkeys([*_FIRST, *own, *common])
    return [replace(common[name], table=file) if name in common else own[name] for name in names]


def described_tables() -> list[str]:
    """Tables in the order of the description."""
    return list(dict.fromkeys(row.table for row in _rows()))


def columns_of(table: str) -> list[Column]:
    """Return the description of a table's columns, in their order."""
    return [row for row in _rows() if row.table == table]


def describe(table: str, written: Iterable[str]) -> tuple[list[Column], list[str]]:
    """Find the description of the columns that were written.

    Parameters
    ----------
    table : str
        One of :func:`described_tables`.
    written : iterable of str
        Columns of the file.

    Returns
    -------
    columns : list of Column
        In the order of the file; a column kind that occurs once per survey is listed once.
    left : list of str
        Columns without a description.
    """
    known = sorted(columns_of(table), key=lambda row: -len(row.column))
    found: dict[Column, None] = {}
    left = []
    for name in written:
        match = next((row for row in known if row.column == name), None) or next(
            (row for row in known if row.covers(name)), None
        )
        if match is None:
            left.append(name)
        else:
            found[match] = None
    return list(found), left
