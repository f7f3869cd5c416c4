"""survey_A with two pools and its height raster, and the steps from raster values to estimates."""

from __future__ import annotations

from typing import Any

import numpy as np
import pandas as pd
from estimate_frames import survey_a

from landcarbon.estimate.assist import Assisted, assist
from landcarbon.estimate.offsets import add_change_offsets, add_offsets
from landcarbon.statements import state_change, state_stocks

SUMS = {
    "above_ground": ["above_ground.trees"],
    "dead_wood": ["dead_wood.standing", "dead_wood.down"],
    "soil": ["soil.layers"],
}
SUMS["all"] = [column for columns in SUMS.values() for column in columns]


def survey_plots(seed: int = 1) -> pd.DataFrame:
    """Plots of survey_A at both dates; the further parts are made up, soil on every third plot."""
    rng = np.random.default_rng(seed)
    plots = pd.DataFrame(survey_a()["plots"])
    blocks = []
    for column, survey, date in (("y1", "t1", "2014-07-01"), ("y2", "t2", "2024-07-01")):
        part = plots[plots[column].notna()]
        number = len(part)
        blocks.append(
            pd.DataFrame(
                {
                    "survey": survey,
                    "plot": part["plot"],
                    "parcel": part["parcel"],
                    "stratum": part["stratum"],
                    "inside": True,
                    "date": pd.Timestamp(date) + pd.to_timedelta(rng.integers(0, 40, number), unit="D"),
                    "size": rng.choice([1.0, 1.0, 0.6], number),
                    "above_ground.trees": part[column],
                    "dead_wood.standing": 0.1 * part[column] + rng.gamma(2, 1.5, number),
                    "dead_wood.down": rng.gamma(2, 2.0, number),
                    "soil.layers": np.where(np.arange(number) % 2 == 0, 60 + rng.normal(0, 9, number), np.nan),
                }
            )
        )
    return pd.concat(blocks, ignore_index=True)


def rasters(surveys: tuple[str, ...] = ("t1", "t2")) -> tuple[pd.DataFrame, pd.DataFrame]:
    """Height of plots and units, a column per raster."""
    data = survey_a()
    plots, cells = pd.DataFrame(data["plots"]), pd.DataFrame(data["cells"])
    values = pd.concat([pd.DataFrame({"survey": one, "plot": plots["plot"], "height": plots["x"]}) for one in surveys])
    weighed = cells.assign(total=cells["mean_x"] * cells["area_ha"]).groupby("stratum")[["total", "area_ha"]].sum()
    strata = pd.DataFrame({"by": "stratum", "unit": weighed.index, "height": weighed["total"] / weighed["area_ha"]})
    parcels = pd.DataFrame({"by": "parcel", "unit": cells["parcel"], "height": cells["mean_x"]})
    parcels = parcels.assign(stratum=cells["stratum"], area_ha=cells["area_ha"])
    units = pd.concat([strata.assign(stratum="", area_ha=np.nan), parcels], ignore_index=True)
    means = pd.concat([units.assign(survey=one, share_covered=1.0) for one in surveys], ignore_index=True)
    return values.reset_index(drop=True), means


def units() -> tuple[pd.DataFrame, pd.DataFrame]:
    """Strata and parcels with their areas."""
    data = survey_a()
    strata = pd.DataFrame({"stratum": list(data["areas_ha"]), "area_ha": list(data["areas_ha"].values())})
    parcels = pd.DataFrame({"parcel": list(data["parcel_areas_ha"]), "area_ha": list(data["parcel_areas_ha"].values())})
    return strata.astype({"area_ha": float}), parcels.astype({"area_ha": float})


def estimates(
    plots: pd.DataFrame,
    assisted: Assisted | None,
    strata: pd.DataFrame,
    parcels: pd.DataFrame | None,
    *,
    sums: dict[str, list[str]] = SUMS,
    plain: tuple[pd.DataFrame, pd.DataFrame] | None = None,
) -> tuple[pd.DataFrame, pd.DataFrame]:
    """Stocks and change from adjusted plots with offsets, or plain ones without ``assisted``."""
    table = plots if assisted is None else assisted.plot_parts
    options: dict[str, Any] = {"strata": strata, "parcels": parcels, "confidence": 0.95, "inventory_name": "A"}
    surveys = list(dict.fromkeys(table["survey"]))
    stocks, _ = state_stocks(table, sums, surveys, **options)
    change = pd.DataFrame()
    if len(surveys) > 1:
        change, _ = state_change(table, sums, surveys[0], surveys[1], **options)
    if assisted is None:
        return stocks, change
    stocks = add_offsets(stocks, assisted, sums, confidence=0.95, plain=None if plain is None else plain[0])
    if len(surveys) > 1:
        change = add_change_offsets(change, assisted, sums, confidence=0.95, plain=None if plain is None else plain[1])
    return stocks, change


def assisted_estimates(plots: pd.DataFrame, **options: Any) -> tuple[Assisted, pd.DataFrame, pd.DataFrame]:
    """Estimates of survey_A assisted by its heights."""
    strata, parcels = units()
    values, means = rasters()
    found = assist(plots, SUMS, values, means, strata, **options)
    return found, *estimates(plots, found, strata, parcels)
