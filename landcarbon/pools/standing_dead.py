"""Standing dead trees: what is left of the mass the same tree would have alive.

The tree step works out the mass of a living tree of the same size. Here it is split into components, and each is
multiplied with the density ratio of the decay class and with the share of the component still there. Leaves are gone.
The split uses generic national ratios, whatever the equation of the tree, and says so.
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
import pandas as pd
from numpy.typing import NDArray

from allometry.catalogue import component_biomass, load_catalogue
from landcarbon.constants import BREAST_HEIGHT_M, KG_PER_T
from landcarbon.errors import UserError
from landcarbon.factors.dead_wood import decay_classes, density_ratios, rule, status_loss, structure_left
from landcarbon.pools.piece_volume import cone_frustum
from landcarbon.pools.wood import RowCheck, class_codes, encode, name_groups

__all__ = ["STANDING_METHODS", "StandingOptions", "dead_biomass"]

FloatArray = NDArray[np.float64]
IntArray = NDArray[np.int64]
BoolArray = NDArray[np.bool_]

STANDING_METHODS = ("decay class", "whole tree", "mangrove status")
_CM_PER_M = 100.0
_BOLE_ONLY = "3"  # mangrove status of a tree with nothing left but its bole


@dataclass(frozen=True)
class StandingOptions:
    """How standing dead trees are turned into dead wood.

    Attributes
    ----------
    standing : str
        "decay class": density ratio and structural loss by class, five classes. "whole tree": like a live tree.
        "mangrove status": leaves (1), leaves and small branches (2) or all but the bole (3) taken off. Empty:
        by decay class where any dead tree has one.
    roots : {"not counted", "dead_wood"}
        Whether roots of dead trees are worked out.
    missing_class : str
        Decay class of a dead tree without one; empty takes the default of ``dead_wood_rules.csv``, for the status
        classes of mangroves the first.
    """

    standing: str = ""
    roots: str = "not counted"
    missing_class: str = ""

    def __post_init__(self) -> None:
        """Refuse words that mean nothing."""
        for name, words in {"standing": ("", *STANDING_METHODS), "roots": ("not counted", "dead_wood")}.items():
            if getattr(self, name) not in words:
                raise UserError(
                    f"{getattr(self, name)!r} is no choice of {name}",
                    where=f"[dead_wood] {name}",
                    remedy=f"Choose one of: {', '.join(filter(None, words))}.",
                )


def dead_biomass(trees: pd.DataFrame, options: StandingOptions) -> tuple[pd.DataFrame, pd.DataFrame]:
    """Add the mass of dead wood above and below ground to each dead tree.

    Parameters
    ----------
    trees : DataFrame
        status, used, dbh_cm, height_m, decay_class, biomass_kg (above ground, of the live tree), conifer. Taken into
        account if there: scientific_name, component ("agb_woody": the mass has no leaves), break_height_m, top_cm,
        live_height_m, wood_density_g_cm3 (a stem broken at a known height).
    options : StandingOptions
        Method and choices.

    Returns
    -------
    trees : DataFrame
        With dead_wood_kg (above ground; 0 for trees that are not dead), dead_root_kg (NaN if not counted), dead_how
        (category: how the mass was obtained) and ``used`` updated.
    findings : DataFrame
        Faults of the dead trees.

    Notes
    -----
    mass = sum over bole, bark, top and branches of (live mass x density ratio of the class x share left); coarse roots
    likewise. Density ratios and shares are those of standing trees, which belong together. Live components follow the
    generic ratios of Jenkins et al. 2003; branches include the stump, which those ratios do not set apart. A class-4
    ratio above that of class 3, or one above 1, stands as printed.

    A stem broken at a known height: its bole with bark is a cone frustum from the ground to the break, with the
    diameter there measured or, with the height of the whole tree H, d (H - h)/(H - 1.3); no branches. Without break
    height the structural shares alone stand for the lost top.

    References
    ----------
    Domke, Woodall and Smith 2011, Carbon Balance and Management 6:14; Jenkins et al. 2003, Forest Science 49:12-35.
    """
    dead = _where(trees["status"], "dead") & trees["used"].to_numpy(dtype=bool)
    rows = trees.loc[dead]
    check = RowCheck("trees", rows)
    how = options.standing or ("whole tree" if _where(rows["decay_class"], "").all() else "decay class")
    steps = {"decay class": _by_class, "whole tree": _whole, "mangrove status": _by_status}
    above, roots, label = steps[how](rows, check, options)
    counted = options.roots == "dead_wood"
    wood_kg = np.where(dead, np.nan, 0.0)
    root_kg = np.where(dead, np.nan, 0.0) if counted else np.full(len(trees), np.nan)
    wood_kg[dead] = above
    if counted:
        root_kg[dead] = roots
    labels = np.full(len(trees), "", dtype=object)
    labels[dead] = label
    used = trees["used"].to_numpy(dtype=bool).copy()
    used[dead] = check.used
    result = trees.assign(dead_wood_kg=wood_kg, dead_root_kg=root_kg, dead_how=pd.Categorical(labels), used=used)
    return result, check.findings()


def _where(values: pd.Series, label: str) -> BoolArray:
    """Whether each text is this one."""
    codes, labels = encode(values)
    return np.array([each == label for each in labels] or [False])[codes]


def _live_components(rows: pd.DataFrame) -> pd.DataFrame:
    """Components of the live trees by the generic ratios; foliage left out where the mass has none."""
    mass = rows["biomass_kg"].to_numpy(dtype=float)
    dbh = rows["dbh_cm"].to_numpy(dtype=float)
    conifer = rows["conifer"].to_numpy(dtype=bool)
    catalogue = load_catalogue()
    tables = []
    for wood, mine in (("hardwood", ~conifer), ("softwood", conifer)):
        # The ratios leave sense below their smallest tree.
        smallest = catalogue.row(f"jenkins2003_ratio_{'hw' if wood == 'hardwood' else 'sw'}_foliage").dbh_min_cm
        table = component_biomass(mass[mine], np.fmax(dbh[mine], smallest), wood)
        tables.append(table.set_index(np.flatnonzero(mine)))
    parts = pd.concat(tables).sort_index()
    if "component" in rows:
        woody = _where(rows["component"], "agb_woody")
        scale = np.where(woody, mass / (mass - parts["foliage_kg"].to_numpy()), 1.0)
        shoot = ["stem_wood_kg", "stem_bark_kg", "branches_kg"]
        parts[shoot] = parts[shoot].mul(scale, axis=0)
        parts.loc[woody, "foliage_kg"] = 0.0
    return parts


def _by_class(
    rows: pd.DataFrame, check: RowCheck, options: StandingOptions
) -> tuple[FloatArray, FloatArray, NDArray[np.object_]]:
    """Mass by decay class: density ratio x share left of each component."""
    labels = decay_classes()
    default = options.missing_class or str(int(rule("missing_decay_class")))
    code, blank = class_codes(rows["decay_class"], labels, default)
    check.apply("decay class of tree unknown", code < 0)
    check.no_class("dead tree without decay class", blank, default)
    _check_height(rows, check)
    names = rows["scientific_name"] if "scientific_name" in rows else rows["species"]
    ratio = _ratio(names, rows["conifer"].to_numpy(dtype=bool), code)
    left = {name: _by_code(structure_left("standing", name), code) for name in ("top_and_branches", "bark", "bole")}
    live = _live_components(rows)
    bole = live["stem_wood_kg"].to_numpy() * left["bole"] + live["stem_bark_kg"].to_numpy() * left["bark"]
    above = ratio * (bole + live["branches_kg"].to_numpy() * left["top_and_branches"])
    roots = live["coarse_root_kg"].to_numpy() * ratio * _by_code(structure_left("standing", "roots"), code)
    broken = _broken_bole(rows, check)
    known = np.isfinite(broken)
    how = np.where(known, "bole to the break, decay class", "generic components, decay class").astype(object)
    return np.where(known, broken * ratio, above), roots, how


def _ratio(names: pd.Series, conifer: BoolArray, code: IntArray) -> FloatArray:
    """Density ratio of each tree; the look-up runs over distinct names."""
    codes, labels = encode(names)
    both = pd.Series([*labels, *labels], dtype="str")
    accepted, kinds = name_groups(both, np.repeat([False, True], len(labels)))
    ratios, _ = density_ratios("standing", accepted, kinds)
    table = np.column_stack([ratios, np.full(len(ratios), np.nan)])
    result: FloatArray = table[codes + conifer * len(labels), code]
    return result


def _by_code(values: FloatArray, code: IntArray) -> FloatArray:
    return np.append(values, np.nan)[code]


def _check_height(rows: pd.DataFrame, check: RowCheck) -> None:
    height = rows["height_m"].to_numpy(dtype=float)
    if "height_source" in rows:
        height = np.where(_where(rows["height_source"], "measured"), height, np.nan)
    slenderness = height / rows["dbh_cm"].to_numpy(dtype=float) * _CM_PER_M
    check.apply("height of a broken stem", slenderness < rule("broken_slenderness"))


def _broken_bole(rows: pd.DataFrame, check: RowCheck) -> FloatArray:
    """Mass of sound wood in the bole up to a break of known height [kg]; NaN where there is none."""
    column = {name: _column(rows, name) for name in ("break_height_m", "top_cm", "live_height_m", "wood_density_g_cm3")}
    height, dbh = column["break_height_m"], rows["dbh_cm"].to_numpy(dtype=float)
    whole = column["live_height_m"]
    above = np.where(whole > height, (whole - height) / (whole - BREAST_HEIGHT_M), np.nan)
    top = np.where(np.isfinite(column["top_cm"]), column["top_cm"], dbh * np.minimum(above, 1.0))
    # Below breast height the stem is taken for a cylinder: its taper there is not known.
    slope = np.where(height > BREAST_HEIGHT_M, (dbh - top) / np.maximum(height - BREAST_HEIGHT_M, 1e-9), 0.0)
    base = dbh + slope * BREAST_HEIGHT_M
    mass = cone_frustum(height, base, top) * column["wood_density_g_cm3"] * KG_PER_T
    sound = (height > 0.0) & (top >= 0.0) & (top <= dbh) & np.isfinite(mass)
    check.apply("break cannot be used", np.isfinite(height) & ~sound)
    return np.where(sound, mass, np.nan)


def _column(rows: pd.DataFrame, name: str) -> FloatArray:
    return rows[name].to_numpy(dtype=float) if name in rows else np.full(len(rows), np.nan)


def _whole(
    rows: pd.DataFrame, check: RowCheck, options: StandingOptions
) -> tuple[FloatArray, FloatArray, NDArray[np.object_]]:
    """Mass like that of a live tree."""
    if len(rows):
        check.remark("whole dead trees")
    roots = _live_components(rows)["coarse_root_kg"].to_numpy()
    return rows["biomass_kg"].to_numpy(dtype=float), roots, np.full(len(rows), "whole tree", dtype=object)


def _by_status(
    rows: pd.DataFrame, check: RowCheck, options: StandingOptions
) -> tuple[FloatArray, FloatArray, NDArray[np.object_]]:
    """Mass of dead mangroves by what is gone; no loss of density is known for these classes."""
    loss = status_loss()
    labels = [*loss, _BOLE_ONLY]
    default = options.missing_class or labels[0]
    code, blank = class_codes(rows["decay_class"], labels, default)
    check.apply("decay class of tree unknown", code < 0)
    check.no_class("dead tree without decay class", blank, default)
    live = _live_components(rows)
    bole = (live["stem_wood_kg"] + live["stem_bark_kg"]).to_numpy()
    shares = np.array([*(1.0 - value for value in loss.values()), np.nan, np.nan])[code]
    above = np.where(code == labels.index(_BOLE_ONLY), bole, rows["biomass_kg"].to_numpy(dtype=float) * shares)
    how = np.where(code == labels.index(_BOLE_ONLY), "generic bole, status", "share of live tree, status")
    return above, live["coarse_root_kg"].to_numpy(), how.astype(object)
