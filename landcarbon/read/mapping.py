"""From a table with the user's names and units to one with ours."""

from __future__ import annotations

from collections.abc import Callable, Collection, Sequence
from dataclasses import dataclass, replace

import numpy as np
import pandas as pd
import pyarrow as pa
import pyarrow.compute as pc

from landcarbon.errors import InputFileError
from landcarbon.inventory.columns import ColumnSpec, table_columns
from landcarbon.inventory.models import SAMPLE_TABLES, Settings
from landcarbon.inventory.nearest import suggestion
from landcarbon.inventory.units import convert
from landcarbon.read.cells import Parsed, as_category, as_date, as_flag, as_number, as_text, cell_text
from landcarbon.read.limits import limit
from landcarbon.read.notes import note
from landcarbon.read.sheets import read_parquet, read_workbook
from landcarbon.read.source import FileLog, Source, has_geometry
from landcarbon.read.table import RawTable
from landcarbon.read.text import read_text

__all__ = [
    "Mapped",
    "class_column",
    "column_plan",
    "coordinates_used",
    "left_blank",
    "map_raw",
    "not_readable",
    "read_mapped",
    "specs_of",
    "wanted_in",
]

# Text of field tables that repeats from row to row; carried as categories, which are lighter and faster to group.
_REPEATING = frozenset(
    {"survey", "plot", "subplot", "species", "status", "decay_class", "line", "size_class", "wood", "layer", "core"}
)
_FIELD_TABLES = frozenset({"trees", *SAMPLE_TABLES})


@dataclass
class Mapped:
    """One table of the user's under our names and in our units.

    Attributes
    ----------
    frame : DataFrame
        Every canonical column of the table (defaults where the file has none), and ``file`` and ``row``.
    given : dict
        Our column name to theirs, for the columns the file has.
    bad : dict
        Our column name to the texts of cells that could not be read, by position in ``frame``.
    ragged : ndarray of bool
        Rows with another number of cells than the header.
    findings : list of DataFrame
        Findings about the file as a whole.
    """

    frame: pd.DataFrame
    given: dict[str, str]
    bad: dict[str, pd.Series]
    ragged: np.ndarray
    findings: list[pd.DataFrame]


def read_mapped(source: Source, table: str, settings: Settings, log: FileLog) -> Mapped:
    """Read a file into canonical columns.

    Parameters
    ----------
    source : Source
        CSV and its kin, a workbook or Parquet.
    table : str
        Canonical table, e.g. ``trees``.
    settings : Settings
        Column and unit names.
    log : FileLog
        Notes what was read.

    Raises
    ------
    InputFileError
        If the file is not what its name says, or lacks a column.
    """

    def choose(names: Sequence[str]) -> list[str]:
        return list(dict.fromkeys(column_plan(table, names, source, settings).values()))

    readers: dict[str, Callable[[Source, Callable[[Sequence[str]], Sequence[str]]], RawTable]] = {
        ".xlsx": read_workbook,
        ".xlsm": read_workbook,
        ".parquet": read_parquet,
    }
    if source.suffix in (".xls", ".ods"):
        raise InputFileError(
            f"{source.suffix} files cannot be read", where=source.name, remedy="Save the table as XLSX or CSV."
        )
    raw = readers.get(source.suffix, read_text)(source, choose)
    return map_raw(raw, table, source, settings, log)


def class_column(name: str) -> str:
    """Return our name of the column that holds the counts or diameters of a size class."""
    return f"class {name}"


def specs_of(table: str, settings: Settings) -> dict[str, ColumnSpec]:
    """Return the columns of a table by name, those of the size classes of down wood among them.

    Parameters
    ----------
    table : str
        Canonical table.
    settings : Settings
        The project file.
    """
    specs = table_columns(table)
    for name, one in settings.dead_wood.classes.items() if table == "pieces" else ():
        if one.count or one.diameter:
            model = specs["diameter" if one.diameter else "count"]
            column = class_column(name)
            specs[column] = replace(model, column=column, becomes=column, needed=True)
    return specs


def _class_names(column: str, settings: Settings) -> str | list[str] | None:
    """Return the user's names of the column of a size class."""
    one = settings.dead_wood.classes.get(column.removeprefix(class_column("")))
    return (one.count or one.diameter) if one is not None and column.startswith(class_column("")) else None


def column_plan(table: str, names: Sequence[str], source: Source, settings: Settings) -> dict[str, str]:
    """Find which column of a file serves each canonical column.

    Parameters
    ----------
    table : str
        Canonical table.
    names : sequence of str
        Columns of the file.
    source : Source
        The file, for messages.
    settings : Settings
        ours = theirs (one name or several to try); a blank name says the file has no such column.

    Returns
    -------
    dict
        Our column name to theirs.

    Raises
    ------
    InputFileError
        Listing every column that is missing.
    """
    folded = {name.casefold(): name for name in reversed(names)}
    plan: dict[str, str] = {}
    missing: list[str] = []
    for column, spec in specs_of(table, settings).items():
        wanted, mapped = _wanted(spec, settings)
        there = [name if name in names else folded.get(name.casefold()) for name in wanted]
        found = next((name for name in there if name is not None), None)
        if found is not None:
            plan[column] = found
        elif spec.needed or (mapped and wanted):
            missing.append(_missing(column, wanted or [column], names))
    if missing:
        where = f"[columns.{table}]" + (" or [dead_wood.classes]" if table == "pieces" else "")
        told = f"Columns in the file: {', '.join(names)}. Name the right one under {where}."
        raise InputFileError("; ".join(missing), where=source.name, remedy=told)
    return plan


