"""Costs and limits of simulated trains, and `evaluate`: one train judged in full.

`account` works on whole batches (the search uses it); `evaluate` turns one trial into plain,
named results for people and files.
"""

from __future__ import annotations

from collections.abc import Mapping, Sequence
from dataclasses import dataclass, field
from typing import Any

import numpy as np
from numpy.typing import NDArray

from dosewright.cautions import Caution, cautions_of
from dosewright.chemistry.activity import WATER_KG_PER_MOL
from dosewright.errors import Fault, InputError, NotConverged
from dosewright.flowsheet import Flowsheet, Product, check_decisions
from dosewright.plant import ChargeClosure, Orders, PlantModel, Run, simulate
from dosewright.streams import (
    CakeFigures,
    StageReport,
    StreamRow,
    balance_of,
    cake_figures,
    label_kg_per_h,
    stage_reports,
    stream_table,
)

Array = NDArray[np.float64]

#: a limit counts as met when missed by no more than a millionth of its bound (of a pH unit for pH):
#: so a tank held at the one pH that two limits leave open counts as meeting both
MET_TOLERANCE = 1e-6


@dataclass(frozen=True, eq=False)
class LimitBatch:
    """One limit over ``N`` trials: ``value`` must not exceed (``max``) or fall below (``min``)."""

    name: str
    where: str
    sense: str
    value: Array
    bound: float
    unit: str
    scale: float

    @property
    def excess(self) -> Array:
        """(N,) by how much the limit is missed, over its scale; negative where it is met."""
        sign = 1.0 if self.sense == "max" else -1.0
        return sign * (self.value - self.bound) / self.scale


@dataclass(frozen=True, eq=False)
class CostBatch:
    """One cost line over ``N`` trials."""

    group: str
    item: str
    quantity: Array
    quantity_unit: str
    price_text: str
    USD_per_h: Array


@dataclass(frozen=True, eq=False)
class Account:
    """Costs and limits of a batch of trials with the same destinations of cakes."""

    costs: tuple[CostBatch, ...]
    limits: tuple[LimitBatch, ...]

    @property
    def cost_USD_per_h(self) -> Array:
        """(N,) the objective: reagents, water, oxidants and disposal less credits."""
        return np.asarray(np.sum([line.USD_per_h for line in self.costs], axis=0))

    @property
    def excess(self) -> Array:
        """(N, limits) scaled excess of every limit."""
        return np.stack([limit.excess for limit in self.limits], axis=1)


def _effluent_limits(run: Run) -> list[LimitBatch]:
    model = run.model
    spec = model.flowsheet.effluent
    last = run.stages[-1].states if run.stages else model.feed_states
    pH = last.pH if run.stages else np.full(run.count, model.feed_states.pH[0])
    limits = []
    if spec.pH_min is not None:
        limits.append(LimitBatch("pH", "effluent", "min", pH, spec.pH_min, "", 1.0))
    if spec.pH_max is not None:
        limits.append(LimitBatch("pH", "effluent", "max", pH, spec.pH_max, "", 1.0))
    solvent = solvent_kg_per_h(run)
    litres = model.volume_L_per_h(run.effluent, solvent)
    ks = model.system.solids_count
    dissolved = run.effluent.totals
    fines = (
        run.effluent.solids @ model.system.A[:ks]
        + run.effluent.unreacted @ model.reagent_components
    )
    for kind, amounts, rows in (
        ("dissolved", dissolved, spec.dissolved),
        ("total", dissolved + fines, spec.total),
    ):
        for row in rows:
            weights = np.array([row.components.get(c, 0.0) for c in model.system.components])
            mg_per_L = np.asarray(amounts @ weights) * row.g_per_mol * 1000.0 / litres
            limits.append(
                LimitBatch(
                    f"{row.label}, {kind}",
                    "effluent",
                    "max",
                    mg_per_L,
                    row.max_mg_per_L,
                    "mg/L",
                    row.max_mg_per_L,
                )
            )
    return limits


