"""Deviations of materials from their nominal values: what tolerances allow, their corners, and samples of them.

All sheets of one material share its deviation, because they come from one batch; so do bond films and fixed layers. A
thickness and a conductivity are multiplied. A tolerance of permeability is one of the initial permeability: mu - 1 is
multiplied at every frequency so that the initial value changes by the tolerance, but never falls below 1. Permeability
therefore still fades to 1 where it does, and a material of permeability 1 has none to vary.
"""

from __future__ import annotations

import itertools
import math
from collections.abc import Iterable, Mapping, Sequence
from dataclasses import dataclass, replace

import numpy as np

from stackopt.physics.permeability import Scaled, initial_permeability
from stackopt.problem import Material, Problem, Sheet, Stack, Tolerance

VALUES = ("thickness", "conductivity", "permeability")
"""Values of a material that may have a tolerance."""
MOST_CORNERS = 2**18
"""Corners of one stack that are still tried one by one."""


@dataclass(frozen=True)
class Deviation:
    """Factors on the nominal thickness, conductivity and initial permeability of a material."""

    thickness: float = 1.0
    conductivity: float = 1.0
    permeability: float = 1.0


NOMINAL = Deviation()
Deviations = Mapping[str, Sequence[Deviation]]
"""What is looked at of each material that varies."""


def effective_tolerance(material: Material) -> Tolerance:
    """Tolerance of a material without the values whose change has no effect.

    Those are the conductivity of an insulator, a permeability of 1, and the thickness of what is as good as air.
    """
    given = material.tolerance
    none = (0.0, 0.0)
    magnetic = initial_permeability(material.permeability) > 1.0
    conducting = material.conductivity_s_per_m > 0.0
    return Tolerance(
        thickness=given.thickness if magnetic or conducting or material.permittivity != 1.0 else none,
        conductivity=given.conductivity if conducting else none,
        permeability=given.permeability if magnetic else none,
    )


def corners(material: Material) -> tuple[Deviation, ...]:
    """Extreme combinations of a material's tolerances, all low first: 8, or fewer where a value does not vary."""
    tolerance = effective_tolerance(material)
    ends = [sorted({1.0 + down, 1.0 + up}) for down, up in (getattr(tolerance, value) for value in VALUES)]
    return tuple(Deviation(*factors) for factors in itertools.product(*ends))


def varying(problem: Problem, names: Iterable[str]) -> dict[str, tuple[Deviation, ...]]:
    """Corners of those of the named materials that have any tolerance."""
    found = {name: corners(problem.materials[name]) for name in dict.fromkeys(names)}
    return {name: choices for name, choices in found.items() if len(choices) > 1}


def surroundings(problem: Problem, sheets: int = 2) -> tuple[str, ...]:
    """Materials around the sheets of a stack: fixed layers, and the bond of two sheets or more."""
    rules = problem.rules
    bond = (rules.bond,) if rules.bond is not None and sheets > 1 else ()
    return tuple(dict.fromkeys(layer.material for layer in (*bond, *rules.source_side, *rules.victim_side)))


def present(problem: Problem, stack: Stack) -> tuple[str, ...]:
    """Materials of a stack, its bonds and the fixed layers."""
    return tuple(dict.fromkeys([*(sheet.material for sheet in stack), *surroundings(problem, len(stack))]))


def count_corners(problem: Problem, stack: Stack) -> int:
    """Corners of a stack: the product over its materials; 1 without any tolerance."""
    return math.prod(len(choices) for choices in varying(problem, present(problem, stack)).values())


def most_corners(problem: Problem) -> int:
    """Corners of the stack that has most of them among all that the problem allows."""
    around = varying(problem, surroundings(problem, problem.rules.max_sheets))
    others = [len(choices) for name, choices in varying(problem, problem.use).items() if name not in around]
    return math.prod([len(choices) for choices in around.values()] + sorted(others)[-problem.rules.max_sheets :])


def too_many_corners(count: int) -> str:
    """Say that a problem cannot be judged at every corner."""
    return (
        f"a stack may have {count:.2g} corners of its tolerances, and at most {MOST_CORNERS:,} can be tried one by "
        'one; lower max_sheets, use fewer materials, or write assume = "yield"'
    )


