"""Fields inside layers: extreme stacks, the maximum principle, and behaviour that physics demands."""

from __future__ import annotations

import numpy as np
import pytest
from builders import Layer, media_of, medium

from stackopt.physics import interior, radial
from stackopt.units import MU_0

RADIUS, GAP = 12e-3, 20e-3


def flux_in(layers: list[Layer], frequency: float, parts: int = 1) -> list[list[float]]:
    """Largest flux density on the planes that cut each layer into equal parts."""
    f = np.array([frequency])
    lines = interior.source_lines(f, RADIUS, GAP)
    cut = [(*layer[:3], layer[3] / parts) for layer in layers for _ in range(parts)]
    response = interior.respond_to(lines, media_of(cut, f))
    rule = radial.RadialRule(lines, radial.radii(RADIUS, GAP))
    return [
        [
            float(radial.peak_flux(rule, response.v[plane, 0], response.i[plane, 0], layer[0]))
            for plane in range(number * parts, (number + 1) * parts + 1)
        ]
        for number, layer in enumerate(layers)
    ]


def test_ten_thousand_decibels_do_not_overflow() -> None:
    f = np.array([1e6])
    copper = (medium(f, 1.0, 5.8e7), 80e-3)  # 1,200 skin depths
    lines = interior.source_lines(f, RADIUS, GAP)
    with np.errstate(over="raise", invalid="raise", divide="raise"):
        response = interior.respond_to(lines, [copper, (medium(f, 200.0, 7e6), 1e-3)])
        power = interior.plane_power(lines, response)[:, 0]
    assert np.all(np.isfinite(response.v))
    assert np.all(np.isfinite(response.i))
    assert power[0] > 0.0
    assert power[1] == 0.0  # too small for a number


@pytest.mark.parametrize("frequency", [0.0, 50.0, 1e5])
def test_the_largest_flux_is_on_a_face(frequency: float) -> None:
    layers: list[Layer] = [(200.0 - 40.0j, 7e6, 1.0, 2e-3), (1.0, 5.8e7, 1.0, 1e-3), (2000.0, 0.5, 1e4, 3e-3)]
    for planes in flux_in(layers, frequency, 8):
        assert max(planes[1:-1]) <= max(planes[0], planes[-1]) * (1.0 + 1e-6)


def test_planes_inside_count_where_waves_stand_in_a_layer() -> None:
    """A thick plate of high permeability and permittivity: its flux is largest inside."""
    f = np.array([1e7])
    plate: Layer = (100.0 - 1.0j, 1e-3, 1e4, 24e-3)
    count = radial.inner_planes(media_of([plate], f)[0][0], plate[3], 1e7)
    fine = max(flux_in([plate], 1e7, 64)[0])
    assert fine > 1.5 * max(flux_in([plate], 1e7)[0])
    assert max(flux_in([plate], 1e7, count + 1)[0]) == pytest.approx(fine, rel=1e-2)
    assert radial.inner_planes(medium(f, 2000.0, 0.5, 12.0), 3e-3, 1e5) == 0


def test_a_static_field_heats_nothing_and_reflects_by_permeability_alone() -> None:
    f = np.array([0.0])
    lines = interior.source_lines(f, RADIUS, GAP)
    for layers, sign in (([(1.0, 5.8e7, 1.0, 1e-3)], 0.0), ([(1000.0, 7e6, 1.0, 1e-3)], 1.0)):
        response = interior.respond_to(lines, media_of(layers, f))
        change = interior.reflected_inductance(lines, response.reflection)[0]
        assert change.imag == 0.0
        assert np.sign(np.round(change.real, 20)) == sign
        assert np.all(interior.plane_power(lines, response) == 0.0)


def test_static_is_the_limit_of_low_frequencies() -> None:
    layers: list[Layer] = [(280.0, 7e6, 1.0, 150e-6), (35000.0, 1.67e6, 1.0, 50e-6)]
    still, slow = flux_in(layers, 0.0), flux_in(layers, 1e-6)
    np.testing.assert_allclose(slow, still, rtol=1e-6)


def test_inductance_falls_with_conductivity_and_rises_with_permeability() -> None:
    f = np.array([1e3])
    lines = interior.source_lines(f, RADIUS, GAP)

    def change(layer: Layer) -> float:
        response = interior.respond_to(lines, media_of([layer], f))
        return float(interior.reflected_inductance(lines, response.reflection)[0].real)

    metals = [change((1.0, sigma, 1.0, 1e-4)) for sigma in (1e4, 1e6, 1e7, 1e9)]
    sheets = [change((mu, 0.0, 1.0, 1e-4)) for mu in (10.0, 100.0, 1e3, 1e5)]
    nearer = [
        float(
            interior.reflected_inductance(at, interior.respond_to(at, media_of([(1e3, 0.0, 1.0, 1e-3)], f)).reflection)[
                0
            ].real
        )
        for at in (interior.source_lines(f, RADIUS, gap) for gap in (40e-3, 20e-3, 10e-3))
    ]
    assert metals == sorted(metals, reverse=True)
    assert max(metals) < 0.0 < min(sheets)
    assert sheets == sorted(sheets)
    assert nearer == sorted(nearer)


def test_flux_in_a_sheet_falls_as_it_gets_thicker() -> None:
    fluxes = [max(flux_in([(1e4, 0.0, 1.0, d)], 0.0)[0]) for d in (1e-4, 2e-4, 4e-4, 8e-4)]
    assert fluxes == sorted(fluxes, reverse=True)
    assert fluxes[0] / fluxes[1] == pytest.approx(2.0, rel=0.05)


def test_the_peak_of_a_turning_vector() -> None:
    """A circle has the length of its radius, in-phase parts add like the sides of a triangle."""
    assert float(radial.peak_of(np.array(1.0 + 0j), np.array(1j))) == pytest.approx(1.0)
    assert float(radial.peak_of(np.array(3.0 + 0j), np.array(4.0 + 0j))) == pytest.approx(5.0)
    rng = np.random.default_rng(4)
    turn = np.exp(1j * np.linspace(0.0, np.pi, 20001))
    for _ in range(20):
        z, rho = rng.normal(size=2) + 1j * rng.normal(size=2)
        exact = np.max(np.hypot((z * turn).real, (rho * turn).real))
        assert float(radial.peak_of(np.array(z), np.array(rho))) == pytest.approx(exact, rel=1e-6)


def test_the_largest_of_samples_is_that_of_the_parabola() -> None:
    x = np.array([0.0, 0.4, 1.1, 1.7, 2.5])
    values = 3.0 - (x - 1.25) ** 2
    assert float(radial.largest(values, x)) == pytest.approx(3.0)
    assert float(radial.largest(5.0 - x, x)) == pytest.approx(5.0)  # at the end
    assert float(radial.largest(np.zeros(5), x)) == 0.0


def test_flux_density_of_no_layers_is_that_of_free_space() -> None:
    on_axis = MU_0 * RADIUS**2 / 2.0 / (RADIUS**2 + GAP**2) ** 1.5
    film: Layer = (1.0, 0.0, 1.0, 1e-9)
    assert flux_in([film], 0.0)[0][0] == pytest.approx(on_axis, rel=1e-3)
