"""Inside a stack: fields and flux in every layer, power lost there, and what the stack does to its source.

The source is a loop of radius a (or a dipole) on the axis, a gap g before the first face. Its wave is written in the
transverse wavenumber k by the azimuthal vector potential A = mu_0 v and the radial field H = i, both as J1 transforms,

    A(rho) = mu_0 int v(k) J1(k rho) dk,  H_rho(rho) = int i(k) J1(k rho) dk,  B_z(rho) = mu_0 int v(k) k J0(k rho) dk,

so that v and i are voltage and current of the TE line of `stackopt.physics.media` (dv/dz = -mu_r i) and 0 Hz is an
ordinary case. The loop launches v = s/u0 with s = (I a/2) J1(k a) k e^{-u0 g}, a dipole s = m k^2/(4 pi) e^{-u0 g}
(C. V. Dodd and W. E. Deeds, J. Appl. Phys. 39, 1968; J. R. Wait, Geo-Electromagnetism, 1982).

Powers are integrals over real k (Parseval), so everything here runs on the real axis. The variable is u0 =
sqrt(k^2 - k0^2) itself: (k/u0) dk = du0 takes the branch point away, the path being u0 = j k0 -> 0 -> infinity.
"""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray
from scipy import special

from stackopt.physics.line import Chain, medium_chain
from stackopt.physics.media import Medium, free_wavenumber
from stackopt.units import MU_0

Complex = NDArray[np.complex128]
Real = NDArray[np.float64]

ORDER = 8
"""Nodes of a panel."""
LOWEST = 1e-5
"""First edge of the panels over 1/(a + g); strong shields pass wavenumbers that small only."""
HIGHEST = 16.0
"""Last edge of the panels times g: the field on the first face lacks 2e-5 of itself."""
WIDEST_LOOP = 50.0
"""Largest loop radius over source gap: nearer to a wire its own thickness matters, and panels become too many."""


def gap_mistake(radius_m: float, gap_m: float) -> str:
    """Say what is wrong with a source's gap for fields inside layers; empty where nothing is."""
    least = radius_m / WIDEST_LOOP
    if gap_m > 0.0 and gap_m >= least:
        return ""
    bound = f"at least {least * 1e3:.4g} mm, a fiftieth of the radius" if radius_m > 0.0 else "above 0 mm"
    return (
        f"found a source_gap of {gap_m * 1e3:.4g} mm, at which the field on the first face has no bound; "
        f"write the distance to the middle of the wire, {bound}"
    )


@dataclass(frozen=True)
class SourceLines:
    """Wavenumbers of a source at some frequencies, for a drive of one ampere-turn or one A m^2 peak.

    Parameters
    ----------
    frequency_hz : ndarray, shape (frequency,)
    edges : ndarray, shape (panel + 1,)
        Edges of the panels of evanescent waves in u0, 1/m; one more panel before them holds the propagating waves.
    k : ndarray, shape (frequency, line)
        Transverse wavenumbers, rad/m.
    u0 : ndarray, complex, shape (frequency, line)
        sqrt(k^2 - k0^2), 1/m.
    step : ndarray, complex, shape (frequency, line)
        du0: the weight of a line in an integral over (k/u0) dk.
    launched : ndarray, complex, shape (frequency, line)
        s of the module's text, m (loops) or 1/m^2 (dipoles).
    """

    frequency_hz: Real
    edges: Real
    k: Real
    u0: Complex
    step: Complex
    launched: Complex


def source_lines(frequency_hz: Real, radius_m: float, gap_m: float) -> SourceLines:
    """Lines of a loop (radius 0: a dipole) at a gap above 0 m before the first face, from 0 Hz.

    Panels of `ORDER` Gauss nodes grow fourfold until they are 5/a or 4/g wide, for J1(ka) and e^{-kg}: against
    twice the order on panels half as wide, flux in random stacks agrees to 2e-5 and heat to 2e-6.
    """
    frequency = np.atleast_1d(np.asarray(frequency_hz, dtype=float))
    edges = _panel_edges(radius_m, gap_m)
    x, w = np.polynomial.legendre.leggauss(ORDER)
    half = 0.5 * np.diff(edges)[:, None]
    nodes = (edges[:-1, None] + half * (1.0 + x)).ravel()
    k0 = free_wavenumber(frequency)[:, None]
    still = np.where(k0 > 0.0, 0.0, 1.0 / gap_m)  # at 0 Hz nothing propagates: lines without weight
    beta = 0.5 * k0 * (1.0 + x)
    u0 = np.concatenate([1j * beta + still, np.broadcast_to(nodes, (len(frequency), len(nodes)))], axis=1)
    far = np.broadcast_to((half * w).ravel(), (len(frequency), len(nodes)))
    step = np.concatenate([-0.5j * k0 * w, far], axis=1)
    k = np.concatenate([np.sqrt((k0 - beta) * (k0 + beta)) + still, np.sqrt(k0**2 + nodes**2)], axis=1)
    shape = k / (4.0 * np.pi) if radius_m == 0.0 else 0.5 * radius_m * special.j1(k * radius_m)
    return SourceLines(frequency, edges, k, u0, step, shape * k * np.exp(-u0 * gap_m))


def _panel_edges(radius_m: float, gap_m: float) -> Real:
    edges = [0.0, LOWEST / (radius_m + gap_m)]
    widest = min(4.0 / gap_m, 5.0 / radius_m if radius_m > 0.0 else np.inf)
    while edges[-1] < HIGHEST / gap_m:
        edges.append(edges[-1] + min(3.0 * edges[-1], widest))
    return np.array(edges)


