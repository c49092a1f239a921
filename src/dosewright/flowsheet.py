"""A flowsheet file: TOML text to plain dataclasses, and to a graph of mixing and settling units.

Knows no solver. Every quantity in a file is text with its unit; every key is declared in the tables
below (`_KEYS`), which is where to add one. All faults of a file are collected and shown together.
"""

from __future__ import annotations

import copy
import difflib
import tomllib
from collections.abc import Callable, Iterable, Iterator, Mapping
from dataclasses import dataclass
from pathlib import Path
from typing import Any

import networkx as nx
import numpy as np

from dosewright.chemistry.catalogue import catalogue
from dosewright.chemistry.formula import charge_of, elements_of, molar_mass_g_per_mol
from dosewright.errors import Fault, InputError
from dosewright.quantities import KINDS, QuantityError, parse, parse_concentration, split_number

FAMILIES = ("hydroxide", "basic_salt", "carbonate", "sulfide", "sulfate")
MAX_STAGES = 5
_RANGES = {"pH": (-1.0, 15.0), "specific_gravity": (0.9, 2.5)}

# ---------------------------------------------------------------------------------------------
# the model


@dataclass(frozen=True)
class Label:
    """What a name in a file stands for: weighted components and the molar mass of its basis."""

    label: str
    components: Mapping[str, float]
    g_per_mol: float


@dataclass(frozen=True)
class LimitSpec(Label):
    """A ceiling on a label in the effluent."""

    max_mg_per_L: float


@dataclass(frozen=True)
class Feed:
    """The liquor to be treated."""

    flow_m3_per_h: float
    hours_per_year: float
    temperature_C: float
    pH: float
    specific_gravity: float | None
    closing_component: str
    accept_charge_error: bool
    assay_mol_per_L: Mapping[str, float]


@dataclass(frozen=True)
class Reagent:
    """A reagent as bought.

    ``components`` and ``water`` are the moles of components and of H2O in one mole of ``formula``;
    ``strength`` is the mass fraction of the formula in what is bought, ``utilisation`` the share of
    it that reacts; the rest leaves as ``unreacted`` solid or dissolved matter. ``make_up`` is the
    mass fraction of the bought reagent in the slurry or solution as fed.
    """

    name: str
    formula: str
    supply: str
    strength: float
    utilisation: float
    unreacted: str
    price_USD_per_t: float
    make_up: float | None
    max_pH: float | None
    max_dose_kg_per_m3: float | None
    components: Mapping[str, float]
    water: float
    molar_mass_g_per_mol: float


@dataclass(frozen=True)
class Oxidant:
    """An agent that converts Fe(II) to Fe(III) at a stated conversion.

    With a ``formula`` it is dosed and bought by mass; without, it is air, paid per m3 of liquor.
    """

    name: str
    formula: str | None
    strength: float
    utilisation: float
    price_USD_per_t: float | None
    price_USD_per_m3: float | None
    conversion: float
    min_pH: float | None
    electrons: float
    molar_mass_g_per_mol: float


@dataclass(frozen=True)
class Product:
    """A cake that is sold when it meets its limits (fractions, dry basis).

    ``min_family`` asks for a least share of a family of solids, for instance of sulfides.
    """

    name: str
    metals: tuple[str, ...]
    min_recovery: float | None
    min_grade: float | None
    max_impurity: Mapping[str, float]
    min_family: Mapping[str, float]
    payable: Mapping[str, float]
    optional: bool


@dataclass(frozen=True)
class Effluent:
    """Limits on the last overflow: dissolved, or total with the fines carried over."""

    pH_min: float | None
    pH_max: float | None
    dissolved: tuple[LimitSpec, ...]
    total: tuple[LimitSpec, ...]


@dataclass(frozen=True)
class Plant:
    """What all mixing and settling units share."""

    max_stages: int
    overflow_solids_mg_per_L: float
    co2_vent_atm: float | None
    cake_moisture: Mapping[str, float]


@dataclass(frozen=True)
class Prices:
    """Prices that belong to no reagent."""

    water_USD_per_m3: float
    disposal_USD_per_wet_t: Mapping[str, float]
    metal_USD_per_t: Mapping[str, float]


@dataclass(frozen=True)
class Flowsheet:
    """A flowsheet as read.

    ``document`` is the file's content as plain data (what is saved with a design); ``decisions`` the
    train given in the file, if any, as `dosewright.evaluate` takes it.
    """

    title: str
    notice: str
    feed: Feed
    plant: Plant
    prices: Prices
    reagents: Mapping[str, Reagent]
    oxidants: Mapping[str, Oxidant]
    products: tuple[Product, ...]
    waste_class: str
    effluent: Effluent
    solids_allow: tuple[str, ...]
    solids_forbid: tuple[str, ...]
    decisions: dict[str, Any] | None
    document: dict[str, Any]
    source_name: str

    def label(self, name: str) -> Label:
        """Resolve a label such as ``Fe``, ``Fe(II)``, ``SO4`` or ``S(-II)``.

        Raises
        ------
        InputError
            When it names nothing in the catalogue.
        """
        found = find_label(name)
        if found is None:
            raise InputError(
                self.source_name, [Fault(name, "is no constituent known here", _label_help(name))]
            )
        return found


def find_label(name: str) -> Label | None:
    """Resolve a label; an element alone stands for all its oxidation states."""
    data = catalogue().components
    if name in {"S(-II)", "S2-", "sulfide"}:
        return Label(name, {"HS-": 1.0}, molar_mass_g_per_mol("S"))
    for component in data.values():
        if name in {component.name, component.assay_label} and name:
            return Label(name, {component.name: 1.0}, component.molar_mass_g_per_mol)
    of_element = {
        c.name: 1.0
        for c in data.values()
        if c.assay_label.split("(")[0] == name and "(" in (c.assay_label)
    }
    if of_element:
        return Label(name, of_element, molar_mass_g_per_mol(name))
    return None


