"""Text to SI and back, and the physical constants.

The readers hand every quantity of a file through `parse_quantity`; everything after that is SI floats. The unit library
is imported on first use, so that start-up stays quick.
"""

from __future__ import annotations

import functools
import math
import re
import reprlib
from typing import TYPE_CHECKING

if TYPE_CHECKING:
    import pint

SPEED_OF_LIGHT = 299_792_458.0
"""m/s, exact (SI)."""
MU_0 = 4e-7 * math.pi
"""H/m; the pre-2019 value, within 2e-10 of CODATA 2018."""
EPSILON_0 = 1.0 / (MU_0 * SPEED_OF_LIGHT**2)
"""F/m."""
ETA_0 = MU_0 * SPEED_OF_LIGHT
"""ohm, impedance of free space."""

UNITS = {
    "length": ("m", '"35 um"'),
    "frequency": ("Hz", '"10 kHz"'),
    "conductivity": ("S/m", '"58 MS/m"'),
    "density": ("kg/m^3", '"8930 kg/m^3"'),
    "area density": ("kg/m^2", '"4 kg/m^2"'),
    "flux density": ("T", '"1.5 T"'),
    "potential": ("V", '"-0.35 V"'),
    "voltage": ("V", '"20 uV"'),
    "angle": ("rad", '"30 deg"'),
    "current": ("A", '"12 A"'),
    "moment": ("A m^2", '"0.5 A m^2"'),
    "rayleigh coefficient": ("m/A", '"0.5 m/A"'),
    "power": ("W", '"2 W"'),
    "inductance": ("H", '"24 uH"'),
    "level": ("dB", '"14 dB"'),
    "ratio": ("%", '"5 %"'),
}
"""Kind of quantity: its unit inside the program, and an example for messages."""

MAX_TEXT = 100
"""Characters in a quantity; longer text is refused before anything looks at it."""
_UNIT = re.compile(r"(?:[^\W\d_]+|°)(?:(?:\^|\*\*)-?\d|[²³])?(?:\s*[ */·]\s*[^\W\d_]+(?:(?:\^|\*\*)-?\d|[²³])?)*")
"""What the unit library may be handed: names and small powers, never arithmetic."""
_SHORT = reprlib.Repr()
_SHORT.maxstring = _SHORT.maxother = 60
_MIL = re.compile(r"\bmil\b")
_NAMES = {"Hz": ("hertz",), "rad": ("radian", "degree", "turn", "grade", "arcminute", "arcsecond")}
"""Ends of the names, which may have prefixes, that the unit library gives to frequencies and angles."""
_NUMBER = re.compile(r"\s*([+-]?(?:\d+\.?\d*|\.\d+)(?:[eE][+-]?\d+)?)\s*(.*?)\s*$")


def show(value: object) -> str:
    """Write a value found in a file for a message, as the file would write it and shortened where it is long.

    Examples
    --------
    >>> show("35"), show(True), show({"a": 1})
    ("'35'", 'true', 'a table')
    """
    if isinstance(value, bool):
        return str(value).lower()
    return "a table" if isinstance(value, dict) else _SHORT.repr(value)


@functools.cache
def _registry() -> pint.UnitRegistry[float]:
    import pint

    return pint.UnitRegistry(cache_folder=None)


def parse_quantity(text: object, kind: str) -> float:
    """Read a quantity with its unit.

    Parameters
    ----------
    text : object
        What stands in the file, for example ``"35 um"``. Anything but text is refused, because a number has no unit.
    kind : str
        A key of `UNITS`.

    Returns
    -------
    float
        The value in the unit that `UNITS` gives for the kind; ``"5 %"`` is 0.05 and ``"14 dB"`` is 14.

    Raises
    ------
    ValueError
        With a message for the user: what was found, and which unit to write.

    Examples
    --------
    >>> parse_quantity("10 mil", "length")
    0.000254
    >>> parse_quantity("14 dB", "level")
    14.0
    """
    unit, example = UNITS[kind]
    if not isinstance(text, str):
        raise ValueError(
            f"found {show(text)}, which has no unit; write the {kind} as text with its unit, such as {example}"
        )
    match = _NUMBER.match(text) if len(text) <= MAX_TEXT else None
    if match is None:
        raise ValueError(f"found {show(text)}; write the {kind} as a number and a unit, such as {example}")
    number, given = float(match[1]), match[2]
    if not math.isfinite(number):
        raise ValueError(f"found {show(text)}, which is too large for a number; write the {kind} such as {example}")
    if not given:
        raise ValueError(f"found {show(text)}, which has no unit; write {unit} or a multiple of it, such as {example}")
    if kind in ("level", "ratio"):
        if given != unit:
            raise ValueError(f"found {show(text)}; {_a(kind)} is given in {unit}, such as {example}")
        return (number / 100.0 if kind == "ratio" else number) + 0.0
    return _to_si(number, given, kind, text)


