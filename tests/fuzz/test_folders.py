"""Which files a file may name: those below its own folder or its set's, and in a run nothing but the run's own."""

from __future__ import annotations

import hashlib
import json
import os
import shutil
from collections.abc import Callable
from pathlib import Path
from typing import Any

import pytest
from mutations import ROOT, copy_demo
from problem_files import TABLES, write

from stackopt.errors import InputError
from stackopt.readers import read_material_set, read_problem, read_stack
from stackopt.readers.setups import read_setup
from stackopt.runs import read_run

OUTSIDE = "lies outside the folders of the problem and of its material set"
FENCE = "lies outside the run's own copies of its inputs"


@pytest.fixture
def home(tmp_path: Path) -> Path:
    """A folder with the problem; its parent holds good tables that are nobody's business."""
    folder = tmp_path / "home"
    folder.mkdir()
    write(folder)
    for name in TABLES:
        (tmp_path / Path(name).name).write_text(TABLES[name], encoding="utf-8")
    return folder


def links_to(home: Path, name: str) -> dict[str, Callable[[], str]]:
    """Ways out of the folder to a table beside it, as a file would name them."""
    target = home.parent / name

    def link(at: str, to: Path) -> str:
        path = home / at
        path.unlink(missing_ok=True)
        path.symlink_to(to)
        return at

    return {
        "dots": lambda: f"../{name}",
        "dots in between": lambda: f"sets/../../{name}",
        "dots through a name that is not there": lambda: f"nothing/../../{name}",
        "full name": lambda: str(target),
        "full name with dots": lambda: str(home / ".." / name),
        "link": lambda: link("link.csv", target),
        "link with dots": lambda: link("link.csv", Path("..") / name),
        "link to a link": lambda: link("second.csv", home / link("link.csv", target)),
        "link to a folder": lambda: link("folder", home.parent) + f"/{name}",
        "link to the root": lambda: link("root", Path("/")) + str(target),
    }


WAYS = ("dots", "dots in between", "dots through a name that is not there", "full name", "full name with dots", "link",
        "link with dots", "link to a link", "link to a folder", "link to the root")  # fmt: skip


@pytest.mark.parametrize("way", WAYS)
@pytest.mark.parametrize("key", ["file", "emitted", "allowed"])
def test_tables_of_a_mask(way: str, key: str, home: Path) -> None:
    outside = links_to(home, {"file": "mask.csv"}.get(key, f"{key}.csv"))[way]()
    names = {"file": "mask.csv"} if key == "file" else {"emitted": "emitted.csv", "allowed": "allowed.csv"}
    lines = "\n".join(f'{name} = "{outside if name == key else own}"' for name, own in names.items())
    path = home / "problem.toml"
    path.write_text(path.read_text(encoding="utf-8").replace('file = "mask.csv"', lines), encoding="utf-8")
    with pytest.raises(InputError, match=rf"requirement\[2\]\.mask\.{key}: found .*{OUTSIDE}"):
        read_problem(path)
    read_problem(path, allow_outside=True)


@pytest.mark.parametrize("way", WAYS)
@pytest.mark.parametrize("read", ["set", "problem"])
def test_permeability_tables(way: str, read: str, home: Path) -> None:
    """Seen from the set's folder, which is below the problem's: the problem's own folder counts with a problem only."""
    outside = links_to(home, "ribbon.csv")[way]()
    if not Path(outside).is_absolute():
        outside = f"../{outside}"
    path = home / "sets" / "set.toml"
    path.write_text(path.read_text(encoding="utf-8").replace('"ribbon.csv"', f'"{outside}"'), encoding="utf-8")
    reader = {"set": lambda **more: read_material_set(path, **more),
              "problem": lambda **more: read_problem(home / "problem.toml", **more)}[read]  # fmt: skip
    with pytest.raises(InputError, match=rf"materials\.ribbon\.permeability\.file: found .*{OUTSIDE}"):
        reader()
    reader(allow_outside=True)


def test_a_table_in_the_folder_of_the_problem_serves_the_set_of_that_problem_only(home: Path) -> None:
    shutil.move(home / "sets" / "ribbon.csv", home / "ribbon.csv")
    path = home / "sets" / "set.toml"
    path.write_text(path.read_text(encoding="utf-8").replace('"ribbon.csv"', '"../ribbon.csv"'), encoding="utf-8")
    read_problem(home / "problem.toml")
    with pytest.raises(InputError, match=OUTSIDE):
        read_material_set(path)


