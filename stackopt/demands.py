"""What a problem demands of a stack beyond its nominal margin; the one place that search, proof and confirmation ask.

A demand is asked only of stacks that keep the rules and meet the mask on nominal values. It need not be monotone: the
proof cuts by objectives alone, and asks about every stack that it cannot cut.
"""

from __future__ import annotations

from collections.abc import Callable

import numpy as np
from numpy.typing import NDArray

from stackopt.compiled import CompiledProblem
from stackopt.problem import Problem

Integers = NDArray[np.int64]
Booleans = NDArray[np.bool_]

Demand = Callable[[CompiledProblem, Integers], Booleans]
"""Whether each stack, given as codes of shape (stack, position), meets it."""


def demands_of(problem: Problem) -> tuple[Demand, ...]:
    """Demands of a problem, cheapest first; none for most."""
    return ()


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
