"""The state of a run for the terminal and for scripts; light to load, and everything in it is safe to show."""

from __future__ import annotations

import shlex
import textwrap
from collections.abc import Iterator, Mapping
from typing import Any

from rich.console import Console

from stackopt.outputs.progress import duration_words
from stackopt.status import Status
from stackopt.untrusted import as_text
from stackopt.watching import RunState

_INDENT = 14
_MOST_MARGINS = 8


def show_state(console: Console, state: RunState) -> None:
    """Print the state of a run in a few lines."""
    folder = as_text(str(state.folder))
    console.print(f"{folder}: {_headline(state)}", style="bold", soft_wrap=True)
    for what, text in _lines(state):
        if what == "next":  # a command is copied as it is
            console.print(f"  {what:{_INDENT - 2}}{text}", soft_wrap=True)
            continue
        wrapped = textwrap.wrap(
            text, max(console.width - _INDENT, 20), break_long_words=False, break_on_hyphens=False
        ) or [""]
        for number, part in enumerate(wrapped):
            console.print(f"  {what if number == 0 else '':{_INDENT - 2}}{part}", soft_wrap=True)


def state_object(state: RunState) -> dict[str, Any]:
    """Return the state of a run as a JSON object; null is unknown.

    The keys are those of `RunState` and of its status, with `next` for the command to go on with.
    """
    status, owner = state.status, state.owner
    return {
        "run": as_text(str(state.folder)),
        "state": state.state,
        "title": state.title,
        "phase": status.phase,
        "fraction": status.fraction,
        "rate": status.rate,
        "seconds_left": status.seconds_left,
        "front": status.front_size,
        "best": dict(status.best),
        "margins_db": dict(status.margins),
        "largest_margin_db": state.largest_margin_db,
        "share_proved": status.share_proved,
        "complete": state.complete,
        "statement": state.statement,
        "reason": state.reason,
        "process": owner.process if owner else None,
        "host": owner.host if owner else "",
        "since_utc": owner.since_utc if owner else "",
        "age_s": state.age_s,
        "checkpoint": state.checkpoint,
        "checkpoint_age_s": state.checkpoint_age_s,
        "next": next_command(state),
    }


def next_command(state: RunState) -> str:
    """Return the command to go on with.

    Examples
    --------
    >>> from pathlib import Path
    >>> next_command(RunState(Path("results/night 1"), "interrupted", checkpoint="checkpoint-000003.npz"))
    "stackopt search --resume 'results/night 1'"
    """
    run = shlex.quote(str(state.folder))
    if state.state == "running":
        command = f"stackopt status {run}"
    elif state.state != "finished":
        command = f"stackopt search --resume {run}" if state.checkpoint else "stackopt search PROBLEM"
    elif state.provable and not state.complete:
        command = f"stackopt prove {run}"
    else:
        command = f"stackopt pick {run} --balanced" if state.status.front_size else "stackopt check PROBLEM"
    return as_text(command, 5000)


def _headline(state: RunState) -> str:
    if state.state == "running":
        return f"running, {state.status.phase}" if state.status.phase else "running"
    if state.state == "finished":
        return "finished, complete" if state.complete else "finished, not proved to be complete"
    during = f" while {state.status.phase}" if state.status.phase else ""
    if state.state == "interrupted":
        return f"interrupted{during}; it can go on"
    return f"dead{during}: not finished, and no process works on it"


def _lines(state: RunState) -> Iterator[tuple[str, str]]:
    status = state.status
    if state.title:
        yield "title", state.title
    if state.reason:
        yield "ended by", state.reason
    yield from _work(state)
    if status.share_proved is not None:
        yield "proved", f"{_share(status.share_proved)} of all stacks"
    if status.front_size:
        best = ", ".join(text for name, text in status.best.items() if name != "margin")
        yield "front", _stacks(status.front_size) + (f", least {best}" if best else "")
    elif state.state == "finished":
        yield "front", "no stack"
    if (margins := _margins(status, state.largest_margin_db)) is not None:
        yield "margin", margins
    if state.statement:
        yield "statement", state.statement
    yield from _origin(state)
    yield "next", _advice(state)


def _work(state: RunState) -> Iterator[tuple[str, str]]:
    status = state.status
    if state.state == "finished":
        return
    done = "" if status.fraction is None or status.phase == "proving" else f"{_share(status.fraction)} of this phase"
    if text := ", ".join(filter(None, (done, status.rate))):
        yield "rate", text
    if state.state == "running" and status.seconds_left is not None:
        yield "time left", f"{duration_words(status.seconds_left)} in this phase"


def _origin(state: RunState) -> Iterator[tuple[str, str]]:
    owner = state.owner
    if owner is not None:
        since = f", since {owner.since_utc}" if owner.since_utc else ""
        yield "process", f"{owner.process} on {owner.host or 'an unknown machine'}{since}"
    if state.age_s is not None:
        yield "ended" if state.state == "finished" else "told", f"{duration_words(state.age_s)} ago"
    if state.checkpoint:
        age = "" if state.checkpoint_age_s is None else f", {duration_words(state.checkpoint_age_s)} ago"
        yield "checkpoint", f"{state.checkpoint}{age}"
    else:
        yield "checkpoint", "none"


def _advice(state: RunState) -> str:
    command = next_command(state)
    if state.state != "running":
        return command
    stop = f", or kill {state.owner.process} on {state.owner.host}" if state.owner else ""
    return f"look again: {command}; stop with a checkpoint: Ctrl-C in its terminal{stop}"


def _margins(status: Status, largest_db: float | None) -> str | None:
    margins: Mapping[str, float] = status.margins
    if margins:
        shown = [f"{name} {value:+.2f} dB" for name, value in list(margins.items())[:_MOST_MARGINS]]
        more = len(margins) - len(shown)
        return "; ".join(shown) + (f"; and {more} more" if more else "")
    return f"{largest_db:+.2f} dB" if largest_db is not None else None


def _share(share: float) -> str:
    """Write a share so that what is not all never reads as all."""
    return "100 %" if share == 1.0 else f"{min(100.0 * share, 99.9):.1f} %"


def _stacks(count: int) -> str:
    return f"{count:,} stack" if count == 1 else f"{count:,} stacks"
