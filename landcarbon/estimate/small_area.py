"""The area-level model of Fay and Herriot: its variance component, best predictor and mean squared error.

Symbols are those of ``docs/estimation.md``. An area is a parcel; nothing here knows of pools or surveys.
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np

from landcarbon.errors import UserError
from landcarbon.estimate.groups import group_sum

__all__ = ["METHODS", "FayHerriot", "fit_fay_herriot", "fit_with_variance", "independent_columns", "predict_areas"]

METHODS = ("REML", "ML", "FH", "adjusted REML")

_STEPS = 200  # of the search for the variance component; a handful are needed
_HALVINGS = 40  # of one step that did not raise the likelihood
_TOLERANCE = 1e-12  # relative, of the variance component
_RANK = 1e-9  # a column with less than this share of its own length left is a sum of those before it
_SPAN = 1e10  # adjusted REML is sought between this much below and above the typical sampling variance


@dataclass(frozen=True)
class FayHerriot:
    """A fitted model. Areas m, columns p.

    Attributes
    ----------
    method : str
        How the variance component was found; ``given`` if it was not.
    refvar : ndarray
        Variance of the areas about the regression, one value per area, shape (m,); equal unless given otherwise.
    beta : ndarray
        Coefficients; shape (p,).
    beta_cov : ndarray
        Their covariance matrix, inverse of X' V^-1 X; shape (p, p).
    gamma : ndarray
        Weight of the direct figure; shape (m,).
    synthetic, eblup : ndarray
        x'beta, and gamma direct + (1 - gamma) x'beta; shape (m,).
    mse : ndarray
        Mean squared error of ``eblup``; shape (m,).
    refvar_variance : float
        Asymptotic variance of the variance component; 0 if it was given.
    design : ndarray
        X, shape (m, p).
    total : ndarray
        Variance component plus sampling variance, the diagonal of V; shape (m,).
    """

    method: str
    refvar: np.ndarray
    beta: np.ndarray
    beta_cov: np.ndarray
    gamma: np.ndarray
    synthetic: np.ndarray
    eblup: np.ndarray
    mse: np.ndarray
    refvar_variance: float
    design: np.ndarray
    total: np.ndarray

    @property
    def beta_se(self) -> np.ndarray:
        """Standard errors of the coefficients."""
        return np.sqrt(np.diag(self.beta_cov))

    @property
    def residual_df(self) -> int:
        """Areas less coefficients."""
        return self.design.shape[0] - self.design.shape[1]


@dataclass(frozen=True)
class _Design:
    """Covariates as groups (leading columns of 0 and 1, one of them 1 in each row; a constant is one group) and rest.

    Groups are averaged out, so that many of them cost no more than one.
    """

    code: np.ndarray
    groups: int
    rest: np.ndarray

    @classmethod
    def of(cls, design: np.ndarray) -> _Design:
        zero_one = ((design == 0) | (design == 1)).all(axis=0)
        leading = int(np.argmin(zero_one)) if not zero_one.all() else design.shape[1]
        filled = np.cumsum(design[:, :leading], axis=1)
        whole = np.flatnonzero((filled == 1).all(axis=0)) if len(design) else np.zeros(0, dtype=np.int64)
        groups = int(whole[0]) + 1 if len(whole) else 0
        code = design[:, :groups].argmax(axis=1) if groups else np.zeros(len(design), dtype=np.int64)
        return cls(code, groups, design[:, groups:])

    def add(self, values: np.ndarray) -> np.ndarray:
        """Sum by group; shape (groups, columns)."""
        return group_sum(values, self.code, self.groups)

    def mean(self, values: np.ndarray, weight: np.ndarray) -> np.ndarray:
        """Weighted mean by group; shape (groups, columns)."""
        return self.add(values * weight[:, None]) / self.add(weight[:, None])

    def spread(self, by_group: np.ndarray) -> np.ndarray | float:
        """Value of the group of each row; 0 without groups."""
        return by_group[self.code] if self.groups else 0.0


@dataclass(frozen=True)
class _At:
    """The likelihood at one value of the variance component: weights w = 1 / (A + psi), leverages and sums.

    Groups are taken out first: with z the covariates less their weighted means by group and C = z' W z, the leverage is
    1 / (sum of w of the group) + z' C^-1 z.
    """

    weight: np.ndarray
    design: _Design
    group_weight: np.ndarray
    group_mean: np.ndarray
    inverse: np.ndarray
    beta: np.ndarray
    residual: np.ndarray
    root: np.ndarray
    leverage: np.ndarray
    log_det: float

    @classmethod
    def of(cls, refvar: np.ndarray | float, direct: np.ndarray, variance: np.ndarray, design: _Design) -> _At:
        weight = 1.0 / (variance + refvar)
        mean = design.mean(np.column_stack([direct, design.rest]), weight)
        group_weight = design.add(weight[:, None])[:, 0]
        y = direct - design.spread(mean[:, 0])
        z = design.rest - design.spread(mean[:, 1:])
        normal = np.einsum("ij,i,ik->jk", z, weight, z)
        lower = np.linalg.cholesky(normal)
        inverse_lower = np.linalg.inv(lower)
        root = np.einsum("ij,kj->ik", z, inverse_lower)
        slope = np.einsum("jk,ij,i->k", inverse_lower, root, weight * y)
        return cls(
            weight=weight,
            design=design,
            group_weight=group_weight,
            group_mean=mean[:, 1:],
            inverse=inverse_lower.T @ inverse_lower,
            beta=np.concatenate([mean[:, 0] - mean[:, 1:] @ slope, slope]),
            residual=y - z @ slope,
            root=root,
            leverage=design.spread(1.0 / group_weight) + (root**2).sum(axis=1),
            log_det=float(np.log(group_weight).sum() + 2.0 * np.log(np.diag(lower)).sum()),
        )

    def score(self, kind: str) -> float:
        """Return the derivative of the log-likelihood with respect to the variance component."""
        fitted = 0.5 * float(((self.weight * self.residual) ** 2).sum())
        trace = float(self.weight.sum())
        if kind == "REML":
            trace -= self.trace_inner()
        return fitted - 0.5 * trace

    def trace_inner(self) -> float:
        """Trace of (X' W X)^-1 X' W^2 X."""
        return float((self.weight**2 * self.leverage).sum())

    def information(self, kind: str) -> float:
        """Return the expected information on the variance component."""
        square = float((self.weight**2).sum())
        if kind == "REML":
            squared = (self.weight**2)[:, None]
            by_group = self.design.add(np.column_stack([squared, squared * self.root]))
            inner = np.einsum("ij,i,ik->jk", self.root, self.weight**2, self.root)
            twice = (by_group[:, 0] / self.group_weight) ** 2
            crossed = 2.0 * (by_group[:, 1:] ** 2).sum(axis=1) / self.group_weight
            square += float(twice.sum() + crossed.sum() + (inner**2).sum())
            square -= 2.0 * float((self.weight**3 * self.leverage).sum())
        return 0.5 * square

    def likelihood(self, kind: str) -> float:
        """Logarithm of the profile likelihood, up to a constant."""
        value = 0.5 * float(np.log(self.weight).sum()) - 0.5 * float((self.weight * self.residual**2).sum())
        return value - 0.5 * self.log_det if kind == "REML" else value

    def beta_cov(self) -> np.ndarray:
        """Inverse of X' W X, groups first."""
        crossed = -self.group_mean @ self.inverse
        first = np.diag(1.0 / self.group_weight) - crossed @ self.group_mean.T
        return np.block([[first, crossed], [crossed.T, self.inverse]])


def fit_fay_herriot(
    direct: np.ndarray, variance: np.ndarray, design: np.ndarray, *, method: str = "REML"
) -> FayHerriot:
    """Fit the model direct = X beta + u + e and predict X beta + u.

    Parameters
    ----------
    direct : ndarray
        Direct figures of the areas, shape (m,); any unit.
    variance : ndarray
        Their sampling variances, taken as known, above 0; shape (m,).
    design : ndarray
        Covariates with the constant, of full column rank; shape (m, p).
    method : {"REML", "ML", "FH", "adjusted REML"}
        How the variance of u is found: by restricted or plain maximum likelihood, by the moment equation of Fay and
        Herriot, or by restricted likelihood times the variance itself, which is never zero.

    Returns
    -------
    FayHerriot
        The variance component is cut at 0 where its equation has no positive root (never for "adjusted REML"). Then
        every area gets the synthetic figure and the mean squared error is g2 + 2 g3, which is above 0.

    Raises
    ------
    UserError
        If the method is unknown, shapes differ, a value is not finite, a variance is not above 0, or areas are too few.

    Notes
    -----
    MSE = g1 + g2 + 2 g3 for REML, with a further bias term for ML and FH: g1 = gamma psi, g2 = (1 - gamma)^2 x'
    (X' V^-1 X)^-1 x, g3 = psi^2 / (A + psi)^3 times the asymptotic variance of A. For adjusted REML the form of REML is
    used, which does not take off the (upward) bias of A.

    References
    ----------
    .. [1] Fay, R. E., Herriot, R. A. (1979). Journal of the American Statistical Association 74, 269-277.
    .. [2] Prasad, N. G. N., Rao, J. N. K. (1990). Journal of the American Statistical Association 85, 163-171.
    .. [3] Datta, G. S., Lahiri, P. (2000). Statistica Sinica 10, 613-627.
    .. [4] Li, H., Lahiri, P. (2010). Journal of Multivariate Analysis 101, 882-892.
    .. [5] Rao, J. N. K., Molina, I. (2015). Small Area Estimation, 2nd ed., Wiley, sections 6.1 and 6.2.
    """
    if method not in METHODS:
        raise UserError(f"{method!r} is not a way to find the variance", remedy=f"Use {', '.join(METHODS)}.")
    direct, variance, design = _checked(direct, variance, design)
    few = design.shape[1] + (2 if method == "adjusted REML" else 0)
    if len(direct) <= few:
        raise UserError(
            f"{len(direct)} areas are too few for {design.shape[1]} coefficients by {method}",
            remedy=f"It needs more than {few}.",
        )
    # of the order of 1, so that nothing depends on the unit
    scale = float(np.sqrt(np.median(variance)))
    scaled, spread, split = direct / scale, variance / scale**2, _Design.of(design)
    if method == "FH":
        found = _moment(scaled, spread, split)
    elif method == "adjusted REML":
        found = _adjusted(scaled, spread, split)
    else:
        found = _likelihood(scaled, spread, split, method)
    return _predict(direct, variance, design, np.full(len(direct), found * scale**2), method)


def fit_with_variance(
    direct: np.ndarray, variance: np.ndarray, design: np.ndarray, refvar: np.ndarray | float
) -> FayHerriot:
    """Predict with a variance component that is given.

    Parameters
    ----------
    direct, variance, design
        As for :func:`fit_fay_herriot`.
    refvar : ndarray or float
        Variance component, one for all areas or one each; not negative.

    Returns
    -------
    FayHerriot
        MSE = g1 + g2.
    """
    direct, variance, design = _checked(direct, variance, design)
    given = np.broadcast_to(np.asarray(refvar, dtype=float), direct.shape)
    if not (np.isfinite(given) & (given >= 0)).all():
        raise UserError("a variance component is negative or not finite", remedy="Give numbers from 0 on.")
    return _predict(direct, variance, design, given, "given")


def predict_areas(
    fit: FayHerriot, design: np.ndarray, refvar: np.ndarray | float | None = None
) -> tuple[np.ndarray, np.ndarray]:
    """Synthetic figures of areas without a direct one, and their mean squared error.

    Parameters
    ----------
    fit : FayHerriot
        The model.
    design : ndarray
        Covariates of the areas, shape (areas, p).
    refvar : ndarray or float, optional
        Variance component of these areas; that of the model unless given.

    Returns
    -------
    value, mse : ndarray
        x'beta, and A + x' cov(beta) x.
    """
    own = fit.refvar[0] if refvar is None else refvar
    return design @ fit.beta, own + np.einsum("ij,ij->i", design @ fit.beta_cov, design)


def independent_columns(design: np.ndarray) -> np.ndarray:
    """Positions of the columns that are not zero, nor a linear combination of those before them.

    Parameters
    ----------
    design : ndarray
        Shape (m, p).
    """
    split = _Design.of(design)
    filled = split.add(np.ones((len(design), 1)))[:, 0] > 0
    kept = [int(column) for column in np.flatnonzero(filled)]
    length = np.sqrt((split.rest**2).sum(axis=0))
    ones = np.ones(len(design))
    apart = split.rest - (split.spread(split.mean(split.rest, ones)) if filled.all() else 0.0)
    basis = np.zeros((len(design), 0))
    for column in np.flatnonzero(length > 0):
        left = apart[:, column] / length[column]
        for _ in range(2):  # twice is enough
            left = left - basis @ (basis.T @ left)
        rest = float(np.sqrt((left**2).sum()))
        if rest > _RANK:
            basis = np.column_stack([basis, left / rest])
            kept.append(int(column) + split.groups)
    return np.array(kept, dtype=np.int64)


def _checked(direct: np.ndarray, variance: np.ndarray, design: np.ndarray) -> tuple[np.ndarray, np.ndarray, np.ndarray]:
    y, psi, x = (np.asarray(values, dtype=float) for values in (direct, variance, design))
    if y.ndim != 1 or psi.shape != y.shape or x.ndim != 2 or len(x) != len(y):
        raise UserError("direct figures, variances and covariates differ in length", remedy="Give one row per area.")
    if not (np.isfinite(y).all() and np.isfinite(psi).all() and np.isfinite(x).all()):
        raise UserError("a direct figure, variance or covariate is missing", remedy="Leave such areas out of the fit.")
    if not (psi > 0).all():
        raise UserError("a sampling variance is not above 0", remedy="Smooth the sampling variances first.")
    if len(independent_columns(x)) < x.shape[1]:
        raise UserError("covariates are linear combinations of each other", remedy="Leave the superfluous ones out.")
    return y, psi, x


def _likelihood(direct: np.ndarray, variance: np.ndarray, design: _Design, kind: str) -> float:
    """Fisher scoring; a step that lowers the likelihood is halved. 0 where the likelihood falls from there on."""
    refvar = float(np.median(variance))
    at = _At.of(refvar, direct, variance, design)
    for _ in range(_STEPS):
        step = at.score(kind) / at.information(kind)
        goal = max(refvar + step, 0.0)
        trial = _At.of(goal, direct, variance, design)
        for _ in range(_HALVINGS):
            if trial.likelihood(kind) >= at.likelihood(kind):
                break
            goal = 0.5 * (goal + refvar)
            trial = _At.of(goal, direct, variance, design)
        moved = abs(goal - refvar)
        refvar, at = goal, trial
        if moved <= _TOLERANCE * (1.0 + refvar):
            break
    return refvar


def _moment(direct: np.ndarray, variance: np.ndarray, design: _Design) -> float:
    """Root of sum of r^2 / (A + psi) = m - p by Newton's steps from 0; the sum falls and is convex in A."""
    wanted = len(direct) - design.groups - design.rest.shape[1]
    refvar = 0.0
    for _ in range(_STEPS):
        at = _At.of(refvar, direct, variance, design)
        excess = float((at.weight * at.residual**2).sum()) - wanted
        slope = float(((at.weight * at.residual) ** 2).sum())
        step = excess / slope if slope > 0 else 0.0
        goal = max(refvar + step, 0.0)
        if abs(goal - refvar) <= _TOLERANCE * (1.0 + goal):
            return goal
        refvar = goal
    return refvar


def _adjusted(direct: np.ndarray, variance: np.ndarray, design: _Design) -> float:
    """Mode of A times the restricted likelihood, by bisection of its slope in log A."""
    low, high = -np.log(_SPAN), np.log(_SPAN) + np.log1p(float(np.var(direct)))

    def rises(log_refvar: float) -> bool:
        refvar = float(np.exp(log_refvar))
        return refvar * _At.of(refvar, direct, variance, design).score("REML") + 1.0 > 0

    while high - low > _TOLERANCE:
        middle = 0.5 * (low + high)
        if middle in (low, high):
            break
        low, high = (middle, high) if rises(middle) else (low, middle)
    return float(np.exp(0.5 * (low + high)))


def _predict(
    direct: np.ndarray, variance: np.ndarray, design: np.ndarray, refvar: np.ndarray, method: str
) -> FayHerriot:
    at = _At.of(refvar, direct, variance, _Design.of(design))
    total = variance + refvar
    gamma = refvar / total
    left = variance / total
    synthetic = design @ at.beta
    asymptotic = _refvar_variance(at.weight, method)
    mse = gamma * variance + left**2 * at.leverage + 2.0 * left**2 * at.weight * asymptotic
    mse = mse - _refvar_bias(at, method) * left**2
    return FayHerriot(
        method=method,
        refvar=refvar,
        beta=at.beta,
        beta_cov=at.beta_cov(),
        gamma=gamma,
        synthetic=synthetic,
        eblup=gamma * direct + left * synthetic,
        mse=mse,
        refvar_variance=asymptotic,
        design=design,
        total=total,
    )


def _refvar_variance(weight: np.ndarray, method: str) -> float:
    if method == "given":
        return 0.0
    if method == "FH":
        return 2.0 * len(weight) / float(weight.sum()) ** 2
    return 2.0 / float((weight**2).sum())


def _refvar_bias(at: _At, method: str) -> float:
    """Bias of the variance component to the first order; zero for REML."""
    squares = float((at.weight**2).sum())
    if method == "ML":
        return -at.trace_inner() / squares
    if method == "FH":
        total = float(at.weight.sum())
        return 2.0 * (len(at.weight) * squares - total**2) / total**3
    return 0.0
