"""End to end through the command line, in a process of its own and from another folder."""

from __future__ import annotations

import json
import os
import subprocess
import sys
from pathlib import Path

import pandas as pd
import pytest

ROOT = Path(__file__).resolve().parent.parent


def landcarbon(*arguments, cwd, timeout=300):
    environment = {**os.environ, "PYTHONPATH": str(ROOT), "NO_COLOR": "1"}
    command = [sys.executable, "-m", "landcarbon.cli", *map(str, arguments)]
    return subprocess.run(
        command,
        capture_output=True,
        text=True,
        cwd=cwd,
        timeout=timeout,
        env=environment,
        encoding="utf-8",
        check=False,
    )


@pytest.fixture(scope="module")
def demo(tmp_path_factory):
    folder = tmp_path_factory.mktemp("work")
    done = landcarbon("demo", "woodland", cwd=folder)
    assert done.returncode == 0, done.stderr
    return folder / "woodland", done.stdout


def test_demo_says_where_the_map_is(demo):
    folder, printed = demo
    assert str(folder / "results" / "map.html") in printed
    assert (folder / "results" / "map.html").stat().st_size > 100_000


def test_demo_prints_sign_rule_cautions_and_reconciliation(demo):
    _, printed = demo
    flat = " ".join(printed.split())
    assert "Positive change = carbon gained by the land" in flat
    assert "not a certificate" in flat
    assert "Every row accounted for" in flat


def test_results_folder_is_complete(demo):
    folder, _ = demo
    names = {path.name for path in (folder / "results").iterdir()}
    expected = {"stocks.csv", "change.csv", "findings.csv", "reconciliation.csv", "trees.parquet", "plots.parquet"}
    assert expected | {"parcels.gpkg", "map.html", "run.json"} <= names


def test_tables_have_the_stated_columns(demo):
    folder, _ = demo
    stocks = pd.read_csv(folder / "results" / "stocks.csv")
    assert list(stocks.columns) == (
        [
            "by",
            "unit",
            "survey",
            "pool",
            "area_ha",
            "plots",
            "density_t_c_ha",
            "density_se",
            "density_low",
            "density_high",
            "stock_t_c",
            "stock_se",
            "stock_low",
            "stock_high",
            "df",
            "method",
        ]
    )
    change = pd.read_csv(folder / "results" / "change.csv")
    assert list(change.columns) == (
        [
            "by",
            "unit",
            "since",
            "until",
            "pool",
            "area_ha",
            "plots_paired",
            "plots_since",
            "plots_until",
            "years",
            "change_t_c",
            "change_se",
            "change_low",
            "change_high",
            "change_t_c_yr",
            "change_t_c_ha_yr",
            "change_t_c_ha_yr_se",
            "co2_t_yr",
            "method",
        ]
    )
    assert set(stocks["by"]) == {"inventory", "stratum", "parcel"}


def test_strata_add_up_to_the_inventory_and_pools_to_all(demo):
    """Identities of the arithmetic."""
    folder, _ = demo
    stocks = pd.read_csv(folder / "results" / "stocks.csv", dtype={"survey": str})
    whole = stocks[stocks["by"] == "inventory"].set_index(["survey", "pool"])["stock_t_c"]
    strata = stocks[stocks["by"] == "stratum"].groupby(["survey", "pool"])["stock_t_c"].sum(min_count=1)
    pd.testing.assert_series_equal(whole.sort_index(), strata.sort_index(), rtol=1e-9, check_names=False)
    parts = whole.drop("all", level="pool").groupby("survey").sum()
    pd.testing.assert_series_equal(parts, whole.xs("all", level="pool"), rtol=1e-9, check_names=False)


def test_co2_has_the_sign_of_the_rule(demo):
    """Published: 44/12 t CO2 per t C, IPCC 2006 Guidelines Vol 4 section 2.2.3; a removal is negative."""
    folder, _ = demo
    change = pd.read_csv(folder / "results" / "change.csv").dropna(subset=["change_t_c_yr"])
    expected = -change["change_t_c_yr"] * 44 / 12
    assert (change["co2_t_yr"] - expected).abs().max() <= 1e-6 * expected.abs().max()


