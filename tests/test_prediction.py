import math

import numpy as np
import pytest
from builders import LOOPS, build_problem

from stackopt import evaluate
from stackopt.compiled import compile_problem
from stackopt.errors import InputError
from stackopt.prediction import predict, totals
from stackopt.problem import Mask, PlaneWave, Sheet

COPPER, STEEL = Sheet("copper", 35e-6), Sheet("steel", 100e-6)
BOND = Sheet("film", 25e-6)


def test_totals_are_what_a_hand_calculation_gives() -> None:
    problem = build_problem(bond=BOND, cost_per_sheet=2.5)
    mass, cost, thickness = totals(problem, (STEEL, COPPER))
    assert mass == pytest.approx(7850 * 100e-6 + 8890 * 35e-6 + 1000 * 25e-6, rel=1e-9)
    assert cost == pytest.approx(7850 * 100e-6 * 3 + 8890 * 35e-6 * 14 + 1000 * 25e-6 * 10 + 5, rel=1e-6)
    assert thickness == pytest.approx(160e-6, rel=1e-12)


def test_totals_are_those_of_the_search_to_the_last_digit() -> None:
    problem = build_problem(bond=BOND, cost_per_sheet=1.7)
    compiled = compile_problem(problem)
    stacks = [problem.sheets[:3], problem.sheets[5:9], problem.sheets[2:3]]
    sums = evaluate.sums(compiled, evaluate.encode(compiled, stacks))
    for stack, (mass, cost, thickness) in zip(stacks, sums.tolist(), strict=True):
        assert totals(problem, stack) == (mass / 1e12, cost / 1e6, thickness / 1e12)


def test_the_cost_of_a_sheet_without_price_is_unknown() -> None:
    assert math.isnan(totals(build_problem(), (Sheet("lacquer", 1e-4), COPPER))[1])


def test_prediction_is_the_readable_cascade_against_each_mask() -> None:
    problem = build_problem(LOOPS, PlaneWave(), masks=(Mask((1e3, 1e5), (1.0, 2.0), 3.0), Mask((1e6,), (20.0,))))
    stacks = [(STEEL, COPPER), (COPPER,)]
    predictions = predict(problem, stacks)
    for number, requirement in enumerate(problem.requirements):
        expected = evaluate.attenuation(problem, stacks, number)
        for prediction, values in zip(predictions, expected, strict=True):
            curve = prediction.curves[number]
            np.testing.assert_array_equal(curve.attenuation_db, values)
            np.testing.assert_array_equal(curve.margin_db, values - requirement.mask.required_db(curve.frequency_hz))


def test_the_smallest_margin_of_all_requirements_decides() -> None:
    easy, hard = Mask((1e6, 1e7), (1.0, 1.0)), Mask((1e3, 1e4), (50.0, 90.0))
    problem = build_problem(PlaneWave(), LOOPS, masks=(easy, hard))
    (prediction,) = predict(problem, [(COPPER,)])
    assert prediction.row.requirement == "requirement 1"
    assert prediction.row.tightest_hz == pytest.approx(1e4)
    assert prediction.row.margin_db == min(float(curve.margin_db.min()) for curve in prediction.curves)
    assert not prediction.meets_mask
    (other,) = predict(build_problem(PlaneWave(), masks=(easy,)), [(COPPER,)])
    assert other.meets_mask


def test_more_density_means_more_frequencies() -> None:
    problem = build_problem()
    coarse, fine = (predict(problem, [(COPPER,)], density)[0].curves[0] for density in (1, 4))
    assert len(fine.frequency_hz) > 3 * len(coarse.frequency_hz)


def test_rules_that_a_stack_breaks_are_named() -> None:
    problem = build_problem(
        use=("copper", "aluminium", "steel"),
        max_sheets=2,
        max_thickness_m=0.2e-3,
        max_mass_kg_per_m2=1.0,
        max_cost_per_m2=10.0,
        first=("steel",),
        last=("copper",),
        max_anodic_gap_v=0.25,
    )
    stack = (Sheet("copper", 40e-6), Sheet("aluminium", 50e-6), Sheet("nickel alloy", 200e-6))
    text = "\n".join(predict(problem, [stack])[0].broken)
    for part in (
        "3 sheets, and max_sheets is 2",
        "290um thick, and max_thickness is 200um",
        "kg/m^2, and max_mass is 1 kg/m^2",
        "EUR/m^2, and max_cost is 10 EUR/m^2",
        "copper 40um is not a gauge",
        "nickel alloy is not among the sheets in use",
        "copper is on the source face, and first allows steel",
        "nickel alloy is on the victim face, and last allows copper",
        "copper and aluminium touch and differ by more than max_anodic_gap, 0.25 V",
    ):
        assert part in text


def test_a_stack_within_the_rules_breaks_none() -> None:
    problem = build_problem(max_sheets=2, max_thickness_m=135e-6, first=("steel",), max_anodic_gap_v=0.5)
    assert predict(problem, [(STEEL, COPPER)])[0].broken == ()


def test_an_insulating_bond_keeps_metals_apart() -> None:
    stack = (Sheet("aluminium", 50e-6), COPPER)
    bonded, bare = (build_problem(max_anodic_gap_v=0.25, bond=bond) for bond in (BOND, None))
    assert predict(bonded, [stack])[0].broken == ()
    assert len(predict(bare, [stack])[0].broken) == 1


def test_touching_a_fixed_layer_is_named() -> None:
    problem = build_problem(max_anodic_gap_v=0.25, source_side=(Sheet("aluminium", 1e-3),))
    (prediction,) = predict(problem, [(COPPER,)])
    assert prediction.broken == (
        "copper touches aluminium on the source side, and they differ by more than max_anodic_gap, 0.25 V",
    )


def test_any_thickness_of_a_range_is_in_stock() -> None:
    from dataclasses import replace

    problem = build_problem()
    materials = dict(problem.materials)
    materials["steel"] = replace(materials["steel"], gauges_m=(), thickness_range_m=(0.1e-3, 1e-3))
    ranged = build_problem(materials=materials)
    broken = [prediction.broken for prediction in predict(ranged, [(Sheet("steel", t),) for t in (1e-4, 3.3e-4, 2e-3)])]
    assert broken == [(), (), ("steel 2mm is not a gauge of the material set",)]


def test_unknown_material_is_refused() -> None:
    with pytest.raises(InputError, match="unobtainium"):
        predict(build_problem(), [(Sheet("unobtainium", 1e-3),)])
