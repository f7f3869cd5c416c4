"""Findings on the equations in effect. All data are invented."""

from __future__ import annotations

import pandas as pd
from builders import make_trees

from landcarbon.check import memory_findings, range_findings, species_findings

ASSIGNMENTS = pd.DataFrame(
    {
        "species": ["FASY", "QUROB", "XX", ""],
        "scientific_name": ["Fagus sylvatica", "Quercus rober", "gibberish", ""],
        "accepted_name": ["Fagus sylvatica", "Quercus", "gibberish", ""],
        "equation_id": ["beech", "oaks", "any", "any"],
        "suggestion": ["", "Quercus robur", "", ""],
        "rung": ["species", "genus", "generic", "generic"],
        "known": ["read", "memory", "memory", "memory"],
        "name_known": [True, False, False, False],
    }
)


def trees(**columns) -> pd.DataFrame:
    count = len(next(iter(columns.values())))
    return make_trees([{name: values[at] for name, values in columns.items()} for at in range(count)])


def test_unknown_names_with_a_suggestion():
    table = trees(species=["FASY", "QUROB", "QUROB", "XX", ""])
    found = species_findings(ASSIGNMENTS, table)
    assert found["rule"].tolist() == ["species unknown", "species unknown", "species blank"]
    assert found["value"].tolist() == ["QUROB (Quercus rober)", "XX (gibberish)", ""]
    assert (
        "computed with equation oaks, chosen on the rung genus: 2. Did you mean Quercus robur?"
        in found["message"].iloc[0]
    )
    assert "Did you mean" not in found["message"].iloc[1]
    assert found["used"].all()


def test_only_rows_in_use_ask_for_a_name():
    table = trees(species=["QUROB", "XX"], used=[False, True], status=["live", "absent"])
    assert species_findings(ASSIGNMENTS, table).empty


def test_all_names_known():
    assert species_findings(ASSIGNMENTS.iloc[:1], trees(species=["FASY"])).empty


def test_equations_known_from_memory_only():
    table = trees(species=["FASY", "QUROB", "XX", ""]).assign(biomass_kg=[100.0, 50.0, 30.0, 20.0])
    found = memory_findings(ASSIGNMENTS, table)
    assert found["value"].tolist() == ["any", "oaks"]
    # identity: 50 of 200 kg
    assert ": 2, with 25.0% of the biomass" in found["message"].iloc[0]
    assert ": 1, with 25.0% of the biomass" in found["message"].iloc[1]
    assert found["severity"].tolist() == ["warning", "warning"]


def test_memory_without_biomass_counts_rows():
    found = memory_findings(ASSIGNMENTS, trees(species=["QUROB"]))
    assert "rest on it: 1." in found["message"].iloc[0]


def test_trees_beyond_the_range_of_their_equation():
    table = trees(species=["FASY"] * 4, survey=["2014", "2014", "2019", "2019"], used=[True, True, True, False]).assign(
        scientific_name="Fagus sylvatica",
        equation="beech",
        biomass_kg=[100.0, 300.0, 100.0, 9000.0],
        out_of_range=[False, True, False, True],
    )
    found = range_findings(table)
    assert found["rule"].tolist() == ["beyond diameter range"]
    assert found["value"].tolist() == ["beech"]
    assert "Trees of Fagus sylvatica outside the diameter range of the equation: 1 of 3" in found["message"].iloc[0]
    # identity: 300 of 500 kg in both surveys
    assert "60.0%" in found["message"].iloc[0]


def test_shares_are_per_hectare_where_expansion_is_known():
    table = trees(species=["FASY"] * 2).assign(
        scientific_name="Fagus sylvatica",
        equation="beech",
        biomass_kg=[100.0, 100.0],
        out_of_range=[False, True],
        expansion=[30.0, 10.0],
    )
    # identity: 10 of 40 trees per hectare, all of one mass
    assert "They hold 25.0% of the biomass" in range_findings(table)["message"].iloc[0]


def test_nothing_beyond_the_range():
    table = trees(species=["FASY"]).assign(scientific_name="F", equation="b", biomass_kg=1.0, out_of_range=False)
    assert range_findings(table).empty
