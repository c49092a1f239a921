"""The nonlinear train: mixing tanks and settlers, many trials at once.

A `PlantModel` is a flowsheet turned into arrays once; `simulate` walks the train graph with ``N``
trials side by side, so that a sweep, a dose grid or all starts of a polish cost one pass. Costs and
limits are not here (see `trial`); chemistry is not here either (see `equilibrium`).

Units, unless a name says otherwise: mol/h, kg/h, litres/h. Axis names: ``N`` trials, ``nc``
components, ``ks`` solids, ``R`` reagents, ``O`` oxidants, ``K`` stages.
"""

from __future__ import annotations

from collections.abc import Callable
from dataclasses import dataclass, field, replace
from functools import cached_property

import networkx as nx
import numpy as np
from numpy.typing import NDArray

from dosewright.chemistry.activity import (
    LN10,
    WATER_KG_PER_MOL,
    ActivityModel,
    activity_model,
    water_density_kg_per_m3,
)
from dosewright.chemistry.catalogue import catalogue
from dosewright.chemistry.system import System, system_of
from dosewright.equilibrium import States, solve
from dosewright.errors import Fault, InputError, NotConverged
from dosewright.flowsheet import Flowsheet, train_graph

Array = NDArray[np.float64]
Mask = NDArray[np.bool_]

#: apparent specific volume of dissolved salts, used when the feed states no specific gravity
#: (common practice, no source: NaCl 0.28, Na2SO4 0.11, MgSO4 about 0 mL/g at infinite dilution)
SALT_ML_PER_G = 0.15

CHARGE_WARN_PERCENT = 5.0  # common practice, no source
CHARGE_REFUSE_PERCENT = 10.0  # common practice, no source


@dataclass(frozen=True)
class ChargeClosure:
    """How the feed assay was closed on its declared ion.

    ``error_percent`` = 100 (cations - anions) / (cations + anions), in equivalents of the
    speciated liquor at the stated pH, before closing.
    """

    component: str
    error_percent: float
    cations_eq_per_L: float
    anions_eq_per_L: float
    assay_mol_per_L: float
    used_mol_per_L: float

    FORMULA = "100 x (cations - anions) / (cations + anions), eq/L of the speciated liquor"


@dataclass(frozen=True, eq=False)
class Stream:
    """Flows of ``N`` trials through one edge of the train graph.

    ``totals`` (N, nc) mol/h of the components dissolved in the liquor and ``water`` (N,) mol/h of
    H2O in all its dissolved forms; ``solids`` (N, ks) mol/h of precipitates; ``unreacted`` (N, R)
    mol/h of reagent left over as solid and ``idle`` (N, R) mol/h spent in solution without effect
    (carbonated, oxidised: it weighs as salt, but is no longer counted as what it was); ``inert``
    (N,) kg/h of insoluble impurity; ``gas`` (N, gases) mol/h.
    """

    totals: Array
    water: Array
    solids: Array
    unreacted: Array
    idle: Array
    inert: Array
    gas: Array

    def __add__(self, other: Stream) -> Stream:
        """Join two streams."""
        return Stream(
            self.totals + other.totals,
            self.water + other.water,
            self.solids + other.solids,
            self.unreacted + other.unreacted,
            self.idle + other.idle,
            self.inert + other.inert,
            self.gas + other.gas,
        )


@dataclass(frozen=True, eq=False)
class StageRun:
    """What happened in one stage, for ``N`` trials."""

    states: States
    dose_kg_per_h: Array  # (N, R) as supplied
    make_up_water_kg_per_h: Array  # (N,)
    oxidised_mol_per_h: Array  # (N,)
    oxidant_kg_per_h: Array  # (N, O) as supplied
    oxidant_m3_per_h: Array  # (N, O) liquor treated
    vented_mol_per_h: Array  # (N, gases)
    pulp: Stream
    cake: Stream
    overflow: Stream
    solvent_kg_per_h: Array  # (N,) of the pulp's liquor
    cake_solvent_kg_per_h: Array  # (N,)
    heat_K: Array  # (N,) temperature rise if all the heat stayed in the liquor


@dataclass(frozen=True, eq=False)
class Run:
    """A simulated batch of trials: one `StageRun` per stage, and the effluent."""

    model: PlantModel
    stages: tuple[StageRun, ...]
    effluent: Stream
    ok: Mask  # (N,) every vessel solved
    why_not: tuple[str, ...] = ()

    def starts(self, rows: NDArray[np.int64]) -> tuple[States, ...]:
        """States of the given rows, stage by stage: starts for similar trials."""
        return tuple(stage.states.take(rows) for stage in self.stages)

    @property
    def count(self) -> int:
        """Number of trials."""
        return int(self.ok.size)


