"""The command line: read arguments, call the library, print, choose an exit code.

Exit codes: 0 yes; 1 it ran but the answer is no; 2 bad input; 130 stopped with Ctrl-C; 141 whoever
was reading the output has left. Nothing heavy is imported before a command needs it.
"""

from __future__ import annotations

import os
import re
import sys
import warnings
from collections.abc import Callable, Iterator, Sequence
from contextlib import contextmanager
from typing import TYPE_CHECKING, Any

import click

from dosewright import __version__
from dosewright.errors import DosewrightError, Fault, InputError

if TYPE_CHECKING:
    from dosewright.flowsheet import Flowsheet
    from dosewright.trial import Trial

YES, NO, INTERRUPTED, PIPE_CLOSED = 0, 1, 130, 141

_OUTPUT_HELP = "Write the design file here."
_JSON_HELP = "Print JSON in place of text."


@click.group(context_settings={"help_option_names": ["-h", "--help"]})
@click.version_option(__version__, prog_name="dosewright")
def cli() -> None:
    """Design staged-precipitation trains for metal-bearing liquors at least cost.

    Exit codes: 0 yes, 1 the answer is no, 2 bad input.
    """


@cli.command()
@click.argument("flowsheet")
@click.option("-o", "--output", metavar="DESIGN.json", help=_OUTPUT_HELP)
@click.option("--json", "as_json", is_flag=True, help=_JSON_HELP)
@click.option(
    "--time-limit",
    type=click.FloatRange(min=1.0, max=86400.0),
    default=35.0,
    show_default=True,
    metavar="SECONDS",
    help="Stop searching after this long.",
)
def optimise(flowsheet: str, output: str | None, as_json: bool, time_limit: float) -> int:
    """Find the cheapest train that meets every limit of FLOWSHEET."""
    from dosewright.flowsheet import load

    _check_output(output, flowsheet)
    problem = load(flowsheet)
    from dosewright.search import optimise as search

    with _progress() as say:
        design = search(problem, time_limit_s=time_limit, progress=say)
    _deliver(design, output, as_json)
    return YES if design.feasible else NO


@cli.command()
@click.argument("flowsheet")
@click.option("-o", "--output", metavar="DESIGN.json", help=_OUTPUT_HELP)
@click.option("--json", "as_json", is_flag=True, help=_JSON_HELP)
@click.option(
    "--stage",
    "stages",
    multiple=True,
    metavar="STAGE",
    help=(
        'One stage, in order, in place of the train in the file: "hydrated lime=1.2 kg/m3 + air '
        '-> waste". A reagent takes a dose or "pH 6.0"; an oxidant stands by its name.'
    ),
)
def evaluate(flowsheet: str, output: str | None, as_json: bool, stages: tuple[str, ...]) -> int:
    """Solve and judge one given train of FLOWSHEET."""
    from dosewright.flowsheet import load

    _check_output(output, flowsheet)
    problem = load(flowsheet)
    if stages:
        problem = _with_train(problem, stages)
    if problem.decisions is None:
        remedy = "add [[train]] tables to it, or name the stages with --stage"
        raise InputError(flowsheet, [Fault("train", "is missing", remedy)])
    from dosewright.trial import evaluate as solve

    trial = solve(problem, problem.decisions)
    _deliver(trial, output, as_json)
    return YES if trial.feasible else NO


@cli.command(short_help="Check a saved DESIGN.json from the file alone.")
@click.argument("design")
@click.option("--json", "as_json", is_flag=True, help=_JSON_HELP)
def verify(design: str, as_json: bool) -> int:
    """Check a saved DESIGN.json from the file alone.

    The train is solved again and every number in the file compared. Exit code 0 means that nothing
    differs and that every limit is met.
    """
    from dosewright.verification import verify as check

    verdict = check(design)
    if as_json:
        from dataclasses import asdict

        from dosewright.design import to_json

        _print(
            to_json(
                {
                    "path": verdict.path,
                    "ok": verdict.ok,
                    "differences": [asdict(row) for row in verdict.differences],
                    "limits_missed": [asdict(row) for row in verdict.limits_missed],
                    "notes": verdict.notes,
                }
            )
        )
    else:
        from dosewright.report import verdict_text

        _print(verdict_text(verdict))
    return YES if verdict.ok else NO


