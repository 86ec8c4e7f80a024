"""What a problem file was understood to say, for the terminal."""

from __future__ import annotations

import os
import textwrap
from collections.abc import Iterator, Sequence
from pathlib import Path
from typing import TYPE_CHECKING

import numpy as np
from rich.console import Console

from stackopt.compiled import MARGIN_SLACK_DB, CompiledProblem
from stackopt.outputs import drives
from stackopt.outputs.tolerances import assumption_words, scouted_words, tolerance_lines
from stackopt.outputs.words import (
    count_words,
    field_words,
    length_words,
    margin_words,
    mask_words,
    miss_words,
    totals_words,
    where_words,
)
from stackopt.prediction import Prediction
from stackopt.problem import Problem, Sheet, Stack, format_stack
from stackopt.units import format_frequency, format_thickness

if TYPE_CHECKING:
    from stackopt.scout import Scouted

Section = tuple[str, list[tuple[str, str]]]
"""Heading, and its lines as (what, text)."""


def problem_sections(compiled: CompiledProblem) -> list[Section]:
    """Tell what was understood of a problem.

    Parameters
    ----------
    compiled : CompiledProblem
        With the sheets of `sheets_to_look_at`.

    Returns
    -------
    list of (str, list of (str, str))
        Headings with their lines.
    """
    problem = compiled.problem
    sections = [(problem.title, list(_head(problem))), (_sheets_heading(problem), list(_sheets(problem)))]
    for number in range(len(problem.requirements)):
        sections.append((f"Requirement '{problem.requirements[number].name}'", list(_requirement(compiled, number))))
    sections += [("Stack", list(_rules(compiled))), ("Search", list(_search(problem)))]
    if problem.remarks:
        sections.append(("Remarks", [("-", remark) for remark in problem.remarks]))
    return sections


def section_text(lines: Sequence[tuple[str, str]], width: int) -> str:
    """Lay out the lines of a section: what it is on the left, the text wrapped on the right.

    Examples
    --------
    >>> section_text([("mask", "14 dB at 50 Hz"), ("-", "a remark of several words")], 28).splitlines()
    ['  mask  14 dB at 50 Hz', '  -     a remark of several', '        words']
    """
    indent = 4 + max(len(what) for what, _ in lines)
    rows = []
    for what, text in lines:
        wrapped = textwrap.wrap(text, max(width - indent, 20), break_long_words=False, break_on_hyphens=False)
        rows += [f"  {what if number == 0 else '':{indent - 2}}{part}" for number, part in enumerate(wrapped or [""])]
    return "\n".join(rows)


def show_text(console: Console, text: str) -> None:
    """Print a paragraph, wrapped between words to the width of the console."""
    console.print(textwrap.fill(text, console.width, break_long_words=False, break_on_hyphens=False), soft_wrap=True)


def _head(problem: Problem) -> Iterator[tuple[str, str]]:
    if problem.files:
        yield "files", ", ".join(map(short_path, problem.files))
    yield "currency", problem.currency


def short_path(path: str | os.PathLike[str]) -> str:
    """Write a path from the current folder where that is shorter."""
    try:
        relative = os.path.relpath(path)
    except ValueError:  # another drive
        return str(path)
    return min(relative, str(path), key=len) if Path(path).is_absolute() else str(path)


def _sheets_heading(problem: Problem) -> str:
    names = "1 material" if len(problem.use) == 1 else f"{len(problem.use)} materials"
    gauges = f"{len(problem.sheets)} gauge{'s' if len(problem.sheets) != 1 else ''}"
    return f"Sheets: {gauges} of {names}" if problem.sheets else f"Sheets of {names}"


def _sheets(problem: Problem) -> Iterator[tuple[str, str]]:
    for name in problem.use:
        material = problem.materials[name]
        parts = [", ".join(map(format_thickness, material.gauges_m))] if material.gauges_m else []
        if material.thickness_range_m is not None:
            low, high = map(format_thickness, material.thickness_range_m)
            parts.append(f"any thickness from {low} to {high}")
        yield name, "; ".join(parts)


