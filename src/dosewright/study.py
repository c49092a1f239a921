"""Sweeps: optimise again at each of several values of one key of the flowsheet.

Results are one CSV file, rewritten whole whenever a point is finished, so that an interrupted sweep
goes on where it stopped. Points are spread over worker processes.
"""

from __future__ import annotations

import csv
import hashlib
import io
import json
import multiprocessing
import os
import re
import signal
from collections.abc import Callable, Generator, Iterator, Mapping
from concurrent.futures import FIRST_COMPLETED, Future, ProcessPoolExecutor, wait
from contextlib import closing, contextmanager
from dataclasses import dataclass, field
from pathlib import Path
from typing import Any

from dosewright import __version__
from dosewright.chemistry.catalogue import catalogue
from dosewright.design import check_writable, train_text, write_text
from dosewright.errors import DosewrightError, Fault, InputError
from dosewright.flowsheet import Flowsheet, from_document, value_at, with_value
from dosewright.quantities import QuantityError, split_number
from dosewright.search import optimise
from dosewright.trial import evaluate

Progress = Callable[[str], None]
Row = dict[str, str]

MAX_POINTS = 1000
_MARK = "# dosewright sweep "
_BASE_MARK = "# base design "
_HEAD_COLUMNS = (
    "point", "value", "unit", "cost_USD_per_h", "feasible", "train", "structure_changed",
    "same_design_cost_USD_per_h", "same_design_feasible",
)  # fmt: skip
_THREADS = ("NUMBA_NUM_THREADS", "OMP_NUM_THREADS", "OPENBLAS_NUM_THREADS", "MKL_NUM_THREADS")


@dataclass(frozen=True)
class Vary:
    """What is varied: ``key`` takes each of ``values``, in ``unit`` (empty: a bare number)."""

    key: str
    values: tuple[float, ...]
    unit: str
    bare: bool

    def entry(self, point: int) -> str | float | int:
        """Return what the document holds at a point (counted from 0)."""
        value = self.values[point]
        if self.bare:
            return int(value) if value == int(value) else value
        return f"{value!r} {self.unit}"


@dataclass
class Sweep:
    """Results of a sweep, in the order of the points.

    Attributes
    ----------
    path: the CSV file.
    vary: what was varied.
    rows: column name -> text, as in the file; points not yet done are left out.
    reused: how many rows were found in the file.
    base: decisions of the design for the flowsheet as it stands, None when there is none.
    """

    path: Path
    vary: Vary
    rows: list[Row] = field(default_factory=list)
    reused: int = 0
    base: dict[str, Any] | None = None

    @property
    def any_feasible(self) -> bool:
        """Whether a train that meets every limit was found at any point."""
        return any(row["feasible"] == "yes" for row in self.rows)

    @property
    def complete(self) -> bool:
        """Whether every point is done."""
        return len(self.rows) == len(self.vary.values)


def parse_vary(flowsheet: Flowsheet, text: str) -> Vary:
    """Read ``KEY=LOW:HIGH:COUNT``, for instance ``reagents.hydrated lime.price=150:250 USD/t:5``.

    A number without a unit takes that of the other, or else that of the key's present value.

    Raises
    ------
    InputError
        For an unknown key, or values that the key does not take.
    """
    key, equals, span = text.partition("=")
    parts = [part.strip() for part in span.split(":")]
    key = key.strip()
    if not equals or not key or len(parts) != 3 or not all(parts):
        raise _bad_vary(text, "is not KEY=LOW:HIGH:COUNT")
    present = value_at(flowsheet, key)
    try:
        (low, low_unit), (high, high_unit) = split_number(parts[0]), split_number(parts[1])
    except QuantityError as error:
        raise _bad_vary(text, str(error)) from error
    if low_unit and high_unit and low_unit != high_unit:
        raise _bad_vary(text, f"mixes {low_unit} and {high_unit}")
    unit = high_unit or low_unit
    bare = isinstance(present, int | float) and not isinstance(present, bool)
    if not bare and not unit:
        unit = _present_unit(text, key, present)
    if bare and unit:
        raise _bad_vary(text, f"gives a unit, but {key} is a bare number")
    if not re.fullmatch(r"[0-9]{1,4}", parts[2]) or not 1 <= int(parts[2]) <= MAX_POINTS:
        raise _bad_vary(text, f"has '{parts[2]}' points; give 1 to {MAX_POINTS}")
    values = _spaced(low, high, int(parts[2]))
    if len(set(values)) < len(values):
        raise _bad_vary(text, f"has {len(values)} points that do not differ")
    return Vary(key, values, unit, bare)


