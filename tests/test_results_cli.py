import json
import shutil
from pathlib import Path
from typing import Any

import pandas as pd
import problem_files
import pytest
from typer.testing import CliRunner

from stackopt.cli import app
from stackopt.errors import RunError
from stackopt.readers import read_problem, read_stack
from stackopt.runs import read_run

EASY = {
    'points = [["50 Hz", "8 dB"], ["1 kHz", "14 dB"], ["1 MHz", "90 dB"]]': 'points = [["1 kHz", "1 dB"]]',
    'file = "mask.csv"': 'points = [["1 MHz", "20 dB"]]',
    'objectives = ["mass", "thickness"]': 'objectives = ["mass", "thickness", "margin"]',
}


def run(*arguments: str | Path, columns: int = 100, **more: Any) -> Any:
    return CliRunner().invoke(app, [str(argument) for argument in arguments], env={"COLUMNS": str(columns)}, **more)


@pytest.fixture(scope="module")
def searched(tmp_path_factory: pytest.TempPathFactory) -> Path:
    """A finished run; the problem is small and has several stacks on its front."""
    folder = tmp_path_factory.mktemp("searched")
    problem = problem_files.write(folder, EASY)
    result = run("search", problem, "--workers", "1", "--out", folder / "run")
    assert result.exit_code == 0, result.output
    return folder / "run"


@pytest.fixture
def finished(searched: Path, tmp_path: Path) -> Path:
    shutil.copytree(searched, tmp_path / "run")
    return tmp_path / "run"


def test_a_search_leaves_the_page_and_both_plots(searched: Path) -> None:
    names = {path.name for path in searched.iterdir()}
    assert {"front.csv", "trade_off.html", "trade_off.png", "curves.png"} <= names


def test_a_run_reads_back_as_it_was_written(searched: Path) -> None:
    front = read_run(searched).front
    pd.testing.assert_frame_equal(front.to_frame(), pd.read_csv(searched / "front.csv"), check_dtype=False)
    assert front.complete == json.loads((searched / "run.json").read_text())["complete"]
    assert front.statement
    assert len(front.equals) == len(pd.read_csv(searched / "front_equals.csv"))


def test_page_writes_the_page_again(finished: Path) -> None:
    (finished / "trade_off.html").unlink()
    result = run("page", finished)
    assert result.exit_code == 0
    assert "trade_off.html" in result.output
    assert "Test problem" in (finished / "trade_off.html").read_text(encoding="utf-8")
    result = run("page", finished, "--out", finished.parent / "other.html")
    assert result.exit_code == 0
    assert (finished.parent / "other.html").exists()


@pytest.mark.parametrize(
    ("options", "column", "best"),
    [
        (["--lightest"], "mass_kg_per_m2", min),
        (["--thinnest"], "thickness_mm", min),
        (["--cheapest"], "cost_per_m2", min),
    ],
)
def test_pick_takes_the_best_in_one_objective(finished: Path, options: list[str], column: str, best: Any) -> None:
    result = run("pick", finished, *options)
    assert result.exit_code == 0, result.output
    (folder,) = finished.glob("pick-*")
    frame = pd.read_csv(finished / "front.csv").set_index("rank")
    assert frame.loc[int(folder.name.removeprefix("pick-")), column] == best(frame[column])
    assert {path.name for path in folder.iterdir()} == {
        "build_sheet.html",
        "layers.csv",
        "prediction.csv",
        "stack.toml",
    }


def test_pick_by_rank_with_panel_reads_back_into_predict(finished: Path) -> None:
    out = finished.parent / "sheet"
    result = run("pick", finished, "--rank", "2", "--panel", "120mm x 80mm", "--stock", "300mm x 200mm", "--out", out)
    assert result.exit_code == 0, result.output
    assert "Rank 2 of" in result.output
    problem = finished.parent / "problem.toml"
    problem_files.write(finished.parent, EASY)
    front = read_run(finished).front
    assert read_stack(out / "stack.toml", read_problem(problem)) == front.rows[1].stack
    result = run("predict", problem, out / "stack.toml", "steel 150um")
    assert result.exit_code == 0, result.output
    assert f"{front.rows[1].margin_db:+.2f} dB" in result.output
    assert "Stack 2: steel 150um" in result.output


def test_pick_balanced_and_weights(finished: Path) -> None:
    assert run("pick", finished, "--balanced").exit_code == 0
    result = run("pick", finished, "--weights", "mass=1,margin=0")
    assert result.exit_code == 0
    assert "Rank 1 of" in result.output


