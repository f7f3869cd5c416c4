"""The results folder: written aside, then put in place, so that an interrupted run leaves the old one whole.

The new files are written into a hidden folder beside the results. When they are complete, the old folder is renamed
aside, the new one takes its name, and only then the old one is removed. A crash between the two renames leaves the old
results under their resting name; the next run puts them back.
"""

from __future__ import annotations

import glob
import os
import shutil
import time
import uuid
from collections.abc import Callable, Iterator
from contextlib import contextmanager
from dataclasses import replace
from pathlib import Path
from typing import Any

import pandas as pd

from landcarbon.errors import ResultsError
from landcarbon.findings import join_findings
from landcarbon.publish.geopackage import read_parcels, read_plot_points, write_geopackage
from landcarbon.publish.provenance import is_ours, read_provenance, write_provenance
from landcarbon.publish.readme import write_readme
from landcarbon.publish.results import FURTHER_FILES, SAMPLE_FILES, Results
from landcarbon.publish.tables import read_table, write_table

__all__ = ["RESULT_FILES", "check_target", "open_results", "write_results"]

#: Files of a complete results folder. The provenance file is written last: with it the folder is complete.
RESULT_FILES = (
    "stocks.csv",
    "change.csv",
    "findings.csv",
    "reconciliation.csv",
    "trees.parquet",
    "plots.parquet",
    "parcels.gpkg",
    "map.html",
    "README.txt",
    "run.json",
)
_RUN_FILE = "run.json"
# Files that other programs put beside a GeoPackage while it is open; they belong to the old file and go with it.
_SIDE_FILES = ("parcels.gpkg-wal", "parcels.gpkg-shm", "parcels.gpkg-journal")
# An unfinished folder this old belongs to a run that was killed, not to one still going on.
_STALE_SECONDS = 24 * 3600


def check_target(out: Path) -> Path:
    """Make sure that results can be written to a folder, before the long work begins.

    Parameters
    ----------
    out : Path
        The results folder: absent, empty, or an earlier results folder.

    Returns
    -------
    Path
        The absolute path.

    Raises
    ------
    ResultsError
        If it is a file, holds anything but earlier results, has no parent folder, or the parent cannot be written to.
    """
    target = Path(out).expanduser().resolve()
    if not target.parent.is_dir():
        raise ResultsError(
            f"there is no folder {str(target.parent)!r} to put the results in",
            where=str(out),
            remedy="Make that folder first, or name another place with --out",
        )
    if target.exists() and not target.is_dir():
        raise ResultsError("this is a file, not a folder", where=str(out), remedy="Name a folder for the results")
    with _plainly(target, "the results folder cannot be looked into"):
        _recover(target)
        if target.is_dir() and any(target.iterdir()) and not is_ours(target):
            raise ResultsError(
                "this folder holds files that are not results of this program, and they are left alone",
                where=str(out),
                remedy="Name a new or empty folder, or an earlier results folder",
            )
    if not os.access(target.parent, os.W_OK | os.X_OK):
        raise ResultsError(
            "no permission to write there", where=str(target.parent), remedy="Name another folder with --out"
        )
    return target


def write_results(results: Results, out: Path, *, base_tiles: bool = False) -> Path:
    """Write all files of a run to a folder; until they are complete, what was there stays as it is.

    Parameters
    ----------
    results : Results
        The run.
    out : Path
        The results folder: absent, empty, or an earlier results folder, which is replaced. Files in it that this
        program did not write are kept.
    base_tiles : bool
        Whether the map page loads a background map from the network.

    Returns
    -------
    Path
        The results folder.

    Raises
    ------
    ResultsError
        If the folder cannot be used (:func:`check_target`) or a file cannot be written.
    """
    target = check_target(out)
    with _plainly(target, "the results could not be written"):
        unfinished = target.with_name(f".{target.name}.unfinished-{uuid.uuid4().hex}")
        unfinished.mkdir()
        try:
            written = _with_rasters(results, unfinished)
            for name, writer in _writers(written, base_tiles).items():
                writer(written, unfinished / name)
            _put_in_place(unfinished, target)
        finally:
            shutil.rmtree(unfinished, ignore_errors=True)
    return target


def open_results(folder: Path) -> Results:
    """Read a results folder.

    Parameters
    ----------
    folder : Path
        A folder made by :func:`write_results`.

    Returns
    -------
    Results
        As written; numbers of the CSV tables to ten significant digits.

    Raises
    ------
    ResultsError
        If it is no results folder, or a file is missing or cannot be read.
    """
    target = Path(folder).expanduser().resolve()
    place = target if target.exists() else _resting(target)
    if not place.is_dir():
        raise ResultsError("there is no such results folder", where=str(folder), remedy="Run the inventory first")
    record = read_provenance(place / _RUN_FILE)
    if record is None:
        raise ResultsError(
            f"this is not a results folder: {_RUN_FILE} is missing or was not written by this program",
            where=str(folder),
            remedy="Name the folder that a run wrote",
        )
    samples = [SAMPLE_FILES[name] for name in _sample_names(record)]
    further = [FURTHER_FILES[name] for name in _further_names(record)]
    missing = [name for name in (*RESULT_FILES, *samples, *further) if not (place / name).is_file()]
    if missing:
        raise ResultsError(
            f"the results are incomplete: {', '.join(missing)} missing",
            where=str(folder),
            remedy="Run the inventory again",
        )
    try:
        return _read(place, record)
    except (OSError, ValueError, KeyError, RuntimeError) as error:  # what the readers of the formats raise
        if isinstance(error, ResultsError):
            raise
        raise ResultsError(
            f"the results cannot be read ({error})", where=str(folder), remedy="Run the inventory again"
        ) from error


