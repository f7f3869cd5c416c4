"""Answers to reference cases of designs: simple, stratified, clusters, ratios, domains, pools."""

from __future__ import annotations

import numpy as np
import pandas as pd
from estimate_frames import (
    pick,
    plot_table,
    stocks,
    strata_table,
    survey_a,
    survey_a_tables,
    whole,
)
from reference_io import Answer, Case, adapter
from reference_sample import FINITE, finite, joint, one_row, sample_with

from landcarbon.estimate.adjusted_means import stratified_ratio
from landcarbon.estimate.error_combination import as_percent, combine_sum, ratio_of_estimates
from landcarbon.estimate.interval import limits
from landcarbon.estimate.sample_size import finite_population_factor, plots_in_area

NORMAL = "normal limits; default: t"
COMBINED = "combined ratio; default: separate"
N_MINUS_H = "n - H degrees of freedom; default: Satterthwaite"


def ends(estimate: float, se: float, df: float = np.inf, confidence: float = 0.95) -> list[float]:
    found = limits(estimate, se, df, confidence=confidence)
    return [float(found.low), float(found.high)]


# ---------------------------------------------------------------- simple random samples


@adapter("PS-01", "PS-02", "PS-03")
def simple_random_sample(case: Case) -> Answer:
    values, population = np.array(case.inputs.get("y", case.inputs.get("z"))), case.inputs["N"]
    n, row = len(values), one_row(values)
    mean, se, variance = row["density_t_c_ha"], row["density_se"], row["density_se"] ** 2 * len(values)
    found = {"mean": mean, "variance": variance, "se_no_fpc": se, "sum": n * mean}
    found["sum_of_squares"] = variance * (n - 1) + n * mean**2
    answer = Answer().give({name: value for name, value in found.items() if name in case.expected})
    answer.give({"se_with_fpc": se * finite(n, population)}, FINITE)
    if "ci95_normal" in case.expected:
        answer.give({"ci95_normal": ends(mean, se * finite(n, population))}, NORMAL)
    return answer


@adapter("A-SRS-1")
def simple_random_sample_of_plots(case: Case) -> Answer:
    given = case.inputs
    n, area, row = len(given["y"]), given["area_ha"], one_row(given["y"], given["area_ha"])
    fit = float(plots_in_area(area, given["plot_area_ha"]))
    mean, se = row["density_t_c_ha"], row["density_se"]
    low_high = ["density_low", "density_high"]
    ninety = whole(stocks(plot_table(given["y"]), strata_table({"S": area}), confidence=0.9)[0])
    answer = Answer().give(
        {
            "n": row["plots"],
            "N": fit,
            "mean": mean,
            "variance": se**2 * n,
            "se_no_fpc": se,
            "total": row["stock_t_c"],
            "se_total_no_fpc": row["stock_se"],
            "df": row["df"],
            "ci95_t_no_fpc": row[low_high],
            "ci90_t_no_fpc": ninety[low_high],
            "cv_percent": float(as_percent(se * np.sqrt(n), mean)),
        }
    )
    return answer.give(
        {"se_fpc": se * finite(n, fit), "se_total_fpc": row["stock_se"] * finite(n, fit)},
        FINITE,
    )


@adapter("A-SRS-2")
def constant_values_and_one_plot(case: Case) -> Answer:
    same, alone = one_row(case.inputs["constant"]), one_row([case.inputs["single"]])
    return (
        Answer()
        .give(
            {
                "constant.mean": same["density_t_c_ha"],
                "constant.se": same["density_se"],
                "single.se": alone["density_se"],
            }
        )
        .leave_out({"single.mean": "refused: one plot has no error, so its mean is not given out"})
    )


@adapter("PM-03")
def moments_of_a_simple_sample(case: Case) -> Answer:
    given = case.inputs
    row = one_row(sample_with(given["n"], given["mean"], given["s"] ** 2), given["N"])
    root = finite(given["n"], given["N"])
    answer = Answer().give({"mean": row["density_t_c_ha"], "total": row["stock_t_c"]})
    return answer.give({"se": row["density_se"] * root, "se_total": row["stock_se"] * root}, FINITE)


# ---------------------------------------------------------------- stratified samples