def test_filters_come_first(finished: Path) -> None:
    result = run("pick", finished, "--thinnest", "--without", "copper")
    assert result.exit_code == 0
    assert "copper" not in result.output
    result = run("pick", finished, "--lightest", "--max-cost", "0")
    assert result.exit_code == 1
    assert "--max-cost 0 alone leaves none" in result.output
    assert "EUR/m^2 (rank" in result.output


def test_pick_asks_in_a_terminal(finished: Path, monkeypatch: pytest.MonkeyPatch) -> None:
    monkeypatch.setattr("stackopt.results_cli._can_ask", lambda: True)
    result = run("pick", finished, "--max-sheets", "1", input="x\n99\n1\n")
    assert result.exit_code == 0, result.output
    assert "Rank to build" in result.output
    assert "Found 'x'; write one of 1" in result.output
    assert "Found '99'" in result.output
    assert (finished / "pick-1" / "build_sheet.html").exists()


def test_pick_follows_no_link(finished: Path, tmp_path: Path) -> None:
    """A run may come from a stranger: what looks like its own folder may be another place."""
    elsewhere = tmp_path / "elsewhere"
    elsewhere.mkdir()
    (finished / "pick-2").symlink_to(elsewhere)
    result = run("pick", finished, "--rank", "2")
    assert result.exit_code == 2
    assert "is a link to another place; name the folder with --out" in result.stderr
    assert not any(elsewhere.iterdir())


@pytest.mark.parametrize(
    ("options", "words"),
    [
        ([], ["choice: is missing", "--balanced"]),
        (["--lightest", "--rank", "1"], ["cannot be given together"]),
        (["--rank", "0"], ["--rank: found 0; the front has ranks 1 to"]),
        (["--rank", "1", "--panel", "12"], ["--panel: found '12'", "120mm x 80mm"]),
        (["--rank", "1", "--stock", "1m x 1m"], ["--stock: tells nothing without --panel"]),
        (["--weights", "mas=1"], ["--weights: found 'mas'; did you mean 'mass'?"]),
        (["--weights", "mass"], ["--weights: found 'mass'; write a quantity and a number"]),
        (["--weights", "mass=0"], ["all weights are 0"]),
        (["--weights", "mass=1,mass=2"], ["more than once"]),
        (["--lightest", "--without", "coper"], ["--without: found 'coper'", "did you mean 'copper'?"]),
        (["--lightest", "--only", "copper,gold"], ["--only: found 'gold'"]),
        (["--lightest", "--max-cost", "-1"], ["--max-cost: found -1"]),
        (["--lightest", "--max-sheets", "0"], ["--max-sheets: found 0"]),
    ],
)
def test_wrong_options_are_reported_all_together(finished: Path, options: list[str], words: list[str]) -> None:
    result = run("pick", finished, *options)
    assert result.exit_code == 2
    for part in words:
        assert part in result.output, result.output
    assert "Traceback" not in result.output
    assert not list(finished.glob("pick-*"))


def test_folders_that_are_no_finished_runs_say_what_to_do(finished: Path) -> None:
    assert "which is no folder" in run("page", finished / "none").output
    assert "is not a run folder" in run("page", finished.parent).output
    record = json.loads((finished / "run.json").read_text())
    (finished / "run.json").write_text(json.dumps(record | {"finished": False}))
    result = run("pick", finished, "--lightest")
    assert result.exit_code == 2
    assert "stackopt search --resume" in result.output


@pytest.mark.parametrize(
    ("old", "new", "words"),
    [
        ("copper", "cooper", "did you mean 'copper'?"),
        ("requirement", "demand", "has no column requirement"),
        (",loops\n", ",other\n", "which the problem does not have"),
        ("1,", "one,", "cannot be read"),
    ],
)
def test_a_front_that_was_changed_is_refused(finished: Path, old: str, new: str, words: str) -> None:
    path = finished / "front.csv"
    text = path.read_text()
    assert old in text
    path.write_text(text.replace(old, new))
    with pytest.raises(RunError) as caught:
        read_run(finished)
    assert words in str(caught.value)


def test_changed_inputs_are_refused(finished: Path) -> None:
    (path,) = (finished / "inputs").rglob("problem.toml")
    path.write_text(path.read_text() + "\n# changed\n")
    with pytest.raises(RunError, match="were changed since the run began"):
        read_run(finished)


def test_an_empty_front_cannot_be_picked_from(tmp_path: Path) -> None:
    problem = problem_files.write(tmp_path, {'["1 MHz", "90 dB"]': '["1 MHz", "990 dB"]'})
    result = run("search", problem, "--workers", "1", "--out", tmp_path / "run")
    assert result.exit_code == 1
    assert (tmp_path / "run" / "trade_off.html").exists()
    result = run("pick", tmp_path / "run", "--lightest")
    assert result.exit_code == 1
    assert "This run has no stack to pick" in result.output