def _requirement(compiled: CompiledProblem, number: int) -> Iterator[tuple[str, str]]:
    requirement = compiled.problem.requirements[number]
    yield "field", field_words(requirement.field)
    yield "mask", mask_words(requirement.mask)
    yield from drives.requirement_lines(requirement)
    frequency = compiled.rows.frequency_hz[compiled.rows.requirement == number]
    yield (
        "grid",
        f"{len(frequency)} frequencies from {format_frequency(frequency[0])} to {format_frequency(frequency[-1])}",
    )
    rule = compiled.rows.quadrature[number]
    if rule.lines == 1:
        yield "quadrature", "one spectral line for each frequency, exact"
    else:
        yield "quadrature", f"{rule.lines} spectral lines for each frequency, error up to {_error(rule.error_db)} dB"


def _error(error_db: float) -> str:
    """Round a bound upwards, so that it stays one."""
    exponent = np.floor(np.log10(max(error_db, 1e-4)))
    unit = 10.0**exponent
    return f"{np.ceil(max(error_db, 1e-4) / unit - 1e-9) * unit:.4g}"


def _rules(compiled: CompiledProblem) -> Iterator[tuple[str, str]]:
    problem = compiled.problem
    rules = problem.rules
    limits = [f"{rules.max_sheets} sheets"]
    if rules.max_thickness_m is not None:
        limits.append(f"{length_words(rules.max_thickness_m)} thick")
    if rules.max_mass_kg_per_m2 is not None:
        limits.append(f"{rules.max_mass_kg_per_m2:.4g} kg/m^2")
    if rules.max_cost_per_m2 is not None:
        limits.append(f"{rules.max_cost_per_m2:.4g} {problem.currency}/m^2")
    yield "at most", ", ".join(limits)
    if rules.bond is not None:
        yield "bond", f"{rules.bond} between neighbouring sheets"
    if rules.source_side:
        yield "source side", f"{format_stack(rules.source_side)}, there with and without the stack"
    if rules.victim_side:
        yield "victim side", f"{format_stack(rules.victim_side)}, there with and without the stack"
    if rules.first is not None:
        yield "source face", f"one of {', '.join(rules.first)}"
    if rules.last is not None:
        yield "victim face", f"one of {', '.join(rules.last)}"
    if rules.max_anodic_gap_v is not None:
        yield "metals", f"touching ones differ by at most {rules.max_anodic_gap_v:g} V"
    if rules.cost_per_sheet:
        yield "handling", f"{rules.cost_per_sheet:g} {problem.currency}/m^2 for each sheet"
    yield "choice", _choice(compiled)


def _choice(compiled: CompiledProblem) -> str:
    """Tell how many stacks there are."""
    problem = compiled.problem
    rules = problem.rules
    parts = []
    if problem.sheets:
        limits = (rules.max_thickness_m, rules.max_mass_kg_per_m2, rules.max_cost_per_m2)
        before = " before the limits are applied" if any(limit is not None for limit in limits) else ""
        parts.append(f"{count_words(count_stacks(compiled))} stacks of the gauges{before}")
    if problem.continuous:
        parts.append(f"any thickness of {', '.join(problem.continuous)} within the range")
    return ", and ".join(parts)


def count_stacks(compiled: CompiledProblem) -> float:
    """Number of stacks of gauges that keep the faces and neighbours; limits on the sums are not looked at."""
    rules, gauges = compiled.rules, len(compiled.problem.sheets)
    first, last = rules.first[:gauges].astype(float), rules.last[:gauges]
    neighbours = rules.neighbours[:gauges, :gauges].astype(float)
    total, ways = 0.0, first
    for _ in range(rules.max_sheets):
        total += float(ways @ last)
        ways = ways @ neighbours
    return total


