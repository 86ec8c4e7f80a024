import os
import subprocess
import sys
import time
from collections.abc import Sequence
from pathlib import Path
from types import ModuleType
from typing import Any

import pandas as pd
import problem_files
import pytest
from builders import build_problem
from fronts import make_front
from typer.testing import CliRunner

from stackopt.cli import app
from stackopt.errors import InterruptedRunError, UnmetMaskError
from stackopt.front import Front

ROOT = Path(__file__).parents[1]
STACKS = ("steel 150um / copper 35um", "steel 1mm/copper 70 um")
EASY = {
    'points = [["50 Hz", "8 dB"], ["1 kHz", "14 dB"], ["1 MHz", "90 dB"]]': 'points = [["1 kHz", "1 dB"]]',
    'file = "mask.csv"': 'points = [["1 MHz", "20 dB"]]',
}


def run(*arguments: str | Path, columns: int = 100) -> Any:
    """Run a command in this process; the result holds exit code, output and errors."""
    return CliRunner().invoke(app, [str(argument) for argument in arguments], env={"COLUMNS": str(columns)})


def start(*arguments: str | Path, **more: Any) -> subprocess.CompletedProcess[str]:
    """Run a command in a process of its own."""
    return subprocess.run(
        [sys.executable, "-c", "from stackopt.cli import main; main()", *map(str, arguments)],
        capture_output=True,
        text=True,
        check=False,
        **more,
    )


@pytest.fixture
def problem(tmp_path: Path) -> Path:
    return problem_files.write(tmp_path)


@pytest.fixture
def easy(tmp_path: Path) -> Path:
    return problem_files.write(tmp_path, EASY)


def test_help_names_every_command_and_exit_code() -> None:
    result = run("--help")
    assert result.exit_code == 0
    for word in ("check", "predict", "search", "prove", "materials", "130 interrupted"):
        assert word in result.output
    assert "..." not in result.output.replace("[ARGS]...", "")


@pytest.mark.parametrize("command", ["check", "predict", "search", "prove", "materials"])
def test_every_command_has_help(command: str) -> None:
    result = run(command, "--help")
    assert result.exit_code == 0
    assert "Usage" in result.output


def test_help_imports_nothing_heavy() -> None:
    heavy = "numpy scipy pandas matplotlib numba pymoo rich pydantic pint bokeh"
    code = (
        "import sys, stackopt.cli\n"
        "try: stackopt.cli.app(['--help'])\n"
        f"except SystemExit: print([name for name in {heavy!r}.split() if name in sys.modules])"
    )
    began = time.perf_counter()
    done = subprocess.run([sys.executable, "-c", code], capture_output=True, text=True, check=True)
    print(f"help took {time.perf_counter() - began:.2f} s, with the start of the interpreter")  # noqa: T201
    assert done.stdout.splitlines()[-1] == "[]"


def test_version() -> None:
    result = run("--version")
    assert result.exit_code == 0
    assert result.output.startswith("stackopt 0.")


def test_check_tells_what_was_understood(easy: Path) -> None:
    result = run("check", easy)
    assert result.exit_code == 0
    for part in (
        "Test problem",
        "5 gauges of 2 materials",
        "18um, 35um, 70um",
        "coaxial loops: source radius 12 mm, 20 mm before the first face",
        "1 dB at 1 kHz; 2 dB of margin on top",
        "spectral lines for each frequency, error up to 0.",
        "one spectral line for each frequency, exact",
        "at most  4 sheets",
        "780 stacks of the gauges",
        "random seed  7",
        "A prediction is not a measurement",
        "Can the mask be met?",
        "yes, for example by",
    ):
        assert part in result.output, part


def test_check_answers_no_with_exit_code_1(tmp_path: Path) -> None:
    path = problem_files.write(tmp_path, {'["1 MHz", "90 dB"]': '["1 MHz", "990 dB"]'})
    result = run("check", path)
    assert result.exit_code == 1
    assert "none was found by a quick look" in result.output
    assert "misses by" in result.output
    assert f"stackopt search {path}" in " ".join(result.output.split())


def test_check_says_so_when_the_rules_allow_no_stack(tmp_path: Path) -> None:
    path = problem_files.write(tmp_path, {"max_sheets = 4": 'max_sheets = 1\nfirst = ["steel"]\nlast = ["copper"]'})
    result = run("check", path)
    assert result.exit_code == 1
    assert "allow no stack at all" in result.output


