"""Timings beside their peers, measured in the same run; never pass or fail.

    python tests/benchmarks/run.py [engine] [optimiser] [--seconds 50]

engine: equilibria per second on one core against clarabel (exponential cones) on the same problems,
activity off, and the latency of one call. optimiser: `optimise` against SciPy's differential
evolution around our own exact model, given the same time on the same flowsheet.
"""

import argparse
import statistics
import sys
import time
from pathlib import Path

import numpy as np
from scipy.optimize import differential_evolution

sys.path.insert(0, str(Path(__file__).parent.parent))

import dosewright
from conic_peer import ConicPeer
from dosewright.chemistry.activity import activity_model
from dosewright.chemistry.system import system_of
from dosewright.equilibrium import solve
from dosewright.equilibrium import vessel as vessel_module
from dosewright.plant import Orders, PlantModel, simulate
from dosewright.trial import account
from liquors import random_totals

FLOWSHEETS = Path(__file__).parent.parent.parent / "flowsheets"


def one_core():
    vessel_module._PARALLEL_FROM = 10**9


def engine():
    one_core()
    system = system_of(dosewright.catalogue().components, 25.0)
    enabled = system.enabled("fast")
    count = 2000
    totals = random_totals(system, np.random.default_rng(1), count, low=1e-6, high=1.0)
    ideal, davies = activity_model("ideal", 25.0), activity_model("davies", 25.0)
    solve(system, ideal, totals[:2], enabled=enabled)
    rates = {}
    for name, model in (("ours, activity off", ideal), ("ours, Davies", davies)):
        seconds = []
        for _ in range(5):
            began = time.perf_counter()
            states = solve(system, model, totals, enabled=enabled)
            seconds.append(time.perf_counter() - began)
        assert (states.status == 0).all()
        rates[name] = count / statistics.median(seconds)
    peer, few = ConicPeer(system, enabled), 200
    prepared = [peer.problem(row) for row in totals[:few]]
    began = time.perf_counter()
    solved = sum(peer.solve(row)[0] == "Solved" for row in totals[:few])
    whole = time.perf_counter() - began
    began = time.perf_counter()
    for row in totals[:few]:
        peer.problem(row)
    building = time.perf_counter() - began
    rates["clarabel, solving only"] = few / (whole - building)
    print(
        f"engine: {len(system.species)} species, {int(enabled.sum())} solids, one core, cold starts"
    )
    for name, rate in rates.items():
        print(f"  {name:26s} {rate:10.0f} equilibria/s")
    print(
        f"  ratio, activity off        {rates['ours, activity off'] / rates['clarabel, solving only']:10.1f}"
    )
    print(
        f"  clarabel solved {solved} of {few} (tolerance 1e-9); ours {count} of {count}, balances 1e-13"
    )
    del prepared
    liquor = {"Ca+2": 0.01, "Zn+2": 0.005, "Fe+3": 0.002, "SO4-2": 0.02, "Na+": 0.01}
    dosewright.equilibrate(liquor)
    seconds = []
    for _ in range(200):
        began = time.perf_counter()
        dosewright.equilibrate(liquor)
        seconds.append(time.perf_counter() - began)
    print(
        f"  one equilibrate() call, names to certificate: median {1e3 * statistics.median(seconds):.2f} ms"
    )


def evolve(model, seconds, seed):
    """Differential evolution over reagents, oxidants, destinations and doses, batch-evaluated."""
    flowsheet = model.flowsheet
    stages, reagents = flowsheet.plant.max_stages, len(flowsheet.reagents)
    agents = len(flowsheet.oxidants)
    places = ["waste", *(p.name for p in flowsheet.products)]
    eq = float(abs(model.feed.totals[0]) @ np.maximum(model.system.component_charge, 0.0))
    top = 1.2 * eq / model.reagent_rates[:, 0]
    stop = time.monotonic() + seconds
    best = [np.inf, 0]

    def cost(x):
        x = np.atleast_2d(x.T)
        n = len(x)
        genes = x.reshape(n, stages, 4)
        which = np.minimum((genes[:, :, 0] * (reagents + 1)).astype(int), reagents)
        agent = np.minimum((genes[:, :, 1] * (agents + 1)).astype(int), agents)
        place = np.minimum((genes[:, :, 2] * len(places)).astype(int), len(places) - 1)
        dose = np.zeros((n, stages, reagents))
        oxidant = np.zeros((n, stages, agents), dtype=bool)
        for k in range(stages):
            rows = np.flatnonzero(which[:, k] < reagents)
            lead = which[rows, k]
            dose[rows, k, lead] = top[lead] * 10.0 ** (-4.0 + 4.0 * genes[rows, k, 3])
            rows = np.flatnonzero(agent[:, k] < agents)
            oxidant[rows, k, agent[rows, k]] = True
        run = simulate(model, Orders.of_doses(dose, oxidant))
        out = np.empty(n)
        for row in range(n):
            used = np.concatenate([dose[row] > 0.0, oxidant[row]], axis=1)
            # limits and costs of a row are those of its own choices
            part = _row(run, row)
            books = account(part, [places[p] for p in place[row]], used)
            miss = np.maximum(books.excess[0], 0.0).sum()
            value = float(books.cost_USD_per_h[0])
            if run.ok[row] and miss <= 1e-6:
                best[0] = min(best[0], value)
            out[row] = value + 50.0 * flowsheet.feed.flow_m3_per_h * (miss if run.ok[row] else 10.0)
        best[1] += n
        return out

    differential_evolution(
        cost, [(0.0, 1.0)] * (4 * stages), popsize=12, maxiter=10**6, tol=0.0, seed=seed,
        vectorized=True, updating="deferred", polish=False,
        callback=lambda *_args, **_kwargs: time.monotonic() > stop,
    )  # fmt: skip
    return best


def _row(run, row):
    from dataclasses import fields, replace

    rows = np.array([row])

    def take(value):
        if isinstance(value, np.ndarray):
            return value[rows]
        if hasattr(value, "take") and hasattr(value, "info"):
            return value.take(rows)
        return type(value)(*(take(getattr(value, f.name)) for f in fields(value)))

    stages = tuple(type(s)(*(take(getattr(s, f.name)) for f in fields(s))) for s in run.stages)
    return replace(run, stages=stages, effluent=take(run.effluent), ok=run.ok[rows], why_not=("",))


def optimiser(seconds):
    for name in ("corvane_adit", "tessaly_row"):
        flowsheet = dosewright.load(FLOWSHEETS / f"{name}.toml")
        began = time.monotonic()
        design = dosewright.optimise(flowsheet, time_limit_s=seconds)
        took = time.monotonic() - began
        print(f"optimiser, {name}:")
        print(
            f"  optimise                   {design.cost_per_hour:10.4g} USD/h in {took:.0f} s, "
            f"{design.search.exact_evaluations:,} trains solved"
        )
        model = PlantModel.of(flowsheet)
        for seed in (1, 2):
            value, trains = evolve(model, seconds, seed)
            print(
                f"  differential evolution {seed}   {value:10.4g} USD/h in {seconds:.0f} s, "
                f"{trains:,} trains solved (inf: none feasible)"
            )


if __name__ == "__main__":
    parser = argparse.ArgumentParser()
    parser.add_argument("what", nargs="*", default=["engine", "optimiser"])
    parser.add_argument("--seconds", type=float, default=50.0)
    arguments = parser.parse_args()
    if "engine" in arguments.what:
        engine()
    if "optimiser" in arguments.what:
        optimiser(arguments.seconds)
