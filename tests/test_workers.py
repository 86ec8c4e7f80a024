"""Workers: results in order whoever brings them, killed processes replaced, nothing left running."""

from __future__ import annotations

import os
import signal
import subprocess
import sys
import textwrap
import time
from collections.abc import Iterator
from pathlib import Path
from typing import Any

import pytest

from stackopt.errors import WorkersLostError
from stackopt.workers import ATTEMPTS, Processes, Serial, Workers, gather


def multiply(tables: list[int], factor: int) -> list[int]:
    return [factor * value for value in tables]


def process_id(_: object, *__: object) -> int:
    return os.getpid()


def fail(_: object) -> None:
    raise ValueError("not today")


def die(flag: str, then: str) -> str:
    """Kill this process the first time."""
    path = Path(flag)
    if not path.exists():
        path.touch()
        os.kill(os.getpid(), signal.SIGKILL)
    return then


def die_always(_: object) -> None:
    os.kill(os.getpid(), signal.SIGKILL)


def sleep(_: object, seconds: float) -> float:
    time.sleep(seconds)
    return seconds


class Counted:
    """Notes in a folder every time it is read by a process."""

    def __init__(self, folder: Path) -> None:
        self.folder = folder

    def __setstate__(self, state: dict[str, Any]) -> None:
        self.__dict__ = state
        (self.folder / f"{os.getpid()}-{time.monotonic_ns()}").touch()


@pytest.fixture(scope="module")
def processes() -> Iterator[Processes]:
    with Processes(2) as workers:
        yield workers


@pytest.fixture(params=["serial", "processes"])
def workers(request: pytest.FixtureRequest) -> Workers:
    return Serial() if request.param == "serial" else request.getfixturevalue("processes")


class TestAnyWorkers:
    def test_results_come_in_order(self, workers: Workers) -> None:
        tables = workers.publish([1, 2])
        assert gather(workers, multiply, tables, [(n,) for n in range(20)]) == [[n, 2 * n] for n in range(20)]
        assert workers.running == 0

    def test_nothing_to_do(self, workers: Workers) -> None:
        assert gather(workers, multiply, workers.publish([]), []) == []

    def test_tickets(self, workers: Workers) -> None:
        tables = workers.publish([3])
        workers.submit("a", multiply, tables, 2)
        workers.submit("b", multiply, tables, 5)
        assert workers.running == 2
        found: list[tuple[Any, Any]] = []
        while workers.running:
            found += workers.finished()
        assert sorted(found) == [("a", [6]), ("b", [15])]

    def test_what_a_call_raises(self, workers: Workers) -> None:
        with pytest.raises(ValueError, match="not today"):
            gather(workers, fail, workers.publish(None), [()])
        assert workers.running == 0

    def test_a_watcher_ends_it(self, workers: Workers) -> None:
        def watch() -> None:
            raise KeyboardInterrupt

        tables = workers.publish([7])
        with pytest.raises(KeyboardInterrupt):
            gather(workers, multiply, tables, [(n,) for n in range(5)], watch)
        assert workers.running == 0
        assert gather(workers, multiply, tables, [(3,)]) == [[21]]

    def test_waits_no_longer_than_told(self, workers: Workers) -> None:
        assert workers.finished(0.01) == []


