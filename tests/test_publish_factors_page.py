"""The page of the default factors is what the tables make of it."""

from __future__ import annotations

import csv
from importlib import resources
from pathlib import Path

from landcarbon.factors.page import factors_page

ROOT = Path(__file__).resolve().parent.parent
FOLDER = resources.files("landcarbon.factors")


def test_the_page_is_current():
    page = (ROOT / "docs" / "factors.md").read_text(encoding="utf-8")
    assert page == factors_page(), "renew it: python -m landcarbon.factors"


def test_every_table_of_factors_is_on_the_page():
    page = factors_page()
    for item in FOLDER.iterdir():
        if item.name.endswith(".csv") and item.name != "tables.csv":
            header = item.read_text(encoding="utf-8").splitlines()[0].split(",")
            assert (f"`landcarbon/factors/{item.name}`" in page) == ("rule" not in header), item.name


def test_tables_named_are_there_and_sources_are_spelt_out():
    listed = list(csv.DictReader(FOLDER.joinpath("tables.csv").read_text(encoding="utf-8").splitlines()))
    assert all(FOLDER.joinpath(row["file"]).is_file() for row in listed)
    page = factors_page()
    for row in listed:
        rows = csv.DictReader(FOLDER.joinpath(row["file"]).read_text(encoding="utf-8").splitlines())
        for key in {line["source"] for line in rows if line.get("source")}:
            assert f"- **{key}**: " in page, key


def test_defaults_of_the_roots_and_known_marks():
    page = factors_page()
    # Frozen: the defaults as the data file states them.
    assert "| europe | cairns97_temperate |" in page
    assert "| tropics | ipcc2006_tropical_moist |" in page
    # Published: IPCC 2006 Vol 4 Table 4.3, p. 4.48.
    assert "| above_ground | temperate and boreal | conifer | all | 0.51 |" in page
    assert "memory" in page
