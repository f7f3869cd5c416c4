"""Litter, duff and ground vegetation from frames.

Expected numbers are worked out by hand from the definition of the unit (1 kg/m2 = 10 t/ha) unless said otherwise.
"""

from __future__ import annotations

import numpy as np
import pandas as pd
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st

from landcarbon.errors import SettingsError
from landcarbon.findings import FINDING_COLUMNS
from landcarbon.pools.frames import FrameOptions, ground_vegetation, litter
from landcarbon.pools.parts import PART_COLUMNS

NUMBERS = [
    "frame_area_m2",
    "fresh_kg",
    "sub_fresh_g",
    "sub_dry_g",
    "dry_kg",
    "depth_cm",
    "bulk_density_g_cm3",
    "ash_share",
    "carbon_fraction",
]


def table(rows):
    """Canonical frame table from a list of dicts; missing cells as reading leaves them."""
    frame = pd.DataFrame(rows)
    count = len(frame)
    texts = {"survey": "2014", "plot": "1", "subplot": "", "frame": "", "layer": "litter", "file": "litter.csv"}
    for name, usual in texts.items():
        given_text = frame[name] if name in frame else pd.Series([usual] * count)
        frame[name] = given_text.fillna(usual).astype("str")
    for name in NUMBERS:
        frame[name] = frame[name].astype(float) if name in frame else np.nan
    frame["row_id"] = np.arange(count)
    frame["row"] = np.arange(count) + 2
    frame["used"] = frame["used"].astype(bool) if "used" in frame else True
    return frame


def density(parts, part="litter", plot="1", survey="2014"):
    hit = parts[(parts["part"] == part) & (parts["plot"] == plot) & (parts["survey"] == survey)]
    assert len(hit) == 1
    return float(hit["density_t_c_ha"].iloc[0])


def rules(findings):
    return sorted(set(findings["rule"]))


# --- mass ---------------------------------------------------------------------------------------------------------


def test_one_kilogram_per_square_metre_is_ten_tonnes_per_hectare():
    """Definition of the units: 1 kg/m2 = 10 000 kg/ha = 10 t/ha; 0.37 from IPCC 2006 Vol 4 Eq 2.19, p. 2.23."""
    parts, findings = litter(table([{"dry_kg": 0.25, "frame_area_m2": 0.25}]), FrameOptions())
    assert list(parts.columns) == PART_COLUMNS
    assert parts["mass_t_ha"].tolist() == [10.0]
    assert density(parts) == pytest.approx(3.7, rel=1e-12)
    assert findings.empty
    assert list(findings.columns) == FINDING_COLUMNS


def test_fresh_mass_times_dry_share_of_the_sub_sample():
    """1.2 kg fresh x 40 g / 100 g = 0.48 kg on 0.5 m2 = 9.6 t/ha. Ratio form: JOPP field manual, total dry mass =
    total fresh mass x dry / fresh of the sub-sample."""
    row = {"fresh_kg": 1.2, "sub_fresh_g": 100, "sub_dry_g": 40, "frame_area_m2": 0.5}
    parts, _ = litter(table([row]), FrameOptions())
    assert parts["mass_t_ha"].iloc[0] == pytest.approx(9.6, rel=1e-12)
    assert "sub-sample" in parts["method"].iloc[0]


def test_stated_dry_share_stands_in_for_a_sub_sample_that_was_not_taken():
    rows = [{"fresh_kg": 1.0, "sub_fresh_g": 100, "sub_dry_g": 50}, {"fresh_kg": 1.0}]
    parts, _ = litter(table(rows), FrameOptions(frame_area_m2=1.0, dry_share=0.3))
    assert parts["mass_t_ha"].iloc[0] == pytest.approx((0.5 + 0.3) / 2 * 10, rel=1e-12)


