"""Tables of a material set for the terminal."""

from __future__ import annotations

from collections.abc import Iterator

import numpy as np
from numpy.typing import NDArray
from rich.table import Table

from stackopt.outputs.tables import plain_table
from stackopt.outputs.words import conductivity_words, law_words, number_words
from stackopt.physics.media import Medium, line_constants
from stackopt.physics.permeability import tables_in
from stackopt.problem import Material, MaterialSet
from stackopt.units import format_frequency, format_thickness

FREQUENCIES_HZ = (50.0, 1e3, 1e4, 1e5, 1e6, 1e7)
"""Where permeability and skin depth are listed, Hz."""
LARGEST_DEPTH_M = 1.0
"""Skin depths beyond this mean that the material does not screen by currents."""

Real = NDArray[np.float64]
Complex = NDArray[np.complex128]


def permeability(material: Material, frequency_hz: Real) -> Complex:
    """Relative permeability, NaN where a table does not reach, shape (frequency,)."""
    reached = np.ones(np.shape(frequency_hz), dtype=bool)
    for table in tables_in(material.permeability):
        low, high = table.octave_hz
        reached &= (frequency_hz >= low) & (frequency_hz <= high)
    values = np.full(np.shape(frequency_hz), complex(np.nan, np.nan))
    values[reached] = material.permeability(frequency_hz[reached])
    return values


def is_magnetic(material: Material) -> bool:
    """Whether the relative permeability differs from 1 enough to matter, anywhere from 10 Hz to 1 GHz."""
    values = permeability(material, np.logspace(1.0, 9.0, 33))
    return bool(np.any(np.abs(values - 1.0) > 0.1))


def skin_depth_m(material: Material, frequency_hz: Real) -> Real:
    """Depth at which the field has fallen to 37 %, m, NaN where the permeability is unknown, shape (frequency,).

    The general 1/Re(u), which is the usual sqrt(2/(w mu sigma)) for metals and counts magnetic loss too.
    """
    medium = Medium(permeability(material, frequency_hz), material.conductivity_s_per_m, material.permittivity)
    with np.errstate(divide="ignore", invalid="ignore"):  # insulators, and frequencies that a table does not reach
        u, _, _ = line_constants(medium, np.zeros((len(frequency_hz), 1), dtype=complex), frequency_hz, "TE")
        return np.asarray(1.0 / u[:, 0].real)


def material_tables(material_set: MaterialSet, origins: bool = False) -> Iterator[Table]:
    """Show a material set: stock, properties, permeability and skin depth over frequency, and origins on request."""
    yield _stock_table(material_set)
    yield _property_table(material_set)
    yield _tolerance_table(material_set)
    yield _law_table(material_set)
    yield _permeability_table(material_set)
    yield _depth_table(material_set)
    if origins:
        yield _origin_table(material_set)


def _stock_table(material_set: MaterialSet) -> Table:
    table = _titled("Stock", "material", "gauges", f"price\n{material_set.currency}")
    for name, material in material_set.materials.items():
        table.add_row(name, _gauges(material), _price(material))
    return table


def _gauges(material: Material) -> str:
    if material.thickness_range_m is not None:
        low, high = map(format_thickness, material.thickness_range_m)
        return f"any from {low} to {high}"
    return ", ".join(map(format_thickness, material.gauges_m)) or "none: bond film or fixed layer only"


def _price(material: Material) -> str:
    per_area = [f"{format_thickness(gauge)}: {price:g}/m^2" for gauge, price in material.price_per_m2]
    if material.price_per_kg is not None:
        per_area.append(f"{material.price_per_kg:g}/kg")
    return ", ".join(per_area) or "-"


