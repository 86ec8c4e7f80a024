"""Sweeps as instruments write them, and everything that can be wrong with them."""

from __future__ import annotations

import sys
from pathlib import Path

import numpy as np
import pytest
from hypothesis import given
from hypothesis import strategies as st

from stackopt.errors import InputError
from stackopt.readers.sweeps import Sweep, read_sweep

EXACT = {"rtol": 1e-12}


def read(folder: Path, text: str | bytes, floor: str | None = None) -> Sweep:
    path = folder / "sweep.csv"
    path.write_bytes(text if isinstance(text, bytes) else text.encode())
    return read_sweep(path, floor)


def mistakes(folder: Path, text: str | bytes, floor: str | None = None) -> str:
    with pytest.raises(InputError) as caught:
        read(folder, text, floor)
    return str(caught.value)


@pytest.mark.parametrize(
    "text",
    [
        "frequency_hz,without_v,with_v\n1000,1.0,0.1\n2000,2.0,0.02\n",
        "frequency_hz,without_db,with_db\n1000,0,-20\n2000,6,-34\n",
        "frequency_hz,attenuation_db\n1000,20\n2000,40\n",
        "frequency_hz;attenuation_db\n1000;20.0\n2000;40.0\n",
        "frequency_hz;attenuation_db\n1000,0;20,0\n2000,0;40,0\n",
        "\ufefffrequency_hz,attenuation_db\r\n1000,20\r\n2000,40\r\n",
        "# bench 3\n\nFrequency_Hz , Attenuation_dB\n# again\n1e3, 20\n 2e3,40\n",
        '"attenuation_db","frequency_hz"\n20,1000\n40,2000\n',
    ],
)
def test_every_form_reads_the_same(tmp_path: Path, text: str) -> None:
    sweep = read(tmp_path, text)
    np.testing.assert_allclose(sweep.frequency_hz, [1000.0, 2000.0], **EXACT)
    np.testing.assert_allclose(sweep.attenuation_db, [20.0, 40.0], **EXACT)
    assert not sweep.remarks
    assert not np.any(sweep.at_floor)


def test_levels_without_the_sheet_are_kept(tmp_path: Path) -> None:
    sweep = read(tmp_path, "frequency_hz,without_v,with_v\n1000,10,1\n")
    assert sweep.without_db is not None
    np.testing.assert_allclose(sweep.without_db, [20.0], **EXACT)


def test_unsorted_repeated_and_useless_lines_are_reported(tmp_path: Path) -> None:
    text = "frequency_hz,without_v,with_v,note\n3000,1,0.1,a\n1000,1,0.01,b\n0,1,1,c\n1000,1,0.1,d\n5000,1,0,e\n"
    sweep = read(tmp_path, text)
    np.testing.assert_allclose(sweep.frequency_hz, [1000.0, 3000.0], **EXACT)
    np.testing.assert_allclose(sweep.attenuation_db, [30.0, 20.0], **EXACT)
    said = "; ".join(sweep.remarks)
    for part in ("note", "line 4: frequency not above 0 Hz", "line 6: an amplitude of 0 V", "sorted", "mean", "1 kHz"):
        assert part in said


@pytest.mark.parametrize(
    ("text", "floor"),
    [
        ("frequency_hz,without_v,with_v\n1e3,1,0.1\n1e6,1,0.002\n", "1 mV"),
        ("frequency_hz,without_db,with_db\n1e3,0,-20\n1e6,0,-54\n", "-60 dB"),
        ("frequency_hz,attenuation_db\n1e3,20\n1e6,54\n", "60 dB"),
    ],
)
def test_levels_near_the_floor_are_marked(tmp_path: Path, text: str, floor: str) -> None:
    sweep = read(tmp_path, text, floor)
    assert sweep.at_floor.tolist() == [False, True]
    assert "1 of 2 frequencies" in sweep.remarks[-1]
    assert "1 MHz" in sweep.remarks[-1]


