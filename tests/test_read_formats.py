"""The same table in the dressings it comes in gives the same frame."""

from __future__ import annotations

import gzip
import io
from pathlib import Path

import numpy as np
import openpyxl
import pandas as pd
import pytest
from read_samples import PLOTS, TREES, read, rules, settings_text

from landcarbon.errors import InputFileError
from landcarbon.inputs import Inputs
from landcarbon.read.text import decode, sniff_delimiter

NAMED = TREES.replace("birch", "Bäume")


def workbook(text: str, sheet: str = "Trees") -> bytes:
    book = openpyxl.Workbook()
    book.active.title = "Notes"
    page = book.create_sheet(sheet)
    for number, line in enumerate(text.splitlines()):
        cells: list[object] = line.split(",")
        if number:
            cells[1] = float(cells[1])  # spreadsheets keep whole numbers as floats
            cells[4] = float(cells[4])
            cells[5] = float(cells[5]) if cells[5] else None
            cells[6] = pd.Timestamp(cells[6]).to_pydatetime()
        page.append(cells)
    target = io.BytesIO()
    book.save(target)
    return target.getvalue()


def parquet(text: str) -> bytes:
    frame = pd.read_csv(io.StringIO(text), dtype={"plot": str, "tree": float}, parse_dates=["date"])
    target = io.BytesIO()
    frame.astype({"species": "category"}).to_parquet(target)
    return target.getvalue()


def semicolons(text: str, *, comma: bool) -> str:
    lines = text.replace(",", ";")
    return lines.replace(".", ",") if comma else lines


DRESSINGS = {
    "comma, UTF-8": ("trees.csv", NAMED.encode()),
    "byte order mark, Windows line ends": ("trees.csv", NAMED.replace("\n", "\r\n").encode("utf-8-sig")),
    "old Macintosh line ends": ("trees.csv", NAMED.replace("\n", "\r").encode()),
    "semicolon, decimal comma, Latin-1": ("trees.csv", semicolons(NAMED, comma=True).encode("latin-1")),
    "tab": ("trees.tsv", NAMED.replace(",", "\t").encode()),
    "bar": ("trees.txt", NAMED.replace(",", "|").encode()),
    "UTF-16": ("trees.csv", semicolons(NAMED, comma=True).encode("utf-16")),
    "UTF-16, big end first": ("trees.csv", b"\xfe\xff" + NAMED.encode("utf-16-be")),
    "quoted": (
        "trees.csv",
        "\n".join(",".join(f'"{c}"' for c in line.split(",")) for line in NAMED.splitlines()).encode(),
    ),
    "quoted decimal commas": (
        "trees.csv",
        "\n".join(
            ",".join(f'"{c.replace(".", ",")}"' for c in line.split(",")) for line in NAMED.splitlines()
        ).encode(),
    ),
    "gzip": ("trees.csv.gz", gzip.compress(NAMED.encode())),
    "workbook": ("trees.xlsx#Trees", workbook(NAMED)),
    "Parquet": ("trees.parquet", parquet(NAMED)),
    "blanks around cells": ("trees.csv", NAMED.replace(",", " , ").encode()),
}


def read_as(folder: Path, name: str, data: bytes) -> Inputs:
    (folder / name.partition("#")[0]).write_bytes(data)
    return read(folder, settings_text(surveys=f'[surveys.2014]\ntrees = "{name}"'))


@pytest.mark.parametrize("dressing", DRESSINGS)
def test_same_frame_in_every_dressing(tmp_path: Path, dressing: str):
    expected = read_as(tmp_path, "trees.csv", NAMED.encode()).trees
    found = read_as(tmp_path, *DRESSINGS[dressing])
    pd.testing.assert_frame_equal(found.trees.drop(columns="file"), expected.drop(columns="file"))
    assert list(found.trees["plot"]) == ["0101", "0101", "0102"]
    assert list(found.trees["tree"]) == ["1", "2", "1"]
    assert found.trees["dbh_cm"].tolist() == [25.5, 12.25, 8.0]


