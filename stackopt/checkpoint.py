"""Checkpoints of a run: plain arrays and JSON, written whole or not at all, the two newest kept.

A checkpoint is one npz file (read without pickle) whose entry ``text`` holds JSON; the number in its name rises. The
SHA-256 of the content, appended to it, tells a damaged checkpoint from a good one.
"""

from __future__ import annotations

import hashlib
import io
import json
import os
from collections.abc import Mapping
from pathlib import Path
from typing import Any
from zipfile import BadZipFile

import numpy as np
from numpy.typing import NDArray

from stackopt.errors import Finding, RunError

FORMAT = 1
"""Version of the checkpoint's content."""
_KEPT = 2


def write_checkpoint(folder: Path, arrays: Mapping[str, NDArray[Any]], text: Mapping[str, Any]) -> Path:
    """Write the next checkpoint of a run and remove those beyond the two newest.

    Raises
    ------
    RunError
        When the folder cannot be written; earlier checkpoints stay as they are.
    """
    numbers = sorted(_numbers(folder))
    number = numbers[-1] + 1 if numbers else 1
    content = io.BytesIO()
    header = json.dumps({"format": FORMAT, **text})
    entries: dict[str, Any] = {**arrays, "text": np.frombuffer(header.encode(), dtype=np.uint8)}
    np.savez_compressed(content, **entries)
    path = folder / f"checkpoint-{number:06d}.npz"
    try:
        _write_durably(path, content.getvalue() + hashlib.sha256(content.getvalue()).digest())
        for old in numbers[: max(0, len(numbers) + 1 - _KEPT)]:
            (folder / f"checkpoint-{old:06d}.npz").unlink(missing_ok=True)
    except OSError as error:
        raise RunError(
            Finding(str(path), "", f"cannot be written: {error.strerror}; earlier checkpoints stand")
        ) from None
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
    warnings = []
    for number in sorted(_numbers(folder), reverse=True):
        path = folder / f"checkpoint-{number:06d}.npz"
        try:
            raw = path.read_bytes()
            content, digest = raw[:-32], raw[-32:]
            if hashlib.sha256(content).digest() != digest:
                raise ValueError("its checksum is wrong")
            with np.load(io.BytesIO(content), allow_pickle=False) as stored:
                arrays = {name: stored[name] for name in stored.files if name != "text"}
                text = json.loads(stored["text"].tobytes())
            if text.get("format") != FORMAT:
                raise ValueError(f"its format is {text.get('format')}, this program writes {FORMAT}")
        except (OSError, ValueError, KeyError, BadZipFile) as error:
            warnings.append(f"{path.name} cannot be used ({error}); trying the one before")
            continue
        return arrays, text, warnings
    reasons = "".join(f"; {warning}" for warning in warnings)
    raise RunError(Finding(str(folder), "", f"holds no checkpoint that can be read{reasons}; start the search again"))


def _numbers(folder: Path) -> list[int]:
    numbers = [path.stem.removeprefix("checkpoint-") for path in folder.glob("checkpoint-*.npz")]
    return [int(number) for number in numbers if number.isdigit()]


def _write_durably(path: Path, content: bytes) -> None:
    """Write through a temporary file: content and name are on the disk before the old checkpoint goes."""
    temporary = path.with_suffix(".part")
    with temporary.open("wb") as stream:
        stream.write(content)
        stream.flush()
        os.fsync(stream.fileno())
    temporary.replace(path)
    handle = os.open(path.parent, os.O_RDONLY)
    try:
        os.fsync(handle)
    finally:
        os.close(handle)
