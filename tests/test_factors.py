"""Default factors and constants."""

from __future__ import annotations

import csv
import tomllib
from importlib import resources

import numpy as np
import pandas as pd
import pytest

from landcarbon import constants
from landcarbon.errors import SettingsError
from landcarbon.factors.carbon import carbon_domains, carbon_fraction, carbon_fraction_table

FOLDER = resources.files("landcarbon.factors")


def test_carbon_fractions_as_printed():
    """Published: IPCC 2006 Guidelines Vol 4 Table 4.3, p. 4.48 (temperate and boreal; default)."""
    group = np.array(["conifer", "broadleaf", "palm"], dtype=object)
    assert carbon_fraction(group, domain="temperate and boreal").tolist() == [0.51, 0.48, 0.47]
    assert carbon_fraction(group, domain="default").tolist() == [0.47] * 3
    assert carbon_fraction(group, domain="tropical and subtropical").tolist() == [0.47] * 3


def test_dead_wood_fractions_as_printed():
    """Published: Harmon et al. 2013, Forest Ecology and Management 291:259-267, abstract."""
    group = np.array(["conifer", "broadleaf", "other"], dtype=object)
    assert carbon_fraction(group, domain="default", pool="dead_wood").tolist() == [0.506, 0.478, 0.493]


def test_unknown_domain_names_the_accepted_ones():
    with pytest.raises(SettingsError, match="temperate and boreal"):
        carbon_fraction(np.array(["conifer"]), domain="polar")
    assert "default" in carbon_domains()


def test_carbon_to_carbon_dioxide():
    """Published: 44/12, IPCC 2006 Guidelines Vol 4 section 2.2.3, p. 2.11."""
    assert abs(constants.CARBON_TO_CO2 - 3.666667) <= 5e-7


@pytest.mark.parametrize("name", ["carbon_fraction.csv", "constants.csv"])
def test_every_factor_has_source_and_known_mark(name):
    sources = tomllib.loads(FOLDER.joinpath("sources.toml").read_text(encoding="utf-8"))
    with FOLDER.joinpath(name).open(encoding="utf-8", newline="") as handle:
        rows = list(csv.DictReader(handle))
    assert rows
    assert {row["source"] for row in rows} <= set(sources)
    assert {row["known"] for row in rows} <= {"read", "secondary", "memory"}
    assert all(row["where"] and row["unit"] for row in rows)


def test_ipcc_rows_agree_with_the_fact_sheet(reference):
    """Independent: the transcription of Table 4.3 in the reference folder."""
    sheet = pd.read_csv(reference / "facts" / "ipcc" / "table_4_3_carbon_fraction.csv")
    names = ["domain", "value", "low", "high"]
    printed = sheet.loc[sheet["table"] == "Table 4.3", names]
    ours = carbon_fraction_table()
    carried = ours.loc[ours["where"].str.contains("Table 4.3"), names]
    order = {"by": names, "ignore_index": True}
    pd.testing.assert_frame_equal(carried.sort_values(**order), printed.sort_values(**order))
