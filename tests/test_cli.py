"""The command line and the public names: exit codes, messages, imports, pipes."""

from __future__ import annotations

import importlib
import json
import os
import shutil
import subprocess
import sys
import time
import tomllib
from pathlib import Path
from typing import Any

import pytest

import dosewright
from dosewright.cli import main, parse_stage
from dosewright.errors import InputError
from rinse_water import TEXT

ROOT = Path(__file__).parents[1]
LIME = "caustic=pH 4.2 + peroxide -> waste", "hydrated lime=pH 9.0 -> copper cake"

PUBLIC = [
    "equilibrate", "equilibrate_batch", "catalogue", "load", "optimise", "evaluate", "verify",
    "Flowsheet", "Trial", "Design", "Verdict", "Equilibrium", "DosewrightError", "InputError",
    "NotConverged", "NoDesign", "__version__",
]  # fmt: skip

#: what ``--help`` may cost: click and this package's own light modules
HEAVY = {"numpy", "scipy", "numba", "pyomo", "highspy", "networkx", "pint", "rich"}


def python(*args: str, **more: Any) -> subprocess.CompletedProcess[str]:
    more = {"capture_output": True, "text": True, "timeout": 120, **more}
    return subprocess.run([sys.executable, *args], check=False, **more)


@pytest.fixture
def rinse(tmp_path: Path) -> Path:
    path = tmp_path / "rinse.toml"
    path.write_text(TEXT, encoding="utf-8")
    return path


@pytest.fixture
def saved(rinse: Path, tmp_path: Path, capsys: pytest.CaptureFixture[str]) -> Path:
    path = tmp_path / "design.json"
    assert main(["evaluate", str(rinse), "-o", str(path)]) == 0
    capsys.readouterr()
    return path


# ---------------------------------------------------------------------------------------------
# public names


def test_public_names_are_exactly_these() -> None:
    assert sorted(dosewright.__all__) == sorted(PUBLIC)
    assert dir(dosewright) == sorted(PUBLIC)
    with pytest.raises(AttributeError, match="optimize"):
        dosewright.optimize  # noqa: B018


@pytest.mark.parametrize("name", PUBLIC)
def test_public_names_load_and_are_documented(name: str) -> None:
    value = getattr(dosewright, name)
    assert f"``{name}``" in (dosewright.__doc__ or "")
    if name == "__version__":
        project = tomllib.loads((ROOT / "pyproject.toml").read_text(encoding="utf-8"))
        assert value == project["project"]["version"]
    else:
        assert value.__doc__
        assert callable(value)


def test_no_module_hides_a_public_name() -> None:
    code = (
        "import dosewright, importlib, pkgutil\n"
        "for m in pkgutil.iter_modules(dosewright.__path__):\n"
        "    if m.name != '__main__': importlib.import_module('dosewright.' + m.name)\n"
        "for name in dosewright.__all__:\n"
        "    assert type(getattr(dosewright, name)).__name__ != 'module', name\n"
    )
    done = python("-c", code)
    assert done.returncode == 0, done.stderr


def test_help_is_light() -> None:
    code = (
        "import sys; before = {m.partition('.')[0] for m in sys.modules}\n"
        "import dosewright.cli\n"
        "after = {m.partition('.')[0] for m in sys.modules}\n"
        "print(*sorted(after - before - set(sys.stdlib_module_names)))\n"
        "print(*sorted(m for m in sys.modules if m.startswith('dosewright')))\n"
    )
    done = python("-c", code)
    assert done.returncode == 0, done.stderr
    outside, own = done.stdout.splitlines()
    assert set(outside.split()) <= {"click", "dosewright", "colorama"}
    assert not set(outside.split()) & HEAVY
    assert own.split() == ["dosewright", "dosewright.cli", "dosewright.errors"]


def test_help_is_fast() -> None:
    took = []
    for _ in range(3):
        began = time.perf_counter()
        done = python("-m", "dosewright", "--help")
        took.append(time.perf_counter() - began)
        assert done.returncode == 0
    assert min(took) < 0.5


def test_main_module_can_be_imported_by_workers() -> None:
    assert importlib.import_module("dosewright.__main__").main is main


# ---------------------------------------------------------------------------------------------
# commands


