"""Equivalent soil mass.

No publication's step-by-step figures could be read, so this rests on invariants (what must hold whatever the data), on
scipy's interpolators as an independent reference, and on one published plausibility value.
"""

from __future__ import annotations

import numpy as np
import pandas as pd
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st
from scipy.interpolate import CubicSpline, PchipInterpolator

from landcarbon.pools.soil import SoilOptions, profile_masses, smallest_profile_mass, soil
from landcarbon.pools.soil_mass import carbon_at_mass, monotone_cubic_at, natural_spline_at, straight_line_at

FINE = "fine per whole volume"


def core(*layers, plot="P1", survey="2014", name="a"):
    """Soil table of one core; each layer is (thickness, bulk density, carbon)."""
    thickness, bulk, carbon = np.array(layers, dtype=float).T
    bottom = np.cumsum(thickness)
    count = len(layers)
    return pd.DataFrame(
        {
            "row_id": np.arange(count), "file": "soil.csv", "row": np.arange(count) + 2, "survey": survey, "plot": plot,
            "subplot": "", "core": name, "top_cm": bottom - thickness, "bottom_cm": bottom, "bulk_density_g_cm3": bulk,
            "organic_carbon_share": carbon, "cores": 1.0, "used": True,
        }
    )  # fmt: skip


def together(*frames):
    frame = pd.concat(frames, ignore_index=True)
    return frame.assign(row_id=np.arange(len(frame)), row=np.arange(len(frame)) + 2)


def by_mass(frame, mass):
    rows, findings = soil(frame, SoilOptions(FINE, mass_t_ha=mass))
    return rows, findings


def carbon(frame, mass):
    rows, _ = by_mass(frame, mass)
    return rows["density_t_c_ha"].to_numpy()


def by_depth(frame, depth):
    rows, _ = soil(frame, SoilOptions(FINE, depth_cm=depth))
    return rows["density_t_c_ha"].to_numpy()


thickness = st.floats(2, 40)
bulk = st.floats(0.5, 1.9)
share = st.floats(0.001, 0.15)
layers3 = st.lists(st.tuples(thickness, bulk, share), min_size=3, max_size=8)


def knots(drawn):
    mass = np.array([100 * t * b for t, b, _ in drawn])
    amount = mass * np.array([c for _, _, c in drawn])
    return np.concatenate([[0], np.cumsum(mass)]), np.concatenate([[0], np.cumsum(amount)])


# --- against scipy --------------------------------------------------------------------------------------------------


@settings(max_examples=100, deadline=None)
@given(drawn=layers3, where=st.floats(0.001, 1.0))
def test_natural_spline_agrees_with_scipy(drawn, where):
    """Independent: scipy.interpolate.CubicSpline with natural ends; the derivative of it for the monotone check."""
    x, y = knots(drawn)
    at = x[-1] * where
    value, rising = natural_spline_at(x[None], y[None], np.array([at]))
    reference = CubicSpline(x, y, bc_type="natural")
    assert value[0] == pytest.approx(float(reference(at)), rel=1e-9, abs=1e-9 * y[-1])
    segment = min(int(np.searchsorted(x, at, side="right")), len(x) - 1)
    lowest = reference(np.linspace(0, x[segment], 4001), 1).min()
    mean = y[-1] / x[-1]
    if abs(lowest) > 1e-4 * mean:  # a sampled minimum decides only away from zero
        assert bool(rising[0]) == bool(lowest > 0)


@settings(max_examples=100, deadline=None)
@given(drawn=layers3, where=st.floats(0.001, 1.0))
def test_monotone_cubic_agrees_with_scipy(drawn, where):
    """Independent: scipy.interpolate.PchipInterpolator."""
    x, y = knots(drawn)
    at = x[-1] * where
    value = monotone_cubic_at(x[None], y[None], np.array([at]))[0]
    assert value == pytest.approx(float(PchipInterpolator(x, y)(at)), rel=1e-9, abs=1e-9 * y[-1])


