"""Compiled depth-first descent over all stacks below some prefixes: the inner loop of the proof. Arrays in, arrays out.

A *node* is a prefix; opening it looks at every stack that is one sheet longer (its children). Three cuts, all exact:

rule
    a child beyond a limit, or against a neighbour rule, is out. Sums only grow as sheets are added, so a sheet that
    breaks a limit stays out of everything below; a neighbour rule is another matter at another place, so that such a
    sheet is tried again deeper.
covered
    a child whose objectives a known feasible stack does not exceed is out, and that sheet with it everywhere below:
    objectives never shrink as sheets are added. A feasible child becomes known, and is out by the same argument. The
    question goes to a `Cover`, which may answer no where the truth is yes (that costs time, not truth), never the
    other way round.
mirror
    where a stack and its mirror image are equally good and equally allowed, a child is judged only if its last sheet's
    number is not below its first's; of every mirror pair at least one is.

Rows are tried in the order that rejected most so far, and a prefix's row vectors (`stackopt.kernel`) are computed row
by row, only when a row is first asked for. The last sheet is never multiplied on: z = p alpha + q beta, with
alpha = (A + B e)/w and beta = (C + D e)/w tabulated with the sheets of a row side by side, so that judging all children
in one row reads a few kilobytes in order.

A descent ends when it has done a given amount of work and hands back the prefixes that it did not open; with those it
can be continued, in parts, by others. *Work* is counted in blocks multiplied or closed, so that it does not depend on
the clock.
"""

from __future__ import annotations

import math
from typing import Any, NamedTuple

import numpy as np
from numba import njit

from stackopt.blocks import CLOSING, LANES, SHEET, STATE, TOTAL
from stackopt.kernel import DB, open_level
from stackopt.lanes import close_block, multiply_block

CELLS = 192
"""Steps of a cover along each of its first two objectives."""
UNCOVERED = np.iinfo(np.int64).max

_NODE_WORK, _CHILD_WORK, _MULTIPLIED_WORK = 20, 1, 4  # in units of a closed block: roughly equal times
_OPEN, _OUT, _NOT_HERE = 0, 1, 2  # fates of a child: to be gone into, settled, against a rule in this place only


class Rules(NamedTuple):
    """What is allowed, S sheets. The three sums stand in the order of the cover's objectives, unused ones last."""

    sums: Any
    """int64 (2, S, 3), what a sheet adds: bare, and behind a bond."""
    limits: Any
    """int64 (3,)"""
    used: Any
    """int64 (3,), 1 where a sum is an objective and 0 elsewhere."""
    thickness: int
    """Which of the sums is the thickness."""
    may_first: Any
    """bool (S,)"""
    may_last: Any
    """bool (S,)"""
    may_touch: Any
    """bool (S, S), source side first."""
    max_sheets: int
    mirror: bool
    """Whether mirror images may be skipped."""


class Physics(NamedTuple):
    """Tables of the kernel (`stackopt.kernel`), K blocks, R rows; bare sheets first, those behind a bond after them."""

    table: Any
    """float64 (S * K * SHEET,), or twice that where there is a bond."""
    closing: Any
    """float64 (S * K * CLOSING,), or twice that: alpha and beta, rows outermost, then sheets, then blocks."""
    bonded: int
    """Sheets to skip in ``table`` and ``closing`` to reach those behind a bond: S, or 0 where there is no bond."""
    scale: Any
    """float64 (2, S, R)"""
    row_block: Any
    """int64 (R + 1,)"""
    start: Any
    """float64 (K * STATE,)"""
    fixed_scale: Any
    """float64 (R,)"""
    coefficients: Any
    """float64 (R, C), Chebyshev coefficients of the unshielded level, dB."""
    highest: Any
    """float64 (R,), upper bound of the unshielded level, dB."""
    reach: Any
    """float64 (R,), scale of the stack thickness, m."""
    thickest: float
    """Where the unshielded level's range ends, m."""
    required: Any
    """float64 (R,), dB."""


class Cover(NamedTuple):
    """Known feasible stacks: the least third objective up to each step of the first two, for each number of sheets."""

    least: Any
    """int64 (levels, CELLS, CELLS); one level where the number of sheets is no objective."""
    shift: Any
    """int64 (2,), a step being 2**shift."""


