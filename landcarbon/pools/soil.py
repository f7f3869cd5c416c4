"""Soil organic carbon of plots: to a fixed depth, or in a fixed mass of fine soil.

A core's layers are summed to the reference, cores of a plot are averaged by the number of cores mixed in each, and the
plot is the sampling unit from there on. The reference is one for all surveys, else change would compare unlike soil.
"""

from __future__ import annotations

from dataclasses import dataclass
from typing import Any

import numpy as np
import pandas as pd

from landcarbon.findings import join_findings
from landcarbon.pools.parts import RowShares, empty_parts, make_parts
from landcarbon.pools.soil_factors import (
    SoilOptions,
    SoilWindow,
    check_options,
    limit,
    limit_known,
    pedotransfer_known,
    soil_finding,
)
from landcarbon.pools.soil_layers import BY_FUNCTION, FROM_ORGANIC_MATTER, ROCK_DENSITY, Layers, make_layers
from landcarbon.pools.soil_mass import LINE, MONOTONE, SPLINE, carbon_at_mass

__all__ = ["SoilOptions", "SoilWindow", "profile_masses", "smallest_profile_mass", "soil"]

# What happened to a core; further bits of the flags of soil_layers and soil_mass.
_EXTENDED = 8
_SHORT = 16

_WORDS = {
    SPLINE: "cubic spline",
    MONOTONE: "monotone cubic",
    LINE: "straight lines",
    _EXTENDED: "last layer carried down",
    _SHORT: "core as deep as measured",
    FROM_ORGANIC_MATTER: "carbon from organic matter / {factor:g}",
    BY_FUNCTION: "bulk density by {function}",
    ROCK_DENSITY: "coarse share turned with rock of {rock:g} g/cm3",
}
_KNOWN = ("read", "secondary", "memory")


@dataclass(frozen=True)
class _Profiles:
    """Outcome per core; ``layer_carbon`` is that of each layer down to a reference depth [t C/ha]."""

    carbon_t_ha: np.ndarray
    mass_t_ha: np.ndarray
    used: np.ndarray
    flags: np.ndarray
    layer_carbon: np.ndarray


def soil(
    samples: pd.DataFrame, options: SoilOptions, *, shares: RowShares | None = None
) -> tuple[pd.DataFrame, pd.DataFrame]:
    """Carbon density of the soil of every plot and survey that has a sound core.

    Parameters
    ----------
    samples : DataFrame
        Canonical soil table, one row per layer of a core: survey, plot, subplot, core, top_cm, bottom_cm [cm],
        bulk_density_g_cm3 [g/cm3], coarse_share, organic_carbon_share, organic_matter_share, total_carbon_share,
        inorganic_carbon_share [g/g], cores (number of cores mixed), used.
    options : SoilOptions
        What the numbers mean, and the reference depth or mass.
    shares : RowShares, optional
        Takes what each layer brings in; with a reference mass no layer has a share of its own, as the carbon is read
        off a curve through all of them.

    Returns
    -------
    parts : DataFrame
        ``PART_COLUMNS``; density_t_c_ha [t C/ha] and mass_t_ha [t fine soil/ha] down to the reference. A plot whose
        cores are all set aside has no row: it is not measured, not zero.
    findings : DataFrame
        One per row set aside or doubted.

    Raises
    ------
    SettingsError
        If the kind of bulk density or coarse share, the factor of organic matter or the reference is needed but not
        stated.

    Notes
    -----
    A layer of thickness D [cm] with fine soil F [g per cm3 of whole volume] and organic carbon share C [g/g] of the
    fine soil holds 100 C F D [t C/ha].

    References
    ----------
    Poeplau, Vos and Don (2017) SOIL 3:61-66; Wendt and Hauser (2013) European Journal of Soil Science 64:58-65.
    """
    check_options(options)
    samples = samples.reset_index(drop=True)
    layers, findings = make_layers(samples, options)
    parts = [_told_factor(options), _told_reference(options), findings]
    if not len(layers.row):
        return empty_parts(), join_findings(parts)
    overlap, gap = _breaks(layers)
    if options.depth_cm is not None:
        profiles, more = _to_depth(samples, layers, options, overlap, gap)
    else:
        profiles, more = _to_mass(samples, layers, options, overlap, gap)
    rows, unequal, weight = _plot_rows(samples, layers, profiles, options)
    if shares is not None and len(profiles.layer_carbon):
        kept = profiles.used[layers.core]
        told = (profiles.layer_carbon * weight[layers.core])[kept]
        shares.add("soil", samples.iloc[layers.row[kept]], told)
    return rows, join_findings([*parts, more, unequal])


