"""The catalogue: what is in it, how it is searched, and that computing many trees equals computing one."""

from __future__ import annotations

import csv
import dataclasses
import shutil
import subprocess
import sys
import time
from importlib.resources import files
from pathlib import Path

import numpy as np
import pandas as pd
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st

from allometry.catalogue import Catalogue, component_biomass, load_catalogue, read_catalogue
from allometry.errors import AllometryError, CatalogueError, MissingInputError, NotAMassError, UnknownEquationError
from allometry.forms import FORMS

ROOT = Path(__file__).resolve().parent.parent
TABLES = files("allometry") / "equations"
MASS = {"kg", "g", "t"}


@pytest.fixture(scope="module")
def catalogue() -> Catalogue:
    return load_catalogue()


@pytest.fixture(scope="module")
def masses(catalogue: Catalogue) -> pd.DataFrame:
    """Rows that are masses and need no unusual input."""
    table = catalogue.table
    plain = table["inputs"].map(lambda text: set(text.split(";")) <= {"dbh_cm", "height_m", "wood_density_g_cm3"})
    return table[table["output_unit"].isin(MASS) & plain]


# ---------------------------------------------------------------- what is in it


def test_all_gathered_rows_are_all_here(catalogue, reference):
    sheets = ["na_equations.csv", "world_equations.csv"]
    facts = pd.concat([pd.read_csv(reference / "facts" / "allometry" / s) for s in sheets])
    assert not set(facts["equation_id"]) - set(catalogue.table["equation_id"])
    assert len(facts) == facts["equation_id"].nunique() == 1150


def test_printed_digits_are_kept(catalogue, reference):
    """Digit for digit, so that a reviewer can lay table and print side by side."""
    for sheet in ("na_equations.csv", "world_equations.csv"):
        facts = pd.read_csv(reference / "facts" / "allometry" / sheet, dtype=str, keep_default_na=False)
        for row in facts.to_dict("records"):
            printed = dict(p.split(" = ") for p in catalogue.row(row["equation_id"]).printed.split("; ") if p)
            given = {b: row[b] for b in ("b0", "b1", "b2", "b3", "b4") if row.get(b)}
            assert {k: v for k, v in printed.items() if k[0] == "b"} == given, row["equation_id"]


def test_columns_the_other_packages_rely_on(catalogue):
    wanted = (
        "equation_id source_key where taxon rank genus family region country component form b0 b1 b2 b3 b4 parts "
        "inputs output_unit dbh_min_cm dbh_max_cm residual_sd residual_scale bias_correction n_trees known screened "
        "screen_ratio usable usable_reason correction cf note"
    )
    assert set(wanted.split()) <= set(catalogue.table.columns)
    assert catalogue.table["equation_id"].is_unique
    assert catalogue.table["usable"].dtype == bool
    assert catalogue.table["screened"].dtype == bool


def test_every_source_is_described_and_used(catalogue):
    used = set(catalogue.table["source_key"])
    main = {key for key, entry in catalogue.sources.items() if not entry.get("supporting")}
    assert used == main
    named = {n for e in catalogue.sources.values() for n in (*e.get("quoted_in", ()), *e.get("checked_with", ()))}
    supporting = set(catalogue.sources) - main
    assert named <= set(catalogue.sources)
    assert supporting - named == set()
    assert all(entry["reference_known"] in ("read", "memory") for entry in catalogue.sources.values())


def test_rows_seen_only_as_quoted_name_where(catalogue):
    quoted = {key for key, entry in catalogue.sources.items() if "quoted_in" in entry}
    secondary = set(catalogue.table.loc[catalogue.table["known"] == "secondary", "source_key"])
    own_data = {"williams2005"}  # recomputed from the authors' own raw data, not quoted
    abstract = {"ketterings2001"}  # the form stands on the institute's page that cites the paper
    assert secondary - quoted <= own_data | abstract


def test_every_component_and_form_is_used(catalogue):
    assert set(catalogue.table["form"]) == set(FORMS)
    assert set(catalogue.table["component"]) == set(catalogue.components)


def test_ranges_and_errors_make_sense(catalogue):
    table = catalogue.table
    assert not (table["dbh_min_cm"] > table["dbh_max_cm"]).any()
    assert (table["residual_sd"].dropna() > 0).all()
    assert ((table["residual_sd"].notna()) == (table["residual_scale"] != "")).all()
    assert set(table.loc[table["output_unit"].isin(MASS), "residual_scale"]) <= {"", "ln", "kg"}


