"""Parcels and plots from vector files: formats, coordinate systems, areas, outlines."""

from __future__ import annotations

import math
import warnings
import zipfile
from pathlib import Path

import geopandas as gpd
import numpy as np
import pandas as pd
import pytest
import shapely
from pyproj import CRS
from read_samples import read, rules, settings_text, squares
from shapely.geometry import Point, Polygon, box

from landcarbon.errors import InputFileError, SettingsError
from landcarbon.inputs import Inputs
from landcarbon.read.crs import is_metric, parse_crs, utm_for
from landcarbon.read.vectors import geodesic_area_m2, mend_polygons

PARCELS = '[parcels]\nfile = "{}"\n'


def write(frame: gpd.GeoDataFrame, path: Path) -> None:
    if path.suffix == ".zip":
        folder = path.with_suffix("")
        folder.mkdir()
        frame.to_file(folder / "parcels.shp")
        with zipfile.ZipFile(path, "w") as archive:
            for file in sorted(folder.iterdir()):
                archive.write(file, f"data/{file.name}")
    elif path.suffix in (".parquet", ".geoparquet"):
        frame.to_parquet(path)
    else:
        frame.to_file(path)


def with_parcels(
    folder: Path, frame: gpd.GeoDataFrame, name: str = "parcels.gpkg", more: str = "", **files: str
) -> Inputs:
    path = folder / name
    path.unlink(missing_ok=True)
    write(frame, path)
    return read(folder, settings_text(more=PARCELS.format(name) + more), **files)


