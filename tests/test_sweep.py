"""Sweeps: ranges, rows, resuming, interrupting."""

from __future__ import annotations

import csv
import os
import signal
import subprocess
import sys
import time
import tomllib
from pathlib import Path
from typing import Any

import pytest

from dosewright import study
from dosewright.design import Design, SearchRecord
from dosewright.errors import InputError, NotConverged
from dosewright.flowsheet import Flowsheet, from_document
from dosewright.study import parse_vary, structure_of, sweep
from dosewright.trial import evaluate
from rinse_water import TEXT

KEY = "reagents.hydrated lime.price"


@pytest.fixture(scope="module")
def flowsheet() -> Flowsheet:
    return from_document(tomllib.loads(TEXT), "rinse.toml")


class Optimiser:
    """Stands in for the search: lime while it is cheap, caustic beyond 300 USD/t."""

    def __init__(self) -> None:
        self.calls: list[float] = []
        self.fail_at = float("nan")
        self.interrupt_after = 10**9

    def __call__(self, flowsheet: Flowsheet, *, time_limit_s: float) -> Design:
        assert time_limit_s == 5.0
        if len(self.calls) >= self.interrupt_after:
            raise KeyboardInterrupt
        price = flowsheet.reagents["hydrated lime"].price_USD_per_t
        self.calls.append(price)
        if price == self.fail_at:
            raise NotConverged("vessel 1\nwas not solved")
        name = "hydrated lime" if price <= 300.0 else "caustic"
        pH = 9.0 if flowsheet.effluent.pH_max != 7.5 else 7.0
        stages = [{"reagents": {name: {"pH": pH}}, "oxidant": "peroxide", "cake": "waste"}]
        trial = evaluate(flowsheet, {"stages": stages})
        return Design.of(trial, SearchRecord(1, 1, 1.0, 0.0, 1, trial.cost_per_hour))


@pytest.fixture
def optimiser(monkeypatch: pytest.MonkeyPatch) -> Optimiser:
    stand_in = Optimiser()
    monkeypatch.setattr(study, "optimise", stand_in)
    return stand_in


def run(flowsheet: Flowsheet, vary: str, path: Path, **more: Any) -> study.Sweep:
    return sweep(flowsheet, vary, path, time_limit_s=5.0, workers=1, **more)


def table(path: Path) -> list[dict[str, str]]:
    lines = path.read_text(encoding="utf-8").splitlines()
    return list(csv.DictReader(line for line in lines if not line.startswith("# ")))


@pytest.mark.parametrize(
    ("text", "unit", "values", "entry"),
    [
        (f"{KEY}=150 USD/t:250 USD/t:3", "USD/t", (150.0, 200.0, 250.0), "150.0 USD/t"),
        (f"{KEY}=150:250 USD/t:3", "USD/t", (150.0, 200.0, 250.0), "150.0 USD/t"),
        (f"{KEY}=150 USD/kg:250:2", "USD/kg", (150.0, 250.0), "150.0 USD/kg"),
        (f" {KEY} = 250 : 150 : 2", "USD/t", (250.0, 150.0), "250.0 USD/t"),
        ("products[1].min_recovery=40 %:60 %:3", "%", (40.0, 50.0, 60.0), "40.0 %"),
        ("feed.pH=2.5:3:3", "", (2.5, 2.75, 3.0), 2.5),
        ("plant.max_stages=1:3:3", "", (1.0, 2.0, 3.0), 1),
        ("feed.assay.Zn=60:60:1", "mg/L", (60.0,), "60.0 mg/L"),
        (f"{KEY}=0.1:0.7:7", "USD/t", (0.1, 0.2, 0.3, 0.4, 0.5, 0.6, 0.7), "0.1 USD/t"),
    ],
)
def test_ranges(
    flowsheet: Flowsheet, text: str, unit: str, values: tuple[float, ...], entry: object
) -> None:
    vary = parse_vary(flowsheet, text)
    assert (vary.unit, vary.values) == (unit, values)
    assert vary.entry(0) == entry
    assert type(vary.entry(0)) is type(entry)


