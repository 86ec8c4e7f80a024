"""Fields of a source inside layers and back at the source, against closed forms and independent integrals."""

from __future__ import annotations

import math
from itertools import pairwise

import mpmath as mp
import numpy as np
import pytest
from builders import Layer, media_of
from scipy import integrate, optimize, special

from stackopt.physics import interior, radial
from stackopt.units import MU_0


def loop_field(radius: float, rho: float, z: float) -> tuple[float, float]:
    """B_rho and B_z of a loop with 1 A (W. R. Smythe, Static and Dynamic Electricity, 1950, section 7.10)."""
    m = 4.0 * radius * rho / ((radius + rho) ** 2 + z * z)
    k, e = special.ellipk(m), special.ellipe(m)
    factor = MU_0 / (2.0 * math.pi * math.sqrt((radius + rho) ** 2 + z * z))
    near = (radius - rho) ** 2 + z * z
    b_rho = factor * z / rho * (-k + (radius**2 + rho**2 + z * z) / near * e)
    return b_rho, factor * (k + (radius**2 - rho**2 - z * z) / near * e)


def mutual_inductance(one: float, other: float, distance: float) -> float:
    """Two coaxial loops (J. C. Maxwell, A Treatise on Electricity and Magnetism, 1873, section 701)."""
    m = 4.0 * one * other / ((one + other) ** 2 + distance**2)
    return float(MU_0 * math.sqrt(one * other / m) * ((2.0 - m) * special.ellipk(m) - 2.0 * special.ellipe(m)))


def one_frequency(
    frequency: float, radius: float, gap: float, layers: list[Layer]
) -> tuple[interior.SourceLines, interior.Response, radial.RadialRule]:
    f = np.array([frequency])
    lines = interior.source_lines(f, radius, gap)
    return lines, interior.respond_to(lines, media_of(layers, f)), radial.RadialRule(lines, radial.radii(radius, gap))


@pytest.mark.parametrize(("radius", "gap"), [(12e-3, 20e-3), (100e-3, 15e-3), (100e-3, 2.1e-3), (5e-3, 0.1)])
def test_the_field_of_a_loop_alone(radius: float, gap: float) -> None:
    _, response, rule = one_frequency(0.0, radius, gap, [])
    exact = np.array([loop_field(radius, rho, gap) for rho in rule.radii_m[1:]]).T
    largest = np.max(np.hypot(*exact))
    np.testing.assert_allclose(MU_0 * rule.h_rho(response.i[0, 0])[1:].real, exact[0], atol=1e-4 * largest)
    np.testing.assert_allclose(rule.b_z(response.v[0, 0])[1:].real, exact[1], atol=1e-4 * largest)

    def less(rho: float) -> float:
        return -math.hypot(*loop_field(radius, rho, gap))

    grid = np.linspace(1e-3 * gap, radius + gap, 4000)
    start = float(grid[np.argmin([less(rho) for rho in grid])])
    found = optimize.minimize_scalar(less, bounds=(start - gap / 50, start + gap / 50), method="bounded")
    peak = float(radial.peak_flux(rule, response.v[0, 0], response.i[0, 0], 1.0))
    assert peak == pytest.approx(max(-found.fun, -less(1e-6 * gap)), rel=2e-3)


def test_flux_in_a_thin_strongly_permeable_sheet() -> None:
    """All the flux that enters within a radius flows through the sheet's section there.

    The normal field in front of such a sheet is twice the dipole's, so B = mu_0 m rho / (2 pi t (rho^2 + g^2)^{3/2}):
    largest at g/sqrt(2), where it is mu_0 m / (3 sqrt(3) pi t g^2). Derived by hand from the image of a dipole.
    """
    thickness, gap = 1e-4, 20e-3
    _, response, rule = one_frequency(0.0, 0.0, gap, [(1e9, 0.0, 1.0, thickness)])
    expected = MU_0 / (3.0 * math.sqrt(3.0) * math.pi * thickness * gap**2)
    for face in (0, 1):
        peak = float(radial.peak_flux(rule, response.v[face, 0], response.i[face, 0], 1e9))
        assert peak == pytest.approx(expected, rel=5e-3)


