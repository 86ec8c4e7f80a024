"""Problem files: TOML to the frozen problem."""

from __future__ import annotations

import itertools
import os
from collections.abc import Iterator, Mapping
from pathlib import Path
from typing import Annotated, Any

from pydantic import Field

from stackopt.problem import Mask, MaterialSet, Problem, Requirement, SearchSettings, Sheet, Stack, StackRules
from stackopt.readers import values as v
from stackopt.readers.checks import Draft, check_draft
from stackopt.readers.drives import DriveKeys, check_drives, outside_mask
from stackopt.readers.fields import AnyField
from stackopt.readers.files import Reading, Source, join_key, parse_toml
from stackopt.readers.levels import required_curve
from stackopt.readers.material_sets import build_material_set
from stackopt.readers.structure import Structure, validate
from stackopt.units import show

MASK_SOURCES = "write one of: points, file, or emitted together with allowed"


class ProblemTable(Structure):
    """The file as a whole; its larger parts are validated one by one, so that one mistake hides no other."""

    title: v.Text
    materials: v.Text
    use: Annotated[list[v.Name], Field(min_length=1)] | None = None
    requirement: Annotated[list[Any], Field(min_length=1)]
    stack: dict[str, Any]
    search: dict[str, Any] | None = None


class MaskTable(Structure):
    """Required attenuation, in one of three ways."""

    margin: v.Margin = 0.0
    points_per_decade: v.PointsPerDecade = 8
    points: Annotated[list[v.Point], Field(min_length=1)] | None = None
    file: v.MaskCurve | None = None
    emitted: v.LevelCurve | None = None
    allowed: v.LevelCurve | None = None

    def mistakes(self) -> Iterator[tuple[str, str]]:
        """Yield key and message of values that do not fit together."""
        pairs = itertools.pairwise(point[0] for point in self.points or [])
        for number, (before, frequency) in enumerate(pairs, start=1):
            if frequency <= before:
                yield (
                    join_key("", ["points", number]),
                    f"found {frequency:.10g} Hz after {before:.10g} Hz; frequencies must rise "
                    "(write a step as two frequencies close together)",
                )

    def build(self) -> tuple[Mask, list[str]]:
        """Return the mask and remarks on it; ValueError when levels do not overlap."""
        remarks: list[str] = []
        if self.emitted is not None and self.allowed is not None:
            frequency, attenuation, remarks = required_curve(self.emitted, self.allowed)
        elif self.file is not None:
            frequency, attenuation = self.file
        else:
            frequency, attenuation = (tuple(column) for column in zip(*self.points or [], strict=True))
        return Mask(frequency, attenuation, self.margin, self.points_per_decade), remarks


class RequirementTable(DriveKeys):
    """One field with its mask, and what drives it."""

    name: v.Text | None = None
    field: AnyField
    mask: MaskTable


class BondTable(Structure):
    """The film between neighbouring sheets."""

    material: v.Name
    thickness: v.Thickness


class StackTable(Structure):
    """What a stack may be."""

    max_sheets: v.SheetCount
    max_thickness: v.Distance | None = None
    max_mass: v.AreaDensity | None = None
    max_cost: v.Cost | None = None
    bond: BondTable | None = None
    source_side: list[v.Layer] | None = None
    victim_side: list[v.Layer] | None = None
    first: Annotated[list[v.Name], Field(min_length=1)] | None = None
    last: Annotated[list[v.Name], Field(min_length=1)] | None = None
    max_anodic_gap: v.PotentialGap | None = None
    cost_per_sheet: v.NotNegative = 0.0

    def build(self) -> StackRules:
        """Return the rules."""
        return StackRules(
            max_sheets=self.max_sheets,
            max_thickness_m=self.max_thickness,
            max_mass_kg_per_m2=self.max_mass,
            max_cost_per_m2=self.max_cost,
            bond=None if self.bond is None else Sheet(self.bond.material, self.bond.thickness),
            source_side=_layers(self.source_side),
            victim_side=_layers(self.victim_side),
            first=None if self.first is None else tuple(self.first),
            last=None if self.last is None else tuple(self.last),
            max_anodic_gap_v=self.max_anodic_gap,
            cost_per_sheet=self.cost_per_sheet,
        )


