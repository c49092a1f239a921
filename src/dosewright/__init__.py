"""Least-cost reagent trains for the staged precipitation of dissolved metals.

The public names are imported on first use, so that ``import dosewright`` costs nothing.
"""

from __future__ import annotations

from importlib import import_module
from typing import TYPE_CHECKING, Any

if TYPE_CHECKING:
    from dosewright.chemistry import catalogue
    from dosewright.design import Design
    from dosewright.equilibrium import Equilibrium, equilibrate, equilibrate_batch
    from dosewright.errors import DosewrightError, InputError, NoDesign, NotConverged
    from dosewright.flowsheet import Flowsheet, load
    from dosewright.search import optimise
    from dosewright.trial import Trial, evaluate
    from dosewright.verify import Verdict, verify

__version__ = "0.1.0"

_HOME = {
    "Design": "design",
    "DosewrightError": "errors",
    "Equilibrium": "equilibrium",
    "Flowsheet": "flowsheet",
    "InputError": "errors",
    "NoDesign": "errors",
    "NotConverged": "errors",
    "Trial": "trial",
    "Verdict": "verify",
    "catalogue": "chemistry",
    "equilibrate": "equilibrium",
    "equilibrate_batch": "equilibrium",
    "evaluate": "trial",
    "load": "flowsheet",
    "optimise": "search",
    "verify": "verify",
}

__all__ = [
    "Design",
    "DosewrightError",
    "Equilibrium",
    "Flowsheet",
    "InputError",
    "NoDesign",
    "NotConverged",
    "Trial",
    "Verdict",
    "__version__",
    "catalogue",
    "equilibrate",
    "equilibrate_batch",
    "evaluate",
    "load",
    "optimise",
    "verify",
]


def __getattr__(name: str) -> Any:
    """Import a public name on first use."""
    if name not in _HOME:
        raise AttributeError(f"module 'dosewright' has no attribute {name!r}")
    # a module of the same name must not hide the function: look inside it
    value = getattr(import_module(f"dosewright.{_HOME[name]}"), name)
    globals()[name] = value
    return value


def __dir__() -> list[str]:
    """List the public names."""
    return sorted(__all__)
