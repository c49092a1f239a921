"""The stream table, the stage reports and the closure of a one-trial run, as plain named data."""

from __future__ import annotations

from collections.abc import Mapping, Sequence
from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from dosewright.chemistry.activity import LN10, WATER_KG_PER_MOL
from dosewright.equilibrium import certify
from dosewright.plant import PlantModel, Run, Stream

Array = NDArray[np.float64]


@dataclass(frozen=True)
class StreamRow:
    """One stream of the stream table.

    ``dissolved_mg_per_L`` and ``total_mol_per_h`` by component (as its own formula),
    ``solids_kg_per_h`` by solid; ``dry_solids_kg_per_h`` counts leftovers and inert matter too.
    """

    number: int
    name: str
    kind: str
    liquor_m3_per_h: float
    water_kg_per_h: float
    pH: float | None
    dry_solids_kg_per_h: float
    dissolved_mg_per_L: dict[str, float]
    total_mol_per_h: dict[str, float]
    solids_kg_per_h: dict[str, float]


@dataclass(frozen=True)
class StageReport:
    """What one stage does: doses in, pH, solids, what its cake holds, what could still form."""

    number: int
    destination: str
    oxidant: str | None
    pH: float
    ionic_strength_mol_per_kg: float
    doses_kg_per_h: dict[str, float]
    doses_kg_per_m3: dict[str, float]
    oxidant_kg_per_h: float
    oxidised_mol_per_h: float
    vented_mol_per_h: dict[str, float]
    heat_K: float
    solids_kg_per_h: dict[str, float]
    cake_dry_kg_per_h: float
    cake_wet_kg_per_h: float
    cake_percent_dry: dict[str, float]
    saturation_log10: dict[str, float]
    certificate: dict[str, float]


def _named(names: Sequence[str], values: Array) -> dict[str, float]:
    return {n: float(v) for n, v in zip(names, values, strict=True) if v != 0.0}


def _row(
    model: PlantModel,
    stream: Stream,
    solvent: float,
    *,
    number: int,
    name: str,
    kind: str,
    pH: float | None,
) -> StreamRow:
    system = model.system
    ks = system.solids_count
    litres = float(model.volume_L_per_h(stream, np.array([solvent]))[0])
    totals = stream.totals[0]
    grams = totals * model.component_g_per_mol
    solids_kg = stream.solids[0] * model.solid_g_per_mol / 1000.0
    left = float((stream.unreacted @ model.reagent_g_per_mol)[0]) / 1000.0
    everything = (
        totals + stream.solids[0] @ system.A[:ks] + (stream.unreacted @ model.reagent_components)[0]
    )
    mg_per_L = grams * 1000.0 / litres if litres > 0.0 else np.zeros_like(grams)
    return StreamRow(
        number=number,
        name=name,
        kind=kind,
        liquor_m3_per_h=litres / 1000.0,
        water_kg_per_h=solvent,
        pH=pH,
        dry_solids_kg_per_h=float(solids_kg.sum()) + left + float(stream.inert[0]),
        dissolved_mg_per_L=_named(system.components, mg_per_L),
        total_mol_per_h=_named(system.components, everything),
        solids_kg_per_h=_named(system.solids, solids_kg),
    )


def stream_table(run: Run, destinations: Sequence[str]) -> list[StreamRow]:
    """Rows for every edge of the train graph, in the order of their numbers."""
    model = run.model
    graph = model.graph(len(run.stages))
    feed_solvent = float(model.feed.water[0])
    states = model.feed_states
    feed_solvent /= 1.0 / WATER_KG_PER_MOL + float((states.molality @ model.system.nu_water)[0])
    rows = []
    for start, end, data in sorted(graph.edges(data=True), key=lambda e: e[2]["stream"]):
        stage = max(graph.nodes[start]["stage"], 1) - 1
        kind, number = data["kind"], data["stream"]
        if start == "feed":
            rows.append(
                _row(
                    model,
                    model.feed,
                    feed_solvent,
                    number=number,
                    name="feed",
                    kind=kind,
                    pH=float(states.pH[0]),
                )
            )
            continue
        this = run.stages[stage]
        pH = float(this.states.pH[0])
        whole, wet = float(this.solvent_kg_per_h[0]), float(this.cake_solvent_kg_per_h[0])
        stream, solvent, name = {
            "pulp": (this.pulp, whole, f"pulp {stage + 1}"),
            "cake": (this.cake, wet, f"cake {stage + 1}, {destinations[stage]}"),
            "liquor": (
                this.overflow,
                whole - wet,
                "effluent" if end == "effluent" else f"overflow {stage + 1}",
            ),
        }[kind]
        rows.append(_row(model, stream, solvent, number=number, name=name, kind=kind, pH=pH))
    return rows


