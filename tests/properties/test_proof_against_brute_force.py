"""The proof, the exploring and the list of equal stacks against trying every stack of random small problems.

The other side is `brute_force`: rules and sums written again, attenuation by the readable cascade.
"""

from __future__ import annotations

import time
from collections import Counter
from collections.abc import Callable, Iterator
from contextlib import ExitStack
from dataclasses import dataclass, replace
from functools import cache

import brute_force
import numpy as np
import pytest
import small_problems
from brute_force import Vector
from builders import MATERIALS, build_problem, film, material
from numpy.typing import NDArray

from stackopt import evaluate
from stackopt.archive import Archive
from stackopt.compiled import CompiledProblem, compile_problem
from stackopt.equals import equal_stacks
from stackopt.explore import Explorer
from stackopt.problem import CoaxialLoops, Mask, PlaneWave, Problem, Sheet, Stack, format_stack
from stackopt.proof import Collector, Pending, Prover, Tally, count_stacks, why_not_provable
from stackopt.shares import mirror_holds
from stackopt.stock import Stock
from stackopt.workers import Processes, Serial, Workers

Integers = NDArray[np.int64]

SMALL = range(210)
DEEP = range(1000, 1012)
"""Eight sheets, up to four in a stack: 4680 stacks, longer fronts; every other one with metals that may not touch."""
CLOSE = range(2000, 2012)
"""Eight sheets that hardly differ, or in one objective only: long fronts of vectors close to one another."""
APART = {"bond": None, "max_anodic_gap_v": 0.2, "first": None, "last": None}


@dataclass(frozen=True)
class Case:
    """A problem with what trying every stack of it gives."""

    problem: Problem
    compiled: CompiledProblem
    feasible: dict[Stack, Vector]
    front: list[Vector]


def make_case(seed: int) -> Case:
    if seed in CLOSE:
        problem, compiled = small_problems.close_problem(seed)
    elif seed in DEEP:
        problem, compiled = small_problems.small_problem(seed, 8, 4, **(APART if seed % 2 else {}))
    else:
        problem, compiled = small_problems.small_problem(seed)
    feasible = brute_force.feasible_stacks(problem, compiled.rows.spectra)
    return Case(problem, compiled, feasible, brute_force.front_of(list(feasible.values())))


deep_case = cache(make_case)


@pytest.fixture(scope="module", params=[*SMALL, *DEEP, *CLOSE])
def case(request: pytest.FixtureRequest) -> Case:
    return deep_case(request.param) if request.param in DEEP else make_case(request.param)


@pytest.fixture(scope="module", params=DEEP)
def deep(request: pytest.FixtureRequest) -> Case:
    return deep_case(request.param)


@pytest.fixture
def small_shares(monkeypatch: pytest.MonkeyPatch) -> None:
    """Shares so short that these problems, too, are split again and again."""
    monkeypatch.setattr("stackopt.proof.WORK", 500)


@pytest.fixture(scope="module")
def workers() -> Iterator[dict[int, Workers]]:
    """Workers by their number; two and four are processes."""
    with ExitStack() as stack:
        yield {1: Serial()} | {count: stack.enter_context(Processes(count)) for count in (2, 4)}


def start(compiled: CompiledProblem, stacks: list[Stack] | None = None) -> Prover:
    """A proof that begins with some stacks, none unless given."""
    archive = Archive(len(compiled.problem.search.objectives), compiled.rules.max_sheets)
    if stacks:
        codes = evaluate.encode(compiled, stacks)
        totals = evaluate.sums(compiled, codes)
        archive.add(evaluate.objective_values(compiled, codes, totals, np.zeros(len(codes))), codes)
    return Prover(compiled, archive, Tally())


def rows_of(prover: Prover) -> list[Vector]:
    return [tuple(vector) for vector in prover.archive.values.tolist()]