def test_rows_are_frozen(catalogue):
    with pytest.raises(dataclasses.FrozenInstanceError, match="b0"):
        catalogue.row("jenkins2003_agb_mo").b0 = 0.0


def test_small_tree_equations_are_set_aside(catalogue):
    """Rule of the project (rules.toml), so that a sapling equation is not picked for a whole species."""
    limit = 15.0
    table = catalogue.table
    small = (table["dbh_max_cm"] < limit) & table["output_unit"].isin(MASS)
    assert not table.loc[small, "usable"].any()


def test_sums_have_the_knowledge_and_range_of_their_weakest_part(catalogue):
    order = ["read", "secondary", "memory"]
    composed = catalogue.table[catalogue.table["note"].str.startswith("Complete component set")]
    assert len(composed) == 33
    for row in composed.itertuples():
        parts = [catalogue.row(name) for name in row.parts.split("+")]
        assert order.index(row.known) == max(order.index(p.known) for p in parts)
        assert all(not row.dbh_max_cm > p.dbh_max_cm for p in parts)
        assert {p.source_key for p in parts} == {row.source_key}


def test_incomplete_sets_are_not_summed(catalogue):
    incomplete = [s["equation_id"] for s in catalogue.sets if s["complete"] != "true"]
    assert incomplete == ["mark88_birch_agb_woody_dh", "komi05_stem_leaf", "jenkins2003_merchantable_and_foliage"]
    assert not set(incomplete) & set(catalogue.table["equation_id"])


# ---------------------------------------------------------------- broken tables


@pytest.fixture
def copy(tmp_path):
    folder = tmp_path / "equations"
    shutil.copytree(str(TABLES), folder)
    return folder


def change(folder: Path, name: str, row: int, **cells: str) -> None:
    """Change cells of one row of a copied table."""
    path = folder / f"{name}.csv"
    with path.open(encoding="utf-8", newline="") as handle:
        rows = list(csv.DictReader(handle))
    rows[row].update(cells)
    with path.open("w", encoding="utf-8", newline="") as handle:
        writer = csv.DictWriter(handle, list(rows[0]), lineterminator="\n")
        writer.writeheader()
        writer.writerows(rows)


@pytest.mark.parametrize(
    ("cells", "message"),
    [
        ({"form": "cubic_wish"}, r"jenkins2003.csv line 2: form 'cubic_wish' is not one of"),
        ({"b1": ""}, r"line 2: coefficient b1 of form log_linear is missing"),
        ({"b1": "2,3867"}, r"line 2: b1 is '2,3867', which is not a number"),
        (
            {"equation_id": "jenkins2003_agb_mb"},
            r"line 3: equation id 'jenkins2003_agb_mb' stands already at .* line 2",
        ),
        ({"dbh_min_cm": "80"}, r"line 2: dbh_min_cm 80 is above dbh_max_cm 70"),
        ({"component": "twigs"}, r"line 2: component 'twigs' is not in components.csv"),
        ({"region": "moon"}, r"line 2: region is 'moon'; allowed: any, australia"),
        ({"known": "guess"}, r"line 2: known is 'guess'; allowed: memory, read, secondary"),
        ({"usable": "false"}, r"line 2: a row has a usable_reason if, and only if, usable is false"),
        ({"residual_scale": ""}, r"line 2: residual_sd and residual_scale go together"),
        ({"parts": "jenkins2003_agb_mb"}, r"line 2: parts is 'jenkins2003_agb_mb', which does not fit form log_linear"),
        ({"diameter": ""}, r"line 2: diameter is '', which does not fit form log_linear"),
        ({"where": ""}, r"line 2: equation_id and where must not be empty"),
    ],
)
def test_a_fault_in_a_table_is_named_with_file_and_line(copy, cells, message):
    change(copy, "jenkins2003", 0, **cells)
    with pytest.raises(CatalogueError, match=message):
        read_catalogue(copy)


def test_all_faults_are_reported_at_once(copy):
    change(copy, "jenkins2003", 0, form="wish")
    change(copy, "brown1997", 1, region="moon")
    with pytest.raises(CatalogueError, match=r"2 fault\(s\)(.|\n)*jenkins2003.csv line 2(.|\n)*brown1997.csv line 3"):
        read_catalogue(copy)


