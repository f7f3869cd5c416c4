"""Workbooks (XLSX) and Parquet tables."""

from __future__ import annotations

import datetime as dt
import io
import warnings
import zipfile
import zlib
from typing import TYPE_CHECKING

import numpy as np
import pyarrow as pa
import pyarrow.parquet as pq

from landcarbon.errors import InputFileError
from landcarbon.inventory.nearest import suggestion
from landcarbon.read.source import Source
from landcarbon.read.table import Choose, RawTable, unique_names

if TYPE_CHECKING:
    from openpyxl import Workbook

__all__ = ["read_parquet", "read_workbook"]


def read_workbook(source: Source, choose: Choose) -> RawTable:
    """Read a sheet of a workbook; formulas count with the value last saved, links are not followed.

    Parameters
    ----------
    source : Source
        The file; ``part`` names the sheet, the first one if blank.
    choose : callable
        Picks the columns to read.

    Raises
    ------
    InputFileError
        If it is no workbook or lacks the sheet.
    """
    rows = _sheet_rows(source)
    first = next((index for index, row in enumerate(rows) if any(_cell(cell) for cell in row)), None)
    if first is None:
        raise InputFileError("the sheet is empty", where=source.name)
    header = [_cell(cell) for cell in rows[first]]
    while header and not header[-1]:
        header.pop()
    names, repeated = unique_names(header)
    width = len(names)
    body = [
        (index, row) for index, row in enumerate(rows[first + 1 :], start=first + 2) if any(_cell(cell) for cell in row)
    ]
    lines = np.array([index for index, _ in body], dtype="int32")
    ragged = np.array([any(_cell(cell) for cell in row[width:]) for _, row in body], dtype=bool)
    columns = {}
    for name in choose(names):
        place = names.index(name)
        cells = [_cell(row[place]) if place < len(row) else "" for _, row in body]
        columns[name] = pa.array(cells, pa.string())
    return RawTable(source.name, names, repeated, columns, lines, ragged, comma_decimals=True)


def _sheet_rows(source: Source) -> list[tuple[object, ...]]:
    import openpyxl  # only inventories with workbooks pay for it

    data = io.BytesIO(source.data())
    try:
        with warnings.catch_warnings():
            warnings.simplefilter("ignore", UserWarning)  # on validation lists and the like, which hold no data
            book = openpyxl.load_workbook(data, read_only=True, data_only=True, keep_links=False)
            try:
                return _rows(book, source)
            finally:
                book.close()
    except InputFileError:
        raise
    except (zipfile.BadZipFile, zlib.error, LookupError, ValueError, TypeError, OSError, SyntaxError) as error:
        # What openpyxl lets through on a damaged file depends on where the damage is.
        raise InputFileError(
            f"not a readable XLSX workbook ({error})", where=source.name, remedy="Save the table as XLSX or CSV."
        ) from error


def _rows(book: Workbook, source: Source) -> list[tuple[object, ...]]:
    if source.part and source.part not in book.sheetnames:
        hint = suggestion(source.part, book.sheetnames)
        told = f"Sheets: {', '.join(book.sheetnames)}. {hint}".strip()
        raise InputFileError(f"no sheet {source.part!r}", where=source.name, remedy=told)
    sheet = book[source.part] if source.part else book.worksheets[0]
    if hasattr(sheet, "reset_dimensions"):  # some writers state a wrong size
        sheet.reset_dimensions()
    return [tuple(row) for row in sheet.iter_rows(values_only=True)]


def _cell(value: object) -> str:
    """Return a cell as text: whole numbers without a decimal point, dates as year-month-day."""
    if value is None:
        return ""
    if isinstance(value, bool):
        return "true" if value else "false"
    if isinstance(value, float):
        return str(int(value)) if value.is_integer() and abs(value) < 1e15 else repr(value)
    if isinstance(value, dt.datetime):
        return value.date().isoformat()
    if isinstance(value, dt.date):
        return value.isoformat()
    return str(value).strip()


def read_parquet(source: Source, choose: Choose) -> RawTable:
    """Read a Parquet table; the types in the file are kept.

    Parameters
    ----------
    source : Source
        The file.
    choose : callable
        Picks the columns to read.

    Raises
    ------
    InputFileError
        If it is no Parquet file.
    """
    data = io.BytesIO(source.data())
    try:
        file = pq.ParquetFile(data)
    except (pa.ArrowException, OSError) as error:
        raise InputFileError(f"not a readable Parquet file ({error})", where=source.name) from error
    cells = file.schema_arrow.names
    names, repeated = unique_names(cells)
    wanted = list(choose(names))
    try:
        table = file.read(columns=[cells[names.index(name)] for name in wanted])
    except (pa.ArrowException, OSError) as error:
        raise InputFileError(f"the Parquet file is damaged ({error})", where=source.name) from error
    columns = {name: _plain(table.column(index)) for index, name in enumerate(wanted)}
    rows = file.metadata.num_rows
    lines = np.arange(2, rows + 2, dtype="int32")
    return RawTable(source.name, names, repeated, columns, lines, np.zeros(rows, dtype=bool), comma_decimals=True)


def _plain(column: pa.ChunkedArray) -> pa.Array:
    array = column.combine_chunks()
    if isinstance(array, pa.ChunkedArray):
        array = pa.concat_arrays(array.chunks) if array.num_chunks else pa.array([], array.type)
    return array.dictionary_decode() if pa.types.is_dictionary(array.type) else array
