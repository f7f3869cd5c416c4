"""The project file: keys, defaults, and what is said about a faulty one. Texts and figures are invented."""

from __future__ import annotations

import datetime as dt
import re
import tomllib
from pathlib import Path

import pytest
from hypothesis import given
from hypothesis import strategies as st
from read_samples import settings_text

from landcarbon.errors import SettingsError, UserError
from landcarbon.inventory import load_settings, parse_settings, settings_reference, template_text
from landcarbon.inventory.locate import key_lines, line_of
from landcarbon.inventory.measured import measured_parts, tables_given
from landcarbon.inventory.nearest import nearest
from landcarbon.inventory.reference import keys_below, places_of
from landcarbon.read.page import inventory_page

ROOT = Path(__file__).resolve().parent.parent
GOOD = settings_text()


def fault(text: str) -> str:
    with pytest.raises(SettingsError, match=r"^inventory\.toml") as caught:
        parse_settings(text, "inventory.toml")
    return str(caught.value)


def line_with(text: str, part: str) -> int:
    return next(number for number, line in enumerate(text.splitlines(), start=1) if part in line)


class TestLoading:
    def test_defaults_are_filled_in(self):
        settings = parse_settings(GOOD)
        assert settings.inventory.confidence == 0.95
        assert settings.inventory.seed == 1
        assert settings.plots.design.kind == "circle"
        assert settings.plots.subplots == 1
        assert settings.surveys["2014"].plots_without_rows == "missing"
        assert settings.parcels is None
        assert settings.heights.missing == "curve"
        assert settings.equations.out_of_range == "flag"
        assert settings.pools.above_ground.how == "measured"

    def test_pools_not_mentioned_carry_a_reason(self):
        pools = parse_settings(GOOD).pools
        assert (pools.litter.how, pools.litter.reason) == ("not counted", "no measurements given")

    def test_folder_and_path(self, tmp_path: Path):
        path = tmp_path / "inventory.toml"
        path.write_text(GOOD, encoding="utf-8")
        settings = load_settings(path)
        assert (settings.path, settings.folder) == (path, tmp_path)
        assert load_settings(tmp_path).path == path

    def test_byte_order_mark_and_windows_line_ends(self, tmp_path: Path):
        path = tmp_path / "inventory.toml"
        path.write_bytes(b"\xef\xbb\xbf" + GOOD.replace("\n", "\r\n").encode())
        assert load_settings(path).inventory.name == "Tarn Side"

    def test_settings_cannot_be_changed(self):
        settings = parse_settings(GOOD)
        with pytest.raises(ValueError, match="frozen"):
            settings.inventory.name = "other"

    def test_every_kind_of_design(self):
        for design in (
            'kind = "circle", radius_m = 5',
            'kind = "rectangle", width_m = 20, length_m = 25',
            'kind = "nested", circles = [ { radius_m = 4, dbh_min_cm = 0 }, { radius_m = 12.6, dbh_min_cm = 20 } ]',
            'kind = "angle_count", basal_area_factor = 4, unit = "m2/ha"',
            'kind = "angle_count", basal_area_factor = 10, unit = "ft2/ac"',
            'kind = "census", area_ha = 0.04',
            'kind = "census"',
        ):
            more = '[columns.plots]\narea = "size"'
            settings = parse_settings(settings_text(plots=f'file = "p.csv"\ndesign = {{ {design} }}', more=more))
            assert settings.plots.design.kind == design.split('"')[1]

    def test_dates_with_and_without_quotes(self):
        text = settings_text(surveys='[surveys.a]\ntrees = "t.csv"\nsince = 2014-05-01\nuntil = "2014-10-31"')
        survey = parse_settings(text).surveys["a"]
        assert (survey.since, survey.until) == (dt.date(2014, 5, 1), dt.date(2014, 10, 31))

    def test_species_inline_and_file_side_by_side(self):
        settings = parse_settings(settings_text(more='[species]\nfile = "species.csv"\nEI = "Quercus robur"\n'))
        assert settings.species.file == "species.csv"
        assert settings.species.names == {"EI": "Quercus robur"}

    def test_status_with_blank_code(self):
        settings = parse_settings(settings_text(more='[status]\nL = "live"\n"" = "absent"\n'))
        assert settings.status == {"L": "live", "": "absent"}

    def test_dump_can_be_written_as_json(self):
        dumped = parse_settings(GOOD).model_dump(mode="json")
        assert dumped["plots"]["design"] == {"kind": "circle", "radius_m": 10.0}


