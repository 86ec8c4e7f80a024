"""Finished runs read back: the problem from the run's own copies, and its front from front.csv.

A run may have been copied from a stranger: nothing outside its folder is read, and nothing that its files say is taken
on trust where it can be told to be wrong.
"""

from __future__ import annotations

import csv
import io
import math
from collections.abc import Iterator, Mapping
from dataclasses import dataclass
from pathlib import Path
from typing import Any

from stackopt.errors import Finding, InputError, RunError
from stackopt.front import COLUMNS, Front, FrontRow
from stackopt.prediction import totals
from stackopt.problem import Problem
from stackopt.readers import parse_stack, read_problem
from stackopt.readers.files import is_inside, read_text
from stackopt.run_folder import INPUTS, input_hash
from stackopt.units import show
from stackopt.untrusted import as_text
from stackopt.watching import RECORD, read_record

START_ANEW = "start a new search"
NUMBERS = ("worst_margin_db", "yield", "yield_low", "yield_high", "flux_fraction", "heat_w")
"""Columns beyond the usual ones that hold numbers; they are empty where there is nothing to tell."""
MAX_ROWS = 50_000
MAX_TABLE_BYTES = 20_000_000
"""Of front.csv and the tables beside it; checking more of them would take longer than anybody waits for a page."""
MAX_STATEMENT = 2000
"""Characters of a statement."""
_SAME = 1e-6
"""Relative difference up to which a sum in a file is that of its stack: the stack's text has ten digits."""


@dataclass(frozen=True)
class FinishedRun:
    """A run folder with its front; ``record`` is the content of its run.json."""

    folder: Path
    front: Front
    record: dict[str, Any]


def _read_record(folder: Path) -> dict[str, Any]:
    """Read run.json and check what else of it is used here."""
    path = folder / RECORD
    _refuse_outside(path, folder)
    record = read_record(folder)
    wrong = [Finding(str(path), key, f"{message}; {START_ANEW}") for key, message in _wrong_values(record)]
    if wrong:
        raise RunError(wrong)
    return record | {"statement": as_text(record.get("statement", ""), MAX_STATEMENT)}


def _wrong_values(record: Mapping[str, Any]) -> Iterator[tuple[str, str]]:
    if record["problem"] != as_text(record["problem"]):
        yield "problem", f"found {show(record['problem'])}, which is no name of a file"
    if not isinstance(record.get("statement", ""), str):
        yield "statement", f"found {show(record['statement'])}, which is no text"
    for key in ("finished", "complete"):
        if not isinstance(record.get(key, False), bool):
            yield key, f"found {show(record[key])}, which is neither true nor false"


def read_copies(folder: Path, record: Mapping[str, Any]) -> Problem:
    """Read the problem of a run from the run's own copies.

    Parameters
    ----------
    folder : Path
        The run.
    record : mapping
        As `stackopt.watching.read_record` returns it.

    Raises
    ------
    InputError
        When the copies were changed, cannot be read, or name files outside the run's folder.
    """
    problem = read_problem(folder / record["problem"], fence=folder / INPUTS)
    if input_hash(problem) != record["input_sha256"]:
        raise RunError(Finding(str(folder), INPUTS, f"were changed since the run began; {START_ANEW}"))
    return problem


def read_run(folder: Path) -> FinishedRun:
    """Read a run that has written its front.

    Raises
    ------
    RunError
        When the folder is no run, the run has no front yet, or its files were changed.
    """
    record = _read_record(folder)
    problem = read_copies(folder, record)
    if not record.get("finished", False):
        raise RunError(
            Finding(str(folder), "", f"has no front yet; go on with the search: stackopt search --resume {folder}")
        )
    rows = _read_rows(folder / "front.csv", problem)
    equals, alternatives = folder / "front_equals.csv", folder / "alternatives.csv"
    front = Front(
        problem,
        tuple(row for _, row in rows),
        record.get("complete", False),
        record["statement"],
        tuple(_read_rows(equals, problem, len(rows))) if equals.exists() else (),
        tuple(row for _, row in _read_rows(alternatives, problem)) if alternatives.exists() else None,
    )
    return FinishedRun(folder, front, record)


def _read_rows(path: Path, problem: Problem, most_rank: int | None = None) -> list[tuple[int, FrontRow]]:
    """Rows of a file with the columns of front.csv, each with its rank: 1, 2, ..., or any up to ``most_rank``."""
    try:
        _refuse_outside(path, path.parent)
        text = read_text(path, MAX_TABLE_BYTES)
    except ValueError as error:
        raise RunError(Finding(str(path), "", f"{error}; {START_ANEW}")) from None
    rows: list[tuple[int, FrontRow]] = []
    for line, record in list(_records(path, text)):  # all first: too many rows are refused before any is looked at
        try:
            rank, row = _row(record, problem)
            if rank != len(rows) + 1 if most_rank is None else rank > most_rank:
                raise ValueError(f"found rank {rank}, which cannot stand here")
        except InputError as error:
            raise RunError([Finding(str(path), f"line {line}", str(finding)) for finding in error.findings]) from None
        except ValueError as error:
            raise RunError(Finding(str(path), f"line {line}", f"cannot be read: {error}; {START_ANEW}")) from None
        rows.append((rank, row))
    return rows


