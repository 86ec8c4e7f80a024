"""Line constants of a layer: the transmission line that a wave of one transverse wavenumber sees along the normal.

Impedances are divided by j w mu_0 throughout, so that a static magnetic field (0 Hz) is an ordinary case. With the
series impedance z and the shunt admittance y per metre, u = sqrt(z y) and Z = sqrt(z/y):

====  ==================  ==========================
wave  series z            shunt y, 1/m^2
====  ==================  ==========================
TE    mu_r                u^2 / mu_r
TM    u^2 / y             j w mu_0 (sigma + j w eps)
====  ==================  ==========================

which are Z = j w mu/u (TE) and Z = u/(sigma + j w eps) (TM) over j w mu_0 (J. A. Stratton, Electromagnetic Theory,
1941, chapter IX).
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from stackopt.units import EPSILON_0, MU_0, SPEED_OF_LIGHT

Complex = NDArray[np.complex128]
Real = NDArray[np.float64]


@dataclass(frozen=True)
class Medium:
    """A material at given frequencies.

    Parameters
    ----------
    mu_r : ndarray, complex, shape (frequency,)
        Relative permeability, Im <= 0.
    conductivity_s_per_m, permittivity : float
        Conductivity, and relative permittivity.
    """

    mu_r: Complex
    conductivity_s_per_m: float
    permittivity: float = 1.0


def air(frequency_hz: Real) -> Medium:
    """Free space at the given frequencies (Hz)."""
    return Medium(np.ones(np.shape(frequency_hz), dtype=complex), 0.0, 1.0)


def free_wavenumber(frequency_hz: Real) -> Real:
    """Wavenumber of free space k0 = w/c, rad/m, same shape as the frequencies (Hz)."""
    return np.asarray(2.0 * np.pi * np.asarray(frequency_hz, dtype=float) / SPEED_OF_LIGHT)


def line_constants(
    medium: Medium, k: Complex, frequency_hz: Real, polarisation: str
) -> tuple[Complex, Complex, Complex]:
    """Propagation constant, series impedance and shunt admittance of a medium.

    Parameters
    ----------
    medium : Medium
        The layer's material at the frequencies.
    k : ndarray, complex, shape (frequency, line)
        Transverse wavenumbers, rad/m.
    frequency_hz : ndarray, shape (frequency,)
        Frequencies; TM waves need more than 0 Hz.
    polarisation : str
        "TE" or "TM".

    Returns
    -------
    u, series, shunt : ndarray, complex, shape (frequency, line)
        u = sqrt(k^2 + j w mu (sigma + j w eps)) in 1/m with Re(u) >= 0, and the constants of the module's table.

    Raises
    ------
    ValueError
        For another polarisation.
    """
    omega = 2.0 * np.pi * np.asarray(frequency_hz, dtype=float)[:, None]
    mu_r = np.asarray(medium.mu_r)[:, None]
    displacement = 1j * omega * MU_0 * (medium.conductivity_s_per_m + 1j * omega * EPSILON_0 * medium.permittivity)
    u_squared = k * k + mu_r * displacement
    u = np.sqrt(u_squared)
    if polarisation == "TE":
        return u, np.broadcast_to(mu_r, u.shape), u_squared / mu_r
    if polarisation == "TM":
        shunt = np.broadcast_to(displacement, u.shape)
        return u, u_squared / shunt, shunt
    raise ValueError(f'polarisation is "TE" or "TM", not {polarisation!r}')


def skin_depth(frequency_hz: Real, mu_r: Real | float, conductivity_s_per_m: float) -> Real:
    """Skin depth sqrt(2/(w mu sigma)), m, of a good conductor."""
    omega = 2.0 * np.pi * np.asarray(frequency_hz, dtype=float)
    return np.asarray(np.sqrt(2.0 / (omega * MU_0 * mu_r * conductivity_s_per_m)))