class TestFaults:
    @pytest.mark.parametrize(
        ("old", "new", "key", "told"),
        [
            ('name = "Tarn Side"', 'nam = "Tarn Side"', "inventory.nam", "Did you mean 'name'?"),
            ('name = "Tarn Side"', "name = 5", "inventory.name", "5 is given, but text in quotes is wanted"),
            ('region = "europe"', 'region = "europa"', "equations.region", "'north_america', 'europe', 'tropics'"),
            ('kind = "circle"', 'kind = "round"', "plots.design.kind", "Accepted: circle, rectangle, nested"),
            ('kind = "circle", ', "", "plots.design.kind", "this key is missing"),
            ("radius_m = 10", "radius_m = -1", "plots.design.radius_m", "greater than 0"),
            ("radius_m = 10", 'radius_m = "10"', "plots.design.radius_m", "a number is wanted"),
            ("radius_m = 10", "radius_m = inf", "plots.design.radius_m", "a finite number is wanted"),
            ("radius_m = 10", "radius = 10", "plots.design.radius", "Did you mean 'radius_m'?"),
            ('trees = "trees.csv"', 'tree = "trees.csv"', "surveys.2014.tree", "Did you mean 'trees'?"),
            ('trees = "trees.csv"', "", "surveys.2014", "no tree table"),
        ],
    )
    def test_key_line_and_remedy(self, old: str, new: str, key: str, told: str):
        text = GOOD.replace(old, new)
        message = fault(text)
        assert told in message
        assert key in message
        line = line_with(text, new or "[surveys.2014]") if key != "plots.design.kind" else line_with(text, "design")
        assert f"line {line}, {key}" in message

    def test_all_faults_at_once_in_the_order_of_lines(self):
        text = GOOD.replace('name = "Tarn Side"', "confidence = 2").replace("europe", "mars")
        text += '\n[units.trees]\ndbh = "kg"\n[columns.trees]\nheigth = "h"\n'
        message = fault(text)
        assert message.startswith("inventory.toml: 5 faults")
        lines = [int(number) for number in re.findall(r"line (\d+),", message)]
        assert lines == sorted(lines)
        for part in (
            "inventory.name: this key is missing",
            "inventory.confidence",
            "equations.region",
            "units.trees.dbh",
        ):
            assert part in message
        assert "columns.trees.heigth: unknown column. Did you mean 'height'?" in message

    def test_key_in_the_wrong_table(self):
        message = fault(settings_text(more="[estimation]\nconfidence = 0.9\n"))
        assert "belongs under [inventory]" in message

    def test_missing_region_lists_the_regions(self):
        text = GOOD.replace('region = "europe"', "")
        message = fault(text)
        assert "region = one of north_america, europe, tropics, mangrove, australia" in message
        assert f"line {line_with(text, '[equations]')}, equations.region" in message

    def test_missing_tables(self):
        message = fault('[inventory]\nname = "x"\n')
        for part in ("Give a table [plots]", "Give at least one survey", "a table [equations] with region"):
            assert part in message

    def test_no_survey(self):
        assert "surveys" in fault(GOOD.replace('[surveys.2014]\ntrees = "trees.csv"', "[surveys]"))

    @pytest.mark.parametrize(
        "second",
        ["{ radius_m = 3, dbh_min_cm = 20 }", "{ radius_m = 12, dbh_min_cm = 5 }", "{ radius_m = 4, dbh_min_cm = 9 }"],
    )
    def test_nested_circles_must_grow(self, second: str):
        design = f'kind = "nested", circles = [ {{ radius_m = 4, dbh_min_cm = 5 }}, {second} ]'
        message = fault(settings_text(plots=f'file = "p.csv"\ndesign = {{ {design} }}'))
        assert "a larger radius_m and a larger dbh_min_cm" in message

    @pytest.mark.parametrize(
        ("more", "told"),
        [
            ('[pools]\nlitter = "not counted"', "needs a reason"),
            ('[pools]\nharvested_wood = "measured"', "'measured' is not available for this pool"),
            ('[pools]\nsoil = { how = "guess" }', "'guess' is not accepted"),
            ('[pools]\nbelow_ground = { how = "ratio", model = "nowhere99" }', "no root model 'nowhere99'"),
            ('[pools]\nbelow_ground = { how = "ratio", mode = "x" }', "Did you mean 'model'?"),
            ('[heights]\nform = "naslundd"', "Did you mean 'naslund'?"),
            ('[heights]\nmissing = "curv"', "Did you mean 'curve'?"),
            ('[equations.species]\noak = "nothing"', "no equation 'nothing'"),
            ('[units.tree]\ndbh = "cm"', "Did you mean 'trees'?"),
            ('[units.trees]\ntree = "cm"', "this column has no unit"),
            ('[units.trees]\ndbh = "kg"', "'kg' is not a unit of length. Accepted: mm, cm"),
            ('[units.plots]\nslope = "ha"', "'ha' is not a unit of slope"),
            ('[strata]\nunit = "kg"', "'kg' is not a unit of area"),
            ("[strata]\nareas = { oak = -1 }", "greater than 0"),
            ('[strata]\nareas = { oak = 1 }\nfile = "s.csv"', "given both here and in a file"),
            ('[strata]\nareas = { oak = 1 }\nmerge = { ash = "oac" }', "Did you mean 'oak'?"),
            ('[strata]\nmerge = { a = "b", b = "c" }', "is itself folded into another"),
            ('[dates]\nformat = "day"', "does not tell day, month and year"),
            ('[dates]\nformat = "%m/%Y"', "does not tell day, month and year"),
            ('[status]\nX = "alive"', "'alive' is not accepted"),
            ("[columns.trees]\ndbh = 5", "text in quotes is wanted"),
        ],
    )
    def test_other_faults(self, more: str, told: str):
        text = settings_text(more=more)
        message = fault(text)
        assert told in message
        first, last = (line_with(text, more.splitlines()[at]) for at in (0, -1))
        lines = [int(number) for number in re.findall(r"line (\d+)", message)]
        assert lines
        assert all(first <= line <= last for line in lines)

    def test_tree_tables_given_twice(self):
        message = fault(settings_text(more='[trees]\nfile = "all.csv"'))
        assert "surveys.2014.trees: tree tables are given both here and under [trees]" in message

    def test_weighted_design_needs_its_column(self):
        plots = 'file = "p.csv"\ndesign = { kind = "weighted" }'
        assert "expansion = 'THEIR COLUMN' under [columns.trees]" in fault(settings_text(plots=plots))
        parse_settings(settings_text(plots=plots, more='[columns.trees]\nexpansion = "tph"'))

    def test_unknown_coordinate_systems(self):
        text = settings_text(more='[parcels]\nfile = "p.gpkg"\ncrs = "UTM 32"').replace("EPSG:25832", "EPSG:9")
        message = fault(text)
        assert f"line {line_with(text, 'EPSG:9')}, plots.crs: 'EPSG:9' is no coordinate system" in message
        assert "parcels.crs: 'UTM 32' is no coordinate system. Write it as e.g. 'EPSG:25832'." in message

    def test_census_needs_an_area(self):
        message = fault(settings_text(plots='file = "p.csv"\ndesign = { kind = "census" }'))
        assert "plots.design: the census design needs the area of the plots" in message

    def test_slope_correction_needs_lengths(self):
        plots = 'file = "p.csv"\ndesign = { kind = "angle_count", basal_area_factor = 4, unit = "m2/ha" }'
        plots += '\nslope_correction = "design on slope"'
        assert "no lengths laid out along the slope" in fault(settings_text(plots=plots))

    def test_basal_area_factor_needs_its_unit(self):
        plots = 'file = "p.csv"\ndesign = { kind = "angle_count", basal_area_factor = 10 }'
        message = fault(settings_text(plots=plots))
        assert 'plots.design.unit: this key is missing. Accepted: "m2/ha" or "ft2/ac".' in message

    def test_key_of_another_kind_of_design(self):
        plots = 'file = "p.csv"\ndesign = { kind = "circle", width_m = 20, length_m = 25 }'
        message = fault(settings_text(plots=plots))
        assert "plots.design.width_m: unknown key. It belongs to kind 'rectangle'; kind 'circle' takes radius_m." in (
            message
        )
        plots = 'file = "p.csv"\ndesign = { kind = "weighted", radius_m = 20 }'
        assert "It belongs to kind 'circle'; kind 'weighted' takes no further key." in fault(settings_text(plots=plots))
        plots = 'file = "p.csv"\ndesign = { kind = "circle", radius = 20 }'
        assert "plots.design.radius: unknown key. Did you mean 'radius_m'?" in fault(settings_text(plots=plots))

    def test_window_backwards(self):
        surveys = '[surveys.2014]\ntrees = "t.csv"\nsince = 2014-10-01\nuntil = 2014-05-01'
        assert "until lies before since" in fault(settings_text(surveys=surveys))

    def test_bad_day(self):
        surveys = '[surveys.2014]\ntrees = "t.csv"\nsince = "1.5.2014"'
        assert "year-month-day" in fault(settings_text(surveys=surveys))


