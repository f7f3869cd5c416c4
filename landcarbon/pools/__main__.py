"""Renew the page of the pools: ``python -m landcarbon.pools`` from the top of the checkout."""

from __future__ import annotations

from pathlib import Path

from landcarbon.pools.registry import pools_page

if __name__ == "__main__":
    Path("docs/pools.md").write_text(pools_page(), encoding="utf-8", newline="\n")
