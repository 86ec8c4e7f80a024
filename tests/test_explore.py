"""The exploring: what it finds is feasible, depends on the seed only, and goes on from its state exactly."""

from __future__ import annotations

import itertools
from collections.abc import Callable, Iterable, Mapping
from concurrent.futures import ThreadPoolExecutor
from dataclasses import replace
from functools import cache
from typing import Any

import brute_force
import numpy as np
import pytest
from builders import LOOPS, MATERIALS, build_problem, film, material, ranged
from hypothesis import given
from hypothesis import strategies as st
from numpy.typing import NDArray

from stackopt import evaluate, explore
from stackopt.compiled import MARGIN_SLACK_DB, compile_problem
from stackopt.explore import (
    ISLANDS,
    QUIET_EPOCHS,
    Explorer,
    StackCrossover,
    mutate,
    neighbours,
    pair_neighbours,
    random_genes,
)
from stackopt.problem import Field, MagneticNearField, Mask, PlaneWave, Problem, Sheet
from stackopt.stock import Stock

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


class TestSeed:
    @STOCKS
    def test_same_seed_same_result(self, stock: Stock) -> None:
        assert listed(explored(stock, 2).state()) == listed(way(stock)[2])

    def test_another_seed_another_way(self) -> None:
        other = explored(GAUGES, 1, seed=2).state()
        assert listed(other)["populations"] != listed(way(GAUGES)[1])["populations"]

    def test_islands_may_run_anywhere(self) -> None:
        """Threads that finish in any order change nothing: an island depends on its task only."""
        explorer = Explorer(GAUGES, 3, 16)
        with ThreadPoolExecutor(3) as pool:
            for _ in range(2):
                explorer.step(pool.map)
        assert listed(explorer.state()) == listed(way(GAUGES)[2])

    def test_islands_may_run_backwards(self) -> None:
        def backwards(function: Callable[[Any], Any], tasks: Iterable[Any]) -> list[Any]:
            return [function(task) for task in reversed(list(tasks))][::-1]

        explorer = Explorer(GAUGES, 3, 16)
        for _ in range(2):
            explorer.step(backwards)
        assert listed(explorer.state()) == listed(way(GAUGES)[2])


class TestState:
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
            moved = np.concatenate([neighbours(stock, genes), explorer._pairs(stock, genes)])
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


def check_genes(stock: Stock, genes: Integers, least_sheets: int = 1) -> None:
    """Packed codes that exist, at least one sheet, thicknesses in their ranges."""
    m = stock.positions
    assert genes.shape[1] == 2 * m
    assert np.array_equal(stock.tidy(genes), genes)
    codes, thickness = genes[:, :m], genes[:, m:]
    assert (codes >= 0).all()
    assert (codes <= stock.choices).all()
    assert (np.count_nonzero(codes, axis=1) >= least_sheets).all()
    assert (thickness >= stock.ranges_pm[codes, 0]).all()
    assert (thickness <= stock.ranges_pm[codes, 1]).all()


def sheets_in(stock: Stock, genes: Integers) -> list[tuple[int, int]]:
    m = stock.positions
    return sorted((int(c), int(t)) for c, t in zip(genes[:m], genes[m:], strict=True) if c)


