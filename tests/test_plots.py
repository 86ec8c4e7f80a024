import dataclasses
import re
import subprocess
import sys
from pathlib import Path

import numpy as np
import pytest
from builders import LOOPS, build_problem
from fronts import STACKS, make_front, many_stacks
from matplotlib.axes import Axes
from matplotlib.figure import Figure
from matplotlib.image import imread
from matplotlib.text import Text

from stackopt.errors import InputError
from stackopt.outputs import material_plots, plot_style, plots
from stackopt.problem import MagneticNearField, Mask, MaterialSet, PlaneWave, Problem, Sheet

PACKAGE = Path(plots.__file__).parents[1]


def texts(figure: Figure) -> str:
    return "\n".join(text.get_text() for text in figure.findobj(Text))


def labels(figure: Figure) -> set[str]:
    return {axes.get_xlabel() for axes in figure.findobj(Axes)} | {axes.get_ylabel() for axes in figure.findobj(Axes)}


def check_nothing_is_cut_off(figure: Figure) -> None:
    """Everything drawn lies inside the picture, and the legend on no axes."""
    figure.canvas.draw()
    drawn, (width, height) = figure.get_tightbbox(), figure.get_size_inches()
    assert drawn.x0 >= -0.01
    assert drawn.y0 >= -0.01
    assert drawn.x1 <= width + 0.01
    assert drawn.y1 <= height + 0.01
    legend = figure.legends[0].get_window_extent()
    for axes in figure.findobj(Axes):
        assert not legend.overlaps(axes.get_window_extent())


def hard_problem() -> Problem:
    """Three requirements: one with 0 Hz, one of a single frequency, one beyond what can be measured."""
    return build_problem(
        LOOPS,
        MagneticNearField(0.05),
        PlaneWave(),
        masks=(Mask((0.0, 10.0, 1e3), (1.0, 1.0, 10.0)), Mask((1.5e5,), (30.0,)), Mask((1e6, 1e9), (80.0, 125.0))),
    )


@pytest.mark.parametrize(
    ("objectives", "panels"),
    [
        (("mass",), 0),
        (("mass", "cost"), 1),
        (("mass", "cost", "thickness"), 3),
        (("mass", "cost", "thickness", "sheets"), 6),
        (("mass", "cost", "thickness", "sheets", "margin"), 10),
    ],
)
def test_a_panel_for_each_pair_of_objectives(objectives: tuple[str, ...], panels: int) -> None:
    figure = plots.trade_off_figure(make_front(build_problem(objectives=objectives)))
    pairs = [axes for axes in figure.findobj(Axes) if axes.axison and axes.get_xlabel() != "frequency"]
    assert len(pairs) == panels
    check_nothing_is_cut_off(figure)


def test_trade_off_tells_units_ends_and_state() -> None:
    front = make_front()
    figure = plots.trade_off_figure(front)
    assert {"mass, kg/m²", "cost, EUR/m²", "thickness, mm", "frequency", "attenuation, dB"} <= labels(figure)
    text = texts(figure)
    for part in ("Invented", "front of 3 stacks, complete, proved", "lightest", "cheapest", "thinnest", "mask"):
        assert part in text
    assert "aluminium 200um / nickel alloy 25um / copper 18um" in text
    unproved = dataclasses.replace(front, complete=False)
    assert "not proved complete" in texts(plots.trade_off_figure(unproved))


def test_curves_differ_in_more_than_colour() -> None:
    styles = [plot_style.line_style(number) for number in range(7)]
    for first in range(7):
        for second in range(first):
            differing = [key for key in styles[0] if styles[first][key] != styles[second][key]]
            assert {"color", "marker"} <= set(differing)


def test_curves_stop_at_120_db_with_a_note() -> None:
    figure = plots.prediction_figure(build_problem(), [(Sheet("steel", 1e-3),) * 4])
    (axes,) = figure.findobj(Axes)
    assert "> 120 dB" in texts(figure)
    assert max(np.max(line.get_ydata()) for line in axes.lines) <= 122.0
    assert max(axes.get_yticks()) == 120.0


