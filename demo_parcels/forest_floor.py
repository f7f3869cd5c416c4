"""What lies, grows and rots on the floor of the demo woodland: dead wood, stumps, litter, herbs, saplings, soil.

Everything here is made up, like the woodland itself (see ``woodland.py``): how much wood lies about, how fast it rots,
how heavy the litter is, what the soil holds. The figures were picked so that the results look believable; they describe
no real place.
"""

from __future__ import annotations

from itertools import pairwise

import numpy as np
import pandas as pd
from woodland import INGROWTH, STORM, SURVEYS, THINNED

__all__ = [
    "SITES",
    "clip_herbs",
    "count_saplings",
    "lay_lines",
    "lie_about",
    "site_traits",
    "take_cores",
    "take_frames",
    "tally_twigs",
    "walk_stumps",
]

# One row per stand. pieces, fresh: coarse pieces a line of 20 m crosses at the first survey, and new ones in five
# years; soft: share of softwood; thick_cm: middle diameter; steep: steepest usual ground [degrees]; twig: twigs
# against the whole; small, tall: saplings per hectare of the two classes; herb: fresh mass [g/m2]; leaf, raw: dry mass
# of litter and duff [g/m2]; carbon: organic carbon [%] of three layers; dense: bulk density [g/cm3] of three layers;
# stone: share of stones by volume [%].
SITES = pd.DataFrame(
    [
        ("beech", 1.5, 0.38, 0.05, 15.0, 24.0, 0.9, 900, 330, 60, 480, 1350, (4.0, 2.0, 1.2), (0.98, 1.15, 1.25), 14),
        ("spruce", 1.7, 0.55, 0.94, 13.5, 16.0, 1.3, 300, 110, 110, 520, 3200, (4.6, 2.3, 1.3), (0.92, 1.10, 1.20), 18),
        ("mixed", 0.7, 0.30, 0.40, 10.5, 9.0, 0.9, 900, 480, 330, 330, 850, (3.2, 1.9, 1.2), (1.05, 1.18, 1.25), 8),
        ("alder", 1.3, 0.50, 0.04, 12.5, 2.0, 1.1, 500, 260, 680, 280, 560, (6.4, 3.6, 2.2), (0.80, 0.95, 1.10), 3),
    ],
    columns=["stand", "pieces", "fresh", "soft", "thick_cm", "steep", "twig", "small", "tall", "herb", "leaf", "raw",
             "carbon", "dense", "stone"],
).set_index("stand")  # fmt: skip

# What a piece of each kind of wood is, as long as the crew can still tell.
LIKELY = {("beech", "hardwood"): "BE", ("spruce", "softwood"): "SP", ("spruce", "hardwood"): "BI",
          ("mixed", "hardwood"): "BI", ("mixed", "softwood"): "PI", ("alder", "hardwood"): "AL"}  # fmt: skip
TELLABLE_ROT = 2

LINE_M, LINE_BEARINGS = 20.0, (0.0, 120.0, 240.0)
COARSE_CM = 7.0
ROT_AT_START = (0.12, 0.24, 0.29, 0.22, 0.13)  # shares of the five classes of decay
THIN_PER_M, THICK_PER_M = 1.2, 0.25
THIN_LINE_M, THICK_LINE_M = 2.0, 10.0
SAPLING_RADIUS_M = 4.0
SAPLING_CM = (1.0, 3.5)  # middles of the classes below 2 cm and from 2 to 5 cm
FRAME_M2, FRAMES = 0.0625, 2
DRY_OF_FRESH = {"L": 0.56, "FH": 0.38, "herb": 0.22}
LAYERS_CM = ((0, 10), (10, 20), (20, 30))
DEEP_CM = 35  # the last layer of some cores goes further down
CORES = 2


def site_traits(plots: pd.DataFrame, rng: np.random.Generator) -> pd.DataFrame:
    """Give every plot what stays with it: how much lies there, how rich its soil is, how steep it is."""
    site = plots.join(SITES, on="stand")
    count = len(site)
    site["littered"] = np.exp(rng.normal(-0.06, 0.35, count))
    site["rich"] = np.exp(rng.normal(0.0, 0.16, count))
    site["mossy"] = np.exp(rng.normal(0.0, 0.22, count))
    site["young"] = rng.gamma(1.6, 1.0 / 1.6, count)
    site["slope_deg"] = site.steep * rng.beta(2.0, 1.6, count)
    site["aspect"] = rng.uniform(0.0, 360.0, count)
    return site