@cli.command(short_help="Find the cheapest train at each of several values of a key.")
@click.argument("flowsheet")
@click.option(
    "--vary",
    required=True,
    metavar="KEY=LOW:HIGH:COUNT",
    help='For example "reagents.hydrated lime.price=150:250 USD/t:5".',
)
@click.option(
    "-o",
    "--output",
    required=True,
    metavar="RESULTS.csv",
    help="Table of results; kept rows count.",
)
@click.option(
    "--time-limit",
    type=click.FloatRange(min=1.0, max=86400.0),
    default=35.0,
    show_default=True,
    metavar="SECONDS",
    help="Stop searching after this long at each value.",
)
def sweep(flowsheet: str, vary: str, output: str, time_limit: float) -> int:
    """Find the cheapest train of FLOWSHEET at each of several values of one key.

    Run again with the same arguments, an interrupted sweep goes on where it stopped.
    """
    from dosewright.flowsheet import load

    problem = load(flowsheet)
    from dosewright.study import sweep as run

    try:
        with _progress() as say:
            study = run(problem, vary, output, time_limit_s=time_limit, progress=say)
    except KeyboardInterrupt:
        click.echo(f"stopped; what is done is in {output}, run again to go on", err=True)
        return INTERRUPTED
    lines = [f"{study.vary.key}, {len(study.rows)} values ({study.reused} found in {output})"]
    for row in study.rows:
        value = f"{row['value']} {row['unit']}".strip()
        cost = f"{float(row['cost_USD_per_h']):10.4g} USD/h" if row["cost_USD_per_h"] else " " * 16
        mark = "*" if row["structure_changed"] == "yes" else " "
        verdict = row["train"] if row["feasible"] == "yes" else "no feasible train"
        lines.append(f"{mark} {value:>16} {cost}  {verdict}")
    lines.append("* another train than at the value before")
    _print("\n".join(lines) + "\n")
    return YES if study.any_feasible else NO


@cli.command()
@click.argument("file")
@click.option("--json", "as_json", is_flag=True, help=_JSON_HELP)
def beaker(file: str, as_json: bool) -> int:
    """Pour solutions together as FILE says and show what forms."""
    from dosewright.beaker import load_beaker, pour

    result = pour(load_beaker(file))
    if as_json:
        from dataclasses import asdict

        from dosewright.design import to_json

        _print(to_json(asdict(result)))
    else:
        from dosewright.report import beaker_text

        _print(beaker_text(result))
    return YES


# ---------------------------------------------------------------------------------------------


def _check_output(output: str | None, flowsheet: str) -> None:
    """Refuse an output path before any work is done for it; the input is never overwritten."""
    from pathlib import Path

    from dosewright.design import check_writable

    if output is None:
        return
    check_writable(output)
    if Path(output).resolve() == Path(flowsheet).resolve():
        raise InputError(output, [Fault("", "is the flowsheet itself", "name another file")])


def _deliver(trial: Trial, output: str | None, as_json: bool) -> None:
    """Write the file first, then print: a closed pipe costs no result."""
    from dosewright.design import Design, record_of, save, to_json

    if output is not None:
        save(trial, output)
    if as_json:
        _print(to_json(record_of(trial)))
        return
    from dosewright.report import design_text, trial_text

    _print(design_text(trial) if isinstance(trial, Design) else trial_text(trial))


class _PipeClosedError(Exception):
    """Whoever was reading the output has left."""


def _print(text: str) -> None:
    try:
        click.echo(text, nl=not text.endswith("\n"))
        sys.stdout.flush()
    except BrokenPipeError as error:  # click would make this an exit code of 1, which is "no" here
        raise _PipeClosedError from error


