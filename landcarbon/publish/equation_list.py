"""Searching everything published that the program can use: tree equations, root models, height curves."""

from __future__ import annotations

from collections.abc import Iterable
from dataclasses import asdict, dataclass
from difflib import get_close_matches
from typing import Any

import pandas as pd

from allometry.catalogue import Catalogue, load_catalogue
from allometry.heights import height_forms
from allometry.roots import default_model, root_models, root_rows
from landcarbon.errors import UserError
from landcarbon.inventory.nearest import suggestion

__all__ = ["Found", "find_published", "one_published"]

_ANYWHERE = "any"  # region of equations that serve everywhere
_BELOW_GROUND = "bgb"
_HEIGHT = "height"
_ROOT_WORDS = "root roots below-ground below_ground"
_FORM_WORDS = "height heights curve form"


@dataclass(frozen=True)
class Found:
    """What a search found.

    Attributes
    ----------
    equations : DataFrame
        Rows of the catalogue.
    roots : DataFrame
        Root models: model_id, level, kind, known, source_key, title.
    forms : DataFrame
        Forms of height curves that can be fitted to measured trees: form, title, formula, known.
    """

    equations: pd.DataFrame
    roots: pd.DataFrame
    forms: pd.DataFrame

    @property
    def empty(self) -> bool:
        """Whether nothing was found."""
        return self.equations.empty and self.roots.empty and self.forms.empty


def find_published(text: str = "", *, region: str | None = None, component: str | None = None) -> Found:
    """Search by words, all of which must occur, in any order, upper or lower case.

    Parameters
    ----------
    text : str
        Looked for in ids, taxa, publications, countries and notes. Without it root models and forms of height curves
        are listed only if ``component`` asks for them.
    region : str, optional
        One of the five regions; equations that serve anywhere are found too, and of the root models the region's
        default.
    component : str, optional
        A component of the catalogue, e.g. ``agb``.

    Raises
    ------
    UserError
        If there is no such region or component.
    """
    catalogue = load_catalogue()
    table = catalogue.table
    region = _known(region, sorted(set(table["region"]) - {_ANYWHERE}), "region")
    component = _known(component, sorted(set(table["component"])), "component")
    words = text.casefold().split()
    equations = catalogue.find(region=region, component=component)
    roots, forms = root_models(), height_forms()
    if region is not None:
        roots = roots[roots["model_id"] == default_model(region)["model_id"]]
    if component is None and not words and region is None:
        roots, forms = roots.iloc[:0], forms.iloc[:0]
    if component not in (None, _BELOW_GROUND):
        roots = roots.iloc[:0]
    if region is not None or component not in (None, _HEIGHT):
        forms = forms.iloc[:0]
    return Found(
        equations[_matches(_equation_texts(equations, catalogue), words)],
        roots[_matches(_joined(roots, roots.columns, _ROOT_WORDS), words)],
        forms[_matches(_joined(forms, ["form", "title", "formula", "source", "note"], _FORM_WORDS), words)],
    )


def one_published(name: str) -> tuple[str, list[tuple[str, object]]]:
    """Return everything known of one equation, root model or form of height curve.

    Parameters
    ----------
    name : str
        Its id.

    Returns
    -------
    kind : str
        What it is.
    facts : list of (name, value)
        Without what is not known.

    Raises
    ------
    UserError
        If there is nothing of that id.
    """
    catalogue = load_catalogue()
    models, forms = root_models().set_index("model_id", drop=False), height_forms().set_index("form", drop=False)
    known = [str(each) for each in (*catalogue.table["equation_id"], *models.index, *forms.index)]
    name = name.strip()
    if name not in known:
        name = {each.casefold(): each for each in known}.get(name.casefold(), name)
    if name in forms.index:
        return "form of height curve, fitted to the measured trees of an inventory", _facts(forms.loc[name].to_dict())
    if name in models.index:
        model = pd.Series(models.loc[name])
        return f"root model for {_level_words(str(model['level']))}", _root_facts(model, catalogue)
    if name not in known:
        near = get_close_matches(name, known, n=3, cutoff=0.6)
        hint = f"Did you mean {' or '.join(near)}?" if near else "Search by part of a species, genus or publication."
        raise UserError(f"no equation, root model or height curve has the id {name!r}", remedy=hint)
    equation = catalogue.row(name)
    facts = [*_facts(asdict(equation)), ("publication", _reference(catalogue, equation.source_key))]
    return ("height curve" if equation.component == _HEIGHT else "tree equation"), facts


