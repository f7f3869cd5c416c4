"""Pools beside the trees, from the project file to the tables."""

from __future__ import annotations

import numpy as np
import pandas as pd
import pytest

import landcarbon

PROJECT = """
[inventory]
name = "Slope"
[strata]
areas = { s = 40 }
[plots]
file = "plots.csv"
crs = "EPSG:25832"
design = { kind = "circle", radius_m = 10 }
[surveys.2020]
trees = "trees.csv"
soil = "soil.csv"
[species]
FI = "Picea abies"
[equations]
region = "europe"
[pools]
dead_wood = "measured"
soil = "measured"
litter = { how = "default", value_t_c_ha = 20.0, source = "an invented figure" }
[soil]
bulk_density = "fine per whole volume"
depth_cm = 30
[units.soil]
organic_carbon = "%"
"""


def write(folder, *, project=PROJECT, trees=None, soil=None):
    names = list("ABCDEF")
    plots = pd.DataFrame({"plot": names, "x": np.arange(6) * 50 + 500_000, "y": 5_600_000, "stratum": "s"})
    plots.to_csv(folder / "plots.csv", index=False)
    frame = pd.DataFrame({"plot": names * 2, "tree": range(12), "species": "FI", "dbh": 30.0})
    frame["status"] = ["live"] * 6 + ["dead"] * 6
    frame = frame.assign(decay_class=["", *[""] * 5, *["2"] * 6]) if trees is None else trees(frame)
    frame.to_csv(folder / "trees.csv", index=False)
    layers = [{"plot": name, "core": 1, "top": top, "bottom": top + 15, "bulk_density": 1.0, "organic_carbon": 2.0}
              for name in "ABC" for top in (0, 15)]  # fmt: skip
    table = pd.DataFrame(layers)
    (table if soil is None else soil(table)).to_csv(folder / "soil.csv", index=False)
    (folder / "inventory.toml").write_text(project, encoding="utf-8")
    return landcarbon.open_inventory(folder)


def figure(inventory, pool, name="density_t_c_ha", by="inventory"):
    return inventory.stocks(by, pool=pool)[name].iloc[0]


def test_soil_on_some_plots_and_a_default_enter_the_sum(tmp_path):
    inventory = write(tmp_path)
    # Identity: 2 % x 1.0 g/cm3 x 30 cm = 60 t C/ha on three plots, the default on all.
    assert figure(inventory, "soil") == pytest.approx(60.0)
    assert figure(inventory, "soil", "plots") == 3
    assert figure(inventory, "litter") == 20.0
    pools = inventory.stocks("inventory")
    parts = pools.loc[pools["pool"] != "all", "density_t_c_ha"].sum()
    assert figure(inventory, "all") == pytest.approx(parts)
    assert any("Default factors" in mark and "an invented figure" in mark for mark in inventory.results.marks)


def test_all_rows_of_a_pool_set_aside_is_said_loudly(tmp_path):
    """A percentage read as a share is impossible in every layer: the pool must not vanish."""
    inventory = write(tmp_path, project=PROJECT.replace('organic_carbon = "%"', 'organic_carbon = "1"'))
    assert np.isnan(figure(inventory, "soil"))
    assert "not estimable" in figure(inventory, "soil", "method")
    assert "without soil" in figure(inventory, "all", "method")
    findings = inventory.check()
    assert "no usable rows" in set(findings.loc[findings["severity"] == "error", "rule"])


def test_a_broken_stem_weighs_less_than_a_whole_one(tmp_path_factory):
    whole = write(tmp_path_factory.mktemp("whole"))
    broken = write(
        tmp_path_factory.mktemp("broken"),
        trees=lambda f: f.assign(
            decay_class=np.where(f["status"] == "dead", "2", ""),
            break_height=np.where(f["status"] == "dead", 5.0, np.nan),
            height=np.where(f["status"] == "dead", np.nan, 25.0),
            top=np.where(f["status"] == "dead", 24.0, np.nan),
        ),
        project=PROJECT.replace(
            "[units.soil]", '[columns.trees]\ntop = "top"\n[units.trees]\ntop = "cm"\n[units.soil]'
        ),
    )
    assert 0 < figure(broken, "dead_wood") < figure(whole, "dead_wood")
    trees = broken.results.trees
    dead = trees[trees["status"] == "dead"]
    assert set(dead["dead_how"].astype("str")) == {"bole to the break, decay class"}


def test_standing_dead_wood_falls_with_decay(tmp_path_factory):
    """Published: Domke et al. 2011 Table 2, shares left of bark and branches fall from class to class."""
    figures = []
    for decay in ("1", "2", "3"):
        inventory = write(
            tmp_path_factory.mktemp("decay"),
            trees=lambda f, decay=decay: f.assign(decay_class=np.where(f["status"] == "dead", decay, "")),
        )
        figures.append(figure(inventory, "dead_wood"))
    assert figures[0] > figures[1] > figures[2] > 0


def test_samples_are_published_with_their_fate(tmp_path):
    inventory = write(tmp_path, soil=lambda table: table.assign(organic_carbon=[58.0, *table["organic_carbon"][1:]]))
    samples = inventory.results.samples["soil"]
    assert samples["used"].sum() < len(samples)
    table = inventory.results.reconciliation
    row = table[table["table"] == "soil"].iloc[0]
    assert row["rows_read"] == row["used"] + row["set_aside"] == len(samples)
    assert row["used"] == samples["used"].sum()
