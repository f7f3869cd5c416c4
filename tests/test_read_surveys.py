"""Rows to surveys, surveys to their order, and plots to visits."""

from __future__ import annotations

from pathlib import Path

import pandas as pd
import pytest
from read_samples import PLOTS, read, rules, settings_text

from landcarbon.errors import InputFileError, UserError
from landcarbon.inputs import Inputs
from landcarbon.inventory import parse_settings
from landcarbon.read.surveys import files_of, label_year, survey_by_label

LONG = (
    "survey,plot,species,dbh,date\n"
    "2014,0101,oak,10,2014-06-01\n"
    "2024.0,0101,oak,12,2024-06-01\n"
    "2019,0101,oak,11,2019-06-01\n"
    ",0102,oak,13,\n"
)
TWO = "[surveys.2024]\n[surveys.2014]"
WINDOWS = (
    "[surveys.late]\nsince = 2024-01-01\nuntil = 2024-12-31\n[surveys.early]\nsince = 2014-01-01\nuntil = 2014-12-31\n"
)
LONG_FILE = '[trees]\nfile = "trees.csv"'


def visit_of(inputs: Inputs, survey: str, plot: str) -> pd.Series:
    visits = inputs.visits
    return visits[(visits["survey"] == survey) & (visits["plot"] == plot)].iloc[0]