def test_a_weighed_dry_mass_goes_before_everything_else():
    row = {"dry_kg": 0.2, "fresh_kg": 1.0, "sub_fresh_g": 100, "sub_dry_g": 50, "depth_cm": 4, "bulk_density_g_cm3": 1}
    parts, _ = litter(table([row]), FrameOptions(frame_area_m2=1.0, dry_share=0.3))
    assert parts["mass_t_ha"].iloc[0] == pytest.approx(2.0)


def test_depth_times_bulk_density_of_the_row():
    """5 cm of 0.1 g/cm3 is 0.5 g/cm2 = 5 kg/m2 = 50 t/ha, whatever the frame."""
    parts, _ = litter(table([{"depth_cm": 5, "bulk_density_g_cm3": 0.1}]), FrameOptions())
    assert parts["mass_t_ha"].iloc[0] == pytest.approx(50.0, rel=1e-12)


def test_depth_with_the_table_of_forest_floors():
    """Published: Soil Organic Carbon Mapping Cookbook (FAO 2018), forest floor of pine: L 0.018, F+H 0.057 g/cm3.
    2 cm and 3 cm are 3.6 and 17.1 t/ha."""
    rows = [{"layer": "litter", "depth_cm": 2}, {"layer": "duff", "depth_cm": 3}]
    parts, _ = litter(table(rows), FrameOptions(forest_floor="pine"))
    assert parts.set_index("part")["mass_t_ha"].to_dict() == pytest.approx({"litter": 3.6, "duff": 17.1})
    stated = FrameOptions(forest_floor="pine", bulk_densities={"Duff": 0.1})
    parts, _ = litter(table(rows), stated)
    assert parts.set_index("part")["mass_t_ha"].to_dict() == pytest.approx({"litter": 3.6, "duff": 30.0})


def test_depth_without_any_bulk_density_is_missing_mass():
    parts, findings = litter(table([{"depth_cm": 3, "layer": "duff"}]), FrameOptions(forest_floor="hardwood"))
    assert parts.empty
    assert rules(findings) == ["mass missing"]


def test_a_depth_takes_the_area_of_its_frame():
    rows = [
        {"frame": "a", "layer": "litter", "dry_kg": 0.1, "frame_area_m2": 0.25},
        {"frame": "a", "layer": "duff", "depth_cm": 2, "bulk_density_g_cm3": 0.1},
        {"frame": "b", "layer": "litter", "dry_kg": 0.1, "frame_area_m2": 0.75},
        {"frame": "b", "layer": "duff", "depth_cm": 4, "bulk_density_g_cm3": 0.1},
    ]
    parts, findings = litter(table(rows), FrameOptions())
    assert findings.empty
    by_part = parts.set_index("part")["mass_t_ha"]
    assert by_part["litter"] == pytest.approx(2.0)  # 0.2 kg on 1 m2
    assert by_part["duff"] == pytest.approx(35.0)  # 20 t/ha on a quarter, 40 t/ha on three quarters of the area


def test_nothing_in_the_frame_counts_as_zero():
    rows = [{"plot": "1", "fresh_kg": 0}, {"plot": "2", "dry_kg": 0}, {"plot": "3", "depth_cm": 0}]
    parts, findings = litter(table(rows), FrameOptions(frame_area_m2=1.0))
    assert parts["density_t_c_ha"].tolist() == [0.0, 0.0, 0.0]
    assert findings.empty


# --- area and frames ----------------------------------------------------------------------------------------------


def test_frames_count_by_their_area():
    rows = [{"dry_kg": 0.1, "frame_area_m2": 0.25}, {"dry_kg": 0.9, "frame_area_m2": 0.75}]
    parts, _ = litter(table(rows), FrameOptions())
    assert parts["mass_t_ha"].iloc[0] == pytest.approx(10.0)  # 1 kg on 1 m2
    assert parts["samples"].tolist() == [2]


def test_area_of_the_settings_only_where_the_row_has_none():
    rows = [{"dry_kg": 0.1, "frame_area_m2": 0.5}, {"dry_kg": 0.1}]
    parts, _ = litter(table(rows), FrameOptions(frame_area_m2=0.5, carbon_fraction=0.5))
    assert density(parts) == pytest.approx(1.0)


