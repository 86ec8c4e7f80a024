"""Files that are either whole or not there."""

from __future__ import annotations

import contextlib
import os
import tempfile
from collections.abc import Callable
from pathlib import Path

from stackopt.errors import Finding, InputError

PART = ".part-"
"""How the name of a temporary file begins; a kill may leave one."""


def write_whole(path: Path, write: Callable[[Path], None]) -> None:
    """Let ``write`` fill a temporary file beside ``path``, then give it its name.

    A reader, or a run that is stopped, never sees half a file; nor does anybody after a power cut, since the content is
    on the disk before the name.

    Raises
    ------
    InputError
        When the folder does not exist or cannot be written.
    """
    temporary = None
    try:
        handle, name = tempfile.mkstemp(prefix=f"{PART}{path.stem}-", suffix=path.suffix, dir=path.parent)
        os.close(handle)
        temporary = Path(name)
        write(temporary)
        temporary.chmod(0o666 & ~_umask())  # a temporary file is private, a result is not
        _bring_to_disk(temporary)
        temporary.replace(path)
    except OSError as error:
        raise InputError(Finding(str(path), "", f"cannot be written: {_reason(path, error)}")) from None
    finally:
        if temporary is not None:
            with contextlib.suppress(OSError):  # a disk that has become read-only keeps it, and said so above
                temporary.unlink(missing_ok=True)


def _bring_to_disk(path: Path) -> None:
    handle = os.open(path, os.O_RDWR)
    try:
        os.fsync(handle)
    finally:
        os.close(handle)


def _umask() -> int:
    mask = os.umask(0)
    os.umask(mask)
    return mask


def _reason(path: Path, error: OSError) -> str:
    if path.is_dir():
        return "it is a folder; name a file"
    if not path.parent.is_dir():
        return f"the folder {path.parent} does not exist; make it first"
    return f"{(error.strerror or str(error)).lower()}; check the folder's permissions and free space"
