"""Material sets: TOML to materials."""

from __future__ import annotations

import itertools
import os
from collections.abc import Iterable, Iterator, Mapping
from pathlib import Path
from typing import Annotated, Any

from pydantic import Field

from stackopt.physics.permeability import kramers_kronig_deviation, tables_in
from stackopt.problem import Material, MaterialSet, Tolerance
from stackopt.readers import values as v
from stackopt.readers.files import Reading, Source, join_key, parse_toml
from stackopt.readers.laws import AnyLaw
from stackopt.readers.structure import Structure, validate
from stackopt.units import format_thickness

NUMBERS_WITH_ORIGIN = (
    "conductivity",
    "density",
    "permeability",
    "permittivity",
    "price_per_kg",
    "price_per_m2",
    "saturation",
    "rayleigh",
    "anodic_index",
)
"""Keys that need an origin as soon as they are given."""
GROSS_DEVIATION = 0.3


class ToleranceTable(Structure):
    """Relative tolerances."""

    thickness: v.TolerancePair = (0.0, 0.0)
    conductivity: v.TolerancePair = (0.0, 0.0)
    permeability: v.TolerancePair = (0.0, 0.0)


class OriginTable(Structure):
    """Where each number comes from."""

    conductivity: v.Text | None = None
    density: v.Text | None = None
    permeability: v.Text | None = None
    permittivity: v.Text | None = None
    gauges: v.Text | None = None
    thickness_range: v.Text | None = None
    price_per_kg: v.Text | None = None
    price_per_m2: v.Text | None = None
    saturation: v.Text | None = None
    rayleigh: v.Text | None = None
    anodic_index: v.Text | None = None
    tolerance: v.Text | None = None


class MaterialTable(Structure):
    """One material."""

    conductivity: v.Conductivity
    density: v.Density
    permeability: AnyLaw
    permittivity: v.Positive = 1.0
    gauges: Annotated[list[v.Thickness], Field(min_length=1)] | None = None
    thickness_range: list[v.Thickness] | None = None
    price_per_kg: v.NotNegative | None = None
    price_per_m2: dict[str, v.NotNegative] | None = None
    saturation: v.FluxDensity | None = None
    rayleigh: v.Rayleigh | None = None
    anodic_index: v.Potential | None = None
    tolerance: ToleranceTable = ToleranceTable()
    notes: v.Text | None = None
    origin: OriginTable

    def mistakes(self) -> Iterator[tuple[str, str]]:
        """Yield key and message of values that do not fit together."""
        for key, message in self.permeability.mistakes():
            yield f"permeability.{key}", message
        if self.gauges is not None and self.thickness_range is not None:
            yield "thickness_range", "found beside gauges; write one of the two"
        for gauge in _repeated(self.gauges or []):
            yield "gauges", f"found {format_thickness(gauge)} more than once; write each gauge once"
        if self.thickness_range is not None and not _is_range(self.thickness_range):
            found = [format_thickness(thickness) for thickness in self.thickness_range]
            yield (
                "thickness_range",
                f'found {found}; write the smallest and the largest thickness, such as ["0.1 mm", "2 mm"]',
            )
        yield from self._price_mistakes()

    def _price_mistakes(self) -> Iterator[tuple[str, str]]:
        gauges = dict.fromkeys(format_thickness(gauge) for gauge in self.gauges or [])
        for text in self.price_per_m2 or {}:
            key = join_key("price_per_m2", [text])
            try:
                thickness = format_thickness(v.read_thickness(text))
            except ValueError as error:
                yield key, str(error)
                continue
            if self.gauges is not None and thickness not in gauges:
                yield key, f"found a price for {text}, which is no gauge; gauges: {_few(gauges)}"
        if self.price_per_m2 is not None and self.thickness_range is not None:
            yield "price_per_m2", "found beside thickness_range; a material of any thickness needs price_per_kg"

    def build(self, name: str) -> Material:
        """Return the material."""
        span = self.thickness_range
        prices = {v.read_thickness(text): price for text, price in (self.price_per_m2 or {}).items()}
        return Material(
            name=name,
            conductivity_s_per_m=self.conductivity,
            density_kg_per_m3=self.density,
            permeability=self.permeability.build(),
            permittivity=self.permittivity,
            gauges_m=tuple(sorted(self.gauges or [])),
            thickness_range_m=None if span is None else (span[0], span[1]),
            price_per_kg=self.price_per_kg,
            price_per_m2=tuple(sorted(prices.items())),
            saturation_t=self.saturation,
            rayleigh_m_per_a=self.rayleigh,
            anodic_index_v=self.anodic_index,
            tolerance=Tolerance(self.tolerance.thickness, self.tolerance.conductivity, self.tolerance.permeability),
            notes=self.notes or "",
            origin=self.origin.model_dump(exclude_none=True),
        )

    def remarks(self, name: str) -> Iterator[str]:
        """Yield what a user of the material should know."""
        if not self.permeability.is_intrinsic():
            yield (
                f"{name}: its permeability is not intrinsic: it contains eddy currents already, so eddy screening is "
                "counted twice and the attenuation of thick sheets comes out wrong; use intrinsic values"
            )
        tables = tables_in(self.permeability.build())
        if any(kramers_kronig_deviation(table) > GROSS_DEVIATION for table in tables):
            yield (
                f"{name}: real and imaginary part of its permeability table do not belong together (they break the "
                "Kramers-Kronig relation grossly); check the columns and the units of the measurement"
            )


