"""A figure can be followed back: the trees of a plot add up to what the plot shows."""

from __future__ import annotations

import dataclasses
import io
from dataclasses import replace
from pathlib import Path

import numpy as np
import pandas as pd
import pytest
from rich.console import Console

from allometry.roots import stand_roots, tree_roots
from landcarbon.api import open_inventory
from landcarbon.errors import UserError
from landcarbon.inventory import load_settings
from landcarbon.pipeline import read_and_check
from landcarbon.publish.folder import open_results, write_results
from landcarbon.publish.results import SAMPLE_FILES, parts_of_plots, sums_of_plots
from landcarbon.publish.terminal_trace import print_change_trace, print_trace
from landcarbon.trace import trace_unit, tree_shares
from landcarbon.trace_change import trace_change

ROOT = Path(__file__).resolve().parent.parent


@pytest.fixture(scope="module")
def demo():
    return open_inventory(ROOT / "demo_parcels" / "inventory.toml").results


def shown(trace, trees=10, *, width=None) -> str:
    terminal = width is not None
    console = Console(
        file=io.StringIO(), width=width or 110, highlight=False, force_terminal=terminal, color_system=None
    )
    print_trace(trace, console, trees)
    return console.file.getvalue()


def from_trees(trace) -> pd.Series:
    return trace.trees.groupby(trace.trees["plot"].astype("str"))["density_t_c_ha"].sum()


def figure_of(results, survey, pool, part):
    """Figure of each plot: of one part where parts are told, else of the pool."""
    rows = parts_of_plots(results.plots, pool)
    rows = rows[rows["part"].astype("str") == part] if len(rows) else sums_of_plots(results.plots, pool)
    rows = rows[(rows["survey"].astype("str") == survey) & rows["inside"]]
    return rows.set_index(rows["plot"].astype("str"))["density_t_c_ha"]


@pytest.mark.parametrize(("pool", "part"), [("above_ground", "trees"), ("dead_wood", "standing")])
def test_trees_add_up_to_the_plot(demo, pool, part):
    """Identity: sum over trees of mass x carbon fraction x trees per hectare = density of the plot."""
    for survey in demo.surveys["survey"].astype("str"):
        trace = trace_unit(demo, survey=survey, pool=pool)
        own = trace.trees[trace.trees["part"] == part]
        sums = own.groupby(own["plot"].astype("str"))["density_t_c_ha"].sum()
        published = figure_of(demo, survey, pool, part).dropna()
        assert len(published) > 50
        np.testing.assert_allclose(sums.reindex(published.index).fillna(0), published, rtol=1e-9, atol=1e-9)


def test_pool_all_shows_every_pool_of_a_plot(demo):
    trace = trace_unit(demo, parcel="Owl Bank", survey="2019", pool="all")
    pools = [name for name in trace.columns if name in set(demo.plots["pool"])]
    assert pools[:3] == ["above_ground", "below_ground", "dead_wood"]
    whole = trace.plots.dropna(subset="density_t_c_ha")
    np.testing.assert_allclose(whole[pools].sum(axis=1), whole["density_t_c_ha"], rtol=1e-9)
    assert set(trace.trees["pool"]) == {"above_ground", "dead_wood"}
    assert any("Below-ground biomass is not a sum over trees" in note for note in trace.notes)


def test_stand_level_roots_are_told_from_the_shoots_of_the_plot(demo):
    """Published: cairns97_temperate as allometry.roots holds it, applied anew to the figures that are shown."""
    trace = trace_unit(demo, parcel="Owl Bank", pool="below_ground")
    assert demo.settings_summary["root_model"] == "cairns97_temperate"
    assert list(trace.columns)[-2:] == ["shoot_t_ha", "carbon_fraction"]
    roots = stand_roots("cairns97_temperate", trace.plots["shoot_t_ha"]).root_t_ha
    np.testing.assert_allclose(roots * trace.plots["carbon_fraction"], trace.plots["density_t_c_ha"], rtol=1e-9)
    assert trace.trees["density_t_c_ha"].isna().all()
    text = " ".join(shown(trace).split())
    assert "stand-level root model cairns97_temperate" in text
    assert "shoot t/ha" in text


