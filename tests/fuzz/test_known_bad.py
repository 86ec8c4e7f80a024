"""Nasty inputs that are known: what each reader makes of files of no end, no sense or no good intent."""

from __future__ import annotations

import io
import json
import os
import pickle
import resource
import shutil
import zipfile
from collections.abc import Callable, Iterator
from hashlib import sha256
from pathlib import Path
from typing import Any

import numpy as np
import pytest
from mutations import ROOT, limited, read_or_refuse
from problem_files import PROBLEM, SET, TABLES, write

import stackopt.readers.files as files
from stackopt.checkpoint import FORMAT, read_checkpoint, write_checkpoint
from stackopt.errors import InputError, RunError, StackoptError
from stackopt.readers import parse_stack, read_mask_table, read_material_set, read_permeability_table, read_problem
from stackopt.readers.setups import read_setup
from stackopt.readers.sweeps import read_sweep
from stackopt.runs import read_run

MASK = "frequency_hz,attenuation_db\n"
SWEEP = "frequency_hz,attenuation_db\n"


def refused(read: Callable[[], Any], *words: str) -> str:
    """The message of a reading that must fail within the time."""
    error = read_or_refuse(read)
    assert isinstance(error, StackoptError)
    for word in words:
        assert word in str(error), str(error)[:500]
    return str(error)


def text_file(folder: Path, content: str | bytes, name: str = "file.toml") -> Path:
    path = folder / name
    path.write_bytes(content if isinstance(content, bytes) else content.encode())
    return path


# TOML -----------------------------------------------------------------------------------------------------------------

TOO_DEEP = "nests tables or lists too deeply"
TOMLS: dict[str, tuple[str | bytes, str]] = {
    "10,000 brackets": ("a = " + "[" * 10_000, TOO_DEEP),
    "10,000 brackets that close": ("a = " + "[" * 10_000 + "]" * 10_000, TOO_DEEP),
    "10,000 braces": ("a = " + "{a = " * 10_000, TOO_DEEP),
    "a key of 490,000 parts": ("a" + ".a" * 490_000 + " = 1", TOO_DEEP),
    "a quoted key of parts": ('"a"' + '."a"' * 100_000 + " = 1", TOO_DEEP),
    "a table name of parts": ("[" + "a." * 100_000 + "a]", TOO_DEEP),
    "a number of 10^5000": ("a = 1" + "0" * 5000, "holds a number that is too long to read"),
    "a long list": ("a = [" + "1," * 20_000 + "]", "holds a table or list of 20000 entries; up to 10000"),
    "a long table": ("".join(f"a{n} = 1\n" for n in range(20_000)), "holds a table or list of 20000 entries"),
    "60,000 tables": ("[[requirement]]\n" * 60_000, "holds a table or list of 60000 entries"),
    "too many characters": ("#" * 2_000_000, "has 2000000 characters; up to 1000000 are read"),
    "NUL bytes": ("title = 'a\0b'", "is not valid TOML"),
    "nothing but quotes": ('"' * 500_000, "is not valid TOML"),
    "UTF-16": ("title = 'a'".encode("utf-16"), "is not UTF-8 text (line 1); save it as UTF-8"),
    "UTF-16 without a mark": ("title = 'a'".encode("utf-16-le"), "is not valid TOML"),
    "Latin-1": (b"title = 'a'\nx = '\xb5m'", "is not UTF-8 text (line 2)"),
    "lone surrogate": (b"title = '\xed\xa0\x80'", "is not UTF-8 text"),
    "escaped surrogate": ('title = "\\ud800"', "is not valid TOML"),
    "two byte order marks": ("\ufeff\ufefftitle = 'a'", "is not valid TOML"),
    "line ends of old Macs": ("title = 'a'\rcurrency = 'b'\r", "carriage return that ends no line (line 1)"),
    "a hidden line": ("title = 'a'\n# max_sheets\rcurrency = 'b'", "carriage return that ends no line (line 2)"),
    "duplicate keys": ("title = 'a'\ntitle = 'b'", "is not valid TOML"),
    "duplicate tables": ("[a]\n[a]", "is not valid TOML"),
    "a day that is none": ("a = 2024-02-31", "is not valid TOML"),
    "empty": ("", "title: is missing"),
}


