"""Runs: what their folder holds, and that an interrupted one goes on to the front that it would have found."""

from __future__ import annotations

import json
import os
import re
import shutil
import signal
import subprocess
import sys
import time
from collections.abc import Callable
from importlib.metadata import version
from pathlib import Path
from typing import Any

import pandas as pd
import pytest
from problem_files import write

from stackopt.checkpoint import read_checkpoint, write_checkpoint
from stackopt.errors import InputError, InterruptedRunError, RunError
from stackopt.front import COLUMNS
from stackopt.readers import read_problem
from stackopt.run import RunOptions, RunResult, prove_run, search_run
from stackopt.run_folder import STRAY_AFTER_S, input_hash
from stackopt.runs import read_run
from stackopt.status import Status
from stackopt.watching import look, read_record

CHANGES = {
    'points = [["50 Hz", "8 dB"], ["1 kHz", "14 dB"], ["1 MHz", "90 dB"]]': (
        'points = [["1 kHz", "10 dB"], ["1 MHz", "75 dB"]]\npoints_per_decade = 1'
    ),
    "max_sheets = 4": "max_sheets = 3",
    "population = 50": "population = 10",
    'objectives = ["mass", "thickness"]': 'objectives = ["mass", "cost", "thickness"]',
}
MARGIN = {**CHANGES, 'objectives = ["mass", "thickness"]': 'objectives = ["mass", "margin"]'}
BEYOND_REACH = {**CHANGES, '["1 MHz", "75 dB"]': '["1 MHz", "700 dB"]'}


def quiet(_: Status) -> None:
    pass


@pytest.fixture(autouse=True)
def _in_an_empty_folder(tmp_path: Path, monkeypatch: pytest.MonkeyPatch) -> None:
    monkeypatch.chdir(tmp_path)
    monkeypatch.setattr("stackopt.explore.GENERATIONS", 3)


@pytest.fixture
def _no_pictures(monkeypatch: pytest.MonkeyPatch) -> None:
    """Leave out what takes longer than the search itself."""
    for name in (
        "stackopt.run.write_trade_off",
        "stackopt.run.write_curves",
        "stackopt.outputs.page.write_page",
    ):
        monkeypatch.setattr(name, lambda *_: None)


@pytest.fixture
def problem_file(tmp_path: Path) -> Path:
    return written(tmp_path, CHANGES)


def written(folder: Path, changes: dict[str, str]) -> Path:
    inputs = folder / "given"
    inputs.mkdir(exist_ok=True)
    return write(inputs, changes)


def run(path: Path, watcher: Callable[[Status], None] = quiet, workers: int = 1, **options: Any) -> RunResult:
    return search_run(path, RunOptions(workers=workers, **options), watcher)


def resume(folder: Path, watcher: Callable[[Status], None] = quiet, **options: Any) -> RunResult:
    return search_run(None, RunOptions(workers=1, resume=folder, **options), watcher)


def files_in(folder: Path) -> dict[str, bytes]:
    return {path.relative_to(folder).as_posix(): path.read_bytes() for path in folder.rglob("*") if path.is_file()}


@pytest.fixture(scope="module")
def finished(tmp_path_factory: pytest.TempPathFactory) -> RunResult:
    """A run with all its files."""
    folder = tmp_path_factory.mktemp("run")
    return run(written(folder, CHANGES), workers=2, out=folder / "result")


