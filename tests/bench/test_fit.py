"""Fits: laws and values recovered, what cannot be known said, entries that a set accepts."""

from __future__ import annotations

import datetime
import json
import tomllib
from pathlib import Path
from typing import Any

import numpy as np
import pytest
from bench_files import COILS, setup_of

from stackopt.bench.entries import entry_toml, fit_json
from stackopt.bench.fit import Fit, fit, law_rows
from stackopt.errors import InputError
from stackopt.physics.permeability import ColeCole, Constant, Debye, Lorentz, PermeabilityLaw
from stackopt.problem import CoaxialLoops
from stackopt.readers import read_material_set
from stackopt.readers.setups import Uncertainty

DAY = datetime.date(2024, 3, 2)
AUDIO = np.geomspace(200.0, 1e6, 25)
RADIO = np.geomspace(1e4, 3e7, 25)
STEEL = ColeCole(280.0, 5e3, 0.2, 83.3)
SURE = Uncertainty(gaps_m=0.0, thickness=0.0)


def fitted(sigma: float, law: PermeabilityLaw, sheets: Any, frequency: Any, replicates: int = 0, **more: Any) -> Fit:
    return fit(setup_of(sigma, law, sheets, frequency, **more), np.random.default_rng(0), replicates)


def said(result: Fit) -> str:
    return " ".join(result.showing.sentences)


@pytest.mark.parametrize(
    ("sigma", "law", "sheets", "frequency", "known"),
    [
        (5.8e7, Constant(1.0), ((35e-6, 1),), AUDIO, {}),
        (1e-3, Constant(110.0), ((50e-6, 4),), AUDIO, {"conductivity_s_per_m": 1e-3}),
        (1e-3, Debye(110.0, 4e6), ((50e-6, 4), (50e-6, 2)), RADIO, {"conductivity_s_per_m": 1e-3}),
        (1e-3, Lorentz(150.0, 8e6, 1.5e7), ((100e-6, 4),), RADIO, {"conductivity_s_per_m": 1e-3}),
        (1e-3, ColeCole(200.0, 1e6, 0.3), ((100e-6, 4),), RADIO, {"conductivity_s_per_m": 1e-3}),
        (7e6, STEEL, ((150e-6, 1), (300e-6, 1)), AUDIO, {}),
    ],
    ids=["non-magnetic", "constant", "debye", "lorentz", "cole-cole", "cole-cole with high_frequency"],
)
def test_the_law_is_found(
    request: pytest.FixtureRequest, sigma: float, law: PermeabilityLaw, sheets: Any, frequency: Any, known: Any
) -> None:
    result = fitted(sigma, law, sheets, frequency, limits=SURE, noise_db=0.05, **known)
    assert result.solution.residuals.hypothesis.name == request.node.callspec.id
    assert [row[0] for row in law_rows(result) if row[4]] == [request.node.callspec.id]
    truth = {"conductivity": sigma, **{key.removesuffix("_hz"): value for key, value in vars(law).items()}}
    truth.setdefault("initial", truth.get("value", 1.0))
    for item in result.estimates:
        assert item.determined
        assert item.value == pytest.approx(truth[item.name], rel=0.1)
    assert result.solution.noise_db == pytest.approx(0.05, rel=0.35)


def test_thin_copper_shows_only_conductivity_times_thickness() -> None:
    limits = Uncertainty(gaps_m=0.1e-3)
    result = fitted(5.8e7, Constant(1.0), ((35e-6, 1),), AUDIO, limits=limits, permeability=Constant(1.0))
    assert "show conductivity x thickness only" in said(result)
    (product,) = result.showing.combinations
    assert product.unit == "S"
    assert product.low < 5.8e7 * 35e-6 < product.high
    (sigma,) = result.estimates
    assert (product.high - product.low) / product.value < 0.7 * (sigma.high - sigma.low) / sigma.value


def test_thin_ferrite_shows_only_susceptibility_times_thickness() -> None:
    result = fitted(1e-3, Constant(100.0), ((50e-6, 4),), AUDIO, conductivity_s_per_m=1e-3)
    assert "show (permeability - 1) x thickness only" in said(result)
    (product,) = result.showing.combinations
    assert product.low < 99.0 * 50e-6 < product.high


def test_thick_copper_shows_its_conductivity_and_its_thickness() -> None:
    frequency = np.geomspace(1e3, 1e5, 25)
    result = fitted(5.8e7, Constant(1.0), ((2e-3, 1),), frequency, permeability=Constant(1.0))
    assert "x thickness only" not in said(result)
    assert not result.showing.combinations


def test_the_conductivity_of_an_insulator_is_not_invented() -> None:
    result = fitted(1e-3, Constant(100.0), ((50e-6, 4),), AUDIO)
    assert "do not determine the conductivity: anything up to" in said(result)
    sigma = next(item for item in result.estimates if item.name == "conductivity")
    assert not sigma.determined
    assert 1.0 < sigma.high < 1e6
    assert result.conductivity_s_per_m == 0.0
    assert "not determined" in entry_toml(result, "ferrite", DAY)


def test_gaps_that_trade_are_named() -> None:
    limits = Uncertainty(gaps_m=1e-3, thickness=0.0)
    loose = fitted(1e-3, Constant(100.0), ((50e-6, 4),), AUDIO, limits=limits, conductivity_s_per_m=1e-3)
    assert "The gaps account for" in said(loose)
    assert "only their stated uncertainty keeps the two apart" in said(loose)
    sure = fitted(1e-3, Constant(100.0), ((50e-6, 4),), AUDIO, limits=SURE, conductivity_s_per_m=1e-3)
    assert "gaps" not in said(sure)
    wide, narrow = (result.estimates[0].high - result.estimates[0].low for result in (loose, sure))
    assert wide > 3.0 * narrow


