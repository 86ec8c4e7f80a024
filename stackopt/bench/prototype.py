"""A prototype as its prediction sees it, as given or with one thing changed: complex field ratios, and their band.

The band is that of the materials' tolerances (see `stackopt.deviation`): corners, all of them where they are few.
"""

from __future__ import annotations

import itertools
import math
from collections.abc import Mapping, Sequence
from dataclasses import dataclass, replace

import numpy as np
from numpy.typing import NDArray

from stackopt.deviation import Deviation, present, vary, varying
from stackopt.model import media, spectral_lines, with_bonds
from stackopt.physics import fields
from stackopt.physics.line import DB_PER_NEPER
from stackopt.physics.media import air
from stackopt.problem import CoaxialDipoles, CoaxialLoops, Field, Problem, Sheet, Stack

Real = NDArray[np.float64]
Complex = NDArray[np.complex128]

MOST_CORNERS = 256
RANDOM_CORNERS = 64
RULES = (fields.HankelRule(48, -2.0, 3.2), fields.HankelRule(96, -2.2, 3.6))
RULE_ERROR_DB = 0.02
"""A shorter quadrature serves bands and causes when it predicts the stack as well as this."""


@dataclass(frozen=True)
class Prototype:
    """A stack in the field of one requirement.

    Parameters
    ----------
    problem : Problem
    stack : Stack
    field : Field
    frequency_hz : ndarray, shape (frequency,)
    rule : HankelRule
        Quadrature, for loops and dipoles.
    """

    problem: Problem
    stack: Stack
    field: Field
    frequency_hz: Real
    rule: fields.HankelRule = fields.REFERENCE_RULE

    def ratio(self) -> Complex:
        """Field with the stack over the field with air in its place, complex, shape (frequency,)."""
        layers = media(self.problem, with_bonds(self.problem, self.stack), self.frequency_hz)
        rules = self.problem.rules
        source, victim = (
            media(self.problem, side, self.frequency_hz) for side in (rules.source_side, rules.victim_side)
        )
        lines = spectral_lines(self.field, self.frequency_hz, self.rule)
        thickness = sum(layer[1] for layer in layers)
        gap = [(air(self.frequency_hz), thickness)] if thickness > 0.0 else []
        open_field, open_scale = fields.transmitted(lines, [*source, *gap, *victim])
        shielded, scale = fields.transmitted(lines, [*source, *layers, *victim])
        return np.asarray(shielded / open_field * np.exp(open_scale - scale))

    def attenuation_db(self) -> Real:
        """Attenuation, dB, shape (frequency,)."""
        return in_db(self.ratio())

    def quick(self) -> Prototype:
        """Return the same with the shortest quadrature that predicts it well enough."""
        if not isinstance(self.field, CoaxialLoops | CoaxialDipoles):
            return self
        exact = replace(self, rule=fields.REFERENCE_RULE).attenuation_db()
        for rule in RULES:
            short = replace(self, rule=rule)
            if np.max(np.abs(short.attenuation_db() - exact)) <= RULE_ERROR_DB:
                return short
        return replace(self, rule=fields.REFERENCE_RULE)

    def deviating(self, deviations: Mapping[str, Deviation]) -> Prototype:
        """Return the same of materials that deviate."""
        materials = dict(self.problem.materials)
        for name, deviation in deviations.items():
            materials[name] = vary(materials[name], deviation, name)
        rules = self.problem.rules
        changed = replace(
            rules,
            bond=None if rules.bond is None else _scaled(rules.bond, deviations),
            source_side=tuple(_scaled(sheet, deviations) for sheet in rules.source_side),
            victim_side=tuple(_scaled(sheet, deviations) for sheet in rules.victim_side),
        )
        stack = tuple(_scaled(sheet, deviations) for sheet in self.stack)
        return replace(self, problem=replace(self.problem, materials=materials, rules=changed), stack=stack)


def in_db(ratio: Complex) -> Real:
    """Attenuation of a field ratio, dB; a field too small for a number counts as that of 6000 dB."""
    return np.asarray(-DB_PER_NEPER * np.log(np.maximum(np.abs(ratio), 1e-300)))


def _scaled(sheet: Sheet, deviations: Mapping[str, Deviation]) -> Sheet:
    factor = deviations[sheet.material].thickness if sheet.material in deviations else 1.0
    return Sheet(sheet.material, sheet.thickness_m * factor)


def band(prototype: Prototype, seed: int = 0) -> tuple[Real, Real, str]:
    """Lowest and highest attenuation that the tolerances of the materials allow.

    Parameters
    ----------
    prototype : Prototype
    seed : int
        Of the corners drawn where there are too many.

    Returns
    -------
    low_db, high_db : ndarray, shape (frequency,)
    method : str
        Which cases were computed, in words.
    """
    choices = varying(prototype.problem, present(prototype.problem, prototype.stack))
    cases, method = _cases(choices, np.random.default_rng(seed))
    nominal = prototype.attenuation_db()
    values = np.array([nominal, *(prototype.deviating(case).attenuation_db() for case in cases)])
    return values.min(axis=0), values.max(axis=0), method


def _cases(
    choices: Mapping[str, Sequence[Deviation]], random: np.random.Generator
) -> tuple[list[dict[str, Deviation]], str]:
    if not choices:
        return [], "none: the material set gives no tolerances"
    count = math.prod(len(corners) for corners in choices.values())
    if count <= MOST_CORNERS:
        cases = [dict(zip(choices, corner, strict=True)) for corner in itertools.product(*choices.values())]
        return cases, f"all {count} corners of the materials' tolerances"
    alone = [{name: corner} for name, corners in choices.items() for corner in corners]
    ends = [{name: corners[end] for name, corners in choices.items()} for end in (0, -1)]
    drawn = [
        {name: corners[int(random.integers(len(corners)))] for name, corners in choices.items()}
        for _ in range(RANDOM_CORNERS)
    ]
    method = f"each material's corners alone, all low, all high, and {RANDOM_CORNERS} of the {count} corners at random"
    return [*alone, *ends, *drawn], method
