"""The archive against a reference that compares every pair of stacks."""

from __future__ import annotations

from collections.abc import Sequence

import numpy as np
import pytest
from hypothesis import given
from hypothesis import strategies as st

from stackopt.archive import Archive, non_dominated

Vector = tuple[int, ...]
Entry = tuple[Vector, Vector]


def dominates(one: Vector, other: Vector) -> bool:
    return one != other and all(a <= b for a, b in zip(one, other, strict=True))


def reference(entries: Sequence[Entry]) -> list[Entry]:
    """Vectors that none dominates, each with the first of its codes, in rising order."""
    kept: dict[Vector, Vector] = {}
    for vector, code in entries:
        if not any(dominates(other, vector) for other, _ in entries):
            kept[vector] = min(kept.get(vector, code), code)
    return sorted(kept.items())


def content(archive: Archive) -> list[Entry]:
    return [(tuple(v), tuple(c)) for v, c in zip(archive.values.tolist(), archive.codes.tolist(), strict=True)]


def add(archive: Archive, entries: Sequence[Entry]) -> int:
    objectives, positions = archive.values.shape[1], archive.codes.shape[1]
    values = np.array([vector for vector, _ in entries], dtype=np.int64).reshape(-1, objectives)
    return archive.add(values, np.array([code for _, code in entries], dtype=np.int64).reshape(-1, positions))


@st.composite
def batches(draw: st.DrawFn) -> list[list[Entry]]:
    """Batches of vectors with many equal and many dominated ones among them; sometimes as large as real sums."""
    objectives = draw(st.integers(1, 4))
    factor = draw(st.sampled_from([1, 10**15]))
    number = st.integers(-3, 4).map(lambda n: n * factor)
    entry = st.tuples(st.tuples(*[number] * objectives), st.tuples(st.integers(0, 3), st.integers(0, 3)))
    return draw(st.lists(st.lists(entry, max_size=12), min_size=1, max_size=5))


def filled(entries: Sequence[Sequence[Entry]], objectives: int) -> Archive:
    archive = Archive(objectives, 2)
    for batch in entries:
        add(archive, batch)
    return archive


def width_of(entries: Sequence[Sequence[Entry]]) -> int:
    return next((len(vector) for batch in entries for vector, _ in batch), 1)


@given(batches())
def test_content_is_that_of_the_reference(entries: list[list[Entry]]) -> None:
    archive = filled(entries, width_of(entries))
    assert content(archive) == reference([entry for batch in entries for entry in batch])
    assert len(archive) == len(archive.values) == len(archive.codes)


@given(batches(), st.randoms(use_true_random=False))
def test_order_of_arrival_does_not_matter(entries: list[list[Entry]], random: object) -> None:
    everything = [entry for batch in entries for entry in batch]
    shuffled = everything.copy()
    random.shuffle(shuffled)
    one_by_one = filled([[entry] for entry in shuffled], width_of(entries))
    assert content(one_by_one) == content(filled(entries, width_of(entries)))


@given(batches(), batches())
def test_covers_and_dominates(entries: list[list[Entry]], others: list[list[Entry]]) -> None:
    width = width_of(entries)
    archive = filled(entries, width)
    members = [vector for vector, _ in content(archive)]
    asked = [vector for batch in entries + others for vector, _ in batch if len(vector) == width]
    values = np.array(asked, dtype=np.int64).reshape(-1, width)
    expected = [any(member == vector or dominates(member, vector) for member in members) for vector in asked]
    assert archive.covers(values).tolist() == expected
    beaten = [any(dominates(member, vector) for member in members) for vector in asked]
    assert archive.dominates(values).tolist() == beaten


@given(batches())
def test_add_counts_the_vectors_that_the_archive_gained(entries: list[list[Entry]]) -> None:
    archive = Archive(width_of(entries), 2)
    for batch in entries:
        before = {vector for vector, _ in content(archive)}
        gained = add(archive, batch)
        assert gained == len({vector for vector, _ in content(archive)} - before)


@given(batches())
def test_non_dominated_keeps_equal_vectors(entries: list[list[Entry]]) -> None:
    vectors = [vector for batch in entries for vector, _ in batch]
    values = np.array(vectors, dtype=np.int64).reshape(-1, width_of(entries))
    expected = [not any(dominates(other, vector) for other in vectors) for vector in vectors]
    assert non_dominated(values).tolist() == expected


class TestArchive:
    def test_begins_empty(self) -> None:
        archive = Archive(3, 4)
        assert len(archive) == 0
        assert archive.values.shape == (0, 3)
        assert archive.codes.shape == (0, 4)
        assert archive.covers(np.array([[0, 0, 0]])).tolist() == [False]
        assert archive.dominates(np.array([[0, 0, 0]])).tolist() == [False]

    def test_nothing_to_add(self) -> None:
        archive = Archive(2, 2)
        assert add(archive, [((1, 2), (1, 0))]) == 1
        assert add(archive, []) == 0
        assert content(archive) == [((1, 2), (1, 0))]

    @pytest.mark.parametrize("first", [(1, 2), (2, 1)])
    def test_of_equal_vectors_the_first_codes_stay(self, first: Vector) -> None:
        archive = Archive(2, 2)
        assert add(archive, [((5, 5), first)]) == 1
        assert add(archive, [((5, 5), (2, 1)), ((5, 5), (1, 2)), ((5, 5), (2, 2))]) == 0
        assert content(archive) == [((5, 5), (1, 2))]

    def test_a_better_vector_displaces_members(self) -> None:
        archive = Archive(2, 2)
        add(archive, [((1, 9), (1, 0)), ((5, 5), (2, 0)), ((9, 1), (3, 0))])
        assert add(archive, [((4, 5), (4, 0))]) == 1
        assert content(archive) == [((1, 9), (1, 0)), ((4, 5), (4, 0)), ((9, 1), (3, 0))]

    def test_a_copy_is_independent(self) -> None:
        archive = Archive(2, 2)
        add(archive, [((5, 5), (2, 0))])
        twin = archive.copy()
        add(twin, [((4, 4), (1, 0))])
        assert content(archive) == [((5, 5), (2, 0))]
        assert content(twin) == [((4, 4), (1, 0))]

    def test_more_vectors_than_a_chunk(self) -> None:
        """A thousand vectors on a line, none dominating another, and a thousand just behind them."""
        archive = Archive(2, 2)
        line = [((n, 1000 - n), (n, 0)) for n in range(1000)]
        behind = [((n + 1, 1000 - n), (n, 1)) for n in range(1000)]
        assert add(archive, behind + line) == 1000
        assert content(archive) == line
        assert archive.covers(np.array([vector for vector, _ in behind])).all()