def _a(kind: str) -> str:
    return f"{'an' if kind[0] in 'aeiou' else 'a'} {kind}"


@functools.cache
def _factor(given: str, unit: str) -> float:
    import pint

    if _UNIT.fullmatch(given) is None:
        raise ValueError(given)
    name = _MIL.sub("thou", given)  # the library's own mil is an angle
    one, two = (_registry().Quantity(number, name) for number in (1.0, 2.0))
    factor = float(one.to(unit).magnitude)
    is_multiple = math.isclose(float(two.to(unit).magnitude), 2.0 * factor)
    if not is_multiple or not _means([str(item) for item, _ in one.unit_items()], unit):
        raise pint.DimensionalityError(given, unit)
    return factor


def _means(names: list[str], unit: str) -> bool:
    """Tell whether units that convert also mean the same.

    The library counts angles as plain numbers, so that it takes rad/s and revolutions per minute for Hz, a factor of
    2 pi apart, and a percentage for an angle. (Levels such as dBm convert too, but are no multiples of a unit.)
    """
    if unit in _NAMES:
        return len(names) == 1 and names[0].endswith(_NAMES[unit])
    return all(_registry().get_dimensionality(name) for name in names)


def _to_si(number: float, given: str, kind: str, text: str) -> float:
    import pint

    unit, example = UNITS[kind]
    try:
        value = number * _factor(given, unit)
    except pint.DimensionalityError:
        raise ValueError(
            f"found {show(text)}, which is not {_a(kind)}; write {unit} or a multiple of it, such as {example}"
        ) from None
    except Exception:  # the unit library raises many kinds for text that is no unit
        raise ValueError(
            f"found {show(text)}, whose unit {show(given)} is unknown; "
            f"write {unit} or a multiple of it, such as {example}"
        ) from None
    if not math.isfinite(value):
        raise ValueError(f"found {show(text)}, which is too large; write the {kind} such as {example}")
    return float(f"{value:.15g}") + 0.0  # "105 um" and "0.105 mm" are the same number, and so are -0 and 0


def format_thickness(thickness_m: float) -> str:
    """Write a thickness the way stacks are written: without a space, in um below 1 mm and in mm from there.

    Examples
    --------
    >>> format_thickness(35e-6), format_thickness(1.5e-3)
    ('35um', '1.5mm')
    """
    micrometres = round(thickness_m * 1e6, 6)
    if micrometres < 1000.0:
        return f"{micrometres:.10g}um"
    return f"{micrometres / 1000.0:.10g}mm"


def format_frequency(frequency_hz: float) -> str:
    """Write a frequency in Hz, kHz, MHz or GHz with four digits.

    Examples
    --------
    >>> format_frequency(16e6), format_frequency(0.0)
    ('16 MHz', '0 Hz')
    """
    for scale, unit in ((1e9, "GHz"), (1e6, "MHz"), (1e3, "kHz")):
        if frequency_hz >= scale:
            return f"{frequency_hz / scale:.4g} {unit}"
    return f"{frequency_hz:.4g} Hz"


def format_attenuation(attenuation_db: float) -> str:
    """Write an attenuation for people: nobody can measure more than 120 dB, so no more is shown.

    Examples
    --------
    >>> format_attenuation(43.21), format_attenuation(250.0)
    ('43.2 dB', '> 120 dB')
    """
    return "> 120 dB" if attenuation_db > 120.0 else f"{attenuation_db:.1f} dB"
