import dataclasses
import itertools
import math
import re
from pathlib import Path

import numpy as np
import pandas as pd
import pytest
from builders import build_problem, film
from fronts import STACKS, make_front

from stackopt import build
from stackopt.errors import InputError
from stackopt.outputs import build_files
from stackopt.outputs.build_page import build_html
from stackopt.outputs.build_plots import section_figure
from stackopt.prediction import predict
from stackopt.problem import MagneticNearField, Mask, Material, Problem, Sheet, Tolerance
from stackopt.readers import parse_size, read_stack

PANEL = (0.12, 0.08)


def bonded() -> Problem:
    problem = build_problem(bond=film(25.0), cost_per_sheet=2.5)
    steel = dataclasses.replace(problem.materials["steel"], tolerance=Tolerance((-0.05, 0.05), (0.0, 0.0), (-0.5, 1.0)))
    copper = dataclasses.replace(problem.materials["copper"], notes="annealed", origin={"conductivity": "measured"})
    return dataclasses.replace(problem, materials={**problem.materials, "steel": steel, "copper": copper})


def test_layers_alternate_with_bonds_and_add_up_to_the_totals() -> None:
    problem = bonded()
    front = make_front(problem)
    sheet = build.make_build_sheet(front, 2)
    assert [layer.is_bond for layer in sheet.layers] == [False, True, False, True, False]
    row = front.rows[1]
    assert sum(layer.mass_kg_per_m2 for layer in sheet.layers) == pytest.approx(row.mass_kg_per_m2)
    cost = sum(layer.cost_per_m2 for layer in sheet.layers) + sheet.handling_per_m2
    assert cost == pytest.approx(row.cost_per_m2)
    assert sheet.layers[0].state == "annealed"


def test_what_a_layer_does_is_the_margin_without_it() -> None:
    problem = bonded()
    stack = STACKS[1]
    losses = build.losses_db(problem, stack)
    whole, *without = predict(problem, [stack, stack[1:], stack[:1] + stack[2:], stack[:2]], build.DENSITY)
    expected = [other.row.margin_db - whole.row.margin_db for other in without]
    assert losses == pytest.approx(expected, abs=0.03)


def test_without_its_only_sheet_a_stack_attenuates_nothing() -> None:
    problem = build_problem(masks=(Mask((1e3, 1e6), (5.0, 30.0)),))
    (loss,) = build.losses_db(problem, (Sheet("copper", 35e-6),))
    (whole,) = predict(problem, [(Sheet("copper", 35e-6),)], build.DENSITY)
    assert loss == pytest.approx(-30.0 - whole.row.margin_db, abs=0.03)


def test_cuts_gather_equal_sheets_and_tell_stock_and_waste() -> None:
    stack = (Sheet("steel", 1e-3), Sheet("copper", 1e-4), Sheet("steel", 1e-3))
    steel, copper = build.cut_list(stack, PANEL, (0.3, 0.2))
    assert (steel.pieces, steel.per_stock, steel.stock_sheets) == (2, 4, 1)
    assert steel.waste == pytest.approx(1.0 - 2 * 0.12 * 0.08 / 0.06)
    assert copper.pieces == 1
    (long,) = build.cut_list(stack[:1], (0.25, 0.19), (0.2, 0.26))
    assert (long.per_stock, long.stock_sheets) == (1, 1)
    (large,) = build.cut_list(stack[:1], (0.4, 0.1), (0.3, 0.3))
    assert (large.per_stock, large.stock_sheets, large.waste) == (0, None, None)
    (many,) = build.cut_list((Sheet("steel", 1e-3),) * 5, (0.1, 0.1), (0.2, 0.1))
    assert (many.pieces, many.stock_sheets) == (5, 3)
    assert build.cut_list(stack[:1], PANEL, None)[0].waste is None


def test_overhang_is_counted_from_the_larger_loop() -> None:
    (overhang,) = build.overhangs(build_problem(), PANEL)
    assert overhang.reach_m == pytest.approx(0.04 - 0.012)
    assert overhang.advised_m == pytest.approx((0.09, 0.135))
    assert overhang.advised_side_m == pytest.approx((2 * 0.102, 2 * 0.147))
    assert build.overhangs(build_problem(MagneticNearField(0.1)), PANEL) == []


def test_the_band_lies_round_the_prediction() -> None:
    sheet = build.make_build_sheet(make_front(bonded()), 3)
    assert sheet.band is not None
    (curve,) = sheet.prediction.curves
    assert np.all(sheet.band.low_db[0] <= curve.attenuation_db + 0.02)
    assert np.all(sheet.band.high_db[0] >= curve.attenuation_db - 0.02)
    assert sheet.band.worst_margin_db < sheet.row.margin_db - 1.0
    assert build.make_build_sheet(make_front(), 1).band is None


