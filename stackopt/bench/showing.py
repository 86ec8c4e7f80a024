"""What the sweeps show and what they cannot: singular directions of the Jacobian, put into words.

A direction of the scaled Jacobian with a small singular value s is a change of the values that costs nothing: along it
the sweeps know the logarithm of the values no better than 1/s. A factor on all thicknesses, which a fit cannot
have beside the material's own values, is studied as one more variable.
"""

from __future__ import annotations

import math
from collections.abc import Sequence
from dataclasses import dataclass, replace

import numpy as np
from numpy.typing import NDArray

from stackopt.bench.intervals import Estimate, is_vague
from stackopt.bench.solve import Solution, half_width
from stackopt.bench.words import interval_words, range_words, value_words
from stackopt.units import format_thickness

Real = NDArray[np.float64]

UNKNOWN = 0.2
"""Standard deviation of a logarithm along a direction from which the sweeps are said not to show it."""
PART = 0.25
"""Share of a direction from which a value takes part in it."""
WIDE = 0.5
"""Share of an interval's variance from which its cause is named."""
LOOSE = 3.0
"""Factor on a deviation from which gaps and a value are said to trade."""
LOOSEST = 1e-4
"""Precision that stands for none."""
NAMES = {
    "conductivity": "conductivity",
    "initial": "permeability",
    "relaxation": "relaxation frequency",
    "broadening": "broadening",
    "high_share": "high-frequency permeability",
    "resonance": "resonance frequency",
    "damping": "damping frequency",
    "thickness": "thickness",
}


@dataclass(frozen=True)
class Combination:
    """A product that the sweeps do show, with its 95 % interval."""

    name: str
    unit: str
    value: float
    low: float
    high: float


@dataclass(frozen=True)
class Showing:
    """Sentences on what the sweeps show, and the combinations that they name.

    ``singular_values`` are those of the Jacobian over the material's values and a common factor on all thicknesses.
    """

    sentences: tuple[str, ...]
    combinations: tuple[Combination, ...]
    singular_values: tuple[float, ...]


def study(solution: Solution, found: tuple[Estimate, ...], rivals: Sequence[Real] = ()) -> Showing:
    """Study a solution.

    Parameters
    ----------
    solution : Solution
    found : tuple of Estimate
        Its fitted values, in the order of the hypothesis.
    rivals : sequence of ndarray
        Variables of other minima that fit as well.
    """
    sentences = [_rival_words(solution, rival) for rival in rivals[:1] if all(item.determined for item in found)]
    sentences += [_vague_words(estimate) for estimate in found if not estimate.determined]
    jacobian = _with_common_thickness(solution)
    _, singular, directions = np.linalg.svd(jacobian / solution.noise_db, full_matrices=False)
    names = [quantity.name for quantity in solution.residuals.hypothesis.quantities] + ["thickness"]
    combinations: list[Combination] = []
    for value, direction in zip(singular, directions, strict=True):
        parts = [name for name, share in zip(names, direction, strict=True) if abs(share) > PART]
        if value * UNKNOWN > 1.0 or len(parts) < 2:
            continue
        if "thickness" in parts:
            combinations += [_product(solution, name) for name in parts if name in ("conductivity", "initial")]
        else:
            sentences.append(_trade_words(dict(zip(names, direction, strict=True)), parts))
    sentences += [_product_words(solution, combination) for combination in combinations]
    sentences += _gap_words(solution)
    return Showing(tuple(dict.fromkeys(sentences)), tuple(combinations), tuple(float(value) for value in singular))


def _with_common_thickness(solution: Solution) -> Real:
    """Jacobian over the material's values and a common factor on all thicknesses, dB, nuisances held."""
    residuals = solution.residuals
    free = replace(residuals, common_thickness=True)
    jacobian = free.jacobian_db(np.append(solution.variables, 0.0))
    return np.asarray(np.hstack([jacobian[:, : residuals.free], jacobian[:, -1:]]))


