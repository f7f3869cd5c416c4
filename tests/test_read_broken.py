"""Broken field files: a plain message or a finding, never a traceback, and every tree row accounted for."""

from __future__ import annotations

import gzip
import os
from pathlib import Path

import numpy as np
import pandas as pd
import pytest
from hypothesis import HealthCheck, given, settings
from hypothesis import strategies as st
from read_samples import PLOTS, TREES, accounted, read, rules, settings_text, write_inventory

from landcarbon.errors import InputFileError, SettingsError, UserError
from landcarbon.inventory import load_settings
from landcarbon.read.load import load_inputs


def refused(folder: Path, match: str, text: str | None = None, **files: str | bytes) -> None:
    with pytest.raises(UserError, match=match):
        read(folder, text, **files)


class TestFiles:
    def test_missing_file(self, tmp_path: Path):
        text = settings_text(surveys='[surveys.2014]\ntrees = "tress.csv"')
        refused(tmp_path, r"tress\.csv: no such file \(trees 2014\)\. Did you mean 'trees\.csv'\?", text)

    def test_missing_folder(self, tmp_path: Path):
        text = settings_text(surveys='[surveys.2014]\ntrees = "field/trees.csv"')
        refused(tmp_path, r"There is no folder 'field'", text)

    def test_folder_in_place_of_a_file(self, tmp_path: Path):
        (tmp_path / "field").mkdir()
        text = settings_text(surveys='[surveys.2014]\ntrees = "field"')
        refused(tmp_path, "field: this is a folder, but a file of trees 2014 is wanted", text)

    def test_no_bytes(self, tmp_path: Path):
        refused(tmp_path, r"trees\.csv: the file of trees 2014 is empty \(0 bytes\)", trees_csv=b"")

    def test_only_blank_lines(self, tmp_path: Path):
        refused(tmp_path, r"trees\.csv: the file holds no header line", trees_csv=b"\n \n;;;\n")

    def test_nul_bytes(self, tmp_path: Path):
        refused(tmp_path, "line 2 holds a NUL byte", trees_csv=TREES.replace("oak", "o\0k").encode())

    def test_utf16_without_mark(self, tmp_path: Path):
        refused(tmp_path, "line 1 holds a NUL byte.*Save the table again", trees_csv=TREES.encode("utf-16-le"))

    def test_torn_utf16(self, tmp_path: Path):
        refused(tmp_path, "not sound UTF-16", trees_csv=TREES.encode("utf-16") + b"\x00")

    def test_unreadable_name(self, tmp_path: Path):
        refused(tmp_path, "not a usable file name", settings_text(surveys='[surveys.2014]\ntrees = "a\\u0000b.csv"'))

    def test_damaged_gzip(self, tmp_path: Path):
        text = settings_text(surveys='[surveys.2014]\ntrees = "trees.csv.gz"')
        (tmp_path / "trees.csv.gz").write_bytes(gzip.compress(TREES.encode())[:-20])
        refused(tmp_path, "the compressed file is damaged", text)

    @pytest.mark.parametrize("suffix", ["xlsx", "parquet"])
    def test_text_with_the_wrong_ending(self, tmp_path: Path, suffix: str):
        text = settings_text(surveys=f'[surveys.2014]\ntrees = "trees.{suffix}"')
        refused(tmp_path, "not a readable", text, **{f"trees_{suffix}": TREES})

    @pytest.mark.parametrize("suffix", ["xls", "ods"])
    def test_other_workbooks(self, tmp_path: Path, suffix: str):
        text = settings_text(surveys=f'[surveys.2014]\ntrees = "trees.{suffix}"')
        refused(
            tmp_path, f"{suffix} files cannot be read.*Save the table as XLSX or CSV", text, **{f"trees_{suffix}": "x"}
        )

    def test_quotation_mark_never_closed(self, tmp_path: Path):
        text = TREES.replace("0101,2,oak", '0101,2,"oak')
        refused(tmp_path, r"line 3: a quotation mark \(\"\) is opened and not closed", trees_csv=text)


