"""Exploring: islands of a multi-objective evolutionary search, one exact archive, and local moves that polish it.

The search of every island is pymoo's NSGA-II inside ask and tell, on integer genes (`stackopt.stock`). After each epoch
the archives of the islands are merged, the new members are polished by all their local moves until nothing improves,
and the islands start again from their populations and some members of the archive. An epoch depends on nothing but the
seed, its number, the populations and the archive, so that the state between epochs is a few plain arrays.
"""

from __future__ import annotations

from collections.abc import Callable, Iterable, Mapping
from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray
from pymoo.algorithms.moo.nsga2 import NSGA2
from pymoo.core.crossover import Crossover
from pymoo.core.duplicate import DuplicateElimination
from pymoo.core.mutation import Mutation
from pymoo.core.population import Population
from pymoo.core.problem import Problem as PymooProblem
from pymoo.core.termination import NoTermination

from stackopt.archive import Archive
from stackopt.scout import scout
from stackopt.stock import Judged, Stock

Integers = NDArray[np.int64]

ISLANDS = 4
GENERATIONS = 12
"""Generations of an epoch."""
QUIET_EPOCHS = 2
"""Exploring ends after so many epochs without a new member."""


MOST_PAIRS = 40_000
"""Moves of two positions tried from a stack."""


class StackProblem(PymooProblem):  # type: ignore[misc]
    """The stack problem as pymoo sees it: integer genes, objectives to minimise, one constraint (minus the margin).

    Feasible stacks go to the archive, which also screens: a candidate already covered needs no attenuation.
    """

    def __init__(self, stock: Stock, archive: Archive) -> None:
        self.stock, self.archive = stock, archive
        self.computed = 0
        positions = stock.positions
        upper = np.concatenate([np.full(positions, stock.choices), np.full(positions, stock.ranges_pm.max(initial=0))])
        objectives = len(stock.compiled.problem.search.objectives)
        super().__init__(
            n_var=2 * positions, n_obj=objectives, n_ieq_constr=1, xl=np.zeros(2 * positions), xu=upper, vtype=int
        )

    def _evaluate(self, x: Integers, out: dict[str, object], *_: object, **__: object) -> None:
        judged = record(self.stock, self.archive, np.asarray(x, dtype=np.int64))
        self.computed += judged.computed
        out["F"] = judged.values.astype(float)
        out["G"] = judged.violation[:, None]


def record(stock: Stock, archive: Archive, genes: Integers) -> Judged:
    """Judge genes and add the feasible ones to the archive."""
    judged = stock.judge(genes, archive.dominates)
    archive.add(judged.values[judged.feasible], genes[judged.feasible])
    return judged


class StackCrossover(Crossover):  # type: ignore[misc]
    """Two stacks exchange positions one by one (uniform), or one's source side is joined to the other's victim side."""

    def __init__(self, stock: Stock) -> None:
        super().__init__(2, 2, prob=0.9)
        self.stock = stock

    def _do(self, _: object, x: Integers, *__: object, random_state: np.random.Generator, **___: object) -> Integers:
        _, matings, genes = x.shape
        m = genes // 2
        swap = random_state.random((matings, m)) < 0.5
        splice = random_state.random(matings) < 0.5
        cut = random_state.integers(0, m + 1, matings)
        swap[splice] = np.arange(m) >= cut[splice, None]
        both = np.concatenate([swap, swap], axis=1)
        children = np.stack([np.where(both, x[1], x[0]), np.where(both, x[0], x[1])])
        return np.asarray([self.stock.tidy(child.astype(np.int64)) for child in children])


class StackMutation(Mutation):  # type: ignore[misc]
    """One random change of a stack: replace, gauge, material, insert, delete, swap; or a change of a free thickness."""

    def __init__(self, stock: Stock) -> None:
        super().__init__(prob=1.0)
        self.stock = stock

    def _do(self, _: object, x: Integers, *__: object, random_state: np.random.Generator, **___: object) -> Integers:
        return mutate(self.stock, np.asarray(x, dtype=np.int64), random_state)


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


