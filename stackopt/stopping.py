"""Ways to ask a run to stop, the first time at a safe place, the second time at once; and why a run ended."""

from __future__ import annotations

import signal
import threading
from collections.abc import Iterator
from contextlib import contextmanager

from stackopt.errors import StackoptError


class StopAsked(Exception):  # noqa: N818 - a wish, not an error
    """Raised out of a watcher to end the phases at a safe place."""


@contextmanager
def signals() -> Iterator[threading.Event]:
    """Turn the first SIGINT, SIGTERM or SIGHUP into an event; a second one stops at once."""
    stopped = threading.Event()
    if threading.current_thread() is not threading.main_thread():
        yield stopped
        return

    def note(number: int, frame: object) -> None:
        if stopped.is_set():
            raise KeyboardInterrupt
        stopped.set()

    before = {number: signal.signal(number, note) for number in _to_heed()}
    try:
        yield stopped
    finally:
        for number, handler in before.items():
            signal.signal(number, handler)


def _to_heed() -> list[int]:
    """Ctrl-C, a polite kill and a terminal that is closed, unless the run was started to outlive it (nohup)."""
    numbers: list[int] = [signal.SIGINT, signal.SIGTERM]
    if hasattr(signal, "SIGHUP") and signal.getsignal(signal.SIGHUP) is not signal.SIG_IGN:
        numbers.append(signal.SIGHUP)
    return numbers


def reason_of(error: BaseException) -> str:
    """Say why a run ended before its time."""
    if isinstance(error, StackoptError):
        return str(error)
    if isinstance(error, KeyboardInterrupt):
        return "stopped at once, without a last checkpoint"
    return "memory ran out" if isinstance(error, MemoryError) else f"{type(error).__name__}: {error}"
