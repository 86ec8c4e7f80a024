import dataclasses

import pytest
from builders import LOOPS, build_problem

from stackopt.outputs import cautions as c
from stackopt.outputs.cautions import cautions
from stackopt.problem import ElectricNearField, Mask, PlaneWave, Problem, Sheet

HIGH = Mask((1e6, 1e9), (20.0, 20.0))
COPPER, ALUMINIUM, FILM = Sheet("copper", 35e-6), Sheet("aluminium", 1e-3), Sheet("film", 25e-6)


def renamed(problem: Problem, old: str, new: str, notes: str = "") -> Problem:
    """The problem with a material under another name."""
    materials = dict(problem.materials)
    materials[new] = dataclasses.replace(materials.pop(old), name=new, notes=notes)
    use = tuple(new if name == old else name for name in problem.use)
    return dataclasses.replace(problem, materials=materials, use=use)


def test_that_a_prediction_is_no_measurement_is_always_said_first() -> None:
    for problem in (build_problem(), build_problem(PlaneWave(), masks=(HIGH,), use=("film",))):
        assert cautions(problem)[0] == c.PREDICTION
        assert "infinite flat sheet" in cautions(problem)[1]


def test_a_far_field_problem_of_thick_aluminium_needs_little_more() -> None:
    found = cautions(build_problem(PlaneWave(), masks=(HIGH,)), [(ALUMINIUM,)])
    assert len(found) == 2


def test_overhang_is_told_in_millimetres_where_the_distance_is_known() -> None:
    assert "reach 90 mm to 135 mm" in cautions(build_problem(LOOPS))[1]
    assert "mm" not in cautions(build_problem(PlaneWave(), masks=(HIGH,)))[1]


@pytest.mark.parametrize(
    ("sentence", "problem", "stack", "expected"),
    [
        (c.HEAT, build_problem(LOOPS), (COPPER,), True),
        (c.HEAT, build_problem(LOOPS), (Sheet("ferrite", 5e-5),), False),
        (c.HEAT, build_problem(PlaneWave(), masks=(HIGH,)), (COPPER,), False),
        (c.MAINS, build_problem(LOOPS), (COPPER,), True),
        (c.MAINS, build_problem(LOOPS, masks=(HIGH,)), (COPPER,), False),
        (c.MAINS, build_problem(ElectricNearField(0.1), masks=(HIGH,)), (COPPER,), True),
        (c.MAINS, build_problem(ElectricNearField(0.1), masks=(HIGH,)), (FILM,), False),
        (c.SHARP, build_problem(), (COPPER,), True),
        (c.SHARP, build_problem(), (ALUMINIUM,), False),
        (c.SHARP, build_problem(), (FILM,), False),
        (c.FIELDS, build_problem(LOOPS), (COPPER,), True),
        (c.FIELDS, build_problem(PlaneWave(), masks=(HIGH,)), (COPPER,), False),
        (c.MAGNETS, build_problem(LOOPS), (Sheet("steel", 1e-4),), True),
        (c.MAGNETS, build_problem(LOOPS), (COPPER,), False),
    ],
)
def test_a_caution_shows_where_it_bears(
    sentence: str, problem: Problem, stack: tuple[Sheet, ...], expected: bool
) -> None:
    assert (sentence in cautions(problem, [stack])) is expected


def test_saturation_names_half_of_what_the_set_gives() -> None:
    problem = build_problem()
    materials = dict(problem.materials)
    materials["steel"] = dataclasses.replace(materials["steel"], saturation_t=2.0)
    text = "\n".join(cautions(dataclasses.replace(problem, materials=materials), [(Sheet("steel", 1e-4),)]))
    assert "half of saturation (steel 1 T)" in text


def test_words_in_names_and_notes_bring_handling_rules() -> None:
    problem = build_problem()
    assert any("Nickel" in text and "nickel alloy" in text for text in cautions(problem))
    assert any("chips" in text and "(ferrite)" in text for text in cautions(problem))
    leaded = renamed(problem, "copper", "foil", notes="tinned with lead")
    assert any(text.startswith("Lead ") and "foil" in text for text in cautions(leaded))
    harmless = renamed(problem, "copper", "foil", notes="lead-free solder, no leads")
    assert not any(text.startswith("Lead ") for text in cautions(harmless))


def test_touching_metals_are_named_with_their_difference() -> None:
    problem = build_problem()
    found = [text for text in cautions(problem, [(COPPER, ALUMINIUM)]) if "corrode" in text]
    assert len(found) == 1
    assert "copper and aluminium differ by 0.55 V" in found[0]
    assert not any("corrode" in text for text in cautions(problem, [(ALUMINIUM, FILM, COPPER)]))


def test_a_bond_or_a_rule_that_keeps_metals_apart_needs_no_caution() -> None:
    assert any("corrode" in text for text in cautions(build_problem()))
    assert not any("corrode" in text for text in cautions(build_problem(bond=FILM)))
    assert not any("corrode" in text for text in cautions(build_problem(max_anodic_gap_v=0.1)))
    assert any("steel differ by 0.50 V" in text for text in cautions(build_problem(max_anodic_gap_v=0.52)))


def test_cautions_are_short_plain_sentences() -> None:
    for text in cautions(build_problem()):
        assert text.endswith(".")
        assert len(text) < 320
