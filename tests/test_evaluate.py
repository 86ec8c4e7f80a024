from __future__ import annotations

import numpy as np
import pytest
from builders import LOOPS, build_problem, film

from stackopt import evaluate
from stackopt.compiled import CompiledProblem, compile_problem, sheet_sums
from stackopt.errors import InputError
from stackopt.problem import MagneticNearField, Mask, PlaneWave, Sheet

MASK = Mask((1e3, 1e6), (10.0, 40.0), margin_db=3.0, points_per_decade=2)
COPPER, FOIL, STEEL = Sheet("copper", 35e-6), Sheet("copper", 9e-6), Sheet("steel", 100e-6)
ALUMINIUM = Sheet("aluminium", 50e-6)


def compiled_with(**rules: object) -> CompiledProblem:
    kinds = (PlaneWave(), MagneticNearField(0.05))
    use = ["copper", "steel", "aluminium"]
    return compile_problem(build_problem(*kinds, masks=[MASK], use=use, max_sheets=3, **rules))


def test_codes_and_stacks() -> None:
    compiled = compiled_with()
    stacks = [(STEEL, COPPER), (), (FOIL,), (COPPER, STEEL, COPPER)]
    codes = evaluate.encode(compiled, stacks)
    assert codes.shape == (4, 3)
    np.testing.assert_array_equal(codes[1], 0)
    assert evaluate.decode(compiled, codes) == stacks
    np.testing.assert_array_equal(evaluate.count_sheets(codes), [2, 0, 1, 3])


def test_longer_stacks_than_allowed_can_be_asked_about() -> None:
    compiled = compiled_with()
    codes = evaluate.encode(compiled, [(FOIL,) * 5, (STEEL,)])
    assert codes.shape == (2, 5)
    assert evaluate.allowed(compiled, codes).tolist() == [False, True]
    assert evaluate.attenuation_rows(compiled, codes).shape == (2, 14)


def test_sheets_that_are_not_tabulated() -> None:
    with pytest.raises(InputError, match="copper 12um is not among the problem's sheets"):
        evaluate.encode(compiled_with(), [(STEEL, Sheet("copper", 12e-6))])


def test_sums_with_bonds_and_handling() -> None:
    compiled = compiled_with(bond=film(25.0), cost_per_sheet=2.5)
    codes = evaluate.encode(compiled, [(STEEL, COPPER, COPPER), (STEEL,), ()])
    steel, copper, bond = (np.array(sheet_sums(compiled.problem, sheet)) for sheet in (STEEL, COPPER, film(25.0)))
    handling = np.array([0, 2_500_000, 0])
    expected = [steel + 2 * copper + 2 * bond + 3 * handling, steel + handling, [0, 0, 0]]
    np.testing.assert_array_equal(evaluate.sums(compiled, codes), expected)


def allowed(stacks: list, **rules: object) -> list[bool]:
    compiled = compiled_with(**rules)
    codes = evaluate.encode(compiled, stacks)
    given = evaluate.allowed(compiled, codes, evaluate.sums(compiled, codes))
    np.testing.assert_array_equal(given, evaluate.allowed(compiled, codes))
    return given.tolist()


def test_what_is_allowed() -> None:
    assert allowed([(), (STEEL,), (STEEL, COPPER, FOIL), (STEEL,) * 4]) == [False, True, True, False]


def test_limits_hold_for_the_sums() -> None:
    """At the limit itself, and one step beyond it."""
    stacks = [(COPPER,), (COPPER, FOIL)]
    assert allowed(stacks, max_thickness_m=35e-6) == [True, False]
    assert allowed(stacks, max_thickness_m=44e-6) == [True, True]
    assert allowed(stacks, max_thickness_m=44e-6, bond=film(1.0)) == [True, False]
    assert allowed(stacks, max_mass_kg_per_m2=35e-6 * 8890.0) == [True, False]
    assert allowed(stacks, max_cost_per_m2=10.0) == [True, True]
    assert allowed(stacks, max_cost_per_m2=10.0, cost_per_sheet=5.0) == [True, False]


def test_faces_and_neighbours() -> None:
    stacks = [(STEEL, COPPER), (COPPER, STEEL), (STEEL,), (COPPER,)]
    assert allowed(stacks, first=("steel",)) == [True, False, True, False]
    assert allowed(stacks, last=("copper",)) == [True, False, False, True]
    assert allowed(stacks, first=("steel",), last=("copper",)) == [True, False, False, False]
    gap = {"max_anodic_gap_v": 0.1}
    stacks = [(STEEL, ALUMINIUM), (STEEL, COPPER), (ALUMINIUM, STEEL, COPPER), (COPPER, FOIL)]
    assert allowed(stacks, **gap) == [True, False, False, True]
    assert allowed(stacks, **gap, bond=film(25.0)) == [True, True, True, True]