class SearchTable(Structure):
    """How to search."""

    objectives: Annotated[list[v.Objective], Field(min_length=1)] | None = None
    random_seed: v.Seed = SearchSettings.random_seed
    population: v.Population = SearchSettings.population
    assume: v.Assumption = SearchSettings.assume
    yield_goal: v.YieldGoal | None = None

    def mistakes(self) -> Iterator[tuple[str, str]]:
        """Yield key and message of values that do not fit together."""
        for number, name in _repeats(self.objectives or []):
            yield join_key("", ["objectives", number]), f"found {name!r} more than once; write each objective once"
        if self.yield_goal is not None and self.assume != "yield":
            yield "yield_goal", f'found with assume = "{self.assume}"; it needs assume = "yield", or leave it out'

    def build(self) -> SearchSettings:
        """Return the settings."""
        return SearchSettings(
            tuple(self.objectives or SearchSettings.objectives),
            self.random_seed,
            self.population,
            self.assume,
            SearchSettings.yield_goal if self.yield_goal is None else self.yield_goal,
        )


def read_problem(
    path: str | os.PathLike[str], allow_outside: bool = False, fence: str | os.PathLike[str] | None = None
) -> Problem:
    """Read a problem, its material set and all their tables.

    Parameters
    ----------
    path : path
        The TOML file.
    allow_outside : bool
        Whether tables may lie outside the folders of the problem and of its material set.
    fence : path, optional
        Folder that holds everything: no file outside it is read.

    Raises
    ------
    InputError
        With a finding for every mistake in any of the files.
    """
    reading = Reading(allow_outside, None if fence is None else Path(fence))
    source = Source(Path(path), reading)
    try:
        reading.check_fence(source.path)
        data = parse_toml(reading.read_text(source.path))
    except ValueError as error:
        source.add("", str(error))
        data = {}
    reading.raise_findings()
    reading.folders.append(source.path.parent)
    material_set = _read_set(data.get("materials"), source)
    head = validate(ProblemTable, data, source)
    draft = _draft(data, material_set, source)
    check_draft(draft, source)
    check_drives(draft, source)
    reading.raise_findings()
    assert head is not None
    assert material_set is not None
    assert draft.rules is not None
    assert draft.search is not None
    return Problem(
        title=head.title,
        currency=material_set.currency,
        materials=material_set.materials,
        use=draft.use,
        requirements=tuple(requirement for _, requirement in draft.requirements),
        rules=draft.rules,
        search=draft.search,
        remarks=tuple(dict.fromkeys(reading.remarks)),
        name=source.path.stem,
        files=tuple(dict.fromkeys(reading.files)),
    )


def _read_set(name: object, source: Source) -> MaterialSet | None:
    """Read the material set that a problem names, and note the names that the problem may use."""
    if not isinstance(name, str) or not name.strip():
        return None  # the problem's own structure says so
    try:
        inner = Source(source.beside(name.strip()), source.reading)
    except ValueError as error:
        source.add("materials", str(error))
        return None
    try:
        text = source.reading.read_text(inner.path)
    except ValueError as error:
        source.add("materials", f"found {show(name)}; {inner.path} {error}")
        return None
    try:
        data = parse_toml(text)
    except ValueError as error:
        inner.add("", str(error))
        return None
    if isinstance(data.get("materials"), dict):
        source.names = tuple(data["materials"])
    return build_material_set(data, inner)


