"""The trade-off page: one HTML file on which a front is looked at, narrowed and compared, without any network."""

from __future__ import annotations

import itertools
import math
import os
from dataclasses import dataclass
from importlib.metadata import version
from pathlib import Path
from typing import Any

import numpy as np
from bokeh.document import Document
from bokeh.embed import components
from bokeh.events import DocumentReady
from bokeh.layouts import column, gridplot, row
from bokeh.models import (
    BasicTicker,
    BooleanFilter,
    BoxSelectTool,
    CDSView,
    ColumnDataSource,
    CustomJS,
    DataRange1d,
    HoverTool,
    LayoutDOM,
    TapTool,
)
from bokeh.models.widgets import Button, Div, MultiSelect, RangeSlider
from bokeh.plotting import figure
from bokeh.resources import Resources

from stackopt.choice import QUANTITIES
from stackopt.front import COLUMNS, Front, FrontRow
from stackopt.outputs import page_data
from stackopt.outputs.cautions import cautions
from stackopt.outputs.files import write_whole
from stackopt.outputs.page_curves import Drawn, cross_sections, curve_figures
from stackopt.outputs.page_style import COLOURS, DASHES, MARKERS, SIGNS, SIZES, axis_words, plain
from stackopt.outputs.templating import read_template, render
from stackopt.outputs.words import KNEE, field_words, marked, mask_words, row_margin_words
from stackopt.units import format_frequency

LEFT, RIGHT = 905, 325
"""Widths of the plots and of the controls, pixels; together they fit a window of 1280."""
PAIR_HEIGHT, LOW_PAIR_HEIGHT = 225, 165
"""Of the plots of pairs, pixels: up to three of them, and more."""
WHOLE: dict[str, Any] = {"min_interval": 1.0, "num_minor_ticks": 0}
"""Ticks of whole numbers."""
TABLE_STYLE = """
table { border-collapse: collapse; font-size: 13px; }
th, td { border: 1px solid #bbb; padding: 3px 8px; text-align: left; vertical-align: top; overflow-wrap: anywhere; }
td.number { font-variant-numeric: tabular-nums; }
th .what { font-weight: normal; }
"""


def write_page(front: Front, path: str | os.PathLike[str], run: str = "") -> None:
    """Write the page of a front, whole or not at all.

    Parameters
    ----------
    front : Front
    path : path
        The HTML file.
    run : str
        Name of the run, shown on the page.

    Raises
    ------
    InputError
        When the file cannot be written.
    """
    text = page_html(front, run)
    write_whole(Path(path), lambda part: _write_text(part, text))


def _write_text(path: Path, text: str) -> None:
    path.write_text(text, encoding="utf-8")


def page_html(front: Front, run: str = "") -> str:
    """Return the page of a front as HTML that needs nothing but itself."""
    problem = front.problem
    script, body, resources = "", "", ""
    if front.rows:
        document = Document()
        root = _Page(front).build(document)
        script, body = components(root, wrap_script=True)
        resources = Resources(mode="inline", components=["bokeh", "bokeh-widgets"]).render_js()
    return render(
        "trade_off.html",
        title=problem.title,
        state=_state(front),
        statement=front.statement,
        shapes=_shapes(front),
        body=body,
        script=script,
        bokeh_js=resources,
        problem=_problem_words(front),
        cautions=cautions(problem, [row.stack for row in front.rows] or None),
        foot=f"stackopt {version('stackopt')}" + (f", run {run}" if run else ""),
    )


def _state(front: Front) -> str:
    count = len(front.rows)
    if count == 0:
        return "No stack that meets the mask."
    stacks = "1 stack" if count == 1 else f"{count:,} stacks"
    return f"Front of {stacks}, {'complete, proved.' if front.complete else 'not proved complete.'}"


def _shapes(front: Front) -> str:
    words = ["Circles are stacks of the front, diamonds the best in one objective"]
    if KNEE in marked(front).values():
        words.append("the star is the balanced one (the knee)")
    if front.alternatives:
        words.append("triangles, ranked a1, a2, ..., are alternatives just behind the front")
    return "; ".join(words) + "."