@pytest.mark.parametrize("rises", [[1, 0, 0, 1], [0, 0, 1, 1], [1, 1, 0, 0], [5, 0.01, 0.01, 5]])
def test_monotone_cubic_with_flat_stretches(rises):
    """Independent: scipy.interpolate.PchipInterpolator, where slopes of zero need care (layers without carbon)."""
    x = np.array([0.0, 1.0, 3.0, 3.5, 6.0])
    y = np.concatenate([[0.0], np.cumsum(rises)])
    reference = PchipInterpolator(x, y)
    for at in np.linspace(0, 6, 25):
        assert monotone_cubic_at(x[None], y[None], np.array([at]))[0] == pytest.approx(float(reference(at)), abs=1e-12)


@settings(max_examples=50, deadline=None)
@given(drawn=st.lists(st.tuples(thickness, bulk, share), min_size=1, max_size=2), where=st.floats(0.001, 1.0))
def test_straight_lines_agree_with_numpy(drawn, where):
    """Independent: numpy.interp."""
    x, y = knots(drawn)
    at = np.array([x[-1] * where])
    assert straight_line_at(x[None], y[None], at)[0] == pytest.approx(np.interp(at, x, y)[0], rel=1e-12)


def test_cores_of_unlike_depth_are_each_their_own():
    """Independent: scipy, core by core, for cores of 1 to 7 layers solved in one call."""
    rng = np.random.default_rng(3)
    drawn = []
    for n in [3, 1, 7, 2, 5, 3, 4, 6, 1]:
        falling = np.sort(rng.uniform(0.01, 0.04, n))[::-1]
        drawn.append(list(zip(rng.uniform(4, 9, n) * 8 / n, rng.uniform(1.0, 1.5, n), falling, strict=True)))
    frame = together(*[core(*layers, plot=f"P{i}") for i, layers in enumerate(drawn)])
    rows, _ = by_mass(frame, 3000.0)
    found = rows.set_index("plot")["density_t_c_ha"]
    for i, layers in enumerate(drawn):
        x, y = knots(layers)
        if x[-1] < 3000:
            assert f"P{i}" not in found
            continue
        method = rows.set_index("plot").loc[f"P{i}", "method"]
        if len(layers) < 3:
            expected, name = np.interp(3000, x, y), "straight lines"
        elif "monotone" in method:
            expected, name = PchipInterpolator(x, y)(3000), "monotone cubic"
        else:
            expected, name = CubicSpline(x, y, bc_type="natural")(3000), "cubic spline"
        assert found[f"P{i}"] == pytest.approx(float(expected), rel=1e-9)
        assert method == f"equivalent soil mass 3000 t/ha, {name}"
    assert len(found) >= 5


# --- invariants -----------------------------------------------------------------------------------------------------


@settings(max_examples=60, deadline=None)
@given(drawn=layers3, density=bulk, upto=st.integers(1, 8))
def test_equal_density_equals_fixed_depth_at_a_layer_limit(drawn, density, upto):
    """With one bulk density, mass is depth; at the limit of a layer no interpolation is left to differ."""
    frame = core(*[(t, density, c) for t, _, c in drawn])
    depth = float(frame["bottom_cm"].iloc[min(upto, len(drawn)) - 1])
    assert carbon(frame, 100 * density * depth) == pytest.approx(by_depth(frame, depth), rel=1e-9)


@settings(max_examples=60, deadline=None)
@given(density=bulk, c=share, upto=st.floats(0.05, 1.0), count=st.integers(1, 6))
def test_uniform_soil_equals_fixed_depth_everywhere(density, c, upto, count):
    frame = core(*[(10.0, density, c)] * count)
    depth = 10.0 * count * upto
    assert carbon(frame, 100 * density * depth) == pytest.approx([100 * density * depth * c], rel=1e-9)


@settings(max_examples=60, deadline=None)
@given(
    drawn=st.lists(st.tuples(thickness, bulk, share), min_size=1, max_size=1),
    cut=st.floats(0.1, 0.9),
    where=st.floats(0.01, 1.0),
)
def test_cutting_a_layer_leaves_straight_lines_alone(drawn, cut, where):
    (t, b, c), mass = drawn[0], 100 * drawn[0][0] * drawn[0][1] * where
    two = core((t * cut, b, c), (t * (1 - cut), b, c))
    assert carbon(two, mass) == pytest.approx(carbon(core(*drawn), mass), rel=1e-9)