def _property_table(material_set: MaterialSet) -> Table:
    heads = ["conductivity", "density\nkg/m^3", "saturation\nT", "anodic index\nV"]
    levels = any(material.rayleigh_m_per_a for material in material_set.materials.values())
    heads += ["Rayleigh coefficient\nm/A"] if levels else []
    table = _numbers("Properties", *heads)
    for name, material in material_set.materials.items():
        table.add_row(
            name,
            conductivity_words(material.conductivity_s_per_m),
            f"{material.density_kg_per_m3:.0f}",
            _or_dash(material.saturation_t, ".3g"),
            _or_dash(material.anodic_index_v, "+.2f"),
            *([_or_dash(material.rayleigh_m_per_a, ".3g")] if levels else []),
        )
    return table


def _tolerance_table(material_set: MaterialSet) -> Table:
    table = _numbers("Tolerances", "thickness\n%", "conductivity\n%", "permeability\n%")
    for name, material in material_set.materials.items():
        given = material.tolerance
        cells = [_percent(*pair) for pair in (given.thickness, given.conductivity, given.permeability)]
        if any(cell != "-" for cell in cells):
            table.add_row(name, *cells)
    table.caption = "Not listed: materials of which the set gives no tolerance."
    return table


def _percent(down: float, up: float) -> str:
    if down == up == 0.0:
        return "-"
    return f"±{up * 100:.3g}" if up == -down else f"{down * 100:+.3g}/{up * 100:+.3g}"


def _law_table(material_set: MaterialSet) -> Table:
    table = _titled("Relative permeability, law", "material", "law")
    for name, material in material_set.materials.items():
        if is_magnetic(material):
            table.add_row(name, law_words(material.permeability))
    table.caption = "Not listed: materials of relative permeability 1."
    return table


def _permeability_table(material_set: MaterialSet) -> Table:
    table = _numbers("Relative permeability, magnitude", *map(format_frequency, FREQUENCIES_HZ))
    for name, material in material_set.materials.items():
        if is_magnetic(material):
            values = np.abs(permeability(material, np.array(FREQUENCIES_HZ)))
            table.add_row(name, *("-" if np.isnan(value) else _three_digits(float(value)) for value in values))
    table.caption = "-: the material's table does not reach this frequency."
    return table


def _three_digits(value: float) -> str:
    return number_words(float(f"{value:.3g}"))


def _depth_table(material_set: MaterialSet) -> Table:
    table = _numbers("Skin depth, where the field has fallen to 37 %", *map(format_frequency, FREQUENCIES_HZ))
    for name, material in material_set.materials.items():
        depths = skin_depth_m(material, np.array(FREQUENCIES_HZ))
        if np.any(depths <= LARGEST_DEPTH_M):
            table.add_row(name, *(_depth(float(depth)) for depth in depths))
    table.caption = f"Not listed: materials whose skin depth is beyond {LARGEST_DEPTH_M:g} m everywhere."
    return table


def _depth(depth_m: float) -> str:
    if np.isnan(depth_m):
        return "-"
    if depth_m > LARGEST_DEPTH_M:
        return f"> {LARGEST_DEPTH_M:g} m"
    return f"{depth_m * 1e3:.3g} mm" if depth_m >= 1e-3 else f"{depth_m * 1e6:.3g} um"


def _origin_table(material_set: MaterialSet) -> Table:
    table = _titled("Where the numbers come from", "material", "value", "origin")
    for name, material in material_set.materials.items():
        for number, (key, text) in enumerate(material.origin.items()):
            table.add_row(name if number == 0 else "", key, text)
        if material.notes:
            table.add_row("" if material.origin else name, "notes", material.notes)
    return table


def _numbers(title: str, *heads: str) -> Table:
    table = _titled(title, "material", *heads)
    for column in table.columns[1:]:
        column.justify = "right"
        column.no_wrap = True
    return table


def _titled(title: str, *heads: str) -> Table:
    table = plain_table()
    table.title = title
    for head in heads:
        table.add_column(head, vertical="top", overflow="fold")
    return table


def _or_dash(value: float | None, form: str) -> str:
    return "-" if value is None else format(value, form)
