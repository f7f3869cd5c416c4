"""Samples of circular plots in a mapped stand and what is measured on them, thousands of samples in one table.

Each sample is a stratum of its own, so that one call of the program's estimators serves all of them.
"""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass

import numpy as np
import pandas as pd
from coverage_stands import M2_PER_HA, Stand, disc_in_window, mirrored, seen

EDGES = ("cut", "border strip", "mirage", "none")
"""Edge rules.

cut : centres in the window; a plot across the border counts by its share inside (ratio of means)
border strip : the same with centres also up to one radius outside the window
mirage : centres in the window; stems near the border count again by their images (Schmid's mirage method)
none : centres in the window; a plot across the border counts as if whole
"""


@dataclass(frozen=True)
class Draws:
    """Plots of many samples: centre [m] and sample of each, rising."""

    centre: np.ndarray
    sample: np.ndarray
    samples: int

    @property
    def plots(self) -> float:
        """Mean number of plots of a sample."""
        return len(self.sample) / self.samples


def random_draws(rng: np.random.Generator, stand: Stand, samples: int, plots: int) -> Draws:
    """Independent uniform centres in the window."""
    return Draws(rng.random((samples * plots, 2)) * stand.window_m, np.repeat(np.arange(samples), plots), samples)


def strip_draws(rng: np.random.Generator, stand: Stand, samples: int, plots: int, radius: float) -> Draws:
    """Independent uniform centres in the window and one radius around it, of plots that reach into the window."""
    wanted = samples * plots
    found: list[np.ndarray] = []
    while sum(map(len, found)) < wanted:
        tried = rng.random((wanted, 2)) * (stand.window_m + 2 * radius) - radius
        found.append(tried[np.hypot(*(tried - np.clip(tried, 0.0, stand.window_m)).T) < radius])
    return Draws(np.concatenate(found)[:wanted], np.repeat(np.arange(samples), plots), samples)


def grid_draws(rng: np.random.Generator, stand: Stand, samples: int, plots: int) -> Draws:
    """Square grids with random start; the number of plots varies about ``plots``."""
    spacing = np.sqrt(stand.window_m.prod() / plots)
    across, up = (np.arange(int(np.ceil(side / spacing)) + 1) * spacing for side in stand.window_m)
    node = np.stack(np.meshgrid(across, up, indexing="ij"), axis=-1).reshape(-1, 2)
    centre = rng.random((samples, 1, 2)) * spacing + node
    inside = (centre < stand.window_m).all(axis=2)
    return Draws(centre[inside], np.repeat(np.arange(samples), inside.sum(axis=1)), samples)


def two_surveys(
    rng: np.random.Generator, stand: Stand, repeats: int, plots: int, kept: int
) -> tuple[Draws, Draws, np.ndarray, np.ndarray]:
    """Plots of both surveys and their numbers: ``kept`` of a sample's plots are measured again, the others replaced."""
    first, fresh = random_draws(rng, stand, repeats, plots), random_draws(rng, stand, repeats, plots)
    again = np.tile(np.arange(plots) < kept, repeats)
    number = np.arange(repeats * plots)
    centre = np.where(again[:, None], first.centre, fresh.centre)
    return first, Draws(centre, first.sample, repeats), number, np.where(again, number, number + len(number))


def measure(
    stand: Stand, centre: np.ndarray, radius: float, edges: Sequence[str] = ("cut",)
) -> dict[str, tuple[np.ndarray, np.ndarray]]:
    """Densities of the plots at the two dates [t C/ha of the part inside] and their sizes, by edge rule."""
    plot_ha = np.pi * radius**2 / M2_PER_HA
    whole = np.ones(len(centre))
    found = {}
    if "mirage" in edges:
        found["mirage"] = seen(centre, radius, *mirrored(stand, radius)) / plot_ha, whole
    if set(edges) - {"mirage"}:
        total = seen(centre, radius, stand.xy, stand.carbon_t) / plot_ha
        share = disc_in_window(centre, radius, stand.window_m)
        part = np.divide(total, share[:, None], out=np.zeros_like(total), where=share[:, None] > 0)
        found |= {"cut": (part, share), "border strip": (part, share), "none": (total, whole)}
    return {edge: found[edge] for edge in edges}


def all_centres(stand: Stand, step: float, margin: float = 0.0) -> np.ndarray:
    """Midpoints of the cells of a fine grid over the window and a margin."""
    number = np.round((stand.window_m + 2 * margin) / step).astype(int)
    axes = [-margin + (np.arange(n) + 0.5) * (side + 2 * margin) / n
            for n, side in zip(number, stand.window_m, strict=True)]  # fmt: skip
    return np.stack(np.meshgrid(*axes, indexing="ij"), axis=-1).reshape(-1, 2)


def expected(stand: Stand, radius: float, edge: str) -> np.ndarray:
    """Limit of the estimate for many plots, exactly: every stem by the area of centres that see it [t C/ha]."""
    if edge in ("mirage", "border strip"):
        return stand.truth
    weight = disc_in_window(stand.xy, radius, stand.window_m)
    seen_carbon = (weight[:, None] * stand.carbon_t).sum(axis=0) / stand.area_ha
    return seen_carbon if edge == "none" else seen_carbon / mean_share(radius, stand.window_m)


def mean_share(radius: float, window_m: np.ndarray) -> float:
    """Mean share inside of all plots with centres in the window, in closed form.

    Notes
    -----
    The mean over the vectors h of a disc of (1 - |h_x| / width) (1 - |h_y| / height), with mean |h_x| = 4 r / (3 pi)
    and mean |h_x h_y| = r^2 / (2 pi).
    """
    return float(
        1.0 - 4.0 * radius / (3.0 * np.pi) * (1.0 / window_m).sum() + radius**2 / (2.0 * np.pi * window_m.prod())
    )


def plot_table(draws: Draws, density: np.ndarray, size: np.ndarray, survey: str, number: np.ndarray) -> pd.DataFrame:
    """Plot table of one survey as the program's estimators take it; the stratum is the number of the sample.

    ``number`` is that of the plot, the same at both surveys for a plot that is measured again.
    """
    names = pd.Index(np.arange(draws.samples)).astype(str)
    return pd.DataFrame(
        {
            "survey": survey,
            "plot": number,
            "parcel": "",
            "stratum": pd.Categorical.from_codes(draws.sample, names),
            "date": pd.NaT,
            "size": size,
            "inside": size > 0,
            "x": draws.centre[:, 0],
            "y": draws.centre[:, 1],
            "above_ground": density,
            "all": density,
        }
    )


def strata_table(samples: int, area_ha: float) -> pd.DataFrame:
    return pd.DataFrame({"stratum": np.arange(samples).astype(str), "area_ha": area_ha})
