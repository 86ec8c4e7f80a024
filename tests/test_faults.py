"""What goes wrong at night: full disks, folders that go away, memory refused, output that cannot be written.

Each ends with a message and its exit code, and what was saved before stays good. Disks are small memory file systems,
which only root may mount; elsewhere those tests are skipped.
"""

from __future__ import annotations

import os
import shutil
import subprocess
import sys
from collections.abc import Callable, Iterator
from pathlib import Path
from typing import Any

import pytest
from problem_files import write

from stackopt.errors import InputError, RunError
from stackopt.outputs.files import PART, write_whole
from stackopt.run import RunOptions, RunResult, search_run
from stackopt.runs import read_run
from stackopt.status import Status
from stackopt.watching import look

CHANGES = {
    'points = [["50 Hz", "8 dB"], ["1 kHz", "14 dB"], ["1 MHz", "90 dB"]]': (
        'points = [["1 kHz", "10 dB"], ["1 MHz", "75 dB"]]\npoints_per_decade = 1'
    ),
    "max_sheets = 4": "max_sheets = 3",
    "population = 50": "population = 10",
}
ON_POSIX = pytest.mark.skipif(os.name == "nt", reason="needs /dev/full, signals and limits of processes")
START = "from stackopt.cli import main; main()"


@pytest.fixture(autouse=True)
def _quick(tmp_path: Path, monkeypatch: pytest.MonkeyPatch) -> None:
    monkeypatch.chdir(tmp_path)
    monkeypatch.setattr("stackopt.explore.GENERATIONS", 3)
    monkeypatch.setattr("stackopt.run.CHECKPOINT_EVERY_S", 0.0)
    for name in ("stackopt.run.write_trade_off", "stackopt.run.write_curves", "stackopt.outputs.page.write_page"):
        monkeypatch.setattr(name, lambda *_: None)


@pytest.fixture
def problem(tmp_path: Path) -> Path:
    (tmp_path / "given").mkdir()
    return write(tmp_path / "given", CHANGES)


@pytest.fixture
def disk(tmp_path: Path) -> Iterator[Path]:
    """A disk of 2 MB."""
    where = tmp_path / "disk"
    where.mkdir()
    if not can("mount", "-t", "tmpfs", "-o", "size=2m", "none", str(where)):
        pytest.skip("mounting a small disk is not allowed here")
    yield where
    while can("umount", "-l", str(where)):
        pass


def make_read_only(disk: Path) -> None:
    """Cover the disk by a view of it that cannot be written; a disk with open files stays as it is otherwise."""
    assert can("mount", "--bind", str(disk), str(disk))
    assert can("mount", "-o", "remount,bind,ro", str(disk))


def can(*command: str) -> bool:
    if shutil.which(command[0]) is None:
        return False
    return subprocess.run(command, capture_output=True, check=False).returncode == 0


def fill(disk: Path) -> None:
    with (disk / "filler").open("wb", buffering=0) as stream:
        try:
            while True:
                stream.write(bytes(4096))
        except OSError:
            pass


def quiet(_: Status) -> None:
    pass


def run(path: Path | None, watcher: Callable[[Status], None] = quiet, **options: Any) -> RunResult:
    return search_run(path, RunOptions(workers=1, **options), watcher)


def at(phase: str, action: Callable[[], object]) -> Callable[[Status], None]:
    """Do something once, when a phase is reached."""
    left = [action]

    def watch(status: Status) -> None:
        if left and status.phase.startswith(phase):
            left.pop()()

    return watch


def parts(folder: Path) -> list[Path]:
    return [path for path in folder.rglob("*") if path.name.startswith(PART) or path.suffix == ".part"]


