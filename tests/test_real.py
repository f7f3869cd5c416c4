"""The program on open data: a three-census forest plot and a mangrove inventory; skipped where they are not at hand."""

from __future__ import annotations

import json
import shutil
from pathlib import Path

import numpy as np
import pandas as pd
import pytest

import landcarbon

HERE = Path(__file__).resolve().parent / "real"

pytestmark = pytest.mark.real


@pytest.fixture(scope="module")
def census(reference, tmp_path_factory):
    folder = tmp_path_factory.mktemp("census")
    shutil.copy(HERE / "scbi" / "inventory.toml", folder)
    for name in ("stems_2008.csv.gz", "stems_2013.csv.gz", "stems_2018.csv.gz", "species.csv", "scbi_plot.gpkg"):
        shutil.copy(reference / "real" / "scbi" / name, folder)
    return landcarbon.open_inventory(folder / "inventory.toml")


def test_three_stocks_and_every_change_with_intervals(census):
    stocks = census.stocks("inventory", pool="all")
    assert stocks["survey"].tolist() == ["2008", "2013", "2018"]
    assert (stocks["plots"] == 640).all()
    assert (stocks["density_low"] < stocks["density_t_c_ha"]).all()
    for since, until in (("2008", "2013"), ("2013", "2018"), ("2008", "2018")):
        row = census.change(since, until, "inventory", pool="all").iloc[0]
        assert row["plots_paired"] == 640
        assert row["change_low"] < row["change_t_c"] < row["change_high"]


def test_every_row_of_the_census_is_accounted_for(census):
    """72,555 rows a census: the README of the open data."""
    table = census.results.reconciliation
    assert (table["rows_read"] == 72_555).all()
    assert (table["rows_read"] == table[["live", "dead", "absent", "set_aside"]].sum(axis=1)).all()
    findings = census.check()
    aside = findings.loc[~findings["used"] & findings["row_id"].notna()]
    assert aside["row_id"].nunique() == table["set_aside"].sum()


def test_live_stems_of_the_first_census(census):
    """Published: 38,523 live stems in 2008 (README of the open data), less the 6 without a usable diameter."""
    row = census.results.reconciliation.set_index("survey").loc["2008"]
    findings = census.check()
    slips = ((findings["rule"] == "diameter slip") & (findings["survey"] == "2008")).sum()
    assert row["live"] == 38_523 - 6 - slips


def test_elapsed_years_come_from_the_visits(census):
    """Published: the mean interval of the first period is about 4.65 years, not 5 (README of the open data)."""
    row = census.change(2008, 2013, "inventory", pool="all").iloc[0]
    assert row["years"] == pytest.approx(4.65, abs=0.1)


def test_biomass_is_what_the_stems_give(census):
    """Independent: the same stems with pandas alone and the printed group coefficients, no code of the program.

    Published coefficients: Chojnacky et al. 2014, Table 5, Fagaceae deciduous (-2.0705, 2.4410): the oaks of the census
    except evergreen ones, of which there are none.
    """
    trees = census.results.trees
    oaks = trees[trees["scientific_name"].astype("str").str.startswith("Quercus") & trees["used"]]
    oaks = oaks[(oaks["survey"] == "2013") & (oaks["status"] == "live")]
    expected = np.exp(-2.0705 + 2.4410 * np.log(oaks["dbh_cm"]))
    assert oaks["biomass_kg"].to_numpy() == pytest.approx(expected.to_numpy(), rel=1e-9)
    density = census.stocks("inventory", pool="above_ground").set_index("survey").loc["2013", "density_t_c_ha"]
    live = trees[(trees["survey"] == "2013") & trees["used"] & (trees["status"] == "live")]
    assert density == pytest.approx(live["carbon_kg"].sum() / 1000 / 25.6, rel=1e-9)


def test_share_beyond_the_diameter_range_is_said(census):
    marks = " ".join(census.results.marks)
    for survey in census.surveys:
        assert f"Survey {survey}: " in marks
    assert "beyond the diameter range" in marks


@pytest.fixture(scope="module")
def mangrove(reference, tmp_path_factory):
    """Live and dead diameters stand in two columns of the open table; here they become one column and a status."""
    source = reference / "real" / "zambezi_mangrove"
    folder = tmp_path_factory.mktemp("mangrove")
    tall = pd.read_csv(source / "trees_overstory.csv", dtype=str)
    tall["dbh_cm"] = tall["live_dbh_cm"].fillna(tall["dead_dbh_cm"])
    tall["status"] = np.where(tall["live_dbh_cm"].isna() & tall["dead_dbh_cm"].notna(), "dead", "live")
    small = pd.read_csv(source / "trees_understory.csv", dtype=str).assign(status="live")
    columns = ["plot", "subplot", "species_code", "dbh_cm", "height_m", "status"]
    trees = pd.concat([tall[columns], small[columns]], ignore_index=True)
    trees["plot"] = trees["plot"].replace("32-B", "32B")  # one plot is spelled two ways in the open tables
    trees.to_csv(folder / "trees.csv", index=False)
    plots = pd.read_csv(source / "plots.csv", dtype=str)
    others = [pd.read_csv(source / name, dtype=str) for name in ("soil_samples.csv", "woody_debris_tallies.csv")]
    visited = pd.concat([table[["plot", "subplot"]] for table in (trees, *others)]).drop_duplicates()
    subplots = plots["plot"].map(visited.groupby("plot").size()).fillna(1).astype(int)
    pd.DataFrame({"plot": plots["plot"], "date": "2014-06-01", "subplots": subplots}).to_csv(
        folder / "visits.csv", index=False
    )
    for name in ("plots.csv", "species_codes.csv"):
        shutil.copy(source / name, folder)
    shutil.copy(HERE / "zambezi" / "inventory.toml", folder)
    return landcarbon.open_inventory(folder)


def test_strata_of_unknown_area_give_densities_and_no_total(mangrove):
    stocks = mangrove.stocks("stratum", pool="above_ground")
    assert stocks["unit"].tolist() == ["1", "2", "3", "4", "5"]
    assert stocks["plots"].sum() == 52
    assert stocks["stock_t_c"].isna().all()
    assert mangrove.stocks("inventory").empty
    assert "area unknown" in set(mangrove.check()["rule"])


def test_density_rises_with_the_height_of_the_canopy(mangrove):
    """Common sense of the design: strata are canopy-height classes, 1 the lowest."""
    density = mangrove.stocks("stratum", pool="above_ground")["density_t_c_ha"]
    assert density.is_monotonic_increasing


def test_mangrove_rows_are_accounted_for(mangrove):
    """9,060 + 1,180 tree rows: the README of the open data."""
    row = mangrove.results.reconciliation.iloc[0]
    assert row["rows_read"] == 9_060 + 1_180
    assert row["rows_read"] == row[["live", "dead", "absent", "set_aside"]].sum()


def test_inventory_without_polygons_has_a_map_of_plots(mangrove, tmp_path):
    page = mangrove.map(tmp_path / "map.html").read_text(encoding="utf-8")
    assert mangrove.stocks("parcel").empty
    assert "plots" in page


def test_results_folder_of_the_census(census, tmp_path):
    out = census.run(tmp_path / "out")
    record = json.loads((out / "run.json").read_text(encoding="utf-8"))
    assert len(record["run"]["inputs"]) == 5
