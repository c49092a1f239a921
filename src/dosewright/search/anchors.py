"""Anchors: exact liquors along titrations of the feed, and the log-space constants they give.

Each anchor is one state of the exact model. At its ligand activities every metal has a ceiling (the
most that can stay dissolved), a solid it drops as, and a number of protons it carries: constants
that make a stage's equilibrium linear once the anchor is chosen.
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from dosewright.chemistry.activity import LN10, WATER_KG_PER_MOL
from dosewright.equilibrium import States, join_states, solve
from dosewright.plant import PlantModel, Run

Array = NDArray[np.float64]

PH_SPACING = 0.35  # of the anchors along a titration
SULFIDE_SPACING = 1.5  # decades of free sulfide, along a sulfide titration
DOSE_POINTS = 60  # solved along each titration before thinning
JUMP_POINTS = 6  # more between two of them where pH or sulfide jumps
TREATED_PH = (5.0, 6.0, 8.5)
TREATED_DOSES = 5  # of a reagent that is no base
MAX_PH = 12.6  # saturated lime water; no train goes beyond
MAX_ANCHORS = 160
LIGAND_CELL_DECADES = {"SO4-2": 0.2}  # sulfate sets how much gypsum forms: finer cells


_COLUMNS = (
    "pH", "ceiling", "solid", "drops", "drops_H", "protons", "base_protons", "ligand", "ln_activity",
    "log_free_sulfide",
)  # fmt: skip


@dataclass(frozen=True, eq=False)
class Anchors:
    """Constants of ``H`` anchors over ``J`` tracked components (metals first, then ligands).

    Amounts are mol per kg of water. ``ceiling`` (H, J) is the most of each metal that stays
    dissolved (``inf`` where no solid holds it); ``drops`` (H, J, J) the moles of every tracked
    component that leave with one mole of metal j, ``drops_H`` (H, J) the protons (negative: base),
    ``solid`` (H, J) the index of the solid (-1: none); ``protons`` (H, J) those carried by one mole
    in solution; ``base_protons`` (H,) those of water and of the components not tracked;
    ``ligand`` (H, J) the dissolved total of each ligand.
    """

    tracked: tuple[str, ...]
    metals: int
    pH: Array
    ceiling: Array
    solid: NDArray[np.int64]
    drops: Array
    drops_H: Array
    protons: Array
    base_protons: Array
    ligand: Array
    ln_activity: Array
    log_free_sulfide: Array

    @property
    def count(self) -> int:
        """Number of anchors."""
        return int(self.pH.size)

    def joined(self, other: Anchors) -> Anchors:
        """Return both sets of anchors, over the same components."""
        columns = (np.concatenate([getattr(self, name), getattr(other, name)]) for name in _COLUMNS)
        return Anchors(self.tracked, self.metals, *columns)

    def take(self, rows: NDArray[np.int64]) -> Anchors:
        """Return the anchors of the given rows."""
        return Anchors(self.tracked, self.metals, *(getattr(self, name)[rows] for name in _COLUMNS))


def tracked_components(model: PlantModel) -> tuple[tuple[str, ...], int]:
    """Components that precipitate: metals, then ligands; and the number of metals."""
    present = model.system.components
    solids = model.enabled[: model.system.solids_count]
    in_solids = {
        c
        for j, c in enumerate(present)
        if (model.system.A[: model.system.solids_count][solids][:, j] != 0.0).any()
    }
    charge = dict(zip(present, model.system.component_charge, strict=True))
    metals = tuple(c for c in present if c in in_solids and charge[c] > 0.0 and c != "H+")
    ligands = tuple(c for c in present if c in in_solids and charge[c] < 0.0)
    return metals + ligands, len(metals)


def anchors_of_states(model: PlantModel, states: States, rows: NDArray[np.int64]) -> Anchors:
    """Extract the constants of chosen rows of exact states."""
    system = model.system
    tracked, metals = tracked_components(model)
    index = [system.components.index(c) for c in tracked]
    h = system.components.index("H+")
    ks = system.solids_count
    allowed = np.flatnonzero(model.enabled[:ks])
    count, size = rows.size, len(tracked)
    ceiling = np.full((count, size), np.inf)
    solid = np.full((count, size), -1, dtype=np.int64)
    drops = np.zeros((count, size, size))
    drops_H = np.zeros((count, size))
    protons = np.zeros((count, size))
    base = np.zeros(count)
    ligand = np.zeros((count, size))
    nu = system.nu
    carrier = _carriers(nu, index)
    for a, row in enumerate(rows):
        x = states.ln_activity[row]
        ln_gamma = states.ln_gamma[row]
        ln_aw = states.ln_water_activity[row]
        known = np.isfinite(x)
        x0 = np.where(known, x, 0.0)
        m = states.molality[row]
        for t in range(size):
            j = index[t]
            others = (np.arange(x.size) != j) & ~known
            # protons and totals per unit free activity, from species with one of this component
            mine = (carrier == t) & ~(nu[:, others] != 0.0).any(axis=1)
            ln_m = (
                system.lnK
                + nu @ np.where(np.arange(x.size) == j, 0.0, x0)
                + system.nu_water * ln_aw
                - ln_gamma
            )
            weights = np.where(mine & (nu[:, j] == 1.0), np.exp(np.minimum(ln_m, 200.0)), 0.0)
            total = weights.sum()
            protons[a, t] = (weights * nu[:, h]).sum() / total
            if t >= metals:
                ligand[a, t] = float(m @ nu[:, j])
                continue
            best = np.inf
            for k in allowed:
                if system.A[k, j] <= 0.0 or (system.A[k, others] != 0.0).any():
                    continue
                row_A = system.A[k].copy()
                row_A[j] = 0.0
                ln_a = (system.lnKs[k] - row_A @ x0 - system.A_water[k] * ln_aw) / system.A[k, j]
                if ln_a < best:
                    best = ln_a
                    solid[a, t] = k
            if solid[a, t] >= 0:
                k = solid[a, t]
                ceiling[a, t] = total * np.exp(min(best, 200.0))
                share = system.A[k] / system.A[k, j]
                drops[a, t] = share[index]
                drops_H[a, t] = share[h]
        untracked = carrier < 0
        base[a] = float((m * nu[:, h])[untracked].sum())
    return Anchors(
        tracked, metals, states.pH[rows], ceiling, solid, drops, drops_H, protons, base, ligand,
        states.ln_activity[rows], _log_sulfide(system.components, states.take(rows)),
    )  # fmt: skip


def _carriers(nu: Array, index: list[int]) -> NDArray[np.int64]:
    """Which tracked component a species' protons are booked on (metals go first), -1 for none."""
    carrier = np.full(nu.shape[0], -1, dtype=np.int64)
    for t in range(len(index) - 1, -1, -1):
        carrier[nu[:, index[t]] > 0.0] = t
    return carrier


