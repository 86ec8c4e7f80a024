"""What a drive does inside a stack: flux and heat in every layer, and how far the source itself changes.

The layers of an assembly are the fixed ones, the sheets and the bonds, from the source side to the victim side. The
frequencies of one drive act together: heat adds up over them, and so do the flux fractions of a layer (each at its
largest, which is the unlucky phase). Alternatives are requirements of their own.
"""

from __future__ import annotations

import functools
import math
from collections.abc import Iterator, Sequence
from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from stackopt.drive_point import DrivePoint, Key, source_of
from stackopt.errors import InputError
from stackopt.model import media, with_bonds
from stackopt.physics import interior, radial
from stackopt.physics.media import air
from stackopt.problem import Drive, Problem, Requirement, Sheet, Stack

Real = NDArray[np.float64]
Integers = NDArray[np.int64]
Booleans = NDArray[np.bool_]

LIMIT_SLACK = 1e-9
"""A limit exceeded by this share still counts as kept, so that rounding cannot decide."""
_CHUNK = 64
"""Stacks solved at once: few enough to stay in the cache of a processor."""


@dataclass(frozen=True)
class LayerState:
    """One layer at one frequency of a drive.

    Parameters
    ----------
    sheet : Sheet
    peak_flux_t : float
        Largest flux density over radius and thickness, peak over time.
    flux_fraction : float
        Of the material's saturation; NaN where the set gives none.
    heat_w, heat_w_per_m2 : float
        Power lost in the layer, and per area at the worst radius.
    in_stack : bool
        False for fixed layers.
    """

    sheet: Sheet
    peak_flux_t: float
    flux_fraction: float
    heat_w: float
    heat_w_per_m2: float
    in_stack: bool


@dataclass(frozen=True)
class DriveState:
    """A stack at one frequency of a drive; the coil's changes are per one turn, the relative one (NaN: unknown) of all.

    ``drive`` is in ampere-turns (loops) or A m^2 (dipoles), peak. For dipoles the changes are those of a small loop
    of 1 m^2; they grow with the square of the area.
    """

    frequency_hz: float
    drive: float
    layers: tuple[LayerState, ...]
    inductance_change_h: float
    resistance_change_ohm: float
    inductance_change: float


@dataclass(frozen=True)
class Inside:
    """A stack under the drive of a requirement; the totals are over all frequencies of the drive.

    ``flux_fraction`` is the largest among the layers (0 where none saturates), ``flux_layer`` the layer's number from 0
    (None: none), ``heat_w`` that of sheets and bonds, ``inductance_change`` the largest relative one (NaN: unknown).
    """

    requirement: str
    limits: Drive
    states: tuple[DriveState, ...]
    flux_fraction: float
    flux_layer: int | None
    heat_w: float
    inductance_change: float


@dataclass(frozen=True)
class WorstInside:
    """The same for many stacks, the worst over all requirements; arrays of shape (stack,).

    Parameters
    ----------
    flux_fraction : ndarray
        Largest flux density over saturation, 0 where no layer saturates.
    layer : ndarray
        Its layer, numbered from 0 in `assembly`; -1 where there is none.
    heat_w : ndarray
        Heat of sheets and bonds, W.
    inductance_change : ndarray
        Largest relative change of the source's inductance, without its sign; 0 where it is not known.
    excess : ndarray
        Largest share by which a limit is exceeded, below 0 where all are kept.
    """

    flux_fraction: Real
    layer: Integers
    heat_w: Real
    inductance_change: Real
    excess: Real


@dataclass(frozen=True)
class CoilChange:
    """What a stack does to a source over frequency, per one turn; see `DriveState` for dipoles. Shape (frequency,)."""

    requirement: str
    frequency_hz: Real
    inductance_change_h: Real
    resistance_change_ohm: Real


def assembly(problem: Problem, stack: Stack) -> Stack:
    """All layers that a stack makes with its bonds and the fixed layers, source side first."""
    rules = problem.rules
    return (*rules.source_side, *with_bonds(problem, stack), *rules.victim_side)


