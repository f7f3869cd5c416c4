"""Default factors of litter, dead wood and soil, and pools that take one figure for every plot."""

from __future__ import annotations

import csv
import tomllib
from importlib import resources

import numpy as np
import pandas as pd
import pytest

from landcarbon.errors import SettingsError
from landcarbon.pools.defaults import (
    carbon_sets,
    default_fraction,
    default_rows,
    default_stock,
    default_stock_table,
    floor_density,
    floor_types,
    forest_floor_table,
    largest_density,
    largest_fraction,
    litter_carbon_table,
    weakest,
)
from landcarbon.pools.parts import PART_COLUMNS

FOLDER = resources.files("landcarbon.factors")
FILES = ["default_stocks.csv", "litter_carbon.csv", "forest_floor_density.csv"]


def visits():
    return pd.DataFrame(
        {
            "survey": ["2014", "2014", "2024"],
            "plot": ["1", "2", "1"],
            "visited": [True, False, True],
        }
    )


@pytest.mark.parametrize("name", FILES)
def test_every_factor_has_source_and_known_mark(name):
    sources = tomllib.loads(FOLDER.joinpath("sources.toml").read_text(encoding="utf-8"))
    with FOLDER.joinpath(name).open(encoding="utf-8", newline="") as handle:
        rows = list(csv.DictReader(handle))
    assert rows
    assert {row["source"] for row in rows} <= set(sources)
    assert {row["known"] for row in rows} <= {"read", "secondary", "memory"}
    assert all(row["where"] and row["unit"] for row in rows)


@pytest.mark.parametrize(
    ("edition", "pool", "climate", "kind", "printed"),
    [
        ("2006", "litter", "Warm temperate, dry", "broadleaf deciduous", (28.2, 23.4, 33.0)),
        ("2006", "litter", "Boreal, moist", "needleleaf evergreen", (55, 7, 123)),
        ("2019", "litter", "Temperate continental forest", "all vegetation types", (47.8, 4.6, 279.1)),
        ("2019", "dead_wood", "Tropical rainforest", "all vegetation types", (14.8, 0.6, 218.9)),
    ],
)
def test_litter_and_dead_wood_as_printed(edition, pool, climate, kind, printed):
    """Published: Table 2.2, IPCC 2006 Guidelines Vol 4 p. 2.27; 2019 Refinement Vol 4 pp. 2.27-2.28."""
    row = default_stock(pool, climate.upper(), kind, edition=edition)
    assert (row["value"], row["low"], row["high"]) == printed
    assert "Table 2.2" in row["text"]
    assert climate in row["text"]


@pytest.mark.parametrize(
    ("edition", "climate", "kind", "value", "percent"),
    [("2006", "Cold temperate, moist", "HAC", 95, 90), ("2019", "Cool temperate moist", "HAC", 81, 5)],
)
def test_soil_as_printed(edition, climate, kind, value, percent):
    """Published: Table 2.3, IPCC 2006 Guidelines Vol 4 p. 2.31; 2019 Refinement Vol 4 p. 2.35."""
    row = default_stock("soil", climate, kind, edition=edition)
    assert (row["value"], row["uncertainty_percent"]) == (value, percent)


def test_litter_rows_agree_with_the_fact_sheet(reference):
    """Independent: the transcription of Table 2.2 in the reference folder, every row."""
    sheet = pd.read_csv(reference / "facts" / "ipcc" / "table_2_2_litter_dead_wood.csv")
    ours = default_stock_table()
    ours = ours[ours["pool"].isin(["litter", "dead_wood"])].reset_index(drop=True)
    assert ours["edition"].tolist() == sheet["edition"].str[:4].tolist()
    assert ours["pool"].str.replace("_", " ").tolist() == sheet["pool"].tolist()
    for here, there in {"climate": "climate_or_zone", "type": "forest_type", "range": "range_type"}.items():
        assert ours[here].fillna("").tolist() == sheet[there].fillna("").tolist()
    for name in ("value", "low", "high"):
        np.testing.assert_array_equal(ours[name], sheet[name])
    assert all(page in where for page, where in zip(sheet["page"], ours["where"], strict=True))


def test_soil_rows_agree_with_the_fact_sheet(reference):
    """Independent: the transcription of Table 2.3 in the reference folder, every row."""
    sheet = pd.read_csv(reference / "facts" / "ipcc" / "table_2_3_soc_ref.csv")
    ours = default_stock_table()
    ours = ours[ours["pool"] == "soil"].reset_index(drop=True)
    assert ours["climate"].tolist() == sheet["climate_zone"].tolist()
    assert ours["type"].tolist() == sheet["soil_class"].tolist()
    for name in ("value", "uncertainty_percent", "n"):
        np.testing.assert_array_equal(ours[name], sheet[name])


def test_printed_ranges_hold_their_value():
    """Identity: a printed value lies within its printed range."""
    table = default_stock_table().dropna(subset=["value", "low", "high"])
    assert (table["low"] <= table["value"]).all()
    assert (table["value"] <= table["high"]).all()


