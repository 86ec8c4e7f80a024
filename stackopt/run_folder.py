"""The folder of a run: made for one run only, with copies of the inputs and their hash, and nothing left of a kill."""

from __future__ import annotations

import contextlib
import hashlib
import os
import shlex
import shutil
import time
from pathlib import Path

from stackopt.checkpoint import clean_parts
from stackopt.errors import Finding, RunError
from stackopt.lock import LOCK
from stackopt.outputs.files import PART
from stackopt.problem import Problem

INPUTS = "inputs"
STRAY_AFTER_S = 60.0
"""Age at which a temporary file is taken for one that a kill left: `stackopt page` may be writing its own just now."""


def make_folder(problem: Problem, out: Path | None) -> Path:
    """Make the folder of a new run: ``out``, or the next number in ``results``.

    Raises
    ------
    RunError
        When it cannot be made.
    """
    try:
        if out is not None:
            out.mkdir(parents=True, exist_ok=True)
            return out
        results = Path("results")
        results.mkdir(exist_ok=True)
        for number in range(1, 1_000_000):
            folder = results / f"{problem.name}-{number}"
            try:
                folder.mkdir()
            except FileExistsError:
                continue
            return folder
    except OSError as error:
        raise RunError(
            Finding(str(out or "results"), "", f"cannot be made: {error.strerror}; name another folder with --out")
        ) from None
    raise RunError(f"results holds a million runs of {problem.name}; clear it, or name a folder with --out")


def refuse_used(folder: Path) -> None:
    """Refuse a folder for a new run that holds anything but its lock; to be asked by the one who holds it.

    Raises
    ------
    RunError
        When another run was quicker, or the folder was never empty.
    """
    if any(path.name != LOCK for path in folder.iterdir()):
        raise RunError(
            Finding(str(folder), "", f"is not empty; name a new folder, or go on with a run: --resume {folder}")
        )


def clean(folder: Path) -> None:
    """Remove what a kill left of files that were being written; only for the one who holds the run."""
    clean_parts(folder)
    for path in folder.glob(f"{PART}*"):
        with contextlib.suppress(OSError):  # in nobody's way
            if time.time() - path.lstat().st_mtime > STRAY_AFTER_S:
                path.unlink()


def copy_inputs(problem: Problem, folder: Path) -> Path:
    """Copy the input files, keeping where they lie relative to one another: the copies read like the originals.

    Returns
    -------
    Path
        The copy of the problem file.

    Raises
    ------
    RunError
        When a file cannot be read or its copy not be written.
    """
    for name in problem.files:
        target = folder / input_path(problem, Path(name))
        try:
            target.parent.mkdir(parents=True, exist_ok=True)
            shutil.copyfile(name, target)
        except OSError as error:
            raise RunError(Finding(name, "", f"cannot be copied to {target}: {error.strerror or error}")) from None
    return folder / input_path(problem, Path(problem.files[0]))


def input_hash(problem: Problem) -> str:
    """SHA-256 over the content of every file that a problem was read from, in the order of their names.

    Raises
    ------
    RunError
        When a file cannot be read any more.
    """
    digest = hashlib.sha256()
    for path in sorted(problem.files, key=lambda name: input_path(problem, Path(name)).as_posix()):
        try:
            content = Path(path).read_bytes()
        except OSError as error:
            raise RunError(Finding(path, "", f"cannot be read: {error.strerror or error}")) from None
        digest.update(Path(path).name.encode() + b"\0" + content + b"\0")
    return digest.hexdigest()


def input_path(problem: Problem, path: Path) -> Path:
    """Where an input file lies in the folder of a run."""
    base = Path(os.path.commonpath([Path(name).parent for name in problem.files]))
    return Path(INPUTS) / path.relative_to(base)


def out_of_memory(folder: Path, error: MemoryError) -> Finding:
    """Say that memory ran out, and how to go on."""
    detail = f" ({error})" if str(error) else ""
    return Finding(
        str(folder),
        "",
        f"memory ran out{detail}; give it more, or fewer --workers, and go on from the last checkpoint with: "
        f"{resume_command(folder)}",
    )


def resume_command(folder: Path) -> str:
    """Return the command that goes on with a run."""
    return f"stackopt search --resume {shlex.quote(str(folder))}"
