from __future__ import annotations

import numpy as np
import pytest
from builders import medium

from stackopt.physics import fields
from stackopt.physics.fields import REFERENCE_RULE, HankelRule
from stackopt.physics.media import free_wavenumber
from stackopt.units import ETA_0, MU_0, SPEED_OF_LIGHT

HZ = np.array([50.0, 1e4, 1e6])
COPPER = (medium(HZ, conductivity=5.8e7), 35e-6)
STEEL = (medium(HZ, 200.0, 7e6), 250e-6)
KINDS = {
    "plane wave": lambda hz: fields.plane_wave_lines(hz, 0.5, "TM"),
    "magnetic": lambda hz: fields.magnetic_near_field_lines(hz, 0.1),
    "electric": lambda hz: fields.electric_near_field_lines(hz, 0.1),
    "loops": lambda hz: fields.coaxial_lines(hz, 12e-3, 5e-3, 45e-3, HankelRule(30)),
    "dipoles": lambda hz: fields.coaxial_lines(hz, 0.0, 0.0, 45e-3, HankelRule(30)),
}


@pytest.mark.parametrize(("kind", "count"), [(kind, 30 if kind in ("loops", "dipoles") else 1) for kind in KINDS])
def test_shapes(kind: str, count: int) -> None:
    lines = KINDS[kind](HZ)
    for values in (lines.k, lines.terminal, lines.weight):
        assert values.shape == (3, count)
    np.testing.assert_array_equal(lines.frequency_hz, HZ)
    assert lines.polarisation == ("TM" if kind == "plane wave" else "TE")


@pytest.mark.parametrize("kind", KINDS)
def test_without_layers_nothing_is_attenuated(kind: str) -> None:
    np.testing.assert_array_equal(fields.attenuation_db(KINDS[kind](HZ), []), np.zeros(3))


@pytest.mark.parametrize("kind", KINDS)
def test_one_frequency_at_a_time_gives_the_same(kind: str) -> None:
    together = fields.attenuation_db(KINDS[kind](HZ), [STEEL, COPPER])
    for n, f in enumerate(HZ):
        hz = np.array([f])
        layers = [(medium(hz, 200.0, 7e6), 250e-6), (medium(hz, conductivity=5.8e7), 35e-6)]
        assert fields.attenuation_db(KINDS[kind](hz), layers)[0] == pytest.approx(together[n], rel=1e-12)


@pytest.mark.parametrize("kind", ["magnetic", "loops", "dipoles"])
def test_magnetic_fields_exist_at_rest(kind: str) -> None:
    still = np.array([0.0])
    lines = KINDS[kind](still)
    steel = fields.attenuation_db(lines, [(medium(still, 200.0, 7e6), 1e-3)])[0]
    copper = fields.attenuation_db(lines, [(medium(still, 1.0, 5.8e7), 1e-3)])[0]
    assert steel > 1.0
    assert copper == pytest.approx(0.0, abs=1e-9)


def test_plane_wave_impedances() -> None:
    for polarisation, expected in (("TE", ETA_0 / np.cos(0.5)), ("TM", ETA_0 * np.cos(0.5))):
        lines = fields.plane_wave_lines(HZ, 0.5, polarisation)
        np.testing.assert_allclose(lines.terminal[:, 0] * 2j * np.pi * HZ * MU_0, expected, rtol=1e-9)
        np.testing.assert_allclose(lines.k[:, 0], free_wavenumber(HZ) * np.sin(0.5), rtol=1e-15)


def test_near_fields_close_to_their_source() -> None:
    """Z is j w mu0 r near a loop, over j w mu0 r itself, and 1/(j w eps0 r) near a dipole."""
    distance = 1e-3
    assert fields.magnetic_near_field_lines(HZ, distance).terminal[0, 0] == pytest.approx(distance, rel=1e-12)
    electric = fields.electric_near_field_lines(HZ, distance).terminal[:, 0] * 2j * np.pi * HZ * MU_0
    np.testing.assert_allclose(electric, ETA_0 / (1j * free_wavenumber(HZ) * distance), rtol=1e-6)


def test_the_two_near_fields_are_dual() -> None:
    magnetic = fields.magnetic_near_field_lines(HZ, 30.0).terminal * 2j * np.pi * HZ[:, None] * MU_0
    electric = fields.electric_near_field_lines(HZ, 30.0).terminal * 2j * np.pi * HZ[:, None] * MU_0
    np.testing.assert_allclose(magnetic * electric, ETA_0**2, rtol=1e-12)


