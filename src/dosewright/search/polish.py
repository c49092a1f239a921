"""Doses of one train polished on the exact model.

Successive linear programming with a trust region and elastic limits, many starts side by side.
Each stage has one coordinate (`plant.lead_coordinate`) in which both pH jumps and buffers are well
scaled. A solid that appears is a kink at which a single start can stall, hence the many starts.
"""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass
from typing import Any

import numpy as np
from numpy.typing import NDArray
from scipy.optimize import linprog
from scipy.sparse import block_diag, csr_matrix

from dosewright.chemistry.activity import WATER_KG_PER_MOL
from dosewright.equilibrium import States
from dosewright.plant import Orders, PlantModel, Run, lead_coordinate, simulate
from dosewright.trial import MET_TOLERANCE, Account, account

Array = NDArray[np.float64]

BACK_OFF = 2e-7  # scaled: the linear programs aim this far inside every limit
WORTH_KEEPING = 1e-9  # of the cost's scale: a smaller hoped-for gain ends a start
WORTH_SHAKING = 1e-6  # relative gain that makes another shake worth while
SHAKES = (0.85, 0.95, 1.05, 1.2)  # factors on one dose
KEEP_AFTER = {10: 6, 20: 3}  # iteration -> starts that go on


@dataclass(frozen=True)
class Step:
    """One used position of a train: indices into the flowsheet's tables, -1 for none."""

    reagent: int
    oxidant: int
    destination: str


Structure = tuple[Step, ...]


@dataclass(frozen=True, eq=False)
class Polished:
    """The best doses found for a structure.

    ``dose_kg_per_h`` (K, R), ``oxidant`` (K, O); ``excess`` is the largest scaled excess over the
    limits (feasible when not above rounding), ``limits_missed`` their names; ``evaluations`` counts trains
    solved.
    """

    structure: Structure
    dose_kg_per_h: Array
    oxidant: NDArray[np.bool_]
    coordinates: Array
    cost_USD_per_h: float
    excess: float
    limits_missed: tuple[str, ...]
    evaluations: int

    @property
    def feasible(self) -> bool:
        """True when the exact model meets every limit."""
        return self.excess <= MET_TOLERANCE


class TrainProblem:
    """Cost and limits of one structure as functions of its dosing coordinates."""

    def __init__(self, model: PlantModel, structure: Structure) -> None:
        self.model = model
        self.structure = structure
        flowsheet = model.flowsheet
        self.stages = len(structure)
        self.dosed = [k for k, step in enumerate(structure) if step.reagent >= 0]
        self.size = len(self.dosed)
        self.destinations = [step.destination for step in structure]
        count_r, count_o = len(flowsheet.reagents), len(flowsheet.oxidants)
        self.used = np.zeros((self.stages, count_r + count_o), dtype=bool)
        self.oxidant = np.zeros((self.stages, count_o), dtype=bool)
        self.lead = np.zeros(self.stages, dtype=np.int64)
        for k, step in enumerate(structure):
            if step.reagent >= 0:
                self.used[k, step.reagent] = True
                self.lead[k] = step.reagent
            if step.oxidant >= 0:
                self.used[k, count_r + step.oxidant] = True
                self.oxidant[k, step.oxidant] = True
        self.evaluations = 0

    def _base(self, count: int) -> Orders:
        shape = (count, self.stages, len(self.model.flowsheet.reagents))
        return Orders.of_doses(
            np.zeros(shape), np.broadcast_to(self.oxidant, (count, *self.oxidant.shape)).copy()
        )

    def _spread(self, values: Array) -> Array:
        full = np.full((values.shape[0], self.stages), np.nan)
        full[:, self.dosed] = values
        return full

    def run_coordinates(
        self,
        u: Array,
        guess: Array,
        slope: Array | None = None,
        starts: tuple[States, ...] | None = None,
    ) -> Run:
        """Simulate trials at coordinates ``u`` (N, size), doses searched from ``guess``."""
        self.evaluations += u.shape[0]
        lead = np.broadcast_to(self.lead, (u.shape[0], self.stages))
        orders = self._base(u.shape[0]).to_coordinate(
            lead,
            self._spread(u),
            np.nan_to_num(self._spread(guess)),
            self._spread(np.full(u.shape, np.nan) if slope is None else slope),
        )
        return simulate(self.model, orders, starts)

    def run_doses(self, dose: Array, starts: tuple[States, ...] | None = None) -> Run:
        """Simulate trials at doses (N, size) kg/h of the lead reagents."""
        self.evaluations += dose.shape[0]
        orders = self._base(dose.shape[0])
        for column, k in enumerate(self.dosed):
            orders.dose_kg_per_h[:, k, self.lead[k]] = dose[:, column]
        return simulate(self.model, orders, starts)

    def run_pH(self, pH: Array) -> Run:
        """Simulate trials whose dosed stages meet ``pH`` (N, size)."""
        self.evaluations += pH.shape[0]
        lead = np.broadcast_to(self.lead, (pH.shape[0], self.stages))
        return simulate(self.model, self._base(pH.shape[0]).to_pH(lead, self._spread(pH)))

    def doses_of(self, run: Run) -> Array:
        """Lead doses (N, size) of a run."""
        columns = [run.stages[k].dose_kg_per_h[:, self.lead[k]] for k in self.dosed]
        return np.stack(columns, axis=1) if columns else np.zeros((run.count, 0))

    def coordinates_of(self, run: Run) -> Array:
        """Coordinates (N, size) of a run."""
        columns = []
        for k in self.dosed:
            stage = run.stages[k]
            lead = np.full(run.count, self.lead[k])
            dose = stage.dose_kg_per_h[:, self.lead[k]]
            columns.append(lead_coordinate(self.model, stage.states.ln_activity, lead, dose))
        return np.stack(columns, axis=1) if columns else np.zeros((run.count, 0))

    def judge(self, run: Run) -> tuple[Array, Array, Account]:
        """Cost (N,), scaled excess (N, limits) and the account; failed rows are infinite."""
        books = account(run, self.destinations, self.used)
        cost = np.where(run.ok, books.cost_USD_per_h, np.inf)
        excess = np.where(run.ok[:, None], books.excess, np.inf)
        return cost, excess, books


