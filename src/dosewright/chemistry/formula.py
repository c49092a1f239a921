"""Chemical formulas: element counts, charge, molar mass."""

from __future__ import annotations

import re
from functools import lru_cache
from types import MappingProxyType

#: g/mol; IUPAC abridged standard atomic weights (Prohaska and others 2022, Pure Appl. Chem.
#: 94, 573; memory)
ATOMIC_WEIGHT = MappingProxyType(
    {
        "H": 1.008, "Li": 6.94, "B": 10.81, "C": 12.011, "N": 14.007, "O": 15.999, "F": 18.998,
        "Na": 22.990, "Mg": 24.305, "Al": 26.982, "Si": 28.085, "P": 30.974, "S": 32.06,
        "Cl": 35.45, "K": 39.098, "Ca": 40.078, "Cr": 51.996, "Mn": 54.938, "Fe": 55.845,
        "Co": 58.933, "Ni": 58.693, "Cu": 63.546, "Zn": 65.38, "As": 74.922, "Sr": 87.62,
        "Y": 88.906, "Ag": 107.87, "Cd": 112.41, "Ba": 137.33, "La": 138.91, "Ce": 140.12,
        "Pr": 140.91, "Nd": 144.24, "Dy": 162.50, "Pb": 207.2,
    }
)  # fmt: skip

_PHASE = re.compile(r"\((am|s|ppt|fresh|aged|green|pink|g|aq)\)$")
_CHARGE = re.compile(r"([+-])(\d*)$")
#: whole subscripts only, so that the 7 of FeSO4.7H2O is not read as O4.7
_TOKEN = re.compile(r"([A-Z][a-z]?)([1-9]\d*)?|(\()|(\))([1-9]\d*)?")
_LEADING = re.compile(r"\d+(?:\.\d+)?")


def charge_of(name: str) -> int:
    """Return the charge in a name such as ``Fe(OH)4-`` or ``SO4-2(aq)``."""
    match = _CHARGE.search(_PHASE.sub("", name))
    if match is None:
        return 0
    size = int(match.group(2) or 1)
    return size if match.group(1) == "+" else -size


@lru_cache(maxsize=1024)
def _parse(formula: str) -> tuple[tuple[str, float], ...]:
    text = _PHASE.sub("", formula)
    text = _CHARGE.sub("", text)
    counts: dict[str, float] = {}
    position = 0
    for part in text.replace("·", ":").split(":"):
        leading = _LEADING.match(part)
        factor = float(leading.group()) if leading else 1.0
        body = part[leading.end() :] if leading else part
        if not body:
            raise ValueError(f"formula '{formula}': nothing at position {position + 1}")
        offset = position + (leading.end() if leading else 0)
        for element, count in _group(body, formula, offset).items():
            counts[element] = counts.get(element, 0.0) + factor * count
        position += len(part) + 1
    return tuple(counts.items())


def _group(body: str, formula: str, offset: int) -> dict[str, float]:
    stack: list[dict[str, float]] = [{}]
    at = 0
    while at < len(body):
        match = _TOKEN.match(body, at)
        if match is None:
            hint = "; write ':' before water of crystallisation" if body[at] == "." else ""
            raise ValueError(
                f"formula '{formula}': '{body[at]}' at position {offset + at + 1} "
                f"is not understood{hint}"
            )
        element, count, opening, closing, times = match.groups()
        if element is not None:
            if element not in ATOMIC_WEIGHT:
                raise ValueError(
                    f"formula '{formula}': no element '{element}' (position {offset + at + 1})"
                )
            top = stack[-1]
            top[element] = top.get(element, 0.0) + float(count or 1)
        elif opening is not None:
            stack.append({})
        elif closing is not None:
            if len(stack) == 1:
                raise ValueError(f"formula '{formula}': ')' at {offset + at + 1} opens nowhere")
            inner = stack.pop()
            if not inner:
                raise ValueError(f"formula '{formula}': empty brackets at {offset + at + 1}")
            for name, n in inner.items():
                stack[-1][name] = stack[-1].get(name, 0.0) + n * float(times or 1)
        at = match.end()
    if len(stack) != 1:
        raise ValueError(f"formula '{formula}': a bracket is not closed")
    return stack[0]


def elements_of(formula: str) -> dict[str, float]:
    """Return element -> count. Charges (``+2``) and phase suffixes (``(am)``) are set aside.

    Raises
    ------
    ValueError
        For what is no formula, naming the position.
    """
    return dict(_parse(formula))


def molar_mass_g_per_mol(formula: str) -> float:
    """Return the molar mass, g/mol.

    Raises
    ------
    ValueError
        For what is no formula.
    """
    return sum(ATOMIC_WEIGHT[e] * n for e, n in _parse(formula))
