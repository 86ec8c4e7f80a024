"""Numbers of the bench in words: values with their units and intervals."""

from __future__ import annotations

import math

_PREFIXES = ((1e9, "G"), (1e6, "M"), (1e3, "k"), (1.0, ""), (1e-3, "m"), (1e-6, "u"), (1e-9, "n"))


def value_words(value: float, unit: str, digits: int = 3) -> str:
    """Write a value in its unit.

    Examples
    --------
    >>> value_words(5.812e7, "S/m"), value_words(0.000493, "ohm"), value_words(123.4, ""), value_words(0.0, "S/m")
    ('58.1 MS/m', '493 uohm', '123', '0 S/m')
    """
    scale, prefix = _prefix(value) if unit else (1.0, "")
    return f"{_plain(value / scale, digits)} {prefix}{unit}".rstrip()


def _plain(value: float, digits: int) -> str:
    """Write a number with so many digits and without an exponent where it is of ordinary size."""
    if value == 0.0 or not math.isfinite(value):
        return f"{value:g}"
    if not 1e-4 <= abs(value) < 1e7:
        return f"{value:.{digits}g}"
    decimals = max(digits - 1 - math.floor(math.log10(abs(value))), 0)
    rounded = round(value, digits - 1 - math.floor(math.log10(abs(value))))
    return f"{rounded:.{decimals}f}"


def _prefix(value: float) -> tuple[float, str]:
    size = abs(value)
    return next((pair for pair in _PREFIXES if size >= 0.9995 * pair[0]), (1.0, "") if size == 0.0 else _PREFIXES[-1])


def interval_words(value: float, low: float, high: float, unit: str) -> str:
    """Write a value with its 95 % interval.

    Examples
    --------
    >>> interval_words(5.8e7, 5.6e7, 6.01e7, "S/m")
    '58.0 MS/m (56.0 to 60.1)'
    >>> interval_words(102.34, 98.0, 106.5, "")
    '102 (98.0 to 106)'
    """
    scale, prefix = _prefix(value) if unit else (1.0, "")
    head = f"{_plain(value / scale, 3)} {prefix}{unit}".rstrip()
    return f"{head} ({_plain(low / scale, 3)} to {_plain(high / scale, 3)})"


def range_words(low: float, high: float, unit: str) -> str:
    """Write which values fit equally well; NaN stands for no limit.

    Examples
    --------
    >>> range_words(math.nan, 230.0, "S/m")
    'anything up to 230 S/m fits as well'
    """
    if math.isnan(low) and math.isnan(high):
        return "any value fits as well"
    if math.isnan(low):
        return f"anything up to {value_words(high, unit)} fits as well"
    if math.isnan(high):
        return f"anything from {value_words(low, unit)} upwards fits as well"
    return f"anything from {value_words(low, unit)} to {value_words(high, unit)} fits as well"


def count_words(count: int, word: str) -> str:
    """Write a count with its word.

    Examples
    --------
    >>> count_words(1, "sweep"), count_words(3, "sweep")
    ('1 sweep', '3 sweeps')
    """
    return f"{count} {word}{'' if count == 1 else 's'}"
