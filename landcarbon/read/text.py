"""CSV and other delimited text in the dressings it comes in."""

from __future__ import annotations

import csv
import gzip
import io
import zlib
from dataclasses import dataclass

import numpy as np
import pyarrow as pa
from pyarrow import csv as arrow_csv

from landcarbon.errors import InputFileError
from landcarbon.read.notes import note
from landcarbon.read.source import Source
from landcarbon.read.table import Choose, RawTable, unique_names

__all__ = ["decode", "read_text", "sniff_delimiter"]

_DELIMITERS = (";", "\t", "|", ",")
_BOMS = ((b"\xef\xbb\xbf", "utf-8"), (b"\xff\xfe", "utf-16-le"), (b"\xfe\xff", "utf-16-be"))
_LONGEST_RECORD = 50  # lines; a quoted cell that runs on for longer is taken as a quotation mark never closed


@dataclass(frozen=True)
class _Head:
    """What the header line tells: cells, delimiter, lines used up and the text behind it."""

    cells: list[str]
    delimiter: str
    lines: int
    body: bytes


def decode(data: bytes, name: str) -> tuple[bytes, str]:
    """Bring the bytes of a text file to UTF-8 without byte order mark and with plain line ends.

    Parameters
    ----------
    data : bytes
        As in the file.
    name : str
        Name of the file for messages.

    Returns
    -------
    bytes, str
        UTF-8 text, and the encoding found.

    Raises
    ------
    InputFileError
        If the bytes are no text.
    """
    text: str | None = None
    encoding = "utf-8"
    for mark, found in _BOMS:
        if data.startswith(mark):
            encoding, data = found, data[len(mark) :]
            break
    if encoding != "utf-8":
        try:
            text = data.decode(encoding)
        except UnicodeDecodeError as error:
            raise InputFileError(f"not sound UTF-16 text ({error.reason})", where=name) from error
    nul = text.find("\0") if text is not None else data.find(b"\0")
    if nul >= 0:
        line = (text.count("\n", 0, nul) if text is not None else data.count(b"\n", 0, nul)) + 1
        raise InputFileError(
            f"line {line} holds a NUL byte, so this is no plain text",
            where=name,
            remedy="Save the table again as CSV in UTF-8.",
        )
    if text is None:
        encoding = _eight_bit(data)
        text = data.decode(encoding) if encoding != "utf-8" else None
    clean = text.encode("utf-8") if text is not None else data
    return _plain_line_ends(clean), encoding


def _eight_bit(data: bytes) -> str:
    for encoding in ("utf-8", "cp1252"):
        try:
            data.decode(encoding)
        except UnicodeDecodeError:
            continue
        return encoding
    return "latin-1"


def _plain_line_ends(data: bytes) -> bytes:
    if b"\r" not in data:
        return data
    return data.replace(b"\r\n", b"\n").replace(b"\r", b"\n")


def sniff_delimiter(first: str, second: str = "") -> str:
    """Return the delimiter of a table from its header line.

    Parameters
    ----------
    first, second : str
        Header line and the line below it; the second breaks a tie.
    """
    counts = {mark: (_outside_quotes(first, mark), _outside_quotes(second, mark)) for mark in _DELIMITERS}
    agreeing = [mark for mark, (a, b) in counts.items() if a and a == b]
    candidates = agreeing or [mark for mark, (a, _) in counts.items() if a]
    return max(candidates, key=lambda mark: counts[mark][0]) if candidates else ","


def _outside_quotes(line: str, mark: str) -> int:
    return sum(part.count(mark) for part in line.split('"')[::2])


def read_text(source: Source, choose: Choose) -> RawTable:
    """Read a delimited text file.

    Parameters
    ----------
    source : Source
        The file; may be compressed with gzip.
    choose : callable
        Picks the columns to read.

    Raises
    ------
    InputFileError
        If it is no such file.
    """
    data, encoding = decode(_unzipped(source), source.name)
    head = _head(data, source.name)
    names, repeated = unique_names(head.cells)
    wanted = list(choose(names))
    raw = _fast(source.name, names, wanted, head)
    if raw is None:
        raw = _exact(source.name, names, wanted, head)
    raw.repeated = repeated
    if encoding in ("cp1252", "latin-1"):
        raw.findings.append(note("text not in UTF-8", file=source.name, value=encoding))
    return raw


def _unzipped(source: Source) -> bytes:
    data = source.data()
    if not data.startswith(b"\x1f\x8b"):
        return data
    try:
        return gzip.decompress(data)
    except (OSError, EOFError, zlib.error) as error:
        raise InputFileError(f"the compressed file is damaged ({error})", where=source.name) from error


