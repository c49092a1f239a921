"""The saved design: everything needed to recompute a train, in one JSON file."""

from __future__ import annotations

import hashlib
import json
import math
import os
import platform
import tempfile
from collections.abc import Mapping
from dataclasses import asdict, dataclass, fields
from importlib import metadata
from pathlib import Path
from typing import Any

from dosewright.chemistry.catalogue import catalogue
from dosewright.errors import Fault, InputError
from dosewright.trial import Trial

FORMAT = 1


@dataclass(frozen=True)
class SearchRecord:
    """What a search did; it cannot be recomputed from the design alone.

    ``lattice_difference`` is the relative difference of the linear model, anchored on the final
    design, from its exact cost.
    """

    trains_polished: int
    lattice_proposals: int
    lattice_value_USD_per_h: float
    lattice_difference: float
    exact_evaluations: int
    best_cost_USD_per_h: float


@dataclass(frozen=True)
class Design(Trial):
    """A trial that a search found, with the record of the search."""

    search: SearchRecord | None = None

    @staticmethod
    def of(trial: Trial, record: SearchRecord) -> Design:
        """Join a trial and its search record."""
        return Design(**{f.name: getattr(trial, f.name) for f in fields(Trial)}, search=record)


def versions() -> dict[str, str]:
    """Versions of what computed a design."""
    names = ("dosewright", "numpy", "scipy", "pyomo", "highspy", "numba")
    return {"python": platform.python_version(), **{n: metadata.version(n) for n in names}}


def _plain(value: Any) -> Any:
    """JSON has no infinities or NaN: they become null."""
    if isinstance(value, Mapping):
        return {str(k): _plain(v) for k, v in value.items()}
    if isinstance(value, list | tuple):
        return [_plain(v) for v in value]
    if isinstance(value, float):
        return value if math.isfinite(value) else None
    return value


#: sections of the record that follow from the flowsheet and the decisions
COMPUTED = (
    "cost_per_hour", "feasible", "shortfalls", "limits", "costs", "stages", "streams", "cautions",
    "closure", "balance",
)  # fmt: skip


def record_of(trial: Trial) -> dict[str, Any]:
    """Return a trial as the plain data that is saved."""
    search = getattr(trial, "search", None)
    body: dict[str, Any] = {
        "dosewright_design": FORMAT,
        "source_name": Path(trial.flowsheet.source_name).name,
        "flowsheet": trial.flowsheet.document,
        "versions": versions(),
        "constants_fingerprint": catalogue().fingerprint,
        "decisions": trial.decisions,
        "search": None if search is None else asdict(search),
        "cost_per_hour": trial.cost_per_hour,
        "feasible": trial.feasible,
    }
    for name in ("shortfalls", "limits", "costs", "stages", "streams", "cautions"):
        body[name] = [asdict(row) for row in getattr(trial, name)]
    body["closure"] = asdict(trial.closure)
    body["balance"] = dict(trial.balance)
    body = _plain(body)
    body["seal"] = seal_of(body)
    return body


def seal_of(body: Mapping[str, Any]) -> str:
    """Fingerprint of everything in a record but the seal itself (sha256, hex)."""
    rest = {k: v for k, v in body.items() if k != "seal"}
    text = json.dumps(rest, sort_keys=True, ensure_ascii=False, allow_nan=False)
    return hashlib.sha256(text.encode()).hexdigest()


def save(trial: Trial, path: str | Path) -> None:
    """Write a design or trial to one JSON file; nothing is left half-written.

    Raises
    ------
    InputError
        When the place cannot be written.
    """
    text = json.dumps(record_of(trial), indent=1, sort_keys=True, ensure_ascii=False) + "\n"
    write_text(path, text)


def write_text(path: str | Path, text: str) -> None:
    """Write a file by way of a temporary one beside it.

    Raises
    ------
    InputError
        When the place cannot be written.
    """
    target = Path(path)
    temporary = None
    try:
        if target.is_dir():
            raise IsADirectoryError(0, "it is a folder")
        handle, temporary = tempfile.mkstemp(dir=target.parent, prefix=f".{target.name}.")
        with os.fdopen(handle, "w", encoding="utf-8", newline="\n") as stream:
            stream.write(text)
        umask = os.umask(0)
        os.umask(umask)
        Path(temporary).chmod(0o666 & ~umask)
        Path(temporary).replace(target)
    except OSError as error:
        if temporary is not None:
            Path(temporary).unlink(missing_ok=True)
        raise InputError(
            str(path),
            [Fault("", f"cannot be written ({error.strerror})", "name a file in a folder you own")],
        ) from error


def read(path: str | Path) -> dict[str, Any]:
    """Read a saved design as plain data.

    Raises
    ------
    InputError
        When it is missing, damaged or no design.
    """
    source = str(path)
    try:
        body = json.loads(Path(path).read_bytes().decode("utf-8"), parse_constant=_no_constant)
    except FileNotFoundError as error:
        raise InputError(source, [Fault("", "there is no such file", "check the path")]) from error
    except OSError as error:
        raise InputError(
            source, [Fault("", f"cannot be read ({error.strerror})", "name a design file")]
        ) from error
    except (UnicodeDecodeError, ValueError, RecursionError) as error:
        raise InputError(
            source, [Fault("", f"is no valid JSON: {error}", "save the design again")]
        ) from error
    if not isinstance(body, dict) or "dosewright_design" not in body:
        raise InputError(source, [Fault("", "is no saved design", "write one with optimise -o")])
    if body["dosewright_design"] != FORMAT:
        raise InputError(
            source,
            [
                Fault(
                    "dosewright_design",
                    f"format {body['dosewright_design']!r} is not known to this version",
                    f"this version reads format {FORMAT}",
                )
            ],
        )
    needed = {"flowsheet": dict, "decisions": dict, "source_name": str}
    faults = [
        Fault(key, "is missing or damaged", "save the design again")
        for key, kind in needed.items()
        if not isinstance(body.get(key), kind)
    ]
    if faults:
        raise InputError(source, faults)
    return body


def _no_constant(name: str) -> float:
    raise ValueError(f"{name} is no JSON number")
