"""`equilibrate` and `equilibrate_batch`: names in, named results and a certificate out."""

from __future__ import annotations

import math
import warnings
from collections.abc import Iterable, Mapping, Sequence
from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from dosewright.chemistry.activity import ActivityModel, activity_model
from dosewright.chemistry.system import System, system_of
from dosewright.equilibrium.vessel import States, hold_phase, solve
from dosewright.errors import DosewrightError, NotConverged

Array = NDArray[np.float64]
LN10 = math.log(10.0)

BALANCE_TOLERANCE = 1e-9  # relative, per component
MASS_ACTION_TOLERANCE_LN = 1e-8
COMPLEMENTARITY_TOLERANCE_LOG10 = 1e-8


class RangeWarning(UserWarning):
    """A liquor lies outside the range of the activity model used on it."""


class Amounts(dict[str, float]):
    """A name -> value mapping in which a name that is not there counts as zero."""

    def __missing__(self, key: str) -> float:
        """Return zero for what is not there."""
        return 0.0


@dataclass(frozen=True)
class Certificate:
    """How well one result satisfies the equilibrium conditions, recomputed from the result.

    Attributes
    ----------
    balance_residual:
        Largest relative mass-balance residual over the components whose total was given.
    balance_component:
        The component it belongs to.
    mass_action_residual_ln:
        Largest |ln(activity) - lnK - nu.ln(activities)| over the species.
    charge_residual_eq_per_kg:
        Charge of the solution less the charge of what was put in, eq per kg of water.
    present_gap_log10:
        Largest |log10(Q/K)| over the phases that are present.
    supersaturation_log10:
        Largest log10(Q/K) over the allowed phases that are absent (``-inf`` when none).
    activity_change_ln:
        Last change of ln(gamma) in the iteration around the activity coefficients.
    """

    balance_residual: float
    balance_component: str
    mass_action_residual_ln: float
    charge_residual_eq_per_kg: float
    present_gap_log10: float
    supersaturation_log10: float
    activity_change_ln: float

    @property
    def passed(self) -> bool:
        """True when every figure is within its tolerance."""
        return (
            self.balance_residual <= BALANCE_TOLERANCE
            and self.mass_action_residual_ln <= MASS_ACTION_TOLERANCE_LN
            and abs(self.charge_residual_eq_per_kg) <= 1e-9
            and self.present_gap_log10 <= COMPLEMENTARITY_TOLERANCE_LOG10
            and self.supersaturation_log10 <= COMPLEMENTARITY_TOLERANCE_LOG10
            and self.activity_change_ln <= 1e-9
        )


@dataclass(frozen=True)
class Equilibrium:
    """One vessel at equilibrium; amounts are mol per kg of water.

    Attributes
    ----------
    pH: -log10 of the hydrogen-ion activity.
    ionic_strength: mol per kg of water.
    dissolved: component -> mol/kg in solution, all its species together.
    solids: solid -> mol/kg formed (absent solids count as zero).
    gases: gas -> mol/kg given off (taken up when negative), for gases held with ``fix``.
    species: aqueous species -> molality.
    activity_coefficient: aqueous species -> activity coefficient (molal scale).
    saturation: solid -> log10(Q/K), switched on or not.
    water_activity: activity of water.
    activity_model: name of the activity model used.
    certificate: see `Certificate`.
    """

    pH: float
    ionic_strength: float
    dissolved: Amounts
    solids: Amounts
    gases: Amounts
    species: Amounts
    activity_coefficient: dict[str, float]
    saturation: dict[str, float]
    water_activity: float
    activity_model: str
    temperature_C: float
    certificate: Certificate


@dataclass(frozen=True, eq=False)
class Batch:
    """``N`` vessels at equilibrium, as arrays.

    Attributes
    ----------
    components, species_names, solid_names: names of the columns below.
    pH, ionic_strength, water_activity: (N,).
    dissolved: (N, components) mol per kg of water in solution.
    solids: (N, solids) mol per kg of water.
    species: (N, species) molality.
    activity_coefficient: (N, species).
    saturation: (N, solids) log10(Q/K).
    certificates: one `Certificate` for each problem.
    """

    components: tuple[str, ...]
    species_names: tuple[str, ...]
    solid_names: tuple[str, ...]
    pH: Array
    ionic_strength: Array
    water_activity: Array
    dissolved: Array
    solids: Array
    species: Array
    activity_coefficient: Array
    saturation: Array
    certificates: tuple[Certificate, ...]


