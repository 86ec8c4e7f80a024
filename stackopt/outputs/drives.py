"""What a drive does, for people and as tables: flux and heat in the layers, and the change of the source."""

from __future__ import annotations

import math
import os
from collections.abc import Iterator, Sequence
from pathlib import Path
from typing import TYPE_CHECKING

from rich.console import Console

from stackopt.errors import Finding, InputError
from stackopt.inside import DriveState, Inside, coil_change
from stackopt.outputs.files import write_whole
from stackopt.prediction import Prediction
from stackopt.problem import CoaxialDipoles, CoaxialLoops, Drive, Problem, Requirement, Stack, format_stack
from stackopt.rayleigh import Level
from stackopt.units import format_frequency

if TYPE_CHECKING:
    import pandas as pd

LAYER_COLUMNS = (
    "requirement",
    "frequency_hz",
    "layer",
    "material",
    "thickness_um",
    "peak_flux_t",
    "flux_fraction",
    "heat_w",
)
"""Columns of layers.csv; ``stack`` comes before them when there are several stacks."""
COIL_COLUMNS = ("requirement", "frequency_hz", "inductance_change_h", "resistance_change_ohm")
"""Columns of coil.csv; ``stack`` comes before them when there are several stacks."""

_PREFIXES = ((1.0, ""), (1e-3, "m"), (1e-6, "u"), (1e-9, "n"), (1e-12, "p"))


def amount(value: float, unit: str, sign: bool = False) -> str:
    """Write a value with three digits and a fitting prefix.

    Examples
    --------
    >>> amount(0.0123, "T"), amount(4.2e-10, "H", sign=True), amount(0.0, "W"), amount(250.0, "W")
    ('12.3 mT', '+420 pH', '0 W', '250 W')
    """
    scale, prefix = next(((s, p) for s, p in _PREFIXES if abs(value) >= 0.9995 * s), (1.0, ""))
    if abs(value) < 0.9995e-12:
        return f"0 {unit}"
    return f"{value / scale:{'+' if sign else ''}.3g} {prefix}{unit}"


def requirement_lines(requirement: Requirement) -> Iterator[tuple[str, str]]:
    """Tell what was understood of a requirement's drive and its limits."""
    drive = requirement.drive
    if drive is None:
        return
    unit = "A m^2" if isinstance(requirement.field, CoaxialDipoles) else "A"
    points = [f"{peak:.4g} {unit} at {format_frequency(frequency)}" for frequency, peak in drive.points]
    kind = "peak" if unit == "A m^2" else "ampere-turns peak"
    yield "drive", f"{', '.join(points)} ({kind}{', acting together' if len(points) > 1 else ''})"
    yield "drive limits", "; ".join(_limits(drive))


def _limits(drive: Drive) -> Iterator[str]:
    yield f"flux density up to {100.0 * drive.saturation_fraction:.4g} % of saturation in every layer"
    if drive.max_heat_w is not None:
        yield f"heat in the stack up to {amount(drive.max_heat_w, 'W')}"
    if drive.max_inductance_change is not None and drive.source_inductance_h is not None:
        yield (
            f"inductance of the source, {amount(drive.source_inductance_h, 'H')} with {drive.source_turns:.4g} turns, "
            f"changed by up to {100.0 * drive.max_inductance_change:.4g} %"
        )


def verdict_lines(prediction: Prediction) -> Iterator[tuple[str, str]]:
    """Tell in a few lines what the drives do inside a stack and to their sources."""
    for state in prediction.inside:
        of = f" under '{state.requirement}'" if len(prediction.inside) > 1 else ""
        yield "flux", _flux_words(state) + of
        yield "heat", _heat_words(state) + of
        yield "source", _source_words(state) + of
    for level in prediction.levels:
        yield "level", _level_words(level)


def _flux_words(state: Inside) -> str:
    limit = f"limit {100.0 * state.limits.saturation_fraction:.4g} %"
    if state.flux_layer is None:
        return "no layer can saturate"
    layer = state.states[0].layers[state.flux_layer].sheet
    flux = sum(one.layers[state.flux_layer].peak_flux_t for one in state.states)
    return f"{100.0 * state.flux_fraction:.3g} % of saturation in {layer}, {amount(flux, 'T')} peak; {limit}"


def _heat_words(state: Inside) -> str:
    layers = range(len(state.states[0].layers))
    heat = [sum(one.layers[n].heat_w for one in state.states) for n in layers]
    area = [sum(one.layers[n].heat_w_per_m2 for one in state.states) for n in layers]
    hottest = max((n for n in layers if state.states[0].layers[n].in_stack), key=heat.__getitem__)
    limit = "" if state.limits.max_heat_w is None else f"; limit {amount(state.limits.max_heat_w, 'W')}"
    return (
        f"{amount(state.heat_w, 'W')} in the stack{limit}; most in {state.states[0].layers[hottest].sheet}: "
        f"{amount(heat[hottest], 'W')}, up to {amount(area[hottest], 'W/m^2')}"
    )


