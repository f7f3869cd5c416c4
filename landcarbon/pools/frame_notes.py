"""What to tell about frame samples that are counted: doubtful rows, carbon fractions, layers, sums."""

from __future__ import annotations

from typing import TYPE_CHECKING

import numpy as np
import pandas as pd

from landcarbon.findings import empty_findings, join_findings, make_findings
from landcarbon.pools import defaults
from landcarbon.pools.frame_mass import DEFAULT, DRY, G_PER_KG, ORGANIC, FrameKeys, FrameRows

if TYPE_CHECKING:
    from landcarbon.pools.frames import FrameOptions

__all__ = ["basis_findings", "beyond_any_forest", "doubtful_rows", "layers_not_taken"]


def doubtful_rows(
    samples: pd.DataFrame, keys: FrameKeys, rows: FrameRows, counted: np.ndarray, table: str
) -> pd.DataFrame:
    """Warn of rows that are counted but look wrong."""
    heavier = rows.given["sub_fresh_g"] > rows.given["fresh_kg"] * G_PER_KG
    return join_findings(
        [
            make_findings(
                "sub-sample above sample",
                samples.loc[counted & heavier],
                severity="warning",
                table=table,
                column="sub_fresh_g",
                message="The sub-sample weighs more than the sample it was taken from. The row is counted as it is.",
                remedy="Check the units: the sample is in kg, the sub-sample in g.",
            ),
            make_findings(
                "frame and layer repeated",
                samples.loc[counted & keys.repeated],
                severity="warning",
                table=table,
                column="frame",
                message="An earlier row has the same frame and layer. Both are counted, each with its area.",
                remedy="Delete the row if it is a copy; if the sample filled two bags, add them up in one row.",
            ),
        ]
    )


def basis_findings(
    samples: pd.DataFrame, rows: FrameRows, counted: np.ndarray, options: FrameOptions, table: str
) -> pd.DataFrame:
    """Say where it is not plain whether a carbon fraction refers to dry or to organic matter."""
    has_ash = ~np.isnan(rows.given["ash_share"])
    own = ~np.isnan(rows.given["carbon_fraction"])
    stated = options.carbon_fraction is not None or bool(options.carbon_fractions)
    found = []
    if options.carbon_basis == ORGANIC:
        found.append(
            _per_survey(
                samples,
                counted & ~has_ash & (own | stated),
                rule="ash missing",
                severity="warning",
                table=table,
                column="ash_share",
                message="Rows without an ash share although carbon fractions refer to organic matter: {count}. They "
                "take the default fraction of dry matter.",
                remedy="Enter the ash share of the samples.",
            )
        )
    if not options.carbon_basis:
        found.append(
            _per_survey(
                samples,
                counted & has_ash & (own | (rows.fraction_kind < DEFAULT)),
                rule="carbon basis not stated",
                severity="warning",
                table=table,
                column="carbon_fraction",
                message="Rows with both an ash share and a given carbon fraction: {count}. Fractions of rows are taken "
                "per dry matter (ash not deducted), those of the settings per organic matter (ash deducted).",
                remedy=f'State carbon_basis = "{DRY}" or "{ORGANIC}" in [{table}].',
            )
        )
    if options.carbon_basis == DRY:
        found.append(
            _per_survey(
                samples,
                counted & has_ash & (rows.fraction_kind < DEFAULT),
                rule="ash not needed",
                severity="note",
                table=table,
                column="ash_share",
                message="Rows whose ash share is not used, as the carbon fraction refers to dry matter: {count}.",
                remedy="",
            )
        )
    return join_findings(found)


def _per_survey(
    samples: pd.DataFrame,
    hit: np.ndarray,
    *,
    rule: str,
    severity: str,
    table: str,
    column: str,
    message: str,
    remedy: str,
) -> pd.DataFrame:
    if not hit.any():
        return empty_findings()
    counts = samples.loc[hit, "survey"].astype("str").value_counts(sort=False)
    return join_findings(
        make_findings(
            rule,
            severity=severity,
            table=table,
            column=column,
            survey=survey,
            message=message.format(count=count),
            remedy=remedy,
        )
        for survey, count in counts.items()
    )


def layers_not_taken(
    samples: pd.DataFrame, keys: FrameKeys, counted: np.ndarray, taken: dict[str, np.ndarray], table: str
) -> pd.DataFrame:
    """Note plots with frames that lack a layer other plots have."""
    if len(taken) < 2:
        return empty_findings()
    sampled = np.bincount(keys.visit[counted], minlength=len(keys.first_row)) > 0
    visits = samples.iloc[keys.first_row]
    found = [
        _per_survey(
            visits,
            sampled & ~has,
            rule="layer not taken",
            severity="note",
            table=table,
            column="layer",
            message=f"Plots with frames but without a row of {name}: {{count}}. They count as not measured for {name}, "
            "not as zero.",
            remedy="Enter a row with dry mass 0 where the layer was looked for and not found.",
        )
        for name, has in taken.items()
    ]
    return join_findings(found)


def beyond_any_forest(parts: pd.DataFrame, table: str) -> pd.DataFrame:
    """Warn of plots with more litter than the largest default stock."""
    if table != "litter":
        return empty_findings()
    stocks = defaults.default_stock_table()
    largest = float(stocks.loc[stocks["pool"] == "litter", "high"].max())
    beyond = parts[parts["density_t_c_ha"] > largest]
    return make_findings(
        "litter beyond any forest",
        beyond,
        severity="warning",
        table=table,
        column="density_t_c_ha",
        message=f"More than {largest:g} t C/ha, the largest litter stock the IPCC prints. It is counted as it is.",
        remedy="Check the units of mass (kg) and of the frame area (m2).",
    )
