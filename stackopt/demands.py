"""What a problem demands of a stack beyond its nominal margin; the one place that search, proof and confirmation ask.

A demand is asked only of stacks that keep the rules and meet the mask on nominal values. It need not be monotone: the
proof cuts by objectives alone, and asks about every stack that it cannot cut.
"""

from __future__ import annotations

from collections.abc import Callable

import numpy as np
from numpy.typing import NDArray

from stackopt import rayleigh
from stackopt.compiled import MARGIN_SLACK_DB, CompiledProblem
from stackopt.evaluate import decode
from stackopt.inside import assembly, broken_limits, inside, keeps_limits, worst_inside
from stackopt.problem import Problem, Stack, format_stack
from stackopt.tolerance import meets_assumption, samples_for, tolerances_of

Real = NDArray[np.float64]
Integers = NDArray[np.int64]
Booleans = NDArray[np.bool_]

Demand = Callable[[CompiledProblem, Integers], Booleans]
"""Whether each stack, given as codes of shape (stack, position), meets it."""


def demands_of(problem: Problem) -> tuple[Demand, ...]:
    """Demands of a problem, cheapest first; none for most."""
    found: list[Demand] = []
    if problem.search.assume != "nominal":
        found.append(meets_assumption)
    if faces_differ(problem):
        found.append(_keeps_drive_limits)
    return tuple(found)


def _keeps_drive_limits(compiled: CompiledProblem, codes: Integers) -> Booleans:
    return keeps_limits(compiled.problem, decode(compiled, codes))


def met(compiled: CompiledProblem, codes: Integers) -> Booleans:
    """Whether each stack meets every demand."""
    good = np.ones(len(codes), dtype=bool)
    for demand in demands_of(compiled.problem):
        left = np.flatnonzero(good)
        if len(left):
            good[left] = demand(compiled, codes[left])
    return good


def faces_differ(problem: Problem) -> bool:
    """Whether a demand may treat a stack and its mirror image differently: what happens inside layers does."""
    return any(requirement.drive is not None for requirement in problem.requirements)


def heat_w(compiled: CompiledProblem, codes: Integers) -> Real:
    """Heat of sheets and bonds under the drives, W, the worst over all requirements."""
    return worst_inside(compiled.problem, decode(compiled, codes)).heat_w


def decisive_margins(
    compiled: CompiledProblem, codes: Integers, margin_db: Real, row: Integers, known: Booleans
) -> tuple[Real, Integers]:
    """Return the margins that decide, dB, and their rows.

    They are the nominal ones given, those of the worst corners, or those that the goal's share of samples reaches.
    ``known`` marks the rows that a yield need not name, shape (row,).
    """
    search = compiled.problem.search
    if search.assume == "nominal" or len(codes) == 0:
        return margin_db, row
    judge = tolerances_of(compiled)
    if search.assume == "worst":
        found = judge.worst_margins(codes)
    else:
        found = judge.goal_margins(codes, search.yield_goal, search.random_seed, known=known)
    return found.margin_db, found.row


def holds_at_level(problem: Problem, stack: Stack) -> bool:
    """Whether a stack meets mask and limits at the permeability that its drives bring about, where that is known.

    An iteration that did not settle does not hold.
    """
    for requirement in problem.requirements:
        if rayleigh.needs_level(problem, stack, requirement):
            level = rayleigh.at_level(problem, stack, requirement)
            short = np.any(level.attenuation_db < level.required_db - MARGIN_SLACK_DB)
            if not level.converged or short:
                return False
            if any(broken_limits(inside(problem, stack, requirement, level.extra_mu))):
                return False
    return True


def extra_columns(compiled: CompiledProblem, codes: Integers) -> list[dict[str, float | str]]:
    """Further columns of front.csv for each stack: worst margin or yield where assumed, flux and heat where driven."""
    problem, search = compiled.problem, compiled.problem.search
    columns: dict[str, list[float | str]] = {}
    if len(codes) and search.assume == "worst":
        columns["worst_margin_db"] = tolerances_of(compiled).worst_margins(codes).margin_db.tolist()
    if len(codes) and search.assume == "yield":
        found = tolerances_of(compiled).yield_of(codes, samples_for(search.yield_goal), search.random_seed)
        columns |= {
            "yield": found.fraction.tolist(), "yield_low": found.low.tolist(), "yield_high": found.high.tolist()
        }  # fmt: skip
    if len(codes) and faces_differ(problem):
        stacks = decode(compiled, codes)
        within = worst_inside(problem, stacks)
        columns["flux_fraction"] = within.flux_fraction.tolist()
        columns["flux_layer"] = [_layer(problem, s, n) for s, n in zip(stacks, within.layer.tolist(), strict=True)]
        columns["heat_w"] = within.heat_w.tolist()
    return [dict(zip(columns, values, strict=True)) for values in zip(*columns.values(), strict=True)] or [{}] * len(
        codes
    )


def _layer(problem: Problem, stack: Stack, number: int) -> str:
    return format_stack(assembly(problem, stack)[number : number + 1]) if number >= 0 else ""
