"""Measured sweeps: CSV as instruments write it, and pairs of Touchstone files, to attenuation over frequency."""

from __future__ import annotations

import math
import os
from collections.abc import Callable, Sequence
from dataclasses import dataclass
from pathlib import Path

import numpy as np
from numpy.typing import NDArray

from stackopt.errors import Finding, InputError
from stackopt.readers.files import lines_of, read_text
from stackopt.readers.numerals import Cell, Numerals
from stackopt.readers.tables import MAX_ROWS
from stackopt.units import format_frequency, parse_quantity, show

Real = NDArray[np.float64]
Booleans = NDArray[np.bool_]

FLOOR_MARGIN_DB = 10.0
"""A level nearer to the noise floor is not a measurement: at 10 dB the floor is worth up to 3 dB of it."""
FREQUENCY = "frequency_hz"
FORMS = (("without_v", "with_v"), ("without_db", "with_db"), ("attenuation_db",))
"""Columns that a sweep may have beside its frequency."""
_FORMS_TEXT = "; ".join(",".join((FREQUENCY, *form)) for form in FORMS)
LARGEST_DB, LARGEST_HZ = 1e3, 1e12
MAX_LINE = 10_000
"""Characters of a line."""
MAX_FINDINGS = 10
MAX_NAMED = 6
"""Frequencies or lines that a remark names one by one."""


@dataclass(frozen=True)
class Sweep:
    """One measured sweep, frequencies rising.

    Parameters
    ----------
    name : str
        File name.
    frequency_hz, attenuation_db : ndarray, shape (frequency,)
        Attenuation is the level without the sheet minus the level with it, dB.
    without_db : ndarray, shape (frequency,), or None
        Level without the sheet, dB over the instrument's unit, where the file gives it.
    at_floor : ndarray of bool, shape (frequency,)
        Where a level is so near to the noise floor that the attenuation is only a lower bound.
    remarks : tuple of str
        What was noticed while reading and how it was dealt with.
    """

    name: str
    frequency_hz: Real
    attenuation_db: Real
    without_db: Real | None
    at_floor: Booleans
    remarks: tuple[str, ...] = ()


@dataclass(frozen=True)
class Levels:
    """Levels of a sweep before they are put in order: lines or points of a file, shape (point,)."""

    frequency_hz: Real
    attenuation_db: Real
    without_db: Real | None
    form: tuple[str, ...]


def read_sweep(
    path: str | os.PathLike[str], floor: str | None = None, without: str | os.PathLike[str] | None = None
) -> Sweep:
    """Read a sweep.

    Parameters
    ----------
    path : path
        CSV with ``frequency_hz`` and either ``without_v,with_v`` (amplitudes), ``without_db,with_db`` (levels) or
        ``attenuation_db``, divided by ``,`` or ``;``; or the Touchstone file (.s2p) with the sheet.
    floor : str, optional
        Noise floor: a voltage such as "20 uV" for amplitudes, a level such as "-90 dB" for levels and Touchstone, the
        largest attenuation that can be measured, such as "70 dB", for attenuations.
    without : path, optional
        Touchstone file without the sheet.

    Returns
    -------
    Sweep

    Raises
    ------
    InputError
        With a finding for each place that cannot be used, by line and column.
    """
    known = Path(path)
    if known.suffix.lower() == ".s2p" or without is not None:
        from stackopt.readers.touchstone import read_pair

        frequency, without_db, with_db, remarks = read_pair(known, None if without is None else Path(without))
        levels = Levels(frequency, without_db - with_db, without_db, FORMS[1])
    else:
        levels, remarks = _read_csv(known)
    return _ordered(known, levels, remarks, floor)


