"""Root models."""

from __future__ import annotations

from pathlib import Path

import numpy as np
import pandas as pd
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st

from allometry.errors import AllometryError, RootLevelError, UnknownModelError
from allometry.roots import default_model, level, root_models, root_rows, stand_roots, tree_roots

STAND = [str(name) for name in root_models().query("level == 'stand'")["model_id"]]
TREE = [str(name) for name in root_models().query("level == 'tree'")["model_id"]]


def one(model: str, shoot: float, **inputs: float) -> float:
    return float(stand_roots(model, [shoot], **inputs).root_t_ha[0])


def test_default_ratio_of_the_afforestation_tool() -> None:
    """Published: AR-TOOL14 v04.2, Appendix 1, p. 25, R = exp(-1.085 + 0.9256 ln b)/b, as quoted in methodology notes.

    At b = 1 t/ha the ratio is exp(-1.085) = 0.338 by hand; at b = 100 t/ha it is exp(-1.085 - 0.0744 * 4.60517) =
    0.240.
    """
    assert one("cairns97_general", 1.0) == pytest.approx(0.338, abs=5e-4)
    assert one("cairns97_general", 100.0) / 100.0 == pytest.approx(0.240, abs=5e-4)


def test_zone_constant_stays_outside_the_logarithm() -> None:
    """Identity: zones of Cairns et al. 1997 differ by the constant factors exp(0.2840) and exp(0.1874) at any biomass.

    Inside the logarithm the factor would change with biomass, which is the misreading met in practice.
    """
    for shoot in (1.0, 20.0, 150.0, 600.0):
        tropical = one("cairns97_tropical", shoot)
        assert one("cairns97_temperate", shoot) / tropical == pytest.approx(np.exp(0.2840), rel=1e-12)
        assert one("cairns97_boreal", shoot) / tropical == pytest.approx(np.exp(0.1874), rel=1e-12)


def test_constants_of_the_two_cairns_models_are_not_mixed() -> None:
    """Published: pairs (-1.0850, 0.9256) and (-1.0587, 0.8836); -1.0587 with 0.9256 is a misquote that circulates."""
    rows = root_rows().set_index("model_id")
    pairs = {(b0, b1) for b0, b1 in zip(rows["b0"], rows["b1"], strict=True) if np.isfinite(b0)}
    assert (-1.085, 0.9256) in pairs
    assert (-1.0587, 0.8836) in pairs
    assert (-1.0587, 0.9256) not in pairs


def test_ratio_falls_in_the_range_met_in_forests() -> None:
    """Published: IPCC 2019 Refinement, Volume 4, p. 8.5, quotes 0.26 as the mean ratio of Cairns et al. 1997."""
    assert 0.2 < one("cairns97_temperate", 150.0) / 150.0 < 0.32
    assert one("cairns97_ratio_026", 100.0) == pytest.approx(26.0)


def test_age_is_asked_for() -> None:
    with pytest.raises(AllometryError, match="needs the stand age"):
        stand_roots("cairns97_age", [100.0])
    assert one("cairns97_age", 100.0, age=60.0) > one("cairns97_age", 100.0, age=20.0)


def test_inverse_form_of_the_reversed_regression() -> None:
    """Identity: putting the roots back into log10(AGB) = b0 log10(BGB) + b1 (Cheng and Niklas 2007, Table 2) gives
    the AGB."""
    rows = root_rows().set_index("model_id")
    for zone in ("boreal", "temperate", "subtropical", "tropical"):
        row = rows.loc[f"cheng07_{zone}"]
        root = stand_roots(f"cheng07_{zone}", [10.0, 100.0, 300.0]).root_t_ha
        back = row["b0"] * np.log10(root) + row["b1"]
        assert np.allclose(10**back, [10.0, 100.0, 300.0])


def test_softwood_and_hardwood_parts_apart() -> None:
    """Published: 0.222 AGB for softwood stands (Li et al. 2003, as printed in the Quebec regulation Q-2, r.
    35.3.1)."""
    assert one("li2003", 100.0, conifer_share=1.0) == pytest.approx(22.2)
    # identity: a mixed stand is the sum of its parts, each by its own equation
    parts = one("li2003", 60.0, conifer_share=1.0) + one("li2003", 40.0, conifer_share=0.0)
    assert one("li2003", 100.0, conifer_share=0.6) == pytest.approx(parts)


def test_hardwood_is_a_power_not_a_line() -> None:
    """Memory: Li et al. 2003, 1.576 AGB^0.615; the same regulation prints the numbers as a straight line, a known
    slip."""
    assert one("li03_hardwood", 100.0) == pytest.approx(1.576 * 100**0.615)
    assert one("li03_hardwood", 100.0) < 30.0


