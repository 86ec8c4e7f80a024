"""The checked door to the kernel: stacks as integer codes to sums, rules, attenuation and margins.

A stack is a row of sheet numbers + 1, packed from the source side, 0 meaning empty. Functions take a `CompiledProblem`
and codes of shape (stack, position), and return one value or row per stack.
"""

from __future__ import annotations

from collections.abc import Callable, Sequence

import numpy as np
from numpy.typing import NDArray

from stackopt.compiled import THICKNESS_UNIT, CompiledProblem
from stackopt.errors import InputError
from stackopt.model import media, spectral_lines, with_bonds
from stackopt.physics import fields
from stackopt.problem import Problem, Sheet, Stack
from stackopt.readers import parse_stack

Real = NDArray[np.float64]
Integers = NDArray[np.int64]
Booleans = NDArray[np.bool_]


def encode(compiled: CompiledProblem, stacks: Sequence[Stack]) -> Integers:
    """Codes of stacks whose sheets are all tabulated, shape (stack, position).

    Raises
    ------
    InputError
        For a sheet that the compiled problem does not hold.
    """
    number = {sheet: code for code, sheet in enumerate(compiled.sheets, start=1)}
    codes = np.zeros((len(stacks), max([compiled.rules.max_sheets, *map(len, stacks)])), dtype=np.int64)
    for n, stack in enumerate(stacks):
        for m, sheet in enumerate(stack):
            if sheet not in number:
                raise InputError(f"{sheet} is not among the problem's sheets")
            codes[n, m] = number[sheet]
    return codes


def decode(compiled: CompiledProblem, codes: Integers) -> list[Stack]:
    """Stacks of codes, shape (stack, position)."""
    return [tuple(compiled.sheets[code - 1] for code in row if code > 0) for row in codes]


def packed(codes: Integers) -> Integers:
    """Move the empty positions of every stack behind its sheets, keeping their order."""
    order = np.argsort(codes == 0, axis=1, kind="stable")
    return np.take_along_axis(codes, order, axis=1)


def count_sheets(codes: Integers) -> Integers:
    """Number of sheets of each stack."""
    return np.asarray(np.count_nonzero(codes, axis=1), dtype=np.int64)


def sums(compiled: CompiledProblem, codes: Integers) -> Integers:
    """Mass, cost and thickness with bonds and handling, integer units, shape (stack, 3); exact in any order."""
    zero = np.zeros((1, 3), dtype=np.int64)
    first = np.concatenate([zero, compiled.sums.first])
    following = np.concatenate([zero, compiled.sums.following])
    return np.asarray(first[codes[:, 0]] + following[codes[:, 1:]].sum(axis=1))


def allowed(compiled: CompiledProblem, codes: Integers, totals: Integers | None = None) -> Booleans:
    """Whether each stack keeps the limits, faces and neighbours; ``totals`` are its sums, where known."""
    rules = compiled.rules
    totals = sums(compiled, codes) if totals is None else totals
    count = count_sheets(codes)
    good = (count > 0) & (count <= rules.max_sheets) & np.all(totals <= rules.limits, axis=1)
    last = codes[np.arange(len(codes)), np.maximum(count - 1, 0)]
    good &= np.append(False, rules.first)[codes[:, 0]] & np.append(False, rules.last)[last]
    pairs = np.ones((len(compiled.sheets) + 1,) * 2, dtype=bool)
    pairs[1:, 1:] = rules.neighbours
    return np.asarray(good & np.all(pairs[codes[:, :-1], codes[:, 1:]], axis=1))


def attenuation_rows(compiled: CompiledProblem, codes: Integers, totals: Integers | None = None) -> Real:
    """Attenuation of each stack in every row, dB, shape (stack, row)."""
    from stackopt import kernel  # compiled code is loaded only where it is used

    rows, tables = compiled.rows, compiled.tables
    totals = sums(compiled, codes) if totals is None else totals
    return np.asarray(
        kernel.attenuation_rows(
            np.ascontiguousarray(codes, dtype=np.int64),
            rows.mapped_thickness(totals[:, 2] / THICKNESS_UNIT),
            tables.first,
            tables.following,
            tables.first_scale,
            tables.following_scale,
            rows.row_block,
            rows.start,
            rows.ending,
            rows.fixed_scale,
            rows.open_coefficients,
        )
    )


