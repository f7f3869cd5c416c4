"""Equation forms: a closed set of named, vectorised functions.

A *form* is the shape of an equation as printed, with the coefficients left open; the coefficients are data
(``allometry/equations/*.csv``). Each form is registered once in :data:`FORMS` with its formula in the symbols of the
publications. Nothing is parsed or compiled from text at run time.

Symbols used in the formulas
----------------------------
``D`` diameter in the unit and at the height the row states (column ``diameter``; by default dbh over bark in cm),
``H`` total height [m], ``Hs`` stem height [m], ``rho`` basic wood density [g/cm3, oven-dry mass over green volume],
``E`` bioclimatic stress [-], ``ln`` and ``exp`` natural, ``log10`` base ten, ``b0`` ... ``b4`` the coefficient
columns with the sign as printed, ``c0`` ... ``c3`` constants printed inside the formula itself.

Most forms are linear in the logarithm of the result. They share one function, :func:`exp_log_terms`; a form only says
how its printed coefficients map on the terms (:class:`LogTerms`). Straight polynomials share :func:`polynomial`, and
the functions with a saturating diameter term share :func:`exp_saturating`. The few that fit none of them are written
out.

All functions return the value in the unit printed by the publication, NaN where an input is NaN or a logarithm is
undefined, and never change their inputs.
"""

from __future__ import annotations

from collections.abc import Callable, Mapping
from dataclasses import dataclass
from math import log

import numpy as np

from allometry._terms import (
    FloatArray,
    LogTerms,
    Predictors,
    exp_log_terms,
    exp_saturating,
    hinge,
    polynomial,
    positive,
)

__all__ = [
    "FORMS",
    "Form",
    "LogTerms",
    "Predictors",
    "exp_log_terms",
    "exp_saturating",
    "hinge",
    "polynomial",
]

Coefficients = Mapping[str, float]
LN10 = log(10.0)
METRES_PER_FOOT = 0.3048
"""International foot [m], exact by definition."""


@dataclass(frozen=True)
class Form:
    """One equation form.

    Parameters
    ----------
    name
        Identifier used in the tables.
    formula
        The formula in the symbols of the module docstring.
    inputs
        Measured variables: ``D`` stands for the diameter named by the row, the others are argument names.
    coefficients
        Coefficient columns that must be filled; all others must be empty.
    terms
        Maps the printed coefficients on :class:`LogTerms`, for forms linear in the logarithm.
    function
        Evaluates the form from predictors and coefficients, for all others.
    """

    name: str
    formula: str
    inputs: tuple[str, ...]
    coefficients: tuple[str, ...] = ()
    terms: Callable[..., LogTerms] | None = None
    function: Callable[..., FloatArray] | None = None

    @property
    def composed(self) -> bool:
        """Whether the value comes from other rows (a sum or a remainder) and not from coefficients."""
        return self.terms is None and self.function is None

    def bind(self, coefficients: Coefficients) -> Callable[[Predictors], FloatArray]:
        """Fix the coefficients and return a function of the predictors alone."""
        if self.terms is not None:
            fixed = self.terms(**coefficients)
            return lambda p: exp_log_terms(p, terms=fixed)
        function = self.function
        if function is None:
            raise TypeError(f"form {self.name} is composed of other rows and has no coefficients")
        return lambda p: function(p, **coefficients)


FORMS: dict[str, Form] = {}


def _log_form(name: str, formula: str, inputs: str, terms: Callable[..., LogTerms]) -> None:
    names = terms.__code__.co_varnames[: terms.__code__.co_argcount]
    FORMS[name] = Form(name, formula, tuple(inputs.split()), names, terms=terms)


def _poly_form(name: str, formula: str, inputs: str, *signed_terms: str) -> None:
    signs = tuple(-1.0 if t[0] == "-" else 1.0 for t in signed_terms)
    terms = tuple(t[1:] for t in signed_terms)
    columns = tuple(f"b{i}" for i in range(len(terms)))

    def function(p: Predictors, **b: float) -> FloatArray:
        factors = tuple(sign * b[column] for sign, column in zip(signs, columns, strict=True))
        return polynomial(p, terms=terms, factors=factors)

    FORMS[name] = Form(name, formula, tuple(inputs.split()), columns, function=function)


def _form(name: str, formula: str, inputs: str, coefficients: str, function: Callable[..., FloatArray]) -> None:
    FORMS[name] = Form(name, formula, tuple(inputs.split()), tuple(coefficients.split()), function=function)


