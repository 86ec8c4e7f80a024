"""Runs: a folder for every search, with its inputs, checkpoints, results and a record of how they came about."""

from __future__ import annotations

import hashlib
import json
import os
import platform
import shutil
import signal
import sys
import threading
import time
from collections.abc import Iterator
from contextlib import contextmanager
from dataclasses import dataclass, replace
from importlib.metadata import version
from pathlib import Path
from typing import Any

from stackopt.checkpoint import read_checkpoint, write_checkpoint
from stackopt.errors import Finding, InputError, InterruptedRunError, RunError
from stackopt.front import Front
from stackopt.outputs.files import write_whole
from stackopt.outputs.plots import write_curves, write_trade_off
from stackopt.outputs.tables import write_alternatives, write_equals, write_front
from stackopt.phases import Search
from stackopt.problem import Problem
from stackopt.readers import read_problem
from stackopt.status import Status, Watcher

CHECKPOINT_EVERY_S = 30.0
_RECORD = "run.json"


@dataclass(frozen=True)
class RunOptions:
    """How to run a search.

    Parameters
    ----------
    hours : float, optional
        Longest time; without it, until done.
    workers : int, optional
        Threads for the proof; every core when left out.
    seed : int, optional
        Instead of the problem's own.
    out : Path, optional
        New folder for the run; ``results/<problem>-<n>`` when left out.
    resume : Path, optional
        Run to go on with.
    allow_outside : bool
        Whether tables may be read from outside the problem's and the set's folders.
    within : float, optional
        List the alternatives within this factor (less one) of the front.
    """

    hours: float | None = None
    workers: int | None = None
    seed: int | None = None
    out: Path | None = None
    resume: Path | None = None
    allow_outside: bool = False
    within: float | None = None


@dataclass(frozen=True)
class RunResult:
    """A front and the folder that holds it."""

    front: Front
    folder: Path


def search(
    problem: Problem,
    seed: int | None = None,
    workers: int = 1,
    hours: float | None = None,
    watcher: Watcher = lambda _: None,
) -> Front:
    """Search a problem without a run folder.

    Parameters
    ----------
    problem : Problem
    seed : int, optional
        Instead of the problem's own.
    workers : int
        Threads for the proof.
    hours : float, optional
        Longest time.
    watcher : callable
        Receives a `stackopt.status.Status` now and then.

    Returns
    -------
    Front
        Complete where the problem's gauges are discrete and time allowed.
    """
    return Search(problem, seed, workers).run(watcher, _deadline(hours))


def prove(problem: Problem, front: Front | None = None, workers: int = 1, hours: float | None = None) -> Front:
    """Prove a problem's front; a front known already only makes it quicker.

    Raises
    ------
    InputError
        When an objective or a thickness range cannot be proved.
    """
    task = Search(problem, workers=workers)
    if task.obstacle is not None:
        raise InputError(f"this front cannot be proved: {task.obstacle}")
    task.start_from([row.stack for row in front.rows] if front else [])
    return task.run(deadline=_deadline(hours))


def search_run(problem_path: Path | None, options: RunOptions, watcher: Watcher) -> RunResult:
    """Search a problem file, or go on with ``options.resume``, in a run folder.

    Raises
    ------
    InputError
        When a file is wrong, or the run cannot be resumed.
    InterruptedRunError
        When the user stopped it; a checkpoint is written.
    """
    if options.resume is not None:
        return _resume(options.resume, options, watcher, proof_only=False)
    assert problem_path is not None
    problem = read_problem(problem_path, allow_outside=options.allow_outside)
    folder = _new_folder(problem, options.out)
    _copy_inputs(problem, folder)
    watcher(Status("compiling"))
    task = Search(problem, options.seed, _workers(options))
    return _Run(folder, problem, task, watcher).go(options)


def prove_run(folder: Path, options: RunOptions, watcher: Watcher) -> RunResult:
    """Go on with the proof of a run's front.

    Raises
    ------
    InputError
        When the run cannot be read, or its front cannot be proved.
    """
    return _resume(folder, options, watcher, proof_only=True)


