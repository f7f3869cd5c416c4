"""The demo inventory: its shape, its planted faults, and that the script beside it makes exactly these files.

All data here are invented and serve as demonstration only; the numbers below are the design of the demo, no evidence.
"""

from __future__ import annotations

import importlib.util
import sys
import tomllib
from pathlib import Path

import geopandas as gpd
import pandas as pd
import pytest
import shapely

from landcarbon.api import Inventory, open_inventory
from landcarbon.inventory import load_settings

DEMO = Path(__file__).resolve().parent.parent / "demo_parcels"
ROWLESS = {"plot outside parcels", "species unknown", "species code not in table"}  # findings that name no line
TREE_FILES = ("trees_2014.csv", "trees_2019.csv", "trees_2024.xlsx")
WOOD_SHEETS = ("wood_2024.xlsx#lines", "wood_2024.xlsx#wood")
SURVEYS = ("2014", "2019", "2024")
# What a fault takes with it: the other rows of its line or core.
FOLLOWERS = {"line set aside", "core set aside", "gap in core", "core stops short"}
# Faults of the samples beside the trees: each must say in plain words what becomes of the row.
SAMPLE_RULES = {
    "decay class unknown",
    "line without length",
    "carbon impossible",
    "bulk density high",
    "coarse impossible",
    "layers overlap",
    "sub-sample dry above fresh",
    "core stops short",
}


