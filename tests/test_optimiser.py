"""The optimiser against brute force: no dose grid finds a feasible train that is cheaper."""

import itertools
import time

import numpy as np
import pytest

import dosewright
from dosewright.flowsheet import from_document
from dosewright.plant import Orders, PlantModel, simulate
from dosewright.search.anchors import feed_anchors
from dosewright.search.lattice import Lattice
from dosewright.search.polish import Step, TrainProblem, polish_structure
from dosewright.trial import MET_TOLERANCE, account

LIME = {"formula": "Ca(OH)2", "supply": "powder", "strength": "92 %", "utilisation": "90 %",
        "price": "190 USD/t", "make_up": "15 %"}  # fmt: skip
CAUSTIC = {"formula": "NaOH", "supply": "solution", "strength": "50 %", "price": "310 USD/t"}
SODA = {"formula": "Na2CO3", "supply": "powder", "strength": "99 %", "unreacted": "dissolved",
        "utilisation": "97 %", "price": "340 USD/t", "make_up": "15 %"}  # fmt: skip
SULFIDE = {"formula": "NaHS", "supply": "solution", "strength": "45 %", "price": "760 USD/t"}

#: invented: a zinc liquor with iron, two positions, two bases; the cake must be worth selling
ZINC = {
    "title": "zinc and iron",
    "feed": {"flow": "20 m3/h", "pH": 2.6, "closing_ion": "SO4",
             "assay": {"Zn": "400 mg/L", "Fe(III)": "150 mg/L", "Mg": "80 mg/L", "Ca": "150 mg/L",
                       "SO4": "1950 mg/L"}},
    "plant": {"max_stages": 2, "overflow_solids": "15 mg/L"},
    "prices": {"water": "0.80 USD/m3", "disposal": {"plain": "45 USD/t"},
               "metal": {"Zn": "2700 USD/t"}},
    "reagents": {"lime": LIME, "caustic": CAUSTIC},
    "products": [{"name": "zinc cake", "metals": ["Zn"], "min_recovery": "85 %",
                  "min_grade": "45 %", "max_impurity": {"Fe": "3 %"}, "payable": "50 %"}],
    "effluent": {"pH": "6.0 to 9.5", "dissolved": {"Zn": "1 mg/L", "Fe": "1 mg/L"}},
}  # fmt: skip

#: invented: copper and nickel with sulfide or soda, two positions, nothing to sell
RINSE = {
    "title": "copper and nickel",
    "feed": {"flow": "6 m3/h", "pH": 3.5, "closing_ion": "SO4",
             "assay": {"Cu": "60 mg/L", "Ni": "40 mg/L", "Na": "200 mg/L", "SO4": "590 mg/L"}},
    "plant": {"max_stages": 2, "overflow_solids": "10 mg/L"},
    "prices": {"water": "0.80 USD/m3", "disposal": {"hazardous": "260 USD/t"}},
    "reagents": {"soda ash": SODA, "sodium hydrosulfide": SULFIDE},
    "effluent": {"pH": "6.0 to 10.0",
                 "dissolved": {"Cu": "0.5 mg/L", "Ni": "0.5 mg/L", "HS": "0.5 mg/L as S"}},
}  # fmt: skip


def grid_best(model, points=70, refinements=3):
    """Cheapest feasible train of one or two stages on a dose grid, refined around its best.

    Independent of the search: only `simulate` and `account` are used.
    """
    flowsheet = model.flowsheet
    reagents = range(len(flowsheet.reagents))
    places = ["waste", *(p.name for p in flowsheet.products)]
    best = (np.inf, None)
    for stages in (1, 2):
        for leads in itertools.product(reagents, repeat=stages):
            top = np.array([_cap(model, r) for r in leads])
            low, high = np.zeros(stages), top
            for round_ in range(refinements):
                axes = [
                    np.linspace(a, b, points if stages == 2 else 4000)
                    for a, b in zip(low, high, strict=True)
                ]
                if round_ == 0:
                    axes = [np.unique(np.concatenate([x, np.geomspace(t * 1e-4, t, points)]))
                            for x, t in zip(axes, top, strict=True)]  # fmt: skip
                doses = np.array(list(itertools.product(*axes)))
                full = np.zeros((len(doses), stages, len(flowsheet.reagents)))
                for k, r in enumerate(leads):
                    full[:, k, r] = doses[:, k]
                run = simulate(
                    model, Orders.of_doses(full, np.zeros((len(doses), stages, 0), bool))
                )
                winner = None
                for where in itertools.product(places, repeat=stages):
                    books = account(run, where)
                    good = run.ok & (books.excess.max(axis=1) <= MET_TOLERANCE)
                    cost = np.where(good, books.cost_USD_per_h, np.inf)
                    i = int(cost.argmin())
                    if winner is None or cost[i] < winner[0]:
                        winner = (cost[i], i, where)
                if not np.isfinite(winner[0]):
                    break
                if winner[0] < best[0]:
                    best = (winner[0], (leads, winner[2], doses[winner[1]]))
                step = (high - low) / points * 3.0
                low = np.maximum(doses[winner[1]] - step, 0.0)
                high = doses[winner[1]] + step
    return best


def _cap(model, reagent):
    """Dose (kg/h) that a grid need not exceed: twice the charge of all metals and acid."""
    charge = np.maximum(model.system.component_charge, 0.0)
    eq = float(abs(model.feed.totals[0]) @ charge)
    return 1.2 * eq / model.reagent_rates[reagent, 0]


