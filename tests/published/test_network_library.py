"""Cascades against scikit-rf, a network library: every layer a two-port, connected by the library."""

from __future__ import annotations

import numpy as np
import pytest
import skrf
from builders import Layer, media_of

from stackopt.physics import fields, line
from stackopt.units import EPSILON_0, ETA_0, MU_0

RTOL = 1e-8
HZ = np.array([1e3, 1e5, 1e7, 1e9])
FILM: Layer = (1.0, 0.0, 3.0, 25e-6)
STACKS: dict[str, list[Layer]] = {
    "copper": [(1.0, 5.8e7, 1.0, 18e-6)],
    "steel, copper": [(150.0 - 60.0j, 7e6, 1.0, 25e-6), (1.0, 5.8e7, 1.0, 9e-6)],
    "ferrite, film, aluminium": [(120.0 - 30.0j, 1e-4, 12.0, 1e-3), FILM, (1.0, 3.5e7, 1.0, 9e-6)],
    "five": [
        (20.0 - 5.0j, 1e-2, 50.0, 0.5e-3),
        FILM,
        (1.0, 5.8e7, 1.0, 5e-6),
        FILM,
        (40.0 - 80.0j, 1.7e6, 1.0, 5e-6),
    ],
}


def propagation(layer: Layer, k: np.ndarray, polarisation: str) -> tuple[np.ndarray, np.ndarray]:
    """Propagation constant and wave impedance (ohm) of a layer, straight from the textbook."""
    mu, sigma, eps, _ = layer
    omega = 2.0 * np.pi * HZ
    admittivity = sigma + 1j * omega * EPSILON_0 * eps
    u = np.sqrt(k**2 + 1j * omega * MU_0 * mu * admittivity)
    return u, 1j * omega * MU_0 * mu / u if polarisation == "TE" else u / admittivity


def connected(layers: list[Layer], port: np.ndarray, k: np.ndarray, polarisation: str) -> skrf.Network:
    """The layers as two-ports of a chain matrix each, connected by scattering parameters between real impedances."""
    frequency = skrf.Frequency.from_f(HZ, unit="hz")
    total = None
    for layer in layers:
        u, impedance = propagation(layer, k, polarisation)
        x = u * layer[3]
        abcd = np.array([[np.cosh(x), impedance * np.sinh(x)], [np.sinh(x) / impedance, np.cosh(x)]]).transpose(2, 0, 1)
        section = skrf.Network(frequency=frequency, s=skrf.network.a2s(abcd, port), z0=port)
        total = section if total is None else total**section
    return total


@pytest.mark.parametrize("polarisation", ["TE", "TM"])
@pytest.mark.parametrize("degrees", [0.0, 50.0])
@pytest.mark.parametrize("layers", STACKS.values(), ids=STACKS.keys())
def test_connected_layers(layers: list[Layer], degrees: float, polarisation: str) -> None:
    """S21 between ports of the wave impedance of air is T."""
    angle = np.radians(degrees)
    lines = fields.plane_wave_lines(HZ, angle, polarisation)
    port = np.full(len(HZ), ETA_0 / np.cos(angle) if polarisation == "TE" else ETA_0 * np.cos(angle), dtype=complex)
    network = connected(layers, port, lines.k[:, 0], polarisation)
    value, log_scale = fields.transmitted(lines, media_of(layers, HZ))
    np.testing.assert_allclose(value * np.exp(-log_scale), network.s[:, 1, 0], rtol=RTOL)


@pytest.mark.parametrize("kind", ["magnetic", "electric"])
@pytest.mark.parametrize("layers", STACKS.values(), ids=STACKS.keys())
def test_complex_terminal_impedances(layers: list[Layer], kind: str) -> None:
    """Near fields: a source and a load of complex impedance at the ports of the connected layers.

    The electric field two metres from its source and from 100 kHz: nearer or lower its impedance is 1e12 times the
    metal's, and scattering parameters lose their digits (judged at 30 digits, they are wrong by up to 5e-7 there and
    the cascade by 1e-15).
    """
    make = fields.magnetic_near_field_lines if kind == "magnetic" else fields.electric_near_field_lines
    lines = make(HZ, 0.1 if kind == "magnetic" else 2.0)
    load = lines.terminal[:, 0] * 2j * np.pi * HZ * MU_0
    port = np.abs(load).astype(complex)
    s = connected(layers, port, lines.k[:, 0], "TE").s
    mirror = (load - port) / (load + port)
    round_trips = (1.0 - s[:, 0, 0] * mirror) * (1.0 - s[:, 1, 1] * mirror) - s[:, 0, 1] * s[:, 1, 0] * mirror**2
    value, log_scale = fields.transmitted(lines, media_of(layers, HZ))
    expected = s[:, 1, 0] * (1.0 - mirror**2) / round_trips
    usable = (0.0 if kind == "magnetic" else 1e5) <= HZ
    np.testing.assert_allclose((value * np.exp(-log_scale))[usable], expected[usable], rtol=RTOL)


@pytest.mark.parametrize("layers", STACKS.values(), ids=STACKS.keys())
def test_transmission_lines_of_the_library(layers: list[Layer]) -> None:
    """Each layer as one of the library's own lines of a given propagation constant and impedance."""
    lines = fields.plane_wave_lines(HZ)
    frequency = skrf.Frequency.from_f(HZ, unit="hz")
    for layer in layers:
        u, impedance = propagation(layer, lines.k[:, 0], "TE")
        own = skrf.media.DefinedGammaZ0(frequency, gamma=u, z0=impedance).line(layer[3], unit="m", s_def="traveling")
        ((medium, thickness),) = media_of([layer], HZ)
        chain = line.medium_chain(medium, thickness, lines.k, HZ, "TE")
        through = np.exp(-u * layer[3])  # between ports of its own impedance a line only delays and weakens
        np.testing.assert_allclose(own.s[:, 1, 0], through, rtol=RTOL)
        terminal = (impedance / (2j * np.pi * HZ * MU_0))[:, None]
        value, log_scale = line.transmission(chain, terminal)
        np.testing.assert_allclose((value * np.exp(-log_scale))[:, 0], own.s[:, 1, 0], rtol=RTOL)