class TestOutside:
    def test_dots(self, tmp_path: Path):
        (tmp_path / "trees.csv").write_text(TREES)
        folder = tmp_path / "inventory"
        folder.mkdir()
        text = settings_text(surveys='[surveys.2014]\ntrees = "../trees.csv"')
        with pytest.raises(SettingsError, match=r"lies outside the folder.*allow_outside = true"):
            read(folder, text)
        allowed = text.replace("[inventory]", "[inventory]\nallow_outside = true")
        assert len(read(folder, allowed).trees) == 3

    def test_absolute_path(self, tmp_path: Path):
        text = settings_text(surveys='[surveys.2014]\ntrees = "/etc/passwd"')
        refused(tmp_path, "lies outside the folder", text)

    @pytest.mark.skipif(os.name == "nt", reason="links need rights on Windows")
    def test_link(self, tmp_path: Path):
        outside = tmp_path / "outside.csv"
        outside.write_text(TREES)
        folder = tmp_path / "inventory"
        folder.mkdir()
        (folder / "trees.csv").symlink_to(outside)
        refused(folder, "lies outside the folder")

    def test_path_inside_with_dots_is_fine(self, tmp_path: Path):
        (tmp_path / "field").mkdir()
        text = settings_text(surveys='[surveys.2014]\ntrees = "field/../trees.csv"')
        assert len(read(tmp_path, text).trees) == 3


class TestColumns:
    def test_missing_column(self, tmp_path: Path):
        match = r"trees\.csv: no column 'dbh' - did you mean 'dhb'\?\. Columns in the file: plot, species, dhb"
        refused(tmp_path, match, trees_csv="plot,species,dhb\n0101,oak,5\n")

    def test_missing_mapped_column(self, tmp_path: Path):
        text = settings_text(more='[columns.trees]\nheight = "Ht"')
        refused(tmp_path, r"no column 'Ht' \(for height\).*Name the right one under \[columns\.trees\]", text)

    def test_all_missing_columns_at_once(self, tmp_path: Path):
        refused(tmp_path, "no column 'plot'; no column 'species'; no column 'dbh'", trees_csv="a,b\n1,2\n")

    def test_column_twice(self, tmp_path: Path):
        refused(tmp_path, "the column 'dbh' stands more than once", trees_csv="plot,species,dbh,dbh\n0101,oak,5,6\n")

    def test_unused_column_twice_does_not_matter(self, tmp_path: Path):
        assert len(read(tmp_path, trees_csv="plot,species,dbh,note,note\n0101,oak,5,6,7\n").trees) == 1

    def test_header_only(self, tmp_path: Path):
        inputs = read(tmp_path, trees_csv="plot,species,dbh\n")
        assert len(inputs.trees) == 0
        assert inputs.trees.dtypes.astype(str).to_dict()["dbh_cm"] == "float64"
        assert not inputs.visits["visited"].any()
        assert inputs.species.empty

    def test_header_only_without_line_end(self, tmp_path: Path):
        assert len(read(tmp_path, trees_csv="plot,species,dbh").trees) == 0

    def test_no_plot(self, tmp_path: Path):
        refused(tmp_path, r"plots\.csv: the file holds no plot", plots_csv="plot,x,y\n")