def _problem_words(front: Front) -> list[str]:
    problem = front.problem
    lines = []
    for requirement in problem.requirements:
        lines.append(f"{requirement.name}: {field_words(requirement.field)}; mask {mask_words(requirement.mask)}.")
    rules = problem.rules
    lines.append(f"At most {rules.max_sheets} sheets of {', '.join(problem.use)}.")
    if rules.bond is not None:
        lines.append(f"{rules.bond} between neighbouring sheets; mass, cost and thickness count it.")
    for side, layers in (("source", rules.source_side), ("victim", rules.victim_side)):
        if layers:
            lines.append(f"Fixed on the {side} side and not drawn: {' / '.join(map(str, layers))}.")
    if front.equals:
        lines.append(
            f"{len(front.equals):,} more stacks have exactly the objectives of one of these: front_equals.csv."
        )
    lines.append("Attenuation beyond 120 dB cannot be measured; curves end in a band there.")
    return lines


def _cost_words(row: FrontRow, currency: str) -> str:
    return "no price" if math.isnan(row.cost_per_m2) else f"{row.cost_per_m2:.2f} {currency}/m²"


@dataclass(frozen=True)
class _Controls:
    limits: list[RangeSlider]
    shown: Div
    list: MultiSelect
    chosen: Div
    clear: Button
    save: Button


