"""A chosen set of components as arrays: what the equilibrium kernel works on."""

from __future__ import annotations

from collections.abc import Iterable, Sequence
from dataclasses import dataclass
from functools import cached_property, lru_cache

import numpy as np
from numpy.typing import NDArray

from dosewright.chemistry.activity import LN10
from dosewright.chemistry.catalogue import Gas, Solid, Species, catalogue
from dosewright.errors import DosewrightError

Array = NDArray[np.float64]


@dataclass(frozen=True, eq=False)
class System:
    """Stoichiometry and constants of a set of components at one temperature.

    Shapes: ``nc`` components, ``ns`` species (the free component ions first), ``nk`` phases
    (solids, then gases). ``nu`` (ns, nc) and ``nu_water`` (ns,) form species from components;
    ``A`` (nk, nc) and ``A_water`` (nk,) dissolve phases into them. ``lnK`` (ns,) and ``lnKs``
    (nk,) are natural logarithms; a gas at ``p`` atm is saturated at ``lnKs + ln p``.
    """

    temperature_C: float
    components: tuple[str, ...]
    species: tuple[str, ...]
    phases: tuple[str, ...]
    solids_count: int
    component_charge: Array
    nu: Array
    nu_water: Array
    charge: Array
    lnK: Array
    is_gas_species: NDArray[np.bool_]
    A: Array
    A_water: Array
    lnKs: Array
    is_fast: NDArray[np.bool_]

    @cached_property
    def sparse_nu(self) -> tuple[NDArray[np.int64], NDArray[np.int64], Array]:
        """``nu`` by rows: pointers (ns + 1,), columns and values of what is not zero."""
        pointers, columns = [0], []
        for row in self.nu:
            columns.append(np.flatnonzero(row))
            pointers.append(pointers[-1] + columns[-1].size)
        flat = np.concatenate(columns)
        values = self.nu[np.repeat(np.arange(len(self.nu)), np.diff(pointers)), flat]
        return np.array(pointers), flat, values

    @property
    def solids(self) -> tuple[str, ...]:
        """Names of the solids, in the order of the first rows of ``A``."""
        return self.phases[: self.solids_count]

    @property
    def gases(self) -> tuple[str, ...]:
        """Names of the gases, after the solids."""
        return self.phases[self.solids_count :]

    def enabled(self, solids: str | Iterable[str]) -> NDArray[np.bool_]:
        """Return the mask (nk,) of phases that may form: ``"fast"``, ``"all"`` or names.

        Raises
        ------
        DosewrightError
            When a name is no solid of the catalogue. Solids whose components are not in the
            system cannot form and are passed over.
        """
        mask = np.zeros(len(self.phases), dtype=bool)
        if isinstance(solids, str):
            if solids == "all":
                mask[: self.solids_count] = True
            elif solids == "fast":
                mask[: self.solids_count] = self.is_fast
            else:
                raise DosewrightError(
                    f"solids='{solids}' is not known; use 'fast', 'all' or a list of names"
                )
            return mask
        known = catalogue().solids
        for name in solids:
            if name not in known:
                raise DosewrightError(
                    f"no solid '{name}' in the catalogue; dosewright.catalogue().solids lists them"
                )
            if name in self.phases:
                mask[self.phases.index(name)] = True
        return mask


@lru_cache(maxsize=64)
def _build(components: tuple[str, ...], temperature_C: float) -> System:
    data = catalogue()
    at = data.log10_K_at
    present = set(components)
    free = [data.species[name] for name in components]
    formed = [
        s
        for s in data.species.values()
        if s.name not in data.components and present.issuperset(s.components)
    ]
    species = [*free, *formed]
    solids = [s for s in data.solids.values() if present.issuperset(s.components)]
    gases = [g for g in data.gases.values() if present.issuperset(g.components)]
    phases: list[Solid | Gas] = [*solids, *gases]

    def matrix(rows: Sequence[Species | Solid | Gas]) -> Array:
        return np.array(
            [[row.components.get(c, 0.0) for c in components] for row in rows],
            dtype=np.float64,
        ).reshape(len(rows), len(components))

    dissolved_gases = {name.removesuffix("(g)") for name in data.gases}
    return System(
        temperature_C=temperature_C,
        components=components,
        species=tuple(s.name for s in species),
        phases=tuple(p.name for p in phases),
        solids_count=len(solids),
        component_charge=np.array([data.components[c].charge for c in components], dtype=float),
        nu=matrix(species),
        nu_water=np.array([s.water for s in species]),
        charge=np.array([s.charge for s in species], dtype=float),
        lnK=np.array([at(s, temperature_C) for s in species]) * LN10,
        is_gas_species=np.array([s.name in dissolved_gases for s in species]),
        A=matrix(phases),
        A_water=np.array([p.water for p in phases], dtype=float),
        lnKs=np.array([at(p, temperature_C) for p in phases], dtype=float) * LN10,
        is_fast=np.array([s.forms == "fast" for s in solids], dtype=bool),
    )


def system_of(components: Iterable[str], temperature_C: float) -> System:
    """Return the system spanned by ``components`` (names; H+ is always in) at a temperature.

    Raises
    ------
    DosewrightError
        When a name is no component, or the temperature is outside 0-100 C.
    """
    data = catalogue()
    wanted = set(components) | {"H+"}
    unknown = sorted(wanted - set(data.components))
    if unknown:
        raise DosewrightError(
            f"no component {', '.join(repr(u) for u in unknown)}; "
            f"known: {', '.join(data.components)}"
        )
    if not 0.0 <= temperature_C <= 100.0:
        raise DosewrightError(f"temperature {temperature_C} C is outside 0-100 C")
    ordered = tuple(name for name in data.components if name in wanted)
    return _build(ordered, float(temperature_C))