def _known(given: str | None, names: list[str], what: str) -> str | None:
    if given is None:
        return None
    tidy = given.strip().casefold().replace(" ", "_").replace("-", "_")
    if tidy in names:
        return tidy
    hint = suggestion(given, names)
    text = f"{hint} The {what}s are: {', '.join(names)}.".strip()
    raise UserError(f"there is no {what} {given!r}", where=f"--{what}", remedy=text)


def _equation_texts(equations: pd.DataFrame, catalogue: Catalogue) -> pd.Series:
    columns = ["equation_id", "taxon", "taxon_printed", "country", "component", "note", "source_key"]
    references = equations["source_key"].map({key: _reference(catalogue, key) for key in catalogue.sources})
    return _joined(equations, columns) + " " + references.str.casefold()


def _joined(table: pd.DataFrame, columns: Iterable[str], words: str = "") -> pd.Series:
    text = pd.Series(words, index=table.index, dtype="str")
    for name in columns:
        text = text + " " + table[name].astype("str")
    return text.str.casefold()


def _matches(texts: pd.Series, words: list[str]) -> pd.Series:
    keep = pd.Series(True, index=texts.index)
    for word in words:
        keep &= texts.str.contains(word, regex=False)
    return keep


def _reference(catalogue: Catalogue, key: str) -> str:
    return str(catalogue.sources.get(key, {}).get("reference", key))


def _level_words(level: str) -> str:
    return {"stand": "stands (t/ha of dry matter)", "tree": "single trees (kg of dry matter)"}[level]


def _facts(values: dict[Any, Any]) -> list[tuple[str, object]]:
    return [(str(name).replace("_", " "), value) for name, value in values.items() if not _missing(value)]


def _missing(value: object) -> bool:
    return value is None or value == "" or (isinstance(value, float) and pd.isna(value))


def _root_facts(model: pd.Series, catalogue: Catalogue) -> list[tuple[str, object]]:
    from allometry._data import read_data

    name = str(model["model_id"])
    facts = _facts(model.to_dict())
    rows = root_rows().set_index("model_id", drop=False)
    sets, ratios = read_data("root_sets"), read_data("root_tree_ratios")
    members = sets.loc[sets["set_id"] == name, ["part", "model_id"]]
    if len(members):
        for part, row_id in members.itertuples(index=False):
            facts.append((f"class ({part})", _class_words(rows.loc[row_id])))
        return facts
    shares = ratios[ratios["model_id"] == name]
    if len(shares):
        for share in shares.itertuples(index=False):
            facts.append((f"ratio ({share.part})", f"{share.row_id}, {share.where}; {share.note}".rstrip("; ")))
        return facts
    said = {label for label, _ in facts}
    facts += [(label, value) for label, value in _facts(rows.loc[name].to_dict()) if label not in said]
    if "agb min t ha" not in {label for label, _ in facts} and "agb max t ha" not in {label for label, _ in facts}:
        facts.append(("range of stand biomass", "none printed"))
    reference = _reference(catalogue, str(model["source_key"]))
    return facts if reference == model["source_key"] else [*facts, ("publication", reference)]


def _class_words(row: pd.Series) -> str:
    low, high = row["agb_min_t_ha"], row["agb_max_t_ha"]
    bounds = [f"from {low:g}" if pd.notna(low) else "", f"to {high:g}" if pd.notna(high) else ""]
    span = " ".join(filter(None, bounds))
    value = f"ratio {row['ratio']:g}" if pd.notna(row["ratio"]) else str(row["form"])
    return f"{row['model_id']}: {value}" + (f", stand biomass {span} t/ha" if span else "") + f" ({row['known']})"
