"""The quick look against the checked door and against every stack of small problems."""

from __future__ import annotations

import brute_force
import numpy as np
import pytest
import small_problems
from builders import build_problem, film

from stackopt import evaluate
from stackopt.compiled import compile_problem
from stackopt.problem import (
    CoaxialDipoles,
    CoaxialLoops,
    ElectricNearField,
    MagneticNearField,
    Mask,
    PlaneWave,
    Problem,
    Sheet,
)
from stackopt.scout import Scouted, scout

LOOPS = CoaxialLoops(12e-3, 5e-3, 20e-3, 25e-3)
WAVE_MASK = Mask((1e6, 1e8), (80.0, 90.0))


def check(problem: Problem) -> Scouted:
    """What is said of the best stack is what the checked door says of it."""
    compiled = compile_problem(problem)
    found = scout(compiled)
    assert found.stack
    assert evaluate.decode(compiled, found.codes[None]) == [found.stack]
    margin, row = evaluate.margins(compiled, found.codes[None])
    assert found.margin_db == pytest.approx(margin[0], rel=0, abs=1e-7)
    assert found.requirement == problem.requirements[compiled.rows.requirement[row[0]]].name
    assert found.frequency_hz == compiled.rows.frequency_hz[row[0]]
    assert evaluate.allowed(compiled, found.codes[None])[0]
    assert brute_force.is_allowed(problem, found.stack)
    assert found.tried >= len(found.stack)
    return found


@pytest.mark.parametrize(
    "field",
    [
        PlaneWave(),
        PlaneWave(0.6, "TM"),
        MagneticNearField(0.05),
        ElectricNearField(0.05),
        LOOPS,
        CoaxialDipoles(0.02, 0.03),
    ],
    ids=lambda field: field.kind,
)
def test_margin_in_every_field(field: object) -> None:
    check(build_problem(field, bond=film(25)))


def test_margin_of_two_requirements() -> None:
    problem = build_problem(LOOPS, PlaneWave(), masks=[Mask((0.0, 1e3), (1.0, 10.0)), WAVE_MASK])
    found = check(problem)
    levels = [
        evaluate.attenuation(problem, [found.stack], number, requirement.mask.grid_hz())[0]
        - requirement.mask.required_db(requirement.mask.grid_hz())
        for number, requirement in enumerate(problem.requirements)
    ]
    assert found.margin_db == pytest.approx(min(level.min() for level in levels), abs=0.03)


@pytest.mark.parametrize(
    "rules",
    [
        {"max_thickness_m": 3e-4},
        {"max_mass_kg_per_m2": 1.0},
        {"max_cost_per_m2": 12.0},
        {"first": ("ferrite",), "last": ("aluminium", "copper")},
        {"first": ("flake",), "last": ("flake",)},
        {"max_anodic_gap_v": 0.1},
        {"source_side": (Sheet("steel", 1e-3),), "max_anodic_gap_v": 0.1},
        {"source_side": (film(500), film(200)), "victim_side": (Sheet("laminate", 1e-4),)},
        {"bond": film(25), "cost_per_sheet": 3.0, "max_cost_per_m2": 40.0},
    ],
    ids=str,
)
def test_rules_are_kept(rules: dict[str, object]) -> None:
    check(build_problem(LOOPS, masks=[Mask((1e3, 1e6), (20.0, 80.0))], **rules))


def test_a_single_sheet() -> None:
    """With one sheet at most, every sheet is tried, and the best of them is the best there is."""
    problem = build_problem(LOOPS, max_sheets=1)
    compiled = compile_problem(problem)
    codes = np.arange(1, len(compiled.sheets) + 1)[:, None]
    assert check(problem).margin_db == pytest.approx(evaluate.margins(compiled, codes)[0].max(), abs=1e-7)


@pytest.mark.parametrize("seed", range(0, 40))
def test_never_better_than_the_best(seed: int) -> None:
    """On random problems: allowed, no margin above the largest there is, and of single sheets none is missed."""
    problem, compiled = small_problems.small_problem(seed)
    allowed = [stack for stack in brute_force.every_stack(problem) if brute_force.is_allowed(problem, stack)]
    found = scout(compiled)
    if not allowed:
        assert found.stack == ()
        assert found.margin_db == -np.inf
        return
    required = brute_force.required_db(problem, compiled.rows.spectra)
    margin = np.min(brute_force.attenuation_db(problem, compiled.rows.spectra, allowed) - required, axis=1)
    assert margin[allowed.index(found.stack)] == pytest.approx(found.margin_db, abs=1e-7)
    single = [value for value, stack in zip(margin, allowed, strict=True) if len(stack) == 1]
    assert max(single, default=-np.inf) - 1e-7 <= found.margin_db <= margin.max() + 1e-7


@pytest.mark.parametrize(
    "rules",
    [
        {"max_thickness_m": 1e-6},
        {"first": ("copper",), "last": ("steel",), "max_sheets": 1},
        {"first": ("film",)},
    ],
    ids=str,
)
def test_rules_that_allow_no_stack(rules: dict[str, object]) -> None:
    found = scout(compile_problem(build_problem(LOOPS, **rules)))
    assert found.stack == ()
    assert not found.codes.any()
    assert found.margin_db == -np.inf


def test_a_longer_stack_through_sheets_that_may_not_be_last() -> None:
    """The only allowed stacks have two sheets or more; the look grows through prefixes that are none."""
    found = check(build_problem(LOOPS, first=("ferrite",), last=("copper",)))
    assert found.stack[0].material == "ferrite"
    assert found.stack[-1].material == "copper"