@pytest.mark.parametrize("read", [read_problem, read_material_set, read_setup])
@pytest.mark.parametrize("name", TOMLS)
def test_toml(name: str, read: Callable[[Path], Any], tmp_path: Path) -> None:
    content, words = TOMLS[name]
    if name == "empty" and read is read_setup:
        words = "field: is missing"
    path = text_file(tmp_path, content)
    assert str(path) in refused(lambda: read(path), words)


LONG_ROWS = "".join(f"[materials.m{n}]\nx = 1\n" for n in range(9_000))
SLOW_SETS = {
    "9,000 materials": f"title = 'a'\ncurrency = 'b'\n{LONG_ROWS}",
    "9,000 gauges": SET.replace(
        'gauges = ["70 um", "18 um", "35 um"]',
        "gauges = [" + ",".join(f"'{n} um'" for n in range(1, 9_000)) + "]\n"
        "price_per_m2 = {" + ",".join(f"'{n} nm' = 1.0" for n in range(1, 9_000)) + "}",
    ),
}


@pytest.mark.parametrize("name", SLOW_SETS)
def test_sets_with_thousands_of_mistakes(name: str, tmp_path: Path) -> None:
    path = text_file(tmp_path, SLOW_SETS[name])
    message = refused(lambda: read_material_set(path), "more mistakes; correct these first")
    assert message.count("\n") == files.MAX_FINDINGS


def test_problems_that_name_a_material_thousands_of_times(tmp_path: Path) -> None:
    names = ", ".join(['"copper"'] * 9_000)
    path = write(tmp_path, {'use = ["copper", "steel"]': f"use = [{names}]"})
    refused(lambda: read_problem(path), "use[2]: found 'copper' more than once", "more mistakes")


def test_masks_that_need_more_frequencies_than_any_table_holds(tmp_path: Path) -> None:
    rows = "".join(f"{1e6 + n},40\n" for n in range(20_000))
    path = write(tmp_path, tables={"mask.csv": MASK + rows})
    refused(lambda: read_problem(path), "requirement[2].mask: found a mask that is checked at 20000 frequencies")
    path = write(tmp_path, {'margin = "2 dB"': 'margin = "2 dB"\npoints_per_decade = 1000'})
    read_problem(path)
    path = write(tmp_path, {'margin = "2 dB"': "points_per_decade = 1000", '"50 Hz"': '"0.001 Hz"'})
    refused(lambda: read_problem(path), "requirement[1].mask: found a mask that is checked at 9001 frequencies")


# Tables ---------------------------------------------------------------------------------------------------------------

CSVS: dict[str, tuple[str, str]] = {
    "a line of 9 MB": (MASK + "1," * 4_500_000, "line 2: found 4500001 columns"),
    "a number of 9 MB": (MASK + "1e6," + "1" * 9_000_000, "line 2: found 1 columns"),
    "900,000 lines": (MASK + "".join(f"{n}.5,1\n" for n in range(900_000)), "line 100002: is beyond 100000 lines"),
    "4,000,000 bad lines": (MASK + "x\n" * 4_000_000, "more lines cannot be used either"),
    "9,000,000 empty lines": (MASK + "\n" * 9_000_000, "has a header but no numbers"),
    "nothing but quotes": (MASK + '"' * 9_000_000, "line 2: found 1 columns"),
    "binary": (MASK + "".join(map(chr, range(128))) * 1000, "cannot be used either"),
    "NUL bytes": (MASK + "1e6\0,1\n", "line 2: found '1e6\\x00' as frequency_hz"),
    "UTF-16 without a mark": ((MASK + "1e6,1\n").encode("utf-16-le").decode("utf-8"), "the header must be"),
}


