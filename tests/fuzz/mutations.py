"""Files damaged at random, by a seed: what a slip of the hand, a broken disk or a stranger may make of them."""

from __future__ import annotations

import dataclasses
import math
import random
import re
import shutil
import signal
from collections.abc import Callable, Iterator, Mapping
from contextlib import contextmanager
from hashlib import sha256
from pathlib import Path
from typing import Any

import numpy as np

from stackopt.checkpoint import read_checkpoint, write_checkpoint
from stackopt.errors import StackoptError
from stackopt.readers import parse_stack, read_material_set, read_problem, read_stack
from stackopt.readers.setups import read_setup
from stackopt.readers.sweeps import read_sweep
from stackopt.runs import read_run

ROOT = Path(__file__).parent.parent.parent
SECONDS = 10
"""Longest that reading anything may take."""
CHECKPOINT = "run/checkpoint-000001.npz"

NUMBERS = (
    *("0", "-0.0", "-1", "1e308", "1e400", "-1e308", "5e-324", "1e-30", "inf", "-inf", "nan", "NaN", "1_000", "0x10"),
    *("9" * 5000, "1" + "0" * 400, "3,5", "٣٥", "３５", "−5", "1e", "+", "1e9", "999999999999", "0.1.2", "true", ""),
)
UNITS = (
    *("m", "mm", "um", "µm", "μm", "nm", "km", "mil", "inch", "Hz", "kHz", "MHz", "mHz", "rad/s", "rpm", "S/m", "MS/m"),
    *("kg/m^3", "g/cm^3", "kg/m^2", "T", "V", "A", "A m^2", "deg", "rad", "dB", "dBm", "%", "percent", "W", "H", "m/A"),
    *("ｍｍ", "мm", "m" * 200, "1/s", "", "²", "m^-1", "m**9", "$", "\\u0000", "{}", "um um", "Um", "e3 m"),
)
VALUES = (
    *(
        "1",
        "-1.5",
        "true",
        "[]",
        "{}",
        '""',
        '"x"',
        "nan",
        "inf",
        "-inf",
        "1e400",
        "1979-05-27",
        "07:32:00",
        "[[1, 2]]",
    ),
    *('[["1 kHz", "2 dB"]]', '"../../../../etc/passwd"', '"/dev/zero"', '"~"', '"."', "[1, 2", "{a = 1}", "9" * 5000),
    *('"' + "x" * 5000 + '"', "[" * 10_000, '"\\u0000"', '"\\u202e"', '"""a\nb"""', "'35 um'", '["1 um"]', '"35 um'),
)
PIECES = (
    *(b"\0", b"\xff\xfe", b"\xef\xbb\xbf", b"\r", b"\n", b'"', b"'", b"[", b"]", b"{", b"}", b"=", b",", b"#", b";"),
    *(b"\x1b[2J", "\u2028".encode(), "\u202e".encode(), b"\x85", b"\xed\xa0\x80", b"nan", b"[" * 10_000, b"a." * 3000),
)
_NUMBER = re.compile(rb"[-+]?\d+\.?\d*(?:e[-+]?\d+)?")
_QUANTITY = re.compile(rb'"([-+]?[\d.e]+) ([^"\d\n]+)"')
_VALUE = re.compile(rb"= ([^\n]+)")
_KEY = re.compile(rb"\b[a-z_]{3,}\b")

Mutation = Callable[[bytes, random.Random], bytes]


class TooSlowError(BaseException):
    """Raised out of a reading that takes too long; no reader may catch it."""


@contextmanager
def limited(seconds: int = SECONDS) -> Iterator[None]:
    """Stop what takes longer, in time of the processor, as machines are shared; or far longer by the clock."""

    def stop(number: int, frame: object) -> None:
        raise TooSlowError(f"took longer than {seconds} s")

    timers = {signal.ITIMER_PROF: (signal.SIGPROF, seconds), signal.ITIMER_REAL: (signal.SIGALRM, 6 * seconds)}
    before = {number: signal.signal(number, stop) for number, _ in timers.values()}
    for timer, (_, limit) in timers.items():
        signal.setitimer(timer, limit)
    try:
        yield
    finally:
        for timer in timers:
            signal.setitimer(timer, 0)
        for number, handler in before.items():
            signal.signal(number, handler)


# Mutations ------------------------------------------------------------------------------------------------------------