class _SameGenes(DuplicateElimination):  # type: ignore[misc]
    """Finds equal genes exactly."""

    def _do(
        self, population: Population, other: Population | None, is_duplicate: NDArray[np.bool_]
    ) -> NDArray[np.bool_]:
        seen = set() if other is None else {genes.tobytes() for genes in other.get("X").astype(np.int64)}
        for number, genes in enumerate(population.get("X").astype(np.int64)):
            key = genes.tobytes()
            is_duplicate[number] |= key in seen
            if other is None:
                seen.add(key)
        return is_duplicate


@dataclass(frozen=True)
class IslandTask:
    """Everything an epoch of one island depends on."""

    stock: Stock
    population: Integers
    archive: Archive
    seed: tuple[int, ...]


@dataclass(frozen=True)
class IslandResult:
    """What an epoch of one island leaves."""

    population: Integers
    archive: Archive
    computed: int


def run_island(task: IslandTask) -> IslandResult:
    """Run one epoch of an island; a pure function of its task."""
    archive = task.archive.copy()
    problem = StackProblem(task.stock, archive)
    algorithm = NSGA2(
        pop_size=len(task.population),
        sampling=task.population,
        crossover=StackCrossover(task.stock),
        mutation=StackMutation(task.stock),
        eliminate_duplicates=_SameGenes(),
    )
    seed = int(np.random.SeedSequence(task.seed).generate_state(1)[0])
    algorithm.setup(problem, termination=NoTermination(), seed=seed, verbose=False)
    for _ in range(GENERATIONS):
        candidates = algorithm.ask()
        if candidates is None:
            break  # a problem so small that every stack has been seen
        algorithm.evaluator.eval(problem, candidates)
        algorithm.tell(infills=candidates)
    # Equal stacks were dropped; the size of a population stays.
    population = np.resize(algorithm.pop.get("X").astype(np.int64), task.population.shape)
    return IslandResult(population, archive, problem.computed)


Mapper = Callable[[Callable[[IslandTask], IslandResult], Iterable[IslandTask]], Iterable[IslandResult]]
"""Runs a function over tasks and returns the results in order, for example the built-in map."""


