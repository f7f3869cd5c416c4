"""Small invented inventories written to a folder, for the tests of reading."""

from __future__ import annotations

from pathlib import Path

import geopandas as gpd
from shapely.geometry import box

from landcarbon.inputs import Inputs
from landcarbon.inventory import load_settings
from landcarbon.read.load import load_inputs

HEAD = """
[inventory]
name = "Tarn Side"
"""

TAIL = """
[equations]
region = "europe"
"""

PLOTS = "plot,x,y\n0101,400010,5600010\n0102,400110,5600010\n0103,400030,5600050\n"

TREES = (
    "plot,tree,species,status,dbh,height,date\n"
    "0101,1,oak,live,25.5,18.2,2014-06-01\n"
    "0101,2,oak,dead,12.25,,2014-06-01\n"
    "0102,1,birch,live,8,7.5,2014-06-03\n"
)


def settings_text(
    *,
    plots: str = 'file = "plots.csv"\ncrs = "EPSG:25832"\ndesign = { kind = "circle", radius_m = 10 }',
    surveys: str = '[surveys.2014]\ntrees = "trees.csv"',
    more: str = "",
    head: str = HEAD,
) -> str:
    """Put a project file together from its parts."""
    return f"{head}\n[plots]\n{plots}\n{surveys}\n{more}\n{TAIL}"


def write_inventory(folder: Path, text: str | None = None, **files: str | bytes) -> Path:
    """Write a project file and its field files (``trees_csv`` becomes ``trees.csv``)."""
    for name, content in (("plots", PLOTS), ("trees", TREES)):
        if not (folder / f"{name}.csv").exists():
            (folder / f"{name}.csv").write_text(content, encoding="utf-8", newline="\n")
    for name, content in files.items():
        stem, _, suffix = name.rpartition("_")
        data = content.encode("utf-8") if isinstance(content, str) else content
        (folder / f"{stem}.{suffix}").write_bytes(data)
    path = folder / "inventory.toml"
    path.write_text(text if text is not None else settings_text(), encoding="utf-8")
    return path


def read(folder: Path, text: str | None = None, **files: str | bytes) -> Inputs:
    """Write an inventory and read it."""
    return load_inputs(load_settings(write_inventory(folder, text, **files)))


def squares(crs: str | None = "EPSG:25832", *, overlap: float = 0.0) -> gpd.GeoDataFrame:
    """Two parcels of 100 m by 100 m side by side; the second may reach into the first."""
    west, south = 400_000, 5_600_000
    shapes = [box(west, south, west + 100, south + 100), box(west + 100 - overlap, south, west + 200, south + 100)]
    return gpd.GeoDataFrame({"parcel": ["West", "East"], "stratum": ["oak", "birch"]}, geometry=shapes, crs=crs)


def rules(inputs: Inputs, table: str | None = None) -> list[str]:
    """The rules that found something (in one table), in order and once each."""
    found = inputs.findings
    return list(dict.fromkeys(found["rule"] if table is None else found.loc[found["table"] == table, "rule"]))


def accounted(inputs: Inputs) -> bool:
    """Every row set aside, of trees and samples, has a finding, and no other row has one that says so."""
    aside = inputs.findings[~inputs.findings["used"] & inputs.findings["row_id"].notna()]
    return all(
        set(frame.loc[~frame["used"], "row_id"]) == set(aside.loc[aside["table"] == table, "row_id"].astype(int))
        for table, frame in {"trees": inputs.trees, **inputs.samples}.items()
    )
