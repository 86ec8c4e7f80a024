"""Runs that are interrupted, terminated and killed at random moments, with real processes, and resumed.

However often that happens, the front is that of an uninterrupted run, and whoever reads front.csv meanwhile reads a
whole one. Checkpoints are written far more often here than a run writes them, so that most of the kills hit one.
"""

from __future__ import annotations

import random
import shutil
import signal
import subprocess
import sys
import threading
import time
from pathlib import Path

import numpy as np
import pandas as pd
import pytest

from stackopt import attenuation, read_problem
from stackopt.checkpoint import read_checkpoint

KILLS = 13
"""At least so many of each of the two kinds of run."""
EXPLORED, PROVED = "explored", "proved"
COMMAND = """
import sys
import types
try:
    import stackopt.run
    from stackopt.cli import main
except KeyboardInterrupt:  # the command itself imports most of that where an interrupt is caught
    print("Interrupted.")
    sys.exit(130)
stackopt.run.CHECKPOINT_EVERY_S = 0.5
# What is drawn takes most of the time of so short a run; the tables and the record stay.
stackopt.run.write_trade_off = stackopt.run.write_curves = lambda *_: None
sys.modules["stackopt.outputs.page"] = types.SimpleNamespace(write_page=lambda *_: None)
sys.argv[0] = "stackopt"
main()
"""
KEYS = ("conductivity", "density", "permeability", "price_per_kg")
MASKS = {EXPLORED: ("6 dB", "20 dB"), PROVED: ("24 dB", "90 dB")}
OBJECTIVES = {EXPLORED: '["mass", "margin"]', PROVED: '["mass", "cost", "thickness"]'}


def write_problem(folder: Path, kind: str) -> Path:
    """An invented problem that takes some seconds, mostly of exploring, or of proving."""
    gauges = {"copper": (18, 35, 70, 105, 150), "steel": (50, 80, 100, 150, 200), "alloy": (25, 50, 80, 100)}
    values = {
        "copper": ("58 MS/m", "8890 kg/m^3", "1.0", 14.0),
        "steel": ("7 MS/m", "7850 kg/m^3", '{law = "debye", initial = 250, relaxation = "50 kHz"}', 3.0),
        "alloy": ("1.7 MS/m", "8700 kg/m^3", '{law = "debye", initial = 20000, relaxation = "3 kHz"}', 90.0),
    }
    lines = ['title = "Invented sheets"', 'currency = "EUR"']
    for name, (conductivity, density, permeability, price) in values.items():
        stock = ", ".join(f'"{gauge} um"' for gauge in gauges[name])
        lines += [
            f"[materials.{name}]", f'conductivity = "{conductivity}"', f'density = "{density}"',
            f"permeability = {permeability}", f"gauges = [{stock}]", f"price_per_kg = {price}",
            f"[materials.{name}.origin]", *(f'{key} = "invented"' for key in KEYS),
        ]  # fmt: skip
    (folder / "sheets.toml").write_text("\n".join(lines) + "\n", encoding="utf-8")
    problem = folder / f"{kind}.toml"
    problem.write_text(
        f"""
title = "Invented: a run that is killed again and again"
materials = "sheets.toml"
[[requirement]]
name = "loop to pickup"
[requirement.field]
kind = "coaxial loops"
source_radius = "15 mm"
victim_radius = "8 mm"
source_gap = "20 mm"
victim_gap = "25 mm"
[requirement.mask]
points = [["100 Hz", "{MASKS[kind][0]}"], ["100 kHz", "{MASKS[kind][1]}"]]
points_per_decade = 3
[stack]
max_sheets = {3 if kind == EXPLORED else 7}
[search]
objectives = {OBJECTIVES[kind]}
population = 40
random_seed = 3
""",
        encoding="utf-8",
    )
    return problem


