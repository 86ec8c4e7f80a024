"""Comparison of a measured prototype with the mask and with its prediction."""

from __future__ import annotations

from dataclasses import dataclass, replace

import numpy as np
from numpy.typing import NDArray

from stackopt.bench.causes import Cause, rank
from stackopt.bench.prototype import Prototype, band
from stackopt.compiled import MARGIN_SLACK_DB
from stackopt.errors import Finding, InputError
from stackopt.physics.permeability import tables_in
from stackopt.problem import Mask, Problem, Requirement, Stack
from stackopt.readers.sweeps import Sweep
from stackopt.units import format_frequency

Real = NDArray[np.float64]

MEETS, MISSES, UNTOLD, OUTSIDE = "meets", "misses", "cannot be told", "outside the mask"
"""Verdicts at a frequency."""
LEAST_NOISE_DB = 0.1
COVERAGE = 2.0
"""Standard deviations of noise that a difference may have beyond the band."""
FEW = 0.05
"""Share of the points that may lie beyond all the same."""
MOST_POINTS = 60
"""Points at which bands and causes are computed; between them the band's distance is interpolated."""


@dataclass(frozen=True)
class Comparison:
    """A prototype's sweep against mask and prediction; arrays of shape (frequency,).

    Parameters
    ----------
    stack, requirement, sweep : Stack, Requirement, Sweep
    predicted_db, low_db, high_db : ndarray
        Prediction, and the band of the tolerances.
    required_db : ndarray
        Mask with its margin, NaN outside it.
    verdicts : tuple of str
    noise_db : float
        Standard deviation of the measurement, given or estimated from its scatter.
    beyond : ndarray of bool
        Where the difference is larger than tolerances and noise explain.
    causes : tuple of Cause
        Best first; empty where nothing needs one.
    band_method : str
    remarks : tuple of str
    """

    stack: Stack
    requirement: Requirement
    sweep: Sweep
    predicted_db: Real
    low_db: Real
    high_db: Real
    required_db: Real
    verdicts: tuple[str, ...]
    noise_db: float
    noise_is_given: bool
    beyond: NDArray[np.bool_]
    causes: tuple[Cause, ...]
    cause_hz: Real
    band_method: str
    remarks: tuple[str, ...]

    @property
    def differs(self) -> bool:
        """Whether more points lie beyond tolerances and noise than chance puts there."""
        return bool(np.count_nonzero(self.beyond) > max(1.0, FEW * len(self.beyond)))

    @property
    def meets_mask(self) -> bool | None:
        """Whether the mask is met at every measured frequency; None where that cannot be told."""
        if MISSES in self.verdicts:
            return False
        return None if UNTOLD in self.verdicts or MEETS not in self.verdicts else True


def compare(
    problem: Problem, stack: Stack, sweep: Sweep, requirement: str | None = None, noise_db: float | None = None
) -> Comparison:
    """Compare a measured stack with its mask and its prediction.

    Parameters
    ----------
    problem : Problem
    stack : Stack
    sweep : Sweep
    requirement : str, optional
        Name of the requirement that was measured; may be left out where there is only one.
    noise_db : float, optional
        Standard deviation of the measured attenuation; estimated from its scatter when left out.

    Raises
    ------
    InputError
        For an unknown requirement, or a sweep that the prediction cannot follow.
    """
    chosen = _requirement(problem, requirement)
    frequency, measured = sweep.frequency_hz, sweep.attenuation_db
    _check_tables(problem, stack, sweep)
    prototype = Prototype(problem, stack, chosen.field, frequency)
    predicted = prototype.attenuation_db()
    few = np.unique(np.linspace(0, len(frequency) - 1, min(len(frequency), MOST_POINTS)).astype(int))
    quick = replace(prototype, frequency_hz=frequency[few]).quick()
    low, high, method = band(quick)
    low_db, high_db = (predicted + _spread(frequency, few, end - quick.attenuation_db()) for end in (low, high))
    noise = _scatter_db(measured - predicted, sweep.at_floor) if noise_db is None else noise_db
    allowed = COVERAGE * noise
    beyond = (measured > high_db + allowed) | (~sweep.at_floor & (measured < low_db - allowed))
    required = _required_db(chosen.mask, frequency)
    result = Comparison(
        stack, chosen, sweep, predicted, low_db, high_db, required, _verdicts(measured, required, sweep.at_floor),
        noise, noise_db is not None, beyond, (), frequency[few], method, tuple(_remarks(chosen.mask, sweep)),
    )  # fmt: skip
    if not result.differs:
        return result
    kept = few[~sweep.at_floor[few]]
    without = None if sweep.without_db is None else sweep.without_db[kept]
    causes = rank(replace(quick, frequency_hz=frequency[kept]), measured[kept], without, noise)
    return replace(result, causes=causes, cause_hz=frequency[kept])


