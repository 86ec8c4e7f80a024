"""Runs: what their folder holds, and that an interrupted one goes on to the front that it would have found."""

from __future__ import annotations

import json
import os
import re
import signal
from collections.abc import Callable
from importlib.metadata import version
from pathlib import Path
from typing import Any

import pandas as pd
import pytest
from problem_files import write

from stackopt.checkpoint import read_checkpoint
from stackopt.errors import InputError, InterruptedRunError, RunError
from stackopt.front import COLUMNS
from stackopt.readers import read_problem
from stackopt.run import RunOptions, RunResult, input_hash, prove_run, read_record, search_run
from stackopt.runs import read_run
from stackopt.status import Status

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


def run(path: Path, watcher: Callable[[Status], None] = quiet, **options: Any) -> RunResult:
    return search_run(path, RunOptions(workers=2, **options), watcher)


def resume(folder: Path, watcher: Callable[[Status], None] = quiet, **options: Any) -> RunResult:
    return search_run(None, RunOptions(workers=2, resume=folder, **options), watcher)


def files_in(folder: Path) -> dict[str, bytes]:
    return {path.relative_to(folder).as_posix(): path.read_bytes() for path in folder.rglob("*") if path.is_file()}


@pytest.fixture(scope="module")
def finished(tmp_path_factory: pytest.TempPathFactory) -> RunResult:
    """A run with all its files."""
    folder = tmp_path_factory.mktemp("run")
    return run(written(folder, CHANGES), out=folder / "result")


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
        assert not (tmp_path / "stopped" / "front.csv").exists()
        assert read_record(tmp_path / "stopped")["finished"] is False
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

    def test_asked_to_end(self, problem_file: Path, tmp_path: Path) -> None:
        with pytest.raises(InterruptedRunError):
            run(problem_file, interrupt_at("proving", sent=signal.SIGTERM), out=tmp_path / "stopped")
        assert resume(tmp_path / "stopped").front.complete

    def test_a_second_time_at_once(self, problem_file: Path, tmp_path: Path) -> None:
        def impatient(status: Status) -> None:
            if status.phase == "exploring":
                os.kill(os.getpid(), signal.SIGINT)
                os.kill(os.getpid(), signal.SIGINT)

        with pytest.raises(KeyboardInterrupt):
            run(problem_file, impatient, out=tmp_path / "stopped")
        assert resume(tmp_path / "stopped").front.complete

    def test_handlers_are_put_back(self, problem_file: Path) -> None:
        before = [signal.getsignal(number) for number in (signal.SIGINT, signal.SIGTERM)]
        run(problem_file, hours=1e-12)
        with pytest.raises(InterruptedRunError):
            run(problem_file, interrupt_at("exploring"))
        assert [signal.getsignal(number) for number in (signal.SIGINT, signal.SIGTERM)] == before

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

    def test_inputs_gone(self, folder: Path) -> None:
        (folder / "inputs" / "problem.toml").unlink()
        with pytest.raises(InputError, match=r"problem\.toml"):
            resume(folder)

    def test_margin_cannot_be_proved(self, tmp_path: Path) -> None:
        result = run(written(tmp_path, MARGIN), hours=1e-12)
        with pytest.raises(InputError, match="this front cannot be proved: the objective margin"):
            prove_run(result.folder, RunOptions(), quiet)


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

    def test_part_of_a_proof(self, problem_file: Path, tmp_path: Path, finished: RunResult) -> None:
        """A proof stopped half way keeps what it has settled, and prove goes on from there."""
        with pytest.raises(InterruptedRunError):
            run(problem_file, interrupt_at("proving", 3), out=tmp_path / "short")
        arrays, _, _ = read_checkpoint(tmp_path / "short")
        settled = arrays["proof_done"]
        assert 0 < settled.sum() < len(settled)
        fractions: list[float] = []

        def watch(status: Status) -> None:
            if status.phase.startswith(("preparing", "proving")):
                fractions.append(status.fraction or 0.0)

        prove_run(tmp_path / "short", RunOptions(workers=1), watch)
        assert max(fractions[:2]) >= settled.mean()
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
