"""The woodland behind the demo inventory: its map, and its trees through three surveys.

Everything here is made up: the valley of Aldrunthal, its cooperative, the parcels, the trees, and every rate of growth,
death and felling below. The figures were picked so that the woodland behaves believably; they describe no real stand
and must not be used as growth rates. The coordinates had to lie somewhere; whatever stands there has nothing to do
with this.
"""

from __future__ import annotations

from dataclasses import dataclass
from itertools import pairwise

import geopandas as gpd
import numpy as np
import pandas as pd
import shapely

__all__ = [
    "CRS",
    "INGROWTH",
    "LARGE_LIMIT_CM",
    "SMALL_LIMIT_CM",
    "SMALL_RADIUS_M",
    "SPECIES",
    "STORM",
    "SURVEYS",
    "THINNED",
    "draw_parcels",
    "lay_out_plots",
    "live_through",
]

CRS = "EPSG:25832"
ORIGIN_M = (548_300.0, 5_611_900.0)
SURVEYS = (2014, 2019, 2024)
OWNER = "Aldrunthal Woodland Cooperative"

SMALL_RADIUS_M, LARGE_RADIUS_M = 5.0, 12.0
SMALL_LIMIT_CM, LARGE_LIMIT_CM = 5.0, 20.0
GRID_M, GRID_ANGLE_DEG = 177.0, 21.0
EXTRA_PLOTS = 4  # laid out in the alder strip in 2019

# Name and stand of each parcel: the brook strip, then the slopes on its two sides, from the head of the valley.
STRIP = [("Brook Head", "alder"), ("Brook Foot", "alder")]
LEFT = [("Chapel Rise", "beech"), ("Owl Bank", "beech"), ("Sawpit", "spruce"), ("Charcoal Field", "mixed"),
        ("Lower Kell", "beech")]  # fmt: skip
RIGHT = [("Needle Top", "spruce"), ("Frost Hollow", "spruce"), ("Long Shade", "beech"), ("New Planting", "mixed"),
         ("Windy Acre", "spruce"), ("Sheepgate", "mixed"), ("Upper Kell", "beech")]  # fmt: skip
THINNED, STORM = "Sawpit", "Windy Acre"

# Code, name as the species table spells it, yearly growth of the diameter [cm], share of trees dying a year, and the
# height curve h = 1.3 + d2 / (a + b d)2 with a and b. The third name is misspelt on purpose.
SPECIES = pd.DataFrame(
    [
        ("BE", "Fagus sylvatica", 0.27, 0.004, 1.25, 0.162),
        ("SP", "Picea abies", 0.34, 0.008, 1.37, 0.154),
        ("SY", "Acer pseudoplatanis", 0.30, 0.010, 1.15, 0.175),
        ("PI", "Pinus sylvestris", 0.30, 0.014, 1.30, 0.178),
        ("BI", "Betula pendula", 0.33, 0.016, 1.00, 0.192),
        ("AL", "Alnus glutinosa", 0.28, 0.006, 1.20, 0.188),
        ("OA", "Quercus robur", 0.28, 0.005, 1.40, 0.172),
        ("AS", "Fraxinus excelsior", 0.26, 0.025, 1.15, 0.170),
    ],
    columns=["code", "latin", "growth", "death", "a", "b"],
).set_index("code", drop=False)


@dataclass(frozen=True)
class Cohort:
    """One storey of a stand: trees per hectare, diameter at the first survey (mean, sd in logs), species shares."""

    stand: str
    per_ha: float
    dbh_cm: float
    spread: float
    shares: dict[str, float]


COHORTS = [
    Cohort("beech", 195, 40.0, 0.26, {"BE": 0.78, "OA": 0.10, "SY": 0.08, "AS": 0.04}),
    Cohort("beech", 240, 8.5, 0.30, {"BE": 0.66, "SY": 0.24, "AS": 0.10}),
    Cohort("spruce", 600, 27.5, 0.22, {"SP": 0.92, "PI": 0.05, "BI": 0.03}),
    Cohort("spruce", 120, 8.0, 0.28, {"SP": 0.60, "BE": 0.20, "BI": 0.20}),
    Cohort("mixed", 1450, 10.5, 0.32, {"BI": 0.22, "PI": 0.20, "OA": 0.26, "BE": 0.18, "SP": 0.14}),
    Cohort("alder", 520, 18.5, 0.32, {"AL": 0.74, "AS": 0.16, "BI": 0.10}),
]
# Trees per hectare that grow past 5 cm in a year, and their species.
INGROWTH = [
    Cohort("beech", 14, 5.8, 0.10, {"BE": 0.75, "SY": 0.25}),
    Cohort("spruce", 12, 5.8, 0.10, {"SP": 0.55, "BI": 0.45}),
    Cohort("mixed", 30, 5.8, 0.10, {"BI": 0.30, "OA": 0.35, "BE": 0.35}),
    Cohort("alder", 16, 5.8, 0.10, {"AL": 0.80, "AS": 0.20}),
]
DEAD_AT_START, STAYS_STANDING, STILL_STANDING = 0.035, 0.70, 0.60
THINNED_SHARE, STORM_FELLED, STORM_SNAPPED = 0.30, 0.55, 0.10
HEIGHT_SHARE, HEIGHT_SPREAD, PLOT_SPREAD = 0.30, 0.07, 0.16
STEM_SHARES = (0.66, 0.20, 0.09, 0.05)  # alder trees with one, two, three, four stems