def _writers(results: Results, base_tiles: bool) -> dict[str, Callable[[Results, Path], None]]:
    return {
        **{SAMPLE_FILES[name]: _sample_writer(name) for name in results.samples},
        **{FURTHER_FILES[name]: _further_writer(name) for name in results.further},
        "stocks.csv": lambda results, path: write_table(results.stocks, path),
        "change.csv": lambda results, path: write_table(results.change, path),
        "findings.csv": lambda results, path: write_table(results.findings, path),
        "reconciliation.csv": lambda results, path: write_table(results.reconciliation, path),
        "trees.parquet": lambda results, path: _write_parquet(results.trees, path),
        "plots.parquet": lambda results, path: _write_parquet(results.plots, path),
        "parcels.gpkg": write_geopackage,
        "map.html": lambda results, path: _write_map(results, path, base_tiles=base_tiles),
        "README.txt": write_readme,
        _RUN_FILE: write_provenance,
    }


def _write_parquet(frame: pd.DataFrame, path: Path) -> None:
    frame.to_parquet(path, engine="pyarrow", index=False, compression="zstd")


def _sample_writer(name: str) -> Callable[[Results, Path], None]:
    return lambda results, path: _write_parquet(results.samples[name], path)


def _further_writer(name: str) -> Callable[[Results, Path], None]:
    return lambda results, path: write_table(results.further[name], path)


def _with_rasters(results: Results, folder: Path) -> Results:
    """Write the rasters; what was noted about them goes to the findings."""
    if results.rasters is None:
        return results
    from landcarbon.publish.rasters import write_rasters

    _, found = write_rasters(folder, results.rasters, results.stocks, results.change)
    return replace(results, findings=join_findings([results.findings, found]))


def _further_names(record: dict[str, Any]) -> list[str]:
    """Further tables that a run wrote."""
    return [name for name in record.get("further", []) if name in FURTHER_FILES]


def _sample_names(record: dict[str, Any]) -> list[str]:
    """Sample tables that a run wrote; those of runs before samples were published are none."""
    return [name for name in record.get("samples", []) if name in SAMPLE_FILES]


def _write_map(results: Results, path: Path, *, base_tiles: bool) -> None:
    from landcarbon.publish.map_page import map_page

    page = map_page(results, base_tiles=base_tiles)
    path.write_text(page, encoding="utf-8", errors="xmlcharrefreplace", newline="\n")


def _read(place: Path, record: dict[str, Any]) -> Results:
    surveys = pd.DataFrame(record["surveys"], columns=["survey", "since", "until"])
    for edge in ("since", "until"):
        surveys[edge] = pd.to_datetime(surveys[edge])
    package = place / "parcels.gpkg"
    return Results(
        settings_summary=record["settings"],
        stocks=read_table(place / "stocks.csv"),
        change=read_table(place / "change.csv"),
        findings=read_table(place / "findings.csv"),
        trees=pd.read_parquet(place / "trees.parquet"),
        plots=pd.read_parquet(place / "plots.parquet"),
        parcels=read_parcels(package) if record["has_parcels"] else None,
        plot_points=read_plot_points(package),
        surveys=surveys,
        reconciliation=read_table(place / "reconciliation.csv"),
        run=record["run"],
        crs=record["crs"],
        area_method=record["area_method"],
        marks=record["marks"],
        samples={name: pd.read_parquet(place / SAMPLE_FILES[name]) for name in _sample_names(record)},
        further={name: read_table(place / FURTHER_FILES[name]) for name in _further_names(record)},
    )


def _resting(target: Path) -> Path:
    return target.with_name(f".{target.name}.before")


def _put_in_place(new: Path, target: Path) -> None:
    old = _resting(target)
    if target.is_dir() and not any(target.iterdir()):
        target.rmdir()
    had_results = target.exists()
    if had_results:
        os.replace(target, old)
    try:
        os.replace(new, target)
    except OSError:
        if had_results:
            os.replace(old, target)
        raise
    if had_results:
        _retire(old, target)


def _recover(target: Path) -> None:
    """Finish what a killed run left half done beside the results folder."""
    old = _resting(target)
    if is_ours(old):
        if target.exists():
            _retire(old, target)
        else:
            os.replace(old, target)
    if not target.parent.is_dir():
        return
    for leftover in target.parent.glob(f".{glob.escape(target.name)}.unfinished-*"):
        if time.time() - leftover.stat().st_mtime > _STALE_SECONDS:
            shutil.rmtree(leftover, ignore_errors=True)


def _retire(old: Path, target: Path) -> None:
    """Remove results that have been replaced, but carry over what the user had put beside them."""
    rasters = (read_provenance(old / _RUN_FILE) or {}).get("rasters", [])
    ours = {*RESULT_FILES, *SAMPLE_FILES.values(), *FURTHER_FILES.values(), *_SIDE_FILES, *map(str, rasters)}
    for item in old.iterdir():
        if item.name not in ours and not (target / item.name).exists():
            os.replace(item, target / item.name)
    shutil.rmtree(old, ignore_errors=True)


@contextmanager
def _plainly(target: Path, what: str) -> Iterator[None]:
    """Turn failures of the file system into one plain message."""
    try:
        yield
    except ResultsError:
        raise
    except OSError as error:
        raise ResultsError(
            f"{what}: {error.strerror or error}",
            where=str(target),
            remedy="See that the disk has room, the folder may be written to and no program has its files open",
        ) from error
