"""Equation forms: identities between them, edge cases and input kinds. No number here is a published one."""

from __future__ import annotations

import re

import numpy as np
import pytest
from hypothesis import given
from hypothesis import strategies as st

from allometry.forms import FORMS, LogTerms, Predictors, exp_log_terms, exp_saturating, hinge, polynomial

DBH = np.array([5.0, 12.5, 40.0])
HEIGHT = np.array([4.0, 11.0, 27.0])
RHO = np.array([0.4, 0.55, 0.8])


def trees() -> Predictors:
    """Three trees with every variable."""
    extra = {"stem_height_m": HEIGHT, "stump_height_m": np.full(3, 0.3), "dry_mass_fraction": np.full(3, 0.4)}
    return Predictors(DBH, HEIGHT, RHO, np.full(3, -0.1), extra)


def run(name: str, **coefficients: float) -> np.ndarray:
    """Evaluate a form on the three trees."""
    return FORMS[name].bind(coefficients)(trees())


# identity: the same equation written in two ways; the left form has other coefficients than the right
IDENTITIES = [
    ("power", {"b0": np.exp(-2.0), "b1": 2.4}, "log_linear", {"b0": -2.0, "b1": 2.4}),
    ("power_b1", {"b1": 0.1, "b2": 2.4}, "power", {"b0": 0.1, "b1": 2.4}),
    ("log10_linear", {"b0": -1.0, "b1": 2.4}, "power", {"b0": 0.1, "b1": 2.4}),
    ("log10_slope_first", {"b0": 2.4, "b1": -1.0}, "log10_linear", {"b0": -1.0, "b1": 2.4}),
    ("log_linear_factor", {"b0": -2.0, "b1": 2.4, "b2": 1.1}, "log_linear", {"b0": -2.0 + np.log(1.1), "b1": 2.4}),
    ("log_linear_offset", {"b0": -2.0, "b1": 2.4, "b2": 0.1}, "log_linear", {"b0": -1.9, "b1": 2.4}),
    ("log_quadratic", {"b0": -2.0, "b1": 2.4, "b2": 0.0}, "log_linear", {"b0": -2.0, "b1": 2.4}),
    ("square", {"b0": 0.3}, "power", {"b0": 0.3, "b1": 2.0}),
    ("linear", {"b0": 0.3}, "power", {"b0": 0.3, "b1": 1.0}),
    ("const_d2", {"b0": 0.0, "b1": 0.3}, "square", {"b0": 0.3}),
    ("quadratic", {"b0": 0.0, "b1": 0.0, "b2": 0.3}, "square", {"b0": 0.3}),
    ("hinge_square", {"b0": 0.3, "b1": 0.0}, "square", {"b0": 0.3}),
    ("hinge", {"b0": 0.3, "b1": 0.0}, "linear", {"b0": 0.3}),
    ("hinge_square_h", {"b0": 0.3, "b1": 0.0}, "d2h", {"b0": 0.3}),
    ("hinge_square_less_h", {"b0": 0.3, "b1": 0.0, "b2": 0.0}, "square", {"b0": 0.3}),
    ("square_excess", {"b0": 0.1, "b1": 0.2, "b2": 0.0}, "square", {"b0": 0.3}),
    ("const_inverse_power", {"b0": 0.0, "b1": 0.3, "b2": -2.0}, "square", {"b0": 0.3}),
    ("power_height", {"b0": 0.05, "b1": 2.0, "b2": 1.0}, "d2h", {"b0": 0.05}),
    ("power_height_b1", {"b1": 0.05, "b2": 2.0, "b3": 1.0}, "d2h", {"b0": 0.05}),
    ("power_d2h", {"b0": 0.05, "b1": 1.0}, "d2h", {"b0": 0.05}),
    ("log_d2h", {"b0": np.log(0.05), "b1": 1.0}, "d2h", {"b0": 0.05}),
    ("log10_d2h", {"b0": -1.0, "b1": 0.9}, "power_d2h", {"b0": 0.1, "b1": 0.9}),
    ("log10_d2h_slope_first", {"b0": 0.9, "b1": -1.0}, "power_d2h", {"b0": 0.1, "b1": 0.9}),
    ("log_linear_height", {"b0": -3.0, "b1": 2.0, "b2": 0.7}, "power_height", {"b0": np.exp(-3), "b1": 2.0, "b2": 0.7}),
    ("log_linear_height_squared", {"b0": -2.0, "b1": 2.4, "b2": 0.0}, "log_linear", {"b0": -2.0, "b1": 2.4}),
    (
        "log_inverse_square_height",
        {"b0": -3.0, "b1": -1.0, "b2": 0.7},
        "log_linear_height",
        {"b0": -3.0, "b1": 2.0, "b2": 0.7},
    ),
    ("log10_linear_height", {"b0": -1.0, "b1": 2.4, "b2": 0.0}, "log10_linear", {"b0": -1.0, "b1": 2.4}),
    ("d2_d2h", {"b0": 0.0, "b1": 0.05}, "d2h", {"b0": 0.05}),
    ("const_d2h", {"b0": 0.0, "b1": 0.05}, "d2h", {"b0": 0.05}),
    ("const_d2_d2h", {"b0": 0.0, "b1": 0.2, "b2": 0.05}, "d2_d2h", {"b0": 0.2, "b1": 0.05}),
    ("d2_h_d2h", {"b0": 0.2, "b1": 0.0, "b2": 0.05}, "d2_d2h", {"b0": 0.2, "b1": 0.05}),
    ("d2_less_d2h", {"b0": 0.2, "b1": -0.05}, "d2_d2h", {"b0": 0.2, "b1": 0.05}),
    ("d2_h", {"b0": 0.2, "b1": 1.5}, "const_d2_h", {"b0": 0.0, "b1": 0.2, "b2": 1.5}),
    ("const_d2_less_h", {"b0": 1.0, "b1": 0.2, "b2": 1.5}, "const_d2_h", {"b0": 1.0, "b1": 0.2, "b2": -1.5}),
    ("const_d2h_less_dh", {"b0": 0.0, "b1": 0.05, "b2": -0.1}, "d2h_dh", {"b0": 0.05, "b1": 0.1}),
    ("d2h_dh", {"b0": 0.0, "b1": 0.1}, "d_h", {"b0": 0.1}),
    ("d_less_h", {"b0": 0.3, "b1": 0.0}, "linear", {"b0": 0.3}),
    ("d2_less_h2", {"b0": 0.3, "b1": 0.0}, "square", {"b0": 0.3}),
    ("density_d2h", {"b0": 0.05}, "power_density_d2h", {"b0": 0.05, "b1": 1.0}),
    ("density_power_d2h", {"b0": 0.05, "b1": 1.0}, "density_d2h", {"b0": 0.05}),
    ("log_density_d2h", {"b0": np.log(0.05), "b1": 0.9}, "power_density_d2h", {"b0": 0.05, "b1": 0.9}),
    ("density_exponent_power", {"b0": 0.2, "b1": 1.0, "b2": 2.4}, "density_power", {"b0": 0.2, "b1": 2.4}),
    ("density_power_shifted", {"b0": 0.2, "b1": 0.4}, "density_power", {"b0": 0.2, "b1": 2.4}),
    (
        "density_log_cubic",
        {"b0": -1.0, "b1": 2.0, "b2": 0.2, "b3": -0.03},
        "log_cubic_density",
        {"b0": -1.0, "b1": 2.0, "b2": 0.2, "b3": -0.03, "b4": 1.0},
    ),
    ("stem_cylinder", {}, "density_d2h", {"b0": np.pi / 40}),
    ("log10_basal_area", {"b0": -0.5}, "square", {"b0": 10**-0.5 * np.pi / 4}),
    (
        "saturating_height",
        {"b0": -2.0, "b1": 11, "b2": 14, "b3": 0, "b4": 0},
        "saturating",
        {"b0": -2.0, "b1": 11, "b2": 14},
    ),
    (
        "stump_saturating",
        {"b0": -2.0, "b1": 11, "b4": 0.0, "c0": 14, "c2": 0, "c3": 1},
        "saturating",
        {"b0": -2.0, "b1": 11, "b2": 14},
    ),
    (
        "stump_saturating_ln_h",
        {"b0": -2.0, "b1": 11, "b2": 0.5, "b4": 0.0, "c0": 14, "c2": 0, "c3": 1},
        "saturating_height",
        {"b0": -2.0, "b1": 11, "b2": 14, "b3": 0, "b4": 0.5},
    ),
    (
        "stump_saturating_ln_h_h",
        {"b0": -2.0, "b1": 11, "b2": 0.5, "b3": 0.02, "b4": 0.1, "c0": 14, "c2": 0, "c3": 1},
        "saturating_height",
        {"b0": -1.9, "b1": 11, "b2": 14, "b3": 0.02, "b4": 0.5},
    ),
    (
        "stump_saturating_h_ratio",
        {"b0": -2.0, "b1": 11, "b2": 0.0, "b4": 0.0, "c0": 14, "c1": 10, "c2": 2, "c3": 1.25},
        "stump_saturating",
        {"b0": -2.0, "b1": 11, "b4": 0.0, "c0": 14, "c2": 2, "c3": 1.25},
    ),
    ("weibull", {"b0": 50, "b1": 0.04, "b2": 1.0}, "saturating_exponential", {"b0": 50, "b1": 0.04}),
    ("shifted_power", {"b0": 0.1, "b1": 0.0, "b2": 0.0, "b3": 1.0}, "const_h_h2", {"b0": 0.0, "b1": 0.1, "b2": 0.0}),
    ("linear_stem", {"b0": 0.0, "b1": 0.1}, "const_h_h2", {"b0": 0.0, "b1": 0.1, "b2": 0.0}),
    ("log_stem", {"b0": np.log(0.1), "b1": 1.0}, "linear_stem", {"b0": 0.0, "b1": 0.1}),
    ("logistic_h", {"b0": 2.0, "b1": 0.0, "b2": 0.3}, "const_h_h2", {"b0": 2.0, "b1": 0.0, "b2": 0.0}),
    ("const_ln_h2", {"b0": 2.0, "b1": 0.0}, "const_h_h2", {"b0": 2.0, "b1": 0.0, "b2": 0.0}),
    ("const_root_ln_h", {"b0": 2.0, "b1": 0.0}, "const_h_h2", {"b0": 2.0, "b1": 0.0, "b2": 0.0}),
    (
        "log_quadratic_stress",
        {"b0": -2, "b1": 0, "b2": 0, "b3": 2.6, "b4": -0.03},
        "log_quadratic",
        {"b0": -2, "b1": 2.6, "b2": -0.03},
    ),
    ("height_stress", {"b0": 0.9, "b1": 0.8, "b2": -0.03}, "log_quadratic", {"b0": 1.0, "b1": 0.8, "b2": -0.03}),
    ("log_inverse", {"b0": -1.5, "b1": 0.0}, "log_linear", {"b0": -1.5, "b1": 0.0}),
    ("fourth_root", {"b0": 1.0}, "d2h", {"b0": 0.4}),
    ("exp_stem", {"b0": -1.5, "b1": 0.0}, "log_linear", {"b0": -1.5, "b1": 0.0}),
    ("stump_diameter_inside", {"b1": 1.0, "b2": 0.1, "c0": 4.5}, "stump_diameter_outside", {"b1": 0.1, "c0": 4.5}),
]


