"""Findings about rasters, worded by ``raster_rules.csv``."""

from __future__ import annotations

import csv
from collections.abc import Mapping
from functools import cache
from importlib.resources import files
from typing import Any

import pandas as pd

from landcarbon.findings import empty_findings, make_findings

__all__ = ["raster_note", "raster_rules"]


@cache
def raster_rules() -> dict[str, dict[str, str]]:
    """Return the rules by name, in the order of the data file."""
    text = files("landcarbon.read").joinpath("raster_rules.csv").read_text(encoding="utf-8")
    return {row["rule"]: row for row in csv.DictReader(text.splitlines())}


def raster_note(
    rule: str,
    rows: pd.DataFrame | None = None,
    *,
    words: Mapping[str, str] | None = None,
    shares: list[str] | None = None,
    **fields: Any,
) -> pd.DataFrame:
    """Make findings of one rule.

    Parameters
    ----------
    rule : str
        As in the data file.
    rows : DataFrame, optional
        The plots or parcels concerned, one finding each.
    words : mapping
        Words for the braces.
    shares : list of str, optional
        Word for ``{share}``, one per row.
    **fields
        Values of finding columns.
    """
    if rows is not None and rows.empty:
        return empty_findings()
    told = raster_rules()[rule]
    found = make_findings(
        rule, rows, severity=told["severity"], table=told["table"], message="", column="", used=True, **fields
    )
    texts = [{**(words or {}), "share": share} for share in shares] if shares else [dict(words or {})] * len(found)
    for part in ("message", "remedy"):
        found[part] = pd.Series([told[part].format_map(text) for text in texts], dtype="str")
    found["column"] = pd.Series([told["column"]] * len(found), dtype="str")
    return found
