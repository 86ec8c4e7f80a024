"""What the parts of a problem must have in common: names, frequencies, prices, limits."""

from __future__ import annotations

import itertools
import math
from collections.abc import Callable, Iterator, Mapping
from dataclasses import dataclass

from stackopt.deviation import MOST_CORNERS, most_corners, too_many_corners, varying
from stackopt.physics.permeability import Table, tables_in
from stackopt.problem import (
    CoaxialDipoles,
    CoaxialLoops,
    ElectricNearField,
    Mask,
    Material,
    PlaneWave,
    Problem,
    Requirement,
    SearchSettings,
    Sheet,
    StackRules,
)
from stackopt.readers.files import Source, join_key
from stackopt.units import SPEED_OF_LIGHT, format_frequency, format_thickness

METAL_S_PER_M = 1e4
"""Materials that conduct better are metals, which corrode in touch with another."""
FAR_FIELD = 3.0
"""Loops further apart than this over the wavenumber are nearly in each other's far field."""
MAX_FREQUENCIES = 5000
"""Of the search grids of all requirements together: the tables hold every sheet at each of them."""
LARGE_LOOP = 5.0
"""Loop radius over distance up to which the quadrature promises its error."""

Mistake = tuple[str, str]


@dataclass
class Draft:
    """The parts of a problem that could be made; requirements come with their key paths.

    ``use_is_named`` and ``objectives_are_named`` tell whether the file writes these lists itself.
    """

    materials: Mapping[str, Material]
    remarks: Mapping[str, tuple[str, ...]]
    use: tuple[str, ...]
    use_is_named: bool
    requirements: list[tuple[str, Requirement]]
    rules: StackRules | None
    search: SearchSettings | None
    objectives_are_named: bool

    def present(self) -> dict[str, str]:
        """Return each known material of any stack with the key that brings it in."""
        found = dict.fromkeys(self.use, "use")
        if self.rules is not None:
            if self.rules.bond is not None:
                found.setdefault(self.rules.bond.material, "stack.bond")
            for side in ("source_side", "victim_side"):
                for sheet in getattr(self.rules, side):
                    found.setdefault(sheet.material, f"stack.{side}")
        return {name: key for name, key in found.items() if name in self.materials}

    def single_sheets(self) -> list[Sheet]:
        """Return every sheet in use, ranges by their thin end."""
        sheets = []
        for name in self.use:
            material = self.materials[name]
            span = material.thickness_range_m
            sheets += [Sheet(name, thickness) for thickness in (*material.gauges_m, *(span[:1] if span else ()))]
        return sheets


def check_draft(draft: Draft, source: Source) -> None:
    """Note every mistake and remark that needs more than one part of the problem to see."""
    for check in (_sheets, _faces, _prices, _anodic, _limits):
        for key, message in check(draft):
            source.add(key, message)
    for key, mistake in _grids(draft):
        source.add(key, mistake)
    for key, requirement in draft.requirements:
        for mistake in _static(requirement):
            source.add(f"{key}.mask", mistake)
        for mistake in _table_mistakes(draft, requirement):
            source.add(f"{key}.mask", mistake)
    remarks = source.reading.remarks
    for name in draft.present():
        remarks.extend(draft.remarks.get(name, ()))
    for _, requirement in draft.requirements:
        remarks.extend(_field_remarks(requirement))
        remarks.extend(_table_remarks(draft, requirement))
    if not source.reading.findings:
        _assumed(draft, source)


def _assumed(draft: Draft, source: Source) -> None:
    """Check that there is something to assume, and no more of it than can be tried; for drafts without mistakes."""
    if draft.rules is None or draft.search is None or draft.search.assume == "nominal":
        return
    problem = Problem("", "", draft.materials, draft.use, (), draft.rules)
    if not varying(problem, draft.present()):
        source.reading.remarks.append(
            f'assume = "{draft.search.assume}" changes nothing: no material of any stack has a tolerance that has an '
            'effect; give the material set some, such as tolerance = {thickness = "8 %"}'
        )
    elif draft.search.assume == "worst" and (most := most_corners(problem)) > MOST_CORNERS:
        source.add("search.assume", too_many_corners(most))


