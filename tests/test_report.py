"""Readable text: figures, sums, and what must be said."""

import re

import pytest

import dosewright
from dosewright.report import WIDTH, figure, money, trial_text

TRIAL = dosewright.evaluate(
    flowsheet := dosewright.load("flowsheets/corvane_adit.toml"), flowsheet.decisions
)
TEXT = trial_text(TRIAL)


@pytest.mark.parametrize(
    ("value", "text"),
    [
        (0.0, "0"), (1e-9, "<1e-06"), (-1e-9, "-<1e-06"), (0.000123, "1.23e-04"),
        (0.0123, "0.0123"), (0.1234, "0.123"), (1.234, "1.23"), (12.34, "12.3"), (123.4, "123"),
        (12345.0, "12,345"), (1.234e7, "1.23e+07"), (9.999, "10.0"),
    ],
)  # fmt: skip
def test_three_significant_figures_and_never_a_bare_zero(value, text):
    assert figure(value) == text


@pytest.mark.parametrize(
    ("value", "text"),
    [(1.234, "1.23"), (123.44, "123.4"), (1234.4, "1,234"), (0.001, "<0.01"), (0.0, "0.00")],
)
def test_money(value, text):
    assert money(value) == text


@pytest.mark.parametrize(
    "words",
    [
        "Corvane Adit mine water", "Invented scenario", "100 x (cations - anions) / (cations + anions)",
        "closed on SO4-2", "zinc cake", "limestone", "USD/m3 feed", "total", "MISSED",
        "not a safety assessment", "Slow solids left out", "Closure over the whole train",
    ],
)  # fmt: skip
def test_report_says(words):
    assert words in " ".join(TEXT.split())


def test_report_never_promises():
    assert not re.search(r"\b(safe|compliant)\b", TEXT)


def test_report_fits_the_page_and_has_no_escape_codes():
    assert max(len(line) for line in TEXT.splitlines()) <= WIDTH
    assert "\x1b" not in TEXT


def test_printed_cost_lines_add_up():
    section = TEXT.split("\nCosts\n", maxsplit=1)[1].split("Operating cost", maxsplit=1)[0]
    figures = []
    for line in section.splitlines():
        cells = re.split(r"\s{2,}", line.strip())
        if cells[0] in {"reagent", "oxidant", "water", "disposal", "credit", "total"}:
            figures.append((cells[0], float(cells[-3].replace(",", ""))))
    assert figures[-1][0] == "total"
    assert sum(v for _, v in figures[:-1]) == pytest.approx(figures[-1][1], abs=0.05)
