"""README and DEVELOPERS against the code: commands, examples, paths, modules, columns."""

from __future__ import annotations

import json
import re
import shutil
import tomllib
from collections.abc import Iterator
from pathlib import Path
from typing import Any

import pandas as pd
import pytest
import typer

import stackopt
from stackopt import cli
from stackopt.front import COLUMNS
from stackopt.readers import read_material_set
from stackopt.readers.setups import read_setup

ROOT = Path(__file__).parent.parent
DOCUMENTS = ("README.md", "DEVELOPERS.md", "results/README.md")
EXAMPLE = ROOT / "results" / "example"
PLACES = (ROOT, ROOT / "stackopt", EXAMPLE)
"""Where a path in a document may start."""
MADE_BY_RUNS = {
    "results/coil_beside_sensor-1/",
    "alternatives.csv",
    "curves.png",
    "trade_off.html",
    "pick-*/",
    "checkpoint-*.npz",
    "status.json",
    "run.lock",
}
"""What a document may name although the repository does not hold it."""
FENCE = re.compile(r"^```(\w+)\n(.*?)^```$", re.MULTILINE | re.DOTALL)
PATH = re.compile(r"[\w.*-]*(?:/[\w.*-]+)*(?:/|\.(?:py|toml|csv|md|png|json|npz))")


def text_of(document: str) -> str:
    return (ROOT / document).read_text(encoding="utf-8")


def blocks(document: str, language: str) -> list[str]:
    return [block for kind, block in FENCE.findall(text_of(document)) if kind == language]


def code_spans(document: str) -> list[str]:
    """Inline code outside blocks."""
    return re.findall(r"`([^`\n]+)`", FENCE.sub("", text_of(document)))


def commands() -> dict[str, set[str]]:
    """Every command as it is typed, with its long options."""

    def below(command: Any, words: str) -> Iterator[tuple[str, set[str]]]:
        if getattr(command, "commands", None):
            for name, child in command.commands.items():
                yield from below(child, f"{words} {name}")
        else:
            names = {name for parameter in command.params for name in (*parameter.opts, *parameter.secondary_opts)}
            yield words, {name for name in names if name.startswith("--")} - {"--help"}

    return dict(below(typer.main.get_command(cli.app), "stackopt"))


def command_rows() -> dict[str, str]:
    """Rows of the README's table of commands, by the command."""
    rows = re.findall(r"^\| `(stackopt [a-z]+(?: [a-z]+)*)\b[^`]*` \|(.*)$", text_of("README.md"), re.MULTILINE)
    return dict(rows)


def test_the_table_of_commands_is_that_of_the_program() -> None:
    rows = command_rows()
    assert set(rows) == set(commands())
    for words, options in commands().items():
        assert set(re.findall(r"--[a-z][a-z-]*", rows[words])) == options, words


@pytest.mark.parametrize("document", DOCUMENTS)
def test_every_command_in_the_text_exists(document: str) -> None:
    known = set(commands())
    code = "\n".join([*code_spans(document), *blocks(document, "sh")])
    for words in re.findall(r"(?:^|[\s/])(stackopt(?: [a-z]+)+)(?=\s|$|\.\.\.)", code, re.MULTILINE):
        assert any(words == name or words.startswith(f"{name} ") for name in known), words


def test_the_first_command_line_searches_a_problem_that_is_there() -> None:
    line = blocks("README.md", "sh")[0].strip()
    assert "\n" not in line
    assert (ROOT / line.split()[-1]).is_file()


def test_ci_finds_the_test_command() -> None:
    pattern = re.search(r"grep -m 1 -o '([^']+)'", (ROOT / ".ci" / "run").read_text(encoding="utf-8"))
    assert pattern is not None
    found = [match[0] for line in text_of("README.md").splitlines() if (match := re.search(pattern[1], line))]
    assert found[0] == blocks("README.md", "sh")[1].strip()
    assert "-e '.[test]'" in found[0]


def test_the_example_problem_reads(tmp_path: Path) -> None:
    shutil.copytree(ROOT / "material_sets", tmp_path / "material_sets")
    path = tmp_path / "problems" / "example.toml"
    path.parent.mkdir()
    path.write_text(next(block for block in blocks("README.md", "toml") if "[[requirement]]" in block), "utf-8")
    problem = stackopt.read_problem(path)
    assert problem.rules.bond is not None
    assert problem.remarks == ()


def test_the_example_material_set_reads(tmp_path: Path) -> None:
    path = tmp_path / "set.toml"
    path.write_text(next(block for block in blocks("README.md", "toml") if "[materials." in block), "utf-8")
    known = read_material_set(path)
    assert len(known.materials) == 3
    assert not known.remarks


def test_the_example_setup_reads(tmp_path: Path) -> None:
    folder = shutil.copytree(ROOT / "problems" / "bench_demo", tmp_path / "bench")
    path = folder / "example.toml"
    path.write_text(next(block for block in blocks("README.md", "toml") if "[[sweep]]" in block), "utf-8")
    assert [entry.count for entry in read_setup(path).sweeps] == [1, 2]