def _requirement(problem: Problem, name: str | None) -> Requirement:
    known = {requirement.name: requirement for requirement in problem.requirements}
    names = ", ".join(repr(word) for word in known)
    if name is None:
        if len(known) > 1:
            raise InputError(
                Finding("", "--requirement", f"is missing; the problem has several, write one of: {names}")
            )
        return problem.requirements[0]
    if name not in known:
        raise InputError(Finding("", "--requirement", f"found {name!r}; write one of: {names}"))
    return known[name]


def _check_tables(problem: Problem, stack: Stack, sweep: Sweep) -> None:
    """Refuse a sweep that leaves a permeability table by more than an octave."""
    low, high = float(sweep.frequency_hz[0]), float(sweep.frequency_hz[-1])
    rules = problem.rules
    layers = [*stack, *rules.source_side, *rules.victim_side, *([rules.bond] if rules.bond else [])]
    for name in dict.fromkeys(layer.material for layer in layers):
        for table in tables_in(problem.materials[name].permeability):
            if low < table.octave_hz[0] or high > table.octave_hz[1]:
                span = f"{format_frequency(table.frequency_hz[0])} to {format_frequency(table.frequency_hz[-1])}"
                message = (
                    f"runs from {format_frequency(low)} to {format_frequency(high)}, but the permeability table of "
                    f"{name!r} covers {span}; extend the table or shorten the sweep"
                )
                raise InputError(Finding(sweep.name, "", message))


def _spread(frequency_hz: Real, few: NDArray[np.int64], distance_db: Real) -> Real:
    return np.asarray(np.interp(np.log(frequency_hz), np.log(frequency_hz[few]), distance_db))


def _scatter_db(difference_db: Real, at_floor: NDArray[np.bool_]) -> float:
    """Standard deviation of noise from second differences of neighbours, robustly: smooth deviations cancel."""
    kept = difference_db[~at_floor]
    if len(kept) < 5:
        return LEAST_NOISE_DB
    second = kept[:-2] - 2.0 * kept[1:-1] + kept[2:]
    return max(float(np.median(np.abs(second)) / 0.6745 / 6.0**0.5), LEAST_NOISE_DB)


def _required_db(mask: Mask, frequency_hz: Real) -> Real:
    inside = (frequency_hz >= mask.frequency_hz[0] * (1 - 1e-9)) & (frequency_hz <= mask.frequency_hz[-1] * (1 + 1e-9))
    lowest = min((point for point in mask.frequency_hz if point > 0.0), default=np.inf)
    inside &= frequency_hz >= lowest * (1 - 1e-9)  # between 0 Hz and the next point a mask says nothing
    required = np.full(len(frequency_hz), np.nan)
    if np.any(inside):
        required[inside] = mask.required_db(np.clip(frequency_hz[inside], lowest, mask.frequency_hz[-1]))
    return required


def _verdicts(measured_db: Real, required_db: Real, at_floor: NDArray[np.bool_]) -> tuple[str, ...]:
    verdicts = []
    for measured, required, floored in zip(measured_db, required_db, at_floor, strict=True):
        if np.isnan(required):
            verdicts.append(OUTSIDE)
        elif measured >= required - MARGIN_SLACK_DB:
            verdicts.append(MEETS)
        else:
            verdicts.append(UNTOLD if floored else MISSES)
    return tuple(verdicts)


def _remarks(mask: Mask, sweep: Sweep) -> list[str]:
    remarks = list(sweep.remarks)
    points = [point for point in mask.frequency_hz if point > 0.0]
    low, high = float(sweep.frequency_hz[0]), float(sweep.frequency_hz[-1])
    if points and (low > points[0] * 1.01 or high < points[-1] * 0.99):
        remarks.append(
            f"the sweep runs from {format_frequency(low)} to {format_frequency(high)}; the mask, from "
            f"{format_frequency(points[0])} to {format_frequency(points[-1])}, is not checked beyond that"
        )
    if mask.frequency_hz[0] == 0.0:
        remarks.append("the mask's value at 0 Hz is not checked by a sweep")
    outside = int(np.count_nonzero(np.isnan(_required_db(mask, sweep.frequency_hz))))
    if outside:
        remarks.append(f"{outside} of {len(sweep.frequency_hz)} frequencies lie outside the mask and are not judged")
    return remarks
