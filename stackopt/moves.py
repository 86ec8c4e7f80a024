"""Changes of stacks: random ones for the evolutionary search, and all that are near a stack for its polish."""

from __future__ import annotations

import numpy as np
from numpy.typing import NDArray

from stackopt.stock import Stock

Integers = NDArray[np.int64]

MOST_PAIRS = 40_000
"""Moves of two positions tried from a stack."""
_STEPS = np.array([0.5, 0.7, 0.85, 0.93, 0.97, 0.99, 0.998, 1.002, 1.01, 1.03, 1.07, 1.15])  # of a free thickness


def random_genes(stock: Stock, count: int, random: np.random.Generator) -> Integers:
    """Random stacks of one sheet up to the largest number."""
    m = stock.positions
    genes = np.zeros((count, 2 * m), dtype=np.int64)
    sheets = random.integers(1, m + 1, count)
    for row, used in zip(genes, sheets, strict=True):
        for at in range(int(used)):
            _put(stock, row, at, int(random.integers(1, stock.choices + 1)), random)
    return stock.tidy(genes)


def mutate(stock: Stock, genes: Integers, random: np.random.Generator) -> Integers:
    """Change each stack once, at random."""
    result = genes.copy()
    m = stock.positions
    for row, change in zip(
        result, random.choice(6, size=len(result), p=[0.2, 0.3, 0.15, 0.12, 0.13, 0.1]), strict=True
    ):
        codes = row[:m]
        used = int(np.count_nonzero(codes))
        at = int(random.integers(used)) if used else 0
        if used == 0 or change == 0:
            _put(stock, row, at, int(random.integers(1, stock.choices + 1)), random)
        elif change == 1:
            _step_gauge(stock, row, at, random)
        elif change == 2:
            _step_material(stock, row, at, random)
        elif change == 3 and used < m:
            place = int(random.integers(used + 1))
            row[place + 1 : m] = row[place : m - 1].copy()
            row[m + place + 1 :] = row[m + place : -1].copy()
            _put(stock, row, place, int(random.integers(1, stock.choices + 1)), random)
        elif change == 4 and used > 1:
            codes[at] = 0
        else:
            other = int(random.integers(used))
            for half in (codes, row[m:]):
                half[at], half[other] = half[other], half[at]
    return stock.tidy(result)


def _put(stock: Stock, row: Integers, at: int, code: int, random: np.random.Generator) -> None:
    row[at] = code
    low, high = stock.ranges_pm[code]
    row[stock.positions + at] = round(float(low * (high / low) ** random.random())) if low else 0


def _step_gauge(stock: Stock, row: Integers, at: int, random: np.random.Generator) -> None:
    code = int(row[at])
    if stock.ranges_pm[code, 0]:
        row[stock.positions + at] = round(float(row[stock.positions + at] * np.exp(0.2 * random.standard_normal())))
        return
    same = stock.siblings[code]
    place = int(np.searchsorted(same, code)) + (1 if random.random() < 0.4 else -1)
    row[at] = same[min(max(place, 0), len(same) - 1)]


def _step_material(stock: Stock, row: Integers, at: int, random: np.random.Generator) -> None:
    """Another material near the same place in its range of gauges."""
    code = int(row[at])
    same = stock.siblings[code]
    other = stock.siblings[int(random.integers(1, stock.choices + 1))]
    share = np.searchsorted(same, code) / max(len(same) - 1, 1)
    _put(stock, row, at, int(other[round(float(share) * (len(other) - 1))]), random)


def neighbours(stock: Stock, genes: Integers) -> Integers:
    """All stacks one local move away: a sheet dropped, replaced, inserted or swapped, a free thickness stepped."""
    m = stock.positions
    used = int(np.count_nonzero(genes[:m]))
    found: list[Integers] = []
    thicknesses = _typical_thickness(stock, genes)
    for at in range(used):
        found.append(np.delete(genes, (at, m + at))[None])
        replaced = np.repeat(genes[None], stock.choices, axis=0)
        replaced[:, at] = np.arange(1, stock.choices + 1)
        replaced[:, m + at] = thicknesses[1:]
        found.append(replaced)
        for other in range(at + 1, used):
            swapped = genes.copy()
            swapped[[at, other]] = genes[[other, at]]
            swapped[[m + at, m + other]] = genes[[m + other, m + at]]
            found.append(swapped[None])
        if genes[m + at]:
            stepped = np.repeat(genes[None], len(_STEPS), axis=0)
            stepped[:, m + at] = np.round(genes[m + at] * _STEPS)
            found.append(stepped)
    if used < m:
        for place in range(used + 1):
            grown = np.insert(genes[: m - 1], place, 0)
            room = np.concatenate([grown, np.insert(genes[m:-1], place, 0)])
            inserted = np.repeat(room[None], stock.choices, axis=0)
            inserted[:, place] = np.arange(1, stock.choices + 1)
            inserted[:, m + place] = thicknesses[1:]
            found.append(inserted)
    width = 2 * m
    padded = [part if part.shape[1] == width else np.insert(part, [m - 1, 2 * m - 2], 0, axis=1) for part in found]
    return np.unique(stock.tidy(np.concatenate(padded)), axis=0)


def pair_neighbours(stock: Stock, genes: Integers, random: np.random.Generator) -> Integers:
    """Stacks that differ in two positions, empty ones included; `MOST_PAIRS` of them at random if there are more."""
    m, choices = stock.positions, stock.choices + 1
    places = np.array([(i, j) for i in range(m) for j in range(i + 1, m)], dtype=np.int64).reshape(-1, 2)
    total = len(places) * choices * choices
    picked = np.arange(total) if total <= MOST_PAIRS else random.choice(total, MOST_PAIRS, replace=False)
    place, one, other = np.unravel_index(picked, (len(places), choices, choices))
    found = np.repeat(genes[None], len(picked), axis=0)
    row = np.arange(len(picked))
    thicknesses = _typical_thickness(stock, genes)
    for side, code in ((0, one), (1, other)):
        at = places[place, side]
        found[row, at] = code
        found[row, m + at] = thicknesses[code]
    return stock.tidy(found)


def _typical_thickness(stock: Stock, genes: Integers) -> Integers:
    """Thickness to try each code from 0 with: that of the stack's free sheets, or the middle of the range."""
    own = genes[stock.positions :]
    middle = np.sqrt(stock.ranges_pm[:, 0].astype(float) * stock.ranges_pm[:, 1]).astype(np.int64)
    typical = int(np.median(own[own > 0])) if np.any(own > 0) else 0
    return np.where(middle > 0, typical or middle, 0)