def log_excess(books: Account) -> Array:
    """Excess (N, limits) with concentration limits on a logarithmic scale.

    Residual concentrations fall by decades per unit of pH: their logarithm is what is nearly
    linear in the coordinates. Zero means 'at the limit' on either scale.
    """
    columns = []
    for limit in books.limits:
        if limit.unit == "mg/L" and limit.sense == "max":
            columns.append(np.log(np.maximum(limit.value, 1e-30) / limit.bound))
        else:
            columns.append(limit.excess)
    return np.stack(columns, axis=1)


def _merit(cost: Array, excess: Array, weight: float) -> Array:
    return np.asarray(cost + weight * np.maximum(excess, 0.0).sum(axis=1))


def _linear_steps(
    gradient: Array, jacobian: Array, excess: Array, radius: Array, weight: float
) -> Array:
    """Solve the elastic linear programs of all starts as one block-diagonal program.

    ``gradient`` (S, n), ``jacobian`` (S, m, n), ``excess`` (S, m), ``radius`` (S,).
    Returns steps (S, n).
    """
    starts, limits, size = jacobian.shape
    blocks, cost, upper, bounds = [], [], [], []
    for s in range(starts):
        blocks.append(csr_matrix(np.hstack([jacobian[s], -np.eye(limits)])))
        cost.append(np.concatenate([gradient[s], np.full(limits, weight)]))
        upper.append(-excess[s] - BACK_OFF)
        bounds += [(-radius[s], radius[s])] * size + [(0.0, None)] * limits
    # the stubs know only dense matrices
    answer: Any = linprog(  # type: ignore[call-overload]
        np.concatenate(cost),
        A_ub=block_diag(blocks, format="csr"),
        b_ub=np.concatenate(upper),
        bounds=bounds,
        method="highs",
    )
    if answer.x is None:
        return np.zeros((starts, size))
    return np.asarray(answer.x).reshape(starts, size + limits)[:, :size]


