"""The page of the coverage simulation, ``docs/coverage.md``, from its result tables."""

from __future__ import annotations

from typing import Any

import numpy as np
import pandas as pd
from coverage_layout import FIGURES, figures, held, markdown, named, of, outside, percent, reflow, span

Z_95 = 1.959964  # normal quantile, used for the rule of thumb on skewness only
MOST_SKEWNESS = 1.0  # beyond it the expansion is not shown
PLOTS_PER_SKEWNESS = 25.0  # Cochran's rule

SOURCES = """## Sources

- Stems: longleaf pine: Platt, W. J., Evans, G. W., Rathbun, S. L. (1988). The population dynamics of a long-lived
  conifer (*Pinus palustris*). *American Naturalist* 131, 491–525. Norway spruce: Stoyan, D., Kendall, W. S., Mecke, J.
  (1987). *Stochastic Geometry and its Applications*; collector unknown. Both as published in the R package
  spatstat.data 3.0.0 (GPL, version 2 or later); the data are not part of this project.
- Mirage method: Schmid, P. (1969); its unbiasedness: Gregoire, T. G. (1982). The unbiasedness of the mirage correction
  procedure for boundary overlap. *Forest Science* 28, 504–508 (from memory).
- Plots wanted: Cochran, W. G. (1977). *Sampling Techniques*, 3rd ed., Wiley, section 2.15 (from memory).
- Coverage and skewness: Hall, P. (1992). *The Bootstrap and Edgeworth Expansion*, Springer (from memory).
- Growth step, plot sizes, raster and parcels are invented.
"""


def page(tables: dict[str, pd.DataFrame], settings: dict[str, Any]) -> str:
    """Write the page."""
    parts = [
        _head(settings),
        _short(tables, settings),
        _advice(),
        _setting(tables["stands"]),
        _edges(tables["centres"]),
        _random(tables["stocks"], settings),
        _skewness(tables["centres"], settings),
        _grids(tables["stocks"], settings),
        _change(tables["change"], settings),
        _rasters(tables["rasters"], settings),
        _parcels(tables["parcels"], settings),
        SOURCES,
    ]
    return "\n".join(reflow(part).rstrip() + "\n" for part in parts if part)


def _head(settings: dict[str, Any]) -> str:
    low, high = (100 * bound for bound in settings["accepted"])
    return f"""# Do the intervals hold what they say?

Made by `tests/bench/coverage.py` (seeded; settings in `tests/data/coverage.toml`); do not edit by hand.

{settings["repeats"]:,} samples of circular plots were drawn for each line below in two stands whose carbon is known
stem by stem, and the program's own estimators made a figure and a 95 % interval from each. Coverage is the share of
these intervals that hold the true value. It should be 95 %; {low:.0f} to {high:.0f} % is called in order here, and
**bold** marks what lies outside. The number after ± is the Monte Carlo standard error. Bias and errors are in percent
of the true stock. "SE / SD" compares the standard error the program states (root mean square) with the standard
deviation the estimates really have: below 1 the program is too sure, above 1 too careful. "Truth above": the interval
lies wholly below the true value. "Truth below" is also how often a one-sided lower bound of 97.5 % confidence fails;
it should be 2.5 %.
"""


def _short(tables: dict[str, pd.DataFrame], settings: dict[str, Any]) -> str:
    stocks, change = tables["stocks"], tables["change"]
    corrected = of(stocks, edge=["cut", "mirage", "border strip"], method="t")
    plain = of(corrected, design="random")
    many, few = plain[plain["plots"] >= 10], plain[plain["plots"] < 10]
    bad = outside(many, settings)
    verdict = (
        "All lie between 93 and 97 %."
        if bad.empty
        else f"Outside 93 to 97 %: {named(bad, ['stand', 'size', 'plots', 'edge'])}."
    )
    by_log = of(stocks, design="random", method="log", edge=["cut", "mirage"])
    naive = of(stocks, edge="none", method="t", design="random", plots=30)
    lines = [
        f"**Plain random samples, n ≥ 10, edge corrected, default interval:** coverage {span(many)}. {verdict}",
        f"""**n = 5:** {span(few)}. Plot values are skewed to the right, so too many intervals lie below the truth. With
        `interval = "log"` it is {span(by_log[by_log["plots"] < 10])} at n = 5 and
        {span(by_log[by_log["plots"] >= 10])} at n ≥ 10.""",
        _short_grids(stocks),
        f"""**Border plots counted as whole:** coverage down to {percent(naive["coverage"].min())} % at n = 30, with a
        bias down to {naive["bias"].min():.1f} %.""",
        _short_change(change, settings),
        *_short_more(tables, settings),
    ]
    return "## In short\n\n" + "\n".join(f"- {line}" for line in lines)