def profile_masses(samples: pd.DataFrame, options: SoilOptions) -> pd.DataFrame:
    """Mass of fine soil every core holds, to choose a reference mass by.

    Parameters
    ----------
    samples : DataFrame
        Canonical soil table.
    options : SoilOptions
        As for :func:`soil`; a reference is not needed.

    Returns
    -------
    DataFrame
        survey, plot, core, depth_cm (to which the core has layers without a gap), mass_t_ha; smallest first. Cores
        with overlapping layers or without a layer at the surface are left out.
    """
    check_options(options, reference=False)
    samples = samples.reset_index(drop=True)
    layers, _ = make_layers(samples, options)
    names = ["survey", "plot", "core", "depth_cm", "mass_t_ha"]
    if not len(layers.row):
        return pd.DataFrame({name: pd.Series(dtype="str" if name in names[:3] else "float64") for name in names})
    overlap, gap = _breaks(layers)
    joined = ~_from_first(gap, layers)
    starts = layers.starts
    mass = np.where(joined, layers.fine_t_ha_cm * (layers.bottom_cm - layers.top_cm), 0.0)
    depth = np.where(joined, layers.bottom_cm, 0.0)
    table = samples.iloc[layers.row[starts]].reindex(columns=names[:3], fill_value="").astype("str")
    table = table.assign(depth_cm=np.maximum.reduceat(depth, starts), mass_t_ha=np.add.reduceat(mass, starts))
    sound = joined[starts] & ~_any(overlap & joined, starts)
    return table.loc[sound].sort_values("mass_t_ha", kind="stable").reset_index(drop=True)


def smallest_profile_mass(samples: pd.DataFrame, options: SoilOptions) -> float:
    """Mass of fine soil [t/ha] that every sound core holds; NaN without one.

    A reference mass at or below it sets no core aside. One shallow core can make it very small: look at
    :func:`profile_masses` before giving up depth for it.
    """
    masses = profile_masses(samples, options)["mass_t_ha"]
    return float(masses.min()) if len(masses) else float("nan")


def _told_factor(options: SoilOptions) -> pd.DataFrame:
    factor = options.organic_matter_per_carbon
    if factor is None or limit("factor low") <= factor <= limit("factor high"):
        return join_findings([])
    return soil_finding("factor low" if factor < limit("factor low") else "factor high", factor=factor)


def _told_reference(options: SoilOptions) -> pd.DataFrame:
    """Doubt a reference that looks like another unit."""
    if options.depth_cm is not None:
        value, low, high = options.depth_cm, "reference shallow", "reference deep"
    else:
        value, low, high = float(options.mass_t_ha or 0.0), "reference light", "reference heavy"
    if limit(low) <= value <= limit(high):
        return join_findings([])
    return soil_finding(low if value < limit(low) else high, depth=value, mass=value)


def _breaks(layers: Layers) -> tuple[np.ndarray, np.ndarray]:
    """Layers that overlap the one above, and layers with soil missing above them."""
    tolerance = limit("depth tolerance")
    step = layers.top_cm - layers.above_cm
    return step < -tolerance, step > tolerance


def _any(mask: np.ndarray, starts: np.ndarray) -> np.ndarray:
    return np.logical_or.reduceat(mask, starts)


def _from_first(mask: np.ndarray, layers: Layers) -> np.ndarray:
    """Mark the first true entry of each core and all below it."""
    count = np.cumsum(mask)
    before = (count - mask)[layers.starts]
    return count > before[layers.core]