class TestFolder:
    def test_files(self, finished: RunResult) -> None:
        names = set(files_in(finished.folder))
        checkpoints = {name for name in names if name.startswith("checkpoint-")}
        assert 1 <= len(checkpoints) <= 2
        assert names - checkpoints == {
            "front.csv",
            "front_equals.csv",
            "trade_off.png",
            "curves.png",
            "trade_off.html",
            "run.json",
            "inputs/problem.toml",
            "inputs/mask.csv",
            "inputs/sets/set.toml",
            "inputs/sets/ribbon.csv",
        }

    def test_copies_of_the_inputs(self, finished: RunResult) -> None:
        given = files_in(finished.folder.parent / "given")
        copies = files_in(finished.folder / "inputs")
        assert copies == {name: given[name] for name in copies}
        problem = read_problem(finished.folder / "inputs" / "problem.toml")
        assert problem.requirements == finished.front.problem.requirements
        assert problem.rules == finished.front.problem.rules
        assert problem.search == finished.front.problem.search

    def test_record(self, finished: RunResult) -> None:
        record = json.loads((finished.folder / "run.json").read_text(encoding="utf-8"))
        assert record == read_record(finished.folder)
        assert record.keys() >= {
            "stackopt", "problem", "title", "input_sha256", "seed", "versions", "machine", "objectives", "finished",
            "complete", "statement", "front", "equal_stacks", "rounds", "added_frequencies_hz", "quadrature", "seconds",
            "explored", "proof",
        }  # fmt: skip
        assert record["stackopt"] == version("stackopt")
        assert record["problem"] == "inputs/problem.toml"
        assert record["title"] == "Test problem"
        assert record["seed"] == 7
        assert record["machine"]["workers"] == 2
        assert record["objectives"] == ["mass", "cost", "thickness"]
        assert record["finished"] is record["complete"] is True
        assert record["statement"] == finished.front.statement
        assert record["front"] == len(finished.front) > 1
        assert record["equal_stacks"] == len(finished.front.equals) > 0
        assert record["rounds"] > 1
        assert record["added_frequencies_hz"][0]
        assert [entry["requirement"] for entry in record["quadrature"]] == ["loops", "wave"]
        assert set(record["seconds"]) == {"exploring", "proving", "confirming"}
        assert record["explored"]["epochs"] > 0
        assert record["proof"]["stacks"] == 5 + 25 + 125
        assert record["proof"]["share_settled"] == 1.0
        assert re.fullmatch("[0-9a-f]{64}", record["input_sha256"])
        assert set(record["versions"]) == {"python", "numpy", "scipy", "numba", "pymoo", "pandas"}

    def test_front_reads_back(self, finished: RunResult) -> None:
        frame = pd.read_csv(finished.folder / "front.csv")
        assert tuple(frame.columns) == COLUMNS
        assert frame["rank"].tolist() == list(range(1, len(finished.front) + 1))
        pd.testing.assert_frame_equal(frame, finished.front.to_frame(), check_exact=True)

    def test_equal_stacks_read_back(self, finished: RunResult) -> None:
        frame = pd.read_csv(finished.folder / "front_equals.csv")
        assert tuple(frame.columns) == COLUMNS
        assert frame["rank"].tolist() == [rank for rank, _ in finished.front.equals]
        front = pd.read_csv(finished.folder / "front.csv").set_index("rank")
        for row in frame.itertuples():
            assert row.mass_kg_per_m2 == front.loc[row.rank, "mass_kg_per_m2"]
            assert row.thickness_mm == front.loc[row.rank, "thickness_mm"]
            assert row.stack != front.loc[row.rank, "stack"]

    def test_csv_is_plain(self, finished: RunResult) -> None:
        raw = (finished.folder / "front.csv").read_bytes()
        assert b"\r" not in raw
        assert raw.endswith(b"\n")
        assert raw.decode("utf-8").count("\n") == len(finished.front) + 1

    def test_the_run_reads_back(self, finished: RunResult) -> None:
        again = read_run(finished.folder)
        assert again.front.complete
        assert again.front.statement == finished.front.statement
        assert [row.stack for row in again.front.rows] == [row.stack for row in finished.front.rows]


