"""Oblique plane waves through non-magnetic layers against tmm, a thin-film library.

It writes e^{-iwt} where stackopt writes e^{+jwt}: its refractive indices and amplitudes are the complex conjugates.
"""

from __future__ import annotations

import numpy as np
import pytest
import tmm
from builders import Layer, media_of

from stackopt.physics import fields
from stackopt.units import EPSILON_0, SPEED_OF_LIGHT

FILM: Layer = (1.0, 0.0, 3.2, 0.5e-3)
STACKS: dict[str, list[Layer]] = {
    "film": [FILM],
    "copper foil": [(1.0, 5.8e7, 1.0, 9e-6)],
    "copper behind film": [FILM, (1.0, 5.8e7, 1.0, 2e-6)],
    "absorber": [(1.0, 0.4, 12.0, 4e-3), (1.0, 3.0, 8.0, 3e-3), (1.0, 20.0, 4.0, 2e-3)],
    "brass, film, aluminium": [(1.0, 1.6e7, 1.0, 3e-6), FILM, (1.0, 3.5e7, 1.0, 4e-6)],
    "half a wave": [(1.0, 0.0, 4.0, 75e-3), (1.0, 0.01, 2.0, 30e-3)],
}


def thin_film(layers: list[Layer], frequency: float, angle: float, polarisation: str) -> complex:
    """Amplitude behind the layers in the convention e^{+jwt}."""
    admittivity = [complex(eps) + sigma / (2j * np.pi * frequency * EPSILON_0) for _, sigma, eps, _ in layers]
    index = [1.0, *np.conj(np.sqrt(admittivity)), 1.0]
    thickness = [np.inf, *(layer[3] for layer in layers), np.inf]
    waves = {"TE": "s", "TM": "p"}[polarisation]
    return complex(np.conj(tmm.coh_tmm(waves, index, thickness, angle, SPEED_OF_LIGHT / frequency)["t"]))


@pytest.mark.parametrize("polarisation", ["TE", "TM"])
@pytest.mark.parametrize("degrees", [0.0, 25.0, 60.0, 85.0])
@pytest.mark.parametrize("layers", STACKS.values(), ids=STACKS.keys())
def test_oblique_plane_waves(layers: list[Layer], degrees: float, polarisation: str) -> None:
    """Amplitude and phase behind the layers, and the insertion loss."""
    frequency, angle = np.array([1e6, 3e7, 1e9, 2.5e9]), np.radians(degrees)
    lines = fields.plane_wave_lines(frequency, angle, polarisation)
    value, log_scale = fields.transmitted(lines, media_of(layers, frequency))
    expected = np.array([thin_film(layers, f, angle, polarisation) for f in frequency])
    np.testing.assert_allclose(value * np.exp(-log_scale), expected, rtol=1e-6)
    loss = fields.attenuation_db(lines, media_of(layers, frequency))
    np.testing.assert_allclose(loss, -20.0 * np.log10(np.abs(expected)), atol=1e-5)