SOIL = '[pools]\nsoil = "measured"\n[samples]\nsoil = "soil.csv"\n'
WOOD = '[pools]\ndead_wood = "measured"\n[samples]\npieces = "pieces.csv"\n'


class TestPools:
    def test_every_way_to_obtain_a_pool(self):
        more = (
            '[pools]\nbelow_ground = "ratio"\ndead_wood = { how = "measured", parts = ["standing", "down"] }\n'
            'litter = { how = "default", value_t_c_ha = 20, source = "a table" }\nsoil = { how = "measured" }\n'
            '[samples]\npieces = "p.csv"\nsoil = "s.csv"\n[dead_wood]\nline_m = 12.0\n'
            '[soil]\nbulk_density = "fine per whole volume"\ndepth_cm = 30\n'
        )
        settings = parse_settings(settings_text(more=more))
        assert (settings.pools.litter.value_t_c_ha, settings.pools.litter.source) == (20.0, "a table")
        assert settings.samples.pieces == "p.csv"
        assert measured_parts(settings) == {
            "above_ground": ("trees",),
            "dead_wood": ("standing", "down_coarse", "down_fine"),
            "soil": ("soil",),
        }

    def test_parts_follow_the_tables(self):
        more = (
            '[pools]\ndead_wood = "measured"\nlitter = "measured"\n[samples]\nlitter = "l.csv"\nlogs = "g.csv"\n'
            'saplings = "s.csv"\n[dead_wood]\nroots = "dead_wood"\n'
        )
        surveys = '[surveys.2014]\ntrees = "a.csv"\nground_vegetation = "v.csv"\n[surveys.2024]\ntrees = "b.csv"'
        settings = parse_settings(settings_text(surveys=surveys, more=more))
        assert measured_parts(settings) == {
            "above_ground": ("trees", "saplings", "ground_vegetation"),
            "dead_wood": ("standing", "down_coarse", "down_fine", "dead_roots"),
            "litter": ("litter", "duff"),
        }
        assert tables_given(settings) == ("logs", "litter", "ground_vegetation", "saplings")

    def test_standing_dead_trees_need_no_table(self):
        settings = parse_settings(settings_text(more='[pools]\ndead_wood = "measured"'))
        assert measured_parts(settings)["dead_wood"] == ("standing",)

    def test_defaults(self):
        settings = parse_settings(GOOD)
        assert settings.dead_wood.classes == {}
        assert (settings.dead_wood.volume, settings.dead_wood.roots) == ("auto", "not counted")
        assert (settings.soil.bulk_density, settings.soil.incomplete) == (None, "set aside")
        assert settings.litter.duff == ["duff", "humus"]
        assert measured_parts(settings) == {"above_ground": ("trees",)}

    def test_size_classes(self):
        more = WOOD + (
            '[dead_wood.classes.fine]\ncount = "fine_n"\nline_m = 2.0\nmean_diameter_cm = 0.30\ndensity_g_cm3 = 0.48\n'
            '[dead_wood.classes.large]\ndiameter = ["d1", "d2"]\nline_m = 12\n'
        )
        classes = parse_settings(settings_text(more=more)).dead_wood.classes
        assert (classes["fine"].count, classes["fine"].tilt_factor) == ("fine_n", 1.0)
        assert (classes["large"].diameter, classes["large"].density_g_cm3) == (["d1", "d2"], None)

    @pytest.mark.parametrize(
        ("more", "key", "told"),
        [
            ('[pools]\nlitter = "measured"', "pools.litter", "there is no table of measurements. Give litter = 'FILE'"),
            ('[pools]\nsoil = "ratio"', "pools.soil", "'ratio' is not available for this pool"),
            ('[pools]\nlitter = { how = "default" }', "pools.litter", "needs value_t_c_ha and source"),
            (
                '[pools]\nlitter = { how = "default", value_t_c_ha = 20 }',
                "pools.litter",
                "needs value_t_c_ha and source",
            ),
            (
                '[pools]\nlitter = { how = "default", value_t_c_ha = -1, source = "x" }',
                "pools.litter.value_t_c_ha",
                "greater than or equal to 0",
            ),
            (
                '[pools]\nabove_ground = { how = "default", value_t_c_ha = 9, source = "x" }',
                "pools.above_ground",
                "'measured'",
            ),
            ('[pools]\nsoil = { how = "measured", source = "x" }', "pools.soil", "belong to how = 'default' only"),
            (
                '[pools]\ndead_wood = { how = "measured", parts = ["standing", "stump"] }',
                "pools.dead_wood.parts[1]",
                "Did you mean 'stumps'?",
            ),
            (
                '[pools]\ndead_wood = { how = "measured", parts = ["down"] }',
                "pools.dead_wood.parts[0]",
                "the part 'down' has no table. Give pieces = 'FILE' or logs = 'FILE'",
            ),
            (
                '[pools]\nabove_ground = { how = "measured", parts = ["trees", "saplings"] }',
                "pools.above_ground.parts[1]",
                "the part 'saplings' has no table",
            ),
            ('[pools]\nlitter = { how = "measured", parts = [] }', "pools.litter.parts", "at least 1 item"),
            ('[dead_wood]\nvolume = "smallian"', "dead_wood.volume", "'smallian' is not accepted. Accepted: 'auto'"),
            (
                '[dead_wood]\nstanding = "class"',
                "dead_wood.standing",
                "'decay class', 'whole tree' or 'mangrove status'",
            ),
            ("[dead_wood]\nclass_density = { sound = 0 }", "dead_wood.class_density.sound", "greater than 0"),
            ('[dead_wood]\nmissing_class = "6"', "dead_wood.missing_class", "Classes of down wood: 1, 2, 3, 4, 5."),
            (
                '[dead_wood]\nclass_density = { sound = 0.5, rotten = 0.2 }\nmissing_class = "roten"',
                "dead_wood.missing_class",
                "'roten' is not among the decay classes of class_density. Did you mean 'rotten'?",
            ),
            (
                '[dead_wood]\nclass_density = { sound = 0.5, rotten = 0.2 }\nmissing_class = "3"',
                "dead_wood.missing_class",
                "Classes of class_density: sound, rotten.",
            ),
            (
                '[pools]\ndead_wood = "measured"\n[dead_wood]\nstanding = "mangrove status"\nmissing_class = "4"',
                "dead_wood.missing_class",
                "'4' is not among the decay classes of standing dead trees. Classes of standing dead trees: 1, 2, 3.",
            ),
            ('[litter]\ncarbon_basis = "ash"', "litter.carbon_basis", "'dry matter' or 'organic matter'"),
            ('[ground_vegetation]\ncarbon_basis = "ash"', "ground_vegetation.carbon_basis", "'dry matter'"),
            ('[litter]\ncarbon_set = "IPCC 2019"', "litter.carbon_set", "'IPCC 2006' or 'hardwood 2009'"),
            ('[litter]\nforest_floor = "beech"', "litter.forest_floor", "'pine', 'hardwood', 'birch' or 'spruce'"),
            ("[litter]\nbulk_densities = { duff = 0 }", "litter.bulk_densities.duff", "greater than 0"),
            ('[soil]\norganic = "peat"', "soil.organic", "true or false is wanted"),
            ('[dead_wood]\nroots = "litter"', "dead_wood.roots", "'not counted' or 'dead_wood'"),
            ("[dead_wood]\nline_m = 0", "dead_wood.line_m", "greater than 0"),
            ('[dead_wood.classes.a]\ncount = "n"\ndiameter = "d"', "dead_wood.classes.a", "not both"),
            ('[dead_wood.classes.a]\ncount = "n"', "dead_wood.classes.a", "need mean_diameter_cm"),
            (
                '[dead_wood.classes.a]\ndiameter = "n"\nmean_diameter_cm = 2',
                "dead_wood.classes.a",
                "belongs to a class of counts",
            ),
            ('[dead_wood.classes.a]\ncuont = "n"', "dead_wood.classes.a.cuont", "Did you mean 'count'?"),
            ("[litter]\ndry_share = 34.5", "litter.dry_share", "less than or equal to 1"),
            ("[litter]\ncarbon_fractions = { duff = 37 }", "litter.carbon_fractions.duff", "less than or equal to 1"),
            ("[saplings]\narea = 12", "saplings.area", "Did you mean 'area_m2'?"),
            ('[soil]\nbulk_density = "fine"', "soil.bulk_density", "'fine per whole volume'"),
            ('[soil]\npedotransfer = "saini"', "soil.pedotransfer", "Did you mean 'saini1966'?"),
            ("[soil]\norganic_matter_per_carbon = 0.58", "soil.organic_matter_per_carbon", "greater than 1"),
            (
                "[soil]\nwindows = [ { from_cm = 5, to_cm = 10, top_cm = 15, bottom_cm = 15 } ]",
                "soil.windows[0]",
                "depths grow downwards",
            ),
            (
                "[soil]\nwindows = [ { from_cm = 5, to_cm = 10, top_cm = 0, bottom_cm = 15 }, "
                "{ from_cm = 20, to_cm = 25, top_cm = 10, bottom_cm = 30 } ]",
                "soil",
                "two windows overlap between top_cm and bottom_cm",
            ),
            ("[soil]\nwindows = [ { from_cm = 5, to_cm = 10, top_cm = 0 } ]", "soil.windows[0].bottom_cm", "missing"),
            (WOOD, "samples.pieces", "nothing tells how long the lines are"),
            ('[samples]\nlines = "l.csv"', "samples.lines", "none of the pieces found on them. Give pieces = 'FILE'"),
            ('[samples]\nwood = "l.csv"', "samples.wood", "Known here: pieces, lines, logs"),
            (SOIL, "pools.soil", "no reference depth or mass is given"),
            (f"{SOIL}[soil]\ndepth_cm = 30", "soil.bulk_density", "this key is missing"),
            (
                f'{SOIL}[soil]\nbulk_density = "fine per whole volume"',
                "soil.depth_cm",
                "no reference depth or mass is given",
            ),
            (
                f'{SOIL}[soil]\nbulk_density = "fine per whole volume"\ndepth_cm = 30\nmass_t_ha = 3500',
                "soil.mass_t_ha",
                "Keep one of the two",
            ),
            (
                f'{SOIL}[soil]\nbulk_density = "fine per fine volume"\ndepth_cm = 30\n[columns.soil]\ncoarse = "x"',
                "soil.coarse",
                "Accepted: 'volume', 'mass'",
            ),
            (
                f'{SOIL}[soil]\nbulk_density = "whole per whole volume"\ndepth_cm = 30\n[units.soil]\ncoarse = "%"',
                "soil.coarse",
                "Accepted: 'volume', 'mass'",
            ),
            (
                f'{SOIL}[soil]\nbulk_density = "fine per whole volume"\ndepth_cm = 30\n'
                '[columns.soil]\norganic_matter = "LOI"',
                "soil.organic_matter_per_carbon",
                "nothing tells how much of it is carbon",
            ),
            ('[units.soil]\nbulk_density = "g"', "units.soil.bulk_density", "'g' is not a unit of density"),
            ('[units.litter]\nfresh = "g/cm3"', "units.litter.fresh", "'g/cm3' is not a unit of mass"),
            ('[columns.soils]\ntop = "x"', "columns.soils", "Did you mean 'soil'?"),
        ],
    )
    def test_faults(self, more: str, key: str, told: str):
        text = settings_text(more=more)
        message = fault(text)
        assert told in message
        assert re.search(rf"line \d+, {re.escape(key)}: ", message)
        first, last = (line_with(text, more.splitlines()[at]) for at in (0, -1))
        lines = [int(number) for number in re.findall(r"line (\d+)", message)]
        assert all(first <= line <= last for line in lines)

    def test_choices_of_the_pool_modules(self):
        more = (
            '[pools]\ndead_wood = "measured"\n'
            '[dead_wood]\nstanding = "whole tree"\nclass_density = { sound = 0.5, rotten = 0.2 }\n'
            'missing_class = "rotten"\n[litter]\ncarbon_basis = "organic matter"\ncarbon_set = "hardwood 2009"\n'
            'forest_floor = "spruce"\nbulk_densities = { duff = 0.12 }\n[ground_vegetation]\n'
            'carbon_basis = "dry matter"\n[soil]\norganic = true\n'
        )
        settings = parse_settings(settings_text(more=more))
        wood = settings.dead_wood
        assert (wood.standing, wood.missing_class) == ("whole tree", "rotten")
        assert wood.class_density == {"sound": 0.5, "rotten": 0.2}
        litter = settings.litter
        assert (litter.carbon_basis, litter.carbon_set, litter.forest_floor, litter.bulk_densities) == (
            "organic matter", "hardwood 2009", "spruce", {"duff": 0.12},
        )  # fmt: skip
        assert settings.ground_vegetation.carbon_basis == "dry matter"
        assert settings.soil.organic

    def test_choices_of_the_pool_modules_left_out(self):
        settings = parse_settings(GOOD)
        wood, litter = settings.dead_wood, settings.litter
        assert (wood.standing, wood.missing_class, wood.class_density) == (None, None, {})
        assert (litter.carbon_basis, litter.carbon_set, litter.forest_floor) == (None, None, None)
        assert litter.bulk_densities == {}
        assert settings.ground_vegetation.carbon_basis is None
        assert not settings.soil.organic

    def test_class_of_trees_without_one(self):
        for standing, missing in (("decay class", "5"), ("mangrove status", "3"), ("whole tree", "2")):
            more = f'[pools]\ndead_wood = "measured"\n[dead_wood]\nstanding = "{standing}"\nmissing_class = "{missing}"'
            assert parse_settings(settings_text(more=more)).dead_wood.missing_class == missing

    def test_coarse_fragments_are_inside_one_kind_of_bulk_density(self):
        more = SOIL + '[soil]\nbulk_density = "fine per whole volume"\ndepth_cm = 30\n[columns.soil]\ncoarse = "stones"'
        assert parse_settings(settings_text(more=more)).soil.coarse is None

    def test_lengths_of_lines_may_stand_in_many_places(self):
        for more in (
            WOOD + "[dead_wood]\nline_m = 20",
            WOOD + 'lines = "lines.csv"',
            WOOD + '[columns.pieces]\nline_length = "L"',
            WOOD + '[dead_wood.classes.a]\ndiameter = "d"\nline_m = 12',
            WOOD.replace('dead_wood = "measured"', "") + "[dead_wood]",
        ):
            assert parse_settings(settings_text(more=more)).samples.pieces == "pieces.csv"

    def test_tables_given_twice(self):
        surveys = '[surveys.2014]\ntrees = "t.csv"\nstumps = "a.csv"'
        text = settings_text(surveys=surveys, more='[samples]\nstumps = "b.csv"')
        message = fault(text)
        assert f"line {line_with(text, 'a.csv')}, surveys.2014.stumps: tables of stumps are given both" in message

    def test_pools_not_mentioned_stay_out_even_with_a_table(self):
        settings = parse_settings(settings_text(more='[samples]\nlitter = "l.csv"\n[litter]\nframe_area_m2 = 0.1'))
        assert (settings.pools.litter.how, settings.pools.litter.reason) == ("not counted", "no measurements given")


