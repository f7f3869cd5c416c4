"""Litter, duff and ground vegetation from frames: what lay or grew inside the frames, over their area."""

from __future__ import annotations

from collections.abc import Mapping
from dataclasses import dataclass, field

import numpy as np
import pandas as pd

from landcarbon.constants import KG_PER_T, M2_PER_HECTARE
from landcarbon.errors import SettingsError
from landcarbon.findings import empty_findings, join_findings, make_findings
from landcarbon.pools import defaults
from landcarbon.pools.frame_mass import (
    DEFAULT,
    DEFAULT_ORGANIC,
    DEPTH,
    DRY,
    FRACTION_KINDS,
    FRAME_PARTS,
    MASS_KINDS,
    ORGANIC,
    FrameKeys,
    FrameRows,
    frame_keys,
    frame_rows,
    row_faults,
)
from landcarbon.pools.frame_notes import basis_findings, beyond_any_forest, doubtful_rows, layers_not_taken
from landcarbon.pools.parts import RowShares, empty_parts, make_parts

__all__ = ["CARBON_BASES", "FrameOptions", "ground_vegetation", "litter"]

CARBON_BASES = ("", DRY, ORGANIC)


@dataclass(frozen=True)
class FrameOptions:
    """How frame samples are turned into carbon. Names of layers are compared without regard to case.

    Attributes
    ----------
    frame_area_m2 : float or None
        Area of a frame where the row gives none [m2].
    dry_share : float or None
        Dry over fresh mass where a row has no sub-sample; above 0 and at most 1.
    carbon_fraction : float or None
        t C per t, for every layer without one of its own.
    carbon_fractions : mapping of str to float
        t C per t by name of the layer.
    carbon_basis : {"", "dry matter", "organic matter"}
        What the fractions given in the rows and in the settings refer to: the whole dry mass with its ash, or the dry
        mass less ash. Where it is not stated, a fraction in a row refers to dry matter, as a laboratory reports a
        sample, and one of the settings to organic matter if the row gives its ash; a warning says so.
    carbon_set : str
        Set of default fractions of litter and duff in ``factors/litter_carbon.csv``; the IPCC's if blank.
    duff : tuple of str
        Layers of the litter table that are duff; any other is litter.
    bulk_densities : mapping of str to float
        g/cm3 by name of the layer, for rows with a depth and no mass.
    forest_floor : str
        Type in ``factors/forest_floor_density.csv``, for layers without a bulk density.
    """

    frame_area_m2: float | None = None
    dry_share: float | None = None
    carbon_fraction: float | None = None
    carbon_fractions: Mapping[str, float] = field(default_factory=dict)
    carbon_basis: str = ""
    carbon_set: str = ""
    duff: tuple[str, ...] = ("duff", "humus")
    bulk_densities: Mapping[str, float] = field(default_factory=dict)
    forest_floor: str = ""


def litter(
    samples: pd.DataFrame, options: FrameOptions, *, shares: RowShares | None = None
) -> tuple[pd.DataFrame, pd.DataFrame]:
    """Work out litter and duff per plot from frame samples.

    Parameters
    ----------
    samples : DataFrame
        Canonical table ``litter``: row_id, file, row, survey, plot, subplot, used, frame, layer, frame_area_m2 [m2],
        fresh_kg, sub_fresh_g, sub_dry_g, dry_kg, depth_cm, bulk_density_g_cm3, ash_share, carbon_fraction [g/g]. One
        row per frame and layer.
    options : FrameOptions
        What the rows do not say.

    Returns
    -------
    parts : DataFrame
        Parts ``litter`` and ``duff`` of the pool litter [t C/ha], one row per plot and survey where the layer was
        taken. mass_t_ha is the mass the carbon fraction applies to: dry mass, less ash where the fraction is one of
        organic matter. samples counts frames.
    findings : DataFrame
        Rows set aside and what else was seen.

    Raises
    ------
    SettingsError
        If an option cannot be used.

    Notes
    -----
    Density of a plot [t C/ha] = 10 x sum of carbon [kg] / sum of frame area [m2] over its frames: frames of unequal
    size count by their area. Layers are added. If a layer was taken from any frame of a plot, the plot's frames
    without a row of it hold none of it and count as zero. A plot without any row of a layer was not measured for it; a
    row with mass 0 says that it was looked for and is not there. Where a layer is taken from a smaller area than the
    rest of its frame (a core within a frame), frames without it count in the same proportion. A frame of which one row
    of a part was set aside is left out for this part, since the rest of it would be too little.

    Ash: carbon = dry mass x (1 - ash) x fraction of organic matter, or dry mass x fraction of dry matter, never dry
    mass x (1 - ash) x fraction of dry matter, which would deduct the mineral soil twice. The default fractions of dry
    matter hold the usual ash; a row that gives its ash takes the default of organic matter instead. See
    :class:`FrameOptions` for fractions that are given.

    Common practice, no source; the unit bridge of 10 is exact.
    """
    return _frames(samples, options, "litter", shares)


