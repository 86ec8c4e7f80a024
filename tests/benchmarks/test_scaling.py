"""How the cost of a proof grows with sheets, depth, frequencies and spectral lines; from nothing, on one core."""

from __future__ import annotations

from dataclasses import replace

import numpy as np
import pytest
from conditions import empty_archive, reference, warm
from pytest_benchmark.fixture import BenchmarkFixture

from stackopt.compiled import compile_problem
from stackopt.problem import Problem
from stackopt.proof import Prover

MASK = "30_db_more"
SIZES = {
    # gauges of each of nine materials, sheets in a stack, points per decade, quadrature error in dB
    "base": (5, 5, 8, 0.02),
    "27 sheets": (3, 5, 8, 0.02),
    "36 sheets": (4, 5, 8, 0.02),
    "81 sheets": (9, 5, 8, 0.02),
    "81 sheets, depth 4": (9, 4, 8, 0.02),
    "198 sheets, depth 4": (22, 4, 8, 0.02),
    "depth 4": (5, 4, 8, 0.02),
    "depth 6": (5, 6, 8, 0.02),
    "half the frequencies": (5, 5, 4, 0.02),
    "twice the frequencies": (5, 5, 16, 0.02),
    "fewer lines": (5, 5, 8, 0.5),
    "more lines": (5, 5, 8, 1e-6),
}


def sized(gauges: int, max_sheets: int, points_per_decade: int) -> Problem:
    """The reference problem with the first gauges of every material, or with more of them in the same range."""
    problem = reference(MASK)
    (requirement,) = problem.requirements
    materials = {
        name: replace(known, gauges_m=some_gauges(known.gauges_m, gauges)) if known.gauges_m else known
        for name, known in problem.materials.items()
    }
    return replace(
        problem,
        materials=materials,
        requirements=(replace(requirement, mask=replace(requirement.mask, points_per_decade=points_per_decade)),),
        rules=replace(problem.rules, max_sheets=max_sheets),
    )


def some_gauges(known: tuple[float, ...], count: int) -> tuple[float, ...]:
    if count <= len(known):
        return known[:count]
    return tuple(float(gauge) for gauge in np.geomspace(known[0], known[-1], count).round(9))


@pytest.mark.parametrize("size", SIZES)
def test_scaling(benchmark: BenchmarkFixture, size: str) -> None:
    gauges, max_sheets, points, error_db = SIZES[size]
    compiled = compile_problem(sized(gauges, max_sheets, points), error_db=error_db)
    prover = Prover(compiled, empty_archive(compiled))
    warm(prover)
    assert benchmark.pedantic(prover.run, rounds=1)
    tally = prover.tally
    (chosen,) = compiled.rows.quadrature
    print(  # noqa: T201 - for -s
        f"\n| {size} | {len(compiled.sheets)} | {max_sheets} | {len(compiled.rows.frequency_hz)} | {chosen.lines} "
        f"| {len(compiled.sheets) ** max_sheets:.1e} | {tally.opened:,} | {tally.judged:,} | {tally.seconds:.1f} "
        f"| {1e6 * tally.seconds / max(tally.judged, 1):.2f} |"
    )
