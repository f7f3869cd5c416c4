"""The results folder: complete or not at all, the same on a rerun, and never at the cost of the user's files."""

from __future__ import annotations

import dataclasses
import json
import os
import time
from pathlib import Path

import numpy as np
import pandas as pd
import pytest
from pandas.testing import assert_frame_equal
from publish_sample import sample_results

from landcarbon.errors import ResultsError
from landcarbon.publish import folder as folder_module
from landcarbon.publish.folder import RESULT_FILES, check_target, open_results, write_results
from landcarbon.publish.results import SAMPLE_FILES
from landcarbon.publish.words import CAUTIONS, SIGN_RULE

TABLES = ("stocks.csv", "change.csv", "findings.csv", "reconciliation.csv", "trees.parquet", "plots.parquet")


def contents(folder: Path) -> dict[str, bytes]:
    return {item.name: item.read_bytes() for item in sorted(folder.iterdir())}


def beside(out: Path) -> list[str]:
    return sorted(item.name for item in out.parent.iterdir())


def test_folder_is_complete_and_alone(tmp_path):
    out = write_results(sample_results(), tmp_path / "results")
    assert out == (tmp_path / "results").resolve()
    assert sorted(contents(out)) == sorted([*RESULT_FILES, *SAMPLE_FILES.values()])
    assert beside(out) == ["results"]


def test_rerun_gives_the_same_bytes(tmp_path):
    first = contents(write_results(sample_results(), tmp_path / "one"))
    second = contents(write_results(sample_results(), tmp_path / "two"))
    for name in (*TABLES, *SAMPLE_FILES.values(), "README.txt", "map.html"):
        assert first[name] == second[name], name


def test_read_back(tmp_path):
    written = sample_results()
    back = open_results(write_results(written, tmp_path / "results"))
    for name in ("stocks", "change", "findings", "reconciliation", "trees", "plots", "plot_points", "surveys"):
        assert_frame_equal(getattr(back, name), getattr(written, name), check_dtype=False, check_categorical=False)
    assert list(back.samples) == list(written.samples) == list(SAMPLE_FILES)
    for name, table in written.samples.items():
        assert_frame_equal(back.samples[name], table)
    assert back.settings_summary == written.settings_summary
    assert (back.name, back.confidence, back.crs) == (written.name, written.confidence, written.crs)
    assert back.marks == written.marks
    assert back.area_method == written.area_method
    assert list(back.parcels["parcel"]) == list(written.parcels["parcel"])
    assert back.parcels.crs == written.parcels.crs
    same = back.parcels.geometry.reset_index(drop=True).geom_equals(written.parcels.geometry.reset_index(drop=True))
    assert same.all()


def test_reading_back_and_writing_again_changes_no_table(tmp_path):
    first = write_results(sample_results(), tmp_path / "one")
    second = write_results(open_results(first), tmp_path / "two")
    for name in ("stocks.csv", "change.csv", "findings.csv", "reconciliation.csv", "README.txt"):
        assert (first / name).read_bytes() == (second / name).read_bytes(), name


def test_provenance(tmp_path):
    out = write_results(sample_results(), tmp_path / "results")
    record = json.loads((out / "run.json").read_text(encoding="utf-8"))
    assert record["run"]["inputs"][0]["sha256"] == "0" * 64
    assert record["seed"] == 7
    assert record["settings"]["confidence"] == 0.9
    assert set(record["versions"]) >= {"python", "landcarbon", "numpy", "pandas", "geopandas", "pyogrio"}
    assert record["cautions"] == CAUTIONS
    assert record["sign_rule"] == SIGN_RULE
    assert record["marks"] == sample_results().marks
    assert {row["rule"]: row["count"] for row in record["findings"]} == {"size slip": 2, "unknown species": 1}
    assert "written" in record


def test_readme_names_every_file_and_column(tmp_path):
    out = write_results(sample_results(), tmp_path / "results")
    text = (out / "README.txt").read_text(encoding="utf-8")
    for name in {*RESULT_FILES, *SAMPLE_FILES.values()} - {"README.txt"}:
        assert name in text, name
    flat = " ".join(text.split())
    for sentence in (CAUTIONS, SIGN_RULE, *sample_results().marks):
        assert " ".join(sentence.split()) in flat
    assert "90 % interval" in flat


def test_only_the_samples_there_are_get_a_file(tmp_path):
    sample = sample_results()
    few = dataclasses.replace(sample, samples={"soil": sample.samples["soil"]})
    out = write_results(sample, tmp_path / "results")
    write_results(few, out)  # those of the run before do not stay
    assert sorted(contents(out)) == sorted([*RESULT_FILES, "samples_soil.parquet"])
    assert list(open_results(out).samples) == ["soil"]
    text = (out / "README.txt").read_text(encoding="utf-8")
    assert "COLUMNS of samples_soil.parquet" in text
    assert "samples_litter.parquet" not in text
    write_results(dataclasses.replace(sample, samples={}), out)
    assert sorted(contents(out)) == sorted(RESULT_FILES)
    assert open_results(out).samples == {}


