"""Dead wood lying or cut: density and carbon fraction of each row, and the checks its tables share.

Pieces on lines, logs and stumps name their wood in the same way: a decay class, and a species or at least softwood or
hardwood. Here that becomes a density and a carbon fraction per row; what the measurements mean is for the modules of
the tables.
"""

from __future__ import annotations

from collections.abc import Mapping
from dataclasses import dataclass, field

import numpy as np
import pandas as pd
from numpy.typing import NDArray

from allometry.names import parse_names
from landcarbon.errors import UserError
from landcarbon.factors.carbon import carbon_fraction
from landcarbon.factors.dead_wood import (
    GROUPS,
    KNOWN,
    decay_classes,
    density_ratios,
    finding_text,
    fresh_density,
    rule,
    world_carbon_fraction,
)
from landcarbon.findings import join_findings, make_findings

__all__ = [
    "KNOWN",
    "RowCheck",
    "Wood",
    "WoodOptions",
    "class_codes",
    "default_class",
    "encode",
    "name_groups",
    "wood_of",
]

FloatArray = NDArray[np.float64]
IntArray = NDArray[np.int64]
BoolArray = NDArray[np.bool_]

_CARBON_GROUP = {"softwood": "conifer", "hardwood": "broadleaf", "unknown": "any"}


@dataclass(frozen=True)
class WoodOptions:
    """What is settled about dead wood before any row is read.

    Attributes
    ----------
    group : {"softwood", "hardwood", "unknown"}
        Group of wood where species and wood type are blank.
    density : str
        "by decay class": fresh density times the ratio of the class.
    class_density : mapping
        Own densities [g/cm3] by decay class in the crew's words; they replace fresh density and ratio, whatever the
        species.
    missing_class : str
        Decay class where a row names none; empty takes the default of ``dead_wood_rules.csv``.
    fresh_density_g_cm3 : float
        Density of sound wood where the species has none; NaN takes the mean of the group.
    domain : str
        Climate domain of those means.
    carbon : {"by group", "world"}
        Carbon fraction by softwood and hardwood, or one for all dead wood.
    """

    group: str = "unknown"
    density: str = "by decay class"
    class_density: Mapping[str, float] = field(default_factory=dict)
    missing_class: str = ""
    fresh_density_g_cm3: float = np.nan
    domain: str = "temperate and boreal"
    carbon: str = "by group"

    def __post_init__(self) -> None:
        """Refuse words that mean nothing."""
        accepted = {"group": GROUPS, "density": ("by decay class",), "carbon": ("by group", "world")}
        for name, words in accepted.items():
            value = getattr(self, name)
            if value not in words:
                raise UserError(
                    f"{value!r} is no choice of {name}",
                    where=f"[dead_wood] {name}",
                    remedy=f"Choose one of: {', '.join(words)}.",
                )
        labels = list(self.class_density) or decay_classes()
        if self.missing_class and self.missing_class not in labels:
            raise UserError(
                f"{self.missing_class!r} is not a decay class",
                where="[dead_wood] missing_class",
                remedy=f"Choose one of: {', '.join(labels)}.",
            )


@dataclass(frozen=True)
class Wood:
    """Density and carbon of each row of a table of wood.

    Attributes
    ----------
    density_g_cm3, carbon_fraction : ndarray of float
        Per row; the density is NaN where the decay class means nothing.
    decay : ndarray of int
        Position of the decay class, -1 where it means nothing.
    weakest : ndarray of int
        Position in ``KNOWN`` of the weakest factor behind the row.
    no_class, bad_class, odd_species, odd_wood, disagree : ndarray of bool
        Decay class blank, decay class not in the list, species not in the table, wood type not understood, species
        and wood type of different groups.
    """

    density_g_cm3: FloatArray
    carbon_fraction: FloatArray
    decay: IntArray
    weakest: IntArray
    no_class: BoolArray
    bad_class: BoolArray
    odd_species: BoolArray
    odd_wood: BoolArray
    disagree: BoolArray


def encode(values: pd.Series) -> tuple[IntArray, list[str]]:
    """Turn text into codes and the distinct texts; a missing text counts as empty."""
    if isinstance(values.dtype, pd.CategoricalDtype):
        codes = values.cat.codes.to_numpy().astype(np.int64)
        labels = [str(label).strip() for label in np.asarray(values.cat.categories, dtype=object)]
    else:
        codes, found = pd.factorize(values)
        labels = [str(label).strip() for label in np.asarray(found, dtype=object)]
    if (codes < 0).any():
        codes = np.where(codes < 0, len(labels), codes)
        labels.append("")
    return codes, labels


def class_codes(values: pd.Series, labels: list[str], default: str) -> tuple[IntArray, BoolArray]:
    """Position of each decay class in ``labels``.

    Returns
    -------
    codes : ndarray of int
        A blank takes ``default``; -1 for what is not in the list.
    blank : ndarray of bool
        Rows without a class.
    """
    codes, found = encode(values)
    names = [_tidy(label) or default for label in found]
    positions = np.array([labels.index(name) if name in labels else -1 for name in names] or [-1], dtype=np.int64)
    blanks = np.array([not label for label in found] or [False])
    return positions[codes], blanks[codes]