def demand(compiled: CompiledProblem, codes: Integers) -> NDArray[np.bool_]:
    """Met by about half of the stacks, and by a mirror image wherever by the stack."""
    assert compiled.problem.title == "Invented"
    return np.asarray((codes**2).sum(axis=1) % 7 < 4)


def check_members(case: Case, prover: Prover) -> None:
    """Every member is a feasible stack that reaches its objectives."""
    for stack, vector in zip(evaluate.decode(case.compiled, prover.archive.codes), rows_of(prover), strict=True):
        assert case.feasible[stack] == vector


class TestAgainstEveryStack:
    def test_rules_and_sums(self, case: Case) -> None:
        stacks = list(brute_force.every_stack(case.problem))
        codes = evaluate.encode(case.compiled, stacks)
        assert len(stacks) == count_stacks(len(case.compiled.sheets), case.problem.rules.max_sheets)
        totals = evaluate.sums(case.compiled, codes)
        assert totals.tolist() == [list(brute_force.totals(case.problem, stack)) for stack in stacks]
        allowed = evaluate.allowed(case.compiled, codes)
        assert allowed.tolist() == [brute_force.is_allowed(case.problem, stack) for stack in stacks]

    def test_proved_front(self, case: Case) -> None:
        prover = start(case.compiled)
        assert prover.run()
        assert prover.complete
        assert prover.covered == 1.0
        assert rows_of(prover) == case.front
        check_members(case, prover)

    @pytest.mark.usefixtures("small_shares")
    def test_proved_in_small_shares(self, case: Case) -> None:
        prover = start(case.compiled)
        assert prover.run()
        assert rows_of(prover) == case.front
        check_members(case, prover)

    def test_limits_that_are_met_exactly(self, case: Case) -> None:
        """Limits at the sums of the last front member: what reaches them is not lost, what is beyond them is."""
        members = [stack for stack, vector in case.feasible.items() if case.front and vector == case.front[-1]]
        limits = brute_force.totals(case.problem, members[0]) if members else (0, 0, 0)
        within = {
            stack: vector
            for stack, vector in case.feasible.items()
            if all(a <= b for a, b in zip(brute_force.totals(case.problem, stack), limits, strict=True))
        }
        rules = replace(case.compiled.rules, limits=np.array(limits, dtype=np.int64))
        prover = start(replace(case.compiled, rules=rules))
        assert prover.run()
        assert rows_of(prover) == brute_force.front_of(list(within.values()))
        assert not members or case.front[-1] in rows_of(prover)

    def test_known_stacks_change_nothing(self, case: Case) -> None:
        random = np.random.default_rng(len(case.feasible))
        known = [stack for stack in case.feasible if random.random() < 0.3]
        prover = start(case.compiled, known)
        assert prover.run()
        assert rows_of(prover) == case.front
        check_members(case, prover)

    def test_mirror_images(self, case: Case, monkeypatch: pytest.MonkeyPatch) -> None:
        monkeypatch.setattr("stackopt.shares.mirror_holds", lambda _: False)
        prover = start(case.compiled)
        assert not prover.tables.mirror
        assert prover.run()
        assert rows_of(prover) == case.front
        if mirror_holds(case.compiled):
            assert all(case.feasible.get(stack[::-1]) == vector for stack, vector in case.feasible.items())

    def test_equal_stacks(self, case: Case) -> None:
        values = np.array(case.front, dtype=np.int64).reshape(-1, len(case.problem.search.objectives))
        rows, codes = equal_stacks(case.compiled, values)
        found = list(zip(rows.tolist(), evaluate.decode(case.compiled, codes), strict=True))
        number = {vector: row for row, vector in enumerate(case.front)}
        expected = {(number[vector], stack) for stack, vector in case.feasible.items() if vector in number}
        assert len(found) == len(set(found))
        assert set(found) == expected

    def test_further_demands(self, case: Case, monkeypatch: pytest.MonkeyPatch) -> None:
        """A demand that follows no order at all; shares that have room for few candidates end early."""
        monkeypatch.setattr("stackopt.shares.CANDIDATES", 2 if len(case.feasible) % 2 else 20_000)
        monkeypatch.setattr("stackopt.demands.demands_of", lambda _: (demand,))
        kept = demand(case.compiled, evaluate.encode(case.compiled, list(case.feasible)))
        feasible = {stack: vector for (stack, vector), good in zip(case.feasible.items(), kept, strict=True) if good}
        front = brute_force.front_of(list(feasible.values()))
        prover = start(case.compiled)
        assert prover.run()
        assert rows_of(prover) == front
        check_members(replace(case, feasible=feasible), prover)

    def test_alternatives(self, case: Case, monkeypatch: pytest.MonkeyPatch) -> None:
        """Every feasible stack that no member of the front beats by more than a factor in all objectives at once."""
        within = 0.15 if len(case.feasible) % 2 else 0.0
        values = np.array(case.front, dtype=np.int64).reshape(-1, len(case.problem.search.objectives))
        collector = Collector(case.compiled, values, within)
        monkeypatch.setattr("stackopt.proof.WORK", 500 if len(case.feasible) % 3 else 1_000_000)
        assert collector.run()
        assert not collector.overflowed
        stacks = evaluate.decode(case.compiled, collector.codes)
        expected = {
            stack
            for stack, vector in case.feasible.items()
            if not any(
                all(mine > best * (1.0 + within) for mine, best in zip(vector, member, strict=True))
                for member in case.front
            )
        }
        assert len(stacks) == len(set(stacks))
        assert set(stacks) == expected


