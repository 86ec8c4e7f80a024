from __future__ import annotations

import numpy as np
import pytest
from numba import njit
from numpy.polynomial import chebyshev

from stackopt import kernel
from stackopt.blocks import ENDING, LANES, STATE, TOTAL, count_blocks, pack_blocks
from stackopt.lanes import accumulate_block, multiply_block

LINES = 6
BLOCKS = count_blocks(LINES)
Array = np.ndarray


@njit
def multiply(sheet, old, new):  # type: ignore[no-untyped-def]
    multiply_block(sheet, 0, old, 0, new, 0)


@njit
def accumulate(ending, state, total):  # type: ignore[no-untyped-def]
    accumulate_block(ending, 0, state, 0, total)


def complex_numbers(random: np.random.Generator, *shape: int) -> Array:
    return random.normal(size=shape) + 1j * random.normal(size=shape)


def unpacked(block: Array) -> Array:
    """Entries of one block, shape (entry, lane)."""
    planes = block.reshape(-1, 2, LANES)
    return planes[:, 0] + 1j * planes[:, 1]


def test_a_sheet_multiplies_the_row_vector() -> None:
    random = np.random.default_rng(1)
    state, sheet = complex_numbers(random, 2, 1, LANES), complex_numbers(random, 4, 1, LANES)
    old = pack_blocks(*((entry, 0.0) for entry in state))
    new = np.zeros_like(old)
    table = pack_blocks(*((entry, 0.0) for entry in sheet))
    multiply(table, old, new)
    (p, q), (a, b, c, d) = state[:, 0], sheet[:, 0]
    np.testing.assert_allclose(unpacked(new), [p * a + q * c, p * b + q * d], rtol=1e-14)
    multiply(table, old, old)  # the block may be its own result
    np.testing.assert_array_equal(old, new)


def test_lines_add_up() -> None:
    random = np.random.default_rng(2)
    state, ending = complex_numbers(random, 2, 1, LANES), complex_numbers(random, 2, 1, LANES)
    total = np.arange(float(TOTAL))
    accumulate(pack_blocks(*((entry, 0.0) for entry in ending)), pack_blocks(*((entry, 0.0) for entry in state)), total)
    (p, q), (weight, ratio) = state[:, 0], ending[:, 0]
    expected = weight / (p + q * ratio)
    np.testing.assert_allclose(total[:LANES], expected.real + np.arange(LANES), rtol=1e-13)
    np.testing.assert_allclose(total[LANES:], expected.imag + np.arange(LANES, TOTAL), rtol=1e-13)


@pytest.mark.parametrize("degree", [0, 1, 6, 40])
def test_open_level_is_a_chebyshev_sum(degree: int) -> None:
    random = np.random.default_rng(3)
    coefficients = random.normal(size=(2, degree + 1))
    for x in (-1.0, -0.3, 0.0, 0.77, 1.0):
        assert kernel.open_level(coefficients, 1, x) == pytest.approx(chebyshev.chebval(x, coefficients[1]), rel=1e-12)


class Tables:
    """Two sheets in two rows of six lines, with everything that the kernel takes."""

    def __init__(self) -> None:
        random = np.random.default_rng(4)
        self.sheets = complex_numbers(random, 2, 2, 4, 2, LINES)  # first or following, sheet, entry, row, line
        self.scales = random.normal(size=(2, 2, 2))
        self.start, self.ending = complex_numbers(random, 2, 2, LINES), complex_numbers(random, 2, 2, LINES)
        self.fixed = np.array([0.5, -0.25])
        self.coefficients = random.normal(size=(2, 3))

    def kernel(self, codes: Array, x: Array) -> Array:
        first, following = (
            np.concatenate([pack_blocks(*zip(sheet, (1.0, 0.0, 0.0, 1.0), strict=True)) for sheet in sheets])
            for sheets in self.sheets
        )
        start = pack_blocks(*((entry, 1.0) for entry in self.start))
        ending = pack_blocks((self.ending[0], 0.0), (self.ending[1], 1.0))
        assert len(start) == 2 * BLOCKS * STATE
        assert len(ending) == 2 * BLOCKS * ENDING
        row_block = np.array([0, BLOCKS, 2 * BLOCKS])
        return kernel.attenuation_rows(
            codes, x, first, following, *self.scales, row_block, start, ending, self.fixed, self.coefficients
        )

    def by_hand(self, stack: list[int], row: int, x: float) -> float:
        p, q = self.start[:, row]
        scale = self.fixed[row]
        for position, sheet in enumerate(stack):
            table = min(position, 1)
            a, b, c, d = self.sheets[table, sheet, :, row]
            p, q = p * a + q * c, p * b + q * d
            scale += self.scales[table, sheet, row]
        weight, ratio = self.ending[:, row]
        field = np.abs(np.sum(weight / (p + q * ratio)))
        return float(chebyshev.chebval(x, self.coefficients[row]) - 20.0 * np.log10(field) + kernel.DB * scale)


def test_attenuation_in_every_row() -> None:
    """No sheet, one, and two in either order; the first bare and the following ones behind a bond."""
    tables = Tables()
    codes = np.array([[0, 0, 0], [2, 0, 0], [1, 2, 0], [2, 1, 1]])
    x = np.random.default_rng(5).uniform(-1.0, 1.0, (4, 2))
    result = tables.kernel(codes, x)
    for n, row in enumerate(codes):
        stack = [code - 1 for code in row if code > 0]
        for r in range(2):
            assert result[n, r] == pytest.approx(tables.by_hand(stack, r, x[n, r]), rel=1e-12)


def test_no_stacks_give_no_rows() -> None:
    assert Tables().kernel(np.zeros((0, 3), dtype=np.int64), np.zeros((0, 2))).shape == (0, 2)
