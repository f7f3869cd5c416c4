"""Reading of scientific names.

Accepted names and synonyms here are common usage; where a name list is open data it is named beside the check.
"""

from __future__ import annotations

from pathlib import Path

import pandas as pd
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st

from allometry._data import read_data
from allometry.names import NAME_COLUMNS, genera, parse_names, synonyms

KNOWN = {"read", "secondary", "memory"}


@pytest.mark.parametrize(
    ("given_name", "accepted"),
    [
        ("Abies lasiocarpa (Hook.) Nutt.", "Abies lasiocarpa"),
        ("ABIES LASIOCARPA (HOOK.) NUTT.", "Abies lasiocarpa"),
        ("  abies   lasiocarpa ", "Abies lasiocarpa"),
        ("Abies_lasiocarpa", "Abies lasiocarpa"),
        ("Abies lasiocarpa var. arizonica (Merriam) Lemmon", "Abies lasiocarpa"),
        ("Quercus L.", "Quercus"),
        ("Abies Mill.", "Abies"),
        ("Betula spp.", "Betula"),
        ("Betula spp", "Betula"),
        ("Betula sp.", "Betula"),
        ("Betula sp", "Betula"),
        ("Acer sp1", "Acer"),
        ("Quercus robur/petraea", "Quercus"),
        ("Quercus cf. robur", "Quercus robur"),
        ("Quercus aff. robur", "Quercus"),
        ("Populus ×canadensis", "Populus canadensis"),
        ("Populus x canadensis Moench", "Populus canadensis"),
        ("Populus × euramericana", "Populus canadensis"),
        ("Crataegus crus-galli L.", "Crataegus crus-galli"),
        ("Populus balsamifera subsp. trichocarpa", "Populus trichocarpa"),
        ("Populus balsamifera ssp. trichocarpa (Torr. & A.Gray) Brayshaw", "Populus trichocarpa"),
        ("Quercus prinus", "Quercus montana"),
        ("Picea excelsa", "Picea abies"),
        ("Fagus moesiaca", "Fagus sylvatica"),
        ("Dtypetes gossweileri", "Drypetes gossweileri"),
    ],
)
def test_writing_of_names(given_name: str, accepted: str) -> None:
    """Common practice, no source; the synonyms are those of the package's own table, marked there."""
    row = parse_names([given_name]).iloc[0]
    assert row["accepted_name"] == accepted
    assert row["known_name"]
    assert row["suggestion"] == ""


@pytest.mark.parametrize(
    ("given_name", "suggestion", "genus"),
    [
        ("Fagus sylvatca", "Fagus sylvatica", "Fagus"),
        ("Quercus rober", "Quercus robur", "Quercus"),
        ("Qercus robur", "Quercus robur", ""),
        ("Piceea abies", "Picea abies", ""),
    ],
)
def test_misspelling_is_told_and_not_mended(given_name: str, suggestion: str, genus: str) -> None:
    row = parse_names([given_name]).iloc[0]
    assert not row["known_name"]
    assert row["suggestion"] == suggestion
    assert row["genus"] == genus
    assert row["accepted_name"] != suggestion


@pytest.mark.parametrize(
    "given_name", ["", "  ", "unknown", "Unidentified unk", "indet.", "NA", "?", "sp.", None, float("nan")]
)
def test_no_name(given_name: object) -> None:
    row = parse_names(pd.Series([given_name], dtype="object")).iloc[0]
    assert (row["genus"], row["accepted_name"], row["suggestion"]) == ("", "", "")
    assert not row["known_name"]


@pytest.mark.parametrize(
    ("given_name", "group", "family"),
    [
        ("Rosaceae", "broadleaf", "Rosaceae"),
        ("Pinaceae indet.", "conifer", "Pinaceae"),
        ("unknown conifer", "conifer", ""),
        ("Hardwood spp.", "broadleaf", ""),
    ],
)
def test_family_or_group_alone(given_name: str, group: str, family: str) -> None:
    row = parse_names([given_name]).iloc[0]
    assert (row["genus"], row["group"], row["family"]) == ("", group, family)


def test_a_species_in_no_table_is_not_called_a_misspelling() -> None:
    row = parse_names(["Quercus xylina"]).iloc[0]
    assert row["known_name"]
    assert row["accepted_name"] == "Quercus xylina"


def test_series_index_and_repeats_are_kept() -> None:
    names = pd.Series(["Picea abies", None, "Picea abies"], index=[7, 3, 5], dtype="object")
    parsed = parse_names(names)
    assert list(parsed.columns) == NAME_COLUMNS
    assert parsed.index.to_list() == [7, 3, 5]
    assert parsed.loc[7].equals(parsed.loc[5])
    assert parse_names(names.astype("category")).equals(parsed)
    assert parse_names([]).empty


@settings(max_examples=60, deadline=None)
@given(st.text(max_size=40))
def test_any_text_gives_a_row(text: str) -> None:
    row = parse_names([text]).iloc[0]
    assert isinstance(row["accepted_name"], str)
    if row["accepted_name"]:
        again = parse_names([row["accepted_name"]]).iloc[0]
        assert again["accepted_name"] == row["accepted_name"]


def test_every_synonym_leads_to_a_genus_of_the_table_and_is_final() -> None:
    """Identity: an accepted name is its own accepted name."""
    table = synonyms()
    accepted = parse_names(table["accepted_name"])
    assert accepted["genus"].isin(genera().index).all()
    assert accepted["accepted_name"].to_list() == table["accepted_name"].to_list()
    assert set(table["known"]) <= KNOWN
    assert not table["name"].str.lower().duplicated().any()


def test_genera_are_unique_and_grouped() -> None:
    table = genera()
    assert table.index.is_unique
    assert set(table["group"]) == {"conifer", "broadleaf", "palm", "tree_fern", "bamboo"}
    assert set(table["known"]) <= KNOWN
    assert (table["source"] != "").all()


@pytest.mark.parametrize(
    ("genus", "family"),
    [("Umbellularia", "Lauraceae"), ("Liquidambar", "Altingiaceae"), ("Acer", "Sapindaceae"), ("Nyssa", "Nyssaceae")],
)
def test_families_of_genera_printed_elsewhere(genus: str, family: str) -> None:
    """Placement from memory (APG IV); the North American group table prints older families."""
    assert genera().loc[genus, "family"] == family


def test_families_agree_with_an_open_species_list(reference: Path) -> None:
    """Published: species table of the SCBI forest plot, open data, column Family."""
    listed = pd.read_csv(reference / "real/scbi/species.csv")
    parsed = parse_names(listed["Latin"])
    told = listed["Family"] != "Unknown"
    assert (parsed["family"] == listed["Family"])[told].all()
    assert parsed.loc[told, "known_name"].all()


def test_names_of_our_own_tables_are_known() -> None:
    """Every plant the package has data for must read as known, or it could never be found."""
    density = read_data("wood_density")
    density = density[density["rank"].isin(["species", "genus"])]["taxon"]
    assert parse_names(density)["known_name"].all()
    listed = read_data("species_groups")["scientific_name"]
    odd = listed[~parse_names(listed)["known_name"]]
    assert set(odd) == {"Hardwood spp.", "Softwood spp.", "Chamaecyparis/Thuja spp."}
