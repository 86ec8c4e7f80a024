"""Proving: an exact search of every stack that the rules allow, in shares that can be interrupted and continued.

Mass, cost, thickness and the number of sheets only grow when a sheet is added, so a prefix that a known feasible stack
does not exceed in any objective can be cut with everything below it. `stackopt.descent` does that, with further cuts
that are exact too; its docstring says why. The stacks fall into shares: the root (single sheets), one share per first
sheet (pairs), and one per pair (everything below it). When all shares are done, the archive is the complete front of
the compiled rows.
"""

from __future__ import annotations

import threading
import time
from collections.abc import Callable, Iterator
from concurrent.futures import FIRST_COMPLETED, Future, ThreadPoolExecutor, wait
from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from stackopt import evaluate
from stackopt.archive import Archive
from stackopt.blocks import CLOSING, LANES, SHEET
from stackopt.compiled import MARGIN_SLACK_DB, CompiledProblem
from stackopt.problem import PROVABLE_OBJECTIVES, Problem

Real = NDArray[np.float64]
Integers = NDArray[np.int64]
Booleans = NDArray[np.bool_]

ROOM = 1 << 62
_SUMS = {"mass": 0, "cost": 1, "thickness": 2}


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
    8491781250
    """
    return sum(sheets**n for n in range(1, max_sheets + 1))


@dataclass
class Tally:
    """What a proof did: prefixes opened, stacks judged, seconds of work."""

    opened: int = 0
    judged: int = 0
    seconds: float = 0.0


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

    def __init__(self, compiled: CompiledProblem, archive: Archive, tally: Tally | None = None) -> None:
        self.compiled, self.archive = compiled, archive
        self.tally = Tally() if tally is None else tally
        self.tables = _Tables(compiled)
        self.shares = list(_shares(len(compiled.sheets), compiled.rules.max_sheets))
        self.done = np.zeros(len(self.shares), dtype=bool)

    @property
    def complete(self) -> bool:
        """Whether every share is done."""
        return bool(np.all(self.done))

    @property
    def covered(self) -> float:
        """Share of the stacks that is settled, 0 to 1."""
        return float(np.mean(self.done))

    def run(
        self, workers: int = 1, deadline: float = np.inf, watch: Callable[[], None] = lambda: None, every_s: float = 0.2
    ) -> bool:
        """Go on until everything is done or the deadline (`time.monotonic`) has passed; return whether it is complete.

        ``watch`` is called from this thread about every ``every_s`` seconds. Whatever it raises ends the proof cleanly:
        what is done stays done.
        """
        started = time.monotonic()
        try:
            for depth in (0, 1, 2):
                waiting = [n for n, prefix in enumerate(self.shares) if len(prefix) == depth and not self.done[n]]
                self._run_shares(waiting, workers, deadline, watch, every_s)
        finally:
            self.tally.seconds += time.monotonic() - started
        return self.complete

    def _run_shares(
        self,
        waiting: list[int],
        workers: int,
        deadline: float,
        watch: Callable[[], None],
        every_s: float,
    ) -> None:
        stop = np.zeros(1, dtype=np.uint8)
        running: dict[Future[_Outcome], int] = {}
        queue = iter(waiting)
        with ThreadPoolExecutor(workers) as pool:
            try:
                while True:
                    while len(running) < 2 * workers and time.monotonic() < deadline:
                        number = next(queue, None)
                        if number is None:
                            break
                        if self._is_cut(self.shares[number]):
                            self.done[number] = True
                        else:
                            running[pool.submit(self._descend, number, stop)] = number
                    if not running:
                        return
                    if time.monotonic() >= deadline:
                        stop[0] = 1
                    finished, _ = wait(running, timeout=every_s, return_when=FIRST_COMPLETED)
                    for future in finished:
                        self._merge(running.pop(future), future.result())
                    watch()
            finally:
                stop[0] = 1

    def _is_cut(self, prefix: tuple[int, ...]) -> bool:
        """Whether the rules or a known stack settle everything below a prefix."""
        if not prefix:
            return False
        rules = self.compiled.rules
        if not rules.first[prefix[0]] or (len(prefix) == 2 and not rules.neighbours[prefix]):
            return True
        codes = np.zeros((1, rules.max_sheets), dtype=np.int64)
        codes[0, : len(prefix)] = np.array(prefix) + 1
        totals = evaluate.sums(self.compiled, codes)
        values = evaluate.objective_values(self.compiled, codes, totals, np.zeros(1))
        return bool(np.any(totals > rules.limits) or self.archive.covers(values)[0])

    def _descend(self, number: int, stop: NDArray[np.uint8]) -> _Outcome:
        prefix = np.array(self.shares[number], dtype=np.int64)
        cover, step = self.tables.cover(self.archive.values)
        counters = np.zeros(2, dtype=np.int64)
        found, finished = self.tables.descend(prefix, len(prefix) == 2, stop, cover, step, False, ROOM, counters)
        return _Outcome(found, finished, counters)

    def _merge(self, number: int, outcome: _Outcome) -> None:
        if len(outcome.found):
            totals = evaluate.sums(self.compiled, outcome.found)
            values = evaluate.objective_values(self.compiled, outcome.found, totals, np.zeros(len(outcome.found)))
            self.archive.add(values, outcome.found)
        self.tally.opened += int(outcome.counters[0])
        self.tally.judged += int(outcome.counters[1])
        self.done[number] = outcome.finished


@dataclass(frozen=True)
class _Outcome:
    found: Integers
    finished: bool
    counters: Integers


def _shares(sheets: int, max_sheets: int) -> Iterator[tuple[int, ...]]:
    yield ()
    if max_sheets > 1:
        yield from ((s,) for s in range(sheets))
    if max_sheets > 2:
        yield from ((s, t) for s in range(sheets) for t in range(sheets))


class _Tables:
    """Read-only tables of the descent, one row order per thread, and the covers it starts from."""

    def __init__(self, compiled: CompiledProblem) -> None:
        self.compiled = compiled
        problem, rows, rules = compiled.problem, compiled.rows, compiled.rules
        self.closing_first = _closing(compiled, compiled.tables.first)
        shared = compiled.tables.following is compiled.tables.first
        self.closing_following = self.closing_first if shared else _closing(compiled, compiled.tables.following)
        axes = [_SUMS[name] for name in problem.search.objectives if name in _SUMS]
        self.axes = np.array((axes + [-1, -1, -1])[:3], dtype=np.int64)
        self.levels = rules.max_sheets + 1 if "sheets" in problem.search.objectives else 1
        self.mirror = mirror_holds(compiled)
        # A Chebyshev sum is nowhere above the sum of its coefficients' sizes.
        constant, others = rows.open_coefficients[:, 0], rows.open_coefficients[:, 1:]
        self.highest = constant + np.abs(others).sum(axis=1) + 1e-6
        self.orders = threading.local()

    def cover(self, values: Integers) -> tuple[Integers, Integers]:
        """Cover of objective vectors, shape (member, objective), and its steps."""
        from stackopt import descent

        names = self.compiled.problem.search.objectives
        axis = [[n for n, name in enumerate(names) if _SUMS.get(name) == wanted] for wanted in self.axes.tolist()]
        columns = [values[:, at[0]] if at else np.zeros(len(values), dtype=np.int64) for at in axis]
        sheets = values[:, names.index("sheets")] if "sheets" in names else np.zeros(len(values), dtype=np.int64)
        largest = self.compiled.rules.max_sheets * self.compiled.sums.following.max(axis=0)
        step = np.ones(2, dtype=np.int64)
        for n in (0, 1):
            top = int(columns[n].max()) if len(values) else int(largest[self.axes[n]] if self.axes[n] >= 0 else 0)
            step[n] = max(1, -(-top // (descent.CELLS - 1)))
        cover = np.full((self.levels, descent.CELLS, descent.CELLS), descent.UNCOVERED, dtype=np.int64)
        for member in zip(*columns, sheets, strict=True):
            descent.add_to_cover(cover, step, *member)
        return cover, step

    def descend(
        self,
        prefix: Integers,
        recurse: bool,
        stop: NDArray[np.uint8],
        cover: Integers,
        step: Integers,
        keep_all: bool,
        room: int,
        counters: Integers,
    ) -> tuple[Integers, bool]:
        """Run the compiled descent below a prefix; see `stackopt.descent.descend`."""
        from stackopt import descent

        compiled = self.compiled
        rows, rules, tables, sums = compiled.rows, compiled.rules, compiled.tables, compiled.sums
        if not hasattr(self.orders, "rows"):
            self.orders.rows = np.arange(len(rows.required_db))
        found, finished = descent.descend(
            prefix, recurse, stop,
            sums.first, sums.following, rules.limits, rules.first, rules.last, rules.neighbours,
            rules.max_sheets, self.axes, self.mirror,
            tables.first, tables.following, tables.first_scale, tables.following_scale,
            self.closing_first, self.closing_following,
            rows.row_block, rows.start, rows.fixed_scale, rows.open_coefficients,
            self.highest, rows.reach_m, rows.thickest_m, rows.required_db - MARGIN_SLACK_DB,
            cover, step, keep_all, room, self.orders.rows, counters,
        )  # fmt: skip
        return found, bool(finished)


def mirror_holds(compiled: CompiledProblem) -> bool:
    """Whether every stack's mirror image is as allowed and attenuates the same.

    Both half-spaces of every field are alike, so T is the same from either side (A + B/Z0 + C Z0 + D does not change
    when A and D trade places). Fixed layers break that, and rules on faces or neighbours may.
    """
    rules, problem = compiled.rules, compiled.problem
    bare = not problem.rules.source_side and not problem.rules.victim_side
    return bare and bool(
        np.array_equal(rules.first, rules.last) and np.array_equal(rules.neighbours, rules.neighbours.T)
    )


def _closing(compiled: CompiledProblem, table: Real) -> Real:
    """alpha = (A + B e)/w and beta = (C + D e)/w of every sheet, rows outermost, then sheets, then blocks."""
    sheets = len(compiled.sheets)
    planes = table.reshape(sheets, -1, SHEET // LANES, LANES)
    entries = planes[:, :, 0::2] + 1j * planes[:, :, 1::2]
    ending = compiled.rows.ending.reshape(-1, 4, LANES)
    weight, ratio = ending[:, 0] + 1j * ending[:, 1], ending[:, 2] + 1j * ending[:, 3]
    # A lane of no weight adds 1/z = 0: a large z stands for an infinite one.
    share = np.where(weight == 0.0, 1e140, 1.0 / np.where(weight == 0.0, 1.0, weight))
    alpha = (entries[:, :, 0] + entries[:, :, 1] * ratio) * share
    beta = (entries[:, :, 2] + entries[:, :, 3] * ratio) * share
    blocks = np.stack([alpha.real, alpha.imag, beta.real, beta.imag], axis=2).reshape(sheets, -1, CLOSING)
    edges = compiled.rows.row_block
    return np.concatenate([blocks[:, a:b].reshape(-1) for a, b in zip(edges[:-1], edges[1:], strict=True)])
