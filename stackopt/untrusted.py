"""JSON and texts that a stranger may have written: of any type and size, and with control characters for a terminal."""

from __future__ import annotations

import json
import math
import stat
import unicodedata
from collections.abc import Mapping
from pathlib import Path
from typing import Any

MAX_BYTES = 10_000_000
MAX_CHARACTERS = 500
"""Longest text that is shown."""
MAX_ENTRIES = 100
"""Most entries of a mapping that are shown."""


def read_object(path: Path) -> dict[str, Any]:
    """Read a JSON object from an ordinary file.

    Raises
    ------
    FileNotFoundError
        When there is no such file.
    ValueError
        With a message for the user, when the file is anything else than an object.
    """
    try:
        status = path.stat()
        if not stat.S_ISREG(status.st_mode):  # a pipe would never end
            raise ValueError("it is no ordinary file")
        if status.st_size > MAX_BYTES:
            raise ValueError(f"it has {status.st_size / 1e6:.0f} MB")
        content = json.loads(path.read_bytes())
    except FileNotFoundError:
        raise
    except OSError as error:
        raise ValueError(error.strerror or str(error)) from None
    except RecursionError:
        raise ValueError("its values are nested too deeply") from None
    if not isinstance(content, dict):
        raise ValueError("it does not hold a JSON object")
    return content


def as_text(value: object, longest: int = MAX_CHARACTERS) -> str:
    r"""Return a text that a terminal may show: control and formatting characters escaped, long ones shortened.

    What is no text becomes an empty one.

    Examples
    --------
    >>> print(as_text("red: \x1b[31m"), as_text(3) == "")
    red: \x1b[31m True
    """
    if not isinstance(value, str):
        return ""
    shown = value if len(value) <= longest else value[: longest - 3] + "..."
    return "".join(map(_visible, shown))


def _visible(character: str) -> str:
    if unicodedata.category(character)[0] == "C" or character in "\u2028\u2029":
        return character.encode("unicode_escape").decode("ascii")
    return character


def as_number(value: object, low: float = -math.inf, high: float = math.inf) -> float | None:
    """Return a finite number within limits, None for anything else.

    Examples
    --------
    >>> as_number(0.5, 0, 1), as_number(2, 0, 1), as_number(True), as_number("1"), as_number(math.nan)
    (0.5, None, None, None, None)
    """
    if isinstance(value, bool) or not isinstance(value, int | float):
        return None
    try:
        number = float(value)
    except OverflowError:
        return None
    return number if math.isfinite(number) and low <= number <= high else None


def as_count(value: object) -> int | None:
    """Return a whole number from 0, None for anything else."""
    number = as_number(value, 0.0, 2.0**63)
    return int(number) if number is not None and number.is_integer() else None


def as_texts(value: object) -> dict[str, str]:
    """Return the texts of a mapping by name; what is no text is left out."""
    return {as_text(name): as_text(entry) for name, entry in _entries(value) if isinstance(entry, str)}


def as_numbers(value: object) -> dict[str, float]:
    """Return the finite numbers of a mapping by name; what is no number is left out."""
    numbers = {as_text(name): as_number(entry) for name, entry in _entries(value)}
    return {name: number for name, number in numbers.items() if number is not None}


def _entries(value: object) -> list[tuple[object, object]]:
    return list(value.items())[:MAX_ENTRIES] if isinstance(value, Mapping) else []
