"""Everything that can go wrong for a user, in one tree.

::

    DosewrightError            exit code 1
    ├── InputError             exit code 2   a file, a key or an argument is wrong
    ├── NotConverged           exit code 1   an equilibrium without a passing certificate
    └── NoDesign               exit code 1   no train meets the limits
"""

from __future__ import annotations

import re
from collections.abc import Sequence
from dataclasses import dataclass


class DosewrightError(Exception):
    """Base of every error this package raises on purpose."""

    exit_code = 1


@dataclass(frozen=True)
class Fault:
    """One thing wrong with an input: where (a key), what, and what to do about it."""

    where: str
    what: str
    remedy: str


class InputError(DosewrightError):
    """An input is wrong; every fault found is listed, one line each.

    Control characters quoted from the input are shown escaped, so that a line stays a line.
    """

    exit_code = 2

    def __init__(self, source: str, faults: Sequence[Fault]) -> None:
        self.source = source
        self.faults = tuple(faults)
        super().__init__(
            "\n".join(
                _one_line(
                    f"{source}: {fault.where + ': ' if fault.where else ''}"
                    f"{fault.what}; {fault.remedy}"
                )
                for fault in self.faults
            )
        )


_CONTROL = re.compile(r"[\x00-\x1f\x7f-\x9f\u2028\u2029]")


def _one_line(text: str) -> str:
    return _CONTROL.sub(lambda match: repr(match.group())[1:-1], text)


class NotConverged(DosewrightError):
    """An equilibrium did not reach its certificate; no answer is given rather than a wrong one."""


class NoDesign(DosewrightError):
    """No train that meets every limit was found; ``nearest`` is the closest one tried, if any."""

    def __init__(self, message: str, nearest: object | None = None) -> None:
        self.nearest = nearest
        super().__init__(message)
