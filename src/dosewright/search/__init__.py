"""Least-cost trains: the lattice proposes, the exact model decides.

Only this package imports Pyomo and HiGHS. The loop: mixed-integer programs over anchors
(``lattice``) propose structures for every number of stages; each is polished on the exact model
(``polish``) and then forbidden, so that the next proposal differs; the best trains found are varied
one choice at a time until no variation is better; the lattice is re-anchored on the winner to say
how far the linear model and the exact one agree.
"""

from __future__ import annotations

import os
import time
from collections.abc import Callable, Iterable, Iterator, Sequence
from concurrent.futures import ThreadPoolExecutor
from dataclasses import dataclass, field
from typing import Any, TypeVar

import numpy as np

from dosewright.design import Design, SearchRecord
from dosewright.errors import Fault, InputError
from dosewright.flowsheet import Flowsheet
from dosewright.plant import PlantModel, Run, lead_coordinate
from dosewright.search.anchors import Anchors, anchors_of_run, feed_anchors, thinned
from dosewright.search.lattice import Lattice, Proposal
from dosewright.search.polish import (
    Polished,
    Step,
    Structure,
    TrainProblem,
    ahead,
    polish_structure,
)
from dosewright.trial import account, decisions_of, evaluate_on

Progress = Callable[[str], None]
T = TypeVar("T")

LATTICE_ANCHORS = {1: 160, 2: 160, 3: 60}  # by number of stages: more stages, coarser anchors
LATTICE_SECONDS = 6.0  # for one proposal; the incumbent is as good a suggestion as the optimum
PROPOSALS = {1: 2, 2: 5}  # by number of stages
PROPOSALS_LONGER = 2
SEEDS = 3  # trains from which the search descends, of each round of proposals
SECOND_LOOKS = 6  # neighbours polished again when none was better at a glance
BATCH = max(2, os.cpu_count() or 1)  # neighbours polished side by side
LATTICE_SHARE = 0.4  # of the time, for the short trains' programs
SHORT = 2  # stages
RESERVE_S = 8.0  # kept for the last polish and for re-anchoring
IDLE_DOSE_KG_PER_M3 = 1e-5  # below which a stage does nothing and is struck out
WORTH_MOVING = 1e-4  # relative gain for which the search moves to a neighbour


@dataclass(eq=False)
class _Search:
    """The state of one search: what was polished, what is best."""

    model: PlantModel
    anchors: Anchors
    deadline: float
    say: Progress
    seed: int
    done: dict[Structure, Polished] = field(default_factory=dict)
    best: Polished | None = None
    proposals: int = 0
    lattice_value: float = float("nan")
    evaluations: int = 0
    cut_short: bool = False
    pool: ThreadPoolExecutor = field(default_factory=lambda: ThreadPoolExecutor(BATCH))

    @property
    def time_left_s(self) -> float:
        return self.deadline - time.monotonic()

    def rng_of(self, structure: Structure) -> np.random.Generator:
        """Random numbers that depend on the structure alone, not on what was tried before."""
        places = ["waste", *(p.name for p in self.model.flowsheet.products)]
        flat = [
            n
            for s in structure
            for n in (s.reagent + 1, s.oxidant + 1, places.index(s.destination))
        ]
        return np.random.default_rng([self.seed, *flat])

    def polish(self, structure: Structure, **options: Any) -> Polished:
        """Polish a structure; return the best known of it."""
        return self.polish_all([(structure, options)])[0]

    def polish_all(self, jobs: Sequence[tuple[Structure, dict[str, Any]]]) -> list[Polished]:
        """Polish several structures side by side; return the best known of each.

        The kernel lets go of the interpreter, so threads share the cores; results are taken in the
        order of the jobs, so that the outcome does not depend on which finishes first.
        """

        def work(job: tuple[Structure, dict[str, Any]]) -> Polished:
            structure, options = job
            return polish_structure(
                self.model,
                structure,
                rng=self.rng_of(structure),
                ln_activity=self.anchors.ln_activity,
                **options,
            )

        results = list(self.pool.map(work, jobs)) if len(jobs) > 1 else [work(jobs[0])]
        for (structure, _), result in zip(jobs, results, strict=True):
            self.evaluations += result.evaluations
            earlier = self.done.get(structure)
            if earlier is None or ahead(result, earlier):
                self.done[structure] = result
            if self.best is None or ahead(result, self.best):
                self.best = result
                self.say(f"{train_text(self.model, structure)}: {verdict(result)}")
        return [self.done[structure] for structure, _ in jobs]

    def is_close(self, result: Polished, centre: Polished) -> bool:
        """Whether a quickly polished train could beat ``centre`` once polished in earnest."""
        if not result.feasible or not centre.feasible:
            return result.feasible or result.excess < 1.5 * centre.excess
        flow = self.model.flowsheet.feed.flow_m3_per_h
        scale = max(abs(centre.cost_USD_per_h), 0.05 * flow)
        return result.cost_USD_per_h < centre.cost_USD_per_h + 0.04 * scale

    def trimmed(self, result: Polished) -> Polished:
        """Strike out stages that came out of the polish with nothing to do."""
        flow = self.model.flowsheet.feed.flow_m3_per_h
        idle = [
            step.reagent >= 0
            and step.oxidant < 0
            and result.dose_kg_per_h[k, step.reagent] < IDLE_DOSE_KG_PER_M3 * flow
            for k, step in enumerate(result.structure)
        ]
        if not any(idle) or all(idle):
            return result
        shorter = tuple(s for s, i in zip(result.structure, idle, strict=True) if not i)
        if shorter in self.done:
            return self.done[shorter]
        kept = [k for k, i in enumerate(idle) if not i]
        return self.polish(shorter, **_quick(known_of(result, shorter, kept)))