def _read_csv(path: Path) -> tuple[Levels, list[str]]:
    try:
        text = read_text(path)
    except ValueError as error:
        raise InputError(Finding(str(path), "", str(error))) from None
    lines = [
        (number, line)
        for number, line in enumerate(lines_of(text), start=1)
        if line.strip() and not line.lstrip().startswith("#")
    ]
    if not lines:
        raise InputError(Finding(str(path), "", f"holds no header and no numbers; write one of: {_FORMS_TEXT}"))
    longest = max(lines, key=lambda line: len(line[1]))
    if len(longest[1]) > MAX_LINE:
        message = f"has {len(longest[1])} characters; lines up to {MAX_LINE} are read"
        raise InputError(Finding(str(path), f"line {longest[0]}", message))
    if len(lines) - 1 > MAX_ROWS:
        raise InputError(Finding(str(path), "", f"has {len(lines) - 1} lines of numbers; up to {MAX_ROWS} are read"))
    number, header = lines[0]
    divider = ";" if ";" in header else ","
    names = [name.strip().strip('"').lower() for name in header.split(divider)]
    wanted = _columns(path, number, names)
    rows = [
        [Cell(line, place, cell.strip().strip('"')) for place, cell in enumerate(row.split(divider), start=1)]
        for line, row in lines[1:]
    ]
    values = _numbers(path, names, wanted, rows, divider)
    unused = [name for name in names if name not in wanted and name]
    remarks = [f"columns not used: {', '.join(unused)}"] if unused else []
    return _levels(path, values, wanted, rows, remarks), remarks


def _columns(path: Path, number: int, names: list[str]) -> tuple[str, ...]:
    """Return the columns to be read; the header must name one form of a sweep, once."""
    complete = [form for form in FORMS if all(names.count(name) == 1 for name in form)]
    if names.count(FREQUENCY) == 1 and len(complete) == 1:
        return (FREQUENCY, *complete[0])
    found = show(",".join(names))
    message = f"found {found}; the header must hold the columns of one of: {_FORMS_TEXT}, each once"
    raise InputError(Finding(str(path), f"line {number}", message))


def _numbers(
    path: Path, names: list[str], wanted: tuple[str, ...], rows: list[list[Cell]], divider: str
) -> list[tuple[float, ...]]:
    """Read the wanted columns of all rows; every cell that is no number is a finding."""
    places = [names.index(name) for name in wanted]
    findings: list[Finding] = []
    numerals = Numerals(divider, [row[place].text for row in rows for place in places if place < len(row)])
    if numerals.mistake:
        raise InputError(Finding(str(path), "", numerals.mistake))
    values: list[tuple[float, ...]] = []
    for row in rows:
        if len(row) != len(names):
            hint = "; decimal commas need ; between columns" if divider == "," and len(row) > len(names) else ""
            message = f"found {len(row)} columns, the header has {len(names)}{hint}"
            findings.append(Finding(str(path), f"line {row[0].line}", message))
            continue
        entry = []
        for place, name in zip(places, wanted, strict=True):
            try:
                entry.append(_checked(numerals.read(row[place].text), name))
            except ValueError as error:
                where = f"line {row[place].line}, column {row[place].column} ({name})"
                findings.append(Finding(str(path), where, str(error)))
        values.append(tuple(entry))
    if not rows:
        findings.append(Finding(str(path), "", "has a header but no numbers; add a line for each frequency"))
    if findings:
        raise InputError(_shortened(path, findings))
    return values


def _checked(value: float, name: str) -> float:
    if name.endswith("_v") and value < 0.0:
        raise ValueError(f"found {value:g} V; write the amplitude, 0 V or more")
    if name.endswith("_db") and abs(value) > LARGEST_DB:
        raise ValueError(f"found {value:g} dB; no instrument reads beyond {LARGEST_DB:g} dB")
    if name == FREQUENCY and value > LARGEST_HZ:
        raise ValueError(f"found {value:g} Hz; sweeps up to {LARGEST_HZ:g} Hz are read")
    return value


def _shortened(path: Path, findings: list[Finding]) -> list[Finding]:
    if len(findings) > MAX_FINDINGS:
        more = Finding(str(path), "", f"{len(findings) - MAX_FINDINGS} more places cannot be used either")
        return [*findings[:MAX_FINDINGS], more]
    return findings


def _levels(
    path: Path, values: list[tuple[float, ...]], wanted: tuple[str, ...], rows: list[list[Cell]], remarks: list[str]
) -> Levels:
    """Make levels of the numbers; lines without a level or a frequency are left out, and a remark names them."""
    table = np.array(values)
    line = np.array([row[0].line for row in rows])
    keep = table[:, 0] > 0.0
    if not np.all(keep):
        remarks.append(f"{_lines_words(line[~keep])}: frequency not above 0 Hz, left out")
    form = wanted[1:]
    if form == FORMS[0]:
        silent = keep & np.any(table[:, 1:] == 0.0, axis=1)
        if np.any(silent):
            remarks.append(f"{_lines_words(line[silent])}: an amplitude of 0 V is no level, left out")
        keep &= ~silent
    table = table[keep]
    if not len(table):
        raise InputError(Finding(str(path), "", "has no line with a frequency above 0 Hz and levels; measure again"))
    if form == FORMS[0]:
        table[:, 1:] = 20.0 * np.log10(table[:, 1:])
    if len(form) == 1:
        return Levels(table[:, 0], table[:, 1], None, form)
    return Levels(table[:, 0], table[:, 1] - table[:, 2], table[:, 1], form)


