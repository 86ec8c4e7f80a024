"""Covers of known stacks: a cover may overlook one, but never claims one that is not there."""

from __future__ import annotations

from typing import Any

import numpy as np
import pytest
from builders import build_problem
from hypothesis import given
from hypothesis import strategies as st

from stackopt import descent
from stackopt.compiled import compile_problem
from stackopt.shares import Tables

MAX_SHEETS = 3
Vector = tuple[int, int, int, int]
"""Three sums and the number of sheets."""


@st.composite
def covers(draw: st.DrawFn) -> tuple[descent.Cover, Any, list[Vector], list[Vector]]:
    """A cover that holds some vectors, which of the three sums count, the vectors, and others to ask about."""
    used = np.array(draw(st.sampled_from([(1, 1, 1), (1, 1, 0), (1, 0, 0), (0, 0, 0)])), dtype=np.int64)
    shift = np.array(draw(st.tuples(st.integers(0, 6), st.integers(0, 6))), dtype=np.int64)
    levels = draw(st.sampled_from([1, MAX_SHEETS + 1]))
    # Mostly within a few steps of one another; some beyond the last cell.
    start = draw(st.integers(0, descent.CELLS + 3))
    number = st.tuples(st.integers(start, start + 3), st.integers(0, 63)).map(lambda pair: pair[0] * 40 + pair[1])
    vector = st.tuples(number, number, st.integers(0, 9), st.integers(1, MAX_SHEETS))
    known, asked = draw(st.lists(vector, max_size=6)), draw(st.lists(vector, min_size=1, max_size=6))
    least = np.full((levels, descent.CELLS, descent.CELLS), descent.UNCOVERED, dtype=np.int64)
    for member in known:
        descent._add_to_cover(least, shift, used, *member)
    return descent.Cover(least, shift), used, known, asked


def is_no_worse(one: Vector, other: Vector, used: Any, levels: int) -> bool:
    counts = [*used.tolist(), levels > 1]
    return all(a <= b for a, b, counted in zip(one, other, counts, strict=True) if counted)


@given(covers())
def test_never_claims_too_much(case: tuple[descent.Cover, Any, list[Vector], list[Vector]]) -> None:
    cover, used, known, asked = case
    for vector in asked + known:
        if descent._is_covered(cover.least, cover.shift, used, *vector):
            assert any(is_no_worse(member, vector, used, len(cover.least)) for member in known)


@given(covers())
def test_finds_what_is_a_step_better(case: tuple[descent.Cover, Any, list[Vector], list[Vector]]) -> None:
    """Where a known stack is better by a whole step in both stepped sums, inside the cells, it is not overlooked."""
    cover, used, known, _ = case
    steps = (1 << cover.shift).tolist()
    for a, b, c, sheets in known:
        inside = all(-(-value // step) < descent.CELLS for value, step in zip((a, b), steps, strict=True))
        worse = (a + steps[0], b + steps[1], c, sheets)
        if inside:
            assert descent._is_covered(cover.least, cover.shift, used, *worse)


@pytest.mark.parametrize("objectives", [("mass", "cost", "thickness"), ("sheets", "cost"), ("thickness",), ("sheets",)])
def test_cover_of_an_archive(objectives: tuple[str, ...]) -> None:
    """The cover made at once from objective vectors is the one that grows from them one by one."""
    tables = Tables(
        compile_problem(build_problem(use=["copper", "steel"], max_sheets=MAX_SHEETS, objectives=objectives))
    )
    random = np.random.default_rng(1)
    values = random.integers(0, 10**13, (30, len(objectives)))
    if "sheets" in objectives:
        values[:, objectives.index("sheets")] = random.integers(1, MAX_SHEETS + 1, 30)
    cover = tables.cover(values)
    grown = np.full_like(cover.least, descent.UNCOVERED)
    sums = [values[:, n] for n, name in enumerate(objectives) if name != "sheets"]
    sums += [np.zeros(30, dtype=np.int64)] * (3 - len(sums))
    sheets = values[:, objectives.index("sheets")] if "sheets" in objectives else np.ones(30, dtype=np.int64)
    for member in zip(*sums, sheets, strict=True):
        descent._add_to_cover(grown, cover.shift, tables.used, *member)
    assert np.array_equal(cover.least, grown)
    assert (cover.least != descent.UNCOVERED).any()
