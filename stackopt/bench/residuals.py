"""Residuals of a fit: every sweep against the exact model, and what the setup leaves open as nuisances with priors."""

from __future__ import annotations

import math
from dataclasses import dataclass, replace

import numpy as np
from numpy.typing import NDArray

from stackopt.bench.quantities import Hypothesis
from stackopt.bench.sheet_model import Coils, coils_of, sheets_db
from stackopt.physics.permeability import PermeabilityLaw
from stackopt.readers.setups import Setup, SheetSweep

Real = NDArray[np.float64]

HALF_WIDTH = 1.96
"""95 % half-width of a normal distribution over its standard deviation."""
ROBUST = 2.0
"""Standard deviations from which a residual loses weight."""
MOST_FREQUENCIES = 120
"""Per sweep; denser sweeps are averaged in groups, which costs no information of a smooth curve."""


LENGTHS = {"gaps": "gap_sum_m", "source radius": "source_radius_m", "victim radius": "victim_radius_m"}
"""Nuisances of the coils, and what of them they change."""


@dataclass(frozen=True)
class Nuisance:
    """Something the setup states only within limits, in units of its standard deviation.

    ``kind`` is "gaps" (their sum), "source radius", "victim radius" or "thickness"; ``size`` its standard deviation,
    in m or, for a thickness, relative; ``thickness_m`` the gauge of a "thickness".
    """

    kind: str
    size: float
    thickness_m: float = 0.0


@dataclass(frozen=True)
class Points:
    """The points of one sweep that a fit uses, with what lay between the coils."""

    frequency_hz: tuple[float, ...]
    measured_db: Real
    entry: SheetSweep
    coils: Coils


def points_of(entry: SheetSweep) -> Points:
    """Take the points of a sweep away from the floor, averaged in groups where they are many."""
    keep = ~entry.sweep.at_floor
    frequency, measured = entry.sweep.frequency_hz[keep], entry.sweep.attenuation_db[keep]
    groups = np.array_split(np.arange(len(frequency)), min(len(frequency), MOST_FREQUENCIES)) if len(frequency) else []
    means = [(_middle(frequency[group]), float(np.mean(measured[group]))) for group in groups]
    return Points(tuple(mean[0] for mean in means), np.array([mean[1] for mean in means]), entry, coils_of(entry.field))


def _middle(frequency_hz: Real) -> float:
    return float(frequency_hz[0] if len(frequency_hz) == 1 else np.exp(np.mean(np.log(frequency_hz))))


def nuisances_of(setup: Setup) -> list[Nuisance]:
    """Return the nuisances of a setup.

    Only the sum of the gaps enters the attenuation, so the two gaps are one nuisance; gauges err on their own.
    """
    coils, limits = coils_of(setup.field), setup.uncertainty
    found = []
    if limits.gaps_m > 0.0:
        found.append(Nuisance("gaps", math.sqrt(2.0) * limits.gaps_m / HALF_WIDTH))
    for kind, radius in (("source radius", coils.source_radius_m), ("victim radius", coils.victim_radius_m)):
        if limits.radii_m > 0.0 and radius > 0.0:
            found.append(Nuisance(kind, limits.radii_m / HALF_WIDTH))
    if limits.thickness > 0.0:
        gauges = dict.fromkeys(entry.thickness_m for entry in setup.sweeps)
        found += [Nuisance("thickness", limits.thickness / HALF_WIDTH, gauge) for gauge in gauges]
    return found


@dataclass(frozen=True)
class Residuals:
    """Predicts every point for a material's values and the nuisances.

    Variables are those of the hypothesis, then the nuisances, then (where ``common_thickness``) the logarithm of a
    factor on all thicknesses, which only the study of what the sweeps show uses.
    """

    points: tuple[Points, ...]
    hypothesis: Hypothesis
    nuisances: tuple[Nuisance, ...]
    common_thickness: bool = False

    @property
    def free(self) -> int:
        """Number of the material's free values."""
        return len(self.hypothesis.quantities)

    @property
    def size(self) -> int:
        """Number of variables."""
        return self.free + len(self.nuisances) + self.common_thickness

    @property
    def measured_db(self) -> Real:
        """Every measured attenuation, dB, shape (point,)."""
        return np.concatenate([points.measured_db for points in self.points])

    def predicted_db(self, variables: Real) -> Real:
        """Return the attenuation of every point, dB, shape (point,)."""
        sigma, law = self.hypothesis.material(variables[: self.free])
        shifts = variables[self.free : self.free + len(self.nuisances)]
        common = math.exp(variables[-1]) if self.common_thickness else 1.0
        return np.concatenate([self._sweep_db(points, sigma, law, shifts, common) for points in self.points])

    def _sweep_db(self, points: Points, sigma: float, law: PermeabilityLaw, shifts: Real, common: float) -> Real:
        coils, entry, thickness = points.coils, points.entry, points.entry.thickness_m * common
        for nuisance, shift in zip(self.nuisances, shifts, strict=True):
            change = nuisance.size * float(shift)
            if nuisance.kind == "thickness":
                thickness *= math.exp(change) if nuisance.thickness_m == entry.thickness_m else 1.0
            else:
                name = LENGTHS[nuisance.kind]
                before = getattr(coils, name)
                coils = replace(coils, **{name: before * math.exp(change / before)})  # stays above zero
        return sheets_db(points.frequency_hz, coils, sigma, law, thickness, entry.count, entry.spacing_m)

    def jacobian_db(self, variables: Real, step: float = 1e-4) -> Real:
        """Derivatives of every point by every variable by central differences, dB, shape (point, variable)."""
        columns = []
        for index in range(self.size):
            change = np.zeros(self.size)
            change[index] = step
            difference = self.predicted_db(variables + change) - self.predicted_db(variables - change)
            columns.append(difference / (2.0 * step))
        return np.stack(columns, axis=1)