def _resume(folder: Path, options: RunOptions, watcher: Watcher, proof_only: bool) -> RunResult:
    record = read_record(folder)
    problem = read_problem(folder / record["problem"], allow_outside=True)
    if input_hash(problem) != record["input_sha256"]:
        raise RunError(Finding(str(folder), "inputs", "were changed since the run began; start a new search"))
    if record["stackopt"] != version("stackopt"):
        raise RunError(
            Finding(
                str(folder),
                _RECORD,
                f"was written by stackopt {record['stackopt']}, this is {version('stackopt')}; start a new search",
            )
        )
    arrays, text, warnings = read_checkpoint(folder)
    for warning in warnings:
        print(f"warning: {warning}", file=sys.stderr)  # noqa: T201 - the run has no other way to say it
    watcher(Status("compiling"))
    task = Search(problem, record["seed"], _workers(options))
    if proof_only and task.obstacle is not None:
        raise InputError(f"this front cannot be proved: {task.obstacle}")
    task.restore(arrays, text)
    task.exploring = task.exploring and not proof_only
    return _Run(folder, problem, task, watcher).go(options)


class _Run:
    """One process at work in a run folder."""

    def __init__(self, folder: Path, problem: Problem, task: Search, watcher: Watcher) -> None:
        self.folder, self.problem, self.task, self.watcher = folder, problem, task, watcher
        self.saved_at = -float("inf")
        self.started = time.monotonic()

    def go(self, options: RunOptions) -> RunResult:
        self._write_record(None)
        self._save()
        with _signals() as stopped:

            def watch(status: Status) -> None:
                self.watcher(status)
                if stopped.is_set():
                    raise _Stop

            try:
                deadline = _deadline(options.hours)
                front = self.task.run(watch, deadline, self._save_now_and_then)
                if options.within is not None:
                    front = self.task.alternatives(front, options.within, watch, deadline)
            except _Stop:
                self._save()
                raise InterruptedRunError(
                    f"Stopped; a checkpoint is written. Go on with: stackopt search --resume {self.folder}"
                ) from None
            self._save()
        self.watcher(Status("writing", front_size=len(front)))
        if self.task.prover is not None and not self.task.prover.complete:
            front = replace(front, statement=f"{front.statement} Go on with: stackopt prove {self.folder}")
        self._write_results(front)
        return RunResult(front, self.folder)

    def _save_now_and_then(self) -> None:
        if time.monotonic() - self.saved_at >= CHECKPOINT_EVERY_S:
            self._save()

    def _save(self) -> None:
        arrays, text = self.task.state()
        write_checkpoint(self.folder, arrays, text)
        self.saved_at = time.monotonic()

    def _write_results(self, front: Front) -> None:
        write_front(front, self.folder / "front.csv")
        write_equals(front, self.folder / "front_equals.csv")
        if front.alternatives is not None:
            write_alternatives(front, self.folder / "alternatives.csv")
        if len(front):
            write_trade_off(front, self.folder / "trade_off.png")
            write_curves(front, self.folder / "curves.png")
        self._write_record(front)
        from stackopt.outputs.page import write_page  # a second to load, needed only here

        write_page(front, self.folder / "trade_off.html", self.folder.resolve().name)

    def _write_record(self, front: Front | None) -> None:
        task = self.task
        packages = ("numpy", "scipy", "numba", "pymoo", "pandas")
        record: dict[str, Any] = {
            "stackopt": version("stackopt"),
            "problem": str(_input_path(self.problem, Path(self.problem.files[0]))),
            "title": self.problem.title,
            "input_sha256": input_hash(self.problem),
            "seed": task.seed,
            "versions": {"python": platform.python_version()} | {name: version(name) for name in packages},
            "machine": {"processor": platform.machine(), "cores": os.cpu_count(), "workers": task.workers},
            "objectives": list(self.problem.search.objectives),
            "assume": self.problem.search.assume,
            "driven": [requirement.name for requirement in self.problem.requirements if requirement.drive],
            "finished": front is not None,
            "complete": front is not None and front.complete,
        }
        if front is not None:
            record |= {
                "statement": front.statement,
                "front": len(front),
                "equal_stacks": len(front.equals),
                "rounds": task.round + 1,
                "added_frequencies_hz": task.extra_hz,
                "quadrature": [
                    {"requirement": requirement.name, "lines": chosen.lines, "error_db": chosen.error_db}
                    for requirement, chosen in zip(
                        self.problem.requirements, task.compiled.rows.quadrature, strict=True
                    )
                ],
                "seconds": {name: round(value, 3) for name, value in task.seconds.items()},
                "explored": {"stacks_judged": task.explorer.computed, "epochs": task.explorer.epoch},
                "proof": task.proof_record(),
            }
        text = json.dumps(record, indent=2, ensure_ascii=False) + "\n"
        write_whole(self.folder / _RECORD, lambda part: _write_text(part, text))


