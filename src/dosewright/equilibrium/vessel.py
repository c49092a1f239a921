"""Batches of vessels: arrays in, arrays out. The one place that calls the kernel."""

from __future__ import annotations

import os
from collections.abc import Sequence
from concurrent.futures import ThreadPoolExecutor
from dataclasses import dataclass, replace
from itertools import pairwise

import numpy as np
from numpy.typing import NDArray

from dosewright.chemistry.activity import ActivityModel
from dosewright.chemistry.system import System
from dosewright.equilibrium import _kernel

Array = NDArray[np.float64]
Mask = NDArray[np.bool_]

_STATUS_TEXT = {
    _kernel.STATUS_INNER_FAILED: "the mass balances did not close",
    _kernel.STATUS_OUTER_FAILED: "the activity coefficients did not settle",
    _kernel.STATUS_DRY: "the solids bind all the water",
}
_PARALLEL_FROM = 64  # problems below which threads cost more than they bring


@dataclass(frozen=True, eq=False)
class States:
    """Equilibria of ``N`` vessels over one ``System`` (its shapes ns, nc, nk).

    Attributes
    ----------
    ln_activity: (N, nc), ``-inf`` where a component is absent.
    molality: (N, ns) mol per kg of water.
    phase_mol_per_kg: (N, nk) moles of each solid or vented gas per kg of water.
    ln_gamma: (N, ns).
    ln_water_activity, ionic_strength, water_kg: (N,).
    status: (N,) 0 where solved.
    inner_residual, supersaturation_ln, present_gap_ln, last_change: (N,) the kernel's own figures.
    """

    system: System
    ln_activity: Array
    molality: Array
    phase_mol_per_kg: Array
    ln_gamma: Array
    info: Array

    def take(self, rows: NDArray[np.int64]) -> States:
        """Return the states of the given rows."""
        return States(
            self.system,
            self.ln_activity[rows],
            self.molality[rows],
            self.phase_mol_per_kg[rows],
            self.ln_gamma[rows],
            self.info[rows],
        )

    @property
    def status(self) -> NDArray[np.int64]:
        """Kernel status, 0 where solved."""
        return self.info[:, 0].astype(np.int64)

    @property
    def ionic_strength(self) -> Array:
        """Ionic strength, mol per kg of water."""
        return self.info[:, 4]

    @property
    def ln_water_activity(self) -> Array:
        """Natural logarithm of the water activity."""
        return self.info[:, 5]

    @property
    def water_kg(self) -> Array:
        """Mass of solvent water, kg."""
        return self.info[:, 6]

    @property
    def pH(self) -> Array:
        """Negative decimal logarithm of the hydrogen-ion activity."""
        h = self.system.components.index("H+")
        return np.asarray(-self.ln_activity[:, h] / np.log(10.0))

    @property
    def dissolved_mol_per_kg(self) -> Array:
        """(N, nc) each component in solution, all its species together, mol per kg of water."""
        return np.asarray(self.molality @ self.system.nu)

    def ln_saturation(self) -> Array:
        """(N, nk) ln(Q/K) of every phase (gases against 1 atm), ``-inf`` where one cannot be."""
        finite = np.isfinite(self.ln_activity)
        x = np.where(finite, self.ln_activity, 0.0)
        value = (
            x @ self.system.A.T
            + np.outer(self.ln_water_activity, self.system.A_water)
            - self.system.lnKs
        )
        missing = (~finite).astype(float) @ (self.system.A != 0.0).T.astype(float) > 0.0
        value[missing] = -np.inf
        return value

    def why_failed(self, row: int) -> str:
        """Say in words why problem ``row`` was not solved."""
        return _STATUS_TEXT.get(int(self.status[row]), "solved")


def join_states(parts: Sequence[States]) -> States:
    """Stack states of the same system."""
    names = ("ln_activity", "molality", "phase_mol_per_kg", "ln_gamma", "info")
    return States(
        parts[0].system, *(np.concatenate([getattr(p, name) for p in parts]) for name in names)
    )


