"""Down wood on lines and on areas."""

from __future__ import annotations

import csv
import tomllib
from importlib import resources

import numpy as np
import pandas as pd
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st
from wood_frames import SPECIES, UNIT_DENSITY, inputs_of, published, rules, table

from landcarbon.errors import UserError
from landcarbon.factors.dead_wood import (
    dead_wood_table,
    decay_classes,
    density_ratios,
    fresh_density,
    rule,
    structure_left,
)
from landcarbon.findings import FINDING_COLUMNS
from landcarbon.pools.down_wood import DownWoodOptions, SizeClass, down_wood, down_wood_volume, logs
from landcarbon.pools.parts import PART_COLUMNS

UNIT = DownWoodOptions(class_density=UNIT_DENSITY)
FACTORS = resources.files("landcarbon.factors")


def measure(pieces, lines, options=UNIT):
    """One plot's parts as a dict, and the findings."""
    parts, findings = down_wood(table("pieces", *pieces), table("lines", *lines), options, SPECIES)
    assert list(parts.columns) == PART_COLUMNS
    assert list(findings.columns) == FINDING_COLUMNS
    return parts, findings


def mass(pieces, lines, options=UNIT, part="down_coarse"):
    parts, findings = measure(pieces, lines, options)
    assert findings.empty, findings[["rule", "message"]]
    return parts.set_index("part").loc[part, "mass_t_ha"]


# ---------------------------------------------------------------- published


@pytest.mark.parametrize("case", published("line intersect")[1:], ids=lambda case: case["case_id"])
def test_mass_per_intercept_as_printed(case):
    """Published: Delcourt and Veraverbeke 2022, Biogeosciences 19, eq. 8 p. 4503, Table 4 p. 4507 (Larix cajanderi)."""
    given_ = inputs_of(case)
    tally = SizeClass(
        line_m=1.0,
        mean_diameter_cm=given_["mean squared diameter"] ** 0.5,
        density_g_cm3=given_["G"],
        tilt_factor=given_["sec(tilt)"],
    )
    options = DownWoodOptions(classes={"II": tally})
    found = mass([{"size_class": "II", "count": 1.0}], [{}], options, "down_fine")
    assert found == pytest.approx(float(case["expected"]), abs=float(case["tolerance"]))


def test_carbon_fraction_by_group():
    """Published: Harmon et al. 2013, abstract: 0.506 gymnosperms, 0.478 angiosperms, 0.493 all; Martin et al. 2021
    (abstract): 0.485 for the world."""
    fractions = {}
    for wood in ("softwood", "hardwood", ""):
        parts, _ = measure([{"wood": wood}], [{}])
        fractions[wood] = (parts["density_t_c_ha"] / parts["mass_t_ha"]).iloc[0]
    assert fractions == pytest.approx({"softwood": 0.506, "hardwood": 0.478, "": 0.493})
    parts, _ = measure([{}], [{}], DownWoodOptions(carbon="world"))
    assert (parts["density_t_c_ha"] / parts["mass_t_ha"]).iloc[0] == pytest.approx(0.485)


def test_one_piece_of_20_cm_on_100_m_is_4_935_m3_per_ha():
    """Identity: pi^2/8 x 400/100; the unit check of the formula."""
    assert mass([{}], [{}]) == pytest.approx(4.935, abs=5e-4)
    volume = down_wood_volume(table("pieces", {}), table("lines", {}), UNIT, SPECIES)
    assert volume["volume_m3_ha"].tolist() == pytest.approx([4.935], abs=5e-4)


# ---------------------------------------------------------------- factors


