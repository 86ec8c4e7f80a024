"""Changes of a file that mean nothing change nothing, and those that break its meaning are told with their place."""

from __future__ import annotations

import dataclasses
import random
import re
from collections.abc import Callable
from pathlib import Path

import pytest
from mutations import copy_examples
from problem_files import PROBLEM as PROBLEM_TEXT
from problem_files import SET as SET_TEXT
from problem_files import TABLES, replaced, write

from stackopt.errors import InputError
from stackopt.problem import Problem
from stackopt.readers import parse_stack, read_problem
from stackopt.readers.sweeps import read_sweep

SAME_QUANTITIES = {
    "35 um": ("0.035 mm", "3.5e1 um", "35e-6 m", "35.000 µm", "35 μm", "+35um", "  35   um ", "3.5E-5 m", "0.0035 cm"),
    "12 mm": ("1.2 cm", "0.012 m", "12000 um", "1.2e-2m", "12 millimeter"),
    "58 MS/m": ("58e6 S/m", "5.8e7 S/m", "0.058 GS/m", "58 S/um", "580 kS/cm", "58 megasiemens/meter"),
    "8890 kg/m^3": ("8.89 g/cm^3", "8890 kg/m³", "8890 kg/m**3", "8.89e3 kg m^-3", "8.89 g/cc"),
    "1 kHz": ("1000 Hz", "1e3 Hz", "0.001 MHz", "1 kilohertz"),
    "14 dB": ("14.0 dB", "1.4e1 dB", "+14dB"),
    "5 %": ("5.0 %", "5%", "0.5e1 %"),
    "-0.35 V": ("-350 mV", "-0.35V", "-35e-2 V"),
    "2.0 T": ("2 T", "2000 mT", "2e0 T"),
    "5 kHz": ("5000 Hz", "5e-3 MHz"),
}


def meaning(problem: Problem) -> Problem:
    """A problem without where its files lie."""
    return dataclasses.replace(problem, name="", files=())


@pytest.fixture
def plain(tmp_path: Path) -> Problem:
    return meaning(read_problem(write(tmp_path)))


def changed(folder: Path, problem: Callable[[str], str] = str, materials: Callable[[str], str] = str) -> Problem:
    write(folder)
    (folder / "problem.toml").write_bytes(problem(PROBLEM_TEXT).encode("utf-8"))
    (folder / "sets" / "set.toml").write_bytes(materials(SET_TEXT).encode("utf-8"))
    return meaning(read_problem(folder / "problem.toml"))


def comments(text: str) -> str:
    return "# x = [\n" + text.replace("\n", '   # a "remark", not a value\n') + "\n\n# the end"


def spaces(text: str) -> str:
    return re.sub(r"^(\w+) = ", r"  \1   =\t", text, flags=re.MULTILINE).replace("\n[", "\n\n\n[")


def shuffled_keys(text: str) -> str:
    """The keys of every table in another order."""
    rng, blocks = random.Random(5), re.split(r"(?m)^(?=\[)", text)
    for number, block in enumerate(blocks):
        head, *lines = block.splitlines()
        keep = [head] if head.startswith("[") else []
        lines = lines if keep else [head, *lines]
        keys = [line for line in lines if line.strip()]
        rng.shuffle(keys)
        blocks[number] = "\n".join([*keep, *keys]) + "\n"
    return "".join(blocks)


def moved_tables(text: str) -> str:
    """The tables of the search and of the rules before the requirements."""
    head, *rest = re.split(r"(?m)^(?=\[\[requirement|\[stack|\[search)", text)
    return head + "".join(sorted(rest, key=lambda block: block.startswith("[[requirement]]")))


SAME_TEXTS: dict[str, Callable[[str], str]] = {
    "line ends of Windows": lambda text: text.replace("\n", "\r\n"),
    "byte order mark": lambda text: "\ufeff" + text,
    "comments": comments,
    "spaces": spaces,
    "order of keys": shuffled_keys,
    "single quotes": lambda text: re.sub(r'"([^"\n]*)"', r"'\1'", text),
    "escapes": lambda text: text.replace('"copper"', '"\\u0063opper"'),
    "no line end at the end": lambda text: text.rstrip("\n"),
}


@pytest.mark.parametrize("change", SAME_TEXTS.values(), ids=SAME_TEXTS)
def test_the_same_problem_written_differently(change: Callable[[str], str], plain: Problem, tmp_path: Path) -> None:
    assert change(PROBLEM_TEXT) != PROBLEM_TEXT
    assert changed(tmp_path, problem=change) == plain
    assert changed(tmp_path, materials=change) == plain
    assert changed(tmp_path, problem=change, materials=change) == plain


def test_the_order_of_tables(plain: Problem, tmp_path: Path) -> None:
    assert moved_tables(PROBLEM_TEXT) != PROBLEM_TEXT
    assert changed(tmp_path, problem=moved_tables) == plain


