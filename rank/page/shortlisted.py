"""A shortlist as the content of a page."""

from __future__ import annotations

from fractions import Fraction
from typing import TYPE_CHECKING, Literal

import numpy as np

from capmuster.rank.circuit import circuit_of
from capmuster.rank.drawing.sheet import potential_diagram
from capmuster.rank.evaluation import efficiency
from capmuster.rank.export_text import cell
from capmuster.rank.impedance import output_impedance
from capmuster.rank.page.data import Candidate, Cell, ImpedanceCurve, Listing, LossBar, PageColumn, PageData
from capmuster.rank.page.population import population_of
from capmuster.rank.page.render import render_page
from capmuster.rank.quantity import format_quantity
from capmuster.rank.shortlist import COLUMNS
from capmuster.rank.summary import assumptions, verdict

if TYPE_CHECKING:
    from collections.abc import Sequence

    from numpy.typing import NDArray

    from capmuster.rank.elements import Element
    from capmuster.rank.shortlist import Column, Shortlist

_UNITS = {"mm2": "mm²", "S/mm2": "S/mm²", "ohm": "Ω", "1": "%"}
_SHARES = {"capacitor_utilisation", "switch_utilisation", "output_evenness"}
_TEXTS = {"id", "ratio", "families", "wiring"}
_NAMES = {"id", "ratio"}
_LATER = {
    "capacitor_area_mm2",
    "silicon_area_mm2",
    "slow_limit_ohm",
    "fast_limit_ohm",
    "droop_V",
    "ceiling_minimum",
    "ceiling_nominal",
    "ceiling_maximum",
    "output_evenness",
    "highest_capacitor_voltage_V",
    "wiring",
}
_DECADES, _STEPS = 1.5, 61  # of the impedance curve, to both sides of the design's frequency; its points


def to_page(shortlist: Shortlist) -> bytes:
    """Return a shortlist as a self-contained HTML page."""
    return render_page(page_data(shortlist)).encode()


def page_data(shortlist: Shortlist) -> PageData:
    """Collect what a page shows of a shortlist."""
    brief = shortlist.brief
    return PageData(
        title=brief.title,
        cautions=tuple(shortlist.cautions),
        assumptions=tuple(pair for pair in assumptions(brief) if pair[0] != "job"),  # the title says it
        findings=tuple(verdict(shortlist)),
        columns=tuple(_column(column) for column in COLUMNS),
        candidates=tuple(_candidate(shortlist, row) for row in range(len(shortlist))),
        efficiency_label="conduction-only efficiency at the worst input",
        others=_others(shortlist),
        population=population_of(brief, shortlist.pool.complete_up_to),
        provenance=tuple((name.replace("_", " "), value) for name, value in shortlist.provenance.items()),
    )


def _column(column: Column) -> PageColumn:
    return PageColumn(
        key=column.name,
        heading=column.heading,
        unit=_UNITS.get(column.unit, column.unit),
        meaning=column.meaning,
        kind=_kind(column.name),
        shown=column.name not in _LATER,
    )


def _kind(name: str) -> Literal["text", "name", "number", "share", "flag"]:
    if name in _TEXTS:
        return "name" if name in _NAMES else "text"
    if name == "pareto":
        return "flag"
    return "share" if name in _SHARES else "number"


def _cell(column: Column, value: object) -> Cell:
    """Write a value in the unit of its heading; the value beside it is in that unit too."""
    text = cell(column, value)
    if column.name == "ratio":
        return Cell(text, float(Fraction(text)))
    if column.name in _TEXTS:
        return Cell(text)
    number = float(str(value)) if not isinstance(value, bool | np.bool_) else float(value)
    return Cell(text, 100 * number if column.unit == "1" else number)


