"""The state of a run as the command ``status`` shows it."""

from __future__ import annotations

import io
import json
from dataclasses import replace
from pathlib import Path
from typing import Any

import pytest
from typer.testing import CliRunner

from stackopt.cli import app
from stackopt.lock import Owner, hold
from stackopt.outputs.console import PlainConsole
from stackopt.outputs.run_status import next_command, show_state, state_object
from stackopt.status import Status
from stackopt.watching import STOPPED, RunState, StatusFile

STATUS = Status(
    "proving",
    0.99999,
    "41,000 stacks/s",
    1234,
    {"mass": "1.2 kg/m^2", "cost": "31 EUR/m^2"},
    80.0,
    margins={"coil to sensor": 3.14159, "wave": -0.5},
    share_proved=0.99999,
)
RUNNING = RunState(
    Path("results/night-1"),
    "running",
    title="Divider",
    status=STATUS,
    owner=Owner(4321, "bench", "2026-12-01T21:00:00Z"),
    age_s=1.25,
    checkpoint="checkpoint-000012.npz",
    checkpoint_age_s=17.0,
)
KEYS = {
    "run", "state", "title", "phase", "fraction", "rate", "seconds_left", "front", "best", "margins_db",
    "largest_margin_db", "share_proved", "complete", "statement", "reason", "process", "host", "since_utc", "age_s",
    "checkpoint", "checkpoint_age_s", "next",
}  # fmt: skip


def shown(state: RunState, width: int = 100) -> str:
    stream = io.StringIO()
    show_state(PlainConsole(file=stream, width=width, markup=False, emoji=False, highlight=False), state)
    return stream.getvalue()


def run(*arguments: object) -> Any:
    return CliRunner().invoke(app, [str(argument) for argument in arguments], env={"COLUMNS": "100"})


def test_running() -> None:
    assert shown(RUNNING).splitlines() == [
        "results/night-1: running, proving",
        "  title       Divider",
        "  rate        41,000 stacks/s",
        "  time left   1 min 20 s in this phase",
        "  proved      99.9 % of all stacks",
        "  front       1,234 stacks, least 1.2 kg/m^2, 31 EUR/m^2",
        "  margin      coil to sensor +3.14 dB; wave -0.50 dB",
        "  process     4321 on bench, since 2026-12-01T21:00:00Z",
        "  told        1.2 s ago",
        "  checkpoint  checkpoint-000012.npz, 17 s ago",
        "  next        look again: stackopt status results/night-1; stop with a checkpoint: Ctrl-C in its terminal, "
        "or kill 4321 on bench",
    ]


@pytest.mark.parametrize(
    ("changes", "headline", "command"),
    [
        ({}, "running, proving", "stackopt status results/night-1"),
        ({"status": Status("")}, "running", "stackopt status results/night-1"),
        (
            {"state": "interrupted"},
            "interrupted while proving; it can go on",
            "stackopt search --resume results/night-1",
        ),
        (
            {"state": "dead"},
            "dead while proving: not finished, and no process works on it",
            "stackopt search --resume results/night-1",
        ),
        (
            {"state": "dead", "checkpoint": "", "status": Status("")},
            "dead: not finished, and no process works on it",
            "stackopt search PROBLEM",
        ),
        (
            {"state": "finished", "provable": True},
            "finished, not proved to be complete",
            "stackopt prove results/night-1",
        ),
        ({"state": "finished"}, "finished, not proved to be complete", "stackopt pick results/night-1 --balanced"),
        (
            {"state": "finished", "complete": True, "provable": True},
            "finished, complete",
            "stackopt pick results/night-1 --balanced",
        ),
        (
            {"state": "finished", "complete": True, "status": Status("")},
            "finished, complete",
            "stackopt check PROBLEM",
        ),
    ],
)
def test_what_to_do_next(changes: dict[str, Any], headline: str, command: str) -> None:
    state = replace(RUNNING, **changes)
    assert shown(state).splitlines()[0] == f"results/night-1: {headline}"
    assert next_command(state) == command
    assert command in shown(state).splitlines()[-1]


def test_why_it_died() -> None:
    assert "  ended by    the disk is full" in shown(replace(RUNNING, state="dead", reason="the disk is full"))


def test_all_is_only_said_of_all() -> None:
    assert "proved      100 %" in shown(replace(RUNNING, status=replace(STATUS, share_proved=1.0)))


@pytest.mark.parametrize("width", [40, 80])
def test_fits_the_terminal_but_for_the_command(width: int) -> None:
    state = replace(RUNNING, statement="a statement of several words " * 20, title="word " * 30)
    assert max(len(line) for line in shown(state, width).splitlines()[1:-1]) <= width


def test_unknown_is_null_or_empty() -> None:
    content = state_object(RunState(Path("a"), "dead"))
    assert set(content) == KEYS
    for name in ("fraction", "seconds_left", "largest_margin_db", "share_proved", "process", "age_s"):
        assert content[name] is None
    assert content["checkpoint"] == content["title"] == ""
    assert content["complete"] is False


def test_markup_and_control_characters_show_as_they_are() -> None:
    state = replace(RUNNING, title="[red]x[/red] :smile:", folder=Path("a\x1b[2J"))
    assert "[red]x[/red] :smile:" in shown(state)
    assert "\x1b" not in shown(state)


class TestCommand:
    def test_a_run_at_work(self, tmp_path: Path) -> None:
        with hold(tmp_path, print):
            StatusFile(tmp_path)(STATUS)
            plain, machine = run("status", tmp_path), run("status", tmp_path, "--json")
        assert plain.exit_code == machine.exit_code == 0
        assert "running, proving" in plain.output
        content = json.loads(machine.output)
        assert set(content) == KEYS
        assert content["state"] == "running"
        assert content["margins_db"] == {"coil to sensor": 3.14159, "wave": -0.5}

    def test_the_keys_are_those_of_the_readme(self) -> None:
        text = (Path(__file__).parent.parent / "README.md").read_text(encoding="utf-8")
        table = text.split("| key | meaning |\n|---|---|\n| `run`")[1].split("\n\n")[0]
        named = {word for row in ("| `run`" + table).splitlines() for word in row.split("|")[1].split("`")[1::2]}
        assert named == KEYS

    def test_no_run(self, tmp_path: Path) -> None:
        for arguments in (["status", tmp_path], ["status", tmp_path, "--json"], ["status", tmp_path / "none"]):
            result = run(*arguments)
            assert result.exit_code == 2
            assert "is not a run folder" in result.stderr or "which is no folder" in result.stderr
            assert result.stdout == ""

    def test_an_interrupted_run_whose_name_has_a_space(self, tmp_path: Path) -> None:
        folder = tmp_path / "night one"
        folder.mkdir()
        record = {"stackopt": "0.1.0", "problem": "inputs/a.toml", "input_sha256": "", "seed": 1}
        (folder / "run.json").write_text(json.dumps(record))
        (folder / "checkpoint-000001.npz").touch()
        writer = StatusFile(folder)
        writer(STATUS)
        writer.close(STOPPED)
        assert f"stackopt search --resume '{folder}'" in run("status", folder).output
