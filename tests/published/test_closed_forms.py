"""Closed forms of single sheets, and what common practice says about sheets between coils."""

from __future__ import annotations

import numpy as np
import pytest
from builders import medium
from scipy import special

from stackopt.physics import fields
from stackopt.physics.media import Medium, skin_depth
from stackopt.physics.permeability import Debye
from stackopt.units import ETA_0, MU_0

COPPER = 5.8e7
THIN = 1e-9
"""Thickness of sheets that stand for infinitely thin ones, m; their conductivity makes up for it."""


# Thin non-magnetic sheet in a far field, 20 log10(1 + Z0/2Rs): the relation used with ASTM D4935, exact formula values.
@pytest.mark.parametrize(("resistance", "expected"), [(1.0, 45.546), (10.0, 25.949), (377.0, 3.520)])
def test_resistive_sheet_in_a_far_field(resistance: float, expected: float) -> None:
    frequency = np.array([1e3, 1e6, 30e6])
    sheet = [(medium(frequency, conductivity=1.0 / (resistance * THIN)), THIN)]
    loss = fields.attenuation_db(fields.plane_wave_lines(frequency), sheet)
    assert 20.0 * np.log10(1.0 + ETA_0 / (2.0 * resistance)) == pytest.approx(expected, abs=6e-4)
    np.testing.assert_allclose(loss, expected, atol=6e-4)


@pytest.mark.parametrize("degrees", [0.0, 30.0, 75.0])
@pytest.mark.parametrize("resistance", [0.01, 5.0, 377.0])
def test_resistive_sheet_at_an_angle(degrees: float, resistance: float) -> None:
    """Z0 is eta_0/cos for TE and eta_0 cos for TM (transmission-line theory of oblique waves)."""
    frequency, angle = np.array([1e6]), np.radians(degrees)
    sheet = [(medium(frequency, conductivity=1.0 / (resistance * THIN)), THIN)]
    for polarisation, impedance in (("TE", ETA_0 / np.cos(angle)), ("TM", ETA_0 * np.cos(angle))):
        loss = fields.attenuation_db(fields.plane_wave_lines(frequency, angle, polarisation), sheet)[0]
        assert loss == pytest.approx(20.0 * np.log10(1.0 + impedance / (2.0 * resistance)), abs=1e-5)


def receding_images_db(q: complex) -> float:
    """Thin sheet between coaxial dipoles, q = j w mu0 sigma t h/2: S. Levy, Proc. IRE 24, 1936
    (attribution from memory).
    """
    decayed = np.exp(q) * special.exp1(q)
    return float(-20.0 * np.log10(abs(1.0 - q / 2.0 + q**2 / 2.0 - q**3 / 2.0 * decayed)))


@pytest.mark.parametrize("h", [5e-3, 45e-3, 0.6])
@pytest.mark.parametrize("q", [1e-3, 0.1, 1.0, 3.0, 10.0, 30.0, 100.0])
def test_thin_sheet_between_coaxial_dipoles(q: float, h: float) -> None:
    """Receding images (S. Levy, 1936, attribution from memory), checked against the integral by this very formula."""
    frequency = np.array([1e3])
    conductance = q / (np.pi * frequency[0] * MU_0 * h)
    sheet = [(medium(frequency, conductivity=conductance / THIN), THIN)]
    lines = fields.coaxial_lines(frequency, 0.0, 0.0, h, fields.REFERENCE_RULE)
    assert fields.attenuation_db(lines, sheet)[0] == pytest.approx(receding_images_db(1j * q), abs=1e-4)


def test_copper_foil_is_a_thin_sheet_while_it_is_thinner_than_a_skin_depth() -> None:
    frequency, h, t = np.array([100.0, 1e3, 1e4, 1e5]), 45e-3, 35e-6
    lines = fields.coaxial_lines(frequency, 0.0, 0.0, h, fields.REFERENCE_RULE)
    loss = fields.attenuation_db(lines, [(medium(frequency, conductivity=COPPER), t)])
    images = [receding_images_db(1j * np.pi * f * MU_0 * COPPER * t * h) for f in frequency]
    np.testing.assert_allclose(loss, images, atol=0.02)


def permeable_sheet_db(f: float, mu: complex, sigma: float, t: float, a: float, b: float, gaps: float) -> float:
    """One permeable sheet between coaxial loops: J. R. Moser, IEEE Trans. EMC 9, 1967 (attribution from memory).

    The integral over real k, with z = gaps + t and without displacement currents, which matter to neither side here.
    """
    z = gaps + t

    nodes, weights = np.polynomial.legendre.leggauss(40)
    panels = np.concatenate([np.logspace(-6.0, 0.0, 25), np.arange(1.5, 60.0, 0.5)]) / z
    low, high = np.append(0.0, panels[:-1])[:, None], panels[:, None]
    k = 0.5 * (high + low) + 0.5 * (high - low) * nodes
    loops = 0.5 * (high - low) * weights * special.j1(k * a) * special.j1(k * b)
    tau = np.sqrt(k * k + 2j * np.pi * f * MU_0 * mu * sigma)
    grown = (tau + mu * k) ** 2 * np.exp(tau * t) - (tau - mu * k) ** 2 * np.exp(-tau * t)
    through = 4.0 * mu * k * tau * np.exp(-k * (z - t)) / grown
    return float(20.0 * np.log10(np.sum(loops * np.exp(-k * z)) / abs(np.sum(loops * through))))


