"""Demands beyond the nominal margin: worst corners, yield and the limits of a drive, in exploring and proof."""

from __future__ import annotations

from collections.abc import Iterator
from dataclasses import replace
from itertools import product

import numpy as np
import pytest

from stackopt import demands, evaluate, shares
from stackopt.archive import Archive, non_dominated
from stackopt.compiled import MARGIN_SLACK_DB, CompiledProblem, compile_problem
from stackopt.explore import Explorer
from stackopt.inside import worst_inside
from stackopt.phases import Search
from stackopt.physics.permeability import Constant, Debye
from stackopt.problem import (
    CoaxialLoops,
    Drive,
    Mask,
    Material,
    Problem,
    Requirement,
    SearchSettings,
    StackRules,
    Tolerance,
)
from stackopt.proof import Prover
from stackopt.shares import mirror_holds
from stackopt.stock import Stock
from stackopt.tolerance import tolerances_of
from stackopt.workers import Processes

LOOPS = CoaxialLoops(10e-3, 5e-3, 12e-3, 15e-3)
MASK = Mask((1e3, 20e3, 200e3), (2.0, 20.0, 45.0), points_per_decade=4)


def invented(assume: str = "nominal", drive: Drive | None = None, limit: float | None = None) -> Problem:
    """Small problem of three invented materials with wide tolerances."""
    materials = (
        Material(
            "foil", 4e7, 5000.0, Constant(1.0), gauges_m=(18e-6, 50e-6, 120e-6), price_per_kg=20.0,
            tolerance=Tolerance(thickness=(-0.1, 0.1), conductivity=(-0.05, 0.05)),
        ),
        Material(
            "alloy", 2e6, 8200.0, Debye(900.0, 2e4), gauges_m=(25e-6, 60e-6), price_per_kg=90.0, saturation_t=0.8,
            tolerance=Tolerance(permeability=(-0.5, 1.0)),
        ),
        Material("ferrite", 1e-3, 4800.0, Debye(300.0, 2e6), 10.0, gauges_m=(150e-6,), price_per_kg=60.0,
                 saturation_t=0.35),
    )  # fmt: skip
    return Problem(
        title="invented",
        currency="EUR",
        materials={material.name: material for material in materials},
        use=tuple(material.name for material in materials),
        requirements=(Requirement("loops", LOOPS, MASK, drive),),
        rules=StackRules(max_sheets=3, max_thickness_m=limit),
        search=SearchSettings(assume=assume, random_seed=3, population=20),
    )


DRIVE = Drive(points=((20e3, 60.0),), saturation_fraction=0.2, max_heat_w=0.05)
CASES = {
    "worst": invented("worst"),
    "yield": invented("yield"),
    "drive": invented(drive=DRIVE),
    "worst and drive": invented("worst", DRIVE),
}


def brute_force(compiled: CompiledProblem) -> np.ndarray:
    """Objective vectors of the front by judging every stack."""
    choices = range(1, len(compiled.sheets) + 1)
    stacks = [s + (0,) * (3 - n) for n in (1, 2, 3) for s in product(choices, repeat=n)]
    codes = np.array(stacks, dtype=np.int64)
    codes = codes[evaluate.allowed(compiled, codes)]
    codes = codes[evaluate.margins(compiled, codes)[0] >= -MARGIN_SLACK_DB]
    codes = codes[demands.met(compiled, codes)]
    values = evaluate.objective_values(compiled, codes, evaluate.sums(compiled, codes))
    return np.unique(values[non_dominated(values)], axis=0)


@pytest.fixture(scope="module")
def processes() -> Iterator[Processes]:
    with Processes(2) as workers:
        yield workers


@pytest.mark.parametrize("problem", CASES.values(), ids=CASES)
@pytest.mark.parametrize("room", [3, 20_000])
def test_proof_equals_brute_force(
    problem: Problem, room: int, processes: Processes, monkeypatch: pytest.MonkeyPatch
) -> None:
    monkeypatch.setattr(shares, "CANDIDATES", room)  # with a small room shares end early
    compiled = compile_problem(problem)
    here, there = Archive(3, 3), Archive(3, 3)
    assert Prover(compiled, here).run()
    assert Prover(compiled, there).run(processes)
    expected = brute_force(compiled)
    assert len(expected)
    assert np.array_equal(here.values, expected)
    assert np.array_equal(there.values, expected)


