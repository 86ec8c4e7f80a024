"""The published formulas at 30 digits (`high_precision`, written with mpmath) against the double-precision physics.

Sources: transmission-line chain matrices of layers (J. A. Stratton, Electromagnetic Theory, 1941, chapter IX; S. A.
Schelkunoff's analogy), radial impedances of the small loop and the short dipole (C. A. Balanis, Antenna Theory), the
coaxial integral (J. R. Moser, IEEE Trans. EMC 9, 1967); attributions from memory.
"""

from __future__ import annotations

import high_precision as judge
import mpmath as mp
import numpy as np
import pytest
from builders import Layer, build_problem, film, media_of

from stackopt import evaluate, model
from stackopt.compiled import compile_problem
from stackopt.physics import fields, line
from stackopt.physics.permeability import Constant
from stackopt.problem import CoaxialDipoles, CoaxialLoops, Mask, Material, Sheet
from stackopt.units import SPEED_OF_LIGHT

COPPER = 5.8e7
FILM: Layer = (1.0, 0.0, 3.0, 25e-6)
STACKS: dict[str, list[Layer]] = {
    "foil": [(1.0, COPPER, 1.0, 9e-6)],
    "nearly nothing": [(1.0, 1e-3, 1.0, 1e-9), (1.0001, 0.0, 1.0, 1e-6)],
    "mixed": [(200.0 - 150.0j, 7e6, 1.0, 250e-6), FILM, (1.0, COPPER, 1.0, 70e-6), (90.0 - 40.0j, 1e-4, 12.0, 3e-4)],
    "plates": [(900.0 - 300.0j, 2e6, 1.0, 3e-3), (1.0, COPPER, 1.0, 5e-3), (3000.0 - 8000.0j, 1.7e6, 1.0, 2e-3)],
    "alternating": [(1e4 - 2e3j, 1.67e6, 1.0, 1e-3), (1.0, 3.5e7, 1.0, 1e-3)] * 4,
}
HZ = np.array([1e-3, 50.0, 2e4, 5e6, 1e9])


def cascade_db(lines: fields.SpectralLines, layers: list[Layer]) -> np.ndarray:
    """-20 log10 |T| of a field of a single line."""
    value, log_scale = fields.transmitted(lines, media_of(layers, lines.frequency_hz))
    return line.DB_PER_NEPER * (log_scale - np.log(np.abs(value)))


def judged_db(layers: list[Layer], kind: str, f: float) -> float:
    with mp.workdps(judge.DIGITS):
        angle = mp.mpf("0.7")
        terminal = {
            "normal": lambda: judge.ETA_0,
            "TE": lambda: judge.ETA_0 / mp.cos(angle),
            "TM": lambda: judge.ETA_0 * mp.cos(angle),
            "magnetic": lambda: judge.loop_impedance(f, "0.3"),
            "electric": lambda: judge.dipole_impedance(f, "0.3"),
        }[kind]()
        k = judge.wavenumber(f) * mp.sin(angle) if kind in ("TE", "TM") else mp.mpf(0)
        return judge.loss_db(judge.transmission(layers, k, f, terminal, "TM" if kind == "TM" else "TE"))


@pytest.mark.parametrize("kind", ["normal", "TE", "TM", "magnetic", "electric"])
@pytest.mark.parametrize("layers", STACKS.values(), ids=STACKS.keys())
def test_chains_between_every_terminal(layers: list[Layer], kind: str) -> None:
    """From nothing to tens of thousands of decibels, to 1e-12 of the value and 1e-12 dB."""
    lines = {
        "normal": lambda: fields.plane_wave_lines(HZ),
        "TE": lambda: fields.plane_wave_lines(HZ, 0.7, "TE"),
        "TM": lambda: fields.plane_wave_lines(HZ, 0.7, "TM"),
        "magnetic": lambda: fields.magnetic_near_field_lines(HZ, 0.3),
        "electric": lambda: fields.electric_near_field_lines(HZ, 0.3),
    }[kind]()
    expected = [judged_db(layers, kind, f) for f in HZ]
    np.testing.assert_allclose(cascade_db(lines, layers), expected, rtol=1e-12, atol=1e-12)


def test_ten_thousand_decibels() -> None:
    """Thicker than any shield: no overflow, and no digit lost."""
    layers = [(1.0, COPPER, 1.0, 0.04), (500.0 - 200.0j, 7e6, 1.0, 0.01), (1.0, COPPER, 1.0, 0.04)]
    frequency = np.array([1e6])
    for kind, lines in (
        ("normal", fields.plane_wave_lines(frequency)),
        ("magnetic", fields.magnetic_near_field_lines(frequency, 0.3)),
    ):
        loss = cascade_db(lines, layers)[0]
        assert loss > 10_000.0
        assert loss == pytest.approx(judged_db(layers, kind, 1e6), rel=1e-13)