GEOMETRIES = [(12e-3, 5e-3, 45e-3), (0.15, 0.15, 0.6), (30e-3, 2e-3, 10e-3)]


@pytest.mark.parametrize(("a", "b", "gaps"), GEOMETRIES)
@pytest.mark.parametrize(
    ("mu", "sigma", "t"),
    [(1.0, COPPER, 35e-6), (200.0, 7e6, 1e-3), (5000.0 - 3000.0j, 1.67e6, 100e-6), (120.0 - 20.0j, 0.0, 300e-6)],
)
def test_permeable_sheet_between_coaxial_loops(
    mu: complex, sigma: float, t: float, a: float, b: float, gaps: float
) -> None:
    frequency = np.array([50.0, 1e3, 3e4])
    lines = fields.coaxial_lines(frequency, a, b, gaps, fields.REFERENCE_RULE)
    loss = fields.attenuation_db(lines, [(medium(frequency, mu, sigma), t)])
    expected = [permeable_sheet_db(f, mu, sigma, t, a, b, gaps) for f in frequency]
    np.testing.assert_allclose(loss, expected, atol=1e-4)


@pytest.mark.parametrize("field", ["loops", "far", "magnetic", "electric"])
def test_a_skin_depth_of_metal_absorbs_8_686_db(field: str) -> None:
    """Common practice quotes 8.7 dB; exact once the sheet is thick enough for nothing to be reflected twice."""
    frequency = np.array([1e5])
    lines = {
        "loops": fields.coaxial_lines(frequency, 0.1, 0.05, 0.5, fields.REFERENCE_RULE),
        "far": fields.plane_wave_lines(frequency),
        "magnetic": fields.magnetic_near_field_lines(frequency, 0.3),
        "electric": fields.electric_near_field_lines(frequency, 0.3),
    }[field]
    delta = float(skin_depth(frequency, 1.0, COPPER)[0])
    copper = medium(frequency, conductivity=COPPER)
    thick, thicker = (fields.attenuation_db(lines, [(copper, count * delta)])[0] for count in (8.0, 9.0))
    assert thicker - thick == pytest.approx(8.686, abs=0.02)


LOOPS_HZ = np.array([1e2, 1e3, 1e4, 1e5, 1e6])


def between_coils(frequency: np.ndarray, layers: list[tuple[Medium, float]]) -> np.ndarray:
    lines = fields.coaxial_lines(frequency, 12e-3, 5e-3, 45e-3, fields.REFERENCE_RULE)
    return fields.attenuation_db(lines, layers)


def test_ferrite_attenuates_the_same_until_its_permeability_falls() -> None:
    """Common practice."""
    law = Debye(150.0, 2e7)
    frequency = np.array([10.0, 1e3, 1e5, 2e6, 2e8])
    loss = between_coils(frequency, [(Medium(law(frequency), 1e-4, 12.0), 300e-6)])
    np.testing.assert_allclose(loss[:4], loss[0], atol=0.1)
    assert loss[4] < loss[0] / 2.0


def test_thin_copper_between_coils_gains_20_db_a_decade() -> None:
    """Common practice: where the foil already reflects, and is still thinner than a skin depth."""
    frequency = np.array([1e5, 1e6])
    loss = between_coils(frequency, [(medium(frequency, conductivity=COPPER), 18e-6)])
    assert loss[1] - loss[0] == pytest.approx(20.0, abs=1.0)


def test_doubling_a_ferrite_sheet_gains_less_than_double() -> None:
    """Common practice, for a sheet that already attenuates several dB."""
    frequency = np.array([1e5])
    single, double = (between_coils(frequency, [(medium(frequency, 150.0), t)])[0] for t in (500e-6, 1e-3))
    assert single > 5.0
    assert single < double < 2.0 * single


def test_permeable_sheet_wins_at_audio_frequency_and_copper_above() -> None:
    """Common practice: what makes stacks of both worth while."""
    law = Debye(30000.0, 3e3)
    alloy = between_coils(LOOPS_HZ, [(Medium(law(LOOPS_HZ), 1.67e6), 100e-6)])
    copper = between_coils(LOOPS_HZ, [(medium(LOOPS_HZ, conductivity=COPPER), 100e-6)])
    assert np.all(np.diff(copper) > 0.0)
    assert alloy[0] > copper[0] + 10.0
    weak = between_coils(LOOPS_HZ, [(Medium(Debye(150.0, 2e7)(LOOPS_HZ), 1e-4), 100e-6)])
    assert copper[0] < weak[0]
    assert copper[-1] > weak[-1] + 30.0
