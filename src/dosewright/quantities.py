"""Text with a unit, as people type it, to a number in a stated unit.

Units are read by pint; this module only says which kind of quantity a key takes and in which unit
the program keeps it. pint is imported on first use: it takes a quarter of a second.
"""

from __future__ import annotations

import math
import re
from dataclasses import dataclass
from functools import lru_cache
from typing import Any


@dataclass(frozen=True)
class Kind:
    """A kind of quantity: the unit it is kept in, an example, and its bounds there."""

    unit: str
    example: str
    low: float = 0.0
    high: float = math.inf


#: every kind of quantity a file or a command can hold
KINDS: dict[str, Kind] = {
    "flow": Kind("m**3/hour", "120 m3/h", 1e-9),
    "operating_time": Kind("hour/year", "8400 h/yr", 1.0, 8785.0),
    "temperature": Kind("degC", "25 degC", 0.0, 100.0),
    "mass_concentration": Kind("mg/L", "310 mg/L", 0.0, 1e6),
    "price_per_mass": Kind("USD/t", "190 USD/t"),
    "price_per_volume": Kind("USD/m**3", "0.80 USD/m3"),
    "fraction": Kind("", "92 %", 0.0, 1.0),
    "pressure": Kind("atm", "0.01 atm", 1e-12, 1e3),
    "dose": Kind("kg/m**3", "1.2 kg/m3", 0.0, 5000.0),
    "mass_flow": Kind("kg/hour", "140 kg/h", 0.0),
    "volume": Kind("L", "500 mL", 0.0),
    "mass": Kind("g", "2 g", 0.0),
}


class QuantityError(ValueError):
    """A text is not the quantity asked for; the message says why and gives an example."""


@lru_cache(maxsize=1)
def _registry() -> Any:
    import pint  # noqa: PLC0415  (slow to import)

    registry: Any = pint.UnitRegistry(autoconvert_offset_to_baseunit=True, cache_folder=None)
    registry.define("USD = [money] = $_USD")
    registry.define("t = 1000 kilogram = tonne = metric_tonne")
    registry.define("short_ton = 907.18474 kilogram")
    registry.define("gpm = gallon / minute")
    registry.define("ML = 1e6 liter = megaliter")
    registry.define("yr = 365.25 day")
    registry.define("a = 365.25 day")
    registry.define("eq = [equivalent]")
    return registry


# separators group thousands or the number ends there: "1,5" must not become 15
_LEADING = re.compile(
    r"^\s*([+-]?(?:(?:[1-9]\d{0,2}(?:[,_ ]\d{3})+(?!\d)|\d+)(?:\.\d*)?|\.\d+)(?:[eE][+-]?\d+)?)\s*(.*)$",
    re.ASCII | re.DOTALL,
)
_POWER = re.compile(r"(?<=[a-zA-Z])([23])\b")
_SHARE = re.compile(r"%|\bpercent\b|\bpp[mb]\b")
_TON = re.compile(r"\btons?\b")
_YEAR = re.compile(r"\b(y|year)\b")


def split_number(text: str) -> tuple[float, str]:
    """Split ``"1,200.5 mg/L"`` into number and unit text.

    Raises
    ------
    QuantityError
        When it does not begin with a number.
    """
    match = _LEADING.match(text)
    if match is None:
        raise QuantityError(f"'{text}' does not begin with a number")
    number, rest = match.groups()
    if rest[:1] in {",", "_"}:
        raise QuantityError(f"'{text}' holds a '{rest[0]}' that groups no thousands")
    value = float(re.sub(r"[,_ ]", "", number))
    return value, rest.strip()


def _number_of(text: str, hint: str) -> tuple[float, str]:
    try:
        return split_number(text)
    except QuantityError as error:
        raise QuantityError(f"{error}: {hint}") from error


