"""Raster values under plots and over parcels."""

from __future__ import annotations

import geopandas as gpd
import numpy as np
import pandas as pd
import pyproj
import pytest
import rasterio
import shapely
from rasterio import Affine

from landcarbon.errors import InputFileError, SettingsError
from landcarbon.raster.grid import Window
from landcarbon.read.footprints import Footprint, footprint_polygons
from landcarbon.read.raster_files import open_raster
from landcarbon.read.rasters import RasterFile, RasterPlace, plot_values, serving_files, unit_means

CRS = "EPSG:25832"
LEFT, TOP = 500_000.0, 5_600_000.0


def write(path, values, *, transform=None, crs=CRS, mask=None, scale=None, **options):
    values = np.asarray(values)
    layers = values[None] if values.ndim == 2 else values
    transform = transform or Affine(10, 0, LEFT, 0, -10, TOP)
    options = {"driver": "GTiff", "dtype": layers.dtype, "crs": crs, "transform": transform} | options
    size = {"count": len(layers), "height": layers.shape[1], "width": layers.shape[2]}
    with rasterio.Env(GDAL_TIFF_INTERNAL_MASK=True), rasterio.open(path, "w", **options, **size) as dataset:
        dataset.write(layers)
        if mask is not None:
            dataset.write_mask(mask)
        if scale:
            dataset.scales, dataset.offsets = [scale[0]] * len(layers), [scale[1]] * len(layers)
    return path.name


def parcels_of(*shapes, strata=None):
    area = shapely.area(np.array(shapes, dtype=object)) / 1e4
    frame = pd.DataFrame({"parcel": [f"P{k + 1}" for k in range(len(shapes))], "area_ha": area})
    frame["stratum"] = strata or ["all"] * len(shapes)
    return gpd.GeoDataFrame(frame, geometry=list(shapes), crs=CRS)


def box(x0, y0, x1, y1):
    """Metres from the north-west corner of the raster, y downwards."""
    return shapely.box(LEFT + x0, TOP - y1, LEFT + x1, TOP - y0)


def plots_at(*places):
    x, y = np.array(places, dtype=float).T
    return pd.DataFrame({"plot": [str(k + 1) for k in range(len(x))], "x": LEFT + x, "y": TOP - y})


@pytest.fixture
def place(tmp_path):
    return RasterPlace(tmp_path, CRS)


GRADIENT = np.add.outer(np.arange(40.0), np.arange(30.0) * 100).astype("float32")


def by_shapely(values, shape, cell=10.0):
    """Mean over a polygon, weighted by areas of intersections of every cell."""
    row, column = (part.ravel() for part in np.indices(values.shape))
    left, top = LEFT + column * cell, TOP - row * cell
    area = shapely.area(shapely.intersection(shapely.box(left, top - cell, left + cell, top), shape))
    told = np.where(np.isfinite(values.ravel()), area, 0.0)
    return float(told @ np.nan_to_num(values.ravel()) / told.sum()), float(told.sum() / shape.area)


def test_plots_have_the_mean_under_their_ground(place):
    """Independent: areas of intersections by shapely."""
    file = RasterFile("height", "", write(place.folder / "a.tif", GRADIENT))
    plots = plots_at((103.0, 98.0), (55.0, 201.0), (7.0, 100.0), (-200.0, 100.0), (np.nan, np.nan))
    values, findings = plot_values([file], ["2014", "2024"], plots, Footprint(radius_m=12.6), place)
    assert list(values.columns) == ["survey", "plot", "height", "share_covered"]
    first = values[values["survey"] == "2014"]
    shapes, _ = footprint_polygons(plots["x"].to_numpy(), plots["y"].to_numpy(), Footprint(radius_m=12.6))
    for row in (0, 1, 2):
        mean, share = by_shapely(GRADIENT, shapes[row])
        assert first["height"].iloc[row] == pytest.approx(mean, rel=1e-9)
        assert first["share_covered"].iloc[row] == pytest.approx(share, rel=1e-9)
    assert first["height"].iloc[3:].isna().all()
    assert first["share_covered"].iloc[3:].tolist() == [0, 0]
    assert values.loc[values["survey"] == "2024", "height"].tolist()[:3] == first["height"].tolist()[:3]
    assert findings["rule"].tolist() == ["raster misses plot"]
    assert findings["plot"].tolist() == ["4"]