def _short_grids(stocks: pd.DataFrame) -> str:
    grid = of(stocks, design="grid", edge=["cut", "mirage"], method="t")
    near = of(stocks, design="grid", edge=["cut", "mirage"], method="neighbours", plots=30)
    same = of(grid, plots=30)
    text = f"""**Systematic grids with the variance of a random sample:** {span(grid)}; stated over true error
    {grid["se_ratio"].min():.2f} to {grid["se_ratio"].max():.2f}. So that variance is mostly, but not always, on the
    safe side."""
    if len(near):
        shorter = near["se_ratio"].to_numpy() / same["se_ratio"].to_numpy()
        text += f""" `variance = "neighbours"` changes little in these stands, which have clumps but no trend: at n = 30
        its standard error is {100 * shorter.min():.0f} to {100 * shorter.max():.0f} % of the other, coverage
        {span(near)}."""
    return text


def _short_change(change: pd.DataFrame, settings: dict[str, Any]) -> str:
    paired = of(change, repeat="all", method="difference")
    others = of(change, repeat=["some", "none"], method="difference")
    best = of(change, repeat="some", method="best combination")
    text = f"""**Change:** repeated plots {span(paired)}, partly replaced or independent ones {span(others)}. Out of
    order: {named(outside(paired, settings), ["stand", "plots", "edge"]) or "none of the repeated"}. There a few big
    stems that died carry the loss, and samples that miss them give intervals too high and too narrow: a lower bound
    of 97.5 % fails in up to {percent(paired["above"].max())} % of samples."""
    if len(best):
        text += f" Best combination of partly replaced plots: {span(best)}."
    return text


def _short_more(tables: dict[str, pd.DataFrame], settings: dict[str, Any]) -> list[str]:
    lines = []
    if len(tables["rasters"]):
        helped = of(tables["rasters"], method="assisted where it pays")
        few = helped[helped["plots"] == helped["plots"].min()]
        lines.append(
            f"""**Assisted by a raster:** {span(helped)}. It is used only where the sample sees a gain, and
            that choice makes the program a little too sure with few plots: stated over true error
            {few["se_ratio"].min():.2f} to {few["se_ratio"].max():.2f} at n = {few["plots"].iloc[0]}."""
        )
    if len(tables["parcels"]):
        table = of(tables["parcels"], truth="as plots see it", plots=-1)
        own = of(tables["parcels"], truth="own stems", plots=-1, estimator="composite")
        composite, direct = of(table, estimator="composite"), of(table, estimator="direct")
        lines.append(
            f"""**Parcels of a few plots:** composite figures {span(composite)}, over all parcels and samples; direct
            figures, where there are any, {span(direct)}. Held against the stems of the parcel alone composite figures
            have {span(own)}, as plots see beyond the border of a tiny parcel."""
        )
    return lines


