"""Stacks at other than nominal values: their worst corner, and the share of samples that meets the mask.

A corner is one choice among the extreme combinations of every material that is in the stack, in its bonds or in the
fixed layers (`stackopt.deviation`). Mass, cost and thickness as objectives stay nominal; the thickness that deviates
counts where source and victim are moved apart by it. Inside the box of tolerances a case worse than every corner is
possible where layers resonate.

How corners are pruned
----------------------
Nothing is assumed about which corner is worst: thicker or more permeable is not always better. A value that has no
effect makes no corners, and a stack has those of its own materials only. When the question is only whether the mask is
met, a stack is out at its first corner below the mask, and the corners that have rejected most stacks so far are tried
first; the order has no influence on the answer. A stack that meets the mask has every one of its corners evaluated.
"""

from __future__ import annotations

import math
from collections.abc import Sequence
from dataclasses import dataclass
from functools import cached_property

import numpy as np
from numpy.typing import NDArray

from stackopt import evaluate
from stackopt.blocks import SHEET
from stackopt.cases import Cases
from stackopt.compiled import MARGIN_SLACK_DB, CompiledProblem
from stackopt.deviation import (
    MOST_CORNERS,
    NOMINAL,
    Deviations,
    most_corners,
    sampled,
    surroundings,
    too_many_corners,
    varying,
)
from stackopt.errors import InputError

Real = NDArray[np.float64]
Integers = NDArray[np.int64]
Booleans = NDArray[np.bool_]

_PAIRS = 2**15
"""Pairs of stack and corner that are laid out at a time."""
_BLOCK = 512
"""Stacks that share one order of the corners."""
_SAMPLES_AT_A_TIME = 32
_KEPT_BYTES = 3e8
"""Memory for the tables of samples."""
_KNOWN = 10_000
"""Stacks whose margins at every sample are remembered."""
_NORMAL_95 = 1.959963984540054
"""95 % of a normal distribution lie within so many deviations."""
_KEY = "tolerances"
"""Under which a compiled problem keeps its `Tolerances`, as it keeps its tables."""


@dataclass(frozen=True)
class WorstMargins:
    """Smallest margins over the nominal values and all corners, dB, where they stand, and how many were evaluated.

    All of shape (stack,). ``row`` is a row of the compiled problem; ``evaluated`` counts the nominal values too.
    """

    margin_db: Real
    row: Integers
    evaluated: Integers


@dataclass(frozen=True)
class Yields:
    """Share of samples that meet the mask, and its 95 % interval; of shape (stack,).

    The interval is that of E. B. Wilson (1927) for independent samples; the quasi-random ones are spread more evenly,
    so that it is rather too wide than too narrow.
    """

    fraction: Real
    low: Real
    high: Real
    samples: int


def wilson_interval(successes: NDArray[np.number], samples: int) -> tuple[Real, Real]:
    """Interval that holds a probability with 95 % confidence, from successes among independent samples.

    Examples
    --------
    >>> low, high = wilson_interval(np.array([95]), 100)
    >>> round(float(low[0]), 4), round(float(high[0]), 4)
    (0.8882, 0.9785)
    """
    share, z2 = np.asarray(successes) / samples, _NORMAL_95**2
    middle = (share + z2 / (2 * samples)) / (1 + z2 / samples)
    half = _NORMAL_95 / (1 + z2 / samples) * np.sqrt(share * (1 - share) / samples + z2 / (4 * samples**2))
    return np.maximum(middle - half, 0.0), np.minimum(middle + half, 1.0)


def samples_for(goal: float) -> int:
    """Samples that resolve a yield goal: at least ten expected failures, a power of two from 256 to 4096.

    Examples
    --------
    >>> samples_for(0.95), samples_for(0.99), samples_for(1.0)
    (256, 1024, 4096)
    """
    wanted = 10.0 / max(1.0 - goal, 1e-9)
    return int(2 ** min(max(math.ceil(math.log2(wanted)), 8), 12))


