"""Fronts of invented stacks for the tests of what people get to see."""

from __future__ import annotations

from collections.abc import Sequence

from builders import build_problem

from stackopt.front import Front
from stackopt.prediction import predict
from stackopt.problem import Problem, Sheet, Stack

STACKS: tuple[Stack, ...] = (
    (Sheet("aluminium", 200e-6), Sheet("nickel alloy", 25e-6), Sheet("copper", 18e-6)),
    (Sheet("copper", 35e-6), Sheet("nickel alloy", 100e-6), Sheet("copper", 35e-6)),
    (Sheet("steel", 250e-6), Sheet("aluminium", 50e-6), Sheet("steel", 250e-6)),
)


def make_front(problem: Problem | None = None, stacks: Sequence[Stack] = STACKS, complete: bool = True) -> Front:
    """A front of the given stacks, as if a search had found them."""
    problem = build_problem() if problem is None else problem
    rows = tuple(prediction.row for prediction in predict(problem, stacks)) if stacks else ()
    return Front(problem, rows, complete, "Complete: invented.")


def many_stacks(count: int) -> list[Stack]:
    """Stacks that all differ."""
    return [(Sheet("steel", (25 + number) * 1e-6), Sheet("copper", 9e-6)) for number in range(count)]
