"""Change on the common area and the area effect, on invented land whose carbon is known everywhere.

Expected figures are brute force: density of the land times hectares by pyproj, cell by cell. As plots are spread evenly
over land of even density, the estimates have to hit them.
"""

from __future__ import annotations

import itertools

import numpy as np
import pandas as pd
import pytest
from boundary_frames import PROJECT, cells, grid_plots, hectares, in_cells, land, measured, version

from landcarbon.change import estimate_change
from landcarbon.estimate.area_effect import AREA_EFFECT_COLUMNS, area_effect
from landcarbon.estimate.common_area import (
    change_on_common_area,
    common_area,
    on_common_area,
    place_by_survey,
    stocks_by_survey,
    tables_at,
)
from landcarbon.estimate.stocks import estimate_stocks

SOLD, BOUGHT = "2019-12-31", "2020-01-01"


def common_of(inputs):
    """The common area of the two surveys."""
    return common_area(
        inputs.parcel_versions,
        inputs.parcels_in_force,
        inputs.parcel_of,
        inputs.strata,
        since="2014",
        until="2024",
        inventory_name="Tarn Side",
    )


def recut(before, after, kinds):
    """Parcels as strips two cells high; cut anew between the surveys, in strata taken in reverse order."""
    rows = [version(f"P{k}", cells(a, 0, b, 2), None, SOLD, stratum=kinds[k]) for k, (a, b) in enumerate(before)]
    return rows + [version(f"P{k}", cells(a, 0, b, 2), BOUGHT, stratum=kinds[-k]) for k, (a, b) in enumerate(after)]


def run(inputs, density):
    """Stocks at both surveys, change on the common area, the common area and the area effect."""
    plots = measured(inputs, density)
    options = {"pools": ["above_ground"], "confidence": 0.95, "inventory_name": "Tarn Side"}

    def estimate_one(table, strata, parcels, survey):
        return estimate_stocks(table, strata, parcels, [survey], **options)

    stocks, _ = stocks_by_survey(estimate_one, plots, inputs.parcel_versions, inputs.parcels_in_force, inputs.strata)
    common = common_of(inputs)

    def estimate(table, strata, parcels):
        return estimate_change(table, strata, parcels, since="2014", until="2024", **options)

    change, _ = change_on_common_area(estimate, plots, common)
    return stocks, change, common, area_effect(stocks, change, common)


def row(table, by, unit, pool="above_ground"):
    found = table[(table["by"] == by) & (table["unit"] == unit) & (table["pool"] == pool)]
    assert len(found) == 1
    return found.iloc[0]


def check_identity(effect):
    """Identity: stock since + change on the common area + area effect = stock until."""
    made = effect["stock_since_t_c"] + effect["change_common_t_c"] + effect["area_effect_t_c"]
    known = effect["area_effect_t_c"].notna()
    np.testing.assert_allclose(made[known], effect.loc[known, "stock_until_t_c"], rtol=1e-12, atol=1e-9)


def test_a_parcel_grows_by_bare_land(tmp_path):
    """Two hectares of wood at 100 t C/ha stay as they are; one hectare of bare land is bought."""
    versions = [version("A", cells(0, 0, 2, 1), None, SOLD), version("A", cells(0, 0, 3, 1), BOUGHT)]
    inputs = land(tmp_path, versions, grid_plots(3, 1))
    _stocks, change, _common, effect = run(inputs, lambda x, y, survey: 100.0 if in_cells(x, 0, 2) else 0.0)
    old, new = hectares(cells(0, 0, 2, 1)), hectares(cells(0, 0, 3, 1))
    for by, unit in (("inventory", "Tarn Side"), ("stratum", "oak"), ("parcel", "A")):
        assert row(change, by, unit)["change_t_c"] == pytest.approx(0.0, abs=1e-9)
        assert row(change, by, unit)["area_ha"] == pytest.approx(old, rel=1e-9)
        assert row(change, by, unit)["plots_paired"] == 8
        line = row(effect, by, unit)
        assert line[["area_since_ha", "area_until_ha", "area_common_ha"]].tolist() == pytest.approx(
            [old, new, old], rel=1e-9
        )
        assert line["stock_since_t_c"] == pytest.approx(100 * old, rel=1e-9)
        # 12 plots, 8 of them on wood: two thirds of the ground, as the cells are alike to some 1e-7
        assert line["area_effect_t_c"] == pytest.approx(0.0, abs=1e-4)
    assert list(effect) == AREA_EFFECT_COLUMNS
    check_identity(effect)


