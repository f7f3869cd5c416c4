"""Broken input ends in a plain message or a finding, never in a traceback, and leaves earlier results as they were."""

from __future__ import annotations

import shutil
import sys

import geopandas as gpd
import numpy as np
import pandas as pd
import pytest
from shapely.geometry import Polygon, box

from landcarbon import cli

PROJECT = """
[inventory]
name = "Two fields"
[parcels]
file = "parcels.gpkg"
[plots]
file = "plots.csv"
crs = "EPSG:25832"
design = { kind = "circle", radius_m = 10 }
[surveys.2010]
trees = "trees_2010.csv"
visits = "visits_2010.csv"
[surveys.2020]
trees = "trees_2020.csv"
visits = "visits_2020.csv"
[species]
BU = "Fagus sylvatica"
FI = "Picea abies"
[equations]
region = "europe"
[pools]
below_ground = { how = "ratio", model = "cairns97_temperate" }
"""


def parcels():
    shapes = [box(500000, 5600000, 500400, 5600300), box(500400, 5600000, 500800, 5600300)]
    return gpd.GeoDataFrame({"parcel": ["west", "east"], "stratum": ["s", "s"]}, geometry=shapes, crs="EPSG:25832")


def plots():
    x = [500050, 500150, 500250, 500450, 500550, 500650]
    return pd.DataFrame({"plot": list("ABCDEF"), "x": x, "y": 5600100})


def trees(growth):
    rng = np.random.default_rng(3)
    frame = pd.DataFrame({"plot": np.repeat(list("ABCDEF"), 8), "tree": np.tile(np.arange(1, 9), 6)})
    frame["species"] = np.where(frame["tree"] % 3 == 0, "FI", "BU")
    return frame.assign(status="live", dbh=np.round(rng.uniform(12, 30, len(frame)) + growth, 1))


def visits(year):
    return pd.DataFrame({"plot": list("ABCDEF"), "date": f"{year}-06-15", "visited": "yes"})


@pytest.fixture(scope="module")
def sound(tmp_path_factory):
    folder = tmp_path_factory.mktemp("sound")
    (folder / "inventory.toml").write_text(PROJECT, encoding="utf-8")
    parcels().to_file(folder / "parcels.gpkg", layer="parcels")
    plots().to_csv(folder / "plots.csv", index=False)
    for year, growth in ((2010, 0.0), (2020, 4.0)):
        trees(growth).to_csv(folder / f"trees_{year}.csv", index=False)
        visits(year).to_csv(folder / f"visits_{year}.csv", index=False)
    assert execute(folder)[0] == 0
    return folder


def execute(folder, capture=None):
    """Run the command line in this process; return exit code and what it printed."""
    argv, sys.argv = sys.argv, ["landcarbon", "run", str(folder / "inventory.toml")]
    try:
        cli.main()
        code = 0
    except SystemExit as stop:
        code = int(stop.code or 0)
    finally:
        sys.argv = argv
    return code, capture.readouterr() if capture else None


@pytest.fixture
def work(sound, tmp_path):
    folder = tmp_path / "work"
    shutil.copytree(sound, folder)
    return folder


def edit_csv(folder, name, change):
    frame = pd.read_csv(folder / name, dtype=str)
    change(frame).to_csv(folder / name, index=False)


def edit_text(folder, name, old, new):
    text = (folder / name).read_text(encoding="utf-8")
    assert old in text
    (folder / name).write_text(text.replace(old, new), encoding="utf-8")


def set_cell(folder, name, row, column, value):
    def change(frame):
        frame.loc[row, column] = value
        return frame

    edit_csv(folder, name, change)


def replace_parcels(folder, frame):
    (folder / "parcels.gpkg").unlink()
    frame.to_file(folder / "parcels.gpkg", layer="parcels")


def drop(folder, name):
    (folder / name).unlink()


def empty(folder, name):
    (folder / name).write_bytes(b"")


def as_folder(folder, name):
    drop(folder, name)
    (folder / name).mkdir()


def no_crs(folder):
    drop(folder, "parcels.gpkg")
    frame = parcels().set_crs(None, allow_override=True)
    frame.to_file(folder / "parcels.gpkg", layer="parcels")


