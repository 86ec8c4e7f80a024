"""The physics once more at 30 digits, written with mpmath and without a line of stackopt: the judge of every dispute.

Impedances are in ohm and nothing is scaled, so neither the normalisation nor the logarithmic scale of stackopt is
repeated here. A layer is (mu_r, sigma in S/m, eps_r, thickness in m), source side first; e^{+jwt}.
"""

from __future__ import annotations

from collections.abc import Callable, Sequence
from itertools import pairwise
from typing import Any

import mpmath as mp
from builders import Layer
from mpmath.calculus.quadrature import GaussLegendre

Number = Any

DIGITS = 30

with mp.workdps(DIGITS):
    C_0 = mp.mpf(299792458)
    MU_0 = 4 * mp.pi * mp.mpf(10) ** -7
    EPSILON_0 = 1 / (MU_0 * C_0**2)
    ETA_0 = MU_0 * C_0

_RULE = GaussLegendre(mp.mp)


def root(value: Number) -> Number:
    """Square root with a real part that is not negative."""
    result = mp.sqrt(value)
    return result if mp.re(result) >= 0 else -result


def wavenumber(frequency: Number) -> Number:
    """Of free space, rad/m."""
    return 2 * mp.pi * mp.mpf(frequency) / C_0


def loop_impedance(frequency: Number, distance: Number) -> Number:
    """Radial impedance of a small loop's field, ohm."""
    x = wavenumber(frequency) * mp.mpf(distance)
    return ETA_0 * (1 + 1 / (1j * x)) / (1 + 1 / (1j * x) - 1 / x**2)


def dipole_impedance(frequency: Number, distance: Number) -> Number:
    """Radial impedance of a short dipole's field, ohm."""
    return ETA_0**2 / loop_impedance(frequency, distance)


Matrix = tuple[Number, Number, Number, Number]


def product(one: Matrix, other: Matrix) -> Matrix:
    """Of two chain matrices (A, B, C, D)."""
    a, b, c, d = one
    e, f, g, h = other
    return a * e + b * g, a * f + b * h, c * e + d * g, c * f + d * h


def line_section(x: Number, impedance: Number) -> Matrix:
    """Chain matrix of a line of the length x = u d."""
    grown = mp.exp(x)
    cosh, sinh = (grown + 1 / grown) / 2, (grown - 1 / grown) / 2  # thirty digits can spare a few
    return cosh, impedance * sinh, sinh / impedance, cosh


def transmission(
    layers: Sequence[Layer], k: Number, frequency: Number, terminal: Number, polarisation: str = "TE"
) -> Number:
    """T between equal terminal impedances (ohm); frequency above 0."""
    jw = 2j * mp.pi * mp.mpf(frequency)
    total: Matrix = (mp.mpf(1), mp.mpf(0), mp.mpf(0), mp.mpf(1))
    for mu, sigma, eps, thickness in layers:
        admittivity = mp.mpf(sigma) + jw * EPSILON_0 * mp.mpf(eps)
        series = jw * MU_0 * mp.mpmathify(mu)
        u = root(k**2 + series * admittivity)
        impedance = series / u if polarisation == "TE" else u / admittivity
        total = product(total, line_section(u * mp.mpf(thickness), impedance))
    a, b, c, d = total
    return 2 / (a + b / terminal + c * terminal + d)


def static_transmission(layers: Sequence[Layer], k: Number) -> Number:
    """T of a static magnetic field of transverse wavenumber k: scalar potential and normal flux across each layer."""
    total: Matrix = (mp.mpf(1), mp.mpf(0), mp.mpf(0), mp.mpf(1))
    for mu, _, _, thickness in layers:
        total = product(total, line_section(k * mp.mpf(thickness), 1 / (mp.mpmathify(mu) * k)))
    a, b, c, d = total
    return 2 / (a + b * k + c / k + d)


def loss_db(shielded: Number, unshielded: Number = 1) -> float:
    """Insertion loss, dB."""
    return float(20 * mp.log10(abs(unshielded / shielded)))


def coaxial_attenuation(
    layers: Sequence[Layer],
    frequency: float,
    radius: float,
    other_radius: float,
    gap_sum: float,
    slab_index: float = 1.0,
) -> float:
    """Insertion loss between coaxial loops (dipoles for radii of 0), dB, by quadrature to eight digits.

    ``slab_index`` is an upper bound of |sqrt(mu_r eps_r)| of low-loss layers; the path of straight pieces passes above
    the branch point of free space and returns to the real axis beyond the poles of the waves that they guide. Its
    pieces shrink towards 0, where stacks of high permeability let their field through.
    """
    with mp.workdps(DIGITS):
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

        top = 1.5 * k0 * slab_index + 1 / h
        thickness = mp.fsum(mp.mpf(layer[3]) for layer in layers)
        lift = min(0.3 * top, 3 / (h + thickness), 1 / max(a, b, h))  # neither J1 nor e^{-u h} may grow much
        corners = [mp.mpc(0.5 * max(k0, 1 / h), lift), mp.mpc(0.6 * top, lift), top]
        path = [0] + [corners[0] * mp.mpf(10) ** -n for n in (5, 4, 3, 2, 1, 0)]
        for begin, end in pairwise(corners):
            pieces = 1 + int(abs(end - begin) / (6 * lift))
            path += [begin + (end - begin) * (n + 1) / pieces for n in range(pieces)]
        path += [top + x / h for x in (1, 2, 4, 8, 16, 32)]
        fields = [
            _integral(lambda k, between=between: spectrum(k, between), path)
            for between in ([(1, 0, 1, thickness)], layers)
        ]
        return loss_db(fields[1], fields[0])


def _integral(integrand: Callable[[Number], Number], path: Sequence[Number]) -> Number:
    """Gauss-Legendre rules of growing order on every piece of the path, until two of them agree to eight digits."""
    before = mp.inf
    for degree in (3, 4, 5, 6, 7, 8):
        value = mp.fsum(
            weight * integrand(node)
            for begin, end in pairwise(path)
            for node, weight in _RULE.get_nodes(begin, end, degree, mp.mp.prec)
        )
        if abs(value - before) < 1e-8 * abs(value):
            return value
        before = value
    raise ArithmeticError("the quadrature has not reached eight digits")
