"""Expansion factors and plot densities."""

from __future__ import annotations

from pathlib import Path

import numpy as np
import pandas as pd
import pytest
from hypothesis import given
from hypothesis import strategies as st

from landcarbon.errors import SettingsError
from landcarbon.plots import PlotDesign, PlotSums, expansion_factors, plot_parts, plot_sums, visit_index

CASES = pd.read_csv(Path(__file__).parent / "data" / "expansion_factors.csv")
M_PER_FT = 0.3048
HA_PER_AC = 0.40468564224
CM_PER_IN = 2.54


def make_visits(**columns):
    frame = pd.DataFrame({"survey": ["2014"], "plot": ["A"], "date": pd.NaT, "visited": True, "share_inside": 1.0})
    return frame.assign(**{"slope_deg": 0.0, "n_subplots": 1, "plot_area_ha": np.nan, **columns})


def make_trees(dbh, *, survey="2014", plot="A", **columns):
    dbh = np.atleast_1d(np.asarray(dbh, dtype=float))
    frame = pd.DataFrame({"dbh_cm": dbh, "survey": survey, "plot": plot, "weight": 1.0, "expansion_per_ha": np.nan})
    frame = frame.assign(status="live", used=True, out_of_range=False, **columns)
    frame["status"] = pd.Categorical(frame["status"], categories=["live", "dead", "absent"])
    return frame.astype({"survey": "category", "plot": "category"})


def factor_of(kind, values):
    subplots = int(values.get("subplots", 1))
    visits = make_visits(n_subplots=subplots, slope_deg=values.get("slope_deg", 0.0))
    dbh, unit = values.get("dbh_cm", 30.0), 1.0
    if kind == "circle":
        radius = values["radius_m"] if "radius_m" in values else values["radius_ft"] * M_PER_FT
        unit = 1.0 if "radius_m" in values else HA_PER_AC
        design = PlotDesign.circles([radius], [0.0], on_slope="slope_deg" in values)
    elif kind == "nested":
        design = PlotDesign.circles([5.0, 10.0, 15.0, 25.0], [7.5, 12.5, 22.5, 42.5])
    else:
        design = PlotDesign.angle_count(values["factor_ft2_ac"], "ft2/ac")
        dbh, unit = values["dbh_in"] * CM_PER_IN, HA_PER_AC
    trees = make_trees(dbh)
    got = expansion_factors(trees, visits, visit_index(trees, visits), design)
    return got[0] * unit * values.get("tallied", 1)


@pytest.mark.parametrize("case", list(CASES.itertuples()), ids=list(CASES["case"]))
def test_expansion_factor_as_printed(case):
    """Published: source and place stand in tests/data/expansion_factors.csv."""
    values = {name: float(value) for name, value in (pair.split("=") for pair in case.inputs.split(";"))}
    assert factor_of(case.kind, values) == pytest.approx(case.expected, abs=case.tolerance)


def test_basal_area_factor_conversion():
    """Published: 1 ft2/ac = 0.229568 m2/ha, unit bridge exact by definition of foot and acre."""
    assert PlotDesign.angle_count(1.0, "ft2/ac").basal_area_factor == pytest.approx(0.229568, abs=5e-7)
    with pytest.raises(SettingsError, match="basal area factor"):
        PlotDesign.angle_count(1.0, "m2/ac")


def test_angle_count_returns_the_basal_area():
    """Identity: expansion factor times cross-section is the basal area factor, whatever the diameter."""
    dbh = np.array([7.0, 25.0, 80.0])
    trees, visits = make_trees(dbh), make_visits()
    factor = expansion_factors(trees, visits, visit_index(trees, visits), PlotDesign.angle_count(4.0))
    assert factor * np.pi * (dbh / 200) ** 2 == pytest.approx(4.0)


def test_tree_below_the_smallest_limit_has_no_factor():
    trees, visits = make_trees([4.9, 5.0, 19.9, 20.0]), make_visits()
    design = PlotDesign.circles([4.0, 12.6], [5.0, 20.0])
    factor = expansion_factors(trees, visits, visit_index(trees, visits), design)
    assert np.isnan(factor[0])
    # Identity: 1 / area of the circle the diameter belongs to.
    assert factor[1:] == pytest.approx(1e4 / np.pi / np.array([16.0, 16.0, 12.6**2]))