@pytest.mark.parametrize(
    ("text", "named"),
    [
        ("", "KEY=LOW:HIGH:COUNT"),
        (KEY, "KEY=LOW:HIGH:COUNT"),
        (f"{KEY}=1:2", "KEY=LOW:HIGH:COUNT"),
        (f"{KEY}=1:2:3:4", "KEY=LOW:HIGH:COUNT"),
        (f"{KEY}=:2:3", "KEY=LOW:HIGH:COUNT"),
        ("=1:2:3", "KEY=LOW:HIGH:COUNT"),
        (f"{KEY}=a:2:3", "does not begin with a number"),
        (f"{KEY}=1:2 USD/kg:x", "'x' points"),
        (f"{KEY}=1:2:0", "'0' points"),
        (f"{KEY}=1:2:-3", "'-3' points"),
        (f"{KEY}=1:2:2.5", "'2.5' points"),
        (f"{KEY}=1:2:1001", "1001"),
        (f"{KEY}=2:2:3", "do not differ"),
        (f"{KEY}=1 USD/t:2 USD/kg:3", "mixes"),
        (f"{KEY}=1 mg/L:2 mg/L:3", "wrong dimension"),
        (f"{KEY}=-10:10:3", "negative"),
        ("reagents.hydrated lime.prise=1:2:3", "price"),
        ("reagents.hydrated limb.price=1:2:3", "hydrated lime"),
        ("feed.pH=2 mg/L:3:2", "bare number"),
        ("feed.pH=2:30:2", "outside"),
        ("effluent.pH=6:7:2", "no single quantity"),
        ("title=1:2:2", "no single quantity"),
        ("feed.assay=1:2:2", "no single quantity"),
    ],
)
def test_bad_ranges(
    flowsheet: Flowsheet, tmp_path: Path, optimiser: Optimiser, text: str, named: str
) -> None:
    with pytest.raises(InputError) as caught:
        run(flowsheet, text, tmp_path / "r.csv")
    assert named in str(caught.value)
    assert optimiser.calls == []
    assert list(tmp_path.iterdir()) == []


def test_rows(flowsheet: Flowsheet, tmp_path: Path, optimiser: Optimiser) -> None:
    lines: list[str] = []
    found = run(flowsheet, f"{KEY}=190:490:4", tmp_path / "r.csv", progress=lines.append)
    rows = table(tmp_path / "r.csv")
    assert rows == found.rows
    assert found.complete
    assert found.any_feasible
    assert optimiser.calls == [190.0, 190.0, 290.0, 390.0, 490.0]
    assert [row["value"] for row in rows] == ["190.0", "290.0", "390.0", "490.0"]
    assert {row["unit"] for row in rows} == {"USD/t"}
    assert [row["structure_changed"] for row in rows] == ["no", "no", "yes", "no"]
    assert rows[0]["train"] == "peroxide + hydrated lime pH 9.00 -> waste"
    assert rows[2]["train"] == "peroxide + caustic pH 9.00 -> waste"
    assert {row["feasible"] for row in rows} == {"yes"}
    assert float(rows[3]["stage1_pH"]) == pytest.approx(9.0, abs=1e-5)
    assert len(lines) == 5
    # the first value is the flowsheet's own: its best design is the one that stays
    costs = [float(row["cost_USD_per_h"]) for row in rows]
    same = [float(row["same_design_cost_USD_per_h"]) for row in rows]
    assert same[0] == pytest.approx(costs[0], rel=1e-12)
    dose_t_per_h = float(rows[0]["stage1_dose_kg_per_m3"]) * 10.0 / 1000.0
    assert same[3] - same[0] == pytest.approx(300.0 * dose_t_per_h, rel=1e-6)
    assert costs[2] == pytest.approx(costs[3], rel=1e-12)


def test_infeasible_and_failed_points_are_rows(
    flowsheet: Flowsheet, tmp_path: Path, optimiser: Optimiser
) -> None:
    optimiser.fail_at = 290.0
    rows = run(flowsheet, f"{KEY}=190:390:3", tmp_path / "r.csv").rows
    assert [row["feasible"] for row in rows] == ["yes", "no", "yes"]
    assert rows[1]["note"] == "vessel 1 was not solved"
    assert rows[1]["cost_USD_per_h"] == ""
    assert rows[1]["same_design_feasible"] == "yes"
    zinc = run(flowsheet, "effluent.dissolved.Zn=0.001:1 mg/L:2", tmp_path / "z.csv")
    assert [row["feasible"] for row in zinc.rows] == ["no", "yes"]
    assert "Zn, dissolved" in zinc.rows[0]["note"]
    assert zinc.rows[0]["same_design_feasible"] == "no"


def test_without_a_base_design_the_columns_stay_empty(
    flowsheet: Flowsheet, tmp_path: Path, optimiser: Optimiser
) -> None:
    optimiser.fail_at = 190.0
    found = run(flowsheet, f"{KEY}=290:390:2", tmp_path / "r.csv")
    assert found.base is None
    assert {row["same_design_cost_USD_per_h"] for row in found.rows} == {""}


def test_resuming_repeats_nothing_and_changes_nothing(
    flowsheet: Flowsheet, tmp_path: Path, optimiser: Optimiser
) -> None:
    vary = f"{KEY}=190:490:4"
    run(flowsheet, vary, tmp_path / "whole.csv")
    optimiser.calls.clear()
    optimiser.interrupt_after = 3
    with pytest.raises(KeyboardInterrupt):
        run(flowsheet, vary, tmp_path / "r.csv")
    assert [row["value"] for row in table(tmp_path / "r.csv")] == ["190.0", "290.0"]
    optimiser.calls.clear()
    optimiser.interrupt_after = 10**9
    found = run(flowsheet, vary, tmp_path / "r.csv")
    assert found.reused == 2
    assert optimiser.calls == [390.0, 490.0]
    whole = (tmp_path / "whole.csv").read_bytes()
    assert (tmp_path / "r.csv").read_bytes() == whole
    optimiser.calls.clear()
    assert run(flowsheet, vary, tmp_path / "r.csv").reused == 4
    assert optimiser.calls == []
    assert (tmp_path / "r.csv").read_bytes() == whole