@dataclass(frozen=True, eq=False)
class CakeFigures:
    """Masses of one cake, (N,) kg/h unless said otherwise."""

    element_kg: Mapping[str, Array]
    family_kg: Mapping[str, Array]
    dry_kg: Array
    wet_kg: Array


def label_kg_per_h(model: PlantModel, label: str, component_mol: Array) -> Array:
    """Kilograms per hour of what ``label`` names, from mol/h of components (N, nc)."""
    spec = model.flowsheet.label(label)
    weights = np.array([spec.components.get(c, 0.0) for c in model.system.components])
    return np.asarray(component_mol @ weights) * spec.g_per_mol / 1000.0


def cake_figures(model: PlantModel, cake: Stream, solvent: Array) -> CakeFigures:
    """Weigh a cake: its solids, its leftovers and the salts its moisture leaves on drying."""
    ks = model.system.solids_count
    solids_kg = cake.solids @ model.solid_g_per_mol / 1000.0
    leftover_kg = (cake.unreacted + cake.idle) @ model.reagent_g_per_mol / 1000.0
    salts_kg = cake.totals @ model.component_g_per_mol / 1000.0
    dry = solids_kg + leftover_kg + salts_kg + cake.inert
    components = (
        cake.solids @ model.system.A[:ks] + cake.totals + cake.unreacted @ model.reagent_components
    )
    labels = {m for p in model.flowsheet.products for m in (*p.metals, *p.max_impurity)}
    kg = {label: label_kg_per_h(model, label, components) for label in labels}
    families = {f for p in model.flowsheet.products for f in p.min_family}
    each = cake.solids * model.solid_g_per_mol / 1000.0
    of_family = {f: each @ model.in_family(f) for f in families}
    return CakeFigures(kg, of_family, dry, dry + solvent)


def stage_reports(run: Run, destinations: Sequence[str]) -> list[StageReport]:
    """One report per stage."""
    model = run.model
    flowsheet = model.flowsheet
    system = model.system
    reagents, oxidants = list(flowsheet.reagents), list(flowsheet.oxidants)
    out = []
    for k, stage in enumerate(run.stages):
        dose = stage.dose_kg_per_h[0]
        on = stage.oxidant_kg_per_h[0] + stage.oxidant_m3_per_h[0]
        figures = cake_figures(model, stage.cake, stage.cake_solvent_kg_per_h)
        dry = float(figures.dry_kg[0])
        composition = _cake_composition(model, stage.cake, dry)
        out.append(
            StageReport(
                number=k + 1,
                destination=destinations[k],
                oxidant=next((oxidants[o] for o in np.flatnonzero(on > 0.0)), None),
                pH=float(stage.states.pH[0]),
                ionic_strength_mol_per_kg=float(stage.states.ionic_strength[0]),
                doses_kg_per_h=_named(reagents, dose),
                doses_kg_per_m3=_named(reagents, dose / flowsheet.feed.flow_m3_per_h),
                oxidant_kg_per_h=float(stage.oxidant_kg_per_h[0].sum()),
                oxidised_mol_per_h=float(stage.oxidised_mol_per_h[0]),
                vented_mol_per_h=_named(system.gases, stage.vented_mol_per_h[0]),
                heat_K=float(stage.heat_K[0]),
                solids_kg_per_h=_named(
                    system.solids, stage.cake.solids[0] * model.solid_g_per_mol / 1000.0
                ),
                cake_dry_kg_per_h=dry,
                cake_wet_kg_per_h=float(figures.wet_kg[0]),
                cake_percent_dry=composition,
                saturation_log10=saturation_log10(run, k),
                certificate=certificate_of(run, k),
            )
        )
    return out


def _cake_composition(model: PlantModel, cake: Stream, dry_kg: float) -> dict[str, float]:
    """Mass per cent, dry, of every component in the cake as its own formula."""
    if dry_kg <= 0.0:
        return {}
    ks = model.system.solids_count
    mol = (
        cake.solids[0] @ model.system.A[:ks]
        + cake.totals[0]
        + (cake.unreacted @ model.reagent_components)[0]
    )
    percent = mol * model.component_g_per_mol / 10.0 / dry_kg
    return _named(model.system.components, np.where(abs(percent) < 1e-12, 0.0, percent))


