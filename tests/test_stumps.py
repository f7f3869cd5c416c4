"""Stumps on the area of a plot."""

from __future__ import annotations

import numpy as np
import pandas as pd
import pytest
from hypothesis import given
from hypothesis import strategies as st
from scipy.integrate import quad
from wood_frames import SPECIES, UNIT_DENSITY, rules, table

from allometry.catalogue import load_catalogue
from landcarbon.pools.parts import PART_COLUMNS
from landcarbon.pools.stumps import StumpOptions, stump_volume, stumps

AREA = StumpOptions(class_density=UNIT_DENSITY, log_area_m2=1000.0)
VISITED = pd.DataFrame({"survey": ["2014", "2014"], "plot": ["A", "B"]}).astype("str")


def measure(rows, options=AREA):
    parts, findings = stumps(table("stumps", *rows), VISITED, options, SPECIES)
    assert list(parts.columns) == PART_COLUMNS
    return parts.set_index("plot"), findings


def test_a_stump_is_a_cylinder():
    """Identity: 40 cm wide and 0.3 m high on 1000 m2; a plot visited without stumps is zero."""
    parts, findings = measure([{}])
    assert findings.empty
    assert parts.loc["A", "mass_t_ha"] == pytest.approx(np.pi * 0.04 * 0.3 * 10)
    assert parts.loc["A", "density_t_c_ha"] == pytest.approx(np.pi * 0.04 * 0.3 * 10 * 0.478)
    assert parts.loc["B", ["mass_t_ha", "density_t_c_ha", "samples"]].tolist() == [0, 0, 0]
    assert parts["part"].tolist() == ["stumps"] * 2


@given(st.floats(0.02, 0.4), st.floats(8.0, 120.0), st.floats(0.05, 0.2))
def test_taper_integrates_the_stump_diameter_equation(height, diameter, taper):
    """Independent: numerical integration of the section from the ground to the cut."""
    feet = height / 0.3048

    def ratio(h):
        return 1.0 + taper * (4.5 - h) / (h + 1.0)

    exact = quad(lambda h: np.pi / 4 * (diameter / 100 * ratio(h) / ratio(feet)) ** 2, 0, feet)[0] * 0.3048
    assert stump_volume(height, diameter, taper=taper) == pytest.approx(exact, rel=1e-8)
    assert stump_volume(height, diameter, taper=taper) > stump_volume(height, diameter)


def test_a_taper_of_the_catalogue():
    """Published (secondary): spruce, B = 0.14525 in the catalogue; the flare adds to the cylinder."""
    coefficient = load_catalogue().table.set_index("equation_id").loc["raile1982_dob_sp", "b1"]
    options = StumpOptions(class_density=UNIT_DENSITY, log_area_m2=1000.0, taper=float(coefficient))
    plain, _ = measure([{}])
    flared, _ = measure([{}], options)
    assert 1.0 < flared.loc["A", "mass_t_ha"] / plain.loc["A", "mass_t_ha"] < 1.3
    assert "taper" in flared.loc["A", "method"]


def test_density_of_decay_class_as_for_down_wood():
    """Published: national species reference table, down wood, unknown hardwood class 3: 0.45."""
    options = StumpOptions(log_area_m2=1000.0)
    sound, _ = measure([{"species": "BU"}], options)
    rotten, _ = measure([{"species": "BU", "decay_class": "3"}], options)
    assert rotten.loc["A", "mass_t_ha"] / sound.loc["A", "mass_t_ha"] == pytest.approx(0.45)


@pytest.mark.parametrize(
    ("fault", "name", "used"),
    [
        ({"diameter_cm": np.nan}, "stump without size", False),
        ({"height_m": 0.0}, "stump without size", False),
        ({"height_m": 1.6}, "stump tall as a snag", True),
        ({"diameter_cm": 260.0}, "diameter very large", True),
        ({"decay_class": "7"}, "decay class unknown", False),
        ({"decay_class": ""}, "decay class missing", True),
        ({"plot": "Z"}, "plot not visited for dead wood", False),
    ],
    ids=lambda value: str(value),
)
def test_faults_of_stumps(fault, name, used):
    parts, findings = measure([{}, fault], StumpOptions(log_area_m2=1000.0))
    assert rules(findings) == [(name, 3)]
    assert findings["used"].tolist() == [used]
    assert findings["table"].tolist() == ["stumps"]
    assert parts.loc["A", "samples"] == (2 if used else 1)