def test_a_damaged_last_line_is_done_again(
    flowsheet: Flowsheet, tmp_path: Path, optimiser: Optimiser
) -> None:
    path = tmp_path / "r.csv"
    run(flowsheet, f"{KEY}=190:390:3", path)
    whole = path.read_bytes()
    path.write_bytes(whole[: whole.rindex(b"caustic")])
    optimiser.calls.clear()
    assert run(flowsheet, f"{KEY}=190:390:3", path).reused == 2
    assert optimiser.calls == [390.0]
    assert path.read_bytes() == whole


@pytest.mark.parametrize("what", ["range", "flowsheet", "limit", "foreign", "binary", "folder"])
def test_other_files_are_never_overwritten(
    flowsheet: Flowsheet, tmp_path: Path, optimiser: Optimiser, what: str
) -> None:
    path = tmp_path / "r.csv"
    if what == "folder":
        path.mkdir()
    elif what == "foreign":
        path.write_text("a,b\n1,2\n", encoding="utf-8")
    elif what == "binary":
        path.write_bytes(b"\xff\xfe\x00")
    else:
        other = from_document(tomllib.loads(TEXT.replace("120 mg/L", "121 mg/L")), "rinse.toml")
        run(
            other if what == "flowsheet" else flowsheet,
            f"{KEY}=190:{'310' if what == 'range' else '390'}:2",
            path,
        )
    before = None if what == "folder" else path.read_bytes()
    optimiser.calls.clear()
    limit = 6.0 if what == "limit" else 5.0
    with pytest.raises(InputError, match=r"r\.csv"):
        sweep(flowsheet, f"{KEY}=190:390:2", path, time_limit_s=limit, workers=1)
    assert optimiser.calls == []
    assert before is None or path.read_bytes() == before


def test_structure_leaves_the_pH_out() -> None:
    first = "air + limestone pH 5.90 -> waste | caustic pH 8.93 -> zinc cake"
    assert structure_of(first) == "air + limestone -> waste | caustic -> zinc cake"
    assert structure_of("soda pH 10 grade pH -0.50 -> waste") == "soda pH 10 grade -> waste"


def test_workers_give_the_rows_of_one_process(flowsheet: Flowsheet, tmp_path: Path) -> None:
    small = tomllib.loads(TEXT.replace("max_stages = 2", "max_stages = 1"))
    del small["train"], small["oxidants"], small["reagents"]["caustic"]
    plain = from_document(small, "rinse.toml")
    vary = f"{KEY}=190:250:2"
    one = sweep(plain, vary, tmp_path / "1.csv", time_limit_s=20.0, workers=1)
    two = sweep(plain, vary, tmp_path / "2.csv", time_limit_s=20.0, workers=2)
    assert one.any_feasible
    assert len(two.rows) == 2
    for left, right in zip(one.rows, two.rows, strict=True):
        assert left["train"] == right["train"]
        assert float(left["cost_USD_per_h"]) == pytest.approx(
            float(right["cost_USD_per_h"]), rel=1e-6
        )


def _gone(group: int) -> bool:
    """Whether nothing of a process group is left, once the system has reaped it."""
    for _ in range(150):
        try:
            os.killpg(group, 0)
        except ProcessLookupError:
            return True
        time.sleep(0.1)
    return False


@pytest.mark.skipif(os.name != "posix", reason="signals of POSIX systems")
def test_ctrl_c_keeps_what_is_done_and_leaves_no_process(tmp_path: Path) -> None:
    source, results = tmp_path / "rinse.toml", tmp_path / "r.csv"
    source.write_text(TEXT, encoding="utf-8")
    command = [
        sys.executable, "-m", "dosewright", "sweep", str(source), "--vary", f"{KEY}=150:250:40",
        "-o", str(results), "--time-limit", "3",
    ]  # fmt: skip
    process = subprocess.Popen(
        command, stdout=subprocess.PIPE, stderr=subprocess.PIPE, text=True, start_new_session=True
    )
    try:
        deadline = time.monotonic() + 120.0
        while time.monotonic() < deadline and not (results.exists() and table(results)):
            assert process.poll() is None, process.communicate()
            time.sleep(0.1)
        process.send_signal(signal.SIGINT)
        _, errors = process.communicate(timeout=20.0)
    finally:
        process.kill()
    assert process.returncode == 130
    assert "Traceback" not in errors
    assert "run again to go on" in errors
    assert 1 <= len(table(results)) < 40
    assert sorted(p.name for p in tmp_path.iterdir()) == ["r.csv", "rinse.toml"]
    assert _gone(process.pid)
