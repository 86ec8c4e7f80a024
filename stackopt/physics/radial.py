"""From the lines of a source back to the radius: flux density at the faces of layers, and loss per area inside them.

With v u0 and i u0/k^2 of `stackopt.physics.interior` as functions of u0,

    B_z = mu_0 int (v u0) J0(k rho) du0,      H_rho = int (i u0/k^2) k J1(k rho) du0,
    A = mu_0 int (v u0/k^2) k J1(k rho) du0.

The largest flux density of a layer is at one of its faces: in a uniform layer div grad B = kappa^2 B with kappa^2 =
j w mu (sigma + j w eps), so the square of B's peak is subharmonic as long as Re(kappa^2) >= 0, and such a function has
no maximum inside. Only where displacement current beats the losses (a layer of many times the permittivity, thick
against the wavelength in it) Re(kappa^2) < 0; `inner_planes` says how many planes inside must be looked at then.
"""

from __future__ import annotations

import functools
import math
from collections.abc import Sequence

import numpy as np
from numpy.typing import NDArray
from scipy import special

from stackopt.physics.interior import HIGHEST, ORDER, SourceLines, respond_to
from stackopt.physics.media import Medium, free_wavenumber
from stackopt.units import EPSILON_0, MU_0

Complex = NDArray[np.complex128]
Real = NDArray[np.float64]

_SUB_ORDER = 12
"""Gauss points of a part of a panel; the argument of the Bessel function grows by 6 over a part."""


def radii(radius_m: float, gap_m: float, per_decade: int = 16) -> Real:
    """Radii at which the largest field is looked for, m, rising from 0.

    Beyond the loop and the gap fields fall or, behind strongly permeable sheets, level off, so a logarithmic grid to a
    hundred times their size holds them; near the loop they change over the length of the gap.
    """
    size = max(radius_m, gap_m)
    wide = size * np.logspace(-1.0, 2.0, 3 * per_decade + 1)
    near = radius_m + gap_m * np.sinh(np.linspace(-1.8, 1.8, 2 * per_decade + 1)) if radius_m > 0.0 else wide[:0]
    found = np.unique(np.concatenate([[0.0], wide, near[near > 0.0]]))
    return np.asarray(found[np.append(True, np.diff(found) > 1e-3 * gap_m)])


class RadialRule:
    """Transforms from the lines of a source at one frequency to radii: field = lines @ matrix.

    Product integration: the part of an integrand that stands for the layers is taken as a polynomial on every panel,
    and the polynomial times J0(k rho) or k J1(k rho) is integrated with as many points as the radius needs. So few
    lines serve all radii.

    Parameters
    ----------
    lines : SourceLines
        Of one frequency.
    radii_m : ndarray, shape (radius,)
        Rising, from 0.
    """

    def __init__(self, lines: SourceLines, radii_m: Real) -> None:
        k0 = float(free_wavenumber(lines.frequency_hz)[0])
        self.radii_m = radii_m
        self.to_b = lines.u0[0]
        self.to_h = lines.u0[0] / lines.k[0] ** 2
        turned = np.where(np.arange(lines.k.shape[1]) < ORDER, -1j, 1.0)  # du0 of the propagating lines
        self.to_b, self.to_h = self.to_b * turned, self.to_h * turned
        self.j0, self.j1 = np.empty((lines.k.shape[1], len(radii_m))), np.empty((lines.k.shape[1], len(radii_m)))
        for column, rho in enumerate(radii_m):
            sub = _SubNodes(lines.edges, float(rho))
            k = np.sqrt(k0**2 + sub.u**2)
            back = _SubNodes(np.array([0.0, k0]), float(rho))
            k_back = np.sqrt(np.maximum(k0**2 - back.u**2, 0.0))
            self.j0[:, column] = np.append(back.integrals(special.j0(k_back * rho)), sub.integrals(special.j0(k * rho)))
            self.j1[:, column] = np.append(
                back.integrals(k_back * special.j1(k_back * rho)), sub.integrals(k * special.j1(k * rho))
            )

    def b_z(self, v: Complex) -> Complex:
        """Normal flux density of line voltages, shape (..., line) to (..., radius), T for unit drive."""
        return MU_0 * _product(v * self.to_b, self.j0)

    def h_rho(self, i: Complex) -> Complex:
        """Tangential field of line currents, shape (..., line) to (..., radius), A/m for unit drive."""
        return _product(i * self.to_h, self.j1)

    def a_phi(self, v: Complex) -> Complex:
        """Vector potential of line voltages, shape (..., line) to (..., radius), V s/m for unit drive."""
        return MU_0 * _product(v * self.to_h, self.j1)


def _product(lines: Complex, matrix: Real) -> Complex:
    return np.asarray(lines.real @ matrix + 1j * (lines.imag @ matrix))


class _SubNodes:
    """Points inside panels that resolve a Bessel function of a radius, and integrals of the panels' polynomials."""

    def __init__(self, edges: Real, rho: float) -> None:
        width = np.diff(edges)[:, None]
        x, self.basis = _parts(max(1, math.ceil(float(np.max(width)) * rho / 6.0)))
        self.u = edges[:-1, None] + width * x
        self.width = width

    def integrals(self, values: Real) -> Real:
        """Integrals of values times each line's polynomial, shape (panel, point) to (line,)."""
        return np.asarray(self.width * (values @ self.basis)).ravel()