def test_commands_are_exactly_these(capsys: pytest.CaptureFixture[str]) -> None:
    from dosewright.cli import cli

    assert sorted(cli.commands) == ["beaker", "evaluate", "optimise", "sweep", "verify"]
    assert main(["--help"]) == 0
    assert "evaluate" in capsys.readouterr().out
    assert main(["--version"]) == 0
    assert dosewright.__version__ in capsys.readouterr().out


def test_evaluate_prints_and_saves(
    rinse: Path, tmp_path: Path, capsys: pytest.CaptureFixture[str]
) -> None:
    path = tmp_path / "design.json"
    assert main(["evaluate", str(rinse), "-o", str(path)]) == 0
    text = capsys.readouterr()
    assert "Rinse water" in text.out
    assert "copper cake" in text.out
    assert text.err == ""
    assert main(["evaluate", str(rinse), "--json"]) == 0
    out = capsys.readouterr().out
    assert json.loads(out) == json.loads(path.read_text(encoding="utf-8"))


def test_evaluate_stages_override_the_file(rinse: Path, capsys: pytest.CaptureFixture[str]) -> None:
    assert main(["evaluate", str(rinse), "--json"]) == 0
    in_file = json.loads(capsys.readouterr().out)
    typed = [word for stage in LIME for word in ("--stage", stage)]
    assert main(["evaluate", str(rinse), "--json", *typed]) == 0
    by_hand = json.loads(capsys.readouterr().out)
    assert by_hand["cost_per_hour"] == in_file["cost_per_hour"]
    assert by_hand["decisions"] == in_file["decisions"]
    # one tank of little caustic: it runs, and the answer is no
    assert main(["evaluate", str(rinse), "--json", "--stage", "caustic=0.1 kg/m3 -> waste"]) == 1
    weak = json.loads(capsys.readouterr().out)
    assert weak["feasible"] is False
    dose = weak["decisions"]["stages"][0]["reagents"]["caustic"]["dose_kg_per_m3"]
    assert dose == pytest.approx(0.1, rel=1e-12)
    assert main(["evaluate", str(rinse), "--json", "--stage", "caustic=1 kg/h -> waste"]) == 1
    hourly = json.loads(capsys.readouterr().out)
    assert hourly["costs"] == weak["costs"]


@pytest.mark.parametrize(
    ("text", "stage"),
    [
        ("lime=pH 6 -> waste", {"reagents": {"lime": "pH 6"}, "cake": "waste"}),
        (
            "hydrated lime=1.2 kg/m3 + air -> zinc cake",
            {"reagents": {"hydrated lime": "1.2 kg/m3"}, "oxidant": "air", "cake": "zinc cake"},
        ),
        ("air->waste", {"reagents": {}, "oxidant": "air", "cake": "waste"}),
        (
            "a=1e+0 kg/m3+b=2 kg/h+air->w",
            {"reagents": {"a": "1e+0 kg/m3", "b": "2 kg/h"}, "oxidant": "air", "cake": "w"},
        ),
    ],
)
def test_stage_text(text: str, stage: dict[str, Any]) -> None:
    assert parse_stage(text) == stage
    assert parse_stage(text, ["air"]) == stage


@pytest.mark.parametrize(
    "text",
    ["", "->", "lime=1 kg/m3", "lime=1 kg/m3 ->", "-> waste", "lime= -> waste", "=1 -> waste",
     "lime=1 kg/m3 + -> waste", "air + air -> waste", "lime=1 kg/m3 + lime=2 kg/m3 -> waste",
     "lime -> waste"],
)  # fmt: skip
def test_bad_stage_text(text: str) -> None:
    with pytest.raises(InputError, match="--stage"):
        parse_stage(text, ["air"])


@pytest.mark.parametrize(
    ("stage", "named"),
    [
        ("caustik=1 kg/m3 -> waste", "caustic"),
        ("caustic=1 mg -> waste", "caustic"),
        ("caustic=1 -> waste", "caustic"),
        ("caustic=pH 99 -> waste", "caustic"),
        ("caustic=-1 kg/m3 -> waste", "negative"),
        ("caustic=1 kg/m3 -> wate", "waste"),
        ("caustic=1 kg/m3 + ozone -> waste", "peroxide"),
        ("caustic=pH 5 + hydrated lime=pH 6 -> waste", "pH twice"),
        ("hydrated lime=pH 13.8 -> waste", "reach"),
        ("caustic 1 kg/m3 -> waste", "peroxide"),
    ],
)
def test_bad_stages_are_input_errors(
    rinse: Path, capsys: pytest.CaptureFixture[str], stage: str, named: str
) -> None:
    assert main(["evaluate", str(rinse), "--stage", stage]) == 2
    text = capsys.readouterr()
    assert named in text.err
    assert text.out == ""


