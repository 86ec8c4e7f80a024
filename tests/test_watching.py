"""What a run tells while it works, and what is made of it from outside."""

from __future__ import annotations

import itertools
import json
import math
import os
import shutil
import time
from collections.abc import Callable
from pathlib import Path
from typing import Any

import numpy as np
import pytest

from stackopt import watching
from stackopt.errors import RunError
from stackopt.lock import LOCK, hold
from stackopt.status import Status
from stackopt.watching import FAILED, RECORD, STATUS, STOPPED, StatusFile, look, read_record

EXAMPLE = Path(__file__).parent.parent / "results" / "example"
BEGUN = {"stackopt": "0.1.0", "problem": "inputs/a.toml", "input_sha256": "ab", "seed": 7, "title": "Divider"}
ENDED = {
    **BEGUN,
    "finished": True,
    "complete": False,
    "statement": "Not complete.",
    "front": 2,
    "currency": "EUR",
    "margins_db": {"loops": 1.5},
    "proof": {"share_settled": 0.25},
}
FULL = Status(
    "proving", 0.42, "41,000 stacks/s", 12, {"mass": "1.2 kg/m^2"}, 80.0, margins={"loops": 3.5}, share_proved=0.4
)


@pytest.fixture
def clock(monkeypatch: pytest.MonkeyPatch) -> list[float]:
    """The clock of the writer, which the test sets."""
    now = [100.0]
    monkeypatch.setattr(watching.time, "monotonic", lambda: now[0])
    return now


@pytest.fixture
def folder(tmp_path: Path) -> Path:
    write_record(tmp_path, BEGUN)
    return tmp_path


def write_record(folder: Path, record: dict[str, Any]) -> None:
    (folder / RECORD).write_text(json.dumps(record), encoding="utf-8")


def told(folder: Path) -> Any:
    return json.loads((folder / STATUS).read_text(encoding="utf-8"))


class TestWriting:
    def test_everything_with_its_unit(self, folder: Path) -> None:
        StatusFile(folder)(FULL)
        content = told(folder)
        since, until = content.pop("started_utc"), content.pop("updated_utc")
        assert since <= until
        assert content.pop("host")
        assert content == {
            "state": "running",
            "reason": "",
            "phase": "proving",
            "fraction": 0.42,
            "rate": "41,000 stacks/s",
            "front": 12,
            "best": {"mass": "1.2 kg/m^2"},
            "margins_db": {"loops": 3.5},
            "share_proved": 0.4,
            "seconds_left": 80.0,
            "process": os.getpid(),
        }

    def test_at_changes_of_phase_and_every_two_seconds(self, folder: Path, clock: list[float]) -> None:
        write = StatusFile(folder)
        seen = []
        for number in range(50):
            clock[0] = 100.0 + 0.2 * number
            write(Status("exploring" if number < 25 else "proving", rate=str(number)))
            seen.append(int(told(folder)["rate"]))
        assert [number for number, _ in itertools.groupby(seen)] == [0, 10, 20, 25, 35, 45]

    def test_what_a_phase_does_not_know_stays(self, folder: Path) -> None:
        write = StatusFile(folder)
        write(FULL)
        write(Status("confirming"))
        content = told(folder)
        assert content["phase"] == "confirming"
        assert (content["fraction"], content["rate"], content["seconds_left"]) == (None, "", None)
        assert (content["front"], content["best"]) == (12, {"mass": "1.2 kg/m^2"})
        assert (content["margins_db"], content["share_proved"]) == ({"loops": 3.5}, 0.4)
        write(Status("writing", front_size=3))
        assert told(folder)["front"] == 3

    def test_numbers_of_numpy(self, folder: Path) -> None:
        StatusFile(folder)(Status("a", np.float32(0.5), "", np.int64(3), {}, np.float64(2.0)))  # type: ignore[arg-type]
        assert (told(folder)["fraction"], told(folder)["front"], told(folder)["seconds_left"]) == (0.5, 3.0, 2.0)
        assert look(folder).status.front_size == 3

    def test_the_end(self, folder: Path) -> None:
        write = StatusFile(folder)
        write(FULL)
        write.close(FAILED, "the disk is full")
        assert (told(folder)["state"], told(folder)["reason"]) == ("failed", "the disk is full")
        write.remove()
        write.remove()
        assert [path.name for path in folder.iterdir()] == [RECORD]

    def test_never_stops_the_run(self, folder: Path, monkeypatch: pytest.MonkeyPatch) -> None:
        write = StatusFile(folder / "gone")
        write(FULL)
        write.close(STOPPED)
        write.remove()

        def full(*_: object) -> None:
            raise OSError(28, "No space left on device")

        monkeypatch.setattr("stackopt.watching.os.replace", full)
        StatusFile(folder)(FULL)
        assert [path.name for path in folder.iterdir()] == [RECORD]

    def test_a_reader_never_sees_half_a_file(self, folder: Path, monkeypatch: pytest.MonkeyPatch) -> None:
        write = StatusFile(folder)
        write(FULL)
        plain, seen = os.replace, []

        def look_while_writing(source: str, target: Path) -> None:
            seen.append(told(folder)["phase"])
            plain(source, target)

        monkeypatch.setattr("stackopt.watching.os.replace", look_while_writing)
        write(Status("confirming"))
        assert seen == ["proving"]
        assert told(folder)["phase"] == "confirming"