class TestFullDisk:
    def test_while_searching(self, problem: Path, disk: Path) -> None:
        folder = disk / "run"
        with pytest.raises(RunError) as caught:
            run(problem, at("exploring", lambda: fill(disk)), out=folder)
        assert caught.value.exit_code == 2
        message = str(caught.value)
        assert "No space left on device; earlier checkpoints stand" in message
        assert f"stackopt search --resume {folder}" in message
        assert look(folder).state == "dead"
        assert parts(folder) == []
        (disk / "filler").unlink()
        assert run(None, resume=folder).front.complete
        assert look(folder).state == "finished"

    def test_while_writing_results(self, problem: Path, disk: Path) -> None:
        """The front of before is still there, and the results can be written once there is room."""
        folder = disk / "run"
        run(problem, out=folder, hours=1e-12)
        before = (folder / "front.csv").read_bytes()
        with pytest.raises(RunError) as caught:
            run(None, at("writing", lambda: fill(disk)), resume=folder)
        message = str(caught.value)
        assert "cannot be written: no space left on device" in message
        assert f"write its results later with: stackopt search --resume {folder}" in message
        assert (folder / "front.csv").read_bytes() == before
        assert parts(folder) == []
        (disk / "filler").unlink()
        assert run(None, resume=folder).front.complete
        assert read_run(folder).front.complete

    def test_before_anything_is_written(self, problem: Path, disk: Path) -> None:
        (disk / "run").mkdir()
        fill(disk)
        with pytest.raises(RunError, match="No space left on device"):
            run(problem, out=disk / "run")

    def test_every_file_is_whole_or_absent(self, tmp_path: Path, disk: Path) -> None:
        def big(path: Path) -> None:
            path.write_bytes(bytes(3_000_000))

        path = disk / "front.csv"
        with pytest.raises(InputError, match="no space left on device; check the folder's permissions and free space"):
            write_whole(path, big)
        assert list(disk.iterdir()) == []
        write_whole(path, lambda part: part.write_text("old") and None)
        with pytest.raises(InputError):
            write_whole(path, big)
        assert [entry.name for entry in disk.iterdir()] == ["front.csv"]
        assert path.read_text() == "old"


class TestReadOnly:
    def test_from_the_start(self, problem: Path, disk: Path) -> None:
        (disk / "run").mkdir()
        make_read_only(disk)
        with pytest.raises(RunError, match=r"run\.lock: cannot be written: Read-only file system"):
            run(problem, out=disk / "run")
        with pytest.raises(RunError, match=r"cannot be made: Read-only file system; name another folder"):
            run(problem, out=disk / "other")

    def test_while_searching(self, problem: Path, disk: Path) -> None:
        folder = disk / "run"
        with pytest.raises(RunError) as caught:
            run(problem, at("exploring", lambda: make_read_only(disk)), out=folder)
        assert "Read-only file system; earlier checkpoints stand" in str(caught.value)
        assert look(folder).state == "dead"
        with pytest.raises(RunError, match="Read-only file system"):
            run(None, resume=folder)
        assert can("umount", str(disk))
        assert run(None, resume=folder).front.complete


class TestFolderGone:
    @pytest.mark.parametrize("phase", ["exploring", "proving", "confirming", "writing"])
    def test_removed(self, problem: Path, tmp_path: Path, phase: str) -> None:
        folder = tmp_path / "run"
        with pytest.raises(RunError) as caught:
            run(problem, at(phase, lambda: shutil.rmtree(folder)), out=folder)
        assert f"{folder}: is gone: it was removed or renamed during the run" in str(caught.value)
        assert caught.value.exit_code == 2
        assert not folder.exists()


