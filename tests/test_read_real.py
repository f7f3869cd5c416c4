"""Reading two open data sets as they come. Counts are those their descriptions print."""

from __future__ import annotations

import os
from pathlib import Path

import pytest

from landcarbon.inputs import Inputs
from landcarbon.inventory import load_settings
from landcarbon.read.load import load_inputs

pytestmark = pytest.mark.real

CENSUS = """
[inventory]
name = "forest plot"
allow_outside = true
[parcels]
file = "{folder}/scbi_plot.gpkg"
layer = "plot_outline"
[plots]
file = "{folder}/scbi_plot.gpkg"
layer = "quadrats_20m"
design = {{ kind = "census", area_ha = 0.04 }}
[surveys.2008]
trees = "{folder}/stems_2008.csv.gz"
[surveys.2013]
trees = "{folder}/stems_2013.csv.gz"
[surveys.2018]
trees = "{folder}/stems_2018.csv.gz"
[columns]
plots.plot = "quadrat"
trees = {{ plot = "quadrat", tree = "treeID", stem = "stemID", species = "sp", dbh = "dbh_mm", date = "ExactDate" }}
species = {{ species = "sp", scientific_name = "Latin" }}
[units.trees]
dbh = "mm"
[status]
G = "absent"
P = "absent"
[species]
file = "{folder}/species.csv"
[equations]
region = "north_america"
"""

MANGROVE = """
[inventory]
name = "mangrove"
allow_outside = true
[plots]
file = "{folder}/plots.csv"
design = {{ kind = "nested", circles = [ {{ radius_m = 2, dbh_min_cm = 0 }}, {{ radius_m = 7, dbh_min_cm = 5 }} ] }}
subplots = 5
[surveys.2013]
trees = ["{folder}/trees_overstory.csv", "{folder}/trees_understory.csv"]
[columns.trees]
species = "species_code"
dbh = ["live_dbh_cm", "dbh_cm"]
height = "height_m"
[columns.plots]
stratum = "height_class"
[species]
file = "{folder}/species_codes.csv"
[columns.species]
species = "species_code"
scientific_name = "species"
[equations]
region = "mangrove"
"""


def load(text: str, folder: Path, tmp_path: Path) -> Inputs:
    path = tmp_path / "inventory.toml"
    path.write_text(text.format(folder=Path(os.path.relpath(folder, tmp_path)).as_posix()), encoding="utf-8")
    return load_inputs(load_settings(path))


def test_three_censuses(reference: Path, tmp_path: Path):
    """Published: the description of the data prints 72,555 rows each, 640 quadrats, 25.60 ha, EPSG:26917."""
    inputs = load(CENSUS, reference / "real" / "scbi", tmp_path)
    trees = inputs.trees
    assert trees["survey"].value_counts().to_dict() == {"2008": 72_555, "2013": 72_555, "2018": 72_555}
    assert trees["used"].all()
    assert trees["row_id"].is_unique
    assert len(inputs.plots) == 640
    assert inputs.plots["inside"].all()
    assert {"0101", "2032"} <= set(inputs.plots["plot"])
    assert inputs.crs == "EPSG:26917"
    assert inputs.strata["area_ha"].tolist() == pytest.approx([25.60], abs=0.005)
    # the description: 38,523 live stems in 2008, belonging to 29,908 trees, 6 of them without a diameter
    live = trees[(trees["survey"] == "2008") & (trees["status"] == "live")]
    assert len(live) == 38_523
    assert live["tree"].nunique() == 29_908
    assert live["dbh_cm"].isna().sum() == 6
    # the description: one live stem of 2008 has 9.5 mm, below the limit of 10 mm
    assert live["dbh_cm"].min() == 0.95
    # the description: mean interval of the first period about 4.65 years
    dates = trees[trees["status"] == "live"].groupby("survey", observed=True)["date"].mean()
    assert (dates["2013"] - dates["2008"]).days / 365.25 == pytest.approx(4.65, abs=0.1)
    assert inputs.visits["visited"].all()
    assert set(inputs.visits["date_source"]) == {"trees"}


def test_mangrove_plots(reference: Path, tmp_path: Path):
    """Published: the description prints 52 plots, 9,060 and 1,180 tree rows, five height classes without areas."""
    inputs = load(MANGROVE, reference / "real" / "zambezi_mangrove", tmp_path)
    assert inputs.files.set_index("file")["rows"].tolist() == [52, 9_060, 1_180, 9]
    assert len(inputs.trees) == 10_240
    assert inputs.strata["stratum"].tolist() == ["1", "2", "3", "4", "5"]
    assert set(inputs.strata["area_source"]) == {"unknown"}
    # the description: 132 live trees have no species code; one plot is 32-B here and 32B elsewhere
    overstory = inputs.trees[inputs.trees["row_id"] < 9_060]
    assert ((overstory["species"] == "") & overstory["dbh_cm"].notna()).sum() == 132
    assert "32-B" in set(inputs.trees["plot"])
    assert "32-B" not in set(inputs.plots["plot"])
    assert inputs.crs == "EPSG:32737"
