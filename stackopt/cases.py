"""Kernel tables of a problem's sheets in several cases of their materials, and the margins of stacks in them."""

from __future__ import annotations

from collections.abc import Sequence

import numpy as np
from numpy.typing import NDArray

from stackopt import evaluate
from stackopt.compiled import CompiledProblem
from stackopt.deviation import Deviations, surroundings, varied_problem, varied_sheet
from stackopt.problem import Sheet

Real = NDArray[np.float64]
Integers = NDArray[np.int64]

BATCH = 4096
"""Pairs of stack and case that the kernel gets at a time."""


class Cases:
    """Tables of every sheet in every case of its material, for each case of the bond and the fixed layers.

    Parameters
    ----------
    compiled : CompiledProblem
    materials : sequence of str
        Materials of the sheets and around them; a case of each makes a row of ``digits``.
    of_sheet : int64 (sheet,)
        Number of each sheet's material.
    deviations : mapping of str to sequence of Deviation
        Cases of the materials that vary.
    used : int64, optional
        Sheets that are needed; all when left out.
    """

    def __init__(
        self,
        compiled: CompiledProblem,
        materials: Sequence[str],
        of_sheet: Integers,
        deviations: Deviations,
        used: Integers | None = None,
    ) -> None:
        self.compiled, self.of_sheet, self.deviations = compiled, of_sheet, deviations
        around = [name for name in surroundings(compiled.problem) if name in deviations]
        self.around = {name: materials.index(name) for name in around}
        self.offset = np.zeros(len(compiled.sheets), dtype=np.int64)
        sheets: list[Sheet] = []
        for index in range(len(compiled.sheets)) if used is None else used:
            sheet = compiled.sheets[index]
            cases = deviations.get(sheet.material)
            self.offset[index] = len(sheets)
            sheets += [sheet] if cases is None else [varied_sheet(sheet, *case) for case in enumerate(cases)]
        self.sheets = tuple(sheets)
        self._tables: dict[tuple[int, ...], CompiledProblem] = {}

    def margins(self, codes: Integers, digits: Integers) -> tuple[Real, Integers]:
        """Smallest margins, dB, and their rows, of pairs of a stack and a case.

        Parameters
        ----------
        codes : int64 (pair, position)
            Stacks as codes of the nominal sheets.
        digits : int64 (pair, material)
            Case of each material; anything, where a stack does not hold it.
        """
        material = np.where(codes > 0, self.of_sheet[codes - 1], 0)
        varied = self.offset[codes - 1] + np.take_along_axis(digits, material, axis=1) + 1
        varied = np.where(codes > 0, varied, 0)
        around, kind = np.unique(np.maximum(digits[:, list(self.around.values())], 0), axis=0, return_inverse=True)
        margin, row = np.empty(len(codes)), np.empty(len(codes), dtype=np.int64)
        for number, case in enumerate(around.tolist()):
            mine = np.flatnonzero(kind.ravel() == number)
            tables = self._tabulated(tuple(case))
            for start in range(0, len(mine), BATCH):
                part = mine[start : start + BATCH]
                margin[part], row[part] = evaluate.margins(tables, varied[part])
        return margin, row

    def _tabulated(self, around: tuple[int, ...]) -> CompiledProblem:
        if around not in self._tables:
            cases = dict(zip(self.around, around, strict=True))
            problem = varied_problem(self.compiled.problem, self.deviations, cases)
            self._tables[around] = self.compiled.varied(problem, self.sheets)
        return self._tables[around]
