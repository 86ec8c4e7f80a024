"""A run as others see it: ``status.json``, which its process writes while it works, and what a reader makes of it.

Everything read here may come from a stranger: values of a wrong type count as missing, and texts are made safe to show.
"""

from __future__ import annotations

import contextlib
import csv
import json
import os
import socket
import stat
import tempfile
import time
from collections.abc import Mapping
from dataclasses import dataclass, field, replace
from datetime import UTC, datetime
from pathlib import Path, PurePosixPath
from typing import Any

from stackopt.errors import Finding, RunError
from stackopt.lock import Owner, is_held, now_utc, owner
from stackopt.status import Status
from stackopt.untrusted import as_count, as_number, as_numbers, as_text, as_texts, read_object

RECORD = "run.json"
STATUS = "status.json"
EVERY_S = 2.0
"""Shortest time between two writings of the same phase."""
FRESH_S = 60.0
"""Age up to which the news of a run is taken for a sign of life where the file system knows no locks."""
_MAX_CSV_BYTES = 50_000_000

RUNNING, STOPPED, FAILED = "running", "stopped", "failed"
"""What ``status.json`` says of its process: at work, stopped by the user with a checkpoint, ended by an error."""


class StatusFile:
    """Writes what it is called with into a run folder, now and then; that it cannot never stops the run.

    What a status leaves out (a phase that knows no margins, say) stays as it was told last.
    """

    def __init__(self, folder: Path) -> None:
        self.folder = folder
        self.last = Status("starting")
        self._started_utc = now_utc()
        self._written = -float("inf")

    def __call__(self, status: Status) -> None:
        """Take a status, and write it at a change of phase or when the last one is old enough."""
        changed = status.phase != self.last.phase
        self.last = _carried_over(status, self.last)
        if changed or time.monotonic() - self._written >= EVERY_S:
            self._write(RUNNING)

    def close(self, state: str, reason: str = "") -> None:
        """Write how the process ended: `STOPPED` or `FAILED`, and why."""
        self._write(state, reason)

    def remove(self) -> None:
        """Remove the file: the run is finished, and its record says more."""
        with contextlib.suppress(OSError):
            (self.folder / STATUS).unlink(missing_ok=True)

    def _write(self, state: str, reason: str = "") -> None:
        status = self.last
        content = {
            "state": state,
            "reason": reason,
            "phase": status.phase,
            "fraction": status.fraction,
            "rate": status.rate,
            "front": status.front_size,
            "best": dict(status.best),
            "margins_db": dict(status.margins),
            "share_proved": status.share_proved,
            "seconds_left": status.seconds_left,
            "process": os.getpid(),
            "host": socket.gethostname(),
            "started_utc": self._started_utc,
            "updated_utc": now_utc(),
        }
        self._written = time.monotonic()
        with contextlib.suppress(OSError):
            _replace(self.folder / STATUS, json.dumps(content, ensure_ascii=False, default=float))


def _carried_over(status: Status, last: Status) -> Status:
    return replace(
        status,
        front_size=status.front_size if status.best or status.front_size else last.front_size,
        best=status.best or last.best,
        margins=status.margins or last.margins,
        share_proved=last.share_proved if status.share_proved is None else status.share_proved,
    )


def _replace(path: Path, text: str) -> None:
    """Write a file whole, without waiting for the disk: news of a moment need not survive a power cut."""
    handle, name = tempfile.mkstemp(prefix=".part-status-", dir=path.parent)
    try:
        with open(handle, "w", encoding="utf-8", errors="replace") as stream:
            stream.write(text)
        os.chmod(name, 0o644)
        os.replace(name, path)
    except BaseException:
        with contextlib.suppress(OSError):
            os.unlink(name)
        raise


# Reading --------------------------------------------------------------------------------------------------------------


@dataclass(frozen=True)
class RunState:
    """What can be told of a run from outside; what is unknown is None or empty.

    Parameters
    ----------
    folder : Path
    state : str
        "running", "finished", "interrupted" (stopped by the user with a checkpoint), or "dead" (not finished, and no
        process works on it).
    title : str
    status : Status
        As the process told it last, or the end of a finished run.
    complete : bool
        Whether the front is proved to be complete.
    provable : bool
        Whether there is a proof to go on with.
    statement : str
        What a finished run says of its front.
    reason : str
        Why a dead run ended, where it could say so.
    owner : Owner or None
        The process that works on it, or did.
    age_s : float or None
        Age of the information.
    checkpoint : str
        Name of the newest checkpoint.
    checkpoint_age_s : float or None
    largest_margin_db : float or None
        Of the front of a finished run.
    """

    folder: Path
    state: str
    title: str = ""
    status: Status = field(default_factory=lambda: Status(""))
    complete: bool = False
    provable: bool = False
    statement: str = ""
    reason: str = ""
    owner: Owner | None = None
    age_s: float | None = None
    checkpoint: str = ""
    checkpoint_age_s: float | None = None
    largest_margin_db: float | None = None


def read_record(folder: Path) -> dict[str, Any]:
    """Read a run's run.json.

    Raises
    ------
    RunError
        When the folder is no run, or its record cannot be read.
    """
    path = folder / RECORD
    try:
        record = read_object(path)
    except FileNotFoundError:
        raise RunError(Finding(str(folder), "", f"is not a run folder: it has no {RECORD}")) from None
    except ValueError as error:
        raise RunError(Finding(str(path), "", f"cannot be read: {error}; start a new search")) from None
    texts = all(isinstance(record.get(name), str) for name in ("stackopt", "problem", "input_sha256"))
    if not texts or as_count(record.get("seed")) is None or not _is_inside(record["problem"]):
        raise RunError(Finding(str(path), "", "is not the record of a run; start a new search"))
    return record


