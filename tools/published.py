"""Printed values and the values the catalogue gives for them."""

from __future__ import annotations

from pathlib import Path

import numpy as np
import pandas as pd

from allometry.catalogue import Catalogue

DATA = Path(__file__).resolve().parent.parent / "tests" / "data"
INPUTS = ("drc_cm", "height_m", "stress")


def read_cases() -> pd.DataFrame:
    """Read the printed values, one row each; several equation ids joined by + are added (cumulative curves)."""
    return pd.read_csv(DATA / "published_equation_values.csv")


def computed(catalogue: Catalogue, case: pd.Series) -> float:
    """Compute one printed value.

    Parameters
    ----------
    catalogue
        The catalogue.
    case
        A row of :func:`read_cases`.

    Returns
    -------
    float
        Value in the printed unit, without the correction for the mean.
    """
    given = {name: case[name] for name in INPUTS if pd.notna(case[name])}
    dbh = None if pd.isna(case["dbh_cm"]) else case["dbh_cm"]
    return float(
        sum(
            catalogue.value(name, dbh, correct=False, **given)[0]  # type: ignore[arg-type]
            for name in str(case["equation_ids"]).split("+")
        )
    )


def allowed(case: pd.Series) -> float:
    """Return the tolerance of a case in the printed unit."""
    relative = case["tolerance_kind"] == "relative"
    return float(case["tolerance"] * (case["expected"] if relative else 1.0))


def cross_table(catalogue: Catalogue) -> pd.DataFrame:
    """Compare the national equations for one species across publications.

    Parameters
    ----------
    catalogue
        The catalogue.

    Returns
    -------
    DataFrame
        Per species of lambert2005 or ung2008 and dbh: mass [kg] of the species equation on dbh, of the group of
        jenkins2003 and of the taxon of chojnacky2014, and the published RMSE of the group in ln units.
    """
    cases = pd.read_csv(DATA / "enfor_cases.csv")
    cases["source"] = cases["equation_id"].str.extract(r"^([a-z]+\d+)")[0]
    one = cases[~cases["equation_id"].str.contains("_DH_")].drop_duplicates(["taxon", "source"])
    wide = one.pivot(index="taxon", columns="source", values="equation_id")
    wide["species_equation"] = wide["ung2008"].fillna(wide["lambert2005"])
    wide = wide.dropna(subset=["species_equation", "jenkins2003", "chojnacky2014"])
    rows = []
    for taxon, ids in wide.iterrows():
        for dbh in DIAMETERS:
            names = [ids["species_equation"], ids["jenkins2003"], ids["chojnacky2014"]]
            found = [catalogue.evaluate(name, dbh).iloc[0] for name in names]
            if not any(row["out_of_range"] for row in found):
                sd = catalogue.row(ids["jenkins2003"]).residual_sd
                rows.append((taxon, dbh, *(row["biomass_kg"] for row in found), sd))
    table = pd.DataFrame(
        rows, columns=["taxon", "dbh_cm", "species_kg", "jenkins2003_kg", "chojnacky2014_kg", "rmse_ln"]
    )
    for column in ("species", "chojnacky2014"):
        table[f"ln_{column}"] = np.log(table[f"{column}_kg"] / table["jenkins2003_kg"])
    return table


DIAMETERS = (10.0, 20.0, 30.0, 40.0)
