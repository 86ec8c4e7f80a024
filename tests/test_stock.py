"""Genes of the exploring: what they may hold, what stacks they mean, and how they are judged."""

from __future__ import annotations

import brute_force
import numpy as np
import pytest
from builders import MATERIALS, build_problem, ranged
from hypothesis import given
from hypothesis import strategies as st
from numpy.typing import NDArray

from stackopt import evaluate
from stackopt.compiled import MARGIN_SLACK_DB, compile_problem
from stackopt.moves import random_genes
from stackopt.problem import MagneticNearField, Mask, Sheet
from stackopt.stock import SCREENED_DB, Stock

Integers = NDArray[np.int64]

MIXED = MATERIALS | {
    "plate": ranged("plate", "aluminium", 1e-4, 2e-3),
    "steel plate": ranged("steel plate", "steel", 2e-4, 1.234567e-3),
}
FIELD = MagneticNearField(0.05)
MASK = Mask((1e3, 1e5), (14.0, 60.0), points_per_decade=1)


def make_stock(*use: str, max_sheets: int = 3, **more: object) -> Stock:
    return Stock(
        compile_problem(build_problem(FIELD, masks=[MASK], materials=MIXED, use=use, max_sheets=max_sheets, **more))
    )


GAUGES = make_stock("copper", "laminate")
BOTH = make_stock("laminate", "plate", "copper", "steel plate")
RANGES = make_stock("plate", "steel plate")


def no_screen(values: Integers) -> NDArray[np.bool_]:
    return np.zeros(len(values), dtype=bool)


def full_screen(values: Integers) -> NDArray[np.bool_]:
    return np.ones(len(values), dtype=bool)


class TestChoices:
    def test_numbers(self) -> None:
        assert (GAUGES.positions, GAUGES.gauges, GAUGES.choices) == (3, 8, 8)
        assert (BOTH.positions, BOTH.gauges, BOTH.choices) == (3, 8, 10)
        assert (RANGES.positions, RANGES.gauges, RANGES.choices) == (3, 0, 2)

    def test_ranges(self) -> None:
        assert not GAUGES.ranges_pm.any()
        assert GAUGES.ranges_pm.shape == (9, 2)
        assert not BOTH.ranges_pm[:9].any()
        assert BOTH.ranges_pm[9:].tolist() == [[100_000_000, 2_000_000_000], [200_000_000, 1_234_567_000]]

    def test_siblings(self) -> None:
        """Codes 1 and 2 are the laminate's gauges, 3 to 8 copper's, 9 and 10 the plates."""
        assert [codes.tolist() for codes in BOTH.siblings] == (
            [[0], [1, 2], [1, 2]] + [[3, 4, 5, 6, 7, 8]] * 6 + [[9], [10]]
        )

    def test_stacks(self) -> None:
        genes = np.array([[9, 1, 0, 300_000_000, 0, 0], [8, 3, 10, 0, 0, 200_000_000]])
        laminate, copper = MATERIALS["laminate"].gauges_m, MATERIALS["copper"].gauges_m
        assert BOTH.stacks(genes) == [
            (Sheet("plate", 3e-4), Sheet("laminate", laminate[0])),
            (Sheet("copper", copper[5]), Sheet("copper", copper[0]), Sheet("steel plate", 2e-4)),
        ]


@st.composite
def raw_genes(draw: st.DrawFn, stock: Stock) -> Integers:
    codes = st.lists(st.integers(0, stock.choices), min_size=stock.positions, max_size=stock.positions)
    thickness = st.lists(st.integers(0, 3_000_000_000), min_size=stock.positions, max_size=stock.positions)
    rows = draw(st.lists(st.tuples(codes, thickness), min_size=1, max_size=6))
    return np.array([one + other for one, other in rows], dtype=np.int64)


class TestTidy:
    @pytest.mark.parametrize("stock", [GAUGES, BOTH, RANGES], ids=["gauges", "both", "ranges"])
    @given(data=st.data())
    def test_packs_and_keeps_the_order(self, stock: Stock, data: st.DataObject) -> None:
        genes = data.draw(raw_genes(stock))
        given_genes = genes.copy()
        tidy = stock.tidy(genes)
        m = stock.positions
        assert np.array_equal(genes, given_genes)
        assert tidy.dtype == np.int64
        for before, after in zip(genes[:, :m].tolist(), tidy[:, :m].tolist(), strict=True):
            used = [code for code in before if code]
            assert after == used + [0] * (m - len(used))
        assert np.array_equal(stock.tidy(tidy), tidy)

    @given(data=st.data())
    def test_thicknesses(self, data: st.DataObject) -> None:
        """Inside the range, to three digits or at an end of the range; 0 for gauges and empty positions."""
        genes = data.draw(raw_genes(BOTH))
        tidy = BOTH.tidy(genes)
        for codes, thickness in zip(tidy[:, :3].tolist(), tidy[:, 3:].tolist(), strict=True):
            for code, pm in zip(codes, thickness, strict=True):
                low, high = BOTH.ranges_pm[code].tolist()
                assert low <= pm <= high
                assert pm in (low, high) or float(f"{pm:.2e}") == pm

    def test_thickness_goes_with_its_sheet(self) -> None:
        genes = np.array([[0, 9, 10, 777, 500_000_000, 300_000_000], [10, 0, 9, 1_111_111_111, 5, 1_555_555_555]])
        assert BOTH.tidy(genes).tolist() == [
            [9, 10, 0, 500_000_000, 300_000_000, 0],
            [10, 9, 0, 1_110_000_000, 1_560_000_000, 0],
        ]

    def test_ends_of_a_range_need_not_be_round(self) -> None:
        assert BOTH.tidy(np.array([[10, 0, 0, 1_999_999_999, 0, 0]])).tolist() == [[10, 0, 0, 1_234_567_000, 0, 0]]


