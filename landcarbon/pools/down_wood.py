"""Down dead wood: pieces crossed by sampling lines, and logs measured on the area of a plot.

Line intersect sampling gives the volume of wood per hectare from nothing but the diameters at the crossings and the
length of the lines; all lines of a plot count together, and a line without wood counts with its length. Coarse pieces
are measured one by one; fine ones may be tallied by size class, each class with its own length of line, its quadratic
mean diameter and its density.
"""

from __future__ import annotations

from collections.abc import Mapping
from dataclasses import dataclass, field, replace
from functools import cached_property

import numpy as np
import pandas as pd
from numpy.typing import NDArray

from landcarbon.errors import UserError
from landcarbon.factors.dead_wood import collapse_known, collapse_left, rule
from landcarbon.findings import join_findings
from landcarbon.pools._lines import LINE_KEYS, LaidLines, check_lines, class_lengths
from landcarbon.pools._pieces import PLOT_KEYS, area_parts, check_hidden, check_large, filled, match_rows, weakest
from landcarbon.pools.parts import RowShares, empty_parts, make_parts
from landcarbon.pools.piece_volume import FORMULAS, line_volume, piece_volume, section_m2
from landcarbon.pools.wood import RowCheck, Wood, WoodOptions, default_class, encode, wood_of

__all__ = ["DownWoodOptions", "SizeClass", "down_wood", "down_wood_volume", "logs"]

FloatArray = NDArray[np.float64]
IntArray = NDArray[np.int64]
BoolArray = NDArray[np.bool_]

LINE_SLOPES = ("horizontal", "along the slope")
_COARSE, _FINE = "down_coarse", "down_fine"
_LOST = "the piece is left out and the dead wood of its plot is too low."


@dataclass(frozen=True)
class SizeClass:
    """One size class of wood on a line.

    Attributes
    ----------
    line_m : float
        Length of line on which the class was recorded [m]; NaN takes the line's own.
    mean_diameter_cm : float
        Quadratic mean diameter of the class [cm]; finite for tallied classes, NaN where each piece is measured.
    density_g_cm3 : float
        Density of the class; NaN takes species group and decay class.
    tilt_factor : float
        Mean of 1/cos of the angle from the horizontal.
    """

    line_m: float = np.nan
    mean_diameter_cm: float = np.nan
    density_g_cm3: float = np.nan
    tilt_factor: float = 1.0

    @property
    def tallied(self) -> bool:
        """Whether pieces are counted, not measured."""
        return bool(np.isfinite(self.mean_diameter_cm))


@dataclass(frozen=True)
class DownWoodOptions(WoodOptions):
    """How down wood was measured; see also :class:`~landcarbon.pools.wood.WoodOptions`.

    Attributes
    ----------
    classes : mapping
        Size classes by name. Tallied ones make the part down_fine, measured ones down_coarse.
    line_m : float
        Length of a line that states none [m].
    line_slope : {"horizontal", "along the slope"}
        How lengths were laid out.
    log_area_m2 : float
        Area on which logs were measured [m2].
    volume : str
        "auto" or a formula of :mod:`landcarbon.pools.piece_volume`.
    collapse : bool
        Take off the volume a flattened log has lost, by decay class, where no second axis and no sunk share says so.
    """

    classes: Mapping[str, SizeClass] = field(default_factory=dict)
    line_m: float = np.nan
    line_slope: str = "horizontal"
    log_area_m2: float = np.nan
    volume: str = "auto"
    collapse: bool = False

    def __post_init__(self) -> None:
        """Refuse words that mean nothing."""
        super().__post_init__()
        for name, words in {"line_slope": LINE_SLOPES, "volume": ("auto", *FORMULAS)}.items():
            if getattr(self, name) not in words:
                raise UserError(
                    f"{getattr(self, name)!r} is no choice of {name}",
                    where=f"[dead_wood] {name}",
                    remedy=f"Choose one of: {', '.join(words)}.",
                )