def _lines(change: Callable[[list[bytes], int, random.Random], None]) -> Mutation:
    def mutate(content: bytes, rng: random.Random) -> bytes:
        lines = content.split(b"\n")
        change(lines, rng.randrange(len(lines)), rng)
        return b"\n".join(lines)

    return mutate


def _swap(lines: list[bytes], at: int, rng: random.Random) -> None:
    other = rng.randrange(len(lines))
    lines[at], lines[other] = lines[other], lines[at]


def _one(pattern: re.Pattern[bytes], make: Callable[[re.Match[bytes], random.Random], bytes]) -> Mutation:
    def mutate(content: bytes, rng: random.Random) -> bytes:
        found = list(pattern.finditer(content))
        if not found:
            return content
        match = rng.choice(found)
        return content[: match.start()] + make(match, rng) + content[match.end() :]

    return mutate


def _misspelt(match: re.Match[bytes], rng: random.Random) -> bytes:
    word = bytearray(match[0])
    at = rng.randrange(len(word))
    word[at : at + 1] = rng.choice([b"", b"e", bytes([word[at]]) * 2])
    return bytes(word)


def _without_some(content: bytes, rng: random.Random) -> bytes:
    start = rng.randrange(len(content) + 1)
    return content[:start] + content[start + rng.randrange(1, 40) :]


def _flipped(content: bytes, rng: random.Random) -> bytes:
    changed = bytearray(content or b"\0")
    changed[rng.randrange(len(changed))] ^= 1 << rng.randrange(8)
    return bytes(changed)


def _inserted(content: bytes, rng: random.Random) -> bytes:
    at = rng.randrange(len(content) + 1)
    return content[:at] + rng.choice(PIECES) + content[at:]


def _recoded(content: bytes, rng: random.Random) -> bytes:
    text = content.decode("utf-8", "replace")
    return text.encode(rng.choice(["utf-16", "utf-16-le", "utf-32", "utf-8-sig", "cp037"]), "replace")


def _line_ends(content: bytes, rng: random.Random) -> bytes:
    return content.replace(b"\n", rng.choice([b"\r", b"\r\n", b"\n\n", b"\n\r", b"\x0b", b"\x85"]))


MUTATIONS: Mapping[str, Mutation] = {
    "line deleted": _lines(lambda lines, at, rng: lines.pop(at) and None),
    "line doubled": _lines(lambda lines, at, rng: lines.insert(rng.randrange(len(lines)), lines[at])),
    "lines swapped": _lines(_swap),
    "line cut": _lines(lambda lines, at, rng: lines.__setitem__(at, lines[at][: rng.randrange(len(lines[at]) + 1)])),
    "cut off": lambda content, rng: content[: rng.randrange(len(content) + 1)],
    "bytes deleted": _without_some,
    "bit flipped": _flipped,
    "piece inserted": _inserted,
    "number": _one(_NUMBER, lambda match, rng: rng.choice(NUMBERS).encode()),
    "unit": _one(_QUANTITY, lambda match, rng: b'"%b %b"' % (match[1], rng.choice(UNITS).encode())),
    "quantity": _one(_QUANTITY, lambda match, rng: b'"%b %b"' % (rng.choice(NUMBERS).encode(), match[2])),
    "value": _one(_VALUE, lambda match, rng: b"= " + rng.choice(VALUES).encode()),
    "value moved": _one(_VALUE, lambda match, rng: b"= " + rng.choice(_VALUE.findall(match.string))),
    "key misspelt": _one(_KEY, _misspelt),
    "key moved": _one(_KEY, lambda match, rng: rng.choice(_KEY.findall(match.string))),
    "line repeated": _lines(lambda lines, at, rng: lines.insert(at, b"\n".join([lines[at]] * 1000))),
    "recoded": _recoded,
    "line ends": _line_ends,
}


def mutated(content: bytes, rng: random.Random) -> tuple[bytes, list[str]]:
    """Content with one to three mutations, and their names."""
    names = [rng.choice(list(MUTATIONS)) for _ in range(rng.choice([1, 1, 1, 2, 3]))]
    for name in names:
        content = MUTATIONS[name](content, rng)
    return content, names


# What is read ---------------------------------------------------------------------------------------------------------


@dataclasses.dataclass(frozen=True)
class Job:
    """A file to damage and what then reads it; both see the folder that `copy_examples` filled."""

    file: str
    read: Callable[[Path], Any]


