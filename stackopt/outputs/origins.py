"""Every number of a material in words, with where it comes from."""

from __future__ import annotations

from collections.abc import Iterable, Iterator

from stackopt.outputs.words import conductivity_words, law_words, number_words, tolerance_words
from stackopt.problem import NON_MAGNETIC, Material, Problem
from stackopt.units import format_thickness

_WORDS = {"price_per_kg": "price", "price_per_m2": "price", "anodic_index": "anodic index"}
NOT_STATED = "not stated in the set"


def origin_lines(problem: Problem, names: Iterable[str]) -> list[tuple[str, list[tuple[str, str]]]]:
    """List for each of the given materials its numbers in words, each with where it comes from."""
    lines = []
    for name in dict.fromkeys(names):
        material = problem.materials[name]
        values = [
            (f"{_WORDS.get(key, key)} {value}", material.origin.get(key, NOT_STATED))
            for key, value in _values(material, problem.currency)
        ]
        lines.append((name, values))
    return lines


def _values(material: Material, currency: str) -> Iterator[tuple[str, str]]:
    yield "conductivity", conductivity_words(material.conductivity_s_per_m)
    yield "density", f"{number_words(material.density_kg_per_m3)} kg/m³"
    if material.permeability != NON_MAGNETIC or "permeability" in material.origin:
        yield "permeability", law_words(material.permeability)
    if material.permittivity != 1.0 or "permittivity" in material.origin:
        yield "permittivity", number_words(material.permittivity)
    if material.price_per_kg is not None:
        yield "price_per_kg", f"{material.price_per_kg:g} {currency}/kg"
    if material.price_per_m2:
        prices = (f"{format_thickness(gauge)} {price:g}" for gauge, price in material.price_per_m2)
        yield "price_per_m2", f"{', '.join(prices)} {currency}/m²"
    if material.saturation_t is not None:
        yield "saturation", f"{material.saturation_t:.3g} T"
    if material.anodic_index_v is not None:
        yield "anodic_index", f"{material.anodic_index_v:+.2f} V"
    if tolerances_words(material):
        yield "tolerance", tolerances_words(material)


def tolerances_words(material: Material) -> str:
    """Write the tolerances of a material; empty where there are none."""
    tolerance = material.tolerance
    sides = {
        "thickness": tolerance.thickness,
        "conductivity": tolerance.conductivity,
        "permeability": tolerance.permeability,
    }
    return ", ".join(f"{key} {tolerance_words(down, up)}" for key, (down, up) in sides.items() if down or up)
