"""CSV tables: masks, levels, permeability. One header line, commas, decimal points; lines with # first are remarks."""

from __future__ import annotations

import csv
import math
import os
from collections.abc import Iterator
from pathlib import Path

from stackopt.errors import Finding, InputError
from stackopt.physics.permeability import Table
from stackopt.readers.files import lines_of, read_text
from stackopt.units import show

MASK_COLUMNS = ("frequency_hz", "attenuation_db")
LEVEL_COLUMNS = ("frequency_hz", "level_db")
PERMEABILITY_COLUMNS = ("frequency_hz", "mu_real", "mu_imag")
MAX_LINES_REPORTED = 10
MAX_ROWS = 100_000
LOWEST_HZ, HIGHEST_HZ = 1e-6, 1e15
LARGEST = {"attenuation_db": 1e4, "level_db": 1e4, "mu_real": 1e9, "mu_imag": 1e9}
"""Bounds far outside of what is ever measured; beyond them the arithmetic would overflow."""

Columns = tuple[tuple[float, ...], ...]
Curve = tuple[tuple[float, ...], tuple[float, ...]]


def read_mask_table(path: str | os.PathLike[str]) -> Curve:
    """Read a mask: columns ``frequency_hz`` (0 Hz or more, rising) and ``attenuation_db`` (0 dB or more).

    Returns
    -------
    tuple of float, tuple of float
        Frequencies (Hz) and required attenuation (dB).

    Raises
    ------
    InputError
        With a finding for each line that cannot be used.
    """
    frequency, attenuation = parse_table(Path(path), _text(Path(path)), MASK_COLUMNS)
    return frequency, attenuation


def read_level_table(path: str | os.PathLike[str]) -> Curve:
    """Read levels, emitted or allowed: columns ``frequency_hz`` (above 0 Hz, rising) and ``level_db``.

    Returns
    -------
    tuple of float, tuple of float
        Frequencies (Hz) and levels (dB over a unit that both tables of a mask share).

    Raises
    ------
    InputError
        With a finding for each line that cannot be used.
    """
    frequency, level = parse_table(Path(path), _text(Path(path)), LEVEL_COLUMNS)
    return frequency, level


def read_permeability_table(path: str | os.PathLike[str]) -> Table:
    """Read a permeability: columns ``frequency_hz`` (above 0 Hz, rising), ``mu_real`` and ``mu_imag`` (0 or less).

    Raises
    ------
    InputError
        With a finding for each line that cannot be used.
    """
    return permeability_table(Path(path), _text(Path(path)))


def permeability_table(path: Path, text: str) -> Table:
    """Make a permeability table of CSV text; ``path`` names it in messages.

    Raises
    ------
    InputError
        With a finding for each line that cannot be used.
    """
    frequency, real, imag = parse_table(path, text, PERMEABILITY_COLUMNS)
    if len(frequency) < 2:
        raise InputError(Finding(str(path), "", "has one line of numbers; a permeability table needs two or more"))
    return Table(frequency, real, imag)


def parse_table(path: Path, text: str, columns: tuple[str, ...]) -> Columns:
    """Read CSV text with exactly the given columns, the first of which is a rising frequency.

    Returns
    -------
    tuple of tuple of float
        One tuple for each column.

    Raises
    ------
    InputError
        With a finding for each line that cannot be used; ``path`` names the file in them.
    """
    findings: list[Finding] = []
    rows: list[tuple[float, ...]] = []
    lines = _lines(text)
    number, header = next(lines, (1, []))
    if tuple(header) != columns:
        found = show(",".join(header)) if header else "nothing"
        message = f"found {found}; the header must be {','.join(columns)} (commas between columns, points in numbers)"
        raise InputError(Finding(str(path), f"line {number}", message))
    for count, (number, cells) in enumerate(lines):
        if count == MAX_ROWS:
            findings.append(
                Finding(str(path), f"line {number}", f"is beyond {MAX_ROWS} lines of numbers; thin them out")
            )
            break
        try:
            rows.append(_row(cells, columns, rows[-1][0] if rows else -1.0))
        except ValueError as error:
            findings.append(Finding(str(path), f"line {number}", str(error)))
    if len(findings) > MAX_LINES_REPORTED:
        more = f"{len(findings) - MAX_LINES_REPORTED} more lines cannot be used either"
        findings[MAX_LINES_REPORTED:] = [Finding(str(path), "", more)]
    if not rows and not findings:
        findings.append(Finding(str(path), "", "has a header but no numbers; add a line for each frequency"))
    if findings:
        raise InputError(findings)
    return tuple(zip(*rows, strict=True))


def _text(path: Path) -> str:
    try:
        return read_text(path)
    except ValueError as error:
        raise InputError(Finding(str(path), "", str(error))) from None


def _lines(text: str) -> Iterator[tuple[int, list[str]]]:
    for number, line in enumerate(lines_of(text), start=1):
        if line.strip() and not line.lstrip().startswith("#"):
            try:
                cells = next(csv.reader([line]))
            except csv.Error:  # a cell longer than the csv module reads
                cells = [line]
            yield number, [cell.strip() for cell in cells]


def _row(cells: list[str], columns: tuple[str, ...], before_hz: float) -> tuple[float, ...]:
    if len(cells) != len(columns):
        raise ValueError(f"found {len(cells)} columns; write {len(columns)}: {','.join(columns)}")
    row = tuple(_number(cell, column) for cell, column in zip(cells, columns, strict=True))
    frequency = row[0]
    _check_bounds(row, columns)
    if frequency < 0.0 or (frequency == 0.0 and columns != MASK_COLUMNS):
        raise ValueError(f"found frequency_hz {frequency:g} Hz; it must be above 0 Hz")
    if frequency <= before_hz:
        raise ValueError(
            f"found {frequency:.10g} Hz after {before_hz:.10g} Hz; frequencies must rise "
            "(write a step as two frequencies close together)"
        )
    if columns == MASK_COLUMNS and row[1] < 0.0:
        raise ValueError(f"found attenuation_db {row[1]:g} dB; write the required attenuation as 0 dB or more")
    if columns == PERMEABILITY_COLUMNS:
        _check_permeability(row[1], row[2])
    return row


def _check_bounds(row: tuple[float, ...], columns: tuple[str, ...]) -> None:
    if row[0] > HIGHEST_HZ or 0.0 < row[0] < LOWEST_HZ:
        raise ValueError(
            f"found frequency_hz {row[0]:g} Hz; write at least {LOWEST_HZ:g} Hz and at most {HIGHEST_HZ:g} Hz"
        )
    for value, column in zip(row[1:], columns[1:], strict=True):
        if abs(value) > LARGEST[column]:
            raise ValueError(f"found {column} {value:g}; write at most {LARGEST[column]:g} to either side of 0")


def _check_permeability(real: float, imag: float) -> None:
    if imag > 0.0:
        raise ValueError(
            f"found mu_imag {imag:g}; it must be 0 or less, because losses are negative in the convention e^(+jwt): "
            "flip the sign of the column"
        )
    if real == 0.0 and imag == 0.0:
        raise ValueError("found a permeability of 0; vacuum has mu_real 1 and mu_imag 0")


def _number(cell: str, column: str) -> float:
    try:
        value = float(cell)
    except ValueError:
        value = math.nan
    if not math.isfinite(value) or "_" in cell:
        raise ValueError(f"found {show(cell)} as {column}; write a finite number with a decimal point")
    return value + 0.0  # -0 is 0