def _tidy(label: str) -> str:
    """Read a class typed as a number with a decimal point as the whole number it is."""
    head, dot, tail = label.partition(".")
    return head if dot and head.isdigit() and not tail.strip("0") else label


def name_groups(names: pd.Series, conifer: NDArray[np.bool_]) -> tuple[pd.Series, NDArray[np.object_]]:
    """Tell the accepted name and group (softwood, hardwood, unknown) of scientific names.

    Parameters
    ----------
    names : Series of str
        Scientific names as given.
    conifer : ndarray of bool
        What the assignment of equations holds for a conifer; counts also where the name is not known.
    """
    parsed = parse_names(names.astype("str"))
    known = (parsed["group"] != "").to_numpy()
    group = np.where(conifer, "softwood", np.where(known, "hardwood", "unknown")).astype(object)
    return parsed["accepted_name"], group


@dataclass(frozen=True)
class _Kinds:
    """Factors per kind of wood: one row per species, then one per group."""

    codes: pd.Index
    group: NDArray[np.object_]
    ratios: FloatArray
    fresh: FloatArray
    fraction: FloatArray
    weakest: IntArray


def _kinds(species: pd.DataFrame, options: WoodOptions, position: str) -> _Kinds:
    names, group = name_groups(species["scientific_name"], species["conifer"].to_numpy(dtype=bool))
    names = pd.concat([names, pd.Series([""] * len(GROUPS), dtype="str")], ignore_index=True)
    group = np.concatenate([np.where(group == "unknown", options.group, group), np.array(GROUPS, dtype=object)])
    ratios, _ = density_ratios(position, names, group)
    default = np.array([fresh_density(str(name), options.domain) for name in group])
    if np.isfinite(options.fresh_density_g_cm3):
        default[:] = options.fresh_density_g_cm3
    own = np.concatenate([species["wood_density_g_cm3"].to_numpy(dtype=float), np.full(len(GROUPS), np.nan)])
    weakest = np.zeros(len(group), dtype=np.int64)
    if "wood_density_known" in species:
        marks = species["wood_density_known"].astype("str")
        weakest[: len(species)] = [KNOWN.index(mark) if mark in KNOWN else 0 for mark in marks]
    taxon = np.array([_CARBON_GROUP[str(name)] for name in group], dtype=object)
    if options.carbon == "world":
        fraction = np.full(len(group), world_carbon_fraction())
    else:
        fraction = carbon_fraction(taxon, domain=options.domain, pool="dead_wood")
    fresh = np.where(np.isfinite(own), own, default)
    return _Kinds(pd.Index(species["species"].astype("str")), group, ratios, fresh, fraction, weakest)


def wood_of(
    rows: pd.DataFrame,
    species: pd.DataFrame,
    options: WoodOptions,
    *,
    given_g_cm3: FloatArray | None = None,
    position: str = "down",
) -> Wood:
    """Density and carbon fraction of each row.

    Parameters
    ----------
    rows : DataFrame
        species (code), wood, decay_class; blank where not recorded.
    species : DataFrame
        species, scientific_name, conifer, wood_density_g_cm3 and, if there, wood_density_known.
    options : WoodOptions
        Defaults and choices.
    given_g_cm3 : ndarray of float, optional
        Density per row that needs no decay class; NaN where the class decides.
    position : {"down", "standing"}
        Set of density ratios.

    Notes
    -----
    density = fresh density x ratio of the decay class. Species before wood type before the default group.
    """
    kinds = _kinds(species, options, position)
    kind, odd_species, odd_wood, disagree = _kind_of(rows, kinds, options)
    labels = list(options.class_density) or decay_classes()
    decay, blank = class_codes(rows["decay_class"], labels, default_class(options))
    weakest = kinds.weakest[kind]
    if options.class_density:
        by_class = np.array([*options.class_density.values(), np.nan], dtype=float)
        density = by_class[decay]
        weakest = np.zeros(len(rows), dtype=np.int64)
    else:
        by_class = np.column_stack([kinds.ratios * kinds.fresh[:, None], np.full(len(kinds.fresh), np.nan)])
        density = by_class[kind, decay]
    weakest = np.where(blank, KNOWN.index("memory"), weakest)
    needed = np.ones(len(rows), dtype=bool)
    if given_g_cm3 is not None:
        needed = ~np.isfinite(given_g_cm3)
        density = np.where(needed, density, given_g_cm3)
        weakest = np.where(needed, weakest, 0)
    return Wood(
        density_g_cm3=density,
        carbon_fraction=kinds.fraction[kind],
        decay=decay,
        weakest=weakest,
        no_class=blank & needed & (decay >= 0),
        bad_class=(decay < 0) & needed,
        odd_species=odd_species,
        odd_wood=odd_wood,
        disagree=disagree,
    )


