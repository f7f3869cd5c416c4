"""Lines and offsets laid out as tables, for one survey."""

from __future__ import annotations

from collections.abc import Mapping, Sequence

import numpy as np
import pandas as pd

from landcarbon.estimate.assist_lines import Lines, columns_alike
from landcarbon.estimate.auxiliary import within_strata
from landcarbon.estimate.groups import group_sum

__all__ = ["model_rows", "offset_rows"]


def offset_rows(survey: str, lines: Lines, area: np.ndarray) -> pd.DataFrame:
    """Offsets of one survey, by unit and part, where slopes serve."""
    parts = np.flatnonzero(lines.used.any(axis=1))
    if not len(parts):
        return pd.DataFrame()
    names = np.array(lines.columns, dtype=object)[parts]
    used = lines.used[parts]
    whole, left = (values[parts] for values in lines.whole(area))
    there = np.flatnonzero(used.any(axis=0))
    nothing = np.zeros((len(there), len(parts)))
    blocks = [
        _offset_block("inventory", [""], nothing[:1], names).assign(inflation=whole, df_share=left),
        _offset_block("stratum", [lines.labels[one] for one in there], nothing, names).assign(
            inflation=lines.inflation[np.ix_(parts, there)].T.ravel(),
            df_share=lines.df_share[np.ix_(parts, there)].T.ravel(),
        )[used[:, there].T.ravel()],
    ]
    table = lines.auxiliary.parcels
    table = table[table["stratum"].isin(there)]
    if len(table):
        unit, units = pd.factorize(table["unit"])
        code = table["stratum"].to_numpy()
        shift = table[[f"shift.{name}" for name in lines.auxiliary.rasters]].to_numpy(dtype=float)
        each = np.einsum("rp,krp->rk", shift, lines.slope[parts][:, code])
        each = each * table["share"].to_numpy(dtype=float)[:, None]
        worst = np.zeros((len(units), len(parts)))
        least = np.ones((len(units), len(parts)))
        np.maximum.at(worst, unit, lines.inflation[np.ix_(parts, code)].T)
        np.minimum.at(least, unit, lines.df_share[np.ix_(parts, code)].T)
        touched = group_sum(used[:, code].T, unit, len(units)) > 0
        block = _offset_block("parcel", list(units), group_sum(each, unit, len(units)), names)
        blocks.append(block.assign(inflation=worst.ravel(), df_share=least.ravel())[touched.ravel()])
    return pd.concat(blocks, ignore_index=True).assign(survey=survey)


def _offset_block(by: str, units: list[str], offset: np.ndarray, names: np.ndarray) -> pd.DataFrame:
    return pd.DataFrame(
        {
            "by": by,
            "unit": np.repeat(np.array(units, dtype=object), len(names)),
            "part": np.tile(names, len(units)),
            "offset": offset.ravel(),
        }
    )


def model_rows(survey: str, lines: Lines, sums: Mapping[str, Sequence[str]]) -> pd.DataFrame:
    """Lines of parts and of their sums, by stratum, a row per term."""
    named = {name: [name] for name in lines.columns} | {pool: list(names) for pool, names in sums.items()}
    member = np.array([[name in names for name in lines.columns] for names in named.values()]) & lines.measured
    labels = np.array(list(named), dtype=object)[member.any(axis=1)]
    member = member[member.any(axis=1)]
    if not len(member):
        return pd.DataFrame()
    member, twin = np.unique(member, axis=0, return_inverse=True)  # a pool of one part has its line
    measured = np.isfinite(lines.value)
    chooses = member.T.astype(float)
    value = np.where(measured, lines.value, 0.0) @ chooses
    rest = value - lines.explained() @ chooses
    there = (measured.astype(float) @ chooses) == member.sum(axis=1)
    blocks: list[pd.DataFrame] = []
    for chosen in columns_alike(there):
        names = [list(labels[twin.ravel() == one]) for one in chosen]
        blocks += _model_blocks(names, member[chosen], value[:, chosen], rest[:, chosen], lines, there[:, chosen[0]])
    order = {name: at for at, name in enumerate(named)}
    blocks.sort(key=lambda block: order[str(block["of"].iloc[0])])
    made = pd.concat(blocks, ignore_index=True)
    sources = dict(zip(lines.auxiliary.rasters, lines.auxiliary.sources, strict=True))
    return made.assign(survey=survey, source=[sources.get(term, survey) for term in made["term"]])


def _model_blocks(
    names: list[list[str]],
    member: np.ndarray,
    value: np.ndarray,
    rest: np.ndarray,
    lines: Lines,
    used: np.ndarray,
) -> list[pd.DataFrame]:
    """Lines of sums that were measured on the same plots."""
    if not used.any():
        return []
    strata = len(lines.labels)
    chosen: np.ndarray | slice = slice(None) if used.all() else used
    code, size, rest = lines.code[chosen], lines.size[chosen], rest[chosen]
    whole = size @ within_strata(value[chosen], code, size, strata) ** 2
    left = size @ within_strata(rest, code, size, strata) ** 2
    plots = np.bincount(code, minlength=strata)
    there = np.flatnonzero(plots)
    held = np.bincount(code, weights=size, minlength=strata)
    level = group_sum(rest * size[:, None], code, strata)[there] / held[there][:, None]
    centre = lines.auxiliary.centre[there]
    terms = np.array(["intercept", *lines.auxiliary.rasters], dtype=object)
    blocks = []
    for at, labels in enumerate(names):
        slope = lines.slope[member[at]].sum(axis=0)[there]
        base = level[:, at] - (np.nan_to_num(centre) * slope).sum(axis=1)
        free = used.sum() - len(there) - lines.number[member[at]].max(initial=0)
        block = pd.DataFrame(
            {
                "stratum": np.repeat(np.array(lines.labels, dtype=object)[there], len(terms)),
                "term": np.tile(terms, len(there)),
                "coefficient": np.column_stack([base, slope]).ravel(),
                "centre": np.column_stack([np.full(len(there), np.nan), centre]).ravel(),
                "r2": 1.0 - left[at] / whole[at] if whole[at] > 0 else np.nan,
                "n": np.repeat(plots[there], len(terms)),
                "se_residual": np.sqrt(left[at] / size.mean() / free) if free > 0 else np.nan,
            }
        )
        blocks += [block.assign(of=label) for label in labels]
    return blocks
