"""Linear models as a table, and which one holds in which parcel."""

from __future__ import annotations

import numpy as np
import pandas as pd

from landcarbon.raster.predict import LinearModel

__all__ = ["COEFFICIENT_COLUMNS", "INTERCEPT", "model_of"]

#: One row per survey, stratum (blank: the whole inventory) and term.
COEFFICIENT_COLUMNS = ["survey", "stratum", "term", "value"]
INTERCEPT = "intercept"


def model_of(coefficients: pd.DataFrame, survey: str, stratum: np.ndarray) -> tuple[LinearModel, np.ndarray] | None:
    """Return the model of a survey and the variant that holds in each parcel.

    Parameters
    ----------
    coefficients : DataFrame
        ``COEFFICIENT_COLUMNS``; a term is ``intercept`` or the name of a raster.
    survey : str
        Survey.
    stratum : ndarray of str
        Of each parcel.

    Returns
    -------
    model, variant : LinearModel, ndarray of int
        A stratum without a model of its own takes that of the whole inventory, else -1. None if the survey has no
        model.
    """
    own = coefficients[coefficients["survey"].astype("str") == str(survey)]
    if own.empty:
        return None
    wide = own.pivot_table(index="stratum", columns="term", values="value", sort=False, observed=True)
    wide = wide.fillna(0.0)
    # Without a slope anywhere a raster has no say, so it need not be there and its gaps do not matter.
    names = tuple(str(term) for term in wide.columns if term != INTERCEPT and (wide[term] != 0).any())
    intercept = wide[INTERCEPT].to_numpy() if INTERCEPT in wide else np.zeros(len(wide))
    model = LinearModel(names, intercept, wide[list(names)].to_numpy(dtype="float64"))
    index = pd.Index(wide.index.astype("str"))
    variant, common = index.get_indexer(np.asarray(stratum, dtype=object)), index.get_indexer([""])[0]
    return model, np.where(variant < 0, common, variant)
