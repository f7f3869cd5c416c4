"""The demo inventory: its shape, its planted faults, and that the script beside it makes exactly these files.

All data here are invented and serve as demonstration only; the numbers below are the design of the demo, no evidence.
"""

from __future__ import annotations

import importlib.util
import sys
import tomllib
from pathlib import Path

import geopandas as gpd
import numpy as np
import pandas as pd
import pytest
import shapely

from landcarbon.api import Inventory, open_inventory
from landcarbon.inventory import load_settings

DEMO = Path(__file__).resolve().parent.parent / "demo_parcels"
ROWLESS = {"plot outside parcels", "species unknown", "species code not in table"}  # findings that name no line
TREE_FILES = ("trees_2014.csv", "trees_2019.csv", "trees_2024.xlsx")


def read_text_cells(path: Path) -> pd.DataFrame:
    """Read a table of the demo with every cell as text, as it stands in the file."""
    if path.suffix == ".xlsx":
        table = pd.read_excel(path, dtype=object).astype(object)
        return table.where(table.notna(), "").map(str)
    first = path.name == "trees_2014.csv"
    return pd.read_csv(
        path, sep=";" if first else ",", encoding="latin-1" if first else "utf-8-sig", dtype=str, keep_default_na=False
    )


def listed_faults(readme: Path) -> pd.DataFrame:
    """Read the table of faults out of the README."""
    block = readme.read_text(encoding="utf-8").split("<!-- faults -->\n")[1].split("<!-- end of faults -->")[0]
    rows = [[cell.strip() for cell in line.strip("|").split("|")] for line in block.strip().splitlines()]
    return pd.DataFrame(rows[2:], columns=["file", "line", "column", "written", "what", "rule"]).astype({"line": int})


@pytest.fixture(scope="module")
def parcels() -> gpd.GeoDataFrame:
    return gpd.read_file(DEMO / "parcels.gpkg")


@pytest.fixture(scope="module")
def tables() -> dict[str, pd.DataFrame]:
    names = (*TREE_FILES, "plots.csv", "species.csv", "visits_2014.csv", "visits_2019.csv", "visits_2024.csv")
    return {name: read_text_cells(DEMO / name) for name in names}


@pytest.fixture(scope="module")
def remade(tmp_path_factory: pytest.TempPathFactory) -> Path:
    """Run the script beside the demo into a new folder."""
    folder = tmp_path_factory.mktemp("demo")
    spec = importlib.util.spec_from_file_location("demo_make_demo", DEMO / "make_demo.py")
    module = importlib.util.module_from_spec(spec)
    written = sys.dont_write_bytecode
    sys.path.insert(0, str(DEMO))
    sys.dont_write_bytecode = True  # leave no cache folder among the demo files
    try:
        spec.loader.exec_module(module)
    finally:
        sys.path.remove(str(DEMO))
        sys.dont_write_bytecode = written
        sys.modules.pop("woodland", None)
    module.make_demo(folder)
    return folder


def test_parcels_tile_the_woodland(parcels: gpd.GeoDataFrame) -> None:
    assert len(parcels) == 14
    assert parcels["name"].is_unique
    assert parcels["stand"].nunique() == 4
    assert parcels.crs == "EPSG:25832"
    assert parcels.is_valid.all()
    areas_ha = parcels.area / 1e4
    assert 180 < areas_ha.sum() < 250
    assert areas_ha.min() > 4
    # Neither gaps nor overlaps: the union is one polygon without holes, as large as the parts together.
    union = shapely.union_all(parcels.geometry.to_numpy())
    assert union.geom_type == "Polygon"
    assert not union.interiors
    assert union.area == pytest.approx(parcels.area.sum(), rel=1e-9)


def test_size_of_the_inventory(tables: dict[str, pd.DataFrame]) -> None:
    assert 65 <= len(tables["plots.csv"]) <= 75
    assert tables["plots.csv"]["plot_no"].is_unique
    assert 2000 < sum(len(tables[name]) for name in TREE_FILES) < 6000
    files = [path for path in DEMO.iterdir() if path.is_file()]
    assert sum(path.stat().st_size for path in files) < 1_000_000


