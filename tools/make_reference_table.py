"""Write docs/reference-cases.md: every reference case of the estimates, what is expected and what the program gives.

Usage: python tools/make_reference_table.py [REFERENCE]

REFERENCE is the folder with the open reference data. Without it the lines of the cases whose data stay outside the
project are kept as they stand in the page.
"""

from __future__ import annotations

import sys
from collections.abc import Iterable
from pathlib import Path
from typing import Any

ROOT = Path(__file__).resolve().parent.parent
sys.path[:0] = [str(ROOT), str(ROOT / "tests")]

import numpy as np  # noqa: E402
from reference_cases import LEFT_OUT, MUST_DIFFER, Line, lines  # noqa: E402
from reference_io import Case, inside, outside, outside_names, printed, value_of  # noqa: E402

PAGE = ROOT / "docs" / "reference-cases.md"
SHOWN = 4  # values of a longer list

HEAD = """# Reference cases of the estimates

Made by `tools/make_reference_table.py`; do not edit by hand.

Every case is computed with the program's own functions and held against a result from outside the project:

- **published** (PS, PM): worked examples printed in publications. Ours must equal the printed digits. How inputs and
  results are known stands beside the source: *read* in the publication, *secondary* (seen quoted elsewhere), or
  *memory* (recalled, not seen).
- **computed** (A): invented samples run through general-purpose statistics packages, named with version and call. Ours
  must agree to 1e-6 relative.

*Form* says which of several estimators or variances the line shows. "default" is what the program does unless told
otherwise; other forms name the default. Quantities marked *must differ* are what a typical mistake gives: ours is the
right figure in its place, and the check fails if the two agree. *not answered* lines say why.

Data of cases marked *outside* come under licences of their own or were seen in copies only: they are not part of the
project and were read from the reference folder.

"""

COLUMNS = ("case", "what", "source (how known)", "quantity", "expected", "ours", "form", "agreement")


def number(value: float, digits: int = 7) -> str:
    """Write one number, short."""
    if np.isnan(value):
        return "none"
    text = f"{value:.{digits}g}"
    if "e" in text and abs(value) >= 1:
        text = f"{value:.0f}"
    return "0" if text in ("-0", "0") else text


def values(array: np.ndarray, shape: Iterable[str]) -> str:
    """Write the numbers of a list; of a long one the first and how many."""
    texts = list(shape)
    if array.ndim == 0:
        return texts[0]
    more = f" … ({array.size} values)" if array.size > SHOWN else ""
    return "; ".join(texts[:SHOWN]) + more


def expected_text(leaf: Any) -> str:
    """Write expected numbers; printed ones with their decimals."""
    array = value_of(leaf)
    flat = array.ravel().tolist()
    if printed(leaf):
        return values(array, (f"{value:.{leaf['decimals']}f}" for value in flat))
    return values(array, map(number, flat))


def ours_text(ours: Any, leaf: Any) -> str:
    """Write our numbers; beside printed ones with one digit more."""
    if ours is None:
        return "–"
    array = np.asarray(ours, dtype=float)
    flat = array.ravel().tolist()
    if printed(leaf):
        return values(array, (f"{value:.{leaf['decimals'] + 1}f}" for value in flat))
    return values(array, map(number, flat))


def row(line: Line, first: bool) -> str:
    """Write one line of the table; what and source stand in the first line of a case."""
    case = line.case
    apart = "; outside: read from the reference folder" if case.outside else ""
    cells = (
        case.id,
        case.title if first else "",
        f"{case.source} ({case.known}{apart})" if first else "",
        f"`{line.quantity}`",
        expected_text(line.expected),
        ours_text(line.ours, line.expected),
        line.form,
        line.agreement,
    )
    return "| " + " | ".join(" ".join(str(cell).replace("|", "\\|").split()) for cell in cells) + " |"


def rows_of(case: Case) -> list[str]:
    """Write the lines of a case."""
    return [row(line, not number) for number, line in enumerate(lines(case))]


def kept(page: str) -> dict[str, list[str]]:
    """Find the lines of the page as it stands, by case."""
    found: dict[str, list[str]] = {}
    for text in page.splitlines():
        cells = text.split(" | ")
        if text.startswith("| ") and len(cells) == len(COLUMNS):
            found.setdefault(cells[0].removeprefix("| "), []).append(text)
    return found


def summary(rows: list[str]) -> str:
    """Count cases and lines."""
    cells = [text.removesuffix(" |").split(" | ") for text in rows]
    forms, ends = [cell[6] for cell in cells], [cell[7] for cell in cells]
    differ, left = forms.count(MUST_DIFFER), forms.count(LEFT_OUT)
    bad = ends.count("NO")
    cases = len({cell[0] for cell in cells})
    return (
        f"{cases} cases with {len(rows)} results: {len(rows) - differ - left - bad} agree, {differ} typical mistakes "
        f"differ as they must, {left} are not answered, {bad} disagree.\n\n"
    )


def page(reference: Path | None) -> str:
    """Make the text of the page.

    Parameters
    ----------
    reference : Path or None
        Folder with the open reference data; None keeps the lines of the cases outside the project.
    """
    found = {name: rows_of(case) for name, case in inside().items()}
    if reference is not None:
        found |= {name: rows_of(case) for name, case in outside(reference).items()}
    else:
        old = kept(PAGE.read_text(encoding="utf-8")) if PAGE.is_file() else {}
        found |= {name: old.get(name, []) for name in outside_names()}
    rows = [text for name in sorted(found, key=order) for text in found[name]]
    table = ["| " + " | ".join(COLUMNS) + " |", "|" + "---|" * len(COLUMNS), *rows]
    return HEAD + summary(rows) + "\n".join(table) + "\n"


def order(name: str) -> tuple[int, str]:
    """Sort published cases first."""
    kinds = ("PS", "PM", "A")
    return kinds.index(name.split("-")[0]), name


def main(arguments: list[str]) -> None:
    """Write the page."""
    PAGE.write_text(page(Path(arguments[0]) if arguments else None), encoding="utf-8")


if __name__ == "__main__":
    main(sys.argv[1:])