def _label_help(name: str) -> str:
    known = sorted({c.assay_label for c in catalogue().components.values()} - {"proton", ""})
    close = difflib.get_close_matches(name, known, 1)
    return f"did you mean {close[0]}?" if close else f"use one of {', '.join(known)}"


# ---------------------------------------------------------------------------------------------
# reading

Reader = Callable[["_Reading", str, Any], Any]


@dataclass(frozen=True)
class _Key:
    """How one key is read; ``required`` keys must be there."""

    read: Reader
    required: bool = False
    default: Any = None


class _Reading:
    """Collects faults while a document is read."""

    def __init__(self, source: str) -> None:
        self.source = source
        self.faults: list[Fault] = []

    def fault(self, where: str, what: str, remedy: str) -> None:
        self.faults.append(Fault(where, what, remedy))

    def table(self, where: str, value: Any, keys: Mapping[str, _Key]) -> dict[str, Any]:
        """Read a table by its declared keys; unknown keys are faults."""
        out = {key: spec.default for key, spec in keys.items()}
        if not isinstance(value, dict):
            self.fault(where, f"is {_kind(value)}, not a table", f"write [{where}] and its keys")
            return out
        for key in map(str, value):
            if key not in keys:
                close = difflib.get_close_matches(key, keys, 1)
                hint = f"did you mean {close[0]}?" if close else f"known: {', '.join(keys)}"
                self.fault(_join(where, key), "is not a key of this table", hint)
        for key, spec in keys.items():
            if value.get(key) is not None:  # a saved document may hold null
                out[key] = spec.read(self, _join(where, key), value[key])
            elif spec.required:
                self.fault(_join(where, key), "is missing", "add it")
        return out

    def finish(self) -> None:
        if self.faults:
            raise InputError(self.source, self.faults)


def _join(where: str, key: str) -> str:
    return f"{where}.{key}" if where else key


def _kind(value: Any) -> str:
    names = {str: "text", bool: "true or false", int: "a number", float: "a number", list: "a list",
             dict: "a table"}  # fmt: skip
    return names.get(type(value), type(value).__name__)


def _text(r: _Reading, where: str, value: Any) -> str:
    if not isinstance(value, str) or not value.strip():
        r.fault(where, f"is {_kind(value)}, not text", "write it in quotes")
        return ""
    return value


def _flag(r: _Reading, where: str, value: Any) -> bool:
    if not isinstance(value, bool):
        r.fault(where, f"is {_kind(value)}", "write true or false")
        return False
    return value


def _number(name: str) -> Reader:
    low, high = _RANGES[name]

    def read(r: _Reading, where: str, value: Any) -> float | None:
        if isinstance(value, bool) or not isinstance(value, int | float):
            r.fault(
                where,
                f"is {_kind(value)}, not a number",
                f"write for example {where} = {low + 4:g}",
            )
            return None
        if not low <= value <= high:
            r.fault(where, f"{value} is outside {low:g} to {high:g}", "correct it")
            return None
        return float(value)

    return read


def _quantity(kind: str) -> Reader:
    def read(r: _Reading, where: str, value: Any) -> float | None:
        try:
            return parse(value, kind)
        except QuantityError as error:
            what, _, remedy = str(error).rpartition(": ")
            r.fault(where, what, remedy)
            return None

    return read


def _choice(*options: str) -> Reader:
    def read(r: _Reading, where: str, value: Any) -> str | None:
        if value not in options:
            r.fault(where, f"{value!r} is not a choice", f"use one of {', '.join(options)}")
            return None
        return str(value)

    return read


def _stages(r: _Reading, where: str, value: Any) -> int:
    if isinstance(value, bool) or not isinstance(value, int) or not 1 <= value <= MAX_STAGES:
        r.fault(
            where, f"{value!r} is no number of stages", f"write a whole number, 1 to {MAX_STAGES}"
        )
        return 1
    return value


def _names(r: _Reading, where: str, value: Any) -> tuple[str, ...]:
    if not isinstance(value, list) or not all(isinstance(v, str) for v in value):
        r.fault(where, f"is {_kind(value)}", 'write a list of names, ["..."]')
        return ()
    return tuple(value)


def _solid_names(r: _Reading, where: str, value: Any) -> tuple[str, ...]:
    names = _names(r, where, value)
    known = catalogue().solids
    for name in names:
        if name not in known:
            close = difflib.get_close_matches(name, known, 1)
            hint = f"did you mean {close[0]}?" if close else f"known: {', '.join(known)}"
            r.fault(where, f"no solid '{name}'", hint)
    return tuple(n for n in names if n in known)


def _label_names(r: _Reading, where: str, value: Any) -> tuple[str, ...]:
    names = _names(r, where, value)
    if not names and isinstance(value, list):
        r.fault(where, "names nothing", 'write for example ["Zn"]')
    counted: set[str] = set()
    for name in names:
        label = _check_label(r, where, name)
        if label is not None and counted & set(label.components):
            r.fault(where, f"counts '{name}' twice", "name each metal once")
        counted |= set(label.components) if label is not None else set()
    return names


def _check_label(r: _Reading, where: str, name: str) -> Label | None:
    found = find_label(name)
    if found is None:
        r.fault(where, f"'{name}' is no constituent known here", _label_help(name))
    return found


def _by_name(kind: str, *, labels: bool = True) -> Reader:
    """Read a table of name -> quantity."""
    read_one = _quantity(kind)

    def read(r: _Reading, where: str, value: Any) -> dict[str, float]:
        if not isinstance(value, dict):
            r.fault(where, f"is {_kind(value)}, not a table", 'write for example { Zn = "..." }')
            return {}
        out: dict[str, float] = {}
        for name, entry in value.items():
            if labels:
                _check_label(r, _join(where, name), name)
            amount = read_one(r, _join(where, name), entry)
            if amount is not None:
                out[name] = amount
        return out

    return read