def test_a_parcel_grows_by_wooded_land_that_grows(tmp_path):
    """All land gains 10 t C/ha; the hectare bought brings in its whole stock of the later day."""
    versions = [version("A", cells(0, 0, 2, 1), None, SOLD), version("A", cells(0, 0, 3, 1), BOUGHT)]
    inputs = land(tmp_path, versions, grid_plots(3, 1))
    *_, effect = run(inputs, lambda x, y, survey: 60.0 if survey == "2014" else 70.0)
    old, new = hectares(cells(0, 0, 2, 1)), hectares(cells(0, 0, 3, 1))
    line = row(effect, "parcel", "A")
    assert line["change_common_t_c"] == pytest.approx(10 * old, rel=1e-9)
    assert line["area_effect_t_c"] == pytest.approx(70 * (new - old), rel=1e-9)
    assert "change on the common area (difference of ratio means, paired)" in line["method"]
    check_identity(effect)


def test_a_parcel_split_in_two(tmp_path):
    """The inventory and the stratum know no change of area; the parcels hand their stock over."""
    versions = [
        version("A", cells(0, 0, 4, 1), None, SOLD),
        version("A1", cells(0, 0, 1, 1), BOUGHT),
        version("A2", cells(1, 0, 4, 1), BOUGHT),
    ]
    inputs = land(tmp_path, versions, grid_plots(4, 1))
    _stocks, change, _common, effect = run(inputs, lambda x, y, survey: 50.0 if survey == "2014" else 58.0)
    whole = hectares(cells(0, 0, 4, 1))
    assert row(change, "inventory", "Tarn Side")["change_t_c"] == pytest.approx(8 * whole, rel=1e-6)
    assert row(change, "stratum", "oak")["change_t_c"] == pytest.approx(8 * whole, rel=1e-6)
    assert not (change["by"] == "parcel").any()
    line = row(effect, "inventory", "Tarn Side")
    assert line["area_common_ha"] == pytest.approx(whole, rel=1e-9)
    assert line["area_effect_t_c"] == pytest.approx(0.0, abs=1e-3)
    assert row(effect, "parcel", "A")["area_effect_t_c"] == pytest.approx(-50 * whole, rel=1e-9)
    assert row(effect, "parcel", "A1")["area_effect_t_c"] == pytest.approx(58 * hectares(cells(0, 0, 1, 1)), rel=1e-9)
    assert row(effect, "parcel", "A1")["method"] == "stock 2024; not there at 2014"
    assert row(effect, "parcel", "A2")["area_effect_t_c"] == pytest.approx(58 * hectares(cells(1, 0, 4, 1)), rel=1e-9)
    check_identity(effect)


def test_two_parcels_merged_under_the_name_of_one(tmp_path):
    versions = [
        version("A", cells(0, 0, 2, 1), None, SOLD),
        version("B", cells(2, 0, 3, 1), None, SOLD),
        version("A", cells(0, 0, 3, 1), BOUGHT),
    ]
    inputs = land(tmp_path, versions, grid_plots(3, 1))
    _stocks, change, _common, effect = run(inputs, lambda x, y, survey: 40.0 if survey == "2014" else 45.0)
    one, two = hectares(cells(0, 0, 2, 1)), hectares(cells(2, 0, 3, 1))
    assert row(change, "parcel", "A")["change_t_c"] == pytest.approx(5 * one, rel=1e-9)
    assert row(effect, "parcel", "A")["area_effect_t_c"] == pytest.approx(45 * two, rel=1e-6)
    assert row(effect, "parcel", "B")["area_effect_t_c"] == pytest.approx(-40 * two, rel=1e-9)
    assert row(effect, "inventory", "Tarn Side")["area_effect_t_c"] == pytest.approx(0.0, abs=1e-3)
    check_identity(effect)


