"""Figures of parcels brought to totals: exact sums, the least change, no negative stock, stated error."""

from __future__ import annotations

from typing import Any

import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st

from landcarbon.estimate.benchmark import ADDED, AS_IS, SCALED, Benchmarked, benchmark

QUICK = settings(max_examples=40, deadline=None, derandomize=True)


def bring(value: Any, mse: Any, total: Any, *, area: Any = None, group: Any = None, **options: Any) -> Benchmarked:
    value = np.asarray(value, dtype=float)[:, None]
    total = np.atleast_1d(np.asarray(total, dtype=float))[:, None]
    given = {
        "area_ha": np.ones(len(value)) if area is None else np.asarray(area, dtype=float),
        "group": np.zeros(len(value), dtype=int) if group is None else np.asarray(group),
        "total": total,
        "discrepancy": np.zeros_like(total),
        "positive": True,
    } | options
    return benchmark(value, np.asarray(mse, dtype=float)[:, None], **given)


def test_the_change_is_least_measured_by_the_errors() -> None:
    value, mse, area = np.array([50.0, 80.0, 60.0]), np.array([4.0, 25.0, 9.0]), np.array([10.0, 3.0, 20.0])
    made = bring(value, mse, 2100.0, area=area)
    # identity: minimum of sum (change^2 / mse) under sum (area figure) = total, by its Lagrange equations
    system = np.block([[np.diag(2 / mse), area[:, None]], [area[None, :], np.zeros((1, 1))]])
    change = np.linalg.solve(system, np.append(np.zeros(3), 2100.0 - area @ value))[:3]
    np.testing.assert_allclose(made.adjustment[:, 0], change, rtol=1e-12)
    np.testing.assert_allclose(area @ made.value[:, 0], 2100.0, rtol=1e-14)
    assert made.how[0, 0] == ADDED


def test_error_grows_by_that_of_the_adjustment() -> None:
    made = bring([50, 80], [4.0, 12.0], 150.0, discrepancy=np.array([[64.0]]))
    # by hand: weights 1/4 and 3/4 of the gap, so 64 / 16 and 64 9 / 16 are added
    np.testing.assert_allclose(made.mse[:, 0], [4 + 4, 12 + 36])


def test_a_stock_is_scaled_rather_than_made_negative() -> None:
    made = bring([2.0, 90.0], [400.0, 1.0], 80.0)
    assert made.how[0, 0] == SCALED
    np.testing.assert_allclose(made.value[:, 0], [2 * 80 / 92, 90 * 80 / 92])
    change = bring([2.0, 90.0], [400.0, 1.0], 80.0, positive=False)
    assert change.how[0, 0] == ADDED
    assert change.value[0, 0] < 0


def test_without_a_total_nothing_moves() -> None:
    made = bring([50, 80, 60], [4, 9, 16], [np.nan, 140.0], group=[0, 0, 1])
    np.testing.assert_allclose(made.value[:, 0], [50, 80, 140])
    assert made.how[:, 0].tolist() == [AS_IS, ADDED]


@pytest.mark.parametrize("gap", [{"value": [50, np.nan]}, {"area": [1.0, np.nan]}, {"area": [0.0, 0.0]}])
def test_with_a_gap_nothing_moves(gap: dict[str, Any]) -> None:
    given = {"value": [50.0, 80.0], "mse": [4.0, 9.0], "total": 100.0} | gap
    made = bring(**given)
    assert made.how[0, 0] == AS_IS
    np.testing.assert_array_equal(made.value[:, 0], np.asarray(given["value"], dtype=float))


def test_errors_of_zero_share_the_gap_by_area() -> None:
    made = bring([50, 80], [0.0, np.nan], 150.0, area=[1.0, 1.0])
    np.testing.assert_allclose(made.value[:, 0], [60, 90])


def test_a_parcel_of_no_area_keeps_its_figure() -> None:
    made = bring([50, 80], [4.0, 9.0], 55.0, area=[1.0, 0.0])
    np.testing.assert_allclose(made.value[:, 0], [55, 80])


@QUICK
@given(
    seed=st.integers(0, 10_000),
    scale=st.sampled_from([1e-9, 1.0, 44 / 12, 1e9]),
    positive=st.booleans(),
    off=st.floats(0.2, 3.0),
)
def test_sums_are_exact_whatever_the_scale(seed: int, scale: float, positive: bool, off: float) -> None:
    rng = np.random.default_rng(seed)
    value, mse = scale * rng.gamma(1.0, 50.0, (30, 3)), scale**2 * rng.gamma(0.5, 100.0, (30, 3))
    area, group = rng.gamma(1.0, 20.0, 30), rng.integers(0, 4, 30)
    sums = np.zeros((4, 3))
    np.add.at(sums, group, area[:, None] * value)
    total = sums * off
    options = {"area_ha": area, "group": group, "total": total, "positive": positive}
    made = benchmark(value, mse, discrepancy=np.ones((4, 3)) * scale**2, **options)
    reached = np.zeros((4, 3))
    np.add.at(reached, group, area[:, None] * made.value)
    np.testing.assert_allclose(reached, total, rtol=1e-12)
    assert (made.mse >= mse).all()
    if positive:
        assert (made.value >= 0).all()
    order = rng.permutation(30)
    again = benchmark(
        value[order], mse[order], discrepancy=np.ones((4, 3)) * scale**2, **{**options, "area_ha": area[order],
                                                                             "group": group[order]}
    )  # fmt: skip
    np.testing.assert_allclose(again.value, made.value[order], rtol=1e-9, atol=1e-12 * scale)
