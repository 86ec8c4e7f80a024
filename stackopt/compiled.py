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
from numpy.polynomial import chebyshev
from numpy.typing import NDArray

from stackopt.blocks import SHEET, count_blocks, pack_blocks
from stackopt.model import choose_rule, media, spectral_lines
from stackopt.physics import fields, line
from stackopt.physics.media import air, line_constants
from stackopt.problem import (
    CoaxialDipoles,
    CoaxialLoops,
    ElectricNearField,
    Field,
    MagneticNearField,
    Problem,
    Sheet,
    Stack,
)

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
_LARGEST_EXPONENT = 320.0  # nepers between the lines of a row; its square stays inside the range of doubles

_AT_A_TIME = 4096
"""Lines of all frequencies of the sheets that are tabulated together: many small arrays cost more than a larger one."""


@dataclass(frozen=True)
class Quadrature:
    """The rule chosen for a requirement, and its largest error on the problem's own sheets, dB."""

    lines: int
    error_db: float


@dataclass(frozen=True)
class Rows:
    """Rows and lines of all requirements; independent of the sheets.

    Shapes: R rows, K blocks of lines; see `stackopt.blocks` for the layout of ``start`` and ``ending``.
    """

    spectra: tuple[fields.SpectralLines, ...]
    quadrature: tuple[Quadrature, ...]
    requirement: Integers
    """(R,) number of the requirement."""
    frequency_hz: Real
    """(R,)"""
    required_db: Real
    """(R,) mask with its margin."""
    row_block: Integers
    """(R + 1,) first block of each row."""
    start: Real
    """(K * STATE,) flat blocks."""
    ending: Real
    """(K * ENDING,) flat blocks."""
    fixed_scale: Real
    """(R,)"""
    open_coefficients: Real
    """(R, C) Chebyshev coefficients of the unshielded level, dB."""
    reach_m: Real
    """(R,) length that scales the stack thickness."""
    thickest_m: float
    """Largest stack thickness that the unshielded level covers."""

    def mapped_thickness(self, thickness_m: NDArray[np.floating]) -> Real:
        """Map stack thicknesses, shape (stack,), to the Chebyshev variable of every row, shape (stack, row)."""
        position = np.log1p(np.asarray(thickness_m)[:, None] / self.reach_m)
        return np.asarray(2.0 * position / np.log1p(self.thickest_m / self.reach_m) - 1.0)

    def open_level_db(self, thickness_m: NDArray[np.floating]) -> Real:
        """Unshielded level with air of the given thicknesses in the stack's place, dB, shape (stack, row)."""
        x = self.mapped_thickness(thickness_m)
        return np.asarray(chebyshev.chebval(x, self.open_coefficients.T[:, None, :], tensor=False))


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
        return self if thickest_m <= self.rows.thickest_m else replace(self, rows=self._rows(self.problem, thickest_m))

    def varied(self, problem: Problem, sheets: Stack) -> CompiledProblem:
        """Return the same rows for a problem that differs in the values of its materials only.

        The rules on what may stand where stay those of the nominal sheets, and do not suit the given ones.
        """
        rules = problem.rules
        same = (rules.source_side, rules.victim_side) == (
            self.problem.rules.source_side,
            self.problem.rules.victim_side,
        )
        rows = self.rows if same else self._rows(problem, self.rows.thickest_m)
        return CompiledProblem(problem, sheets, rows, _sums(problem, sheets), self.rules)

    def _rows(self, problem: Problem, thickest_m: float) -> Rows:
        """Return the rows with what depends on the fixed layers and the largest thickness made anew."""
        rows = self.rows
        sides = [_fixed_sides(problem, lines) for lines in rows.spectra]
        opens = [
            _open_level(problem, lines, _reach_m(requirement.field, thickest_m), thickest_m)
            for lines, requirement in zip(rows.spectra, problem.requirements, strict=True)
        ]
        return _read_only(
            replace(
                rows,
                start=np.concatenate([start for start, _, _ in sides]),
                ending=np.concatenate([ending for _, ending, _ in sides]),
                fixed_scale=np.concatenate([scale for _, _, scale in sides]),
                open_coefficients=_stacked([series for series, _ in opens]),
                reach_m=np.concatenate([np.full(len(series), reach) for series, reach in opens]),
                thickest_m=thickest_m,
            )
        )


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
    rows = _compile_rows(problem, trials, density, error_db, extra_hz)
    return _assemble(problem, rows, chosen)


def _assemble(problem: Problem, rows: Rows, sheets: Stack) -> CompiledProblem:
    return CompiledProblem(problem, sheets, rows, _sums(problem, sheets), _rules(problem, sheets))


