"""Small canonical tables of dead wood for tests: give only what matters, the rest is filled with sound values."""

from __future__ import annotations

import csv
from pathlib import Path

import numpy as np
import pandas as pd

PLACE = {"survey": "2014", "plot": "A", "subplot": "", "used": True}
LINE = {**PLACE, "line": "1", "length_m": 100.0, "slope_deg": 0.0}
PIECE = {
    **PLACE,
    "line": "1",
    "size_class": "",
    "count": 1.0,
    "diameter_cm": 20.0,
    "diameter_2_cm": np.nan,
    "decay_class": "1",
    "wood": "hardwood",
    "species": "",
    "tilt_deg": np.nan,
    "hollow_cm": np.nan,
    "sunk_share": np.nan,
    "line_m": np.nan,
}
LOG = {
    **PLACE,
    "log": "1",
    "length_m": 4.0,
    "large_cm": 30.0,
    "middle_cm": np.nan,
    "small_cm": 20.0,
    "decay_class": "1",
    "wood": "hardwood",
    "species": "",
    "hollow_cm": np.nan,
    "sunk_share": np.nan,
}
STUMP = {
    **PLACE,
    "stump": "1",
    "diameter_cm": 40.0,
    "height_m": 0.3,
    "decay_class": "1",
    "wood": "hardwood",
    "species": "",
}
TREE = {
    **PLACE,
    "tree": "1",
    "status": "dead",
    "species": "x",
    "scientific_name": "",
    "dbh_cm": 30.0,
    "height_m": np.nan,
    "decay_class": "1",
    "biomass_kg": 500.0,
    "carbon_kg": 240.0,
    "conifer": False,
}
TABLES = {"lines": LINE, "pieces": PIECE, "logs": LOG, "stumps": STUMP, "trees": TREE}
SPECIES = pd.DataFrame(
    {
        "species": ["FI", "BU", "AB"],
        "scientific_name": ["Picea abies", "Fagus sylvatica", "Abies balsamea"],
        "conifer": [True, False, True],
        "wood_density_g_cm3": [0.37, 0.585, 0.33],
    }
)
#: Density 1 g/cm3 for any class, so that masses in t/ha are volumes in m3/ha.
UNIT_DENSITY = {str(name): 1.0 for name in range(1, 6)}


def table(name, *rows):
    """Build a canonical table from dicts."""
    defaults = TABLES[name]
    frame = pd.DataFrame([{**defaults, **row} for row in rows], columns=list(defaults))
    frame = frame.astype({column: "str" for column, value in defaults.items() if isinstance(value, str)})
    frame = frame.astype({column: float for column, value in defaults.items() if isinstance(value, float)})
    frame["used"] = frame["used"].astype(bool)
    frame["row_id"] = np.arange(len(frame))
    frame["row"] = frame["row_id"] + 2
    return frame.assign(file=f"{name}.csv")


def published(topic):
    """Cases of one topic from the table of printed values."""
    path = Path(__file__).parent / "data" / "field_dead_wood.csv"
    with path.open(encoding="utf-8", newline="") as handle:
        return [row for row in csv.DictReader(handle) if row["topic"] == topic]


def inputs_of(case):
    """Turn ``a=1 cm; b=2`` into a dict of numbers."""
    found = {}
    for part in case["inputs"].split(";"):
        name, equals, value = part.partition("=")
        if equals:
            found[name.strip()] = float(value.split()[0])
    return found


def rules(findings, *, used=None):
    """Rules raised, with the rows in the user's file."""
    kept = findings if used is None else findings[findings["used"] == used]
    return [(rule, int(row)) for rule, row in zip(kept["rule"], kept["row"], strict=True)]
