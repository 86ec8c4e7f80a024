"""What holds for every stack in every field, whatever the numbers."""

from __future__ import annotations

import math

import numpy as np
from builders import Layer, media_of, medium
from hypothesis import given
from hypothesis import strategies as st
from strategies import coaxial_lines, conductivities, frequencies, layers, reciprocal_lines, spread, stacks

from stackopt.physics import fields, line
from stackopt.physics.media import free_wavenumber, line_constants
from stackopt.units import MU_0


def attenuation(lines: fields.SpectralLines, stack: list[Layer]) -> float:
    return float(fields.attenuation_db(lines, media_of(stack, lines.frequency_hz))[0])


@given(reciprocal_lines(), layers())
def test_a_layer_of_no_thickness_is_the_identity(lines: fields.SpectralLines, layer: Layer) -> None:
    ((material, _),) = media_of([layer], lines.frequency_hz)
    constants = line_constants(material, lines.k, lines.frequency_hz, lines.polarisation)
    chain = line.layer(*constants, 0.0)
    for entry, expected in ((chain.a, 1.0), (chain.b, 0.0), (chain.c, 0.0), (chain.d, 1.0), (chain.log_scale, 0.0)):
        np.testing.assert_array_equal(entry, np.full(lines.k.shape, expected))


@given(reciprocal_lines(), stacks, layers(), st.integers(0, 5))
def test_a_vanishing_layer_changes_nothing(
    lines: fields.SpectralLines, stack: list[Layer], layer: Layer, place: int
) -> None:
    """1e-30 m between any two layers: at 1 Hz an electric near field feels even 1e-15 m of metal."""
    thin = (*layer[:3], 1e-30)
    with_it = [*stack[:place], thin, *stack[place:]]
    loss = attenuation(lines, stack)
    assert math.isclose(attenuation(lines, with_it), loss, rel_tol=1e-6, abs_tol=1e-5)


@given(reciprocal_lines(), stacks, st.integers(0, 4), st.floats(0.001, 0.999))
def test_splitting_a_layer_changes_nothing(
    lines: fields.SpectralLines, stack: list[Layer], number: int, share: float
) -> None:
    number %= len(stack)
    medium_of, thickness = stack[number][:3], stack[number][3]
    parts = [(*medium_of, share * thickness), (*medium_of, (1.0 - share) * thickness)]
    split = [*stack[:number], *parts, *stack[number + 1 :]]
    assert math.isclose(attenuation(lines, split), attenuation(lines, stack), rel_tol=1e-9, abs_tol=1e-7)


@given(reciprocal_lines(), stacks)
def test_a_stack_attenuates_the_same_from_both_sides(lines: fields.SpectralLines, stack: list[Layer]) -> None:
    """Reciprocity, with equal terminals and no fixed layers; for loops whatever their radii and gaps."""
    assert math.isclose(attenuation(lines, stack[::-1]), attenuation(lines, stack), rel_tol=1e-9, abs_tol=1e-7)


@given(coaxial_lines(), stacks, layers())
def test_fixed_layers_on_the_other_side_mirror_the_stack(
    lines: fields.SpectralLines, stack: list[Layer], wall: Layer
) -> None:
    """With fixed layers only the whole arrangement can be turned round."""
    frequency = lines.frequency_hz
    here = fields.attenuation_db(lines, media_of(stack, frequency), source_side=media_of([wall], frequency))
    there = fields.attenuation_db(lines, media_of(stack[::-1], frequency), victim_side=media_of([wall], frequency))
    np.testing.assert_allclose(here, there, rtol=1e-9, atol=1e-7)


@given(reciprocal_lines(), st.lists(spread(1e-9, 1e-2), min_size=1, max_size=3))
def test_air_attenuates_nothing(lines: fields.SpectralLines, thicknesses: list[float]) -> None:
    sheets: list[Layer] = [(1.0, 0.0, 1.0, thickness) for thickness in thicknesses]
    assert abs(attenuation(lines, sheets)) < 1e-9


@given(frequencies, st.floats(0.0, 1.55), st.sampled_from(["TE", "TM"]), stacks)
def test_a_passive_stack_does_not_amplify_a_plane_wave(
    f: float, angle: float, polarisation: str, stack: list[Layer]
) -> None:
    """The wave behind carries at most the power of the wave in front: |T| <= 1, and air in its place has |T| = 1."""
    lines = fields.plane_wave_lines(np.array([f]), angle, polarisation)
    assert attenuation(lines, stack) > -1e-9


@given(frequencies, spread(1e-3, 1e2), st.sampled_from(["magnetic", "electric"]), stacks)
def test_a_passive_stack_draws_no_more_than_the_available_power(
    f: float, distance: float, kind: str, stack: list[Layer]
) -> None:
    """Between complex terminals |T| may exceed 1, by resonance, but not |Z0|/Re(Z0).

    A source of impedance Z0 has |E|^2/(4 Re Z0) to give, and a load Z0 at the voltage E T/2 takes
    |E T/2|^2 Re(Z0)/|Z0|^2. At x = k0 r both radial impedances have Re(Z0)/|Z0| =
    x^3/sqrt((1 + x^2)((x^2 - 1)^2 + x^2)).
    """
    make = fields.magnetic_near_field_lines if kind == "magnetic" else fields.electric_near_field_lines
    lines = make(np.array([f]), distance)
    x = float(free_wavenumber(f)) * distance
    value, log_scale = fields.transmitted(lines, media_of(stack, lines.frequency_hz))
    loss = line.DB_PER_NEPER * (log_scale[0] - math.log(abs(value[0])))
    assert loss >= 20.0 * math.log10(x**3 / math.sqrt((1.0 + x**2) * ((x**2 - 1.0) ** 2 + x**2))) - 1e-9


