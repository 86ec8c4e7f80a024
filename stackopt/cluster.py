"""Workers on other machines: those of a running Dask scheduler (`dask.distributed`).

The scheduler hands calls to whoever is free, gives work to workers that join later, and runs the calls of a worker that
is lost again. Tables are a task of their own, whose result travels to every worker that needs it, once.
"""

from __future__ import annotations

import logging
import platform
import socket
import time
import uuid
from collections.abc import Callable, Hashable
from importlib.metadata import version
from queue import Empty, SimpleQueue
from typing import Any, NamedTuple

from stackopt.errors import Finding, InputError, WorkersLostError
from stackopt.workers import EVERY_S, Workers

CONNECT_S = 15
"""How long a scheduler may take to answer."""
DEFAULT_PORT = 8786
"""Where a scheduler listens if nobody says otherwise."""
_COUNTED_EVERY_S = 1.0


class Versions(NamedTuple):
    """What must be the same on both sides, so that tables are understood and results equal."""

    stackopt: str
    python: str
    numpy: str

    def __str__(self) -> str:
        return f"stackopt {self.stackopt} with Python {self.python} and numpy {self.numpy}"


class Mismatch(NamedTuple):
    """The answer of a worker that runs something else."""

    worker: str
    versions: Versions


def own_versions() -> Versions:
    """Return what runs here."""
    return Versions(version("stackopt"), ".".join(platform.python_version_tuple()[:2]), version("numpy"))


class Cluster(Workers):
    """The workers of a scheduler.

    Parameters
    ----------
    address : str
        Such as ``tcp://10.0.0.5:8786``; for ``tls://`` the certificates come from Dask's own configuration.

    Raises
    ------
    InputError
        When the package is missing, no scheduler answers, or a worker runs another version.
    """

    def __init__(self, address: str) -> None:
        try:
            import distributed
        except ImportError:
            message = "needs the package dask.distributed; install it with: pip install 'stackopt[cluster]'"
            raise InputError(Finding("", "--cluster", message)) from None
        logging.getLogger("distributed.client").setLevel(logging.CRITICAL)  # what happens is told in our own words
        self._address = address
        connect: Any = distributed.Client
        try:
            _knock(address)
            self._client = connect(address, timeout=CONNECT_S, set_as_default=False)
        except (OSError, ValueError, OverflowError, ImportError) as error:
            message = f"no scheduler answers at {address!r} ({_first_line(error)}); start one with: dask scheduler"
            raise InputError(Finding("", "--cluster", message)) from None
        self._running: dict[str, tuple[Hashable, Any]] = {}  # by the key of the task
        self._done: SimpleQueue[str] = SimpleQueue()
        self._counted = 0
        self._counted_at = -float("inf")
        self._versions = own_versions()
        self._refuse_other_versions()

    @property
    def count(self) -> int:
        """Threads of all workers; 1 while there is none, so that work waits for the first."""
        return max(1, self._threads())

    @property
    def running(self) -> int:
        """Calls submitted and not yet taken."""
        return len(self._running)

    @property
    def words(self) -> str:
        """How many work, and where."""
        count = self._threads()
        return f"{count} {'worker' if count == 1 else 'workers'}" if count else "no worker yet (waiting for one)"

    def publish(self, tables: Any) -> Any:
        """Make the tables a task, whose result the scheduler can bring to any worker, and make again if it is lost."""
        return self._client.submit(_hold, tables, key=f"stackopt-tables-{uuid.uuid4().hex}")

    def submit(self, ticket: Hashable, function: Callable[..., Any], tables: Any, *arguments: Any) -> None:
        """Hand the call to the scheduler."""
        key = f"stackopt-{function.__name__}-{uuid.uuid4().hex}"
        future: Any = self._client.submit(_call, self._versions, function, tables, arguments, key=key)
        self._running[key] = ticket, future
        self._tell_when_done(future)

    def finished(self, timeout_s: float = EVERY_S) -> list[tuple[Any, Any]]:
        """Take the results that are there."""
        results = []
        try:
            keys = [self._done.get(timeout=timeout_s)]
            while not self._done.empty():
                keys.append(self._done.get_nowait())
        except Empty:
            return []
        for key in keys:
            ticket, future = self._running.get(key, (None, None))
            if future is None:
                continue  # abandoned
            if future.status in ("lost", "pending"):  # its worker died with the result, so that it is run again
                self._tell_when_done(future)
                continue
            del self._running[key]
            results.append((ticket, self._result(future)))
        return results

    def _tell_when_done(self, future: Any) -> None:
        future.add_done_callback(lambda done: self._done.put(done.key))

    def abandon(self) -> None:
        """Cancel all calls."""
        futures = [future for _, future in self._running.values()]
        self._running.clear()
        if futures and self._client.status == "running":
            self._client.cancel(futures)

    def close(self) -> None:
        """Leave the scheduler; it and its workers stay."""
        self.abandon()
        self._client.close(timeout=2)

    def _threads(self) -> int:
        if time.monotonic() - self._counted_at >= _COUNTED_EVERY_S and self._client.status == "running":
            self._counted = sum(self._client.nthreads().values())
            self._counted_at = time.monotonic()
        return self._counted

    def _result(self, future: Any) -> Any:
        from distributed import KilledWorker

        if future.status == "cancelled":
            raise WorkersLostError(f"the scheduler at {self._address} was lost; start it again, and go on with the run")
        try:
            result = future.result()
        except KilledWorker as error:
            raise WorkersLostError(
                f"workers at {self._address} were killed again and again at the same piece of work, perhaps for want "
                f"of memory: {_first_line(error)}"
            ) from None
        except ModuleNotFoundError as error:
            raise InputError(Finding("", "--cluster", f"a worker at {self._address} lacks it: {error}")) from None
        if isinstance(result, Mismatch):
            raise self._mismatch(result)
        return result

    def _refuse_other_versions(self) -> None:
        """Look at the workers that are there; those that join later are looked at by `_call`."""
        for worker, found in self._client.run(own_versions, on_error="return").items():
            if isinstance(found, Exception):
                message = f"the worker at {worker} has no usable stackopt ({_first_line(found)}); install it there"
                raise InputError(Finding("", "--cluster", message))
            if found != self._versions:
                raise self._mismatch(Mismatch(worker, found))

    def _mismatch(self, found: Mismatch) -> InputError:
        message = (
            f"the worker at {found.worker} runs {found.versions}, this is {self._versions}; install the same on both"
        )
        return InputError(Finding("", "--cluster", message))


def _knock(address: str) -> None:
    """Raise where nobody listens; a client that fails leaves threads behind, and so is made only where somebody does.

    Raises
    ------
    OSError, ValueError, OverflowError
        When the address is none, or nobody listens there.
    """
    from distributed.comm.addressing import parse_address, parse_host_port

    _, location = parse_address(address)
    socket.create_connection(parse_host_port(location, DEFAULT_PORT), timeout=CONNECT_S).close()


def _hold(tables: Any) -> Any:
    return tables


def _call(versions: Versions, function: Callable[..., Any], tables: Any, arguments: tuple[Any, ...]) -> Any:
    if own_versions() != versions:
        from distributed import get_worker

        return Mismatch(get_worker().address, own_versions())
    return function(tables, *arguments)


def _first_line(error: BaseException) -> str:
    return str(error).strip().partition("\n")[0] or type(error).__name__
