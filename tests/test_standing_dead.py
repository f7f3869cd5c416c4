"""Standing dead trees."""

from __future__ import annotations

import numpy as np
import pandas as pd
import pytest
from wood_frames import inputs_of, published, rules, table

from allometry.catalogue import component_biomass
from landcarbon.errors import UserError
from landcarbon.factors.dead_wood import density_ratios, structure_left
from landcarbon.pools.piece_volume import cone_frustum, cylinder
from landcarbon.pools.standing_dead import StandingOptions, dead_biomass

BY_CLASS = StandingOptions(standing="decay class", roots="dead_wood")
ASPEN, DOUGLAS_FIR = "Populus tremuloides", "Pseudotsuga menziesii"
CLASSES = ["1", "2", "3", "4", "5"]


def measure(*rows, options=BY_CLASS, **columns):
    trees, findings = dead_biomass(table("trees", *rows).assign(**columns), options)
    return trees, findings


@pytest.mark.parametrize("case", published("standing dead"), ids=lambda case: case["case_id"])
def test_factors_as_printed(case):
    """Published: Domke, Woodall and Smith 2011, Carbon Balance and Management 6:14, Table 2, exact."""
    names, group = pd.Series([ASPEN, DOUGLAS_FIR]), np.array(["hardwood", "softwood"], dtype=object)
    position = int(inputs_of(case)["decay_class"]) - 1
    printed = inputs_of({"inputs": case["expected"]})
    ratios, own = density_ratios("standing", names, group)
    assert own.all()
    found = {"aspen": ratios[0, position], "douglas_fir": ratios[1, position]}
    for short, name in (
        ("top", "top_and_branches"),
        ("bark", "bark"),
        ("bole", "bole"),
        ("stump", "stump"),
        ("roots", "roots"),
    ):
        found[short] = structure_left("standing", name)[position]
    assert found == printed


@pytest.mark.parametrize(("name", "conifer"), [(ASPEN, False), (DOUGLAS_FIR, True)])
def test_mass_is_the_sum_of_components(name, conifer):
    """Published factors on published components: Domke et al. 2011 Table 2, Jenkins et al. 2003 Table 6; class 2."""
    trees, findings = measure({"scientific_name": name, "conifer": conifer, "decay_class": "2"})
    assert findings.empty
    live = component_biomass(500.0, 30.0, "softwood" if conifer else "hardwood").iloc[0]
    ratio = 0.831 if conifer else 0.750
    above = ratio * (live["stem_wood_kg"] + 0.66 * live["stem_bark_kg"] + 0.50 * live["branches_kg"])
    assert trees["dead_wood_kg"].iloc[0] == pytest.approx(above)
    assert trees["dead_root_kg"].iloc[0] == pytest.approx(ratio * 0.95 * live["coarse_root_kg"])


def test_standing_trees_take_the_standing_set():
    """Published: balsam fir class 2, standing 1.15 where down wood has 1.0: nothing of the down set comes in."""
    fir, _ = measure({"scientific_name": "Abies balsamea", "conifer": True, "decay_class": "2"})
    other, _ = measure({"scientific_name": "", "conifer": True, "decay_class": "2"})
    assert fir["dead_wood_kg"].iloc[0] / other["dead_wood_kg"].iloc[0] == pytest.approx(1.15 / 0.942)


def test_a_class_heavier_than_the_one_before_stays_as_printed():
    """Published: aspen, ratio 0.540 in class 3 and 0.613 in class 4 (Domke et al. 2011, Table 2)."""
    assert density_ratios("standing", pd.Series([ASPEN]), np.array(["hardwood"], dtype=object))[0][0].tolist() == [
        0.97,
        0.75,
        0.54,
        0.613,
        0.613,
    ]


