"""What the terminal shows: short, within a hundred columns, and nothing from a file drives the console."""

from __future__ import annotations

import dataclasses
import io
from pathlib import Path

import numpy as np
import pandas as pd
import pytest
from publish_sample import HOSTILE, sample_results
from rich.console import Console

from landcarbon.errors import UserError
from landcarbon.findings import join_findings, make_findings
from landcarbon.publish.figures import MINUS, decimals_for, figure, interval
from landcarbon.publish.provenance import count_findings
from landcarbon.publish.terminal import StepStatus, print_check, print_results
from landcarbon.publish.words import CAUTIONS, SIGN_RULE


def shown(printer, *args, **options) -> str:
    console = Console(file=io.StringIO(), width=100, highlight=False)
    printer(*args[:1], console, *args[1:], **options)
    return console.file.getvalue()


# JCGM 100:2008, section 7.2.6: the uncertainty to at most two significant digits, the estimate to the same decimals;
# its example: a value 10.057 62 ohm with uncertainty 27 milliohm is given as 10.058 ohm.
@pytest.mark.parametrize(
    ("value", "spread", "text"), [(10.05762, 0.027, "10.058"), (118.4, 9.472, "118.4"), (1698.2, 176.0, "1,698")]
)
def test_decimals_follow_the_standard_error(value, spread, text):
    assert figure(value, decimals_for(spread, value)) == text


@pytest.mark.parametrize(
    ("value", "decimals", "text"),
    [(-1234.6, 0, f"{MINUS}1,235"), (-0.04, 1, "0.0"), (np.nan, 1, "\u2013"), (0.0, 1, "0.0"), (3.0, 0, "+3")],
)
def test_figures(value, decimals, text):
    assert figure(value, decimals, sign=True) == text


def test_interval_without_bounds():
    assert interval(np.nan, 3.0, 1) == "\u2013"
    assert decimals_for(np.nan, np.nan) == 1
    assert decimals_for(0.0, 0.0) == 1


def test_overview():
    text = shown(print_results, sample_results(), folder=Path("/somewhere/results"))
    assert max(map(len, text.splitlines())) <= 100
    flat = " ".join(text.split())
    for part in (
        "Harrow Fell",
        "90 % interval",
        "all counted pools",
        "Change of the inventory",
        "set aside",
        "size slip",
        "3.75 ha not in the total",
        SIGN_RULE,
        CAUTIONS,
        "map.html",
        *sample_results().marks,
    ):
        assert part in flat, part


@pytest.mark.parametrize("by", ["stratum", "parcel"])
def test_units(by):
    text = shown(print_results, sample_results(), by=by)
    assert max(map(len, text.splitlines())) <= 100
    assert f"Stocks by {by}" in text


def test_unknown_unit():
    with pytest.raises(UserError, match="'county' is not a unit"):
        shown(print_results, sample_results(), by="county")


def test_large_figures_still_fit():
    sample = sample_results(name="A very long name of an inventory that somebody gave " * 3)
    columns = ["stock_t_c", "stock_se", "stock_low", "stock_high", "area_ha"]
    stocks = sample.stocks.assign(**{name: sample.stocks[name] * 1e4 for name in columns})
    text = shown(print_results, dataclasses.replace(sample, stocks=stocks))
    assert max(map(len, text.splitlines())) <= 100


def test_text_from_files_is_no_markup_and_no_control_code():
    name = "[bold red]x[/bold red] \x1b[31m"
    text = shown(print_results, sample_results(name=name, parcels=(*HOSTILE, "e")), by="parcel")
    assert "[bold red]x[/bold red]" in text
    assert "\x1b" not in text


def test_no_total_shows_the_strata_instead():
    sample = sample_results()
    stocks = sample.stocks[sample.stocks["by"] != "inventory"]
    change = sample.change.iloc[:0]
    text = shown(print_results, dataclasses.replace(sample, stocks=stocks, change=change))
    assert "Stocks by stratum" in text
    assert "Change of" not in text


def no_total(**figures):
    """Results of strata without a total, with two more pools; figures replace those of the strata."""
    sample = sample_results()
    strata = sample.stocks[sample.stocks["by"] == "stratum"].assign(**figures)
    pools = [strata.assign(pool=pool) for pool in ("dead_wood", "soil", "all")]
    stocks = pd.concat([*pools, sample.stocks[sample.stocks["by"] == "parcel"]], ignore_index=True)
    return dataclasses.replace(sample, stocks=stocks, change=sample.change.iloc[:0])


def test_no_total_shows_every_counted_pool_of_the_strata():
    text = shown(print_results, no_total())
    assert "every counted pool (there is no total)" in text
    lines = text.splitlines()
    first = next(place for place, line in enumerate(lines) if line.strip().startswith("oak"))
    block = lines[first : first + 9]
    for place, pool in enumerate(("dead wood", "soil", "all")):
        assert all(f" {pool} " in line for line in block[place::3]), pool
    assert sum("oak" in line for line in block) == 1
    assert " ha " in text
    assert max(map(len, lines)) <= 100
    large = no_total(stock_t_c=1.2e8, stock_se=1.0, stock_low=1e8, stock_high=1.3e8, area_ha=1e6)
    assert max(map(len, shown(print_results, large).splitlines())) <= 100


