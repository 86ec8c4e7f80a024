"""The figure of which layer matters."""

from __future__ import annotations

import os
from pathlib import Path

import numpy as np
from matplotlib.axes import Axes
from matplotlib.figure import Figure

from stackopt.outputs import plot_style as style
from stackopt.outputs.words import wrap_stack
from stackopt.problem import Problem
from stackopt.sensitivity import Sensitivity

MOST_BARS = 16
"""The weakest effects beyond are left out; the table has them all."""


def sensitivity_path(plot: Path, number: int, count: int) -> Path:
    """Name the figure of a stack beside a plot of all.

    Examples
    --------
    >>> sensitivity_path(Path("curves.png"), 1, 1).name, sensitivity_path(Path("curves.svg"), 2, 3).name
    ('curves_sensitivity.png', 'curves_sensitivity_2.svg')
    """
    return plot.with_name(f"{plot.stem}_sensitivity{f'_{number}' if count > 1 else ''}{plot.suffix}")


def write_sensitivity_plot(problem: Problem, found: Sensitivity, path: str | os.PathLike[str]) -> None:
    """Write the figure of `sensitivity_figure`.

    Raises
    ------
    InputError
        When the file cannot be written.
    """
    style.save_figure(sensitivity_figure(problem, found), path)


def sensitivity_figure(problem: Problem, found: Sensitivity) -> Figure:
    """Draw the change of a stack's margin without each layer and over each layer's tolerances, strongest first."""
    effects = found.effects[:MOST_BARS]
    counts = [len(found.left_out), *([len(effects)] if effects else [])]
    stack = "\n".join(wrap_stack(found.stack, 90))
    figure = style.new_figure(9.0, 1.7 + 0.18 * stack.count("\n") + sum(0.9 + 0.3 * count for count in counts))
    figure.suptitle(f"{style.wrapped(f'Which layer matters: {problem.title}', 90)}\n{stack}", fontsize=10)
    panels = np.ravel(figure.subplots(len(counts), 1, squeeze=False, height_ratios=[count + 1.5 for count in counts]))
    _draw_left_out(panels[0], found)
    if effects:
        _draw_effects(panels[1], found)
        handles, labels = panels[1].get_legend_handles_labels()
        figure.legend(handles, labels, loc="outside lower center", fontsize=9, frameon=False, ncols=2)
    return figure


def _draw_left_out(axes: Axes, found: Sensitivity) -> None:
    places = np.arange(len(found.left_out))
    axes.barh(places, [entry.change_db for entry in found.left_out], height=0.6, color=style.COLOURS[0])
    _finish(axes, [f"{entry.layer}: {entry.sheet}" for entry in found.left_out], "without the layer")


def _draw_effects(axes: Axes, found: Sensitivity) -> None:
    effects = found.effects[:MOST_BARS]
    places = np.arange(len(effects))
    ends = (
        ("lower end of the tolerance", [effect.change_down_db for effect in effects], 0, ""),
        ("upper end of the tolerance", [effect.change_up_db for effect in effects], 1, "///"),
    )
    for label, changes, number, hatch in ends:
        colour, offset = style.COLOURS[number], 0.2 * (2 * number - 1)
        axes.barh(
            places + offset,
            changes,
            height=0.36,
            label=label,
            color=colour,
            hatch=hatch,
            edgecolor="white",
            linewidth=0.0,
        )
    _finish(axes, [f"{effect.layer}: {effect.sheet}, {effect.value}" for effect in effects], "over the tolerances")


def _finish(axes: Axes, names: list[str], title: str) -> None:
    axes.set_yticks(np.arange(len(names)), names, fontsize=8)
    axes.invert_yaxis()
    axes.axvline(0.0, color=style.GREY, linewidth=0.8)
    axes.grid(axis="x", color="#e4e4e4", linewidth=0.6)
    axes.set_axisbelow(True)
    axes.set_title(title, fontsize=10, loc="left")
    axes.set_xlabel("change of the smallest margin, dB", fontsize=9)