# --- dead wood -------------------------------------------------------------------------------------------------------


def lay_lines(site: pd.DataFrame, rng: np.random.Generator) -> pd.DataFrame:
    """Lay three lines from the centre of each plot: length along the ground, slope along the line in percent."""
    lines = site.loc[site.index.repeat(len(LINE_BEARINGS))].reset_index(drop=True)
    lines["line"] = lines.groupby("plot").cumcount() + 1
    bearing = np.array(LINE_BEARINGS)[lines.line - 1]
    along = 100.0 * np.tan(np.deg2rad(lines.slope_deg)) * np.abs(np.cos(np.deg2rad(bearing - lines.aspect)))
    lines["slope_pct"] = np.where(along < 6.0, 0.0, np.round(along))  # level enough is written as level
    cut = (lines.share < 1.0) & (rng.uniform(0.0, 1.0, len(lines)) < 0.4)
    lines["length_m"] = np.where(cut, np.round(rng.uniform(11.0, 19.0, len(lines))), LINE_M)
    return lines


def _pieces(lines: pd.DataFrame, rate: pd.Series, rng: np.random.Generator) -> pd.DataFrame:
    """Draw coarse pieces under the lines; ``rate`` is their mean number on a whole line."""
    counts = rng.poisson(rate * lines.littered * lines.length_m / LINE_M)
    pieces = lines.loc[lines.index.repeat(counts), ["plot", "stand", "line", "soft", "thick_cm"]]
    pieces = pieces.reset_index(drop=True)
    pieces["cm"] = np.maximum(pieces.thick_cm * np.exp(rng.normal(0.0, 0.42, len(pieces))), COARSE_CM)
    pieces["wood"] = np.where(rng.uniform(0.0, 1.0, len(pieces)) < pieces.soft, "softwood", "hardwood")
    likely = [LIKELY.get(kind, "") for kind in zip(pieces.stand, pieces.wood, strict=True)]
    pieces["sp"] = np.where(rng.uniform(0.0, 1.0, len(pieces)) < 0.6, likely, "")
    hollow = (pieces.cm > 22.0) & (rng.uniform(0.0, 1.0, len(pieces)) < 0.18)
    pieces["hole"] = np.where(hollow, rng.uniform(0.25, 0.6, len(pieces)), 0.0)  # cavity over diameter
    return pieces


def _arrivals(lines: pd.DataFrame, until: int, rng: np.random.Generator) -> pd.DataFrame:
    """Draw what came down since the survey before: always some, much after the thinning and the storm."""
    usual = _pieces(lines, lines.fresh, rng)
    slash = lines[(lines.parcel == THINNED) & (until == SURVEYS[1])]
    thrown = lines[(lines.parcel == STORM) & (until == SURVEYS[2])]
    more = [_pieces(slash.assign(thick_cm=9.5), pd.Series(1.2, slash.index), rng),
            _pieces(thrown.assign(thick_cm=21.0), pd.Series(1.5, thrown.index), rng)]  # fmt: skip
    new = pd.concat([usual, *more], ignore_index=True)
    return new.assign(rot=np.where(rng.uniform(0.0, 1.0, len(new)) < 0.7, 1, 2))


def lie_about(lines: pd.DataFrame, rng: np.random.Generator) -> dict[int, pd.DataFrame]:
    """Let the coarse wood under the lines rot, vanish and be added to; one table per survey."""
    now = _pieces(lines, lines.pieces, rng)
    now["rot"] = rng.choice(5, size=len(now), p=ROT_AT_START) + 1
    found = {SURVEYS[0]: now}
    for _, until in pairwise(SURVEYS):
        luck = rng.uniform(0.0, 1.0, len(now))
        stays = np.where(now.rot == 5, luck < 0.45, luck < 0.96)
        now = now[stays].assign(rot=np.minimum(now.rot + (luck < 0.62), 5)[stays])
        now = pd.concat([now, _arrivals(lines, until, rng)], ignore_index=True)
        found[until] = now
    for survey, table in found.items():
        measured = np.round(table.cm * np.exp(rng.normal(0.0, 0.015, len(table))), 1)
        table = table.assign(cm=np.maximum(measured, COARSE_CM), hole_cm=np.round(table.hole * measured))
        table["sp"] = table.sp.where(table.rot <= TELLABLE_ROT, "")
        found[survey] = table.sort_values(["plot", "line"], kind="stable", ignore_index=True)
    return found


