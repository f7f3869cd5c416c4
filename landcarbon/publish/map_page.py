"""The map page: one HTML file that needs nothing else, neither network nor neighbouring files."""

from __future__ import annotations

import base64
import importlib
import json
import re
from importlib import resources
from pathlib import Path
from typing import Any

import folium
import jinja2
from branca.element import Element, Figure

from landcarbon.publish.map_data import page_data
from landcarbon.publish.map_shapes import display_tolerance, metric
from landcarbon.publish.results import Results
from landcarbon.publish.words import CAUTIONS, SIGN_RULE

__all__ = ["NAMESPACES", "map_page"]

#: Addresses that stay in the page because they name a standard and are never fetched.
NAMESPACES = ("http://www.w3.org/2000/svg",)

_ADDRESS = re.compile(r"https?://[^\s\"'<>)]*")
_IMAGE = re.compile(r"url\((images/[\w.-]+)\)")
_TEMPLATES = resources.files("landcarbon.publish") / "templates"
_TILE_SERVERS = "https://tile.openstreetmap.org"


class _Text(Element):
    """Text that is finished: a plain element would take it for template code and run what a file holds."""

    _template = jinja2.Template("{{ this.text }}")

    def __init__(self, text: str) -> None:
        super().__init__()
        self.text = text


class _Page(Figure):
    """A page of our own form: in English, with the script inside the body."""

    _template = jinja2.Template(
        '<!DOCTYPE html>\n<html lang="en">\n<head>\n{{ this.header.render(**kwargs) }}\n</head>\n'
        "<body>\n{{ this.html.render(**kwargs) }}\n<script>\n{{ this.script.render(**kwargs) }}\n</script>\n"
        "</body>\n</html>\n"
    )


class _ParcelMap(folium.Map):
    """A folium map whose head, body and script are given; what is added to it (tiles) comes after them."""

    def __init__(self, parts: dict[str, str], **options: Any) -> None:
        super().__init__(tiles=None, **options)
        self.parts = parts
        self._id = "parcels"  # a fixed name instead of a random one: the same page on every run

    def render(self, **kwargs: Any) -> str:
        """Hand the parts to the page, in place of the links to files in the network."""
        page = self.get_root()
        for place in ("header", "html", "script"):
            getattr(page, place).add_child(_Text(self.parts[place]), name=self.get_name())
        for child in self._children.values():
            child.render(**kwargs)
        return ""


def map_page(results: Results, *, base_tiles: bool = False) -> str:
    """Draw the map of an inventory.

    Parameters
    ----------
    results : Results
        The run.
    base_tiles : bool
        Whether to lay a map from the network under the parcels. Without it the page holds no web address at all.

    Returns
    -------
    str
        A whole HTML page: density of each survey and change between surveys by parcel, for all pools together or one
        of them, plots as points, legend, figures on hover, tables of strata and parcels, area method, sign rule, marks
        and cautions.
    """
    # Escaping is on: every text in the templates comes from files or settings.
    environment = jinja2.Environment(
        loader=jinja2.PackageLoader("landcarbon.publish"), autoescape=True, undefined=jinja2.StrictUndefined
    )
    context = {**_words(results), "base_tiles": base_tiles, "tile_servers": _TILE_SERVERS}
    data = {**page_data(results), "tiles": base_tiles}
    context.update(
        data=_script_safe(json.dumps(data, ensure_ascii=False, separators=(",", ":"), allow_nan=False)),
        leaflet_js=_inline(_leaflet("leaflet.js")),
        leaflet_css=_style_with_images(),
        page_js=_inline((_TEMPLATES / "map.js").read_text(encoding="utf-8")),
        page_css=(_TEMPLATES / "map.css").read_text(encoding="utf-8"),
    )
    parts = {name: environment.get_template(f"map_{name}.j2").render(context) for name in ("header", "html", "script")}
    carrier = _ParcelMap(parts)
    if base_tiles:
        tiles = folium.TileLayer("OpenStreetMap")
        tiles._id = "background"
        carrier.add_child(tiles)
    page = _Page()
    page.header._children.clear()  # our template states the character set itself
    page.add_child(carrier)
    return page.render()


def _words(results: Results) -> dict[str, Any]:
    marks = list(results.marks)
    return {
        "name": results.name or "Inventory",
        "has_parcels": results.parcels is not None,
        "has_strata": bool(results.stocks["by"].astype("str").eq("stratum").any()),
        "positions": bool(
            results.parcels is not None
            or (results.plot_points["lon"].notna() & results.plot_points["lat"].notna()).any()
        ),
        "area_method": results.area_method,
        "sign_rule": SIGN_RULE,
        "cautions": CAUTIONS,
        "marks": marks,
        "interval": results.interval_name,
        "tolerance": _tolerance(results),
    }


def _tolerance(results: Results) -> str:
    if results.parcels is None or not len(results.parcels):
        return ""
    return f"{display_tolerance(metric(results.parcels)):g}"


def _script_safe(text: str) -> str:
    """Make JSON safe inside a script element: nothing in it can end the element or open a comment."""
    for sign in "<>&\u2028\u2029":
        text = text.replace(sign, f"\\u{ord(sign):04x}")
    return text


def _inline(script: str) -> str:
    """Prepare a script for the inside of a script element."""
    return script.replace("</script", "<\\/script").replace("<!--", "<\\!--")


def _leaflet_folder() -> Path:
    return Path(importlib.import_module("xstatic.pkg.leaflet").BASE_DIR)


def _leaflet(name: str) -> str:
    """Read a Leaflet file without its web addresses (project page, source map); the copyright notice stays."""
    text = (_leaflet_folder() / name).read_text(encoding="utf-8")
    text = re.sub(r"^//# sourceMappingURL=.*$", "", text, flags=re.MULTILINE)
    return _ADDRESS.sub(lambda found: found.group() if found.group() in NAMESPACES else "", text)


def _style_with_images() -> str:
    def embedded(found: re.Match[str]) -> str:
        image = (_leaflet_folder() / found.group(1)).read_bytes()
        return f"url(data:image/png;base64,{base64.b64encode(image).decode('ascii')})"

    return _IMAGE.sub(embedded, _leaflet("leaflet.css"))