@dataclass(frozen=True, eq=False)
class Orders:
    """What is done in each stage of ``N`` trials.

    ``dose_kg_per_h`` (N, K, R) of reagent as supplied; ``oxidant`` (N, K, O) on or off. In each
    stage one reagent, ``lead`` (N, K), may be dosed to a target instead: a pH (``pH_target``) or a
    value of `lead_coordinate` (``coordinate``, searched from ``guess_kg_per_h``, where it is
    thought to rise by ``guess_slope`` per kg/h); NaN means none.
    """

    dose_kg_per_h: Array
    oxidant: Mask
    lead: NDArray[np.int64]
    pH_target: Array
    coordinate: Array
    guess_kg_per_h: Array
    guess_slope: Array

    @staticmethod
    def of_doses(dose_kg_per_h: Array, oxidant: Mask) -> Orders:
        """Orders with every dose given."""
        shape = dose_kg_per_h.shape[:2]
        none = np.full(shape, np.nan)
        return Orders(
            dose_kg_per_h,
            oxidant,
            np.zeros(shape, dtype=np.int64),
            none,
            none,
            np.zeros(shape),
            none,
        )

    def to_pH(self, lead: NDArray[np.int64], target: Array) -> Orders:
        """Orders whose lead reagents meet a pH."""
        return replace(self, lead=lead, pH_target=target)

    def to_coordinate(
        self, lead: NDArray[np.int64], value: Array, guess: Array, slope: Array
    ) -> Orders:
        """Orders whose lead reagents meet a value of `lead_coordinate`."""
        return replace(self, lead=lead, coordinate=value, guess_kg_per_h=guess, guess_slope=slope)


@dataclass(frozen=True, eq=False)
class PlantModel:
    """A flowsheet as arrays; build it with `PlantModel.of`."""

    flowsheet: Flowsheet
    system: System
    activity: ActivityModel
    enabled: Mask
    ln_pressure: dict[str, float]
    water_kg_per_L_feed: float
    salt_mL_per_g: float
    feed: Stream
    closure: ChargeClosure
    feed_states: States
    graphs: dict[int, nx.DiGraph] = field(default_factory=dict)

    @staticmethod
    def of(flowsheet: Flowsheet) -> PlantModel:
        """Build the arrays and close the feed assay.

        Raises
        ------
        InputError
            When the assay does not close within 10 % and the file does not accept that.
        """
        return _build_model(flowsheet)

    @cached_property
    def component_g_per_mol(self) -> Array:
        """Molar masses (nc,), zero for H+, which belongs to the water."""
        data = catalogue().components
        mass = np.array([data[c].molar_mass_g_per_mol for c in self.system.components])
        mass[self.system.components.index("H+")] = 0.0
        return mass

    @cached_property
    def solid_g_per_mol(self) -> Array:
        """Molar masses (ks,)."""
        data = catalogue().solids
        return np.array([data[s].molar_mass_g_per_mol for s in self.system.solids])

    def in_family(self, family: str) -> Array:
        """One for the solids of a family, zero for the others (ks,)."""
        data = catalogue().solids
        return np.array([float(data[s].family == family) for s in self.system.solids])

    @cached_property
    def water_per_dry_kg(self) -> Array:
        """Kilograms of water per kilogram of dry solid in the cake (ks,), salts left aside."""
        data = catalogue().solids
        moisture = self.flowsheet.plant.cake_moisture
        share = np.array([moisture[data[s].family] for s in self.system.solids])
        return share / (1.0 - share)

    @cached_property
    def reagent_components(self) -> Array:
        """Components brought by one mole of each reagent (R, nc)."""
        return np.array(
            [
                [r.components.get(c, 0.0) for c in self.system.components]
                for r in self.flowsheet.reagents.values()
            ]
        ).reshape(len(self.flowsheet.reagents), len(self.system.components))

    @cached_property
    def reagent_rates(self) -> Array:
        """Per kg of each reagent as supplied (R, 6).

        Columns: mol reacting, mol left over as solid, mol left over dissolved, kg inert solid,
        mol H2O brought in (solution water and H2O of the formula), kg make-up water.
        """
        rows = []
        for r in self.flowsheet.reagents.values():
            active_mol = 1000.0 * r.strength / r.molar_mass_g_per_mol
            reacting = active_mol * r.utilisation
            left = active_mol - reacting
            is_solid = r.unreacted == "solid"
            balance_kg = 1.0 - r.strength
            liquid = r.supply == "solution"
            make_up = 1.0 / r.make_up - 1.0 if r.make_up else 0.0
            water = reacting * r.water
            water += (balance_kg if liquid else 0.0) / WATER_KG_PER_MOL
            water += make_up / WATER_KG_PER_MOL
            rows.append(
                [
                    reacting,
                    left if is_solid else 0.0,
                    0.0 if is_solid else left,
                    0.0 if liquid else balance_kg,
                    water,
                    make_up,
                ]
            )
        return np.array(rows).reshape(len(rows), 6)

    @cached_property
    def reagent_g_per_mol(self) -> Array:
        """Molar masses of the reagents' active formula (R,)."""
        return np.array([r.molar_mass_g_per_mol for r in self.flowsheet.reagents.values()])

    @cached_property
    def coordinate_eq_per_kg(self) -> float:
        """Dose that counts as one in `lead_coordinate`: four times what the feed can consume."""
        charge = self.system.component_charge
        loose = [
            self.system.components.index(c) for c in ("Na+", "K+") if c in (self.system.components)
        ]
        weight = np.maximum(charge, 0.0)
        weight[loose] = 0.0
        feed_kg = float(self.feed.water[0]) * WATER_KG_PER_MOL
        return max(4.0 * float(abs(self.feed.totals[0]) @ weight) / feed_kg, 0.02)

    def volume_L_per_h(self, stream: Stream, solvent_kg_per_h: Array) -> Array:
        """Liquor volume from solvent and salts."""
        density = water_density_kg_per_m3(self.system.temperature_C) / 1000.0
        salts_g = stream.totals @ self.component_g_per_mol
        return solvent_kg_per_h / density + salts_g * self.salt_mL_per_g / 1000.0

    def graph(self, stages: int) -> nx.DiGraph:
        """Train graph of the given number of stages."""
        if stages not in self.graphs:
            self.graphs[stages] = train_graph(self.flowsheet, stages)
        return self.graphs[stages]