def test_a_plot_covered_by_less_than_half_has_no_value(place):
    file = RasterFile("height", "", write(place.folder / "a.tif", GRADIENT))
    values, findings = plot_values([file], ["1"], plots_at((2, 100), (-2, 100)), Footprint(radius_m=10), place)
    assert values["height"].notna().tolist() == [True, False]
    assert findings["message"].iloc[0].startswith("Raster height covers 37.")


def test_ground_beyond_the_parcels_does_not_count_if_asked(place):
    file = RasterFile("height", "", write(place.folder / "a.tif", GRADIENT))
    parcels = parcels_of(box(100, 0, 300, 400))
    plots, footprint = plots_at((100, 205), (150, 205), (40, 205)), Footprint(radius_m=10)
    cut, _ = plot_values([file], ["1"], plots, footprint, place, parcels=parcels)
    whole, _ = plot_values([file], ["1"], plots, footprint, place)
    assert cut["height"].iloc[0] > whole["height"].iloc[0] + 30  # only the eastern half
    assert cut["height"].iloc[1:].tolist() == whole["height"].iloc[1:].tolist()


@pytest.mark.parametrize(
    ("footprint", "area"),
    [
        (Footprint(radius_m=5), np.pi * 25),
        (Footprint(width_m=20, length_m=30), 600),
        (Footprint(area_ha=0.04), 400),
    ],
)
def test_footprints_have_their_area(footprint, area):
    shapes, points = footprint_polygons(np.array([5.0, np.nan]), np.array([6.0, 1.0]), footprint)
    assert shapes[0].area == pytest.approx(area, rel=1e-12)
    assert shapes[0].centroid.coords[0] == pytest.approx((5, 6))
    assert shapes[1].is_empty
    assert points == 0


def test_own_area_of_a_plot_goes_first_and_none_is_a_point(place):
    x = np.array([5.0, 5.0])
    shapes, points = footprint_polygons(x, x, Footprint(radius_m=3), np.array([0.09, np.nan]))
    assert [shape.area for shape in shapes] == pytest.approx([900, np.pi * 9])
    shapes, points = footprint_polygons(x, x, Footprint(), np.array([0.09, np.nan]))
    assert points == 1
    file = RasterFile("height", "", write(place.folder / "a.tif", GRADIENT))
    values, findings = plot_values([file], ["1"], plots_at((105, 205)), Footprint(), place)
    assert values["height"].tolist() == [1020.0]  # the cell under the centre: row 20, column 10
    assert findings["rule"].tolist() == ["plots without area of their own"]


def test_means_of_parcels_strata_and_inventory(place):
    """Independent: areas of intersections by shapely. Strata and inventory are means of parcels by covered area."""
    values = GRADIENT.copy()
    values[:10, :10] = np.nan
    file = RasterFile("height", "", write(place.folder / "a.tif", values, nodata=np.nan))
    shapes = [box(13, 17, 155, 203), box(155, 17, 290, 203), box(20, 250, 350, 333), box(310, 0, 340, 50)]
    parcels = parcels_of(*shapes, strata=["oak", "oak", "pine", "pine"])
    strata = pd.DataFrame({"stratum": ["oak", "pine", "bog"], "area_ha": [1.0, 1.0, 1.0]})
    means, findings = unit_means([file], ["1"], parcels, place, inventory="Fell", strata=strata)
    assert means["by"].tolist() == ["inventory", *["stratum"] * 3, *["parcel"] * 4]
    assert means["unit"].tolist() == ["Fell", "oak", "pine", "bog", "P1", "P2", "P3", "P4"]
    own = means.set_index(["by", "unit"])
    told = [by_shapely(values, shape) for shape in shapes[:3]]
    for name, (mean, share) in zip(["P1", "P2", "P3"], told, strict=True):
        assert own.loc[("parcel", name), "height"] == pytest.approx(mean, rel=1e-9)
        assert own.loc[("parcel", name), "share_covered"] == pytest.approx(share, rel=1e-9)
    assert np.isnan(own.loc[("parcel", "P4"), "height"])
    assert own.loc[("parcel", "P4"), "valid_ha"] == 0
    weight = np.array([shape.area * share for shape, (_, share) in zip(shapes[:3], told, strict=True)])
    mean = np.array([one for one, _ in told])
    assert own.loc[("stratum", "oak"), "height"] == pytest.approx(weight[:2] @ mean[:2] / weight[:2].sum())
    assert own.loc[("inventory", "Fell"), "height"] == pytest.approx(weight @ mean / weight.sum())
    assert own.loc[("inventory", "Fell"), "valid_ha"] == pytest.approx(weight.sum() / 1e4)
    assert np.isnan(own.loc[("stratum", "bog"), "height"])
    assert findings["rule"].tolist() == [*["raster misses part of parcel"] * 2, "raster misses parcel"]
    assert findings["value"].tolist() == ["P1", "P3", "P4"]


