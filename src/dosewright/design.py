"""The design file: one train, all its numbers, and a seal over them.

A design file is JSON of our own making, complete in itself: the flowsheet as read, the decisions,
every number of the report, the versions and the constants behind them. `record_of` is the only
place that says what is in it; `dosewright.verification` recomputes a record and compares.

The seal is a checksum, not a signature: it shows damage and careless edits. Someone who changes the
flowsheet in a file and recomputes everything has made another valid design file.
"""

from __future__ import annotations

import hashlib
import json
import math
import os
import platform
from collections.abc import Mapping
from dataclasses import asdict, dataclass, field, fields
from importlib import metadata
from pathlib import Path
from typing import Any

from dosewright.chemistry.catalogue import catalogue
from dosewright.errors import Fault, InputError
from dosewright.trial import Trial

FORMAT = 1

METHOD = (
    "mixed-integer programs over anchored equilibria propose trains; each is polished on the exact "
    "model by sequential linear programs; the best is varied one choice at a time"
)

#: what a design file must hold, and of which JSON type
SECTIONS: dict[str, tuple[type, ...]] = {
    "dosewright_design": (int,),
    "versions": (dict,),
    "constants_fingerprint": (str,),
    "source_name": (str,),
    "flowsheet": (dict,),
    "decisions": (dict,),
    "cost_per_hour": (int, float),
    "feasible": (bool,),
    "shortfalls": (list,),
    "limits": (list,),
    "costs": (list,),
    "stages": (list,),
    "streams": (list,),
    "cautions": (list,),
    "closure": (dict,),
    "balance": (dict,),
    "notes": (list,),
    "search": (dict, type(None)),
    "seal": (str,),
}


@dataclass(frozen=True)
class SearchRecord:
    """How a design was found.

    Attributes
    ----------
    trains_polished: different trains optimised on the exact model.
    lattice_proposals: of them, those proposed by the mixed-integer programs.
    lattice_value_USD_per_h: what the linear model promised for the best proposal; NaN when none.
    lattice_difference: error of the linear model at the design, anchored on its stages and held near
        its doses: its value less the exact cost, over the sum of the absolute cost lines; NaN when it
        could not be compared.
    exact_evaluations: trains solved on the exact model in all.
    best_cost_USD_per_h: cost of the design, by the exact model.
    time_ran_out: the time limit, not a lack of better neighbours, ended the search.
    method: the way it was searched, in words.
    """

    trains_polished: int
    lattice_proposals: int
    lattice_value_USD_per_h: float
    lattice_difference: float
    exact_evaluations: int
    best_cost_USD_per_h: float
    time_ran_out: bool = False
    method: str = METHOD


@dataclass(frozen=True)
class Design(Trial):
    """The train that `optimise` chose: a `Trial` with the record of the search."""

    search: SearchRecord = field(kw_only=True)

    @classmethod
    def of(cls, trial: Trial, search: SearchRecord) -> Design:
        """Join a trial and the record of the search that led to it."""
        return cls(**{f.name: getattr(trial, f.name) for f in fields(Trial)}, search=search)


def train_text(trial: Trial) -> str:
    """Name a train in one line: ``air + limestone pH 5.9 -> waste | caustic pH 8.9 -> zinc cake``.

    ``nothing`` stands for a train without stages.
    """
    parts = []
    for stage in trial.stages:
        what = [stage.oxidant] if stage.oxidant else []
        what += [name for name, dose in stage.doses_kg_per_m3.items() if dose > 0.0]
        parts.append(f"{' + '.join(what) or 'nothing'} pH {stage.pH:.2f} -> {stage.destination}")
    return " | ".join(parts) or "nothing"


def plain(value: Any) -> Any:
    """Turn a result into JSON's own types; numbers that are not finite become None."""
    if isinstance(value, Mapping):
        return {str(key): plain(entry) for key, entry in value.items()}
    if isinstance(value, list | tuple):
        return [plain(entry) for entry in value]
    if value is None or isinstance(value, str | bool | int):
        return value
    if isinstance(value, float):
        return float(value) if math.isfinite(value) else None
    if hasattr(value, "item"):  # NumPy scalars
        return plain(value.item())
    raise TypeError(f"{type(value).__name__} has no place in a design file")


def record_of(trial: Trial) -> dict[str, Any]:
    """Everything a design file holds, seal included, as plain data.

    The flowsheet keeps the order of its keys, which is the order of reagents and cost lines.
    """
    record: dict[str, Any] = plain(
        {
            "dosewright_design": FORMAT,
            "versions": versions(),
            "constants_fingerprint": catalogue().fingerprint,
            "source_name": Path(trial.flowsheet.source_name).name,
            "flowsheet": trial.flowsheet.document,
            "decisions": trial.decisions,
            "cost_per_hour": trial.cost_per_hour,
            "feasible": trial.feasible,
            "shortfalls": [asdict(row) for row in trial.shortfalls],
            "limits": [asdict(row) for row in trial.limits],
            "costs": [asdict(row) for row in trial.costs],
            "stages": [asdict(row) for row in trial.stages],
            "streams": [asdict(row) for row in trial.streams],
            "cautions": [asdict(row) for row in trial.cautions],
            "closure": asdict(trial.closure),
            "balance": trial.balance,
            "notes": trial.notes,
            "search": asdict(trial.search) if isinstance(trial, Design) else None,
        }
    )
    record["seal"] = seal_of(record)
    return record


