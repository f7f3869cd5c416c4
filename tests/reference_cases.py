"""Every reference case with the program's answer: what the page and the tests are made from."""

from __future__ import annotations

from collections.abc import Iterator
from dataclasses import dataclass
from typing import Any

# the modules register their answers
import reference_assisted  # noqa: F401
import reference_change  # noqa: F401
import reference_designs  # noqa: F401
import reference_planning  # noqa: F401
import reference_schools  # noqa: F401
from reference_io import ADAPTERS, UNCOVERED, Answer, Case, agreement, agrees, results

MUST_DIFFER = "must differ"
LEFT_OUT = "not answered"


@dataclass(frozen=True)
class Line:
    """One result of one case."""

    case: Case
    quantity: str
    expected: Any
    ours: Any
    form: str
    agreement: str
    good: bool


def answer(case: Case) -> Answer:
    """The program's answer; empty for a case that nothing answers."""
    return ADAPTERS[case.id](case) if case.id in ADAPTERS else Answer()


def lines(case: Case) -> Iterator[Line]:
    """Hold every result of a case against the program's answer."""
    given, wanted = answer(case), results(case)
    unknown = {*given.ours, *given.differs, *given.left_out} - set(wanted)
    if unknown:
        raise KeyError(f"{case.id}: {', '.join(sorted(unknown))} is no result of the case")
    for path, leaf in wanted.items():
        if path in given.ours:
            ours = given.ours[path]
            yield Line(case, path, leaf, ours, given.form[path], agreement(leaf, ours), agrees(leaf, ours))
        elif path in given.differs:
            ours = given.differs[path]
            good = not agrees(leaf, ours)
            yield Line(case, path, leaf, ours, MUST_DIFFER, "differs" if good else "NO", good)
        else:
            reason = given.left_out.get(path, UNCOVERED.get(case.id, ""))
            yield Line(case, path, leaf, None, LEFT_OUT, reason, bool(reason))
