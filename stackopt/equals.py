"""All stacks that reach exactly the objectives of a front's rows: other orders, and other sheets with the same sums.

Sums do not depend on the order of the sheets, so the search runs over multisets of sheets; every order of a multiset
that matches is then judged.
"""

from __future__ import annotations

from collections.abc import Iterator
from itertools import permutations

import numpy as np
from numba import njit
from numpy.typing import NDArray

from stackopt import demands, evaluate
from stackopt.compiled import MARGIN_SLACK_DB, CompiledProblem

Integers = NDArray[np.int64]

_BATCH = 20_000


def equal_stacks(compiled: CompiledProblem, values: Integers) -> tuple[Integers, Integers]:
    """Find every allowed and feasible stack whose objectives equal one of the given vectors.

    Parameters
    ----------
    compiled : CompiledProblem
        With objectives among mass, cost, thickness and sheets.
    values : int64, shape (row, objective)

    Returns
    -------
    rows : int64, shape (stack,)
        Number of the vector that each stack equals.
    codes : int64, shape (stack, position)
    """
    rows: list[Integers] = [np.empty(0, dtype=np.int64)]
    codes: list[Integers] = [np.empty((0, compiled.rules.max_sheets), dtype=np.int64)]
    number = {vector.tobytes(): n for n, vector in enumerate(np.ascontiguousarray(values))}
    for batch in _batches(_orders(_multisets(compiled, values)), _BATCH):
        totals = evaluate.sums(compiled, batch)
        batch = batch[evaluate.allowed(compiled, batch, totals)]
        margin, _ = evaluate.margins(compiled, batch)
        batch = batch[margin >= -MARGIN_SLACK_DB]
        batch = batch[demands.met(compiled, batch)]
        vectors = evaluate.objective_values(compiled, batch, evaluate.sums(compiled, batch))
        rows.append(np.array([number[vector.tobytes()] for vector in vectors], dtype=np.int64))
        codes.append(batch)
    return np.concatenate(rows), np.concatenate(codes)


def _multisets(compiled: CompiledProblem, values: Integers) -> Integers:
    names = compiled.problem.search.objectives
    ones = np.ones((len(compiled.sheets), 1), dtype=np.int64)
    first = np.concatenate([compiled.sums.first, ones], axis=1)
    following = np.concatenate([compiled.sums.following, ones], axis=1)
    axes = [("mass", "cost", "thickness", "sheets").index(name) for name in names]
    return np.asarray(
        _matching(
            np.ascontiguousarray(first[:, axes]),
            np.ascontiguousarray(following[:, axes]),
            np.ascontiguousarray(values),
            compiled.rules.max_sheets,
        )
    )


def _orders(multisets: Integers) -> Iterator[tuple[int, ...]]:
    width = multisets.shape[1]
    for row in multisets.tolist():
        used = [code for code in row if code > 0]
        for order in sorted(set(permutations(used))):
            yield order + (0,) * (width - len(used))


def _batches(stacks: Iterator[tuple[int, ...]], size: int) -> Iterator[Integers]:
    batch: list[tuple[int, ...]] = []
    for stack in stacks:
        batch.append(stack)
        if len(batch) == size:
            yield np.array(batch, dtype=np.int64)
            batch = []
    if batch:
        yield np.array(batch, dtype=np.int64)


@njit(cache=True, nogil=True)
def _matching(first, following, targets, max_sheets):  # type: ignore[no-untyped-def]
    """Codes of all multisets (rising sheet numbers) whose sums equal a target, shape (multiset, max_sheets)."""
    sheets, axes = first.shape
    path = np.full(max_sheets + 1, -1, np.int64)
    totals = np.zeros((max_sheets + 1, axes), np.int64)
    found = np.empty((64, max_sheets), np.int64)
    count = 0
    depth = 0
    while depth >= 0:
        # Advance the sheet at this depth; sheets never fall along a path.
        path[depth] += 1
        if path[depth] == sheets:
            depth -= 1
            continue
        s = path[depth]
        for axis in range(axes):
            # The sum of a multiset is the same whichever sheet goes without a bond: first and following differ by it.
            added = first[s, axis] if depth == 0 else following[s, axis]
            totals[depth + 1, axis] = totals[depth, axis] + added
        reachable = False
        equal = False
        for n in range(targets.shape[0]):
            below = True
            same = True
            for axis in range(axes):
                below = below and totals[depth + 1, axis] <= targets[n, axis]
                same = same and totals[depth + 1, axis] == targets[n, axis]
            reachable = reachable or below
            if same:
                equal = True
                break
        if equal:
            if count == found.shape[0]:
                larger = np.empty((2 * count, max_sheets), np.int64)
                larger[:count] = found
                found = larger
            for d in range(max_sheets):
                found[count, d] = path[d] + 1 if d <= depth else 0
            count += 1
        if (reachable or equal) and depth + 1 < max_sheets:
            path[depth + 1] = s - 1
            depth += 1
    return found[:count]
