"""Least squares of one hypothesis: robust loss, several starts, noise estimated from the residuals, covariance."""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass
from typing import Any

import numpy as np
from numpy.typing import NDArray
from scipy import optimize

from stackopt.bench.residuals import HALF_WIDTH, ROBUST, Residuals

Real = NDArray[np.float64]

SCREENED_STARTS = 96
POLISHED_STARTS = 3
FIRST_STEPS = 12
"""Steps by which starts are told apart; the best one goes on."""
RIVAL_STARTS = 8
RIVAL = 6.0
"""Rise of the sum of squares up to which another minimum fits nearly as well."""
DISTINCT = 0.3
"""Difference of a logarithm from which it is another minimum."""
FIRST_NOISE_DB = 0.3
LEAST_NOISE_DB = 0.003
"""The model itself is no better."""
SAME_NOISE = 0.003
"""Relative change of the noise at which its estimate has settled."""
FAR_OFF = 5.0
"""Standard deviations from which a point is far off."""
PRIOR_BOUND = 5.0
"""Standard deviations that a nuisance may move."""
_GAUSSIAN_LOSS = 0.8744
"""Mean of the robust loss over that of the square for normal residuals of the right size (ROBUST = 2)."""


@dataclass(frozen=True)
class Solution:
    """A hypothesis at its least-squares values.

    Parameters
    ----------
    residuals : Residuals
    variables : ndarray, shape (variable,)
    residual_db : ndarray, shape (point,)
        Measured minus fitted, dB.
    noise_db : float
        Standard deviation of the residuals, estimated robustly unless it is given.
    jacobian : ndarray, shape (point, variable)
        dB per variable.
    covariance : ndarray, shape (variable, variable)
        Of the variables, priors included.
    freedom : float
        Points minus the values that the data determine.
    aicc : float
    """

    residuals: Residuals
    variables: Real
    residual_db: Real
    noise_db: float
    jacobian: Real
    covariance: Real
    freedom: float
    aicc: float

    @property
    def deviation(self) -> Real:
        """Standard deviations of the variables, shape (variable,)."""
        return np.asarray(np.sqrt(np.diag(self.covariance)))


def robust_loss(count: int) -> Any:
    """Return the loss: soft l1 beyond `ROBUST` deviations for the first ``count`` residuals, squares for the priors.

    rho(z) = 2 C^2 (sqrt(1 + z/C^2) - 1) for the squared residual z (soft l1 of `scipy.optimize.least_squares`).
    """
    square = ROBUST**2

    def loss(z: Any) -> Real:
        rho = np.stack([z, np.ones_like(z), np.zeros_like(z)])
        root = np.sqrt(1.0 + z[:count] / square)
        rho[0, :count] = 2.0 * square * (root - 1.0)
        rho[1, :count] = 1.0 / root
        rho[2, :count] = -0.5 / square / root**3
        return rho

    return loss


def bounds(residuals: Residuals) -> tuple[Real, Real]:
    """Return lower and upper bounds of the variables."""
    pairs = [quantity.bounds for quantity in residuals.hypothesis.quantities]
    pairs += [(-PRIOR_BOUND, PRIOR_BOUND)] * len(residuals.nuisances)
    low, high = np.array(pairs).T
    return low, high


def minimise(
    residuals: Residuals,
    start: Real,
    noise_db: float,
    measured_db: Real | None = None,
    prior: Real | None = None,
    held: dict[int, float] | None = None,
    most_steps: int = 60,
) -> tuple[Real, float]:
    """Least squares from one start.

    Parameters
    ----------
    residuals : Residuals
    start : ndarray, shape (variable,)
    noise_db : float
        Standard deviation of a point, dB.
    measured_db : ndarray, shape (point,), optional
        Data in place of the sweeps' own.
    prior : ndarray, shape (nuisance,), optional
        Means of the nuisances, 0 when left out.
    held : dict of int to float, optional
        Variables that keep a value.
    most_steps : int

    Returns
    -------
    variables, cost : ndarray, float
        The cost is half the robust sum of squares, priors included.
    """
    data = residuals.measured_db if measured_db is None else measured_db
    means = np.zeros(len(residuals.nuisances)) if prior is None else prior
    low, high = bounds(residuals)
    full = np.clip(start, low + 1e-9, high - 1e-9)
    for index, value in (held or {}).items():
        full[index] = value
    free = [index for index in range(residuals.size) if index not in (held or {})]

    def misfit(part: Real) -> Real:
        full[free] = part
        return np.concatenate([(residuals.predicted_db(full) - data) / noise_db, full[residuals.free :] - means])

    if not free:
        rho = robust_loss(len(data))(misfit(full[free]) ** 2)
        return full, float(0.5 * np.sum(rho[0]))
    found = optimize.least_squares(
        misfit,
        full[free],
        bounds=(low[free], high[free]),
        loss=robust_loss(len(data)),
        diff_step=[1e-6] * len(free),
        xtol=1e-7,
        ftol=1e-9,
        gtol=1e-9,
        max_nfev=most_steps,
    )
    full[free] = found.x
    return full.copy(), float(found.cost)


