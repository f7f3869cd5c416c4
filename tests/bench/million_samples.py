"""One million pieces of wood and one million soil layers, as ratios to one million trees in the same run.

Each goes from its file to stocks, as the trees do; a row of wood or soil should take no longer than a tree does.

    python tests/bench/million_samples.py [--rows N] [--runs N]
"""

from __future__ import annotations

import argparse
import statistics
import sys
import tempfile
from collections.abc import Callable
from pathlib import Path

import numpy as np
import pandas as pd
import pyarrow.parquet as pq

sys.path.insert(0, str(Path(__file__).resolve().parent))

from million_trees import SPECIES, SURVEYS, make_tables, ours, timed

from landcarbon.pools.down_wood import DownWoodOptions, down_wood
from landcarbon.pools.parts import wide_parts
from landcarbon.pools.soil import soil
from landcarbon.pools.soil_factors import SoilOptions
from landcarbon.sample_pools import pool_sums
from landcarbon.statements import state_stocks

# About as many rows to a plot as the trees have, so that rows are compared and not numbers of plots.
PIECES_PER_LINE, LINES_PER_PLOT, CORES_PER_PLOT, LAYERS = 12, 4, 8, (0.0, 5.0, 10.0, 15.0, 20.0, 30.0, 40.0)


def base(count: int, per_plot: int, rng: np.random.Generator) -> pd.DataFrame:
    """Columns every sample table has; survey and plot follow one another."""
    place = np.arange(count) // per_plot
    survey = np.array(SURVEYS)[place % len(SURVEYS)]
    plot = np.char.add("P", np.char.zfill((place // len(SURVEYS)).astype(str), 6))
    frame = pd.DataFrame({"row_id": np.arange(count), "file": "samples.csv", "row": np.arange(count) + 2})
    return frame.assign(survey=survey, plot=plot, subplot="", used=True, date=pd.NaT)


def labelled(frame: pd.DataFrame) -> pd.DataFrame:
    """Repeated labels as categories, the way reading hands them on."""
    names = ["file", "survey", "plot", "subplot", "line", "size_class", "decay_class", "wood", "species", "core"]
    return frame.astype({name: "category" for name in names if name in frame})


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
    listed = species.assign(conifer=species["species"].str.contains("Picea|Pinus|Tsuga"))
    return labelled(pieces), labelled(lines.reset_index(drop=True)), listed


def make_soil(count: int) -> pd.DataFrame:
    """Invented layers, six to a core, eight cores to a plot."""
    rng = np.random.default_rng(6)
    layers = len(LAYERS) - 1
    layer = np.arange(count) % layers
    table = base(count, layers * CORES_PER_PLOT, rng)
    table = table.assign(
        core=(np.arange(count) // layers % CORES_PER_PLOT).astype(str),
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
    return labelled(table)


def to_stocks(parts: pd.DataFrame, strata: pd.DataFrame) -> pd.DataFrame:
    """From part rows to stocks, all plots in one stratum."""
    table = wide_parts(parts).assign(parcel="", stratum=strata["stratum"].iloc[0], inside=True, size=1.0)
    table["date"] = pd.Timestamp("2014-07-01")
    stocks, _ = state_stocks(
        table, pool_sums(table), SURVEYS, strata=strata, parcels=None, confidence=0.95, inventory_name="bench"
    )
    return stocks


def main() -> None:
    """Print medians and ratios."""
    parser = argparse.ArgumentParser(description=__doc__)
    parser.add_argument("--rows", type=int, default=1_000_000)
    parser.add_argument("--runs", type=int, default=7)
    options = parser.parse_args()
    tables = make_tables(options.rows)
    pieces, lines, species = make_wood(options.rows)
    strata = pd.DataFrame({"stratum": ["all"], "area_ha": [2500.0], "area_source": ["stated"]})
    with tempfile.TemporaryDirectory() as folder:
        files = {name: Path(folder) / f"{name}.parquet" for name in ("trees", "pieces", "soil")}
        for name, table in (("trees", tables["trees"]), ("pieces", pieces), ("soil", make_soil(options.rows))):
            table.to_parquet(files[name], index=False)
        depth = SoilOptions("fine per whole volume", depth_cm=30.0)
        mass = SoilOptions("fine per whole volume", mass_t_ha=2500.0)
        wood = DownWoodOptions(line_m=20.0)

        def read(name: str) -> pd.DataFrame:
            return pq.read_table(files[name]).to_pandas(split_blocks=True)

        steps = {
            "trees": lambda: ours(files["trees"], tables),
            "pieces": lambda: to_stocks(down_wood(read("pieces"), lines, wood, species)[0], strata),
            "soil to a depth": lambda: to_stocks(soil(read("soil"), depth)[0], strata),
            "soil to a mass": lambda: to_stocks(soil(read("soil"), mass)[0], strata),
        }
        report(steps, options.rows, options.runs)


def report(steps: dict[str, Callable[[], object]], rows: int, runs: int) -> None:
    """Time the steps in turn and print medians and the ratio to the first."""
    for step in steps.values():
        step()
    seconds: dict[str, list[float]] = {name: [] for name in steps}
    for _ in range(runs):
        for name, step in steps.items():
            seconds[name].append(timed(step))
    first = next(iter(seconds.values()))
    for name, values in seconds.items():
        ratio = statistics.median(a / b for a, b in zip(values, first, strict=True))
        print(f"{rows:,} rows of {name}: {statistics.median(values):.3f} s, {ratio:.2f} of the trees")  # noqa: T201


if __name__ == "__main__":
    main()
