"""How much of the proved front exploring finds by itself, and in which time."""

from __future__ import annotations

import time
from pathlib import Path

import pytest
from conditions import EXAMPLES, MASKS, compiled_reference, hypervolume_ratio, warmed
from pytest_benchmark.fixture import BenchmarkFixture

from stackopt.compiled import CompiledProblem, compile_problem
from stackopt.explore import Explorer
from stackopt.proof import why_not_provable
from stackopt.readers import read_problem
from stackopt.stock import Stock

LONGEST_S = 60.0


def explore(compiled: CompiledProblem) -> Explorer:
    """Explore as a search does, to the end or for a minute."""
    problem = compiled.problem
    started = time.monotonic()
    explorer = Explorer(Stock(compiled), problem.search.random_seed, problem.search.population)
    while not explorer.finished and time.monotonic() - started < LONGEST_S:
        explorer.step()
    return explorer


def check(benchmark: BenchmarkFixture, compiled: CompiledProblem) -> None:
    explorer = benchmark.pedantic(explore, (compiled,), rounds=1)
    prover = warmed(compiled)
    assert prover.run(2)
    front, found = prover.archive.values, explorer.archive.values
    assert prover.archive.covers(found).all()
    members = sum(vector in front.tolist() for vector in found.tolist())
    ratio = hypervolume_ratio(found, front)
    benchmark.extra_info |= {"hypervolume_ratio": ratio, "found": members, "front": len(front)}
    print(  # noqa: T201 - for -s
        f"\n{benchmark.name}: hypervolume ratio {ratio:.6f}, {members} of {len(front)} members, "
        f"{explorer.computed:,} stacks judged in {explorer.epoch} epochs"
    )


@pytest.mark.parametrize("path", EXAMPLES, ids=lambda path: path.stem)
def test_example_problems(benchmark: BenchmarkFixture, path: Path) -> None:
    problem = read_problem(path)
    obstacle = why_not_provable(problem)
    if obstacle is not None:
        pytest.skip(f"there is no proved front to compare with: {obstacle}")
    check(benchmark, compile_problem(problem))


@pytest.mark.parametrize("mask", MASKS)
def test_reference_problems(benchmark: BenchmarkFixture, mask: str) -> None:
    check(benchmark, compiled_reference(mask))