def test_a_frame_without_a_row_of_a_layer_others_have_counts_as_zero():
    rows = [
        {"frame": "a", "layer": "litter", "dry_kg": 0.2},
        {"frame": "a", "layer": "Humus", "dry_kg": 0.6},
        {"frame": "b", "layer": "litter", "dry_kg": 0.4},
    ]
    parts, findings = litter(table(rows), FrameOptions(frame_area_m2=1.0))
    by_part = parts.set_index("part")
    assert by_part["mass_t_ha"].to_dict() == pytest.approx({"litter": 3.0, "duff": 3.0})
    assert by_part["samples"].to_dict() == {"litter": 2, "duff": 2}
    assert findings.empty


def test_a_layer_from_a_core_within_the_frame():
    """Duff from 0.01 m2 in one of two frames of 0.25 m2: 0.05 kg on 0.02 m2 of cores."""
    rows = [
        {"frame": "a", "layer": "litter", "dry_kg": 0.1, "frame_area_m2": 0.25},
        {"frame": "a", "layer": "duff", "dry_kg": 0.05, "frame_area_m2": 0.01},
        {"frame": "b", "layer": "litter", "dry_kg": 0.1, "frame_area_m2": 0.25},
    ]
    parts, _ = litter(table(rows), FrameOptions())
    assert parts.set_index("part")["mass_t_ha"].to_dict() == pytest.approx({"litter": 4.0, "duff": 25.0})


def test_a_plot_without_the_layer_was_not_measured_for_it():
    rows = [
        {"plot": "1", "layer": "litter", "dry_kg": 0.2},
        {"plot": "1", "layer": "duff", "dry_kg": 0.2},
        {"plot": "2", "layer": "litter", "dry_kg": 0.2},
    ]
    parts, findings = litter(table(rows), FrameOptions(frame_area_m2=1.0))
    assert parts.loc[parts["part"] == "duff", "plot"].tolist() == ["1"]
    assert rules(findings) == ["layer not taken"]
    assert findings["used"].all()
    assert "without a row of duff: 1" in findings["message"].iloc[0]


def test_layers_of_one_part_are_added():
    rows = [{"frame": "a", "layer": name, "dry_kg": 0.1} for name in ("leaves", "cones", "F", "H")]
    parts, _ = litter(table(rows), FrameOptions(frame_area_m2=1.0, duff=("f", "h")))
    assert parts.set_index("part")["mass_t_ha"].to_dict() == pytest.approx({"litter": 2.0, "duff": 2.0})
    assert parts["samples"].tolist() == [1, 1]


def test_rows_of_unnamed_frames_pair_up_by_layer():
    rows = [{"layer": name, "dry_kg": 0.1} for name in ("litter", "litter", "duff", "duff")]
    parts, findings = litter(table(rows), FrameOptions(frame_area_m2=1.0))
    assert parts["mass_t_ha"].tolist() == pytest.approx([1.0, 1.0])
    assert parts["samples"].tolist() == [2, 2]
    assert findings.empty


def test_a_frame_and_layer_entered_twice_is_told():
    rows = [{"frame": "a", "dry_kg": 0.1}, {"frame": "a", "dry_kg": 0.3}]
    parts, findings = litter(table(rows), FrameOptions(frame_area_m2=1.0))
    assert parts["mass_t_ha"].iloc[0] == pytest.approx(2.0)
    assert findings["rule"].tolist() == ["frame and layer repeated"]
    assert findings["row"].tolist() == [3]
    assert findings["used"].tolist() == [True]


def test_a_frame_with_a_bad_row_of_a_part_is_left_out_for_that_part_only():
    rows = [
        {"frame": "a", "layer": "leaves", "dry_kg": 0.1},
        {"frame": "a", "layer": "cones", "dry_kg": -0.1},
        {"frame": "a", "layer": "duff", "dry_kg": 0.5},
        {"frame": "b", "layer": "leaves", "dry_kg": 0.3},
        {"frame": "b", "layer": "duff", "dry_kg": 0.7},
    ]
    parts, findings = litter(table(rows), FrameOptions(frame_area_m2=1.0))
    assert parts.set_index("part")["mass_t_ha"].to_dict() == pytest.approx({"litter": 3.0, "duff": 6.0})
    assert findings.loc[~findings["used"], ["rule", "row"]].to_numpy().tolist() == [
        ["negative value", 3],
        ["frame incomplete", 2],
    ]