def test_check_looks_at_materials_of_any_thickness_too(tmp_path: Path) -> None:
    ranged = {'gauges = ["70 um", "18 um", "35 um"]': 'thickness_range = ["0.1 mm", "2 mm"]'}
    result = run(
        "check", problem_files.write(tmp_path, EASY | {'use = ["copper", "steel"]': 'use = ["copper"]'}, ranged)
    )
    assert result.exit_code == 0
    for part in ("any thickness from 100um to 2mm", "any thickness of copper within the range", "copper 2mm"):
        assert part in result.output


def test_check_shows_remarks(tmp_path: Path) -> None:
    text = 'use = ["copper", "steel", "ribbon"]'
    changes = {'use = ["copper", "steel"]': text, 'file = "mask.csv"': 'points = [["1.5 MHz", "40 dB"]]'}
    result = run("check", problem_files.write(tmp_path, changes | {'["50 Hz", "8 dB"]': '["60 Hz", "8 dB"]'}))
    assert "Remarks" in result.output
    assert "permeability table of 'ribbon'" in result.output


def test_every_mistake_of_a_file_is_on_a_line_of_its_own(tmp_path: Path) -> None:
    path = problem_files.write(tmp_path, {"max_sheets = 4": 'max_sheets = "four"', 'margin = "2 dB"': "margin = 2"})
    for command in ("check", "search"):
        done = start(command, path)
        assert done.returncode == 2
        lines = done.stderr.splitlines()
        assert len(lines) == 2
        assert all(line.startswith(str(path)) for line in lines)
        assert done.stdout == ""


def test_predict_shows_attenuation_margin_and_a_verdict(easy: Path) -> None:
    result = run("predict", easy, *STACKS)
    assert result.exit_code == 0
    for part in ("loops", "wave", "frequency", "required", "stack 1", "stack 2", "3.0 dB", "Stack 1: steel 150um"):
        assert part in result.output
    assert result.output.count("meets the mask; smallest margin") == 2
    assert "breaks a rule  steel 1mm is not a gauge of the material set" in result.output
    assert "1.489 kg/m^2, 7.36 EUR/m^2, 0.185 mm" in result.output  # 3.00 for the steel, 4.36 for the copper


def test_predict_is_done_even_when_no_stack_meets_the_mask(problem: Path) -> None:
    result = run("predict", problem, "copper 18um")
    assert result.exit_code == 0
    assert "does not meet the mask; misses by" in result.output


def test_predict_writes_table_and_plot(problem: Path, tmp_path: Path) -> None:
    result = run("predict", problem, *STACKS, "--csv", tmp_path / "p.csv", "--plot", tmp_path / "p.png")
    assert result.exit_code == 0
    frame = pd.read_csv(tmp_path / "p.csv")
    assert frame.columns[0] == "stack"
    assert set(frame["stack"]) == {"steel 150um / copper 35um", "steel 1mm / copper 70um"}
    assert (tmp_path / "p.png").read_bytes().startswith(b"\x89PNG")
    assert f"Table: {tmp_path / 'p.csv'}" in result.output


@pytest.mark.parametrize("columns", [80, 120])
def test_output_fits_the_terminal(problem: Path, columns: int) -> None:
    for arguments in (
        ("check", problem),
        ("predict", problem, *STACKS),
        ("materials", problem.parent / "sets/set.toml"),
    ):
        lines = run(*arguments, columns=columns).output.splitlines()
        assert max(len(line) for line in lines if problem.parent.name not in line) <= columns


def test_predict_reports_the_mistakes_of_all_stacks(problem: Path) -> None:
    result = run("predict", problem, "stel 3um", "copper", "copper 18um")
    assert result.exit_code == 2
    assert len(result.stderr.splitlines()) == 2
    assert "did you mean 'steel'?" in result.stderr


def test_neither_check_nor_predict_needs_compiled_code(easy: Path) -> None:
    code = (
        "import sys\nfrom stackopt.cli import app\n"
        "try: app(sys.argv[1:])\n"
        "except SystemExit as end: assert end.code == 0\n"
        "sys.exit('numba' in sys.modules)"
    )
    for arguments in (("check", str(easy)), ("predict", str(easy), "copper 35um")):
        assert (
            subprocess.run([sys.executable, "-c", code, *arguments], check=False, stdout=subprocess.DEVNULL).returncode
            == 0
        )


