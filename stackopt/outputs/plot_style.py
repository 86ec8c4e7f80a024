"""What all plots share: colours, markers and line styles, axes of frequency and attenuation, and the file."""

from __future__ import annotations

import os
import textwrap
import warnings
from collections.abc import Iterator
from contextlib import contextmanager
from pathlib import Path
from typing import Any

import numpy as np
from matplotlib.axes import Axes
from matplotlib.axis import XAxis, YAxis
from matplotlib.backends.backend_agg import FigureCanvasAgg
from matplotlib.figure import Figure
from matplotlib.lines import Line2D
from matplotlib.patches import Patch
from matplotlib.text import Text
from matplotlib.ticker import FixedLocator, FuncFormatter, MaxNLocator, NullFormatter, ScalarFormatter
from numpy.typing import NDArray

from stackopt.outputs.files import write_whole
from stackopt.outputs.words import HIGHEST_DB
from stackopt.units import format_frequency

Real = NDArray[np.float64]

COLOURS = ("#0072B2", "#D55E00", "#009E73", "#CC79A7", "#56B4E9", "#E69F00", "#000000")
"""Colours of Okabe and Ito (2008), told apart by people of any colour vision; their yellow is too pale for lines."""
MARKERS = ("o", "s", "^", "D", "v", "P", "X", "<", ">")
LINES: tuple[Any, ...] = ("-", "--", "-.", ":", (0, (5, 1, 1, 1, 1, 1)))
GREY = "#666666"
DOTS_PER_INCH = 150
MASK: dict[str, Any] = {"facecolor": "#e6e6e6", "edgecolor": "#bdbdbd", "hatch": "////", "linewidth": 0.0}
MASK_EDGE: dict[str, Any] = {"color": "#000000", "linewidth": 1.6}
MARKS_PER_CURVE = 8
_BAND_TOP_DB = HIGHEST_DB + 10.0
_INSIDE_BAND_DB = HIGHEST_DB + 2.0
"""Where values beyond the measurable are drawn."""
_STATIC_STEP = 10**0.4
"""How far left of the lowest frequency the marks of 0 Hz stand, as a factor."""


def line_style(number: int) -> dict[str, Any]:
    """Colour, marker and line style of a curve; all three change, so that grey prints can be read."""
    return {
        "color": COLOURS[number % len(COLOURS)],
        "marker": MARKERS[number % len(MARKERS)],
        "linestyle": LINES[number % len(LINES)],
    }


def legend_line(number: int, label: str) -> Line2D:
    """Return the legend entry of a curve."""
    return Line2D([], [], label=label, markersize=6.0, **line_style(number))


def mask_patch() -> Patch:
    """Return the legend entry of a mask."""
    return Patch(label="mask with its margin: attenuation must stay above", **{**MASK, "linewidth": 0.5})


def new_figure(width_in: float, height_in: float) -> Figure:
    """Return an empty figure that is drawn without any window."""
    figure = Figure(figsize=(width_in, height_in), dpi=DOTS_PER_INCH, layout="constrained")
    FigureCanvasAgg(figure)
    return figure


def save_figure(figure: Figure, path: str | os.PathLike[str]) -> None:
    """Write a figure in the format of the file's name, whole or not at all.

    Raises
    ------
    InputError
        When the file cannot be written.
    """
    with users_texts(figure):
        write_whole(Path(path), lambda part: figure.savefig(part, dpi=DOTS_PER_INCH))


@contextmanager
def users_texts(figure: Figure) -> Iterator[None]:
    """Take the texts of a figure as they are while it is drawn.

    Users write currencies and names with dollar signs, which are no formulas, and letters that the font does not have,
    which become boxes.
    """
    for text in figure.findobj(Text):
        text.set_parse_math(False)
    with warnings.catch_warnings():
        warnings.filterwarnings("ignore", "Glyph .* missing from", UserWarning)
        warnings.filterwarnings("ignore", "Matplotlib currently does not support", UserWarning)
        yield


