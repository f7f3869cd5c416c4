"""Answer to the reference case of a documented stratified sample with two dates."""

from __future__ import annotations

import numpy as np
import pandas as pd
from reference_designs import N_MINUS_H
from reference_io import Answer, Case, adapter
from reference_sample import FINITE, joint

from landcarbon.estimate.error_combination import ratio_of_estimates
from landcarbon.estimate.regression import regression_estimator


@adapter("A-API-1")
def documented_schools(case: Case) -> Answer:
    data = pd.DataFrame(case.inputs["columns"])
    population = data.groupby("stype")["pw"].sum().to_dict()
    total = case.inputs["population"]["N"]
    yes, no = (data["awards"] == name for name in ("Yes", "No"))
    columns = {
        "api00": data["api00"],
        "api99": data["api99"],
        "enroll": data["enroll"],
        "y no": data["api00"] * no,
        "y yes": data["api00"] * yes,
        "no": no.astype(float),
        "yes": yes.astype(float),
        "change": data["api00"] - data["api99"],
    }
    found = joint(columns, data["stype"], population, population)
    at = {name: number for number, name in enumerate(columns)}
    mean, cov, se = found.mean, found.cov, found.se

    def ratio(top: str, bottom: str) -> tuple[float, float]:
        i, j = at[top], at[bottom]
        value, error = ratio_of_estimates(mean[i], mean[j], cov[i, i], cov[j, j], cov[i, j])
        return float(value), float(error)

    groups = [ratio("y no", "no"), ratio("y yes", "yes")]
    slope = np.zeros(len(mean))
    for sign, name, (value, _) in ((-1, "no", groups[0]), (1, "yes", groups[1])):
        slope[at[f"y {name}"]], slope[at[name]] = sign / mean[at[name]], -sign * value / mean[at[name]]
    answer = Answer()
    pairs = {
        "mean_api00": (mean[at["api00"]], se[at["api00"]]),
        "total_enroll": (total * mean[at["enroll"]], total * se[at["enroll"]]),
        "ratio_api00_api99": ratio("api00", "api99"),
        "by_awards.contrast_yes_minus_no": (groups[1][0] - groups[0][0], np.sqrt(slope @ cov @ slope)),
        "change_api00_minus_api99": (mean[at["change"]], se[at["change"]]),
        "by_awards": tuple(zip(*groups, strict=True)),
        "greg_on_stype_and_api99": schools_by_regression(case, data, population),
    }
    for name, (value, error) in pairs.items():
        answer.give({"mean": value, "se": error}, FINITE, f"{name}.")
    answer.give({"vcov_api00_api99": cov[:2, :2]}, FINITE)
    return answer.give({"df": len(data) - len(population)}, N_MINUS_H)


def schools_by_regression(case: Case, data: pd.DataFrame, population: dict[str, float]) -> tuple[float, float]:
    names = list(population)
    codes = pd.Categorical(data["stype"], categories=names).codes.astype(np.int64)
    known = case.inputs["population"]
    fit = np.array([known["N"] - known["stypeH"] - known["stypeM"], known["stypeH"], known["stypeM"]])
    x = np.column_stack([codes == number for number in range(len(names))] + [data["api99"]]).astype(float)
    x_mean = np.append(fit, known["total_api99"]) / known["N"]
    found = regression_estimator(
        data["api00"].to_numpy(dtype=float),
        x,
        data["pw"].to_numpy(dtype=float),
        codes,
        x_mean,
        sampled=np.bincount(codes) / fit,
    )
    return float(found.mean[0]), float(np.sqrt(found.variance[0]))