def test_density_ratios_agree_with_the_fact_sheet(reference):
    """Independent: the transcription of the national reference table in the reference folder, all 330 values."""
    sheet = pd.read_csv(reference / "facts" / "field" / "constants_deadwood.csv", dtype=str)
    sheet = sheet[sheet["set"].str.endswith("dead density reduction factor") & sheet["group"].str.contains("code")]
    ours = dead_wood_table("density")
    assert len(ours) == len(sheet) == 330
    codes = {"299": "softwood", "998": "hardwood", "999": "unknown"}
    code = sheet["group"].str.extract(r"code (\d+)")[0]
    taxon = code.map(codes).fillna(sheet["group"].str.replace(r" \(species.*", "", regex=True))
    theirs = zip(
        sheet["set"].str.split().str[0], taxon, sheet["decay_class"], sheet["value"].astype(float), strict=True
    )
    mine = zip(ours["position"], ours["taxon"], ours["decay_class"], ours["value"], strict=True)
    assert sorted(theirs) == sorted(mine)


def test_values_that_rise_with_decay_stay_as_printed():
    """Published: national species reference table; balsam fir standing 1.04, 1.15, 1.101, ponderosa pine down 0.339,
    0.495 (classes 4, 5), black oak down 0.648, 0.809 (classes 2, 3)."""
    names = pd.Series(["Abies balsamea", "Pinus ponderosa", "Quercus velutina"])
    groups = np.array(["softwood", "softwood", "hardwood"], dtype=object)
    down, own = density_ratios("down", names, groups)
    standing, _ = density_ratios("standing", names, groups)
    assert own.all()
    assert standing[0, :3].tolist() == [1.04, 1.15, 1.101]
    assert down[1, 3:].tolist() == [0.339, 0.495]
    assert down[2, 1:3].tolist() == [0.648, 0.809]


def test_the_two_sets_are_kept_apart():
    """Down and standing differ; structural shares belong to the standing set alone."""
    names, groups = pd.Series(["Abies balsamea", ""]), np.array(["softwood", "unknown"], dtype=object)
    down, standing = (density_ratios(position, names, groups)[0] for position in ("down", "standing"))
    assert (down != standing).any(axis=1).all()
    with pytest.raises(UserError, match="belong to the density ratios of standing trees"):
        structure_left("down", "bark")
    with pytest.raises(UserError, match="Choose one of: down, standing"):
        density_ratios("leaning", names, groups)


def test_down_pieces_take_the_down_set():
    """Published: Abies balsamea class 2, down 1.0 and standing 1.15; class 5, down 0.294 and standing 0.71."""
    options = DownWoodOptions()
    sound = mass([{"species": "AB", "decay_class": "2", "wood": ""}], [{}], options)
    rotten = mass([{"species": "AB", "decay_class": "5", "wood": ""}], [{}], options)
    assert sound == pytest.approx(np.pi**2 / 8 * 400 / 100 * 0.33)
    assert rotten / sound == pytest.approx(0.294)


def test_species_before_wood_type_before_default_group():
    options = DownWoodOptions(group="hardwood")
    square = np.pi**2 / 8 * 400 / 100
    cases = [
        ({"species": "BU", "wood": ""}, 0.585 * 0.78),  # beech has no ratios of its own: hardwood, class 2
        ({"species": "", "wood": "softwood"}, fresh_density("softwood", "temperate and boreal") * 0.84),
        ({"species": "", "wood": ""}, fresh_density("hardwood", "temperate and boreal") * 0.78),
    ]
    for row, density in cases:
        assert mass([{**row, "decay_class": "2"}], [{}], options) == pytest.approx(square * density)


def test_group_densities_are_the_means_of_the_printed_tables(reference):
    """Independent: IPCC 2006 Vol 4 Tables 4.13 and 4.14 as transcribed in the reference folder."""
    boreal = pd.read_csv(reference / "facts" / "ipcc" / "table_4_14_wood_density_temperate_boreal.csv")
    soft = boreal["taxon"].str.split().str[0].isin(["Abies", "Larix", "Picea", "Pinus", "Pseudotsuga"])
    expected = [boreal["value"][soft].mean(), boreal["value"][~soft].mean(), boreal["value"].mean()]
    found = [fresh_density(group, "temperate and boreal") for group in ("softwood", "hardwood", "unknown")]
    assert found == pytest.approx(expected, abs=5e-4)
    tropics = pd.read_csv(reference / "facts" / "ipcc" / "table_4_13_wood_density_tropical.csv")
    value = tropics["value"].fillna((tropics["low"] + tropics["high"]) / 2)
    assert fresh_density("unknown", "tropical and subtropical") == pytest.approx(value.mean(), abs=5e-4)


