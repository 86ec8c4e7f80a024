"""The exploring: what it finds is feasible, depends on the seed only, and goes on from its state exactly."""

from __future__ import annotations

import itertools
from collections.abc import Mapping
from dataclasses import replace
from functools import cache
from typing import Any

import brute_force
import numpy as np
import pytest
from builders import LOOPS, MATERIALS, build_problem, film, material, ranged
from numpy.typing import NDArray

from stackopt import evaluate
from stackopt.compiled import MARGIN_SLACK_DB, compile_problem
from stackopt.explore import ISLANDS, QUIET_EPOCHS, Explorer
from stackopt.moves import neighbours, pair_neighbours
from stackopt.problem import Field, MagneticNearField, Mask, PlaneWave, Problem, Sheet
from stackopt.stock import Stock
from stackopt.workers import Processes, Serial

Integers = NDArray[np.int64]

NEAR = MagneticNearField(0.05)
MASK = Mask((1e3, 1e5), (14.0, 60.0), points_per_decade=2)
PLATES = MATERIALS | {
    "plate": ranged("plate", "aluminium", 1e-4, 2e-3),
    "steel plate": ranged("steel plate", "steel", 2e-4, 1.234567e-3),
    "thin plate": ranged("thin plate", "aluminium", 2.013e-4, 2.079e-4),
}


def make(
    *use: str, field: Field = NEAR, mask: Mask = MASK, max_sheets: int = 3, error_db: float = 0.02, **more: Any
) -> Stock:
    problem = build_problem(field, masks=[mask], materials=PLATES, use=use, max_sheets=max_sheets, **more)
    return Stock(compile_problem(problem, error_db=error_db))


GAUGES = make("copper", "laminate", "steel")
BOTH = make("laminate", "plate", "copper", "steel plate")
RANGES = make("plate", "steel plate")
NAMED = {"gauges": GAUGES, "both": BOTH, "ranges": RANGES}
STOCKS = pytest.mark.parametrize("stock", NAMED.values(), ids=NAMED)


def explored(stock: Stock, epochs: int = 2, seed: int = 3, population: int = 16, **more: Any) -> Explorer:
    explorer = Explorer(stock, seed, population, **more)
    for _ in range(epochs):
        explorer.step()
    return explorer


def check_archive(explorer: Explorer, tolerance_db: float) -> None:
    """Members keep the rules, reach their objectives, meet the mask by the slow oracle; none dominates another."""
    problem = explorer.stock.compiled.problem
    stacks = explorer.stock.stacks(explorer.archive.codes)
    vectors = [tuple(vector) for vector in explorer.archive.values.tolist()]
    assert stacks
    assert brute_force.front_of(vectors) == vectors
    least = np.full(len(stacks), np.inf)
    for number, requirement in enumerate(problem.requirements):
        level = evaluate.attenuation(problem, stacks, number)
        least = np.minimum(least, np.min(level - requirement.mask.required_db(requirement.mask.grid_hz()), axis=1))
    assert (least >= -tolerance_db).all()
    for stack, vector, margin in zip(stacks, vectors, least, strict=True):
        assert brute_force.is_allowed(problem, stack)
        named = dict(zip(problem.search.objectives, vector, strict=True))
        if "margin" in named:
            assert named.pop("margin") == pytest.approx(-margin * evaluate.MARGIN_UNIT, abs=tolerance_db * 1e9)
        rest = replace(problem, search=replace(problem.search, objectives=tuple(named)))
        assert brute_force.vector_of(rest, stack) == tuple(named.values())


