"""Poor, odd and hostile inventories from files to results: each ends with sound tables or one plain message.

All land is invented. What is expected are identities (sums), rules of the program, or standards of files (CSV,
GeoTIFF); no figure is compared with one of our own.
"""

from __future__ import annotations

import csv
import re
import shutil
import sys
import warnings
from collections.abc import Callable, Mapping, Sequence
from dataclasses import dataclass, field, replace
from functools import cached_property
from pathlib import Path
from typing import Any

import geopandas as gpd
import numpy as np
import pandas as pd
import pytest
import rasterio
from builders import make_inputs
from exactextract import exact_extract
from rasterio.transform import from_origin
from rasterio.warp import transform_bounds
from shapely.geometry import box

from landcarbon import cli, open_inventory
from landcarbon.publish.folder import open_results
from landcarbon.publish.raster_check import check_raster_sums
from landcarbon.publish.results import Results
from landcarbon.sample_pools import join_parts

LEFT, BOTTOM, SIDE, CELL = 500_000.0, 5_600_000.0, 300.0, 20.0
CRS = "EPSG:25832"
PROJECT = """
[inventory]
name = {name}
[parcels]
file = "parcels.geojson"
[plots]
file = "plots.csv"
crs = "EPSG:25832"
design = {{ kind = "circle", radius_m = 10 }}
[visits]
file = "visits.csv"
[trees]
file = "trees.csv"
{surveys}
[species]
FI = "Picea abies"
[equations]
region = "europe"
[pools]
below_ground = {{ how = "ratio", model = "cairns97_temperate" }}
dead_wood = "measured"
[estimation]
{estimation}
{more}
"""


# Warnings for those who write programs, not for those who use them.
QUIET = (DeprecationWarning, PendingDeprecationWarning, ResourceWarning)


def quoted(text: str) -> str:
    """Write a text as TOML basic string."""
    return '"' + text.replace("\\", "\\\\").replace('"', '\\"') + '"'


def height(x: np.ndarray, y: np.ndarray) -> np.ndarray:
    """Canopy height of the invented land [m]."""
    return np.asarray(15.0 + 8.0 * np.sin(x / 90.0) + 5.0 * np.cos(y / 70.0))


def parcel_frame(names: Sequence[str] = ("P1", "P2", "P3", "P4"), strata: Sequence[str] = "aabb") -> gpd.GeoDataFrame:
    """Squares of 9 ha side by side."""
    shapes = [box(LEFT + SIDE * i, BOTTOM, LEFT + SIDE * (i + 1), BOTTOM + SIDE) for i in range(len(names))]
    return gpd.GeoDataFrame({"parcel": list(names), "stratum": list(strata)}, geometry=shapes, crs=CRS)


