"""Surveys at which only samples were taken, and inventories without a single tree.

Invented plots; expected figures are identities worked out beside them.
"""

from __future__ import annotations

from pathlib import Path

import numpy as np
import pandas as pd
import pytest
from read_samples import accounted, read, settings_text

import landcarbon
from landcarbon.errors import SettingsError
from landcarbon.inventory import load_settings

NAMES = list("ABCDEF")
SOIL_ONLY = """
[inventory]
name = "Fen"
[strata]
areas = { s = 40 }
[plots]
file = "plots.csv"
crs = "EPSG:25832"
design = { kind = "circle", radius_m = 10 }
[surveys.2015]
soil = "soil_2015.csv"
[surveys.2020]
soil = "soil_2020.csv"
[equations]
region = "europe"
[pools]
above_ground = { how = "not counted", reason = "soil cores only" }
soil = "measured"
[soil]
bulk_density = "fine per whole volume"
depth_cm = 30
[units.soil]
organic_carbon = "%"
"""
MIXED = SOIL_ONLY.replace("[surveys.2015]\n", '[surveys.2015]\ntrees = "trees.csv"\n').replace(
    'above_ground = { how = "not counted", reason = "soil cores only" }',
    'below_ground = "ratio"\ndead_wood = "measured"',
)


def soil(year: int, percent: float, plots: str = "ABCDEF") -> pd.DataFrame:
    return pd.DataFrame(
        [
            {"plot": plot, "core": 1, "subplot": k, "top": top, "bottom": top + 15, "bulk_density": 1.0,
             "organic_carbon": percent + 0.1 * at, "date": f"{year}-06-{10 + at}"}
            for at, plot in enumerate(plots) for k in (1, 2) for top in (0, 15)
        ]
    )  # fmt: skip


def write(folder: Path, text: str = SOIL_ONLY, *, late: str = "ABCDEF") -> Path:
    plots = pd.DataFrame({"plot": NAMES, "x": np.arange(6) * 50 + 500_000, "y": 5_600_000, "stratum": "s"})
    plots.to_csv(folder / "plots.csv", index=False)
    soil(2015, 2.0, "ABCDE").to_csv(folder / "soil_2015.csv", index=False)
    soil(2020, 2.5, late).to_csv(folder / "soil_2020.csv", index=False)
    trees = pd.DataFrame({"plot": NAMES, "tree": 1, "species": "Picea abies", "dbh": 30.0, "date": "2015-06-20"})
    trees.to_csv(folder / "trees.csv", index=False)
    (folder / "inventory.toml").write_text(text, encoding="utf-8")
    return folder


def test_soil_cores_alone_from_file_to_figures(tmp_path):
    """Identity: p % x 1 g/cm3 x 30 cm = 30 p t C/ha; p is 2.0 to 2.4 (mean 2.2) and then 2.5 to 3.0 (mean 2.75)."""
    inventory = landcarbon.open_inventory(write(tmp_path))
    stocks = inventory.stocks("inventory")
    assert stocks["pool"].tolist() == ["soil", "all"] * 2
    assert stocks["density_t_c_ha"].tolist() == pytest.approx([66.0, 66.0, 82.5, 82.5])
    assert stocks["stock_t_c"].tolist() == pytest.approx([2640.0, 2640.0, 3300.0, 3300.0])
    assert stocks["plots"].tolist() == [5, 5, 6, 6]
    change = inventory.change(2015, 2020, by="inventory")
    assert change["plots_paired"].tolist() == [5, 5]
    # mean day 12 June 2015 and half past 12 June 2020: 1,827.5 days
    assert change["years"].iloc[0] == pytest.approx(1827.5 / 365.25)
    findings = inventory.check()
    assert set(findings["rule"]) == {"plots without rows"}
    assert "neither a visit nor a row of samples at survey 2015" in findings["message"].iloc[0]
    assert (inventory.results.reconciliation["balance"] == 0).all()
    assert any("above_ground (soil cores only)" in mark for mark in inventory.results.marks)


def test_the_order_of_surveys_follows_the_samples(tmp_path):
    text = SOIL_ONLY.replace("[surveys.2015]", "[surveys.second]").replace("[surveys.2020]", "[surveys.first]")
    text = text.replace("soil_2015", "swap").replace("soil_2020", "soil_2015").replace("swap", "soil_2020")
    inputs = read(write(tmp_path), text)
    assert inputs.surveys["survey"].tolist() == ["first", "second"]
    assert set(inputs.visits.loc[inputs.visits["visited"], "date_source"]) == {"samples"}
    assert (inputs.visits["n_subplots"] == 1).all()  # subplots of the soil are none of the tree plot
    assert inputs.trees.empty
    assert accounted(inputs)


