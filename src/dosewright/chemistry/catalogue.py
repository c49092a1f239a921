"""The chemical data: components, aqueous species, solids and gases, read from ``tables/``.

To add a species, a solid or a gas, add a row to its table: a reaction over the components, its
constant and where that constant comes from. Everything else follows from the reaction.
"""

from __future__ import annotations

import csv
import hashlib
import json
import math
import re
from collections.abc import Iterator, Mapping
from dataclasses import dataclass, field
from functools import lru_cache
from importlib import resources
from types import MappingProxyType

from dosewright.chemistry.formula import charge_of, elements_of, molar_mass_g_per_mol

GAS_CONSTANT_J_PER_MOL_K = 8.314462618  # CODATA 2018
REFERENCE_K = 298.15


class TableError(Exception):
    """A row of the shipped tables is malformed: a defect of this package."""


@dataclass(frozen=True, kw_only=True)
class _Record:
    """What every entry of the catalogue carries.

    ``log10_K`` holds at 25 C and zero ionic strength: of the formation from components for
    species, of the dissolution into components for solids and gases (pressure in atm).
    ``components`` and ``water`` are the moles of components and of H2O per mole.
    """

    name: str
    formula: str
    charge: int
    log10_K: float
    dH_kJ_per_mol: float | None
    dCp_J_per_mol_K: float | None
    uncertainty_log10: float | None
    source: str
    provenance: str
    note: str
    components: Mapping[str, float]
    water: float

    @property
    def elements(self) -> dict[str, float]:
        """Element -> count."""
        return elements_of(self.formula)

    @property
    def molar_mass_g_per_mol(self) -> float:
        """Molar mass, g/mol."""
        return molar_mass_g_per_mol(self.formula)


@dataclass(frozen=True, kw_only=True)
class Component(_Record):
    """A component: one of the ions that everything else is written over."""

    assay_label: str


@dataclass(frozen=True, kw_only=True)
class Species(_Record):
    """An aqueous species; the free ions of the components are species too."""


@dataclass(frozen=True, kw_only=True)
class Solid(_Record):
    """A solid. ``forms`` is ``fast`` (in minutes) or ``slow``; ``family`` decides cake moisture."""

    family: str
    forms: str
    density_g_per_cm3: float


@dataclass(frozen=True, kw_only=True)
class Gas(_Record):
    """A gas, at a partial pressure in atm."""


@dataclass(frozen=True)
class Catalogue:
    """All the chemical data; mappings from name to record."""

    components: Mapping[str, Component]
    species: Mapping[str, Species]
    solids: Mapping[str, Solid]
    gases: Mapping[str, Gas]
    fingerprint: str = field(default="")

    @staticmethod
    def log10_K_at(record: _Record, temperature_C: float) -> float:
        """Return log10 K at a temperature by van 't Hoff, with heat capacity where known."""
        kelvin = temperature_C + 273.15
        dH = 1000.0 * (record.dH_kJ_per_mol or 0.0)
        dCp = record.dCp_J_per_mol_K or 0.0
        ln = -dH / GAS_CONSTANT_J_PER_MOL_K * (1.0 / kelvin - 1.0 / REFERENCE_K)
        ln += (
            dCp
            / GAS_CONSTANT_J_PER_MOL_K
            * (REFERENCE_K / kelvin - 1.0 + math.log(kelvin / REFERENCE_K))
        )
        return record.log10_K + ln / math.log(10.0)


_TERM = re.compile(r"^(?:(\d+(?:\.\d+)?) )?(\S+)$")


def _side(text: str) -> dict[str, float]:
    terms: dict[str, float] = {}
    for term in text.split(" + "):
        match = _TERM.match(term.strip())
        if match is None:
            raise ValueError(f"term '{term}'")
        terms[match.group(2)] = terms.get(match.group(2), 0.0) + float(match.group(1) or 1)
    return terms


def _reaction(
    text: str, name: str, components: Mapping[str, Component], *, forms: bool
) -> tuple[dict[str, float], float]:
    """Stoichiometry over components and H2O of one mole of ``name``.

    ``forms`` says whether the reaction makes ``name`` (species) or dissolves it (solids, gases).
    """
    left, right = (_side(part) for part in text.split(" = "))
    own, other = (right, left) if forms else (left, right)
    if own.pop(name, 0.0) != 1.0:
        raise ValueError(f"one mole of {name} must stand on its side of '{text}'")
    net: dict[str, float] = dict(other)
    for key, value in own.items():
        net[key] = net.get(key, 0.0) - value
    water = net.pop("H2O", 0.0)
    unknown = set(net) - set(components)
    if unknown:
        raise ValueError(f"{sorted(unknown)} in '{text}' are no components")
    return {key: value for key, value in net.items() if value != 0.0}, water