def test_every_row_is_accounted_for(demo):
    folder, _ = demo
    table = pd.read_csv(folder / "results" / "reconciliation.csv")
    assert (table["rows_read"] == table["used"] + table["set_aside"]).all()
    trees = table[table["table"] == "trees"]
    assert (trees["used"] == trees[["live", "dead", "absent"]].sum(axis=1)).all()
    assert {"trees", "pieces", "lines", "litter", "soil"} <= set(table["table"])
    findings = pd.read_csv(folder / "results" / "findings.csv")
    aside = findings[~findings["used"]].dropna(subset="row_id").drop_duplicates(["table", "row_id"])
    counts = table.groupby("table")["set_aside"].sum()
    found = aside["table"].value_counts()
    assert {name: int(count) for name, count in counts.items() if count} == found.to_dict()


def test_a_rerun_gives_the_same_bytes(demo):
    folder, _ = demo
    names = ["stocks.csv", "change.csv", "findings.csv", "reconciliation.csv", "map.html", "trees.parquet"]
    before = {name: (folder / "results" / name).read_bytes() for name in names}
    assert landcarbon("run", folder / "inventory.toml", cwd=folder.parent).returncode == 0
    assert {name: (folder / "results" / name).read_bytes() for name in names} == before


def test_provenance_names_inputs_and_settings(demo):
    import hashlib

    folder, _ = demo
    record = json.loads((folder / "results" / "run.json").read_text(encoding="utf-8"))
    for entry in record["run"]["inputs"]:
        # Independent: hashlib over the file as it lies there.
        name = entry["file"].split("#")[0]  # a sheet of a workbook stands behind the file name
        assert entry["sha256"] == hashlib.sha256((folder / name).read_bytes()).hexdigest()
    assert record["seed"] is not None
    assert record["settings"]["keys"]["equations"]["region"] == "europe"


def test_show_map_trace_equations(demo, tmp_path):
    folder, _ = demo
    results = folder / "results"
    shown = landcarbon("show", results, "--by", "parcel", cwd=tmp_path)
    assert shown.returncode == 0
    assert "Owl Bank" in shown.stdout
    page = tmp_path / "page.html"
    assert landcarbon("map", results, "--out", page, cwd=tmp_path).returncode == 0
    assert page.read_bytes() == (results / "map.html").read_bytes()
    parcel = (
        pd.read_csv(results / "stocks.csv").query("by == 'parcel' and density_t_c_ha == density_t_c_ha")["unit"].iloc[0]
    )
    traced = landcarbon("trace", results, "--parcel", parcel, cwd=tmp_path)
    assert traced.returncode == 0
    assert "trees_2024" in traced.stdout
    found = landcarbon("equations", "Fagus sylvatica", cwd=tmp_path)
    assert found.returncode == 0
    assert "Fagus" in found.stdout


def test_check_reports_without_writing(demo, tmp_path):
    folder, _ = demo
    before = sorted(folder.iterdir())
    done = landcarbon("check", folder / "inventory.toml", cwd=tmp_path)
    assert done.returncode == 0
    assert sorted(folder.iterdir()) == before


def test_new_writes_a_project_file_once(tmp_path):
    assert landcarbon("new", tmp_path / "own", cwd=tmp_path).returncode == 0
    again = landcarbon("new", tmp_path / "own", cwd=tmp_path)
    assert again.returncode == 2
    assert "exists already" in again.stderr


@pytest.mark.parametrize(
    ("arguments", "said"),
    [
        (["run", "nowhere.toml"], "nowhere.toml"),
        (["show", "."], "results"),
        (["trace", "nowhere"], "nowhere"),
        (["equations", "--id", "nosuch"], "nosuch"),
        (["map", "nowhere"], "nowhere"),
    ],
)
def test_faults_of_the_user_end_in_one_message_and_code_2(arguments, said, tmp_path):
    done = landcarbon(*arguments, cwd=tmp_path)
    assert done.returncode == 2
    assert said in done.stderr
    assert "Traceback" not in done.stderr + done.stdout


def test_help_names_every_command(tmp_path):
    done = landcarbon("--help", cwd=tmp_path)
    assert done.returncode == 0
    for name in ("demo", "new", "check", "run", "show", "map", "trace", "equations"):
        assert name in done.stdout