def _records(path: Path, text: str) -> Iterator[tuple[int, dict[str, str]]]:
    """Yield the number of each line and its cells by their columns."""
    lines = csv.reader(io.StringIO(text, newline=""), strict=True)
    try:
        header = next(lines, [])
        missing = [name for name in COLUMNS if name not in header]
        if missing:
            raise RunError(Finding(str(path), "", f"has no column {', '.join(missing)}; {START_ANEW}"))
        if len(set(header)) < len(header):
            raise RunError(Finding(str(path), "", f"has two columns of one name; {START_ANEW}"))
        for count, cells in enumerate(lines):
            if count == MAX_ROWS:
                raise RunError(Finding(str(path), "", f"has more than {MAX_ROWS} stacks; search with closer limits"))
            if len(cells) != len(header):
                message = f"found {len(cells)} columns, the header has {len(header)}; {START_ANEW}"
                raise RunError(Finding(str(path), f"line {lines.line_num}", message))
            yield lines.line_num, dict(zip(header, cells, strict=True))
    except csv.Error as error:
        message = f"cannot be read: {error}; {START_ANEW}"
        raise RunError(Finding(str(path), f"line {lines.line_num}", message)) from None


def _row(record: Mapping[str, str], problem: Problem) -> tuple[int, FrontRow]:
    row = FrontRow(
        stack=parse_stack(record["stack"], problem.materials),
        mass_kg_per_m2=_number(record, "mass_kg_per_m2"),
        cost_per_m2=_number(record, "cost_per_m2", may_be_empty=True),
        thickness_m=round(_number(record, "thickness_mm") * 1e-3, 12),
        margin_db=_number(record, "margin_db"),
        tightest_hz=_number(record, "tightest_hz"),
        requirement=record["requirement"],
        extra={name: _extra(record, name) for name in record if name not in COLUMNS},
    )
    _check_row(row, _whole(record, "sheets"), problem)
    return _whole(record, "rank"), row


def _check_row(row: FrontRow, sheets: int, problem: Problem) -> None:
    """Refuse a row whose numbers cannot be those of its stack in this problem."""
    spans = {requirement.name: requirement.mask.frequency_hz for requirement in problem.requirements}
    if row.requirement not in spans:
        raise ValueError(f"found requirement {show(row.requirement)}, which the problem does not have")
    low, high = spans[row.requirement][0], spans[row.requirement][-1]
    if not low * (1.0 - _SAME) <= row.tightest_hz <= high * (1.0 + _SAME):
        raise ValueError(f"found tightest_hz {row.tightest_hz:g}, which lies outside the mask")
    if sheets != row.sheets:
        raise ValueError(f"found {sheets} sheets, but the stack has {row.sheets}")
    mass, cost, thickness = totals(problem, row.stack)
    for name, found, own in (
        ("mass_kg_per_m2", row.mass_kg_per_m2, mass),
        ("cost_per_m2", row.cost_per_m2, cost),
        ("thickness_mm", row.thickness_m * 1e3, thickness * 1e3),
    ):
        if math.isnan(found) != math.isnan(own) or not (
            math.isnan(own) or math.isclose(found, own, rel_tol=_SAME, abs_tol=1e-9)
        ):
            raise ValueError(f"found {name} {found:g}, but the stack has {own:g}")


def _number(record: Mapping[str, str], name: str, may_be_empty: bool = False) -> float:
    text = record[name]
    if may_be_empty and not text:
        return math.nan
    try:
        number = float(text)
    except ValueError:
        number = math.nan
    if not math.isfinite(number):
        raise ValueError(f"found {show(text)} as {name}, which is no number")
    return number


def _whole(record: Mapping[str, str], name: str) -> int:
    number = _number(record, name)
    if number < 1.0 or not number.is_integer():
        raise ValueError(f"found {show(record[name])} as {name}, which is no whole number from 1")
    return int(number)


def _extra(record: Mapping[str, str], name: str) -> float | str:
    return _number(record, name, may_be_empty=True) if name in NUMBERS else as_text(record[name])


def _refuse_outside(path: Path, folder: Path) -> None:
    """Refuse a file of a run that is a link to somewhere else."""
    if not is_inside(path, [folder]):
        raise RunError(Finding(str(path), "", f"leads out of the run's folder; {START_ANEW}"))
