"""Mapped stands for the coverage simulation: stems, carbon per stem, an invented growth step, what plots see of them.

The stems are read from the reference folder and are no part of the project.
"""

from __future__ import annotations

import json
import tomllib
from dataclasses import dataclass
from pathlib import Path
from typing import Any

import numpy as np
import pandas as pd

from allometry.assign import assign
from allometry.catalogue import load_catalogue
from landcarbon.factors.carbon import carbon_fraction

ROOT = Path(__file__).resolve().parent.parent.parent
KG_PER_T, M2_PER_HA = 1000.0, 10_000.0
PLOTS_AT_ONCE = 2000


@dataclass(frozen=True)
class Stand:
    """Stems of a rectangular window at two dates.

    Attributes
    ----------
    name : str
    xy : ndarray
        Places of the stems [m], origin at the lower left corner; shape (stems, 2).
    dbh_cm : ndarray
        Diameters at the two dates; 0 where the stem is dead or not yet there; shape (stems, 2).
    carbon_t : ndarray
        Above-ground carbon of each stem at the two dates [t C].
    window_m : ndarray
        Width and height.
    equation_id : str
    years : float
        Between the dates.
    """

    name: str
    xy: np.ndarray
    dbh_cm: np.ndarray
    carbon_t: np.ndarray
    window_m: np.ndarray
    equation_id: str
    years: float

    @property
    def area_ha(self) -> float:
        return float(self.window_m.prod() / M2_PER_HA)

    @property
    def truth(self) -> np.ndarray:
        """Carbon of the window at the two dates [t C/ha]."""
        return self.carbon_t.sum(axis=0) / self.area_ha


def read_settings() -> dict[str, Any]:
    return tomllib.loads((ROOT / "tests" / "data" / "coverage.toml").read_text(encoding="utf-8"))


def read_stand(name: str, reference: Path, settings: dict[str, Any]) -> Stand:
    """Stems with their carbon at the date of the map and after the growth step.

    Parameters
    ----------
    name : str
        Of the stand in the settings and in the reference folder.
    reference : Path
        Folder with ``facts/statistics/stands``.
    settings : dict
        As of :func:`read_settings`.
    """
    folder = reference / "facts" / "statistics" / "stands"
    stems = pd.read_csv(folder / f"{name}.csv")
    about = {one["stand"]: one for one in json.loads((folder / "stands_truth.json").read_text(encoding="utf-8"))}
    window = about[name]["window_m"]
    low, high = (np.array([window["x"][end], window["y"][end]], dtype=float) for end in (0, 1))
    xy = stems[["x_m", "y_m"]].to_numpy(dtype=float) - low
    xy, dbh = grow(xy, stems["dbh_cm"].to_numpy(dtype=float), high - low, settings["growth"][name], settings["seed"])
    chosen = settings["stands"][name]
    species = pd.DataFrame({"species": [name], "scientific_name": [chosen["scientific_name"]], "has_height": [False]})
    found = assign(species, region=chosen["region"], country=chosen["country"] or None).iloc[0]
    mass = load_catalogue().evaluate(found["equation_id"], dbh.ravel())["biomass_kg"].to_numpy().reshape(dbh.shape)
    group = np.array(["conifer" if found["conifer"] else "broadleaf"])
    fraction = carbon_fraction(group, domain=chosen["carbon_domain"])[0]
    carbon = np.where(dbh > 0, mass, 0.0) * fraction / KG_PER_T
    return Stand(name, xy, dbh, carbon, high - low, str(found["equation_id"]), float(settings["growth"][name]["years"]))


def grow(
    xy: np.ndarray, dbh_cm: np.ndarray, window_m: np.ndarray, law: dict[str, Any], seed: int
) -> tuple[np.ndarray, np.ndarray]:
    """Let stems grow and die and new ones come, once and for all; return places and diameters at both dates."""
    rng = np.random.default_rng(seed)
    mean = law["slow_cm"] + law["fast_cm"] * np.exp(-dbh_cm / law["scale_cm"])
    shape = law["variation"] ** -2
    later = dbh_cm + rng.gamma(shape, mean / shape)
    dead = rng.random(len(dbh_cm)) < law["death_base"] + law["death_young"] * np.exp(-dbh_cm / law["death_scale_cm"])
    later[dead] = 0.0
    new = round(law["new_share"] * len(dbh_cm))
    place = xy[rng.integers(0, len(xy), new)] + rng.normal(0.0, law["new_scatter_m"], (new, 2))
    place = window_m - np.abs(window_m - np.abs(place))  # back into the window
    dbh = np.concatenate([np.stack([dbh_cm, later], axis=1), np.zeros((new, 2))])
    dbh[len(xy) :, 1] = rng.uniform(law["new_dbh_cm"][0], law["new_dbh_cm"][1], new)
    return np.concatenate([xy, place]), dbh


