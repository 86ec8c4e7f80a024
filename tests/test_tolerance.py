import itertools
import math
from collections.abc import Mapping, Sequence
from dataclasses import replace

import numpy as np
import pytest
from builders import LOOPS, MATERIALS, build_problem
from scipy.stats import binom

from stackopt import evaluate
from stackopt.compiled import CompiledProblem, compile_problem
from stackopt.deviation import (
    NOMINAL,
    Deviation,
    corners,
    count_corners,
    deviation_words,
    effective_tolerance,
    most_corners,
    sampled,
    vary,
)
from stackopt.errors import InputError
from stackopt.physics.permeability import Constant, Table
from stackopt.problem import (
    MagneticNearField,
    Mask,
    Material,
    PlaneWave,
    Problem,
    SearchSettings,
    Sheet,
    Stack,
    Tolerance,
)
from stackopt.tolerance import Tolerances, meets_assumption, samples_for, tolerances_of, wilson_interval

NEAR = MagneticNearField(0.05)
TOLERANCES = {
    "copper": Tolerance((-0.08, 0.08), (-0.03, 0.03), (-0.5, 1.0)),
    "aluminium": Tolerance((-0.1, 0.0)),
    "steel": Tolerance((-0.05, 0.05), (-0.1, 0.1), (-0.5, 1.0)),
    "nickel alloy": Tolerance(permeability=(-0.3, 0.3)),
    "ferrite": Tolerance((-0.1, 0.1), permeability=(-0.25, 0.25)),
}
TOLERANT = {name: replace(item, tolerance=TOLERANCES.get(name, Tolerance())) for name, item in MATERIALS.items()}
FILM = {"film": replace(MATERIALS["film"], tolerance=Tolerance((-0.2, 0.3)))}
BOND = Sheet("film", 25e-6)
EASY = Mask((1e3, 1e6), (3.0, 40.0))


def tolerant(*fields: object, use: Sequence[str] = ("copper", "steel", "ferrite"), **more: object) -> Problem:
    """A problem whose materials have tolerances."""
    return build_problem(*fields, **{"materials": TOLERANT, "use": use, "masks": (EASY,), **more})  # type: ignore[arg-type]


def by_hand(problem: Problem, stack: Stack, deviations: Mapping[str, Deviation]) -> tuple[Problem, Stack]:
    """The problem and the stack with deviating materials in the place of the nominal ones."""
    materials = dict(problem.materials)
    for name, deviation in deviations.items():
        materials[name] = vary(materials[name], deviation, name)

    def layer(sheet: Sheet) -> Sheet:
        return replace(sheet, thickness_m=sheet.thickness_m * deviations.get(sheet.material, NOMINAL).thickness)

    rules = replace(
        problem.rules,
        bond=None if problem.rules.bond is None else layer(problem.rules.bond),
        source_side=tuple(map(layer, problem.rules.source_side)),
        victim_side=tuple(map(layer, problem.rules.victim_side)),
    )
    return replace(problem, materials=materials, rules=rules), tuple(map(layer, stack))


def margin_by_hand(problem: Problem, stack: Stack, deviations: Mapping[str, Deviation]) -> float:
    """Smallest margin by the readable cascade."""
    varied, sheets = by_hand(problem, stack, deviations)
    least = math.inf
    for number, requirement in enumerate(problem.requirements):
        grid = requirement.mask.grid_hz()
        values = evaluate.attenuation(varied, [sheets], number, grid)[0] - requirement.mask.required_db(grid)
        least = min(least, float(values.min()))
    return least


def worst_by_hand(problem: Problem, stack: Stack) -> float:
    """Smallest margin over nominal values and every corner, one after the other."""
    rules = problem.rules
    names = {sheet.material for sheet in (*stack, *rules.source_side, *rules.victim_side)}
    if rules.bond is not None and len(stack) > 1:
        names.add(rules.bond.material)
    choices = {name: corners(problem.materials[name]) for name in sorted(names)}
    cases = [dict(zip(choices, chosen, strict=True)) for chosen in itertools.product(*choices.values())]
    return min(margin_by_hand(problem, stack, case) for case in [{}, *cases])