def hold_phase(system: System, phase: str, component: str) -> System:
    """Exchange ``component`` for ``phase`` in the basis, so that the phase can be held.

    The returned system has the phase's formula in the component's column; its total is free.
    """
    k = system.phases.index(phase)
    j = system.components.index(component)
    row = system.A[k]
    pivot = row[j]

    def switch(matrix: Array) -> Array:
        out = matrix - np.outer(matrix[:, j] / pivot, row)
        out[:, j] = matrix[:, j] / pivot
        return out

    return replace(
        system,
        nu=switch(system.nu),
        nu_water=system.nu_water - system.nu[:, j] / pivot * system.A_water[k],
        lnK=system.lnK + system.nu[:, j] / pivot * system.lnKs[k],
        A=switch(system.A),
        A_water=system.A_water - system.A[:, j] / pivot * system.A_water[k],
        lnKs=system.lnKs - system.A[:, j] / pivot * system.lnKs[k],
    )


def solve(
    system: System,
    activity: ActivityModel,
    totals: Array,
    *,
    enabled: Mask,
    water_mol: Array | None = None,
    ln_pressure: dict[str, float] | None = None,
    held: dict[str, Array] | None = None,
    start: States | None = None,
) -> States:
    """Solve ``N`` equilibria; failures are marked in ``status``, never hidden.

    Parameters
    ----------
    totals: (N, nc) mol per kg of water, or mol when ``water_mol`` is given.
    enabled: (nk,) or (N, nk) phases that may form.
    water_mol: (N,) mol of water held by each vessel in all forms; the solvent's mass follows.
        Left out: one kg of solvent.
    ln_pressure: gas name -> ln of the pressure in atm above which it leaves.
    held: component -> (N,) ln activity at which it is held; its balance is dropped.
    start: states of earlier, similar vessels, to begin from.
    """
    count, nc = totals.shape
    ns, nk = len(system.species), len(system.phases)
    pointers, columns, values = system.sparse_nu
    lnKs = np.broadcast_to(system.lnKs, (count, nk)).copy()
    for name, value in (ln_pressure or {}).items():
        lnKs[:, system.phases.index(name)] += value
    allowed = np.ascontiguousarray(np.broadcast_to(enabled, (count, nk)))
    is_held = np.zeros(nc, dtype=bool)
    x_held = np.zeros((count, nc))
    for name, target in (held or {}).items():
        j = system.components.index(name)
        is_held[j] = True
        x_held[:, j] = target
    warm = np.zeros(count, dtype=bool)
    x = np.zeros((count, nc))
    phase = np.zeros((count, nk))
    ln_gamma = np.zeros((count, ns))
    info = np.zeros((count, 8))
    if start is not None:
        x[:] = start.ln_activity
        phase[:] = start.phase_mol_per_kg
        ln_gamma[:] = start.ln_gamma
        info[:] = start.info
        usable = np.isfinite(x) | (totals == 0.0) | is_held
        warm[:] = usable.all(axis=1) & (start.status == 0)
        x[~np.isfinite(x)] = 0.0
    molality = np.zeros((count, ns))
    neutral = system.is_gas_species * activity.neutral_log10_per_strength * np.log(10.0)
    water = np.zeros(count) if water_mol is None else np.asarray(water_mol, dtype=float)
    totals = np.ascontiguousarray(totals, dtype=float)

    def run(part: slice) -> None:
        _kernel.solve(
            totals[part], water[part], system.lnK, pointers, columns, values, system.nu_water,
            system.charge, neutral, system.A, system.A_water, lnKs[part], allowed[part],
            is_held, x_held[part], activity.code, activity.parameters, x[part], phase[part],
            ln_gamma[part], warm[part], molality[part], info[part],
        )  # fmt: skip

    workers = min(os.cpu_count() or 1, max(1, count // _PARALLEL_FROM))
    if workers == 1:
        run(slice(0, count))
    else:
        edges = np.linspace(0, count, 4 * workers + 1).astype(int)
        with ThreadPoolExecutor(workers) as pool:
            list(pool.map(run, [slice(a, b) for a, b in pairwise(edges)]))
    return States(system, x, molality, phase, ln_gamma, info)
