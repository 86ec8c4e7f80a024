"""Stacks written as text, as a user types them."""

from __future__ import annotations

import re
from collections.abc import Collection

from stackopt.errors import Finding, InputError
from stackopt.problem import Sheet, Stack
from stackopt.readers.files import nearest
from stackopt.readers.values import read_thickness

_SHEET = re.compile(r"(?P<name>.*\S)\s+(?P<thickness>[+-]?[\d.]\S*(?:\s*[^\s\d]+)?)")
_EXAMPLE = '"steel 150um / copper 35um"'


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
    for number, part in enumerate(text.split("/"), start=1):
        try:
            sheets.append(_sheet(" ".join(part.split()), problem_materials))
        except ValueError as error:
            findings.append(Finding("", f"stack {text.strip()!r}, sheet {number}", str(error)))
    if findings:
        raise InputError(findings)
    return tuple(sheets)


def _sheet(part: str, names: Collection[str]) -> Sheet:
    if not part:
        raise ValueError(f"found nothing; write a material and a thickness, such as {_EXAMPLE}")
    match = _SHEET.fullmatch(part)
    if part in names or match is None:
        raise ValueError(
            f"found {part!r}, which has no thickness; write a material and a thickness, such as {_EXAMPLE}"
        )
    name = match["name"]
    if name not in names:
        raise ValueError(f"found {name!r}, which the material set does not hold; {nearest(name, names)}")
    return Sheet(name, read_thickness(match["thickness"]))