# The helpers take plain arrays: passing the tuples on, or choosing between two arrays, would count references in every
# step, which costs more than the arithmetic and stalls threads that share the tables.


@njit(cache=True, nogil=True)
def _is_covered(least, shift, used, a, b, c, sheets):  # type: ignore[no-untyped-def]
    level = min(sheets, least.shape[0] - 1)
    i = min((a * used[0]) >> shift[0], CELLS - 1)
    j = min((b * used[1]) >> shift[1], CELLS - 1)
    return least[level, i, j] <= c * used[2]


@njit(cache=True, nogil=True)
def _add_to_cover(least, shift, used, a, b, c, sheets):  # type: ignore[no-untyped-def]
    lowest = sheets if least.shape[0] > 1 else 0
    # A cell stands for its lower corner, so that a stack counts from the cell above its own.
    for level in range(lowest, least.shape[0]):
        for i in range((a * used[0] + (1 << shift[0]) - 1) >> shift[0], CELLS):
            for j in range((b * used[1] + (1 << shift[1]) - 1) >> shift[1], CELLS):
                least[level, i, j] = min(least[level, i, j], c * used[2])


@njit(cache=True, nogil=True)
def _add_sheet(sums, path, totals, valid, depth, sheet):  # type: ignore[no-untyped-def]
    path[depth] = sheet
    for axis in range(3):
        totals[depth + 1, axis] = totals[depth, axis] + sums[min(depth, 1), sheet, axis]
    for row in range(valid.shape[1]):
        valid[depth + 1, row] = 0


@njit(cache=True, nogil=True)
def _choose_children(  # type: ignore[no-untyped-def]
    sums, limits, used, may_first, may_last, may_touch, mirror, least, shift,
    path, totals, usable, usable_count, alive, fate, depth,
):  # fmt: skip
    """Drop the sheets that no stack below may use, and list the children to be judged in ``alive``; return how many."""
    bonded = min(depth, 1)
    kept = 0
    judged = 0
    for n in range(usable_count[depth]):
        s = usable[depth, n]
        a = totals[depth, 0] + sums[bonded, s, 0]
        b = totals[depth, 1] + sums[bonded, s, 1]
        c = totals[depth, 2] + sums[bonded, s, 2]
        if a > limits[0] or b > limits[1] or c > limits[2]:
            continue
        if _is_covered(least, shift, used, a, b, c, depth + 1):
            continue
        usable[depth, kept] = s
        kept += 1
        here = may_first[s] if depth == 0 else may_touch[path[depth - 1], s]
        fate[s] = _OPEN if here else _NOT_HERE
        if here and may_last[s] and not (mirror and depth > 0 and s < path[0]):
            alive[judged] = s
            judged += 1
    usable_count[depth] = kept
    return judged


@njit(cache=True, nogil=True)
def _bring_up(table, bonded, scale, row_block, path, state, scales, valid, depth, row):  # type: ignore[no-untyped-def]
    """Compute the row vectors of a row up to the prefix of the given depth; return for how many prefixes it was new."""
    blocks = row_block[-1]
    have = depth
    while valid[have, row] == 0:
        have -= 1
    for d in range(have, depth):
        sheet = path[d] + (bonded if d > 0 else 0)
        for block in range(row_block[row], row_block[row + 1]):
            old, new = (d * blocks + block) * STATE, ((d + 1) * blocks + block) * STATE
            multiply_block(table, (sheet * blocks + block) * SHEET, state, old, state, new)
        scales[d + 1, row] = scales[d, row] + scale[min(d, 1), path[d], row]
        valid[d + 1, row] = 1
    return depth - have


