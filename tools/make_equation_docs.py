"""Write the screening result and the equations page.

Usage: python tools/make_equation_docs.py [REFERENCE]

REFERENCE is the folder with the open reference data; without it the part on weighed trees stays as it is in the page.
"""

from __future__ import annotations

import sys
from pathlib import Path

ROOT = Path(__file__).resolve().parent.parent
sys.path[:0] = [str(ROOT), str(ROOT / "tools")]

from enfor import enfor_table  # noqa: E402
from equation_page import ENFOR_END, ENFOR_START, page  # noqa: E402

from allometry.catalogue import load_catalogue  # noqa: E402
from allometry.screening import screen  # noqa: E402

PAGE = ROOT / "docs" / "equations.md"
SCREENED = ROOT / "allometry" / "equations" / "screened.csv"


def main(arguments: list[str]) -> None:
    """Write both files."""
    screen(load_catalogue()).to_csv(SCREENED, index=False, lineterminator="\n")
    load_catalogue.cache_clear()
    catalogue = load_catalogue()
    weighed = enfor_table(catalogue, Path(arguments[0])) if arguments else None
    text = page(catalogue, weighed)
    if weighed is None and PAGE.is_file():
        old = PAGE.read_text(encoding="utf-8")
        kept = old[old.index(ENFOR_START) : old.index(ENFOR_END)]
        text = text[: text.index(ENFOR_START)] + kept + text[text.index(ENFOR_END) :]
    PAGE.write_text(text, encoding="utf-8")


if __name__ == "__main__":
    main(sys.argv[1:])
