"""Random problems small enough to try every stack: invented materials, every field kind, every rule."""

from __future__ import annotations

from dataclasses import replace
from typing import Any
from unittest.mock import patch

import brute_force
import numpy as np
from numpy.typing import NDArray

from stackopt.compiled import CompiledProblem, compile_problem
from stackopt.physics.fields import HankelRule
from stackopt.physics.permeability import ColeCole, Constant, Debye, Lorentz, PermeabilityLaw, Sum
from stackopt.problem import (
    CoaxialDipoles,
    CoaxialLoops,
    ElectricNearField,
    Field,
    MagneticNearField,
    Mask,
    Material,
    PlaneWave,
    Problem,
    Requirement,
    SearchSettings,
    Sheet,
    StackRules,
)

Random = np.random.Generator

KINDS = ("plane wave", "magnetic near field", "electric near field", "coaxial loops", "coaxial dipoles")
FROM_0_HZ = ("magnetic near field", "coaxial loops", "coaxial dipoles")
COARSE_RULE = HankelRule(12, -1.6, 3.2)
"""Quadrature of the coaxial fields: the same lines serve both sides of a comparison, so that any rule will do."""


def small_problem(
    seed: int, sheets: int | None = None, depth: int | None = None, **rules: Any
) -> tuple[Problem, CompiledProblem]:
    """A random problem of 3 to 8 sheets, up to 3 in a stack (4 where there are few), with its tables.

    The masks are set so that some stacks pass and some fail; a few problems ask for more than any stack gives.
    ``rules`` replace the random ones.
    """
    random = np.random.default_rng((seed, 1))
    problem = draft_problem(seed, sheets, depth)
    return _with_masks(random, replace(problem, rules=replace(problem.rules, **rules)))


