"""Figures that people who measure with two small coils quote: common practice, there is no document.

One plausible pair of coils must give all of them within 2.5 dB; the fit of that pair is printed.
"""

from __future__ import annotations

import numpy as np
from numpy.typing import NDArray
from scipy import optimize

from stackopt.bench.sheet_model import Coils, sheets_db
from stackopt.physics.permeability import Constant

Real = NDArray[np.float64]

WITHIN_DB = 2.5
COPPER_S_PER_M, STEEL_S_PER_M, FERRITE_S_PER_M = 5.8e7, 7e6, 1e-3
FERRITE = Constant(100.0)
FLAT_HZ, COPPER_HZ, STEEL_HZ = (100.0, 1e3, 1e4, 1e5, 1e6), (1e4, 1e6), (1e3, 1e4)
PRACTICE_DB = np.array([*[6.0] * 5, *[4.0] * 5, 2.5, 30.0, 6.5, 10.0])
"""Four and two sheets of ferrite, flat to 1 MHz; copper foil at 10 kHz and 1 MHz; steel at 1 kHz and 10 kHz."""
LOW, HIGH = np.log([2e-3, 6e-3, 50.0]), np.log([10e-3, 20e-3, 250.0])
"""Plausible: radius of both coils 2-10 mm, each 3-10 mm from the sheet, steel of the order of 100."""


def figures_db(values: Real) -> Real:
    """Attenuations in the order of `PRACTICE_DB` for the logarithms of radius, gap sum and steel permeability."""
    radius, gap_sum, steel = np.exp(values)
    coils = Coils(radius, radius, gap_sum)
    return np.concatenate(
        [
            sheets_db(FLAT_HZ, coils, FERRITE_S_PER_M, FERRITE, 50e-6, 4),
            sheets_db(FLAT_HZ, coils, FERRITE_S_PER_M, FERRITE, 50e-6, 2),
            sheets_db(COPPER_HZ, coils, COPPER_S_PER_M, Constant(1.0), 35e-6),
            sheets_db(STEEL_HZ, coils, STEEL_S_PER_M, Constant(float(steel)), 150e-6),
        ]
    )


def fitted() -> tuple[Real, Real]:
    """Coils and steel that come nearest, with the figures that they give."""
    starts = [LOW + share * (HIGH - LOW) for share in (0.25, 0.5, 0.75)]
    trials = [
        optimize.minimize(
            lambda x: float(np.max(np.abs(figures_db(np.clip(x, LOW, HIGH)) - PRACTICE_DB))),
            start,
            method="Nelder-Mead",
            options={"xatol": 1e-3, "fatol": 1e-3},
        )
        for start in starts
    ]
    best = np.clip(min(trials, key=lambda trial: trial.fun).x, LOW, HIGH)
    return np.exp(best), figures_db(best)


def test_one_pair_of_coils_gives_all_figures() -> None:
    (radius, gap_sum, steel), found = fitted()
    print(  # noqa: T201
        f"radii {radius * 1e3:.1f} mm, gaps together {gap_sum * 1e3:.1f} mm, steel {steel:.0f}: "
        f"worst {np.max(np.abs(found - PRACTICE_DB)):.2f} dB; {np.round(found, 1)}"
    )
    np.testing.assert_allclose(found, PRACTICE_DB, atol=WITHIN_DB)


def test_copper_rises_by_20_db_per_decade() -> None:
    (radius, gap_sum, _), _ = fitted()
    rising = sheets_db((1e5, 1e6), Coils(radius, radius, gap_sum), COPPER_S_PER_M, Constant(1.0), 35e-6)
    assert np.diff(rising)[0] > 20.0 - WITHIN_DB
    assert np.diff(rising)[0] < 20.0 + WITHIN_DB


def test_ferrite_is_flat_and_doubling_it_gives_less_than_double() -> None:
    _, found = fitted()
    four, two = found[:5], found[5:10]
    assert np.ptp(four) < 0.1
    assert np.ptp(two) < 0.1
    assert np.all(two < four)
    assert np.all(four < 2.0 * two)