@pytest.mark.usefixtures("_no_pictures")
class TestWhere:
    def test_numbered_in_results(self, problem_file: Path, tmp_path: Path) -> None:
        for number in (1, 2):
            result = run(problem_file, hours=1e-12)
            assert result.folder.resolve() == tmp_path / "results" / f"problem-{number}"

    def test_gaps_are_filled(self, problem_file: Path, tmp_path: Path) -> None:
        (tmp_path / "results" / "problem-1").mkdir(parents=True)
        assert run(problem_file, hours=1e-12).folder.name == "problem-2"

    def test_out(self, problem_file: Path, tmp_path: Path) -> None:
        result = run(problem_file, hours=1e-12, out=tmp_path / "deep" / "down")
        assert result.folder == tmp_path / "deep" / "down"
        assert (tmp_path / "deep" / "down" / "run.json").exists()
        assert not (tmp_path / "results").exists()

    def test_a_file_where_the_folder_should_be(self, problem_file: Path, tmp_path: Path) -> None:
        (tmp_path / "results").write_text("no folder")
        with pytest.raises(RunError, match=r"cannot be made: .*; name another folder with --out"):
            run(problem_file)

    def test_inputs_beside_one_another_keep_their_places(self, tmp_path: Path) -> None:
        """The problem may lie deeper than its set."""
        path = written(tmp_path, {**CHANGES, '"sets/set.toml"': '"../sets/set.toml"'})
        deeper = path.parent / "mine"
        deeper.mkdir()
        for name in ("problem.toml", "mask.csv"):
            (path.parent / name).rename(deeper / name)
        result = run(deeper / "problem.toml", hours=1e-12)
        assert set(files_in(result.folder / "inputs")) == {
            "mine/problem.toml",
            "mine/mask.csv",
            "sets/set.toml",
            "sets/ribbon.csv",
        }
        assert read_record(result.folder)["problem"] == "inputs/mine/problem.toml"
        assert resume(result.folder).front.complete

    def test_nothing_temporary_is_left(self, problem_file: Path) -> None:
        result = run(problem_file, hours=1e-12)
        assert not [name for name in files_in(result.folder) if name.startswith(".") or name.endswith(".part")]


class TestNothingMeetsTheMask:
    def test_statement_and_files(self, tmp_path: Path) -> None:
        result = run(written(tmp_path, BEYOND_REACH))
        assert len(result.front) == 0
        assert result.front.complete
        assert result.front.statement.startswith("No stack meets the mask: proved over 155 stacks.")
        assert re.search(
            r"misses by \d+\.\d dB: requirement 'loops' blocks at \d+(\.\d+)? [kM]?Hz\.", result.front.statement
        )
        record = read_record(result.folder)
        assert record["complete"] is True
        assert record["front"] == 0
        assert record["statement"] == result.front.statement
        frame = pd.read_csv(result.folder / "front.csv")
        assert tuple(frame.columns) == COLUMNS
        assert len(frame) == 0
        assert not (result.folder / "trade_off.png").exists()


def interrupt_at(phase: str, number: int = 1, sent: int = signal.SIGINT) -> Callable[[Status], None]:
    """Send this process a signal at the given status of a phase, as Ctrl-C or a batch system does."""
    left = [number]

    def watch(status: Status) -> None:
        if status.phase.startswith(phase):
            left[0] -= 1
            if left[0] == 0:
                os.kill(os.getpid(), sent)

    return watch


def results(folder: Path) -> dict[str, str]:
    return {name: (folder / name).read_text(encoding="utf-8") for name in ("front.csv", "front_equals.csv")}