@dataclass(frozen=True)
class _Crossings:
    """Pieces on lines, checked: what each adds to the sum of squares, and where."""

    laid: LaidLines
    line: IntArray
    plot: IntArray
    size: IntArray
    used: BoolArray
    squares_cm2: FloatArray
    count: FloatArray
    wood: Wood
    names: list[str]
    tallied: BoolArray
    length_m: FloatArray
    findings: pd.DataFrame

    @cached_property
    def cell(self) -> IntArray:
        """Plot and size class, as one number, of each piece in use."""
        cell: IntArray = self.plot * self.length_m.shape[1] + self.size
        return cell if self.used.all() else cell[self.used]


def down_wood(
    pieces: pd.DataFrame,
    lines: pd.DataFrame,
    options: DownWoodOptions,
    species: pd.DataFrame,
    *,
    shares: RowShares | None = None,
) -> tuple[pd.DataFrame, pd.DataFrame]:
    """Carbon of down wood per plot from pieces crossed by lines.

    Parameters
    ----------
    pieces : DataFrame
        One row per piece measured or size class tallied: survey, plot, subplot, line, size_class, count, diameter_cm,
        diameter_2_cm, decay_class, wood, species, tilt_deg, hollow_cm, sunk_share, line_m.
    lines : DataFrame
        One row per line and visit, also those without wood: survey, plot, subplot, line, length_m, slope_deg.
    options : DownWoodOptions
        Classes, defaults and choices.
    species : DataFrame
        species, scientific_name, conifer, wood_density_g_cm3.
    shares : RowShares, optional
        Takes what each piece brings in.

    Returns
    -------
    parts : DataFrame
        Parts down_coarse and down_fine of every plot with a line.
    findings : DataFrame
        Faults of lines and pieces.

    Notes
    -----
    m = pi^2/8 x sum over classes of (sum of d^2 x density / L) in t/ha with d in cm, density in g/cm3 and L in m, the
    horizontal length of all lines of the plot together. A piece adds d1 x d2 less the square of its cavity, times the
    share not sunk, over the cosine of its angle; a tally adds count x squared mean diameter x tilt factor.

    References
    ----------
    Van Wagner 1968, Forest Science 14:20-26; Delcourt and Veraverbeke 2022, Biogeosciences 19, eq. 8 (mass).
    """
    crossings = _crossings(pieces, lines, options, species)
    mass = crossings.squares_cm2 * crossings.wood.density_g_cm3
    carbon = mass * crossings.wood.carbon_fraction
    if shares is not None and len(crossings.laid.plots):
        used = crossings.used
        length = crossings.length_m[crossings.plot[used], crossings.size[used]]
        shares.add("pieces", pieces.loc[used], line_volume(carbon[used], length))
    per_class = {
        "mass_t_ha": line_volume(_sums(crossings, mass), crossings.length_m),
        "density_t_c_ha": line_volume(_sums(crossings, carbon), crossings.length_m),
        "samples": _sums(crossings, crossings.count),
    }
    parts = []
    for part, wanted in ((_COARSE, ~crossings.tallied), (_FINE, crossings.tallied)):
        if wanted.any() and len(crossings.laid.plots):
            parts.append(_line_part(crossings, per_class, part, wanted))
    table = pd.concat(parts, ignore_index=True) if parts else empty_parts()
    return table, crossings.findings