def _ordered(path: Path, levels: Levels, remarks: list[str], floor: str | None) -> Sweep:
    """Sort, merge repeated frequencies, and mark what lies at the floor; each is remarked."""
    at_floor = np.zeros(len(levels.frequency_hz), dtype=bool)
    if floor is not None:
        at_floor = _near_floor(levels, _floor_db(path, levels.form, floor))
    order = np.argsort(levels.frequency_hz, kind="stable")
    if np.any(np.diff(order) < 0):
        remarks.append("frequencies did not rise; sorted")
    frequency, first = np.unique(levels.frequency_hz[order], return_index=True)
    counts = np.diff(np.append(first, len(order)))
    if np.any(counts > 1):
        named = _frequency_words(frequency[counts > 1])
        remarks.append(f"measured more than once, the mean in dB is used: {named}")

    def merged(values: Real) -> Real:
        return np.asarray(np.add.reduceat(values[order], first) / counts)

    floored = merged(at_floor.astype(float)) > 0.0
    if np.any(floored):
        remarks.append(
            f"{np.count_nonzero(floored)} of {len(frequency)} frequencies lie within {FLOOR_MARGIN_DB:g} dB of the "
            f"noise floor ({_frequency_words(frequency[floored])}): there the attenuation is only a lower bound, "
            "and no fit uses it"
        )
    without = None if levels.without_db is None else merged(levels.without_db)
    return Sweep(path.name, frequency, merged(levels.attenuation_db), without, floored, tuple(remarks))


def _near_floor(levels: Levels, floor_db: float) -> Booleans:
    if levels.without_db is None:
        return np.asarray(levels.attenuation_db > floor_db - FLOOR_MARGIN_DB)
    lowest = np.minimum(levels.without_db, levels.without_db - levels.attenuation_db)
    return np.asarray(lowest < floor_db + FLOOR_MARGIN_DB)


def _floor_db(path: Path, form: tuple[str, ...], floor: str) -> float:
    kind = "voltage" if form == FORMS[0] else "level"
    try:
        value = parse_quantity(floor, kind)
        if kind == "voltage" and value <= 0.0:
            raise ValueError(f"found {show(floor)}; it must be above 0 V")
    except ValueError as error:
        what = {
            FORMS[0]: 'a voltage such as "20 uV"',
            FORMS[1]: 'a level such as "-90 dB", over the same unit as with_db',
            FORMS[2]: 'the largest attenuation that can be measured, such as "70 dB"',
        }[form]
        raise InputError(Finding(str(path), "floor", f"{error} (for this sweep the floor is {what})")) from None
    return 20.0 * math.log10(value) if kind == "voltage" else value


def _lines_words(lines: NDArray[np.int64]) -> str:
    return _listed("line", [str(number) for number in lines])


def _frequency_words(frequency_hz: Real) -> str:
    if len(frequency_hz) > MAX_NAMED:
        return f"{format_frequency(frequency_hz[0])} to {format_frequency(frequency_hz[-1])}"
    return ", ".join(format_frequency(value) for value in frequency_hz)


def _listed(word: str, items: Sequence[str]) -> str:
    more = f" and {len(items) - MAX_NAMED} more" if len(items) > MAX_NAMED else ""
    return f"{word}{'s' if len(items) > 1 else ''} {', '.join(items[:MAX_NAMED])}{more}"


def read_all(jobs: Sequence[Callable[[], Sweep]]) -> list[Sweep]:
    """Read several sweeps and report the mistakes of all of them together.

    Raises
    ------
    InputError
        With the findings of every sweep.
    """
    findings: list[Finding] = []
    sweeps = []
    for job in jobs:
        try:
            sweeps.append(job())
        except InputError as error:
            findings.extend(error.findings)
    if findings:
        raise InputError(findings)
    return sweeps
