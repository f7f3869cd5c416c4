"""One million pieces of wood and one million soil layers, as ratios to one million trees in the same run.

A row of wood or soil should take no longer than a tree does. Two measures: the whole program, from the tables a crew
hands over (CSV) through reading and checking to stocks, as a user meets it; and the bare steps, from a Parquet file of
checked rows to stocks. Row checks of wood and soil are part of their steps, those of trees are not.

    python tests/bench/million_samples.py [--rows N] [--runs N]
"""

from __future__ import annotations

import argparse
import statistics
import sys
import tempfile
from collections.abc import Callable
from functools import partial
from pathlib import Path

import numpy as np
import pandas as pd
import pyarrow.parquet as pq

sys.path.insert(0, str(Path(__file__).resolve().parent))

from million_trees import SPECIES, SURVEYS, make_tables, ours, timed

from landcarbon.assemble import run_stage
from landcarbon.inventory import load_settings
from landcarbon.pipeline import estimate
from landcarbon.pools.down_wood import DownWoodOptions, down_wood
from landcarbon.pools.parts import wide_parts
from landcarbon.pools.soil import soil
from landcarbon.pools.soil_factors import SoilOptions
from landcarbon.sample_pools import pool_sums
from landcarbon.statements import state_stocks

# As for the trees, only what the steps use is read: the key, file and line of a row serve findings alone.
UNUSED = ["row_id", "file", "row", "date"]
# About as many rows to a plot as the trees have, so that rows are compared and not numbers of plots.
PIECES_PER_LINE, LINES_PER_PLOT, CORES_PER_PLOT, LAYERS = 12, 4, 8, (0.0, 5.0, 10.0, 15.0, 20.0, 30.0, 40.0)


def base(count: int, per_plot: int, rng: np.random.Generator) -> pd.DataFrame:
    """Columns every sample table has; rows lie survey by survey and plot by plot, as those of the trees."""
    place = np.arange(count) // per_plot
    plots = -(-(place[-1] + 1) // len(SURVEYS))
    survey = np.array(SURVEYS)[place // plots]
    plot = np.char.add("P", np.char.zfill((place % plots).astype(str), 6))
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


PROJECT = """
[inventory]
name = "bench"
[strata]
areas = {{ all = 2500.0 }}
[plots]
file = "plots.csv"
design = {{ kind = "nested", circles = [ {{ radius_m = 4, dbh_min_cm = 5 }}, {{ radius_m = 12.6, dbh_min_cm = 20 }} ] }}
[trees]
file = "{trees}"
[surveys.2014]
since = 2014-01-01
until = 2014-12-31
[surveys.2024]
since = 2024-01-01
until = 2024-12-31
[equations]
region = "north_america"
sources = ["chojnacky2014"]
"""
WOOD = """
[samples]
pieces = "pieces.csv"
lines = "lines.csv"
[pools]
dead_wood = { how = "measured", parts = ["down"] }
"""
SOIL = """
[samples]
soil = "soil.csv"
[units.soil]
organic_carbon = "1"
[pools]
soil = "measured"
[soil]
bulk_density = "fine per whole volume"
"""
# Columns of the field tables by the name the program keeps them under.
FIELD = {
    "trees": {"species": "species", "status": "status", "dbh_cm": "dbh", "date": "date"},
    "pieces": {"line": "line", "diameter_cm": "diameter", "decay_class": "decay_class", "species": "species"},
    "lines": {"line": "line", "length_m": "length"},
    "soil": {
        "core": "core",
        "top_cm": "top",
        "bottom_cm": "bottom",
        "bulk_density_g_cm3": "bulk_density",
        "organic_carbon_share": "organic_carbon",
    },
}


def write_field(folder: Path, tables: dict[str, pd.DataFrame]) -> dict[str, Path]:
    """Write the tables of a crew and a project file for each kind; samples need a tree on every plot as well."""
    plots: set[str] = set()
    for name, table in tables.items():
        names = {"survey": "survey", "plot": "plot", **FIELD[name]}
        table[list(names)].rename(columns=names).to_csv(folder / f"{name}.csv", index=False)
        plots |= set(table["plot"].astype("str"))
    first = tables["trees"].drop_duplicates(["survey", "plot"])
    names = {"survey": "survey", "plot": "plot", **FIELD["trees"]}
    first[list(names)].rename(columns=names).to_csv(folder / "few.csv", index=False)
    pd.DataFrame({"plot": sorted(plots), "stratum": "all"}).to_csv(folder / "plots.csv", index=False)
    more = {"pieces": WOOD, "soil to a depth": SOIL + "depth_cm = 30\n", "soil to a mass": SOIL + "mass_t_ha = 2500\n"}
    files = {"trees": folder / "trees.toml"}
    files["trees"].write_text(PROJECT.format(trees="trees.csv"), encoding="utf-8")
    for number, (name, text) in enumerate(more.items()):
        files[name] = folder / f"samples{number}.toml"
        files[name].write_text(PROJECT.format(trees="few.csv") + text, encoding="utf-8")
    return files


def whole(path: Path) -> pd.DataFrame:
    """Read, check and estimate an inventory."""
    settings = load_settings(path)
    return estimate(run_stage(settings), settings).stocks


def main() -> None:
    """Print medians and ratios."""
    parser = argparse.ArgumentParser(description=__doc__)
    parser.add_argument("--rows", type=int, default=1_000_000)
    parser.add_argument("--runs", type=int, default=7)
    options = parser.parse_args()
    tables = make_tables(options.rows)
    pieces, lines, species = make_wood(options.rows)
    layers = make_soil(options.rows)
    strata = pd.DataFrame({"stratum": ["all"], "area_ha": [2500.0], "area_source": ["stated"]})
    with tempfile.TemporaryDirectory() as name:
        folder = Path(name)
        dated = tables["trees"].assign(date=tables["trees"]["survey"].astype("str") + "-07-01")
        files = write_field(folder, {"trees": dated, "pieces": pieces, "lines": lines, "soil": layers})
        print("From the field tables to stocks:")  # noqa: T201
        report({kind: partial(whole, path) for kind, path in files.items()}, options.rows, max(options.runs // 2, 1))
        stored = {kind: folder / f"{kind}.parquet" for kind in ("trees", "pieces", "soil")}
        for kind, table in (("trees", tables["trees"]), ("pieces", pieces), ("soil", layers)):
            table.to_parquet(stored[kind], index=False)
        depth = SoilOptions("fine per whole volume", depth_cm=30.0)
        mass = SoilOptions("fine per whole volume", mass_t_ha=2500.0)
        wood = DownWoodOptions(line_m=20.0)

        def read(kind: str) -> pd.DataFrame:
            needed = [column for column in pq.read_schema(stored[kind]).names if column not in UNUSED]
            return pq.read_table(stored[kind], columns=needed).to_pandas(split_blocks=True)

        steps = {
            "trees": lambda: ours(stored["trees"], tables),
            "pieces": lambda: to_stocks(down_wood(read("pieces"), lines, wood, species)[0], strata),
            "soil to a depth": lambda: to_stocks(soil(read("soil"), depth)[0], strata),
            "soil to a mass": lambda: to_stocks(soil(read("soil"), mass)[0], strata),
        }
        print("From checked rows in Parquet to stocks:")  # noqa: T201
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