def _compile_rows(
    problem: Problem, sheets: Stack, density: int, error_db: float, extra_hz: Sequence[Sequence[float]]
) -> Rows:
    thickest = thickest_stack_m(problem, sheets)
    spectra, quadrature, opens = [], [], []
    for number, requirement in enumerate(problem.requirements):
        grid = requirement.mask.grid_hz(density)
        if number < len(extra_hz):
            grid = np.union1d(grid, np.asarray(extra_hz[number], dtype=float))
        rule, error = choose_rule(problem, requirement.field, grid, sheets, error_db)
        lines = spectral_lines(requirement.field, grid, rule)
        spectra.append(lines)
        quadrature.append(Quadrature(lines.k.shape[1], error))
        opens.append(_open_level(problem, lines, _reach_m(requirement.field, thickest), thickest))
    sides = [_fixed_sides(problem, lines) for lines in spectra]
    counts = np.concatenate([np.full(len(lines.frequency_hz), count_blocks(lines.k.shape[1])) for lines in spectra])
    numbers = np.concatenate([np.full(len(lines.frequency_hz), n) for n, lines in enumerate(spectra)])
    return _read_only(
        Rows(
            spectra=tuple(spectra),
            quadrature=tuple(quadrature),
            requirement=numbers,
            frequency_hz=np.concatenate([lines.frequency_hz for lines in spectra]),
            required_db=np.concatenate(
                [problem.requirements[n].mask.required_db(lines.frequency_hz) for n, lines in enumerate(spectra)]
            ),
            row_block=np.concatenate([[0], np.cumsum(counts)]).astype(np.int64),
            start=np.concatenate([start for start, _, _ in sides]),
            ending=np.concatenate([ending for _, ending, _ in sides]),
            fixed_scale=np.concatenate([scale for _, _, scale in sides]),
            open_coefficients=_stacked([series for series, _ in opens]),
            reach_m=np.concatenate([np.full(len(series), reach) for series, reach in opens]),
            thickest_m=thickest,
        )
    )


def thickest_stack_m(problem: Problem, sheets: Sequence[Sheet]) -> float:
    """Largest thickness that a stack of the sheets can have under the problem's rules, m."""
    rules = problem.rules
    ends = [material.thickness_range_m[1] for material in problem.materials.values() if material.thickness_range_m]
    thickest = max([sheet.thickness_m for sheet in sheets] + ends)
    bond = rules.bond.thickness_m if rules.bond else 0.0
    total = rules.max_sheets * thickest + (rules.max_sheets - 1) * bond
    return total if rules.max_thickness_m is None else min(total, max(rules.max_thickness_m, thickest))


def _reach_m(field: Field, thickest_m: float) -> float:
    if isinstance(field, CoaxialLoops | CoaxialDipoles):
        return field.gap_sum_m
    if isinstance(field, MagneticNearField | ElectricNearField):
        return field.distance_m
    return thickest_m


def _open_level(
    problem: Problem, lines: fields.SpectralLines, longest_m: float, thickest_m: float
) -> tuple[Real, float]:
    """Unshielded level 20 log10 |field|, dB, as Chebyshev series in log(1 + thickness/reach), and that reach, m.

    The series have the shape (R, C). The reach is the length by which the field changes: the given one, unless fixed
    layers stand on both sides; between two permeable ones the first micrometres already matter.
    """
    degrees, reach_m = [6, 10, 16, 24, 40, 64, 96], longest_m
    if problem.rules.source_side and problem.rules.victim_side:
        few = _some_rows(lines, 6)
        reaches = [longest_m * 10.0**-n for n in (0, 2, 4, 6)]
        while True:
            errors = [_open_series(problem, few, reach, thickest_m, degrees[0])[1] for reach in reaches]
            reach_m = reaches[int(np.argmin(errors))]
            if min(errors) < 1.0 or len(degrees) == 1:
                break
            degrees = degrees[1:]
    for degree in degrees:
        series, error = _open_series(problem, lines, reach_m, thickest_m, degree)
        if error < 1.0:
            break
    return series, reach_m


def _some_rows(lines: fields.SpectralLines, count: int) -> fields.SpectralLines:
    """Return the spectral lines of a few frequencies from the first to the last."""
    rows = np.unique(np.linspace(0, len(lines.frequency_hz) - 1, count).astype(int))
    arrays = {name: getattr(lines, name)[rows] for name in ("frequency_hz", "k", "terminal", "weight")}
    return replace(lines, **arrays)