def _quick(known: tuple[np.ndarray, np.ndarray]) -> dict[str, Any]:
    """Options of a quick polish: few starts, near what is known."""
    return {"known": known, "samples": 20, "starts": 4, "iterations": 25}


def known_of(
    result: Polished, structure: Structure, origin: Sequence[int]
) -> tuple[np.ndarray, np.ndarray]:
    """Coordinates and doses of ``structure`` as far as they stand in ``result``.

    ``origin[k]`` is the stage of ``result`` that stage k was, or -1 for a new one.
    """
    columns: dict[int, int] = {}
    for k, step in enumerate(result.structure):
        if step.reagent >= 0:
            columns[k] = len(columns)
    u, dose = [], []
    for k, step in enumerate(structure):
        if step.reagent < 0:
            continue
        source = origin[k]
        same = source in columns and result.structure[source].reagent == step.reagent
        u.append(result.coordinates[columns[source]] if same else np.nan)
        dose.append(result.dose_kg_per_h[source, step.reagent] if same else np.nan)
    return np.array(u), np.array(dose)


def verdict(result: Polished) -> str:
    """One phrase on a polished train."""
    if result.feasible:
        return f"{result.cost_USD_per_h:.4g} USD/h"
    return "misses " + ", ".join(result.limits_missed[:3])


def train_text(model: PlantModel, structure: Structure) -> str:
    """Name a structure in one line."""
    reagents, oxidants = list(model.flowsheet.reagents), list(model.flowsheet.oxidants)
    parts = []
    for step in structure:
        what = [oxidants[step.oxidant]] if step.oxidant >= 0 else []
        what += [reagents[step.reagent]] if step.reagent >= 0 else []
        parts.append(f"{' + '.join(what)} -> {step.destination}")
    return " | ".join(parts)


def optimise(
    flowsheet: Flowsheet,
    *,
    time_limit_s: float = 35.0,
    seed: int = 1,
    progress: Progress | None = None,
) -> Design:
    """Find the cheapest train that meets every limit of the flowsheet.

    Parameters
    ----------
    time_limit_s: after which the best train so far is returned; the work is otherwise bounded by
        counts.
    seed: of the sampled starting doses.
    progress: called with one line of text now and then.

    Returns
    -------
    Design
        With ``feasible`` False, and the limits missed, when no train that meets them was found:
        the train that misses them least.

    Raises
    ------
    InputError
        When the flowsheet offers nothing to choose from.
    """
    if not flowsheet.reagents:
        raise InputError(
            flowsheet.source_name,
            [Fault("reagents", "no reagent is offered", "add at least one [reagents.<name>]")],
        )
    model = PlantModel.of(flowsheet)
    began = time.monotonic()  # from here: the very first solve on a machine compiles the kernel
    say = progress or (lambda _text: None)
    say("titrating the feed for anchors")
    anchors = feed_anchors(model)
    search = _Search(model, anchors, began + time_limit_s, say, seed)
    say(f"{anchors.count} anchors; lattice programs for up to {flowsheet.plant.max_stages} stages")
    # short trains first: their programs take a second, and the longer trains next to them are
    # found by inserting stages; the longer programs then add what insertion cannot reach
    stop = search.deadline - (1.0 - LATTICE_SHARE) * time_limit_s
    short = [k for k in range(1, flowsheet.plant.max_stages + 1) if k <= SHORT]
    _descend(search, _propose(search, short, stop), search.deadline - 0.35 * time_limit_s)
    longer = range(SHORT + 1, flowsheet.plant.max_stages + 1)
    _descend(search, _propose(search, longer, search.deadline - RESERVE_S), search.deadline)
    best = search.best
    assert best is not None  # the descent polishes at least one train
    search.polish(
        best.structure,
        hints=[(best.coordinates, _lead_doses(search, best))],
        samples=64,
        starts=12,
        iterations=120,
        shakes=6,
    )
    _refine(search)
    return _design(search, _agreement(search))