def random_codes(compiled: CompiledProblem, count: int, seed: int = 0) -> np.ndarray:
    random = np.random.default_rng(seed)
    codes = np.zeros((count, compiled.rules.max_sheets), dtype=np.int64)
    for row in codes:
        used = random.integers(1, len(row) + 1)
        row[:used] = random.integers(1, len(compiled.sheets) + 1, used)
    return codes


class TestDeviations:
    def test_a_value_without_effect_makes_no_corners(self) -> None:
        assert effective_tolerance(TOLERANT["copper"]).permeability == (0.0, 0.0)
        assert len(corners(TOLERANT["copper"])) == 4
        assert len(corners(TOLERANT["steel"])) == 8
        assert len(corners(TOLERANT["aluminium"])) == 2
        assert corners(TOLERANT["film"]) == (NOMINAL,)
        everything = Tolerance((-0.1, 0.1), (-0.1, 0.1), (-0.1, 0.1))
        air = Material("air", 0.0, 1.0, tolerance=everything)
        assert corners(air) == (NOMINAL,)
        assert len(corners(replace(air, permittivity=3.0))) == 2

    def test_a_stack_has_the_corners_of_its_own_materials(self) -> None:
        problem = tolerant(NEAR, max_sheets=2, bond=BOND, materials=TOLERANT | FILM)
        assert count_corners(problem, (Sheet("copper", 1e-5),)) == 4
        assert count_corners(problem, (Sheet("copper", 1e-5), Sheet("copper", 2e-5))) == 4 * 2
        assert count_corners(problem, (Sheet("copper", 1e-5), Sheet("steel", 2e-5))) == 4 * 8 * 2
        assert most_corners(problem) == 8 * 4 * 2

    @pytest.mark.parametrize("factor", [0.5, 0.9, 1.3, 2.0])
    @pytest.mark.parametrize("name", ["steel", "nickel alloy", "ferrite", "flake"])
    def test_the_initial_permeability_scales_and_the_law_stays_physical(self, name: str, factor: float) -> None:
        nominal = MATERIALS[name].permeability
        law = vary(MATERIALS[name], Deviation(permeability=factor), "varied").permeability
        frequency = np.geomspace(1.0, 1e12, 60)
        assert law(np.array([0.0]))[0] == pytest.approx(factor * nominal(np.array([0.0]))[0])
        assert np.all(law(frequency).imag <= 1e-12)
        if nominal(frequency)[-1].real == pytest.approx(1.0, abs=1e-3):
            assert law(frequency)[-1] == pytest.approx(1.0, abs=1e-2)

    def test_permeability_never_falls_below_one(self) -> None:
        weak = Material("weak", 1e6, 8000.0, permeability=Constant(1.02))
        assert vary(weak, Deviation(permeability=0.5), "varied").permeability(np.array([1e3]))[0] == 1.0
        assert vary(weak, Deviation(permeability=0.99), "varied").permeability(np.array([1e3]))[0] == pytest.approx(
            0.99 * 1.02
        )

    def test_a_table_scales_from_its_lowest_frequency(self) -> None:
        table = Material("table", 1e6, 8000.0, permeability=Table((1e3, 1e5), (500.0, 100.0), (-10.0, -90.0)))
        law = vary(table, Deviation(permeability=2.0), "varied").permeability
        assert law(np.array([1e3]))[0].real == pytest.approx(1000.0)

    def test_words(self) -> None:
        assert deviation_words(Deviation(0.95, 1.0, 2.0)) == "thickness -5 %, permeability +100 %"
        assert deviation_words(NOMINAL) == "nominal"