class TestUnreadable:
    def test_missing_file_suggests_a_neighbour(self, tmp_path: Path):
        (tmp_path / "inventory.toml").write_text(GOOD)
        with pytest.raises(SettingsError, match=r"no such file.*Did you mean 'inventory\.toml'"):
            load_settings(tmp_path / "inventry.toml")

    def test_missing_folder(self, tmp_path: Path):
        with pytest.raises(SettingsError, match="no such file"):
            load_settings(tmp_path / "no" / "inventory.toml")

    def test_folder(self, tmp_path: Path):
        with pytest.raises(SettingsError, match=r"a folder without an inventory\.toml"):
            load_settings(tmp_path)

    @pytest.mark.parametrize("data", [b"", b" \n\n", b"\xef\xbb\xbf"])
    def test_empty(self, tmp_path: Path, data: bytes):
        path = tmp_path / "inventory.toml"
        path.write_bytes(data)
        with pytest.raises(SettingsError, match="the file is empty"):
            load_settings(path)

    def test_not_utf8(self, tmp_path: Path):
        path = tmp_path / "inventory.toml"
        path.write_bytes('[inventory]\nname = "Wäldchen"\n'.encode("latin-1"))
        with pytest.raises(SettingsError, match=r"line 2 is not UTF-8 text.*Save the file as UTF-8"):
            load_settings(path)

    @pytest.mark.parametrize(
        ("text", "line"),
        [
            ("[inventory]\nname = Tarn\n", 2),
            ('[inventory\nname = "x"\n', 1),
            ('[inventory]\nname = "x"\nname = "y"\n', 3),
            ('[inventory]\nname = "x', 2),
            ('a = 1\n\n[plots]\nfile = "C:\\data"\n', 4),
        ],
    )
    def test_broken_syntax(self, text: str, line: int):
        message = fault(text)
        assert f"inventory.toml, line {line}: not readable as TOML" in message

    def test_error_is_a_user_error(self):
        with pytest.raises(UserError, match="not readable as TOML"):
            parse_settings("=")


