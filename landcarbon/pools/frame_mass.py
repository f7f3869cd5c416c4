"""From the rows of a frame table to dry mass and carbon: which measurement counts, and what sets a row aside."""

from __future__ import annotations

from collections.abc import Iterator, Mapping
from dataclasses import dataclass
from typing import TYPE_CHECKING, NamedTuple

import numpy as np
import pandas as pd

from landcarbon.constants import KG_PER_T
from landcarbon.pools.defaults import default_fraction, floor_density, largest_density, largest_fraction

if TYPE_CHECKING:
    from landcarbon.pools.frames import FrameOptions

__all__ = [
    "DRY",
    "FRACTION_KINDS",
    "FRAME_PARTS",
    "MASS_KINDS",
    "ORGANIC",
    "Fault",
    "FrameKeys",
    "FrameRows",
    "frame_keys",
    "frame_rows",
    "row_faults",
]

#: Pool and parts of each table; the last part takes the layers named as duff.
FRAME_PARTS: dict[str, tuple[str, tuple[str, ...]]] = {
    "litter": ("litter", ("litter", "duff")),
    "ground_vegetation": ("above_ground", ("ground_vegetation",)),
}

DRY, ORGANIC = "dry matter", "organic matter"

#: How the dry mass of a row was obtained; position 0 is "not at all".
MASS_KINDS = (
    "",
    "weighed dry",
    "fresh mass x dry share of the sub-sample",
    "fresh mass x stated dry share",
    "depth x bulk density",
)
WEIGHED, SUBSAMPLE, SHARE, DEPTH = range(1, 5)

#: Where the carbon fraction of a row comes from.
FRACTION_KINDS = (
    "carbon fraction of the sample",
    "stated carbon fraction",
    "default carbon fraction of dry matter",
    "default carbon fraction of organic matter",
)
OWN, STATED, DEFAULT, DEFAULT_ORGANIC = range(4)

G_PER_KG = KG_PER_T  # the same step of a thousand
_DENSE = 4  # cells of a table of pairs per row, up to which it is used

KG_M2_PER_G_CM2 = 10.0  # 1 g/cm3 over 1 cm is 1 g/cm2, by definition 10 kg/m2

_NUMBERS = (
    "frame_area_m2",
    "fresh_kg",
    "sub_fresh_g",
    "sub_dry_g",
    "dry_kg",
    "depth_cm",
    "bulk_density_g_cm3",
    "ash_share",
    "carbon_fraction",
)


class Fault(NamedTuple):
    """One thing that sets a row aside."""

    rule: str
    rows: np.ndarray
    column: str
    message: str
    remedy: str


@dataclass(frozen=True)
class FrameKeys:
    """Whole numbers for the plots, frames and layers of a frame table.

    Attributes
    ----------
    visit : ndarray of int
        Plot and survey of each row; ``first_row`` of it tells which.
    first_row : ndarray of int
        Position of the first row of each visit.
    frame : ndarray of int
        Frame of each row.
    repeated : ndarray of bool
        Whether the frame, named, has an earlier row of the same layer.
    layer : ndarray of int
        Layer of each row.
    layer_names : list of str
        Name of each layer, in lower case.
    """

    visit: np.ndarray
    first_row: np.ndarray
    frame: np.ndarray
    repeated: np.ndarray
    layer: np.ndarray
    layer_names: list[str]


@dataclass(frozen=True)
class FrameRows:
    """What each row of a frame table holds, after choosing between its measurements.

    Attributes
    ----------
    given : dict of str to ndarray
        The numbers as measured, by canonical column; NaN where missing.
    part : ndarray of int
        Position of the part in ``FRAME_PARTS``.
    kind : ndarray of int
        Position in ``MASS_KINDS``.
    area_m2 : ndarray
        Area of the frame [m2].
    dry_kg_m2 : ndarray
        Dry mass over the area of the frame [kg/m2]; NaN where nothing gives it.
    fraction : ndarray
        Carbon fraction of the mass that counts [g/g].
    share : ndarray
        Share of the dry mass that counts: 1, or 1 - ash.
    fraction_kind : ndarray of int
        Position in ``FRACTION_KINDS``.
    """

    given: dict[str, np.ndarray]
    part: np.ndarray
    kind: np.ndarray
    area_m2: np.ndarray
    dry_kg_m2: np.ndarray
    fraction: np.ndarray
    share: np.ndarray
    fraction_kind: np.ndarray


