"""Tables: CSV files at full precision, and short ones for the terminal."""

from __future__ import annotations

import math
import os
import textwrap
from collections.abc import Iterator, Sequence
from pathlib import Path
from typing import TYPE_CHECKING

import numpy as np
from rich.box import SIMPLE_HEAD
from rich.table import Table

from stackopt.front import Front, FrontRow, rows_to_frame
from stackopt.outputs.files import write_whole
from stackopt.outputs.words import ends, margin_words, wrap_stack
from stackopt.prediction import Curve, Prediction
from stackopt.problem import format_stack
from stackopt.units import format_attenuation, format_frequency

if TYPE_CHECKING:
    import pandas as pd

PREDICTION_COLUMNS = ("requirement", "frequency_hz", "attenuation_db", "required_db", "margin_db")
"""Columns of a prediction's CSV; ``stack`` comes before them when there are several stacks."""
BAND_COLUMNS = ("attenuation_low_db", "attenuation_high_db")
"""Columns behind them where a material has a tolerance."""
MAX_ROWS = 25
"""Longest front that the terminal shows in full."""
_NARROWEST_STACK = 44
"""Characters that stacks need to stand beside their numbers."""


def write_front(front: Front, path: str | os.PathLike[str]) -> None:
    """Write front.csv: the columns of `stackopt.front.COLUMNS`, full precision, UTF-8, whole or not at all.

    Raises
    ------
    InputError
        When the file cannot be written.
    """
    _write_frame(front.to_frame(), path)


def write_equals(front: Front, path: str | os.PathLike[str]) -> None:
    """Write front_equals.csv: the other stacks that reach exactly the objectives of a row of the front, by its rank.

    Raises
    ------
    InputError
        When the file cannot be written.
    """
    frame = rows_to_frame([row for _, row in front.equals])
    frame["rank"] = [rank for rank, _ in front.equals]
    _write_frame(frame, path)


def write_alternatives(front: Front, path: str | os.PathLike[str]) -> None:
    """Write alternatives.csv: the columns of front.csv, one row for each alternative.

    Raises
    ------
    InputError
        When the file cannot be written.
    """
    _write_frame(rows_to_frame(front.alternatives or ()), path)


def write_predictions(predictions: Sequence[Prediction], path: str | os.PathLike[str]) -> None:
    """Write the table of `prediction_frame` as CSV, full precision, UTF-8, whole or not at all.

    Raises
    ------
    InputError
        When the file cannot be written.
    """
    _write_frame(prediction_frame(predictions), path)


def _write_frame(frame: pd.DataFrame, path: str | os.PathLike[str]) -> None:
    write_whole(Path(path), lambda part: frame.to_csv(part, index=False, encoding="utf-8", lineterminator="\n"))


def prediction_frame(predictions: Sequence[Prediction]) -> pd.DataFrame:
    """Return predictions as a data frame, one row for each stack, requirement and frequency.

    Parameters
    ----------
    predictions : sequence of Prediction

    Returns
    -------
    pandas.DataFrame
        Columns `PREDICTION_COLUMNS`, with ``stack`` before them when there are several predictions, and `BAND_COLUMNS`
        behind them when any prediction has a band; the others have their attenuation there.
    """
    import pandas as pd

    parts = []
    has_bands = any(prediction.band is not None for prediction in predictions)
    for prediction in predictions:
        band = prediction.band
        for number, curve in enumerate(prediction.curves):
            values = (curve.frequency_hz, curve.attenuation_db, curve.required_db, curve.margin_db)
            part = pd.DataFrame(dict(zip(PREDICTION_COLUMNS[1:], values, strict=True)))
            if has_bands:
                ends = (curve.attenuation_db,) * 2 if band is None else (band.low_db[number], band.high_db[number])
                part = part.assign(**dict(zip(BAND_COLUMNS, ends, strict=True)))
            part.insert(0, "requirement", curve.requirement)
            if len(predictions) > 1:
                part.insert(0, "stack", format_stack(prediction.row.stack))
            parts.append(part)
    return pd.concat(parts, ignore_index=True)


