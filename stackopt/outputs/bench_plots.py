"""The plots of the bench: sweeps with their fit and residuals, prototypes against prediction and mask."""

from __future__ import annotations

import os
from collections.abc import Sequence
from dataclasses import dataclass
from typing import Any

import numpy as np
from matplotlib.axes import Axes
from matplotlib.figure import Figure
from matplotlib.lines import Line2D
from matplotlib.patches import Patch
from numpy.typing import NDArray

from stackopt.bench.calibrate import Calibration
from stackopt.bench.compare import Comparison
from stackopt.bench.fit import Fit
from stackopt.outputs import plot_style as style
from stackopt.outputs.words import wrap_stack
from stackopt.readers.sweeps import Sweep
from stackopt.units import format_thickness

Real = NDArray[np.float64]

SMOOTH = 200
"""Points of a fitted curve."""
SHOWN_CAUSES = 2
BAND: dict[str, Any] = {"facecolor": "#cfe3f1", "edgecolor": "#0072B2", "linewidth": 0.6}


@dataclass(frozen=True)
class Curve:
    """One sweep with the curve that belongs to it."""

    label: str
    sweep: Sweep
    curve_hz: Real
    curve_db: Real
    residual_hz: Real
    residual_db: Real


def write_fit_plot(fit: Fit | Calibration, title: str, path: str | os.PathLike[str]) -> None:
    """Write the figure of `fit_figure`.

    Raises
    ------
    InputError
        When the file cannot be written.
    """
    style.save_figure(fit_figure(fit, title), path)


def write_comparison_plot(comparison: Comparison, title: str, path: str | os.PathLike[str]) -> None:
    """Write the figure of `comparison_figure`.

    Raises
    ------
    InputError
        When the file cannot be written.
    """
    style.save_figure(comparison_figure(comparison, title), path)


def fit_figure(fit: Fit | Calibration, title: str) -> Figure:
    """Draw every sweep with its fit, and the residuals below."""
    curves = _curves(fit)
    figure = style.new_figure(8.0, 6.4 + 0.18 * len(curves))
    figure.suptitle(style.wrapped(title, 90), fontsize=11)
    top, bottom = figure.subplots(2, 1, sharex=True, height_ratios=(3.0, 1.3))
    axis = style.FrequencyAxis(np.concatenate([curve.sweep.frequency_hz for curve in curves]))
    values = []
    for number, curve in enumerate(curves):
        look = style.line_style(number)
        _draw_sweep(top, curve.sweep, number)
        top.plot(curve.curve_hz, curve.curve_db, color=look["color"], linestyle=look["linestyle"], linewidth=1.5)
        bottom.plot(
            curve.residual_hz,
            curve.residual_db,
            color=look["color"],
            marker=look["marker"],
            linestyle="",
            markersize=4.0,
        )
        values += [curve.sweep.attenuation_db, curve.curve_db]
    style.attenuation_axis(top, *_span(values))
    _residual_axis(bottom, 2.0 * fit.solution.noise_db, "measured - fit, dB")
    for axes in (top, bottom):
        axis.apply(axes)
        axes.grid(color="#e4e4e4", linewidth=0.6)
    top.set_xlabel("")
    handles = [style.legend_line(number, curve.label) for number, curve in enumerate(curves)]
    figure.legend(handles=[*handles, *_floor_handle([curve.sweep for curve in curves])], loc="outside lower center")
    return figure


def _curves(fit: Fit | Calibration) -> list[Curve]:
    curves = []
    ends = np.cumsum([len(points.frequency_hz) for points in fit.solution.residuals.points])
    residuals = np.split(fit.solution.residual_db, ends[:-1])
    for points, residual in zip(fit.solution.residuals.points, residuals, strict=True):
        entry = points.entry
        dense = np.geomspace(points.frequency_hz[0], points.frequency_hz[-1], SMOOTH)
        sheets = f"{entry.count} x {format_thickness(entry.thickness_m)}"
        label = f"{entry.sweep.name}: {sheets}, marks measured, line fitted"
        curves.append(
            Curve(label, entry.sweep, dense, fit.fitted_db(points, dense), np.array(points.frequency_hz), residual)
        )
    return curves


def _draw_sweep(axes: Axes, sweep: Sweep, number: int) -> None:
    look = style.line_style(number)
    for floored, face in ((False, look["color"]), (True, "none")):
        here = sweep.at_floor == floored
        axes.plot(
            sweep.frequency_hz[here],
            style.measurable(sweep.attenuation_db[here]),
            linestyle="",
            marker=look["marker"],
            markersize=4.5,
            markerfacecolor=face,
            markeredgecolor=look["color"],
            zorder=3.0,
        )


