"""Least-cost trains: the lattice proposes, the exact model decides.

Only this package imports Pyomo and HiGHS. The loop: mixed-integer programs over anchors
(``lattice``) propose structures for every number of stages; each is polished on the exact model
(``polish``) and then forbidden, so that the next proposal differs; the best trains found are varied
one choice at a time until no variation is better; the lattice is re-anchored on the winner to say
how far the linear model and the exact one agree.
"""

from __future__ import annotations

import time
from collections.abc import Callable, Iterator
from dataclasses import dataclass, field

import numpy as np

from dosewright.design import Design, SearchRecord
from dosewright.errors import InputError, Fault
from dosewright.flowsheet import Flowsheet
from dosewright.plant import PlantModel, lead_coordinate
from dosewright.search.anchors import Anchors, anchors_of_run, feed_anchors
from dosewright.search.lattice import Lattice, Proposal
from dosewright.search.polish import (
    Polished,
    Step,
    Structure,
    TrainProblem,
    polish_structure,
)
from dosewright.trial import decisions_of, evaluate_on

Progress = Callable[[str], None]

MAX_PROPOSALS = 18  # per search, over all numbers of stages
STALE_PROPOSALS = 6  # proposals in a row without a better train after which variation begins
LATTICE_MARGIN = 1.10  # the lattice is off by some per cent; it stops once this far above the best
LATTICE_SECONDS = 4.0  # for one proposal; the incumbent is as good a suggestion as the optimum
MAX_ROUNDS = 4  # of variation


@dataclass(eq=False)
class _Search:
    model: PlantModel
    anchors: Anchors
    deadline: float
    say: Progress
    rng: np.random.Generator
    done: dict[Structure, Polished] = field(default_factory=dict)
    best: Polished | None = None
    proposals: int = 0
    lattice_value: float = float("nan")
    evaluations: int = 0

    @property
    def time_left_s(self) -> float:
        return self.deadline - time.monotonic()

    def better(self, a: Polished) -> bool:
        """Whether ``a`` beats the best so far: feasible first, then cost, then least missed."""
        b = self.best
        if b is None or a.feasible != b.feasible:
            return b is None or a.feasible
        if a.feasible:
            return a.cost_USD_per_h < b.cost_USD_per_h - 1e-9 * abs(b.cost_USD_per_h)
        return a.excess < b.excess

    def try_structure(
        self, structure: Structure, *, starts: int, samples: int, hints: list | None = None
    ) -> bool:
        """Polish a structure; return whether it is the new best."""
        result = polish_structure(
            self.model,
            structure,
            rng=self.rng,
            ln_activity=self.anchors.ln_activity,
            hints=hints or [],
            samples=samples,
            starts=starts,
        )
        self.evaluations += result.evaluations
        earlier = self.done.get(structure)
        if earlier is None or _ahead(result, earlier):
            self.done[structure] = result
        if self.better(result):
            self.best = result
            self.say(f"{train_text(self.model, structure)}: {verdict(result)}")
            return True
        return False


