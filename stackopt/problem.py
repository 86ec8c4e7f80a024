"""The frozen problem: materials, requirements, rules. Everything in SI; made by the readers, used by everyone.

These classes check what makes them meaningless (a negative gauge, a falling frequency); what a *file* may say is
checked by the readers, which know where each value stands.
"""

from __future__ import annotations

import copyreg
import itertools
import math
from collections.abc import Mapping
from dataclasses import dataclass, field
from types import MappingProxyType

import numpy as np
from numpy.typing import NDArray

from stackopt.physics.permeability import Constant, PermeabilityLaw
from stackopt.units import format_thickness

NON_MAGNETIC = Constant(1.0)
OBJECTIVES = ("mass", "cost", "thickness", "sheets", "margin", "heat")
PROVABLE_OBJECTIVES = ("mass", "cost", "thickness", "sheets")
"""Objectives that only grow when a sheet is added."""
ASSUMPTIONS = ("nominal", "worst", "yield")
"""What values of the materials a search may assume."""


def _read_only(content: dict[str, object]) -> MappingProxyType[str, object]:
    return MappingProxyType(content)


# Problems travel to worker processes; a read-only view of a dictionary does not know by itself how.
copyreg.pickle(MappingProxyType, lambda view: (_read_only, (dict(view),)))


@dataclass(frozen=True)
class Tolerance:
    """Relative tolerance of a material's values, each as (down, up), for example (-0.5, 1.0)."""

    thickness: tuple[float, float] = (0.0, 0.0)
    conductivity: tuple[float, float] = (0.0, 0.0)
    permeability: tuple[float, float] = (0.0, 0.0)


@dataclass(frozen=True)
class Material:
    """What is known of one purchasable material.

    ``gauges_m`` rise; a material with neither gauges nor a thickness range serves only as bond or fixed layer.
    ``price_per_m2`` maps a thickness in m to a price; one of the two prices is enough, both may be absent.
    """

    name: str
    conductivity_s_per_m: float
    density_kg_per_m3: float
    permeability: PermeabilityLaw = NON_MAGNETIC
    permittivity: float = 1.0
    gauges_m: tuple[float, ...] = ()
    thickness_range_m: tuple[float, float] | None = None
    price_per_kg: float | None = None
    price_per_m2: tuple[tuple[float, float], ...] = ()
    saturation_t: float | None = None
    rayleigh_m_per_a: float | None = None
    anodic_index_v: float | None = None
    tolerance: Tolerance = Tolerance()
    notes: str = ""
    origin: Mapping[str, str] = field(default_factory=dict, hash=False)

    def __post_init__(self) -> None:
        object.__setattr__(self, "origin", MappingProxyType(dict(self.origin)))
        values = (self.conductivity_s_per_m, self.density_kg_per_m3, self.permittivity, *self.gauges_m)
        if not all(math.isfinite(value) and value >= 0.0 for value in values):
            raise ValueError(f"material {self.name!r} has a negative or non-finite value")

    def mass_kg_per_m2(self, thickness_m: float) -> float:
        """Mass of a square metre of the given thickness, kg."""
        return self.density_kg_per_m3 * thickness_m

    def price(self, thickness_m: float) -> float | None:
        """Price of a square metre of the given thickness, or None where the set gives none."""
        for gauge_m, price in self.price_per_m2:
            if math.isclose(gauge_m, thickness_m, rel_tol=1e-9):
                return price
        return None if self.price_per_kg is None else self.price_per_kg * self.mass_kg_per_m2(thickness_m)


@dataclass(frozen=True)
class MaterialSet:
    """Materials with their prices' currency; ``remarks`` holds, by material, what its user should know."""

    title: str
    currency: str
    materials: Mapping[str, Material] = field(hash=False)
    remarks: Mapping[str, tuple[str, ...]] = field(default_factory=dict, hash=False)

    def __post_init__(self) -> None:
        object.__setattr__(self, "materials", MappingProxyType(dict(self.materials)))
        object.__setattr__(self, "remarks", MappingProxyType(dict(self.remarks)))


@dataclass(frozen=True)
class Sheet:
    """One material at one thickness; also a bond film or a fixed layer."""

    material: str
    thickness_m: float

    def __str__(self) -> str:
        return f"{self.material} {format_thickness(self.thickness_m)}"


Stack = tuple[Sheet, ...]
"""Sheets from the source side to the victim side."""


def format_stack(stack: Stack) -> str:
    """Write a stack as text, source side first.

    Examples
    --------
    >>> format_stack((Sheet("steel", 150e-6), Sheet("copper", 35e-6)))
    'steel 150um / copper 35um'
    """
    return " / ".join(str(sheet) for sheet in stack)


@dataclass(frozen=True)
class PlaneWave:
    """Far field at an angle from the normal; ``polarisation`` is "TE" or "TM"."""

    angle_rad: float = 0.0
    polarisation: str = "TE"

    kind = "plane wave"


@dataclass(frozen=True)
class MagneticNearField:
    """Wave impedance of a small loop at a distance, the same on both sides."""

    distance_m: float

    kind = "magnetic near field"


@dataclass(frozen=True)
class ElectricNearField:
    """Wave impedance of a short dipole at a distance, the same on both sides."""

    distance_m: float

    kind = "electric near field"


@dataclass(frozen=True)
class CoaxialLoops:
    """Two loops on one axis; the gaps run from source plane to first face and from last face to victim plane."""

    source_radius_m: float
    victim_radius_m: float
    source_gap_m: float
    victim_gap_m: float

    kind = "coaxial loops"

    @property
    def gap_sum_m(self) -> float:
        """Distance between the loops without any stack, m."""
        return self.source_gap_m + self.victim_gap_m


