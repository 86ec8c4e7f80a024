"""Checkpoints: whole or not at all, the two newest kept, the one before where the newest is damaged."""

from __future__ import annotations

import io
import json
import os
import pickle
import subprocess
import sys
from collections.abc import Callable
from hashlib import sha256
from pathlib import Path
from typing import Any
from zipfile import ZipFile

import numpy as np
import pytest
from numpy.typing import NDArray

from stackopt import checkpoint
from stackopt.checkpoint import FORMAT, clean_parts, read_checkpoint, write_checkpoint
from stackopt.errors import RunError

ARRAYS: dict[str, NDArray[Any]] = {
    "values": np.array([[1, 2**62], [-3, 4]]),
    "nothing": np.empty((0, 4), dtype=np.int64),
    "done": np.array([True, False]),
    "level": np.array([0.1, -np.inf, 1e300]),
}
TEXT = {"seed": 7, "extra_hz": [[1e3, 0.1 + 0.2], []], "title": "Müller's shield", "nested": {"seconds": 1.5}}


def names(folder: Path) -> list[str]:
    return sorted(path.name for path in folder.iterdir())


def write_numbers(folder: Path, *numbers: int) -> list[Path]:
    return [write_checkpoint(folder, {"number": np.array([n])}, {"number": n}) for n in numbers]


def number_read(folder: Path) -> tuple[int, list[str]]:
    arrays, text, warnings = read_checkpoint(folder)
    assert arrays["number"].tolist() == [text["number"]]
    return text["number"], warnings


class TestRoundTrip:
    def test_everything_comes_back(self, tmp_path: Path) -> None:
        path = write_checkpoint(tmp_path, ARRAYS, TEXT)
        assert path == tmp_path / "checkpoint-000001.npz"
        arrays, text, warnings = read_checkpoint(tmp_path)
        assert warnings == []
        assert arrays.keys() == ARRAYS.keys()
        for name, array in ARRAYS.items():
            assert arrays[name].dtype == array.dtype
            assert np.array_equal(arrays[name], array)
        assert text == {"format": FORMAT, **TEXT}

    def test_no_arrays(self, tmp_path: Path) -> None:
        write_checkpoint(tmp_path, {}, {})
        assert read_checkpoint(tmp_path) == ({}, {"format": FORMAT}, [])

    def test_is_an_ordinary_npz_file_without_pickle(self, tmp_path: Path) -> None:
        path = write_checkpoint(tmp_path, ARRAYS, TEXT)
        with np.load(path, allow_pickle=False) as stored:
            assert json.loads(stored["text"].tobytes())["title"] == TEXT["title"]
            assert np.array_equal(stored["values"], ARRAYS["values"])


class TestKept:
    def test_the_two_newest(self, tmp_path: Path) -> None:
        for count in range(1, 6):
            write_numbers(tmp_path, count)
            kept = range(max(1, count - 1), count + 1)
            assert names(tmp_path) == [f"checkpoint-{n:06d}.npz" for n in kept]
            assert number_read(tmp_path) == (count, [])

    def test_other_files_are_left_alone(self, tmp_path: Path) -> None:
        others = ["checkpoint-old.npz", "checkpoint-.npz", "front.csv", "checkpoint-000001.npz.bak"]
        for name in others:
            (tmp_path / name).write_text("other")
        write_numbers(tmp_path, 1, 2, 3)
        assert names(tmp_path) == sorted([*others, "checkpoint-000002.npz", "checkpoint-000003.npz"])

    def test_numbers_go_on_beyond_six_digits(self, tmp_path: Path) -> None:
        (tmp_path / "checkpoint-999999.npz").write_bytes(b"")
        write_numbers(tmp_path, 5)
        assert names(tmp_path) == ["checkpoint-1000000.npz", "checkpoint-999999.npz"]
        assert number_read(tmp_path) == (5, [])

    def test_reading_changes_nothing(self, tmp_path: Path) -> None:
        write_numbers(tmp_path, 1, 2, 3)
        before = {path.name: path.read_bytes() for path in tmp_path.iterdir()}
        read_checkpoint(tmp_path)
        assert {path.name: path.read_bytes() for path in tmp_path.iterdir()} == before


