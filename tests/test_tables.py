import dataclasses
import re
import stat
from pathlib import Path

import numpy as np
import pandas as pd
import pytest
from builders import LOOPS, build_problem
from fronts import STACKS, make_front, many_stacks
from rich.table import Table

from stackopt.errors import InputError
from stackopt.front import COLUMNS
from stackopt.outputs import tables
from stackopt.outputs.console import PlainConsole
from stackopt.outputs.files import write_whole
from stackopt.outputs.materials import material_tables, skin_depth_m
from stackopt.outputs.words import ends
from stackopt.physics.permeability import Table as PermeabilityTable
from stackopt.prediction import predict
from stackopt.problem import Mask, MaterialSet, PlaneWave, Sheet


def shown(table: Table, width: int) -> str:
    console = PlainConsole(width=width, markup=False, emoji=False, highlight=False)
    with console.capture() as capture:
        console.print(table)
    return capture.get()


def test_front_csv_is_read_back_in_full_without_options(tmp_path: Path) -> None:
    front = make_front()
    tables.write_front(front, tmp_path / "front.csv")
    frame = pd.read_csv(tmp_path / "front.csv")
    assert tuple(frame.columns) == COLUMNS
    assert frame["rank"].tolist() == [1, 2, 3]
    assert frame["mass_kg_per_m2"].tolist() == [row.mass_kg_per_m2 for row in front.rows]
    assert frame["margin_db"].tolist() == [row.margin_db for row in front.rows]
    assert frame["stack"][0] == "aluminium 200um / nickel alloy 25um / copper 18um"
    assert b"\r" not in (tmp_path / "front.csv").read_bytes()


def test_a_file_is_whole_or_not_there(tmp_path: Path) -> None:
    path = tmp_path / "front.csv"
    path.write_text("old")

    def fail(part: Path) -> None:
        part.write_text("half")
        raise OSError(28, "No space left on device")

    with pytest.raises(InputError, match="no space left"):
        write_whole(path, fail)
    assert path.read_text() == "old"
    assert [entry.name for entry in tmp_path.iterdir()] == ["front.csv"]


def test_a_written_file_is_as_readable_as_any_other(tmp_path: Path) -> None:
    (tmp_path / "plain").write_text("")
    tables.write_front(make_front(), tmp_path / "front.csv")
    modes = [stat.S_IMODE((tmp_path / name).stat().st_mode) for name in ("plain", "front.csv")]
    assert modes[0] == modes[1]


@pytest.mark.parametrize(("name", "message"), [("no folder/front.csv", "does not exist"), ("taken", "is a folder")])
def test_a_path_that_cannot_be_written_says_why(tmp_path: Path, name: str, message: str) -> None:
    (tmp_path / "taken").mkdir()
    with pytest.raises(InputError, match=message):
        tables.write_front(make_front(), tmp_path / name)


def test_equal_stacks_are_written_with_the_rank_of_their_row(tmp_path: Path) -> None:
    front = make_front()
    front = dataclasses.replace(front, equals=((1, front.rows[1]), (3, front.rows[0])))
    tables.write_equals(front, tmp_path / "equals.csv")
    frame = pd.read_csv(tmp_path / "equals.csv")
    assert frame["rank"].tolist() == [1, 3]
    assert frame["stack"][1] == front.to_frame()["stack"][0]


def test_prediction_csv_has_the_columns_of_the_design(tmp_path: Path) -> None:
    problem = build_problem(LOOPS, PlaneWave(), masks=(Mask((1e3, 1e5), (1.0, 2.0)), Mask((1e6,), (20.0,))))
    one, two = predict(problem, STACKS[:1]), predict(problem, STACKS[:2])
    tables.write_predictions(one, tmp_path / "one.csv")
    frame = pd.read_csv(tmp_path / "one.csv")
    assert tuple(frame.columns) == ("requirement", "frequency_hz", "attenuation_db", "required_db", "margin_db")
    assert set(frame["requirement"]) == {"requirement 0", "requirement 1"}
    np.testing.assert_array_equal(
        frame["attenuation_db"], np.concatenate([curve.attenuation_db for curve in one[0].curves])
    )
    several = tables.prediction_frame(two)
    assert several.columns[0] == "stack"
    assert len(several) == 2 * len(frame)