def test_no_total_and_no_areas_shows_densities_alone():
    text = shown(print_results, no_total(area_ha=np.nan, stock_t_c=np.nan, stock_se=np.nan))
    head = next(line for line in text.splitlines() if line.split()[:1] == ["stratum"])
    assert head.split() == ["stratum", "survey", "pool", "plots", "t", "C/ha", "SE", "90", "%", "interval"]


def test_land_that_was_not_estimated_has_no_area_of_zero():
    sample = sample_results()
    here = sample.stocks["by"].eq("inventory") & sample.stocks["pool"].eq("below_ground")
    here &= sample.stocks["survey"].eq("2019")
    figures = [name for name in sample.stocks if name.startswith(("density", "stock")) or name == "df"]
    stocks = sample.stocks.copy()
    stocks.loc[here, figures] = np.nan
    stocks.loc[here, ["area_ha", "plots"]] = 0
    text = shown(print_results, dataclasses.replace(sample, stocks=stocks))
    line = next(line for line in text.splitlines() if "not estimable" in line and "below-ground" in line)
    assert line.split()[3:5] == ["\u2013", "0"]
    assert "0.0" not in line


def many_findings():
    parts = [
        make_findings(f"{severity} {number:02d}", None, severity=severity, table="trees", message="x", carbon_kg=carbon)
        for severity, carbon in (("note", 9e6), ("warning", np.nan), ("error", np.nan))
        for number in range(8)
    ]
    two = pd.DataFrame({"row": [2, 3]})
    parts += [
        make_findings("often", two, severity="warning", table="trees", message="x"),
        make_findings("light", None, severity="warning", table="trees", message="x", carbon_kg=40.0),
        make_findings("heavy", two, severity="warning", table="trees", message="x", carbon_kg=30.0),
    ]
    return dataclasses.replace(sample_results(), findings=join_findings(parts))


def test_findings_errors_first_then_by_carbon_then_by_count():
    """Identity: two rows of 30 kg outweigh one of 40 kg; what has no carbon stands by its count."""
    counts = count_findings(many_findings().findings)
    assert list(counts["severity"].drop_duplicates()) == ["error", "warning", "note"]
    assert list(counts.loc[counts["severity"] == "warning", "rule"])[:4] == ["heavy", "light", "often", "warning 00"]
    assert counts.set_index("rule")["carbon_kg"][["heavy", "light"]].tolist() == [60.0, 40.0]
    assert counts.set_index("rule")["carbon_kg"].isna()["often"]


def test_twenty_rules_are_shown_and_the_rest_counted():
    text = shown(print_results, many_findings())
    section = text.split("Findings (", 1)[1]
    assert section.startswith("7 more rules in findings.csv)")
    lines = [line.split()[0] for line in section.splitlines() if line.strip().startswith(("error", "warning", "note"))]
    assert lines == ["error"] * 8 + ["warning"] * 11 + ["note"]
    assert max(map(len, text.splitlines())) <= 100


def test_check():
    text = shown(print_check, sample_results())
    assert "trees.csv line 4, plot P1: diameter ten times that of the other survey [dbh_cm 310.0]" in text
    empty = dataclasses.replace(sample_results(), findings=sample_results().findings.iloc[:0])
    assert "No findings" in shown(print_check, empty)


def test_plots_that_do_not_vary_give_no_interval():
    sample = sample_results()
    flat = sample.stocks["pool"].eq("below_ground")
    zero = {name: sample.stocks[name].mask(flat, 0.0) for name in ("density_t_c_ha", "density_se", "density_low")}
    zero |= {name: sample.stocks[name].mask(flat, 0.0) for name in ("density_high", "stock_t_c", "stock_se")}
    text = shown(print_results, dataclasses.replace(sample, stocks=sample.stocks.assign(**zero)))
    line = next(line for line in text.splitlines() if "2014" in line and "below-ground" in line)
    assert "0.0 to 0.0" not in text
    assert " \u2013 " in line
    assert "no interval: no variation between plots" in text
    assert "no variation" not in shown(print_results, sample)


def test_no_parcels_is_said():
    sample = sample_results()
    stocks, change = (frame[frame["by"] != "parcel"] for frame in (sample.stocks, sample.change))
    text = shown(print_results, dataclasses.replace(sample, stocks=stocks, change=change), by="parcel")
    assert "There are no parcels in these results" in text


def test_status_is_silent_where_nobody_watches():
    console = Console(file=io.StringIO(), width=100)
    with StepStatus(console) as status:
        status("reading [the] files")
    assert console.file.getvalue().strip() == ""
