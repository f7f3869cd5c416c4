"""Scientific names as people write them, brought to one spelling.

Authors, case, extra blanks, underscores, ``spp.``, hybrid signs and infraspecific ranks are tolerated, and the
synonyms of ``data/synonyms.csv`` are replaced. A misspelling is never mended in silence: the name stays unknown and
the nearest known name is given beside it, for a person to decide.
"""

from __future__ import annotations

import re
import unicodedata
from collections.abc import Iterable
from dataclasses import dataclass
from difflib import get_close_matches
from functools import cache
from itertools import pairwise

import pandas as pd

from allometry._data import read_data

__all__ = ["NAME_COLUMNS", "genera", "parse_names", "synonyms"]

NAME_COLUMNS = ["genus", "epithet", "accepted_name", "family", "group", "known_name", "suggestion", "note"]
"""Columns of :func:`parse_names`."""

_GENUS_ONLY = re.compile(r"(sp|spp|species|indet|indetermined|unk|unknown|undet)\.?")
_RANKS = {"subsp", "ssp", "subspecies", "var", "varietas", "variety", "f", "forma", "fo", "cv"}
_NOT_A_NAME = re.compile(
    r"(un(known|identified|k|determined)?|indet(\.|ermined)?|undet\.?|na|nan|none|other|others|misc|n/?a|-+|\?+)"
)
_EPITHET = re.compile(r"[a-z]{2,}(-[a-z]+)*")
_CUTOFF_EPITHET = 0.8
"""Share of letters in order that two epithets of one genus must have in common to be offered (own judgement)."""
_CUTOFF_NAME = 0.85
"""The same for a whole name whose genus is not known."""


@dataclass(frozen=True)
class _Name:
    genus: str
    epithet: str
    full: str


def genera() -> pd.DataFrame:
    """Genera with family and growth group.

    Returns
    -------
    DataFrame
        Index ``genus``; columns family ("" where not recorded), group (conifer, broadleaf, palm, tree_fern, bamboo),
        source and known (read, secondary or memory).
    """
    return read_data("genera").set_index("genus")


def synonyms() -> pd.DataFrame:
    """Names replaced by :func:`parse_names`.

    Returns
    -------
    DataFrame
        Columns name, accepted_name (a genus alone stands for the whole genus), source, known, note.
    """
    return read_data("synonyms")


@cache
def _genus_table() -> dict[str, tuple[str, str]]:
    table = read_data("genera")
    return {
        genus: (family, group)
        for genus, family, group in zip(table["genus"], table["family"], table["group"], strict=True)
    }


@cache
def _families() -> frozenset[str]:
    return frozenset(family for family, _ in _genus_table().values() if family)


@cache
def _synonyms() -> dict[str, str]:
    table = read_data("synonyms")
    return dict(zip(table["name"].str.lower(), table["accepted_name"], strict=True))


@cache
def _group_words() -> dict[str, str]:
    table = read_data("group_words")
    return dict(zip(table["word"], table["group"], strict=True))


@cache
def _known_species() -> dict[str, frozenset[str]]:
    """Epithets known per genus, after synonyms."""
    sources = [
        read_data("known_species")["scientific_name"],
        read_data("species_groups")["scientific_name"],
        read_data("wood_density")["taxon"],
        read_data("synonyms")["accepted_name"],
    ]
    known: dict[str, set[str]] = {}
    for text in sorted({name for series in sources for name in series}):
        name = _apply_synonyms(_split(text))
        if name.genus in _genus_table() and name.epithet:
            known.setdefault(name.genus, set()).add(name.epithet)
    return {genus: frozenset(epithets) for genus, epithets in known.items()}


def _plain(text: str) -> str:
    """One blank between words, no accents, no hybrid sign, no underscores."""
    text = text.replace("×", " x ").replace("_", " ")
    text = unicodedata.normalize("NFKD", text)
    text = "".join(letter for letter in text if not unicodedata.combining(letter))
    words = [word for word in text.split() if word.lower() != "x"]
    return " ".join(words)


def _is_author(word: str, genus_word: str) -> bool:
    """Whether the second word is the author of a genus rather than an epithet.

    Only a mixed-case name can tell: in ``ABIES ALBA`` every word is in capitals.
    """
    if word.startswith("("):
        return True
    return word[:1].isupper() and not genus_word.isupper() and (word.endswith(".") or "." in word)


def _split(text: str) -> _Name:
    """Genus and epithet of one name; the full name keeps an infraspecific part for the synonym table."""
    words = _plain(text).split()
    if not words:
        return _Name("", "", "")
    genus = words[0].capitalize().rstrip(".,;")
    rest = [word for word in words[1:] if word.lower().rstrip(".") != "cf"]
    if not rest or rest[0].lower().rstrip(".") == "aff" or _is_author(rest[0], words[0]):
        return _Name(genus, "", genus)
    epithet = rest[0].lower().rstrip(".,;")
    if _GENUS_ONLY.fullmatch(epithet) or not _EPITHET.fullmatch(epithet):
        return _Name(genus, "", genus)
    full = f"{genus} {epithet}"
    for rank, lower in pairwise(rest[1:]):
        mark = rank.lower().rstrip(".")
        if mark in _RANKS and _EPITHET.fullmatch(lower.lower()):
            full = f"{full} {'subsp.' if mark in {'ssp', 'subspecies'} else mark + '.'} {lower.lower()}"
            break
    return _Name(genus, epithet, full)