class TestFormats:
    @pytest.mark.parametrize(
        "name",
        ["parcels.gpkg", "parcels.geojson", "parcels.shp", "parcels.zip", "parcels.parquet", "parcels.geoparquet"],
    )
    def test_same_parcels_from_every_format(self, tmp_path: Path, name: str):
        frame = squares().to_crs("EPSG:4326") if name.endswith("json") else squares()
        inputs = with_parcels(tmp_path, frame, name)
        parcels = inputs.parcels
        assert parcels is not None
        assert parcels["parcel"].tolist() == ["West", "East"]
        assert parcels["stratum"].tolist() == ["oak", "birch"]
        assert parcels["area_ha"].tolist() == pytest.approx([1.0, 1.0], rel=1e-3)
        assert inputs.plots["parcel"].tolist() == ["West", "East", "West"]
        assert inputs.plots["stratum"].tolist() == ["oak", "birch", "oak"]
        wanted = "EPSG:32632" if name.endswith("json") else "EPSG:25832"  # zone of the data, or that of the parcels
        assert inputs.crs == wanted
        assert inputs.files["file"].iloc[0] == name

    def test_files_beside_a_shapefile_are_listed(self, tmp_path: Path):
        inputs = with_parcels(tmp_path, squares(), "parcels.shp")
        shapefile = [name for name in inputs.files["file"] if name.startswith("parcels.")]
        assert shapefile[0] == "parcels.shp"
        assert {"parcels.dbf", "parcels.shx", "parcels.prj"} <= set(shapefile)

    def test_layers(self, tmp_path: Path):
        squares().to_file(tmp_path / "parcels.gpkg", layer="stands")
        squares().to_file(tmp_path / "parcels.gpkg", layer="other")
        with pytest.raises(InputFileError, match=r"holds 2 layers.*Name one by layer: stands, other"):
            read(tmp_path, settings_text(more=PARCELS.format("parcels.gpkg")))
        with pytest.raises(InputFileError, match=r"no layer 'stand'.*Did you mean 'stands'\?"):
            read(tmp_path, settings_text(more=PARCELS.format("parcels.gpkg") + 'layer = "stand"'))
        assert len(read(tmp_path, settings_text(more=PARCELS.format("parcels.gpkg") + 'layer = "stands"')).parcels) == 2
        assert len(read(tmp_path, settings_text(more=PARCELS.format("parcels.gpkg#stands"))).parcels) == 2

    @pytest.mark.parametrize(
        "name", ["parcels.gpkg", "parcels.geojson", "parcels.shp", "parcels.zip", "parcels.geoparquet"]
    )
    def test_not_what_the_name_says(self, tmp_path: Path, name: str):
        """A file that points elsewhere (here a virtual one of GDAL) is not opened under another name."""
        (tmp_path / name).write_text('<OGRVRTDataSource><OGRVRTLayer name="x"/></OGRVRTDataSource>')
        with pytest.raises(InputFileError, match=r"whatever its name says"):
            read(tmp_path, settings_text(more=PARCELS.format(name)))

    @pytest.mark.parametrize(
        ("name", "data"),
        [
            ("parcels.gpkg", b"SQLite format 3\x00" + b"\x00" * 200),
            ("parcels.geojson", b'{"type": "FeatureCollection", "features": ['),
            ("parcels.shp", b"\x00\x00\x27\x0a" + b"\x00" * 96),
            ("parcels.zip", b"PK\x03\x04junk"),
            ("parcels.geoparquet", b"PAR1junkPAR1"),
        ],
    )
    def test_damaged(self, tmp_path: Path, name: str, data: bytes):
        (tmp_path / name).write_bytes(data)
        with pytest.raises(InputFileError, match=name):
            read(tmp_path, settings_text(more=PARCELS.format(name)))

    def test_archive_without_or_with_several_shapefiles(self, tmp_path: Path):
        with zipfile.ZipFile(tmp_path / "parcels.zip", "w") as archive:
            archive.writestr("readme.txt", "x")
        with pytest.raises(InputFileError, match="the archive holds no Shapefile"):
            read(tmp_path, settings_text(more=PARCELS.format("parcels.zip")))
        with zipfile.ZipFile(tmp_path / "parcels.zip", "a") as archive:
            archive.writestr("a.shp", "x")
            archive.writestr("b.shp", "x")
        with pytest.raises(InputFileError, match=r"several Shapefiles: a\.shp, b\.shp.*file\.zip#name\.shp"):
            read(tmp_path, settings_text(more=PARCELS.format("parcels.zip")))

    def test_table_without_geometry(self, tmp_path: Path):
        pd.DataFrame({"parcel": ["a"]}).to_parquet(tmp_path / "parcels.parquet")
        with pytest.raises(InputFileError, match="GeoParquet"):
            read(tmp_path, settings_text(more=PARCELS.format("parcels.parquet")))


