"""Stocks and changes of many plots in many parcels, as a ratio to one pass of numpy over the same table.

Every stock of every survey and every change between two surveys, at the levels inventory, stratum and parcel. The floor
is one sum by parcel and survey of each column, made from the same frame in the same run.

    python tests/bench/many_parcels.py [--plots N] [--parcels N] [--runs N] [--parts] [--clusters N]
"""

from __future__ import annotations

import argparse
import itertools
import statistics
import sys
import time
from collections.abc import Callable

import numpy as np
import pandas as pd

from landcarbon.statements import state_change, state_stocks

POOLS = ("above_ground", "below_ground", "dead_wood", "litter", "soil", "harvested_wood")
SURVEYS = ("2009", "2014", "2019")
STRATA = 12


def make_table(plots: int, parcels: int, *, share: float = 0.9, parts: bool = False, cluster: int = 0) -> pd.DataFrame:
    """Invented plots: strata of unequal size, parcels inside strata, most plots seen at every survey."""
    rng = np.random.default_rng(7)
    parcel = rng.integers(0, parcels, plots)
    base = rng.gamma(3.0, 20.0, (plots, len(POOLS)))
    frames = []
    for number, survey in enumerate(SURVEYS):
        rows = np.flatnonzero(rng.random(plots) < share)
        frame = pd.DataFrame(
            {
                "survey": survey,
                "plot": np.char.add("P", np.char.zfill(rows.astype(str), 6)),
                "parcel": np.char.add("L", np.char.zfill(parcel[rows].astype(str), 4)),
                "stratum": np.char.add("S", (parcel[rows] % STRATA).astype(str)),
                "date": pd.Timestamp(f"{survey}-05-01") + pd.to_timedelta(rng.integers(0, 150, len(rows)), "D"),
                "size": np.where(rng.random(len(rows)) < 0.1, rng.uniform(0.3, 1.0, len(rows)), 1.0),
                "inside": True,
            }
        )
        value = base[rows] * (1.0 + 0.02 * number) + rng.normal(0.0, 2.0, (len(rows), len(POOLS)))
        for place, pool in enumerate(POOLS):
            frame[f"{pool}.measured"] = value[:, place]
        if parts:  # soil on every third plot: its sum with the others then rests on different plots
            frame["soil.measured"] = np.where(rows % 3 == 0, frame["soil.measured"], np.nan)
        if cluster:
            frame["cluster"] = np.char.add("C", (rows // cluster).astype(str))
        frames.append(frame)
    labels = {name: "category" for name in ("survey", "plot", "parcel", "stratum")}
    return pd.concat(frames, ignore_index=True).astype(labels)


def tables(parcels: int) -> dict[str, object]:
    """Strata and parcels with areas."""
    names = np.char.add("L", np.char.zfill(np.arange(parcels).astype(str), 4))
    area = np.linspace(1.0, 9.0, parcels)
    stratum = np.char.add("S", (np.arange(parcels) % STRATA).astype(str))
    listed = pd.DataFrame({"parcel": names, "area_ha": area, "stratum": stratum})
    strata = listed.groupby("stratum", as_index=False)["area_ha"].sum()
    return {"strata": strata, "parcels": listed, "confidence": 0.95, "inventory_name": "bench"}


def ours(table: pd.DataFrame, options: dict[str, object]) -> tuple[pd.DataFrame, pd.DataFrame]:
    """All stocks and all changes."""
    sums = {pool: [f"{pool}.measured"] for pool in POOLS}
    sums["all"] = [column for columns in sums.values() for column in columns]
    stocks, _ = state_stocks(table, sums, list(SURVEYS), **options)
    changes = [state_change(table, sums, *pair, **options)[0] for pair in itertools.combinations(SURVEYS, 2)]
    return stocks, pd.concat(changes, ignore_index=True)


def floor(table: pd.DataFrame) -> np.ndarray:
    """One pass: sums of every column by parcel and survey."""
    value = table[[f"{pool}.measured" for pool in POOLS]].to_numpy()
    cell = table["parcel"].cat.codes.to_numpy() * len(SURVEYS) + table["survey"].cat.codes.to_numpy()
    return np.stack([np.bincount(cell, weights=np.nan_to_num(column)) for column in value.T], axis=1)


def timed(step: Callable[[], object]) -> float:
    """Seconds of one call."""
    start = time.perf_counter()
    step()
    return time.perf_counter() - start


def main() -> None:
    """Print medians and the ratio."""
    parser = argparse.ArgumentParser(description=__doc__, formatter_class=argparse.RawDescriptionHelpFormatter)
    parser.add_argument("--plots", type=int, default=200_000)
    parser.add_argument("--parcels", type=int, default=2_000)
    parser.add_argument("--runs", type=int, default=3)
    parser.add_argument("--parts", action="store_true", help="soil on every third plot only")
    parser.add_argument("--clusters", type=int, default=0, help="plots to a cluster")
    given = parser.parse_args()
    table = make_table(given.plots, given.parcels, parts=given.parts, cluster=given.clusters)
    options = tables(given.parcels)
    stocks, change = ours(table, options)
    floor(table)
    seconds = [(timed(lambda: ours(table, options)), timed(lambda: floor(table))) for _ in range(given.runs)]
    mine, least = (statistics.median(column) for column in zip(*seconds, strict=True))
    sys.stdout.write(
        f"{len(table):,} plot rows, {given.parcels:,} parcels, {len(POOLS)} pools, {len(SURVEYS)} surveys\n"
    )
    sys.stdout.write(f"{len(stocks):,} stocks and {len(change):,} changes in {mine:.2f} s\n")
    sys.stdout.write(f"one pass of numpy {least:.3f} s, ratio {mine / least:.0f}\n")


if __name__ == "__main__":
    main()
