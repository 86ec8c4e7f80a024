"""The bench in words and tables for the terminal, and its CSV."""

from __future__ import annotations

import os
from collections.abc import Sequence
from pathlib import Path

import numpy as np
import pandas as pd
from rich.console import Console
from rich.table import Table

from stackopt.bench.calibrate import Calibration
from stackopt.bench.compare import MEETS, MISSES, OUTSIDE, UNTOLD, Comparison
from stackopt.bench.fit import Fit, law_rows
from stackopt.bench.intervals import Estimate
from stackopt.bench.words import count_words, range_words, value_words
from stackopt.outputs.cautions import HEAT, METAL_S_PER_M
from stackopt.outputs.files import write_whole
from stackopt.outputs.report import section_text, show_text
from stackopt.problem import Problem, format_stack
from stackopt.units import format_attenuation, format_frequency

SHOWN_CAUSES = 5
WEAK = 0.5
"""Share of the difference below which even the best cause explains too little by itself."""


def show_fit(console: Console, fit: Fit, name: str) -> None:
    """Print what a fit found and what it could not find."""
    console.print(f"Fit of {name}", style="bold", soft_wrap=True)
    solution = fit.solution
    low = min(points.frequency_hz[0] for points in solution.residuals.points)
    high = max(points.frequency_hz[-1] for points in solution.residuals.points)
    known = solution.residuals.hypothesis
    lines = [
        (
            "data",
            f"{count_words(len(solution.residual_db), 'point')} of {count_words(len(fit.setup.sweeps), 'sweep')}, "
            f"{format_frequency(low)} to {format_frequency(high)}",
        ),
        ("law", f"{known.name}{_law_reason(fit)}"),
        ("noise", f"{solution.noise_db:.2g} dB (standard deviation of the residuals)"),
    ]
    console.print(section_text(lines, console.width), soft_wrap=True)
    console.print()
    console.print(_estimate_table(fit.estimates))
    if len(fit.trials) > 1:
        console.print()
        console.print(_law_table(fit))
    if fit.showing.sentences:
        console.print("\nWhat the sweeps show", style="bold")
        console.print(section_text([("-", text) for text in fit.showing.sentences], console.width), soft_wrap=True)
    _show_remarks(console, fit.remarks)
    _show_heat(console, fit.conductivity_s_per_m)


def _law_reason(fit: Fit) -> str:
    if len(fit.trials) == 1:
        return ""
    return f", of {len(fit.trials)} tried by AICc (least is best; of laws within 2 of it the simplest)"


def _estimate_table(estimates: Sequence[Estimate]) -> Table:
    table = Table(box=None, pad_edge=False, header_style="bold")
    for heading in ("value", "fitted", "95 % from the Jacobian", "95 % by bootstrap"):
        table.add_column(heading)
    for item in estimates:
        name = item.name.replace("_", " ")
        if not item.determined:
            table.add_row(name, "not determined", range_words(item.low, item.high, item.unit), "")
            continue
        ends = f"{value_words(item.low, item.unit)} to {value_words(item.high, item.unit)}"
        pair = item.bootstrap
        drawn = "" if pair is None else " to ".join(value_words(end, item.unit) for end in pair)
        table.add_row(name, value_words(item.value, item.unit), ends, drawn)
    return table


def _law_table(fit: Fit) -> Table:
    table = Table(box=None, pad_edge=False, header_style="bold")
    table.add_column("law tried")
    for heading in ("values", "rms residual, dB", "AICc above least"):
        table.add_column(heading, justify="right")
    for law, values, rms, above, chosen in law_rows(fit):
        table.add_row(f"{law}{' (chosen)' if chosen else ''}", str(values), f"{rms:.3f}", f"{above:.1f}")
    return table


def _show_remarks(console: Console, remarks: Sequence[str]) -> None:
    if remarks:
        console.print("\nRemarks", style="bold")
        console.print(section_text([("-", remark) for remark in remarks], console.width), soft_wrap=True)


def _show_heat(console: Console, conductivity_s_per_m: float) -> None:
    """Print the caution that bears on the bench."""
    if conductivity_s_per_m > METAL_S_PER_M:
        console.print()
        show_text(console, f"Caution: {HEAT}")


def show_calibration(console: Console, calibration: Calibration) -> None:
    """Print the calibrated lengths."""
    console.print(f"Calibration of {calibration.setup.name}", style="bold", soft_wrap=True)
    table = Table(box=None, pad_edge=False, header_style="bold")
    for heading in ("length", "stated", "fitted", "95 %", ""):
        table.add_column(heading)
    for item in calibration.lengths:
        name = "both gaps together" if item.name == "gaps" else item.name
        words = [f"{length * 1e3:.3g} mm" for length in (item.stated, item.value, item.low, item.high)]
        learnt = "" if item.learnt else "hardly narrowed by these sweeps"
        table.add_row(name, words[0], words[1], f"{words[2]} to {words[3]}", learnt)
    console.print(table)
    text = (
        f"Noise {calibration.solution.noise_db:.2g} dB. With the radii held at these values each gap is sure to "
        f"{calibration.gap_uncertainty_m * 1e3:.2g} mm (95 %)."
    )
    console.print()
    show_text(console, text)
    _show_remarks(console, calibration.remarks)
    _show_heat(console, calibration.setup.conductivity_s_per_m or 0.0)


