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
from collections import deque
from collections.abc import Callable, Iterator
from concurrent.futures import FIRST_COMPLETED, Future, ThreadPoolExecutor, wait
from dataclasses import dataclass
from itertools import pairwise
from typing import TYPE_CHECKING

import numpy as np
from numpy.typing import NDArray

from stackopt import demands, evaluate
from stackopt.archive import Archive
from stackopt.blocks import CLOSING, LANES, SHEET
from stackopt.compiled import MARGIN_SLACK_DB, CompiledProblem
from stackopt.problem import PROVABLE_OBJECTIVES, Problem

if TYPE_CHECKING:
    from stackopt import descent

Real = NDArray[np.float64]
Integers = NDArray[np.int64]
Booleans = NDArray[np.bool_]

ROOM = 1 << 62
CANDIDATES = 20_000
"""Stacks with further demands that a share collects before they are asked about."""
_BATCH = 64
PREFIX = 2
"""Sheets in the prefix of a share below which everything is searched."""
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
    8492487570
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
        # Stacks with further demands are only candidates to the descent: it must collect them and go on below them.
        self.keep_all = bool(demands.demands_of(compiled.problem))
        self.room = CANDIDATES if self.keep_all else ROOM
        self.tally = Tally() if tally is None else tally
        self.tables = Tables(compiled)
        self.shares = list(_shares(len(compiled.sheets), compiled.rules.max_sheets))
        self.done = np.zeros(len(self.shares), dtype=bool)
        self._covered: tuple[Integers | None, descent.Cover | None] = (None, None)

    @property
    def complete(self) -> bool:
        """Whether every share is done."""
        return bool(np.all(self.done))

    @property
    def covered(self) -> float:
        """Share of the stacks that is settled, 0 to 1."""
        return float(np.mean(self.done))

    def warm(self) -> None:
        """Compile the descent; seconds on a fresh machine, nothing later."""
        stop = np.ones(1, dtype=np.uint8)
        self.tables.descend((), stop, self._cover(), np.zeros(2, dtype=np.int64))

    def run(
        self, workers: int = 1, deadline: float = np.inf, watch: Callable[[], None] = lambda: None, every_s: float = 0.2
    ) -> bool:
        """Go on until everything is done or the deadline (`time.monotonic`) has passed; return whether it is complete.

        ``watch`` is called from this thread about every ``every_s`` seconds. Whatever it raises ends the proof cleanly:
        what is done stays done.
        """
        started = time.monotonic()
        try:
            for depth in range(PREFIX + 1):
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
        queue = deque(waiting)
        with ThreadPoolExecutor(workers) as pool:
            try:
                while True:
                    while queue and len(running) < 2 * workers and time.monotonic() < deadline:
                        number = queue.popleft()
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
                        number, outcome = running.pop(future), future.result()
                        self._merge(number, outcome)
                        if outcome.full and not self.done[number]:
                            queue.appendleft(number)  # once more, knowing more
                    watch()
            finally:
                stop[0] = 1

    def _is_cut(self, prefix: tuple[int, ...]) -> bool:
        """Whether the rules or a known stack settle everything below a prefix."""
        if not prefix:
            return False
        rules = self.compiled.rules
        if not rules.first[prefix[0]] or (len(prefix) == PREFIX and not rules.neighbours[prefix]):
            return True
        codes = np.zeros((1, rules.max_sheets), dtype=np.int64)
        codes[0, : len(prefix)] = np.array(prefix) + 1
        beyond = bool(np.any(evaluate.sums(self.compiled, codes) > rules.limits))
        return beyond or bool(self.archive.covers(_values(self.compiled, codes))[0])

    def _descend(self, number: int, stop: NDArray[np.uint8]) -> _Outcome:
        cover, room = self._cover(), self.room  # the room may grow meanwhile
        counters = np.zeros(2, dtype=np.int64)
        found, finished = self.tables.descend(self.shares[number], stop, cover, counters, self.keep_all, room)
        return _Outcome(found, finished, len(found) == room, counters)

    def _cover(self) -> descent.Cover:
        """Copy of the archive's cover, made anew only when the archive has changed."""
        values, cover = self._covered
        if values is not self.archive.values or cover is None:
            values = self.archive.values
            cover = self.tables.cover(values)
            self._covered = values, cover
        return cover._replace(least=cover.least.copy())

    def _merge(self, number: int, outcome: _Outcome) -> None:
        gained = self._take(outcome.found)
        if outcome.full and not gained:
            self.room *= 4  # nothing learnt that would shorten the next try
        self.tally.opened += int(outcome.counters[0])
        self.tally.judged += int(outcome.counters[1])
        self.done[number] = outcome.finished

    def _take(self, codes: Integers) -> int:
        """Add stacks to the archive, those with further demands best first and only while nothing known covers them."""
        values = _values(self.compiled, codes)
        if not self.keep_all:
            return self.archive.add(values, codes)
        gained = 0
        order = np.argsort(values.sum(axis=1), kind="stable")
        for start in range(0, len(order), _BATCH):
            batch = order[start : start + _BATCH]
            batch = batch[~self.archive.covers(values[batch])]
            batch = batch[demands.met(self.compiled, codes[batch])]
            gained += self.archive.add(values[batch], codes[batch])
        return gained


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
        Largest number of stacks to collect from any share; with more, ``overflowed`` is set.
    """

    def __init__(self, compiled: CompiledProblem, values: Integers, within: float, most: int = 200_000) -> None:
        # A stack is beaten where it is above a member's stretched objectives in all of them.
        stretched = Archive(values.shape[1], compiled.rules.max_sheets)
        bound = np.floor(values * (1.0 + within)).astype(np.int64) + 1
        stretched.add(bound, np.zeros((len(values), compiled.rules.max_sheets), dtype=np.int64))
        super().__init__(compiled, stretched)
        self.keep_all = True
        self.room = most
        self.overflowed = False
        self._parts: list[Integers] = [np.empty((0, compiled.rules.max_sheets), dtype=np.int64)]

    @property
    def codes(self) -> Integers:
        """Codes of the stacks found, mirror images included, each once."""
        return np.unique(np.concatenate(self._parts), axis=0)

    def _merge(self, number: int, outcome: _Outcome) -> None:
        self.tally.opened += int(outcome.counters[0])
        self.tally.judged += int(outcome.counters[1])
        self.overflowed |= outcome.full
        self.done[number] = outcome.finished or outcome.full
        if not self.done[number] or len(outcome.found) == 0:
            return
        codes = np.concatenate([outcome.found, mirrored(outcome.found)]) if self.tables.mirror else outcome.found
        codes = codes[~self.archive.covers(_values(self.compiled, codes))]
        self._parts.append(codes[demands.met(self.compiled, codes)])


def _values(compiled: CompiledProblem, codes: Integers) -> Integers:
    totals = evaluate.sums(compiled, codes)
    return evaluate.objective_values(compiled, codes, totals)


def mirrored(codes: Integers) -> Integers:
    """Codes of the mirror images, packed from the source side."""
    return evaluate.packed(codes[:, ::-1])


@dataclass(frozen=True)
class _Outcome:
    found: Integers
    finished: bool
    full: bool
    counters: Integers


def _shares(sheets: int, max_sheets: int) -> Iterator[tuple[int, ...]]:
    yield ()
    if max_sheets > 1:
        yield from ((s,) for s in range(sheets))
    if max_sheets > 2:
        yield from ((s, t) for s in range(sheets) for t in range(sheets))


class Tables:
    """Read-only tables of the descent, one row order per thread, and the covers it starts from."""

    def __init__(self, compiled: CompiledProblem) -> None:
        from stackopt import descent  # compiled code is loaded only where it is used

        self.compiled = compiled
        self.mirror = mirror_holds(compiled)
        names = compiled.problem.search.objectives
        self.levels = compiled.rules.max_sheets + 1 if "sheets" in names else 1
        used = [_SUMS[name] for name in names if name in _SUMS]
        self.order = used + [axis for axis in range(3) if axis not in used]
        self.used = np.array([1] * len(used) + [0] * (3 - len(used)), dtype=np.int64)
        self.rules = descent.Rules(
            sums=np.stack([compiled.sums.first, compiled.sums.following])[:, :, self.order],
            limits=compiled.rules.limits[self.order],
            used=self.used,
            thickness=self.order.index(_SUMS["thickness"]),
            may_first=compiled.rules.first,
            may_last=compiled.rules.last,
            may_touch=compiled.rules.neighbours,
            max_sheets=compiled.rules.max_sheets,
            mirror=self.mirror,
        )
        self.physics = self._physics()
        self.row_orders = threading.local()

    def _physics(self) -> descent.Physics:
        from stackopt import descent

        rows, tables = self.compiled.rows, self.compiled.tables
        bonded = tables.following is not tables.first
        kinds = (tables.first, tables.following) if bonded else (tables.first,)
        # A Chebyshev sum is nowhere above the sum of its coefficients' sizes.
        constant, others = rows.open_coefficients[:, 0], rows.open_coefficients[:, 1:]
        return descent.Physics(
            table=np.concatenate(kinds),
            closing=np.concatenate([_closing(self.compiled, table) for table in kinds]),
            bonded=len(self.compiled.sheets) if bonded else 0,
            scale=np.stack([tables.first_scale, tables.following_scale]),
            row_block=rows.row_block,
            start=rows.start,
            fixed_scale=rows.fixed_scale,
            coefficients=rows.open_coefficients,
            highest=constant + np.abs(others).sum(axis=1) + 1e-6,
            reach=rows.reach_m,
            thickest=rows.thickest_m,
            required=rows.required_db - MARGIN_SLACK_DB,
        )

    def cover(self, values: Integers) -> descent.Cover:
        """Cover of objective vectors, shape (member, objective)."""
        from stackopt import descent

        names = self.compiled.problem.search.objectives
        nothing = np.zeros(len(values), dtype=np.int64)
        sheets = values[:, names.index("sheets")] if "sheets" in names else nothing
        columns = [values[:, n] for n, name in enumerate(names) if name in _SUMS]
        columns += [nothing] * (3 - len(columns))
        reachable = self.compiled.rules.max_sheets * self.rules.sums[1].max(axis=0)
        shift = np.zeros(2, dtype=np.int64)
        for n in (0, 1):
            top = int(columns[n].max()) if len(values) else int(reachable[n])
            shift[n] = max(0, (top // (descent.CELLS - 1)).bit_length())
        least = np.full((self.levels, descent.CELLS, descent.CELLS), descent.UNCOVERED, dtype=np.int64)
        # A cell stands for its lower corner, so that a stack counts from the cell above its own.
        first, second = (-(-columns[n] >> shift[n]) for n in (0, 1))
        level = sheets if self.levels > 1 else nothing
        # Stretched members may lie beyond what any stack reaches; those cover nothing.
        inside = (first < descent.CELLS) & (second < descent.CELLS) & (level < self.levels)
        np.minimum.at(least, (level[inside], first[inside], second[inside]), columns[2][inside])
        for axis in range(3):
            np.minimum.accumulate(least, axis=axis, out=least)
        return descent.Cover(least, shift)

    def descend(
        self,
        prefix: tuple[int, ...],
        stop: NDArray[np.uint8],
        cover: descent.Cover,
        counters: Integers,
        keep_all: bool = False,
        room: int = ROOM,
    ) -> tuple[Integers, bool]:
        """Open a share's prefix, and everything below a pair; see `stackopt.descent.descend`."""
        from stackopt import descent

        if not hasattr(self.row_orders, "rows"):
            self.row_orders.rows = np.arange(len(self.physics.required))
        found, finished = descent.descend(
            np.array(prefix, dtype=np.int64),
            len(prefix) == PREFIX,
            stop,
            self.rules,
            self.physics,
            cover,
            keep_all,
            room,
            self.row_orders.rows,
            counters,
        )
        return found, bool(finished)


def mirror_holds(compiled: CompiledProblem) -> bool:
    """Whether every stack's mirror image is as allowed and attenuates the same.

    Both half-spaces of every field are alike, so T is the same from either side (A + B/Z0 + C Z0 + D does not change
    when A and D trade places). Fixed layers break that, as does a demand on the fields inside, and rules on faces or
    neighbours may.
    """
    rules, problem = compiled.rules, compiled.problem
    bare = not problem.rules.source_side and not problem.rules.victim_side and not demands.faces_differ(problem)
    return bare and bool(
        np.array_equal(rules.first, rules.last) and np.array_equal(rules.neighbours, rules.neighbours.T)
    )


def _closing(compiled: CompiledProblem, table: Real) -> Real:
    """Tabulate alpha = (A + B e)/w and beta = (C + D e)/w of every sheet, rows outermost, then sheets, then blocks."""
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
    return np.concatenate([blocks[:, a:b].reshape(-1) for a, b in pairwise(edges)])