def test_samples_that_went_missing_are_told(tmp_path):
    out = write_results(sample_results(), tmp_path / "results")
    (out / "samples_soil.parquet").unlink()
    with pytest.raises(ResultsError, match=r"incomplete: samples_soil\.parquet missing.*Run the inventory again"):
        open_results(out)


def test_results_from_before_samples_were_published_still_open(tmp_path):
    out = write_results(dataclasses.replace(sample_results(), samples={}), tmp_path / "results")
    record = json.loads((out / "run.json").read_text(encoding="utf-8"))
    del record["samples"]
    (out / "run.json").write_text(json.dumps(record), encoding="utf-8")
    assert open_results(out).samples == {}


def test_interrupted_run_leaves_the_old_results_whole(tmp_path, monkeypatch):
    out = write_results(sample_results(), tmp_path / "results")
    before = contents(out)

    def fail(*_args):
        raise KeyboardInterrupt

    for name in ("write_geopackage", "write_provenance", "write_table", "_put_in_place"):
        with monkeypatch.context() as patch:
            patch.setattr(folder_module, name, fail)
            with pytest.raises(KeyboardInterrupt):
                write_results(sample_results(name="Another"), out)
        assert contents(out) == before, name
        assert beside(out) == ["results"], name


def test_failing_disk_is_a_plain_message(tmp_path, monkeypatch):
    out = write_results(sample_results(), tmp_path / "results")
    before = contents(out)

    def full(*_args):
        raise OSError(28, "No space left on device")

    monkeypatch.setattr(folder_module, "write_readme", full)
    with pytest.raises(ResultsError, match="could not be written: No space left on device"):
        write_results(sample_results(), out)
    assert contents(out) == before


def test_failing_rename_puts_the_old_results_back(tmp_path, monkeypatch):
    out = write_results(sample_results(), tmp_path / "results")
    before = contents(out)
    real = os.replace

    def held(source, target):
        if ".unfinished-" in Path(source).name:
            raise PermissionError(13, "The file is in use")
        real(source, target)

    monkeypatch.setattr(os, "replace", held)
    with pytest.raises(ResultsError, match=r"in use.*no program has its files open"):
        write_results(sample_results(name="Another"), out)
    assert contents(out) == before
    assert beside(out) == ["results"]


def test_crash_between_the_two_renames_is_mended(tmp_path):
    out = write_results(sample_results(), tmp_path / "results")
    before = contents(out)
    out.rename(tmp_path / ".results.before")
    assert open_results(out).name == sample_results().name
    check_target(out)
    assert contents(out) == before
    assert beside(out) == ["results"]


def test_crash_after_both_renames_is_tidied(tmp_path):
    out = write_results(sample_results(), tmp_path / "results")
    old = write_results(sample_results(name="Old"), tmp_path / "old")
    (old / "notes.txt").write_text("mine")
    old.rename(tmp_path / ".results.before")
    check_target(out)
    assert beside(out) == ["results"]
    assert (out / "notes.txt").read_text() == "mine"
    assert open_results(out).name == sample_results().name


def test_leftovers_of_a_killed_run_are_tidied_but_not_those_of_a_running_one(tmp_path):
    old, young = tmp_path / ".results.unfinished-a", tmp_path / ".results.unfinished-b"
    for item in (old, young):
        item.mkdir()
    long_ago = time.time() - 3 * 24 * 3600
    os.utime(old, (long_ago, long_ago))
    check_target(tmp_path / "results")
    assert beside(tmp_path / "results") == [young.name]


def test_files_of_the_user_are_kept(tmp_path):
    out = write_results(sample_results(), tmp_path / "results")
    (out / "notes.txt").write_text("mine")
    (out / "project").mkdir()
    (out / "project" / "view.txt").write_text("mine too")
    (out / "parcels.gpkg-wal").write_text("belongs to the old GeoPackage")
    write_results(sample_results(name="Another"), out)
    assert (out / "notes.txt").read_text() == "mine"
    assert (out / "project" / "view.txt").read_text() == "mine too"
    assert not (out / "parcels.gpkg-wal").exists()
    assert open_results(out).name == "Another"