class TestMoves:
    @STOCKS
    @given(seed=st.integers(0, 2**32 - 1))
    def test_random_genes(self, stock: Stock, seed: int) -> None:
        genes = random_genes(stock, 30, np.random.default_rng(seed))
        check_genes(stock, genes)
        assert len(genes) == 30

    @STOCKS
    @given(seed=st.integers(0, 2**32 - 1))
    def test_mutation_is_one_change(self, stock: Stock, seed: int) -> None:
        random = np.random.default_rng(seed)
        genes = random_genes(stock, 30, random)
        kept = genes.copy()
        mutants = mutate(stock, genes, random)
        assert np.array_equal(genes, kept)
        check_genes(stock, mutants)
        for before, after in zip(genes, mutants, strict=True):
            one, other = sheets_in(stock, before), sheets_in(stock, after)
            left = one.copy()
            for sheet in other:
                if sheet in left:
                    left.remove(sheet)
            assert len(left) <= 1
            assert abs(len(one) - len(other)) <= 1

    @STOCKS
    def test_mutation_reaches_every_kind_of_change(self, stock: Stock) -> None:
        random = np.random.default_rng(0)
        genes = np.repeat(stock.tidy(random_genes(stock, 50, random))[:1], 400, axis=0)
        genes[:, 2] = 0
        genes = stock.tidy(genes)
        before = np.count_nonzero(genes[0, : stock.positions])
        counts = np.count_nonzero(mutate(stock, genes, random)[:, : stock.positions], axis=1)
        assert set(counts.tolist()) >= {before, before + 1}

    def test_mutation_fills_an_empty_stack(self) -> None:
        check_genes(BOTH, mutate(BOTH, np.zeros((20, 6), dtype=np.int64), np.random.default_rng(1)))

    @STOCKS
    @given(seed=st.integers(0, 2**32 - 1))
    def test_crossover_shares_out_the_parents_sheets(self, stock: Stock, seed: int) -> None:
        random = np.random.default_rng(seed)
        parents = np.stack([random_genes(stock, 20, random), random_genes(stock, 20, random)])
        children = StackCrossover(stock)._do(None, parents, random_state=random)
        assert children.shape == parents.shape
        for number in range(20):
            both = sheets_in(stock, parents[0, number]) + sheets_in(stock, parents[1, number])
            made = sheets_in(stock, children[0, number]) + sheets_in(stock, children[1, number])
            assert sorted(made) == sorted(both)
        check_genes(stock, children.reshape(-1, children.shape[2]), least_sheets=0)

    @STOCKS
    @given(seed=st.integers(0, 2**32 - 1))
    def test_neighbours_are_valid(self, stock: Stock, seed: int) -> None:
        for genes in random_genes(stock, 4, np.random.default_rng(seed)):
            for moved in (neighbours(stock, genes), pair_neighbours(stock, genes, np.random.default_rng(seed))):
                check_genes(stock, moved, least_sheets=0)

    @given(seed=st.integers(0, 2**32 - 1))
    def test_neighbours_of_gauges_are_all_of_them(self, seed: int) -> None:
        (genes,) = random_genes(GAUGES, 1, np.random.default_rng(seed))
        stack = [int(code) for code in genes[:3] if code]
        expected = set(one_move_away(stack, GAUGES.choices, 3))
        found = {tuple(code for code in row if code) for row in neighbours(GAUGES, genes)[:, :3].tolist()}
        assert found - {tuple(stack)} == expected - {tuple(stack)}

    @given(seed=st.integers(0, 2**32 - 1))
    def test_pairs_of_gauges_are_all_of_them(self, seed: int) -> None:
        (genes,) = random_genes(GAUGES, 1, np.random.default_rng(seed))
        expected = set()
        for one, other in itertools.combinations(range(3), 2):
            for codes in itertools.product(range(GAUGES.choices + 1), repeat=2):
                changed = genes[:3].tolist()
                changed[one], changed[other] = codes
                expected.add(tuple(code for code in changed if code))
        moved = pair_neighbours(GAUGES, genes, np.random.default_rng(0))
        assert {tuple(code for code in row if code) for row in moved[:, :3].tolist()} == expected

    def test_pairs_are_drawn_where_there_are_many(self, monkeypatch: pytest.MonkeyPatch) -> None:
        monkeypatch.setattr(explore, "MOST_PAIRS", 50)
        (genes,) = random_genes(GAUGES, 1, np.random.default_rng(5))
        drawn = [pair_neighbours(GAUGES, genes, np.random.default_rng(seed)) for seed in (1, 1, 2)]
        assert [len(moved) for moved in drawn] == [50, 50, 50]
        assert np.array_equal(drawn[0], drawn[1])
        assert not np.array_equal(drawn[0], drawn[2])

    def test_a_single_position(self) -> None:
        stock = make("copper", "plate", max_sheets=1)
        genes = np.array([1, 0])
        assert pair_neighbours(stock, genes, np.random.default_rng(0)).shape == (0, 2)
        found = neighbours(stock, genes)
        check_genes(stock, found, least_sheets=0)
        assert set(found[:, 0].tolist()) == set(range(stock.choices + 1))


def one_move_away(stack: list[int], choices: int, longest: int) -> Iterable[tuple[int, ...]]:
    for at in range(len(stack)):
        yield tuple(stack[:at] + stack[at + 1 :])
        for code in range(1, choices + 1):
            yield (*stack[:at], code, *stack[at + 1 :])
        for other in range(at + 1, len(stack)):
            swapped = stack.copy()
            swapped[at], swapped[other] = stack[other], stack[at]
            yield tuple(swapped)
    if len(stack) < longest:
        for place in range(len(stack) + 1):
            for code in range(1, choices + 1):
                yield (*stack[:place], code, *stack[place:])