def test_constants_of_the_forest_floor_agree_with_the_fact_sheet(reference):
    """Independent: rows SL-019 to SL-024 and SL-033 to SL-035 of the transcription in the reference folder."""
    path = reference / "facts" / "field" / "constants_soil_litter_fire_hwp.csv"
    sheet = pd.read_csv(path, index_col="id")["value"]
    floor = forest_floor_table()
    printed = [float(sheet[f"SL-{number:03d}"]) for number in range(19, 25)]
    assert floor.loc[floor["type"] != "limit", "value"].tolist() == printed
    assert largest_density() == float(sheet["SL-018"])
    assert default_fraction("litter", "duff", "dry matter", "hardwood 2009") == float(sheet["SL-033"])
    assert default_fraction("litter", "litter", "dry matter", "hardwood 2009") == float(sheet["SL-034"])
    assert default_fraction("litter", "litter", "organic matter") == 1 / float(sheet["SL-003"])
    boreal = litter_carbon_table().set_index("set").loc["boreal 2009"]
    assert f"{boreal['low']}-{boreal['high']}" == sheet["SL-035"]


def test_default_fractions():
    """Published: 0.37 litter (IPCC 2006 Vol 4 Eq 2.19, p. 2.23); 0.47 herbs (IPCC 2019 Vol 4 Table 5.8, p. 5.41)."""
    assert default_fraction("litter", "litter", "dry matter") == 0.37
    assert default_fraction("litter", "duff", "dry matter") == 0.37
    assert default_fraction("above_ground", "ground_vegetation", "dry matter") == 0.47
    assert default_fraction("above_ground", "ground_vegetation", "dry matter", "hardwood 2009") == 0.47
    assert carbon_sets() == ["IPCC 2006", "hardwood 2009"]
    assert largest_fraction() == 0.6


def test_bulk_density_of_the_forest_floor():
    assert floor_types() == ["pine", "hardwood", "birch", "spruce"]
    assert np.isnan(floor_density("hardwood", "duff"))
    assert np.isnan(floor_density("limit", "any"))
    assert np.isnan(floor_density("", "litter"))


def test_the_weakest_mark():
    assert weakest([]) == "read"
    assert weakest(["read", "memory", "secondary"]) == "memory"


@pytest.mark.parametrize(
    ("edition", "pool", "climate", "kind", "text"),
    [
        ("2011", "litter", "Tropical", "broadleaf deciduous", "2006; 2019"),
        ("2006", "litter", "Tropicl", "broadleaf deciduous", "Did you mean 'Tropical'"),
        ("2006", "litter", "Tropical", "broadleaf", "broadleaf deciduous"),
        ("2006", "roots", "Tropical", "broadleaf", "dead_wood"),
        ("2006", "dead_wood", "Tropical", "broadleaf deciduous", "prints no value"),
    ],
)
def test_a_default_that_is_not_printed_is_refused(edition, pool, climate, kind, text):
    with pytest.raises(SettingsError, match=text):
        default_stock(pool, climate, kind, edition=edition)


def test_the_default_goes_to_every_visited_plot():
    parts = default_rows(visits(), "litter", 20.0, "IPCC 2006 Vol 4 Table 2.2")
    assert list(parts.columns) == PART_COLUMNS
    assert parts[["survey", "plot"]].to_numpy().tolist() == [["2014", "1"], ["2024", "1"]]
    assert parts["density_t_c_ha"].tolist() == [20.0, 20.0]
    assert parts["samples"].tolist() == [0, 0]
    assert parts["mass_t_ha"].isna().all()
    method = parts["method"].iloc[0]
    assert method.startswith("default factor: 20 t C/ha")
    assert "IPCC 2006 Vol 4 Table 2.2" in method
    assert "its uncertainty is not in the interval" in method


def test_the_part_can_be_named():
    assert default_rows(visits(), "dead_wood", 1.0, "x")["part"].unique().tolist() == ["default"]
    assert default_rows(visits(), "below_ground", 1.0, "x")["part"].unique().tolist() == ["roots"]
    assert default_rows(visits(), "dead_wood", 1.0, "x", part="down_coarse")["part"].unique().tolist() == [
        "down_coarse"
    ]


def test_a_looked_up_default_can_be_used_as_it_is():
    found = default_stock("litter", "Tropical", "broadleaf deciduous", edition="2006")
    parts = default_rows(visits(), found["pool"], found["value"], found["text"], known=found["known"])
    assert parts["density_t_c_ha"].tolist() == [2.1, 2.1]
    assert "Table 2.2, p. 2.27" in parts["method"].iloc[0]


@pytest.mark.parametrize(
    ("pool", "value", "source", "text"),
    [
        ("litter", -1.0, "x", "not a carbon density"),
        ("litter", float("nan"), "x", "not a carbon density"),
        ("litter", 1.0, " ", "no source"),
        ("wood", 1.0, "x", "unknown pool 'wood'"),
    ],
)
def test_a_default_that_says_nothing_is_refused(pool, value, source, text):
    with pytest.raises(SettingsError, match=text):
        default_rows(visits(), pool, value, source)