# --- the map -------------------------------------------------------------------------------------------------------


def _valley() -> tuple[shapely.Polygon, shapely.Polygon, shapely.LineString]:
    """Outline of the woodland, the strip along the brook, and the brook itself, before warping."""
    along = np.linspace(0.0, 1.0, 60)
    brook = np.column_stack([2250.0 * along, 290.0 * np.sin(2.9 * along + 0.3)])
    half = 350.0 + 190.0 * np.sin(np.pi * along) ** 0.8 + 30.0 * np.sin(9.0 * along)
    outline = shapely.Polygon(np.vstack([brook + [0, 1] * half[:, None], (brook - [0, 0.9] * half[:, None])[::-1]]))
    line = shapely.LineString(brook)
    longer = shapely.LineString(np.vstack([brook[0] - [200.0, 60.0], brook, brook[-1] + [200.0, -30.0]]))
    return outline.buffer(-60.0).buffer(60.0), longer.buffer(48.0, cap_style="flat"), line


def _cells(side: shapely.Polygon, count: int, rng: np.random.Generator) -> tuple[list[shapely.Geometry], np.ndarray]:
    """Cell borders and seed points of one slope: random points evened out a little, ordered along the valley."""
    west, south, east, north = side.bounds
    cloud = rng.uniform([west, south], [east, north], size=(4000, 2))
    cloud = cloud[shapely.contains_xy(side, cloud)]
    seeds = cloud[:count]
    for _ in range(6):  # move each seed halfway to the middle of its own ground
        nearest = np.linalg.norm(cloud[:, None] - seeds[None], axis=2).argmin(axis=1)
        middle = np.column_stack([np.bincount(nearest, cloud[:, k]) / np.bincount(nearest) for k in (0, 1)])
        seeds = seeds + 0.5 * (middle - seeds)
    seeds = seeds[seeds[:, 0].argsort()]
    edges = shapely.voronoi_polygons(shapely.MultiPoint(seeds), extend_to=side.buffer(500.0), only_edges=True)
    return [shapely.intersection(edges, side)], seeds


def _warp(points: np.ndarray) -> np.ndarray:
    """Bend straight borders into gentle curves; neighbouring points move together, so no gap opens."""
    x, y = points[:, 0], points[:, 1]
    bent_x = x + 26.0 * np.sin(y / 95.0 + 0.7) + 14.0 * np.sin(x / 71.0 + y / 130.0)
    bent_y = y + 24.0 * np.sin(x / 110.0) + 12.0 * np.sin(y / 64.0 - x / 150.0)
    return np.round(np.column_stack([bent_x + ORIGIN_M[0], bent_y + ORIGIN_M[1]]), 2)


def draw_parcels(rng: np.random.Generator) -> gpd.GeoDataFrame:
    """Draw the parcels: every border once, cut at the crossings, bent, then closed to areas."""
    outline, strip, brook = _valley()
    sides = sorted(outline.difference(strip).geoms, key=lambda part: -part.area)[:2]
    left, right = sorted(sides, key=lambda part: -part.centroid.y)
    lines, seeds, names = [outline.exterior, shapely.intersection(strip.boundary, outline)], [], []
    for side, labels in ((left, LEFT), (right, RIGHT)):
        edges, points = _cells(side, len(labels), rng)
        lines += edges
        seeds.append(points)
        names += labels
    ends = np.array([brook.interpolate(share, normalized=True).coords[0] for share in (0.25, 0.75)])
    middle = brook.interpolate(0.5, normalized=True)
    across = shapely.LineString([(middle.x, middle.y - 60.0), (middle.x, middle.y + 60.0)])
    lines.append(shapely.intersection(across, strip))
    seeds.append(ends)
    names += STRIP
    network = shapely.segmentize(shapely.line_merge(shapely.union_all(lines, grid_size=0.01)), 20.0)
    faces = shapely.get_parts(shapely.polygonize(shapely.get_parts(shapely.transform(network, _warp))))
    wanted = shapely.points(_warp(np.vstack(seeds)))
    found = np.array([np.flatnonzero(shapely.contains(faces, point))[0] for point in wanted])
    frame = pd.DataFrame(names, columns=["name", "stand"]).assign(use="forest land", owner=OWNER)
    return gpd.GeoDataFrame(frame, geometry=shapely.normalize(faces[found]), crs=CRS).sort_values(
        "name", ignore_index=True
    )