def plot_frame(counts: Sequence[int] = (6, 6, 6, 6), **more: Any) -> pd.DataFrame:
    """So many plots in each of the squares, on a lattice of 80 m."""
    at = [(parcel, number) for parcel, count in enumerate(counts) for number in range(count)]
    rows = [(LEFT + SIDE * p + 60.0 + 80.0 * (n % 3), BOTTOM + 60.0 + 80.0 * (n // 3)) for p, n in at]
    frame = pd.DataFrame(rows, columns=["x", "y"])
    return frame.assign(plot=[f"k{i}" for i in range(len(frame))], **more)


@dataclass
class Land:
    """An invented inventory; change what the case is about, then ``write``."""

    parcels: gpd.GeoDataFrame = field(default_factory=parcel_frame)
    plots: pd.DataFrame = field(default_factory=plot_frame)
    surveys: Sequence[str] = ("2010", "2020")
    visited: Mapping[str, Sequence[str]] = field(default_factory=dict)
    name: str = "Odd land"
    estimation: str = ""
    more: str = ""
    equal: bool = False
    edit_trees: Callable[[pd.DataFrame], pd.DataFrame] = lambda trees: trees
    rasters: Mapping[str, Any] = field(default_factory=dict)

    def write(self, folder: Path) -> Path:
        """Write all files to a folder."""
        folder.mkdir(parents=True, exist_ok=True)
        self.parcels.to_file(folder / "parcels.geojson", driver="GeoJSON")
        self.plots.to_csv(folder / "plots.csv", index=False)
        rows = []
        for at, survey in enumerate(self.surveys):
            day = f"{2010 + 10 * at}-06-15"
            rows += [(survey, plot, day, at) for plot in self.visited.get(survey, self.plots["plot"])]
        visits = pd.DataFrame(rows, columns=["survey", "plot", "date", "at"])
        visits.drop(columns="at").to_csv(folder / "visits.csv", index=False)
        self.edit_trees(self._trees(visits)).to_csv(folder / "trees.csv", index=False)
        tables = "\n".join(f"[surveys.{quoted(survey)}]" for survey in self.surveys)
        named = "\n".join(self._raster(folder, *one) for one in self.rasters.items())
        text = PROJECT.format(
            name=quoted(self.name), surveys=tables, estimation=self.estimation, more=f"{self.more}\n{named}"
        )
        (folder / "inventory.toml").write_text(text, encoding="utf-8")
        return folder

    def _trees(self, visits: pd.DataFrame) -> pd.DataFrame:
        x, y = (visits["plot"].map(self.plots.set_index("plot")[name]).to_numpy(dtype=float) for name in "xy")
        number = visits["plot"].map(dict(zip(self.plots["plot"], range(len(self.plots)), strict=True)))
        base = 20.0 if self.equal else 8.0 + height(x, y) + np.sin(7.0 * number.to_numpy(dtype=float))
        table = visits.assign(dbh=base + 3.0 * visits["at"])
        trees = [table.assign(tree=n + 1, dbh=table["dbh"] + more) for n, more in enumerate((0.0, 4.0, -3.0))]
        joined = pd.concat(trees, ignore_index=True).drop(columns=["at", "date"])
        status = np.where(joined["tree"] == 3, "dead", "live")
        return joined.assign(species="FI", status=status, dbh=joined["dbh"].round(1))

    @staticmethod
    def _raster(folder: Path, name: str, given: Any) -> str:
        if isinstance(given, str):  # the lines of the project file, for a file there is none of
            return f"[rasters.{quoted(name)}]\n{given}"
        write_raster(folder / f"raster{len(list(folder.glob('*.tif')))}.tif", given)
        last = sorted(folder.glob("*.tif"))[-1].name
        return f"[rasters.{quoted(name)}]\nfile = {quoted(last)}"


def cells(count: int = 4) -> np.ndarray:
    """Canopy height of cells of 20 m that cover so many squares."""
    columns, rows = int(SIDE * count / CELL), int(SIDE / CELL)
    x = LEFT + CELL * (np.arange(columns) + 0.5)
    y = BOTTOM + SIDE - CELL * (np.arange(rows) + 0.5)
    return height(*np.meshgrid(x, y))


def write_raster(path: Path, values: np.ndarray, *, left: float = LEFT, crs: str = CRS, cell: float = CELL) -> None:
    """Write a GeoTIFF of square cells whose north-west corner is that of the land."""
    options = {"driver": "GTiff", "count": 1, "dtype": "float32", "crs": crs, "nodata": -9999.0}
    rows, columns = values.shape
    transform = from_origin(left, BOTTOM + SIDE, cell, cell)
    with rasterio.open(path, "w", **options, height=rows, width=columns, transform=transform) as file:
        file.write(values.astype("float32"), 1)


@dataclass
class Outcome:
    """What a run left."""

    code: int
    printed: str
    folder: Path

    @cached_property
    def results(self) -> Results:
        """The results folder read back."""
        return open_results(self.folder / "results")

    @property
    def rules(self) -> set[str]:
        """Rules of the findings."""
        return set(self.results.findings["rule"])


def run(folder: Path, capture: pytest.CaptureFixture[str], *, command: Sequence[str] = ()) -> Outcome:
    """Run the command line in this process; a warning of a library counts as a fault."""
    argv, sys.argv = sys.argv, ["landcarbon", *(command or ("run", str(folder / "inventory.toml")))]
    capture.readouterr()
    try:
        with warnings.catch_warnings(record=True) as noted:
            warnings.simplefilter("always")
            try:
                cli.main()
                code = 0
            except SystemExit as stop:
                code = int(stop.code or 0)
    finally:
        sys.argv = argv
    printed = "".join(capture.readouterr())
    assert "Traceback" not in printed
    told = [str(one.message) for one in noted if not issubclass(one.category, QUIET)]
    assert not told, told
    return Outcome(code, printed, folder)


def sound(land: Land, folder: Path, capture: pytest.CaptureFixture[str]) -> Outcome:
    """Write, run, and hold the results to all that must be true of any."""
    done = run(land.write(folder), capture)
    assert done.code == 0, done.printed
    check_results(done)
    return done


def check_results(done: Outcome) -> None:
    """All that must be true of any results."""
    results = done.results
    for table in (*results.further.values(), results.stocks, results.change):
        numbers = table.select_dtypes("number")
        assert not np.isinf(numbers.to_numpy(dtype=float, na_value=np.nan)).any()
    check_claims(results.stocks, "density_t_c_ha", ("density", "stock"), results)
    check_claims(results.change, "change_t_c", ("change",), results)
    check_pools(results.stocks, "stock_t_c", ["by", "unit", "survey"])
    check_pools(results.change, "change_t_c", ["by", "unit", "since", "until"])
    check_units(results.stocks, "stock_t_c", ["survey", "pool"], results)
    if "area_effect" not in results.further:  # land that went from one stratum to another is in the inventory alone
        check_units(results.change, "change_t_c", ["since", "until", "pool"], results)
    check_maps(done)
    told = results.reconciliation
    assert (told["rows_read"] == told["used"] + told["set_aside"]).all()


def check_claims(table: pd.DataFrame, value: str, names: Sequence[str], results: Results) -> None:
    """A figure has an error and an interval, or the method says why not; no error of zero goes unmentioned."""
    blank = table[value].isna()
    assert table.loc[blank, "method"].str.len().gt(0).all()
    for name in names:
        known = table[f"{name}_se"].notna()
        assert not (blank & known).any()
        assert (table.loc[known, f"{name}_se"] >= 0).all()
        without = table[~blank & ~known & table["area_ha"].gt(0)]
        assert without["method"].str.len().gt(0).all(), without[["by", "unit", "pool", "method"]]
        low, high = (table.loc[known, f"{name}_{end}"] for end in ("low", "high"))
        assert low.notna().all()
        assert (low <= high).all()
    zero = table[(table[f"{names[0]}_se"] == 0) & table[value].ne(0) & table["area_ha"].gt(0)]
    if len(zero):
        assert "zero variance" in set(results.findings["rule"]), zero


def close(one: pd.Series, other: pd.Series, size: pd.Series) -> None:
    """Equal to 1e-9 of the size of what is added up (the tables hold ten digits)."""
    off = ((one - other).abs() / size.where(size > 0, 1.0))[other.notna()]
    assert (off < 1e-9).all(), off[~(off < 1e-9)]  # a sum that is missing where the whole is known is off, too


def check_pools(table: pd.DataFrame, value: str, keys: list[str]) -> None:
    """Pools add up to all; identity."""
    parts = table[table["pool"] != "all"].assign(size=table[value].abs())
    added = parts.groupby(keys, sort=False)[[value, "size"]].sum(min_count=1)
    whole = table[table["pool"] == "all"].set_index(keys)[value].dropna()
    added = added.reindex(whole.index)
    close(added[value], whole, added["size"])


def check_units(table: pd.DataFrame, value: str, keys: list[str], results: Results) -> None:
    """Strata add up to the inventory, and parcels to the stratum they fill, where the figures say they do."""
    sized = table.assign(size=table[value].abs())
    strata = sized[sized["by"] == "stratum"].groupby(keys)[[value, "size"]].sum(min_count=1)
    whole = sized[sized["by"] == "inventory"].set_index(keys)[value].dropna()
    if results.settings_summary["name"] != "two phase":
        strata = strata.reindex(whole.index)
        close(strata[value], whole, strata["size"])
    if results.parcels is None or "not benchmarked" in " ".join(table["method"]):
        return
    own = sized[(sized["by"] == "parcel") & ~sized["method"].str.startswith(("not", "direct", "domain"))]
    named = own.assign(unit=own["unit"].map(results.parcels.drop_duplicates("parcel").set_index("parcel")["stratum"]))
    parcels = named.groupby([*keys, "unit"])[[value, "size", "area_ha"]].sum()
    level = sized[sized["by"] == "stratum"].set_index([*keys, "unit"])
    both = parcels.join(level.add_suffix("_of_stratum"), how="inner")
    both = both[(both["area_ha"] / both["area_ha_of_stratum"] - 1).abs() < 1e-9]
    close(both[value], both[f"{value}_of_stratum"], both["size"])


def check_maps(done: Outcome) -> None:
    """Cells add up to the parcels: by our own reader and by an independent library (exactextract)."""
    results = done.results
    parcels = results.parcels
    for path in (done.folder / "results").glob("*.tif"):
        with rasterio.open(path) as file:
            tags, size = file.tags(), abs(file.transform.a * file.transform.e) / 1e4
        if "SURVEY" in tags:
            table, value = results.stocks[results.stocks["survey"] == tags["SURVEY"]], "stock_t_c"
        else:
            at = results.change[["since", "until"]].eq([tags["SINCE"], tags["UNTIL"]]).all(axis=1)
            table, value = results.change[at], "change_t_c"
        own = table[(table["by"] == "parcel") & (table["pool"] == "all")].set_index("unit")[value]
        figure = parcels["parcel"].map(own)
        off = results.findings.loc[results.findings["rule"] == "raster does not add up", "value"]
        kept = figure.notna() & ~parcels["parcel"].isin(set(off))
        assert kept.any(), path.name
        shapes = parcels[kept].reset_index(drop=True)
        wanted = figure[kept].to_numpy()
        assert check_raster_sums(path, shapes, wanted) < 1e-6
        told = exact_extract(str(path), shapes, ["sum", "stdev", "mean"], output="pandas")
        scale = np.maximum(np.abs(wanted), 1e-6 * shapes.area.to_numpy())
        assert np.max(np.abs(told["sum"].to_numpy() * size - wanted) / scale) < 1e-6


def refused(land: Land, folder: Path, capture: pytest.CaptureFixture[str], said: str, old: Path) -> Outcome:
    """Write and run; ends with one message and code 2, and earlier results stay."""
    land.write(folder)
    earlier = folder / "results"
    shutil.copytree(old, earlier)
    before = {path.name: path.read_bytes() for path in earlier.iterdir()}
    done = run(folder, capture)
    assert done.code == 2, done.printed
    assert said in " ".join(done.printed.split()), done.printed
    assert {path.name: path.read_bytes() for path in earlier.iterdir()} == before
    assert not [path for path in folder.iterdir() if path.name.startswith(".")]
    return done


@pytest.fixture(scope="module")
def old(tmp_path_factory: pytest.TempPathFactory) -> Path:
    """Results of an earlier run, of the land as it is before anything is wrong with it."""
    folder = Land(surveys=ONE).write(tmp_path_factory.mktemp("old"))
    open_inventory(folder).run()
    return folder / "results"


def many_parcels() -> Land:
    """Every plot its own parcel."""
    names = [f"Q{i}" for i in range(10)]
    return Land(parcels=parcel_frame(names, "aaaaabbbbb"), plots=plot_frame([1] * 10), estimation=MAPS)


def with_slivers() -> Land:
    """Put parcels of next to no area, without plots, beside the others: 1 mm and 2 m wide."""
    shapes = [
        box(LEFT + at * SIDE, BOTTOM, LEFT + at * SIDE + side, BOTTOM + side) for at, side in ((4, 0.001), (5, 2))
    ]
    thin = gpd.GeoDataFrame({"parcel": ["thin", "small"], "stratum": "b"}, geometry=shapes, crs=CRS)
    return Land(parcels=pd.concat([parcel_frame(), thin], ignore_index=True), estimation=MAPS)


def canopy(edit: Callable[[np.ndarray], Any] = lambda values: values, **more: Any) -> Land:
    """The land with canopy heights, edited."""
    values = cells()
    changed = edit(values)
    return Land(rasters={"ch": values if changed is None else changed}, **more)


def half(values: np.ndarray) -> None:
    """Take away the values of the eastern half: parcels P3 and P4."""
    values[:, values.shape[1] // 2 :] = -9999.0


def odd(values: np.ndarray) -> None:
    """Strew in what is no number."""
    values[2:4, ::7] = np.nan
    values[5, ::5] = np.inf
    values[6, ::5] = -np.inf


WEIGHT = '[columns.plots]\nweight = "w"'
ONE = ("2010",)
MAPS = "map_cell_m = 50"
ALL_AT_ONCE = """
variance = "neighbours"
change = "best combination"
dates = "common"
interval = "log"
lower_confidence = 0.9
by_stratum = true
"""

ODD: dict[str, Callable[[], Land]] = {
    "two plots": lambda: canopy(plots=plot_frame((1, 1, 0, 0)), estimation=MAPS),
    "equal": lambda: Land(equal=True, estimation=MAPS),
    "stratum without plots": lambda: canopy(plots=plot_frame((6, 6, 0, 0))),
    "stratum of one plot": lambda: canopy(plots=plot_frame((6, 6, 1, 0)), estimation=ALL_AT_ONCE),
    "slivers": with_slivers,
    "plots in one parcel": lambda: canopy(plots=plot_frame((9, 0, 9, 0)), surveys=ONE),
    "parcel of one plot": lambda: Land(plots=plot_frame((6, 1, 6, 1)), estimation=MAPS),
    "every plot its parcel": many_parcels,
    "every plot its parcel, direct": lambda: replace(many_parcels(), estimation='parcels = "direct"\n' + MAPS),
    "parcels without stratum": lambda: canopy(parcels=parcel_frame(strata=["a", "a", "", ""]), surveys=ONE),
    "collinear": lambda: Land(rasters={"ch": cells(), "twice": 2.0 * cells()}, surveys=ONE),
    "constant": lambda: canopy(lambda values: np.full_like(values, 7.0), surveys=ONE),
    "half missing": lambda: canopy(half, surveys=ONE),
    "no value anywhere": lambda: canopy(lambda values: np.full_like(values, -9999.0), surveys=ONE),
    "not finite": lambda: canopy(odd, surveys=ONE),
    "one survey": lambda: Land(surveys=ONE, estimation=MAPS),
    "survey without plots": lambda: canopy(surveys=("2010", "2020", "2030"), visited={"2020": []}),
    "none repeated": lambda: Land(visited=parted(0), estimation=MAPS),
    "one repeated": lambda: canopy(visited=parted(1)),
    "one repeated, best": lambda: Land(visited=parted(1), estimation='change = "best combination"\n' + MAPS),
    "all at once": lambda: canopy(estimation=ALL_AT_ONCE, surveys=("2010", "2020", "2030"), edit_trees=all_cut),
    "all at once, partly": lambda: canopy(estimation=ALL_AT_ONCE, visited=parted(8), plots=plot_frame((9, 9, 9, 9))),
    "clusters of a stratum": lambda: canopy(plots=plot_frame(cluster=["c"] * 12 + [f"d{i // 2}" for i in range(12)])),
    "weights": lambda: canopy(plots=plot_frame(w=np.linspace(0.1, 9.0, 24)), more=WEIGHT, surveys=ONE),
    "first phase": lambda: replace(two_phase(b=30), rasters={"ch": cells()}),
    "classes, one empty": lambda: classes({"x": 12}, "y"),
    "classes, one of one plot": lambda: classes({"x": 12, "y": 11, "z": 1}),
    "classes and a raster": lambda: replace(classes({"x": 8, "y": 8, "z": 8}), rasters={"ch": cells()}),
}


def all_cut(trees: pd.DataFrame) -> pd.DataFrame:
    """Let no tree stand at the second survey."""
    return trees.assign(status=trees["status"].where(trees["survey"] != "2020", "absent"))


def parted(shared: int) -> dict[str, list[str]]:
    """Plots by survey, so many of them in both; half of the rest in either, in turn."""
    count = 36 if shared > 1 else 24
    names = [f"k{i}" for i in range(count)]
    return {
        survey: [name for i, name in enumerate(names) if i < shared or i % 2 == at]
        for at, survey in enumerate(("2010", "2020"))
    }


def two_phase(**points: int) -> Land:
    """Areas of strata from points."""
    told = ", ".join(f"{stratum} = {number}" for stratum, number in {"a": 40, **points}.items())
    more = f"[strata]\nfirst_phase = {{ {told} }}\nfirst_phase_area = 36.0"
    return Land(name="two phase", more=more, estimation=MAPS)


def classes(plots: Mapping[str, int], *empty: str) -> Land:
    """Classes of known area; so many plots of each, and some without plots. One stratum."""
    given = [name for name, number in plots.items() for _ in range(number)]
    given += [next(iter(plots))] * (24 - len(given))
    areas = ", ".join(f"{name} = 9.0" for name in (*plots, *empty))
    more = f"[post_strata]\nareas = {{ {areas} }}"
    parcels, frame = parcel_frame(strata="aaaa"), plot_frame(post_stratum=given)
    return Land(parcels=parcels, plots=frame, more=more, estimation=MAPS, surveys=ONE)


# What must be said of a case.
SAID = {
    "stratum without plots": "stratum not estimable",
    "stratum of one plot": "stratum not estimable",
    "equal": "zero variance",
    "collinear": "raster redundant",
    "constant": "raster constant",
    "half missing": "raster without mean",
    "no value anywhere": "raster without values",
    "not finite": "raster misses part of parcel",
    "survey without plots": "survey without plots",
    "one repeated": "single repeated plot",
    "classes, one empty": "class with few plots",
    "classes, one of one plot": "class with few plots",
}


@pytest.mark.parametrize("case", list(ODD))
def test_odd(case: str, tmp_path: Path, capsys: pytest.CaptureFixture[str]) -> None:
    done = sound(ODD[case](), tmp_path, capsys)
    assert case not in SAID or SAID[case] in done.rules


def test_one_plot_in_all(tmp_path: Path, capsys: pytest.CaptureFixture[str], old: Path) -> None:
    refused(canopy(plots=plot_frame((1, 0, 0, 0)), surveys=ONE), tmp_path, capsys, "nothing can be estimated", old)


FILE = 'file = "raster.tif"'

BAD_RASTER: dict[str, tuple[Callable[[Path], Any], str, str]] = {
    # name: (write the file, the lines under [rasters.ch], what is said)
    "a text": (lambda path: path.write_text("height\n1\n"), FILE, "not a raster file that can be read"),
    "missing": (lambda path: None, FILE, "no such file"),
    "outside": (lambda path: None, 'file = "../raster.tif"', "lies outside the folder"),
    "elsewhere": (lambda path: write_raster(path, cells(), left=LEFT + 1e5), FILE, "does not overlap"),
    "no such band": (lambda path: write_raster(path, cells()), FILE + "\nband = 3", "there is no band 3"),
    "unknown survey": (lambda path: write_raster(path, cells()), 'files = { "1999" = "raster.tif" }', "'1999'"),
    "unknown crs": (lambda path: write_raster(path, cells()), FILE + '\ncrs = "EPSG:0"', "no coordinate system"),
    "empty": (lambda path: path.write_bytes(b""), FILE, "is empty"),
    "cut short": (lambda path: cut_short(path), FILE, "raster.tif"),
    "a survey without": (
        lambda path: write_raster(path, cells()), 'files = { "2010" = "gone.tif" }', "no such file"
    ),
}  # fmt: skip


def cut_short(path: Path) -> None:
    """Leave only the first part of a file."""
    write_raster(path, cells())
    path.write_bytes(path.read_bytes()[:700])


@pytest.mark.parametrize("case", list(BAD_RASTER))
def test_raster_refused(case: str, tmp_path: Path, capsys: pytest.CaptureFixture[str], old: Path) -> None:
    write, lines, said = BAD_RASTER[case]
    write(tmp_path / "raster.tif")
    refused(Land(rasters={"ch": lines}, surveys=ONE), tmp_path, capsys, said, old)


BAD_SETTING: dict[str, tuple[Callable[[], Land], str]] = {
    "misspelt raster": (lambda: canopy(estimation='rasters = ["hc"]'), "there is no raster 'hc'"),
    "weight text": (
        lambda: Land(plots=plot_frame(w=["2"] * 23 + ["heavy"]), more=WEIGHT), "the weight of plot 'k23' is not"
    ),
    "weights text": (lambda: Land(plots=plot_frame(w="heavy"), more=WEIGHT), "'heavy'"),
    "weight zero": (lambda: Land(plots=plot_frame(w=[0.0] + [1.0] * 23), more=WEIGHT), "the weight of plot 'k0' is"),
    "weight negative": (lambda: canopy(plots=plot_frame(w=[1.0, -1.0] * 12), more=WEIGHT), "the weight of plot"),
    "weight missing": (lambda: Land(plots=plot_frame(w=[1.0, None] * 12), more=WEIGHT), "the weight of plot"),
    "class without an area": (
        lambda: replace(classes({"x": 24}), plots=plot_frame(post_stratum=["x", "?"] * 12)), "without an area: ?"
    ),
    "classes without areas": (lambda: replace(classes({"x": 24}), more=""), "go together"),
    "classes and strata": (lambda: replace(classes({"x": 24}), parcels=parcel_frame()), "one stratum"),
    "first phase of no point": (lambda: two_phase(a=0), "holds no point"),
}  # fmt: skip


@pytest.mark.parametrize("case", list(BAD_SETTING))
def test_setting_refused(case: str, tmp_path: Path, capsys: pytest.CaptureFixture[str], old: Path) -> None:
    make, said = BAD_SETTING[case]
    refused(replace(make(), surveys=ONE), tmp_path, capsys, said, old)


def test_raster_in_degrees(tmp_path: Path, capsys: pytest.CaptureFixture[str]) -> None:
    """A raster in degrees serves like one in metres."""
    west, south, east, north = transform_bounds(CRS, "EPSG:4326", LEFT, BOTTOM, LEFT + 4 * SIDE, BOTTOM + SIDE)
    step = 0.0002
    values = np.tile(np.linspace(5.0, 25.0, int((east - west) / step) + 3), (int((north - south) / step) + 3, 1))
    land = Land(rasters={"ch": FILE}, estimation="map_cell_m = 20", surveys=ONE)
    options = {"driver": "GTiff", "count": 1, "dtype": "float32", "crs": "EPSG:4326"}
    transform = from_origin(west - step, north + step, step, step)
    with rasterio.open(
        tmp_path / "raster.tif", "w", **options, height=values.shape[0], width=values.shape[1], transform=transform
    ) as file:
        file.write(values.astype("float32"), 1)
    done = sound(land, tmp_path, capsys)
    assert not {"raster misses plot", "raster misses part of parcel", "raster without values"} & done.rules


def test_survey_with_all_plots_set_aside(tmp_path: Path, capsys: pytest.CaptureFixture[str]) -> None:
    def far_off(trees: pd.DataFrame) -> pd.DataFrame:
        return trees.assign(plot=trees["plot"].where(trees["survey"] != "2020", "nowhere"))

    land = canopy(surveys=("2010", "2020", "2030"), visited={"2020": []}, edit_trees=far_off)
    land.visited = {"2020": ["k0"]}
    done = sound(land, tmp_path, capsys)
    stocks = done.results.stocks
    assert stocks.loc[stocks["survey"] == "2020", "stock_t_c"].isna().all()
    assert stocks.loc[stocks["survey"] == "2030", "stock_t_c"].notna().any()


def moving_parcels() -> gpd.GeoDataFrame:
    """P1 is there from 2015 on only, P4 until then, P2 hands its eastern third to P3."""
    frame = parcel_frame()
    before, after = frame.iloc[1:].copy(), frame.iloc[:3].copy()
    cut = LEFT + 2 * SIDE - 100.0
    shapes = {
        "P2": box(LEFT + SIDE, BOTTOM, cut, BOTTOM + SIDE),
        "P3": box(cut, BOTTOM, LEFT + 3 * SIDE, BOTTOM + SIDE),
    }
    after["geometry"] = [shapes.get(name, shape) for name, shape in zip(after["parcel"], after.geometry, strict=True)]
    both = [before.assign(valid_from="", valid_to="2015-12-31"), after.assign(valid_from="2016-01-01", valid_to="")]
    return gpd.GeoDataFrame(pd.concat(both, ignore_index=True), crs=CRS)


def test_boundaries_that_move_with_rasters(tmp_path: Path, capsys: pytest.CaptureFixture[str]) -> None:
    done = sound(canopy(parcels=moving_parcels()), tmp_path, capsys)
    stocks = done.results.stocks
    at = stocks[(stocks["by"] == "parcel") & (stocks["pool"] == "all")].set_index(["survey", "unit"])["stock_t_c"]
    assert at.get(("2010", "P1"), np.nan) != at.get(("2010", "P1"), np.nan)
    assert at[("2010", "P4")] > 0
    assert at[("2020", "P1")] > 0
    assert "rasters not used" in done.rules
    assert "area_effect" in done.results.further
    check_own_plots_that_stayed(done.results)


def check_own_plots_that_stayed(results: Results) -> None:
    """The own part of a parcel's change is the mean change of the plots that were in it at both surveys; identity."""
    plots = results.plots[(results.plots["pool"] == "above_ground") & (results.plots["part"] == "")]
    sides = [plots[plots["survey"] == survey] for survey in ("2010", "2020")]
    both = sides[0].merge(sides[1], on="plot", suffixes=("_since", "_until"))
    stayed = both[both["inside_since"] & both["inside_until"] & (both["parcel_since"] == both["parcel_until"])]
    assert len(stayed) < both["inside_since"].sum()  # some went with the land
    grown = stayed.assign(change=stayed["density_t_c_ha_until"] - stayed["density_t_c_ha_since"])
    detail = results.further["parcel_detail"]
    detail = detail[(detail["of"] == "change") & (detail["pool"] == "above_ground")].set_index("parcel")
    own = grown.groupby("parcel_since")["change"]
    assert detail["plots"].to_dict() == own.size().reindex(detail.index).fillna(0).to_dict()
    told = detail["direct"].dropna()
    assert {"P2", "P3"} <= set(told.index)
    assert told.to_numpy() == pytest.approx(own.mean().reindex(told.index).to_numpy(), rel=1e-9)
    # Plots that went with the land would stand in as of one survey only, and bring the spread of stocks with them.
    assert (detail.loc[told.index, "smoothed_se"] < 1.5 * detail.loc[told.index, "direct_se"]).all()


HOSTILE = ("a, \"b\"; 'c'", "=cmd|' /C calc'!A0", "<script>alert(1)</script>", "Größe 森 \u202e&amp;")
TIMES = ("2014/15", "../../2024", "=2030")


@pytest.fixture(scope="module")
def hostile(tmp_path_factory: pytest.TempPathFactory) -> Outcome:
    """Names that do harm in tables, pages and paths where they are taken as they are."""
    folder = tmp_path_factory.mktemp("deep") / "down" / "land"
    land = canopy(parcels=parcel_frame(HOSTILE, [HOSTILE[1]] * 2 + [HOSTILE[2]] * 2), surveys=TIMES, name=HOSTILE[2])
    land.rasters = {'=h,"<script>"/../x': cells(), "<script>alert(2)</script>": cells() ** 2}
    land.plots = plot_frame((9, 9, 9, 9))
    land.write(folder)
    open_inventory(folder).run()
    return Outcome(0, "", folder)


def test_hostile_names_give_sound_figures(hostile: Outcome, capsys: pytest.CaptureFixture[str]) -> None:
    check_results(hostile)
    for command in (["show", "--by", "parcel"], ["trace", "--parcel", HOSTILE[2]], ["map"]):
        where = str(hostile.folder / "results")
        assert run(hostile.folder, capsys, command=[command[0], where, *command[1:]]).code == 0
    stocks = hostile.results.stocks
    assert set(stocks.loc[stocks["by"] == "parcel", "unit"]) == set(HOSTILE)
    assert set(stocks["survey"]) == set(TIMES)


def test_hostile_names_stay_in_the_folder(hostile: Outcome) -> None:
    folder = hostile.folder / "results"
    names = [path.name for path in folder.iterdir()]
    assert all(path.is_file() for path in folder.iterdir())
    assert all(re.fullmatch(r"[\w.-]+", name) for name in names)
    maps = [name for name in names if name.endswith(".tif")]
    assert len(maps) == len(set(map(str.casefold, maps))) == 6
    deep = hostile.folder.parent.parent
    assert [path.name for path in deep.rglob("*") if path.suffix == ".tif" and path.parent.name == "land"]
    assert {path.name for path in deep.iterdir()} == {"down"}
    assert {path.name for path in deep.joinpath("down").iterdir()} == {"land"}


def test_hostile_names_are_no_formula_in_tables(hostile: Outcome) -> None:
    """No cell starts with a sign that spreadsheets take for a formula (common practice, no source)."""
    for path in (hostile.folder / "results").glob("*.csv"):
        with path.open(encoding="utf-8", newline="") as file:
            rows = list(csv.reader(file, strict=True))
        assert len({len(row) for row in rows}) == 1, path.name
        risky = [cell for row in rows for cell in row if re.match(r"[=+@\t\r]|-(?![\d.])", cell)]
        assert not risky, (path.name, risky[:3])


def test_hostile_names_are_no_markup_in_the_page(hostile: Outcome) -> None:
    page = (hostile.folder / "results" / "map.html").read_text(encoding="utf-8")
    assert "<script>alert" not in page
    assert "alert(1)</script>" not in page
    assert "森" in page or "\\u68ee" in page


def test_plots_with_samples_only_keep_their_design() -> None:
    """A plot without trees at a survey still has its weight, cluster and location."""
    inputs = make_inputs(trees=[{"plot": "A"}], plots=[{"plot": "A"}, {"plot": "B"}])
    design = inputs.plots.assign(cluster=["c", "d"], weight=[1.0, 3.0])
    trees = pd.DataFrame({"survey": ["2014"], "plot": ["A"], "above_ground.trees": [5.0], "size": [1.0], "trees": [1]})
    trees = trees.merge(design[["plot", "parcel", "stratum", "inside", "x", "y", "cluster", "weight"]], on="plot")
    trees = trees.assign(date=pd.NaT, biomass_t_ha=10.0)
    parts = pd.DataFrame(
        {"survey": ["2014"], "plot": ["B"], "pool": ["soil"], "part": ["soil"], "density_t_c_ha": [9.0]}
    )
    joined = join_parts(trees, parts, replace(inputs, plots=design)).set_index("plot")
    assert joined.loc["B", ["cluster", "weight"]].tolist() == ["d", 3.0]
    assert joined.loc["B", ["x", "y"]].notna().all()
