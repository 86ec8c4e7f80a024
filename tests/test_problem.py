from __future__ import annotations

import dataclasses

import numpy as np
import pytest
from builders import LOOPS, MATERIALS, build_problem, film, ranged

from stackopt.problem import (
    CoaxialDipoles,
    ElectricNearField,
    MagneticNearField,
    Mask,
    Material,
    MaterialSet,
    PlaneWave,
    Sheet,
    format_stack,
)

COPPER = MATERIALS["copper"]


@pytest.mark.parametrize(
    "bad",
    [
        {"conductivity_s_per_m": -1.0},
        {"density_kg_per_m3": float("nan")},
        {"permittivity": float("inf")},
        {"gauges_m": (1e-3, -1e-3)},
    ],
)
def test_materials_hold_numbers_that_mean_something(bad: dict) -> None:
    with pytest.raises(ValueError, match="'copper' has a negative or non-finite value"):
        dataclasses.replace(COPPER, **bad)


def test_prices() -> None:
    """A gauge's own price comes first, then the one by weight; without either there is none."""
    by_area = ((18e-6, 4.5), (35e-6, 6.0))
    both = Material("foil", 0.0, 8000.0, price_per_m2=by_area, price_per_kg=10.0)
    assert both.price(35e-6) == 6.0
    assert both.price(35e-6 * (1.0 + 1e-12)) == 6.0
    assert both.price(50e-6) == pytest.approx(10.0 * 8000.0 * 50e-6)
    assert Material("foil", 0.0, 8000.0, price_per_m2=by_area).price(50e-6) is None
    assert Material("foil", 0.0, 8000.0).price(18e-6) is None


def test_mass() -> None:
    assert Material("foil", 0.0, 8000.0).mass_kg_per_m2(0.5e-3) == pytest.approx(4.0)


def test_sheets_are_those_of_the_materials_in_use() -> None:
    problem = build_problem(use=["laminate", "film", "aluminium"])
    assert [str(sheet) for sheet in problem.sheets] == [
        "laminate 20um",
        "laminate 80um",
        "aluminium 9um",
        "aluminium 50um",
        "aluminium 200um",
        "aluminium 1mm",
    ]
    assert problem.continuous == ()


def test_ranges_of_thickness() -> None:
    held = {**MATERIALS, "plate": ranged("plate", "copper", 1e-4, 2e-3)}
    problem = build_problem(materials=held, use=["plate", "laminate"])
    assert problem.continuous == ("plate",)
    assert {sheet.material for sheet in problem.sheets} == {"laminate"}


def test_stacks_as_text() -> None:
    assert format_stack((Sheet("nickel alloy", 1.5e-3), film(25.0))) == "nickel alloy 1.5mm / film 25um"
    assert format_stack(()) == ""


def test_nothing_can_be_changed() -> None:
    problem = build_problem()
    held = MaterialSet("Invented", "EUR", MATERIALS, {"copper": ("soft",)})
    for owner, name in ((problem, "title"), (COPPER, "density_kg_per_m3"), (LOOPS, "source_gap_m"), (held, "title")):
        with pytest.raises(dataclasses.FrozenInstanceError):
            setattr(owner, name, 1)
    for mapping in (problem.materials, held.materials, held.remarks, COPPER.origin):
        with pytest.raises(TypeError):
            mapping["copper"] = COPPER  # type: ignore[index]


def test_problems_do_not_share_the_mapping_they_are_made_from() -> None:
    held = dict(MATERIALS)
    problem = build_problem(materials=held)
    held.clear()
    assert "copper" in problem.materials


def test_the_words_for_fields() -> None:
    fields = (PlaneWave(), MagneticNearField(1.0), ElectricNearField(1.0), LOOPS, CoaxialDipoles(1e-3, 2e-3))
    assert [field.kind for field in fields] == [
        "plane wave",
        "magnetic near field",
        "electric near field",
        "coaxial loops",
        "coaxial dipoles",
    ]
    assert LOOPS.gap_sum_m == pytest.approx(45e-3)
    assert CoaxialDipoles(1e-3, 2e-3).gap_sum_m == pytest.approx(3e-3)


@pytest.mark.parametrize(
    ("frequency", "attenuation", "message"),
    [
        ((), (), "at least one point"),
        ((1.0, 2.0), (3.0,), "one attenuation for each frequency"),
        ((2.0, 1.0), (3.0, 3.0), "must rise"),
        ((1.0, 1.0), (3.0, 3.0), "must rise"),
        ((-1.0, 1.0), (3.0, 3.0), "from 0 Hz"),
        ((1.0, float("inf")), (3.0, 3.0), "must rise"),
        ((float("nan"),), (3.0,), "must rise"),
    ],
)
def test_masks_that_mean_nothing(frequency: tuple, attenuation: tuple, message: str) -> None:
    with pytest.raises(ValueError, match=message):
        Mask(frequency, attenuation)


def test_grid_of_a_mask() -> None:
    mask = Mask((10.0, 100.0, 150.0), (1.0, 2.0, 3.0), points_per_decade=2)
    np.testing.assert_allclose(mask.grid_hz(), [10.0, 10.0 * 10**0.5, 100.0, 150.0])
    assert len(mask.grid_hz(10)) == 20 + 4 + 1


def test_whole_decades_get_no_point_too_many() -> None:
    assert len(Mask((1e-3, 1e6), (0.0, 0.0), points_per_decade=8).grid_hz()) == 9 * 8 + 1


def test_zero_hertz_is_a_point_of_its_own() -> None:
    mask = Mask((0.0, 10.0, 1000.0), (30.0, 10.0, 20.0), margin_db=2.0, points_per_decade=1)
    np.testing.assert_allclose(mask.grid_hz(), [0.0, 10.0, 100.0, 1000.0])
    np.testing.assert_allclose(mask.required_db(mask.grid_hz()), [32.0, 12.0, 17.0, 22.0])


def test_a_mask_of_one_point() -> None:
    for point in (0.0, 50.0):
        mask = Mask((point,), (30.0,))
        np.testing.assert_array_equal(mask.grid_hz(10), [point])
        np.testing.assert_array_equal(mask.required_db(mask.grid_hz()), [30.0])