class TestCells:
    def test_text_in_a_number(self, tmp_path: Path):
        inputs = read(tmp_path, trees_csv=TREES.replace("25.5", "25.5 cm"))
        assert inputs.trees["used"].tolist() == [False, True, True]
        finding = inputs.findings[inputs.findings["rule"] == "not readable"].iloc[0]
        assert (finding["file"], finding["row"], finding["column"]) == ("trees.csv", 2, "dbh")
        assert (finding["value"], finding["plot"], finding["survey"], finding["tree"]) == (
            "25.5 cm",
            "0101",
            "2014",
            "1",
        )
        assert accounted(inputs)

    def test_text_in_a_diameter_of_a_tree_that_is_gone(self, tmp_path: Path):
        inputs = read(tmp_path, trees_csv=TREES.replace("live,25.5", "gone,felled"))
        assert inputs.trees["used"].all()
        assert "not readable and left blank" in rules(inputs, "trees")

    def test_text_in_a_height_or_date(self, tmp_path: Path):
        inputs = read(tmp_path, trees_csv=TREES.replace("18.2", "tall").replace("2014-06-03", "June"))
        assert inputs.trees["used"].all()
        assert np.isnan(inputs.trees["height_m"][0])
        found = inputs.findings[inputs.findings["rule"] == "not readable and left blank"]
        assert found["value"].tolist() == ["tall", "June"]
        assert found["message"].str.contains("holds no date in the form expected").tolist() == [False, True]

    def test_unknown_status(self, tmp_path: Path):
        inputs = read(tmp_path, trees_csv=TREES.replace("dead", "moribund"))
        assert inputs.trees["used"].tolist() == [True, False, True]
        assert inputs.findings.set_index("rule").loc["unknown status", "value"] == "moribund"
        assert accounted(inputs)

    def test_blank_status_has_to_be_explained(self, tmp_path: Path):
        blank = TREES.replace("dead", "")
        assert read(tmp_path, trees_csv=blank).trees["used"].tolist() == [True, False, True]
        text = settings_text(more='[status]\n"" = "absent"\nlive = "live"')
        inputs = read(tmp_path, text, trees_csv=blank)
        assert inputs.trees["status"].tolist() == ["live", "absent", "live"]

    def test_status_codes_of_the_user(self, tmp_path: Path):
        text = settings_text(more='[status]\nG = "absent"\ng = "dead"\nL = "live"')
        trees = "plot,species,dbh,status\n0101,a,1,G\n0101,a,1,g\n0101,a,1,l\n0101,a,1,DEAD\n"
        inputs = read(tmp_path, text, trees_csv=trees)
        assert inputs.trees["used"].tolist() == [True, True, True, False]
        assert inputs.trees["status"].tolist()[:3] == ["absent", "dead", "live"]
        # a table replaces the codes understood without one
        assert inputs.findings.set_index("rule").loc["unknown status", "value"] == "DEAD"
        assert "status codes understood" not in rules(inputs)

    def test_status_codes_without_a_table_are_told(self, tmp_path: Path):
        trees = "plot,species,dbh,status\n0101,a,1,A\n0101,a,1,2\n0101,a,1,a\n0101,a,1,gone\n0101,a,1,?\n"
        inputs = read(tmp_path, trees_csv=trees)
        assert inputs.trees["status"].tolist()[:4] == ["live", "dead", "live", "absent"]
        told = inputs.findings.set_index("rule").loc["status codes understood"]
        assert told["severity"] == "note"
        assert "'A' (1 rows), 'a' (1 rows) as live; '2' (1 rows) as dead; 'gone' (1 rows) as absent." in told["message"]
        assert "'?'" not in told["message"]

    def test_no_status_column_needs_no_word(self, tmp_path: Path):
        inputs = read(tmp_path, trees_csv="plot,species,dbh\n0101,oak,5\n")
        assert "status codes understood" not in rules(inputs)

    def test_no_status_column_means_live(self, tmp_path: Path):
        assert read(tmp_path, trees_csv="plot,species,dbh\n0101,oak,5\n").trees["status"].tolist() == ["live"]

    def test_rows_of_another_length(self, tmp_path: Path):
        text = (
            TREES.replace("0101,2,oak,dead,12.25,,2014-06-01", "0101,2,oak,dead,12,25") + "0103,1,oak,live,5,4,,extra\n"
        )
        inputs = read(tmp_path, trees_csv=text)
        assert inputs.trees["row"].tolist() == [2, 3, 4, 5]
        assert inputs.trees["used"].tolist() == [True, False, True, False]
        assert accounted(inputs)

    def test_empty_cells_beyond_the_header_do_not_matter(self, tmp_path: Path):
        inputs = read(tmp_path, trees_csv="plot,species,dbh\n0101,oak,5,,\n")
        assert inputs.trees["used"].tolist() == [True]

    def test_blank_rows(self, tmp_path: Path):
        inputs = read(tmp_path, trees_csv=TREES + ",,,,,,\n,,,,,,\n")
        assert len(inputs.trees) == 3
        found = inputs.findings[inputs.findings["rule"] == "blank rows"].iloc[0]
        assert (found["row"], found["value"]) == (5, "2")
        assert "2 rows hold nothing" in found["message"]

    def test_bad_weight_sets_the_row_aside(self, tmp_path: Path):
        text = settings_text(more='[columns.trees]\nweight = "w"')
        inputs = read(tmp_path, text, trees_csv="plot,species,dbh,w\n0101,oak,5,half\n0101,oak,5,0.5\n0101,oak,5,\n")
        assert inputs.trees["used"].tolist() == [False, True, True]
        np.testing.assert_array_equal(inputs.trees["weight"], [np.nan, 0.5, np.nan])
        assert accounted(inputs)

    def test_huge_numbers_go_through_to_the_checks(self, tmp_path: Path):
        inputs = read(tmp_path, trees_csv="plot,species,dbh\n0101,oak,1e30\n0101,oak,1e999\n0101,oak,-5\n")
        assert inputs.trees["used"].tolist() == [True, False, True]
        assert inputs.trees["dbh_cm"][0] == 1e30

    def test_braces_in_the_data_are_only_text(self, tmp_path: Path):
        inputs = read(
            tmp_path,
            trees_csv="plot,species,{dbh}\n0101,oak,{x}\n",
            text=settings_text(more='[columns.trees]\ndbh = "{dbh}"'),
        )
        assert inputs.findings.set_index("rule").loc["not readable", "message"].startswith("The cell under {dbh} holds")


