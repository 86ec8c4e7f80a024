from __future__ import annotations

import numpy as np
import pytest
from builders import LOOPS, build_problem, film

from stackopt import model
from stackopt.physics import fields
from stackopt.problem import (
    CoaxialDipoles,
    CoaxialLoops,
    ElectricNearField,
    Field,
    MagneticNearField,
    PlaneWave,
    Sheet,
)

HZ = np.array([1e3, 1e6])
RULE = fields.HankelRule(16)


def test_materials_become_media() -> None:
    problem = build_problem()
    (steel, thickness), (ferrite, _) = model.media(problem, [Sheet("steel", 1e-4), Sheet("ferrite", 3e-4)], HZ)
    np.testing.assert_array_equal(steel.mu_r, problem.materials["steel"].permeability(HZ))
    assert (thickness, steel.conductivity_s_per_m, steel.permittivity) == (1e-4, 7e6, 1.0)
    assert (ferrite.conductivity_s_per_m, ferrite.permittivity) == (1e-4, 12.0)


def test_bonds_lie_between_sheets_only() -> None:
    bond, one, other = film(25.0), Sheet("steel", 1e-4), Sheet("copper", 9e-6)
    problem = build_problem(bond=bond)
    assert model.with_bonds(problem, (one, other, one)) == (one, bond, other, bond, one)
    assert model.with_bonds(problem, (one,)) == (one,)
    assert model.with_bonds(problem, ()) == ()
    assert model.with_bonds(build_problem(), (one, other)) == (one, other)


@pytest.mark.parametrize(
    ("field", "expected"),
    [
        (PlaneWave(0.4, "TM"), fields.plane_wave_lines(HZ, 0.4, "TM")),
        (MagneticNearField(0.2), fields.magnetic_near_field_lines(HZ, 0.2)),
        (ElectricNearField(0.2), fields.electric_near_field_lines(HZ, 0.2)),
        (LOOPS, fields.coaxial_lines(HZ, 12e-3, 5e-3, 45e-3, RULE)),
        (CoaxialDipoles(0.1, 0.2), fields.coaxial_lines(HZ, 0.0, 0.0, 0.1 + 0.2, RULE)),
    ],
)
def test_fields_become_lines(field: Field, expected: fields.SpectralLines) -> None:
    lines = model.spectral_lines(field, HZ, RULE)
    np.testing.assert_array_equal(lines.k, expected.k)
    np.testing.assert_array_equal(lines.terminal, expected.terminal)
    np.testing.assert_array_equal(lines.weight, expected.weight)
    assert lines.polarisation == expected.polarisation


def test_fields_of_one_line_need_no_quadrature() -> None:
    problem = build_problem(PlaneWave())
    assert model.choose_rule(problem, PlaneWave(), HZ, problem.sheets, 0.02) == (fields.REFERENCE_RULE, 0.0)


@pytest.mark.parametrize("gap", [0.5e-3, 5e-3])
def test_rules_keep_their_error_on_stacks_that_were_not_tried(gap: float) -> None:
    """Small gaps and strong permeability, where a rule judged by single sheets alone is wrong by 0.1 dB and more."""
    field = CoaxialLoops(0.3 * gap, 0.3 * gap, gap, gap)
    problem = build_problem(field, bond=film(25.0), use=["copper", "aluminium", "nickel alloy", "laminate", "steel"])
    grid = np.array([10.0, 1e3, 1e5])
    rule, worst = model.choose_rule(problem, field, grid, problem.sheets, 0.02)
    assert worst <= 0.01
    random = np.random.default_rng(8)
    for _ in range(60):
        stack = tuple(problem.sheets[i] for i in random.integers(len(problem.sheets), size=4))
        layers = model.media(problem, model.with_bonds(problem, stack), grid)
        exact, fast = (
            fields.attenuation_db(model.spectral_lines(field, grid, used), layers)
            for used in (fields.REFERENCE_RULE, rule)
        )
        assert np.max(np.abs(fast - exact)[exact < 200.0], initial=0.0) <= 0.02
