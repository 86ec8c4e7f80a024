"""Attenuation curves and cross-sections of the trade-off page, filled in by its script."""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass, field
from typing import Any

import numpy as np
from bokeh.layouts import gridplot
from bokeh.models import ColumnDataSource, FixedTicker, HoverTool, LayoutDOM, Range1d
from bokeh.plotting import figure

from stackopt.front import Front
from stackopt.outputs.page_data import UNIT_PER_DB, Curves, curves
from stackopt.outputs.page_style import FILLS, HATCHES, TEXT, plain
from stackopt.outputs.plot_style import FrequencyAxis
from stackopt.outputs.words import HIGHEST_DB
from stackopt.problem import Problem, Sheet

CURVE_HEIGHT = 285
SECTION_HEIGHT = 240
_SECTION_PIXELS = 205
"""Height of the cross-sections inside their axes, pixels."""
_MASK: dict[str, Any] = {
    "fill_color": "#e6e6e6",
    "hatch_pattern": "right_diagonal_line",
    "hatch_color": "#9a9a9a",
    "hatch_scale": 10,
    "hatch_weight": 0.7,
}


@dataclass
class Drawn:
    """Figures of the curves, their data for the script, and the sources it fills."""

    layout: LayoutDOM | None = None
    requirements: list[dict[str, Any]] = field(default_factory=list)
    lines: list[ColumnDataSource] = field(default_factory=list)
    dots: list[ColumnDataSource] = field(default_factory=list)


