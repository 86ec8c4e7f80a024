"""A quick look for the stack with the largest margin: a beam search in plain numpy, free of compiled code.

It answers "can anything meet this mask?" in a moment, starts the search off, and tells what blocks when nothing does.
It is a look, not a proof: a better stack may exist.
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from stackopt.blocks import LANES, unpack_blocks
from stackopt.compiled import THICKNESS_UNIT, CompiledProblem
from stackopt.evaluate import allowed, decode, sums
from stackopt.physics.line import DB_PER_NEPER
from stackopt.problem import Stack

Complex = NDArray[np.complex128]
Real = NDArray[np.float64]
Integers = NDArray[np.int64]

BEAM = 12


@dataclass(frozen=True)
class Scouted:
    """The best stack of a quick look.

    ``margin_db`` is its smallest margin, found in ``requirement`` at ``frequency_hz``; ``tried`` counts the stacks
    looked at. An empty stack means that the rules allow none.
    """

    stack: Stack
    codes: Integers
    margin_db: float
    requirement: str
    frequency_hz: float
    tried: int


def scout(compiled: CompiledProblem) -> Scouted:
    """Look for the stack with the largest margin, growing the best few stacks sheet by sheet on the victim side."""
    look = _Look(compiled)
    rules = compiled.rules
    best: tuple[float, Integers, int] = (-np.inf, np.zeros(rules.max_sheets, dtype=np.int64), 0)
    beam = np.zeros((1, rules.max_sheets), dtype=np.int64)
    p, q, scale = look.start()
    tried = 0
    for depth in range(rules.max_sheets):
        codes = np.repeat(beam, look.sheets, axis=0)
        codes[:, depth] = np.tile(np.arange(1, look.sheets + 1), len(beam))
        totals = sums(compiled, codes)
        kept = np.flatnonzero(look.may_grow(codes, depth, totals))
        if len(kept) == 0:
            break
        codes, totals = codes[kept], totals[kept]
        parent, sheet = kept // look.sheets, kept % look.sheets
        p, q, scale = look.extend(p[parent], q[parent], scale[parent], sheet, depth)
        margin = look.margin_db(p, q, scale, totals[:, 2] / THICKNESS_UNIT)
        tightest = np.argmin(margin, axis=1)
        least = margin[np.arange(len(margin)), tightest]
        tried += len(codes)
        complete = np.where(allowed(compiled, codes, totals), least, -np.inf)
        top = int(np.argmax(complete))
        if complete[top] > best[0]:
            best = float(complete[top]), codes[top].copy(), int(tightest[top])
        order = np.argsort(-least, kind="stable")[:BEAM]
        beam, p, q, scale = codes[order], p[order], q[order], scale[order]
    margin_db, code, row = best
    name = compiled.problem.requirements[compiled.rows.requirement[row]].name
    stack = decode(compiled, code[None])[0]
    return Scouted(stack, code, margin_db, name, float(compiled.rows.frequency_hz[row]), tried)


class _Look:
    """The kernel's tables as complex arrays of shape (sheet, line), and its equations in numpy."""

    def __init__(self, compiled: CompiledProblem) -> None:
        self.compiled = compiled
        self.sheets = len(compiled.sheets)
        self.first = unpack_blocks(compiled.tables.first, self.sheets, 4)
        self.following = unpack_blocks(compiled.tables.following, self.sheets, 4)
        self.weight, self.ratio = unpack_blocks(compiled.rows.ending, 1, 2)[:, 0]
        self.first_line = compiled.rows.row_block[:-1] * LANES

    def start(self) -> tuple[Complex, Complex, Real]:
        p, q = unpack_blocks(self.compiled.rows.start, 1, 2)
        return p, q, self.compiled.rows.fixed_scale[None]

    def may_grow(self, codes: Integers, depth: int, totals: Integers) -> NDArray[np.bool_]:
        """Whether the last sheet may stand where it does, whatever follows."""
        rules = self.compiled.rules
        good = np.all(totals <= rules.limits, axis=1)
        newest = codes[:, depth] - 1
        return np.asarray(
            good & (rules.first[newest] if depth == 0 else rules.neighbours[codes[:, depth - 1] - 1, newest])
        )

    def extend(self, p: Complex, q: Complex, scale: Real, sheet: Integers, depth: int) -> tuple[Complex, Complex, Real]:
        a, b, c, d = (self.first if depth == 0 else self.following)[:, sheet]
        tables = self.compiled.tables
        added = (tables.first_scale if depth == 0 else tables.following_scale)[sheet]
        return p * a + q * c, p * b + q * d, scale + added

    def margin_db(self, p: Complex, q: Complex, scale: Real, thickness_m: Real) -> Real:
        rows = self.compiled.rows
        field = np.abs(np.add.reduceat(self.weight / (p + q * self.ratio), self.first_line, axis=1))
        attenuation = rows.open_level_db(thickness_m) - DB_PER_NEPER * np.log(field) + DB_PER_NEPER * scale
        return np.asarray(attenuation - rows.required_db)
