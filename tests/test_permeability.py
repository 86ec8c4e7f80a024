from __future__ import annotations

import math

import numpy as np
import pytest

from stackopt.physics.permeability import (
    ColeCole,
    Constant,
    Debye,
    Lorentz,
    PermeabilityLaw,
    Sum,
    Table,
    kramers_kronig_deviation,
    tables_in,
)

GRID = np.logspace(-1, 12, 400)
STEEL = ColeCole(280.0, 5e3, 0.2, 83.3)
SHARP = Lorentz(150.0, 25e6, 400e6)  # too narrow for a table of five points a decade
LAWS: list[PermeabilityLaw] = [
    Constant(5.0),
    Debye(3e4, 3e3),
    Debye(280.0, 5e3, 80.0),
    STEEL,
    ColeCole(2000.0, 1e6, 0.0),
    Lorentz(150.0, 25e6, 15e6),
    SHARP,
    Sum((Debye(60.0, 40e6), Lorentz(40.0, 300e6, 200e6))),
]


@pytest.mark.parametrize("law", LAWS)
def test_laws_are_passive_and_begin_real(law: PermeabilityLaw) -> None:
    assert np.all(law(GRID).imag <= 0.0)
    static = law(np.array([0.0]))[0]
    assert static.imag == 0.0
    assert static.real == pytest.approx(law(np.array([1e-6]))[0].real, rel=1e-4)


@pytest.mark.parametrize("law", LAWS)
def test_laws_keep_the_shape(law: PermeabilityLaw) -> None:
    assert law(np.ones((2, 3))).shape == (2, 3)


def test_debye_at_its_relaxation() -> None:
    assert Debye(101.0, 3e3)(np.array([3e3]))[0] == pytest.approx(1.0 + 50.0 - 50.0j)


def test_limits() -> None:
    assert Debye(3000.0, 1e4, 7.0)(np.array([0.0, 1e14])) == pytest.approx([3000.0, 7.0], rel=1e-6)
    assert Lorentz(150.0, 25e6, 15e6)(np.array([0.0, 1e14])) == pytest.approx([150.0, 1.0], rel=1e-6)
    assert STEEL(np.array([0.0]))[0] == pytest.approx(280.0)


def test_cole_cole_without_broadening_is_debye() -> None:
    assert ColeCole(500.0, 2e4, 0.0, 3.0)(GRID) == pytest.approx(Debye(500.0, 2e4, 3.0)(GRID))


def test_lorentz_turns_negative_above_a_sharp_resonance() -> None:
    assert SHARP(np.array([25e6]))[0].real == pytest.approx(1.0)
    assert SHARP(np.array([40e6]))[0].real < 0.0


def test_sum_adds_dispersions() -> None:
    both = Sum((Debye(60.0, 40e6), Constant(11.0)))
    assert both(np.array([0.0]))[0] == pytest.approx(70.0)
    assert both(np.array([1e16]))[0] == pytest.approx(11.0, abs=1e-3)


def test_carbon_steel_passes_the_published_points() -> None:
    # low-carbon steel 1018, Review of QNDE 2006: real part about 280 at 1-10 Hz and about 90 at 100 kHz
    real = STEEL(np.array([1.0, 10.0, 100e3])).real
    assert real[:2] == pytest.approx([280.0, 280.0], rel=0.01)
    assert real[2] == pytest.approx(90.0, rel=0.03)


def test_table_is_linear_against_log_frequency() -> None:
    table = Table((1e3, 1e5), (100.0, 50.0), (0.0, -20.0))
    assert table(np.array([1e3, 1e4, 1e5])) == pytest.approx([100.0, 75.0 - 10.0j, 50.0 - 20.0j])


def test_table_holds_its_ends_for_one_octave_and_no_further() -> None:
    table = Table((1e3, 1e5), (100.0, 50.0), (-1.0, -20.0))
    assert table.octave_hz == (500.0, 2e5)
    assert table(np.array([500.0, 2e5])) == pytest.approx([100.0 - 1.0j, 50.0 - 20.0j])
    for frequency in (0.0, 499.0, 2.01e5):
        with pytest.raises(ValueError, match="from 1000 Hz to 100000 Hz"):
            table(np.array([frequency]))


@pytest.mark.parametrize("frequency", [(1e3,), (1e3, 1e3), (1e5, 1e3), (0.0, 1e3)])
def test_table_needs_rising_positive_frequencies(frequency: tuple[float, ...]) -> None:
    with pytest.raises(ValueError, match="two rising positive frequencies"):
        Table(frequency, (1.0,) * len(frequency), (0.0,) * len(frequency))


def test_tables_are_found_inside_sums() -> None:
    table = Table((1e3, 1e5), (100.0, 50.0), (0.0, -20.0))
    assert tables_in(Sum((Debye(60.0, 40e6), Sum((table,))))) == (table,)
    assert tables_in(Constant(1.0)) == ()


def _tabulated(law: PermeabilityLaw, low_hz: float, high_hz: float) -> Table:
    frequency = np.geomspace(low_hz, high_hz, 40)
    mu = law(frequency)
    return Table(tuple(frequency), tuple(mu.real), tuple(mu.imag))


@pytest.mark.parametrize("law", [law for law in LAWS if law != SHARP])
@pytest.mark.parametrize("window", [(1e1, 1e9), (1e3, 1e6), (1e5, 3e7), (1e6, 1e8)])
def test_kramers_kronig_holds_for_the_laws(law: PermeabilityLaw, window: tuple[float, float]) -> None:
    assert kramers_kronig_deviation(_tabulated(law, *window)) < 0.1


def test_kramers_kronig_catches_falling_permeability_without_loss() -> None:
    frequency = tuple(np.geomspace(1e2, 1e7, 20))
    falling = Table(frequency, tuple(np.linspace(1000.0, 1.0, 20)), (0.0,) * 20)
    assert kramers_kronig_deviation(falling) > 0.4


def test_kramers_kronig_catches_loss_without_dispersion() -> None:
    frequency = np.geomspace(1e2, 1e7, 40)
    loss = Debye(1000.0, 3e4)(frequency).imag
    assert kramers_kronig_deviation(Table(tuple(frequency), (1000.0,) * 40, tuple(loss))) > 0.9


def test_kramers_kronig_says_nothing_about_short_tables() -> None:
    assert kramers_kronig_deviation(Table((1e3, 1e5), (100.0, 1.0), (0.0, 0.0))) == 0.0
    assert kramers_kronig_deviation(Table((1.0, 2.0, 3.0, 4.0), (100.0, 50.0, 20.0, 1.0), (0.0,) * 4)) == 0.0
    assert math.isfinite(kramers_kronig_deviation(_tabulated(Constant(1.0), 1e3, 1e6)))