def _product(solution: Solution, name: str) -> Combination:
    """Value and interval of conductivity x thickness, or (permeability - 1) x thickness, of one sheet."""
    residuals = solution.residuals
    thickness = residuals.points[0].entry.thickness_m
    along = np.zeros(residuals.size)
    along[[quantity.name for quantity in residuals.hypothesis.quantities].index(name)] = 1.0
    for index, nuisance in enumerate(residuals.nuisances, start=residuals.free):
        if nuisance.kind == "thickness" and nuisance.thickness_m == thickness:
            along[index] = nuisance.size
    middle = float(along @ solution.variables) + math.log(thickness)
    width = half_width(solution.freedom) * math.sqrt(float(along @ solution.covariance @ along))
    words, unit = {
        "conductivity": ("conductivity x thickness", "S"),
        "initial": ("(permeability - 1) x thickness", "m"),
    }[name]
    return Combination(words, unit, *(math.exp(middle + shift) for shift in (0.0, -width, width)))


def _product_words(solution: Solution, combination: Combination) -> str:
    sheet = format_thickness(solution.residuals.points[0].entry.thickness_m)
    value = interval_words(combination.value, combination.low, combination.high, combination.unit)
    what = "conductivity" if combination.unit == "S" else "permeability"
    more = ""
    if combination.unit == "S":
        more = f" (a sheet resistance of {value_words(1.0 / combination.value, 'ohm')})"
    return (
        f"These sweeps show {combination.name} only: {value} for one sheet of {sheet}{more}. "
        f"The {what} by itself is as sure as the stated thickness."
    )


def _rival_words(solution: Solution, rival: Real) -> str:
    """Describe another minimum, which happens where only a product and a mismatch of impedances show."""
    hypothesis = solution.residuals.hypothesis
    values = [
        f"{NAMES[quantity.name]} {value_words(quantity.value(float(x)), quantity.unit)}"
        for quantity, x in zip(hypothesis.quantities, rival, strict=False)
    ]
    return f"Another material fits nearly as well: {', '.join(values)}. State one of its values under [known]."


def _vague_words(estimate: Estimate) -> str:
    name = NAMES.get(estimate.name, estimate.name.replace("_", " "))
    return f"These sweeps do not determine the {name}: {range_words(estimate.low, estimate.high, estimate.unit)}."


def _trade_words(direction: dict[str, float], parts: list[str]) -> str:
    """Say what can be changed together; the first value rises by a tenth."""
    first = parts[0]
    factors = [(NAMES[name], math.log(1.1) * direction[name] / direction[first]) for name in parts]
    changes = [f"the {name} {'up' if size > 0.0 else 'down'} by {_percent(size)}" for name, size in factors]
    return (
        f"These sweeps cannot tell {' from '.join(NAMES[name] for name in parts)}: "
        f"{' with '.join(changes)} changes almost nothing. State one of them under [known]."
    )


def _percent(logarithm: float) -> str:
    return f"{100.0 * abs(math.expm1(logarithm)):.3g} %"


def _gap_words(solution: Solution) -> list[str]:
    """Say where the gaps, rather than the noise, make an interval what it is."""
    residuals = solution.residuals
    kinds = [nuisance.kind for nuisance in residuals.nuisances]
    if "gaps" not in kinds:
        return []
    at = residuals.free + kinds.index("gaps")
    scaled = solution.jacobian / solution.noise_db
    prior = np.diag([LOOSEST] * residuals.free + [1.0] * len(kinds))
    known = scaled.T @ scaled + prior
    loose = known.copy()
    loose[at, at] -= 1.0 - LOOSEST
    kept = [index for index in range(len(known)) if index != at]
    sentences = []
    for index, quantity in enumerate(residuals.hypothesis.quantities):
        if is_vague(solution, index) or quantity.name == "high_share":
            continue
        with_prior, without = (float(np.linalg.inv(matrix)[index, index]) for matrix in (known, loose))
        held = float(np.linalg.inv(known[np.ix_(kept, kept)])[index, index])
        share = 1.0 - held / with_prior
        if share < WIDE:
            continue
        sentence = f"The gaps account for {100.0 * share:.0f} % of the variance of the {NAMES[quantity.name]}"
        if without > LOOSE**2 * with_prior:
            sentence += ", and only their stated uncertainty keeps the two apart"
        sentences.append(f"{sentence}: measure the gaps better, or calibrate them with a known sheet.")
    return sentences
