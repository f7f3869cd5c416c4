"""CSV tables: no cell is a formula, bytes do not depend on chance, what was written can be read back."""

from __future__ import annotations

import csv

import numpy as np
import pandas as pd
import pytest
from hypothesis import given
from hypothesis import strategies as st
from pandas.testing import assert_frame_equal
from publish_sample import HOSTILE, sample_results

from landcarbon.errors import ResultsError
from landcarbon.publish.results import STOCK_COLUMNS
from landcarbon.publish.tables import read_table, restore_text, safe_text, write_table
from landcarbon.publish.writing import write_text_aside

# The signs that spreadsheets take for the start of a formula, as listed by the OWASP page on CSV injection (common
# practice): equals, plus, minus, at, tab, carriage return.
FORMULA_STARTS = ("=", "+", "-", "@", "\t", "\r")


@pytest.mark.parametrize("start", FORMULA_STARTS)
def test_formulas_are_neutralised(start):
    assert safe_text(start + "1+cmd()").startswith("'")


@pytest.mark.parametrize("text", ["-3.2", "+4", "-.5e-3", "oak", "", "a=b", "P-1", "'"])
def test_harmless_text_stays(text):
    assert safe_text(text) == text


@given(st.text(alphabet="'=+-@\t\n1.ea ", max_size=8))
def test_neutralised_text_comes_back(text):
    assert restore_text(safe_text(text)) == text


def test_no_cell_of_a_hostile_inventory_is_a_formula(tmp_path):
    results = sample_results(name="=HYPERLINK(1)", parcels=(*HOSTILE, "@sum"))
    for name, frame in (("stocks.csv", results.stocks), ("findings.csv", results.findings)):
        write_table(frame, tmp_path / name)
        with (tmp_path / name).open(encoding="utf-8", newline="") as file:
            rows = list(csv.reader(file))
        assert len({len(row) for row in rows}) == 1
        for cell in (cell for row in rows for cell in row):
            assert not cell.startswith(FORMULA_STARTS) or pd.notna(pd.to_numeric(cell, errors="coerce"))
    back = read_table(tmp_path / "stocks.csv")
    assert set(back["unit"]) == set(results.stocks["unit"])


def test_numbers(tmp_path):
    values = [1 / 3, 0.1 + 0.2, -0.0, np.nan, 123456789.123, 1e-9]
    frame = pd.DataFrame({"step": ["a"] * 6, "kg": values, "plots": range(6)})
    write_table(frame, tmp_path / "free.csv")
    lines = (tmp_path / "free.csv").read_bytes().decode().split("\n")
    # Ten significant digits of the exact values, worked out by hand.
    assert lines == [
        "step,kg,plots",
        "a,0.3333333333,0",
        "a,0.3,1",
        "a,0,2",
        "a,,3",
        "a,123456789.1,4",
        "a,1e-09,5",
        "",
    ]


def test_names_that_look_like_something_else_stay_names(tmp_path):
    stocks = (
        sample_results().stocks.head(4).assign(unit=["NA", "007", "True", ""], survey=["2014", "1e3", "nan", "None"])
    )
    write_table(stocks, tmp_path / "stocks.csv")
    assert_frame_equal(read_table(tmp_path / "stocks.csv"), stocks.reset_index(drop=True), check_dtype=False)


def test_line_ends_inside_cells_do_not_break_rows(tmp_path):
    frame = pd.DataFrame({"message": ["one\r\ntwo", "three\rfour", "nul\x00", 'quote" , comma'], "count": range(4)})
    write_table(frame, tmp_path / "free.csv")
    with (tmp_path / "free.csv").open(encoding="utf-8", newline="") as file:
        rows = list(csv.reader(file))
    assert [row[1] for row in rows[1:]] == ["0", "1", "2", "3"]


def test_categories_and_dates(tmp_path):
    frame = pd.DataFrame(
        {"survey": pd.Categorical(["2014", None]), "day": pd.to_datetime(["2014-06-01", None]), "ok": [True, False]}
    )
    write_table(frame, tmp_path / "free.csv")
    assert (tmp_path / "free.csv").read_text() == "survey,day,ok\n2014,2014-06-01,True\n,,False\n"


def test_missing_column_is_a_plain_message(tmp_path):
    (tmp_path / "stocks.csv").write_text(",".join(STOCK_COLUMNS[:-1]) + "\n")
    with pytest.raises(ResultsError, match=r"stocks\.csv cannot be read \(no column method\)"):
        read_table(tmp_path / "stocks.csv")


def test_text_in_a_number_is_a_plain_message(tmp_path):
    write_table(sample_results().stocks.head(1), tmp_path / "stocks.csv")
    text = (tmp_path / "stocks.csv").read_text().replace(",12,", ",twelve,")
    (tmp_path / "stocks.csv").write_text(text)
    with pytest.raises(ResultsError, match=r"stocks\.csv cannot be read"):
        read_table(tmp_path / "stocks.csv")


def test_text_file_is_there_whole_or_not_at_all(tmp_path, monkeypatch):
    target = tmp_path / "map.html"
    assert write_text_aside(target, "old\n") == target
    with monkeypatch.context() as patch:
        patch.setattr("os.replace", lambda *_: (_ for _ in ()).throw(PermissionError(13, "in use")))
        with pytest.raises(ResultsError, match="could not be written: in use"):
            write_text_aside(target, "new\n")
    assert target.read_bytes() == b"old\n"
    assert [item.name for item in tmp_path.iterdir()] == ["map.html"]


def test_text_file_in_a_bad_place(tmp_path):
    with pytest.raises(ResultsError, match="no folder"):
        write_text_aside(tmp_path / "nowhere" / "map.html", "")
    with pytest.raises(ResultsError, match="a folder, not a file"):
        write_text_aside(tmp_path, "")
