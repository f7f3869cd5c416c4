"""From the rows of a soil table to sound layers in order: carbon share and mass of fine soil per centimetre.

What a bulk density stands for decides how stones enter; three kinds are clean and each has its own formula. Layers
that cannot be used are set aside here, each with a finding.
"""

from __future__ import annotations

from dataclasses import dataclass, field
from typing import Any

import numpy as np
import pandas as pd

from landcarbon.errors import SettingsError
from landcarbon.findings import join_findings
from landcarbon.pools.soil_factors import (
    FINE_PER_FINE,
    FINE_PER_WHOLE,
    WHOLE_PER_WHOLE,
    SoilOptions,
    SoilWindow,
    bulk_density_from_organic_matter,
    fine_soil_density,
    limit,
    organic_matter_factors,
    soil_finding,
)

__all__ = [
    "BY_FUNCTION",
    "FROM_ORGANIC_MATTER",
    "ROCK_DENSITY",
    "T_HA_PER_G_CM2",
    "Layers",
    "make_layers",
]

T_HA_PER_G_CM2 = 100.0  # 1 g/cm2 = 100 t/ha, exact
_ROUNDING = 1e-9  # g/cm3

# What went into a layer; joined by "or" over the layers of a core and the cores of a plot.
BY_FUNCTION = 1  # bulk density from a pedotransfer function
FROM_ORGANIC_MATTER = 2  # carbon from organic matter
ROCK_DENSITY = 4  # coarse share turned from volume to mass or back


@dataclass(frozen=True)
class Layers:
    """Sound layers, ordered by survey, plot, subplot, core and depth. All arrays have one entry per layer.

    Attributes
    ----------
    row : ndarray of int
        Position in the soil table.
    core, plot : ndarray of int
        Number of the core (0, 1, ... without holes), and of the plot and survey it belongs to.
    top_cm, bottom_cm : ndarray of float
        Limits of the layer, or of the layer its window stands for.
    carbon : ndarray of float
        Organic carbon share of the fine soil [g/g].
    fine_t_ha_cm : ndarray of float
        Mass of fine soil per hectare and centimetre of depth [t/(ha cm)].
    cores : ndarray of float
        Number of cores mixed.
    flags : ndarray of int
        What went into the layer.
    plots : DataFrame
        survey, plot by plot number.
    """

    row: np.ndarray
    core: np.ndarray
    plot: np.ndarray
    top_cm: np.ndarray
    bottom_cm: np.ndarray
    carbon: np.ndarray
    fine_t_ha_cm: np.ndarray
    cores: np.ndarray
    flags: np.ndarray
    plots: pd.DataFrame

    @property
    def starts(self) -> np.ndarray:
        """Position of the first layer of each core."""
        return _starts(self.core)

    @property
    def above_cm(self) -> np.ndarray:
        """Lower limit of the layer above each layer; 0 for the first of a core."""
        above = np.zeros(len(self.bottom_cm))
        above[1:] = self.bottom_cm[:-1]
        above[self.starts] = 0.0
        return above


@dataclass
class _Sieve:
    """Keeps track of the rows still sound, and of the findings of those that are not."""

    samples: pd.DataFrame
    sound: np.ndarray
    findings: list[pd.DataFrame] = field(default_factory=list)

    def drop(self, rule: str, mask: np.ndarray, **words: Any) -> None:
        mask = mask & self.sound
        if mask.any():
            self.findings.append(soil_finding(rule, self.samples.loc[mask], **words))
            self.sound = self.sound & ~mask

    def tell(self, rule: str, mask: np.ndarray, **words: Any) -> None:
        mask = mask & self.sound
        if mask.any():
            self.findings.append(soil_finding(rule, self.samples.loc[mask], **words))

    def tell_once(self, rule: str, mask: np.ndarray, **words: Any) -> None:
        count = int(np.count_nonzero(mask & self.sound))
        if count:
            self.findings.append(soil_finding(rule, count=count, **words))