class TestInputs:
    def test_the_originals_may_go_during_the_run(self, problem: Path, tmp_path: Path) -> None:
        """What is searched is what the run keeps: the record is of the copies."""
        folder = tmp_path / "run"
        result = run(problem, at("exploring", lambda: shutil.rmtree(problem.parent)), out=folder)
        assert result.front.complete
        assert read_run(folder).front.complete

    def test_the_originals_may_change_during_the_run(self, problem: Path, tmp_path: Path) -> None:
        folder = tmp_path / "run"
        run(problem, at("exploring", lambda: problem.write_text("changed")), out=folder, hours=1e-12)
        assert run(None, resume=folder).front.complete

    def test_gone_before_they_are_copied(self, problem: Path, tmp_path: Path, monkeypatch: pytest.MonkeyPatch) -> None:
        def refused(source: str, target: Path) -> None:
            raise PermissionError(13, "Permission denied")

        monkeypatch.setattr("stackopt.run_folder.shutil.copyfile", refused)
        with pytest.raises(RunError, match=r"problem\.toml: cannot be copied to .*: Permission denied"):
            run(problem, out=tmp_path / "run")

    def test_a_link_among_them(self, problem: Path, tmp_path: Path) -> None:
        """The copy lies where the link lies, so that the copied problem finds it."""
        (tmp_path / "data").mkdir()
        (problem.parent / "mask.csv").rename(tmp_path / "data" / "mask.csv")
        (problem.parent / "mask.csv").symlink_to(tmp_path / "data" / "mask.csv")
        folder = run(problem, out=tmp_path / "run", allow_outside=True, hours=1e-12).folder
        shutil.rmtree(tmp_path / "data")
        assert run(None, resume=folder).front.complete

    def test_a_table_with_its_full_name(self, problem: Path, tmp_path: Path) -> None:
        """Outside, and named in full: the run still reads its own copy."""
        (tmp_path / "data").mkdir()
        (problem.parent / "mask.csv").rename(tmp_path / "data" / "mask.csv")
        text = problem.read_text().replace('file = "mask.csv"', f'file = "{tmp_path / "data" / "mask.csv"}"')
        problem.write_text(text)
        folder = run(problem, out=tmp_path / "run", allow_outside=True, hours=1e-12).folder
        shutil.rmtree(tmp_path / "data")
        assert run(None, resume=folder).front.complete

    def test_copies_that_do_not_read_like_the_originals(
        self, problem: Path, tmp_path: Path, monkeypatch: pytest.MonkeyPatch
    ) -> None:
        """Found at once, not after the night."""

        def lossy(source: str, target: Path) -> None:
            target.write_text("")

        monkeypatch.setattr("stackopt.run_folder.shutil.copyfile", lossy)
        with pytest.raises(RunError, match=r"the copies of the inputs do not read like the originals") as caught:
            run(problem, out=tmp_path / "run")
        assert str(tmp_path / "run" / "inputs" / "problem.toml") in str(caught.value)

    def test_copies_that_cannot_be_read(self, problem: Path, tmp_path: Path) -> None:
        folder = run(problem, out=tmp_path / "run", hours=1e-12).folder
        (folder / "inputs" / "mask.csv").unlink()
        (folder / "inputs" / "mask.csv").mkdir()
        with pytest.raises(InputError, match=r"mask\.csv"):
            run(None, resume=folder)


MEMORY = """
import resource, sys
from pathlib import Path
import numpy as np
from stackopt import cli, cli_endings, readers
from stackopt.run import RunOptions, search_run

def refuse(what):
    size = int(Path("/proc/self/statm").read_text().split()[0]) * resource.getpagesize()
    resource.setrlimit(resource.RLIMIT_AS, (size + (64 << 20), resource.RLIM_INFINITY))
    np.ones(1 << 30)

def watch(status):
    if status.phase == "exploring":
        refuse(status)
"""