def balance_of(run: Run) -> dict[str, float]:
    """Relative closure over the whole train, by component and for water and charge.

    (in - out) / in, where in is the feed and everything bought, out the cakes, the effluent and the
    gas. Iron's two states are taken together, and the protons with the water.
    """
    model = run.model
    system = model.system
    ks = system.solids_count
    A, A_gas = system.A[:ks], system.A[ks:]
    rates = model.reagent_rates
    entering = model.feed.totals[0].copy()
    water_in = float(model.feed.water[0])
    leaving = run.effluent.totals[0] + run.effluent.solids[0] @ A
    water_out = float(run.effluent.water[0] + run.effluent.solids[0] @ system.A_water[:ks])
    left = run.effluent.unreacted[0] + run.effluent.idle[0]
    h = system.components.index("H+")
    for stage in run.stages:
        dose = stage.dose_kg_per_h[0]
        entering += (dose * rates[:, 0]) @ model.reagent_components
        water_in += float(dose @ rates[:, 4])
        water_in += _oxidant_water(run, stage.oxidant_kg_per_h[0], stage.oxidised_mol_per_h[0])
        entering[h] -= float(stage.oxidised_mol_per_h[0])
        left = left + stage.cake.unreacted[0] + stage.cake.idle[0]
        leaving += stage.cake.totals[0] + stage.cake.solids[0] @ A
        leaving += stage.vented_mol_per_h[0] @ A_gas
        water_out += float(stage.cake.water[0] + stage.cake.solids[0] @ system.A_water[:ks])
        water_out += float(stage.vented_mol_per_h[0] @ system.A_water[ks:])
    bought_left = sum(s.dose_kg_per_h[0] @ (rates[:, 1] + rates[:, 2]) for s in run.stages)
    out: dict[str, float] = {}
    gap = entering - leaving
    names = list(system.components)
    if "Fe+2" in names and "Fe+3" in names:
        a, b = names.index("Fe+2"), names.index("Fe+3")
        total_in = entering[a] + entering[b]
        out["Fe"] = float((gap[a] + gap[b]) / total_in) if total_in else 0.0
    for j, name in enumerate(names):
        if name in {"Fe+2", "Fe+3", "H+"} or entering[j] == 0.0:
            continue
        out[name] = float(gap[j] / entering[j])
    protons = abs(entering[h]) + abs(leaving[h])
    out["H+"] = float(gap[h] / protons) if protons else 0.0
    out["water"] = (water_in - water_out) / water_in
    charge = model.system.component_charge
    iron = float(sum(s.oxidised_mol_per_h[0] for s in run.stages))
    out["charge"] = float((gap @ charge + iron) / (abs(entering) @ abs(charge)))
    if bought_left:
        out["unreacted reagent"] = float((bought_left - left.sum()) / bought_left)
    return out


def _oxidant_water(run: Run, kg: Array, oxidised: float) -> float:
    """Mol/h of water that comes with the oxidants and from what they do."""
    total = 0.0
    agents = list(run.model.flowsheet.oxidants.values())
    dosed = False
    for o, agent in enumerate(agents):
        if agent.formula is None or kg[o] <= 0.0:
            continue
        dosed = True
        active = kg[o] * agent.strength * 1000.0 / agent.molar_mass_g_per_mol
        used = active * agent.utilisation
        total += oxidised + (active - used)
        total += kg[o] * (1.0 - agent.strength) / WATER_KG_PER_MOL
    if not dosed:
        total += 0.5 * oxidised
    return total


def certificate_of(run: Run, stage: int) -> dict[str, float]:
    """Certificate figures of one vessel of a one-trial run, from its own outflows."""
    this = run.stages[stage]
    system = run.model.system
    ks = system.solids_count
    given = (
        this.pulp.totals + this.pulp.solids @ system.A[:ks] + this.vented_mol_per_h @ system.A[ks:]
    ) / this.solvent_kg_per_h[:, None]
    figures = certify(this.states, given, run.model.enabled, ln_pressure=run.model.ln_pressure)
    return {
        "balance_residual": float(figures.balance_residual[0]),
        "mass_action_residual_ln": float(figures.mass_action_residual_ln[0]),
        "charge_residual_eq_per_kg": float(figures.charge_residual_eq_per_kg[0]),
        "present_gap_log10": float(figures.present_gap_log10[0]),
        "supersaturation_log10": float(max(figures.supersaturation_log10[0], -300.0)),
    }


def saturation_log10(run: Run, stage: int) -> dict[str, float]:
    """log10(Q/K) of every solid that the stage's components could form."""
    system = run.model.system
    values = run.stages[stage].states.ln_saturation()[0] / LN10
    return {
        name: float(v)
        for name, v in zip(system.solids, values[: system.solids_count], strict=True)
        if np.isfinite(v)
    }