class TestCoordinateSystems:
    def test_missing(self, tmp_path: Path):
        with warnings.catch_warnings():
            warnings.simplefilter("ignore", UserWarning)  # the writer says so too
            squares(crs=None).to_file(tmp_path / "parcels.gpkg")
        text = settings_text(more=PARCELS.format("parcels.gpkg"))
        with pytest.raises(InputFileError, match=r"does not state its coordinate system.*Give crs"):
            read(tmp_path, text)
        inputs = read(tmp_path, text.replace('parcels.gpkg"\n', 'parcels.gpkg"\ncrs = "EPSG:25832"\n'))
        assert inputs.crs == "EPSG:25832"

    def test_contradiction(self, tmp_path: Path):
        squares().to_file(tmp_path / "parcels.gpkg")
        text = settings_text(more=PARCELS.format("parcels.gpkg") + 'crs = "EPSG:25833"')
        with pytest.raises(InputFileError, match=r"the file states ETRS89 / UTM zone 32N, the settings say .* 33N"):
            read(tmp_path, text)

    def test_plots_and_parcels_in_different_systems(self, tmp_path: Path):
        """Identity: the same points in longitude and latitude fall into the same parcels and places."""
        points = gpd.GeoSeries([Point(400_010, 5_600_010), Point(400_110, 5_600_010)], crs="EPSG:25832").to_crs(4326)
        plots = "plot,lon,lat\n" + "".join(f"010{n},{p.x!r},{p.y!r}\n" for n, p in enumerate(points, start=1))
        text = settings_text(
            plots='file = "plots.csv"\ndesign = { kind = "circle", radius_m = 10 }', more=PARCELS.format("parcels.gpkg")
        )
        squares().to_file(tmp_path / "parcels.gpkg")
        inputs = read(tmp_path, text, plots_csv=plots)
        assert inputs.plots["parcel"].tolist() == ["West", "East"]
        np.testing.assert_allclose(inputs.plots["x"], [400_010, 400_110], atol=1e-4)
        np.testing.assert_allclose(inputs.plots["y"], [5_600_010] * 2, atol=1e-4)
        np.testing.assert_allclose(inputs.plots["lon"], points.x, atol=1e-9)

    def test_parcels_in_degrees_give_a_metric_system(self, tmp_path: Path):
        inputs = with_parcels(tmp_path, squares().to_crs(4326))
        assert inputs.crs == "EPSG:32632"
        assert inputs.parcels.crs.to_epsg() == 32632
        assert inputs.parcels["area_ha"].tolist() == pytest.approx([1, 1], rel=2e-3)

    def test_system_of_the_results(self, tmp_path: Path):
        squares().to_file(tmp_path / "parcels.gpkg")
        head = '[inventory]\nname = "x"\ncrs = "EPSG:3035"'
        inputs = read(tmp_path, settings_text(head=head, more=PARCELS.format("parcels.gpkg")))
        assert inputs.crs == "EPSG:3035"
        assert inputs.plots["parcel"].tolist() == ["West", "East", "West"]
        with pytest.raises(SettingsError, match="is no map grid in metres"):
            read(tmp_path, settings_text(head=head.replace("3035", "4326"), more=PARCELS.format("parcels.gpkg")))

    def test_without_parcels(self, tmp_path: Path):
        assert read(tmp_path).crs == "EPSG:25832"
        text = settings_text(plots='file = "plots.csv"\ndesign = { kind = "circle", radius_m = 10 }')
        inputs = read(tmp_path, text, plots_csv="plot,lon,lat\n0101,36.1,-18.7\n0102,36.2,-18.8\n")
        # published: UTM zone 37 spans 36 to 42 degrees east; EPSG:32737 is its southern half
        assert inputs.crs == "EPSG:32737"
        inputs = read(tmp_path, text, plots_csv="plot\n0101\n0102\n")
        assert inputs.crs is None
        assert "no locations" in rules(inputs)

    def test_feet_are_not_metres(self):
        assert not is_metric(parse_crs("EPSG:2264", ""))  # North Carolina in survey feet
        assert is_metric(parse_crs("EPSG:25832", ""))

    @pytest.mark.parametrize(
        ("lon", "lat", "code"),
        # published: zone number is floor((longitude + 180) / 6) + 1, EPSG 326xx north and 327xx south
        [(9.0, 50.0, 32632), (-78.1, 38.9, 32617), (36.1, -18.7, 32737), (179.9, 10.0, 32660), (-179.9, -10.0, 32701)],
    )
    def test_utm_zone(self, lon: float, lat: float, code: int):
        assert utm_for(np.array([lon, np.nan]), np.array([lat, np.nan])).to_epsg() == code


def zone_area(south_deg: float, north_deg: float, width_deg: float, a: float, f: float) -> float:
    """Area of an ellipsoidal quadrangle between parallels and meridians, by the closed formula.

    Published: Snyder, J.P. (1987) Map projections - a working manual, USGS Professional Paper 1395, authalic latitude,
    equation 3-12: area from the equator to latitude p over a longitude l is a^2 l (1 - e^2) / 2 times
    [sin p / (1 - e^2 sin^2 p) - ln((1 - e sin p) / (1 + e sin p)) / (2 e)].
    """
    e = math.sqrt(f * (2 - f))

    def q(latitude: float) -> float:
        s = math.sin(math.radians(latitude))
        return (1 - e * e) * (s / (1 - e * e * s * s) - math.log((1 - e * s) / (1 + e * s)) / (2 * e))

    return a * a * math.radians(width_deg) / 2 * (q(north_deg) - q(south_deg))


