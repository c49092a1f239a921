"""The superstructure as a mixed-integer linear program over anchors, solved by HiGHS.

Each position chooses a reagent and its dose, an oxidant, an anchor (which fixes pH and, in log
space, every metal's ceiling) and where its cake goes. Balances of metals, ligands and protons are
then linear; so are the cake's masses, limits and costs. Amounts are mmol per kg of feed water, costs
USD per m3 of feed. The program proposes; the exact model decides (see ``polish``).
"""

from __future__ import annotations

from collections.abc import Iterable
from dataclasses import dataclass
from typing import Any

import numpy as np
import pyomo.environ as pyo
from numpy.typing import NDArray
from pyomo.contrib.appsi.solvers import Highs

from dosewright.chemistry.activity import WATER_KG_PER_MOL
from dosewright.errors import DosewrightError
from dosewright.plant import PlantModel
from dosewright.search.anchors import Anchors
from dosewright.search.polish import Step, Structure

Array = NDArray[np.float64]

LIMIT_SLACK = 3.0  # effluent limits are relaxed by this; the exact model enforces the true ones
QUALITY_SLACK = 0.97  # product limits likewise, by a few per cent
PH_SLACK = 0.3
#: protons that need not balance, mmol per kg: one per cent of the feed's equivalents, or in dilute
#: liquors up to four. Anchors are near the liquors met, not on them, and a sulfide dose that must
#: match its metals to the last per mille would find no anchor at all
PROTON_SLACK = (0.01, 0.04, 0.3)
#: how far the dissolved ligand may lie (below, above) what the anchor holds, as factors. Above it for
#: sulfate the anchor's ceiling of calcium would promise too little gypsum in the cake
LIGAND_WINDOW = {"CO3-2": (3.0, 3.0), "HS-": (6.0, 6.0), "SO4-2": (1.3, 1.2)}
SMALL_MMOL = 1e-3
LEAST_DOSE = 0.003  # of the largest: a stage that does nothing is a train with one stage fewer


@dataclass(frozen=True, eq=False)
class Proposal:
    """What the lattice proposes: a structure, its value and where each stage stands."""

    structure: Structure
    value_USD_per_h: float
    anchor: NDArray[np.int64]  # (K,)
    dose_kg_per_h: Array  # (K,) of the stage's reagent