def solvent_kg_per_h(run: Run) -> Array:
    """(N,) solvent water in the effluent, kg/h."""
    if not run.stages:
        states = run.model.feed_states
        bound = float((states.molality @ run.model.system.nu_water)[0])
        return run.effluent.water / (1.0 / WATER_KG_PER_MOL + bound)
    last = run.stages[-1]
    return last.solvent_kg_per_h - last.cake_solvent_kg_per_h


def _reagent_limits(run: Run, orders_used: NDArray[np.bool_]) -> list[LimitBatch]:
    """Limits that come with reagents and oxidants; ``orders_used`` (K, R + O) says which apply."""
    flowsheet = run.model.flowsheet
    limits = []
    reagents = list(flowsheet.reagents.values())
    flow = flowsheet.feed.flow_m3_per_h
    for k, stage in enumerate(run.stages):
        where = f"stage {k + 1}"
        for i, reagent in enumerate(reagents):
            if not orders_used[k, i]:
                continue
            if reagent.max_pH is not None:
                limits.append(
                    LimitBatch(
                        f"pH with {reagent.name}",
                        where,
                        "max",
                        stage.states.pH,
                        reagent.max_pH,
                        "",
                        1.0,
                    )
                )
            if reagent.max_dose_kg_per_m3 is not None:
                limits.append(
                    LimitBatch(
                        f"dose of {reagent.name}",
                        where,
                        "max",
                        stage.dose_kg_per_h[:, i] / flow,
                        reagent.max_dose_kg_per_m3,
                        "kg/m3",
                        reagent.max_dose_kg_per_m3,
                    )
                )
        for o, agent in enumerate(flowsheet.oxidants.values()):
            if orders_used[k, len(reagents) + o] and agent.min_pH is not None:
                limits.append(
                    LimitBatch(
                        f"pH with {agent.name}",
                        where,
                        "min",
                        stage.states.pH,
                        agent.min_pH,
                        "",
                        1.0,
                    )
                )
    return limits


def _sum(rows: Sequence[Array], count: int) -> Array:
    return np.sum(rows, axis=0) if rows else np.zeros(count)


def _product_limits(
    run: Run, product: Product, cakes: Sequence[CakeFigures]
) -> tuple[list[LimitBatch], dict[str, Array]]:
    """Limits of one product and the kilograms per hour of each metal it sells."""
    model, count = run.model, run.count
    dry = _sum([c.dry_kg for c in cakes], count)
    safe_dry = np.where(dry > 0.0, dry, 1.0)
    kg = {
        label: _sum([c.element_kg[label] for c in cakes], count)
        for label in (*product.metals, *product.max_impurity)
    }
    metal = _sum([kg[m] for m in product.metals], count)
    fed = sum(float(label_kg_per_h(model, m, model.feed.totals)[0]) for m in product.metals)
    limits = []
    where = product.name
    metals = "+".join(product.metals)
    if product.min_recovery is not None:
        limits.append(
            LimitBatch(
                f"recovery of {metals}",
                where,
                "min",
                100.0 * metal / max(fed, 1e-300),
                100.0 * product.min_recovery,
                "%",
                100.0 * product.min_recovery,
            )
        )
    if product.min_grade is not None:
        limits.append(
            LimitBatch(
                f"grade, {metals} dry",
                where,
                "min",
                100.0 * metal / safe_dry,
                100.0 * product.min_grade,
                "%",
                100.0 * product.min_grade,
            )
        )
    for label, ceiling in product.max_impurity.items():
        limits.append(
            LimitBatch(
                f"{label} dry",
                where,
                "max",
                100.0 * kg[label] / safe_dry,
                100.0 * ceiling,
                "%",
                100.0 * ceiling,
            )
        )
    for family, least in product.min_family.items():
        share = _sum([c.family_kg[family] for c in cakes], count) / safe_dry
        limits.append(
            LimitBatch(
                f"{family} solids dry",
                where,
                "min",
                100.0 * share,
                100.0 * least,
                "%",
                100.0 * least,
            )
        )
    return limits, {m: kg[m] for m in product.metals}


