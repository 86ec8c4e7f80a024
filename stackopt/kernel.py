"""Fast batch evaluation of stacks: arrays in, decibels out. Validates nothing; `stackopt.evaluate` is the checked door.

Symbols
-------
N stacks of up to M positions, S sheets, R rows (requirement and frequency), K blocks of lines (`stackopt.blocks`).

p, q
    The row vector (1, Z0) times the chain matrix of the sheets so far, q divided by Z0, so that T = 2/(p + q) between
    equal terminals. One sheet costs four complex multiplications a line: p' = p A + q C, q' = p B + q D.
tables
    A, B, C, D of each sheet in each line, B divided and C multiplied by the terminal impedance. ``first`` holds the
    bare sheets, ``following`` the sheets with a bond on the source side.
scales
    Shape (S, R): the natural logarithm of what was divided out of a sheet's entries in a row.

`stackopt.physics.line` is the readable version of the same equations; the tests hold the two to 1e-9.
"""

from __future__ import annotations

import math

import numpy as np
from numba import njit

from stackopt.blocks import ENDING, LANES, SHEET, STATE, TOTAL
from stackopt.lanes import accumulate_block, multiply_block

DB = 20.0 / math.log(10.0)


@njit(cache=True, nogil=True, inline="always")
def row_power(ending, begin, end, state, at_state, total):  # type: ignore[no-untyped-def]
    """|field|^2 of the blocks begin to end of a row, whose state starts at ``at_state``; ``total`` is scratch."""
    for i in range(TOTAL):
        total[i] = 0.0
    for block in range(begin, end):
        accumulate_block(ending, block * ENDING, state, at_state + (block - begin) * STATE, total)
    re = 0.0
    im = 0.0
    for lane in range(LANES):
        re += total[lane]
        im += total[LANES + lane]
    return re * re + im * im


@njit(cache=True, nogil=True, inline="always")
def open_level(coefficients, row, x):  # type: ignore[no-untyped-def]
    """Chebyshev sum (Clenshaw) of a row's unshielded level, dB, at the mapped thickness x in -1..1."""
    last = coefficients.shape[1] - 1
    above = 0.0
    here = 0.0
    for n in range(last, 0, -1):
        here, above = 2.0 * x * here - above + coefficients[row, n], here
    return x * here - above + coefficients[row, 0]


@njit(cache=True, nogil=True)
def attenuation_rows(  # type: ignore[no-untyped-def]
    codes, x_of_row, first, following, first_scale, following_scale, row_block, start, ending, fixed_scale, coefficients
):
    """Attenuation of every stack in every row.

    Parameters
    ----------
    codes : int64 (N, M)
        Sheet numbers + 1 packed from the source side, 0 empty.
    x_of_row : float64 (N, R)
        Stack thickness mapped to -1..1 for the unshielded level.
    first, following : float64 (S * K * SHEET,)
    first_scale, following_scale : float64 (S, R)
    row_block : int64 (R + 1,)
        First block of each row.
    start : float64 (K * STATE,)
        p and q behind the fixed layers of the source side.
    ending : float64 (K * ENDING,)
        Weights w and ratios e; a line's share of the field is w/(p + q e).
    fixed_scale : float64 (R,)
        Logarithm divided out of both fixed sides.
    coefficients : float64 (R, C)
        Chebyshev coefficients of the unshielded level, dB.

    Returns
    -------
    float64 (N, R)
        Attenuation, dB.
    """
    stacks, positions = codes.shape
    rows = row_block.size - 1
    blocks = row_block[rows]
    state = np.empty(blocks * STATE)
    total = np.empty(TOTAL)
    result = np.empty((stacks, rows))
    for n in range(stacks):
        for r in range(rows):
            begin, end = row_block[r], row_block[r + 1]
            for i in range((end - begin) * STATE):
                state[i] = start[begin * STATE + i]
            scale = fixed_scale[r]
            for m in range(positions):
                sheet = codes[n, m] - 1
                if sheet < 0:
                    break
                at = sheet * blocks
                if m == 0:
                    for block in range(begin, end):
                        here = (block - begin) * STATE
                        multiply_block(first, (at + block) * SHEET, state, here, state, here)
                    scale += first_scale[sheet, r]
                else:
                    for block in range(begin, end):
                        here = (block - begin) * STATE
                        multiply_block(following, (at + block) * SHEET, state, here, state, here)
                    scale += following_scale[sheet, r]
            power = row_power(ending, begin, end, state, 0, total)
            result[n, r] = open_level(coefficients, r, x_of_row[n, r]) - 0.5 * DB * math.log(power) + DB * scale
    return result