class TestProcesses:
    def test_are_others(self, processes: Processes) -> None:
        found = set(gather(processes, process_id, processes.publish(None), [()] * 20))
        assert os.getpid() not in found
        assert 1 <= len(found) <= 2

    def test_tables_travel_once(self, tmp_path: Path) -> None:
        with Processes(2) as workers:
            tables = workers.publish(Counted(tmp_path))
            used = set(gather(workers, process_id, tables, [(n,) for n in range(50)]))
        readings = [int(path.name.partition("-")[0]) for path in tmp_path.iterdir()]
        assert sorted(readings) == sorted(used)

    def test_a_killed_one_is_replaced(self, tmp_path: Path) -> None:
        with Processes(2) as workers:
            tables = workers.publish(str(tmp_path / "flag"))
            assert gather(workers, die, tables, [(f"{n}",) for n in range(6)]) == [f"{n}" for n in range(6)]

    def test_one_that_is_always_killed(self) -> None:
        with Processes(1) as workers:
            with pytest.raises(WorkersLostError, match=f"killed {ATTEMPTS} times in a row; if memory is short, use"):
                gather(workers, die_always, workers.publish(None), [()])
            assert workers.running == 0

    def test_a_script_that_is_not_guarded(self, tmp_path: Path) -> None:
        """Its processes import it and would start processes of their own; they end at once, and that is said."""
        script = tmp_path / "script.py"
        script.write_text(
            textwrap.dedent("""
                from operator import add
                from stackopt.errors import WorkersLostError
                from stackopt.workers import Processes, gather
                with Processes(1) as workers:
                    try:
                        gather(workers, add, workers.publish(1), [(2,)])
                    except WorkersLostError as error:
                        print(error)
            """)
        )
        done = subprocess.run([sys.executable, str(script)], capture_output=True, text=True, timeout=120, check=True)
        assert "killed 2 times in a row" in done.stdout
        assert 'must do so under `if __name__ == "__main__":`' in done.stdout

    def test_closing_does_not_wait(self) -> None:
        workers = Processes(1)
        tables = workers.publish(None)
        (pid,) = gather(workers, process_id, tables, [()])
        workers.submit(0, sleep, tables, 60.0)
        time.sleep(0.3)
        workers.close()
        assert is_gone(pid, 5.0)

    def test_tables_are_removed(self) -> None:
        with Processes(1) as workers:
            folder = workers._folder
            assert folder.stat().st_mode & 0o077 == 0
            first, second = workers.publish([1]), workers.publish([2])
            assert len(list(folder.iterdir())) == 2
            del first
            assert len(list(folder.iterdir())) == 1
            assert gather(workers, multiply, second, [(2,)]) == [[4]]
        assert not folder.exists()

    def test_leave_with_a_killed_parent(self, tmp_path: Path) -> None:
        """Processes and tables of a parent that is killed without warning do not stay."""
        script = tmp_path / "parent.py"
        script.write_text(
            textwrap.dedent(f"""
                import sys
                sys.path.insert(0, {str(Path(__file__).parent)!r})
                from stackopt.workers import Processes, gather
                from test_workers import process_id, sleep

                if __name__ == "__main__":
                    workers = Processes(2)
                    tables = workers.publish(None)
                    ids = gather(workers, process_id, tables, [()] * 10)
                    for _ in range(4):
                        workers.submit(0, sleep, tables, 60.0)
                    print(workers._folder, *set(ids), flush=True)
                    while True:
                        workers.finished()
            """)
        )
        with subprocess.Popen([sys.executable, str(script)], stdout=subprocess.PIPE, text=True) as parent:
            assert parent.stdout is not None
            folder, *ids = parent.stdout.readline().split()
            assert Path(folder).exists()
            parent.kill()
        assert ids
        assert all(is_gone(int(pid), 10.0) for pid in ids)
        assert not Path(folder).exists()

    def test_interrupts_are_their_parents_business(self, processes: Processes) -> None:
        tables = processes.publish(None)
        (pid,) = set(gather(processes, process_id, tables, [()]))
        for number in (signal.SIGINT, signal.SIGTERM, signal.SIGHUP):
            os.kill(pid, number)
        assert pid in gather(processes, process_id, tables, [()] * 20)


def is_gone(pid: int, seconds: float) -> bool:
    """Whether a process ends within some time; one that its parent has not waited for yet counts as ended."""
    until = time.monotonic() + seconds
    while time.monotonic() < until:
        try:
            state = Path(f"/proc/{pid}/stat").read_text().rpartition(")")[2].split()[0]
        except FileNotFoundError:
            return True
        if state == "Z":
            return True
        time.sleep(0.05)
    return False