@pytest.mark.parametrize("k", [1e-3, 1.0, 40.0, 5e3])
@pytest.mark.parametrize("layers", STACKS.values(), ids=STACKS.keys())
def test_static_magnetic_field(layers: list[Layer], k: float) -> None:
    """0 Hz: the scalar potential and the normal flux across permeable layers."""
    real = [(complex(mu).real, sigma, eps, d) for mu, sigma, eps, d in layers]
    wavenumber = np.full((1, 1), k, dtype=complex)
    lines = fields.SpectralLines(np.array([0.0]), wavenumber, 1.0 / wavenumber, np.ones_like(wavenumber))
    with mp.workdps(judge.DIGITS):
        expected = judge.loss_db(judge.static_transmission(real, mp.mpf(k)))
    assert cascade_db(lines, real)[0] == pytest.approx(expected, rel=1e-12, abs=1e-12)


@pytest.mark.parametrize("distance", [1e-3, 0.3, 10.0])
def test_radial_impedances(distance: float) -> None:
    """From deep in the near field to the far field."""
    frequency = np.array([1.0, 1e3, 1e6, 1e8, 1e10])
    magnetic = fields.magnetic_near_field_lines(frequency, distance).terminal[:, 0]
    electric = fields.electric_near_field_lines(frequency, distance).terminal[:, 0]
    with mp.workdps(judge.DIGITS):
        for n, f in enumerate(frequency):
            ohm = complex(2j * mp.pi * mp.mpf(f) * judge.MU_0)
            assert magnetic[n] * ohm == pytest.approx(complex(judge.loop_impedance(f, distance)), rel=1e-13)
            assert electric[n] * ohm == pytest.approx(complex(judge.dipole_impedance(f, distance)), rel=1e-13)


def coaxial_db(layers: list[Layer], f: float, a: float, b: float, h: float) -> float:
    frequency = np.array([f])
    lines = fields.coaxial_lines(frequency, a, b, h, fields.REFERENCE_RULE)
    return float(fields.attenuation_db(lines, media_of(layers, frequency))[0])


ALLOY: Layer = (30000.0, 1.67e6, 1.0, 0.5e-3)
SPACER: Layer = (1.0, 3.5e7, 1.0, 1e-3)


# radii over h, h in m: gap sums from 1 mm to 1 m, radii up to five times that
@pytest.mark.parametrize(("a", "b", "h"), [(0, 0, 1e-3), (1, 0.3, 1e-3), (0.3, 0.1, 45e-3), (5, 5, 50e-3), (5, 0, 1.0)])
@pytest.mark.parametrize(
    ("layers", "f"),
    [
        ([(1.0, COPPER, 1.0, 35e-6)], 1e5),
        ([(150.0 - 60.0j, 7e6, 1.0, 250e-6), FILM, (1.0, COPPER, 1.0, 70e-6)], 2e4),
        ([(300.0, 7e6, 1.0, 1e-3)], 0.0),
    ],
    ids=["foil", "steel, film, copper", "static"],
)
def test_coaxial_loops(layers: list[Layer], f: float, a: float, b: float, h: float) -> None:
    """The reference rule, near the source and far, around loops of every size."""
    expected = judge.coaxial_attenuation(layers, f, a * h, b * h, h)
    assert coaxial_db(layers, f, a * h, b * h, h) == pytest.approx(expected, abs=1e-6)


@pytest.mark.parametrize(
    ("layers", "f", "a", "h"),
    [
        ([ALLOY, SPACER] * 3, 0.0, 0.0, 1e-3),
        ([ALLOY, SPACER] * 2, 10.0, 3e-3, 1e-3),
        ([(1.0, COPPER, 1.0, 20e-3)], 100.0, 0.0, 5e-3),
        ([(100.0 - 30.0j, 7e6, 1.0, 5e-3), SPACER], 1e3, 5e-3, 10e-3),
    ],
    ids=["alloy kept apart, static", "alloy kept apart", "thick copper", "thick steel"],
)
def test_coaxial_loops_through_the_hardest_stacks(layers: list[Layer], f: float, a: float, h: float) -> None:
    """Stacks thicker than the gaps, and permeable sheets kept apart that pass the smallest wavenumbers only."""
    expected = judge.coaxial_attenuation(layers, f, a, a, h)
    assert coaxial_db(layers, f, a, a, h) == pytest.approx(expected, abs=1e-6)


SLABS: dict[str, tuple[complex, float, float]] = {
    "dielectric": (1.0, 0.0, 10.0),
    "magnetic": (10.0 - 0.01j, 0.0, 1.0),
    "both": (10.0 - 0.05j, 1e-4, 12.0),
}


@pytest.mark.parametrize("phase", [0.3, 1.0, 3.0])
@pytest.mark.parametrize("slab", SLABS.values(), ids=SLABS.keys())
def test_slabs_that_guide_waves(slab: tuple[complex, float, float], phase: float) -> None:
    """k0 h up to the limit of the near field; the judge's path is another one, back on the axis beyond every pole."""
    h = 50e-3
    f = phase / h * SPEED_OF_LIGHT / (2.0 * np.pi)
    index = 1.05 * abs(np.sqrt(slab[0] * slab[2]))
    for ratio in (0.1, 1.0):
        layers = [(*slab, ratio * h)]
        expected = judge.coaxial_attenuation(layers, f, 0.0, 0.0, h, index)
        assert coaxial_db(layers, f, 0.0, 0.0, h) == pytest.approx(expected, abs=1e-3)


