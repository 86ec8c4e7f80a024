from __future__ import annotations

import math
import re

import pytest

from stackopt.units import (
    EPSILON_0,
    ETA_0,
    MU_0,
    SPEED_OF_LIGHT,
    UNITS,
    format_attenuation,
    format_frequency,
    format_thickness,
    parse_quantity,
)


@pytest.mark.parametrize(
    ("text", "kind", "value"),
    [
        ("35 um", "length", 35e-6),
        ("35um", "length", 35e-6),
        ("35 µm", "length", 35e-6),
        ("35 μm", "length", 35e-6),
        ("  0.105 mm ", "length", 105e-6),
        ("105 um", "length", 105e-6),
        ("10 mil", "length", 254e-6),
        ("1 inch", "length", 0.0254),
        ("+1.5e2 cm", "length", 1.5),
        (".5 m", "length", 0.5),
        ("10 kHz", "frequency", 1e4),
        ("0 Hz", "frequency", 0.0),
        ("58.0 MS/m", "conductivity", 58e6),
        ("0.58 S/um", "conductivity", 0.58e6),
        ("8.89 g/cm^3", "density", 8890.0),
        ("8890 kg/m³", "density", 8890.0),
        ("8890 kg m^-3", "density", 8890.0),
        ("4 kg/m^2", "area density", 4.0),
        ("150 mT", "flux density", 0.15),
        ("-350 mV", "potential", -0.35),
        ("180 deg", "angle", math.pi),
        ("30°", "angle", math.pi / 6.0),
        ("14 dB", "level", 14.0),
        ("-14dB", "level", -14.0),
        ("5 %", "ratio", 0.05),
        ("+100%", "ratio", 1.0),
    ],
)
def test_quantities_are_read_in_si(text: str, kind: str, value: float) -> None:
    assert parse_quantity(text, kind) == pytest.approx(value, rel=1e-14)


@pytest.mark.parametrize(
    ("text", "kind"),
    [
        ("6283 rad/s", "frequency"),  # 1 kHz
        ("60 rpm", "frequency"),
        ("1 kBq", "frequency"),
        ("1000 s^-1", "frequency"),
        ("50 percent", "angle"),
        ("1 Np", "angle"),
        ("1 m/m", "angle"),
        ("1 bit", "angle"),
        ("20 dBm", "power"),
        ("1 MS/m rad", "conductivity"),
    ],
)
def test_units_that_convert_but_mean_something_else(text: str, kind: str) -> None:
    with pytest.raises(ValueError, match=rf"^found '{re.escape(text)}', which is not an? {kind}; write"):
        parse_quantity(text, kind)


@pytest.mark.parametrize(("text", "kind"), [("-0 mm", "length"), ("-0.0 dB", "level"), ("-0 %", "ratio")])
def test_minus_zero_is_zero(text: str, kind: str) -> None:
    assert math.copysign(1.0, parse_quantity(text, kind)) == 1.0


def test_the_same_thickness_is_the_same_number() -> None:
    assert parse_quantity("105 um", "length") == parse_quantity("0.105 mm", "length") == 105e-6


def test_the_printed_examples_can_be_read() -> None:
    for kind, (_, example) in UNITS.items():
        assert math.isfinite(parse_quantity(example.strip('"'), kind))


@pytest.mark.parametrize(
    ("text", "kind", "message"),
    [
        (35, "length", 'found 35, which has no unit; write the length as text with its unit, such as "35 um"'),
        (True, "length", "found true, which has no unit"),
        (None, "length", "found None"),
        ("35", "length", "found '35', which has no unit; write m or a multiple of it"),
        ("", "length", "found ''; write the length as a number and a unit"),
        ("thin", "length", "found 'thin'; write the length as a number and a unit"),
        ("nan um", "length", "found 'nan um'; write the length as a number and a unit"),
        ("inf um", "length", "found 'inf um'"),
        ("1e999 um", "length", "found '1e999 um', which is too large"),
        ("1e307 km", "length", "found '1e307 km', which is too large"),
        ("35 kg", "length", "found '35 kg', which is not a length"),
        ("35 umm", "length", "found '35 umm', whose unit 'umm' is unknown"),
        ("10 khz", "frequency", "whose unit 'khz' is unknown"),
        ("5 2**999999999 m", "length", "is unknown"),
        ("5 __import__('os')", "length", "is unknown"),
        ("5 a" + " " * 100_000 + "1", "length", "write the length as a number and a unit"),
        ("3,5 um", "length", "found '3,5 um'"),
        ("14", "level", "found '14', which has no unit; write dB"),
        ("14 %", "level", "found '14 %'; a level is given in dB"),
        ("14 dB", "ratio", "found '14 dB'; a ratio is given in %"),
    ],
)
def test_what_is_no_quantity_is_refused_with_the_unit_to_write(text: object, kind: str, message: str) -> None:
    with pytest.raises(ValueError, match=re.escape(message)):
        parse_quantity(text, kind)


def test_texts_for_people() -> None:
    assert [format_thickness(value) for value in (35e-6, 999.9e-6, 1e-3, 1.5e-3, 2.54e-5)] == [
        "35um",
        "999.9um",
        "1mm",
        "1.5mm",
        "25.4um",
    ]
    assert [format_frequency(value) for value in (0.0, 50.0, 1e3, 16e6, 1e9)] == [
        "0 Hz",
        "50 Hz",
        "1 kHz",
        "16 MHz",
        "1 GHz",
    ]
    assert [format_attenuation(value) for value in (-0.04, 120.0, 120.1)] == ["-0.0 dB", "120.0 dB", "> 120 dB"]


def test_constants_belong_together() -> None:
    assert pytest.approx(SPEED_OF_LIGHT) == 1.0 / math.sqrt(MU_0 * EPSILON_0)
    assert pytest.approx(376.73, abs=0.005) == ETA_0
