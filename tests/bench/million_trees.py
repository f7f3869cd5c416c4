"""One million trees through trees -> plots -> stocks, as a ratio to a floor measured in the same run.

The floor is the least any program must do with the same file: read it with pyarrow, evaluate one log-linear equation
per tree with gathered coefficients, and sum over plots with one bincount.

    python tests/bench/million_trees.py [--trees N] [--runs N]
"""

from __future__ import annotations

import argparse
import statistics
import tempfile
import time
from collections.abc import Callable
from pathlib import Path

import numpy as np
import pandas as pd
import pyarrow.parquet as pq

from allometry.assign import assign
from allometry.catalogue import load_catalogue
from landcarbon.columns import with_columns
from landcarbon.plots import PlotDesign, expansion_factors, plot_parts, plot_sums, visit_index
from landcarbon.pools.trees import make_tree_plan, tree_biomass, tree_findings
from landcarbon.statements import state_stocks

SPECIES = [
    "Acer rubrum", "Acer saccharum", "Betula alleghaniensis", "Carya glabra", "Fagus grandifolia", "Fraxinus americana",
    "Liriodendron tulipifera", "Nyssa sylvatica", "Picea rubens", "Pinus strobus", "Pinus taeda", "Prunus serotina",
    "Quercus alba", "Quercus rubra", "Quercus velutina", "Tilia americana", "Tsuga canadensis", "Ulmus americana",
]  # fmt: skip
SURVEYS = ["2014", "2024"]
PARCELS, STRATA, TREES_PER_VISIT = 200, 8, 50
# What the steps use; a key of the row and a factor per row, which this design has not, are left in the file.
NEEDED = ["survey", "plot", "species", "status", "dbh_cm", "height_m", "weight", "used"]


def make_tables(count: int) -> dict[str, pd.DataFrame]:
    """Invented trees on remeasured plots; figures have no meaning but their size."""
    rng = np.random.default_rng(7)
    plots = max(count // (TREES_PER_VISIT * len(SURVEYS)), STRATA * 2)
    names = np.array([f"P{i:06d}" for i in range(plots)])
    visit = np.sort(rng.integers(0, plots * len(SURVEYS), count))
    trees = pd.DataFrame(
        {
            "row_id": np.arange(count),
            "survey": pd.Categorical.from_codes(visit // plots, SURVEYS),
            "plot": pd.Categorical.from_codes(visit % plots, names),
            "species": pd.Categorical.from_codes(rng.integers(0, len(SPECIES), count), SPECIES),
            "status": pd.Categorical.from_codes((rng.random(count) < 0.06).astype(int), ["live", "dead", "absent"]),
            "dbh_cm": np.round(5 + rng.gamma(2.0, 9.0, count), 1),
            "height_m": np.full(count, np.nan),
            "expansion_per_ha": np.full(count, np.nan),
            "weight": np.ones(count),
            "used": np.ones(count, dtype=bool),
        }
    )
    parcel = np.arange(plots) % PARCELS
    table = pd.DataFrame({"plot": names, "parcel": [f"parcel {i}" for i in parcel], "inside": True})
    table["stratum"] = [f"stratum {i % STRATA}" for i in parcel]
    visits = pd.concat([table[["plot"]].assign(survey=name) for name in SURVEYS], ignore_index=True)
    visits = visits.assign(date=pd.Timestamp("2014-07-01"), visited=True, share_inside=1.0, slope_deg=0.0)
    visits = visits.assign(n_subplots=1, plot_area_ha=np.nan)
    parcels = table.drop_duplicates("parcel")[["parcel", "stratum"]].assign(area_ha=12.5)
    strata = parcels.groupby("stratum", as_index=False)["area_ha"].sum().assign(area_source="stated")
    return {"trees": trees, "plots": table, "visits": visits, "parcels": parcels, "strata": strata}


def floor(path: Path, visits: int) -> np.ndarray:
    """Read, evaluate one equation per tree, sum: nothing less will do."""
    table = pq.read_table(path)
    species = table["species"].combine_chunks().indices.to_numpy(zero_copy_only=False)
    plot = table["plot"].combine_chunks().indices.to_numpy(zero_copy_only=False)
    b0, b1 = np.linspace(-2.6, -1.9, len(SPECIES)), np.linspace(2.3, 2.5, len(SPECIES))
    mass = np.exp(b0[species] + b1[species] * np.log(table["dbh_cm"].to_numpy()))
    return np.bincount(plot, weights=mass, minlength=visits)


def ours(path: Path, tables: dict[str, pd.DataFrame]) -> pd.DataFrame:
    """The program's own steps on the same file."""
    trees = pq.read_table(path, columns=NEEDED).to_pandas(split_blocks=True)
    visits, plots = tables["visits"], tables["plots"]
    codes = trees["species"].cat.categories
    listed = pd.DataFrame({"species": codes, "scientific_name": codes, "has_height": False})
    assignments = assign(listed, region="north_america", sources=("chojnacky2014",))
    plan = make_tree_plan(assignments, load_catalogue(), carbon_domain="temperate and boreal")
    trees, _ = tree_findings(tree_biomass(trees, plan), plan)
    design = PlotDesign.circles([4.0, 12.6], [5.0, 20.0])
    index = visit_index(trees, visits)
    trees = with_columns(trees, {"expansion": expansion_factors(trees, visits, index, design)})
    position = plan.positions(trees["species"])
    sums = plot_sums(trees, index, len(visits), conifer=plan.conifer[position])
    parts = ["above_ground.trees", "below_ground.roots", "dead_wood.standing"]
    table, _ = plot_parts(visits, plots, sums, parts=parts, design=design, root_model="cairns97_temperate")
    sums_of = {**{part.split(".")[0]: [part] for part in parts}, "all": parts}
    options = {"strata": tables["strata"], "parcels": tables["parcels"], "confidence": 0.95, "inventory_name": "bench"}
    stocks, _ = state_stocks(table, sums_of, SURVEYS, **options)
    return stocks


def timed(function: Callable[[], object]) -> float:
    """Seconds of one call."""
    start = time.perf_counter()
    function()
    return time.perf_counter() - start


def main() -> None:
    """Print the medians and the ratio."""
    parser = argparse.ArgumentParser(description=__doc__)
    parser.add_argument("--trees", type=int, default=1_000_000)
    parser.add_argument("--runs", type=int, default=7)
    options = parser.parse_args()
    tables = make_tables(options.trees)
    with tempfile.TemporaryDirectory() as folder:
        path = Path(folder) / "trees.parquet"
        tables["trees"].to_parquet(path, index=False)
        floor(path, len(tables["plots"]))
        ours(path, tables)
        pairs = [(timed(lambda: floor(path, len(tables["plots"]))), timed(lambda: ours(path, tables)))
                 for _ in range(options.runs)]  # fmt: skip
    low, high = (statistics.median(values) for values in zip(*pairs, strict=True))
    ratio = statistics.median(b / a for a, b in pairs)
    print(  # noqa: T201
        f"{options.trees:,} trees, {options.runs} runs: floor {low:.3f} s, landcarbon {high:.3f} s, ratio {ratio:.2f}"
    )


if __name__ == "__main__":
    main()