def _wanted(spec: ColumnSpec, settings: Settings) -> tuple[list[str], bool]:
    """Return the names a column may have in the file, and whether the user gave them."""
    given = settings.columns.get(spec.table, {}).get(spec.column, _class_names(spec.column, settings))
    if given is not None:
        names = [given] if isinstance(given, str) else given
        return [name.strip() for name in names if name.strip()], True
    # Who states the unit of a column means it to be used.
    by_name = spec.by_name or spec.needed or spec.column in settings.units.get(spec.table, {})
    return [spec.column] if by_name else [], False


def _missing(column: str, wanted: Sequence[str], names: Sequence[str]) -> str:
    hint = suggestion(wanted[0], names)
    what = f"no column {' or '.join(map(repr, wanted))}" + (f" (for {column})" if wanted != [column] else "")
    return f"{what} - {hint[0].lower()}{hint[1:]}" if hint else what


def map_raw(raw: RawTable, table: str, source: Source, settings: Settings, log: FileLog) -> Mapped:
    """Give a table our names, types and units.

    Parameters
    ----------
    raw : RawTable
        As read.
    table : str
        Canonical table.
    source : Source
        The file.
    settings : Settings
        Column and unit names.
    log : FileLog
        Notes what was read.

    Raises
    ------
    InputFileError
        If a column is missing or stands twice, or one that matters is mostly unreadable.
    """
    plan = column_plan(table, raw.names, source, settings)
    twice = sorted(set(plan.values()) & raw.repeated)
    if twice:
        raise InputFileError(
            f"the column {twice[0]!r} stands more than once", where=source.name, remedy="Rename or remove one of them."
        )
    raw, blank = _without_blank_rows(raw)
    used = [f"{ours}={theirs}" for ours, theirs in plan.items()]
    unused = [name for name in raw.names if name not in plan.values()]
    log.add(source, len(raw), columns="; ".join(used), unused="; ".join(unused))
    mapped = Mapped(_base(raw), plan, {}, raw.ragged, [*raw.findings, *blank])
    units = settings.units.get(table, {})
    columns: dict[str, object] = {}
    for column, spec in specs_of(table, settings).items():
        cells = raw.columns.get(plan.get(column, ""))
        parsed = _parse(cells, spec, settings.dates.format, comma_decimals=raw.comma_decimals, rows=len(raw))
        if isinstance(parsed, Parsed):
            _note_bad(mapped, column, cells, parsed)
            if _matters(spec, plan, source):
                _refuse_unreadable(mapped, spec, parsed, settings.dates.format)
            unit = units.get("diameter" if column.startswith(class_column("")) else column, "")
            values = convert(parsed.values, unit, spec.unit) if spec.unit else parsed.values
            columns[spec.becomes] = values
        else:
            columns[spec.becomes] = parsed
    mapped.frame = pd.concat([mapped.frame, pd.DataFrame(columns)], axis=1)
    return mapped


def _base(raw: RawTable) -> pd.DataFrame:
    file = pd.Categorical.from_codes(np.zeros(len(raw), dtype="int8"), pd.Index([raw.file], dtype="str"))
    return pd.DataFrame({"file": file, "row": raw.lines})


def _without_blank_rows(raw: RawTable) -> tuple[RawTable, list[pd.DataFrame]]:
    """Take out rows with nothing in any column used; they say nothing about a tree or a plot."""
    if not raw.columns or not len(raw):
        return raw, []
    # Most files have no blank row: the first column without blanks ends the search.
    blank = np.ones(len(raw), dtype=bool)
    for cells in raw.columns.values():
        blank &= pc.equal(cell_text(cells), "").to_numpy(zero_copy_only=False)
        if not blank.any():
            return raw, []
    keep = np.flatnonzero(~blank)
    columns = {name: cells.take(pa.array(keep)) for name, cells in raw.columns.items()}
    first = int(raw.lines[blank][0])
    words = {"count": int(blank.sum()), "line": first}
    told = note("blank rows", file=raw.file, value=str(words["count"]), row=first, fill=words)
    kept = RawTable(
        raw.file, raw.names, raw.repeated, columns, raw.lines[keep], raw.ragged[keep], raw.comma_decimals, raw.findings
    )
    return kept, [told]