def _build_model(flowsheet: Flowsheet) -> PlantModel:
    feed = flowsheet.feed
    components = set(feed.assay_mol_per_L)
    components.add(feed.closing_component)
    for reagent in flowsheet.reagents.values():
        components |= set(reagent.components)
    if flowsheet.oxidants:
        components |= {"Fe+2", "Fe+3"}
    if components & {"Fe+2", "Fe+3"}:
        components |= {"Fe+2", "Fe+3"}
    system = system_of(components, feed.temperature_C)
    activity = activity_model("auto", feed.temperature_C)
    enabled = system.enabled("fast")
    for name in flowsheet.solids_allow:
        enabled |= system.enabled([name])
    for name in flowsheet.solids_forbid:
        enabled &= ~system.enabled([name])
    ln_pressure: dict[str, float] = {}
    if flowsheet.plant.co2_vent_atm is not None and "CO2(g)" in system.phases:
        enabled[system.phases.index("CO2(g)")] = True
        ln_pressure["CO2(g)"] = float(np.log(flowsheet.plant.co2_vent_atm))
    density = water_density_kg_per_m3(feed.temperature_C) / 1000.0
    data = catalogue().components
    salts = sum(
        mol * data[c].molar_mass_g_per_mol for c, mol in feed.assay_mol_per_L.items() if c != "H+"
    )
    if feed.specific_gravity is not None:
        water = feed.specific_gravity * 0.99997 - salts / 1000.0  # SG against water at 4 C
    else:
        water = density * (1.0 - SALT_ML_PER_G * salts / 1000.0)
    salt_volume = (1.0 - water / density) * 1000.0 / salts if salts > 0.0 else SALT_ML_PER_G
    closure, totals, states = _close_feed(flowsheet, system, activity, water)
    solvent = feed.flow_m3_per_h * 1000.0 * water
    bound = float((states.molality @ system.nu_water)[0])
    count_r = len(flowsheet.reagents)
    stream = Stream(
        totals=totals[None, :] * solvent,
        water=np.array([solvent / WATER_KG_PER_MOL + bound * solvent]),
        solids=np.zeros((1, system.solids_count)),
        unreacted=np.zeros((1, count_r)),
        idle=np.zeros((1, count_r)),
        inert=np.zeros(1),
        gas=np.zeros((1, len(system.gases))),
    )
    return PlantModel(
        flowsheet, system, activity, enabled, ln_pressure, water, salt_volume, stream, closure,
        states,
    )  # fmt: skip