def _raw(_r: _Reading, _where: str, value: Any) -> Any:
    return value


def _pH_window(r: _Reading, where: str, value: Any) -> tuple[float | None, float | None]:
    parts = str(value).split(" to ") if isinstance(value, str) else []
    try:
        low, high = (float(p) for p in parts)
    except ValueError:
        r.fault(where, f"{value!r} is no pH window", 'write for example "6.0 to 9.5"')
        return None, None
    if not (_RANGES["pH"][0] <= low < high <= _RANGES["pH"][1]):
        r.fault(where, f"{value!r} is no pH window", 'write the lower first, "6.0 to 9.5"')
        return None, None
    return low, high


def _limits(r: _Reading, where: str, value: Any) -> tuple[LimitSpec, ...]:
    if not isinstance(value, dict):
        r.fault(where, f"is {_kind(value)}, not a table", 'write for example Zn = "1 mg/L"')
        return ()
    out = []
    for name, entry in value.items():
        path = _join(where, name)
        label = _check_label(r, path, name)
        if label is None:
            continue
        charges = {charge_of(c) for c in label.components}
        charge = charges.pop() if len(charges) == 1 else 0
        try:
            amount, basis, unit = parse_concentration(entry, charge, name)
            grams = _basis_mass(basis, label) if basis else label.g_per_mol
        except QuantityError as error:
            what, _, remedy = str(error).rpartition(": ")
            r.fault(path, what, remedy)
            continue
        except ValueError as error:
            r.fault(path, str(error), 'write for example "0.5 mg/L as S"')
            continue
        if unit == "g/kg":
            r.fault(path, "is per mass of liquor", 'write it per volume, "1 mg/L"')
            continue
        mg = amount * 1000.0 * (grams if unit == "mol/L" else 1.0)
        if mg <= 0.0:
            r.fault(path, "a limit of zero cannot be met", "write the detection limit")
            continue
        out.append(LimitSpec(f"{name} as {basis}" if basis else name, label.components, grams, mg))
    return tuple(out)


def _basis_mass(basis: str, label: Label) -> float:
    """Grams of ``basis`` for each mole of the label's component.

    ``as N``, ``as S`` count atoms of the element; ``as CaCO3`` counts equivalents (two a mole);
    ``as NH3``, ``as SO4`` the formula itself, one for one on its key element.
    """
    component = next(iter(label.components))
    own = elements_of(component)
    if basis == "CaCO3":
        return molar_mass_g_per_mol("CaCO3") / 2.0 * abs(charge_of(component))
    other = elements_of(basis)
    shared = [e for e in other if e in own and e not in {"H", "O"}] or [
        e for e in other if e in own
    ]
    if not shared:
        raise ValueError(f"'as {basis}' shares no element with {label.label}")
    key = shared[0]
    return molar_mass_g_per_mol(basis) * own[key] / other[key]


def _families(r: _Reading, where: str, value: Any) -> dict[str, float]:
    out: dict[str, float] = _by_name("fraction", labels=False)(r, where, value)
    for name in [n for n in out if n not in FAMILIES]:
        close = difflib.get_close_matches(name, FAMILIES, 1)
        hint = f"did you mean {close[0]}?" if close else f"known: {', '.join(FAMILIES)}"
        r.fault(_join(where, name), "is no family of solids", hint)
    return out


_PAYABLE_HINT = 'write "50 %" or { Ni = "78 %" }'


def _payable(r: _Reading, where: str, value: Any) -> Any:
    if isinstance(value, dict):
        return _by_name("fraction")(r, where, value)
    if not isinstance(value, str):
        r.fault(where, f"is {_kind(value)}", _PAYABLE_HINT)
        return {}
    return _quantity("fraction")(r, where, value)