def sampled(problem: Problem, samples: int, seed: int) -> dict[str, tuple[Deviation, ...]]:
    """Sample the deviations of every material of a problem: a scrambled Sobol sequence.

    Values are independent and uniform between the ends of their tolerances (I. M. Sobol, 1967; scrambled after
    J. Matousek, 1998). A sample depends on nothing but the problem's materials, the number and the seed, so that all
    stacks meet the same samples.

    Parameters
    ----------
    problem : Problem
    samples : int
        A power of two, which such sequences need to be balanced.
    seed : int
    """
    from scipy.stats import qmc

    first = [*problem.use, *surroundings(problem), *problem.materials]  # what matters gets the best coordinates
    tolerances = {name: effective_tolerance(problem.materials[name]) for name in dict.fromkeys(first)}
    ends = [(name, value, *getattr(given, value)) for name, given in tolerances.items() for value in VALUES]
    ends = [(name, value, down, up) for name, value, down, up in ends if down < up]
    if not ends:
        return {}
    points = qmc.Sobol(len(ends), seed=np.random.default_rng(seed)).random_base2(samples.bit_length() - 1)
    factors: dict[str, dict[str, list[float]]] = {}
    for (name, value, down, up), column in zip(ends, points.T, strict=True):
        factors.setdefault(name, {})[value] = (1.0 + down + (up - down) * column).tolist()
    return {
        name: tuple(Deviation(**dict(zip(columns, row, strict=True))) for row in zip(*columns.values(), strict=True))
        for name, columns in factors.items()
    }


def vary(material: Material, deviation: Deviation, name: str) -> Material:
    """Return a material of another name whose conductivity and permeability deviate."""
    law, initial = material.permeability, initial_permeability(material.permeability)
    if deviation.permeability != 1.0 and initial > 1.0:
        law = Scaled(law, max(deviation.permeability * initial - 1.0, 0.0) / (initial - 1.0))
    conductivity = material.conductivity_s_per_m * deviation.conductivity
    return replace(material, name=name, conductivity_s_per_m=conductivity, permeability=law, tolerance=Tolerance())


def varied_sheet(sheet: Sheet, number: int, deviation: Deviation) -> Sheet:
    """Return a sheet of case ``number`` of its material."""
    return Sheet(case_name(sheet.material, number), sheet.thickness_m * deviation.thickness)


def case_name(name: str, number: int) -> str:
    """Name a case of a material as no material of a set can be named."""
    return f"{name} / {number}"


def varied_problem(problem: Problem, deviations: Deviations, around: Mapping[str, int]) -> Problem:
    """Return a problem that also holds every case of the materials that vary.

    Parameters
    ----------
    problem : Problem
    deviations : mapping of str to sequence of Deviation
        Cases of each material, named by `case_name`.
    around : mapping of str to int
        Which case the bond and the fixed layers are of; nominal where a material is left out.
    """
    materials = dict(problem.materials)
    for name, cases in deviations.items():
        for number, deviation in enumerate(cases):
            varied = case_name(name, number)
            materials[varied] = vary(problem.materials[name], deviation, varied)

    def layer(sheet: Sheet) -> Sheet:
        number = around.get(sheet.material)
        return sheet if number is None else varied_sheet(sheet, number, deviations[sheet.material][number])

    rules = problem.rules
    rules = replace(
        rules,
        bond=None if rules.bond is None else layer(rules.bond),
        source_side=tuple(map(layer, rules.source_side)),
        victim_side=tuple(map(layer, rules.victim_side)),
    )
    return replace(problem, materials=materials, rules=rules)


def deviation_words(deviation: Deviation) -> str:
    """Write what deviates.

    Examples
    --------
    >>> deviation_words(Deviation(0.95, 1.0, 2.0))
    'thickness -5 %, permeability +100 %'
    """
    changes = [(value, 100.0 * (getattr(deviation, value) - 1.0)) for value in VALUES]
    return ", ".join(f"{value} {change:+.3g} %" for value, change in changes if abs(change) > 1e-9) or "nominal"