@pytest.mark.usefixtures("_no_pictures")
class TestInterrupted:
    @pytest.mark.parametrize(
        ("phase", "number"), [("exploring", 1), ("exploring", 2), ("proving", 1), ("proving", 3), ("confirming", 1)]
    )
    def test_goes_on_to_the_same_front(
        self, problem_file: Path, tmp_path: Path, phase: str, number: int, finished: RunResult
    ) -> None:
        with pytest.raises(InterruptedRunError) as caught:
            run(problem_file, interrupt_at(phase, number), out=tmp_path / "stopped")
        assert caught.value.exit_code == 130
        assert f"stackopt search --resume {tmp_path / 'stopped'}" in str(caught.value)
        with pytest.raises(RunError, match="has no front yet"):  # there may be a front.csv of what was found so far
            read_run(tmp_path / "stopped")
        assert read_record(tmp_path / "stopped")["finished"] is False
        assert look(tmp_path / "stopped").state == "interrupted"
        again = resume(tmp_path / "stopped")
        assert again.folder == tmp_path / "stopped"
        assert results(again.folder) == results(finished.folder)
        assert again.front.statement == finished.front.statement
        assert read_record(again.folder)["complete"] is True

    def test_again_and_again(self, problem_file: Path, tmp_path: Path, finished: RunResult) -> None:
        with pytest.raises(InterruptedRunError):
            run(problem_file, interrupt_at("exploring"), out=tmp_path / "stopped")
        for phase in ("exploring", "proving", "proving"):
            with pytest.raises(InterruptedRunError):
                resume(tmp_path / "stopped", interrupt_at(phase))
        resume(tmp_path / "stopped")
        assert results(tmp_path / "stopped") == results(finished.folder)

    def test_explored_only(self, tmp_path: Path) -> None:
        """Nothing is proved here, so that the front shows whether the exploring went the same way."""
        path = written(tmp_path, MARGIN)
        straight = run(path, out=tmp_path / "straight")
        with pytest.raises(InterruptedRunError):
            run(path, interrupt_at("exploring", 2), out=tmp_path / "stopped")
        resume(tmp_path / "stopped")
        assert results(tmp_path / "stopped") == results(straight.folder)

    @pytest.mark.parametrize("sent", [signal.SIGTERM, signal.SIGHUP])
    def test_asked_to_end(self, problem_file: Path, tmp_path: Path, sent: int) -> None:
        with pytest.raises(InterruptedRunError):
            run(problem_file, interrupt_at("proving", sent=sent), out=tmp_path / "stopped")
        assert resume(tmp_path / "stopped").front.complete

    def test_outlives_its_terminal_where_that_was_asked_for(self, problem_file: Path) -> None:
        """As under nohup."""
        before = signal.signal(signal.SIGHUP, signal.SIG_IGN)
        try:
            assert run(problem_file, interrupt_at("exploring", sent=signal.SIGHUP)).front.complete
            assert signal.getsignal(signal.SIGHUP) is signal.SIG_IGN
        finally:
            signal.signal(signal.SIGHUP, before)

    def test_a_second_time_at_once(self, problem_file: Path, tmp_path: Path) -> None:
        def impatient(status: Status) -> None:
            if status.phase == "exploring":
                os.kill(os.getpid(), signal.SIGINT)
                os.kill(os.getpid(), signal.SIGINT)

        with pytest.raises(KeyboardInterrupt):
            run(problem_file, impatient, out=tmp_path / "stopped")
        assert resume(tmp_path / "stopped").front.complete

    def test_handlers_are_put_back(self, problem_file: Path) -> None:
        numbers = (signal.SIGINT, signal.SIGTERM, signal.SIGHUP)
        before = [signal.getsignal(number) for number in numbers]
        run(problem_file, hours=1e-12)
        with pytest.raises(InterruptedRunError):
            run(problem_file, interrupt_at("exploring"))
        assert [signal.getsignal(number) for number in numbers] == before

    def test_damaged_newest_checkpoint(
        self, problem_file: Path, tmp_path: Path, capsys: pytest.CaptureFixture[str], finished: RunResult
    ) -> None:
        with pytest.raises(InterruptedRunError):
            run(problem_file, interrupt_at("proving"), out=tmp_path / "stopped")
        newest = max((tmp_path / "stopped").glob("checkpoint-*.npz"))
        newest.write_bytes(newest.read_bytes()[:-100])
        capsys.readouterr()
        resume(tmp_path / "stopped")
        printed = capsys.readouterr()
        assert printed.out == ""
        assert f"{newest.name} cannot be used" in printed.err
        assert results(tmp_path / "stopped") == results(finished.folder)

    def test_a_finished_run_again(self, problem_file: Path, tmp_path: Path) -> None:
        result = run(problem_file, out=tmp_path / "run")
        before = results(result.folder)
        assert resume(result.folder).front.rows == result.front.rows
        assert results(result.folder) == before


