"""The physics of a problem: its materials as media, its fields as spectral lines, and the quadrature that suits it."""

from __future__ import annotations

from collections.abc import Sequence

import numpy as np
from numpy.typing import NDArray

from stackopt.physics import fields
from stackopt.physics.media import Medium
from stackopt.problem import (
    CoaxialDipoles,
    CoaxialLoops,
    ElectricNearField,
    Field,
    MagneticNearField,
    Problem,
    Sheet,
    Stack,
)

Real = NDArray[np.float64]


def media(problem: Problem, stack: Sequence[Sheet], frequency_hz: Real) -> list[tuple[Medium, float]]:
    """Layers of the readable cascade for sheets of a problem's materials at the given frequencies (Hz)."""
    layers = []
    for sheet in stack:
        material = problem.materials[sheet.material]
        mu_r = material.permeability(frequency_hz)
        layers.append((Medium(mu_r, material.conductivity_s_per_m, material.permittivity), sheet.thickness_m))
    return layers


def with_bonds(problem: Problem, stack: Stack) -> Stack:
    """Put the problem's bond film between neighbouring sheets."""
    bond = problem.rules.bond
    if bond is None:
        return stack
    return tuple(layer for sheet in stack for layer in (bond, sheet))[1:]


def spectral_lines(field: Field, frequency_hz: Real, rule: fields.HankelRule) -> fields.SpectralLines:
    """Spectral lines of a requirement's field; the rule matters to coaxial loops and dipoles only."""
    if isinstance(field, CoaxialLoops):
        return fields.coaxial_lines(frequency_hz, field.source_radius_m, field.victim_radius_m, field.gap_sum_m, rule)
    if isinstance(field, CoaxialDipoles):
        return fields.coaxial_lines(frequency_hz, 0.0, 0.0, field.gap_sum_m, rule)
    if isinstance(field, MagneticNearField):
        return fields.magnetic_near_field_lines(frequency_hz, field.distance_m)
    if isinstance(field, ElectricNearField):
        return fields.electric_near_field_lines(frequency_hz, field.distance_m)
    return fields.plane_wave_lines(frequency_hz, field.angle_rad, field.polarisation)


def choose_rule(
    problem: Problem, field: Field, grid_hz: Real, sheets: Stack, error_db: float
) -> tuple[fields.HankelRule, float]:
    """Choose the quadrature of a field for the given sheets, and tell its largest error, dB.

    Fields of a single line need none and get `stackopt.physics.fields.REFERENCE_RULE`, which they ignore.
    """
    if not isinstance(field, CoaxialLoops | CoaxialDipoles):
        return fields.REFERENCE_RULE, 0.0
    few = grid_hz[np.unique(np.linspace(0, len(grid_hz) - 1, 12).astype(int))]
    trials = [media(problem, stack, few) for stack in _trial_stacks(problem, sheets, few[:1])]
    rules = problem.rules
    return fields.choose_rule(
        lambda rule: spectral_lines(field, few, rule),
        trials,
        media(problem, rules.source_side, few),
        media(problem, rules.victim_side, few),
        error_db,
    )


def _trial_stacks(problem: Problem, sheets: Stack, lowest_hz: Real) -> list[Stack]:
    """Return what a quadrature is judged by: single sheets, mixed stacks, and the hardest ones.

    Hardest are strongly permeable sheets kept apart by other ones: together they let nothing but the smallest
    wavenumbers pass, orders of magnitude below the reciprocal of the gaps.
    """
    by_material: dict[str, list[Sheet]] = {}
    for sheet in sheets:
        by_material.setdefault(sheet.material, []).append(sheet)
    ends = [sheet for same in by_material.values() for sheet in dict.fromkeys((same[0], same[-1]))]
    mu = {name: float(np.abs(problem.materials[name].permeability(lowest_hz)[0])) for name in by_material}
    strongest = max(sheets, key=lambda sheet: mu[sheet.material] * sheet.thickness_m)
    count = problem.rules.max_sheets
    apart = [tuple((strongest, same[-1])[n % 2] for n in range(count)) for same in by_material.values()]
    random = np.random.default_rng(0)
    mixed = [
        tuple(sheets[i] for i in random.integers(len(sheets), size=random.integers(1, count + 1))) for _ in range(24)
    ]
    return [with_bonds(problem, stack) for stack in apart + mixed + [(sheet,) for sheet in ends]]
