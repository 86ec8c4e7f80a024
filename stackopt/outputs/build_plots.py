"""Pictures of a build sheet: attenuation with its tolerance band, and the cross-section to scale."""

from __future__ import annotations

import io
from typing import Any

import numpy as np
from matplotlib.figure import Figure
from matplotlib.patches import Rectangle

from stackopt.build import BuildSheet
from stackopt.outputs import plot_style as style
from stackopt.outputs.words import margin_words
from stackopt.units import format_frequency

BAND: dict[str, Any] = {"facecolor": "#56B4E9", "alpha": 0.35, "linewidth": 0.0}
HATCHES = ("", "///", "...", "---", "\\\\\\", "+++", "|||")
_TEXT_ROWS = 0.19
"""Height of a line of text, inches."""


def svg(figure: Figure) -> str:
    """Return a figure as SVG to be put into a page."""
    import matplotlib as mpl

    content = io.StringIO()
    with style.users_texts(figure), mpl.rc_context({"svg.hashsalt": "stackopt", "svg.fonttype": "path"}):
        figure.savefig(content, format="svg", metadata=dict.fromkeys(("Creator", "Date", "Format", "Type")))
    text = content.getvalue()
    return text[text.index("<svg") :]


def attenuation_figure(sheet: BuildSheet) -> Figure:
    """Draw the attenuation against each mask, the tightest point marked, the tolerance band behind."""
    curves = sheet.prediction.curves
    figure = style.new_figure(7.2, 2.75 * len(curves) + 0.35)
    problem = sheet.front.problem
    handles = [style.legend_line(0, "predicted"), style.mask_patch()]
    for number, axes in enumerate(np.ravel(figure.subplots(len(curves), 1, squeeze=False))):
        curve = curves[number]
        axis = style.FrequencyAxis(curve.frequency_hz)
        style.draw_mask(axes, axis, curve.frequency_hz, curve.required_db)
        everything = [curve.attenuation_db, curve.required_db]
        if sheet.band is not None:
            low, high = sheet.band.low_db[number], sheet.band.high_db[number]
            everything += [low, high]
            x = np.where(sheet.band.frequency_hz[number] > 0.0, sheet.band.frequency_hz[number], axis.static_at)
            axes.fill_between(x, style.measurable(low), style.measurable(high), **BAND, zorder=2.0)
        style.draw_curve(axes, axis, curve.frequency_hz, style.measurable(curve.attenuation_db), 0)
        tightest = int(np.argmin(curve.margin_db))
        at, level = float(curve.frequency_hz[tightest]), float(curve.attenuation_db[tightest])
        words = margin_words(level, float(curve.required_db[tightest]))
        place = at if at > 0.0 else axis.static_at
        axes.plot(
            [place],
            style.measurable(np.array([level])),
            marker="o",
            markersize=11,
            markerfacecolor="none",
            markeredgecolor="black",
            markeredgewidth=1.5,
            linestyle="none",
            zorder=5.0,
        )
        axis.apply(axes)
        style.attenuation_axis(axes, min(map(np.min, everything)), max(map(np.max, everything)))
        axes.grid(color="#e4e4e4", linewidth=0.6)
        axes.set_axisbelow(True)
        name = style.wrapped(problem.requirements[number].name, 50, 1)
        axes.set_title(f"{name}: tightest at {format_frequency(at)} (ring), margin {words}", fontsize=9, loc="left")
    if sheet.band is not None:
        from matplotlib.patches import Patch

        handles.insert(1, Patch(label="over the tolerances", **BAND))
    figure.legend(handles=handles, loc="outside lower center", ncols=3, fontsize=8, frameon=False)
    return figure


def section_figure(sheet: BuildSheet) -> Figure:
    """Draw the layers to scale, source side above, with a line of text for each."""
    layers = sheet.layers
    total_mm = sum(layer.sheet.thickness_m for layer in layers) * 1e3
    height = max(2.0, _TEXT_ROWS * (len(layers) + 3))
    figure = style.new_figure(3.4, height)
    figure.set_layout_engine("none")  # the axes are placed by hand, for the lines of text to fit
    axes = figure.add_axes((0.17, 0.11, 0.82, 0.78))
    axes.set_xlim(0.0, 1.0)
    axes.set_ylim(total_mm, 0.0)
    names = list(dict.fromkeys(layer.sheet.material for layer in layers))
    depth, middles = 0.0, []
    for layer in layers:
        number, thickness = names.index(layer.sheet.material), layer.sheet.thickness_m * 1e3
        axes.add_patch(
            Rectangle(
                (0.02, depth),
                0.26,
                thickness,
                facecolor=_pale(style.COLOURS[number % 7]),
                edgecolor="black",
                linewidth=0.6,
                hatch=HATCHES[number % 7],
            )
        )
        middles.append(depth + thickness / 2.0)
        depth += thickness
    pitch = total_mm * _TEXT_ROWS / (height * 0.78)
    for layer, middle, y in zip(layers, middles, _apart(middles, pitch, total_mm), strict=True):
        axes.plot([0.28, 0.34], [middle, y], color=style.GREY, linewidth=0.7)
        text = f"{layer.sheet} (bond)" if layer.is_bond else str(layer.sheet)
        axes.text(0.36, y, style.wrapped(text, 34, 1), va="center", fontsize=8)
    axes.set_ylabel("depth, mm", fontsize=8)
    axes.tick_params(labelsize=8)
    axes.set_xticks([])
    for side in ("top", "right", "bottom"):
        axes.spines[side].set_visible(False)
    figure.text(0.185, 0.93, "source side", fontsize=9, weight="bold")
    figure.text(0.185, 0.03, "victim side", fontsize=9, weight="bold")
    return figure


def _pale(colour: str) -> tuple[float, float, float]:
    parts = [int(colour[start : start + 2], 16) / 255.0 for start in (1, 3, 5)]
    red, green, blue = (1.0 - 0.45 * (1.0 - part) for part in parts)
    return red, green, blue


def _apart(middles: list[float], pitch: float, total: float) -> list[float]:
    """Move lines of text apart by at least a pitch, keeping their order and inside the picture."""
    rows = list(middles)
    for index in range(1, len(rows)):
        rows[index] = max(rows[index], rows[index - 1] + pitch)
    floor = max(total - pitch / 4.0, (len(rows) - 0.75) * pitch)
    for index in range(len(rows) - 1, -1, -1):
        rows[index] = min(rows[index], floor)
        floor = rows[index] - pitch
    return rows
