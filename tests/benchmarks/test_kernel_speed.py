"""Stacks that the kernel judges in a second, and how long the tables and the compiled code take to make."""

from __future__ import annotations

import os
import subprocess
import sys
from pathlib import Path

import numpy as np
import pytest
from conditions import compiled_reference, reference
from pytest_benchmark.fixture import BenchmarkFixture

from stackopt import evaluate
from stackopt.blocks import LANES
from stackopt.compiled import CompiledProblem, compile_problem
from stackopt.physics.fields import HankelRule
from stackopt.scout import scout

STACKS = 2000


@pytest.fixture
def lines_24(monkeypatch: pytest.MonkeyPatch) -> CompiledProblem:
    """The reference problem with 24 lines at every frequency, whatever its own quadrature is."""
    monkeypatch.setattr("stackopt.physics.fields.choose_rule", lambda *_: (HankelRule(24), 0.0))
    compiled = compiled_reference("easy")
    assert compiled.rows.row_block[-1] * LANES == 36 * 24
    return compiled


def random_codes(compiled: CompiledProblem, sheets: int) -> np.ndarray:
    codes = np.zeros((STACKS, compiled.rules.max_sheets), dtype=np.int64)
    codes[:, :sheets] = np.random.default_rng(1).integers(1, len(compiled.sheets) + 1, (STACKS, sheets))
    return codes


def test_kernel_4_sheets_36_frequencies_24_lines(benchmark: BenchmarkFixture, lines_24: CompiledProblem) -> None:
    codes = random_codes(lines_24, 4)
    level = benchmark(evaluate.attenuation_rows, lines_24, codes)
    assert level.shape == (STACKS, 36)
    assert np.isfinite(level).all()
    told(benchmark, f"{STACKS / benchmark.stats.stats.min:,.0f} stacks/s on one core")


def test_tables(benchmark: BenchmarkFixture) -> None:
    """Quadrature and tables of the reference problem."""
    problem = reference("easy")
    compiled = benchmark.pedantic(lambda: compile_problem(problem).tables, rounds=3)
    assert np.isfinite(compiled.first).all()


def test_quick_look(benchmark: BenchmarkFixture) -> None:
    compiled = compiled_reference("easy")
    found = benchmark.pedantic(scout, (compiled,), rounds=3)
    assert found.margin_db > 0.0


COMPILE = """
import sys
sys.path.insert(0, sys.argv[1])
from conditions import compiled_reference, warmed
warmed(compiled_reference("easy"))
"""


def test_compiling_on_a_fresh_machine(benchmark: BenchmarkFixture, tmp_path: Path) -> None:
    """A fresh interpreter with nothing in the cache: imports, tables of the reference problem, compiled code."""
    environment = os.environ | {"NUMBA_CACHE_DIR": str(tmp_path)}
    command = [sys.executable, "-c", COMPILE, str(Path(__file__).parent)]
    benchmark.pedantic(subprocess.run, (command,), {"env": environment, "check": True}, rounds=1)
    assert list(tmp_path.rglob("*.nbc"))


def test_starting_with_the_cache(benchmark: BenchmarkFixture) -> None:
    """The same with the compiled code in the cache."""
    command = [sys.executable, "-c", COMPILE, str(Path(__file__).parent)]
    benchmark.pedantic(subprocess.run, (command,), {"check": True}, rounds=2, warmup_rounds=1)


def told(benchmark: BenchmarkFixture, text: str) -> None:
    benchmark.extra_info["told"] = text
    print(f"\n{benchmark.name}: {text}")  # noqa: T201 - for -s
