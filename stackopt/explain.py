"""Why no stack meets a mask, and what would help: quick looks at relaxed problems."""

from __future__ import annotations

from collections.abc import Iterator
from dataclasses import dataclass, replace
from typing import Any

import numpy as np

from stackopt.compiled import MARGIN_SLACK_DB, CompiledProblem, compile_problem
from stackopt.physics.permeability import Debye
from stackopt.problem import Mask, Material, Problem, Sheet, Stack, format_stack
from stackopt.scout import Scouted, scout
from stackopt.units import format_frequency

_GAIN_DB = 0.1
"""A gain smaller than this is no help."""
TRIALS = (
    Material("a good conductor", 5.8e7, 0.0),
    Material("a sheet of high permeability", 1.67e6, 0.0, Debye(30000.0, 30e3)),
    Material("a ferrite sheet", 1e-2, 0.0, Debye(1000.0, 3e6)),
)
"""Invented sheets of each class, without mass and price: what can be had with them shows which class is missing."""
_TRIAL_WORDS = {
    "a good conductor": "as copper, 58 MS/m",
    "a sheet of high permeability": "as an annealed nickel alloy, permeability 30,000 below 30 kHz",
    "a ferrite sheet": "permeability 1,000 below 3 MHz, hardly conducting",
}


@dataclass(frozen=True)
class _Help:
    """One relaxation: what it is, the best stack under it, and whether that meets the mask."""

    words: str
    best: Scouted

    @property
    def meets(self) -> bool:
        return self.best.margin_db >= -MARGIN_SLACK_DB


def explain(compiled: CompiledProblem, scouted: Scouted) -> str:
    """Explain why a quick look found no stack that meets the mask.

    Parameters
    ----------
    compiled : CompiledProblem
    scouted : Scouted
        Result of `stackopt.scout.scout` on it.

    Returns
    -------
    str
        Sentences: what blocks where, how near the best stack comes, and what would help by how much. Everything rests
        on quick looks, so a better stack than the ones named may exist.
    """
    if not scouted.stack:
        return "The rules and limits allow no stack at all: loosen them or use other sheets."
    parts = [_nearest(scouted), *_alone(compiled, scouted)]
    helps = [help_ for help_ in _helps(compiled) if help_.best.stack]
    gain = {id(help_): help_.best.margin_db - scouted.margin_db for help_ in helps}
    enough = [help_ for help_ in helps if help_.meets]
    if enough:
        parts.append("By quick looks, the mask can be met " + "; or ".join(map(_enough_words, enough)) + ".")
    some = sorted((help_ for help_ in helps if not help_.meets), key=lambda help_: -gain[id(help_)])
    some = [help_ for help_ in some if gain[id(help_)] >= _GAIN_DB]
    if some and not enough:
        words = "; ".join(f"{help_.words} ({gain[id(help_)]:.1f} dB)" for help_ in some[:4])
        parts.append(f"These gain something, but none is enough by itself: {words}.")
    if not enough and not some:
        parts.append("Neither more sheets nor looser limits nor another class of material gains 0.1 dB.")
    parts.append(f"With a mask {_miss_words(scouted)} lower, the stack named first meets it.")
    return " ".join(parts)


def _nearest(found: Scouted) -> str:
    where = f"requirement '{found.requirement}' blocks at {format_frequency(found.frequency_hz)}"
    return f"The best stack of a quick look, {format_stack(found.stack)}, misses by {_miss_words(found)}: {where}."


def _miss_words(found: Scouted) -> str:
    """Write by how much a stack misses, rounded up, so that it is enough."""
    return f"{np.ceil(-found.margin_db * 10.0 - 1e-6) / 10.0:.1f} dB"


def _alone(compiled: CompiledProblem, scouted: Scouted) -> Iterator[str]:
    """Tell the best that can be had at the blocking frequency when nothing else counts."""
    problem = compiled.problem
    requirement = next(one for one in problem.requirements if one.name == scouted.requirement)
    required = float(requirement.mask.required_db(np.array([scouted.frequency_hz]))[0])
    single = replace(requirement, mask=Mask((scouted.frequency_hz,), (required,)))
    best = scout(compile_problem(replace(problem, requirements=(single,)), compiled.sheets))
    reached = f"{best.margin_db + required:.1f} dB of {required:.1f} dB"
    if best.margin_db >= -MARGIN_SLACK_DB:
        words = format_stack(best.stack)
        yield f"That frequency alone can be met, by {words}, but not together with the rest of the mask."
    else:
        yield f"Even for that frequency alone the best is {reached}, by {format_stack(best.stack)}."


def _helps(compiled: CompiledProblem) -> Iterator[_Help]:
    problem, sheets = compiled.problem, compiled.sheets
    rules = problem.rules
    for more in (1, 2):
        longer = replace(problem, rules=replace(rules, max_sheets=rules.max_sheets + more))
        help_ = _look(f"with {rules.max_sheets + more} sheets instead of {rules.max_sheets}", longer, sheets)
        if more == 1 or help_.meets:
            yield help_
        if help_.meets:
            break
    for words, change in _loosened(problem):
        yield _look(words, replace(problem, rules=replace(rules, **change)), sheets)
    yield from _other_materials(problem, sheets)


def _loosened(problem: Problem) -> Iterator[tuple[str, dict[str, Any]]]:
    rules = problem.rules
    limits = {
        "max_thickness_m": "without the limit max_thickness",
        "max_mass_kg_per_m2": "without the limit max_mass",
        "max_cost_per_m2": "without the limit max_cost",
        "max_anodic_gap_v": "without max_anodic_gap (a film between the metals does that)",
    }
    given = [name for name in limits if getattr(rules, name) is not None]
    for name in given:
        yield limits[name], {name: None}
    if rules.first is not None or rules.last is not None:
        yield "with any material on both faces", {"first": None, "last": None}


def _other_materials(problem: Problem, sheets: Stack) -> Iterator[_Help]:
    """The set's other materials, and the class of invented sheets that helps most."""
    unused = [name for name, material in problem.materials.items() if material.gauges_m and name not in problem.use]
    unused = [name for name in unused if _reaches(problem, name)]
    if unused:
        added = tuple(Sheet(name, gauge) for name in unused for gauge in problem.materials[name].gauges_m)
        yield _look("with all materials of the set", problem, (*sheets, *added))
    thickest = max(
        sheet.thickness_m for sheet in sheets
    )  # no thicker than the stock: the class is tried, not the gauge
    tried = []
    for trial in TRIALS:
        larger = replace(problem, materials={**problem.materials, trial.name: trial})
        added = tuple(Sheet(trial.name, thickest * share) for share in (1.0, 0.3, 0.1))
        tried.append(_look(f"with {trial.name} ({_TRIAL_WORDS[trial.name]})", larger, (*sheets, *added)))
    yield max(tried, key=lambda help_: help_.best.margin_db)


def _reaches(problem: Problem, name: str) -> bool:
    """Whether a material's values reach over all masks; tables of materials not in use need not."""
    ends = [one.mask.frequency_hz[end] for one in problem.requirements for end in (0, -1)]
    try:
        problem.materials[name].permeability(np.array(ends))
    except ValueError:
        return False
    return True


def _look(words: str, problem: Problem, sheets: Stack) -> _Help:
    return _Help(words, scout(compile_problem(problem, sheets)))


def _enough_words(help_: _Help) -> str:
    stack = help_.best.stack
    thickness = sum(sheet.thickness_m for sheet in stack) * 1e3
    return f"{help_.words}, by {format_stack(stack)} ({thickness:.3g} mm of sheets)"
