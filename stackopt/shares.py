"""Shares of the proof: the tables of the descent, and what a worker does with some prefixes.

A share is a pure function of its arguments but for the order in which rows are tried, which every worker learns for
itself; that order decides how long a share takes, not what it finds.
"""

from __future__ import annotations

from dataclasses import dataclass
from itertools import pairwise
from typing import TYPE_CHECKING

import numpy as np
from numpy.typing import NDArray

from stackopt import demands, evaluate
from stackopt.archive import Archive
from stackopt.blocks import CLOSING, LANES, SHEET
from stackopt.compiled import MARGIN_SLACK_DB, CompiledProblem

if TYPE_CHECKING:
    from stackopt import descent

Real = NDArray[np.float64]
Integers = NDArray[np.int64]

_SUMS = {"mass": 0, "cost": 1, "thickness": 2}
_BATCH = 64  # stacks asked about further demands at a time


CANDIDATES = 20_000
"""Stacks that a share meets before their further demands are asked about."""
WORK = 60_000_000
"""What a share does before it returns, as `stackopt.descent` counts: some tenths of a second."""
_ROOM = 1 << 62


@dataclass(frozen=True)
class Share:
    """Prefixes to open, and how.

    Parameters
    ----------
    prefixes : int64, shape (prefix, position)
        Codes; the last one is opened first.
    values : int64, shape (member, objective)
        Objectives of the stacks known so far.
    collect : bool
        Whether to collect every feasible stack that no known one covers, instead of the non-dominated ones.
    work : int
        What to do before returning, as `stackopt.descent` counts; one prefix is opened in any case.
    """

    prefixes: Integers
    values: Integers
    collect: bool = False
    work: int = WORK


@dataclass(frozen=True)
class Outcome:
    """What came of a share: codes of feasible stacks, prefixes not opened; prefixes opened and children judged.

    Some of the stacks may dominate others.
    """

    found: Integers
    left: Integers
    opened: int
    judged: int


def work_on(tables: Tables, share: Share) -> Outcome:
    """Open the prefixes of a share and what is below them, until its work is done."""
    compiled = tables.compiled
    # Stacks with further demands are only candidates to the descent: it must collect them and go on below them.
    demanding = bool(demands.demands_of(compiled.problem))
    codes, left, counters = tables.descend(share, demanding or share.collect)
    if share.collect:
        if tables.mirror:
            codes = np.concatenate([codes, mirrored(codes)])
        known = Archive(share.values.shape[1], codes.shape[1])
        known.values = share.values
        codes = codes[~known.covers(evaluate.monotone_values(compiled, codes))]
        codes = codes[demands.met(compiled, codes)]
    elif demanding:
        codes = _passing(compiled, codes, share.values)
    return Outcome(codes, left, int(counters[0]), int(counters[1]))


def _passing(compiled: CompiledProblem, codes: Integers, values: Integers) -> Integers:
    """Stacks that meet the further demands; asked best first, and only while nothing known covers them."""
    known = Archive(values.shape[1], codes.shape[1])
    known.add(values, np.zeros((len(values), codes.shape[1]), dtype=np.int64))
    own = evaluate.monotone_values(compiled, codes)
    order = np.argsort(own.sum(axis=1), kind="stable")
    passed = [codes[:0]]
    for start in range(0, len(order), _BATCH):
        batch = order[start : start + _BATCH]
        batch = batch[~known.covers(own[batch])]
        batch = batch[demands.met(compiled, codes[batch])]
        known.add(own[batch], codes[batch])
        passed.append(codes[batch])
    return np.concatenate(passed)


def mirrored(codes: Integers) -> Integers:
    """Codes of the mirror images, packed from the source side."""
    return evaluate.packed(codes[:, ::-1])


class Tables:
    """Tables of the descent, the covers it starts from, and the order in which rows are tried."""

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
        self._row_order = np.arange(len(self.physics.required))
        self._covered: tuple[Integers, descent.Cover] | None = None

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

    def descend(self, share: Share, keep_all: bool) -> tuple[Integers, Integers, Integers]:
        """Run `stackopt.descent.descend`; return the stacks found, the prefixes left, and its counters."""
        from stackopt import descent

        counters = np.zeros(3, dtype=np.int64)
        row_order = self._row_order.copy()  # another thread may be at work
        room = CANDIDATES if keep_all else _ROOM
        cover = self._start_cover(share.values)
        found, left = descent.descend(
            share.prefixes, self.rules, self.physics, cover, keep_all, room, share.work, row_order, counters
        )
        self._row_order = row_order
        return found, left, counters

    def _start_cover(self, values: Integers) -> descent.Cover:
        """Copy of the cover of these vectors, made anew only when they have changed."""
        if self._covered is None or not np.array_equal(self._covered[0], values):
            self._covered = values, self.cover(values)
        cover = self._covered[1]
        return cover._replace(least=cover.least.copy())


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