def down_wood_volume(
    pieces: pd.DataFrame, lines: pd.DataFrame, options: DownWoodOptions, species: pd.DataFrame
) -> pd.DataFrame:
    """Volume of down wood per plot and size class from pieces crossed by lines.

    Parameters
    ----------
    pieces, lines, options, species
        As for :func:`down_wood`.

    Returns
    -------
    DataFrame
        survey, plot, size_class ("" for pieces measured one by one), line_m (horizontal, all lines together), pieces,
        volume_m3_ha.
    """
    crossings = _crossings(pieces, lines, options, species)
    shape = crossings.length_m.shape
    squares = _sums(crossings, crossings.squares_cm2)
    count = _sums(crossings, crossings.count)
    table = crossings.laid.plots.loc[np.repeat(np.arange(shape[0]), shape[1])].reset_index(drop=True)
    return table.assign(
        size_class=pd.Series(np.tile(np.array(crossings.names, dtype=object), shape[0]), dtype="str"),
        line_m=crossings.length_m.ravel(),
        pieces=count.ravel(),
        volume_m3_ha=line_volume(squares, crossings.length_m).ravel(),
    )


def _line_part(crossings: _Crossings, per_class: dict[str, FloatArray], part: str, wanted: BoolArray) -> pd.DataFrame:
    measured = crossings.laid.plots.assign(**{name: v[:, wanted].sum(axis=1) for name, v in per_class.items()})
    measured["samples"] = measured["samples"].round()
    method = "tallied pieces crossed by lines" if part == _FINE else "pieces crossed by lines"
    parts = make_parts(measured, pool="dead_wood", part=part, method=method)
    weak = crossings.used & wanted[crossings.size] & (crossings.wood.weakest > 0)
    return parts.assign(known=weakest(crossings.plot[weak], crossings.wood.weakest[weak], len(parts)))


def _sums(crossings: _Crossings, values: FloatArray) -> FloatArray:
    """Sum of values by plot and size class."""
    plots, classes = crossings.length_m.shape
    weights = values if crossings.used.all() else values[crossings.used]
    sums: FloatArray = np.bincount(crossings.cell, weights=weights, minlength=plots * classes).astype(float)
    return sums.reshape(plots, classes)


def _crossings(
    pieces: pd.DataFrame, lines: pd.DataFrame, options: DownWoodOptions, species: pd.DataFrame
) -> _Crossings:
    laid = check_lines(
        lines,
        default_m=options.line_m,
        along_slope=options.line_slope == "along the slope",
        longest_class_m=max((each.line_m for each in options.classes.values() if each.line_m > 0.0), default=0.0),
    )
    check = RowCheck("pieces", pieces)
    line = match_rows(pieces, lines, LINE_KEYS, prefer=laid.used)
    _check_place(check, line, laid)
    size, classes = _size_classes(pieces["size_class"], options)
    check.apply("size class unknown", size < 0)
    size = np.maximum(size, 0)
    columns = {name: np.array([getattr(c, name) for c in classes.values()]) for name in SizeClass.__annotations__}
    tallied = np.isfinite(columns["mean_diameter_cm"])
    counted = tallied[size]
    count = pieces["count"].to_numpy(dtype=float)
    count = np.where(np.isnan(count) & ~counted, 1.0, count)
    _check_counts(check, count)
    _check_diameters(check, pieces, counted, count)
    # Where nothing was found the class of decay does not matter.
    nothing = (count == 0.0) | (~counted & (pieces["diameter_cm"].to_numpy(dtype=float) == 0.0))
    given = np.where(nothing, 0.0, columns["density_g_cm3"][size])
    wood = wood_of(pieces, species, options, given_g_cm3=given)
    unstated = check.used & counted & wood.no_class
    for position in np.unique(size[unstated]):
        check.remark("size class without density", value=list(classes)[position], default=default_class(options))
    check.wood(replace(wood, no_class=wood.no_class & ~counted), default_class(options))
    net, wood = _net_square(pieces, wood, options)
    own_m = pieces["line_m"].to_numpy(dtype=float)
    if (np.isfinite(own_m) & (own_m != columns["line_m"][size])).any():
        _check_class_length(check, own_m, line * len(classes) + size)
    else:
        own_m = np.full(len(own_m), np.nan)  # nothing but what the classes say already
    squares = np.where(counted, columns["mean_diameter_cm"][size] ** 2, net)
    used = check.used
    class_m = {name: each.line_m for name, each in classes.items()}
    return _Crossings(
        laid=laid,
        line=line,
        plot=laid.plot[line] if len(lines) else line,
        size=size,
        used=used,
        squares_cm2=np.where(count == 0.0, 0.0, squares * columns["tilt_factor"][size] * count),
        count=count,
        wood=wood,
        names=list(classes),
        tallied=tallied,
        length_m=class_lengths(laid, class_m, line[used], size[used], own_m[used]),
        findings=join_findings([laid.findings, check.findings()]),
    )


