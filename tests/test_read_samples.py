"""The tables of the pools beside the trees: any dressing becomes the same canonical rows. Figures are invented."""

from __future__ import annotations

from pathlib import Path

import hypothesis
import numpy as np
import pandas as pd
import pytest
from hypothesis import HealthCheck, given
from hypothesis import strategies as st
from pandas.testing import assert_frame_equal
from read_samples import accounted, read, rules, settings_text

from landcarbon.errors import InputFileError, SettingsError, UserError
from landcarbon.inputs import Inputs

LINES = "line_m = 20\n"

PIECES = (
    "plot,subplot,line,diameter,decay_class,species,wood,hollow,sunk,tilt\n"
    "0101,1,N,12.5,2,oak,hardwood,,,\n"
    "0101,1,N,30,4,,softwood,10,0.25,45\n"
    "0101,1,E,,,,,,,\n"
    "0102,1,N,8,1,birch,,,,\n"
)


def with_file(table: str, more: str = "", *, file: str | None = None) -> str:
    """Settings of one survey with one table of samples."""
    surveys = f'[surveys.2014]\ntrees = "trees.csv"\n{table} = "{file or table + ".csv"}"'
    if table == "lines":
        surveys += '\npieces = "no_wood.csv"'
    if table == "saplings" and "[columns.saplings]" not in more:
        more += '\n[columns.saplings]\narea = "area"\n'
    return settings_text(surveys=surveys, more=more)


@pytest.fixture(autouse=True)
def no_wood(tmp_path: Path) -> None:
    """Lines on which nothing was found have an empty table of pieces."""
    (tmp_path / "no_wood.csv").write_text("plot,line,diameter\n")


def sample(folder: Path, table: str, text: str, more: str = "") -> pd.DataFrame:
    return read(folder, with_file(table, more), **{f"{table}_csv": text}).samples[table]


def same(one: pd.DataFrame, other: pd.DataFrame) -> None:
    """Equal but for the places in the files."""
    places = ["file", "row"]
    assert_frame_equal(one.drop(columns=places), other.drop(columns=places), rtol=1e-14)


def finding(inputs: Inputs, rule: str) -> pd.DataFrame:
    return inputs.findings[inputs.findings["rule"] == rule]


def test_nothing_named_nothing_read(tmp_path: Path):
    assert read(tmp_path).samples == {}