def test_a_survey_takes_its_own_raster_before_the_common_one(place):
    write(place.folder / "a.tif", np.full((40, 30), 1.0))
    write(place.folder / "b.tif", np.full((40, 30), 2.0))
    files = [
        RasterFile("height", "", "a.tif"),
        RasterFile("height", "2024", "b.tif"),
        RasterFile("red", "2014", "b.tif"),
    ]
    means, findings = unit_means(files, ["2014", "2024"], parcels_of(box(0, 0, 50, 50)), place, inventory="F")
    whole = means[means["by"] == "inventory"].set_index("survey")
    assert whole["height"].tolist() == [1.0, 2.0]
    assert whole["red"].tolist()[0] == 2.0
    assert np.isnan(whole["red"].tolist()[1])
    assert whole["covered.height"].tolist() == [1.0, 1.0]
    assert whole["covered.red"].tolist() == [1.0, 0.0]
    assert whole["share_covered"].tolist() == [1.0, 0.0]
    assert sorted(set(findings["rule"])) == ["raster constant", "raster lacks survey"]
    with pytest.raises(SettingsError, match="raster height is named twice for survey 2024"):
        unit_means([*files, files[1]], ["2014"], parcels_of(box(0, 0, 50, 50)), place)


def test_terms_of_models_find_their_files():
    """A model may take the raster of another survey, named with it, or the last there is."""
    files = [RasterFile("height", survey, f"{survey}.tif") for survey in ("2009", "2014")]
    files.append(RasterFile("slope", "", "slope.tif"))
    paths = [file.path for file in serving_files(files, ["height", "height 2009", "slope"], "2014")]
    assert paths == ["2014.tif", "2009.tif", "slope.tif"]
    assert [file.path for file in serving_files(files, ["height"], "2024")] == ["2014.tif"]
    with pytest.raises(SettingsError, match=r"takes raster red, which has no file\. Rasters are: height, slope"):
        serving_files(files, ["red"], "2014")


def test_without_parcels_there_are_no_means(place):
    means, findings = unit_means([RasterFile("height", "", "none.tif")], ["1"], None, place)
    assert list(means.columns) == ["survey", "by", "unit", "height", "valid_ha", "share_covered"]
    assert means.empty
    assert findings.empty


@pytest.mark.parametrize("kind", ["nodata", "mask", "nan", "alpha"])
def test_missing_cells_are_known_however_they_are_written(place, kind):
    values = GRADIENT.astype("float32")
    hole = np.zeros(values.shape, dtype=bool)
    hole[3:9, 4:11] = True
    path = place.folder / "a.tif"
    if kind == "nodata":
        write(path, np.where(hole, -1, values).astype("float32"), nodata=-1)
    elif kind == "mask":
        write(path, values, mask=~hole)
    elif kind == "nan":
        write(path, np.where(hole, np.nan, values).astype("float32"))
    else:
        layers = np.stack([values, np.where(hole, 0, 255)]).astype("uint16")
        write(path, layers, photometric="minisblack", alpha="yes")
    shape = box(33, 21, 210, 180)
    means, _ = unit_means([RasterFile("h", "", "a.tif")], ["1"], parcels_of(shape), place)
    mean, share = by_shapely(np.where(hole, np.nan, values), shape)
    assert means["h"].iloc[0] == pytest.approx(mean, rel=1e-9)
    assert means["share_covered"].iloc[0] == pytest.approx(share, rel=1e-9)


def test_scale_and_offset_are_applied(place):
    write(place.folder / "a.tif", (GRADIENT / 10).astype("int16"), scale=(0.5, 3.0), nodata=-5)
    means, _ = unit_means([RasterFile("h", "", "a.tif")], ["1"], parcels_of(box(0, 0, 10, 10)), place)
    assert means["h"].iloc[0] == pytest.approx(3.0)
    means, _ = unit_means([RasterFile("h", "", "a.tif")], ["1"], parcels_of(box(20, 0, 30, 10)), place)
    assert means["h"].iloc[0] == pytest.approx(20 * 0.5 + 3.0)