def disc_in_window(centre: np.ndarray, radius: float, window_m: np.ndarray) -> np.ndarray:
    """Share of discs that lies in the window, exactly; shape (discs,)."""
    right, top = (window_m - centre).T
    left, bottom = (-centre).T

    def below(a: np.ndarray, b: np.ndarray) -> np.ndarray:
        """Area of the part of a disc about the origin with x < a and y < b."""
        a, b = np.clip(a, -radius, radius), np.clip(b, -radius, radius)
        c = np.sqrt(np.maximum(radius**2 - b**2, 0.0))

        def segment(x: np.ndarray) -> np.ndarray:
            """Integral of the half height of the disc from 0 to x."""
            half = np.sqrt(np.maximum(radius**2 - x**2, 0.0))
            return 0.5 * (x * half + radius**2 * np.arcsin(np.clip(x / radius, -1.0, 1.0)))

        start = segment(np.full_like(a, -radius))
        outer = segment(np.minimum(a, -c)) - start + np.maximum(segment(a) - segment(c), 0.0) * (a > c)
        inner = b * np.maximum(np.minimum(a, c) + c, 0.0)
        return segment(a) - start + np.sign(b) * outer + inner

    area = below(right, top) - below(left, top) - below(right, bottom) + below(left, bottom)
    return np.clip(area / (np.pi * radius**2), 0.0, 1.0)


def mirrored(stand: Stand, radius: float) -> tuple[np.ndarray, np.ndarray]:
    """Stems together with their images across the borders that a plot in the window can reach."""
    xy = stand.xy
    images = [
        np.stack([x, y], axis=1)
        for x in (xy[:, 0], -xy[:, 0], 2 * stand.window_m[0] - xy[:, 0])
        for y in (xy[:, 1], -xy[:, 1], 2 * stand.window_m[1] - xy[:, 1])
    ]
    place = np.concatenate(images)
    near = ((place >= -radius) & (place <= stand.window_m + radius)).all(axis=1)
    return place[near], np.tile(stand.carbon_t, (len(images), 1))[near]


def seen(centre: np.ndarray, radius: float, place: np.ndarray, value: np.ndarray) -> np.ndarray:
    """Sum of the values of the stems on each circular plot; shape (plots, columns)."""
    out = np.empty((len(centre), value.shape[1]))
    order = np.argsort(centre[:, 0], kind="stable")
    for first in range(0, len(centre), PLOTS_AT_ONCE):  # plots of a narrow strip, and the stems they can reach
        rows = order[first : first + PLOTS_AT_ONCE]
        here = centre[rows]
        near = (place[:, 0] > here[0, 0] - radius) & (place[:, 0] < here[-1, 0] + radius)
        square = (here[:, :1] - place[near, 0]) ** 2 + (here[:, 1:] - place[near, 1]) ** 2
        out[rows] = (square < radius**2).astype(float) @ value[near]
    return out


@dataclass(frozen=True)
class Raster:
    """Cells over the window of a stand: value of each, and its mean over the disc around it, inside the window."""

    value: np.ndarray
    on_disc: np.ndarray
    step_m: np.ndarray

    def at(self, centre: np.ndarray) -> np.ndarray:
        """Mean under the plots with these centres."""
        column, row = np.minimum((centre / self.step_m).astype(int), np.array(self.value.shape) - 1).T
        return self.on_disc[column, row]


def make_raster(stand: Stand, radius: float, step_m: float, law: dict[str, Any], seed: int) -> Raster:
    """Smooth the roots of the stem carbon of the first date, and noise, over the window."""
    from scipy.ndimage import gaussian_filter
    from scipy.signal import fftconvolve

    number = np.round(stand.window_m / step_m).astype(int)
    step = stand.window_m / number
    cell = np.minimum((stand.xy / step).astype(int), number - 1)
    stems = np.zeros(number)
    np.add.at(stems, tuple(cell.T), np.sqrt(stand.carbon_t[:, 0]))
    sigma = law["bandwidth_share"] * radius / step
    smooth = gaussian_filter(stems, sigma, mode="constant")
    noise = gaussian_filter(np.random.default_rng(seed).normal(size=number), sigma, mode="reflect")
    value = smooth + law["noise_share"] * smooth.std() / noise.std() * noise
    reach = np.ceil(radius / step).astype(int)
    offsets = np.meshgrid(*(np.arange(-k, k + 1) * side for k, side in zip(reach, step, strict=True)), indexing="ij")
    disc = (np.hypot(*offsets) < radius).astype(float)
    there = fftconvolve(np.ones(number), disc, mode="same")
    return Raster(value, fftconvolve(value, disc, mode="same") / there, step)
