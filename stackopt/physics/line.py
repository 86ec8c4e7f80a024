"""Cascade of layers as chain (ABCD) matrices with a logarithmic scale: readable, and the oracle for the fast kernel.

A layer is [[cosh ud, Z sinh ud], [sinh ud / Z, cosh ud]]; layers multiply from the source side to the victim side. Each
matrix is carried as entries times exp(log_scale), so that 10,000 dB neither overflow nor lose digits.
"""

from __future__ import annotations

from collections.abc import Iterable
from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from stackopt.physics.media import Medium, line_constants

Complex = NDArray[np.complex128]
Real = NDArray[np.float64]

DB_PER_NEPER = 20.0 / np.log(10.0)


@dataclass(frozen=True)
class Chain:
    """Chain matrices [[a, b], [c, d]] * exp(log_scale), every entry of shape (frequency, line)."""

    a: Complex
    b: Complex
    c: Complex
    d: Complex
    log_scale: Real


def identity(shape: tuple[int, ...]) -> Chain:
    """Chain of no layers at all."""
    one, zero = np.ones(shape, dtype=complex), np.zeros(shape, dtype=complex)
    return Chain(one, zero, zero, one, np.zeros(shape))


def scaled_sinh_over_u(u: Complex, thickness_m: float | Real) -> Complex:
    """sinh(u d)/u * exp(-Re(u d)), in metres, exact for u = 0 too."""
    x = u * thickness_m
    small = np.abs(x) < 0.1
    x2 = np.where(small, x * x, 0.0)
    series = (
        thickness_m * (1 + x2 / 6 * (1 + x2 / 20 * (1 + x2 / 42 * (1 + x2 / 72)))) * np.exp(-np.where(small, x.real, 0))
    )
    safe = np.where(small, 1.0, u)
    direct = 0.5 * (np.exp(1j * x.imag) - np.exp(-2.0 * x.real - 1j * x.imag)) / safe
    return np.where(small, series, direct)


def layer(u: Complex, series: Complex, shunt: Complex, thickness_m: float | Real) -> Chain:
    """Chain of one layer.

    Parameters
    ----------
    u, series, shunt : ndarray, complex, shape (frequency, line)
        Line constants, see `stackopt.physics.media.line_constants`.
    thickness_m : float or ndarray
        Thickness of the layer, or thicknesses that broadcast with the line constants.
    """
    x = u * thickness_m
    cosh = 0.5 * (np.exp(1j * x.imag) + np.exp(-2.0 * x.real - 1j * x.imag))
    sinh_over_u = scaled_sinh_over_u(u, thickness_m)
    return Chain(cosh, series * sinh_over_u, shunt * sinh_over_u, cosh, x.real)


def cascade(chains: Iterable[Chain], shape: tuple[int, ...]) -> Chain:
    """Multiply chains from the source side to the victim side; no chains give the identity of the shape."""
    total = identity(shape)
    for following in chains:
        total = _normalised(
            total.a * following.a + total.b * following.c,
            total.a * following.b + total.b * following.d,
            total.c * following.a + total.d * following.c,
            total.c * following.b + total.d * following.d,
            total.log_scale + following.log_scale,
        )
    return total


def _normalised(a: Complex, b: Complex, c: Complex, d: Complex, log_scale: Real) -> Chain:
    # The entries have different dimensions, and a ratio of largest to smallest far inside the range of doubles.
    size = np.maximum(np.maximum(np.abs(a), np.abs(d)), np.sqrt(np.abs(b) * np.abs(c)))
    return Chain(a / size, b / size, c / size, d / size, log_scale + np.log(size))


def transmission(chain: Chain, terminal: Complex) -> tuple[Complex, Real]:
    """Transmission T = 2/(A + B/Z0 + C Z0 + D) between equal terminal impedances.

    Parameters
    ----------
    chain : Chain
        The cascade between the terminals.
    terminal : ndarray, complex, shape (frequency, line)
        Terminal impedance Z0 over j w mu_0, m.

    Returns
    -------
    value, log_scale : ndarray
        T = value * exp(-log_scale).
    """
    return 2.0 / (chain.a + chain.b / terminal + chain.c * terminal + chain.d), chain.log_scale


def medium_chain(medium: Medium, thickness_m: float, k: Complex, frequency_hz: Real, polarisation: str) -> Chain:
    """Chain of a medium of the given thickness; shapes as `stackopt.physics.media.line_constants`."""
    return layer(*line_constants(medium, k, frequency_hz, polarisation), thickness_m)


def weighted_sum(weight: Complex, value: Complex, log_scale: Real) -> tuple[Complex, Real]:
    """Sum of weight * value * exp(-log_scale) over the lines, itself returned as (sum, log_scale) over frequency."""
    least = np.min(log_scale, axis=-1, keepdims=True)
    return np.sum(weight * value * np.exp(least - log_scale), axis=-1), least[..., 0]
