"""Drives on problems: totals, limits, many stacks at once, and permeability that depends on the level."""

from __future__ import annotations

import math
from dataclasses import replace

import numpy as np
import pytest
from builders import LOOPS, MATERIALS, build_problem

from stackopt.errors import InputError
from stackopt.inside import assembly, broken_limits, coil_change, inside, keeps_limits, worst_inside
from stackopt.physics.permeability import Constant
from stackopt.prediction import predict
from stackopt.problem import CoaxialDipoles, CoaxialLoops, Drive, PlaneWave, Problem, Sheet, Stack
from stackopt.rayleigh import at_level, needs_level
from stackopt.units import MU_0

STEEL, COPPER, FERRITE = Sheet("steel", 150e-6), Sheet("copper", 35e-6), Sheet("ferrite", 300e-6)
SATURATING = {
    name: replace(entry, saturation_t=1.0) if entry.permeability != Constant(1.0) else entry
    for name, entry in MATERIALS.items()
}
DRIVE = Drive(((1e5, 12.0),), 0.5, 2.0, 0.1, 10.0, 24e-6)


def driven(
    *drives: Drive, rayleigh: float | None = None, field: CoaxialLoops | CoaxialDipoles = LOOPS, **rules: object
) -> Problem:
    materials = dict(SATURATING)
    if rayleigh is not None:
        materials["steel"] = replace(materials["steel"], rayleigh_m_per_a=rayleigh)
    problem = build_problem(*(field for _ in drives), materials=materials, **rules)  # type: ignore[arg-type]
    requirements = (replace(one, drive=drive) for one, drive in zip(problem.requirements, drives, strict=True))
    return replace(problem, requirements=tuple(requirements))


def random_stacks(problem: Problem, count: int) -> list[Stack]:
    rng = np.random.default_rng(1)
    sheets = problem.sheets
    return [tuple(sheets[i] for i in rng.integers(len(sheets), size=rng.integers(1, 5))) for _ in range(count)]


def test_flux_grows_with_the_drive_and_heat_with_its_square() -> None:
    one, three = (
        inside(problem, (STEEL, COPPER), problem.requirements[0])
        for problem in (driven(replace(DRIVE, points=((1e5, peak),))) for peak in (1.0, 3.0))
    )
    assert three.flux_fraction == pytest.approx(3.0 * one.flux_fraction)
    assert three.heat_w == pytest.approx(9.0 * one.heat_w)
    assert three.inductance_change == pytest.approx(one.inductance_change)


def test_the_frequencies_of_a_drive_act_together() -> None:
    low, high = (1e4, 5.0), (1e5, 12.0)
    alone = [inside(p, (STEEL,), p.requirements[0]) for p in (driven(replace(DRIVE, points=(x,))) for x in (low, high))]
    problem = driven(replace(DRIVE, points=(low, high)))
    both = inside(problem, (STEEL,), problem.requirements[0])
    assert both.flux_fraction == pytest.approx(sum(one.flux_fraction for one in alone))
    assert both.heat_w == pytest.approx(sum(one.heat_w for one in alone))
    assert abs(both.inductance_change) == max(abs(one.inductance_change) for one in alone)


def test_many_stacks_at_once_are_what_each_is_alone() -> None:
    problem = driven(
        DRIVE, Drive(((0.0, 100.0), (1e3, 5.0))), bond=Sheet("film", 25e-6),
        source_side=(Sheet("lacquer", 1e-4),), victim_side=(Sheet("steel", 1e-3),),
    )  # fmt: skip
    stacks = random_stacks(problem, 20)
    worst = worst_inside(problem, stacks)
    for number, stack in enumerate(stacks):
        alone = [inside(problem, stack, one) for one in problem.requirements]
        top = max(alone, key=lambda one: one.flux_fraction)
        assert worst.flux_fraction[number] == pytest.approx(top.flux_fraction)
        assert worst.layer[number] == (-1 if top.flux_layer is None else top.flux_layer)
        assert worst.heat_w[number] == pytest.approx(max(one.heat_w for one in alone))
        assert worst.inductance_change[number] == pytest.approx(abs(alone[0].inductance_change))
        kept = not any(text for one in alone for text in broken_limits(one))
        assert kept == (worst.excess[number] <= 1e-9) == keeps_limits(problem, [stack])[0]


def test_no_drive_no_limits() -> None:
    problem = build_problem()
    assert np.all(keeps_limits(problem, [(STEEL,), (COPPER,)]))
    assert keeps_limits(problem, []).shape == (0,)
    assert keeps_limits(driven(DRIVE), []).shape == (0,)
    assert predict(problem, [(STEEL,)])[0].inside == ()
    with pytest.raises(InputError, match="no drive is given"):
        inside(problem, (STEEL,), problem.requirements[0])


def test_fixed_layers_can_saturate_but_their_heat_is_not_the_stacks() -> None:
    problem = driven(DRIVE, source_side=(Sheet("steel", 25e-6),))
    state = inside(problem, (COPPER,), problem.requirements[0])
    assert state.flux_layer == 0
    assert [layer.in_stack for layer in state.states[0].layers] == [False, True]
    assert state.heat_w == state.states[0].layers[1].heat_w > 0.0
    assert state.states[0].layers[0].heat_w > 0.0
    assert math.isnan(state.states[0].layers[1].flux_fraction)


