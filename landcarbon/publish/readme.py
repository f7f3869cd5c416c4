"""The page of plain text that lies beside the results and says what each file and column is."""

from __future__ import annotations

from pathlib import Path

import jinja2

from landcarbon.publish.results import Results
from landcarbon.publish.words import CAUTIONS, POOL_NAMES, SIGN_RULE

__all__ = ["readme_text", "write_readme"]


def readme_text(results: Results) -> str:
    """Tell what the files and columns of a results folder are.

    Parameters
    ----------
    results : Results
        The run.

    Returns
    -------
    str
        One page of plain text.
    """
    # Plain text, not HTML: escaping would spoil names; the values are never taken for template code.
    environment = jinja2.Environment(
        loader=jinja2.PackageLoader("landcarbon.publish"),
        autoescape=False,
        keep_trailing_newline=True,
        undefined=jinja2.StrictUndefined,
    )
    present = set(results.stocks["pool"].astype("str"))
    pools = ", ".join(f"{pool} ({name})" for pool, name in POOL_NAMES.items() if pool in present)
    return environment.get_template("readme.txt.j2").render(
        title=f"Carbon of {' '.join(results.name.split()) or 'the inventory'}",
        opening=[
            "Written by landcarbon. Stocks are in tonnes of carbon (t C), densities in tonnes of carbon per hectare "
            "(t C/ha). The surveys are: " + ", ".join(results.surveys["survey"].astype("str")) + "."
        ],
        pools="the survey, and the pool: " + (pools or "none"),
        interval=results.interval_name,
        sign_rule=SIGN_RULE,
        area_method=results.area_method or "No areas were given.",
        marks=results.marks,
        cautions=CAUTIONS,
    )


def write_readme(results: Results, path: Path) -> None:
    """Write ``README.txt``.

    Parameters
    ----------
    results : Results
        The run.
    path : Path
        File to write.
    """
    path.write_text(readme_text(results), encoding="utf-8", errors="backslashreplace", newline="\n")
