"""Volume of single pieces and of wood along a line."""

from __future__ import annotations

import numpy as np
import pytest
from hypothesis import given
from hypothesis import strategies as st
from scipy.integrate import quad
from wood_frames import inputs_of, published

from landcarbon.errors import UserError
from landcarbon.pools.piece_volume import (
    FORMULAS,
    cone_frustum,
    conic_paraboloid,
    cylinder,
    huber,
    line_volume,
    neiloid_frustum,
    newton,
    piece_volume,
    pieces_per_ha,
    smalian,
)

INCH_CM, FOOT_M, ACRE_HA = 2.54, 0.3048, 0.40468564224  # exact by definition
BY_NAME = {"Smalian": smalian, "cone": cone_frustum, "neiloid": neiloid_frustum}
SIZES = st.floats(0.5, 150.0)


@pytest.mark.parametrize("case", published("piece volume"), ids=lambda case: case["case_id"])
def test_frusta_as_printed(case):
    """Published: Larsen, Forestry functions: Cubic log volume (web page, University of Missouri), both unit systems."""
    size = inputs_of(case)
    imperial = case["unit"] == "ft3"
    to_cm, to_m = (INCH_CM, FOOT_M) if imperial else (1.0, 1.0)
    function = next(each for name, each in BY_NAME.items() if case["quantity"].startswith(name))
    volume = function(size["length"] * to_m, size["d_large"] * to_cm, size["d_small"] * to_cm)
    assert volume / (FOOT_M**3 if imperial else 1.0) == pytest.approx(
        float(case["expected"]), abs=float(case["tolerance"])
    )


def test_pieces_a_crossing_stands_for_as_printed():
    """Published: John Bell and Associates, Inventory and Cruising Newsletter no. 57, first example, 38.0 per acre."""
    case = published("line intersect")[0]
    per_ha = pieces_per_ha(15 * FOOT_M, 120 * FOOT_M)
    assert per_ha * ACRE_HA == pytest.approx(float(case["expected"]), abs=float(case["tolerance"]))


def test_one_piece_of_20_cm_on_100_m():
    """Identity: pi^2/8 x 400/100 = 4.935 m3/ha, the unit check of the formula."""
    assert line_volume(20.0**2, 100.0) == pytest.approx(4.935, abs=5e-4)


def test_line_volume_agrees_with_thrown_needles():
    """Independent: logs thrown at random on a field, volume counted exactly, against crossings with one line."""
    draw = np.random.default_rng(7)
    side, count, length, diameter = 200.0, 40_000, 6.0, 15.0
    y = draw.uniform(0, side, count)
    angle = draw.uniform(0, np.pi, count)
    # The line runs the whole width at mid-height; a log is crossed if its ends lie on either side.
    crossed = np.abs(y - side / 2) < length / 2 * np.abs(np.sin(angle))
    estimate = line_volume(crossed.sum() * diameter**2, side)
    true = count * cylinder(length, diameter) / (side**2 / 10_000)
    assert estimate == pytest.approx(true, rel=4 / np.sqrt(crossed.sum()))


@pytest.mark.parametrize(
    ("function", "power"),
    [(smalian, 1.0), (cone_frustum, 2.0), (neiloid_frustum, 3.0)],
    ids=["paraboloid", "cone", "neiloid"],
)
def test_frusta_are_solids_of_revolution(function, power):
    """Independent: numerical integration of the section, whose power-th root is linear along the axis."""
    large, small, length = 40.0, 22.0, 3.0
    ends = [np.pi / 4 * (d / 100) ** 2 for d in (large, small)]
    roots = [area ** (1 / power) for area in ends]
    exact = quad(lambda z: (roots[0] + (roots[1] - roots[0]) * z / length) ** power, 0, length)[0]
    assert function(length, large, small) == pytest.approx(exact, rel=1e-10)


@given(SIZES, SIZES, st.floats(0.1, 30.0))
def test_order_of_the_forms(large, small, length):
    """Identity: neiloid <= cone <= conic-paraboloid <= paraboloid, and the third is the mean of its neighbours."""
    neiloid, cone = neiloid_frustum(length, large, small), cone_frustum(length, large, small)
    between, paraboloid = conic_paraboloid(length, large, small), smalian(length, large, small)
    slack = 1e-12 * paraboloid
    assert neiloid <= cone + slack <= between + 2 * slack <= paraboloid + 3 * slack
    assert between == pytest.approx((cone + paraboloid) / 2, rel=1e-12)


@given(SIZES, st.floats(0.1, 30.0))
def test_every_form_of_a_cylinder_is_the_cylinder(diameter, length):
    expected = cylinder(length, diameter)
    for needs, function in FORMULAS.values():
        assert function(length, *[diameter] * len(needs)) == pytest.approx(expected, rel=1e-12)


def test_newton_is_exact_for_the_three_solids():
    """Independent: Simpson's rule is exact up to the third power, so Newton equals each frustum with its own middle."""
    large, small, length = 40.0, 10.0, 5.0
    for power, function in ((1, smalian), (2, cone_frustum), (3, neiloid_frustum)):
        middle = ((large ** (2 / power) + small ** (2 / power)) / 2) ** (power / 2)
        assert newton(length, large, middle, small) == pytest.approx(function(length, large, small), rel=1e-12)


def test_auto_takes_what_was_measured():
    nan = np.nan
    table = piece_volume(
        [4.0, 4.0, 4.0, 4.0, nan],
        [30.0, 30.0, nan, 30.0, 30.0],
        [24.0, nan, 24.0, nan, 24.0],
        [20.0, 20.0, nan, nan, 20.0],
    )
    assert table["formula"].tolist() == ["newton", "conic_paraboloid", "huber", "", ""]
    assert table["volume_m3"][2] == pytest.approx(float(huber(4.0, 24.0)))
    assert table["volume_m3"].isna().tolist() == [False, False, False, True, True]
    assert not table["replaced"].any()


def test_a_piece_without_the_diameters_of_the_formula_falls_back():
    table = piece_volume([4.0, 4.0], [30.0, 30.0], [24.0, np.nan], [20.0, 20.0], formula="newton")
    assert table["formula"].tolist() == ["newton", "conic_paraboloid"]
    assert table["replaced"].tolist() == [False, True]


def test_a_tip_is_a_diameter_of_zero():
    """Identity: a cone has a third of its cylinder."""
    assert cone_frustum(3.0, 30.0, 0.0) == pytest.approx(cylinder(3.0, 30.0) / 3, rel=1e-12)


def test_unknown_formula_names_those_there_are():
    with pytest.raises(UserError, match="Choose auto or one of: huber, smalian, newton"):
        piece_volume([1.0], [1.0], [1.0], [1.0], formula="truncated")