class TestLines:
    TEXT = '''# head
[inventory]
name = "x # not a comment"

[plots]
design = { kind = "nested", circles = [
  { radius_m = 4, dbh_min_cm = 5 },   # small
  { radius_m = 12.6, dbh_min_cm = 20 },
] }
[surveys."20 14"]
trees = ["a.csv",
  'b.csv']
note = """
[fake]
key = 1
"""
[columns]
trees.dbh = "d"
[[many]]
k = 1
[[many]]
k = 2
[status]
"" = "absent"
"a\\"b" = "live"
'''

    @pytest.mark.parametrize(
        ("path", "line"),
        [
            (("inventory",), 2),
            (("inventory", "name"), 3),
            (("plots", "design", "kind"), 6),
            (("plots", "design", "circles", 0, "radius_m"), 7),
            (("plots", "design", "circles", 1, "dbh_min_cm"), 8),
            (("surveys", "20 14"), 10),
            (("surveys", "20 14", "trees", 1), 12),
            (("surveys", "20 14", "note"), 13),
            (("columns", "trees", "dbh"), 18),
            (("many", 1, "k"), 22),
            (("status", ""), 24),
            (("status", 'a"b'), 25),
        ],
    )
    def test_line_of_key(self, path: tuple[str | int, ...], line: int):
        assert key_lines(self.TEXT)[path] == line

    def test_text_in_quotes_is_no_key(self):
        assert ("fake",) not in key_lines(self.TEXT)

    def test_missing_key_falls_back_to_its_table(self):
        lines = key_lines(self.TEXT)
        assert line_of(lines, ("inventory", "crs")) == 2
        assert line_of(lines, ("elsewhere", "crs")) is None

    @given(
        st.dictionaries(
            st.text(st.characters(codec="utf-8", exclude_categories=["Cc", "Cs"]), max_size=6),
            st.one_of(
                st.integers(-9, 9), st.booleans(), st.lists(st.text("ab]#,", max_size=4), max_size=3), st.text('x}"\\')
            ),
            min_size=1,
            max_size=6,
        )
    )
    def test_every_key_of_a_random_table_is_found(self, table: dict[str, object]):
        """Identity: keys written one per line are found on that line; the reader of TOML is the standard library's."""

        def quoted(text: str) -> str:
            return '"' + text.replace("\\", "\\\\").replace('"', '\\"') + '"'

        def value(item: object) -> str:
            if isinstance(item, bool):
                return str(item).lower()
            if isinstance(item, list):
                return "[\n" + ", ".join(quoted(part) for part in item) + "]"
            return quoted(item) if isinstance(item, str) else str(item)

        text, wanted = "[t]\n", {}
        for key, item in table.items():
            wanted["t", key] = text.count("\n") + 1
            text += f"{quoted(key)} = {value(item)}\n"
        assert set(tomllib.loads(text)["t"]) == set(table)
        lines = key_lines(text)
        assert {path: lines[path] for path in wanted} == wanted