class TestFinds:
    @pytest.mark.parametrize(
        ("stock", "tolerance_db"),
        [
            (GAUGES, 1e-6),
            (BOTH, 1e-6),
            (RANGES, 1e-6),
            (make("copper", "steel", field=PlaneWave(0.5, "TM"), mask=Mask((1e6, 1e8), (110.0, 130.0))), 1e-6),
            (make("copper", "laminate", "plate", field=LOOPS, bond=film(25)), 0.02),
            (make("copper", "steel", "ferrite", source_side=(film(500),), first=("ferrite", "steel")), 1e-6),
            (make("copper", "laminate", max_thickness_m=4e-4, max_cost_per_m2=60.0, cost_per_sheet=2.0), 1e-6),
            (make("copper", "laminate", objectives=("sheets", "cost")), 1e-6),
            (make("copper", "laminate", objectives=("mass", "margin")), 1e-6),
            (make("thin plate", "copper", max_sheets=2, objectives=("margin", "thickness")), 1e-6),
        ],
        ids=[
            "gauges", "both", "ranges", "plane wave", "loops", "faces", "limits", "sheets", "margin", "free margin",
        ],
    )  # fmt: skip
    def test_feasible_stacks(self, stock: Stock, tolerance_db: float) -> None:
        check_archive(explored(stock), tolerance_db)

    def test_two_requirements(self) -> None:
        problem = build_problem(
            NEAR, PlaneWave(), masks=[MASK, Mask((1e6, 1e7), (100.0, 110.0))], use=["copper", "steel"], max_sheets=3
        )
        check_archive(explored(Stock(compile_problem(problem))), 1e-6)

    def test_the_whole_front_of_a_small_problem(self) -> None:
        problem = GAUGES.compiled.problem
        feasible = brute_force.feasible_stacks(problem, GAUGES.compiled.rows.spectra)
        front = brute_force.front_of(list(feasible.values()))
        assert len(front) > 3
        assert [tuple(vector) for vector in explored(GAUGES, 4).archive.values.tolist()] == front

    def test_nothing_where_nothing_is_feasible(self) -> None:
        explorer = explored(make("copper", mask=Mask((1e3, 1e5), (200.0, 300.0))), 1)
        assert len(explorer.archive) == 0
        assert explorer.computed > 0

    def test_the_largest_margin(self) -> None:
        """With the margin as an objective, the stack of the largest margin that there is belongs to the front."""
        stock = make("copper", "laminate", objectives=("mass", "margin"))
        stacks = list(brute_force.every_stack(stock.compiled.problem))
        margin, _ = evaluate.margins(stock.compiled, evaluate.encode(stock.compiled, stacks))
        found = explored(stock, 3).archive.values[:, 1]
        assert found.min() == -round(float(margin.max()) * evaluate.MARGIN_UNIT)

    @pytest.mark.parametrize("objective", ["mass", "thickness", "cost"])
    def test_a_free_thickness_is_the_least_that_will_do(self, objective: str) -> None:
        """One plate: the least thickness by bisection on the slow oracle, to the steps of three digits."""
        stock = make("plate", max_sheets=1, mask=Mask((1e4,), (30.0,)), objectives=(objective,))
        problem = stock.compiled.problem
        low, high = 1e-4, 2e-3
        assert level_db(problem, low) < 30.0 < level_db(problem, high)
        for _ in range(50):
            middle = 0.5 * (low + high)
            low, high = (middle, high) if level_db(problem, middle) < 30.0 else (low, middle)
        explorer = explored(stock, 3)
        assert len(explorer.archive) == 1
        ((sheet,),) = stock.stacks(explorer.archive.codes)
        assert high * (1 - 1e-9) <= sheet.thickness_m <= high * 1.02

    def test_a_free_thickness_may_be_the_end_of_its_range(self) -> None:
        """The thinnest of a range that has more than three digits."""
        thin = ranged("thin", "copper", 3.175e-4, 1e-3)
        problem = build_problem(
            NEAR, masks=[Mask((1e4,), (1.0,))], materials={"thin": thin}, max_sheets=2, objectives=("mass",)
        )
        explorer = explored(Stock(compile_problem(problem)))
        assert explorer.stock.stacks(explorer.archive.codes) == [(Sheet("thin", 3.175e-4),)]
        explorer.take(explorer.archive.codes)
        assert explorer.stock.stacks(explorer.archive.codes) == [(Sheet("thin", 3.175e-4),)]


def level_db(problem: Problem, thickness_m: float) -> float:
    return float(evaluate.attenuation(problem, [[("plate", thickness_m)]])[0, 0])


def way(stock: Stock) -> list[dict[str, Integers]]:
    """States before and after each of three epochs; worked out once for each of the stocks above."""
    name = next((name for name, known in NAMED.items() if known is stock), None)
    return _way(stock) if name is None else _named_way(name)


@cache
def _named_way(name: str) -> list[dict[str, Integers]]:
    return _way(NAMED[name])


