"""Searching the published equations, root models and height curves, and what is printed of them."""

from __future__ import annotations

import io
import os
import subprocess
import sys
from pathlib import Path

import pytest
from rich.console import Console

from landcarbon.errors import UserError
from landcarbon.publish.equation_list import find_published, one_published
from landcarbon.publish.terminal_equations import print_found, print_published

ROOT = Path(__file__).resolve().parent.parent


def shown(printer, *args, width=100, terminal=False, **options) -> str:
    console = Console(
        file=io.StringIO(), width=width, highlight=False, force_terminal=terminal, color_system=None, no_color=True
    )
    printer(*args, console, **options)
    return console.file.getvalue()


@pytest.mark.parametrize("width", [50, 80, 100])
@pytest.mark.parametrize("terminal", [True, False])
def test_ids_are_never_broken(width, terminal):
    found = find_published("lambert2005 quercus")
    assert len(found.equations) > 5
    text = shown(print_found, found, width=width, terminal=terminal)
    for name in found.equations["equation_id"]:
        assert name in text


def test_long_lists_say_how_long_they_are():
    found = find_published()
    text = shown(print_found, found)
    assert f"the first 60 of {len(found.equations)}" in text
    assert f"and {len(found.equations) - 60} more" in text
    assert found.roots.empty
    assert found.forms.empty


def test_words_match_in_any_order_and_case():
    ids = set(find_published("Fagus sylvatica").equations["equation_id"])
    assert ids
    assert set(find_published("SYLVATICA fagus").equations["equation_id"]) == ids
    assert not find_published("chojnacky heath jenkins").equations.empty  # authors in the reference


def test_root_models_and_height_curves_are_found():
    assert "cairns97_temperate" in set(find_published("cairns").roots["model_id"])
    assert len(find_published("root").roots) > 100
    assert list(find_published("naslund").forms["form"]) == ["naslund", "naslund_cubic"]
    heights = find_published(component="height")
    assert set(heights.equations["component"]) == {"height"}
    assert "naslund" in set(heights.forms["form"])
    assert not find_published(component="bgb").roots.empty


def test_regions_and_components_are_checked():
    with pytest.raises(UserError, match=r"no region 'mars'.*australia, europe, mangrove, north_america, tropics"):
        find_published(region="mars")
    with pytest.raises(UserError, match=r"no component 'folage'.*Did you mean 'foliage'"):
        find_published(component="folage")
    found = find_published(region="North America")
    assert set(found.equations["region"]) == {"north_america", "any"}
    assert list(found.roots["model_id"]) == ["cairns97_temperate"]  # default of the region


def test_no_hit_is_said():
    text = " ".join(shown(print_found, find_published("xyzzy"), text="xyzzy").split())
    assert "Nothing matches 'xyzzy'" in text
    assert "--id" not in text


def test_a_root_model_in_full():
    """Published: Cairns et al. 1997 by way of Pearson, Walker and Brown 2005, p. 27: -1.0587, 0.8836, 0.284."""
    kind, facts = one_published("cairns97_temperate")
    assert kind == "root model for stands (t/ha of dry matter)"
    told = dict(facts)
    assert (told["b0"], told["b1"], told["b2"]) == (-1.0587, 0.8836, 0.284)
    assert told["level"] == "stand"
    assert told["known"] == "secondary"
    assert "Pearson" in told["note"]
    assert told["range of stand biomass"] == "none printed"
    text = shown(print_published, kind, facts)
    for part in ("-1.0587", "0.8836", "0.284", "cairns1997", "stand"):
        assert part in text, part


def test_sets_of_ratios_and_ratios_of_trees_in_full():
    """Published: IPCC 2006 Vol 4 Table 4.4, p. 4.49, temperate conifers: 0.40, 0.29, 0.20 by stand biomass."""
    _, facts = one_published("ipcc2006_temperate_conifer")
    text = " ".join(str(value) for _, value in facts)
    for part in ("ratio 0.4,", "to 50 t/ha", "ratio 0.29", "ratio 0.2,", "from 150 t/ha"):
        assert part in text, part
    kind, facts = one_published("jenkins2003_coarse_root")
    assert "single trees" in kind
    assert any("jenkins2003_ratio_sw_coarse_root" in str(value) for _, value in facts)


def test_equations_and_curves_in_full():
    kind, facts = one_published("LAMBERT2005_DH_ALL_AGB")
    assert kind == "tree equation"
    told = dict(facts)
    assert told["equation id"] == "lambert2005_DH_all_agb"
    assert "Lambert" in told["publication"]
    kind, facts = one_published("naslund")
    assert kind.startswith("form of height curve")
    assert "d^2" in dict(facts)["formula"]
    with pytest.raises(UserError, match=r"no equation, root model or height curve has the id 'cairns97_temprate'.*Did"):
        one_published("cairns97_temprate")


@pytest.mark.skipif(os.name == "nt", reason="needs a POSIX shell")
def test_a_reader_that_leaves_early_is_no_fault():
    command = f"'{sys.executable}' -m landcarbon.cli equations | head -n 1; echo ${{PIPESTATUS[0]}}"
    environment = {**os.environ, "PYTHONPATH": str(ROOT), "NO_COLOR": "1"}
    done = subprocess.run(["bash", "-c", command], capture_output=True, text=True, env=environment, check=True)
    assert done.stdout.splitlines()[-1] == "0"
    assert done.stderr == ""
