"""Relative permeability over frequency: the published laws, sums of them, and tables.

Convention e^{+j w t}: a passive material has Im(mu) <= 0.
"""

from __future__ import annotations

import math
from dataclasses import dataclass
from typing import Protocol

import numpy as np
from numpy.typing import NDArray

Complex = NDArray[np.complex128]
Real = NDArray[np.float64]


class PermeabilityLaw(Protocol):
    """Relative permeability as a function of frequency."""

    def __call__(self, frequency_hz: Real) -> Complex:
        """Return the complex relative permeability, same shape as the frequencies (Hz)."""
        ...


@dataclass(frozen=True)
class Constant:
    """The same real permeability at every frequency."""

    value: float

    def __call__(self, frequency_hz: Real) -> Complex:
        """Return the complex relative permeability, same shape as the frequencies (Hz)."""
        return np.full(np.shape(frequency_hz), self.value, dtype=complex)


@dataclass(frozen=True)
class Debye:
    """Single relaxation (P. Debye, 1929): mu_h + (mu_i - mu_h)/(1 + j f/f_r)."""

    initial: float
    relaxation_hz: float
    high_frequency: float = 1.0

    def __call__(self, frequency_hz: Real) -> Complex:
        """Return the complex relative permeability, same shape as the frequencies (Hz)."""
        ratio = np.asarray(frequency_hz, dtype=float) / self.relaxation_hz
        return np.asarray(self.high_frequency + (self.initial - self.high_frequency) / (1.0 + 1j * ratio))


@dataclass(frozen=True)
class ColeCole:
    """Broadened relaxation (K. S. and R. H. Cole, J. Chem. Phys. 9, 1941): the Debye term to the power 1 - a."""

    initial: float
    relaxation_hz: float
    broadening: float
    high_frequency: float = 1.0

    def __call__(self, frequency_hz: Real) -> Complex:
        """Return the complex relative permeability, same shape as the frequencies (Hz)."""
        exponent = 1.0 - self.broadening
        ratio = np.asarray(frequency_hz, dtype=float) / self.relaxation_hz
        term = ratio**exponent * np.exp(0.5j * math.pi * exponent)
        return np.asarray(self.high_frequency + (self.initial - self.high_frequency) / (1.0 + term))


@dataclass(frozen=True)
class Lorentz:
    """Damped resonance (H. A. Lorentz): mu_h + (mu_i - mu_h)/(1 - (f/f_0)^2 + j f/f_d)."""

    initial: float
    resonance_hz: float
    damping_hz: float
    high_frequency: float = 1.0

    def __call__(self, frequency_hz: Real) -> Complex:
        """Return the complex relative permeability, same shape as the frequencies (Hz)."""
        frequency = np.asarray(frequency_hz, dtype=float)
        denominator = 1.0 - (frequency / self.resonance_hz) ** 2 + 1j * frequency / self.damping_hz
        return np.asarray(self.high_frequency + (self.initial - self.high_frequency) / denominator)


@dataclass(frozen=True)
class Sum:
    """Several dispersions in one material: 1 plus the sum of each term's mu - 1."""

    terms: tuple[PermeabilityLaw, ...]

    def __call__(self, frequency_hz: Real) -> Complex:
        """Return the complex relative permeability, same shape as the frequencies (Hz)."""
        return np.asarray(1.0 + sum(term(frequency_hz) - 1.0 for term in self.terms))


@dataclass(frozen=True)
class Table:
    """Measured permeability, interpolated linearly against log frequency; ends are held for one octave, not beyond."""

    frequency_hz: tuple[float, ...]
    mu_real: tuple[float, ...]
    mu_imag: tuple[float, ...]

    def __post_init__(self) -> None:
        frequency = np.asarray(self.frequency_hz)
        if len(frequency) < 2 or frequency[0] <= 0.0 or np.any(np.diff(frequency) <= 0.0):
            raise ValueError("a permeability table needs at least two rising positive frequencies")

    @property
    def octave_hz(self) -> tuple[float, float]:
        """Lowest and highest frequency that may be asked for, Hz."""
        return self.frequency_hz[0] / 2.0, self.frequency_hz[-1] * 2.0

    def __call__(self, frequency_hz: Real) -> Complex:
        """Return the complex relative permeability, same shape as the frequencies (Hz).

        Raises
        ------
        ValueError
            For a frequency more than an octave outside the table.
        """
        frequency = np.asarray(frequency_hz, dtype=float)
        low, high = self.octave_hz
        if np.any(frequency < low * (1 - 1e-9)) or np.any(frequency > high * (1 + 1e-9)):
            raise ValueError(
                f"the permeability table runs from {self.frequency_hz[0]:g} Hz to {self.frequency_hz[-1]:g} Hz"
            )
        position = np.log(frequency)
        knots = np.log(self.frequency_hz)
        return np.asarray(np.interp(position, knots, self.mu_real) + 1j * np.interp(position, knots, self.mu_imag))