def test_conductivity_and_permeability_that_trade_are_named() -> None:
    """Steel in a narrow band: little more than the product shows."""
    result = fitted(7e6, Constant(150.0), ((150e-6, 1),), np.geomspace(2e4, 3e4, 8), noise_db=0.3, limits=SURE)
    assert "cannot tell conductivity from permeability" in said(result)
    assert "the permeability down by" in said(result)


def test_another_material_that_fits_as_well_is_named() -> None:
    """A skin-deep sheet: the product shows, and the mismatch of impedances, which does not tell more from less."""
    result = fitted(7e6, Constant(150.0), ((0.5e-3, 1),), np.geomspace(2e4, 6e4, 12), noise_db=0.3, limits=SURE)
    assert "Another material fits nearly as well: conductivity" in said(result)


def test_outliers_do_not_pull() -> None:
    def spoil(loss: Any) -> Any:
        loss = loss.copy()
        loss[[3, 11]] += 6.0
        return loss

    clean = fitted(5.8e7, Constant(1.0), ((35e-6, 1),), AUDIO, limits=SURE, permeability=Constant(1.0))
    spoilt = fitted(5.8e7, Constant(1.0), ((35e-6, 1),), AUDIO, limits=SURE, spoil=spoil, permeability=Constant(1.0))
    assert spoilt.estimates[0].value == pytest.approx(clean.estimates[0].value, rel=0.02)
    assert any("far off" in remark for remark in spoilt.remarks)


def test_a_wrong_model_is_noticed() -> None:
    """Coils of other radii than stated: the residuals are smooth, and the fit says so."""
    other = CoaxialLoops(9e-3, 9e-3, COILS.source_gap_m, COILS.victim_gap_m)
    result = fitted(7e6, Constant(200.0), ((150e-6, 1),), AUDIO, true_field=other, permeability=Constant(200.0))
    assert any("neighbouring residuals agree" in remark for remark in result.remarks)


def test_bootstrap_agrees_with_the_jacobian() -> None:
    result = fitted(7e6, Constant(150.0), ((150e-6, 1), (300e-6, 1)), AUDIO, 400)
    for item in result.estimates:
        assert item.bootstrap is not None
        width = np.log(item.high / item.low)
        drawn = np.log(item.bootstrap[1] / item.bootstrap[0])
        assert drawn == pytest.approx(width, rel=0.3), item.name


def test_an_entry_is_accepted_by_a_set(tmp_path: Path) -> None:
    entry = {"density": "7850 kg/m^3", "price_per_kg": 3.5}
    result = fitted(7e6, STEEL, ((150e-6, 1), (300e-6, 1)), AUDIO, 20, entry=entry, origin={"density": "weighed"})
    text = entry_toml(result, "my steel", DAY)
    (tmp_path / "set.toml").write_text(f'title = "t"\ncurrency = "EUR"\n{text}')
    steel = read_material_set(tmp_path / "set.toml").materials["my steel"]
    assert steel.gauges_m == pytest.approx((150e-6, 300e-6))
    assert steel.conductivity_s_per_m == pytest.approx(result.conductivity_s_per_m, rel=1e-3)
    np.testing.assert_allclose(steel.permeability(AUDIO), result.permeability(AUDIO), rtol=1e-3)
    assert steel.origin["permeability"] == "measured, sweep.csv, 2024-03-02; intrinsic"
    assert steel.origin["density"] == "weighed"
    down, up = steel.tolerance.conductivity
    item = next(item for item in result.estimates if item.name == "conductivity")
    assert down <= item.low / item.value - 1.0
    assert up >= item.high / item.value - 1.0


def test_an_entry_without_density_says_so() -> None:
    result = fitted(5.8e7, Constant(1.0), ((35e-6, 1),), AUDIO, permeability=Constant(1.0))
    text = entry_toml(result, "foil", DAY)
    assert "# density is not measured here" in text
    assert "density" not in tomllib.loads(text)["materials"]["foil"]


def test_json_holds_the_fit() -> None:
    result = fitted(1e-3, Constant(100.0), ((50e-6, 4),), AUDIO)
    data = json.loads(fit_json(result, "ferrite", "0"))
    values = {item["name"]: item for item in data["values"]}
    assert values["conductivity"]["low"] is None
    assert values["initial"]["low"] < 100.0 < values["initial"]["high"]
    assert len(data["sweeps"][0]["fitted_db"]) == len(AUDIO)
    assert [law["law"] for law in data["laws"] if law["chosen"]] == ["constant"]


def test_nothing_to_fit() -> None:
    with pytest.raises(InputError, match="nothing is left to fit"):
        fitted(5.8e7, Constant(1.0), ((35e-6, 1),), AUDIO, permeability=Constant(1.0), conductivity_s_per_m=5.8e7)


def test_too_few_points() -> None:
    with pytest.raises(InputError, match="at least 4 are needed"):
        fitted(5.8e7, Constant(1.0), ((35e-6, 1),), AUDIO[:3], permeability=Constant(1.0))


@pytest.mark.parametrize("name", ["", "a/b", " x", "a\tb"])
def test_names_that_no_material_can_have(name: str) -> None:
    result = fitted(5.8e7, Constant(1.0), ((35e-6, 1),), AUDIO, permeability=Constant(1.0))
    with pytest.raises(InputError, match="--material"):
        entry_toml(result, name, DAY)


def test_the_same_seed_gives_the_same_fit() -> None:
    one, two = (fitted(7e6, Constant(150.0), ((150e-6, 1),), AUDIO, 20) for _ in range(2))
    assert one.estimates == two.estimates