def test_heights_suffice_for_a_curve(tables: dict[str, pd.DataFrame]) -> None:
    for name in TREE_FILES:
        table = tables[name]
        measured = table[(table["ht_m"] != "") & (table["state"] == "L")].groupby("sp").size()
        assert (measured[["BE", "SP", "AL"]] >= 20).all(), name


def test_visits(tables: dict[str, pd.DataFrame]) -> None:
    plots = set(tables["plots.csv"]["plot_no"])
    visits = {year: tables[f"visits_{year}.csv"] for year in (2014, 2019, 2024)}
    for year, table in visits.items():
        dates = pd.to_datetime(table["date"])
        assert (dates.dt.year == year).all()
        assert dates.dt.month.between(5, 10).all()
        assert (dates.dt.day_of_week < 5).all()
    assert set(visits[2019]["plot_no"]) == plots
    assert plots - set(visits[2014]["plot_no"]) == {"X01", "X02", "X03", "X04"}
    missed = visits[2024].loc[visits[2024]["visited"] == "no", "plot_no"]
    assert len(missed) == 2
    assert not set(missed) & set(tables["trees_2024.xlsx"]["plot_no"])


def test_one_visited_plot_is_empty_until_2024(tables: dict[str, pd.DataFrame]) -> None:
    empty = {}
    for name in TREE_FILES:
        visits = tables[f"visits_{name[6:10]}.csv"]
        visited = set(visits.loc[visits["visited"] == "yes", "plot_no"])
        empty[name] = visited - set(tables[name]["plot_no"])
    assert len(empty["trees_2014.csv"]) == 1
    assert empty["trees_2019.csv"] == empty["trees_2014.csv"]
    assert empty["trees_2024.xlsx"] == set()


def test_faults_stand_where_the_readme_says(tables: dict[str, pd.DataFrame]) -> None:
    faults = listed_faults(DEMO / "README.md")
    assert len(faults) == 11
    for fault in faults.to_dict("records"):
        cell = tables[fault["file"]][fault["column"]].iloc[fault["line"] - 2]
        assert cell == fault["written"].replace("(blank)", ""), fault
        assert fault["rule"], fault


def test_each_fault_is_what_it_is_called(tables: dict[str, pd.DataFrame], parcels: gpd.GeoDataFrame) -> None:
    faults = listed_faults(DEMO / "README.md")

    def row(words: str) -> pd.Series:
        found = faults[faults["what"].str.contains(words)].iloc[0]
        return tables[found["file"]].iloc[found["line"] - 2]

    def at_survey(name: str, wanted: pd.Series) -> pd.Series:
        table = tables[name]
        same = (table[["plot_no", "tree_no", "stem_no"]] == wanted[["plot_no", "tree_no", "stem_no"]]).all(axis=1)
        return table[same].iloc[0]

    slip = row("centimetres written")
    assert 8 < int(at_survey("trees_2019.csv", slip)["diam_mm"]) / int(slip["diam_mm"]) < 12
    tenfold = row("ten times")
    assert 8 < int(tenfold["diam_mm"]) / int(at_survey("trees_2024.xlsx", tenfold)["diam_mm"]) < 12
    thinner = row("thinner")
    assert int(at_survey("trees_2019.csv", thinner)["diam_mm"]) - int(thinner["diam_mm"]) == 60
    assert not row("text in a column")["diam_mm"].isdigit()
    assert row("species table does not have")["sp"] not in set(tables["species.csv"]["code"])
    assert row("status table does not have")["state"] not in {"L", "D", "G"}
    assert row("plots table does not have")["plot_no"] not in set(tables["plots.csv"]["plot_no"])
    assert row("without a diameter")["state"] == "L"
    assert tables["trees_2019.csv"].duplicated().sum() == 1
    assert row("misspelt")["latin"] != "Acer pseudoplatanus"
    plots = tables["plots.csv"]
    points = gpd.GeoSeries(gpd.points_from_xy(plots["lon"].astype(float), plots["lat"].astype(float)), crs=4326)
    outside = ~points.to_crs(parcels.crs).within(shapely.union_all(parcels.geometry.to_numpy()))
    assert plots.loc[outside, "plot_no"].tolist() == [row("latitude")["plot_no"]]