def test_what_is_told_of_the_dressing(tmp_path: Path):
    inputs = read_as(tmp_path, *DRESSINGS["semicolon, decimal comma, Latin-1"])
    assert rules(inputs, "files") == ["text not in UTF-8", "decimal comma"]
    assert set(inputs.findings.loc[inputs.findings["rule"] == "decimal comma", "column"]) == {"dbh", "height"}
    assert rules(read_as(tmp_path, *DRESSINGS["comma, UTF-8"]), "files") == []


def test_lines_are_those_of_the_file(tmp_path: Path):
    text = '\n\nplot,species,dbh,remark\n0101,oak,10,\n\n0101,oak,11,"two\nlines"\n0101,oak,12,\n'
    inputs = read(tmp_path, trees_csv=text)
    assert inputs.trees["row"].tolist() == [4, 6, 8]
    assert inputs.trees["dbh_cm"].tolist() == [10, 11, 12]


def test_line_naming_the_delimiter(tmp_path: Path):
    inputs = read(tmp_path, trees_csv="sep=;\nplot;species;dbh\n0101;oak;10,5\n")
    assert inputs.trees[["row", "dbh_cm"]].to_numpy().tolist() == [[3.0, 10.5]]


def test_row_of_a_workbook(tmp_path: Path):
    book = openpyxl.Workbook()
    for cells in ([], ["plot", "species", "dbh"], ["0101", "oak", 10], [], [12, "oak", "=1+1"], [None, None, None]):
        book.active.append(cells)
    book.save(tmp_path / "trees.xlsx")
    plots = PLOTS + "12,400050,5600060\n"
    inputs = read(tmp_path, settings_text(surveys='[surveys.2014]\ntrees = "trees.xlsx"'), plots_csv=plots)
    assert inputs.trees["row"].tolist() == [3, 5]
    assert inputs.trees["plot"].tolist() == ["0101", "12"]
    assert np.isnan(inputs.trees["dbh_cm"][1])  # a formula never calculated has no value


def test_missing_column_of_a_parquet_file(tmp_path: Path):
    (tmp_path / "trees.parquet").write_bytes(parquet(TREES))
    text = settings_text(surveys='[surveys.2014]\ntrees = "trees.parquet"', more='[columns.trees]\ndbh = "D"')
    with pytest.raises(InputFileError, match=r"^trees\.parquet: no column 'D' \(for dbh\)"):
        read(tmp_path, text)


def test_sign_of_a_sheet_in_a_file_name(tmp_path: Path):
    assert len(read_as(tmp_path, "trees.csv", b"plot,species,dbh\n0101,oak,5\n").trees) == 1
    (tmp_path / "plot #1.csv").write_text(TREES)
    text = settings_text(surveys='[surveys.2014]\ntrees = "plot #1.csv"')
    assert read(tmp_path, text).files["file"].tolist() == ["plots.csv", "plot #1.csv"]


def test_sheet_stands_in_a_column_of_its_own(tmp_path: Path):
    """Independent: SHA-256 of the standard library over the workbook written here."""
    import hashlib

    data = workbook(TREES)
    inputs = read_as(tmp_path, "trees.xlsx#Trees", data)
    row = inputs.files.set_index("file").loc["trees.xlsx"]
    assert (row["sheet"], row["sha256"]) == ("Trees", hashlib.sha256(data).hexdigest())
    assert inputs.files["sheet"].tolist() == ["", "Trees"]
    # a finding points at the sheet
    assert set(inputs.trees["file"]) == {"trees.xlsx#Trees"}


def test_missing_sheet(tmp_path: Path):
    with pytest.raises(InputFileError, match=r"no sheet 'Tree'.*Sheets: Notes, Trees\. Did you mean 'Trees'\?"):
        read_as(tmp_path, "trees.xlsx#Tree", workbook(TREES))


