"""The band of one stack's attenuation over its tolerances, and its yield, by the readable cascade: no compiled code.

The corners of a stack, or samples of its deviations, form a tree: cases that agree in the first layers share them. A
band is the nominal attenuation of `stackopt.evaluate.attenuation` and, on a shorter quadrature, how far the cases are
from nominal. It holds every corner and the nominal values; between the corners more is possible where layers resonate.
"""

from __future__ import annotations

from collections.abc import Iterable, Sequence
from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from stackopt import evaluate
from stackopt.compiled import MARGIN_SLACK_DB
from stackopt.deviation import (
    NOMINAL,
    VALUES,
    Deviation,
    Deviations,
    count_corners,
    deviation_words,
    effective_tolerance,
    present,
    sampled,
    varied_problem,
    varied_sheet,
    varying,
)
from stackopt.model import media, spectral_lines, with_bonds
from stackopt.physics import fields
from stackopt.physics.line import DB_PER_NEPER, Chain, medium_chain
from stackopt.physics.media import air
from stackopt.problem import Problem, Requirement, Sheet, Stack
from stackopt.tolerance import samples_for, wilson_interval

Real = NDArray[np.float64]
Integers = NDArray[np.int64]
Layers = Sequence[tuple[Sequence[Chain], Integers]]
"""Chains of each layer, and which of them every case has."""

MOST_CASES = 4096
"""Corners that are all tried; of more, as many are drawn at random."""
RULE = fields.HankelRule(48, -2.2, 3.6)
"""Gives differences of attenuation within 1e-6 dB of the reference rule on the example problems."""
_SAMPLES_AT_A_TIME = 64


@dataclass(frozen=True)
class Band:
    """Range of a stack's attenuation over its tolerances.

    Parameters
    ----------
    frequency_hz, low_db, high_db : tuple of ndarray
        One for each requirement, shape (frequency,).
    worst_margin_db : float
        Smallest margin of all corners and the nominal values, in ``requirement`` at ``worst_hz``.
    worst_case : tuple of str
        What deviates there, such as "steel: thickness -5 %, permeability -50 %".
    tolerances : tuple of str
        What was varied, such as "copper: thickness ±5 %".
    method : str
        How the corners were chosen, in words.
    """

    frequency_hz: tuple[Real, ...]
    low_db: tuple[Real, ...]
    high_db: tuple[Real, ...]
    worst_margin_db: float
    worst_hz: float
    requirement: str
    worst_case: tuple[str, ...]
    tolerances: tuple[str, ...]
    method: str


def tolerance_band(problem: Problem, stack: Stack, density: int = 1) -> Band | None:
    """Compute the band of a stack over the grids of all masks, or None where nothing in it has a tolerance.

    Parameters
    ----------
    problem : Problem
    stack : Stack
        Any thickness.
    density : int
        Multiplies the points per decade of every mask.
    """
    cases = _corner_cases(problem, stack)
    if cases is None:
        return None
    grids = [requirement.mask.grid_hz(density) for requirement in problem.requirements]
    levels = [cases.attenuation_db(number, grid) for number, grid in enumerate(grids)]
    required = [
        requirement.mask.required_db(grid) for requirement, grid in zip(problem.requirements, grids, strict=True)
    ]
    margins = [level - mask for level, mask in zip(levels, required, strict=True)]
    number = int(np.argmin([margin.min() for margin in margins]))
    case, row = np.unravel_index(np.argmin(margins[number]), margins[number].shape)
    tried, corners = len(cases.digits) - 1, count_corners(problem, stack)
    return Band(
        frequency_hz=tuple(grids),
        low_db=tuple(level.min(axis=0) for level in levels),
        high_db=tuple(level.max(axis=0) for level in levels),
        worst_margin_db=float(margins[number][case, row]),
        worst_hz=float(grids[number][row]),
        requirement=problem.requirements[number].name,
        worst_case=tuple(cases.words(int(case))),
        tolerances=tuple(tolerance_words(problem, stack)),
        method=f"all {corners:,} corners of the tolerances"
        if tried == corners
        else f"{tried:,} of the {corners:,} corners of the tolerances, drawn at random",
    )


