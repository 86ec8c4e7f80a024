"""Fit of a material to the sweeps of a setup: every law tried, one chosen, its values with what is known of them."""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass, replace

import numpy as np
from numpy.typing import NDArray

from stackopt.bench.intervals import Estimate, bootstrap, estimates, is_vague
from stackopt.bench.quantities import CONDUCTIVITY, hypotheses
from stackopt.bench.residuals import MOST_FREQUENCIES, Points, Residuals, nuisances_of, points_of
from stackopt.bench.showing import Showing, study
from stackopt.bench.solve import FAR_OFF, Solution, improved, solve
from stackopt.bench.words import count_words
from stackopt.errors import Finding, InputError
from stackopt.physics.permeability import PermeabilityLaw
from stackopt.readers.setups import Setup

Real = NDArray[np.float64]

SIMPLER_WITHIN = 2.0
"""A law with fewer values is taken when its AICc is at most this much above the least one."""
OPEN_COSTS = 10.0
"""What is added to the AICc of a law that the sweeps leave a value of open."""
FEWEST_POINTS = 3
"""Points beyond the number of values that a law needs to be tried."""
NOT_RANDOM = 0.4
"""Correlation of neighbouring residuals from which intervals are said to be too narrow."""


@dataclass(frozen=True)
class Fit:
    """A material fitted to sweeps.

    Parameters
    ----------
    setup : Setup
    solution : Solution
        The chosen law's.
    trials : tuple of Solution
        Every law tried, simplest first.
    estimates : tuple of Estimate
    showing : Showing
        What the sweeps show and what not.
    remarks : tuple of str
    replicates : int
        Of the bootstrap; 0 when there was none.
    """

    setup: Setup
    solution: Solution
    trials: tuple[Solution, ...]
    estimates: tuple[Estimate, ...]
    showing: Showing
    remarks: tuple[str, ...]
    replicates: int

    @property
    def conductivity_s_per_m(self) -> float:
        """Conductivity of the fit; 0 where the sweeps only give an upper limit."""
        if any(item.name == "conductivity" and not item.determined for item in self.estimates):
            item = next(item for item in self.estimates if item.name == "conductivity")
            return 0.0 if np.isnan(item.low) else item.value
        return self.solution.residuals.hypothesis.material(self.solution.variables[: self.solution.residuals.free])[0]

    @property
    def permeability(self) -> PermeabilityLaw:
        """Permeability of the fit."""
        return self.solution.residuals.hypothesis.material(self.solution.variables[: self.solution.residuals.free])[1]

    def fitted_db(self, points: Points, frequency_hz: Real) -> Real:
        """Attenuation of the fitted sheets of one sweep at other frequencies, dB."""
        swept = replace(points, frequency_hz=tuple(float(f) for f in frequency_hz))
        return replace(self.solution.residuals, points=(swept,)).predicted_db(self.solution.variables)


def fit(setup: Setup, random: np.random.Generator, replicates: int = 200) -> Fit:
    """Fit the free values of a setup's material.

    Parameters
    ----------
    setup : Setup
    random : numpy.random.Generator
        Draws the starts and the bootstrap.
    replicates : int
        Of the bootstrap; 0 for none.

    Raises
    ------
    InputError
        When nothing is free, or too few points are usable.
    """
    points = usable_points(setup)
    trials: list[Solution] = []
    for residuals in _candidates(setup, points):
        trials.append(solve(residuals, random, setup.uncertainty.noise_db, trials[-2:]))
    chosen, rivals = improved(choose(trials), random, setup.uncertainty.noise_db is not None)
    trials = [chosen if trial.residuals is chosen.residuals else trial for trial in trials]
    samples = bootstrap(chosen, replicates, random) if replicates else None
    found = estimates(chosen, samples)
    remarks = (*_reading_remarks(setup), *_fit_remarks(chosen))
    return Fit(setup, chosen, tuple(trials), found, study(chosen, found, rivals), remarks, replicates)


def usable_points(setup: Setup) -> tuple[Points, ...]:
    """Return the points of every sweep that are no lower bounds.

    Raises
    ------
    InputError
        For a sweep that has none.
    """
    points = tuple(points_of(entry) for entry in setup.sweeps)
    empty = [
        Finding(setup.name, f"sweep[{number}]", f"{item.entry.sweep.name} has no point away from the noise floor")
        for number, item in enumerate(points, start=1)
        if not item.frequency_hz
    ]
    if empty:
        raise InputError(empty)
    return points