def test_share_inside_and_missing_subplots_enter_the_area():
    trees, visits = make_trees([30.0]), make_visits(share_inside=0.25, n_subplots=2)
    factor = expansion_factors(trees, visits, visit_index(trees, visits), PlotDesign.circles([10.0], [0.0], subplots=4))
    # Identity: two subplots of a quarter of the circle each.
    assert factor[0] == pytest.approx(1e4 / (np.pi * 100) / 2 / 0.25)


def test_census_takes_the_area_of_the_plot():
    trees, visits = make_trees([30.0]), make_visits(plot_area_ha=0.04)
    factor = expansion_factors(trees, visits, visit_index(trees, visits), PlotDesign("census"))
    assert factor[0] == pytest.approx(25.0)


def test_factor_given_per_row_is_kept():
    trees, visits = make_trees([30.0], weight=0.5).assign(expansion_per_ha=50.0), make_visits()
    factor = expansion_factors(trees, visits, visit_index(trees, visits), PlotDesign("weighted"))
    assert factor[0] == 25.0


def test_tree_without_a_visit_has_no_factor():
    trees, visits = make_trees([30.0], plot="B"), make_visits()
    index = visit_index(trees, visits)
    assert index.tolist() == [-1]
    assert np.isnan(expansion_factors(trees, visits, index, PlotDesign.circles([10.0], [0.0]))[0])


def evaluated(biomass, fraction=0.5, **columns):
    biomass = np.asarray(biomass, dtype=float)
    return make_trees(
        np.full(len(biomass), 20.0), biomass_kg=biomass, carbon_kg=biomass * fraction, expansion=100.0, **columns
    )


def sums_of(trees, visits):
    no = np.zeros(len(trees), dtype=bool)
    return plot_sums(trees, visit_index(trees, visits), len(visits), conifer=no)


PLOTS = pd.DataFrame({"plot": ["A", "B"], "parcel": ["p", "p"], "stratum": ["s", "s"], "inside": True})


def test_visited_empty_plot_is_zero_and_unvisited_is_missing():
    visits = pd.concat([make_visits(), make_visits(plot="B")], ignore_index=True).assign(visited=[True, True])
    design = PlotDesign.circles([10.0], [0.0])
    table, _ = plot_parts(
        visits, PLOTS, sums_of(evaluated([100.0]), visits), parts=["above_ground.trees"], design=design
    )
    # Identity: 100 kg x 0.5 x 100 per ha = 5 t C/ha.
    assert table.set_index("plot")["above_ground.trees"].to_dict() == {"A": 5.0, "B": 0.0}
    visits["visited"] = [True, False]
    table, _ = plot_parts(
        visits, PLOTS, sums_of(evaluated([100.0]), visits), parts=["above_ground.trees"], design=design
    )
    assert table["plot"].tolist() == ["A"]


def test_stand_root_model_is_applied_to_the_plot_not_the_tree():
    """Two trees on one plot: roots of the sum, not the sum of the roots (the relation is not linear)."""
    visits, design = make_visits(), PlotDesign.circles([10.0], [0.0])
    table, _ = plot_parts(
        visits,
        PLOTS,
        sums_of(evaluated([600.0, 400.0]), visits),
        parts=["above_ground.trees", "below_ground.roots"],
        design=design,
        root_model="cairns97_general",
    )
    shoot = 100.0  # t/ha
    # Published relation: Cairns et al. 1997 eq 1, as quoted in CDM AR-TOOL14 v04.2 p. 25; carbon fraction 0.5.
    roots = np.exp(-1.085 + 0.9256 * np.log(shoot))
    assert table["below_ground.roots"].iloc[0] == pytest.approx(roots * 0.5)


def test_rows_set_aside_do_not_count():
    visits = make_visits()
    trees = evaluated([100.0, 900.0]).assign(used=[True, False])
    assert sums_of(trees, visits).carbon.tolist() == [5.0]


@given(st.lists(st.floats(0, 5000), min_size=1, max_size=30), st.randoms())
def test_batches_add_up_and_order_does_not_matter(biomass, random):
    visits = make_visits()
    trees = evaluated(biomass)
    whole = sums_of(trees, visits)
    order = list(range(len(trees)))
    random.shuffle(order)
    half = len(order) // 2
    parts = sums_of(trees.iloc[order[:half]], visits) + sums_of(trees.iloc[order[half:]], visits)
    assert isinstance(parts, PlotSums)
    assert parts.carbon == pytest.approx(whole.carbon, rel=1e-12)