@njit(cache=True, nogil=True)
def _judge_row(  # type: ignore[no-untyped-def]
    sums, thickness_axis, closing, bonded, scale, row_block, coefficients, highest, reach, thickest, required,
    totals, state, scales, alive, total, depth, row, judged,
):  # fmt: skip
    """Keep those children in ``alive`` that meet the mask in a row; return how many."""
    sheets, blocks = sums.shape[1], row_block[-1]
    begin, width = row_block[row], row_block[row + 1] - row_block[row]
    needed = required[row] - DB * scales[depth, row]
    at_state = (depth * blocks + begin) * STATE
    at_row = ((bonded * blocks if depth > 0 else 0) + begin * sheets) * CLOSING
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
        level = DB * scale[min(depth, 1), s, row] - 0.5 * DB * math.log(re * re + im * im)
        if level + highest[row] < needed:
            continue  # fails at any thickness
        thickness = (totals[depth, thickness_axis] + sums[min(depth, 1), s, thickness_axis]) * 1e-12
        x = 2.0 * math.log1p(thickness / reach[row]) / math.log1p(thickest / reach[row]) - 1.0
        if level + open_level(coefficients, row, x) < needed:
            continue
        alive[surviving] = s
        surviving += 1
    return surviving


@njit(cache=True, nogil=True)
def _list_branches(usable, usable_count, branch, branch_count, fate, depth):  # type: ignore[no-untyped-def]
    """List the children to go into, and drop the settled ones from what may be used below."""
    kept = 0
    branches = 0
    for n in range(usable_count[depth]):
        s = usable[depth, n]
        if fate[s] == _OUT:
            continue
        usable[depth, kept] = s
        kept += 1
        if fate[s] == _OPEN:
            branch[depth, branches] = s
            branches += 1
    usable_count[depth] = kept
    branch_count[depth] = branches


@njit(cache=True, nogil=True)
def _next_node(  # type: ignore[no-untyped-def]
    sums, used, least, shift, path, totals, valid, usable, usable_count, branch, branch_count, depth, base
):
    """Go to the next node to be opened; return its depth, or -1 when everything below the base is done."""
    while depth >= base:
        if branch_count[depth] == 0:
            depth -= 1
            continue
        branch_count[depth] -= 1
        _add_sheet(sums, path, totals, valid, depth, branch[depth, branch_count[depth]])
        a, b, c = totals[depth + 1, 0], totals[depth + 1, 1], totals[depth + 1, 2]
        if _is_covered(least, shift, used, a, b, c, depth + 1):
            continue  # by a stack found since
        for n in range(usable_count[depth]):
            usable[depth + 1, n] = usable[depth, n]
        usable_count[depth + 1] = usable_count[depth]
        break
    return depth + 1 if depth >= base else -1


@njit(cache=True, nogil=True)
def _longer(found, count):  # type: ignore[no-untyped-def]
    longer = np.empty((2 * count, found.shape[1]), np.int64)
    longer[:count] = found
    return longer


@njit(cache=True, nogil=True)
def _unopened(prefixes, number, path, branch, branch_count, base, depth):  # type: ignore[no-untyped-def]
    """Return the prefixes that were not opened: those before ``number``, branches, and the node at ``depth``."""
    count = number + (1 if depth >= 0 else 0)
    for d in range(base, depth):
        count += branch_count[d]
    left = np.zeros((count, prefixes.shape[1]), np.int64)
    at = number
    left[:at] = prefixes[:at]
    for d in range(base, depth):
        for n in range(branch_count[d]):
            for e in range(d):
                left[at, e] = path[e] + 1
            left[at, d] = branch[d, n] + 1
            at += 1
    if depth >= 0:
        for e in range(depth):
            left[at, e] = path[e] + 1
    return left


