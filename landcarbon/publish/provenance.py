"""The provenance file: what went in, with which settings and versions, and when."""

from __future__ import annotations

import importlib.metadata
import json
import math
import platform
from datetime import UTC, date, datetime
from pathlib import Path
from typing import Any

import numpy as np
import pandas as pd

from landcarbon.publish.results import Results
from landcarbon.publish.words import CAUTIONS, SIGN_RULE

__all__ = ["MADE_BY", "count_findings", "is_ours", "plain", "raster_files", "read_provenance", "write_provenance"]

MADE_BY = "landcarbon results folder"
_FORM = 1
_PACKAGES = (
    "landcarbon",
    "numpy",
    "pandas",
    "geopandas",
    "shapely",
    "pyogrio",
    "pyarrow",
    "folium",
    "rasterio",
)


def write_provenance(results: Results, path: Path) -> None:
    """Write ``run.json``; the only file of the results that holds a time.

    Parameters
    ----------
    results : Results
        The run.
    path : Path
        File to write.
    """
    record: dict[str, Any] = {
        "made_by": MADE_BY,
        "form": _FORM,
        "inventory": results.name,
        "written": datetime.now(UTC).isoformat(timespec="seconds"),
        "versions": {"python": platform.python_version(), **{name: _version(name) for name in _PACKAGES}},
        "seed": results.settings_summary.get("seed"),
        "settings": results.settings_summary,
        "surveys": results.surveys.to_dict(orient="records"),
        "crs": results.crs,
        "area_method": results.area_method,
        "has_parcels": results.parcels is not None,
        "samples": list(results.samples),
        "further": list(results.further),
        "rasters": raster_files(path.parent),
        "findings": count_findings(results.findings).to_dict(orient="records"),
        "marks": list(results.marks),
        "cautions": CAUTIONS,
        "sign_rule": SIGN_RULE,
        "run": results.run,
    }
    text = json.dumps(plain(record), indent=2, ensure_ascii=False, allow_nan=False)
    path.write_text(text + "\n", encoding="utf-8", errors="backslashreplace", newline="\n")


def raster_files(folder: Path) -> list[str]:
    """Names of the rasters in a results folder."""
    return sorted(item.name for item in folder.glob("*.tif") if item.name.startswith(("density_", "change_")))


def count_findings(findings: pd.DataFrame) -> pd.DataFrame:
    """Count findings by rule.

    Parameters
    ----------
    findings : DataFrame
        Columns ``FINDING_COLUMNS``.

    Returns
    -------
    DataFrame
        severity, rule, table, count, used, set_aside, carbon_kg [kg C at stake where it is known, else NaN]; errors
        first, then warnings, then notes, each by falling carbon at stake and then by falling count.
    """
    if findings.empty:
        return pd.DataFrame(columns=["severity", "rule", "table", "count", "used", "set_aside", "carbon_kg"])
    groups = findings.groupby(["severity", "rule", "table"], sort=True, observed=True)
    table = groups["used"].agg(count="size", used="sum").reset_index()
    table["set_aside"] = table["count"] - table["used"]
    table["carbon_kg"] = groups["carbon_kg"].sum(min_count=1).to_numpy()
    table["rank"] = table["severity"].map({"error": 0, "warning": 1, "note": 2})
    table["stake"] = table["carbon_kg"].fillna(0)
    order = {"rank": True, "stake": False, "count": False, "rule": True}
    table = table.sort_values(list(order), ascending=list(order.values()), kind="stable")
    return table.drop(columns=["rank", "stake"]).reset_index(drop=True)


def read_provenance(path: Path) -> dict[str, Any] | None:
    """Return the content of ``run.json``, or None where it is not there or not ours."""
    try:
        record = json.loads(path.read_text(encoding="utf-8"))
    except (OSError, ValueError):
        return None
    return record if isinstance(record, dict) and record.get("made_by") == MADE_BY else None


def is_ours(folder: Path) -> bool:
    """Tell whether a folder holds results that this program wrote."""
    return read_provenance(folder / "run.json") is not None


def plain(value: Any) -> Any:
    """Turn a value into what JSON knows: NaN becomes null, dates become ISO text, paths become text.

    Parameters
    ----------
    value : object
        Nested dicts, sequences, frames, numpy and pandas scalars.

    Returns
    -------
    object
        dict, list, str, int, float, bool or None.
    """
    if isinstance(value, dict):
        return {str(key): plain(item) for key, item in value.items()}
    if isinstance(value, pd.DataFrame):
        return plain(value.to_dict(orient="records"))
    if isinstance(value, (pd.Series, np.ndarray)):
        return plain(value.tolist())
    if isinstance(value, (set, frozenset)):
        return sorted((plain(item) for item in value), key=str)
    if isinstance(value, (list, tuple)):
        return [plain(item) for item in value]
    return _scalar(value)


def _scalar(value: Any) -> Any:
    if isinstance(value, np.generic):
        value = value.item()
    if value is None or value is pd.NA or value is pd.NaT:
        return None
    if isinstance(value, float):
        return value if math.isfinite(value) else None
    if isinstance(value, (str, bool, int)):
        return value
    if isinstance(value, (date, datetime)):
        return value.isoformat()
    return str(value)


def _version(package: str) -> str | None:
    try:
        return importlib.metadata.version(package)
    except importlib.metadata.PackageNotFoundError:
        return None
