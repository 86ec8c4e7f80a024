"""From a Problem to read-only tables on (sheet, frequency, line): all that a search evaluates again and again.

Rows are the pairs (requirement, frequency) of all requirements, one after the other, and lines the spectral lines of
all rows, one after the other. Objectives are integers (nanograms and micro-units of currency per m^2, picometres), so
that sums do not depend on the order of the sheets.
"""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass, replace
from functools import cached_property
from typing import TypeVar

import numpy as np
from numpy.typing import NDArray

from stackopt.blocks import SHEET, count_blocks, pack_blocks
from stackopt.model import media
from stackopt.physics import fields, line
from stackopt.physics.media import line_constants
from stackopt.problem import (
    Problem,
    Sheet,
    Stack,
)
from stackopt.rows import LARGEST_EXPONENT, Rows, compile_rows, read_only, remake_rows, row_scale

Real = NDArray[np.float64]
Integers = NDArray[np.int64]
Booleans = NDArray[np.bool_]
_Tables = TypeVar("_Tables")

NO_LIMIT = np.iinfo(np.int64).max // 4
MASS_UNIT = 1e12
"""Integer mass units in a kg/m^2 (nanograms)."""
COST_UNIT = 1e6
"""Integer cost units in a unit of currency per m^2."""
THICKNESS_UNIT = 1e12
"""Integer thickness units in a metre (picometres)."""

MARGIN_SLACK_DB = 1e-9
"""A margin this little below zero still counts as met, so that rounding cannot decide."""
QUADRATURE_ERROR_DB = 0.02
_AT_A_TIME = 4096
"""Lines of all frequencies of the sheets that are tabulated together: many small arrays cost more than a larger one."""


@dataclass(frozen=True)
class SheetTables:
    """Chain matrices of sheets in every line: bare for the first position, behind a bond for the following ones."""

    first: Real
    """(S * K * SHEET,) flat blocks."""
    following: Real
    """The same for sheets behind a bond; the same array where there is no bond."""
    first_scale: Real
    """(S, R)"""
    following_scale: Real
    """(S, R)"""


@dataclass(frozen=True)
class Sums:
    """Integer mass, cost and thickness that a sheet adds, alone or behind a bond, shape (S, 3)."""

    first: Integers
    following: Integers


@dataclass(frozen=True)
class Rules:
    """What may stand where: limits (3,) on the sums, faces (S,), neighbours (S, S) source side first."""

    max_sheets: int
    limits: Integers
    first: Booleans
    last: Booleans
    neighbours: Booleans


@dataclass(frozen=True)
class CompiledProblem:
    """A problem ready for the kernel."""

    problem: Problem
    sheets: Stack
    rows: Rows
    sums: Sums
    rules: Rules

    @cached_property
    def tables(self) -> SheetTables:
        """Chain matrices of the sheets, made when first needed."""
        return _sheet_tables(self.problem, self.rows, self.sheets)

    def with_sheets(self, sheets: Stack) -> CompiledProblem:
        """Return the same rows with other sheets, for example of thicknesses that are no gauges."""
        return _assemble(self.problem, self.rows, sheets)

    def with_room(self, thickest_m: float) -> CompiledProblem:
        """Return the same with an unshielded level that covers stacks up to the given thickness."""
        return (
            self
            if thickest_m <= self.rows.thickest_m
            else replace(self, rows=remake_rows(self.rows, self.problem, thickest_m))
        )

    def varied(self, problem: Problem, sheets: Stack) -> CompiledProblem:
        """Return the same rows for a problem that differs in the values of its materials only.

        The rules on what may stand where stay those of the nominal sheets, and do not suit the given ones.
        """
        rules = problem.rules
        same = (rules.source_side, rules.victim_side) == (
            self.problem.rules.source_side,
            self.problem.rules.victim_side,
        )
        rows = self.rows if same else remake_rows(self.rows, problem, self.rows.thickest_m)
        return CompiledProblem(problem, sheets, rows, _sums(problem, sheets), self.rules)


