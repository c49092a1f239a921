"""Check a design from its file alone: rebuild the flowsheet, solve it again, compare everything.

Nothing of the search is used: the decisions in the file go through the exact model, and every
number and word of the record is compared with what comes out. What cannot be recomputed, the record
of the search, is covered by the seal and must agree with the cost.
"""

from __future__ import annotations

import math
from collections.abc import Iterator, Mapping
from dataclasses import dataclass, fields
from pathlib import Path
from typing import Any

from dosewright.design import METHOD, SearchRecord, read, record_of, seal_of
from dosewright.errors import DosewrightError, Fault, InputError
from dosewright.flowsheet import check_decisions, from_document
from dosewright.trial import Shortfall, Trial, evaluate

#: sections that are not compared number by number; each is dealt with on its own
_APART = {
    "dosewright_design",
    "versions",
    "constants_fingerprint",
    "source_name",
    "flowsheet",
    "search",
    "seal",
}

#: a number this small stands for nothing (mg/L, mol/h, kg/h, USD/h alike)
_NOTHING = 1e-12

#: figures that are zero but for rounding, with what they may amount to; they must stay within it
_CERTIFICATE_MOST = {
    "balance_residual": 1e-9,
    "mass_action_residual_ln": 1e-8,
    "charge_residual_eq_per_kg": 1e-9,
    "present_gap_log10": 1e-8,
    "supersaturation_log10": 1e-8,
}
_BALANCE_MOST = 1e-9

#: numbers that come close to zero as differences of large ones, with what rounding does to them
_FLOORS = {
    "saturation_log10": 1e-7,
    "error_percent": 1e-8,
    "heat_K": 1e-9,
    "value": 1e-9,
}


@dataclass(frozen=True)
class Difference:
    """One entry of the file that is not what it should be.

    ``where`` is its path, as ``costs[2].USD_per_h``; ``relative`` the relative difference, where
    both are numbers. An entry that is there on one side only reads ``(absent)`` on the other.
    """

    where: str
    saved: Any
    recomputed: Any
    relative: float | None = None

    def __str__(self) -> str:
        """One line."""
        off = f" ({self.relative:.2g} relative)" if self.relative is not None else ""
        return f"{self.where}: saved {_brief(self.saved)}, now {_brief(self.recomputed)}{off}"


@dataclass(frozen=True)
class Verdict:
    """What `verify` found.

    Attributes
    ----------
    path: the file.
    ok: nothing differs and every limit is met.
    differences: every entry that was not reproduced.
    limits_missed: limits that the recomputed train does not meet.
    notes: what is worth knowing and decides nothing, such as other versions.
    trial: the train as recomputed; None when the file's contents could not be solved at all.
    """

    path: str
    ok: bool
    differences: list[Difference]
    limits_missed: list[Shortfall]
    notes: list[str]
    trial: Trial | None


ABSENT = "(absent)"


def _brief(value: Any) -> str:
    text = f"{value:.12g}" if isinstance(value, float) else str(value)
    return text if len(text) <= 80 else text[:77] + "..."


def verify(path: str | Path, *, tolerance: float = 1e-6) -> Verdict:
    """Check a saved design from its file alone.

    Parameters
    ----------
    path: a file written by `dosewright.design.save`.
    tolerance: relative, for every number; numbers near zero have absolute floors.

    Raises
    ------
    InputError
        When the file is missing, damaged or no design file. A readable file with wrong numbers
        raises nothing: it gets a verdict.
    """
    if not 0.0 < tolerance < 1.0:
        fault = Fault(
            "tolerance", f"{tolerance!r} is no tolerance", "give a number between 0 and 1"
        )
        raise InputError("verify", [fault])
    record = read(path)
    notes: list[str] = []
    differences: list[Difference] = []
    trial: Trial | None = None
    sealed = seal_of(record)
    if record["seal"] != sealed:
        differences.append(Difference("seal", record["seal"], sealed))
    try:
        trial = _solve_again(record)
    except DosewrightError as error:
        differences.append(Difference("decisions", "a train that can be solved", str(error)))
    if trial is not None:
        fresh = record_of(trial)
        differences += _compare_constants(record, fresh)
        notes += _version_notes(record, fresh)
        differences += compare(record, fresh, tolerance)
        differences += _beyond_rounding(fresh)
        differences += list(_search_faults(record, fresh, tolerance))
    missed = list(trial.shortfalls) if trial is not None else []
    ok = trial is not None and not differences and not missed
    return Verdict(str(path), ok, differences, missed, notes, trial)


def _solve_again(record: Mapping[str, Any]) -> Trial:
    flowsheet = from_document(record["flowsheet"], record["source_name"])
    decisions = record["decisions"]
    _check_shape(flowsheet.source_name, decisions)
    check_decisions(flowsheet, decisions)
    return evaluate(flowsheet, decisions)


def _check_shape(source: str, decisions: Mapping[str, Any]) -> None:
    """Refuse decisions that are not even of the right JSON types."""
    stages = decisions.get("stages")
    sound = isinstance(stages, list) and all(
        isinstance(stage, dict)
        and isinstance(stage.get("reagents", {}), dict)
        and all(isinstance(dose, dict) for dose in stage.get("reagents", {}).values())
        and isinstance(stage.get("oxidant"), str | None)
        and isinstance(stage.get("cake", "waste"), str)
        for stage in stages
    )
    if not sound:
        raise InputError(source, [Fault("decisions", "are of the wrong type", "save them again")])


def _compare_constants(record: Mapping[str, Any], fresh: Mapping[str, Any]) -> list[Difference]:
    key = "constants_fingerprint"
    return [] if record[key] == fresh[key] else [Difference(key, record[key], fresh[key])]