def _source_words(state: Inside) -> str:
    parts = [_change_words(one) for one in state.states]
    limit = state.limits.max_inductance_change
    known = "" if math.isnan(state.inductance_change) else f"inductance {100.0 * state.inductance_change:+.3g} %"
    allowed = "" if limit is None else f", limit {100.0 * limit:.4g} %"
    return "; ".join(filter(None, [known + allowed, "per one turn " + ", ".join(parts)]))


def _change_words(state: DriveState) -> str:
    inductance = amount(state.inductance_change_h, "H", sign=True)
    resistance = amount(state.resistance_change_ohm, "ohm", sign=True)
    return f"{inductance} and {resistance} at {format_frequency(state.frequency_hz)}"


def _level_words(level: Level) -> str:
    if not level.converged:
        return (
            f"permeability at the level of the drive did not settle in {level.steps} steps for '{level.requirement}': "
            "do not rely on its flux, heat and source lines; the field is beyond the weak fields of Rayleigh's law"
        )
    largest = max(range(len(level.layers)), key=level.extra_mu.__getitem__)
    return (
        f"at the permeability that the drive brings about (up to {level.extra_mu[largest]:+.3g}, in "
        f"{level.layers[largest]}) the smallest margin of '{level.requirement}' is {level.margin_db:+.2f} dB"
    )


def layers_frame(predictions: Sequence[Prediction]) -> pd.DataFrame:
    """Return a row for each stack, requirement with a drive, frequency of it, and layer from the source side.

    Layers are those of `stackopt.inside.assembly`, numbered from 1: bonds and fixed layers are among them.
    """
    import pandas as pd

    rows = [
        (
            format_stack(prediction.row.stack),
            inside.requirement,
            state.frequency_hz,
            number,
            layer.sheet.material,
            layer.sheet.thickness_m * 1e6,
            layer.peak_flux_t,
            layer.flux_fraction,
            layer.heat_w,
        )
        for prediction in predictions
        for inside in prediction.inside
        for state in inside.states
        for number, layer in enumerate(state.layers, start=1)
    ]
    frame = pd.DataFrame(rows, columns=["stack", *LAYER_COLUMNS])
    return frame if len(predictions) > 1 else frame.drop(columns="stack")


def coil_frame(problem: Problem, stacks: Sequence[Stack]) -> pd.DataFrame:
    """Return the change of each source by each stack over the frequencies of its mask."""
    import pandas as pd

    sources = [one for one in problem.requirements if isinstance(one.field, CoaxialLoops | CoaxialDipoles)]
    parts = []
    for stack in stacks:
        for requirement in sources:
            change = coil_change(problem, stack, requirement)
            values = (change.frequency_hz, change.inductance_change_h, change.resistance_change_ohm)
            part = pd.DataFrame(dict(zip(COIL_COLUMNS[1:], values, strict=True)))
            part.insert(0, "requirement", requirement.name)
            if len(stacks) > 1:
                part.insert(0, "stack", format_stack(stack))
            parts.append(part)
    return pd.concat(parts, ignore_index=True)


def refuse_without(problem: Problem, layers: object, coil: object) -> None:
    """Refuse the options that a problem has nothing for.

    Raises
    ------
    InputError
        When layers are asked for without a drive, or coils without a source.
    """
    findings = []
    if layers is not None and all(one.drive is None for one in problem.requirements):
        findings.append(
            Finding("", "--layers", 'needs a requirement with a drive, such as drive = [["100 kHz", "12 A"]]')
        )
    if coil is not None and not any(
        isinstance(one.field, CoaxialLoops | CoaxialDipoles) for one in problem.requirements
    ):
        findings.append(Finding("", "--coil", "needs a requirement of coaxial loops or coaxial dipoles"))
    if findings:
        raise InputError(findings)


def write_tables(
    console: Console, problem: Problem, predictions: Sequence[Prediction], layers: Path | None, coil: Path | None
) -> None:
    """Write layers.csv and coil.csv where they are asked for, and say so."""
    if layers is not None:
        _write(layers_frame(predictions), layers)
        console.print(f"Layers: {layers}", soft_wrap=True)
    if coil is not None:
        _write(coil_frame(problem, [prediction.row.stack for prediction in predictions]), coil)
        console.print(f"Coil: {coil}", soft_wrap=True)


def _write(frame: pd.DataFrame, path: str | os.PathLike[str]) -> None:
    write_whole(Path(path), lambda part: frame.to_csv(part, index=False, encoding="utf-8", lineterminator="\n"))
