"""Faults of a project file, gathered and told all at once."""

from __future__ import annotations

from dataclasses import dataclass
from typing import Any

from pydantic import ValidationError

from landcarbon.errors import SettingsError
from landcarbon.inventory.locate import Path, line_of
from landcarbon.inventory.nearest import suggestion
from landcarbon.inventory.reference import choices_of, keys_below, keys_of_kinds, places_of

__all__ = ["Fault", "faults_of", "raise_faults"]


@dataclass(frozen=True)
class Fault:
    """One thing wrong: the key, what, and what to do."""

    path: Path
    what: str
    remedy: str = ""


_WANTED = {
    "string_type": "text in quotes is wanted",
    "float_type": "a number is wanted",
    "float_parsing": "a number is wanted",
    "int_type": "a whole number is wanted",
    "int_from_float": "a whole number is wanted",
    "bool_type": "true or false is wanted",
    "list_type": "a list in square brackets is wanted",
    "dict_type": "a table is wanted",
    "model_type": "a table is wanted",
    "model_attributes_type": "a table is wanted",
    "date_type": "a date is wanted, e.g. 2014-05-31",
    "finite_number": "a finite number is wanted",
}


def faults_of(error: ValidationError, raw: dict[str, Any]) -> list[Fault]:
    """Turn the errors of a validation into faults in plain words.

    Parameters
    ----------
    error : ValidationError
        What pydantic found.
    raw : dict
        The settings as read from the file.
    """
    found: dict[tuple[Path, str], Fault] = {}
    for detail in error.errors(include_url=False):
        path = _real_path(detail["loc"], raw)
        fault = _fault(path, detail, raw)
        # A choice of types gives one error for each; the first one is enough.
        found.setdefault((path, "" if detail["type"] in _WANTED else fault.what), fault)
    return list(found.values())


def _real_path(loc: tuple[str | int, ...], raw: Any) -> Path:
    """Drop the parts that name a branch of the model rather than a key of the file."""
    path: Path = ()
    for index, part in enumerate(loc):
        inside = (isinstance(raw, dict) and part in raw) or (isinstance(raw, list) and part in range(len(raw)))
        if inside:
            raw = raw[part]
            path = (*path, part)
        elif isinstance(raw, dict) and index == len(loc) - 1:
            path = (*path, part)
    return path


def _fault(path: Path, detail: Any, raw: dict[str, Any]) -> Fault:
    kind, context, value = detail["type"], detail.get("ctx", {}), detail.get("input")
    if kind == "missing":
        return Fault(path, "this key is missing", _accepted_below(path))
    if kind == "extra_forbidden":
        return Fault(path, "unknown key", _known_key(path, raw))
    if kind == "literal_error":
        return Fault(path, f"{value!r} is not accepted", f"Accepted: {context['expected']}.")
    if kind == "union_tag_not_found":
        return Fault((*path, "kind"), "this key is missing", f"Accepted: {_kinds()}.")
    if kind == "union_tag_invalid":
        return Fault((*path, "kind"), f"{context['tag']!r} is not accepted", f"Accepted: {_kinds()}.")
    if kind == "value_error":
        return Fault(path, str(context["error"]))
    if kind in _WANTED:
        return Fault(path, f"{_shown(value)} is given, but {_WANTED[kind]}")
    return Fault(path, f"{_shown(value)}: {detail['msg'][:1].lower()}{detail['msg'][1:]}")


def _shown(value: object) -> str:
    text = repr(value)
    return text if len(text) <= 60 else text[:57] + "..."


def _kinds() -> str:
    return ", ".join(keys_of_kinds())


def _accepted_below(path: Path) -> str:
    if path == ("equations", "region") or path == ("equations",):
        regions = ", ".join(_regions())
        key = "region" if len(path) == 2 else "a table [equations] with region"
        return f"Give {key} = one of {regions}."
    if path == ("plots",):
        return "Give a table [plots] with file and design."
    if path == ("surveys",):
        return "Give at least one survey, e.g. [surveys.2024] with trees = 'trees_2024.csv'."
    choices = choices_of(path)
    return f"Accepted: {choices}." if choices else ""


def _regions() -> list[str]:
    from typing import get_args

    from landcarbon.inventory.models import Region

    return list(get_args(Region))


def _known_key(path: Path, raw: dict[str, Any]) -> str:
    word = str(path[-1])
    known = keys_below(path[:-1])
    if path[:-1] == ("plots", "design"):
        kind = str(raw["plots"]["design"]["kind"])
        of_kind = keys_of_kinds()
        known = of_kind[kind]
        owners = [repr(name) for name, keys in of_kind.items() if word in keys]
        if owners:
            takes = ", ".join(known) or "no further key"
            return f"It belongs to kind {' or '.join(owners)}; kind {kind!r} takes {takes}."
    near, elsewhere = suggestion(word, known), places_of(word)
    if near and len(elsewhere) != 1:  # a key that exists in one other table only was meant for that table
        return near
    if elsewhere:
        return f"The key {word} belongs under [{'] or ['.join(elsewhere)}]."
    return f"Known here: {', '.join(known)}." if known else ""


def raise_faults(faults: list[Fault], file: str, lines: dict[Path, int]) -> None:
    """Raise one error that tells every fault with its key and line.

    Raises
    ------
    SettingsError
        If there is any fault.
    """
    if not faults:
        return
    placed = sorted(((line_of(lines, fault.path) or 1, index, fault) for index, fault in enumerate(faults)))
    if len(placed) == 1:
        line, _, fault = placed[0]
        raise SettingsError(fault.what, where=f"{file}, line {line}, {_dotted(fault.path)}", remedy=fault.remedy)
    told = [
        f"  line {line}, {_dotted(fault.path)}: {fault.what}." + (f" {fault.remedy}" if fault.remedy else "")
        for line, _, fault in placed
    ]
    raise SettingsError("\n".join([f"{len(told)} faults", *told]), where=file)


def _dotted(path: Path) -> str:
    text = ""
    for part in path:
        text += f"[{part}]" if isinstance(part, int) else f".{part}"
    return text.lstrip(".") or "the file"