def ground_vegetation(
    samples: pd.DataFrame, options: FrameOptions, *, shares: RowShares | None = None
) -> tuple[pd.DataFrame, pd.DataFrame]:
    """Work out herbs, shrubs and other ground vegetation per plot from clipped frames.

    Parameters and results are those of :func:`litter`; the part is ``ground_vegetation`` of the pool above_ground, and
    all layers (herbs, shrubs, ...) are added into it.
    """
    return _frames(samples, options, "ground_vegetation", shares)


def _frames(
    samples: pd.DataFrame, options: FrameOptions, table: str, shares: RowShares | None
) -> tuple[pd.DataFrame, pd.DataFrame]:
    _check_options(options, table)
    if samples.empty:
        return empty_parts(), empty_findings()
    keys = frame_keys(samples)
    rows = frame_rows(samples, keys, options, table)
    used, findings = _set_aside(samples, rows, table)
    counted, incomplete = _complete_frames(samples, keys, rows, used, table)
    parts, totals, share = _parts(samples, keys, rows, counted, options, table)
    if shares is not None:
        shares.add(table, samples.loc[counted], share[counted])
    notes = [
        incomplete,
        doubtful_rows(samples, keys, rows, counted, table),
        basis_findings(samples, rows, counted, options, table),
        layers_not_taken(samples, keys, counted, totals, table),
        beyond_any_forest(parts, table),
    ]
    return parts, join_findings([*findings, *notes])


def _check_options(options: FrameOptions, table: str) -> None:
    numbers = {
        "frame_area_m2": (options.frame_area_m2, np.inf),
        "dry_share": (options.dry_share, 1.0),
        "carbon_fraction": (options.carbon_fraction, defaults.largest_fraction()),
        **{f"carbon_fractions.{k}": (v, defaults.largest_fraction()) for k, v in options.carbon_fractions.items()},
        **{f"bulk_densities.{k}": (v, defaults.largest_density()) for k, v in options.bulk_densities.items()},
    }
    for key, (value, largest) in numbers.items():
        if value is not None and not (0.0 < value <= largest and np.isfinite(value)):
            limit = f" and at most {largest:g}" if np.isfinite(largest) else ""
            raise SettingsError(
                f"{value!r} cannot be used", where=f"[{table}] {key}", remedy=f"Give a number above 0{limit}."
            )
    choices = {
        "carbon_basis": (options.carbon_basis, CARBON_BASES),
        "carbon_set": (options.carbon_set, ("", *defaults.carbon_sets())),
        "forest_floor": (options.forest_floor, ("", *defaults.floor_types())),
    }
    for key, (given, accepted) in choices.items():
        if given not in accepted:
            names = ", ".join(f'"{name}"' for name in accepted if name)
            raise SettingsError(f"{given!r} is not known", where=f"[{table}] {key}", remedy=f"Choose one of: {names}")


def _set_aside(samples: pd.DataFrame, rows: FrameRows, table: str) -> tuple[np.ndarray, list[pd.DataFrame]]:
    used = samples["used"].to_numpy(dtype=bool)
    findings = []
    for fault in row_faults(rows):
        hit = used & fault.rows
        if hit.any():
            used = used & ~hit
            findings.append(
                make_findings(
                    fault.rule,
                    samples.loc[hit],
                    severity="error",
                    table=table,
                    column=fault.column,
                    used=False,
                    message=fault.message,
                    remedy=fault.remedy,
                )
            )
    return used, findings


def _complete_frames(
    samples: pd.DataFrame, keys: FrameKeys, rows: FrameRows, used: np.ndarray, table: str
) -> tuple[np.ndarray, pd.DataFrame]:
    """Leave out the other rows of a part in a frame that has lost one."""
    if used.all():
        return used, empty_findings()
    cell = keys.frame * len(FRAME_PARTS[table][1]) + rows.part
    lost = np.bincount(cell[~used], minlength=int(cell.max()) + 1) > 0
    rest = used & lost[cell]
    finding = make_findings(
        "frame incomplete",
        samples.loc[rest],
        severity="warning",
        table=table,
        column="frame",
        used=False,
        message="Another row of this layer and frame was set aside; the frame is left out here, as the rest "
        "of it would be too little.",
        remedy="Mend the other row.",
    )
    return used & ~rest, finding


