"""Likely causes of a difference between prediction and measurement: one thing changed at a time, ranked.

Each cause changes one parameter of the predicted prototype, which is fitted to the measurement. A good fit makes a
cause consistent with the measurement, never certain.
"""

from __future__ import annotations

from collections.abc import Callable, Iterator
from dataclasses import dataclass, replace

import numpy as np
from numpy.typing import NDArray
from scipy import optimize

from stackopt.bench.prototype import Prototype, in_db
from stackopt.bench.words import value_words
from stackopt.physics.permeability import Scaled, initial_permeability
from stackopt.problem import CoaxialDipoles, CoaxialLoops, ElectricNearField, Field, MagneticNearField

Real = NDArray[np.float64]

PERMEABLE = 2.0
TRIALS = 13
"""Values tried before the best is refined."""
GONE = 0.03
"""A sheet of less than this share of its thickness counts as missing, which is a cause of its own."""
NO_CHANGE = 0.01
"""A changed parameter this near to its nominal value is no cause."""
ALIKE = 4.0
"""Difference of AICc up to which two causes cannot be told apart."""


@dataclass(frozen=True)
class Cause:
    """One cause.

    Parameters
    ----------
    words : str
        What it would be, to follow "consistent with".
    explained : float
        Share of the sum of squared differences that it explains.
    left_db : float
        Rms difference that it leaves, dB.
    attenuation_db : ndarray, shape (frequency,)
        Prediction with it.
    aicc : float
        For the ranking.
    like_first : bool
        Whether the measurement cannot tell it from the first.
    """

    words: str
    explained: float
    left_db: float
    attenuation_db: Real
    aicc: float
    like_first: bool = False


@dataclass(frozen=True)
class _Suspect:
    """A change with a parameter between bounds, varied by its logarithm; no bounds for a change without one."""

    words: Callable[[float], str]
    change: Callable[[float], Real]
    low: float = 1.0
    high: float = 1.0
    nominal: float | None = None


def rank(prototype: Prototype, measured_db: Real, without_db: Real | None, noise_db: float) -> tuple[Cause, ...]:
    """Rank the causes by how well they explain the measurement, best first.

    Parameters
    ----------
    prototype : Prototype
        As predicted, at the measured frequencies.
    measured_db : ndarray, shape (frequency,)
    without_db : ndarray, shape (frequency,), or None
        Level without the stack, from which a noise floor follows; None takes a level that rises with frequency.
    noise_db : float
        Differences below it explain nothing.
    """
    before = float(np.mean((measured_db - prototype.attenuation_db()) ** 2))
    found = []
    for suspect in _suspects(prototype, without_db):
        cause = _fitted(suspect, measured_db, before, noise_db)
        if cause is not None:
            found.append(cause)
    found.sort(key=lambda cause: cause.aicc)
    return tuple(replace(cause, like_first=cause.aicc <= found[0].aicc + ALIKE) for cause in found)


def _fitted(suspect: _Suspect, measured_db: Real, before: float, noise_db: float) -> Cause | None:
    """Fit a suspect's parameter; None where it explains nothing."""

    def size(logarithm: float) -> float:
        return float(np.mean((measured_db - suspect.change(float(np.exp(logarithm)))) ** 2))

    best = 0.0
    if suspect.high > suspect.low:
        trials = np.linspace(np.log(suspect.low), np.log(suspect.high), TRIALS)
        values = [size(trial) for trial in trials]
        middle = int(np.argmin(values))
        around = trials[max(middle - 1, 0)], trials[min(middle + 1, TRIALS - 1)]
        best = float(optimize.minimize_scalar(size, bounds=around, method="bounded", options={"xatol": 1e-3}).x)
    parameter = float(np.exp(best))
    if suspect.nominal is not None and abs(parameter / suspect.nominal - 1.0) < NO_CHANGE:
        return None
    after = size(best)
    explained = 1.0 - after / before if before > 0.0 else 0.0
    if explained <= 0.0:
        return None
    points, values_free = len(measured_db), 1 if suspect.high > suspect.low else 0
    penalty = 2.0 * values_free * points / max(points - values_free - 1.0, 1.0)
    aicc = points * float(np.log(max(after, noise_db**2))) + penalty
    return Cause(suspect.words(parameter), explained, after**0.5, suspect.change(parameter), aicc)