def polish(
    problem: TrainProblem,
    u: Array,
    guess: Array,
    *,
    iterations: int = 60,
    radius: float = 0.06,
) -> Polished:
    """Polish from starts ``u`` (S, size) with dose guesses (S, size) kg/h; return the best.

    The merit is cost plus a weight on every missed limit; the weight is far above any shadow
    price, so the elastic programs leave a limit missed only when it cannot be met nearby.
    """
    model, size = problem.model, problem.size
    if size == 0:
        return _best(problem, problem.run_doses(np.zeros((1, 0))), np.zeros((1, 0)))
    run = problem.run_coordinates(u, guess)
    here = _Point.of(problem, run, u)
    scale = max(
        float(np.abs(here.cost[run.ok]).max(initial=0.0)), model.flowsheet.feed.flow_m3_per_h * 0.1
    )
    weight = 20.0 * scale
    radii = np.where(run.ok, radius, 0.0)
    merit = np.where(run.ok, _merit(here.cost, here.excess, weight), np.inf)
    for iteration in range(iterations):
        if iteration in KEEP_AFTER:
            # the leaders go on; a start this far behind would need more iterations than it gets
            radii[np.argsort(merit)[KEEP_AFTER[iteration] :]] = 0.0
        live = np.flatnonzero(radii > 1e-7)
        if live.size == 0:
            break
        gradient, jacobian, slopes, usable = _gradients(problem, here, live)
        radii[live[~usable]] = 0.0
        steps = _linear_steps(gradient, jacobian, here.excess[live], radii[live], weight)
        predicted = _merit(
            here.cost[live] + (gradient * steps).sum(axis=1),
            here.excess[live] + np.einsum("sij,sj->si", jacobian, steps),
            weight,
        )
        trial_u = here.u[live] + steps
        # each stage's dose follows its own coordinate at first order; upstream changes follow
        diagonal = np.einsum("sii->si", slopes)
        ahead = np.maximum(here.doses[live] + steps / diagonal, 0.2 * here.doses[live])
        run = problem.run_coordinates(trial_u, ahead, diagonal, here.starts(live))
        there = _Point.of(problem, run, trial_u)
        m_new = np.where(run.ok, _merit(there.cost, there.excess, weight), np.inf)
        gained = merit[live] - m_new
        hoped = merit[live] - predicted
        good = gained > 0.3 * hoped
        at_edge = (abs(steps) > 0.99 * radii[live][:, None]).any(axis=1)
        shrunk = 0.4 * np.minimum(radii[live], np.maximum(abs(steps).max(axis=1), 1e-12))
        radii[live] = np.where(
            good & (gained > 0.0), np.where(at_edge, 2.5 * radii[live], radii[live]), shrunk
        )
        radii[live] = np.minimum(radii[live], 0.3)
        radii[live[(hoped < WORTH_KEEPING * scale) | ~usable]] = 0.0
        better = gained > 0.0
        here.replace(live[better], there, np.flatnonzero(better))
        merit[live[better]] = m_new[better]
    return _best(problem, problem.run_doses(here.doses), here.u)


@dataclass(eq=False)
class _Point:
    """Where the starts stand: coordinates, doses, cost, log excess, vessel states."""

    u: Array
    doses: Array
    cost: Array
    excess: Array
    states: list[States]

    @staticmethod
    def of(problem: TrainProblem, run: Run, u: Array) -> _Point:
        cost, _, books = problem.judge(run)
        return _Point(
            np.where(run.ok[:, None], problem.coordinates_of(run), u),
            problem.doses_of(run),
            np.where(run.ok, cost, 0.0),
            np.where(run.ok[:, None], log_excess(books), 0.0),
            [stage.states for stage in run.stages],
        )

    def starts(self, rows: NDArray[np.int64]) -> tuple[States, ...]:
        return tuple(states.take(rows) for states in self.states)

    def replace(self, rows: NDArray[np.int64], other: _Point, from_rows: NDArray[np.int64]) -> None:
        """Move the given rows to where ``from_rows`` of another point stand."""
        self.u[rows], self.doses[rows] = other.u[from_rows], other.doses[from_rows]
        self.cost[rows], self.excess[rows] = other.cost[from_rows], other.excess[from_rows]
        for mine, theirs in zip(self.states, other.states, strict=True):
            for name in ("ln_activity", "molality", "phase_mol_per_kg", "ln_gamma", "info"):
                getattr(mine, name)[rows] = getattr(theirs, name)[from_rows]


