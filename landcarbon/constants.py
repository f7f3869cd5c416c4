"""Constants of the arithmetic, read once from ``factors/constants.csv`` where each has unit and source."""

from __future__ import annotations

import csv
from importlib import resources

__all__ = [
    "BREAST_HEIGHT_M",
    "CARBON_TO_CO2",
    "DAYS_PER_YEAR",
    "HECTARES_PER_ACRE",
    "KG_PER_T",
    "M2_PER_FT2",
    "M2_PER_HECTARE",
]


def _read() -> dict[str, float]:
    path = resources.files("landcarbon.factors").joinpath("constants.csv")
    with path.open(encoding="utf-8") as handle:
        return {row["name"]: float(row["value"]) for row in csv.DictReader(handle)}


_VALUES = _read()

CARBON_TO_CO2 = _VALUES["carbon_dioxide_molar_mass"] / _VALUES["carbon_molar_mass"]  # t CO2 per t C
DAYS_PER_YEAR = _VALUES["days_per_year"]
M2_PER_HECTARE = _VALUES["square_metres_per_hectare"]
M2_PER_FT2 = _VALUES["square_metres_per_square_foot"]
HECTARES_PER_ACRE = _VALUES["hectares_per_acre"]
BREAST_HEIGHT_M = _VALUES["breast_height_m"]
KG_PER_T = 1000.0  # metric tonne, by definition