def _size_classes(labels: pd.Series, options: DownWoodOptions) -> tuple[IntArray, dict[str, SizeClass]]:
    """Size class of each row, and the classes in force: those described, and pieces measured without a class."""
    codes, found = encode(labels)
    classes = dict(options.classes)
    if "" in found or not classes:
        classes = {"": classes.get("", SizeClass()), **{name: each for name, each in classes.items() if name}}
    names = list(classes)
    position = np.array([names.index(label) if label in names else -1 for label in found] or [-1], dtype=np.int64)
    return position[codes], classes


def _check_place(check: RowCheck, line: IntArray, laid: LaidLines) -> None:
    check.apply("line unknown", line < 0)
    on_line = laid.used[line] if len(laid.used) else np.zeros(len(line), dtype=bool)
    check.apply("line set aside", ~on_line)


def _check_counts(check: RowCheck, count: FloatArray) -> None:
    check.apply("count missing", np.isnan(count))
    check.apply("count impossible", ~(count >= 0.0) | ~np.isfinite(count))


def _check_diameters(check: RowCheck, pieces: pd.DataFrame, counted: BoolArray, count: FloatArray) -> None:
    alone = ~counted & (count > 0.0)
    first = pieces["diameter_cm"].to_numpy(dtype=float)
    second = pieces["diameter_2_cm"].to_numpy(dtype=float)
    tilt = filled(pieces["tilt_deg"])
    check.apply("piece without diameter", alone & ~(first >= 0.0))
    check.apply("piece of diameter zero", alone & (first == 0.0))
    check.apply("second diameter impossible", alone & (second <= 0.0))
    check_large(check, alone & (first > 0.0), first, "diameter_cm")
    check_hidden(check, alone & (first > 0.0), pieces, np.where(np.isnan(second), first, np.sqrt(first * second)))
    check.apply("tilt impossible", alone & ((tilt < 0.0) | (tilt >= 90.0)))
    check.apply("piece leaning like a standing tree", alone & (tilt > rule("leaning_deg")))


def _check_class_length(check: RowCheck, own_m: FloatArray, cell: IntArray) -> None:
    check.apply("length of line for class impossible", own_m <= 0.0)
    stated = check.used & np.isfinite(own_m)
    if stated.any():
        first = pd.Series(own_m[stated]).groupby(cell[stated]).transform("first").to_numpy()
        differ = np.zeros(len(own_m), dtype=bool)
        differ[stated] = own_m[stated] != first
        check.apply("lengths of line for class differ", differ)


def _net_square(pieces: pd.DataFrame, wood: Wood, options: DownWoodOptions) -> tuple[FloatArray, Wood]:
    """Squared diameter that counts: ellipse less cavity, less what is sunk, over the cosine of the angle [cm2]."""
    first = pieces["diameter_cm"].to_numpy(dtype=float)
    second = pieces["diameter_2_cm"].to_numpy(dtype=float)
    hollow = filled(pieces["hollow_cm"])
    sunk = filled(pieces["sunk_share"])
    tilt = filled(pieces["tilt_deg"])
    square = first * np.where(np.isnan(second), first, second) - hollow**2
    net = square * (1.0 - sunk)
    if tilt.any():
        net = net / np.cos(np.radians(tilt))
    left, wood = _collapse(wood, np.isnan(second) & (sunk == 0.0), options)
    return net * left, wood