def _advice() -> str:
    return """## What to do

- Plan for ten plots or more in every stratum that is to be reported alone. With fewer, or where plots differ by more
  than the mean itself, set `interval = "log"` for stocks.
- Correct at the border: give `share_inside`, or mirror in the field. A plot across the border entered as whole is
  wrong by more than its error, and more plots make it worse.
- On a grid, keep the default. `variance = "neighbours"` is for woodland whose carbon changes slowly from one end to the
  other and grids of some dozens of plots; where there are only clumps it brings next to nothing. Do not read a grid of
  a dozen plots as safer than a random sample.
- Repeat plots for change. Where single large trees carry the loss, look at the plots wanted in the table on skewness
  before quoting an interval, and do not claim a gain that rests on no big stem having died on the plots. Lower bounds
  of stocks are on the safe side with right-skewed plots; lower bounds of such changes are not.
- With some plots replaced between surveys use `change = "best combination"`: far smaller errors, and coverage as with
  repeated plots.
- With a dozen plots, decide on a raster before looking at the gain it shows.
- Quote composite figures for parcels of a few plots, not direct ones.
- Coverage speaks of sampling alone. Errors of equations, root ratios and carbon fractions come on top.
"""


def _setting(stands: pd.DataFrame) -> str:
    rows = [
        (
            row["stand"],
            f"*{row['species']}*",
            f"`{row['equation']}`",
            f"{row['area_ha']:g}",
            row["stems"],
            f"{row['truth_1']:.2f}",
            f"{row['truth_2']:.2f}",
            f"{row['died']} / {row['new']}",
            f"{row['small']:g} m ({row['stems_small']:.1f})",
            f"{row['large']:g} m ({row['stems_large']:.1f})",
        )
        for _, row in stands.iterrows()
    ]
    head = ["stand", "species", "equation", "ha", "stems", "t C/ha", "later", "died / new", "small plots", "large"]
    return f"""## What was simulated

{markdown(head, rows, 3)}

Carbon per stem: the equation the program itself assigns, times the default carbon fraction. Plots: radius, and in
brackets the mean number of stems. Random samples: n independent uniform centres, so plots may overlap. Grids: square,
with random start, spacing such that n plots are expected; the number varies. The growth step is invented and drawn
once: diameters grow by gamma variates that are larger for thin stems, stems die with a probability that is larger for
thin stems, new ones come up near old ones. All samples are judged against the one stand that results.
"""


def _edges(centres: pd.DataFrame) -> str:
    rows = [
        (
            row["stand"],
            f"{row['radius']:g} m",
            row["edge"],
            f"{row['centres']:,}",
            f"{row['mean']:+.2f}",
            f"{row['exact']:+.2f}",
            f"{row['change']:+.2f}",
        )
        for _, row in centres.iterrows()
    ]
    head = ["stand", "radius", "edge", "centres", "bias of the stock %", "exactly %", "bias of the change, exactly %"]
    cut = of(centres, edge="cut")
    worst = cut.loc[cut["exact"].abs().idxmax()]
    needed = round((worst["cv"] / worst["exact"]) ** 2)
    return f"""## The edge of the stand

All centres of a fine grid taken together, so that nothing is left to chance. "Exactly" is the limit in closed form:
every stem weighted with the area of the centres that see it. Bias of the change is in percent of the change.

{markdown(head, rows, 3)}

- **cut**: centres in the window, a plot across the border counts by its share inside. This is what the program does
  with `share_inside`. Stems near the border are still seen by fewer centres, so the estimate leans to the inner part
  of the stand: {worst["exact"]:+.1f} % in the worst case here ({worst["stand"]}, radius {worst["radius"]:g} m), a
  window so small that most of it lies within a few radii of the border. More plots do not mend it: at about
  n = {needed} this bias is as large as the standard error. The part of a woodland that it concerns is about boundary
  length x radius / area, a few percent at most, and the bias is a small part of that.
- **border strip**: the same with centres also outside, up to one radius. Exactly unbiased, but less precise for the
  same number of plots, as many of them hold little. The program sets plots with their centre outside aside, so it does
  not serve this rule.
- **mirage**: the crew lays the plot out again from the mirror image of its centre beyond the border, and counts the
  stems inside once more. Exactly unbiased along straight borders; give such a stem the weight 2 (column `weight` of
  the trees) and leave `share_inside` at 1.
- **none**: a plot across the border counts as if whole. Wrong by several percent, whatever the number of plots.
"""