@pytest.mark.parametrize(
    "name",
    ["density", "structure", "volume", "fresh_density", "status", "carbon", "rules", "volume_choice"],
)
def test_every_factor_has_source_and_known_mark(name):
    sources = tomllib.loads(FACTORS.joinpath("sources.toml").read_text(encoding="utf-8"))
    with FACTORS.joinpath(f"dead_wood_{name}.csv").open(encoding="utf-8", newline="") as handle:
        rows = list(csv.DictReader(handle))
    assert rows
    assert {row["source"] for row in rows} <= set(sources)
    assert {row["known"] for row in rows} <= {"read", "secondary", "memory"}
    assert all(row["where"] and row["unit"] for row in rows)


# ---------------------------------------------------------------- properties


DIAMETERS = st.lists(st.floats(7.6, 90.0), min_size=1, max_size=8)


@settings(max_examples=25, deadline=None)
@given(DIAMETERS, st.randoms())
def test_the_order_of_pieces_and_the_bearing_of_lines_do_not_matter(diameters, random):
    pieces = [{"diameter_cm": d, "decay_class": str(1 + i % 5)} for i, d in enumerate(diameters)]
    lines = [{}]
    before = mass(pieces, lines, DownWoodOptions())
    random.shuffle(pieces)
    assert mass(pieces, lines, DownWoodOptions()) == pytest.approx(before, rel=1e-12)


@settings(max_examples=25, deadline=None)
@given(DIAMETERS)
def test_twice_the_line_with_the_same_pieces_is_half_the_wood(diameters):
    pieces = [{"diameter_cm": d} for d in diameters]
    assert mass(pieces, [{"length_m": 200.0}]) == pytest.approx(mass(pieces, [{"length_m": 100.0}]) / 2, rel=1e-12)


@settings(max_examples=25, deadline=None)
@given(DIAMETERS, st.integers(0, 8), st.floats(1.0, 99.0))
def test_cutting_a_line_in_two_changes_nothing(diameters, split, at):
    pieces = [{"diameter_cm": d} for d in diameters]
    cut = [{**piece, "line": "1" if i < split else "2"} for i, piece in enumerate(pieces)]
    whole = mass(pieces, [{}])
    assert mass(cut, [{"length_m": at}, {"line": "2", "length_m": 100.0 - at}]) == pytest.approx(whole, rel=1e-12)


def test_a_tally_equals_its_pieces_measured_one_by_one():
    """Identity: with the quadratic mean diameter a tally loses nothing."""
    diameters = [0.3, 0.5, 1.1, 2.0]
    mean = float(np.sqrt(np.mean(np.square(diameters))))
    fine = DownWoodOptions(classes={"fine": SizeClass(mean_diameter_cm=mean, density_g_cm3=0.5)})
    each = DownWoodOptions(classes={"fine": SizeClass(density_g_cm3=0.5)})
    tallied = mass([{"size_class": "fine", "count": 4.0, "diameter_cm": np.nan}], [{}], fine, "down_fine")
    measured = mass([{"size_class": "fine", "diameter_cm": d} for d in diameters], [{}], each, "down_coarse")
    assert tallied == pytest.approx(measured, rel=1e-12)


