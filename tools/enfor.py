"""The open Canadian file of felled trees, brought to the form the comparison takes."""

from __future__ import annotations

from pathlib import Path

import pandas as pd

from allometry.catalogue import Catalogue
from allometry.comparison import compare

CASES = Path(__file__).resolve().parent.parent / "tests" / "data" / "enfor_cases.csv"


def read_trees(reference: Path) -> pd.DataFrame:
    """Read the file of trees.

    Parameters
    ----------
    reference
        Folder with the open reference data.

    Returns
    -------
    DataFrame
        ``label`` (English name in the file), ``province``, ``dbh_cm``, ``height_m``, ``mass_kg`` (total above ground).
    """
    raw = pd.read_csv(reference / "real" / "enfor" / "trees.csv.gz", encoding="latin-1")
    return pd.DataFrame(
        {
            "label": raw["Species_E"].str.strip(),
            "province": raw["Province"].str.upper(),
            "dbh_cm": raw["Dbh"],
            "height_m": raw["Height"],
            "mass_kg": raw["OM_total"],
        }
    )


def enfor_table(catalogue: Catalogue, reference: Path) -> pd.DataFrame:
    """Compare the North American equations with the felled trees of their species.

    Parameters
    ----------
    catalogue
        The catalogue.
    reference
        Folder with the open reference data.

    Returns
    -------
    DataFrame
        Columns of ``allometry.comparison.COLUMNS`` with ``taxon``, ``provinces``, ``printed_rmse_kg`` (of the
        publication, divisor n minus the number of parameters) and ``tolerance_percent``.
    """
    trees = read_trees(reference)
    cases = pd.read_csv(CASES)
    outside = trees[trees["province"] != "BC"]
    tables = []
    for (labels, provinces), part in cases.groupby(["label", "provinces"], sort=False):
        source = outside if provinces == "without British Columbia" else trees
        chosen = source[source["label"].isin(str(labels).split("; "))].assign(group=labels)
        result = compare(catalogue, chosen, part.rename(columns={"label": "group"}))
        tables.append(result.assign(**{k: part[k].to_numpy() for k in ("taxon", "provinces", "tolerance_percent")}))
    found = pd.concat(tables, ignore_index=True)
    printed = {e.equation_id: e.residual_sd for e in catalogue.equations if e.residual_scale == "kg"}
    found["printed_rmse_kg"] = found["equation_id"].map(printed)
    keys = cases["taxon"] + "|" + cases["equation_id"]
    return found.set_index(found["taxon"] + "|" + found["equation_id"]).loc[keys].reset_index(drop=True)
