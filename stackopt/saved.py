"""What a checkpoint of a search must hold, checked before it is used.

A right checksum tells that a checkpoint is whole, not that this program wrote it. Whatever `stackopt.phases.Search`
puts into its state has a line here: an array in `ARRAYS`, a value in `VALUES`.
"""

from __future__ import annotations

from collections.abc import Callable, Mapping
from dataclasses import dataclass
from typing import Any

import numpy as np
from numpy.typing import NDArray

from stackopt.compiled import THICKNESS_UNIT
from stackopt.explore import ISLANDS
from stackopt.problem import Problem
from stackopt.units import show
from stackopt.untrusted import as_number

LARGEST_SEED = 2**32 - 1
_LARGEST_COUNT = 2.0**63
_LARGEST_SUM = 2.0**62


@dataclass(frozen=True)
class Expected:
    """An array of a checkpoint.

    Parameters
    ----------
    dtype : type
        Of its numbers.
    shape : tuple of str or int
        Lengths; a word is the same length wherever it stands, and that of the problem where `lengths` knows it.
    low, high : float
        Limits of its numbers.
    needs : tuple of str
        Arrays that must be there too.
    needed : bool
        Whether a checkpoint must hold it.
    """

    dtype: type[np.generic]
    shape: tuple[str | int, ...]
    low: float = 0.0
    high: float = _LARGEST_COUNT
    needs: tuple[str, ...] = ()
    needed: bool = False


_PROOF = ("proof_pending", "proof_values", "proof_codes")
ARRAYS: Mapping[str, Expected] = {
    "values": Expected(np.int64, ("members", "objectives"), -_LARGEST_SUM, _LARGEST_SUM, needed=True),
    "codes": Expected(np.int64, ("members", "genes"), needed=True),
    "populations": Expected(np.int64, ("islands", "population", "genes"), needed=True),
    "polished": Expected(np.int64, ("members", 2), 0.0, 1.0, needed=True),
    "counters": Expected(np.int64, (6,), needed=True),
    "proof_pending": Expected(np.int64, ("pending", "positions"), needs=_PROOF),
    "proof_values": Expected(np.int64, ("proved", "objectives"), -_LARGEST_SUM, _LARGEST_SUM, needs=_PROOF),
    "proof_codes": Expected(np.int64, ("proved", "positions"), needs=_PROOF),
}
"""Every array that the state of a search may hold."""

STACKS = ("codes", "populations", "proof_pending", "proof_codes")
"""Arrays whose rows are stacks: codes, or genes, which are codes and then thicknesses."""


def lengths(problem: Problem) -> dict[str, int]:
    """Lengths that follow from the problem."""
    positions = problem.rules.max_sheets
    return {
        "objectives": len(problem.search.objectives),
        "positions": positions,
        "genes": 2 * positions,
        "islands": ISLANDS,
        "population": problem.search.population,
    }


def _is_whole(low: float, high: float) -> Callable[[Any, Problem], bool]:
    return lambda value, _: type(value) is int and low <= value <= high


def _is_flag(value: Any, _: Problem) -> bool:
    return type(value) is bool


def _is_error(value: Any, _: Problem) -> bool:
    return (as_number(value, 0.0, 1.0) or 0.0) > 0.0


def _is_count_each(value: Any, _: Problem) -> bool:
    return isinstance(value, dict) and all(as_number(number, 0.0) is not None for number in value.values())


def _is_frequencies_each(value: Any, problem: Problem) -> bool:
    """A list of frequencies for each requirement."""
    return (
        isinstance(value, list)
        and len(value) == len(problem.requirements)
        and all(isinstance(row, list) and all(as_number(hz, 0.0, 1e15) is not None for hz in row) for row in value)
    )


VALUES: Mapping[str, Callable[[Any, Problem], bool]] = {
    "seed": _is_whole(0, LARGEST_SEED),
    "round": _is_whole(0, 10_000),
    "error_db": _is_error,
    "exploring": _is_flag,
    "seconds": _is_count_each,
    "tally": _is_count_each,
    "extra_hz": _is_frequencies_each,
}
"""Every value of the state of a search, and what it must be."""


def why_not_usable(arrays: Mapping[str, NDArray[Any]], text: Mapping[str, Any], problem: Problem) -> str | None:
    """Say what is wrong with a checkpoint's content, or return None where it can be used.

    Parameters
    ----------
    arrays, text : mapping
        As `stackopt.checkpoint.read_checkpoint` returns them.
    problem : Problem
        What was searched.
    """
    for name, is_right in VALUES.items():
        if name not in text:
            return f"it has no {name}"
        if not is_right(text[name], problem):
            return f"its {name} cannot be {show(text[name])}"
    known = lengths(problem)
    for name, expected in ARRAYS.items():
        wrong = _wrong_array(name, expected, arrays, known)
        if wrong:
            return wrong
    return next((wrong for name in STACKS if name in arrays and (wrong := _wrong_stacks(name, arrays, problem))), None)


def _wrong_stacks(name: str, arrays: Mapping[str, NDArray[Any]], problem: Problem) -> str | None:
    positions = problem.rules.max_sheets
    codes, thickness_pm = arrays[name][..., :positions], arrays[name][..., positions:]
    ranges = [problem.materials[material].thickness_range_m or (0.0, 0.0) for material in problem.continuous]
    thickest_pm = max((high for _, high in ranges), default=0.0) * THICKNESS_UNIT
    if np.any(codes > len(problem.sheets) + len(problem.continuous)) or np.any(thickness_pm > thickest_pm + 0.5):
        return f"its array {name} has sheets that the problem does not have"
    return None


def _wrong_array(
    name: str, expected: Expected, arrays: Mapping[str, NDArray[Any]], known: dict[str, int]
) -> str | None:
    """What is wrong with one array; lengths met for the first time are added to those known."""
    if name not in arrays:
        return f"it has no array {name}" if expected.needed else None
    missing = [other for other in expected.needs if other not in arrays]
    if missing:
        return f"it has no array {missing[0]}, which belongs to {name}"
    array = arrays[name]
    if array.dtype != expected.dtype:
        return f"its array {name} is of {array.dtype}, not {np.dtype(expected.dtype)}"
    asked = [known.setdefault(length, found) if isinstance(length, str) else length
             for length, found in zip(expected.shape, array.shape, strict=False)]  # fmt: skip
    if array.ndim != len(expected.shape) or list(array.shape) != asked:
        return f"its array {name} has the wrong shape, {' x '.join(map(str, array.shape)) or 'a single number'}"
    if array.size and not (expected.low <= array.min() and array.max() <= expected.high):
        return f"its array {name} has numbers beyond {expected.low:g} to {expected.high:g}"
    return None
