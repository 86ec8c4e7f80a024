"""Calibration of a setup: gaps and effective radii from a sheet whose properties are known.

Sweeps see the gaps only as a sum, and gap and radii trade against each other, so the fit keeps every value within what
the setup states. Radii are held at their fitted values from then on; what remains unsure is written as the uncertainty
of the gaps with the radii held, the thickness of the known sheet included.
"""

from __future__ import annotations

import math
from dataclasses import dataclass, replace

import numpy as np
from numpy.typing import NDArray

from stackopt.bench.fit import FEWEST_POINTS, usable_points
from stackopt.bench.quantities import Hypothesis
from stackopt.bench.residuals import HALF_WIDTH, LENGTHS, Points, Residuals, nuisances_of
from stackopt.bench.sheet_model import Coils, coils_of
from stackopt.bench.solve import Solution, half_width, solve
from stackopt.bench.words import count_words
from stackopt.errors import Finding, InputError
from stackopt.problem import CoaxialDipoles, CoaxialLoops
from stackopt.readers.setups import Setup

Real = NDArray[np.float64]

GAPS_M, RADII = 2e-3, 0.2
"""95 % half-widths that a setup without its own is calibrated within: of each gap, and of each radius over itself."""
LEARNT = 0.5
"""A length is said to be learnt when the sweeps leave at most this share of what was stated."""


@dataclass(frozen=True)
class Length:
    """A calibrated length, m: stated, fitted, and its 95 % interval; ``learnt`` where the sweeps narrowed it much."""

    name: str
    stated: float
    value: float
    low: float
    high: float
    learnt: bool


@dataclass(frozen=True)
class Calibration:
    """A calibrated setup.

    Parameters
    ----------
    setup : Setup
        As stated.
    solution : Solution
    lengths : tuple of Length
    field : CoaxialLoops or CoaxialDipoles
        The coils to be used from now on.
    gap_uncertainty_m : float
        95 % half-width of each gap, the radii held.
    remarks : tuple of str
    """

    setup: Setup
    solution: Solution
    lengths: tuple[Length, ...]
    field: CoaxialLoops | CoaxialDipoles
    gap_uncertainty_m: float
    remarks: tuple[str, ...]

    def fitted_db(self, points: Points, frequency_hz: Real) -> Real:
        """Attenuation of the known sheet of one sweep with the calibrated coils at other frequencies, dB."""
        swept = replace(points, frequency_hz=tuple(float(f) for f in frequency_hz))
        return replace(self.solution.residuals, points=(swept,)).predicted_db(self.solution.variables)


def calibrate(setup: Setup, random: np.random.Generator) -> Calibration:
    """Fit gaps and radii of a setup.

    Parameters
    ----------
    setup : Setup
        With conductivity and permeability of the sheet under [known].
    random : numpy.random.Generator

    Raises
    ------
    InputError
        When the sheet is not known, or too few points are usable.
    """
    if setup.conductivity_s_per_m is None or setup.permeability is None:
        missing = "conductivity" if setup.conductivity_s_per_m is None else "permeability"
        message = "is missing; a setup is calibrated with a sheet of which conductivity and permeability are known"
        raise InputError(Finding(setup.name, f"known.{missing}", message))
    stated = _with_limits(setup)
    points = usable_points(stated)
    nuisances = tuple(nuisances_of(stated))
    count = sum(len(item.frequency_hz) for item in points)
    if count < len(nuisances) + FEWEST_POINTS:
        message = f"has {count_words(count, 'usable point')}; at least {len(nuisances) + FEWEST_POINTS} are needed"
        raise InputError(Finding(setup.name, "", message))
    hypothesis = Hypothesis("", (), setup.conductivity_s_per_m, setup.permeability)
    solution = solve(Residuals(points, hypothesis, nuisances), random, stated.uncertainty.noise_db)
    lengths = _lengths(solution, coils_of(stated.field))
    fitted = {length.name: length.value for length in lengths}
    remarks = [f"{entry.sweep.name}: {remark}" for entry in setup.sweeps for remark in entry.sweep.remarks]
    if not any(length.learnt for length in lengths):
        remarks.append(
            "these sweeps narrow none of the lengths much; use a thicker sheet or a wider range of frequencies"
        )
    return Calibration(
        stated, solution, lengths, _field(stated.field, fitted), _gap_uncertainty_m(solution), tuple(remarks)
    )


def _with_limits(setup: Setup) -> Setup:
    """Give a setup the limits of a calibration where it states none itself."""
    limits, coils = setup.uncertainty, coils_of(setup.field)
    changes: dict[str, float] = {}
    if "gaps" not in limits.is_given:
        changes["gaps_m"] = min(GAPS_M, 0.5 * coils.gap_sum_m)
    if "radii" not in limits.is_given:
        changes["radii_m"] = RADII * max(coils.source_radius_m, coils.victim_radius_m)
    return replace(setup, uncertainty=replace(limits, **changes))  # type: ignore[arg-type]


def _lengths(solution: Solution, coils: Coils) -> tuple[Length, ...]:
    width = half_width(solution.freedom)
    found = []
    for index, nuisance in enumerate(solution.residuals.nuisances):
        if nuisance.kind == "thickness":
            continue
        stated = float(getattr(coils, LENGTHS[nuisance.kind]))
        middle, deviation = float(solution.variables[index]), float(solution.deviation[index])
        ends = (middle, middle - width * deviation, middle + width * deviation)
        value, low, high = (stated * math.exp(nuisance.size * end / stated) for end in ends)
        found.append(Length(nuisance.kind, stated, value, low, high, deviation < LEARNT))
    return tuple(found)


def _field(field: CoaxialLoops | CoaxialDipoles, fitted: dict[str, float]) -> CoaxialLoops | CoaxialDipoles:
    """Return the coils with fitted lengths; the two gaps share their change in proportion."""
    share = fitted.get("gaps", field.gap_sum_m) / field.gap_sum_m
    gaps = (field.source_gap_m * share, field.victim_gap_m * share)
    if isinstance(field, CoaxialDipoles):
        return CoaxialDipoles(*gaps)
    return CoaxialLoops(
        fitted.get("source radius", field.source_radius_m), fitted.get("victim radius", field.victim_radius_m), *gaps
    )


def _gap_uncertainty_m(solution: Solution) -> float:
    """95 % half-width of each gap with the radii held and everything else free."""
    kinds = [nuisance.kind for nuisance in solution.residuals.nuisances]
    if "gaps" not in kinds:
        return 0.0
    precision = np.linalg.inv(solution.covariance)
    kept = [index for index, kind in enumerate(kinds) if not kind.endswith("radius")]
    covariance = np.linalg.inv(precision[np.ix_(kept, kept)])
    at = kept.index(kinds.index("gaps"))
    deviation = math.sqrt(float(covariance[at, at])) * solution.residuals.nuisances[kinds.index("gaps")].size
    return HALF_WIDTH * deviation / math.sqrt(2.0)