@pytest.mark.parametrize("name", CSVS)
def test_csv(name: str, tmp_path: Path) -> None:
    content, words = CSVS[name]
    path = text_file(tmp_path, content, "file.csv")
    message = refused(lambda: read_mask_table(path), words)
    assert str(path) in message
    assert len(message) < 5000


SWEEPS: dict[str, tuple[str, str]] = {
    "a line of 9 MB": (SWEEP + "1," * 4_500_000, "line 2: has 9000000 characters; lines up to 10000 are read"),
    "4,000,000 bad lines": (SWEEP + "x\n" * 4_000_000, "has 4000000 lines of numbers; up to 100000 are read"),
    "100,000 bad lines": (SWEEP + "x,y\n" * 100_000, "more places cannot be used either"),
    "not finite": (SWEEP + "1e3,nan\n", "line 2, column 2 (attenuation_db): found 'nan'"),
    "beyond all numbers": (SWEEP + "1e3,1e400\n", "line 2, column 2 (attenuation_db): found '1e400'"),
    "beyond all instruments": (SWEEP + "1e300,1\n", "line 2, column 1 (frequency_hz): found 1e+300 Hz"),
}


@pytest.mark.parametrize("name", SWEEPS)
def test_sweep(name: str, tmp_path: Path) -> None:
    content, words = SWEEPS[name]
    path = text_file(tmp_path, content, "file.csv")
    assert str(path) in refused(lambda: read_sweep(path), words)


TOUCHSTONES: dict[str, tuple[str, str]] = {
    "a remark of 9 MB": ("!" * 9_000_000, "lines of up to 9000000 characters"),
    "too many lines": ("# Hz S RI R 50\n" + "\n" * 200_000, "has 200002 lines"),
    "a hundred thousand ports": (
        "[Version] 2.0\n# Hz S RI R 50\n[Number of Ports] 999999\n[Number of Frequencies] 1\n[Network Data]\n1 2 3\n",
        "is not a readable Touchstone file",
    ),
    "not finite": ("# Hz S RI R 50\n1 nan nan nan nan nan nan nan nan\n", "has an S21 of 0 or none at all"),
    "no numbers": ("# Hz S RI R 50\nx y z\n", "is not a readable Touchstone file"),
}


@pytest.mark.parametrize("name", TOUCHSTONES)
def test_touchstone(name: str, tmp_path: Path) -> None:
    content, words = TOUCHSTONES[name]
    path = text_file(tmp_path, content, "with.s2p")
    refused(lambda: read_sweep(path, without=path), words)


def test_permeabilities_that_would_fill_the_memory(tmp_path: Path) -> None:
    """Over 600 decades, the check of real against imaginary part would take gigabytes."""
    head = "frequency_hz,mu_real,mu_imag\n"
    path = text_file(tmp_path, head + "1e-300,5,-1\n1e-200,5,-1\n1e200,4,-1\n1e300,3,-1\n", "file.csv")
    refused(lambda: read_permeability_table(path), "line 2: found frequency_hz 1e-300 Hz; write at least 1e-06 Hz")
    path = text_file(tmp_path, head + "1,1e308,-1e308\n10,5e307,-1\n", "file.csv")
    refused(lambda: read_permeability_table(path), "line 2: found mu_real 1e+308; write at most 1e+09")
    before = resource.getrusage(resource.RUSAGE_SELF).ru_maxrss
    rows = "".join(f"{1e-6 * 10 ** (21 * n / 20_000):.9g},40,-1\n" for n in range(20_000))
    write(tmp_path, tables={"sets/ribbon.csv": head + rows})
    with limited():
        read_material_set(tmp_path / "sets" / "set.toml")
    assert resource.getrusage(resource.RUSAGE_SELF).ru_maxrss - before < 500_000  # kB


# Files that are refused unread ----------------------------------------------------------------------------------------

READERS: dict[str, Callable[[Path], Any]] = {
    "problem": read_problem,
    "set": read_material_set,
    "mask": read_mask_table,
    "permeability": read_permeability_table,
    "setup": read_setup,
    "sweep": read_sweep,
}


