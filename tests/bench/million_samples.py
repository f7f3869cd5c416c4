"""One million pieces of wood and one million soil layers, as ratios to one million trees in the same run.

Each goes from its canonical table to carbon per plot; a row of wood or soil should take no longer than a tree does.

    python tests/bench/million_samples.py [--rows N] [--runs N]
"""

from __future__ import annotations

import argparse
import statistics
import sys
from pathlib import Path

import numpy as np
import pandas as pd

sys.path.insert(0, str(Path(__file__).resolve().parent))

from million_trees import SPECIES, SURVEYS, make_tables, timed

from allometry.assign import assign
from allometry.catalogue import load_catalogue
from landcarbon.columns import with_columns
from landcarbon.plots import PlotDesign, expansion_factors, plot_parts, plot_sums, visit_index
from landcarbon.pools.down_wood import DownWoodOptions, down_wood
from landcarbon.pools.soil import soil
from landcarbon.pools.soil_factors import SoilOptions
from landcarbon.pools.trees import label_trees, make_tree_plan, tree_biomass, tree_findings

PIECES_PER_LINE, LINES_PER_PLOT, LAYERS = 12, 3, (0.0, 10.0, 20.0, 35.0)


def base(count: int, per_plot: int, rng: np.random.Generator) -> pd.DataFrame:
    """Columns every sample table has; survey and plot follow one another."""
    place = np.arange(count) // per_plot
    survey = np.array(SURVEYS)[place % len(SURVEYS)]
    plot = np.char.add("P", np.char.zfill((place // len(SURVEYS)).astype(str), 6))
    frame = pd.DataFrame({"row_id": np.arange(count), "file": "samples.csv", "row": np.arange(count) + 2})
    return frame.assign(survey=survey, plot=plot, subplot="", used=True, date=pd.NaT)


def make_wood(count: int) -> tuple[pd.DataFrame, pd.DataFrame, pd.DataFrame]:
    """Invented pieces, lines and species."""
    rng = np.random.default_rng(5)
    per_plot = PIECES_PER_LINE * LINES_PER_PLOT
    pieces = base(count, per_plot, rng)
    pieces = pieces.assign(
        line=(np.arange(count) % LINES_PER_PLOT).astype(str),
        size_class="",
        count=1.0,
        diameter_cm=np.round(8 + rng.gamma(2.0, 5.0, count), 1),
        diameter_2_cm=np.nan,
        decay_class=rng.integers(1, 6, count).astype(str),
        wood="",
        species=np.array(SPECIES)[rng.integers(0, len(SPECIES), count)],
        tilt_deg=np.nan,
        hollow_cm=np.nan,
        sunk_share=np.nan,
        line_m=np.nan,
    )
    lines = pieces.drop_duplicates(["survey", "plot", "line"])[["file", "row", "survey", "plot", "subplot", "line"]]
    lines = lines.assign(row_id=np.arange(len(lines)), used=True, date=pd.NaT, length_m=20.0, slope_deg=0.0)
    species = pd.DataFrame({"species": SPECIES, "scientific_name": SPECIES, "wood_density_g_cm3": 0.5})
    return (
        pieces,
        lines.reset_index(drop=True),
        species.assign(conifer=species["species"].str.contains("Picea|Pinus|Tsuga")),
    )


def make_soil(count: int) -> pd.DataFrame:
    """Invented layers, three to a core."""
    rng = np.random.default_rng(6)
    layers = len(LAYERS) - 1
    layer = np.arange(count) % layers
    table = base(count, layers, rng)
    return table.assign(
        core="1",
        top_cm=np.array(LAYERS)[layer],
        bottom_cm=np.array(LAYERS)[layer + 1],
        bulk_density_g_cm3=1.0 + 0.1 * layer + rng.normal(0, 0.03, count),
        coarse_share=0.0,
        organic_carbon_share=0.04 / (1 + layer) + rng.normal(0, 0.001, count),
        organic_matter_share=np.nan,
        total_carbon_share=np.nan,
        inorganic_carbon_share=np.nan,
        cores=1.0,
    )


def trees_to_plots(tables: dict[str, pd.DataFrame]) -> pd.DataFrame:
    """Tree and plot steps of the program."""
    listed = pd.DataFrame({"species": SPECIES, "scientific_name": SPECIES, "has_height": False})
    assignments = assign(listed, region="north_america", sources=("chojnacky2014",))
    plan = make_tree_plan(assignments, load_catalogue(), carbon_domain="temperate and boreal")
    trees, _ = tree_findings(label_trees(tree_biomass(tables["trees"], plan), plan), plan)
    design = PlotDesign.circles([4.0, 12.6], [5.0, 20.0])
    index = visit_index(trees, tables["visits"])
    trees = with_columns(trees, {"expansion": expansion_factors(trees, tables["visits"], index, design)})
    conifer = plan.conifer[plan.positions(trees["species"])]
    sums = plot_sums(trees, index, len(tables["visits"]), conifer=conifer)
    table, _ = plot_parts(tables["visits"], tables["plots"], sums, parts=["above_ground.trees"], design=design)
    return table


def main() -> None:
    """Print medians and ratios."""
    parser = argparse.ArgumentParser(description=__doc__)
    parser.add_argument("--rows", type=int, default=1_000_000)
    parser.add_argument("--runs", type=int, default=5)
    options = parser.parse_args()
    tables, wood, layers = make_tables(options.rows), make_wood(options.rows), make_soil(options.rows)
    pieces, lines, species = wood
    depth = SoilOptions("fine per whole volume", depth_cm=30.0)
    mass = SoilOptions("fine per whole volume", mass_t_ha=2500.0)
    steps = {
        "trees": lambda: trees_to_plots(tables),
        "pieces": lambda: down_wood(pieces, lines, DownWoodOptions(line_m=20.0), species),
        "soil to a depth": lambda: soil(layers, depth),
        "soil to a mass": lambda: soil(layers, mass),
    }
    for step in steps.values():
        step()
    seconds: dict[str, list[float]] = {name: [] for name in steps}
    for _ in range(options.runs):
        for name, step in steps.items():
            seconds[name].append(timed(step))
    for name, values in seconds.items():
        ratio = statistics.median(a / b for a, b in zip(values, seconds["trees"], strict=True))
        median = statistics.median(values)
        print(f"{options.rows:,} rows of {name}: {median:.3f} s, {ratio:.2f} of the trees")  # noqa: T201


if __name__ == "__main__":
    main()
