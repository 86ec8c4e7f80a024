"""Sweeps and setups for the tests: computed with the readable cascade, not with the model that fits them."""

from __future__ import annotations

from collections.abc import Callable
from dataclasses import replace
from pathlib import Path
from typing import Any

import numpy as np
from numpy.typing import NDArray

from stackopt.bench.sheet_model import coils_of
from stackopt.physics import fields
from stackopt.physics.media import Medium
from stackopt.physics.permeability import PermeabilityLaw
from stackopt.problem import CoaxialLoops
from stackopt.readers.setups import Setup, SheetSweep, Uncertainty
from stackopt.readers.sweeps import Sweep

Real = NDArray[np.float64]

COILS = CoaxialLoops(4e-3, 4e-3, 3e-3, 4e-3)
NOISE_DB = 0.1


def loss_db(field: CoaxialLoops, frequency: Real, sigma: float, law: PermeabilityLaw, thickness: float) -> Real:
    """Insertion loss of one layer by the readable cascade and the reference quadrature, dB."""
    coils = coils_of(field)
    lines = fields.coaxial_lines(
        frequency, coils.source_radius_m, coils.victim_radius_m, coils.gap_sum_m, fields.REFERENCE_RULE
    )
    return fields.attenuation_db(lines, [(Medium(law(frequency), sigma), thickness)])


def sweep_of(frequency: Real, loss: Real, **more: Any) -> Sweep:
    """A sweep away from any floor."""
    made = Sweep("sweep.csv", frequency, loss, None, np.zeros(len(loss), dtype=bool))
    return replace(made, **more)


def setup_of(
    sigma: float,
    law: PermeabilityLaw,
    sheets: tuple[tuple[float, int], ...],
    frequency: Real,
    *,
    limits: Uncertainty = Uncertainty(),  # noqa: B008
    noise_db: float = NOISE_DB,
    seed: int = 5,
    true_field: CoaxialLoops = COILS,
    spoil: Callable[[Real], Real] | None = None,
    **known: Any,
) -> Setup:
    """A setup whose sweeps are of this material; sheets are thickness and count."""
    random = np.random.default_rng(seed)
    sweeps = []
    for thickness, count in sheets:
        loss = loss_db(true_field, frequency, sigma, law, thickness * count)
        loss = loss + random.normal(0.0, noise_db, len(loss))
        if spoil is not None:
            loss = spoil(loss)
        sweeps.append(SheetSweep(sweep_of(frequency, loss), thickness, count, 0.0, COILS))
    return Setup("setup.toml", COILS, tuple(sweeps), limits, **known)


SETUP = """\
date = "2024-03-02"
[field]
kind = "coaxial loops"
source_radius = "4 mm"
victim_radius = "4 mm"
source_gap = "3 mm"
victim_gap = "4 mm"

[known]
permeability = 1.0
density = "8890 kg/m^3"
[known.origin]
density = "weighed"

[[sweep]]
file = "copper.csv"
thickness = "35 um"
"""


def write_setup(folder: Path, text: str = SETUP) -> Path:
    """Write a setup with its sweep of copper foil."""
    from stackopt.physics.permeability import Constant

    frequency = np.geomspace(1e3, 1e6, 19)
    loss = loss_db(COILS, frequency, 5.8e7, Constant(1.0), 35e-6)
    loss = loss + np.random.default_rng(2).normal(0.0, NOISE_DB, len(loss))
    rows = "".join(f"{f:.6g},{value:.4f}\n" for f, value in zip(frequency, loss, strict=True))
    (folder / "copper.csv").write_text("frequency_hz,attenuation_db\n" + rows)
    path = folder / "setup.toml"
    path.write_text(text)
    return path