def test_links_inside_are_followed_and_keep_their_names(home: Path) -> None:
    (home / "measured").mkdir()
    shutil.move(home / "mask.csv", home / "measured" / "of_today.csv")
    (home / "mask.csv").symlink_to("measured/of_today.csv")
    problem = read_problem(home / "problem.toml")
    assert str(home / "mask.csv") in problem.files


def test_a_set_may_lie_anywhere_but_its_tables_below_it(home: Path) -> None:
    shutil.move(home / "sets", home.parent / "sets")
    path = home / "problem.toml"
    path.write_text(path.read_text(encoding="utf-8").replace('"sets/set.toml"', '"../sets/set.toml"'), encoding="utf-8")
    read_problem(path)
    table = home.parent / "sets" / "set.toml"
    table.write_text(table.read_text(encoding="utf-8").replace('"ribbon.csv"', '"../ribbon.csv"'), encoding="utf-8")
    with pytest.raises(InputError, match=OUTSIDE):
        read_problem(path)


@pytest.mark.parametrize(
    "name", ["~", "~/mask.csv", "$HOME/mask.csv", "file:///etc/passwd", "%2e%2e/mask.csv", "mask.csv "]
)
def test_names_are_taken_as_they_are(name: str, home: Path) -> None:
    path = home / "problem.toml"
    path.write_text(path.read_text(encoding="utf-8").replace('"mask.csv"', f'"{name}"'), encoding="utf-8")
    if name.strip() == "mask.csv":
        read_problem(path)
        return
    with pytest.raises(InputError, match=r"requirement\[2\]\.mask\.file: found .*(does not exist|is a folder)"):
        read_problem(path)


# Setups ---------------------------------------------------------------------------------------------------------------


@pytest.mark.parametrize("way", WAYS)
def test_sweeps_of_a_setup(way: str, tmp_path: Path) -> None:
    home = copy_demo(tmp_path / "home")
    shutil.copyfile(home / "copper_strip.csv", tmp_path / "copper_strip.csv")
    outside = links_to(home, "copper_strip.csv")[way]()
    path = home / "setup_copper_strip.toml"
    text = path.read_text(encoding="utf-8")
    assert '"copper_strip.csv"' in text
    path.write_text(text.replace('"copper_strip.csv"', f'"{outside}"'), encoding="utf-8")
    with pytest.raises(InputError, match=r"sweep\[1\]\.file: found .*lies outside"):
        read_setup(path)
    read_setup(path, allow_outside=True)


@pytest.mark.parametrize("way", WAYS)
def test_the_other_file_of_a_pair(way: str, tmp_path: Path) -> None:
    home = copy_demo(tmp_path / "home")
    line = "# Hz S RI R 50\n1e3 0 0 {0} 0 {0} 0 0 0\n1e4 0 0 {0} 0 {0} 0 0 0\n"
    (home / "with.s2p").write_text(line.format(0.1), encoding="utf-8")
    (tmp_path / "open.s2p").write_text(line.format(0.5), encoding="utf-8")
    outside = links_to(home, "open.s2p")[way]()
    path = home / "setup_copper_strip.toml"
    names = f'file = "with.s2p"\nwithout = "{outside}"'
    path.write_text(path.read_text(encoding="utf-8").replace('file = "copper_strip.csv"', names), encoding="utf-8")
    if outside.endswith(".csv"):  # links of the other tests have the ending of their tables
        os.rename(home / outside, home / outside.replace(".csv", ".s2p"))
        path.write_text(path.read_text(encoding="utf-8").replace(outside, outside.replace(".csv", ".s2p")), "utf-8")
    with pytest.raises(InputError, match=r"sweep\[1\]\.without: found .*lies outside"):
        read_setup(path)
    read_setup(path, allow_outside=True)


# Stack files ----------------------------------------------------------------------------------------------------------


def test_the_problem_that_a_stack_file_names_is_a_title_and_no_file(home: Path) -> None:
    problem = read_problem(home / "problem.toml")
    text = 'problem = "/etc/passwd"\nsheets = [["copper", "35 um"]]\n'
    (home / "stack.toml").write_text(text, encoding="utf-8")
    assert [str(sheet) for sheet in read_stack(home / "stack.toml", problem)] == ["copper 35um"]


