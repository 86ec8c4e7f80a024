"""Changes of stacks: they stay within the stock, and near a stack none is left out."""

from __future__ import annotations

import itertools
from collections.abc import Iterable

import numpy as np
import pytest
from hypothesis import given
from hypothesis import strategies as st
from numpy.typing import NDArray
from test_explore import BOTH, GAUGES, STOCKS, make

from stackopt import moves
from stackopt.explore import StackCrossover
from stackopt.moves import mutate, neighbours, pair_neighbours, random_genes
from stackopt.stock import Stock

Integers = NDArray[np.int64]


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
        monkeypatch.setattr(moves, "MOST_PAIRS", 50)
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