def _propose(search: _Search, lengths: Iterable[int], stop: float) -> list[Polished]:
    """Draw structures from the lattices and polish them; return the best of each length."""
    found_trains: dict[Structure, Polished] = {}
    for k in lengths:
        if time.monotonic() > stop:
            break
        anchors = thinned(search.anchors, LATTICE_ANCHORS.get(k, 24))
        lattice = Lattice(search.model, anchors, k)
        for drawn in range(PROPOSALS.get(k, PROPOSALS_LONGER)):
            if time.monotonic() > stop:
                break
            found = lattice.propose(LATTICE_SECONDS)
            if found is None and drawn == 0 and anchors.count < search.anchors.count:
                # too coarse to hold any train: all anchors, before giving up on this length
                anchors = search.anchors
                lattice = Lattice(search.model, anchors, k)
                found = lattice.propose(LATTICE_SECONDS)
            if found is None:
                break
            lattice.forbid(found.structure)
            search.proposals += 1
            before = search.best
            hints = _hint(search.model, anchors, found)
            result = search.polish(found.structure, hints=hints, samples=32, starts=8, shakes=1)
            if search.best is not before:
                search.lattice_value = found.value_USD_per_h
            result = search.trimmed(result)
            found_trains[result.structure] = result
    return sorted(found_trains.values(), key=_merit)[:SEEDS]


def _merit(result: Polished) -> tuple[bool, float]:
    """Sort key: feasible by cost, then the others by what they miss."""
    return (not result.feasible, result.cost_USD_per_h if result.feasible else result.excess)


def _hint(
    model: PlantModel, anchors: Anchors, proposal: Proposal
) -> list[tuple[np.ndarray, np.ndarray]]:
    """Coordinates and doses of a proposal, from its anchors' activities and its doses."""
    problem = TrainProblem(model, proposal.structure)
    if problem.size == 0:
        return []
    u, dose = [], []
    for k in problem.dosed:
        x = anchors.ln_activity[proposal.anchor[k]][None, :]
        amount = np.array([proposal.dose_kg_per_h[k]])
        u.append(float(lead_coordinate(model, x, np.array([problem.lead[k]]), amount)[0]))
        dose.append(proposal.dose_kg_per_h[k])
    row = np.array(u)
    if not np.isfinite(row).all() or (abs(row) > 40.0).any():
        return []
    return [(row, np.array(dose))]


def _neighbours(
    model: PlantModel, structure: Structure
) -> Iterator[tuple[Structure, tuple[int, ...]]]:
    """Trains that differ from ``structure`` in one choice, and which stage each stage was."""
    reagents = range(len(model.flowsheet.reagents))
    oxidants = range(-1, len(model.flowsheet.oxidants))
    destinations = ["waste", *(p.name for p in model.flowsheet.products)]
    count = len(structure)
    same = tuple(range(count))
    if count < model.flowsheet.plant.max_stages:
        for k in range(count, -1, -1):
            for r in reagents:
                for d in destinations:
                    new = (*structure[:k], Step(r, -1, d), *structure[k:])
                    yield new, (*same[:k], -1, *same[k:])
    for k, step in enumerate(structure):

        def put(new: Step, k: int = k) -> Structure:
            return (*structure[:k], new, *structure[k + 1 :])

        for d in destinations:
            if d != step.destination:
                yield put(Step(step.reagent, step.oxidant, d)), same
        for o in oxidants:
            if o != step.oxidant and (step.reagent >= 0 or o >= 0):
                yield put(Step(step.reagent, o, step.destination)), same
        for r in reagents:
            if r != step.reagent:
                yield put(Step(r, step.oxidant, step.destination)), same
    for k in range(count - 1):
        swapped = (*structure[:k], structure[k + 1], structure[k], *structure[k + 2 :])
        yield swapped, (*same[:k], k + 1, k, *same[k + 2 :])
    if count > 1:
        for k in range(count):
            yield (*structure[:k], *structure[k + 1 :]), (*same[:k], *same[k + 1 :])