@dataclass(frozen=True)
class Response:
    """Line voltage and current at every interface, source side first, and the reflection at the first face.

    ``v`` and ``i`` have the shape (interface,) + the lines' shape; ``reflection`` has the lines' shape.
    """

    v: Complex
    i: Complex
    reflection: Complex


def respond(chains: Sequence[Chain], k: Real, u0: Complex, launched: Complex) -> Response:
    """Send the source's lines through layers into free space.

    Voltage and current are carried from the victim side to the source side, the way they grow, as numbers times
    exp(log_scale): 10,000 dB cannot overflow, and what is too small for a number becomes 0.

    Parameters
    ----------
    chains : sequence of Chain
        Layers from the source side; entries broadcast with the lines.
    k, u0, launched : ndarray
        Of `SourceLines`.
    """
    shape = np.broadcast_shapes(np.shape(u0), *(np.shape(chain.a) for chain in chains))
    p, q, scale = np.ones(shape, dtype=complex), np.broadcast_to(u0, shape), np.zeros(shape)
    found = [(p, q, scale)]
    for chain in reversed(chains):
        p, q = chain.a * p + chain.b * q, chain.c * p + chain.d * q
        size = np.abs(p) + np.abs(q) / k
        p, q, scale = p / size, q / size, scale + chain.log_scale + np.log(size)
        found.append((p, q, scale))
    found.reverse()
    seen = u0 * p + q
    base = 2.0 * launched / seen
    factors = [base * np.exp(own - scale) for _, _, own in found]
    v = np.stack([factor * one for factor, (one, _, _) in zip(factors, found, strict=True)])
    i = np.stack([factor * one for factor, (_, one, _) in zip(factors, found, strict=True)])
    return Response(v, i, (u0 * p - q) / seen)


def respond_to(lines: SourceLines, layers: Sequence[tuple[Medium, float]]) -> Response:
    """Send a source's lines through layers (Medium, thickness in m), source side first."""
    chains = [medium_chain(medium, d, lines.k.astype(complex), lines.frequency_hz, "TE") for medium, d in layers]
    return respond(chains, lines.k, lines.u0, lines.launched)


def plane_power(lines: SourceLines, response: Response) -> Real:
    """Power through every interface towards the victim for unit drive, W, shape (interface, ..., frequency).

    P = Re(1/2 int -E_phi H_rho^* 2 pi rho d rho) = -pi w mu_0 int Im(v i^*) dk/k, by Parseval.
    """
    omega = 2.0 * np.pi * lines.frequency_hz
    measure = np.abs(lines.u0) * np.abs(lines.step) / lines.k**2
    return np.asarray(-np.pi * MU_0 * omega * np.sum((response.v * response.i.conj()).imag * measure, axis=-1))


def reflected_inductance(lines: SourceLines, reflection: Complex) -> Complex:
    """Change of the source's self-inductance by a reflection, complex, H per turn squared, shape (..., frequency).

    dZ = j w M with M = mu_0 pi a^2 int R(k) J1(ka)^2 (k/u0) e^{-2 u0 g} dk (C. V. Dodd and W. E. Deeds, 1968): the
    inductance changes by Re(M), the series resistance by -w Im(M). For a dipole M is the reflected B_z at the dipole
    per unit moment, T/(A m^2); a small loop of area S has S^2 M.
    """
    return np.asarray(4.0 * np.pi * MU_0 * np.sum(reflection * (lines.launched / lines.k) ** 2 * lines.step, axis=-1))


def radiated_change(lines: SourceLines, response: Response) -> Real:
    """Radiation to both sides minus that of the source alone in free space, unit drive, W, shape (..., frequency).

    With this the power balance reads: losses of all layers + radiated_change = -w Im(M)/2, M of
    `reflected_inductance` (the source's own radiation resistance being there without the layers too).
    """
    alone = (lines.launched * lines.launched.conj()).real / np.abs(lines.u0)
    behind = (response.v[-1] * response.i[-1].conj()).imag
    phase = lines.launched**2 / np.maximum(np.abs(lines.launched) ** 2, np.finfo(float).tiny)
    back = np.abs(1.0 + response.reflection * phase) ** 2 * alone
    measure = np.where(np.imag(lines.step) != 0.0, np.abs(lines.u0) * np.abs(lines.step) / lines.k**2, 0.0)
    omega = 2.0 * np.pi * lines.frequency_hz
    return np.asarray(np.pi * MU_0 * omega * np.sum((-behind + back - 2.0 * alone) * measure, axis=-1))


def surface_loss(field_a_per_m: float | Real, surface_impedance_ohm: complex | Complex) -> Real:
    """Loss of a conductor much thicker than its skin depth, W/m^2: H^2 Re(Zs)/2, H the peak tangential field.

    Examples
    --------
    >>> skin_m = (2.0 / (2e5 * np.pi * MU_0 * 5.8e7)) ** 0.5  # copper at 100 kHz
    >>> round(float(surface_loss(1e3, (1 + 1j) / (5.8e7 * skin_m))), 1)
    41.3
    """
    resistance = np.asarray(surface_impedance_ohm, dtype=complex).real
    return np.asarray(0.5 * np.asarray(field_a_per_m, dtype=float) ** 2 * resistance)