def _close_feed(
    flowsheet: Flowsheet, system: System, activity: ActivityModel, water_kg_per_L: float
) -> tuple[ChargeClosure, Array, States]:
    """Adjust the closing ion until the speciated liquor at the stated pH is neutral."""
    feed = flowsheet.feed
    totals = np.zeros(len(system.components))
    for name, mol in feed.assay_mol_per_L.items():
        totals[system.components.index(name)] = mol / water_kg_per_L
    j = system.components.index(feed.closing_component)
    h = system.components.index("H+")
    none = np.zeros(len(system.phases), dtype=bool)
    held = {"H+": np.array([-LN10 * feed.pH])}

    def state_at(amount: float) -> tuple[States, float]:
        trial = totals.copy()
        trial[j] = amount
        states = solve(system, activity, trial[None, :], enabled=none, held=held)
        if states.status[0]:
            raise NotConverged(f"the feed was not solved: {states.why_failed(0)}")
        return states, float((states.molality @ system.charge)[0])

    lab = totals[j]
    states, charge = state_at(lab)
    ions = states.molality[0] * system.charge
    cations, anions = float(ions[ions > 0].sum()), float(-ions[ions < 0].sum())
    error = 100.0 * (cations - anions) / (cations + anions)
    if abs(error) > CHARGE_REFUSE_PERCENT and not feed.accept_charge_error:
        raise InputError(
            flowsheet.source_name,
            [
                Fault(
                    "feed.assay",
                    f"the charge is {error:+.1f} % out ({ChargeClosure.FORMULA})",
                    "check the analysis, or set feed.accept_charge_error = true to close "
                    f"{feed.closing_component} all the same",
                )
            ],
        )
    amount, slope = lab, float(system.component_charge[j])
    for _ in range(60):
        if abs(charge) < 1e-14 * (cations + anions):
            break
        trial = amount - charge / slope
        if trial <= 0.0:
            trial = 0.1 * amount if amount > 0.0 else 1e-9
        states, new_charge = state_at(trial)
        if trial != amount and new_charge != charge:
            slope = (new_charge - charge) / (trial - amount)
        amount, charge = trial, new_charge
    if abs(charge) > 1e-10 * (cations + anions):
        raise InputError(
            flowsheet.source_name,
            [
                Fault(
                    "feed.closing_ion",
                    f"no amount of {feed.closing_component} makes the liquor neutral at pH "
                    f"{feed.pH:g}",
                    "name an ion of the other sign, or check the analysis",
                )
            ],
        )
    totals[j] = amount
    totals[h] = float(states.dissolved_mol_per_kg[0, h])
    closure = ChargeClosure(
        component=feed.closing_component,
        error_percent=error,
        cations_eq_per_L=cations * water_kg_per_L,
        anions_eq_per_L=anions * water_kg_per_L,
        assay_mol_per_L=lab * water_kg_per_L,
        used_mol_per_L=amount * water_kg_per_L,
    )
    return closure, totals, states


# ---------------------------------------------------------------------------------------------
# units


def _spread(stream: Stream, count: int) -> Stream:
    """Repeat a one-trial stream for ``count`` trials."""
    return Stream(
        *(
            np.repeat(getattr(stream, name), count, axis=0)
            for name in ("totals", "water", "solids", "unreacted", "idle", "inert", "gas")
        )
    )


def _into_liquor(model: PlantModel, stream: Stream) -> tuple[Array, Array]:
    """Totals and water of everything in the stream that can react."""
    system = model.system
    ks = system.solids_count
    totals = stream.totals + stream.solids @ system.A[:ks]
    water = stream.water + stream.solids @ system.A_water[:ks]
    return totals, water


@dataclass
class _Tank:
    """A mixing tank being filled: totals, water and what does not react."""

    totals: Array
    water: Array
    rest: Stream
    dose: Array
    oxidised: Array
    oxidant_kg: Array
    oxidant_m3: Array


def _with_dose(model: PlantModel, tank: _Tank, dose: Array) -> tuple[Array, Array]:
    """Totals and water once ``dose`` (N, R) kg/h is in."""
    rates = model.reagent_rates
    totals = tank.totals + (dose * rates[:, 0]) @ model.reagent_components
    water = tank.water + dose @ rates[:, 4]
    return totals, water


