"""The grid on which a mask is checked."""

from __future__ import annotations

import math
from itertools import pairwise

import numpy as np
from hypothesis import given
from hypothesis import strategies as st
from strategies import masks

from stackopt.problem import Mask


@given(masks(static=True), st.sampled_from([1, 10]))
def test_grid(mask: Mask, density: int) -> None:
    """It rises, holds the mask's own points and ends with them, and no gap exceeds a share of a decade."""
    grid = mask.grid_hz(density)
    assert np.all(np.diff(grid) > 0.0)
    assert set(mask.frequency_hz) <= set(grid.tolist())
    assert (grid[0], grid[-1]) == (mask.frequency_hz[0], mask.frequency_hz[-1])
    positive = grid[grid > 0.0]
    for low, high in pairwise(positive):
        assert math.log10(high / low) <= 1.0 / (mask.points_per_decade * density) + 1e-9
    assert np.count_nonzero(grid == 0.0) == (mask.frequency_hz[0] == 0.0)


@given(masks(static=True))
def test_grid_is_no_denser_than_it_must_be(mask: Mask) -> None:
    """One point less between two of the mask's own would leave a gap too wide."""
    grid = mask.grid_hz()
    points = [frequency for frequency in mask.frequency_hz if frequency > 0.0]
    for low, high in pairwise(points):
        steps = np.count_nonzero((grid >= low) & (grid < high))
        assert steps == 1 or math.log10(high / low) / (steps - 1) > 1.0 / mask.points_per_decade


@given(masks(static=True))
def test_required_attenuation(mask: Mask) -> None:
    """The mask's levels at its points, with the margin, and straight lines in dB against log frequency in between."""
    points = np.array(mask.frequency_hz)
    np.testing.assert_allclose(mask.required_db(points), np.array(mask.attenuation_db) + mask.margin_db, atol=1e-12)
    for (low, high), (one, other) in zip(pairwise(points), pairwise(mask.attenuation_db), strict=True):
        if low > 0.0:
            middle = mask.required_db(np.array([math.sqrt(low * high)]))[0]
            assert math.isclose(middle, 0.5 * (one + other) + mask.margin_db, abs_tol=1e-9)
