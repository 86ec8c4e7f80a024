from __future__ import annotations

from dataclasses import fields as fields_of

import numpy as np
import pytest
from builders import LOOPS, MATERIALS, build_problem, film, medium, ranged

from stackopt import model
from stackopt.blocks import ENDING, LANES, SHEET, STATE
from stackopt.compiled import (
    COST_UNIT,
    MASS_UNIT,
    NO_LIMIT,
    THICKNESS_UNIT,
    CompiledProblem,
    compile_problem,
    sheet_sums,
)
from stackopt.physics import fields, line
from stackopt.physics.media import air
from stackopt.problem import ElectricNearField, MagneticNearField, Mask, Material, PlaneWave, Sheet
from stackopt.rows import thickest_stack_m

FAR = Mask((1e3, 1e6), (10.0, 40.0), margin_db=3.0, points_per_decade=2)
NEAR = Mask((0.0, 50.0, 5e3), (0.0, 5.0, 20.0), points_per_decade=1)
ROUGH = {"error_db": 2.0}


def two_requirements(**rules: object) -> CompiledProblem:
    problem = build_problem(PlaneWave(), LOOPS, masks=[FAR, NEAR], use=["copper", "steel"], **rules)
    return compile_problem(problem, **ROUGH)


def test_rows_are_the_requirements_one_after_the_other() -> None:
    rows = two_requirements().rows
    np.testing.assert_array_equal(rows.requirement, [0] * 7 + [1] * 4)
    np.testing.assert_array_equal(rows.frequency_hz, np.concatenate([FAR.grid_hz(), NEAR.grid_hz()]))
    expected = np.concatenate([FAR.required_db(FAR.grid_hz()), NEAR.required_db(NEAR.grid_hz())])
    np.testing.assert_array_equal(rows.required_db, expected)
    np.testing.assert_array_equal(rows.reach_m, [rows.thickest_m] * 7 + [LOOPS.gap_sum_m] * 4)