@njit(cache=True, nogil=True)
def descend(prefixes, rules, physics, cover, keep_all, room, work, row_order, counters):  # type: ignore[no-untyped-def]
    """Open prefixes and everything below them, until some work is done.

    Parameters
    ----------
    prefixes : int64 (prefixes, max_sheets)
        Codes (sheet number + 1), packed from the source side; the prefixes themselves are settled. The last is first.
    rules, physics, cover
        The cover grows as stacks are found, unless ``keep_all``.
    keep_all : bool
        Collect every feasible stack that is not covered, and go on below it too.
    room : int
        The descent also ends when it has found this many stacks, or up to the number of sheets more.
    work : int
        What to do at most, in blocks multiplied or closed; one prefix is opened in any case.
    row_order : int64 (R,)
        Order in which rows are tried; rows that reject move forward in it.
    counters : int64 (3,)
        Prefixes opened, children judged, and work; added to.

    Returns
    -------
    found : int64 (stacks, max_sheets)
        Codes of the feasible stacks met.
    left : int64 (prefixes, max_sheets)
        Prefixes that were not opened, to be gone on with in the same way.
    """
    sums, limits, used, thickness_axis, may_first, may_last, may_touch, max_sheets, mirror = rules
    table, closing, bonded, scale, row_block, start, fixed_scale = physics[:7]
    coefficients, highest, reach, thickest, required = physics[7:]
    least, shift = cover
    sheets, rows, deepest = sums.shape[1], required.size, max_sheets + 1
    # The prefix being looked at, by depth.
    path = np.zeros(deepest, np.int64)
    totals = np.zeros((deepest, 3), np.int64)
    state = np.empty(deepest * start.size)
    scales = np.zeros((deepest, rows))
    valid = np.zeros((deepest, rows), np.uint8)
    usable = np.empty((deepest, sheets), np.int64)
    usable_count = np.zeros(deepest, np.int64)
    branch = np.empty((deepest, sheets), np.int64)
    branch_count = np.zeros(deepest, np.int64)
    # Scratch of the node being opened.
    alive = np.empty(sheets, np.int64)
    fate = np.zeros(sheets, np.uint8)
    total = np.empty(TOTAL)
    found = np.empty((64, max_sheets), np.int64)
    count = 0
    opened = 0  # counted here and not in the array, whose cache line other threads may share
    asked = 0
    done = 0

    state[: start.size] = start
    scales[0] = fixed_scale
    valid[0] = 1
    base = depth = -1
    number = prefixes.shape[0]
    while number > 0 and depth < 0:
        number -= 1
        base = 0
        while base < max_sheets and prefixes[number, base] > 0:
            _add_sheet(sums, path, totals, valid, base, prefixes[number, base] - 1)
            base += 1
        depth = base
        if base > 0 and _is_covered(least, shift, used, totals[base, 0], totals[base, 1], totals[base, 2], base):
            depth = -1
            continue  # by a stack found since
        usable[base] = np.arange(sheets)
        usable_count[base] = sheets
        while depth >= 0 and (opened == 0 or (done < work and count < room)):
            done += _NODE_WORK + _CHILD_WORK * usable_count[depth]
            judged = _choose_children(
                sums, limits, used, may_first, may_last, may_touch, mirror, least, shift,
                path, totals, usable, usable_count, alive, fate, depth,
            )  # fmt: skip
            opened += 1
            asked += judged
            for position in range(rows):
                if judged == 0:
                    break
                row = row_order[position]
                width = row_block[row + 1] - row_block[row]
                new = _bring_up(table, bonded, scale, row_block, path, state, scales, valid, depth, row)
                surviving = _judge_row(
                    sums, thickness_axis, closing, bonded, scale, row_block, coefficients, highest, reach, thickest,
                    required, totals, state, scales, alive, total, depth, row, judged,
                )  # fmt: skip
                done += width * (judged + _MULTIPLIED_WORK * new)
                if surviving < judged and position > 0:
                    row_order[position] = row_order[position - 1]
                    row_order[position - 1] = row
                judged = surviving
            for n in range(judged):  # the feasible ones
                s = alive[n]
                if not keep_all:
                    fate[s] = _OUT
                    a = totals[depth, 0] + sums[min(depth, 1), s, 0]
                    b = totals[depth, 1] + sums[min(depth, 1), s, 1]
                    c = totals[depth, 2] + sums[min(depth, 1), s, 2]
                    _add_to_cover(least, shift, used, a, b, c, depth + 1)
                if count == found.shape[0]:
                    found = _longer(found, count)
                for d in range(max_sheets):
                    found[count, d] = path[d] + 1 if d < depth else 0
                found[count, depth] = s + 1
                count += 1
            branch_count[depth] = 0
            if depth + 1 < max_sheets:
                _list_branches(usable, usable_count, branch, branch_count, fate, depth)
            depth = _next_node(
                sums, used, least, shift, path, totals, valid, usable, usable_count, branch, branch_count, depth, base
            )
    left = _unopened(prefixes, number, path, branch, branch_count, base, depth)
    counters[0] += opened
    counters[1] += asked
    counters[2] += done
    return found[:count], left