def start(*arguments: str, cwd: Path) -> subprocess.Popen[str]:
    return subprocess.Popen(
        [sys.executable, "-c", COMMAND, *arguments],
        cwd=cwd,
        text=True,
        stdout=subprocess.PIPE,
        stderr=subprocess.STDOUT,
    )


def outcome(process: subprocess.Popen[str]) -> tuple[int, str]:
    text, _ = process.communicate(timeout=300)
    if process.returncode != -signal.SIGKILL:  # a worker process that is just being made says that its parent is gone
        assert "Traceback" not in text, text
    return process.returncode, text


class Reader(threading.Thread):
    """Reads front.csv over and over while a run goes on, as a colleague's script might."""

    def __init__(self, path: Path) -> None:
        super().__init__(daemon=True)
        self.path, self.done = path, threading.Event()
        self.read, self.wrong = 0, []
        self.stacks: set[str] = set()

    def run(self) -> None:
        while not self.done.wait(0.03):
            try:
                frame = pd.read_csv(self.path)
                assert frame["rank"].tolist() == list(range(1, len(frame) + 1))
                assert frame["margin_db"].notna().all()
                self.stacks |= set(frame["stack"])
                self.read += 1
            except FileNotFoundError:
                continue
            except Exception as error:
                self.wrong.append(error)


@pytest.mark.slow
@pytest.mark.parametrize("kind", [EXPLORED, PROVED])
def test_killed_again_and_again(tmp_path: Path, kind: str) -> None:
    problem = write_problem(tmp_path, kind)
    begun = time.monotonic()
    code, text = outcome(start("search", str(problem), "--out", "straight", "--workers", "2", cwd=tmp_path))
    straight_s = time.monotonic() - begun
    assert code == 0, text
    expected = (tmp_path / "straight" / "front.csv").read_bytes()

    dice = random.Random(kind)
    kills = runs = 0
    while kills < KILLS:
        runs += 1
        folder = tmp_path / f"killed-{runs}"
        reader = Reader(folder / "front.csv")
        reader.start()
        kills += kill_until_done(problem, folder, dice, straight_s, KILLS - kills)
        reader.done.set()
        reader.join()
        assert (folder / "front.csv").read_bytes() == expected
        assert not reader.wrong, reader.wrong[:3]
        assert reader.read > 0
        check_feasible(problem, reader.stacks)


def kill_until_done(problem: Path, folder: Path, dice: random.Random, straight_s: float, most: int) -> int:
    """Start a run, stop it at random moments, and resume it until it ends; return how often it was stopped.

    After the most stops it is left alone.
    """
    kills = 0
    while True:
        begun = (folder / "run.json").exists()
        if not begun:  # killed before there was anything to resume
            shutil.rmtree(folder, ignore_errors=True)
        arguments = ("--resume", str(folder)) if begun else (str(problem), "--out", str(folder))
        process = start("search", *arguments, "--workers", dice.choice("123"), cwd=problem.parent)
        number = dice.choice([signal.SIGKILL, signal.SIGKILL, signal.SIGINT, signal.SIGTERM])
        try:
            process.wait(dice.uniform(0.15, 0.7) * straight_s if kills < most else None)
        except subprocess.TimeoutExpired:
            process.send_signal(number)
        code, text = outcome(process)
        if code == 0:
            return kills
        kills += 1
        if number == signal.SIGKILL:
            assert code == -signal.SIGKILL, text
        elif "Interrupted." in text or code == -number:  # before the run had begun, or after it had ended
            assert code in (130, -number), text
        else:
            assert code == 130, text
            assert "a checkpoint is written" in text
            read_checkpoint(folder)


def check_feasible(problem: Path, stacks: set[str]) -> None:
    """Whatever stood in a front.csv meets its mask, on a finer grid too."""
    known = read_problem(problem)
    (requirement,) = known.requirements
    grid = requirement.mask.grid_hz(5)
    assert stacks
    level = attenuation(known, sorted(stacks), frequency_hz=grid)
    assert np.min(level - requirement.mask.required_db(grid)) > -1e-3