def test_all_files_are_written_and_read_back(tmp_path: Path) -> None:
    problem = bonded()
    front = make_front(problem)
    sheet = build.make_build_sheet(front, 2, PANEL, (0.3, 0.2))
    files = build_files.write_build_sheet(sheet, tmp_path / "a" / "pick-2", "run-1")
    assert [path.name for path in files] == ["build_sheet.html", "layers.csv", "prediction.csv", "stack.toml"]
    assert read_stack(files[3], problem) == STACKS[1]
    layers = pd.read_csv(files[1])
    assert list(layers["material"]) == ["copper", "film", "nickel alloy", "film", "copper"]
    assert list(layers["thickness_um"]) == [35.0, 25.0, 100.0, 25.0, 35.0]
    assert layers["mass_g"].sum() == pytest.approx(front.rows[1].mass_kg_per_m2 * 0.12 * 0.08 * 1e3)
    prediction = pd.read_csv(files[2])
    assert prediction["margin_db"].min() == pytest.approx(front.rows[1].margin_db, abs=0.1)
    text = files[0].read_text(encoding="utf-8")
    for part in (
        "Build sheet: Invented",
        "Rank 2 of 3",
        "source side",
        "film (bond)",
        "annealed",
        "handling of the sheets",
        "120 mm x 80 mm",
        "This panel reaches only 28 mm",
        "Smallest margin",
        "Nearest alternatives",
        "What the model leaves out",
        "conductivity 58 MS/m",
        "measured",
        "run run-1",
    ):
        assert part in re.sub(r"<[^>]*>", "", text), part
    assert "http://" not in re.sub(r'xmlns(:\w+)?="[^"]*"', "", text)


def test_a_folder_that_cannot_be_made_says_what_to_do(tmp_path: Path) -> None:
    (tmp_path / "file").write_text("")
    sheet = build.make_build_sheet(make_front(), 1)
    with pytest.raises(InputError, match="name another folder with --out"):
        build_files.write_build_sheet(sheet, tmp_path / "file" / "pick", "run-1")


def test_nothing_is_made_up_where_nothing_is_known() -> None:
    problem = build_problem()
    plain = Material("sheet", 1e7, 1000.0, gauges_m=(1e-3,))
    problem = dataclasses.replace(problem, materials={**problem.materials, "sheet": plain})
    sheet = build.make_build_sheet(make_front(problem, [(Sheet("sheet", 1e-3),)]), 1)
    text = re.sub(r"<[^>]*>", "", build_html(sheet, "r"))
    assert "no price" in text
    assert "No panel size was given" in text
    assert "the material set gives none" in text
    assert "not stated in the set" in text
    assert "Nearest alternatives" not in text
    assert math.isnan(sheet.layers[0].cost_per_m2)


def test_stack_files_keep_every_digit_and_odd_names(tmp_path: Path) -> None:
    problem = build_problem(bond=film(25.0))
    name = 'steel "A" \\ é'
    materials = {**problem.materials, name: dataclasses.replace(problem.materials["steel"], name=name)}
    problem = dataclasses.replace(problem, materials=materials)
    stack = (Sheet(name, 123.456789e-6), Sheet("copper", 2.5e-3))
    sheet = build.make_build_sheet(make_front(problem, [stack]), 1)
    path = tmp_path / "stack.toml"
    path.write_text(build_files.stack_toml(sheet), encoding="utf-8")
    assert [(one.material, pytest.approx(one.thickness_m, rel=1e-9)) for one in read_stack(path, problem)] == [
        (one.material, one.thickness_m) for one in stack
    ]


@pytest.mark.parametrize(
    ("text", "words"),
    [
        (
            'sheets = [["copper", "35um"]]\nbond = ["film", "50 um"]',
            "bond: found film 50um, but the problem puts film 25um",
        ),
        ('sheets = [["coper", "35um"]]', "did you mean 'copper'?"),
        ("sheets = []", "empty list"),
        ('layers = [["copper", "35um"]]', "layers: unknown key"),
        ('sheets = [["copper", "35"]]', "has no unit"),
        ("sheets = [", "is not valid TOML"),
    ],
)
def test_wrong_stack_files_are_reported(text: str, words: str, tmp_path: Path) -> None:
    path = tmp_path / "stack.toml"
    path.write_text(text)
    with pytest.raises(InputError) as caught:
        read_stack(path, build_problem(bond=film(25.0)))
    assert words in str(caught.value)
    assert str(path) in str(caught.value)


@pytest.mark.parametrize("text", ["120mm x 80mm", "12 cm×8cm", " 0.12 m x 80 mm "])
def test_sizes_are_read(text: str) -> None:
    assert parse_size(text) == pytest.approx(PANEL)


@pytest.mark.parametrize("text", ["120mm", "120 x 80", "0mm x 3mm", "1mm x 2mm x 3mm", "", "-1mm x 2mm", "1kg x 2mm"])
def test_wrong_sizes_say_what_to_write(text: str) -> None:
    with pytest.raises(ValueError, match=r"found .*(120mm x 80mm|at least 1 mm)"):
        parse_size(text)


def test_lines_of_text_of_thin_layers_do_not_overlap() -> None:
    problem = build_problem(max_sheets=9, bond=film(5.0))
    stack = (*[Sheet("copper", 9e-6)] * 5, Sheet("steel", 1e-3))
    sheet = build.make_build_sheet(make_front(problem, [stack]), 1)
    figure = section_figure(sheet)
    figure.canvas.draw()
    boxes = [text.get_window_extent() for text in figure.axes[0].texts]
    assert len(boxes) == 11
    for upper, lower in itertools.pairwise(boxes):
        assert not upper.overlaps(lower)
    assert all(box.y0 >= 0 and box.x1 <= figure.bbox.x1 for box in boxes)