def test_a_lost_row_does_not_make_its_frame_a_zero():
    rows = [
        {"frame": "a", "layer": "litter", "dry_kg": 0.1},
        {"frame": "a", "layer": "duff", "dry_kg": -0.5},
        {"frame": "b", "layer": "litter", "dry_kg": 0.1},
        {"frame": "b", "layer": "duff", "dry_kg": 0.5},
    ]
    parts, _ = litter(table(rows), FrameOptions(frame_area_m2=1.0))
    assert parts.set_index("part")["mass_t_ha"].to_dict() == pytest.approx({"litter": 1.0, "duff": 5.0})
    assert parts["samples"].tolist() == [2, 1]


def test_rows_set_aside_before_stay_out_without_a_second_finding():
    rows = [{"plot": "1", "dry_kg": 0.1, "used": False}, {"plot": "2", "dry_kg": 0.1, "used": True}]
    parts, findings = litter(table(rows), FrameOptions(frame_area_m2=1.0))
    assert parts["plot"].tolist() == ["2"]
    assert findings.empty


# --- carbon fraction and ash --------------------------------------------------------------------------------------


def test_carbon_fraction_of_row_then_layer_then_settings_then_default():
    """The default 0.37 is that of IPCC 2006 Vol 4 Eq 2.19, p. 2.23."""
    rows = [
        {"plot": "1", "layer": "L", "carbon_fraction": 0.41},
        {"plot": "2", "layer": "L"},
        {"plot": "3", "layer": "F"},
    ]
    samples = table([{**row, "dry_kg": 1.0, "frame_area_m2": 1.0} for row in rows])
    options = FrameOptions(carbon_fractions={"l": 0.43}, carbon_fraction=0.45)
    assert litter(samples, options)[0]["density_t_c_ha"].tolist() == pytest.approx([4.1, 4.3, 4.5])
    assert litter(samples, FrameOptions())[0]["density_t_c_ha"].tolist() == pytest.approx([4.1, 3.7, 3.7])


def test_named_set_of_fractions_for_hardwoods():
    """Published: Chojnacky, Amacher and Gavazzi 2009, abstract: medians 0.45 of litter and 0.37 of duff."""
    samples = table([{"layer": "litter", "dry_kg": 0.1}, {"layer": "duff", "dry_kg": 0.1}])
    parts, _ = litter(samples, FrameOptions(frame_area_m2=1.0, carbon_set="hardwood 2009"))
    assert parts.set_index("part")["density_t_c_ha"].to_dict() == pytest.approx({"litter": 0.45, "duff": 0.37})


def test_ash_with_the_default_takes_the_fraction_of_organic_matter():
    """Published: Pribyl 2010, abstract: organic matter holds 50 % carbon (2.0 g/g). 1 kg less 20 % ash, half of it."""
    parts, findings = litter(table([{"dry_kg": 1.0, "frame_area_m2": 1.0, "ash_share": 0.2}]), FrameOptions())
    assert density(parts) == pytest.approx(4.0)
    assert parts["mass_t_ha"].iloc[0] == pytest.approx(8.0)
    assert "less ash" in parts["method"].iloc[0]
    assert findings.empty