def band_db(
    problem: Problem, stack: Stack, requirement: int = 0, frequency_hz: Real | None = None
) -> tuple[Real, Real]:
    """Smallest and largest attenuation of a stack over its tolerances, dB, each of shape (frequency,).

    Parameters
    ----------
    problem : Problem
    stack : Stack
    requirement : int
        Number of the requirement whose field is used.
    frequency_hz : ndarray, shape (frequency,), optional
        Frequencies, Hz; the search grid when left out.
    """
    grid = problem.requirements[requirement].mask.grid_hz() if frequency_hz is None else frequency_hz
    cases = _corner_cases(problem, stack)
    if cases is None:
        (nominal,) = evaluate.attenuation(problem, [stack], requirement, grid)
        return nominal, nominal
    levels = cases.attenuation_db(requirement, grid)
    return levels.min(axis=0), levels.max(axis=0)


def sample_margins(problem: Problem, stack: Stack, samples: int, seed: int) -> Real:
    """Smallest margin of a stack over all requirements at each sample of `stackopt.deviation.sampled`, dB.

    Parameters
    ----------
    problem : Problem
    stack : Stack
    samples : int
        A power of two.
    seed : int

    Returns
    -------
    ndarray, shape (sample,)
    """
    names = present(problem, stack)
    drawn = {name: cases for name, cases in sampled(problem, samples, seed).items() if name in names}
    grids = [requirement.mask.grid_hz() for requirement in problem.requirements]
    parts = []
    for start in range(0, samples, _SAMPLES_AT_A_TIME):
        part = {name: (*cases[start : start + _SAMPLES_AT_A_TIME], NOMINAL) for name, cases in drawn.items()}
        count = min(_SAMPLES_AT_A_TIME, samples - start)
        cases = _SingleStack(problem, stack, part, np.arange(count + 1)[:, None].repeat(len(part), axis=1))
        margins = [
            cases.attenuation_db(number, grid)[:-1] - problem.requirements[number].mask.required_db(grid)
            for number, grid in enumerate(grids)
        ]
        parts.append(np.min([margin.min(axis=1) for margin in margins], axis=0))
    return np.concatenate(parts)


def yield_words(problem: Problem, stack: Stack) -> str:
    """Write the share of samples that meet the mask, for the goal and the seed of the problem."""
    search = problem.search
    samples = samples_for(search.yield_goal)
    passed = passing(sample_margins(problem, stack, samples, search.random_seed))
    low, high = wilson_interval(np.array([passed]), samples)
    verdict = "reaches" if passed >= search.yield_goal * samples - 1e-9 else "misses"
    return (
        f"{verdict} the goal of {100 * search.yield_goal:.4g} %: {100 * passed / samples:.1f} % of {samples:,} samples "
        f"meet the mask (95 % interval {100 * float(low[0]):.1f} to {100 * float(high[0]):.1f} %)"
    )


def passing(margins_db: Real) -> int:
    """Count the margins that meet the mask; rounding does not decide."""
    return int(np.count_nonzero(margins_db >= -MARGIN_SLACK_DB))


def tolerance_words(problem: Problem, stack: Stack) -> Iterable[str]:
    """Yield for each material of a stack what it may deviate by."""
    for name in present(problem, stack):
        tolerance = effective_tolerance(problem.materials[name])
        ends = [(value, *getattr(tolerance, value)) for value in VALUES]
        parts = [f"{value} {_range_words(down, up)}" for value, down, up in ends if down < up]
        if parts:
            yield f"{name}: {', '.join(parts)}"


def _range_words(down: float, up: float) -> str:
    return f"±{100 * up:.3g} %" if np.isclose(up, -down) else f"{100 * down:+.3g} % to {100 * up:+.3g} %"


def _corner_cases(problem: Problem, stack: Stack) -> _SingleStack | None:
    """All corners of a stack or many of them, and its nominal values as the last case."""
    corners = varying(problem, present(problem, stack))
    if not corners:
        return None
    counts = [len(choices) for choices in corners.values()]
    total = count_corners(problem, stack)
    if total <= MOST_CASES:
        digits = np.indices(counts).reshape(len(counts), -1).T
    else:
        drawn = np.random.default_rng(0).integers(0, counts, (MOST_CASES - 2, len(counts)))
        digits = np.concatenate([np.zeros((1, len(counts)), dtype=np.int64), drawn, [np.array(counts) - 1]])
    choices = {name: (*deviations, NOMINAL) for name, deviations in corners.items()}
    return _SingleStack(problem, stack, choices, np.concatenate([digits, [counts]]))


