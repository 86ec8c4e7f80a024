from __future__ import annotations

import numpy as np
import pytest

from stackopt.blocks import ENDING, LANES, SHEET, STATE, TOTAL, count_blocks, pack_blocks


@pytest.mark.parametrize(("lines", "blocks"), [(1, 1), (LANES, 1), (LANES + 1, 2), (3 * LANES, 3)])
def test_count(lines: int, blocks: int) -> None:
    assert count_blocks(lines) == blocks


def test_sizes_are_planes_of_complex_numbers() -> None:
    assert (STATE, SHEET, ENDING, TOTAL) == (2 * 2 * LANES, 4 * 2 * LANES, 2 * 2 * LANES, 2 * LANES)


def test_layout() -> None:
    """Per row and block: real parts of the first entry, its imaginary parts, then the second entry's."""
    one = np.arange(10.0).reshape(2, 5) + 1j * np.arange(100.0, 110.0).reshape(2, 5)
    other = -one
    packed = pack_blocks((one, 7.0), (other, 0.0)).reshape(2, 2, 4, LANES)
    np.testing.assert_array_equal(packed[1, 0, 0], one[1, :4].real)
    np.testing.assert_array_equal(packed[1, 0, 1], one[1, :4].imag)
    np.testing.assert_array_equal(packed[0, 0, 2], other[0, :4].real)
    np.testing.assert_array_equal(packed[0, 0, 3], other[0, :4].imag)
    np.testing.assert_array_equal(packed[1, 1], [[9, 7, 7, 7], [109, 0, 0, 0], [-9, 0, 0, 0], [-109, 0, 0, 0]])


def test_tables_are_flat_and_contiguous() -> None:
    packed = pack_blocks((np.ones((3, 6), complex), 1.0))
    assert packed.shape == (3 * 2 * 2 * LANES,)
    assert packed.flags.c_contiguous
    assert packed.dtype == float
