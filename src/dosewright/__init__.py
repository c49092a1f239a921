"""Least-cost reagent trains for the staged precipitation of dissolved metals.

The public names are imported on first use, so that ``import dosewright`` costs nothing.

=====================  =============================================================
``load``               read a flowsheet file
``optimise``           find the cheapest train that meets every limit
``evaluate``           solve and judge one given train
``verify``             check a saved design from its file alone
``equilibrate``        equilibrium of one vessel
``equilibrate_batch``  equilibria of many vessels at once
``catalogue``          the constants in use, each with its source
``Flowsheet``          a problem: feed, reagents, prices, limits
``Trial``              one train solved in full
``Design``             the train that `optimise` chose, with the record of the search
``Verdict``            what `verify` found
``Equilibrium``        what `equilibrate` found
``DosewrightError``    base of all errors raised on purpose
``InputError``         a file, a key or an argument is wrong
``NotConverged``       an equilibrium without a passing certificate
``NoDesign``           no train meets the limits
``__version__``        version of this package
=====================  =============================================================
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
    from dosewright.verification import Verdict, verify

__version__ = "0.1.0"

#: no module here may bear a public name: importing it would hide the function of that name
_HOME = {
    "Design": "design",
    "DosewrightError": "errors",
    "Equilibrium": "equilibrium",
    "Flowsheet": "flowsheet",
    "InputError": "errors",
    "NoDesign": "errors",
    "NotConverged": "errors",
    "Trial": "trial",
    "Verdict": "verification",
    "catalogue": "chemistry",
    "equilibrate": "equilibrium",
    "equilibrate_batch": "equilibrium",
    "evaluate": "trial",
    "load": "flowsheet",
    "optimise": "search",
    "verify": "verification",
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
    value = getattr(import_module(f"dosewright.{_HOME[name]}"), name)
    globals()[name] = value
    return value


def __dir__() -> list[str]:
    """List the public names."""
    return sorted(__all__)
