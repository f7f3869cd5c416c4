"""The page of plain text that lies beside the results and says what each file and column is."""

from __future__ import annotations

import textwrap
from collections.abc import Iterable, Sequence
from pathlib import Path

import jinja2

from landcarbon.findings import FINDING_COLUMNS
from landcarbon.publish.columns import columns_of, describe
from landcarbon.publish.provenance import raster_files
from landcarbon.publish.results import (
    CHANGE_COLUMNS,
    FURTHER_FILES,
    OPTIONAL_COLUMNS,
    SAMPLE_FILES,
    STOCK_COLUMNS,
    Results,
)
from landcarbon.publish.words import CAUTIONS, FURTHER_WORDS, POOL_NAMES, SIGN_RULE, raster_words

__all__ = ["readme_text", "write_readme"]

_WIDTH = 100
_NAME_WIDTH = 22


def readme_text(results: Results, rasters: Sequence[str] = ()) -> str:
    """Tell what the files and columns of a results folder are.

    Parameters
    ----------
    results : Results
        The run.
    rasters : sequence of str
        Names of the rasters beside the tables.

    Returns
    -------
    str
        A page of plain text.
    """
    # Plain text, not HTML: escaping would spoil names; the values are never taken for template code.
    environment = jinja2.Environment(
        loader=jinja2.PackageLoader("landcarbon.publish"),
        autoescape=False,
        keep_trailing_newline=True,
        undefined=jinja2.StrictUndefined,
    )
    present = set(results.stocks["pool"].astype("str"))
    return environment.get_template("readme.txt.j2").render(
        title=f"Carbon of {' '.join(results.name.split()) or 'the inventory'}",
        opening=[
            "Written by landcarbon. Stocks are in tonnes of carbon (t C), densities in tonnes of carbon per hectare "
            "(t C/ha). The surveys are: " + ", ".join(results.surveys["survey"].astype("str")) + "."
        ],
        pools=[(pool, name) for pool, name in POOL_NAMES.items() if pool in present],
        tables=[(table, _table_lines(table, names, results)) for table, names in _written(results).items()],
        samples=[(SAMPLE_FILES[name], name.replace("_", " ")) for name in results.samples],
        further=[(FURTHER_FILES[name], FURTHER_WORDS[name]) for name in results.further],
        rasters=[(name, raster_words(name)) for name in rasters],
        sign_rule=SIGN_RULE,
        area_method=results.area_method or "No areas were given.",
        marks=results.marks,
        cautions=CAUTIONS,
    )


def write_readme(results: Results, path: Path) -> None:
    """Write ``README.txt``.

    Parameters
    ----------
    results : Results
        The run.
    path : Path
        File to write.
    """
    path.write_text(
        readme_text(results, raster_files(path.parent)), encoding="utf-8", errors="backslashreplace", newline="\n"
    )


def _written(results: Results) -> dict[str, Iterable[str]]:
    layers = {
        "parcels.gpkg parcels": [],
        "parcels.gpkg plots": [row.column for row in columns_of("parcels.gpkg plots")],
    }
    if results.parcels is not None:
        own = [str(name) for name in results.parcels.columns if name != results.parcels.geometry.name]
        figures = [row.column for row in columns_of("parcels.gpkg parcels") if "{" in row.column]
        paired = not results.change.empty
        layers["parcels.gpkg parcels"] = [*own, *(name for name in figures if paired or "{pair}" not in name)]
    tables = {
        "stocks.csv": [*STOCK_COLUMNS, *(name for name in OPTIONAL_COLUMNS if name in results.stocks)],
        "change.csv": [*CHANGE_COLUMNS, *(name for name in OPTIONAL_COLUMNS if name in results.change)],
        **{FURTHER_FILES[name]: map(str, frame.columns) for name, frame in results.further.items()},
        "findings.csv": FINDING_COLUMNS,
        "reconciliation.csv": map(str, results.reconciliation.columns),
        "trees.parquet": map(str, results.trees.columns),
        "plots.parquet": map(str, results.plots.columns),
        **{SAMPLE_FILES[name]: map(str, frame.columns) for name, frame in results.samples.items()},
        **layers,
    }
    return {table: names for table, names in tables.items() if names}


def _table_lines(table: str, names: Iterable[str], results: Results) -> list[str]:
    found, left = describe(table, names)
    lines = []
    for row in found:
        unit = f" [{row.unit}]" if row.unit else ""
        lines += _entry(row.shown, row.meaning.format(interval=results.interval_name) + unit)
    for name in left:
        lines += _entry(name, "as your file gives it")
    return lines


def _entry(name: str, text: str) -> list[str]:
    """Wrap one description beside its name, or below it where the name is long."""
    margin = " " * (_NAME_WIDTH + 2)
    lines = textwrap.wrap(text, _WIDTH, initial_indent=margin, subsequent_indent=margin)
    if len(name) >= _NAME_WIDTH:
        return [f"  {name}", *lines]
    return [f"  {name:<{_NAME_WIDTH}}{lines[0].strip()}", *lines[1:]]
