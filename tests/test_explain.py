import dataclasses

import pytest
from builders import MATERIALS, build_problem

from stackopt.compiled import compile_problem
from stackopt.explain import explain
from stackopt.problem import Mask, Problem
from stackopt.scout import scout


def explained(problem: Problem) -> str:
    compiled = compile_problem(problem)
    found = scout(compiled)
    assert found.margin_db < 0.0
    return explain(compiled, found)


def test_more_sheets_and_a_lower_mask_are_named() -> None:
    problem = build_problem(use=["copper"], max_sheets=1, masks=(Mask((1e5, 1e6), (60.0, 90.0)),))
    text = explained(problem)
    assert "The best stack of a quick look, copper 500um, misses by" in text
    assert "requirement 'requirement 0' blocks at" in text
    assert "with 2 sheets instead of 1, by copper 500um / copper 500um" in text
    assert "the stack named first meets it" in text


def test_a_limit_that_is_in_the_way_is_named() -> None:
    text = explained(build_problem(max_thickness_m=0.05e-3))
    assert "the mask can be met without the limit max_thickness" in text


def test_the_missing_class_of_material_is_named() -> None:
    problem = build_problem(use=["copper", "aluminium"], materials={n: MATERIALS[n] for n in ("copper", "aluminium")})
    text = explained(problem)
    assert "with a sheet of high permeability" in text
    assert "50 Hz" in text


def test_other_materials_of_the_set_are_named() -> None:
    assert "with all materials of the set" in explained(build_problem(use=["copper", "aluminium"]))


def test_a_single_frequency_out_of_reach_is_told() -> None:
    text = explained(build_problem(use=["copper"], masks=(Mask((1e3, 1e4), (1e3, 10.0)),)))
    assert "Even for that frequency alone the best is" in text
    assert "of 1000.0 dB" in text


def test_a_conflict_of_frequencies_is_told() -> None:
    problem = build_problem(
        use=["copper", "laminate"], max_sheets=1, masks=(Mask((1e3, 1e4, 3e5, 1e6), (20.0, 0.0, 0.0, 90.0)),)
    )
    assert "That frequency alone can be met, by" in explained(problem)


def test_rules_that_allow_no_stack_are_told() -> None:
    problem = build_problem(use=["copper", "steel"], max_sheets=1, first=("steel",), last=("copper",))
    compiled = compile_problem(problem)
    assert "allow no stack at all" in explain(compiled, scout(compiled))


@pytest.mark.parametrize("names", [["copper"], ["aluminium"]])
def test_what_is_said_to_be_enough_is_enough(names: list[str]) -> None:
    problem = build_problem(use=names, max_sheets=1)
    text = explained(problem)
    if "with 2 sheets" in text:
        longer = dataclasses.replace(problem, rules=dataclasses.replace(problem.rules, max_sheets=2))
        met = scout(compile_problem(longer)).margin_db >= 0.0
        assert met == ("By quick looks" in text and text.index("with 2 sheets") > text.index("By quick looks"))