def test_a_table_without_source_and_a_source_without_table_are_faults(copy):
    (copy / "brown1997.csv").rename(copy / "nobody1900.csv")
    with pytest.raises(
        CatalogueError, match=r"nobody1900.csv: source key is not in sources.toml(.|\n)*no table brown1997.csv"
    ):
        read_catalogue(copy)


def test_a_sum_needs_parts_that_exist_and_do_not_run_in_circles(copy):
    change(copy, "lambert2005", 4, parts="lambert2005_D_alpine_fir_stem+nothing")
    with pytest.raises(CatalogueError, match=r"part 'nothing' is not an equation(.|\n)*lead back to the row itself"):
        read_catalogue(copy)


def test_a_set_does_not_mix_publications(copy):
    change(copy, "component_sets", 0, parts="rp11_abies_alba_stem+rp11_pinus_nigra_thick_branches")
    with pytest.raises(CatalogueError, match="rp11_abies_alba_agb mixes publications or taxa"):
        read_catalogue(copy)


# ---------------------------------------------------------------- search


def test_find_by_species_genus_region_and_component(catalogue):
    found = catalogue.find(taxon="Fagus sylvatica", component="agb")
    assert "zianis05_089_fagus_sylvatica" in set(found["equation_id"])
    assert set(found["genus"]) == {"Fagus"}
    assert set(catalogue.find(taxon="betula pubescens")["source_key"]) >= {"marklund1988", "repola2008", "zianis2005"}
    assert set(catalogue.find(region="mangrove")["region"]) == {"mangrove", "any"}
    assert set(catalogue.find("hickory")["source_key"]) >= {"jenkins2003", "lambert2005"}
    assert len(catalogue.find(source="chave2014", known="memory")) == 3
    assert catalogue.find(taxon="Fagus")["equation_id"].size > found["equation_id"].size
    assert catalogue.find("no such text").empty


def test_unknown_ids_suggest_near_ones(catalogue):
    with pytest.raises(
        UnknownEquationError, match=r"no equation 'jenkins2003_agb_moo'.*did you mean jenkins2003_agb_mo"
    ):
        catalogue.row("jenkins2003_agb_moo")
    with pytest.raises(UnknownEquationError, match="search by part of a species"):
        catalogue.row("qqq")
    with pytest.raises(AllometryError, match="no equation"):
        catalogue.evaluate(["jenkins2003_agb_mo", "xyz"], [10.0, 20.0])


# ---------------------------------------------------------------- computing


def test_every_row_computes_at_an_ordinary_size(catalogue):
    """Each row gives a finite value of the right sign for a tree of 20 cm and 15 m (or 12 m of stem)."""
    given = {
        "height_m": 15.0,
        "wood_density_g_cm3": 0.55,
        "stress": -0.1,
        "drc_cm": 22.0,
        "d10_cm": 22.0,
        "crown_base_cm": 15.0,
        "stem_height_m": 12.0,
        "stump_height_m": 0.3,
        "dry_mass_fraction": 0.4,
        "temperature_seasonality": 500.0,
        "water_deficit_mm_yr": -300.0,
        "precipitation_seasonality": 40.0,
    }
    for e in catalogue.equations:
        value = catalogue.value(e.equation_id, 20.0, **{k: v for k, v in given.items() if k in e.input_names})
        assert np.isfinite(value).all(), e.equation_id
        assert (value >= 0).all() or e.component == "bioclimatic_stress", e.equation_id


@pytest.mark.parametrize("dbh", [20.0, [20.0, 30.0], np.array([20.0]), pd.Series([20.0, 30.0], index=[7, 3]), []])
def test_evaluate_takes_every_kind_of_input(catalogue, dbh):
    result = catalogue.evaluate("jenkins2003_agb_mo", dbh)
    assert list(result.columns) == ["biomass_kg", "out_of_range", "residual_sd", "residual_scale"]
    assert len(result) == np.size(dbh)
    if isinstance(dbh, pd.Series):
        assert result.index.equals(dbh.index)
    if len(result):
        assert result["residual_scale"].iloc[0] == "ln"
        assert result["residual_sd"].iloc[0] == catalogue.row("jenkins2003_agb_mo").residual_sd


