"""No power is lost: what the layers take and what is radiated is what the source gives, for random stacks."""

from __future__ import annotations

import numpy as np
import pytest
from builders import media_of
from hypothesis import given, settings
from hypothesis import strategies as st
from strategies import layers as any_layer
from strategies import spread, stacks

from stackopt.physics import fields, interior, radial
from stackopt.physics.line import cascade, medium_chain
from stackopt.units import MU_0

radii = st.one_of(st.just(0.0), st.floats(0.01, 5.0))
"""Loop radius over gap."""


def source(frequency: float, radius: float, gap: float) -> interior.SourceLines:
    return interior.source_lines(np.array([frequency]), radius * gap, gap)


def apparent_power(lines: interior.SourceLines, gap: float) -> float:
    """What goes back and forth between source and stack at most, VA: below its rounding nothing can be told."""
    mirror = abs(interior.reflected_inductance(lines, np.ones_like(lines.u0))[0])
    return float(np.pi * lines.frequency_hz[0] * mirror)


@settings(max_examples=200)
@given(stacks, spread(1.0, 3e7), radii, spread(1e-3, 0.3))
def test_the_power_balance_closes(layers: list, frequency: float, radius: float, gap: float) -> None:
    lines = source(frequency, radius, gap)
    response = interior.respond_to(lines, media_of(layers, lines.frequency_hz))
    power = interior.plane_power(lines, response)[:, 0]
    lost = power[:-1] - power[1:]
    given_by_source = -np.pi * frequency * interior.reflected_inductance(lines, response.reflection)[0].imag
    radiated = interior.radiated_change(lines, response)[0]
    rounding = 1e-13 * apparent_power(lines, gap)
    assert np.all(lost >= -rounding)
    assert np.sum(lost) + radiated == pytest.approx(given_by_source, rel=1e-6, abs=rounding)


@settings(max_examples=60)
@given(stacks, spread(1e2, 1e6), radii, spread(2e-3, 0.1))
def test_the_reflection_is_that_of_the_lifted_path(layers: list, frequency: float, radius: float, gap: float) -> None:
    """The balance uses one rule for both sides; here the source's side is taken by another one.

    It is the double-exponential rule off the real axis on which the attenuation rests, with the reflection found
    from the input admittance.
    """
    lines = source(frequency, radius, gap)
    f = lines.frequency_hz
    response = interior.respond_to(lines, media_of(layers, f))
    found = complex(interior.reflected_inductance(lines, response.reflection)[0])
    a = radius * gap
    other = fields.coaxial_lines(f, a, a, 2.0 * gap, fields.REFERENCE_RULE)
    chain = cascade((medium_chain(m, d, other.k, f, "TE") for m, d in media_of(layers, f)), other.k.shape)
    u0 = 1.0 / other.terminal
    v, i = chain.a + chain.b * u0, chain.c + chain.d * u0
    total = np.sum(other.weight * (u0 * v - i) / (u0 * v + i))
    # the weights of the lifted path are (2/a)^2 J1(ka)^2 (k/u0) (2 g)^3 e^{-2 u0 g}, k^2 for a dipole
    factor = MU_0 / (4.0 * np.pi) if a == 0.0 else MU_0 * np.pi * a**2 * a**2 / 4.0
    expected = complex(total) * factor / (2.0 * gap) ** 3
    scale = abs(interior.reflected_inductance(lines, np.ones_like(lines.u0))[0])
    assert abs(found - expected) < 1e-6 * abs(expected) + 1e-9 * scale


@settings(max_examples=15)
@given(st.lists(any_layer(), min_size=1, max_size=2), spread(1e2, 1e7), radii, spread(2e-3, 0.1))
def test_loss_per_area_adds_up_to_the_loss(layers: list, frequency: float, radius: float, gap: float) -> None:
    """The density inside the layers, integrated over the plane, against the power through the faces."""
    lines = source(frequency, radius, gap)
    media = media_of(layers, lines.frequency_hz)
    size = max(radius, 1.0) * gap
    x, w = np.polynomial.legendre.leggauss(8)
    edges = size * np.concatenate([[0.0], np.logspace(-1.0, 2.5, 18)])
    half = 0.5 * np.diff(edges)[:, None]
    rho, weight = (edges[:-1, None] + half * (1.0 + x)).ravel(), (half * w).ravel()
    rule = radial.RadialRule(lines, rho)
    density = radial.loss_per_area(lines, rule, media)
    power = interior.plane_power(lines, interior.respond_to(lines, media))[:, 0]
    for number, loss in enumerate(density):
        found = float(np.sum(loss * 2.0 * np.pi * rho * weight))
        expected = power[number] - power[number + 1]
        assert found == pytest.approx(expected, rel=1e-2, abs=1e-12 * apparent_power(lines, gap) + 1e-3 * power[0])