# Runs -----------------------------------------------------------------------------------------------------------------


@pytest.fixture
def run(tmp_path: Path) -> Path:
    folder = tmp_path / "run"
    shutil.copytree(ROOT / "results" / "example", folder, ignore=shutil.ignore_patterns("*.png", "*.npz"))
    return folder


def record(run: Path, **values: Any) -> None:
    known = json.loads((run / "run.json").read_text(encoding="utf-8"))
    (run / "run.json").write_text(json.dumps(known | values), encoding="utf-8")


COPY = "inputs/problems/coil_beside_sensor.toml"
SET_COPY = "inputs/material_sets/starter.toml"


def rewritten(run: Path, old: str, new: str, name: str = COPY) -> None:
    """Change a copy of an input, and the hash with it, as a stranger would."""
    text = (run / name).read_text(encoding="utf-8")
    assert old in text
    (run / name).write_text(text.replace(old, new), encoding="utf-8")
    digest = hashlib.sha256()
    for part in (SET_COPY, COPY):
        digest.update(Path(part).name.encode() + b"\0" + (run / part).read_bytes() + b"\0")
    record(run, input_sha256=digest.hexdigest())


@pytest.mark.parametrize(
    "name",
    [
        str(ROOT / "problems" / "coil_beside_sensor.toml"),
        "../home/problem.toml",
        "inputs/../../home/problem.toml",
        "inputs/link.toml",
        "inputs/folder/problem.toml",
        "/etc/passwd",
        "run.json",
    ],
)
def test_the_problem_of_a_run_is_its_own_copy(name: str, run: Path, home: Path) -> None:
    (run / "inputs" / "link.toml").symlink_to(home / "problem.toml")
    (run / "inputs" / "folder").symlink_to(home)
    record(run, problem=name)
    with pytest.raises(InputError) as caught:
        read_run(run)
    assert FENCE in str(caught.value) or "is not the record of a run" in str(caught.value)


@pytest.mark.parametrize("name", ["{}", "../../../outside.toml", "../link.toml", "/etc/passwd", "../../run.json"])
def test_the_set_of_a_run_is_its_own_copy(name: str, run: Path) -> None:
    outside = run.parent / "outside.toml"
    shutil.copyfile(run / SET_COPY, outside)
    (run / "inputs" / "link.toml").symlink_to(outside)
    rewritten(run, "../material_sets/starter.toml", name.format(outside))
    with pytest.raises(InputError, match=FENCE):
        read_run(run)


@pytest.mark.parametrize("name", ["{}", "../../../mask.csv", "../link.csv", "/etc/passwd"])
def test_the_tables_of_a_run_are_its_own_copies(name: str, run: Path) -> None:
    outside = run.parent / "mask.csv"
    outside.write_text(TABLES["mask.csv"], encoding="utf-8")
    (run / "inputs" / "link.csv").symlink_to(outside)
    text = (run / COPY).read_text(encoding="utf-8")
    points = next(line for line in text.splitlines() if line.startswith("points ="))
    rewritten(run, points, f'file = "{name.format(outside)}"')
    with pytest.raises(InputError, match=FENCE):
        read_run(run)


@pytest.mark.parametrize("name", ["run.json", "front.csv", "front_equals.csv"])
def test_the_files_of_a_run_are_no_links_to_elsewhere(name: str, run: Path) -> None:
    shutil.move(run / name, run.parent / name)
    (run / name).symlink_to(run.parent / name)
    with pytest.raises(InputError, match="leads out of the run's folder"):
        read_run(run)


def test_a_set_with_a_full_name_is_read_from_its_copy(run: Path) -> None:
    """The problem of the run named its set with a full path: the copy counts, not the original."""
    rewritten(run, "../material_sets/starter.toml", "/nowhere/left/material_sets/starter.toml")
    problem = read_run(run).front.problem
    assert str(run / SET_COPY) in problem.files


def test_a_run_can_be_reached_through_a_link(run: Path) -> None:
    (run.parent / "link").symlink_to(run)
    assert len(read_run(run.parent / "link").front) == 18
