"""Drives in files and on the command line: what is read, what is refused, and the tables that come out."""

from __future__ import annotations

from pathlib import Path
from typing import Any

import numpy as np
import pandas as pd
import problem_files
import pytest
from typer.testing import CliRunner

from stackopt.cli import app
from stackopt.errors import InputError
from stackopt.outputs.drives import COIL_COLUMNS, LAYER_COLUMNS
from stackopt.problem import Drive
from stackopt.readers import read_problem

ROOT = Path(__file__).parents[1]
DRIVE = 'drive = [["100 kHz", "12 A"], ["1 kHz", "2 A"]]\n'
LIMITS = (
    'saturation_fraction = "40 %"\nmax_heat = "2 W"\nmax_inductance_change = "10 %"\n'
    'source_turns = 10\nsource_inductance = "24 uH"\n'
)
LOOPS = 'name = "loops"\n'
WAVE = 'name = "wave"\n'
SATURATION = 'saturation = "2.0 T"\n'
STACKS = ("steel 150um / copper 35um", "copper 70um")


def read(folder: Path, keys: str, after: str = LOOPS, **changes: Any) -> Any:
    return read_problem(problem_files.write(folder, {after: after + keys, **changes.pop("problem", {})}, **changes))


def run(*arguments: str | Path) -> Any:
    return CliRunner().invoke(app, [str(argument) for argument in arguments], env={"COLUMNS": "100"})


def test_a_drive_is_read_with_its_limits(tmp_path: Path) -> None:
    drive = read(tmp_path, DRIVE + LIMITS).requirements[0].drive
    assert drive == Drive(((1e3, 2.0), (1e5, 12.0)), 0.4, 2.0, 0.1, 10.0, 24e-6)
    assert read(tmp_path, DRIVE).requirements[0].drive == Drive(((1e3, 2.0), (1e5, 12.0)))
    assert read(tmp_path, "").requirements[0].drive is None


def test_dipoles_are_driven_by_a_moment(tmp_path: Path) -> None:
    dipoles = {
        'kind = "coaxial loops"\nsource_radius = "12 mm"\nvictim_radius = "5 mm"': 'kind = "coaxial dipoles"',
    }
    problem = read(tmp_path, 'drive = [["1 kHz", "50 mA m^2"]]\n', problem=dipoles)
    assert problem.requirements[0].drive.points == ((1e3, 0.05),)
    with pytest.raises(InputError, match=r"'12 A', which is not a moment; write A m\^2"):
        read(tmp_path, 'drive = [["1 kHz", "12 A"]]\n', problem=dipoles)
    with pytest.raises(InputError, match="max_inductance_change: found with coaxial dipoles, which have no turns"):
        read(tmp_path, 'drive = [["1 kHz", "1 A m^2"]]\nmax_inductance_change = "5 %"\n', problem=dipoles)