def test_every_class_loses_against_the_live_tree_without_leaves():
    """Property: ratio and shares of the group rows lie below one, and leaves are gone."""
    rows = [{"decay_class": each, "conifer": conifer} for each in CLASSES for conifer in (True, False)]
    trees, _ = measure(*rows)
    foliage = {
        c: component_biomass(500.0, 30.0, w)["foliage_kg"].iloc[0] for c, w in ((True, "softwood"), (False, "hardwood"))
    }
    limit = 500.0 - trees["conifer"].map(foliage)
    assert (trees["dead_wood_kg"] > 0).all()
    assert (trees["dead_wood_kg"] < limit).all()
    assert trees.loc[trees["conifer"], "dead_wood_kg"].is_monotonic_decreasing


def test_mass_without_leaves_keeps_its_wood():
    """Identity: a mass that never had leaves splits into wood and bark alone, in the same proportions."""
    plain, _ = measure({})
    woody, _ = measure({}, component="agb_woody")
    live = component_biomass(500.0, 30.0, "hardwood").iloc[0]
    assert woody["dead_wood_kg"].iloc[0] / plain["dead_wood_kg"].iloc[0] == pytest.approx(
        500.0 / (500.0 - live["foliage_kg"])
    )


def test_live_and_absent_trees_have_no_dead_wood_and_roots_are_apart():
    trees, findings = measure({}, {"status": "live"}, {"status": "absent", "biomass_kg": 0.0})
    assert findings.empty
    assert trees["dead_wood_kg"].iloc[1:].tolist() == [0.0, 0.0]
    assert trees["dead_root_kg"].iloc[1:].tolist() == [0.0, 0.0]
    without, _ = measure({}, {"status": "live"}, options=StandingOptions(standing="decay class"))
    assert without["dead_root_kg"].isna().all()
    assert without["dead_wood_kg"].tolist() == trees["dead_wood_kg"].iloc[:2].tolist()


def test_default_is_by_class_where_any_dead_tree_has_one():
    by_class, _ = measure({"decay_class": "3"}, options=StandingOptions())
    assert by_class["dead_wood_kg"].iloc[0] < 400
    whole, findings = measure({"decay_class": ""}, options=StandingOptions())
    assert whole["dead_wood_kg"].tolist() == [500.0]
    assert findings["rule"].tolist() == ["whole dead trees"]
    nothing, findings = measure({"status": "live"}, options=StandingOptions())
    assert findings.empty
    assert nothing["dead_wood_kg"].tolist() == [0.0]


def test_status_classes_of_mangroves():
    """Published (secondary): Kauffman and Donato 2012: 2.5 % off for status 1, 15 % for status 2; bole alone for 3."""
    options = StandingOptions(standing="mangrove status")
    trees, findings = measure(*({"decay_class": each} for each in ("1", "2", "3", "")), options=options)
    live = component_biomass(500.0, 30.0, "hardwood").iloc[0]
    bole = live["stem_wood_kg"] + live["stem_bark_kg"]
    assert trees["dead_wood_kg"].tolist() == pytest.approx([487.5, 425.0, bole, 487.5])
    assert rules(findings) == [("dead tree without decay class", 5)]
    _, findings = measure({"decay_class": "4"}, options=options)
    assert rules(findings, used=False) == [("decay class of tree unknown", 2)]


# ---------------------------------------------------------------- broken stems


def test_bole_to_a_measured_break():
    """Identity: a stem as thick at the break as at breast height is a cylinder; class 1 of unknown hardwood, 0.991."""
    trees, findings = measure(
        {"scientific_name": "Quercus", "dbh_cm": 30.0}, break_height_m=5.0, top_cm=30.0, wood_density_g_cm3=0.6
    )
    assert findings.empty
    assert trees["dead_wood_kg"].iloc[0] == pytest.approx(cylinder(5.0, 30.0) * 600 * 0.991)
    assert trees["dead_how"].iloc[0].startswith("bole to the break")


def test_bole_to_a_break_of_known_whole_height():
    """Identity: linear taper to zero at the height of the whole tree; unbroken, the bole is that cone."""
    words = {"wood_density_g_cm3": 0.6, "live_height_m": 20.0}
    trees, _ = measure({"scientific_name": "Quercus"}, break_height_m=10.0, **words)
    top = 30.0 * (20.0 - 10.0) / (20.0 - 1.3)
    base = 30.0 * 20.0 / (20.0 - 1.3)
    assert trees["dead_wood_kg"].iloc[0] == pytest.approx(cone_frustum(10.0, base, top) * 600 * 0.991)