def test_a_parcel_goes_to_another_stratum(tmp_path):
    """Two of four hectares of oak are felled and become a stratum of their own: a loss, not an area effect."""
    versions = [
        version("A", cells(0, 0, 2, 1)),
        version("B", cells(2, 0, 4, 1), None, SOLD),
        version("B", cells(2, 0, 4, 1), BOUGHT, None, stratum="felled"),
    ]
    inputs = land(tmp_path, versions, grid_plots(4, 1))

    def density(x, y, survey):
        felled = survey == "2024" and in_cells(x, 2, 4)
        return 5.0 if felled else 100.0 if survey == "2014" else 110.0

    _stocks, change, common, effect = run(inputs, density)
    kept, lost = hectares(cells(0, 0, 2, 1)), hectares(cells(2, 0, 4, 1))
    assert common.strata_moved
    assert row(change, "inventory", "Tarn Side")["change_t_c"] == pytest.approx(10 * kept - 95 * lost, rel=1e-6)
    assert row(change, "parcel", "B")["change_t_c"] == pytest.approx(-95 * lost, rel=1e-9)
    assert row(change, "stratum", "oak")["change_t_c"] == pytest.approx(10 * kept, rel=1e-9)
    assert row(change, "stratum", "oak")["plots_paired"] == 8
    assert not ((change["by"] == "stratum") & (change["unit"] == "felled")).any()
    assert row(effect, "stratum", "felled")["area_effect_t_c"] == pytest.approx(5 * lost, rel=1e-9)
    assert row(effect, "stratum", "oak")["area_effect_t_c"] == pytest.approx(-100 * lost, rel=1e-9)
    inventory = row(effect, "inventory", "Tarn Side")
    assert inventory["area_effect_t_c"] == pytest.approx(0.0, abs=1e-3)
    assert "its area did not change" in inventory["method"]
    assert not ((effect["by"] == "parcel") & (effect["unit"] == "B")).any()  # B is the same land
    check_identity(effect)


def test_a_parcel_is_sold(tmp_path):
    versions = [version("A", cells(0, 0, 2, 1)), version("B", cells(2, 0, 4, 1), None, SOLD)]
    inputs = land(tmp_path, versions, grid_plots(4, 1))
    stocks, change, _common, effect = run(inputs, lambda x, y, survey: 80.0 if in_cells(x, 2, 4) else 30.0)
    kept, sold = hectares(cells(0, 0, 2, 1)), hectares(cells(2, 0, 4, 1))
    for by, unit in (("inventory", "Tarn Side"), ("stratum", "oak"), ("parcel", "A")):
        assert row(change, by, unit)["change_t_c"] == pytest.approx(0.0, abs=1e-9)
        assert row(change, by, unit)["area_ha"] == pytest.approx(kept, rel=1e-9)
    # as the plots of 2014 give it: half of them on either parcel
    assert row(effect, "inventory", "Tarn Side")["area_effect_t_c"] == pytest.approx(-80 * sold, rel=1e-5)
    assert row(effect, "parcel", "B")["area_effect_t_c"] == pytest.approx(-80 * sold, rel=1e-9)
    assert row(effect, "parcel", "B")["method"] == "less stock 2014; not there at 2024"
    assert not ((effect["by"] == "parcel") & (effect["unit"] == "A")).any()
    listed = stocks.loc[stocks["pool"] == "all", ["unit", "survey"]].to_numpy().tolist()
    assert listed == [
        ["Tarn Side", "2014"],
        ["Tarn Side", "2024"],
        ["oak", "2014"],
        ["oak", "2024"],
        ["A", "2014"],
        ["A", "2024"],
        ["B", "2014"],
    ]
    check_identity(effect)


def test_no_common_land_and_too_few_plots(tmp_path):
    """A parcel that moved has nothing in common; one with a single plot on it has no figure, and says so."""
    versions = [
        version("A", cells(0, 0, 2, 1), None, SOLD),
        version("A", cells(2, 0, 4, 1), BOUGHT),
        version("B", cells(0, 1, 2, 2)),
        version("C", cells(0, 0, 2, 1), BOUGHT),
    ]
    plots = pd.concat([grid_plots(4, 1), grid_plots(4, 2).iloc[[20]].assign(plot="lone")])
    inputs = land(tmp_path, versions, plots)
    _stocks, change, _common, effect = run(inputs, lambda x, y, survey: 20.0)
    line = row(effect, "parcel", "A")
    assert line["area_common_ha"] == 0.0
    assert line["change_common_t_c"] == 0.0
    assert line["method"] == "stock 2024 less stock 2014; no land in common"
    assert row(change, "inventory", "Tarn Side")["change_t_c"] == pytest.approx(0.0, abs=1e-9)
    check_identity(effect)


def test_figures_that_are_lacking_are_named(tmp_path):
    versions = [version("A", cells(0, 0, 2, 1), None, SOLD), version("A", cells(1, 0, 4, 1), BOUGHT)]
    plots = grid_plots(4, 1)
    inputs = land(tmp_path, versions, plots[~plots["x"].between(400_100, 400_200)])  # none on the common land
    _stocks, _change, _common, effect = run(inputs, lambda x, y, survey: 20.0)
    assert effect["area_effect_t_c"].isna().all()
    assert set(effect["method"]) == {"not estimable: no figure for change on the common area"}


