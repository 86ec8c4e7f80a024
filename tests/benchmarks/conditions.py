"""What the benchmarks run on: the reference problems, the example problems, and how good a front is."""

from __future__ import annotations

from collections.abc import Iterator
from contextlib import contextmanager
from pathlib import Path

import numpy as np
from numpy.typing import NDArray
from pymoo.indicators.hv import HV

from stackopt.archive import Archive
from stackopt.compiled import CompiledProblem, compile_problem
from stackopt.problem import Problem
from stackopt.proof import Prover
from stackopt.readers import read_problem
from stackopt.shares import Share, work_on
from stackopt.workers import Processes, Serial, Workers

Integers = NDArray[np.int64]

HERE = Path(__file__).parent
MASKS = ("easy", "12_db_more", "30_db_more")
"""Names of the reference problems' masks."""
EXAMPLES = tuple(sorted((HERE.parent.parent / "problems").glob("*.toml")))
"""The example problems."""


def reference(mask: str) -> Problem:
    """45 sheets, up to 6 in a stack, 36 frequencies; the three differ in the margin of their mask."""
    return read_problem(HERE / "problems" / f"reference_{mask}.toml")


def compiled_reference(mask: str) -> CompiledProblem:
    """The tables of a reference problem, made before any clock runs."""
    compiled = compile_problem(reference(mask))
    assert (len(compiled.sheets), compiled.rules.max_sheets, len(compiled.rows.frequency_hz)) == (45, 6, 36)
    assert compiled.tables.first.size > 0
    return compiled


def empty_archive(compiled: CompiledProblem) -> Archive:
    """An archive to begin a proof with."""
    return Archive(len(compiled.problem.search.objectives), compiled.rules.max_sheets)


def warmed(compiled: CompiledProblem) -> Prover:
    """A proof from nothing whose compiled code is loaded."""
    prover = Prover(compiled, empty_archive(compiled))
    warm(prover)
    return prover


def warm(prover: Prover) -> None:
    """Compile or load the descent, and make what it starts from."""
    work_on(prover.tables, Share(prover.unopened, prover.archive.values, work=0))


@contextmanager
def awake(count: int) -> Iterator[Workers]:
    """Workers that have proved something already: started, and their compiled code loaded."""
    with Serial() if count == 1 else Processes(count) as workers:
        compiled = compiled_reference("easy")
        Prover(compiled, empty_archive(compiled)).run(workers)
        yield workers


def hypervolume_ratio(values: Integers, front: Integers) -> float:
    """Hypervolume of a set of objective vectors over that of the whole front, objectives from 0 (ideal) to 1 (nadir).

    The reference point lies a tenth beyond the nadir. 1 where the set holds the whole front.
    """
    if len(values) == 0:
        return 0.0
    ideal, nadir = front.min(axis=0), front.max(axis=0)
    size = np.maximum(nadir - ideal, 1)
    volume = HV(ref_point=np.full(front.shape[1], 1.1))
    return float(volume((values - ideal) / size) / volume((front - ideal) / size))