DAYS = ("2014-06-01", "2014-06-02", "2014-06-03", "2014-06-14", "2014-06-15")


def dated(days: tuple[str, ...], head: str = "plot,species,dbh,date") -> str:
    return head + "\n" + "".join(f"0101,oak,5,{day}\n" for day in days)


class TestMostlyUnreadable:
    def test_wrong_pattern_of_dates(self, tmp_path: Path):
        text = settings_text(more='[dates]\nformat = "%d.%m.%Y"')
        days = tuple(f"{day:02d}/06/2014" for day in range(1, 11))
        message = (
            r"trees\.csv: 10 of 10 cells under 'date' \(for date\) hold no date in the form expected, such as "
            r"'01/06/2014' on line 2 and '02/06/2014' on line 3\. Dates were expected as '%d\.%m\.%Y'"
        )
        refused(tmp_path, message, text, trees_csv=dated(days))

    def test_no_pattern_of_dates(self, tmp_path: Path):
        days = tuple(f"{day}.6.2014" for day in range(1, 8))
        refused(tmp_path, r"year-month-day: give format under \[dates\]", trees_csv=dated(days))

    def test_day_and_month_exchanged(self, tmp_path: Path):
        """By the calendar: of the days of June, 18 of 30 are no months."""
        text = settings_text(more='[dates]\nformat = "%m/%d/%Y"')
        days = tuple(f"{day}/6/2014" for day in range(1, 31))
        refused(tmp_path, "18 of 30 cells under 'date'", text, trees_csv=dated(days))

    def test_blank_cells_do_not_count(self, tmp_path: Path):
        refused(tmp_path, "5 of 6 cells", trees_csv=dated(("", "NA", "-", "", "a", "b", "c", "d", "e", DAYS[0])))

    def test_few_unreadable_cells_are_findings(self, tmp_path: Path):
        inputs = read(tmp_path, trees_csv=dated(("a", "b", "c", "d")))
        assert (inputs.findings["rule"] == "not readable and left blank").sum() == 4
        inputs = read(tmp_path, trees_csv=dated((*DAYS, *DAYS, "a", "b", "c", "d", "e")))
        assert (inputs.findings["rule"] == "not readable and left blank").sum() == 5

    def test_diameters(self, tmp_path: Path):
        trees = "plot,species,dbh\n" + "".join(f"0101,oak,{size} cm\n" for size in range(10, 16))
        message = r"6 of 6 cells under 'dbh' \(for dbh\) hold no number, such as '10 cm' on line 2.*without units"
        refused(tmp_path, message, trees_csv=trees)

    def test_a_column_that_may_be_blank_is_not_refused(self, tmp_path: Path):
        trees = "plot,species,dbh,height\n" + "".join(f"0101,oak,{size},tall\n" for size in range(10, 16))
        assert read(tmp_path, trees_csv=trees).trees["used"].all()

    def test_coordinates_in_degrees_and_minutes(self, tmp_path: Path):
        text = settings_text(plots='file = "plots.csv"\ndesign = { kind = "census", area_ha = 1 }')
        plots = "plot,lon,lat\n" + "".join(f"010{n},9.1,47 51 {n}N\n" for n in range(6))
        refused(tmp_path, r"6 of 6 cells under 'lat'.*right column under \[columns\.plots\]", text, plots_csv=plots)

    def test_yes_and_no_in_another_language(self, tmp_path: Path):
        text = settings_text(surveys='[surveys.2014]\ntrees = "trees.csv"\nvisits = "visits.csv"')
        visits = "plot,visited\n" + "".join(f"010{n},ja\n" for n in range(6))
        refused(tmp_path, r"'visited' \(for visited\) hold no yes or no.*Write yes or no", text, visits_csv=visits)


