"""Checkpoints of a run: plain arrays and JSON, written whole or not at all, the two newest kept.

A checkpoint is one npz file (read without pickle) whose entry ``text`` holds JSON; the number in its name rises. The
SHA-256 of the content, appended to it, tells a damaged checkpoint from a good one.
"""

from __future__ import annotations

import contextlib
import errno
import hashlib
import io
import json
import os
import stat
from collections.abc import Mapping
from pathlib import Path
from typing import Any
from zipfile import ZipFile

import numpy as np
from numpy.typing import NDArray

from stackopt.errors import Finding, RunError

FORMAT = 2
"""Version of the checkpoint's content."""
MAX_BYTES = 4 << 30
"""Most that the arrays of a checkpoint may hold: a small file may claim to hold more than any memory."""
_KEPT = 2
_PART = ".part"


def write_checkpoint(folder: Path, arrays: Mapping[str, NDArray[Any]], text: Mapping[str, Any]) -> Path:
    """Write the next checkpoint of a run and remove those beyond the two newest.

    Raises
    ------
    RunError
        When the folder cannot be written; earlier checkpoints stay as they are.
    """
    numbers = _numbers(folder)
    number = numbers[-1] + 1 if numbers else 1
    content = io.BytesIO()
    header = json.dumps({"format": FORMAT, **text})
    entries: dict[str, Any] = {**arrays, "text": np.frombuffer(header.encode(), dtype=np.uint8)}
    np.savez_compressed(content, **entries)
    path = _path(folder, number)
    try:
        _write_durably(path, content.getvalue() + hashlib.sha256(content.getvalue()).digest())
        for old in numbers[: max(0, len(numbers) + 1 - _KEPT)]:
            _path(folder, old).unlink(missing_ok=True)
    except OSError as error:
        raise RunError(_why_not_written(folder, path, error, numbers)) from None
    return path


def read_checkpoint(folder: Path) -> tuple[dict[str, NDArray[Any]], dict[str, Any], list[str]]:
    """Read the newest checkpoint that is whole.

    Returns
    -------
    arrays, text, warnings : dict, dict, list of str
        The content, and a sentence for every damaged checkpoint that was passed over.

    Raises
    ------
    RunError
        When there is none.
    """
    failed = []
    for number in reversed(_numbers(folder)):
        path = _path(folder, number)
        try:
            arrays, text = _read(path)
        except Exception as error:  # numpy, zipfile and zlib tell in a dozen ways that a file is not what it says
            failed.append(f"{path.name} cannot be used ({_reason(error)})")
            continue
        return arrays, text, [f"{one}; trying the one before" for one in failed]
    reasons = "".join(f"; {one}" for one in failed)
    raise RunError(Finding(str(folder), "", f"holds no checkpoint that can be read{reasons}; start the search again"))


def clean_parts(folder: Path) -> None:
    """Remove what a kill left of a checkpoint that was being written; only for the one who holds the run."""
    for path in folder.glob(f"checkpoint-*{_PART}"):
        with contextlib.suppress(OSError):  # what cannot be removed is in nobody's way until it is, and then says so
            path.unlink()


def _path(folder: Path, number: int) -> Path:
    return folder / f"checkpoint-{number:06d}.npz"


def _numbers(folder: Path) -> list[int]:
    """Numbers of the checkpoints in rising order."""
    names = [path.stem.removeprefix("checkpoint-") for path in folder.glob("checkpoint-*.npz")]
    # Only names that this module writes: others, such as copies, are not its business.
    return sorted(int(name) for name in names if name.isdecimal() and name.isascii() and f"{int(name):06d}" == name)


def _read(path: Path) -> tuple[dict[str, NDArray[Any]], dict[str, Any]]:
    status = path.stat()
    if not stat.S_ISREG(status.st_mode):  # a pipe would never end
        raise ValueError("it is no ordinary file")
    if status.st_size > MAX_BYTES:
        raise ValueError(f"it has {status.st_size / 1e9:.0f} GB")
    raw = path.read_bytes()
    content, digest = raw[:-32], raw[-32:]
    if hashlib.sha256(content).digest() != digest:
        raise ValueError("its checksum is wrong")
    with ZipFile(io.BytesIO(content)) as archive:
        claimed = sum(entry.file_size for entry in archive.infolist())
        if claimed > MAX_BYTES:
            raise ValueError(f"it claims to hold {claimed / 1e9:.3g} GB")
    with np.load(io.BytesIO(content), allow_pickle=False) as stored:
        text = json.loads(stored["text"].tobytes())
        if not isinstance(text, dict):
            raise ValueError("its text is no JSON object")
        if text.get("format") != FORMAT:
            raise ValueError(f"its format is {text.get('format')!r}, this program writes {FORMAT}")
        arrays = {name: stored[name] for name in stored.files if name != "text"}
    for name, array in arrays.items():
        if not isinstance(array, np.ndarray):  # an entry that is no array comes as bytes
            raise ValueError(f"its entry {name} is no array")
    return arrays, text


def _reason(error: Exception) -> str:
    if isinstance(error, OSError) and error.strerror:
        return error.strerror
    return str(error) or type(error).__name__


def _why_not_written(folder: Path, path: Path, error: OSError, earlier: list[int]) -> Finding:
    if not folder.is_dir():
        return Finding(
            str(folder), "", "is gone: it was removed or renamed during the run; nothing can be saved. Start again"
        )
    stands = "earlier checkpoints stand" if earlier else "there is no earlier one"
    return Finding(str(path), "", f"cannot be written: {error.strerror or error}; {stands}")


def _write_durably(path: Path, content: bytes) -> None:
    """Write through a temporary file: content and name are on the disk before the old checkpoint goes."""
    temporary = path.with_suffix(_PART)
    try:
        with temporary.open("wb") as stream:
            stream.write(content)
            stream.flush()
            os.fsync(stream.fileno())
        temporary.replace(path)
    except OSError:
        with contextlib.suppress(OSError):
            temporary.unlink()  # half a checkpoint helps nobody on a full disk
        raise
    if os.name != "nt":  # Windows opens no folders; its file system keeps names in a journal
        _sync_folder(path.parent)


def _sync_folder(folder: Path) -> None:
    handle = os.open(folder, os.O_RDONLY)
    try:
        os.fsync(handle)
    except OSError as error:
        if error.errno not in (errno.EINVAL, errno.ENOTSUP, errno.ENOSYS):  # some file systems cannot do that
            raise
    finally:
        os.close(handle)
