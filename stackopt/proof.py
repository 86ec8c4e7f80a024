"""Proving: an exact search of every stack that the rules allow, in shares that can be interrupted and continued.

Mass, cost, thickness and the number of sheets only grow when a sheet is added, so a prefix that a known feasible stack
does not exceed in any objective can be cut with everything below it. `stackopt.descent` does that, with further cuts
that are exact too; its docstring says why.

What is left to do is a list of *pending* prefixes, at first the empty one. A share (`stackopt.shares`) opens some of
them and hands back what it did not come to, so that shares are of much the same length whatever the tree looks like,
and any number of workers can take part. When nothing is pending, the archive is the complete front of the compiled
rows.
"""

from __future__ import annotations

import time
from collections.abc import Callable
from dataclasses import dataclass
from typing import Any

import numpy as np
from numpy.typing import NDArray

from stackopt import evaluate
from stackopt.archive import Archive
from stackopt.compiled import CompiledProblem
from stackopt.problem import PROVABLE_OBJECTIVES, Problem
from stackopt.shares import WORK, Outcome, Share, Tables, work_on
from stackopt.workers import EVERY_S, Serial, Workers

Integers = NDArray[np.int64]

_SOWN = 2
"""Prefixes up to this length are opened one by one, so that there is something to share."""
_AHEAD = 2
"""Shares in hand for each worker, so that none waits for the next."""
_PARTS = 8
"""A share takes one part of so many for each worker of what is pending."""
_MANY = 64
"""With so many workers more, shares grow by their length, as one process must take in all results."""


def why_not_provable(problem: Problem) -> str | None:
    """Say in one sentence why a problem's front cannot be proved, or return None where it can."""
    others = [name for name in problem.search.objectives if name not in PROVABLE_OBJECTIVES]
    if others:
        return (
            f"the objective {others[0]} does not only grow with every sheet, so the front can be explored, not proved"
        )
    if problem.continuous:
        names = ", ".join(problem.continuous)
        return f"{names}: a thickness_range allows endless thicknesses, so the front can be explored, not proved"
    return None


def count_stacks(sheets: int, max_sheets: int) -> int:
    """Number of stacks of one sheet up to the largest number, rules aside.

    Examples
    --------
    >>> count_stacks(45, 6)
    8492487570
    """
    return sum(sheets**n for n in range(1, max_sheets + 1))


@dataclass
class Tally:
    """What a proof did: prefixes opened, stacks judged, seconds of work."""

    opened: int = 0
    judged: int = 0
    seconds: float = 0.0


class Pending:
    """Prefixes that wait to be opened: a stack, the last one first.

    Parameters
    ----------
    sheets, positions : int
        Number of sheets to choose from, and of positions in a stack.
    """

    def __init__(self, sheets: int, positions: int) -> None:
        self._sheets, self._positions = max(sheets, 1), positions
        self._parts: list[Integers] = []
        self._count = 0
        self.share = 0.0
        """Share of all stacks that is below the prefixes, 0 to 1."""
        self.put(np.zeros((1, positions), dtype=np.int64))

    def __len__(self) -> int:
        return self._count

    @property
    def prefixes(self) -> Integers:
        """All of them, shape (prefix, position)."""
        return np.asarray(np.concatenate([np.zeros((0, self._positions), dtype=np.int64), *self._parts]))

    def put(self, prefixes: Integers) -> None:
        """Add prefixes on top."""
        if len(prefixes):
            self._parts.append(prefixes)
            self._account(prefixes, 1)

    def take(self, most: int) -> Integers:
        """Remove up to so many prefixes from the top."""
        top = self._parts.pop()
        if len(top) > most:
            self._parts.append(top[:-most])
            top = top[-most:]
        self._account(top, -1)
        return top

    def take_shorter(self, length: int) -> Integers:
        """Remove the prefixes of fewer sheets."""
        prefixes = self.prefixes
        short = np.count_nonzero(prefixes, axis=1) < length
        self._parts, self._count, self.share = [], 0, 0.0
        self.put(prefixes[~short])
        return np.asarray(prefixes[short])

    def _account(self, prefixes: Integers, sign: int) -> None:
        self._count += sign * len(prefixes)
        lengths = np.count_nonzero(prefixes, axis=1)
        self.share += sign * float(np.sum(float(self._sheets) ** -lengths))
        if not self._count:
            self.share = 0.0


