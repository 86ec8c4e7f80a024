"""The demonstration: its sweeps, what is fitted to them, and the set that was pasted together."""

from __future__ import annotations

import datetime
import tomllib
from pathlib import Path

import demo_sweeps as demo
import numpy as np
import pytest

from stackopt.bench.calibrate import calibrate
from stackopt.bench.entries import entry_toml
from stackopt.bench.fit import fit
from stackopt.readers import read_material_set, read_problem
from stackopt.readers.setups import read_setup
from stackopt.readers.sweeps import read_sweep

DEMO = Path(__file__).parents[2] / "problems" / "bench_demo"
FITS = {"ferrite": "ferrite sheet", "copper_foil": "copper foil", "steel": "steel shim"}
TRUTH = {
    "ferrite": {"initial": demo.FERRITE.initial, "relaxation": demo.FERRITE.relaxation_hz},
    "copper_foil": {"conductivity": demo.COPPER_S_PER_M},
    "steel": {
        "conductivity": demo.STEEL_S_PER_M,
        "initial": demo.STEEL.initial,
        "relaxation": demo.STEEL.relaxation_hz,
        "broadening": demo.STEEL.broadening,
        "high_frequency": demo.STEEL.high_frequency,
    },
}


def test_sweeps_are_those_of_their_maker(tmp_path: Path) -> None:
    demo.write_sweeps(tmp_path)
    names = sorted(path.name for path in tmp_path.glob("*.csv"))
    assert names == sorted(path.name for path in DEMO.glob("*.csv"))
    for name in names:
        kept, made = read_sweep(DEMO / name), read_sweep(tmp_path / name)
        np.testing.assert_array_equal(kept.frequency_hz, made.frequency_hz)
        np.testing.assert_allclose(kept.attenuation_db, made.attenuation_db, rtol=0.0, atol=0.011)


@pytest.mark.parametrize("path", sorted(DEMO.glob("*.*")), ids=lambda path: path.name)
def test_every_file_says_that_it_is_invented(path: Path) -> None:
    assert "invented" in path.read_text(encoding="utf-8").lower()


def test_calibration_finds_the_coils() -> None:
    result = calibrate(read_setup(DEMO / "setup_copper_strip.toml"), np.random.default_rng(1))
    truth = {"gaps": demo.COILS.gap_sum_m, "source radius": 4e-3, "victim radius": 4e-3}
    for length in result.lengths:
        assert length.low < truth[length.name] < length.high
    written = tomllib.loads((DEMO / "calibrated.toml").read_text())
    for name in ("ferrite", "copper_foil", "steel"):
        assert tomllib.loads((DEMO / f"setup_{name}.toml").read_text())["field"] == written["field"]
    assert float(written["field"]["source_gap"].split()[0]) == pytest.approx(result.field.source_gap_m * 1e3, abs=0.01)


@pytest.mark.parametrize("name", FITS)
def test_fits_find_what_was_hidden(name: str) -> None:
    result = fit(read_setup(DEMO / f"setup_{name}.toml"), np.random.default_rng(1), 0)
    found = {item.name: item for item in result.estimates}
    assert found.keys() == TRUTH[name].keys()
    for key, truth in TRUTH[name].items():
        assert found[key].low < truth < found[key].high, key
    fresh = tomllib.loads(entry_toml(result, FITS[name], datetime.date(2024, 5, 17)))["materials"][FITS[name]]
    kept = tomllib.loads((DEMO / f"{name}.toml").read_text())["materials"][FITS[name]]
    assert fresh.keys() == kept.keys()
    assert fresh["origin"] == kept["origin"]
    assert fresh["gauges"] == kept["gauges"]


def test_the_set_holds_the_entries() -> None:
    pasted = tomllib.loads((DEMO / "measured.toml").read_text())["materials"]
    for name, material in FITS.items():
        assert pasted[material] == tomllib.loads((DEMO / f"{name}.toml").read_text())["materials"][material]
    assert set(read_material_set(DEMO / "measured.toml").materials) == {*FITS.values(), "acrylic film"}
    assert read_problem(DEMO / "problem.toml").requirements[0].field == demo.SENSOR
