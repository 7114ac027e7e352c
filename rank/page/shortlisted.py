"""A shortlist as the content of a page."""

from __future__ import annotations

from typing import TYPE_CHECKING

import numpy as np

from capmuster.rank.design.losses import TERM_FIELDS, TERMS
from capmuster.rank.drawing.sheet import potential_diagram
from capmuster.rank.exact.circuit import circuit_of
from capmuster.rank.exact.impedance import output_impedance
from capmuster.rank.files.summary import assumptions, verdict
from capmuster.rank.inputs.quantity import format_quantity
from capmuster.rank.page.data import Candidate, ImpedanceCurve, Listing, LossBar, PageData
from capmuster.rank.page.population import population_of
from capmuster.rank.page.render import render_page
from capmuster.rank.page.tablecells import page_table

if TYPE_CHECKING:
    from collections.abc import Sequence

    from capmuster.rank.elements import Element
    from capmuster.rank.page.data import Cell
    from capmuster.rank.shortlist import Shortlist

_DECADES, _STEPS = 1.5, 61  # of the impedance curve, to both sides of the design's frequency; its points


def to_page(shortlist: Shortlist) -> bytes:
    """Return a shortlist as a self-contained HTML page."""
    return render_page(page_data(shortlist)).encode()


def page_data(shortlist: Shortlist) -> PageData:
    """Collect what a page shows of a shortlist."""
    brief, e = shortlist.brief, shortlist.pool.evaluation
    table = page_table(shortlist.columns, shortlist.frame)
    below = slice(len(shortlist), None)
    return PageData(
        title=brief.title,
        cautions=tuple(shortlist.cautions),
        assumptions=tuple(pair for pair in assumptions(brief) if pair[0] != "job"),  # the title says it
        findings=tuple(verdict(shortlist)),
        columns=table.columns,
        candidates=tuple(_candidate(shortlist, row, cells) for row, cells in enumerate(table.rows)),
        efficiency_label=f"{'' if brief.counts_losses else 'conduction-only '}efficiency at the worst input",
        others=np.stack([e.area[below], e.worst_efficiency[below]], axis=1),
        population=population_of(brief, shortlist.pool.complete_up_to),
        provenance=tuple((name.replace("_", " "), value) for name, value in shortlist.provenance.items()),
    )


def _candidate(shortlist: Shortlist, row: int, cells: tuple[Cell, ...]) -> Candidate:
    e, converter = shortlist.pool.evaluation, shortlist.pool.converter(row)
    elements = shortlist.elements(row)
    return Candidate(
        id=converter.id,
        place=row + 1,
        wiring=converter.code,
        cells=cells,
        area=float(e.area[row]),
        efficiency=float(e.worst_efficiency[row]),
        capacitor_utilisation=float(e.capacitor_utilisation[row]),
        switch_utilisation=float(e.switch_utilisation[row]),
        pareto=bool(shortlist.pool.pareto[row]),
        family=bool(shortlist.families(row)),
        diagram=potential_diagram(converter),
        elements=_listing(elements),
        losses=_counted_losses(shortlist, row) if e.sized is not None else _conduction_losses(shortlist, row),
        curve=_curve(shortlist, row, elements),
    )


def _listing(elements: Sequence[Element]) -> Listing:
    headings = (
        "element", "between", "closed in", "class", "in series", "area [mm²]", "value", "charge multiplier",
        "must stand [V]", "derated rating [V]", "stress [%]", "gate on / off [V]", "gate supply",
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
            "" if e.gate is None else " / ".join(f"{volts:.3g}" for volts in e.gate),
            e.supply,
        )
        for e in elements
    )
    return Listing(headings, rows, (False,) * 4 + (True,) * 8 + (False,))


def _counted_losses(shortlist: Shortlist, row: int) -> tuple[LossBar, ...]:
    """All losses at full load, over the input range; terms that are 0 throughout are left out."""
    brief, sized = shortlist.brief, shortlist.pool.evaluation.sized
    assert sized is not None  # noqa: S101 -- the caller's condition
    at = (
        (brief.input_minimum, sized.minimum),
        (brief.input_nominal, sized.nominal),
        (brief.input_maximum, sized.maximum),
    )
    used = [
        (term.heading, name)
        for term, name in zip(TERMS, TERM_FIELDS, strict=True)
        if any(getattr(operation.losses, name)[row] > 0 for _, operation in at)
    ]
    return tuple(
        LossBar(
            f"at {format_quantity(volts, 'V')} input",
            tuple((heading, float(getattr(operation.losses, name)[row])) for heading, name in used),
        )
        for volts, operation in at
    )


def _conduction_losses(shortlist: Shortlist, row: int) -> tuple[LossBar, ...]:
    """Split the conduction loss: both limits by their share of R_out, and what regulation burns beyond it."""
    brief, e = shortlist.brief, shortlist.pool.evaluation
    slow = float(e.slow[row] / e.capacitor_area[row])
    fast = float(e.fast[row] / e.switching_area[row])
    impedance, ratio = float(e.impedance[row]), abs(float(e.ratio[row]))
    # R_out^2 = R_SSL^2 + R_FSL^2: each limit has its square's share of the loss I^2 R_out.
    terms = (
        ("charge transfer", brief.current**2 * slow**2 / impedance),
        ("on-resistance", brief.current**2 * fast**2 / impedance),
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
    """Work out the exact impedance over frequency, of the elements and resistances that the table counts."""
    brief, sized = shortlist.brief, shortlist.pool.evaluation.sized
    classes = {one.name: one for one in brief.technology.capacitors}
    capacitors = [element for element in elements if element.kind == "capacitor"]
    frequency, duty, current, series = brief.frequency, 0.5, brief.current, [0.0] * len(capacitors)
    if sized is not None:
        # The lowest input decides: there the droop is least, and a held output takes the highest frequency.
        frequency = float(sized.minimum.frequency[row])
        duty, current = float(sized.design.duty[row]), float(sized.design.current[row])
        series = [classes[one.device].series_resistance * one.series**2 / one.area for one in capacitors]
    circuit = circuit_of(
        shortlist.pool.converter(row),
        [one.value for one in capacitors],
        [one.value for one in elements if one.kind == "switch"],
        series_resistances=series,
        duty=duty,
        between=[(*one.nodes, one.phase) for one in elements if one.phase is not None],
    )
    frequencies = frequency * np.logspace(-_DECADES, _DECADES, _STEPS)
    found = output_impedance(circuit, frequencies)
    ratio = float(shortlist.pool.evaluation.ratio[row])
    return ImpedanceCurve(
        frequency=frequencies,
        exact=found.resistance,
        slow=found.slow,
        fast=found.fast,
        chosen=frequency,
        budget=float(brief.r_max(ratio)) * brief.current / current,
    )