class TestDressings:
    """The same measurements in two dressings give identical tables."""

    def test_pieces(self, tmp_path: Path):
        ours = sample(tmp_path, "pieces", PIECES, f"[dead_wood]\n{LINES}")
        text = (
            "Plot;Sub;Transekt;d mm;Zers;Art;Holz;Hohl mm;versunken %;Neigung %\n"
            "0101;1;N;125;2;oak;hardwood;;;\n0101;1;N;300,0;4;;softwood;100;25,0;100\n"
            "0101;1;E;0;;;;;;\n0102;1;N;80;1;birch;;;;\n"
        )
        more = (
            f"[dead_wood]\n{LINES}"
            '[columns.pieces]\nsubplot = "Sub"\nline = "Transekt"\ndiameter = "d mm"\ndecay_class = "Zers"\n'
            'species = "Art"\nwood = "Holz"\nhollow = "Hohl mm"\nsunk = "versunken %"\ntilt = "Neigung %"\n'
            '[units.pieces]\ndiameter = "mm"\nhollow = "mm"\nsunk = "%"\ntilt = "%"\n'
        )
        theirs = sample(tmp_path, "pieces", text, more)
        same(ours, theirs)
        assert ours["diameter_cm"].tolist() == [12.5, 30.0, 8.0]
        assert ours["tilt_deg"].tolist()[1] == 45.0
        assert ours["count"].tolist() == [1.0, 1.0, 1.0]
        assert ours["line_m"].isna().all()
        assert ours["row_id"].tolist() == [0, 1, 2]

    def test_lines(self, tmp_path: Path):
        ours = sample(tmp_path, "lines", "plot,line,length,slope,date\n0101,1,25,45,2014-06-01\n0102,1,20,,\n")
        text = f"Aufnahme;Linie;L ft;Gef %;Tag\n0101;1;{25 / 0.3048};100;1.6.2014\n0102;1;{20 / 0.3048};;\n"
        more = (
            '[columns.lines]\nplot = "Aufnahme"\nline = "Linie"\nlength = "L ft"\nslope = "Gef %"\ndate = "Tag"\n'
            '[units.lines]\nlength = "ft"\nslope = "percent"\n[dates]\nformat = "%d.%m.%Y"\n'
        )
        text = text.replace(".", ",").replace("1,6,2014", "1.6.2014")
        trees = "plot,species,dbh\n0101,oak,10\n"
        theirs = read(tmp_path, with_file("lines", more), lines_csv=text, trees_csv=trees).samples["lines"]
        same(ours, theirs)
        assert ours["length_m"].tolist() == [25.0, 20.0]
        assert ours["slope_deg"].tolist() == [45.0, 0.0]
        assert ours["date"].dt.year.fillna(0).tolist() == [2014, 0]

    def test_logs(self, tmp_path: Path):
        ours = sample(
            tmp_path, "logs", "plot,log,length,large,middle,small,decay_class\n0101,7,4.5,30,25,20,3\n0102,8,2,,18,,\n"
        )
        more = (
            '[columns.logs]\nlog = "Nr"\nlength = "L dm"\nlarge = "D1"\nmiddle = "D2"\nsmall = "D3"\n'
            '[units.logs]\nlength = "dm"\nlarge = "mm"\nmiddle = "mm"\nsmall = "mm"\n'
        )
        theirs = sample(
            tmp_path,
            "logs",
            "plot\tNr\tL dm\tD1\tD2\tD3\tdecay_class\n0101\t7\t45\t300\t250\t200\t3\n0102\t8\t20\t\t180\t\t\n",
            more,
        )
        same(ours, theirs)
        assert ours[["length_m", "large_cm", "middle_cm", "small_cm"]].iloc[0].tolist() == [4.5, 30, 25, 20]
        assert ours["log"].tolist() == ["7", "8"]

    def test_stumps(self, tmp_path: Path):
        ours = sample(tmp_path, "stumps", "plot,stump,diameter,height,wood\n0101,1,42,0.3,hardwood\n")
        more = '[columns.stumps]\ndiameter = "d"\nheight = "h"\n[units.stumps]\ndiameter = "m"\nheight = "cm"\n'
        same(ours, sample(tmp_path, "stumps", "plot,stump,d,h,wood\n0101,1,0.42,30,hardwood\n", more))

    @pytest.mark.parametrize("table", ["litter", "ground_vegetation"])
    def test_frames(self, tmp_path: Path, table: str):
        head = "plot,frame,layer,frame_area,fresh,sub_fresh,sub_dry,dry,depth,bulk_density,ash,carbon_fraction\n"
        ours = sample(tmp_path, table, head + "0101,a,F,0.0625,0.5,100,40,,3,0.05,0.25,0.4\n0102,a,,0.0625,,,,0,,,,\n")
        text = (
            "plot,Rahmen,Lage,cm2,frisch g,pf,pt,dry,tief mm,kg/m3,Asche %,C g/kg\n"
            "0101,a,F,625,500,0.1,0.04,,30,50,25,400\n0102,a,,625,,,,0,,,,\n"
        )
        more = (
            f'[columns.{table}]\nframe = "Rahmen"\nlayer = "Lage"\nframe_area = "cm2"\nfresh = "frisch g"\n'
            'sub_fresh = "pf"\nsub_dry = "pt"\ndepth = "tief mm"\nbulk_density = "kg/m3"\nash = "Asche %"\n'
            f'carbon_fraction = "C g/kg"\n[units.{table}]\nframe_area = "cm2"\nfresh = "g"\nsub_fresh = "kg"\n'
            'sub_dry = "kg"\ndepth = "mm"\nbulk_density = "kg/m3"\nash = "%"\ncarbon_fraction = "g/kg"\n'
        )
        same(ours, sample(tmp_path, table, text, more))
        assert ours["dry_kg"].fillna(-1).tolist() == [-1, 0]
        assert ours["used"].all()

    def test_saplings(self, tmp_path: Path):
        ours = sample(
            tmp_path, "saplings", "plot,species,count,dbh,height,area\n0101,oak,3,2.5,3,12.5\n0102,ash,0,,,12.5\n"
        )
        more = (
            '[columns.saplings]\nspecies = "sp"\ncount = "n"\ndbh = "mm"\nheight = "h"\narea = "a"\n'
            '[units.saplings]\ndbh = "mm"\nheight = "cm"\narea = "ha"\n'
        )
        same(
            ours,
            sample(tmp_path, "saplings", "plot,sp,n,mm,h,a\n0101,oak,3,25,300,0.00125\n0102,ash,0,,,0.00125\n", more),
        )
        assert ours["used"].all()

    SOIL = (
        "plot,core,top,bottom,bulk_density,coarse,organic_carbon\n"
        "0101,1,0,10,1.2,0.1,0.058\n0101,1,10,30,1.4,0.2,0.02\n"
    )

    @pytest.mark.parametrize(
        ("unit", "values"),
        [
            ("%", (5.8, 2)),
            ("g/kg", (58, 20)),
            ("1", (0.058, 0.02)),
            ("mg/g", (58, 20)),
            ("", (0.058, 0.02)),
        ],
    )
    def test_soil(self, tmp_path: Path, unit: str, values: tuple[float, float]):
        columns = '[columns.soil]\ncoarse = "coarse"\n[soil]\ncoarse = "mass"\n'
        ours = sample(tmp_path, "soil", self.SOIL, columns)
        text = (
            f"plot,core,von,bis,kg/m3,Skelett,C\n0101,1,0,0.1,1200,10,{values[0]}\n0101,1,0.1,0.3,1400,20,{values[1]}\n"
        )
        more = (
            '[columns.soil]\ntop = "von"\nbottom = "bis"\nbulk_density = "kg/m3"\ncoarse = "Skelett"\n'
            'organic_carbon = "C"\n[units.soil]\ntop = "m"\nbottom = "m"\nbulk_density = "kg/m3"\ncoarse = "%"\n'
        ) + (f'organic_carbon = "{unit}"\n' if unit else "")
        theirs = sample(tmp_path, "soil", text, more)
        same(ours, theirs)
        assert theirs["organic_carbon_share"].tolist() == pytest.approx([0.058, 0.02], rel=1e-15)
        assert theirs["cores"].tolist() == [1.0, 1.0]

    def test_workbook_and_parquet(self, tmp_path: Path):
        ours = sample(tmp_path, "pieces", PIECES, f"[dead_wood]\n{LINES}")
        frame = pd.read_csv(tmp_path / "pieces.csv", dtype={"plot": "str", "subplot": "str", "decay_class": "str"})
        frame.to_excel(tmp_path / "wood.xlsx", sheet_name="Wood", index=False)
        frame.to_parquet(tmp_path / "wood.parquet")
        for file in ("wood.xlsx#Wood", "wood.parquet"):
            theirs = read(tmp_path, with_file("pieces", f"[dead_wood]\n{LINES}", file=file)).samples["pieces"]
            same(ours, theirs)


