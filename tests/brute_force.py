"""Every stack of a small problem by the readable equations: what the fast code is held to, neither fast nor clever.

Rules and sums are written again from the problem's own words, without the tables of `stackopt.compiled`; only the
spectral lines are shared, so that fields and fronts can agree exactly.
"""

from __future__ import annotations

import itertools
from collections.abc import Iterator, Sequence
from fractions import Fraction
from functools import cache

import numpy as np
from numpy.typing import NDArray

from stackopt.model import media, with_bonds
from stackopt.physics import line
from stackopt.physics.fields import SpectralLines
from stackopt.physics.media import air, line_constants
from stackopt.problem import Material, Problem, Sheet, Stack

Real = NDArray[np.float64]
Vector = tuple[int, ...]

SLACK_DB = 1e-9
"""The search's own: a margin this little below zero is met."""


def sheets_of(problem: Problem) -> Stack:
    """Every gauge of every material in use."""
    return tuple(Sheet(name, gauge) for name in problem.use for gauge in problem.materials[name].gauges_m)


def every_stack(problem: Problem) -> Iterator[Stack]:
    """All stacks of one sheet up to the largest number, rules aside."""
    for count in range(1, problem.rules.max_sheets + 1):
        yield from itertools.product(sheets_of(problem), repeat=count)


def totals(problem: Problem, stack: Stack) -> tuple[int, int, int]:
    """Mass in ng/m^2, cost in millionths per m^2, thickness in pm, each layer rounded as it is bought."""
    layers = [_layer_totals(problem.materials[layer.material], layer) for layer in with_bonds(problem, stack)]
    mass, cost, thickness = (sum(column) for column in zip(*layers, strict=True))
    return mass, cost + len(stack) * round(problem.rules.cost_per_sheet * 1e6), thickness


@cache
def _layer_totals(material: Material, layer: Sheet) -> tuple[int, int, int]:
    mass = Fraction(material.density_kg_per_m3) * Fraction(layer.thickness_m)
    price = dict(material.price_per_m2).get(layer.thickness_m)
    if price is None:
        price = 0 if material.price_per_kg is None else Fraction(material.price_per_kg) * mass
    return round(mass * 10**12), round(Fraction(price) * 10**6), round(Fraction(layer.thickness_m) * 10**12)


def is_allowed(problem: Problem, stack: Stack) -> bool:
    """Whether the stack keeps every rule of the problem."""
    rules = problem.rules
    limits = (rules.max_mass_kg_per_m2, 1e12), (rules.max_cost_per_m2, 1e6), (rules.max_thickness_m, 1e12)
    for total, (limit, unit) in zip(totals(problem, stack), limits, strict=True):
        if limit is not None and total > round(limit * unit):
            return False
    if rules.first is not None and stack[0].material not in rules.first:
        return False
    if rules.last is not None and stack[-1].material not in rules.last:
        return False
    return all(_may_touch(problem, one, other) for one, other in _touching(problem, stack))


def _touching(problem: Problem, stack: Stack) -> Iterator[tuple[str, str]]:
    """Pairs of materials that lie on one another; an insulating bond keeps the sheets apart, not the fixed layers."""
    rules = problem.rules
    names = [sheet.material for sheet in stack]
    if rules.bond is None or problem.materials[rules.bond.material].conductivity_s_per_m >= 1.0:
        yield from itertools.pairwise(names)
    if rules.source_side:
        yield rules.source_side[-1].material, names[0]
    if rules.victim_side:
        yield names[-1], rules.victim_side[0].material


def _may_touch(problem: Problem, one: str, other: str) -> bool:
    gap = problem.rules.max_anodic_gap_v
    indices = problem.materials[one].anodic_index_v, problem.materials[other].anodic_index_v
    return gap is None or None in indices or abs(indices[0] - indices[1]) <= gap + 1e-9


def vector_of(problem: Problem, stack: Stack) -> Vector:
    """Objectives of a stack in the problem's order, in integer units."""
    mass, cost, thickness = totals(problem, stack)
    named = {"mass": mass, "cost": cost, "thickness": thickness, "sheets": len(stack)}
    return tuple(named[name] for name in problem.search.objectives)