def _candidate(shortlist: Shortlist, row: int) -> Candidate:
    figures = shortlist.frame.iloc[row].to_dict()
    converter = shortlist.pool.converter(row)
    elements = shortlist.elements(row)
    return Candidate(
        id=converter.id,
        place=row + 1,
        wiring=converter.code,
        cells=tuple(_cell(column, figures[column.name]) for column in COLUMNS),
        area=float(figures["area_mm2"]),
        efficiency=float(min(figures["efficiency_minimum"], figures["efficiency_maximum"])),
        capacitor_utilisation=float(figures["capacitor_utilisation"]),
        switch_utilisation=float(figures["switch_utilisation"]),
        pareto=bool(figures["pareto"]),
        family=bool(shortlist.families(row)),
        diagram=potential_diagram(converter),
        elements=_listing(elements),
        losses=_losses(shortlist, row),
        curve=_curve(shortlist, row, elements),
    )


def _others(shortlist: Shortlist) -> NDArray[np.float64]:
    """Area and efficiency at the worst input of the candidates below the table."""
    brief, e = shortlist.brief, shortlist.pool.evaluation
    below = slice(len(shortlist), None)
    worst = np.minimum(
        *(
            efficiency(brief, e.ratio[below], e.impedance[below], volts)
            for volts in (brief.input_minimum, brief.input_maximum)
        )
    )
    return np.stack([e.area[below], worst], axis=1)


def _listing(elements: Sequence[Element]) -> Listing:
    headings = (
        "element", "between", "closed in", "class", "in series", "area [mm²]", "value", "charge multiplier",
        "must stand [V]", "derated rating [V]", "stress [%]",
    )  # fmt: skip
    rows = tuple(
        (
            e.name,
            f"{e.nodes[0]}, {e.nodes[1]}",
            f"phase {e.phase}" if e.phase else "",
            e.device,
            str(e.series),
            f"{e.area:.4g}",
            format_quantity(e.value, "F" if e.kind == "capacitor" else "ohm"),
            f"{e.multiplier:.4g}",
            f"{e.voltage:.4g}",
            f"{e.rating:.4g}",
            f"{100 * e.stress:.1f}",
        )
        for e in elements
    )
    return Listing(headings, rows, (False,) * 4 + (True,) * 7)


def _losses(shortlist: Shortlist, row: int) -> tuple[LossBar, ...]:
    """Split the conduction loss: both limits by their share of R_out, and what regulation burns beyond it."""
    brief, e = shortlist.brief, shortlist.pool.evaluation
    slow = float(e.slow[row] / e.capacitor_area[row])
    fast = float(e.fast[row] / e.switching_area[row])
    impedance, ratio = float(e.impedance[row]), abs(float(e.ratio[row]))
    # R_out^2 = R_SSL^2 + R_FSL^2: each limit has its square's share of the loss I^2 R_out.
    terms = (
        ("capacitors (slow limit)", brief.current**2 * slow**2 / impedance),
        ("switches (fast limit)", brief.current**2 * fast**2 / impedance),
    )
    if brief.use == "fixed-ratio":
        return (LossBar(f"at {format_quantity(brief.current, 'A')}", terms),)
    bars = []
    for volts in (brief.input_minimum, brief.input_nominal, brief.input_maximum):
        total = (ratio * volts - abs(brief.required)) * brief.current
        rest = max(0.0, total - sum(value for _, value in terms))
        bars.append(LossBar(f"at {format_quantity(volts, 'V')} input", (*terms, ("regulation", rest))))
    return tuple(bars)


def _curve(shortlist: Shortlist, row: int, elements: Sequence[Element]) -> ImpedanceCurve:
    brief = shortlist.brief
    circuit = circuit_of(
        shortlist.pool.converter(row),
        [e.value for e in elements if e.kind == "capacitor"],
        [e.value for e in elements if e.kind == "switch"],
    )
    frequency = brief.frequency * np.logspace(-_DECADES, _DECADES, _STEPS)
    found = output_impedance(circuit, frequency)
    return ImpedanceCurve(
        frequency=frequency,
        exact=found.resistance,
        slow=found.slow,
        fast=found.fast,
        chosen=brief.frequency,
        budget=float(brief.r_max(float(shortlist.pool.evaluation.ratio[row]))),
    )
