import io

import pytest

from stackopt.outputs import progress
from stackopt.outputs.console import PlainConsole
from stackopt.outputs.progress import TerminalProgress, status_line
from stackopt.status import Status

FULL = Status(
    "proving", 0.42, "41,000 stacks/s", 1234, {"mass": "1.2 kg/m^2", "cost": "31 EUR/m^2", "margin": "3 dB"}, 80.0
)


@pytest.fixture
def clock(monkeypatch: pytest.MonkeyPatch) -> list[float]:
    """A clock that the test sets."""
    now = [100.0]
    monkeypatch.setattr(progress.time, "monotonic", lambda: now[0])
    return now


def make_console(terminal: bool, width: int = 80) -> tuple[PlainConsole, io.StringIO]:
    stream = io.StringIO()
    console = PlainConsole(file=stream, force_terminal=terminal, width=width, markup=False, highlight=False)
    return console, stream


def test_a_line_tells_everything_with_units() -> None:
    assert status_line(FULL) == (
        "proving: 42 %, 41,000 stacks/s, 1 min 20 s left; "
        "front of 1,234 stacks, least 1.2 kg/m^2, 31 EUR/m^2, largest margin 3 dB"
    )
    assert status_line(Status("compiling")) == "compiling"


def test_plain_lines_come_at_phase_changes_and_at_most_every_five_seconds(clock: list[float]) -> None:
    console, stream = make_console(terminal=False)
    with TerminalProgress(console) as watcher:
        for second in range(12):
            clock[0] = 100.0 + second
            watcher(Status("exploring", second / 12, front_size=second))
        watcher(Status("proving", 0.0))
        clock[0] += 4.0
    lines = stream.getvalue().splitlines()
    assert [line.split(":")[0] for line in lines] == ["exploring"] * 4 + ["proving"] * 2
    assert lines[3] == "exploring: done in 11 s, 11 stacks on the front"
    assert lines[5] == "proving: done in 4.0 s"
    assert "\x1b" not in stream.getvalue()


def test_a_terminal_gets_a_bar_that_goes_away(clock: list[float]) -> None:
    console, stream = make_console(terminal=True)
    with TerminalProgress(console) as watcher:
        watcher(Status("compiling"))
        clock[0] += 2.0
        watcher(FULL)
    text = stream.getvalue()
    for part in ("━", "42 %", "41,000 stacks/s", "1 min 20 s left", "front of 1,234 stacks", "least 1.2 kg/m^2"):
        assert part in text
    assert "compiling: done in 2.0 s" in text
    assert text.index("\x1b[?25l") < text.index("\x1b[?25h")  # the cursor is back


@pytest.mark.parametrize("width", [40, 80])
def test_the_display_fits_the_terminal(width: int, clock: list[float]) -> None:
    console, _ = make_console(terminal=True, width=width)
    watcher = TerminalProgress(console)
    lines = console.render_lines(watcher._display(FULL, 3.0), console.options.update(height=None))
    assert len(lines) <= (2 if width == 80 else 4)


def test_an_interrupted_phase_is_not_called_done(clock: list[float]) -> None:
    console, stream = make_console(terminal=False)

    def work() -> None:
        with TerminalProgress(console) as watcher:
            watcher(Status("exploring"))
            raise KeyboardInterrupt

    with pytest.raises(KeyboardInterrupt):
        work()
    assert stream.getvalue() == "exploring\n"