@pytest.mark.parametrize(
    ("model", "shoot", "root"),
    [
        # published: IPCC 2006, Volume 4, Table 4.4, p. 4.49
        ("ipcc2006_temperate_conifer", 40.0, 40 * 0.40),
        ("ipcc2006_temperate_conifer", 50.0, 50 * 0.29),
        ("ipcc2006_temperate_conifer", 149.9, 149.9 * 0.29),
        ("ipcc2006_temperate_conifer", 151.0, 151 * 0.20),
        ("ipcc2006_temperate_broadleaf", 74.0, 74 * 0.46),
        ("ipcc2006_temperate_broadleaf", 76.0, 76 * 0.23),
        ("ipcc2006_temperate_broadleaf", 200.0, 200 * 0.24),
        ("ipcc2006_tropical_dry", 19.0, 19 * 0.56),
        ("ipcc2006_tropical_dry", 21.0, 21 * 0.28),
        ("ipcc2006_tropical_rainforest", 300.0, 300 * 0.37),
        ("ipcc2006_boreal", 74.0, 74 * 0.39),
        ("ipcc2006_boreal", 76.0, 76 * 0.24),
        # published: IPCC 2019 Refinement, Volume 4, Table 4.4, p. 4.18: "<= 125" holds 125 itself
        ("ipcc2019_tropical_rainforest_africa_natural", 125.0, 125 * 0.825),
        ("ipcc2019_tropical_rainforest_africa_natural", 125.1, 125.1 * 0.532),
        # published: the same, p. 4.19: ">125" and "all size classes" stand beside each other
        ("ipcc2019_temperate_oceanic_europe_planted_conifer", 200.0, 200 * 0.206),
        ("ipcc2019_temperate_oceanic_europe_planted_conifer", 60.0, 60 * 0.359),
        # published: Easdale et al. 2019, abstract
        ("easdale_eucalypts_australia", 100.0, 27.7),
    ],
)
def test_printed_classes(model: str, shoot: float, root: float) -> None:
    found = stand_roots(model, [shoot])
    assert found.root_t_ha[0] == pytest.approx(root)
    assert not found.out_of_range[0]


def test_mixed_stand_weights_the_ratios() -> None:
    """Published ratios (IPCC 2006 Table 4.4): 0.29 for conifers and 0.23 for broadleaves at 100 t/ha."""
    assert one("ipcc2006_temperate", 100.0, conifer_share=0.25) == pytest.approx(100 * (0.25 * 0.29 + 0.75 * 0.23))
    with pytest.raises(AllometryError, match="give conifer_share"):
        stand_roots("ipcc2006_temperate", [100.0])
    with pytest.raises(AllometryError, match="between 0 and 1"):
        stand_roots("ipcc2006_temperate", [100.0], conifer_share=1.5)
    # a stand without trees has no share, and no roots
    assert stand_roots("ipcc2006_temperate", [0.0], conifer_share=[np.nan]).root_t_ha.tolist() == [0.0]


def test_outside_the_printed_classes_is_flagged() -> None:
    """Published: IPCC 2006 Table 4.4 gives oaks one class, above 70 t/ha."""
    found = stand_roots("ipcc2006_temperate_oak", [50.0, 100.0, 0.0, np.nan])
    assert found.out_of_range.tolist() == [True, False, False, False]
    assert found.root_t_ha[0] == pytest.approx(15.0)


def test_gap_takes_the_nearest_class() -> None:
    """Published: IPCC 2019 Table 4.4, p. 4.19: subtropical steppe of the Americas has a class up to 125 t/ha only."""
    found = stand_roots("ipcc2019_subtropical_steppe_americas_natural", [100.0, 200.0])
    assert found.out_of_range.tolist() == [False, True]


@settings(max_examples=25, deadline=None)
@given(st.sampled_from(STAND), st.floats(min_value=0.0, max_value=900.0))
def test_every_stand_model_computes(model: str, shoot: float) -> None:
    found = stand_roots(model, [shoot, np.nan], conifer_share=0.5, age=50.0)
    assert np.isfinite(found.root_t_ha[0])
    assert found.root_t_ha[0] >= 0
    assert (found.root_t_ha[0] == 0) == (shoot == 0) or shoot < 1e-200
    assert np.isnan(found.root_t_ha[1])
    assert not found.out_of_range[1]


@pytest.mark.parametrize("model", TREE)
def test_every_tree_model_computes(model: str) -> None:
    root = tree_roots(model, [100.0, np.nan, 0.0], [20.0, 20.0, 20.0], [True, True, False])
    assert 0 < root[0] < 100
    assert np.isnan(root[1])
    assert root[2] == 0


@pytest.mark.parametrize(
    ("conifer", "ratio"),
    [
        # published: Jenkins et al. 2003, Figures 5 and 6, p. 24, cumulative ratio plots read at 50 cm (+- 0.015)
        (False, 0.186),
        (True, 0.2156),
    ],
)
def test_coarse_root_ratio_at_50_cm(conifer: bool, ratio: float) -> None:
    assert tree_roots("jenkins2003_coarse_root", [1.0], [50.0], [conifer])[0] == pytest.approx(ratio, abs=0.015)


