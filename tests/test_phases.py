"""The phases together: explore, prove, confirm on the dense grid, refine, and again."""

from __future__ import annotations

import json
import re
import time
from dataclasses import replace
from typing import Any

import brute_force
import numpy as np
import pytest
import small_problems
from builders import LOOPS, MATERIALS, build_problem, film, material, ranged

from stackopt import evaluate
from stackopt.confirm import DENSITY
from stackopt.errors import InputError
from stackopt.front import Front
from stackopt.model import spectral_lines
from stackopt.phases import Search
from stackopt.physics.fields import REFERENCE_RULE
from stackopt.problem import (
    CoaxialDipoles,
    CoaxialLoops,
    MagneticNearField,
    Mask,
    PlaneWave,
    Problem,
    SearchSettings,
    Stack,
    format_stack,
)
from stackopt.run import prove, search
from stackopt.scout import scout
from stackopt.status import Status
from stackopt.units import format_frequency
from stackopt.workers import Processes

NEAR = MagneticNearField(0.05)
MASK = Mask((1e3, 1e5), (14.0, 60.0), points_per_decade=2)


def make(*fields: Any, seed: int = 3, population: int = 12, **more: Any) -> Problem:
    chosen = {"masks": [MASK], "use": ["copper", "laminate"], "max_sheets": 3} | more
    problem = build_problem(*(fields or (NEAR,)), **chosen)
    return replace(problem, search=SearchSettings(problem.search.objectives, seed, population))


def dense_feasible(problem: Problem) -> dict[Stack, tuple[brute_force.Vector, float]]:
    """Every stack that holds on the dense grid by the readable equations, with its objectives and its margin."""
    spectra = [
        spectral_lines(requirement.field, requirement.mask.grid_hz(DENSITY), REFERENCE_RULE)
        for requirement in problem.requirements
    ]
    stacks = [stack for stack in brute_force.every_stack(problem) if brute_force.is_allowed(problem, stack)]
    if not stacks:
        return {}
    level = brute_force.attenuation_db(problem, spectra, stacks)
    margin = np.min(level - brute_force.required_db(problem, spectra), axis=1)
    return {
        stack: (brute_force.vector_of(problem, stack), float(least))
        for stack, least in zip(stacks, margin, strict=True)
        if least >= -brute_force.SLACK_DB
    }


def check_complete(front: Front, tolerance_db: float = 1e-6) -> None:
    """The front with its equal stacks is what trying every stack on the dense grid gives."""
    problem = front.problem
    feasible = dense_feasible(problem)
    vectors = brute_force.front_of([vector for vector, _ in feasible.values()])
    assert front.complete
    assert [feasible[row.stack][0] for row in front.rows] == vectors
    for rank, row in enumerate(front.rows, start=1):
        equal = [stack for stack, (vector, _) in feasible.items() if vector == vectors[rank - 1]]
        others = [other for number, other in front.equals if number == rank]
        assert {row.stack, *(other.stack for other in others)} == set(equal)
        assert len(equal) == 1 + len(others)
        assert row.margin_db == pytest.approx(max(feasible[stack][1] for stack in equal), abs=tolerance_db + 1e-6)
        for other in (row, *others):
            assert other.margin_db == pytest.approx(feasible[other.stack][1], abs=tolerance_db)
            mass, cost, thickness = brute_force.totals(problem, other.stack)
            assert other.mass_kg_per_m2 == pytest.approx(mass / 1e12, rel=1e-15)
            assert np.isnan(other.cost_per_m2) or other.cost_per_m2 == pytest.approx(cost / 1e6, rel=1e-15)
            assert other.thickness_m == pytest.approx(thickness / 1e12, rel=1e-15)
    assert {number for number, _ in front.equals} <= set(range(1, len(front) + 1))


def single_lines(seed: int) -> bool:
    """Whether no field of the random problem needs an integral, so that its dense grid is quick to try."""
    problem = small_problems.draft_problem(seed)
    return not any(isinstance(requirement.field, CoaxialLoops | CoaxialDipoles) for requirement in problem.requirements)


SINGLE_LINES = [seed for seed in range(60) if single_lines(seed)]


