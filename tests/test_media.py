from __future__ import annotations

import numpy as np
import pytest
from builders import medium

from stackopt.physics.media import Medium, air, free_wavenumber, line_constants, skin_depth
from stackopt.units import EPSILON_0, ETA_0, MU_0, SPEED_OF_LIGHT

HZ = np.array([50.0, 1e4, 1e6, 1e9])
K = np.linspace(0.0, 200.0, 5).astype(complex) * np.ones((4, 1))
OMEGA = 2.0 * np.pi * HZ[:, None]


@pytest.mark.parametrize("polarisation", ["TE", "TM"])
def test_shapes(polarisation: str) -> None:
    for constant in line_constants(medium(HZ, 100.0 - 20.0j, 1e6, 3.0), K, HZ, polarisation):
        assert constant.shape == (4, 5)
        assert constant.dtype == complex


def test_impedances_are_those_of_the_textbook() -> None:
    mu, sigma, eps = 100.0 - 20.0j, 1e3, 3.0
    material = medium(HZ, mu, sigma, eps)
    for polarisation in ("TE", "TM"):
        u, series, shunt = line_constants(material, K, HZ, polarisation)
        admittivity = sigma + 1j * OMEGA * EPSILON_0 * eps
        np.testing.assert_allclose(u**2, K**2 + 1j * OMEGA * MU_0 * mu * admittivity, rtol=1e-12)
        np.testing.assert_allclose(series * shunt, u**2, rtol=1e-12)
        ohm = np.sqrt(series / shunt) * 1j * OMEGA * MU_0
        expected = 1j * OMEGA * MU_0 * mu / u if polarisation == "TE" else u / admittivity
        np.testing.assert_allclose(ohm, expected, rtol=1e-12)


@pytest.mark.parametrize("sigma", [0.0, 1e-9, 1.0, 5.8e7])
@pytest.mark.parametrize("polarisation", ["TE", "TM"])
def test_waves_decay_and_advance(sigma: float, polarisation: str) -> None:
    """Convention e^{+jwt}: u has a real and an imaginary part that are not negative, also for waves without loss."""
    u, _, _ = line_constants(medium(HZ, 1.0, sigma, 2.0), K, HZ, polarisation)
    assert np.all(u.real >= 0.0)
    assert np.all(u.imag >= 0.0)


def test_air_carries_waves_below_its_wavenumber_and_none_above() -> None:
    frequency = np.array([1e9])
    k0 = free_wavenumber(frequency)[0]
    u, _, _ = line_constants(air(frequency), np.array([[0.5 * k0, 2.0 * k0]], dtype=complex), frequency, "TE")
    assert u[0, 0] == pytest.approx(1j * k0 * np.sqrt(0.75))
    assert u[0, 1] == pytest.approx(k0 * np.sqrt(3.0))


def test_impedance_of_free_space() -> None:
    u, series, _ = line_constants(air(HZ), np.zeros((4, 1), complex), HZ, "TE")
    np.testing.assert_allclose(1j * OMEGA * MU_0 * series / u, ETA_0, rtol=1e-12)


def test_a_static_field_is_an_ordinary_case() -> None:
    frequency = np.array([0.0])
    u, series, shunt = line_constants(medium(frequency, 500.0, 7e6), np.array([[3.0 + 0.0j]]), frequency, "TE")
    assert (u[0, 0], series[0, 0]) == (3.0, 500.0)
    assert shunt[0, 0] == pytest.approx(9.0 / 500.0, rel=1e-15)


def test_media_hold_a_permeability_for_every_frequency() -> None:
    mu = np.array([1000.0, 500.0 - 500.0j, 10.0 - 100.0j, 1.0])
    _, series, _ = line_constants(Medium(mu, 0.0), K, HZ, "TE")
    np.testing.assert_array_equal(series[:, 3], mu)


def test_other_polarisations_are_refused() -> None:
    with pytest.raises(ValueError, match=r'"TE" or "TM", not .te.'):
        line_constants(air(HZ), K, HZ, "te")


def test_wavenumber_of_free_space() -> None:
    assert free_wavenumber(np.array([SPEED_OF_LIGHT]))[0] == pytest.approx(2.0 * np.pi)
    assert free_wavenumber(np.zeros(3)).shape == (3,)


def test_skin_depth_goes_with_the_root_of_everything() -> None:
    base = skin_depth(np.array([1e3]), 1.0, 1e7)[0]
    assert skin_depth(np.array([4e3]), 1.0, 1e7)[0] == pytest.approx(base / 2.0)
    assert skin_depth(np.array([1e3]), np.array([9.0]), 1e7)[0] == pytest.approx(base / 3.0)
    assert skin_depth(np.array([1e3]), 1.0, 25e7)[0] == pytest.approx(base / 5.0)