def _in_use(run: Run) -> NDArray[np.bool_]:
    """Reagents and oxidants with any dose in the batch, (K, R + O)."""
    rows = [
        np.concatenate(
            [
                (s.dose_kg_per_h > 0.0).any(axis=0),
                ((s.oxidant_kg_per_h + s.oxidant_m3_per_h) > 0.0).any(axis=0),
            ]
        )
        for s in run.stages
    ]
    flowsheet = run.model.flowsheet
    columns = len(flowsheet.reagents) + len(flowsheet.oxidants)
    return np.array(rows, dtype=np.bool_).reshape(len(rows), columns)


def account(
    run: Run, destinations: Sequence[str], used: NDArray[np.bool_] | None = None
) -> Account:
    """Cost and judge a batch whose cakes go to ``destinations`` (one per stage).

    ``used`` (K, R + O) names the reagents and oxidants whose own limits apply; left out, those
    with any dose in the batch.
    """
    model, flowsheet = run.model, run.model.flowsheet
    count = run.count
    reagents = list(flowsheet.reagents.values())
    oxidants = list(flowsheet.oxidants.values())
    if used is None:
        used = _in_use(run)
    costs: list[CostBatch] = []

    def cost(group: str, item: str, quantity: Array, unit: str, price: float, per: str) -> None:
        costs.append(
            CostBatch(group, item, quantity, unit, f"{price:,.6g} USD/{per}", quantity * price)
        )

    prices = flowsheet.prices
    for i, reagent in enumerate(reagents):
        tonnes = _sum([s.dose_kg_per_h[:, i] for s in run.stages], count) / 1000.0
        if used[:, i].any():
            cost("reagent", reagent.name, tonnes, "t/h", reagent.price_USD_per_t, "t")
    for o, agent in enumerate(oxidants):
        if not used[:, len(reagents) + o].any():
            continue
        if agent.price_USD_per_m3 is not None:
            m3 = _sum([s.oxidant_m3_per_h[:, o] for s in run.stages], count)
            cost("oxidant", agent.name, m3, "m3/h", agent.price_USD_per_m3, "m3")
        else:
            tonnes = _sum([s.oxidant_kg_per_h[:, o] for s in run.stages], count) / 1000.0
            cost("oxidant", agent.name, tonnes, "t/h", agent.price_USD_per_t or 0.0, "t")
    water = _sum([s.make_up_water_kg_per_h for s in run.stages], count) / 1000.0
    if prices.water_USD_per_m3:
        cost("water", "reagent make-up water", water, "m3/h", prices.water_USD_per_m3, "m3")

    figures = [cake_figures(model, s.cake, s.cake_solvent_kg_per_h) for s in run.stages]
    wet = _sum(
        [f.wet_kg for f, d in zip(figures, destinations, strict=True) if d == "waste"], count
    )
    waste = flowsheet.waste_class
    if any(d == "waste" for d in destinations):
        cost(
            "disposal", f"{waste} sludge, wet", wet / 1000.0, "t/h",
            prices.disposal_USD_per_wet_t[waste], "t",
        )  # fmt: skip

    limits = [*_effluent_limits(run), *_reagent_limits(run, used)]
    for product in flowsheet.products:
        cakes = [f for f, d in zip(figures, destinations, strict=True) if d == product.name]
        if product.optional and not cakes:
            continue
        rows, sold = _product_limits(run, product, cakes)
        limits += rows
        for metal, kg in sold.items():
            share = product.payable.get(metal, 0.0)
            if cakes and share > 0.0:
                price = prices.metal_USD_per_t[metal]
                costs.append(
                    CostBatch(
                        "credit",
                        f"{metal} in {product.name}, {100 * share:g} % payable",
                        kg / 1000.0,
                        "t/h",
                        f"{price:,.6g} USD/t",
                        -kg / 1000.0 * price * share,
                    )
                )
    if not costs:
        costs.append(CostBatch("none", "nothing is done", np.zeros(count), "", "", np.zeros(count)))
    return Account(tuple(costs), tuple(limits))


# ---------------------------------------------------------------------------------------------
# one trial, in words and plain data


