"""Renew the page of the factors: ``python -m landcarbon.factors [FILE]`` from the top of the checkout."""

from __future__ import annotations

import sys
from pathlib import Path

from landcarbon.factors.page import factors_page

__all__ = ["main"]


def main() -> None:
    """Write the page to the file named, or to ``docs/factors.md`` below the current folder."""
    target = Path(sys.argv[1]) if len(sys.argv) > 1 else Path("docs", "factors.md")
    target.write_text(factors_page(), encoding="utf-8", newline="\n")


if __name__ == "__main__":
    main()
