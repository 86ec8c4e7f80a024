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

MAX_FILE_BYTES = 10_000_000
MAX_TOML_CHARACTERS = 1_000_000
"""Some hundred times the longest of the example files; the parser takes seconds for more."""
MAX_DEPTH = 12
"""Tables inside tables that a file may hold; a problem needs five, each sum of permeabilities inside a sum two more."""
MAX_ENTRIES = 10_000
"""In one table or list of a file."""
MAX_FINDINGS = 200
"""Mistakes of one reading that are reported one by one."""
MAX_NAME = 1000
"""Characters of a file name in a file."""
MAX_SHOWN = 60
"""Characters of a key or a word that a message repeats."""
MAX_KNOWN = 30
"""Known words that a message lists."""

_BARE_KEY = re.compile(r"[A-Za-z0-9_-]+")
_DOTTED_KEY = re.compile(r"(?<![A-Za-z0-9_-])(?:(?:[A-Za-z0-9_-]++|\"[^\"\n]*+\"|'[^'\n]*+')[ \t]*+\.[ \t]*+){30}")
_LINE_END = re.compile(r"\r\n|\n|\r")


@dataclass
class Reading:
    """What is gathered while a problem or a material set is read: findings, remarks and the files themselves.

    ``folders`` are those under which tables may lie. Where there is a ``fence``, everything must lie inside it, the
    material set too: it is the folder of a run's copies, and a run may come from a stranger.
    """

    allow_outside: bool = False
    fence: Path | None = None
    folders: list[Path] = field(default_factory=list)
    findings: list[Finding] = field(default_factory=list)
    remarks: list[str] = field(default_factory=list)
    files: list[str] = field(default_factory=list)

    def raise_findings(self) -> None:
        """Raise InputError with everything found, if anything was."""
        findings = list(dict.fromkeys(self.findings))
        if len(findings) > MAX_FINDINGS:
            more = f"{len(findings) - MAX_FINDINGS} more mistakes; correct these first"
            findings[MAX_FINDINGS:] = [Finding("", "", more)]
        if findings:
            raise InputError(findings)

    def check_fence(self, path: Path) -> None:
        """Raise ValueError when a file lies outside the fence, if there is one."""
        if self.fence is not None and not is_inside(path, [self.fence]):
            raise ValueError("lies outside the run's own copies of its inputs; start a new search")

    def read_text(self, path: Path) -> str:
        """Read a file as UTF-8, with or without a byte order mark.

        Raises
        ------
        ValueError
            With a message for the user, when the file cannot be read.
        """
        text = read_text(path)
        self.files.append(_full_name(path))
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
        path = self.beside(text)
        folders = self.reading.folders if self.reading.fence is None else [self.reading.fence]
        if self.reading.allow_outside or is_inside(path, folders):
            return path
        raise ValueError(
            f"found {show(text)}, which lies outside the folders of the problem and of its material set; "
            "copy the table into one of them, or allow files outside"
        )

    def beside(self, text: str) -> Path:
        """Return the path that a file name in this file means, wherever it lies; inside the fence, if there is one.

        Raises
        ------
        ValueError
            When no file can have such a name, or the file lies outside the fence.
        """
        if len(text) > MAX_NAME or any(ord(letter) < 32 for letter in text):
            raise ValueError(f"found {show(text)}, which is no name of a file; name a file")
        path = Path(os.path.normpath(self.path.parent / text))
        fence = self.reading.fence
        if fence is None:
            return path
        if path.is_absolute() and Path(text).is_absolute():
            path = _copy_of(path, fence)
        try:
            self.reading.check_fence(path)
        except ValueError as error:
            raise ValueError(f"found {show(text)}, which {error}") from None
        return path


def is_inside(path: Path, folders: Iterable[Path]) -> bool:
    """Tell whether a path lies in one of the folders once links are followed; unreadable ones do: reading says why."""
    try:
        return any(path.resolve().is_relative_to(folder.resolve()) for folder in folders)
    except (OSError, RuntimeError, ValueError):
        return True


def _copy_of(path: Path, fence: Path) -> Path:
    """Return the copy inside the fence of a file with a full name: copies keep the ends of their originals' paths."""
    parts = path.parts[1:]
    ends = (fence.joinpath(*parts[start:]) for start in range(len(parts)))
    return next((end for end in ends if os.path.isfile(end)), path)


def _full_name(path: Path) -> str:
    """Full name of a file that can be read, links kept: copies of files named so refer to one another as before."""
    plain = os.path.abspath(path)
    try:
        same = os.path.samefile(plain, path)
    except OSError:  # a ".." behind a link to a folder means something else
        same = False
    return plain if same else str(path.resolve())


