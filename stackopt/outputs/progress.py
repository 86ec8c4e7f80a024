"""Progress of long work: a live line in a terminal, plain lines elsewhere."""

from __future__ import annotations

import time
from collections.abc import Iterator
from contextlib import contextmanager
from types import TracebackType

from rich.console import Group
from rich.live import Live
from rich.progress_bar import ProgressBar
from rich.table import Table
from rich.text import Text

from stackopt.outputs.console import PlainConsole, make_console
from stackopt.status import Status

SECONDS_BETWEEN_LINES = 5.0
"""Shortest time between two plain lines of the same phase."""
_BAR_WIDTH = 24


class _LastingConsole(PlainConsole):
    """A console whose reader may go away without ending the work: what nobody reads is dropped."""

    def on_broken_pipe(self) -> None:
        """Be silent from now on."""
        self.quiet = True


class TerminalProgress:
    """Shows each status it is called with, on standard error; that this cannot be written never stops the work.

    Use it as a context manager and hand it over as the watcher. In a terminal it keeps a live display and leaves a line
    for each finished phase; elsewhere it writes a line when the phase changes, and one every few seconds.

    Parameters
    ----------
    console : PlainConsole, optional
        Where to write; standard error when left out.

    Examples
    --------
    >>> with TerminalProgress() as watcher:
    ...     pass
    """

    def __init__(self, console: PlainConsole | None = None) -> None:
        self._console = console or make_console(stderr=True, kind=_LastingConsole)
        self._live: Live | None = None
        self._status: Status | None = None
        self._started = self._written = 0.0

    def __enter__(self) -> TerminalProgress:
        if self._console.is_terminal:
            # No refresh thread: worker processes may be forked while the display is up.
            self._live = Live(
                console=self._console, auto_refresh=False, transient=True, redirect_stdout=False, redirect_stderr=False
            )
            with self._as_long_as_it_can_be_written():
                self._live.start()
        return self

    def __exit__(
        self, kind: type[BaseException] | None, error: BaseException | None, trace: TracebackType | None
    ) -> None:
        with self._as_long_as_it_can_be_written():
            if self._live is not None:
                self._live.stop()
                self._live = None
            if kind is None:
                self._close_phase()
        self._status = None

    def __call__(self, status: Status) -> None:
        """Show a status."""
        with self._as_long_as_it_can_be_written():
            self._show(status)

    @contextmanager
    def _as_long_as_it_can_be_written(self) -> Iterator[None]:
        """Fall silent when the terminal was closed or the log's disk is full."""
        try:
            yield
        except OSError:
            self._console.quiet = True
            self._live = None

    def _show(self, status: Status) -> None:
        now = time.monotonic()
        changed = self._status is None or status.phase != self._status.phase
        if changed:
            self._close_phase()
            self._started = now
        self._status = status
        if self._live is not None:
            self._live.update(self._display(status, now - self._started), refresh=True)
        elif changed or now - self._written >= SECONDS_BETWEEN_LINES:
            self._written = now
            self._console.print(status_line(status), soft_wrap=True)

    def _close_phase(self) -> None:
        if self._status is None:
            return
        seconds = time.monotonic() - self._started
        if self._live is not None:
            self._live.update("")
        front = f", {_stacks(self._status.front_size)} on the front" if self._status.front_size else ""
        self._console.print(f"{self._status.phase}: done in {duration_words(seconds)}{front}", soft_wrap=True)

    def _display(self, status: Status, seconds: float) -> Group:
        line = Table.grid(padding=(0, 2, 0, 0))
        known = status.fraction is not None
        bar = ProgressBar(
            total=1.0 if known else None,
            completed=min(max(status.fraction or 0.0, 0.0), 1.0),
            width=min(_BAR_WIDTH, max(self._console.width - 50, 6)),
            pulse=not known,
        )
        share = (
            f"{status.fraction * 100:3.0f} %" if status.fraction is not None else f"{duration_words(seconds)} so far"
        )
        left = "" if status.seconds_left is None else f"{duration_words(status.seconds_left)} left"
        line.add_row(status.phase, bar, *filter(None, (share, status.rate, left)))
        below = _front_words(status)
        return Group(line, Text(below, overflow="ellipsis", no_wrap=True)) if below else Group(line)


def status_line(status: Status) -> str:
    """Write a status on one line.

    Examples
    --------
    >>> status_line(Status("proving", 0.42, "41,000 stacks/s", 12, {"mass": "1.2 kg/m^2"}, 80.0))
    'proving: 42 %, 41,000 stacks/s, 1 min 20 s left; front of 12 stacks, least 1.2 kg/m^2'
    """
    parts = []
    if status.fraction is not None:
        parts.append(f"{status.fraction * 100:.0f} %")
    if status.rate:
        parts.append(status.rate)
    if status.seconds_left is not None:
        parts.append(f"{duration_words(status.seconds_left)} left")
    text = f"{status.phase}: {', '.join(parts)}" if parts else status.phase
    below = _front_words(status)
    return f"{text}; {below}" if below else text


def _front_words(status: Status) -> str:
    if not status.front_size:
        return ""
    least = [value for name, value in status.best.items() if name != "margin"]
    text = f"front of {_stacks(status.front_size)}"
    if least:
        text += f", least {', '.join(least)}"
    return text + (f", largest margin {status.best['margin']}" if "margin" in status.best else "")


def _stacks(count: int) -> str:
    return f"{count:,} stack" if count == 1 else f"{count:,} stacks"


def duration_words(seconds: float) -> str:
    """Write a time span with the two units that matter.

    Examples
    --------
    >>> duration_words(4.2), duration_words(80.0), duration_words(7400.0), duration_words(200000.0)
    ('4.2 s', '1 min 20 s', '2 h 3 min', '2 d 7 h')
    """
    if seconds < 9.95:
        return f"{max(seconds, 0.0):.1f} s"
    whole = round(seconds)
    for size, unit, smaller, name in ((86400, "d", 3600, "h"), (3600, "h", 60, "min"), (60, "min", 1, "s")):
        if whole >= size:
            rest = whole % size // smaller
            return f"{whole // size} {unit} {rest} {name}" if rest else f"{whole // size} {unit}"
    return f"{whole} s"
