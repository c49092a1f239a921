"""Activity models: water's properties and the parameters each model hands to the kernel.

A model is a name, a kernel code and a parameter vector at a temperature. To add one, add its
branch to ``equilibrium/_kernel._activity`` and its entry to ``MODELS`` here.
"""

from __future__ import annotations

import math
from collections.abc import Callable
from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from dosewright.errors import DosewrightError

LN10 = math.log(10.0)
WATER_KG_PER_MOL = 0.01801528  # molar mass of H2O, IUPAC abridged atomic weights

DAVIES_RANGE_MOL_PER_KG = 0.5  # usual upper ionic strength of the Davies equation (Davies 1962)
#: ln(water activity) = -0.017 sum of molalities (Garrels and Christ 1965; memory)
WATER_ACTIVITY_PER_MOLALITY = 0.017
NEUTRAL_GAS_LOG10_PER_STRENGTH = 0.1  # salting-out of dissolved gases, Stumm and Morgan 1996


def water_density_kg_per_m3(temperature_C: float) -> float:
    """Density of water at 1 atm, kg/m3 (Kell 1975, J. Chem. Eng. Data 20, 97; 0-100 C; memory)."""
    t = temperature_C
    top = (
        999.83952
        + 16.945176 * t
        - 7.9870401e-3 * t**2
        - 46.170461e-6 * t**3
        + 105.56302e-9 * t**4
        - 280.54253e-12 * t**5
    )
    return top / (1.0 + 16.879850e-3 * t)


def dielectric_constant(temperature_C: float) -> float:
    """Relative permittivity of water (Malmberg and Maryott 1956, J. Res. NBS 56, 1; memory)."""
    t = temperature_C
    return 87.740 - 0.40008 * t + 9.398e-4 * t**2 - 1.410e-6 * t**3


def debye_hueckel_slope(temperature_C: float) -> float:
    """Debye-Hueckel limiting slope A, log10 basis, (kg/mol)^0.5.

    A = 1.82483e6 rho^0.5 / (eps T)^1.5 with rho in g/cm3 (Robinson and Stokes 1959).
    """
    kelvin = temperature_C + 273.15
    density = water_density_kg_per_m3(temperature_C) / 1000.0
    return (
        1.82483e6 * math.sqrt(density) / math.pow(dielectric_constant(temperature_C) * kelvin, 1.5)
    )


def _ideal(_temperature_C: float) -> NDArray[np.float64]:
    return np.zeros(3)


def _davies(temperature_C: float) -> NDArray[np.float64]:
    slope = debye_hueckel_slope(temperature_C) * LN10
    return np.array([slope, 0.3, WATER_ACTIVITY_PER_MOLALITY])


@dataclass(frozen=True)
class ActivityModel:
    """An activity model at one temperature, as the kernel takes it."""

    name: str
    code: int
    parameters: NDArray[np.float64]
    neutral_log10_per_strength: float
    max_ionic_strength_mol_per_kg: float
    why: str


#: name -> (kernel code, parameters at a temperature, salting-out of gases, range)
MODELS: dict[str, tuple[int, Callable[[float], NDArray[np.float64]], float, float]] = {
    "ideal": (0, _ideal, 0.0, 0.0),
    "davies": (1, _davies, NEUTRAL_GAS_LOG10_PER_STRENGTH, DAVIES_RANGE_MOL_PER_KG),
}


def activity_model(name: str, temperature_C: float) -> ActivityModel:
    """Return the model called ``name``; ``"auto"`` chooses and says why.

    Raises
    ------
    DosewrightError
        When there is no such model.
    """
    why = "asked for"
    if name == "auto":
        name, why = "davies", "the one model of this release for real solutions"
    if name not in MODELS:
        known = ", ".join(["auto", *MODELS])
        raise DosewrightError(f"activity model '{name}' is not known; choose one of {known}")
    code, parameters, neutral, limit = MODELS[name]
    return ActivityModel(name, code, parameters(temperature_C), neutral, limit, why)