def _fill(model: PlantModel, inflow: Stream, stage: int, orders: Orders) -> _Tank:
    """Join inflow and oxidants; reagents follow, once the doses are known."""
    system = model.system
    totals, water = _into_liquor(model, inflow)
    count = totals.shape[0]
    oxidants = list(model.flowsheet.oxidants.values())
    kg = np.zeros((count, len(oxidants)))
    m3 = np.zeros((count, len(oxidants)))
    oxidised = np.zeros(count)
    if oxidants:
        fe2, fe3 = system.components.index("Fe+2"), system.components.index("Fe+3")
        h = system.components.index("H+")
        solvent = inflow.water * WATER_KG_PER_MOL
        volume_m3 = model.volume_L_per_h(inflow, solvent) / 1000.0
        for o, agent in enumerate(oxidants):
            on = orders.oxidant[:, stage, o]
            converted = np.where(on, totals[:, fe2] * agent.conversion, 0.0)
            totals[:, fe2] -= converted
            totals[:, fe3] += converted
            totals[:, h] -= converted  # Fe+2 + H+ + oxidant = Fe+3 + water
            oxidised += converted
            if agent.formula is None:
                water = water + 0.5 * converted  # 1/4 O2 + H+ + e- = 1/2 H2O
                m3[:, o] = np.where(on, volume_m3, 0.0)
            else:
                used = converted / agent.electrons
                kg[:, o] = used * agent.molar_mass_g_per_mol / 1000.0
                kg[:, o] /= agent.strength * agent.utilisation
                # 1/2 H2O2 + H+ + e- = H2O, and the water of the solution; the peroxide that
                # misses its mark decomposes to water and oxygen
                wasted = used * (1.0 / agent.utilisation - 1.0)
                water = (
                    water
                    + converted
                    + wasted
                    + kg[:, o] * (1.0 - agent.strength) / (WATER_KG_PER_MOL)
                )
    rest = replace(inflow, solids=np.zeros_like(inflow.solids))
    dose = orders.dose_kg_per_h[:, stage, :].copy()
    return _Tank(totals, water, rest, dose, oxidised, kg, m3)


def _react(model: PlantModel, totals: Array, water: Array, start: States | None = None) -> States:
    return solve(
        model.system,
        model.activity,
        totals,
        water_mol=water,
        enabled=model.enabled,
        ln_pressure=model.ln_pressure,
        start=start,
    )


def meet_pH(
    tank_pH: Callable[[Array, NDArray[np.int64]], Array],
    target: Array,
    upper: Array,
    rising: Mask,
) -> Array:
    """Find the amounts at which ``tank_pH(amount, rows)`` meets ``target`` (all arrays (N,)).

    ``rising`` says whether pH rises with the amount. Rows that cannot reach the target below
    ``upper``, or that start beyond it, return NaN.
    """
    count = target.size
    grid = np.concatenate([[0.0], np.geomspace(1e-4, 1.0, 25)])
    rows = np.repeat(np.arange(count), grid.size)
    amounts = (upper[:, None] * grid).ravel()
    pH = tank_pH(amounts, rows).reshape(count, grid.size)
    sign = np.where(rising, 1.0, -1.0)
    gap = (pH - target[:, None]) * sign[:, None]
    gap = np.where(np.isfinite(gap), gap, np.inf)
    reached = gap >= 0.0
    first = reached.argmax(axis=1)
    answer = np.full(count, np.nan)
    # at the target already: no dose; beyond it: this reagent only leads further away
    answer[reached[:, 0] & (gap[:, 0] < 1e-6)] = 0.0
    todo = np.flatnonzero(reached.any(axis=1) & ~reached[:, 0])
    low = upper[todo] * grid[first[todo] - 1]
    high = upper[todo] * grid[first[todo]]
    g_low = gap[todo, first[todo] - 1]
    g_high = gap[todo, first[todo]]
    side = np.zeros(todo.size)
    mid = high.copy()
    for step in range(80):
        if todo.size == 0:
            break
        # regula falsi with the Illinois rule, and a bisection every third step for the jumps
        with np.errstate(invalid="ignore"):
            mid = (low * g_high - high * g_low) / (g_high - g_low)
        bad = ~np.isfinite(mid) | (mid <= low) | (mid >= high)
        mid = np.where(bad | (step % 3 == 2), 0.5 * (low + high), mid)
        g_mid = (tank_pH(mid, todo) - target[todo]) * sign[todo]
        g_mid = np.where(np.isfinite(g_mid), g_mid, g_high)
        up = g_mid >= 0.0
        g_low = np.where(up & (side == 1), g_low * 0.5, g_low)
        g_high = np.where(~up & (side == -1), g_high * 0.5, g_high)
        high, g_high = np.where(up, mid, high), np.where(up, g_mid, g_high)
        low, g_low = np.where(up, low, mid), np.where(up, g_low, g_mid)
        side = np.where(up, 1.0, -1.0)
        done = (abs(g_mid) < 1e-9) | (high - low < 1e-12 * high)
        answer[todo[done]] = mid[done]
        keep = ~done
        todo, low, high = todo[keep], low[keep], high[keep]
        g_low, g_high, side = g_low[keep], g_high[keep], side[keep]
    answer[todo] = high
    return answer


#: scale of the potential's part of `lead_coordinate`; the dose's part is scaled by the feed
COORDINATE_DECADES = 10.0


