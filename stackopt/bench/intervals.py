"""Intervals of fitted values: from the Jacobian, by residual bootstrap, and limits of what is not determined."""

from __future__ import annotations

import math
from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from stackopt.bench.quantities import HIGH_SHARE, Quantity
from stackopt.bench.residuals import ROBUST
from stackopt.bench.solve import Solution, bounds, curvature, half_width, minimise

Real = NDArray[np.float64]

VAGUE = math.log(3.0)
"""A value whose 95 % interval reaches a factor of 3 to one side is not determined."""
VAGUE_BROADENING = 0.4
AT_END = 1e-3
"""Share of the span from its ends within which a value has run into its bounds."""
LIKELY = 3.84
"""Rise of the sum of squares at the end of a 95 % interval of one value (chi-square, one degree of freedom)."""

REFIT_STEPS = 12
REFIT_TOLERANCE = 1e-3
LONGEST_STEP = 0.5


@dataclass(frozen=True)
class Estimate:
    """A fitted value with its 95 % interval.

    Parameters
    ----------
    name, unit : str
        Key in a material entry, and SI unit.
    value, low, high : float
        Where not ``determined``, the limits are those beyond which the fit gets clearly worse; NaN where it never does.
    bootstrap : tuple of float, or None
        The interval by residual bootstrap.
    determined : bool
    """

    name: str
    unit: str
    value: float
    low: float
    high: float
    bootstrap: tuple[float, float] | None = None
    determined: bool = True


def estimates(solution: Solution, samples: Real | None) -> tuple[Estimate, ...]:
    """Return the fitted values of a solution.

    Parameters
    ----------
    solution : Solution
    samples : ndarray, shape (replicate, variable), or None
        Variables of the bootstrap.
    """
    quantities = solution.residuals.hypothesis.quantities
    found = []
    for index, quantity in enumerate(quantities):
        if quantity is HIGH_SHARE:
            found.append(_high_frequency(solution, samples))
        else:
            column = None if samples is None else samples[:, index]
            found.append(_estimate(solution, index, quantity, column))
    return tuple(found)


def is_vague(solution: Solution, index: int) -> bool:
    """Tell whether a free value is not determined."""
    quantity = solution.residuals.hypothesis.quantities[index]
    low, high = quantity.bounds
    inside = float(solution.variables[index])
    at_end = min(inside - low, high - inside) < AT_END * (high - low) and quantity.is_log
    width = half_width(solution.freedom) * float(solution.deviation[index])
    return at_end or width > (VAGUE if quantity.is_log else VAGUE_BROADENING)


def _estimate(solution: Solution, index: int, quantity: Quantity, samples: Real | None) -> Estimate:
    inside = float(solution.variables[index])
    value = quantity.value(inside)
    if is_vague(solution, index):
        low, high = _limits(solution, index)
        return Estimate(quantity.name, quantity.unit, value, low, high, None, False)
    width = half_width(solution.freedom) * float(solution.deviation[index])
    low, high = (min(max(end, quantity.bounds[0]), quantity.bounds[1]) for end in (inside - width, inside + width))
    return Estimate(
        quantity.name, quantity.unit, value, quantity.value(low), quantity.value(high), _percentiles(samples, quantity)
    )


def _percentiles(samples: Real | None, quantity: Quantity) -> tuple[float, float] | None:
    if samples is None:
        return None
    low, high = np.percentile(samples, (2.5, 97.5))
    return quantity.value(float(low)), quantity.value(float(high))


def _high_frequency(solution: Solution, samples: Real | None) -> Estimate:
    """Interval of the high-frequency value, of whose susceptibility the fit varies the share of the initial one."""
    names = [quantity.name for quantity in solution.residuals.hypothesis.quantities]
    along = np.zeros(solution.residuals.size)
    along[[names.index("initial"), names.index(HIGH_SHARE.name)]] = 1.0
    middle = float(along @ solution.variables)
    width = half_width(solution.freedom) * math.sqrt(float(along @ solution.covariance @ along))
    quantity = Quantity("high_frequency", "", 1.0, math.inf, above=1.0)
    value = quantity.value(middle)
    if width > VAGUE:
        return Estimate(quantity.name, "", value, math.nan, math.nan, None, False)
    sampled = None if samples is None else samples @ along
    ends = quantity.value(middle - width), quantity.value(middle + width)
    return Estimate(quantity.name, "", value, *ends, _percentiles(sampled, quantity))