@pytest.mark.parametrize(
    ("mu", "sigma", "expected"),
    [(1.0, 5.8e7, 41.3), (200.0, 6e6, 1810.0)],  # common practice: 41 W/m^2 and 1.8 kW/m^2 at 100 kHz and 1 kA/m
)
def test_loss_of_a_thick_conductor(mu: float, sigma: float, expected: float) -> None:
    frequency = 1e5
    surface = (1 + 1j) * math.sqrt(math.pi * frequency * MU_0 * mu / sigma)
    assert float(interior.surface_loss(1e3, surface)) == pytest.approx(expected, rel=5e-3)
    layers: list[Layer] = [(mu, sigma, 1.0, 5e-3)]
    lines, response, rule = one_frequency(frequency, 0.0, 0.1, layers)
    (loss,) = radial.loss_per_area(lines, rule, media_of(layers, np.array([frequency])))
    at = int(np.argmax(loss))
    drive = 1e3 / abs(rule.h_rho(response.i[0, 0])[at])
    assert loss[at] * drive**2 == pytest.approx(expected, rel=1e-2)


@pytest.mark.parametrize(("mu", "sigma", "sign"), [(1e9, 0.0, 1.0), (1.0, 1e16, -1.0)])
def test_a_perfect_mirror_makes_an_image_of_the_loop(mu: float, sigma: float, sign: float) -> None:
    radius, gap = 12e-3, 20e-3
    lines, response, _ = one_frequency(1e3, radius, gap, [(mu, sigma, 1.0, 10e-3)])
    change = interior.reflected_inductance(lines, response.reflection)[0]
    assert change.real == pytest.approx(sign * mutual_inductance(radius, radius, 2 * gap), rel=1e-4)


@pytest.mark.parametrize(("mu", "sigma"), [(1.0, 5.8e7), (200.0, 7e6), (80.0 - 30.0j, 1e-2)])
@pytest.mark.parametrize("frequency", [50.0, 1e4, 1e6])
def test_a_loop_over_a_half_space(mu: complex, sigma: float, frequency: float) -> None:
    """C. V. Dodd and W. E. Deeds, J. Appl. Phys. 39, 1968, for a loop of a thin wire, by an adaptive integral over k.

    dZ = j w mu_0 pi a^2 int (mu k - k1)/(mu k + k1) J1(ka)^2 e^{-2 k g} dk with k1^2 = k^2 + j w mu_0 mu sigma.
    """
    radius, gap = 30e-3, 4e-3
    wet = 2j * math.pi * frequency * MU_0 * mu * sigma

    def integrand(k: float) -> complex:
        inner = np.sqrt(k * k + wet)
        reflected = (mu * k - inner) / (mu * k + inner)
        return complex(reflected * special.j1(k * radius) ** 2 * np.exp(-2.0 * k * gap))

    edges = np.concatenate([[0.0], np.logspace(-4, 1, 12) / gap])
    total = sum(
        integrate.quad(integrand, low, high, epsabs=0.0, epsrel=1e-9, complex_func=True, limit=400)[0]
        for low, high in pairwise(edges)
    )
    expected = MU_0 * math.pi * radius**2 * total
    lines, response, _ = one_frequency(frequency, radius, gap, [(mu, sigma, 1.0, 3.0)])
    change = complex(interior.reflected_inductance(lines, response.reflection)[0])
    assert abs(change - expected) < 2e-6 * abs(expected)
    assert change.imag == pytest.approx(expected.imag, rel=1e-5)


def test_a_loop_over_two_sheets_at_30_digits() -> None:
    """The same integral with the reflection of two sheets, written once more with mpmath."""
    radius, gap, frequency = 12e-3, 20e-3, 2e4
    sheets = [(mp.mpf(200), mp.mpf(7e6), mp.mpf(150e-6)), (mp.mpf(1), mp.mpf(5.8e7), mp.mpf(35e-6))]
    with mp.workdps(30):
        jw = 2j * mp.pi * mp.mpf(frequency) * 4 * mp.pi * mp.mpf(10) ** -7

        def integrand(k: mp.mpf) -> mp.mpc:
            admittance = k
            for mu, sigma, thickness in reversed(sheets):
                u = mp.sqrt(k * k + jw * mu * sigma)
                own, t = u / mu, mp.tanh(u * thickness)
                admittance = own * (admittance + own * t) / (own + admittance * t)
            return (k - admittance) / (k + admittance) * mp.besselj(1, k * radius) ** 2 * mp.exp(-2 * k * gap)

        points = [0, *(mp.mpf(10) ** n for n in range(-1, 3)), 250, 500, 1000]
        total = mp.quad(integrand, points, maxdegree=8)
        expected = complex(4 * mp.pi * mp.mpf(10) ** -7 * mp.pi * radius**2 * total)
    layers: list[Layer] = [(float(mu), float(sigma), 1.0, float(d)) for mu, sigma, d in sheets]
    lines, response, _ = one_frequency(frequency, radius, gap, layers)
    change = complex(interior.reflected_inductance(lines, response.reflection)[0])
    assert abs(change - expected) < 1e-6 * abs(expected)
