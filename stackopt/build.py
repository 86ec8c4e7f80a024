"""From a picked stack to what a workshop needs: layers, cuts, what each layer does, tolerances, alternatives."""

from __future__ import annotations

import math
from collections.abc import Sequence
from dataclasses import dataclass

import numpy as np

from stackopt import evaluate
from stackopt.band import Band
from stackopt.choice import nearest
from stackopt.compiled import compile_problem
from stackopt.front import Front, FrontRow
from stackopt.model import with_bonds
from stackopt.prediction import Prediction, predict
from stackopt.problem import CoaxialDipoles, CoaxialLoops, Problem, Sheet, Stack

DENSITY = 10
"""Points per decade over those of the search grid: as many as the search confirms its front with."""
Size = tuple[float, float]
"""Two sides, m."""


@dataclass(frozen=True)
class Layer:
    """One layer to be laid, source side first.

    ``loss_db`` is by how much the smallest margin changes when the sheet is left out; NaN for a bond film.
    """

    sheet: Sheet
    is_bond: bool
    state: str
    mass_kg_per_m2: float
    cost_per_m2: float
    loss_db: float


@dataclass(frozen=True)
class Cut:
    """Equal pieces of one sheet, and what they take of the stock where its size is known.

    ``per_stock`` is 0 where a piece does not fit; ``waste`` is the share of the stock sheets that is left over.
    """

    sheet: Sheet
    pieces: int
    per_stock: int | None = None
    stock_sheets: int | None = None
    waste: float | None = None


@dataclass(frozen=True)
class Overhang:
    """How far a centred panel reaches beyond the larger loop or dipole, and how far it should; m."""

    requirement: str
    reach_m: float | None
    advised_m: tuple[float, float]
    advised_side_m: tuple[float, float]
    """Shortest side of a panel that reaches so far."""


@dataclass(frozen=True)
class BuildSheet:
    """All that a build sheet tells of a picked stack.

    ``rank`` counts from 1; ``others`` are the nearest rows of the front with their ranks; ``equals`` the other stacks
    of exactly the same objectives.
    """

    front: Front
    rank: int
    row: FrontRow
    prediction: Prediction
    layers: tuple[Layer, ...]
    handling_per_m2: float
    band: Band | None
    others: tuple[tuple[int, FrontRow], ...]
    equals: tuple[FrontRow, ...]
    overhangs: tuple[Overhang, ...]
    cuts: tuple[Cut, ...] = ()
    panel: Size | None = None
    stock: Size | None = None


def make_build_sheet(front: Front, rank: int, panel: Size | None = None, stock: Size | None = None) -> BuildSheet:
    """Compute the build sheet of a stack of a front.

    Parameters
    ----------
    front : Front
    rank : int
        From 1.
    panel, stock : (float, float), optional
        Sides of the finished panel, and of the sheets the material is bought in, m.
    """
    problem, row = front.problem, front.rows[rank - 1]
    (prediction,) = predict(problem, [row.stack], DENSITY, bands=True)
    objectives = problem.search.objectives
    return BuildSheet(
        front=front,
        rank=rank,
        row=row,
        prediction=prediction,
        layers=layers(problem, row.stack),
        handling_per_m2=problem.rules.cost_per_sheet * row.sheets,
        band=prediction.band,
        others=tuple((index + 1, front.rows[index]) for index in nearest(front.rows, rank - 1, objectives)),
        equals=tuple(equal for number, equal in front.equals if number == rank),
        overhangs=tuple(overhangs(problem, panel)),
        cuts=cut_list(with_bonds(problem, row.stack), panel, stock) if panel else (),
        panel=panel,
        stock=stock,
    )


def layers(problem: Problem, stack: Stack) -> tuple[Layer, ...]:
    """Layers of a stack with its bonds, source side first."""
    losses = iter(losses_db(problem, stack))
    result = []
    for number, sheet in enumerate(with_bonds(problem, stack)):
        material = problem.materials[sheet.material]
        price = material.price(sheet.thickness_m)
        is_bond = problem.rules.bond is not None and number % 2 == 1
        result.append(
            Layer(
                sheet=sheet,
                is_bond=is_bond,
                state=material.notes,
                mass_kg_per_m2=material.mass_kg_per_m2(sheet.thickness_m),
                cost_per_m2=math.nan if price is None else price,
                loss_db=math.nan if is_bond else next(losses),
            )
        )
    return tuple(result)


def losses_db(problem: Problem, stack: Stack) -> list[float]:
    """Change of the smallest margin when a sheet is left out with its bond, dB, for each sheet.

    Without its only sheet a stack attenuates nothing.
    """
    sheets = tuple(dict.fromkeys(stack))
    compiled = compile_problem(problem, sheets, DENSITY)
    stacks = [stack, *(stack[:number] + stack[number + 1 :] for number in range(len(stack)))]
    if len(stack) == 1:
        margin, _ = evaluate.margins(compiled, evaluate.encode(compiled, stacks[:1]))
        return [float(np.min(-compiled.rows.required_db) - margin[0])]
    margin, _ = evaluate.margins(compiled, evaluate.encode(compiled, stacks))
    return [float(value) for value in margin[1:] - margin[0]]


def cut_list(stack: Sequence[Sheet], panel: Size, stock: Size | None) -> tuple[Cut, ...]:
    """Pieces to cut for one panel, equal ones together, each the size of the panel.

    Pieces lie side by side on a stock sheet, all turned the same way, without allowance for the cut.
    """
    counts = {sheet: list(stack).count(sheet) for sheet in stack}
    return tuple(_cut(sheet, pieces, panel, stock) for sheet, pieces in counts.items())


def _cut(sheet: Sheet, pieces: int, panel: Size, stock: Size | None) -> Cut:
    if stock is None:
        return Cut(sheet, pieces)
    per_stock = max(_fit(stock, panel), _fit(stock, panel[::-1]))
    if per_stock == 0:
        return Cut(sheet, pieces, 0)
    stock_sheets = math.ceil(pieces / per_stock)
    waste = 1.0 - pieces * panel[0] * panel[1] / (stock_sheets * stock[0] * stock[1])
    return Cut(sheet, pieces, per_stock, stock_sheets, waste)


def _fit(stock: Size, panel: Sequence[float]) -> int:
    return math.floor(stock[0] / panel[0] + 1e-9) * math.floor(stock[1] / panel[1] + 1e-9)


def overhangs(problem: Problem, panel: Size | None) -> list[Overhang]:
    """Overhang of each requirement whose field has a source and a victim: two to three times their distance."""
    result = []
    for requirement in problem.requirements:
        field = requirement.field
        if not isinstance(field, CoaxialLoops | CoaxialDipoles):
            continue
        radius = max(field.source_radius_m, field.victim_radius_m) if isinstance(field, CoaxialLoops) else 0.0
        low, high = 2.0 * field.gap_sum_m, 3.0 * field.gap_sum_m
        reach = None if panel is None else min(panel) / 2.0 - radius
        sides = 2.0 * (radius + low), 2.0 * (radius + high)
        result.append(Overhang(requirement.name, reach, (low, high), sides))
    return result