def make_layers(samples: pd.DataFrame, options: SoilOptions) -> tuple[Layers, pd.DataFrame]:
    """Check the rows of a soil table and put the sound ones in order.

    Parameters
    ----------
    samples : DataFrame
        Canonical soil table: survey, plot, subplot, core, top_cm, bottom_cm [cm], bulk_density_g_cm3, coarse_share,
        organic_carbon_share, organic_matter_share, total_carbon_share, inorganic_carbon_share [g/g], cores, used.
        Columns of numbers that are not there count as blank.
    options : SoilOptions
        Checked options.

    Returns
    -------
    layers : Layers
        The sound layers.
    findings : DataFrame
        One per row set aside or doubted, and notes.

    Raises
    ------
    SettingsError
        If rows need a factor or a meaning that the options do not state.
    """
    samples = samples.reset_index(drop=True)
    used = samples["used"].to_numpy(dtype=bool) if "used" in samples else np.ones(len(samples), dtype=bool)
    sieve = _Sieve(samples, used)
    top, bottom = _depths(sieve)
    window = _windows(sieve, top, bottom, options.windows) if options.windows else None
    carbon, flags = _organic_carbon(sieve, options)
    _doubt_carbon(sieve, carbon, top, options)
    fine, density_flags = _fine_soil(sieve, carbon, options)
    cores = _core_counts(sieve)
    kept = np.flatnonzero(sieve.sound)
    plot_key, core_key = _keys(samples.iloc[kept] if len(kept) < len(samples) else samples)
    order = _order(core_key, None if window is None else window[kept], top[kept])
    kept = kept[order]
    core, plot = _dense(core_key[order]), _dense(plot_key[order])
    top, bottom = top[kept], bottom[kept]
    if window is not None:
        top, bottom = _share_windows(core, window[kept], top, bottom, options.windows)
    first = _starts(plot)
    layers = Layers(
        row=kept,
        core=core,
        plot=plot,
        top_cm=top,
        bottom_cm=bottom,
        carbon=carbon[kept],
        fine_t_ha_cm=fine[kept] * T_HA_PER_G_CM2,
        cores=cores[kept],
        flags=(flags | density_flags)[kept],
        plots=samples.iloc[kept[first]][["survey", "plot"]].astype("str").reset_index(drop=True),
    )
    return layers, join_findings(sieve.findings)


def _numbers(samples: pd.DataFrame, name: str) -> np.ndarray:
    if name not in samples:
        return np.full(len(samples), np.nan)
    return samples[name].to_numpy(dtype=float)


def _depths(sieve: _Sieve) -> tuple[np.ndarray, np.ndarray]:
    top, bottom = _numbers(sieve.samples, "top_cm"), _numbers(sieve.samples, "bottom_cm")
    sieve.drop("depth missing", ~(np.isfinite(top) & np.isfinite(bottom)))
    sieve.drop("depth negative", top < limit("depth negative"))
    sieve.drop("bottom above top", ~(bottom > top))
    return top, bottom


def _windows(sieve: _Sieve, top: np.ndarray, bottom: np.ndarray, windows: tuple[SoilWindow, ...]) -> np.ndarray:
    """Find the window each sample stands for, numbered by depth; -1 for none."""
    tolerance = limit("depth tolerance")
    middle = 0.5 * (top + bottom)
    window = np.full(len(top), -1)
    beside = np.zeros(len(top), dtype=bool)
    for number, given in enumerate(sorted(windows, key=lambda w: w.top_cm)):
        inside = (middle >= given.top_cm) & (middle < given.bottom_cm)
        window[inside] = number
        beside |= inside & ((top < given.from_cm - tolerance) | (bottom > given.to_cm + tolerance))
    sieve.drop("outside windows", window < 0)
    sieve.tell("beside window", beside)
    return window


def _share_windows(
    core: np.ndarray, window: np.ndarray, top: np.ndarray, bottom: np.ndarray, windows: tuple[SoilWindow, ...]
) -> tuple[np.ndarray, np.ndarray]:
    """Limits of the layer each sample stands for; samples of one layer share it by their thickness.

    Samples of one layer that overlap each other keep the whole layer each, so that the overlap is found.
    """
    if not len(core):
        return top, bottom
    ordered = sorted(windows, key=lambda w: w.top_cm)
    layer_top = np.array([w.top_cm for w in ordered])[window]
    layer_bottom = np.array([w.bottom_cm for w in ordered])[window]
    group = _dense(core * len(ordered) + window)
    first = _starts(group)
    thickness = bottom - top
    above = np.cumsum(thickness) - thickness
    above = above - above[first][group]
    total = np.bincount(group, weights=thickness)[group]
    overlap = np.zeros(len(core), dtype=bool)
    overlap[1:] = (group[1:] == group[:-1]) & (top[1:] < bottom[:-1] - limit("depth tolerance"))
    clash = np.bincount(group, weights=overlap)[group] > 0
    whole = layer_bottom - layer_top
    shared_top = layer_top + whole * above / total
    shared_bottom = layer_top + whole * (above + thickness) / total
    return np.where(clash, layer_top, shared_top), np.where(clash, layer_bottom, shared_bottom)