class TestStates:
    def test_running(self, folder: Path) -> None:
        with hold(folder, print):
            assert look(folder).status == Status("starting")
            StatusFile(folder)(FULL)
            state = look(folder)
        assert state.state == "running"
        assert state.title == "Divider"
        assert state.status == FULL
        assert state.owner is not None
        assert state.owner.process == os.getpid()
        assert state.age_s is not None
        assert 0.0 <= state.age_s < 60.0
        assert look(folder).state == "dead"

    def test_so_young_that_nothing_is_there(self, tmp_path: Path) -> None:
        with hold(tmp_path, print):
            assert look(tmp_path).state == "running"
        with pytest.raises(RunError, match=r"is not a run folder: it has no run\.json"):
            look(tmp_path)

    def test_running_again_before_it_has_told_anything(self, folder: Path) -> None:
        """What the process before has told is not taken for news."""
        write = StatusFile(folder)
        write(FULL)
        write.close(STOPPED)
        changed = told(folder) | {"process": os.getpid() + 1}
        (folder / STATUS).write_text(json.dumps(changed))
        with hold(folder, print):
            state = look(folder)
        assert (state.state, state.status, state.age_s) == ("running", Status("starting"), None)

    def test_interrupted(self, folder: Path) -> None:
        write = StatusFile(folder)
        write(FULL)
        write.close(STOPPED)
        assert look(folder).state == "interrupted"
        assert look(folder).status == FULL

    def test_dead(self, folder: Path) -> None:
        assert look(folder).state == "dead"
        StatusFile(folder)(FULL)
        state = look(folder)
        assert (state.state, state.reason) == ("dead", "")
        assert state.owner is not None
        assert state.owner.process == os.getpid()

    def test_failed(self, folder: Path) -> None:
        write = StatusFile(folder)
        write(FULL)
        write.close(FAILED, "the disk is full")
        assert (look(folder).state, look(folder).reason) == ("dead", "the disk is full")

    def test_finished(self, folder: Path) -> None:
        write_record(folder, ENDED)
        (folder / "front.csv").write_text(
            "rank,mass_kg_per_m2,cost_per_m2,thickness_mm,margin_db\n1,1.25,,0.5,0.5\n2,2,,0.25,3\n"
        )
        state = look(folder)
        assert (state.state, state.complete, state.provable) == ("finished", False, True)
        assert state.statement == "Not complete."
        assert state.status.front_size == 2
        assert state.status.best == {"mass": "1.25 kg/m^2", "thickness": "0.25 mm"}
        assert state.status.margins == {"loops": 1.5}
        assert state.status.share_proved == 0.25
        assert state.largest_margin_db == 3.0

    def test_finished_and_then_died_going_on(self, folder: Path) -> None:
        write_record(folder, ENDED)
        StatusFile(folder)(FULL)
        assert look(folder).state == "dead"

    def test_died_over_the_pictures_of_a_finished_run(self, folder: Path) -> None:
        StatusFile(folder)(Status("writing", front_size=2))
        assert look(folder).state == "dead"
        write_record(folder, ENDED)
        assert look(folder).state == "finished"

    def test_the_example(self) -> None:
        state = look(EXAMPLE)
        assert (state.state, state.complete) == ("finished", True)
        assert state.status.front_size == 18
        assert state.status.best["mass"] == "1.144 kg/m^2"
        assert state.checkpoint == ""

    def test_the_newest_checkpoint(self, folder: Path) -> None:
        for name in (
            "checkpoint-999999.npz",
            "checkpoint-1000000.npz",
            "checkpoint-old.npz",
            "checkpoint-1000001.part",
        ):
            (folder / name).touch()
        hour_ago = time.time() - 3600.0
        os.utime(folder / "checkpoint-1000000.npz", (hour_ago, hour_ago))
        state = look(folder)
        assert state.checkpoint == "checkpoint-1000000.npz"
        assert state.checkpoint_age_s == pytest.approx(3600.0, abs=60.0)

    def test_without_locks_there_are_signs_of_life(self, folder: Path, monkeypatch: pytest.MonkeyPatch) -> None:
        monkeypatch.setattr("stackopt.watching.is_held", lambda _: None)
        assert look(folder).state == "dead"
        StatusFile(folder)(FULL)
        assert look(folder).state == "running"
        (folder / STATUS).write_text(json.dumps(told(folder) | {"updated_utc": "2001-01-01T00:00:00Z"}))
        assert look(folder).state == "dead"

    def test_reading_changes_nothing(self, folder: Path) -> None:
        StatusFile(folder)(FULL)
        (folder / LOCK).write_text('{"process": 7, "host": "there", "since_utc": "then"}')
        before = {path.name: path.read_bytes() for path in folder.iterdir()}
        look(folder)
        assert {path.name: path.read_bytes() for path in folder.iterdir()} == before


