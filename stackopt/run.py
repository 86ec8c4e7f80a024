"""Runs: a folder for every search, with its inputs, checkpoints, results and a record of how they came about."""

from __future__ import annotations

import contextlib
import json
import os
import shlex
import sys
import time
from collections.abc import Callable, Iterator
from contextlib import contextmanager
from dataclasses import dataclass, replace
from importlib.metadata import version
from pathlib import Path
from typing import Any

from stackopt.checkpoint import read_checkpoint, write_checkpoint
from stackopt.errors import Finding, InputError, InterruptedRunError, RunError, WorkersLostError
from stackopt.front import Front
from stackopt.lock import hold
from stackopt.outputs.files import write_whole
from stackopt.outputs.plots import write_curves, write_trade_off
from stackopt.outputs.tables import write_alternatives, write_equals, write_front
from stackopt.phases import Search
from stackopt.problem import Problem
from stackopt.readers import read_problem
from stackopt.run_folder import (
    INPUTS,
    clean,
    copy_inputs,
    input_hash,
    make_folder,
    out_of_memory,
    refuse_used,
    resume_command,
)
from stackopt.run_record import make_record, result_record
from stackopt.saved import why_not_usable
from stackopt.status import Status, Watcher
from stackopt.stopping import StopAsked, reason_of, signals
from stackopt.untrusted import as_text
from stackopt.watching import FAILED, RECORD, STOPPED, StatusFile, read_record
from stackopt.workers import Processes, Serial, Workers

CHECKPOINT_EVERY_S = 30.0


@dataclass(frozen=True)
class RunOptions:
    """How to run a search.

    Parameters
    ----------
    hours : float, optional
        Longest time; without it, until done.
    workers : int, optional
        Processes that explore and prove; one for every core when left out.
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
    cluster : str, optional
        Address of a scheduler whose workers explore and prove, instead of processes here.
    """

    hours: float | None = None
    workers: int | None = None
    seed: int | None = None
    out: Path | None = None
    resume: Path | None = None
    allow_outside: bool = False
    within: float | None = None
    cluster: str | None = None


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
    cluster: str | None = None,
) -> Front:
    """Search a problem without a run folder.

    Parameters
    ----------
    problem : Problem
    seed : int, optional
        Instead of the problem's own.
    workers : int
        Processes that explore and prove; 1 is this process itself. A script that asks for more must be importable
        without side effects (``if __name__ == "__main__":``).
    hours : float, optional
        Longest time.
    watcher : callable
        Receives a `stackopt.status.Status` now and then.
    cluster : str, optional
        Address of a Dask scheduler whose workers explore and prove, instead of processes here.

    Returns
    -------
    Front
        Complete where the problem's gauges are discrete and time allowed.
    """
    deadline = _deadline(hours)
    with _open_workers(workers, cluster) as crew:
        return Search(problem, seed, crew).run(watcher, deadline)


def prove(problem: Problem, front: Front | None = None, workers: int = 1, hours: float | None = None) -> Front:
    """Prove a problem's front; a front known already only makes it quicker.

    Raises
    ------
    InputError
        When an objective or a thickness range cannot be proved.
    """
    deadline = _deadline(hours)
    with _open_workers(workers) as crew:
        task = Search(problem, workers=crew)
        if task.obstacle is not None:
            raise InputError(f"this front cannot be proved: {task.obstacle}")
        task.start_from([row.stack for row in front.rows] if front else [])
        return task.run(deadline=deadline)


def search_run(problem_path: Path | None, options: RunOptions, watcher: Watcher) -> RunResult:
    """Search a problem file, or go on with ``options.resume``, in a run folder.

    Raises
    ------
    InputError
        When a file is wrong, or the run cannot be resumed.
    InterruptedRunError
        When the user stopped it; a checkpoint is written.
    """
    deadline = _deadline(options.hours)
    if options.resume is not None:
        return _resume(options.resume, options, watcher, deadline, proof_only=False)
    assert problem_path is not None
    problem = read_problem(problem_path, allow_outside=options.allow_outside)
    with _open_workers(_workers(options), options.cluster) as crew:  # first: without them no folder is made
        folder = make_folder(problem, options.out)
        with _at_work(folder):
            refuse_used(folder)
            problem = _read_copies(problem, folder)
            watcher(Status("compiling"))
            task = Search(problem, options.seed, crew)
            return _Run(folder, problem, task, watcher).go(options, deadline)


def prove_run(folder: Path, options: RunOptions, watcher: Watcher) -> RunResult:
    """Go on with the proof of a run's front.

    Raises
    ------
    InputError
        When the run cannot be read, or its front cannot be proved.
    """
    return _resume(folder, options, watcher, _deadline(options.hours), proof_only=True)