def _random(stocks: pd.DataFrame, settings: dict[str, Any]) -> str:
    rows = []
    for _, row in of(stocks, design="random", method="t").iterrows():
        keys = {key: row[key] for key in ("stand", "size", "edge", "plots")}
        same = of(stocks, design="random", method="log", **keys)
        by_log = held(same.iloc[0], settings) if len(same) else ""
        rows.append((row["stand"], row["size"], row["edge"], row["plots"], *figures(row, settings), by_log))
    head = ["stand", "plots", "edge", "n", *FIGURES, "log interval %"]
    return f"""## Stocks from random samples

{markdown(head, rows, 3)}

With right-skewed plots "truth above" is the larger of the two misses, as a sample without a rich plot gives both a low
mean and a small standard error. The log interval shifts misses to the other side.
"""


def by_skewness(skewness: float, kurtosis: float, plots: int) -> float:
    """Coverage of a 95 % interval by Student's t of a mean, to the order 1 / n, from the moments of the plot values.

    Notes
    -----
    0.95 + (2 / n) z phi(z) (k (z^2 - 3) / 12 - g^2 (z^4 + 2 z^2 - 3) / 18), with skewness g and excess kurtosis k.
    """
    z = Z_95
    density = np.exp(-(z**2) / 2.0) / np.sqrt(2.0 * np.pi)
    shape = kurtosis * (z**2 - 3.0) / 12.0 - skewness**2 * (z**4 + 2.0 * z**2 - 3.0) / 18.0
    return float(0.95 + 2.0 / plots * z * density * shape)


def _skewness(centres: pd.DataFrame, settings: dict[str, Any]) -> str:
    rows = []
    for _, row in of(centres, edge=["cut", "mirage"]).iterrows():
        for what, end in (("stock", ""), ("change", "_change")):
            skewness, kurtosis = row["skewness" + end], row["kurtosis" + end]
            usable = abs(skewness) < MOST_SKEWNESS
            expected = [by_skewness(skewness, kurtosis, plots) for plots in settings["plots"]]
            told = [percent(share) if usable else "–" for share in expected]
            moments = f"{skewness:.2f}", f"{kurtosis:.2f}"
            wanted = f"{PLOTS_PER_SKEWNESS * skewness**2:.0f}"
            rows.append((row["stand"], row["size"], row["edge"], what, *moments, *told, wanted))
    counts = [f"n = {plots}: %" for plots in settings["plots"]]
    head = ["stand", "plots", "edge", "of", "skewness", "kurtosis", *counts, "plots wanted"]
    return f"""## Why coverage falls short: skewness

Moments of single plots over all centres (change: of repeated plots), and the coverage that theory expects from them:
an expansion to the order 1 / n, rough at n = 5 and of no use (–) where skewness exceeds {MOST_SKEWNESS:g}. Where the
expected coverage is near the simulated one, the shape of the plot values explains the shortfall, and neither the
standard error nor the degrees of freedom are at fault. "Plots wanted" is Cochran's rule of thumb,
{PLOTS_PER_SKEWNESS:g} times the squared skewness, for normal-theory intervals to be trusted.

{markdown(head, rows, 4)}
"""


def _grids(stocks: pd.DataFrame, settings: dict[str, Any]) -> str:
    words = {"t": "random", "neighbours": "neighbours"}
    table = of(stocks, design="grid", edge=["cut", "mirage"], method=list(words))
    rows = [
        (row["stand"], row["size"], row["edge"], words[row["method"]], row["plots"], *figures(row, settings))
        for _, row in table.iterrows()
    ]
    return f"""## Stocks from systematic grids

{markdown(["stand", "plots", "edge", "variance", "n", *FIGURES], rows, 4)}

A grid in a small stand can take few really different positions. If its spacing meets the pattern of the stand, all
plots of a sample are rich together or poor together and the sample cannot see it (SE / SD below 1); if not, plots
complement each other and the stated error is too large (above 1). No estimate of variance from one grid can tell these
cases apart with certainty. Neighbour differences need 8 plots; grids with fewer keep the variance of a random sample,
so the lines of n = 5 and some samples at n = 10 rest on it.
"""


