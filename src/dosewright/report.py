"""Results as readable text: plain tables, three significant figures, no colour."""

from __future__ import annotations

import io
from collections.abc import Iterable, Sequence
from typing import TYPE_CHECKING

from rich.box import SIMPLE_HEAD
from rich.console import Console
from rich.table import Table

from dosewright.cautions import DISCLAIMER
from dosewright.chemistry.catalogue import catalogue

if TYPE_CHECKING:
    from dosewright.beaker import BeakerResult
    from dosewright.design import Design
    from dosewright.trial import Trial
    from dosewright.verification import Verdict

WIDTH = 112
LEAST = 1e-6  # below which a figure is printed as 'less than'


def figure(value: float, unit: str = "") -> str:
    """Three significant figures; ``<1e-06`` for what is smaller."""
    tail = f" {unit}" if unit else ""
    if value == 0.0:
        return f"0{tail}"
    if abs(value) < LEAST:
        return f"{'-' if value < 0 else ''}<{LEAST:.0e}{tail}"
    if abs(value) >= 1e6 or abs(value) < 1e-3:
        return f"{value:.2e}{tail}"
    digits = max(0, 2 - _magnitude(value))
    return f"{value:,.{digits}f}{tail}"


def _magnitude(value: float) -> int:
    return int(f"{abs(value):.2e}".split("e")[1])


def money(value: float) -> str:
    """Money with two decimals below a hundred, none above a thousand."""
    size = abs(value)
    if 0.0 < size < 0.005:
        return f"{'-' if value < 0 else ''}<0.01"
    return f"{value:,.2f}" if size < 100 else f"{value:,.1f}" if size < 1000 else f"{value:,.0f}"


def tonnage(value_t_per_h: float) -> str:
    """Mass flow in t/h, or in kg/h below a tenth of a tonne."""
    if abs(value_t_per_h) >= 0.1:
        return figure(value_t_per_h, "t/h")
    return figure(1000.0 * value_t_per_h, "kg/h")


class _Page:
    """Collects headed tables and lines of text."""

    def __init__(self) -> None:
        self.stream = io.StringIO()
        self.console = Console(
            file=self.stream, width=WIDTH, no_color=True, force_terminal=False, highlight=False,
            emoji=False, markup=False,
        )  # fmt: skip

    def line(self, text: str = "") -> None:
        self.console.print(text)

    def head(self, text: str) -> None:
        self.line()
        self.line(text)
        self.line("-" * len(text))

    def table(self, columns: Sequence[str], rows: Iterable[Sequence[str]]) -> None:
        """Print a table; a column whose head begins with '>' is right-aligned."""
        table = Table(box=SIMPLE_HEAD, pad_edge=False, show_edge=False, header_style="")
        for name in columns:
            table.add_column(
                name.lstrip(">"), justify="right" if name.startswith(">") else "left",
                overflow="fold",
            )  # fmt: skip
        for row in rows:
            table.add_row(*row)
        self.console.print(table)

    def text(self) -> str:
        lines = [line.rstrip() for line in self.stream.getvalue().splitlines()]
        return "\n".join(lines) + "\n"


def design_text(design: Design) -> str:
    """Report a design: the trial's report and how it was found."""
    page = _Page()
    _trial(page, design)
    record = design.search
    page.head("Search")
    page.line(
        f"{record.trains_polished} trains polished on the exact model, {record.lattice_proposals} of "
        f"them proposed by the lattice program; {record.exact_evaluations:,} trains solved."
    )
    if record.lattice_difference == record.lattice_difference:
        page.line(
            "The linear model, anchored on this design, is off its exact cost by "
            f"{100.0 * record.lattice_difference:+.1f} % of the sum of its cost lines."
        )
    if record.time_ran_out:
        page.line(
            "The time limit ended it: with a longer --time-limit it may find a cheaper train."
        )
    page.line("Least cost is what this search found, not proven.")
    return page.text()


