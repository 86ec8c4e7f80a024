"""Permeability that depends on the level of the field, for stacks under a drive.

At weak fields permeability grows with the peak field, mu = mu_i + nu H (Lord Rayleigh, Phil. Mag. 23, 1887). Layer
field and permeability depend on each other: a fixed-point iteration, half a step at a time. H is the layer's largest
over radius and faces, added up over the frequencies of the drive; the same nu H is added at every frequency of the
mask. The hysteresis loss that goes with it is left out.
"""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from stackopt.inside import assembly, drive_points
from stackopt.model import media, spectral_lines
from stackopt.physics import fields
from stackopt.physics.media import Medium
from stackopt.problem import Problem, Requirement, Stack
from stackopt.units import MU_0

Real = NDArray[np.float64]

TOLERANCE = 1e-6
"""Largest change of a layer's permeability over itself at which the iteration has converged."""
MOST_STEPS = 60


@dataclass(frozen=True)
class Level:
    """A stack at the permeability that its drive brings about.

    Parameters
    ----------
    requirement : str
    layers : Stack
        All layers, fixed ones and bonds included, source side first.
    field_a_per_m : tuple of float
        Largest field in each layer, peak.
    extra_mu : tuple of float
        What is added to each layer's relative permeability.
    steps : int
        Steps of the iteration.
    converged : bool
        Whether it came to rest; if not, nothing here can be relied on.
    frequency_hz, attenuation_db, required_db : ndarray, shape (frequency,)
        Attenuation at this level, and the mask with its margin.
    """

    requirement: str
    layers: Stack
    field_a_per_m: tuple[float, ...]
    extra_mu: tuple[float, ...]
    steps: int
    converged: bool
    frequency_hz: Real
    attenuation_db: Real
    required_db: Real

    @property
    def margin_db(self) -> float:
        """Smallest margin at this level, dB."""
        return float(np.min(self.attenuation_db - self.required_db))


def needs_level(problem: Problem, stack: Stack, requirement: Requirement) -> bool:
    """Whether a requirement drives a layer whose permeability depends on the level."""
    materials = (problem.materials[layer.material] for layer in assembly(problem, stack))
    return requirement.drive is not None and any(material.rayleigh_m_per_a for material in materials)


def at_level(problem: Problem, stack: Stack, requirement: Requirement, frequency_hz: Real | None = None) -> Level:
    """Find the permeability that a drive brings about, and the attenuation with it.

    Parameters
    ----------
    problem : Problem
    stack : Stack
        Source side first; bonds and fixed layers are added.
    requirement : Requirement
        With a drive.
    frequency_hz : ndarray, shape (frequency,), optional
        Where to give the attenuation, Hz; the mask's search grid when left out.
    """
    layers = assembly(problem, stack)
    nu = np.array([problem.materials[layer.material].rayleigh_m_per_a or 0.0 for layer in layers])
    extra, converged, steps = np.zeros(len(layers)), False, 0
    while not converged and steps < MOST_STEPS:
        field, least_mu = _field(problem, requirement, layers, extra)
        change = nu * field - extra
        converged = bool(np.all(np.abs(change) <= TOLERANCE * (least_mu + extra)))
        extra = extra + 0.5 * change if steps else change
        steps += 1
    grid = requirement.mask.grid_hz() if frequency_hz is None else np.asarray(frequency_hz, dtype=float)
    return Level(
        requirement=requirement.name,
        layers=layers,
        field_a_per_m=tuple(field.tolist()),
        extra_mu=tuple(extra.tolist()),
        steps=steps,
        converged=converged,
        frequency_hz=grid,
        attenuation_db=_attenuation(problem, stack, requirement, extra.tolist(), grid),
        required_db=requirement.mask.required_db(grid),
    )


def _field(problem: Problem, requirement: Requirement, layers: Stack, extra: Real) -> tuple[Real, Real]:
    """Largest field in each layer, A/m, and the least of its permeabilities at small fields."""
    assert requirement.drive is not None
    keys = list(zip(layers, extra.tolist(), strict=True))
    field, least = np.zeros(len(layers)), np.full(len(layers), np.inf)
    points = drive_points(problem)[requirement.name]
    for point, (_, peak) in zip(points, requirement.drive.points, strict=True):
        small = np.array([medium.mu_r[0] for medium, _ in media(problem, layers, point.frequency_hz)])
        field += peak * point.solve([keys]).flux_t[0] / (MU_0 * np.abs(small + extra))
        least = np.minimum(least, np.abs(small))
    return field, least


def _attenuation(
    problem: Problem, stack: Stack, requirement: Requirement, extra_mu: Sequence[float], grid: Real
) -> Real:
    layers = [
        (Medium(medium.mu_r + extra, medium.conductivity_s_per_m, medium.permittivity), thickness)
        for (medium, thickness), extra in zip(media(problem, assembly(problem, stack), grid), extra_mu, strict=True)
    ]
    before, behind = len(problem.rules.source_side), len(layers) - len(problem.rules.victim_side)
    lines = spectral_lines(requirement.field, grid, fields.REFERENCE_RULE)
    return fields.attenuation_db(lines, layers[before:behind], layers[:before], layers[behind:])