def test_several_files_and_columns_in_another_order(tmp_path: Path):
    other = "dbh,species,plot\n33,beech,0103\n"
    surveys = '[surveys.2014]\ntrees = ["trees.csv", "more.csv"]'
    inputs = read(tmp_path, settings_text(surveys=surveys), more_csv=other)
    assert inputs.trees["row_id"].tolist() == [0, 1, 2, 3]
    assert inputs.trees["file"].astype(str).tolist() == ["trees.csv"] * 3 + ["more.csv"]
    assert inputs.trees["species"].cat.categories.tolist() == ["beech", "birch", "oak"]
    assert inputs.trees["plot"].tolist()[-1] == "0103"


def test_first_of_several_names_counts(tmp_path: Path):
    surveys = '[surveys.2014]\ntrees = ["trees.csv", "more.csv"]'
    more = '[columns.trees]\ndbh = ["D", "dbh"]\n[units.trees]\nheight = "ft"'
    inputs = read(tmp_path, settings_text(surveys=surveys, more=more), more_csv="plot,species,D,dbh\n0103,oak,3,4\n")
    assert inputs.trees["dbh_cm"].tolist() == [25.5, 12.25, 8.0, 3.0]
    assert inputs.trees["height_m"][0] == pytest.approx(18.2 * 0.3048)


def test_units_mapping_and_unused_columns(tmp_path: Path):
    more = '[columns.trees]\ndbh = "D130"\ntree = ""\n[units.trees]\ndbh = "mm"'
    text = "PLOT,Species,D130,tree,note\n0101,oak,279,5,x\n"
    inputs = read(tmp_path, settings_text(more=more), trees_csv=text)
    assert inputs.trees["dbh_cm"].tolist() == [27.9]
    assert inputs.trees["tree"].tolist() == [""]
    row = inputs.files.set_index("file").loc["trees.csv"]
    assert row["columns"] == "plot=PLOT; species=Species; dbh=D130"
    assert row["unused"] == "tree; note"


def test_files_have_checksums(tmp_path: Path):
    """Independent: SHA-256 of the standard library over the bytes written here."""
    import hashlib

    inputs = read(tmp_path)
    row = inputs.files.set_index("file").loc["plots.csv"]
    assert row["sha256"] == hashlib.sha256(PLOTS.encode()).hexdigest()
    assert (row["bytes"], row["rows"], row["role"]) == (len(PLOTS), 3, "plots")
    assert inputs.files["role"].tolist() == ["plots", "trees 2014"]


@pytest.mark.parametrize(
    ("first", "second", "mark"),
    [
        ("a,b,c", "1,2,3", ","),
        ("a;b;c", "1,5;2;3", ";"),
        ("a\tb", "1\t2", "\t"),
        ("a|b", "", "|"),
        ("plot;dbh (cm, over bark);x", "1;2;3", ";"),
        ('"dbh; cm, over bark",plot', "1,2", ","),
        ("single", "1", ","),
        ("a;b,c", "1;2,5", ";"),
    ],
)
def test_delimiter(first: str, second: str, mark: str):
    assert sniff_delimiter(first, second) == mark


def test_decode_tells_the_encoding():
    assert decode("ä".encode(), "f") == ("ä".encode(), "utf-8")
    assert decode(b"\xe4\x80", "f") == ("ä€".encode(), "cp1252")
    assert decode(b"\xe4\x81", "f") == ("ä\x81".encode(), "latin-1")


def test_wide_table_of_many_rows_keeps_its_order(tmp_path: Path):
    rows = 20_000
    text = "plot,tree,species,dbh\n" + "".join(f"0101,{n},oak,{n / 100 + 5:.2f}\n" for n in range(rows))
    trees = read(tmp_path, trees_csv=text).trees
    assert trees["row"].tolist() == list(range(2, rows + 2))
    np.testing.assert_array_equal(trees["dbh_cm"], [float(f"{n / 100 + 5:.2f}") for n in range(rows)])