def test_materials_lists_a_set(problem: Path, tmp_path: Path) -> None:
    path = tmp_path / "sets" / "set.toml"
    result = run("materials", path, "--origins", "--plot", tmp_path / "m.png")
    assert result.exit_code == 0
    for part in ("Test sheets", "58 MS/m", "Skin depth", "cole-cole", "150um: 3/m^2", "where", "annealed"):
        assert part.lower() in result.output.lower()
    assert (tmp_path / "m.png").read_bytes().startswith(b"\x89PNG")


@pytest.mark.parametrize(
    ("arguments", "message"),
    [
        (["search", "PROBLEM", "--hours", "-1"], "--hours: found -1; write a time above 0 hours"),
        (["search", "PROBLEM", "--hours", "nan"], "--hours: found nan"),
        (["search", "PROBLEM", "--workers", "0"], "--workers: found 0; write a number from 1 to"),
        (["search", "PROBLEM", "--workers", "1000000"], "--workers: found 1000000; write a number from 1 to"),
        (["search", "PROBLEM", "--workers", "2", "--cluster", "a"], "--workers: cannot be given with --cluster"),
        (["prove", "FOLDER", "--workers", "2", "--cluster", "a"], "--workers: cannot be given with --cluster"),
        (["search", "PROBLEM", "--seed", "-3"], "--seed: found -3; write a whole number from 0"),
        (["search"], "PROBLEM: is missing; name a problem file, or a run to go on with"),
        (["search", "PROBLEM", "--out", "FOLDER"], "which is not empty"),
        (["search", "PROBLEM", "--out", "PROBLEM"], "which is a file"),
        (["search", "--resume", "nowhere"], "--resume: found 'nowhere', which is no folder"),
        (["search", "--resume", "FOLDER", "--seed", "1"], "--seed: cannot be given with --resume"),
        (["prove", "nowhere"], "RUN: found 'nowhere', which is no folder"),
        (["prove", "FOLDER", "--workers", "-2"], "--workers: found -2"),
        (["predict", "PROBLEM", "copper 1um", "--plot", "x.jpg"], "--plot: found 'x.jpg'; write a name that ends in"),
        (["predict", "PROBLEM", "copper 1um", "--csv", "no/x.csv"], "the folder no does not exist"),
        (["check", "missing.toml"], "does not exist"),
        (["materials", "PROBLEM"], "materials"),
        (["predict", "PROBLEM"], "Missing argument"),
        (["search", "PROBLEM", "--workers", "two"], "--workers"),
        (["serch", "PROBLEM"], "serch"),
    ],
)
def test_wrong_use_says_what_to_do(problem: Path, arguments: Sequence[str], message: str) -> None:
    places = {"PROBLEM": str(problem), "FOLDER": str(problem.parent)}
    result = run(*(places.get(argument, argument) for argument in arguments))
    assert result.exit_code == 2
    assert message in result.stderr
    assert "Traceback" not in result.output + result.stderr


class FakeRun:
    """Stands in for `stackopt.run`, noting what the command asks of it."""

    def __init__(self, front: Front, folder: Path, error: Exception | None = None) -> None:
        self.front, self.folder, self.error = front, folder, error
        self.options: dict[str, Any] = {}
        self.asked: Path | None = None

    def install(self, monkeypatch: pytest.MonkeyPatch) -> None:
        module = ModuleType("stackopt.run")
        module.RunOptions = lambda **options: options  # type: ignore[attr-defined]
        module.search_run = module.prove_run = self  # type: ignore[attr-defined]
        monkeypatch.setitem(sys.modules, "stackopt.run", module)

    def __call__(self, asked: Path | None, options: dict[str, Any], watcher: Any) -> Any:
        from stackopt.status import Status

        self.asked, self.options = asked, options
        watcher(Status("exploring", 0.5, "10 stacks/s", 3, {"mass": "1 kg/m^2"}, 5.0))
        if self.error is not None:
            raise self.error
        return self


@pytest.fixture
def finished(tmp_path: Path, monkeypatch: pytest.MonkeyPatch) -> FakeRun:
    folder = tmp_path / "run"
    folder.mkdir()
    for name in ("front.csv", "trade_off.png", "checkpoint-1.npz"):
        (folder / name).touch()
    fake = FakeRun(make_front(), folder)
    fake.install(monkeypatch)
    return fake