def read_text_cells(path: Path, sheet: str | int = 0) -> pd.DataFrame:
    """Read a table of the demo with every cell as text, as it stands in the file."""
    if path.suffix == ".xlsx":
        table = pd.read_excel(path, sheet_name=sheet, dtype=object).astype(object)
        return table.where(table.notna(), "").map(str)
    old = b";" in path.read_bytes().split(b"\n")[0]
    return pd.read_csv(
        path, sep=";" if old else ",", encoding="latin-1" if old else "utf-8-sig", dtype=str, keep_default_na=False
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
    found = {path.name: read_text_cells(path) for path in DEMO.iterdir() if path.suffix in (".csv", ".xlsx")}
    return found | {name: read_text_cells(DEMO / name.split("#")[0], name.split("#")[1]) for name in WOOD_SHEETS}


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
        for name in ("woodland", "forest_floor", "floor_sheets", "sheets"):
            sys.modules.pop(name, None)
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
    assert sum(path.stat().st_size for path in files) < 1_500_000


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
    assert len(faults) == 19
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


def test_each_fault_of_the_floor_is_what_it_is_called(tables: dict[str, pd.DataFrame]) -> None:
    def place(rule: str) -> tuple[pd.DataFrame, pd.Series]:
        faults = listed_faults(DEMO / "README.md")
        found = faults[faults["rule"] == rule].iloc[0]
        return tables[found["file"]], tables[found["file"]].iloc[found["line"] - 2]

    def same(table: pd.DataFrame, row: pd.Series, *keys: str) -> pd.DataFrame:
        return table[(table[list(keys)] == row[list(keys)]).all(axis=1)]

    _, line = place("line without length")
    assert float(line["length_m"]) == 0
    assert len(same(tables["wood_2014.csv"], line, "plot_no", "line")) > 2  # there is wood on it
    _, piece = place("decay class unknown")
    assert (piece["rot"], piece["size"]) == ("7", "")
    _, frame = place("sub-sample dry above fresh")
    assert float(frame["bag_dry_g"]) > float(frame["bag_fresh_g"].replace(",", "."))
    _, layer = place("carbon impossible")
    assert float(layer["c_org_pct"]) == 58
    _, layer = place("bulk density high")
    assert float(layer["dry_g_cm3"]) == 16
    _, layer = place("coarse impossible")
    assert float(layer["stones_pct"]) == 120
    soil, layer = place("layers overlap")
    core = same(soil, layer, "year", "plot_no", "core")
    assert (core["from_cm"].tolist(), core["to_cm"].tolist()) == (["0", "5", "20"], ["10", "20", "30"])
    soil, layer = place("core stops short")
    assert same(soil, layer, "year", "plot_no", "core")["to_cm"].tolist() == ["10", "20"]


def test_every_spoilt_core_has_a_sound_one_beside_it(tables: dict[str, pd.DataFrame]) -> None:
    faults = listed_faults(DEMO / "README.md")
    soil = tables["soil.csv"]
    spoilt = soil.iloc[faults.loc[faults["file"] == "soil.csv", "line"] - 2]
    assert not spoilt.duplicated(["year", "plot_no"]).any()
    assert (soil.groupby(["year", "plot_no"])["core"].nunique() == 2).all()


def test_what_was_sampled_when(tables: dict[str, pd.DataFrame]) -> None:
    years = {name: set(tables[f"{name}.csv"]["year"]) for name in ("stumps", "saplings", "herbs", "litter", "soil")}
    at_ends = ("litter", "soil")
    assert years == {name: {"2014", "2024"} if name in at_ends else set(SURVEYS) for name in years}
    visited = {}
    for survey in SURVEYS:
        visits = tables[f"visits_{survey}.csv"]
        visited[survey] = set(visits.loc[visits["visited"] == "yes", "plot_no"])
        for name in ("saplings", "herbs", *(["litter"] if survey != "2019" else [])):
            table = tables[f"{name}.csv"]
            assert set(table.loc[table["year"] == survey, "plot_no"]) == visited[survey], (name, survey)
        lines, wood = (
            tables[f"wood_2024.xlsx#{name}"] if survey == "2024" else tables[f"{name}_{survey}.csv"]
            for name in ("lines", "wood")
        )
        assert set(lines["plot_no"]) == visited[survey]
        assert (lines.groupby("plot_no").size() == 3).all()
        crossed = wood[wood["size"] == ""][["plot_no", "line"]].drop_duplicates()
        assert len(crossed) < len(lines)  # some lines crossed no coarse wood
        assert lines["slope_pct"].astype(float).between(0, 60).all()
        assert (lines["slope_pct"].astype(float) > 0).any()
    soil = tables["soil.csv"]
    cored = {year: set(group["plot_no"]) for year, group in soil.groupby("year")}
    assert cored["2014"] == cored["2024"]
    assert 0.3 < len(cored["2014"]) / len(visited["2014"]) < 0.5


def test_text_files_come_out_the_same(remade: Path) -> None:
    for path in (*DEMO.glob("*.csv"), DEMO / "README.md"):
        kept, again = (place.read_bytes().replace(b"\r\n", b"\n") for place in (path, remade / path.name))
        assert kept == again, f"{path.name} is not what make_demo.py writes"


def test_workbooks_come_out_the_same(remade: Path) -> None:
    for name in ("trees_2024.xlsx", "wood_2024.xlsx"):
        kept, again = (pd.read_excel(folder / name, sheet_name=None) for folder in (DEMO, remade))
        assert list(kept) == list(again)
        for sheet, table in kept.items():
            pd.testing.assert_frame_equal(table, again[sheet])


def test_map_comes_out_the_same(remade: Path, parcels: gpd.GeoDataFrame) -> None:
    again = gpd.read_file(remade / "parcels.gpkg")
    assert again.drop(columns="geometry").equals(parcels.drop(columns="geometry"))
    same = parcels.geometry.normalize().geom_equals_exact(again.geometry.normalize(), tolerance=0.011)
    assert same.all()  # coordinates are written to the centimetre


def test_project_file_names_files_that_exist() -> None:
    settings = tomllib.loads((DEMO / "inventory.toml").read_text(encoding="utf-8"))
    named = [settings[table]["file"] for table in ("parcels", "plots", "species")]
    named += [file.split("#")[0] for survey in settings["surveys"].values() for file in survey.values()]
    named += list(settings["samples"].values())
    assert [name for name in named if not (DEMO / name).is_file()] == []
    assert {path.name for path in DEMO.iterdir() if path.suffix in (".csv", ".xlsx", ".gpkg")} == set(named)


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
    faults = listed_faults(DEMO / "README.md")
    planted = set(zip(faults["file"], faults["line"], faults["rule"], strict=True))
    errors = findings[findings["severity"] == "error"]
    at = list(zip(errors["file"].astype("str"), errors["row"], errors["rule"], strict=True))
    direct = errors[[place in planted for place in at]]
    others = errors.drop(index=direct.index)
    assert len(direct) == 13
    unmapped = others[others["rule"] == "status not mapped"]  # told once, whatever the number of rows
    assert len(unmapped) == 1
    assert "Q" in unmapped["value"].iloc[0]
    others = others.drop(index=unmapped.index)
    assert set(others["rule"]) <= FOLLOWERS
    assert set(others["plot"]) <= set(direct["plot"])


def test_faults_of_the_floor_say_what_becomes_of_the_row(inventory: Inventory) -> None:
    findings = inventory.check()
    found = findings[findings["rule"].isin(SAMPLE_RULES)]
    assert set(found["rule"]) == SAMPLE_RULES
    assert found["row"].notna().all()
    assert not found["used"].any()
    assert found["message"].str.contains("left out|not counted|set aside").all()
    assert (found["remedy"] != "").all()
    consequence = found.set_index("rule")["message"]
    assert "too low" in consequence["decay class unknown"]
    assert "other lines" in consequence["line without length"]


def test_every_row_is_accounted_for(inventory: Inventory) -> None:
    table = inventory.results.reconciliation
    assert (table["balance"] == 0).all()
    assert (table["rows_read"] == table["used"] + table["set_aside"]).all()
    samples = {"pieces", "lines", "stumps", "litter", "ground_vegetation", "saplings", "soil"}
    assert samples <= set(table["table"])


def test_the_story_shows_in_the_results(inventory: Inventory) -> None:
    """The README promises this much; the rates behind it are invented."""
    whole = pd.concat([inventory.change(*years, by="inventory", pool="all") for years in ((2014, 2019), (2014, 2024))])
    assert (whole["change_t_c"] > 0).all()
    assert (whole["change_low"] > 0).all()
    worth = inventory.results.further["raster_worth"]
    worth = worth[(worth["stratum"] == "") & (worth["pool"] != "all")].set_index(["pool", "survey"])
    assert (worth.loc["above_ground", "relative_efficiency"] > 2).all()
    assert worth.groupby("pool")["used"].all().to_dict() == {
        "above_ground": True, "below_ground": True, "dead_wood": False, "litter": False, "soil": False
    }  # fmt: skip
    first = inventory.change(2014, 2019, pool="all").set_index("unit")
    second = inventory.change(2019, 2024, pool="all").set_index("unit")
    assert first["change_high"]["Sawpit"] < 0
    assert second["change_high"]["Windy Acre"] < 0
    # The storm laid down part of what it took: dead wood gains, and takes back some of the loss.
    wood = inventory.change(2019, 2024, pool="dead_wood").set_index("unit")
    standing = inventory.change(2019, 2024, pool="above_ground").set_index("unit")
    assert wood["change_low"]["Windy Acre"] > 0
    assert wood["change_t_c"]["Windy Acre"] < -standing["change_t_c"]["Windy Acre"]
    soil = inventory.change(2014, 2024, by="inventory", pool="soil").iloc[0]
    assert soil["change_low"] < 0 < soil["change_high"]
    assert 20 <= soil["plots_paired"] <= 35


def test_stocks_are_plausible(inventory: Inventory) -> None:
    """Ranges of thumb for temperate woodland: common practice, no source; they keep the invented figures believable."""
    ranges = {
        "above_ground": (60, 180),
        "below_ground": (12, 45),
        "dead_wood": (4, 15),
        "litter": (5, 15),
        "soil": (60, 110),
    }
    stocks = inventory.stocks(by="inventory").astype({"survey": "str"})
    for pool, (low, high) in ranges.items():
        rows = stocks[(stocks["pool"] == pool) & stocks["density_t_c_ha"].notna()]
        assert rows["survey"].tolist() == [name for name in SURVEYS if name != "2019" or pool not in ("litter", "soil")]
        assert rows["density_t_c_ha"].between(low, high).all(), pool
        assert (rows["density_low"] < rows["density_t_c_ha"]).all()
        assert (rows["density_t_c_ha"] < rows["density_high"]).all()


def test_the_whole_is_the_sum_of_the_pools(inventory: Inventory) -> None:
    """Identity: at every level and date ``all`` is the sum of the pools that can be stated there."""
    results = inventory.results
    for table, value, keys in (
        (results.stocks, "stock_t_c", ["by", "unit", "survey"]),
        (results.change, "change_t_c", ["by", "unit", "since", "until"]),
    ):
        rows = table.astype(dict.fromkeys([*keys, "pool"], "str"))
        whole = rows[rows["pool"] == "all"].set_index(keys)[value]
        parts = rows[rows["pool"] != "all"].groupby(keys)[value].sum(min_count=1)
        assert set(rows["by"]) == {"inventory", "stratum", "parcel"}
        known = whole.dropna()
        assert len(known) > 0.8 * len(whole)
        assert parts.loc[known.index].to_numpy() == pytest.approx(known.to_numpy(), abs=1e-6)
        assert parts.loc[whole.index[whole.isna()]].isna().all()


def test_a_pool_not_measured_says_so(inventory: Inventory) -> None:
    stocks = inventory.stocks(by="inventory").astype({"survey": "str"})
    change = inventory.change(2014, 2019, by="inventory")
    for pool in ("litter", "soil"):
        row = stocks[(stocks["survey"] == "2019") & (stocks["pool"] == pool)].iloc[0]
        assert "not measured" in row["method"]
        assert "2014 only" in change.loc[change["pool"] == pool, "method"].iloc[0]
    whole = change[change["pool"] == "all"].iloc[0]
    assert "without litter" in whole["method"]
    assert "without soil" in whole["method"]


def test_project_file_in_first_steps_is_valid(tmp_path: Path) -> None:
    text = (DEMO.parent / "docs" / "first-steps.md").read_text(encoding="utf-8")
    example = text.split("```toml\n")[1].split("```")[0]
    (tmp_path / "inventory.toml").write_text(example, encoding="utf-8")
    settings = load_settings(tmp_path / "inventory.toml")
    assert list(settings.surveys) == ["2016", "2023"]