CLASSES = """
[dead_wood.classes.solid]
diameter = "solid"
line_m = 12
density_g_cm3 = 0.6
[dead_wood.classes.medium]
count = "n_medium"
line_m = 5
mean_diameter_cm = 5
[dead_wood.classes.fine]
count = "n_fine"
line_m = 2
mean_diameter_cm = 0.3
"""
TALLIES = (
    "plot,subplot,line,solid,n_medium,n_fine\n"
    "0101,1,N,9.5,1,13\n"
    "0101,1,N,30,,\n"  # a second large piece on the same line: one row is not one line
    "0101,1,E,0,0,0\n"  # no wood
    "0102,1,N,,0,4\n"
)


class TestSizeClasses:
    def test_wide_becomes_long(self, tmp_path: Path):
        inputs = read(tmp_path, with_file("pieces", CLASSES), pieces_csv=TALLIES)
        pieces = inputs.samples["pieces"]
        assert pieces["size_class"].tolist() == ["solid", "medium", "fine", "solid", "fine"]
        assert pieces["row"].tolist() == [2, 2, 2, 3, 5]
        assert pieces["count"].tolist() == [1, 1, 13, 1, 4]
        np.testing.assert_array_equal(pieces["diameter_cm"], [9.5, np.nan, np.nan, 30, np.nan])
        assert pieces["line_m"].tolist() == [12, 5, 2, 12, 2]
        assert pieces["row_id"].tolist() == [0, 1, 2, 3, 4]
        assert rules(inputs, "pieces") == ["table not counted"]  # the pool is not asked for

    def test_lines_come_from_all_rows(self, tmp_path: Path):
        lines = read(tmp_path, with_file("pieces", CLASSES), pieces_csv=TALLIES).samples["lines"]
        keys = lines[["survey", "plot", "subplot", "line"]].to_numpy().tolist()
        assert keys == [["2014", "0101", "1", "N"], ["2014", "0101", "1", "E"], ["2014", "0102", "1", "N"]]
        assert lines["row"].tolist() == [2, 4, 5]
        assert lines["length_m"].tolist() == [12, 12, 12]  # the longest stretch on which any class was taken
        assert lines["slope_deg"].tolist() == [0, 0, 0]

    def test_long_table_of_the_same_tallies(self, tmp_path: Path):
        """One row for each class and line, the class named in a column: the same pieces on the same lines."""
        wide = read(tmp_path, with_file("pieces", CLASSES), pieces_csv=TALLIES).samples
        classes = CLASSES.replace('diameter = "solid"\n', "").replace('count = "n_medium"\n', "")
        classes = classes.replace('count = "n_fine"\n', "")
        text = (
            "plot,subplot,line,size_class,count,diameter\n0101,1,N,solid,,9.5\n0101,1,N,medium,1,\n"
            "0101,1,N,fine,13,\n0101,1,N,solid,,30\n0101,1,E,,,\n0102,1,N,fine,4,\n"
        )
        long = read(tmp_path, with_file("pieces", classes), pieces_csv=text).samples
        same(wide["pieces"], long["pieces"])
        same(wide["lines"], long["lines"])

    def test_order_of_columns_and_file_does_not_matter(self, tmp_path: Path):
        one = read(tmp_path, with_file("pieces", CLASSES), pieces_csv=TALLIES).samples["pieces"]
        text = (
            "n_fine,line,plot,n_medium,subplot,solid\n13,N,0101,1,1,9.5\n,N,0101,,1,30\n0,E,0101,0,1,0\n4,N,0102,0,1,\n"
        )
        other = read(tmp_path, with_file("pieces", CLASSES), pieces_csv=text).samples["pieces"]
        assert_frame_equal(one, other)

    def test_units_of_class_diameters(self, tmp_path: Path):
        more = CLASSES + '[units.pieces]\ndiameter = "mm"\n'
        text = TALLIES.replace(",9.5,", ",95,").replace(",30,", ",300,")
        pieces = read(tmp_path, with_file("pieces", more), pieces_csv=text).samples["pieces"]
        assert pieces["diameter_cm"].dropna().tolist() == [9.5, 30]
        assert pieces["count"].tolist() == [1, 1, 13, 1, 4]

    def test_single_pieces_beside_tallies(self, tmp_path: Path):
        text = "plot,line,n_medium,n_fine,solid,diameter\n0101,N,1,2,,25\n0101,N,,,,0\n"
        inputs = read(tmp_path, with_file("pieces", f"[dead_wood]\n{LINES}{CLASSES}"), pieces_csv=text)
        pieces = inputs.samples["pieces"]
        assert pieces["size_class"].tolist() == ["", "medium", "fine"]
        assert pieces["diameter_cm"].fillna(0).tolist() == [25, 0, 0]
        assert inputs.samples["lines"]["length_m"].tolist() == [20]

    def test_counts_that_are_no_counts(self, tmp_path: Path):
        text = TALLIES.replace("9.5,1,13", "9.5,-1,many")
        inputs = read(tmp_path, with_file("pieces", CLASSES), pieces_csv=text)
        pieces = inputs.samples["pieces"]
        assert pieces["used"].tolist() == [True, False, False, True, True]
        bad = finding(inputs, "not readable").iloc[0]
        assert (bad["file"], bad["row"], bad["value"], bad["row_id"]) == ("pieces.csv", 2, "many", 2)
        assert "The cell under n_fine holds no number" in bad["message"]
        below = finding(inputs, "size class below zero").iloc[0]
        assert (below["row"], below["value"], below["row_id"]) == (2, "-1", 1)
        assert "size class medium" in below["message"]
        assert len(inputs.samples["lines"]) == 3
        assert accounted(inputs)

    def test_class_column_missing(self, tmp_path: Path):
        with pytest.raises(InputFileError, match=r"no column 'n_medium' \(for class medium\).*dead_wood\.classes"):
            read(tmp_path, with_file("pieces", CLASSES), pieces_csv=TALLIES.replace("n_medium", "medium"))

    def test_one_of_several_names(self, tmp_path: Path):
        more = CLASSES.replace('count = "n_fine"', 'count = ["n_small", "n_fine"]')
        assert len(read(tmp_path, with_file("pieces", more), pieces_csv=TALLIES).samples["pieces"]) == 5

    def test_tally_left_blank_on_a_whole_line(self, tmp_path: Path):
        inputs = read(
            tmp_path, with_file("pieces", CLASSES), pieces_csv=TALLIES.replace("0101,1,E,0,0,0", "0101,1,E,0,,0")
        )
        found = finding(inputs, "tally left blank")
        assert found["value"].tolist() == ["1"]
        assert "size class medium" in found["message"].iloc[0]

    def test_neither_diameters_nor_classes(self, tmp_path: Path):
        with pytest.raises(InputFileError, match=r"pieces\.csv: the table of pieces has neither"):
            read(tmp_path, with_file("pieces"), pieces_csv="plot,line\n0101,N\n")