@pytest.mark.parametrize("read", READERS.values(), ids=READERS)
def test_a_file_of_200_mb_is_not_read(
    read: Callable[[Path], Any], tmp_path: Path, monkeypatch: pytest.MonkeyPatch
) -> None:
    path = text_file(tmp_path, "")
    os.truncate(path, 200_000_000)
    opened: list[Path] = []
    monkeypatch.setattr(Path, "open", lambda self, *_: opened.append(self))
    refused(lambda: read(path), f"{path}: has 200 MB; files up to 10 MB are read")
    assert opened == []


@pytest.mark.skipif(not Path("/proc/self/maps").exists(), reason="needs a file that does not tell its size")
def test_a_file_that_does_not_tell_its_size_is_read_up_to_the_limit(monkeypatch: pytest.MonkeyPatch) -> None:
    assert os.stat("/proc/self/maps").st_size == 0
    with pytest.raises(ValueError, match="has more than 0 MB; files up to that are read"):
        files.read_bytes(Path("/proc/self/maps"), 10)


SPECIAL = ("/dev/zero", "/dev/full", "/dev/null", "/dev/stdin", "/dev")


@pytest.mark.parametrize("name", [name for name in SPECIAL if Path(name).exists()])
@pytest.mark.parametrize("read", READERS.values(), ids=READERS)
def test_devices_are_no_files(name: str, read: Callable[[Path], Any], tmp_path: Path) -> None:
    refused(lambda: read(Path(name)), name)
    (tmp_path / "link.toml").symlink_to(name)
    refused(lambda: read(tmp_path / "link.toml"), "link.toml")


@pytest.mark.parametrize("read", READERS.values(), ids=READERS)
def test_pipes_and_loops_are_no_files(read: Callable[[Path], Any], tmp_path: Path) -> None:
    os.mkfifo(tmp_path / "pipe.toml")
    refused(lambda: read(tmp_path / "pipe.toml"), "is not an ordinary file")
    (tmp_path / "loop.toml").symlink_to("loop.toml")
    refused(lambda: read(tmp_path / "loop.toml"), "loop.toml")
    (tmp_path / "gone.toml").symlink_to("nowhere.toml")
    refused(lambda: read(tmp_path / "gone.toml"), "does not exist")


@pytest.mark.parametrize("name", ["x\0y", "\ud800", "n" * 300, "p/" * 3000])
@pytest.mark.parametrize("read", READERS.values(), ids=READERS)
def test_names_that_no_file_has(name: str, read: Callable[[Path], Any], tmp_path: Path) -> None:
    refused(lambda: read(tmp_path / name))


# Stacks ---------------------------------------------------------------------------------------------------------------

STACKS = (
    "",
    "/",
    "//",
    "copper",
    "35um",
    "copper 35",
    "copper um",
    "copper -35um",
    "copper 0um",
    "copper 1e-9um",
    "copper nanum",
    "copper 1e400um",
    "copper 35um /",
    "/ copper 35um",
    "cop\0per 35um",
    "copper 35um\x1b[2J",
    "copper " + "9" * 5000 + "um",
    "copper 35um" + " / copper 35um" * 5000,
    "copper " * 50_000,
    "/" * 100_000,
    "\ud800 35um",
    "copper 35 kg",
    "copper 2 m",
    "copper 35um * 2",
    "copper 35um, copper 35um",
)


@pytest.mark.parametrize("text", STACKS, ids=range(len(STACKS)))
def test_stacks_that_are_none(text: str) -> None:
    message = refused(lambda: parse_stack(text, ("copper", "steel")), "stack ")
    assert len(message) < 30_000
    assert "\x1b" not in message


# Runs -----------------------------------------------------------------------------------------------------------------


@pytest.fixture
def run(tmp_path: Path) -> Iterator[Path]:
    folder = tmp_path / "run"
    shutil.copytree(ROOT / "results" / "example", folder, ignore=shutil.ignore_patterns("*.png", "*.npz"))
    assert len(read_run(folder).front) == 18
    return folder


