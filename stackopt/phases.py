"""The phases of a search on one problem: explore, prove, confirm, and again until every stack is confirmed.

A round works on a grid of frequencies and a quadrature. Confirming judges the front on a grid ten times denser with a
finer quadrature; where a stack fails, its worst frequency joins the grid of the next round (or, if it is in the grid
already, the quadrature is refined). Fewer frequencies only relax the problem, so a proved front whose stacks all pass
is the complete front of the dense grid too.
"""

from __future__ import annotations

import time
from collections.abc import Callable, Mapping
from dataclasses import replace
from typing import Any

import numpy as np
from numpy.typing import NDArray

from stackopt import confirm, demands, evaluate
from stackopt.archive import Archive
from stackopt.compiled import COST_UNIT, MASS_UNIT, THICKNESS_UNIT, CompiledProblem, compile_problem
from stackopt.explain import explain
from stackopt.explore import Explorer
from stackopt.front import Front
from stackopt.problem import Problem, Stack
from stackopt.proof import Collector, Prover, Tally, count_stacks, why_not_provable
from stackopt.scout import scout
from stackopt.status import Status, Watcher
from stackopt.stock import Stock
from stackopt.workers import Serial, Workers

Integers = NDArray[np.int64]

SEARCH_ERROR_DB = 2e-3
"""Quadrature error of the first round, dB."""
MAX_ROUNDS = 60