class TestLines:
    def test_table_of_lines_goes_before(self, tmp_path: Path):
        surveys = '[surveys.2014]\ntrees = "trees.csv"\npieces = "pieces.csv"\nlines = "lines.csv"'
        lines = "plot,subplot,line,length\n0101,1,N,20\n0101,1,E,20\n0101,1,S,20\n0102,1,N,\n"
        text = settings_text(surveys=surveys, more="[dead_wood]\nline_m = 15\n")
        inputs = read(tmp_path, text, pieces_csv=PIECES, lines_csv=lines)
        assert inputs.samples["lines"]["length_m"].tolist() == [20, 20, 20, 15]
        assert set(inputs.samples["lines"]["file"]) == {"lines.csv"}

    def test_one_survey_with_lines_one_without(self, tmp_path: Path):
        surveys = (
            '[surveys.2014]\ntrees = "trees.csv"\npieces = "pieces.csv"\nlines = "lines.csv"\n'
            '[surveys.2024]\ntrees = "trees.csv"\npieces = "late.csv"'
        )
        trees = "survey,plot,species,dbh\n2014,0101,oak,10\n2024,0101,oak,10\n"
        inputs = read(
            tmp_path, settings_text(surveys=surveys, more=f"[dead_wood]\n{LINES}"), trees_csv=trees, pieces_csv=PIECES,
            late_csv="plot,line,diameter\n0103,a,20\n0103,b,\n", lines_csv="plot,subplot,line,length\n0101,1,N,25\n",
        )  # fmt: skip
        lines = inputs.samples["lines"]
        assert lines[["survey", "plot", "line", "length_m"]].to_numpy().tolist() == [
            ["2014", "0101", "N", 25], ["2024", "0103", "a", 20], ["2024", "0103", "b", 20],
        ]  # fmt: skip
        assert lines["row_id"].tolist() == [0, 1, 2]

    def test_line_twice(self, tmp_path: Path):
        text = "plot,line,length\n0101,N,20\n0101,N,20\n0101,N,30\n0101,E,\n0101,E,5\n"
        inputs = read(tmp_path, with_file("lines"), lines_csv=text)
        assert inputs.samples["lines"]["used"].tolist() == [True, False, False, True, False]
        assert finding(inputs, "line repeated")["row"].tolist() == [3]
        found = finding(inputs, "line with two lengths")
        assert found["row"].tolist() == [4, 6]
        assert found["value"].tolist() == ["30.0", "5.0"]
        assert ["20 m" in found["message"].iloc[0], "unknown" in found["message"].iloc[1]] == [True, True]
        assert accounted(inputs)

    def test_length_that_is_no_number(self, tmp_path: Path):
        more = "[dead_wood]\nline_m = 20\n"
        inputs = read(
            tmp_path, with_file("lines", more), lines_csv="plot,line,length,slope\n0101,N,long,steep\n0101,E,,\n"
        )
        lines = inputs.samples["lines"]
        assert lines["used"].tolist() == [False, True]
        assert lines["length_m"].tolist()[1] == 20
        assert rules(inputs, "lines") == ["not readable", "not readable and left blank"]

    def test_slope_stays_missing_where_it_matters(self, tmp_path: Path):
        more = '[dead_wood]\nline_slope = "along the slope"\n'
        inputs = read(
            tmp_path, with_file("lines", more), lines_csv="plot,line,length,slope\n0101,N,20,10\n0101,E,20,\n"
        )
        np.testing.assert_array_equal(inputs.samples["lines"]["slope_deg"], [10, np.nan])

    def test_row_without_line(self, tmp_path: Path):
        """Its plot has lines with names, so nobody knows which it is; another plot has one line without a name."""
        text = "plot,line,diameter\n0101,N,20\n0101,,30\n0102,,25\n"
        inputs = read(tmp_path, with_file("pieces", f"[dead_wood]\n{LINES}"), pieces_csv=text)
        assert inputs.samples["pieces"]["used"].tolist() == [True, False, True]
        assert finding(inputs, "row without line")["row"].tolist() == [3]
        assert inputs.samples["lines"][["plot", "line"]].to_numpy().tolist() == [["0101", "N"], ["0102", ""]]
        assert accounted(inputs)

    def test_length_stated_with_the_pieces(self, tmp_path: Path):
        text = "plot,line,line_length,diameter\n0101,N,25,20\n0101,N,,30\n0101,E,10,\n"
        more = '[columns.pieces]\nline_length = "line_length"\n'
        inputs = read(tmp_path, with_file("pieces", more), pieces_csv=text)
        assert inputs.samples["lines"]["length_m"].tolist() == [25, 10]
        np.testing.assert_array_equal(inputs.samples["pieces"]["line_m"], [25, np.nan])


