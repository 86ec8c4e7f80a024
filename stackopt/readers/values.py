"""The values that a file may hold; each reader says what it found and what is allowed."""

from __future__ import annotations

import functools
import math
import unicodedata
from collections.abc import Callable
from typing import Annotated, Any

from pydantic import PlainValidator, ValidationInfo
from pydantic_core import PydanticCustomError

from stackopt.errors import InputError
from stackopt.physics.permeability import Table
from stackopt.problem import ASSUMPTIONS, OBJECTIVES
from stackopt.readers.files import Source, nearest
from stackopt.readers.tables import LEVEL_COLUMNS, MASK_COLUMNS, Curve, parse_table, permeability_table
from stackopt.units import UNITS, parse_quantity, show

MAX_SHEETS = 20
MAX_THICKNESS_M = 1.0
MAX_TEXT = 2000
"""Characters of a title, a name or a note."""
LARGEST_NUMBER = 1e9
LARGEST_PRICE = 1e11
"""Per m^2 or per kg; what a search sums must fit into 64-bit integers of millionths."""
MAX_HZ = "1 PHz"
MAX_LENGTH = "1000 km"
MAX_DB = "10000 dB"
"""Bounds far outside of what is ever built; beyond them the arithmetic would overflow instead of telling anything."""
SMALLEST = {"length": 1e-9, "frequency": 1e-6}
"""Per kind, SI units: what lies between this and 0 can only be a slip. Sums of a search count whole picometres."""
SMALLEST_OF_ALL = 1e-30
REPORTED = "reported"
"""Type of a pydantic error whose findings are in the list already."""


def _quantity(
    kind: str, low: str | None = None, high: str | None = None, *, above: bool = False
) -> Callable[[object], float]:
    """Return a reader of one kind of quantity with bounds, given as text; ``above`` keeps the lower one out."""

    def read(value: object) -> float:
        number = parse_quantity(value, kind)
        _refuse_tiny(value, number, SMALLEST.get(kind, SMALLEST_OF_ALL), UNITS[kind][0])
        too_low = low is not None and _below(number, _bound(low, kind), above)
        if too_low or (high is not None and number > _bound(high, kind)):
            bounds = [f"above {low}" if above else f"at least {low}"] if low is not None else []
            bounds += [f"at most {high}"] if high is not None else []
            raise ValueError(f"found {show(value)}; it must be {' and '.join(bounds)}")
        return number

    return read


@functools.cache
def _bound(text: str, kind: str) -> float:
    return parse_quantity(text, kind)


def _refuse_tiny(value: object, number: float, smallest: float, unit: str = "") -> None:
    if 0.0 < abs(number) < smallest:
        raise ValueError(f"found {show(value)}, too small to be meant; write at least {f'{smallest:g} {unit}'.strip()}")


def _below(number: float, low: float, above: bool) -> bool:
    return number <= low if above else number < low


def _number(low: float, high: float, *, above: bool = False, smallest: float = 0.0) -> Callable[[object], float]:
    def read(value: object) -> float:
        number = _real(value)
        _refuse_tiny(value, number, smallest)
        if _below(number, low, above) or number > high:
            raise ValueError(f"found {show(value)}; it must be {_bounds(low, high, above)}")
        return number

    return read


def _real(value: object) -> float:
    if isinstance(value, bool) or not isinstance(value, int | float):
        raise ValueError(f"found {show(value)}; write a plain number, without quotes or unit")
    try:
        number = float(value)
    except OverflowError:
        number = math.inf
    if not math.isfinite(number):
        raise ValueError(f"found {show(value)}; write a finite number")
    return number + 0.0  # -0 is 0


def _bounds(low: float, high: float, above: bool) -> str:
    return f"{f'above {low:g}' if above else f'at least {low:g}'} and at most {high:g}"


def _integer(low: int, high: int) -> Callable[[object], int]:
    def read(value: object) -> int:
        if isinstance(value, bool) or not isinstance(value, int) or not low <= value <= high:
            raise ValueError(f"found {show(value)}; write a whole number from {low} to {high}")
        return value

    return read


def _word(*known: str) -> Callable[[object], str]:
    def read(value: object) -> str:
        if not isinstance(value, str) or value not in known:
            raise ValueError(f"found {show(value)}; {nearest(str(value), known)}")
        return value

    return read


def _text(value: object) -> str:
    if not isinstance(value, str) or not value.strip():
        raise ValueError(f"found {show(value)}; write some text in quotes")
    if len(value) > MAX_TEXT or any(unicodedata.category(letter) in ("Cc", "Cs") for letter in value):
        raise ValueError(
            f"found {show(value)}; write up to {MAX_TEXT} characters, without line ends, tabs and other control "
            "characters"
        )
    return value.strip()


