"""Permeability in a material file: a bare number, or a table that names its law."""

from __future__ import annotations

from collections.abc import Iterator
from typing import Annotated

from pydantic import BeforeValidator, Discriminator, Field, PlainValidator, Tag

from stackopt.physics.permeability import ColeCole, Constant, Debye, Lorentz, PermeabilityLaw, Sum
from stackopt.readers import values as v
from stackopt.readers.files import join_key
from stackopt.readers.structure import Structure, register, tag, tag_checker

LAWS = ("constant", "debye", "cole-cole", "lorentz", "sum", "table")


class LawTable(Structure):
    """What all laws share; ``intrinsic`` is false for values that contain eddy currents already."""

    law: str
    intrinsic: v.Flag = True

    def build(self) -> PermeabilityLaw:
        """Return the law."""
        raise NotImplementedError

    def mistakes(self) -> Iterator[tuple[str, str]]:
        """Yield key and message of each value that makes the law impossible."""
        return iter(())

    def is_intrinsic(self) -> bool:
        """Tell whether the law and all its terms are intrinsic."""
        return self.intrinsic


class ConstantTable(LawTable):
    """The same permeability at every frequency."""

    initial: v.Positive

    def build(self) -> PermeabilityLaw:
        """Return the law."""
        return Constant(self.initial)


class DispersionTable(LawTable):
    """From an initial value down to a high-frequency one."""

    initial: v.Positive
    high_frequency: v.Positive = 1.0

    def mistakes(self) -> Iterator[tuple[str, str]]:
        """Yield key and message of each value that makes the law impossible."""
        if self.initial < self.high_frequency:
            yield (
                "initial",
                f"found {self.initial:g}, below the high-frequency value {self.high_frequency:g}; "
                "the material would give energy instead of losing it, so write at least that value",
            )


class DebyeTable(DispersionTable):
    """Single relaxation."""

    relaxation: v.Frequency

    def build(self) -> PermeabilityLaw:
        """Return the law."""
        return Debye(self.initial, self.relaxation, self.high_frequency)


class ColeColeTable(DispersionTable):
    """Broadened relaxation."""

    relaxation: v.Frequency
    broadening: v.Broadening

    def build(self) -> PermeabilityLaw:
        """Return the law."""
        return ColeCole(self.initial, self.relaxation, self.broadening, self.high_frequency)


class LorentzTable(DispersionTable):
    """Damped resonance."""

    resonance: v.Frequency
    damping: v.Frequency

    def build(self) -> PermeabilityLaw:
        """Return the law."""
        return Lorentz(self.initial, self.resonance, self.damping, self.high_frequency)


class FileTable(LawTable):
    """Measured values in a CSV table."""

    file: v.PermeabilityCurve

    def build(self) -> PermeabilityLaw:
        """Return the law."""
        return self.file


class SumTable(LawTable):
    """Several dispersions in one material."""

    terms: Annotated[list[AnyLaw], Field(min_length=1)]

    def build(self) -> PermeabilityLaw:
        """Return the law."""
        return Sum(tuple(term.build() for term in self.terms))

    def mistakes(self) -> Iterator[tuple[str, str]]:
        """Yield key and message of each value that makes the law impossible."""
        for number, term in enumerate(self.terms):
            for key, message in term.mistakes():
                yield join_key(join_key("", ["terms", number]), [key]), message

    def is_intrinsic(self) -> bool:
        """Tell whether the law and all its terms are intrinsic."""
        return self.intrinsic and all(term.is_intrinsic() for term in self.terms)


def _number(value: object) -> ConstantTable:
    return ConstantTable.model_construct(law="constant", initial=v.read_positive(value))


def _tag(value: object) -> str:
    return tag(str(value["law"])) if isinstance(value, dict) else tag("number")


_check_law = tag_checker(
    "law", LAWS, 'a number such as 1.0, or a table such as {law = "debye", initial = 3000, relaxation = "20 kHz"}'
)


def _check(value: object) -> object:
    return value if isinstance(value, int | float) else _check_law(value)


AnyLaw = Annotated[
    Annotated[ConstantTable, PlainValidator(_number), Tag(tag("number"))]
    | Annotated[ConstantTable, Tag(tag("constant"))]
    | Annotated[DebyeTable, Tag(tag("debye"))]
    | Annotated[ColeColeTable, Tag(tag("cole-cole"))]
    | Annotated[LorentzTable, Tag(tag("lorentz"))]
    | Annotated[SumTable, Tag(tag("sum"))]
    | Annotated[FileTable, Tag(tag("table"))],
    Discriminator(_tag),
    BeforeValidator(_check),
]
"""A permeability as a file may write it."""

SumTable.model_rebuild()
register(
    {
        "constant": ConstantTable,
        "debye": DebyeTable,
        "cole-cole": ColeColeTable,
        "lorentz": LorentzTable,
        "sum": SumTable,
        "table": FileTable,
    }
)
