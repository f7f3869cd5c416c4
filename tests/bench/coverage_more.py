"""Estimators that borrow strength: rasters, and composite figures of parcels, held against the mapped stands."""

from __future__ import annotations

from collections.abc import Iterator
from dataclasses import replace
from typing import Any

import numpy as np
import pandas as pd
from coverage_draws import all_centres, measure, plot_table, random_draws, strata_table
from coverage_score import Made, by_sample, rows_of, stocks
from coverage_stands import Raster, Stand

from landcarbon.estimate.assist import assist
from landcarbon.estimate.composite import composite_parcels
from landcarbon.estimate.offsets import add_offsets
from landcarbon.estimate.stocks import estimate_stocks

SUMS = {"above_ground": ["above_ground"], "all": ["above_ground"]}
MOST_PLOTS = 4  # parcels with as many plots or more are taken together


def assisted_samples(
    stand: Stand, raster: Raster, table: pd.DataFrame, samples: int, settings: dict[str, Any]
) -> tuple[Made, np.ndarray]:
    """Estimate every sample with the help of the raster; also the gain each sample sees in it.

    A sample is a stratum with a slope of its own. Whether the raster is worth using is settled over all samples at
    once; :func:`settled` does it sample by sample, as an inventory would.
    """
    strata = strata_table(samples, stand.area_ha)
    table = table.assign(date=pd.Timestamp("2020-07-01"), plot=table["plot"].astype("str"))
    values = pd.DataFrame({"survey": "t1", "plot": table["plot"], "raster": "canopy"})
    values["value"] = raster.at(table[["x", "y"]].to_numpy())
    whole = {"survey": "t1", "by": "stratum", "raster": "canopy", "mean": raster.value.mean(), "covered": 1.0}
    means = strata[["stratum"]].rename(columns={"stratum": "unit"}).assign(**whole)
    made = assist(table, SUMS, values, means, strata, by_stratum=True)
    adjusted = made.plot_parts.assign(all=made.plot_parts["above_ground"])
    options = {"pools": ["above_ground"], "confidence": settings["confidence"], "inventory_name": "simulated"}
    found, _ = estimate_stocks(adjusted, strata, None, ["t1"], **options)
    if len(made.offsets):  # else the raster does not pay over all samples together, and nothing was adjusted
        found = add_offsets(found, made, SUMS, confidence=settings["confidence"])
    rows = made.report[(made.report["pool"] == "all") & (made.report["stratum"] != "")]
    gain = rows.set_index(rows["stratum"].astype(int))["relative_efficiency"].reindex(np.arange(samples)).to_numpy()
    return by_sample(found, samples, ("density_t_c_ha", "density_se", "density_low", "density_high", "df"), 1.0), gain


def settled(plain: Made, assisted: Made, gain: np.ndarray, least: float) -> Made:
    """Take the assisted figure where its sample sees a gain, else the plain one."""
    better = gain >= least
    names = ("value", "se", "low", "high", "df")
    return replace(plain, **{name: np.where(better, getattr(assisted, name), getattr(plain, name)) for name in names})


def raster_rows(stand: Stand, raster: Raster, radius: float, settings: dict[str, Any]) -> Iterator[dict[str, Any]]:
    """Stocks without a raster, with one, and with one where it pays; enough plots for a slope."""
    from landcarbon.estimate.assist_limits import assist_limits

    limits = assist_limits()
    rng = np.random.default_rng([settings["seed"], 3, len(stand.xy)])
    samples, truth = settings["repeats"], float(stand.truth[0])
    for plots in settings["plots"]:
        if plots - 1 < limits.plots_per_slope:
            continue
        draws = random_draws(rng, stand, samples, plots)
        for edge, (density, share) in measure(stand, draws.centre, radius, ["cut", "mirage"]).items():
            table = plot_table(draws, density[:, 0], share, "t1", np.arange(len(share)))
            plain = stocks(stand, draws, density[:, 0], share, settings["confidence"])
            helped, gain = assisted_samples(stand, raster, table, samples, settings)
            chosen = settled(plain, helped, gain, limits.relative_efficiency)
            fit = float(np.corrcoef(raster.at(draws.centre), density[:, 0])[0, 1] ** 2)
            labels = {"stand": stand.name, "edge": edge, "plots": plots, "r2": fit}
            used = float((gain >= limits.relative_efficiency).mean())
            for method, made, share_used in (
                ("plain", plain, 0.0),
                ("assisted where it pays", chosen, used),
            ):
                yield rows_of(made, truth, **labels, method=method, used=share_used)


def cell_of(stand: Stand, xy: np.ndarray, columns_rows: list[int]) -> np.ndarray:
    """Parcel of each place; the window is cut into columns and rows."""
    side = stand.window_m / np.array(columns_rows)
    column, row = np.minimum((xy / side).astype(int), np.array(columns_rows) - 1).T
    return column * columns_rows[1] + row