@dataclass(frozen=True, eq=False)
class CertificateArrays:
    """The figures of `Certificate` for a batch, each of shape (N,)."""

    balance_residual: Array
    balance_component: NDArray[np.int64]
    mass_action_residual_ln: Array
    charge_residual_eq_per_kg: Array
    present_gap_log10: Array
    supersaturation_log10: Array
    activity_change_ln: Array


def certify(
    states: States,
    totals_mol_per_kg: Array,
    enabled: NDArray[np.bool_],
    *,
    free: Sequence[str] = (),
    ln_pressure: Mapping[str, float] | None = None,
) -> CertificateArrays:
    """Recompute the optimality conditions from the results alone (no solver code is used).

    ``totals_mol_per_kg`` has shape (N, nc); ``free`` names components whose total was not given.
    """
    system = states.system
    m, n = states.molality, states.phase_mol_per_kg
    balance = m @ system.nu + n @ system.A - totals_mol_per_kg
    scale = m @ np.abs(system.nu) + n @ np.abs(system.A)
    # a one-signed balance is judged against its own total; the proton balance, which cancels,
    # against the sum of its terms
    scale = np.where(totals_mol_per_kg != 0.0, np.maximum(scale, abs(totals_mol_per_kg)), scale)
    relative = np.divide(abs(balance), scale, out=np.zeros_like(balance), where=scale > 0.0)
    for name in free:
        relative[:, system.components.index(name)] = 0.0
    worst = relative.argmax(axis=1)

    finite = np.isfinite(states.ln_activity)
    x = np.where(finite, states.ln_activity, 0.0)
    ln_aw = states.ln_water_activity
    expected = x @ system.nu.T + np.outer(ln_aw, system.nu_water) + system.lnK
    with np.errstate(divide="ignore"):
        actual = np.log(m) + states.ln_gamma
    there = m > 1e-300
    action = np.where(there, abs(np.where(there, actual, 0.0) - expected), 0.0).max(axis=1)

    ln_sat = states.ln_saturation()
    for name, value in (ln_pressure or {}).items():
        ln_sat[:, system.phases.index(name)] -= value
    allowed = np.broadcast_to(enabled, n.shape)
    present = n > 0.0
    gap = np.where(present, abs(np.where(present, ln_sat, 0.0)), 0.0).max(axis=1, initial=0.0)
    absent = np.where(allowed & ~present, ln_sat, -np.inf).max(axis=1, initial=-np.inf)

    put_in = totals_mol_per_kg.copy()
    for name in free:
        j = system.components.index(name)
        put_in[:, j] = (m @ system.nu + n @ system.A)[:, j]
    charge_in = put_in @ _basis_charge(system)
    charge = m @ system.charge - charge_in
    return CertificateArrays(
        balance_residual=relative.max(axis=1),
        balance_component=worst,
        mass_action_residual_ln=action,
        charge_residual_eq_per_kg=charge,
        present_gap_log10=gap / LN10,
        supersaturation_log10=absent / LN10,
        activity_change_ln=states.info[:, 7],
    )


def _basis_charge(system: System) -> Array:
    """Charge carried by one mole of each basis entry (a held gas carries none)."""
    # species charges are linear in the basis: solve from the free ions of the original basis
    solution, *_ = np.linalg.lstsq(system.nu, system.charge, rcond=None)
    return np.asarray(solution, dtype=np.float64)


def _certificate(arrays: CertificateArrays, row: int, system: System) -> Certificate:
    return Certificate(
        balance_residual=float(arrays.balance_residual[row]),
        balance_component=system.components[int(arrays.balance_component[row])],
        mass_action_residual_ln=float(arrays.mass_action_residual_ln[row]),
        charge_residual_eq_per_kg=float(arrays.charge_residual_eq_per_kg[row]),
        present_gap_log10=float(arrays.present_gap_log10[row]),
        supersaturation_log10=float(arrays.supersaturation_log10[row]),
        activity_change_ln=float(arrays.activity_change_ln[row]),
    )


@dataclass(frozen=True, eq=False)
class _Solved:
    system: System  # the original basis
    states: States  # in the original basis
    certificates: CertificateArrays
    certified_system: System
    model: ActivityModel
    gas_mol_per_kg: dict[str, Array]


_GAS_COMPONENT = {"CO2(g)": "CO3-2", "H2S(g)": "HS-", "NH3(g)": "NH4+"}


