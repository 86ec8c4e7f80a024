"""Look of the trade-off page: the plots' colours and markers in Bokeh's words, plain axes."""

from __future__ import annotations

from bokeh.models.annotations import Title
from bokeh.plotting import figure

from stackopt.outputs.plot_style import COLOURS as ALL_COLOURS

COLOURS = list(ALL_COLOURS[:6])
"""One for each stack that can be drawn at a time."""
MARKERS = ["circle", "square", "triangle", "diamond", "inverted_triangle", "hex"]
SIZES = [12, 12, 13, 17, 13, 14]
"""Of the markers, pixels, so that all look equally large."""
SIGNS = ["●", "■", "▲", "◆", "▼", "⬢"]
"""The markers as characters, for the table."""
DASHES = [[], [8, 3], [10, 3, 2, 3], [2, 2], [12, 3, 2, 3, 2, 3], [4, 4]]
FILLS = list(ALL_COLOURS)
HATCHES = ["blank", "right_diagonal_line", "dot", "horizontal_line", "left_diagonal_line", "cross", "vertical_line"]
TEXT = "12px"
_UNITS = {"mass": "kg/m²", "thickness": "mm", "margin": "dB", "heat": "W"}


def axis_words(quantity: str, currency: str) -> str:
    """Write a quantity with its unit.

    Examples
    --------
    >>> axis_words("cost", "EUR"), axis_words("sheets", "EUR")
    ('cost, EUR/m²', 'sheets')
    """
    unit = f"{currency}/m²" if quantity == "cost" else _UNITS.get(quantity)
    return quantity if unit is None else f"{quantity}, {unit}"


def plain(plot: figure) -> None:
    """Give a plot readable text and quiet lines."""
    plot.toolbar.logo = None
    assert isinstance(plot.title, Title)  # bokeh makes one out of any text
    plot.title.text_font_size = "13px"
    for axis in (*plot.xaxis, *plot.yaxis):
        axis.axis_label_text_font_size = TEXT
        axis.axis_label_text_font_style = "normal"
        axis.axis_label_text_color = axis.major_label_text_color = "#1a1a1a"
        axis.major_label_text_font_size = "11px"
        axis.minor_tick_line_color = None
    plot.grid.grid_line_color = "#e4e4e4"
    plot.outline_line_color = "#999999"
    plot.min_border_right = 18