def inside(problem: Problem, stack: Stack, requirement: Requirement, extra_mu: Sequence[float] | None = None) -> Inside:
    """Tell what the drive of a requirement does inside a stack.

    Parameters
    ----------
    problem : Problem
    stack : Stack
        Source side first; bonds and fixed layers are added.
    requirement : Requirement
        With a drive.
    extra_mu : sequence of float, optional
        What the field adds to the relative permeability of every layer of `assembly`, see `stackopt.rayleigh`.

    Raises
    ------
    InputError
        For a requirement without a drive, or without a source that can have one.
    """
    drive = requirement.drive
    if drive is None:
        raise InputError(f'{requirement.name}: no drive is given; write one, such as drive = [["100 kHz", "12 A"]]')
    layers = assembly(problem, stack)
    keys = list(zip(layers, [0.0] * len(layers) if extra_mu is None else extra_mu, strict=True))
    states = tuple(_state(problem, requirement, drive, keys, number) for number in range(len(drive.points)))
    fractions = np.nansum([[layer.flux_fraction for layer in state.layers] for state in states], axis=0)
    first, last = _own(problem, layers)
    return Inside(
        requirement=requirement.name,
        limits=drive,
        states=states,
        flux_fraction=float(np.max(fractions)),
        flux_layer=int(np.argmax(fractions)) if np.max(fractions) > 0.0 else None,
        heat_w=sum(layer.heat_w for state in states for layer in state.layers[first:last]),
        inductance_change=max((state.inductance_change for state in states), key=abs),
    )


def _own(problem: Problem, layers: Stack) -> tuple[int, int]:
    """First layer of the stack itself in its assembly, and the first behind it."""
    rules = problem.rules
    return len(rules.source_side), len(layers) - len(rules.victim_side)


def _state(problem: Problem, requirement: Requirement, drive: Drive, keys: list[Key], number: int) -> DriveState:
    point, (frequency, peak) = drive_points(problem)[requirement.name][number], drive.points[number]
    solved = point.solve([keys])
    layers = tuple(sheet for sheet, _ in keys)
    first, last = _own(problem, layers)
    thickness = sum(sheet.thickness_m for sheet in layers[first:last])
    mutual = complex(point.inductance_change(solved, np.array([thickness]))[0])
    per_area = radial.loss_per_area(point.lines, point.rule, [point.layer(key) for key in keys])
    states = []
    for index, sheet in enumerate(layers):
        flux = peak * float(solved.flux_t[0, index])
        worst = float(radial.largest(per_area[index], point.rule.radii_m))
        states.append(
            LayerState(
                sheet=sheet,
                peak_flux_t=flux,
                flux_fraction=flux / (problem.materials[sheet.material].saturation_t or math.nan),
                heat_w=peak**2 * float(solved.heat_w[0, index]),
                heat_w_per_m2=peak**2 * max(worst, 0.0),
                in_stack=first <= index < last,
            )
        )
    relative = mutual.real * _turns_squared_over_inductance(drive)
    return DriveState(
        frequency, peak, tuple(states), mutual.real, 0.0 - 2.0 * math.pi * frequency * mutual.imag, relative
    )


def _turns_squared_over_inductance(drive: Drive) -> float:
    if drive.source_turns is None or drive.source_inductance_h is None:
        return math.nan
    return drive.source_turns**2 / drive.source_inductance_h


@functools.lru_cache(maxsize=8)
def drive_points(problem: Problem) -> dict[str, tuple[DrivePoint, ...]]:
    """Solvers of every drive by the name of its requirement; kept, because they are worth a tenth of a second each."""
    return {
        requirement.name: tuple(DrivePoint(problem, requirement.field, f) for f, _ in requirement.drive.points)
        for requirement in problem.requirements
        if requirement.drive is not None
    }


def worst_inside(problem: Problem, stacks: Sequence[Stack]) -> WorstInside:
    """Tell what every drive of a problem does inside many stacks, at the permeability of small fields.

    Stacks that no drive reaches (a problem without one) have zeros and no excess.
    """
    parts = [_worst(problem, stacks[n : n + _CHUNK]) for n in range(0, len(stacks), _CHUNK)]
    columns = zip(*parts, strict=True) if parts else [()] * 5
    flux, layer, heat, change, excess = (np.concatenate([[], *column]) for column in columns)
    return WorstInside(flux, layer.astype(np.int64), heat, change, excess)


def keeps_limits(problem: Problem, stacks: Sequence[Stack]) -> Booleans:
    """Whether each stack keeps all the limits of all drives, shape (stack,)."""
    return np.asarray(worst_inside(problem, stacks).excess <= LIMIT_SLACK)