def _log_forms() -> None:
    """Register the forms linear in ln y; the argument names of each mapping are the coefficient columns."""
    t = LogTerms
    d, dh, dr, dhr = (
        "D",
        "D height_m",
        "D wood_density_g_cm3",
        "D height_m wood_density_g_cm3",
    )
    _log_form("power", "b0*D^b1", d, lambda b0, b1: t(log(b0), ln_d=b1))
    _log_form("power_b1", "b1*D^b2", d, lambda b1, b2: t(log(b1), ln_d=b2))
    _log_form("log_linear", "exp(b0 + b1*ln(D))", d, lambda b0, b1: t(b0, ln_d=b1))
    _log_form("log_linear_factor", "exp(b0 + b1*ln(D))*b2", d, lambda b0, b1, b2: t(b0 + log(b2), ln_d=b1))
    _log_form("log_linear_offset", "exp(b0 + b1*ln(D) + b2)", d, lambda b0, b1, b2: t(b0 + b2, ln_d=b1))
    _log_form("log_quadratic", "exp(b0 + b1*ln(D) + b2*ln(D)^2)", d, lambda b0, b1, b2: t(b0, ln_d=b1, ln_d2=b2))
    _log_form("log_inverse", "exp(b0 + b1/D)", d, lambda b0, b1: t(b0, inverse_d=b1))
    _log_form("log10_linear", "10^(b0 + b1*log10(D))", d, lambda b0, b1: t(b0 * LN10, ln_d=b1))
    _log_form("log10_slope_first", "10^(b0*log10(D) + b1)", d, lambda b0, b1: t(b1 * LN10, ln_d=b0))
    _log_form(
        "log10_basal_area",
        "10^(b0 + log10(BA)), BA = pi*D^2/4",
        d,
        lambda b0: t(b0 * LN10 + log(np.pi / 4), ln_d=2.0),
    )
    _log_form("square", "b0*D^2", d, lambda b0: t(log(b0), ln_d=2.0))
    _log_form("linear", "b0*D", d, lambda b0: t(log(b0), ln_d=1.0))
    _log_form("power_height", "b0*D^b1*H^b2", dh, lambda b0, b1, b2: t(log(b0), ln_d=b1, ln_h=b2))
    _log_form("power_height_b1", "b1*D^b2*H^b3", dh, lambda b1, b2, b3: t(log(b1), ln_d=b2, ln_h=b3))
    _log_form("d_h", "b0*D*H", dh, lambda b0: t(log(b0), ln_d=1.0, ln_h=1.0))
    _log_form("d2h", "b0*D^2*H", dh, lambda b0: t(log(b0), ln_d=2.0, ln_h=1.0))
    _log_form("power_d2h", "b0*(D^2*H)^b1", dh, lambda b0, b1: t(log(b0), ln_d=2 * b1, ln_h=b1))
    _log_form("log_d2h", "exp(b0 + b1*ln(D^2*H))", dh, lambda b0, b1: t(b0, ln_d=2 * b1, ln_h=b1))
    _log_form("log10_d2h", "10^(b0 + b1*log10(H*D^2))", dh, lambda b0, b1: t(b0 * LN10, ln_d=2 * b1, ln_h=b1))
    _log_form(
        "log10_d2h_slope_first", "10^(b0*log10(H*D^2) + b1)", dh, lambda b0, b1: t(b1 * LN10, ln_d=2 * b0, ln_h=b0)
    )
    _log_form(
        "log10_linear_height",
        "10^(b0 + b1*log10(D) + b2*H)",
        dh,
        lambda b0, b1, b2: t(b0 * LN10, ln_d=b1, h=b2 * LN10),
    )
    _log_form("log_linear_height", "exp(b0 + b1*ln(D) + b2*ln(H))", dh, lambda b0, b1, b2: t(b0, ln_d=b1, ln_h=b2))
    _log_form(
        "log_linear_height_squared",
        "exp(b0 + b1*ln(D) + b2*(ln(H))^2)",
        dh,
        lambda b0, b1, b2: t(b0, ln_d=b1, ln_h2=b2),
    )
    _log_form(
        "log_inverse_square_height",
        "exp(b0 + b1*ln(1/D^2) + b2*ln(H))",
        dh,
        lambda b0, b1, b2: t(b0, ln_d=-2 * b1, ln_h=b2),
    )
    _log_form("density_power", "b0*rho*D^b1", dr, lambda b0, b1: t(log(b0), ln_d=b1, ln_rho=1.0))
    _log_form("density_exponent_power", "b0*rho^b1*D^b2", dr, lambda b0, b1, b2: t(log(b0), ln_d=b2, ln_rho=b1))
    _log_form("density_power_shifted", "b0*rho*D^(2 + b1)", dr, lambda b0, b1: t(log(b0), ln_d=2 + b1, ln_rho=1.0))
    _log_form(
        "density_log_cubic",
        "rho*exp(b0 + b1*ln(D) + b2*ln(D)^2 + b3*ln(D)^3)",
        dr,
        lambda b0, b1, b2, b3: t(b0, ln_d=b1, ln_d2=b2, ln_d3=b3, ln_rho=1.0),
    )
    _log_form(
        "log_cubic_density",
        "exp(b0 + b1*ln(D) + b2*ln(D)^2 + b3*ln(D)^3 + b4*ln(rho))",
        dr,
        lambda b0, b1, b2, b3, b4: t(b0, ln_d=b1, ln_d2=b2, ln_d3=b3, ln_rho=b4),
    )
    _log_form("density_d2h", "b0*rho*D^2*H", dhr, lambda b0: t(log(b0), ln_d=2.0, ln_h=1.0, ln_rho=1.0))
    _log_form(
        "power_density_d2h",
        "b0*(rho*D^2*H)^b1",
        dhr,
        lambda b0, b1: t(log(b0), ln_d=2 * b1, ln_h=b1, ln_rho=b1),
    )
    _log_form(
        "density_power_d2h",
        "b0*rho*(D^2*H)^b1",
        dhr,
        lambda b0, b1: t(log(b0), ln_d=2 * b1, ln_h=b1, ln_rho=1.0),
    )
    _log_form(
        "log_density_d2h",
        "exp(b0 + b1*ln(D^2*rho*H))",
        dhr,
        lambda b0, b1: t(b0, ln_d=2 * b1, ln_h=b1, ln_rho=b1),
    )
    _log_form(
        "stem_cylinder",
        "pi*(D/2)^2*H*100*rho/1000",
        dhr,
        lambda: t(log(np.pi / 40), ln_d=2.0, ln_h=1.0, ln_rho=1.0),
    )
    _log_form(
        "log_quadratic_stress",
        "exp(b0 + b1*E + b2*ln(rho) + b3*ln(D) + b4*ln(D)^2)",
        "D wood_density_g_cm3 stress",
        lambda b0, b1, b2, b3, b4: t(b0, stress=b1, ln_rho=b2, ln_d=b3, ln_d2=b4),
    )
    _log_form(
        "height_stress",
        "exp(b0 - E + b1*ln(D) + b2*ln(D)^2)",
        "D stress",
        lambda b0, b1, b2: t(b0, stress=-1.0, ln_d=b1, ln_d2=b2),
    )