def _version_notes(record: Mapping[str, Any], fresh: Mapping[str, Any]) -> list[str]:
    then, now = record["versions"], fresh["versions"]
    return [
        f"{name} was {then.get(name, ABSENT)} when saved and is {now.get(name, ABSENT)} now"
        for name in sorted({*then, *now})
        if then.get(name) != now.get(name)
    ]


def compare(
    record: Mapping[str, Any], fresh: Mapping[str, Any], tolerance: float
) -> list[Difference]:
    """Compare a saved record with a recomputed one, entry by entry."""
    turnover = sum(abs(line["USD_per_h"]) for line in fresh["costs"])
    found: list[Difference] = []
    for key in [*fresh, *(key for key in record if key not in fresh)]:
        if key in _APART:
            continue
        floor = tolerance * turnover if key == "cost_per_hour" else _NOTHING
        saved, now = record.get(key, ABSENT), fresh.get(key, ABSENT)
        found += _walk(key, saved, now, floor, tolerance)
    return found


def _kind(value: Any) -> str:
    if value is None or isinstance(value, bool | str):
        return type(value).__name__
    if isinstance(value, int | float):
        return "number"
    return "table" if isinstance(value, Mapping) else "list"


def _walk(where: str, saved: Any, now: Any, floor: float, tolerance: float) -> Iterator[Difference]:
    kind = _kind(now)
    if _kind(saved) != kind:
        # an entry this close to zero may come and go with rounding
        number = saved if now == ABSENT else now
        if ABSENT not in (saved, now) or _kind(number) != "number" or abs(number) > floor:
            yield Difference(where, saved, now)
    elif kind == "table":
        for key in [*now, *(key for key in saved if key not in now)]:
            inner = _floor(key, now, floor, tolerance)
            yield from _walk(
                f"{where}.{key}", saved.get(key, ABSENT), now.get(key, ABSENT), inner, tolerance
            )
    elif kind == "list":
        for i in range(max(len(saved), len(now))):
            left = saved[i] if i < len(saved) else ABSENT
            right = now[i] if i < len(now) else ABSENT
            yield from _walk(f"{where}[{i}]", left, right, floor, tolerance)
    elif kind == "number":
        gap, size = abs(saved - now), max(abs(saved), abs(now))
        if not gap <= max(tolerance * size, floor):
            yield Difference(where, saved, now, gap / size)
    elif saved != now:
        yield Difference(where, saved, now)


def _floor(key: str, table: Mapping[str, Any], floor: float, tolerance: float) -> float:
    """Absolute floor for one entry of a table, given the floor of the table itself."""
    if key in _CERTIFICATE_MOST:  # may move, but not beyond what passes
        return _CERTIFICATE_MOST[key]
    if key == "balance":
        return _BALANCE_MOST
    if key in {"margin", "missed_by"}:
        # what is left between a value and its bound is known as well as the bound is
        return tolerance * float(max(abs(table["bound"]), 0.0 if table["unit"] else 1.0))
    if key == "H+" and floor == _NOTHING:
        # protons are counted net of base: a small difference of large amounts
        return max(_NOTHING, 1e-9 * float(max(abs(v) for v in table.values())))
    return max(floor, _FLOORS.get(key, 0.0))


def _beyond_rounding(fresh: Mapping[str, Any]) -> list[Difference]:
    """Return balances and certificates that do not pass."""
    found = [
        Difference(f"balance.{name}", f"at most {_BALANCE_MOST:g}", value)
        for name, value in fresh["balance"].items()
        if not abs(value) <= _BALANCE_MOST
    ]
    for i, stage in enumerate(fresh["stages"]):
        for name, value in stage["certificate"].items():
            most = _CERTIFICATE_MOST.get(name, math.inf)
            # an undersaturated liquor is as good as it gets
            size = value if name == "supersaturation_log10" else abs(value)
            if not size <= most:
                where = f"stages[{i}].certificate.{name}"
                found.append(Difference(where, f"at most {most:g}", value))
    return found


def _search_faults(
    record: Mapping[str, Any], fresh: Mapping[str, Any], tolerance: float
) -> Iterator[Difference]:
    """Check the record of the search against itself and against the cost."""
    search = record["search"]
    if search is None:
        return
    names = {f.name for f in fields(SearchRecord)}
    for name in sorted(names ^ set(search)):
        yield Difference(f"search.{name}", search.get(name, ABSENT),
                         ABSENT if name in search else "an entry")  # fmt: skip
    if names != set(search):
        return
    counts = {}
    for name in ("trains_polished", "lattice_proposals", "exact_evaluations"):
        value = search[name]
        if isinstance(value, bool) or not isinstance(value, int) or value < 0:
            yield Difference(f"search.{name}", value, "a count")
        else:
            counts[name] = value
    if len(counts) == 3:
        polished = counts["trains_polished"]
        if counts["lattice_proposals"] > polished:
            most = f"at most {polished}, the trains polished"
            yield Difference("search.lattice_proposals", counts["lattice_proposals"], most)
        if counts["exact_evaluations"] < polished:
            least = f"at least {polished}, the trains polished"
            yield Difference("search.exact_evaluations", counts["exact_evaluations"], least)
    for name in ("lattice_value_USD_per_h", "lattice_difference"):
        if _kind(search[name]) not in {"number", "NoneType"}:
            yield Difference(f"search.{name}", search[name], "a number or null")
    if search["method"] != METHOD:
        yield Difference("search.method", search["method"], METHOD)
    turnover = sum(abs(line["USD_per_h"]) for line in fresh["costs"])
    yield from _walk(
        "search.best_cost_USD_per_h",
        search["best_cost_USD_per_h"],
        fresh["cost_per_hour"],
        tolerance * turnover,
        tolerance,
    )