def _flag(value: object) -> bool:
    if not isinstance(value, bool):
        raise ValueError(f"found {show(value)}; write true or false")
    return value


def check_name(value: object, info: ValidationInfo) -> str:
    """Read the name of a material of the set."""
    name, names = _text(value), _source(info).names
    if names is not None and name not in names:
        raise ValueError(f"found {show(value)}, which the material set does not hold; {nearest(name, names)}")
    return name


def _layer(value: object, info: ValidationInfo) -> tuple[str, float]:
    if not isinstance(value, list) or len(value) != 2:
        raise ValueError(
            f'found {show(value)}; write a layer as a material and a thickness, such as ["abs wall", "2 mm"]'
        )
    return check_name(value[0], info), read_thickness(value[1])


def _point(value: object) -> tuple[float, float]:
    if not isinstance(value, list) or len(value) != 2:
        raise ValueError(
            f'found {show(value)}; write a point as a frequency and an attenuation, such as ["1 kHz", "14 dB"]'
        )
    return _quantity("frequency", "0 Hz", MAX_HZ)(value[0]), _quantity("level", "0 dB", MAX_DB)(value[1])


def _drive_point(value: object) -> tuple[float, object]:
    if not isinstance(value, list) or len(value) != 2:
        raise ValueError(
            f'found {show(value)}; write a point of the drive as a frequency and a peak, such as ["100 kHz", "12 A"]'
        )
    return _quantity("frequency", "0 Hz", MAX_HZ)(value[0]), value[1]


def _tolerance(value: object) -> tuple[float, float]:
    if isinstance(value, list):
        if len(value) != 2:
            raise ValueError(f'found {show(value)}; write two values, down and up, such as ["-50 %", "+100 %"]')
        down, up = parse_quantity(value[0], "ratio"), parse_quantity(value[1], "ratio")
        if not -1.0 < down <= 0.0 <= up <= 1.0:
            raise ValueError(
                f"found {show(value)}; the first must be above -100 % and at most 0 %, the second at least 0 % and at "
                "most +100 %"
            )
        return down, up
    size = parse_quantity(value, "ratio")
    if not 0.0 <= size < 1.0:
        raise ValueError(
            f"found {show(value)}; a tolerance to both sides must be at least 0 % and below 100 % "
            '(write unequal sides as ["-50 %", "+100 %"])'
        )
    return 0.0 - size, size


def _source(info: ValidationInfo) -> Source:
    assert isinstance(info.context, Source)
    return info.context


def _open(value: object, info: ValidationInfo) -> tuple[Any, str]:
    """Find and read the file that a value names; its path and its text."""
    name, source = _text(value), _source(info)
    path = source.locate(name)
    try:
        return path, source.reading.read_text(path)
    except ValueError as error:
        raise ValueError(f"found {show(value)}; {path} {error}") from None


def _report(error: InputError, info: ValidationInfo) -> PydanticCustomError:
    _source(info).reading.findings.extend(error.findings)
    return PydanticCustomError(REPORTED, "reported")


def _curve(columns: tuple[str, ...]) -> Callable[[object, ValidationInfo], Curve]:
    def read(value: object, info: ValidationInfo) -> Curve:
        path, text = _open(value, info)
        try:
            first, second = parse_table(path, text, columns)
        except InputError as error:
            raise _report(error, info) from None
        return first, second

    return read


def _permeability(value: object, info: ValidationInfo) -> Table:
    path, text = _open(value, info)
    try:
        return permeability_table(path, text)
    except InputError as error:
        raise _report(error, info) from None


read_thickness = _quantity("length", "0 mm", f"{MAX_THICKNESS_M:g} m", above=True)
read_positive = _number(0.0, LARGEST_NUMBER, above=True, smallest=1.0 / LARGEST_NUMBER)