def _suspects(prototype: Prototype, without_db: Real | None) -> Iterator[_Suspect]:
    yield from _sheet_suspects(prototype)
    yield from _forming_suspects(prototype)
    gaps = _gap_suspect(prototype)
    if gaps is not None:
        yield gaps
    ratio = prototype.ratio()
    yield _Suspect(
        lambda share: f"leakage round the edge, {value_words(-20.0 * np.log10(share), 'dB')} below the open field",
        lambda share: in_db(ratio + share),
        1e-6,
        0.7,
    )
    yield _floor_suspect(prototype, ratio, without_db)


def _sheet_suspects(prototype: Prototype) -> Iterator[_Suspect]:
    """Yield each sheet missing, and each sheet thinner."""
    for index, sheet in enumerate(prototype.stack):
        name = f"sheet {index + 1} ({sheet})" if len(prototype.stack) > 1 else f"the sheet ({sheet})"

        def thinner(share: float, index: int = index) -> Real:
            stack = list(prototype.stack)
            stack[index] = replace(stack[index], thickness_m=stack[index].thickness_m * share)
            return replace(prototype, stack=tuple(stack)).attenuation_db()

        def missing(_: float, index: int = index) -> Real:
            stack = prototype.stack[:index] + prototype.stack[index + 1 :]
            return replace(prototype, stack=stack).attenuation_db()

        yield _Suspect(lambda _, name=name: f"{name} missing", missing)  # type: ignore[misc]
        yield _Suspect(
            lambda share, name=name: f"{name} thinner by {100.0 * (1.0 - share):.0f} %",  # type: ignore[misc]
            thinner,
            GONE,
            1.0,
            1.0,
        )


def _forming_suspects(prototype: Prototype) -> Iterator[_Suspect]:
    """Yield permeability lost, material by material."""
    problem = prototype.problem
    for name in dict.fromkeys(sheet.material for sheet in prototype.stack):
        material = problem.materials[name]
        if initial_permeability(material.permeability) < PERMEABLE:
            continue

        def lost(share: float, name: str = name) -> Real:
            known = problem.materials[name]
            changed = replace(known, permeability=Scaled(known.permeability, share))
            return replace(
                prototype, problem=replace(problem, materials={**problem.materials, name: changed})
            ).attenuation_db()

        yield _Suspect(
            lambda share, name=name: (
                f"{name} with {100.0 * share:.0f} % of its permeability, "  # type: ignore[misc]
                "as after forming or without annealing"
            ),
            lost,
            0.01,
            1.0,
            1.0,
        )


def _gap_suspect(prototype: Prototype) -> _Suspect | None:
    """Return larger distances between the stack and what it separates."""

    def larger(factor: float) -> Real:
        return replace(prototype, field=_widened(prototype.field, factor)).attenuation_db()

    field = prototype.field
    if isinstance(field, CoaxialLoops | CoaxialDipoles):
        distance, words = field.gap_sum_m, "air gaps larger by {} together"
    elif isinstance(field, MagneticNearField | ElectricNearField):
        distance, words = field.distance_m, "a source further away by {}"
    else:
        return None
    return _Suspect(lambda factor: words.format(value_words((factor - 1.0) * distance, "m")), larger, 1.0, 4.0, 1.0)


def _widened(field: Field, factor: float) -> Field:
    if isinstance(field, CoaxialLoops | CoaxialDipoles):
        return replace(field, source_gap_m=field.source_gap_m * factor, victim_gap_m=field.victim_gap_m * factor)
    assert isinstance(field, MagneticNearField | ElectricNearField)
    return replace(field, distance_m=field.distance_m * factor)


def _floor_suspect(prototype: Prototype, ratio: NDArray[np.complex128], without_db: Real | None) -> _Suspect:
    """Return a noise floor, which adds its power: constant in level, so it hides less where the open level is high."""
    frequency = prototype.frequency_hz
    open_db = 20.0 * np.log10(frequency / frequency[-1]) if without_db is None else without_db - np.max(without_db)
    how = ", taking an open level that rises with frequency" if without_db is None else ""

    def floored(share: float) -> Real:
        floor = share * 10.0 ** (-open_db / 20.0)
        return np.asarray(-10.0 * np.log10(np.maximum(np.abs(ratio) ** 2 + floor**2, 1e-300)))

    return _Suspect(
        lambda share: f"a noise floor {value_words(-20.0 * np.log10(share), 'dB')} below the highest open level{how}",
        floored,
        1e-6,
        0.7,
    )
