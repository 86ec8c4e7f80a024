"""Predictions of chosen stacks: attenuation against every mask, totals, and the rules that a stack breaks.

Free of compiled code, so that a single look answers quickly; any thickness is allowed.
"""

from __future__ import annotations

import itertools
import math
from collections.abc import Iterator, Sequence
from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from stackopt import evaluate
from stackopt.band import Band, tolerance_band
from stackopt.compiled import COST_UNIT, MARGIN_SLACK_DB, MASS_UNIT, THICKNESS_UNIT, compile_problem, sheet_sums
from stackopt.front import FrontRow
from stackopt.inside import Inside, broken_limits, inside
from stackopt.model import with_bonds
from stackopt.problem import Problem, Sheet, Stack
from stackopt.rayleigh import Level, at_level, needs_level
from stackopt.units import format_thickness

Real = NDArray[np.float64]


@dataclass(frozen=True)
class Curve:
    """Attenuation of a stack against the mask of one requirement; arrays of shape (frequency,)."""

    requirement: str
    frequency_hz: Real
    attenuation_db: Real
    required_db: Real
    """Mask with its margin, dB."""

    @property
    def margin_db(self) -> Real:
        """Attenuation minus mask, dB."""
        return self.attenuation_db - self.required_db


@dataclass(frozen=True)
class Prediction:
    """What is predicted of one stack.

    Parameters
    ----------
    row : FrontRow
        The stack with its totals, its smallest margin, and where that stands.
    curves : tuple of Curve
        One for each requirement.
    broken : tuple of str
        Rules of the problem that the stack breaks, in words.
    band : Band, optional
        Over the tolerances; None where there are none, or where none was asked for.
    inside : tuple of Inside
        What each drive of the problem does inside the stack and to its source.
    levels : tuple of Level
        The stack at the permeability that a drive brings about, where a material says how it depends on the field.
    """

    row: FrontRow
    curves: tuple[Curve, ...]
    broken: tuple[str, ...] = ()
    band: Band | None = None
    inside: tuple[Inside, ...] = ()
    levels: tuple[Level, ...] = ()

    @property
    def meets_mask(self) -> bool:
        """Whether no margin is negative; rounding does not decide."""
        return self.row.margin_db >= -MARGIN_SLACK_DB


def predict(problem: Problem, stacks: Sequence[Stack], density: int = 1, bands: bool = False) -> tuple[Prediction, ...]:
    """Predict stacks of a problem's materials.

    Parameters
    ----------
    problem : Problem
    stacks : sequence of Stack
        Source side first; bonds are added as in the search.
    density : int
        Multiplies the points per decade of every mask: 1 for the search grid.
    bands : bool
        Whether to compute what the tolerances of the materials make of it.

    Returns
    -------
    tuple of Prediction
        One for each stack, in the given order.

    Raises
    ------
    InputError
        For a material that the problem does not have or a thickness that is not positive.
    """
    grids = [requirement.mask.grid_hz(density) for requirement in problem.requirements]
    values = [evaluate.attenuation(problem, stacks, number, grid) for number, grid in enumerate(grids)]
    predictions = []
    for index, stack in enumerate(stacks):
        curves = tuple(
            Curve(requirement.name, grid, value[index], requirement.mask.required_db(grid))
            for requirement, grid, value in zip(problem.requirements, grids, values, strict=True)
        )
        row = _row(problem, stack, curves)
        band = tolerance_band(problem, stack, density) if bands else None
        states, levels = _driven(problem, stack)
        broken = [*_broken(problem, row), *(text for state in states for text in broken_limits(state))]
        predictions.append(Prediction(row, curves, tuple(broken), band, states, levels))
    return tuple(predictions)


def _driven(problem: Problem, stack: Stack) -> tuple[tuple[Inside, ...], tuple[Level, ...]]:
    """Tell what every drive does inside a stack, at the level of its field where a material depends on it."""
    driven = [requirement for requirement in problem.requirements if requirement.drive is not None]
    levels = {one.name: at_level(problem, stack, one) for one in driven if needs_level(problem, stack, one)}
    extras = [levels[one.name].extra_mu if one.name in levels else None for one in driven]
    states = tuple(inside(problem, stack, one, extra) for one, extra in zip(driven, extras, strict=True))
    return states, tuple(levels.values())


