"""Prototypes against their prediction: verdicts, bands, causes recovered from sweeps spoilt on purpose."""

from __future__ import annotations

from collections.abc import Callable
from dataclasses import replace
from typing import Any

import numpy as np
import pytest
from bench_files import sweep_of
from builders import LOOPS, MATERIALS, build_problem
from numpy.typing import NDArray

from stackopt import evaluate
from stackopt.bench.compare import MEETS, MISSES, OUTSIDE, UNTOLD, Comparison, compare
from stackopt.bench.prototype import Prototype, band
from stackopt.errors import InputError
from stackopt.physics.permeability import Scaled, Table
from stackopt.problem import MagneticNearField, Mask, PlaneWave, Problem, Sheet, Stack, Tolerance

Real = NDArray[np.float64]

FREQUENCY = np.geomspace(200.0, 5e5, 31)
NOISE_DB = 0.1
STACK: Stack = (Sheet("steel", 250e-6), Sheet("film", 25e-6), Sheet("copper", 35e-6))
TOLERANCES = {
    "steel": Tolerance((-0.03, 0.03), (-0.03, 0.03), (-0.1, 0.1)),
    "copper": Tolerance((-0.03, 0.03), (-0.03, 0.03)),
}
HELD = {name: replace(entry, tolerance=TOLERANCES.get(name, Tolerance())) for name, entry in MATERIALS.items()}
LOW = Mask((100.0, 1e6), (1.0, 10.0))


def problem_of(*fields: Any, mask: Mask = LOW, **rules: Any) -> Problem:
    return build_problem(*fields, masks=(mask,), materials=HELD, **rules)


def predicted(problem: Problem, stack: Stack, frequency: Real = FREQUENCY) -> Real:
    return np.asarray(evaluate.attenuation(problem, [stack], 0, frequency)[0])


def compared(problem: Problem, loss: Real, seed: int = 3, **more: Any) -> Comparison:
    noisy = loss + np.random.default_rng(seed).normal(0.0, NOISE_DB, len(loss))
    return compare(problem, STACK, sweep_of(FREQUENCY, noisy, **more))


def test_prediction_is_that_of_the_search() -> None:
    problem = problem_of()
    prototype = Prototype(problem, STACK, LOOPS, FREQUENCY)
    np.testing.assert_allclose(prototype.attenuation_db(), predicted(problem, STACK), rtol=0.0, atol=1e-9)
    np.testing.assert_allclose(prototype.quick().attenuation_db(), predicted(problem, STACK), rtol=0.0, atol=0.02)


def test_a_prototype_as_predicted() -> None:
    problem = problem_of()
    result = compared(problem, predicted(problem, STACK))
    assert not result.differs
    assert not result.causes
    assert result.meets_mask is True
    assert result.noise_db == pytest.approx(NOISE_DB, rel=0.5)


def test_a_prototype_at_a_corner_of_its_tolerances_agrees() -> None:
    problem = problem_of()
    steel = replace(HELD["steel"], permeability=Scaled(HELD["steel"].permeability, 0.93))
    changed = replace(problem, materials={**problem.materials, "steel": steel})
    result = compared(problem, predicted(changed, STACK))
    assert not result.differs


def thinner(problem: Problem) -> Real:
    return predicted(problem, (*STACK[:2], Sheet("copper", 14e-6)))


def missing(problem: Problem) -> Real:
    return predicted(problem, STACK[:2])


def formed(problem: Problem) -> Real:
    steel = replace(HELD["steel"], permeability=Scaled(HELD["steel"].permeability, 0.3))
    return predicted(replace(problem, materials={**problem.materials, "steel": steel}), STACK)


def gaps(problem: Problem) -> Real:
    field = replace(LOOPS, source_gap_m=LOOPS.source_gap_m * 1.5, victim_gap_m=LOOPS.victim_gap_m * 1.5)
    return predicted(problem_of(field), STACK)


def leakage(problem: Problem) -> Real:
    ratio = Prototype(problem, STACK, LOOPS, FREQUENCY).ratio()
    return np.asarray(-20.0 * np.log10(np.abs(ratio + 10.0 ** (-40.0 / 20.0))))


OPEN_DB = 20.0 * np.log10(FREQUENCY / FREQUENCY[-1])


def floor(problem: Problem) -> Real:
    ratio = np.abs(Prototype(problem, STACK, LOOPS, FREQUENCY).ratio())
    return np.asarray(-10.0 * np.log10(ratio**2 + 10.0 ** ((-70.0 - OPEN_DB) / 10.0)))


@pytest.mark.parametrize(
    ("spoilt", "words"),
    [
        (thinner, "sheet 3 (copper 35um) thinner by 60 %"),
        (missing, "sheet 3 (copper 35um) missing"),
        (formed, "steel with 30 % of its permeability"),
        (gaps, "air gaps larger by 22"),
        (leakage, "leakage round the edge, 40"),
        (floor, "a noise floor"),
    ],
)
def test_the_cause_is_ranked_first(spoilt: Callable[[Problem], Real], words: str) -> None:
    problem = problem_of()
    result = compared(problem, spoilt(problem), without_db=OPEN_DB)
    assert result.differs
    best = result.causes[0]
    alike = [cause.words for cause in result.causes if cause.like_first]
    assert any(words in text for text in alike), [cause.words for cause in result.causes]
    assert words in best.words
    assert best.explained > 0.98
    assert best.left_db < 0.25