def trial_text(trial: Trial) -> str:
    """Report one train, solved and judged."""
    page = _Page()
    _trial(page, trial)
    return page.text()


def _trial(page: _Page, trial: Trial) -> None:
    flowsheet = trial.flowsheet
    feed = flowsheet.feed
    page.line(flowsheet.title)
    if flowsheet.notice:
        page.line(flowsheet.notice)
    page.line()
    if trial.feasible:
        page.line("Meets every limit entered (nonlinear re-solve).")
    else:
        page.line(f"Misses {len(trial.shortfalls)} of the limits entered:")
        for shortfall in trial.shortfalls:
            page.line(f"  {shortfall}")
    stops = sum(caution.level == "stop" for caution in trial.cautions)
    if stops:
        page.line(f"{stops} caution{'s' if stops > 1 else ''} at level STOP: see Cautions below.")
    for note in trial.notes:
        page.line(f"Note: {note}.")
    _feed(page, trial)
    _train(page, trial)
    _cakes(page, trial)
    _limits(page, trial)
    _costs(page, trial)
    _streams(page, trial)
    _cautions(page, trial)
    _unseen(page, trial)
    worst = max(trial.balance.items(), key=lambda item: abs(item[1]))
    page.line()
    page.line(
        f"Closure over the whole train: worst {abs(worst[1]):.1e} relative ({worst[0]}); "
        f"{feed.temperature_C:g} degC throughout."
    )


def _feed(page: _Page, trial: Trial) -> None:
    feed, closure = trial.flowsheet.feed, trial.closure
    mass = catalogue().components[closure.component].molar_mass_g_per_mol * 1000.0
    page.head("Feed")
    page.line(
        f"{figure(feed.flow_m3_per_h)} m3/h, pH {feed.pH:g}, {feed.temperature_C:g} degC, "
        f"{feed.hours_per_year:g} h/yr"
    )
    page.line(
        f"Charge error before closing {closure.error_percent:+.2f} % [{closure.FORMULA}]; closed on "
        f"{closure.component}: {figure(closure.assay_mol_per_L * mass)} -> "
        f"{figure(closure.used_mol_per_L * mass)} mg/L"
    )
    if abs(closure.error_percent) > 5.0:
        page.line("Above 5 %: check the analysis (common practice, no source).")


def _train(page: _Page, trial: Trial) -> None:
    page.head("Train")
    rows = []
    for stage in trial.stages:
        doses = [
            (name, f"{figure(stage.doses_kg_per_m3[name])} kg/m3", tonnage(kg / 1000.0))
            for name, kg in stage.doses_kg_per_h.items()
        ]
        if stage.oxidant:
            kg = stage.oxidant_kg_per_h
            flow = trial.flowsheet.feed.flow_m3_per_h
            doses.insert(
                0,
                (stage.oxidant, f"{figure(kg / flow)} kg/m3", tonnage(kg / 1000.0))
                if kg > 0.0
                else (stage.oxidant, "on", ""),
            )
        if not doses:
            doses = [("nothing", "", "")]
        for i, (name, per_m3, per_h) in enumerate(doses):
            first = i == 0
            rows.append(
                (
                    str(stage.number) if first else "",
                    name,
                    per_m3,
                    per_h,
                    f"{stage.pH:.2f}" if first else "",
                    figure(stage.ionic_strength_mol_per_kg) if first else "",
                    stage.destination if first else "",
                )
            )
    page.table(
        (
            "stage",
            "reagent, as bought",
            ">per m3 of feed",
            ">per hour",
            ">pH",
            ">I, mol/kg",
            "cake to",
        ),
        rows,
    )