def close_problem(seed: int) -> tuple[Problem, CompiledProblem]:
    """Eight sheets of one metal with prices close to one another, mostly the thinner the dearer: long fronts."""
    random = np.random.default_rng((seed, 2))
    spread = 1 + 9 * (seed % 2)  # of the gauges, from two to twenty per cent
    gauges = (1000 + spread * np.sort(random.choice(21, 8, replace=False))) * 1e-7
    prices = (20000 - np.sort(random.choice(41, 8, replace=False))) / 1000.0
    prices[1::3] += 0.3 * (1 - seed % 2)
    metal = Material(
        "metal",
        float(random.choice([3e6, 2e7])),
        float(random.integers(2000, 9000)),
        Constant(float(random.choice([1.0, 30.0]))),
        gauges_m=tuple(gauges.tolist()),
        price_per_m2=tuple(zip(gauges.tolist(), prices.tolist(), strict=True)),
    )
    objectives = [("mass", "cost"), ("cost", "thickness", "sheets"), ("cost", "mass", "thickness")][seed // 2 % 3]
    problem = Problem(
        title="Invented",
        currency="EUR",
        materials={"metal": metal},
        use=("metal",),
        requirements=(Requirement("field", MagneticNearField(0.05), Mask((1e4, 1e5), (0.0, 0.0), 0.0, 1)),),
        rules=StackRules(3),
        search=SearchSettings(objectives, random_seed=seed, population=12),
    )
    return _with_masks(random, problem)


def draft_problem(seed: int, sheets: int | None = None, depth: int | None = None) -> Problem:
    """The same without the levels of its masks, which are all 0 dB."""
    random = np.random.default_rng((seed, 0))
    count = int(random.choice([3, 4, 5, 6, 7, 8], p=[0.1, 0.1, 0.15, 0.15, 0.2, 0.3])) if sheets is None else sheets
    deepest = int(random.choice([1, 2, 3, 4], p=[0.05, 0.2, 0.55, 0.2]))
    deepest = min(deepest, 3) if count > 5 else deepest
    materials = _materials(random, count)
    use = tuple(name for name in materials if materials[name].gauges_m)
    requirements = tuple(
        Requirement(f"field {number}", field, _flat_mask(random, field))
        for number, field in enumerate(_fields(random, seed))
    )
    problem = Problem(
        title="Invented",
        currency="EUR",
        materials=materials,
        use=use,
        requirements=requirements,
        rules=_rules(random, materials, use, deepest if depth is None else depth),
        search=SearchSettings(_objectives(random), random_seed=seed, population=12),
    )
    return _with_limits(random, problem)


def recompiled(problem: Problem) -> CompiledProblem:
    """Tables with the coarse quadrature, whose choice would take longer than everything else."""
    with patch("stackopt.physics.fields.choose_rule", return_value=(COARSE_RULE, 0.0)):
        return compile_problem(problem)


def _materials(random: Random, wanted: int) -> dict[str, Material]:
    materials = {
        "insulating film": Material("insulating film", 0.0, 1000.0, permittivity=3.0, price_per_kg=9.0),
        "conducting film": Material(
            "conducting film", 2e4, 2000.0, price_per_m2=((3e-5, 1.5),), anodic_index_v=-0.3 * random.random()
        ),
        "wall": Material("wall", 3e5, 1500.0, permeability=Constant(8.0), anodic_index_v=-0.4),
    }
    name = 0
    while wanted > 0:
        gauges = min(wanted, int(random.choice([1, 2, 3], p=[0.6, 0.3, 0.1])))
        thickness = np.sort(random.choice([18, 25, 35, 50, 70, 100, 150, 200], gauges, replace=False)) * 1e-6
        materials[f"metal {name}"] = _metal(random, f"metal {name}", tuple(thickness.tolist()))
        wanted -= gauges
        name += 1
    return materials


def _metal(random: Random, name: str, gauges: tuple[float, ...]) -> Material:
    priced = random.random()
    return Material(
        name,
        conductivity_s_per_m=float(random.choice([1e-4, 1.6e6, 7e6, 2e7, 3.5e7, 5.8e7])),
        density_kg_per_m3=float(round(800 * 25 ** random.random())),
        permeability=_law(random),
        permittivity=float(random.choice([1.0, 12.0])),
        gauges_m=gauges,
        price_per_kg=float(round(2 * 50 ** random.random())) if priced < 0.4 else None,
        price_per_m2=tuple((gauge, float(random.integers(1, 40)) / 2) for gauge in gauges) if priced > 0.2 else (),
        anodic_index_v=None if random.random() < 0.2 else -round(float(random.random()), 2),
    )


def _law(random: Random) -> PermeabilityLaw:
    relaxation = 10.0 ** random.uniform(3, 7)
    laws: tuple[PermeabilityLaw, ...] = (
        Constant(1.0),
        Constant(float(random.integers(2, 100))),
        Debye(float(random.integers(100, 3000)), relaxation),
        ColeCole(float(random.integers(100, 2000)), relaxation, 0.2, 40.0),
        Lorentz(float(random.integers(10, 200)), 10 * relaxation, 8 * relaxation),
        Sum((Debye(40.0, relaxation), Lorentz(60.0, 20 * relaxation, 9 * relaxation))),
    )
    return laws[int(random.choice(6, p=[0.35, 0.15, 0.2, 0.1, 0.1, 0.1]))]


def _fields(random: Random, seed: int) -> list[Field]:
    """One to three fields; the first goes round the kinds with the seed."""
    kinds = [KINDS[seed % len(KINDS)], *random.choice(KINDS, int(random.choice([0, 1, 2], p=[0.5, 0.35, 0.15])))]
    return [_field(random, str(kind)) for kind in kinds]


def _field(random: Random, kind: str) -> Field:
    source, victim, distance = (float(value) for value in random.uniform(0.01, 0.1, 3))
    if kind == "plane wave":
        return PlaneWave(float(random.uniform(0.0, 1.3)), str(random.choice(["TE", "TM"])))
    if kind == "magnetic near field":
        return MagneticNearField(distance)
    if kind == "electric near field":
        return ElectricNearField(distance)
    if kind == "coaxial loops":
        return CoaxialLoops(source, victim, float(random.uniform(0.01, 0.1)), distance)
    return CoaxialDipoles(source, victim)


def _flat_mask(random: Random, field: Field) -> Mask:
    count = int(random.integers(1, 4))
    frequencies = np.sort(10.0 ** random.uniform(1.0, 7.0, count))
    static = field.kind in FROM_0_HZ and random.random() < 0.4
    points = ([0.0] if static else []) + frequencies.tolist()
    density = int(random.choice([1, 2]))
    return Mask(tuple(points), (0.0,) * len(points), float(random.choice([0.0, 2.0])), density)


def _rules(random: Random, materials: dict[str, Material], use: tuple[str, ...], depth: int) -> StackRules:
    def now_and_then(share: float, value: Any, otherwise: Any = None) -> Any:
        return value if random.random() < share else otherwise

    def some() -> tuple[str, ...]:
        return tuple(random.choice(use, int(random.integers(1, len(use) + 1)), replace=False).tolist())

    def side() -> tuple[Sheet, ...]:
        names = random.choice(["wall", "insulating film", *use], int(random.integers(1, 3)))
        return tuple(Sheet(str(name), float(random.choice([5e-5, 1e-3]))) for name in names)

    bonds = (Sheet("insulating film", 25e-6), Sheet("conducting film", 3e-5))
    return StackRules(
        depth,
        bond=now_and_then(0.4, bonds[int(random.integers(2))]),
        source_side=now_and_then(0.15, side(), ()),
        victim_side=now_and_then(0.15, side(), ()),
        first=now_and_then(0.15, some()),
        last=now_and_then(0.15, some()),
        max_anodic_gap_v=now_and_then(0.3, round(float(random.uniform(0.1, 0.7)), 2)),
        cost_per_sheet=now_and_then(0.3, 2.5, 0.0),
    )


def _objectives(random: Random) -> tuple[str, ...]:
    names = random.permutation(["mass", "cost", "thickness", "sheets"])
    return tuple(names[: int(random.choice([1, 2, 3, 4], p=[0.1, 0.2, 0.4, 0.3]))].tolist())


def _with_limits(random: Random, problem: Problem) -> Problem:
    """Limits at the sums of a random stack (so that they are met exactly) or a little off them."""
    stacks = list(brute_force.every_stack(problem))
    limits = {}
    for column, (name, unit) in enumerate(
        (("max_mass_kg_per_m2", 1e12), ("max_cost_per_m2", 1e6), ("max_thickness_m", 1e12))
    ):
        if random.random() < 0.15:
            total = brute_force.totals(problem, stacks[int(random.integers(len(stacks)))])[column]
            limits[name] = total / unit * float(random.choice([1.0, 1.0, 0.7, 1.4]))
    return replace(problem, rules=replace(problem.rules, **limits))


def _with_masks(random: Random, problem: Problem) -> tuple[Problem, CompiledProblem]:
    """Masks shaped like the attenuation of a stack, at a level that a few or many of the stacks meet, or none."""
    compiled = recompiled(problem)
    spectra = compiled.rows.spectra
    allowed = [stack for stack in brute_force.every_stack(problem) if brute_force.is_allowed(problem, stack)]
    if not allowed:
        return problem, compiled
    levels = brute_force.attenuation_db(problem, spectra, allowed)
    pivot = levels[int(random.integers(len(allowed)))]
    # The share of the allowed stacks that pass, one of them just so. Not to the last digit: two right ways to compute a
    # margin may differ by more than the search's slack.
    least = np.sort(np.min(levels - pivot, axis=1))[::-1]
    passing = round(float(random.choice([0.05, 0.2, 0.4, 0.7])) * (len(allowed) - 1))
    levels = pivot + least[passing] - 1e-6 + (100.0 if random.random() < 0.05 else 0.0)
    requirements, start = [], 0
    for requirement, lines in zip(problem.requirements, spectra, strict=True):
        here = levels[start : start + len(lines.frequency_hz)] - requirement.mask.margin_db
        start += len(lines.frequency_hz)
        requirements.append(replace(requirement, mask=_sampled(requirement.mask, lines.frequency_hz, here)))
    problem = replace(problem, requirements=tuple(requirements))
    # Masks of other levels change nothing else in the tables.
    rows = replace(compiled.rows, required_db=brute_force.required_db(problem, spectra))
    return problem, replace(compiled, problem=problem, rows=rows)


def _sampled(mask: Mask, frequency_hz: NDArray[np.float64], level_db: NDArray[np.float64]) -> Mask:
    levels = [float(level_db[int(np.argmin(np.abs(frequency_hz - hz)))]) for hz in mask.frequency_hz]
    return replace(mask, attenuation_db=tuple(levels))
