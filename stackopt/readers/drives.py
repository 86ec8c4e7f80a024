"""What drives the source of a requirement, the limits that hang on it, and whether the materials allow to tell."""

from __future__ import annotations

from collections.abc import Iterator
from typing import Annotated

import numpy as np
from pydantic import Field as Listed

from stackopt.physics.interior import gap_mistake
from stackopt.problem import CoaxialDipoles, CoaxialLoops, Drive, Field, Mask, Material
from stackopt.readers import values as v
from stackopt.readers.checks import Draft
from stackopt.readers.files import Source, join_key
from stackopt.readers.structure import Structure
from stackopt.units import format_frequency, parse_quantity, show

PERMEABLE = 1.1
"""Relative permeability from which a material needs a saturation."""
LIMITS = ("saturation_fraction", "max_heat", "max_inductance_change", "source_turns", "source_inductance")

Mistake = tuple[str, str]


class DriveKeys(Structure):
    """Keys of a requirement that tell how its source is driven."""

    drive: Annotated[list[v.DrivePoint], Listed(min_length=1)] | None = None
    saturation_fraction: v.Fraction | None = None
    max_heat: v.Power | None = None
    max_inductance_change: v.Change | None = None
    source_turns: v.Positive | None = None
    source_inductance: v.Inductance | None = None

    def drive_mistakes(self, field: Field) -> Iterator[Mistake]:
        """Yield key and message of what does not fit together, or not to the field."""
        if self.drive is None:
            for key in LIMITS:
                if getattr(self, key) is not None:
                    yield key, f'found without a drive; write one, such as drive = [["100 kHz", {_example(field)}]]'
            return
        if not isinstance(field, CoaxialLoops | CoaxialDipoles):
            yield "drive", f"found with a {field.kind}; only coaxial loops and coaxial dipoles have a source to drive"
            return
        radius = field.source_radius_m if isinstance(field, CoaxialLoops) else 0.0
        if mistake := gap_mistake(radius, field.source_gap_m):
            yield "drive", mistake
        yield from self._point_mistakes(field)
        yield from self._coil_mistakes(field)

    def _point_mistakes(self, field: Field) -> Iterator[Mistake]:
        seen: set[float] = set()
        for number, (frequency, text) in enumerate(self.drive or []):
            key = join_key("", ["drive", number])
            if frequency in seen:
                yield key, f"found {format_frequency(frequency)} a second time; write each frequency once"
            seen.add(frequency)
            try:
                peak = parse_quantity(text, _kind(field))
            except ValueError as error:
                yield key, str(error)
                continue
            if peak <= 0.0:
                yield (
                    key,
                    f"found {show(text)}; the peak must be above 0 {'A' if _kind(field) == 'current' else 'A m^2'}",
                )

    def _coil_mistakes(self, field: Field) -> Iterator[Mistake]:
        if self.max_inductance_change is None:
            return
        if isinstance(field, CoaxialDipoles):
            yield "max_inductance_change", "found with coaxial dipoles, which have no turns; write coaxial loops"
            return
        missing = [key for key in ("source_turns", "source_inductance") if getattr(self, key) is None]
        if missing:
            yield (
                "max_inductance_change",
                f"needs {' and '.join(missing)}, to relate the change to; write them, such as "
                'source_turns = 10 and source_inductance = "24 uH"',
            )

    def build_drive(self, field: Field) -> Drive | None:
        """Return the drive, for keys without mistakes."""
        if self.drive is None:
            return None
        points = sorted((frequency, parse_quantity(text, _kind(field))) for frequency, text in self.drive)
        return Drive(
            points=tuple(points),
            saturation_fraction=self.saturation_fraction or Drive.saturation_fraction,
            max_heat_w=self.max_heat,
            max_inductance_change=self.max_inductance_change,
            source_turns=self.source_turns,
            source_inductance_h=self.source_inductance,
        )


def _kind(field: Field) -> str:
    return "moment" if isinstance(field, CoaxialDipoles) else "current"


def _example(field: Field) -> str:
    return '"0.5 A m^2"' if isinstance(field, CoaxialDipoles) else '"12 A"'


def outside_mask(drive: Drive, mask: Mask) -> Iterator[str]:
    """Yield a message for each frequency of a drive that the mask does not span."""
    low, high = mask.frequency_hz[0], mask.frequency_hz[-1]
    for frequency, _ in drive.points:
        if not low * (1.0 - 1e-9) <= frequency <= high * (1.0 + 1e-9):
            yield (
                f"found {format_frequency(frequency)}, but the mask runs from {format_frequency(low)} to "
                f"{format_frequency(high)}; drive within it, or widen the mask (0 dB requires nothing)"
            )


def check_drives(draft: Draft, source: Source) -> None:
    """Note what drives need of the materials and of the search, and lack."""
    driven = {key: requirement.drive for key, requirement in draft.requirements if requirement.drive is not None}
    for key in list(driven)[:1]:  # one message for each material is enough
        frequencies = sorted({frequency for drive in driven.values() for frequency, _ in drive.points})
        for name in draft.present():
            if draft.materials[name].saturation_t is None and _is_permeable(draft.materials[name], frequencies):
                source.add(
                    f"{key}.drive",
                    f"needs the saturation of {name!r}, which the material set does not give; add it, such as "
                    'saturation = "0.4 T", or take the material out of use',
                )
    if draft.search is not None and "heat" in draft.search.objectives and not driven:
        number = draft.search.objectives.index("heat")
        source.add(
            join_key("search", ["objectives", number]),
            'found \'heat\', but no requirement has a drive; write one, such as drive = [["100 kHz", "12 A"]]',
        )


def _is_permeable(material: Material, frequencies_hz: list[float]) -> bool:
    try:
        return bool(np.any(np.abs(material.permeability(np.array(frequencies_hz))) > PERMEABLE))
    except ValueError:  # a table that does not reach; the mask's check says so
        return True