@pytest.mark.parametrize(
    ("keys", "message"),
    [
        ('drive = [["100 kHz", "0 A"]]', "requirement[1].drive[1]: found '0 A'; the peak must be above 0 A"),
        ('drive = [["100 kHz", "-2 A"]]', "drive[1]: found '-2 A'; the peak must be above 0 A"),
        ('drive = [["100 kHz", 12]]', "drive[1]: found 12, which has no unit; write the current"),
        ('drive = [["100 kHz", "0.5 A m^2"]]', "which is not a current; write A"),
        ('drive = [["100 kHz"]]', "write a point of the drive as a frequency and a peak, such as"),
        ('drive = [["-1 kHz", "1 A"]]', "drive[1]: found '-1 kHz'; it must be at least 0 Hz"),
        ("drive = []", "drive: found an empty list"),
        ('drive = [["1 kHz", "1 A"], ["1000 Hz", "2 A"]]', "drive[2]: found 1 kHz a second time"),
        (
            'drive = [["30 Hz", "1 A"]]',
            "requirement[1].drive: found 30 Hz, but the mask runs from 50 Hz to 1 MHz; drive within it",
        ),
        (
            DRIVE + 'max_inductance_change = "5 %"',
            "max_inductance_change: needs source_turns and source_inductance, to relate the change to",
        ),
        (
            DRIVE + 'max_inductance_change = "5 %"\nsource_turns = 10',
            "max_inductance_change: needs source_inductance, to relate the change to",
        ),
        ('max_heat = "2 W"', 'requirement[1].max_heat: found without a drive; write one, such as drive = [["100 kHz"'),
        ('saturation_fraction = "50 %"', "requirement[1].saturation_fraction: found without a drive"),
        (DRIVE + 'max_heat = "0 W"', "max_heat: found '0 W'; it must be above 0 W"),
        (DRIVE + 'max_heat = "2 A"', "max_heat: found '2 A', which is not a power; write W"),
        (DRIVE + 'saturation_fraction = "120 %"', "found '120 %'; it must be above 0 % and at most 100 %"),
        (DRIVE + "source_turns = 0", "source_turns: found 0; it must be above 0"),
        (DRIVE + 'source_inductance = "24"', "source_inductance: found '24', which has no unit; write H"),
        (DRIVE + 'max_heta = "2 W"', "max_heta: unknown key; did you mean 'max_heat'?"),
    ],
)  # fmt: skip
def test_mistakes_in_a_drive(tmp_path: Path, keys: str, message: str) -> None:
    with pytest.raises(InputError) as caught:
        read(tmp_path, keys + "\n")
    assert message in str(caught.value)
    assert len(caught.value.findings) == 1


def test_only_loops_and_dipoles_have_a_source(tmp_path: Path) -> None:
    with pytest.raises(InputError, match=r"requirement\[2\].drive: found with a plane wave; only coaxial loops"):
        read(tmp_path, 'drive = [["1 MHz", "1 A"]]\n', WAVE)


def test_a_source_on_the_first_face_cannot_be_driven(tmp_path: Path) -> None:
    for gap in ("0 mm", "0.2 mm"):
        with pytest.raises(InputError, match=f"drive: found a source_gap of {gap}, at which") as caught:
            read(tmp_path, DRIVE, problem={'source_gap = "20 mm"': f'source_gap = "{gap}"'})
        assert len(caught.value.findings) == 1


def test_a_permeable_material_in_use_needs_its_saturation(tmp_path: Path) -> None:
    with pytest.raises(InputError, match=r"requirement\[1\].drive: needs the saturation of 'steel'") as caught:
        read(tmp_path, DRIVE, materials={SATURATION: "", 'saturation = "test"\n': ""})
    assert len(caught.value.findings) == 1
    read(tmp_path, "", materials={SATURATION: "", 'saturation = "test"\n': ""})
    only_copper = {'use = ["copper", "steel"]': 'use = ["copper"]'}
    read(tmp_path, DRIVE, problem=only_copper, materials={SATURATION: "", 'saturation = "test"\n': ""})


def test_heat_is_an_objective_under_a_drive_only(tmp_path: Path) -> None:
    objectives = {'objectives = ["mass", "thickness"]': 'objectives = ["mass", "heat"]'}
    assert read(tmp_path, DRIVE, problem=objectives).search.objectives == ("mass", "heat")
    with pytest.raises(InputError, match=r"search.objectives\[2\]: found 'heat', but no requirement has a drive"):
        read(tmp_path, "", problem=objectives)


def test_the_rayleigh_coefficient_is_read_and_needs_an_origin(tmp_path: Path) -> None:
    given = {
        SATURATION: SATURATION + 'rayleigh = "5 mm/A"\n',
        'saturation = "test"\n': 'saturation = "test"\nrayleigh = "test"\n',
    }
    assert read(tmp_path, "", materials=given).materials["steel"].rayleigh_m_per_a == pytest.approx(5e-3)
    with pytest.raises(InputError, match=r"materials.steel.origin.rayleigh: is missing"):
        read(tmp_path, "", materials={SATURATION: SATURATION + 'rayleigh = "5 mm/A"\n'})
    with pytest.raises(InputError, match=r"rayleigh: found '-1 m/A'; it must be at least 0 m/A"):
        read(tmp_path, "", materials={SATURATION: SATURATION + 'rayleigh = "-1 m/A"\n'})


