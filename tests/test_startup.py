"""Commands that only look do not load heavy packages. Each in a fresh interpreter; times are printed, not judged."""

from __future__ import annotations

import json
import subprocess
import sys
import time
from pathlib import Path

import pytest
from problem_files import write

HEAVY = {"numba", "llvmlite", "pymoo", "matplotlib", "bokeh", "pandas", "scipy", "skrf", "distributed"}

SEARCHES = {"numba", "llvmlite", "pymoo"}

LOOK = """
import json, sys
sys.argv = ["stackopt", *json.loads(sys.argv[1])]
from stackopt.cli import main
try:
    main()
except SystemExit as ended:
    code = ended.code
loaded = sorted({name.split(".")[0] for name in sys.modules})
sys.stderr.write("\\n" + json.dumps({"code": code, "loaded": loaded}))
"""


def loaded_by(folder: Path, *arguments: str) -> tuple[int, set[str], str]:
    """Exit code of a command, the packages it had loaded at its end, and what it printed."""
    started = time.perf_counter()
    done = subprocess.run(
        [sys.executable, "-c", LOOK, json.dumps(arguments)], capture_output=True, text=True, check=False, cwd=folder
    )
    assert done.returncode == 0, done.stderr
    told = json.loads(done.stderr.splitlines()[-1])
    print(f"stackopt {' '.join(arguments)}: {time.perf_counter() - started:.2f} s")  # noqa: T201 - for -s
    return told["code"] or 0, set(told["loaded"]), done.stdout


@pytest.fixture
def problem(tmp_path: Path) -> str:
    return write(tmp_path).name


@pytest.mark.parametrize(
    "arguments", [["--help"], ["-h"], ["--version"], ["search", "--help"], ["predict", "--help"], ["status", "--help"]]
)
def test_help(tmp_path: Path, arguments: list[str]) -> None:
    code, loaded, printed = loaded_by(tmp_path, *arguments)
    assert code == 0
    assert printed
    assert not loaded & (HEAVY | {"numpy", "rich"})


def test_wrong_option(tmp_path: Path) -> None:
    code, loaded, _ = loaded_by(tmp_path, "search", "problem.toml", "--workers", "0")
    assert code == 2
    assert not loaded & HEAVY


def test_check(tmp_path: Path, problem: str) -> None:
    code, loaded, printed = loaded_by(tmp_path, "check", problem)
    assert code == 0
    assert "Test problem" in printed
    assert not loaded & (SEARCHES | {"matplotlib", "bokeh", "skrf"})


def test_check_of_a_broken_file(tmp_path: Path) -> None:
    path = write(tmp_path, {"max_sheets = 4": 'max_sheets = "four"'})
    code, loaded, _ = loaded_by(tmp_path, "check", path.name)
    assert code == 2
    assert not loaded & (SEARCHES | {"matplotlib", "bokeh", "skrf"})


def test_predict(tmp_path: Path, problem: str) -> None:
    code, loaded, printed = loaded_by(tmp_path, "predict", problem, "steel 150um / copper 35um")
    assert code in (0, 1)
    assert "dB" in printed
    assert not loaded & (SEARCHES | {"matplotlib", "bokeh", "skrf"})


def test_predict_with_a_table(tmp_path: Path, problem: str) -> None:
    _, loaded, _ = loaded_by(tmp_path, "predict", problem, "copper 35um", "--csv", "table.csv")
    assert (tmp_path / "table.csv").exists()
    assert not loaded & (SEARCHES | {"matplotlib", "bokeh", "skrf"})


def test_predict_with_a_plot(tmp_path: Path, problem: str) -> None:
    _, loaded, _ = loaded_by(tmp_path, "predict", problem, "copper 35um", "--plot", "curves.png")
    assert (tmp_path / "curves.png").exists()
    assert "matplotlib" in loaded
    assert not loaded & (SEARCHES | {"bokeh", "skrf"})


def test_materials(tmp_path: Path, problem: str) -> None:
    code, loaded, _ = loaded_by(tmp_path, "materials", "sets/set.toml")
    assert code == 0
    assert not loaded & (SEARCHES | {"matplotlib", "bokeh", "skrf"})


def test_status(tmp_path: Path) -> None:
    example = Path(__file__).parent.parent / "results" / "example"
    code, loaded, printed = loaded_by(tmp_path, "status", str(example))
    assert code == 0
    assert "finished, complete" in printed
    assert not loaded & (HEAVY | {"numpy"})