def _collapse(wood: Wood, round_section: BoolArray, options: DownWoodOptions) -> tuple[FloatArray, Wood]:
    """Share of volume left in flattened logs, and the wood marked by how that share is known."""
    if not options.collapse or options.class_density:
        return np.ones(len(wood.decay)), wood
    left = np.where(round_section, np.append(collapse_left(), 1.0)[wood.decay], 1.0)
    return left, replace(wood, weakest=np.where(left < 1.0, np.maximum(wood.weakest, collapse_known()), wood.weakest))


def logs(
    logs: pd.DataFrame,
    visited: pd.DataFrame,
    options: DownWoodOptions,
    species: pd.DataFrame,
    *,
    on_lines: pd.DataFrame | None = None,
    shares: RowShares | None = None,
) -> tuple[pd.DataFrame, pd.DataFrame]:
    """Carbon of logs measured on the area of each plot.

    Parameters
    ----------
    logs : DataFrame
        One row per log: survey, plot, length_m, large_cm, middle_cm, small_cm, decay_class, wood, species, hollow_cm,
        sunk_share. The length is that inside the plot.
    visited : DataFrame
        survey, plot of every plot where logs were looked for.
    options : DownWoodOptions
        Area, formula and defaults.
    species : DataFrame
        species, scientific_name, conifer, wood_density_g_cm3.
    on_lines : DataFrame, optional
        survey, plot where coarse wood was measured on lines; logs there are set aside, so that no wood counts twice.
    shares : RowShares, optional
        Takes what each log brings in.

    Returns
    -------
    parts : DataFrame
        Part down_coarse of every visited plot.
    findings : DataFrame
        Faults of the logs.
    """
    check = RowCheck("logs", logs)
    length = logs["length_m"].to_numpy(dtype=float)
    ends = [logs[name].to_numpy(dtype=float) for name in ("large_cm", "middle_cm", "small_cm")]
    if on_lines is not None:
        visited = visited[match_rows(visited, on_lines, PLOT_KEYS) < 0]
        check.apply("coarse wood measured twice", match_rows(logs, on_lines, PLOT_KEYS) >= 0)
    check.apply("log without length", ~(length > 0.0) | ~np.isfinite(length))
    check.apply("log very long", length > rule("long_log_m"))
    volume = _log_volume(check, length, ends, options)
    wood = wood_of(logs, species, options)
    check.wood(wood, default_class(options))
    thickest = np.fmax(np.fmax(ends[0], ends[1]), ends[2])
    check_hidden(check, np.isfinite(thickest), logs, thickest)
    hollow = filled(logs["hollow_cm"])
    sunk = filled(logs["sunk_share"])
    net = (volume["volume_m3"].to_numpy() - length * section_m2(hollow)) * (1.0 - sunk)
    left, wood = _collapse(wood, sunk == 0.0, options)
    net = net * left
    check.apply("cavity larger than log", net < 0.0)
    formulas = sorted({name for name in volume["formula"][check.used] if name})
    method = f"logs on the plot, volume by {', '.join(formulas)}" if formulas else "logs on the plot"
    return area_parts(
        check, net, wood, visited, area_m2=options.log_area_m2, part=_COARSE, method=method, shares=shares
    )


def _log_volume(check: RowCheck, length: FloatArray, ends: list[FloatArray], options: DownWoodOptions) -> pd.DataFrame:
    large, middle, small = ends
    volume = piece_volume(length, large, middle, small, formula=options.volume)
    negative = (large < 0.0) | (middle < 0.0) | (small < 0.0)
    check.apply(
        "log without volume", negative | volume["volume_m3"].isna().to_numpy() | ~(volume["volume_m3"].to_numpy() > 0.0)
    )
    check.apply("volume formula replaced", volume["replaced"].to_numpy())
    check.apply("ends of log swapped", small > large)
    for name, diameter in zip(("large_cm", "middle_cm", "small_cm"), ends, strict=True):
        check_large(check, np.isfinite(diameter), diameter, name)
    return volume
