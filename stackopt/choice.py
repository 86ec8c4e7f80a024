"""Choosing from a front: filters, single objectives, weights, and the knee."""

from __future__ import annotations

from collections.abc import Mapping, Sequence
from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from stackopt.errors import NothingLeftError
from stackopt.front import FrontRow

Real = NDArray[np.float64]

QUANTITIES = ("mass", "cost", "thickness", "sheets", "margin")
"""What a front can be weighed by."""
_SMALL_FRONT = 3
"""Fronts of fewer stacks have no knee worth a name."""


def scaled(rows: Sequence[FrontRow], quantities: Sequence[str]) -> Real:
    """Scale quantities from 0, the best of the rows, to 1, the worst.

    A quantity that is the same in all rows, or has no known value, is 0 throughout; a missing value counts as worst.

    Returns
    -------
    ndarray, shape (row, quantity)
    """
    columns = []
    for name in quantities:
        values = np.array([-row.objective(name) if name == "margin" else row.objective(name) for row in rows])
        known = values[np.isfinite(values)]
        span = float(np.ptp(known)) if len(known) else 0.0
        if span > 0.0:
            columns.append(np.nan_to_num((values - known.min()) / span, nan=1.0))
        else:
            columns.append(np.zeros(len(values)))
    return np.stack(columns, axis=1)


def balanced(rows: Sequence[FrontRow], objectives: Sequence[str]) -> int:
    """Index of the knee: the row farthest below the plane on which the scaled objectives add up to one.

    Objectives are scaled by `scaled`. With two objectives the plane is the line through the two single-objective ends,
    and the row the knee of I. Das, "On characterizing the 'knee' of the Pareto curve based on normal-boundary
    intersection", Structural Optimization 18, 107-115 (1999), doi 10.1007/BF01195985. With more objectives the plane
    meets each axis at the front's worst value, where Das takes the plane through the ends; the ends of a front of
    stacks often coincide and then span no plane.
    """
    return int(np.argmin(scaled(rows, objectives).sum(axis=1)))


def knee(rows: Sequence[FrontRow], objectives: Sequence[str]) -> int | None:
    """Index of the row of `balanced`; None where the front is too small, or has one objective only."""
    return balanced(rows, objectives) if len(rows) >= _SMALL_FRONT and len(objectives) >= 2 else None


def weighted(rows: Sequence[FrontRow], weights: Mapping[str, float]) -> int:
    """Index of the row of the smallest weighted sum of scaled quantities (`scaled`)."""
    return int(np.argmin(scaled(rows, list(weights)) @ np.array(list(weights.values()))))


def best(rows: Sequence[FrontRow], quantity: str) -> int:
    """Index of the row that is best in one quantity; ties go to the one better balanced in the others.

    Raises
    ------
    NothingLeftError
        When the value is known for none, which only happens to costs.
    """
    values = np.array([-row.objective(quantity) if quantity == "margin" else row.objective(quantity) for row in rows])
    if np.all(np.isnan(values)):
        raise NothingLeftError("No stack of the front has a price: the material set gives none for its sheets.")
    tied = np.flatnonzero(values == np.nanmin(values))
    return int(tied[np.argmin(scaled([rows[index] for index in tied.tolist()], QUANTITIES).sum(axis=1))])


def nearest(rows: Sequence[FrontRow], index: int, objectives: Sequence[str], count: int = 3) -> list[int]:
    """Indices of the rows nearest to one, by the distance of their scaled objectives."""
    points = scaled(rows, objectives)
    distance = np.linalg.norm(points - points[index], axis=1)
    distance[index] = np.inf
    order = np.argsort(distance, kind="stable")
    return [int(other) for other in order[: min(count, len(rows) - 1)]]


@dataclass(frozen=True)
class Filters:
    """What a stack must be to be chosen; limits of None are absent."""

    max_cost: float | None = None
    without: tuple[str, ...] = ()
    only: tuple[str, ...] = ()
    max_sheets: int | None = None

    def options(self) -> dict[str, Filters]:
        """Each filter that is set, by its option as the user wrote it."""
        parts: dict[str, Filters] = {}
        if self.max_cost is not None:
            parts[f"--max-cost {self.max_cost:g}"] = Filters(max_cost=self.max_cost)
        if self.max_sheets is not None:
            parts[f"--max-sheets {self.max_sheets}"] = Filters(max_sheets=self.max_sheets)
        for name in self.without:
            parts[f"--without '{name}'"] = Filters(without=(name,))
        if self.only:
            parts[f"--only '{','.join(self.only)}'"] = Filters(only=self.only)
        return parts

    def passes(self, row: FrontRow) -> bool:
        """Whether a stack passes all of them; a stack of unknown cost passes no limit on the cost."""
        names = {sheet.material for sheet in row.stack}
        return (
            (self.max_cost is None or row.cost_per_m2 <= self.max_cost * (1.0 + 1e-12))
            and (self.max_sheets is None or row.sheets <= self.max_sheets)
            and not names & set(self.without)
            and (not self.only or names <= set(self.only))
        )


def narrow(rows: Sequence[FrontRow], filters: Filters, currency: str) -> list[int]:
    """Indices of the rows that pass the filters.

    Raises
    ------
    NothingLeftError
        When none does; the message says which filter is to blame.
    """
    kept = [index for index, row in enumerate(rows) if filters.passes(row)]
    if kept:
        return kept
    raise NothingLeftError(_blame(rows, filters.options(), currency))


def _blame(rows: Sequence[FrontRow], options: Mapping[str, Filters], currency: str) -> str:
    head = f"No stack of the front ({len(rows)} stacks) passes the filters."
    alone = {text: sum(map(part.passes, rows)) for text, part in options.items()}
    guilty = [
        f"{text} alone leaves none: {_hint(rows, options[text], currency)}." for text in options if not alone[text]
    ]
    if guilty:
        return " ".join([head, *guilty])
    spared = {
        text: sum(all(part.passes(row) for other, part in options.items() if other != text) for row in rows)
        for text in options
    }
    freeing = [f"without {text}, {_stacks(count)} would be left" for text, count in spared.items() if count]
    if freeing:
        return f"{head} They exclude each other: {'; '.join(freeing)}."
    leaves = "; ".join(f"{text} leaves {_stacks(count)}" for text, count in alone.items())
    return f"{head} Each leaves some, but none in common, and leaving one filter out is not enough: {leaves}."


def _stacks(count: int) -> str:
    return "1 stack" if count == 1 else f"{count} stacks"


def _hint(rows: Sequence[FrontRow], part: Filters, currency: str) -> str:
    """Tell what the front has instead."""
    if part.max_cost is not None:
        costs = [row.cost_per_m2 for row in rows]
        if np.all(np.isnan(costs)):
            return "no stack has a price"
        index = int(np.nanargmin(costs))
        return f"the cheapest stack costs {costs[index]:.2f} {currency}/m^2 (rank {index + 1})"
    if part.max_sheets is not None:
        fewest = min(rows, key=lambda row: row.sheets)
        return f"the fewest sheets are {fewest.sheets} (rank {rows.index(fewest) + 1})"
    if part.without:
        return f"every stack has {part.without[0]}"
    used = dict.fromkeys(sheet.material for row in rows for sheet in row.stack)
    return f"every stack needs another material; the front is made of {', '.join(used)}"