@pytest.mark.parametrize("document", [ZINC, RINSE], ids=["zinc", "rinse"])
def test_no_dose_grid_beats_the_optimiser(document):
    flowsheet = from_document(document, "case")
    design = dosewright.optimise(flowsheet, time_limit_s=40.0)
    assert design.feasible
    cost, found = grid_best(PlantModel.of(flowsheet))
    assert np.isfinite(cost), "the grid is too coarse to be a test"
    turnover = sum(abs(line.USD_per_h) for line in design.costs)
    assert design.cost_per_hour <= cost + 0.01 * max(abs(cost), 0.2 * turnover), found


@pytest.mark.parametrize("name", ["corvane_adit", "tessaly_row"])
def test_shipped_scenario_is_solved_verified_and_never_called_feasible_in_vain(name, tmp_path):
    from dosewright.design import save

    flowsheet = dosewright.load(f"flowsheets/{name}.toml")
    began = time.monotonic()
    design = dosewright.optimise(flowsheet)
    seconds = time.monotonic() - began
    assert design.feasible
    again = dosewright.evaluate(flowsheet, design.decisions)
    assert again.feasible
    assert again.cost_per_hour == pytest.approx(design.cost_per_hour, rel=1e-9)
    for limit in again.limits:
        sign = 1.0 if limit.sense == "max" else -1.0
        slack = MET_TOLERANCE * (abs(limit.bound) if limit.unit else 1.0)
        assert sign * (limit.value - limit.bound) <= slack
    file = tmp_path / "design.json"
    save(design, file)
    assert dosewright.verify(file).ok
    # the search keeps to its own limit; what the machine adds is not a test
    assert seconds < 120.0


def test_the_search_beats_the_train_in_the_file():
    flowsheet = dosewright.load("flowsheets/every_key.toml")
    given = dosewright.evaluate(flowsheet, flowsheet.decisions)
    design = dosewright.optimise(flowsheet, time_limit_s=20.0)
    assert design.feasible
    assert not given.feasible or design.cost_per_hour <= given.cost_per_hour + 1e-9


def test_impossible_limits_are_answered_with_what_is_missed():
    document = ZINC | {"effluent": {"pH": "6.0 to 6.5", "dissolved": {"Zn": "0.001 mg/L"}}}
    design = dosewright.optimise(from_document(document, "case"), time_limit_s=15.0)
    assert not design.feasible
    assert any(
        "Zn" in s.limit or "recovery" in s.limit or "grade" in s.limit for s in design.shortfalls
    )
    assert all(s.missed_by > 0.0 for s in design.shortfalls)


def test_polish_does_not_depend_on_its_random_starts():
    model = PlantModel.of(from_document(ZINC, "case"))
    anchors = feed_anchors(model)
    train = (Step(0, -1, "waste"), Step(1, -1, "zinc cake"))
    costs = []
    for seed in range(4):
        result = polish_structure(
            model, train, rng=np.random.default_rng(seed), ln_activity=anchors.ln_activity, shakes=2
        )
        assert result.feasible
        costs.append(result.cost_USD_per_h)
    assert max(costs) - min(costs) <= 1e-3 * abs(np.mean(costs)) + 1e-3


def test_gradients_of_the_polish_agree_with_differences_in_coordinates():
    from dosewright.search.polish import _gradients, _Point, log_excess

    model = PlantModel.of(from_document(ZINC, "case"))
    problem = TrainProblem(model, (Step(0, -1, "waste"), Step(1, -1, "zinc cake")))
    run = problem.run_pH(np.array([[4.4, 8.8]]))
    point = _Point.of(problem, run, problem.coordinates_of(run))
    gradient, jacobian, _, usable = _gradients(problem, point, np.array([0]))
    assert usable.all()
    for column in range(2):
        moved = point.u.copy()
        moved[0, column] += 1e-5
        there = problem.run_coordinates(moved, point.doses)
        cost, _, books = problem.judge(there)
        assert (cost - point.cost)[0] / 1e-5 == pytest.approx(
            gradient[0, column], rel=2e-3, abs=1e-3
        )
        slope = (log_excess(books) - point.excess)[0] / 1e-5
        assert slope == pytest.approx(jacobian[0, :, column], rel=5e-3, abs=1e-3)


def test_lattice_agrees_with_the_exact_model_once_anchored_on_the_design():
    from dosewright.search.anchors import anchors_of_run

    model = PlantModel.of(from_document(ZINC, "case"))
    anchors = feed_anchors(model)
    train = (Step(0, -1, "waste"), Step(1, -1, "zinc cake"))
    best = polish_structure(
        model, train, rng=np.random.default_rng(0), ln_activity=anchors.ln_activity, shakes=2
    )
    problem = TrainProblem(model, train)
    run = problem.run_doses(np.array([[best.dose_kg_per_h[0, 0], best.dose_kg_per_h[1, 1]]]))
    lattice = Lattice(model, anchors_of_run(model, run), 2)
    lattice.restrict(train)
    proposal = lattice.propose(10.0)
    assert proposal is not None
    turnover = sum(abs(c.USD_per_h[0]) for c in account(run, ["waste", "zinc cake"]).costs)
    assert abs(proposal.value_USD_per_h - best.cost_USD_per_h) <= 0.05 * turnover


def test_forbidden_trains_are_not_proposed_again():
    model = PlantModel.of(from_document(ZINC, "case"))
    lattice = Lattice(model, feed_anchors(model), 2)
    seen = set()
    for _ in range(4):
        proposal = lattice.propose(10.0)
        if proposal is None:
            break
        assert proposal.structure not in seen
        seen.add(proposal.structure)
        lattice.forbid(proposal.structure)
    assert len(seen) >= 2