def rewrite_record(run: Path, **values: Any) -> None:
    record = json.loads((run / "run.json").read_text(encoding="utf-8"))
    (run / "run.json").write_text(json.dumps(record | values), encoding="utf-8")


RECORDS: dict[str, str | bytes] = {
    "10,000 brackets": "[" * 10_000,
    "10,000 objects": '{"a":' * 10_000,
    "a number of 10^5000": '{"seed": 1' + "0" * 5000 + "}",
    "a list": "[1]",
    "no object": "null",
    "empty": "",
    "not UTF-8": b"\xff\xfe\xfa",
    "UTF-16": '{"seed": 1}'.encode("utf-16"),
    "half": '{"seed": 1',
    "keys missing": '{"seed": 1}',
}


@pytest.mark.parametrize("name", RECORDS)
def test_records(name: str, run: Path) -> None:
    text_file(run, RECORDS[name], "run.json")
    refused(lambda: read_run(run), str(run / "run.json"), "start a new search")


VALUES: tuple[dict[str, Any], ...] = (
    {"problem": 3},
    {"problem": ""},
    {"problem": "\ud800"},
    {"problem": "inputs/\0"},
    {"problem": "x" * 100_000},
    {"problem": "inputs"},
    {"problem": "front.csv"},
    {"seed": "7"},
    {"seed": -1},
    {"seed": float("nan")},
    {"seed": None},
    {"input_sha256": "0" * 64},
    {"input_sha256": None},
    {"finished": "yes"},
    {"finished": 0},
    {"complete": "false"},
    {"complete": 1},
    {"statement": ["Complete"]},
)


@pytest.mark.parametrize("values", VALUES, ids=str)
def test_values_of_a_record(values: dict[str, Any], run: Path) -> None:
    rewrite_record(run, **values)
    refused(lambda: read_run(run), str(run))


def test_a_statement_cannot_command_the_terminal(run: Path) -> None:
    rewrite_record(run, statement="Complete\x1b[2J\ud800" + "x" * 10**6)
    statement = read_run(run).front.statement
    assert statement.startswith("Complete\\x1b[2J\\ud800xxx")
    assert len(statement) < 3000
    statement.encode("utf-8")


def column(name: str, value: str) -> Callable[[str], str]:
    """Put a value into a column of the first row."""

    def change(text: str) -> str:
        header, first, *rest = text.splitlines()
        cells = first.split(",")
        cells[header.split(",").index(name)] = value
        return "\n".join([header, ",".join(cells), *rest]) + "\n"

    return change


FRONTS: dict[str, tuple[Callable[[str], str], str]] = {
    **{f"{name} {value}": (column(name, value), f"found {value!r} as {name}, which is no")
       for name in ("rank", "sheets", "mass_kg_per_m2", "thickness_mm", "margin_db", "tightest_hz")
       for value in ("nan", "inf", "1e400", "x", "", "0x1", "--1")},
    "rank of another": (column("rank", "2"), "found rank 2, which cannot stand here"),
    "rank of 1.5": (column("rank", "1.5"), "found '1.5' as rank"),
    "mass of another": (column("mass_kg_per_m2", "1.2"), "found mass_kg_per_m2 1.2, but the stack has 1.144"),
    "cost of another": (column("cost_per_m2", "1e308"), "found cost_per_m2 1e+308, but the stack has"),
    "no cost": (column("cost_per_m2", ""), "found cost_per_m2 nan, but the stack has"),
    "thickness of another": (column("thickness_mm", "0.21"), "found thickness_mm 0.21, but the stack has 0.2"),
    "sheets of another": (column("sheets", "4"), "found 4 sheets, but the stack has 3"),
    "frequency off the mask": (column("tightest_hz", "1e9"), "found tightest_hz 1e+09, which lies outside the mask"),
    "another requirement": (column("requirement", "\x1b[2J"), "found requirement '\\x1b[2J', which the problem does"),
    "no stack": (column("stack", ""), "found nothing; write a material and a thickness"),
    "unknown material": (column("stack", "gold 1um"), "found 'gold', which the material set does not hold"),
    "columns twice": (lambda text: text.replace("sheets,mass", "rank,sheets,mass", 1), "two columns of one name"),
    "no columns": (lambda text: "", "has no column rank, stack"),
    "a quote that does not end": (lambda text: text.replace("2,", '2,"', 1), "cannot be read"),
    "a cell of 200 kB": (column("stack", "x" * 200_000), "cannot be read: field larger than field limit"),
    "rows twice": (lambda text: text + text.splitlines()[1], "line 20: cannot be read: found rank 1, which cannot"),
}  # fmt: skip