def _draft(data: Mapping[str, Any], material_set: MaterialSet | None, source: Source) -> Draft:
    materials = {} if material_set is None else material_set.materials
    if "use" in data:
        named = data["use"] if isinstance(data["use"], list) else []  # the structure says so if it is no list
        use = tuple(name for name in named if isinstance(name, str) and name in materials)
        for number, name in _repeats(use):
            source.add(join_key("", ["use", number]), f"found {name!r} more than once; write each material once")
    else:
        use = tuple(name for name, item in materials.items() if item.gauges_m or item.thickness_range_m)
    entries = data.get("requirement")
    return Draft(
        materials=materials,
        remarks={} if material_set is None else material_set.remarks,
        use=use,
        use_is_named="use" in data,
        requirements=list(_requirements(entries if isinstance(entries, list) else [], source)),
        rules=_rules(data.get("stack"), source),
        search=_search(data.get("search", {}), source),
        objectives_are_named=isinstance(data.get("search"), dict) and "objectives" in data["search"],
    )


def _requirements(entries: list[Any], source: Source) -> Iterator[tuple[str, Requirement]]:
    """Yield the key path and the requirement of each entry that can be used."""
    names: set[str] = set()
    for index, entry in enumerate(entries):
        prefix = join_key("", ["requirement", index])
        if isinstance(entry, dict) and isinstance(entry.get("mask"), dict):
            _check_mask_source(entry["mask"], f"{prefix}.mask", source)
        table = validate(RequirementTable, entry, source, prefix)
        if table is None:
            continue
        name = table.name or f"requirement {index + 1}"
        if name in names:
            source.add(f"{prefix}.name", f"found {name!r} a second time; give each requirement its own name")
        names.add(name)
        mistakes = [(f"field.{key}", message) for key, message in table.field.mistakes()]
        mistakes += [(f"mask.{key}", message) for key, message in table.mask.mistakes()]
        mistakes += table.drive_mistakes(table.field.build())
        for key, message in mistakes:
            source.add(f"{prefix}.{key}", message)
        if not mistakes:
            yield from _requirement(name, prefix, table, source)


def _requirement(name: str, prefix: str, table: RequirementTable, source: Source) -> Iterator[tuple[str, Requirement]]:
    mask = table.mask
    if mask.points is None and mask.file is None and (mask.emitted is None or mask.allowed is None):
        return  # noted already
    try:
        built, remarks = mask.build()
    except ValueError as error:
        source.add(f"{prefix}.mask.allowed", str(error))
        return
    source.reading.remarks.extend(f"{name}: {remark}" for remark in remarks)
    field = table.field.build()
    drive = table.build_drive(field)
    if drive is not None:
        for message in outside_mask(drive, built):
            source.add(f"{prefix}.drive", message)
    yield prefix, Requirement(name, field, built, drive)


def _check_mask_source(mask: Mapping[str, Any], key: str, source: Source) -> None:
    given = [word for word in ("points", "file", "emitted", "allowed") if word in mask]
    if given not in (["points"], ["file"], ["emitted", "allowed"]):
        source.add(key, f"found {' and '.join(given) if given else 'no attenuation'}; {MASK_SOURCES}")


def _rules(data: object, source: Source) -> StackRules | None:
    if not isinstance(data, dict):
        return None
    table = validate(StackTable, data, source, "stack")
    return None if table is None else table.build()


def _search(data: object, source: Source) -> SearchSettings | None:
    if not isinstance(data, dict):
        return None
    table = validate(SearchTable, data, source, "search")
    for key, message in table.mistakes() if table is not None else ():
        source.add(f"search.{key}", message)
    return None if table is None else table.build()


def _layers(layers: list[tuple[str, float]] | None) -> Stack:
    return tuple(Sheet(name, thickness) for name, thickness in layers or ())


def _repeats(words: list[str] | tuple[str, ...]) -> list[tuple[int, str]]:
    first: dict[str, int] = {}
    return [(number, word) for number, word in enumerate(words) if first.setdefault(word, number) != number]