class FrequencyAxis:
    """A log axis of frequency on which 0 Hz, where it occurs, has a place of its own at the left edge.

    Parameters
    ----------
    frequency_hz : ndarray
        Every frequency that the axis must show, Hz.
    """

    def __init__(self, frequency_hz: Real) -> None:
        positive = frequency_hz[frequency_hz > 0.0]
        self.low, self.high = (float(positive.min()), float(positive.max())) if len(positive) else (1.0, 10.0)
        self.has_static = len(positive) < len(frequency_hz)
        self.static_at = self.low / _STATIC_STEP

    def apply(self, axes: Axes) -> None:
        """Give axes their scale, limits, ticks and label."""
        axes.set_xscale("log")
        axes.set_xlim(*self.limits())
        axes.xaxis.set_major_locator(FixedLocator(self.ticks()))
        axes.xaxis.set_major_formatter(FuncFormatter(self.label))
        axes.xaxis.set_minor_locator(FixedLocator(self._minor_ticks()))
        axes.xaxis.set_minor_formatter(NullFormatter())
        axes.set_xlabel("frequency")
        if self.has_static:
            axes.axvline(self.low / _STATIC_STEP**0.5, color=GREY, linewidth=0.8, linestyle=(0, (1, 2)))

    def limits(self) -> tuple[float, float]:
        """Both ends of the axis, Hz."""
        edge = max(self.high / self.low, 1.5) ** 0.03
        left = self.static_at / _STATIC_STEP**0.5 if self.has_static else self.low / edge
        return left, self.high * edge

    def ticks(self) -> list[float]:
        """Where the axis is labelled, 0 Hz at its place included."""
        return [self.static_at, *self._ticks()] if self.has_static else self._ticks()

    def _ticks(self) -> list[float]:
        first, last = np.ceil(np.log10(self.low) - 1e-9), np.floor(np.log10(self.high) + 1e-9)
        decades = [float(10.0**exponent) for exponent in np.arange(first, last + 1.0)]
        if len(decades) < 2:
            return sorted({self.low, self.high})
        return decades[:: 1 + (len(decades) - 1) // 7]

    def _minor_ticks(self) -> list[float]:
        exponents = np.arange(np.floor(np.log10(self.low)), np.ceil(np.log10(self.high)) + 1.0)
        ticks = np.outer(10.0**exponents, np.arange(1.0, 10.0)).ravel()
        return [float(tick) for tick in ticks if self.low <= tick <= self.high]

    def label(self, value: float, _: int | None = None) -> str:
        """Write the frequency that stands at a place of the axis."""
        return "0 Hz" if self.has_static and value < self.low / 1.01 else format_frequency(value)


def draw_curve(axes: Axes, axis: FrequencyAxis, frequency_hz: Real, values: Real, number: int) -> None:
    """Draw curve ``number`` against frequency: a line with a few marks above 0 Hz, a mark of its own at 0 Hz."""
    style, positive = line_style(number), frequency_hz > 0.0
    every = max(1, int(np.count_nonzero(positive)) // MARKS_PER_CURVE)
    first = number * every // 3 % every  # curves that lie on each other still show their own marks
    if np.any(positive):
        x, y = frequency_hz[positive], values[positive]
        axes.plot(x, y, **style, markevery=(first, every), markersize=5.0, linewidth=1.5, zorder=3.0)
    if axis.has_static and np.any(~positive):
        style["linestyle"] = "none"
        axes.plot([axis.static_at], values[~positive], **style, markersize=7.0, zorder=3.0)


def draw_band(axes: Axes, axis: FrequencyAxis, frequency_hz: Real, low: Real, high: Real, number: int) -> None:
    """Shade the band of curve ``number`` over the tolerances: an area above 0 Hz, a bar at 0 Hz."""
    colour, positive = line_style(number)["color"], frequency_hz > 0.0
    if np.any(positive):
        x, bottom, top = frequency_hz[positive], low[positive], high[positive]
        axes.fill_between(x, bottom, top, facecolor=colour, alpha=0.15, linewidth=0.0, zorder=2.0)
    if axis.has_static and np.any(~positive):
        bar = {"color": colour, "alpha": 0.3, "linewidth": 5.0}
        axes.vlines([axis.static_at], low[~positive], high[~positive], **bar, zorder=2.0)


def measurable(attenuation_db: Real) -> Real:
    """Bring values beyond the measurable into the band that stands for them, dB."""
    return np.minimum(attenuation_db, _INSIDE_BAND_DB)


def attenuation_axis(axes: Axes, lowest_db: float, highest_db: float) -> None:
    """Scale an attenuation axis to the given range, dB; what is beyond the measurable becomes a band."""
    axes.set_ylabel("attenuation, dB")
    bottom = 0.0 if lowest_db > -1.0 else float(np.floor(lowest_db / 20.0)) * 20.0
    if highest_db <= HIGHEST_DB:
        axes.set_ylim(bottom, min(float(np.ceil((highest_db + 3.0) / 10.0)) * 10.0, HIGHEST_DB))
        return
    axes.set_ylim(bottom, _BAND_TOP_DB)
    axes.set_yticks(np.arange(bottom, HIGHEST_DB + 1.0, 20.0))
    axes.axhspan(HIGHEST_DB, _BAND_TOP_DB, facecolor="#eeeeee", edgecolor="none", zorder=1.2)
    axes.axhline(HIGHEST_DB, color=GREY, linewidth=0.8, zorder=1.3)
    where = axes.get_yaxis_transform()
    text = "> 120 dB: more than can be measured"
    axes.text(0.5, HIGHEST_DB + 6.0, text, transform=where, ha="center", va="center", fontsize=8, zorder=4.0)


def draw_mask(axes: Axes, axis: FrequencyAxis, frequency_hz: Real, required_db: Real) -> None:
    """Draw a mask as the region that a curve must stay out of."""
    shown, positive = measurable(required_db), frequency_hz > 0.0
    pieces = [(frequency_hz[positive], shown[positive])]
    if axis.has_static and np.any(~positive):
        pieces.append((np.array([axis.static_at]), shown[~positive]))
    for x, y in pieces:
        if len(x) == 1:  # a bar for what would be a line without width
            x, y = x * np.array([_STATIC_STEP**-0.25, _STATIC_STEP**0.25]), np.repeat(y, 2)
        axes.fill_between(x, -1000.0, y, **MASK, zorder=1.0)
        axes.plot(x, y, **MASK_EDGE, zorder=1.5)


def number_axis(axis: XAxis | YAxis, values: Real, whole: bool = False) -> None:
    """Write the ticks of an axis in full, and give a single value room on both sides."""
    axis.set_major_locator(MaxNLocator(nbins=6, steps=[1, 2, 2.5, 5, 10], integer=whole))
    axis.set_major_formatter(ScalarFormatter(useOffset=False))
    if len(values) and np.ptp(values) == 0.0:
        room = max(abs(float(values[0])), 1e-9) / 2.0
        axis.set_view_interval(values[0] - room, values[0] + room, ignore=True)


def wrapped(text: str, width: int, most_lines: int = 3) -> str:
    """Wrap text for a heading, cutting off what would need too many lines."""
    return textwrap.fill(text, width, max_lines=most_lines, placeholder=" ...")