@pytest.mark.usefixtures("_no_pictures")
class TestRefused:
    @pytest.fixture
    def folder(self, problem_file: Path, tmp_path: Path) -> Path:
        return run(problem_file, hours=1e-12, out=tmp_path / "run").folder

    @pytest.mark.parametrize("go_on", [resume, lambda folder: prove_run(folder, RunOptions(), quiet)])
    @pytest.mark.parametrize(
        ("name", "old", "new"),
        [
            ("problem.toml", "max_sheets = 3", "max_sheets = 2"),
            ("sets/set.toml", "price_per_kg = 14.0", "price_per_kg = 15.0"),
            ("mask.csv", "1e9,60", "1e9,61"),
        ],
    )
    def test_changed_inputs(
        self, folder: Path, go_on: Callable[[Path], RunResult], name: str, old: str, new: str
    ) -> None:
        path = folder / "inputs" / name
        text = path.read_text()
        assert old in text
        path.write_text(text.replace(old, new))
        with pytest.raises(RunError, match=r"inputs: were changed since the run began; start a new search"):
            go_on(folder)

    def test_the_originals_may_change(self, folder: Path, problem_file: Path) -> None:
        problem_file.write_text("gone")
        assert resume(folder).front.complete

    @pytest.mark.parametrize("go_on", [resume, lambda folder: prove_run(folder, RunOptions(), quiet)])
    def test_another_version(self, folder: Path, go_on: Callable[[Path], RunResult]) -> None:
        change_record(folder, stackopt="0.0.1")
        with pytest.raises(RunError, match=rf"written by stackopt 0\.0\.1, this is {re.escape(version('stackopt'))}"):
            go_on(folder)

    def test_no_run(self, tmp_path: Path) -> None:
        with pytest.raises(RunError, match=r"is not a run folder: it has no run\.json"):
            resume(tmp_path)

    @pytest.mark.parametrize("content", ["", "{", "[]", '"text"', '{"seed": 1}', "\xff"])
    def test_no_record(self, folder: Path, content: str) -> None:
        (folder / "run.json").write_bytes(content.encode("latin-1"))
        with pytest.raises(
            RunError, match=r"run\.json: (cannot be read|is not the record of a run).*start a new search"
        ):
            resume(folder)

    def test_no_checkpoint(self, folder: Path) -> None:
        for path in folder.glob("checkpoint-*.npz"):
            path.unlink()
        with pytest.raises(RunError, match="holds no checkpoint that can be read"):
            resume(folder)

    @pytest.mark.parametrize("go_on", [resume, lambda folder: prove_run(folder, RunOptions(), quiet)])
    def test_checkpoint_of_other_inputs(
        self, folder: Path, problem_file: Path, tmp_path: Path, go_on: Callable[[Path], RunResult]
    ) -> None:
        problem_file.write_text(problem_file.read_text() + "\n# another one\n")
        other = run(problem_file, hours=1e-12, out=tmp_path / "other").folder
        for path in folder.glob("checkpoint-*.npz"):
            path.unlink()
        for path in other.glob("checkpoint-*.npz"):
            shutil.copy(path, folder)
        with pytest.raises(RunError, match="its checkpoint belongs to other inputs; start a new search"):
            go_on(folder)

    def test_another_format(self, folder: Path, monkeypatch: pytest.MonkeyPatch) -> None:
        monkeypatch.setattr("stackopt.checkpoint.FORMAT", 99)
        with pytest.raises(RunError, match=r"its format is 2, this program writes 99.*; start the search again"):
            resume(folder)

    @pytest.mark.parametrize(
        ("change", "reason"),
        [
            (lambda arrays, text: arrays.update(codes=arrays["codes"][None]), "its array codes has the wrong shape"),
            (lambda arrays, text: arrays.pop("populations"), "it has no array populations"),
            (
                lambda arrays, text: arrays.update(populations=arrays["populations"] + 99),
                "sheets that the problem does",
            ),
            (lambda arrays, text: text.update(round="1"), "its round cannot be '1'"),
            (lambda arrays, text: text.update(tally={"unknown": 1}), "unknown"),
        ],
    )
    def test_handmade_checkpoint(self, folder: Path, change: Callable[..., object], reason: str) -> None:
        """Its checksum is right, its content is not what a search writes."""
        arrays, text, _ = read_checkpoint(folder)
        change(arrays, text)
        write_checkpoint(folder, arrays, text)
        with pytest.raises(RunError, match=rf"its checkpoint cannot be used.*{reason}") as caught:
            resume(folder)
        assert caught.value.exit_code == 2
        assert not (folder / "status.json").exists()

    @pytest.mark.parametrize("name", ["stackopt", "problem", "input_sha256", "seed", "finished"])
    @pytest.mark.parametrize("value", [None, [], -1, "\x1b[31m"])
    def test_odd_record(self, folder: Path, name: str, value: object) -> None:
        change_record(folder, **{name: value})
        if name == "finished":  # whatever is not true counts as not finished
            assert resume(folder, hours=1e-12).folder == folder
            return
        with pytest.raises(RunError) as caught:
            resume(folder)
        assert "\x1b" not in str(caught.value)

    def test_inputs_gone(self, folder: Path) -> None:
        (folder / "inputs" / "problem.toml").unlink()
        with pytest.raises(InputError, match=r"problem\.toml"):
            resume(folder)

    def test_margin_cannot_be_proved(self, tmp_path: Path) -> None:
        result = run(written(tmp_path, MARGIN), hours=1e-12)
        with pytest.raises(InputError, match="this front cannot be proved: the objective margin"):
            prove_run(result.folder, RunOptions(), quiet)