class TestPlots:
    def test_plot_twice(self, tmp_path: Path):
        plots = PLOTS + "0101,400020,5600010\n"
        refused(tmp_path, r"plot '0101' stands more than once with different entries \(lines 2, 5\)", plots_csv=plots)

    def test_plot_repeated(self, tmp_path: Path):
        inputs = read(tmp_path, plots_csv=PLOTS + "0101,400010,5600010\n")
        assert inputs.plots["plot"].tolist() == ["0101", "0102", "0103"]
        assert "plot repeated" in rules(inputs)

    def test_row_without_plot(self, tmp_path: Path):
        inputs = read(tmp_path, plots_csv=PLOTS + ",400010,5600010\n")
        assert len(inputs.plots) == 3
        assert "row without plot" in rules(inputs)

    def test_coordinates_missing_or_no_numbers(self, tmp_path: Path):
        inputs = read(tmp_path, plots_csv="plot,x,y\n0101,,5600010\n0102,east,5600010\n0103,400000,5600000\n")
        assert inputs.plots["lon"].notna().tolist() == [False, False, True]
        found = inputs.findings.set_index("rule").loc["coordinate not readable"]
        assert (found["value"], found["plot"], found["row"]) == ("east", "0102", 3)
        assert found["message"].startswith("The cell under x holds no number, so the coordinate could not be read")
        assert "not readable and left blank" not in rules(inputs)

    def test_a_coordinate_that_is_not_used_may_hold_anything(self, tmp_path: Path):
        plots = "plot,x,y,lon,lat\n" + "".join(f"010{n},40001{n},5600010,?,?\n" for n in range(8))
        inputs = read(tmp_path, plots_csv=plots)
        assert inputs.plots["lon"].notna().all()
        assert set(rules(inputs, "plots")) == {"not readable and left blank"}

    def test_no_coordinate_system(self, tmp_path: Path):
        text = settings_text(plots='file = "plots.csv"\ndesign = { kind = "census", area_ha = 1 }')
        refused(tmp_path, r"plots\.crs: plots\.csv gives x and y, but not in which coordinate system", text)

    def test_unknown_coordinate_system(self, tmp_path: Path):
        refused(tmp_path, "'EPSG:9' is no coordinate system", settings_text().replace("EPSG:25832", "EPSG:9"))

    def test_half_a_coordinate(self, tmp_path: Path):
        refused(tmp_path, "only one of two coordinates", plots_csv="plot,x\n0101,5\n")

    def test_places_the_system_is_not_made_for(self, tmp_path: Path):
        """EPSG register: EPSG:25832 is for Europe between 6 and 12 degrees east, 38.76 to 84.33 north."""
        inputs = read(tmp_path, plots_csv="plot,x,y\n0101,5600010,400010\n0102,400110,5600010\n0103,400030,5600050\n")
        found = inputs.findings[inputs.findings["rule"] == "implausible location"]
        assert found["plot"].tolist() == ["0101"]
        assert "exchanged" in found["remedy"].iloc[0]
        assert (
            "the area for which ETRS89 / UTM zone 32N (the system of its coordinates) is made"
            in (found["message"].iloc[0])
        )

    def test_the_system_at_fault_is_named(self, tmp_path: Path):
        """EPSG register: EPSG:32618 is for 78 to 72 degrees west; EPSG:4326 is for the whole world."""
        text = settings_text(
            plots='file = "plots.csv"\ndesign = { kind = "census", area_ha = 1 }',
            head='[inventory]\nname = "Tarn Side"\ncrs = "EPSG:32618"',
        )
        inputs = read(tmp_path, text, plots_csv="plot,lon,lat\n0101,72.5,42.5\n0102,-72.5,42.5\n0103,42.5,-172.5\n")
        found = inputs.findings[inputs.findings["rule"] == "implausible location"]
        assert found["plot"].tolist() == ["0101", "0103"]
        assert (
            "far outside the area for which WGS 84 / UTM zone 18N (the system of the results) is made"
            in (found["message"].iloc[0])
        )
        assert "nowhere on earth" in found["message"].iloc[1]
        assert "sign of the longitude" in found["remedy"].iloc[0]

    def test_census_without_any_area(self, tmp_path: Path):
        plots = 'file = "plots.csv"\ncrs = "EPSG:25832"\ndesign = { kind = "census" }'
        text = settings_text(plots=plots, more='[columns.plots]\narea = "area"')
        plots = "plot,x,y,area\n0101,400010,5600010,0.04\n0102,400110,5600010,\n"
        inputs = read(tmp_path, text, plots_csv=plots)
        assert inputs.visits.set_index("plot")["visited"].to_dict() == {"0101": True, "0102": False}
        assert inputs.findings.set_index("rule").loc["no plot area", "plot"] == "0102"


