"""Boundaries that change between surveys: which outline is in force when, and where the plots lie then.

All expected values follow from the dates and outlines written in the test (identities).
"""

from __future__ import annotations

from pathlib import Path

import geopandas as gpd
import numpy as np
import pandas as pd
import pytest
from boundary_frames import CRS, PROJECT, cells, grid_plots, land, version, write_land
from read_samples import accounted, read, rules, settings_text, squares

import landcarbon
from landcarbon.errors import InputFileError
from landcarbon.inventory import load_settings
from landcarbon.pipeline import measure_trees, read_and_check
from landcarbon.read.validity import at_date, by_survey, check_periods, survey_days


def periods(*rows):
    frame = pd.DataFrame(rows, columns=["parcel", "valid_from", "valid_to"])
    for name in ("valid_from", "valid_to"):
        frame[name] = pd.to_datetime(frame[name]).astype("datetime64[s]")
    return frame.assign(file="parcels.gpkg", row=np.arange(1, len(frame) + 1))


def day(text):
    return pd.Timestamp(text)


class TestDays:
    def test_both_days_count_in(self):
        table = periods(("A", "2010-01-01", "2019-12-31"), ("B", None, None))
        assert at_date(table, day("2010-01-01")).tolist() == [0, 1]
        assert at_date(table, day("2019-12-31")).tolist() == [0, 1]
        assert at_date(table, day("2009-12-31")).tolist() == [1]
        assert at_date(table, day("2020-01-01")).tolist() == [1]

    def test_a_day_shared_by_two_belongs_to_the_later(self):
        table = periods(("A", None, "2020-01-01"), ("A1", "2020-01-01", None), ("A2", "2020-01-01", None))
        assert at_date(table, day("2019-12-31")).tolist() == [0]
        assert at_date(table, day("2020-01-01")).tolist() == [1, 2]

    def test_a_single_day(self):
        table = periods(("A", "2020-01-01", "2020-01-01"))
        assert at_date(table, day("2020-01-01")).tolist() == [0]

    def test_by_survey(self):
        table = periods(("A", None, "2019-12-31"), ("A", "2020-01-01", None), ("B", "2018-01-01", None))
        surveys = pd.DataFrame({"survey": ["1", "2"], "date": [day("2014-06-01"), day("2024-06-01")]})
        found = by_survey(table, surveys)
        assert found.to_dict("list") == {"survey": ["1", "2", "2"], "parcel": ["A", "A", "B"], "row": [0, 1, 2]}

    def test_survey_without_date_or_parcel(self):
        table = periods(("A", "2020-01-01", None))
        with pytest.raises(InputFileError, match=r"survey first has no date.*Map a date column"):
            by_survey(table, pd.DataFrame({"survey": ["first"], "date": [pd.NaT]}))
        with pytest.raises(InputFileError, match=r"no parcel is in force at survey 1 \(2014-06-01\).*Leave valid_from"):
            by_survey(table, pd.DataFrame({"survey": ["1"], "date": [day("2014-06-01")]}))

    def test_backward_and_overlapping_periods_are_refused(self):
        with pytest.raises(InputFileError, match=r"valid_to lies before valid_from: 'B' \(row 2\)"):
            check_periods(periods(("A", None, None), ("B", "2020-01-01", "2019-01-01")))
        with pytest.raises(InputFileError, match=r"in force at the same time: 'A' \(rows 1 and 3\)"):
            check_periods(periods(("A", None, "2020-06-01"), ("B", None, None), ("A", "2020-01-01", None)))
        with pytest.raises(InputFileError, match=r"in force at the same time: 'A' \(rows 1 and 2\)"):
            check_periods(periods(("A", None, None), ("A", None, "2020-01-01")))
        check_periods(periods(("A", None, "2020-01-01"), ("A", "2020-01-01", "2021-01-01"), ("A", "2021-01-02", None)))

    def test_the_day_of_a_survey(self):
        surveys = pd.DataFrame({"survey": ["2009", "second", "third", "fourth", "fifth"]})
        surveys["since"] = pd.to_datetime([None, "2014-05-01", "2018-05-01", None, None]).astype("datetime64[s]")
        surveys["until"] = pd.to_datetime([None, "2014-09-28", None, None, None]).astype("datetime64[s]")
        visits = pd.DataFrame(
            {
                "survey": ["fourth"] * 4,
                "date": pd.to_datetime(["2019-06-01", "2019-06-03", "2019-06-09", "1990-01-01"]),
                "visited": [True, True, True, False],
            }
        )
        days = survey_days(surveys, visits)["date"]
        assert days.dt.strftime("%Y-%m-%d").fillna("").tolist() == [
            "2009-07-01",
            "2014-07-15",
            "2018-05-01",
            "2019-06-03",
            "",
        ]