def _parse(
    cells: pa.Array | None, spec: ColumnSpec, pattern: str | None, *, comma_decimals: bool, rows: int
) -> Parsed | pd.Series:
    repeating = spec.table in _FIELD_TABLES and spec.column in _REPEATING
    if cells is None:
        if spec.kind in ("id", "text"):
            return _blank(rows, category=repeating)
        fill = np.datetime64("NaT", "s") if spec.kind == "date" else np.float64("nan")
        return Parsed(np.full(rows, fill), np.zeros(rows, dtype=bool))
    if spec.kind == "number":
        return as_number(cells, comma_decimals=comma_decimals)
    if spec.kind == "date":
        return as_date(cells, pattern)
    if spec.kind == "flag":
        return as_flag(cells)
    return as_category(cells) if repeating else as_text(cells)


def _blank(rows: int, *, category: bool) -> pd.Series:
    if category:
        levels = pd.Index([""], dtype="str")
        return pd.Series(pd.Categorical.from_codes(np.zeros(rows, dtype="int8"), levels))
    return pd.Series([""] * rows, dtype="str")


def _note_bad(mapped: Mapped, column: str, cells: pa.Array | None, parsed: Parsed) -> None:
    if parsed.decimal_comma:
        mapped.findings.append(note("decimal comma", file=str(mapped.frame["file"].cat.categories[0]), column=column))
    places = np.flatnonzero(parsed.bad)
    if len(places) and cells is not None:
        mapped.bad[column] = pd.Series(cell_text(cells.take(pa.array(places))).to_pylist(), index=places, dtype="str")


def coordinates_used(given: Collection[str], source: Source) -> tuple[str, ...]:
    """Return the columns that place the plots: x and y go before lon and lat, and a geometry before both.

    Parameters
    ----------
    given : collection of str
        Which of our columns the file has.
    source : Source
        The file.
    """
    pairs = () if has_geometry(source) else (("x", "y"), ("lon", "lat"))
    return next((pair for pair in pairs if set(pair) <= set(given)), ())


def _matters(spec: ColumnSpec, given: Collection[str], source: Source) -> bool:
    """Tell columns without which a table is lost: where they are mostly unreadable, the cause is not in the cells."""
    placing = spec.table == "plots" and spec.column in coordinates_used(given, source)
    return spec.needed or spec.essential or spec.kind in ("date", "flag") or placing


def _refuse_unreadable(mapped: Mapped, spec: ColumnSpec, parsed: Parsed, pattern: str | None) -> None:
    count = int(parsed.bad.sum())
    filled = count + int((~parsed.bad & ~pd.isna(parsed.values)).sum())
    if count < limit("unreadable", "cells") or count <= limit("unreadable", "share") * filled:
        return
    texts = mapped.bad[spec.column].drop_duplicates().iloc[:2]
    lines = mapped.frame["row"].iloc[texts.index]
    shown = " and ".join(f"{text!r} on line {line}" for text, line in zip(texts, lines, strict=True))
    theirs = mapped.given[spec.column]
    raise InputFileError(
        f"{count} of {filled} cells under {theirs!r} (for {spec.column}) hold no {wanted_in(spec.column, spec.table)}, "
        f"such as {shown}",
        where=str(mapped.frame["file"].cat.categories[0]),
        remedy=_way_out(spec, pattern),
    )


def _way_out(spec: ColumnSpec, pattern: str | None) -> str:
    mapping = f"check that {spec.column} is the right column under [columns.{spec.table}]."
    if spec.kind == "date" and pattern:
        return f"Dates were expected as {pattern!r}: correct format under [dates], or {mapping}"
    if spec.kind == "date":
        return f"Dates were expected as year-month-day: give format under [dates], e.g. '%d.%m.%Y', or {mapping}"
    if spec.kind == "flag":
        return f"Write yes or no, or {mapping}"
    return f"Write figures alone, without units or marks and with one decimal sign throughout, or {mapping}"


def wanted_in(column: str, table: str) -> str:
    """Return in words what a cell of a column has to hold."""
    known = table_columns(table)
    kind = known[column].kind if column in known else "number"
    return {"date": "date in the form expected", "flag": "yes or no"}.get(kind, "number")


def left_blank(mapped: Mapped, table: str, told: Collection[str] = ()) -> list[pd.DataFrame]:
    """Tell the cells of a table that could not be read and are taken as blank.

    Parameters
    ----------
    mapped : Mapped
        The table.
    table : str
        Its canonical name.
    told : collection of str
        Columns whose cells are told elsewhere.
    """
    return [
        not_readable("not readable and left blank", mapped, table, column)
        for column in mapped.bad
        if column not in told
    ]


def not_readable(rule: str, mapped: Mapped, table: str, column: str) -> pd.DataFrame:
    """Tell the cells of one column that could not be read.

    Parameters
    ----------
    rule : str
        What becomes of them.
    mapped : Mapped
        The table.
    table, column : str
        Its canonical name, and that of the column.
    """
    texts = mapped.bad[column]
    return note(
        rule,
        mapped.frame.iloc[texts.index],
        table=table,
        column=column,
        value=texts.to_numpy(dtype=object),
        fill={"column": mapped.given[column], "wanted": wanted_in(column, table)},
    )