def _to_depth(
    samples: pd.DataFrame, layers: Layers, options: SoilOptions, overlap: np.ndarray, gap: np.ndarray
) -> tuple[_Profiles, pd.DataFrame]:
    """Sum each core to the reference depth; a layer that crosses it counts in proportion."""
    depth = float(options.depth_cm or 0.0)
    tolerance = limit("depth tolerance")
    starts = layers.starts
    last = np.append(starts[1:], len(layers.row)) - 1
    inside = layers.top_cm < depth - tolerance
    overlap = overlap & inside
    gap = gap & (layers.above_cm < depth - tolerance)
    overlapping, broken = _any(overlap, starts), _any(gap, starts)
    reach = np.maximum.reduceat(np.minimum(layers.bottom_cm, depth), starts)
    short = ~overlapping & ~broken & (reach < depth - tolerance)
    thickness = np.maximum(np.minimum(layers.bottom_cm, depth) - layers.top_cm, 0.0)
    flags = np.bitwise_or.reduceat(np.where(inside, layers.flags, 0), starts)
    used = ~overlapping & ~broken
    rule = {"extend": "core extended", "as measured": "core as measured"}.get(options.incomplete, "core stops short")
    if options.incomplete == "extend":
        thickness[last[short]] += depth - reach[short]
        flags = np.where(short, flags | _EXTENDED, flags)
    elif options.incomplete == "as measured":
        flags = np.where(short, flags | _SHORT, flags)
    else:
        used = used & ~short
    mass = layers.fine_t_ha_cm * thickness
    layer_carbon = mass * layers.carbon
    carbon = np.add.reduceat(layer_carbon, starts)
    at_end = np.zeros(len(layers.row), dtype=bool)
    at_end[last[short]] = True
    findings = [
        _core_findings(samples, layers, "layers overlap", overlap, overlapping),
        _core_findings(samples, layers, "gap in core", gap, broken & ~overlapping),
        _core_findings(samples, layers, rule, at_end, short & ~used, depth=depth),
        _tell_high(samples, layers, carbon, used, options),
    ]
    if not (short & ~used).any() and short.any():
        rows = samples.iloc[layers.row[at_end]]
        findings.append(soil_finding(rule, rows, value=_layer_text(samples, layers, at_end), depth=depth))
    below = int(np.count_nonzero(layers.top_cm >= depth - tolerance))
    if below:
        findings.append(soil_finding("below reference", count=below, depth=depth))
    profiles = _Profiles(carbon, np.add.reduceat(mass, starts), used, flags, layer_carbon)
    return profiles, join_findings(findings)


def _to_mass(
    samples: pd.DataFrame, layers: Layers, options: SoilOptions, overlap: np.ndarray, gap: np.ndarray
) -> tuple[_Profiles, pd.DataFrame]:
    """Read each core's carbon at the reference mass of fine soil."""
    reference = float(options.mass_t_ha or 0.0)
    starts = layers.starts
    joined = ~_from_first(gap, layers)
    overlap = overlap & joined
    overlapping = _any(overlap, starts)
    sound = joined & ~overlapping[layers.core]
    mass = np.where(sound, layers.fine_t_ha_cm * (layers.bottom_cm - layers.top_cm), 0.0)
    carbon, curve = carbon_at_mass(layers.core, mass, mass * layers.carbon, reference, len(starts))
    used = np.isfinite(carbon)
    lacking = ~used & ~overlapping
    broken = lacking & _any(gap, starts)
    at_end = np.zeros(len(layers.row), dtype=bool)
    at_end[np.append(starts[1:], len(layers.row)) - 1] = True
    findings = [
        _core_findings(samples, layers, "layers overlap", overlap, overlapping),
        _core_findings(samples, layers, "gap in core", gap, broken),
        _core_findings(samples, layers, "core too light", at_end, lacking & ~broken, mass=reference),
        _below_gap(samples, layers, ~joined & used[layers.core]),
    ]
    bent = int(np.count_nonzero(curve == MONOTONE))
    if bent:
        findings.append(soil_finding("not monotone", count=bent))
    flags = np.bitwise_or.reduceat(np.where(sound, layers.flags, 0), starts) | curve
    return _Profiles(carbon, np.full(len(starts), reference), used, flags, np.zeros(0)), join_findings(findings)


def _core_findings(
    samples: pd.DataFrame, layers: Layers, rule: str, culprit: np.ndarray, cores: np.ndarray, **words: Any
) -> pd.DataFrame:
    """Tell every row of cores set aside: the culprits by their rule, the rest as belonging to the core."""
    if not cores.any():
        return join_findings([])
    hit = cores[layers.core]
    found = []
    for name, mask in ((rule, hit & culprit), ("core set aside", hit & ~culprit)):
        if mask.any():
            text = _layer_text(samples, layers, mask)
            found.append(soil_finding(name, samples.iloc[layers.row[mask]], value=text, **words))
    return join_findings(found)


