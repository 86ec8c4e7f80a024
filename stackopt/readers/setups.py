"""Bench setups: the coils, what is known of the material, and the sweeps that were measured with them."""

from __future__ import annotations

import os
import re
from collections.abc import Mapping
from dataclasses import dataclass
from dataclasses import field as entry_field
from functools import partial
from pathlib import Path
from typing import Annotated, Any

from pydantic import Field, PlainValidator

from stackopt.errors import Finding, InputError
from stackopt.physics.permeability import PermeabilityLaw, tables_in
from stackopt.problem import CoaxialDipoles, CoaxialLoops
from stackopt.readers import values as v
from stackopt.readers.fields import AnyField
from stackopt.readers.files import Reading, Source, join_key, parse_toml
from stackopt.readers.laws import AnyLaw
from stackopt.readers.structure import Structure, validate
from stackopt.readers.sweeps import Sweep, read_all, read_sweep
from stackopt.readers.values import _integer, _quantity
from stackopt.units import format_frequency, show

MAX_COUNT = 100
_DATE = re.compile(r"\d{4}-\d{2}-\d{2}")

Coils = CoaxialLoops | CoaxialDipoles
"""The fields that a bench can have."""


@dataclass(frozen=True)
class SheetSweep:
    """A sweep with what lay between the coils: ``count`` sheets of one thickness, ``spacing_m`` of film between them.

    ``field`` is the coils with the gaps of this sweep.
    """

    sweep: Sweep
    thickness_m: float
    count: int
    spacing_m: float
    field: Coils


@dataclass(frozen=True)
class Uncertainty:
    """95 % half-widths of what the setup states: each gap, each radius (m), each thickness (ratio), noise (dB)."""

    gaps_m: float = 0.5e-3
    radii_m: float = 0.0
    thickness: float = 0.05
    noise_db: float | None = None
    is_given: frozenset[str] = frozenset()
    """Keys that the file writes itself."""


@dataclass(frozen=True)
class Setup:
    """A bench with its sweeps.

    Parameters
    ----------
    field : CoaxialLoops or CoaxialDipoles
        The coils.
    sweeps : tuple of SheetSweep
    uncertainty : Uncertainty
    conductivity_s_per_m, permeability : float, PermeabilityLaw or None
        What is known of the material and held fixed.
    entry : mapping of str to object
        Keys of the material entry that are known and only passed on, as the file writes them.
    origin : mapping of str to str
        Where the known values come from.
    """

    name: str
    field: Coils
    sweeps: tuple[SheetSweep, ...]
    uncertainty: Uncertainty = Uncertainty()
    conductivity_s_per_m: float | None = None
    permeability: PermeabilityLaw | None = None
    entry: Mapping[str, Any] = entry_field(default_factory=dict)
    origin: Mapping[str, str] = entry_field(default_factory=dict)
    date: str | None = None


def _date(value: object) -> str:
    text = str(value)
    if _DATE.fullmatch(text) is None:
        raise ValueError(f'found {show(value)}; write the day of the measurement, such as "2024-05-17"')
    return text


class KnownOriginTable(Structure):
    """Where known values come from."""

    conductivity: v.Text | None = None
    permeability: v.Text | None = None
    density: v.Text | None = None
    permittivity: v.Text | None = None
    price_per_kg: v.Text | None = None
    saturation: v.Text | None = None
    anodic_index: v.Text | None = None


class KnownTable(Structure):
    """What is known of the material; the last five only pass on to the entry."""

    conductivity: v.Conductivity | None = None
    permeability: AnyLaw | None = None
    density: v.Density | None = None
    permittivity: v.Positive | None = None
    price_per_kg: v.NotNegative | None = None
    saturation: v.FluxDensity | None = None
    anodic_index: v.Potential | None = None
    origin: KnownOriginTable = KnownOriginTable()


PASSED_ON = ("density", "permittivity", "price_per_kg", "saturation", "anodic_index")

Thicknesses = Annotated[float, PlainValidator(_quantity("ratio", "0 %", "50 %"))]
Noise = Annotated[float, PlainValidator(_quantity("level", "0.001 dB", "20 dB"))]
Count = Annotated[int, PlainValidator(_integer(1, MAX_COUNT))]
Date = Annotated[str, PlainValidator(_date)]


class UncertaintyTable(Structure):
    """95 % half-widths."""

    gaps: v.Gap | None = None
    radii: v.Gap | None = None
    thickness: Thicknesses | None = None
    noise: Noise | None = None


class SweepTable(Structure):
    """One sweep."""

    file: v.Text
    without: v.Text | None = None
    thickness: v.Thickness
    count: Count = 1
    spacing: v.Gap = 0.0
    source_gap: v.Gap | None = None
    victim_gap: v.Gap | None = None
    floor: v.Text | None = None


class SetupTable(Structure):
    """A whole setup file."""

    field: AnyField
    known: KnownTable = KnownTable()
    uncertainty: UncertaintyTable = UncertaintyTable()
    sweep: Annotated[list[Any], Field(min_length=1)]
    date: Date | None = None