def _apply_synonyms(name: _Name) -> _Name:
    """Find the accepted name; first the whole name, then the species, then the genus alone."""
    table = _synonyms()
    species = f"{name.genus} {name.epithet}".strip()
    for key in (name.full, species):
        accepted = table.get(key.lower())
        if accepted is not None:
            genus, _, epithet = accepted.partition(" ")
            return _Name(genus, epithet or name.epithet, accepted)
    accepted = table.get(name.genus.lower())
    if accepted is not None:
        return _Name(accepted, name.epithet, f"{accepted} {name.epithet}".strip())
    return _Name(name.genus, name.epithet, species)


@cache
def _all_names() -> tuple[str, ...]:
    species = [f"{genus} {epithet}" for genus, epithets in _known_species().items() for epithet in epithets]
    return tuple(sorted([*species, *_genus_table()]))


def _nearest(words: str, candidates: Iterable[str], cutoff: float) -> str:
    found = get_close_matches(words, sorted(candidates), n=1, cutoff=cutoff)
    return found[0] if found else ""


def _row(text: str) -> dict[str, object]:
    """All columns for one name as given."""
    row: dict[str, object] = dict.fromkeys(NAME_COLUMNS, "")
    row["known_name"] = False
    words = _plain(text).split()
    telling = [word.lower().rstrip(".,;") for word in words if not _NOT_A_NAME.fullmatch(word.lower())]
    if telling and telling[0] in _group_words():
        row.update(group=_group_words()[telling[0]], note=f"group only: {telling[0]}")
        return row
    if not words or _NOT_A_NAME.fullmatch(words[0].lower()):
        row["note"] = "no name given"
        return row
    family = words[0].capitalize().rstrip(".,;")
    if family in _families():
        row.update(family=family, group=_family_group(family), known_name=True, note="family only")
        return row
    given = _split(text)
    name = _apply_synonyms(given)
    accepted = f"{name.genus} {name.epithet}".strip()
    if name.genus not in _genus_table():
        row["suggestion"] = _nearest(f"{given.genus} {given.epithet}".strip(), _all_names(), _CUTOFF_NAME)
        row["note"] = "genus not known"
        return row
    family, group = _genus_table()[name.genus]
    row.update(
        genus=name.genus, epithet=name.epithet, accepted_name=accepted, family=family, group=group, known_name=True
    )
    epithets = _known_species().get(name.genus, frozenset())
    if name.epithet and name.epithet not in epithets:
        near = _nearest(name.epithet, epithets, _CUTOFF_EPITHET)
        if near:
            row.update(known_name=False, suggestion=f"{name.genus} {near}", note="species not known; genus used")
    if row["note"] == "" and accepted.split() != f"{given.genus} {given.epithet}".split():
        row["note"] = f"synonym of {accepted}"
    return row


@cache
def _family_group(family: str) -> str:
    groups = {group for found, group in _genus_table().values() if found == family}
    return sorted(groups)[0]


def parse_names(names: Iterable[str]) -> pd.DataFrame:
    """Bring names to genus and species in one spelling.

    Parameters
    ----------
    names : Series or iterable of str
        Names as written. Blank and missing entries are allowed.

    Returns
    -------
    DataFrame
        One row per entry, on the index of a Series given, with the columns :data:`NAME_COLUMNS`: ``genus`` and
        ``epithet`` ("" if not told), ``accepted_name`` (synonyms replaced; the genus alone for ``spp.``), ``family``,
        ``group`` (conifer, broadleaf, palm, tree_fern, bamboo or ""), ``known_name`` (False for a blank, for a genus
        that is not in the table, and for a species that looks like a misspelling of a listed one), ``suggestion``
        (the nearest listed name or "") and ``note``.

    Notes
    -----
    A species that is in no table but resembles none either is taken as known: the tables list only a small share of
    the world's trees. Subspecies and varieties are read as their species unless the synonym table lists them. ``cf.``
    keeps the species, ``aff.`` only the genus.

    Examples
    --------
    >>> parse_names(["ABIES  lasiocarpa (Hook.) Nutt.", "Quercus_prinus", "Betula spp."])["accepted_name"].to_list()
    ['Abies lasiocarpa', 'Quercus montana', 'Betula']
    >>> parse_names(["Fagus sylvatca"])["suggestion"].to_list()
    ['Fagus sylvatica']
    """
    series = names if isinstance(names, pd.Series) else pd.Series(list(names), dtype="object")
    text = series.astype("object").where(series.notna(), "").astype(str)
    codes, distinct = pd.factorize(text)
    rows = pd.DataFrame([_row(name) for name in distinct], columns=NAME_COLUMNS)
    result = rows.take(codes)
    result.index = series.index
    result["known_name"] = result["known_name"].astype(bool)
    return result