class TestAreas:
    @pytest.mark.parametrize("south", [-45.0, 0.0, 38.0, 60.0])
    def test_against_the_closed_formula(self, south: float):
        """Parallels are followed by many short steps, as the sides of our polygons are geodesics."""
        east = np.linspace(10, 11, 2001)
        ring = [(x, south) for x in east] + [(x, south + 1) for x in east[::-1]]
        found = geodesic_area_m2(gpd.GeoSeries([Polygon(ring)], crs="EPSG:4326"))[0]
        assert found == pytest.approx(zone_area(south, south + 1, 1, 6_378_137.0, 1 / 298.257223563), rel=1e-8)

    def test_planar_area_corrected_for_scale(self):
        """Published: on the middle meridian of UTM lengths are 0.9996 of those on the ground."""
        shape = gpd.GeoSeries([box(499_900, 5_600_000, 500_100, 5_600_200)], crs="EPSG:25832")
        assert geodesic_area_m2(shape)[0] == pytest.approx(40_000 / 0.9996**2, rel=1e-6)

    def test_holes_parts_and_winding(self):
        outer, hole = box(400_000, 5_600_000, 400_100, 5_600_100), box(400_010, 5_600_010, 400_020, 5_600_020)
        shapes = [
            outer,
            Polygon(list(outer.exterior.coords)[::-1]),
            outer.difference(hole),
            hole,
            shapely.MultiPolygon([hole, shapely.affinity.translate(hole, 50, 0)]),
            Polygon(),
        ]
        area = geodesic_area_m2(gpd.GeoSeries(shapes, crs="EPSG:25832"))
        assert area[0] == area[1] == pytest.approx(10_000, rel=1e-3)
        assert area[2] == pytest.approx(area[0] - area[3], rel=1e-12)
        assert area[4] == pytest.approx(2 * area[3], rel=1e-5)
        assert area[5] == 0

    def test_never_from_degrees(self, tmp_path: Path):
        degrees = with_parcels(tmp_path, squares().to_crs(4326)).parcels["area_ha"]
        metres = with_parcels(tmp_path, squares()).parcels["area_ha"]
        np.testing.assert_allclose(degrees, metres, rtol=1e-7)

    def test_method_is_told(self, tmp_path: Path):
        inputs = with_parcels(tmp_path, squares())
        assert inputs.area_method == "Areas: of parcels on the ellipsoid of their coordinate system (geodesic)."

    def test_map_far_from_the_ellipsoid_is_noted(self, tmp_path: Path):
        head = '[inventory]\nname = "x"\ncrs = "EPSG:3857"'  # the web map grid stretches lengths by 1 / cos(latitude)
        squares().to_file(tmp_path / "parcels.gpkg")
        inputs = read(tmp_path, settings_text(head=head, more=PARCELS.format("parcels.gpkg")))
        value = inputs.findings.set_index("rule").loc["map area differs", "value"]
        expected = 1 / math.cos(math.radians(50.54)) ** 2 - 1
        assert float(value.rstrip("%")) / 100 == pytest.approx(expected, abs=0.02)
        assert inputs.parcels["area_ha"].tolist() == pytest.approx([1, 1], rel=1e-3)

    def test_stated_areas_go_first(self, tmp_path: Path):
        frame = squares().assign(size=[2.5, 2.471])
        more = '[columns.parcels]\narea = "size"\n[units.parcels]\narea = "ac"'
        inputs = with_parcels(tmp_path, frame, more=more)
        assert inputs.parcels["area_ha"].tolist() == pytest.approx([2.5 * 0.40468564224, 2.471 * 0.40468564224])
        found = inputs.findings[inputs.findings["rule"] == "stated area differs"]
        assert found["value"].tolist() == ["West"]
        assert "as stated in their table" in inputs.area_method

    def test_unusable_stated_area(self, tmp_path: Path):
        inputs = with_parcels(tmp_path, squares().assign(area=[0.0, np.nan]), more='[units.parcels]\narea = "ha"')
        assert with_parcels(tmp_path, squares().assign(area=[9.0, 9.0])).parcels["area_ha"].max() < 2  # not mapped
        assert inputs.parcels["area_ha"].tolist() == pytest.approx([1, 1], rel=1e-3)
        assert "stated area not usable" in rules(inputs)