def _spaced(low: float, high: float, count: int) -> tuple[float, ...]:
    if count == 1:
        return (low,)
    # twelve digits: 150, 175, 200 rather than 174.99999999999997
    steps = [low + (high - low) * i / (count - 1) for i in range(count)]
    return tuple(float(f"{step:.12g}") for step in steps)


def _present_unit(text: str, key: str, present: Any) -> str:

    if isinstance(present, str):
        try:
            unit = split_number(present)[1]
        except QuantityError:
            unit = ""
        if unit and not re.search(r"\d.*\bto\b|^to\b", unit):
            return unit
    raise _bad_vary(text, f"{key} holds {present!r}, which is no single quantity")


def _bad_vary(text: str, what: str) -> InputError:
    remedy = 'write for example "reagents.hydrated lime.price=150:250 USD/t:5"'
    return InputError("--vary", [Fault(text, what, remedy)])


# ---------------------------------------------------------------------------------------------
# one point; these run in worker processes


def _start_worker() -> None:
    """Make Ctrl-C end a worker at once and without a word."""
    signal.signal(signal.SIGINT, signal.SIG_DFL)


def _optimise_document(document: dict[str, Any], source: str, time_limit_s: float) -> Row:
    """Optimise one flowsheet and return its columns; ``decisions`` holds the train as JSON."""
    try:
        design = optimise(from_document(document, source), time_limit_s=time_limit_s)
    except DosewrightError as error:
        return {"feasible": "no", "note": _one_line(str(error))}
    row = {
        "cost_USD_per_h": repr(float(design.cost_per_hour)),
        "feasible": "yes" if design.feasible else "no",
        "train": train_text(design),
        "note": _one_line("; ".join(str(shortfall) for shortfall in design.shortfalls)),
        "decisions": json.dumps(design.decisions) if design.feasible else "",
    }
    for stage in design.stages:
        row[f"stage{stage.number}_pH"] = f"{stage.pH:.6g}"
        doses = sum(stage.doses_kg_per_m3.values())
        row[f"stage{stage.number}_dose_kg_per_m3"] = f"{doses:.8g}"
    return row


def _one_line(text: str) -> str:
    return " ".join(text.split())


def _same_design(flowsheet: Flowsheet, decisions: Mapping[str, Any]) -> Row:
    """Cost the base design, dose for dose, on another flowsheet."""
    try:
        trial = evaluate(flowsheet, decisions)
    except DosewrightError:
        return {"same_design_cost_USD_per_h": "", "same_design_feasible": "no"}
    return {
        "same_design_cost_USD_per_h": repr(float(trial.cost_per_hour)),
        "same_design_feasible": "yes" if trial.feasible else "no",
    }


# ---------------------------------------------------------------------------------------------
# the file


def structure_of(train: str) -> str:
    """Return the text of a train without its pH values: what is dosed where, and for what."""
    return re.sub(r" pH -?[\d.]+(?= -> )", "", train)


