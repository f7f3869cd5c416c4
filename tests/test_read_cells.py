"""Cells to numbers, dates, flags and text."""

from __future__ import annotations

import math
from decimal import Decimal

import numpy as np
import pandas as pd
import pyarrow as pa
import pytest
from hypothesis import given
from hypothesis import strategies as st

from landcarbon.read.cells import as_category, as_date, as_flag, as_number, as_text, cell_text

finite = st.floats(allow_nan=False, allow_infinity=False)


def numbers(cells: list[str | None], *, comma: bool = False):
    return as_number(pa.array(cells, pa.string()), comma_decimals=comma)


@given(st.lists(finite, max_size=20))
def test_written_numbers_come_back_exactly(values: list[float]):
    """Identity: the shortest text of a float reads back as the same float."""
    parsed = numbers([repr(value) for value in values])
    assert not parsed.bad.any()
    assert parsed.values.tolist() == values


@given(st.lists(st.decimals(-9999, 9999, places=4), min_size=1, max_size=20))
def test_decimal_comma_reads_as_point(values: list):
    point = numbers([str(value) for value in values])
    comma = numbers([str(value).replace(".", ",") for value in values], comma=True)
    assert comma.decimal_comma
    assert not comma.bad.any()
    np.testing.assert_array_equal(point.values, comma.values)


@given(st.lists(st.one_of(finite.map(repr), st.text(max_size=8), st.none()), max_size=20))
def test_no_cell_passes_unnoticed(cells: list[str | None]):
    """A cell is a finite number, blank, or marked as bad; and a bad cell never turns into a number."""
    parsed = numbers(cells)
    for cell, value, bad in zip(cells, parsed.values, parsed.bad, strict=True):
        if bad:
            assert math.isnan(value)
        elif not math.isnan(value):
            assert float(cell.strip().replace(",", ".")) == value


@pytest.mark.parametrize("nothing", ["", " ", "NA", "n/a", "NULL", "nan", "None", "-", ".", None])
def test_nothing(nothing: str | None):
    parsed = numbers([nothing, "1"])
    assert math.isnan(parsed.values[0])
    assert not parsed.bad.any()


@pytest.mark.parametrize(
    "cell",
    ["abc", "12 cm", "1 234", "1.234,5", "1,234.5", "inf", "-inf", "1e999", "0x10", "--5", "1..2", "½", "12?", "+"],
)
def test_bad_numbers(cell: str):
    parsed = numbers([cell, "7", "1.5"])
    assert parsed.bad.tolist() == [True, False, False]
    assert parsed.values[1:].tolist() == [7.0, 1.5]


def test_bad_number_beside_decimal_commas():
    parsed = numbers(["12,5", "x", "3"], comma=True)
    assert parsed.bad.tolist() == [False, True, False]
    assert parsed.values[[0, 2]].tolist() == [12.5, 3.0]


def test_doubtful_thousands_are_not_guessed():
    # between decimal commas 1.234 may be a thousand or one and a bit
    assert numbers(["12,5", "1.234"], comma=True).bad.tolist() == [False, True]
    # in a comma-separated file a quoted 1,234 may be a thousand
    assert numbers(["1,234", "5"]).bad.tolist() == [True, False]
    # with another comma number that cannot be one, the commas are decimal commas
    assert numbers(["1,234", "5,5"]).values.tolist() == [1.234, 5.5]
    # points as decimals leave no room for decimal commas
    assert numbers(["12,5", "1.5"]).bad.tolist() == [True, False]


def test_huge_and_tiny_numbers_are_kept_for_the_checks():
    assert numbers(["1e300", "-4", "1e-320"]).values.tolist() == [1e300, -4.0, 1e-320]


@pytest.mark.parametrize("kind", [pa.int16(), pa.int64(), pa.float32(), pa.float64(), pa.decimal128(8, 2)])
def test_typed_numbers(kind: pa.DataType):
    values = [Decimal(12), None, Decimal(7)] if pa.types.is_decimal(kind) else [12, None, 7]
    cells = pa.array(values, kind)
    parsed = as_number(cells, comma_decimals=False)
    np.testing.assert_array_equal(parsed.values, [12.0, np.nan, 7.0])


def test_typed_infinity_is_bad():
    parsed = as_number(pa.array([np.inf, 1.0]), comma_decimals=False)
    assert parsed.bad.tolist() == [True, False]


def test_text_of_any_type():
    assert cell_text(pa.array([" 0104 ", None])).to_pylist() == ["0104", ""]
    assert cell_text(pa.array([12.0, 12.5, None])).to_pylist() == ["12", "12.5", ""]
    assert cell_text(pa.array([7, None])).to_pylist() == ["7", ""]
    assert cell_text(pa.array([True, False])).to_pylist() == ["true", "false"]
    assert as_text(pa.array(["NA", "x"])).tolist() == ["NA", "x"]  # NA may be a code


def test_category_is_sorted():
    column = as_category(pa.array(["b", " a", "b", None]))
    assert column.cat.categories.tolist() == ["", "a", "b"]
    assert column.astype("str").tolist() == ["b", "a", "b", ""]
    assert as_category(pa.array([], pa.string())).cat.categories.tolist() == []


@given(st.lists(st.dates(min_value=pd.Timestamp("1800-01-01").date()), max_size=10))
def test_iso_dates_round_trip(days: list):
    parsed = as_date(pa.array([day.isoformat() for day in days], pa.string()), None)
    assert not parsed.bad.any()
    assert [value.astype("datetime64[D]").item() for value in parsed.values] == days


@pytest.mark.parametrize(
    ("cell", "pattern", "day"),
    [
        ("2014-05-31", None, "2014-05-31"),
        ("2014-05-31T23:59:00", None, "2014-05-31"),
        ("2014-05-31 00:00:00", None, "2014-05-31"),
        ("31.05.2014", "%d.%m.%Y", "2014-05-31"),
        ("05/31/2014", "%m/%d/%Y", "2014-05-31"),
        ("2014-05-31", "%d.%m.%Y", "2014-05-31"),
    ],
)
def test_dates(cell: str, pattern: str | None, day: str):
    assert str(as_date(pa.array([cell]), pattern).values[0].astype("datetime64[D]")) == day


@pytest.mark.parametrize("cell", ["31.05.2014", "2014-02-30", "2014-13-01", "2014", "soon", "20140531"])
def test_bad_dates(cell: str):
    parsed = as_date(pa.array([cell, "", "2014-05-31"]), None)
    assert parsed.bad.tolist() == [True, False, False]
    assert np.isnat(parsed.values[:2]).all()


def test_typed_dates():
    stamps = pa.array([pd.Timestamp("2014-05-31 12:30"), None], pa.timestamp("ns"))
    assert str(as_date(stamps, "%d.%m.%Y").values[0].astype("datetime64[D]")) == "2014-05-31"
    assert np.isnat(as_date(stamps, None).values[1])
    assert str(as_date(stamps.cast(pa.date32(), safe=False), None).values[0].astype("datetime64[D]")) == "2014-05-31"
    assert len(as_date(pa.array([], pa.string()), None).values) == 0


def test_flags():
    parsed = as_flag(pa.array(["Yes", "n", "1", "FALSE", "", "maybe"]))
    np.testing.assert_array_equal(parsed.values, [1, 0, 1, 0, np.nan, np.nan])
    assert parsed.bad.tolist() == [False] * 5 + [True]
    assert len(as_flag(pa.array([], pa.string())).values) == 0