def copy_examples(folder: Path) -> None:
    """Copy the examples of the repository, and a run with a checkpoint of an invented state."""
    for name in ("problems", "material_sets"):
        shutil.copytree(ROOT / name, folder / name)
    shutil.copytree(ROOT / "results" / "example", folder / "run", ignore=shutil.ignore_patterns("*.png", "*.npz"))
    write_checkpoint(folder / "run", {"values": np.arange(12).reshape(4, 3)}, {"seed": 7, "round": 0})


def copy_demo(folder: Path) -> Path:
    """Copy the demonstration of the bench to a folder, which is made."""
    shutil.copytree(ROOT / "problems" / "bench_demo", folder)
    return folder


def jobs() -> list[Job]:
    """Every example file with each reader that reaches it."""
    found = []
    for path in sorted((ROOT / "problems").glob("*.toml")):
        problem = read_problem(path)
        found += [Job(_relative(name), _reader(read_problem, _relative(path))) for name in problem.files]
    for path in sorted((ROOT / "material_sets").glob("*.toml")):
        found.append(Job(_relative(path), _reader(read_material_set, _relative(path))))
    bench = ROOT / "problems" / "bench_demo"
    for path in sorted(bench.glob("setup_*.toml")):
        found.append(Job(_relative(path), _reader(read_setup, _relative(path))))
    for path in sorted(bench.glob("*.csv")):
        found.append(Job(_relative(path), _reader(read_sweep, _relative(path))))
    demo = read_problem(bench / "problem.toml")
    found.append(
        Job(
            "problems/bench_demo/stack.toml", lambda folder: read_stack(folder / "problems/bench_demo/stack.toml", demo)
        )
    )
    for name in ("run.json", "front.csv", "front_equals.csv", *_inputs()):
        found.append(Job(f"run/{name}", lambda folder: read_run(folder / "run")))
    found.append(Job(CHECKPOINT, lambda folder: read_checkpoint(folder / "run")))
    return found


def _reader(read: Callable[[Path], Any], name: str) -> Callable[[Path], Any]:
    return lambda folder: read(folder / name)


def _relative(path: str | Path) -> str:
    return Path(path).relative_to(ROOT).as_posix()


def _inputs() -> list[str]:
    run = ROOT / "results" / "example"
    return sorted(path.relative_to(run).as_posix() for path in (run / "inputs").rglob("*.toml"))


def signed(content: bytes, rng: random.Random) -> bytes:
    """A damaged checkpoint, half of the time with a checksum that is right again."""
    return content[:-32] + sha256(content[:-32]).digest() if rng.random() < 0.5 else content


def read_stack_text(text: str) -> Any:
    """Read a stack text for the materials of the example."""
    return parse_stack(text, ("copper", "carbon steel", "80 % nickel as rolled", "6um foil"))


# What must hold -------------------------------------------------------------------------------------------------------


def read_or_refuse(read: Callable[[], Any]) -> Any:
    """Read within the time; a mistake must be told in words, and what is read must be numbers that make sense.

    Returns what was read, or the error.
    """
    try:
        with limited():
            result = read()
    except StackoptError as error:
        check_message(error)
        return error
    check_numbers(result, type(result).__name__)
    return result


def check_message(error: StackoptError) -> None:
    """Refuse an error that tells nothing, or so much that nobody reads it."""
    assert error.exit_code in (1, 2)
    assert str(error).strip()
    assert "Traceback" not in str(error)
    assert len(str(error)) < 200_000
    for finding in getattr(error, "findings", ()):
        assert len(finding.message) >= 10, finding


def check_numbers(value: Any, where: str) -> None:
    """Refuse numbers that nobody can have meant, anywhere inside."""
    if isinstance(value, float):
        assert math.isfinite(value) or where.endswith("cost_per_m2"), f"{where} is {value}"
    elif dataclasses.is_dataclass(value) and not isinstance(value, type):
        for field in dataclasses.fields(value):
            check_numbers(getattr(value, field.name), f"{where}.{field.name}")
    elif isinstance(value, Mapping):
        for key, entry in value.items():
            check_numbers(entry, f"{where}.{key}")
    elif isinstance(value, tuple | list):
        for entry in value:
            check_numbers(entry, where)
    elif isinstance(value, np.ndarray) and value.dtype.kind == "f":
        assert np.all(np.isfinite(value)), where
    if where.endswith("frequency_hz") and not isinstance(value, float):
        assert np.all(np.diff(np.asarray(value)) > 0.0), where
    if where.endswith("thickness_m") and value is not None:
        assert value > 0.0, where