@adapter("A-STR-1", "A-STR-2")
def stratified_mean_and_total(case: Case) -> Answer:
    survey = {"y1": "t1", "y2": "t2"}[case.inputs["variable"]]
    table, strata, _ = survey_a_tables()
    frame, _ = stocks(table, strata, surveys=[survey])
    rows, row = pick(frame, "stratum"), whole(frame)
    mean, se, free = row["density_t_c_ha"], row["density_se"], int((rows["plots"] - 1).sum())
    fit = plots_in_area(rows["area_ha"], case.inputs["plot_area_ha"])
    within = rows["stock_se"] ** 2 * finite_population_factor(rows["plots"], fit)
    answer = Answer().give(
        {
            "area_ha": rows["area_ha"],
            "n": rows["plots"],
            "mean": rows["density_t_c_ha"],
            "variance": rows["density_se"] ** 2 * rows["plots"],
            "se_mean": rows["density_se"],
            "total": rows["stock_t_c"],
            "se_total": rows["stock_se"],
        },
        prefix="strata.",
    )
    answer.give(
        {
            "mean": mean,
            "se": se,
            "total": row["stock_t_c"],
            "se_total": row["stock_se"],
            "df_satterthwaite": row["df"],
            "ci95_mean_satterthwaite": row[["density_low", "density_high"]],
        }
    )
    answer.give(
        {
            "df_n_minus_H": free,
            "ci95_mean_t": ends(mean, se, free),
            "ci90_mean_t": ends(mean, se, free, 0.9),
            "half_width_percent_95_t": float(as_percent(ends(mean, se, free)[1] - mean, mean)),
        },
        N_MINUS_H,
    )
    answer.give({"ci95_mean_z": ends(mean, se)}, NORMAL)
    return answer.give({"N_h": fit, "mean": mean, "se": np.sqrt(within.sum()) / row["area_ha"]}, FINITE, "with_fpc.")


@adapter("PS-04")
def stratified_points(case: Case) -> Answer:
    given = case.inputs
    frame, _ = stocks(
        plot_table(given["z"], stratum=given["stratum"]),
        strata_table({name: given["N_h"][name] for name in given["order"]}),
    )
    rows, row = pick(frame, "stratum").loc[given["order"]], whole(frame)
    mean, se, free = row["density_t_c_ha"], row["density_se"], int((rows["plots"] - 1).sum())
    answer = Answer().give(
        {
            "stratum_means": rows["density_t_c_ha"],
            "stratum_variances": rows["density_se"] ** 2 * rows["plots"],
            "mean": mean,
            "se": se,
        }
    )
    answer.give({"df": free, "ci95_t": ends(mean, se, free)}, N_MINUS_H)
    return answer.differ({"unweighted_mean_wrong": mean})


@adapter("PM-05")
def moments_of_a_stratified_sample(case: Case) -> Answer:
    given = case.inputs
    sizes, order = [int(n) for n in given["n_h"]], given["order"]
    values = [sample_with(*moments) for moments in zip(sizes, given["mean_h"], given["variance_h"], strict=True)]
    area = dict(zip(order, given["N_h"], strict=True))
    found = joint({"y": np.concatenate(values)}, np.repeat(order, sizes), area, area)
    total = sum(given["N_h"])
    answer = Answer().give({"total": found.mean[0] * total, "mean": found.mean[0]})
    return answer.give({"se_total": found.se[0] * total, "se_mean": found.se[0]}, FINITE)


@adapter("A-EDGE-1")
def stratum_with_one_plot(case: Case) -> Answer:
    table, strata, _ = survey_a_tables()
    table = table[(table["survey"] == "t1") & ((table["stratum"] != "S4") | (table["plot"] == "p55"))]
    frame, _ = stocks(table, strata, surveys=["t1"])
    row = whole(frame)
    conventions = {
        f"conventions.{name}.{part}": row[column]
        for name in ("certainty", "adjust", "average")
        for part, column in (("mean", "density_t_c_ha"), ("se", "density_se"))
    }
    answer = Answer().give({"n_by_stratum": pick(frame, "stratum")["plots"]})
    # the program takes up none of the conventions: the stratum leaves the figure and its area, loudly
    return answer.differ({"mean": row["density_t_c_ha"], **conventions})


# ---------------------------------------------------------------- domains