def test_folder_of_somebody_else_is_refused_and_left_alone(tmp_path):
    theirs = tmp_path / "thesis"
    theirs.mkdir()
    (theirs / "chapter.txt").write_text("ten years")
    (theirs / "run.json").write_text('{"made_by": "someone"}')
    before = contents(theirs)
    with pytest.raises(ResultsError, match=r"not results of this program.*Name a new or empty folder"):
        write_results(sample_results(), theirs)
    assert contents(theirs) == before


def test_empty_folder_is_taken(tmp_path):
    out = tmp_path / "results"
    out.mkdir()
    write_results(sample_results(), out)
    assert open_results(out).name == sample_results().name


def test_file_in_the_way(tmp_path):
    (tmp_path / "results").write_text("I am a file")
    with pytest.raises(ResultsError, match="a file, not a folder"):
        write_results(sample_results(), tmp_path / "results")
    assert (tmp_path / "results").read_text() == "I am a file"


def test_parent_is_missing(tmp_path):
    with pytest.raises(ResultsError, match=r"no folder .*nowhere.*Make that folder first"):
        write_results(sample_results(), tmp_path / "nowhere" / "results")


@pytest.mark.skipif(os.name == "nt" or os.geteuid() == 0, reason="permissions do not bind the superuser")
def test_parent_is_not_writable(tmp_path):
    locked = tmp_path / "locked"
    locked.mkdir()
    locked.chmod(0o500)
    try:
        with pytest.raises(ResultsError, match="no permission"):
            write_results(sample_results(), locked / "results")
    finally:
        locked.chmod(0o700)


@pytest.mark.parametrize("missing", ["stocks.csv", "parcels.gpkg", "trees.parquet"])
def test_incomplete_folder(tmp_path, missing):
    out = write_results(sample_results(), tmp_path / "results")
    (out / missing).unlink()
    with pytest.raises(ResultsError, match=f"incomplete: {missing} missing.*Run the inventory again"):
        open_results(out)


@pytest.mark.parametrize("broken", ["stocks.csv", "parcels.gpkg", "trees.parquet"])
def test_broken_file(tmp_path, broken):
    out = write_results(sample_results(), tmp_path / "results")
    (out / broken).write_bytes(b"\x00\xffnot a table")
    with pytest.raises(ResultsError, match="cannot be read"):
        open_results(out)


def test_not_a_results_folder(tmp_path):
    with pytest.raises(ResultsError, match="no such results folder"):
        open_results(tmp_path / "nothing")
    with pytest.raises(ResultsError, match=r"run\.json is missing or was not written by this program"):
        open_results(tmp_path)


def test_inventory_without_parcels(tmp_path):
    import pyogrio

    written = dataclasses.replace(sample_results(), parcels=None, crs=None)
    out = write_results(written, tmp_path / "results")
    assert [name for name, _ in pyogrio.list_layers(out / "parcels.gpkg")] == ["plots"]
    back = open_results(out)
    assert back.parcels is None
    assert_frame_equal(back.plot_points, written.plot_points, check_dtype=False)


def test_plots_without_positions(tmp_path):
    sample = sample_results()
    points = sample.plot_points.assign(lon=np.nan, lat=np.nan)
    written = dataclasses.replace(sample, parcels=None, crs=None, plot_points=points)
    back = open_results(write_results(written, tmp_path / "results"))
    assert back.plot_points["lon"].isna().all()


def test_geopackage_carries_the_figures(tmp_path):
    import geopandas as gpd

    written = sample_results()
    out = write_results(written, tmp_path / "results")
    parcels = gpd.read_file(out / "parcels.gpkg", layer="parcels").set_index("parcel")
    stock = written.stocks.query("by == 'parcel' and pool == 'all' and survey == '2024'").set_index("unit")["stock_t_c"]
    change = written.change.query("by == 'parcel' and pool == 'all' and until == '2024' and since == '2014'")
    change = change.set_index("unit")["change_t_c"]
    assert parcels["stock_t_c_2024"].dropna().to_dict() == stock.dropna().to_dict()
    assert parcels["change_t_c_2014_2024"].dropna().to_dict() == change.dropna().to_dict()
    plots = gpd.read_file(out / "parcels.gpkg", layer="plots")
    assert plots.crs == parcels.crs
    one = plots.set_index("plot").loc["P1"]
    published = written.plots.query("plot == 'P1' and pool == 'all' and survey == '2014'")["density_t_c_ha"]
    assert one["density_t_c_ha_2014"] == published.item()


def test_results_with_one_survey_have_an_empty_change_table(tmp_path):
    sample = sample_results()
    written = dataclasses.replace(sample, change=sample.change.iloc[:0], findings=sample.findings.iloc[:0])
    back = open_results(write_results(written, tmp_path / "results"))
    assert back.change.empty
    assert list(back.change.columns) == list(sample.change.columns)
    assert isinstance(back.findings, pd.DataFrame)