def solve(
    residuals: Residuals,
    random: np.random.Generator,
    noise_db: float | None = None,
    simpler: Sequence[Solution] = (),
) -> Solution:
    """Fit one hypothesis from several starts; the noise is estimated with it unless it is given.

    Parameters
    ----------
    residuals : Residuals
    random : numpy.random.Generator
        Draws the starts.
    noise_db : float, optional
        Known standard deviation of a point, dB.
    simpler : sequence of Solution
        Solutions of hypotheses with fewer values, from which a start each is made.
    """
    scale = FIRST_NOISE_DB if noise_db is None else noise_db
    starts = _starts(residuals, random) + [_extended(residuals, solution) for solution in simpler]
    trials = [minimise(residuals, start, scale, most_steps=FIRST_STEPS) for start in starts]
    variables, cost = minimise(residuals, min(trials, key=lambda trial: trial[1])[0], scale)
    jacobian = residuals.jacobian_db(variables)
    for _ in range(3 if noise_db is None else 0):
        estimate = _noise_db(residuals, variables, jacobian, scale)
        if abs(estimate / scale - 1.0) < SAME_NOISE:
            break
        scale = estimate
        variables, cost = minimise(residuals, variables, scale)
        jacobian = residuals.jacobian_db(variables)
    return _solution(residuals, variables, scale, jacobian, cost, noise_db is not None)


def _starts(residuals: Residuals, random: np.random.Generator, count: int = POLISHED_STARTS) -> list[Real]:
    """Return the best of many random starts, spread evenly over the logarithms, nuisances at their means."""
    low, high = bounds(residuals)
    free = residuals.free
    starts = np.zeros((SCREENED_STARTS, residuals.size))
    starts[:, :free] = random.uniform(low[:free], high[:free], (SCREENED_STARTS, free))
    measured = residuals.measured_db
    cost = [float(np.mean(np.abs(residuals.predicted_db(start) - measured))) for start in starts]
    return [starts[index] for index in np.argsort(cost)[:count]]


def improved(solution: Solution, random: np.random.Generator, noise_is_given: bool) -> tuple[Solution, list[Real]]:
    """Look for other minima of a solution's hypothesis.

    Returns
    -------
    solution, rivals : Solution, list of ndarray
        The best of all, and the variables of other minima that fit nearly as well.
    """
    residuals, scale = solution.residuals, solution.noise_db
    best, least = minimise(residuals, solution.variables, scale)
    found = [(best, least)]
    for start in _starts(residuals, random, RIVAL_STARTS):
        found.append(minimise(residuals, start, scale))
    variables, cost = min(found, key=lambda trial: trial[1])
    if cost < least - 1e-3:
        solution = _solution(residuals, variables, scale, residuals.jacobian_db(variables), cost, noise_is_given)
    rivals: list[Real] = []
    for other, size in sorted(found, key=lambda trial: trial[1]):
        known = [variables, *rivals]
        apart = min(float(np.max(np.abs(other - one)[: residuals.free], initial=0.0)) for one in known)
        if 2.0 * (size - cost) < RIVAL and apart > DISTINCT:
            rivals.append(other)
    return solution, rivals


def _extended(residuals: Residuals, simpler: Solution) -> Real:
    """Return the values of a solution, those that it lacks half way between their bounds."""
    low, high = bounds(residuals)
    known = dict(zip(simpler.residuals.hypothesis.quantities, simpler.variables, strict=False))
    start = 0.5 * (low + high)
    for index, quantity in enumerate(residuals.hypothesis.quantities):
        start[index] = known.get(quantity, start[index])
    return np.asarray(start)


