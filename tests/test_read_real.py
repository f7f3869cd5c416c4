"""Reading two open data sets as they come. Counts are those their descriptions print."""

from __future__ import annotations

import os
from pathlib import Path

import pandas as pd
import pytest
from read_samples import accounted

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
A = "live"
D = "dead"
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

MANGROVE_POOLS = (
    MANGROVE.replace(
        "[columns.trees]",
        """pieces = "{folder}/woody_debris_tallies.csv"
litter = "{folder}/litter_ground_vegetation.csv"
ground_vegetation = "{folder}/litter_ground_vegetation.csv"
[columns.pieces]
line = "transect"
[columns.litter]
fresh = "litter_fresh_kg"
ash = "ash_g_per_g"
[columns.ground_vegetation]
fresh = "live_fresh_kg"
[columns.trees]""",
    )
    + """
[pools]
dead_wood = "measured"
litter = "measured"
[litter]
frame_area_m2 = 1
dry_share = 0.345
[ground_vegetation]
frame_area_m2 = 1
dry_share = 0.345
[dead_wood.classes]
large_solid = {{ diameter = "large_solid_diam_cm", line_m = 12 }}
large_rotten = {{ diameter = "large_rotten_diam_cm", line_m = 12 }}
medium = {{ count = "medium_n", line_m = 5, mean_diameter_cm = 5.25 }}
small = {{ count = "small_n", line_m = 3, mean_diameter_cm = 1.55 }}
fine = {{ count = "fine_n", line_m = 2, mean_diameter_cm = 0.30 }}
"""
)

FOREST_FLOOR = """
[inventory]
name = "soil and litter of a forest plot"
allow_outside = true
[plots]
file = "{folder}/litter_layer.csv"
design = {{ kind = "census", area_ha = 1 }}
[surveys.2011]
trees = "trees.csv"
litter = "{folder}/litter_layer.csv"
soil = "{folder}/soil_layers.csv"
[columns]
plots.plot = "hectare"
litter = {{ plot = "hectare", dry = "dry_mass_g", fresh = "fresh_mass_g", frame_area = "sampled_area_m2" }}
[columns.soil]
plot = "hectare"
top = "depth_top_cm"
bottom = "depth_bottom_cm"
bulk_density = "bd_fine_earth_profile_pit_g_cm3_total_volume"
organic_carbon = "total_C_pct"
[units]
litter = {{ dry = "g", fresh = "g" }}
soil = {{ organic_carbon = "%" }}
[equations]
region = "north_america"
[pools]
litter = "measured"
soil = "measured"
[soil]
bulk_density = "fine per whole volume"
depth_cm = 30
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


def test_mangrove_wood_and_litter(reference: Path, tmp_path: Path):
    """Published: the description prints 1,212 rows of wood, 1,052 lines, four in each of 263 subplots, and so on."""
    folder = reference / "real" / "zambezi_mangrove"
    inputs = load(MANGROVE_POOLS, folder, tmp_path)
    lines, pieces = inputs.samples["lines"], inputs.samples["pieces"]
    assert inputs.files.set_index("role").loc["pieces 2013", "rows"] == 1_212
    assert len(lines) == 1_052
    assert set(lines.groupby(["plot", "subplot"]).size()) == {4}
    assert lines.groupby(["plot", "subplot"]).ngroups == 263
    assert set(lines["plot"]) == set(inputs.plots["plot"])
    # the description: one row lacks the line name; 43 large solid pieces are under the limit of 7.6 cm
    assert inputs.findings.loc[inputs.findings["rule"] == "row without line", "row"].tolist() == [514]
    solid = pieces[pieces["size_class"] == "large_solid"]
    assert (solid["diameter_cm"] < 7.6).sum() == 43
    # independent: the sums of the columns as the general library pandas reads them
    wide = pd.read_csv(folder / "woody_debris_tallies.csv")
    counted = pieces.groupby("size_class")["count"].sum()
    for name in ("medium", "small", "fine"):
        assert counted[name] == wide[f"{name}_n"].sum()
    for name in ("large_solid", "large_rotten"):
        assert counted[name] == (wide[f"{name}_diam_cm"] > 0).sum()
    # the description: 189 rows of litter on 42 plots
    litter = inputs.samples["litter"]
    assert (len(litter), litter["plot"].nunique()) == (189, 42)
    assert accounted(inputs)


def test_forest_floor_and_soil(reference: Path, tmp_path: Path):
    """Published: the description prints 24 cells, 122 layers, nine frames of 25 cm by 25 cm in each cell."""
    (tmp_path / "trees.csv").write_text("plot,species,dbh\n1,oak,10\n")
    inputs = load(FOREST_FLOOR, reference / "real" / "scbi", tmp_path)
    litter, soil = inputs.samples["litter"], inputs.samples["soil"]
    assert (len(litter), len(soil), soil["plot"].nunique()) == (24, 122, 24)
    assert set(litter["frame_area_m2"]) == {9 * 0.25 * 0.25}
    # the first data line of each file, in our units
    assert litter[["dry_kg", "fresh_kg"]].iloc[0].tolist() == pytest.approx([0.71368, 0.9374])
    first = soil[["top_cm", "bottom_cm", "bulk_density_g_cm3", "organic_carbon_share"]].iloc[0]
    assert first.tolist() == pytest.approx([0, 10, 0.74, 0.06907725])
    # the description: 10 of 24 cells have no layer from 50 to 100 cm, one none from 30 to 50 cm
    assert soil.loc[soil["top_cm"] == 50, "plot"].nunique() == 14
    assert soil.loc[soil["top_cm"] == 30, "plot"].nunique() == 23
    assert accounted(inputs)
