"""The build sheet as a page that prints on A4: everything it says was computed, or given by the user."""

from __future__ import annotations

import math
from collections.abc import Iterator
from importlib.metadata import version

from stackopt.build import BuildSheet, Cut, Layer, Overhang, Size
from stackopt.front import FrontRow
from stackopt.outputs.build_plots import attenuation_figure, section_figure, svg
from stackopt.outputs.cautions import cautions
from stackopt.outputs.drives import verdict_lines
from stackopt.outputs.origins import origin_lines
from stackopt.outputs.templating import render
from stackopt.outputs.words import marked, row_margin_words, where_words
from stackopt.problem import format_stack
from stackopt.units import format_frequency, format_thickness

LEFT_OUT = (
    "Edges, seams, holes and corners: the sheet is infinite and flat. They often decide at high frequency.",
    "Bending, pressing and cutting, which lower the permeability of annealed alloys until they are annealed again.",
    "Saturation, hysteresis and temperature: values are for small fields at the temperature of their origin.",
    "Contact between layers and to the frame: layers of infinite sheets need none, bonding at the edges does.",
)


def build_html(sheet: BuildSheet, run: str) -> str:
    """Return the build sheet as HTML that needs nothing but itself."""
    front, row = sheet.front, sheet.row
    problem = front.problem
    named = marked(front).get(sheet.rank - 1, "")
    return render(
        "build_sheet.html",
        title=problem.title,
        rank=sheet.rank,
        count=len(front),
        what=f", {named}" if named else "",
        stack=format_stack(row.stack),
        state=front.statement,
        layer_heads=_layer_heads(sheet),
        layers=[_layer_cells(sheet, number, layer) for number, layer in enumerate(sheet.layers, start=1)],
        sums=list(_sums(sheet)),
        layer_notes=list(_layer_notes(sheet)),
        section_svg=svg(section_figure(sheet)),
        cuts=[_cut_cells(cut, sheet.stock) for cut in sheet.cuts],
        has_stock=sheet.stock is not None,
        size_notes=list(_size_notes(sheet)),
        curves_svg=svg(attenuation_figure(sheet)),
        attenuation_notes=list(_attenuation_notes(sheet)),
        inside=[f"{what.capitalize()}: {text}." for what, text in verdict_lines(sheet.prediction)],
        other_heads=["rank", "mass, kg/m²", f"cost, {problem.currency}/m²", "thickness, mm", "margin", "stack"],
        others=[_other_cells(rank, other, sheet) for rank, other in sheet.others],
        equal_notes=list(_equal_notes(sheet)),
        cautions=cautions(problem, [row.stack]),
        left_out=LEFT_OUT,
        origins=origin_lines(problem, [layer.sheet.material for layer in sheet.layers]),
        foot=f"stackopt {version('stackopt')}, run {run}; problem file {problem.name}.",
    )


# Layers ---------------------------------------------------------------------------------------------------------------


def _layer_heads(sheet: BuildSheet) -> list[dict[str, str]]:
    currency = sheet.front.problem.currency
    heads = [
        ("", "n"),
        ("material", ""),
        ("gauge", "n"),
        ("state", ""),
        ("mass, kg/m²", "n"),
        (f"cost, {currency}/m²", "n"),
    ]
    if sheet.panel is not None:
        heads += [("panel: mass, g", "n"), (f"panel: cost, {currency}", "n")]
    heads.append(("margin without it", "n"))
    return [{"text": text, "kind": kind} for text, kind in heads]


def _layer_cells(sheet: BuildSheet, number: int, layer: Layer) -> list[str]:
    area = _area_m2(sheet)
    cells = [
        str(number),
        f"{layer.sheet.material} (bond)" if layer.is_bond else layer.sheet.material,
        format_thickness(layer.sheet.thickness_m),
        layer.state,
        f"{layer.mass_kg_per_m2:.3f}",
        _money(layer.cost_per_m2),
    ]
    if area is not None:
        cells += [f"{layer.mass_kg_per_m2 * area * 1e3:.2f}", _money(layer.cost_per_m2 * area, 3)]
    return [*cells, "" if math.isnan(layer.loss_db) else f"{layer.loss_db:+.1f} dB"]


def _sums(sheet: BuildSheet) -> Iterator[list[str]]:
    area, row = _area_m2(sheet), sheet.row
    if sheet.handling_per_m2:
        cells = ["", "handling of the sheets", "", "", "", _money(sheet.handling_per_m2)]
        yield [*cells, *(["", _money(sheet.handling_per_m2 * area, 3)] if area is not None else []), ""]
    thickness = format_thickness(row.thickness_m)
    cells = ["", "together", thickness, "", f"{row.mass_kg_per_m2:.3f}", _money(row.cost_per_m2)]
    if area is not None:
        cells += [f"{row.mass_kg_per_m2 * area * 1e3:.2f}", _money(row.cost_per_m2 * area, 3)]
    yield [*cells, f"has {row_margin_words(row, sheet.front.problem)}"]


def _layer_notes(sheet: BuildSheet) -> Iterator[str]:
    problem = sheet.front.problem
    yield "The last column tells how the smallest margin changes when the sheet is left out, and what it is with all."
    for side, layers in (("source", problem.rules.source_side), ("victim", problem.rules.victim_side)):
        if layers:
            yield f"Already there on the {side} side, not part of the stack: {format_stack(layers)}."


