"""Spectral lines: every way of exposing a shield as a few (wavenumber, terminal impedance, weight) per frequency.

Field of the victim = sum over lines of weight * T(k), T being the transmission of whatever lies between source and
victim. One line serves a plane wave or a near-field impedance; two coaxial loops need an integral over all transverse
wavenumbers (TE Hankel transform), here a double-exponential rule on a path lifted off the real axis, away from the
branch point of free space and the poles of guided waves.
"""

from __future__ import annotations

from collections.abc import Callable, Sequence
from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray
from scipy import special

from stackopt.physics.line import DB_PER_NEPER, cascade, medium_chain, transmission, weighted_sum
from stackopt.physics.media import Medium, air, free_wavenumber, line_constants

Complex = NDArray[np.complex128]
Real = NDArray[np.float64]

NEAR_FIELD_LIMIT = 3.0
"""Largest k0 h (h the gap sum) for which two loops still couple by a near field and the rules keep their accuracy."""

RADIUS_LIMIT = 5.0
"""Largest loop radius over gap sum for which the rules keep their accuracy."""


@dataclass(frozen=True)
class SpectralLines:
    """What one requirement looks like to a stack.

    Parameters
    ----------
    frequency_hz : ndarray, shape (frequency,)
    k : ndarray, complex, shape (frequency, line)
        Transverse wavenumbers, rad/m.
    terminal : ndarray, complex, shape (frequency, line)
        Impedance of both half-spaces over j w mu_0, m.
    weight : ndarray, complex, shape (frequency, line)
        Weight of the line, the way through both gaps included.
    polarisation : str
        "TE" or "TM".
    """

    frequency_hz: Real
    k: Complex
    terminal: Complex
    weight: Complex
    polarisation: str = "TE"


@dataclass(frozen=True)
class HankelRule:
    """Double-exponential rule for the coaxial integral: s h = exp(x - exp(-x)) at equidistant x.

    Parameters
    ----------
    lines : int
        Number of nodes.
    low, high : float
        First and last x.
    """

    lines: int
    low: float = -2.5
    high: float = 3.9

    def nodes(self) -> tuple[Real, Real]:
        """Return s h and its weights, both of shape (lines,)."""
        x, step = np.linspace(self.low, self.high, self.lines, retstep=True)
        s = np.exp(x - np.exp(-x))
        return s, s * (1.0 + np.exp(-x)) * step


REFERENCE_RULE = HankelRule(320)
"""Fine enough that doubling it changes nothing that matters; used to judge the others and for predictions."""


def plane_wave_lines(frequency_hz: Real, angle_rad: float = 0.0, polarisation: str = "TE") -> SpectralLines:
    """Far field at an angle from the normal; frequencies above 0 Hz."""
    k = (free_wavenumber(frequency_hz) * np.sin(angle_rad)).astype(complex)[:, None]
    u, series, _ = line_constants(air(frequency_hz), k, frequency_hz, polarisation)
    return SpectralLines(frequency_hz, k, series / u, np.ones_like(k), polarisation)


def magnetic_near_field_lines(frequency_hz: Real, distance_m: float) -> SpectralLines:
    """Wave impedance of a small loop at a distance, both sides, from 0 Hz.

    Z = eta0 (1 + 1/jkr)/(1 + 1/jkr - 1/(kr)^2) (C. A. Balanis, Antenna Theory, fields of the small loop); over j w mu_0
    that is r (1 + jkr)/(1 + jkr - (kr)^2), r itself near the loop.
    """
    kr = free_wavenumber(frequency_hz) * distance_m
    terminal = (distance_m * (1.0 + 1j * kr) / (1.0 + 1j * kr - kr * kr))[:, None]
    k = np.zeros_like(terminal)
    return SpectralLines(frequency_hz, k, terminal, np.ones_like(k))


def electric_near_field_lines(frequency_hz: Real, distance_m: float) -> SpectralLines:
    """Wave impedance of a short dipole at a distance, both sides; frequencies above 0 Hz.

    Z = eta0 (1 + 1/jkr - 1/(kr)^2)/(1 + 1/jkr), the dual of the small loop's.
    """
    k0 = free_wavenumber(frequency_hz)
    kr = k0 * distance_m
    terminal = ((1.0 + 1j * kr - kr * kr) / (1j * kr * (1.0 + 1j * kr)) / (1j * k0))[:, None]
    k = np.zeros_like(terminal)
    return SpectralLines(frequency_hz, k, terminal, np.ones_like(k))