def margins(compiled: CompiledProblem, codes: Integers, totals: Integers | None = None) -> tuple[Real, Integers]:
    """Smallest margin of each stack, dB, and the row where it stands."""
    margin = attenuation_rows(compiled, codes, totals) - compiled.rows.required_db
    tightest = np.argmin(margin, axis=1)
    return margin[np.arange(len(margin)), tightest], tightest


Screen = Callable[[Integers], Booleans]
"""Tells for objective vectors, shape (stack, objective), whether a feasible stack already covers them."""

MARGIN_UNIT = 1e9
"""Integer margin units in a dB; the margin enters objective vectors with its sign changed, smaller being better."""


HEAT_UNIT = 1e12
"""Integer heat units in a watt."""


def objective_values(
    compiled: CompiledProblem,
    codes: Integers,
    totals: Integers,
    margin_db: Real | float = 0.0,
    heat_w: Real | float = 0.0,
) -> Integers:
    """Integer objectives of stacks in the problem's order, all to be minimised, shape (stack, objective).

    Margin and heat matter only where they are objectives.
    """
    none = np.zeros(len(codes))
    columns = {
        "mass": totals[:, 0],
        "cost": totals[:, 1],
        "thickness": totals[:, 2],
        "sheets": count_sheets(codes),
        "margin": -np.round((margin_db + none) * MARGIN_UNIT).astype(np.int64),
        "heat": np.round((heat_w + none) * HEAT_UNIT).astype(np.int64),
    }
    return np.stack([columns[name] for name in compiled.problem.search.objectives], axis=1)


def monotone_values(compiled: CompiledProblem, codes: Integers) -> Integers:
    """Integer objectives of stacks where none of them needs the attenuation, shape (stack, objective)."""
    return objective_values(compiled, codes, sums(compiled, codes))


def excess(compiled: CompiledProblem, codes: Integers, totals: Integers) -> Real:
    """How far each stack goes beyond the limits: the sum of relative excesses, plus one for an empty stack."""
    limits = compiled.rules.limits.astype(float)
    beyond = np.maximum(totals / np.maximum(limits, 1.0) - 1.0, 0.0).sum(axis=1)
    return np.asarray(beyond + (count_sheets(codes) == 0))


def attenuation(
    problem: Problem,
    stacks: Sequence[str | Stack | Sequence[tuple[str, float]]],
    requirement: int = 0,
    frequency_hz: Real | None = None,
) -> Real:
    """Attenuation of any stacks of a problem's materials by the readable cascade, free of compiled code.

    Parameters
    ----------
    problem : Problem
    stacks : sequence of stacks
        Each a text such as ``"steel 150um / copper 35um"``, or a sequence of sheets or of (material, thickness in m),
        source side first; bonds are added as in the search.
    requirement : int
        Number of the requirement whose field is used.
    frequency_hz : ndarray, shape (frequency,), optional
        Frequencies, Hz; the search grid when left out.

    Returns
    -------
    ndarray, shape (stack, frequency)
        Attenuation, dB.

    Raises
    ------
    InputError
        For a material that the problem does not have, a thickness that is not positive, or a missing requirement.
    """
    if not 0 <= requirement < len(problem.requirements):
        raise InputError(f"requirement {requirement} does not exist; the problem has {len(problem.requirements)}")
    chosen = problem.requirements[requirement]
    grid = chosen.mask.grid_hz() if frequency_hz is None else np.atleast_1d(np.asarray(frequency_hz, dtype=float))
    lines = spectral_lines(chosen.field, grid, fields.REFERENCE_RULE)
    source = media(problem, problem.rules.source_side, grid)
    victim = media(problem, problem.rules.victim_side, grid)
    result = np.empty((len(stacks), len(grid)))
    for number, given in enumerate(stacks):
        if isinstance(given, str):
            given = parse_stack(given, problem.materials)
        stack = tuple(sheet if isinstance(sheet, Sheet) else Sheet(*sheet) for sheet in given)
        for sheet in stack:
            if sheet.material not in problem.materials or not sheet.thickness_m > 0.0:
                raise InputError(f"{sheet}: needs a material of the problem and a thickness above 0 um")
        result[number] = fields.attenuation_db(lines, media(problem, with_bonds(problem, stack), grid), source, victim)
    return result