class Lattice:
    """The mixed-integer program for trains of ``stages`` used positions."""

    def __init__(self, model: PlantModel, anchors: Anchors, stages: int) -> None:
        self.plant = model
        self.anchors = anchors
        self.stages = stages
        flowsheet = model.flowsheet
        self.reagents = list(flowsheet.reagents.values())
        self.oxidants = list(flowsheet.oxidants.values())
        self.destinations = ["waste", *(p.name for p in flowsheet.products)]
        self.water_kg = float(model.feed.water[0]) * WATER_KG_PER_MOL  # per hour
        system = model.system
        self.index = [system.components.index(c) for c in anchors.tracked]
        h = system.components.index("H+")
        self.feed = model.feed.totals[0, self.index] / self.water_kg * 1000.0
        self.feed_H = float(model.feed.totals[0, h]) / self.water_kg * 1000.0
        # protons on what the lattice does not track are folded into each anchor
        brought = model.reagent_components[:, self.index]  # mol per mol of reagent
        self.brought = brought
        self.brought_H = model.reagent_components[:, h]
        self.cap = self.feed.copy()
        iron = [c for c in ("Fe+2", "Fe+3") if c in anchors.tracked]
        if len(iron) == 2:
            a, b = (anchors.tracked.index(c) for c in iron)
            self.cap[b] += self.cap[a]
        charge = system.component_charge[self.index]
        self.equivalents = float((self.feed * np.maximum(charge, 0.0)).sum())
        self.dose_max = self._dose_max()
        self.cap += brought.T.clip(min=0.0) @ self.dose_max
        self.solver: Any = None
        self.program = self._build()

    # -- data ---------------------------------------------------------------------------------

    def _dose_max(self) -> Array:
        """Largest sensible dose, mmol per kg: all equivalents of the feed, one and a half times."""
        equivalents = self.equivalents + abs(self.feed_H)
        per_mol = np.maximum(abs(self.brought_H), 1.0)
        for i, c in enumerate(self.anchors.tracked):
            if c == "HS-":
                per_mol = np.where(self.brought[:, i] > 0.0, 1.0, per_mol)
        return 1.5 * equivalents / per_mol + 1.0

    def _solid_kg(self) -> tuple[Array, Array]:
        """Dry and wet kg per mol of metal dropped, (H, J)."""
        anchors, model = self.anchors, self.plant
        molar = model.solid_g_per_mol / 1000.0
        water = model.water_per_dry_kg
        salts = float(model.feed.totals[0] @ model.component_g_per_mol) / 1000.0 / self.water_kg
        dry = np.zeros(anchors.solid.shape)
        wet = np.zeros(anchors.solid.shape)
        for a in range(anchors.count):
            for t in range(anchors.metals):
                k = anchors.solid[a, t]
                if k >= 0:
                    per_metal = molar[k] / model.system.A[k, self.index[t]]
                    dry[a, t] = per_metal * (1.0 + water[k] * salts)
                    wet[a, t] = per_metal * (1.0 + water[k] * (1.0 + salts))
        return dry, wet

    # -- program ------------------------------------------------------------------------------

    def _build(self) -> pyo.ConcreteModel:
        anchors = self.anchors
        m = pyo.ConcreteModel()
        K, H, J = range(self.stages), range(anchors.count), range(len(anchors.tracked))
        M = range(anchors.metals)
        R, O = range(len(self.reagents)), range(len(self.oxidants))
        P = range(len(self.destinations))
        m.z = pyo.Var(K, H, domain=pyo.Binary)
        m.w = pyo.Var(K, R, domain=pyo.Binary)
        m.ox = pyo.Var(K, O, domain=pyo.Binary)
        m.y = pyo.Var(K, P, domain=pyo.Binary)
        m.b = pyo.Var(K, M, domain=pyo.Binary)
        m.dose = pyo.Var(K, R, bounds=lambda _m, _k, r: (0.0, self.dose_max[r]))
        m.D = pyo.Var(K, J, H, domain=pyo.NonNegativeReals)
        dropping = [(a, t) for a in H for t in M if anchors.solid[a, t] >= 0]
        m.P = pyo.Var(K, dropping, domain=pyo.NonNegativeReals)
        m.x = pyo.Var(K, domain=pyo.NonNegativeReals)  # oxidised
        m.vent = pyo.Var(K, J, domain=pyo.NonNegativeReals)
        size = self.equivalents + abs(self.feed_H)
        share, most_share, most = PROTON_SLACK
        give = max(share * size, min(most_share * size, most))
        m.loose = pyo.Var(K, bounds=(-give, give))
        m.cuts = pyo.ConstraintList()
        by_metal: list[list[int]] = [[a for a, t in dropping if t == j] for j in M]

        m.one_anchor = pyo.Constraint(K, rule=lambda m, k: sum(m.z[k, a] for a in H) == 1)
        m.one_reagent = pyo.Constraint(K, rule=lambda m, k: sum(m.w[k, r] for r in R) <= 1)
        m.one_destination = pyo.Constraint(K, rule=lambda m, k: sum(m.y[k, p] for p in P) == 1)
        m.used = pyo.Constraint(
            K,
            rule=lambda m, k: sum(m.w[k, r] for r in R) + sum(m.ox[k, o] for o in O) >= 1,
        )
        m.dose_on = pyo.Constraint(
            K, R, rule=lambda m, k, r: m.dose[k, r] <= self.dose_max[r] * m.w[k, r]
        )
        m.dose_worth = pyo.Constraint(
            K, R, rule=lambda m, k, r: m.dose[k, r] >= LEAST_DOSE * self.dose_max[r] * m.w[k, r]
        )
        if self.oxidants:
            m.one_oxidant = pyo.Constraint(K, rule=lambda m, k: sum(m.ox[k, o] for o in O) <= 1)

        ceiling = np.minimum(
            np.where(np.isfinite(anchors.ceiling), anchors.ceiling * 1e3, 1e9), self.cap[None, :]
        )
        for k in K:
            for j in J:
                is_metal = j < anchors.metals
                for a in H:
                    if is_metal:
                        m.cuts.add(m.D[k, j, a] <= float(ceiling[a, j]) * m.z[k, a])
                    elif anchors.tracked[j] in LIGAND_WINDOW:
                        below, above = LIGAND_WINDOW[anchors.tracked[j]]
                        top = anchors.ligand[a, j] * 1e3 * above + SMALL_MMOL
                        m.cuts.add(m.D[k, j, a] <= float(min(top, self.cap[j])) * m.z[k, a])
                        low = anchors.ligand[a, j] * 1e3 / below - SMALL_MMOL
                        if low > 0.0:
                            m.cuts.add(m.D[k, j, a] >= float(min(low, self.cap[j])) * m.z[k, a])
                    else:
                        m.cuts.add(m.D[k, j, a] <= float(self.cap[j]) * m.z[k, a])
            for a, j in dropping:
                m.cuts.add(m.P[k, a, j] <= float(self.cap[j]) * m.z[k, a])
            for j in M:
                m.cuts.add(sum(m.P[k, a, j] for a in by_metal[j]) <= float(self.cap[j]) * m.b[k, j])
                # a solid that is present holds its metal at the ceiling
                m.cuts.add(
                    sum(m.D[k, j, a] for a in H)
                    >= sum(float(ceiling[a, j]) * m.z[k, a] for a in H)
                    - float(self.cap[j]) * (1 - m.b[k, j])
                )
        self._balances(m, dropping)
        self._windows(m)
        self._products(m, dropping)
        return m

    def _inflow(self, m: pyo.ConcreteModel, k: int, j: int) -> Any:
        if k == 0:
            return float(self.feed[j])
        return sum(m.D[k - 1, j, a] for a in range(self.anchors.count))

    def _proton_stock(self, m: pyo.ConcreteModel, k: int) -> Any:
        anchors = self.anchors
        return sum(
            float(anchors.base_protons[a] * 1e3) * m.z[k, a]
            + sum(
                float(anchors.protons[a, j]) * m.D[k, j, a]
                for j in range(len(anchors.tracked))
                if anchors.protons[a, j] != 0.0
            )
            for a in range(anchors.count)
        )

    def _balances(self, m: pyo.ConcreteModel, dropping: list[tuple[int, int]]) -> None:
        anchors = self.anchors
        R = range(len(self.reagents))
        names = anchors.tracked
        fe2 = names.index("Fe+2") if "Fe+2" in names else -1
        fe3 = names.index("Fe+3") if "Fe+3" in names else -1
        vented = {"CO3-2"} if self.plant.ln_pressure else set()
        h0 = None
        for k in range(self.stages):
            for j in range(len(names)):
                leaving = sum(
                    float(anchors.drops[a, t, j]) * m.P[k, a, t]
                    for a, t in dropping
                    if anchors.drops[a, t, j] != 0.0
                )
                change = 0.0
                if j == fe2:
                    change = -m.x[k]
                elif j == fe3:
                    change = m.x[k]
                vent = m.vent[k, j] if names[j] in vented else 0.0
                if names[j] not in vented:
                    m.vent[k, j].fix(0.0)
                m.cuts.add(
                    sum(m.D[k, j, a] for a in range(anchors.count)) + leaving + vent
                    == self._inflow(m, k, j)
                    + sum(float(self.brought[r, j]) * m.dose[k, r] for r in R)
                    + change
                )
            protons_in = self.feed_H if k == 0 else h0
            leaving_H = sum(float(anchors.drops_H[a, t]) * m.P[k, a, t] for a, t in dropping)
            # carbon dioxide takes two protons along for each carbonate
            gone = sum(2.0 * m.vent[k, j] for j in range(len(names)) if names[j] in vented)
            stock = self._proton_stock(m, k)
            m.cuts.add(
                stock + leaving_H + gone + m.loose[k]
                == protons_in + sum(float(self.brought_H[r]) * m.dose[k, r] for r in R) - m.x[k]
            )
            h0 = stock
            on = sum(m.ox[k, o] for o in range(len(self.oxidants)))
            if fe2 < 0 or not self.oxidants:
                m.x[k].fix(0.0)
                continue
            iron = self._inflow(m, k, fe2)
            top = float(self.cap[fe2])
            m.cuts.add(m.x[k] <= top * on)
            for o, agent in enumerate(self.oxidants):
                m.cuts.add(m.x[k] <= agent.conversion * iron + top * (1 - m.ox[k, o]))
                m.cuts.add(m.x[k] >= agent.conversion * iron - top * (1 - m.ox[k, o]))

    def _windows(self, m: pyo.ConcreteModel) -> None:
        anchors, flowsheet = self.anchors, self.plant.flowsheet
        for k in range(self.stages):
            pH = sum(float(anchors.pH[a]) * m.z[k, a] for a in range(anchors.count))
            for r, reagent in enumerate(self.reagents):
                if reagent.max_pH is not None:
                    m.cuts.add(pH <= reagent.max_pH + PH_SLACK + 14.0 * (1 - m.w[k, r]))
            for o, agent in enumerate(self.oxidants):
                if agent.min_pH is not None:
                    m.cuts.add(pH >= agent.min_pH - PH_SLACK - 14.0 * (1 - m.ox[k, o]))
        last = self.stages - 1
        pH = sum(float(anchors.pH[a]) * m.z[last, a] for a in range(anchors.count))
        if flowsheet.effluent.pH_min is not None:
            m.cuts.add(pH >= flowsheet.effluent.pH_min - PH_SLACK)
        if flowsheet.effluent.pH_max is not None:
            m.cuts.add(pH <= flowsheet.effluent.pH_max + PH_SLACK)
        for row in flowsheet.effluent.dissolved:
            terms = [
                (self.anchors.tracked.index(c), weight)
                for c, weight in row.components.items()
                if c in self.anchors.tracked
            ]
            if not terms:
                continue
            bound = row.max_mg_per_L / row.g_per_mol * LIMIT_SLACK  # mmol/L
            scale = 1.0 / bound
            m.cuts.add(
                sum(
                    weight * scale * m.D[last, j, a]
                    for j, weight in terms
                    for a in range(anchors.count)
                )
                <= 1.0
            )

    def _products(self, m: pyo.ConcreteModel, dropping: list[tuple[int, int]]) -> None:
        """Cake masses by destination, product limits and the objective."""
        flowsheet, plant = self.plant.flowsheet, self.plant
        K, P = range(self.stages), range(len(self.destinations))
        dry, wet = self._solid_kg()
        rates = plant.reagent_rates
        per_mol = 1.0 / rates[:, 0]  # kg as supplied per mol reacting
        leftover = per_mol * (rates[:, 1] * plant.reagent_g_per_mol / 1000.0 + rates[:, 3])
        share = plant.flowsheet.plant.cake_moisture["hydroxide"]
        leftover_wet = leftover / (1.0 - share)
        labels = sorted({x for p in flowsheet.products for x in (*p.metals, *p.max_impurity)})
        top = float(
            sum(self.cap[t] * dry[:, t].max(initial=0.0) for t in range(self.anchors.metals))
            + (leftover * self.dose_max).max(initial=0.0)
        )
        m.dry = pyo.Var(K, P, domain=pyo.NonNegativeReals)  # g per kg of feed water
        m.wet = pyo.Var(K, P, domain=pyo.NonNegativeReals)
        m.metal = pyo.Var(K, P, labels, domain=pyo.NonNegativeReals)
        families = sorted({f for p in flowsheet.products for f in p.min_family})
        m.family = pyo.Var(K, P, families, domain=pyo.NonNegativeReals)
        for k in K:
            spent = [(r, m.dose[k, r]) for r in range(len(self.reagents))]
            m.cuts.add(
                sum(m.dry[k, p] for p in P)
                == sum(float(dry[a, t]) * m.P[k, a, t] for a, t in dropping)
                + sum(float(leftover[r]) * d for r, d in spent)
            )
            m.cuts.add(
                sum(m.wet[k, p] for p in P)
                == sum(float(wet[a, t]) * m.P[k, a, t] for a, t in dropping)
                + sum(float(leftover_wet[r]) * d for r, d in spent)
            )
            for p in P:
                m.cuts.add(m.dry[k, p] <= top * m.y[k, p])
                m.cuts.add(m.wet[k, p] <= 5.0 * top * m.y[k, p])
            for family in families:
                member = plant.in_family(family)
                m.cuts.add(
                    sum(m.family[k, p, family] for p in P)
                    == sum(
                        float(dry[a, t]) * m.P[k, a, t]
                        for a, t in dropping
                        if member[self.anchors.solid[a, t]]
                    )
                )
                for p in P:
                    m.cuts.add(m.family[k, p, family] <= top * m.y[k, p])
            for label in labels:
                spec = flowsheet.label(label)
                weights = np.array([spec.components.get(c, 0.0) for c in self.anchors.tracked])
                grams = spec.g_per_mol / 1000.0
                unreacted = per_mol * rates[:, 1] * (self.brought @ weights) * grams
                m.cuts.add(
                    sum(m.metal[k, p, label] for p in P)
                    == sum(
                        float(weights @ self.anchors.drops[a, t]) * grams * m.P[k, a, t]
                        for a, t in dropping
                        if weights @ self.anchors.drops[a, t] != 0.0
                    )
                    + sum(float(unreacted[r]) * d for r, d in spent if unreacted[r] > 0.0)
                )
                most = float(weights @ self.cap) * grams + float((unreacted * self.dose_max).sum())
                for p in P:
                    m.cuts.add(m.metal[k, p, label] <= most * m.y[k, p])
        income = self._product_limits(m)
        prices = flowsheet.prices
        # g/kg feed water x kg water/m3 feed / 1e6 = t/m3
        to_t = self.water_kg / flowsheet.feed.flow_m3_per_h / 1e6
        to_mol = self.water_kg / flowsheet.feed.flow_m3_per_h / 1e3
        cost: Any = 0.0
        for k in K:
            for r, reagent in enumerate(self.reagents):
                price = (
                    per_mol[r]
                    * (reagent.price_USD_per_t + rates[r, 5] * prices.water_USD_per_m3)
                    / 1000.0
                )
                cost += float(price * to_mol) * m.dose[k, r]
            for o, agent in enumerate(self.oxidants):
                if agent.price_USD_per_m3 is not None:
                    cost += agent.price_USD_per_m3 * m.ox[k, o]
                else:
                    kg = agent.molar_mass_g_per_mol / 1000.0 / agent.electrons
                    kg /= agent.strength * agent.utilisation
                    # the oxidised iron costs its peroxide whenever this agent is the one on
                    m.cuts.add(
                        self._bought(m, k, o) >= m.x[k] - float(self.cap.max()) * (1 - m.ox[k, o])
                    )
                    cost += float(kg * (agent.price_USD_per_t or 0.0) / 1000.0 * to_mol) * (
                        self._bought(m, k, o)
                    )
            cost += prices.disposal_USD_per_wet_t[flowsheet.waste_class] * to_t * m.wet[k, 0]
        m.cost = pyo.Objective(expr=cost - to_t * income, sense=pyo.minimize)

    def _bought(self, m: pyo.ConcreteModel, k: int, o: int) -> Any:
        if not hasattr(m, "bought"):
            m.bought = pyo.Var(
                range(self.stages), range(len(self.oxidants)), domain=pyo.NonNegativeReals
            )
        return m.bought[k, o]

    def _product_limits(self, m: pyo.ConcreteModel) -> Any:
        """Add each product's limits; return its income, USD x (g/kg feed water)/1e6."""
        flowsheet = self.plant.flowsheet
        K = range(self.stages)
        income: Any = 0.0
        for p, product in enumerate(flowsheet.products, start=1):
            metal = {
                x: sum(m.metal[k, p, x] for k in K)
                for x in (*product.metals, *product.max_impurity)
            }
            total = sum(metal[x] for x in product.metals)
            dry = sum(m.dry[k, p] for k in K)
            made: Any = 1
            if product.optional:
                if not hasattr(m, "made"):
                    m.made = pyo.Var(range(1, len(self.destinations)), domain=pyo.Binary)
                made = m.made[p]
                for k in K:
                    m.cuts.add(m.y[k, p] <= made)
            if product.min_recovery is not None:
                fed = 0.0
                for x in product.metals:
                    spec = flowsheet.label(x)
                    weights = np.array([spec.components.get(c, 0.0) for c in self.anchors.tracked])
                    fed += float(weights @ self.feed) * spec.g_per_mol / 1000.0
                m.cuts.add(total >= QUALITY_SLACK * product.min_recovery * fed * made)
            if product.min_grade is not None:
                m.cuts.add(total >= QUALITY_SLACK * product.min_grade * dry)
            for x, ceiling in product.max_impurity.items():
                m.cuts.add(metal[x] <= ceiling / QUALITY_SLACK * dry + 1e-6)
            for family, least in product.min_family.items():
                m.cuts.add(
                    sum(m.family[k, p, family] for k in K) >= QUALITY_SLACK * least * dry - 1e-6
                )
            for x, payable in product.payable.items():
                income += payable * flowsheet.prices.metal_USD_per_t[x] * metal[x]
        return income

    # -- use ----------------------------------------------------------------------------------

    def restrict(self, structure: Structure, dose_kg_per_h: Array | None = None) -> None:
        """Fix every structural choice to ``structure``; anchors stay free.

        Doses stay free too, unless ``dose_kg_per_h`` (K, R) is given: then within a tenth of it.
        """
        m = self.program
        if dose_kg_per_h is not None:
            mmol = dose_kg_per_h * self.plant.reagent_rates[:, 0] * 1000.0 / self.water_kg
            for k, step in enumerate(structure):
                if step.reagent >= 0:
                    amount = float(mmol[k, step.reagent])
                    m.dose[k, step.reagent].setlb(0.9 * amount)
                    m.dose[k, step.reagent].setub(1.1 * amount)
            m.dose_worth.deactivate()
            m.dose_on.deactivate()
        for k, step in enumerate(structure):
            for r in range(len(self.reagents)):
                m.w[k, r].fix(1 if r == step.reagent else 0)
            for o in range(len(self.oxidants)):
                m.ox[k, o].fix(1 if o == step.oxidant else 0)
            for p, name in enumerate(self.destinations):
                m.y[k, p].fix(1 if name == step.destination else 0)

    def forbid(self, structure: Structure) -> None:
        """Cut one structure off."""
        m = self.program
        terms: list[Any] = []
        for k, step in enumerate(structure):
            terms.append(
                m.w[k, step.reagent]
                if step.reagent >= 0
                else 1 - sum(m.w[k, r] for r in range(len(self.reagents)))
            )
            if self.oxidants:
                terms.append(
                    m.ox[k, step.oxidant]
                    if step.oxidant >= 0
                    else 1 - sum(m.ox[k, o] for o in range(len(self.oxidants)))
                )
            terms.append(m.y[k, self.destinations.index(step.destination)])
        m.cuts.add(sum(terms) <= len(terms) - 1)

    def propose(self, time_limit_s: float) -> Proposal | None:
        """Solve; return the best structure still allowed, or None when there is none.

        Raises
        ------
        DosewrightError
            When the solver ends in a state that says nothing.
        """
        if self.solver is None:
            self.solver = Highs()
            self.solver.config.load_solution = False
            self.solver.highs_options = {"mip_rel_gap": 0.03, "threads": 2}
        self.solver.config.time_limit = max(time_limit_s, 0.5)
        result = self.solver.solve(self.program)
        condition = str(result.termination_condition).rsplit(".", maxsplit=1)[-1]
        if result.best_feasible_objective is None:
            if condition in {"infeasible", "maxTimeLimit", "infeasibleOrUnbounded"}:
                return None
            raise DosewrightError(f"the lattice program ended without an answer: {condition}")
        result.solution_loader.load_vars()
        return self._read(float(result.best_feasible_objective))

    def _read(self, value: float) -> Proposal:
        m = self.program
        flow = self.plant.flowsheet.feed.flow_m3_per_h
        steps, anchor, dose = [], [], []
        for k in range(self.stages):
            reagent = _chosen(m.w[k, r] for r in range(len(self.reagents)))
            oxidant = _chosen(m.ox[k, o] for o in range(len(self.oxidants)))
            destination = _chosen(m.y[k, p] for p in range(len(self.destinations)))
            steps.append(Step(reagent, oxidant, self.destinations[destination]))
            anchor.append(_chosen(m.z[k, a] for a in range(self.anchors.count)))
            mmol = pyo.value(m.dose[k, reagent]) if reagent >= 0 else 0.0
            rate = self.plant.reagent_rates[reagent, 0] if reagent >= 0 else 1.0
            dose.append(mmol / 1000.0 * self.water_kg / rate)
        return Proposal(tuple(steps), value * flow, np.array(anchor), np.array(dose))


def _chosen(variables: Iterable[Any]) -> int:
    values = [float(pyo.value(v)) for v in variables]
    if not values or max(values) < 0.5:
        return -1
    return int(np.argmax(values))