def parcel_truths(stand: Stand, chosen: dict[str, Any], radius: float) -> dict[str, np.ndarray]:
    """Carbon of the parcels: of their stems, and of what plots centred in them see on average [t C/ha]."""
    number = int(np.prod(chosen["parcels"]))
    inside = cell_of(stand, stand.xy, chosen["parcels"])
    own = np.bincount(inside, weights=stand.carbon_t[:, 0], minlength=number) / (stand.area_ha / number)
    centre = all_centres(stand, chosen["step_m"])
    density, _ = measure(stand, centre, radius, ["mirage"])["mirage"]
    at = cell_of(stand, centre, chosen["parcels"])
    near = np.bincount(at, weights=density[:, 0], minlength=number) / np.bincount(at, minlength=number)
    return {"own stems": own, "as plots see it": near}


def parcel_figures(
    stand: Stand, chosen: dict[str, Any], radius: float, samples: int, settings: dict[str, Any]
) -> tuple[pd.DataFrame, pd.DataFrame]:
    """Direct and composite figures of all parcels and samples, by the program; a sample is a survey of its own."""
    rng = np.random.default_rng([settings["seed"], 4, len(stand.xy)])
    draws = random_draws(rng, stand, samples, chosen["parcel_plots"])
    density, share = measure(stand, draws.centre, radius, ["mirage"])["mirage"]
    parcel = cell_of(stand, draws.centre, chosen["parcels"]).astype(str)
    table = plot_table(draws, density[:, 0], share, "", np.arange(len(share)))
    table = table.assign(survey=draws.sample.astype(str), stratum="stand", parcel=parcel)
    names = np.arange(np.prod(chosen["parcels"])).astype(str)
    parcels = pd.DataFrame({"parcel": names, "stratum": "stand", "area_ha": stand.area_ha / len(names)})
    strata = pd.DataFrame({"stratum": ["stand"], "area_ha": [stand.area_ha]})
    surveys = np.arange(samples).astype(str)
    options = {"pools": ["above_ground"], "confidence": settings["confidence"], "inventory_name": "simulated"}
    direct, _ = estimate_stocks(table, strata, parcels, list(surveys), **options)
    composite, _, _ = composite_parcels(
        direct, parcels, table, {"above_ground": ["above_ground"]}, confidence=settings["confidence"]
    )
    direct, composite = (one[(one["by"] == "parcel") & (one["pool"] == "all")] for one in (direct, composite))
    return direct, composite


def parcel_rows(stand: Stand, chosen: dict[str, Any], settings: dict[str, Any]) -> Iterator[dict[str, Any]]:
    """Figures of parcels by the number of their plots, both estimators and both truths."""
    radius, truths = chosen["parcel_radius_m"], parcel_truths(stand, chosen, chosen["parcel_radius_m"])
    figures = parcel_figures(stand, chosen, radius, settings["parcel_repeats"], settings)
    for what, truth in truths.items():
        for estimator, table in zip(("direct", "composite"), figures, strict=True):
            unit = table["unit"].astype(int).to_numpy()
            error = table["density_t_c_ha"].to_numpy() - truth[unit]
            held = ((table["density_low"] <= truth[unit]) & (truth[unit] <= table["density_high"])).astype(float)
            square = table["density_se"].to_numpy() ** 2
            plots = np.minimum(table["plots"].to_numpy(), MOST_PLOTS)
            by_survey = table["survey"].to_numpy(dtype=object)
            for number in [*range(MOST_PLOTS + 1), -1]:
                rows = np.isfinite(error) & ((plots == number) | (number < 0))
                if not rows.any():
                    continue
                by_sample_held = held[rows].groupby(by_survey[rows]).agg(["sum", "count"])
                mean_square = (error[rows] ** 2).mean()
                yield {
                    "stand": stand.name,
                    "truth": what,
                    "estimator": estimator,
                    "plots": number,
                    "share": rows.mean(),
                    "rmse": 100.0 * float(np.sqrt(mean_square)) / stand.truth[0],
                    "se_ratio": float(np.sqrt(square[rows].mean() / mean_square)),
                    "coverage": held[rows].mean(),
                    "coverage_error": ratio_error(by_sample_held),
                    "spread": 100.0 * truth.std() / stand.truth[0],
                }


def ratio_error(held: pd.DataFrame) -> float:
    """Monte Carlo error of a share of parcels, samples being independent and the parcels of one sample not."""
    count, share = held["count"].sum(), held["sum"].sum() / held["count"].sum()
    apart = held["sum"] - share * held["count"]
    return float(np.sqrt((apart**2).sum()) / count)
