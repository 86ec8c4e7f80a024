"""A small valid problem with its set and tables, and a writer for changed copies of it."""

from __future__ import annotations

from collections.abc import Mapping
from pathlib import Path

SET = """\
title = "Test sheets"
currency = "EUR"

[materials.copper]
conductivity = "58 MS/m"
density = "8890 kg/m^3"
permeability = 1.0
gauges = ["70 um", "18 um", "35 um"]
price_per_kg = 14.0
anodic_index = "-0.35 V"
tolerance = {thickness = "5 %", permeability = ["-50 %", "+100 %"]}
notes = "annealed"
[materials.copper.origin]
conductivity = "test"
density = "test"
permeability = "test"
price_per_kg = "test"
anodic_index = "test"

[materials.steel]
conductivity = "7 MS/m"
density = "7850 kg/m^3"
permeability = {law = "cole-cole", initial = 280, high_frequency = 83.3, relaxation = "5 kHz", broadening = 0.2}
gauges = ["150 um", "0.3 mm"]
price_per_m2 = {"150 um" = 3.0, "0.3 mm" = 5.5}
saturation = "2.0 T"
[materials.steel.origin]
conductivity = "test"
density = "test"
permeability = "test"
price_per_m2 = "test"
saturation = "test"

[materials.ribbon]
conductivity = "0.85 MS/m"
density = "7300 kg/m^3"
permeability = {law = "table", file = "ribbon.csv"}
gauges = ["20 um"]
[materials.ribbon.origin]
conductivity = "test"
density = "test"
permeability = "test"

[materials."acrylic film"]
conductivity = "0 S/m"
density = "1000 kg/m^3"
permeability = 1.0
permittivity = 3.0
[materials."acrylic film".origin]
conductivity = "test"
density = "test"
permeability = "test"
permittivity = "test"
"""

PROBLEM = """\
title = "Test problem"
materials = "sets/set.toml"
use = ["copper", "steel"]

[[requirement]]
name = "loops"
[requirement.field]
kind = "coaxial loops"
source_radius = "12 mm"
victim_radius = "5 mm"
source_gap = "20 mm"
victim_gap = "25 mm"
[requirement.mask]
margin = "2 dB"
points = [["50 Hz", "8 dB"], ["1 kHz", "14 dB"], ["1 MHz", "90 dB"]]

[[requirement]]
name = "wave"
[requirement.field]
kind = "plane wave"
[requirement.mask]
file = "mask.csv"

[stack]
max_sheets = 4

[search]
objectives = ["mass", "thickness"]
random_seed = 7
population = 50
"""

TABLES = {
    "mask.csv": "frequency_hz,attenuation_db\n1e6,40\n1e9,60\n",
    "emitted.csv": "frequency_hz,level_db\n1e3,80\n1e5,60\n",
    "allowed.csv": "frequency_hz,level_db\n1e2,50\n1e4,50\n",
    "sets/ribbon.csv": (
        "frequency_hz,mu_real,mu_imag\n1e2,5000,-10\n1e4,4990,-250\n1e5,4000,-2000\n3e5,1900,-2400\n1e6,400,-1300\n"
    ),
}


def write(
    folder: Path,
    problem: Mapping[str, str] | None = None,
    materials: Mapping[str, str] | None = None,
    tables: Mapping[str, str | bytes] | None = None,
) -> Path:
    """Write the problem, its set and tables with texts replaced; return the problem's path."""
    (folder / "sets").mkdir(exist_ok=True)
    (folder / "problem.toml").write_text(replaced(PROBLEM, problem or {}), encoding="utf-8")
    (folder / "sets" / "set.toml").write_text(replaced(SET, materials or {}), encoding="utf-8")
    for name, content in {**TABLES, **(tables or {})}.items():
        (folder / name).write_bytes(content.encode() if isinstance(content, str) else content)
    return folder / "problem.toml"


def replaced(text: str, changes: Mapping[str, str]) -> str:
    """Replace each text, which must occur, once."""
    for old, new in changes.items():
        assert old in text, old
        text = text.replace(old, new, 1)
    return text