def lead_coordinate(
    model: PlantModel, ln_activity: Array, lead: NDArray[np.int64], dose_kg_per_h: Array
) -> Array:
    """Where a stage stands on its lead reagent's axis (N,).

    The chemical potential of the reagent (for a base, nearly its pH) plus its dose, both scaled.
    Each alone is flat somewhere: the dose hardly moves across a pH jump, the potential hardly in a
    buffer. Both rise with the dose (the Gibbs energy is convex), so their sum is well scaled.
    """
    stoichiometry = model.reagent_components[lead]
    h = model.system.components.index("H+")
    equivalents = np.maximum(abs(stoichiometry[:, h]), 1.0)
    x = ln_activity
    terms = np.where(stoichiometry != 0.0, stoichiometry * np.where(np.isfinite(x), x, -700.0), 0.0)
    potential = terms.sum(axis=1) / LN10 / equivalents
    eq = dose_kg_per_h * model.reagent_rates[lead, 0] * equivalents
    feed_kg = float(model.feed.water[0]) * WATER_KG_PER_MOL
    scale = feed_kg * model.coordinate_eq_per_kg
    return np.asarray(potential / COORDINATE_DECADES + eq / scale)


def _meet_coordinate(
    model: PlantModel, tank: _Tank, dose: Array, stage: int, orders: Orders, start: States | None
) -> tuple[Array, States | None]:
    """Doses at which the lead reagents stand at their coordinates, and the states reached."""
    target = orders.coordinate[:, stage]
    rows = np.flatnonzero(np.isfinite(target))
    if rows.size == 0:
        return dose, start
    dose = dose.copy()
    lead = orders.lead[rows, stage]
    goal = target[rows]
    unit = float(model.feed.water[0]) * WATER_KG_PER_MOL * model.coordinate_eq_per_kg
    h = model.system.components.index("H+")
    equivalents = np.maximum(abs(model.reagent_components[lead, h]), 1.0)
    per_unit = unit / (model.reagent_rates[lead, 0] * equivalents)  # kg/h per unit of coordinate
    amount = np.maximum(orders.guess_kg_per_h[rows, stage], 1e-9 * per_unit)
    low, high = np.zeros(rows.size), np.full(rows.size, np.inf)
    g_low, g_high = np.full(rows.size, -np.inf), np.full(rows.size, np.inf)
    best = amount.copy()
    states = start
    open_rows = np.ones(rows.size, dtype=bool)
    last_amount, last_gap = np.full(rows.size, np.nan), np.full(rows.size, np.nan)
    hinted = orders.guess_slope[rows, stage]
    for step in range(60):
        trial = dose.copy()
        trial[rows, lead] = amount
        totals, water = _with_dose(model, tank, trial)
        states = _react(model, totals, water, states)
        gap = lead_coordinate(model, states.ln_activity[rows], lead, amount) - goal
        gap = np.where(states.status[rows] == 0, gap, np.inf)
        best = np.where(open_rows, amount, best)
        open_rows &= ~(abs(gap) < 1e-11)
        if not open_rows.any():
            break
        above = gap > 0.0
        high, g_high = np.where(above, amount, high), np.where(above, gap, g_high)
        low, g_low = np.where(above, low, amount), np.where(above, g_low, gap)
        with np.errstate(invalid="ignore", divide="ignore"):
            slope = (gap - last_gap) / (amount - last_amount) if step else hinted
            # the dose part alone bounds the slope from below
            slope = np.where(np.isfinite(slope) & (slope > 1.0 / per_unit), slope, 1.0 / per_unit)
            proposal = amount - gap / slope
            middle = np.where(np.isfinite(high), 0.5 * (low + high), 2.0 * amount)
            # far below the bracket's top the potential moves with the logarithm of the dose
            middle = np.where(
                np.isfinite(high) & (low < 0.05 * high), np.sqrt(np.maximum(low, 1e-4 * high) * high),
                middle,
            )  # fmt: skip
        inside = (proposal > low) & (proposal < high) & np.isfinite(proposal)
        use = inside & ((step % 4 != 3) | ~np.isfinite(high))
        last_amount, last_gap = amount, gap
        amount = np.where(open_rows, np.where(use, proposal, middle), amount)
        open_rows &= ~(np.isfinite(high) & (high - low < 1e-14 * high))
    dose[rows, lead] = best
    return dose, states