def _ahead(a: Polished, b: Polished) -> bool:
    if a.feasible != b.feasible:
        return a.feasible
    return a.cost_USD_per_h < b.cost_USD_per_h if a.feasible else a.excess < b.excess


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
    time_limit_s: float = 50.0,
    seed: int = 1,
    progress: Progress | None = None,
) -> Design:
    """Find the cheapest train that meets every limit of the flowsheet.

    Parameters
    ----------
    time_limit_s: after which the best train so far is returned; the work is otherwise bounded by
        counts, so that the same file gives the same design.
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
    began = time.monotonic()
    model = PlantModel.of(flowsheet)
    say = progress or (lambda _text: None)
    say("titrating the feed for anchors")
    anchors = feed_anchors(model)
    search = _Search(model, anchors, began + time_limit_s, say, np.random.default_rng(seed))
    search.say(f"{anchors.count} anchors; lattice programs for up to {_positions(flowsheet)} stages")
    _propose_and_polish(search, anchors)
    _vary(search)
    agreement = _agreement(search, anchors)
    assert search.best is not None  # at least one structure is always tried
    return _design(search, agreement, began)


def _positions(flowsheet: Flowsheet) -> int:
    return flowsheet.plant.max_stages


def _propose_and_polish(search: _Search, anchors: Anchors) -> None:
    """Draw structures from the lattices, cheapest first, until they stop paying."""
    lattices = {
        k: Lattice(search.model, anchors, k) for k in range(1, _positions(search.model.flowsheet) + 1)
    }
    waiting: dict[int, Proposal] = {}
    stale = 0
    budget = 0.45 * search.time_left_s
    stop = time.monotonic() + budget
    while search.proposals < MAX_PROPOSALS and stale < STALE_PROPOSALS:
        for k in [k for k in lattices if k not in waiting]:
            found = lattices[k].propose(LATTICE_SECONDS)
            if found is None:
                del lattices[k]
            else:
                waiting[k] = found
        if not waiting or (time.monotonic() > stop and search.best is not None):
            break
        k = min(waiting, key=lambda k: waiting[k].value_USD_per_h)
        proposal = waiting.pop(k)
        lattices[k].forbid(proposal.structure)
        best = search.best
        if best is not None and best.feasible:
            margin = (LATTICE_MARGIN - 1.0) * abs(best.cost_USD_per_h)
            if proposal.value_USD_per_h > best.cost_USD_per_h + margin:
                break
        search.proposals += 1
        hints = _hint(search.model, anchors, proposal)
        gained = search.try_structure(proposal.structure, starts=10, samples=48, hints=hints)
        if gained:
            search.lattice_value = proposal.value_USD_per_h
        stale = 0 if gained else stale + 1


def _hint(model: PlantModel, anchors: Anchors, proposal: Proposal) -> list:
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


def _variations(model: PlantModel, structure: Structure) -> Iterator[Structure]:
    """Trains that differ from ``structure`` in one choice."""
    reagents = range(len(model.flowsheet.reagents))
    oxidants = range(-1, len(model.flowsheet.oxidants))
    destinations = ["waste", *(p.name for p in model.flowsheet.products)]
    for k, step in enumerate(structure):
        def put(new: Step, k: int = k) -> Structure:
            return (*structure[:k], new, *structure[k + 1 :])

        for r in reagents:
            if r != step.reagent:
                yield put(Step(r, step.oxidant, step.destination))
        for o in oxidants:
            if o != step.oxidant and (step.reagent >= 0 or o >= 0):
                yield put(Step(step.reagent, o, step.destination))
        for d in destinations:
            if d != step.destination:
                yield put(Step(step.reagent, step.oxidant, d))
        if len(structure) > 1:
            yield (*structure[:k], *structure[k + 1 :])
        if k + 1 < len(structure):
            yield (*structure[:k], structure[k + 1], step, *structure[k + 2 :])
    if len(structure) < model.flowsheet.plant.max_stages:
        for k in range(len(structure) + 1):
            for r in reagents:
                yield (*structure[:k], Step(r, -1, "waste"), *structure[k:])


def _vary(search: _Search) -> None:
    """Vary the best train one choice at a time until nothing is better."""
    for _ in range(MAX_ROUNDS):
        if search.best is None:
            first = Step(0, -1, "waste")
            search.try_structure((first,), starts=8, samples=48)
            assert search.best is not None
        centre = search.best.structure
        candidates = [s for s in _variations(search.model, centre) if s not in search.done]
        for structure in candidates:
            if search.time_left_s < 6.0:
                return
            search.try_structure(structure, starts=4, samples=32)
        # what came close deserves the full number of starts
        best = search.best
        close = [
            s
            for s in candidates
            if s in search.done
            and (
                not best.feasible
                or search.done[s].excess < 0.05
                and search.done[s].cost_USD_per_h
                < best.cost_USD_per_h + 0.05 * abs(best.cost_USD_per_h)
            )
        ]
        for structure in close[:6]:
            if search.time_left_s < 6.0:
                return
            search.try_structure(structure, starts=12, samples=64)
        if search.best.structure == centre:
            break
    hints = [(search.best.coordinates, _lead_doses(search))]
    search.try_structure(search.best.structure, starts=16, samples=96, hints=hints)


def _lead_doses(search: _Search) -> np.ndarray:
    assert search.best is not None
    problem = TrainProblem(search.model, search.best.structure)
    return np.array([search.best.dose_kg_per_h[k, problem.lead[k]] for k in problem.dosed])


def _agreement(search: _Search, anchors: Anchors) -> float:
    """Relative difference of the lattice, re-anchored on the winner, from the exact cost.

    Where the re-anchored lattice points to other doses, they are polished as well, and the lattice
    is anchored again on the result.
    """
    best = search.best
    if best is None or not best.feasible:
        return float("nan")
    difference = float("nan")
    for _ in range(3):
        problem = TrainProblem(search.model, best.structure)
        run = problem.run_doses(_lead_doses(search)[None, :])
        joined = anchors_of_run(search.model, run).joined(anchors)
        lattice = Lattice(search.model, joined, len(best.structure))
        lattice.restrict(best.structure)
        found = lattice.propose(min(6.0, max(search.time_left_s - 1.0, 1.0)))
        if found is None:
            return difference
        difference = found.value_USD_per_h / best.cost_USD_per_h - 1.0
        hints = _hint(search.model, joined, found)
        if not hints or search.time_left_s < 3.0:
            return difference
        if not search.try_structure(best.structure, starts=6, samples=16, hints=hints):
            return difference
        best = search.best
        assert best is not None
    return difference


def _design(search: _Search, agreement: float, began: float) -> Design:
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
    )
    del began
    return Design.of(trial, record)