@functools.lru_cache(maxsize=256)
def _parts(count: int) -> tuple[Real, Real]:
    """Points of a panel [0, 1] in equal parts, (point,); weight times Lagrange polynomial there, (point, line)."""
    x, w = np.polynomial.legendre.leggauss(_SUB_ORDER)
    points = ((np.arange(count)[:, None] + 0.5 * (1.0 + x)) / count).ravel()
    weights = np.tile(0.5 * w / count, count)
    nodes = np.polynomial.legendre.leggauss(ORDER)[0]
    values = np.polynomial.legendre.legvander(2.0 * points - 1.0, ORDER - 1)
    lagrange = values @ np.linalg.inv(np.polynomial.legendre.legvander(nodes, ORDER - 1))
    return points, weights[:, None] * lagrange


def peak_of(b_z: Complex, b_rho: Complex) -> Real:
    """Largest length over a period of a vector of two complex amplitudes: sqrt((|B|^2 + |B.B|)/2)."""
    square = np.abs(b_z) ** 2 + np.abs(b_rho) ** 2
    return np.asarray(np.sqrt(0.5 * (square + np.abs(b_z**2 + b_rho**2))))


def largest(values: Real, radii_m: Real) -> Real:
    """Largest value over the radii (last axis), by the parabola through the largest and its neighbours."""
    at = np.clip(np.argmax(values, axis=-1), 1, len(radii_m) - 2)
    y = [np.take_along_axis(values, (at + shift)[..., None], -1)[..., 0] for shift in (-1, 0, 1)]
    x = [radii_m[at + shift] for shift in (-1, 0, 1)]
    low, high = (y[1] - y[0]) / (x[1] - x[0]), (y[2] - y[1]) / (x[2] - x[1])
    curvature = (high - low) / (x[2] - x[0])
    safe = np.where(curvature < 0.0, curvature, -1.0)
    slope = low - safe * (x[1] - x[0])  # at the first of the three
    along = np.clip(-slope / (2.0 * safe), 0.0, x[2] - x[0])
    top = y[0] + along * (slope + safe * along)
    top = np.where(curvature < 0.0, np.minimum(top, 1.05 * y[1]), 0.0)
    return np.asarray(np.maximum(np.max(values, axis=-1), top))


def inner_planes(medium: Medium, thickness_m: float, frequency_hz: float) -> int:
    """Planes inside a layer at which flux is looked for besides the faces; 0 unless displacement current prevails."""
    omega = 2.0 * np.pi * frequency_hz
    kappa_squared = (
        1j * omega * MU_0 * medium.mu_r * (medium.conductivity_s_per_m + 1j * omega * EPSILON_0 * medium.permittivity)
    )
    phase = thickness_m * math.sqrt(max(0.0, -float(np.min(kappa_squared.real))))
    return 0 if phase < 0.2 else min(2 * math.ceil(phase / 0.8) - 1, 63)


def peak_flux(rule: RadialRule, v: Complex, i: Complex, mu_r: complex | Complex) -> Real:
    """Largest flux density over radius on planes inside a medium, shape (..., line) to (...), T for unit drive."""
    b_rho = MU_0 * np.asarray(mu_r)[..., None] * rule.h_rho(i)
    return largest(peak_of(rule.b_z(v), b_rho), rule.radii_m)


def loss_per_area(lines: SourceLines, rule: RadialRule, layers: Sequence[tuple[Medium, float]]) -> list[Real]:
    """Power lost in each layer per area at every radius of a rule, for unit drive.

    The density sigma |E|^2/2 + w mu_0 mu'' |H|^2/2 integrated through the layer by Gauss panels that grow from both
    faces with the skin depth; nothing is taken from the power through the faces, so that the two can be compared.

    Parameters
    ----------
    lines : SourceLines
        Of one frequency.
    rule : RadialRule
        Of the same lines.
    layers : sequence of (Medium, thickness in m)
        Source side first.

    Returns
    -------
    list of ndarray, shape (radius,)
        W/m^2, one array for each layer.
    """
    points = [_depths(lines, medium, d) for medium, d in layers]
    cut = [
        (medium, float(part))
        for (medium, d), (depth, _) in zip(layers, points, strict=True)
        for part in np.diff(depth, prepend=0.0, append=d)
    ]
    response = respond_to(lines, cut)
    omega = 2.0 * np.pi * float(lines.frequency_hz[0])
    losses, begin = [], 1
    for (medium, _), (depth, weight) in zip(layers, points, strict=True):
        planes = slice(begin, begin + len(depth))
        v, i = response.v[planes, 0], response.i[planes, 0]
        mu = complex(medium.mu_r[0])
        electric = medium.conductivity_s_per_m * omega**2 * np.abs(rule.a_phi(v)) ** 2
        fields = np.abs(rule.h_rho(i)) ** 2 + np.abs(rule.b_z(v) / (MU_0 * mu)) ** 2
        losses.append(weight @ (0.5 * electric - 0.5 * omega * MU_0 * mu.imag * fields))
        begin += len(depth) + 1
    return losses


def _depths(lines: SourceLines, medium: Medium, thickness_m: float) -> tuple[Real, Real]:
    """Gauss points through a layer and their weights, m."""
    omega = 2.0 * np.pi * float(lines.frequency_hz[0])
    decay = np.sqrt(1j * omega * MU_0 * medium.mu_r[0] * medium.conductivity_s_per_m).real
    first = min(1.0 / max(float(decay), 1e-9), 3.0 / float(lines.edges[-1]) * HIGHEST)
    edges = [0.0]
    while edges[-1] < 0.5 * thickness_m:
        edges.append(min(0.5 * thickness_m, 3.0 * edges[-1] if edges[-1] else 0.7 * first))
    both = np.unique(np.concatenate([edges, thickness_m - np.array(edges)]))
    x, w = np.polynomial.legendre.leggauss(8)
    half = 0.5 * np.diff(both)[:, None]
    return (both[:-1, None] + half * (1.0 + x)).ravel(), (half * w).ravel()