@pytest.mark.parametrize(("left", "a", "right", "b"), IDENTITIES, ids=[f"{i[0]}={i[2]}" for i in IDENTITIES])
def test_two_ways_of_writing_one_equation_agree(left, a, right, b):
    np.testing.assert_allclose(run(left, **a), run(right, **b), rtol=1e-12)


def test_every_form_with_coefficients_stands_in_an_identity():
    tried = {name for row in IDENTITIES for name in (row[0], row[2])}
    assert {name for name, form in FORMS.items() if not form.composed} - tried == {"stress_index"}


def test_stump_height_of_one_foot_is_one_foot():
    # identity: at h = 1 ft the printed ratio (4.5 - h)/(h + 1) is 1.75
    p = Predictors(np.array([20.0]), extra={"stump_height_m": np.array([0.3048])})
    assert FORMS["stump_diameter_outside"].bind({"b1": 0.1, "c0": 4.5})(p)[0] == pytest.approx(20.0 * 1.175)


def test_stress_index_takes_three_climate_variables():
    # identity: one thousand of each with unit coefficients is their sum
    climate = {"temperature_seasonality": 1000.0, "water_deficit_mm_yr": -500.0, "precipitation_seasonality": 20.0}
    p = Predictors(np.full(1, np.nan), extra={k: np.array([v]) for k, v in climate.items()})
    assert FORMS["stress_index"].bind({"b0": 1.0, "b1": 1.0, "b2": 1.0})(p)[0] == pytest.approx(0.52)


