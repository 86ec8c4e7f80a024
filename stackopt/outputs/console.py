"""The terminal as stackopt writes to it: plain text, tables in its width, no surprises when the reader goes away."""

from __future__ import annotations

import os
import sys
from typing import TextIO

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


def make_console(stderr: bool = False, kind: type[PlainConsole] = PlainConsole) -> PlainConsole:
    """Return a console that reads no markup, emoji or colours into the user's text."""
    stream = sys.stderr if stderr else sys.stdout
    known = (stream is not None and stream.isatty()) or "COLUMNS" in os.environ
    return kind(stderr=stderr, markup=False, emoji=False, highlight=False, width=None if known else PIPE_WIDTH)


def drop_output(stream: TextIO | None = None) -> None:
    """Let everything that is still to be written to a stream vanish; standard output when left out."""
    try:
        os.dup2(os.open(os.devnull, os.O_WRONLY), (stream or sys.stdout).fileno())
    except (OSError, ValueError):  # standard output is no file, as in tests
        return
