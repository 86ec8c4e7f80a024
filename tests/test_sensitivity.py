from dataclasses import replace
from pathlib import Path

import pytest
from builders import build_problem
from matplotlib.image import imread
from test_plots import check_nothing_is_cut_off
from test_tolerance import BOND, EASY, NEAR, tolerant

from stackopt.outputs.sensitivity_plots import sensitivity_figure, sensitivity_path, write_sensitivity_plot
from stackopt.prediction import predict
from stackopt.problem import Sheet
from stackopt.sensitivity import Sensitivity, sensitivity

STACK = (Sheet("steel", 100e-6), Sheet("copper", 35e-6), Sheet("steel", 25e-6))


@pytest.fixture(scope="module")
def found() -> Sensitivity:
    return sensitivity(tolerant(NEAR, bond=BOND), STACK)


def test_every_value_with_a_tolerance_has_its_effect(found: Sensitivity) -> None:
    assert len(found.effects) == 3 + 2 + 3
    assert {(effect.layer, effect.value) for effect in found.effects if effect.sheet.material == "copper"} == {
        (2, "thickness"),
        (2, "conductivity"),
    }


def test_more_of_it_shields_more_where_nothing_resonates(found: Sensitivity) -> None:
    for effect in found.effects:
        if effect.value != "permeability":  # which may work against reflection
            assert effect.change_down_db < 0.0 < effect.change_up_db


def test_the_strongest_stand_first(found: Sensitivity) -> None:
    sizes = [effect.largest_db for effect in found.effects]
    assert sizes == sorted(sizes, reverse=True)
    changes = [entry.change_db for entry in found.left_out]
    assert changes == sorted(changes)
    assert max(changes) < 0.0


def test_changes_are_differences_of_predictions(found: Sensitivity) -> None:
    problem = tolerant(NEAR, bond=BOND)
    thin = (STACK[0], Sheet("copper", 35e-6 * 0.92), STACK[2])
    nominal, thinner, without = (
        prediction.row.margin_db for prediction in predict(problem, [STACK, thin, (STACK[0], STACK[2])])
    )
    assert found.margin_db == nominal
    (effect,) = (effect for effect in found.effects if (effect.layer, effect.value) == (2, "thickness"))
    assert effect.change_down_db == pytest.approx(thinner - nominal, abs=1e-9)
    (entry,) = (entry for entry in found.left_out if entry.layer == 2)
    assert entry.change_db == pytest.approx(without - nominal, abs=1e-9)


def test_only_the_layer_itself_changes(found: Sensitivity) -> None:
    first, third = (
        next(effect for effect in found.effects if (effect.layer, effect.value) == (layer, "thickness"))
        for layer in (1, 3)
    )
    assert first.change_down_db < third.change_down_db


def test_without_its_only_layer_a_stack_is_nothing() -> None:
    problem = tolerant(NEAR, bond=BOND)
    found = sensitivity(problem, STACK[:1])
    least = -float(EASY.required_db(EASY.grid_hz()).max())
    assert found.margin_db + found.left_out[0].change_db == pytest.approx(least, abs=1e-9)


def test_materials_without_tolerance_are_named() -> None:
    found = sensitivity(build_problem(NEAR, masks=(EASY,)), STACK)
    assert found.effects == ()
    assert found.without_tolerance == ("steel", "copper")
    assert len(found.left_out) == 3


def test_the_figure(found: Sensitivity, tmp_path: Path) -> None:
    problem = tolerant(NEAR, bond=BOND)
    check_nothing_is_cut_off(sensitivity_figure(problem, found))
    path = sensitivity_path(tmp_path / "curves.png", 2, 3)
    assert path.name == "curves_sensitivity_2.png"
    write_sensitivity_plot(problem, found, path)
    assert imread(path).shape[2] == 4
    sensitivity_figure(problem, replace(found, effects=()))