def coaxial_lines(
    frequency_hz: Real, source_radius_m: float, victim_radius_m: float, gap_sum_m: float, rule: HankelRule
) -> SpectralLines:
    """Two coaxial loops (or, with a radius of 0, dipoles) either side of the stack, from 0 Hz.

    The mutual inductance is proportional to the integral over k of J1(ka) J1(kb) (k/u0) e^{-u0 h} T(k), u0 =
    sqrt(k^2 - k0^2) (J. R. Moser, IEEE Trans. EMC 9, 1967). The path is k = s + j L (1 - e^{-3 s h}) with
    L = min(0.5/radius, 0.3/h): it passes above k0 and the guided-wave poles, which lie on or below the real axis for
    e^{+jwt}, and is low enough for J1 not to grow.
    """
    h = gap_sum_m
    sh, step = rule.nodes()
    lift = 0.3 / h
    largest = max(source_radius_m, victim_radius_m)
    if largest > 0.0:
        lift = min(lift, 0.5 / largest)
    s = sh / h
    path = s + 1j * lift * (1.0 - np.exp(-3.0 * sh))
    slope = 1.0 + 3j * lift * h * np.exp(-3.0 * sh)
    k = np.broadcast_to(path, (len(frequency_hz), len(path)))
    u0 = line_constants(air(frequency_hz), k, frequency_hz, "TE")[0]
    coupling = _j1_over_radius(path, source_radius_m) * _j1_over_radius(path, victim_radius_m)
    weight = coupling * path * slope * (step * h * h) / u0 * np.exp(-u0 * h)
    return SpectralLines(frequency_hz, k, 1.0 / u0, weight)


def _j1_over_radius(k: Complex, radius_m: float) -> Complex:
    """2 J1(k a)/a, which is k for a vanishing loop."""
    return k if radius_m == 0.0 else np.asarray(2.0 * special.jv(1, k * radius_m) / radius_m)


def attenuation_db(
    lines: SpectralLines,
    layers: Sequence[tuple[Medium, float]],
    source_side: Sequence[tuple[Medium, float]] = (),
    victim_side: Sequence[tuple[Medium, float]] = (),
) -> Real:
    """Insertion loss of a stack by the readable cascade.

    Parameters
    ----------
    lines : SpectralLines
        The field.
    layers : sequence of (Medium, thickness in m)
        The stack with its bonds, from the source side to the victim side.
    source_side, victim_side : sequence of (Medium, thickness in m)
        Fixed layers; the unshielded case keeps them, with air in the stack's place.

    Returns
    -------
    ndarray, shape (frequency,)
        Attenuation in dB.
    """
    stack_thickness = sum(thickness for _, thickness in layers)
    gap = [(air(lines.frequency_hz), stack_thickness)] if stack_thickness > 0.0 else []
    open_field, open_scale = transmitted(lines, [*source_side, *gap, *victim_side])
    field, scale = transmitted(lines, [*source_side, *layers, *victim_side])
    return np.asarray(DB_PER_NEPER * (np.log(np.abs(open_field)) - open_scale - np.log(np.abs(field)) + scale))


def transmitted(lines: SpectralLines, layers: Sequence[tuple[Medium, float]]) -> tuple[Complex, Real]:
    """Field at the victim through the layers, as (value, log_scale) with field = value * exp(-log_scale)."""
    chain = cascade(
        (medium_chain(medium, d, lines.k, lines.frequency_hz, lines.polarisation) for medium, d in layers),
        lines.k.shape,
    )
    return weighted_sum(lines.weight, *transmission(chain, lines.terminal))


def choose_rule(
    lines_of: Callable[[HankelRule], SpectralLines],
    trials: Sequence[Sequence[tuple[Medium, float]]],
    source_side: Sequence[tuple[Medium, float]],
    victim_side: Sequence[tuple[Medium, float]],
    error_db: float,
) -> tuple[HankelRule, float]:
    """Choose the shortest rule that reproduces the attenuation of the trial stacks.

    Parameters
    ----------
    lines_of : callable
        Makes the field's spectral lines with a rule.
    trials : sequence of layer sequences
        Stacks to judge by.
    source_side, victim_side : sequence of (Medium, thickness in m)
        Fixed layers.
    error_db : float
        Largest deviation from `REFERENCE_RULE`, dB, wherever the attenuation is below 200 dB. The trials are held to
        half of it, because other stacks of the same sheets deviate up to twice as much.

    Returns
    -------
    rule, worst : HankelRule, float
        The rule and its largest deviation on the trials, dB.
    """
    reference = lines_of(REFERENCE_RULE)
    exact = [(trial, attenuation_db(reference, trial, source_side, victim_side)) for trial in trials]
    limit = 0.5 * error_db

    def deviation(rule: HankelRule) -> float:
        lines = lines_of(rule)
        worst = 0.0
        for number, (trial, known) in enumerate(exact):
            error = np.abs(attenuation_db(lines, trial, source_side, victim_side) - known)[known < 200.0]
            worst = max(worst, float(np.max(error, initial=0.0)))
            if worst > limit:
                exact.insert(0, exact.pop(number))  # what one rule fails at is the first that the next must pass
                break
        return worst

    for count in (12, 16, 20, 24, 28, 32, 40, 48, 56, 64, 80, 96, 128, 192):
        for low in (-1.1, -1.35, -1.6, -1.9, -2.2):
            for high in (2.6, 2.9, 3.2, 3.6):
                rule = HankelRule(count, low, high)
                worst = deviation(rule)
                if worst <= limit:
                    return rule, worst
    return REFERENCE_RULE, 0.0