Text = Annotated[str, PlainValidator(_text)]
Flag = Annotated[bool, PlainValidator(_flag)]
Name = Annotated[str, PlainValidator(check_name)]
Objective = Annotated[str, PlainValidator(_word(*OBJECTIVES))]
Assumption = Annotated[str, PlainValidator(_word(*ASSUMPTIONS))]
YieldGoal = Annotated[float, PlainValidator(_quantity("ratio", "50 %", "99.9 %"))]
Polarisation = Annotated[str, PlainValidator(_word("TE", "TM"))]
Thickness = Annotated[float, PlainValidator(read_thickness)]
Distance = Annotated[float, PlainValidator(_quantity("length", "0 mm", MAX_LENGTH, above=True))]
Gap = Annotated[float, PlainValidator(_quantity("length", "0 mm", MAX_LENGTH))]
Frequency = Annotated[float, PlainValidator(_quantity("frequency", "0 Hz", MAX_HZ, above=True))]
Angle = Annotated[float, PlainValidator(_quantity("angle", "0 deg", "89.9 deg"))]
Conductivity = Annotated[float, PlainValidator(_quantity("conductivity", "0 S/m", "1 TS/m"))]
Density = Annotated[float, PlainValidator(_quantity("density", "0 kg/m^3", "100000 kg/m^3", above=True))]
AreaDensity = Annotated[float, PlainValidator(_quantity("area density", "0 kg/m^2", "1000000 kg/m^2", above=True))]
FluxDensity = Annotated[float, PlainValidator(_quantity("flux density", "0 T", "1000 T", above=True))]
Potential = Annotated[float, PlainValidator(_quantity("potential", "-1000 V", "1000 V"))]
PotentialGap = Annotated[float, PlainValidator(_quantity("potential", "0 V", "1000 V"))]
Margin = Annotated[float, PlainValidator(_quantity("level", "0 dB", MAX_DB))]
Positive = Annotated[float, PlainValidator(read_positive)]
NotNegative = Annotated[float, PlainValidator(_number(0.0, LARGEST_PRICE))]
Cost = Annotated[float, PlainValidator(_number(0.0, LARGEST_PRICE, above=True))]
Broadening = Annotated[float, PlainValidator(_number(0.0, 0.999))]
SheetCount = Annotated[int, PlainValidator(_integer(1, MAX_SHEETS))]
PointsPerDecade = Annotated[int, PlainValidator(_integer(1, 1000))]
Seed = Annotated[int, PlainValidator(_integer(0, 2**32 - 1))]
Population = Annotated[int, PlainValidator(_integer(10, 100_000))]
Layer = Annotated[tuple[str, float], PlainValidator(_layer)]
Point = Annotated[tuple[float, float], PlainValidator(_point)]
DrivePoint = Annotated[tuple[float, Any], PlainValidator(_drive_point)]
Fraction = Annotated[float, PlainValidator(_quantity("ratio", "0 %", "100 %", above=True))]
Change = Annotated[float, PlainValidator(_quantity("ratio", "0 %", "10000 %", above=True))]
Power = Annotated[float, PlainValidator(_quantity("power", "0 W", "1 GW", above=True))]
Inductance = Annotated[float, PlainValidator(_quantity("inductance", "0 H", "1 MH", above=True))]
Rayleigh = Annotated[float, PlainValidator(_quantity("rayleigh coefficient", "0 m/A", "1000000 m/A"))]
TolerancePair = Annotated[tuple[float, float], PlainValidator(_tolerance)]
MaskCurve = Annotated[Curve, PlainValidator(_curve(MASK_COLUMNS))]
LevelCurve = Annotated[Curve, PlainValidator(_curve(LEVEL_COLUMNS))]
PermeabilityCurve = Annotated[Table, PlainValidator(_permeability)]

EXAMPLES = {
    "title": '"Workshop sheet stock"',
    "currency": '"EUR"',
    "materials": '"../material_sets/starter.toml"',
    "conductivity": UNITS["conductivity"][1],
    "density": UNITS["density"][1],
    "permeability": '1.0 or {law = "debye", initial = 3000, relaxation = "20 kHz"}',
    "origin": '{density = "supplier data sheet"}',
    "max_sheets": "4",
    "material": '"acrylic film"',
    "thickness": '"25 um"',
    "initial": "3000",
    "relaxation": '"20 kHz"',
    "resonance": '"5 MHz"',
    "damping": '"8 MHz"',
    "broadening": "0.2",
    "file": '"permeability.csv"',
    "terms": '[{law = "debye", initial = 300, relaxation = "5 kHz"}]',
    "distance": '"0.3 m"',
    "source_radius": '"12 mm"',
    "victim_radius": '"5 mm"',
    "source_gap": '"20 mm"',
    "victim_gap": '"25 mm"',
    "field": '{kind = "plane wave"}',
    "mask": '{points = [["1 kHz", "14 dB"]]}',
    "stack": "{max_sheets = 4}",
    "requirement": '[{field = {kind = "plane wave"}, mask = {points = [["1 MHz", "40 dB"]]}}]',
}
"""What to write for a key that is missing."""