RIVAL = """
import sys
from pathlib import Path
import stackopt.run
from stackopt.errors import StackoptError
from stackopt.outputs import page
for module, name in ((stackopt.run, "write_trade_off"), (stackopt.run, "write_curves"), (page, "write_page")):
    setattr(module, name, lambda *_: None)
problem, out = map(Path, sys.argv[1:])
print("ready", flush=True)
sys.stdin.readline()
try:
    options = stackopt.run.RunOptions(hours=1e-12, workers=1, out=out)
    stackopt.run.search_run(problem, options, lambda _: None)
    print("done")
except StackoptError as error:
    print(error)
    sys.exit(error.exit_code)
"""

KILLED = """
import os, sys
from pathlib import Path
from stackopt.run import RunOptions, search_run

def watch(status):
    if status.phase == "exploring":
        os.kill(os.getpid(), 9)

search_run(Path(sys.argv[1]), RunOptions(workers=1, out=Path(sys.argv[2])), watch)
"""


@pytest.mark.usefixtures("_no_pictures")
class TestOneWriter:
    def test_a_second_one_is_refused(self, problem_file: Path, tmp_path: Path) -> None:
        folder = tmp_path / "run"
        refused: list[str] = []

        def others(status: Status) -> None:
            if status.phase != "exploring" or refused:
                return
            for go_on in (resume, lambda folder: prove_run(folder, RunOptions(), quiet)):
                with pytest.raises(RunError) as caught:
                    go_on(folder)
                refused.append(str(caught.value))
            with pytest.raises(RunError) as caught:
                run(problem_file, out=folder)
            refused.append(str(caught.value))
            assert look(folder).state == "running"

        assert run(problem_file, others, out=folder).front.complete
        assert len(refused) == 3
        for message in refused:
            assert message.startswith(f"{folder}: is being worked on by process {os.getpid()} on ")
        assert look(folder).state == "finished"

    def test_nothing_is_left_of_the_lock(self, problem_file: Path, tmp_path: Path) -> None:
        folder = run(problem_file, hours=1e-12, out=tmp_path / "run").folder
        assert not {"run.lock", "status.json"} & set(files_in(folder))
        with pytest.raises(InterruptedRunError):
            resume(folder, interrupt_at("proving"))
        assert {"run.lock", "status.json"} & set(files_in(folder)) == {"status.json"}

    def test_a_folder_that_is_in_use_already(self, problem_file: Path, tmp_path: Path) -> None:
        folder = tmp_path / "run"
        folder.mkdir()
        (folder / "notes.txt").write_text("mine")
        with pytest.raises(RunError, match=r"is not empty; name a new folder, or go on with a run: --resume"):
            run(problem_file, out=folder)
        assert files_in(folder) == {"notes.txt": b"mine"}

    def test_two_at_the_same_moment(self, problem_file: Path, tmp_path: Path) -> None:
        command = [sys.executable, "-c", RIVAL, str(problem_file), str(tmp_path / "run")]
        pipes: dict[str, Any] = {"stdin": subprocess.PIPE, "stdout": subprocess.PIPE, "text": True}
        rivals = [subprocess.Popen(command, **pipes) for _ in range(2)]
        for rival in rivals:
            assert rival.stdout is not None
            assert rival.stdout.readline() == "ready\n"
        for rival in rivals:
            assert rival.stdin is not None
            rival.stdin.write("go\n")
            rival.stdin.flush()
        said = [rival.communicate()[0] for rival in rivals]
        assert sorted(rival.returncode for rival in rivals) == [0, 2]
        loser = next(text for text, rival in zip(said, rivals, strict=True) if rival.returncode == 2)
        assert "is being worked on by process " in loser or "is not empty; name a new folder" in loser
        assert read_run(tmp_path / "run").record["finished"] is True

    def test_killed(self, problem_file: Path, tmp_path: Path, capsys: pytest.CaptureFixture[str]) -> None:
        folder = tmp_path / "run"
        done = subprocess.run([sys.executable, "-c", KILLED, str(problem_file), str(folder)], check=False)
        assert done.returncode == -signal.SIGKILL
        (folder / "checkpoint-000009.part").write_text("half")
        (folder / ".part-front-a.csv").write_text("half")
        (folder / ".part-trade_off-b.html").write_text("another process writes it right now")
        old = time.time() - STRAY_AFTER_S - 10.0
        os.utime(folder / ".part-front-a.csv", (old, old))
        state = look(folder)
        assert state.state == "dead"
        assert state.owner is not None
        capsys.readouterr()
        assert resume(folder).front.complete
        assert f"note: took over the run from process {state.owner.process} on " in capsys.readouterr().err
        assert look(folder).state == "finished"
        assert [name for name in files_in(folder) if "part" in name] == [".part-trade_off-b.html"]