def plane_in(crs, transform, shape, coefficients=(0.01, 0.02)):
    """Cells that hold a plane of the inventory's coordinates, so that warping must give the plane back."""
    row, column = np.indices(shape) + 0.5
    x, y = transform * (column.ravel(), row.ravel())
    east, north = pyproj.Transformer.from_crs(crs, CRS, always_xy=True).transform(x, y)
    values = coefficients[0] * (np.asarray(east) - LEFT) + coefficients[1] * (TOP - np.asarray(north))
    return values.reshape(shape).astype("float64")


def geographic(cell=0.0002, rows=250, columns=400):
    lon, lat = pyproj.Transformer.from_crs(CRS, 4326, always_xy=True).transform(LEFT - 300, TOP + 300)
    return Affine(cell, 0, lon, 0, -cell, lat), (rows, columns)


@pytest.mark.parametrize("crs", ["EPSG:4326", "EPSG:32633", "EPSG:3035"])
def test_other_coordinate_systems_are_warped(place, crs):
    """Identity: a plane in metres east and south has the value at the middle of a parcel as its mean."""
    if crs == "EPSG:4326":
        transform, shape = geographic()
    else:
        x, y = pyproj.Transformer.from_crs(CRS, crs, always_xy=True).transform(LEFT, TOP)
        transform, shape = Affine(20, 0, x - 3000, 0, -20, y + 3000), (300, 300)
    write(place.folder / "a.tif", plane_in(crs, transform, shape), crs=crs, transform=transform)
    parcels = parcels_of(box(100, 100, 900, 700), box(50, 750, 350, 1150))
    file = RasterFile("plane", "", "a.tif")
    means, findings = unit_means([file], ["1"], parcels, place)
    own = means[means["by"] == "parcel"]
    assert own["plane"].tolist() == pytest.approx([500 * 0.01 + 400 * 0.02, 200 * 0.01 + 950 * 0.02], rel=1e-3)
    assert own["share_covered"].tolist() == pytest.approx([1, 1])
    assert findings["rule"].tolist() == ["raster warped"]
    values, _ = plot_values([file], ["1"], plots_at((300, 400)), Footprint(radius_m=12.6), place)
    assert values["plane"].tolist() == pytest.approx([300 * 0.01 + 400 * 0.02], rel=5e-3)


def test_cells_in_degrees_count_by_their_area(tmp_path):
    """Identity: of a raster equal to the latitude, the mean over a tall parcel is that of ground, not of rows.

    Rows of equal height in degrees are narrower in the north. Expected: integral of latitude times the width of a
    degree (cosine, on the sphere) over 55 to 65 degrees; the ellipsoid changes it by little. The mean of rows is 60.
    """
    crs = "EPSG:3035"  # equal area
    cell, rows, columns = 0.02, 550, 120
    transform = Affine(cell, 0, 9.0 - 1.2, 0, -cell, 65.5)
    latitude = 65.5 - (np.arange(rows) + 0.5) * cell
    write(tmp_path / "a.tif", np.repeat(latitude[:, None], columns, axis=1), crs="EPSG:4326", transform=transform)
    edge = np.linspace(55, 65, 400)
    ring = np.r_[np.c_[np.full(400, 8.0), edge], np.c_[np.full(400, 10.0), edge[::-1]]]
    shape = gpd.GeoSeries([shapely.Polygon(ring)], crs=4326).to_crs(crs)
    parcels = gpd.GeoDataFrame({"parcel": ["P"], "stratum": ["all"], "area_ha": [1.0]}, geometry=shape)
    means, _ = unit_means([RasterFile("lat", "", "a.tif")], ["1"], parcels, RasterPlace(tmp_path, crs))
    angle = np.radians(np.linspace(55, 65, 100_001))
    expected = float(np.degrees(np.average(angle, weights=np.cos(angle))))
    assert means["lat"].iloc[0] == pytest.approx(expected, abs=0.01)
    assert abs(expected - 60) > 0.2


