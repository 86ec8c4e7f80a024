"""Numbers in the CSV files of instruments: points or commas as decimal sign, told apart only where that is sure."""

from __future__ import annotations

import math
import re
from collections.abc import Sequence
from dataclasses import dataclass

from stackopt.units import show

_COMMA_NUMBER = re.compile(r"[+-]?\d*,\d+(?:[eE][+-]?\d+)?")
_THOUSANDS = re.compile(r"[+-]?\d{1,3}(?:,\d{3})+")


@dataclass(frozen=True)
class Cell:
    """Text of one cell, with its line and its column counted from 1."""

    line: int
    column: int
    text: str


class Numerals:
    """How a file writes its numbers.

    Parameters
    ----------
    divider : str
        What stands between columns; commas can be decimal signs only where it is ``;``.
    cells : sequence of str
        All the numbers of the file, from which the decimal sign is told.
    """

    def __init__(self, divider: str, cells: Sequence[str]) -> None:
        commas = [cell for cell in cells if "," in cell]
        self.decimal_comma = divider == ";" and bool(commas)
        self.mistake = ""
        """What makes the decimal sign unsure, in words; empty where it is sure."""
        if not self.decimal_comma:
            return
        if any("." in cell for cell in cells):
            self.mistake = (
                f"mixes commas and points in numbers (such as {show(commas[0])}); write one decimal sign only and no "
                "sign between thousands"
            )
        elif all(_THOUSANDS.fullmatch(cell) for cell in commas):
            self.mistake = (
                f"has commas that can be decimal signs or divide thousands (such as {show(commas[0])}); write "
                "points as decimal signs"
            )

    def read(self, text: str) -> float:
        """Read one number.

        Raises
        ------
        ValueError
            With a message for the user.

        Examples
        --------
        >>> Numerals(";", ["0,5", "12,25"]).read("12,25")
        12.25
        """
        plain = text.replace(",", ".") if self.decimal_comma and _COMMA_NUMBER.fullmatch(text) else text
        try:
            value = float(plain)
        except ValueError:
            value = math.nan
        if not text:
            raise ValueError("found an empty cell; write a number or take the line out")
        if not math.isfinite(value) or "_" in plain:
            raise ValueError(f"found {show(text)}; write a finite number")
        return value