def _parts(
    samples: pd.DataFrame,
    keys: FrameKeys,
    rows: FrameRows,
    counted: np.ndarray,
    options: FrameOptions,
    table: str,
) -> tuple[pd.DataFrame, dict[str, np.ndarray], np.ndarray]:
    """Parts of the plots, plots each was taken on, and what each row brings in [t C/ha]."""
    pool, names = FRAME_PARTS[table]
    visits = samples.iloc[keys.first_row]
    tables, taken, share = [], {}, np.zeros(len(samples))
    for code, name in enumerate(names):
        here = counted & (rows.part == code)
        if not here.any():
            continue
        carbon, mass, frames, weight = _densities(keys, rows, counted, code)
        share[here] = (rows.dry_kg_m2 * rows.share * rows.fraction)[here] * weight[keys.frame[here]]
        taken[name] = frames > 0
        measured = visits.loc[:, ["survey", "plot"]].astype("str")
        measured = measured.assign(density_t_c_ha=carbon, mass_t_ha=mass, samples=frames)[frames > 0]
        measured = measured.sort_values(["survey", "plot"], kind="stable")
        method, known = _method(rows, here, options, pool, name)
        tables.append(make_parts(measured, pool=pool, part=name, method=method, known=known))
    return (pd.concat(tables, ignore_index=True) if tables else empty_parts()), taken, share


def _densities(
    keys: FrameKeys, rows: FrameRows, counted: np.ndarray, code: int
) -> tuple[np.ndarray, np.ndarray, np.ndarray, np.ndarray]:
    """Carbon and mass [t/ha] and number of frames of one part, per visit; weight of a kg per m2 of each frame."""
    frames = int(keys.frame.max()) + 1
    visits = len(keys.first_row)
    visit = np.zeros(frames, dtype=np.int64)
    visit[keys.frame] = keys.visit
    of_part = rows.part == code
    here = np.flatnonzero(counted & of_part)
    frame = keys.frame[here]
    frame_area = _largest(keys.frame[counted], rows.area_m2[counted], frames)
    part_area = _largest(frame, rows.area_m2[here], frames)
    organic = rows.dry_kg_m2[here] * rows.share[here]
    mass = np.bincount(frame, weights=organic, minlength=frames)
    carbon = np.bincount(frame, weights=organic * rows.fraction[here], minlength=frames)
    with_part = part_area > 0
    touched = np.zeros(frames, dtype=bool)
    touched[keys.frame[of_part]] = True
    without = (frame_area > 0) & ~touched

    def summed(values: np.ndarray) -> np.ndarray:
        return np.bincount(visit, weights=values, minlength=visits)

    area = summed(part_area)
    with np.errstate(divide="ignore", invalid="ignore"):
        area = area * (1.0 + summed(frame_area * without) / summed(frame_area * with_part))
        to_t_ha = M2_PER_HECTARE / KG_PER_T
        per_visit = [summed(values * part_area) / area * to_t_ha for values in (carbon, mass)]
        weight = part_area / area[visit] * to_t_ha
    number = np.where(summed(part_area) > 0, summed((with_part | without).astype(float)), 0)
    return per_visit[0], per_visit[1], number.astype(np.int64), weight


def _largest(code: np.ndarray, values: np.ndarray, count: int) -> np.ndarray:
    result = np.zeros(count)
    np.maximum.at(result, code, values)
    return result


def _method(rows: FrameRows, here: np.ndarray, options: FrameOptions, pool: str, part: str) -> tuple[str, str]:
    """Words on how mass and carbon of a part were obtained, and how the weakest factor is known."""
    kinds = np.flatnonzero(np.bincount(rows.kind, weights=here))
    sources = np.flatnonzero(np.bincount(rows.fraction_kind, weights=here))
    marks: list[str] = []
    texts = []
    for source in sources:
        text = FRACTION_KINDS[source]
        if source in (DEFAULT, DEFAULT_ORGANIC):
            basis, layer = (DRY, part) if source == DEFAULT else (ORGANIC, "any")
            factor = defaults.fraction_rows(pool, layer, basis, options.carbon_set)
            marks += list(factor["known"])
            text = f"{text} {factor['value'].iloc[0]:g} ({factor['source'].iloc[0]})"
        texts.append(text)
    if DEPTH in kinds and options.forest_floor:
        table = defaults.forest_floor_table()
        marks += list(table.loc[(table["type"] == options.forest_floor) & (table["part"] == part), "known"])
    ash = "; less ash" if (here & (rows.share < 1)).any() else ""
    masses = " or ".join(MASS_KINDS[kind] for kind in kinds)
    return f"frames: {masses}{ash}; {' or '.join(texts)}", defaults.weakest(marks)
