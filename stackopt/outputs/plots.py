"""The plots of a problem: trade-off of a front, and curves of chosen stacks."""

from __future__ import annotations

import itertools
import math
import os
from collections.abc import Sequence
from typing import Any

import numpy as np
from matplotlib.axes import Axes
from matplotlib.figure import Figure, SubFigure
from matplotlib.lines import Line2D
from matplotlib.patches import Patch
from numpy.typing import NDArray

from stackopt.band import Band, tolerance_band
from stackopt.front import Front, FrontRow
from stackopt.outputs import plot_style as style
from stackopt.outputs.words import marked, totals_words, where_words, wrap_stack
from stackopt.prediction import Prediction, predict
from stackopt.problem import Problem, Stack

Real = NDArray[np.float64]
SMOOTH = 6
"""Points per decade of a drawn curve over those of the search grid."""
LABEL_WIDTH = 90
"""Characters of a legend line."""
PAIR_WIDTH_IN, CURVES_WIDTH_IN = 4.2, 7.2
_SCALES = {"thickness": 1e3}


def write_trade_off(front: Front, path: str | os.PathLike[str]) -> None:
    """Write the figure of `trade_off_figure`.

    Raises
    ------
    InputError
        When the file cannot be written.
    """
    style.save_figure(trade_off_figure(front), path)


def write_curves(front: Front, path: str | os.PathLike[str]) -> None:
    """Write the figure of `curves_figure`.

    Raises
    ------
    InputError
        When the file cannot be written.
    """
    style.save_figure(curves_figure(front), path)


def write_prediction_plot(problem: Problem, stacks: Sequence[Stack], path: str | os.PathLike[str]) -> None:
    """Write the figure of `prediction_figure`.

    Raises
    ------
    InputError
        When the file cannot be written.
    """
    style.save_figure(prediction_figure(problem, stacks), path)


def trade_off_figure(front: Front) -> Figure:
    """Draw a front: each pair of objectives, and beside them the attenuation of the best stack of each objective.

    Parameters
    ----------
    front : Front
        With a single objective only the curves are drawn.
    """
    problem = front.problem
    pairs = list(itertools.combinations(problem.search.objectives, 2)) if front.rows else []
    best = marked(front)
    labels = [_end_label(front, index, words) for index, words in best.items()]
    columns = min(math.ceil(len(pairs) / 3), 3)
    rows = math.ceil(len(pairs) / max(columns, 1))
    height = max(2.5 * rows, 3.4 * len(problem.requirements), 4.2) + 1.2 + 0.18 * _count_lines(labels)
    figure = style.new_figure(PAIR_WIDTH_IN * columns + CURVES_WIDTH_IN, height)
    figure.suptitle(_heading(front, 50 * columns + 70), fontsize=11)
    curves: Figure | SubFigure = figure
    if pairs:
        widths = [PAIR_WIDTH_IN * columns, CURVES_WIDTH_IN]
        left, curves = np.ravel(figure.subfigures(1, 2, squeeze=False, width_ratios=widths))
        panels = np.ravel(left.subplots(rows, columns, squeeze=False))
        for axes, pair in zip(panels, pairs, strict=False):
            _draw_pair(axes, front, pair, best)
        for axes in panels[len(pairs) :]:
            axes.set_axis_off()
    stacks = [front.rows[index].stack for index in best]
    _draw_requirements(curves, predict(problem, stacks, SMOOTH), problem)
    _legend(figure, labels, ["stacks of the front"] if pairs else [])
    return figure


def curves_figure(front: Front) -> Figure:
    """Draw the attenuation of the best stack of each objective and of the knee, large and for print."""
    problem = front.problem
    best = marked(front)
    labels = [_end_label(front, index, words) for index, words in best.items()]
    figure = style.new_figure(9.0, 4.2 * len(problem.requirements) + 0.8 + 0.18 * _count_lines(labels))
    figure.suptitle(_heading(front, 90), fontsize=11)
    _draw_requirements(figure, predict(problem, [front.rows[index].stack for index in best], SMOOTH), problem)
    _legend(figure, labels)
    return figure


def prediction_figure(problem: Problem, stacks: Sequence[Stack]) -> Figure:
    """Draw the attenuation of stacks over each other, against the mask of each requirement.

    Parameters
    ----------
    problem : Problem
    stacks : sequence of Stack
        Each gets its colour, marker and line style.
    """
    labels = [f"{n}: " + "\n".join(wrap_stack(stack, LABEL_WIDTH)) for n, stack in enumerate(stacks, start=1)]
    height = 3.6 * len(problem.requirements) + 0.8 + 0.18 * _count_lines(labels)
    figure = style.new_figure(9.0, height)
    figure.suptitle(style.wrapped(f"Predicted attenuation: {problem.title}", 90), fontsize=11)
    bands = [tolerance_band(problem, stack) for stack in stacks]
    _draw_requirements(figure, predict(problem, stacks, SMOOTH), problem, bands)
    _legend(figure, labels, shaded=any(bands))
    return figure