def _is_inside(name: str) -> bool:
    """Whether a name is that of a file in the run's folder, on any system."""
    path = PurePosixPath(name.replace("\\", "/"))
    plain = name.isprintable() and path.name and not path.is_absolute() and ".." not in path.parts
    return bool(plain) and ":" not in path.parts[0]


def look(folder: Path) -> RunState:
    """Tell the state of a run, whether its process is alive or not.

    Raises
    ------
    RunError
        When the folder is no run.
    """
    held = is_held(folder)
    try:
        record = read_record(folder)
    except RunError:
        if not held:
            raise
        record = {}  # so young that nothing is written yet
    news = _news(folder)
    age = _age_s(news.get("updated_utc"))
    if held is None:  # no locks here: all there is are signs of life
        held = news.get("state") == RUNNING and age is not None and age < FRESH_S
    name, checkpoint_age = _checkpoint(folder)
    found = RunState(
        folder,
        _state(held, record, news),
        as_text(record.get("title")),
        _told(news),
        record.get("complete") is True,
        isinstance(record.get("proof"), dict),
        as_text(record.get("statement"), 3000),
        as_text(news.get("reason")),
        owner(folder) or _worker(news),
        age,
        name,
        checkpoint_age,
    )
    if found.state == "finished":
        return _ended(found, record)
    if found.state == "running" and found.owner and found.owner.process != as_count(news.get("process")):
        return replace(found, status=Status("starting"), age_s=None, reason="")  # the news is of the one before
    return found


def _state(held: bool, record: Mapping[str, Any], news: Mapping[str, Any]) -> str:
    if held:
        return "running"
    # The record comes before pictures and page, so a run that ended over those is finished.
    if record.get("finished") is True and (not news or news.get("phase") == "writing"):
        return "finished"
    return "interrupted" if news.get("state") == STOPPED else "dead"


def _news(folder: Path) -> dict[str, Any]:
    try:
        return read_object(folder / STATUS)
    except (OSError, ValueError):
        return {}


def _told(news: Mapping[str, Any]) -> Status:
    return Status(
        phase=as_text(news.get("phase"), 80),
        fraction=as_number(news.get("fraction"), 0.0, 1.0),
        rate=as_text(news.get("rate"), 80),
        front_size=as_count(news.get("front")) or 0,
        best=as_texts(news.get("best")),
        seconds_left=as_number(news.get("seconds_left"), 0.0, 1e12),
        margins=as_numbers(news.get("margins_db")),
        share_proved=as_number(news.get("share_proved"), 0.0, 1.0),
    )


def _worker(news: Mapping[str, Any]) -> Owner | None:
    process = as_count(news.get("process"))
    return Owner(process, as_text(news.get("host")), as_text(news.get("started_utc"))) if process else None


def _ended(found: RunState, record: Mapping[str, Any]) -> RunState:
    """Fill in what the record and the front of a finished run tell."""
    proof = record.get("proof")
    share = as_number(proof.get("share_settled"), 0.0, 1.0) if isinstance(proof, dict) else None
    best, margin = _best_of_front(found.folder, as_text(record.get("currency"), 8))
    status = Status(
        "",
        front_size=as_count(record.get("front")) or 0,
        best=best,
        margins=as_numbers(record.get("margins_db")),
        share_proved=share,
    )
    age = _file_age_s(found.folder / RECORD)
    return replace(found, status=status, age_s=age, largest_margin_db=margin, owner=None, reason="")


def _best_of_front(folder: Path, currency: str) -> tuple[dict[str, str], float | None]:
    """Least values of a front's columns as text, and its largest margin."""
    columns = {
        "mass": ("mass_kg_per_m2", "kg/m^2"),
        "cost": ("cost_per_m2", f"{currency}/m^2" if currency else "per m^2"),
        "thickness": ("thickness_mm", "mm"),
    }
    try:
        file = (folder / "front.csv").stat()
        if not stat.S_ISREG(file.st_mode) or file.st_size > _MAX_CSV_BYTES:
            return {}, None
        with (folder / "front.csv").open(encoding="utf-8", newline="") as stream:
            rows = list(csv.DictReader(stream))
    except (OSError, ValueError, csv.Error):
        return {}, None
    found = {name: numbers for name, (column, _) in columns.items() if (numbers := _numbers(rows, column))}
    best = {name: f"{min(numbers):.4g} {columns[name][1]}" for name, numbers in found.items()}
    return best, max(_numbers(rows, "margin_db"), default=None)


def _numbers(rows: list[dict[str, Any]], column: str) -> list[float]:
    numbers = []
    for row in rows:
        with contextlib.suppress(TypeError, ValueError):
            numbers.append(float(row[column]) if column in row else float("nan"))
    return [number for number in numbers if as_number(number) is not None]


def _checkpoint(folder: Path) -> tuple[str, float | None]:
    paths = [path for path in folder.glob("checkpoint-*.npz") if path.stem.removeprefix("checkpoint-").isdecimal()]
    newest = max(paths, key=lambda path: int(path.stem.removeprefix("checkpoint-")), default=None)
    return ("", None) if newest is None else (as_text(newest.name), _file_age_s(newest))


def _file_age_s(path: Path) -> float | None:
    try:
        return max(0.0, time.time() - path.stat().st_mtime)
    except OSError:
        return None


def _age_s(written_utc: object) -> float | None:
    """Seconds since a time as `stackopt.lock.now_utc` writes it; a clock that was set back makes nothing younger."""
    try:
        then = datetime.strptime(as_text(written_utc), "%Y-%m-%dT%H:%M:%SZ").replace(tzinfo=UTC)
    except ValueError:
        return None
    return max(0.0, time.time() - then.timestamp())