def totals(problem: Problem, stack: Stack) -> tuple[float, float, float]:
    """Mass (kg/m^2), cost (per m^2) and thickness (m) with bonds and handling.

    The cost is NaN where a price is missing. The sums are those of the search, integer units included,
    so that they agree to the last digit.
    """
    layers = with_bonds(problem, stack)
    mass, cost, thickness = (
        sum(column) for column in zip(*(sheet_sums(problem, layer) for layer in layers), strict=True)
    )
    cost += len(stack) * round(problem.rules.cost_per_sheet * COST_UNIT)
    priced = all(problem.materials[layer.material].price(layer.thickness_m) is not None for layer in layers)
    return mass / MASS_UNIT, cost / COST_UNIT if priced else math.nan, thickness / THICKNESS_UNIT


def _row(problem: Problem, stack: Stack, curves: Sequence[Curve]) -> FrontRow:
    tightest = min(curves, key=lambda curve: float(np.min(curve.margin_db)))
    index = int(np.argmin(tightest.margin_db))
    return FrontRow(
        stack,
        *totals(problem, stack),
        margin_db=float(tightest.margin_db[index]),
        tightest_hz=float(tightest.frequency_hz[index]),
        requirement=tightest.requirement,
    )


def _broken(problem: Problem, row: FrontRow) -> Iterator[str]:
    rules = problem.rules
    if row.sheets > rules.max_sheets:
        yield f"{row.sheets} sheets, and max_sheets is {rules.max_sheets}"
    slack = 1.0 + 1e-12  # a limit that is met exactly is met
    if rules.max_thickness_m is not None and row.thickness_m > rules.max_thickness_m * slack:
        thickness, limit = format_thickness(row.thickness_m), format_thickness(rules.max_thickness_m)
        yield f"{thickness} thick, and max_thickness is {limit}"
    if rules.max_mass_kg_per_m2 is not None and row.mass_kg_per_m2 > rules.max_mass_kg_per_m2 * slack:
        yield f"{row.mass_kg_per_m2:.4g} kg/m^2, and max_mass is {rules.max_mass_kg_per_m2:.4g} kg/m^2"
    if rules.max_cost_per_m2 is not None and row.cost_per_m2 > rules.max_cost_per_m2 * slack:
        unit = f"{problem.currency}/m^2"
        yield f"{row.cost_per_m2:.4g} {unit}, and max_cost is {rules.max_cost_per_m2:.4g} {unit}"
    yield from _not_in_stock(problem, row.stack)
    yield from _misplaced(problem, row.stack)


def _not_in_stock(problem: Problem, stack: Stack) -> Iterator[str]:
    for sheet in dict.fromkeys(stack):
        material = problem.materials[sheet.material]
        low, high = material.thickness_range_m or (math.inf, 0.0)
        gauge = any(math.isclose(sheet.thickness_m, gauge, rel_tol=1e-9) for gauge in material.gauges_m)
        if sheet.material not in problem.use:
            yield f"{sheet.material} is not among the sheets in use"
        elif not gauge and not low * (1.0 - 1e-9) <= sheet.thickness_m <= high * (1.0 + 1e-9):
            yield f"{sheet} is not a gauge of the material set"


def _misplaced(problem: Problem, stack: Stack) -> Iterator[str]:
    """Yield what is wrong with faces and neighbours, as the tables of the search see it."""
    given = problem.rules
    ends = ((stack[0], given.first, "first", "source"), (stack[-1], given.last, "last", "victim"))
    named = [sheet.material not in (names or (sheet.material,)) for sheet, names, _, _ in ends]
    for (sheet, names, key, side), wrong in zip(ends, named, strict=True):
        if wrong:
            yield f"{sheet.material} is on the {side} face, and {key} allows {', '.join(names or ())}"
    if given.max_anodic_gap_v is None:
        return
    sheets: Stack = tuple(dict.fromkeys(stack))
    rules = compile_problem(problem, sheets).rules
    limit = f"by more than max_anodic_gap, {given.max_anodic_gap_v:g} V"
    for one, other in dict.fromkeys(itertools.pairwise(stack)):
        if not rules.neighbours[sheets.index(one), sheets.index(other)]:
            yield f"{_pair(one, other)} touch and differ {limit}"
    beside = ((given.source_side[-1:], rules.first), (given.victim_side[:1], rules.last))
    for (sheet, _, _, side), wrong, (layers, good) in zip(ends, named, beside, strict=True):
        if not wrong and layers and not good[sheets.index(sheet)]:
            yield f"{sheet.material} touches {layers[0].material} on the {side} side, and they differ {limit}"


def _pair(one: Sheet, other: Sheet) -> str:
    return f"{one.material} and {other.material}"
