"""The terminal as stackopt writes to it: plain text, tables in its width, no surprises when the reader goes away."""

from __future__ import annotations

import os
import sys

from rich.console import Console

PIPE_WIDTH = 120
"""Width when nothing tells how wide the other end is."""


class PlainConsole(Console):
    """A console that shows text as it is, and ends the program quietly when its reader has gone (``| head``)."""

    def on_broken_pipe(self) -> None:
        """Drop what is left to write and end without an error."""
        self.quiet = True
        drop_output()
        raise SystemExit(0)


def make_console(stderr: bool = False) -> PlainConsole:
    """Return a console that reads no markup, emoji or colours into the user's text."""
    stream = sys.stderr if stderr else sys.stdout
    known = stream.isatty() or "COLUMNS" in os.environ
    return PlainConsole(stderr=stderr, markup=False, emoji=False, highlight=False, width=None if known else PIPE_WIDTH)


def drop_output() -> None:
    """Let everything that is still to be written to standard output vanish."""
    try:
        os.dup2(os.open(os.devnull, os.O_WRONLY), sys.stdout.fileno())
    except (OSError, ValueError):  # standard output is no file, as in tests
        return