def _organic_carbon(sieve: _Sieve, options: SoilOptions) -> tuple[np.ndarray, np.ndarray]:
    """Organic carbon share: as given, else total less inorganic, else organic matter over the stated factor."""
    samples = sieve.samples
    matter = _numbers(samples, "organic_matter_share")
    sieve.drop("organic matter impossible", (matter < 0) | (matter > limit("organic matter impossible")))
    carbon = _numbers(samples, "organic_carbon_share").copy()
    blank = np.isnan(carbon)
    if blank.any():
        difference = _numbers(samples, "total_carbon_share") - _numbers(samples, "inorganic_carbon_share")
        carbon[blank] = difference[blank]
    from_matter = np.isnan(carbon) & np.isfinite(matter)
    if (from_matter & sieve.sound).any():
        factor = _factor(
            options,
            f"organic matter is all that is given in some layers ({np.count_nonzero(from_matter & sieve.sound)})",
        )
        carbon = np.where(from_matter, matter / factor, carbon)
        sieve.tell_once("organic matter used", from_matter, factor=factor)
        sieve.tell_once("organic matter low", from_matter & (matter < limit("organic matter low")))
    flags = np.where(from_matter, FROM_ORGANIC_MATTER, 0)
    sieve.drop("carbon missing", ~np.isfinite(carbon))
    sieve.drop("carbon negative", carbon < limit("carbon negative"))
    return carbon, flags


def _factor(options: SoilOptions, why: str) -> float:
    factor = options.organic_matter_per_carbon
    if factor is None:
        table = organic_matter_factors()
        rows = table[table["topic"] == "organic matter per organic carbon"]
        pairs = zip(rows["id"], rows["value"], strict=True)
        known = ", ".join(f"{value:g} ({name.replace('_', ' ')})" for name, value in pairs)
        raise SettingsError(
            f"{why}, and no factor of organic matter to organic carbon is stated",
            where="[soil] organic_matter_per_carbon",
            remedy=f"State the factor of your soil. Published: {known}; see docs/soil.md.",
        )
    return factor


def _doubt_carbon(sieve: _Sieve, carbon: np.ndarray, top: np.ndarray, options: SoilOptions) -> None:
    sieve.drop("carbon impossible", carbon >= limit("carbon impossible"))
    if options.organic:
        return
    sieve.tell("carbon organic", carbon > limit("carbon organic"))
    sieve.tell("carbon low", (carbon < limit("carbon low")) & (top <= limit("depth tolerance")))


def _fine_soil(sieve: _Sieve, carbon: np.ndarray, options: SoilOptions) -> tuple[np.ndarray, np.ndarray]:
    """Fine soil per whole volume [g/cm3] and flags."""
    density = _numbers(sieve.samples, "bulk_density_g_cm3")
    _check_density(sieve, density, carbon, options)
    missing = np.isnan(density)
    if missing.any():
        density = _fill_density(sieve, density, carbon, options)
    coarse = _numbers(sieve.samples, "coarse_share")
    sieve.drop("coarse impossible", (coarse < 0) | (coarse > limit("coarse impossible")))
    # What a function gives is fine earth per volume of fine earth, whatever the measured values are.
    by_function = missing & sieve.sound
    needed = by_function if options.bulk_density == FINE_PER_WHOLE else np.ones(len(density), dtype=bool)
    _check_coarse(sieve, coarse, needed, options)
    fine, converted = fine_soil_density(density, coarse, kind=options.bulk_density, coarse=options.coarse)
    if by_function.any() and options.bulk_density != FINE_PER_FINE:
        own, own_converted = fine_soil_density(density, coarse, kind=FINE_PER_FINE, coarse=options.coarse)
        fine, converted = np.where(by_function, own, fine), np.where(by_function, own_converted, converted)
    sieve.drop("coarse too heavy", fine < -_ROUNDING)
    flags = np.where(by_function, BY_FUNCTION, 0) | np.where(converted, ROCK_DENSITY, 0)
    return np.maximum(fine, 0.0), flags


def _check_density(sieve: _Sieve, density: np.ndarray, carbon: np.ndarray, options: SoilOptions) -> None:
    sieve.drop("bulk density not positive", density <= limit("bulk density not positive"))
    if options.bulk_density == WHOLE_PER_WHOLE:
        sieve.drop("bulk density above rock", density > limit("bulk density above rock"))
        sieve.tell("bulk density stony", density > limit("bulk density stony"))
    else:
        sieve.drop("bulk density high", density > limit("bulk density high"))
    if options.bulk_density != FINE_PER_WHOLE and not options.organic:
        mineral = carbon <= limit("carbon organic")
        sieve.tell("bulk density low", mineral & (density < limit("bulk density low")))