class TestSurveys:
    TWO = '[surveys.2014]\ntrees = "trees.csv"\n[surveys.2024]\ntrees = "trees.csv"'
    TREES = "survey,plot,species,dbh\n2014,0101,oak,10\n2024,0101,oak,12\n"
    SHARED = '[samples]\nstumps = "stumps.csv"\n'

    def test_by_label(self, tmp_path: Path):
        text = "survey,plot,diameter,height\n2014,0101,30,0.3\n2024.0,0101,31,0.3\n2019,0101,32,0.3\n"
        inputs = read(
            tmp_path, settings_text(surveys=self.TWO, more=self.SHARED), trees_csv=self.TREES, stumps_csv=text
        )
        stumps = inputs.samples["stumps"]
        assert stumps["survey"].tolist() == ["2014", "2024", ""]
        assert stumps["used"].tolist() == [True, True, False]
        found = finding(inputs, "unknown survey").iloc[0]
        assert (found["table"], found["value"], found["row"]) == ("stumps", "2019", 4)
        assert accounted(inputs)

    def test_by_date(self, tmp_path: Path):
        surveys = "".join(
            f'[surveys.{year}]\ntrees = "trees.csv"\nsince = {year}-01-01\nuntil = {year}-12-31\n'
            for year in (2014, 2024)
        )
        text = (
            "date,plot,diameter,height\n2014-06-01,0101,30,0.3\n2024-06-01,0101,31,0.3\n"
            ",0101,32,0.3\nJune,0101,33,0.3\n"
        )
        inputs = read(tmp_path, settings_text(surveys=surveys, more=self.SHARED), trees_csv=self.TREES, stumps_csv=text)
        assert inputs.samples["stumps"]["survey"].tolist() == ["2014", "2024", "", ""]
        assert finding(inputs, "date outside surveys")["row"].tolist() == [4]
        # a date that cannot be read is told once, as that
        unreadable = finding(inputs, "not readable")
        assert unreadable[["row", "value", "table"]].to_numpy().tolist() == [[5, "June", "stumps"]]
        assert "not readable and left blank" not in rules(inputs)
        assert accounted(inputs)

    def test_no_way_to_tell(self, tmp_path: Path):
        match = r"stumps\.csv: the file serves the surveys 2014, 2024.*under \[columns\.stumps\]"
        with pytest.raises(InputFileError, match=match):
            read(
                tmp_path, settings_text(surveys=self.TWO, more=self.SHARED), trees_csv=self.TREES,
                stumps_csv="plot,diameter,height\n0101,30,0.3\n",
            )  # fmt: skip

    def test_files_of_each_survey(self, tmp_path: Path):
        surveys = (
            '[surveys.2014]\ntrees = "trees.csv"\nstumps = ["a.csv", "b.csv"]\n[surveys.2024]\ntrees = "trees.csv"\n'
            'stumps = "c.csv"'
        )
        files = {
            f"{name}_csv": f"plot,diameter,height\n0101,{size},0.3\n" for name, size in (("a", 1), ("b", 2), ("c", 3))
        }
        inputs = read(tmp_path, settings_text(surveys=surveys), trees_csv=self.TREES, **files)
        stumps = inputs.samples["stumps"]
        assert stumps["survey"].tolist() == ["2014", "2014", "2024"]
        assert stumps["file"].tolist() == ["a.csv", "b.csv", "c.csv"]
        assert stumps["row_id"].tolist() == [0, 1, 2]
        log = inputs.files.set_index("file")
        assert log.loc["c.csv", ["rows", "role"]].tolist() == [1, "stumps 2024"]

    def test_text_that_repeats_is_a_category(self, tmp_path: Path):
        """Also where tables of several files, or lines given and lines derived, are put together."""
        surveys = (
            '[surveys.2014]\ntrees = "trees.csv"\npieces = ["a.csv", "b.csv"]\nlines = "lines.csv"\n'
            '[surveys.2024]\ntrees = "trees.csv"\npieces = "c.csv"\n'
        )
        more = f'[dead_wood]\n{LINES}[dead_wood.classes.fine]\ncount = "n"\nmean_diameter_cm = 0.3\n'
        files = {
            "a_csv": "plot,line,diameter,wood,n\n0101,N,30,softwood,4\n",
            "b_csv": "plot,line,diameter,species,n\n0102,E,9,oak,0\n",
            "c_csv": "plot,line,diameter,decay_class,n\n0103,S,12,3,\n",
            "lines_csv": "plot,line,length\n0102,E,20\n0101,N,20\n",
        }
        samples = read(tmp_path, settings_text(surveys=surveys, more=more), trees_csv=self.TREES, **files).samples
        pieces, lines = samples["pieces"], samples["lines"]
        for table, texts in ((pieces, ("line", "size_class", "decay_class", "wood", "species")), (lines, ("line",))):
            for name in ("file", "survey", "plot", "subplot", *texts):
                assert table[name].dtype == "category", name
        assert pieces["size_class"].tolist() == ["", "fine", "", ""]
        assert pieces["wood"].tolist() == ["softwood", "softwood", "", ""]
        assert pieces["plot"].cat.categories.tolist() == ["0101", "0102", "0103"]
        assert pieces["survey"].cat.categories.tolist() == ["2014", "2024"]
        assert lines[["survey", "plot", "line", "file"]].to_numpy().tolist() == [
            ["2014", "0102", "E", "lines.csv"],
            ["2014", "0101", "N", "lines.csv"],
            ["2024", "0103", "S", "c.csv"],
        ]

    def test_row_of_another_survey(self, tmp_path: Path):
        surveys = '[surveys.2014]\ntrees = "trees.csv"\nstumps = "a.csv"\n[surveys.2024]\ntrees = "trees.csv"'
        text = "survey,plot,diameter,height\n2014,0101,30,0.3\n2024,0101,31,0.3\n"
        inputs = read(tmp_path, settings_text(surveys=surveys), trees_csv=self.TREES, a_csv=text)
        assert inputs.samples["stumps"]["used"].tolist() == [True, False]
        assert "under [columns.stumps]" in finding(inputs, "other survey")["remedy"].iloc[0]

    def test_header_only(self, tmp_path: Path):
        inputs = read(tmp_path, with_file("soil"), soil_csv="plot,top,bottom,bulk_density,organic_carbon\n")
        soil = inputs.samples["soil"]
        assert len(soil) == 0
        assert soil["top_cm"].dtype == "float64"
        assert soil["row_id"].dtype == "int64"
        empty = read(tmp_path, with_file("pieces", CLASSES), pieces_csv="plot,subplot,line,solid,n_medium,n_fine\n")
        assert (len(empty.samples["pieces"]), len(empty.samples["lines"])) == (0, 0)