class TestAgainstEveryStack:
    @pytest.mark.parametrize("seed", SINGLE_LINES)
    def test_random_problems(self, seed: int) -> None:
        problem, _ = small_problems.small_problem(seed)
        check_complete(prove(problem))

    @pytest.mark.parametrize(
        ("objectives", "more"),
        [
            (("mass", "cost", "thickness"), {}),
            (("thickness", "sheets"), {"bond": film(25)}),
            (("cost",), {"cost_per_sheet": 2.0, "first": ("laminate",)}),
        ],
    )
    def test_with_exploring(self, objectives: tuple[str, ...], more: dict[str, Any]) -> None:
        check_complete(search(make(objectives=objectives, **more)))

    def test_coaxial_loops(self) -> None:
        materials = {
            "copper": material("copper", 5.8e7, 8890.0, (18, 70), 14.0),
            "steel": replace(MATERIALS["steel"], gauges_m=(1e-4,)),
            "laminate": replace(MATERIALS["laminate"], gauges_m=(2e-5,)),
        }
        mask = Mask((0.0, 50.0, 1e3, 1e5), (0.2, 0.2, 4.0, 20.0), points_per_decade=2)
        problem = make(LOOPS, masks=[mask], materials=materials, use=list(materials), max_sheets=2)
        front = prove(problem)
        assert len(front) > 1
        check_complete(front, tolerance_db=2e-3)


def coarse_problem(**more: Any) -> Problem:
    """A front of the search grid that fails between its points, so that it takes more than one round."""
    return make(masks=[Mask((1e3, 1e5), (14.0, 60.0), points_per_decade=1)], **more)


class TestRounds:
    def test_frequencies_join_until_the_front_holds(self) -> None:
        task = Search(coarse_problem())
        assert dense_failures(task) > 0
        front = task.run()
        assert task.round > 0
        assert len(front) > 1
        check_complete(front)
        (added,) = task.extra_hz
        assert added
        assert len(set(added)) == len(added)
        dense = task.problem.requirements[0].mask.grid_hz(DENSITY)
        assert all(np.isclose(dense, frequency, rtol=1e-12).any() for frequency in added)

    def test_one_round_where_the_grid_is_fine_enough(self) -> None:
        task = Search(make(masks=[replace(MASK, points_per_decade=40)]))
        assert dense_failures(task) == 0
        front = task.run()
        assert task.round == 0
        assert task.extra_hz == [[]]
        assert front.complete

    def test_explored_only_goes_on_too(self) -> None:
        problem = coarse_problem(objectives=("thickness", "margin"))
        task = Search(problem)
        front = task.run()
        assert not front.complete
        assert len(front) > 0
        dense = problem.requirements[0].mask.grid_hz(DENSITY)
        level = evaluate.attenuation(problem, [row.stack for row in front.rows], frequency_hz=dense)
        assert np.min(level - problem.requirements[0].mask.required_db(dense)) >= -1e-6

    def test_the_last_round_leaves_out_what_fails(self, monkeypatch: pytest.MonkeyPatch) -> None:
        """No further round is allowed: stacks that fail on the dense grid are not shown, and it is said."""
        monkeypatch.setattr("stackopt.phases.MAX_ROUNDS", 0)
        problem = coarse_problem()
        front = Search(problem).run()
        assert not front.complete
        assert "Stacks that failed on the dense grid were left out." in front.statement
        feasible = dense_feasible(problem)
        assert all(row.stack in feasible for row in front.rows)


def dense_failures(task: Search) -> int:
    """Stacks of the search grid's front that fail on the dense grid."""
    spectra = task.compiled.rows.spectra
    coarse = brute_force.feasible_stacks(task.problem, spectra)
    front = set(brute_force.front_of(list(coarse.values())))
    dense = dense_feasible(task.problem)
    return sum(vector in front and stack not in dense for stack, vector in coarse.items())


class TestSeedAndWorkers:
    def test_same_front_from_any_seed_and_number_of_workers(self) -> None:
        problem = make()
        with Processes(2) as two, Processes(4) as four:
            fronts = [Search(problem, seed, workers).run() for seed, workers in ((None, None), (5, two), (None, four))]
        assert len({(front.rows, front.equals, front.statement) for front in fronts}) == 1

    def test_seed(self) -> None:
        problem = make(seed=11)
        assert Search(problem).seed == 11
        assert Search(problem, 0).seed == 0
        assert Search(problem, 5).explorer.seed == 5

    def test_exploring_depends_on_the_seed(self) -> None:
        problem = make(objectives=("mass", "margin"))
        one, other = (Search(problem, seed).explorer.state()["populations"] for seed in (1, 2))
        assert not np.array_equal(one, other)


