"""Files of a build sheet beside its page: layers.csv, prediction.csv and stack.toml."""

from __future__ import annotations

import json
from pathlib import Path
from typing import TYPE_CHECKING, Any

from stackopt.build import BuildSheet, Layer
from stackopt.errors import Finding, InputError
from stackopt.outputs.build_page import build_html
from stackopt.outputs.files import write_whole
from stackopt.outputs.tables import write_predictions
from stackopt.problem import Sheet
from stackopt.units import format_thickness

if TYPE_CHECKING:
    import pandas as pd

LAYER_COLUMNS = (
    "layer",
    "material",
    "thickness_um",
    "kind",
    "state",
    "mass_kg_per_m2",
    "cost_per_m2",
    "margin_change_without_it_db",
)
"""Columns of layers.csv; with a panel, ``width_mm, height_mm, mass_g, cost`` follow."""


def write_build_sheet(sheet: BuildSheet, folder: Path, run: str) -> list[Path]:
    """Write all files of a build sheet into a folder, which is made.

    Returns
    -------
    list of Path
        The files.

    Raises
    ------
    InputError
        When one cannot be written.
    """
    try:
        folder.mkdir(parents=True, exist_ok=True)
    except OSError as error:
        message = f"cannot be made: {error.strerror}; name another folder with --out"
        raise InputError(Finding(str(folder), "", message)) from None
    page, table, prediction, stack = (
        folder / name for name in ("build_sheet.html", "layers.csv", "prediction.csv", "stack.toml")
    )
    _write(page, build_html(sheet, run))
    frame = layer_frame(sheet)
    write_whole(table, lambda part: frame.to_csv(part, index=False, encoding="utf-8", lineterminator="\n"))
    write_predictions([sheet.prediction], prediction)
    _write(stack, stack_toml(sheet))
    return [page, table, prediction, stack]


def _write(path: Path, text: str) -> None:
    def write(part: Path) -> None:
        part.write_text(text, encoding="utf-8")

    write_whole(path, write)


def layer_frame(sheet: BuildSheet) -> pd.DataFrame:
    """Layers from source to victim as a data frame with the columns `LAYER_COLUMNS`."""
    import pandas as pd

    records = [dict(zip(LAYER_COLUMNS, _layer(number, layer), strict=True)) for number, layer in _numbered(sheet)]
    frame = pd.DataFrame.from_records(records, columns=list(LAYER_COLUMNS))
    if sheet.panel is not None:
        width, height = sheet.panel
        frame["width_mm"], frame["height_mm"] = round(width * 1e3, 6), round(height * 1e3, 6)
        frame["mass_g"] = frame["mass_kg_per_m2"] * width * height * 1e3
        frame["cost"] = frame["cost_per_m2"] * width * height
    return frame


def _numbered(sheet: BuildSheet) -> enumerate[Layer]:
    return enumerate(sheet.layers, start=1)


def _layer(number: int, layer: Layer) -> tuple[Any, ...]:
    return (
        number,
        layer.sheet.material,
        round(layer.sheet.thickness_m * 1e6, 6),
        "bond" if layer.is_bond else "sheet",
        layer.state,
        layer.mass_kg_per_m2,
        layer.cost_per_m2,
        layer.loss_db,
    )


def stack_toml(sheet: BuildSheet) -> str:
    """Return the stack as a file that `stackopt.readers.read_stack` reads."""
    problem = sheet.front.problem
    lines = [
        "# Reads back with: stackopt predict PROBLEM stack.toml",
        f"title = {_quoted(f'rank {sheet.rank} of {len(sheet.front)}')}",
        f"problem = {_quoted(problem.title)}",
        "# Source side first; the bond comes between neighbouring sheets by itself.",
        "sheets = [",
        *(f"    {_layer_toml(one)}," for one in sheet.row.stack),
        "]",
    ]
    if problem.rules.bond is not None:
        lines.append(f"bond = {_layer_toml(problem.rules.bond)}")
    return "\n".join(lines) + "\n"


def _layer_toml(layer: Sheet) -> str:
    return f"[{_quoted(layer.material)}, {_quoted(format_thickness(layer.thickness_m))}]"


def _quoted(text: str) -> str:
    """Write a TOML string; JSON's escapes are TOML's."""
    return json.dumps(text, ensure_ascii=False).replace("\x7f", "\\u007f")
