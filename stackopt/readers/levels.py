"""Required attenuation from what is emitted and what is allowed."""

from __future__ import annotations

import numpy as np
from numpy.typing import NDArray

from stackopt.readers.tables import Curve
from stackopt.units import format_frequency

Real = NDArray[np.float64]


def required_curve(emitted: Curve, allowed: Curve) -> tuple[tuple[float, ...], tuple[float, ...], list[str]]:
    """Return emitted minus allowed level, and 0 dB wherever less is emitted than allowed.

    Both curves are straight lines in dB against log frequency. The result has a point at each frequency of either curve
    in the range that they share, and one where the levels cross, so that cutting it off at 0 dB is exact.

    Returns
    -------
    tuple of float, tuple of float, list of str
        Frequencies (Hz), required attenuation (dB), remarks for the user.

    Raises
    ------
    ValueError
        With a message for the user, when the curves share no frequency.

    Examples
    --------
    >>> required_curve(((1e3, 1e5), (80.0, 60.0)), ((1e2, 1e4), (50.0, 50.0)))[:2]
    ((1000.0, 10000.0), (30.0, 20.0))
    """
    low, high = max(emitted[0][0], allowed[0][0]), min(emitted[0][-1], allowed[0][-1])
    if low > high:
        raise ValueError(
            f"runs {_span(allowed)}, but emitted runs {_span(emitted)}; the two tables must share some frequencies"
        )
    frequency = np.unique([f for f in (*emitted[0], *allowed[0]) if low <= f <= high])
    excess = _excess_db(frequency, emitted, allowed)
    crossing = np.flatnonzero(excess[:-1] * excess[1:] < 0.0)
    share = excess[crossing] / (excess[crossing] - excess[crossing + 1])
    frequency = np.unique(
        np.append(frequency, frequency[crossing] * (frequency[crossing + 1] / frequency[crossing]) ** share)
    )
    required = np.maximum(_excess_db(frequency, emitted, allowed), 0.0)
    required[required < 1e-9] = 0.0
    remarks = []
    if low > emitted[0][0] or high < emitted[0][-1]:
        remarks.append(
            f"the emitted level runs {_span(emitted)}, but an allowed level is given only "
            f"from {format_frequency(low)} to {format_frequency(high)}; nothing is required outside"
        )
    if not required.any():
        remarks.append("the emitted level stays within the allowed one everywhere; no attenuation is required")
    return tuple(frequency.tolist()), tuple(required.tolist()), remarks


def _excess_db(frequency: Real, emitted: Curve, allowed: Curve) -> Real:
    return _at(frequency, emitted) - _at(frequency, allowed)


def _at(frequency: Real, curve: Curve) -> Real:
    return np.asarray(np.interp(np.log(frequency), np.log(curve[0]), curve[1]))


def _span(curve: Curve) -> str:
    return f"from {format_frequency(curve[0][0])} to {format_frequency(curve[0][-1])}"