def test_file_without_a_train(rinse: Path, capsys: pytest.CaptureFixture[str]) -> None:
    rinse.write_text(TEXT.partition("[[train]]")[0], encoding="utf-8")
    assert main(["evaluate", str(rinse)]) == 2
    assert "--stage" in capsys.readouterr().err


def test_verify_tells_yes_from_no(saved: Path, capsys: pytest.CaptureFixture[str]) -> None:
    assert main(["verify", str(saved)]) == 0
    assert capsys.readouterr().out
    record = json.loads(saved.read_text(encoding="utf-8"))
    record["costs"][0]["USD_per_h"] *= 1.01
    saved.write_text(json.dumps(record), encoding="utf-8")
    assert main(["verify", str(saved), "--json"]) == 1
    verdict = json.loads(capsys.readouterr().out)
    assert verdict["ok"] is False
    assert [d["where"] for d in verdict["differences"]] == ["seal", "costs[0].USD_per_h"]
    assert main(["verify", str(saved)]) == 1
    text = capsys.readouterr().out
    assert "costs[0].USD_per_h" in text
    saved.write_text(saved.read_text(encoding="utf-8")[:500], encoding="utf-8")
    assert main(["verify", str(saved)]) == 2
    assert "design.json" in capsys.readouterr().err


def test_optimise_saves_a_design_that_verifies(
    rinse: Path, tmp_path: Path, capsys: pytest.CaptureFixture[str]
) -> None:
    path = tmp_path / "best.json"
    assert main(["optimise", str(rinse), "-o", str(path), "--time-limit", "12"]) == 0
    text = capsys.readouterr()
    assert "Rinse water" in text.out
    assert text.err  # progress, as plain lines
    assert main(["verify", str(path), "--json"]) == 0
    assert json.loads(capsys.readouterr().out)["differences"] == []
    record = json.loads(path.read_text(encoding="utf-8"))
    assert main(["evaluate", str(rinse), "--json"]) == 0
    given = json.loads(capsys.readouterr().out)
    assert record["cost_per_hour"] <= given["cost_per_hour"] + 1e-9


def test_impossible_limit_is_a_no(rinse: Path, capsys: pytest.CaptureFixture[str]) -> None:
    rinse.write_text(TEXT.replace('Zn = "10 mg/L"', 'Zn = "0.000001 mg/L"'), encoding="utf-8")
    assert main(["optimise", str(rinse), "--time-limit", "2"]) == 1
    assert "Zn" in capsys.readouterr().out


def test_sweep_command(rinse: Path, tmp_path: Path, capsys: pytest.CaptureFixture[str]) -> None:
    text = TEXT.replace("max_stages = 2", "max_stages = 1").partition("[[train]]")[0]
    rinse.write_text(text, encoding="utf-8")
    path = tmp_path / "r.csv"
    arguments = [
        "sweep", str(rinse), "--vary", "reagents.caustic.price=300:320:2", "-o", str(path),
        "--time-limit", "2",
    ]  # fmt: skip
    assert main(arguments) == 0
    first = capsys.readouterr()
    assert "USD/h" in first.out
    whole = path.read_bytes()
    assert main(arguments) == 0
    assert "2 of 2 values found" in capsys.readouterr().err
    assert path.read_bytes() == whole
    assert main([*arguments[:3], "reagents.caustic.price=300:330:2", *arguments[4:]]) == 2
    assert "r.csv" in capsys.readouterr().err


def test_beaker_command(capsys: pytest.CaptureFixture[str]) -> None:
    example = ROOT / "flowsheets" / "beaker_copper_zinc.toml"
    assert main(["beaker", str(example)]) == 0
    assert "pH" in capsys.readouterr().out
    assert main(["beaker", str(example), "--json"]) == 0
    assert json.loads(capsys.readouterr().out)


# ---------------------------------------------------------------------------------------------
# mistakes