class Tolerances:
    """Judges stacks of a compiled problem at other than nominal values; keeps its tables between calls.

    The methods for corners raise InputError when a stack of the problem may have more than `MOST_CORNERS` of them.

    Parameters
    ----------
    compiled : CompiledProblem
        Its rows are the frequencies that count.
    """

    def __init__(self, compiled: CompiledProblem) -> None:
        problem = compiled.problem
        self.compiled = compiled
        names = [sheet.material for sheet in compiled.sheets]
        self.around = surroundings(problem)
        self.materials = tuple(dict.fromkeys([*names, *self.around]))
        self.of_sheet = np.array([self.materials.index(name) for name in names], dtype=np.int64)
        self.corners = varying(problem, self.materials)
        self._cases: Cases | None = None
        self._digits: dict[bytes, Integers] = {}
        self._votes = [np.ones(len(self.corners.get(name, (NOMINAL,)))) for name in self.materials]
        self._samples: dict[tuple[int, int], _Samples] = {}

    def worst_margins(self, codes: Integers) -> WorstMargins:
        """Smallest margin of each stack over nominal values and all corners; codes of shape (stack, position)."""
        return self._search(codes, stop=False)

    def meets_worst(self, codes: Integers) -> Booleans:
        """Whether each stack meets the mask at its nominal values and at every corner."""
        return np.asarray(self.least_margins(codes).margin_db >= -MARGIN_SLACK_DB)

    def least_margins(self, codes: Integers) -> WorstMargins:
        """Do as `worst_margins` does, but leave a stack at the first corner that misses the mask.

        Margins above zero are the smallest ones, margins below zero some that was found.
        """
        return self._search(codes, stop=True)

    def yield_of(self, codes: Integers, samples: int, seed: int) -> Yields:
        """Share of samples of the deviations at which each stack meets the mask.

        ``samples`` is rounded up to a power of two; the same samples serve all stacks (`stackopt.deviation.sampled`).
        """
        drawn = self._drawn(samples, seed)
        passed = np.count_nonzero(drawn.margins(codes)[0] >= -MARGIN_SLACK_DB, axis=1)
        return Yields(passed / drawn.samples, *wilson_interval(passed, drawn.samples), drawn.samples)

    def meets_yield(self, codes: Integers, goal: float, seed: int, samples: int | None = None) -> Booleans:
        """Whether the share of `yield_of` reaches the goal; `samples_for` tells how many samples when left out.

        It is the share itself that decides, not an end of its interval. A stack is left as soon as the samples still to
        come cannot change the answer.
        """
        drawn = self._drawn(samples_for(goal) if samples is None else samples, seed)
        needed = math.ceil(goal * drawn.samples - 1e-9)
        return np.asarray(drawn.count(codes, needed) >= needed)

    def goal_margins(
        self, codes: Integers, goal: float, seed: int, samples: int | None = None, known: Booleans | None = None
    ) -> WorstMargins:
        """Margin that the goal's share of the samples reaches, dB: below zero for just those that miss the goal.

        Parameters
        ----------
        codes : int64 (stack, position)
        goal, seed, samples
            As for `meets_yield`.
        known : bool (row,), optional
            Rows that need not be named. ``row`` is the one that fails most samples, of the others where there is one.
        """
        drawn = self._drawn(samples_for(goal) if samples is None else samples, seed)
        margin, row = drawn.margins(codes)
        needed = math.ceil(goal * drawn.samples - 1e-9)
        order = np.argsort(-margin, axis=1, kind="stable")[:, needed - 1]
        stacks = np.arange(len(codes))
        chosen = row[stacks, order]
        for stack in stacks:
            failing = row[stack][margin[stack] < -MARGIN_SLACK_DB]
            fresh = failing if known is None else failing[~known[failing]]
            if len(failing):
                chosen[stack] = np.argmax(np.bincount(fresh if len(fresh) else failing))
        return WorstMargins(margin[stacks, order], chosen, np.full(len(codes), drawn.samples))

    def __getstate__(self) -> dict[str, object]:
        """Return what another process needs: all but the tables."""
        return {**vars(self), "_cases": None, "_samples": {}}

    @cached_property
    def _roomy(self) -> CompiledProblem:
        """The compiled problem with an unshielded level that covers stacks thicker than nominal."""
        materials = [self.compiled.problem.materials[name] for name in self.materials]
        most = 1.0 + max((material.tolerance.thickness[1] for material in materials), default=0.0)
        return self.compiled.with_room(most * self.compiled.rows.thickest_m)

    def _drawn(self, samples: int, seed: int) -> _Samples:
        key = (2 ** math.ceil(math.log2(max(samples, 1))), seed)
        if key not in self._samples:
            self._samples[key] = _Samples(self._roomy, self.materials, self.of_sheet, *key)
        return self._samples[key]

    def _search(self, codes: Integers, stop: bool) -> WorstMargins:
        margin, row = evaluate.margins(self.compiled, codes)
        result = WorstMargins(margin, row, np.ones(len(codes), dtype=np.int64))
        if not self.corners:
            return result
        if self._cases is None:
            if (most := most_corners(self.compiled.problem)) > MOST_CORNERS:
                raise InputError(too_many_corners(most))
            self._cases = Cases(self._roomy, self.materials, self.of_sheet, self.corners)
        for start in range(0, len(codes), _BLOCK):
            block = np.arange(start, min(start + _BLOCK, len(codes)))
            self._search_block(self._cases, codes, block, result, stop)
        return result

    def _search_block(self, cases: Cases, codes: Integers, block: Integers, result: WorstMargins, stop: bool) -> None:
        """Evaluate the corners of a block of stacks, all of them or until each stack has missed the mask."""
        plans, at = self._plans(codes, block), 0
        size = 1 if stop else max(_PAIRS // len(block), 1)
        while plans:
            if stop:
                plans = [(members[result.margin_db[members] >= -MARGIN_SLACK_DB], order) for members, order in plans]
            plans = [(members, order) for members, order in plans if len(members) and at < len(order)]
            pairs = [(members, order[at : at + size]) for members, order in plans]
            at, size = at + size, min(2 * size, 64) if stop else size
            if pairs:
                stack = np.concatenate([np.repeat(members, len(digits)) for members, digits in pairs])
                digits = np.concatenate([np.tile(digits, (len(members), 1)) for members, digits in pairs])
                margin, row = cases.margins(codes[stack], digits)
                _note_least(result, stack, margin, row)
                for votes, failed in zip(self._votes, digits[margin < -MARGIN_SLACK_DB].T, strict=True):
                    np.add.at(votes, failed[failed >= 0], 1.0)

    def _plans(self, codes: Integers, block: Integers) -> list[tuple[Integers, Integers]]:
        """Stacks of a block by the materials they hold, each with its corners in the order to try them.

        A corner is a row of ``digits`` of `stackopt.cases.Cases.margins`.
        """
        held = np.zeros((len(block), len(self.materials) + 1), dtype=bool)
        held[np.arange(len(block))[:, None], np.append(-1, self.of_sheet)[codes[block]]] = True
        held = held[:, :-1]
        always = surroundings(self.compiled.problem, 1)
        several = evaluate.count_sheets(codes[block]) > 1
        for name in self.around:
            held[:, self.materials.index(name)] |= several | (name in always)
        kinds, kind_of = np.unique(held, axis=0, return_inverse=True)
        plans = []
        for number, kind in enumerate(kinds):
            digits = self._corners_of(kind)
            score = sum(
                np.log(votes / votes.sum())[column] for votes, column in zip(self._votes, digits.T, strict=True)
            )
            order = np.argsort(-np.asarray(score), kind="stable")
            plans.append((block[kind_of.ravel() == number], digits[order]))
        return plans

    def _corners_of(self, held: Booleans) -> Integers:
        """All corners of the stacks that hold some of the materials, shape (corner, material), -1 for the others."""
        key = held.tobytes()
        if key not in self._digits:
            counts = [len(votes) if here else 1 for votes, here in zip(self._votes, held, strict=True)]
            digits = np.indices(counts).reshape(len(counts), -1).T
            self._digits[key] = np.where(held, digits, -1)
        return self._digits[key]


def tolerances_of(compiled: CompiledProblem) -> Tolerances:
    """Return the `Tolerances` of a compiled problem, the same ones at every call."""
    known = vars(compiled).get(_KEY)
    if not isinstance(known, Tolerances):
        known = vars(compiled)[_KEY] = Tolerances(compiled)
    return known


def meets_assumption(compiled: CompiledProblem, codes: Integers) -> Booleans:
    """Whether each stack meets the mask as far from nominal values as the problem's ``assume`` asks.

    Seed and goal of a yield are those of the problem.
    """
    search = compiled.problem.search
    if search.assume == "worst":
        return tolerances_of(compiled).meets_worst(codes)
    if search.assume == "yield":
        return tolerances_of(compiled).meets_yield(codes, search.yield_goal, search.random_seed)
    return np.asarray(evaluate.margins(compiled, codes)[0] >= -MARGIN_SLACK_DB)


def _note_least(result: WorstMargins, stack: Integers, margin_db: Real, row: Integers) -> None:
    """Note evaluated pairs and the smallest margin of each stack."""
    np.add.at(result.evaluated, stack, 1)
    order = np.lexsort((margin_db, stack))
    first = order[np.append(True, np.diff(stack[order]) > 0)]
    lower = first[margin_db[first] < result.margin_db[stack[first]]]
    result.margin_db[stack[lower]] = margin_db[lower]
    result.row[stack[lower]] = row[lower]


class _Samples:
    """The samples of a seed: deviations, and as many of their tables as memory is granted for."""

    def __init__(
        self, compiled: CompiledProblem, materials: Sequence[str], of_sheet: Integers, samples: int, seed: int
    ) -> None:
        self.compiled, self.materials, self.of_sheet, self.samples = compiled, materials, of_sheet, samples
        drawn = sampled(compiled.problem, samples, seed)
        self.deviations: Deviations = {name: cases for name, cases in drawn.items() if name in materials}
        # Tables hold one case of bond and fixed layers at a time.
        self.step = 1 if any(name in self.deviations for name in surroundings(compiled.problem)) else _SAMPLES_AT_A_TIME
        blocks = int(compiled.rows.row_block[-1]) * (1 if compiled.problem.rules.bond is None else 2)
        self._room = int(_KEPT_BYTES / (8.0 * SHEET * blocks * len(compiled.sheets) * self.step))
        self._kept: dict[int, Cases] = {}
        self._known: dict[bytes, tuple[Real, Integers]] = {}

    def count(self, codes: Integers, needed: int) -> Integers:
        """Count the samples at which each stack meets the mask, until it is decided whether it does at ``needed``."""
        passed = np.zeros(len(codes), dtype=np.int64)
        if not self.deviations:
            passed[evaluate.margins(self.compiled, codes)[0] >= -MARGIN_SLACK_DB] = self.samples
            return passed
        undecided = np.arange(len(codes))
        for start in range(0, self.samples, self.step):
            if len(undecided) == 0:
                break
            margin, _ = self._part(start, codes[undecided])
            passed[undecided] += np.count_nonzero(margin >= -MARGIN_SLACK_DB, axis=1)
            left = self.samples - start - margin.shape[1]
            undecided = undecided[(passed[undecided] < needed) & (passed[undecided] + left >= needed)]
        return passed

    def margins(self, codes: Integers) -> tuple[Real, Integers]:
        """Smallest margins at every sample, dB, and their rows, both of shape (stack, sample)."""
        keys = [code.tobytes() for code in codes]
        fresh = [n for n, key in enumerate(keys) if key not in self._known]
        if len(self._known) + len(fresh) > _KNOWN:
            self._known, fresh = {}, list(range(len(keys)))
        if fresh and self.deviations:
            parts = [self._part(start, codes[fresh]) for start in range(0, self.samples, self.step)]
            margin, row = (np.concatenate(columns, axis=1) for columns in zip(*parts, strict=True))
        elif fresh:
            margin, row = (x[:, None].repeat(self.samples, 1) for x in evaluate.margins(self.compiled, codes[fresh]))
        self._known.update({keys[n]: (margin[number], row[number]) for number, n in enumerate(fresh)})
        shape = (len(keys), self.samples)
        margins, rows = np.empty(shape), np.empty(shape, dtype=np.int64)
        for n, key in enumerate(keys):
            margins[n], rows[n] = self._known[key]
        return margins, rows

    def _part(self, start: int, codes: Integers) -> tuple[Real, Integers]:
        """Do as `margins` does, at the samples of one set of tables."""
        count = min(self.step, self.samples - start)
        digits = np.tile(np.arange(count), len(codes))[:, None].repeat(len(self.materials), axis=1)
        digits[:, [name not in self.deviations for name in self.materials]] = 0
        margin, row = self._cases(start, codes).margins(np.repeat(codes, count, axis=0), digits)
        return margin.reshape(-1, count), row.reshape(-1, count)

    def _cases(self, start: int, codes: Integers) -> Cases:
        if start in self._kept:
            return self._kept[start]
        part = {name: cases[start : start + self.step] for name, cases in self.deviations.items()}
        keep = len(self._kept) < self._room
        used = None if keep else np.unique(codes[codes > 0]) - 1
        cases = Cases(self.compiled, self.materials, self.of_sheet, part, used)
        if keep:
            self._kept[start] = cases
        return cases