REFUSED = {
    "missing file": (lambda f: drop(f, "trees_2020.csv"), "trees_2020.csv"),
    "missing column": (lambda f: edit_csv(f, "trees_2020.csv", lambda t: t.drop(columns="dbh")), "dbh"),
    "wrong unit": (lambda f: edit_text(f, "inventory.toml", "[species]", '[units.trees]\ndbh = "kg"\n[species]'), "kg"),
    "unknown key": (lambda f: edit_text(f, "inventory.toml", "[plots]", "[plots]\nfiel = 1"), "fiel"),
    "toml syntax": (lambda f: edit_text(f, "inventory.toml", 'name = "Two fields"', 'name = "Two'), "inventory.toml"),
    "crs missing": (no_crs, "coordinate system"),
    "empty table": (lambda f: edit_csv(f, "plots.csv", lambda t: t.iloc[:0]), "plots.csv"),
    "nul bytes": (lambda f: (f / "trees_2020.csv").write_bytes(b"plot,tree\x00\x00,dbh\n\x00"), "trees_2020.csv"),
    "zero bytes": (lambda f: empty(f, "trees_2020.csv"), "trees_2020.csv"),
    "zero bytes of a map file": (lambda f: empty(f, "parcels.gpkg"), "parcels.gpkg"),
    "directory for a file": (lambda f: as_folder(f, "trees_2020.csv"), "trees_2020.csv"),
    "path out of the folder": (
        lambda f: edit_text(f, "inventory.toml", '"trees_2020.csv"', '"../../trees.csv"'), "outside"
    ),
    "no region": (lambda f: edit_text(f, "inventory.toml", 'region = "europe"', 'region = "moon"'), "moon"),
    "unknown equation": (
        lambda f: edit_text(f, "inventory.toml", "[pools]", '[equations.species]\nBU = "nosuch"\n[pools]'), "nosuch"
    ),
    "unknown root model": (
        lambda f: edit_text(f, "inventory.toml", "cairns97_temperate", "cairns97_temparate"), "cairns97_temperate"
    ),
    "duplicate plot id": (lambda f: set_cell(f, "plots.csv", 1, "plot", "A"), "'A' stands more than once"),
    "not a workbook": (
        lambda f: (edit_text(f, "inventory.toml", "trees_2020.csv", "trees.xlsx"), (f / "trees.xlsx").write_text("x")),
        "trees.xlsx",
    ),
}  # fmt: skip

# name: (what to break, the rule that has to appear among the findings)
FOUND = {
    "text in a number": (lambda f: set_cell(f, "trees_2020.csv", 3, "dbh", "thick"), "not readable"),
    "negative dbh": (lambda f: set_cell(f, "trees_2020.csv", 3, "dbh", "-20"), "dbh negative"),
    "huge number": (lambda f: set_cell(f, "trees_2020.csv", 3, "dbh", "1e300"), "dbh impossible"),
    "infinite number": (lambda f: set_cell(f, "trees_2020.csv", 3, "dbh", "inf"), None),
    "unknown species": (lambda f: set_cell(f, "trees_2020.csv", 3, "species", "Zzyzx"), "species unknown"),
    "unknown status": (lambda f: set_cell(f, "trees_2020.csv", 3, "status", "maybe"), "unknown status"),
    "tree on an unknown plot": (lambda f: set_cell(f, "trees_2020.csv", 3, "plot", "Q"), "plot unknown"),
    "plot outside": (lambda f: set_cell(f, "plots.csv", 0, "x", "400000"), "plot outside parcels"),
    "nan coordinates": (lambda f: set_cell(f, "plots.csv", 0, "x", ""), None),
    "date before the last survey": (lambda f: set_cell(f, "visits_2020.csv", 1, "date", "2009-05-01"), None),
    "unknown survey date": (lambda f: set_cell(f, "visits_2020.csv", 1, "date", "soon"), None),
    "zero-area plot": (lambda f: edit_csv(f, "visits_2020.csv", lambda t: t.assign(share_inside="0")), None),
    "self-crossing polygon": (
        lambda f: replace_parcels(
            f,
            parcels().set_geometry(
                [
                    Polygon([(500000, 5600000), (500400, 5600300), (500400, 5600000), (500000, 5600300)]),
                    box(500400, 5600000, 500800, 5600300),
                ]
            ).set_crs("EPSG:25832"),
        ),
        None,
    ),
    "formula in a name": (lambda f: set_cell(f, "trees_2020.csv", 3, "species", "=1+1"), "species unknown"),
}  # fmt: skip


def table_bytes(folder):
    return {path.name: path.read_bytes() for path in (folder / "results").iterdir()}


@pytest.mark.parametrize("case", list(REFUSED))
def test_refused_with_one_plain_message(case, work, capsys):
    breaking, said = REFUSED[case]
    before = table_bytes(work)
    breaking(work)
    code, printed = execute(work, capsys)
    assert code == 2
    assert said in " ".join(printed.err.split())
    assert "Traceback" not in printed.err + printed.out
    assert table_bytes(work) == before


@pytest.mark.parametrize("case", list(FOUND))
def test_found_and_accounted_for(case, work, capsys):
    breaking, rule = FOUND[case]
    known = set(pd.read_csv(work / "results" / "findings.csv")["rule"])
    breaking(work)
    code, printed = execute(work, capsys)
    assert "Traceback" not in printed.err + printed.out
    assert code == 0, printed.err
    findings = pd.read_csv(work / "results" / "findings.csv")
    new = set(findings["rule"]) - known
    assert new, "nothing was found"
    assert rule is None or rule in new
    table = pd.read_csv(work / "results" / "reconciliation.csv")
    assert (table["rows_read"] == table["used"] + table["set_aside"]).all()
    assert not any(str(value).startswith("=") for value in findings["value"])


def test_an_interrupted_run_leaves_the_old_results(work, monkeypatch):
    before = table_bytes(work)

    def stop(*_args, **_options):
        raise KeyboardInterrupt

    monkeypatch.setattr("landcarbon.publish.folder.write_provenance", stop)
    monkeypatch.setattr(sys, "argv", ["landcarbon", "run", str(work / "inventory.toml")])
    with pytest.raises((KeyboardInterrupt, SystemExit)):
        cli.main()
    assert table_bytes(work) == before
    assert [path.name for path in work.iterdir() if path.name.startswith(".")] == []