ODD: list[Any] = [
    None,
    True,
    -1,
    1.5,
    math.nan,
    math.inf,
    10**400,
    "\x1b[2J\n",
    [],
    [[]],
    {},
    {"a": {}},
    {"\x07": "\x1b"},
]


def texts_in(value: Any) -> list[str]:
    """Every text in an object."""
    if isinstance(value, str):
        return [value]
    if isinstance(value, dict):
        return [text for pair in value.items() for entry in pair for text in texts_in(entry)]
    return [text for entry in value for text in texts_in(entry)] if isinstance(value, list) else []


class TestStrangers:
    @pytest.mark.parametrize("value", ODD, ids=lambda value: repr(value)[:20])
    def test_any_value_anywhere(self, folder: Path, value: Any) -> None:
        """Wrong types count as missing, and no text can reach the terminal with control characters."""
        from stackopt.outputs.run_status import state_object

        StatusFile(folder)(FULL)
        good = told(folder)
        for record, key in [(ENDED, key) for key in ENDED] + [(BEGUN, "checkpoint")]:
            self.check(folder, record | {key: value}, good, state_object)
        for key in good:
            self.check(folder, BEGUN, good | {key: value}, state_object)
            self.check(folder, ENDED, {**good, "phase": "writing", key: value}, state_object)
        (folder / LOCK).write_text(json.dumps(dict.fromkeys(("process", "host", "since_utc"), value)))
        self.check(folder, BEGUN, good, state_object)

    @staticmethod
    def check(folder: Path, record: Any, news: Any, convert: Callable[[Any], Any]) -> None:
        write_record(folder, record)
        (folder / STATUS).write_text(json.dumps(news))
        needed = all(isinstance(record[key], type(BEGUN[key])) for key in ("stackopt", "problem", "input_sha256"))
        try:
            state = look(folder)
        except RunError:
            assert not needed or record["problem"] != BEGUN["problem"] or record["seed"] != BEGUN["seed"]
            return
        assert state.state in ("running", "finished", "interrupted", "dead")
        content = convert(state)
        json.dumps(content, allow_nan=False)
        assert all(text.isprintable() for text in texts_in(content))

    @pytest.mark.parametrize("content", [b"", b"{", b"[]", b"7", b"\xff", b"[" * 100_000, b'{"state": "running"'])
    def test_a_status_that_is_no_object(self, folder: Path, content: bytes) -> None:
        (folder / STATUS).write_bytes(content)
        assert look(folder).state == "dead"

    def test_odd_files(self, folder: Path) -> None:
        os.mkfifo(folder / STATUS)
        os.mkfifo(folder / "front.csv")
        (folder / "checkpoint-000001.npz").mkdir()
        (folder / "checkpoint-000002.npz").symlink_to("nowhere")
        assert look(folder).checkpoint == "checkpoint-000002.npz"
        write_record(folder, ENDED)
        (folder / STATUS).unlink()
        assert look(folder).state == "finished"

    @pytest.mark.parametrize("content", [b"", b"\xff\xfe", b"rank\n1,2,3\n", b'mass_kg_per_m2\nnan\n"', b"\x00\n\x00"])
    def test_a_front_that_is_no_table(self, folder: Path, content: bytes) -> None:
        write_record(folder, ENDED)
        (folder / "front.csv").write_bytes(content)
        assert look(folder).status.best == {}

    @pytest.mark.parametrize(
        "problem", [7, None, "", "/etc/passwd", "../problem.toml", "inputs/../../a", "a\0b", "C:\\a.toml", "..\\a"]
    )
    def test_a_record_that_points_elsewhere(self, folder: Path, problem: object) -> None:
        write_record(folder, BEGUN | {"problem": problem})
        with pytest.raises(RunError, match=r"is not the record of a run; start a new search"):
            read_record(folder)

    def test_a_record_that_is_a_pipe(self, tmp_path: Path) -> None:
        os.mkfifo(tmp_path / RECORD)
        with pytest.raises(RunError, match=r"run\.json: cannot be read: it is no ordinary file"):
            look(tmp_path)


def test_no_folder(tmp_path: Path) -> None:
    shutil.copytree(EXAMPLE, tmp_path / "run")
    shutil.rmtree(tmp_path / "run")
    with pytest.raises(RunError, match="is not a run folder"):
        look(tmp_path / "run")