def parse_stage(text: str, oxidants: Sequence[str] = ()) -> dict[str, Any]:
    """Read ``"hydrated lime=1.2 kg/m3 + air -> waste"`` as a table of a file's ``[[train]]``.

    Raises
    ------
    InputError
        For text of another shape; names and quantities are checked with the flowsheet.
    """
    what, arrow, place = text.rpartition("->")
    if not arrow or not place.strip():
        raise _bad_stage(text, 'does not say where its cake goes: end it with "-> waste"')
    stage: dict[str, Any] = {"reagents": {}, "cake": place.strip()}
    # the plus of 1e+3 joins nothing
    for part in re.split(r"(?<!\d[eE])\+", what):
        name, equals, amount = (piece.strip() for piece in part.partition("="))
        if not name or (equals and not amount):
            raise _bad_stage(text, f"has an empty part '{part.strip()}'")
        if equals:
            if name in stage["reagents"]:
                raise _bad_stage(text, f"doses {name} twice")
            stage["reagents"][name] = amount
        elif "oxidant" in stage:
            raise _bad_stage(text, f"has two oxidants, {stage['oxidant']} and {name}")
        elif oxidants and name not in oxidants:
            raise _bad_stage(
                text,
                f"gives {name} no dose, and it is none of the oxidants ({', '.join(oxidants)})",
            )
        else:
            stage["oxidant"] = name
    return stage


def _bad_stage(text: str, what: str) -> InputError:
    remedy = 'write for example "hydrated lime=1.2 kg/m3 + air -> waste" or "caustic=pH 9 -> waste"'
    return InputError("--stage", [Fault(f'"{text}"', what, remedy)])


def _with_train(problem: Flowsheet, stages: Sequence[str]) -> Flowsheet:
    """Put stages typed by the user in place of the file's train."""
    from dosewright.flowsheet import from_document

    train = [parse_stage(text, list(problem.oxidants)) for text in stages]
    try:
        return from_document({**problem.document, "train": train}, problem.source_name)
    except InputError as error:
        # the file itself was read before: what is wrong now is in what was typed
        faults = []
        for fault in error.faults:
            found = re.match(r"train\[(\d+)\]\.?(.*)", fault.where)
            typed = f'"{stages[int(found.group(1)) - 1]}"' if found else ""
            where = f"{typed}: {found.group(2)}".rstrip(": ") if found else fault.where
            faults.append(Fault(where, fault.what, fault.remedy))
        raise InputError("--stage", faults) from error


@contextmanager
def _progress() -> Iterator[Callable[[str], None]]:
    """Show lines of progress on stderr: one moving line on a terminal, plain lines elsewhere."""
    if not sys.stderr.isatty():
        yield lambda text: click.echo(text, err=True)
        return
    from rich.console import Console
    from rich.markup import escape

    with Console(stderr=True).status("starting") as status:
        yield lambda text: status.update(escape(text))


def _show_warning(message: Warning | str, *_args: Any, **_kwargs: Any) -> None:
    click.echo(f"warning: {message}", err=True)


def main(args: Sequence[str] | None = None) -> int:
    """Run the command line and return its exit code."""
    with warnings.catch_warnings():
        warnings.filterwarnings("default", category=UserWarning)
        warnings.showwarning = _show_warning
        try:
            code = cli.main(args, prog_name="dosewright", standalone_mode=False)
        except click.ClickException as error:
            error.show()
            return error.exit_code if isinstance(error, click.UsageError) else InputError.exit_code
        except (click.Abort, KeyboardInterrupt):
            click.echo("stopped", err=True)
            return INTERRUPTED
        except DosewrightError as error:
            for line in str(error).splitlines():
                click.echo(f"error: {line}", err=True)
            return error.exit_code
        except _PipeClosedError:
            # what is still buffered goes nowhere; Python would complain on exit
            os.dup2(os.open(os.devnull, os.O_WRONLY), sys.stdout.fileno())
            return PIPE_CLOSED
    return int(code or 0)