@pytest.mark.usefixtures("_no_pictures")
class TestGoingOnWithAFinishedRun:
    def test_its_front_stays_usable(self, problem_file: Path, tmp_path: Path) -> None:
        folder = run(problem_file, hours=1e-12, out=tmp_path / "run").folder
        before = read_run(folder).front.rows
        with pytest.raises(InterruptedRunError):
            resume(folder, interrupt_at("proving"))
        assert read_run(folder).front.rows == before
        assert look(folder).state == "interrupted"

    def test_alternatives_of_another_front_do_not_stay(self, problem_file: Path, tmp_path: Path) -> None:
        folder = run(problem_file, out=tmp_path / "run", within=0.05).folder
        before = (folder / "alternatives.csv").read_bytes()
        resume(folder)
        assert (folder / "alternatives.csv").read_bytes() == before
        (folder / "front.csv").write_text("another front")
        resume(folder)
        assert not (folder / "alternatives.csv").exists()
        assert read_run(folder).front.alternatives is None

    def test_tables_of_two_fronts_are_never_read_together(
        self, problem_file: Path, tmp_path: Path, monkeypatch: pytest.MonkeyPatch
    ) -> None:
        folder = run(problem_file, hours=1e-12, out=tmp_path / "run").folder

        def killed(*_: object) -> None:
            raise KeyboardInterrupt

        monkeypatch.setattr("stackopt.run.write_equals", killed)
        with pytest.raises(KeyboardInterrupt):
            resume(folder)
        with pytest.raises(RunError, match="has no front yet"):
            read_run(folder)
        assert look(folder).reason == "stopped at once, without a last checkpoint"


def change_record(folder: Path, **values: Any) -> None:
    record = json.loads((folder / "run.json").read_text())
    (folder / "run.json").write_text(json.dumps(record | values))


