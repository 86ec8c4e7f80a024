"""The physics once more at 30 digits, written with mpmath and without a line of stackopt: the judge of every dispute.

Impedances are in ohm and nothing is scaled, so neither the normalisation nor the logarithmic scale of stackopt is
repeated here. A layer is (mu_r, sigma in S/m, eps_r, thickness in m), source side first; e^{+jwt}.
"""

from __future__ import annotations

from collections.abc import Sequence
from typing import Any

import mpmath as mp

from builders import Layer

Number = Any

DIGITS = 30

with mp.workdps(DIGITS):
    C_0 = mp.mpf(299792458)
    MU_0 = 4 * mp.pi * mp.mpf(10) ** -7
    EPSILON_0 = 1 / (MU_0 * C_0**2)
    ETA_0 = MU_0 * C_0


def root(value: Number) -> Number:
    """Square root with a real part that is not negative."""
    result = mp.sqrt(value)
    return result if mp.re(result) >= 0 else -result


def wavenumber(frequency: Number) -> Number:
    return 2 * mp.pi * mp.mpf(frequency) / C_0


def wave(layer: Layer, k: Number, frequency: Number, polarisation: str = "TE") -> tuple[Number, Number]:
    """Propagation constant (1/m) and wave impedance (ohm) of a layer's medium; frequency above 0."""
    mu, sigma, eps = (mp.mpmathify(value) for value in layer[:3])
    jw = 2j * mp.pi * mp.mpf(frequency)
    admittivity = sigma + jw * EPSILON_0 * eps
    u = root(k**2 + jw * MU_0 * mu * admittivity)
    return u, jw * MU_0 * mu / u if polarisation == "TE" else u / admittivity


def matrix(layers: Sequence[Layer], k: Number, frequency: Number, polarisation: str = "TE") -> Any:
    """Chain matrix of the layers in ohm and siemens."""
    total = mp.eye(2)
    for layer in layers:
        u, impedance = wave(layer, k, frequency, polarisation)
        x = u * mp.mpf(layer[3])
        cosh, sinh = mp.cosh(x), mp.sinh(x)
        total = total * mp.matrix([[cosh, impedance * sinh], [sinh / impedance, cosh]])
    return total


def transmission(
    layers: Sequence[Layer], k: Number, frequency: Number, terminal: Number, polarisation: str = "TE"
) -> Number:
    """T between equal terminal impedances (ohm)."""
    chain = matrix(layers, k, frequency, polarisation)
    return 2 / (chain[0, 0] + chain[0, 1] / terminal + chain[1, 0] * terminal + chain[1, 1])


def static_transmission(layers: Sequence[Layer], k: Number) -> Number:
    """T of a static magnetic field of transverse wavenumber k: scalar potential and normal flux across each layer."""
    total = mp.eye(2)
    for mu, _, _, thickness in layers:
        x = k * mp.mpf(thickness)
        cosh, sinh = mp.cosh(x), mp.sinh(x)
        total = total * mp.matrix([[cosh, sinh / (mp.mpmathify(mu) * k)], [mp.mpmathify(mu) * k * sinh, cosh]])
    return 2 / (total[0, 0] + total[0, 1] * k + total[1, 0] / k + total[1, 1])


def coaxial_attenuation(
    layers: Sequence[Layer], frequency: float, radius: float, other_radius: float, gap_sum: float, slab_index: float = 1.0
) -> float:
    """Insertion loss between coaxial loops (dipoles for radii of 0), dB, by adaptive quadrature.

    ``slab_index`` is an upper bound of |sqrt(mu_r eps_r)| of low-loss layers; the path of straight pieces returns to
    the real axis beyond the poles of the waves that they guide.
    """
    a, b, h = (mp.mpf(value) for value in (radius, other_radius, gap_sum))
    k0 = wavenumber(frequency)

    def spectrum(k: Number, between: Sequence[Layer]) -> Number:
        u0 = root(k**2 - k0**2)
        loops = mp.mpf(1)
        for size in (a, b):
            loops *= k if size == 0 else 2 * mp.besselj(1, k * size) / size
        if frequency == 0:
            through = static_transmission(between, k)
        else:
            through = transmission(between, k, frequency, 2j * mp.pi * mp.mpf(frequency) * MU_0 / u0)
        return loops * k / u0 * mp.exp(-u0 * h) * through

    top = 1.5 * k0 * slab_index + 1 / h  # beyond every guided wave
    widest = max(a, b)
    lift = 0.3 * top if widest == 0 else min(0.3 * top, 1 / widest)  # J1 grows off the axis
    path = [0, mp.mpc(0.05 * top, lift / 2), mp.mpc(0.6 * top, lift), top]
    path += [top + x / h for x in (1, 2, 4, 8, 16, 32, 64)]
    thickness = mp.fsum(mp.mpf(layer[3]) for layer in layers)
    with mp.workdps(DIGITS):
        air = mp.quad(lambda k: spectrum(k, [(1, 0, 1, thickness)]), path)
        shielded = mp.quad(lambda k: spectrum(k, layers), path)
        return float(20 * mp.log10(abs(air / shielded)))