def test_lines_of_a_plot_count_together_and_empty_lines_count():
    """Identity: two pieces on three lines of one plot are two pieces on their joint length, not a mean of three."""
    lines = [{"line": "1", "length_m": 10.0}, {"line": "2", "length_m": 30.0}, {"line": "3", "length_m": 60.0}]
    pieces = [{"line": "1"}, {"line": "2"}]
    assert mass(pieces, lines) == pytest.approx(mass([{}, {}], [{"length_m": 100.0}]), rel=1e-12)


def test_a_plot_without_wood_is_zero_and_one_without_lines_is_absent():
    fine = DownWoodOptions(
        classes={"fine": SizeClass(2.0, 0.3, 0.48), "large": SizeClass()}, class_density=UNIT_DENSITY
    )
    parts, findings = measure([{"size_class": "large"}], [{}, {"plot": "B"}, {"plot": "A", "survey": "2020"}], fine)
    assert findings.empty
    found = parts.set_index(["survey", "plot", "part"]).sort_index()
    assert len(found) == 6
    assert found.loc[("2014", "B", "down_coarse"), ["mass_t_ha", "density_t_c_ha", "samples"]].tolist() == [0, 0, 0]
    assert found.loc[("2014", "A", "down_fine"), "mass_t_ha"] == 0
    assert found.loc[("2014", "A", "down_coarse"), "mass_t_ha"] > 0
    assert (found.loc["2020", "mass_t_ha"] == 0).all()


def test_only_parts_that_were_looked_for_appear():
    tally = DownWoodOptions(classes={"fine": SizeClass(2.0, 0.3, 0.48)})
    parts, _ = measure([{"size_class": "fine", "count": 3.0}], [{}], tally)
    assert parts["part"].tolist() == ["down_fine"]
    parts, _ = measure([{}], [{}])
    assert parts["part"].tolist() == ["down_coarse"]
    assert parts["samples"].tolist() == [1]


def test_no_piece_and_no_line_at_all():
    parts, findings = measure([], [{}])
    assert parts["mass_t_ha"].tolist() == [0.0]
    parts, findings = measure([], [])
    assert parts.empty
    assert list(parts.columns) == PART_COLUMNS
    assert findings.empty
    parts, findings = measure([{}], [])
    assert parts.empty
    assert rules(findings) == [("line unknown", 2)]


def test_each_class_has_its_own_length_of_line():
    """Identity: classes on 2 m and 12 m of each line, two lines."""
    options = DownWoodOptions(classes={"fine": SizeClass(2.0, 0.5, 1.0), "large": SizeClass(12.0, density_g_cm3=1.0)})
    pieces = [{"size_class": "fine", "count": 8.0}, {"size_class": "large", "diameter_cm": 10.0}]
    parts, _ = measure(pieces, [{}, {"line": "2"}], options)
    found = parts.set_index("part")["mass_t_ha"]
    assert found["down_fine"] == pytest.approx(np.pi**2 / 8 * 8 * 0.25 / 4)
    assert found["down_coarse"] == pytest.approx(np.pi**2 / 8 * 100 / 24)


def test_a_length_stated_with_the_pieces_counts_for_lines_without_that_class_too():
    options = DownWoodOptions(classes={"fine": SizeClass(mean_diameter_cm=1.0, density_g_cm3=1.0)})
    pieces = [{"size_class": "fine", "count": 6.0, "line_m": 3.0}]
    found = mass(pieces, [{"length_m": 20.0}, {"line": "2", "length_m": 20.0}], options, "down_fine")
    assert found == pytest.approx(np.pi**2 / 8 * 6 / 6)


def test_a_length_stated_again_with_the_pieces_changes_nothing():
    options = DownWoodOptions(classes={"fine": SizeClass(2.0, 1.0, 1.0)})
    rows = [{"size_class": "fine", "count": 6.0}]
    again = [{**row, "line_m": 2.0} for row in rows]
    lines = [{}, {"line": "2"}]
    assert mass(again, lines, options, "down_fine") == mass(rows, lines, options, "down_fine")