def test_search_shows_front_statement_files_and_cautions(problem: Path, finished: FakeRun) -> None:
    result = run("search", problem, "--hours", "0.5", "--workers", "2", "--seed", "9", "--out", problem.parent / "new")
    assert result.exit_code == 0
    assert finished.asked == problem
    assert finished.options == {
        "hours": 0.5,
        "workers": 2,
        "seed": 9,
        "out": problem.parent / "new",
        "resume": None,
        "allow_outside": False,
        "within": None,
        "cluster": None,
    }
    shown = " ".join(result.stdout.split())  # wherever lines break
    for part in ("rank", "aluminium 200um", "Complete: invented.", "front.csv, trade_off.png", "not a measurement"):
        assert part in shown
    assert "checkpoint" not in result.stdout
    assert result.stderr.splitlines()[0].startswith("exploring: 50 %, 10 stacks/s, 5.0 s left")


def test_resume_and_prove_take_a_run(finished: FakeRun) -> None:
    assert run("search", "--resume", finished.folder).exit_code == 0
    assert finished.asked is None
    assert finished.options["resume"] == finished.folder
    assert run("prove", finished.folder, "--hours", "2").exit_code == 0
    assert finished.asked == finished.folder
    assert finished.options == {"hours": 2.0, "workers": None, "within": None, "cluster": None}


def test_search_and_prove_on_a_cluster(problem: Path, finished: FakeRun) -> None:
    assert run("search", problem, "--cluster", "tcp://10.0.0.5:8786").exit_code == 0
    assert finished.options["cluster"] == "tcp://10.0.0.5:8786"
    assert run("prove", finished.folder, "--cluster", "tcp://10.0.0.5:8786").exit_code == 0
    assert finished.options["cluster"] == "tcp://10.0.0.5:8786"


def test_an_empty_front_is_a_no(problem: Path, finished: FakeRun) -> None:
    finished.front = Front(build_problem(), (), True, "Complete: no stack meets the mask.")
    result = run("search", problem)
    assert result.exit_code == 1
    assert "no stack meets the mask" in result.stdout


@pytest.mark.parametrize(
    ("error", "code", "message"),
    [
        (InterruptedRunError("Stopped; go on with: stackopt search --resume there"), 130, "search --resume there"),
        (UnmetMaskError("No stack meets the mask."), 1, "No stack meets the mask."),
        (KeyboardInterrupt(), 130, "Interrupted."),
        (ZeroDivisionError("division by zero"), 2, "ZeroDivisionError: division by zero. Please report it"),
        (BrokenPipeError(), 0, ""),
    ],
)
def test_exceptions_become_exit_codes(
    problem: Path, finished: FakeRun, error: Exception, code: int, message: str, monkeypatch: pytest.MonkeyPatch
) -> None:
    monkeypatch.delenv("STACKOPT_DEBUG", raising=False)
    finished.error = error
    result = run("search", problem)
    assert result.exit_code == code
    assert message in result.stderr
    assert "Traceback" not in result.stderr


def test_debugging_shows_the_mistake(problem: Path, finished: FakeRun, monkeypatch: pytest.MonkeyPatch) -> None:
    monkeypatch.setenv("STACKOPT_DEBUG", "1")
    finished.error = ZeroDivisionError("division by zero")
    assert isinstance(run("search", problem).exception, ZeroDivisionError)


def test_a_reader_that_goes_away_is_no_mistake(problem: Path) -> None:
    code = "from stackopt.cli import main; main()"
    arguments = [sys.executable, "-c", code, "materials", str(problem.parent / "sets" / "set.toml")]
    with subprocess.Popen(arguments, stdout=subprocess.PIPE, stderr=subprocess.PIPE) as process:
        assert process.stdout is not None
        assert process.stderr is not None
        process.stdout.close()
        assert process.stderr.read() == b""
        assert process.wait() == 0


def test_a_terminal_of_few_characters_is_enough(problem: Path) -> None:
    environment = {**os.environ, "PYTHONIOENCODING": "ascii", "PYTHONUTF8": "0"}
    done = start("materials", problem.parent / "sets" / "set.toml", env=environment)
    assert done.returncode == 0
    assert "58 MS/m" in done.stdout


@pytest.mark.parametrize("name", ["coil_beside_sensor", "cabinet_panel", "motor_lead", "charging_pad"])
def test_the_example_problems_can_be_checked(name: str) -> None:
    result = run("check", ROOT / "problems" / f"{name}.toml")
    assert result.exit_code == 0, result.output
    assert "yes, for example by" in result.output


def test_the_starter_set_is_listed() -> None:
    result = run("materials", ROOT / "material_sets" / "starter.toml", columns=80)
    assert result.exit_code == 0
    assert "copper" in result.output