@pytest.mark.parametrize(("old", "new"), [(old, new) for old, words in SAME_QUANTITIES.items() for new in words])
def test_the_same_quantity_in_other_units(old: str, new: str, plain: Problem, tmp_path: Path) -> None:
    assert f'"{old}"' in PROBLEM_TEXT + SET_TEXT

    def change(text: str) -> str:
        return text.replace(f'"{old}"', f'"{new}"')

    assert changed(tmp_path, problem=change, materials=change) == plain


@pytest.mark.parametrize(
    "change",
    [
        lambda text: text.replace("\n", "\r\n"),
        lambda text: text.replace("\n", "\r"),
        lambda text: "\ufeff" + text,
        lambda text: "# a remark\n\n" + text.replace("\n", "\n  # another\n", 1) + "\n\n",
        lambda text: text.replace(",", " , "),
        lambda text: text.replace("1e6,", "1000000.0,").replace("1e9,", "+1.0E+9,"),
        lambda text: re.sub(r"^(\S+?),", r'"\1",', text, flags=re.MULTILINE),
    ],
)
def test_the_same_table_written_differently(change: Callable[[str], str], plain: Problem, tmp_path: Path) -> None:
    for name in ("mask.csv", "sets/ribbon.csv"):
        assert change(TABLES[name]) != TABLES[name] or "1e9" not in TABLES[name]
        assert meaning(read_problem(write(tmp_path, tables={name: change(TABLES[name])}))) == plain


def test_the_same_sweep_written_differently(tmp_path: Path) -> None:
    text = "frequency_hz,without_db,with_db\n1000,-3.5,-20.25\n10000,-3.25,-40.5\n"
    versions = [
        text,
        text.replace("\n", "\r\n"),
        text.replace("\n", "\r"),
        "\ufeff# a remark\n" + text,
        text.replace(",", ";").replace(".", ","),
        text.replace("1000,", "1e3,", 1).upper().replace("E3", "e3"),
        text.replace("frequency_hz,without_db,with_db", '"frequency_hz", "without_db", "with_db"'),
    ]
    sweeps = []
    for number, version in enumerate(versions):
        (tmp_path / f"{number}.csv").write_bytes(version.encode())
        sweeps.append(read_sweep(tmp_path / f"{number}.csv"))
    for sweep in sweeps[1:]:
        assert sweep.frequency_hz.tolist() == sweeps[0].frequency_hz.tolist()
        assert sweep.attenuation_db.tolist() == sweeps[0].attenuation_db.tolist()


def test_the_same_stack_written_differently() -> None:
    texts = ("copper 35um/steel 0.15mm", " copper  35 um /  steel 150 um ", "copper\t0.035mm\n/\nsteel 150e-6 m")
    assert len({parse_stack(text, ("copper", "steel")) for text in texts}) == 1


def test_every_example_problem_with_line_ends_of_windows(tmp_path: Path) -> None:
    copy_examples(tmp_path)
    for path in sorted((tmp_path / "problems").glob("*.toml")):
        before = meaning(read_problem(path))
        for name in tmp_path.rglob("*.[tc][os][mv]*"):
            name.write_bytes(name.read_bytes().replace(b"\r\n", b"\n").replace(b"\n", b"\r\n"))
        assert meaning(read_problem(path)) == before


BROKEN_QUANTITIES = (
    '"35 kg"',
    '"35"',
    "35",
    "35.0",
    "nan",
    '"nan um"',
    '"inf um"',
    '"-35 um"',
    '"35 um 2"',
    '""',
    "true",
    '"1e400 um"',
    '"0 um"',
    '"1e-5 um"',
    '"35 UM"',
    '"35 dB"',
    '"35 %"',
    '"35 um/um"',
    "[35]",
    '"−35 um"',
)


@pytest.mark.parametrize("value", BROKEN_QUANTITIES)
def test_a_thickness_that_is_none(value: str, tmp_path: Path) -> None:
    path = write(tmp_path, materials={'"35 um"': value})
    with pytest.raises(InputError) as caught:
        read_problem(path)
    (finding,) = caught.value.findings
    assert finding.file.endswith("set.toml")
    assert finding.key == "materials.copper.gauges[3]"
    assert finding.message.startswith("found ")


ELSEWHERE = {
    '"58 MS/m"': (
        "materials.copper.conductivity",
        ("58", '"58 m"', '"58 MS"', '"-1 S/m"', '"1e300 S/m"', '"58 MS/m rad"'),
    ),
    '"8890 kg/m^3"': (
        "materials.copper.density",
        ("8890", '"8890 kg/m^2"', '"0 kg/m^3"', '"nan kg/m^3"', '"1e9 kg/m^3"'),
    ),
    '"5 kHz"': (
        "materials.steel.permeability.relaxation",
        ("5000", '"5 mm"', '"0 Hz"', '"5000 rad/s"', '"60 rpm"', '"5 kBq"'),
    ),
    '"2.0 T"': ("materials.steel.saturation", ("2.0", '"2 V"', '"-2 T"', '"2 G"')),
    '"-0.35 V"': ("materials.copper.anodic_index", ("-0.35", '"-0.35 A"', '"-3500 V"', '"-7 dBm"')),
    'thickness = "5 %"': (
        "materials.copper.tolerance.thickness",
        ("thickness = 0.05", 'thickness = "5 um"', 'thickness = "-5 %"'),
    ),
    "initial = 280": (
        "materials.steel.permeability.initial",
        ("initial = nan", "initial = inf", 'initial = "280"', "initial = -280", "initial = 1e300"),
    ),
    "price_per_kg = 14.0": (
        "materials.copper.price_per_kg",
        ("price_per_kg = nan", "price_per_kg = -1", "price_per_kg = 1e300", 'price_per_kg = "14 EUR"'),
    ),
}
"""What stands in the set, its key, and what cannot stand there."""


