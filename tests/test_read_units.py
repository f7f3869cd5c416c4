"""Units and canonical columns."""

from __future__ import annotations

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
    for name in ("m2", "km2", "ft2"):
        if unit == name:
            return f"{unit[:-1]}**2"
    # An acre of pint is that of the survey foot of the United States; ours is that of the international foot.
    return {"ac": "(4840 * yard**2)", "acre": "(4840 * yard**2)", "acres": "(4840 * yard**2)"}.get(unit, unit)


@pytest.mark.parametrize(
    ("dimension", "unit"), [key for key, unit in unit_table().items() if unit.factor is not None and key[0] != "share"]
)
def test_factors_against_pint(dimension: str, unit: str):
    """Independent: the unit library pint."""
    base = {"length": "m", "area": "m**2", "per area": "1/m**2", "slope": "degree"}[dimension]
    expected = REGISTRY.parse_expression(in_pint(unit))
    expected = (expected * REGISTRY.dimensionless if isinstance(expected, (int, float)) else expected).to(base)
    assert unit_table()[dimension, unit].factor == pytest.approx(expected.magnitude, rel=1e-15)


def test_slope_in_percent():
    """Identity: a rise as long as the run is 100 percent and 45 degrees."""
    assert convert(np.array([0.0, 100.0]), "percent", "deg").tolist() == [0.0, 45.0]
    assert np.isnan(convert(np.array([np.nan]), "%", "deg")[0])


def test_share_in_percent():
    assert convert(np.array([80.0]), "percent", "1").tolist() == [0.8]


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
    frames = {"trees", "plots", "visits", "parcels", "strata", "species"}
    assert {spec.table for spec in column_specs()} == frames
    assert table_names() == ["trees", "plots", "visits", "parcels", "strata", "species"]
    assert [name for name, spec in table_columns("trees").items() if spec.needed] == ["plot", "species", "dbh"]
