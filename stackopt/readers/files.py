"""Files to text and TOML, the rule on where they may lie, and the list of findings that a reading gathers."""

from __future__ import annotations

import difflib
import json
import os
import re
import tomllib
from collections.abc import Iterable
from dataclasses import dataclass, field
from pathlib import Path
from typing import Any

from stackopt.errors import Finding, InputError
from stackopt.units import show

MAX_FILE_BYTES = 50_000_000
MAX_DEPTH = 12
"""Tables inside tables that a file may hold; a problem needs five, each sum of permeabilities inside a sum two more."""

_BARE_KEY = re.compile(r"[A-Za-z0-9_-]+")


@dataclass
class Reading:
    """What is gathered while a problem or a material set is read: findings, remarks and the files themselves.

    ``folders`` are those under which tables may lie.
    """

    allow_outside: bool = False
    folders: list[Path] = field(default_factory=list)
    findings: list[Finding] = field(default_factory=list)
    remarks: list[str] = field(default_factory=list)
    files: list[str] = field(default_factory=list)

    def raise_findings(self) -> None:
        """Raise InputError with everything found, if anything was."""
        if self.findings:
            raise InputError(dict.fromkeys(self.findings))

    def read_text(self, path: Path) -> str:
        """Read a file as UTF-8, with or without a byte order mark.

        Raises
        ------
        ValueError
            With a message for the user, when the file cannot be read.
        """
        text = read_text(path)
        self.files.append(str(path.resolve()))
        return text


@dataclass
class Source:
    """One TOML file being read; serves as the context of the structure models.

    ``names`` are the material names that the file may use, None when they are not known.
    """

    path: Path
    reading: Reading
    names: tuple[str, ...] | None = None

    def add(self, key: str, message: str) -> None:
        """Note a mistake at a key path."""
        self.reading.findings.append(Finding(str(self.path), key, message))

    def locate(self, text: str) -> Path:
        """Return the path that a file name in this file means.

        Raises
        ------
        ValueError
            When the file lies outside the folders that are allowed.
        """
        path = Path(os.path.normpath(self.path.parent / text))
        if self.reading.allow_outside:
            return path
        try:
            inside = any(path.resolve().is_relative_to(folder.resolve()) for folder in self.reading.folders)
        except (OSError, RuntimeError, ValueError):
            inside = True  # unreadable; reading it says why
        if not inside:
            raise ValueError(
                f"found {show(text)}, which lies outside the folders of the problem and of its material set; "
                "copy the table into one of them, or allow files outside"
            )
        return path


def read_text(path: Path) -> str:
    """Read a file as UTF-8, with or without a byte order mark.

    Raises
    ------
    ValueError
        With a message for the user, when the file cannot be read.
    """
    try:
        if path.is_dir():
            raise ValueError("is a folder; name a file")
        if path.exists() and not path.is_file():
            raise ValueError("is not an ordinary file; name a file")
        size = path.stat().st_size
        if size > MAX_FILE_BYTES:
            raise ValueError(f"has {size / 1e6:.0f} MB; files up to {MAX_FILE_BYTES / 1e6:.0f} MB are read")
        return path.read_bytes().decode("utf-8-sig")
    except FileNotFoundError:
        raise ValueError("does not exist; check the name and the folder") from None
    except PermissionError:
        raise ValueError("may not be read; check its permissions") from None
    except UnicodeDecodeError as error:
        line = error.object.count(b"\n", 0, error.start) + 1
        raise ValueError(f"is not UTF-8 text (line {line}); save it as UTF-8") from None
    except (OSError, RuntimeError) as error:
        reason = getattr(error, "strerror", None) or "the path leads nowhere"
        raise ValueError(f"cannot be read: {reason}") from None


def parse_toml(text: str) -> dict[str, Any]:
    """Parse TOML.

    Raises
    ------
    ValueError
        With a message for the user that names the line.
    """
    try:
        data = tomllib.loads(text)
    except tomllib.TOMLDecodeError as error:
        raise ValueError(f"is not valid TOML: {error}") from None
    except RecursionError:
        raise ValueError(f"nests tables or lists too deeply; up to {MAX_DEPTH} levels are read") from None
    except ValueError:  # an integer of thousands of digits
        raise ValueError("holds a number that is too long to read") from None
    if _depth(data) > MAX_DEPTH:
        raise ValueError(
            f"nests tables or lists too deeply; up to {MAX_DEPTH} levels are read "
            "(a sum of sums can be written as one sum)"
        )
    return data


def _depth(data: object) -> int:
    depth, level = 0, [data]
    while level and depth <= MAX_DEPTH:
        level = [
            child
            for item in level
            if isinstance(item, dict | list)
            for child in (item.values() if isinstance(item, dict) else item)
        ]
        depth += 1
    return depth


def join_key(prefix: str, parts: Iterable[str | int]) -> str:
    """Write a key path the way TOML does, with entries of lists counted from 1.

    Examples
    --------
    >>> join_key("", ["requirement", 0, "mask"]), join_key("materials", ["acrylic film", "density"])
    ('requirement[1].mask', 'materials."acrylic film".density')
    """
    path = prefix
    for part in parts:
        if isinstance(part, int):
            path += f"[{part + 1}]"
        else:
            name = part if _BARE_KEY.fullmatch(part) else json.dumps(part, ensure_ascii=False)
            path += f".{name}" if path else name
    return path


def nearest(word: str, known: Iterable[str]) -> str:
    """Return a hint with the nearest known word and the list of all."""
    words = list(known)
    lower = {name.lower(): name for name in words}
    match = difflib.get_close_matches(word.lower(), lower, n=1, cutoff=0.5)
    hint = f"did you mean {lower[match[0]]!r}? " if match else ""
    return f"{hint}Known: {', '.join(words)}" if words else "none is known"