def seal_of(record: Mapping[str, Any]) -> str:
    """Checksum (SHA-256, hex) of everything in a record but its seal, in canonical JSON."""
    rest = {key: value for key, value in record.items() if key != "seal"}
    text = json.dumps(rest, sort_keys=True, separators=(",", ":"), allow_nan=False)
    return hashlib.sha256(text.encode("ascii")).hexdigest()


def to_json(value: Any) -> str:
    """Indented JSON of plain data, one trailing newline."""
    return json.dumps(plain(value), indent=1, ensure_ascii=False, allow_nan=False) + "\n"


def versions() -> dict[str, str]:
    """Versions of what computed a design."""
    found = {"python": platform.python_version()}
    for name in ("dosewright", "numpy", "scipy", "numba", "pyomo", "highspy"):
        try:
            found[name] = metadata.version(name)
        except metadata.PackageNotFoundError:
            found[name] = "not installed"
    return found


def save(trial: Trial, path: str | Path) -> None:
    """Write a design file; the same trial gives the same bytes.

    Raises
    ------
    InputError
        When the path cannot be written.
    """
    write_text(path, to_json(record_of(trial)))


def write_text(path: str | Path, text: str) -> None:
    """Write a text file whole or not at all: to a temporary file beside it, then replaced.

    Raises
    ------
    InputError
        When the path cannot be written.
    """
    check_writable(path)
    target = Path(path).resolve()  # a link stays a link, its target is replaced
    try:
        if target.exists() and not target.is_file():
            target.write_text(text, encoding="utf-8")  # a device or a pipe is not replaced
            return
        temporary = target.with_name(f".{target.name}.{os.getpid()}.part")
        try:
            with temporary.open("w", encoding="utf-8", newline="") as stream:
                stream.write(text)
                stream.flush()
                os.fsync(stream.fileno())
            temporary.replace(target)
        finally:
            temporary.unlink(missing_ok=True)
    except OSError as error:
        raise _unwritable(path, error.strerror or str(error)) from error


def check_writable(path: str | Path) -> None:
    """Refuse a path that cannot be written, before any work is done for it.

    Raises
    ------
    InputError
        Naming the path and the reason.
    """
    if not str(path).strip():
        raise InputError("output", [Fault("", "the path is empty", "name a file")])
    try:
        target = Path(path).resolve()
        if target.is_dir():
            raise _unwritable(path, "it is a folder")
        if not target.parent.is_dir():
            raise _unwritable(path, f"there is no folder {Path(path).parent}")
        place = target if target.exists() and not target.is_file() else target.parent
        allowed = os.access(place, os.W_OK)
    except (OSError, ValueError, RuntimeError) as error:  # name too long, NUL, circular links
        raise _unwritable(path, str(error)) from error
    if not allowed:
        raise _unwritable(path, "permission denied")


def _unwritable(path: str | Path, why: str) -> InputError:
    return InputError(str(path), [Fault("", f"cannot be written: {why}", "name another file")])


def read(path: str | Path) -> dict[str, Any]:
    """Read a design file as plain data and check that it is one; numbers are not checked here.

    Raises
    ------
    InputError
        When it is missing, unreadable, damaged, or no design file.
    """
    try:
        raw = Path(path).read_bytes()
    except FileNotFoundError as error:
        raise _not_a_design(path, "there is no such file", "check the path") from error
    except IsADirectoryError as error:
        raise _not_a_design(path, "is a folder", "name a file in it") from error
    except (OSError, ValueError) as error:
        raise _not_a_design(path, f"cannot be read ({error})", "check the path") from error
    try:
        record = json.loads(
            raw.decode("utf-8"), object_pairs_hook=_no_twins, parse_constant=_no_constant
        )
        json.dumps(record, ensure_ascii=False).encode("utf-8")
    except (ValueError, RecursionError) as error:
        what = f"is not readable as JSON ({error}): damaged or cut short, or no design file"
        raise _not_a_design(path, what, "save the design again") from error
    _check_sections(path, record)
    return dict(record)


def _no_twins(pairs: list[tuple[str, Any]]) -> dict[str, Any]:
    table = dict(pairs)
    if len(table) < len(pairs):
        raise ValueError("a key is given twice")
    return table


def _no_constant(name: str) -> float:
    raise ValueError(f"{name} is no JSON number")


def _not_a_design(path: str | Path, what: str, remedy: str, where: str = "") -> InputError:
    return InputError(str(path), [Fault(where, what, remedy)])


def _check_sections(path: str | Path, record: Any) -> None:
    remedy = "name a file saved with 'dosewright optimise -o' or 'dosewright evaluate -o'"
    if not isinstance(record, dict) or "dosewright_design" not in record:
        raise _not_a_design(path, "is no design file", remedy)
    version = record["dosewright_design"]
    if version != FORMAT or isinstance(version, bool):
        what = f"is of format {version!r}; this version reads format {FORMAT}"
        raise _not_a_design(path, what, "save the design again", "dosewright_design")
    faults = []
    for name, kinds in SECTIONS.items():
        if name not in record:
            faults.append(Fault(name, "is missing", "save the design again"))
        elif not isinstance(record[name], kinds) or (
            isinstance(record[name], bool) and bool not in kinds
        ):
            faults.append(Fault(name, "is of the wrong type", "save the design again"))
    if faults:
        raise InputError(str(path), faults)