def _way(stock: Stock) -> list[dict[str, Integers]]:
    explorer = Explorer(stock, 3, 16)
    states = [copied(explorer.state())]
    for _ in range(3):
        explorer.step()
        states.append(copied(explorer.state()))
    return states


def copied(state: Mapping[str, Integers]) -> dict[str, Integers]:
    return {name: value.copy() for name, value in state.items()}


def listed(state: Mapping[str, Integers]) -> dict[str, Any]:
    return {name: value.tolist() for name, value in state.items()}


class Backwards(Serial):
    """Runs the last call first."""

    def finished(self, timeout_s: float = 0.0) -> list[tuple[Any, Any]]:
        self._waiting.reverse()
        found = super().finished()
        self._waiting.reverse()
        return found


class TestSeed:
    @STOCKS
    def test_same_seed_same_result(self, stock: Stock) -> None:
        assert listed(explored(stock, 2).state()) == listed(way(stock)[2])

    def test_another_seed_another_way(self) -> None:
        other = explored(GAUGES, 1, seed=2).state()
        assert listed(other)["populations"] != listed(way(GAUGES)[1])["populations"]

    @pytest.mark.slow
    def test_islands_may_run_anywhere(self) -> None:
        """Processes that finish in any order change nothing: what a call finds depends on its arguments only."""
        with Processes(3) as workers:
            for stock in NAMED.values():
                explorer = Explorer(stock, 3, 16, workers=workers)
                for _ in range(2):
                    explorer.step()
                assert listed(explorer.state()) == listed(way(stock)[2])

    @STOCKS
    def test_islands_may_run_backwards(self, stock: Stock) -> None:
        explorer = Explorer(stock, 3, 16, workers=Backwards())
        for _ in range(2):
            explorer.step()
        assert listed(explorer.state()) == listed(way(stock)[2])


class Stopped(Exception):  # noqa: N818 - the name says what happened
    pass


class TestState:
    @STOCKS
    @pytest.mark.parametrize(("epochs", "calls"), [(1, 1), (1, ISLANDS), (0, ISLANDS + 1), (0, ISLANDS + 3)])
    def test_stopped_within_an_epoch(self, stock: Stock, epochs: int, calls: int) -> None:
        """The state is a good one, from which the epoch goes on; the last ones stop within the polish."""
        explorer = explored(stock, epochs)
        left = [calls]

        def watch() -> None:
            left[0] -= 1
            if left[0] == 0:
                raise Stopped

        with pytest.raises(Stopped):
            explorer.step(watch)
        assert explorer.polishing == (calls > ISLANDS)
        if not explorer.polishing:
            assert listed(explorer.state()) == listed(way(stock)[epochs])
        resumed = Explorer(stock, 999, 16, look=False)
        resumed.restore(copied(explorer.state()))
        for one in (explorer, resumed):
            one.step()
            assert listed(one.state()) == listed(way(stock)[epochs + 1])

    @STOCKS
    def test_goes_on_from_every_part_of_an_epoch(self, stock: Stock, monkeypatch: pytest.MonkeyPatch) -> None:
        """As a run that is killed does it, whose checkpoints may come between any two parts."""
        monkeypatch.setattr("stackopt.explore._AT_A_TIME", 3)
        explorer, states = Explorer(stock, 3, 16), []
        while explorer.epoch == 0:
            explorer.advance()
            states.append(copied(explorer.state()))
        assert len(states) > 2
        for state in states:
            resumed = Explorer(stock, 999, 16, look=False)
            resumed.restore(state)
            while resumed.epoch == 0:
                resumed.advance()
            assert listed(resumed.state()) == listed(explorer.state())

    @STOCKS
    @pytest.mark.parametrize("epochs", [0, 1, 2])
    def test_goes_on_exactly(self, stock: Stock, epochs: int) -> None:
        resumed = Explorer(stock, 999, 16, look=False)
        resumed.restore(copied(way(stock)[epochs]))
        assert listed(resumed.state()) == listed(way(stock)[epochs])
        resumed.step()
        assert listed(resumed.state()) == listed(way(stock)[epochs + 1])

    def test_goes_on_exactly_from_the_first_look(self) -> None:
        """The stack of the look is the only feasible one, so that it is still there to be polished."""
        problem = GAUGES.compiled.problem
        stacks = list(brute_force.every_stack(problem))
        level = brute_force.attenuation_db(problem, GAUGES.compiled.rows.spectra, stacks)
        best = float(np.sort(np.min(level, axis=1))[-1])
        stock = make("copper", "laminate", "steel", mask=Mask((1e3, 1e5), (best - 1e-6,) * 2, points_per_decade=2))
        states = way(stock)
        assert states[0]["values"].tolist() == states[1]["values"].tolist() != []
        resumed = Explorer(stock, 999, 16, look=False)
        resumed.restore(copied(states[0]))
        resumed.step()
        assert listed(resumed.state()) == listed(states[1])

    def test_is_plain_integers(self) -> None:
        state = way(BOTH)[1]
        assert {value.dtype for value in state.values()} == {np.dtype(np.int64)}
        assert state["populations"].shape == (ISLANDS, 16, 2 * BOTH.positions)

    def test_ends_after_quiet_epochs(self) -> None:
        explorer = Explorer(GAUGES, 3, 16)
        assert not explorer.finished
        fronts = [explorer.archive.values]
        while not explorer.finished:
            explorer.step()
            fronts.append(explorer.archive.values)
        quiet = [np.array_equal(one, other) for one, other in itertools.pairwise(fronts)]
        assert quiet[-QUIET_EPOCHS:] == [True] * QUIET_EPOCHS
        assert not any(all(quiet[n : n + QUIET_EPOCHS]) for n in range(len(quiet) - QUIET_EPOCHS))
        assert explorer.epoch == len(quiet)


