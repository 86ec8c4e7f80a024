"""Which layer of a stack matters: how its margin changes with every layer's values, and without the layer.

Only the layer itself changes, not the other sheets of its material, and values change one at a time. The margin is the
smallest over all requirements, so that its place in frequency may move.
"""

from __future__ import annotations

from collections.abc import Iterator
from dataclasses import dataclass, replace

import numpy as np
from numpy.typing import NDArray

from stackopt import evaluate
from stackopt.deviation import VALUES, Deviation, effective_tolerance, vary
from stackopt.problem import Material, Problem, Sheet, Stack

Real = NDArray[np.float64]


@dataclass(frozen=True)
class Effect:
    """What one tolerance of one layer does to the margin.

    Parameters
    ----------
    layer : int
        Counted from 1 on the source side.
    sheet : Sheet
    value : str
        "thickness", "conductivity" or "permeability".
    down, up : float
        The tolerance, relative.
    change_down_db, change_up_db : float
        Change of the smallest margin at either end of the tolerance, dB.
    """

    layer: int
    sheet: Sheet
    value: str
    down: float
    up: float
    change_down_db: float
    change_up_db: float

    @property
    def largest_db(self) -> float:
        """The larger of the two changes, without its sign."""
        return max(abs(self.change_down_db), abs(self.change_up_db))


@dataclass(frozen=True)
class LeftOut:
    """Change of the smallest margin, dB, when a layer (counted from 1) is left out, its bond with it."""

    layer: int
    sheet: Sheet
    change_db: float


@dataclass(frozen=True)
class Sensitivity:
    """Which layer matters: effects and layers left out, the strongest first.

    ``without_tolerance`` names materials of the stack of which nothing varies.
    """

    stack: Stack
    margin_db: float
    effects: tuple[Effect, ...]
    left_out: tuple[LeftOut, ...]
    without_tolerance: tuple[str, ...]


def sensitivity(problem: Problem, stack: Stack) -> Sensitivity:
    """Compute what each tolerance of each layer does to the margin of a stack, and each layer's absence.

    Parameters
    ----------
    problem : Problem
    stack : Stack
        Source side first, any thickness. Bond films and fixed layers stay as they are.
    """
    varied = list(_varied(problem, stack))
    materials = {**problem.materials, **{material.name: material for *_, pair in varied for material, _ in pair}}
    stacks: list[Stack] = [stack]
    for layer, _, pair in varied:
        stacks += [(*stack[: layer - 1], sheet, *stack[layer:]) for _, sheet in pair]
    stacks += [(*stack[:number], *stack[number + 1 :]) for number in range(len(stack))]
    margin = _smallest_margins(replace(problem, materials=materials), stacks)
    change = margin[1:] - margin[0]
    effects = []
    for number, (layer, value, _) in enumerate(varied):
        sheet, (low, high) = stack[layer - 1], change[2 * number : 2 * number + 2].tolist()
        down, up = getattr(effective_tolerance(problem.materials[sheet.material]), value)
        effects.append(Effect(layer, sheet, value, down, up, low, high))
    absent = [
        LeftOut(number, sheet, float(change[2 * len(varied) + number - 1]))
        for number, sheet in enumerate(stack, start=1)
    ]
    touched = {effect.sheet.material for effect in effects}
    return Sensitivity(
        stack=stack,
        margin_db=float(margin[0]),
        effects=tuple(sorted(effects, key=lambda effect: -effect.largest_db)),
        left_out=tuple(sorted(absent, key=lambda entry: entry.change_db)),
        without_tolerance=tuple(dict.fromkeys(sheet.material for sheet in stack if sheet.material not in touched)),
    )


def _varied(problem: Problem, stack: Stack) -> Iterator[tuple[int, str, list[tuple[Material, Sheet]]]]:
    """Yield layer, value, and the layer's material and sheet at both ends of the tolerance."""
    for layer, sheet in enumerate(stack, start=1):
        material = problem.materials[sheet.material]
        tolerance = effective_tolerance(material)
        for value in VALUES:
            down, up = getattr(tolerance, value)
            if down == up:
                continue
            pair = []
            for end, change in (("down", down), ("up", up)):
                deviation = Deviation(**{value: 1.0 + change})
                varied = vary(material, deviation, f"{material.name} / layer {layer} {value} {end}")
                pair.append((varied, Sheet(varied.name, sheet.thickness_m * deviation.thickness)))
            yield layer, value, pair


def _smallest_margins(problem: Problem, stacks: list[Stack]) -> Real:
    least = np.full(len(stacks), np.inf)
    for number, requirement in enumerate(problem.requirements):
        grid = requirement.mask.grid_hz()
        values = evaluate.attenuation(problem, stacks, number, grid)
        least = np.minimum(least, np.min(values - requirement.mask.required_db(grid), axis=1))
    return least
