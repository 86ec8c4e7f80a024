"""Tolerances in words and tables: what a search assumes, a stack's worst corner and yield, and which layer matters."""

from __future__ import annotations

import textwrap
from collections.abc import Iterator, Sequence
from pathlib import Path
from typing import TYPE_CHECKING

from rich.console import Console
from rich.table import Table

from stackopt.band import Band, tolerance_band, yield_words
from stackopt.compiled import MARGIN_SLACK_DB
from stackopt.outputs.words import miss_words
from stackopt.prediction import Prediction
from stackopt.problem import Problem, Stack, format_stack
from stackopt.units import format_frequency

if TYPE_CHECKING:
    from stackopt.sensitivity import Sensitivity


def assumption_words(problem: Problem) -> str:
    """Say for which values of the materials the mask must be met."""
    search = problem.search
    if search.assume == "worst":
        return "worst: the mask is met at nominal values and at every corner of the tolerances"
    if search.assume == "yield":
        return (
            f"yield: the mask is met by at least {100 * search.yield_goal:.4g} % of samples, spread evenly between the "
            "ends of the tolerances"
        )
    return "nominal: the mask is met at the nominal values; tolerances are not looked at"


def tolerance_lines(problem: Problem, prediction: Prediction) -> Iterator[tuple[str, str]]:
    """Yield what tolerances make of a prediction, as lines of a section."""
    if prediction.band is not None:
        yield "tolerances", band_words(prediction.band, problem)
        if prediction.band.worst_case:
            yield "worst corner", "; ".join(prediction.band.worst_case)
    if problem.search.assume == "yield":
        yield "yield", yield_words(problem, prediction.row.stack)


def band_words(band: Band, problem: Problem) -> str:
    """Say whether a stack meets the mask at its worst corner, and where that is tightest."""
    where = f"at {format_frequency(band.worst_hz)}"
    if len(problem.requirements) > 1:
        where += f" of '{band.requirement}'"
    if band.worst_margin_db >= -MARGIN_SLACK_DB:
        return f"meets the mask at {band.method}; smallest margin {band.worst_margin_db:+.2f} dB {where}"
    return f"misses the mask by {miss_words(band.worst_margin_db)} {where}, the worst of {band.method}"


def scouted_words(problem: Problem, stack: Stack) -> Iterator[str]:
    """Yield what the assumption of a problem makes of the stack of a quick look, which is one at nominal values."""
    if problem.search.assume == "worst" and (band := tolerance_band(problem, stack)) is not None:
        yield f"this stack {band_words(band, problem)}"
    if problem.search.assume == "yield":
        yield f"this stack {yield_words(problem, stack)}"


def sensitivity_tables(found: Sensitivity) -> Iterator[Table]:
    """Show which layer of a stack matters: without it, and over its tolerances; the strongest first."""
    from stackopt.outputs.tables import plain_table

    table = plain_table()
    table.title = "Without the layer"
    for heading in ("layer", "sheet", "margin"):
        table.add_column(heading, justify="left" if heading == "sheet" else "right", no_wrap=heading != "sheet")
    for absent in found.left_out:
        table.add_row(str(absent.layer), str(absent.sheet), f"{absent.change_db:+.2f} dB")
    yield table
    if not found.effects:
        return
    table = plain_table()
    table.title = "Over the tolerances of the layer"
    for heading in ("layer", "sheet", "value", "down", "margin", "up", "margin"):
        left = heading in ("sheet", "value")
        table.add_column(heading, justify="left" if left else "right", no_wrap=heading != "sheet")
    for effect in found.effects:
        table.add_row(
            str(effect.layer),
            str(effect.sheet),
            effect.value,
            f"{100 * effect.down:+.3g} %",
            f"{effect.change_down_db:+.2f} dB",
            f"{100 * effect.up:+.3g} %",
            f"{effect.change_up_db:+.2f} dB",
        )
    yield table


def show_sensitivity(console: Console, problem: Problem, stacks: Sequence[Stack], plot: Path | None) -> None:
    """Print which layer matters in each stack; with a plot of the stacks, also draw it into a figure beside that."""
    from stackopt.sensitivity import sensitivity

    for number, stack in enumerate(stacks, start=1):
        found = sensitivity(problem, stack)
        console.print(f"Which layer matters in stack {number}: {format_stack(stack)}", style="bold", soft_wrap=True)
        for table in sensitivity_tables(found):
            console.print(table)
        for note in sensitivity_notes(found):
            console.print(textwrap.fill(note, console.width), soft_wrap=True)
        if plot is not None:
            from stackopt.outputs.sensitivity_plots import sensitivity_path, write_sensitivity_plot

            path = sensitivity_path(plot, number, len(stacks))
            write_sensitivity_plot(problem, found, path)
            console.print(f"Plot: {path}", soft_wrap=True)
        console.print()


def sensitivity_notes(found: Sensitivity) -> Iterator[str]:
    """Yield what the tables need to be understood."""
    yield (
        "Margin: change of the smallest margin. Layers count from the source side; one value of one layer changes at a "
        "time, and bond films stay as they are."
    )
    if found.without_tolerance:
        yield f"No tolerance that has an effect is given for: {', '.join(found.without_tolerance)}."
