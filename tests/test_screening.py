"""Screening of the catalogue, the generated page, and the comparison with measured trees."""

from __future__ import annotations

import csv
import shutil
import sys
from importlib.resources import files
from pathlib import Path

import numpy as np
import pandas as pd
import pytest

from allometry.catalogue import Catalogue, load_catalogue, read_catalogue
from allometry.comparison import COLUMNS, compare
from allometry.screening import screen, screening_height

ROOT = Path(__file__).resolve().parent.parent
sys.path.insert(0, str(ROOT / "tools"))
from equation_page import ENFOR_END, ENFOR_START, page  # noqa: E402

TABLES = files("allometry") / "equations"


@pytest.fixture(scope="module")
def catalogue() -> Catalogue:
    return load_catalogue()


def test_stored_screening_is_what_the_rule_gives(catalogue):
    stored = pd.read_csv(str(TABLES / "screened.csv"))
    pd.testing.assert_frame_equal(screen(catalogue), stored, check_dtype=False, rtol=1e-9)
    flagged = catalogue.table[catalogue.table["screened"]]
    assert set(flagged["equation_id"]) == set(stored["equation_id"])
    assert ((stored["worst_ratio"] > 2) | (stored["worst_ratio"] < 0.5)).all()


def test_screening_finds_a_planted_unit_slip(tmp_path):
    """A spruce equation in grams that is labelled kg must be found."""
    copy = tmp_path / "equations"
    shutil.copytree(str(TABLES), copy)
    path = copy / "zianis2005.csv"
    with path.open(encoding="utf-8", newline="") as handle:
        rows = list(csv.DictReader(handle))
    slip = next(r for r in rows if r["equation_id"] == "zianis05_155_picea_abies")
    assert slip["output_unit"] == "g"
    slip["output_unit"] = "kg"
    with path.open("w", encoding="utf-8", newline="") as handle:
        writer = csv.DictWriter(handle, list(rows[0]), lineterminator="\n")
        writer.writeheader()
        writer.writerows(rows)
    found = screen(read_catalogue(copy)).set_index("equation_id")
    assert found.loc["zianis05_155_picea_abies", "worst_ratio"] > 100


def test_screening_height_is_an_ordinary_tree():
    height = screening_height(np.array([10.0, 20.0, 40.0, 100.0]))
    assert (np.diff(height) > 0).all()
    np.testing.assert_allclose(height[:3], [10.0, 15.5, 20.6], atol=0.1)  # as the reason in rules.toml says


def without_weighed_trees(text: str) -> str:
    """Return the page without the part that needs the open file of trees."""
    return text[: text.index(ENFOR_START)] + text[text.index(ENFOR_END) :]


def test_page_is_what_the_generator_makes(catalogue):
    stored = (ROOT / "docs" / "equations.md").read_text(encoding="utf-8")
    assert without_weighed_trees(stored) == without_weighed_trees(page(catalogue, None))


def test_comparison_of_known_errors(catalogue):
    """Identity: trees made by the equation itself, ten percent heavier, show a bias of 1/1.1 - 1."""
    dbh = np.array([10.0, 20.0, 40.0])
    mass = 1.1 * catalogue.evaluate("jenkins2003_agb_mo", dbh)["biomass_kg"].to_numpy()
    trees = pd.DataFrame({"group": "oak", "dbh_cm": dbh, "height_m": np.nan, "mass_kg": mass})
    pairs = pd.DataFrame({"group": ["oak", "none"], "equation_id": ["jenkins2003_agb_mo"] * 2})
    found = compare(catalogue, trees, pairs)
    assert list(found.columns) == COLUMNS
    assert found["bias_percent"].iloc[0] == pytest.approx(100 * (1 / 1.1 - 1))
    assert found["n"].tolist() == [3, 0]
    assert np.isnan(found["rmse_kg"].iloc[1])