@dataclass(frozen=True)
class Scaled:
    """A law whose mu - 1 is multiplied by ``factor`` at every frequency.

    A passive law stays passive and keeps its Kramers-Kronig relation, and where mu fades to 1 it still does.
    """

    law: PermeabilityLaw
    factor: float

    def __call__(self, frequency_hz: Real) -> Complex:
        """Return the complex relative permeability, same shape as the frequencies (Hz)."""
        return np.asarray(1.0 + self.factor * (self.law(frequency_hz) - 1.0))


def tables_in(law: PermeabilityLaw) -> tuple[Table, ...]:
    """Return the tables that a law contains, itself or as terms of sums."""
    if isinstance(law, Sum):
        return tuple(table for term in law.terms for table in tables_in(term))
    return (law,) if isinstance(law, Table) else ()


def initial_permeability(law: PermeabilityLaw) -> float:
    """Real part at 0 Hz, or at the lowest frequency that all tables of the law reach.

    Examples
    --------
    >>> initial_permeability(Debye(300.0, 1e4))
    300.0
    """
    tables = tables_in(law)
    lowest = max((table.frequency_hz[0] for table in tables), default=0.0)
    lowest = min([lowest, *(table.octave_hz[1] for table in tables)])
    return float(law(np.array([lowest]))[0].real)


def kramers_kronig_deviation(table: Table) -> float:
    """Tell how far a table's real part is from one that its imaginary part allows (Kramers-Kronig relation).

    The real part must be a constant plus what the losses inside the table give, plus what any losses outside, which
    nobody has measured, may give: those are fitted, none below zero.

    Parameters
    ----------
    table : Table
        At least four frequencies over at least a decade, otherwise nothing can be told.

    Returns
    -------
    float
        Largest deviation over the larger of the real part's span and the largest loss (or a twentieth of the real
        part); below 0.1 for well-sampled tables of the published laws, 0 when nothing can be told.
    """
    from scipy.optimize import nnls

    knots = np.log(np.asarray(table.frequency_hz))
    loss_at_knots = -np.asarray(table.mu_imag)
    scale = float(max(np.ptp(table.mu_real), loss_at_knots.max(), 0.05 * np.max(np.abs(table.mu_real))))
    if len(knots) < 4 or knots[-1] - knots[0] < math.log(10.0):
        return 0.0
    steps = math.ceil((knots[-1] - knots[0]) / 0.05)
    nodes, step = np.linspace(knots[0], knots[-1], steps, endpoint=False, retstep=True)
    nodes += step / 2.0
    middles = nodes[1:] - step / 2.0  # a singular point half way between two nodes cancels: Maclaurin's rule
    reach = step * np.arange(0.5, 6.0 / step)
    outside = np.concatenate([knots[0] - reach, knots[-1] + reach])
    kernel = [1.0 / (1.0 - np.exp(2.0 * (middles[:, None] - x[None, :]))) for x in (nodes, outside)]
    inside = 2.0 / math.pi * step * (kernel[0] @ np.interp(nodes, knots, loss_at_knots))
    ones = np.ones((len(middles), 1))
    target = np.interp(middles, knots, table.mu_real) - inside
    columns = np.hstack([kernel[1], ones, -ones])
    try:
        found, _ = nnls(columns, target / scale)
    except RuntimeError:  # the fit did not end
        return 0.0
    return float(np.max(np.abs(columns @ found - target / scale)))