def _gradients(
    problem: TrainProblem, here: _Point, live: NDArray[np.int64]
) -> tuple[Array, Array, Array, NDArray[np.bool_]]:
    """Gradients along the coordinates, by differences in the doses.

    Differences in doses need one solve per vessel, in coordinates a search for the dose: so all is
    differenced by dose, the coordinates too, and the chain rule turns one into the other. Returns
    gradient (S, n), jacobian (S, m, n), d(coordinate)/d(dose) (S, n, n) and the usable rows.
    """
    size = problem.size
    count = live.size
    base = np.repeat(here.doses[live], size, axis=0)
    which = np.tile(np.arange(size), count)
    delta = np.maximum(1e-7 * base[np.arange(base.shape[0]), which], 1e-9)
    base[np.arange(base.shape[0]), which] += delta
    run = problem.run_doses(base, here.starts(np.repeat(live, size)))
    cost, _, books = problem.judge(run)
    usable = run.ok.reshape(count, size).all(axis=1)
    with np.errstate(invalid="ignore"):
        by_dose = delta.reshape(count, size)
        d_cost = (cost.reshape(count, size) - here.cost[live][:, None]) / by_dose
        d_excess = (
            log_excess(books).reshape(count, size, -1) - here.excess[live][:, None, :]
        ) / by_dose[:, :, None]
        d_u = (
            problem.coordinates_of(run).reshape(count, size, size) - here.u[live][:, None, :]
        ) / by_dose[:, :, None]
    slopes = d_u.transpose(0, 2, 1)  # (S, coordinate, dose)
    diagonal = np.einsum("sii->si", slopes)
    usable &= np.isfinite(slopes).all(axis=(1, 2)) & (diagonal > 0.0).all(axis=1)
    slopes[~usable] = np.eye(size)
    inverse = np.linalg.inv(slopes)  # (S, dose, coordinate)
    gradient = np.einsum("sd,sdu->su", np.where(usable[:, None], d_cost, 0.0), inverse)
    jacobian = np.einsum("sdm,sdu->smu", np.where(usable[:, None, None], d_excess, 0.0), inverse)
    return gradient, jacobian, slopes, usable


def _best(problem: TrainProblem, run: Run, u: Array) -> Polished:
    cost, excess, books = problem.judge(run)
    worst = excess.max(axis=1, initial=-np.inf)
    missed = np.maximum(excess, 0.0).sum(axis=1)
    # feasible rows by cost, then the others by how little they miss
    feasible = worst <= MET_TOLERANCE
    order = np.lexsort((np.where(feasible, cost, missed), ~feasible))
    row = int(order[0])
    dose = np.zeros((problem.stages, len(problem.model.flowsheet.reagents)))
    lead_doses = problem.doses_of(run)
    for column, k in enumerate(problem.dosed):
        dose[k, problem.lead[k]] = lead_doses[row, column]
    names = tuple(
        f"{limit.where}: {limit.name}"
        for limit, e in zip(books.limits, excess[row], strict=True)
        if e > MET_TOLERANCE
    )
    return Polished(
        structure=problem.structure,
        dose_kg_per_h=dose,
        oxidant=problem.oxidant,
        coordinates=u[row] if u.size else u.reshape(-1),
        cost_USD_per_h=float(cost[row]),
        excess=float(worst[row]),
        limits_missed=names,
        evaluations=problem.evaluations,
    )


def sampled_starts(
    problem: TrainProblem,
    rng: np.random.Generator,
    samples: int,
    keep: int,
    ln_activity: Array,
    known: tuple[Array, Array] | None = None,
) -> tuple[Array, Array]:
    """Coordinates and doses of the best of ``samples`` random dosings of a structure.

    The potential's part of each coordinate is drawn from known liquors (``ln_activity``, the
    anchors'), the dose's part from zero to what the feed can consume. ``known`` gives coordinates
    and doses (size,) to keep where they are not NaN.
    """
    u = np.empty((samples, problem.size))
    guess = np.empty((samples, problem.size))
    model = problem.model
    h = model.system.components.index("H+")
    for column, k in enumerate(problem.dosed):
        lead = problem.lead[k]
        with_it = np.isfinite(
            np.where(model.reagent_components[lead] != 0.0, ln_activity, 0.0)
        ).all(axis=1)
        pool = ln_activity[with_it] if with_it.any() else np.full_like(ln_activity[:1], -10.0)
        drawn = pool[rng.integers(0, pool.shape[0], samples)]
        zero = np.zeros(samples)
        potential = lead_coordinate(model, drawn, np.full(samples, lead), zero)
        part = 0.3 * rng.random(samples) ** 2
        u[:, column] = potential + part
        per_unit = float(model.feed.water[0]) * WATER_KG_PER_MOL * model.coordinate_eq_per_kg
        equivalents = max(abs(model.reagent_components[lead, h]), 1.0)
        guess[:, column] = part * per_unit / (model.reagent_rates[lead, 0] * equivalents)
    if known is not None:
        kept = np.isfinite(known[0])
        u[:, kept], guess[:, kept] = known[0][kept], known[1][kept]
    return best_of_run(problem, problem.run_coordinates(u, guess), keep)


