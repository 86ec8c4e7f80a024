"""Finished runs read back: the problem from the run's own copies, and its front from front.csv."""

from __future__ import annotations

import math
from collections.abc import Iterable
from dataclasses import dataclass
from pathlib import Path
from typing import Any

import numpy as np

from stackopt.errors import Finding, InputError, RunError
from stackopt.front import COLUMNS, Front, FrontRow
from stackopt.problem import Problem
from stackopt.readers import parse_stack, read_problem

START_ANEW = "start a new search"


@dataclass(frozen=True)
class FinishedRun:
    """A run folder with its front; ``record`` is the content of its run.json."""

    folder: Path
    front: Front
    record: dict[str, Any]


def read_run(folder: Path) -> FinishedRun:
    """Read a run that has written its front.

    Raises
    ------
    RunError
        When the folder is no run, the run has no front yet, or its files were changed.
    """
    from stackopt.run import input_hash, read_record  # loads the searches, which only this function needs

    record = read_record(folder)
    path = folder / str(record["problem"])
    problem = read_problem(path, allow_outside=True)
    if input_hash(problem) != record["input_sha256"]:
        raise RunError(Finding(str(folder), "inputs", f"were changed since the run began; {START_ANEW}"))
    if not record.get("finished"):
        raise RunError(
            Finding(str(folder), "", f"has no front yet; go on with the search: stackopt search --resume {folder}")
        )
    rows = tuple(row for _, row in _read_rows(folder / "front.csv", problem))
    equals = folder / "front_equals.csv"
    alternatives = folder / "alternatives.csv"
    front = Front(
        problem,
        rows,
        bool(record.get("complete")),
        str(record.get("statement", "")),
        tuple(_read_rows(equals, problem)) if equals.exists() else (),
        tuple(row for _, row in _read_rows(alternatives, problem)) if alternatives.exists() else None,
    )
    return FinishedRun(folder, front, record)


def _read_rows(path: Path, problem: Problem) -> list[tuple[int, FrontRow]]:
    """Rows of a file with the columns of front.csv, each with its rank."""
    import pandas as pd

    try:
        frame = pd.read_csv(path, encoding="utf-8", dtype={"stack": str, "requirement": str}, keep_default_na=False)
    except FileNotFoundError:
        raise RunError(Finding(str(path), "", f"does not exist; {START_ANEW}")) from None
    except (OSError, ValueError) as error:
        raise RunError(Finding(str(path), "", f"cannot be read: {error}; {START_ANEW}")) from None
    missing = [name for name in COLUMNS if name not in frame.columns]
    if missing:
        raise RunError(Finding(str(path), "", f"has no column {', '.join(missing)}; {START_ANEW}"))
    return list(_rows(path, frame.to_dict("records"), problem))


def _rows(path: Path, records: Iterable[dict[Any, Any]], problem: Problem) -> Iterable[tuple[int, FrontRow]]:
    names = {requirement.name for requirement in problem.requirements}
    for line, record in enumerate(records, start=2):
        where = f"line {line}"
        try:
            row = FrontRow(
                stack=parse_stack(str(record["stack"]), problem.materials),
                mass_kg_per_m2=float(record["mass_kg_per_m2"]),
                cost_per_m2=_cost(record["cost_per_m2"]),
                thickness_m=float(np.round(float(record["thickness_mm"]) * 1e-3, 12)),
                margin_db=float(record["margin_db"]),
                tightest_hz=float(record["tightest_hz"]),
                requirement=str(record["requirement"]),
                extra={name: _number(value) for name, value in record.items() if name not in COLUMNS},
            )
            rank = int(record["rank"])
        except InputError as error:
            raise RunError([Finding(str(path), where, str(finding)) for finding in error.findings]) from None
        except ValueError as error:
            raise RunError(Finding(str(path), where, f"cannot be read: {error}; {START_ANEW}")) from None
        if row.requirement not in names:
            message = f"found requirement {row.requirement!r}, which the problem does not have; {START_ANEW}"
            raise RunError(Finding(str(path), where, message))
        yield rank, row


def _number(value: object) -> float | str:
    try:
        return float(str(value))
    except ValueError:
        return str(value)


def _cost(value: object) -> float:
    """Return the cost; an empty cell is an unknown price."""
    return math.nan if value == "" else float(str(value))
