"""Time of the proof of the reference problems, from nothing and from what exploring finds, and of plain enumeration."""

from __future__ import annotations

import numpy as np
import pytest
from conditions import MASKS, awake, compiled_reference, empty_archive, warm, warmed
from naive import enumerate_front
from pytest_benchmark.fixture import BenchmarkFixture

from stackopt.explore import Explorer
from stackopt.proof import Prover
from stackopt.stock import Stock


@pytest.mark.parametrize("count", [1, 2])
@pytest.mark.parametrize("mask", MASKS)
def test_proof_from_nothing(benchmark: BenchmarkFixture, mask: str, count: int) -> None:
    prover = warmed(compiled_reference(mask))
    with awake(count) as workers:
        assert benchmark.pedantic(prover.run, (workers,), rounds=1)
    told(benchmark, prover)


@pytest.mark.parametrize("mask", MASKS)
def test_proof_of_what_exploring_finds(benchmark: BenchmarkFixture, mask: str) -> None:
    compiled = compiled_reference(mask)
    explorer = Explorer(Stock(compiled), 1, 200)
    explorer.step()
    known = empty_archive(compiled)
    known.add(explorer.archive.values, explorer.archive.codes[:, : compiled.rules.max_sheets])
    prover = Prover(compiled, known)
    warm(prover)
    with awake(2) as workers:
        assert benchmark.pedantic(prover.run, (workers,), rounds=1)
    told(benchmark, prover)


@pytest.mark.parametrize("mask", MASKS[:2])
def test_plain_enumeration(benchmark: BenchmarkFixture, mask: str) -> None:
    """The floor: the same front without the proof's means, on one core."""
    compiled = compiled_reference(mask)
    enumerate_front(compiled_reference("easy"))  # compiles
    front, opened = benchmark.pedantic(enumerate_front, (compiled,), rounds=1)
    prover = warmed(compiled)
    prover.run()
    assert np.array_equal(np.unique(front, axis=0), prover.archive.values)
    benchmark.extra_info["opened"] = int(opened)
    print(f"\n{benchmark.name}: {opened:,} prefixes opened; the proof opened {prover.tally.opened:,}")  # noqa: T201


def told(benchmark: BenchmarkFixture, prover: Prover) -> None:
    tally = prover.tally
    benchmark.extra_info |= {"front": len(prover.archive), "opened": tally.opened, "judged": tally.judged}
    rate = tally.judged / tally.seconds
    print(  # noqa: T201 - for -s
        f"\n{benchmark.name}: front of {len(prover.archive)}, {tally.opened:,} prefixes opened, "
        f"{tally.judged:,} stacks judged, {rate:,.0f} a second"
    )
