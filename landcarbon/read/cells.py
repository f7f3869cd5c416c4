"""From the cells of a column to text, numbers, dates and flags, with the bad cells marked."""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
import pandas as pd
import pyarrow as pa
import pyarrow.compute as pc

__all__ = ["Parsed", "as_category", "as_date", "as_flag", "as_number", "as_text", "cell_text"]

# Written for "nothing here" in figures and dates (common practice, no source). A text column keeps them as they are:
# NA may be a species code.
_NOTHING = pa.array(["", "na", "n/a", "#n/a", "null", "nan", "none", "-", "."])

_NUMBER = r"^[+-]?(\d+\.?\d*|\.\d+)([eE][+-]?\d+)?$"
_COMMA_NUMBER = r"^[+-]?(\d+,\d*|,\d+)([eE][+-]?\d+)?$"
_LIKE_THOUSANDS = r"^[+-]?\d{1,3}[.,]\d{3}$"
_ISO_DATE = r"^\d{4}-\d{2}-\d{2}([T ].*)?$"

_YES = frozenset({"yes", "y", "true", "t", "1"})
_NO = frozenset({"no", "n", "false", "f", "0"})


@dataclass(frozen=True)
class Parsed:
    """Values of a column and the mask of cells that hold something else than was wanted."""

    values: np.ndarray
    bad: np.ndarray
    decimal_comma: bool = False


def cell_text(column: pa.Array) -> pa.Array:
    """Return a column of any type as trimmed text; whole numbers without a decimal point, nothing as blank."""
    kind = column.type
    if pa.types.is_floating(kind):
        encoded = pc.fill_null(column.cast(pa.float64()), float("nan")).dictionary_encode()
        levels = pa.array([_figure(value) for value in encoded.dictionary.to_pylist()], pa.string())
        return levels.take(encoded.indices)
    if pa.types.is_timestamp(kind):
        column = pc.strftime(column, format="%Y-%m-%d")
    if not pa.types.is_string(column.type):
        column = column.cast(pa.string())
    return pc.fill_null(pc.utf8_trim_whitespace(column), "")


def _figure(value: float) -> str:
    if value != value:
        return ""
    return str(int(value)) if value.is_integer() else repr(value)


def as_text(column: pa.Array) -> pd.Series:
    """Return a column as strings."""
    return pd.Series(cell_text(column).to_pandas(), dtype="str")


def as_category(column: pa.Array) -> pd.Series:
    """Return a column as a category with sorted levels."""
    encoded = cell_text(column).dictionary_encode()
    codes = encoded.indices.to_numpy(zero_copy_only=False)
    levels = pd.Index(encoded.dictionary.to_pandas(), dtype="str")
    order = levels.argsort()
    place = np.empty(len(order), dtype=codes.dtype)
    place[order] = np.arange(len(order))
    return pd.Series(pd.Categorical.from_codes(place[codes] if len(order) else codes, levels[order]))


def as_number(column: pa.Array, *, comma_decimals: bool) -> Parsed:
    """Return a column as floats.

    Parameters
    ----------
    column : Array
        Cells of any type.
    comma_decimals : bool
        Whether a comma can only be a decimal comma (the delimiter of the file is another sign). Otherwise a comma is
        taken for one only if the column leaves no doubt.

    Returns
    -------
    Parsed
        NaN for nothing and for bad cells.
    """
    kind = column.type
    if pa.types.is_floating(kind) or pa.types.is_integer(kind) or pa.types.is_decimal(kind):
        values = np.array(column.cast(pa.float64()).to_numpy(zero_copy_only=False), dtype="float64")
        bad = np.isinf(values)
        return Parsed(np.where(bad, np.nan, values), bad)
    text = cell_text(column)
    empty = pc.is_in(pc.utf8_lower(text), value_set=_NOTHING)
    text = pc.if_else(empty, pa.scalar(None, pa.string()), text)
    try:
        values = _floats(text)
    except pa.ArrowInvalid:
        return _numbers_with_faults(text, comma_decimals)
    bad = np.isinf(values) | (np.isnan(values) & ~_mask(pc.is_null(text)))
    return Parsed(np.where(bad, np.nan, values), bad)