class TestRows:
    def test_plots_that_are_not_there(self, tmp_path: Path):
        text = "plot,diameter,height\n101,30,0.3\n0101,31,0.3\n,32,0.3\n"
        inputs = read(tmp_path, with_file("stumps"), stumps_csv=text)
        assert inputs.samples["stumps"]["used"].tolist() == [False, True, False]
        unknown = finding(inputs, "plot unknown").iloc[0]
        assert (unknown["file"], unknown["row"], unknown["plot"], unknown["table"]) == (
            "stumps.csv",
            2,
            "101",
            "stumps",
        )
        assert "Did you mean '0101'?" in unknown["remedy"]
        assert finding(inputs, "sample without plot")["row"].tolist() == [4]
        assert accounted(inputs)

    def test_unknown_plot_with_nothing_on_its_line(self, tmp_path: Path):
        inputs = read(tmp_path, with_file("pieces", CLASSES), pieces_csv=TALLIES + "9,1,N,0,0,0\n")
        assert len(inputs.samples["lines"]) == 3
        found = finding(inputs, "plot unknown").iloc[0]
        assert found["row"] == 6
        assert pd.isna(found["row_id"])
        assert accounted(inputs)

    @pytest.mark.parametrize(
        ("table", "head", "good", "bad", "column"),
        [
            ("pieces", "plot,line,diameter,decay_class", "0101,N,20,1", "0101,N,thick,1", "diameter"),
            ("logs", "plot,length,middle", "0101,2,20", "0101,two,20", "length"),
            ("stumps", "plot,diameter,height", "0101,20,0.3", "0101,?,0.3", "diameter"),
            ("litter", "plot,frame_area,dry", "0101,0.1,0.2", "0101,small,0.2", "frame_area"),
            ("ground_vegetation", "plot,frame_area,dry", "0101,0.1,0.2", "0101,0.1,wet", "dry"),
            ("saplings", "plot,species,count,dbh,area", "0101,oak,2,3,10", "0101,oak,some,3,10", "count"),
            ("soil", "plot,top,bottom,bulk_density,organic_carbon", "0101,0,10,1,0.1", "0101,0,deep,1,0.1", "bottom"),
        ],
    )
    def test_cells_that_matter(self, tmp_path: Path, table: str, head: str, good: str, bad: str, column: str):
        more = f"[dead_wood]\n{LINES}"
        inputs = read(tmp_path, with_file(table, more), **{f"{table}_csv": f"{head}\n{good}\n{bad}\n{good},9\n"})
        assert inputs.samples[table]["used"].tolist() == [True, False, False]
        found = finding(inputs, "not readable").iloc[0]
        assert (found["table"], found["row"], found["column"]) == (table, 3, column)
        assert found["value"] in bad.split(",")
        assert finding(inputs, "ragged row")["row"].tolist() == [4]
        assert accounted(inputs)

    def test_cells_that_do_not_matter(self, tmp_path: Path):
        text = PIECES.replace("30,4,,softwood,10,0.25,45", "30,4,,softwood,wide,some,45")
        inputs = read(tmp_path, with_file("pieces", f"[dead_wood]\n{LINES}"), pieces_csv=text)
        assert inputs.samples["pieces"]["used"].all()
        found = finding(inputs, "not readable and left blank")
        assert found["value"].tolist() == ["wide", "some"]
        assert set(found["table"]) == {"pieces"}

    def test_row_without_figures(self, tmp_path: Path):
        """One file may serve two tables: a blank cell says nothing about the pool, a zero does."""
        surveys = '[surveys.2014]\ntrees = "trees.csv"\nlitter = "f.csv"\nground_vegetation = "f.csv"'
        more = (
            '[columns.litter]\nfresh = "dead"\n[columns.ground_vegetation]\nfresh = "green"\n'
            "[litter]\nframe_area_m2 = 1\n[ground_vegetation]\nframe_area_m2 = 1\ndry_share = 0.4\n"
        )
        inputs = read(tmp_path, settings_text(surveys=surveys, more=more), f_csv="plot,dead,green\n0101,1,\n0102,1,0\n")
        assert inputs.samples["litter"]["used"].tolist() == [True, True]
        assert inputs.samples["ground_vegetation"]["used"].tolist() == [False, True]
        assert accounted(inputs)

    def test_tally_without_number(self, tmp_path: Path):
        text = "plot,species,count,dbh,area\n0101,oak,,3,10\n0101,oak,,,10\n0101,oak,0,,10\n"
        inputs = read(tmp_path, with_file("saplings"), saplings_csv=text)
        assert inputs.samples["saplings"]["used"].tolist() == [True, False, True]
        assert inputs.samples["saplings"]["count"].tolist() == [1, 1, 0]
        assert finding(inputs, "row without number")["row"].tolist() == [3]

    def test_species_codes_of_samples_are_named(self, tmp_path: Path):
        more = f'[species]\noak = "Quercus robur"\nHA = "Corylus avellana"\n[dead_wood]\n{LINES}'
        surveys = '[surveys.2014]\ntrees = "trees.csv"\nsaplings = "s.csv"\npieces = "pieces.csv"'
        more += "[saplings]\narea_m2 = 10\n"
        saplings = "plot,species,dbh\n0101,HA,2\n"
        inputs = read(tmp_path, settings_text(surveys=surveys, more=more), s_csv=saplings, pieces_csv=PIECES)
        names = inputs.species.set_index("species")["scientific_name"].to_dict()
        assert names == {"HA": "Corylus avellana", "birch": "birch", "oak": "Quercus robur"}


