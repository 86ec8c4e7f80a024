"""Exploring: islands of a multi-objective evolutionary search, one exact archive, and local moves that polish it.

The search of every island is pymoo's NSGA-II inside ask and tell, on integer genes (`stackopt.stock`). After each epoch
the archives of the islands are merged, the new members are polished by all their local moves until nothing improves,
and the islands start again from their populations and some members of the archive. An epoch depends on nothing but the
seed, its number, the populations and the archive, so that the state is a few plain arrays, and that it does not matter
how many workers share the islands and the moves.
"""

from __future__ import annotations

from collections.abc import Callable, Mapping
from dataclasses import dataclass
from typing import Any

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
from stackopt.moves import mutate, neighbours, pair_neighbours, random_genes
from stackopt.scout import scout
from stackopt.stock import Judged, Stock
from stackopt.workers import Serial, Workers, gather

Integers = NDArray[np.int64]

ISLANDS = 4
GENERATIONS = 12
"""Generations of an epoch."""
QUIET_EPOCHS = 2
"""Exploring ends after so many epochs without a new member."""
_TOGETHER = 2
"""Stacks whose moves are one call."""
_AT_A_TIME = 64
"""Stacks polished before what is found is merged, and may be saved."""


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
class Found:
    """What a call brings: the archive that it ends with, how many attenuations it needed, and an island's population.

    The population of other calls is empty.
    """

    archive: Archive
    computed: int
    population: Integers


def run_island(stock: Stock, population: Integers, known: Archive, seed: tuple[int, ...]) -> Found:
    """Run one epoch of an island; a pure function."""
    archive = known.copy()
    problem = StackProblem(stock, archive)
    algorithm = NSGA2(
        pop_size=len(population),
        sampling=population,
        crossover=StackCrossover(stock),
        mutation=StackMutation(stock),
        eliminate_duplicates=_SameGenes(),
    )
    number = int(np.random.SeedSequence(seed).generate_state(1)[0])
    algorithm.setup(problem, termination=NoTermination(), seed=number, verbose=False)
    for _ in range(GENERATIONS):
        candidates = algorithm.ask()
        if candidates is None:
            break  # a problem so small that every stack has been seen
        algorithm.evaluator.eval(problem, candidates)
        algorithm.tell(infills=candidates)
    # Equal stacks were dropped; the size of a population stays.
    left = np.resize(algorithm.pop.get("X").astype(np.int64), population.shape)
    return Found(archive, problem.computed, left)


def try_moves(stock: Stock, stacks: Integers, known: Archive, seed: int | None) -> Found:
    """Try all local moves of some stacks, or with a seed the moves of two positions; a pure function."""
    archive = known.copy()
    computed = 0
    for genes in stacks:
        if seed is None:
            moved = neighbours(stock, genes)
        else:
            moved = pair_neighbours(stock, genes, np.random.default_rng((seed, *genes.tolist())))
        computed += record(stock, archive, moved).computed
    return Found(archive, computed, stacks[:0])