def _head(data: bytes, name: str) -> _Head:
    """Find the header: the first line that holds something, after an optional ``sep=`` line."""
    start, lines, forced = 0, 0, ""
    while True:
        end = data.find(b"\n", start)
        end = len(data) if end < 0 else end
        line = data[start:end].decode("utf-8")
        if line.lower().startswith("sep=") and len(line.strip()) == 5:
            forced = line.strip()[4]
        elif line.strip(" \t;,|"):
            break
        start, lines = end + 1, lines + 1
        if start >= len(data):
            raise InputFileError("the file holds no header line", where=name)
    second = data[end + 1 : (data.find(b"\n", end + 1) + 1 or len(data) + 1) - 1].decode("utf-8")
    delimiter = forced or sniff_delimiter(line, second)
    reader = csv.reader(io.StringIO(data[start:].decode("utf-8") if '"' in line else line), delimiter=delimiter)
    try:
        cells = next(reader)
    except csv.Error as error:
        raise InputFileError(f"the header line cannot be read ({error})", where=name) from error
    for _ in range(reader.line_num - 1):  # a header cell may hold line ends
        end = data.find(b"\n", end + 1)
        end = len(data) if end < 0 else end
    return _Head(cells, delimiter, lines + reader.line_num, data[end + 1 :])


def _fast(name: str, names: list[str], wanted: list[str], head: _Head) -> RawTable | None:
    """Read with Arrow; None if line numbers would not be certain or rows differ in length."""
    if not head.body.strip(b"\n"):
        return _raw(name, names, {column: pa.array([], pa.string()) for column in wanted}, np.empty(0, "int32"), head)
    ragged: list[object] = []

    def skip(row: object) -> str:
        ragged.append(row)
        return "skip"

    # Arrow gives no row count without columns, so the first one stands in where none is wanted.
    included = wanted or names[:1]
    try:
        table = arrow_csv.read_csv(
            io.BytesIO(head.body),
            read_options=arrow_csv.ReadOptions(column_names=names),
            parse_options=arrow_csv.ParseOptions(
                delimiter=head.delimiter, newlines_in_values=b'"' in head.body, invalid_row_handler=skip
            ),
            convert_options=arrow_csv.ConvertOptions(
                column_types={column: pa.string() for column in names},
                include_columns=included,
                strings_can_be_null=False,
                check_utf8=False,
            ),
        )
    except pa.ArrowInvalid:
        return None
    lines = head.body.count(b"\n") + (not head.body.endswith(b"\n"))
    if ragged or lines != table.num_rows:
        return None
    numbers = np.arange(head.lines + 1, head.lines + 1 + lines, dtype="int32")
    return _raw(name, names, {column: table[column].combine_chunks() for column in wanted}, numbers, head)


def _raw(
    name: str,
    names: list[str],
    columns: dict[str, pa.Array],
    lines: np.ndarray,
    head: _Head,
    ragged: np.ndarray | None = None,
) -> RawTable:
    marked = np.zeros(len(lines), dtype=bool) if ragged is None else ragged
    return RawTable(name, names, set(), columns, lines, marked, head.delimiter != ",")


def _exact(name: str, names: list[str], wanted: list[str], head: _Head) -> RawTable:
    """Read record by record, keeping the line of each; rows of a wrong length are padded or cut, and marked."""
    rows: list[list[str]] = []
    lines: list[int] = []
    ragged: list[bool] = []
    width, before = len(names), 0
    reader = csv.reader(io.StringIO(head.body.decode("utf-8"), newline=""), delimiter=head.delimiter)
    odd = head.body.count(b'"') % 2 == 1
    try:
        for cells in reader:
            start, span = before + 1, reader.line_num - before
            before = reader.line_num
            if span > _LONGEST_RECORD or (odd and span > 1):
                raise InputFileError(
                    f'line {head.lines + start}: a quotation mark (") is opened and not closed', where=name
                )
            if not cells:
                continue
            extra = [cell for cell in cells[width:] if cell.strip()]
            ragged.append(len(cells) < width or bool(extra))
            rows.append((cells + [""] * width)[:width])
            lines.append(head.lines + start)
    except csv.Error as error:
        raise InputFileError(f"line {head.lines + before + 1} cannot be read ({error})", where=name) from error
    at = {column: names.index(column) for column in wanted}
    columns = {column: pa.array([row[place] for row in rows], pa.string()) for column, place in at.items()}
    return _raw(name, names, columns, np.array(lines, dtype="int32"), head, np.array(ragged, dtype=bool))