@pytest.mark.parametrize(
    "columns",
    [
        {"break_height_m": 5.0},
        {"break_height_m": 5.0, "top_cm": 20.0},
        {"break_height_m": 5.0, "top_cm": 45.0, "wood_density_g_cm3": 0.6},
        {"break_height_m": -1.0, "top_cm": 20.0, "wood_density_g_cm3": 0.6},
    ],
    ids=["no diameter", "no density", "thicker than dbh", "below ground"],
)
def test_a_break_that_cannot_be_used_is_said_and_the_class_counts(columns):
    plain, _ = measure({})
    trees, findings = measure({}, **columns)
    assert rules(findings) == [("break cannot be used", 2)]
    assert trees["dead_wood_kg"].tolist() == plain["dead_wood_kg"].tolist()


def test_no_height_is_no_fault_and_a_stub_is_pointed_at():
    _, findings = measure({"height_m": np.nan}, {"height_m": 25.0})
    assert findings.empty
    _, findings = measure({"height_m": 25.0}, {"height_m": 4.0, "decay_class": "4"})
    assert rules(findings) == [("height of a broken stem", 3)]
    _, findings = measure({"height_m": 4.0}, height_source="curve")
    assert findings.empty


# ---------------------------------------------------------------- findings


def test_decay_class_7_is_set_aside_with_its_row():
    trees, findings = measure({}, {"decay_class": "7"}, {"status": "live", "decay_class": "7"})
    assert rules(findings) == [("decay class of tree unknown", 3)]
    assert findings["used"].tolist() == [False]
    assert findings["table"].tolist() == ["trees"]
    assert findings["row_id"].tolist() == [1]
    assert findings["carbon_kg"].tolist() == [240.0]
    assert trees["used"].tolist() == [True, False, True]
    assert np.isnan(trees["dead_wood_kg"].iloc[1])


def test_missing_class_counts_with_the_default():
    options = StandingOptions(standing="decay class", missing_class="2")
    trees, findings = measure({"decay_class": ""}, {"decay_class": "2"}, options=options)
    assert trees["dead_wood_kg"].nunique() == 1
    assert rules(findings) == [("dead tree without decay class", 2)]
    assert "class 2" in findings["message"].iloc[0]


def test_trees_without_biomass_and_rows_set_aside_pass_through():
    trees, findings = measure({"biomass_kg": np.nan}, {"used": False, "decay_class": "7"}, {})
    assert findings.empty
    assert trees["dead_wood_kg"].isna().tolist() == [True, False, False]
    assert len(trees) == 3


def test_small_trees_keep_sense():
    """Property: below the smallest tree of the ratios (2.5 cm) the split of that tree holds; nothing turns negative."""
    trees, _ = measure({"dbh_cm": 0.5, "biomass_kg": 0.05}, {"dbh_cm": 1.0, "biomass_kg": 0.2, "conifer": True})
    assert (trees["dead_wood_kg"] >= 0).all()
    assert (trees["dead_wood_kg"] <= trees["biomass_kg"]).all()


def test_input_is_not_changed_and_categories_are_read_alike():
    plain = table("trees", {}, {"decay_class": "3", "conifer": True}, {"status": "live"})
    before = plain.copy()
    text = ["status", "decay_class", "species", "scientific_name"]
    first, _ = dead_biomass(plain, BY_CLASS)
    second, _ = dead_biomass(plain.astype(dict.fromkeys(text, "category")), BY_CLASS)
    pd.testing.assert_frame_equal(plain, before)
    assert first["dead_wood_kg"].tolist() == second["dead_wood_kg"].tolist()


def test_words_that_mean_nothing_are_refused():
    with pytest.raises(UserError, match="decay class, whole tree, mangrove status"):
        StandingOptions(standing="guess")
    with pytest.raises(UserError, match="not counted, dead_wood"):
        StandingOptions(roots="some")
