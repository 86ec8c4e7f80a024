"""What a checkpoint of a search must hold: what a search saves passes, what a stranger makes of it does not."""

from __future__ import annotations

import math
from collections.abc import Callable
from pathlib import Path
from typing import Any

import numpy as np
import problem_files
import pytest
from numpy.typing import NDArray

from stackopt.phases import Search
from stackopt.problem import Problem
from stackopt.readers import read_problem
from stackopt.saved import ARRAYS, STACKS, VALUES, lengths, why_not_usable
from stackopt.status import Status

Arrays = dict[str, NDArray[Any]]

SMALL = {
    'points = [["50 Hz", "8 dB"], ["1 kHz", "14 dB"], ["1 MHz", "90 dB"]]': (
        'points = [["1 kHz", "10 dB"], ["1 MHz", "75 dB"]]\npoints_per_decade = 1'
    ),
    "max_sheets = 4": "max_sheets = 3",
    "population = 50": "population = 10",
}


@pytest.fixture(scope="module")
def saved(tmp_path_factory: pytest.TempPathFactory) -> tuple[Problem, list[tuple[Arrays, dict[str, Any]]]]:
    """A problem and every state that its search would save."""
    problem = read_problem(problem_files.write(tmp_path_factory.mktemp("saved"), SMALL))
    task = Search(problem)
    states: list[tuple[Arrays, dict[str, Any]]] = [task.state()]

    def watch(status: Status) -> None:
        if task.prover is not None:  # a proof this small is over before anything would save it
            states.append(task.state())

    task.run(watch, save=lambda: states.append(task.state()))
    states.append(task.state())
    return problem, states


def test_every_state_of_a_search_passes(saved: tuple[Problem, list[tuple[Arrays, dict[str, Any]]]]) -> None:
    problem, states = saved
    assert len(states) >= 3
    for arrays, text in states:
        assert why_not_usable(arrays, text, problem) is None


def test_the_tables_know_all_that_a_search_saves(
    saved: tuple[Problem, list[tuple[Arrays, dict[str, Any]]]],
) -> None:
    """Whoever adds to `Search.state` adds a line to `ARRAYS` or `VALUES`."""
    _, states = saved
    assert {name for arrays, _ in states for name in arrays} == set(ARRAYS)
    assert {name for _, text in states for name in text} == set(VALUES)
    assert set(STACKS) <= set(ARRAYS)
    for arrays, _ in states:
        assert {name for name in arrays if arrays[name].shape[-1] in (3, 6) and arrays[name].ndim > 1} == set(
            STACKS
        ) & set(arrays)


def test_a_state_with_free_thicknesses_passes(tmp_path: Path) -> None:
    ranged = {'gauges = ["70 um", "18 um", "35 um"]': 'thickness_range = ["0.1 mm", "2 mm"]'}
    problem = read_problem(problem_files.write(tmp_path, SMALL, ranged))
    task = Search(problem)
    arrays, text = task.state()
    assert arrays["populations"][..., 3:].max() > 0
    assert why_not_usable(arrays, text, problem) is None
    arrays["populations"] = arrays["populations"] * 1_000_000
    arrays["populations"][..., :3] = 1
    assert why_not_usable(arrays, text, problem) == "its array populations has sheets that the problem does not have"


ARRAY_CHANGES: dict[str, Callable[[NDArray[Any]], Any]] = {
    "a dimension more": lambda array: array[None],
    "a single number": lambda array: np.array(7, dtype=array.dtype),
    "flat": lambda array: np.concatenate([array.ravel(), array.ravel()[:1]]),
    "one column more": lambda array: np.concatenate([array, array[..., :1]], axis=-1),
    "floats": lambda array: array.astype(float) + math.nan,
    "unsigned": lambda array: array.astype(np.uint64),
    "texts": lambda array: array.astype(str),
    "small numbers": lambda array: array.astype(np.int8),
    "far below": lambda array: np.full_like(array, np.iinfo(np.int64).min),
}


@pytest.mark.parametrize("change", ARRAY_CHANGES)
@pytest.mark.parametrize("name", ARRAYS)
def test_changed_arrays_are_refused(
    saved: tuple[Problem, list[tuple[Arrays, dict[str, Any]]]], name: str, change: str
) -> None:
    problem, states = saved
    arrays, text = next(state for state in states if name in state[0] and state[0][name].size)
    reason = why_not_usable(arrays | {name: ARRAY_CHANGES[change](arrays[name])}, text, problem)
    assert reason is not None
    assert name in reason


@pytest.mark.parametrize("name", STACKS)
@pytest.mark.parametrize("code", [6, -1, 2**62])
def test_sheets_that_are_not_there(
    saved: tuple[Problem, list[tuple[Arrays, dict[str, Any]]]], name: str, code: int
) -> None:
    problem, states = saved
    assert len(problem.sheets) == 5
    arrays, text = next(state for state in states if name in state[0] and state[0][name].size)
    changed = arrays[name].copy()
    changed[..., 0] = code
    assert name in (why_not_usable(arrays | {name: changed}, text, problem) or "")


@pytest.mark.parametrize("name", [name for name in ARRAYS if ARRAYS[name].needed])
def test_missing_arrays(saved: tuple[Problem, list[tuple[Arrays, dict[str, Any]]]], name: str) -> None:
    problem, states = saved
    arrays, text = states[0]
    left = {other: array for other, array in arrays.items() if other != name}
    assert why_not_usable(left, text, problem) == f"it has no array {name}"


def test_half_a_proof(saved: tuple[Problem, list[tuple[Arrays, dict[str, Any]]]]) -> None:
    problem, states = saved
    arrays, text = states[-1]
    proof = [name for name in ARRAYS if ARRAYS[name].needs]
    for name in proof:
        left = {other: array for other, array in arrays.items() if other != name}
        assert f"it has no array {name}, which belongs to " in (why_not_usable(left, text, problem) or "")


def test_lengths_that_do_not_fit_one_another(saved: tuple[Problem, list[tuple[Arrays, dict[str, Any]]]]) -> None:
    problem, states = saved
    arrays, text = next(state for state in states if len(state[0]["values"]))
    reason = why_not_usable(arrays | {"codes": arrays["codes"][:-1]}, text, problem)
    assert reason is not None
    assert reason.startswith("its array codes has the wrong shape")
    assert lengths(problem)["genes"] == 6


@pytest.mark.parametrize(
    ("name", "value"),
    [
        ("seed", -1),
        ("seed", 2**32),
        ("seed", 1.0),
        ("seed", True),
        ("seed", "1"),
        ("round", -1),
        ("round", None),
        ("error_db", 0.0),
        ("error_db", math.nan),
        ("error_db", "0.1"),
        ("exploring", 1),
        ("seconds", []),
        ("seconds", {"exploring": "long"}),
        ("seconds", {"exploring": math.inf}),
        ("tally", {"opened": -1}),
        ("extra_hz", {}),
        ("extra_hz", [[]]),
        ("extra_hz", [[1.0], [math.nan]]),
        ("extra_hz", [[], ["1 kHz"]]),
        ("extra_hz", [[], [-1.0]]),
    ],
)
def test_changed_values_are_refused(
    saved: tuple[Problem, list[tuple[Arrays, dict[str, Any]]]], name: str, value: Any
) -> None:
    problem, states = saved
    arrays, text = states[0]
    reason = why_not_usable(arrays, text | {name: value}, problem)
    assert reason is not None
    assert reason.startswith(f"its {name} cannot be ")
    left = {other: entry for other, entry in text.items() if other != name}
    assert why_not_usable(arrays, left, problem) == f"it has no {name}"