def test_margins() -> None:
    compiled = compiled_with()
    codes = evaluate.encode(compiled, [(FOIL,), (STEEL, COPPER)])
    margin, tightest = evaluate.margins(compiled, codes)
    loss = evaluate.attenuation_rows(compiled, codes)
    assert loss.shape == (2, 14)
    for n in range(2):
        assert margin[n] == loss[n, tightest[n]] - compiled.rows.required_db[tightest[n]]
        assert margin[n] == np.min(loss[n] - compiled.rows.required_db)
    assert margin[1] > margin[0]


def test_objectives_in_the_order_of_the_problem() -> None:
    problem = build_problem(PlaneWave(), masks=[MASK], objectives=("margin", "thickness", "sheets", "cost", "mass"))
    compiled = compile_problem(problem)
    codes = evaluate.encode(compiled, [(STEEL, COPPER)])
    totals = evaluate.sums(compiled, codes)
    values = evaluate.objective_values(compiled, codes, totals, np.array([1.25]))
    assert values.tolist() == [[-1_250_000_000, totals[0, 2], 2, totals[0, 1], totals[0, 0]]]


def test_excess_tells_how_far_beyond_the_limits() -> None:
    compiled = compiled_with(max_thickness_m=35e-6)
    codes = evaluate.encode(compiled, [(COPPER,), (COPPER, COPPER), ()])
    excess = evaluate.excess(compiled, codes, evaluate.sums(compiled, codes))
    assert excess.tolist() == pytest.approx([0.0, 1.0, 1.0])


PROBLEM = build_problem(PlaneWave(), LOOPS, masks=[MASK], bond=film(25.0))


def test_predictions_on_the_search_grid() -> None:
    loss = evaluate.attenuation(PROBLEM, [(STEEL, COPPER), (FOIL,)])
    assert loss.shape == (2, len(MASK.grid_hz()))
    assert np.all(loss[0] > loss[1])


def test_predictions_of_any_thickness_at_any_frequency() -> None:
    loss = evaluate.attenuation(PROBLEM, [[("copper", 12.3e-6)], (Sheet("film", 1e-3),)], 1, np.array([123.0, 4.5e7]))
    assert loss.shape == (2, 2)
    assert loss[0, 1] > 40.0
    assert evaluate.attenuation(PROBLEM, [[("copper", 12.3e-6)]], 1, 123.0)[0, 0] == loss[0, 0]


def test_predictions_put_the_bond_between_sheets() -> None:
    written = evaluate.attenuation(PROBLEM, [(STEEL, COPPER)], 1)
    plain = build_problem(PlaneWave(), LOOPS, masks=[MASK])
    np.testing.assert_array_equal(evaluate.attenuation(plain, [(STEEL, film(25.0), COPPER)], 1), written)
    assert np.max(np.abs(evaluate.attenuation(plain, [(STEEL, COPPER)], 1) - written)) > 1e-6


def test_predictions_of_stacks_as_text() -> None:
    as_text = evaluate.attenuation(PROBLEM, ["steel 100um / copper 35um"], 1)
    np.testing.assert_array_equal(as_text, evaluate.attenuation(PROBLEM, [(STEEL, COPPER)], 1))


def test_no_stacks_and_no_sheets() -> None:
    assert evaluate.attenuation(PROBLEM, []).shape == (0, len(MASK.grid_hz()))
    np.testing.assert_array_equal(evaluate.attenuation(PROBLEM, [()], 1), np.zeros((1, len(MASK.grid_hz()))))


@pytest.mark.parametrize("requirement", [2, -1])
def test_requirements_that_do_not_exist(requirement: int) -> None:
    with pytest.raises(InputError, match=f"requirement {requirement} does not exist; the problem has 2"):
        evaluate.attenuation(PROBLEM, [(STEEL,)], requirement)


@pytest.mark.parametrize("sheet", [("lead", 1e-3), ("copper", 0.0), ("copper", -1e-3), ("copper", float("nan"))])
def test_sheets_that_make_no_sense(sheet: tuple[str, float]) -> None:
    with pytest.raises(InputError, match="needs a material of the problem and a thickness above 0"):
        evaluate.attenuation(PROBLEM, [[("steel", 1e-4), sheet]])