class TestSurveys:
    def test_by_label(self, tmp_path: Path):
        inputs = read(tmp_path, settings_text(surveys=TWO, more=LONG_FILE), trees_csv=LONG)
        assert inputs.surveys["survey"].tolist() == ["2014", "2024"]
        assert inputs.trees["survey"].cat.categories.tolist() == ["2014", "2024"]
        assert inputs.trees["survey"].astype(object).where(inputs.trees["survey"].notna(), "").tolist() == [
            "2014",
            "2024",
            "",
            "",
        ]
        assert inputs.trees["used"].tolist() == [True, True, False, False]
        found = inputs.findings[inputs.findings["rule"] == "unknown survey"]
        assert found["value"].tolist() == ["2019", ""]
        assert found["remedy"].iloc[0] == "Surveys of this file: 2024, 2014."

    def test_by_date(self, tmp_path: Path):
        text = settings_text(surveys=WINDOWS, more=LONG_FILE + '\n[columns.trees]\nsurvey = ""')
        inputs = read(tmp_path, text, trees_csv=LONG)
        assert inputs.surveys["survey"].tolist() == ["early", "late"]
        assert inputs.trees["used"].tolist() == [True, True, False, False]
        assert inputs.trees["survey"].tolist()[:2] == ["early", "late"]
        assert inputs.findings.loc[inputs.findings["rule"] == "date outside surveys", "value"].tolist() == [
            "2019-06-01",
            "",
        ]

    def test_unreadable_date_is_told_once(self, tmp_path: Path):
        trees = "plot,species,dbh,date\n0101,oak,10,2014-06-01\n0101,oak,10,June\n0101,oak,10,\n"
        inputs = read(tmp_path, settings_text(surveys=WINDOWS, more=LONG_FILE), trees_csv=trees)
        assert inputs.trees["used"].tolist() == [True, False, False]
        found = inputs.findings[~inputs.findings["used"]]
        assert found[["rule", "row", "value"]].to_numpy().tolist() == [
            ["date outside surveys", 4, ""],
            ["not readable", 3, "June"],
        ]

    def test_no_way_to_tell(self, tmp_path: Path):
        trees = "plot,species,dbh,date\n0101,oak,10,2014-06-01\n"
        with pytest.raises(InputFileError, match="nothing tells which row belongs to 2024"):
            read(tmp_path, settings_text(surveys=TWO, more=LONG_FILE), trees_csv=trees)
        with pytest.raises(InputFileError, match="neither a survey nor a date column"):
            read(tmp_path, settings_text(surveys=TWO, more=LONG_FILE), trees_csv="plot,species,dbh\n0101,oak,10\n")

    def test_overlapping_windows(self, tmp_path: Path):
        text = settings_text(surveys=WINDOWS.replace("2014-12-31", "2024-02-01"), more=LONG_FILE)
        with pytest.raises(InputFileError, match="windows of the surveys late and early overlap"):
            read(tmp_path, text, trees_csv=LONG.replace("survey,", "s,"))

    def test_one_survey_takes_the_whole_file(self, tmp_path: Path):
        text = settings_text(surveys="[surveys.first]", more=LONG_FILE)
        inputs = read(tmp_path, text, trees_csv=LONG)
        assert inputs.trees["survey"].tolist() == ["first"] * 4
        assert inputs.trees["used"].all()

    def test_row_of_another_survey_in_the_file_of_one(self, tmp_path: Path):
        surveys = '[surveys.2014]\ntrees = "trees.csv"\n[surveys.2024]\ntrees = "late.csv"'
        late = "plot,species,dbh\n0101,oak,12\n"
        inputs = read(tmp_path, settings_text(surveys=surveys), trees_csv=LONG, late_csv=late)
        assert inputs.trees["used"].tolist() == [True, False, True, True, True]
        assert "other survey" in rules(inputs)
        blind = settings_text(surveys=surveys, more='[columns.trees]\nsurvey = ""')
        assert read(tmp_path, blind).trees["used"].all()

    def test_file_shared_by_some_surveys(self, tmp_path: Path):
        surveys = '[surveys.2014]\ntrees = ["trees.csv"]\n[surveys.2024]\ntrees = ["trees.csv", "late.csv"]'
        late = "plot,species,dbh\n0102,oak,12\n"
        inputs = read(tmp_path, settings_text(surveys=surveys), trees_csv=LONG, late_csv=late)
        assert inputs.trees["survey"].astype(object).where(inputs.trees["used"], "").tolist() == [
            "2014",
            "2024",
            "",
            "",
            "2024",
        ]
        assert inputs.files["file"].tolist() == ["plots.csv", "trees.csv", "late.csv"]

    def test_order_by_window_then_dates_then_label(self, tmp_path: Path):
        surveys = (
            '[surveys.b]\ntrees = "b.csv"\n[surveys.a]\ntrees = "a.csv"\nsince = 2009-01-01\n'
            '[surveys."spring 2004"]\ntrees = "c.csv"\n[surveys.z]\ntrees = "c.csv"\nuntil = 1999-12-31'
        )
        files = {
            f"{n}_csv": f"survey,plot,species,dbh,date\n{n},0101,oak,5,{d}\n"
            for n, d in (("b", "2006-05-01"), ("a", "2010-05-01"))
        }
        shared = "survey,plot,species,dbh\nz,0101,oak,5\nspring 2004,0101,oak,5\n"
        inputs = read(tmp_path, settings_text(surveys=surveys), c_csv=shared, **files)
        assert inputs.surveys["survey"].tolist() == ["z", "spring 2004", "b", "a"]
        assert inputs.trees["survey"].cat.categories.tolist() == ["z", "spring 2004", "b", "a"]

    def test_labels(self):
        assert survey_by_label(["2014.0", "SPRING", "x"], ["2014", "Spring"]) == {
            "2014.0": "2014",
            "SPRING": "Spring",
            "x": "",
        }
        assert label_year("survey 2014 b") == 2014
        assert label_year("2014-2016") is None
        assert label_year("plot 12014") is None

    def test_files_in_the_order_of_the_settings(self):
        settings = parse_settings(settings_text(surveys='[surveys.b]\ntrees = ["x", "y"]\n[surveys.a]\ntrees = "x"'))
        assert files_of(settings, "trees") == {"x": ["b", "a"], "y": ["b"]}
        assert files_of(settings, "visits") == {}