def _noise_db(residuals: Residuals, variables: Real, jacobian: Real, scale: float) -> float:
    """Estimate the noise so that the mean robust loss is that of normal residuals, points far off left out."""
    misfit = residuals.predicted_db(variables) - residuals.measured_db
    freedom = _freedom(residuals, jacobian / scale)
    typical = float(np.median(np.abs(misfit))) / 0.6745 * np.sqrt(len(misfit) / freedom)
    near = np.abs(misfit) < FAR_OFF * max(typical, LEAST_NOISE_DB)
    freedom = max(freedom - np.count_nonzero(~near), 1.0)
    misfit = misfit[near]
    for _ in range(20):
        root = np.sqrt(1.0 + (misfit / scale / ROBUST) ** 2)
        loss = float(np.sum(2.0 * ROBUST**2 * (root - 1.0))) / freedom / _GAUSSIAN_LOSS
        scale = max(scale * np.sqrt(max(loss, 1e-6)), LEAST_NOISE_DB)
    return float(scale)


def _freedom(residuals: Residuals, scaled: Real) -> float:
    """Points minus the values that the data, rather than the priors, determine."""
    inverse = np.linalg.inv(scaled.T @ scaled + _prior(residuals))
    return float(max(len(scaled) - np.trace(scaled @ inverse @ scaled.T), 1.0))


def _prior(residuals: Residuals) -> Real:
    """Precision of the priors: 1 for nuisances; next to nothing, the span of the bounds, for the material's values."""
    low, high = bounds(residuals)
    precision = 1.0 / (high - low) ** 2
    precision[residuals.free :] = 1.0
    return np.diag(precision)


def _solution(
    residuals: Residuals, variables: Real, scale: float, jacobian: Real, cost: float, noise_is_given: bool
) -> Solution:
    scaled = jacobian / scale
    freedom = _freedom(residuals, scaled)
    misfit = residuals.measured_db - residuals.predicted_db(variables)
    return Solution(
        residuals,
        variables,
        misfit,
        scale,
        jacobian,
        robust_covariance(residuals, scaled, misfit / scale, freedom),
        freedom,
        _aicc(residuals, cost, scale, noise_is_given),
    )


def robust_covariance(residuals: Residuals, scaled: Real, standardised: Real, freedom: float) -> Real:
    """Covariance of the variables of an M-estimator with priors: A^-1 B A^-1 (P. J. Huber, Robust Statistics, 1981).

    A carries the mean slope of the loss, B its mean square; both are near 1 for normal residuals.
    """
    root = np.sqrt(1.0 + (standardised / ROBUST) ** 2)
    square = float(np.mean((standardised / root) ** 2)) * len(scaled) / freedom
    inverse = np.linalg.inv(curvature(residuals, scaled, standardised))
    return np.asarray(inverse @ (square * scaled.T @ scaled + _prior(residuals)) @ inverse)


def curvature(residuals: Residuals, scaled: Real, standardised: Real) -> Real:
    """Mean second derivative of half the robust sum of squares, priors included, shape (variable, variable)."""
    slope = float(np.mean((1.0 + (standardised / ROBUST) ** 2) ** -1.5))
    return np.asarray(slope * scaled.T @ scaled + _prior(residuals))


def _aicc(residuals: Residuals, cost: float, scale: float, noise_is_given: bool) -> float:
    """Akaike's criterion with the correction for few points (C. M. Hurvich and C.-L. Tsai, Biometrika 76, 1989).

    The robust sum of squares, priors included, stands for the sum of squares; the noise counts as a value where it is
    estimated.
    """
    points = len(residuals.measured_db)
    values = residuals.free + (not noise_is_given)
    if points <= values + 2:
        return float("inf")
    penalty = 2.0 * values * points / (points - values - 1.0)
    if noise_is_given:
        return 2.0 * cost + penalty
    square = max(2.0 * cost * scale**2 / points, LEAST_NOISE_DB**2)
    return float(points * np.log(square) + penalty)


def half_width(freedom: float) -> float:
    """95 % half-width over the standard deviation, by Student's t with the given degrees of freedom."""
    from scipy import stats

    return float(stats.t.ppf(0.975, freedom)) if freedom < 1e5 else HALF_WIDTH
