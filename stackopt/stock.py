"""What may stand in a position of a stack while exploring: gauges by number, or a material of a thickness range.

Genes of a stack are its codes (0 empty, 1..S a gauge, above S a material of continuous thickness) followed by the
thicknesses of the continuous ones, in picometres and 0 elsewhere; shape (stack, 2 * positions).
"""

from __future__ import annotations

from dataclasses import dataclass
from functools import cached_property

import numpy as np
from numpy.typing import NDArray

from stackopt import demands, evaluate
from stackopt.compiled import MARGIN_SLACK_DB, THICKNESS_UNIT, CompiledProblem
from stackopt.problem import PROVABLE_OBJECTIVES, Sheet, Stack

Real = NDArray[np.float64]
Integers = NDArray[np.int64]
Booleans = NDArray[np.bool_]


SCREENED_DB = 20.0
UNMET_DB = 1.0
"""Stand-ins for the lacking margin of stacks that are known to be beaten, and of those that fail a further demand."""


@dataclass(frozen=True)
class Judged:
    """Population after judging: integer objectives, shape (stack, objective); constraint violation; feasibility.

    ``computed`` counts the stacks whose attenuation was needed.
    """

    values: Integers
    violation: Real
    feasible: Booleans
    computed: int


@dataclass(frozen=True)
class Stock:
    """The choices of a compiled problem, and how to judge genes."""

    compiled: CompiledProblem

    @property
    def positions(self) -> int:
        """Largest number of sheets in a stack."""
        return self.compiled.rules.max_sheets

    @property
    def screens(self) -> bool:
        """Whether a stack's objectives are known before its attenuation."""
        return set(self.compiled.problem.search.objectives) <= set(PROVABLE_OBJECTIVES)

    @property
    def gauges(self) -> int:
        """Number of gauges; codes above it are continuous."""
        return len(self.compiled.sheets)

    @property
    def choices(self) -> int:
        """Largest code."""
        return self.gauges + len(self.compiled.problem.continuous)

    @cached_property
    def ranges_pm(self) -> Integers:
        """Thickness range of each code from 0, picometres, shape (code, 2); zeros for gauges."""
        ranges = np.zeros((self.choices + 1, 2), dtype=np.int64)
        for number, name in enumerate(self.compiled.problem.continuous):
            low_high = self.compiled.problem.materials[name].thickness_range_m or (0.0, 0.0)
            ranges[self.gauges + 1 + number] = [round(end * THICKNESS_UNIT) for end in low_high]
        return ranges

    @cached_property
    def siblings(self) -> list[Integers]:
        """For each code from 0, the codes of the same material by rising gauge."""
        names = [sheet.material for sheet in self.compiled.sheets] + list(self.compiled.problem.continuous)
        same = [np.flatnonzero(np.array(names) == name) + 1 for name in names]
        return [np.zeros(1, dtype=np.int64), *same]

    def tidy(self, genes: Integers) -> Integers:
        """Pack genes from the source side and put continuous thicknesses into their ranges, to three digits."""
        codes, thickness = genes[:, : self.positions], genes[:, self.positions :]
        order = np.argsort(codes == 0, axis=1, kind="stable")
        codes = np.take_along_axis(codes, order, axis=1)
        if self.choices == self.gauges:
            return np.concatenate([codes, np.zeros_like(codes)], axis=1)
        low, high = self.ranges_pm[codes, 0], self.ranges_pm[codes, 1]
        thickness = np.clip(np.take_along_axis(thickness, order, axis=1), low, high)
        digits = 10 ** np.maximum(np.floor(np.log10(np.maximum(thickness, 1))) - 2, 0).astype(np.int64)
        rounded = np.clip(np.round(thickness / digits).astype(np.int64) * digits, low, high)
        at_end = (thickness == low) | (thickness == high)  # ends of a range may have more digits
        return np.concatenate([codes, np.where(at_end, thickness, rounded)], axis=1)

    def stacks(self, genes: Integers) -> list[Stack]:
        """Stacks of genes."""
        result = []
        for row in genes:
            pairs = zip(row[: self.positions], row[self.positions :], strict=True)
            result.append(tuple(self._sheet(int(code), int(thickness)) for code, thickness in pairs if code > 0))
        return result

    def _sheet(self, code: int, thickness_pm: int) -> Sheet:
        if code <= self.gauges:
            return self.compiled.sheets[code - 1]
        return Sheet(self.compiled.problem.continuous[code - self.gauges - 1], thickness_pm / THICKNESS_UNIT)

    def tabulated(self, genes: Integers) -> tuple[CompiledProblem, Integers]:
        """Compiled problem that holds every sheet of the genes, and the stacks as codes of it."""
        codes = genes[:, : self.positions]
        if self.choices == self.gauges:
            return self.compiled, codes
        pairs = np.stack([codes.ravel(), genes[:, self.positions :].ravel()], axis=1)
        unique, inverse = np.unique(pairs, axis=0, return_inverse=True)
        sheets = tuple(self._sheet(int(code), int(thickness)) for code, thickness in unique if code > 0)
        offset = 0 if len(unique) > len(sheets) else 1
        return self.compiled.with_sheets(sheets), inverse.reshape(codes.shape).astype(np.int64) + offset

    def judge(self, genes: Integers, screen: evaluate.Screen) -> Judged:
        """Objectives and constraint of tidy genes.

        ``screen`` tells which objective vectors a feasible stack is known to beat; those need no attenuation and count
        as `SCREENED_DB` short of the mask, so that a search prefers stacks that nearly meet it. Stacks against the
        rules are judged by how far they break them, above any margin.
        """
        compiled, codes = self.tabulated(genes)
        totals = evaluate.sums(compiled, codes)
        lawful = evaluate.allowed(compiled, codes, totals)
        violation = np.where(lawful, SCREENED_DB, 1e3 + evaluate.excess(compiled, codes, totals))
        values = evaluate.objective_values(compiled, codes, totals)
        # Only objectives that never shrink with a sheet can be screened before the physics is known.
        needed = lawful if not self.screens else lawful & ~screen(values)
        feasible = np.zeros(len(codes), dtype=bool)
        if np.any(needed):
            subset, subset_codes = self.tabulated(genes[needed])
            margin, _ = evaluate.margins(subset, subset_codes)
            lacking = -margin - MARGIN_SLACK_DB
            good = lacking <= 0.0
            good[good] = demands.met(subset, subset_codes[good])
            violation[needed] = np.where(good | (lacking > 0.0), lacking, UNMET_DB)
            feasible[needed] = good
            heat = np.zeros(len(margin))
            if "heat" in compiled.problem.search.objectives and np.any(good):
                heat[good] = demands.heat_w(subset, subset_codes[good])
            values[needed] = evaluate.objective_values(subset, subset_codes, totals[needed], margin, heat)
        return Judged(values, violation, feasible, int(np.count_nonzero(needed)))