class TestReading:
    def split(self):
        return [
            version("A", cells(0, 0, 4, 1), None, "2020-01-01", land_use="wood"),
            version("A", cells(0, 0, 2, 1), "2020-01-01", None, land_use="wood"),
            version("B", cells(2, 0, 4, 1), "2020-01-01", None, stratum="birch"),
        ]

    @pytest.mark.parametrize("name", ["parcels.gpkg", "parcels.geojson", "parcels.shp", "parcels.parquet"])
    def test_versions_from_every_format(self, tmp_path: Path, name: str):
        plots = grid_plots(5, 1, per_side=1)
        write_land(tmp_path, self.split(), plots)
        frame = gpd.read_file(tmp_path / "parcels.gpkg")
        (tmp_path / "parcels.gpkg").unlink()
        if name.endswith("shp"):  # has no type for a moment; dates in text are common there
            for column in ("valid_from", "valid_to"):
                frame[column] = frame[column].dt.strftime("%Y-%m-%d")
        frame = frame.to_crs("EPSG:4326") if name.endswith("json") else frame
        frame.to_parquet(tmp_path / name) if name.endswith("parquet") else frame.to_file(tmp_path / name)
        columns = '[columns.parcels]\nvalid_from = "valid_from"\nvalid_to = "valid_to"\n'
        inputs = read(tmp_path, PROJECT.replace("parcels.gpkg", name) + columns)
        assert inputs.parcels["parcel"].tolist() == ["A", "B"]
        assert list(inputs.parcels) == ["parcel", "stratum", "land_use", "area_ha", "geometry"]
        assert inputs.parcels["area_ha"].tolist() == pytest.approx([2.0, 2.0], rel=2e-3)  # scale of the projection
        versions = inputs.parcel_versions
        assert list(versions) == ["parcel", "stratum", "land_use", "area_ha", "valid_from", "valid_to", "geometry"]
        assert versions["area_ha"].tolist() == pytest.approx([4.0, 2.0, 2.0], rel=2e-3)
        assert inputs.parcels_in_force.to_numpy().tolist() == [["2014", "A", 0], ["2024", "A", 1], ["2024", "B", 2]]
        assert inputs.strata["stratum"].tolist() == ["birch", "oak"]
        places = inputs.parcel_of
        assert places[places["survey"] == "2014"]["parcel"].tolist() == ["A", "A", "A", "A", ""]
        assert places[places["survey"] == "2024"]["parcel"].tolist() == ["A", "A", "B", "B", ""]
        assert places[places["survey"] == "2024"]["stratum"].tolist() == ["oak", "oak", "birch", "birch", ""]
        assert places["inside"].tolist() == [True] * 4 + [False] + [True] * 4 + [False]
        assert inputs.plots["parcel"].tolist() == ["A", "A", "B", "B", ""]
        assert "within the boundaries in force at each survey" in inputs.area_method
        told = inputs.findings.set_index("rule").loc["plots in changing parcels"]
        assert (told["value"], told["severity"]) == ("p002, p003", "note")

    def test_a_parcel_that_left_keeps_its_plots(self, tmp_path: Path):
        versions = [
            version("A", cells(0, 0, 2, 1)),
            version("B", cells(2, 0, 4, 1), None, "2019-12-31", stratum="sold"),
        ]
        inputs = land(tmp_path, versions, grid_plots(4, 1, per_side=1))
        assert inputs.parcels["parcel"].tolist() == ["A"]
        assert inputs.strata["stratum"].tolist() == ["oak"]
        assert inputs.plots[["parcel", "stratum", "inside"]].to_numpy().tolist() == [
            ["A", "oak", True],
            ["A", "oak", True],
            ["B", "sold", True],
            ["B", "sold", True],
        ]
        assert inputs.plots["inside"].dtype == bool
        assert inputs.parcel_of["inside"].tolist() == [True] * 6 + [False] * 2

    def test_trees_count_when_their_plot_was_in_the_inventory(self, tmp_path: Path):
        versions = [version("A", cells(0, 0, 2, 1)), version("B", cells(2, 0, 4, 1), None, "2019-12-31")]
        write_land(tmp_path, versions, grid_plots(4, 1, per_side=1))
        (tmp_path / "inventory.toml").write_text(PROJECT, encoding="utf-8")
        settings = load_settings(tmp_path / "inventory.toml")
        inputs = read_and_check(settings)
        assert inputs.trees["used"].tolist() == [True] * 6 + [False] * 2
        found = inputs.findings[inputs.findings["rule"] == "plot outside"]
        assert found[["survey", "plot"]].to_numpy().tolist() == [["2024", "p002"], ["2024", "p003"]]
        assert accounted(inputs)
        assert "no rows" not in set(inputs.findings["rule"])
        table = measure_trees(inputs, settings).plot_parts
        assert table.loc[table["survey"] == "2014", "parcel"].tolist() == ["A", "A", "B", "B"]
        assert table.loc[table["survey"] == "2024", "plot"].tolist() == ["p000", "p001"]
        assert (table.loc[table["inside"], "above_ground.trees"] > 0).all()

    def test_samples_count_when_their_plot_was_in_the_inventory(self, tmp_path: Path):
        versions = [version("A", cells(0, 0, 2, 1)), version("B", cells(2, 0, 4, 1), None, "2019-12-31")]
        plots = grid_plots(4, 1, per_side=1)
        write_land(tmp_path, versions, plots)
        layers = pd.DataFrame(
            {"plot": plots["plot"], "top": 0, "bottom": 30, "bulk_density": 1.0, "organic_carbon": 0.02}
        )
        pd.concat([layers.assign(survey=year) for year in (2014, 2024)]).to_csv(tmp_path / "soil.csv", index=False)
        text = PROJECT + (
            '[samples]\nsoil = "soil.csv"\n[pools]\nsoil = "measured"\n'
            '[soil]\nbulk_density = "fine per whole volume"\ndepth_cm = 30\n'
        )
        (tmp_path / "inventory.toml").write_text(text, encoding="utf-8")
        settings = load_settings(tmp_path / "inventory.toml")
        stage = measure_trees(read_and_check(settings), settings)
        soil = stage.plot_parts.set_index(["survey", "plot"])["soil.soil"]
        # Identity: 2 % x 1.0 g/cm3 x 30 cm = 60 t C/ha
        assert soil["2014"].tolist() == pytest.approx([60.0] * 4)
        assert soil["2024"].index.tolist() == ["p000", "p001"]
        found = stage.inputs.findings
        found = found[(found["rule"] == "plot outside") & (found["table"] == "soil")]
        assert found[["survey", "plot"]].to_numpy().tolist() == [["2024", "p002"], ["2024", "p003"]]
        assert not found["used"].any()

    def test_strata_are_counted_by_survey(self, tmp_path: Path):
        versions = [
            version("A", cells(0, 0, 2, 1)),
            version("B", cells(2, 0, 4, 1), None, "2019-12-31", stratum="sold"),
            version("C", cells(4, 0, 5, 1), None, "2019-12-31", stratum="bare"),
        ]
        write_land(tmp_path, versions, grid_plots(5, 1, per_side=1))
        (tmp_path / "inventory.toml").write_text(PROJECT, encoding="utf-8")
        inputs = read_and_check(load_settings(tmp_path / "inventory.toml"))
        found = inputs.findings[inputs.findings["rule"] == "too few plots"]
        assert found[["survey", "value"]].to_numpy().tolist() == [["2014", "bare"]]

    def test_the_location_goes_before_the_name(self, tmp_path: Path):
        plots = grid_plots(5, 1, per_side=1).assign(parcel=["A", "B", "A", "C", "B"])
        inputs = land(tmp_path, self.split(), plots)
        places = inputs.parcel_of
        # p004 lies in no parcel and is given to B, which is not there at the first survey
        assert places[places["survey"] == "2014"]["parcel"].tolist() == ["A", "A", "A", "A", ""]
        assert places[places["survey"] == "2024"]["parcel"].tolist() == ["A", "A", "B", "B", "B"]
        found = inputs.findings[inputs.findings["rule"] == "parcel against boundaries"]
        assert found["plot"].tolist() == ["p001", "p004"]
        assert found["message"].str.contains("lies in A;").tolist() == [True, False]
        assert found["message"].str.contains("lies in no parcel;").tolist() == [False, True]
        assert inputs.findings.set_index("rule").loc["unknown parcel", "plot"] == "p003"

    def test_a_name_alone_in_a_parcel_that_changes(self, tmp_path: Path):
        plots = grid_plots(4, 1, per_side=1).assign(parcel=["", "", "", "A"])
        plots.loc[3, ["x", "y"]] = np.nan
        inputs = land(tmp_path, self.split(), plots)
        assert inputs.parcel_of.groupby("survey")["parcel"].last().tolist() == ["A", "A"]
        assert inputs.findings.set_index("rule").loc["changing parcel without location", "plot"] == "p003"

    def test_a_stratum_of_the_plot_goes_before_that_of_the_parcel(self, tmp_path: Path):
        plots = grid_plots(4, 1, per_side=1).assign(stratum=["", "", "drawn", ""])
        places = land(tmp_path, self.split(), plots).parcel_of
        assert places["stratum"].tolist() == ["oak", "oak", "drawn", "oak", "oak", "oak", "drawn", "birch"]

    def test_gaps_and_idle_rows_are_told(self, tmp_path: Path):
        versions = [
            version("A", cells(0, 0, 2, 1), None, "2010-12-31"),
            version("A", cells(0, 0, 2, 1), "2016-01-01"),
            version("B", cells(2, 0, 4, 1), None, "2015-12-31"),
            version("B", cells(2, 0, 3, 1), "2018-01-01"),
        ]
        inputs = land(tmp_path, versions, grid_plots(4, 1))
        gaps = inputs.findings[inputs.findings["rule"] == "gap in time"]
        assert gaps["value"].tolist() == ["A", "B"]
        assert gaps["message"].tolist() == [
            "No outline of the parcel is in force from 2011-01-01 to 2015-12-31; it counts as not in the inventory at "
            "survey 2014.",
            "No outline of the parcel is in force from 2016-01-01 to 2017-12-31.",
        ]
        idle = inputs.findings[inputs.findings["rule"] == "in force at no survey"]
        assert idle["row"].tolist() == [1]
        assert not idle["used"].any()

    def test_overlaps_are_looked_for_among_the_outlines_of_one_day(self, tmp_path: Path):
        assert "overlapping parcels" not in rules(land(tmp_path, self.split(), grid_plots(4, 1)))
        versions = [*self.split(), version("C", cells(3, 0, 5, 1), "2022-01-01")]
        inputs = land(tmp_path, versions, grid_plots(4, 1))
        found = inputs.findings[inputs.findings["rule"] == "overlapping parcels"]
        assert found[["survey", "value"]].to_numpy().tolist() == [["2024", "B / C"]]

    def test_refused_with_one_message(self, tmp_path: Path):
        plots = grid_plots(4, 1)
        again = version("A", cells(0, 0, 1, 1), "2019-01-01", "2019-06-01")
        with pytest.raises(InputFileError, match=r"parcels.gpkg.*same time: 'A' \(rows 1 and 4\)"):
            land(tmp_path, [*self.split(), again], plots)
        with pytest.raises(InputFileError, match=r"valid_to lies before valid_from: 'B' \(row 2\)"):
            land(
                tmp_path,
                [version("A", cells(0, 0, 1, 1)), version("B", cells(1, 0, 2, 1), "2020-01-01", "2010-01-01")],
                plots,
            )
        with pytest.raises(InputFileError, match=r"no parcel is in force at survey 2014 \(2014-06-15\)"):
            land(tmp_path, [version("A", cells(0, 0, 4, 1), "2015-01-01")], plots)

    def test_a_date_that_cannot_be_read_is_no_open_end(self, tmp_path: Path):
        frame = squares().assign(valid_from=["2014-01-01", "spring"])
        frame.to_file(tmp_path / "parcels.gpkg")
        with pytest.raises(InputFileError, match=r"1 cells under 'valid_from' hold no date.*'spring' in row 2"):
            read(tmp_path, settings_text(more='[parcels]\nfile = "parcels.gpkg"\n'))

    def test_ids_may_not_repeat_without_dates(self, tmp_path: Path):
        frame = squares().assign(parcel="A", valid_from=None, valid_to=None)
        frame.to_file(tmp_path / "parcels.gpkg")
        with pytest.raises(InputFileError, match=r"1 parcel ids stand more than once.*valid_from and valid_to"):
            read(tmp_path, settings_text(more='[parcels]\nfile = "parcels.gpkg"\n'))

    def test_without_dates_nothing_is_added(self, tmp_path: Path):
        squares().assign(valid_from=None, valid_to=None).to_file(tmp_path / "parcels.gpkg")
        dated = read(tmp_path, settings_text(more='[parcels]\nfile = "parcels.gpkg"\n'))
        squares().to_file(tmp_path / "parcels.gpkg")
        plain = read(tmp_path, settings_text(more='[parcels]\nfile = "parcels.gpkg"\n'))
        for inputs in (dated, plain):
            assert (inputs.parcel_versions, inputs.parcels_in_force, inputs.parcel_of) == (None, None, None)
        assert dated.area_method == plain.area_method
        pd.testing.assert_frame_equal(dated.plots, plain.plots)
        pd.testing.assert_frame_equal(pd.DataFrame(dated.parcels), pd.DataFrame(plain.parcels))
        pd.testing.assert_frame_equal(dated.findings, plain.findings)

    def test_a_run_goes_through(self, tmp_path: Path):
        write_land(tmp_path, self.split(), grid_plots(4, 1))
        (tmp_path / "inventory.toml").write_text(PROJECT, encoding="utf-8")
        results = landcarbon.open_inventory(tmp_path).results
        assert set(results.parcels["parcel"]) == {"A", "B"}
        assert results.parcels.crs == CRS
        assert (results.reconciliation["balance"] == 0).all()
        effect = results.further["area_effect"]
        assert effect.loc[effect["pool"] == "all", "unit"].tolist() == ["Tarn Side", "oak", "birch", "A", "B"]
        made = effect["stock_since_t_c"] + effect["change_common_t_c"] + effect["area_effect_t_c"]
        assert made.tolist() == pytest.approx(effect["stock_until_t_c"].tolist())
        # Identity: every plot has one and the same tree, so B (half the land) takes half the stock over from A
        half = effect.set_index(["unit", "pool"])["area_effect_t_c"]
        assert half["B", "all"] == pytest.approx(-half["A", "all"], rel=1e-5)


def test_an_area_that_cannot_be_read_is_told(tmp_path: Path):
    squares().assign(hectares=["1.0", "one"]).to_file(tmp_path / "parcels.gpkg")
    more = '[parcels]\nfile = "parcels.gpkg"\n[columns.parcels]\narea = "hectares"\n'
    inputs = read(tmp_path, settings_text(more=more))
    found = inputs.findings.set_index("rule").loc["not readable and left blank"]
    assert (found["table"], found["value"]) == ("parcels", "one")
