"""Coverage of the intervals, by simulation on mapped stands; writes ``docs/coverage.md``.

Thousands of samples of circular plots are drawn in stands whose carbon is known stem by stem, and the program's own
estimators are held against it. Needs the reference folder (``LANDCARBON_REFERENCE``, else ``../shared``).

    python tests/bench/coverage.py [--repeats N] [--out FILE]
"""

from __future__ import annotations

import argparse
import os
import sys
import time
from collections.abc import Iterator
from pathlib import Path
from typing import Any

import numpy as np
import pandas as pd

sys.path.insert(0, str(Path(__file__).resolve().parent))

from coverage_draws import (
    EDGES,
    all_centres,
    expected,
    grid_draws,
    measure,
    plot_table,
    random_draws,
    strip_draws,
    two_surveys,
)
from coverage_more import parcel_rows, raster_rows
from coverage_score import change, rows_of, stocks
from coverage_stands import ROOT, Stand, make_raster, read_settings, read_stand
from coverage_text import page

RADII = {"small": "radius_m", "large": "radius_large_m"}
DESIGNS = {"random": random_draws, "grid": grid_draws}


def reference_folder() -> Path:
    given = os.environ.get("LANDCARBON_REFERENCE")
    return Path(given) if given else ROOT.parent / "shared"


def enumerate_centres(stand: Stand, radius: float, size: str, step: float) -> Iterator[dict[str, Any]]:
    """Estimate from all plot centres of a fine grid, by edge rule, beside the exact limit."""
    found = measure(stand, all_centres(stand, step), radius, ["cut", "mirage", "none"])
    found |= measure(stand, all_centres(stand, step, radius), radius, ["border strip"])
    for edge in EDGES:
        density, share = found[edge]
        mean = (share[:, None] * density).sum(axis=0) / share.sum()
        exact = expected(stand, radius, edge)
        apart = (share / share.mean())[:, None] * (density - mean)
        yield {
            "stand": stand.name,
            "size": size,
            "radius": radius,
            "edge": edge,
            "centres": int((share > 0).sum()),
            "mean": 100.0 * (mean[0] / stand.truth[0] - 1.0),
            "exact": 100.0 * (exact[0] / stand.truth[0] - 1.0),
            "change": 100.0 * (np.diff(exact)[0] / np.diff(stand.truth)[0] - 1.0),
            "cv": 100.0 * apart[:, 0].std() / mean[0],
            **moments(apart[:, 0], ""),
            **moments(apart[:, 1] - apart[:, 0], "_change"),
        }


def moments(apart: np.ndarray, end: str) -> dict[str, float]:
    """Skewness and excess kurtosis of deviations from their mean."""
    spread = apart.std()
    return {f"skewness{end}": (apart**3).mean() / spread**3, f"kurtosis{end}": (apart**4).mean() / spread**4 - 3.0}


def stock_rows(stand: Stand, radius: float, size: str, settings: dict[str, Any]) -> Iterator[dict[str, Any]]:
    """Stocks at the date of the map by design, n, edge rule and interval."""
    rng = np.random.default_rng([settings["seed"], len(stand.xy), round(100 * radius)])
    repeats, confidence, truth = settings["repeats"], settings["confidence"], float(stand.truth[0])
    for plots in settings["plots"]:
        for design, draw in DESIGNS.items():
            draws = draw(rng, stand, repeats, plots)
            found = measure(stand, draws.centre, radius, ["cut", "mirage", "none"])
            for edge, (density, share) in found.items():
                labels = {"stand": stand.name, "size": size, "design": design, "plots": plots, "edge": edge}
                made = stocks(stand, draws, density[:, 0], share, confidence)
                yield rows_of(made, truth, **labels, method="t")
                yield rows_of(made.log(confidence), truth, **labels, method="log")
                if design == "grid" and edge != "none":
                    made = stocks(stand, draws, density[:, 0], share, confidence, variance="neighbours")
                    yield rows_of(made, truth, **labels, method="neighbours")
        draws = strip_draws(rng, stand, repeats, plots, radius)
        density, share = measure(stand, draws.centre, radius, ["border strip"])["border strip"]
        labels = {"stand": stand.name, "size": size, "design": "random", "plots": plots, "edge": "border strip"}
        yield rows_of(stocks(stand, draws, density[:, 0], share, confidence), truth, **labels, method="t")