@pytest.mark.parametrize("seed", [*SMALL[::10], *DEEP[:3]])
def test_exploring_hands_over(seed: int) -> None:
    """What exploring finds is feasible by the readable equations, and the proof ends the same with it."""
    case = make_case(seed)
    explorer = Explorer(Stock(case.compiled), seed, population=12)
    explorer.step()
    found = explorer.stock.stacks(explorer.archive.codes)
    vectors = [tuple(vector) for vector in explorer.archive.values.tolist()]
    assert [case.feasible[stack] for stack in found] == vectors
    prover = start(case.compiled, found)
    assert prover.run()
    assert rows_of(prover) == case.front
    check_members(case, prover)


def test_the_problems_are_varied() -> None:
    seen: Counter[str] = Counter()
    for seed in SMALL:
        problem = small_problems.draft_problem(seed)
        rules = problem.rules
        seen[f"depth {rules.max_sheets}"] += 1
        seen[f"requirements {len(problem.requirements)}"] += 1
        seen[f"objectives {len(problem.search.objectives)}"] += 1
        seen.update({f"begins with {problem.search.objectives[0]}"})
        seen.update({requirement.field.kind for requirement in problem.requirements})
        seen["0 Hz"] += any(requirement.mask.frequency_hz[0] == 0.0 for requirement in problem.requirements)
        for name in (
            "bond", "source_side", "victim_side", "first", "last", "max_anodic_gap_v", "cost_per_sheet",
            "max_mass_kg_per_m2", "max_cost_per_m2", "max_thickness_m",
        ):  # fmt: skip
            seen[name] += bool(getattr(rules, name))
        assert 3 <= len(problem.sheets) <= 8
    assert len(seen) == 4 + 3 + 4 + 4 + 5 + 1 + 10
    assert min(seen.values()) >= 8, seen


def test_equal_stacks_of_sheets_that_cost_nothing() -> None:
    """Sums that do not grow with a sheet: all feasible stacks are equal, long ones with short ones inside."""
    materials = {name: replace(MATERIALS[name], price_per_kg=None) for name in ("copper", "laminate")}
    problem = build_problem(masks=[Mask((1e4,), (20.0,))], materials=materials, max_sheets=3, objectives=("cost",))
    compiled = compile_problem(problem)
    feasible = brute_force.feasible_stacks(problem, compiled.rows.spectra)
    assert set(feasible.values()) == {(0,)}
    rows, codes = equal_stacks(compiled, np.array([[0]]))
    assert not rows.any()
    assert sorted(map(str, evaluate.decode(compiled, codes))) == sorted(map(str, feasible))


