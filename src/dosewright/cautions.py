"""Cautions: where a solved stage could hurt someone or foul the plant.

Each rule looks at one simulated trial and yields cautions; to add one, write a rule and put it in
`RULES`. They are screening flags from an equilibrium estimate, nothing more.
"""

from __future__ import annotations

from collections.abc import Callable, Iterator
from dataclasses import dataclass

import numpy as np

from dosewright.chemistry.activity import LN10
from dosewright.plant import Run, StageRun

DISCLAIMER = (
    "Screening flags from an equilibrium estimate, not a safety assessment. Confirm against safety "
    "data sheets, a hazard study, site permits and local codes; decisions belong to appropriately "
    "licensed practitioners."
)

MOLAR_VOLUME_L = 24.47  # of a gas at 25 C and 1 atm


@dataclass(frozen=True)
class Caution:
    """One caution: ``level`` is note, warn or stop."""

    level: str
    hazard: str
    where: str
    text: str
    value: float
    unit: str


def _level(value: float, note: float, warn: float, stop: float) -> str | None:
    if value >= stop:
        return "stop"
    if value >= warn:
        return "warn"
    return "note" if value >= note else None


def headspace_ppm(stage: StageRun, gas: str, row: int = 0) -> float:
    """Gas over the liquor at equilibrium, ppm by volume at 1 atm."""
    states = stage.states
    system = states.system
    if gas not in system.phases:
        return 0.0
    value = states.ln_saturation()[row, system.phases.index(gas)]
    return float(1e6 * np.exp(value)) if np.isfinite(value) else 0.0


def _sulfide_reagents(run: Run) -> list[int]:
    reagents = run.model.flowsheet.reagents.values()
    return [i for i, r in enumerate(reagents) if r.components.get("HS-", 0.0) > 0.0]


def hydrogen_sulfide(run: Run) -> Iterator[Caution]:
    """H2S: ceiling 10 ppm, immediately dangerous 100 ppm (NIOSH pocket guide; memory)."""
    sulfide = _sulfide_reagents(run)
    for k, stage in enumerate(run.stages, start=1):
        ppm = headspace_ppm(stage, "H2S(g)")
        level = _level(ppm, 1.0, 10.0, 100.0)
        where = f"stage {k}"
        if level:
            yield Caution(
                level, "H2S", where,
                "hydrogen sulfide over the liquor: closed tank, scrubber, gas alarm; it dulls the "
                "sense of smell before it kills", ppm, "ppm",
            )  # fmt: skip
        dosed = any(stage.dose_kg_per_h[0, i] > 0.0 for i in sulfide)
        pH = float(stage.states.pH[0])
        if dosed and pH < 8.0:
            yield Caution(
                "warn", "H2S", where,
                "sulfide reagent in a tank below pH 8: an overdose or an acid surge sets hydrogen "
                "sulfide free", pH, "pH",
            )  # fmt: skip
    held = False
    h = run.model.system.components.index("H+")
    reagents = list(run.model.flowsheet.reagents.values())
    for k, stage in enumerate(run.stages, start=1):
        held = held or any(stage.dose_kg_per_h[0, i] > 0.0 for i in sulfide)
        acid = [
            r.name
            for i, r in enumerate(reagents)
            if run.model.reagent_components[i, h] > 0.0
            and stage.dose_kg_per_h[0, i] > 0.0
            and i not in sulfide
        ]
        if held and acid:
            yield Caution(
                "stop", "H2S", f"stage {k}",
                f"{acid[0]} meets liquor or solids that hold sulfide",
                float(stage.states.pH[0]), "pH",
            )  # fmt: skip


def ammonia(run: Run) -> Iterator[Caution]:
    """NH3: exposure limit 25 ppm, immediately dangerous 300 ppm (NIOSH pocket guide; memory)."""
    for k, stage in enumerate(run.stages, start=1):
        ppm = headspace_ppm(stage, "NH3(g)")
        level = _level(ppm, 10.0, 25.0, 300.0)
        if level:
            yield Caution(
                level, "NH3", f"stage {k}",
                "ammonia over the liquor: covered tank and extraction", ppm, "ppm",
            )  # fmt: skip


