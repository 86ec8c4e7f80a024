"""Many stacks at one frequency of a source: flux and heat of every layer, and the reflection that the source sees."""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from stackopt.errors import InputError
from stackopt.model import media
from stackopt.physics import interior, line, radial
from stackopt.physics.media import Medium, air, line_constants
from stackopt.problem import CoaxialDipoles, CoaxialLoops, Field, Problem, Sheet
from stackopt.units import MU_0

Real = NDArray[np.float64]
Complex = NDArray[np.complex128]
Integers = NDArray[np.int64]

Key = tuple[Sheet, float]
"""A layer, and what a strong field adds to its relative permeability."""
_MOST_KEPT = 4000
_PER_DECADE = 12


def source_of(field: Field) -> tuple[float, float]:
    """Radius and gap of a field's source, m.

    Raises
    ------
    InputError
        For a field without a source, or one that lies too close to the first face for a thin wire.
    """
    if not isinstance(field, CoaxialLoops | CoaxialDipoles):
        raise InputError(f"a {field.kind} has no source; only coaxial loops and coaxial dipoles have one")
    radius = field.source_radius_m if isinstance(field, CoaxialLoops) else 0.0
    mistake = interior.gap_mistake(radius, field.source_gap_m)
    if mistake:
        raise InputError(mistake)
    return radius, field.source_gap_m


@dataclass(frozen=True)
class Solved:
    """Flux density (T) and heat (W) of layers, zero where a stack has none, shape (stack, layer), for unit drive.

    ``reflection`` has the shape (stack, line).
    """

    flux_t: Real
    heat_w: Real
    reflection: Complex


