"""One run, one writer; with real processes, since the point is what the kernel does when they end."""

from __future__ import annotations

import contextlib
import errno
import json
import os
import signal
import subprocess
import sys
from collections.abc import Iterator
from pathlib import Path

import pytest

from stackopt import lock
from stackopt.errors import RunError
from stackopt.lock import LOCK, Owner, hold, is_held, owner

needs_kernel_locks = pytest.mark.skipif(os.name == "nt", reason="sends signals and forks")

HOLDER = """
import sys, time
from pathlib import Path
from stackopt.lock import hold
said = []
try:
    with hold(Path(sys.argv[1]), said.append):
        print("held", *said, flush=True)
        sys.stdin.readline()
except Exception as error:
    print(type(error).__name__, error, flush=True)
"""


@contextlib.contextmanager
def holder(folder: Path) -> Iterator[tuple[subprocess.Popen[str], str]]:
    """Another process that holds a folder until its input ends, and what it said first."""
    process = subprocess.Popen(
        [sys.executable, "-c", HOLDER, str(folder)], stdin=subprocess.PIPE, stdout=subprocess.PIPE, text=True
    )
    assert process.stdin is not None
    assert process.stdout is not None
    with process:
        try:
            yield process, process.stdout.readline()
        finally:
            process.kill()


def holds(folder: Path) -> list[str]:
    """Take and give back a lock; return what was said."""
    said: list[str] = []
    with hold(folder, said.append):
        assert is_held(folder) is True
    return said


class TestHolding:
    def test_leaves_nothing(self, tmp_path: Path) -> None:
        assert is_held(tmp_path) is False
        assert holds(tmp_path) == []
        assert list(tmp_path.iterdir()) == []
        assert is_held(tmp_path) is False
        assert holds(tmp_path) == []

    def test_given_back_after_an_error(self, tmp_path: Path) -> None:
        with pytest.raises(ZeroDivisionError), hold(tmp_path, print):
            raise ZeroDivisionError
        assert holds(tmp_path) == []

    def test_the_file_tells_who(self, tmp_path: Path) -> None:
        with hold(tmp_path, print):
            told = owner(tmp_path)
        assert told is not None
        assert told.process == os.getpid()
        assert told.host
        assert told.since_utc.endswith("Z")

    def test_twice_in_one_process(self, tmp_path: Path) -> None:
        with hold(tmp_path, print):
            with (
                pytest.raises(RunError, match=rf"is being worked on by process {os.getpid()} on "),
                hold(tmp_path, print),
            ):
                pass
            assert is_held(tmp_path) is True
        assert holds(tmp_path) == []

    def test_two_folders(self, tmp_path: Path) -> None:
        (tmp_path / "one").mkdir()
        with hold(tmp_path, print):
            assert holds(tmp_path / "one") == []

    def test_of_another_process(self, tmp_path: Path) -> None:
        with holder(tmp_path) as (process, said):
            assert said == "held\n"
            with pytest.raises(RunError) as caught, hold(tmp_path, print):
                pass
            assert is_held(tmp_path) is True
            message = str(caught.value)
            assert caught.value.exit_code == 2
            for part in (f"process {process.pid} on ", "since ", f"stackopt status {tmp_path}", f"kill {process.pid}"):
                assert part in message
            process.communicate("\n")
        assert holds(tmp_path) == []

    def test_one_who_only_looks_is_in_nobodys_way(self, tmp_path: Path, monkeypatch: pytest.MonkeyPatch) -> None:
        """A look is a shared lock for a moment: who wants to hold tries again."""
        with hold(tmp_path, print):
            pass
        (tmp_path / LOCK).touch()
        handle = os.open(tmp_path / LOCK, os.O_RDONLY)
        assert lock._lock(handle, shared=True)
        monkeypatch.setattr("stackopt.lock.time.sleep", lambda _: os.close(handle))
        assert holds(tmp_path) == []


