"""The kernel and its tables against the readable cascade, on random stacks in random problems."""

from __future__ import annotations

import numpy as np
from hypothesis import HealthCheck, given, settings
from hypothesis import strategies as st
from strategies import plane_wave_requirements, problems

from stackopt import evaluate, model
from stackopt.compiled import CompiledProblem, compile_problem
from stackopt.physics import fields
from stackopt.problem import Problem, Stack

ROUGH_DB = 2.0
"""Quadrature error that these problems are compiled to: kernel and oracle share the lines, whatever the rule."""

patient = settings(max_examples=25, suppress_health_check=[HealthCheck.too_slow])


def random_codes(compiled: CompiledProblem, seed: int, count: int) -> np.ndarray:
    """Stacks of random sheets, one sheet at least, within the limits of thickness that the tables cover."""
    random = np.random.default_rng(seed)
    codes = random.integers(0, len(compiled.sheets) + 1, (count, compiled.rules.max_sheets))
    codes[:, 0] = np.maximum(codes[:, 0], 1)
    return evaluate.packed(codes)


def by_the_oracle(compiled: CompiledProblem, stack: Stack) -> np.ndarray:
    """Attenuation in every row by the readable cascade with the very lines that the kernel uses."""
    problem, rules = compiled.problem, compiled.problem.rules
    return np.concatenate(
        [
            fields.attenuation_db(
                lines,
                model.media(problem, model.with_bonds(problem, stack), lines.frequency_hz),
                model.media(problem, rules.source_side, lines.frequency_hz),
                model.media(problem, rules.victim_side, lines.frequency_hz),
            )
            for lines in compiled.rows.spectra
        ]
    )


@patient
@given(problems(), st.integers(0, 2**32 - 1))
def test_kernel_is_the_readable_cascade(problem: Problem, seed: int) -> None:
    """To 1e-9 of the levels that are subtracted, which is all that double precision leaves of their difference."""
    compiled = compile_problem(problem, error_db=ROUGH_DB)
    codes = random_codes(compiled, seed, 5)
    fast = evaluate.attenuation_rows(compiled, codes)
    stacks = evaluate.decode(compiled, codes)
    slow = np.array([by_the_oracle(compiled, stack) for stack in stacks])
    level = np.abs(compiled.rows.open_level_db(evaluate.sums(compiled, codes)[:, 2] * 1e-12))
    assert np.all(np.abs(fast - slow) <= 1e-9 * np.maximum(1.0, np.maximum(np.abs(slow), level)))


@patient
@given(problems(), st.integers(0, 2**32 - 1))
def test_batch_is_the_loop(problem: Problem, seed: int) -> None:
    """A stack's numbers do not depend on its neighbours in the batch, nor on empty positions behind it."""
    compiled = compile_problem(problem, error_db=ROUGH_DB)
    codes = random_codes(compiled, seed, 6)
    together = evaluate.attenuation_rows(compiled, codes)
    for row, expected in zip(codes, together, strict=True):
        np.testing.assert_array_equal(evaluate.attenuation_rows(compiled, row[None, :])[0], expected)
        used = row[row > 0][None, :]
        np.testing.assert_array_equal(evaluate.attenuation_rows(compiled, used)[0], expected)
    margin, tightest = evaluate.margins(compiled, codes)
    np.testing.assert_array_equal(margin, np.min(together - compiled.rows.required_db, axis=1))
    at = together[np.arange(len(codes)), tightest] - compiled.rows.required_db[tightest]
    np.testing.assert_array_equal(at, margin)


@patient
@given(problems(), st.integers(0, 2**32 - 1))
def test_predictions_are_the_loop(problem: Problem, seed: int) -> None:
    """The checked door for predictions, for several stacks and one at a time, as sheets and as pairs."""
    compiled = compile_problem(problem, error_db=ROUGH_DB)
    stacks = evaluate.decode(compiled, random_codes(compiled, seed, 2))
    for number in range(len(problem.requirements)):
        together = evaluate.attenuation(problem, stacks, number)
        pairs = [[(sheet.material, sheet.thickness_m) for sheet in stack] for stack in stacks]
        for stack, expected in zip(pairs, together, strict=True):
            np.testing.assert_array_equal(evaluate.attenuation(problem, [stack], number)[0], expected)


@patient
@given(problems(plane_wave_requirements), st.integers(0, 2**32 - 1), st.data())
def test_sums_do_not_depend_on_the_order(problem: Problem, seed: int, data: st.DataObject) -> None:
    """Integers to the last digit, bonds and handling included."""
    compiled = compile_problem(problem, error_db=ROUGH_DB)
    (row,) = random_codes(compiled, seed, 1)
    used = row[row > 0]
    shuffled = np.array(data.draw(st.permutations(used.tolist())))
    np.testing.assert_array_equal(evaluate.sums(compiled, shuffled[None, :]), evaluate.sums(compiled, used[None, :]))


@given(
    st.lists(st.lists(st.integers(0, 9), min_size=5, max_size=5), min_size=1, max_size=8).map(
        lambda rows: np.array(rows, dtype=np.int64)
    )
)
def test_packing_moves_empty_positions_behind(codes: np.ndarray) -> None:
    packed = evaluate.packed(codes)
    for before, after in zip(codes, packed, strict=True):
        sheets = before[before > 0]
        np.testing.assert_array_equal(after, np.concatenate([sheets, np.zeros(len(before) - len(sheets))]))
    np.testing.assert_array_equal(evaluate.packed(packed), packed)
    np.testing.assert_array_equal(evaluate.count_sheets(packed), evaluate.count_sheets(codes))