def _worst(problem: Problem, stacks: Sequence[Stack]) -> tuple[Real, Integers, Real, Real, Real]:
    layers = [assembly(problem, stack) for stack in stacks]
    zero = np.zeros(len(stacks))
    flux, layer, heat, change, excess = zero, np.full(len(stacks), -1), zero, zero, zero - np.inf
    for requirement in problem.requirements:
        drive = requirement.drive
        if drive is None:
            continue
        fraction, at, own_heat, own_change = _driven(problem, requirement.name, drive, layers)
        layer = np.where(fraction > flux, at, layer)
        flux, heat, change = np.maximum(flux, fraction), np.maximum(heat, own_heat), np.maximum(change, own_change)
        limits = (
            (fraction, drive.saturation_fraction),
            (own_heat, drive.max_heat_w),
            (own_change, drive.max_inductance_change),
        )
        for value, limit in limits:
            if limit is not None:
                excess = np.maximum(excess, value / limit - 1.0)
    return flux, layer, heat, change, excess


def _driven(problem: Problem, name: str, drive: Drive, layers: Sequence[Stack]) -> tuple[Real, Integers, Real, Real]:
    """Largest flux fraction with its layer, heat, and change of inductance under one drive, shape (stack,)."""
    keys = [[(sheet, 0.0) for sheet in row] for row in layers]
    widest = max(map(len, layers))
    saturation = np.full((len(layers), widest), np.inf)
    own = np.zeros((len(layers), widest), dtype=bool)
    thickness = np.zeros(len(layers))
    for number, row in enumerate(layers):
        saturation[number, : len(row)] = [problem.materials[sheet.material].saturation_t or np.inf for sheet in row]
        first, last = _own(problem, row)
        own[number, first:last] = True
        thickness[number] = sum(sheet.thickness_m for sheet in row[first:last])
    fraction, heat, change = np.zeros((len(layers), widest)), np.zeros(len(layers)), np.zeros(len(layers))
    for point, (_, peak) in zip(drive_points(problem)[name], drive.points, strict=True):
        solved = point.solve(keys, every_flux=False)
        fraction += peak * solved.flux_t / saturation
        heat += peak**2 * np.sum(np.where(own, solved.heat_w, 0.0), axis=1)
        scale = _turns_squared_over_inductance(drive)
        if scale == scale:
            change = np.maximum(change, np.abs(point.inductance_change(solved, thickness).real) * scale)
    at = np.argmax(fraction, axis=1)
    largest = fraction[np.arange(len(layers)), at]
    return largest, np.where(largest > 0.0, at, -1), heat, change


def broken_limits(state: Inside) -> Iterator[str]:
    """Yield the limits of a drive that a stack breaks, in words."""
    limits, slack = state.limits, 1.0 + LIMIT_SLACK
    if state.flux_layer is not None and state.flux_fraction > limits.saturation_fraction * slack:
        sheet = state.states[0].layers[state.flux_layer].sheet
        yield (
            f"{sheet} carries {100.0 * state.flux_fraction:.3g} % of its saturation, and saturation_fraction is "
            f"{100.0 * limits.saturation_fraction:.3g} %"
        )
    if limits.max_heat_w is not None and state.heat_w > limits.max_heat_w * slack:
        yield f"the stack takes {state.heat_w:.3g} W of heat, and max_heat is {limits.max_heat_w:.4g} W"
    change = limits.max_inductance_change
    if change is not None and abs(state.inductance_change) > change * slack:
        yield (
            f"the source's inductance changes by {100.0 * state.inductance_change:+.3g} %, and max_inductance_change "
            f"is {100.0 * change:.4g} %"
        )


def coil_change(
    problem: Problem, stack: Stack, requirement: Requirement, frequency_hz: Real | None = None
) -> CoilChange:
    """Tell what a stack does to the source of a requirement over its mask's frequencies, drive or not.

    Raises
    ------
    InputError
        For a field without a source, or a source that lies on the first face.
    """
    radius, gap = source_of(requirement.field)
    grid = requirement.mask.grid_hz() if frequency_hz is None else np.atleast_1d(np.asarray(frequency_hz, dtype=float))
    lines = interior.source_lines(grid, radius, gap)
    layers = assembly(problem, stack)
    first, last = _own(problem, layers)
    air_gap = (air(grid), sum(sheet.thickness_m for sheet in layers[first:last]))
    with_stack, without = (
        interior.respond_to(
            lines, [*media(problem, layers[:first], grid), *middle, *media(problem, layers[last:], grid)]
        )
        for middle in (media(problem, layers[first:last], grid), [air_gap])
    )
    mutual = interior.reflected_inductance(lines, with_stack.reflection - without.reflection)
    return CoilChange(requirement.name, grid, mutual.real, 0.0 - 2.0 * np.pi * grid * mutual.imag)
