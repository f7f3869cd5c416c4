"""Tallies of small stems. Expected numbers are worked out by hand: 1 kg/m2 = 10 t/ha by definition."""

from __future__ import annotations

import numpy as np
import pandas as pd
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st

from landcarbon.errors import SettingsError
from landcarbon.pools.parts import PART_COLUMNS
from landcarbon.pools.saplings import SaplingOptions, saplings


def table(rows):
    frame = pd.DataFrame(rows)
    count = len(frame)
    for name, usual in {"survey": "2014", "plot": "1", "subplot": "", "species": "Fs", "file": "small.csv"}.items():
        texts = frame[name] if name in frame else pd.Series([usual] * count)
        frame[name] = texts.fillna(usual).astype("str")
    for name in ("count", "dbh_cm", "height_m", "area_m2"):
        frame[name] = frame[name].astype(float) if name in frame else np.nan
    frame["row_id"], frame["row"], frame["used"] = np.arange(count), np.arange(count) + 2, True
    return frame


def run(rows, biomass, options=None, fraction=0.5):
    samples = table(rows)
    stem = np.broadcast_to(np.asarray(biomass, dtype=float), (len(samples),))
    return saplings(samples, stem, np.full(len(samples), fraction), options or SaplingOptions())


def test_count_times_mass_over_area():
    """12 stems of 0.5 kg on 30 m2 are 0.2 kg/m2 = 2 t/ha, half of it carbon."""
    parts, findings = run([{"count": 12, "area_m2": 30}], 0.5)
    assert list(parts.columns) == PART_COLUMNS
    row = parts.iloc[0]
    assert (row["pool"], row["part"], row["samples"]) == ("above_ground", "saplings", 12)
    assert row["mass_t_ha"] == pytest.approx(2.0, rel=1e-12)
    assert row["density_t_c_ha"] == pytest.approx(1.0, rel=1e-12)
    assert findings.empty


def test_two_tally_plots_are_total_over_total():
    """Stems 3 and 9 of 1 kg on 10 and 30 m2: 12 kg on 40 m2."""
    rows = [{"subplot": "a", "count": 3, "area_m2": 10}, {"subplot": "b", "count": 9, "area_m2": 30}]
    assert run(rows, 1.0)[0]["mass_t_ha"].iloc[0] == pytest.approx(3.0, rel=1e-12)


def test_classes_of_one_tally_plot_share_its_area():
    rows = [{"subplot": "a", "count": 3, "area_m2": 10}, {"subplot": "a", "count": 1, "area_m2": 10}]
    assert run(rows, [1.0, 5.0])[0]["mass_t_ha"].iloc[0] == pytest.approx(8.0, rel=1e-12)


def test_a_tally_without_stems_counts_its_area():
    rows = [{"subplot": "a", "count": 4}, {"subplot": "b", "count": 0, "species": ""}]
    parts, findings = run(rows, [1.0, np.nan], SaplingOptions(area_m2=10))
    assert parts["mass_t_ha"].iloc[0] == pytest.approx(2.0, rel=1e-12)
    assert findings.empty
    nothing, _ = run([{"count": 0}], np.nan, SaplingOptions(area_m2=10))
    assert nothing["density_t_c_ha"].tolist() == [0.0]
    assert nothing["samples"].tolist() == [0]


def test_without_counts_every_row_is_a_stem():
    parts, findings = run([{"dbh_cm": 2}] * 3, 2.0, SaplingOptions(area_m2=12.57))
    assert parts["mass_t_ha"].iloc[0] == pytest.approx(6 / 12.57 * 10)
    assert parts["samples"].tolist() == [3]
    assert findings.empty


def test_inner_and_outer_circle_of_one_tally():
    """Seedlings on 2 m2, saplings on 20 m2, in two tally plots: densities 1 + 0.2 and 0.5 + 0.1 kg/m2, equal weight."""
    rows = [
        {"subplot": "a", "count": 20, "area_m2": 2},
        {"subplot": "a", "count": 4, "area_m2": 20},
        {"subplot": "b", "count": 10, "area_m2": 2},
        {"subplot": "b", "count": 2, "area_m2": 20},
    ]
    parts, findings = run(rows, [0.1, 1.0, 0.1, 1.0])
    assert parts["mass_t_ha"].iloc[0] == pytest.approx(9.0, rel=1e-12)
    assert findings["rule"].tolist() == ["tally areas differ"] * 2
    assert findings["value"].tolist() == ["2 to 20"] * 2
    assert findings["used"].all()