def _below_gap(samples: pd.DataFrame, layers: Layers, mask: np.ndarray) -> pd.DataFrame:
    if not mask.any():
        return join_findings([])
    rows = samples.iloc[layers.row[mask]]
    return soil_finding("layer below gap", rows, value=_layer_text(samples, layers, mask))


def _layer_text(samples: pd.DataFrame, layers: Layers, mask: np.ndarray) -> np.ndarray:
    """Core and depths of layers, for people."""
    rows = layers.row[mask]
    text = _written(layers.top_cm[mask]) + " to " + _written(layers.bottom_cm[mask]) + " cm"
    if "core" not in samples:
        return text
    core = samples["core"].iloc[rows].astype("str").to_numpy(dtype=object)
    return np.where(core == "", text, "core " + core + ", " + text)


def _written(depths: np.ndarray) -> np.ndarray:
    """Write depths as text; few differ, so each is formatted once."""
    codes, distinct = pd.factorize(depths)
    return np.array([f"{depth:g}" for depth in distinct], dtype=object)[codes]


def _tell_high(
    samples: pd.DataFrame, layers: Layers, carbon: np.ndarray, used: np.ndarray, options: SoilOptions
) -> pd.DataFrame:
    over_cm = limit("stock high depth")
    depth = float(options.depth_cm or 0.0)
    high = used & (carbon > limit("stock high") * depth / over_cm)
    if options.organic or depth < over_cm or not high.any():
        return join_findings([])
    rows = samples.iloc[layers.row[layers.starts[high]]]
    return soil_finding("stock high", rows, value=np.array([f"{value:.0f} t C/ha" for value in carbon[high]], object))


def _plot_rows(
    samples: pd.DataFrame, layers: Layers, profiles: _Profiles, options: SoilOptions
) -> tuple[pd.DataFrame, pd.DataFrame, np.ndarray]:
    """Average the sound cores of each plot, by the number of cores mixed in each; also the weight of every core."""
    starts = layers.starts
    weight = np.minimum.reduceat(layers.cores, starts)
    differ = profiles.used & (np.maximum.reduceat(layers.cores, starts) != weight)
    told = join_findings([])
    if differ.any():
        told = soil_finding("cores differ", samples.iloc[layers.row[starts[differ]]])
    plot = layers.plot[starts][profiles.used]
    if not len(plot):
        return empty_parts(), told, np.zeros(len(starts))
    number = len(layers.plots)
    weight = weight[profiles.used]
    total = np.bincount(plot, weights=weight, minlength=number)
    found = total > 0
    flags = np.zeros(number, dtype=np.int64)
    np.bitwise_or.at(flags, plot, profiles.flags[profiles.used])

    def mean(values: np.ndarray) -> np.ndarray:
        return np.bincount(plot, weights=weight * values[profiles.used], minlength=number)[found] / total[found]

    measured = layers.plots.loc[found].assign(
        density_t_c_ha=mean(profiles.carbon_t_ha),
        mass_t_ha=mean(profiles.mass_t_ha),
        samples=np.rint(total[found]).astype(np.int64),
    )
    rows = make_parts(measured, pool="soil", part="soil", method="")
    kinds, which = np.unique(flags[found], return_inverse=True)
    methods = np.array([_method(int(kind), options) for kind in kinds], dtype=object)
    known = np.array([_weakest(int(kind), options) for kind in kinds], dtype=object)
    rows = rows.assign(method=pd.Series(methods[which], dtype="str"), known=pd.Series(known[which], dtype="str"))
    in_plot = np.zeros(len(starts))
    in_plot[profiles.used] = weight / total[plot]
    return rows, told, in_plot


def _method(flags: int, options: SoilOptions) -> str:
    if options.depth_cm is not None:
        words = [f"fixed depth {options.depth_cm:g} cm"]
    else:
        words = [f"equivalent soil mass {options.mass_t_ha:g} t/ha"]
    if options.windows:
        words.append("sampled windows stand for layers")
    fields = {
        "factor": options.organic_matter_per_carbon or float("nan"),
        "function": options.pedotransfer,
        "rock": limit("rock density"),
    }
    words += [text.format(**fields) for flag, text in _WORDS.items() if flags & flag]
    return ", ".join(words)


def _weakest(flags: int, options: SoilOptions) -> str:
    known = ["read"]
    if flags & BY_FUNCTION:
        known.append(pedotransfer_known(options.pedotransfer))
    if flags & ROCK_DENSITY:
        known.append(limit_known("rock density"))
    return max(known, key=_KNOWN.index)