def test_slope_is_taken_off_once_and_only_where_lines_lie_along_it():
    """Identity: a slope of 30 % raises the value per hectare by 1 / cos(atan 0.3) = 1.044."""
    along = DownWoodOptions(class_density=UNIT_DENSITY, line_slope="along the slope")
    steep = [{"slope_deg": float(np.degrees(np.arctan(0.30)))}]
    assert mass([{}], steep, along) / mass([{}], [{}], along) == pytest.approx(1.044, abs=5e-4)
    assert mass([{}], steep) == mass([{}], [{}])


def test_shape_of_the_section():
    """Identity: an ellipse is the product of its axes, cavity and sunk half come off, a tilt of 60 degrees doubles."""
    plain = mass([{}], [{}])
    assert mass([{"diameter_2_cm": 10.0}], [{}]) == pytest.approx(plain / 2)
    assert mass([{"hollow_cm": 10.0}], [{}]) == pytest.approx(plain * (1 - 0.25))
    assert mass([{"sunk_share": 0.5}], [{}]) == pytest.approx(plain / 2)
    assert mass([{"count": 3.0}], [{}]) == pytest.approx(plain * 3)
    parts, findings = measure([{"tilt_deg": 60.0}], [{}])
    assert parts["mass_t_ha"].iloc[0] == pytest.approx(plain * 2)
    assert rules(findings) == [("piece leaning like a standing tree", 2)]


def test_collapse_is_an_option_and_never_taken_off_twice():
    """Published (secondary): Fraver et al. 2013, 0.412 of the round section left in class 5."""
    flat = DownWoodOptions(collapse=True)
    row = {"decay_class": "5"}
    plain = mass([row], [{}], DownWoodOptions())
    parts, _ = measure([row], [{}], flat)
    assert parts["mass_t_ha"].iloc[0] / plain == pytest.approx(0.412)
    assert parts["known"].tolist() == ["secondary"]
    for measured in ({"diameter_2_cm": 20.0}, {"sunk_share": 0.2}):
        assert mass([{**row, **measured}], [{}], flat) == mass([{**row, **measured}], [{}], DownWoodOptions())


# ---------------------------------------------------------------- findings

FAULTS = [
    ({"decay_class": "7"}, "decay class unknown", False),
    ({"decay_class": ""}, "decay class missing", True),
    ({"decay_class": "x"}, "decay class unknown", False),
    ({"line": "9"}, "line unknown", False),
    ({"plot": "Z"}, "line unknown", False),
    ({"survey": "1999"}, "line unknown", False),
    ({"diameter_cm": np.nan}, "piece without diameter", False),
    ({"diameter_cm": -1.0}, "piece without diameter", False),
    ({"diameter_cm": 0.0}, "piece of diameter zero", True),
    ({"diameter_cm": 350.0}, "diameter very large", True),
    ({"diameter_2_cm": 0.0}, "second diameter impossible", False),
    ({"hollow_cm": 20.0}, "cavity impossible", False),
    ({"hollow_cm": -2.0}, "cavity impossible", False),
    ({"sunk_share": 1.2}, "sunk share impossible", False),
    ({"sunk_share": -0.1}, "sunk share impossible", False),
    ({"tilt_deg": 90.0}, "tilt impossible", False),
    ({"tilt_deg": -5.0}, "tilt impossible", False),
    ({"count": -2.0}, "count impossible", False),
    ({"count": np.inf}, "count impossible", False),
    ({"size_class": "tiny"}, "size class unknown", False),
    ({"line_m": 0.0}, "length of line for class impossible", False),
    ({"species": "QQ"}, "species of wood unknown", True),
    ({"wood": "plywood"}, "wood type unknown", True),
    ({"species": "FI"}, "species and wood type differ", True),
]