class DrivePoint:
    """Solver for one frequency of a field's source, unit drive; keeps the layers that it has met."""

    def __init__(self, problem: Problem, field: Field, frequency_hz: float) -> None:
        radius, gap = source_of(field)
        self.problem = problem
        self.frequency_hz = np.array([frequency_hz])
        self.lines = interior.source_lines(self.frequency_hz, radius, gap)
        self.k = self.lines.k.astype(complex)
        self.rule = radial.RadialRule(self.lines, radial.radii(radius, gap, _PER_DECADE))
        self._kept: dict[Key, tuple[line.Chain, int, complex]] = {}

    def layer(self, key: Key) -> tuple[Medium, float]:
        """Medium and thickness of a layer."""
        ((medium, thickness),) = media(self.problem, key[:1], self.frequency_hz)
        return Medium(medium.mu_r + key[1], medium.conductivity_s_per_m, medium.permittivity), thickness

    def _pieces(self, key: Key) -> tuple[line.Chain, int, complex]:
        """Chain of an equal part of a layer, shape (line,), the number of parts, and the permeability."""
        if key not in self._kept:
            medium, thickness = self.layer(key)
            parts = 1 + radial.inner_planes(medium, thickness, float(self.frequency_hz[0]))
            chain = line.medium_chain(medium, thickness / parts, self.k, self.frequency_hz, "TE")
            one = line.Chain(chain.a[0], chain.b[0], chain.c[0], chain.d[0], chain.log_scale[0])
            self._kept[key] = one, parts, complex(medium.mu_r[0])
        return self._kept[key]

    def solve(self, layers: Sequence[Sequence[Key]], every_flux: bool = True) -> Solved:
        """Solve assemblies, each given by its layers from the source side.

        Without ``every_flux`` only that of layers with a known saturation is computed.
        """
        if len(self._kept) > _MOST_KEPT:
            self._kept.clear()
        known = {key: self._pieces(key) for row in layers for key in row}
        number = {key: n for n, key in enumerate(known, start=1)}
        rows = [[(number[key], n) for n, key in enumerate(row) for _ in range(known[key][1])] for row in layers]
        code = _padded([[one for one, _ in row] for row in rows], 0)
        owner = _padded([[one for _, one in row] for row in rows], -1)
        table = _stacked([_nothing(self.lines), *(chain for chain, _, _ in known.values())])
        steps = [_rows(table, code[:, n]) for n in range(code.shape[1])]
        response = interior.respond(steps, self.lines.k[0], self.lines.u0[0], self.lines.launched[0])
        shape = len(layers), max(map(len, layers))
        power = interior.plane_power(self.lines, response)
        heat = np.zeros(shape)
        lossy = np.array([False, *(self._is_lossy(key) for key in known)])
        for n in range(code.shape[1]):
            there = np.flatnonzero(lossy[code[:, n]])
            heat[there, owner[there, n]] += power[n, there] - power[n + 1, there]
        flux = np.zeros(shape)
        wanted = np.array(
            [False, *(self.problem.materials[sheet.material].saturation_t is not None for sheet, _ in known)]
        )
        mu = np.array([1.0, *(value for _, _, value in known.values())])
        self._add_flux(flux, response, mu[code], np.where(every_flux | wanted[code], owner, -1))
        return Solved(flux, np.maximum(heat, 0.0), response.reflection)

    def _is_lossy(self, key: Key) -> bool:
        return bool(self.problem.materials[key[0].material].conductivity_s_per_m > 0.0 or self._kept[key][2].imag < 0.0)

    def _add_flux(self, flux: Real, response: interior.Response, mu: Complex, owner: Integers) -> None:
        """Raise the flux of the layers that own pieces to the largest on their faces."""
        stack, piece = np.nonzero(owner >= 0)
        faces, back = np.unique(
            np.stack([np.append(piece, piece + 1), np.append(stack, stack)]), axis=1, return_inverse=True
        )
        b_z = self.rule.b_z(response.v[faces[0], faces[1]])
        h_rho = self.rule.h_rho(response.i[faces[0], faces[1]])
        for side in np.split(back.ravel(), 2):
            peak = radial.peak_of(b_z[side], MU_0 * mu[stack, piece, None] * h_rho[side])
            np.maximum.at(flux, (stack, owner[stack, piece]), radial.largest(peak, self.rule.radii_m))

    def open_reflection(self, thickness_m: Real) -> Complex:
        """Reflection of the fixed layers with air of some thicknesses in the stack's place.

        Shape (stack, line), or (1, line) where the thickness does not matter.
        """
        rules = self.problem.rules
        if not rules.victim_side:  # air goes on for ever
            thickness_m = np.zeros(1)
        source, victim = (
            [_nothing(self.lines), *(self._whole(sheet) for sheet in side)]
            for side in (rules.source_side, rules.victim_side)
        )
        u0 = self.lines.u0[0]
        u, series, shunt = line_constants(air(self.frequency_hz), self.k, self.frequency_hz, "TE")
        gap = line.layer(u, series, shunt, thickness_m[:, None])
        response = interior.respond([*source, gap, *victim], self.lines.k[0], u0, self.lines.launched[0])
        return response.reflection

    def _whole(self, sheet: Sheet) -> line.Chain:
        chain = line.medium_chain(*self.layer((sheet, 0.0)), self.k, self.frequency_hz, "TE")
        return line.Chain(chain.a[0], chain.b[0], chain.c[0], chain.d[0], chain.log_scale[0])

    def inductance_change(self, solved: Solved, stack_thickness_m: Real) -> Complex:
        """Complex change of the source's inductance by the stack, H for one turn squared, shape (stack,)."""
        change = solved.reflection - self.open_reflection(stack_thickness_m)
        return interior.reflected_inductance(self.lines, change)


def _nothing(lines: interior.SourceLines) -> line.Chain:
    one, zero = np.ones(lines.k.shape[1], dtype=complex), np.zeros(lines.k.shape[1], dtype=complex)
    return line.Chain(one, zero, zero, one, zero.real)


def _padded(rows: Sequence[Sequence[int]], empty: int) -> Integers:
    table = np.full((len(rows), max(map(len, rows), default=0)), empty, dtype=np.int64)
    for number, row in enumerate(rows):
        table[number, : len(row)] = row
    return table


def _stacked(chains: Sequence[line.Chain]) -> line.Chain:
    a, b, c, d = (np.array([getattr(chain, name) for chain in chains]) for name in "abcd")
    return line.Chain(a, b, c, d, np.array([chain.log_scale for chain in chains]))


def _rows(table: line.Chain, code: Integers) -> line.Chain:
    return line.Chain(table.a[code], table.b[code], table.c[code], table.d[code], table.log_scale[code])
