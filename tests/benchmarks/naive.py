"""A plain depth-first enumeration, the floor that the proof is measured against.

Every prefix is extended by one sheet in all rows and lines with complex numbers, judged row by row in rising frequency,
and cut where a known feasible stack dominates it; nothing else. No bonds, face or neighbour rules.
"""

from __future__ import annotations

import math

import numpy as np
from numba import njit
from numpy.typing import NDArray

from stackopt.blocks import LANES, unpack_blocks
from stackopt.compiled import CompiledProblem
from stackopt.kernel import DB, open_level

Integers = NDArray[np.int64]


def enumerate_front(compiled: CompiledProblem) -> tuple[Integers, int]:
    """Front over mass, cost and thickness, shape (member, 3), and how many prefixes were opened."""
    rows = compiled.rows
    sheets = len(compiled.sheets)
    shape = (sheets, len(rows.required_db), -1)
    a, b, c, d = (entry.reshape(shape) for entry in unpack_blocks(compiled.tables.first, sheets, 4))
    w, e = (entry.reshape(shape[1:]) for entry in unpack_blocks(rows.ending, 1, 2))
    assert np.all(np.diff(rows.row_block) == a.shape[2] // LANES)
    start = unpack_blocks(rows.start, 1, 2).reshape(2, *shape[1:])
    return _enumerate(
        a, b, c, d, w, e, start, compiled.tables.first_scale, rows.fixed_scale, rows.open_coefficients, rows.reach_m,
        rows.thickest_m, rows.required_db, compiled.sums.first, compiled.rules.limits, compiled.rules.max_sheets,
    )  # fmt: skip


@njit(cache=True)
def _enumerate(
    a, b, c, d, w, e, start, sheet_scale, fixed_scale, coefficients, reach, thickest, required, sums, limits, max_sheets
):
    sheets, rows, lines = a.shape
    p = np.empty((max_sheets + 1, rows, lines), np.complex128)
    q = np.empty((max_sheets + 1, rows, lines), np.complex128)
    p[0], q[0] = start[0], start[1]
    scale = np.zeros((max_sheets + 1, rows))
    scale[0] = fixed_scale
    totals = np.zeros((max_sheets + 1, 3), np.int64)
    front = np.empty((4096, 3), np.int64)
    size = 0
    path = np.full(max_sheets + 1, -1, np.int64)
    depth = 0
    opened = 0
    while depth >= 0:
        path[depth] += 1
        if path[depth] == sheets:
            depth -= 1
            continue
        s = path[depth]
        cut = False
        for axis in range(3):
            totals[depth + 1, axis] = totals[depth, axis] + sums[s, axis]
            cut = cut or totals[depth + 1, axis] > limits[axis]
        for n in range(size):
            worse = True
            for axis in range(3):
                worse = worse and front[n, axis] <= totals[depth + 1, axis]
            if worse:
                cut = True
                break
        if cut:
            continue
        opened += 1
        for r in range(rows):
            scale[depth + 1, r] = scale[depth, r] + sheet_scale[s, r]
            for i in range(lines):
                old_p, old_q = p[depth, r, i], q[depth, r, i]
                p[depth + 1, r, i] = old_p * a[s, r, i] + old_q * c[s, r, i]
                q[depth + 1, r, i] = old_p * b[s, r, i] + old_q * d[s, r, i]
        feasible = True
        for r in range(rows):
            total = 0j
            for i in range(lines):
                total += w[r, i] / (p[depth + 1, r, i] + q[depth + 1, r, i] * e[r, i])
            x = 2.0 * math.log1p(totals[depth + 1, 2] * 1e-12 / reach[r]) / math.log1p(thickest / reach[r]) - 1.0
            level = open_level(coefficients, r, x) - DB * math.log(abs(total)) + DB * scale[depth + 1, r]
            if level < required[r] - 1e-9:
                feasible = False
                break
        if feasible:
            kept = 0
            for n in range(size):
                beaten = True
                for axis in range(3):
                    beaten = beaten and totals[depth + 1, axis] <= front[n, axis]
                if not beaten:
                    front[kept] = front[n]
                    kept += 1
            front[kept] = totals[depth + 1]
            size = kept + 1
        elif depth + 1 < max_sheets:
            path[depth + 1] = -1
            depth += 1
    return front[:size], opened