def lay_out_plots(parcels: gpd.GeoDataFrame, rng: np.random.Generator) -> pd.DataFrame:
    """Lay the plots on a turned square grid with a random start, add some in the brook strip, and name them."""
    outline = shapely.union_all(parcels.geometry.to_numpy())
    steps = np.arange(-15, 16)
    column, row = (grid.ravel() for grid in np.meshgrid(steps, steps))
    turn = np.deg2rad(GRID_ANGLE_DEG)
    start = np.array(outline.centroid.coords[0]) + rng.uniform(-0.5, 0.5, 2) * GRID_M
    x = start[0] + GRID_M * (column * np.cos(turn) - row * np.sin(turn))
    y = start[1] + GRID_M * (column * np.sin(turn) + row * np.cos(turn))
    plots = pd.DataFrame({"x": x, "y": y, "column": column, "row": row})[shapely.contains_xy(outline, x, y)]
    letters = plots.column - plots.column.min()
    plots["plot"] = [chr(65 + letter) + f"{number:02d}" for letter, number in
                     zip(letters, plots.row.max() - plots.row + 1, strict=True)]  # fmt: skip
    wet = shapely.union_all(parcels.geometry[parcels.stand == "alder"].to_numpy()).buffer(-LARGE_RADIUS_M)
    west, south, east, north = wet.bounds
    cloud = rng.uniform([west, south], [east, north], size=(600, 2))
    cloud = cloud[shapely.contains_xy(wet, cloud)][:EXTRA_PLOTS]
    extra = pd.DataFrame({"x": cloud[:, 0], "y": cloud[:, 1], "plot": [f"X{n:02d}" for n in range(1, 1 + EXTRA_PLOTS)]})
    plots = pd.concat([plots.assign(first=SURVEYS[0]), extra.assign(first=SURVEYS[1])]).sort_values("plot")
    points = gpd.GeoSeries(shapely.points(plots.x, plots.y), crs=CRS, index=plots.index)
    plots["share"] = points.buffer(LARGE_RADIUS_M).intersection(outline).area / points.buffer(LARGE_RADIUS_M).area
    plots["share"] = plots["share"].round(2)
    where = shapely.STRtree(parcels.geometry.to_numpy()).query(points.to_numpy(), predicate="within")
    plots = plots.iloc[where[0]].assign(
        parcel=parcels.name.to_numpy()[where[1]], stand=parcels.stand.to_numpy()[where[1]]
    )
    return plots[["plot", "x", "y", "parcel", "stand", "share", "first"]].reset_index(drop=True)


# --- the trees -----------------------------------------------------------------------------------------------------


def _cohort(cohort: Cohort, plots: pd.DataFrame, years: float, rng: np.random.Generator) -> pd.DataFrame:
    """Draw the trees of one storey on the large circle of every plot of its stand."""
    here = plots[plots.stand == cohort.stand]
    area_ha = np.pi * LARGE_RADIUS_M**2 / 1e4
    counts = rng.poisson(cohort.per_ha * years * area_ha * here.crowding)
    trees = here.loc[here.index.repeat(counts), ["plot", "x", "y", "parcel", "stand", "vigour"]].reset_index(drop=True)
    trees["sp"] = rng.choice(list(cohort.shares), size=len(trees), p=list(cohort.shares.values()))
    trees["dbh"] = cohort.dbh_cm * trees.vigour * np.exp(rng.normal(0.0, cohort.spread, len(trees)))
    return trees.drop(columns="vigour")


