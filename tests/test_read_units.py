"""Units and canonical columns."""

from __future__ import annotations

import re

import numpy as np
import pint
import pytest
from hypothesis import given
from hypothesis import strategies as st

from landcarbon.inventory.columns import column_specs, table_columns, table_names
from landcarbon.inventory.units import accepted_units, convert, dimension_of, unit_table

REGISTRY = pint.UnitRegistry()


def in_pint(unit: str) -> str:
    if unit.startswith("1/"):
        return f"1/({in_pint(unit[2:])})"
    unit = re.sub(r"(?<=[mt])([23])$", r"**\1", unit)
    if unit == "per mille":
        return "permille"
    # An acre of pint is that of the survey foot of the United States; ours is that of the international foot.
    return {"ac": "(4840 * yard**2)", "acre": "(4840 * yard**2)", "acres": "(4840 * yard**2)"}.get(unit, unit)


@pytest.mark.parametrize(("dimension", "unit"), [key for key, unit in unit_table().items() if unit.factor is not None])
def test_factors_against_pint(dimension: str, unit: str):
    """Independent: the unit library pint."""
    base = {
        "length": "m",
        "area": "m**2",
        "per area": "1/m**2",
        "slope": "degree",
        "mass": "kg",
        "density": "kg/m**3",
        "share": "",
    }[dimension]
    expected = REGISTRY.parse_expression(in_pint(unit))
    expected = (expected * REGISTRY.dimensionless if isinstance(expected, (int, float)) else expected).to(base)
    assert unit_table()[dimension, unit].factor == pytest.approx(expected.magnitude, rel=1e-14)


def test_slope_in_percent():
    """Identity: a rise as long as the run is 100 percent and 45 degrees."""
    assert convert(np.array([0.0, 100.0]), "percent", "deg").tolist() == [0.0, 45.0]
    assert np.isnan(convert(np.array([np.nan]), "%", "deg")[0])


def test_share_in_percent():
    assert convert(np.array([80.0]), "percent", "1").tolist() == [0.8]


def test_one_share_in_every_unit():
    """Identity: 5.8 percent are 58 g/kg, and so on; 5.8 itself is no binary number, hence the last bit."""
    written = {"1": 0.058, "g/g": 0.058, "%": 5.8, "per mille": 58.0, "g/kg": 58.0, "mg/g": 58.0, "mg/kg": 58_000.0}
    found = {unit: convert(np.array([value]), unit, "1")[0] for unit, value in written.items()}
    assert found == pytest.approx(dict.fromkeys(written, 0.058), rel=2e-16)


def test_millimetres_keep_their_digits():
    """Identity: whole millimetres are the same decimal number in cm, to the last bit."""
    millimetres = np.arange(1.0, 20_000.0)
    assert convert(millimetres, "mm", "cm").tolist() == [float(f"{value / 10:.1f}") for value in millimetres]


@given(st.floats(1e-6, 1e6), st.sampled_from(["mm", "cm", "m", "in", "ft"]))
def test_round_trip(value: float, unit: str):
    there = convert(np.array([value]), unit, "m")
    assert convert(there, "m", unit)[0] == pytest.approx(value, rel=1e-14)


def test_unknown_unit():
    with pytest.raises(KeyError, match="kg"):
        convert(np.array([1.0]), "kg", "cm")
    with pytest.raises(KeyError, match="stone"):
        dimension_of("stone")


def test_columns_are_sound():
    for spec in column_specs():
        assert spec.kind in ("id", "text", "number", "date", "flag")
        assert spec.meaning
        if spec.unit:
            assert spec.unit in accepted_units(spec.unit)
            assert spec.kind == "number"
        assert not (spec.kind in ("id", "text") and spec.essential)
    assert table_names() == [
        "trees", "plots", "visits", "parcels", "strata", "species", "lines", "pieces", "logs", "stumps", "litter",
        "ground_vegetation", "saplings", "soil",
    ]  # fmt: skip
    assert [name for name, spec in table_columns("trees").items() if spec.needed] == ["plot", "species", "dbh"]


def test_columns_of_samples_have_the_names_the_pools_expect():
    """Frozen: the columns agreed upon between reading and the pools, with the units in their names."""
    common = ["survey", "plot", "subplot"]
    wood = ["decay_class", "wood", "species"]
    frame = [
        "frame", "layer", "frame_area_m2", "fresh_kg", "sub_fresh_g", "sub_dry_g", "dry_kg", "depth_cm",
        "bulk_density_g_cm3", "ash_share", "carbon_fraction",
    ]  # fmt: skip
    expected = {
        "lines": ["line", "length_m", "slope_deg"],
        "pieces": [
            "line", "size_class", "count", "diameter_cm", "diameter_2_cm", *wood, "tilt_deg", "hollow_cm",
            "sunk_share", "line_m",
        ],
        "logs": ["log", "length_m", "large_cm", "middle_cm", "small_cm", *wood, "hollow_cm", "sunk_share"],
        "stumps": ["stump", "diameter_cm", "height_m", *wood],
        "litter": frame,
        "ground_vegetation": frame,
        "saplings": ["species", "count", "dbh_cm", "height_m", "area_m2"],
        "soil": [
            "core", "top_cm", "bottom_cm", "bulk_density_g_cm3", "coarse_share", "organic_carbon_share",
            "organic_matter_share", "total_carbon_share", "inorganic_carbon_share", "cores",
        ],
    }  # fmt: skip
    found = {table: [spec.becomes for spec in table_columns(table).values()] for table in expected}
    assert found == {table: [*common, *columns, "date"] for table, columns in expected.items()}