class TestVerySmallProblems:
    @pytest.mark.parametrize(("gauges", "max_sheets"), [((70,), 1), ((35, 70), 2)])
    def test_fewer_stacks_than_a_population(self, gauges: tuple[int, ...], max_sheets: int) -> None:
        materials = {"copper": material("copper", 5.8e7, 8890.0, gauges, 14.0)}
        problem = build_problem(NEAR, masks=[Mask((1e5,), (3.0,))], materials=materials, max_sheets=max_sheets)
        stock = Stock(compile_problem(problem))
        explorer = explored(stock, 2, population=20)
        feasible = brute_force.feasible_stacks(problem, stock.compiled.rows.spectra)
        assert [tuple(v) for v in explorer.archive.values.tolist()] == brute_force.front_of(list(feasible.values()))
        assert explorer.state()["populations"].shape == (ISLANDS, 20, 2 * max_sheets)


class TestPolish:
    @STOCKS
    def test_no_local_move_is_left(self, stock: Stock) -> None:
        explorer = explored(stock, 1)
        for genes in explorer.archive.codes:
            pairs = pair_neighbours(stock, genes, np.random.default_rng((explorer.seed, *genes.tolist())))
            moved = np.concatenate([neighbours(stock, genes), pairs])
            judged = stock.judge(moved, explorer.archive.dominates)
            assert explorer.archive.covers(judged.values[judged.feasible]).all()

    def test_take_keeps_what_is_feasible(self) -> None:
        problem = GAUGES.compiled.problem
        feasible = brute_force.feasible_stacks(problem, GAUGES.compiled.rows.spectra)
        good = max(feasible, key=lambda stack: feasible[stack])
        bad = next(stack for stack in brute_force.every_stack(problem) if stack not in feasible)
        codes = evaluate.encode(GAUGES.compiled, [bad, good])
        explorer = Explorer(GAUGES, 3, 16, look=False)
        assert len(explorer.archive) == 0
        explorer.take(np.concatenate([codes, np.zeros_like(codes)], axis=1))
        assert explorer.archive.covers(np.array([feasible[good]])).all()
        assert all(stack in feasible for stack in GAUGES.stacks(explorer.archive.codes))

    def test_the_look_starts_the_archive(self) -> None:
        with_look, without = Explorer(GAUGES, 3, 16), Explorer(GAUGES, 3, 16, look=False)
        assert len(with_look.archive) == 1
        assert len(without.archive) == 0
        (stack,) = GAUGES.stacks(with_look.archive.codes)
        margin, _ = evaluate.margins(GAUGES.compiled, evaluate.encode(GAUGES.compiled, [stack]))
        assert margin[0] >= -MARGIN_SLACK_DB