class TestOutlines:
    def test_crossing_outline_is_mended(self, tmp_path: Path):
        x, y = 400_000, 5_600_000
        bow = Polygon([(x, y), (x + 100, y + 100), (x + 100, y), (x, y + 100)])
        frame = squares()
        frame.loc[0, "geometry"] = bow
        inputs = with_parcels(tmp_path, frame)
        found = inputs.findings.set_index("rule").loc["invalid polygon"]
        assert "Self-intersection" in found["message"]
        assert found["value"] == "West"
        # identity: the two triangles of the bow hold half of the square
        assert inputs.parcels["area_ha"][0] == pytest.approx(0.5, rel=1e-3)
        assert inputs.parcels.geometry.is_valid.all()

    def test_only_polygons_remain(self):
        spike = Polygon([(0, 0), (10, 0), (10, 10), (10, 20), (10, 10), (0, 10)])
        mended, which = mend_polygons(gpd.GeoSeries([spike, Point(0, 0), None, box(0, 0, 1, 1)], crs="EPSG:25832"))
        assert which.tolist() == [True, False, False, False]
        assert mended.area.tolist() == [100, 0, 0, 1]
        assert set(mended.geom_type) <= {"Polygon", "MultiPolygon"}

    def test_parcels_without_area_are_left_out(self, tmp_path: Path):
        frame = squares()
        frame.loc[2] = ["Line", "oak", Polygon([(400_000, 5_600_000), (400_010, 5_600_000), (400_020, 5_600_000)])]
        frame.loc[3] = ["Nothing", "oak", None]
        inputs = with_parcels(tmp_path, frame)
        assert inputs.parcels["parcel"].tolist() == ["West", "East"]
        found = inputs.findings[inputs.findings["rule"] == "parcel without area"]
        assert found["value"].tolist() == ["Line", "Nothing"]
        assert not found["used"].any()

    def test_overlap(self, tmp_path: Path):
        inputs = with_parcels(tmp_path, squares(overlap=10))
        found = inputs.findings.set_index("rule").loc["overlapping parcels"]
        assert found["value"] == "West / East"
        assert "0.1000 ha" in found["message"]  # identity: 10 m by 100 m
        assert "overlapping parcels" not in rules(with_parcels(tmp_path, squares()))

    def test_gap_between_parcels_but_not_a_lake_inside_one(self, tmp_path: Path):
        x, y = 400_000, 5_600_000
        ring = box(x, y, x + 300, y + 300).difference(box(x + 100, y + 100, x + 200, y + 200))
        halves = [ring.intersection(box(x, y, x + 150, y + 300)), ring.intersection(box(x + 150, y, x + 300, y + 300))]
        lake = box(x + 300, y, x + 600, y + 300).difference(box(x + 400, y + 100, x + 500, y + 200))
        frame = gpd.GeoDataFrame({"parcel": ["a", "b", "c"]}, geometry=[*halves, lake], crs="EPSG:25832")
        inputs = with_parcels(tmp_path, frame)
        found = inputs.findings[inputs.findings["rule"] == "gap between parcels"]
        assert found["message"].tolist() == ["A gap of 1.0000 ha between parcels near 400150, 5600150 belongs to none."]

    def test_many_gaps_are_summed(self, tmp_path: Path):
        x, y = 400_000, 5_600_000
        gaps = shapely.union_all([box(x + 20 * k, y - 2, x + 20 * k + 10, y + 2) for k in range(1, 26)])
        halves = [box(x, y, x + 600, y + 100).difference(gaps), box(x, y - 100, x + 600, y).difference(gaps)]
        frame = gpd.GeoDataFrame({"parcel": ["a", "b"]}, geometry=halves, crs="EPSG:25832")
        inputs = with_parcels(tmp_path, frame)
        assert (inputs.findings["rule"] == "gap between parcels").sum() == 20
        rest = inputs.findings.set_index("rule").loc["further gaps between parcels", "message"]
        assert rest == "5 further gaps between parcels hold 0.0200 ha together."

    def test_ids(self, tmp_path: Path):
        with pytest.raises(InputFileError, match=r"1 parcel ids stand more than once: West.*join the polygons"):
            with_parcels(tmp_path, squares().assign(parcel=["West", "West"]))
        with pytest.raises(InputFileError, match="1 polygons have no parcel id"):
            with_parcels(tmp_path, squares().assign(parcel=["West", None]))
        with pytest.raises(InputFileError, match="no column 'parcel'"):
            with_parcels(tmp_path, squares().drop(columns="parcel"))

    def test_numbers_as_ids(self, tmp_path: Path):
        inputs = with_parcels(tmp_path, squares().assign(parcel=[7.0, 12.0]))
        assert inputs.parcels["parcel"].tolist() == ["7", "12"]

    def test_single_outline_needs_no_id(self, tmp_path: Path):
        inputs = with_parcels(tmp_path, squares().iloc[:1][["geometry"]])
        assert inputs.parcels[["parcel", "stratum"]].to_numpy().tolist() == [["1", "all"]]

    def test_blank_stratum(self, tmp_path: Path):
        inputs = with_parcels(tmp_path, squares().assign(stratum=["oak", None]))
        assert inputs.parcels["stratum"].tolist() == ["oak", "unassigned"]
        assert "parcel without stratum" in rules(inputs)

    def test_no_parcel_at_all(self, tmp_path: Path):
        with pytest.raises(InputFileError, match=r"parcels\.gpkg: the file has no features, but parcels are wanted"):
            with_parcels(tmp_path, squares().iloc[:0])

    def test_map_without_features(self, tmp_path: Path):
        (tmp_path / "parcels.geojson").write_text('{"type": "FeatureCollection", "features": []}')
        with pytest.raises(
            InputFileError, match=r"^parcels\.geojson: the file has no features, but parcels are wanted"
        ):
            read(tmp_path, settings_text(more=PARCELS.format("parcels.geojson")))