class TestStatements:
    def test_complete(self) -> None:
        front = search(make())
        assert front.statement.startswith("Complete: all 584 stacks")
        assert f"grid {DENSITY} times denser" in front.statement

    def test_nothing_meets_the_mask(self) -> None:
        problem = make(NEAR, LOOPS, masks=[MASK, Mask((50.0, 1e6), (10.0, 300.0))])
        front = search(problem)
        assert front.complete
        assert len(front) == 0
        assert front.statement.startswith("No stack meets the mask: proved over 584 stacks. ")
        check_nearest(front)
        assert "requirement 'requirement 1'" in front.statement

    def test_rules_that_allow_no_stack(self) -> None:
        front = search(make(max_thickness_m=1e-6))
        assert front.complete
        assert len(front) == 0
        assert re.search(r"rules.* allow no stack", front.statement)

    def test_margin_is_explored_only(self) -> None:
        front = search(make(objectives=("mass", "margin")))
        assert not front.complete
        assert len(front) > 1
        assert front.statement.startswith("Explored, not proved: the objective margin does not only grow")

    def test_thickness_ranges_are_explored_only(self) -> None:
        materials = MATERIALS | {"plate": ranged("plate", "aluminium", 1e-4, 2e-3)}
        front = search(make(materials=materials, use=["plate"], max_sheets=2))
        assert not front.complete
        assert len(front) == 1
        assert front.statement.startswith("Explored, not proved: plate: a thickness_range allows endless thicknesses")

    def test_no_time(self) -> None:
        front = search(make(), hours=1e-12)
        assert not front.complete
        assert re.search(r"Not complete: the proof has settled \d+\.\d % of the stacks so far", front.statement)

    def test_no_time_and_nothing_found(self) -> None:
        problem = make(masks=[Mask((1e3, 1e5), (200.0, 300.0))])
        front = search(problem, hours=1e-12)
        assert not front.complete
        assert len(front) == 0
        assert front.statement.startswith("No stack found that meets the mask. Not complete")
        check_nearest(front)


def check_nearest(front: Front) -> None:
    """The statement tells of the best stack of the quick look by how much it misses, and where."""
    found = scout(Search(front.problem).compiled)
    (miss,) = re.findall(r"misses by (\d+\.\d) dB", front.statement)
    assert float(miss) == pytest.approx(-found.margin_db, abs=0.1)
    assert f"requirement '{found.requirement}' blocks at {format_frequency(found.frequency_hz)}" in front.statement
    assert format_stack(found.stack) in front.statement


class TestProve:
    def test_front_that_is_known(self) -> None:
        problem = make()
        whole = search(problem)
        again = prove(problem, whole)
        assert again.rows == whole.rows
        assert again.equals == whole.equals
        assert again.complete

    def test_part_of_a_front(self) -> None:
        problem = make()
        whole = search(problem)
        assert len(whole) > 1
        assert prove(problem, replace(whole, rows=whole.rows[1:])).rows == whole.rows

    def test_stacks_that_are_none_of_the_problem_are_passed_over(self) -> None:
        """The front of a problem with more sheets, longer stacks and an easier mask says little about this one."""
        other = search(make(masks=[Mask((1e3, 1e5), (5.0, 30.0))], use=["copper", "laminate", "steel"], max_sheets=4))
        problem = make(max_sheets=2)
        assert prove(problem, other).rows == prove(problem).rows

    @pytest.mark.parametrize("objectives", [("margin",), ("mass", "margin")])
    def test_margin_cannot_be_proved(self, objectives: tuple[str, ...]) -> None:
        with pytest.raises(InputError, match=r"^this front cannot be proved: the objective margin"):
            prove(make(objectives=objectives))


class Stopped(Exception):  # noqa: N818 - the name says what happened
    pass


class TestState:
    @pytest.mark.parametrize(
        ("phase", "number", "round_"),
        [
            ("exploring", 1, 0),
            ("exploring", 2, 0),
            ("preparing", 1, 0),
            ("proving", 1, 0),
            ("proving", 4, 0),
            ("confirming", 1, 0),
            ("proving", 1, 1),
            ("confirming", 1, 1),
        ],
    )
    def test_goes_on_to_the_same_front(
        self, monkeypatch: pytest.MonkeyPatch, phase: str, number: int, round_: int
    ) -> None:
        """Stopped in any phase and restored from the state at that moment, through JSON as a checkpoint does it."""
        monkeypatch.setattr("stackopt.explore.GENERATIONS", 2)
        straight = Search(coarse_problem())
        expected = straight.run()
        first, seen = Search(coarse_problem()), []

        def watch(status: Status) -> None:
            if status.phase.startswith(phase) and first.round == round_:
                seen.append(status)
                if len(seen) == number:
                    raise Stopped

        with pytest.raises(Stopped):
            first.run(watch)
        arrays, text = first.state()
        second = Search(coarse_problem(), seed=99)
        second.restore({name: array.copy() for name, array in arrays.items()}, json.loads(json.dumps(text)))
        front = second.run()
        assert second.seed == straight.seed
        assert second.round == straight.round
        assert second.extra_hz == straight.extra_hz
        assert (front.rows, front.equals, front.statement) == (expected.rows, expected.equals, expected.statement)

    def test_an_explored_search_goes_on_exactly(self) -> None:
        """Nothing is proved here, so that the front shows whether the exploring went the same way."""
        problem = make(objectives=("mass", "margin"), use=["copper", "laminate", "steel"])
        expected = Search(problem).run()
        first = Search(problem)
        with pytest.raises(Stopped):
            first.run(stop)
        arrays, text = first.state()
        second = Search(problem, seed=99)
        second.restore(arrays, json.loads(json.dumps(text)))
        assert second.run().rows == expected.rows

    def test_save_is_called_in_every_phase(self) -> None:
        task, saved = Search(coarse_problem()), []
        task.run(save=lambda: saved.append((task.round, task.exploring, task.prover is not None)))
        assert (0, True, False) in saved
        assert any(round_ > 0 for round_, _, _ in saved)


