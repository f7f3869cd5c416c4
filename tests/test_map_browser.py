"""The map page in headless Chromium with the network off."""

from __future__ import annotations

import dataclasses
import os
import re
from pathlib import Path

import pytest
from browser import open_page
from publish_sample import HOSTILE, sample_results

from landcarbon.publish.map_page import map_page

pytestmark = pytest.mark.browser

PARCEL_PATHS = "#map_parcels .leaflet-overlay-pane path.leaflet-interactive"
PLOT_PATHS = "#map_parcels .leaflet-plots-pane path.leaflet-interactive"


@pytest.fixture
def page_file(tmp_path):
    def write(results=None, **options) -> Path:
        path = tmp_path / "map.html"
        path.write_text(map_page(results if results is not None else sample_results(), **options), encoding="utf-8")
        return path

    return write


def fills(page) -> dict[str, str]:
    """Fill of every parcel by its name."""
    found = page.eval_on_selector_all(
        PARCEL_PATHS, "paths => paths.map(path => [path.getAttribute('aria-label'), path.getAttribute('fill')])"
    )
    return {label.rsplit(":", 1)[0]: fill for label, fill in found}


def choose(page, at: int) -> None:
    page.locator("input[name=layer]").nth(at).check(force=True)


def hover(page, selector: str, at: int) -> str:
    """Point at the middle of a shape and return the text that appears."""
    page.mouse.move(2, 2)  # off the map, until the last text has faded
    page.wait_for_selector(".figures-tip", state="detached")
    box = page.locator(selector).nth(at).bounding_box()
    page.mouse.move(box["x"] + box["width"] / 2, box["y"] + box["height"] / 2)
    page.wait_for_selector(".figures-tip", state="visible")
    return page.locator(".figures-tip").inner_text()


def quiet(watched, path: Path) -> None:
    assert watched.complaints == []
    assert watched.failed == []
    assert watched.requests == [path.as_uri()]


def test_parcels_and_plots_are_visible_and_nothing_else_is_fetched(page_file):
    path = page_file()
    with open_page(path) as watched:
        for selector, count in ((PARCEL_PATHS, 5), (PLOT_PATHS, 12)):
            boxes = [watched.page.locator(selector).nth(at).bounding_box() for at in range(count)]
            assert watched.page.locator(selector).count() >= count
            assert all(box["width"] > 3 and box["height"] > 3 for box in boxes)
        # The parcels fill the map, although a plot with a slipped coordinate lies far outside of them.
        area = watched.page.locator("#map_parcels").bounding_box()
        edges = [watched.page.locator(PARCEL_PATHS).nth(at).bounding_box() for at in range(5)]
        width = max(box["x"] + box["width"] for box in edges) - min(box["x"] for box in edges)
        height = max(box["y"] + box["height"] for box in edges) - min(box["y"] for box in edges)
        assert max(width / area["width"], height / area["height"]) > 0.6
        assert watched.page.locator(".leaflet-control-scale").is_visible()
        assert watched.page.title() == "Carbon map of Harrow Fell"
        quiet(watched, path)


def test_opens_on_the_latest_survey(page_file):
    with open_page(page_file()) as watched:
        assert watched.page.locator("#layer-title").inner_text() == "Carbon density, survey 2024"
        assert watched.page.locator("input[name=layer]:checked").get_attribute("value").startswith("density")


def test_layers_switch_fill_and_legend(page_file):
    path = page_file()
    with open_page(path) as watched:
        page = watched.page
        seen, legends, titles = [], [], []
        for at in range(page.locator("input[name=layer]").count()):
            choose(page, at)
            seen.append(fills(page))
            legends.append(page.locator("#legend").inner_text())
            titles.append(page.locator("#layer-title").inner_text())
        assert len(seen) == len(set(titles)) == 6
        assert len({tuple(fill.items()) for fill in seen}) == 6
        # The felled parcel: dark before, pale after; brown (loss) in the last change, green before that.
        felled = [fill["Hollow & dell"] for fill in seen]
        assert felled[0] != felled[2]
        assert felled[3] != felled[4]
        assert all(fill['Long "acre"'] == "url(#not-estimable)" for fill in seen)
        for legend in legends:
            assert "not estimable" in legend
        for legend in legends[:3]:
            assert "t C/ha" in legend
            assert "per year" not in legend
        for legend in legends[3:]:
            for part in ("t C/ha per year", "0 to +", "\u2212"):
                assert part in legend
        # Interval of the small loss spans zero: marked, and explained in the legend.
        assert "90 % interval includes zero" in legends[4]
        quiet(watched, path)