class TestWorstCorner:
    @pytest.mark.parametrize("bond", [None, BOND])
    @pytest.mark.parametrize("sides", [False, True])
    def test_it_is_that_of_trying_every_corner_by_hand(self, bond: Sheet | None, sides: bool) -> None:
        wall = (Sheet("ferrite", 1e-3),) if sides else ()
        problem = tolerant(NEAR, PlaneWave(), materials=TOLERANT | FILM, bond=bond, source_side=wall, max_sheets=2)
        compiled = compile_problem(problem)
        stacks: list[Stack] = [
            (Sheet("copper", 35e-6),),
            (Sheet("steel", 100e-6),),
            (Sheet("copper", 9e-6), Sheet("steel", 25e-6)),
            (Sheet("steel", 250e-6), Sheet("steel", 25e-6)),
        ]
        found = Tolerances(compiled).worst_margins(evaluate.encode(compiled, stacks))
        for stack, margin, evaluated in zip(stacks, found.margin_db, found.evaluated, strict=True):
            assert margin == pytest.approx(worst_by_hand(problem, stack), abs=1e-6)
            assert evaluated == 1 + count_corners(problem, stack)

    def test_it_is_so_between_loops(self) -> None:
        problem = tolerant(LOOPS, max_sheets=2)
        compiled = compile_problem(problem)
        stack = (Sheet("ferrite", 50e-6), Sheet("copper", 35e-6))
        found = Tolerances(compiled).worst_margins(evaluate.encode(compiled, [stack]))
        assert found.margin_db[0] == pytest.approx(worst_by_hand(problem, stack), abs=0.03)

    def test_the_row_is_where_the_margin_stands(self) -> None:
        compiled = compile_problem(tolerant(NEAR, max_sheets=3))
        codes = random_codes(compiled, 30)
        found = Tolerances(compiled).worst_margins(codes)
        nominal, _ = evaluate.margins(compiled, codes)
        assert np.all(found.margin_db <= nominal)
        assert np.all((found.row >= 0) & (found.row < len(compiled.rows.frequency_hz)))

    def test_yes_or_no_is_that_of_all_corners_in_any_order(self) -> None:
        problem = tolerant(NEAR, use=("copper", "steel", "ferrite", "nickel alloy"), max_sheets=4, bond=BOND)
        compiled = compile_problem(problem)
        codes = random_codes(compiled, 300)
        level = np.median(evaluate.margins(compiled, codes)[0])
        rows = replace(compiled.rows, required_db=compiled.rows.required_db + level)
        compiled = replace(compiled, rows=rows)
        judge = Tolerances(compiled)
        expected = judge.worst_margins(codes).margin_db >= 0.0
        assert 10 < np.count_nonzero(expected) < 290
        for _ in range(3):  # the order changes with what was rejected
            np.testing.assert_array_equal(judge.meets_worst(codes), expected)
        np.testing.assert_array_equal(Tolerances(compiled).meets_worst(codes[::-1]), expected[::-1])
        for code, good in zip(codes[:40], expected, strict=False):
            assert Tolerances(compiled).meets_worst(code[None])[0] == good

    def test_a_rejected_stack_costs_few_corners(self) -> None:
        compiled = compile_problem(tolerant(NEAR, use=("copper", "steel", "ferrite", "nickel alloy")))
        codes = random_codes(compiled, 400)
        nominal, _ = evaluate.margins(compiled, codes)
        rows = replace(compiled.rows, required_db=compiled.rows.required_db + np.median(nominal))
        compiled = replace(compiled, rows=rows)
        judge = Tolerances(compiled)
        judge.meets_worst(codes)
        found = judge.least_margins(codes)
        by_corner = (found.margin_db < 0.0) & (nominal >= np.median(nominal))
        assert np.count_nonzero(by_corner) > 20
        assert np.mean(found.evaluated[by_corner]) < 5.0
        assert np.all(found.evaluated[nominal < np.median(nominal)] == 1)

    def test_all_low_is_not_always_worst(self) -> None:
        """Two foils with a lossless spacer just short of half a wavelength: a thicker spacer lets more pass."""
        spacer = replace(MATERIALS["film"], gauges_m=(0.01,), tolerance=Tolerance((-0.05, 0.05)))
        foil = replace(MATERIALS["copper"], tolerance=Tolerance((-0.01, 0.01)))
        problem = build_problem(
            PlaneWave(),
            masks=(Mask((8e9,), (10.0,)),),
            materials={"film": spacer, "copper": foil},
            max_sheets=3,
        )
        stack = (Sheet("copper", 9e-6), Sheet("film", 0.01), Sheet("copper", 9e-6))
        compiled = compile_problem(problem)
        worst = Tolerances(compiled).worst_margins(evaluate.encode(compiled, [stack])).margin_db[0]
        low = {name: corners(material)[0] for name, material in problem.materials.items()}
        assert worst < margin_by_hand(problem, stack, low) - 1.0
        thick = {"copper": Deviation(0.99), "film": Deviation(1.05)}
        assert worst == pytest.approx(margin_by_hand(problem, stack, thick), abs=1e-6)

    def test_dense_sampling_finds_nothing_worse_where_nothing_resonates(self) -> None:
        problem = tolerant(NEAR, max_sheets=3)
        compiled = compile_problem(problem)
        codes = random_codes(compiled, 20)
        judge = Tolerances(compiled)
        worst = judge.worst_margins(codes).margin_db
        least = np.full(len(codes), np.inf)
        drawn = judge._drawn(512, 3)
        for start in range(0, drawn.samples, drawn.step):
            cases = drawn._cases(start, codes)
            for sample in range(drawn.step):
                digits = np.full((len(codes), len(judge.materials)), sample)
                least = np.minimum(least, cases.margins(codes, digits)[0])
        assert np.all(least > worst - 1e-6)
        assert np.all(least < worst + 6.0)

    def test_between_corners_a_resonance_may_be_worse(self) -> None:
        """The definition is the corners: a spacer of half a wavelength passes most at its nominal thickness."""
        spacer = replace(MATERIALS["film"], gauges_m=(0.01,), tolerance=Tolerance((-0.05, 0.05)))
        problem = build_problem(
            PlaneWave(), masks=(Mask((8.8e9,), (10.0,)),), materials={"film": spacer, "copper": MATERIALS["copper"]}
        )
        stack = (Sheet("copper", 9e-6), Sheet("film", 0.01), Sheet("copper", 9e-6))
        at = [margin_by_hand(problem, stack, {"film": Deviation(factor)}) for factor in np.linspace(0.95, 1.05, 41)]
        assert min(at) < min(at[0], at[20], at[-1]) - 1.0

    def test_without_tolerances_nominal_is_worst(self) -> None:
        compiled = compile_problem(build_problem(NEAR, masks=(EASY,)))
        codes = random_codes(compiled, 20)
        found = Tolerances(compiled).worst_margins(codes)
        np.testing.assert_array_equal(found.margin_db, evaluate.margins(compiled, codes)[0])
        assert np.all(found.evaluated == 1)

    def test_objectives_stay_nominal(self) -> None:
        compiled = compile_problem(tolerant(NEAR))
        codes = random_codes(compiled, 5)
        before = evaluate.sums(compiled, codes)
        Tolerances(compiled).worst_margins(codes)
        np.testing.assert_array_equal(evaluate.sums(compiled, codes), before)

    def test_too_many_corners_are_refused(self) -> None:
        wide = Tolerance((-0.1, 0.1), (-0.1, 0.1), (-0.1, 0.1))
        names = [f"metal {number}" for number in range(7)]
        materials = {name: replace(MATERIALS["steel"], name=name, tolerance=wide) for name in names}
        compiled = compile_problem(build_problem(NEAR, materials=materials, max_sheets=7))
        with pytest.raises(InputError, match=r"2.1e\+06 corners"):
            Tolerances(compiled).meets_worst(random_codes(compiled, 2))