def _sheets(draft: Draft) -> Iterator[Mistake]:
    if not draft.materials:
        return
    for number, name in enumerate(draft.use):
        material = draft.materials[name]
        if draft.use_is_named and not material.gauges_m and material.thickness_range_m is None:
            yield (
                join_key("", ["use", number]),
                f"found {name!r}, which has neither gauges nor thickness_range and so is no sheet; "
                "give it one of the two in the material set or take it out of use",
            )
    if not draft.use_is_named and not draft.use:
        yield "materials", "no material of the set has gauges or a thickness_range; give at least one of them gauges"


def _faces(draft: Draft) -> Iterator[Mistake]:
    if draft.rules is None or not draft.use:
        return
    for face in ("first", "last"):
        for number, name in enumerate(getattr(draft.rules, face) or ()):
            if name in draft.materials and name not in draft.use:
                allowed = ", ".join(draft.use)
                yield (
                    join_key("", ["stack", face, number]),
                    f"found {name!r}, which is not in use; add it to use or write one of: {allowed}",
                )


def _prices(draft: Draft) -> Iterator[Mistake]:
    wish = _cost_wish(draft)
    if wish is None or draft.rules is None:
        return
    for name in draft.use:
        material = draft.materials[name]
        missing = [gauge for gauge in material.gauges_m if material.price(gauge) is None]
        if missing or (material.thickness_range_m and material.price_per_kg is None):
            at = f" for {', '.join(map(format_thickness, missing))}" if material.price_per_m2 else ""
            yield wish[0], f"{wish[1]}, but {name!r} has no price{at}; {_PRICE_ADVICE}"
    bond = draft.rules.bond
    film = None if bond is None else draft.materials.get(bond.material)
    if bond is not None and film is not None and film.price(bond.thickness_m) is None:
        yield wish[0], f"{wish[1]}, but the bond {str(bond)!r} has no price; {_PRICE_ADVICE}"


_PRICE_ADVICE = "give it price_per_kg or price_per_m2 in the material set, or do without cost"


def _cost_wish(draft: Draft) -> Mistake | None:
    if draft.rules is not None and draft.rules.max_cost_per_m2 is not None:
        return "stack.max_cost", "a cost limit is given"
    if draft.search is not None and "cost" in draft.search.objectives:
        by_default = "" if draft.objectives_are_named else " (it is unless objectives are written)"
        return "search.objectives", f"cost is an objective{by_default}"
    return None


def _anodic(draft: Draft) -> Iterator[Mistake]:
    if draft.rules is None or draft.rules.max_anodic_gap_v is None:
        return
    bond = draft.rules.bond
    if bond is not None and bond.material in draft.materials:
        if draft.materials[bond.material].conductivity_s_per_m > METAL_S_PER_M:
            yield (
                "stack.bond.material",
                f"found {bond.material!r}, a metal, which does not insulate; choose an insulating film",
            )
        return
    for name in draft.use:
        material = draft.materials[name]
        if material.conductivity_s_per_m > METAL_S_PER_M and material.anodic_index_v is None:
            yield (
                "stack.max_anodic_gap",
                f"needs the anodic_index of {name!r}, which the material set does not give; add it, "
                "take the material out of use, or put an insulating bond between the sheets",
            )


def _limits(draft: Draft) -> Iterator[Mistake]:
    rules, sheets = draft.rules, draft.single_sheets()
    if rules is None or not sheets:
        return

    def price(sheet: Sheet) -> float:
        value = draft.materials[sheet.material].price(sheet.thickness_m)
        return math.inf if value is None else value + rules.cost_per_sheet

    def mass(sheet: Sheet) -> float:
        return draft.materials[sheet.material].mass_kg_per_m2(sheet.thickness_m)

    def thickness(sheet: Sheet) -> float:
        return sheet.thickness_m

    limits: list[tuple[str, float | None, Callable[[Sheet], float], float, str]] = [
        ("max_thickness", rules.max_thickness_m, thickness, 1e3, "mm"),
        ("max_mass", rules.max_mass_kg_per_m2, mass, 1.0, "kg/m^2"),
        ("max_cost", rules.max_cost_per_m2, price, 1.0, "per m^2 with its handling"),
    ]
    for key, limit, measure, scale, unit in limits:
        least = min(sheets, key=measure)
        if limit is not None and limit < measure(least) < math.inf:
            value = measure(least)
            yield (
                f"stack.{key}",
                f"found {limit * scale:.4g} {unit}, which excludes every sheet in use: the smallest, {least}, "
                f"has {value * scale:.4g} {unit}; raise the limit or use other sheets",
            )