def test_a_turned_raster_and_one_with_rows_from_the_south(place):
    shape = box(150, 150, 250, 260)
    turned = Affine.translation(LEFT, TOP - 200) * Affine.rotation(30) * Affine.scale(10, -10)
    write(place.folder / "a.tif", plane_in(CRS, turned, (60, 60)), transform=turned)
    means, findings = unit_means([RasterFile("p", "", "a.tif")], ["1"], parcels_of(shape), place)
    assert means["p"].iloc[0] == pytest.approx(200 * 0.01 + 205 * 0.02, rel=2e-3)
    assert "raster warped" in findings["rule"].tolist()
    upward = Affine(10, 0, LEFT, 0, 10, TOP - 400)
    write(place.folder / "b.tif", GRADIENT[::-1], transform=upward)
    means, _ = unit_means([RasterFile("p", "", "b.tif")], ["1"], parcels_of(shape), place)
    assert means["p"].iloc[0] == pytest.approx(by_shapely(GRADIENT, shape)[0], rel=1e-9)


def test_warped_windows_agree_with_the_whole(place):
    """Identity: values do not hang on the windows they were read in, nor on splitting over a fine raster."""
    transform, shape = geographic(cell=0.00005, rows=500, columns=700)
    noise = np.random.default_rng(1).normal(10, 3, shape)
    noise[100:130, 50:80] = -1
    write(place.folder / "a.tif", noise, crs="EPSG:4326", transform=transform, nodata=-1)
    file, bounds = RasterFile("n", "", "a.tif"), (LEFT, TOP - 900, LEFT + 900, TOP)
    with open_raster(file, place.folder, CRS, bounds=bounds) as raster:
        shape = raster.grid.rows, raster.grid.columns
        whole, joined = raster.read(Window(0, 0, *shape)), np.full(shape, np.nan)
        for window in raster.grid.windows(64, 50):
            rows, columns = (
                slice(window.row, window.row + window.rows),
                slice(window.column, window.column + window.columns),
            )
            joined[rows, columns] = raster.read(window)
    assert np.isfinite(whole).all()
    assert np.nanmax(np.abs(joined - whole)) < 0.05 * 3


def test_a_finer_raster_is_averaged_onto_a_coarser_grid(place, monkeypatch):
    from landcarbon.raster.grid import Grid, Window

    values = np.random.default_rng(2).normal(50, 10, (80, 60))
    write(place.folder / "a.tif", values)
    grid = Grid(LEFT, TOP, 50.0, 50.0, 16, 12)
    expected = values.reshape(16, 5, 12, 5).mean(axis=(1, 3))
    for most in (2**24, 300):
        monkeypatch.setattr("landcarbon.read.raster_files._SOURCE_CELLS", most)
        file = RasterFile("h", "", "a.tif")
        with open_raster(file, place.folder, CRS, bounds=grid.bounds, grid=grid) as raster:
            assert raster.warped
            assert raster.read(Window(0, 0, 16, 12)) == pytest.approx(expected, rel=1e-9)


def test_a_raster_constant_or_without_values_is_told(place):
    write(place.folder / "a.tif", np.full((40, 30), 7.0))
    write(place.folder / "b.tif", np.full((40, 30), -1.0), nodata=-1)
    parcels = parcels_of(box(0, 0, 100, 100))
    means, findings = unit_means([RasterFile("h", "", "a.tif")], ["1"], parcels, place)
    assert findings["message"].tolist()[0].startswith("Raster h has the same value (7) wherever")
    means, findings = unit_means([RasterFile("h", "", "b.tif")], ["1"], parcels, place)
    assert means["h"].isna().all()
    assert findings["rule"].tolist() == ["raster without values"]


