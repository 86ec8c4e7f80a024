"""Random stacks, fields and problems for the property tests; all of them passive and of sizes found on a bench."""

from __future__ import annotations

import math

import numpy as np
from builders import MATERIALS, Layer, build_problem
from hypothesis import strategies as st

from stackopt.physics import fields
from stackopt.problem import (
    CoaxialDipoles,
    CoaxialLoops,
    ElectricNearField,
    Field,
    MagneticNearField,
    Mask,
    PlaneWave,
    Problem,
    Sheet,
)


def spread(low: float, high: float) -> st.SearchStrategy[float]:
    """Numbers evenly spread over the decades from low to high."""
    return st.floats(math.log10(low), math.log10(high)).map(lambda exponent: 10.0**exponent)


frequencies = spread(1.0, 3e8)
conductivities = st.one_of(st.just(0.0), spread(1e-6, 1e2), spread(1e5, 6e7))


@st.composite
def layers(draw: st.DrawFn) -> Layer:
    """A layer of any medium whose permeability has a positive real part."""
    loss_angle = draw(st.floats(0.0, 1.4))
    mu = draw(spread(1.0, 3e4)) * complex(math.cos(loss_angle), -math.sin(loss_angle))
    return mu, draw(conductivities), draw(st.floats(1.0, 50.0)), draw(spread(1e-6, 3e-3))


stacks = st.lists(layers(), min_size=1, max_size=5)


@st.composite
def reciprocal_lines(draw: st.DrawFn) -> fields.SpectralLines:
    """Spectral lines of any field at one frequency, with terminals that are the same on both sides."""
    f = np.array([draw(frequencies)])
    kind = draw(st.sampled_from(["plane", "magnetic", "electric", "coaxial"]))
    if kind == "plane":
        return fields.plane_wave_lines(f, draw(st.floats(0.0, 1.5)), draw(st.sampled_from(["TE", "TM"])))
    if kind == "magnetic":
        return fields.magnetic_near_field_lines(f, draw(spread(1e-3, 1e2)))
    if kind == "electric":
        return fields.electric_near_field_lines(f, draw(spread(1e-3, 1e2)))
    return draw(coaxial_lines(float(f[0])))


@st.composite
def coaxial_lines(draw: st.DrawFn, frequency: float | None = None, rule_lines: int = 60) -> fields.SpectralLines:
    """Coaxial loops and dipoles that couple by a near field."""
    f = draw(frequencies) if frequency is None else frequency
    near = fields.NEAR_FIELD_LIMIT * 299_792_458.0 / (2.0 * math.pi * f)
    gaps = min(draw(spread(1e-3, 1.0)), near)
    radii = [gaps * draw(st.one_of(st.just(0.0), st.floats(1e-3, fields.RADIUS_LIMIT))) for _ in range(2)]
    return fields.coaxial_lines(np.array([f]), radii[0], radii[1], gaps, fields.HankelRule(rule_lines))


@st.composite
def masks(draw: st.DrawFn, static: bool) -> Mask:
    """Masks of up to four points, from 0 Hz where the field allows it."""
    points = draw(st.lists(spread(1.0, 1e8), min_size=1, max_size=3, unique=True).map(sorted))
    points = [high for low, high in zip([0.0, *points], points, strict=False) if high > 1.001 * low]
    if static and draw(st.booleans()):
        points = [0.0, *points]
    levels = draw(st.lists(st.floats(0.0, 120.0), min_size=len(points), max_size=len(points)))
    return Mask(tuple(points), tuple(levels), draw(st.floats(0.0, 6.0)), draw(st.integers(1, 3)))


@st.composite
def requirements_of_any_kind(draw: st.DrawFn) -> tuple[Field, Mask]:
    """A field with a mask that it can have: waves and electric fields do not exist at 0 Hz, loops couple nearby."""
    kind = draw(st.sampled_from(["plane", "magnetic", "electric", "loops", "dipoles"]))
    mask = draw(masks(static=kind in ("magnetic", "loops", "dipoles")))
    if kind == "plane":
        return PlaneWave(draw(st.floats(0.0, 1.5)), draw(st.sampled_from(["TE", "TM"]))), mask
    if kind == "magnetic":
        return MagneticNearField(draw(spread(1e-3, 1e2))), mask
    if kind == "electric":
        return ElectricNearField(draw(spread(1e-3, 1e2))), mask
    gap, other_gap = draw(spread(5e-4, 0.2)), draw(spread(5e-4, 0.2))
    if kind == "dipoles":
        return CoaxialDipoles(gap, other_gap), mask
    radii = [(gap + other_gap) * draw(st.floats(1e-3, 3.0)) for _ in range(2)]
    return CoaxialLoops(radii[0], radii[1], gap, other_gap), mask


USABLE = [name for name, entry in MATERIALS.items() if entry.gauges_m]
walls = st.builds(Sheet, st.sampled_from(["film", "steel", "aluminium", "ferrite", "lacquer"]), spread(1e-5, 5e-3))
fixed_layers = st.lists(walls, max_size=2).map(tuple)


any_requirement = requirements_of_any_kind()
plane_wave_requirements = st.tuples(st.just(PlaneWave()), masks(static=False))


@st.composite
def problems(draw: st.DrawFn, requirements: st.SearchStrategy[tuple[Field, Mask]] = any_requirement) -> Problem:
    """Problems with one to three requirements, with and without bonds and fixed layers."""
    chosen = draw(st.lists(requirements, min_size=1, max_size=3))
    return build_problem(
        *(field for field, _ in chosen),
        masks=[mask for _, mask in chosen],
        max_sheets=draw(st.integers(1, 5)),
        use=draw(st.lists(st.sampled_from(USABLE), min_size=1, max_size=4, unique=True)),
        bond=draw(st.sampled_from([None, Sheet("film", 25e-6), Sheet("lacquer", 5e-6)])),
        source_side=draw(fixed_layers),
        victim_side=draw(fixed_layers),
        cost_per_sheet=draw(st.sampled_from([0.0, 2.5])),
    )