def attenuation_db(problem: Problem, spectra: Sequence[SpectralLines], stacks: Sequence[Stack]) -> Real:
    """Attenuation by the readable cascade on the given lines, dB, shape (stack, frequency of every requirement)."""
    result = np.empty((len(stacks), sum(len(lines.frequency_hz) for lines in spectra)))
    by_count: dict[int, list[int]] = {}
    for number, stack in enumerate(stacks):
        by_count.setdefault(len(stack), []).append(number)
    for numbers in by_count.values():
        for chosen in _parts(numbers, 256):
            levels = [_one_field_db(problem, lines, [stacks[n] for n in chosen]) for lines in spectra]
            result[chosen] = np.concatenate(levels, axis=1)
    return result


def _parts(numbers: list[int], size: int) -> Iterator[list[int]]:
    for start in range(0, len(numbers), size):
        yield numbers[start : start + size]


def _one_field_db(problem: Problem, lines: SpectralLines, stacks: Sequence[Stack]) -> Real:
    """Attenuation of stacks of equally many sheets in one field, shape (stack, frequency)."""

    def fixed(side: Stack) -> list[line.Chain]:
        layers = media(problem, side, lines.frequency_hz)
        return [line.medium_chain(medium, d, lines.k, lines.frequency_hz, lines.polarisation) for medium, d in layers]

    sheets = list(dict.fromkeys(sheet for stack in stacks for sheet in stack))
    chains = fixed(tuple(sheets))
    tables = [np.stack([getattr(chain, entry) for chain in chains]) for entry in ("a", "b", "c", "d", "log_scale")]
    codes = np.array([[sheets.index(sheet) for sheet in stack] for stack in stacks])
    layers = []
    for position in range(codes.shape[1]):
        if position and problem.rules.bond is not None:
            layers += fixed((problem.rules.bond,))
        layers.append(line.Chain(*(table[codes[:, position]] for table in tables)))
    thickness = np.array([sum(layer.thickness_m for layer in with_bonds(problem, stack)) for stack in stacks])
    constants = line_constants(air(lines.frequency_hz), lines.k, lines.frequency_hz, lines.polarisation)
    gap = line.layer(*constants, thickness[:, None, None])
    source, victim = fixed(problem.rules.source_side), fixed(problem.rules.victim_side)
    shape = (len(stacks), *lines.k.shape)
    level = []
    for between in ([gap], layers):
        chain = line.cascade([*source, *between, *victim], shape)
        field, scale = line.weighted_sum(lines.weight, *line.transmission(chain, lines.terminal))
        level.append(line.DB_PER_NEPER * (np.log(np.abs(field)) - scale))
    return np.asarray(level[0] - level[1])


def required_db(problem: Problem, spectra: Sequence[SpectralLines]) -> Real:
    """Masks with their margins at the frequencies of the lines, one requirement after the other."""
    parts = []
    for requirement, lines in zip(problem.requirements, spectra, strict=True):
        parts.append(requirement.mask.required_db(lines.frequency_hz))
    return np.concatenate(parts)


def feasible_stacks(problem: Problem, spectra: Sequence[SpectralLines]) -> dict[Stack, Vector]:
    """Every stack that keeps the rules and meets the masks, with its objectives."""
    allowed = [stack for stack in every_stack(problem) if is_allowed(problem, stack)]
    if not allowed:
        return {}
    margin = np.min(attenuation_db(problem, spectra, allowed) - required_db(problem, spectra), axis=1)
    return {
        stack: vector_of(problem, stack) for stack, least in zip(allowed, margin, strict=True) if least >= -SLACK_DB
    }


def front_of(vectors: Sequence[Vector]) -> list[Vector]:
    """Distinct vectors that no other vector dominates, in rising order."""
    distinct = sorted(set(vectors))
    front = []
    for vector in distinct:
        if not any(other != vector and all(a <= b for a, b in zip(other, vector, strict=True)) for other in distinct):
            front.append(vector)
    return front