def test_broken_rasters_end_in_a_plain_message(place):
    parcels = parcels_of(box(0, 0, 100, 100))

    def use(path, **options):
        return unit_means([RasterFile("h", "", path, **options)], ["1"], parcels, place)

    (place.folder / "text.tif").write_text("not a raster")
    with pytest.raises(InputFileError, match=r"text.tif: not a raster file.*Formats read: GeoTIFF"):
        use("text.tif")
    (place.folder / "other.tif").write_text("<VRTDataset rasterXSize='1' rasterYSize='1'></VRTDataset>")
    with pytest.raises(InputFileError, match=r"other.tif: not a raster file"):
        use("other.tif")
    (place.folder / "empty.tif").write_bytes(b"")
    with pytest.raises(InputFileError, match="empty"):
        use("empty.tif")
    with pytest.raises(InputFileError, match="no such file"):
        use("nowhere.tif")
    write(place.folder / "bare.tif", GRADIENT, crs=None)
    with pytest.raises(InputFileError, match=r"bare.tif: the raster does not state its coordinate system. Give crs"):
        use("bare.tif")
    assert use("bare.tif", crs=CRS)[0]["h"].notna().all()
    write(place.folder / "a.tif", GRADIENT)
    with pytest.raises(InputFileError, match=r"there is no band 2: the file has 1 band"):
        use("a.tif", band=2)
    write(place.folder / "c.tif", GRADIENT.astype("complex64"))
    with pytest.raises(InputFileError, match=r"band 1 holds complex numbers \(complex64\)"):
        use("c.tif")
    write(place.folder / "far.tif", GRADIENT, transform=Affine(10, 0, LEFT + 9000, 0, -10, TOP))
    with pytest.raises(InputFileError, match=r"far.tif: the raster does not overlap the inventory"):
        use("far.tif")
    with pytest.raises(SettingsError, match="lies outside the folder"):
        use("../a.tif")


def test_a_cut_off_file_is_told(place):
    write(place.folder / "a.tif", np.random.default_rng(1).normal(size=(300, 300)), blockysize=1)
    data = (place.folder / "a.tif").read_bytes()
    (place.folder / "a.tif").write_bytes(data[: len(data) // 3])
    parcels = parcels_of(box(0, 0, 3000, 3000))
    with pytest.raises(InputFileError, match=r"a.tif: (the raster cannot be read|not a raster file)"):
        unit_means([RasterFile("h", "", "a.tif")], ["1"], parcels, place)


def test_rasters_need_coordinates(tmp_path):
    write(tmp_path / "a.tif", GRADIENT)
    with pytest.raises(SettingsError, match="rasters can only be used where plots and parcels have coordinates"):
        plot_values(
            [RasterFile("h", "", "a.tif")], ["1"], plots_at((1, 1)), Footprint(radius_m=3), RasterPlace(tmp_path, None)
        )
    plots = plots_at((np.nan, np.nan))
    values, _ = plot_values(
        [RasterFile("h", "", "a.tif")], ["1"], plots, Footprint(radius_m=3), RasterPlace(tmp_path, None)
    )
    assert values["h"].isna().all()


@pytest.mark.real
def test_elevation_of_an_open_raster_agrees_with_surveyed_stakes(reference):
    """Published: corner_elevation.csv of the same data set (Bourg et al. 2013), surveyed on the ground.

    The 5 m raster states no coordinate system; its description gives EPSG:26917. Stakes stand on a 20 m grid that is
    placed by the outline of the plot; raster and stakes fit best about a cell (5 m) apart, hence the wide limits.
    """
    folder = reference / "real" / "scbi"
    outline = gpd.read_file(folder / "scbi_plot.gpkg", layer="quadrats_20m")
    stakes = pd.read_csv(folder / "corner_elevation.csv").set_index(["gx_m", "gy_m"])["elev_m"]
    middle = outline.geometry.centroid
    corners = [(0, 0), (20, 0), (0, 20), (20, 20)]
    surveyed = np.mean(
        [stakes.reindex(zip(outline["gx0_m"] + x, outline["gy0_m"] + y, strict=True)) for x, y in corners], axis=0
    )
    plots = pd.DataFrame({"plot": outline["quadrat"], "x": middle.x, "y": middle.y})
    file = RasterFile("elevation", "", "plot_elevation.tif", crs="EPSG:26917")
    place = RasterPlace(folder, "EPSG:26917")
    values, _ = plot_values([file], ["2008"], plots, Footprint(width_m=20, length_m=20), place)
    off = values["elevation"].to_numpy() - surveyed
    known = np.isfinite(off)
    assert known.mean() > 0.95
    assert np.corrcoef(values["elevation"][known], surveyed[known])[0, 1] > 0.99
    assert abs(np.median(off[known])) < 1.0
    assert np.quantile(np.abs(off[known]), 0.9) < 3.0
    parcels = gpd.GeoDataFrame(
        {"parcel": ["plot"], "stratum": ["all"], "area_ha": [25.6]}, geometry=[outline.union_all()]
    )
    means, _ = unit_means([file], ["2008"], parcels.set_crs(outline.crs), place)
    assert means["elevation"].iloc[0] == pytest.approx(np.nanmean(surveyed), abs=1.0)
