"""The commands of the bench, as a user runs them, on the demonstration and on wrong input."""

from __future__ import annotations

import json
import tomllib
from pathlib import Path
from typing import Any

import bench_files
import pandas as pd
import pytest
from typer.testing import CliRunner

from stackopt.cli import app
from stackopt.readers.setups import read_setup

DEMO = Path(__file__).parents[2] / "problems" / "bench_demo"


def run(*arguments: str | Path) -> Any:
    return CliRunner().invoke(app, ["bench", *map(str, arguments)], env={"COLUMNS": "120"})


def text_of(result: Any) -> str:
    """Everything a user sees, without line breaks."""
    return " ".join((result.output + result.stderr).split())


@pytest.mark.parametrize("command", [(), ("fit",), ("calibrate",), ("compare",)])
def test_help(command: tuple[str, ...]) -> None:
    result = run(*command, "--help")
    assert result.exit_code == 0
    assert "Usage" in result.output


def test_fit_writes_entry_json_and_plot(tmp_path: Path) -> None:
    setup = bench_files.write_setup(tmp_path)
    result = run("fit", setup, "--material", "foil", "--out", tmp_path / "foil.toml", "--bootstrap", "50")
    assert result.exit_code == 0, result.output
    entry = tomllib.loads((tmp_path / "foil.toml").read_text())["materials"]["foil"]
    assert entry["origin"]["conductivity"] == "measured, copper.csv, 2024-03-02"
    assert json.loads((tmp_path / "foil.json").read_text())["bootstrap_replicates"] == 50
    assert (tmp_path / "foil.png").stat().st_size > 10_000
    assert "conductivity x thickness only" in text_of(result)


def test_calibrate_writes_tables_that_a_setup_takes(tmp_path: Path) -> None:
    text = bench_files.SETUP.replace("permeability = 1.0", 'permeability = 1.0\nconductivity = "58 MS/m"')
    setup = bench_files.write_setup(tmp_path, text)
    result = run("calibrate", setup, "--out", tmp_path / "field.toml", "--plot", tmp_path / "fit.svg")
    assert result.exit_code == 0, result.output
    rest = bench_files.SETUP[bench_files.SETUP.index("[known]") :]
    again = bench_files.write_setup(tmp_path, (tmp_path / "field.toml").read_text() + "\n" + rest)
    assert read_setup(again).uncertainty.radii_m == 0.0
    assert run("fit", again, "--material", "foil", "--bootstrap", "0").exit_code == 0


def test_compare_on_the_demonstration(tmp_path: Path) -> None:
    table, plot = tmp_path / "table.csv", tmp_path / "plot.png"
    arguments = (DEMO / "stack.toml", DEMO / "prototype.csv", "--problem", DEMO / "problem.toml")
    result = run("compare", *arguments, "--csv", table, "--plot", plot)
    assert result.exit_code == 1
    said = text_of(result)
    assert "missed at 13 of 25 measured frequencies" in said
    assert "1. consistent with steel shim with 41 % of its permeability" in said
    assert len(pd.read_csv(table)) == 25
    assert plot.stat().st_size > 10_000
    as_text = run("compare", "steel shim 150um", *arguments[1:])
    assert as_text.exit_code == 1
    assert as_text.output.splitlines()[:8] == result.output.splitlines()[:8]


def test_a_sheet_that_does_nothing(tmp_path: Path) -> None:
    setup = bench_files.write_setup(tmp_path)
    rows = "".join(f"{number}e3,0\n" for number in range(1, 9))
    (tmp_path / "copper.csv").write_text("frequency_hz,attenuation_db\n" + rows)
    result = run("fit", setup, "--material", "foil")
    assert result.exit_code == 0
    assert "do not determine the conductivity: anything up to" in text_of(result)


def test_a_floor_is_respected(tmp_path: Path) -> None:
    setup = bench_files.write_setup(tmp_path)
    result = run("fit", setup, "--material", "foil", "--floor", "30 dB", "--bootstrap", "0")
    assert result.exit_code == 0
    assert "noise floor" in text_of(result)
    assert "only a lower bound" in text_of(result)


@pytest.mark.parametrize(
    ("arguments", "part"),
    [
        (("fit", "SETUP", "--material", "a/b"), "--material"),
        (("fit", "SETUP", "--material", "a", "--plot", "x.txt"), "--plot"),
        (("fit", "SETUP", "--material", "a", "--bootstrap", "-1"), "--bootstrap"),
        (("fit", "SETUP", "--material", "a", "--out", "none/x.toml"), "the folder none does not exist"),
        (("fit", "SETUP", "--material", "a", "--floor", "1 V"), "found '1 V'"),
        (("fit", "none.toml", "--material", "a"), "does not exist"),
        (("calibrate", "SETUP"), "known.conductivity: is missing"),
        (("compare", "gold 1um", "SWEEP", "--problem", "PROBLEM"), "'gold'"),
        (("compare", "none.toml", "SWEEP", "--problem", "PROBLEM"), "none.toml"),
        (("compare", "steel shim 1um", "SWEEP", "--problem", "PROBLEM", "--noise", "-1 dB"), "--noise"),
        (("compare", "steel shim 1um", "SWEEP", "--problem", "PROBLEM", "--noise", "1"), "--noise"),
        (("compare", "steel shim 1um", "a.s2p", "--problem", "PROBLEM"), "--without"),
        (("compare", "steel shim 1um", "SWEEP", "--problem", "PROBLEM", "--without", "a.s2p"), "two .s2p files"),
    ],
)
def test_wrong_input(tmp_path: Path, arguments: tuple[str, ...], part: str) -> None:
    known = {
        "SETUP": str(bench_files.write_setup(tmp_path)),
        "SWEEP": str(DEMO / "prototype.csv"),
        "PROBLEM": str(DEMO / "problem.toml"),
    }
    result = run(*(known.get(word, word) for word in arguments))
    assert result.exit_code == 2
    assert part in text_of(result)
    assert "Traceback" not in text_of(result)
    assert "mistake of its own" not in text_of(result)