def _change(change: pd.DataFrame, settings: dict[str, Any]) -> str:
    words = {"all": "all repeated", "some": "partly replaced", "none": "independent"}
    rows = [
        (
            row["stand"],
            words[row["repeat"]],
            row["edge"],
            row["method"],
            row["plots"],
            row["kept"],
            *figures(row, settings),
        )
        for _, row in change.iterrows()
    ]
    return f"""## Change between two surveys

n plots at each survey, small plots. "Repeated" is the number measured at both. Percent are of the stock at the first
survey.

{markdown(["stand", "plots", "edge", "estimate", "n", "repeated", *FIGURES], rows, 4)}

Standard errors of differences are right on average. Those of the best combination are raised for weights that rest on
few plots (too careful at n = 10; with n = 5 it falls back on the difference). Where coverage of repeated plots falls
short it is the shape of the change: most plots gain a little, a few lose a big stem. A sample that holds no such plot
gives too high a change and too small a standard error, and nothing in the sample tells so; another interval from the
same plots cannot mend it. More or larger plots do, or all big stems of a stand looked up at both dates. The log
interval is no help, as change can have either sign. Partly replaced plots with n = 5 err on the safe side, as two or
three plots carry each part of the variance.
"""


def _rasters(rasters: pd.DataFrame, settings: dict[str, Any]) -> str:
    if rasters.empty:
        return ""
    rows = [
        (
            row["stand"],
            row["edge"],
            row["method"],
            row["plots"],
            f"{row['r2']:.2f}",
            percent(row["used"], 0),
            *figures(row, settings),
        )
        for _, row in rasters.iterrows()
    ]
    return f"""## Stocks assisted by a raster

An invented raster, the smoothed root of the stem carbon with smooth noise on it; R² is that of plot values and their
raster means. "Assisted where it pays" uses the raster in those samples that see a gain, as the program decides for an
inventory; "used" is their share. Samples of fewer plots than the program asks for before it fits a line are left out.
With mirrored plots the raster is still read under the part inside, which costs a bias of up to about one percent.
Choosing by the gain that the same plots show takes the raster mostly in samples whose residuals happen to be small, so
the stated error is too small; the loss goes with the number of plots.

{markdown(["stand", "edge", "estimate", "n", "R²", "used %", *FIGURES], rows, 3)}
"""


def _parcels(parcels: pd.DataFrame, settings: dict[str, Any]) -> str:
    if parcels.empty:
        return ""
    rows = [
        (
            row["stand"],
            row["truth"],
            row["estimator"],
            _plots_in_parcel(row["plots"], parcels["plots"].max()),
            percent(row["share"], 0),
            f"{row['rmse']:.1f}",
            f"{row['se_ratio']:.2f}",
            held(row, settings),
        )
        for _, row in parcels.iterrows()
    ]
    about = [
        f"""{name}: {chosen["parcels"][0] * chosen["parcels"][1]} parcels, {chosen["parcel_plots"]} plots of radius
        {chosen["parcel_radius_m"]:g} m, parcels differ by {table["spread"].iloc[0]:.0f} % (standard deviation)"""
        for name, chosen in settings["stands"].items()
        if len(table := of(parcels, stand=name, truth="own stems"))
    ]
    head = [
        "stand",
        "truth",
        "figure",
        "plots in the parcel",
        "share of parcels %",
        "RMSE %",
        "SE / RMSE",
        "coverage %",
    ]
    return f"""## Parcels of a few plots

The window is cut into equal parcels without a raster or other covariate; {settings["parcel_repeats"]} random samples of
the whole window. {"; ".join(about)}. Coverage is that over parcels and samples together: a composite figure draws a
parcel to the others, so an unusual parcel is held less often and a usual one more often.

A plot belongs to the parcel of its centre but sees stems beyond the border. So there are two truths: the carbon of the
parcel's own stems, and what plots centred in the parcel see on average. Only the second is what plots can tell; the
difference is large here, as these parcels are tiny, and shrinks with the share of the parcel within one radius of its
border.

{markdown(head, rows, 3)}
"""


def _plots_in_parcel(number: int, most: int) -> str:
    if number < 0:
        return "all"
    return f"{number}+" if number == most else str(number)