#: every table of a flowsheet file and its keys
_KEYS: dict[str, dict[str, _Key]] = {
    "": {
        "title": _Key(_text, True, ""),
        "notice": _Key(_text, False, ""),
        "feed": _Key(_raw, True),
        "plant": _Key(_raw, False, {}),
        "prices": _Key(_raw, False, {}),
        "reagents": _Key(_raw, False, {}),
        "oxidants": _Key(_raw, False, {}),
        "products": _Key(_raw, False, []),
        "waste": _Key(_raw, False, {}),
        "effluent": _Key(_raw, True),
        "solids": _Key(_raw, False, {}),
        "train": _Key(_raw, False, []),
    },
    "feed": {
        "flow": _Key(_quantity("flow"), True),
        "operating_time": _Key(_quantity("operating_time"), False, 8760.0),
        "temperature": _Key(_quantity("temperature"), False, 25.0),
        "pH": _Key(_number("pH"), True),
        "specific_gravity": _Key(_number("specific_gravity")),
        "closing_ion": _Key(_text, True, ""),
        "accept_charge_error": _Key(_flag, False, False),
        "assay": _Key(_raw, True),
    },
    "plant": {
        "max_stages": _Key(_stages, False, 3),
        "overflow_solids": _Key(_quantity("mass_concentration"), False, 0.0),
        "carbon_dioxide_vent": _Key(_quantity("pressure")),
        "cake_moisture": _Key(_raw, False, {}),
    },
    "plant.cake_moisture": {name: _Key(_quantity("fraction")) for name in FAMILIES},
    "prices": {
        "water": _Key(_quantity("price_per_volume"), False, 0.0),
        "disposal": _Key(_by_name("price_per_mass", labels=False), False, {}),
        "metal": _Key(_by_name("price_per_mass"), False, {}),
    },
    "reagents": {
        "formula": _Key(_text, True, ""),
        "supply": _Key(_choice("powder", "solution"), True),
        "strength": _Key(_quantity("fraction"), True),
        "utilisation": _Key(_quantity("fraction"), False, 1.0),
        "unreacted": _Key(_choice("solid", "dissolved")),
        "price": _Key(_quantity("price_per_mass"), True),
        "make_up": _Key(_quantity("fraction")),
        "max_pH": _Key(_number("pH")),
        "max_dose": _Key(_quantity("dose")),
    },
    "oxidants": {
        "formula": _Key(_text),
        "strength": _Key(_quantity("fraction"), False, 1.0),
        "utilisation": _Key(_quantity("fraction"), False, 1.0),
        "price": _Key(_raw, True),
        "converts": _Key(_choice("Fe(II)"), True),
        "conversion": _Key(_quantity("fraction"), True),
        "min_pH": _Key(_number("pH")),
    },
    "products": {
        "name": _Key(_text, True, ""),
        "metals": _Key(_label_names, True, ()),
        "min_recovery": _Key(_quantity("fraction")),
        "min_grade": _Key(_quantity("fraction")),
        "max_impurity": _Key(_by_name("fraction"), False, {}),
        "min_family": _Key(_families, False, {}),
        "payable": _Key(_payable, False, {}),
        "optional": _Key(_flag, False, False),
    },
    "waste": {"class": _Key(_text, False, "")},
    "effluent": {
        "pH": _Key(_pH_window, False, (None, None)),
        "dissolved": _Key(_limits, False, ()),
        "total": _Key(_limits, False, ()),
    },
    "solids": {
        "allow": _Key(_solid_names, False, ()),
        "forbid": _Key(_solid_names, False, ()),
    },
    "train": {
        "reagents": _Key(_raw, False, {}),
        "oxidant": _Key(_text),
        "cake": _Key(_text, False, "waste"),
    },
}

_NO_EFFLUENT: dict[str, Any] = {"pH": (None, None), "dissolved": (), "total": ()}

#: water, mass fraction of wet cake, used where a file states none (common practice, no source)
DEFAULT_MOISTURE = {
    "hydroxide": 0.60, "basic_salt": 0.55, "carbonate": 0.40, "sulfide": 0.45, "sulfate": 0.40,
}  # fmt: skip


def load(path: str | Path) -> Flowsheet:
    """Read a flowsheet file.

    Raises
    ------
    InputError
        Naming the file, every key at fault, and what to do about it.
    """
    return from_document(read_toml(path), str(path))


def read_toml(path: str | Path) -> dict[str, Any]:
    """Read a TOML file as plain data.

    Raises
    ------
    InputError
        When it is missing, unreadable or no TOML.
    """
    file = Path(path)
    try:
        text = file.read_bytes().decode("utf-8-sig")  # some editors put a mark in front
        document = tomllib.loads(text)
    except FileNotFoundError as error:
        raise InputError(
            str(path), [Fault("", "there is no such file", "check the path")]
        ) from error
    except IsADirectoryError as error:
        raise InputError(str(path), [Fault("", "is a folder", "name a file in it")]) from error
    except OSError as error:
        raise InputError(
            str(path), [Fault("", f"cannot be read ({error.strerror})", "check its permissions")]
        ) from error
    except UnicodeDecodeError as error:
        raise InputError(
            str(path), [Fault("", "is not UTF-8 text", "save it as UTF-8 TOML")]
        ) from error
    except tomllib.TOMLDecodeError as error:
        raise InputError(
            str(path), [Fault("", f"is no valid TOML: {error}", "correct the line named")]
        ) from error
    except (RecursionError, ValueError) as error:  # nested too deep; a number of too many digits
        raise InputError(
            str(path), [Fault("", "is TOML beyond any flowsheet", "shorten its lists and numbers")]
        ) from error
    return document


def from_document(document: Mapping[str, Any], source_name: str) -> Flowsheet:
    """Build a flowsheet from a document already parsed (a file's, or a saved design's).

    Raises
    ------
    InputError
        As `load`.
    """
    r = _Reading(source_name)
    if not document:
        r.fault("", "is empty", "start from flowsheets/every_key.toml")
        r.finish()
    top = r.table("", dict(document), _KEYS[""])
    feed = _read_feed(r, top["feed"])
    plant = _read_plant(r, top["plant"])
    prices = r.table("prices", top["prices"], _KEYS["prices"])
    reagents = _read_reagents(r, top["reagents"])
    oxidants = _read_oxidants(r, top["oxidants"])
    products = _read_products(r, top["products"], prices["metal"] or {})
    waste = r.table("waste", top["waste"], _KEYS["waste"])
    effluent = (
        r.table("effluent", top["effluent"], _KEYS["effluent"])
        if top["effluent"] is not None
        else dict(_NO_EFFLUENT)
    )
    solids = r.table("solids", top["solids"], _KEYS["solids"])
    for name in sorted(set(solids["allow"]) & set(solids["forbid"])):
        r.fault("solids.forbid", f"'{name}' is allowed as well", "take it out of one of the lists")
    disposal = prices["disposal"] or {}
    waste_class = waste["class"] or next(iter(disposal), "plain")
    if not disposal:
        disposal = {waste_class: 0.0}
    elif waste_class not in disposal:
        r.fault("waste.class", f"'{waste_class}' has no price", f"use one of {', '.join(disposal)}")
    if feed is not None:
        _check_limits(r, feed, reagents, oxidants, effluent, products)
    decisions = _read_train(r, top["train"])
    r.finish()
    assert feed is not None  # without faults both were read
    assert plant is not None
    flowsheet = Flowsheet(
        title=top["title"],
        notice=top["notice"],
        feed=feed,
        plant=plant,
        prices=Prices(prices["water"], disposal, prices["metal"] or {}),
        reagents=reagents,
        oxidants=oxidants,
        products=products,
        waste_class=waste_class,
        effluent=Effluent(
            effluent["pH"][0], effluent["pH"][1], effluent["dissolved"], effluent["total"]
        ),
        solids_allow=solids["allow"],
        solids_forbid=solids["forbid"],
        decisions=decisions,
        document=copy.deepcopy(dict(document)),
        source_name=source_name,
    )
    if decisions is not None:
        check_decisions(flowsheet, decisions)
    return flowsheet