class TestVisits:
    def test_derived_from_tree_rows(self, tmp_path: Path):
        inputs = read(tmp_path)
        visits = inputs.visits
        assert visits["plot"].tolist() == ["0101", "0102", "0103"]
        assert visits["visited"].tolist() == [True, True, False]
        assert visits["date"].dt.strftime("%Y-%m-%d").tolist()[:2] == ["2014-06-01", "2014-06-03"]
        assert visits["date_source"].tolist() == ["trees", "trees", ""]
        assert visits["date"].isna().tolist() == [False, False, True]
        assert visits[["share_inside", "slope_deg", "n_subplots"]].to_numpy().tolist() == [[1, 0, 1]] * 3
        found = inputs.findings.set_index("rule").loc["plots without rows"]
        assert found["value"] == "1"
        assert "missing there" in found["message"]

    def test_plots_without_rows_as_zero(self, tmp_path: Path):
        surveys = '[surveys.2014]\ntrees = "trees.csv"\nplots_without_rows = "zero"'
        inputs = read(tmp_path, settings_text(surveys=surveys))
        assert inputs.visits["visited"].all()
        assert visit_of(inputs, "2014", "0103")["date_source"] == "label"

    def test_rows_that_say_absent_are_evidence_of_a_visit(self, tmp_path: Path):
        inputs = read(tmp_path, trees_csv="plot,species,dbh,status\n0103,oak,,gone\n")
        assert inputs.visits["visited"].tolist() == [False, False, True]

    def test_median_date(self, tmp_path: Path):
        days = ("2014-06-01", "2014-06-03", "2014-09-30")
        trees = "plot,species,dbh,date\n" + "".join(f"0101,oak,9,{day}\n" for day in days)
        assert visit_of(read(tmp_path, trees_csv=trees), "2014", "0101")["date"] == pd.Timestamp("2014-06-03")

    def test_middle_of_the_window(self, tmp_path: Path):
        surveys = '[surveys.first]\ntrees = "trees.csv"\nsince = 2014-05-01\nuntil = 2014-05-31'
        inputs = read(tmp_path, settings_text(surveys=surveys), trees_csv="plot,species,dbh\n0101,oak,9\n")
        assert visit_of(inputs, "first", "0101")[["date", "date_source"]].tolist() == [
            pd.Timestamp("2014-05-16"),
            "window",
        ]

    def test_year_of_the_label(self, tmp_path: Path):
        inputs = read(tmp_path, trees_csv="plot,species,dbh\n0101,oak,9\n")
        assert visit_of(inputs, "2014", "0101")["date"] == pd.Timestamp("2014-07-01")
        found = inputs.findings.set_index("rule").loc["dates from labels"]
        assert "1 July of the year in the name of survey 2014 stands for 1 visits" in found["message"]

    def test_no_date_at_all(self, tmp_path: Path):
        surveys = '[surveys.first]\ntrees = "trees.csv"'
        inputs = read(tmp_path, settings_text(surveys=surveys), trees_csv="plot,species,dbh\n0101,oak,9\n")
        assert visit_of(inputs, "first", "0101")[["visited", "date_source"]].tolist() == [True, ""]

    VISITS = (
        "plot,date,visited,share_inside,slope,subplots\n"
        "0101,2014-05-05,yes,0.8,20,3\n"
        "0102,2014-05-06,no,,,\n"
        "0103,,yes,,,\n"
    )

    def test_from_a_file(self, tmp_path: Path):
        surveys = '[surveys.2014]\ntrees = "trees.csv"\nvisits = "visits.csv"'
        text = settings_text(surveys=surveys, more='[units.visits]\nslope = "percent"')
        inputs = read(tmp_path, text, visits_csv=self.VISITS)
        visits = inputs.visits.set_index("plot")
        assert visits["visited"].to_dict() == {"0101": True, "0102": False, "0103": True}
        assert visits.loc["0101", "share_inside"] == 0.8
        assert visits.loc["0101", "slope_deg"] == pytest.approx(11.3099, abs=5e-5)  # identity: arctangent of 0.2
        assert visits["n_subplots"].to_dict() == {"0101": 3, "0102": 1, "0103": 1}
        assert visits["date_source"].to_dict() == {"0101": "visit", "0102": "visit", "0103": "label"}

    def test_one_file_for_all_surveys(self, tmp_path: Path):
        more = LONG_FILE + '\n[visits]\nfile = "visits.csv"'
        visits = "survey,plot,visited\n2014,0101,1\n2024,0101,0\n2024,0103,1\n1999,0101,1\n"
        inputs = read(tmp_path, settings_text(surveys=TWO, more=more), trees_csv=LONG, visits_csv=visits)
        table = inputs.visits.pivot(index="plot", columns="survey", values="visited")
        assert table["2014"].to_dict() == {"0101": True, "0102": False, "0103": False}
        assert table["2024"].to_dict() == {"0101": False, "0102": False, "0103": True}
        assert inputs.findings.set_index("rule").loc["unknown survey of visit", "value"] == "1999"

    def test_odd_rows(self, tmp_path: Path):
        surveys = '[surveys.2014]\ntrees = "trees.csv"\nvisits = "visits.csv"'
        visits = "plot,visited,subplots\n0101,yes,1.5\n0101,no,\n0105,yes,\n0103,perhaps,\n"
        visits += "0104,,\n0106,,2\n"
        plots = PLOTS + "0104,400040,5600050\n0106,400060,5600050\n"
        inputs = read(tmp_path, settings_text(surveys=surveys), visits_csv=visits, plots_csv=plots)
        assert inputs.visits["visited"].tolist() == [True, True, False, False, False]
        doubtful = inputs.findings[inputs.findings["rule"] == "visit in doubt"]
        assert doubtful[["plot", "row"]].to_numpy().tolist() == [["0103", 5], ["0104", 6], ["0106", 7]]
        wanted = {
            "visit repeated",
            "unknown plot of visit",
            "not readable and left blank",
            "visit not listed",
            "number of subplots",
        }
        assert set(rules(inputs, "visits")) >= wanted
        assert "Did you mean '010" in inputs.findings.set_index("rule").loc["unknown plot of visit", "remedy"]
        assert inputs.findings.set_index("rule").loc["visit not listed", "plot"] == "0102"

    def test_visits_cannot_be_told_apart(self, tmp_path: Path):
        more = LONG_FILE + '\n[visits]\nfile = "visits.csv"'
        with pytest.raises(UserError, match="neither a survey nor a date column"):
            read(tmp_path, settings_text(surveys=TWO, more=more), trees_csv=LONG, visits_csv="plot,visited\n0101,1\n")

    def test_shape_from_the_plots_file(self, tmp_path: Path):
        plots = "plot,x,y,slope,share_inside,area\n0101,400010,5600010,10,80,0.1\n0102,400110,5600010,,,\n"
        text = settings_text(more='[units.plots]\nshare_inside = "percent"\narea = "ac"')
        visit = visit_of(read(tmp_path, text, plots_csv=plots), "2014", "0101")
        assert visit[["share_inside", "slope_deg"]].tolist() == [0.8, 10]
        assert visit["plot_area_ha"] == pytest.approx(0.04046856, abs=5e-9)  # published: one acre is 4046.8564224 m2

    def test_more_subplots_than_stated(self, tmp_path: Path):
        trees = "plot,subplot,species,dbh\n0101,1,oak,9\n0101,2,oak,9\n0102,1,oak,9\n"
        inputs = read(tmp_path, trees_csv=trees)
        found = inputs.findings[inputs.findings["rule"] == "more subplots than stated"]
        assert found["plot"].tolist() == ["0101"]
        assert "name 2 subplots, more than the 1" in found["message"].iloc[0]

    def test_dates_of_a_long_visits_file_place_the_surveys(self, tmp_path: Path):
        text = settings_text(
            surveys=WINDOWS, more=LONG_FILE + '\n[visits]\nfile = "visits.csv"\n[columns.trees]\nsurvey = ""'
        )
        visits = "plot,date\n0101,2014-03-03\n0101,2024-03-03\n0101,2019-03-03\n0102,March\n"
        inputs = read(tmp_path, text, trees_csv=LONG, visits_csv=visits)
        assert visit_of(inputs, "late", "0101")["date"] == pd.Timestamp("2024-03-03")
        assert inputs.findings.set_index("rule").loc["date of visit outside surveys", "value"] == "2019-03-03"
        told = inputs.findings[(inputs.findings["row"] == 5) & (inputs.findings["table"] == "visits")]
        assert told[["rule", "table", "value"]].to_numpy().tolist() == [["not readable", "visits", "March"]]


