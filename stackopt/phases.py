"""The phases of a search on one problem: explore, prove, confirm, and again until every stack is confirmed.

A round works on a grid of frequencies and a quadrature. Confirming judges the front on a grid ten times denser with a
finer quadrature; where a stack fails, its worst frequency joins the grid of the next round (or, if it is in the grid
already, the quadrature is refined). Fewer frequencies only relax the problem, so a proved front whose stacks all pass
is the complete front of the dense grid too.
"""

from __future__ import annotations

import time
from collections.abc import Callable, Mapping
from dataclasses import dataclass, replace
from typing import Any

import numpy as np
from numpy.typing import NDArray

from stackopt import demands, evaluate
from stackopt.archive import Archive
from stackopt.compiled import COST_UNIT, MARGIN_SLACK_DB, MASS_UNIT, THICKNESS_UNIT, CompiledProblem, compile_problem
from stackopt.explain import explain
from stackopt.explore import Explorer
from stackopt.front import Front, FrontRow
from stackopt.model import with_bonds
from stackopt.problem import Problem, Stack
from stackopt.proof import Collector, Prover, Tally, count_stacks, why_not_provable
from stackopt.scout import scout
from stackopt.status import Status, Watcher
from stackopt.stock import Stock

Integers = NDArray[np.int64]

SEARCH_ERROR_DB = 2e-3
"""Quadrature error of the first round, dB."""
DENSITY = 10
"""The confirmation's points for every point of the search grid."""
MAX_ROUNDS = 60


@dataclass(frozen=True)
class _Confirmed:
    """Stacks judged on the dense grid: the front's row of each, its sums, its margin, and where that is tightest."""

    rows: Integers
    stacks: list[Stack]
    totals: Integers
    margin_db: NDArray[np.float64]
    decisive_db: NDArray[np.float64]
    extra: list[dict[str, float | str]]
    frequency_hz: NDArray[np.float64]
    requirement: Integers