def _cakes(page: _Page, trial: Trial) -> None:
    page.head("Cakes")
    rows = []
    for stage in trial.stages:
        solids = sorted(stage.solids_kg_per_h.items(), key=lambda item: -item[1])
        named = ", ".join(f"{name} {figure(kg)}" for name, kg in solids if kg > 1e-3)
        parts = sorted(stage.cake_percent_dry.items(), key=lambda item: -item[1])
        percent = ", ".join(f"{_ion(name)} {figure(p)}" for name, p in parts if p >= 0.05)
        rows.append(
            (
                str(stage.number),
                stage.destination,
                figure(stage.cake_dry_kg_per_h),
                figure(stage.cake_wet_kg_per_h),
                named or "none",
                percent,
            )
        )
    page.table(
        (
            "stage",
            "to",
            ">dry kg/h",
            ">wet kg/h",
            "precipitates, kg/h",
            "dry %, leftovers included",
        ),
        rows,
    )


def _ion(name: str) -> str:
    return catalogue().components[name].assay_label or name


def _limits(page: _Page, trial: Trial) -> None:
    page.head("Limits")
    rows = []
    for row in trial.limits:
        sign = "<=" if row.sense == "max" else ">="
        tail = f" {row.unit}" if row.unit else ""
        value = f"{row.value:.2f}" if not row.unit else figure(row.value)
        margin = f"{row.margin:.2f}" if not row.unit else figure(row.margin)
        if row.met and abs(row.margin) < 1e-5 * max(abs(row.bound), 1.0):
            margin = "0"
        rows.append(
            (
                row.where,
                row.name,
                value + tail,
                f"{sign} {row.bound:g}{tail}",
                margin + tail,
                "met" if row.met else "MISSED",
            )
        )
    page.table(("where", "limit", ">value", ">bound", ">margin", ""), rows)


def _costs(page: _Page, trial: Trial) -> None:
    flow, hours = trial.flowsheet.feed.flow_m3_per_h, trial.flowsheet.feed.hours_per_year
    page.head("Costs")
    rows = [
        (
            line.group,
            line.item,
            tonnage(line.quantity)
            if line.quantity_unit == "t/h"
            else figure(line.quantity, line.quantity_unit),
            line.price,
            money(line.USD_per_h),
            figure(line.USD_per_h / flow),
            money(line.USD_per_h * hours),
        )
        for line in trial.costs
    ]
    total = trial.cost_per_hour
    rows.append(("total", "", "", "", money(total), figure(total / flow), money(total * hours)))
    page.table(
        ("", "item", ">quantity", ">price", ">USD/h", ">USD/m3 feed", ">USD/yr"),
        rows,
    )
    page.line(
        "Operating cost of what is listed; no labour, power or capital. Credits are negative."
    )


def _streams(page: _Page, trial: Trial) -> None:
    page.head("Streams")
    rows = trial.streams
    page.table(
        ("no.", "stream", ">liquor m3/h", ">pH", ">dry solids kg/h", ">water kg/h"),
        [
            (
                str(r.number), r.name, figure(r.liquor_m3_per_h),
                "" if r.pH is None else f"{r.pH:.2f}", figure(r.dry_solids_kg_per_h),
                figure(r.water_kg_per_h),
            )
            for r in rows
        ],
    )  # fmt: skip
    liquors = [r for r in rows if r.kind == "liquor"]
    names = [
        c for c in catalogue().components
        if c != "H+" and any(abs(r.dissolved_mg_per_L.get(c, 0.0)) > 0.0 for r in liquors)
    ]  # fmt: skip
    page.line()
    page.line("Dissolved, mg/L (sulfide as HS, carbonate as CO3, ammonia as NH4)")
    page.table(
        ("", *(f">{r.number} {r.name}" for r in liquors)),
        [(_ion(c), *(figure(r.dissolved_mg_per_L.get(c, 0.0)) for r in liquors)) for c in names],
    )


