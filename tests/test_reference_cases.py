"""Every reference case of the estimates against the program, and the page that lists them.

Published: worked examples, to the printed digits. Independent: results of general-purpose statistics packages, to 1e-6
relative. Source, place and how each is known stand in data/statistics_*.json and in docs/reference-cases.md.
"""

from __future__ import annotations

import sys
from pathlib import Path

import numpy as np
import pytest
from reference_cases import LEFT_OUT, MUST_DIFFER, lines
from reference_io import ADAPTERS, UNCOVERED, Case, agrees, difference, inside, outside, outside_names, reference_ids

ROOT = Path(__file__).resolve().parent.parent
sys.path.insert(0, str(ROOT / "tools"))
from make_reference_table import PAGE, kept, page, rows_of  # noqa: E402

INSIDE = inside()
OUTSIDE = outside_names()
NOT_ANSWERED = 7  # results without an answer; the page gives the reason of each


def hold(case: Case) -> None:
    bad = [
        f"{line.quantity}: expected {line.expected}, ours {line.ours} ({line.form} {line.agreement})"
        for line in lines(case)
        if not line.good
    ]
    assert bad == []


@pytest.mark.parametrize("name", INSIDE)
def test_case(name: str) -> None:
    hold(INSIDE[name])


@pytest.mark.real
@pytest.mark.parametrize("name", OUTSIDE)
def test_case_outside_the_project(name: str, reference: Path) -> None:
    hold(outside(reference)[name])


def test_every_case_has_an_answer() -> None:
    assert set(ADAPTERS) | set(UNCOVERED) == set(INSIDE) | set(OUTSIDE)
    assert not set(ADAPTERS) & set(UNCOVERED)
    assert not set(INSIDE) & set(OUTSIDE)
    assert UNCOVERED == {}


def test_mistakes_are_held_as_mistakes() -> None:
    """Whatever a case names wrong must differ from ours."""
    named = [line for case in INSIDE.values() for line in lines(case) if "wrong" in line.quantity]
    assert len(named) > 4
    assert {line.form for line in named} == {MUST_DIFFER}


@pytest.mark.real
def test_no_case_of_the_reference_folder_is_forgotten(reference: Path) -> None:
    names = reference_ids(reference)
    assert len(names) == len(set(names))
    assert set(names) == set(INSIDE) | set(OUTSIDE)


def test_results_without_an_answer_are_counted() -> None:
    rows = [text for texts in kept(PAGE.read_text(encoding="utf-8")).values() for text in texts]
    left = [text for text in rows if f" | {LEFT_OUT} | " in text]
    assert len(left) == NOT_ANSWERED
    assert not any(text.endswith("|  |") for text in left)
    assert not any(text.endswith("| NO |") for text in rows)
    assert sum(f" | {MUST_DIFFER} | " in text for text in rows) > 10


def test_page_is_current() -> None:
    """Lines of cases outside the project are kept here; the next test makes them anew."""
    assert PAGE.read_text(encoding="utf-8") == page(None)


@pytest.mark.real
def test_page_is_current_outside_the_project(reference: Path) -> None:
    listed = kept(PAGE.read_text(encoding="utf-8"))
    for name, case in outside(reference).items():
        assert listed[name] == rows_of(case)


def test_disagreement_is_noticed() -> None:
    printed = {"value": [12.3, 1.8], "decimals": 1}
    assert agrees(printed, [12.34, 1.75])
    assert not agrees(printed, [12.36, 1.8])
    assert agrees([1.0, None, 0.0], [1.0 + 5e-7, np.nan, 0.0])
    assert not agrees([1.0], [1.0 + 5e-6])
    assert not agrees([1.0, None], [1.0, 2.0])
    assert not agrees(1.0, np.nan)
    with pytest.raises(ValueError, match=r"shape \(2,\) where \(1,\) is expected"):
        difference([1.0], [1.0, 2.0])
