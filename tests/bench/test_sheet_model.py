"""The fit's own model against the readable cascade with the reference quadrature."""

from __future__ import annotations

import numpy as np
import pytest

from stackopt.bench.sheet_model import coils_of, sheets_db
from stackopt.physics import fields
from stackopt.physics.media import Medium, air
from stackopt.physics.permeability import ColeCole, Constant, Debye, PermeabilityLaw
from stackopt.problem import CoaxialDipoles, CoaxialLoops

FREQUENCY = np.geomspace(100.0, 1e7, 31)
MATERIALS: dict[str, tuple[float, PermeabilityLaw]] = {
    "copper": (5.8e7, Constant(1.0)),
    "steel": (7e6, ColeCole(280.0, 5e3, 0.2, 83.3)),
    "ferrite": (1e-3, Debye(120.0, 2e7)),
    "thick ferrite": (1.0, Constant(3000.0)),
    "nickel alloy": (1.67e6, Debye(30000.0, 3e4)),
    "nothing": (0.0, Constant(1.0)),
}
FIELDS = {
    "small": (CoaxialLoops(3e-3, 3e-3, 3e-3, 4e-3), 5e-4),
    "unequal": (CoaxialLoops(12e-3, 5e-3, 20e-3, 25e-3), 5e-4),
    "dipoles": (CoaxialDipoles(4e-3, 4e-3), 5e-4),
    "large": (CoaxialLoops(20e-3, 20e-3, 4e-3, 6e-3), 2e-3),
    "largest": (CoaxialLoops(5e-3, 5e-3, 1e-3, 1e-3), 2e-3),
}
MEASURABLE_DB = 140.0


@pytest.mark.parametrize("thickness", [20e-6, 200e-6, 2e-3])
@pytest.mark.parametrize("field", FIELDS.values(), ids=FIELDS.keys())
@pytest.mark.parametrize("material", MATERIALS.values(), ids=MATERIALS.keys())
def test_within_the_stated_error(
    material: tuple[float, PermeabilityLaw], field: tuple[CoaxialLoops | CoaxialDipoles, float], thickness: float
) -> None:
    (sigma, law), (coils, allowed) = material, field
    known = coils_of(coils)
    lines = fields.coaxial_lines(
        FREQUENCY, known.source_radius_m, known.victim_radius_m, known.gap_sum_m, fields.REFERENCE_RULE
    )
    medium, film = Medium(law(FREQUENCY), sigma), (air(FREQUENCY), 30e-6)
    exact = fields.attenuation_db(lines, [(medium, 2 * thickness)])
    here = exact < MEASURABLE_DB
    found = sheets_db(tuple(FREQUENCY), known, sigma, law, thickness, 2)
    np.testing.assert_allclose(found[here], exact[here], rtol=0.0, atol=allowed)
    assert np.all(np.isfinite(found))
    apart = fields.attenuation_db(lines, [(medium, thickness), film, (medium, thickness)])
    spaced = sheets_db(tuple(FREQUENCY), known, sigma, law, thickness, 2, 30e-6)
    here = apart < MEASURABLE_DB
    np.testing.assert_allclose(spaced[here], apart[here], rtol=0.0, atol=allowed)