def _read_feed(r: _Reading, value: Any) -> Feed | None:
    if value is None:
        return None
    before = len(r.faults)
    t = r.table("feed", value, _KEYS["feed"])
    closing = find_label(t["closing_ion"]) if t["closing_ion"] else None
    component = next(iter(closing.components)) if closing and len(closing.components) == 1 else ""
    if t["closing_ion"] and not component:
        r.fault("feed.closing_ion", f"'{t['closing_ion']}' is no ion known here",
                'name a major ion, for example "SO4" or "Na"')  # fmt: skip
    if component == "H+":
        r.fault("feed.closing_ion", "the feed is never closed on pH", 'name a major ion, "SO4"')
    assay: dict[str, float] = {}
    raw = t["assay"]
    if raw is not None and not isinstance(raw, dict):
        r.fault("feed.assay", f"is {_kind(raw)}, not a table", "write [feed.assay] and its rows")
    elif raw is not None:
        if not raw:
            r.fault("feed.assay", "is empty", 'add rows such as Zn = "310 mg/L"')
        for name, entry in raw.items():
            _read_assay(r, name, entry, t["specific_gravity"], assay)
    if len(r.faults) > before:
        return None
    return Feed(
        t["flow"], t["operating_time"], t["temperature"], t["pH"], t["specific_gravity"], component,
        t["accept_charge_error"], assay,
    )  # fmt: skip


def _read_assay(
    r: _Reading, name: str, entry: Any, gravity: float | None, assay: dict[str, float]
) -> None:
    where = f"feed.assay.{name}"
    label = _check_label(r, where, name)
    if label is None:
        return
    if len(label.components) > 1:
        states = ", ".join(catalogue().components[c].assay_label for c in label.components)
        r.fault(where, f"'{name}' leaves the oxidation state open", f"give {states} one by one")
        return
    component = next(iter(label.components))
    if component == "H+":
        r.fault(where, "acidity is given as pH", "set feed.pH")
        return
    try:
        amount, basis, unit = parse_concentration(entry, charge_of(component), name)
        grams = _basis_mass(basis, label) if basis else label.g_per_mol
    except QuantityError as error:
        what, _, remedy = str(error).rpartition(": ")
        r.fault(where, what, remedy)
        return
    except ValueError as error:
        r.fault(where, str(error), 'write for example "350 mg/L as N"')
        return
    if unit == "g/kg":
        if gravity is None:
            r.fault(where, "is per mass of liquor", "give feed.specific_gravity, or write mg/L")
            return
        amount *= gravity
    if component in assay:
        r.fault(where, f"gives {component} a second time", "take one of the two out")
        return
    assay[component] = amount if unit == "mol/L" else amount / grams


def _read_plant(r: _Reading, value: Any) -> Plant | None:
    before = len(r.faults)
    t = r.table("plant", value, _KEYS["plant"])
    given = r.table("plant.cake_moisture", t["cake_moisture"], _KEYS["plant.cake_moisture"])
    moisture = {name: DEFAULT_MOISTURE[name] if v is None else v for name, v in given.items()}
    for name, share in moisture.items():
        if share > 0.97:
            r.fault(f"plant.cake_moisture.{name}", "is above 97 %", "that is no cake: lower it")
    if len(r.faults) > before:
        return None
    return Plant(t["max_stages"], t["overflow_solids"], t["carbon_dioxide_vent"], moisture)


def _tables(r: _Reading, where: str, value: Any) -> Iterable[tuple[str, Any]]:
    if not isinstance(value, dict):
        r.fault(where, f"is {_kind(value)}, not a table", f'write [{where}."name"] tables')
        return ()
    return [(str(name), entry) for name, entry in value.items()]


def _read_reagents(r: _Reading, value: Any) -> dict[str, Reagent]:
    out: dict[str, Reagent] = {}
    for name, entry in _tables(r, "reagents", value):
        where = f"reagents.{name}"
        before = len(r.faults)
        t = r.table(where, entry, _KEYS["reagents"])
        _positive(r, where, t, ("strength", "utilisation", "make_up"))
        if len(r.faults) > before:
            continue
        parts = decompose(t["formula"])
        if isinstance(parts, str):
            r.fault(f"{where}.formula", parts, "name a compound of the components known here")
            continue
        components, water = parts
        out[name] = Reagent(
            name=name,
            formula=t["formula"],
            supply=t["supply"],
            strength=t["strength"],
            utilisation=t["utilisation"],
            unreacted=t["unreacted"] or ("solid" if t["supply"] == "powder" else "dissolved"),
            price_USD_per_t=t["price"],
            make_up=t["make_up"],
            max_pH=t["max_pH"],
            max_dose_kg_per_m3=t["max_dose"],
            components=components,
            water=water,
            molar_mass_g_per_mol=molar_mass_g_per_mol(t["formula"]),
        )
    return out


def _positive(r: _Reading, where: str, table: Mapping[str, Any], keys: Iterable[str]) -> None:
    for key in keys:
        if table[key] is not None and table[key] <= 0.0:
            r.fault(f"{where}.{key}", "is zero", 'write a share above zero, for example "90 %"')