@dataclass(frozen=True)
class CoaxialDipoles:
    """Coaxial loops of vanishing radii."""

    source_gap_m: float
    victim_gap_m: float

    kind = "coaxial dipoles"

    @property
    def gap_sum_m(self) -> float:
        """Distance between the dipoles without any stack, m."""
        return self.source_gap_m + self.victim_gap_m


Field = PlaneWave | MagneticNearField | ElectricNearField | CoaxialLoops | CoaxialDipoles


@dataclass(frozen=True)
class Mask:
    """Required attenuation: straight lines in dB against log frequency, 0 Hz being a point of its own.

    ``margin_db`` is added to every required value.
    """

    frequency_hz: tuple[float, ...]
    attenuation_db: tuple[float, ...]
    margin_db: float = 0.0
    points_per_decade: int = 8

    def __post_init__(self) -> None:
        frequency = np.asarray(self.frequency_hz)
        if len(frequency) == 0 or len(frequency) != len(self.attenuation_db):
            raise ValueError("a mask needs at least one point, and one attenuation for each frequency")
        if not np.all(np.isfinite(frequency)) or frequency[0] < 0.0 or np.any(np.diff(frequency) <= 0.0):
            raise ValueError("mask frequencies must rise, from 0 Hz or more")

    def grid_hz(self, density: int = 1) -> NDArray[np.float64]:
        """Frequencies at which the mask is checked, Hz, rising: its own points and points in between.

        Parameters
        ----------
        density : int
            Multiplies ``points_per_decade``: 1 for the search grid, 10 for the confirmation.
        """
        points = [frequency for frequency in self.frequency_hz if frequency > 0.0]
        grid = [0.0] if self.frequency_hz[0] == 0.0 else []
        for low, high in itertools.pairwise(points):
            steps = max(1, math.ceil(math.log10(high / low) * self.points_per_decade * density - 1e-9))
            grid.extend(low * (high / low) ** (step / steps) for step in range(steps))
        return np.array(grid + points[-1:])

    def required_db(self, frequency_hz: NDArray[np.float64]) -> NDArray[np.float64]:
        """Return the required attenuation with the margin, dB, at frequencies within the mask, shape (frequency,)."""
        frequency = np.asarray(frequency_hz, dtype=float)
        points, levels = np.array(self.frequency_hz), np.array(self.attenuation_db)
        positive = points > 0.0
        required = np.empty(frequency.shape)
        static = frequency == 0.0
        required[static] = levels[0]
        if np.any(~static):
            required[~static] = np.interp(np.log(frequency[~static]), np.log(points[positive]), levels[positive])
        return required + self.margin_db


@dataclass(frozen=True)
class Drive:
    """What feeds the source of coaxial loops or dipoles, and what it may do to the stack and to the source itself.

    ``points`` are (frequency in Hz, peak): ampere-turns for loops, A m^2 for dipoles. ``saturation_fraction`` is the
    largest peak flux density in a layer over the saturation of its material. Limits of None are absent; the limit on
    the relative change of inductance needs the source's turns and inductance.
    """

    points: tuple[tuple[float, float], ...]
    saturation_fraction: float = 0.5
    max_heat_w: float | None = None
    max_inductance_change: float | None = None
    source_turns: float | None = None
    source_inductance_h: float | None = None


@dataclass(frozen=True)
class Requirement:
    """One field with its mask, and what drives it where that is known."""

    name: str
    field: Field
    mask: Mask
    drive: Drive | None = None


@dataclass(frozen=True)
class StackRules:
    """What a stack may be. Limits of None are absent; ``source_side`` and ``victim_side`` are the fixed layers."""

    max_sheets: int
    max_thickness_m: float | None = None
    max_mass_kg_per_m2: float | None = None
    max_cost_per_m2: float | None = None
    bond: Sheet | None = None
    source_side: Stack = ()
    victim_side: Stack = ()
    first: tuple[str, ...] | None = None
    last: tuple[str, ...] | None = None
    max_anodic_gap_v: float | None = None
    cost_per_sheet: float = 0.0


@dataclass(frozen=True)
class SearchSettings:
    """How to search: objectives in the user's order, the seed and the population.

    ``assume`` says for which values of the materials the mask must be met: "nominal", "worst" (every corner of the
    tolerances) or "yield" (with the probability ``yield_goal``).
    """

    objectives: tuple[str, ...] = ("mass", "cost", "thickness")
    random_seed: int = 1
    population: int = 200
    assume: str = "nominal"
    yield_goal: float = 0.95


@dataclass(frozen=True)
class Problem:
    """Everything a search needs.

    ``materials`` holds every material of the set; ``use`` names those whose gauges may be sheets of a stack.
    ``remarks`` are the things the readers noticed that a user should know, such as a stretched permeability table.
    """

    title: str
    currency: str
    materials: Mapping[str, Material] = field(hash=False)
    use: tuple[str, ...]
    requirements: tuple[Requirement, ...]
    rules: StackRules
    search: SearchSettings = SearchSettings()
    remarks: tuple[str, ...] = ()
    name: str = "problem"
    files: tuple[str, ...] = ()

    def __post_init__(self) -> None:
        object.__setattr__(self, "materials", MappingProxyType(dict(self.materials)))

    @property
    def sheets(self) -> Stack:
        """Every purchasable sheet of the materials in use, in the order of ``use`` and rising gauges."""
        return tuple(Sheet(name, gauge) for name in self.use for gauge in self.materials[name].gauges_m)

    @property
    def continuous(self) -> tuple[str, ...]:
        """Materials in use that come in any thickness of a range."""
        return tuple(name for name in self.use if self.materials[name].thickness_range_m is not None)