def _floor_handle(sweeps: Sequence[Sweep]) -> list[Line2D]:
    if not any(np.any(sweep.at_floor) for sweep in sweeps):
        return []
    label = "open marks: near the noise floor, a lower bound"
    return [Line2D([], [], linestyle="", marker="o", markerfacecolor="none", markeredgecolor=style.GREY, label=label)]


def _span(values: Sequence[Real]) -> tuple[float, float]:
    every = np.concatenate(list(values))
    return float(every.min()), float(every.max())


def _residual_axis(axes: Axes, expected_db: float, label: str) -> None:
    axes.axhspan(-expected_db, expected_db, facecolor="#eeeeee", edgecolor="none", zorder=0.5)
    axes.axhline(0.0, color=style.GREY, linewidth=0.8, zorder=0.6)
    axes.set_ylabel(label)
    low, high = axes.get_ylim()
    reach = 1.05 * max(abs(low), abs(high), 1.5 * expected_db)
    axes.set_ylim(-reach, reach)
    where = axes.get_yaxis_transform()
    text = f"grey: noise, ±{expected_db:.2g} dB"
    axes.text(0.01, 0.97 * reach, text, transform=where, ha="left", va="top", fontsize=8, color=style.GREY)


def comparison_figure(comparison: Comparison, title: str) -> Figure:
    """Draw a prototype's sweep over prediction, band, mask and likely causes; the difference below."""
    sweep = comparison.sweep
    frequency = sweep.frequency_hz
    figure = style.new_figure(8.0, 7.2)
    stack = "\n".join(wrap_stack(comparison.stack, 90))
    figure.suptitle(f"{style.wrapped(title, 90)}\n{stack}", fontsize=11)
    top, bottom = figure.subplots(2, 1, sharex=True, height_ratios=(3.0, 1.3))
    axis = style.FrequencyAxis(frequency)
    judged = ~np.isnan(comparison.required_db)
    handles: list[Line2D | Patch] = []
    if np.any(judged):
        style.draw_mask(top, axis, frequency[judged], comparison.required_db[judged])
        handles.append(style.mask_patch())
    low, high = (style.measurable(values) for values in (comparison.low_db, comparison.high_db))
    top.fill_between(frequency, low, high, **BAND, zorder=1.8)
    top.plot(frequency, style.measurable(comparison.predicted_db), color=style.COLOURS[0], linewidth=1.5, zorder=2.5)
    _draw_sweep(top, sweep, 1)
    handles += [
        Line2D([], [], color=style.COLOURS[0], label="predicted"),
        Patch(**BAND, label="band of the tolerances"),
        Line2D([], [], color=style.COLOURS[1], marker="s", linestyle="", label=f"measured: {sweep.name}"),
        *_floor_handle([sweep]),
    ]
    for number, cause in enumerate(comparison.causes[:SHOWN_CAUSES], start=2):
        look = {"color": style.COLOURS[number], "linestyle": style.LINES[number - 1], "linewidth": 1.3}
        top.plot(comparison.cause_hz, style.measurable(cause.attenuation_db), **look, zorder=2.6)
        handles.append(Line2D([], [], **look, label=style.wrapped(f"consistent with {cause.words}", 100)))
    style.attenuation_axis(top, *_span([comparison.low_db, comparison.high_db, sweep.attenuation_db]))
    _draw_difference(bottom, comparison)
    for axes in (top, bottom):
        axis.apply(axes)
        axes.grid(color="#e4e4e4", linewidth=0.6)
    top.set_xlabel("")
    figure.legend(handles=handles, loc="outside lower center", fontsize=9)
    return figure


def _draw_difference(axes: Axes, comparison: Comparison) -> None:
    sweep = comparison.sweep
    predicted = comparison.predicted_db
    axes.fill_between(
        sweep.frequency_hz, comparison.low_db - predicted, comparison.high_db - predicted, **BAND, zorder=0.7
    )
    here = ~sweep.at_floor
    axes.plot(
        sweep.frequency_hz[here],
        (sweep.attenuation_db - predicted)[here],
        color=style.COLOURS[1],
        marker="s",
        markersize=4.0,
        linestyle="",
        zorder=3.0,
    )
    _residual_axis(axes, 2.0 * comparison.noise_db, "measured - predicted, dB")