@pytest.mark.parametrize(("fault", "name", "used"), FAULTS, ids=lambda value: str(value))
def test_each_fault_is_a_finding_with_its_row(fault, name, used):
    """The faulty piece lies third; the others are untouched by it."""
    parts, findings = measure([{}, {}, fault], [{}], DownWoodOptions())
    assert rules(findings) == [(name, 4)]
    assert findings["used"].tolist() == [used]
    assert findings["table"].tolist() == ["pieces"]
    assert findings["file"].tolist() == ["pieces.csv"]
    assert findings["row_id"].tolist() == [2]
    assert findings["message"].str.len().gt(30).all()
    assert findings["remedy"].str.len().gt(3).all()
    if not used:
        assert parts["mass_t_ha"].iloc[0] == pytest.approx(mass([{}, {}], [{}], DownWoodOptions()))


def test_a_line_of_length_zero_goes_with_its_pieces():
    parts, findings = measure([{}, {"line": "2"}], [{}, {"line": "2", "length_m": 0.0}])
    assert rules(findings) == [("line without length", 3), ("line set aside", 3)]
    assert findings["used"].tolist() == [False, False]
    assert findings["table"].tolist() == ["lines", "pieces"]
    assert parts["mass_t_ha"].tolist() == pytest.approx([4.935], abs=5e-4)


def test_a_plot_that_loses_all_its_lines_is_not_measured():
    parts, findings = measure([{}], [{"length_m": 0.0}, {"plot": "B"}])
    assert parts["plot"].tolist() == ["B"]
    assert len(findings) == 2


@pytest.mark.parametrize(
    ("line", "name", "used"),
    [
        ({"length_m": np.nan}, "line without length", False),
        ({"length_m": -4.0}, "line without length", False),
        ({"slope_deg": 95.0}, "slope of line impossible", False),
        ({"slope_deg": -3.0}, "slope of line impossible", False),
        ({"slope_deg": np.nan}, "slope of line missing", True),
        ({"slope_deg": 60.0}, "line very steep", True),
        ({"line": "1"}, "line listed twice", False),
    ],
    ids=lambda value: str(value),
)
def test_faults_of_lines(line, name, used):
    along = DownWoodOptions(class_density=UNIT_DENSITY, line_slope="along the slope")
    parts, findings = measure([{}], [{}, {"line": "2", **line}], along)
    assert rules(findings) == [(name, 3)]
    assert findings["used"].tolist() == [used]
    if not used:
        assert parts["mass_t_ha"].tolist() == pytest.approx([4.935], abs=5e-4)


def test_a_line_listed_twice_first_without_length_keeps_the_good_row():
    parts, findings = measure([{}], [{"length_m": 0.0}, {}])
    assert rules(findings) == [("line without length", 2)]
    assert parts["mass_t_ha"].tolist() == pytest.approx([4.935], abs=5e-4)


def test_the_default_length_fills_in():
    options = DownWoodOptions(class_density=UNIT_DENSITY, line_m=100.0)
    assert mass([{}], [{"length_m": np.nan}], options) == pytest.approx(4.935, abs=5e-4)


def test_class_on_more_metres_than_the_line_has():
    options = DownWoodOptions(classes={"fine": SizeClass(5.0, 1.0, 0.5)})
    _, findings = measure([], [{"length_m": 3.0}], options)
    assert rules(findings) == [("size class longer than its line", 2)]


def test_lengths_of_a_class_that_differ_on_one_line():
    options = DownWoodOptions(classes={"fine": SizeClass(mean_diameter_cm=1.0, density_g_cm3=1.0)})
    pieces = [{"size_class": "fine", "line_m": 3.0}, {"size_class": "fine", "line_m": 4.0}]
    parts, findings = measure(pieces, [{}], options)
    assert rules(findings) == [("lengths of line for class differ", 3)]
    assert parts["mass_t_ha"].iloc[0] == pytest.approx(np.pi**2 / 8 * 2 / 3)