def test_rules_integrate() -> None:
    """Over s h from 0: moments of e^{-s}, as the coaxial integral has them."""
    s, weight = REFERENCE_RULE.nodes()
    assert s.shape == weight.shape == (320,)
    assert np.all(np.diff(s) > 0.0)
    for power, expected in ((0, 1.0), (1, 1.0), (2, 2.0), (3, 6.0)):
        assert np.sum(weight * s**power * np.exp(-s)) == pytest.approx(expected, rel=1e-6)


def test_the_path_keeps_off_the_real_axis() -> None:
    """Above the branch point and the guided waves, lower for large loops, and back to 0 at its beginning."""
    h = 45e-3
    highest = np.array([fields.NEAR_FIELD_LIMIT / h * SPEED_OF_LIGHT / (2.0 * np.pi)])
    for radius in (0.0, 5.0 * h):
        lines = fields.coaxial_lines(highest, radius, radius, h, REFERENCE_RULE)
        assert np.all(lines.k.imag > 0.0)
        assert abs(lines.k[0, 0]) < 1e-4 / h
        assert np.max(lines.k.imag) == pytest.approx(min(0.3 / h, 0.5 / radius if radius else np.inf), rel=1e-6)
        assert np.isfinite(lines.weight).all()


def test_fixed_layers_stay_when_the_stack_goes() -> None:
    """A wall alone attenuates nothing; behind it the same sheet attenuates something else."""
    lines = KINDS["loops"](HZ)
    np.testing.assert_allclose(fields.attenuation_db(lines, [], source_side=[STEEL]), 0.0, atol=1e-12)
    alone = fields.attenuation_db(lines, [COPPER])
    behind = fields.attenuation_db(lines, [COPPER], source_side=[STEEL])
    before = fields.attenuation_db(lines, [COPPER], victim_side=[STEEL])
    assert np.max(np.abs(behind - alone)) > 0.1
    both = fields.attenuation_db(lines, [STEEL, COPPER]) - fields.attenuation_db(lines, [STEEL])
    assert behind == pytest.approx(both, abs=0.1)  # but for the air that takes the copper's place
    assert before == pytest.approx(behind, rel=1e-9)


def test_air_takes_the_place_of_the_stack() -> None:
    """The loops move apart with the stack, and the unshielded ones with them: (1 + d/h)^3 between dipoles."""
    lines = fields.coaxial_lines(HZ[:1], 0.0, 0.0, 45e-3, REFERENCE_RULE)
    value, log_scale = fields.transmitted(lines, [(medium(HZ[:1]), 15e-3)])
    bare, bare_scale = fields.transmitted(lines, [])
    ratio = np.abs(bare / value) * np.exp(log_scale - bare_scale)
    assert ratio[0] == pytest.approx((60.0 / 45.0) ** 3, rel=1e-6)


def trial(thickness_m: float) -> list[tuple]:
    return [(medium(HZ, conductivity=5.8e7), thickness_m)]


def test_chosen_rules_keep_half_the_error_on_the_trials() -> None:
    def lines_of(rule: HankelRule) -> fields.SpectralLines:
        return fields.coaxial_lines(HZ, 0.1, 0.04, 20e-3, rule)

    lengths = []
    for error_db in (2.0, 0.02, 1e-4):
        rule, worst = fields.choose_rule(lines_of, [trial(35e-6), trial(1e-3)], [], [], error_db)
        assert worst <= 0.5 * error_db
        lengths.append(rule.lines)
        for thickness in (35e-6, 1e-3):
            exact = fields.attenuation_db(lines_of(REFERENCE_RULE), trial(thickness))
            error = np.abs(fields.attenuation_db(lines_of(rule), trial(thickness)) - exact)
            assert np.max(error[exact < 200.0]) <= worst + 1e-12
    assert lengths[0] < lengths[1] < lengths[2]


def test_the_reference_serves_where_no_rule_does() -> None:
    def lines_of(rule: HankelRule) -> fields.SpectralLines:
        return fields.coaxial_lines(HZ, 0.1, 0.04, 20e-3, rule)

    assert fields.choose_rule(lines_of, [trial(35e-6)], [], [], 0.0) == (REFERENCE_RULE, 0.0)


def test_nothing_beyond_200_db_is_asked_of_a_rule() -> None:
    def lines_of(rule: HankelRule) -> fields.SpectralLines:
        return fields.coaxial_lines(HZ, 0.0, 0.0, 20e-3, rule)

    rule, worst = fields.choose_rule(lines_of, [[(medium(HZ, 1e4, 5e7), 0.2)]], [], [], 1e-3)
    assert (rule.lines, worst) == (12, 0.0)