def _set_doses(model: PlantModel, tank: _Tank, stage: int, orders: Orders) -> tuple[Array, Mask]:
    """Doses (N, R) with the pH targets met, and a mask of rows whose target was out of reach."""
    target = orders.pH_target[:, stage]
    rows_here = np.flatnonzero(np.isfinite(target))
    dose = tank.dose.copy()
    missed = np.zeros(target.size, dtype=bool)
    if rows_here.size == 0:
        return dose, missed
    reagent = orders.lead[rows_here, stage]
    reacting = model.reagent_rates[reagent, 0]
    h = model.system.components.index("H+")
    # acids bring protons, bases take them: the sign decides which way the pH moves
    protons = model.reagent_components[reagent, h]
    equivalents = np.maximum(abs(protons), 1.0)
    # an upper dose of some 8 eq per kg of water is beyond any practical train
    upper = 8.0 * tank.water[rows_here] * WATER_KG_PER_MOL / (equivalents * reacting)

    def tank_pH(amount: Array, rows: NDArray[np.int64]) -> Array:
        trial = dose[rows_here[rows]].copy()
        trial[np.arange(rows.size), reagent[rows]] += amount
        part = _Tank(
            tank.totals[rows_here[rows]], tank.water[rows_here[rows]], tank.rest, trial,
            tank.oxidised, tank.oxidant_kg, tank.oxidant_m3,
        )  # fmt: skip
        totals, water = _with_dose(model, part, trial)
        states = _react(model, totals, water)
        return np.where(states.status == 0, states.pH, np.nan)

    carbonate = (
        model.reagent_components[reagent, model.system.components.index("CO3-2")]
        if "CO3-2" in model.system.components
        else np.zeros(reagent.size)
    )
    rising = (protons < 0.0) | ((protons == 0.0) & (carbonate > 0.0))
    amount = meet_pH(tank_pH, target[rows_here], upper, rising)
    out = ~np.isfinite(amount)
    missed[rows_here[out]] = True
    dose[rows_here, reagent] += np.where(out, 0.0, amount)
    return dose, missed


def _settle(model: PlantModel, pulp: Stream, solvent: Array) -> tuple[Stream, Stream, Array, Mask]:
    """Split pulp into cake and overflow.

    The cake holds its moisture in liquor; the overflow carries fines of the pulp's own solids up to
    its stated suspended solids. Returns cake, overflow, solvent in the cake, and the rows in which
    the cake would drink all the liquor.
    """
    ks = model.system.solids_count
    mass = pulp.solids * model.solid_g_per_mol[:ks] / 1000.0  # kg/h
    left_over = pulp.unreacted @ model.reagent_g_per_mol / 1000.0
    precipitate = mass.sum(axis=1)
    dry = precipitate + left_over + pulp.inert
    default = model.flowsheet.plant.cake_moisture["hydroxide"]
    default_ratio = default / (1.0 - default)
    ratio = np.divide(
        mass @ model.water_per_dry_kg,
        precipitate,
        out=np.full(dry.size, default_ratio),
        where=precipitate > 0.0,
    )
    salts_g = pulp.totals @ model.component_g_per_mol + pulp.idle @ model.reagent_g_per_mol
    salts = salts_g / 1000.0 / solvent
    # moisture is water over (water + solids + salts): w(1-x) = x(s + salts w)
    share = ratio / (1.0 + ratio)
    ratio = share / (1.0 - share - share * salts)
    volume_per_kg = model.volume_L_per_h(pulp, solvent) / solvent
    tss = model.flowsheet.plant.overflow_solids_mg_per_L * 1e-6 * volume_per_kg  # kg per kg water
    # f S = tss (W - ratio (1-f) S), f the share of the solids that stays in the overflow
    with np.errstate(divide="ignore", invalid="ignore"):
        fines = tss * (solvent - ratio * dry) / (dry * (1.0 - tss * ratio))
    fines = np.where(dry > 0.0, np.clip(fines, 0.0, 1.0), 1.0)
    cake_water = ratio * (1.0 - fines) * dry
    dried_out = cake_water > 0.9 * solvent
    part = np.minimum(cake_water / solvent, 0.9)  # share of the liquor held by the cake

    def cut(liquor: Array, solid: Array) -> Stream:
        return Stream(
            totals=pulp.totals * liquor[:, None],
            water=pulp.water * liquor,
            solids=pulp.solids * solid[:, None],
            unreacted=pulp.unreacted * solid[:, None],
            idle=pulp.idle * liquor[:, None],
            inert=pulp.inert * solid,
            gas=np.zeros_like(pulp.gas),
        )

    return cut(part, 1.0 - fines), cut(1.0 - part, fines), part * solvent, dried_out


#: heat of the reactions that matter, kJ per mol (CODATA key values; NBS tables 1982; memory)
NEUTRALISATION_KJ_PER_MOL = 55.8
SLAKED_HEAT_KJ_PER_MOL = {"CaO": 64.0, "MgO": 37.0}


def _heat_rise(model: PlantModel, tank: _Tank, dose: Array, solvent: Array) -> Array:
    """Temperature rise from neutralisation and slaking, K, an upper estimate."""
    h = model.system.components.index("H+")
    acid = np.maximum(tank.totals[:, h], 0.0)
    base = -(dose * model.reagent_rates[:, 0]) @ np.minimum(model.reagent_components[:, h], 0.0)
    kJ = NEUTRALISATION_KJ_PER_MOL * np.minimum(base, acid)
    for i, reagent in enumerate(model.flowsheet.reagents.values()):
        slaking = SLAKED_HEAT_KJ_PER_MOL.get(reagent.formula, 0.0)
        kJ = kJ + slaking * dose[:, i] * model.reagent_rates[i, 0]
    return kJ / (solvent * 4.18)