@dataclass(frozen=True)
class Limit:
    """One limit of one trial, with its margin (positive when met)."""

    name: str
    where: str
    sense: str
    value: float
    bound: float
    unit: str
    margin: float
    met: bool


@dataclass(frozen=True)
class Shortfall:
    """A limit that is missed, and by how much, in the limit's unit."""

    limit: str
    where: str
    value: float
    bound: float
    unit: str
    missed_by: float

    def __str__(self) -> str:
        """One line."""
        unit = f" {self.unit}" if self.unit else ""
        return (
            f"{self.where}: {self.limit} is {self.value:.4g}{unit}, limit {self.bound:.4g}{unit}, "
            f"missed by {self.missed_by:.3g}{unit}"
        )


@dataclass(frozen=True)
class CostLine:
    """One line of the cost account; credits are negative."""

    group: str
    item: str
    quantity: float
    quantity_unit: str
    price: str
    USD_per_h: float


@dataclass(frozen=True)
class Trial:
    """One train, solved in full: cost, limits, streams.

    Attributes
    ----------
    decisions: plain data that `evaluate` accepts back.
    cost_per_hour: USD/h, disposal and credits included; the sum of ``costs``.
    feasible: every limit met by the nonlinear solution.
    shortfalls: the limits missed, with by how much.
    limits, costs, stages, streams, cautions: the tables of the report.
    closure: how the feed assay was closed.
    balance: relative closure of every component, of charge and of water over the whole train.
    """

    flowsheet: Flowsheet
    decisions: dict[str, Any]
    cost_per_hour: float
    feasible: bool
    shortfalls: list[Shortfall]
    limits: list[Limit]
    costs: list[CostLine]
    stages: list[StageReport]
    streams: list[StreamRow]
    cautions: list[Caution]
    closure: ChargeClosure
    balance: dict[str, float] = field(default_factory=dict)
    notes: list[str] = field(default_factory=list)


def orders_of(model: PlantModel, decisions: Mapping[str, Any]) -> tuple[Orders, list[str]]:
    """Turn plain decisions into orders of one trial and the destinations of its cakes."""
    flowsheet = model.flowsheet
    reagents, oxidants = list(flowsheet.reagents), list(flowsheet.oxidants)
    stages = decisions["stages"]
    count = len(stages)
    dose = np.zeros((1, count, len(reagents)))
    oxidant = np.zeros((1, count, len(oxidants)), dtype=bool)
    target = np.full((1, count), np.nan)
    lead = np.zeros((1, count), dtype=np.int64)
    for k, stage in enumerate(stages):
        for name, amount in stage.get("reagents", {}).items():
            i = reagents.index(name)
            if "pH" in amount:
                target[0, k], lead[0, k] = float(amount["pH"]), i
            elif "dose_kg_per_h" in amount:
                dose[0, k, i] = float(amount["dose_kg_per_h"])
            else:
                dose[0, k, i] = float(amount["dose_kg_per_m3"]) * flowsheet.feed.flow_m3_per_h
        if stage.get("oxidant"):
            oxidant[0, k, oxidants.index(stage["oxidant"])] = True
    orders = Orders.of_doses(dose, oxidant).to_pH(lead, target)
    return orders, [s.get("cake", "waste") for s in stages]


def decisions_of(
    model: PlantModel, dose_kg_per_h: Array, oxidant: NDArray[np.bool_], destinations: Sequence[str]
) -> dict[str, Any]:
    """Plain decisions from doses (K, R) kg/h and oxidants (K, O)."""
    flow = model.flowsheet.feed.flow_m3_per_h
    reagents, oxidants = list(model.flowsheet.reagents), list(model.flowsheet.oxidants)
    stages = []
    for k, destination in enumerate(destinations):
        stages.append(
            {
                "reagents": {
                    reagents[i]: {"dose_kg_per_m3": float(dose_kg_per_h[k, i] / flow)}
                    for i in np.flatnonzero(dose_kg_per_h[k] > 0.0)
                },
                "oxidant": next((oxidants[o] for o in np.flatnonzero(oxidant[k])), None),
                "cake": destination,
            }
        )
    return {"stages": stages}


