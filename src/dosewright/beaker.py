"""A single vessel on the bench: solutions and reagents poured together.

Says what stays dissolved, what settles, the pH and the saturation; and beside the full answer what
comparing bare ion products with solubility products says at the moment of mixing.
"""

from __future__ import annotations

import math
from collections.abc import Mapping
from dataclasses import dataclass
from pathlib import Path
from typing import Any

from dosewright.chemistry.activity import water_density_kg_per_m3
from dosewright.chemistry.catalogue import catalogue
from dosewright.chemistry.formula import molar_mass_g_per_mol
from dosewright.equilibrium import Equilibrium, equilibrate
from dosewright.errors import Fault, InputError
from dosewright.flowsheet import decompose, read_toml
from dosewright.quantities import QuantityError, parse, parse_concentration

#: common practice, no source: products about a hundredfold apart separate cleanly
CLEAN_FACTOR = 100.0


@dataclass(frozen=True)
class Poured:
    """One thing poured: mol of components, grams of water, litres."""

    name: str
    components: Mapping[str, float]
    water_g: float
    volume_L: float


@dataclass(frozen=True)
class Beaker:
    """What is poured, and under which conditions."""

    title: str
    temperature_C: float
    poured: tuple[Poured, ...]
    solids: str | tuple[str, ...]
    co2_atm: float | None


@dataclass(frozen=True)
class SolidRow:
    """One solid: what forms, and what the bare solubility product says.

    ``ion_product_log10`` is log10 of the ion product of the total concentrations over the solubility
    product, without complexes, activity or acid-base equilibria of the ligands; None where the solid
    takes part of its ions from water. ``mixed_log10`` is log10(Q/K) just mixed, in full, before
    anything settles; ``final_log10`` at the end.
    """

    name: str
    allowed: bool
    mmol: float
    grams: float
    mixed_log10: float
    final_log10: float
    ion_product_log10: float | None


@dataclass(frozen=True)
class BeakerResult:
    """The vessel at equilibrium.

    ``dissolved_mol_per_L`` and ``total_mol_per_L`` by component; ``settled_percent`` the share of
    each component in solids; ``separations`` sentences on which metals part.
    """

    title: str
    temperature_C: float
    volume_L: float
    water_kg: float
    pH: float
    mixed_pH: float
    ionic_strength_mol_per_kg: float
    activity_model: str
    total_mol_per_L: dict[str, float]
    dissolved_mol_per_L: dict[str, float]
    dissolved_mg_per_L: dict[str, float]
    settled_percent: dict[str, float]
    solids: list[SolidRow]
    separations: list[str]
    certificate_passed: bool


def load_beaker(path: str | Path) -> Beaker:
    """Read a beaker file (TOML).

    Raises
    ------
    InputError
        Naming the file, the key and the remedy.
    """
    return beaker_from(read_toml(path), str(path))


_TOP = ("title", "notice", "temperature", "pour", "settings")
_POUR = ("name", "volume", "contains", "mass", "of", "purity")
_SETTINGS = ("solids", "open_to_CO2")


def beaker_from(document: Mapping[str, Any], source: str) -> Beaker:
    """Build a beaker from a document already parsed.

    Raises
    ------
    InputError
        As `load_beaker`.
    """
    faults: list[Fault] = []

    def unknown(where: str, table: Mapping[str, Any], keys: tuple[str, ...]) -> None:
        for key in table:
            if key not in keys:
                faults.append(
                    Fault(
                        f"{where}{key}", "is not a key of this table", f"known: {', '.join(keys)}"
                    )
                )

    unknown("", document, _TOP)
    temperature = 25.0
    if "temperature" in document:
        temperature = _quantity(faults, "temperature", document["temperature"], "temperature", 25.0)
    pours = document.get("pour", [])
    if not isinstance(pours, list) or not pours or not all(isinstance(p, dict) for p in pours):
        faults.append(Fault("pour", "is missing", "write one [[pour]] table per liquid or solid"))
        pours = []
    density = water_density_kg_per_m3(temperature if 0.0 <= temperature <= 100.0 else 25.0) / 1000.0
    poured = []
    for number, entry in enumerate(pours, start=1):
        where = f"pour[{number}]."
        unknown(where, entry, _POUR)
        name = str(entry.get("name", f"pour {number}"))
        if "volume" in entry and "mass" not in entry:
            poured.append(_solution(faults, where, name, entry, density))
        elif "mass" in entry and "volume" not in entry:
            poured.append(_reagent(faults, where, name, entry))
        else:
            faults.append(
                Fault(
                    where[:-1],
                    "needs a volume or a mass, one of them",
                    'write volume = "500 mL" with contains, or mass = "2 g" with of',
                )
            )
    settings = document.get("settings", {})
    if not isinstance(settings, dict):
        faults.append(Fault("settings", "is no table", "write [settings] and its keys"))
        settings = {}
    unknown("settings.", settings, _SETTINGS)
    solids = _solids(faults, settings.get("solids", "fast"))
    co2 = None
    if "open_to_CO2" in settings:
        co2 = _quantity(faults, "settings.open_to_CO2", settings["open_to_CO2"], "pressure", 0.0)
    if poured and not faults and sum(p.water_g for p in poured) <= 0.0:
        faults.append(Fault("pour", "brings no water", "add a solution"))
    if faults:
        raise InputError(source, faults)
    return Beaker(
        str(document.get("title", Path(source).stem)), temperature, tuple(poured), solids, co2
    )


