"""The record of a run, the content of its run.json: what was searched, with what, and what came of it."""

from __future__ import annotations

import os
import platform
from collections.abc import Mapping
from importlib.metadata import version
from pathlib import Path
from typing import Any

from stackopt.front import Front
from stackopt.phases import Search
from stackopt.problem import Problem
from stackopt.run_folder import input_path

_PACKAGES = ("numpy", "scipy", "numba", "pymoo", "pandas")


def make_record(problem: Problem, task: Search, inputs_sha256: str) -> dict[str, Any]:
    """Return the record of a run that has no front yet."""
    return {
        "stackopt": version("stackopt"),
        "problem": input_path(problem, Path(problem.files[0])).as_posix(),
        "title": problem.title,
        "input_sha256": inputs_sha256,
        "seed": task.seed,
        "versions": {"python": platform.python_version()} | {name: version(name) for name in _PACKAGES},
        "machine": {"processor": platform.machine(), "cores": os.cpu_count(), "workers": task.workers.count},
        "currency": problem.currency,
        "objectives": list(problem.search.objectives),
        "assume": problem.search.assume,
        "driven": [requirement.name for requirement in problem.requirements if requirement.drive],
        "finished": False,
        "complete": False,
    }


def result_record(problem: Problem, task: Search, front: Front, margins_db: Mapping[str, float]) -> dict[str, Any]:
    """Return what a front adds to the record, and what of it changes."""
    quadrature = zip(problem.requirements, task.compiled.rows.quadrature, strict=True)
    return {
        "finished": True,
        "complete": front.complete,
        "statement": front.statement,
        "front": len(front),
        "margins_db": dict(margins_db),
        "equal_stacks": len(front.equals),
        "rounds": task.round + 1,
        "added_frequencies_hz": task.extra_hz,
        "quadrature": [
            {"requirement": requirement.name, "lines": chosen.lines, "error_db": chosen.error_db}
            for requirement, chosen in quadrature
        ],
        "seconds": {name: round(value, 3) for name, value in task.seconds.items()},
        "explored": {"stacks_judged": task.explorer.computed, "epochs": task.explorer.epoch},
        "proof": task.proof_record(),
    }