def _cautions(page: _Page, trial: Trial) -> None:
    page.head("Cautions")
    if trial.cautions:
        page.table(
            ("level", "hazard", "where", ">value", ""),
            [
                (c.level, c.hazard, c.where, f"{figure(c.value)} {c.unit}".strip(), c.text)
                for c in trial.cautions
            ],
        )
    else:
        page.line("No rule fired.")
    page.line(DISCLAIMER)


def _unseen(page: _Page, trial: Trial) -> None:
    """Slow solids that are off but supersaturated."""
    solids = catalogue().solids
    rows = []
    for stage in trial.stages:
        high = [
            f"{name} {value:+.1f}"
            for name, value in sorted(stage.saturation_log10.items(), key=lambda i: -i[1])
            if value > 0.01 and solids[name].forms == "slow"
        ]
        if high:
            rows.append((str(stage.number), ", ".join(high)))
    if rows:
        page.head("Slow solids left out, supersaturated: log10(Q/K)")
        page.table(("stage", "solids"), rows)


def verdict_text(verdict: Verdict) -> str:
    """Report what a check of a saved design found."""
    page = _Page()
    page.line(f"{verdict.path}: {'reproduced, every limit met' if verdict.ok else 'NOT verified'}")
    if verdict.differences:
        page.head(f"{len(verdict.differences)} entries differ")
        for difference in verdict.differences[:40]:
            page.line(str(difference))
        if len(verdict.differences) > 40:
            page.line(f"... and {len(verdict.differences) - 40} more (--json lists them)")
    if verdict.limits_missed:
        page.head("Limits missed")
        for shortfall in verdict.limits_missed:
            page.line(str(shortfall))
    if verdict.trial is not None:
        page.line()
        page.line(
            f"Recomputed cost {money(verdict.trial.cost_per_hour)} USD/h; "
            f"{len(verdict.trial.limits)} limits checked."
        )
    for note in verdict.notes:
        page.line(f"note: {note}")
    return page.text()


def beaker_text(result: BeakerResult) -> str:
    """Report a vessel on the bench."""
    page = _Page()
    page.line(result.title)
    page.line()
    page.line(
        f"{figure(result.volume_L * 1000.0)} mL, {result.temperature_C:g} degC, pH {result.pH:.2f} "
        f"(just mixed {result.mixed_pH:.2f}), ionic strength "
        f"{figure(result.ionic_strength_mol_per_kg)} mol/kg, {result.activity_model} activities"
    )
    page.head("What settles")
    formed = [row for row in result.solids if row.mmol > 0.0]
    if formed:
        page.table(
            ("solid", ">mmol", ">g"), [(r.name, figure(r.mmol), figure(r.grams)) for r in formed]
        )
    else:
        page.line("Nothing.")
    page.head("What stays dissolved")
    page.table(
        ("", ">poured mmol/L", ">dissolved mmol/L", ">dissolved mg/L", ">settled %"),
        [
            (
                _ion(c),
                figure(total * 1000.0),
                figure(result.dissolved_mol_per_L.get(c, 0.0) * 1000.0),
                figure(result.dissolved_mg_per_L.get(c, 0.0)),
                figure(result.settled_percent.get(c, 0.0)),
            )
            for c, total in result.total_mol_per_L.items()
        ],
    )
    page.head("Saturation, log10(Q/K): above zero a solid can form")
    page.table(
        ("solid", "", ">bare ion product", ">just mixed", ">at the end"),
        [
            (
                r.name,
                "forms" if r.mmol > 0.0 else "can form" if r.allowed else "slow, off",
                "" if r.ion_product_log10 is None else f"{r.ion_product_log10:+.2f}",
                f"{r.mixed_log10:+.2f}",
                f"{r.final_log10:+.2f}",
            )
            for r in result.solids
        ],
    )
    page.line(
        "The bare ion product takes total concentrations, as a table of solubility products would: no "
        "complexes, no activity, no acid-base equilibria of the ligands."
    )
    for sentence in result.separations:
        page.line()
        page.line(sentence[0].upper() + sentence[1:] + ".")
    return page.text()