def test_a_sheet_that_may_not_stand_here_may_stand_deeper() -> None:
    """Inner and outer metal may not touch; the only stack that will do has two of the one, a third metal, the other."""
    materials = {
        "inner": material("inner", 5.8e7, 8900.0, (35,), 10.0, anodic_index_v=0.0),
        "between": material("between", 1e6, 7000.0, (50,), 5.0, anodic_index_v=-0.2),
        "outer": material("outer", 1e6, 7000.0, (60,), 5.0, anodic_index_v=-0.4),
    }
    problem = build_problem(
        masks=[Mask((1e4, 1e5), (0.0, 0.0))],
        materials=materials,
        max_sheets=4,
        first=("inner",),
        last=("outer",),
        max_anodic_gap_v=0.25,
        objectives=("thickness",),
    )
    wanted = "inner 35um / inner 35um / between 50um / outer 60um"
    problem = with_mask_of(problem, wanted)
    compiled = compile_problem(problem)
    feasible = brute_force.feasible_stacks(problem, compiled.rows.spectra)
    assert [format_stack(stack) for stack in feasible] == [wanted]
    prover = start(compiled)
    assert prover.run()
    assert rows_of(prover) == list(feasible.values())


class TestMirrorImages:
    @pytest.mark.parametrize(
        "rules",
        [
            {},
            {"bond": film(25)},
            {"first": ("copper", "steel"), "last": ("steel", "copper")},
            {"max_anodic_gap_v": 0.3},
        ],
    )
    def test_may_be_skipped(self, rules: dict[str, object]) -> None:
        assert mirror_holds(compile_problem(build_problem(use=["copper", "steel", "ferrite"], **rules)))

    @pytest.mark.parametrize(
        "rules",
        [
            {"source_side": (film(1000),)},
            {"victim_side": (film(1000),)},
            {"source_side": (film(1000),), "victim_side": (film(1000),)},
            {"first": ("copper",)},
            {"last": ("copper",)},
            {"first": ("copper",), "last": ("steel",)},
        ],
    )
    def test_must_not_be_skipped(self, rules: dict[str, object]) -> None:
        compiled = compile_problem(build_problem(use=["copper", "steel", "ferrite"], **rules))
        assert not mirror_holds(compiled)
        assert not start(compiled).tables.mirror

    def test_must_not_be_skipped_where_neighbours_have_an_order(self) -> None:
        compiled = compile_problem(build_problem(use=["copper", "steel"]))
        neighbours = compiled.rules.neighbours.copy()
        neighbours[0, -1] = False
        ordered = replace(compiled, rules=replace(compiled.rules, neighbours=neighbours))
        assert mirror_holds(compiled)
        assert not mirror_holds(ordered)

    def test_a_face_rule_would_lose_a_stack(self, monkeypatch: pytest.MonkeyPatch) -> None:
        """Steel must face the source: of copper and steel only one order is allowed, and skipping would drop it."""
        problem = build_problem(
            CoaxialLoops(12e-3, 5e-3, 20e-3, 25e-3),
            masks=[Mask((1e4, 1e5), (0.0, 0.0))],
            use=["copper", "steel"],
            materials={
                "copper": material("copper", 5.8e7, 8890.0, (35,), 14.0),
                "steel": material("steel", 7e6, 7850.0, (100,), 3.0, permeability=MATERIALS["steel"].permeability),
            },
            max_sheets=2,
            first=("steel",),
            objectives=("thickness",),
        )
        self.check_loss(with_mask_of(problem, "steel 100um / copper 35um"), [(135_000_000,)], monkeypatch)

    def test_a_fixed_layer_would_lose_a_stack(self, monkeypatch: pytest.MonkeyPatch) -> None:
        """Two conducting films shield better with a quarter wavelength between them than on one another."""
        problem = build_problem(
            PlaneWave(),
            masks=[Mask((5.9e9, 6.1e9), (0.0, 0.0))],
            use=["coating", "plate"],
            materials={
                "coating": material("coating", 5e3, 2000.0, (50,), 1.0),
                "plate": material("plate", 0.0, 2000.0, (4000,), 1.0, permittivity=10.0),
            },
            max_sheets=2,
            source_side=(Sheet("coating", 50e-6),),
            objectives=("thickness",),
        )
        better, worse = "plate 4mm / coating 50um", "coating 50um / plate 4mm"
        assert level_db(problem, better) > level_db(problem, worse) + 3.0
        self.check_loss(with_mask_of(problem, better), [(4_050_000_000,)], monkeypatch)

    def check_loss(self, problem: Problem, expected: list[Vector], monkeypatch: pytest.MonkeyPatch) -> None:
        compiled = compile_problem(problem)
        feasible = brute_force.feasible_stacks(problem, compiled.rows.spectra)
        assert brute_force.front_of(list(feasible.values())) == expected
        right = start(compiled)
        assert right.run()
        assert rows_of(right) == expected
        monkeypatch.setattr("stackopt.shares.mirror_holds", lambda _: True)
        wrong = start(compiled)
        assert wrong.run()
        assert rows_of(wrong) == []