class Explorer:
    """The exploring phase, one epoch at a time.

    Parameters
    ----------
    stock : Stock
    seed : int
        The search's seed; the result depends on it and on the problem only.
    population : int
        Stacks on each island.
    look : bool
        Whether to start from a quick look for the largest margin.
    """

    def __init__(self, stock: Stock, seed: int, population: int, look: bool = True) -> None:
        self.stock, self.seed = stock, seed
        self.archive = Archive(len(stock.compiled.problem.search.objectives), 2 * stock.positions)
        self.computed = 0
        self.epoch = 0
        self.quiet = 0
        self._polished: set[bytes] = set()
        self._polished_pairs: set[bytes] = set()
        random = np.random.default_rng((seed, 0))
        self.populations = [random_genes(stock, population, random) for _ in range(ISLANDS)]
        if look:
            self._start_from_scout()

    @property
    def finished(self) -> bool:
        """Whether the last epochs brought nothing new."""
        return self.quiet >= QUIET_EPOCHS

    def step(self, mapper: Mapper = map) -> None:
        """Run one epoch of every island, merge and polish."""
        tasks = [
            IslandTask(self.stock, self._migrated(island), self.archive, (self.seed, self.epoch + 1, island))
            for island in range(len(self.populations))
        ]
        before = self.archive.values
        # All islands first: none may see what another brings to the archive.
        for island, result in enumerate(list(mapper(run_island, tasks))):
            self.populations[island] = result.population
            self.archive.add(result.archive.values, result.archive.codes)
            self.computed += result.computed
        self.polish()
        self.epoch += 1
        self.quiet = self.quiet + 1 if np.array_equal(before, self.archive.values) else 0

    def polish(self) -> None:
        """Try every local move of every archive member, then moves of two positions at once, until nothing improves."""
        kinds = ((neighbours, self._polished), (self._pairs, self._polished_pairs))
        while work := next(((moves, tried, fresh) for moves, tried in kinds if (fresh := self._untried(tried))), None):
            moves, tried, fresh = work
            for genes in fresh:
                tried.add(genes.tobytes())
                self.computed += record(self.stock, self.archive, moves(self.stock, genes)).computed

    def _untried(self, tried: set[bytes]) -> list[Integers]:
        return [genes for genes in self.archive.codes if genes.tobytes() not in tried]

    def _pairs(self, stock: Stock, genes: Integers) -> Integers:
        return pair_neighbours(stock, genes, np.random.default_rng((self.seed, *genes.tolist())))

    def take(self, genes: Integers) -> None:
        """Judge stacks known from elsewhere, keep the feasible ones, and polish them."""
        self.computed += record(self.stock, self.archive, self.stock.tidy(genes)).computed
        self.polish()

    def state(self) -> dict[str, NDArray[np.int64]]:
        """Return the state between epochs as plain arrays."""
        return {
            "values": self.archive.values,
            "codes": self.archive.codes,
            "populations": np.stack(self.populations),
            "counters": np.array([self.seed, self.epoch, self.quiet, self.computed], dtype=np.int64),
        }

    def restore(self, state: Mapping[str, NDArray[np.int64]]) -> None:
        """Go on from a state of the same problem."""
        self.archive.values, self.archive.codes = state["values"], state["codes"]
        self.populations = list(state["populations"])
        self.seed, self.epoch, self.quiet, self.computed = (int(value) for value in state["counters"])
        # The members of the first look are not polished before the first epoch.
        self._polished = {genes.tobytes() for genes in self.archive.codes} if self.epoch else set()
        self._polished_pairs = set(self._polished)

    def _migrated(self, island: int) -> Integers:
        """Population of an island, a tenth of it replaced by members of the archive."""
        population = self.populations[island].copy()
        random = np.random.default_rng((self.seed, self.epoch + 1, island, 1))
        guests = min(len(self.archive), len(population) // 10)
        if guests:
            chosen = random.choice(len(self.archive), guests, replace=False)
            population[random.choice(len(population), guests, replace=False)] = self.archive.codes[chosen]
        return population

    def _start_from_scout(self) -> None:
        """Put the stack of the largest margin, and all it can lose and still be feasible, into the archive."""
        if self.stock.gauges == 0:
            return
        found = scout(self.stock.compiled)
        genes = np.concatenate([found.codes, np.zeros_like(found.codes)])
        record(self.stock, self.archive, self.stock.tidy(genes[None]))
        for population in self.populations:
            population[0] = genes


def random_genes(stock: Stock, count: int, random: np.random.Generator) -> Integers:
    """Random stacks of one sheet up to the largest number."""
    m = stock.positions
    genes = np.zeros((count, 2 * m), dtype=np.int64)
    sheets = random.integers(1, m + 1, count)
    for row, used in zip(genes, sheets, strict=True):
        for at in range(int(used)):
            _put(stock, row, at, int(random.integers(1, stock.choices + 1)), random)
    return stock.tidy(genes)


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


_STEPS = np.array([0.5, 0.7, 0.85, 0.93, 0.97, 0.99, 0.998, 1.002, 1.01, 1.03, 1.07, 1.15])


def _typical_thickness(stock: Stock, genes: Integers) -> Integers:
    """Thickness to try each code from 0 with: that of the stack's free sheets, or the middle of the range."""
    own = genes[stock.positions :]
    middle = np.sqrt(stock.ranges_pm[:, 0].astype(float) * stock.ranges_pm[:, 1]).astype(np.int64)
    typical = int(np.median(own[own > 0])) if np.any(own > 0) else 0
    return np.where(middle > 0, typical or middle, 0)