@adapter("A-DOM-1")
def parcels_as_domains(case: Case) -> Answer:
    data = survey_a()
    table, strata, parcels = survey_a_tables()
    rows = pick(stocks(table, strata, parcels, surveys=["t1"])[0], "parcel")
    plots = pd.DataFrame(data["plots"]).dropna(subset=["y1"])
    names, total = list(rows.index), sum(data["areas_ha"].values())
    belongs = {name: (plots["parcel"] == name).astype(float) for name in names}
    columns = {f"y {name}": plots["y1"] * there for name, there in belongs.items()} | belongs
    found, k = joint(columns, plots["stratum"], data["areas_ha"]), len(names)
    sums, shares = found.mean[:k], found.mean[k:]
    mean = sums / shares
    # the mean of a domain is a ratio of two means; its linearisation carries the covariances over
    slope = np.hstack([np.diag(1 / shares), -np.diag(mean / shares)])
    cov = slope @ found.cov @ slope.T
    first, second = (names.index(name) for name in case.expected["contrast.parcels"])
    contrast = np.sqrt(cov[first, first] + cov[second, second] - 2 * cov[first, second])
    answer = Answer().give(
        {
            "n": rows["plots"],
            "mean": rows["density_t_c_ha"],
            "se_mean": rows["density_se"],
            "known_area_ha": rows["area_ha"],
            "total_known_area": rows["stock_t_c"],
            "se_total_known_area": rows["stock_se"],
        },
        prefix="parcels.",
    )
    indicator = "total of the values inside; default: mean times known area"
    answer.give({"total_ht": total * sums, "se_total_ht": total * found.se[:k]}, indicator, "parcels.")
    answer.give({"parcels.estimated_area_ha": total * shares, "sum_of_total_ht": total * sums.sum()}, indicator)
    answer.give({"whole_total": whole(stocks(table, strata, surveys=["t1"])[0])["stock_t_c"]})
    covariance = "from the covariances of the domain totals"
    answer.give({"vcov_means": cov, "contrast.difference_of_means": mean[first] - mean[second]}, covariance)
    return answer.give({"contrast.se": contrast}, covariance).differ({"contrast.se_if_independent_wrong": contrast})


# ---------------------------------------------------------------- ratios


@adapter("A-RAT-1")
def ratio_of_two_variables(case: Case) -> Answer:
    data = survey_a()
    plots = pd.DataFrame(data["plots"]).dropna(subset=["y1"])
    cells = pd.DataFrame(data["cells"])
    known = (cells["area_ha"] * cells["mean_x"]).groupby(cells["stratum"]).sum().loc[list(data["areas_ha"])]
    table = plot_table(plots["y1"] / plots["x"], size=plots["x"], stratum=plots["stratum"], plot=plots["plot"])
    separate = whole(stocks(table, strata_table(known.to_dict()))[0])
    answer = Answer().give({"total": separate["stock_t_c"], "se_total": separate["stock_se"]}, prefix="separate.")
    answer.give({"known_total_x": known.sum(), "known_total_x_by_stratum": known})
    codes = pd.Categorical(plots["stratum"], categories=list(known.index)).codes.astype(np.int64)
    y, x, area = plots["y1"].to_numpy(), plots["x"].to_numpy(), np.array(list(data["areas_ha"].values()))
    total, variance, ratios = stratified_ratio(y, x, codes, area, known.to_numpy())
    se = np.sqrt(variance)
    answer.give({"ratio": ratios[0], "se": se / known.sum(), "total": total, "se_total": se}, COMBINED, "combined.")
    none = "the reference holds no value"
    return answer.leave_out({"separate.ratio": none, "separate.se": none})


@adapter("PS-06")
def ratio_timber_sale(case: Case) -> Answer:
    given = {name: np.array(value) for name, value in case.inputs.items()}
    x, y, total, population = given["x_basal_area"], given["y_volume"], float(given["total_x"]), float(given["N"])
    row = one_row(y / x, total, size=x)
    known = x.mean() / (total / population)
    variance = (row["stock_se"] * finite(len(x), population) * known) ** 2
    answer = Answer().give({"ratio": row["density_t_c_ha"], "total": row["stock_t_c"]})
    return answer.give(
        {"variance_total": variance, "bound_2se": 2 * np.sqrt(variance)},
        "finite population factor, known mean of x; default: none, mean of the sample",
    )