def read_setup(path: str | os.PathLike[str], floor: str | None = None, allow_outside: bool = False) -> Setup:
    """Read a setup with its sweeps.

    Parameters
    ----------
    path : path
        The TOML file; sweeps lie in its folder or below.
    floor : str, optional
        Noise floor of every sweep, see `stackopt.readers.sweeps.read_sweep`; a sweep's own floor is the default.
    allow_outside : bool
        Whether sweeps may lie outside the file's folder.

    Raises
    ------
    InputError
        With a finding for every mistake in the file and its sweeps.
    """
    reading = Reading(allow_outside)
    source = Source(Path(path), reading)
    reading.folders.append(source.path.parent)
    try:
        data = parse_toml(reading.read_text(source.path))
    except ValueError as error:
        raise InputError(Finding(str(source.path), "", str(error))) from None
    table = validate(SetupTable, data, source)
    entries = data.get("sweep")
    rows = [
        validate(SweepTable, entry, source, join_key("", ["sweep", index]))
        for index, entry in enumerate(entries if isinstance(entries, list) else [])
    ]
    coils = None if table is None else _coils(table, source)
    sweeps = _read_sweeps([row for row in rows if row is not None], floor, source)
    reading.raise_findings()
    assert table is not None
    assert coils is not None
    used = [row for row in rows if row is not None]
    pairs = [_with_coils(row, sweep, coils) for row, sweep in zip(used, sweeps, strict=True)]
    _check_sweeps(pairs, None if table.known.permeability is None else table.known.permeability.build(), source)
    reading.raise_findings()
    return Setup(
        name=source.path.name,
        field=coils,
        sweeps=tuple(pairs),
        uncertainty=_uncertainty(table.uncertainty),
        conductivity_s_per_m=table.known.conductivity,
        permeability=None if table.known.permeability is None else table.known.permeability.build(),
        entry={key: data["known"][key] for key in ("conductivity", "permeability", *PASSED_ON) if key in _known(data)},
        origin=table.known.origin.model_dump(exclude_none=True),
        date=table.date,
    )


def _known(data: Mapping[str, Any]) -> Mapping[str, Any]:
    known = data.get("known", {})
    return known if isinstance(known, dict) else {}


def _coils(table: SetupTable, source: Source) -> Coils | None:
    """Return the field; the bench has coils, and laws of the material must be possible."""
    for key, message in table.field.mistakes():
        source.add(f"field.{key}", message)
    for key, message in table.known.permeability.mistakes() if table.known.permeability is not None else ():
        source.add(f"known.permeability.{key}", message)
    built = table.field.build() if not source.reading.findings else None
    if built is not None and not isinstance(built, CoaxialLoops | CoaxialDipoles):
        source.add("field.kind", f"found {show(built.kind)}; a bench has coaxial loops or coaxial dipoles")
        return None
    return built


def _read_sweeps(rows: list[SweepTable], floor: str | None, source: Source) -> list[Sweep]:
    jobs = []
    for number, row in enumerate(rows):
        path = _located(row.file, join_key("", ["sweep", number, "file"]), source)
        without = (
            None if row.without is None else _located(row.without, join_key("", ["sweep", number, "without"]), source)
        )
        if path is not None and (without is not None or row.without is None):
            jobs.append(partial(read_sweep, path, floor or row.floor, without))
    try:
        return read_all(jobs)
    except InputError as error:
        source.reading.findings.extend(error.findings)
        return []


def _located(name: str, key: str, source: Source) -> Path | None:
    try:
        return source.locate(name)
    except ValueError as error:
        source.add(key, str(error))
        return None


def _with_coils(row: SweepTable, sweep: Sweep, coils: Coils) -> SheetSweep:
    source_gap = coils.source_gap_m if row.source_gap is None else row.source_gap
    victim_gap = coils.victim_gap_m if row.victim_gap is None else row.victim_gap
    own: Coils
    if isinstance(coils, CoaxialLoops):
        own = CoaxialLoops(coils.source_radius_m, coils.victim_radius_m, source_gap, victim_gap)
    else:
        own = CoaxialDipoles(source_gap, victim_gap)
    return SheetSweep(sweep, row.thickness, row.count, row.spacing, own)


def _check_sweeps(sweeps: list[SheetSweep], law: PermeabilityLaw | None, source: Source) -> None:
    """Note sweeps without any distance between the coils, and known tables that do not reach a sweep's ends."""
    for number, entry in enumerate(sweeps):
        key = join_key("", ["sweep", number])
        if entry.field.gap_sum_m == 0.0:
            source.add(key, "found 0 mm on both sides; at least one of source_gap and victim_gap must be above 0 mm")
        low, high = float(entry.sweep.frequency_hz[0]), float(entry.sweep.frequency_hz[-1])
        for table in tables_in(law) if law is not None else ():
            if low < table.octave_hz[0] or high > table.octave_hz[1]:
                span = f"{format_frequency(table.frequency_hz[0])} to {format_frequency(table.frequency_hz[-1])}"
                source.add(
                    "known.permeability",
                    f"found a table from {span}, but {entry.sweep.name} runs from {format_frequency(low)} to "
                    f"{format_frequency(high)}; extend the table or shorten the sweep",
                )


def _uncertainty(table: UncertaintyTable) -> Uncertainty:
    given = {key: value for key, value in table.model_dump().items() if value is not None}
    names = {"gaps": "gaps_m", "radii": "radii_m", "thickness": "thickness", "noise": "noise_db"}
    return Uncertainty(**{names[key]: value for key, value in given.items()}, is_given=frozenset(given))
