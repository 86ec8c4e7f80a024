"""Stacks written as text, as a user types them, and stack files, as a build sheet has them."""

from __future__ import annotations

import math
import os
import re
from collections.abc import Collection
from pathlib import Path
from typing import Annotated

from pydantic import Field

from stackopt.errors import Finding, InputError
from stackopt.problem import Problem, Sheet, Stack
from stackopt.readers import values as v
from stackopt.readers.files import Reading, Source, nearest, parse_toml
from stackopt.readers.structure import Structure, validate
from stackopt.readers.values import read_thickness
from stackopt.units import parse_quantity, show

_SHEET = re.compile(r"(?P<name>.*\S)\s+(?P<thickness>[+-]?[\d.]\S*(?:\s*[^\s\d]+)?)")
_SIZE = re.compile(r"(?P<first>[^x×]+?)\s*[x×]\s*(?P<second>[^x×]+)")
_EXAMPLE = '"steel 150um / copper 35um"'
_EXAMPLE_SIZE = '"120mm x 80mm"'
MOST_SHEETS = 100
"""Of a stack that is typed; a search has at most 20."""
STACK_SUFFIX = ".toml"
"""Names that end so are stack files, not stacks."""


class StackFile(Structure):
    """A stack file; ``sheets`` run from the source side to the victim side, without the bond films between them."""

    title: v.Text | None = None
    problem: v.Text | None = None
    sheets: Annotated[list[v.Layer], Field(min_length=1, max_length=MOST_SHEETS)]
    bond: v.Layer | None = None


def read_stack(path: str | os.PathLike[str], problem: Problem) -> Stack:
    """Read a stack file, such as a build sheet's stack.toml.

    Parameters
    ----------
    path : path
        The TOML file.
    problem : Problem
        Whose materials the stack is made of; its bond is put between the sheets, as everywhere.

    Returns
    -------
    tuple of Sheet
        Source side first.

    Raises
    ------
    InputError
        With a finding for every mistake, and when the file's bond is not the problem's.
    """
    source = Source(Path(path), Reading(), tuple(problem.materials))
    try:
        data = parse_toml(source.reading.read_text(source.path))
    except ValueError as error:
        source.add("", str(error))
        data = {}
    source.reading.raise_findings()
    table = validate(StackFile, data, source)
    if table is not None and table.bond is not None:
        _check_bond(Sheet(*table.bond), problem, source)
    source.reading.raise_findings()
    assert table is not None
    return tuple(Sheet(name, thickness) for name, thickness in table.sheets)


def _check_bond(bond: Sheet, problem: Problem, source: Source) -> None:
    known = problem.rules.bond
    same = known is not None and bond.material == known.material
    if known is None or not same or not math.isclose(bond.thickness_m, known.thickness_m, rel_tol=1e-9):
        has = "has no bond" if known is None else f"puts {known} between the sheets"
        source.add("bond", f"found {bond}, but the problem {has}; make the two agree, or leave the bond out here")


def parse_size(text: str) -> tuple[float, float]:
    """Read the two sides of a panel, m.

    Raises
    ------
    ValueError
        With a message for the user.

    Examples
    --------
    >>> parse_size("120mm x 80 mm")
    (0.12, 0.08)
    """
    match = _SIZE.fullmatch(text.strip())
    if match is None:
        raise ValueError(f"found {show(text)}; write two lengths with their units, such as {_EXAMPLE_SIZE}")
    try:
        sides = tuple(parse_quantity(side.strip(), "length") for side in match.groups())
    except ValueError:
        raise ValueError(f"found {show(text)}; write two lengths with their units, such as {_EXAMPLE_SIZE}") from None
    if not all(1e-3 <= side <= 100.0 for side in sides):
        raise ValueError(f"found {show(text)}; each side must be at least 1 mm and at most 100 m")
    return sides[0], sides[1]


def parse_stack(text: str, problem_materials: Collection[str]) -> Stack:
    """Read a stack, source side first; any thickness is allowed, not only the gauges of the set.

    Parameters
    ----------
    text : str
        Sheets with their thicknesses, divided by ``/``.
    problem_materials : collection of str
        Names that may occur, such as ``problem.materials``.

    Returns
    -------
    tuple of Sheet

    Raises
    ------
    InputError
        With a finding for each sheet that cannot be read.

    Examples
    --------
    >>> parse_stack("steel 0.15 mm/copper 35um", ["copper", "steel"])
    (Sheet(material='steel', thickness_m=0.00015), Sheet(material='copper', thickness_m=3.5e-05))
    """
    sheets, findings = [], []
    parts = text.split("/")
    if len(parts) > MOST_SHEETS:
        message = f"found {len(parts)} sheets; a stack has up to {MOST_SHEETS}"
        raise InputError(Finding("", f"stack {show(text.strip())}", message))
    for number, part in enumerate(parts, start=1):
        try:
            sheets.append(_sheet(" ".join(part.split()), problem_materials))
        except ValueError as error:
            findings.append(Finding("", f"stack {show(text.strip())}, sheet {number}", str(error)))
    if findings:
        raise InputError(findings)
    return tuple(sheets)


def _sheet(part: str, names: Collection[str]) -> Sheet:
    if not part:
        raise ValueError(f"found nothing; write a material and a thickness, such as {_EXAMPLE}")
    match = _SHEET.fullmatch(part)
    if part in names or match is None:
        raise ValueError(
            f"found {show(part)}, which has no thickness; write a material and a thickness, such as {_EXAMPLE}"
        )
    name = match["name"]
    if name not in names:
        raise ValueError(f"found {show(name)}, which the material set does not hold; {nearest(name, names)}")
    return Sheet(name, read_thickness(match["thickness"]))