def test_species_table(tmp_path: Path):
    more = '[species]\nfile = "species.csv"\nbirch = "Betula pendula"'
    table = "species,scientific_name\nOAK,Quercus robur\nOAK,Quercus petraea\nunused,Abies alba\n"
    inputs = read(tmp_path, settings_text(more=more), species_csv=table)
    assert inputs.species.set_index("species")["scientific_name"].to_dict() == {
        "birch": "Betula pendula",
        "oak": "Quercus robur",
    }
    assert "species code repeated" in rules(inputs)


def test_species_codes_stand_for_themselves(tmp_path: Path):
    inputs = read(tmp_path, settings_text(more='[species]\noak = "Quercus robur"'))
    assert inputs.species["scientific_name"].tolist() == ["birch", "Quercus robur"]
    assert inputs.findings.set_index("rule").loc["species code not in table", "value"] == "birch"
    assert read(tmp_path, settings_text()).species["scientific_name"].tolist() == ["birch", "oak"]


class TestStrata:
    PLOTS = "plot,x,y,stratum\n0101,400010,5600010,oak\n0102,400110,5600010,ash\n0103,400030,5600050,small\n"

    def test_stated_areas_with_unit_and_merge(self, tmp_path: Path):
        more = '[strata]\nareas = { oak = 10, small = 5 }\nunit = "ac"\nmerge = { small = "oak" }'
        inputs = read(tmp_path, settings_text(more=more), plots_csv=self.PLOTS)
        strata = inputs.strata.set_index("stratum")
        assert strata.index.tolist() == ["ash", "oak"]
        assert strata.loc["oak", "area_ha"] == pytest.approx(15 * 0.40468564224)  # published: the international acre
        assert strata["area_source"].to_dict() == {"ash": "unknown", "oak": "stated"}
        assert inputs.plots["stratum"].tolist() == ["oak", "ash", "oak"]
        assert "stratum area unknown" in rules(inputs)
        assert inputs.area_method == "Areas: of strata as stated by the user; not known for 1 of 2 strata."

    def test_areas_from_a_file(self, tmp_path: Path):
        more = '[strata]\nfile = "strata.csv"\n[columns.strata]\narea = "acres"\n[units.strata]\narea = "ac"'
        inputs = read(
            tmp_path, settings_text(more=more), plots_csv=self.PLOTS, strata_csv="stratum,acres\noak,10\nash,many\n"
        )
        strata = inputs.strata.set_index("stratum")["area_ha"]
        assert strata["oak"] == pytest.approx(4.0468564224)
        assert strata[["ash", "small"]].isna().all()
        assert "stratum area not usable" in rules(inputs)

    def test_stratum_twice(self, tmp_path: Path):
        with pytest.raises(InputFileError, match="stratum 'oak' stands more than once"):
            read(
                tmp_path,
                settings_text(more='[strata]\nfile = "strata.csv"'),
                strata_csv="stratum,area\noak,10\noak,5\n",
            )

    def test_no_strata_at_all(self, tmp_path: Path):
        inputs = read(tmp_path)
        assert inputs.strata["stratum"].tolist() == ["all"]
        assert inputs.plots["stratum"].tolist() == ["all"] * 3