def test_tree_level_roots_add_up(demo):
    """Identity: root mass of the trees x carbon fraction of the plot's live trees."""
    trees = demo.trees[demo.trees["used"] & demo.trees["survey"].astype("str").eq("2024")]
    conifer = trees["conifer"].to_numpy(dtype=bool)
    mass = tree_roots("jenkins2003_coarse_root", trees["biomass_kg"], trees["dbh_cm"], conifer)
    shares = tree_shares(trees.assign(root_kg=mass), "below_ground", ["below_ground"], "jenkins2003_coarse_root")
    live = shares[shares["plot"].astype("str") == "A02"]
    fraction = (live["biomass_kg"] * live["expansion"] * 0.48).sum() / (live["biomass_kg"] * live["expansion"]).sum()
    assert set(live["species"].astype("str")) <= {"BE", "OA", "SY"}  # broadleaves, so 0.48 (IPCC 2006 Vol 4 Table 4.3)
    expected = (live["root_kg"] * live["expansion"]).sum() / 1000 * fraction
    assert live["density_t_c_ha"].sum() == pytest.approx(expected, rel=1e-12)


def test_pools_without_trees_say_so(demo):
    plots = demo.plots.assign(pool=demo.plots["pool"].astype("str").replace("dead_wood", "litter"))
    stocks = demo.stocks.assign(pool=demo.stocks["pool"].astype("str").replace("dead_wood", "litter"))
    if "litter" in set(demo.plots["pool"]):
        plots, stocks = demo.plots, demo.stocks
    trace = trace_unit(dataclasses.replace(demo, plots=plots, stocks=stocks), survey="2014", pool="litter")
    assert trace.trees.empty
    assert any("Not from trees" in note for note in trace.notes)


def test_parts_are_listed_where_there_are_any(demo):
    if "part" not in demo.plots:
        pytest.skip("these results have no parts")
    trace = trace_unit(demo, pool="dead_wood", survey="2024")
    assert "dead_wood.standing" in trace.columns
    assert trace.plots["plot"].is_unique


def test_printed_contributions_add_up(demo):
    """The figures as printed, to three decimals each, against the plot as printed."""
    trace = trace_unit(demo, parcel="chapel rise", survey="2024", plot="A02")
    lines = [line for line in shown(trace, 100).splitlines() if "trees_2024" in line]
    assert len(lines) == len(trace.trees)
    printed = [float(line.replace("beyond range", "").split()[-1].replace(",", "")) for line in lines]
    published = figure_of(demo, "2024", "above_ground", "trees")["A02"]
    assert sum(printed) == pytest.approx(published, abs=0.0006 * len(lines))
    assert from_trees(trace).item() == pytest.approx(published, rel=1e-9)
    assert trace.plots["trees_t_c_ha"].item() == pytest.approx(published, rel=1e-9)


def test_print_names_what_a_verifier_needs(demo):
    text = shown(trace_unit(demo, parcel="Owl Bank"))
    for part in ("curve", "measured", "trees/ha", "C fraction", "beyond range", "zianis05_093_fagus_sylvatica"):
        assert part in text, part
    assert "and 54 more" in text
    unknown = demo.trees[demo.trees["species"].astype("str") == "HX"]
    one = unknown[unknown["used"]].iloc[0]
    text = shown(trace_unit(demo, survey=str(one["survey"]), plot=str(one["plot"])), 100)
    assert "code HX" in text


def test_the_simple_mean_is_said_where_it_is_one(demo):
    found = trace_unit(demo, parcel="Owl Bank")
    mean = (found.plots["density_t_c_ha"] * found.plots["size"]).sum() / found.plots["size"].sum()
    own = replace(found, row=found.row.copy(), composition=found.composition.iloc[:0])
    own.row["density_t_c_ha"] = mean  # as of a parcel stated from its own plots
    assert "The figure is their mean, weighted by relative area" in " ".join(shown(own).split())
    assert "The figure is their mean" not in shown(trace_unit(demo))  # strata weigh by area


def test_a_composite_figure_is_laid_open(demo):
    """Identity: weight x own plots + (1 - weight) x model + adjustment is the published figure, pool by pool."""
    found = trace_unit(demo, parcel="Owl Bank", pool="all")
    parts = found.composition
    assert len(parts) == 5
    weight = parts["weight_direct"]
    made = weight * parts["direct"] + (1 - weight) * parts["synthetic"] + parts["adjustment"]
    assert np.allclose(made, parts["density"], rtol=1e-7)
    assert np.isclose(parts["density"].sum(), found.row["density_t_c_ha"], rtol=1e-8)
    text = " ".join(shown(found).split())
    assert "weight x own plots + (1 - weight) x model of the stratum + adjustment" in text
    assert trace_unit(demo, stratum="beech").composition.empty


@pytest.mark.parametrize("width", [60, 80, 200])
def test_ids_are_never_broken(demo, width):
    text = shown(trace_unit(demo, parcel="Owl Bank"), width=width)
    assert "zianis05_093_fagus_sylvatica" in text
    assert "trees_2024.xlsx 412" in text