def read_text(path: Path, most_bytes: int = MAX_FILE_BYTES) -> str:
    """Read a file as UTF-8, with or without a byte order mark.

    Raises
    ------
    ValueError
        With a message for the user, when the file cannot be read.
    """
    try:
        return read_bytes(path, most_bytes).decode("utf-8-sig")
    except UnicodeDecodeError as error:
        line = error.object.count(b"\n", 0, error.start) + 1
        raise ValueError(f"is not UTF-8 text (line {line}); save it as UTF-8") from None


def read_bytes(path: Path, most_bytes: int) -> bytes:
    """Read an ordinary file of a limited size; a larger one is not read at all.

    Raises
    ------
    ValueError
        With a message for the user, when the file cannot be read.
    """
    _check_name(path)
    try:
        if path.is_dir():
            raise ValueError("is a folder; name a file")
        if path.exists() and not path.is_file():
            raise ValueError("is not an ordinary file; name a file")
        size = path.stat().st_size
        if size > most_bytes:
            raise ValueError(f"has {size / 1e6:.0f} MB; files up to {most_bytes / 1e6:.0f} MB are read")
        with path.open("rb") as stream:
            content = stream.read(most_bytes + 1)  # some files of the system do not tell their size
    except FileNotFoundError:
        raise ValueError("does not exist; check the name and the folder") from None
    except PermissionError:
        raise ValueError("may not be read; check its permissions") from None
    except (OSError, RuntimeError) as error:
        reason = getattr(error, "strerror", None) or "the path leads nowhere"
        raise ValueError(f"cannot be read: {reason}") from None
    if len(content) > most_bytes:
        raise ValueError(f"has more than {most_bytes / 1e6:.0f} MB; files up to that are read")
    return content


def _check_name(path: Path) -> None:
    try:
        possible = b"\0" not in os.fsencode(path)
    except UnicodeEncodeError:
        possible = False
    if not possible:
        raise ValueError("has a name that no file can have; check the name")


def lines_of(text: str) -> list[str]:
    """Lines of a text, whichever system it was written on; no other character ends a line."""
    return _LINE_END.split(text)


def parse_toml(text: str) -> dict[str, Any]:
    """Parse TOML.

    Raises
    ------
    ValueError
        With a message for the user that names the line.
    """
    if len(text) > MAX_TOML_CHARACTERS:
        raise ValueError(f"has {len(text)} characters; up to {MAX_TOML_CHARACTERS} are read")
    text = text.replace("\r\n", "\n")
    if "\r" in text:
        line = text.count("\n", 0, text.index("\r")) + 1
        raise ValueError(f"has a carriage return that ends no line (line {line}); save it with plain line ends")
    if _DOTTED_KEY.search(text) is not None:  # the parser's time grows with the square of a key's parts
        raise ValueError(_TOO_DEEP)
    try:
        data = tomllib.loads(text)
    except tomllib.TOMLDecodeError as error:
        raise ValueError(f"is not valid TOML: {_shortened(str(error), 300)}") from None
    except RecursionError:
        raise ValueError(_TOO_DEEP) from None
    except ValueError:  # an integer of thousands of digits
        raise ValueError("holds a number that is too long to read") from None
    if _depth(data) > MAX_DEPTH:
        raise ValueError(f"{_TOO_DEEP} (a sum of sums can be written as one sum)")
    if (longest := _longest(data)) > MAX_ENTRIES:
        raise ValueError(f"holds a table or list of {longest} entries; up to {MAX_ENTRIES} are read")
    return data


_TOO_DEEP = f"nests tables or lists too deeply; up to {MAX_DEPTH} levels are read"


def _depth(data: object) -> int:
    depth, level = 0, [data]
    while level and depth <= MAX_DEPTH:
        level = [child for item in level for child in _entries(item)]
        depth += 1
    return depth


def _longest(data: object) -> int:
    """Entries of the longest table or list; for data of a limited depth."""
    inside = list(_entries(data))
    return max(len(inside), *map(_longest, inside)) if inside else 0


def _entries(item: object) -> Iterable[object]:
    if isinstance(item, dict):
        return item.values()
    return item if isinstance(item, list) else ()


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
            part = _shortened(part, MAX_SHOWN)
            name = part if _BARE_KEY.fullmatch(part) else json.dumps(part, ensure_ascii=not part.isprintable())
            path += f".{name}" if path else name
    return path


def nearest(word: str, known: Iterable[str]) -> str:
    """Return a hint with the nearest known word and the list of all."""
    words = list(known)
    lower = {name.lower(): name for name in words}
    match = difflib.get_close_matches(_shortened(word, MAX_SHOWN).lower(), lower, n=1, cutoff=0.5)
    hint = f"did you mean {lower[match[0]]!r}? " if match else ""
    more = f" and {len(words) - MAX_KNOWN} more" if len(words) > MAX_KNOWN else ""
    shown = ", ".join(_shortened(name, MAX_SHOWN) for name in words[:MAX_KNOWN])
    return f"{hint}Known: {shown}{more}" if words else "none is known"


def _shortened(text: str, most: int) -> str:
    return text if len(text) <= most else f"{text[: most - 3]}..."