@settings(max_examples=60, deadline=None)
@given(drawn=layers3, where=st.floats(0.05, 1.0), factor=st.floats(0.3, 1.0))
def test_scaling_density_and_reference_scales_carbon(drawn, where, factor):
    frame = core(*drawn)
    mass = knots(drawn)[0][-1] * where
    scaled = frame.assign(bulk_density_g_cm3=frame["bulk_density_g_cm3"] * factor)
    assert carbon(scaled, mass * factor) == pytest.approx(carbon(frame, mass) * factor, rel=1e-7)


@settings(max_examples=60, deadline=None)
@given(
    drawn=st.lists(st.tuples(thickness, st.floats(0.5, 1.3), share), min_size=1, max_size=8),
    squeeze=st.lists(st.floats(1.05, 1.4), min_size=8, max_size=8),
    where=st.floats(0.05, 0.95),
)
def test_compaction_moves_fixed_depth_and_not_equivalent_mass(drawn, squeeze, where):
    """Each layer is pressed to 1/s of its thickness at s times its density: the same soil and carbon, less depth."""
    before = core(*drawn)
    pressed = core(*[(t / s, b * s, c) for (t, b, c), s in zip(drawn, squeeze, strict=False)])
    mass = knots(drawn)[0][-1] * where
    assert carbon(pressed, mass) == pytest.approx(carbon(before, mass), rel=1e-7)
    depth = float(pressed["bottom_cm"].max()) * where
    assert by_depth(pressed, depth)[0] > by_depth(before, depth)[0]


@settings(max_examples=80, deadline=None)
@given(drawn=layers3, a=st.floats(0.01, 1.0), b=st.floats(0.01, 1.0))
def test_more_soil_never_holds_less_carbon_within_one_curve(drawn, a, b):
    frame = core(*drawn)
    low, high = sorted((a, b))
    total = knots(drawn)[0][-1]
    (first, _), (second, _) = by_mass(frame, total * low), by_mass(frame, total * high)
    if first["method"][0].split(",")[1] == second["method"][0].split(",")[1]:
        assert second["density_t_c_ha"][0] >= first["density_t_c_ha"][0] * (1 - 1e-9)
    # Whichever curve: never outside what the layer that holds the reference allows.
    x, y = knots(drawn)
    segment = min(int(np.searchsorted(x, total * low, side="right")), len(x) - 1)
    assert y[segment - 1] * (1 - 1e-9) <= first["density_t_c_ha"][0] <= y[segment] * (1 + 1e-9)


def test_pasture_of_canterbury():
    """Published: Fraser et al. 2004 (SuperSoil), abstract: 3500 t soil/ha hold 84 t C/ha (25 cm of pasture)."""
    frame = core((10, 1.4, 0.024), (10, 1.4, 0.024), (10, 1.4, 0.024))
    rows, _ = by_mass(frame, 3500)
    assert rows["density_t_c_ha"].tolist() == pytest.approx([84.0], abs=0.05)
    assert rows["mass_t_ha"].tolist() == [3500.0]


def test_tillage_contrast_shrinks():
    """Direction published: Meurer et al. 2018: fixed depth overstates the gain under no-till, whose soil is denser."""
    ploughed = core((10, 1.20, 0.015), (10, 1.20, 0.015), (10, 1.35, 0.012), (10, 1.45, 0.006))
    untilled = core((10, 1.35, 0.018), (10, 1.40, 0.013), (10, 1.45, 0.010), (10, 1.45, 0.006))
    fixed = by_depth(untilled, 30)[0] - by_depth(ploughed, 30)[0]
    equal = carbon(untilled, 3750)[0] - carbon(ploughed, 3750)[0]
    assert 0 < equal < fixed


# --- what is said ---------------------------------------------------------------------------------------------------


def test_overshooting_spline_gives_way_and_says_so():
    """A carbon-rich layer over layers almost without any: the spline through it falls (scipy agrees), the other not."""
    drawn = [(5, 1.0, 0.14), (25, 1.4, 0.0005), (30, 1.4, 0.0005)]
    x, y = knots(drawn)
    assert CubicSpline(x, y, bc_type="natural")(np.linspace(0, x[2], 500), 1).min() < 0
    rows, findings = by_mass(core(*drawn), 2000)
    assert rows["method"].tolist() == ["equivalent soil mass 2000 t/ha, monotone cubic"]
    assert rows["density_t_c_ha"].tolist() == pytest.approx([float(PchipInterpolator(x, y)(2000))])
    assert findings["rule"].tolist() == ["not monotone"]
    assert findings["message"][0].endswith("is used instead: 1.")


