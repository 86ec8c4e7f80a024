"""Attenuation of sheets of one material between two coils: what a fit evaluates thousands of times.

The integral of `stackopt.physics.fields.coaxial_lines` by a fixed rule, and one layer in closed form,
T = 4 zeta e^{-ut} / ((1 + zeta)^2 - (1 - zeta)^2 e^{-2ut}) with zeta the layer's impedance over that of air
(J. R. Moser, IEEE Trans. EMC 9, 1967, for one permeable sheet).
"""

from __future__ import annotations

import functools
from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from stackopt.physics import fields
from stackopt.physics.line import DB_PER_NEPER
from stackopt.physics.media import Medium, air
from stackopt.physics.permeability import PermeabilityLaw
from stackopt.problem import CoaxialDipoles, CoaxialLoops
from stackopt.units import EPSILON_0, MU_0

Complex = NDArray[np.complex128]
Real = NDArray[np.float64]

SMALL_COILS_RULE = fields.HankelRule(32, -1.9, 2.9)
"""For radii up to the gap sum: within 0.0005 dB of the reference rule, up to 140 dB (a test measures it)."""
LARGE_COILS_RULE = fields.HankelRule(48, -2.0, 3.0)
"""For radii up to 2.5 times the gap sum: within 0.002 dB."""


@dataclass(frozen=True)
class Coils:
    """Radii of both coils (0 for dipoles), the sum of both gaps, m, and the quadrature that suits them.

    A fit that moves the coils keeps the quadrature, so that nothing jumps.
    """

    source_radius_m: float
    victim_radius_m: float
    gap_sum_m: float
    rule: fields.HankelRule = LARGE_COILS_RULE


def coils_of(field: CoaxialLoops | CoaxialDipoles) -> Coils:
    """Return the coils of a field."""
    if isinstance(field, CoaxialDipoles):
        return Coils(0.0, 0.0, field.gap_sum_m, SMALL_COILS_RULE)
    small = max(field.source_radius_m, field.victim_radius_m) <= field.gap_sum_m
    rule = SMALL_COILS_RULE if small else LARGE_COILS_RULE
    return Coils(field.source_radius_m, field.victim_radius_m, field.gap_sum_m, rule)


@functools.lru_cache(maxsize=64)
def _lines(frequency_hz: tuple[float, ...], coils: Coils) -> fields.SpectralLines:
    """Spectral lines; most steps of a fit leave the coils as they are."""
    radii = (coils.source_radius_m, coils.victim_radius_m)
    return fields.coaxial_lines(np.array(frequency_hz), *radii, coils.gap_sum_m, coils.rule)


@functools.lru_cache(maxsize=64)
def _air(frequency_hz: tuple[float, ...], coils: Coils) -> tuple[Complex, Complex]:
    """Squared wavenumbers, shape (1, line), and u of air, shape (frequency, line)."""
    lines = _lines(frequency_hz, coils)
    return np.asarray(lines.k[:1] ** 2), np.asarray(1.0 / lines.terminal)


@functools.lru_cache(maxsize=64)
def _open_field(frequency_hz: tuple[float, ...], coils: Coils, thickness_m: float) -> Complex:
    """Field with air in the sheets' place."""
    lines, (_, u0) = _lines(frequency_hz, coils), _air(frequency_hz, coils)
    return np.asarray(np.sum(lines.weight * np.exp(-thickness_m * u0), axis=1))


def sheets_db(
    frequency_hz: tuple[float, ...],
    coils: Coils,
    conductivity_s_per_m: float,
    law: PermeabilityLaw,
    thickness_m: float,
    count: int = 1,
    spacing_m: float = 0.0,
) -> Real:
    """Attenuation of sheets of one material.

    Parameters
    ----------
    frequency_hz : tuple of float
        A tuple, because spectral lines are kept by it.
    coils : Coils
    conductivity_s_per_m, law : float, PermeabilityLaw
        The material; its permittivity is taken as 1, which coils in their near field do not notice.
    thickness_m, count, spacing_m : float, int, float
        Sheets of this thickness, with a film of ``spacing_m`` between neighbours.

    Returns
    -------
    ndarray, shape (frequency,)
        Attenuation, dB.
    """
    lines = _lines(frequency_hz, coils)
    frequency = lines.frequency_hz
    mu_r = law(frequency)
    if count > 1 and spacing_m > 0.0:
        sheet, film = (Medium(mu_r, conductivity_s_per_m), thickness_m), (air(frequency), spacing_m)
        return fields.attenuation_db(lines, [sheet, *[film, sheet] * (count - 1)])
    total = thickness_m * count
    k_squared, u0 = _air(frequency_hz, coils)
    omega = 2.0 * np.pi * frequency
    losses = 1j * omega * MU_0 * (conductivity_s_per_m + 1j * omega * EPSILON_0)
    u = np.sqrt(k_squared + (mu_r * losses)[:, None])
    zeta = mu_r[:, None] * u0 / u
    x = u * total
    least = np.min(x.real, axis=1, keepdims=True)
    decay = np.exp(least - x)
    back = (1.0 - zeta) * decay * np.exp(-least)
    value = 4.0 * zeta * decay / ((1.0 + zeta) ** 2 - back * back)
    shielded = np.sum(lines.weight * value, axis=1)
    ratio = np.abs(_open_field(frequency_hz, coils, total)) / np.abs(shielded)
    return np.asarray(DB_PER_NEPER * (np.log(ratio) + least[:, 0]))
