"""Cautions that bear on a problem or on chosen stacks, in short sentences.

Materials are known by their numbers and by the words in their names and notes only, so a caution is rather given once
too often than left out.
"""

from __future__ import annotations

import itertools
import re
from collections.abc import Iterable, Iterator, Sequence

import numpy as np

from stackopt.outputs.words import length_words
from stackopt.problem import (
    CoaxialDipoles,
    CoaxialLoops,
    ElectricNearField,
    MagneticNearField,
    Material,
    Problem,
    Sheet,
    Stack,
)

METAL_S_PER_M = 1e4
"""Materials that conduct better are metals: they heat, can be touched, and have sharp edges."""
PERMEABLE = 10.0
"""Relative permeability from which saturation matters and magnets pull."""
SHARP_M = 0.6e-3
"""Metal up to this thickness is foil or shim."""
WIDEST_GAP_V = 0.15
"""Anodic index difference that touching metals may have outdoors or in humid air (common practice)."""
MAINS_HZ = (16.0, 420.0)
"""Frequencies of supply networks, Hz."""
HARMFUL = re.compile(r"\b(nickel|beryllium|cadmium|lead(?!-free))\b", re.IGNORECASE)
BRITTLE = re.compile(r"\b(ferrites?|sintered|nanocrystalline|amorphous)\b", re.IGNORECASE)

PREDICTION = (
    "A prediction is not a measurement: build one and measure it. Do not decide on human exposure, medical use, "
    "functional safety or pulse hardening with it alone; follow local codes and have licensed people decide."
)
HEAT = (
    "Metal near a powered coil heats up and can burn or ignite: limit the current of the first test and measure the "
    "temperature."
)
MAINS = (
    "A shield near mains or high voltage is a conductor that can be touched: bond it to protective earth, keep "
    "creepage and clearance, and close no foil into a turn round a core."
)
FIELDS = "Strong fields: keep exposure limits, and keep wearers of implants away."
MAGNETS = "Magnets pull steel and other permeable sheets: fix them before a magnet or a large current comes near."
SHARP = "Cut foil and shim are razor sharp: wear gloves and take off burrs."


def cautions(problem: Problem, stacks: Sequence[Stack] | None = None) -> tuple[str, ...]:
    """Choose the cautions that bear.

    Parameters
    ----------
    problem : Problem
    stacks : sequence of Stack, optional
        Stacks to be built; every stack of the problem's sheets when left out.

    Returns
    -------
    tuple of str
        Sentences, the general ones first.
    """
    return tuple(_cautions(problem, stacks))


def _cautions(problem: Problem, stacks: Sequence[Stack] | None) -> Iterator[str]:
    sheets = _sheets(problem, stacks)
    materials = [problem.materials[name] for name in dict.fromkeys(sheet.material for sheet in sheets)]
    metals = [material for material in materials if material.conductivity_s_per_m > METAL_S_PER_M]
    permeable = [material for material in materials if _initial(problem, material) > PERMEABLE]
    fields = [requirement.field for requirement in problem.requirements]
    magnetic = any(isinstance(field, CoaxialLoops | CoaxialDipoles | MagneticNearField) for field in fields)
    yield PREDICTION
    yield _edges(problem)
    if permeable:
        yield _saturation(permeable)
    if metals and magnetic:
        yield HEAT
    if metals and (_near_mains(problem) or any(isinstance(field, ElectricNearField) for field in fields)):
        yield MAINS
    if magnetic:
        yield FIELDS
    if permeable and magnetic:
        yield MAGNETS
    if any(0.0 < sheet.thickness_m <= SHARP_M and problem.materials[sheet.material] in metals for sheet in sheets):
        yield SHARP
    yield from _handling(materials)
    yield from _corrosion(problem, stacks, metals)