def test_names_match_without_regard_to_case(demo):
    assert trace_unit(demo, parcel="owl bank", pool="Above-Ground").row["unit"] == "Owl Bank"
    assert trace_unit(demo, stratum="BEECH").row["unit"] == "beech"
    with pytest.raises(UserError, match=r"no parcel 'owl bak'.*Did you mean 'Owl Bank'"):
        trace_unit(demo, parcel="owl bak")
    with pytest.raises(UserError, match="no pool 'peat'"):
        trace_unit(demo, pool="peat")
    with pytest.raises(UserError, match=r"no survey '1999'.*There are: 2014, 2019, 2024"):
        trace_unit(demo, survey="1999")
    with pytest.raises(UserError, match=r"no plot of parcel Owl Bank, survey 2024, 'zz'"):
        trace_unit(demo, parcel="Owl Bank", plot="zz")
    with pytest.raises(UserError, match="a parcel and a stratum were given"):
        trace_unit(demo, parcel="Owl Bank", stratum="beech")


@pytest.fixture(scope="module")
def sampled(demo):
    """Results with the sample tables, marked as used where no finding set the row aside."""
    tables = demo.samples or read_and_check(load_settings(ROOT / "demo_parcels" / "inventory.toml")).samples
    aside = demo.findings[~demo.findings["used"]]
    marked = {}
    for name, rows in tables.items():
        gone = aside.loc[aside["table"] == name, "row_id"].dropna()
        marked[name] = rows.assign(used=rows["used"] & ~rows["row_id"].isin(gone))
    return dataclasses.replace(demo, samples=marked)


@pytest.mark.parametrize(
    ("pool", "tables"),
    [
        ("above_ground", {"saplings", "ground_vegetation"}),
        ("below_ground", set()),
        ("dead_wood", {"pieces", "lines", "stumps"}),
        ("litter", {"litter"}),
        ("soil", {"soil"}),
        ("all", {"saplings", "ground_vegetation", "pieces", "lines", "stumps", "litter", "soil"}),
    ],
)
def test_samples_behind_the_parts_of_a_pool(sampled, pool, tables):
    trace = trace_unit(sampled, pool=pool, survey="2014")
    assert set(trace.samples) == tables
    plots = set(trace.plots["plot"].astype("str"))
    for name, rows in trace.samples.items():
        assert set(rows["survey"].astype("str")) == {"2014"}
        every = sampled.samples[name]
        here = every["survey"].astype("str").eq("2014") & every["plot"].astype("str").isin(plots)
        assert sorted(rows["row_id"]) == sorted(every.loc[here, "row_id"])
    allowed = tables | {"trees"} if pool not in ("litter", "soil") else tables
    rows = {"trees", *SAMPLE_FILES}
    assert set(trace.set_aside["table"]) & rows <= allowed


def test_litter_of_a_frame_can_be_worked_out_from_what_is_shown(sampled):
    """Identity: mean over frames of fresh x dry share x 0.37 (IPCC 2006 Vol 4 Ch 2) / 0.0625 m2, in t/ha."""
    trace = trace_unit(sampled, parcel="Owl Bank", survey="2024", pool="litter", plot="D01")
    rows = trace.samples["litter"]
    rows = rows[rows["used"] & (rows["layer"].astype("str") == "L")]
    frames = rows["fresh_kg"] * rows["sub_dry_g"] / rows["sub_fresh_g"] * 0.37 / 0.0625 * 10
    assert frames.mean() == pytest.approx(trace.plots["litter.litter"].item(), rel=1e-9)


def test_faults_of_soil_do_not_show_under_litter(sampled):
    soil = sampled.findings[~sampled.findings["used"] & sampled.findings["table"].eq("soil")]
    one = soil[soil["rule"] != "plot outside"].iloc[0]
    litter = trace_unit(sampled, survey=one["survey"], pool="litter", plot=one["plot"])
    assert "soil" not in set(litter.set_aside["table"])
    shows = trace_unit(sampled, survey=one["survey"], pool="soil", plot=one["plot"])
    assert one["row_id"] in set(shows.set_aside["row_id"])
    assert not shows.samples["soil"].set_index("row_id")["used"][one["row_id"]]
    text = shown(shows, 0)
    assert f"{one['file']} {one['row']}" in text
    assert "set aside" in text.split("Samples, soil", 1)[1].splitlines()[0]
    line = next(line for line in text.splitlines() if line.strip().startswith(f"{one['file']} {one['row']} "))
    assert line.split()[-1] == "no"


