"""Tables that lay composite figures open: weight of the plots, model part, adjustment, and the models themselves."""

from __future__ import annotations

from collections.abc import Mapping, Sequence
from dataclasses import dataclass

import numpy as np
import pandas as pd

from landcarbon.estimate.composite_core import Composed
from landcarbon.estimate.composite_model import Fitted
from landcarbon.estimate.composite_plots import Evidence, Places
from landcarbon.estimate.tables import ALL

__all__ = ["DETAIL_COLUMNS", "MODEL_COLUMNS", "Detail", "detail_of", "join_details"]

DETAIL_COLUMNS = [
    "pool",
    "parcel",
    "plots",  # fewest plots of a part
    "direct",  # t C/ha, as the other figures; from one plot on
    "direct_se",  # as published; empty with fewer than two plots
    "smoothed_se",
    "synthetic",
    "weight_direct",  # gamma, 0 without plots
    "composite",  # before the benchmark
    "adjustment",
    "density",
    "density_se",
    "df",
]

MODEL_COLUMNS = [
    "pool",
    "model",
    "parcels",  # with plots
    "predicted",
    "method",  # of the model variance
    "model_variance",  # (t C/ha)^2; the mean where it differs between parcels
    "model_variance_se",
    "share_explained",
    "coefficients",
    "residual_df",
    "variance_power",  # of the mean, in the variance function
    "variance_scale",  # published sampling variances to the variance function
    "plots_compared",  # within parcels, or within strata
]


@dataclass(frozen=True)
class Detail:
    """What composite figures are made of.

    Attributes
    ----------
    parcels : DataFrame
        Keys of the survey, then ``DETAIL_COLUMNS``; one row per parcel and pool. Of ``all``, the sum
        of the pools, only the figure is stated.
    models : DataFrame
        Keys of the survey, then ``MODEL_COLUMNS``; one row per model.
    """

    parcels: pd.DataFrame
    models: pd.DataFrame


def detail_of(
    made: Composed, evidence: Evidence, places: Places, pools: Sequence[str], keys: Mapping[str, str]
) -> Detail:
    """Lay one survey, or one change, open.

    Parameters
    ----------
    made : Composed
        The figures.
    evidence : Evidence
        What the plots told.
    places : Places
        Parcels and strata.
    pools : sequence of str
        Without ``all``.
    keys : mapping
        survey, or since and until.
    """
    stacked = {
        name: np.stack([getattr(pool, name) for pool in made.pools], axis=1) for name in ("synthetic", "gamma", "value")
    }
    of_pools = {
        "plots": evidence.plots,
        "direct": made.direct,
        "direct_se": np.sqrt(made.direct_variance),
        "smoothed_se": np.sqrt(made.smoothed),
        "synthetic": stacked["synthetic"],
        "weight_direct": np.where(np.isfinite(made.value[:, :-1]), stacked["gamma"], np.nan),
        "composite": stacked["value"],
        "adjustment": made.value[:, :-1] - stacked["value"],
    }
    number = len(places.parcels)
    none = np.full(number, np.nan)
    columns = {name: np.column_stack([values, none]) for name, values in of_pools.items()}
    columns |= {"density": made.value, "density_se": np.sqrt(made.mse), "df": made.df}
    names = [*pools, ALL]
    frame = pd.DataFrame(
        {
            **{
                name: pd.array(np.full(number * len(names), key, dtype=object), dtype="str")
                for name, key in keys.items()
            },
            "pool": pd.array(np.tile(np.array(names, dtype=object), number), dtype="str"),
            "parcel": pd.array(np.repeat(np.array(places.parcels, dtype=object), len(names)), dtype="str"),
            **{name: values.ravel() for name, values in columns.items()},
        }
    )
    rows = [
        {**keys, "pool": name, **_model_row(model, at, pool.by_model), **_smoothing_row(made, evidence, number)}
        for number, (name, pool) in enumerate(zip(pools, made.pools, strict=True))
        for at, model in enumerate(pool.models)
    ]
    return Detail(frame, pd.DataFrame(rows, columns=[*keys, *MODEL_COLUMNS]))


def join_details(details: Sequence[Detail]) -> Detail:
    """Put details together, in the order given."""
    if not details:
        return Detail(pd.DataFrame(columns=DETAIL_COLUMNS), pd.DataFrame(columns=MODEL_COLUMNS))
    models = [detail.models for detail in details if len(detail.models)]
    return Detail(
        pd.concat([detail.parcels for detail in details], ignore_index=True),
        pd.concat(models, ignore_index=True) if models else details[0].models,
    )


def _model_row(model: Fitted, at: int, by_model: np.ndarray) -> dict[str, object]:
    fit = model.fit
    return {
        "model": "strata and rasters" if at else "strata",
        "parcels": len(model.rows),
        "predicted": int((by_model == at).sum()),
        "method": "bound: variance between plots" if model.bound else fit.method,
        "model_variance": float(fit.refvar.mean()),
        "model_variance_se": np.nan if model.bound else float(np.sqrt(fit.refvar_variance)),
        "share_explained": model.share_explained,
        "coefficients": "; ".join(f"{n or 'all'} {b:.6g}" for n, b in zip(model.columns, fit.beta, strict=True)),
        "residual_df": fit.residual_df,
    }


def _smoothing_row(made: Composed, evidence: Evidence, pool: int) -> dict[str, object]:
    return {
        "variance_power": float(evidence.power[pool]),
        "variance_scale": float(made.scale[pool]),
        "plots_compared": "within parcels" if evidence.within[pool] else "within strata",
    }