def test_a_survey_of_samples_after_one_of_trees_is_no_clearing(tmp_path):
    """Trees were not looked for in 2020: above-ground carbon is not measured there, never zero."""
    inventory = landcarbon.open_inventory(write(tmp_path, MIXED))
    stocks = inventory.stocks("inventory").set_index(["pool", "survey"])
    assert stocks.loc[("above_ground", "2015"), "density_t_c_ha"] > 0
    for pool in ("above_ground", "below_ground", "dead_wood"):
        assert np.isnan(stocks.loc[(pool, "2020"), "density_t_c_ha"])
        assert "not measured" in stocks.loc[(pool, "2020"), "method"]
    assert stocks.loc[("soil", "2020"), "density_t_c_ha"] == pytest.approx(82.5)
    change = inventory.change(2015, 2020, by="inventory").set_index("pool")
    assert np.isnan(change.loc["above_ground", "change_t_c"])
    assert change.loc["soil", "change_t_c"] == pytest.approx(660.0)
    findings = inventory.check()
    assert "no rows" not in set(findings["rule"])


def test_visits_of_a_survey_of_samples(tmp_path):
    """A visits file says who was where; a plot visited without a core has no soil, and no trees of zero either."""
    text = MIXED.replace('soil = "soil_2020.csv"', 'soil = "soil_2020.csv"\nvisits = "visits.csv"')
    visits = pd.DataFrame({"plot": NAMES, "visited": "yes", "date": "2020-07-01"})
    folder = write(tmp_path, text, late="ABCD")
    visits.to_csv(folder / "visits.csv", index=False)
    inventory = landcarbon.open_inventory(folder)
    stocks = inventory.stocks("inventory").set_index(["pool", "survey"])
    assert np.isnan(stocks.loc[("above_ground", "2020"), "density_t_c_ha"])
    assert stocks.loc[("soil", "2020"), "plots"] == 4
    rows = inventory.results.plots
    late = rows[(rows["survey"].astype("str") == "2020") & (rows["pool"] == "above_ground")]
    assert len(late)
    assert late["density_t_c_ha"].isna().all()


@pytest.mark.parametrize(
    ("old", "new", "message"),
    [
        ('soil = "soil_2020.csv"', "", r"no tree table.*no table of samples either.*such as soil = 'FILE'"),
        (
            'above_ground = { how = "not counted", reason = "soil cores only" }',
            "",
            r"above_ground.*no table of measurements.*Without trees say above_ground = \{ how = 'not counted'",
        ),
        (
            'above_ground = { how = "not counted", reason = "soil cores only" }',
            'above_ground = { how = "measured", parts = ["trees"] }',
            r"the part 'trees' has no tree table",
        ),
        (
            'soil = "measured"',
            'soil = "measured"\nbelow_ground = "ratio"',
            r"roots are a ratio.*there is no tree table",
        ),
        (
            'soil = "measured"',
            'soil = "measured"\ndead_wood = "measured"',
            r"dead_wood.*no table of measurements.*Without trees say dead_wood",
        ),
    ],
)
def test_what_a_survey_needs(tmp_path, old, new, message):
    write(tmp_path, SOIL_ONLY.replace(old, new))
    with pytest.raises(SettingsError, match=f"(?s){message}"):
        load_settings(tmp_path / "inventory.toml")


class TestStatusCodes:
    TREES = "plot,tree,species,status,dbh\n" + "".join(
        f"0101,{at},oak,{code},20\n" for at, code in enumerate(["L", "X", "X", "", "Y", "L", "X"])
    )

    def test_a_table_that_does_not_map_all_codes(self, tmp_path):
        inputs = read(tmp_path, settings_text(more='[status]\nL = "live"'), trees_csv=self.TREES)
        errors = inputs.findings[inputs.findings["severity"] == "error"]
        assert errors["rule"].tolist() == ["status not mapped"]
        told = errors.iloc[0]
        assert told["value"] == "X, , Y"
        assert told["message"] == (
            "5 rows have a status code whose meaning is not known and are not counted: 'X' (3 rows), blank (1 rows), "
            "'Y' (1 rows)."
        )
        rows = inputs.findings[inputs.findings["rule"] == "unknown status"]
        assert rows["row"].tolist() == [3, 4, 5, 6, 8]
        assert set(rows["severity"]) == {"note"}
        assert not rows["used"].any()
        assert accounted(inputs)

    def test_many_codes_are_not_all_named(self, tmp_path):
        trees = "plot,tree,species,status,dbh\n" + "".join(f"0101,{at},oak,c{at:02d},20\n" for at in range(20))
        inputs = read(tmp_path, settings_text(more='[status]\nL = "live"'), trees_csv=trees)
        told = inputs.findings.set_index("rule").loc["status not mapped", "message"]
        assert told.endswith("'c11' (1 rows) and 8 more.")

    def test_no_word_where_all_codes_are_known(self, tmp_path):
        inputs = read(tmp_path)
        assert "status not mapped" not in set(inputs.findings["rule"])
