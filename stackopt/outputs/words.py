"""Numbers and parts of a problem in words, for tables, plots and reports."""

from __future__ import annotations

import math
from collections.abc import Sequence

import numpy as np

from stackopt.choice import knee
from stackopt.front import Front, FrontRow
from stackopt.physics.permeability import ColeCole, Constant, Debye, Lorentz, PermeabilityLaw, Sum, Table
from stackopt.problem import (
    CoaxialDipoles,
    CoaxialLoops,
    ElectricNearField,
    Field,
    MagneticNearField,
    Mask,
    Problem,
    Stack,
)
from stackopt.units import format_frequency, format_thickness

HIGHEST_DB = 120.0
"""Nobody can measure more; see `stackopt.units.format_attenuation`."""

ENDS = {
    "mass": "lightest",
    "cost": "cheapest",
    "thickness": "thinnest",
    "sheets": "fewest sheets",
    "margin": "largest margin",
    "heat": "coolest",
}
"""What the best stack of each objective is called."""
KNEE = "balanced"
"""What the knee of a front is called."""


def length_words(length_m: float) -> str:
    """Write a length in running text.

    Examples
    --------
    >>> length_words(0.02), length_words(35e-6), length_words(0.0), length_words(2.5)
    ('20 mm', '35 um', '0 mm', '2.5 m')
    """
    if length_m == 0.0:
        return "0 mm"
    if length_m >= 1.0:
        return f"{length_m:.4g} m"
    return f"{length_m * 1e3:.4g} mm" if length_m >= 1e-3 else f"{length_m * 1e6:.4g} um"


def field_words(field: Field) -> str:
    """Describe how the shield is exposed."""
    if isinstance(field, CoaxialLoops):
        return (
            f"{field.kind}: source radius {length_words(field.source_radius_m)}, "
            f"{length_words(field.source_gap_m)} before the first face; "
            f"victim radius {length_words(field.victim_radius_m)}, "
            f"{length_words(field.victim_gap_m)} behind the last face"
        )
    if isinstance(field, CoaxialDipoles):
        source, victim = length_words(field.source_gap_m), length_words(field.victim_gap_m)
        return f"{field.kind}: source {source} before the first face, victim {victim} behind the last face"
    if isinstance(field, MagneticNearField | ElectricNearField):
        return f"{field.kind} at {length_words(field.distance_m)}"
    return f"{field.kind}, {field.polarisation}, {math.degrees(field.angle_rad):.4g} deg from the normal"


def mask_words(mask: Mask) -> str:
    """Describe a mask: all its points when they are few, its ends otherwise."""
    points = [
        f"{level:.4g} dB at {format_frequency(frequency)}"
        for frequency, level in zip(mask.frequency_hz, mask.attenuation_db, strict=True)
    ]
    if len(points) > 6:
        text = f"{len(points)} points from {points[0]} to {points[-1]}, at most {max(mask.attenuation_db):.4g} dB"
    else:
        text = ", ".join(points)
    return text + (f"; {mask.margin_db:.4g} dB of margin on top" if mask.margin_db else "")


def tolerance_words(down: float, up: float) -> str:
    """Write a relative tolerance.

    Examples
    --------
    >>> tolerance_words(-0.05, 0.05), tolerance_words(-0.5, 1.0)
    ('±5 %', '-50 % to +100 %')
    """
    return f"±{up * 100:.3g} %" if up == -down else f"{down * 100:+.3g} % to {up * 100:+.3g} %"


def number_words(value: float) -> str:
    """Write a plain number with four digits, in full where it is large.

    Examples
    --------
    >>> number_words(35000.0), number_words(1.02), number_words(83.3)
    ('35,000', '1.02', '83.3')
    """
    return f"{value:,.0f}" if 1e3 <= abs(value) < 1e9 else f"{value:.4g}"


def conductivity_words(conductivity_s_per_m: float) -> str:
    """Write a conductivity.

    Examples
    --------
    >>> conductivity_words(5.8e7), conductivity_words(0.5), conductivity_words(0.0)
    ('58 MS/m', '0.5 S/m', '0 S/m')
    """
    scale, unit = next(
        ((scale, unit) for scale, unit in ((1e6, "MS/m"), (1e3, "kS/m")) if conductivity_s_per_m >= 0.1 * scale),
        (1.0, "S/m"),
    )
    return f"{conductivity_s_per_m / scale:.3g} {unit}"


def law_words(law: PermeabilityLaw) -> str:
    """Describe a permeability law."""
    if isinstance(law, Constant):
        return f"constant {number_words(law.value)}"
    if isinstance(law, Debye):
        relaxation = format_frequency(law.relaxation_hz)
        return f"debye: {number_words(law.initial)}, relaxation {relaxation}{_limit(law.high_frequency)}"
    if isinstance(law, ColeCole):
        return (
            f"cole-cole: {number_words(law.initial)}, relaxation {format_frequency(law.relaxation_hz)}, "
            f"broadening {law.broadening:.3g}{_limit(law.high_frequency)}"
        )
    if isinstance(law, Lorentz):
        return (
            f"lorentz: {number_words(law.initial)}, resonance {format_frequency(law.resonance_hz)}, "
            f"damping {format_frequency(law.damping_hz)}{_limit(law.high_frequency)}"
        )
    if isinstance(law, Table):
        low, high = format_frequency(law.frequency_hz[0]), format_frequency(law.frequency_hz[-1])
        return f"table of {len(law.frequency_hz)} frequencies, {low} to {high}"
    if isinstance(law, Sum):
        return "sum of " + " and ".join(law_words(term) for term in law.terms)
    return type(law).__name__.lower()