def test_text_files_come_out_the_same(remade: Path) -> None:
    for path in (*DEMO.glob("*.csv"), DEMO / "README.md"):
        kept, again = (place.read_bytes().replace(b"\r\n", b"\n") for place in (path, remade / path.name))
        assert kept == again, f"{path.name} is not what make_demo.py writes"


def test_workbook_comes_out_the_same(remade: Path) -> None:
    name = "trees_2024.xlsx"
    pd.testing.assert_frame_equal(pd.read_excel(DEMO / name), pd.read_excel(remade / name))


def test_map_comes_out_the_same(remade: Path, parcels: gpd.GeoDataFrame) -> None:
    again = gpd.read_file(remade / "parcels.gpkg")
    assert again.drop(columns="geometry").equals(parcels.drop(columns="geometry"))
    same = parcels.geometry.normalize().geom_equals_exact(again.geometry.normalize(), tolerance=0.011)
    assert same.all()  # coordinates are written to the centimetre


def test_project_file_names_files_that_exist() -> None:
    settings = tomllib.loads((DEMO / "inventory.toml").read_text(encoding="utf-8"))
    named = [settings[table]["file"] for table in ("parcels", "plots", "species")]
    named += [survey[key] for survey in settings["surveys"].values() for key in ("trees", "visits")]
    assert [name for name in named if not (DEMO / name).is_file()] == []


@pytest.fixture(scope="module")
def inventory() -> Inventory:
    return open_inventory(DEMO)


def test_every_planted_fault_is_found(inventory: Inventory, tables: dict[str, pd.DataFrame]) -> None:
    findings = inventory.check()
    for fault in listed_faults(DEMO / "README.md").to_dict("records"):
        found = findings[findings["rule"] == fault["rule"]]
        if fault["rule"] not in ROWLESS:
            found = found[(found["file"] == fault["file"]) & (found["row"] == fault["line"])]
        assert len(found) == 1 or fault["rule"] == "species unknown", fault
    assert findings.loc[findings["rule"] == "species unknown", "value"].str.contains("Acer pseudoplatanis").any()
    outside = tables["plots.csv"].iloc[_line("plot outside parcels") - 2]["plot_no"]
    assert findings.loc[findings["rule"] == "plot outside parcels", "plot"].tolist() == [outside]


def _line(rule: str) -> int:
    faults = listed_faults(DEMO / "README.md")
    return int(faults.loc[faults["rule"] == rule, "line"].iloc[0])


def test_nothing_else_is_an_error(inventory: Inventory) -> None:
    findings = inventory.check()
    planted = set(listed_faults(DEMO / "README.md")["rule"])
    errors = findings[findings["severity"] == "error"]
    assert set(errors["rule"]) <= planted
    assert len(errors) == 6


def test_the_story_shows_in_the_results(inventory: Inventory) -> None:
    """The README promises this much; the rates behind it are invented."""
    whole = pd.concat([inventory.change(*years, by="inventory", pool="all") for years in ((2014, 2019), (2014, 2024))])
    assert (whole["change_t_c"] > 0).all()
    assert (np.sign(whole["change_low"]) == [-1, 1]).all()
    first = inventory.change(2014, 2019, pool="all").set_index("unit")["change_high"]
    second = inventory.change(2019, 2024, pool="all").set_index("unit")["change_high"]
    assert first["Sawpit"] < 0
    assert second["Windy Acre"] < 0
    density = inventory.stocks(by="inventory", pool="above_ground")["density_t_c_ha"]
    assert density.between(60, 180).all()


def test_project_file_in_first_steps_is_valid(tmp_path: Path) -> None:
    text = (DEMO.parent / "docs" / "first-steps.md").read_text(encoding="utf-8")
    example = text.split("```toml\n")[1].split("```")[0]
    (tmp_path / "inventory.toml").write_text(example, encoding="utf-8")
    settings = load_settings(tmp_path / "inventory.toml")
    assert list(settings.surveys) == ["2016", "2023"]
