"""The README's examples run as they stand."""

import re
import shlex
import shutil
import subprocess
import sys
from pathlib import Path

import pytest

ROOT = Path(__file__).parent.parent
README = (ROOT / "README.md").read_text(encoding="utf-8")
COMMANDS = [line for line in README.splitlines() if line.startswith("dosewright ")]
CODES = {"evaluate": 1}  # the given train is a first guess that misses a limit


@pytest.fixture(scope="module")
def folder(tmp_path_factory):
    path = tmp_path_factory.mktemp("readme")
    shutil.copytree(ROOT / "flowsheets", path / "flowsheets")
    return path


def test_every_command_has_one_example():
    assert [line.split()[1] for line in COMMANDS] == [
        "optimise", "evaluate", "verify", "sweep", "beaker",
    ]  # fmt: skip


@pytest.mark.parametrize("line", COMMANDS, ids=[line.split()[1] for line in COMMANDS])
def test_example_runs(line, folder):
    words = shlex.split(line)
    if words[1] == "sweep":
        words += ["--time-limit", "6"]
    done = subprocess.run(
        [sys.executable, "-m", *words], cwd=folder, capture_output=True, text=True, check=False
    )
    assert done.returncode == CODES.get(words[1], 0), done.stderr
    assert "Traceback" not in done.stderr
    assert done.stdout.strip()


def test_python_example_runs_in_its_short_form():
    block = re.search(r"```python\n(.*?)```", README, re.DOTALL).group(1)
    shortened = block.replace(
        "dosewright.optimise(flowsheet)", "dosewright.optimise(flowsheet, time_limit_s=10.0)"
    )
    assert shortened != block
    done = subprocess.run(
        [sys.executable, "-c", shortened], cwd=ROOT, capture_output=True, text=True, check=False
    )
    assert done.returncode == 0, done.stderr


def test_set_up_commands_make_their_own_environment():
    lines = [line for line in README.splitlines() if line.startswith("python3 -m venv")]
    assert len(lines) == 2
    assert "dosewright optimise flowsheets/" in lines[0]
    assert lines[1].endswith("pytest")