def _resume(folder: Path, options: RunOptions, watcher: Watcher, deadline: float, proof_only: bool) -> RunResult:
    read_record(folder)  # a folder that is no run gets no lock
    with _at_work(folder):
        record = read_record(folder)
        problem = _unchanged_problem(folder, record)
        arrays, text, warnings = read_checkpoint(folder)
        for warning in warnings:
            _say(f"warning: {warning}")
        _refuse_unusable(folder, record, problem, arrays, text)
        watcher(Status("compiling"))
        with _open_workers(_workers(options), options.cluster) as crew:
            task = Search(problem, record["seed"], crew)
            if proof_only and task.obstacle is not None:
                raise InputError(f"this front cannot be proved: {task.obstacle}")
            _restore(folder, task, arrays, text)
            task.exploring = task.exploring and not proof_only
            finished = record.get("finished") is True
            return _Run(folder, problem, task, watcher, was_finished=finished).go(options, deadline)


def _open_workers(count: int, cluster: str | None = None) -> Workers:
    """Return those who explore and prove: this process, others beside it, or a cluster."""
    if cluster is not None:
        from stackopt.cluster import Cluster

        return Cluster(cluster)
    return Serial() if count == 1 else Processes(count, ("stackopt.explore", "stackopt.shares", "stackopt.descent"))


@contextmanager
def _at_work(folder: Path) -> Iterator[None]:
    """Hold the run folder, without what a kill left in it; memory that runs out becomes a message."""
    with hold(folder, _say):
        clean(folder)
        try:
            yield
        except MemoryError as error:
            raise RunError(out_of_memory(folder, error)) from None


def _read_copies(problem: Problem, folder: Path) -> Problem:
    """Copy the inputs and read the copies: what is searched is what the run keeps, whatever becomes of the originals.

    Raises
    ------
    RunError
        When a file cannot be copied, or the copies do not read like the originals.
    """
    path = copy_inputs(problem, folder)
    try:
        return read_problem(path, fence=folder / INPUTS)
    except InputError as error:
        why = "the copies of the inputs do not read like the originals; put the files into one folder"
        raise RunError([*error.findings, Finding(str(folder), "", why)]) from None


def _unchanged_problem(folder: Path, record: dict[str, Any]) -> Problem:
    problem = read_problem(folder / record["problem"], fence=folder / INPUTS)
    if input_hash(problem) != record["input_sha256"]:
        raise RunError(Finding(str(folder), "inputs", "were changed since the run began; start a new search"))
    if record["stackopt"] != version("stackopt"):
        found = as_text(record["stackopt"], 40)
        message = f"was written by stackopt {found}, this is {version('stackopt')}; start a new search"
        raise RunError(Finding(str(folder), RECORD, message))
    return problem


def _refuse_unusable(
    folder: Path, record: dict[str, Any], problem: Problem, arrays: dict[str, Any], text: dict[str, Any]
) -> None:
    """Refuse a checkpoint that is whole, but not one of this run or not one that this program writes."""
    if text.get("input_sha256") != record["input_sha256"]:
        raise RunError(Finding(str(folder), "", "its checkpoint belongs to other inputs; start a new search"))
    wrong = why_not_usable(arrays, text, problem)
    if wrong is not None:
        raise RunError(Finding(str(folder), "", f"its checkpoint cannot be used: {wrong}; start a new search"))


def _restore(folder: Path, task: Search, arrays: dict[str, Any], text: dict[str, Any]) -> None:
    """Restore a search; what still does not fit after `stackopt.saved` has looked is refused too."""
    try:
        task.restore(arrays, text)
    except (LookupError, TypeError, ValueError, ArithmeticError, AttributeError) as error:
        reason = f"its checkpoint cannot be used ({type(error).__name__}: {error}); start a new search"
        raise RunError(Finding(str(folder), "", reason)) from error


def _say(text: str) -> None:
    """Write a note or a warning; that nobody can read it stops nothing."""
    with contextlib.suppress(OSError, ValueError):
        print(text, file=sys.stderr, flush=True)  # noqa: T201 - the run has no other way to say it