ODD = st.sampled_from(
    ["", "0101", "0102", "9", "oak", "live", "x", "5", "5,5", "1e9", '"', "\n", ";", ",", "\0", "é", "-3"]
)


@pytest.mark.parametrize("keep", [0.3, 0.6, 0.9, 0.99])
def test_torn_workbooks_and_parquet_files(tmp_path: Path, keep: float):
    """Whatever is left of a file after a broken copy, the message is plain."""
    frame = pd.DataFrame({"plot": ["0101"] * 500, "species": "oak", "dbh": np.arange(500) / 7})
    for name, write in (("trees.xlsx", frame.to_excel), ("trees.parquet", frame.to_parquet)):
        path = tmp_path / name
        write(path, index=False)
        path.write_bytes(path.read_bytes()[: int(path.stat().st_size * keep)])
        refused(tmp_path, "not a readable|is damaged", settings_text(surveys=f'[surveys.2014]\ntrees = "{name}"'))


@pytest.mark.parametrize("byte", range(100, 6000, 450))
def test_scrambled_workbooks(tmp_path: Path, byte: int):
    frame = pd.DataFrame({"plot": ["0101"] * 50, "species": "oak", "dbh": np.arange(50) / 7})
    frame.to_excel(tmp_path / "trees.xlsx", index=False)
    data = bytearray((tmp_path / "trees.xlsx").read_bytes())
    data[byte % len(data)] ^= 0xFF
    (tmp_path / "trees.xlsx").write_bytes(data)
    path = write_inventory(tmp_path, settings_text(surveys='[surveys.2014]\ntrees = "trees.xlsx"'))
    try:
        inputs = load_inputs(load_settings(path))
    except UserError as error:
        inputs, message = None, str(error)
    assert "trees.xlsx" in message if inputs is None else accounted(inputs)


@settings(max_examples=60, deadline=None, suppress_health_check=[HealthCheck.function_scoped_fixture])
@given(st.lists(ODD, max_size=30), st.sampled_from(["utf-8", "latin-1", "utf-16"]))
def test_any_junk_ends_in_a_message_or_is_accounted_for(tmp_path: Path, parts: list[str], encoding: str):
    text = "plot,species,dbh,status\n" + ",".join(parts)
    path = write_inventory(tmp_path, trees_csv=text.encode(encoding))
    try:
        inputs = load_inputs(load_settings(path))
    except InputFileError as error:
        inputs, message = None, str(error)
    assert "trees.csv" in message if inputs is None else accounted(inputs)