class TestYield:
    @pytest.mark.parametrize("share", [0.25, 0.7, 0.95])
    def test_a_known_probability(self, share: float) -> None:
        """Attenuation rises with thickness: the mask is set where the wanted share of the thicknesses reaches it."""
        foil = replace(MATERIALS["copper"], tolerance=Tolerance((-0.1, 0.1)))
        stack = (Sheet("copper", 35e-6),)
        problem = build_problem(NEAR, masks=(Mask((1e5,), (0.0,)),), materials={"copper": foil}, max_sheets=1)
        level = margin_by_hand(problem, stack, {"copper": Deviation(0.9 + 0.2 * (1.0 - share))})
        problem = build_problem(NEAR, masks=(Mask((1e5,), (level,)),), materials={"copper": foil}, max_sheets=1)
        compiled = compile_problem(problem)
        found = Tolerances(compiled).yield_of(evaluate.encode(compiled, [stack]), 256, seed=1)
        assert found.samples == 256
        assert found.fraction[0] == pytest.approx(share, abs=1.5 / 256)
        assert found.low[0] < share < found.high[0]

    def test_a_seed_repeats_and_batches_do_not_matter(self) -> None:
        compiled, codes = half_feasible(bond=BOND)
        one, other = Tolerances(compiled), Tolerances(compiled)
        first = one.yield_of(codes, 64, 5)
        np.testing.assert_array_equal(first.fraction, other.yield_of(codes, 50, 5).fraction)
        for number in range(3):
            assert Tolerances(compiled).yield_of(codes[number : number + 1], 64, 5).fraction == first.fraction[number]
        assert np.any(one.yield_of(codes, 64, 6).fraction != first.fraction)
        assert len(np.unique(first.fraction)) > 3

    @pytest.mark.parametrize("film", [None, FILM])
    def test_meeting_a_goal_is_the_share_reaching_it(self, film: dict[str, Material] | None) -> None:
        compiled, codes = half_feasible(bond=BOND, materials=TOLERANT | (film or {}))
        judge = Tolerances(compiled)
        fraction = judge.yield_of(codes, 64, 2).fraction
        for goal in (0.5, 0.9, 0.999):
            np.testing.assert_array_equal(judge.meets_yield(codes, goal, 2, samples=64), fraction >= goal)

    def test_the_margin_of_a_goal_decides_as_the_share_does(self) -> None:
        compiled, codes = half_feasible(bond=BOND)
        judge = Tolerances(compiled)
        for goal in (0.5, 0.9):
            found = judge.goal_margins(codes, goal, 2, samples=64)
            np.testing.assert_array_equal(found.margin_db >= -1e-9, judge.meets_yield(codes, goal, 2, samples=64))
            assert np.all(found.margin_db >= judge.worst_margins(codes).margin_db - 1e-6)
        known = np.zeros(len(compiled.rows.frequency_hz), dtype=bool)
        known[found.row] = True
        other = judge.goal_margins(codes, 0.9, 2, samples=64, known=known)
        np.testing.assert_array_equal(other.margin_db, found.margin_db)
        assert np.any(other.row != found.row)

    def test_samples_that_do_not_fit_memory_give_the_same(self, monkeypatch: pytest.MonkeyPatch) -> None:
        compiled, codes = half_feasible()
        kept = Tolerances(compiled).yield_of(codes, 64, 2)
        monkeypatch.setattr("stackopt.tolerance._KEPT_BYTES", 0.0)
        np.testing.assert_array_equal(Tolerances(compiled).yield_of(codes, 64, 2).fraction, kept.fraction)

    def test_it_is_that_of_counting_by_hand(self) -> None:
        problem = tolerant(NEAR, materials=TOLERANT | FILM, bond=BOND, max_sheets=2)
        stack = (Sheet("steel", 100e-6), Sheet("copper", 9e-6))
        drawn = sampled(problem, 32, 9)
        margins = [
            margin_by_hand(problem, stack, {name: cases[number] for name, cases in drawn.items()})
            for number in range(32)
        ]
        level = float(np.median(margins))
        compiled = compile_problem(problem)
        compiled = replace(compiled, rows=replace(compiled.rows, required_db=compiled.rows.required_db + level))
        found = Tolerances(compiled).yield_of(evaluate.encode(compiled, [stack]), 32, 9)
        assert found.fraction[0] == np.mean(np.array(margins) >= level)
        assert 0.4 < found.fraction[0] < 0.6

    def test_samples_lie_within_the_tolerances_evenly(self) -> None:
        drawn = sampled(tolerant(), 256, 1)
        permeability = np.array([case.permeability for case in drawn["steel"]])
        assert permeability.min() >= 0.5
        assert permeability.max() <= 2.0
        assert np.mean(permeability) == pytest.approx(1.25, abs=0.01)
        assert {case.permeability for case in drawn["copper"]} == {1.0}

    def test_the_interval_covers_as_often_as_it_says(self) -> None:
        for true in (0.5, 0.9, 0.95, 0.99):
            passed = np.arange(257)
            low, high = wilson_interval(passed, 256)
            inside = (low <= true) & (true <= high)
            assert binom.pmf(passed, 256, true)[inside].sum() > 0.92
        covered = []
        for seed in range(40):  # quasi-random samples are spread more evenly than independent ones
            compiled, code, share = COVERAGE
            found = Tolerances(compiled()).yield_of(code, 64, seed)
            covered.append(found.low[0] <= share <= found.high[0])
        assert np.mean(covered) >= 0.95

    def test_no_stacks_have_no_yield(self) -> None:
        compiled, codes = half_feasible()
        judge = Tolerances(compiled)
        assert judge.yield_of(codes[:0], 64, 1).fraction.shape == (0,)
        assert judge.meets_yield(codes[:0], 0.9, 1).shape == (0,)
        assert judge.meets_worst(codes[:0]).shape == (0,)
        assert judge.goal_margins(codes[:0], 0.9, 1).margin_db.shape == (0,)

    def test_samples_resolve_the_goal(self) -> None:
        assert [samples_for(goal) for goal in (0.5, 0.95, 0.99, 0.999)] == [256, 256, 1024, 4096]