@pytest.mark.parametrize("form", FORMS.values(), ids=list(FORMS))
def test_formula_names_every_coefficient_and_no_other(form):
    assert set(re.findall(r"\b[bc]\d\b", form.formula)) == set(form.coefficients)


@pytest.mark.parametrize("form", [f for f in FORMS.values() if f.inputs == ("D",)], ids=lambda f: f.name)
@pytest.mark.parametrize("dbh", [np.nan, 0.0, -3.0])
def test_impossible_diameter_gives_nan_and_spares_the_neighbour(form, dbh):
    values = form.bind(dict.fromkeys(form.coefficients, 0.5))(Predictors(np.array([dbh, 20.0])))
    assert np.isnan(values[0])
    assert np.isfinite(values[1])


@pytest.mark.parametrize("form", [f for f in FORMS.values() if "height_m" in f.inputs], ids=lambda f: f.name)
def test_missing_height_gives_nan(form):
    p = Predictors(np.array([20.0, 20.0, 20.0]), np.array([np.nan, 0.0, 15.0]), np.full(3, 0.5))
    values = form.bind(dict.fromkeys(form.coefficients, 0.5))(p)
    assert np.isnan(values[:2]).all()
    assert np.isfinite(values[2])


def test_general_functions_do_not_change_their_inputs():
    p = trees()
    before = p.diameter.copy(), p.ln_d.copy()
    exp_log_terms(p, terms=LogTerms(1.0, ln_d=2.0, ln_h=1.0, ln_rho=1.0))
    exp_saturating(p, constant=1.0, slope=2.0, half=3.0, ln_h=1.0)
    polynomial(p, terms=("1", "D^2*H"), factors=(1.0, 2.0))
    hinge(p, factor=1.0, threshold=2.0, exponent=2)
    np.testing.assert_array_equal(p.diameter, before[0])
    np.testing.assert_array_equal(p.ln_d, before[1])


def test_coefficients_are_keyword_only_and_exact():
    with pytest.raises(TypeError, match="b1"):
        FORMS["power"].bind({"b0": 1.0})
    with pytest.raises(TypeError, match="composed of other rows"):
        FORMS["sum"].bind({})


@given(st.floats(0.001, 2.0), st.floats(0.5, 3.0), st.floats(1.0, 150.0), st.floats(1.001, 3.0))
def test_power_is_monotone(b0, b1, dbh, step):
    values = FORMS["power"].bind({"b0": b0, "b1": b1})(Predictors(np.array([dbh, dbh * step])))
    assert values[1] > values[0]