def _quantity(faults: list[Fault], where: str, text: Any, kind: str, default: float) -> float:
    try:
        return parse(text, kind)
    except QuantityError as error:
        what, _, remedy = str(error).rpartition(": ")
        faults.append(Fault(where, what, remedy))
        return default


def _solids(faults: list[Fault], value: Any) -> str | tuple[str, ...]:
    if value in ("fast", "all"):
        return str(value)
    if isinstance(value, list) and all(isinstance(v, str) for v in value):
        for name in value:
            if name not in catalogue().solids:
                faults.append(
                    Fault(
                        "settings.solids",
                        f"no solid '{name}'",
                        f"known: {', '.join(catalogue().solids)}",
                    )
                )
        return tuple(value)
    faults.append(
        Fault("settings.solids", f"{value!r} is no choice", 'write "fast", "all" or a list')
    )
    return "fast"


def _solution(
    faults: list[Fault], where: str, name: str, entry: Mapping[str, Any], density: float
) -> Poured:
    volume = _quantity(faults, f"{where}volume", entry["volume"], "volume", 0.0)
    components: dict[str, float] = {}
    contains = entry.get("contains", {})
    if not isinstance(contains, dict):
        faults.append(Fault(f"{where}contains", "is no table", 'write { CuSO4 = "0.01 mol/L" }'))
        contains = {}
    for formula, text in contains.items():
        path = f"{where}contains.{formula}"
        parts = decompose(formula)
        if isinstance(parts, str):
            faults.append(Fault(path, parts, "name a neutral salt, acid or base"))
            continue
        try:
            amount, basis, unit = parse_concentration(text, 0, formula)
        except QuantityError as error:
            what, _, remedy = str(error).rpartition(": ")
            faults.append(Fault(path, what, remedy))
            continue
        if basis is not None or unit == "g/kg":
            faults.append(Fault(path, f"'{text}' is not understood here", "write mol/L or g/L"))
            continue
        mol = volume * (amount if unit == "mol/L" else amount / molar_mass_g_per_mol(formula))
        for component, count in parts[0].items():
            components[component] = components.get(component, 0.0) + mol * count
    return Poured(name, components, volume * density * 1000.0, volume)


def _reagent(faults: list[Fault], where: str, name: str, entry: Mapping[str, Any]) -> Poured:
    mass = _quantity(faults, f"{where}mass", entry["mass"], "mass", 0.0)
    purity = 1.0
    if "purity" in entry:
        purity = _quantity(faults, f"{where}purity", entry["purity"], "fraction", 1.0)
    formula = entry.get("of")
    if not isinstance(formula, str):
        faults.append(Fault(f"{where}of", "is missing", 'write of = "Ca(OH)2"'))
        return Poured(name, {}, 0.0, 0.0)
    parts = decompose(formula)
    if isinstance(parts, str):
        faults.append(Fault(f"{where}of", parts, "name a neutral salt, acid or base"))
        return Poured(name, {}, 0.0, 0.0)
    mol = mass * purity / molar_mass_g_per_mol(formula)
    return Poured(name, {c: mol * n for c, n in parts[0].items()}, 0.0, 0.0)


