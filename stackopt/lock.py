"""One run, one writer: a lock on the run's folder that ends with the process that holds it.

The kernel keeps the lock on an open file, so that it is free as soon as its process is gone, however it went. What the
file says is only for messages: who holds the lock, and since when. Readers of a run need no lock.
"""

from __future__ import annotations

import contextlib
import errno
import json
import os
import shlex
import socket
import stat
import sys
import time
from collections.abc import Callable, Iterator
from contextlib import contextmanager
from dataclasses import dataclass
from pathlib import Path

from stackopt.errors import Finding, RunError
from stackopt.untrusted import as_count, as_text, read_object

LOCK = "run.lock"
PATIENCE_S = 0.5
"""How long a lock must be taken before it counts as held: one who only looks holds it for a moment too."""
_RETRY_S = 0.02
_held: set[int] = set()


@dataclass(frozen=True)
class Owner:
    """Who holds a run, or held it: process id, machine, and since when, as text."""

    process: int
    host: str
    since_utc: str

    def __str__(self) -> str:
        return f"process {self.process} on {self.host}, since {self.since_utc}"


@contextmanager
def hold(folder: Path, say: Callable[[str], None]) -> Iterator[None]:
    """Hold a run folder for writing.

    Parameters
    ----------
    folder : Path
        A folder that exists.
    say : callable
        Receives notes and warnings: that a dead process held the run, that the file system knows no locks.

    Raises
    ------
    RunError
        When another process holds it, or its lock cannot be written.
    """
    path = folder / LOCK
    handle = _take(path, say)
    _held.add(handle)
    try:
        _sign(handle, path, say)
        yield
    finally:
        _release(handle, path)


def is_held(folder: Path) -> bool | None:
    """Tell whether a process holds a run folder; None where that cannot be told."""
    try:
        handle = os.open(folder / LOCK, os.O_RDONLY | _CAREFUL)
    except FileNotFoundError:
        return False
    except OSError:
        return None
    try:
        return None if not stat.S_ISREG(os.fstat(handle).st_mode) or not _lock(handle, shared=True) else False
    except BlockingIOError:
        return True
    finally:
        os.close(handle)


def owner(folder: Path) -> Owner | None:
    """Who holds a run folder, or held it and died; None where nobody says so."""
    try:
        content = read_object(folder / LOCK)
    except (OSError, ValueError):
        return None
    process, host, since = as_count(content.get("process")), as_text(content.get("host")), content.get("since_utc")
    return Owner(process, host or "an unknown machine", as_text(since) or "an unknown time") if process else None


def now_utc() -> str:
    """Write the time of the clock on the wall."""
    return time.strftime("%Y-%m-%dT%H:%M:%SZ", time.gmtime())


# Taking and releasing -------------------------------------------------------------------------------------------------

# A stranger's folder may hold a link or a pipe under this name: neither is followed nor waited for.
_CAREFUL = getattr(os, "O_NOFOLLOW", 0) | getattr(os, "O_NONBLOCK", 0) | getattr(os, "O_CLOEXEC", 0)


def _take(path: Path, say: Callable[[str], None]) -> int:
    """Open and lock the file; whoever removes it holds it, so a file that is gone by now is not the lock any more."""
    patience = time.monotonic() + PATIENCE_S
    while True:
        handle = _open(path)
        try:
            if not _lock(handle):
                say(
                    f"warning: {path}: this file system knows no locks; "
                    "take care that no other process works on this run at the same time"
                )
            if _is_still(handle, path):
                return handle
            os.close(handle)
        except BlockingIOError:
            os.close(handle)
            if time.monotonic() >= patience:
                raise RunError(_busy(path.parent)) from None
            time.sleep(_RETRY_S)


def _open(path: Path) -> int:
    try:
        handle = os.open(path, os.O_RDWR | os.O_CREAT | _CAREFUL, 0o666)
    except OSError as error:
        reason = "it is a link; remove it" if error.errno == errno.ELOOP else error.strerror
        raise RunError(
            Finding(str(path), "", f"cannot be written: {reason}; a run needs a folder that can be written")
        ) from None
    if not stat.S_ISREG(os.fstat(handle).st_mode):
        os.close(handle)
        raise RunError(Finding(str(path), "", "is no ordinary file; remove it"))
    return handle


def _is_still(handle: int, path: Path) -> bool:
    try:
        return os.path.samestat(os.fstat(handle), path.stat())
    except OSError:
        return False


def _busy(folder: Path) -> Finding:
    held_by = owner(folder)
    whose = f"is being worked on by {held_by}" if held_by else "is being worked on by another process"
    end = f"stop it (kill {held_by.process})" if held_by and held_by.host == socket.gethostname() else "stop it"
    look = f"stackopt status {shlex.quote(str(folder))}"
    return Finding(str(folder), "", f"{whose}; look at it ({look}), wait until it is done, or {end}")


def _sign(handle: int, path: Path, say: Callable[[str], None]) -> None:
    """Write who holds the lock; a name that is still there is that of a process which could not take it away."""
    before = owner(path.parent)
    if before is not None:
        say(f"note: took over the run from {before}, which ended without a word; its last checkpoint counts")
    content = {"process": os.getpid(), "host": socket.gethostname(), "since_utc": now_utc()}
    # A disk that is full or failing keeps its message until something is written that matters.
    with contextlib.suppress(OSError):
        os.ftruncate(handle, 0)
        os.lseek(handle, 0, os.SEEK_SET)
        os.write(handle, json.dumps(content).encode())


def _release(handle: int, path: Path) -> None:
    """Take the name away, then the file, then the lock: in this order nobody can lock a file that is going away."""
    if handle not in _held:
        return  # a forked child has closed it
    _held.discard(handle)
    with contextlib.suppress(OSError):
        os.ftruncate(handle, 0)
    if _is_still(handle, path):
        with contextlib.suppress(OSError):
            path.unlink()
    os.close(handle)


def _forget() -> None:
    """Close the locks in a forked child: a lock lasts as long as any process has its file open."""
    for handle in _held:
        with contextlib.suppress(OSError):
            os.close(handle)
    _held.clear()


if hasattr(os, "register_at_fork"):
    os.register_at_fork(after_in_child=_forget)

if sys.platform == "win32":
    import msvcrt

    _FAR = 1 << 30
    """Windows forbids reading what is locked: a byte that is not there is locked instead of the text."""

    def _lock(handle: int, shared: bool = False) -> bool:
        os.lseek(handle, _FAR, os.SEEK_SET)
        try:
            msvcrt.locking(handle, msvcrt.LK_NBLCK, 1)
        except OSError as error:
            if error.errno in (errno.EACCES, errno.EDEADLK):
                raise BlockingIOError from None
            return False
        return True
else:
    import fcntl

    def _lock(handle: int, shared: bool = False) -> bool:
        """Lock without waiting; BlockingIOError where another has it, False where locks are unknown."""
        try:
            fcntl.flock(handle, (fcntl.LOCK_SH if shared else fcntl.LOCK_EX) | fcntl.LOCK_NB)
        except BlockingIOError:
            raise
        except OSError:
            return False
        return True