def _sheets(problem: Problem, stacks: Sequence[Stack] | None) -> list[Sheet]:
    """Sheets that are cut and handled: those of the stacks, or all in use; bonds and fixed layers are no concern."""
    if stacks is not None:
        return list(dict.fromkeys(sheet for stack in stacks for sheet in stack))
    ranges = [
        Sheet(name, limit) for name in problem.continuous for limit in problem.materials[name].thickness_range_m or ()
    ]
    return [*problem.sheets, *ranges]


def _initial(problem: Problem, material: Material) -> float:
    """Relative permeability at the lowest frequency of any mask, which every table in use must reach."""
    lowest = min(requirement.mask.frequency_hz[0] for requirement in problem.requirements)
    try:
        return float(np.abs(material.permeability(np.array([lowest]))[0]))
    except ValueError:  # a material that is not in use may have a table that does not reach
        return np.inf


def _near_mains(problem: Problem) -> bool:
    low, high = MAINS_HZ
    masks = [requirement.mask.frequency_hz for requirement in problem.requirements]
    return any(frequency[0] <= high and frequency[-1] >= low for frequency in masks)


def _edges(problem: Problem) -> str:
    text = (
        "The model is an infinite flat sheet: a real one leaks round its edges and through seams, so take the result "
        "as the best that can be had"
    )
    gaps = [
        requirement.field.gap_sum_m
        for requirement in problem.requirements
        if isinstance(requirement.field, CoaxialLoops | CoaxialDipoles)
    ]
    if not gaps:
        return f"{text}; let seams overlap and bond them all along."
    low, high = length_words(2.0 * max(gaps)), length_words(3.0 * max(gaps))
    return f"{text}, and let it reach {low} to {high} (two to three times the distance) beyond source and victim."


def _saturation(permeable: Iterable[Material]) -> str:
    text = "Permeability is taken at small fields: keep the peak flux density below half of saturation"
    known = [f"{material.name} {material.saturation_t / 2:.3g} T" for material in permeable if material.saturation_t]
    return f"{text} ({', '.join(known)})." if known else f"{text}."


def _handling(materials: Iterable[Material]) -> Iterator[str]:
    materials = list(materials)
    brittle = [material.name for material in materials if BRITTLE.search(f"{material.name} {material.notes}")]
    if brittle:
        yield f"Brittle sheets throw chips and dust when cut or broken: protect eyes and breath ({', '.join(brittle)})."
    found: dict[str, list[str]] = {}
    for material in materials:
        for word in HARMFUL.findall(f"{material.name} {material.notes}"):
            names = found.setdefault(word.lower(), [])
            if material.name not in names:
                names.append(material.name)
    for word, names in found.items():
        yield f"{word.capitalize()} has handling rules: no dust, no long skin contact ({', '.join(names)})."


def _corrosion(problem: Problem, stacks: Sequence[Stack] | None, metals: Sequence[Material]) -> Iterator[str]:
    bond = problem.rules.bond
    if bond is not None and problem.materials[bond.material].conductivity_s_per_m <= METAL_S_PER_M:
        return
    index = {metal.name: metal.anodic_index_v for metal in metals if metal.anodic_index_v is not None}
    if stacks is None:
        pairs = set(itertools.combinations(index, 2))
        widest_allowed = problem.rules.max_anodic_gap_v
    else:
        touching = (pair for stack in stacks for pair in itertools.pairwise(stack))
        pairs = {(one.material, other.material) for one, other in touching}
        widest_allowed = None
    gaps = sorted((abs(index[one] - index[other]), one, other) for one, other in pairs if {one, other} <= index.keys())
    if widest_allowed is not None:
        gaps = [gap for gap in gaps if gap[0] <= widest_allowed + 1e-9]
    if gaps and gaps[-1][0] > WIDEST_GAP_V + 1e-9:
        gap, one, other = gaps[-1]
        yield (
            f"Dissimilar metals corrode where they touch unsealed: {one} and {other} differ by {gap:.2f} V; seal the "
            "edges or put an insulating film between."
        )
