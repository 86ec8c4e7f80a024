"""Makes the invented sweeps of problems/bench_demo: python tests/bench/demo_sweeps.py FOLDER.

The coils sit where no setup file says they do, and the sheets are not exactly as thick as stated: so do real benches.
"""

from __future__ import annotations

import sys
from pathlib import Path

import numpy as np
from numpy.typing import NDArray

from stackopt.physics import fields
from stackopt.physics.media import Medium
from stackopt.physics.permeability import ColeCole, Constant, Debye, Scaled
from stackopt.problem import CoaxialLoops

Real = NDArray[np.float64]

MARK = "# Invented for the demonstration: computed, with noise added. Nothing was measured.\n"
COILS = CoaxialLoops(4.0e-3, 4.0e-3, 3.2e-3, 4.15e-3)
"""True coils; the setup states radii of 4 mm and gaps of 3 mm and 4 mm."""
NOISE_DB = 0.12
FERRITE = Debye(110.0, 25e6)
STEEL = ColeCole(240.0, 8e3, 0.25, 70.0)
STEEL_S_PER_M, COPPER_S_PER_M = 6.6e6, 5.6e7
STRIP_S_PER_M = 5.8e7
SENSOR = CoaxialLoops(9e-3, 4e-3, 8e-3, 14e-3)
"""Field of the prototype."""


def loss_db(field: CoaxialLoops, frequency: Real, layers: list[tuple[float, object, float]]) -> Real:
    """Insertion loss of layers given as conductivity, law and thickness."""
    lines = fields.coaxial_lines(
        frequency, field.source_radius_m, field.victim_radius_m, field.gap_sum_m, fields.REFERENCE_RULE
    )
    media = [(Medium(law(frequency), sigma), thickness) for sigma, law, thickness in layers]  # type: ignore[operator]
    return fields.attenuation_db(lines, media)


def grid(low: float, high: float, per_decade: int = 8) -> Real:
    """Frequencies, even in their logarithm, written with three digits."""
    count = round(np.log10(high / low) * per_decade) + 1
    return np.array([float(f"{value:.3g}") for value in np.geomspace(low, high, count)])


def open_level_v(frequency: Real) -> Real:
    """Voltage of the reading coil without a sheet: it rises with frequency until the amplifier ends it."""
    return 2e-6 * frequency / np.sqrt(1.0 + (frequency / 3e6) ** 2) * 1e-1


def write_sweeps(folder: Path) -> None:
    """Write every sweep of the demonstration."""
    random = np.random.default_rng(20240517)
    low, high = grid(200.0, 1e6), grid(1e3, 1e7)

    def noisy(values: Real) -> Real:
        return values + random.normal(0.0, NOISE_DB, len(values))

    strip = noisy(loss_db(COILS, low, [(STRIP_S_PER_M, Constant(1.0), 0.201e-3)]))
    rows = "".join(f"{f:g},{value:.3f}\n" for f, value in zip(low, strip, strict=True))
    (folder / "copper_strip.csv").write_text(f"{MARK}frequency_hz,attenuation_db\n{rows}")

    for count, name in ((4, "four"), (2, "two")):
        loss = noisy(loss_db(COILS, high, [(1e-4, FERRITE, count * 51e-6)]))
        level = open_level_v(high)
        cells = zip(high, level, level * 10.0 ** (-loss / 20.0), strict=True)
        rows = "".join(f"{f:g},{before:.5g},{after:.5g}\n" for f, before, after in cells)
        (folder / f"ferrite_{name}_sheets.csv").write_text(f"{MARK}frequency_hz,without_v,with_v\n{rows}")

    loss = noisy(loss_db(COILS, low, [(COPPER_S_PER_M, Constant(1.0), 34.2e-6)]))
    level = 20.0 * np.log10(open_level_v(low))
    cells = zip(low, level, level - loss, strict=True)
    rows = "".join(f"{f:.1f};{before:.2f};{after:.2f}\n".replace(".", ",") for f, before, after in cells)
    (folder / "copper_foil.csv").write_text(f"{MARK}frequency_hz;without_db;with_db\n{rows}")

    for count, name in ((1, "one"), (2, "two")):
        loss = noisy(loss_db(COILS, low, [(STEEL_S_PER_M, STEEL, count * 0.152e-3)]))
        rows = "".join(f"{f:g},{value:.3f}\n" for f, value in zip(low, loss, strict=True))
        (folder / f"steel_{name}.csv").write_text(f"{MARK}frequency_hz,attenuation_db\n{rows}")

    write_prototype(folder, noisy)


def write_prototype(folder: Path, noisy: object) -> None:
    """Write the sweep of the prototype, whose steel lost permeability when it was bent."""
    frequency = grid(500.0, 5e5)
    bent = Scaled(STEEL, 0.4)
    layers: list[tuple[float, object, float]] = [(STEEL_S_PER_M, bent, 0.152e-3)]
    loss = noisy(loss_db(SENSOR, frequency, layers))  # type: ignore[operator]
    rows = "".join(f"{f:g},{value:.3f}\n" for f, value in zip(frequency, loss, strict=True))
    (folder / "prototype.csv").write_text(f"{MARK}frequency_hz,attenuation_db\n{rows}")


if __name__ == "__main__":
    write_sweeps(Path(sys.argv[1]))