def test_more_than_predicted_is_not_explained_away() -> None:
    problem = problem_of()
    result = compared(problem, predicted(problem, STACK) + 6.0)
    assert result.differs
    assert not result.causes or result.causes[0].explained < 0.5


@pytest.mark.parametrize("field", [MagneticNearField(0.05), PlaneWave()])
def test_other_fields(field: Any) -> None:
    problem = problem_of(field)
    loss = predicted(problem, STACK)
    assert not compared(problem, loss).differs
    result = compared(problem, predicted(problem, STACK[:2]))
    assert "missing" in result.causes[0].words


def test_verdicts() -> None:
    frequency = np.array([50.0, 1e3, 1e4, 1e5, 1e6])
    problem = problem_of(mask=Mask((100.0, 1e6), (20.0, 20.0), 1.0))
    at_floor = np.array([False, False, False, True, True])
    sweep = sweep_of(frequency, np.array([30.0, 21.0, 20.9, 25.0, 19.0]), at_floor=at_floor)
    result = compare(problem, STACK, sweep)
    assert result.verdicts == (OUTSIDE, MEETS, MISSES, MEETS, UNTOLD)
    assert result.meets_mask is False
    assert any("outside the mask" in remark for remark in result.remarks)
    assert (
        compare(problem, STACK, sweep_of(frequency[3:], np.array([25.0, 19.0]), at_floor=at_floor[3:])).meets_mask
        is None
    )


def test_a_sweep_that_covers_a_part_of_the_mask_says_so() -> None:
    result = compare(problem_of(), STACK, sweep_of(np.array([1e3, 1e4]), np.array([50.0, 50.0])))
    assert any("is not checked beyond that" in remark for remark in result.remarks)


def test_band_holds_random_members_of_the_tolerances() -> None:
    problem = problem_of()
    low, high, method = band(Prototype(problem, STACK, LOOPS, FREQUENCY).quick())
    assert method == "all 32 corners of the materials' tolerances"
    random = np.random.default_rng(1)
    for _ in range(20):
        steel, copper = HELD["steel"], HELD["copper"]
        shifts = random.uniform(-1.0, 1.0, 5)
        changed = {
            **problem.materials,
            "steel": replace(
                steel,
                conductivity_s_per_m=steel.conductivity_s_per_m * (1 + 0.03 * shifts[0]),
                permeability=Scaled(steel.permeability, 1 + 0.1 * shifts[1]),
            ),
            "copper": replace(copper, conductivity_s_per_m=copper.conductivity_s_per_m * (1 + 0.03 * shifts[2])),
        }
        stack = (
            Sheet("steel", 250e-6 * (1 + 0.03 * shifts[3])),
            STACK[1],
            Sheet("copper", 35e-6 * (1 + 0.03 * shifts[4])),
        )
        loss = predicted(replace(problem, materials=changed), stack)
        assert np.all(loss > low - 0.03)
        assert np.all(loss < high + 0.03)


def test_many_tolerances_are_sampled_and_said() -> None:
    tolerance = Tolerance((-0.05, 0.05), (-0.05, 0.05), (-0.1, 0.1))
    materials = {name: replace(entry, tolerance=tolerance) for name, entry in MATERIALS.items()}
    problem = build_problem(materials=materials, masks=(LOW,))
    stack = (*STACK, Sheet("aluminium", 50e-6), Sheet("laminate", 20e-6))
    _, _, method = band(Prototype(problem, stack, LOOPS, FREQUENCY[::6]).quick())
    assert "64 of the" in method


def test_without_tolerances_there_is_no_band() -> None:
    problem = build_problem(masks=(LOW,))
    low, high, method = band(Prototype(problem, STACK, LOOPS, FREQUENCY[::6]))
    np.testing.assert_array_equal(low, high)
    assert method.startswith("none")


def test_requirements_are_named() -> None:
    problem = problem_of(LOOPS, PlaneWave())
    sweep = sweep_of(FREQUENCY, np.full(len(FREQUENCY), 30.0))
    with pytest.raises(InputError, match="--requirement: is missing"):
        compare(problem, STACK, sweep)
    with pytest.raises(InputError, match="found 'x'"):
        compare(problem, STACK, sweep, "x")
    assert compare(problem, STACK, sweep, "requirement 1").requirement.field == PlaneWave()


def test_a_table_must_reach() -> None:
    table = Table((1e3, 1e4), (100.0, 90.0), (-1.0, -2.0))
    materials = {**HELD, "steel": replace(HELD["steel"], permeability=table)}
    problem = build_problem(materials=materials, masks=(LOW,))
    with pytest.raises(InputError, match="permeability table of 'steel' covers 1 kHz to 10 kHz"):
        compare(problem, STACK, sweep_of(FREQUENCY, np.full(len(FREQUENCY), 30.0)))
