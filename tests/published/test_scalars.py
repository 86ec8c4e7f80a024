"""Single numbers: impedances, skin depths, foil weights, coils in the open."""

from __future__ import annotations

import math

import numpy as np
import pytest
from builders import medium
from scipy import integrate, special

from stackopt.physics import fields
from stackopt.physics.media import line_constants, skin_depth
from stackopt.problem import Material
from stackopt.units import MU_0

COPPER = 5.8e7


def coupling(source_radius: float, victim_radius: float, distance: float, frequency: float = 0.0) -> complex:
    """Unshielded coupling of coaxial loops by stackopt, normalised to 1 for small loops far apart at 0 Hz.

    The weights stand for h^3 times the integral of (2 J1(ka)/a) (2 J1(kb)/b) (k/u0) e^{-u0 h} over k, whose value is 2
    for dipoles at rest.
    """
    lines = fields.coaxial_lines(np.array([frequency]), source_radius, victim_radius, distance, fields.REFERENCE_RULE)
    value, log_scale = fields.transmitted(lines, [])
    return complex(value[0] * np.exp(-log_scale[0])) / 2.0


def mutual_inductance(source_radius: float, victim_radius: float, distance: float) -> float:
    """The same in henries, from the dipole limit mu0 pi a^2 b^2/(2 h^3)."""
    small = MU_0 * math.pi * (source_radius * victim_radius) ** 2 / (2.0 * distance**3)
    return small * coupling(source_radius, victim_radius, distance).real


def test_impedance_of_copper() -> None:
    """MIL-HDBK-419A (retrieved): 3.69e-4 ohm at 1 MHz."""
    frequency = np.array([1e6])
    u, series, _ = line_constants(medium(frequency, conductivity=COPPER), np.zeros((1, 1), complex), frequency, "TE")
    impedance = 2j * np.pi * frequency[0] * MU_0 * series[0, 0] / u[0, 0]
    assert abs(impedance) == pytest.approx(3.69e-4, abs=5e-7)
    assert np.degrees(np.angle(impedance)) == pytest.approx(45.0, abs=1e-4)


@pytest.mark.parametrize(("f", "depth"), [(50.0, 9.346e-3), (1e3, 2.090e-3), (1e6, 66.09e-6)])
def test_skin_depth_of_copper(f: float, depth: float) -> None:
    """Exact formula values for 5.8e7 S/m."""
    assert skin_depth(np.array([f]), 1.0, COPPER)[0] == pytest.approx(depth, rel=1e-4)
    frequency = np.array([f])
    u, _, _ = line_constants(medium(frequency, conductivity=COPPER), np.zeros((1, 1), complex), frequency, "TE")
    assert 1.0 / u[0, 0].real == pytest.approx(depth, rel=1e-4)


def test_weight_of_copper_foil() -> None:
    """1 oz/ft^2 = 305.15 g/m^2 (unit definitions, recomputed) is 34.3 um at 8.89 g/cm^3."""
    ounce, foot = 28.349523125e-3, 0.3048
    assert ounce / foot**2 == pytest.approx(0.30515, abs=1e-5)
    assert Material("copper", COPPER, 8890.0).mass_kg_per_m2(34.3e-6) == pytest.approx(0.30515, rel=1e-3)


def test_field_on_the_axis_of_a_coil() -> None:
    """MIL-STD-461G, RS101 (retrieved): 12 cm diameter, 20 turns, 9.5e7 pT per ampere at 5 cm."""
    radius, distance, turns = 60e-3, 50e-3, 20
    dipole = MU_0 * turns * radius**2 / (2.0 * distance**3)
    assert dipole * coupling(radius, 0.0, distance).real == pytest.approx(9.5e7 * 1e-12, rel=0.01)


@pytest.mark.parametrize("radius_over_distance", [0.01, 0.3, 1.0, 3.0, 5.0])
def test_field_on_the_axis_of_a_loop(radius_over_distance: float) -> None:
    """Law of Biot and Savart: mu0 a^2/(2 (a^2 + z^2)^(3/2)), over the dipole's mu0 a^2/(2 z^3)."""
    for distance in (1e-3, 45e-3, 1.0):
        expected = (1.0 + radius_over_distance**2) ** -1.5
        assert coupling(radius_over_distance * distance, 0.0, distance).real == pytest.approx(expected, rel=1e-7)


def maxwell(a: float, b: float, h: float) -> float:
    """Mutual inductance of coaxial circles, J. C. Maxwell, A Treatise on Electricity and Magnetism, article 701."""
    m = 4.0 * a * b / ((a + b) ** 2 + h**2)
    kappa = math.sqrt(m)
    integrals = (2.0 / kappa - kappa) * special.ellipk(m) - 2.0 / kappa * special.ellipe(m)
    return float(MU_0 * math.sqrt(a * b) * integrals)


@pytest.mark.parametrize(
    ("a", "b", "h"),
    [
        (12e-3, 5e-3, 45e-3),
        (0.15, 0.15, 0.6),
        (60e-3, 20e-3, 50e-3),
        (1e-3, 1e-3, 1e-3),
        (0.1, 0.02, 20e-3),
        (0.1, 0.1, 20e-3),
        (5.0, 5.0, 1.0),
    ],
)
def test_mutual_inductance_of_coaxial_circles(a: float, b: float, h: float) -> None:
    assert mutual_inductance(a, b, h) == pytest.approx(maxwell(a, b, h), rel=1e-6)


@pytest.mark.parametrize("phase", [0.01, 0.3, 1.0, 3.0])
def test_dipole_on_the_axis_at_a_distance_in_wavelengths(phase: float) -> None:
    """Axial field of a small loop (C. A. Balanis, Antenna Theory): (1 + j k0 h) e^{-j k0 h} times the static one."""
    h = 45e-3
    frequency = phase / h * 299_792_458.0 / (2.0 * math.pi)
    assert coupling(0.0, 0.0, h, frequency) == pytest.approx((1.0 + 1j * phase) * np.exp(-1j * phase), rel=1e-6)


@pytest.mark.parametrize("phase", [0.3, 1.0])
def test_loops_coupled_by_waves(phase: float) -> None:
    """Neumann's double integral with the retarded potential, e^{-j k0 R}/R round both loops."""
    a, b, h = 30e-3, 10e-3, 45e-3
    k0 = phase / h

    def distance(angle: float) -> float:
        return math.sqrt(a * a + b * b + h * h - 2.0 * a * b * math.cos(angle))

    def part(turn) -> float:
        return integrate.quad(
            lambda angle: math.cos(angle) * turn(k0 * distance(angle)) / distance(angle), 0.0, math.pi, epsrel=1e-12
        )[0]

    mutual = MU_0 * a * b * complex(part(math.cos), -part(math.sin))
    small = MU_0 * math.pi * (a * b) ** 2 / (2.0 * h**3)
    frequency = k0 * 299_792_458.0 / (2.0 * math.pi)
    assert small * coupling(a, b, h, frequency) == pytest.approx(mutual, rel=1e-6)
