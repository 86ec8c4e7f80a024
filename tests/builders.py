"""Invented problems for the tests: values of the right size, of no real product."""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import replace
from typing import Any

import numpy as np
from numpy.typing import NDArray

from stackopt.physics.media import Medium
from stackopt.physics.permeability import ColeCole, Debye, Lorentz, Sum
from stackopt.problem import (
    CoaxialLoops,
    Field,
    Mask,
    Material,
    Problem,
    Requirement,
    SearchSettings,
    Sheet,
    StackRules,
)

Real = NDArray[np.float64]

LOOPS = CoaxialLoops(source_radius_m=12e-3, victim_radius_m=5e-3, source_gap_m=20e-3, victim_gap_m=25e-3)
MASK = Mask((50.0, 1e3, 2e4, 1e6), (8.0, 14.0, 45.0, 90.0))


def material(
    name: str, conductivity: float, density: float, gauges_um: Sequence[float], price: float | None, **more: Any
) -> Material:
    """A material with gauges in micrometres."""
    gauges = tuple(gauge / 1e6 for gauge in gauges_um)
    return Material(name, conductivity, density, gauges_m=gauges, price_per_kg=price, **more)


MATERIALS = {
    entry.name: entry
    for entry in (
        material("copper", 5.8e7, 8890.0, (9, 18, 35, 70, 105, 500), 14.0, anodic_index_v=-0.35),
        material("aluminium", 3.5e7, 2700.0, (9, 50, 200, 1000), 6.0, anodic_index_v=-0.90),
        material(
            "steel",
            7e6,
            7850.0,
            (25, 100, 250, 1000),
            3.0,
            permeability=ColeCole(280.0, 5e3, 0.2, 83.3),
            anodic_index_v=-0.85,
        ),
        material("nickel alloy", 1.67e6, 8740.0, (25, 100, 500), 90.0, permeability=Debye(30000.0, 3e3)),
        material("laminate", 0.85e6, 7300.0, (20, 80), 60.0, permeability=Debye(10000.0, 5e4)),
        material("ferrite", 1e-4, 5000.0, (50, 300), 80.0, permeability=Debye(150.0, 2e7), permittivity=12.0),
        material(
            "flake",
            1e-3,
            3500.0,
            (50, 500),
            70.0,
            permeability=Sum((Debye(40.0, 5e5), Lorentz(60.0, 2e7, 1e7))),
            permittivity=50.0,
        ),
        material("film", 0.0, 1000.0, (), 10.0, permittivity=3.0),
        material("lacquer", 1e-9, 1200.0, (), None, permittivity=4.0),
    )
}


def build_problem(
    *fields: Field,
    masks: Sequence[Mask] = (MASK,),
    max_sheets: int = 4,
    use: Sequence[str] | None = None,
    materials: dict[str, Material] | None = None,
    objectives: tuple[str, ...] = ("mass", "cost", "thickness"),
    **rules: Any,
) -> Problem:
    """A problem with a requirement for each field (coaxial loops when there is none); masks are used in turn."""
    held = MATERIALS if materials is None else materials
    requirements = tuple(
        Requirement(f"requirement {number}", field, masks[number % len(masks)])
        for number, field in enumerate(fields or (LOOPS,))
    )
    return Problem(
        title="Invented",
        currency="EUR",
        materials=held,
        use=tuple(held if use is None else use),
        requirements=requirements,
        rules=StackRules(max_sheets, **rules),
        search=SearchSettings(objectives),
    )


def medium(frequency_hz: Real, mu_r: complex = 1.0, conductivity: float = 0.0, permittivity: float = 1.0) -> Medium:
    """A medium whose permeability is the same at every frequency."""
    return Medium(np.full(np.shape(frequency_hz), mu_r, dtype=complex), conductivity, permittivity)


Layer = tuple[complex, float, float, float]
"""Relative permeability, conductivity in S/m, relative permittivity, thickness in m: as the outside oracles take it."""


def media_of(layers: Sequence[Layer], frequency_hz: Real) -> list[tuple[Medium, float]]:
    """The same layers as stackopt takes them."""
    return [(medium(frequency_hz, mu, sigma, eps), thickness) for mu, sigma, eps, thickness in layers]


def film(thickness_um: float) -> Sheet:
    """A film of the given thickness in micrometres."""
    return Sheet("film", thickness_um / 1e6)


def ranged(name: str, like: str, low_m: float, high_m: float) -> Material:
    """A material like one of `MATERIALS` that comes in any thickness of a range instead of gauges."""
    return replace(MATERIALS[like], name=name, gauges_m=(), thickness_range_m=(low_m, high_m))