def _limit(high_frequency: float) -> str:
    return "" if high_frequency == 1.0 else f", {number_words(high_frequency)} at high frequency"


def margin_words(attenuation_db: float, required_db: float) -> str:
    """Write a margin with its sign; beyond what can be measured only its lower bound.

    Examples
    --------
    >>> margin_words(43.21, 40.0), margin_words(30.0, 40.0), margin_words(300.0, 90.0)
    ('+3.21 dB', '-10.00 dB', '> +30 dB')
    """
    if attenuation_db > HIGHEST_DB >= required_db:
        return f"> {HIGHEST_DB - required_db:+.3g} dB"
    return f"{attenuation_db - required_db:+.2f} dB"


def miss_words(margin_db: float) -> str:
    """Write by how much a negative margin misses.

    Examples
    --------
    >>> miss_words(-3.456), miss_words(-0.001)
    ('3.46 dB', 'less than 0.01 dB')
    """
    return f"{-margin_db:.2f} dB" if margin_db <= -0.005 else "less than 0.01 dB"


def totals_words(row: FrontRow, currency: str) -> str:
    """Write mass, cost and thickness of a stack."""
    cost = "no price" if math.isnan(row.cost_per_m2) else f"{row.cost_per_m2:.2f} {currency}/m^2"
    return f"{row.mass_kg_per_m2:.3f} kg/m^2, {cost}, {row.thickness_m * 1e3:.3f} mm"


def row_margin_words(row: FrontRow, problem: Problem) -> str:
    """Write the smallest margin of a stack; beyond what can be measured only its lower bound."""
    mask = next(requirement.mask for requirement in problem.requirements if requirement.name == row.requirement)
    required = float(mask.required_db(np.array([row.tightest_hz]))[0])
    return margin_words(row.margin_db + required, required)


def where_words(row: FrontRow, problem: Problem) -> str:
    """Say where the smallest margin of a stack stands; the requirement is named where there are several."""
    at = f"at {format_frequency(row.tightest_hz)}"
    return at if len(problem.requirements) == 1 else f"{at} of '{row.requirement}'"


def count_words(count: float) -> str:
    """Write a number of stacks: exactly up to a million, by two digits beyond.

    Examples
    --------
    >>> count_words(137560.0), count_words(8303765625.0)
    ('137,560', '8.3e9')
    """
    if count < 1e6:
        return f"{count:,.0f}"
    exponent = math.floor(math.log10(count))
    digits = f"{count / 10.0**exponent:.1f}"
    return f"1.0e{exponent + 1}" if digits == "10.0" else f"{digits}e{exponent}"


def wrap_stack(stack: Stack, width: int) -> list[str]:
    """Write a stack on lines of at most ``width`` characters, breaking between sheets where that can be done.

    Examples
    --------
    >>> from stackopt.problem import Sheet
    >>> wrap_stack((Sheet("steel", 150e-6), Sheet("copper", 35e-6), Sheet("steel", 0.001)), 28)
    ['steel 150um / copper 35um /', 'steel 1mm']
    """
    lines: list[str] = []
    for number, sheet in enumerate(stack):
        text = f"{sheet.material} {format_thickness(sheet.thickness_m)}" + (" /" if number < len(stack) - 1 else "")
        if lines and len(lines[-1]) + 1 + len(text) <= width:
            lines[-1] += f" {text}"
        else:
            lines.append(text)
    return lines


def ends(rows: Sequence[FrontRow], objectives: Sequence[str]) -> dict[int, str]:
    """Name the best row of each objective.

    Parameters
    ----------
    rows : sequence of FrontRow
    objectives : sequence of str
        Objectives of the problem, in the user's order.

    Returns
    -------
    dict of int to str
        Index of a row to what it is, such as ``{0: "lightest, thinnest", 7: "cheapest"}``.
    """
    if not rows:
        return {}
    names: dict[int, list[str]] = {}
    for objective in objectives:
        sign = -1.0 if objective == "margin" else 1.0
        values = [sign * row.objective(objective) for row in rows]
        names.setdefault(int(np.nanargmin(values)) if not np.all(np.isnan(values)) else 0, []).append(ENDS[objective])
    return {index: ", ".join(words) for index, words in names.items()}


def marked(front: Front) -> dict[int, str]:
    """Name the ends of a front and its knee (`stackopt.choice.knee`), by index."""
    names = ends(front.rows, front.problem.search.objectives)
    middle = knee(front.rows, front.problem.search.objectives)
    if middle is not None:
        names[middle] = ", ".join(filter(None, (names.get(middle), KNEE)))
    return names