def _stems(trees: pd.DataFrame, rng: np.random.Generator) -> pd.DataFrame:
    """Place the trees, give some alders several stems, and draw what stays with a stem for good."""
    count = len(trees)
    trees["bearing"] = rng.uniform(0.0, 360.0, count)
    trees["dist"] = LARGE_RADIUS_M * np.sqrt(rng.uniform(0.0, 1.0, count))
    trees["luck"], trees["fate"] = rng.uniform(0.0, 1.0, count), rng.uniform(0.0, 1.0, count)
    drawn = rng.choice(len(STEM_SHARES), size=count, p=STEM_SHARES) + 1
    stems = np.where(trees.sp == "AL", drawn, 1)
    trees["key"] = np.arange(count)
    trees = trees.loc[trees.index.repeat(stems)].reset_index(drop=True)
    trees["stem_no"] = trees.groupby("key").cumcount() + 1
    trees["dbh"] *= np.where(trees.stem_no > 1, rng.uniform(0.55, 0.95, len(trees)), 1.0)
    trees["tall"] = np.exp(rng.normal(0.0, HEIGHT_SPREAD, len(trees)))
    trees["sampled"] = (rng.uniform(0.0, 1.0, len(trees)) < HEIGHT_SHARE) & (trees.stem_no == 1)
    trees["speed"] = np.exp(rng.normal(0.0, 0.35, len(trees)))
    return trees


def _next_state(now: pd.DataFrame, since: int, rng: np.random.Generator) -> pd.DataFrame:
    """Carry state, diameter and decay five years on: growth, death, the thinning and the storm."""
    years = SURVEYS[1] - SURVEYS[0]
    traits = SPECIES.loc[now.sp]
    alive, dead = now.state == "L", now.state == "D"
    draws = pd.DataFrame(rng.uniform(0.0, 1.0, (now.key.max() + 1, 3))).loc[now.key]  # one draw a tree, not a stem
    dies = alive & (draws[0].to_numpy() > (1.0 - traits.death.to_numpy()) ** years)
    stands = draws[1].to_numpy() < STAYS_STANDING
    falls = dead & (draws[1].to_numpy() > STILL_STANDING)
    cut = alive & (now.parcel == THINNED) & (since == SURVEYS[0]) & (draws[2].to_numpy() < THINNED_SHARE)
    stormy = (now.parcel == STORM) & (since == SURVEYS[1]) & (now.dbh > SMALL_LIMIT_CM * 2)
    thrown = (alive | dead) & stormy & (draws[2].to_numpy() < STORM_FELLED)
    snapped = alive & stormy & (draws[2].to_numpy() > 1.0 - STORM_SNAPPED)
    new, there = now.copy(), now.born <= since
    new["state"] = np.select([now.state == "G", ~there, cut | thrown | falls | (dies & ~stands), dies | snapped],
                             ["G", now.state, "G", "D"], now.state)  # fmt: skip
    new["note"] = np.select([~there, cut, thrown, snapped, falls], ["", "cut", "windthrown", "snapped", "fallen"], "")
    grows = traits.growth.to_numpy() * now.speed * years
    new["dbh"] = now.dbh + np.where((new.state == "L") & there, grows, 0.0)
    fresh = (new.state == "D") & alive
    new["rot"] = np.where(fresh, 1, np.minimum(now.rot + 1 + (now.luck > 0.6), 5))
    return new


def live_through(plots: pd.DataFrame, outline: shapely.Polygon, rng: np.random.Generator) -> dict[int, pd.DataFrame]:
    """Let the woodland live through the surveys; one table of all stems per survey, seen by the crew or not."""
    plots = plots.copy()
    plots["crowding"] = np.exp(rng.normal(0.0, PLOT_SPREAD, len(plots)))
    plots["vigour"] = np.exp(rng.normal(0.0, PLOT_SPREAD / 2, len(plots)))
    bare = plots.index[plots.stand == "mixed"][3]  # a clearing without trees
    plots.loc[bare, "crowding"] = 0.0
    born = [_cohort(cohort, plots, 1.0, rng).assign(born=SURVEYS[0]) for cohort in COHORTS]
    plots.loc[bare, "crowding"] = 2.0  # seedlings grow in before the last survey
    for since, until in pairwise(SURVEYS):
        sites = plots if until == SURVEYS[-1] else plots.drop(index=bare)
        born += [_cohort(cohort, sites, float(until - since), rng).assign(born=until) for cohort in INGROWTH]
    trees = _stems(pd.concat(born, ignore_index=True), rng)
    angle = np.deg2rad(trees.bearing)
    stands_inside = shapely.contains_xy(
        outline, trees.x + trees.dist * np.sin(angle), trees.y + trees.dist * np.cos(angle)
    )
    trees = trees[stands_inside].reset_index(drop=True)
    trees["state"] = np.where((trees.born == SURVEYS[0]) & (trees.luck < DEAD_AT_START), "D", "L")
    trees["rot"] = 1 + (trees.fate * 4).astype(int)
    trees["note"] = ""
    states, now = {}, trees
    for survey in SURVEYS:
        if survey > SURVEYS[0]:
            now = _next_state(now, SURVEYS[SURVEYS.index(survey) - 1], rng)
        states[survey] = now
    return states