def _descend(search: _Search, seeds: list[Polished], stop: float) -> None:
    """From each seed, move to a better train that differs in one choice until there is none."""
    if not seeds and search.best is None:
        first = (Step(0, -1, "waste"),)
        seeds = [search.polish(first, samples=48, starts=8)]
    stop = min(stop, search.deadline - RESERVE_S)
    for seed in seeds:
        centre = seed
        moved = True
        while moved and time.monotonic() < stop:
            moved = False
            fresh = [
                (structure, _quick(known_of(centre, structure, origin)))
                for structure, origin in _neighbours(search.model, centre.structure)
                if structure not in search.done
            ]
            tried: list[Polished] = []
            for batch in batched(fresh, BATCH):
                if time.monotonic() > stop:
                    search.cut_short = True
                    return
                results = [search.trimmed(r) for r in search.polish_all(batch)]
                tried += results
                centre, moved = _move(centre, results)
                if moved:
                    break
            if moved:
                continue
            # nothing better at a glance: the closest deserve a second look
            close = sorted((r for r in tried if search.is_close(r, centre)), key=_merit)
            for batch_of in batched(close[:SECOND_LOOKS], BATCH):
                if time.monotonic() > stop:
                    search.cut_short = True
                    return
                earnest = [(r.structure, _earnest(search, r)) for r in batch_of]
                centre, better = _move(centre, search.polish_all(earnest))
                moved = moved or better


def _move(centre: Polished, results: Sequence[Polished]) -> tuple[Polished, bool]:
    """Return the best of ``results`` that beats ``centre``, or ``centre`` itself."""
    moved = False
    for result in results:
        if ahead(result, centre, WORTH_MOVING):
            centre, moved = result, True
    return centre, moved


def _earnest(search: _Search, result: Polished) -> dict[str, Any]:
    """Options of a thorough polish, from what a quick one found."""
    hint = (result.coordinates, _lead_doses(search, result))
    return {"hints": [hint], "samples": 24, "starts": 6, "shakes": 1}


def batched(items: Sequence[T], size: int) -> Iterator[Sequence[T]]:
    """Yield runs of ``size`` items."""
    for i in range(0, len(items), size):
        yield items[i : i + size]


def _lead_doses(search: _Search, result: Polished) -> np.ndarray:
    problem = TrainProblem(search.model, result.structure)
    return np.array([result.dose_kg_per_h[k, problem.lead[k]] for k in problem.dosed])


def _refine(search: _Search) -> None:
    """Anchor the lattice on the winner as well, and polish the doses it then prefers."""
    for _ in range(3):
        best = search.best
        if best is None or not best.feasible or search.time_left_s < 3.0:
            return
        joined = anchors_of_run(search.model, _run_of(search, best)).joined(search.anchors)
        lattice = Lattice(search.model, joined, len(best.structure))
        lattice.restrict(best.structure)
        found = lattice.propose(min(5.0, search.time_left_s - 1.0))
        hints = _hint(search.model, joined, found) if found is not None else []
        if not hints:
            return
        search.polish(best.structure, starts=6, samples=16, hints=hints)
        if search.best is best:
            return


def _run_of(search: _Search, result: Polished) -> Run:
    problem = TrainProblem(search.model, result.structure)
    return problem.run_doses(_lead_doses(search, result)[None, :])


def _agreement(search: _Search) -> float:
    """Error of the linear model at the design: lattice value less exact cost, over the turnover.

    The lattice is anchored on the design's own stages and held to its structure, near its doses.
    """
    best = search.best
    if best is None or not best.feasible:
        return float("nan")
    run = _run_of(search, best)
    lattice = Lattice(search.model, anchors_of_run(search.model, run), len(best.structure))
    lattice.restrict(best.structure, best.dose_kg_per_h)
    found = lattice.propose(5.0)
    if found is None:
        return float("nan")
    books = account(run, [step.destination for step in best.structure])
    turnover = sum(abs(float(line.USD_per_h[0])) for line in books.costs)
    return (found.value_USD_per_h - best.cost_USD_per_h) / turnover


def _design(search: _Search, agreement: float) -> Design:
    best = search.best
    assert best is not None
    destinations = [step.destination for step in best.structure]
    decisions = decisions_of(search.model, best.dose_kg_per_h, best.oxidant, destinations)
    trial = evaluate_on(search.model, decisions)
    record = SearchRecord(
        trains_polished=len(search.done),
        lattice_proposals=search.proposals,
        lattice_value_USD_per_h=search.lattice_value,
        lattice_difference=agreement,
        exact_evaluations=search.evaluations,
        best_cost_USD_per_h=trial.cost_per_hour,
        time_ran_out=search.cut_short,
    )
    return Design.of(trial, record)