class Prover:
    """The proof of one compiled problem.

    Parameters
    ----------
    compiled : CompiledProblem
        With a provable problem; see `why_not_provable`.
    archive : Archive
        Feasible stacks known so far: an accelerator, and what the proof completes, in place. Codes have one number per
        position.
    tally : Tally, optional
        Added to.
    """

    collect = False

    def __init__(self, compiled: CompiledProblem, archive: Archive, tally: Tally | None = None) -> None:
        self.compiled, self.archive = compiled, archive
        self.tally = Tally() if tally is None else tally
        self.tables = Tables(compiled)
        self.pending = Pending(len(compiled.sheets), compiled.rules.max_sheets)
        self._at_work: dict[int, Integers] = {}  # prefixes of the shares that workers have

    @property
    def complete(self) -> bool:
        """Whether nothing is pending."""
        return len(self.pending) == 0

    @property
    def covered(self) -> float:
        """Share of the stacks that is settled, 0 to 1."""
        return 1.0 - self.pending.share

    @property
    def unopened(self) -> Integers:
        """Codes of all prefixes still to be opened, those that workers have included, shape (prefix, position)."""
        return np.asarray(np.concatenate([self.pending.prefixes, *self._at_work.values()]))

    def go_on_from(self, prefixes: Integers) -> None:
        """Take these prefixes as all that are still to be opened; see `unopened`."""
        self.pending.take_shorter(self.compiled.rules.max_sheets + 1)
        self.pending.put(prefixes)

    def run(
        self,
        workers: Workers | None = None,
        deadline: float = np.inf,
        watch: Callable[[], None] = lambda: None,
    ) -> bool:
        """Go on until nothing is pending or the deadline (`time.monotonic`) has passed; return whether it is complete.

        ``watch`` is called from this thread about every `EVERY_S` seconds. Whatever it raises ends the proof cleanly:
        what is done stays done.
        """
        workers = Serial() if workers is None else workers
        started = time.monotonic()
        try:
            self._sow(deadline, watch)
            self._run_shares(workers, deadline, watch)
        finally:
            workers.abandon()
            for prefixes in self._at_work.values():
                self.pending.put(prefixes)
            self._at_work.clear()
            self.tally.seconds += time.monotonic() - started
        return self.complete

    def _sow(self, deadline: float, watch: Callable[[], None]) -> None:
        """Open the short prefixes here, one at a time; this also compiles the descent before workers need it."""
        for length in range(1, _SOWN + 1):
            while time.monotonic() < deadline and len(short := self.pending.take_shorter(length)):
                self.pending.put(short[1:])
                self._at_work[0] = short[:1]
                self._merge(0, work_on(self.tables, self._share(short[:1], 0)))
                watch()

    def _run_shares(self, workers: Workers, deadline: float, watch: Callable[[], None]) -> None:
        tables: Any = None
        ticket = 0
        while True:
            count = workers.count
            while len(self.pending) and len(self._at_work) < _AHEAD * count and time.monotonic() < deadline:
                tables = workers.publish(self.tables) if tables is None else tables
                prefixes = self.pending.take(max(1, len(self.pending) // (_PARTS * count)))
                self._at_work[ticket] = prefixes
                workers.submit(ticket, work_on, tables, self._share(prefixes, WORK * (1 + count // _MANY)))
                ticket += 1
            if not self._at_work:
                return
            for done, outcome in workers.finished(EVERY_S):
                self._merge(done, outcome)
            watch()

    def _share(self, prefixes: Integers, work: int) -> Share:
        return Share(prefixes, self.archive.values, self.collect, work)

    def _merge(self, ticket: int, outcome: Outcome) -> None:
        del self._at_work[ticket]
        self.pending.put(outcome.left)
        self.tally.opened += outcome.opened
        self.tally.judged += outcome.judged
        self._take(outcome.found)

    def _take(self, codes: Integers) -> None:
        self.archive.add(evaluate.monotone_values(self.compiled, codes), codes)


class Collector(Prover):
    """A search for every feasible stack that no front member beats by more than a factor in all objectives at once.

    Parameters
    ----------
    compiled : CompiledProblem
    values : int64, shape (row, objective)
        Objectives of the front.
    within : float
        The factor less one: 0.05 for 5 %.
    most : int
        Number of stacks after which it gives up; then ``overflowed`` is set.
    """

    collect = True

    def __init__(self, compiled: CompiledProblem, values: Integers, within: float, most: int = 200_000) -> None:
        # A stack is beaten where it is above a member's stretched objectives in all of them.
        stretched = Archive(values.shape[1], compiled.rules.max_sheets)
        bound = np.floor(values * (1.0 + within)).astype(np.int64) + 1
        stretched.add(bound, np.zeros((len(values), compiled.rules.max_sheets), dtype=np.int64))
        super().__init__(compiled, stretched)
        self.most = most
        self._parts: list[Integers] = [np.empty((0, compiled.rules.max_sheets), dtype=np.int64)]
        self._count = 0

    @property
    def overflowed(self) -> bool:
        """Whether it gave up."""
        return self._count > self.most

    @property
    def codes(self) -> Integers:
        """Codes of the stacks found, mirror images included, each once."""
        return np.unique(np.concatenate(self._parts), axis=0)

    def _take(self, codes: Integers) -> None:
        self._parts.append(codes)
        self._count += len(codes)
        if self.overflowed:
            self.pending.take_shorter(self.compiled.rules.max_sheets + 1)