def _grids(draft: Draft) -> Iterator[Mistake]:
    """Refuse masks that need more frequencies than the tables can hold."""
    counts = {f"{key}.mask": _grid_size(requirement.mask) for key, requirement in draft.requirements}
    if sum(counts.values()) > MAX_FREQUENCIES:
        key = max(counts, key=counts.__getitem__)
        yield (
            key,
            f"found a mask that is checked at {counts[key]} frequencies; all requirements together may have "
            f"{MAX_FREQUENCIES}: lower points_per_decade, or write fewer points",
        )


def _grid_size(mask: Mask) -> int:
    """Length of `Mask.grid_hz`, counted without making it."""
    rising = [frequency for frequency in mask.frequency_hz if frequency > 0.0]
    decades = (math.log10(high / low) for low, high in itertools.pairwise(rising))
    return sum(max(1, math.ceil(span * mask.points_per_decade - 1e-9)) for span in decades) + 1


def _static(requirement: Requirement) -> Iterator[str]:
    reasons = {
        PlaneWave: "a plane wave of 0 Hz does not exist",
        ElectricNearField: "any conductor shields a static electric field completely",
    }
    reason = reasons.get(type(requirement.field))
    if reason is not None and requirement.mask.frequency_hz[0] == 0.0:
        yield (
            f"found 0 Hz, but {reason}; begin above 0 Hz "
            "(0 Hz is for coaxial loops, coaxial dipoles and the magnetic near field)"
        )


def _stretches(draft: Draft, mask: Mask) -> Iterator[tuple[str, Table, float, float]]:
    """Yield material, table, lowest and highest mask frequency where a table in use does not cover the mask."""
    low, high = mask.frequency_hz[0], mask.frequency_hz[-1]
    for name in draft.present():
        for table in tables_in(draft.materials[name].permeability):
            if low < table.frequency_hz[0] or high > table.frequency_hz[-1]:
                yield name, table, low, high


def _table_mistakes(draft: Draft, requirement: Requirement) -> Iterator[str]:
    for name, table, low, high in _stretches(draft, requirement.mask):
        if low == 0.0:
            yield (
                f"found 0 Hz, but the permeability of {name!r} is a table, which begins above 0 Hz; "
                "begin the mask above 0 Hz, give the material a law, or take it out of use"
            )
        elif low < table.octave_hz[0] or high > table.octave_hz[1]:
            yield (
                f"found {_span(low, high)}, but the permeability table of {name!r} runs from "
                f"{_span(table.frequency_hz[0], table.frequency_hz[-1])} and is stretched by one octave at most; "
                "narrow the mask, extend the table, or take the material out of use"
            )


def _table_remarks(draft: Draft, requirement: Requirement) -> Iterator[str]:
    for name, table, _, _ in _stretches(draft, requirement.mask):
        yield (
            f"{requirement.name}: the mask reaches up to one octave outside the permeability table of {name!r} "
            f"({_span(table.frequency_hz[0], table.frequency_hz[-1])}); "
            "the table's end values are held there"
        )


def _field_remarks(requirement: Requirement) -> Iterator[str]:
    field, high = requirement.field, requirement.mask.frequency_hz[-1]
    if not isinstance(field, CoaxialLoops | CoaxialDipoles):
        return
    if 2.0 * math.pi * high / SPEED_OF_LIGHT * field.gap_sum_m > FAR_FIELD:
        yield (
            f"{requirement.name}: at {format_frequency(high)} source and victim, "
            f"{format_thickness(field.gap_sum_m)} apart, are in each other's far field; "
            "a plane wave describes that better"
        )
    if isinstance(field, CoaxialLoops):
        radius = max(field.source_radius_m, field.victim_radius_m)
        if radius > LARGE_LOOP * field.gap_sum_m:
            yield (
                f"{requirement.name}: a loop of {format_thickness(radius)} radius is more than {LARGE_LOOP:g} times as "
                f"large as the distance of {format_thickness(field.gap_sum_m)}; the stated accuracy is not promised"
            )


def _span(low_hz: float, high_hz: float) -> str:
    return f"{format_frequency(low_hz)} to {format_frequency(high_hz)}"