def show_comparison(console: Console, comparison: Comparison, problem: Problem) -> None:
    """Print whether a prototype meets its mask, and how it compares with its prediction."""
    console.print(f"{problem.title}: {comparison.requirement.name}", style="bold", soft_wrap=True)
    noise = "given" if comparison.noise_is_given else "estimated from the scatter of neighbouring points"
    lines = [
        ("stack", format_stack(comparison.stack)),
        ("sweep", comparison.sweep.name),
        ("mask", _mask_words(comparison)),
        ("noise", f"{comparison.noise_db:.2g} dB (standard deviation), {noise}"),
        ("band", comparison.band_method),
        ("prediction", _difference_words(comparison)),
    ]
    console.print(section_text(lines, console.width), soft_wrap=True)
    console.print()
    console.print(_comparison_table(comparison))
    if comparison.differs:
        console.print("\nLikely causes, each by itself", style="bold")
        console.print(section_text(_cause_lines(comparison), console.width), soft_wrap=True)
    _show_remarks(console, comparison.remarks)
    _show_heat(console, max(problem.materials[sheet.material].conductivity_s_per_m for sheet in comparison.stack))


def _mask_words(comparison: Comparison) -> str:
    counts = {word: comparison.verdicts.count(word) for word in (MEETS, MISSES, UNTOLD)}
    judged = sum(counts.values())
    if judged == 0:
        return "not judged: no measured frequency lies within the mask"
    margin = comparison.sweep.attenuation_db - comparison.required_db
    index = int(np.nanargmin(margin))
    where = f"{margin[index]:+.2f} dB at {format_frequency(comparison.sweep.frequency_hz[index])}"
    near = "; less than the noise is worth" if abs(margin[index]) < 2.0 * comparison.noise_db else ""
    if counts[MISSES]:
        return f"missed at {counts[MISSES]} of {judged} measured frequencies; smallest margin {where}{near}"
    if counts[UNTOLD]:
        return f"cannot be told at {counts[UNTOLD]} of {judged} measured frequencies, where the noise floor is too near"
    return f"met at all {judged} measured frequencies; smallest margin {where}{near}"


def _difference_words(comparison: Comparison) -> str:
    kept = ~comparison.sweep.at_floor
    difference = (comparison.sweep.attenuation_db - comparison.predicted_db)[kept]
    beyond = int(np.count_nonzero(comparison.beyond))
    if not len(difference):
        return "every point lies at the noise floor; nothing can be compared"
    mean = f"measured minus predicted is {np.mean(difference):+.2f} dB in the mean"
    if not comparison.differs:
        few = f"; {beyond} of {len(comparison.beyond)} points lie further off, as chance may have it" if beyond else ""
        return f"agrees within tolerances and noise ({mean}){few}"
    where = f"at {beyond} of {len(comparison.beyond)} frequencies"
    return f"differs by more than tolerances and noise explain {where} ({mean})"


def _comparison_table(comparison: Comparison) -> Table:
    table = Table(box=None, pad_edge=False, header_style="bold")
    for heading in ("frequency", "measured", "predicted", "band", "required", "mask", "prediction"):
        table.add_column(heading, justify="left" if heading in ("mask", "prediction") else "right")
    for index in _shown(comparison):
        required = comparison.required_db[index]
        bound = ">= " if comparison.sweep.at_floor[index] else ""
        band = f"{comparison.low_db[index]:.1f} to {min(comparison.high_db[index], 999.9):.1f}"
        table.add_row(
            format_frequency(float(comparison.sweep.frequency_hz[index])),
            bound + format_attenuation(float(comparison.sweep.attenuation_db[index])),
            format_attenuation(float(comparison.predicted_db[index])),
            band,
            "" if np.isnan(required) else f"{required:.1f} dB",
            comparison.verdicts[index],
            "differs" if comparison.beyond[index] else "",
        )
    return table


def _shown(comparison: Comparison) -> list[int]:
    """Return every point where they are few; otherwise a spread of them and all that miss the mask worst."""
    count = len(comparison.verdicts)
    if count <= 24:
        return list(range(count))
    spread = set(np.linspace(0, count - 1, 16).astype(int).tolist())
    margin = comparison.sweep.attenuation_db - comparison.required_db
    worst = [int(index) for index in np.argsort(np.where(np.isnan(margin), np.inf, margin))[:8]]
    return sorted(spread | {index for index in worst if comparison.verdicts[index] != OUTSIDE})


def _cause_lines(comparison: Comparison) -> list[tuple[str, str]]:
    if not comparison.causes:
        return [("-", "none of the causes that are tried brings the prediction nearer to the measurement")]
    lines = []
    for number, cause in enumerate(comparison.causes[:SHOWN_CAUSES], start=1):
        also = "; the sweep cannot tell it from the first" if number > 1 and cause.like_first else ""
        text = f"consistent with {cause.words}: explains {100.0 * cause.explained:.0f} %, leaves {cause.left_db:.2f} dB"
        lines.append((f"{number}.", f"{text} rms{also}"))
    if comparison.causes[0].explained < WEAK:
        lines.append(("-", "none of them explains most of the difference by itself; several may act together"))
    return lines


def write_comparison_csv(comparison: Comparison, path: str | os.PathLike[str]) -> None:
    """Write a comparison at full precision.

    Raises
    ------
    InputError
        When the file cannot be written.
    """
    sweep = comparison.sweep
    frame = pd.DataFrame(
        {
            "requirement": comparison.requirement.name,
            "frequency_hz": sweep.frequency_hz,
            "measured_db": sweep.attenuation_db,
            "predicted_db": comparison.predicted_db,
            "low_db": comparison.low_db,
            "high_db": comparison.high_db,
            "required_db": comparison.required_db,
            "margin_db": sweep.attenuation_db - comparison.required_db,
            "mask": comparison.verdicts,
            "at_floor": sweep.at_floor,
            "beyond_tolerance": comparison.beyond,
        }
    )
    write_whole(Path(path), lambda part: frame.to_csv(part, index=False))