@pytest.mark.parametrize(
    ("basis", "own", "expected"),
    [
        ("organic matter", np.nan, 10 * 0.8 * 0.45),
        ("dry matter", np.nan, 10 * 0.45),
        ("", np.nan, 10 * 0.8 * 0.45),
        ("organic matter", 0.4, 10 * 0.8 * 0.4),
        ("dry matter", 0.4, 10 * 0.4),
        ("", 0.4, 10 * 0.4),
    ],
)
def test_what_a_given_fraction_refers_to(basis, own, expected):
    samples = table([{"dry_kg": 1.0, "frame_area_m2": 1.0, "ash_share": 0.2, "carbon_fraction": own}])
    parts, findings = litter(samples, FrameOptions(carbon_fraction=0.45, carbon_basis=basis))
    assert density(parts) == pytest.approx(expected)
    expected_rules = {"": ["carbon basis not stated"], "dry matter": ["ash not needed"], "organic matter": []}
    assert rules(findings) == expected_rules[basis]


def test_organic_matter_without_its_ash_falls_back_to_the_default_and_says_so():
    samples = table([{"dry_kg": 1.0, "frame_area_m2": 1.0}])
    parts, findings = litter(samples, FrameOptions(carbon_fraction=0.5, carbon_basis="organic matter"))
    assert density(parts) == pytest.approx(3.7)
    assert rules(findings) == ["ash missing"]


def test_all_ash_is_no_carbon():
    parts, findings = litter(table([{"dry_kg": 1.0, "frame_area_m2": 1.0, "ash_share": 1.0}]), FrameOptions())
    assert density(parts) == 0.0
    assert findings.empty


# --- faults -------------------------------------------------------------------------------------------------------

GOOD = {"plot": "2", "dry_kg": 0.1, "frame_area_m2": 1.0}


@pytest.mark.parametrize(
    ("rule", "row"),
    [
        ("dry above fresh", {"dry_kg": 0.5, "fresh_kg": 0.4}),
        ("sub-sample dry above fresh", {"fresh_kg": 1, "sub_fresh_g": 40, "sub_dry_g": 100}),
        ("sub-sample dry above fresh", {"fresh_kg": 1, "sub_fresh_g": 0, "sub_dry_g": 10}),
        ("sub-sample dry mass zero", {"fresh_kg": 1, "sub_fresh_g": 40, "sub_dry_g": 0}),
        ("negative value", {"dry_kg": -0.1}),
        ("negative value", {"fresh_kg": -0.1, "dry_kg": 0.1}),
        ("negative value", {"depth_cm": -2, "bulk_density_g_cm3": 0.1}),
        ("negative value", {"dry_kg": 0.1, "frame_area_m2": -1}),
        ("negative value", {"dry_kg": 0.1, "ash_share": -0.1}),
        ("frame area zero", {"dry_kg": 0.1, "frame_area_m2": 0}),
        ("frame area missing", {"dry_kg": 0.1, "frame_area_m2": np.nan}),
        ("ash share impossible", {"dry_kg": 0.1, "ash_share": 31.86}),
        ("carbon fraction impossible", {"dry_kg": 0.1, "carbon_fraction": 0.61}),
        ("carbon fraction impossible", {"dry_kg": 0.1, "carbon_fraction": 45}),
        ("bulk density impossible", {"depth_cm": 3, "bulk_density_g_cm3": 57}),
        ("bulk density zero", {"depth_cm": 3, "bulk_density_g_cm3": 0}),
        ("mass missing", {}),
        ("mass missing", {"fresh_kg": 0.4}),
        ("mass missing", {"fresh_kg": 0.4, "sub_fresh_g": 0, "sub_dry_g": 0}),
    ],
)
@pytest.mark.parametrize(("step", "name"), [(litter, "litter"), (ground_vegetation, "ground_vegetation")])
def test_each_fault_sets_its_row_aside(rule, row, step, name):
    samples = table([GOOD, {"plot": "1", "frame_area_m2": 1.0, **row}])
    parts, findings = step(samples, FrameOptions())
    assert findings["rule"].tolist() == [rule]
    found = findings.iloc[0]
    assert (found["row"], found["row_id"], found["plot"], found["table"]) == (3, 1, "1", name)
    assert found["file"] == "litter.csv"
    assert not found["used"]
    assert found["severity"] == "error"
    assert "left out" in found["message"]
    assert found["remedy"]
    assert parts["plot"].tolist() == ["2"]


