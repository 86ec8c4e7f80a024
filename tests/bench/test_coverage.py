"""Round trip: sweeps by another library, with noise and a setup that is not quite as stated, are recovered.

In how many of 200 seeds does the 95 % interval hold the true value? Between 90 and 99 %, or the intervals say too much
or too little.
"""

from __future__ import annotations

import functools
import time
from collections.abc import Callable
from dataclasses import dataclass
from typing import Any

import numpy as np
import pytest
from library_sweeps import Library, near_axis, sheet_db
from numpy.typing import NDArray

from stackopt.bench.intervals import bootstrap, estimates
from stackopt.bench.quantities import hypotheses
from stackopt.bench.residuals import HALF_WIDTH, Residuals, nuisances_of, points_of
from stackopt.bench.solve import solve
from stackopt.physics.permeability import Constant, Debye
from stackopt.problem import CoaxialDipoles
from stackopt.readers.setups import Setup, SheetSweep, Uncertainty
from stackopt.readers.sweeps import Sweep

Real = NDArray[np.float64]

SEEDS = 200
NOISE_DB = 0.15
DIPOLES = CoaxialDipoles(4e-3, 5e-3)
LIMITS = Uncertainty(gaps_m=0.5e-3, thickness=0.05)
SPANS = (0.22, 0.13)
"""Logarithms either side of nominal, five standard deviations of the gap sum and the thickness."""


@dataclass(frozen=True)
class Case:
    """A true material, what the fit is told of it, and the thicknesses that are measured."""

    sigma: float
    mu: Callable[[Real], Any]
    truth: dict[str, float]
    frequency: Real
    thicknesses: tuple[float, ...]
    law: str
    known_sigma: float | None = None
    known_mu: Constant | None = None


CASES = {
    "copper foil": Case(
        5.8e7,
        Constant(1.0),
        {"conductivity": 5.8e7},
        np.geomspace(1e3, 1e6, 14),
        (35e-6,),
        "",
        known_mu=Constant(1.0),
    ),
    "steel shim": Case(
        7e6,
        Constant(150.0),
        {"conductivity": 7e6, "initial": 150.0},
        np.geomspace(200.0, 2e5, 13),
        (100e-6, 300e-6),
        "constant",
    ),
    "ferrite sheet": Case(
        1e-2,
        Debye(120.0, 6e6),
        {"initial": 120.0, "relaxation": 6e6},
        np.geomspace(1e4, 1e7, 13),
        (200e-6,),
        "debye",
        known_sigma=1e-2,
    ),
}


@functools.cache
def libraries_of(name: str) -> list[Library]:
    case = CASES[name]
    return [
        Library.make(case.frequency, DIPOLES.gap_sum_m, thickness, case.sigma, case.mu, SPANS)
        for thickness in case.thicknesses
    ]


def setup_of(case: Case, libraries: list[Library], random: np.random.Generator) -> Setup:
    """A bench whose gaps and sheets differ from what is stated as much as stated, and a reading with noise."""
    gap_sum = DIPOLES.gap_sum_m + np.sum(random.normal(0.0, LIMITS.gaps_m / HALF_WIDTH, 2))
    sweeps = []
    for library, thickness in zip(libraries, case.thicknesses, strict=True):
        actual = thickness * np.exp(random.normal(0.0, LIMITS.thickness / HALF_WIDTH))
        loss = library.loss_db(gap_sum, actual) + random.normal(0.0, NOISE_DB, len(case.frequency))
        sweep = Sweep("synthetic", case.frequency, loss, None, np.zeros(len(loss), dtype=bool))
        sweeps.append(SheetSweep(sweep, thickness, 1, 0.0, DIPOLES))
    return Setup("synthetic", DIPOLES, tuple(sweeps), LIMITS, case.known_sigma, case.known_mu)


def residuals_of(case: Case, setup: Setup) -> Residuals:
    tried = hypotheses((case.frequency[0], case.frequency[-1]), setup.conductivity_s_per_m, setup.permeability)
    chosen = next(item for item in tried if item.name == (case.law or "known permeability"))
    return Residuals(tuple(map(points_of, setup.sweeps)), chosen, tuple(nuisances_of(setup)))


@pytest.mark.slow
@pytest.mark.parametrize("name", CASES)
def test_series_between_the_librarys_values(name: str) -> None:
    """The series that the seeds draw from keeps to the library where no node lies, far below the noise."""
    case, library = CASES[name], libraries_of(name)[0]
    gap_sum, thickness = DIPOLES.gap_sum_m * np.exp(0.07), case.thicknesses[0] * np.exp(-0.09)
    with near_axis():
        exact = sheet_db(case.frequency, gap_sum, thickness, case.sigma, case.mu)
    np.testing.assert_allclose(library.loss_db(gap_sum, thickness), exact, atol=3e-3)


@pytest.mark.slow
@pytest.mark.parametrize("name", CASES)
def test_coverage(name: str) -> None:
    case, libraries = CASES[name], libraries_of(name)
    held = dict.fromkeys(case.truth, 0)
    noise = []
    began = time.perf_counter()
    for seed in range(SEEDS):
        random = np.random.default_rng(seed)
        solution = solve(residuals_of(case, setup_of(case, libraries, random)), random)
        noise.append(solution.noise_db)
        found = {item.name: item for item in estimates(solution, None)}
        for key, truth in case.truth.items():
            held[key] += found[key].low <= truth <= found[key].high
    print(f"{held} of {SEEDS}, noise {np.mean(noise):.3f} dB, {time.perf_counter() - began:.0f} s")  # noqa: T201
    for key, count in held.items():
        assert 0.90 <= count / SEEDS <= 0.99, key
    assert np.mean(noise) == pytest.approx(NOISE_DB, rel=0.05)


@pytest.mark.slow
def test_bootstrap_covers_as_well() -> None:
    case, libraries = CASES["copper foil"], libraries_of("copper foil")
    count, seeds = 0, 100
    for seed in range(seeds):
        random = np.random.default_rng(1000 + seed)
        solution = solve(residuals_of(case, setup_of(case, libraries, random)), random)
        interval = estimates(solution, bootstrap(solution, 150, random))[0].bootstrap
        assert interval is not None
        count += interval[0] <= case.sigma <= interval[1]
    print(f"bootstrap: {count} of {seeds}")  # noqa: T201
    assert 0.90 <= count / seeds <= 0.99