def _limits(solution: Solution, index: int) -> tuple[float, float]:
    """Return limits beyond which no other values make up for this one; NaN where there are none within the bounds."""
    quantity = solution.residuals.hypothesis.quantities[index]
    least = minimise(solution.residuals, solution.variables, solution.noise_db)[1]
    ends = []
    for sign, edge in ((-1.0, bounds(solution.residuals)[0][index]), (1.0, bounds(solution.residuals)[1][index])):
        inside = _limit(solution, index, sign, float(edge), least)
        ends.append(math.nan if inside is None else quantity.value(inside))
    return ends[0], ends[1]


def _limit(solution: Solution, index: int, sign: float, edge: float, least: float) -> float | None:
    """Walk outwards in growing steps until the fit gets clearly worse, and interpolate where it did."""
    variables = solution.variables.copy()
    before, rise_before, step = float(variables[index]), 0.0, 0.3
    while True:
        at = before + sign * step
        at = min(at, edge) if sign > 0.0 else max(at, edge)
        start = variables.copy()
        start[index] = at
        variables, cost = minimise(solution.residuals, start, solution.noise_db, held={index: at})
        rise = 2.0 * (cost - least)
        if rise > LIKELY:
            share = (LIKELY - rise_before) / (rise - rise_before)
            return before + share * (at - before)
        if at == edge:
            return None
        before, rise_before, step = at, max(rise, 0.0), step * 1.5


def bootstrap(solution: Solution, replicates: int, random: np.random.Generator) -> Real:
    """Fit again with residuals drawn anew.

    The residual bootstrap of B. Efron and R. J. Tibshirani, An Introduction to the Bootstrap, 1993, chapter 9.
    Residuals are centred and widened by the degrees of freedom, and drawn within their own sweep; the means of the
    nuisances are drawn from their priors.

    Returns
    -------
    ndarray, shape (replicate, variable)
        Variables of every replicate.
    """
    residuals = solution.residuals
    fitted = residuals.measured_db - solution.residual_db
    widening = math.sqrt(len(fitted) / solution.freedom)
    ends = np.cumsum([len(points.frequency_hz) for points in residuals.points])
    groups = np.split(solution.residual_db, ends[:-1])
    groups = [(group - np.mean(group)) * widening for group in groups]
    scaled = solution.jacobian / solution.noise_db
    inverse = np.asarray(
        np.linalg.inv(curvature(residuals, scaled, solution.residual_db / solution.noise_db)), dtype=np.float64
    )
    samples = np.empty((replicates, residuals.size))
    for number in range(replicates):
        drawn = fitted + np.concatenate([random.choice(group, len(group)) for group in groups])
        prior = solution.variables[residuals.free :] + random.standard_normal(len(residuals.nuisances))
        samples[number] = _refit(solution, drawn, prior, scaled, inverse)
    return samples


def _refit(solution: Solution, drawn_db: Real, prior: Real, scaled: Real, inverse: Real) -> Real:
    """Fit drawn data from the solution by Newton's steps with its own derivatives, which need one prediction each."""
    residuals, (low, high) = solution.residuals, bounds(solution.residuals)
    variables = solution.variables.copy()
    for _ in range(REFIT_STEPS):
        misfit = (drawn_db - residuals.predicted_db(variables)) / solution.noise_db
        gradient = scaled.T @ (misfit / np.sqrt(1.0 + (misfit / ROBUST) ** 2))
        gradient[residuals.free :] += prior - variables[residuals.free :]
        step = inverse @ gradient
        variables = np.clip(variables + np.clip(step, -LONGEST_STEP, LONGEST_STEP), low, high)
        if np.max(np.abs(step)) < REFIT_TOLERANCE:
            break
    return variables
