"""Time of the composite figures: 2,000 parcels, 20,000 plots, 6 pools and their sum, 3 surveys and 3 changes.

Run ``python tests/bench/composite_parcels.py``. Printed beside the seconds: the ratio to the direct estimates of the
same tables. Data are invented and seeded.
"""

from __future__ import annotations

import time
from collections.abc import Callable
from typing import Any

import numpy as np
import pandas as pd

from landcarbon.change import estimate_change
from landcarbon.estimate.composite import composite_change, composite_parcels
from landcarbon.estimate.stocks import estimate_stocks

POOLS = ["above_ground", "below_ground", "dead_wood", "litter", "soil", "harvested_wood"]
SURVEYS = ["2010", "2015", "2020"]


def tables(parcels: int, plots: int, strata: int) -> tuple[pd.DataFrame, pd.DataFrame, pd.DataFrame]:
    rng = np.random.default_rng(1)
    stratum = np.sort(rng.integers(0, strata, parcels))
    area = rng.lognormal(2, 0.5, parcels)
    at = rng.choice(parcels, plots, p=area / area.sum())
    truth = rng.uniform(50, 150, (strata, len(POOLS)))[stratum] + rng.normal(0, 15, (parcels, len(POOLS)))
    common = rng.normal(0, 30, (plots, 1))
    frames = []
    for number, survey in enumerate(SURVEYS):
        frame = pd.DataFrame(truth[at] + 3 * number + common + rng.normal(0, 10, (plots, len(POOLS))), columns=POOLS)
        frames.append(frame.assign(survey=survey, date=pd.Timestamp(f"{survey}-07-01")))
    table = pd.concat(frames, ignore_index=True).assign(size=1.0, inside=True)
    for name, labels in (("plot", range(plots)), ("parcel", at), ("stratum", stratum[at])):
        table[name] = pd.Categorical(np.tile(np.array([f"{name}{label}" for label in labels]), len(SURVEYS)))
    table["all"] = table[POOLS].sum(axis=1)
    labels = {"parcel": [f"parcel{i}" for i in range(parcels)], "stratum": [f"stratum{i}" for i in stratum]}
    listed = pd.DataFrame({**labels, "area_ha": area})
    return table, listed, listed.groupby("stratum", as_index=False)["area_ha"].sum()


def timed(call: Callable[[], Any]) -> tuple[float, Any]:
    begin = time.perf_counter()
    made = call()
    return time.perf_counter() - begin, made


def main() -> None:
    plots, parcels, strata = tables(2_000, 20_000, 20)
    options = {"pools": POOLS, "confidence": 0.95, "inventory_name": "bench"}
    pairs = [(SURVEYS[0], SURVEYS[1]), (SURVEYS[1], SURVEYS[2]), (SURVEYS[0], SURVEYS[2])]
    sums = {pool: [pool] for pool in POOLS}
    direct, (stocks, _) = timed(lambda: estimate_stocks(plots, strata, parcels, SURVEYS, **options))
    made = timed(lambda: composite_parcels(stocks, parcels, plots, sums, confidence=0.95))[0]
    print(f"stocks: direct {direct:.2f} s, composite {made:.2f} s, ratio {made / direct:.1f}")  # noqa: T201
    direct, changes = timed(
        lambda: pd.concat(
            [estimate_change(plots, strata, parcels, since=a, until=b, **options)[0] for a, b in pairs],
            ignore_index=True,
        )
    )
    made = timed(lambda: composite_change(changes, parcels, plots, sums, confidence=0.95))[0]
    print(f"change: direct {direct:.2f} s, composite {made:.2f} s, ratio {made / direct:.1f}")  # noqa: T201


if __name__ == "__main__":
    main()