@pytest.mark.parametrize(("old", "value"), [(old, value) for old, (_, values) in ELSEWHERE.items() for value in values])
def test_values_of_a_set_that_mean_something_else(old: str, value: str, tmp_path: Path) -> None:
    with pytest.raises(InputError) as caught:
        read_problem(write(tmp_path, materials={old: value}))
    assert {finding.key for finding in caught.value.findings} == {ELSEWHERE[old][0]}
    assert all(finding.file.endswith("set.toml") for finding in caught.value.findings)


@pytest.mark.parametrize(
    "angle",
    ['"0.5"', "0.5", '"50 %"', '"50 percent"', '"3 Np"', '"5 m/m"', '"90 deg"', '"-1 deg"', '"1 bit"', '"1 pi"'],
)
def test_angles_that_are_none(angle: str, tmp_path: Path) -> None:
    with pytest.raises(InputError, match=r"requirement\[2\]\.field\.angle: found"):
        read_problem(write(tmp_path, {'kind = "plane wave"': f'kind = "plane wave"\nangle = {angle}'}))


POINTS = '[["50 Hz", "8 dB"], ["1 kHz", "14 dB"], ["1 MHz", "90 dB"]]'


@pytest.mark.parametrize(
    ("points", "key"),
    [
        ('[["50 Hz", "8 dB"], ["50 Hz", "14 dB"]]', "points[2]"),
        ('[["1 kHz", "8 dB"], ["50 Hz", "14 dB"]]', "points[2]"),
        ('[["50 Hz", "nan dB"]]', "points[1]"),
        ('[["nan Hz", "8 dB"]]', "points[1]"),
        ('[["8 dB", "50 Hz"]]', "points[1]"),
        ('[["50 rad/s", "8 dB"]]', "points[1]"),
        ('[["1e300 Hz", "8 dB"]]', "points[1]"),
        ('[["1e-300 Hz", "8 dB"]]', "points[1]"),
        ('[["50 Hz", "1e300 dB"]]', "points[1]"),
        ("[[50, 8]]", "points[1]"),
    ],
)
def test_points_that_mean_nothing(points: str, key: str, tmp_path: Path) -> None:
    with pytest.raises(InputError) as caught:
        read_problem(write(tmp_path, {POINTS: points}))
    assert [finding.key for finding in caught.value.findings] == [f"requirement[1].mask.{key}"]


ROWS = (
    "nan,1",
    "1e6,nan",
    "1e6,inf",
    "-1e6,1",
    "1e400,1",
    "1e6,-1",
    "1e6",
    "1e6,1,1",
    "1e6;1",
    "1 e6,1",
    "1_0,1",
    "1e300,1",
    "1e-300,1",
    "1e6,1e300",
    "0x10,1",
    "１e6,x",
    ",",
    "1e6,1\x85",
    "2e5,1",
)


@pytest.mark.parametrize("row", ROWS)
def test_rows_that_mean_nothing(row: str, tmp_path: Path) -> None:
    table = f"frequency_hz,attenuation_db\n# a remark\n3e5,2\n{row}\n"
    if row == "1e6,1\x85":  # a blank of Unicode at the end of a cell is a blank
        assert read_problem(write(tmp_path, tables={"mask.csv": table})).requirements[1].mask.attenuation_db == (
            2.0,
            1.0,
        )
        return
    with pytest.raises(InputError) as caught:
        read_problem(write(tmp_path, tables={"mask.csv": table}))
    (finding,) = caught.value.findings
    assert finding.file.endswith("mask.csv")
    assert finding.key == "line 4"


def test_minus_zero_is_zero(tmp_path: Path) -> None:
    changes = {'"20 mm"': '"-0 mm"', '"2 dB"': '"-0.0 dB"'}
    problem = read_problem(
        write(tmp_path, changes, {'"0 S/m"': '"-0 S/m"'}, {"mask.csv": "frequency_hz,attenuation_db\n1e6,-0\n"})
    )
    assert re.search(r"-0\.0(?!\d)", repr(problem)) is None


def test_names_of_keys_are_told_even_where_they_are_endless(tmp_path: Path) -> None:
    text = replaced(PROBLEM_TEXT, {"max_sheets = 4": f"max_sheets = 4\n{'m' * 100_000} = 1"})
    write(tmp_path)
    (tmp_path / "problem.toml").write_text(text, encoding="utf-8")
    with pytest.raises(InputError, match=r'stack\."mmmmmmm') as caught:
        read_problem(tmp_path / "problem.toml")
    assert len(str(caught.value)) < 1000
