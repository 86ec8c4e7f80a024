"""What the trade-off page holds of every stack: numbers, words, layers and curves, packed small."""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass
from typing import Any

import numpy as np
from numpy.typing import NDArray

from stackopt import evaluate
from stackopt.choice import QUANTITIES
from stackopt.compiled import compile_problem
from stackopt.front import Front, FrontRow
from stackopt.model import with_bonds
from stackopt.outputs.words import HIGHEST_DB, KNEE, marked
from stackopt.problem import Problem, Sheet, format_stack

Real = NDArray[np.float64]

SMOOTHEST = 6
"""Points per decade of a drawn curve over those of the search grid, at most."""
MOST_POINTS = 160
"""Points of all curves of a stack; the search grid is kept even where it has more, up to `MOST_GRID`."""
MOST_GRID = 480
UNIT_PER_DB = 100.0
"""Curves are whole hundredths of a dB, in 16 bits."""
_DRAWN_DB = (-200.0, HIGHEST_DB + 2.0)
"""Range of the drawn values, dB; beyond the measurable they stand in a band of their own."""


@dataclass(frozen=True)
class Curves:
    """Attenuation of every stack against one requirement; ``packed`` is of shape (stack, frequency)."""

    requirement: str
    frequency_hz: Real
    required_db: Real
    packed: NDArray[np.int16]


def page_rows(front: Front) -> list[tuple[str, FrontRow]]:
    """Rows of the page with their labels: the ranks of the front, then the alternatives that are not on it."""
    rows = [(str(rank), row) for rank, row in enumerate(front.rows, start=1)]
    known = {row.stack for row in front.rows}
    others = [row for row in front.alternatives or () if row.stack not in known]
    return rows + [(f"a{number}", row) for number, row in enumerate(others, start=1)]


def quantities(front: Front) -> list[str]:
    """Numbers that the page shows of every stack: the usual ones and whatever else is an objective."""
    return list(dict.fromkeys((*QUANTITIES, *front.problem.search.objectives)))


def columns(front: Front) -> dict[str, Any]:
    """Columns of the page's table of stacks, one entry for each of `page_rows`."""
    labelled = page_rows(front)
    rows = [row for _, row in labelled]
    names = marked(front)
    return {
        "rank": [label for label, _ in labelled],
        "stack": [format_stack(row.stack) for row in rows],
        "what": [names.get(index, "") for index in range(len(rows))],
        "shape": [_shape(label, names.get(index)) for index, (label, _) in enumerate(labelled)],
        "sheets": np.array([row.sheets for row in rows], dtype=np.int32),
        "mass": np.array([row.mass_kg_per_m2 for row in rows]),
        "cost": np.array([row.cost_per_m2 for row in rows]),
        "thickness": np.array([round(row.thickness_m * 1e3, 9) for row in rows]),
        "margin": np.array([row.margin_db for row in rows]),
        "tightest_hz": np.array([row.tightest_hz for row in rows]),
        "requirement": [row.requirement for row in rows],
        **{
            name: np.array([row.objective(name) for row in rows])
            for name in quantities(front)
            if name not in QUANTITIES
        },
    }


def _shape(label: str, name: str | None) -> str:
    if label.startswith("a"):
        return "inverted_triangle"
    if name is None:
        return "circle"
    return "star" if name == KNEE else "diamond"


def layers(front: Front) -> tuple[list[Sheet], list[list[int]]]:
    """Distinct layers of all stacks with their bonds, and the layers of each stack as numbers of these."""
    stacks = [with_bonds(front.problem, row.stack) for _, row in page_rows(front)]
    distinct = list(dict.fromkeys(layer for stack in stacks for layer in stack))
    number = {layer: index for index, layer in enumerate(distinct)}
    return distinct, [[number[layer] for layer in stack] for stack in stacks]


def curves(front: Front) -> list[Curves]:
    """Attenuation of all stacks against each requirement, on as fine a grid as the page may hold."""
    problem = front.problem
    rows = [row for _, row in page_rows(front)]
    sheets = tuple(dict.fromkeys(sheet for row in rows for sheet in row.stack))
    compiled = compile_problem(problem, sheets, _density(problem))
    codes = evaluate.encode(compiled, [row.stack for row in rows])
    values = np.concatenate(
        [evaluate.attenuation_rows(compiled, part) for part in np.array_split(codes, max(1, len(codes) // 200))]
    )
    packed = np.round(np.clip(values, *_DRAWN_DB) * UNIT_PER_DB).astype(np.int16)
    result = []
    for number, requirement in enumerate(problem.requirements):
        here = _thinned(np.flatnonzero(compiled.rows.requirement == number), problem)
        frequency = compiled.rows.frequency_hz[here]
        required = requirement.mask.required_db(frequency)
        result.append(Curves(requirement.name, frequency, required, packed[:, here]))
    return result


def _density(problem: Problem) -> int:
    for density in range(SMOOTHEST, 1, -1):
        if sum(len(requirement.mask.grid_hz(density)) for requirement in problem.requirements) <= MOST_POINTS:
            return density
    return 1


def _thinned(indices: NDArray[np.intp], problem: Problem) -> NDArray[np.intp]:
    """Leave points out where a search grid is too long for the page, but neither end."""
    most = max(2, MOST_GRID // len(problem.requirements))
    if len(indices) <= most:
        return indices
    return np.asarray(indices[np.unique(np.linspace(0, len(indices) - 1, most).round().astype(int))])


def span(values: Sequence[float] | Real) -> tuple[float, float] | None:
    """Range of the known values with ends of three digits, or None where all are the same or unknown."""
    known = np.asarray(values, dtype=float)
    known = known[np.isfinite(known)]
    if len(known) == 0 or np.ptp(known) == 0.0:
        return None
    unit = 10.0 ** (np.floor(np.log10(np.ptp(known))) - 2.0)
    low, high = np.floor(known.min() / unit) * unit, np.ceil(known.max() / unit) * unit
    return float(f"{low:.9g}"), float(f"{high:.9g}")