def test_every_row_is_used_or_set_aside_once():
    rows = [{"dry_kg": -1, "ash_share": 3, "frame_area_m2": -2}, {"dry_kg": 0.4, "fresh_kg": 0.3}, GOOD]
    samples = table(rows)
    parts, findings = litter(samples, FrameOptions(frame_area_m2=1.0))
    aside = findings.loc[~findings["used"], "row_id"]
    assert aside.is_unique
    assert len(aside) + int(parts["samples"].sum()) == len(samples)


def test_a_sub_sample_heavier_than_its_sample_is_doubtful():
    row = {"fresh_kg": 0.05, "sub_fresh_g": 80, "sub_dry_g": 40, "frame_area_m2": 1.0}
    parts, findings = litter(table([row]), FrameOptions())
    assert len(parts) == 1
    assert rules(findings) == ["sub-sample above sample"]
    assert findings["used"].all()


def test_grams_entered_as_kilograms_show():
    """Published: IPCC 2019 Refinement Vol 4 Table 2.2: no litter stock above 279.1 t C/ha."""
    samples = table([{"dry_kg": 180.0, "frame_area_m2": 0.25}])
    parts, findings = litter(samples, FrameOptions())
    assert len(parts) == 1
    assert rules(findings) == ["litter beyond any forest"]
    assert "279.1" in findings["message"].iloc[0]


@pytest.mark.parametrize(
    ("options", "text"),
    [
        (FrameOptions(frame_area_m2=0.0), "frame_area_m2"),
        (FrameOptions(frame_area_m2=float("nan")), "frame_area_m2"),
        (FrameOptions(dry_share=34.5), "at most 1"),
        (FrameOptions(carbon_fraction=37.0), "at most 0.6"),
        (FrameOptions(carbon_fractions={"duff": 0.0}), r"carbon_fractions\.duff"),
        (FrameOptions(bulk_densities={"duff": 57.0}), r"bulk_densities\.duff"),
        (FrameOptions(carbon_basis="ash"), "organic matter"),
        (FrameOptions(carbon_set="softwood"), "hardwood 2009"),
        (FrameOptions(forest_floor="limit"), "spruce"),
    ],
)
def test_options_that_cannot_be_used_are_refused(options, text):
    with pytest.raises(SettingsError, match=text):
        litter(table([GOOD]), options)


# --- ground vegetation --------------------------------------------------------------------------------------------


def test_ground_vegetation_adds_its_layers():
    """Published: 0.47 for herbaceous biomass, IPCC 2019 Refinement Vol 4 Table 5.8 (updated), p. 5.41."""
    rows = [{"frame": "a", "layer": "herb", "dry_kg": 0.2}, {"frame": "a", "layer": "shrub", "dry_kg": 0.3}]
    parts, findings = ground_vegetation(table(rows), FrameOptions(frame_area_m2=1.0, duff=("herb",)))
    assert parts[["pool", "part"]].to_numpy().tolist() == [["above_ground", "ground_vegetation"]]
    assert density(parts, "ground_vegetation") == pytest.approx(2.35)
    assert findings.empty


# --- shape --------------------------------------------------------------------------------------------------------


def test_empty_table_gives_empty_parts():
    parts, findings = litter(table([GOOD]).iloc[:0], FrameOptions())
    assert list(parts.columns) == PART_COLUMNS
    assert parts.empty
    assert findings.empty


def test_category_columns_and_any_index_give_the_same():
    rng = np.random.default_rng(3)
    rows = [{"plot": str(at % 7), "frame": str(at % 3), "dry_kg": value} for at, value in enumerate(rng.random(60))]
    samples = table(rows)
    options = FrameOptions(frame_area_m2=0.25)
    other = samples.copy()
    for name in ("survey", "plot", "subplot", "frame", "layer"):
        other[name] = other[name].astype("category")
    other.index = rng.permutation(len(other)) + 100
    pd.testing.assert_frame_equal(litter(other, options)[0], litter(samples, options)[0])