def test_legend_colours_are_those_of_the_parcels(page_file):
    with open_page(page_file()) as watched:
        for at in (0, 4):
            choose(watched.page, at)
            shown = watched.page.eval_on_selector_all(
                "#legend rect", "rects => rects.map(rect => rect.getAttribute('fill'))"
            )
            assert set(fills(watched.page).values()) <= set(shown)


def test_tooltips_carry_the_figures(page_file):
    with open_page(page_file()) as watched:
        page = watched.page
        choose(page, 0)
        page.uncheck("#plots-on")
        # Invented figures of the sample: 118.4 t C/ha at 12.5 ha, standard error 8 %, interval 15 % either side.
        text = hover(page, PARCEL_PATHS, 0)
        for part in ("North bank", "12.5 ha", "118.4 t C/ha", "SE 9.5", "90 % interval 100.6 to 136.2", "1,480 t C"):
            assert part in text, part
        choose(page, 4)
        text = hover(page, PARCEL_PATHS, 2)
        # -1,698 t C in 4.9 years; 44/12 of the yearly loss leaves as carbon dioxide: 1,271 t, an emission, so positive.
        for part in (
            "Hollow & dell",
            "\u22121,698 t C",
            "over 4.9 years",
            "+1,271 t CO\u2082/yr (emission)",
            "3 measured",
        ):
            assert part in text, part
        assert "not estimable: fewer than two plots" in hover(page, PARCEL_PATHS, 4)


def test_plots_have_their_own_switch_and_say_what_they_are(page_file):
    with open_page(page_file()) as watched:
        page = watched.page
        choose(page, 0)
        sizes = [page.locator(PLOT_PATHS).nth(at).bounding_box()["width"] for at in range(12)]
        assert sizes[8] == max(sizes)  # P9, the densest plot of the sample
        choose(page, 1)
        assert "not measured" in hover(page, PLOT_PATHS, 4)
        assert "not measured then" in page.locator("#legend").inner_text()
        page.uncheck("#plots-on")
        assert page.locator(PLOT_PATHS).count() == 0
        assert "not measured then" not in page.locator("#legend").inner_text()
        page.check("#plots-on")
        assert page.locator(PLOT_PATHS).count() == 13
        assert "outside all parcels: 1" in page.locator("#legend").inner_text()
        for _ in range(4):  # out to the plot with the slipped coordinate
            page.locator(".leaflet-control-zoom-out").click()
            page.wait_for_timeout(400)
        assert "outside all parcels, not counted" in hover(page, PLOT_PATHS, 12)


def test_keyboard_and_screen_reader(page_file):
    with open_page(page_file()) as watched:
        page = watched.page
        page.locator("input[name=layer]").first.focus()
        page.keyboard.press("ArrowRight")
        assert page.locator("#layer-title").inner_text() == "Carbon density, survey 2019"
        page.locator(PARCEL_PATHS).first.focus()
        page.wait_for_selector(".figures-tip", state="visible")
        label = page.locator(PARCEL_PATHS).first.get_attribute("aria-label")
        assert re.fullmatch(r"North bank: [\d.]+ t C/ha", label)


def test_table_follows_the_layer(page_file):
    with open_page(page_file()) as watched:
        page = watched.page
        choose(page, 0)
        page.locator("#figures summary").click()
        page.wait_for_selector("#figures tbody tr")  # the rows come with the event after the click
        assert page.locator("#figures tbody tr").count() == 5
        assert "118.4" in page.locator("#figures tbody tr").first.inner_text()
        choose(page, 4)
        assert "Change of carbon, 2019 to 2024" in page.locator("#figures caption").inner_text()
        assert "\u22121,698" in page.locator("#figures tbody tr").nth(2).inner_text()


def test_hostile_names_are_only_text(page_file):
    path = page_file(sample_results(name=HOSTILE[0], parcels=(*HOSTILE, "e")))
    with open_page(path) as watched:
        page = watched.page
        assert page.locator("h1").inner_text() == HOSTILE[0]
        page.locator("#figures summary").click()
        page.wait_for_selector("#figures tbody tr")
        names = page.locator("#figures tbody tr td:first-child").all_inner_texts()
        assert names == [*HOSTILE, "e"]
        page.uncheck("#plots-on")
        for at, name in enumerate(HOSTILE):
            assert " ".join(name.split()) in " ".join(hover(page, PARCEL_PATHS, at).split())
        assert page.locator("img").count() == 0
        quiet(watched, path)