class Explorer:
    """The exploring phase, one epoch at a time, each in parts.

    Parameters
    ----------
    stock : Stock
    seed : int
        The search's seed; the result depends on it and on the problem only.
    population : int
        Stacks on each island.
    look : bool
        Whether to start from a quick look for the largest margin.
    workers : Workers, optional
        Who runs the islands and tries the moves; this process when left out. The result does not depend on it.
    """

    def __init__(
        self, stock: Stock, seed: int, population: int, look: bool = True, workers: Workers | None = None
    ) -> None:
        self.stock, self.seed = stock, seed
        self._workers = Serial() if workers is None else workers
        self._published: Any = None
        self.archive = Archive(len(stock.compiled.problem.search.objectives), 2 * stock.positions)
        self.computed = 0
        self.epoch = 0
        self.quiet = 0
        self.polishing = False
        """Whether an epoch has begun and its polish is not done."""
        self._gained = False  # whether the epoch has brought anything new
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

    def step(self, watch: Callable[[], None] = lambda: None) -> None:
        """Go on to the end of the epoch; see `advance`."""
        self.advance(watch)
        while self.polishing:
            self.advance(watch)

    def advance(self, watch: Callable[[], None] = lambda: None) -> None:
        """Run the islands of an epoch, or else a part of its polish; the epoch ends when nothing is left to polish.

        ``watch`` is called now and then; if it raises, the state is that before.
        """
        before = self.state()
        try:
            if self.polishing:
                self._polish_some(watch)
            else:
                self._run_islands(watch)
                self.polishing = True
            if self._next_to_polish() is None:
                self._end_epoch()
        except BaseException:
            self.restore(before)
            raise

    def _run_islands(self, watch: Callable[[], None]) -> None:
        islands = [
            (self._migrated(island), self.archive, (self.seed, self.epoch + 1, island))
            for island in range(len(self.populations))
        ]
        found = self._gather(run_island, islands, watch)
        self.populations = [result.population for result in found]

    def _end_epoch(self) -> None:
        self.epoch += 1
        self.quiet = 0 if self._gained else self.quiet + 1
        self.polishing = self._gained = False

    def polish(self, watch: Callable[[], None] = lambda: None) -> None:
        """Try every local move of every archive member, then moves of two positions at once, until nothing improves."""
        while self._next_to_polish() is not None:
            self._polish_some(watch)

    def _polish_some(self, watch: Callable[[], None]) -> None:
        work = self._next_to_polish()
        if work is None:
            return
        seed, tried, fresh = work
        parts = [fresh[start : start + _TOGETHER] for start in range(0, len(fresh), _TOGETHER)]
        self._gather(try_moves, [(part, self.archive, seed) for part in parts], watch)
        tried.update(genes.tobytes() for genes in fresh)

    def _next_to_polish(self) -> tuple[int | None, set[bytes], Integers] | None:
        """Return some members whose moves have not been tried, which moves, and where to note that they have been."""
        for seed, tried in ((None, self._polished), (self.seed, self._polished_pairs)):
            fresh = self.archive.codes[~self._are_in(tried)]
            if len(fresh):
                return seed, tried, fresh[:_AT_A_TIME]
        return None

    def _are_in(self, tried: set[bytes]) -> NDArray[np.bool_]:
        return np.array([genes.tobytes() in tried for genes in self.archive.codes], dtype=bool)

    def _gather(
        self, function: Callable[..., Found], arguments: list[tuple[Any, ...]], watch: Callable[[], None]
    ) -> list[Found]:
        """Run a function for every tuple of arguments, and take what is found once all is done."""
        if self._published is None:
            self._published = self._workers.publish(self.stock)
        # All first: none may see what another brings to the archive.
        found = gather(self._workers, function, self._published, arguments, watch)
        for result in found:
            self._gained |= self.archive.add(result.archive.values, result.archive.codes) > 0
            self.computed += result.computed
        return found

    def take(self, genes: Integers, watch: Callable[[], None] = lambda: None) -> None:
        """Judge stacks known from elsewhere, keep the feasible ones, and polish them."""
        self.computed += record(self.stock, self.archive, self.stock.tidy(genes)).computed
        self.polish(watch)

    def state(self) -> dict[str, NDArray[np.int64]]:
        """Return the state as plain arrays."""
        counters = [self.seed, self.epoch, self.quiet, self.computed, self.polishing, self._gained]
        polished = [self._are_in(self._polished), self._are_in(self._polished_pairs)]
        return {
            "values": self.archive.values,
            "codes": self.archive.codes,
            "polished": np.stack(polished, axis=1).astype(np.int64),
            "populations": np.stack(self.populations),
            "counters": np.array(counters, dtype=np.int64),
        }

    def restore(self, state: Mapping[str, NDArray[np.int64]]) -> None:
        """Go on from a state of the same problem."""
        self.archive.values, self.archive.codes = state["values"], state["codes"]
        self.populations = list(state["populations"])
        *counters, polishing, gained = (int(value) for value in state["counters"])
        self.seed, self.epoch, self.quiet, self.computed = counters
        self.polishing, self._gained = bool(polishing), bool(gained)
        # A stack that left the archive never comes back, so that the members' flags tell all.
        self._polished, self._polished_pairs = (
            {genes.tobytes() for genes in self.archive.codes[flags > 0]} for flags in state["polished"].T
        )

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