def frame_keys(samples: pd.DataFrame) -> FrameKeys:
    """Give numbers to the plots, frames and layers of a frame table.

    Notes
    -----
    A frame is one (survey, plot, subplot, frame). If one layer has several rows in it, as where frames carry no name,
    the n-th row of each layer makes the n-th frame, so that mass and area of every row count once.
    """
    survey, plot = _codes(samples, "survey"), _codes(samples, "plot")
    visit, first_row = _compressed(survey, plot)
    frame = visit
    for column in ("subplot", "frame"):
        inner = _codes(samples, column)
        frame = frame if (inner == inner[:1]).all() else _compressed(frame, inner)[0]
    layer, names = _layers(samples)
    cell, first_of_cell = _compressed(frame, layer)
    repeat = np.zeros(len(samples), dtype=np.int64)
    if len(first_of_cell) < len(samples):
        order = np.argsort(cell, kind="stable")
        size = np.bincount(cell)
        start = np.cumsum(size) - size
        repeat[order] = np.arange(len(samples)) - np.repeat(start, size)
        frame, _ = _compressed(frame, repeat)
    again = repeat > 0
    named = again & ~_is_blank(samples, "frame") if again.any() else again
    return FrameKeys(visit, first_row, frame, named, layer, names)


def frame_rows(samples: pd.DataFrame, keys: FrameKeys, options: FrameOptions, table: str) -> FrameRows:
    """Choose mass, area and carbon fraction of every row.

    Parameters
    ----------
    samples : DataFrame
        Canonical table ``litter`` or ``ground_vegetation``.
    keys : FrameKeys
        From :func:`frame_keys`.
    options : FrameOptions
        Checked options.
    table : {"litter", "ground_vegetation"}
        Which of the two.

    Notes
    -----
    Mass, first that applies: dry_kg; fresh_kg x sub_dry_g / sub_fresh_g; fresh_kg x dry_share; depth_cm x bulk density
    (of the row, of its layer, of the type of forest floor). Fraction, first that applies: of the row; of its layer;
    carbon_fraction of the settings; default of its part. Area: of the row, then of the settings; a depth without
    either takes the area of its frame, or the same weight as every other where no row of the table has an area.
    """
    given = {name: _numbers(samples, name) for name in _NUMBERS}
    parts = FRAME_PARTS[table][1]
    duff = {name.strip().casefold() for name in options.duff}
    part_of_layer = np.array([len(parts) - 1 if name in duff else 0 for name in keys.layer_names], dtype=np.int64)
    density = _density(given["bulk_density_g_cm3"], keys, [parts[at] for at in part_of_layer], options)
    kind, amount = _amount(given, density, options)
    area = _area(given["frame_area_m2"], kind, keys, options)
    with np.errstate(divide="ignore", invalid="ignore"):
        dry = np.where(kind == DEPTH, amount, amount / area)
    part = part_of_layer[keys.layer]
    fraction, share, fraction_kind = _fraction(given, part, keys, options, table)
    return FrameRows(given, part, kind, area, dry, fraction, share, fraction_kind)


def row_faults(rows: FrameRows) -> Iterator[Fault]:
    """Yield what sets rows aside, the plainest fault first; a row has the first that fits."""
    given = rows.given
    for name in _NUMBERS:
        yield Fault(
            "negative value",
            given[name] < 0,
            name,
            "A negative value; the row is left out.",
            "Correct it; leave the cell blank if it was not measured.",
        )
    yield Fault(
        "ash share impossible",
        given["ash_share"] > 1,
        "ash_share",
        "The ash is more than the whole dry mass; the row is left out.",
        'Give the ash as a share of the dry mass between 0 and 1, or state "%" as its unit.',
    )
    yield Fault(
        "carbon fraction impossible",
        given["carbon_fraction"] > largest_fraction(),
        "carbon_fraction",
        f"More carbon than {largest_fraction():g} of the dry mass, which no litter holds; the row is left out.",
        'Give grams per gram, or state "%" as the unit.',
    )
    yield Fault(
        "dry above fresh",
        given["dry_kg"] > given["fresh_kg"],
        "dry_kg",
        "The sample weighs more dry than fresh; the row is left out, as either mass may be the wrong one.",
        "Look for swapped columns, a unit slip or the weight of the bag.",
    )
    yield Fault(
        "sub-sample dry above fresh",
        given["sub_dry_g"] > given["sub_fresh_g"],
        "sub_dry_g",
        "The sub-sample weighs more dry than fresh; the row is left out.",
        "Look for swapped columns, a unit slip or the weight of the bag.",
    )
    yield Fault(
        "sub-sample dry mass zero",
        (rows.kind == SUBSAMPLE) & (given["sub_dry_g"] == 0),
        "sub_dry_g",
        "A sub-sample with no dry mass would make the whole sample nothing; the row is left out.",
        "Enter the dry mass of the sub-sample, or leave it blank to use the stated dry share.",
    )
    yield from _depth_faults(rows)
    yield from _area_faults(rows)