def stop(_: Status) -> None:
    raise Stopped


class TestWatcher:
    def test_phases_in_their_order(self) -> None:
        seen: list[Status] = []
        problem = make(masks=[replace(MASK, points_per_decade=40)])
        front = Search(problem).run(seen.append)
        phases = list(dict.fromkeys(status.phase for status in seen))
        assert phases[0] == "exploring"
        assert phases[1].startswith("preparing the proof")
        assert phases[2:] == ["proving", "confirming"]
        for status in seen:
            if status.phase == "exploring":
                assert status.fraction is None
            if status.phase == "proving":
                assert 0.0 <= status.fraction <= 1.0
        fractions = [status.fraction for status in seen if status.phase == "proving"]
        assert fractions == sorted(fractions)
        assert seen[-1].front_size == len(front)
        last = [status for status in seen if status.phase == "proving"][-1]
        assert set(last.best) == set(problem.search.objectives)
        assert float(last.best["mass"].split()[0]) == pytest.approx(
            min(row.mass_kg_per_m2 for row in front.rows), rel=1e-3
        )

    def test_no_exploring_from_known_stacks(self) -> None:
        seen: list[Status] = []
        task = Search(make())
        task.start_from([])
        task.run(seen.append)
        assert "exploring" not in {status.phase for status in seen}

    def test_a_past_deadline_still_gives_a_front(self) -> None:
        task = Search(make())
        front = task.run(deadline=time.monotonic() - 1.0)
        assert task.explorer.epoch == 0
        assert not front.complete
        assert task.proof_record()["share_settled"] == 0.0


class TestMargins:
    def test_of_the_front_on_the_dense_grid(self) -> None:
        task = Search(make())
        front = task.run()
        assert task.margins_db == {front.rows[0].requirement: max(row.margin_db for row in front.rows)}

    def test_of_several_requirements(self) -> None:
        """Each has the margin of the stack that suits it best; none is below the one that decides for that stack."""
        task = Search(make(NEAR, PlaneWave(), masks=[MASK, Mask((1e3, 1e5), (10.0, 60.0), points_per_decade=2)]))
        seen: list[Status] = []
        front = task.run(seen.append)
        names = {requirement.name for requirement in task.problem.requirements}
        assert set(task.margins_db) == names
        assert len(names) == 2
        assert min(task.margins_db.values()) >= max(row.margin_db for row in front.rows) - 1e-9
        assert {frozenset(status.margins) for status in seen if status.phase == "exploring"} == {frozenset(names)}

    def test_while_nothing_is_feasible(self) -> None:
        """The margins are those of the stack that comes nearest."""
        task = Search(make(masks=[Mask((1e3, 1e5), (300.0, 300.0))]))
        seen: list[Status] = []
        front = task.run(seen.append)
        assert len(front) == 0
        assert task.margins_db == {}
        assert all(margin < 0.0 for status in seen for margin in status.margins.values())
        assert any(status.margins for status in seen)


class TestProofRecord:
    def test_of_a_proof(self) -> None:
        task = Search(make())
        assert task.proof_record() is None
        task.run()
        record = task.proof_record()
        assert record["stacks"] == 584
        assert record["share_settled"] == 1.0
        assert record["mirror_images_skipped"] is True
        assert record["stacks_evaluated"] > 0
        assert record["prefixes_opened"] > 0
        json.dumps(record)

    def test_of_an_explored_search(self) -> None:
        task = Search(make(objectives=("margin", "mass")))
        task.run()
        assert task.proof_record() is None