def test_csv_keeps_the_number_that_the_screen_does_not_show(tmp_path: Path) -> None:
    predictions = predict(build_problem(), [(Sheet("steel", 1e-3),) * 4])
    frame = tables.prediction_frame(predictions)
    assert frame["attenuation_db"].max() > 200.0
    text = shown(next(tables.prediction_tables(predictions, 80)), 80)
    assert "> 120 dB" in text
    assert "> +30 dB" in text
    assert max(float(number) for number in re.findall(r"(\d+\.\d) dB", text)) <= 120.0


@pytest.mark.parametrize("width", [60, 80, 120, 200])
def test_front_fits_the_terminal(width: int) -> None:
    front = make_front(build_problem(LOOPS, PlaneWave(), masks=(Mask((1e3, 1e5), (1.0, 2.0)), Mask((1e6,), (20.0,)))))
    text = tables.front_text(front, width)
    assert max(map(len, text.splitlines())) <= max(width, 80)
    assert "source side" in text
    for word in ("rank", "sheets", "kg/m^2", "EUR/m^2", "mm", "dB", "tightest", "requirement"):
        assert word in text
    assert "Lightest: rank" in text


def test_a_long_front_is_shortened_and_says_where_the_rest_is() -> None:
    front = make_front(stacks=many_stacks(90))
    chosen = tables.shown_rows(front)
    assert len(chosen) == tables.MAX_ROWS
    assert set(ends(front.rows, front.problem.search.objectives)) <= set(chosen)
    assert {0, 89} <= set(chosen)
    text = tables.front_text(front, 120, "results/here/front.csv")
    assert "25 of 90 stacks shown" in text
    assert "results/here/front.csv" in text
    assert len(tables.shown_rows(make_front(stacks=many_stacks(25)))) == 25


def test_prediction_tables_split_what_does_not_fit_side_by_side() -> None:
    predictions = predict(build_problem(), many_stacks(5))
    narrow, wide = (list(tables.prediction_tables(predictions, width)) for width in (80, 140))
    assert len(narrow) == 3
    assert len(wide) == 1
    text = shown(narrow[2], 80)
    assert "stack 5" in text
    assert max(map(len, text.splitlines())) <= 80


def test_ends_name_the_best_of_each_objective_once() -> None:
    rows = make_front().rows
    found = ends(rows, ("mass", "cost", "thickness", "sheets", "margin"))
    words = ", ".join(found.values())
    for word in ("lightest", "cheapest", "thinnest", "fewest sheets", "largest margin"):
        assert words.count(word) == 1
    lightest = next(index for index, text in found.items() if "lightest" in text)
    assert rows[lightest].mass_kg_per_m2 == min(row.mass_kg_per_m2 for row in rows)
    best = next(index for index, text in found.items() if "largest margin" in text)
    assert rows[best].margin_db == max(row.margin_db for row in rows)


def test_materials_are_listed_with_stock_properties_and_origins() -> None:
    problem = build_problem()
    materials = dict(problem.materials)
    materials["copper"] = dataclasses.replace(materials["copper"], origin={"conductivity": "a book"}, notes="soft")
    materials["ribbon"] = dataclasses.replace(
        materials["steel"], name="ribbon", permeability=PermeabilityTable((1e3, 1e5), (900.0, 300.0), (-1.0, -200.0))
    )
    known = MaterialSet("Invented sheets", "EUR", materials)
    text = "".join(shown(table, 100) for table in material_tables(known, origins=True))
    for part in ("9um, 18um", "14/kg", "58 MS/m", "cole-cole: 280", "relaxation 5 kHz", "a book", "soft", "9.35 mm"):
        assert part in text
    row = next(line for line in text.splitlines() if line.lstrip().startswith("ribbon") and "900" in line)
    assert row.split()[1] == "-"  # 50 Hz is outside its table
    assert "a book" not in "".join(shown(table, 100) for table in material_tables(known))


def test_skin_depth_is_the_usual_one_for_a_metal() -> None:
    copper = build_problem().materials["copper"]
    expected = np.sqrt(2.0 / (2.0 * np.pi * 1e6 * 4e-7 * np.pi * 5.8e7))
    assert skin_depth_m(copper, np.array([1e6]))[0] == pytest.approx(expected, rel=1e-6)