def parse(text: object, kind: str) -> float:
    """Read a quantity of a kind; the result is in ``KINDS[kind].unit`` (fractions as 0 to 1).

    Raises
    ------
    QuantityError
        For a missing or wrong unit, a number that is none, or one out of bounds.
    """
    spec = KINDS[kind]
    hint = f'write for example "{spec.example}"'
    if not isinstance(text, str):
        raise QuantityError(f"{text!r} carries no unit: {hint}")
    value, unit = _number_of(text, hint)
    if not math.isfinite(value):
        raise QuantityError(f"'{text}' is not a finite number: {hint}")
    if kind == "fraction":
        if unit not in {"%", "fraction"}:
            raise QuantityError(f"'{text}' needs % or the word fraction: {hint}")
        result = value / 100.0 if unit == "%" else value
    elif not unit:
        raise QuantityError(f"'{text}' carries no unit: {hint}")
    else:
        result = _convert(value, unit, spec.unit, text, hint)
    if not spec.low <= result <= spec.high:
        if result < 0.0:
            raise QuantityError(f"'{text}' is negative: {hint}")
        top = f"{100 * spec.high:g} %" if kind == "fraction" else f"{spec.high:g} {spec.unit}"
        bound = f"above {top}" if result > spec.high else f"below {spec.low:g} {spec.unit}"
        raise QuantityError(f"'{text}' is {bound}: {hint}")
    return result


def _convert(value: float, unit: str, target: str, text: str, hint: str) -> float:
    import pint  # noqa: PLC0415

    registry = _registry()
    clean = _YEAR.sub("yr", _POWER.sub(r"**\1", unit.replace("µ", "u").replace("μ", "u")))
    clean = clean.replace("°C", "degC")
    if _TON.search(clean):
        raise QuantityError(f"'{text}': a ton may be 1000 kg or 907 kg: write t or short_ton")
    if _SHARE.search(clean):
        raise QuantityError(f"'{text}' has the wrong dimension: {hint}")
    if re.search(r"[^\w*/^.() $-]", clean):
        raise QuantityError(f"'{text}': the unit '{unit}' is not known: {hint}")
    try:
        if target == "degC":
            return float(registry.Quantity(value, clean).to("degC").magnitude)
        return float((value * registry.parse_units(clean)).to(target).magnitude)
    except pint.DimensionalityError as error:
        raise QuantityError(f"'{text}' has the wrong dimension: {hint}") from error
    except Exception as error:  # pint raises many kinds for text it cannot read
        raise QuantityError(f"'{text}': the unit '{unit}' is not known: {hint}") from error


_AS = re.compile(r"^(.*?)\s+as\s+(\S+)$")


def parse_concentration(text: object, charge: int, name: str) -> tuple[float, str | None, str]:
    """Read an amount of ``name`` per litre; ``charge`` is 0 where no one charge is meant.

    Returns (number, basis formula or None, unit class): the class is ``"mol/L"`` when the number is
    already mol of ``name`` per litre, ``"g/L"`` when it is grams of the basis (``name`` itself when
    the basis is None) per litre, ``"g/kg"`` when it is per mass of liquor (ppm).

    Raises
    ------
    QuantityError
        For anything else.
    """
    hint = 'write for example "310 mg/L", "4.7 mmol/L", "350 mg/L as N" or "9.5 meq/L"'
    if not isinstance(text, str):
        raise QuantityError(f"{text!r} carries no unit: {hint}")
    value, unit = _number_of(text, hint)
    basis = None
    match = _AS.match(unit)
    if match is not None:
        unit, basis = match.group(1), match.group(2)
    if not math.isfinite(value):
        raise QuantityError(f"'{text}' is not a finite number: {hint}")
    if value < 0.0:
        raise QuantityError(f"'{text}' is negative: {hint}")
    if not unit:
        raise QuantityError(f"'{text}' carries no unit: {hint}")
    if unit in {"ppm", "mg/kg", "g/kg", "ug/kg", "ppb"}:
        per_kg = {"ppm": 1e-3, "mg/kg": 1e-3, "g/kg": 1.0, "ug/kg": 1e-6, "ppb": 1e-6}[unit]
        return value * per_kg, basis, "g/kg"
    if unit == "N" or re.fullmatch(r"[mu]?eq/(L|l|m3)", unit):
        scale = {"m": 1e-3, "u": 1e-6}.get(unit[0], 1.0)
        scale *= 1e-3 if unit.endswith("m3") else 1.0
        if charge == 0:
            raise QuantityError(
                f"'{text}': {name} has no one charge to count equivalents by: {hint}"
            )
        return value * scale / abs(charge), None, "mol/L"
    if re.fullmatch(r"[mun]?mol/(L|l|m3|dm3)", unit) or unit in {"M", "mM"}:
        unit = {"M": "mol/L", "mM": "mmol/L"}.get(unit, unit)
        return _convert(value, unit, "mol/L", text, hint), None, "mol/L"
    return _convert(value, unit, "g/L", text, hint), basis, "g/L"