still_layers = st.lists(
    st.tuples(spread(1.0, 3e4), st.floats(0.0, 1.5), conductivities, spread(1e-6, 1e-2)), min_size=1, max_size=5
)
"""Permeability, its loss angle, conductivity, thickness."""


@given(frequencies, spread(1e-2, 1e4), still_layers)
def test_no_evanescent_line_grows(f: float, k: float, parts: list[tuple[float, float, float, float]]) -> None:
    """Without displacement currents |T(k)| <= exp(-k sum of d cos(phi)), phi being the loss angle of a permeability.

    With p and q the row vector between equal terminals, d Re(p q*)/dz = |q|^2 Re(k/mu) + |p|^2 Re(k mu) is at least
    2 k cos(phi) Re(p q*), and |p + q|^2 >= 4 Re(p q*). Sheets of lossless permeability, and all metals, therefore
    weaken every evanescent line at least as much as the air they stand in place of. A lossy permeability of about 1 may
    weaken it less.
    """
    frequency, wavenumber = np.array([f]), np.full((1, 1), k, dtype=complex)
    lines = fields.SpectralLines(frequency, wavenumber, 1.0 / wavenumber, np.ones_like(wavenumber))
    stack = [
        (medium(frequency, mu * complex(math.cos(phi), -math.sin(phi)), sigma, 0.0), d) for mu, phi, sigma, d in parts
    ]
    value, log_scale = fields.transmitted(lines, stack)
    nepers = log_scale[0] - math.log(abs(value[0]))
    assert nepers >= k * sum(d * math.cos(phi) for _, phi, _, d in parts) - 1e-9 * max(1.0, abs(nepers))


@given(spread(1e-3, 1.0), spread(1.0, 1e4), still_layers)
def test_coaxial_dipoles_gain_no_more_than_a_shorter_way(
    gaps: float, f: float, parts: list[tuple[float, float, float, float]]
) -> None:
    """The bound of every line, summed with the dipoles' positive weights: 60 dB per decade of distance.

    Loops of finite radius have weights of both signs, for which nothing of the kind holds.
    """
    frequency = np.array([f])
    lines = fields.coaxial_lines(frequency, 0.0, 0.0, gaps, fields.REFERENCE_RULE)
    stack = [(medium(frequency, mu * complex(math.cos(phi), -math.sin(phi)), sigma), d) for mu, phi, sigma, d in parts]
    thickness = sum(d for *_, d in parts)
    shorter = sum(d * math.cos(phi) for _, phi, _, d in parts)
    bound = 60.0 * math.log10((gaps + shorter) / (gaps + thickness))
    assert fields.attenuation_db(lines, stack)[0] >= bound - 1e-4


@given(spread(1e-3, 1.0), spread(1.0, 1e7), stacks)
def test_small_loops_are_dipoles(gaps: float, f: float, stack: list[Layer]) -> None:
    """The difference goes with the square of the radius."""
    frequency = np.array([f])
    rule = fields.REFERENCE_RULE
    dipoles = attenuation(fields.coaxial_lines(frequency, 0.0, 0.0, gaps, rule), stack)
    for ratio in (1e-2, 1e-3):
        loops = attenuation(fields.coaxial_lines(frequency, ratio * gaps, ratio * gaps, gaps, rule), stack)
        assert abs(loops - dipoles) < 40.0 * ratio**2 + 1e-6


@given(spread(1e3, 3e8), st.sampled_from(["magnetic", "electric"]), stacks)
def test_near_fields_become_a_plane_wave(f: float, kind: str, stack: list[Layer]) -> None:
    """At x = k0 r the impedance differs from that of free space by 1/x^2 of it to leading order."""
    frequency = np.array([f])
    plane = attenuation(fields.plane_wave_lines(frequency), stack)
    make = fields.magnetic_near_field_lines if kind == "magnetic" else fields.electric_near_field_lines
    for x in (1e3, 1e5):
        near = attenuation(make(frequency, x / float(free_wavenumber(f))), stack)
        assert abs(near - plane) < 20.0 / x**2 + 1e-9


@given(spread(1e-3, 1.0), stacks)
def test_zero_hertz_is_the_limit_of_low_frequency(gaps: float, stack: list[Layer]) -> None:
    """Where the field no longer feels conductivity or permittivity: far below the relaxation of the slowest eddies."""
    slowest = max((MU_0 * abs(mu) * max(sigma, 1e-12) * (d + gaps) * abs(mu) * d) for mu, sigma, _, d in stack)
    f = 1e-9 / slowest
    real = [(abs(mu), sigma, eps, d) for mu, sigma, eps, d in stack]
    both = [
        attenuation(fields.coaxial_lines(np.array([frequency]), 0.0, gaps, gaps, fields.HankelRule(80)), real)
        for frequency in (0.0, min(f, 1.0))
    ]
    assert math.isclose(both[0], both[1], rel_tol=1e-6, abs_tol=1e-6)
