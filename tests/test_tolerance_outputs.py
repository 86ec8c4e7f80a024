from dataclasses import replace
from pathlib import Path

import numpy as np
import pandas as pd
import problem_files
import pytest
from builders import build_problem
from matplotlib.collections import PolyCollection
from test_cli import run
from test_plots import check_nothing_is_cut_off, texts
from test_tolerance import EASY, NEAR, tolerant

from stackopt.errors import InputError
from stackopt.outputs import plots, tables
from stackopt.outputs.tolerances import assumption_words, band_words, scouted_words
from stackopt.prediction import predict
from stackopt.problem import Mask, SearchSettings, Sheet
from stackopt.readers import read_problem

SEED = "random_seed = 7"
TOLERANCE = 'tolerance = {thickness = "5 %", permeability = ["-50 %", "+100 %"]}\n'
STACK = (Sheet("steel", 100e-6), Sheet("copper", 35e-6))
PLAIN = (Sheet("nickel alloy", 25e-6),)


def with_search(folder: Path, lines: str, materials: dict[str, str] | None = None) -> Path:
    return problem_files.write(folder, {SEED: f"{SEED}\n{lines}"}, materials)


class TestReading:
    def test_what_is_assumed(self, tmp_path: Path) -> None:
        assert read_problem(with_search(tmp_path, "")).search.assume == "nominal"
        assert read_problem(with_search(tmp_path, 'assume = "worst"')).search.assume == "worst"
        search = read_problem(with_search(tmp_path, 'assume = "yield"\nyield_goal = "99 %"')).search
        assert (search.assume, search.yield_goal) == ("yield", pytest.approx(0.99))
        assert read_problem(with_search(tmp_path, 'assume = "yield"')).search.yield_goal == 0.95

    @pytest.mark.parametrize(
        ("lines", "message"),
        [
            ('assume = "worse"', "search.assume: found 'worse'; did you mean 'worst'? Known: nominal, worst, yield"),
            ("assume = 3", "search.assume: found 3; "),
            ('yield_goal = "90 %"', 'search.yield_goal: found with assume = "nominal"; it needs assume = "yield"'),
            ('assume = "worst"\nyield_goal = "90 %"', 'search.yield_goal: found with assume = "worst"; it needs'),
            ('assume = "yield"\nyield_goal = 0.9', "search.yield_goal: found 0.9, which has no unit"),
            ('assume = "yield"\nyield_goal = "100 %"', "it must be at least 50 % and at most 99.9 %"),
        ],
    )
    def test_mistakes_are_named(self, tmp_path: Path, lines: str, message: str) -> None:
        with pytest.raises(InputError) as caught:
            read_problem(with_search(tmp_path, lines))
        assert message in str(caught.value)

    @pytest.mark.parametrize(
        ("value", "message"),
        [
            ('"-5 %"', "must be at least 0 % and below 100 %"),
            ('"150 %"', "must be at least 0 % and below 100 %"),
            ('["-100 %", "+5 %"]', "the first must be above -100 %"),
            ('["-5 %", "+150 %"]', "the second at least 0 % and at most +100 %"),
            ('["5 %", "10 %"]', "the first must be above -100 % and at most 0 %"),
        ],
    )
    def test_impossible_tolerances_are_named(self, tmp_path: Path, value: str, message: str) -> None:
        path = problem_files.write(tmp_path, materials={'thickness = "5 %"': f"thickness = {value}"})
        with pytest.raises(InputError) as caught:
            read_problem(path)
        assert len(caught.value.findings) == 1
        assert message in str(caught.value)

    def test_a_remark_when_nothing_varies(self, tmp_path: Path) -> None:
        remarks = read_problem(with_search(tmp_path, 'assume = "worst"', {TOLERANCE: ""})).remarks
        assert any('assume = "worst" changes nothing' in remark for remark in remarks)
        assert not read_problem(with_search(tmp_path, 'assume = "worst"')).remarks

    def test_too_many_corners_are_a_mistake(self, tmp_path: Path, monkeypatch: pytest.MonkeyPatch) -> None:
        monkeypatch.setattr("stackopt.readers.checks.MOST_CORNERS", 1)
        with pytest.raises(InputError, match=r"search.assume: a stack may have 2 corners"):
            read_problem(with_search(tmp_path, 'assume = "worst"'))
        read_problem(with_search(tmp_path, 'assume = "yield"'))


