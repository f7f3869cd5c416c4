"""The map page as a file: self-contained, safe whatever the files hold, figures stated once."""

from __future__ import annotations

import dataclasses
import json
import re

import numpy as np
import pandas as pd
import pytest
from publish_sample import AREA, DENSITY, HOSTILE, PARCELS, SURVEYS, sample_results

from landcarbon.publish import map_data
from landcarbon.publish.map_data import CHANGE_FIELDS, STOCK_FIELDS, page_data
from landcarbon.publish.map_page import NAMESPACES, map_page
from landcarbon.publish.words import CAUTIONS, SIGN_RULE


def addresses(page: str) -> set[str]:
    return set(re.findall(r"https?://[^\s\"'<>)]*", page))


def data_of(page: str) -> dict:
    return json.loads(re.search(r'<script type="application/json" id="map-data">(.*?)</script>', page, re.DOTALL)[1])


def test_no_web_address_is_left():
    # The namespace of SVG is a name fixed by the World Wide Web Consortium (SVG 1.1, section 1.3), never fetched.
    page = map_page(sample_results())
    assert addresses(page) == set(NAMESPACES) == {"http://www.w3.org/2000/svg"}
    assert "sourceMappingURL" not in page
    assert not re.search(r"<(link|iframe|img|object|embed)\b", page)
    assert not re.search(
        r"\bsrc\s*=\s*[\"']?(?!data:)[\w/.]", re.sub(r"<script>.*?</script>", "", page, flags=re.DOTALL)
    )
    assert not re.search(r"url\((?!data:image/png|#)", page)


def test_the_page_forbids_the_network():
    page = map_page(sample_results())
    rule = re.search(r'Content-Security-Policy" content="([^"]*)"', page)[1]
    assert "default-src 'none'" in rule
    assert "img-src data:;" in rule


def test_background_tiles_are_there_on_request_only():
    page = map_page(sample_results(), base_tiles=True)
    assert any("tile" in address for address in addresses(page))
    assert "OpenStreetMap" in page
    assert "tile" not in " ".join(addresses(map_page(sample_results())))


def test_page_is_the_same_on_every_run():
    assert map_page(sample_results()) == map_page(sample_results())


def test_notes_stand_in_plain_html():
    results = sample_results()
    page = map_page(results)
    plain = page[page.index("<footer>") : page.index("</footer>")]
    for sentence in (CAUTIONS, SIGN_RULE, results.area_method, *results.marks):
        assert sentence in plain
    assert "simplified by at most 0.5 m" in plain


def test_title_and_labels_for_those_who_do_not_see_the_map():
    page = map_page(sample_results())
    assert '<html lang="en">' in page
    assert "<title>Carbon map of Harrow Fell</title>" in page
    assert 'aria-label="Map of Harrow Fell"' in page
    assert "<noscript>" in page


@pytest.mark.parametrize("name", HOSTILE)
def test_text_from_files_is_never_code(name):
    results = sample_results(name=name, parcels=(*HOSTILE, "e"))
    results = dataclasses.replace(results, marks=[name], area_method=name)
    page = map_page(results)
    # Only our own script elements: Leaflet, data, drawing.
    assert len(re.findall(r"<script", page)) == 3
    assert len(re.findall(r"</script", page)) == 3
    assert "<img" not in page
    assert data_of(page)["name"] == name
    assert [row[0] for row in data_of(page)["parcels"]] == [*HOSTILE, "e"]


def test_figures_are_those_of_the_tables():
    results = sample_results()
    data = page_data(results)
    whole = data["pools"][0]["parcels"]
    assert data["surveys"] == list(SURVEYS)
    assert [row[0] for row in data["parcels"]] == list(PARCELS)
    for at, survey in enumerate(SURVEYS):
        density = [row[STOCK_FIELDS.index("density_t_c_ha")] for row in whole["stocks"][at]]
        assert density[:4] == pytest.approx(list(DENSITY[:4, at]), rel=1e-6), survey
        assert density[4] is None
    change = [row[CHANGE_FIELDS.index("change_t_c")] for row in whole["changes"][2]]
    assert change[:4] == pytest.approx(list((DENSITY[:4, 2] - DENSITY[:4, 0]) * AREA[:4]), rel=1e-6)
    assert data["methods"][whole["stocks"][0][4][-1]].startswith("not estimable")


def test_one_scale_for_all_surveys_and_one_for_all_changes():
    layers = page_data(sample_results())["pools"][0]["layers"]
    assert [layer["kind"] for layer in layers] == ["density"] * 3 + ["change"] * 3
    for kind in ("density", "change"):
        assert len({tuple(layer["edges"]) for layer in layers if layer["kind"] == kind}) == 1
    edges = layers[-1]["edges"]
    assert edges == [-edge or 0.0 for edge in reversed(edges)]


def test_outlines_are_stated_once_and_stay_in_place():
    import geopandas as gpd

    results = sample_results()
    shapes = page_data(results)["shapes"]
    assert [feature["properties"] for feature in shapes["features"]] == [{"i": at} for at in range(5)]
    drawn = gpd.GeoDataFrame.from_features(shapes, crs="EPSG:4326").to_crs(results.crs)
    apart = drawn.geometry.hausdorff_distance(results.parcels.geometry, align=False)
    # At most the stated tolerance plus the rounding of degrees to six decimals (0.1 m).
    assert apart.max() < 0.6
    page = map_page(results)
    assert page.count('"coordinates"') == 5