class TestReference:
    def test_every_key_has_a_meaning(self):
        assert [row.key for row in settings_reference() if not row.meaning] == []

    def test_known_keys(self):
        samples = ["pieces", "lines", "logs", "stumps", "litter", "ground_vegetation", "saplings", "soil"]
        assert keys_below(("samples",)) == samples
        survey = ["trees", "visits", *samples, "since", "until", "plots_without_rows"]
        assert keys_below(("surveys", "2014")) == survey
        assert keys_below(("pools", "litter")) == ["how", "parts", "model", "value_t_c_ha", "source", "reason"]
        assert keys_below(("soil", "windows", 0)) == ["from_cm", "to_cm", "top_cm", "bottom_cm"]
        assert keys_below(("dead_wood", "classes", "fine"))[:2] == ["count", "diameter"]
        assert "radius_m" in keys_below(("plots", "design", "circles", 0))
        assert places_of("seed") == ["inventory"]

    def test_page_is_current(self):
        page = (ROOT / "docs" / "inventory-file.md").read_text(encoding="utf-8")
        assert page == inventory_page(), "run: python -m landcarbon.read"

    def test_template_is_short_and_sound(self):
        settings = parse_settings(template_text())
        assert settings.inventory.name
        assert len(template_text().splitlines()) <= 35

    def test_nearest(self):
        assert nearest("DHB", ["dbh", "height"]) == "dbh"
        assert nearest("zzz", ["dbh", "height"]) is None