def pour(beaker: Beaker) -> BeakerResult:
    """Pour everything together and let it come to equilibrium.

    Volumes are taken as additive, and the water of the solutions as that of pure water (common
    practice, no source; good to a few parts per thousand below 0.5 mol/L).

    Raises
    ------
    NotConverged
        When no certified answer was found.
    """
    volume = sum(p.volume_L for p in beaker.poured)
    water_kg = sum(p.water_g for p in beaker.poured) / 1000.0
    totals: dict[str, float] = {}
    for part in beaker.poured:
        for component, mol in part.components.items():
            totals[component] = totals.get(component, 0.0) + mol
    per_kg = {c: mol / water_kg for c, mol in totals.items()}
    per_kg.setdefault("H+", 0.0)
    # rounding in the sum of neutral salts must not become acid
    charge = sum(catalogue().components[c].charge * v for c, v in per_kg.items())
    per_kg["H+"] -= charge
    options: dict[str, Any] = {"temperature_C": beaker.temperature_C}
    if beaker.co2_atm is not None:
        options["fix"] = {"CO2(g)": beaker.co2_atm}
    solids = beaker.solids if isinstance(beaker.solids, str) else list(beaker.solids)
    end = equilibrate(per_kg, solids=solids, **options)
    mixed = equilibrate(per_kg, solids=[], **options)
    per_L = water_kg / volume if volume > 0.0 else 1.0
    settled = {
        c: 100.0 * max(0.0, _share(1.0 - end.dissolved[c] / v))
        for c, v in per_kg.items()
        if c != "H+" and v > 0.0 and (beaker.co2_atm is None or c != "CO3-2")
    }
    data = catalogue()
    return BeakerResult(
        title=beaker.title,
        temperature_C=beaker.temperature_C,
        volume_L=volume,
        water_kg=water_kg,
        pH=end.pH,
        mixed_pH=mixed.pH,
        ionic_strength_mol_per_kg=end.ionic_strength,
        activity_model=end.activity_model,
        total_mol_per_L={c: v * per_L for c, v in per_kg.items() if c != "H+"},
        dissolved_mol_per_L={c: v * per_L for c, v in end.dissolved.items() if c != "H+"},
        dissolved_mg_per_L={
            c: v * per_L * data.components[c].molar_mass_g_per_mol * 1000.0
            for c, v in end.dissolved.items()
            if c != "H+"
        },
        settled_percent=settled,
        solids=_solid_rows(beaker, end, mixed, per_kg, water_kg),
        separations=_separations(settled),
        certificate_passed=end.certificate.passed and mixed.certificate.passed,
    )


def _share(value: float) -> float:
    """Zero for what is only rounding."""
    return value if abs(value) > 1e-9 else 0.0


def _solid_rows(
    beaker: Beaker,
    end: Equilibrium,
    mixed: Equilibrium,
    per_kg: Mapping[str, float],
    water_kg: float,
) -> list[SolidRow]:
    rows = []
    for name, final in end.saturation.items():
        solid = catalogue().solids[name]
        allowed = (
            beaker.solids == "all"
            or (beaker.solids == "fast" and solid.forms == "fast")
            or (not isinstance(beaker.solids, str) and name in beaker.solids)
        )
        mol = end.solids[name] * water_kg
        rows.append(
            SolidRow(
                name=name,
                allowed=allowed,
                mmol=mol * 1000.0,
                grams=mol * solid.molar_mass_g_per_mol,
                mixed_log10=mixed.saturation.get(name, -math.inf),
                final_log10=final if mol == 0.0 else 0.0,
                ion_product_log10=_ion_product(name, per_kg, mixed.pH),
            )
        )
    return sorted(rows, key=lambda r: (-r.mmol, -r.final_log10))


def _ion_product(name: str, per_kg: Mapping[str, float], pH: float) -> float | None:
    """log10 of the ion product of the totals over K, with 10^-pH for the protons."""
    solid = catalogue().solids[name]
    value = 0.0
    for component, count in solid.components.items():
        amount = 10.0**-pH if component == "H+" else per_kg.get(component, 0.0)
        if amount <= 0.0:
            return None
        value += count * math.log10(amount)
    return value - solid.log10_K


def _separations(settled: Mapping[str, float]) -> list[str]:
    """Say which metals part cleanly: one at least 99 % down, the other at most 1 %."""
    data = catalogue().components
    metals = {c: v for c, v in settled.items() if data[c].charge > 1}
    clean = 100.0 / CLEAN_FACTOR
    down = [c for c, v in metals.items() if v >= 100.0 - clean]
    up = [c for c, v in metals.items() if v <= clean]
    if down and up:
        return [
            f"{_list(down)} at least {100.0 - clean:g} % down, {_list(up)} at most {clean:g} %: a clean "
            "cut by the hundredfold rule (common practice, no source)"
        ]
    if len(metals) > 1:
        shares = ", ".join(f"{c} {v:.3g} %" for c, v in metals.items())
        return [f"no clean cut by the hundredfold rule (common practice, no source): {shares} down"]
    return []


def _list(names: list[str]) -> str:
    return ", ".join(names[:-1]) + (" and " if len(names) > 1 else "") + names[-1]