def test_evaluate_takes_one_id_per_tree(catalogue):
    ids = ["jenkins2003_agb_mo", "chave14_h", "jenkins2003_agb_sp"]
    result = catalogue.evaluate(ids, [20.0, 30.0, 40.0], height_m=15.0, wood_density_g_cm3=0.6)
    single = [catalogue.evaluate(i, d, 15.0, 0.6)["biomass_kg"].iloc[0] for i, d in zip(ids, [20, 30, 40], strict=True)]
    np.testing.assert_array_equal(result["biomass_kg"], single)


def test_out_of_range_flags_only_printed_ends(catalogue):
    row = catalogue.row("jenkins2003_agb_mo")
    flags = catalogue.evaluate("jenkins2003_agb_mo", [row.dbh_min_cm, row.dbh_max_cm, 2.0, 74.0, np.nan])[
        "out_of_range"
    ]
    assert list(flags) == [False, False, True, True, False]
    assert not catalogue.evaluate("feld12_noh", [500.0], wood_density_g_cm3=0.6)["out_of_range"].any()
    palm = catalogue.evaluate("gpg03_palm_sabal_sp", None, [5.0, 20.0])
    assert list(palm["out_of_range"]) == [False, True]


def test_negative_component_is_zero_and_flagged(catalogue):
    # reference notes on ruizpeinado2012: medium branches turn negative for tall trees of 30 cm, read as zero
    row = catalogue.evaluate("rp12_quercus_faginea_medium_branches", 30.0, 24.0).iloc[0]
    assert row["biomass_kg"] == 0.0
    assert row["out_of_range"]
    whole = catalogue.evaluate("rp12_quercus_faginea_agb", 30.0, 24.0).iloc[0]
    parts = [p for p in catalogue.row("rp12_quercus_faginea_agb").part_ids if "medium" not in p]
    assert whole["biomass_kg"] == pytest.approx(
        sum(
            catalogue.value(p, 30.0, height_m=24.0)[0]
            if "height" in catalogue.row(p).inputs
            else catalogue.value(p, 30.0)[0]
            for p in parts
        )
    )


def test_missing_input_is_named(catalogue):
    with pytest.raises(MissingInputError, match=r"chave14_h needs height \[m\] and wood density \[g/cm3\]"):
        catalogue.evaluate("chave14_h", 20.0)
    with pytest.raises(MissingInputError, match=r"needs diameter at root collar \[cm\]; pass drc_cm"):
        catalogue.evaluate("chojnacky2014_agb_woodland_pinaceae", 20.0)
    with pytest.raises(MissingInputError, match="bioclimatic stress"):
        catalogue.evaluate_codes(np.array([catalogue.code("chave14_noh")]), np.array([20.0]), None, np.array([0.6]))
    given = catalogue.evaluate("chojnacky2014_agb_woodland_pinaceae", None, extra={"drc_cm": [20.0, 80.0]})
    assert list(given["out_of_range"]) == [False, True]


def test_a_height_is_not_a_mass(catalogue):
    with pytest.raises(NotAMassError, match=r"chave14_hd gives a height, not a mass; use Catalogue.value"):
        catalogue.evaluate("chave14_hd", 20.0, stress=0.0)
    with pytest.raises(NotAMassError, match="ratio to above-ground mass"):
        catalogue.evaluate("jenkins2003_ratio_hw_foliage", 20.0)


def test_many_trees_equal_one_by_one(catalogue, masses):
    """Identity: the grouped path gives what single rows give, in any order and with gaps."""
    rng = np.random.default_rng(7)
    codes = rng.permutation(np.r_[np.tile(masses.index.to_numpy(), 3), np.full(50, -1)])
    dbh = rng.uniform(5, 60, len(codes))
    height, rho = rng.uniform(4, 35, len(codes)), rng.uniform(0.3, 0.9, len(codes))
    dbh[::17] = np.nan
    mass, outside = catalogue.evaluate_codes(codes, dbh, height, rho)
    for i in rng.choice(len(codes), 400, replace=False):
        if codes[i] < 0:
            assert np.isnan(mass[i])
            assert not outside[i]
            continue
        one = catalogue.evaluate(catalogue.equations[codes[i]].equation_id, dbh[i], height[i], rho[i]).iloc[0]
        np.testing.assert_equal(mass[i], one["biomass_kg"])
        assert outside[i] == one["out_of_range"]
    order = rng.permutation(len(codes))
    again, _ = catalogue.evaluate_codes(codes[order], dbh[order], height[order], rho[order])
    np.testing.assert_array_equal(again, mass[order])