def test_blocks_follow_the_rows() -> None:
    compiled = two_requirements()
    rows, tables = compiled.rows, compiled.tables
    counts = [-(-quadrature.lines // LANES) for quadrature in rows.quadrature]
    np.testing.assert_array_equal(np.diff(rows.row_block), [counts[0]] * 7 + [counts[1]] * 4)
    blocks = rows.row_block[-1]
    assert rows.start.shape == (blocks * STATE,)
    assert rows.ending.shape == (blocks * ENDING,)
    assert tables.first.shape == (len(compiled.sheets) * blocks * SHEET,)
    assert tables.first_scale.shape == (len(compiled.sheets), len(rows.frequency_hz))


def test_the_quadrature_is_reported() -> None:
    plane, loops = two_requirements().rows.quadrature
    assert (plane.lines, plane.error_db) == (1, 0.0)
    assert loops.lines >= 12
    assert 0.0 < loops.error_db <= 1.0


def test_tables_cannot_be_written() -> None:
    compiled = two_requirements(bond=film(25.0))
    arrays = [
        getattr(part, entry.name)
        for part in (compiled.rows, compiled.tables, compiled.sums, compiled.rules)
        for entry in fields_of(part)
        if isinstance(getattr(part, entry.name), np.ndarray)
    ]
    assert len(arrays) > 15
    assert not any(array.flags.writeable for array in arrays)


def test_density_multiplies_the_points() -> None:
    problem = build_problem(PlaneWave(), masks=[FAR])
    np.testing.assert_array_equal(compile_problem(problem, density=10).rows.frequency_hz, FAR.grid_hz(10))


def test_further_frequencies_join_their_requirement() -> None:
    """Each once, in order, with the mask's level there; requirements that none are given for stay as they are."""
    problem = build_problem(PlaneWave(), MagneticNearField(0.1), masks=[FAR, NEAR], use=["copper"])
    rows = compile_problem(problem, extra_hz=[[2.5e3, 1e6]]).rows
    here = rows.frequency_hz[rows.requirement == 0]
    np.testing.assert_array_equal(here, np.union1d(FAR.grid_hz(), [2.5e3]))
    np.testing.assert_array_equal(rows.required_db[rows.requirement == 0], FAR.required_db(here))
    np.testing.assert_array_equal(rows.frequency_hz[rows.requirement == 1], NEAR.grid_hz())
    rows = compile_problem(problem, extra_hz=[[], [77.0]]).rows
    assert 77.0 in rows.frequency_hz[rows.requirement == 1]
    assert 77.0 not in rows.frequency_hz[rows.requirement == 0]


def test_other_sheets_on_the_same_rows() -> None:
    compiled = two_requirements()
    odd = (Sheet("copper", 12.3e-6), Sheet("aluminium", 1e-4))
    other = compiled.with_sheets(odd)
    assert other.sheets == odd
    assert other.rows is compiled.rows
    assert other.tables.first_scale.shape == (2, len(compiled.rows.frequency_hz))
    again = compile_problem(compiled.problem, sheets=odd, **ROUGH)
    assert again.sheets == odd
    np.testing.assert_array_equal(again.sums.first, other.sums.first)


def test_no_sheets_at_all_give_empty_tables() -> None:
    none = two_requirements().with_sheets(())
    assert none.tables.first.size == none.sums.first.size == none.rules.first.size == 0
    assert none.rules.neighbours.shape == (0, 0)


def test_without_a_bond_every_position_is_bare() -> None:
    tables = two_requirements().tables
    assert tables.following is tables.first
    assert tables.following_scale is tables.first_scale


def entries_of(table: np.ndarray, scale: np.ndarray, sheet: int, compiled: CompiledProblem) -> np.ndarray:
    """A, B, C and D of a sheet in the first row of a problem whose rows have a single line."""
    planes = table.reshape(len(compiled.sheets), -1, 4, 2, LANES)[sheet, 0, :, :, 0]
    return (planes[:, 0] + 1j * planes[:, 1]) * np.exp(scale[sheet, 0])


def test_a_bond_lies_on_the_source_side_of_following_sheets() -> None:
    problem = build_problem(PlaneWave(), masks=[FAR], use=["copper"], bond=Sheet("lacquer", 2e-3))
    compiled = compile_problem(problem)
    bonds = compile_problem(problem, sheets=(Sheet("lacquer", 2e-3),))
    bare = entries_of(compiled.tables.first, compiled.tables.first_scale, 2, compiled).reshape(2, 2)
    bond = entries_of(bonds.tables.first, bonds.tables.first_scale, 0, bonds).reshape(2, 2)
    following = entries_of(compiled.tables.following, compiled.tables.following_scale, 2, compiled).reshape(2, 2)
    np.testing.assert_allclose(following, bond @ bare, rtol=1e-12)


def test_tables_hold_the_chain_between_terminals() -> None:
    compiled = compile_problem(build_problem(PlaneWave(), masks=[FAR], use=["copper"]))
    lines = compiled.rows.spectra[0]
    first = entries_of(compiled.tables.first, compiled.tables.first_scale, 5, compiled)
    metal = medium(lines.frequency_hz, conductivity=5.8e7)
    copper = line.medium_chain(metal, 500e-6, lines.k, lines.frequency_hz, "TE")
    z0 = lines.terminal[0, 0]
    expected = np.array([copper.a[0, 0], copper.b[0, 0] / z0, copper.c[0, 0] * z0, copper.d[0, 0]])
    np.testing.assert_allclose(first, expected * np.exp(copper.log_scale[0, 0]), rtol=1e-12)


ALLOY = Sheet("nickel alloy", 5e-3)


@pytest.mark.parametrize(
    "sides",
    [
        {},
        {"source_side": (Sheet("steel", 1e-3),), "victim_side": (film(2000.0),)},
        {"source_side": (ALLOY,), "victim_side": (ALLOY,)},
    ],
    ids=["free", "steel before, film behind", "permeable walls"],
)
def test_unshielded_level_has_air_in_the_place_of_the_stack(sides: dict) -> None:
    """As a series in the thickness, from none to the thickest stack, to 1e-10 of the level.

    Between two permeable walls the first micrometres of air count, and a series in thickness over gap does not do.
    """
    kinds = (LOOPS, MagneticNearField(5e-3), ElectricNearField(0.1), PlaneWave(0.6, "TM"))
    problem = build_problem(*kinds, masks=[FAR], use=["steel"], **sides)
    compiled = compile_problem(problem, **ROUGH)
    rows = compiled.rows
    thickness = np.array([0.0, 1e-6, 1e-5, 3e-4, 2.2e-3, rows.thickest_m])
    level = rows.open_level_db(thickness)
    assert level.shape == (6, len(rows.frequency_hz))
    for number, lines in enumerate(rows.spectra):
        before, behind = (
            model.media(problem, side, lines.frequency_hz)
            for side in (problem.rules.source_side, problem.rules.victim_side)
        )
        for n, d in enumerate(thickness):
            value, log_scale = fields.transmitted(lines, [*before, (air(lines.frequency_hz), d), *behind])
            expected = line.DB_PER_NEPER * (np.log(np.abs(value)) - log_scale)
            np.testing.assert_allclose(level[n, rows.requirement == number], expected, rtol=1e-10, atol=1e-10)


def test_thickest_stack() -> None:
    problem = build_problem(max_sheets=3, bond=film(25.0))
    assert thickest_stack_m(problem, problem.sheets) == pytest.approx(3 * 1e-3 + 2 * 25e-6)
    assert thickest_stack_m(problem, [Sheet("copper", 1e-4)]) == pytest.approx(3 * 1e-4 + 2 * 25e-6)
    limited = build_problem(max_sheets=3, max_thickness_m=2e-3)
    assert thickest_stack_m(limited, limited.sheets) == 2e-3
    tight = build_problem(max_sheets=3, max_thickness_m=0.5e-3)
    assert thickest_stack_m(tight, tight.sheets) == 1e-3  # a single sheet beyond the limit can still be asked about
    held = {**MATERIALS, "plate": ranged("plate", "copper", 1e-4, 5e-3)}
    wide = build_problem(max_sheets=2, materials=held, use=["plate"])
    assert thickest_stack_m(wide, [Sheet("plate", 1e-4)]) == pytest.approx(2 * 5e-3)


def test_sums_are_integers() -> None:
    problem = build_problem()
    assert sheet_sums(problem, Sheet("copper", 35e-6)) == (311_150_000_000, 4_356_100, 35_000_000)
    assert sheet_sums(problem, Sheet("lacquer", 5e-6))[1] == 0  # no price is no cost
    assert (MASS_UNIT, COST_UNIT, THICKNESS_UNIT) == (1e12, 1e6, 1e12)


def test_sums_hold_bonds_and_handling() -> None:
    compiled = two_requirements(bond=film(25.0), cost_per_sheet=2.5)
    bond = np.array(sheet_sums(compiled.problem, film(25.0)))
    for number, sheet in enumerate(compiled.sheets):
        alone = np.array(sheet_sums(compiled.problem, sheet)) + np.array([0, 2_500_000, 0])
        np.testing.assert_array_equal(compiled.sums.first[number], alone)
        np.testing.assert_array_equal(compiled.sums.following[number], alone + bond)


def test_limits() -> None:
    rules = two_requirements(max_mass_kg_per_m2=4.0, max_thickness_m=2e-3, max_sheets=6).rules
    np.testing.assert_array_equal(rules.limits, [4 * 10**12, NO_LIMIT, 2 * 10**9])
    assert rules.max_sheets == 6
    assert 16 * NO_LIMIT // 16 == NO_LIMIT  # no limit leaves room for sums


def names_of(compiled: CompiledProblem, chosen: np.ndarray) -> set[str]:
    return {sheet.material for sheet, good in zip(compiled.sheets, chosen, strict=True) if good}


def compiled_rules(**rules: object) -> CompiledProblem:
    use = ["copper", "aluminium", "steel", "laminate"]
    return compile_problem(build_problem(PlaneWave(), masks=[FAR], use=use, **rules))


def test_faces() -> None:
    compiled = compiled_rules(first=("steel", "laminate"), last=("copper",))
    assert names_of(compiled, compiled.rules.first) == {"steel", "laminate"}
    assert names_of(compiled, compiled.rules.last) == {"copper"}
    free = compiled_rules()
    assert free.rules.first.all()
    assert free.rules.last.all()
    assert free.rules.neighbours.all()


def test_touching_metals() -> None:
    """Indices: copper -0.35, steel -0.85, aluminium -0.90 V, the laminate none; equality is allowed."""
    compiled = compiled_rules(max_anodic_gap_v=0.05)
    for n, one in enumerate(compiled.sheets):
        for m, other in enumerate(compiled.sheets):
            pair = {one.material, other.material}
            good = "laminate" in pair or "copper" not in pair or pair == {"copper"}
            assert compiled.rules.neighbours[n, m] == good
    assert compiled_rules(max_anodic_gap_v=0.5).rules.neighbours[0, -3]  # copper and steel, just allowed


@pytest.mark.parametrize(("bond", "apart"), [("film", True), ("lacquer", True), ("copper", False)])
def test_bonds_that_insulate_keep_metals_apart(bond: str, apart: bool) -> None:
    compiled = compiled_rules(max_anodic_gap_v=0.05, bond=Sheet(bond, 25e-6))
    assert compiled.rules.neighbours.all() == apart


def test_fixed_layers_touch_the_faces() -> None:
    """No bond lies between a fixed layer and the stack; only the layer that touches counts."""
    wall, skin = Sheet("steel", 1e-3), film(100.0)
    compiled = compiled_rules(max_anodic_gap_v=0.1, source_side=(skin, wall), victim_side=(skin, wall), bond=film(25.0))
    assert names_of(compiled, compiled.rules.first) == {"aluminium", "steel", "laminate"}
    assert compiled.rules.last.all()


def test_materials_without_a_gap_rule_touch_anything() -> None:
    held = {**MATERIALS, "mesh": Material("mesh", 1e6, 5000.0, gauges_m=(1e-4,), anodic_index_v=-1.2)}
    compiled = compile_problem(build_problem(PlaneWave(), masks=[FAR], materials=held, use=["copper", "mesh"]))
    assert compiled.rules.neighbours.all()