def test_curves_of_a_plot_are_named_together():
    frame = together(core((20, 1.2, 0.02), (20, 1.2, 0.01)), core(*[(10, 1.2, 0.02)] * 4, name="b"))
    rows, _ = by_mass(frame, 3000)
    assert rows["method"].tolist() == ["equivalent soil mass 3000 t/ha, cubic spline, straight lines"]
    assert rows["samples"].tolist() == [2]


def test_nothing_is_extrapolated():
    frame = together(core((10, 1.0, 0.02), (10, 1.0, 0.01)), core(*[(10, 1.2, 0.02)] * 4, plot="P2"))
    rows, findings = by_mass(frame, 3000)
    assert rows["plot"].tolist() == ["P2"]
    assert findings["rule"].tolist() == ["core too light", "core set aside"]
    assert findings["row"].tolist() == [3, 2]
    assert not findings["used"].any()
    assert "reference mass of 3000 t/ha" in findings["message"][0]


def test_reference_equal_to_the_core_is_reached():
    frame = core(*[(10, 1.1, 0.02)] * 3)
    rows, findings = by_mass(frame, smallest_profile_mass(frame, SoilOptions(FINE)))
    assert rows["density_t_c_ha"].tolist() == pytest.approx([66.0])
    assert findings.empty


def test_gap_below_the_reference_mass_costs_only_what_lies_below_it():
    frame = core((20, 1.0, 0.02), (20, 1.0, 0.01), (5, 1.0, 0.01))
    frame.loc[2, ["top_cm", "bottom_cm"]] = [50.0, 60.0]
    rows, findings = by_mass(frame, 3000)
    assert rows["density_t_c_ha"].tolist() == pytest.approx([50.0])
    assert (findings["rule"].tolist(), findings["used"].tolist()) == (["layer below gap"], [False])
    rows, findings = by_mass(frame, 4500)
    assert rows.empty
    assert findings["rule"].tolist() == ["gap in core", "core set aside", "core set aside"]


def test_overlap_sets_the_core_aside():
    frame = core((20, 1.0, 0.02), (20, 1.0, 0.01))
    frame.loc[1, "top_cm"] = 15.0
    rows, findings = by_mass(frame, 3000)
    assert rows.empty
    assert findings["rule"].tolist() == ["layers overlap", "core set aside"]


def test_a_layer_of_stones_only_has_no_mass():
    frame = core((10, 1.0, 0.03), (10, 1.0, 0.02), (10, 1.0, 0.01), (10, 1.0, 0.01))
    frame = frame.assign(coarse_share=[0.0, 1.0, 0.0, 0.0])
    rows, _ = soil(frame, SoilOptions("fine per fine volume", coarse="volume", mass_t_ha=2000))
    assert rows["density_t_c_ha"].tolist() == pytest.approx([40.0])


def test_masses_to_choose_from():
    """By hand: 100 x (10 x 1.0 + 10 x 1.2) = 2200. A core counts down to its first hole; one without a top does not."""
    short = core((10, 1.0, 0.02), (10, 1.2, 0.01))
    holed = core((10, 1.0, 0.02), (30, 1.2, 0.01), plot="P2")
    holed.loc[1, "top_cm"] = 15.0
    topless = core((10, 1.0, 0.02), plot="P3").assign(top_cm=5.0)
    frame = together(short, holed, topless, core((40, 1.5, 0.02), plot="P4"))
    masses = profile_masses(frame, SoilOptions(FINE))
    assert masses["plot"].tolist() == ["P2", "P1", "P4"]
    assert masses["mass_t_ha"].tolist() == pytest.approx([1000.0, 2200.0, 6000.0])
    assert masses["depth_cm"].tolist() == pytest.approx([10.0, 20.0, 40.0])
    assert smallest_profile_mass(frame, SoilOptions(FINE)) == pytest.approx(1000.0)
    assert np.isnan(smallest_profile_mass(frame.iloc[:0], SoilOptions(FINE)))


def test_no_core_at_all():
    value, curve = carbon_at_mass(np.array([], int), np.array([]), np.array([]), 1000.0, 2)
    assert np.isnan(value).all()
    assert curve.tolist() == [0, 0]