def front_text(front: Front, width: int, rest_in: str = "front.csv", only: Sequence[int] | None = None) -> str:
    """Write a front as a table in plain text, shortened when it is long.

    Stacks stand at the end of their line, or below it where the line is too short for them.

    Parameters
    ----------
    front : Front
    width : int
        Characters of a terminal line.
    rest_in : str
        Where the full front is, told when rows are left out.
    only : sequence of int, optional
        Show exactly the rows of these indices.
    """
    chosen = shown_rows(front) if only is None else list(only)
    columns = _front_columns(front, chosen)
    widths = [max(map(len, column)) for column in columns]
    numbers = ["  ".join(map(str.rjust, cells, widths)) for cells in zip(*columns, strict=True)]
    indent = sum(widths) + 2 * len(widths)
    beside = width - indent >= _NARROWEST_STACK
    if not beside:
        indent = widths[0] + 2
    lines = [numbers[0] + ("  stack, source side first" if beside else ""), numbers[1]]
    lines.append("─" * min(width, max(map(len, lines)) if not beside else width))
    for index, head in zip(chosen, numbers[2:], strict=True):
        parts = wrap_stack(front.rows[index].stack, width - indent)
        lines.append(f"{head}  {parts.pop(0)}" if beside else head)
        lines += [" " * indent + part for part in parts]
    notes = [] if beside else ["Stacks are written from the source side to the victim side."]
    if only is None:
        notes += _front_notes(front, chosen, rest_in)
    return "\n".join(line.rstrip() for line in [*lines, *([""] if notes else []), *notes])


def _front_columns(front: Front, chosen: Sequence[int]) -> list[list[str]]:
    """Two lines of heading and the cells of each column but the stacks'."""
    rows = [front.rows[index] for index in chosen]
    columns = [
        ["rank", "", *(str(index + 1) for index in chosen)],
        ["sheets", "", *(str(row.sheets) for row in rows)],
        ["mass", "kg/m^2", *(f"{row.mass_kg_per_m2:.3f}" for row in rows)],
        ["cost", f"{front.problem.currency}/m^2", *map(_cost, rows)],
        ["thickness", "mm", *(f"{row.thickness_m * 1e3:.3f}" for row in rows)],
        ["margin", "dB", *(f"{row.margin_db:+.2f}" for row in rows)],
        ["tightest", "", *(format_frequency(row.tightest_hz) for row in rows)],
    ]
    if len(front.problem.requirements) > 1:
        columns.append(["requirement", "", *(textwrap.shorten(row.requirement, 20, placeholder="...") for row in rows)])
    return columns


def shown_rows(front: Front, limit: int = MAX_ROWS) -> list[int]:
    """Choose the rows to show: all, or the best of each objective and an even spread between them."""
    count = len(front.rows)
    if count <= limit:
        return list(range(count))
    chosen = set(ends(front.rows, front.problem.search.objectives)) | {0, count - 1}
    for index in np.linspace(0, count - 1, limit).round().astype(int):
        if len(chosen) < limit:
            chosen.add(int(index))
    return sorted(chosen)


def _front_notes(front: Front, chosen: Sequence[int], rest_in: str) -> Iterator[str]:
    best = ends(front.rows, front.problem.search.objectives)
    if len(front.rows) > 1:
        yield "; ".join(f"{words}: rank {index + 1}" for index, words in best.items()).capitalize() + "."
    if len(chosen) < len(front.rows):
        yield (
            f"{len(chosen)} of {len(front.rows)} stacks shown: the best of each objective and an even spread between. "
            f"All of them: {rest_in}"
        )


def _cost(row: FrontRow) -> str:
    return "-" if math.isnan(row.cost_per_m2) else f"{row.cost_per_m2:.2f}"


def prediction_tables(predictions: Sequence[Prediction], width: int) -> Iterator[Table]:
    """Show attenuation against the mask, a table for each requirement and for as many stacks as fit beside each other.

    Stacks are numbered from 1 in the given order.
    """
    per_table = max(1, (width - 22) // 20)
    for number in range(len(predictions[0].curves)):
        for start in range(0, len(predictions), per_table):
            shown = range(start, min(start + per_table, len(predictions)))
            yield _prediction_table([(index + 1, predictions[index].curves[number]) for index in shown])


def _prediction_table(curves: Sequence[tuple[int, Curve]]) -> Table:
    first = curves[0][1]
    table = plain_table()
    table.title = first.requirement
    table.add_column("frequency", justify="right", no_wrap=True)
    table.add_column("required", justify="right", no_wrap=True)
    for number, _ in curves:
        table.add_column(f"stack {number}", justify="right", no_wrap=True)
        table.add_column("margin", justify="right", no_wrap=True)
    for index, frequency in enumerate(first.frequency_hz):
        cells = [format_frequency(float(frequency)), f"{first.required_db[index]:.1f} dB"]
        for _, curve in curves:
            attenuation, required = float(curve.attenuation_db[index]), float(curve.required_db[index])
            cells += [format_attenuation(attenuation), margin_words(attenuation, required)]
        table.add_row(*cells, style="bold" if any(curve.margin_db[index] < 0.0 for _, curve in curves) else "")
    return table


def plain_table() -> Table:
    """Return an empty table in the style of all terminal tables."""
    return Table(
        box=SIMPLE_HEAD,
        pad_edge=False,
        padding=(0, 1, 0, 0),
        title_justify="left",
        title_style="bold",
        caption_justify="left",
        caption_style="",
        header_style="bold",
    )