@pytest.mark.parametrize(
    ("rule", "row", "biomass"),
    [
        ("count missing", {"count": np.nan, "area_m2": 10}, 1.0),
        ("count negative", {"count": -2, "area_m2": 10}, 1.0),
        ("tally area missing", {"count": 2}, 1.0),
        ("tally area not above zero", {"count": 2, "area_m2": 0}, 1.0),
        ("tally area not above zero", {"count": 2, "area_m2": -5}, 1.0),
        ("no biomass", {"count": 2, "area_m2": 10}, np.nan),
    ],
)
def test_each_fault_sets_its_row_aside(rule, row, biomass):
    rows = [{"plot": "2", "count": 1, "area_m2": 10}, {"plot": "1", **row}]
    parts, findings = run(rows, [1.0, biomass])
    assert parts["plot"].tolist() == ["2"]
    assert findings["rule"].tolist() == [rule]
    found = findings.iloc[0]
    assert (found["row"], found["row_id"], found["table"], found["severity"]) == (3, 1, "saplings", "error")
    assert not found["used"]
    assert "left out" in found["message"]
    assert found["remedy"]


def test_negative_biomass_counts_as_zero():
    parts, findings = run([{"count": 2, "area_m2": 10}], -0.3)
    assert parts["density_t_c_ha"].tolist() == [0.0]
    assert findings["rule"].tolist() == ["negative biomass"]
    assert findings["used"].tolist() == [True]


def test_area_of_the_settings_must_be_an_area():
    with pytest.raises(SettingsError, match="area_m2"):
        run([{"count": 1}], 1.0, SaplingOptions(area_m2=-1))


def test_marks_of_the_equations_are_carried():
    parts, _ = run([{"count": 1}], 1.0, SaplingOptions(area_m2=1, known="secondary", equations="one equation"))
    assert parts["known"].tolist() == ["secondary"]
    assert "one equation" in parts["method"].iloc[0]


def test_empty_table_gives_empty_parts():
    samples = table([{"count": 1}]).iloc[:0]
    parts, findings = saplings(samples, np.zeros(0), np.zeros(0), SaplingOptions())
    assert parts.empty
    assert list(parts.columns) == PART_COLUMNS
    assert findings.empty


tallies = st.lists(
    st.tuples(st.sampled_from("123"), st.sampled_from("ab"), st.integers(0, 40), st.floats(0.01, 5)),
    min_size=1,
    max_size=15,
)


def drawn(values, area=12.5):
    rows = [{"plot": p, "subplot": s, "count": n, "area_m2": area} for p, s, n, _ in values]
    return table(rows), np.array([mass for *_, mass in values])


@settings(max_examples=25, deadline=None)
@given(values=tallies, factor=st.floats(0.1, 10), seed=st.integers(0, 99))
def test_scaling_and_order(values, factor, seed):
    """Identity: mass per stem scales the density, area divides it, order does not matter."""
    samples, mass = drawn(values)
    fraction = np.full(len(mass), 0.47)
    plain = saplings(samples, mass, fraction, SaplingOptions())[0]
    heavy = saplings(samples, mass * factor, fraction, SaplingOptions())[0]
    wide = saplings(samples.assign(area_m2=samples["area_m2"] * factor), mass, fraction, SaplingOptions())[0]
    order = np.random.default_rng(seed).permutation(len(mass))
    mixed = saplings(samples.iloc[order], mass[order], fraction, SaplingOptions())[0]
    for other, scale in ((heavy, factor), (wide, 1 / factor), (mixed, 1.0)):
        np.testing.assert_allclose(other["density_t_c_ha"], plain["density_t_c_ha"] * scale, rtol=1e-9)
        assert other["samples"].tolist() == plain["samples"].tolist()


@settings(max_examples=25, deadline=None)
@given(values=tallies)
def test_a_class_tallied_in_two_rows_changes_nothing(values):
    samples, mass = drawn(values)
    half = samples.assign(count=samples["count"] / 2)
    twice = pd.concat([half, half], ignore_index=True)
    fraction = np.full(len(mass), 0.47)
    left = saplings(twice, np.tile(mass, 2), np.tile(fraction, 2), SaplingOptions())[0]
    right = saplings(samples, mass, fraction, SaplingOptions())[0]
    np.testing.assert_allclose(left["density_t_c_ha"], right["density_t_c_ha"], rtol=1e-9)


def test_small_trees_of_a_mangrove(reference):
    """Independent: stems per hectare by plain pandas on the open data (Trettin et al. 2017), 1 kg a stem, 12.57 m2."""
    real = pd.read_csv(reference / "real" / "zambezi_mangrove" / "trees_understory.csv", dtype={"plot": str})
    rows = real.assign(subplot=real["subplot"].astype(str), species="x")[["plot", "subplot", "dbh_cm", "height_m"]]
    parts, findings = run(rows, 1.0, SaplingOptions(area_m2=12.57), fraction=1.0)
    by_plot = real.groupby("plot").agg(stems=("dbh_cm", "size"), subplots=("subplot", "nunique"))
    expected = by_plot["stems"] / by_plot["subplots"] / 12.57 * 10
    ours = parts.set_index("plot")["density_t_c_ha"]
    np.testing.assert_allclose(ours, expected[ours.index], rtol=1e-12)
    assert int(parts["samples"].sum()) == len(real)
    assert findings.empty