def compile_problem(
    problem: Problem,
    sheets: Stack | None = None,
    density: int = 1,
    error_db: float = QUADRATURE_ERROR_DB,
    extra_hz: Sequence[Sequence[float]] = (),
) -> CompiledProblem:
    """Tabulate a problem.

    Parameters
    ----------
    problem : Problem
    sheets : Stack, optional
        Sheets to tabulate; all that the problem allows when left out.
    density : int
        Multiplies the mask's points per decade.
    error_db : float
        Largest quadrature error on the sheets, dB.
    extra_hz : sequence of sequences
        Further frequencies for each requirement, Hz, within its mask.
    """
    chosen = problem.sheets if sheets is None else sheets
    trials = chosen + tuple(
        Sheet(name, end) for name in problem.continuous for end in problem.materials[name].thickness_range_m or ()
    )
    rows = compile_rows(problem, trials, density, error_db, extra_hz)
    return _assemble(problem, rows, chosen)


def _assemble(problem: Problem, rows: Rows, sheets: Stack) -> CompiledProblem:
    return CompiledProblem(problem, sheets, rows, _sums(problem, sheets), _rules(problem, sheets))


def _sheet_tables(problem: Problem, rows: Rows, sheets: Stack) -> SheetTables:
    bond = problem.rules.bond
    limit = LARGEST_EXPONENT * 0.75 / problem.rules.max_sheets
    bare, bonded = _Tabulator(len(sheets), rows), _Tabulator(len(sheets), rows)
    for lines in rows.spectra:
        chains = _Chains(problem, lines)
        step = max(1, _AT_A_TIME // lines.k.size)
        for start in range(0, len(sheets), step):
            part = sheets[start : start + step]
            chain, many = chains.of(part), chains.repeated(len(part))
            bare.add(start, len(part), chain, many, limit)
            if bond is not None:
                both = line.cascade((chains.of((bond,) * len(part)), chain), many.k.shape)
                bonded.add(start, len(part), both, many, limit)
        bare.next_requirement(lines)
        bonded.next_requirement(lines)
    first = bare.flat()
    following, scale = (first, bare.scale) if bond is None else (bonded.flat(), bonded.scale)
    return read_only(SheetTables(first, following, bare.scale, scale))


class _Tabulator:
    """Collects the blocks of every sheet, one requirement after the other."""

    def __init__(self, sheets: int, rows: Rows) -> None:
        self.table = np.empty((sheets, int(rows.row_block[-1]) * SHEET))
        self.scale = np.empty((sheets, len(rows.frequency_hz)))
        self.row = self.column = 0

    def add(self, start: int, count: int, chain: line.Chain, lines: fields.SpectralLines, limit: float) -> None:
        """Add sheets from number ``start`` on, which follow each other in the chain and the lines."""
        scale, factor = row_scale(chain.log_scale, lines, limit)
        blocks = pack_blocks(
            (chain.a * factor, 1.0),
            (chain.b / lines.terminal * factor, 0.0),
            (chain.c * lines.terminal * factor, 0.0),
            (chain.d * factor, 1.0),
        )
        here = slice(start, start + count)
        blocks, scale = blocks.reshape(count, -1), scale.reshape(count, -1)
        self.table[here, self.column : self.column + blocks.shape[1]] = blocks
        self.scale[here, self.row : self.row + scale.shape[1]] = scale

    def next_requirement(self, lines: fields.SpectralLines) -> None:
        frequencies, count = lines.k.shape
        self.row += frequencies
        self.column += frequencies * count_blocks(count) * SHEET

    def flat(self) -> Real:
        return self.table.reshape(-1)


class _Chains:
    """Chains of sheets in one field; the line constants of a material are computed once for all its gauges.

    Sheets are computed several at a time, the frequencies of one after those of the other.
    """

    def __init__(self, problem: Problem, lines: fields.SpectralLines) -> None:
        self.problem, self.lines = problem, lines
        self.constants: dict[str, tuple[line.Complex, line.Complex, line.Complex]] = {}

    def repeated(self, count: int) -> fields.SpectralLines:
        """Return the lines as often as there are sheets."""
        lines = self.lines
        k, terminal, weight = (np.tile(part, (count, 1)) for part in (lines.k, lines.terminal, lines.weight))
        return fields.SpectralLines(np.tile(lines.frequency_hz, count), k, terminal, weight, lines.polarisation)

    def of(self, sheets: Stack) -> line.Chain:
        u, series, shunt = (np.concatenate(parts) for parts in zip(*map(self._constants, sheets), strict=True))
        thickness = np.repeat([sheet.thickness_m for sheet in sheets], len(self.lines.frequency_hz))
        return line.layer(u, series, shunt, thickness[:, None])

    def _constants(self, sheet: Sheet) -> tuple[line.Complex, line.Complex, line.Complex]:
        if sheet.material not in self.constants:
            ((medium, _),) = media(self.problem, (sheet,), self.lines.frequency_hz)
            self.constants[sheet.material] = line_constants(
                medium, self.lines.k, self.lines.frequency_hz, self.lines.polarisation
            )
        return self.constants[sheet.material]


def sheet_sums(problem: Problem, sheet: Sheet) -> tuple[int, int, int]:
    """Mass, cost and thickness of a sheet alone, in integer units; the cost is 0 where the set gives no price."""
    material = problem.materials[sheet.material]
    price = material.price(sheet.thickness_m) or 0.0
    mass = material.mass_kg_per_m2(sheet.thickness_m)
    return (
        round(mass * MASS_UNIT),
        round(price * COST_UNIT),
        round(sheet.thickness_m * THICKNESS_UNIT),
    )


def _sums(problem: Problem, sheets: Stack) -> Sums:
    handling = np.array([0, round(problem.rules.cost_per_sheet * COST_UNIT), 0], dtype=np.int64)
    bond = np.array(sheet_sums(problem, problem.rules.bond) if problem.rules.bond else (0, 0, 0), dtype=np.int64)
    first = np.array([sheet_sums(problem, sheet) for sheet in sheets], dtype=np.int64).reshape(-1, 3) + handling
    return read_only(Sums(first, first + bond))


def _rules(problem: Problem, sheets: Stack) -> Rules:
    rules = problem.rules
    names = list(dict.fromkeys(sheet.material for sheet in sheets))
    of_sheet = np.array([names.index(sheet.material) for sheet in sheets], dtype=np.int64)
    limits = [
        NO_LIMIT if limit is None else round(limit * unit)
        for limit, unit in (
            (rules.max_mass_kg_per_m2, MASS_UNIT),
            (rules.max_cost_per_m2, COST_UNIT),
            (rules.max_thickness_m, THICKNESS_UNIT),
        )
    ]

    def faces(listed: tuple[str, ...] | None, side: Stack) -> Booleans:
        good = [
            (listed is None or name in listed) and all(_may_touch(problem, layer.material, name) for layer in side)
            for name in names
        ]
        return np.array(good, dtype=bool)[of_sheet]

    apart = rules.bond is not None and problem.materials[rules.bond.material].conductivity_s_per_m < 1.0
    pairs = [apart or _may_touch(problem, a, b) for a in names for b in names]
    touching = np.array(pairs, dtype=bool).reshape(len(names), len(names))
    return read_only(
        Rules(
            max_sheets=rules.max_sheets,
            limits=np.array(limits, dtype=np.int64),
            first=faces(rules.first, rules.source_side[-1:]),
            last=faces(rules.last, rules.victim_side[:1]),
            neighbours=touching[np.ix_(of_sheet, of_sheet)],
        )
    )


def _may_touch(problem: Problem, one: str, other: str) -> bool:
    limit = problem.rules.max_anodic_gap_v
    indices = (problem.materials[one].anodic_index_v, problem.materials[other].anodic_index_v)
    if limit is None or indices[0] is None or indices[1] is None:
        return True
    return abs(indices[0] - indices[1]) <= limit + 1e-9