def best_of_run(problem: TrainProblem, run: Run, keep: int) -> tuple[Array, Array]:
    """Coordinates and doses of the ``keep`` most promising rows of a run."""
    cost, _, books = problem.judge(run)
    excess = np.where(run.ok[:, None], log_excess(books), 1e6)
    finite = cost[np.isfinite(cost)]
    scale = max(float(np.abs(finite).max(initial=0.0)), 1e-6)
    merit = _merit(np.where(run.ok, cost, 1e3 * scale), np.minimum(excess, 5.0), scale)
    u, doses = problem.coordinates_of(run), problem.doses_of(run)
    usable = np.flatnonzero(run.ok & np.isfinite(u).all(axis=1) & (abs(u) < 50.0).all(axis=1))
    order = usable[np.argsort(merit[usable])][:keep]
    return u[order].copy(), doses[order].copy()


def polish_structure(
    model: PlantModel,
    structure: Structure,
    *,
    rng: np.random.Generator,
    ln_activity: Array,
    hints: Sequence[tuple[Array, Array]] = (),
    known: tuple[Array, Array] | None = None,
    samples: int = 96,
    starts: int = 12,
    iterations: int = 60,
    shakes: int = 0,
) -> Polished:
    """Polish a structure from hints (coordinates and doses), samples and their neighbours.

    ``ln_activity`` (H, nc) are known liquors to draw starts from, the anchors' for instance;
    ``known`` coordinates and doses to keep in half of the samples (see `sampled_starts`); ``shakes`` is the
    number of times the result is shaken in its doses and polished again.
    """
    problem = TrainProblem(model, structure)
    if problem.size == 0:
        return polish(problem, np.zeros((1, 0)), np.zeros((1, 0)))
    u_rows: list[Array] = []
    dose_rows: list[Array] = []
    for u, dose in hints:
        u_rows.append(np.atleast_2d(u))
        dose_rows.append(np.atleast_2d(dose))
    wanted = starts - len(hints)
    for kept in (None,) if known is None else (known, None):
        share = wanted if known is None else (wanted + (kept is not None)) // 2
        u_found, dose_found = sampled_starts(problem, rng, samples, share, ln_activity, kept)
        u_rows.append(u_found)
        dose_rows.append(dose_found)
    u = np.concatenate(u_rows)
    doses = np.concatenate(dose_rows)
    if u.shape[0] == 0:
        doses = np.full((1, problem.size), 1e-3 * model.flowsheet.feed.flow_m3_per_h)
        u = problem.coordinates_of(problem.run_doses(doses))
    while u.shape[0] < starts:
        u = np.concatenate([u, u[:1] + rng.normal(0.0, 0.03, (1, problem.size))])
        doses = np.concatenate([doses, doses[:1]])
    best = polish(problem, u, doses, iterations=iterations)
    for _ in range(shakes):
        shaken = _shaken(problem, best)
        if shaken is None:
            break
        again = polish(problem, *shaken, iterations=iterations)
        if not ahead(again, best, WORTH_SHAKING):
            break
        best = again
    return best


def _shaken(problem: TrainProblem, best: Polished) -> tuple[Array, Array] | None:
    """Return starts around a polished train, moved in doses instead of coordinates.

    Inside a jump of the potential the coordinate moves while the dose, and so the cost, stands
    still: a start that ends there sees no slope. A few per cent of dose step over the jump.
    """
    lead = np.array([best.dose_kg_per_h[k, problem.lead[k]] for k in problem.dosed])
    rows = []
    for column in range(problem.size):
        for factor in SHAKES:
            row = lead.copy()
            row[column] *= factor
            rows.append(row)
            if column + 1 < problem.size:
                # what one stage gives up the next takes over
                traded = row.copy()
                traded[column + 1] *= 2.0 - factor
                rows.append(traded)
    doses = np.array(rows)
    run = problem.run_doses(doses)
    u = problem.coordinates_of(run)
    usable = run.ok & np.isfinite(u).all(axis=1)
    return (u[usable], doses[usable]) if usable.any() else None


def ahead(a: Polished, b: Polished, margin: float = 1e-9) -> bool:
    """Whether ``a`` beats ``b``: feasible first, then cost, or what is missed."""
    if a.feasible != b.feasible:
        return a.feasible
    if a.feasible:
        return a.cost_USD_per_h < b.cost_USD_per_h - margin * abs(b.cost_USD_per_h)
    return a.excess < b.excess * (1.0 - margin)
