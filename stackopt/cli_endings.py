"""How a command ends: exceptions to messages and exit codes, also where standard output or error cannot be written."""

from __future__ import annotations

import contextlib
import errno
import os
import signal
import sys
import threading
from collections.abc import Callable, Iterator
from contextlib import contextmanager
from typing import Any, TextIO

import typer

from stackopt.errors import StackoptError


def mend_streams() -> None:
    """Give closed standard streams something to write to, so that no file of a run gets their numbers."""
    for number in range(3):
        try:
            os.fstat(number)
        except OSError:
            os.open(os.devnull, os.O_RDWR)  # takes the lowest number that is free, which is this one
    sys.stdout = sys.stdout or open(os.devnull, "w", encoding="utf-8")  # noqa: SIM115 - open to the end
    sys.stderr = sys.stderr or open(os.devnull, "w", encoding="utf-8")  # noqa: SIM115


def run(command: Callable[[], Any]) -> Any:
    """Run a command; whatever goes wrong becomes a message on standard error and an exit code.

    Raises
    ------
    typer.Exit
        With the exit code, after a message.
    """
    try:
        result = command()
        sys.stdout.flush()  # a full disk shows now, while there is still a way to say so
    except (typer.Abort, typer.Exit):
        raise
    except BrokenPipeError:  # the reader of the output has seen enough (| head)
        _drop(sys.stdout)
        raise typer.Exit(0) from None
    except KeyboardInterrupt:
        code, message = 130, "Interrupted."
    except Exception as error:
        if hasattr(error, "exit_code") and not isinstance(error, StackoptError):  # typer's own: wrong usage
            raise
        code, message = _explained(error)
    else:
        return result
    tell(message)
    raise typer.Exit(code)


@contextmanager
def guarded() -> Iterator[None]:
    """Say what went wrong outside of commands, such as help that cannot be written, and end the program."""
    try:
        yield
    except BrokenPipeError:
        _drop(sys.stdout)
        raise SystemExit(0) from None
    except OSError as error:
        code, message = _explained(error)
        tell(message)
        raise SystemExit(code) from None
    except KeyboardInterrupt:
        tell("Interrupted.")
        raise SystemExit(130) from None
    finally:
        _settle()


def tell(message: str) -> None:
    """Write a message to standard error; where that cannot be written either, the exit code must do."""
    with contextlib.suppress(OSError, ValueError):
        typer.echo(message, err=True)


def _explained(error: Exception) -> tuple[int, str]:
    """Exit code and message of an exception."""
    if isinstance(error, StackoptError):
        return error.exit_code, str(error)
    if isinstance(error, OSError) and (reason := _why_no_output(error)):
        return 2, f"Standard output cannot be written: {reason}. Files that the command wrote are whole."
    if os.environ.get("STACKOPT_DEBUG") == "1":
        raise error
    if isinstance(error, MemoryError):
        detail = f" ({error})" if str(error) else ""
        return 2, f"Memory ran out{detail}; give it more, or a smaller problem."
    if isinstance(error, OSError) and error.strerror:
        name = f"{error.filename}: " if error.filename is not None else ""
        return 2, f"{name}{error.strerror}; check that the file is there, its permissions and the free space."
    return 2, (
        f"stackopt failed on a mistake of its own, {type(error).__name__}: {error}. Please report it with the "
        "command and its files; with STACKOPT_DEBUG=1 in the environment it shows where."
    )


def _why_no_output(error: OSError) -> str | None:
    """Why standard output cannot be written, None where it can; what is left in it is dropped then."""
    try:
        sys.stdout.flush()
    except OSError as again:
        _drop(sys.stdout)
        return again.strerror or str(again)
    # Without a buffer nothing is left to try again. Files of results tell of their own errors, by name.
    return error.strerror if error.filename is None and error.errno in _OF_WRITING else None


_OF_WRITING = {errno.ENOSPC, errno.EDQUOT, errno.EFBIG, errno.EIO, errno.EBADF, errno.ENXIO}


def _settle() -> None:
    """Prepare to leave: an interrupt has nothing left to interrupt, and streams that cannot be written are dropped.

    The interpreter would end with a traceback for the one and an exit code of its own for the other.
    """
    if threading.current_thread() is threading.main_thread():
        signal.signal(signal.SIGINT, signal.SIG_IGN)
    for stream in (sys.stdout, sys.stderr):
        try:
            stream.flush()
        except (OSError, ValueError):
            _drop(stream)


def _drop(stream: TextIO) -> None:
    from stackopt.outputs.console import drop_output

    drop_output(stream)
