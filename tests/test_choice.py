import numpy as np
import pytest

from stackopt import choice
from stackopt.choice import Filters
from stackopt.errors import NothingLeftError
from stackopt.front import FrontRow
from stackopt.problem import Sheet

NAN = float("nan")


def row(mass: float, cost: float, thickness_mm: float = 1.0, names: str = "steel", margin: float = 1.0) -> FrontRow:
    stack = tuple(Sheet(name, 1e-4) for name in names.split())
    return FrontRow(stack, mass, cost, thickness_mm * 1e-3, margin, 1e3, "coil")


ROWS = (
    row(1.0, 90.0, names="nickel"),
    row(1.2, 40.0, names="copper nickel"),
    row(3.0, 30.0, names="copper copper steel"),
    row(5.0, 10.0, names="steel"),
)
TWO = ("mass", "cost")


def test_scaled_runs_from_best_to_worst_of_every_quantity() -> None:
    points = choice.scaled(ROWS, ("mass", "cost", "thickness", "margin"))
    assert points[0] == pytest.approx([0.0, 1.0, 0.0, 0.0])
    assert points[3] == pytest.approx([1.0, 0.0, 0.0, 0.0])
    margins = choice.scaled([row(1, 1, margin=5.0), row(2, 1, margin=0.0)], ("margin",))
    assert margins.ravel().tolist() == [0.0, 1.0]


def test_an_unknown_cost_counts_as_the_worst() -> None:
    assert choice.scaled([row(1, NAN), row(1, 2.0), row(1, 4.0)], ("cost",)).ravel().tolist() == [1.0, 0.0, 1.0]
    assert choice.scaled([row(1, NAN), row(2, NAN)], ("cost",)).ravel().tolist() == [0.0, 0.0]


def test_the_knee_is_farthest_from_the_line_through_the_ends() -> None:
    points = choice.scaled(ROWS, TWO)
    first, last = points[0], points[3]
    normal = np.array([last[1] - first[1], first[0] - last[0]])
    distance = (points - first) @ (normal / np.linalg.norm(normal))
    assert choice.balanced(ROWS, TWO) == int(np.argmax(np.abs(distance))) == 1
    assert choice.knee(ROWS, TWO) == 1


def test_fronts_that_are_small_or_of_one_objective_have_no_knee() -> None:
    assert choice.knee(ROWS[:2], TWO) is None
    assert choice.knee(ROWS, ("mass",)) is None
    assert choice.balanced(ROWS[:1], TWO) == 0


def test_weights_move_the_choice() -> None:
    assert choice.weighted(ROWS, {"mass": 1.0, "cost": 0.0}) == 0
    assert choice.weighted(ROWS, {"mass": 0.0, "cost": 1.0}) == 3
    assert choice.weighted(ROWS, {"mass": 1.0, "cost": 1.0}) == 1


def test_ties_go_to_the_stack_that_is_better_in_the_rest() -> None:
    rows = (row(1.0, 50.0), row(1.0, 20.0), row(2.0, 10.0))
    assert choice.best(rows, "mass") == 1
    assert choice.best(rows, "cost") == 2


def test_no_price_leaves_nothing_cheapest() -> None:
    with pytest.raises(NothingLeftError, match="has a price"):
        choice.best([row(1, NAN)], "cost")


def test_nearest_are_other_stacks_in_order() -> None:
    assert choice.nearest(ROWS, 1, TWO) == [2, 0, 3]
    assert choice.nearest(ROWS[:1], 0, TWO) == []


@pytest.mark.parametrize(
    ("filters", "kept"),
    [
        (Filters(), [0, 1, 2, 3]),
        (Filters(max_cost=40.0), [1, 2, 3]),
        (Filters(max_sheets=1), [0, 3]),
        (Filters(without=("nickel",)), [2, 3]),
        (Filters(only=("copper", "nickel")), [0, 1]),
        (Filters(max_cost=50.0, only=("nickel", "copper")), [1]),
    ],
)
def test_filters_keep_what_they_say(filters: Filters, kept: list[int]) -> None:
    assert choice.narrow(ROWS, filters, "EUR") == kept


def test_a_stack_without_price_passes_no_limit_on_cost() -> None:
    assert choice.narrow([row(1, NAN), row(1, 1.0)], Filters(max_cost=5.0), "EUR") == [1]


@pytest.mark.parametrize(
    ("filters", "words"),
    [
        (Filters(max_cost=5.0), ("--max-cost 5 alone", "10.00 EUR/m^2 (rank 4)")),
        (Filters(only=("ferrite",)), ("--only 'ferrite' alone", "made of nickel, copper, steel")),
        (
            Filters(max_cost=20.0, without=("steel",)),
            ("without --max-cost 20, 2 stacks", "without --without 'steel', 1"),
        ),
        (Filters(max_cost=20.0, max_sheets=2, without=("steel",)), ("without --max-cost 20, 2 stacks would be left",)),
    ],
)
def test_filters_that_leave_nothing_name_the_one_to_blame(filters: Filters, words: tuple[str, ...]) -> None:
    with pytest.raises(NothingLeftError) as caught:
        choice.narrow(ROWS, filters, "EUR")
    for part in words:
        assert part in str(caught.value)
    assert caught.value.exit_code == 1