@adapter("PM-09")
def ratio_in_two_strata(case: Case) -> Answer:
    given = case.inputs
    x, y, stratum = np.array(given["agri"]), np.array(given["poppy"]), np.array(given["stratum"]).astype(str)
    known = given["total_agri_h"]
    frame, _ = stocks(plot_table(y / x, size=x, stratum=stratum), strata_table(known))
    rows = pick(frame, "stratum")
    fraction = finite_population_factor(rows["plots"], pd.Series(given["N_h"]).loc[rows.index])
    names = list(known)
    codes = pd.Categorical(stratum, categories=names).codes.astype(np.int64)
    units, known_x = (np.array([float(table[name]) for name in names]) for table in (given["N_h"], known))
    total, variance, _ = stratified_ratio(y, x, codes, units, known_x, finite=True)
    answer = Answer().give({"separate_total": whole(frame)["stock_t_c"]})
    answer.give({"se_separate": np.sqrt((rows["stock_se"] ** 2 * fraction).sum())}, FINITE)
    answer.give({"combined_total": total}, COMBINED)
    return answer.give({"se_combined": np.sqrt(variance)}, f"{COMBINED}; {FINITE}")


@adapter("PM-10")
def ratio_from_means(case: Case) -> Answer:
    given = case.inputs
    x = np.full(given["n"], given["mean_x"])
    row = one_row(sample_with(given["n"], given["mean_y"], 1.0) / x, given["total_x"], size=x)
    return Answer().give({"ratio": row["density_t_c_ha"], "total": row["stock_t_c"]})


# ---------------------------------------------------------------- clusters


@adapter("PS-11")
def transects_by_size(case: Case) -> Answer:
    points = pd.DataFrame({"draw": case.inputs["draw"], "z": case.inputs["z"]})
    row = one_row(points.groupby("draw")["z"].mean().to_numpy())
    mean, se = row["density_t_c_ha"], row["density_se"]
    answer = Answer().give({"n_points": len(points), "mean": mean, "se": se})
    return answer.give({"ci95_normal": ends(mean, se)}, NORMAL)


@adapter("PM-11")
def transects_of_unequal_size(case: Case) -> Answer:
    given = case.inputs
    points = pd.DataFrame({"cluster": given["cluster"], "z": given["z"]}).groupby("cluster")["z"]
    size, root = points.size().to_numpy(dtype=float), finite(points.ngroups, given["N_clusters"])
    ratio = one_row(points.mean().to_numpy(), size=size)
    expanded = one_row(points.sum().to_numpy(), given["N_clusters"])
    answer = Answer().give({"mean_ratio": ratio["density_t_c_ha"]})
    answer.give({"se_ratio": ratio["density_se"] * root}, FINITE)
    return answer.give(
        {
            "mean_pi": expanded["stock_t_c"] / given["M_total"],
            "se_pi": expanded["stock_se"] / given["M_total"] * root,
        },
        "expanded cluster totals by the known size; default: ratio",
    )


@adapter("PM-12")
def equal_clusters(case: Case) -> Answer:
    points = pd.DataFrame({name: case.inputs[name] for name in ("suite", "gpa")}).groupby("suite")["gpa"]
    size, population = points.size().to_numpy(dtype=float), case.inputs["N"]
    row, root = one_row(points.mean().to_numpy(), size.mean() * population, size=size), finite(len(size), population)
    answer = Answer().give({"total": row["stock_t_c"], "mean": row["density_t_c_ha"]})
    return answer.give({"se_total": row["stock_se"] * root, "se_mean": row["density_se"] * root}, FINITE)


@adapter("PM-13")
def two_stages(case: Case) -> Answer:
    given = case.inputs
    row = one_row(given["mean_volume_of_two"], size=np.array(given["clutch_size"], dtype=float))
    return Answer().give({"mean": row["density_t_c_ha"], "se": row["density_se"]})


