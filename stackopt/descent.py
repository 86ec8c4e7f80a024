"""Compiled depth-first descent over all stacks below a prefix: the inner loop of the proof. Arrays in, arrays out.

A *node* is a prefix; opening it looks at every stack that is one sheet longer (its children). Three cuts, all exact:

rule
    a child beyond a limit, or against a neighbour rule, is out. Limits only tighten as sheets are added, so a sheet that
    breaks one stays out of everything below; a neighbour rule does not, so that such a sheet is tried again deeper.
covered
    a child whose sums a known feasible stack does not exceed in any objective is out, and that sheet with it below:
    objectives never shrink as sheets are added. A feasible child becomes known and is out by the same argument. The
    question goes to a `Cover`, which may answer no where the truth is yes (that costs time, not truth), never the
    other way round.
mirror
    where a stack and its mirror image are equally good and equally allowed, a child is judged only if its last sheet's
    number is not below its first's; of every mirror pair at least one is.

Rows are tried in the order that rejected most so far, and a prefix's row vectors (`stackopt.kernel`) are computed row
by row, only when a row is first asked for. The last sheet is never multiplied on: z = p alpha + q beta, with
alpha = (A + B e)/w and beta = (C + D e)/w tabulated with the sheets of a row side by side, so that judging all children
in one row reads a few kilobytes in order.
"""

from __future__ import annotations

import math

import numpy as np
from numba import njit

from stackopt.blocks import CLOSING, LANES, SHEET, STATE, TOTAL
from stackopt.kernel import DB, open_level
from stackopt.lanes import close_block, multiply_block

CELLS = 192
"""Steps of a cover along each of its two stepped objectives."""
UNCOVERED = np.iinfo(np.int64).max