def test_without_change_of_area_there_are_no_rows(tmp_path):
    versions = [version("A", cells(0, 0, 2, 1), "2001-01-01"), version("B", cells(2, 0, 3, 1), "2001-01-01")]
    inputs = land(tmp_path, versions, grid_plots(3, 1))
    _stocks, change, _common, effect = run(inputs, lambda x, y, survey: 20.0 + x % 7 + 3.0 * (survey == "2024"))
    assert effect.empty
    assert list(effect) == AREA_EFFECT_COLUMNS
    plain = estimate_change(
        measured(inputs, lambda x, y, survey: 20.0 + x % 7 + 3.0 * (survey == "2024")),
        inputs.strata,
        pd.DataFrame(inputs.parcels),
        since="2014",
        until="2024",
        pools=["above_ground"],
        confidence=0.95,
        inventory_name="Tarn Side",
    )[0]
    pd.testing.assert_frame_equal(change, plain)


def test_overlapping_outlines_count_twice_as_in_the_stocks(tmp_path):
    """Where nothing changes the common area is the area, overlaps and stated areas or not."""
    versions = [
        version("A", cells(0, 0, 2, 1), area=2.5),
        version("B", cells(1, 0, 3, 1), "1990-01-01"),
        version("C", cells(3, 0, 4, 1), BOUGHT),
    ]
    text = PROJECT + '[columns.parcels]\narea = "area"\n'
    inputs = land(tmp_path, versions, grid_plots(4, 1), text)
    common = common_of(inputs)
    areas = common.areas.set_index("unit")
    assert areas.loc["A", ["area_since_ha", "area_until_ha", "area_common_ha"]].tolist() == [2.5, 2.5, 2.5]
    expected = 2.5 + hectares(cells(1, 0, 3, 1))
    assert areas.loc["Tarn Side", "area_common_ha"] == pytest.approx(expected, rel=1e-9)
    assert areas.loc["oak", "area_common_ha"] == pytest.approx(expected, rel=1e-9)


def test_stated_area_of_a_stratum_follows_its_polygons(tmp_path):
    """Stated are 6 ha at the latest survey, when the polygons held three cells; two of them were there before."""
    versions = [version("A", cells(0, 0, 2, 1), None, SOLD), version("A", cells(0, 0, 3, 1), BOUGHT)]
    text = PROJECT + "[strata]\nareas = { oak = 6.0 }\n"
    inputs = land(tmp_path, versions, grid_plots(3, 1), text)
    then, _ = tables_at(inputs.parcel_versions, inputs.parcels_in_force, inputs.strata, "2014")
    now, parcels = tables_at(inputs.parcel_versions, inputs.parcels_in_force, inputs.strata, "2024")
    share = hectares(cells(0, 0, 2, 1)) / hectares(cells(0, 0, 3, 1))
    assert then["area_ha"].tolist() == pytest.approx([6 * share], rel=1e-9)
    assert now["area_ha"].tolist() == [6.0]
    assert parcels["area_ha"].tolist() == pytest.approx([hectares(cells(0, 0, 3, 1))], rel=1e-9)


def test_common_area_of_any_outlines_is_that_of_their_pieces(tmp_path):
    """Independent: shapely's union and intersection of all outlines, measured by pyproj."""
    rng = np.random.default_rng(5)
    for case in range(4):
        cuts = np.sort(rng.choice(np.arange(1, 12), 3, replace=False)) / 2
        moved = np.sort(rng.choice(np.arange(1, 14), 4, replace=False)) / 2
        before = [(a, b) for a, b in zip([0, *cuts], [*cuts, 6], strict=True)]
        after = [(a, b) for a, b in zip([0, *moved], [*moved, 7], strict=True)]
        kinds = ["oak", "birch", "oak", "pine", "birch"]
        folder = tmp_path / str(case)
        folder.mkdir()
        inputs = land(folder, recut(before, after, kinds), grid_plots(7, 2))
        common = common_of(inputs)
        areas = common.areas.set_index(["by", "unit"])["area_common_ha"]
        assert areas["inventory", "Tarn Side"] == pytest.approx(hectares(cells(0, 0, 6, 2)), rel=1e-6)
        for name in set(kinds):
            one = [cells(a, 0, b, 2) for k, (a, b) in enumerate(before) if kinds[k] == name]
            two = [cells(a, 0, b, 2) for k, (a, b) in enumerate(after) if kinds[-k] == name]
            met = sum(hectares(i.intersection(j)) for i in one for j in two if i.intersection(j).area > 0)
            assert areas.get(("stratum", name), 0.0) == pytest.approx(met, rel=1e-6)
        for k, (a, b) in enumerate(before):
            met = cells(a, 0, b, 2).intersection(cells(*[after[k][0], 0], after[k][1], 2))
            expected = hectares(met) if met.area > 0 else 0.0
            assert areas["parcel", f"P{k}"] == pytest.approx(expected, rel=1e-6, abs=1e-12)