@pytest.mark.slow
def test_the_python_example_runs(monkeypatch: pytest.MonkeyPatch) -> None:
    monkeypatch.chdir(ROOT)
    (example,) = blocks("README.md", "python")
    names: dict[str, Any] = {}
    exec(example, names)
    assert names["front"].complete
    assert names["again"].complete
    assert names["attenuation_db"].shape == (2, 2)
    assert tuple(names["frame"].columns) == COLUMNS


def paths(document: str) -> list[str]:
    spans = [span for span in code_spans(document) if PATH.fullmatch(span)]
    links = [link for link in re.findall(r"\]\(([^)]+)\)", text_of(document)) if not re.match(r"#|https?:", link)]
    return [path for path in spans + links if path not in MADE_BY_RUNS]


@pytest.mark.parametrize("document", DOCUMENTS)
def test_every_path_in_the_text_exists(document: str) -> None:
    found = paths(document)
    assert found
    places = (*PLACES, (ROOT / document).parent)
    missing = [path for path in found if not any(any(place.glob(path.rstrip("/"))) for place in places)]
    assert not missing


@pytest.mark.parametrize("document", DOCUMENTS)
def test_links_within_a_document_lead_somewhere(document: str) -> None:
    headings = re.findall(r"^#+ (.+)$", FENCE.sub("", text_of(document)), re.MULTILINE)
    anchors = {re.sub(r"[^\w\- ]", "", heading.lower()).replace(" ", "-") for heading in headings}
    assert set(re.findall(r"\]\(#([^)]+)\)", text_of(document))) <= anchors


def test_every_module_has_its_line_for_developers() -> None:
    spans = set(code_spans("DEVELOPERS.md"))
    modules = {path.relative_to(ROOT / "stackopt").as_posix() for path in (ROOT / "stackopt").rglob("*.py")}
    unnamed = {name for name in modules if Path(name).name != "__init__.py" or name == "__init__.py"} - spans
    assert not unnamed


def test_every_dependency_has_its_reason() -> None:
    project = tomllib.loads((ROOT / "pyproject.toml").read_text(encoding="utf-8"))["project"]
    needed = project["dependencies"] + project["optional-dependencies"]["test"]
    words = set(re.findall(r"[\w-]+", text_of("DEVELOPERS.md").split("## Dependencies")[1].split("\n## ")[0]))
    assert {re.match(r"[\w-]+", name)[0] for name in needed} <= words  # type: ignore[index]


def test_the_example_run_is_of_this_version_and_these_files() -> None:
    record = json.loads((EXAMPLE / "run.json").read_text(encoding="utf-8"))
    assert tuple(pd.read_csv(EXAMPLE / "front.csv").columns) == COLUMNS
    assert tuple(pd.read_csv(EXAMPLE / "front_equals.csv").columns) == COLUMNS
    assert record["complete"] is True
    for copy in (path for path in (EXAMPLE / "inputs").rglob("*") if path.is_file()):
        original = ROOT / copy.relative_to(EXAMPLE / "inputs")
        assert copy.read_bytes() == original.read_bytes(), original


def test_the_example_run_names_no_machine() -> None:
    texts = [path for path in EXAMPLE.rglob("*") if path.suffix in (".csv", ".json", ".toml")]
    assert not [path for path in texts if str(ROOT) in path.read_text(encoding="utf-8")]
    assert not list(EXAMPLE.glob("checkpoint*"))


def test_the_output_in_the_readme_is_that_of_the_example() -> None:
    """Every row of numbers of the shortened output is a row of the example's front."""
    shown = next(block for block in blocks("README.md", "text") if "rank" in block)
    front = pd.read_csv(EXAMPLE / "front.csv")
    rows = re.findall(r"^ +(\d+) +(\d+) +([\d.]+) +([\d.]+) +([\d.]+) +([+-][\d.]+) ", shown, re.MULTILINE)
    assert len(rows) >= 3
    for rank, sheets, mass, cost, thickness, margin in rows:
        row = front.loc[int(rank) - 1]
        assert (row["rank"], row["sheets"]) == (int(rank), int(sheets))
        assert f"{row['mass_kg_per_m2']:.3f}" == mass
        assert f"{row['cost_per_m2']:.2f}" == cost
        assert f"{row['thickness_mm']:.3f}" == thickness
        assert f"{row['margin_db']:+.2f}" == margin
    statement = json.loads((EXAMPLE / "run.json").read_text(encoding="utf-8"))["statement"]
    assert statement in " ".join(shown.split())


@pytest.mark.parametrize("document", DOCUMENTS)
def test_no_path_of_a_machine_in_the_text(document: str) -> None:
    assert str(ROOT) not in text_of(document)
    assert not re.search(r"/(?:home|root|tmp|Users)/", text_of(document))