def _read_oxidants(r: _Reading, value: Any) -> dict[str, Oxidant]:
    out: dict[str, Oxidant] = {}
    for name, entry in _tables(r, "oxidants", value):
        where = f"oxidants.{name}"
        before = len(r.faults)
        t = r.table(where, entry, _KEYS["oxidants"])
        _positive(r, where, t, ("strength", "utilisation"))
        per_t = per_m3 = None
        if t["formula"] is None:
            per_m3 = _quantity("price_per_volume")(r, f"{where}.price", t["price"])
        elif t["formula"] != "H2O2":
            r.fault(f"{where}.formula", f"'{t['formula']}' is not an oxidant known here",
                    "use H2O2, or leave formula out for air")  # fmt: skip
        else:
            per_t = _quantity("price_per_mass")(r, f"{where}.price", t["price"])
        if len(r.faults) > before:
            continue
        peroxide = t["formula"] is not None
        out[name] = Oxidant(
            name, t["formula"], t["strength"], t["utilisation"], per_t, per_m3, t["conversion"],
            t["min_pH"], 2.0 if peroxide else 4.0, molar_mass_g_per_mol("H2O2" if peroxide else "O2"),
        )  # fmt: skip
    return out


def _read_products(
    r: _Reading, value: Any, metal_prices: Mapping[str, float]
) -> tuple[Product, ...]:
    if not isinstance(value, list):
        r.fault("products", f"is {_kind(value)}", "write [[products]] tables")
        return ()
    out: list[Product] = []
    for number, entry in enumerate(value, start=1):
        where = f"products[{number}]"
        before = len(r.faults)
        t = r.table(where, entry, _KEYS["products"])
        if t["name"] == "waste" or t["name"] in {p.name for p in out}:
            r.fault(f"{where}.name", f"'{t['name']}' is taken", "give each product its own name")
        payable = t["payable"]
        if isinstance(payable, float):
            payable = dict.fromkeys(t["metals"], payable)
        for metal in payable or {}:
            if metal not in t["metals"]:
                r.fault(f"{where}.payable.{metal}", "is not among the product's metals",
                        "add it to metals, or take it out")  # fmt: skip
            elif metal not in metal_prices:
                r.fault(
                    f"prices.metal.{metal}", "is missing", f"{t['name']} is paid for it: add it"
                )
        if len(r.faults) > before:
            continue
        out.append(
            Product(
                t["name"],
                t["metals"],
                t["min_recovery"],
                t["min_grade"],
                t["max_impurity"],
                t["min_family"],
                payable or {},
                t["optional"],
            )
        )
    return tuple(out)


def _check_limits(
    r: _Reading,
    feed: Feed,
    reagents: Mapping[str, Reagent],
    oxidants: Mapping[str, Oxidant],
    effluent: Mapping[str, Any],
    products: Iterable[Product],
) -> None:
    """Refuse limits on what can never be there: a slip of the pen."""
    there = set(feed.assay_mol_per_L) | {feed.closing_component}
    for reagent in reagents.values():
        there |= set(reagent.components)
    if oxidants and there & {"Fe+2", "Fe+3"}:
        there |= {"Fe+2", "Fe+3"}
    for kind in ("dissolved", "total"):
        for spec in effluent[kind]:
            if not there & set(spec.components):
                r.fault(f"effluent.{kind}.{spec.label}", "is in neither the feed nor a reagent",
                        "add it to feed.assay, or take the limit out")  # fmt: skip
    for number, product in enumerate(products, start=1):
        for metal in product.metals:
            label = find_label(metal)
            if label is not None and not set(feed.assay_mol_per_L) & set(label.components):
                r.fault(f"products[{number}].metals", f"'{metal}' is not in the feed",
                        "add it to feed.assay, or name another metal")  # fmt: skip


def _read_train(r: _Reading, value: Any) -> dict[str, Any] | None:
    if not isinstance(value, list):
        r.fault("train", f"is {_kind(value)}", "write [[train]] tables, one per stage")
        return None
    if not value:
        return None
    stages = []
    for number, entry in enumerate(value, start=1):
        where = f"train[{number}]"
        t = r.table(where, entry, _KEYS["train"])
        doses: dict[str, dict[str, float]] = {}
        for name, text in _tables(r, f"{where}.reagents", t["reagents"]):
            dose = read_dose(text)
            if isinstance(dose, str):
                r.fault(f"{where}.reagents.{name}", dose,
                        'write "1.2 kg/m3" (as supplied, per m3 of feed), "140 kg/h" or "pH 6.0"')  # fmt: skip
            else:
                doses[name] = dose
        stages.append({"reagents": doses, "oxidant": t["oxidant"], "cake": t["cake"]})
    return {"stages": stages}


def read_dose(text: Any) -> dict[str, float] | str:
    """Read ``"1.2 kg/m3"``, ``"140 kg/h"`` or ``"pH 6.0"``; return what is wrong as text."""
    if not isinstance(text, str):
        return f"is {_kind(text)}"
    if text.strip().startswith("pH"):
        try:
            value = float(text.strip()[2:])
        except ValueError:
            return f"'{text}' is no pH"
        low, high = _RANGES["pH"]
        return {"pH": value} if low <= value <= high else f"'{text}' is outside {low:g} to {high:g}"
    try:
        _, unit = split_number(text)
        if unit.replace(" ", "").lower().split("/")[-1] in {"h", "hr", "hour", "d", "day"}:
            return {"dose_kg_per_h": parse(text, "mass_flow")}
        return {"dose_kg_per_m3": parse(text, "dose")}
    except QuantityError as error:
        return str(error).rpartition(": ")[0] or str(error)