def test_parcel_without_a_row_in_the_tables_is_not_estimable():
    results = sample_results()
    stocks = results.stocks[results.stocks["unit"] != "Old coupe"]
    assert page_data(dataclasses.replace(results, stocks=stocks))["pools"][0]["parcels"]["stocks"][0][3] is None


def test_parcels_in_degrees_and_in_feet():
    results = sample_results()
    for crs in ("EPSG:4326", "EPSG:2229"):  # geographic; a state plane zone in US survey feet
        moved = dataclasses.replace(results, parcels=results.parcels.to_crs(crs), crs=crs)
        if crs == "EPSG:2229":
            shifted = results.parcels.set_crs("EPSG:32611", allow_override=True).to_crs(crs)
            moved = dataclasses.replace(moved, parcels=shifted)
        assert len(page_data(moved)["shapes"]["features"]) == 5


def test_plots_only():
    results = dataclasses.replace(sample_results(), parcels=None, crs=None)
    data = page_data(results)
    whole = data["pools"][0]
    assert data["shapes"]["features"] == []
    assert [layer["kind"] for layer in whole["layers"]] == ["density"] * 3 + ["change"] * 3
    assert len(data["plots"]) == len(whole["density"]) == 13
    assert whole["layers"][0]["edges"][-1] >= max(density[0] or 0 for density in whole["density"])
    density = {plot["plot"]: found for plot, found in zip(data["plots"], whole["density"], strict=True)}
    assert density["P5"][1] is None
    assert density["P10"][0] == 0
    assert [plot["inside"] for plot in data["plots"] if plot["plot"] == "stray"] == [False]


def test_every_pool_has_its_own_figures_and_scale():
    data = page_data(sample_results())
    assert [pool["pool"] for pool in data["pools"]] == ["all", "above_ground", "below_ground"]
    at = STOCK_FIELDS.index("density_t_c_ha")
    whole, above = (pool["parcels"]["stocks"][0][0][at] for pool in data["pools"][:2])
    assert above == pytest.approx(0.8 * whole, rel=1e-6)  # identity of the sample
    edges = [pool["layers"][0]["edges"] for pool in data["pools"]]
    assert edges[0][-1] > edges[2][-1]
    assert data["pools"][1]["density"][0][0] == pytest.approx(0.8 * data["pools"][0]["density"][0][0], rel=1e-6)


def test_one_counted_pool_is_no_choice():
    sample = sample_results()
    stocks = sample.stocks[sample.stocks["pool"] != "below_ground"]
    assert [pool["pool"] for pool in page_data(dataclasses.replace(sample, stocks=stocks))["pools"]] == ["all"]


def test_a_heavy_page_keeps_to_the_sum_of_the_pools_and_says_so(monkeypatch):
    monkeypatch.setattr(map_data, "_MOST_ROWS", 80)  # five parcels x six layers x three pools are 90
    data = page_data(sample_results())
    assert [pool["pool"] for pool in data["pools"]] == ["all"]
    assert data["pools_left_out"] is True


def test_rows_of_parts_are_not_taken_for_plots():
    sample = sample_results()
    parts = sample.plots.assign(part="", density_t_c_ha=sample.plots["density_t_c_ha"])
    trees = parts[parts["pool"] == "above_ground"].assign(part="trees", density_t_c_ha=1.0)
    plots = pd.concat([trees, parts], ignore_index=True)
    assert page_data(dataclasses.replace(sample, plots=plots))["pools"] == page_data(sample)["pools"]


def test_names_stand_inside_their_parcels():
    import geopandas as gpd

    results = sample_results()
    places = [row[4] for row in page_data(results)["parcels"]]
    points = gpd.GeoSeries.from_xy([at[1] for at in places], [at[0] for at in places], crs="EPSG:4326")
    assert points.to_crs(results.crs).within(results.parcels.geometry, align=False).all()


def test_nothing_to_draw_is_said():
    sample = sample_results()
    results = dataclasses.replace(sample, parcels=None, plot_points=sample.plot_points.assign(lon=np.nan, lat=np.nan))
    assert "nothing to draw" in map_page(results)


def test_page_weight_per_parcel():
    # 200 copies of the five parcels, each outline of some tens of points: the page must grow by well under 4 kB each.
    sample = sample_results()
    base = len(map_page(sample))
    parts = [(sample.parcels, sample.stocks, sample.change)]
    parts += [
        (
            sample.parcels.assign(parcel=sample.parcels["parcel"] + f" {at}"),
            sample.stocks.assign(unit=sample.stocks["unit"] + f" {at}"),
            sample.change.assign(unit=sample.change["unit"] + f" {at}"),
        )
        for at in range(199)
    ]
    parcels, stocks, change = (pd.concat(list(column), ignore_index=True) for column in zip(*parts, strict=True))
    page = map_page(dataclasses.replace(sample, parcels=parcels, stocks=stocks, change=change))
    assert (len(page) - base) / 995 < 2000