def test_predict_writes_layers_and_coil(tmp_path: Path) -> None:
    problem = problem_files.write(tmp_path, {LOOPS: LOOPS + DRIVE + LIMITS})
    layers, coil = tmp_path / "layers.csv", tmp_path / "coil.csv"
    result = run("predict", problem, STACKS[0], "--layers", layers, "--coil", coil)
    assert result.exit_code == 0, result.output
    for text in ("% of saturation in steel 150um", "in the stack; limit 2 W", "inductance -", "limit 10 %"):
        assert text in " ".join(result.output.split())
    frame = pd.read_csv(layers)
    assert tuple(frame.columns) == LAYER_COLUMNS
    assert list(frame["material"]) == ["steel", "copper"] * 2
    assert list(frame["frequency_hz"]) == [1e3, 1e3, 1e5, 1e5]
    assert list(frame["thickness_um"][:2]) == pytest.approx([150.0, 35.0])
    assert np.all(np.isnan(frame["flux_fraction"]) == (frame["material"] == "copper"))
    np.testing.assert_allclose(frame["flux_fraction"][::2], frame["peak_flux_t"][::2] / 2.0)
    change = pd.read_csv(coil)
    assert tuple(change.columns) == COIL_COLUMNS
    assert list(change["requirement"].unique()) == ["loops"]
    assert change["frequency_hz"].iloc[[0, -1]].tolist() == [50.0, 1e6]
    assert np.all(change["resistance_change_ohm"] > 0.0)


def test_several_stacks_are_told_apart(tmp_path: Path) -> None:
    problem = problem_files.write(tmp_path, {LOOPS: LOOPS + DRIVE})
    layers, coil = tmp_path / "layers.csv", tmp_path / "coil.csv"
    assert run("predict", problem, *STACKS, "--layers", layers, "--coil", coil).exit_code == 0
    for path in (layers, coil):
        assert list(pd.read_csv(path)["stack"].unique()) == ["steel 150um / copper 35um", "copper 70um"]


def test_tables_that_a_problem_has_nothing_for_are_refused(tmp_path: Path) -> None:
    problem = problem_files.write(tmp_path)
    result = run("predict", problem, STACKS[0], "--layers", tmp_path / "layers.csv")
    assert result.exit_code == 2
    assert "--layers: needs a requirement with a drive" in result.stderr
    lone = problem_files.PROBLEM.index("[[requirement]]"), problem_files.PROBLEM.index('[[requirement]]\nname = "wave"')
    path = problem_files.write(tmp_path, {problem_files.PROBLEM[lone[0] : lone[1]]: ""})
    result = run("predict", path, "copper 35um", "--coil", tmp_path / "coil.csv")
    assert result.exit_code == 2
    assert "--coil: needs a requirement of coaxial loops or coaxial dipoles" in result.stderr


def test_check_tells_drives_and_limits(tmp_path: Path) -> None:
    problem = problem_files.write(tmp_path, {LOOPS: LOOPS + DRIVE + LIMITS})
    text = " ".join(run("check", problem).output.split())
    assert "2 A at 1 kHz, 12 A at 100 kHz (ampere-turns peak, acting together)" in text
    assert "flux density up to 40 % of saturation in every layer; heat in the stack up to 2 W" in text
    assert "inductance of the source, 24 uH with 10 turns, changed by up to 10 %" in text


def test_the_example_problem_has_stacks_that_keep_and_stacks_that_break_each_limit() -> None:
    from stackopt.inside import worst_inside

    problem = read_problem(ROOT / "problems" / "charger_drive.toml")
    drive = problem.requirements[0].drive
    assert drive is not None
    stacks = [(one, other) for one in problem.sheets for other in problem.sheets]
    worst = worst_inside(problem, stacks)
    assert drive.max_heat_w is not None
    assert drive.max_inductance_change is not None
    for values, limit in (
        (worst.flux_fraction, drive.saturation_fraction),
        (worst.heat_w, drive.max_heat_w),
        (worst.inductance_change, drive.max_inductance_change),
    ):
        assert 0 < np.count_nonzero(values > limit) < len(stacks)
    assert 0 < np.count_nonzero(worst.excess <= 0.0) < len(stacks)
