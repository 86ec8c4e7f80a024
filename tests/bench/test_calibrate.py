"""Gaps and radii from a known sheet."""

from __future__ import annotations

import datetime
from typing import Any

import numpy as np
import pytest
from bench_files import COILS, setup_of

from stackopt.bench.calibrate import Calibration, calibrate
from stackopt.bench.entries import setup_toml
from stackopt.bench.fit import fit
from stackopt.errors import InputError
from stackopt.physics.permeability import Constant
from stackopt.problem import CoaxialLoops
from stackopt.readers.setups import Uncertainty

COPPER = {"conductivity_s_per_m": 5.8e7, "permeability": Constant(1.0)}
FREQUENCY = np.geomspace(300.0, 1e6, 27)
TRUE = CoaxialLoops(4e-3, 4e-3, 3.6e-3, 4.5e-3)
"""0.6 mm and 0.5 mm further than stated."""


def calibrated(limits: Uncertainty, **more: Any) -> Calibration:
    setup = setup_of(5.8e7, Constant(1.0), ((0.2e-3, 1),), FREQUENCY, limits=limits, true_field=TRUE, **COPPER, **more)
    return calibrate(setup, np.random.default_rng(0))


def test_gaps_are_found_where_radii_are_sure() -> None:
    limits = Uncertainty(gaps_m=2e-3, radii_m=0.0, thickness=0.0, is_given=frozenset(("gaps", "radii", "thickness")))
    result = calibrated(limits)
    (gaps,) = result.lengths
    assert gaps.learnt
    assert gaps.low < TRUE.gap_sum_m < gaps.high
    assert gaps.value == pytest.approx(TRUE.gap_sum_m, abs=0.1e-3)
    assert result.field.gap_sum_m == pytest.approx(gaps.value)
    assert result.field.source_gap_m / result.field.victim_gap_m == pytest.approx(0.75)
    assert result.gap_uncertainty_m < 0.1e-3


def test_without_own_limits_everything_is_free_and_says_what_it_learnt() -> None:
    result = calibrated(Uncertainty())
    assert [length.name for length in result.lengths] == ["gaps", "source radius", "victim radius"]
    for length, truth in zip(result.lengths, (TRUE.gap_sum_m, 4e-3, 4e-3), strict=True):
        assert length.low < truth < length.high


def test_a_calibrated_setup_fits_better() -> None:
    """The permeability of a ferrite measured with misplaced coils, before and after the calibration."""
    result = calibrated(Uncertainty())
    law, sheets = Constant(100.0), ((50e-6, 4),)
    more = {"true_field": TRUE, "conductivity_s_per_m": 1e-3}
    before = setup_of(1e-3, law, sheets, FREQUENCY, limits=Uncertainty(gaps_m=0.05e-3, thickness=0.0), **more)
    limits = Uncertainty(gaps_m=result.gap_uncertainty_m, thickness=0.0)
    after = setup_of(1e-3, law, sheets, FREQUENCY, limits=limits, **more)
    entries = tuple(type(entry)(entry.sweep, 50e-6, 4, 0.0, result.field) for entry in after.sweeps)
    after = type(after)(after.name, result.field, entries, limits, 1e-3)
    wrong, right = (fit(setup, np.random.default_rng(0), 0).estimates[0] for setup in (before, after))
    assert abs(right.value - 100.0) < 0.5 * abs(wrong.value - 100.0)
    assert right.low < 100.0 < right.high


def test_the_calibrated_field_is_written() -> None:
    text = setup_toml(calibrated(Uncertainty()), datetime.date(2024, 3, 2))
    assert 'kind = "coaxial loops"' in text
    assert 'radii = "0 mm"' in text
    assert "sweep.csv, 2024-03-02" in text


def test_a_sheet_that_is_not_known() -> None:
    setup = setup_of(5.8e7, Constant(1.0), ((0.2e-3, 1),), FREQUENCY, permeability=Constant(1.0))
    with pytest.raises(InputError, match=r"known\.conductivity: is missing"):
        calibrate(setup, np.random.default_rng(0))


def test_stated_gaps_that_are_right_stay() -> None:
    limits = Uncertainty(gaps_m=1e-3, radii_m=0.0, thickness=0.0, is_given=frozenset(("gaps", "radii", "thickness")))
    setup = setup_of(5.8e7, Constant(1.0), ((0.2e-3, 1),), FREQUENCY, limits=limits, **COPPER)
    result = calibrate(setup, np.random.default_rng(0))
    assert result.lengths[0].value == pytest.approx(COILS.gap_sum_m, abs=0.05e-3)