def curve_figures(front: Front, width: int) -> Drawn:
    """Draw the masks of a front's requirements, and pack the curves of all its stacks."""
    drawn = Drawn()
    everything = curves(front)
    across = min(len(everything), 2)
    plots: list[Any] = [_curve_figure(one, width // across, drawn) for one in everything]
    drawn.layout = gridplot(plots, ncols=across, toolbar_location=None)
    return drawn


def _curve_figure(one: Curves, width: int, drawn: Drawn) -> figure:
    axis = FrequencyAxis(one.frequency_hz)
    x = np.where(one.frequency_hz > 0.0, one.frequency_hz, axis.static_at)
    low, high = _range_db(one)
    left, right = axis.limits()
    plot = figure(
        width=width,
        height=CURVE_HEIGHT,
        tools="",
        toolbar_location=None,
        x_axis_type="log",
        x_range=Range1d(start=left, end=right),
        y_range=Range1d(start=low, end=high),
        title=f"{one.requirement}: curves must stay out of the hatched mask",
        name="curves",
    )
    plain(plot)
    ticks = axis.ticks()
    plot.xaxis.ticker = FixedTicker(ticks=ticks)
    plot.xaxis.major_label_overrides = {tick: axis.label(tick) for tick in ticks}
    plot.xaxis.axis_label, plot.yaxis.axis_label = "frequency", "attenuation, dB"
    _draw_mask(plot, one, x, low)
    if high > HIGHEST_DB:
        plot.varea(x=[left, right], y1=HIGHEST_DB, y2=high, fill_color="#eeeeee")
        plot.line([left, right], [HIGHEST_DB, HIGHEST_DB], line_color="#666666")
        middle = [(left * right) ** 0.5]
        plot.text(
            middle,
            [HIGHEST_DB + 9.5],
            text=["> 120 dB: more than can be measured"],
            text_align="center",
            text_baseline="middle",
            text_font_size="11px",
        )
    lines = ColumnDataSource({name: [] for name in ("xs", "ys", "colour", "dash", "rank", "stack")}, name="lines")
    dots = ColumnDataSource({name: [] for name in ("x", "y", "colour", "marker", "size")}, name="dots")
    curve = plot.multi_line("xs", "ys", source=lines, line_color="colour", line_dash="dash", line_width=2)
    plot.scatter("x", "y", source=dots, marker="marker", size="size", fill_color="colour", line_color="white")
    tooltips = [
        ("rank", "@rank"),
        ("stack", "@stack"),
        ("frequency", "$data_x{0.000 a}Hz"),
        ("attenuation", "$data_y{0.0} dB"),
    ]
    plot.add_tools(HoverTool(renderers=[curve], tooltips=tooltips, line_policy="nearest"))
    drawn.requirements.append(
        {"x": [float(f"{value:.7g}") for value in x], "packed": one.packed.ravel(), "has_static": axis.has_static}
    )
    drawn.lines.append(lines)
    drawn.dots.append(dots)
    return plot


def _range_db(one: Curves) -> tuple[float, float]:
    """Range of the attenuation axis that holds every curve and the mask, dB."""
    lowest = min(float(one.packed.min()) / UNIT_PER_DB, float(one.required_db.min()))
    highest = max(float(one.packed.max()) / UNIT_PER_DB, float(one.required_db.max()))
    low = 0.0 if lowest > -1.0 else float(np.floor(lowest / 20.0)) * 20.0
    if highest > HIGHEST_DB:
        return low, HIGHEST_DB + 15.0
    return low, min(float(np.ceil((highest + 3.0) / 10.0)) * 10.0, HIGHEST_DB)


def _draw_mask(plot: figure, one: Curves, x: np.ndarray[Any, Any], low: float) -> None:
    required = np.minimum(one.required_db, HIGHEST_DB + 2.0)
    static = one.frequency_hz == 0.0
    for here in (static, ~static):
        if not np.any(here):
            continue
        ends, level = x[here], required[here]
        if len(ends) == 1:  # a bar for what would be a line without width
            ends, level = ends * np.array([10**-0.1, 10**0.1]), np.repeat(level, 2)
        plot.varea(x=ends, y1=np.full(len(ends), low), y2=level, **_MASK)
        plot.line(ends, level, line_color="black", line_width=2)


@dataclass(frozen=True)
class Section:
    """The figure of the cross-sections and what the script fills."""

    figure: figure
    bars: ColumnDataSource
    names: ColumnDataSource
    leads: ColumnDataSource
    heads: ColumnDataSource

    def args(self) -> dict[str, Any]:
        """What the script calls them."""
        return {
            "section_bars": self.bars,
            "section_names": self.names,
            "section_leads": self.leads,
            "section_heads": self.heads,
            "section_x": self.figure.x_range,
            "section_y": self.figure.y_range,
            "section_pixels": _SECTION_PIXELS,
        }

    @staticmethod
    def layer_args(layers: Sequence[Sheet], problem: Problem) -> dict[str, Any]:
        """Words, thickness and look of the layers, by their numbers; each material has a colour and a hatch."""
        materials = list(dict.fromkeys(layer.material for layer in layers))
        number = [materials.index(layer.material) for layer in layers]
        bond = problem.rules.bond
        return {
            "layer_words": [f"{layer} (bond)" if layer == bond else str(layer) for layer in layers],
            "layer_mm": [float(f"{layer.thickness_m * 1e3:.9g}") for layer in layers],
            "layer_fill": [FILLS[n % len(FILLS)] for n in number],
            "layer_hatch": [HATCHES[n % len(HATCHES)] for n in number],
        }


def cross_sections(width: int) -> Section:
    """Make the figure of the cross-sections, empty."""
    plot = figure(
        width=width,
        height=SECTION_HEIGHT,
        tools="",
        toolbar_location=None,
        x_range=Range1d(start=0, end=4),
        y_range=Range1d(start=1, end=0),
        title="Cross-sections to one scale: source above, victim below",
        name="sections",
    )
    plain(plot)
    plot.xaxis.visible = False
    plot.grid.grid_line_color = None
    plot.yaxis.axis_label = "depth, mm"
    plot.yaxis.bounds = (0.0, 1e6)  # the headings stand above the source face
    bars = ColumnDataSource({name: [] for name in ("left", "right", "top", "bottom", "fill", "hatch")}, name="bars")
    names = ColumnDataSource({name: [] for name in ("x", "y", "text")}, name="names")
    leads = ColumnDataSource({name: [] for name in ("xs", "ys")}, name="leads")
    heads = ColumnDataSource({name: [] for name in ("x", "y", "text", "marker", "colour")}, name="heads")
    plot.quad(
        "left",
        "right",
        "top",
        "bottom",
        source=bars,
        fill_color="fill",
        fill_alpha=0.55,
        line_color="#333333",
        hatch_pattern="hatch",
        hatch_color="#333333",
        hatch_alpha=0.7,
        hatch_scale=8,
        hatch_weight=0.8,
    )
    plot.multi_line("xs", "ys", source=leads, line_color="#888888")
    plot.text("x", "y", text="text", source=names, text_font_size=TEXT, text_baseline="middle")
    plot.text(
        "x",
        "y",
        text="text",
        source=heads,
        x_offset=12,
        text_font_size=TEXT,
        text_font_style="bold",
        text_baseline="middle",
    )
    plot.scatter("x", "y", source=heads, marker="marker", size=11, fill_color="colour", line_color="white")
    return Section(plot, bars, names, leads, heads)