def test_blank_tally_is_left_out_and_a_class_without_density_is_said_once():
    options = DownWoodOptions(classes={"fine": SizeClass(2.0, 0.3)})
    rows = [{"size_class": "fine", "count": np.nan}] + [{"size_class": "fine", "decay_class": ""}] * 3
    _, findings = measure(rows, [{}], options)
    assert sorted(findings["rule"]) == ["count missing", "size class without density"]


def test_missing_class_counts_with_the_stated_default():
    default = str(int(rule("missing_decay_class")))
    assert default in decay_classes()
    for options, class_ in ((DownWoodOptions(), default), (DownWoodOptions(missing_class="1"), "1")):
        parts, findings = measure([{"decay_class": ""}], [{}], options)
        assert parts["mass_t_ha"].iloc[0] == pytest.approx(mass([{"decay_class": class_}], [{}], options))
        assert f"class {class_}" in findings["message"].iloc[0]
        assert parts["known"].tolist() == ["memory"]


def test_no_decay_class_at_all_is_said_once():
    parts, findings = measure([{"decay_class": ""}] * 3, [{}], DownWoodOptions())
    assert findings["rule"].tolist() == ["no decay classes"]
    assert findings["table"].tolist() == ["pieces"]
    assert parts["mass_t_ha"].iloc[0] == pytest.approx(mass([{"decay_class": "3"}] * 3, [{}], DownWoodOptions()))


def test_own_densities_by_the_words_of_the_crew():
    options = DownWoodOptions(class_density={"sound": 0.43, "rotten": 0.2}, missing_class="rotten")
    square = np.pi**2 / 8 * 4
    assert mass([{"decay_class": "sound"}], [{}], options) == pytest.approx(square * 0.43)
    parts, findings = measure([{"decay_class": ""}, {"decay_class": "3"}], [{}], options)
    assert parts["mass_t_ha"].iloc[0] == pytest.approx(square * 0.2)
    assert sorted(rules(findings)) == [("decay class missing", 2), ("decay class unknown", 3)]


def test_a_row_set_aside_before_stays_out_without_a_second_finding():
    parts, findings = measure([{"used": False, "decay_class": "7"}, {}], [{}])
    assert findings.empty
    assert parts["mass_t_ha"].iloc[0] == pytest.approx(4.935, abs=5e-4)


def test_class_typed_as_decimal_and_categories_are_read_alike():
    pieces, lines = table("pieces", {"decay_class": "2.0"}, {"decay_class": " 2"}), table("lines", {})
    plain, findings = down_wood(pieces, lines, DownWoodOptions(), SPECIES)
    assert findings.empty
    text = ["survey", "plot", "subplot", "line", "size_class", "decay_class", "wood", "species"]
    as_category, _ = down_wood(pieces.astype(dict.fromkeys(text, "category")), lines, DownWoodOptions(), SPECIES)
    pd.testing.assert_frame_equal(plain, as_category)


@pytest.mark.parametrize(
    ("options", "message"),
    [
        ({"group": "bamboo"}, "softwood, hardwood, unknown"),
        ({"density": "guess"}, "by decay class"),
        ({"line_slope": "uphill"}, "horizontal, along the slope"),
        ({"volume": "newt"}, "auto, huber"),
        ({"missing_class": "9"}, "1, 2, 3, 4, 5"),
    ],
)
def test_words_that_mean_nothing_are_refused(options, message):
    with pytest.raises(UserError, match=message):
        DownWoodOptions(**options)


# ---------------------------------------------------------------- logs

AREA = DownWoodOptions(class_density=UNIT_DENSITY, log_area_m2=500.0)
VISITED = pd.DataFrame({"survey": ["2014", "2014"], "plot": ["A", "B"]}).astype("str")


def log_mass(rows, options=AREA, visited=VISITED, **words):
    parts, findings = logs(table("logs", *rows), visited, options, SPECIES, **words)
    assert list(parts.columns) == PART_COLUMNS
    return parts.set_index("plot"), findings