def test_the_change_of_the_source_is_against_air_in_the_stacks_place() -> None:
    problem = driven(DRIVE, victim_side=(Sheet("copper", 1e-3),))
    nothing = Sheet("air", 1e-3)
    problem = replace(problem, materials={**problem.materials, "air": replace(MATERIALS["film"], permittivity=1.0)})
    assert inside(problem, (nothing,), problem.requirements[0]).inductance_change == pytest.approx(0.0, abs=1e-12)
    change = coil_change(problem, (STEEL,), problem.requirements[0], np.array([1e5]))
    state = inside(problem, (STEEL,), problem.requirements[0]).states[0]
    assert change.inductance_change_h[0] == pytest.approx(state.inductance_change_h)
    assert change.resistance_change_ohm[0] == pytest.approx(state.resistance_change_ohm)
    assert state.inductance_change == pytest.approx(state.inductance_change_h * 100.0 / 24e-6)


def test_a_small_loop_is_a_dipole() -> None:
    radius = 0.1e-3
    area = math.pi * radius**2
    small = driven(Drive(((1e5, 1.0 / area),)), field=CoaxialLoops(radius, 5e-3, 20e-3, 25e-3))
    dipole = driven(Drive(((1e5, 1.0),)), field=CoaxialDipoles(20e-3, 25e-3))
    one, other = (inside(problem, (FERRITE, COPPER), problem.requirements[0]) for problem in (small, dipole))
    assert one.flux_fraction == pytest.approx(other.flux_fraction, rel=1e-3)
    assert one.heat_w == pytest.approx(other.heat_w, rel=1e-3)
    changes = [state.states[0].inductance_change_h for state in (one, other)]
    assert changes[0] == pytest.approx(changes[1] * area**2, rel=1e-3)


def test_limits_that_are_broken_are_told_in_words() -> None:
    problem = driven(Drive(((1e5, 3000.0),), 0.5, 2.0, 0.001, 10.0, 24e-6))
    (prediction,) = predict(problem, [(STEEL, COPPER)])
    assert [text.split(",")[0] for text in prediction.broken if "requirement" not in text][-3:] == [
        "steel 150um carries 134 % of its saturation",
        "the stack takes 383 W of heat",
        "the source's inductance changes by -0.141 %",
    ]


def test_sources_on_the_first_face_are_refused() -> None:
    for field in (CoaxialDipoles(0.0, 1e-2), CoaxialLoops(0.1, 0.1, 1e-3, 0.1)):
        with pytest.raises(InputError, match="source_gap"):
            coil_change(build_problem(field), (COPPER,), build_problem(field).requirements[0])
    with pytest.raises(InputError, match="a plane wave has no source"):
        coil_change(build_problem(PlaneWave()), (COPPER,), build_problem(PlaneWave()).requirements[0])


def test_permeability_follows_the_field() -> None:
    problem = driven(Drive(((0.0, 50.0),)), rayleigh=0.5)
    requirement = problem.requirements[0]
    level = at_level(problem, (STEEL, COPPER), requirement)
    assert level.converged
    steel = level.layers.index(STEEL)
    assert level.extra_mu[steel] == pytest.approx(0.5 * level.field_a_per_m[steel], rel=1e-5)
    assert level.extra_mu[steel] > 1.0
    assert level.extra_mu[level.layers.index(COPPER)] == 0.0
    state = inside(problem, (STEEL, COPPER), requirement, level.extra_mu)
    flux = state.states[0].layers[steel].peak_flux_t
    assert flux == pytest.approx(MU_0 * (280.0 + level.extra_mu[steel]) * level.field_a_per_m[steel], rel=1e-5)
    (prediction,) = predict(problem, [(STEEL, COPPER)])
    assert prediction.levels[0].extra_mu == level.extra_mu
    assert prediction.inside[0].states[0].layers[steel].peak_flux_t == pytest.approx(flux)
    small = prediction.curves[0].attenuation_db
    assert level.attenuation_db[0] > small[0]


def test_a_weak_drive_leaves_the_permeability_alone() -> None:
    problem = driven(Drive(((1e3, 1e-6),)), rayleigh=0.5)
    level = at_level(problem, (STEEL,), problem.requirements[0])
    assert level.converged
    np.testing.assert_allclose(
        level.attenuation_db, predict(problem, [(STEEL,)])[0].curves[0].attenuation_db, atol=1e-6
    )
    assert not needs_level(problem, (COPPER,), problem.requirements[0])
    assert not needs_level(driven(DRIVE), (STEEL,), driven(DRIVE).requirements[0])


def test_an_iteration_that_does_not_settle_says_so(monkeypatch: pytest.MonkeyPatch) -> None:
    from stackopt import rayleigh
    from stackopt.outputs.drives import verdict_lines

    monkeypatch.setattr(rayleigh, "MOST_STEPS", 2)
    problem = driven(Drive(((0.0, 5000.0),)), rayleigh=5.0)
    (prediction,) = predict(problem, [(STEEL,)])
    assert not prediction.levels[0].converged
    assert "did not settle in 2 steps" in dict(verdict_lines(prediction))["level"]


def test_any_field_and_coefficient_settles() -> None:
    for peak in (1.0, 1e3, 1e6):
        for coefficient in (1e-3, 1.0, 1e3):
            problem = driven(Drive(((0.0, peak),)), rayleigh=coefficient)
            assert at_level(problem, (STEEL, Sheet("steel", 1e-3)), problem.requirements[0]).converged


def test_layers_of_an_assembly_stand_in_order() -> None:
    problem = build_problem(bond=Sheet("film", 25e-6), source_side=(Sheet("lacquer", 1e-4),))
    assert [sheet.material for sheet in assembly(problem, (STEEL, COPPER))] == ["lacquer", "steel", "film", "copper"]
