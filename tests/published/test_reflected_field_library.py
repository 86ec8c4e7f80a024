"""The field that a stack sends back to a dipole, against empymod, a library for layered media with permeability.

Its transforms return H/(j w mu_0); without the direct field (``xdirect=None``) only what the layers reflect is left.
"""

from __future__ import annotations

from collections.abc import Iterator
from typing import Any

import empymod
import numpy as np
import pytest
from builders import Layer, media_of

from stackopt.physics import interior
from stackopt.units import MU_0

VACUUM_RESISTIVITY = 1e30
FILM: Layer = (1.0, 0.0, 3.0, 25e-6)
STACKS: dict[str, list[Layer]] = {
    "copper foil": [(1.0, 5.8e7, 1.0, 35e-6)],
    "ferrite": [(120.0, 1e-4, 12.0, 1e-3)],
    "steel, copper": [(200.0, 7e6, 1.0, 150e-6), (1.0, 5.8e7, 1.0, 35e-6)],
    "lossy ferrite, film, lossy steel": [(80.0 - 90.0j, 1e-4, 12.0, 5e-4), FILM, (150.0 - 60.0j, 7e6, 1.0, 100e-6)],
}


@pytest.fixture(autouse=True)
def _near_axis() -> Iterator[None]:
    before = empymod.get_minimum()["min_off"]
    empymod.set_minimum(min_off=1e-7)
    yield
    empymod.set_minimum(min_off=before)


def reflected_flux_density(layers: list[Layer], frequency: float, gap: float) -> complex:
    """B_z at a dipole of 1 A m^2 by what the layers send back, T."""
    faces = np.concatenate([[0.0], np.cumsum([layer[3] for layer in layers])])
    mu, sigma, eps, _ = zip(*[(1.0, 0.0, 1.0, 0.0), *layers, (1.0, 0.0, 1.0, 0.0)], strict=True)

    def permeability(_: object, known: dict[str, Any]) -> tuple[np.ndarray, np.ndarray]:
        zeta = 2j * np.pi * known["freq"][:, None] * MU_0 * np.array(mu)
        return zeta, zeta

    found = empymod.dipole(
        [0.0, 0.0, -gap],
        [0.0, 0.0, -gap],
        list(faces),
        {"res": [1.0 / value if value else VACUUM_RESISTIVITY for value in sigma], "func_zeta": permeability},
        frequency,
        ab=66,
        epermH=eps,
        ht="quad",
        htarg={"rtol": 1e-9, "atol": 0.0, "limit": 5000, "a": 1e-6 / gap, "b": 40.0 / gap, "pts_per_dec": 200},
        xdirect=None,
        verb=0,
    )
    return complex(found) * 2j * np.pi * frequency * MU_0 * MU_0


@pytest.mark.parametrize("gap", [3e-3, 20e-3, 0.3])
@pytest.mark.parametrize("layers", STACKS.values(), ids=STACKS.keys())
def test_what_a_stack_sends_back_to_a_dipole(layers: list[Layer], gap: float) -> None:
    frequency = np.array([50.0, 1e3, 3e4, 1e6])
    lines = interior.source_lines(frequency, 0.0, gap)
    response = interior.respond_to(lines, media_of(layers, frequency))
    found = interior.reflected_inductance(lines, response.reflection)
    expected = [reflected_flux_density(layers, f, gap) for f in frequency]
    np.testing.assert_allclose(found, expected, rtol=1e-6)