def test_logs_on_an_area():
    """Identity: a cylinder of 30 cm and 4 m on 500 m2 is 0.2827 m3 x 20."""
    parts, findings = log_mass([{"small_cm": 30.0}])
    assert findings.empty
    assert parts.loc["A", "mass_t_ha"] == pytest.approx(np.pi / 4 * 0.09 * 4 * 20)
    assert parts.loc["B", ["mass_t_ha", "density_t_c_ha", "samples"]].tolist() == [0, 0, 0]
    assert parts["part"].tolist() == ["down_coarse"] * 2
    assert "conic_paraboloid" in parts.loc["A", "method"]


def test_cutting_a_log_in_two_changes_nothing_under_the_exact_form():
    """Identity: a cone cut half-way."""
    cone = DownWoodOptions(class_density=UNIT_DENSITY, log_area_m2=500.0, volume="cone_frustum")
    whole, _ = log_mass([{}], cone)
    halves, _ = log_mass(
        [{"large_cm": 30.0, "small_cm": 25.0, "length_m": 2.0}, {"large_cm": 25.0, "small_cm": 20.0, "length_m": 2.0}],
        cone,
    )
    assert halves.loc["A", "mass_t_ha"] == pytest.approx(whole.loc["A", "mass_t_ha"], rel=1e-12)


def test_area_of_each_plot_comes_first():
    visited = VISITED.assign(area_m2=[250.0, np.nan])
    parts, _ = log_mass([{}, {"plot": "B"}], visited=visited)
    assert parts.loc["A", "mass_t_ha"] == pytest.approx(2 * parts.loc["B", "mass_t_ha"])


def test_lines_win_where_coarse_wood_was_measured_twice():
    parts, findings = log_mass([{}, {"plot": "B"}], on_lines=VISITED[:1])
    assert parts.index.tolist() == ["B"]
    assert rules(findings) == [("coarse wood measured twice", 2)]
    assert not findings["used"].any()


def test_hollow_and_sunk_logs():
    round_log = {"small_cm": 30.0}
    plain, _ = log_mass([round_log])
    hollow, _ = log_mass([{**round_log, "hollow_cm": 15.0, "sunk_share": 0.5}])
    assert hollow.loc["A", "mass_t_ha"] == pytest.approx(plain.loc["A", "mass_t_ha"] * 0.75 * 0.5)


@pytest.mark.parametrize(
    ("fault", "name", "used"),
    [
        ({"length_m": 0.0}, "log without length", False),
        ({"length_m": 400.0}, "log very long", True),
        ({"large_cm": np.nan}, "log without volume", False),
        ({"small_cm": -3.0}, "log without volume", False),
        ({"small_cm": 40.0}, "ends of log swapped", True),
        ({"large_cm": 320.0}, "diameter very large", True),
        ({"hollow_cm": 31.0}, "cavity impossible", False),
        ({"hollow_cm": 29.0}, "cavity larger than log", False),
        ({"decay_class": "7"}, "decay class unknown", False),
        ({"plot": "Z"}, "plot not visited for dead wood", False),
    ],
    ids=lambda value: str(value),
)
def test_faults_of_logs(fault, name, used):
    parts, findings = log_mass([{}, fault])
    assert rules(findings) == [(name, 3)]
    assert findings["used"].tolist() == [used]
    assert parts.loc["A", "samples"] == (2 if used else 1)


def test_formula_that_lacks_a_diameter_is_said():
    newton = DownWoodOptions(class_density=UNIT_DENSITY, log_area_m2=500.0, volume="newton")
    _, findings = log_mass([{}], newton)
    assert rules(findings) == [("volume formula replaced", 2)]


def test_logs_need_an_area():
    with pytest.raises(UserError, match="State the area in square metres"):
        log_mass([{}], DownWoodOptions())