@adapter("A-CLU-1")
def plots_of_subplots(case: Case) -> Answer:
    points, areas = pd.DataFrame(case.inputs["subplots"]), case.inputs["areas_ha"]
    ids = points["plot"] + "-" + points["subplot"].astype(str)
    plots = points.groupby(["stratum", "plot"])["y"].agg(["mean", "sum", "size"]).reset_index()
    stratum, strata = plots["stratum"], strata_table(areas)
    columns = {"plot": plots["plot"], "stratum": stratum}
    frame, _ = stocks(plot_table(plots["mean"], size=plots["size"] / 4, **columns), strata)
    order = case.expected["separate_ratio_by_stratum.stratum"]
    rows, row = pick(frame, "stratum").loc[order], whole(frame)
    answer = Answer().give(
        {
            "mean": rows["density_t_c_ha"],
            "se": rows["density_se"],
            "overall_mean": row["density_t_c_ha"],
            "overall_se": row["density_se"],
        },
        prefix="separate_ratio_by_stratum.",
    )
    # the same sample as clusters of plots
    each = plot_table(points["y"], plot=ids, stratum=points["stratum"], cluster=points["plot"])
    clustered = whole(stocks(each, strata)[0])
    same = ["density_t_c_ha", "density_se", "df"]
    np.testing.assert_allclose(clustered[same].astype(float), row[same].astype(float), rtol=1e-12)
    answer.give({f"n_plots.{name}": (stratum == name).sum() for name in areas})
    answer.give({f"n_subplots.{name}": (points["stratum"] == name).sum() for name in areas})
    answer.differ({"se_ignoring_clusters_wrong": row["density_se"]})
    alike = whole(stocks(plot_table(plots["mean"], **columns), strata)[0])
    free = len(plots) - len(areas)
    answer.give(
        {"mean": alike["density_t_c_ha"], "se": alike["density_se"], "df": free},
        "all plots of one size; default: by subplots measured",
        "mean_of_plot_means.",
    )
    answer.give({"df": free}, N_MINUS_H)
    # plots of one stratum count with n / M: what a subplot stands for is area / M there, area / n in the combined form
    balance = plots.groupby("stratum")["size"].transform("size") / plots.groupby("stratum")["size"].transform("sum")
    for prefix, scale in (("survey_default.", balance), ("combined_ratio.", 1.0)):
        both = joint({"y": plots["sum"] * scale, "m": plots["size"] * scale}, stratum, areas)
        ratio, se = ratio_of_estimates(*both.mean, both.cov[0, 0], both.cov[1, 1], both.cov[0, 1])
        answer.give({"mean": ratio, "se": se}, "by ratio_of_estimates; default: separate ratio", prefix)
    return answer.leave_out({"survey_default.deff_vs_srs_with_replacement": "the program prints no design effect"})


# ---------------------------------------------------------------- pools


@adapter("A-POOL-1")
def sum_of_pools(case: Case) -> Answer:
    ours = {"agb": "above_ground", "bgb": "below_ground"}
    plots = pd.DataFrame(case.inputs["plots"]).rename(columns=ours)
    pools = [ours.get(name, name) for name in case.expected["pools.pool"]]
    values = {name: plots[name] for name in pools}
    columns = {"plot": plots["plot"], "stratum": plots["stratum"], "all": plots[pools].sum(axis=1)}
    table = plot_table(plots[pools[0]], **columns, **values)
    frame, _ = stocks(table, strata_table(case.inputs["areas_ha"]), pools=pools)
    rows = frame[frame["by"] == "inventory"].set_index("pool")
    row, found = rows.loc["all"], joint(values, plots["stratum"], case.inputs["areas_ha"])
    answer = Answer().give(
        {
            "pools.mean": rows.loc[pools, "density_t_c_ha"],
            "pools.se": rows.loc[pools, "density_se"],
            "vcov": found.cov,
            "sum_mean": row["density_t_c_ha"],
            "sum_se": row["density_se"],
            "sum_total": row["stock_t_c"],
            "sum_total_se": row["stock_se"],
            "check_sum_of_vcov": np.sqrt(found.cov.sum()),
        }
    )
    answer.give({"df": len(plots) - plots["stratum"].nunique()}, N_MINUS_H)
    each = rows.loc[pools]
    apart = combine_sum(each["density_t_c_ha"], 100.0 * each["density_se"] / each["density_t_c_ha"])
    mistake = {"se_quadrature_ignoring_covariance": row["density_se"]}
    assert not np.isclose(apart.half_width, row["density_se"])  # the rule for independent values is that mistake
    return answer.differ(mistake)