@pytest.mark.parametrize("problem", CASES.values(), ids=CASES)
def test_demands_exclude_stacks_that_meet_the_nominal_mask(problem: Problem) -> None:
    nominal = replace(
        problem,
        search=replace(problem.search, assume="nominal"),
        requirements=tuple(replace(requirement, drive=None) for requirement in problem.requirements),
    )
    assert not np.array_equal(brute_force(compile_problem(problem)), brute_force(compile_problem(nominal)))


@pytest.mark.parametrize("problem", CASES.values(), ids=CASES)
def test_exploring_keeps_only_stacks_that_meet_the_demands(problem: Problem) -> None:
    compiled = compile_problem(problem)
    explorer = Explorer(Stock(compiled), seed=1, population=20)
    explorer.step()
    codes = explorer.archive.codes[:, :3]
    assert len(codes)
    assert np.all(demands.met(compiled, codes))


def test_mirror_images_are_not_skipped_under_a_drive() -> None:
    assert mirror_holds(compile_problem(CASES["worst"]))
    assert not mirror_holds(compile_problem(CASES["drive"]))


def test_front_shows_worst_margin_below_the_nominal_one() -> None:
    front = Search(CASES["worst"]).run()
    frame = front.to_frame()
    assert front.complete
    assert np.all(frame["worst_margin_db"] >= -MARGIN_SLACK_DB)
    assert np.all(frame["worst_margin_db"] < frame["margin_db"])


def test_front_shows_yield_with_its_interval() -> None:
    frame = Search(CASES["yield"]).run().to_frame()
    assert np.all(frame["yield"] >= CASES["yield"].search.yield_goal)
    assert np.all(frame["yield_low"] <= frame["yield"])
    assert np.all(frame["yield"] <= frame["yield_high"] + 1e-12)  # all samples good: both are 1


def test_front_shows_flux_and_heat_within_the_limits() -> None:
    front = Search(CASES["drive"]).run()
    frame = front.to_frame()
    assert front.complete
    assert np.all(frame["flux_fraction"] <= DRIVE.saturation_fraction * (1 + 1e-9))
    assert DRIVE.max_heat_w is not None
    assert np.all(frame["heat_w"] <= DRIVE.max_heat_w * (1 + 1e-9))
    assert frame["flux_layer"].str.contains("alloy|ferrite").any()


def test_heat_as_an_objective_is_explored_and_not_proved() -> None:
    problem = invented(drive=Drive(points=((20e3, 60.0),), saturation_fraction=1.0))
    problem = replace(problem, search=replace(problem.search, objectives=("mass", "heat")))
    front = Search(problem).run()
    assert not front.complete
    assert front.statement.startswith("Explored, not proved: the objective heat")
    heat = worst_inside(problem, [row.stack for row in front.rows]).heat_w
    assert np.allclose([row.objective("heat") for row in front.rows], heat, rtol=1e-9)
    assert np.all(np.diff(heat) < 0.0)  # ranked by mass, so heavier must be cooler


def test_decisive_margin_is_the_worst_corner_and_names_its_row() -> None:
    compiled = compile_problem(CASES["worst"])
    codes = np.array([[1, 4, 0], [3, 5, 0]], dtype=np.int64)
    margin, row = evaluate.margins(compiled, codes)
    known = np.zeros(len(compiled.rows.frequency_hz), dtype=bool)
    decisive, where = demands.decisive_margins(compiled, codes, margin, row, known)
    worst = tolerances_of(compiled).worst_margins(codes)
    assert np.array_equal(decisive, worst.margin_db)
    assert np.array_equal(where, worst.row)


def test_holds_at_level_is_true_without_rayleigh_data() -> None:
    problem = CASES["drive"]
    assert demands.holds_at_level(problem, (problem.sheets[0],))


def test_a_drive_that_raises_permeability_is_judged_at_its_level() -> None:
    problem = CASES["drive"]
    alloy = replace(problem.materials["alloy"], rayleigh_m_per_a=20.0)
    level = replace(problem, materials={**problem.materials, "alloy": alloy})
    stack = (problem.sheets[1], problem.sheets[4])
    far = replace(level, requirements=(replace(level.requirements[0], mask=replace(MASK, attenuation_db=(90.0,) * 3)),))
    assert not demands.holds_at_level(far, stack)