class _Stop(Exception):  # noqa: N818 - a signal, not an error
    """Raised out of a watcher to end the phases at a safe place."""


@contextmanager
def _signals() -> Iterator[threading.Event]:
    """Turn the first SIGINT or SIGTERM into an event; a second one stops at once."""
    stopped = threading.Event()
    if threading.current_thread() is not threading.main_thread():
        yield stopped
        return

    def note(number: int, frame: object) -> None:
        if stopped.is_set():
            raise KeyboardInterrupt
        stopped.set()

    before = {number: signal.signal(number, note) for number in (signal.SIGINT, signal.SIGTERM)}
    try:
        yield stopped
    finally:
        for number, handler in before.items():
            signal.signal(number, handler)


def read_record(folder: Path) -> dict[str, Any]:
    """Read a run's run.json.

    Raises
    ------
    RunError
        When the folder is no run, or its record cannot be read.
    """
    path = folder / _RECORD
    try:
        record = json.loads(path.read_text(encoding="utf-8"))
    except FileNotFoundError:
        raise RunError(Finding(str(folder), "", f"is not a run folder: it has no {_RECORD}")) from None
    except (OSError, ValueError) as error:
        raise RunError(Finding(str(path), "", f"cannot be read: {error}; start a new search")) from None
    needed = {"stackopt", "problem", "input_sha256", "seed"}
    if not isinstance(record, dict) or not needed <= record.keys():
        raise RunError(Finding(str(path), "", "is not the record of a run; start a new search"))
    return record


def input_hash(problem: Problem) -> str:
    """SHA-256 over the content of every file that a problem was read from, in the order of their names."""
    digest = hashlib.sha256()
    for path in sorted(problem.files, key=lambda name: _input_path(problem, Path(name)).as_posix()):
        digest.update(Path(path).name.encode() + b"\0" + Path(path).read_bytes() + b"\0")
    return digest.hexdigest()


def _new_folder(problem: Problem, out: Path | None) -> Path:
    try:
        if out is not None:
            out.mkdir(parents=True, exist_ok=True)
            return out
        results = Path("results")
        results.mkdir(exist_ok=True)
        for number in range(1, 1_000_000):
            folder = results / f"{problem.name}-{number}"
            try:
                folder.mkdir()
            except FileExistsError:
                continue
            return folder
    except OSError as error:
        raise RunError(
            Finding(str(out or "results"), "", f"cannot be made: {error.strerror}; name another folder with --out")
        ) from None
    raise RunError(f"results holds a million runs of {problem.name}; clear it, or name a folder with --out")


def _copy_inputs(problem: Problem, folder: Path) -> None:
    """Copy the input files, keeping where they lie relative to one another: the copies read like the originals."""
    try:
        for name in problem.files:
            target = folder / _input_path(problem, Path(name))
            target.parent.mkdir(parents=True, exist_ok=True)
            shutil.copyfile(name, target)
    except OSError as error:
        raise RunError(Finding(str(folder), "inputs", f"cannot be copied: {error.strerror}")) from None


def _input_path(problem: Problem, path: Path) -> Path:
    base = Path(os.path.commonpath([Path(name).parent for name in problem.files]))
    return Path("inputs") / path.relative_to(base)


def _write_text(path: Path, text: str) -> None:
    path.write_text(text, encoding="utf-8")


def _workers(options: RunOptions) -> int:
    return options.workers or os.cpu_count() or 1


def _deadline(hours: float | None) -> float:
    return float("inf") if hours is None else time.monotonic() + 3600.0 * hours