def decompose(formula: str) -> tuple[dict[str, float], float] | str:
    """Write a compound over components and H2O; return what is wrong as text.

    Every element other than H and O must come from a component; O and H are then made up with H2O
    and H+. Where an element has components of several oxidation states, neutrality decides.
    """
    try:
        wanted = elements_of(formula)
    except ValueError as error:
        return str(error)
    if charge_of(formula):
        return f"'{formula}' carries a charge"
    carried = {e for c in catalogue().components.values() for e in c.elements} | {"O", "H"}
    for element in wanted:
        if element not in carried:
            return f"'{formula}' holds {element}, which no component can carry"
    if not any(wanted.values()):
        return f"'{formula}' holds no atoms"
    if max(wanted.values()) > _MOST_ATOMS:
        return f"'{formula}' counts more than {_MOST_ATOMS} atoms of an element"
    for ions in _ion_choices(wanted):
        found = _made_neutral(wanted, ions)
        if found is not None:
            return found
    return f"'{formula}' is not neutral over the components known here"


_MOST_ATOMS = 1000


def _ion_choices(wanted: Mapping[str, float]) -> Iterator[dict[str, float]]:
    """Yield the ions an element count may stand for, iron left out, likeliest first.

    Sulfur is all sulfate or all sulfide, which keeps thiosulfate and its like out; nitrate never
    stands beside sulfide. Oxoanions must find their oxygen in the formula, but for one atom of
    carbonate, which carbon dioxide takes from water.
    """
    fixed: dict[str, float] = {}
    for name, record in catalogue().components.items():
        element = next((e for e in record.elements if e not in {"H", "O"}), None)
        if element is not None and element in wanted and element not in {"S", "N", "Fe"}:
            fixed[name] = wanted[element]
    sulfur, nitrogen = wanted.get("S", 0.0), wanted.get("N", 0.0)
    for sulfates in dict.fromkeys((sulfur, 0.0)):
        sulfides = sulfur - sulfates
        for nitrates in range(1 if sulfides else int(nitrogen) + 1):
            ions = {"SO4-2": sulfates, "HS-": sulfides, "NO3-": float(nitrates),
                    "NH4+": nitrogen - nitrates}  # fmt: skip
            oxygen = 4.0 * sulfates + 3.0 * nitrates + 2.0 * fixed.get("CO3-2", 0.0)
            if oxygen <= wanted.get("O", 0.0):
                yield ions | fixed


def _made_neutral(
    wanted: Mapping[str, float], ions: Mapping[str, float]
) -> tuple[dict[str, float], float] | None:
    """Add H2O, H+ and iron to the ions, its Fe(III) share by charge; None when that cannot be."""
    components = catalogue().components

    def left(element: str) -> float:
        held = sum(n * components[c].elements.get(element, 0.0) for c, n in ions.items())
        return wanted.get(element, 0.0) - held

    water = left("O")
    protons = left("H") - 2.0 * water
    iron = wanted.get("Fe", 0.0)
    charge = sum(components[c].charge * n for c, n in ions.items()) + protons + 2.0 * iron
    ferric = -charge
    if not -1e-9 <= ferric <= iron + 1e-9:
        return None
    out = {**ions, "Fe+2": iron - ferric, "Fe+3": ferric, "H+": protons}
    return {c: n for c, n in out.items() if abs(n) > 1e-9}, water


# ---------------------------------------------------------------------------------------------
# decisions and copies


def check_decisions(flowsheet: Flowsheet, decisions: Mapping[str, Any]) -> None:
    """Refuse decisions that do not fit the flowsheet.

    ``plant.max_stages`` bounds the optimiser only: a train of the user's own may be longer.

    Raises
    ------
    InputError
        Naming the stage and what is wrong with it.
    """
    r = _Reading(flowsheet.source_name)
    stages = decisions.get("stages") if isinstance(decisions, Mapping) else None
    if not isinstance(stages, list) or not stages:
        r.fault("train", "holds no stages", "give at least one stage")
        stages = []
    if len(stages) > MAX_STAGES:
        r.fault("train", f"has {len(stages)} stages", f"give at most {MAX_STAGES}")
    for number, stage in enumerate(stages, start=1):
        where = f"train[{number}]"
        if isinstance(stage, Mapping):
            _check_stage(r, flowsheet, where, stage)
        else:
            r.fault(where, "is no table", "give reagents, oxidant and cake")
    r.finish()


def _check_stage(r: _Reading, flowsheet: Flowsheet, where: str, stage: Mapping[str, Any]) -> None:
    for key in stage:
        if key not in _KEYS["train"]:
            _unknown(r, f"{where}.{key}", "key", key, _KEYS["train"])
    reagents = stage.get("reagents") or {}
    if not isinstance(reagents, Mapping):
        r.fault(f"{where}.reagents", f"is {_kind(reagents)}, not a table", _DOSE_HINT)
        return
    for name, dose in reagents.items():
        path = f"{where}.reagents.{name}"
        if name not in flowsheet.reagents:
            _unknown(r, path, "reagent", name, flowsheet.reagents)
        else:
            _check_dose(r, path, dose)
    if sum(isinstance(dose, Mapping) and "pH" in dose for dose in reagents.values()) > 1:
        r.fault(f"{where}.reagents", "sets the pH twice", "let one reagent set the pH")
    agent, cake = stage.get("oxidant"), stage.get("cake", "waste")
    if agent is not None and agent not in [*flowsheet.oxidants]:
        _unknown(r, f"{where}.oxidant", "oxidant", agent, flowsheet.oxidants)
    if not reagents and agent is None:
        r.fault(where, "adds nothing", "give a reagent or an oxidant, or take the stage out")
    places = ["waste", *(p.name for p in flowsheet.products)]
    if cake not in places:
        _unknown(r, f"{where}.cake", "destination", cake, places)