def evaluate(flowsheet: Flowsheet, decisions: Mapping[str, Any]) -> Trial:
    """Solve one train in full and judge it.

    ``decisions`` is plain data: ``{"stages": [{"reagents": {"hydrated lime": {"dose_kg_per_m3":
    1.2}}, "oxidant": None, "cake": "waste"}]}``; in place of a dose, ``{"pH": 6.0}`` asks for the
    dose that gives that pH. Doses are kg of reagent as supplied per m3 of feed.

    Raises
    ------
    InputError
        For decisions that do not fit the flowsheet, or a pH out of reach.
    NotConverged
        When a vessel was not solved.
    """
    check_decisions(flowsheet, decisions)
    return evaluate_on(PlantModel.of(flowsheet), decisions)


def evaluate_on(model: PlantModel, decisions: Mapping[str, Any]) -> Trial:
    """As `evaluate`, on a model already built."""
    orders, destinations = orders_of(model, decisions)
    run = simulate(model, orders)
    if not run.ok[0]:
        if "reach" in run.why_not[0]:
            raise InputError(
                model.flowsheet.source_name,
                [Fault("train", run.why_not[0], "ask for another pH or name another reagent")],
            )
        raise NotConverged(run.why_not[0])
    return report_run(run, destinations)


def report_run(run: Run, destinations: Sequence[str]) -> Trial:
    """Write the one trial of ``run`` out as a `Trial`."""
    model = run.model
    books = account(run, destinations)
    limits = [_limit(row) for row in books.limits]
    costs = [
        CostLine(
            c.group,
            c.item,
            float(c.quantity[0]),
            c.quantity_unit,
            c.price_text,
            float(c.USD_per_h[0]),
        )
        for c in books.costs
    ]
    stages = stage_reports(run, destinations)
    dose = np.array([s.dose_kg_per_h[0] for s in run.stages]).reshape(
        len(run.stages), len(model.flowsheet.reagents)
    )
    used = np.array(
        [(s.oxidant_kg_per_h[0] + s.oxidant_m3_per_h[0]) > 0.0 for s in run.stages], dtype=bool
    ).reshape(len(run.stages), len(model.flowsheet.oxidants))
    return Trial(
        flowsheet=model.flowsheet,
        decisions=decisions_of(model, dose, used, destinations),
        cost_per_hour=float(sum(c.USD_per_h for c in costs)),
        feasible=all(row.met for row in limits),
        shortfalls=[
            Shortfall(r.name, r.where, r.value, r.bound, r.unit, -r.margin)
            for r in limits
            if not r.met
        ],
        limits=limits,
        costs=costs,
        stages=stages,
        streams=stream_table(run, destinations),
        cautions=cautions_of(run),
        closure=model.closure,
        balance=balance_of(run),
        notes=_range_notes(run),
    )


def _range_notes(run: Run) -> list[str]:
    """Say where the activity model is used beyond its range."""
    activity = run.model.activity
    limit = activity.max_ionic_strength_mol_per_kg
    strengths = {"feed": float(run.model.feed_states.ionic_strength[0])}
    for k, stage in enumerate(run.stages, start=1):
        strengths[f"stage {k}"] = float(stage.states.ionic_strength[0])
    high = {where: value for where, value in strengths.items() if value > limit > 0.0}
    if not high:
        return []
    listed = ", ".join(f"{where} {value:.2g}" for where, value in high.items())
    return [
        f"ionic strength above the {limit:g} mol/kg up to which the {activity.name} activity model is "
        f"used ({listed} mol/kg): the figures are extrapolated"
    ]


def _limit(row: LimitBatch) -> Limit:
    value = float(row.value[0])
    sign = 1.0 if row.sense == "max" else -1.0
    return Limit(
        row.name, row.where, row.sense, value, row.bound, row.unit,
        margin=sign * (row.bound - value), met=float(row.excess[0]) <= MET_TOLERANCE,
    )  # fmt: skip