class TestTables:
    def test_the_band_stands_behind_the_other_columns(self) -> None:
        frame = tables.prediction_frame(predict(tolerant(NEAR), [STACK], bands=True))
        assert tuple(frame.columns) == tables.PREDICTION_COLUMNS + tables.BAND_COLUMNS
        assert np.all(frame["attenuation_low_db"] <= frame["attenuation_db"])
        assert np.all(frame["attenuation_db"] <= frame["attenuation_high_db"])

    def test_without_tolerances_the_columns_are_as_before(self) -> None:
        frame = tables.prediction_frame(predict(build_problem(NEAR), [STACK], bands=True))
        assert tuple(frame.columns) == tables.PREDICTION_COLUMNS

    def test_a_stack_without_tolerance_among_others_has_its_attenuation_as_band(self) -> None:
        problem = tolerant(NEAR)
        problem = replace(
            problem, materials={**problem.materials, "nickel alloy": build_problem().materials["nickel alloy"]}
        )
        frame = tables.prediction_frame(predict(problem, [STACK, PLAIN], bands=True))
        plain = frame[frame["stack"] == "nickel alloy 25um"]
        np.testing.assert_array_equal(plain["attenuation_low_db"], plain["attenuation_db"])
        assert not frame.isna().any().any()


class TestFigure:
    def test_the_band_is_shaded(self) -> None:
        problem = tolerant(NEAR, masks=(Mask((0.0, 1e3, 1e6), (0.0, 3.0, 40.0)),))
        figure = plots.prediction_figure(problem, [STACK])
        check_nothing_is_cut_off(figure)
        assert "shaded: corners of the tolerances" in texts(figure)
        shades = [item for item in figure.axes[0].findobj(PolyCollection) if item.get_alpha() == 0.15]
        assert len(shades) == 1

    def test_without_tolerances_nothing_is(self) -> None:
        assert "shaded" not in texts(plots.prediction_figure(build_problem(NEAR), [STACK]))

    def test_the_shade_holds_the_curve_and_every_grid_point(self) -> None:
        problem = tolerant(NEAR)
        (prediction,) = predict(problem, [STACK], bands=True)
        (smooth,) = predict(problem, [STACK], plots.SMOOTH)
        assert prediction.band is not None
        grid, curve = smooth.curves[0].frequency_hz, smooth.curves[0].attenuation_db
        low, high = plots._smooth_band(prediction.band, 0, grid, curve)
        assert np.all((low <= curve) & (curve <= high))
        at = prediction.band.frequency_hz[0]
        np.testing.assert_allclose(np.interp(np.log(at), np.log(grid), low), prediction.band.low_db[0], atol=0.05)


class TestWords:
    @pytest.mark.parametrize(
        ("assume", "start"), [("nominal", "nominal: the mask"), ("worst", "worst: the"), ("yield", "yield: the mask")]
    )
    def test_what_is_assumed(self, assume: str, start: str) -> None:
        problem = replace(tolerant(NEAR), search=SearchSettings(assume=assume, yield_goal=0.9))
        assert assumption_words(problem).startswith(start)
        assert len(list(scouted_words(problem, STACK))) == (assume != "nominal")
        if assume == "yield":
            assert "at least 90 % of samples" in assumption_words(problem)

    def test_a_band_says_whether_the_worst_corner_meets_the_mask(self) -> None:
        problem = tolerant(NEAR, masks=(Mask((1e5,), (1.0,)),))
        hard = tolerant(NEAR, NEAR, masks=(EASY, Mask((1e5,), (150.0,))))
        good, bad = (predict(item, [STACK], bands=True)[0].band for item in (problem, hard))
        assert good is not None
        assert bad is not None
        assert band_words(good, problem).startswith(
            "meets the mask at all 32 corners of the tolerances; smallest margin +"
        )
        words = band_words(bad, hard)
        assert words.startswith("misses the mask by ")
        assert words.endswith("at 100 kHz of 'requirement 1', the worst of all 32 corners of the tolerances")


class TestCommands:
    def test_predict_shows_the_band_and_which_layer_matters(self, tmp_path: Path) -> None:
        path = problem_files.write(tmp_path)
        table, plot = tmp_path / "table.csv", tmp_path / "plot.png"
        result = run("predict", path, "steel 150um / copper 35um", "--csv", table, "--plot", plot, "--sensitivity")
        assert result.exit_code == 0, result.output
        for words in ("tolerances", "worst corner  copper: thickness -5 %", "Without the layer", "Over the tolerances"):
            assert words in result.output
        assert "No tolerance that has an effect is given for: steel." in " ".join(result.output.split())
        assert tuple(pd.read_csv(table).columns)[-2:] == tables.BAND_COLUMNS
        assert (tmp_path / "plot_sensitivity.png").exists()

    def test_predict_tells_the_yield_where_it_is_the_goal(self, tmp_path: Path) -> None:
        path = with_search(tmp_path, 'assume = "yield"\nyield_goal = "90 %"')
        result = run("predict", path, "copper 35um")
        assert result.exit_code == 0, result.output
        assert "the goal of 90 %" in result.output

    @pytest.mark.parametrize("assume", ["worst", "yield"])
    def test_check_says_what_is_assumed(self, tmp_path: Path, assume: str) -> None:
        path = with_search(tmp_path, f'assume = "{assume}"')
        result = run("check", path)
        assert f"{assume}: the mask is met" in result.output