_DOSE_RANGES = {
    "pH": _RANGES["pH"],
    "dose_kg_per_m3": (KINDS["dose"].low, KINDS["dose"].high),
    "dose_kg_per_h": (KINDS["mass_flow"].low, KINDS["mass_flow"].high),
}
_DOSE_HINT = 'give {"dose_kg_per_m3": 1.2}, {"dose_kg_per_h": 140.0} or {"pH": 6.0}'


def _check_dose(r: _Reading, path: str, dose: Any) -> None:
    if not isinstance(dose, Mapping) or len(dose) != 1 or not set(dose) <= set(_DOSE_RANGES):
        r.fault(path, "is no dose", _DOSE_HINT)
        return
    ((kind, value),) = dose.items()
    number = isinstance(value, int | float | np.floating) and not isinstance(value, bool)
    if not number or not abs(value) < 1e300:  # NaN is not below it either
        r.fault(path, f"{value!r} is no number", "give a number")
        return
    low, high = _DOSE_RANGES[kind]
    if not low <= value <= high:
        fault = "negative" if kind != "pH" and value < 0.0 else f"outside {low:g} to {high:g}"
        r.fault(path, f"{kind} = {value:g} is {fault}", "correct it")


def _unknown(r: _Reading, where: str, what: str, name: Any, known: Iterable[str]) -> None:
    names = list(known)
    close = difflib.get_close_matches(str(name), names, 1)
    hint = f"did you mean {close[0]}?" if close else f"known: {', '.join(names) or 'none'}"
    r.fault(where, f"no {what} '{name}'", hint)


def with_value(flowsheet: Flowsheet, key: str, text: Any) -> Flowsheet:
    """Return a copy with one key of the document replaced, for instance a price.

    ``key`` is a path such as ``reagents.hydrated lime.price`` or ``products[1].payable``.

    Raises
    ------
    InputError
        When there is no such key, or the value does not fit it.
    """
    document = copy.deepcopy(flowsheet.document)
    parent, last = _locate(flowsheet, document, key)
    parent[last] = text
    return from_document(document, flowsheet.source_name)


def value_at(flowsheet: Flowsheet, key: str) -> Any:
    """Return what the document holds at a key path.

    Raises
    ------
    InputError
        When there is no such key.
    """
    parent, last = _locate(flowsheet, flowsheet.document, key)
    return parent[last]


def _locate(flowsheet: Flowsheet, document: Any, key: str) -> tuple[Any, Any]:
    node: Any = document
    steps: list[str | int] = []
    wording: list[str] = []
    for part in _split_path(key):
        name, _, index = part.partition("[")
        steps.append(name)
        wording.append(name)
        if index:
            wording.append(f"[{index}")
            number = index.rstrip("]")
            steps.append(int(number) - 1 if number.isdigit() else -1)
    for depth, step in enumerate(steps):
        inside = (
            step in node
            if isinstance(node, dict)
            else isinstance(node, list) and isinstance(step, int) and 0 <= step < len(node)
        )
        if not inside:
            names = [str(k) for k in node] if isinstance(node, dict) else []
            if isinstance(node, list):
                names = [f"[{k}]" for k in range(1, len(node) + 1)]
            r = _Reading(flowsheet.source_name)
            what = "entry" if isinstance(node, list) else "key"
            _unknown(r, key, what, wording[depth], names)
            r.finish()
        if depth < len(steps) - 1:
            node = node[step]
    return node, steps[-1]


def _split_path(key: str) -> list[str]:
    parts, quoted, current = [], False, ""
    for char in key:
        if char == '"':
            quoted = not quoted
        elif char == "." and not quoted:
            parts.append(current)
            current = ""
        else:
            current += char
    return [*parts, current]


# ---------------------------------------------------------------------------------------------
# the graph

#: unit types: what each node of the graph is. A new unit type is added here, drawn in
#: `train_graph`, and given its physics in `plant`.
UNIT_TYPES = {
    "feed": "liquor as it arrives",
    "mix": "mixing tank (TK): reagents, oxidant, equilibrium",
    "settle": "settler (TH): cake with its moisture, overflow with its fines",
    "product": "cake that is sold",
    "waste": "cake that is disposed of",
    "effluent": "last overflow",
}


def train_graph(flowsheet: Flowsheet, stages: int, destinations: Iterable[str] = ()) -> nx.DiGraph:
    """Return the graph of a train of ``stages`` mixing and settling units.

    Nodes carry ``unit`` (a key of `UNIT_TYPES`), ``stage`` and a trade-style ``tag``; edges carry a
    ``stream`` number and a ``kind``: liquor, pulp or cake. Reagents, their water and vented gas enter
    and leave at the mixing tanks; they are reported with the stage.
    """
    graph = nx.DiGraph(title=flowsheet.title)
    places = [*destinations, *["waste"] * stages][:stages]
    graph.add_node("feed", unit="feed", stage=0, tag="FEED")
    number = 1
    previous = "feed"
    for k in range(1, stages + 1):
        tank, settler, cake = f"TK-{k}01", f"TH-{k}01", f"cake {k}"
        kind = "waste" if places[k - 1] == "waste" else "product"
        graph.add_node(tank, unit="mix", stage=k, tag=tank)
        graph.add_node(settler, unit="settle", stage=k, tag=settler)
        graph.add_node(cake, unit=kind, stage=k, tag=places[k - 1])
        graph.add_edge(previous, tank, stream=number, kind="liquor")
        graph.add_edge(tank, settler, stream=number + 1, kind="pulp")
        graph.add_edge(settler, cake, stream=number + 2, kind="cake")
        number += 3
        previous = settler
    graph.add_node("effluent", unit="effluent", stage=stages, tag="EFF")
    graph.add_edge(previous, "effluent", stream=number, kind="liquor")
    return graph
