from __future__ import annotations

import json
import math
import os
from pathlib import Path
from typing import Any

import pytest

from stackopt.untrusted import (
    MAX_BYTES,
    MAX_CHARACTERS,
    as_count,
    as_number,
    as_numbers,
    as_text,
    as_texts,
    read_object,
)

ODD = [None, True, 1, 1.5, math.nan, math.inf, 10**400, "text", b"x", [], {}, object()]


@pytest.mark.parametrize("value", ODD)
def test_any_type_is_taken(value: Any) -> None:
    assert isinstance(as_text(value), str)
    assert as_number(value) is None or math.isfinite(as_number(value) or 0.0)
    assert as_count(value) in (None, 1)
    assert as_texts(value) == {}
    assert as_numbers(value) == {}


def test_texts_are_safe_to_show() -> None:
    odd = "\x1b]0;title\x07 \u202eback\u2066 \x00 \ud800 \u2028 \x9b31m line\nbreak \U000e0041"
    shown = as_text(odd)
    assert shown.isprintable()
    assert r"\x1b]0;title\x07" in shown
    assert shown.encode("utf-8")
    assert as_text("Müller's 0.1 µm Blech") == "Müller's 0.1 µm Blech"
    assert len(as_text("x" * 10_000)) == MAX_CHARACTERS
    assert as_text("x" * 10_000).endswith("...")


def test_mappings_are_made_safe_and_bounded() -> None:
    assert as_texts({"a\n": "b\x1b", "c": 3, 4: "d"}) == {r"a\n": r"b\x1b", "": "d"}
    assert as_numbers({"a": 1, "b": "1", "c": math.nan, "d": None, "e": -2.5}) == {"a": 1.0, "e": -2.5}
    assert len(as_numbers({str(n): n for n in range(10_000)})) <= 100


def test_counts() -> None:
    assert [as_count(value) for value in (0, 7, 7.0, 7.5, -1, 2**70)] == [0, 7, 7, None, None, None]


@pytest.mark.parametrize("content", ["", "{", "[1]", '"a"', "nul", "\xff\xfe", "[" * 100_000, "1" * 5000])
def test_what_is_no_object_says_so(tmp_path: Path, content: str) -> None:
    path = tmp_path / "a.json"
    path.write_bytes(content.encode("latin-1"))
    with pytest.raises(ValueError, match=r"\w"):
        read_object(path)


def test_reads_an_object(tmp_path: Path) -> None:
    (tmp_path / "a.json").write_text(json.dumps({"a": [1, "ü"]}), encoding="utf-8")
    assert read_object(tmp_path / "a.json") == {"a": [1, "ü"]}
    with pytest.raises(FileNotFoundError):
        read_object(tmp_path / "b.json")


def test_odd_files(tmp_path: Path) -> None:
    with pytest.raises(ValueError, match="it is no ordinary file"):
        read_object(tmp_path)
    os.mkfifo(tmp_path / "pipe")
    with pytest.raises(ValueError, match="it is no ordinary file"):
        read_object(tmp_path / "pipe")
    with (tmp_path / "big").open("wb") as stream:
        stream.truncate(MAX_BYTES + 1)
    with pytest.raises(ValueError, match="it has 10 MB"):
        read_object(tmp_path / "big")