class _Table:
    """The rows of a sweep and the file they are kept in."""

    def __init__(self, path: Path, mark: str, columns: list[str]) -> None:
        self.path, self.mark, self.columns = path, mark, columns
        self.rows: dict[int, Row] = {}
        self.base: dict[str, Any] | None = None
        self.base_known = False

    def load(self, points: int) -> int:
        """Take over the rows of an earlier run; return how many.

        Raises
        ------
        InputError
            When the file holds anything else.
        """
        if not self.path.exists():
            return 0
        if not self.path.is_file():
            raise self._foreign("is no plain file")
        try:
            lines = self.path.read_bytes().decode("utf-8").splitlines(keepends=True)
        except (OSError, UnicodeDecodeError) as error:
            raise self._foreign("cannot be read as a table of results") from error
        if not lines:
            return 0
        if not lines[0].startswith(_MARK):
            raise self._foreign("holds something else")
        if lines[0].strip() != self.mark:
            raise self._foreign("holds the results of another flowsheet, range or version")
        if len(lines) > 1 and lines[1].startswith(_BASE_MARK):
            self._load_base(lines[1][len(_BASE_MARK) :])
        reader = csv.DictReader(io.StringIO("".join(x for x in lines if not x.startswith("# "))))
        for row in reader:
            number = row.get("point") or ""
            whole = None not in row and all(isinstance(v, str) for v in row.values())
            if whole and number.isdecimal() and 1 <= int(number) <= points:
                self.rows[int(number) - 1] = {k: row.get(k, "") for k in self.columns}
        return len(self.rows)

    def _load_base(self, text: str) -> None:
        try:
            base = json.loads(text)
        except ValueError:
            return
        if base is None or isinstance(base, dict):
            self.base, self.base_known = base, True

    def _foreign(self, what: str) -> InputError:
        remedy = "name another file, or remove this one"
        return InputError(str(self.path), [Fault("", what, remedy)])

    def save(self) -> None:
        """Write the whole file; `structure_changed` follows from the rows at hand."""
        out = io.StringIO()
        out.write(f"{self.mark}\n")
        if self.base_known:
            out.write(f"{_BASE_MARK}{json.dumps(self.base)}\n")
        writer = csv.DictWriter(out, self.columns, lineterminator="\n")
        writer.writeheader()
        writer.writerows(self.ordered())
        write_text(self.path, out.getvalue())

    def ordered(self) -> list[Row]:
        """Rows in the order of the points."""
        for point, row in self.rows.items():
            before = self.rows.get(point - 1)
            if before is None:
                row["structure_changed"] = "no" if point == 0 else ""
            else:
                changed = structure_of(row["train"]) != structure_of(before["train"])
                row["structure_changed"] = "yes" if changed else "no"
        return [self.rows[point] for point in sorted(self.rows)]


def _mark_of(flowsheet: Flowsheet, vary: Vary, time_limit_s: float) -> str:
    what = [
        flowsheet.document, vary.key, list(vary.values), vary.unit, time_limit_s,
        catalogue().fingerprint, __version__,
    ]  # fmt: skip
    text = json.dumps(what, separators=(",", ":"), default=str)  # the order of reagents counts
    return _MARK + hashlib.sha256(text.encode()).hexdigest()[:32]


# ---------------------------------------------------------------------------------------------