def change_rows(stand: Stand, radius: float, settings: dict[str, Any]) -> Iterator[dict[str, Any]]:
    """Change over the growth step, from plots of which all, some or none are measured again."""
    rng = np.random.default_rng([settings["seed"], 2, len(stand.xy)])
    repeats, truth = settings["repeats"], float(np.diff(stand.truth)[0])
    for plots in settings["plots"]:
        kept = {"all": plots, "some": plots - round(plots * settings["replaced_share"]), "none": 0}
        for design, number_kept in kept.items():
            *draws, number_1, number_2 = two_surveys(rng, stand, repeats, plots, number_kept)
            found = [measure(stand, one.centre, radius, ["cut", "mirage"]) for one in draws]
            for edge in ("cut", "mirage"):
                tables = [
                    plot_table(one, seen[edge][0][:, date], seen[edge][1], f"t{date + 1}", number)
                    for date, (one, seen, number) in enumerate(zip(draws, found, (number_1, number_2), strict=True))
                ]
                labels = {"stand": stand.name, "repeat": design, "kept": number_kept, "plots": plots, "edge": edge}
                made = change(stand, tables, repeats, settings["confidence"])
                yield rows_of(made, truth, float(stand.truth[0]), **labels, method="difference")
                if design == "some":
                    made = change(stand, tables, repeats, settings["confidence"], change="best combination")
                    yield rows_of(made, truth, float(stand.truth[0]), **labels, method="best combination")


def simulate(settings: dict[str, Any], reference: Path) -> dict[str, pd.DataFrame]:
    """Run everything; tables by topic."""
    found: dict[str, list[dict[str, Any]]] = {
        "stands": [],
        "centres": [],
        "stocks": [],
        "change": [],
        "rasters": [],
        "parcels": [],
    }
    for name, chosen in settings["stands"].items():
        stand = read_stand(name, reference, settings)
        found["stands"].append(about(stand, chosen))
        for size, key in RADII.items():
            found["centres"] += enumerate_centres(stand, chosen[key], size, chosen["step_m"])
            found["stocks"] += stock_rows(stand, chosen[key], size, settings)
        radius = chosen["radius_m"]
        found["change"] += change_rows(stand, radius, settings)
        raster = make_raster(stand, radius, chosen["step_m"], settings["raster"], settings["seed"])
        found["rasters"] += raster_rows(stand, raster, radius, settings)
        found["parcels"] += parcel_rows(stand, chosen, settings)
    return {topic: pd.DataFrame(rows) for topic, rows in found.items()}


def about(stand: Stand, chosen: dict[str, Any]) -> dict[str, Any]:
    """Describe a stand for the page."""
    there = stand.dbh_cm > 0
    stems = there.sum(axis=0)
    return {
        "stand": stand.name,
        "species": chosen["scientific_name"],
        "equation": stand.equation_id,
        "area_ha": stand.area_ha,
        "stems": stems[0],
        "died": int((there[:, 0] & ~there[:, 1]).sum()),
        "new": int((~there[:, 0] & there[:, 1]).sum()),
        "truth_1": stand.truth[0],
        "truth_2": stand.truth[1],
        **{f"stems_{size}": stems[0] / stand.area_ha * np.pi * chosen[key] ** 2 / 1e4 for size, key in RADII.items()},
        **{size: chosen[key] for size, key in RADII.items()},
    }


def main() -> None:
    parser = argparse.ArgumentParser(description=__doc__, formatter_class=argparse.RawDescriptionHelpFormatter)
    parser.add_argument("--repeats", type=int, help="samples per design and n; default as in tests/data/coverage.toml")
    parser.add_argument("--out", type=Path, default=ROOT / "docs" / "coverage.md")
    given = parser.parse_args()
    settings = read_settings()
    if given.repeats:
        settings["repeats"] = given.repeats
    reference = reference_folder()
    if not (reference / "facts" / "statistics" / "stands").is_dir():
        parser.error(f"no mapped stands under {reference}; set LANDCARBON_REFERENCE")
    started = time.perf_counter()
    tables = simulate(settings, reference)
    given.out.write_text(page(tables, settings), encoding="utf-8")
    print(f"{given.out}: {time.perf_counter() - started:.0f} s")  # noqa: T201


if __name__ == "__main__":
    main()