def _kind_of(
    rows: pd.DataFrame, kinds: _Kinds, options: WoodOptions
) -> tuple[IntArray, BoolArray, BoolArray, BoolArray]:
    """Row of ``kinds`` for each row, and what is odd about how the wood was named."""
    n_species = len(kinds.codes)
    codes, labels = encode(rows["species"])
    found = kinds.codes.get_indexer(pd.Index(labels, dtype="str")) if labels else np.array([], dtype=np.int64)
    named = np.array([label != "" for label in labels], dtype=bool)
    found = np.where(named, found, -1)
    wood_codes, words = encode(rows["wood"])
    lowered = [word.lower() for word in words]
    typed = np.array([GROUPS.index(word) if word in GROUPS[:2] else -1 for word in lowered], dtype=np.int64)
    strange = np.array([word not in ("", *GROUPS) for word in lowered], dtype=bool)
    by_species = found[codes]
    fallback = n_species + GROUPS.index(options.group)
    if not any(lowered):  # most crews note the species or the type of wood, not both
        nothing = np.zeros(len(rows), dtype=bool)
        return np.where(by_species >= 0, by_species, fallback), (named & (found < 0))[codes], nothing, nothing
    by_wood = typed[wood_codes]
    kind = np.where(by_species >= 0, by_species, np.where(by_wood >= 0, n_species + by_wood, fallback))
    group_code = np.array([GROUPS.index(str(name)) for name in kinds.group], dtype=np.int64)
    disagree = (by_species >= 0) & (by_wood >= 0) & (group_code[kind] != by_wood)
    unsure = disagree & (group_code[kind] == GROUPS.index("unknown"))
    kind = np.where(unsure, n_species + by_wood, kind)
    return kind, (named & (found < 0))[codes], strange[wood_codes], disagree & ~unsure


class RowCheck:
    """Collects findings about the rows of one table and which of them still count.

    Parameters
    ----------
    table : str
        Canonical name of the table.
    rows : DataFrame
        The rows, with their ``used`` mark.
    """

    def __init__(self, table: str, rows: pd.DataFrame) -> None:
        self.table = table
        self.rows = rows
        self.used: BoolArray = rows["used"].to_numpy(dtype=bool).copy()
        self._found: list[pd.DataFrame] = []

    def apply(self, rule: str, mask: BoolArray, **words: object) -> None:
        """Raise a rule of ``dead_wood_findings.csv`` on rows still in use; an error sets them aside.

        Parameters
        ----------
        rule : str
            Name of the rule.
        mask : ndarray of bool
            Rows at fault.
        **words
            What the message names in braces; ``column`` replaces the column of the rule.
        """
        hit = self.used & mask
        if not hit.any():
            return
        text = finding_text(rule)
        error = text["severity"] == "error"
        rows = self.rows.loc[hit]
        carbon = rows["carbon_kg"].to_numpy() if "carbon_kg" in rows else np.nan
        self._found.append(
            make_findings(
                rule,
                rows,
                severity=text["severity"],
                table=self.table,
                column=str(words.get("column", text["column"])),
                used=not error,
                message=text["message"].format(**words),
                remedy=text["remedy"],
                carbon_kg=carbon,
            )
        )
        if error:
            self.used &= ~hit

    def remark(self, rule: str, value: str = "", **words: object) -> None:
        """Raise a rule of ``dead_wood_findings.csv`` on the table as a whole."""
        text = finding_text(rule)
        self._found.append(
            make_findings(
                rule,
                severity=text["severity"],
                table=self.table,
                column=text["column"],
                message=text["message"].format(**words),
                remedy=text["remedy"],
                value=value,
            )
        )

    def wood(self, wood: Wood, default: str) -> None:
        """Check how the wood of each row was named."""
        self.apply("decay class unknown", wood.bad_class)
        self.no_class("decay class missing", wood.no_class, default)
        self.apply("species of wood unknown", wood.odd_species)
        self.apply("wood type unknown", wood.odd_wood)
        self.apply("species and wood type differ", wood.disagree)

    def no_class(self, rule: str, blank: BoolArray, default: str) -> None:
        """Say of each row without a decay class that it takes the default; once if no row has one."""
        if (self.used & blank).sum() > 1 and not self._any_class():
            self.remark("no decay classes", default=default)
        else:
            self.apply(rule, blank, default=default)

    def _any_class(self) -> bool:
        codes, labels = encode(self.rows.loc[self.used, "decay_class"])
        return any(labels[code] for code in np.unique(codes))

    def findings(self) -> pd.DataFrame:
        """All findings so far."""
        return join_findings(self._found)


def default_class(options: WoodOptions) -> str:
    """Decay class of rows that name none."""
    return options.missing_class or str(int(rule("missing_decay_class")))
