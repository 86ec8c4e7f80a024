"""What a fit may vary of a material: conductivity and the values of a permeability law, on scales that suit them."""

from __future__ import annotations

import math
from collections.abc import Mapping
from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from stackopt.physics.permeability import ColeCole, Constant, Debye, Lorentz, PermeabilityLaw

Real = NDArray[np.float64]

NON_MAGNETIC = Constant(1.0)
CONDUCTIVITY_S_PER_M = (1e-3, 1e9)
SUSCEPTIBILITY = (1e-3, 1e6)


@dataclass(frozen=True)
class Quantity:
    """One value of a material, varied between bounds.

    Parameters
    ----------
    name, unit : str
        Key in a material entry, and SI unit ("" for none).
    low, high : float
        Bounds of the value.
    above : float
        The fit varies log(value - above); NaN for the value itself.
    """

    name: str
    unit: str
    low: float
    high: float
    above: float = 0.0

    @property
    def is_log(self) -> bool:
        """Whether the fit varies a logarithm."""
        return not math.isnan(self.above)

    def inside(self, value: float) -> float:
        """Return the fit's variable for a value."""
        return math.log(value - self.above) if self.is_log else value

    def value(self, inside: float) -> float:
        """Return the value for the fit's variable."""
        return self.above + math.exp(inside) if self.is_log else inside

    @property
    def bounds(self) -> tuple[float, float]:
        """Bounds of the fit's variable."""
        return self.inside(self.low), self.inside(self.high)


CONDUCTIVITY = Quantity("conductivity", "S/m", *CONDUCTIVITY_S_PER_M)
INITIAL = Quantity("initial", "", 1.0 + SUSCEPTIBILITY[0], 1.0 + SUSCEPTIBILITY[1], above=1.0)
BROADENING = Quantity("broadening", "", 0.0, 0.95, above=math.nan)
HIGH_SHARE = Quantity("high_share", "", 1e-3, 0.98)
"""(high_frequency - 1)/(initial - 1): keeps the high-frequency value below the initial one."""


@dataclass(frozen=True)
class Hypothesis:
    """A material of which some values are free.

    Parameters
    ----------
    law : str
        Word of the law, or "" where the permeability is known.
    quantities : tuple of Quantity
        The free values.
    conductivity_s_per_m : float or None
        Known conductivity; None when it is free.
    permeability : PermeabilityLaw or None
        Known permeability; None when it is free.
    """

    law: str
    quantities: tuple[Quantity, ...]
    conductivity_s_per_m: float | None
    permeability: PermeabilityLaw | None

    @property
    def name(self) -> str:
        """What the law is called in a list of laws."""
        if self.permeability is NON_MAGNETIC:
            return "non-magnetic"
        if self.permeability is not None:
            return "known permeability"
        plus = " with high_frequency" if HIGH_SHARE in self.quantities else ""
        return f"{self.law}{plus}"

    def values(self, inside: Real) -> dict[str, float]:
        """Return the free values by name."""
        return {quantity.name: quantity.value(float(x)) for quantity, x in zip(self.quantities, inside, strict=True)}

    def material(self, inside: Real) -> tuple[float, PermeabilityLaw]:
        """Return conductivity (S/m) and permeability for the fit's variables, shape (quantity,)."""
        values = self.values(inside)
        sigma = values.get("conductivity", self.conductivity_s_per_m)
        assert sigma is not None
        return sigma, self.permeability or make_law(self.law, values)


def make_law(law: str, values: Mapping[str, float]) -> PermeabilityLaw:
    """Return the law of a word with its values; raises ValueError for another word."""
    initial = values["initial"]
    high = 1.0 + (initial - 1.0) * values.get("high_share", 0.0)
    if law == "constant":
        return Constant(initial)
    if law == "debye":
        return Debye(initial, values["relaxation"], high)
    if law == "cole-cole":
        return ColeCole(initial, values["relaxation"], values["broadening"], high)
    if law == "lorentz":
        return Lorentz(initial, values["resonance"], values["damping"], high)
    raise ValueError(f"law is constant, debye, cole-cole or lorentz, not {law!r}")


def hypotheses(
    frequency_hz: tuple[float, float], conductivity_s_per_m: float | None, permeability: PermeabilityLaw | None
) -> list[Hypothesis]:
    """Return the materials to be tried, simplest first.

    Parameters
    ----------
    frequency_hz : tuple of float
        Lowest and highest measured frequency, Hz; laws may turn from a third of the one to thirty times the other.
    conductivity_s_per_m, permeability : float, PermeabilityLaw or None
        What is known.
    """
    first = (CONDUCTIVITY,) if conductivity_s_per_m is None else ()
    if permeability is not None:
        return [Hypothesis("", first, conductivity_s_per_m, permeability)]
    span = (frequency_hz[0] / 3.0, frequency_hz[1] * 30.0)
    relaxation, resonance, damping = (Quantity(word, "Hz", *span) for word in ("relaxation", "resonance", "damping"))
    laws: list[tuple[str, tuple[Quantity, ...]]] = [
        ("constant", ()),
        ("debye", (relaxation,)),
        ("debye", (relaxation, HIGH_SHARE)),
        ("cole-cole", (relaxation, BROADENING)),
        ("cole-cole", (relaxation, BROADENING, HIGH_SHARE)),
        ("lorentz", (resonance, damping)),
    ]
    free = [Hypothesis(law, (*first, INITIAL, *more), conductivity_s_per_m, None) for law, more in laws]
    return [Hypothesis("constant", first, None, NON_MAGNETIC), *free] if first else free
