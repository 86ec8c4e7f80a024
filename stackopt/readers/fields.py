"""Fields in a problem file: a table that names its kind."""

from __future__ import annotations

from collections.abc import Iterator
from typing import Annotated

from pydantic import BeforeValidator, Discriminator, Tag

from stackopt.problem import CoaxialDipoles, CoaxialLoops, ElectricNearField, Field, MagneticNearField, PlaneWave
from stackopt.readers import values as v
from stackopt.readers.structure import Structure, register, tag, tag_checker

KINDS = ("plane wave", "magnetic near field", "electric near field", "coaxial loops", "coaxial dipoles")


class FieldTable(Structure):
    """What all fields share."""

    kind: str

    def build(self) -> Field:
        """Return the field."""
        raise NotImplementedError

    def mistakes(self) -> Iterator[tuple[str, str]]:
        """Yield key and message of values that do not fit together."""
        return iter(())


class PlaneWaveTable(FieldTable):
    """Far field at an angle."""

    angle: v.Angle = 0.0
    polarisation: v.Polarisation = "TE"

    def build(self) -> Field:
        """Return the field."""
        return PlaneWave(self.angle, self.polarisation)


class MagneticTable(FieldTable):
    """Small loop at a distance."""

    distance: v.Distance

    def build(self) -> Field:
        """Return the field."""
        return MagneticNearField(self.distance)


class ElectricTable(FieldTable):
    """Short dipole at a distance."""

    distance: v.Distance

    def build(self) -> Field:
        """Return the field."""
        return ElectricNearField(self.distance)


class DipolesTable(FieldTable):
    """Two dipoles on one axis."""

    source_gap: v.Gap
    victim_gap: v.Gap

    def build(self) -> Field:
        """Return the field."""
        return CoaxialDipoles(self.source_gap, self.victim_gap)

    def mistakes(self) -> Iterator[tuple[str, str]]:
        """Yield key and message of values that do not fit together."""
        if self.source_gap + self.victim_gap == 0.0:
            yield "victim_gap", "found 0 mm on both sides; at least one of source_gap and victim_gap must be above 0 mm"


class LoopsTable(DipolesTable):
    """Two loops on one axis."""

    source_radius: v.Distance
    victim_radius: v.Distance

    def build(self) -> Field:
        """Return the field."""
        return CoaxialLoops(self.source_radius, self.victim_radius, self.source_gap, self.victim_gap)


def _tag(value: object) -> str:
    return tag(str(value["kind"])) if isinstance(value, dict) else tag("")


AnyField = Annotated[
    Annotated[PlaneWaveTable, Tag(tag("plane wave"))]
    | Annotated[MagneticTable, Tag(tag("magnetic near field"))]
    | Annotated[ElectricTable, Tag(tag("electric near field"))]
    | Annotated[LoopsTable, Tag(tag("coaxial loops"))]
    | Annotated[DipolesTable, Tag(tag("coaxial dipoles"))],
    Discriminator(_tag),
    BeforeValidator(tag_checker("kind", KINDS, 'a table such as {kind = "plane wave"}')),
]
"""A field as a file may write it."""

register(
    {
        "plane wave": PlaneWaveTable,
        "magnetic near field": MagneticTable,
        "electric near field": ElectricTable,
        "coaxial loops": LoopsTable,
        "coaxial dipoles": DipolesTable,
    }
)