def _stage(
    model: PlantModel, inflow: Stream, stage: int, orders: Orders, start: States | None
) -> tuple[StageRun, Mask, Mask, Mask]:
    tank = _fill(model, inflow, stage, orders)
    dose, missed = _set_doses(model, tank, stage, orders)
    dose, start = _meet_coordinate(model, tank, dose, stage, orders, start)
    totals, water = _with_dose(model, tank, dose)
    states = _react(model, totals, water, start)
    solved = states.status == 0
    solvent = np.where(solved, states.water_kg, 1.0)
    system = model.system
    ks = system.solids_count
    phases = np.where(solved[:, None], states.phase_mol_per_kg, 0.0) * solvent[:, None]
    rates = model.reagent_rates
    # traces from their own molalities: the difference of totals and solids would drown them in
    # rounding, and could leave them negative; protons, which have either sign, by difference
    in_liquor = states.dissolved_mol_per_kg * solvent[:, None]
    h = system.components.index("H+")
    in_liquor[:, h] = totals[:, h] - phases @ system.A[:, h]
    water_left = water - phases @ system.A_water
    pulp = Stream(
        totals=np.where(solved[:, None], in_liquor, 0.0),
        water=np.where(solved, water_left, 1.0),
        solids=phases[:, :ks],
        unreacted=tank.rest.unreacted + dose * rates[:, 1],
        idle=tank.rest.idle + dose * rates[:, 2],
        inert=tank.rest.inert + dose @ rates[:, 3],
        gas=phases[:, ks:],
    )
    cake, overflow, cake_solvent, dried = _settle(model, pulp, solvent)
    run = StageRun(
        states=states,
        dose_kg_per_h=dose,
        make_up_water_kg_per_h=dose @ rates[:, 5],
        oxidised_mol_per_h=tank.oxidised,
        oxidant_kg_per_h=tank.oxidant_kg,
        oxidant_m3_per_h=tank.oxidant_m3,
        vented_mol_per_h=phases[:, ks:],
        pulp=pulp,
        cake=cake,
        overflow=overflow,
        solvent_kg_per_h=solvent,
        cake_solvent_kg_per_h=cake_solvent,
        heat_K=_heat_rise(model, tank, dose, solvent),
    )
    return run, solved, missed, dried


def simulate(model: PlantModel, orders: Orders, starts: tuple[States, ...] | None = None) -> Run:
    """Run ``N`` trials through the train; failed rows are marked in ``ok``.

    ``starts`` may hold states of similar vessels, stage by stage (see `Run.starts`).
    """
    count, stages, _ = orders.dose_kg_per_h.shape
    graph = model.graph(stages)
    on_edge: dict[tuple[str, str], Stream] = {}
    runs: list[StageRun] = []
    ok = np.ones(count, dtype=bool)
    why = [""] * count
    effluent = _spread(model.feed, count)

    def note(mask: Mask, text: str) -> None:
        for row in np.flatnonzero(mask & ok):
            why[int(row)] = text
        ok[mask] = False

    for node in nx.topological_sort(graph):
        unit = graph.nodes[node]["unit"]
        arriving = [on_edge[edge] for edge in graph.in_edges(node) if edge in on_edge]
        inflow = arriving[0] if arriving else effluent
        for extra in arriving[1:]:
            inflow = inflow + extra
        if unit == "feed":
            for edge in graph.out_edges(node):
                on_edge[edge] = inflow
        elif unit == "mix":
            stage = graph.nodes[node]["stage"] - 1
            earlier = starts[stage] if starts is not None else None
            run, solved, missed, dried = _stage(model, inflow, stage, orders, earlier)
            runs.append(run)
            note(~solved, f"the equilibrium of stage {stage + 1} was not solved")
            note(missed, f"the pH set in stage {stage + 1} is out of this reagent's reach")
            note(dried, f"the cake of stage {stage + 1} would hold nearly all the liquor")
            for edge in graph.out_edges(node):
                if graph.edges[edge]["kind"] == "pulp":
                    on_edge[edge] = run.pulp
        elif unit == "settle":
            run = runs[graph.nodes[node]["stage"] - 1]
            for edge in graph.out_edges(node):
                on_edge[edge] = run.cake if graph.edges[edge]["kind"] == "cake" else run.overflow
        elif unit == "effluent":
            effluent = inflow
    return Run(model, tuple(runs), effluent, ok, tuple(why))
