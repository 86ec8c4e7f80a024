"""Layout of the flat tables: spectral lines in blocks of `LANES`, each block as consecutive planes.

A block of a table with n complex entries per line is 2 n planes of `LANES` numbers: the real parts of the first entry,
its imaginary parts, the real parts of the second, and so on. Every row starts a new block; lanes that a row does not
use hold values that add nothing to a sum.
"""

from __future__ import annotations

import numpy as np
from numpy.typing import NDArray

Complex = NDArray[np.complex128]
Real = NDArray[np.float64]

LANES = 4
"""Spectral lines in a block."""
STATE = 4 * LANES
"""Numbers in a block of a row vector: planes of p and q."""
SHEET = 8 * LANES
"""Numbers in a block of a sheet: planes of A, B, C and D."""
ENDING = 4 * LANES
"""Numbers in a block of the ending: planes of the weight w and the ratio e."""
CLOSING = 4 * LANES
"""Numbers in a block of a closing sheet: planes of alpha and beta."""
TOTAL = 2 * LANES
"""Numbers in an accumulator: planes of one complex number."""


def count_blocks(lines: int) -> int:
    """Number of blocks that a row of the given number of lines takes.

    Examples
    --------
    >>> count_blocks(12), count_blocks(1)
    (3, 1)
    """
    return -(-lines // LANES)


def pack_blocks(*entries: tuple[Complex, float]) -> Real:
    """Arrange entries, each a pair of values of shape (frequency, line) and what its unused lanes hold, in blocks."""
    frequencies, count = entries[0][0].shape
    per_row = count_blocks(count)
    planes = np.zeros((2 * len(entries), frequencies, per_row * LANES))
    for number, (entry, unused) in enumerate(entries):
        planes[2 * number, :, count:] = unused
        planes[2 * number, :, :count] = entry.real
        planes[2 * number + 1, :, :count] = entry.imag
    return planes.reshape(-1, frequencies, per_row, LANES).transpose(1, 2, 0, 3).reshape(-1)


def unpack_blocks(flat: Real, tables: int, entries: int) -> Complex:
    """Undo `pack_blocks` for tables one after the other: shape (entry, table, line), unused lanes included."""
    planes = flat.reshape(tables, -1, 2 * entries, LANES).transpose(2, 0, 1, 3).reshape(2 * entries, tables, -1)
    return np.asarray(planes[0::2] + 1j * planes[1::2])