def sweep(
    flowsheet: Flowsheet,
    vary: str,
    path: str | Path,
    *,
    time_limit_s: float = 35.0,
    workers: int | None = None,
    progress: Progress | None = None,
) -> Sweep:
    """Optimise at each value of one key and write a CSV file, going on where an earlier run ended.

    Beside the best train at each value, the design for the flowsheet as it stands is costed, dose
    for dose, at every value. A value without a feasible train is a row like any other.

    Parameters
    ----------
    vary: ``KEY=LOW:HIGH:COUNT``, see `parse_vary`.
    path: of the CSV file; rows of the same sweep found there are kept.
    time_limit_s: for each value.
    workers: processes, one core each; all cores by default. With more than one, a script must keep
        its own work under ``if __name__ == "__main__":``.
    progress: called with one line of text for each value done.

    Raises
    ------
    InputError
        For a bad range, a value the key does not take, or a file that holds something else.
    KeyboardInterrupt
        On Ctrl-C; what is done is in the file.
    """
    spec = parse_vary(flowsheet, vary)
    count = len(spec.values)
    flowsheets = [with_value(flowsheet, spec.key, spec.entry(i)) for i in range(count)]
    check_writable(path)
    stages = max(f.plant.max_stages for f in flowsheets)
    columns = [*_HEAD_COLUMNS]
    for k in range(1, stages + 1):
        columns += [f"stage{k}_pH", f"stage{k}_dose_kg_per_m3"]
    table = _Table(Path(path), _mark_of(flowsheet, spec, time_limit_s), [*columns, "note"])
    reused = table.load(count)
    say = progress or (lambda _text: None)
    if reused:
        say(f"{reused} of {count} values found in {path}")

    def finish(point: int, columns_found: Row) -> None:
        row = dict.fromkeys(table.columns, "")
        row |= {"point": str(point + 1), "value": repr(spec.values[point]), "unit": spec.unit}
        row |= {k: v for k, v in columns_found.items() if k in row}
        table.rows[point] = row
        say(f"{spec.key} = {spec.entry(point)}: {_summary(row)}")

    def cost_base() -> None:
        for point, row in table.rows.items():
            if table.base is not None and not row["same_design_feasible"]:
                row.update(_same_design(flowsheets[point], table.base))

    # the flowsheet as it stands is job -1; it goes first, as every row needs it
    jobs = {} if table.base_known else {-1: flowsheet}
    jobs |= {i: f for i, f in enumerate(flowsheets) if i not in table.rows}
    table.save()
    with closing(_run(jobs, time_limit_s, workers or os.cpu_count() or 1)) as results:
        for point, found in results:
            if point < 0:
                decisions = found.get("decisions")
                table.base, table.base_known = json.loads(decisions) if decisions else None, True
                say(f"as it stands: {_summary(found)}")
            else:
                finish(point, found)
            cost_base()
            table.save()
    cost_base()
    table.save()
    return Sweep(Path(path), spec, table.ordered(), reused, table.base)


def _summary(row: Mapping[str, str]) -> str:
    if row.get("feasible") != "yes":
        return "no feasible train"
    return f"{float(row['cost_USD_per_h']):.4g} USD/h, {row['train']}"


def _run(
    jobs: Mapping[int, Flowsheet], time_limit_s: float, workers: int
) -> Generator[tuple[int, Row], None, None]:
    """Optimise every job and yield its columns as it is done."""
    workers = min(workers, len(jobs))
    if workers <= 1:
        for point, flowsheet in jobs.items():
            yield point, _optimise_document(flowsheet.document, flowsheet.source_name, time_limit_s)
        return
    with _pool(workers) as pool:
        with _one_thread_each():  # workers start while jobs are handed in
            waiting: dict[Future[Row], int] = {
                pool.submit(_optimise_document, f.document, f.source_name, time_limit_s): point
                for point, f in jobs.items()
            }
        while waiting:
            done, _ = wait(waiting, return_when=FIRST_COMPLETED)
            for future in sorted(done, key=lambda f: waiting[f]):
                yield waiting.pop(future), future.result()


@contextmanager
def _one_thread_each() -> Iterator[None]:
    """Let processes that are started here compute with one thread: they read this on import."""
    earlier = {name: os.environ.get(name) for name in _THREADS}
    os.environ.update(dict.fromkeys(_THREADS, "1"))
    try:
        yield
    finally:
        for name, value in earlier.items():
            if value is None:
                del os.environ[name]
            else:
                os.environ[name] = value


@contextmanager
def _pool(workers: int) -> Iterator[ProcessPoolExecutor]:
    """Worker processes that are stopped at once when anything goes wrong here."""
    context = multiprocessing.get_context("spawn")  # a fork would copy threads in mid-flight
    earlier = set(multiprocessing.active_children())
    pool = ProcessPoolExecutor(workers, mp_context=context, initializer=_start_worker)
    try:
        yield pool
    except BaseException:
        pool.shutdown(wait=False, cancel_futures=True)
        for process in set(multiprocessing.active_children()) - earlier:
            process.terminate()
        raise
    pool.shutdown()