def test_samples_are_limited_as_trees_are(sampled):
    trace = trace_unit(sampled, parcel="Owl Bank", survey="2024", pool="soil")
    count = len(trace.samples["soil"])
    text = shown(trace, 2)
    assert f"Samples, soil: {count} rows, listed: the first 2" in text
    assert f"... and {count - 2} more; --trees {count} lists all, --plot NAME those of one plot." in text
    assert sum(line.strip().startswith("soil.csv") for line in text.splitlines()) == 2
    for heading in ("bulk density g/cm3", "organic carbon share", "top cm"):
        assert heading in text, heading
    whole = shown(trace_unit(sampled, parcel="Owl Bank", survey="2024", pool="soil", plot="E01"), 0)
    assert sum(line.strip().startswith("soil.csv") for line in whole.splitlines()) == count
    assert "more; --trees" not in whole
    assert "soil (soil): fixed depth 30 cm." in whole


@pytest.mark.parametrize("width", [60, 200])
def test_samples_on_a_narrow_terminal_keep_file_and_line(sampled, width):
    text = shown(trace_unit(sampled, parcel="Owl Bank", survey="2024", pool="dead_wood"), width=width)
    assert "wood_2024.xlsx#wood 194" in text


def test_samples_read_back_are_traced_alike(sampled, tmp_path):
    back = open_results(write_results(sampled, tmp_path / "results"))
    for pool in ("soil", "dead_wood"):
        written, read = (shown(trace_unit(one, parcel="Owl Bank", pool=pool), 5) for one in (sampled, back))
        assert read == written


def test_text_of_samples_is_no_markup(sampled):
    rows = sampled.samples["litter"]
    layers = rows["layer"].astype("str").where(rows["layer"].astype("str") != "L", "[red]x[/red]\x1b[31m")
    hostile = dataclasses.replace(sampled, samples={"litter": rows.assign(layer=layers)})
    text = shown(trace_unit(hostile, pool="litter", survey="2014"))
    assert "[red]x[/red]" in text
    assert "\x1b" not in text


def test_results_without_samples_are_traced_as_before(sampled):
    trace = trace_unit(dataclasses.replace(sampled, samples={}), pool="soil", survey="2014")
    assert trace.samples == {}
    assert "Samples" not in shown(trace)


def test_ambiguous_names_must_be_written_as_they_are(demo):
    stocks = demo.stocks.assign(unit=demo.stocks["unit"].astype("str").replace("Sawpit", "OWL BANK"))
    twice = dataclasses.replace(demo, stocks=stocks)
    assert trace_unit(twice, parcel="OWL BANK").row["unit"] == "OWL BANK"
    with pytest.raises(UserError, match="no parcel 'owl bank'"):
        trace_unit(twice, parcel="owl bank")


def test_results_without_parcels(demo):
    stocks = demo.stocks[demo.stocks["by"] != "parcel"]
    with pytest.raises(UserError, match="no parcel in these results"):
        trace_unit(dataclasses.replace(demo, stocks=stocks), parcel="Owl Bank")


def test_a_change_is_followed_to_its_plots(demo):
    """Identity: own plots, weight, model and adjustment give the published change; all plots repeated here."""
    found = trace_change(demo, "2014", parcel="Windy Acre", pool="above_ground")
    row, parts = found.row, found.composition
    assert (row["since"], row["until"], row["unit"]) == ("2014", "2024", "Windy Acre")
    made = parts["weight_direct"] * parts["direct"] + (1 - parts["weight_direct"]) * parts["synthetic"]
    assert (made + parts["adjustment"]).iloc[0] == pytest.approx(row["change_t_c"] / row["area_ha"], rel=1e-7)
    plots = found.plots.dropna(subset="change_t_c_ha")
    mean = (plots["change_t_c_ha"] * plots["size"]).sum() / plots["size"].sum()
    assert mean + parts["raster_shift"].iloc[0] == pytest.approx(parts["direct"].iloc[0], rel=1e-6)
    assert found.plots["years"].dropna().between(9.8, 10.2).all()
    console = Console(file=io.StringIO(), width=160, color_system=None)
    print_change_trace(found, console)
    text = console.file.getvalue()
    assert "Change 2014 to 2024, pool above_ground" in text
    assert "Plots at both surveys" in text


def test_the_change_of_a_stratum_without_rasters_is_its_plots(demo):
    """Identity: all plots repeated, no raster in this stratum: the mean of their changes times the area."""
    found = trace_change(demo, "2019", stratum="mixed", pool="above_ground")
    plots = found.plots.dropna(subset="change_t_c_ha")
    assert len(plots) == len(found.plots)
    mean = (plots["change_t_c_ha"] * plots["size"]).sum() / plots["size"].sum()
    assert mean * found.row["area_ha"] == pytest.approx(found.row["change_t_c"], rel=1e-7)
    assert found.composition.empty


def test_a_change_that_is_not_stated_is_refused(demo):
    with pytest.raises(UserError, match=r"no change of inventory .* from 2024 to 2014.*"):
        trace_change(demo, "2024", survey="2014")