def half_feasible(**more: object) -> tuple[CompiledProblem, np.ndarray]:
    """Stacks whose nominal margins lie within 3 dB of the mask, half of them above."""
    compiled = compile_problem(tolerant(NEAR, max_sheets=3, **more))
    codes = random_codes(compiled, 400)
    margin, _ = evaluate.margins(compiled, codes)
    level = float(np.median(margin))
    codes = codes[np.abs(margin - level) < 3.0][:30]
    return replace(compiled, rows=replace(compiled.rows, required_db=compiled.rows.required_db + level)), codes


def _coverage() -> CompiledProblem:
    foil = replace(MATERIALS["copper"], tolerance=Tolerance((-0.1, 0.1)), gauges_m=(35e-6,))
    problem = build_problem(NEAR, masks=(Mask((1e5,), (0.0,)),), materials={"copper": foil}, max_sheets=1)
    level = margin_by_hand(problem, (Sheet("copper", 35e-6),), {"copper": Deviation(0.92)})
    return compile_problem(
        build_problem(NEAR, masks=(Mask((1e5,), (level,)),), materials={"copper": foil}, max_sheets=1)
    )


COVERAGE = (_coverage, np.array([[1]]), 0.9)


class TestAssumption:
    @pytest.mark.parametrize("assume", ["nominal", "worst", "yield"])
    def test_the_problem_says_what_is_met(self, assume: str) -> None:
        compiled, codes = half_feasible()
        problem = replace(compiled.problem, search=SearchSettings(assume=assume, yield_goal=0.9, random_seed=3))
        compiled = replace(compiled, problem=problem)
        met = meets_assumption(compiled, codes)
        judge = Tolerances(compiled)
        expected = {
            "nominal": evaluate.margins(compiled, codes)[0] >= 0.0,
            "worst": judge.meets_worst(codes),
            "yield": judge.meets_yield(codes, 0.9, 3),
        }
        np.testing.assert_array_equal(met, expected[assume])
        assert met.any()
        assert not met.all()

    def test_the_judge_of_a_compiled_problem_is_kept(self) -> None:
        compiled, _ = half_feasible()
        assert tolerances_of(compiled) is tolerances_of(compiled)
        assert tolerances_of(compiled.with_sheets(compiled.sheets[:2])) is not tolerances_of(compiled)

    def test_worst_is_never_easier_than_nominal(self) -> None:
        compiled, codes = half_feasible()
        judge = Tolerances(compiled)
        assert not np.any(judge.meets_worst(codes) & ~judge.meets_yield(codes, 0.5, 1))