class Search:
    """A search and its state between steps.

    Parameters
    ----------
    problem : Problem
    seed : int, optional
        Instead of the problem's own.
    workers : Workers, optional
        Who explores and proves; this process when left out. The front does not depend on it.
    """

    def __init__(self, problem: Problem, seed: int | None = None, workers: Workers | None = None) -> None:
        self.problem = problem
        self.workers = Serial() if workers is None else workers
        self.seed = problem.search.random_seed if seed is None else seed
        self.obstacle = why_not_provable(problem)
        self.extra_hz: list[list[float]] = [[] for _ in problem.requirements]
        self.error_db = SEARCH_ERROR_DB
        self.round = 0
        self.exploring = True
        self.seconds = {"exploring": 0.0, "proving": 0.0, "confirming": 0.0}
        self.tally = Tally()
        self.prover: Prover | None = None
        self.margins_db: dict[str, float] = {}
        """Largest margin for each requirement on the front that `run` returned, on the dense grid, dB."""
        self._margins: tuple[Integers | None, dict[str, float]] = (None, {})
        self._begin_round()

    def run(
        self, watcher: Watcher = lambda _: None, deadline: float = np.inf, save: Callable[[], None] = lambda: None
    ) -> Front:
        """Run to the end or to the deadline (`time.monotonic`).

        ``save`` is called wherever the state may be saved. The watcher is called several times a second and may raise
        to interrupt; the state then is that of the last call of ``save`` or later, and still good.
        """
        while True:
            self._explore(watcher, deadline, save)
            self._prove(watcher, deadline, save)
            watcher(Status("confirming", front_size=len(self.archive)))
            started = time.monotonic()
            numbers, stacks = self._candidates()
            judged = self._judge(stacks)
            self.seconds["confirming"] += time.monotonic() - started
            failed = self._failures(numbers, judged)
            out_of_time = time.monotonic() >= deadline or self.round >= MAX_ROUNDS
            if not failed or out_of_time:
                return self._front(numbers, judged, bool(failed))
            self._refine(failed, lambda: watcher(Status("looking closer", front_size=len(self.archive))))
            save()

    def front_so_far(self) -> Front:
        """Those of the best stacks known so far that hold on the dense grid, never called complete."""
        judged = self._judge([stack for stack in self._known_stacks() if demands.holds_at_level(self.problem, stack)])
        rows = tuple(judged.row(n) for n in np.flatnonzero(judged.holds).tolist())
        return Front(self.problem, rows, False, "So far: the search goes on, and nothing is proved.")

    def start_from(self, stacks: list[Stack]) -> None:
        """Skip exploring and prove from known stacks; those that are no stacks of the problem are passed over."""
        known = set(self.compiled.sheets)
        usable = [stack for stack in stacks if set(stack) <= known and len(stack) <= self.compiled.rules.max_sheets]
        if usable:
            codes = evaluate.encode(self.compiled, usable)
            self.explorer.take(np.concatenate([codes, np.zeros_like(codes)], axis=1))
        self.exploring = False

    def proof_record(self) -> dict[str, Any] | None:
        """How the front was proved, for the run's record; None where nothing was."""
        if self.prover is None:
            return None
        return {
            "stacks": count_stacks(len(self.compiled.sheets), self.compiled.rules.max_sheets),
            "share_settled": self.prover.covered,
            "mirror_images_skipped": self.prover.tables.mirror,
            "prefixes_opened": self.tally.opened,
            "stacks_evaluated": self.tally.judged,
            "seconds": round(self.tally.seconds, 3),
        }

    # State ------------------------------------------------------------------------------------------------------------

    def state(self) -> tuple[dict[str, NDArray[Any]], dict[str, Any]]:
        """Everything needed to go on, as arrays and JSON values."""
        arrays = dict(self.explorer.state())
        if self.prover is not None:
            arrays |= {
                "proof_pending": self.prover.unopened,
                "proof_values": self.archive.values,
                "proof_codes": self.archive.codes,
            }
        text = {
            "seed": self.seed,
            "round": self.round,
            "extra_hz": [list(frequencies) for frequencies in self.extra_hz],
            "error_db": self.error_db,
            "exploring": self.exploring,
            "seconds": self.seconds,
            "tally": vars(self.tally),
        }
        return arrays, text

    def restore(self, arrays: Mapping[str, NDArray[Any]], text: Mapping[str, Any]) -> None:
        """Go on from a state of the same problem."""
        self.seed, self.round, self.error_db = text["seed"], text["round"], text["error_db"]
        self.extra_hz, self.exploring = text["extra_hz"], text["exploring"]
        self.seconds, self.tally = dict(text["seconds"]), Tally(**text["tally"])
        self.compiled = compile_problem(self.problem, error_db=self.error_db, extra_hz=self.extra_hz)
        self.explorer = self._new_explorer(len(arrays["populations"][0]), look=False)
        self.explorer.restore(arrays)
        self.prover = None
        if "proof_pending" in arrays:
            prover = self._begin_proof()
            prover.go_on_from(arrays["proof_pending"])
            prover.archive.values, prover.archive.codes = arrays["proof_values"], arrays["proof_codes"]

    # Phases -----------------------------------------------------------------------------------------------------------

    @property
    def archive(self) -> Archive:
        """The best known: the proof's once it has begun, else the explorer's."""
        return self.explorer.archive if self.prover is None else self.prover.archive

    def _begin_round(self) -> None:
        self.compiled = compile_problem(self.problem, error_db=self.error_db, extra_hz=self.extra_hz)
        self.explorer = self._new_explorer(self.problem.search.population, look=True)
        self.prover = None

    def _new_explorer(self, population: int, look: bool) -> Explorer:
        return Explorer(Stock(self.compiled), self.seed, population, look, self.workers)

    def _refine(self, failed: list[tuple[int, float]], watch: Callable[[], None]) -> None:
        """Begin the next round with the frequencies at which stacks failed; what was found so far is judged anew."""
        arrays, text = self.state()
        try:
            self._begin_finer_round(failed, watch)
        except BaseException:
            self.restore(arrays, text)
            raise

    def _begin_finer_round(self, failed: list[tuple[int, float]], watch: Callable[[], None]) -> None:
        known = [
            set(self.compiled.rows.frequency_hz[self.compiled.rows.requirement == n]) for n in range(len(self.extra_hz))
        ]
        fresh = {(n, hz) for n, hz in failed if not any(np.isclose(hz, old, rtol=1e-9) for old in known[n])}
        for number, frequency in sorted(fresh):
            self.extra_hz[number].append(frequency)
        if not fresh:
            self.error_db /= 10.0
        old_genes = [self.explorer.archive.codes]
        if self.prover is not None:
            codes = self.prover.archive.codes
            old_genes.append(np.concatenate([codes, np.zeros_like(codes)], axis=1))
        populations = self.explorer.populations
        computed, epoch = self.explorer.computed, self.explorer.epoch
        self.round += 1
        self._begin_round()
        self.explorer.populations = populations
        self.explorer.computed, self.explorer.epoch = computed, epoch
        self.explorer.take(np.concatenate(old_genes), watch)
        self.exploring = self.obstacle is not None  # a proof finds whatever is missing by itself

    def _explore(self, watcher: Watcher, deadline: float, save: Callable[[], None]) -> None:
        started, done_before = time.monotonic(), self.explorer.computed
        rate = ""

        def watch() -> None:
            watcher(self._status("exploring", None, rate or self.workers.words, None))

        while self.exploring and time.monotonic() < deadline:
            begun = time.monotonic()
            self.explorer.advance(watch)
            self.seconds["exploring"] += time.monotonic() - begun
            self.exploring = not self.explorer.finished
            save()
            rate = self._rate(self.explorer.computed - done_before, time.monotonic() - started)
            watch()
        if self.obstacle is None:
            self.exploring = False  # a proof finds whatever is missing by itself

    def _prove(self, watcher: Watcher, deadline: float, save: Callable[[], None]) -> None:
        if self.obstacle is not None:
            return
        prover = self.prover or self._begin_proof()
        watcher(self._status("preparing the proof (compiles once on a fresh machine)", None, "", None))
        started, judged_before, covered_before = time.monotonic(), prover.tally.judged, prover.covered

        def watch() -> None:
            elapsed = time.monotonic() - started
            if elapsed < 1.0:  # too early to tell a rate
                watcher(self._status("proving", prover.covered, "", None))
                return
            gained = prover.covered - covered_before
            left = elapsed * (1.0 - prover.covered) / gained if gained > 0.0 else None
            save()
            rate = self._rate(prover.tally.judged - judged_before, elapsed)
            watcher(self._status("proving", prover.covered, rate, left))

        try:
            prover.run(self.workers, deadline, watch)
        finally:
            self.seconds["proving"] += time.monotonic() - started

    def _begin_proof(self) -> Prover:
        positions = self.compiled.rules.max_sheets
        known = Archive(len(self.problem.search.objectives), positions)
        known.add(self.explorer.archive.values, self.explorer.archive.codes[:, :positions])
        self.prover = Prover(self.compiled, known, self.tally)
        return self.prover

    def _status(self, phase: str, fraction: float | None, rate: str, left: float | None) -> Status:
        best = {}
        if len(self.archive):
            for column, name in enumerate(self.problem.search.objectives):
                best[name] = _objective_text(name, int(self.archive.values[:, column].min()), self.problem.currency)
        proved = None if self.prover is None else self.prover.covered
        return Status(phase, fraction, rate, len(self.archive), best, left, self._margins_so_far(), proved)

    def _rate(self, judged: int, seconds: float) -> str:
        words = f"{judged / max(seconds, 1e-9):,.0f} stacks/s"
        return f"{words}, {self.workers.words}" if self.workers.words else words

    def _margins_so_far(self) -> dict[str, float]:
        """Largest margin for each requirement among the best stacks, or of the nearest one, dB."""
        values, margins = self._margins
        if values is not self.archive.values:
            compiled, codes = self._tabulated_so_far()
            over = evaluate.attenuation_rows(compiled, codes) - compiled.rows.required_db
            count = len(self.problem.requirements)
            each = [np.min(over[:, compiled.rows.requirement == n], axis=1) for n in range(count)]
            margins = self._by_requirement(np.stack(each, axis=1))
            self._margins = self.archive.values, margins
        return margins

    def _by_requirement(self, each_db: NDArray[np.float64]) -> dict[str, float]:
        """Largest margin for each requirement, of margins of shape (stack, requirement)."""
        names = [requirement.name for requirement in self.problem.requirements]
        return dict(zip(names, each_db.max(axis=0).tolist(), strict=True)) if len(each_db) else {}

    def _tabulated_so_far(self) -> tuple[CompiledProblem, Integers]:
        """Return the best stacks as codes of a compiled problem; while there are none, the one nearest to the mask."""
        codes = self.archive.codes
        if len(codes) == 0 and self.compiled.sheets:
            codes = scout(self.compiled).codes[None]
        elif self.prover is None:
            return self.explorer.stock.tabulated(codes) if len(codes) else (self.compiled, codes)
        return self.compiled, codes

    def alternatives(self, front: Front, within: float, watcher: Watcher, deadline: float = np.inf) -> Front:
        """Add to a complete front every feasible stack that no member beats by more than a factor in all objectives.

        Parameters
        ----------
        front : Front
            The result of `run`.
        within : float
            The factor less one: 0.05 for 5 %.
        """
        if self.obstacle is not None or not len(front):
            return replace(front, statement=f"{front.statement} No alternatives without a proved front.")
        collector = Collector(self.compiled, self.archive.values, within)
        collector.run(
            self.workers,
            deadline,
            lambda: watcher(self._status("collecting alternatives", collector.covered, "", None)),
        )
        judged = self._judge(evaluate.decode(self.compiled, collector.codes))
        rows = [judged.row(n) for n in np.flatnonzero(judged.holds).tolist()]
        rows.sort(key=lambda row: [row.objective(name) for name in self.problem.search.objectives])
        whole = collector.complete and not collector.overflowed and front.complete
        share = f"{100.0 * within:g} %"
        words = f"{len(rows)} stacks are within {share} of the front; " + (
            "none is missing." if whole else "there may be more."
        )
        return replace(front, alternatives=tuple(rows), statement=f"{front.statement} {words}")

    # Confirmation -----------------------------------------------------------------------------------------------------

    def _judge(self, stacks: list[Stack]) -> confirm.Judged:
        return confirm.judge(self.compiled, stacks, self.error_db, self.extra_hz)

    def _known_stacks(self) -> list[Stack]:
        if self.prover is None:
            return self.explorer.stock.stacks(self.archive.codes)
        return evaluate.decode(self.compiled, self.archive.codes)

    def _candidates(self) -> tuple[Integers, list[Stack]]:
        if self.obstacle is not None:
            stacks = self.explorer.stock.stacks(self.archive.codes)
            return np.arange(len(stacks)), stacks
        from stackopt.equals import equal_stacks

        rows, codes = equal_stacks(self.compiled, self.archive.values)
        return rows, evaluate.decode(self.compiled, codes)

    def _failures(self, numbers: Integers, judged: confirm.Judged) -> list[tuple[int, float]]:
        """Worst (requirement, frequency) of every front row none of whose stacks passes; their rows are ``numbers``."""
        failures = []
        for number in range(len(self.archive)):
            here = np.flatnonzero(numbers == number)
            best = here[np.argmax(judged.decisive_db[here])]
            if not judged.holds[best]:
                failures.append((int(judged.requirement[best]), float(judged.frequency_hz[best])))
        return failures

    def _front(self, numbers: Integers, judged: confirm.Judged, some_failed: bool) -> Front:
        """Front of the confirmed stacks; of equal ones a row shows that of largest margin, then fewest sheets."""
        ranked, equals, shown = [], [], []
        lost_at_level = 0
        for number in range(len(self.archive)):
            here = np.flatnonzero((numbers == number) & judged.holds)
            holding = [n for n in here.tolist() if demands.holds_at_level(self.problem, judged.stacks[n])]
            lost_at_level += len(here) > 0 and not holding
            if not holding:
                continue
            best, *others = sorted(
                holding, key=lambda n: (-round(float(judged.decisive_db[n]), 6), len(judged.stacks[n]))
            )
            ranked.append(judged.row(best))
            shown.append(best)
            equals += [(len(ranked), judged.row(n)) for n in others]
        self.margins_db = self._by_requirement(judged.each_db[shown])
        complete = self.prover is not None and self.prover.complete and not some_failed and not lost_at_level
        statement = self._statement(len(ranked), complete, some_failed)
        if lost_at_level:
            statement += f" {lost_at_level} left out: they fail where the drive changes their permeability."
        return Front(self.problem, tuple(ranked), complete, statement, tuple(equals))

    def _statement(self, size: int, complete: bool, some_failed: bool) -> str:
        number = count_stacks(len(self.compiled.sheets), self.compiled.rules.max_sheets)
        if complete and size == 0:
            return f"No stack meets the mask: proved over {number:.3g} stacks. {self._nearest()}"
        if complete:
            return (
                f"Complete: all {number:.3g} stacks of the sheets, rules aside, are settled; none is missing, "
                f"and every stack of the front holds on a grid {confirm.DENSITY} times denser."
            )
        if self.obstacle is not None:
            settled = f"Explored, not proved: {self.obstacle}."
        else:
            covered = 0.0 if self.prover is None else self.prover.covered
            settled = f"Not complete: the proof has settled {100.0 * covered:.1f} % of the stacks so far."
        if some_failed:
            settled += " Stacks that failed on the dense grid were left out."
        return settled if size else f"No stack found that meets the mask. {settled} {self._nearest()}"

    def _nearest(self) -> str:
        if not self.compiled.sheets:
            return ""
        return explain(self.compiled, scout(self.compiled))


def _objective_text(name: str, value: int, currency: str) -> str:
    if name == "mass":
        return f"{value / MASS_UNIT:.4g} kg/m^2"
    if name == "cost":
        return f"{value / COST_UNIT:.4g} {currency}/m^2"
    if name == "thickness":
        return f"{value / THICKNESS_UNIT * 1e3:.4g} mm"
    if name == "heat":
        return f"{value / evaluate.HEAT_UNIT:.4g} W"
    if name == "margin":
        return f"{-value / evaluate.MARGIN_UNIT:.1f} dB"
    return str(value)