def _open_series(
    problem: Problem, lines: fields.SpectralLines, reach_m: float, thickest_m: float, degree: int
) -> tuple[Real, float]:
    """Return the unshielded level's series of a degree, shape (R, C), and its error over the allowed one."""
    source = media(problem, problem.rules.source_side, lines.frequency_hz)
    victim = media(problem, problem.rules.victim_side, lines.frequency_hz)

    def level_db(x: Real) -> Real:
        thickness = reach_m * np.expm1(0.5 * (x + 1.0) * np.log1p(thickest_m / reach_m))
        levels = []
        for d in thickness:
            value, scale = fields.transmitted(lines, [*source, (air(lines.frequency_hz), float(d)), *victim])
            levels.append(line.DB_PER_NEPER * (np.log(np.abs(value)) - scale))
        return np.array(levels)

    nodes, probe = chebyshev.chebpts1(degree + 1), np.linspace(-1.0, 1.0, 12)
    series, exact = chebyshev.chebfit(nodes, level_db(nodes), degree), level_db(probe)
    error = np.max(np.abs(chebyshev.chebval(probe, series) - exact.T))
    return np.ascontiguousarray(series.T), float(error / (1e-11 * np.max(np.abs(exact), initial=1.0)))


def _stacked(coefficients: Sequence[Real]) -> Real:
    """Put the series of all requirements into one array, as wide as the longest of them."""
    widest = max(series.shape[1] for series in coefficients)
    return np.concatenate([np.pad(series, ((0, 0), (0, widest - series.shape[1]))) for series in coefficients])


def _fixed_sides(problem: Problem, lines: fields.SpectralLines) -> tuple[Real, Real, Real]:
    """Planes of (p, q) behind the source side, planes of (w, e) of the victim side, and their log scale per row."""
    shape = lines.k.shape
    source, victim = (
        line.cascade(
            (
                line.medium_chain(medium, d, lines.k, lines.frequency_hz, lines.polarisation)
                for medium, d in media(problem, side, lines.frequency_hz)
            ),
            shape,
        )
        for side in (problem.rules.source_side, problem.rules.victim_side)
    )
    source_scale, source_factor = _row_scale(source.log_scale, lines, _LARGEST_EXPONENT / 8)
    victim_scale, victim_factor = _row_scale(victim.log_scale, lines, _LARGEST_EXPONENT / 8)
    p = (source.a + lines.terminal * source.c) * source_factor
    q = (source.b / lines.terminal + source.d) * source_factor
    straight = (victim.a + victim.b / lines.terminal) * victim_factor
    crossed = (victim.c * lines.terminal + victim.d) * victim_factor
    ending = pack_blocks((2.0 * lines.weight / straight, 0.0), (crossed / straight, 1.0))
    return pack_blocks((p, 1.0), (q, 1.0)), ending, source_scale + victim_scale


def _sheet_tables(problem: Problem, rows: Rows, sheets: Stack) -> SheetTables:
    bond = problem.rules.bond
    limit = _LARGEST_EXPONENT * 0.75 / problem.rules.max_sheets
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
    return _read_only(SheetTables(first, following, bare.scale, scale))


class _Tabulator:
    """Collects the blocks of every sheet, one requirement after the other."""

    def __init__(self, sheets: int, rows: Rows) -> None:
        self.table = np.empty((sheets, int(rows.row_block[-1]) * SHEET))
        self.scale = np.empty((sheets, len(rows.frequency_hz)))
        self.row = self.column = 0

    def add(self, start: int, count: int, chain: line.Chain, lines: fields.SpectralLines, limit: float) -> None:
        """Add sheets from number ``start`` on, which follow each other in the chain and the lines."""
        scale, factor = _row_scale(chain.log_scale, lines, limit)
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


def _row_scale(log_scale: Real, lines: fields.SpectralLines, limit: float) -> tuple[Real, Real]:
    """Split a scale per line into one per row and a factor per line.

    The row takes the least scale among the lines that carry weight. Lines that differ from it by more than ``limit``
    nepers are clipped: their share of the field is below exp(-limit) of it either way, or their weight is nothing.
    """
    weight = np.abs(lines.weight)
    heavy = weight > 1e-3 * np.max(weight, axis=1, keepdims=True)
    scale = np.min(np.where(heavy, log_scale, np.inf), axis=1)
    return scale, np.exp(np.clip(log_scale - scale[:, None], -limit, limit))


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
    return _read_only(Sums(first, first + bond))


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
    return _read_only(
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


def _read_only(tables: _Tables) -> _Tables:
    for value in vars(tables).values():
        if isinstance(value, np.ndarray):
            value.setflags(write=False)
    return tables
