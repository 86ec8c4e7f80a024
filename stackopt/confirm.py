"""Confirming: stacks judged on a grid ten times denser than the search's, with a finer quadrature."""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from stackopt import demands, evaluate
from stackopt.compiled import COST_UNIT, MARGIN_SLACK_DB, MASS_UNIT, THICKNESS_UNIT, CompiledProblem, compile_problem
from stackopt.front import FrontRow
from stackopt.model import with_bonds
from stackopt.problem import Problem, Stack

Integers = NDArray[np.int64]
Real = NDArray[np.float64]

DENSITY = 10
"""Points for every point of the search grid."""
FINER = 10.0
"""The search's quadrature error over this one's."""


@dataclass(frozen=True)
class Judged:
    """Stacks judged densely: sums, margins and where they are tightest, further columns; one entry for each stack."""

    problem: Problem
    stacks: list[Stack]
    totals: Integers
    margin_db: Real
    each_db: Real
    """Margin for each requirement, shape (stack, requirement)."""
    decisive_db: Real
    """The margin that decides, where tolerances are assumed; else the same."""
    extra: list[dict[str, float | str]]
    frequency_hz: Real
    requirement: Integers

    @property
    def holds(self) -> NDArray[np.bool_]:
        """Whether each stack meets its masks."""
        return self.decisive_db >= -MARGIN_SLACK_DB

    def row(self, n: int) -> FrontRow:
        """Row of a front for a stack."""
        stack, problem = self.stacks[n], self.problem
        mass, cost, thickness = self.totals[n]
        priced = all(
            problem.materials[layer.material].price(layer.thickness_m) is not None
            for layer in with_bonds(problem, stack)
        )
        return FrontRow(
            stack=stack,
            mass_kg_per_m2=float(mass / MASS_UNIT),
            cost_per_m2=float(cost / COST_UNIT) if priced else float("nan"),
            thickness_m=float(thickness / THICKNESS_UNIT),
            margin_db=float(self.margin_db[n]),
            tightest_hz=float(self.frequency_hz[n]),
            requirement=problem.requirements[self.requirement[n]].name,
            extra=self.extra[n],
        )


def judge(compiled: CompiledProblem, stacks: list[Stack], error_db: float, extra_hz: list[list[float]]) -> Judged:
    """Judge stacks densely.

    Parameters
    ----------
    compiled : CompiledProblem
        As the search uses it, made with the following two.
    stacks : list of Stack
    error_db : float
        The search's quadrature error, dB.
    extra_hz : list of lists
        The search's further frequencies for each requirement, Hz.
    """
    problem = compiled.problem
    if not stacks:
        none, each = np.empty(0), np.empty((0, len(problem.requirements)))
        return Judged(
            problem, [], np.empty((0, 3), dtype=np.int64), none, each, none, [], none, np.empty(0, dtype=np.int64)
        )
    sheets = tuple(dict.fromkeys(sheet for stack in stacks for sheet in stack))
    dense = compile_problem(problem, sheets, DENSITY, error_db / FINER, extra_hz)
    codes = evaluate.encode(dense, stacks)
    totals = evaluate.sums(dense, codes)
    over = evaluate.attenuation_rows(dense, codes, totals) - dense.rows.required_db
    parts = [over[:, dense.rows.requirement == n].min(axis=1) for n in range(len(problem.requirements))]
    row = np.argmin(over, axis=1)
    margin = over[np.arange(len(over)), row]
    decisive, row = demands.decisive_margins(dense, codes, margin, row, _on_search_grid(compiled, dense))
    extra = demands.extra_columns(dense, codes)
    where, which = dense.rows.frequency_hz[row], dense.rows.requirement[row]
    return Judged(problem, stacks, totals, margin, np.stack(parts, axis=1), decisive, extra, where, which)


def _on_search_grid(compiled: CompiledProblem, dense: CompiledProblem) -> NDArray[np.bool_]:
    """Which rows of the dense grid are rows of the search grid too."""
    known = np.zeros(len(dense.rows.frequency_hz), dtype=bool)
    for number in range(len(compiled.problem.requirements)):
        grid = compiled.rows.frequency_hz[compiled.rows.requirement == number]
        here = dense.rows.requirement == number
        near = np.isclose(dense.rows.frequency_hz[here][:, None], grid, rtol=1e-9, atol=0.0)
        known[here] = np.any(near, axis=1)
    return known
