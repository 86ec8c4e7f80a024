"""Workers of a Dask scheduler: real processes that are killed, join late, or run something else."""

from __future__ import annotations

import os
import signal
import subprocess
import sys
import time
import warnings
from collections.abc import Iterator
from pathlib import Path
from typing import Any

import pytest
import small_problems
from distributed import LocalCluster
from test_workers import Counted, die, die_always, fail, is_gone, multiply, process_id, sleep

from stackopt import cluster
from stackopt.archive import Archive
from stackopt.cluster import Cluster, Mismatch, Versions, own_versions
from stackopt.errors import InputError, WorkersLostError
from stackopt.phases import Search
from stackopt.proof import Prover
from stackopt.workers import gather

pytestmark = pytest.mark.filterwarnings("ignore::ResourceWarning", "ignore::DeprecationWarning")
HERE = str(Path(__file__).parent)


@pytest.fixture(scope="module")
def local() -> Iterator[LocalCluster]:
    with warnings.catch_warnings():
        warnings.simplefilter("ignore")
        # The workers find the functions of these tests on their path.
        os.environ["PYTHONPATH"] = os.pathsep.join(filter(None, [HERE, os.environ.get("PYTHONPATH")]))
        with LocalCluster(n_workers=2, threads_per_worker=1, dashboard_address=":0", silence_logs=50) as started:
            yield started


@pytest.fixture
def workers(local: LocalCluster) -> Iterator[Cluster]:
    with Cluster(local.scheduler_address) as connected:
        yield connected


def worker_ids(local: LocalCluster) -> list[int]:
    return [worker.pid for worker in local.workers.values()]


class TestCalls:
    def test_results_come_in_order(self, workers: Cluster) -> None:
        tables = workers.publish([1, 2])
        assert gather(workers, multiply, tables, [(n,) for n in range(20)]) == [[n, 2 * n] for n in range(20)]
        assert workers.running == 0

    def test_run_in_worker_processes(self, local: LocalCluster, workers: Cluster) -> None:
        found = set(gather(workers, process_id, workers.publish(None), [(n,) for n in range(20)]))
        assert found <= set(worker_ids(local))
        assert workers.count == 2
        assert workers.words == "2 workers"

    def test_tables_travel_once(self, workers: Cluster, tmp_path: Path) -> None:
        """To the scheduler's first worker and on to the second; never with the calls."""
        tables = workers.publish(Counted(tmp_path))
        gather(workers, process_id, tables, [()])
        used = set(gather(workers, sleep_and_tell, tables, [(0.02, n) for n in range(40)]))
        readings = [path.name.partition("-")[0] for path in tmp_path.iterdir()]
        assert len(used) == 2
        assert all(readings.count(str(pid)) == 1 for pid in used)

    def test_what_a_call_raises(self, workers: Cluster) -> None:
        with pytest.raises(ValueError, match="not today"):
            gather(workers, fail, workers.publish(None), [()])
        assert workers.running == 0

    def test_abandoned_calls_are_never_seen(self, workers: Cluster) -> None:
        tables = workers.publish([7])
        workers.submit("old", multiply, tables, 1)
        workers.abandon()
        assert gather(workers, multiply, tables, [(3,)]) == [[21]]
        assert workers.finished(0.05) == []


class Lost:
    """A future whose result went away."""

    key, status = "key", "lost"

    def add_done_callback(self, function: Any) -> None:
        self.tell = lambda: function(self)

    def result(self) -> int:
        return 42


def sleep_and_tell(tables: object, seconds: float, _: int) -> int:
    sleep(tables, seconds)
    return process_id(tables)


class TestLoss:
    def test_a_killed_worker_loses_only_time(self, workers: Cluster, tmp_path: Path) -> None:
        tables = workers.publish(str(tmp_path / "flag"))
        assert gather(workers, die, tables, [(f"{n}",) for n in range(6)]) == [f"{n}" for n in range(6)]

    def test_a_worker_that_dies_with_a_result(self, workers: Cluster) -> None:
        """The result counts as lost until somebody else has it: that is waited for."""
        future = Lost()
        workers._running["key"] = ("ticket", future)
        workers._done.put("key")
        assert workers.finished(0.1) == []
        assert workers.running == 1
        future.status = "finished"
        future.tell()
        assert workers.finished(0.1) == [("ticket", 42)]
        assert workers.running == 0

    def test_work_that_always_kills(self, workers: Cluster) -> None:
        with pytest.raises(WorkersLostError, match="were killed again and again at the same piece of work"):
            gather(workers, die_always, workers.publish(None), [()])

    def test_a_proof_whose_worker_is_killed(
        self, local: LocalCluster, workers: Cluster, monkeypatch: pytest.MonkeyPatch
    ) -> None:
        monkeypatch.setattr("stackopt.proof.WORK", 2_000)
        _, compiled = small_problems.small_problem(1000, 8, 4)
        prover, other = (Prover(compiled, Archive(len(compiled.problem.search.objectives), 4)) for _ in range(2))
        killed: list[int] = []

        def watch() -> None:
            if prover.tally.opened > 30 and not killed and workers.running:
                killed.append(worker_ids(local)[0])
                os.kill(killed[0], signal.SIGKILL)

        assert prover.run(workers, watch=watch)
        assert killed
        assert other.run()
        assert prover.archive.values.tolist() == other.archive.values.tolist()
        assert is_gone(killed[0], 5.0)

    def test_the_scheduler_is_lost(self) -> None:
        command = "-m distributed.cli.dask_scheduler --port 0 --no-dashboard --host 127.0.0.1"
        with subprocess.Popen([sys.executable, *command.split()], stderr=subprocess.PIPE, text=True) as scheduler:
            assert scheduler.stderr is not None
            address = next(line.split()[-1] for line in scheduler.stderr if "Scheduler at:" in line)
            with Cluster(address) as workers:
                assert workers.words == "no worker yet (waiting for one)"
                assert workers.count == 1
                workers.submit(0, multiply, workers.publish([1]), 2)
                assert workers.finished(0.1) == []
                scheduler.kill()
                with pytest.raises(WorkersLostError, match=f"the scheduler at {address} was lost"):
                    wait_for_result(workers)