@pytest.mark.usefixtures("_no_pictures")
class TestHours:
    def test_prove_goes_on_to_the_same_front(self, problem_file: Path, tmp_path: Path, finished: RunResult) -> None:
        short = run(problem_file, out=tmp_path / "short", hours=1e-12)
        assert not short.front.complete
        assert "Not complete: the proof has settled 0.0 % of the stacks so far" in short.front.statement
        assert f"stackopt prove {tmp_path / 'short'}" in short.front.statement
        record = read_record(short.folder)
        assert record["finished"] is True
        assert record["complete"] is False
        assert record["proof"]["share_settled"] == 0.0
        proved = prove_run(short.folder, RunOptions(workers=1), quiet)
        assert proved.front.complete
        assert results(short.folder) == results(finished.folder)
        assert read_record(short.folder)["proof"]["share_settled"] == 1.0
        assert read_record(short.folder)["explored"]["epochs"] == 0

    def test_prove_may_run_out_of_time_too(self, problem_file: Path, tmp_path: Path, finished: RunResult) -> None:
        short = run(problem_file, out=tmp_path / "short", hours=1e-12)
        assert not prove_run(short.folder, RunOptions(hours=1e-12), quiet).front.complete
        assert prove_run(short.folder, RunOptions(), quiet).front.complete
        assert results(short.folder) == results(finished.folder)

    def test_search_goes_on_too(self, problem_file: Path, tmp_path: Path, finished: RunResult) -> None:
        short = run(problem_file, out=tmp_path / "short", hours=1e-12)
        assert resume(short.folder).front.complete
        assert results(short.folder) == results(finished.folder)

    def test_exploring_goes_on_where_nothing_is_proved(self, tmp_path: Path) -> None:
        path = written(tmp_path, MARGIN)
        straight = run(path, out=tmp_path / "straight")
        short = run(path, out=tmp_path / "short", hours=1e-12)
        assert read_record(short.folder)["explored"]["epochs"] == 0
        resume(short.folder)
        assert results(short.folder) == results(straight.folder)

    def test_part_of_a_proof(
        self, problem_file: Path, tmp_path: Path, finished: RunResult, monkeypatch: pytest.MonkeyPatch
    ) -> None:
        """A proof stopped half way keeps what it has settled, and prove goes on from there."""
        monkeypatch.setattr("stackopt.proof.WORK", 1)  # shares as small as they can be
        settled: list[float] = []

        def stop_half_way(status: Status) -> None:
            if status.phase.startswith("proving") and not settled and 0.0 < (status.share_proved or 0.0) < 1.0:
                settled.append(status.share_proved or 0.0)
                os.kill(os.getpid(), signal.SIGINT)

        with pytest.raises(InterruptedRunError):
            run(problem_file, stop_half_way, out=tmp_path / "short")
        arrays, _, _ = read_checkpoint(tmp_path / "short")
        assert len(arrays["proof_pending"])
        shares: list[float] = []

        def watch(status: Status) -> None:
            if status.phase.startswith(("preparing", "proving")):
                shares.append(status.share_proved or 0.0)

        prove_run(tmp_path / "short", RunOptions(workers=1), watch)
        assert max(shares[:2]) >= settled[0]
        assert results(tmp_path / "short") == results(finished.folder)


@pytest.mark.usefixtures("_no_pictures")
class TestSeed:
    def test_recorded_and_kept(self, tmp_path: Path) -> None:
        path = written(tmp_path, MARGIN)
        with pytest.raises(InterruptedRunError):
            run(path, interrupt_at("exploring"), out=tmp_path / "stopped", seed=123)
        assert read_record(tmp_path / "stopped")["seed"] == 123
        resume(tmp_path / "stopped")
        assert read_record(tmp_path / "stopped")["seed"] == 123
        straight = run(path, out=tmp_path / "straight", seed=123)
        assert results(tmp_path / "stopped") == results(straight.folder)

    def test_zero_is_a_seed(self, problem_file: Path) -> None:
        assert read_record(run(problem_file, seed=0, hours=1e-12).folder)["seed"] == 0

    def test_the_proved_front_does_not_depend_on_it(self, problem_file: Path, tmp_path: Path) -> None:
        one, other = (run(problem_file, seed=seed, out=tmp_path / str(seed)) for seed in (1, 2))
        assert results(one.folder) == results(other.folder)


class TestInputHash:
    def test_depends_on_content_not_on_place(self, tmp_path: Path) -> None:
        (tmp_path / "elsewhere").mkdir()
        one = read_problem(written(tmp_path, CHANGES))
        other = read_problem(written(tmp_path / "elsewhere", CHANGES))
        assert input_hash(one) == input_hash(other)

    @pytest.mark.parametrize("name", ["problem.toml", "sets/set.toml", "mask.csv"])
    def test_depends_on_every_file(self, tmp_path: Path, name: str) -> None:
        path = written(tmp_path, CHANGES)
        before = input_hash(read_problem(path))
        changed = path.parent / name
        changed.write_text(changed.read_text() + "\n")
        assert input_hash(read_problem(path)) != before

    def test_not_on_files_that_are_not_read(self, tmp_path: Path) -> None:
        path = written(tmp_path, CHANGES)
        before = input_hash(read_problem(path))
        (path.parent / "sets" / "notes.txt").write_text("none of it")
        assert input_hash(read_problem(path)) == before
