"""The plot of a material set: permeability and skin depth over frequency."""

from __future__ import annotations

import os

import numpy as np
from matplotlib.axes import Axes
from matplotlib.figure import Figure
from numpy.typing import NDArray

from stackopt.outputs import plot_style as style
from stackopt.outputs.materials import LARGEST_DEPTH_M, is_magnetic, permeability, skin_depth_m
from stackopt.outputs.words import length_words
from stackopt.problem import MaterialSet

Real = NDArray[np.float64]
FREQUENCY_HZ = np.logspace(1.0, 9.0, 161)
"""What is drawn, Hz: from below the mains to above 1 GHz masks."""


def write_material_plot(material_set: MaterialSet, path: str | os.PathLike[str]) -> None:
    """Write the figure of `material_figure`.

    Raises
    ------
    InputError
        When the file cannot be written.
    """
    style.save_figure(material_figure(material_set), path)


def material_figure(material_set: MaterialSet) -> Figure:
    """Draw real part and loss of the permeability, and the skin depth, of every material over frequency."""
    materials = list(material_set.materials.values())
    figure = style.new_figure(10.0, max(9.0, 1.5 + 0.3 * len(materials)))
    figure.suptitle(style.wrapped(f"{material_set.title}: materials over frequency", 90), fontsize=11)
    real, loss, depth = np.ravel(figure.subplots(3, 1, sharex=True, squeeze=False))
    axis = style.FrequencyAxis(FREQUENCY_HZ)
    handles = []
    for number, material in enumerate(materials):
        values, depths = permeability(material, FREQUENCY_HZ), skin_depth_m(material, FREQUENCY_HZ)
        magnetic = is_magnetic(material)
        if magnetic:
            _draw(real, axis, values.real, number)
            _draw(loss, axis, -values.imag, number)
        if _draw(depth, axis, np.where(depths <= LARGEST_DEPTH_M, depths * 1e3, np.nan), number) or magnetic:
            handles.append(style.legend_line(number, material.name))
    titles = ("real part of the relative permeability", "loss, minus the imaginary part", "skin depth, mm")
    for axes, title in zip((real, loss, depth), titles, strict=True):
        axis.apply(axes)
        axes.set_yscale("log")
        axes.set_title(title, fontsize=10, loc="left")
        axes.grid(color="#e4e4e4", linewidth=0.6)
        axes.label_outer()
    _floor(real, 0.5)
    _floor(loss, 0.05)
    figure.legend(handles=handles, loc="outside right upper", fontsize=9, frameon=False, handlelength=3.2)
    _explain(figure)
    return figure


def _draw(axes: Axes, axis: style.FrequencyAxis, values: Real, number: int) -> bool:
    """Draw what is positive of a curve; tell whether anything is."""
    shown = np.where(values > 0.0, values, np.nan)
    something = bool(np.any(np.isfinite(shown)))
    if something:
        style.draw_curve(axes, axis, FREQUENCY_HZ, shown, number)
    return something


def _floor(axes: Axes, lowest: float) -> None:
    """Leave out what is too small to matter, and an empty axis its range."""
    low, high = axes.get_ylim()
    axes.set_ylim(max(low, lowest), max(high, 10.0 * lowest))


def _explain(figure: Figure) -> None:
    text = (
        "Non-magnetic materials are left out of the upper two plots, and skin depths beyond "
        f"{length_words(LARGEST_DEPTH_M)} out of the lowest."
    )
    figure.supxlabel(text, fontsize=8)