@pytest.mark.parametrize(
    ("text", "parts"),
    [
        ("", ["holds no header"]),
        ("frequency_hz,attenuation_db\n", ["no numbers"]),
        ("frequency,attenuation_db\n1,2\n", ["line 1", "frequency,attenuation_db", "frequency_hz,attenuation_db"]),
        ("frequency_hz,attenuation_db,without_db,with_db\n1,2,3,4\n", ["line 1", "one of"]),
        ("frequency_hz,frequency_hz,attenuation_db\n1,2,3\n", ["line 1", "each once"]),
        (
            "frequency_hz,attenuation_db\n1000,x\n2000,\n",
            ["line 2, column 2 (attenuation_db)", "'x'", "line 3, column 2"],
        ),
        ("frequency_hz,attenuation_db\n1000,nan\n", ["line 2, column 2", "finite"]),
        ("frequency_hz,attenuation_db\n1_000,1\n", ["line 2, column 1 (frequency_hz)", "1_000"]),
        ("frequency_hz,attenuation_db\n1000,2,5\n", ["line 2", "3 columns", "decimal commas need ;"]),
        ("frequency_hz,without_v,with_v\n1000,1,-0.1\n", ["line 2, column 3 (with_v)", "-0.1 V"]),
        ("frequency_hz;attenuation_db\n1.000,5;20\n", ["mixes commas and points", "1.000,5"]),
        ("frequency_hz;attenuation_db\n1,000;20\n2,000;30\n", ["divide thousands", "1,000"]),
        ("frequency_hz,without_db,with_db\n1,1e308,-1e308\n", ["line 2, column 2", "line 2, column 3", "1e+308 dB"]),
        ("frequency_hz,attenuation_db\n1e300,2\n", ["line 2, column 1", "1e+300 Hz"]),
        ("frequency_hz,attenuation_db\n-5,20\n", ["no line with a frequency above 0 Hz"]),
        (b"frequency_hz,attenuation_db\n1000,\xff\n", ["not UTF-8", "line 2"]),
    ],
)
def test_mistakes_name_line_and_column(tmp_path: Path, text: str | bytes, parts: list[str]) -> None:
    said = mistakes(tmp_path, text)
    for part in ["sweep.csv", *parts]:
        assert part in said


@pytest.mark.parametrize(("floor", "part"), [("20 uV", "20 uV"), ("x", "x"), ("5", "no unit")])
def test_a_floor_of_the_wrong_kind(tmp_path: Path, floor: str, part: str) -> None:
    said = mistakes(tmp_path, "frequency_hz,attenuation_db\n1000,2\n", floor)
    assert part in said
    assert "largest attenuation that can be measured" in said


def test_many_mistakes_are_shortened(tmp_path: Path) -> None:
    said = mistakes(tmp_path, "frequency_hz,attenuation_db\n" + "x,1\n" * 50)
    assert said.count("\n") == 10
    assert "40 more places" in said


@given(st.text(max_size=200))
def test_no_text_breaks_the_reader(tmp_path_factory: pytest.TempPathFactory, text: str) -> None:
    path = tmp_path_factory.mktemp("any") / "sweep.csv"
    path.write_bytes(("frequency_hz,attenuation_db\n" + text).encode("utf-8", "surrogatepass"))
    try:
        sweep = read_sweep(path)
    except InputError:
        return
    assert np.all(np.diff(sweep.frequency_hz) > 0.0)
    assert np.all(np.isfinite(sweep.attenuation_db))


def touchstone(folder: Path, name: str, s21: list[float], frequency: tuple[float, ...] = (1e3, 1e4)) -> Path:
    rows = "".join(f"{f:g} 0.1 0 {value:g} 0 0.5 0 0.1 0\n" for f, value in zip(frequency, s21, strict=True))
    path = folder / name
    path.write_text("! test\n# Hz S MA R 50\n" + rows)
    return path


def test_touchstone_pair(tmp_path: Path) -> None:
    without = touchstone(tmp_path, "without.s2p", [0.1, 0.1])
    shielded = touchstone(tmp_path, "with.s2p", [0.01, 0.001])
    sweep = read_sweep(shielded, "-65 dB", without)
    np.testing.assert_allclose(sweep.attenuation_db, [20.0, 40.0], rtol=1e-9)
    assert sweep.at_floor.tolist() == [False, True]


def test_touchstone_mistakes(tmp_path: Path) -> None:
    shielded = touchstone(tmp_path, "with.s2p", [0.01, 0.001])
    other = touchstone(tmp_path, "other.s2p", [0.1, 0.1], (1e3, 2e4))
    broken = tmp_path / "broken.s2p"
    broken.write_text("# Hz S MA R 50\n1 2 three\n")
    for without, part in ((None, "without the sheet"), (other, "other frequencies"), (broken, "not a readable")):
        with pytest.raises(InputError, match=part):
            read_sweep(shielded, None, without)
    with pytest.raises(InputError, match="does not exist"):
        read_sweep(shielded, None, tmp_path / "none.s2p")


def test_touchstone_without_its_library(tmp_path: Path, monkeypatch: pytest.MonkeyPatch) -> None:
    shielded = touchstone(tmp_path, "with.s2p", [0.01, 0.001])
    monkeypatch.setitem(sys.modules, "skrf", None)
    with pytest.raises(InputError, match=r"stackopt\[touchstone\]"):
        read_sweep(shielded, None, shielded)