def tally_twigs(lines: pd.DataFrame, survey: int, rng: np.random.Generator) -> pd.DataFrame:
    """Count thin and thick twigs on the first metres of each line."""
    more = np.where((lines.parcel == THINNED) & (survey == SURVEYS[1]), 2.1, 1.0)
    more = np.where((lines.parcel == STORM) & (survey == SURVEYS[2]), 2.4, more)
    rate = lines.twig * lines.littered**0.5 * more
    rows = [
        lines[["plot", "line"]].assign(size=name, n=rng.poisson(per_m * metres * rate))
        for name, per_m, metres in (("thin", THIN_PER_M, THIN_LINE_M), ("thick", THICK_PER_M, THICK_LINE_M))
    ]
    return pd.concat(rows, ignore_index=True)


def walk_stumps(site: pd.DataFrame, states: dict[int, pd.DataFrame], rng: np.random.Generator) -> pd.DataFrame:
    """Walk the large circle for stumps: old ones of spruce, those of the thinning, those sawn off after the storm."""
    spruce = site[site.stand == "spruce"]
    old = spruce.loc[spruce.index.repeat(rng.poisson(2.0 * spruce.share)), ["plot"]].assign(sp="", born=0)
    old["cm"] = np.exp(rng.normal(np.log(27.0), 0.2, len(old)))
    rows = [old]
    for since, until in pairwise(SURVEYS):
        note = "cut" if until == SURVEYS[1] else "windthrown"
        felled = states[until][(states[until].note == note) & (states[since].note == "") & (states[since].dbh > 14.0)]
        rows.append(felled[["plot", "sp"]].assign(born=until, cm=1.13 * felled.dbh + 1.0))
    stumps = pd.concat(rows, ignore_index=True)
    stumps["cm"] = stumps.cm * np.exp(rng.normal(0.0, 0.05, len(stumps)))
    stumps["high_cm"] = np.round(np.where(stumps.born == SURVEYS[2], 55.0, 27.0) * rng.uniform(0.7, 1.4, len(stumps)))
    stumps["slow"] = rng.integers(0, 2, len(stumps))
    found = []
    for at, survey in enumerate(SURVEYS):
        here = stumps[stumps.born <= survey].copy()
        age = np.where(here.born == 0, 3 + at, (survey - here.born) // 5 + 1)
        here["rot"] = np.minimum(age + here.slow * (here.born == 0), 5)
        gone = (here.born == 0) & (here.slow == 1) & (at == 2)  # the most rotten are found no more
        found.append(here[~gone].assign(survey=survey))
    table = pd.concat(found).sort_values(["survey", "plot"], kind="stable", ignore_index=True)
    return table.assign(stump=table.groupby(["survey", "plot"]).cumcount() + 1, cm=table.cm.round())


# --- litter, herbs, saplings -----------------------------------------------------------------------------------------


def _bag(fresh_g: np.ndarray, dry_of_fresh: np.ndarray, rng: np.random.Generator) -> pd.DataFrame:
    """Put a part of each sample in a bag: fresh and dry mass."""
    bag = np.round(np.minimum(fresh_g, rng.uniform(70.0, 110.0, len(fresh_g))), 1)
    return pd.DataFrame({"bag_fresh_g": bag, "bag_dry_g": np.round(bag * dry_of_fresh, 1)})


def take_frames(site: pd.DataFrame, survey: int, rng: np.random.Generator) -> pd.DataFrame:
    """Take litter and duff from two small frames on each plot."""
    grown = {"mixed": 1.06, "spruce": 1.015, "beech": 1.0, "alder": 1.0}  # in five years
    steps = SURVEYS.index(survey)
    frames = site.loc[site.index.repeat(2 * FRAMES)].reset_index(drop=True)
    place = frames.groupby("plot").cumcount()
    frames["frame"], frames["layer"] = place // 2 + 1, np.where(place % 2 == 0, "L", "FH")
    dry = np.where(frames.layer == "L", frames.leaf, frames.raw) * frames.mossy * frames.stand.map(grown) ** steps
    dry = dry * FRAME_M2 * np.exp(rng.normal(-0.04, 0.28, len(frames)))
    share = frames.layer.map(DRY_OF_FRESH) + rng.normal(0.0, 0.045, len(frames))
    fresh = np.round(dry / share)
    bags = _bag(fresh.to_numpy(), share.to_numpy(), rng)
    return frames[["plot", "frame", "layer"]].assign(survey=survey, fresh_g=fresh, **bags)


def clip_herbs(site: pd.DataFrame, survey: int, rng: np.random.Generator) -> pd.DataFrame:
    """Clip all plants without stems on one square metre of each plot."""
    light = np.where((site.parcel == STORM) & (survey == SURVEYS[2]), 2.5, 1.0)
    light = np.where((site.parcel == THINNED) & (survey > SURVEYS[0]), 1.6, light)
    fresh = np.round(site.herb * light * site.mossy * np.exp(rng.normal(-0.12, 0.5, len(site))))
    fresh = np.where(fresh < 12.0, 0.0, fresh)  # a few leaves are nothing to clip
    share = DRY_OF_FRESH["herb"] + rng.normal(0.0, 0.025, len(site))
    bags = _bag(fresh, share, rng)
    rows = site[["plot"]].reset_index(drop=True).assign(survey=survey, fresh_g=fresh)
    return rows.assign(**{name: bags[name].where(fresh > 0) for name in bags})  # nothing clipped, nothing in the bag


def _shares() -> pd.DataFrame:
    rows = [(cohort.stand, sp, share) for cohort in INGROWTH for sp, share in cohort.shares.items()]
    return pd.DataFrame(rows, columns=["stand", "sp", "part"])


def count_saplings(site: pd.DataFrame, clearing: pd.Series, rng: np.random.Generator) -> pd.DataFrame:
    """Count stems below the limit of the trees on a circle of each plot, by species and class, through the surveys."""
    area_ha = np.pi * SAPLING_RADIUS_M**2 / 1e4
    site = site.assign(young=np.where(clearing, 3.0, site.young))
    rows = site.merge(_shares(), on="stand").sort_values(["plot", "sp"], kind="stable", ignore_index=True)
    usual = {name: rows[name] * rows.part * area_ha * rows.young for name in ("small", "tall")}
    now = {name: rng.poisson(rate) for name, rate in usual.items()}
    found = []
    for survey in SURVEYS:
        if survey > SURVEYS[0]:
            opened = (rows.parcel == THINNED) | ((rows.parcel == STORM) & (survey == SURVEYS[2]))
            up = rng.binomial(now["small"], 0.20)
            now = {"small": rng.binomial(now["small"] - up, 0.75) + rng.poisson(usual["small"] * (0.4 + 0.5 * opened)),
                   "tall": rng.binomial(now["tall"], 0.46) + up}  # fmt: skip
        for name, cm in zip(("small", "tall"), SAPLING_CM, strict=True):
            found.append(rows[["plot", "sp"]].assign(survey=survey, cm=cm, n=now[name]))
    table = pd.concat(found, ignore_index=True)
    return table[table.n > 0].sort_values(["survey", "plot", "sp", "cm"], kind="stable", ignore_index=True)


# --- soil ------------------------------------------------------------------------------------------------------------


def take_cores(site: pd.DataFrame, survey: int, rng: np.random.Generator) -> pd.DataFrame:
    """Take two cores on each plot, in layers: bulk density, stones by volume, organic carbon."""
    per_core = len(LAYERS_CM)
    rows = site.loc[site.index.repeat(CORES * per_core)].reset_index(drop=True)
    place = rows.groupby("plot").cumcount()
    rows["core"], layer = place // per_core + 1, (place % per_core).to_numpy()
    rows["top"], rows["bottom"] = (np.array(LAYERS_CM)[layer, side] for side in (0, 1))
    deep = rows["plot"].map(lambda name: sum(map(ord, name)) % 3 == 0)
    rows["bottom"] = np.where(deep & (layer == per_core - 1), DEEP_CM, rows.bottom)
    mean = {name: np.array(rows[name].tolist())[np.arange(len(rows)), layer] for name in ("carbon", "dense")}
    per_year = 0.001  # hardly anything happens to soil in ten years
    change = 1.0 + per_year * (survey - SURVEYS[0])
    carbon = mean["carbon"] * rows.rich * change * np.exp(rng.normal(0.0, 0.10, len(rows)))
    dense = mean["dense"] * np.exp(rng.normal(0.0, 0.045, len(rows)))
    stones = np.round(np.minimum(rows.stone * (1.0 + 0.4 * layer) * rng.uniform(0.3, 1.7, len(rows)), 60.0))
    return rows[["plot", "core", "top", "bottom"]].assign(
        survey=survey, dense=np.round(dense, 2), stones=stones, carbon=np.round(carbon, 2)
    )