class Search:
    """A search and its state between steps.

    Parameters
    ----------
    problem : Problem
    seed : int, optional
        Instead of the problem's own.
    workers : int
        Threads for the proof.
    """

    def __init__(self, problem: Problem, seed: int | None = None, workers: int = 1) -> None:
        self.problem, self.workers = problem, workers
        self.seed = problem.search.random_seed if seed is None else seed
        self.obstacle = why_not_provable(problem)
        self.extra_hz: list[list[float]] = [[] for _ in problem.requirements]
        self.error_db = SEARCH_ERROR_DB
        self.round = 0
        self.exploring = True
        self.seconds = {"exploring": 0.0, "proving": 0.0, "confirming": 0.0}
        self.tally = Tally()
        self.prover: Prover | None = None
        self._begin_round()

    def run(
        self, watcher: Watcher = lambda _: None, deadline: float = np.inf, save: Callable[[], None] = lambda: None
    ) -> Front:
        """Run to the end or to the deadline (`time.monotonic`).

        ``save`` is called wherever the state may be saved. The watcher may raise to interrupt; the state then is that
        of the last call of ``save`` or later, and still good.
        """
        while True:
            self._explore(watcher, deadline, save)
            self._prove(watcher, deadline, save)
            watcher(Status("confirming", front_size=len(self.archive)))
            started = time.monotonic()
            confirmed = self._confirm()
            self.seconds["confirming"] += time.monotonic() - started
            failed = self._failures(confirmed)
            out_of_time = time.monotonic() >= deadline or self.round >= MAX_ROUNDS
            if not failed or out_of_time:
                return self._front(confirmed, bool(failed))
            self._refine(failed)
            save()

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
                "proof_done": self.prover.done,
                "proof_values": self.archive.values,
                "proof_codes": self.archive.codes,
            }
        text = {
            "seed": self.seed,
            "round": self.round,
            "extra_hz": self.extra_hz,
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
        self.explorer = Explorer(Stock(self.compiled), self.seed, len(arrays["populations"][0]), look=False)
        self.explorer.restore(arrays)
        self.prover = None
        if "proof_done" in arrays:
            prover = self._begin_proof()
            prover.done[:] = arrays["proof_done"]
            prover.archive.values, prover.archive.codes = arrays["proof_values"], arrays["proof_codes"]

    # Phases -----------------------------------------------------------------------------------------------------------

    @property
    def archive(self) -> Archive:
        """The best known: the proof's once it has begun, else the explorer's."""
        return self.explorer.archive if self.prover is None else self.prover.archive

    def _begin_round(self) -> None:
        self.compiled = compile_problem(self.problem, error_db=self.error_db, extra_hz=self.extra_hz)
        self.explorer = Explorer(Stock(self.compiled), self.seed, self.problem.search.population)
        self.prover = None

    def _refine(self, failed: list[tuple[int, float]]) -> None:
        """Begin the next round with the frequencies at which stacks failed; what was found so far is judged anew."""
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
        self.explorer.take(np.concatenate(old_genes))
        self.exploring = self.obstacle is not None  # a proof finds whatever is missing by itself

    def _explore(self, watcher: Watcher, deadline: float, save: Callable[[], None]) -> None:
        started, done_before = time.monotonic(), self.explorer.computed
        while self.exploring and time.monotonic() < deadline:
            begun = time.monotonic()
            self.explorer.step()
            self.seconds["exploring"] += time.monotonic() - begun
            self.exploring = not self.explorer.finished
            save()
            rate = (self.explorer.computed - done_before) / max(time.monotonic() - started, 1e-9)
            watcher(self._status("exploring", None, f"{rate:,.0f} stacks/s", None))
        if self.obstacle is None:
            self.exploring = False  # a proof finds whatever is missing by itself

    def _prove(self, watcher: Watcher, deadline: float, save: Callable[[], None]) -> None:
        if self.obstacle is not None:
            return
        prover = self.prover or self._begin_proof()
        watcher(self._status("preparing the proof (compiles once on a fresh machine)", None, "", None))
        prover.warm()
        started, judged_before, covered_before = time.monotonic(), prover.tally.judged, prover.covered

        def watch() -> None:
            elapsed = time.monotonic() - started
            if elapsed < 1.0:  # too early to tell a rate
                watcher(self._status("proving", prover.covered, "", None))
                return
            gained = prover.covered - covered_before
            left = elapsed * (1.0 - prover.covered) / gained if gained > 0.0 else None
            rate = (prover.tally.judged - judged_before) / elapsed
            save()
            watcher(self._status("proving", prover.covered, f"{rate:,.0f} stacks/s", left))

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
        return Status(phase, fraction, rate, len(self.archive), best, left)

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
        judged = self._judge_densely(evaluate.decode(self.compiled, collector.codes))
        rows = [self._row(judged, n) for n in np.flatnonzero(judged.decisive_db >= -MARGIN_SLACK_DB).tolist()]
        rows.sort(key=lambda row: [row.objective(name) for name in self.problem.search.objectives])
        whole = collector.complete and not collector.overflowed and front.complete
        share = f"{100.0 * within:g} %"
        words = f"{len(rows)} stacks are within {share} of the front; " + (
            "none is missing." if whole else "there may be more."
        )
        return replace(front, alternatives=tuple(rows), statement=f"{front.statement} {words}")

    # Confirmation -----------------------------------------------------------------------------------------------------

    def _confirm(self) -> _Confirmed:
        """Judge every stack that reaches the objectives of the front on the dense grid."""
        rows, stacks = self._candidates()
        return replace(self._judge_densely(stacks), rows=rows)

    def _judge_densely(self, stacks: list[Stack]) -> _Confirmed:
        none = np.empty(0, dtype=np.int64)
        if not stacks:
            return _Confirmed(none, [], none, np.empty(0), np.empty(0), [], np.empty(0), none)
        sheets = tuple(dict.fromkeys(sheet for stack in stacks for sheet in stack))
        dense = compile_problem(self.problem, sheets, DENSITY, self.error_db / 10.0, self.extra_hz)
        codes = evaluate.encode(dense, stacks)
        totals = evaluate.sums(dense, codes)
        margin, row = evaluate.margins(dense, codes, totals)
        decisive, row = demands.decisive_margins(dense, codes, margin, row, self._on_search_grid(dense))
        extra = demands.extra_columns(dense, codes)
        where, which = dense.rows.frequency_hz[row], dense.rows.requirement[row]
        return _Confirmed(none, stacks, totals, margin, decisive, extra, where, which)

    def _on_search_grid(self, dense: CompiledProblem) -> NDArray[np.bool_]:
        """Which rows of the dense grid are rows of the search grid too."""
        known = np.zeros(len(dense.rows.frequency_hz), dtype=bool)
        for number in range(len(self.problem.requirements)):
            grid = self.compiled.rows.frequency_hz[self.compiled.rows.requirement == number]
            here = dense.rows.requirement == number
            near = np.isclose(dense.rows.frequency_hz[here][:, None], grid, rtol=1e-9, atol=0.0)
            known[here] = np.any(near, axis=1)
        return known

    def _candidates(self) -> tuple[Integers, list[Stack]]:
        if self.obstacle is not None:
            stacks = self.explorer.stock.stacks(self.archive.codes)
            return np.arange(len(stacks)), stacks
        from stackopt.equals import equal_stacks

        rows, codes = equal_stacks(self.compiled, self.archive.values)
        return rows, evaluate.decode(self.compiled, codes)

    def _failures(self, confirmed: _Confirmed) -> list[tuple[int, float]]:
        """Worst (requirement, frequency) of every front row none of whose stacks passes."""
        failures = []
        for row in range(len(self.archive)):
            here = np.flatnonzero(confirmed.rows == row)
            best = here[np.argmax(confirmed.decisive_db[here])]
            if confirmed.decisive_db[best] < -MARGIN_SLACK_DB:
                failures.append((int(confirmed.requirement[best]), float(confirmed.frequency_hz[best])))
        return failures

    def _front(self, confirmed: _Confirmed, some_failed: bool) -> Front:
        """Front of the confirmed stacks; of equal ones a row shows that of largest margin, then fewest sheets."""
        ranked, equals = [], []
        lost_at_level = 0
        for number in range(len(self.archive)):
            here = np.flatnonzero((confirmed.rows == number) & (confirmed.decisive_db >= -MARGIN_SLACK_DB))
            holding = [n for n in here.tolist() if demands.holds_at_level(self.problem, confirmed.stacks[n])]
            lost_at_level += len(here) > 0 and not holding
            if not holding:
                continue
            best, *others = sorted(
                holding, key=lambda n: (-round(float(confirmed.decisive_db[n]), 6), len(confirmed.stacks[n]))
            )
            ranked.append(self._row(confirmed, best))
            equals += [(len(ranked), self._row(confirmed, n)) for n in others]
        complete = self.prover is not None and self.prover.complete and not some_failed and not lost_at_level
        statement = self._statement(len(ranked), complete, some_failed)
        if lost_at_level:
            statement += f" {lost_at_level} left out: they fail where the drive changes their permeability."
        return Front(self.problem, tuple(ranked), complete, statement, tuple(equals))

    def _row(self, confirmed: _Confirmed, n: int) -> FrontRow:
        stack = confirmed.stacks[n]
        mass, cost, thickness = confirmed.totals[n]
        priced = all(
            self.problem.materials[layer.material].price(layer.thickness_m) is not None
            for layer in with_bonds(self.problem, stack)
        )
        return FrontRow(
            stack=stack,
            mass_kg_per_m2=float(mass / MASS_UNIT),
            cost_per_m2=float(cost / COST_UNIT) if priced else float("nan"),
            thickness_m=float(thickness / THICKNESS_UNIT),
            margin_db=float(confirmed.margin_db[n]),
            tightest_hz=float(confirmed.frequency_hz[n]),
            requirement=self.problem.requirements[confirmed.requirement[n]].name,
            extra=confirmed.extra[n],
        )

    def _statement(self, size: int, complete: bool, some_failed: bool) -> str:
        number = count_stacks(len(self.compiled.sheets), self.compiled.rules.max_sheets)
        if complete and size == 0:
            return f"No stack meets the mask: proved over {number:.3g} stacks. {self._nearest()}"
        if complete:
            return (
                f"Complete: all {number:.3g} stacks of the sheets, rules aside, are settled; none is missing, "
                f"and every stack of the front holds on a grid {DENSITY} times denser."
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