def _check_totals(values: Mapping[str, Array]) -> None:
    for name, column in values.items():
        if not np.isfinite(column).all():
            raise DosewrightError(f"total of {name} is not a finite number")
        if name != "H+" and (column < 0.0).any():
            raise DosewrightError(f"total of {name} is negative; amounts are mol per kg of water")


def _solve_named(
    totals: Mapping[str, Array],
    count: int,
    temperature_C: float,
    activity: str,
    solids: str | Iterable[str],
    fix: Mapping[str, float | Array] | None,
) -> _Solved:
    _check_totals(totals)
    fixed = dict(fix or {})
    gases = [name for name in fixed if name != "pH"]
    for name in gases:
        if name not in _GAS_COMPONENT:
            known = ", ".join(["pH", *_GAS_COMPONENT])
            raise DosewrightError(f"cannot fix '{name}'; fix takes {known}")
    system = system_of({*totals, *(_GAS_COMPONENT[g] for g in gases)}, temperature_C)
    enabled = system.enabled(solids)
    T = np.zeros((count, len(system.components)))
    for name, column in totals.items():
        T[:, system.components.index(name)] = column
    h = system.components.index("H+")
    if "H+" not in totals:
        others = np.arange(len(system.components)) != h
        T[:, h] = -(T[:, others] @ system.component_charge[others])

    held: dict[str, Array] = {}
    basis, T_basis = system, T
    for gas in gases:
        component = _GAS_COMPONENT[gas]
        pressure = np.broadcast_to(np.asarray(fixed[gas], dtype=float), (count,))
        if not (pressure > 0.0).all():
            raise DosewrightError(f"the pressure of {gas} must be above zero atm")
        k, j = basis.phases.index(gas), basis.components.index(component)
        T_basis = T_basis - np.outer(T_basis[:, j] / basis.A[k, j], basis.A[k])
        basis = hold_phase(basis, gas, component)
        held[component] = np.log(pressure)
    if "pH" in fixed:
        pH = np.broadcast_to(np.asarray(fixed["pH"], dtype=float), (count,))
        held["H+"] = -LN10 * pH
    model = activity_model(activity, temperature_C)
    raw = solve(basis, model, T_basis, enabled=enabled, held=held)
    failed = np.flatnonzero(raw.status)
    if failed.size:
        row = int(failed[0])
        raise NotConverged(
            f"equilibrium {row} of {count} was not solved: {raw.why_failed(row)} "
            f"({failed.size} in all)"
        )
    # with a gas held, its column of the basis holds the gas; certificates speak of that basis
    certificates = certify(raw, T_basis, enabled, free=tuple(held))
    x = raw.ln_activity.copy()
    gas_moles: dict[str, Array] = {}
    for gas in reversed(gases):
        component = _GAS_COMPONENT[gas]
        k, j = system.phases.index(gas), system.components.index(component)
        others = np.arange(len(system.components)) != j
        finite = np.where(np.isfinite(x), x, 0.0)
        x[:, j] = (
            held[component]
            + system.lnKs[k]
            - finite[:, others] @ system.A[k, others]
            - raw.ln_water_activity * system.A_water[k]
        ) / system.A[k, j]
    states = States(system, x, raw.molality, raw.phase_mol_per_kg, raw.ln_gamma, raw.info)
    for gas in gases:
        component = _GAS_COMPONENT[gas]
        k, j = system.phases.index(gas), system.components.index(component)
        in_vessel = states.dissolved_mol_per_kg[:, j] + states.phase_mol_per_kg @ system.A[:, j]
        gas_moles[gas] = (T[:, j] - in_vessel) / system.A[k, j]
    return _Solved(system, states, certificates, basis, model, gas_moles)


def _warn_range(model: ActivityModel, strength: Array) -> None:
    limit = model.max_ionic_strength_mol_per_kg
    if model.name != "ideal" and (strength > limit).any():
        warnings.warn(
            f"ionic strength {strength.max():.3g} mol/kg is above the {limit:g} mol/kg up to which "
            f"the {model.name} activity model is used; results are extrapolated",
            RangeWarning,
            stacklevel=3,
        )


