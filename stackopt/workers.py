"""Workers: pure functions of published tables, run in this process or in processes beside it.

A search asks for *calls* and takes their results as they come; it does not know who runs them. `stackopt.cluster` has
the same for other machines. What many calls need, such as the tables of a problem, is *published* once and travels to
every worker once.
"""

from __future__ import annotations

import importlib
import multiprocessing
import os
import pickle
import shutil
import signal
import tempfile
import threading
import weakref
from abc import ABC, abstractmethod
from collections import deque
from collections.abc import Callable, Hashable, Sequence
from concurrent.futures import FIRST_COMPLETED, BrokenExecutor, Future, ProcessPoolExecutor, wait
from dataclasses import dataclass, replace
from multiprocessing.connection import Connection
from pathlib import Path
from types import TracebackType
from typing import Any, Self

from stackopt.errors import WorkersLostError

EVERY_S = 0.2
"""How often those who wait for results look at something else."""
ATTEMPTS = 5
"""How often a call is tried whose worker is killed."""
ATTEMPTS_TO_START = 2
"""The same where no worker has lived long enough to be asked."""
_KEPT = 4  # published tables that a worker keeps: those of two rounds


class Workers(ABC):
    """Somebody who runs calls; a context manager that leaves nothing running."""

    @property
    @abstractmethod
    def count(self) -> int:
        """How many calls run at a time; may change."""

    @property
    @abstractmethod
    def running(self) -> int:
        """Calls submitted and not yet taken."""

    @property
    def words(self) -> str:
        """Who works, for progress lines; empty where it need not be said."""
        return ""

    @abstractmethod
    def publish(self, tables: Any) -> Any:
        """Return what `submit` takes for these tables, for as long as it is kept."""

    @abstractmethod
    def submit(self, ticket: Hashable, function: Callable[..., Any], tables: Any, *arguments: Any) -> None:
        """Ask for ``function(tables, *arguments)``; the ticket tells its result from others."""

    @abstractmethod
    def finished(self, timeout_s: float = EVERY_S) -> list[tuple[Any, Any]]:
        """Wait a little for results and take those that are there, as pairs of ticket and result.

        Raises
        ------
        WorkersLostError
            When a call cannot be run because workers are killed again and again, or cannot be reached.
        Exception
            What a call raised.
        """

    @abstractmethod
    def abandon(self) -> None:
        """Forget every call that was submitted; their results are never seen."""

    def close(self) -> None:
        """End the workers."""
        self.abandon()

    def __enter__(self) -> Self:
        return self

    def __exit__(
        self, kind: type[BaseException] | None, error: BaseException | None, trace: TracebackType | None
    ) -> None:
        self.close()


def gather(
    workers: Workers,
    function: Callable[..., Any],
    tables: Any,
    arguments: Sequence[tuple[Any, ...]],
    watch: Callable[[], None] = lambda: None,
) -> list[Any]:
    """Run a function for every tuple of arguments and return the results in their order.

    ``watch`` is called now and then; what it raises ends the waiting and abandons the calls.
    """
    results: dict[int, Any] = {}
    try:
        for number, rest in enumerate(arguments):
            workers.submit(number, function, tables, *rest)
        while len(results) < len(arguments):
            results.update(workers.finished())
            watch()
    except BaseException:
        workers.abandon()
        raise
    return [results[number] for number in range(len(arguments))]


class Serial(Workers):
    """The process itself: runs one call whenever somebody waits for results."""

    def __init__(self) -> None:
        self._waiting: deque[tuple[Hashable, Callable[[], Any]]] = deque()

    @property
    def count(self) -> int:
        """One."""
        return 1

    @property
    def running(self) -> int:
        """Calls submitted and not yet taken."""
        return len(self._waiting)

    def publish(self, tables: Any) -> Any:
        """Return the tables themselves."""
        return tables

    def submit(self, ticket: Hashable, function: Callable[..., Any], tables: Any, *arguments: Any) -> None:
        """Note the call."""
        self._waiting.append((ticket, lambda: function(tables, *arguments)))

    def finished(self, timeout_s: float = EVERY_S) -> list[tuple[Any, Any]]:
        """Run the next call."""
        if not self._waiting:
            return []
        ticket, call = self._waiting.popleft()
        return [(ticket, call())]

    def abandon(self) -> None:
        """Forget the calls that wait."""
        self._waiting.clear()


@dataclass(frozen=True)
class _Call:
    ticket: Hashable
    function: Callable[..., Any]
    tables: _Published
    arguments: tuple[Any, ...]
    attempts: int = 0


class _Published:
    """A file that holds tables, removed when nobody needs it any more."""

    def __init__(self, path: Path) -> None:
        self.path = path
        weakref.finalize(self, path.unlink, missing_ok=True)


