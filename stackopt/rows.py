"""Rows and lines of a problem: what the tables of the kernel hold that does not depend on the sheets.

Rows are the pairs (requirement, frequency) of all requirements, one after the other, and lines the spectral lines of
all rows, one after the other.
"""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass, replace
from typing import TypeVar

import numpy as np
from numpy.polynomial import chebyshev
from numpy.typing import NDArray

from stackopt.blocks import count_blocks, pack_blocks
from stackopt.model import choose_rule, media, spectral_lines
from stackopt.physics import fields, line
from stackopt.physics.media import air
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
_Tables = TypeVar("_Tables")

LARGEST_EXPONENT = 320.0  # nepers between the lines of a row; its square stays inside the range of doubles


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


def compile_rows(
    problem: Problem, sheets: Stack, density: int, error_db: float, extra_hz: Sequence[Sequence[float]]
) -> Rows:
    """Make the rows of a problem; the quadrature is chosen for the sheets. See `stackopt.compiled.compile_problem`."""
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
    return read_only(
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


def remake_rows(rows: Rows, problem: Problem, thickest_m: float) -> Rows:
    """Return the rows with what depends on the fixed layers and the largest thickness made anew."""
    sides = [_fixed_sides(problem, lines) for lines in rows.spectra]
    opens = [
        _open_level(problem, lines, _reach_m(requirement.field, thickest_m), thickest_m)
        for lines, requirement in zip(rows.spectra, problem.requirements, strict=True)
    ]
    return read_only(
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
    source_scale, source_factor = row_scale(source.log_scale, lines, LARGEST_EXPONENT / 8)
    victim_scale, victim_factor = row_scale(victim.log_scale, lines, LARGEST_EXPONENT / 8)
    p = (source.a + lines.terminal * source.c) * source_factor
    q = (source.b / lines.terminal + source.d) * source_factor
    straight = (victim.a + victim.b / lines.terminal) * victim_factor
    crossed = (victim.c * lines.terminal + victim.d) * victim_factor
    ending = pack_blocks((2.0 * lines.weight / straight, 0.0), (crossed / straight, 1.0))
    return pack_blocks((p, 1.0), (q, 1.0)), ending, source_scale + victim_scale


def row_scale(log_scale: Real, lines: fields.SpectralLines, limit: float) -> tuple[Real, Real]:
    """Split a scale per line into one per row and a factor per line.

    The row takes the least scale among the lines that carry weight. Lines that differ from it by more than ``limit``
    nepers are clipped: their share of the field is below exp(-limit) of it either way, or their weight is nothing.
    """
    weight = np.abs(lines.weight)
    heavy = weight > 1e-3 * np.max(weight, axis=1, keepdims=True)
    scale = np.min(np.where(heavy, log_scale, np.inf), axis=1)
    return scale, np.exp(np.clip(log_scale - scale[:, None], -limit, limit))


def read_only(tables: _Tables) -> _Tables:
    """Make the arrays of a table read-only, and return it."""
    for value in vars(tables).values():
        if isinstance(value, np.ndarray):
            value.setflags(write=False)
    return tables