def _floats(text: pa.Array) -> np.ndarray:
    return np.array(text.cast(pa.float64()).to_numpy(zero_copy_only=False), dtype="float64")


def _mask(array: pa.Array) -> np.ndarray:
    return np.array(pc.fill_null(array, False).to_numpy(zero_copy_only=False), dtype=bool)


def _numbers_with_faults(text: pa.Array, comma_decimals: bool) -> Parsed:
    plain = _mask(pc.match_substring_regex(text, _NUMBER))
    comma = _mask(pc.match_substring_regex(text, _COMMA_NUMBER))
    thousands = _mask(pc.match_substring_regex(text, _LIKE_THOUSANDS))
    dotted = plain & _mask(pc.match_substring(text, "."))
    use_comma = bool(comma.any()) and (comma_decimals or (not dotted.any() and bool((comma & ~thousands).any())))
    good = plain.copy()
    if use_comma:
        # Beside decimal commas 1.234 may be a thousand or one and a bit: not for the program to decide.
        good = (plain & ~(dotted & thousands)) | comma
    kept = pc.if_else(pa.array(good), pc.replace_substring(text, ",", "."), pa.scalar(None, pa.string()))
    values = _floats(kept)
    given = ~_mask(pc.is_null(text))
    bad = given & (~good | ~np.isfinite(values))
    return Parsed(np.where(bad, np.nan, values), bad, use_comma)


def as_date(column: pa.Array, pattern: str | None) -> Parsed:
    """Return a column as dates (midnight).

    Parameters
    ----------
    column : Array
        Cells of any type.
    pattern : str or None
        How dates are written, as for ``strftime``; None for year-month-day, a time of day behind it being left aside.

    Returns
    -------
    Parsed
        NaT for nothing and for bad cells.
    """
    typed = pa.types.is_date(column.type) or pa.types.is_timestamp(column.type)
    encoded = cell_text(column).dictionary_encode()
    words = pd.Series(encoded.dictionary.to_pandas(), dtype="str")
    nothing = words.str.lower().isin(_NOTHING.to_pylist()).to_numpy()
    if pattern is None or typed:
        dates = pd.to_datetime(words.where(words.str.match(_ISO_DATE), "").str[:10], format="%Y-%m-%d", errors="coerce")
    else:
        dates = pd.to_datetime(words, format=pattern, errors="coerce")
        iso = pd.to_datetime(words.where(words.str.match(_ISO_DATE), "").str[:10], format="%Y-%m-%d", errors="coerce")
        dates = dates.fillna(iso)  # cells typed as dates in a workbook arrive as year-month-day
    levels = dates.dt.normalize().to_numpy(dtype="datetime64[s]")
    wrong = dates.isna().to_numpy() & ~nothing
    codes = encoded.indices.to_numpy(zero_copy_only=False)
    if not len(words):
        return Parsed(np.empty(0, "datetime64[s]"), np.empty(0, bool))
    return Parsed(levels[codes], wrong[codes])


def as_flag(column: pa.Array) -> Parsed:
    """Return a column of yes and no as floats 1 and 0, NaN for nothing and for bad cells."""
    encoded = cell_text(column).dictionary_encode()
    words = [word.lower() for word in encoded.dictionary.to_pylist()]
    levels = np.array([1.0 if w in _YES else 0.0 if w in _NO else np.nan for w in words], dtype="float64")
    nothing = set(_NOTHING.to_pylist())
    wrong = np.array([w not in _YES and w not in _NO and w not in nothing for w in words], dtype=bool)
    codes = encoded.indices.to_numpy(zero_copy_only=False)
    if not words:
        return Parsed(np.empty(0), np.empty(0, bool))
    return Parsed(levels[codes], wrong[codes])