def _polynomial_forms() -> None:
    dh = "D height_m"
    _poly_form("quadratic", "b0 + b1*D + b2*D^2", "D", "+1", "+D", "+D^2")
    _poly_form("const_d2", "b0 + b1*D^2", "D", "+1", "+D^2")
    _poly_form("const_d2h", "b0 + b1*D^2*H", dh, "+1", "+D^2*H")
    _poly_form("const_d2_d2h", "b0 + b1*D^2 + b2*D^2*H", dh, "+1", "+D^2", "+D^2*H")
    _poly_form("const_d2_h", "b0 + b1*D^2 + b2*H", dh, "+1", "+D^2", "+H")
    _poly_form("const_d2_less_h", "b0 + b1*D^2 - b2*H", dh, "+1", "+D^2", "-H")
    _poly_form("const_d2h_less_dh", "b0 + b1*D^2*H - b2*D*H", dh, "+1", "+D^2*H", "-D*H")
    _poly_form("d_less_h", "b0*D - b1*H", dh, "+D", "-H")
    _poly_form("d2_h", "b0*D^2 + b1*H", dh, "+D^2", "+H")
    _poly_form("d2_less_h2", "b0*D^2 - b1*H^2", dh, "+D^2", "-H^2")
    _poly_form("d2_d2h", "b0*D^2 + b1*D^2*H", dh, "+D^2", "+D^2*H")
    _poly_form("d2_less_d2h", "b0*D^2 - b1*D^2*H", dh, "+D^2", "-D^2*H")
    _poly_form("d2_h_d2h", "b0*D^2 + b1*H + b2*D^2*H", dh, "+D^2", "+H", "+D^2*H")
    _poly_form("d2h_dh", "b0*D^2*H + b1*D*H", dh, "+D^2*H", "+D*H")
    _poly_form("const_h_h2", "b0 + b1*H + b2*H^2", "height_m", "+1", "+H", "+H^2")