class TestTabulated:
    @pytest.mark.parametrize("stock", [GAUGES, BOTH, RANGES], ids=["gauges", "both", "ranges"])
    def test_codes_mean_the_same_stacks(self, stock: Stock) -> None:
        genes = random_genes(stock, 40, np.random.default_rng(1))
        compiled, codes = stock.tabulated(genes)
        assert evaluate.decode(compiled, codes) == stock.stacks(genes)

    def test_no_empty_position(self) -> None:
        genes = np.array([[9, 9, 9, 200_000_000, 300_000_000, 200_000_000]])
        compiled, codes = BOTH.tabulated(genes)
        assert evaluate.decode(compiled, codes) == BOTH.stacks(genes)


class TestJudge:
    @pytest.mark.parametrize("stock", [GAUGES, BOTH, RANGES], ids=["gauges", "both", "ranges"])
    def test_against_the_readable_equations(self, stock: Stock) -> None:
        genes = random_genes(stock, 60, np.random.default_rng(2))
        problem = stock.compiled.problem
        judged = stock.judge(genes, no_screen)
        stacks = stock.stacks(genes)
        level = brute_force.attenuation_db(problem, stock.compiled.rows.spectra, stacks)
        margin = np.min(level - brute_force.required_db(problem, stock.compiled.rows.spectra), axis=1)
        assert judged.computed == len(genes)
        assert judged.values.tolist() == [list(brute_force.vector_of(problem, stack)) for stack in stacks]
        np.testing.assert_allclose(judged.violation, -margin - MARGIN_SLACK_DB, rtol=0, atol=1e-7)
        assert judged.feasible.tolist() == (margin >= -MARGIN_SLACK_DB).tolist()
        assert 0 < np.count_nonzero(judged.feasible) < len(genes)

    def test_screened_stacks_are_not_computed(self) -> None:
        genes = random_genes(GAUGES, 20, np.random.default_rng(3))
        judged = GAUGES.judge(genes, full_screen)
        assert judged.computed == 0
        assert not judged.feasible.any()
        assert (judged.violation == SCREENED_DB).all()
        assert np.array_equal(judged.values, GAUGES.judge(genes, no_screen).values)

    def test_the_screen_is_asked_for_objectives(self) -> None:
        genes = random_genes(GAUGES, 30, np.random.default_rng(4))
        everything = GAUGES.judge(genes, no_screen)
        light = everything.values[:, 0] < np.median(everything.values[:, 0])
        judged = GAUGES.judge(genes, lambda values: values[:, 0] >= np.median(everything.values[:, 0]))
        assert judged.computed == np.count_nonzero(light)
        assert np.array_equal(judged.feasible, everything.feasible & light)
        assert np.array_equal(judged.violation[light], everything.violation[light])

    def test_unlawful_stacks_come_after_every_margin(self) -> None:
        stock = make_stock("copper", "laminate", max_thickness_m=2e-4, first=("copper",))
        genes = random_genes(stock, 60, np.random.default_rng(5))
        judged = stock.judge(genes, no_screen)
        lawful = np.array([brute_force.is_allowed(stock.compiled.problem, stack) for stack in stock.stacks(genes)])
        assert 0 < np.count_nonzero(lawful) < len(genes)
        assert judged.computed == np.count_nonzero(lawful)
        assert (judged.violation[~lawful] >= 1e3).all()
        assert (judged.violation[lawful] < 1e3).all()
        assert not judged.feasible[~lawful].any()
        # The thicker, the worse.
        thickness = judged.values[:, 2]
        over = thickness > 200_000_000
        order = np.argsort(thickness[over])
        assert (np.diff(judged.violation[over][order]) >= 0.0).all()

    def test_margin_as_an_objective_needs_every_stack(self) -> None:
        stock = make_stock("copper", "laminate", objectives=("margin", "mass"))
        genes = random_genes(stock, 20, np.random.default_rng(6))
        judged = stock.judge(genes, full_screen)
        margin, _ = evaluate.margins(stock.compiled, genes[:, :3])
        assert judged.computed == 20
        assert judged.values[:, 0].tolist() == [-round(value * evaluate.MARGIN_UNIT) for value in margin]
        assert judged.feasible.tolist() == (margin >= -MARGIN_SLACK_DB).tolist()

    @pytest.mark.parametrize("stock", [GAUGES, BOTH, RANGES], ids=["gauges", "both", "ranges"])
    def test_empty_stacks_are_unlawful(self, stock: Stock) -> None:
        judged = stock.judge(np.zeros((2, 6), dtype=np.int64), no_screen)
        assert judged.computed == 0
        assert (judged.violation >= 1e3).all()
        assert not judged.feasible.any()