class Processes(Workers):
    """Processes on this machine; calls whose process is killed are run again by new ones.

    A script that uses it must be importable without side effects (``if __name__ == "__main__":``), as the processes
    import it.

    Parameters
    ----------
    count : int
        Number of processes.
    modules : sequence of str
        What they import at once, while the caller prepares what they are to do.
    """

    def __init__(self, count: int, modules: Sequence[str] = ()) -> None:
        self._count, self._modules = count, tuple(modules)
        self._folder = Path(tempfile.mkdtemp(prefix="stackopt-"))  # readable by this user only
        self._published = 0
        self._running: dict[Future[Any], _Call] = {}
        self._start()

    @property
    def count(self) -> int:
        """Number of processes."""
        return self._count

    @property
    def running(self) -> int:
        """Calls submitted and not yet taken."""
        return len(self._running)

    def publish(self, tables: Any) -> Any:
        """Write the tables to a file that every process reads once."""
        self._published += 1
        path = self._folder / f"{self._published}.tables"
        with path.open("xb") as stream:
            pickle.dump(tables, stream, protocol=pickle.HIGHEST_PROTOCOL)
        return _Published(path)

    def submit(self, ticket: Hashable, function: Callable[..., Any], tables: Any, *arguments: Any) -> None:
        """Hand the call to the next free process."""
        self._submit(_Call(ticket, function, tables, arguments))

    def finished(self, timeout_s: float = EVERY_S) -> list[tuple[Any, Any]]:
        """Take the results that are there; start new processes for those that were killed."""
        done, _ = wait(self._running, timeout=timeout_s, return_when=FIRST_COMPLETED)
        results = []
        for future in done:
            if isinstance(future.exception(), BrokenExecutor):
                self._restart()
                break
            results.append((self._running.pop(future).ticket, future.result()))
        return results

    def abandon(self) -> None:
        """Forget all calls; a process may finish what it is at."""
        for future in self._running:
            future.cancel()
        self._running.clear()

    def close(self) -> None:
        """End the processes at once."""
        self.abandon()
        self._end()
        shutil.rmtree(self._folder, ignore_errors=True)

    def _submit(self, call: _Call) -> None:
        try:
            future = self._executor.submit(_run, str(call.tables.path), call.function, call.arguments)
        except BrokenExecutor as error:
            future = Future()
            future.set_exception(error)
        self._running[future] = call

    def _start(self) -> None:
        context = multiprocessing.get_context("spawn")
        # Processes hold one end of a pipe; they leave when the other end closes, which even a killed process does.
        self._held, self._leash = context.Pipe(duplex=False)
        self._executor = ProcessPoolExecutor(
            self._count, context, initializer=_begin, initargs=(self._held, str(self._folder), self._modules)
        )
        # A process is started for each call that finds none free.
        self._first = [self._executor.submit(_awake) for _ in range(self._count)]

    def _end(self) -> None:
        self._executor.shutdown(wait=False, cancel_futures=True)
        self._leash.close()
        self._held.close()

    def _restart(self) -> None:
        lost = list(self._running.values())
        self._running.clear()
        most = (
            ATTEMPTS
            if any(future.done() and future.exception() is None for future in self._first)
            else ATTEMPTS_TO_START
        )
        self._end()
        if any(call.attempts + 1 >= most for call in lost):
            raise WorkersLostError(
                f"worker processes were killed {most} times in a row; if memory is short, use fewer --workers (a "
                'script that asks for several workers must do so under `if __name__ == "__main__":`)'
            )
        self._start()
        for call in lost:
            self._submit(replace(call, attempts=call.attempts + 1))


_tables: dict[str, Any] = {}  # of a worker process, by the name of their file


def _begin(held: Connection, folder: str, modules: tuple[str, ...]) -> None:
    """Prepare a worker process: signals are its parent's business, and it never outlives that."""
    for name in ("SIGINT", "SIGTERM", "SIGHUP"):  # as far as the system has them
        if number := getattr(signal, name, None):
            signal.signal(number, signal.SIG_IGN)
    threading.Thread(target=_leave_with_parent, args=(held, folder), daemon=True).start()
    for name in modules:
        importlib.import_module(name)


def _awake() -> None:
    """Do nothing, once the process is there."""


def _leave_with_parent(held: Connection, folder: str) -> None:
    held.poll(None)  # until the other end closes; nothing is ever sent
    parent = multiprocessing.parent_process()
    if parent is not None:
        parent.join(1.0)
        if not parent.is_alive():
            shutil.rmtree(folder, ignore_errors=True)
    os._exit(0)


def _run(path: str, function: Callable[..., Any], arguments: tuple[Any, ...]) -> Any:
    if path not in _tables:
        while len(_tables) >= _KEPT:
            del _tables[next(iter(_tables))]
        with Path(path).open("rb") as stream:
            _tables[path] = pickle.load(stream)  # written by the parent, in a folder of its own
    return function(_tables[path], *arguments)