def _fill_density(sieve: _Sieve, density: np.ndarray, carbon: np.ndarray, options: SoilOptions) -> np.ndarray:
    missing = np.isnan(density)
    if not options.pedotransfer:
        sieve.drop("bulk density missing", missing)
        return density
    matter = _numbers(sieve.samples, "organic_matter_share")
    derived = missing & np.isnan(matter)
    if (derived & sieve.sound).any():
        factor = _factor(options, f"the function {options.pedotransfer} needs organic matter, which is blank")
        matter = np.where(derived, carbon * factor, matter)
    filled = bulk_density_from_organic_matter(100.0 * matter, options.pedotransfer)
    usable = (filled > limit("bulk density not positive")) & (filled <= limit("bulk density high"))
    sieve.drop("bulk density function fails", missing & ~usable, function=options.pedotransfer)
    sieve.tell("bulk density by function", missing, function=options.pedotransfer)
    return np.where(missing, filled, density)


def _check_coarse(sieve: _Sieve, coarse: np.ndarray, needed: np.ndarray, options: SoilOptions) -> None:
    asked = needed & sieve.sound
    given = np.isfinite(coarse) & sieve.sound
    if not asked.any():
        if (given & (coarse > 0)).any():
            sieve.findings.append(soil_finding("coarse not used"))
        return
    if options.bulk_density != FINE_PER_WHOLE and not given.any():
        raise SettingsError(
            f"{options.bulk_density!r} needs the share of coarse fragments, and no layer gives one",
            where="[soil] bulk_density",
            remedy=f"Map a coarse column (0 where there are no stones), or, if the samples were sieved and the "
            f"fine soil divided by the whole volume, state {FINE_PER_WHOLE!r}.",
        )
    if not options.coarse and (asked & (coarse > 0)).any():
        raise SettingsError(
            "is not stated, and the bulk density needs the share of coarse fragments",
            where="[soil] coarse",
            remedy="State what the share is of: 'volume' or 'mass'. The two differ by a factor of about two.",
        )
    sieve.drop("coarse missing", needed & np.isnan(coarse))


def _core_counts(sieve: _Sieve) -> np.ndarray:
    if "cores" not in sieve.samples:
        return np.ones(len(sieve.samples))
    cores = _numbers(sieve.samples, "cores")
    invalid = ~(cores >= limit("cores invalid"))
    sieve.tell("cores invalid", invalid)
    return np.where(invalid, 1.0, cores)


def _keys(samples: pd.DataFrame) -> tuple[np.ndarray, np.ndarray]:
    """One number per plot and survey and one per core, in the order of their names."""
    plot = _joined(_codes(samples, "survey"), _codes(samples, "plot"))
    core = _joined(_joined(plot, _codes(samples, "subplot")), _codes(samples, "core"))
    return plot, core


def _codes(samples: pd.DataFrame, name: str) -> np.ndarray:
    """Rank of each label among the labels of its column; blank ranks first."""
    if name not in samples:
        return np.zeros(len(samples), dtype=np.int64)
    if isinstance(samples[name].dtype, pd.CategoricalDtype):
        codes, labels = samples[name].cat.codes.to_numpy(), samples[name].cat.categories
    else:
        codes, labels = pd.factorize(samples[name], use_na_sentinel=True)
    rank = np.empty(len(labels) + 1, dtype=np.int64)
    text = np.asarray(pd.Index(labels).astype("str"), dtype=object)
    rank[np.argsort(text, kind="stable")] = np.arange(1, len(labels) + 1)
    rank[-1] = 0
    return rank[codes]


def _joined(left: np.ndarray, right: np.ndarray) -> np.ndarray:
    if not len(left):
        return left
    span = int(right.max()) + 1
    if (int(left.max()) + 1) * span >= np.iinfo(np.int64).max:
        left = np.unique(left, return_inverse=True)[1]
    return left * span + right


def _order(core: np.ndarray, window: np.ndarray | None, top: np.ndarray) -> np.ndarray:
    """Order by core, window and depth; files mostly come in that order, which a few passes tell."""
    step = np.diff(core)
    falls = top[1:] < top[:-1]
    if window is not None:
        falls = (window[1:] < window[:-1]) | ((window[1:] == window[:-1]) & falls)
    if not ((step < 0) | ((step == 0) & falls)).any():
        return np.arange(len(core))
    return np.lexsort((top, core) if window is None else (top, window, core))


def _dense(sorted_key: np.ndarray) -> np.ndarray:
    number = np.zeros(len(sorted_key), dtype=np.int64)
    number[1:] = np.cumsum(sorted_key[1:] != sorted_key[:-1])
    return number


def _starts(number: np.ndarray) -> np.ndarray:
    first = np.ones(len(number), dtype=bool)
    first[1:] = number[1:] != number[:-1]
    return np.flatnonzero(first)