def _money(value: float, digits: int = 2) -> str:
    return "no price" if math.isnan(value) else f"{value:.{digits}f}"


def _area_m2(sheet: BuildSheet) -> float | None:
    return None if sheet.panel is None else sheet.panel[0] * sheet.panel[1]


# Cutting and size -----------------------------------------------------------------------------------------------------


def _size_words(size: Size) -> str:
    return " x ".join(f"{side * 1e3:.10g} mm" for side in size)


def _cut_cells(cut: Cut, stock: Size | None) -> list[str]:
    cells = [str(cut.sheet), str(cut.pieces)]
    if stock is None:
        return cells
    if cut.stock_sheets is None or cut.waste is None:
        return [*cells, "does not fit", "-", "-"]
    return [*cells, str(cut.per_stock), str(cut.stock_sheets), f"{100.0 * cut.waste:.0f} %"]


def _size_notes(sheet: BuildSheet) -> Iterator[str]:
    if sheet.panel is None:
        yield """No panel size was given; for its mass, cost and cuts add it, such as --panel "120mm x 80mm"."""
    else:
        yield f"Every piece is {_size_words(sheet.panel)}, the finished size; add what your way of cutting needs."
        if sheet.stock is None:
            yield """Waste: unknown without the size of sheets as bought; add it, such as --stock "300mm x 200mm"."""
        else:
            yield (
                f"Stock sheets of {_size_words(sheet.stock)}; pieces side by side, no allowance for the cut. Waste is "
                "what is left of the stock sheets of one panel."
            )
            if any(cut.per_stock == 0 for cut in sheet.cuts):
                yield "A piece that does not fit needs a seam: overlap it and bond it all along, or buy larger sheets."
    several = len(sheet.front.problem.requirements) > 1
    for overhang in sheet.overhangs:
        yield _overhang_words(overhang, several)
    if not sheet.overhangs:
        yield "Overhang: this field has no place of source and victim; let seams overlap and bond them all along."


def _overhang_words(overhang: Overhang, several: bool) -> str:
    low, high = (f"{value * 1e3:.3g} mm" for value in overhang.advised_m)
    sides = " to ".join(f"{value * 1e3:.3g} mm" for value in overhang.advised_side_m)
    name = f" ('{overhang.requirement}')" if several else ""
    text = (
        f"Overhang{name}: two to three times the distance of source and victim, {low} to {high}, beyond the larger of "
        f"the two on every side; a centred panel then has sides of {sides} or more."
    )
    if overhang.reach_m is None:
        return text
    if overhang.reach_m < 0.0:
        return f"{text} This panel does not even cover the larger of the two: expect far less than predicted."
    reach = f"{overhang.reach_m * 1e3:.3g} mm"
    if overhang.reach_m < overhang.advised_m[0] * (1.0 - 1e-9):
        return f"{text} This panel reaches only {reach}: expect less attenuation than predicted."
    return f"{text} This panel reaches {reach}."


# Attenuation and alternatives -----------------------------------------------------------------------------------------


def _attenuation_notes(sheet: BuildSheet) -> Iterator[str]:
    row, problem, band = sheet.row, sheet.front.problem, sheet.band
    yield f"Smallest margin: {row_margin_words(row, problem)} {where_words(row, problem)}."
    if band is None:
        yield "Tolerances: the material set gives none for these materials."
        return
    where = f"at {format_frequency(band.worst_hz)}"
    where += f" of '{band.requirement}'" if len(problem.requirements) > 1 else ""
    verdict = "the mask still holds" if band.worst_margin_db >= 0.0 else "the mask can be missed"
    yield (
        f"Over the tolerances the smallest margin goes down to {band.worst_margin_db:+.1f} dB {where}: {verdict}. "
        f"Tried: {band.method}; sheets of one material vary together; gaps and radii as given."
    )
    if band.worst_case:
        yield f"That corner is {'; '.join(band.worst_case)}."
    yield f"Tolerances: {'; '.join(band.tolerances)}."


def _other_cells(rank: int, row: FrontRow, sheet: BuildSheet) -> list[str]:
    picked = sheet.row
    cost = "no price" if math.isnan(row.cost_per_m2) else _and_change(row.cost_per_m2, picked.cost_per_m2, 2)
    return [
        str(rank),
        _and_change(row.mass_kg_per_m2, picked.mass_kg_per_m2, 3),
        cost,
        _and_change(row.thickness_m * 1e3, picked.thickness_m * 1e3, 3),
        row_margin_words(row, sheet.front.problem),
        format_stack(row.stack),
    ]


def _and_change(value: float, picked: float, digits: int) -> str:
    text = f"{value:.{digits}f}"
    return text if math.isnan(picked) else f"{text} ({value - picked:+.{digits}f})"


def _equal_notes(sheet: BuildSheet) -> Iterator[str]:
    if not sheet.equals:
        return
    count = len(sheet.equals)
    yield (
        f"{count} other stack{'s have' if count > 1 else ' has'} exactly the same objectives, in another order or of "
        f"other sheets, with no more margin, such as {format_stack(sheet.equals[0].stack)} "
        f"({row_margin_words(sheet.equals[0], sheet.front.problem)}); all are in front_equals.csv of the run."
    )