@pytest.mark.parametrize("command", ["optimise", "evaluate", "verify", "sweep", "beaker"])
@pytest.mark.parametrize("kind", ["missing", "folder", "empty", "binary", "toml", "denied"])
def test_bad_input_files(
    command: str, kind: str, tmp_path: Path, capsys: pytest.CaptureFixture[str]
) -> None:
    path = tmp_path / "input.x"
    if kind == "folder":
        path.mkdir()
    elif kind == "denied":
        path.symlink_to(path)  # cannot be opened by anyone
    elif kind != "missing":
        path.write_bytes({"empty": b"", "binary": b"\xff\xfe\x00", "toml": b"[feed"}[kind])
    more = ["--vary", "feed.pH=2:3:2", "-o", str(tmp_path / "r.csv")] if command == "sweep" else []
    assert main([command, str(path), *more]) == 2
    text = capsys.readouterr()
    assert text.out == ""
    assert text.err.startswith("error: ")
    assert "input.x" in text.err
    assert "Traceback" not in text.err


@pytest.mark.parametrize("command", ["optimise", "evaluate", "sweep"])
@pytest.mark.parametrize("place", ["no such folder/d.json", ".", "", "rinse.toml"])
def test_bad_output_paths(
    rinse: Path,
    command: str,
    place: str,
    capsys: pytest.CaptureFixture[str],
    monkeypatch: pytest.MonkeyPatch,
) -> None:
    monkeypatch.chdir(rinse.parent)
    more = ["--vary", "feed.pH=2.5:3:2"] if command == "sweep" else []
    began = time.monotonic()
    assert main([command, "rinse.toml", *more, "-o", place]) == 2
    assert time.monotonic() - began < 3.0  # before any search
    assert place in capsys.readouterr().err
    assert rinse.read_text(encoding="utf-8") == TEXT
    assert [p.name for p in rinse.parent.iterdir()] == ["rinse.toml"]


@pytest.mark.parametrize(
    "arguments",
    [
        ["optimize"], ["optimise"], ["evaluate"], ["verify"], ["sweep"], ["beaker"],
        ["optimise", "a.toml", "b.toml"], ["optimise", "a.toml", "--time-limit", "soon"],
        ["optimise", "a.toml", "--time-limit", "-1"], ["optimise", "a.toml", "--time-limit", "nan"],
        ["sweep", "a.toml", "--vary", "feed.pH=2:3:2"], ["sweep", "a.toml", "-o", "r.csv"],
        ["verify", "a.json", "-o", "b.json"], ["--bogus"],
    ],
)  # fmt: skip
def test_usage_errors(arguments: list[str], capsys: pytest.CaptureFixture[str]) -> None:
    assert main(arguments) == 2
    text = capsys.readouterr()
    assert text.out == ""
    assert text.err


def test_every_fault_has_its_own_line(rinse: Path, capsys: pytest.CaptureFixture[str]) -> None:
    text = TEXT.replace("pH = 2.6", "pH = 17.0").replace('"190 USD/t"', '"190"')
    rinse.write_text(text, encoding="utf-8")
    assert main(["evaluate", str(rinse)]) == 2
    lines = capsys.readouterr().err.splitlines()
    assert len(lines) == 2
    assert all(line.startswith("error: ") and "rinse.toml" in line for line in lines)
    assert {"feed.pH" in line for line in lines} == {True, False}
    assert any("reagents.hydrated lime.price" in line for line in lines)


@pytest.mark.skipif(os.name != "posix" or not shutil.which("sh"), reason="needs a POSIX shell")
def test_closed_pipe_is_quiet(rinse: Path) -> None:
    command = (
        f'"{sys.executable}" -m dosewright evaluate "{rinse}" --json 2>err.txt; echo $? >code.txt'
    )
    done = subprocess.run(
        ["sh", "-c", f"( {command} ) | true"], cwd=rinse.parent, check=False, timeout=120,
        capture_output=True,
    )  # fmt: skip
    assert done.stderr == b""
    assert (rinse.parent / "err.txt").read_text(encoding="utf-8") == ""
    assert (rinse.parent / "code.txt").read_text(encoding="utf-8").strip() == "141"


def test_streams_are_kept_apart(rinse: Path) -> None:
    done = python("-m", "dosewright", "evaluate", str(rinse), "--json")
    assert done.returncode == 0
    assert done.stderr == ""
    assert json.loads(done.stdout)["feasible"] is True