class TestPlotsInParcels:
    def test_outside_and_given(self, tmp_path: Path):
        plots = (
            "plot,x,y,parcel\n"
            "0101,400010,5600010,\n"  # in West
            "0102,400110,5600010,West\n"  # lies in East, given to West
            "0103,500000,5600010,\n"  # nowhere
            "0104,500000,5600010,East\n"  # nowhere, but given
            "0105,400110,5600020,Easst\n"  # a slip in the name: the place decides
            "0106,,,\n"  # no place
        )
        inputs = with_parcels(tmp_path, squares(), plots_csv=plots)
        table = inputs.plots.set_index("plot")
        assert table["parcel"].tolist() == ["West", "West", "", "East", "East", ""]
        assert table["inside"].tolist() == [True, True, False, True, True, False]
        assert table["stratum"].tolist() == ["oak", "oak", "", "birch", "birch", ""]
        apart = inputs.findings[inputs.findings["rule"] == "parcel against location"]
        assert apart["plot"].tolist() == ["0102", "0104"]
        assert "lies in East" in apart["message"].iloc[0]
        assert "lies in no parcel" in apart["message"].iloc[1]
        assert (
            inputs.findings.set_index("rule").loc["unknown parcel", "remedy"]
            == "Correct the name. Did you mean 'East'?"
        )

    def test_boundary_goes_to_the_first_parcel(self, tmp_path: Path):
        inputs = with_parcels(tmp_path, squares(), plots_csv="plot,x,y\n0101,400100,5600050\n0102,400000,5600000\n")
        assert inputs.plots["parcel"].tolist() == ["West", "West"]

    def test_stratum_of_the_plots_file_goes_first(self, tmp_path: Path):
        plots = "plot,x,y,stratum\n0101,400010,5600010,wet\n0102,400110,5600010,\n"
        inputs = with_parcels(tmp_path, squares(), plots_csv=plots)
        assert inputs.plots["stratum"].tolist() == ["wet", "birch"]
        assert inputs.strata.set_index("stratum")["area_source"].to_dict() == {
            "birch": "polygons",
            "oak": "polygons",
            "wet": "unknown",
        }

    def test_merged_strata(self, tmp_path: Path):
        inputs = with_parcels(tmp_path, squares(), more='[strata]\nmerge = { birch = "oak" }')
        assert inputs.strata["stratum"].tolist() == ["oak"]
        assert inputs.strata["area_ha"].tolist() == pytest.approx([2.0], rel=1e-3)
        assert set(inputs.plots["stratum"]) == {"oak"}

    def test_stated_stratum_area_against_polygons(self, tmp_path: Path):
        inputs = with_parcels(tmp_path, squares(), more="[strata]\nareas = { oak = 3 }")
        assert inputs.strata.set_index("stratum")["area_source"].to_dict() == {"birch": "polygons", "oak": "stated"}
        assert inputs.findings.set_index("rule").loc["stratum area differs", "value"] == "oak"

    @pytest.mark.parametrize("name", ["plots.gpkg", "plots.geojson", "plots.parquet"])
    def test_plots_as_points(self, tmp_path: Path, name: str):
        points = gpd.GeoDataFrame(
            {"no": ["0101", "0102"]}, geometry=[Point(400_010, 5_600_010), Point(400_110, 5_600_010)], crs="EPSG:25832"
        )
        write(points.to_crs(4326) if name.endswith("json") else points, tmp_path / name)
        plots = f'file = "{name}"\ndesign = {{ kind = "circle", radius_m = 10 }}'
        squares().to_file(tmp_path / "parcels.gpkg")
        more = PARCELS.format("parcels.gpkg") + '[columns.plots]\nplot = "no"'
        inputs = read(tmp_path, settings_text(plots=plots, more=more))
        assert inputs.plots["parcel"].tolist() == ["West", "East"]
        np.testing.assert_allclose(inputs.plots["x"], [400_010, 400_110], atol=1e-3)

    @pytest.mark.parametrize("system", ["EPSG:25832", "EPSG:4326"])
    def test_plots_as_squares(self, tmp_path: Path, system: str):
        squares().rename(columns={"parcel": "plot"}).to_crs(system).to_file(tmp_path / "plots.gpkg")
        plots = 'file = "plots.gpkg"\ndesign = { kind = "census", area_ha = 1 }'
        inputs = read(tmp_path, settings_text(plots=plots), trees_csv="plot,species,dbh\nWest,oak,5\n")
        lon, lat = (inputs.plots[name].to_numpy() for name in ("lon", "lat"))
        middle = gpd.GeoSeries([Point(400_050, 5_600_050)], crs=25832).to_crs(4326)[0]
        assert (lon[0], lat[0]) == (pytest.approx(middle.x, abs=1e-6), pytest.approx(middle.y, abs=1e-6))
        assert "plots not drawn as points" in rules(inputs)


def test_geodesic_area_keeps_the_datum():
    """Identity: a move to longitude and latitude of the same datum does not move the outline."""
    shape = gpd.GeoSeries([box(747_000, 4_308_000, 747_400, 4_308_640)], crs="EPSG:26917")
    assert CRS(shape.crs).geodetic_crs.to_epsg() == 4269
    assert geodesic_area_m2(shape)[0] == pytest.approx(geodesic_area_m2(shape.to_crs(4269))[0], rel=1e-12)