def _rows(table: str) -> Iterator[tuple[int, dict[str, str]]]:
    """Yield line number and cells of each row of a table; ValueError where a name comes twice."""
    text = resources.files("dosewright.chemistry").joinpath("tables", table).read_text("utf-8")
    reader = csv.DictReader(text.splitlines(), delimiter="\t", quoting=csv.QUOTE_NONE)
    seen: set[str] = set()
    for number, row in enumerate(reader, start=2):
        if row["name"] in seen:
            raise ValueError(f"'{row['name']}' stands in line {number} again")
        seen.add(row["name"])
        yield number, {key: (value or "").strip() for key, value in row.items()}


def _number(text: str) -> float | None:
    return float(text) if text else None


def _common(
    row: dict[str, str], components: Mapping[str, Component], *, forms: bool
) -> dict[str, object]:
    stoichiometry, water = _reaction(row["reaction"], row["name"], components, forms=forms)
    return {
        "name": row["name"],
        "formula": row.get("formula") or row["name"],
        "charge": charge_of(row["name"]) if forms else 0,
        "log10_K": float(row["log10_K"]),
        "dH_kJ_per_mol": _number(row["dH_kJ_per_mol"]),
        "dCp_J_per_mol_K": _number(row["dCp_J_per_mol_K"]),
        "uncertainty_log10": _number(row["uncertainty_log10"]),
        "source": row["source"],
        "provenance": row["provenance"],
        "note": row["note"],
        "components": MappingProxyType(stoichiometry),
        "water": water,
    }


@lru_cache(maxsize=1)
def catalogue() -> Catalogue:
    """Return the shipped data (read once).

    Attributes of the result: ``components``, ``species``, ``solids``, ``gases``, each a mapping
    from name to a record with ``formula``, ``log10_K``, ``source`` and more.
    """
    components: dict[str, Component] = {}
    species: dict[str, Species] = {}
    solids: dict[str, Solid] = {}
    gases: dict[str, Gas] = {}
    digest: list[dict[str, str]] = []
    table, number = "components.tsv", 0
    try:
        for number, row in _rows(table):  # noqa: B007  (number goes into the error)
            digest.append(row)
            basis: dict[str, object] = {
                "name": row["name"], "formula": row["formula"], "charge": int(row["charge"]),
                "log10_K": 0.0, "dH_kJ_per_mol": 0.0, "dCp_J_per_mol_K": 0.0,
                "uncertainty_log10": 0.0, "source": "definition", "provenance": "exact", "note": "",
                "components": MappingProxyType({row["name"]: 1.0}), "water": 0.0,
            }  # fmt: skip
            components[row["name"]] = Component(assay_label=row["assay_label"], **basis)  # type: ignore[arg-type]
            species[row["name"]] = Species(**basis)  # type: ignore[arg-type]
        table = "species.tsv"
        for number, row in _rows(table):  # noqa: B007  (number goes into the error)
            digest.append(row)
            species[row["name"]] = Species(**_common(row, components, forms=True))  # type: ignore[arg-type]
        table = "solids.tsv"
        for number, row in _rows(table):  # noqa: B007  (number goes into the error)
            digest.append(row)
            if row["forms"] not in {"fast", "slow"}:
                raise ValueError(f"forms '{row['forms']}'")
            solids[row["name"]] = Solid(
                **_common(row, components, forms=False),  # type: ignore[arg-type]
                family=row["family"],
                forms=row["forms"],
                density_g_per_cm3=float(row["density_g_per_cm3"]),
            )
        table = "gases.tsv"
        for number, row in _rows(table):  # noqa: B007  (number goes into the error)
            digest.append(row)
            gases[row["name"]] = Gas(**_common(row, components, forms=False))  # type: ignore[arg-type]
    except (KeyError, ValueError) as error:
        raise TableError(f"{table}, row {number}: {error}") from error
    text = json.dumps(sorted(digest, key=lambda row: sorted(row.items())), sort_keys=True)
    return Catalogue(
        MappingProxyType(components),
        MappingProxyType(species),
        MappingProxyType(solids),
        MappingProxyType(gases),
        hashlib.sha256(text.encode()).hexdigest(),
    )