def level_db(problem: Problem, text: str) -> float:
    return float(evaluate.attenuation(problem, [text])[0].min())


def with_mask_of(problem: Problem, text: str) -> Problem:
    """The problem with a mask 0.01 dB below what the stack attenuates at every frequency of its mask."""
    (requirement,) = problem.requirements
    frequency = np.array(requirement.mask.frequency_hz)
    level = evaluate.attenuation(problem, [text], frequency_hz=frequency)[0] - 0.01
    mask = Mask(requirement.mask.frequency_hz, tuple(level.tolist()), points_per_decade=1)
    return replace(problem, requirements=(replace(requirement, mask=mask),))


@pytest.mark.usefixtures("small_shares")
class TestInterrupted:
    @pytest.mark.parametrize("count", [1, 2, 4])
    def test_workers_give_the_same_rows(self, deep: Case, workers: dict[int, Workers], count: int) -> None:
        prover = start(deep.compiled)
        assert prover.run(workers[count])
        assert workers[count].running == 0
        assert rows_of(prover) == deep.front
        check_members(deep, prover)

    def test_a_past_deadline_settles_nothing(self, deep: Case) -> None:
        prover = start(deep.compiled)
        assert not prover.run(deadline=time.monotonic() - 1.0)
        assert not prover.complete
        assert prover.covered == 0.0
        assert len(prover.archive) == 0
        assert prover.run()
        assert rows_of(prover) == deep.front

    @pytest.mark.parametrize("count", [1, 2])
    def test_stopped_again_and_again(self, deep: Case, workers: dict[int, Workers], count: int) -> None:
        """A watcher that raises ends the proof cleanly; what is done stays done, and the end is the same."""
        prover = start(deep.compiled)
        shares = []
        for _ in range(1000):
            shares.append(prover.covered)
            try:
                prover.run(workers[count], watch=raise_after(1 if prover.tally.opened < 9 else 40))
            except Stopped:
                assert workers[count].running == 0
                continue
            break
        assert prover.complete
        assert np.all(np.diff(shares) >= -1e-12)
        assert len(shares) >= 2
        assert rows_of(prover) == deep.front
        check_members(deep, prover)

    @pytest.mark.parametrize("count", [1, 2])
    def test_continued_by_another_prover(self, deep: Case, workers: dict[int, Workers], count: int) -> None:
        """As a resumed run does it: the prefixes not opened and the archive are all that is carried over."""
        calls: list[None] = []
        start(deep.compiled).run(workers[count], watch=lambda: calls.append(None))
        first = start(deep.compiled)
        with pytest.raises(Stopped):
            first.run(workers[count], watch=raise_after(max(1, len(calls) // 2)))
        assert 0.0 < first.covered <= 1.0  # rules may leave little to open
        second = Prover(deep.compiled, first.archive.copy(), first.tally)
        second.go_on_from(first.unopened)
        assert second.covered == pytest.approx(first.covered, abs=1e-12)
        assert second.run(workers[2])
        assert rows_of(second) == deep.front

    def test_what_workers_have_is_saved(self, deep: Case) -> None:
        """At any moment the prefixes not opened, with the archive, are enough to come to the same end."""
        prover = start(deep.compiled)
        states = []

        def watch() -> None:
            states.append((prover.unopened, prover.archive.copy()))

        prover.run(watch=watch)
        for unopened, archive in states[:: max(1, len(states) // 7)]:
            other = Prover(deep.compiled, archive)
            other.go_on_from(unopened)
            assert other.run()
            assert rows_of(other) == deep.front

    def test_the_tally_grows(self, deep: Case) -> None:
        tally = Tally(opened=5, judged=7, seconds=1.0)
        archive = Archive(len(deep.problem.search.objectives), deep.compiled.rules.max_sheets)
        Prover(deep.compiled, archive, tally).run()
        assert tally.opened > 5
        assert tally.judged >= 7  # rules may leave nothing to judge
        assert tally.seconds > 1.0


class TestPending:
    def test_begins_with_everything(self) -> None:
        pending = Pending(5, 3)
        assert pending.prefixes.tolist() == [[0, 0, 0]]
        assert pending.share == 1.0

    def test_takes_from_the_top(self) -> None:
        pending = Pending(5, 3)
        (root,) = pending.take(4).tolist()
        assert root == [0, 0, 0]
        assert (len(pending), pending.share) == (0, 0.0)
        pending.put(np.array([[n, 0, 0] for n in range(1, 6)]))
        assert pending.share == pytest.approx(1.0)
        assert pending.take(2).tolist() == [[4, 0, 0], [5, 0, 0]]
        pending.put(np.array([[5, 1, 0]]))
        assert pending.share == pytest.approx(3 / 5 + 1 / 25)
        assert pending.take(2).tolist() == [[5, 1, 0]]
        assert pending.prefixes.tolist() == [[1, 0, 0], [2, 0, 0], [3, 0, 0]]

    def test_short_ones(self) -> None:
        pending = Pending(5, 3)
        pending.put(np.array([[1, 2, 0], [3, 0, 0]]))
        assert pending.take_shorter(2).tolist() == [[0, 0, 0], [3, 0, 0]]
        assert pending.prefixes.tolist() == [[1, 2, 0]]
        assert pending.take_shorter(2).tolist() == []
        assert pending.share == pytest.approx(1 / 25)


class Stopped(Exception):  # noqa: N818 - the name says what happened
    pass


def raise_after(calls: int) -> Callable[[], None]:
    left = [calls]

    def watch() -> None:
        left[0] -= 1
        if left[0] == 0:
            raise Stopped

    return watch


class TestWhyNotProvable:
    @pytest.mark.parametrize(
        "objectives", [("mass",), ("sheets",), ("thickness", "cost"), ("sheets", "mass", "cost", "thickness")]
    )
    def test_provable(self, objectives: tuple[str, ...]) -> None:
        assert why_not_provable(build_problem(objectives=objectives)) is None

    def test_margin(self) -> None:
        assert why_not_provable(build_problem(objectives=("mass", "margin"))) == (
            "the objective margin does not only grow with every sheet, so the front can be explored, not proved"
        )

    def test_thickness_range(self) -> None:
        plate = replace(MATERIALS["aluminium"], name="plate", gauges_m=(), thickness_range_m=(1e-4, 2e-3))
        held = MATERIALS | {"plate": plate}
        problem = build_problem(materials=held, use=["copper", "plate"])
        assert why_not_provable(problem) == (
            "plate: a thickness_range allows endless thicknesses, so the front can be explored, not proved"
        )
        assert why_not_provable(replace(problem, use=("copper",))) is None