def test_no_note_where_everything_can_be_measured() -> None:
    figure = plots.prediction_figure(build_problem(masks=(Mask((1e3, 1e4), (5.0, 9.0)),)), [(Sheet("copper", 35e-6),)])
    assert "> 120 dB" not in texts(figure)


def test_static_field_has_a_place_of_its_own() -> None:
    figure = plots.prediction_figure(hard_problem(), [STACKS[2]])
    figure.canvas.draw()
    axes = figure.findobj(Axes)[0]
    ticks = [label.get_text() for label in axes.get_xticklabels()]
    assert ticks[0] == "0 Hz"
    assert "10 Hz" in ticks
    assert axes.get_xscale() == "log"
    check_nothing_is_cut_off(figure)


def test_long_names_many_stacks_and_odd_masks_stay_inside_the_picture() -> None:
    problem = hard_problem()
    name = "cold rolled strip with a long name that a careful storekeeper wrote"
    materials = {**problem.materials, name: dataclasses.replace(problem.materials["steel"], name=name)}
    problem = dataclasses.replace(problem, materials=materials, title="A title that goes on and on " * 12)
    stacks = [(Sheet(name, 1e-3),) * 6, *many_stacks(9)]
    check_nothing_is_cut_off(plots.prediction_figure(problem, stacks))
    check_nothing_is_cut_off(plots.trade_off_figure(make_front(problem, stacks)))


@pytest.mark.parametrize("count", [0, 1, 200])
def test_fronts_of_any_size_are_drawn(count: int) -> None:
    front = make_front(stacks=many_stacks(count))
    figure = plots.trade_off_figure(front)
    check_nothing_is_cut_off(figure)
    assert ("no stack that meets the mask" in texts(figure)) == (count == 0)


def test_pictures_are_written_at_a_readable_size(tmp_path: Path) -> None:
    plots.write_trade_off(make_front(), tmp_path / "trade_off.png")
    plots.write_prediction_plot(build_problem(), STACKS, tmp_path / "curves.png")
    for name in ("trade_off.png", "curves.png"):
        height, width = imread(tmp_path / name).shape[:2]
        assert width >= 1200
        assert height >= 600
    plots.write_prediction_plot(build_problem(), STACKS[:1], tmp_path / "curves.svg")
    assert "<svg" in (tmp_path / "curves.svg").read_text()
    with pytest.raises(InputError, match="does not exist"):
        plots.write_trade_off(make_front(), tmp_path / "none" / "trade_off.png")


def test_materials_are_drawn_with_permeability_and_skin_depth(tmp_path: Path) -> None:
    known = MaterialSet("Invented sheets", "EUR", build_problem().materials)
    figure = material_plots.material_figure(known)
    check_nothing_is_cut_off(figure)
    text = texts(figure)
    names = set(known.materials) - {"film", "lacquer"}  # these have no curve
    for part in ("permeability", "loss", "skin depth, mm", *names):
        assert part in text
    assert "lacquer" not in text
    only_copper = MaterialSet("Copper", "EUR", {"copper": known.materials["copper"]})
    material_plots.write_material_plot(only_copper, tmp_path / "copper.png")
    assert (tmp_path / "copper.png").stat().st_size > 10_000


def test_only_outputs_draw_and_without_a_window() -> None:
    users = [
        path.relative_to(PACKAGE)
        for path in PACKAGE.rglob("*.py")
        if re.search(r"^\s*(import|from) matplotlib", path.read_text(encoding="utf-8"), re.MULTILINE)
    ]
    assert users
    assert {path.parts[0] for path in users} == {"outputs"}
    code = "import sys, stackopt.outputs.plots; sys.exit('matplotlib.pyplot' in sys.modules)"
    assert subprocess.run([sys.executable, "-c", code], check=False).returncode == 0