def test_coarse_root_ratio_of_the_update() -> None:
    """Published: Chojnacky et al. 2014, p. 142-143: little more than a mean of about 22 %; fine roots about 1 %."""
    dbh = np.array([10.0, 20.0, 40.0, 80.0])
    coarse = tree_roots("chojnacky2014_coarse_root", np.ones(4), dbh, np.ones(4, dtype=bool))
    assert np.abs(coarse - 0.22).max() < 0.02
    fine = tree_roots("chojnacky2014_fine_root", np.ones(4), dbh, np.ones(4, dtype=bool))
    assert fine.mean() == pytest.approx(0.01, abs=0.01)


def test_ratios_of_trees_in_spain() -> None:
    """Published: Ruiz-Peinado et al. 2011 Table 5 (softwoods 0.265, Abies alba 0.183), 2012 Table 4 (hardwoods
    0.466)."""
    root = tree_roots("ruizpeinado_mean", [100.0, 100.0], [20.0, 20.0], [True, False])
    assert root.tolist() == pytest.approx([26.5, 46.6])
    assert tree_roots("rp11_rs_abies_alba", [100.0], [20.0], [True])[0] == pytest.approx(18.3)


def test_levels_are_never_mixed() -> None:
    assert level("cairns97_temperate") == "stand"
    assert level("rp11_rs_abies_alba") == "tree"
    with pytest.raises(RootLevelError, match=r"for single trees .* asked for stands"):
        stand_roots("rp11_rs_abies_alba", [100.0])
    with pytest.raises(RootLevelError, match=r"for stands .* asked for single trees"):
        tree_roots("cairns97_temperate", [100.0], [20.0], [True])
    with pytest.raises(RootLevelError, match="asked for single trees"):
        tree_roots("ipcc2006_temperate_conifer", [100.0], [20.0], [True])


def test_unknown_models() -> None:
    with pytest.raises(UnknownModelError, match="near: cairns97_temperate"):
        level("cairns97_temprate")
    with pytest.raises(UnknownModelError, match="without a value"):
        level("ipcc06_t44_13")
    with pytest.raises(UnknownModelError, match="without a value"):
        level("li03_fine")
    with pytest.raises(AllometryError, match="must not be negative"):
        stand_roots("cairns97_temperate", [-1.0])


@pytest.mark.parametrize("region", ["north_america", "europe", "tropics", "mangrove", "australia"])
def test_each_region_has_a_default_with_a_reason(region: str) -> None:
    row = default_model(region)
    models = root_models().set_index("model_id")
    assert row["reason"]
    assert models.loc[row["model_id"], "level"] == "stand"
    assert models.loc[row["model_id"], "known"] == row["known"]
    assert row["known"] != "memory"
    with pytest.raises(AllometryError, match="accepted: north_america"):
        default_model("moon")


def test_input_kinds() -> None:
    """Scalar, list, array and Series give the same."""
    expected = one("cairns97_temperate", 100.0)
    for shoot in (100.0, [100.0], np.array([100.0]), pd.Series([100.0])):
        assert stand_roots("cairns97_temperate", shoot).root_t_ha.tolist() == [expected]
    assert stand_roots("cairns97_temperate", []).root_t_ha.size == 0


def _class(text: str) -> tuple[float, float]:
    """Class bounds from a printed condition; NaN where open."""
    numbers = [
        float(word) for word in text.replace("-", " ").replace("<", "< ").replace(">", "> ").split() if word.isdigit()
    ]
    if "<" in text or "≤" in text:
        return np.nan, numbers[0]
    if ">" in text:
        return numbers[0], np.nan
    return (numbers[0], numbers[1]) if numbers else (np.nan, np.nan)


@pytest.mark.parametrize(("edition", "source"), [("2006", "ipcc2006"), ("2019", "ipcc2019")])
def test_printed_ratio_table_is_whole(reference: Path, edition: str, source: str) -> None:
    """Published: IPCC Table 4.4, 2006 Guidelines p. 4.49 and 2019 Refinement p. 4.18-4.21, every printed row."""
    printed = pd.read_csv(reference / "facts/ipcc/table_4_4_root_shoot.csv")
    printed = printed[printed["edition"].str.startswith(edition)]
    rows = root_rows()
    ours = rows[rows["source_key"] == source]
    bounds = printed["condition"].str.replace("≤", "<").map(_class)
    expected = sorted(
        (value, *bound)
        for value, bound in zip(printed["value"].fillna(-1), bounds, strict=True)
        for bound in [np.nan_to_num(bound)]
    )
    found = sorted(
        zip(ours["ratio"].fillna(-1), ours["agb_min_t_ha"].fillna(0), ours["agb_max_t_ha"].fillna(0), strict=True)
    )
    assert found == [tuple(map(float, row)) for row in expected]