class _SingleStack:
    """One stack in many cases, the last of which is nominal.

    Parameters
    ----------
    problem : Problem
    stack : Stack
    deviations : mapping of str to sequence of Deviation
        Of the materials that vary.
    digits : int64 (case, material)
        Which deviation of each of these materials a case has.
    """

    def __init__(self, problem: Problem, stack: Stack, deviations: Deviations, digits: Integers) -> None:
        self.problem, self.stack, self.deviations, self.digits = problem, stack, deviations, digits
        self.varied = varied_problem(problem, deviations, {})
        self.column = {name: number for number, name in enumerate(deviations)}

    def words(self, case: int) -> Iterable[str]:
        """Yield what deviates in a case."""
        for name, number in self.column.items():
            deviation = self.deviations[name][self.digits[case, number]]
            if deviation != NOMINAL:
                yield f"{name}: {deviation_words(deviation)}"

    def attenuation_db(self, requirement: int, frequency_hz: Real) -> Real:
        """Attenuation in every case, dB, shape (case, frequency)."""
        given = self.problem.requirements[requirement]
        (nominal,) = evaluate.attenuation(self.problem, [self.stack], requirement, frequency_hz)
        levels = self._short(given, frequency_hz)
        return np.asarray(nominal + levels - levels[-1])

    def _short(self, requirement: Requirement, frequency_hz: Real) -> Real:
        """Attenuation on the shorter quadrature."""
        lines = spectral_lines(requirement.field, frequency_hz, RULE)
        rules = self.problem.rules
        source, victim = (self._layers(side, lines) for side in (rules.source_side, rules.victim_side))
        stack = with_bonds(self.problem, self.stack)
        thickness, which = np.unique(self._thickness_m(stack), return_inverse=True)
        gaps = [medium_chain(air(frequency_hz), d, lines.k, frequency_hz, lines.polarisation) for d in thickness]
        open_db = _field_db(lines, [*source, (gaps, which.ravel()), *victim])
        return open_db - _field_db(lines, [*source, *self._layers(stack, lines), *victim])

    def _cases_of(self, sheet: Sheet) -> tuple[Sequence[Deviation], Integers]:
        if sheet.material in self.column:
            return self.deviations[sheet.material], self.digits[:, self.column[sheet.material]]
        return (NOMINAL,), np.zeros(len(self.digits), dtype=np.int64)

    def _thickness_m(self, stack: Stack) -> Real:
        total = np.zeros(len(self.digits))
        for sheet in stack:
            cases, which = self._cases_of(sheet)
            total += sheet.thickness_m * np.array([case.thickness for case in cases])[which]
        return total

    def _layers(self, stack: Stack, lines: fields.SpectralLines) -> Layers:
        layers = []
        for sheet in stack:
            cases, which = self._cases_of(sheet)
            varies = sheet.material in self.column
            sheets = [varied_sheet(sheet, *case) for case in enumerate(cases)] if varies else [sheet]
            chains = [
                medium_chain(medium, d, lines.k, lines.frequency_hz, lines.polarisation)
                for medium, d in media(self.varied, sheets, lines.frequency_hz)
            ]
            layers.append((chains, which))
        return layers


def _field_db(lines: fields.SpectralLines, layers: Layers) -> Real:
    """Field at the victim through layers, dB, shape (case, frequency).

    The row vector (1, Z0) goes through the chains from the source side, (p, q) being it with q divided by Z0; cases
    that agree so far are computed once.
    """
    steps = []
    branch = np.zeros(len(layers[0][1]), dtype=np.int64)
    for chains, which in layers:
        pairs, branch = np.unique(branch * len(chains) + which, return_inverse=True)
        a, d, log_scale = (np.array([getattr(chain, name) for chain in chains]) for name in ("a", "d", "log_scale"))
        b = np.array([chain.b for chain in chains]) / lines.terminal
        c = np.array([chain.c for chain in chains]) * lines.terminal
        steps.append((pairs // len(chains), pairs % len(chains), (a, b, c, d, log_scale)))
    result = np.empty((len(branch), len(lines.frequency_hz)))
    for f in range(len(lines.frequency_hz)):
        p = q = np.ones((1, lines.k.shape[1]), dtype=complex)
        scale = np.zeros(p.shape)
        for before, which, (a, b, c, d, log_scale) in steps[:-1]:
            p, q, scale = p[before], q[before], scale[before] + log_scale[which, f]
            p, q = p * a[which, f] + q * c[which, f], p * b[which, f] + q * d[which, f]
        before, which, (a, b, c, d, log_scale) = steps[-1]
        both = p[before] * (a + b)[which, f] + q[before] * (c + d)[which, f]
        scale = scale[before] + log_scale[which, f]
        least = np.min(scale, axis=1, keepdims=True)
        field = np.sum(2.0 * lines.weight[f] / both * np.exp(least - scale), axis=1)
        result[:, f] = (DB_PER_NEPER * (np.log(np.abs(field)) - least[:, 0]))[branch.ravel()]
    return result
