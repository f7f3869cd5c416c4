"""Write the documentation page of the project file: ``python -m landcarbon.read [FILE]``."""

from __future__ import annotations

import sys
from pathlib import Path

from landcarbon.read.page import inventory_page

__all__ = ["main"]


def main() -> None:
    """Write the page to the file named, or to ``docs/inventory-file.md`` below the current folder."""
    target = Path(sys.argv[1]) if len(sys.argv) > 1 else Path("docs", "inventory-file.md")
    target.write_text(inventory_page(), encoding="utf-8", newline="\n")


if __name__ == "__main__":
    main()