class TestNeeded:
    @pytest.mark.parametrize(
        ("table", "text", "told"),
        [
            ("litter", "plot,fresh\n0101,1\n", r"frame_area_m2 under \[litter\]"),
            ("ground_vegetation", "plot,dry\n0101,1\n", r"frame_area_m2 under \[ground_vegetation\]"),
            ("saplings", "plot,species,dbh,area\n0101,oak,1,400\n", r"area_m2 under \[saplings\]"),
            ("soil", "plot,top,bottom,bulk_density\n0101,0,1,1\n", "or give organic_matter or total_carbon"),
            ("soil", "plot,top,bottom,organic_matter\n0101,0,1,0.1\n", r"organic_matter_per_carbon under \[soil\]"),
        ],
    )
    def test_neither_column_nor_setting(self, tmp_path: Path, table: str, text: str, told: str):
        """An area found by its name alone could be that of the whole plot, so it has to be mapped."""
        more = "[columns.saplings]\n"
        with pytest.raises(
            SettingsError, match=rf"inventory\.toml, columns\.{table}\..*{table}\.csv does not tell.*{told}"
        ):
            read(tmp_path, with_file(table, more), **{f"{table}_csv": text})

    def every_table(self, table: str, text: str, **more: str) -> tuple[str, dict[str, str]]:
        """Settings that count every pool, with the text of one table to be tried and further keys of sections."""
        keys = {
            "pools": 'above_ground = "measured"\ndead_wood = "measured"\nlitter = "measured"\nsoil = "measured"\n',
            "soil": 'bulk_density = "fine per whole volume"\ndepth_cm = 30\n',
            "litter": "frame_area_m2 = 1\n",
            "ground_vegetation": "frame_area_m2 = 1\n",
            "saplings": "area_m2 = 10\n",
        }
        sections = "".join(f"[{name}]\n{lines}{more.get(name, '')}\n" for name, lines in keys.items())
        files = {
            "pieces": "plot,line,diameter\n0101,N,12\n",
            "lines": "plot,line,length\n0101,N,20\n",
            "logs": "plot,length,middle\n0101,3,20\n",
            "stumps": "plot,diameter,height\n0101,30,0.3\n",
            "litter": "plot,dry\n0101,1\n",
            "ground_vegetation": "plot,dry\n0101,1\n",
            "saplings": "plot,species,dbh\n0101,oak,2\n",
            "soil": "plot,top,bottom,bulk_density,organic_carbon\n0101,0,30,1,0.02\n",
            table: text,
        }
        surveys = '[surveys.2014]\ntrees = "trees.csv"\n' + "".join(f'{name} = "{name}.csv"\n' for name in files)
        return settings_text(surveys=surveys, more=sections), {f"{name}_csv": each for name, each in files.items()}

    @pytest.mark.parametrize(
        ("table", "text", "told"),
        [
            ("lines", "plot,line\n0101,N\n", r"how long the lines are.*line_m under \[dead_wood\]"),
            ("pieces", "plot,line,count\n0101,N,2\n", "how thick the pieces counted are.*or give size_class"),
            ("logs", "plot,length\n0101,2\n", "any diameter of the logs.*or give large and small"),
            ("litter", "plot,layer\n0101,duff\n", "the mass of the samples.*or give fresh with sub_fresh"),
            ("litter", "plot,depth\n0101,5\n", "the mass of the samples"),
            ("litter", "plot,fresh,sub_dry\n0101,5,1\n", "how much of the fresh mass is dry.*or dry_share under"),
            ("ground_vegetation", "plot,fresh\n0101,5\n", r"how.*or dry_share under \[ground_vegetation\]"),
            ("saplings", "plot,species,count\n0101,oak,5\n", "how large the stems are"),
            ("soil", "plot,top,bottom,organic_carbon\n0101,0,30,0.02\n", "the bulk density.*or give pedotransfer"),
        ],
    )
    def test_counted_tables_hold_what_their_pool_needs(self, tmp_path: Path, table, text, told):
        text, files = self.every_table(table, text)
        with pytest.raises(SettingsError, match=rf"columns\.{table}\..*{table}\.csv does not tell {told}"):
            read(tmp_path, text, **files)

    @pytest.mark.parametrize(
        ("table", "text", "more"),
        [
            ("litter", "plot,depth,bulk_density\n0101,5,0.1\n", ""),
            ("litter", "plot,depth\n0101,5\n", 'forest_floor = "pine"'),
            ("litter", "plot,depth\n0101,5\n", "bulk_densities = { litter = 0.1 }"),
            ("litter", "plot,fresh\n0101,5\n", "dry_share = 0.4"),
            ("litter", "plot,fresh,sub_fresh,sub_dry\n0101,5,10,4\n", ""),
            ("soil", "plot,top,bottom,organic_carbon\n0101,0,30,0.02\n", 'pedotransfer = "saini1966"'),
        ],
    )
    def test_settings_may_stand_for_a_column(self, tmp_path: Path, table, text, more):
        text, files = self.every_table(table, text, **{table: more})
        assert read(tmp_path, text, **files).samples[table]["used"].all()

    @pytest.mark.parametrize(
        ("table", "text", "column"),
        [
            ("soil", "plot,bottom,bulk_density,organic_carbon\n0101,30,1,0.1\n", "top"),
            ("soil", "plot,top,bulk_density,organic_carbon\n0101,0,1,0.1\n", "bottom"),
            ("stumps", "plot,diameter\n0101,30\n", "height"),
            ("stumps", "plot,height\n0101,0.3\n", "diameter"),
            ("logs", "plot,middle\n0101,30\n", "length"),
        ],
    )
    def test_columns_nothing_can_stand_for(self, tmp_path: Path, table, text, column):
        match = rf"^{table}\.csv: no column '{column}'.*under \[columns\.{table}\]"
        with pytest.raises(InputFileError, match=match):
            read(tmp_path, with_file(table), **{f"{table}_csv": text})

    def test_mostly_unreadable_figures_are_refused(self, tmp_path: Path):
        text = "plot,diameter,height\n" + "".join(f"0101,3{n} cm,0.3\n" for n in range(6))
        match = (
            r"^stumps\.csv: 6 of 6 cells under 'diameter' \(for diameter\) hold no number, such as '30 cm' on line 2"
        )
        with pytest.raises(InputFileError, match=match):
            read(tmp_path, with_file("stumps"), stumps_csv=text)

    def test_no_plot_column(self, tmp_path: Path):
        with pytest.raises(UserError, match=r"soil\.csv: no column 'plot'.*under \[columns\.soil\]"):
            read(tmp_path, with_file("soil"), soil_csv="a,b\n1,2\n")

    def test_missing_file(self, tmp_path: Path):
        with pytest.raises(InputFileError, match=r"soil\.csv: no such file \(soil 2014\)"):
            read(tmp_path, with_file("soil"))

    def test_table_that_enters_no_pool(self, tmp_path: Path):
        inputs = read(tmp_path, with_file("litter"), litter_csv="plot,frame_area,dry\n0101,1,1\n")
        assert "Say litter = 'measured'" in finding(inputs, "table not counted")["remedy"].iloc[0]
        measured = with_file("litter", '[pools]\nlitter = "measured"\n')
        assert "table not counted" not in rules(read(tmp_path, measured))
        parts = with_file("stumps", '[pools]\ndead_wood = { how = "measured", parts = ["standing"] }\n')
        inputs = read(tmp_path, parts, stumps_csv="plot,diameter,height\n0101,1,1\n")
        assert "Add it to the parts of dead_wood" in finding(inputs, "table not counted")["remedy"].iloc[0]