def test_missing_optional_columns_are_missing_values():
    samples = table([GOOD]).drop(columns=["fresh_kg", "ash_share", "subplot", "frame", "layer", "depth_cm"])
    assert litter(samples, FrameOptions())[0]["mass_t_ha"].tolist() == pytest.approx([1.0])


# --- properties ---------------------------------------------------------------------------------------------------

masses = st.lists(
    st.tuples(
        st.sampled_from(["1", "2", "3"]),
        st.sampled_from(["litter", "duff"]),
        st.floats(0.001, 50),
        st.floats(0.01, 2),
        st.floats(0.1, 1),
    ),
    min_size=1,
    max_size=12,
)


def drawn(values):
    """One frame per draw; litter and duff each from frames of their own are avoided by adding an empty other layer."""
    rows = []
    for at, (plot, layer, fresh, area, share) in enumerate(values):
        common = {"plot": plot, "frame": str(at), "frame_area_m2": area}
        rows.append({**common, "layer": layer, "fresh_kg": fresh, "sub_fresh_g": 100, "sub_dry_g": 100 * share})
        rows.append({**common, "layer": "duff" if layer == "litter" else "litter", "dry_kg": 0})
    return table(rows)


def halved(samples):
    half = samples.copy()
    for name in ("fresh_kg", "dry_kg", "frame_area_m2"):
        half[name] = half[name] / 2
    again = half.assign(frame=half["frame"] + "b")
    both = pd.concat([half, again], ignore_index=True)
    return both.assign(row_id=np.arange(len(both)))


def same(left, right, factor=1.0):
    pd.testing.assert_frame_equal(left.drop(columns=["density_t_c_ha", "mass_t_ha", "samples"]),
                                  right.drop(columns=["density_t_c_ha", "mass_t_ha", "samples"]))  # fmt: skip
    for name in ("density_t_c_ha", "mass_t_ha"):
        np.testing.assert_allclose(left[name], right[name] * factor, rtol=1e-9)


@settings(max_examples=25, deadline=None)
@given(values=masses)
def test_halving_every_frame_changes_nothing(values):
    """Identity: two halves of a frame are the frame."""
    samples = drawn(values)
    same(litter(halved(samples), FrameOptions())[0], litter(samples, FrameOptions())[0])


@settings(max_examples=25, deadline=None)
@given(values=masses, seed=st.integers(0, 1000))
def test_order_of_rows_changes_nothing(values, seed):
    samples = drawn(values)
    shuffled = samples.sample(frac=1, random_state=seed)
    left, right = litter(shuffled, FrameOptions())[0], litter(samples, FrameOptions())[0]
    same(left, right)
    assert left["samples"].tolist() == right["samples"].tolist()


@settings(max_examples=25, deadline=None)
@given(values=masses, factor=st.floats(0.1, 5))
def test_mass_scales_the_density_and_area_divides_it(values, factor):
    samples = drawn(values)
    plain = litter(samples, FrameOptions())[0]
    heavier = samples.assign(fresh_kg=samples["fresh_kg"] * factor)
    wider = samples.assign(frame_area_m2=samples["frame_area_m2"] * factor)
    same(litter(heavier, FrameOptions())[0], plain, factor)
    same(litter(wider, FrameOptions())[0], plain, 1 / factor)


@settings(max_examples=25, deadline=None)
@given(values=masses)
def test_a_frame_with_nothing_missing_between_surveys_changes_nothing(values):
    """Identity: the same sheet entered for two surveys gives the same stocks."""
    samples = drawn(values)
    both = pd.concat([samples, samples.assign(survey="2024")], ignore_index=True)
    parts = litter(both.assign(row_id=np.arange(len(both))), FrameOptions())[0]
    first, second = (parts[parts["survey"] == name].reset_index(drop=True) for name in ("2014", "2024"))
    pd.testing.assert_frame_equal(first.drop(columns="survey"), second.drop(columns="survey"))


# --- open data ----------------------------------------------------------------------------------------------------