def cut(path: Path) -> None:
    path.write_bytes(path.read_bytes()[:-40])


def emptied(path: Path) -> None:
    path.write_bytes(b"")


def changed_bit(path: Path) -> None:
    content = bytearray(path.read_bytes())
    content[len(content) // 2] ^= 1
    path.write_bytes(bytes(content))


def text_instead(path: Path) -> None:
    path.write_text("this is no checkpoint, and longer than a checksum of thirty-two bytes")


def a_folder(path: Path) -> None:
    path.unlink()
    path.mkdir()


DAMAGES = pytest.mark.parametrize("damage", [cut, emptied, changed_bit, text_instead, a_folder])


class TestDamaged:
    @DAMAGES
    def test_newest_damaged(self, tmp_path: Path, damage: Callable[[Path], None]) -> None:
        _, newest = write_numbers(tmp_path, 1, 2)
        damage(newest)
        number, (warning,) = number_read(tmp_path)
        assert number == 1
        assert warning.startswith("checkpoint-000002.npz cannot be used (")
        assert warning.endswith("trying the one before")

    @DAMAGES
    def test_both_damaged(self, tmp_path: Path, damage: Callable[[Path], None]) -> None:
        for path in write_numbers(tmp_path, 1, 2):
            damage(path)
        with pytest.raises(RunError) as caught:
            read_checkpoint(tmp_path)
        message = str(caught.value)
        assert "checkpoint-000001.npz" in message
        assert "checkpoint-000002.npz" in message
        assert "start the search again" in message
        assert caught.value.exit_code == 2

    @pytest.mark.parametrize("position", [0, 10, 100, -33, -32, -1])
    def test_a_single_byte_anywhere(self, tmp_path: Path, position: int) -> None:
        _, newest = write_numbers(tmp_path, 1, 2)
        content = bytearray(newest.read_bytes())
        content[position] ^= 0x10
        newest.write_bytes(bytes(content))
        number, (warning,) = number_read(tmp_path)
        assert number == 1
        assert "checksum" in warning

    def test_another_format(self, tmp_path: Path, monkeypatch: pytest.MonkeyPatch) -> None:
        write_numbers(tmp_path, 1)
        monkeypatch.setattr(checkpoint, "FORMAT", FORMAT + 1)
        write_numbers(tmp_path, 2)
        monkeypatch.undo()
        number, (warning,) = number_read(tmp_path)
        assert number == 1
        assert f"its format is {FORMAT + 1}, this program writes {FORMAT}" in warning

    def test_no_checkpoint(self, tmp_path: Path) -> None:
        with pytest.raises(RunError, match=r"holds no checkpoint that can be read; start the search again"):
            read_checkpoint(tmp_path)


def with_checksum(path: Path, content: bytes) -> None:
    path.write_bytes(content + sha256(content).digest())


class TestHandmade:
    """A right checksum, and a content that this program never wrote."""

    @pytest.mark.parametrize(
        "text", [b"", b"{", b"[]", b"7", b"\xff", b'{"format": "2"}', b'{"format": null}', b"{}", b"[" * 100_000]
    )
    def test_text(self, tmp_path: Path, text: bytes) -> None:
        write_numbers(tmp_path, 1)
        content = io.BytesIO()
        np.savez(content, number=np.array([2]), text=np.frombuffer(text, dtype=np.uint8))
        with_checksum(tmp_path / "checkpoint-000002.npz", content.getvalue())
        number, (warning,) = number_read(tmp_path)
        assert number == 1
        assert warning.startswith("checkpoint-000002.npz cannot be used (")

    def test_no_text(self, tmp_path: Path) -> None:
        write_numbers(tmp_path, 1)
        content = io.BytesIO()
        np.savez(content, number=np.array([2]))
        with_checksum(tmp_path / "checkpoint-000002.npz", content.getvalue())
        assert number_read(tmp_path)[0] == 1

    def test_no_archive(self, tmp_path: Path) -> None:
        write_numbers(tmp_path, 1)
        with_checksum(tmp_path / "checkpoint-000002.npz", b"no archive")
        assert number_read(tmp_path)[0] == 1

    def test_claims_more_than_any_memory(self, tmp_path: Path, monkeypatch: pytest.MonkeyPatch) -> None:
        write_numbers(tmp_path, 1)
        monkeypatch.setattr(checkpoint, "MAX_BYTES", 10_000_000)
        content = io.BytesIO()
        text = np.frombuffer(json.dumps({"format": FORMAT}).encode(), dtype=np.uint8)
        np.savez_compressed(content, number=np.zeros(2_000_000), text=text)
        assert len(content.getvalue()) < 100_000
        with_checksum(tmp_path / "checkpoint-000002.npz", content.getvalue())
        number, (warning,) = number_read(tmp_path)
        assert number == 1
        assert "it claims to hold 0.016 GB" in warning

    def test_an_array_that_lies_about_its_length(self, tmp_path: Path) -> None:
        """The header of an array claims a terabyte; there is none."""
        write_numbers(tmp_path, 1)
        header = io.BytesIO()
        shape = {"descr": "<f8", "fortran_order": False, "shape": (10**14,)}
        np.lib.format.write_array_header_1_0(header, shape)
        text = io.BytesIO()
        np.save(text, np.frombuffer(json.dumps({"format": FORMAT}).encode(), dtype=np.uint8))
        content = io.BytesIO()
        with ZipFile(content, "w") as archive:
            archive.writestr("number.npy", header.getvalue())
            archive.writestr("text.npy", text.getvalue())
        with_checksum(tmp_path / "checkpoint-000002.npz", content.getvalue())
        assert number_read(tmp_path)[0] == 1


class TestParts:
    def test_are_not_read_and_can_be_cleaned(self, tmp_path: Path) -> None:
        write_numbers(tmp_path, 1)
        others = ["front.csv", "notes.part", "checkpoint-000001.npz.bak"]
        for name in ["checkpoint-000002.part", *others]:
            (tmp_path / name).write_text("half")
        assert number_read(tmp_path) == (1, [])
        clean_parts(tmp_path)
        assert names(tmp_path) == sorted(["checkpoint-000001.npz", *others])

    def test_what_cannot_be_removed_stays(self, tmp_path: Path) -> None:
        (tmp_path / "checkpoint-000002.part").mkdir()
        clean_parts(tmp_path)
        assert names(tmp_path) == ["checkpoint-000002.part"]

    def test_a_kill_while_writing_leaves_the_one_before(self, tmp_path: Path) -> None:
        """A real kill in the middle of the content."""
        write_numbers(tmp_path, 1)
        code = (
            "import io, os, sys\n"
            "from pathlib import Path\n"
            "import numpy as np\n"
            "from stackopt import checkpoint\n"
            "plain = os.fsync\n"
            "def killed(handle):\n"
            "    os.truncate(handle, 100)\n"
            "    os.kill(os.getpid(), 9)\n"
            "os.fsync = killed\n"
            "checkpoint.write_checkpoint(Path(sys.argv[1]), {'number': np.array([2])}, {'number': 2})\n"
        )
        done = subprocess.run([sys.executable, "-c", code, str(tmp_path)], check=False)
        assert done.returncode == -9
        assert names(tmp_path) == ["checkpoint-000001.npz", "checkpoint-000002.part"]
        assert number_read(tmp_path) == (1, [])
        write_numbers(tmp_path, 2)
        assert names(tmp_path) == ["checkpoint-000001.npz", "checkpoint-000002.npz"]


def full(handle: int) -> None:
    raise OSError(28, "No space left on device")


class TestNoPickle:
    def test_a_pickle_is_refused(self, tmp_path: Path) -> None:
        """An array of objects with a right checksum: it is not unpickled, the checkpoint before is used."""
        write_numbers(tmp_path, 1)
        content = io.BytesIO()
        entries: dict[str, Any] = {
            "number": np.array([Bomb()], dtype=object),
            "text": np.frombuffer(json.dumps({"format": FORMAT}).encode(), dtype=np.uint8),
        }
        np.savez(content, **entries)
        raw = content.getvalue()
        (tmp_path / "checkpoint-000002.npz").write_bytes(raw + sha256(raw).digest())
        number, (warning,) = number_read(tmp_path)
        assert number == 1
        assert "allow_pickle=False" in warning
        with pytest.raises(RuntimeError, match="was unpickled"):
            pickle.loads(pickle.dumps(Bomb()))


def explode() -> None:
    raise RuntimeError("was unpickled")


class Bomb:
    def __reduce__(self) -> tuple[Callable[[], None], tuple[()]]:
        return explode, ()


class TestCannotBeWritten:
    def test_missing_folder(self, tmp_path: Path) -> None:
        with pytest.raises(RunError, match=r"gone: is gone: it was removed or renamed during the run"):
            write_numbers(tmp_path / "gone", 1)

    def test_something_in_the_way(self, tmp_path: Path) -> None:
        write_numbers(tmp_path, 1, 2)
        (tmp_path / "checkpoint-000003.part").mkdir()
        with pytest.raises(RunError, match="checkpoint-000003"):
            write_numbers(tmp_path, 3)
        assert number_read(tmp_path) == (2, [])

    def test_says_whether_there_is_an_earlier_one(self, tmp_path: Path, monkeypatch: pytest.MonkeyPatch) -> None:
        monkeypatch.setattr("stackopt.checkpoint.os.fsync", full)
        with pytest.raises(RunError, match=r"cannot be written: No space left on device; there is no earlier one"):
            write_numbers(tmp_path, 1)
        assert names(tmp_path) == []

    @pytest.mark.skipif(os.geteuid() == 0, reason="root may write anywhere")
    def test_read_only_folder(self, tmp_path: Path) -> None:
        write_numbers(tmp_path, 1)
        tmp_path.chmod(0o500)
        try:
            with pytest.raises(RunError, match="cannot be written"):
                write_numbers(tmp_path, 2)
            assert number_read(tmp_path) == (1, [])
        finally:
            tmp_path.chmod(0o700)

    def test_a_full_disk(self, tmp_path: Path, monkeypatch: pytest.MonkeyPatch) -> None:
        """The disk fills up while the content is brought to it: the old checkpoints are still there, and whole."""
        write_numbers(tmp_path, 1, 2)
        monkeypatch.setattr("stackopt.checkpoint.os.fsync", full)
        with pytest.raises(RunError, match="No space left on device; earlier checkpoints stand"):
            write_numbers(tmp_path, 3)
        monkeypatch.undo()
        assert names(tmp_path) == ["checkpoint-000001.npz", "checkpoint-000002.npz"]
        assert number_read(tmp_path) == (2, [])
        write_numbers(tmp_path, 3)
        assert number_read(tmp_path) == (3, [])

    def test_the_old_one_goes_last(self, tmp_path: Path, monkeypatch: pytest.MonkeyPatch) -> None:
        """Stopped between writing and removing, there is one checkpoint too many, never one too few."""
        write_numbers(tmp_path, 1, 2)

        def killed(path: Path, missing_ok: bool = False) -> None:
            raise KeyboardInterrupt

        monkeypatch.setattr(Path, "unlink", killed)
        with pytest.raises(KeyboardInterrupt):
            write_numbers(tmp_path, 3)
        monkeypatch.undo()
        assert [name for name in names(tmp_path) if name.endswith(".npz")] == [
            f"checkpoint-{n:06d}.npz" for n in (1, 2, 3)
        ]
        assert number_read(tmp_path) == (3, [])