JUNK = st.sampled_from(
    ["", "0101", "0102", "9", "N", "x", "5", "-3", "5,5", "1e9", '"', "\n", ",", "é", "0", "2014", "nan"]
)


@hypothesis.settings(max_examples=60, deadline=None, suppress_health_check=[HealthCheck.function_scoped_fixture])
@given(st.lists(JUNK, max_size=40), st.sampled_from(["pieces", "lines", "saplings", "soil", "litter"]))
def test_any_junk_ends_in_a_message_or_is_accounted_for(tmp_path: Path, parts: list[str], table: str):
    heads = {
        "pieces": "plot,line,diameter,n_medium,n_fine,solid,hollow,survey",
        "lines": "plot,line,length,slope,date,survey",
        "saplings": "plot,species,count,dbh,area",
        "soil": "plot,core,top,bottom,bulk_density,organic_carbon,cores",
        "litter": "plot,frame_area,fresh,dry,ash,layer",
    }
    text = f"{heads[table]}\n{','.join(parts)}"
    try:
        more = CLASSES if table == "pieces" else ""
        inputs = read(tmp_path, with_file(table, more), **{f"{table}_csv": text})
    except InputFileError as error:
        inputs, message = None, str(error)
    assert f"{table}.csv" in message if inputs is None else accounted(inputs)
