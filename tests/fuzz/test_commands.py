"""Damaged files through the commands as people type them: real processes, exit codes, and never a traceback."""

from __future__ import annotations

import os
import random
import resource
import shutil
import subprocess
import sys
from collections.abc import Iterator
from pathlib import Path

import pytest
from mutations import copy_examples, mutated

FIRST_SEED = 4_000
SECONDS = 10.0
"""Of processor time for one command; the machine may be busy with others."""
START = "from stackopt.cli import main; main()"
COMMANDS = {
    "check": ("check", "problems/coil_beside_sensor.toml"),
    "predict": ("predict", "problems/coil_beside_sensor.toml", "copper 35um"),
    "materials": ("materials", "material_sets/starter.toml"),
    "page": ("page", "run"),
    "pick": ("pick", "run", "--lightest"),
}
FILES = {
    "check": ("problems/coil_beside_sensor.toml", "material_sets/starter.toml"),
    "predict": ("problems/coil_beside_sensor.toml", "material_sets/starter.toml"),
    "materials": ("material_sets/starter.toml",),
    "page": ("run/run.json", "run/front.csv", "run/inputs/problems/coil_beside_sensor.toml"),
    "pick": ("run/run.json", "run/front.csv", "run/front_equals.csv", "run/inputs/material_sets/starter.toml"),
}
"""Files that each command reads."""
CASES = [(command, FIRST_SEED + number) for command in COMMANDS for number in range(8)]


@pytest.fixture(scope="module")
def examples(tmp_path_factory: pytest.TempPathFactory) -> Path:
    folder = tmp_path_factory.mktemp("examples") / "files"
    copy_examples(folder)
    return folder


@pytest.fixture
def folder(examples: Path, tmp_path: Path) -> Iterator[Path]:
    yield shutil.copytree(examples, tmp_path / "files")
    shutil.rmtree(tmp_path / "files")


def start(folder: Path, *arguments: str) -> subprocess.CompletedProcess[str]:
    """Run a command; its processor time must stay within the limit."""
    environment = {name: value for name, value in os.environ.items() if name != "STACKOPT_DEBUG"}
    before = children_s()
    done = subprocess.run(
        [sys.executable, "-c", START, *arguments],
        cwd=folder,
        env=environment,
        stdin=subprocess.DEVNULL,
        capture_output=True,
        text=True,
        errors="replace",
        timeout=60.0,
        check=False,
    )
    assert children_s() - before < SECONDS
    return done


def children_s() -> float:
    usage = resource.getrusage(resource.RUSAGE_CHILDREN)
    return usage.ru_utime + usage.ru_stime


def check_end(done: subprocess.CompletedProcess[str]) -> None:
    """An exit code of the documented ones, and a message where it says that the input is bad."""
    said = done.stdout + done.stderr
    assert done.returncode in (0, 1, 2), said
    assert "Traceback" not in said
    assert "Warning" not in said
    assert "mistake of its own" not in said
    assert done.returncode != 2 or done.stderr.strip()


@pytest.mark.slow
@pytest.mark.parametrize("command", COMMANDS)
def test_whole_files(command: str, folder: Path) -> None:
    done = start(folder, *COMMANDS[command])
    assert done.returncode == 0, done.stderr


@pytest.mark.slow
@pytest.mark.parametrize(("command", "seed"), CASES)
def test_damaged_files(command: str, seed: int, folder: Path) -> None:
    rng = random.Random(seed)
    name = rng.choice(FILES[command])
    content, names = mutated((folder / name).read_bytes(), rng)
    (folder / name).write_bytes(content)
    done = start(folder, *COMMANDS[command])
    try:
        check_end(done)
    except AssertionError as error:
        error.add_note(f"seed {seed}, {name}: {', '.join(names)}\n{done.stderr[-2000:]}")
        raise


EXTREMES = {
    "loud frequency": ("points = [[", 'points = [["1e15 Hz", "8 dB"]] #'),
    "faint frequency": ("points = [[", 'points = [["1e-6 Hz", "8 dB"], ["1 Hz", "9 dB"]] #'),
    "high mask": ("points = [[", 'points = [["1 kHz", "10000 dB"], ["2 kHz", "9999 dB"]] #'),
    "small coil": ("source_radius", 'source_radius = "1 nm" #'),
    "large coil": ("source_radius", 'source_radius = "1000 km" #'),
    "near": ("source_gap", 'source_gap = "1 nm" #'),
    "far": ("source_gap", 'source_gap = "1000 km" #'),
}
"""Values at the ends of what a file may hold: the line that begins so, and what is written instead."""


@pytest.mark.slow
@pytest.mark.parametrize("command", ["check", "predict"])
@pytest.mark.parametrize("name", EXTREMES)
def test_values_at_the_ends_of_what_is_allowed(name: str, command: str, folder: Path) -> None:
    start_of_line, new = EXTREMES[name]
    path = folder / "problems" / "coil_beside_sensor.toml"
    lines = path.read_text(encoding="utf-8").splitlines()
    changed = [new if line.startswith(start_of_line) else line for line in lines]
    assert changed != lines
    path.write_text("\n".join(changed) + "\n", encoding="utf-8")
    check_end(start(folder, *COMMANDS[command]))


@pytest.mark.slow
def test_a_tool_for_drawing_takes_dollars_as_they_are(folder: Path) -> None:
    """Titles and currencies with dollar signs are no formulas."""
    path = folder / "problems" / "coil_beside_sensor.toml"
    text = path.read_text(encoding="utf-8")
    path.write_text(
        text.replace('name = "', 'name = "$x^{ at 5 $ ').replace('title = "', 'title = "$\\\\frac{ $ '), "utf-8"
    )
    path = folder / "material_sets" / "starter.toml"
    path.write_text(path.read_text(encoding="utf-8").replace('currency = "', 'currency = "$_{ $'), "utf-8")
    done = start(folder, *COMMANDS["predict"], "--plot", "plot.png")
    check_end(done)
    assert (folder / "plot.png").stat().st_size > 10_000
    done = start(folder, *COMMANDS["materials"], "--plot", "plot.svg")
    assert done.returncode == 0, done.stderr