class _Run:
    """One process at work in a run folder that it holds."""

    def __init__(
        self, folder: Path, problem: Problem, task: Search, watcher: Watcher, was_finished: bool = False
    ) -> None:
        self.folder, self.problem, self.task, self.watcher = folder, problem, task, watcher
        self.was_finished = was_finished
        self.inputs_sha256 = input_hash(problem)
        self.status_file = StatusFile(folder)
        self.saved_at = -float("inf")
        self.shown_values: Any = None  # the archive's when front.csv was last written

    def go(self, options: RunOptions, deadline: float) -> RunResult:
        try:
            result = self._go(options, deadline)
        except InterruptedRunError:
            self.status_file.close(STOPPED)
            raise
        except BaseException as error:
            self.status_file.close(FAILED, reason_of(error))
            raise
        self.status_file.remove()
        return result

    def _go(self, options: RunOptions, deadline: float) -> RunResult:
        self._save()  # before the record: what has one can be resumed
        if not self.was_finished:  # the front of a finished run stays good until there is a better one
            self._write_record(None)
        with signals() as stopped:

            def watch(status: Status) -> None:
                self._tell(status)
                if stopped.is_set():
                    raise StopAsked

            try:
                front = self.task.run(watch, deadline, self._save_now_and_then)
                if options.within is not None:
                    front = self.task.alternatives(front, options.within, watch, deadline)
            except StopAsked:
                self._save_with_front()
                raise InterruptedRunError(f"Stopped; {self._saved_words()}") from None
            except WorkersLostError as error:
                self._save_with_front()
                raise WorkersLostError(f"{error}; {self._saved_words()}") from None
            self._save()
        self._tell(Status("writing", front_size=len(front)))
        if self.task.prover is not None and not self.task.prover.complete:
            more = f"Go on with: stackopt prove {shlex.quote(str(self.folder))}"
            front = replace(front, statement=f"{front.statement} {more}")
        self._write(lambda: self._write_results(front))
        return RunResult(front, self.folder)

    def _write(self, write: Callable[[], None]) -> None:
        """Write results; where they cannot be written, say that the search itself is saved."""
        try:
            write()
        except InputError as error:
            raise RunError([*error.findings, self._what_is_left()]) from None
        except OSError as error:
            reason = Finding(str(error.filename or self.folder), "", f"cannot be written: {error.strerror or error}")
            raise RunError([reason, self._what_is_left()]) from None

    def _what_is_left(self) -> Finding:
        if not self.folder.is_dir():
            return Finding(str(self.folder), "", "is gone: it was removed or renamed during the run; start again")
        message = f"the search itself is saved; write its results later with: {resume_command(self.folder)}"
        return Finding(str(self.folder), "", message)

    def _tell(self, status: Status) -> None:
        self.watcher(status)
        self.status_file(status)

    def _save_now_and_then(self) -> None:
        if time.monotonic() - self.saved_at >= CHECKPOINT_EVERY_S:
            self._save_with_front()

    def _save_with_front(self) -> None:
        """Save, and write the stacks found so far that hold: somebody may need one before the end."""
        self._save()
        values = self.task.archive.values
        if self.was_finished or values is self.shown_values:
            return
        front = self.task.front_so_far()
        if len(front):
            self._write(lambda: write_front(front, self.folder / "front.csv"))
        self.shown_values = values

    def _saved_words(self) -> str:
        return f"a checkpoint is written. Go on with: {resume_command(self.folder)}"

    def _save(self) -> None:
        arrays, text = self.task.state()
        try:
            write_checkpoint(self.folder, arrays, {**text, "input_sha256": self.inputs_sha256})
        except RunError as error:
            if not self.folder.is_dir():
                raise
            go_on = f"once it can be written again, go on with: {resume_command(self.folder)}"
            raise RunError([*error.findings, Finding(str(self.folder), "", go_on)]) from None
        self.saved_at = time.monotonic()

    def _write_results(self, front: Front) -> None:
        """Write the tables, then the record, which says that they belong together, then what is drawn from them."""
        self._write_record(None)
        table, alternatives = self.folder / "front.csv", self.folder / "alternatives.csv"
        before = table.read_bytes() if table.is_file() else None
        write_front(front, table)
        write_equals(front, self.folder / "front_equals.csv")
        if front.alternatives is not None:
            write_alternatives(front, alternatives)
        elif table.read_bytes() != before:  # they were those of another front
            alternatives.unlink(missing_ok=True)
        self._write_record(front)
        if len(front):
            write_trade_off(front, self.folder / "trade_off.png")
            write_curves(front, self.folder / "curves.png")
        from stackopt.outputs.page import write_page  # a second to load, needed only here

        write_page(front, self.folder / "trade_off.html", self.folder.resolve().name)

    def _write_record(self, front: Front | None) -> None:
        record = make_record(self.problem, self.task, self.inputs_sha256)
        if front is not None:
            record |= result_record(self.problem, self.task, front, self.task.margins_db)
        text = json.dumps(record, indent=2, ensure_ascii=False) + "\n"
        write_whole(self.folder / RECORD, lambda part: _write_text(part, text))


def _write_text(path: Path, text: str) -> None:
    path.write_text(text, encoding="utf-8")


def _workers(options: RunOptions) -> int:
    return options.workers or os.cpu_count() or 1


def _deadline(hours: float | None) -> float:
    """When to stop, on the clock that the search looks at.

    That clock is not the one on the wall: setting the time, or the change to summer time, changes nothing. On Linux
    and macOS it also stands still while the machine sleeps, so that a laptop whose lid was closed goes on when it
    wakes and works for as long as it was asked to, instead of ending at once with next to nothing done. On Windows it
    goes on during sleep.
    """
    return float("inf") if hours is None else time.monotonic() + 3600.0 * hours
