"""What long work tells about itself while it goes on."""

from __future__ import annotations

from collections.abc import Callable, Mapping
from dataclasses import dataclass, field


@dataclass(frozen=True)
class Status:
    """State of a running phase.

    Parameters
    ----------
    phase : str
        What is going on, in words: "compiling", "exploring", "proving", "confirming".
    fraction : float or None
        Share done, 0 to 1, or None where it cannot be known.
    rate : str
        Speed in words with its unit, such as "41,000 stacks/s".
    front_size : int
        Stacks on the front so far.
    best : mapping
        Best value so far of each objective, as text with its unit.
    seconds_left : float or None
        Estimated time to the end of the phase.
    margins : mapping
        Largest margin so far for each requirement, dB: of the front, or of the nearest stack while it is empty.
    share_proved : float or None
        Share of all stacks that the proof has settled, 0 to 1, or None where none has begun.
    """

    phase: str
    fraction: float | None = None
    rate: str = ""
    front_size: int = 0
    best: Mapping[str, str] = field(default_factory=dict)
    seconds_left: float | None = None
    margins: Mapping[str, float] = field(default_factory=dict)
    share_proved: float | None = None


Watcher = Callable[[Status], None]
"""Receives every status; called from the main thread, several times a second at most."""
