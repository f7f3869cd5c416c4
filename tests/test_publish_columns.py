"""Every column that is written is described in the README of the results."""

from __future__ import annotations

import dataclasses
from pathlib import Path

import pandas as pd
import pyogrio
import pytest
from publish_sample import sample_results

from landcarbon.api import open_inventory
from landcarbon.publish.columns import columns_of, describe, described_tables
from landcarbon.publish.folder import write_results
from landcarbon.publish.readme import readme_text
from landcarbon.publish.results import FURTHER_FILES, OPTIONAL_COLUMNS, SAMPLE_FILES
from landcarbon.publish.tables import table_columns

ROOT = Path(__file__).resolve().parent.parent


@pytest.fixture(scope="module")
def demo_folder(tmp_path_factory):
    results = open_inventory(ROOT / "demo_parcels" / "inventory.toml").results
    return write_results(results, tmp_path_factory.mktemp("demo") / "results")


def written(folder: Path) -> dict[str, list[str]]:
    tables = {path.name: list(pd.read_csv(path, nrows=0).columns) for path in folder.glob("*.csv")}
    tables |= {path.name: list(pd.read_parquet(path).columns) for path in folder.glob("*.parquet")}
    package = folder / "parcels.gpkg"
    layers = [name for name, _ in pyogrio.list_layers(package)]
    return tables | {f"parcels.gpkg {name}": list(pyogrio.read_info(package, layer=name)["fields"]) for name in layers}


@pytest.mark.parametrize("which", ["sample", "demo"])
def test_every_written_column_is_described(which, demo_folder, tmp_path):
    folder = demo_folder if which == "demo" else write_results(sample_results(), tmp_path / "results")
    tables = written(folder)
    assert set(tables) <= set(described_tables())
    lacking = set(described_tables()) - set(tables)
    absent = {*SAMPLE_FILES.values(), "area_effect.csv"} if which == "demo" else set(FURTHER_FILES.values())
    assert lacking <= absent
    text = (folder / "README.txt").read_text(encoding="utf-8")
    for table, names in tables.items():
        found, left = describe(table, names)
        assert left == [], table
        section = text.split(f"COLUMNS of {table}\n", 1)[1].split("\n\n", 1)[0]
        for column in found:
            assert f"  {column.shown}" in section, (table, column.column)
    assert "UTF-8" in text


@pytest.mark.parametrize("table", ["stocks.csv", "change.csv", "findings.csv"])
def test_fixed_tables_are_described_in_their_order(table):
    described = [row.column for row in columns_of(table)]
    assert [name for name in described if name not in OPTIONAL_COLUMNS] == table_columns(table)


def test_descriptions_are_whole():
    rows = [row for table in described_tables() for row in columns_of(table)]
    assert all(row.meaning for row in rows)
    assert len({(row.table, row.column) for row in rows}) == len(rows)
    units = {"_ha": "ha", "_cm": "cm", "_kg": "kg", "_t_c": "t C"}
    for row in rows:
        name = row.column.split("_{")[0]
        for ending, unit in units.items():
            if name.endswith(ending) and ("t_c" in ending or "t_c" not in name):
                assert unit in row.unit, row


def test_samples_are_described_as_for_reading():
    rows = {row.column: row for row in columns_of("samples_soil.parquet")}
    assert list(rows)[:5] == ["row_id", "file", "row", "survey", "plot"]
    assert list(rows)[-2:] == ["used", "density_t_c_ha"]
    assert (rows["bulk_density_g_cm3"].unit, rows["top_cm"].unit) == ("g/cm3", "cm")
    assert rows["organic_carbon_share"].unit == ""
    assert rows["organic_carbon_share"].meaning == "organic carbon in the dry fine soil (mass over mass)"
    assert rows["survey"].meaning == "name of the survey"


def test_the_longest_description_wins():
    found, left = describe("parcels.gpkg parcels", ["change_t_c_2014_2019", "change_t_c_ha_yr_2014_2019", "odd"])
    assert [row.column for row in found] == ["change_t_c_{pair}", "change_t_c_ha_yr_{pair}"]
    assert left == ["odd"]


def test_columns_of_the_user_are_listed_too():
    sample = sample_results()
    parcels = sample.parcels.assign(owner="x")
    assert "as your file gives it" in readme_text(dataclasses.replace(sample, parcels=parcels))