class _Page:
    """The Bokeh models of one page."""

    def __init__(self, front: Front) -> None:
        self.front = front
        self.labelled = page_data.page_rows(front)
        data = page_data.columns(front)
        data["margin_words"] = [row_margin_words(row, front.problem) for _, row in self.labelled]
        data["cost_words"] = [_cost_words(row, front.problem.currency) for _, row in self.labelled]
        data["tightest_words"] = [format_frequency(row.tightest_hz) for _, row in self.labelled]
        self.stacks = ColumnDataSource(data, name="stacks")
        names = ("index", "style", "rank", "colour", "marker", "size", *page_data.quantities(front))
        self.chosen = ColumnDataSource({name: [] for name in names}, name="chosen")
        self.filter = BooleanFilter(booleans=[True] * len(self.labelled))
        self.view = CDSView(filter=self.filter)

    def build(self, document: Document) -> LayoutDOM:
        """Return the layout, which belongs to the document."""
        controls = self._controls()
        drawn = curve_figures(self.front, LEFT)
        section = cross_sections(LEFT + RIGHT)
        table = Div(text="", width=LEFT + RIGHT, name="table", stylesheets=[TABLE_STYLE])
        draw = self._draw(controls, drawn, section, table)
        narrow = CustomJS(
            args={
                "stacks": self.stacks,
                "limits": controls.limits,
                "filter": self.filter,
                "list": controls.list,
                "shown_words": controls.shown,
            },
            code=read_template("narrow.js"),
        )
        self._connect(controls, draw, narrow)
        root = column(
            row(
                column(self._pairs(), drawn.layout),
                column(
                    *controls.limits, controls.shown, controls.list, controls.chosen, row(controls.clear, controls.save)
                ),
            ),
            section.figure,
            table,
        )
        document.add_root(root)
        first = list(marked(self.front))
        self.stacks.selected.indices = first
        document.js_on_event(
            DocumentReady, CustomJS(args={"draw": draw, "narrow": narrow}, code="narrow.execute(); draw.execute()")
        )
        return root

    def _connect(self, controls: _Controls, draw: CustomJS, narrow: CustomJS) -> None:
        for slider in controls.limits:
            slider.js_on_change("value", narrow)
        self.stacks.selected.js_on_change("indices", draw)
        same = "if (wanted.join() !== [...stacks.selected.indices].join()) stacks.selected.indices = wanted"
        take = f"const wanted = list.value.map(Number); {same}"
        controls.list.js_on_change("value", CustomJS(args={"stacks": self.stacks, "list": controls.list}, code=take))
        controls.clear.js_on_click(CustomJS(args={"stacks": self.stacks}, code="stacks.selected.indices = []"))
        save = CustomJS(args={"stacks": self.stacks, "header": ",".join(COLUMNS)}, code=read_template("save.js"))
        controls.save.js_on_click(save)

    def _draw(self, controls: _Controls, drawn: Drawn, section: Any, table: Div) -> CustomJS:
        distinct, layers_of = page_data.layers(self.front)
        names = page_data.quantities(self.front)
        args = {
            "stacks": self.stacks,
            "chosen": self.chosen,
            "quantities": names,
            "look": {"colours": COLOURS, "markers": MARKERS, "dashes": DASHES, "sizes": SIZES, "signs": SIGNS},
            "requirements": drawn.requirements,
            "per_db": page_data.UNIT_PER_DB,
            "lines": drawn.lines,
            "dots": drawn.dots,
            "layers_of": layers_of,
            **section.layer_args(distinct, self.front.problem),
            **section.args(),
            "table": table,
            "more_quantities": [[name, axis_words(name, "")] for name in names if name not in QUANTITIES],
            "currency": self.front.problem.currency,
            "chosen_words": controls.chosen,
            "list": controls.list,
        }
        return CustomJS(args=args, code=read_template("draw.js"))

    # Plots of pairs ---------------------------------------------------------------------------------------------------

    def _pairs(self) -> LayoutDOM:
        objectives = self.front.problem.search.objectives
        pairs = list(itertools.combinations(objectives, 2)) or [
            (objectives[0], "margin" if objectives != ("margin",) else "mass")
        ]
        across = min(len(pairs), 3 if len(pairs) <= 6 else 5)
        height = PAIR_HEIGHT if len(pairs) <= 3 else LOW_PAIR_HEIGHT
        panels: list[Any] = [self._pair(x, y, LEFT // across, height) for x, y in pairs]
        return gridplot(panels, ncols=across, toolbar_location=None)

    def _pair(self, x: str, y: str, width: int, height: int) -> figure:
        plot = figure(width=width, height=height, tools="", toolbar_location=None, name=f"{x} {y}")
        plain(plot)
        plot.x_range = DataRange1d(range_padding=0.14)
        plot.y_range = DataRange1d(range_padding=0.16)
        plot.xaxis.axis_label = axis_words(x, self.front.problem.currency)
        plot.yaxis.axis_label = axis_words(y, self.front.problem.currency)
        for axis, quantity in ((plot.xaxis, x), (plot.yaxis, y)):
            axis.ticker = BasicTicker(
                desired_num_ticks=4 if width < 250 else 6, **WHOLE if quantity == "sheets" else {}
            )
        points = plot.scatter(
            x,
            y,
            source=self.stacks,
            view=self.view,
            marker="shape",
            size=9 if len(self.labelled) <= 100 else 6,
            fill_color="#c8c8c8",
            line_color="#555555",
            fill_alpha=0.8,
        )
        points.nonselection_glyph = points.selection_glyph = None
        plot.scatter(
            x, y, source=self.chosen, marker="marker", size=13, fill_color="colour", line_color="white", level="overlay"
        )
        plot.text(
            x, y, text="rank", source=self.chosen, x_offset=8, y_offset=-3, text_font_size="12px", level="overlay"
        )
        hover = HoverTool(renderers=[points], tooltips=self._tooltips(), point_policy="follow_mouse")
        tap = TapTool(renderers=[points], mode="xor")
        box = BoxSelectTool(renderers=[points], mode="append")
        plot.add_tools(hover, tap, box)
        plot.toolbar.active_drag = box
        return plot

    def _tooltips(self) -> list[tuple[str, str]]:
        # Texts of users come from columns, which are escaped; in the patterns they would be read as HTML.
        return [
            ("rank", "@rank @what"),
            ("stack", "@stack"),
            ("mass", "@mass{0.000} kg/m²"),
            ("cost", "@cost_words"),
            ("thickness", "@thickness{0.000} mm"),
            ("margin", "@margin_words at @tightest_words"),
        ]

    # Controls ---------------------------------------------------------------------------------------------------------

    def _controls(self) -> _Controls:
        count = len(self.labelled)
        return _Controls(
            limits=self._limits(),
            shown=Div(text=f"{count} stacks", width=RIGHT - 15, name="shown"),
            list=MultiSelect(
                title="Stacks, source side first",
                options=[],
                value=[],
                width=RIGHT - 15,
                size=12,
                name="list",
            ),
            chosen=Div(text="", width=RIGHT - 15, name="count"),
            clear=Button(label="Clear choice", width=120, name="clear"),
            save=Button(label="Save chosen as CSV", width=170, name="save"),
        )

    def _limits(self) -> list[RangeSlider]:
        sliders = []
        for name in page_data.quantities(self.front):
            values = np.asarray(self.stacks.data[name], dtype=float)
            ends = page_data.span(values)
            if ends is None:
                continue
            low, high = ends
            step = 1.0 if name == "sheets" else float(f"{10.0 ** (np.floor(np.log10(high - low)) - 2.0):.3g}")
            digits = max(0, round(-np.log10(step)))
            sliders.append(
                RangeSlider(
                    start=low,
                    end=high,
                    value=(low, high),
                    step=step,
                    format=f"0.{'0' * digits}" if digits else "0",
                    title=axis_words(name, self.front.problem.currency),
                    width=RIGHT - 35,
                    bar_color="#0072B2",
                    name=name,
                    margin=(0, 5, 0, 12),
                )
            )
        return sliders
