"""Maps of cells: what they hold, that they add up, and that they come out the same each time."""

from __future__ import annotations

import hashlib

import geopandas as gpd
import numpy as np
import pandas as pd
import pytest
import rasterio
import shapely
from rasterio import Affine

from landcarbon.errors import LandcarbonError, SettingsError
from landcarbon.publish.raster_tiff import read_grid
from landcarbon.publish.rasters import (
    RasterRequest,
    check_raster_sums,
    raster_grid,
    write_change,
    write_density,
    write_rasters,
)
from landcarbon.read.rasters import RasterFile, RasterPlace

CRS = "EPSG:25832"
LEFT, TOP = 500_000.0, 5_600_000.0
SIDE = 1200.0


def parcels(count=12, seed=4):
    points = shapely.MultiPoint(np.random.default_rng(seed).uniform(50, SIDE - 50, (count, 2)))
    shapes = shapely.get_parts(shapely.voronoi_polygons(points, extend_to=shapely.box(0, 0, SIDE, SIDE)))
    shapes = shapely.intersection(shapes, shapely.box(33, 44, SIDE - 17, SIDE - 29))
    shapes = shapely.transform(shapes, lambda points: points + np.array([LEFT, TOP - SIDE]))
    frame = pd.DataFrame({"parcel": [f"P{k}" for k in range(count)], "stratum": ["oak", "pine"] * (count // 2)})
    return gpd.GeoDataFrame(frame.assign(area_ha=shapely.area(shapes) / 1e4), geometry=shapes, crs=CRS)


@pytest.fixture
def request_(tmp_path):
    generator = np.random.default_rng(1)
    for survey, more in (("2014", 0.0), ("2024", 6.0)):
        height = generator.gamma(6, 3, (60, 60)) + more
        height[:3] = -1
        options = {"driver": "GTiff", "dtype": "float32", "count": 1, "width": 60, "height": 60, "nodata": -1}
        with rasterio.open(
            tmp_path / f"h{survey}.tif", "w", crs=CRS, transform=Affine(20, 0, LEFT, 0, -20, TOP), **options
        ) as file:
            file.write(height.astype("float32"), 1)
    coefficients = pd.DataFrame(
        {
            "survey": ["2014"] * 2 + ["2024"] * 4,
            "stratum": ["", "", "oak", "oak", "pine", "pine"],
            "term": ["intercept", "height"] * 3,
            "value": [5.0, 4.0, -30.0, 6.0, 8.0, 3.5],
        }
    )
    files = [RasterFile("height", survey, f"h{survey}.tif") for survey in ("2014", "2024")]
    return RasterRequest("Fell", parcels(), RasterPlace(tmp_path, CRS), files, coefficients)


def tables(request, *, blank=(), shift=0.0):
    """Invented figures: stocks, and change which is their difference unless shifted."""
    area, names = request.parcels["area_ha"].to_numpy(), request.parcels["parcel"].to_numpy()
    since = np.random.default_rng(2).choice([0.0, 4.0, 90.0, 180.0], len(area)) * area
    until = np.random.default_rng(3).uniform(20, 250, len(area)) * area
    until[list(blank)] = np.nan
    rows = [pd.DataFrame({"survey": s, "unit": names, "stock_t_c": v}) for s, v in (("2014", since), ("2024", until))]
    stocks = pd.concat(rows).assign(by="parcel", pool="all")
    change = pd.DataFrame({"since": "2014", "until": "2024", "unit": names, "change_t_c": until - since + shift})
    other = stocks.assign(pool="soil", stock_t_c=1.0)
    return pd.concat([stocks, other]), change.assign(by="parcel", pool="all")


def by_shapely(path, parcels):
    """Independent: cell value times area of the cell inside each parcel, by intersections of every cell."""
    with rasterio.open(path) as file:
        values, transform = file.read(1).astype("float64"), file.transform
    row, column = (part.ravel() for part in np.indices(values.shape))
    left, top = transform.c + column * transform.a, transform.f + row * transform.e
    cells = shapely.box(left, top + transform.e, left + transform.a, top)
    area = np.array([shapely.area(shapely.intersection(cells, shape)) for shape in parcels.geometry]) / 1e4
    return area @ np.nan_to_num(values.ravel()), area, values


def test_cells_add_up_to_the_figures_of_parcels(request_, tmp_path):
    stocks, change = tables(request_, blank=[3])
    paths, findings = write_rasters(tmp_path, request_, stocks, change)
    assert [path.name for path in paths] == ["density_2014.tif", "density_2024.tif", "change_2014_2024.tif"]
    own = stocks[stocks["pool"] == "all"]
    figures = [own.loc[own["survey"] == survey, "stock_t_c"].to_numpy() for survey in ("2014", "2024")]
    figures.append(change["change_t_c"].to_numpy())
    for path, figure in zip(paths, figures, strict=True):
        sums, area, values = by_shapely(path, request_.parcels)
        known = np.isfinite(figure)
        assert sums[known] == pytest.approx(figure[known], rel=1e-6, abs=1e-9)
        assert check_raster_sums(path, request_.parcels, figure) < 1e-6
        covered = (area[known].sum(axis=0) > 1e-9).reshape(values.shape)
        assert np.isfinite(values).tolist() == covered.tolist()
    rules = findings["rule"].value_counts()
    assert rules["raster leaves parcel blank"] == 2  # 2024 and change
    assert rules["raster cells filled"] >= 2
    assert set(rules.index) == {"raster leaves parcel blank", "raster cells filled"}


def test_densities_are_not_negative_and_follow_the_raster(request_, tmp_path):
    stocks, change = tables(request_)
    paths, _ = write_rasters(tmp_path, request_, stocks, change)
    with rasterio.open(paths[1]) as file, rasterio.open(tmp_path / "h2024.tif") as height:
        values = file.read(1)
        told = height.read(1)[int((TOP - file.bounds.top) / 20) :, int((file.bounds.left - LEFT) / 20) :]
    told = told[: values.shape[0], : values.shape[1]]
    assert np.nanmin(values) >= 0
    known = np.isfinite(values) & (told >= 0)
    assert np.corrcoef(values[known], told[known])[0, 1] > 0.3


def test_change_is_the_difference_of_densities_where_figures_are(request_, tmp_path):
    stocks, change = tables(request_)
    paths, _ = write_rasters(tmp_path, request_, stocks, change)
    since, until, both = (rasterio.open(path).read(1).astype("float64") for path in paths)
    assert np.nanmax(np.abs(until - since - both)) < 1e-3
    stocks, change = tables(request_, shift=25.0)
    paths, _ = write_rasters(tmp_path, request_, stocks, change)
    sums, _, _ = by_shapely(paths[2], request_.parcels)
    assert sums == pytest.approx(change["change_t_c"].to_numpy(), rel=1e-9)


def test_small_net_changes_keep_their_digits(request_, tmp_path):
    """Gains and losses of cells that nearly cancel out are the hard case of rounding."""
    stocks, change = tables(request_)
    change["change_t_c"] = np.linspace(-0.01, 0.02, len(change))
    paths, _ = write_rasters(tmp_path, request_, stocks, change)
    sums, _, _ = by_shapely(paths[2], request_.parcels)
    assert sums == pytest.approx(change["change_t_c"].to_numpy(), rel=1e-6)


def test_files_say_what_they_are_and_come_out_the_same(request_, tmp_path):
    stocks, change = tables(request_)
    digests = []
    for name in ("one", "two"):
        (tmp_path / name).mkdir()
        paths, _ = write_rasters(tmp_path / name, request_, stocks, change)
        digests.append([hashlib.sha256(path.read_bytes()).hexdigest() for path in paths])
        assert sorted(path.name for path in (tmp_path / name).iterdir()) == sorted(path.name for path in paths)
    assert digests[0] == digests[1]
    with rasterio.open(paths[0]) as file:
        assert file.crs == CRS
        assert file.units == ("t C/ha",)
        assert file.descriptions == ("carbon density, all counted pools, survey 2014",)
        assert file.dtypes == ("float32",)
        assert np.isnan(file.nodata)
        assert file.profile["compress"] == "deflate"
        assert file.profile["tiled"]
        assert file.tags()["INVENTORY"] == "Fell"
        assert file.res == (20, 20)
    with rasterio.open(paths[2]) as file:
        assert file.tags()["SIGN"] == "positive: carbon gained by the land"


def test_without_rasters_cells_carry_the_density_of_their_parcel(request_, tmp_path):
    plain = RasterRequest("Fell", request_.parcels, request_.place, cell_m=25)
    stocks, change = tables(plain)
    paths, findings = write_rasters(tmp_path, plain, stocks, change)
    assert findings.empty
    sums, area, values = by_shapely(paths[1], plain.parcels)
    stock = stocks.loc[(stocks["survey"] == "2024") & (stocks["pool"] == "all"), "stock_t_c"].to_numpy()
    assert sums == pytest.approx(stock, rel=1e-6)
    whole = area > (1 - 1e-9) * 25 * 25 / 1e4
    for parcel in range(len(stock)):
        assert np.ptp(values.ravel()[whole[parcel]]) < 1e-4 * stock.max()
    grid = read_grid(paths[1])
    assert grid.cell_x == 25
    assert grid.left % 25 == 0


def test_a_raster_in_another_coordinate_system_serves_too(request_, tmp_path):
    """The grid is then made in that of the inventory, about as fine."""
    transform = Affine(0.0003, 0, 8.99, 0, -0.0002, 50.56)
    values = np.random.default_rng(1).gamma(6, 3, (120, 120)).astype("float32")
    options = {"driver": "GTiff", "dtype": "float32", "count": 1, "width": 120, "height": 120, "crs": "EPSG:4326"}
    with rasterio.open(tmp_path / "geo.tif", "w", transform=transform, **options) as file:
        file.write(values, 1)
    files = [RasterFile("height", "", "geo.tif")]
    other = RasterRequest("Fell", request_.parcels, request_.place, files, request_.coefficients)
    stocks, change = tables(other)
    paths, _ = write_rasters(tmp_path, other, stocks, change)
    assert 15 < read_grid(paths[0]).cell_x < 30
    sums, _, _ = by_shapely(paths[1], other.parcels)
    stock = stocks.loc[(stocks["survey"] == "2024") & (stocks["pool"] == "all"), "stock_t_c"].to_numpy()
    assert sums == pytest.approx(stock, rel=1e-6)


def test_a_parcel_that_cannot_be_met_is_told(request_, tmp_path):
    """Two parcels within one cell need two values of it."""
    shapes = [shapely.box(LEFT + x, TOP - 58, LEFT + x + 6, TOP - 42) for x in (44, 50)]
    frame = pd.DataFrame({"parcel": ["west", "east"], "stratum": "oak", "area_ha": 0.0096})
    small = gpd.GeoDataFrame(frame, geometry=shapes, crs=CRS)
    request = RasterRequest("Fell", small, request_.place, request_.files, request_.coefficients)
    path = tmp_path / "density_2014.tif"
    findings = write_density(path, request, raster_grid(request), "2014", np.array([1.0, 2.0]))
    assert findings["rule"].tolist() == ["raster does not add up"] * 2
    assert findings["value"].tolist() == ["west", "east"]
    assert path.exists()


def test_a_map_that_does_not_add_up_is_not_published(request_, tmp_path, monkeypatch):
    monkeypatch.setattr("landcarbon.publish.rasters.check_raster_sums", lambda *_: 2e-6)
    path = tmp_path / "density_2014.tif"
    with pytest.raises(LandcarbonError, match="cells differ from the parcel figures by 2e-06"):
        write_density(path, request_, raster_grid(request_), "2014", request_.parcels["area_ha"].to_numpy())
    assert not list(tmp_path.glob("*density*"))


def test_the_check_sees_a_wrong_cell(request_, tmp_path):
    stocks, change = tables(request_)
    paths, _ = write_rasters(tmp_path, request_, stocks, change)
    figure = change["change_t_c"].to_numpy()
    with rasterio.open(paths[2], "r+") as file:
        values = file.read(1)
        values[values.shape[0] // 2, values.shape[1] // 2] += 1.0
        file.write(values, 1)
    assert check_raster_sums(paths[2], request_.parcels, figure) > 1e-6


def test_change_wants_no_model_and_parcels_without_figures_stay_blank(request_, tmp_path):
    grid, stock = raster_grid(request_), request_.parcels["area_ha"].to_numpy() * 50
    maps = tmp_path / "a.tif", tmp_path / "b.tif"
    for path in maps:
        write_density(path, request_, grid, "none", stock)
    change = np.where(np.arange(len(stock)) == 2, 8.0, np.nan)
    findings = write_change(tmp_path / "c.tif", request_, grid, ("1", "2"), change, maps)
    assert findings["rule"].tolist() == ["raster leaves parcel blank"]
    sums, _, _ = by_shapely(tmp_path / "c.tif", request_.parcels)
    assert sums[2] == pytest.approx(8.0, rel=1e-9)


def test_absurdly_small_cells_are_refused(request_):
    tiny = RasterRequest("Fell", request_.parcels, request_.place, cell_m=0.001)
    with pytest.raises(SettingsError, match=r"cells would be too large. State cells larger than 0\.001 m"):
        raster_grid(tiny)


def test_a_model_that_names_a_raster_not_given_is_told(request_, tmp_path):
    bare = RasterRequest("Fell", request_.parcels, request_.place, (), request_.coefficients, cell_m=50)
    with pytest.raises(SettingsError, match="the model of survey 2014 takes raster height, which has no file"):
        write_density(tmp_path / "a.tif", bare, raster_grid(bare), "2014", np.ones(12))


def test_names_of_surveys_make_safe_and_distinct_names_of_files(request_, tmp_path):
    stocks, change = tables(request_)
    label = {"2014": "../spring/14", "2024": ".. spring 14"}
    stocks["survey"] = stocks["survey"].map(label)
    change["since"], change["until"] = change["since"].map(label), change["until"].map(label)
    paths, _ = write_rasters(tmp_path, request_, stocks, change)
    assert [path.name for path in paths] == [
        "density_spring_14.tif",
        "density_spring_14_.tif",
        "change_spring_14_spring_14.tif",
    ]
    assert all(path.parent == tmp_path for path in paths)
