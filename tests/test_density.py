"""Wood density by name."""

from __future__ import annotations

from pathlib import Path

import numpy as np
import pandas as pd
import pytest

from allometry._data import read_data
from allometry.density import DENSITY_COLUMNS, density_table, wood_density
from allometry.errors import AllometryError


@pytest.mark.parametrize(
    ("name", "value", "rank", "source"),
    [
        # published: Zanne et al. 2009, mean of the records of the taxon
        ("Fagus sylvatica", 0.585, "species", "zanne2009"),
        ("Rhizophora mucronata", 0.814, "species", "zanne2009"),
        # published: the same, mean of species means
        ("Picea spp.", 0.371, "genus", "zanne2009"),
        ("Rhizophora sp.", 0.870, "genus", "zanne2009"),
        # published: USDA Forest Service national reference table of species (2024)
        ("Carya glabra", 0.66, "species", "usfs_ref_species"),
        # published: Chojnacky et al. 2014, Tables 2-4
        ("Quercus montana", 0.57, "species", "chojnacky2014"),
        # published: IPCC 2006, Volume 4, Table 4.13, p. 4.64
        ("Aegle marmelo", 0.75, "species", "ipcc2006"),
        # published: IPCC 2006, Volume 4, Table 4.14, p. 4.71 (the database has no mean for the genus)
        ("Prunus spp.", 0.49, "genus", "ipcc2006"),
        # no mean for the genus is printed: the mean of its species in IPCC 2006, Table 4.13
        ("Lecythis nowhere", 0.0, "genus", "ipcc2006"),
        # published: Zanne et al. 2009, family mean
        ("Burseraceae", 0.517, "family", "zanne2009"),
    ],
)
def test_published_values(name: str, value: float, rank: str, source: str) -> None:
    row = wood_density([name]).iloc[0]
    assert row["wood_density_rank"] == rank
    assert source in row["wood_density_source"]
    if value:
        assert row["wood_density_g_cm3"] == pytest.approx(value, abs=5e-4)


def test_synonyms_and_database_spellings_find_the_same_value() -> None:
    """Identity: Bruguiera gymnorhiza (database spelling) and gymnorrhiza are one species, 0.764 in Zanne et al.
    2009."""
    found = wood_density(
        ["Bruguiera gymnorhiza", "Bruguiera gymnorrhiza", "Falcataria moluccana", "Paraserianthes falcataria"]
    )
    assert found["wood_density_g_cm3"].to_list() == [0.764, 0.764, 0.295, 0.295]


def test_range_is_taken_at_its_middle() -> None:
    """Published: IPCC 2006 Table 4.13, p. 4.64, Adina cordifolia 0.58-0.59."""
    row = density_table().query("accepted_name == 'Adina cordifolia'").iloc[0]
    assert row["density_g_cm3"] == pytest.approx(0.585)
    assert (row["min"], row["max"]) == (0.58, 0.59)
    assert "midpoint" in row["note"]


def test_region_and_globe_serve_last() -> None:
    """Published: Zanne et al. 2009, Europe 0.525 and all species 0.616; IPCC 2013 Wetlands Supplement Table 4.6,
    0.71."""
    names = ["", "Unidentified"]
    assert wood_density(names, region="europe")["wood_density_g_cm3"].to_list() == [0.525, 0.525]
    assert wood_density(names, region="mangrove")["wood_density_g_cm3"].to_list() == [0.71, 0.71]
    plain = wood_density(names)
    assert plain["wood_density_g_cm3"].to_list() == [0.616, 0.616]
    assert plain["wood_density_rank"].to_list() == ["global", "global"]


def test_mean_of_the_tropics_lies_between_its_regions() -> None:
    """Identity: a weighted mean lies within the means it is made of (0.560 to 0.636 in Zanne et al. 2009)."""
    value = wood_density([""], region="tropics")["wood_density_g_cm3"].iloc[0]
    assert 0.560 < value < 0.636


def test_genus_without_published_mean_takes_its_species() -> None:
    """Identity: one species of Ceriops is listed, so its value is the mean."""
    row = wood_density(["Ceriops sp."]).iloc[0]
    assert row["wood_density_g_cm3"] == wood_density(["Ceriops tagal"])["wood_density_g_cm3"].iloc[0]
    assert row["wood_density_source"].startswith("mean of listed species")


def test_own_values_come_first() -> None:
    own = {"Fagus sylvatica L.": 0.6, "Quercus": 0.65, "OAK": 0.7}
    found = wood_density(["Fagus moesiaca", "Quercus robur", "OAK"], own)
    assert found["wood_density_g_cm3"].to_list() == [0.6, 0.65, 0.7]
    assert (found["wood_density_rank"] == "given").all()


@pytest.mark.parametrize("value", [600, 0.0, -0.5, float("nan")])
def test_own_value_that_is_no_wood(value: float) -> None:
    with pytest.raises(AllometryError, match="divide kg/m3 by 1000"):
        wood_density(["Fagus sylvatica"], {"Fagus sylvatica": value})


def test_read_rows_go_before_recalled_ones() -> None:
    table = density_table()
    raw = read_data("wood_density")
    read = set(raw.loc[raw["known"] == "read", "taxon"])
    recalled = table[table["known"] == "memory"]
    assert not set(recalled["taxon"]) & read


def test_shape() -> None:
    names = pd.Series(["Picea abies", None, "Picea abies"], index=[4, 2, 9], dtype="object")
    found = wood_density(names)
    assert list(found.columns) == DENSITY_COLUMNS
    assert found.index.to_list() == [4, 2, 9]
    assert np.isfinite(found["wood_density_g_cm3"]).all()
    assert wood_density([]).empty


def test_all_values_are_wood() -> None:
    """Published: lightest and heaviest species of Zanne et al. 2009 are 0.08 and 1.39 g/cm3."""
    values = density_table()["density_g_cm3"]
    assert values.between(0.08, 1.39).all()


def test_printed_temperate_table_is_whole(reference: Path) -> None:
    """Published: IPCC 2006, Volume 4, Table 4.14, p. 4.71, all rows."""
    printed = pd.read_csv(reference / "facts/ipcc/table_4_14_wood_density_temperate_boreal.csv")
    ours = read_data("wood_density", numbers=("density_g_cm3",))
    ours = ours[ours["where"].str.startswith("Table 4.14")].set_index("taxon")["density_g_cm3"]
    assert ours.to_dict() == printed.set_index("taxon")["value"].to_dict()


def test_printed_tropical_table_is_whole(reference: Path) -> None:
    """Published: IPCC 2006, Volume 4, Table 4.13, the mean of the printed rows of each species."""
    printed = pd.read_csv(reference / "facts/ipcc/table_4_13_wood_density_tropical.csv")
    value = printed["value"].fillna((printed["low"] + printed["high"]) / 2)
    expected = value.groupby(printed["species"]).mean()
    ours = read_data("wood_density", numbers=("density_g_cm3",))
    ours = ours[ours["where"].str.startswith("Table 4.13")].set_index("taxon")["density_g_cm3"]
    assert set(ours.index) == set(expected.index)
    assert np.allclose(ours.reindex(expected.index), expected, atol=5.1e-5)