@settings(max_examples=50, deadline=None)
@given(st.lists(st.sampled_from([np.nan, 0.0, -1.0, 10.0, 25.0]), min_size=1, max_size=12), st.integers(0, 10**6))
def test_a_missing_diameter_spreads_nowhere(dbh, seed):
    catalogue = load_catalogue()
    ids = ["lambert2005_D_red_maple_agb", "mark88_pine_agb_d", "jenkins2003_agb_mo", "zianis05_147_picea_abies"]
    chosen = np.random.default_rng(seed).choice(ids, len(dbh))
    result = catalogue.evaluate(chosen, dbh)["biomass_kg"].to_numpy()
    np.testing.assert_array_equal(np.isnan(result), ~(np.array(dbh) > 0))


@settings(max_examples=40, deadline=None)
@given(st.data())
def test_mass_rises_with_diameter_for_power_equations(data):
    catalogue = load_catalogue()
    names = [
        e.equation_id
        for e in catalogue.equations
        if e.form in {"power", "power_b1", "log_linear"} and e.is_mass and e.inputs == "dbh_cm"
    ]
    name = data.draw(st.sampled_from(names))
    dbh = np.sort(data.draw(st.lists(st.floats(1, 120), min_size=2, max_size=20, unique=True)))
    mass = catalogue.evaluate(name, dbh)["biomass_kg"].to_numpy()
    assert (np.diff(mass) >= 0).all()


def test_a_million_trees_take_a_fraction_of_a_second(catalogue, masses):
    """The target of the project is 0.25 s on two cores; the limit here leaves room for a busy machine."""
    rng = np.random.default_rng(1)
    codes = rng.choice(rng.choice(masses.index[masses["component"] == "agb"], 40, replace=False), 1_000_000)
    dbh = rng.uniform(5, 60, len(codes))
    height, rho = 1.3 + 25 * (1 - np.exp(-0.04 * dbh)), np.full(len(codes), 0.5)
    times = []
    for _ in range(3):
        start = time.perf_counter()
        catalogue.evaluate_codes(codes, dbh, height, rho)
        times.append(time.perf_counter() - start)
    assert min(times) < 0.5


def test_clip_to_range_moves_to_the_nearest_end(catalogue):
    codes = np.array([catalogue.code("jenkins2003_agb_mo")] * 4 + [catalogue.code("feld12_noh"), -1])
    clipped = catalogue.clip_to_range(codes, np.array([1.0, 20.0, 100.0, np.nan, 500.0, 500.0]))
    row = catalogue.row("jenkins2003_agb_mo")
    np.testing.assert_array_equal(clipped, [row.dbh_min_cm, 20.0, row.dbh_max_cm, np.nan, 500.0, 500.0])


def test_components_of_the_national_ratios_add_up():
    """Identity: branches are the remainder (jenkins2003, p. 23), so the four parts are the whole."""
    agb = pd.Series([50.0, 900.0], index=["a", "b"])
    for wood in ("hardwood", "softwood"):
        parts = component_biomass(agb, [12.0, 40.0], wood)
        whole = parts.drop(columns="coarse_root_kg").sum(axis=1)
        np.testing.assert_allclose(whole, agb)
        assert (parts > 0).all().all()
        assert parts.index.equals(agb.index)
    with pytest.raises(ValueError, match="wood is 'conifer'; give 'hardwood' or 'softwood'"):
        component_biomass(10.0, 10.0, "conifer")


# ---------------------------------------------------------------- import


def test_import_is_light():
    """The catalogue needs numpy and pandas, and nothing heavier."""
    heavy = ["geopandas", "rasterio", "matplotlib", "folium", "pyogrio", "scipy", "landcarbon"]
    code = f"import sys, allometry.catalogue; print([m for m in {heavy} if m in sys.modules])"
    done = subprocess.run([sys.executable, "-c", code], capture_output=True, text=True, check=True, cwd=ROOT)
    assert done.stdout.strip() == "[]"