def _saturating_forms() -> None:
    stump = "c0 c2 c3 b0 b1 b4"

    def nordic(p: Predictors, *, b0: float, b1: float, b2: float, b3: float = 0.0, b4: float = 0.0) -> FloatArray:
        return exp_saturating(p, constant=b0, slope=b1, half=b2, h=b3, ln_h=b4)

    def finnish(p: Predictors, *, c0: float, c2: float, c3: float, b0: float, b1: float, b4: float) -> FloatArray:
        return exp_saturating(p, constant=b0 + b4, slope=b1, half=c0, stump=(c2, c3))

    def finnish_ln(p: Predictors, *, b0: float, b1: float, b2: float, b4: float, **c: float) -> FloatArray:
        return exp_saturating(p, constant=b0 + b4, slope=b1, half=c["c0"], ln_h=b2, stump=(c["c2"], c["c3"]))

    def finnish_ln_h(p: Predictors, *, b2: float, b3: float, **k: float) -> FloatArray:
        return exp_saturating(
            p, constant=k["b0"] + k["b4"], slope=k["b1"], half=k["c0"], ln_h=b2, h=b3, stump=(k["c2"], k["c3"])
        )

    def finnish_ratio(p: Predictors, *, b2: float, c1: float, **k: float) -> FloatArray:
        return exp_saturating(
            p, constant=k["b0"] + k["b4"], slope=k["b1"], half=k["c0"], h_ratio=(b2, c1), stump=(k["c2"], k["c3"])
        )

    _form("saturating", "exp(b0 + b1*D/(D + b2))", "D", "b0 b1 b2", nordic)
    _form("saturating_height", "exp(b0 + b1*D/(D + b2) + b3*H + b4*ln(H))", "D height_m", "b0 b1 b2 b3 b4", nordic)
    x = "x = c2 + c3*D"
    _form("stump_saturating", f"exp(b0 + b1*x/(x + c0) + b4), {x}", "D", stump, finnish)
    _form(
        "stump_saturating_ln_h",
        f"exp(b0 + b1*x/(x + c0) + b2*ln(H) + b4), {x}",
        "D height_m",
        f"{stump} b2",
        finnish_ln,
    )
    _form(
        "stump_saturating_ln_h_h",
        f"exp(b0 + b1*x/(x + c0) + b2*ln(H) + b3*H + b4), {x}",
        "D height_m",
        f"{stump} b2 b3",
        finnish_ln_h,
    )
    _form(
        "stump_saturating_h_ratio",
        f"exp(b0 + b1*x/(x + c0) + b2*H/(H + c1) + b4), {x}",
        "D height_m",
        f"{stump} b2 c1",
        finnish_ratio,
    )


def _threshold_forms() -> None:
    _form("hinge", "b0*max(D - b1, 0)", "D", "b0 b1", lambda p, b0, b1: hinge(p, factor=b0, threshold=b1, exponent=1))
    _form(
        "hinge_square",
        "b0*max(D - b1, 0)^2",
        "D",
        "b0 b1",
        lambda p, b0, b1: hinge(p, factor=b0, threshold=b1, exponent=2),
    )
    _form(
        "hinge_square_h",
        "b0*max(D - b1, 0)^2*H",
        "D height_m",
        "b0 b1",
        lambda p, b0, b1: hinge(p, factor=b0 * p.height, threshold=b1, exponent=2),
    )
    _form(
        "hinge_square_less_h",
        "(b0 - b1*H)*max(D - b2, 0)^2",
        "D height_m",
        "b0 b1 b2",
        lambda p, b0, b1, b2: hinge(p, factor=b0 - b1 * p.height, threshold=b2, exponent=2),
    )


def _stump_outside(p: Predictors, *, b1: float, c0: float) -> FloatArray:
    feet = p.extra["stump_height_m"] / METRES_PER_FOOT
    diameter = positive(p.diameter)
    return diameter + b1 * diameter * (c0 - feet) / (feet + 1.0)


def _stump_inside(p: Predictors, *, b1: float, b2: float, c0: float) -> FloatArray:
    feet = p.extra["stump_height_m"] / METRES_PER_FOOT
    diameter = positive(p.diameter)
    return b1 * diameter + b2 * diameter * (c0 - feet) / (feet + 1.0)