def boxes_of(page, selector: str) -> list[dict[str, float]]:
    found = page.locator(selector)
    return [found.nth(at).bounding_box() for at in range(found.count())]


def apart(one: dict[str, float], other: dict[str, float]) -> bool:
    across = one["x"] + one["width"] <= other["x"] or other["x"] + other["width"] <= one["x"]
    return across or one["y"] + one["height"] <= other["y"] or other["y"] + other["height"] <= one["y"]


@pytest.mark.parametrize(("width", "height"), [(1280, 800), (390, 844)])
def test_names_of_parcels_stand_where_they_fit_and_can_be_switched_off(page_file, width, height):
    path = page_file()
    with open_page(path, width=width, height=height) as watched:
        page = watched.page
        shown = page.locator(".parcel-name").all_inner_texts()
        assert set(shown) <= {*sample_results().parcels["parcel"]}
        boxes = boxes_of(page, ".parcel-name")
        assert all(apart(one, other) for at, one in enumerate(boxes) for other in boxes[:at])
        if width > 1000:
            assert len(shown) >= 4
        page.uncheck("#names-on")
        assert page.locator(".parcel-name").count() == 0
        page.check("#names-on")
        assert page.locator(".parcel-name").all_inner_texts() == shown
        quiet(watched, path)


def test_more_names_come_with_a_closer_look(page_file):
    with open_page(page_file(), width=390, height=844) as watched:
        page = watched.page
        before = page.locator(".parcel-name").count()
        for _ in range(4):
            page.locator(".leaflet-control-zoom-in").click()
            page.wait_for_timeout(400)
        page.mouse.move(2, 2)
        widest = max(box["width"] for box in boxes_of(page, PARCEL_PATHS))
        assert widest > 390
        assert page.locator(".parcel-name").count() >= min(before, 1)


def test_pools_can_be_chosen(page_file):
    with open_page(page_file()) as watched:
        page = watched.page
        choose(page, 0)
        assert page.locator("#pool option").all_inner_texts() == [
            "all counted pools", "above-ground biomass", "below-ground biomass",
        ]  # fmt: skip
        whole = fills(page)
        page.select_option("#pool", "below_ground")
        assert page.locator("#layer-title").inner_text() == "Carbon density of below-ground biomass, survey 2014"
        assert "t C/ha, below-ground biomass" in page.locator("#legend").inner_text()
        page.uncheck("#plots-on")
        # Invented figures of the sample: a fifth of 118.4 t C/ha lies below ground.
        assert "23.7 t C/ha" in hover(page, PARCEL_PATHS, 0)
        choose(page, 2)
        assert page.locator("#layer-title").inner_text() == "Carbon density of below-ground biomass, survey 2024"
        choose(page, 0)
        page.select_option("#pool", "all")
        assert fills(page) == whole


def test_table_of_strata_follows_the_layer(page_file):
    with open_page(page_file()) as watched:
        page = watched.page
        choose(page, 0)
        rows = page.locator("#strata-figures tbody tr")
        assert rows.count() == 3
        # Invented figures of the sample: 118.4 t C/ha on 12.5 ha and 96.0 on 7.25 ha are 2,176 t C of oak.
        assert "2,176" in rows.first.inner_text()
        assert "not estimable: fewer than two plots" in rows.nth(2).inner_text()
        choose(page, 1)
        assert "survey 2019" in page.locator("#strata-figures caption").inner_text()


def test_plots_that_do_not_count_are_counted(page_file):
    with open_page(page_file()) as watched:
        legend = watched.page.locator("#legend")
        assert "1 of 13 plots lies outside all parcels and is not counted" in legend.inner_text()
        watched.page.uncheck("#plots-on")
        assert "1 of 13 plots lies outside all parcels and is not counted" in legend.inner_text()


def test_figures_without_variation_have_no_interval(page_file):
    sample = sample_results()
    flat = sample.stocks["unit"].eq("North bank")
    stocks = sample.stocks.assign(density_se=sample.stocks["density_se"].mask(flat, 0.0))
    with open_page(page_file(dataclasses.replace(sample, stocks=stocks))) as watched:
        page = watched.page
        page.uncheck("#plots-on")
        text = hover(page, PARCEL_PATHS, 0)
        assert "no variation between plots" in text
        page.locator("#figures summary").click()
        page.wait_for_selector("#figures tbody tr")
        assert "no variation between plots" in page.locator("#figures tbody tr").first.inner_text()


