"""Sweeps between coaxial dipoles by empymod, a library for layered media: a path that shares no code with the fit."""

from __future__ import annotations

import itertools
from collections.abc import Callable, Iterator
from contextlib import contextmanager
from dataclasses import dataclass
from typing import Any

import empymod
import numpy as np
from numpy.polynomial import chebyshev
from numpy.typing import NDArray

from stackopt.units import MU_0

Real = NDArray[np.float64]

VACUUM_RESISTIVITY = 1e30
GAP_NODES, THICKNESS_NODES = 5, 3


@contextmanager
def near_axis() -> Iterator[None]:
    """Let the library go nearer to the axis than its smallest offset."""
    before = empymod.get_minimum()["min_off"]
    empymod.set_minimum(min_off=1e-7)
    try:
        yield
    finally:
        empymod.set_minimum(min_off=before)


def sheet_db(frequency: Real, gap_sum: float, thickness: float, sigma: float, mu: Callable[[Real], Any]) -> Real:
    """Insertion loss of one sheet half way between two dipoles, dB."""
    half = gap_sum / 2.0
    ends = [0.0, 0.0, -half], [0.0, 0.0, thickness + half]
    quadrature = {"rtol": 1e-8, "atol": 0.0, "limit": 5000, "a": 1e-6 / gap_sum, "b": 80.0 / gap_sum, "pts_per_dec": 40}
    resistivity = [VACUUM_RESISTIVITY, 1.0 / sigma, VACUUM_RESISTIVITY]

    def permeability(_: object, known: dict[str, Any]) -> tuple[Any, Any]:
        at = np.atleast_1d(known["freq"])
        zeta = 2j * np.pi * at[:, None] * MU_0 * np.stack([np.ones_like(at), mu(at), np.ones_like(at)], axis=1)
        return zeta, zeta

    direct = {"res": [VACUUM_RESISTIVITY] * 3}
    open_field = empymod.dipole(
        *ends, [0.0, thickness], direct["res"], frequency, ab=66, ht="quad", htarg=quadrature, xdirect=True, verb=0
    )
    field = empymod.dipole(
        *ends,
        [0.0, thickness],
        {"res": resistivity, "func_zeta": permeability},
        frequency,
        ab=66,
        ht="quad",
        htarg=quadrature,
        xdirect=False,
        verb=0,
    )
    return np.asarray(20.0 * np.log10(np.abs(open_field / field)))


@dataclass(frozen=True)
class Library:
    """The library's insertion loss around a nominal gap sum and thickness, as a Chebyshev series in both.

    ``gap_span`` and ``thickness_span`` are logarithms either side of nominal.
    """

    gap_sum: float
    thickness: float
    gap_span: float
    thickness_span: float
    coefficients: Real

    @classmethod
    def make(
        cls,
        frequency: Real,
        gap_sum: float,
        thickness: float,
        sigma: float,
        mu: Callable[[Real], Any],
        spans: tuple[float, float],
    ) -> Library:
        nodes = [chebyshev.chebpts1(count) for count in (GAP_NODES, THICKNESS_NODES)]
        with near_axis():
            values = [
                sheet_db(frequency, gap_sum * np.exp(x * spans[0]), thickness * np.exp(y * spans[1]), sigma, mu)
                for x, y in itertools.product(*nodes)
            ]
        table = np.array(values).reshape(GAP_NODES, THICKNESS_NODES, len(frequency))
        inverse = [np.linalg.inv(chebyshev.chebvander(x, len(x) - 1)) for x in nodes]
        coefficients = np.einsum("ag,bt,gtf->abf", inverse[0], inverse[1], table)
        return cls(gap_sum, thickness, *spans, coefficients)

    def loss_db(self, gap_sum: float, thickness: float) -> Real:
        """Insertion loss at any gap sum and thickness within the spans, dB."""
        x = np.log(gap_sum / self.gap_sum) / self.gap_span
        y = np.log(thickness / self.thickness) / self.thickness_span
        assert abs(x) <= 1.0
        assert abs(y) <= 1.0
        return np.asarray(chebyshev.chebval2d(x, y, self.coefficients))