@pytest.mark.parametrize("name", FRONTS)
def test_fronts(name: str, run: Path) -> None:
    change, words = FRONTS[name]
    path = run / "front.csv"
    text = path.read_text(encoding="utf-8")
    assert change(text) != text
    path.write_text(change(text), encoding="utf-8")
    refused(lambda: read_run(run), str(path), words)


@pytest.mark.parametrize("content", [b"\xff\xfe", b"\0" * 100, MASK.encode(), b"\xef\xbb\xbf" * 2])
def test_fronts_that_are_no_tables(content: bytes, run: Path) -> None:
    (run / "front.csv").write_bytes(content)
    refused(lambda: read_run(run), str(run / "front.csv"), "start a new search")


def test_a_front_too_large_to_be_read(run: Path, monkeypatch: pytest.MonkeyPatch) -> None:
    os.truncate(run / "front.csv", 200_000_000)
    refused(lambda: read_run(run), "has 200 MB; files up to 20 MB are read")


def test_equals_with_more_rows_than_are_read(run: Path) -> None:
    header, first, *_ = (run / "front_equals.csv").read_text(encoding="utf-8").splitlines()
    (run / "front_equals.csv").write_text("\n".join([header, *[first] * 60_000]), encoding="utf-8")
    refused(lambda: read_run(run), "has more than 50000 stacks")


def test_equals_of_a_rank_that_is_not_there(run: Path) -> None:
    path = run / "front_equals.csv"
    path.write_text(column("rank", "19")(path.read_text(encoding="utf-8")), encoding="utf-8")
    refused(lambda: read_run(run), "front_equals.csv: line 2: cannot be read: found rank 19, which cannot stand here")


@pytest.mark.parametrize("name", ["run.json", "front.csv", "front_equals.csv", "inputs/material_sets/starter.toml"])
def test_pipes_in_a_run(name: str, run: Path) -> None:
    (run / name).unlink()
    os.mkfifo(run / name)
    refused(lambda: read_run(run), "ordinary file")


# Checkpoints ----------------------------------------------------------------------------------------------------------


def npz(entries: dict[str, bytes], compression: int = zipfile.ZIP_DEFLATED) -> bytes:
    content = io.BytesIO()
    with zipfile.ZipFile(content, "w", compression) as archive:
        for name, data in entries.items():
            archive.writestr(name, data)
    return content.getvalue()


def npy(array: Any) -> bytes:
    content = io.BytesIO()
    np.save(content, array, allow_pickle=True)
    return content.getvalue()


def header(shape: str) -> bytes:
    """An array that claims a shape and holds nothing."""
    text = f"{{'descr': '<f8', 'fortran_order': False, 'shape': {shape}, }}\n".encode()
    return b"\x93NUMPY\x01\x00" + len(text).to_bytes(2, "little") + text


def lying(content: bytes) -> bytes:
    """The same with entries that claim to be 4 GB large."""
    at = content.index(b"PK\x01\x02")
    return content[: at + 24] + b"\xfe\xff\xff\xff" + content[at + 28 :]


def state(**text: Any) -> dict[str, bytes]:
    return {"text.npy": npy(np.frombuffer(json.dumps({"format": FORMAT, **text}).encode(), dtype=np.uint8))}