def sheets_to_look_at(problem: Problem) -> Stack:
    """Gauges, and the thin end, the middle and the thick end of each thickness range: what a quick look is made of."""
    samples = []
    for name in problem.continuous:
        low, high = problem.materials[name].thickness_range_m or (0.0, 0.0)
        middle = min(max(float(f"{(low * high) ** 0.5:.2g}"), low), high)
        samples += [Sheet(name, thickness) for thickness in (low, middle, high)]
    return tuple(dict.fromkeys((*problem.sheets, *samples)))


def _search(problem: Problem) -> Iterator[tuple[str, str]]:
    yield "least", ", ".join(name for name in problem.search.objectives if name != "margin") or "-"
    if "margin" in problem.search.objectives:
        yield "largest", "margin"
    yield "assume", assumption_words(problem)
    yield "random seed", str(problem.search.random_seed)
    yield "population", str(problem.search.population)


def show_sections(console: Console, compiled: CompiledProblem) -> None:
    """Print `problem_sections`."""
    for number, (heading, lines) in enumerate(problem_sections(compiled)):
        console.print(f"{chr(10) if number else ''}{heading}", style="bold", soft_wrap=True)
        console.print(section_text(lines, console.width), soft_wrap=True)


def show_verdicts(console: Console, problem: Problem, predictions: Sequence[Prediction]) -> None:
    """Print for each stack whether it meets the mask, what it weighs, costs and measures, and the rules it breaks."""
    for number, prediction in enumerate(predictions, start=1):
        console.print(f"Stack {number}: {format_stack(prediction.row.stack)}", style="bold", soft_wrap=True)
        lines = [("mask", verdict_words(prediction, problem))]
        lines += tolerance_lines(problem, prediction)
        lines += drives.verdict_lines(prediction)
        lines.append(("totals", totals_words(prediction.row, problem.currency)))
        lines += [("breaks a rule", rule) for rule in prediction.broken]
        console.print(section_text(lines, console.width) + "\n", soft_wrap=True)


def verdict_words(prediction: Prediction, problem: Problem) -> str:
    """Say whether a stack meets the mask, and where it is tightest."""
    row = prediction.row
    where = where_words(row, problem)
    if prediction.meets_mask:
        return f"meets the mask; smallest margin {smallest_margin_words(prediction)} {where}"
    return f"does not meet the mask; misses by {miss_words(row.margin_db)} {where}"


def smallest_margin_words(prediction: Prediction) -> str:
    """Write the smallest margin of a stack."""
    row = prediction.row
    curve = next(curve for curve in prediction.curves if curve.requirement == row.requirement)
    index = int(np.argmin(curve.margin_db))
    return margin_words(float(curve.attenuation_db[index]), float(curve.required_db[index]))


def show_scouted(console: Console, problem: Problem, scouted: Scouted, path: Path) -> None:
    """Print whether a quick look found a stack that meets the mask, and which."""
    console.print("Can the mask be met?", style="bold")
    console.print(section_text(_scouted(problem, scouted, path), console.width), soft_wrap=True)


def _scouted(problem: Problem, scouted: Scouted, path: Path) -> list[tuple[str, str]]:
    if not scouted.stack:
        return [("answer", "no: the limits and rules allow no stack at all; loosen them or use other sheets")]
    where = f"at {format_frequency(scouted.frequency_hz)}"
    if len(problem.requirements) > 1:
        where += f" of '{scouted.requirement}'"
    if scouted.margin_db >= -MARGIN_SLACK_DB:
        answer, margin = "yes, for example by", f"{scouted.margin_db:.2f} dB to spare where it is tightest, {where}"
        lines = [("answer", answer), ("stack", format_stack(scouted.stack)), ("margin", margin)]
        return lines + [("tolerances", text) for text in scouted_words(problem, scouted.stack)]
    return [
        ("answer", f"none was found by a quick look at {scouted.tried:,} stacks; to decide it: stackopt search {path}"),
        ("best", format_stack(scouted.stack)),
        ("margin", f"misses by {miss_words(scouted.margin_db)} {where}"),
    ]