def test_plots_without_parcels_fill_the_view_in_spite_of_a_stray(page_file):
    sample = sample_results()
    points = sample.plot_points.assign(inside=True)
    points.loc[points["plot"] == "stray", ["lon", "lat"]] = [0.0, 0.0]  # the usual slip: no position typed as zero
    path = page_file(dataclasses.replace(sample, parcels=None, crs=None, plot_points=points))
    with open_page(path) as watched:
        page = watched.page
        area = page.locator("#map_parcels").bounding_box()
        boxes = boxes_of(page, PLOT_PATHS)[:12]
        width = max(box["x"] + box["width"] for box in boxes) - min(box["x"] for box in boxes)
        height = max(box["y"] + box["height"] for box in boxes) - min(box["y"] for box in boxes)
        assert max(width / area["width"], height / area["height"]) > 0.3
        assert "1 of 13 plots lies far from the others" in page.locator("#legend").inner_text()
        assert "outside all parcels" not in page.locator("#legend").inner_text()
        scale = page.locator(".leaflet-control-scale-line").first.inner_text()
        assert re.fullmatch(r"\d+ m", scale)
        quiet(watched, path)


def test_one_plot_alone_has_a_sensible_scale(page_file):
    sample = sample_results()
    results = dataclasses.replace(sample, parcels=None, crs=None, plot_points=sample.plot_points.head(1))
    with open_page(page_file(results)) as watched:
        assert watched.page.locator(PLOT_PATHS).first.bounding_box()["width"] > 5
        metres = int(watched.page.locator(".leaflet-control-scale-line").first.inner_text().split()[0])
        assert 50 <= metres <= 500


def test_without_any_coordinates_the_page_says_so_and_shows_the_figures(page_file):
    sample = sample_results()
    points = sample.plot_points.assign(lon=float("nan"), lat=float("nan"))
    path = page_file(dataclasses.replace(sample, parcels=None, crs=None, plot_points=points))
    with open_page(path) as watched:
        page = watched.page
        assert page.locator("#map_parcels").is_hidden()
        assert "nothing to draw" in page.locator(".empty").inner_text()
        assert page.locator("#strata-figures tbody tr").count() == 3
        choose(page, 4)  # change of the whole inventory
        assert "Whole inventory" in page.locator("#legend").inner_text()
        quiet(watched, path)


def test_plots_only(page_file):
    path = page_file(dataclasses.replace(sample_results(), parcels=None, crs=None))
    with open_page(path) as watched:
        page = watched.page
        assert page.locator(PARCEL_PATHS).count() == 0
        assert page.locator(PLOT_PATHS).count() == 13
        before = page.eval_on_selector_all(PLOT_PATHS, "paths => paths.map(path => path.getAttribute('fill'))")
        choose(page, 0)
        after = page.eval_on_selector_all(PLOT_PATHS, "paths => paths.map(path => path.getAttribute('fill'))")
        assert before != after
        quiet(watched, path)


@pytest.mark.parametrize(("width", "height"), [(1280, 800), (390, 844)])
def test_fits_the_screen(page_file, width, height):
    path = page_file()
    with open_page(path, width=width, height=height, touch=width < 500) as watched:
        page = watched.page
        assert page.evaluate("document.documentElement.scrollWidth") <= width
        area = page.locator("#map_parcels").bounding_box()
        assert area["width"] > 0.7 * width
        assert area["height"] > 0.5 * height
        if width < 500:  # a tap shows the figures
            box = page.locator(PARCEL_PATHS).first.bounding_box()
            page.touchscreen.tap(box["x"] + box["width"] / 2, box["y"] + box["height"] / 2)
            page.wait_for_selector(".figures-tip", state="visible")
            tip = page.locator(".figures-tip").bounding_box()
            assert tip["width"] <= width
        folder = os.environ.get("LANDCARBON_SCREENSHOTS")
        if folder:
            page.screenshot(path=str(Path(folder) / f"map_{width}.png"), full_page=True)
        quiet(watched, path)


def test_background_tiles_fail_softly_without_a_network(page_file):
    path = page_file(base_tiles=True)
    with open_page(path) as watched:
        assert watched.page.locator(PARCEL_PATHS).count() == 5
        others = [address for address in watched.requests if address != path.as_uri()]
        assert others
        assert all(re.match(r"https://tile\.", address) for address in others)
        assert "OpenStreetMap" in watched.page.locator(".leaflet-control-attribution").inner_text()