BOMB = npz({**state(), "a.npy": header("(10,)") + b"\0" * 50_000_000})
CHECKPOINTS: dict[str, bytes] = {
    "a pickle": npz({**state(), "a.npy": npy(np.array([{}], dtype=object))}),
    "nothing but a pickle": pickle.dumps({"a": 1}),
    "an array of endless length": npz({**state(), "a.npy": header("(1000000000000000,)")}),
    "an array of a negative length": npz({**state(), "a.npy": header("(-1,)")}),
    "an array of no shape": npz({**state(), "a.npy": header("'x'")}),
    "a header that is code": npz({**state(), "a.npy": header("__import__('os').getcwd()")}),
    "a header of brackets": npz({**state(), "a.npy": header("(" * 10_000)}),
    "entries that lie about their size": lying(npz({**state(), "a.npy": b"\0" * 100})),
    "no text": npz({"a.npy": npy(np.arange(3))}),
    "text that is no JSON": npz({"text.npy": npy(np.frombuffer(b"{", dtype=np.uint8))}),
    "text of brackets": npz({"text.npy": npy(np.frombuffer(b"[" * 100_000, dtype=np.uint8))}),
    "text of no object": npz({"text.npy": npy(np.frombuffer(b"[]", dtype=np.uint8))}),
    "text of objects": npz({"text.npy": npy(np.array([{}], dtype=object))}),
    "another format": npz(state(format="2; rm")),
    "an entry that is no array": npz({**state(), "a.npy": b"\0" * 100}),
    "no zip at all": b"PK\x03\x04" + b"\0" * 1000,
    "compression of another kind": npz(state(), zipfile.ZIP_BZIP2)[:-200],
    "empty": b"",
}


@pytest.mark.parametrize("name", CHECKPOINTS)
def test_checkpoints_with_a_right_checksum(name: str, tmp_path: Path) -> None:
    content = CHECKPOINTS[name]
    (tmp_path / "checkpoint-000002.npz").write_bytes(content + sha256(content).digest())
    refused(lambda: read_checkpoint(tmp_path), "checkpoint-000002.npz cannot be used (", "start the search again")
    os.rename(tmp_path / "checkpoint-000002.npz", tmp_path / "checkpoint-000003.npz")
    write_checkpoint(tmp_path, {"values": np.arange(3)}, {"seed": 7})
    os.rename(tmp_path / "checkpoint-000004.npz", tmp_path / "checkpoint-000001.npz")
    with limited():
        _, text, warnings = read_checkpoint(tmp_path)
    assert text["seed"] == 7
    assert len(warnings) == 1


def test_a_checkpoint_that_unpacks_to_more_than_the_memory(tmp_path: Path, monkeypatch: pytest.MonkeyPatch) -> None:
    assert len(BOMB) < 100_000
    (tmp_path / "checkpoint-000001.npz").write_bytes(BOMB + sha256(BOMB).digest())
    monkeypatch.setattr("stackopt.checkpoint.MAX_BYTES", 10_000_000)
    refused(lambda: read_checkpoint(tmp_path), "it claims to hold")


def test_checkpoints_that_are_no_files(tmp_path: Path) -> None:
    os.mkfifo(tmp_path / "checkpoint-000001.npz")
    (tmp_path / "checkpoint-000002.npz").symlink_to("checkpoint-000002.npz")
    (tmp_path / "checkpoint-000003.npz").mkdir()
    (tmp_path / "checkpoint-²²²²²².npz").write_bytes(b"")
    refused(lambda: read_checkpoint(tmp_path), "it is no ordinary file", "checkpoint-000002.npz cannot be used")


def test_the_examples_are_none_of_these(tmp_path: Path) -> None:
    """What the cases above change is right before."""
    write(tmp_path)
    assert "nan" not in PROBLEM + SET + "".join(TABLES.values())
    read_problem(tmp_path / "problem.toml")
    with pytest.raises(InputError):
        read_problem(tmp_path / "sets" / "set.toml")
    with pytest.raises(RunError):
        read_run(tmp_path)