@needs_kernel_locks
class TestDeadOwners:
    def test_killed(self, tmp_path: Path) -> None:
        with holder(tmp_path) as (process, said):
            assert said == "held\n"
            process.send_signal(signal.SIGKILL)
            process.wait()
            assert is_held(tmp_path) is False
            assert (tmp_path / LOCK).exists()
            (note,) = holds(tmp_path)
        assert note.startswith(f"note: took over the run from process {process.pid} on ")
        assert "its last checkpoint counts" in note
        assert holds(tmp_path) == []

    def test_a_child_that_lives_on_does_not_hold_it(self, tmp_path: Path) -> None:
        """A forked child has the file open too; the lock must end with its parent all the same."""
        code = (
            "import os, signal, sys, time\n"
            "from pathlib import Path\n"
            "from stackopt.lock import hold\n"
            "with hold(Path(sys.argv[1]), print):\n"
            "    child = os.fork()\n"
            "    if child == 0:\n"
            "        os.close(1), os.close(2)\n"
            "        time.sleep(60)\n"
            "        os._exit(0)\n"
            "    print(child, flush=True)\n"
            "    os.kill(os.getpid(), signal.SIGKILL)\n"
        )
        done = subprocess.run([sys.executable, "-c", code, str(tmp_path)], capture_output=True, text=True, check=False)
        assert done.returncode == -signal.SIGKILL, done.stderr
        child = int(done.stdout)
        try:
            os.kill(child, 0)  # it lives
            assert is_held(tmp_path) is False
            assert len(holds(tmp_path)) == 1
        finally:
            os.kill(child, signal.SIGKILL)

    @pytest.mark.parametrize(
        "content",
        [b"", b"{", b"[]", b"\xff\xfe", b'{"process": "1"}', b'{"process": -1}', b'{"process": true}', b"[" * 9999],
    )
    def test_nonsense_in_the_file(self, tmp_path: Path, content: bytes) -> None:
        (tmp_path / LOCK).write_bytes(content)
        assert owner(tmp_path) is None
        assert holds(tmp_path) == []

    def test_a_strangers_text_is_made_safe(self, tmp_path: Path) -> None:
        content = {"process": 7, "host": "\x1b[2Jhost\n", "since_utc": ["?"]}
        (tmp_path / LOCK).write_text(json.dumps(content))
        assert owner(tmp_path) == Owner(7, r"\x1b[2Jhost\n", "an unknown time")
        (note,) = holds(tmp_path)
        assert "\x1b" not in note


class TestRaces:
    def test_exactly_one_wins(self, tmp_path: Path) -> None:
        command = [sys.executable, "-c", HOLDER, str(tmp_path)]
        started = [
            subprocess.Popen(command, stdin=subprocess.PIPE, stdout=subprocess.PIPE, text=True) for _ in range(6)
        ]
        try:
            said = [process.stdout.readline() for process in started if process.stdout]
            assert sum(line == "held\n" for line in said) == 1
            assert sum(line.startswith("RunError ") for line in said) == 5
        finally:
            for process in started:
                process.communicate("\n")

    @needs_kernel_locks
    def test_a_file_that_was_removed_meanwhile_is_not_the_lock(
        self, tmp_path: Path, monkeypatch: pytest.MonkeyPatch
    ) -> None:
        """Between opening and locking, its holder ends and takes the file away: the next file counts."""
        plain, opened = os.open, []

        def open_late(*arguments: object, **more: object) -> int:
            handle = plain(*arguments, **more)  # type: ignore[arg-type]
            if not opened:
                (tmp_path / LOCK).unlink()
            opened.append(handle)
            return handle

        monkeypatch.setattr("stackopt.lock.os.open", open_late)
        with hold(tmp_path, print):
            assert len(opened) == 2
            assert os.path.samestat(os.fstat(opened[1]), (tmp_path / LOCK).stat())

    def test_a_folder_that_was_made_anew_is_left_alone(self, tmp_path: Path) -> None:
        """Whoever lost its folder does not take the lock of the one who has it now."""
        folder = tmp_path / "run"
        folder.mkdir()
        with hold(folder, print):
            folder.rename(tmp_path / "moved")
            folder.mkdir()
            (folder / LOCK).write_text("of another")
        assert (folder / LOCK).read_text() == "of another"


class TestWhereThereAreNoLocks:
    @pytest.fixture(autouse=True)
    def _no_locks(self, monkeypatch: pytest.MonkeyPatch) -> None:
        def refuse(handle: int, kind: int) -> None:
            raise OSError(errno.ENOLCK, "No locks available")

        monkeypatch.setattr("stackopt.lock.fcntl.flock", refuse)

    def test_goes_on_with_a_warning(self, tmp_path: Path) -> None:
        said: list[str] = []
        with hold(tmp_path, said.append):
            assert is_held(tmp_path) is None
        (warning,) = said
        assert warning.startswith("warning: ")
        assert "this file system knows no locks; take care" in warning
        assert list(tmp_path.iterdir()) == []


@needs_kernel_locks
class TestOddFiles:
    def test_a_link_is_not_followed(self, tmp_path: Path) -> None:
        (tmp_path / "precious").write_text("kept")
        (tmp_path / LOCK).symlink_to(tmp_path / "precious")
        with pytest.raises(RunError, match="it is a link; remove it"), hold(tmp_path, print):
            pass
        assert (tmp_path / "precious").read_text() == "kept"
        assert is_held(tmp_path) is None

    def test_a_pipe_is_not_waited_for(self, tmp_path: Path) -> None:
        os.mkfifo(tmp_path / LOCK)
        with pytest.raises(RunError, match="is no ordinary file; remove it"), hold(tmp_path, print):
            pass
        assert is_held(tmp_path) is None
        assert owner(tmp_path) is None

    def test_a_folder(self, tmp_path: Path) -> None:
        (tmp_path / LOCK).mkdir()
        with pytest.raises(RunError, match=r"run\.lock: cannot be written: Is a directory"), hold(tmp_path, print):
            pass

    def test_no_folder(self, tmp_path: Path) -> None:
        with pytest.raises(RunError, match=r"cannot be written: No such file"), hold(tmp_path / "gone", print):
            pass
        assert is_held(tmp_path / "gone") is False