def carbon_dioxide(run: Run) -> Iterator[Caution]:
    """CO2 given off: foam and, in closed rooms, suffocation (common practice, no source)."""
    gases = run.model.system.gases
    if "CO2(g)" not in gases:
        return
    flow = run.model.flowsheet.feed.flow_m3_per_h
    for k, stage in enumerate(run.stages, start=1):
        volume = float(stage.vented_mol_per_h[0, gases.index("CO2(g)")])
        volume *= MOLAR_VOLUME_L / 1000.0 / flow
        if volume > 0.3:
            yield Caution(
                "warn", "CO2", f"stage {k}",
                "carbon dioxide given off per volume of liquor: foam, freeboard, ventilation of "
                "enclosed spaces", volume, "m3/m3",
            )  # fmt: skip


def heat(run: Run) -> Iterator[Caution]:
    """Temperature rise of neutralisation and slaking, an upper estimate."""
    for k, stage in enumerate(run.stages, start=1):
        rise = float(stage.heat_K[0])
        level = _level(rise, 10.0, 25.0, np.inf)
        if level:
            yield Caution(
                level, "heat", f"stage {k}", "temperature rise if no heat is lost", rise, "K"
            )


def scale(run: Run) -> Iterator[Caution]:
    """Gypsum or calcite at or above saturation in an overflow (common practice, no source)."""
    system = run.model.system
    for k, stage in enumerate(run.stages, start=1):
        values = stage.states.ln_saturation()[0] / LN10
        for name in ("gypsum", "calcite"):
            if name not in system.phases:
                continue
            i = system.phases.index(name)
            present = stage.states.phase_mol_per_kg[0, i] > 0.0
            if values[i] > 0.15:
                yield Caution(
                    "warn", "scale", f"stage {k}",
                    f"overflow supersaturated with {name}: seed, recycle solids or soften",
                    float(values[i]), "log10(Q/K)",
                )  # fmt: skip
            elif present or values[i] > -0.005:
                yield Caution(
                    "note", "scale", f"stage {k}",
                    f"overflow saturated with {name}: pipes and pumps will scale",
                    float(values[i]), "log10(Q/K)",
                )  # fmt: skip


def peroxide(run: Run) -> Iterator[Caution]:
    """Hydrogen peroxide decomposes on dissolved and solid Fe, Cu, Mn (safety data sheets; memory)."""
    oxidants = list(run.model.flowsheet.oxidants.values())
    for k, stage in enumerate(run.stages, start=1):
        for o, agent in enumerate(oxidants):
            kg = float(stage.oxidant_kg_per_h[0, o])
            if agent.formula == "H2O2" and kg > 0.0:
                yield Caution(
                    "warn", "H2O2", f"stage {k}",
                    "peroxide with iron, copper or manganese gives off oxygen and heat: vent the "
                    "tank, never trap it between closed valves", kg, "kg/h",
                )  # fmt: skip


def strong_solutions(run: Run) -> Iterator[Caution]:
    """Concentrated acid and caustic."""
    for k, stage in enumerate(run.stages, start=1):
        for i, reagent in enumerate(run.model.flowsheet.reagents.values()):
            strong = reagent.formula in {"NaOH", "KOH", "H2SO4", "HCl", "HNO3"}
            kg = float(stage.dose_kg_per_h[0, i])
            if strong and reagent.strength >= 0.2 and kg > 0.0:
                yield Caution(
                    "note", "corrosive", f"stage {k}",
                    f"{reagent.name} burns skin and eyes and heats up on dilution", kg, "kg/h",
                )  # fmt: skip


RULES: tuple[Callable[[Run], Iterator[Caution]], ...] = (
    hydrogen_sulfide,
    ammonia,
    carbon_dioxide,
    heat,
    scale,
    peroxide,
    strong_solutions,
)


def cautions_of(run: Run) -> list[Caution]:
    """All cautions of a one-trial run, gravest first."""
    order = {"stop": 0, "warn": 1, "note": 2}
    found = [caution for rule in RULES for caution in rule(run)]
    return sorted(found, key=lambda c: order[c.level])