def test_slab_that_guides_waves_between_large_loops() -> None:
    h, phase = 50e-3, 1.0
    f = phase / h * SPEED_OF_LIGHT / (2.0 * np.pi)
    layers: list[Layer] = [(*SLABS["dielectric"], 10e-3)]
    expected = judge.coaxial_attenuation(layers, f, 2.0 * h, h, h, 3.3)
    assert coaxial_db(layers, f, 2.0 * h, h, h) == pytest.approx(expected, abs=1e-3)


PLAIN = {
    entry.name: entry
    for entry in (
        Material("copper", COPPER, 8890.0, gauges_m=(9e-6, 35e-6, 105e-6, 500e-6)),
        Material("plate", 3.5e7, 2700.0, gauges_m=(200e-6, 1e-3)),
        Material("steel", 7e6, 7850.0, Constant(200.0), gauges_m=(25e-6, 250e-6)),
        Material("alloy", 1.67e6, 8740.0, Constant(30000.0), gauges_m=(25e-6, 500e-6)),
        Material("ferrite", 1e-4, 5000.0, Constant(120.0), 12.0, gauges_m=(50e-6, 300e-6)),
        Material("film", 0.0, 1000.0, permittivity=3.0),
    )
}


def layers_of(stack: tuple[Sheet, ...]) -> list[Layer]:
    return [
        (
            PLAIN[sheet.material].permeability(np.zeros(1))[0].real,
            PLAIN[sheet.material].conductivity_s_per_m,
            PLAIN[sheet.material].permittivity,
            sheet.thickness_m,
        )
        for sheet in stack
    ]


@pytest.mark.slow
@pytest.mark.parametrize(
    "field",
    [
        CoaxialDipoles(0.4e-3, 0.6e-3),
        CoaxialLoops(1e-3, 0.0, 1e-3, 1e-3),
        CoaxialLoops(12e-3, 5e-3, 20e-3, 25e-3),
        CoaxialLoops(0.1, 0.04, 10e-3, 10e-3),
        CoaxialLoops(0.15, 0.15, 0.3, 0.7),
    ],
    ids=lambda field: f"{field.kind} {field.gap_sum_m} m",
)
def test_automatically_chosen_rules(field: CoaxialDipoles | CoaxialLoops) -> None:
    """Stacks that no rule was judged by: 0.05 dB wherever the attenuation is below 200 dB."""
    mask = Mask((10.0, 1e3, 1e5, 3e6), (0.0,) * 4, points_per_decade=1)
    problem = build_problem(field, masks=[mask], max_sheets=4, materials=PLAIN, use=[*PLAIN][:-1], bond=film(25))
    compiled = compile_problem(problem)
    assert compiled.rows.quadrature[0].lines <= 80
    assert compiled.rows.quadrature[0].error_db <= 0.01
    random = np.random.default_rng(11)
    codes = evaluate.packed(random.integers(0, len(compiled.sheets) + 1, (150, 4)))
    codes = codes[codes[:, 0] > 0]
    fast = evaluate.attenuation_rows(compiled, codes)
    stacks = evaluate.decode(compiled, codes)
    fine = evaluate.attenuation(problem, stacks)
    error = np.where(fine < 200.0, np.abs(fast - fine), 0.0)
    assert np.max(error) < 0.03
    number, row = np.unravel_index(np.argmax(error), error.shape)
    radii = (field.source_radius_m, field.victim_radius_m) if isinstance(field, CoaxialLoops) else (0.0, 0.0)
    layers = layers_of(model.with_bonds(problem, stacks[number]))
    expected = judge.coaxial_attenuation(layers, float(compiled.rows.frequency_hz[row]), *radii, field.gap_sum_m)
    assert fast[number, row] == pytest.approx(expected, abs=0.05)
    assert fine[number, row] == pytest.approx(expected, abs=1e-5)


@pytest.mark.slow
def test_automatically_chosen_rule_where_slabs_guide_waves() -> None:
    h = 50e-3
    highest = 3.0 / h * SPEED_OF_LIGHT / (2.0 * np.pi)
    slab = Material("slab", 1e-4, 5000.0, Constant(8.0), 10.0, gauges_m=(1e-3, 10e-3, 40e-3))
    mask = Mask((highest / 30.0, highest), (0.0, 0.0), points_per_decade=4)
    field = CoaxialDipoles(0.4 * h, 0.6 * h)
    compiled = compile_problem(build_problem(field, masks=[mask], max_sheets=1, materials={"slab": slab}))
    fast = evaluate.attenuation_rows(compiled, np.array([[1], [2], [3]]))
    for number, thickness in enumerate(slab.gauges_m):
        for row in (0, -1) if number == 1 else (-1,):
            f = float(compiled.rows.frequency_hz[row])
            expected = judge.coaxial_attenuation([(8.0, 1e-4, 10.0, thickness)], f, 0.0, 0.0, h, 9.4)
            assert fast[number, row] == pytest.approx(expected, abs=0.05)