@ON_POSIX
@pytest.mark.skipif(not Path("/proc/self/statm").exists(), reason="needs to know the size of a process")
class TestMemoryRefused:
    def test_while_searching(self, problem: Path, tmp_path: Path) -> None:
        code = (
            f"{MEMORY}\n"
            "def start(): search_run(Path(sys.argv[1]), RunOptions(workers=1, out=Path(sys.argv[2])), watch)\n"
            "try: cli_endings.run(start)\n"
            "except Exception as error: sys.exit(error.exit_code)\n"
        )
        folder = tmp_path / "run"
        done = subprocess.run(
            [sys.executable, "-c", code, str(problem), str(folder)], capture_output=True, text=True, check=False
        )
        assert done.returncode == 2, done.stderr
        assert "memory ran out" in done.stderr
        assert f"stackopt search --resume {folder}" in done.stderr
        assert "Traceback" not in done.stderr
        state = look(folder)
        assert (state.state, state.reason) == ("dead", "memory ran out")
        assert run(None, resume=folder).front.complete

    def test_in_another_command(self, problem: Path) -> None:
        code = (
            f"{MEMORY}\nreaders.read_problem = lambda *_: refuse(_)\nsys.argv = ['stackopt', 'check', 'a']\ncli.main()"
        )
        done = subprocess.run([sys.executable, "-c", code], capture_output=True, text=True, check=False)
        assert done.returncode == 2
        assert done.stderr.startswith("Memory ran out (")
        assert "Traceback" not in done.stderr


def shell(line: str, buffered: bool = True) -> subprocess.CompletedProcess[str]:
    """Run a line of the shell in which STACKOPT stands for the program."""
    env = {name: value for name, value in os.environ.items() if name != "PYTHONUNBUFFERED"}
    env |= {} if buffered else {"PYTHONUNBUFFERED": "1"}
    command = line.replace("STACKOPT", f"{sys.executable} -c '{START}'")
    return subprocess.run(["sh", "-c", command], capture_output=True, text=True, check=False, env=env)


@ON_POSIX
@pytest.mark.skipif(not Path("/dev/full").exists(), reason="there is no /dev/full")
class TestOutput:
    FULL = "Standard output cannot be written: No space left on device. Files that the command wrote are whole.\n"

    @pytest.mark.parametrize("buffered", [True, False])
    @pytest.mark.parametrize("arguments", ["--help", "--version", "search --help", "check PROBLEM"])
    def test_full(self, problem: Path, arguments: str, buffered: bool) -> None:
        done = shell(f"STACKOPT {arguments.replace('PROBLEM', str(problem))} > /dev/full", buffered)
        assert (done.returncode, done.stderr) == (2, self.FULL)

    @pytest.mark.parametrize("arguments", ["--help", "check PROBLEM"])
    def test_closed(self, problem: Path, arguments: str) -> None:
        done = shell(f"STACKOPT {arguments.replace('PROBLEM', str(problem))} >&-")
        assert (done.returncode, done.stderr) in ((0, ""), (1, ""))

    @pytest.mark.parametrize("where", ["2>/dev/full", "2>&-", "2>/dev/full >/dev/full", "2>&- >&- <&-"])
    def test_no_way_to_say_what_is_wrong(self, tmp_path: Path, where: str) -> None:
        done = shell(f"STACKOPT check none.toml {where}")
        assert (done.returncode, done.stderr) == (2, "")

    def test_no_file_gets_the_number_of_a_closed_stream(self, problem: Path) -> None:
        code = "from stackopt.cli_endings import mend_streams; mend_streams(); print(open('/dev/null').fileno() > 2)"
        done = subprocess.run(
            ["sh", "-c", f'{sys.executable} -c "{code}" <&- 2>&-'], capture_output=True, text=True, check=False
        )
        assert done.stdout == "True\n"

    def test_a_search_whose_output_nobody_can_read_is_searched_all_the_same(
        self, problem: Path, tmp_path: Path
    ) -> None:
        """The reader of the progress has gone, and the log's disk is full."""
        folder = tmp_path / "run"
        done = shell(f"(STACKOPT search {problem} --workers 1 --out {folder} 2>&1 >/dev/full; echo $? >code) | true")
        assert "Traceback" not in done.stderr
        assert Path("code").read_text() == "2\n"
        assert read_run(folder).front.complete
        assert look(folder).state == "finished"

    def test_progress_on_a_full_disk(self, problem: Path, tmp_path: Path) -> None:
        folder = tmp_path / "run"
        done = shell(f"STACKOPT search {problem} --workers 1 --out {folder} 2>/dev/full")
        assert done.returncode == 0
        assert "Complete: all 155 stacks" in done.stdout