def test_litter_of_a_temperate_forest(reference):
    """Independent: plain pandas on the open data (SCBI forest plot: nine frames of 25 cm x 25 cm in each of 24 cells).

    Cell 1: 713.68 g on 0.5625 m2 = 1.26876 kg/m2, with 0.37 (IPCC 2006 Vol 4 Eq 2.19) 4.6944 t C/ha.
    """
    real = pd.read_csv(reference / "real" / "scbi" / "litter_layer.csv")
    rows = [
        {"plot": str(cell), "dry_kg": dry / 1000, "fresh_kg": fresh / 1000, "frame_area_m2": area}
        for cell, dry, fresh, area in zip(
            real["hectare"], real["dry_mass_g"], real["fresh_mass_g"], real["sampled_area_m2"], strict=True
        )
    ]
    parts, findings = litter(table(rows), FrameOptions())
    assert findings.empty
    assert len(parts) == 24
    by_cell = parts.set_index(parts["plot"].astype(int)).sort_index()
    assert by_cell.loc[1, "density_t_c_ha"] == pytest.approx(4.6944, abs=5e-5)
    expected = real.set_index("hectare").eval("dry_mass_g / sampled_area_m2 / 100")
    np.testing.assert_allclose(by_cell["mass_t_ha"], expected, rtol=1e-12)


def zambezi(reference, column):
    real = pd.read_csv(reference / "real" / "zambezi_mangrove" / "litter_ground_vegetation.csv")
    samples = table(
        pd.DataFrame(
            {
                "plot": real["plot"].astype(str),
                "subplot": real["subplot"].astype(str),
                "fresh_kg": real[column],
                "ash_share": real["ash_g_per_g"] if column == "litter_fresh_kg" else np.nan,
                "frame_area_m2": 1.0,
            }
        )
    )
    return real, samples


def test_litter_of_a_mangrove(reference):
    """Independent: plain pandas on the open data (Trettin et al. 2017), dry share 0.345 of the archive, less ash.

    The fraction of 0.45 of the organic matter is a stand-in of this test, not a figure of the archive.
    """
    real, samples = zambezi(reference, "litter_fresh_kg")
    options = FrameOptions(dry_share=0.345, carbon_fraction=0.45, carbon_basis="organic matter")
    parts, findings = litter(samples, options)
    real["organic"] = real["litter_fresh_kg"] * 0.345 * (1 - real["ash_g_per_g"])
    usable = real[real["litter_fresh_kg"].notna() & real["ash_g_per_g"].notna()]
    expected = usable.groupby(usable["plot"].astype(str))["organic"].mean() * 10
    ours = parts.set_index("plot")
    shared = expected.index.difference(real.loc[real["ash_g_per_g"].isna(), "plot"].astype(str))
    np.testing.assert_allclose(ours.loc[shared, "mass_t_ha"], expected[shared], rtol=1e-12)
    np.testing.assert_allclose(ours.loc[shared, "density_t_c_ha"], expected[shared] * 0.45, rtol=1e-12)
    aside = findings[~findings["used"]]
    assert len(aside) == int(real["litter_fresh_kg"].isna().sum())
    assert set(aside["rule"]) <= {"mass missing"}
    assert int(parts["samples"].sum()) + len(aside) == len(real)


def test_ground_vegetation_of_a_mangrove(reference):
    """Independent: plain pandas on the open data; the dry share is a stand-in."""
    real, samples = zambezi(reference, "live_fresh_kg")
    parts, findings = ground_vegetation(samples, FrameOptions(dry_share=0.3))
    expected = real.groupby(real["plot"].astype(str))["live_fresh_kg"].mean().dropna() * 0.3 * 10 * 0.47
    ours = parts.set_index("plot")["density_t_c_ha"]
    assert sorted(ours.index) == sorted(expected.index)
    np.testing.assert_allclose(ours, expected[ours.index], rtol=1e-12)
    assert int((~findings["used"]).sum()) == int(real["live_fresh_kg"].isna().sum())