class SetTable(Structure):
    """A whole material set."""

    title: v.Text
    currency: v.Text
    materials: Annotated[dict[str, Any], Field(min_length=1)]


def read_material_set(path: str | os.PathLike[str], allow_outside: bool = False) -> MaterialSet:
    """Read a material set.

    Parameters
    ----------
    path : path
        The TOML file.
    allow_outside : bool
        Whether tables may lie outside the set's folder.

    Raises
    ------
    InputError
        With a finding for every mistake in the set and its tables.
    """
    reading = Reading(allow_outside)
    source = Source(Path(path), reading)
    try:
        data = parse_toml(reading.read_text(source.path))
    except ValueError as error:
        source.add("", str(error))
        data = {}
    reading.raise_findings()
    material_set = build_material_set(data, source)
    reading.raise_findings()
    assert material_set is not None
    return material_set


def build_material_set(data: Mapping[str, Any], source: Source) -> MaterialSet | None:
    """Make a material set of what its file holds; on mistakes note every one and return what can be used, or None."""
    source.reading.folders.append(source.path.parent)
    table = validate(SetTable, data, source)
    raw = data.get("materials")
    if not isinstance(raw, dict):
        return None
    materials: dict[str, Material] = {}
    remarks: dict[str, tuple[str, ...]] = {}
    for name, value in raw.items():
        built = _build_material(name, value, source)
        if built is not None:
            materials[name], remarks[name] = built
    title, currency = ("", "") if table is None else (table.title, table.currency)
    return MaterialSet(title, currency, materials, {name: texts for name, texts in remarks.items() if texts})


def _build_material(name: str, value: object, source: Source) -> tuple[Material, tuple[str, ...]] | None:
    prefix = join_key("materials", [name])
    before = len(source.reading.findings)
    for message in _name_mistakes(name):
        source.add(prefix, message)
    if isinstance(value, dict):
        for key in _without_origin(value):
            source.add(
                f"{prefix}.origin.{key}", f'is missing; say where the {key} comes from, such as "supplier data sheet"'
            )
    table = validate(MaterialTable, value, source, prefix)
    for key, message in table.mistakes() if table is not None else ():
        source.add(f"{prefix}.{key}", message)
    if table is None or len(source.reading.findings) > before:
        return None
    return table.build(name), tuple(table.remarks(name))


def _name_mistakes(name: str) -> Iterator[str]:
    if name != " ".join(name.split()) or not name or "/" in name or not name.isprintable():
        yield "a material's name may hold letters, figures and single blanks, but no '/' and no blank at its ends"


def _without_origin(value: Mapping[str, Any]) -> Iterator[str]:
    origin = value.get("origin", {})
    if isinstance(origin, dict) and "origin" in value:
        yield from (key for key in NUMBERS_WITH_ORIGIN if key in value and key not in origin)


def _repeated(gauges: list[float]) -> list[float]:
    rising = sorted(gauges)
    return [low for low, high in itertools.pairwise(rising) if high <= low * (1.0 + 1e-9)]


def _few(words: Iterable[str], most: int = 20) -> str:
    known = list(words)
    return ", ".join(known[:most]) + (f" and {len(known) - most} more" if len(known) > most else "")


def _is_range(span: list[float]) -> bool:
    return len(span) == 2 and span[0] < span[1]
