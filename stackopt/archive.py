"""Exact, unbounded set of non-dominated stacks over integer objectives (all minimised).

One entry per distinct objective vector; of stacks with equal vectors the one that comes first in the order of its codes
stays, so that the content does not depend on the order of arrival.
"""

from __future__ import annotations

import numpy as np
from numpy.typing import NDArray

Integers = NDArray[np.int64]
Booleans = NDArray[np.bool_]

_CHUNK = 256  # vectors compared with a whole front at a time, to bound memory


class Archive:
    """Non-dominated stacks seen so far.

    Parameters
    ----------
    objectives : int
        Number of objectives.
    positions : int
        Length of a stack's code.
    """

    def __init__(self, objectives: int, positions: int) -> None:
        self.values: Integers = np.empty((0, objectives), dtype=np.int64)
        """Objective vectors, shape (member, objective), in rising order."""
        self.codes: Integers = np.empty((0, positions), dtype=np.int64)
        """Codes of the stacks, shape (member, position)."""

    def __len__(self) -> int:
        return len(self.values)

    def copy(self) -> Archive:
        """Return an independent archive with the same members."""
        twin = Archive(self.values.shape[1], self.codes.shape[1])
        twin.values, twin.codes = self.values, self.codes
        return twin

    def covers(self, values: Integers) -> Booleans:
        """Whether a member is no worse in every objective than each of the vectors, equality included.

        Parameters
        ----------
        values : int64, shape (stack, objective)

        Returns
        -------
        bool, shape (stack,)
        """
        return _covered(values, self.values)

    def dominates(self, values: Integers) -> Booleans:
        """Whether a member is no worse in every objective than each of the vectors, and better in one; see `covers`."""
        return _strictly_covered(values, self.values)

    def add(self, values: Integers, codes: Integers) -> int:
        """Add feasible stacks; return how many objective vectors the archive gained.

        Parameters
        ----------
        values : int64, shape (stack, objective)
        codes : int64, shape (stack, position)
        """
        worth = ~_strictly_covered(values, self.values)
        values, codes = values[worth], codes[worth]
        if len(values) == 0:
            return 0
        merged = np.concatenate([self.values, values])
        stacks = np.concatenate([self.codes, codes])
        order = np.lexsort((*stacks.T[::-1], *merged.T[::-1]))
        merged, stacks = merged[order], stacks[order]
        distinct = np.append(True, np.any(merged[1:] != merged[:-1], axis=1))
        merged, stacks = merged[distinct], stacks[distinct]
        keep = non_dominated(merged)
        before = self.values
        self.values, self.codes = merged[keep], stacks[keep]
        return int(np.count_nonzero(~_covered(self.values, before)))


def non_dominated(values: Integers) -> Booleans:
    """Mark the vectors that no other vector dominates; equal vectors do not dominate each other.

    Parameters
    ----------
    values : int64, shape (vector, objective)

    Returns
    -------
    bool, shape (vector,)

    Examples
    --------
    >>> non_dominated(np.array([[1, 4], [2, 2], [2, 5], [2, 2]])).tolist()
    [True, True, False, True]
    """
    return ~_strictly_covered(values, values)


def _covered(values: Integers, front: Integers) -> Booleans:
    result = np.zeros(len(values), dtype=bool)
    if len(front):
        for start in range(0, len(values), _CHUNK):
            result[start : start + _CHUNK] = np.any(_no_worse(values[start : start + _CHUNK], front), axis=1)
    return result


def _strictly_covered(values: Integers, front: Integers) -> Booleans:
    result = np.zeros(len(values), dtype=bool)
    for start in range(0, len(values), _CHUNK):
        part = values[start : start + _CHUNK]
        # An integer sum tells "no worse and somewhere better" from "equal".
        better = front.sum(axis=1)[None, :] < part.sum(axis=1)[:, None]
        result[start : start + _CHUNK] = np.any(_no_worse(part, front) & better, axis=1)
    return result


def _no_worse(values: Integers, front: Integers) -> Booleans:
    """Matrix (vector, member): the member is no worse than the vector in every objective."""
    result = front[None, :, 0] <= values[:, None, 0]
    for objective in range(1, values.shape[1]):
        result &= front[None, :, objective] <= values[:, None, objective]
    return np.asarray(result)
