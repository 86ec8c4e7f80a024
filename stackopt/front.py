"""The result of a search: the non-dominated stacks with their objectives and margins."""

from __future__ import annotations

import math
from collections.abc import Iterable, Mapping
from dataclasses import dataclass, field
from typing import TYPE_CHECKING

from stackopt.problem import Problem, Stack, format_stack

if TYPE_CHECKING:
    import pandas as pd


COLUMNS = (
    "rank",
    "stack",
    "sheets",
    "mass_kg_per_m2",
    "cost_per_m2",
    "thickness_mm",
    "margin_db",
    "tightest_hz",
    "requirement",
)
"""Columns of front.csv."""


@dataclass(frozen=True)
class FrontRow:
    """One stack of a front; ``margin_db`` is the smallest over all requirements, found at ``tightest_hz``.

    ``cost_per_m2`` is NaN where the material set gives no prices. ``extra`` holds further columns, the same ones in
    every row of a front: ``worst_margin_db``, or ``yield`` with the ends of its interval, where the problem assumes
    them; ``flux_fraction``, ``flux_layer`` and ``heat_w`` where it has a drive.
    """

    stack: Stack
    mass_kg_per_m2: float
    cost_per_m2: float
    thickness_m: float
    margin_db: float
    tightest_hz: float
    requirement: str
    extra: Mapping[str, float | str] = field(default_factory=dict, hash=False)

    @property
    def sheets(self) -> int:
        """Number of sheets."""
        return len(self.stack)

    def objective(self, name: str) -> float:
        """Value of an objective by its name in a problem file; all but margin are better when smaller."""
        return {
            "mass": self.mass_kg_per_m2,
            "cost": self.cost_per_m2,
            "thickness": self.thickness_m,
            "sheets": float(self.sheets),
            "margin": self.margin_db,
            "heat": float(self.extra.get("heat_w", math.nan)),
        }[name]


@dataclass(frozen=True)
class Front:
    """A front of a problem.

    Parameters
    ----------
    problem : Problem
    rows : tuple of FrontRow
        Ranked by the problem's first objective, then the next ones.
    complete : bool
        Proved: no stack the problem allows dominates or is missing from the front.
    statement : str
        One sentence for the user about how far the front can be trusted.
    equals : tuple of (int, FrontRow)
        Other stacks that reach exactly the objectives of a row, as (rank, row); ranks count from 1.
    alternatives : tuple of FrontRow, optional
        Where asked for: all feasible stacks that no member of the front beats by more than the asked factor.
    """

    problem: Problem
    rows: tuple[FrontRow, ...]
    complete: bool = False
    statement: str = ""
    equals: tuple[tuple[int, FrontRow], ...] = ()
    alternatives: tuple[FrontRow, ...] | None = None

    def __len__(self) -> int:
        return len(self.rows)

    def to_frame(self) -> pd.DataFrame:
        """Return the front as a data frame with the columns of front.csv."""
        return rows_to_frame(self.rows)


def rows_to_frame(rows: Iterable[FrontRow]) -> pd.DataFrame:
    """Return rows as a data frame with the columns of front.csv, ranked from 1 in the given order."""
    import pandas as pd

    rows = list(rows)
    more = list(rows[0].extra) if rows else []
    records = [
        (
            rank,
            format_stack(row.stack),
            row.sheets,
            row.mass_kg_per_m2,
            row.cost_per_m2,
            round(row.thickness_m * 1e3, 9),
            row.margin_db,
            row.tightest_hz,
            row.requirement,
            *(row.extra.get(name, math.nan) for name in more),
        )
        for rank, row in enumerate(rows, start=1)
    ]
    return pd.DataFrame.from_records(records, columns=[*COLUMNS, *more])