def _heading(front: Front, width: int) -> str:
    count = len(front.rows)
    state = "complete, proved" if front.complete else "not proved complete"
    if count == 0:
        return f"{style.wrapped(front.problem.title, width)}\nno stack that meets the mask"
    stacks = "1 stack" if count == 1 else f"{count:,} stacks"
    return f"{style.wrapped(front.problem.title, width)}\nfront of {stacks}, {state}"


def _count_lines(labels: Sequence[str]) -> int:
    return sum(label.count("\n") + 1 for label in labels)


def _draw_pair(axes: Axes, front: Front, pair: tuple[str, str], best: dict[int, str]) -> None:
    x, y = (np.array([row.objective(name) * _SCALES.get(name, 1.0) for row in front.rows]) for name in pair)
    size = 26.0 if len(x) <= 60 else 12.0
    axes.scatter(x, y, s=size, facecolor="#bbbbbb", edgecolor=style.GREY, linewidth=0.6, zorder=2.0)
    for number, index in enumerate(best):
        look = style.line_style(number) | {"linestyle": "none", "markeredgecolor": "white", "markeredgewidth": 0.8}
        size = max(12.0 - 1.0 * number, 8.0)  # ends close to each other stay visible
        axes.plot(x[index], y[index], **look, markersize=size, zorder=3.0 + number)
    axes.set_xlabel(_axis_label(pair[0], front.problem.currency))
    axes.set_ylabel(_axis_label(pair[1], front.problem.currency))
    axes.grid(color="#e4e4e4", linewidth=0.6)
    axes.set_axisbelow(True)
    axes.margins(0.08)
    for values, axis, name in ((x, axes.xaxis, pair[0]), (y, axes.yaxis, pair[1])):
        style.number_axis(axis, values, whole=name == "sheets")


def _axis_label(objective: str, currency: str) -> str:
    units = {"mass": "kg/m²", "cost": f"{currency}/m²", "thickness": "mm", "margin": "dB"}
    return f"{objective}, {units[objective]}" if objective in units else objective


def _end_label(front: Front, index: int, words: str) -> str:
    row: FrontRow = front.rows[index]
    stack = "\n".join(wrap_stack(row.stack, LABEL_WIDTH))
    totals = totals_words(row, front.problem.currency).replace("m^2", "m²")
    where = where_words(row, front.problem)
    return f"{words} (rank {index + 1}): {totals}, margin {row.margin_db:+.2f} dB {where}\n{stack}"


def _draw_requirements(
    figure: Figure | SubFigure,
    predictions: Sequence[Prediction],
    problem: Problem,
    bands: Sequence[Band | None] = (),
) -> None:
    """Draw the curves of all predictions, and bands, into one set of axes for each requirement, below each other."""
    count = len(problem.requirements)
    for number, axes in enumerate(np.ravel(figure.subplots(count, 1, squeeze=False))):
        requirement = problem.requirements[number]
        grid = requirement.mask.grid_hz(SMOOTH)
        axis = style.FrequencyAxis(grid)
        required = requirement.mask.required_db(grid)
        curves = [prediction.curves[number].attenuation_db for prediction in predictions]
        shades = {
            index: _smooth_band(band, number, grid, curves[index])
            for index, band in enumerate(bands)
            if band is not None
        }
        everything = np.concatenate([required, *curves, *(end for ends in shades.values() for end in ends)])
        style.draw_mask(axes, axis, grid, required)
        for index, (low, high) in shades.items():
            style.draw_band(axes, axis, grid, style.measurable(low), style.measurable(high), index)
        for index, attenuation in enumerate(curves):
            style.draw_curve(axes, axis, grid, style.measurable(attenuation), index)
        axis.apply(axes)
        style.attenuation_axis(axes, float(everything.min()), float(everything.max()))
        axes.grid(color="#e4e4e4", linewidth=0.6)
        axes.set_axisbelow(True)
        axes.set_title(style.wrapped(f"{requirement.name} ({requirement.field.kind})", 70), fontsize=10, loc="left")


def _smooth_band(band: Band, number: int, grid: Real, attenuation_db: Real) -> tuple[Real, Real]:
    """Bring a band from the search grid to the grid of a curve: its distance from the curve is what is smooth."""
    place, known = (np.log10(np.maximum(hz, 1e-3)) for hz in (grid, band.frequency_hz[number]))
    nominal = np.interp(known, place, attenuation_db)
    low, high = (np.interp(place, known, end[number] - nominal) for end in (band.low_db, band.high_db))
    return attenuation_db + np.minimum(low, 0.0), attenuation_db + np.maximum(high, 0.0)


def _legend(figure: Figure, labels: Sequence[str], points: Sequence[str] = (), shaded: bool = False) -> None:
    """Put the legend below everything, where it covers nothing."""
    dot: dict[str, Any] = {
        "marker": "o",
        "linestyle": "none",
        "markerfacecolor": "#bbbbbb",
        "markeredgecolor": style.GREY,
    }
    handles: list[Line2D | Patch] = [style.legend_line(number, label) for number, label in enumerate(labels)]
    handles += [Line2D([], [], label=label, **dot) for label in points]
    if shaded:
        handles.append(Patch(label="shaded: corners of the tolerances", facecolor=style.GREY, alpha=0.25))
    figure.legend(
        handles=[*handles, style.mask_patch()], loc="outside lower center", fontsize=9, frameon=False, handlelength=3.0
    )