def random_cuts(rng, end, parts):
    at = [0, *np.sort(rng.choice(np.arange(1, end), parts - 1, replace=False)), end]
    return list(itertools.pairwise(at))


def test_change_on_the_common_area_plot_by_plot(tmp_path):
    """Brute force: mean difference of the plots on the land in common, stratum by stratum, times its hectares."""
    rng = np.random.default_rng(11)
    for case in range(3):
        before, after = random_cuts(rng, 8, 4), random_cuts(rng, 9, 5)
        kinds = ["oak", "birch", "oak", "pine", "birch"]
        folder = tmp_path / str(case)
        folder.mkdir()
        inputs = land(folder, recut(before, after, kinds), grid_plots(9, 2))
        table = {key: float(value) for key, value in zip(
            inputs.parcel_of[["survey", "plot"]].itertuples(index=False, name=None), rng.gamma(4, 20, 200), strict=False
        )}  # fmt: skip
        where = inputs.plots.set_index(["x", "y"])["plot"]
        _, change, _, effect = run(inputs, lambda x, y, survey, t=table, w=where: t[survey, w[x, y]])

        def kind_at(x, parts, order):
            return next((order[k] for k, (a, b) in enumerate(parts) if in_cells(x, a, b)), "")

        first = {k: kinds[k] for k in range(4)}
        second = {k: kinds[-k] for k in range(5)}
        plots = [
            (kind_at(x, before, first), kind_at(x, after, second), table["2024", name] - table["2014", name])
            for name, x in zip(inputs.plots["plot"], inputs.plots["x"], strict=True)
        ]
        total = 0.0
        for kind in {"oak", "birch", "pine"}:
            area = sum(hectares(cells(a, 0, b, 2)) for k, (a, b) in enumerate(before) if first[k] == kind)
            held = [gain for one, two, gain in plots if one == kind and two]
            total += area * float(np.mean(held))
            stayed = [gain for one, two, gain in plots if one == kind and two == kind]
            met = sum(
                hectares(cells(max(a, c), 0, min(b, d), 2))
                for k, (a, b) in enumerate(before)
                for m, (c, d) in enumerate(after)
                if first[k] == second[m] == kind and max(a, c) < min(b, d)
            )
            if len(stayed) > 1:
                assert row(change, "stratum", kind)["change_t_c"] == pytest.approx(met * np.mean(stayed), rel=1e-6)
            else:
                assert not ((change["by"] == "stratum") & (change["unit"] == kind)).any()
        assert row(change, "inventory", "Tarn Side")["change_t_c"] == pytest.approx(total, rel=1e-6)
        check_identity(effect)


def test_plots_on_the_common_area(tmp_path):
    versions = [
        version("A", cells(0, 0, 2, 1), None, SOLD),
        version("A", cells(0, 0, 1, 1), BOUGHT),
        version("B", cells(1, 0, 2, 1), BOUGHT, None, stratum="birch"),
        version("C", cells(2, 0, 3, 1), BOUGHT),
    ]
    inputs = land(tmp_path, versions, grid_plots(4, 1, per_side=1))
    common = common_of(inputs)
    assert common.plots.to_dict("list") == {
        "plot": ["p000", "p001", "p002", "p003"],
        "stratum": ["oak", "oak", "", ""],
        "parcel": ["A", "", "", ""],
        "inside": [True, True, False, False],
        "same": [True, False, False, True],
    }
    table = measured(inputs, lambda x, y, survey: 1.0)
    placed = on_common_area(table, common)
    assert sorted(placed.loc[placed["inside"], "plot"]) == ["p000", "p000", "p001", "p001"]
    strict = on_common_area(table, common, same_stratum=True)
    assert set(strict.loc[strict["inside"], "plot"]) == {"p000"}


def test_place_by_survey():
    table = pd.DataFrame(
        {"survey": ["1", "2", "2"], "plot": ["a", "a", "z"], "parcel": "X", "stratum": "x", "inside": True}
    )
    places = pd.DataFrame(
        {"survey": ["1", "2"], "plot": ["a", "a"], "parcel": ["P", ""], "stratum": ["oak", ""], "inside": [True, False]}
    )
    made = place_by_survey(table, places)
    assert made[["parcel", "stratum", "inside"]].to_numpy().tolist() == [
        ["P", "oak", True],
        ["", "", False],
        ["", "", False],
    ]