def anchors_of_run(model: PlantModel, run: Run) -> Anchors:
    """Anchors from the stages of a one-trial run: the lattice refined where the design stands."""
    parts = [anchors_of_states(model, s.states, np.array([0])) for s in run.stages]
    joined = parts[0]
    for part in parts[1:]:
        joined = joined.joined(part)
    return joined


def feed_anchors(model: PlantModel) -> Anchors:
    """Anchors along titrations of the feed with every reagent, and of feeds already treated.

    Liquors treated with each base to a few pHs, and with every other reagent to a few doses (solids
    removed), are titrated again with every reagent, so that sulfate-rich and
    sulfate-poor, carbonate-rich and sulfide-rich liquors, and sulfide at several pHs, are all on
    the lattice.
    """
    system = model.system
    h = system.components.index("H+")
    solvent = float(model.feed.water[0]) * WATER_KG_PER_MOL
    feed = model.feed.totals[0] / solvent
    stoichiometry = model.reagent_components
    fresh = [feed]
    if model.flowsheet.oxidants:
        fresh.append(_oxidised(model, feed))
    liquors = [(-1, liquor) for liquor in fresh]
    for liquor in fresh:
        for i in range(stoichiometry.shape[0]):
            states, totals = _titrate(model, liquor, stoichiometry[i])
            if stoichiometry[i, h] < 0.0:
                rows = [
                    int(np.argmin(abs(np.where(states.status == 0, states.pH, 99.0) - pH)))
                    for pH in TREATED_PH
                ]
            else:
                spaced = _thin(system.components, states)
                rows = [int(r) for r in spaced[1 :: max(1, (len(spaced) - 1) // TREATED_DOSES)]]
            for row in rows:
                left = totals[row] - states.phase_mol_per_kg[row] @ system.A
                liquors.append((i, np.where(abs(left) < 1e-15, 0.0, left)))
    parts: list[States] = []
    for n, (treated_with, liquor) in enumerate(liquors):
        for i in range(stoichiometry.shape[0]):
            both_bases = stoichiometry[i, h] < 0.0 and stoichiometry[treated_with, h] < 0.0
            if treated_with >= 0 and both_bases and (n - len(fresh)) % 3 != 1:
                continue  # one treated liquor per base is enough for the other bases
            states, _ = _titrate(model, liquor, stoichiometry[i])
            parts.append(states.take(_thin(system.components, states)))
    joined = join_states(parts)
    return anchors_of_states(model, joined, thinned_rows(model, joined, MAX_ANCHORS))


def _oxidised(model: PlantModel, liquor: Array) -> Array:
    """Return the liquor with its Fe(II) converted as the best oxidant does."""
    names = model.system.components
    fe2, fe3, h = (names.index(c) for c in ("Fe+2", "Fe+3", "H+"))
    share = max(agent.conversion for agent in model.flowsheet.oxidants.values())
    out = liquor.copy()
    moved = share * out[fe2]
    out[fe2] -= moved
    out[fe3] += moved
    out[h] -= moved
    return out


def _titrate(model: PlantModel, liquor: Array, reagent: Array) -> tuple[States, Array]:
    """Solve a titration, with more doses where pH or free sulfide jumps."""
    dose = np.concatenate([[0.0], np.geomspace(1e-5, 1.5, DOSE_POINTS)])
    states, totals = _dosed(model, liquor, reagent, dose)
    height = np.column_stack(
        [states.pH / PH_SPACING, _log_sulfide(model.system.components, states) / SULFIDE_SPACING]
    )
    jump = abs(np.diff(height, axis=0)).max(axis=1) > 1.5
    if jump.any():
        between = np.linspace(0.0, 1.0, JUMP_POINTS + 2)[1:-1]
        extra = (dose[:-1][jump, None] + np.diff(dose)[jump, None] * between).ravel()
        dose = np.unique(np.concatenate([dose, extra]))
        states, totals = _dosed(model, liquor, reagent, dose)
    return states, totals


def _dosed(model: PlantModel, liquor: Array, reagent: Array, dose: Array) -> tuple[States, Array]:
    totals = liquor[None, :] + dose[:, None] * reagent[None, :]
    # tiny negative totals are rounding of a component that has left altogether
    h = model.system.components.index("H+")
    other = np.arange(totals.shape[1]) != h
    totals[:, other] = np.maximum(totals[:, other], 0.0)
    states = solve(
        model.system,
        model.activity,
        totals,
        water_mol=np.full(dose.size, 1.0 / WATER_KG_PER_MOL),
        enabled=model.enabled,
        ln_pressure=model.ln_pressure,
    )
    return states, totals / states.water_kg[:, None]


def _log_sulfide(components: tuple[str, ...], states: States) -> Array:
    """log10 of the free sulfide's activity, not below -30; zero where there is no sulfide."""
    if "HS-" not in components:
        return np.zeros(states.status.size)
    x = states.ln_activity[:, components.index("HS-")] / LN10
    return np.asarray(np.maximum(np.where(np.isfinite(x), x, -30.0), -30.0))


def _thin(components: tuple[str, ...], states: States) -> NDArray[np.int64]:
    """Rows spaced by pH and by free sulfide."""
    sulfide = _log_sulfide(components, states)
    kept: list[int] = []
    for row in range(sulfide.size):
        if states.status[row] != 0 or states.pH[row] > MAX_PH:
            continue
        far = True
        if kept:
            last = kept[-1]
            far = (
                abs(states.pH[row] - states.pH[last]) >= PH_SPACING
                or abs(sulfide[row] - sulfide[last]) >= SULFIDE_SPACING
            )
        if far:
            kept.append(row)
    return np.array(kept, dtype=np.int64)


def _height(pH: Array, ligand: dict[str, Array], log_free_sulfide: Array) -> Array:
    """Where liquors stand, in units of the spacing wanted along each axis."""
    columns = [pH / PH_SPACING]
    for name, total in ligand.items():
        columns.append(np.log10(np.maximum(total, 1e-5)) / LIGAND_CELL_DECADES.get(name, 1.0))
        if name == "HS-":
            # near its metals' equivalence sulfide falls by decades while its total stands still
            columns.append(log_free_sulfide / SULFIDE_SPACING)
    return np.column_stack(columns)


def _one_per_cell(height: Array, most: int) -> NDArray[np.int64]:
    """Rows, one in each cell; cells widen until ``most`` are left."""
    widen = 1.0
    while True:
        _, first = np.unique(np.round(height / widen), axis=0, return_index=True)
        if first.size <= most:
            return np.sort(first)
        widen *= 1.12


def thinned_rows(model: PlantModel, states: States, most: int) -> NDArray[np.int64]:
    """Rows of states that differ enough to be anchors."""
    tracked, metals = tracked_components(model)
    components = model.system.components
    totals = states.dissolved_mol_per_kg
    ligand = {name: totals[:, components.index(name)] for name in tracked[metals:]}
    return _one_per_cell(_height(states.pH, ligand, _log_sulfide(components, states)), most)


def thinned(anchors: Anchors, most: int) -> Anchors:
    """Keep at most ``most`` anchors, one in each cell of pH and ligands."""
    names = anchors.tracked[anchors.metals :]
    ligand = {n: anchors.ligand[:, anchors.metals + t] for t, n in enumerate(names)}
    return anchors.take(_one_per_cell(_height(anchors.pH, ligand, anchors.log_free_sulfide), most))
