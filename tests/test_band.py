import subprocess
import sys
from dataclasses import replace

import numpy as np
import pytest
from builders import LOOPS, build_problem
from test_tolerance import BOND, EASY, FILM, NEAR, TOLERANT, margin_by_hand, tolerant, worst_by_hand

from stackopt import evaluate
from stackopt.band import band_db, passing, sample_margins, tolerance_band, yield_words
from stackopt.compiled import compile_problem
from stackopt.deviation import sampled
from stackopt.problem import Mask, SearchSettings, Sheet, Stack
from stackopt.tolerance import Tolerances

COPPER, STEEL, FERRITE = Sheet("copper", 35e-6), Sheet("steel", 100e-6), Sheet("ferrite", 50e-6)


@pytest.mark.parametrize("stack", [(COPPER,), (STEEL, COPPER), (FERRITE, COPPER, STEEL)])
def test_the_band_holds_the_nominal_curve(stack: Stack) -> None:
    problem = tolerant(LOOPS, NEAR, bond=BOND)
    for number in range(2):
        low, high = band_db(problem, stack, number)
        nominal = evaluate.attenuation(problem, [stack], number)[0]
        assert np.all(low <= nominal)
        assert np.all(nominal <= high)
        assert np.max(high - low) > 0.3


@pytest.mark.parametrize("sides", [False, True])
def test_its_lower_edge_is_the_worst_corner_by_hand(sides: bool) -> None:
    wall = (Sheet("ferrite", 1e-3),) if sides else ()
    problem = tolerant(
        LOOPS,
        NEAR,
        materials=TOLERANT | FILM,
        bond=BOND,
        victim_side=wall,
        masks=(Mask((1e4, 3e5), (3.0, 9.0), points_per_decade=2),),
    )
    stack = (COPPER, Sheet("aluminium", 50e-6))
    band = tolerance_band(problem, stack)
    assert band is not None
    assert band.worst_margin_db == pytest.approx(worst_by_hand(problem, stack), abs=1e-6)
    least = [
        low - problem.requirements[number].mask.required_db(frequency)
        for number, (frequency, low) in enumerate(zip(band.frequency_hz, band.low_db, strict=True))
    ]
    assert band.worst_margin_db == min(values.min() for values in least)
    number = [requirement.name for requirement in problem.requirements].index(band.requirement)
    assert band.frequency_hz[number][np.argmin(least[number])] == band.worst_hz


def test_it_agrees_with_the_judge_of_the_search() -> None:
    problem = tolerant(LOOPS, bond=BOND, max_sheets=3)
    compiled = compile_problem(problem)
    stacks: list[Stack] = [(STEEL, COPPER), (FERRITE, COPPER, Sheet("steel", 25e-6))]
    found = Tolerances(compiled).worst_margins(evaluate.encode(compiled, stacks)).margin_db
    for stack, margin in zip(stacks, found, strict=True):
        band = tolerance_band(problem, stack)
        assert band is not None
        assert band.worst_margin_db == pytest.approx(margin, abs=0.03)


def test_it_names_what_varies_and_the_worst_corner() -> None:
    band = tolerance_band(tolerant(NEAR), (STEEL, COPPER))
    assert band is not None
    assert band.tolerances == (
        "steel: thickness ±5 %, conductivity ±10 %, permeability -50 % to +100 %",
        "copper: thickness ±8 %, conductivity ±3 %",
    )
    assert band.method == "all 32 corners of the tolerances"
    assert {text.split(":")[0] for text in band.worst_case} == {"steel", "copper"}
    assert "copper: thickness -8 %, conductivity -3 %" in band.worst_case


def test_without_tolerances_there_is_no_band() -> None:
    problem = build_problem(NEAR, masks=(EASY,))
    assert tolerance_band(problem, (COPPER,)) is None
    low, high = band_db(problem, (COPPER,))
    np.testing.assert_array_equal(low, high)
    np.testing.assert_array_equal(low, evaluate.attenuation(problem, [(COPPER,)])[0])


def test_of_too_many_corners_some_are_drawn(monkeypatch: pytest.MonkeyPatch) -> None:
    problem = tolerant(NEAR)
    everything = tolerance_band(problem, (STEEL, COPPER, FERRITE))
    monkeypatch.setattr("stackopt.band.MOST_CASES", 100)
    some = tolerance_band(problem, (STEEL, COPPER, FERRITE))
    assert some is not None
    assert everything is not None
    assert some.method == "100 of the 128 corners of the tolerances, drawn at random"
    assert np.all(some.low_db[0] >= everything.low_db[0] - 1e-9)


def test_samples_are_those_of_counting_by_hand() -> None:
    problem = tolerant(NEAR, bond=BOND, materials=TOLERANT | FILM)
    stack = (STEEL, COPPER)
    margins = sample_margins(problem, stack, 16, 3)
    drawn = sampled(problem, 16, 3)
    for number in (0, 7, 15):
        case = {name: cases[number] for name, cases in drawn.items()}
        assert margins[number] == pytest.approx(margin_by_hand(problem, stack, case), abs=1e-6)
    assert len(sample_margins(build_problem(NEAR), stack, 16, 3)) == 16
    assert passing(np.array([-1.0, -1e-12, 0.0, 2.0])) == 3


def test_a_yield_is_told_with_its_interval() -> None:
    problem = replace(tolerant(NEAR), search=SearchSettings(assume="yield", yield_goal=0.9, random_seed=2))
    text = yield_words(problem, (Sheet("steel", 1e-3), Sheet("copper", 500e-6)))
    assert text == "reaches the goal of 90 %: 100.0 % of 256 samples meet the mask (95 % interval 98.5 to 100.0 %)"
    assert yield_words(problem, (Sheet("copper", 9e-6),)).startswith("misses the goal of 90 %: 0.0 % of 256 samples")


def test_a_look_at_a_band_needs_no_compiled_code() -> None:
    code = (
        "import sys; sys.path.insert(0, 'tests'); from test_band import *; "
        "tolerance_band(tolerant(NEAR), (STEEL, COPPER)); sample_margins(tolerant(NEAR), (COPPER,), 16, 1); "
        "sys.exit('numba' in sys.modules)"
    )
    assert subprocess.run([sys.executable, "-c", code], check=False).returncode == 0