def _candidates(setup: Setup, points: tuple[Points, ...]) -> list[Residuals]:
    if setup.conductivity_s_per_m is not None and setup.permeability is not None:
        message = (
            "holds conductivity and permeability, so nothing is left to fit; leave one out, or calibrate the setup"
        )
        raise InputError(Finding(setup.name, "known", message))
    count = sum(len(item.frequency_hz) for item in points)
    span = min(item.frequency_hz[0] for item in points), max(item.frequency_hz[-1] for item in points)
    tried = hypotheses(span, setup.conductivity_s_per_m, setup.permeability)
    enough = [item for item in tried if count >= len(item.quantities) + FEWEST_POINTS]
    if not enough:
        needed = len(tried[0].quantities) + FEWEST_POINTS
        raise InputError(
            Finding(setup.name, "", f"has {count_words(count, 'usable point')}; at least {needed} are needed")
        )
    nuisances = tuple(nuisances_of(setup))
    return [Residuals(points, item, nuisances) for item in enough]


def choose(trials: Sequence[Solution]) -> Solution:
    """Choose by the least AICc; of laws within `SIMPLER_WITHIN` of it the one with the fewest values.

    A law of which the sweeps leave a value open (the conductivity apart, which all laws share) must be better by
    `OPEN_COSTS`.
    """
    score = {id(trial): trial.aicc + OPEN_COSTS * _is_open(trial) for trial in trials}
    least = min(score.values())
    near = [trial for trial in trials if score[id(trial)] <= least + SIMPLER_WITHIN] or list(trials)
    return min(near, key=lambda trial: (trial.residuals.free, score[id(trial)]))


def _is_open(trial: Solution) -> bool:
    quantities = trial.residuals.hypothesis.quantities
    return any(is_vague(trial, index) for index, quantity in enumerate(quantities) if quantity is not CONDUCTIVITY)


def _reading_remarks(setup: Setup) -> list[str]:
    remarks = [f"{entry.sweep.name}: {remark}" for entry in setup.sweeps for remark in entry.sweep.remarks]
    for entry in setup.sweeps:
        count = int(np.count_nonzero(~entry.sweep.at_floor))
        if count > MOST_FREQUENCIES:
            remarks.append(f"{entry.sweep.name}: {count} points averaged in {MOST_FREQUENCIES} groups of neighbours")
    return remarks


def _fit_remarks(solution: Solution) -> list[str]:
    """Tell when the residuals are not random, or much larger than the stated noise."""
    remarks = []
    residual = solution.residual_db
    size = float(np.sum(residual**2))
    neighbours = float(np.sum(residual[1:] * residual[:-1])) / size if size > 0.0 else 0.0
    if neighbours > max(NOT_RANDOM, 2.5 / np.sqrt(len(residual))):
        remarks.append(
            f"neighbouring residuals agree (correlation {neighbours:.2f}): the model misses something, and the "
            "intervals are too narrow; look at the plot"
        )
    actual = float(np.sqrt(size / solution.freedom))
    far = int(np.count_nonzero(np.abs(residual) > FAR_OFF * solution.noise_db))
    if far:
        remarks.append(f"{count_words(far, 'point')} far off the fit, which gives them little weight; look at the plot")
    elif actual > 2.0 * solution.noise_db:
        remarks.append(
            f"the residuals, {actual:.2g} dB rms, are larger than the stated noise of "
            f"{solution.noise_db:.2g} dB; the intervals are too narrow"
        )
    return remarks


def law_rows(result: Fit) -> list[tuple[str, int, float, float, bool]]:
    """Return every law tried: name, free values, rms residual (dB), AICc over the least one, whether chosen."""
    least = min(trial.aicc for trial in result.trials)
    return [
        (
            trial.residuals.hypothesis.name,
            trial.residuals.free,
            float(np.sqrt(np.mean(trial.residual_db**2))),
            trial.aicc - least,
            trial is result.solution,
        )
        for trial in result.trials
    ]
