"""The list of ways to obtain a pool, and the page made from it."""

from __future__ import annotations

from pathlib import Path

from landcarbon.pools.parts import PARTS
from landcarbon.pools.registry import pools_page, ways

ROOT = Path(__file__).resolve().parent.parent


def test_every_part_has_a_way():
    listed = {(way.pool, way.part) for way in ways()}
    assert listed == {(pool, part) for pool, parts in PARTS.items() for part in parts}


def test_every_way_tells_formula_source_and_check():
    assert all(way.formula and way.source and way.check and way.accepts for way in ways())


def test_page_is_current():
    assert (ROOT / "docs" / "pools.md").read_text(encoding="utf-8") == pools_page()
