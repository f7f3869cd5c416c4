"""Classes and colours of the map, checked against published colour science."""

from __future__ import annotations

import numpy as np
import pytest
from hypothesis import given
from hypothesis import strategies as st

from landcarbon.publish.colours import diverging_scale, sequential_scale

# sRGB to CIE XYZ (D65): IEC 61966-2-1:1999, matrix to four decimals; L*a*b*: CIE 15:2004, section 8.2.1.
XYZ = np.array([[0.4124, 0.3576, 0.1805], [0.2126, 0.7152, 0.0722], [0.0193, 0.1192, 0.9505]])
WHITE = np.array([0.9505, 1.0, 1.089])
# Simulation of the two common forms of colour blindness on linear sRGB: Machado, Oliveira and Fernandes 2009, IEEE
# Transactions on Visualization and Computer Graphics 15(6), severity 1.0 (values from memory).
BLINDNESS = {
    "none": np.eye(3),
    "protanopia": np.array(
        [[0.152286, 1.052583, -0.204868], [0.114503, 0.786281, 0.099216], [-0.003882, -0.048116, 1.051998]]
    ),
    "deuteranopia": np.array(
        [[0.367322, 0.860646, -0.227968], [0.280085, 0.672501, 0.047413], [-0.011820, 0.042940, 0.968881]]
    ),
}


def lab(colours: list[str], sight: str = "none") -> np.ndarray:
    rgb = np.array([[int(colour[at : at + 2], 16) / 255 for at in (1, 3, 5)] for colour in colours])
    linear = np.where(rgb <= 0.04045, rgb / 12.92, ((rgb + 0.055) / 1.055) ** 2.4)
    ratio = np.clip(linear @ BLINDNESS[sight].T, 0, 1) @ XYZ.T / WHITE
    f = np.where(ratio > (6 / 29) ** 3, np.cbrt(ratio), ratio / (3 * (6 / 29) ** 2) + 4 / 29)
    return np.column_stack([116 * f[:, 1] - 16, 500 * (f[:, 0] - f[:, 1]), 200 * (f[:, 1] - f[:, 2])])


def test_lab_of_known_colours():
    # CIE 15: white is L* 100; mid grey of sRGB 119 is close to L* 50 (common practice, no source).
    assert lab(["#ffffff"])[0] == pytest.approx([100, 0, 0], abs=0.05)
    assert lab(["#777777"])[0, 0] == pytest.approx(50, abs=0.5)


@pytest.mark.parametrize("sight", list(BLINDNESS))
def test_sequential_darkens_evenly_for_every_eye(sight):
    colours = sequential_scale([0, 160]).colours
    steps = -np.diff(lab(colours, sight)[:, 0])
    assert (steps > 0).all()
    assert steps.max() < 2 * steps.min()


@pytest.mark.parametrize("sight", list(BLINDNESS))
def test_diverging_is_symmetric_and_both_ends_differ_for_every_eye(sight):
    colours = diverging_scale([-4, 4]).colours
    values = lab(colours, sight)
    half = len(colours) // 2
    assert (np.diff(values[:half, 0]) > 0).all()
    assert (np.diff(values[half:, 0]) < 0).all()
    # A difference of 2.3 in CIE 1976 units is just noticeable (Mahy et al. 1994); ask for several times that.
    apart = np.linalg.norm(values[:half][::-1] - values[half:], axis=1)
    assert apart.min() > 10
    neighbours = np.linalg.norm(np.diff(values, axis=0), axis=1)
    assert neighbours.min() > 7


@pytest.mark.parametrize(
    "values", [[3.2, 7.9, 5.5], [0, 1, 2], [120.0], [0.0], [1e-4, 2e-4], [5, 5, 5], [1, 1, 2, 900]]
)
def test_sequential_covers_the_values(values):
    scale = sequential_scale(values)
    assert scale.edges[0] <= min(values)
    assert scale.edges[-1] >= max(values)
    assert scale.edges == sorted(set(scale.edges))
    assert len(scale.colours) == len(scale.edges) - 1 <= 8


@given(st.lists(st.floats(-1e4, 1e4) | st.just(np.nan), max_size=30))
def test_diverging_is_centred_on_zero(values):
    scale = diverging_scale(values)
    assert scale.edges == [0.0 - edge for edge in reversed(scale.edges)]
    known = [value for value in values if value == value]
    if known:
        assert 0.0 in scale.edges
        assert scale.edges[-1] >= max(abs(value) for value in known)
        assert len(scale.colours) == len(scale.edges) - 1
        assert len(scale.colours) % 2 == 0


def test_one_great_loss_does_not_hide_the_others():
    gains = [0.8, 1.2, 1.5, 2.1, 2.2, 2.8, 3.0]
    scale = diverging_scale([-60, *gains])
    assert len(set(np.digitize(gains, scale.edges))) >= 2


@pytest.mark.parametrize("scale", [sequential_scale, diverging_scale])
def test_nothing_known(scale):
    assert scale([np.nan]).colours == []
    assert scale([]).edges == []