def _shifted_power(p: Predictors, *, b0: float, b1: float, b2: float, b3: float) -> FloatArray:
    diameter = positive(p.diameter)
    return b0 * (diameter + 1.0) ** (b1 + b2 * np.log10(diameter)) * p.height**b3


def _dry_fraction(p: Predictors, *, b0: float) -> FloatArray:
    x = p.extra["dry_mass_fraction"] * positive(p.diameter) ** 2 * p.extra["stem_height_m"]
    return (b0 * x**0.25) ** 4


def _stress_index(p: Predictors, *, b0: float, b1: float, b2: float) -> FloatArray:
    e = p.extra
    return 1e-3 * (
        b0 * e["temperature_seasonality"] + b1 * e["water_deficit_mm_yr"] + b2 * e["precipitation_seasonality"]
    )


def _other_forms() -> None:
    _form(
        "square_excess",
        "b0*D^2 + b1*(D^2 - b2)",
        "D",
        "b0 b1 b2",
        lambda p, b0, b1, b2: b0 * positive(p.diameter) ** 2 + b1 * (p.diameter**2 - b2),
    )
    _form(
        "const_inverse_power",
        "b0 + b1/D^b2",
        "D",
        "b0 b1 b2",
        lambda p, b0, b1, b2: b0 + b1 / positive(p.diameter) ** b2,
    )
    _form("shifted_power", "b0*(D + 1)^(b1 + b2*log10(D))*H^b3", "D height_m", "b0 b1 b2 b3", _shifted_power)
    _form(
        "weibull",
        "b0*(1 - exp(-b1*D^b2))",
        "D",
        "b0 b1 b2",
        lambda p, b0, b1, b2: b0 * -np.expm1(-b1 * positive(p.diameter) ** b2),
    )
    _form(
        "saturating_exponential",
        "b0*(1 - exp(-b1*D))",
        "D",
        "b0 b1",
        lambda p, b0, b1: b0 * -np.expm1(-b1 * positive(p.diameter)),
    )
    _form("const_ln_h2", "b0 + b1*(ln(H))^2", "height_m", "b0 b1", lambda p, b0, b1: b0 + b1 * p.ln_h**2)
    _form(
        "const_root_ln_h",
        "b0 + b1*H^0.5*ln(H)",
        "height_m",
        "b0 b1",
        lambda p, b0, b1: b0 + b1 * p.height**0.5 * p.ln_h,
    )
    _form(
        "logistic_h",
        "b0/(1 + b1*exp(b2*H))",
        "height_m",
        "b0 b1 b2",
        lambda p, b0, b1, b2: b0 / (1.0 + b1 * np.exp(b2 * p.height)),
    )
    _form("fourth_root", "(b0*(F*D^2*Hs)^0.25)^4", "D dry_mass_fraction stem_height_m", "b0", _dry_fraction)
    stem = "stem_height_m"
    _form(
        "log_stem",
        "exp(b0 + b1*ln(Hs))",
        stem,
        "b0 b1",
        lambda p, b0, b1: np.exp(b0 + b1 * np.log(positive(p.extra[stem]))),
    )
    _form("exp_stem", "exp(b0 + b1*Hs)", stem, "b0 b1", lambda p, b0, b1: np.exp(b0 + b1 * p.extra[stem]))
    _form("linear_stem", "b0 + b1*Hs", stem, "b0 b1", lambda p, b0, b1: b0 + b1 * p.extra[stem])
    _form("stump_diameter_outside", "D + b1*D*(c0 - h)/(h + 1), h in ft", "D stump_height_m", "b1 c0", _stump_outside)
    _form(
        "stump_diameter_inside", "b1*D + b2*D*(c0 - h)/(h + 1), h in ft", "D stump_height_m", "b1 b2 c0", _stump_inside
    )
    _form(
        "stress_index",
        "(b0*TS + b1*CWD + b2*PS)*1e-3",
        "temperature_seasonality water_deficit_mm_yr precipitation_seasonality",
        "b0 b1 b2",
        _stress_index,
    )
    FORMS["sum"] = Form("sum", "sum of the rows named in parts", ())
    FORMS["remainder"] = Form("remainder", "1 - sum of the ratio rows named in parts", ())


_log_forms()
_polynomial_forms()
_saturating_forms()
_threshold_forms()
_other_forms()