def _depth_faults(rows: FrameRows) -> Iterator[Fault]:
    density = rows.given["bulk_density_g_cm3"]
    by_depth = rows.kind == DEPTH
    yield Fault(
        "bulk density impossible",
        by_depth & (density > largest_density()),
        "bulk_density_g_cm3",
        f"A bulk density above {largest_density():g} g/cm3, which no forest floor has; the row is left out.",
        'Give g/cm3, or state the unit (for example "kg/m3").',
    )
    yield Fault(
        "bulk density zero",
        by_depth & (density == 0) & (rows.given["depth_cm"] > 0),
        "bulk_density_g_cm3",
        "A layer of some depth cannot have a bulk density of zero; the row is left out.",
        "Enter the bulk density, or leave it blank to use that of the settings.",
    )
    yield Fault(
        "mass missing",
        rows.kind == 0,
        "dry_kg",
        "Nothing gives the dry mass of this row (no dry mass, no fresh mass with a dry share, no depth with a bulk "
        "density); the row is left out.",
        "Enter a mass; 0 says that nothing lay in the frame. Fresh masses need dry_share, depths a bulk density.",
    )


def _area_faults(rows: FrameRows) -> Iterator[Fault]:
    yield Fault(
        "frame area missing",
        np.isnan(rows.area_m2),
        "frame_area_m2",
        "The area of the frame is not known; the row is left out.",
        "Map the column frame_area, or set frame_area_m2.",
    )
    yield Fault(
        "frame area zero",
        rows.area_m2 == 0,
        "frame_area_m2",
        "The area of the frame is zero; the row is left out.",
        "Enter the area of the frame in square metres.",
    )


def _numbers(samples: pd.DataFrame, column: str) -> np.ndarray:
    if column not in samples:
        return np.full(len(samples), np.nan)
    values = samples[column].to_numpy(dtype=float)
    return np.where(np.isinf(values), np.nan, values)


def _codes(samples: pd.DataFrame, column: str) -> np.ndarray:
    if column not in samples:
        return np.zeros(len(samples), dtype=np.int64)
    values = samples[column]
    if isinstance(values.dtype, pd.CategoricalDtype):
        return values.cat.codes.to_numpy().astype(np.int64) + 1
    return pd.factorize(values)[0].astype(np.int64) + 1


def _compressed(outer: np.ndarray, inner: np.ndarray) -> tuple[np.ndarray, np.ndarray]:
    """Give numbers from 0 to the distinct pairs, with the position of the first of each."""
    if not len(outer):
        return np.zeros(0, dtype=np.int64), np.zeros(0, dtype=np.int64)
    pair = outer * (int(inner.max()) + 1) + inner
    span = int(pair.max()) + 1
    if span <= _DENSE * len(pair):  # a table of all possible pairs is quicker than hashing them
        occurs = np.zeros(span, dtype=np.int64)
        occurs[pair] = 1
        codes = (np.cumsum(occurs) - 1)[pair]
    else:
        codes = pd.factorize(pair)[0].astype(np.int64)
    first = np.empty(int(codes.max()) + 1, dtype=np.int64)
    first[codes[::-1]] = np.arange(len(codes) - 1, -1, -1)
    return codes, first


def _is_blank(samples: pd.DataFrame, column: str) -> np.ndarray:
    if column not in samples:
        return np.ones(len(samples), dtype=bool)
    return (samples[column].isna() | (samples[column] == "")).to_numpy(dtype=bool)


def _layers(samples: pd.DataFrame) -> tuple[np.ndarray, list[str]]:
    if "layer" not in samples:
        return np.zeros(len(samples), dtype=np.int64), [""]
    codes, spellings = pd.factorize(samples["layer"], use_na_sentinel=False)
    names = ["" if pd.isna(name) else str(name).strip().casefold() for name in spellings]
    distinct, position = np.unique(np.array(names, dtype=object), return_inverse=True)
    return position[codes].astype(np.int64), [str(name) for name in distinct]