def equilibrate(
    totals: Mapping[str, float],
    *,
    temperature_C: float = 25.0,
    activity: str = "auto",
    solids: str | Iterable[str] = "fast",
    fix: Mapping[str, float] | None = None,
) -> Equilibrium:
    """Find the equilibrium of one vessel.

    Parameters
    ----------
    totals:
        Component name (``"Ca+2"``, ``"SO4-2"``, ``"H+"`` ...) -> mol per kg of water, dissolved
        and solid together. ``H+`` left out is closed by electroneutrality.
    temperature_C:
        0 to 100; constants follow their enthalpies.
    activity:
        ``"auto"``, ``"davies"`` or ``"ideal"``.
    solids:
        ``"fast"`` (those that form in minutes), ``"all"``, or a list of names; an empty list
        lets none form.
    fix:
        ``"pH"`` -> value, or a gas such as ``"CO2(g)"`` -> partial pressure in atm; the total of
        that component is then free.

    Raises
    ------
    DosewrightError
        For an unknown name or an impossible value.
    NotConverged
        When no certified answer was found.
    """
    columns = {name: np.array([float(value)]) for name, value in totals.items()}
    solved = _solve_named(columns, 1, temperature_C, activity, solids, fix)
    states, system = solved.states, solved.system
    certificate = _certificate(solved.certificates, 0, system)
    if not certificate.passed:
        raise NotConverged(f"the result fails its own certificate: {certificate}")
    _warn_range(solved.model, states.ionic_strength)
    saturation = states.ln_saturation()[0] / LN10
    phases = states.phase_mol_per_kg[0]
    count = system.solids_count
    return Equilibrium(
        pH=float(states.pH[0]),
        ionic_strength=float(states.ionic_strength[0]),
        dissolved=Amounts(_pairs(system.components, states.dissolved_mol_per_kg[0])),
        solids=Amounts(
            (name, float(value))
            for name, value in zip(system.solids, phases[:count], strict=True)
            if value > 0.0
        ),
        gases=Amounts((gas, float(value[0])) for gas, value in solved.gas_mol_per_kg.items()),
        species=Amounts(_pairs(system.species, states.molality[0])),
        activity_coefficient=dict(_pairs(system.species, np.exp(states.ln_gamma[0]))),
        saturation={
            name: float(value)
            for name, value in zip(system.solids, saturation[:count], strict=True)
            if np.isfinite(value)
        },
        water_activity=float(np.exp(states.ln_water_activity[0])),
        activity_model=solved.model.name,
        temperature_C=temperature_C,
        certificate=certificate,
    )


def _pairs(names: tuple[str, ...], values: Array) -> list[tuple[str, float]]:
    return [(name, float(value)) for name, value in zip(names, values, strict=True)]


def equilibrate_batch(
    totals: Mapping[str, Sequence[float] | Array],
    *,
    temperature_C: float = 25.0,
    activity: str = "auto",
    solids: str | Iterable[str] = "fast",
    fix: Mapping[str, float | Sequence[float] | Array] | None = None,
) -> Batch:
    """Find the equilibria of many vessels at once, on all cores.

    As `equilibrate`, with arrays of shape (N,) (or one number for all) in place of numbers.

    Raises
    ------
    DosewrightError
        For an unknown name, an impossible value, or columns of different length.
    NotConverged
        When any of them was not solved; the message names the first.
    """
    arrays = {name: np.atleast_1d(np.asarray(value, float)) for name, value in totals.items()}
    conditions = {name: np.atleast_1d(np.asarray(v, float)) for name, v in (fix or {}).items()}
    lengths = {a.size for a in (*arrays.values(), *conditions.values())} - {1}
    if len(lengths) > 1:
        raise DosewrightError(f"columns of different length: {sorted(lengths)}")
    count = lengths.pop() if lengths else 1
    columns = {name: np.broadcast_to(a, (count,)) for name, a in arrays.items()}
    solved = _solve_named(columns, count, temperature_C, activity, solids, conditions)
    states, system = solved.states, solved.system
    certificates = tuple(_certificate(solved.certificates, row, system) for row in range(count))
    for row, certificate in enumerate(certificates):
        if not certificate.passed:
            raise NotConverged(f"equilibrium {row} fails its own certificate: {certificate}")
    _warn_range(solved.model, states.ionic_strength)
    k = system.solids_count
    return Batch(
        components=system.components,
        species_names=system.species,
        solid_names=system.solids,
        pH=states.pH,
        ionic_strength=states.ionic_strength,
        water_activity=np.exp(states.ln_water_activity),
        dissolved=states.dissolved_mol_per_kg,
        solids=states.phase_mol_per_kg[:, :k],
        species=states.molality,
        activity_coefficient=np.exp(states.ln_gamma),
        saturation=states.ln_saturation()[:, :k] / LN10,
        certificates=certificates,
    )