@njit(cache=True, nogil=True, inline="always")
def is_covered(cover, step, a, b, c, sheets):  # type: ignore[no-untyped-def]
    """Whether a known stack is no worse; certain if true. ``cover`` (levels, CELLS, CELLS) holds the least c."""
    level = min(sheets, cover.shape[0] - 1)
    i = min(a // step[0], CELLS - 1)
    j = min(b // step[1], CELLS - 1)
    return cover[level, i, j] <= c


@njit(cache=True, nogil=True)
def add_to_cover(cover, step, a, b, c, sheets):  # type: ignore[no-untyped-def]
    """Enter a known stack in a cover."""
    level = sheets if cover.shape[0] > 1 else 0
    for n in range(level, cover.shape[0]):
        for i in range(-(-a // step[0]), CELLS):
            for j in range(-(-b // step[1]), CELLS):
                if c < cover[n, i, j]:
                    cover[n, i, j] = c


@njit(cache=True, nogil=True, inline="always")
def _row_state(depth, row, path, state, scale, valid, first, following, first_scale, following_scale, row_block):  # type: ignore[no-untyped-def]
    """Bring the row vectors of a row up to the prefix of the given depth; ``state`` is flat, (depth, K * STATE)."""
    blocks = row_block[-1]
    begin, end = row_block[row], row_block[row + 1]
    have = depth
    while valid[have, row] == 0:
        have -= 1
    for d in range(have + 1, depth + 1):
        sheet = path[d - 1]
        old, new = (d - 1) * blocks, d * blocks
        at = sheet * blocks
        if d == 1:
            for block in range(begin, end):
                multiply_block(first, (at + block) * SHEET, state, (old + block) * STATE, state, (new + block) * STATE)
            scale[d, row] = scale[d - 1, row] + first_scale[sheet, row]
        else:
            for block in range(begin, end):
                multiply_block(
                    following, (at + block) * SHEET, state, (old + block) * STATE, state, (new + block) * STATE
                )
            scale[d, row] = scale[d - 1, row] + following_scale[sheet, row]
        valid[d, row] = 1


@njit(cache=True, nogil=True)
def descend(  # type: ignore[no-untyped-def]
    prefix,
    recurse,
    stop,
    # the problem
    sums_first,
    sums_following,
    limits,
    may_first,
    may_last,
    may_touch,
    max_sheets,
    axes,
    mirror,
    # the physics
    first,
    following,
    first_scale,
    following_scale,
    closing_first,
    closing_following,
    row_block,
    start,
    fixed_scale,
    coefficients,
    highest,
    reach,
    thickest,
    required,
    # what is known
    cover,
    step,
    keep_all,
    room,
    # what is learnt
    row_order,
    counters,
):
    """Open a prefix and, if asked to, everything below it.

    Parameters
    ----------
    prefix : int64 (depth,)
        Sheet numbers from 0; the prefix itself is known to be neither covered nor feasible.
    recurse : bool
        Whether to go on below the children.
    stop : uint8 (1,)
        Set by another thread to make this one return at once, unfinished.
    sums_first, sums_following : int64 (S, 3)
        What a sheet adds to mass, cost and thickness, bare and behind a bond.
    limits : int64 (3,)
    may_first, may_last : bool (S,)
    may_touch : bool (S, S)
    axes : int64 (3,)
        Which of the sums are the cover's a, b and c; -1 for none.
    mirror : bool
        Whether mirror images may be skipped.
    first ... coefficients
        See `stackopt.kernel`.
    closing_first, closing_following : float64
        alpha and beta of every sheet, rows outermost, then sheets, then blocks.
    highest, reach, required : float64 (R,)
        Upper bound of the unshielded level, dB; scale of the stack thickness, m; required attenuation, dB.
    thickest : float
        Thickness at which the unshielded level's range ends, m.
    cover, step : int64 (levels, CELLS, CELLS), int64 (2,)
        Known stacks; grows as stacks are found, unless ``keep_all``.
    keep_all : bool
        Collect every feasible stack that is not covered, and go on below it too.
    room : int
        Largest number of stacks to collect before returning unfinished.
    row_order : int64 (R,)
        Order in which rows are tried; adapted in place.
    counters : int64 (2,)
        Prefixes opened and children judged; added to.

    Returns
    -------
    found : int64 (stacks, max_sheets)
        Codes (sheet number + 1) of the feasible stacks met.
    finished : bool
    """
    sheets = sums_first.shape[0]
    rows = row_block.size - 1
    blocks = row_block[rows]
    base = prefix.size
    path = np.zeros(max_sheets + 1, np.int64)
    totals = np.zeros((max_sheets + 1, 3), np.int64)
    state = np.empty((max_sheets + 1) * blocks * STATE)
    scale = np.zeros((max_sheets + 1, rows))
    valid = np.zeros((max_sheets + 1, rows), np.uint8)
    # Sheets that may still be added at or below a depth, and those still to be descended into.
    usable = np.empty((max_sheets + 1, sheets), np.int64)
    usable_count = np.zeros(max_sheets + 1, np.int64)
    branch = np.empty((max_sheets + 1, sheets), np.int64)
    branch_count = np.zeros(max_sheets + 1, np.int64)
    alive = np.empty(sheets, np.int64)
    dead = np.empty(sheets, np.uint8)
    total = np.empty(TOTAL)
    found = np.empty((64, max_sheets), np.int64)
    found_count = 0

    state[: blocks * STATE] = start
    scale[0] = fixed_scale
    valid[0] = 1
    for d in range(base):
        path[d] = prefix[d]
        for axis in range(3):
            added = sums_first[prefix[d], axis] if d == 0 else sums_following[prefix[d], axis]
            totals[d + 1, axis] = totals[d, axis] + added
    depth = base
    for s in range(sheets):
        usable[depth, s] = s
    usable_count[depth] = sheets
    opening = True
    while True:
        if opening:
            opening = False
            if stop[0] != 0:
                return found[:found_count], False
            counters[0] += 1
            added = sums_first if depth == 0 else sums_following
            last_level = depth + 1 == max_sheets
            # Candidates: sheets that no limit and no known stack rule out here.
            kept = 0
            judged = 0
            for n in range(usable_count[depth]):
                s = usable[depth, n]
                mass = totals[depth, 0] + added[s, 0]
                cost = totals[depth, 1] + added[s, 1]
                thickness = totals[depth, 2] + added[s, 2]
                if mass > limits[0] or cost > limits[1] or thickness > limits[2]:
                    continue
                a = 0
                b = 0
                c = 0
                if axes[0] >= 0:
                    a = totals[depth, axes[0]] + added[s, axes[0]]
                if axes[1] >= 0:
                    b = totals[depth, axes[1]] + added[s, axes[1]]
                if axes[2] >= 0:
                    c = totals[depth, axes[2]] + added[s, axes[2]]
                if is_covered(cover, step, a, b, c, depth + 1):
                    continue
                usable[depth, kept] = s
                kept += 1
                dead[s] = 0
                here = may_first[s] if depth == 0 else may_touch[path[depth - 1], s]
                if not here:
                    dead[s] = 2
                elif may_last[s] and not (mirror and depth > 0 and s < path[0]):
                    alive[judged] = s
                    judged += 1
            usable_count[depth] = kept
            counters[1] += judged
            # Judge them row by row; most fall in the first row tried.
            closing = closing_first if depth == 0 else closing_following
            added_scale = first_scale if depth == 0 else following_scale
            for position in range(rows):
                if judged == 0:
                    break
                row = row_order[position]
                _row_state(
                    depth, row, path, state, scale, valid,
                    first, following, first_scale, following_scale, row_block,
                )  # fmt: skip
                begin, end = row_block[row], row_block[row + 1]
                width = end - begin
                at_state = (depth * blocks + begin) * STATE
                at_row = begin * sheets * CLOSING
                span = math.log1p(thickest / reach[row])
                surviving = 0
                for n in range(judged):
                    s = alive[n]
                    for i in range(TOTAL):
                        total[i] = 0.0
                    at = at_row + s * width * CLOSING
                    for block in range(width):
                        close_block(closing, at + block * CLOSING, state, at_state + block * STATE, total)
                    re = 0.0
                    im = 0.0
                    for lane in range(LANES):
                        re += total[lane]
                        im += total[LANES + lane]
                    level = DB * (scale[depth, row] + added_scale[s, row]) - 0.5 * DB * math.log(re * re + im * im)
                    if level + highest[row] < required[row]:
                        continue  # fails at any thickness
                    thickness = (totals[depth, 2] + added[s, 2]) * 1e-12
                    x = 2.0 * math.log1p(thickness / reach[row]) / span - 1.0
                    if level + open_level(coefficients, row, x) < required[row]:
                        continue
                    alive[surviving] = s
                    surviving += 1
                if surviving < judged and position > 0:
                    row_order[position] = row_order[position - 1]
                    row_order[position - 1] = row
                judged = surviving
            # What is left is feasible.
            for n in range(judged):
                s = alive[n]
                if not keep_all:
                    dead[s] = 1
                a = 0
                b = 0
                c = 0
                if axes[0] >= 0:
                    a = totals[depth, axes[0]] + added[s, axes[0]]
                if axes[1] >= 0:
                    b = totals[depth, axes[1]] + added[s, axes[1]]
                if axes[2] >= 0:
                    c = totals[depth, axes[2]] + added[s, axes[2]]
                if not keep_all:
                    if is_covered(cover, step, a, b, c, depth + 1):
                        continue
                    add_to_cover(cover, step, a, b, c, depth + 1)
                if found_count == room:
                    return found[:found_count], False
                if found_count == found.shape[0]:
                    larger = np.empty((2 * found_count, max_sheets), np.int64)
                    larger[:found_count] = found
                    found = larger
                for d in range(max_sheets):
                    found[found_count, d] = path[d] + 1 if d < depth else 0
                found[found_count, depth] = s + 1
                found_count += 1
            branch_count[depth] = 0
            if recurse and not last_level:
                usable_kept = 0
                for n in range(usable_count[depth]):
                    s = usable[depth, n]
                    if dead[s] == 1:
                        continue
                    usable[depth, usable_kept] = s
                    usable_kept += 1
                    if dead[s] == 0:
                        branch[depth, branch_count[depth]] = s
                        branch_count[depth] += 1
                usable_count[depth] = usable_kept
        # Go to the next child, or back up.
        if branch_count[depth] == 0:
            if depth == base:
                break
            depth -= 1
            continue
        branch_count[depth] -= 1
        s = branch[depth, branch_count[depth]]
        added = sums_first if depth == 0 else sums_following
        for axis in range(3):
            totals[depth + 1, axis] = totals[depth, axis] + added[s, axis]
        path[depth] = s
        a = totals[depth + 1, axes[0]] if axes[0] >= 0 else 0
        b = totals[depth + 1, axes[1]] if axes[1] >= 0 else 0
        c = totals[depth + 1, axes[2]] if axes[2] >= 0 else 0
        if is_covered(cover, step, a, b, c, depth + 1):
            continue  # a stack found since covers it
        for n in range(usable_count[depth]):
            usable[depth + 1, n] = usable[depth, n]
        usable_count[depth + 1] = usable_count[depth]
        depth += 1
        valid[depth] = 0
        opening = True
    return found[:found_count], True