def _density(measured: np.ndarray, keys: FrameKeys, parts: list[str], options: FrameOptions) -> np.ndarray:
    """Bulk density per row [g/cm3]: of the row, of its layer, of the type of forest floor."""
    by_layer = _by_layer(options.bulk_densities, keys.layer_names)
    floor = np.array([floor_density(options.forest_floor, part) for part in parts], dtype=float)
    stated = np.where(np.isnan(by_layer), floor, by_layer)
    return np.where(np.isnan(measured), stated[keys.layer], measured)


def _amount(given: dict[str, np.ndarray], density: np.ndarray, options: FrameOptions) -> tuple[np.ndarray, np.ndarray]:
    """Kind of mass per row, and the mass: in kg, by depth in kg/m2."""
    fresh, depth = given["fresh_kg"], given["depth_cm"]
    with np.errstate(divide="ignore", invalid="ignore"):
        ratio = np.where(given["sub_fresh_g"] > 0, given["sub_dry_g"] / given["sub_fresh_g"], np.nan)
    share = np.nan if options.dry_share is None else options.dry_share
    nothing = np.where(fresh == 0, 0.0, np.nan)
    by_depth = np.where(depth == 0, 0.0, depth * density * KG_M2_PER_G_CM2)
    amount, kind = by_depth, np.where(np.isnan(by_depth), 0, DEPTH)
    choices = ((SHARE, fresh * share), (SUBSAMPLE, fresh * ratio), (WEIGHED, nothing), (WEIGHED, given["dry_kg"]))
    for code, mass in choices:
        found = ~np.isnan(mass)
        amount, kind = np.where(found, mass, amount), np.where(found, code, kind)
    return kind, amount


def _area(measured: np.ndarray, kind: np.ndarray, keys: FrameKeys, options: FrameOptions) -> np.ndarray:
    if options.frame_area_m2 is not None:
        return np.where(np.isnan(measured), options.frame_area_m2, measured)
    lacking = np.isnan(measured) & (kind == DEPTH)
    if not lacking.any():
        return measured
    if np.isnan(measured).all():
        return np.where(lacking, 1.0, np.nan)
    of_frame = np.zeros(int(keys.frame.max()) + 1)
    np.maximum.at(of_frame, keys.frame, np.where(measured > 0, measured, 0.0))
    borrowed = np.where(of_frame > 0, of_frame, np.nan)[keys.frame]
    return np.where(lacking, borrowed, measured)


def _fraction(
    given: dict[str, np.ndarray], part: np.ndarray, keys: FrameKeys, options: FrameOptions, table: str
) -> tuple[np.ndarray, np.ndarray, np.ndarray]:
    """Carbon fraction, share of the dry mass it applies to, and where it comes from."""
    pool, parts = FRAME_PARTS[table]
    own, ash = given["carbon_fraction"], given["ash_share"]
    by_layer = _by_layer(options.carbon_fractions, keys.layer_names)
    if options.carbon_fraction is not None:
        by_layer = np.where(np.isnan(by_layer), options.carbon_fraction, by_layer)
    stated = by_layer[keys.layer]
    has_ash, has_own = ~np.isnan(ash), ~np.isnan(own)
    explicit = has_own | ~np.isnan(stated)
    if options.carbon_basis == ORGANIC:
        explicit &= has_ash  # without its ash the organic matter of the row is not known
        organic = explicit
    elif options.carbon_basis == DRY:
        organic = np.zeros(len(ash), dtype=bool)
    else:
        organic = explicit & ~has_own & has_ash
    usual = np.array([default_fraction(pool, name, DRY, options.carbon_set) for name in parts])[part]
    ash_free = default_fraction(pool, "any", ORGANIC)
    organic = organic | (~explicit & has_ash)
    fraction = np.where(explicit, np.where(has_own, own, stated), np.where(has_ash, ash_free, usual))
    kind = np.where(explicit, np.where(has_own, OWN, STATED), np.where(has_ash, DEFAULT_ORGANIC, DEFAULT))
    return fraction, np.where(organic, 1.0 - ash, 1.0), kind


def _by_layer(stated: Mapping[str, float], names: list[str]) -> np.ndarray:
    values = {name.strip().casefold(): value for name, value in stated.items()}
    return np.array([values.get(name, np.nan) for name in names], dtype=float)