def wait_for_result(workers: Cluster) -> list[tuple[Any, Any]]:
    until = time.monotonic() + 30.0
    while time.monotonic() < until:
        if found := workers.finished():
            return found
    pytest.fail("nothing came within 30 s")


@pytest.mark.slow
class TestJoining:
    def test_late_workers_get_work(self) -> None:
        with (
            LocalCluster(n_workers=0, threads_per_worker=1, dashboard_address=":0", silence_logs=50) as late,
            Cluster(late.scheduler_address) as workers,
        ):
            tables = workers.publish(None)
            for n in range(200):
                workers.submit(n, sleep_and_tell, tables, 0.05, n)
            assert workers.finished(0.5) == []
            late.scale(1)
            (first,) = wait_for_result(workers)[:1]
            late.scale(2)
            used = {first[1]}
            while workers.running:
                used |= {pid for _, pid in workers.finished()}
            assert len(used) == 2


class TestVersions:
    def test_are_told(self) -> None:
        assert str(Versions("0.1.0", "3.11", "2.1.0")) == "stackopt 0.1.0 with Python 3.11 and numpy 2.1.0"
        assert own_versions().python == "{}.{}".format(*sys.version_info[:2])

    def test_of_workers_that_are_there(self, local: LocalCluster, monkeypatch: pytest.MonkeyPatch) -> None:
        other = own_versions()._replace(stackopt="0.0.9")
        monkeypatch.setattr(cluster, "own_versions", Called(other))
        with pytest.raises(InputError, match=r"runs stackopt .*, this is stackopt 0\.0\.9 .*; install"):
            Cluster(local.scheduler_address)

    def test_of_workers_that_join_later(self, workers: Cluster) -> None:
        """A call tells the versions of those who ask; what runs another answers with its own."""
        workers._versions = own_versions()._replace(numpy="1.0")
        with pytest.raises(InputError, match=r"the worker at tcp://\S+ runs .*, this is .* numpy 1\.0; install"):
            gather(workers, multiply, workers.publish([1]), [(2,)])

    def test_a_worker_without_the_package(self, workers: Cluster, monkeypatch: pytest.MonkeyPatch) -> None:
        monkeypatch.setattr(workers, "_versions", own_versions())
        error = ModuleNotFoundError("No module named 'stackopt'")
        monkeypatch.setattr(workers._client, "run", lambda *_, **__: {"tcp://10.0.0.9:1": error})
        with pytest.raises(InputError, match=r"at tcp://10\.0\.0\.9:1 has no usable stackopt .*; install it"):
            workers._refuse_other_versions()

    def test_mismatch_is_a_plain_answer(self) -> None:
        assert Mismatch("w", own_versions()).versions == own_versions()


class Called:
    """Answers here with something else; sent to a worker, it is the worker's own function."""

    def __init__(self, answer: Versions) -> None:
        self.answer = answer

    def __call__(self) -> Versions:
        return self.answer

    def __reduce__(self) -> Any:
        return _own, ()


def _own() -> Any:
    return own_versions


class TestAddress:
    @pytest.mark.parametrize("address", ["tcp://127.0.0.1:1", "nonsense", "tcp://", "tcp://127.0.0.1:99999", ""])
    def test_where_nobody_answers(self, address: str, monkeypatch: pytest.MonkeyPatch) -> None:
        monkeypatch.setattr(cluster, "CONNECT_S", 1)
        with pytest.raises(InputError, match="--cluster: no scheduler answers at"):
            Cluster(address)

    def test_without_the_package(self, monkeypatch: pytest.MonkeyPatch) -> None:
        monkeypatch.setitem(sys.modules, "distributed", None)
        with pytest.raises(InputError, match=r"needs the package dask\.distributed; install it with: pip install"):
            Cluster("tcp://127.0.0.1:8786")


@pytest.mark.slow
def test_same_front_as_alone(workers: Cluster) -> None:
    problem, _ = small_problems.small_problem(1002, 8, 4)
    alone, shared = Search(problem).run(), Search(problem, workers=workers).run()
    assert (shared.rows, shared.equals, shared.statement) == (alone.rows, alone.equals, alone.statement)
