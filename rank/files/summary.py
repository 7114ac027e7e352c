"""The job and the search in a few lines of text, the same in every table and file."""

from __future__ import annotations

from typing import TYPE_CHECKING

from capmuster.rank.design.screening import can_be_exact
from capmuster.rank.inputs.quantity import format_quantity

if TYPE_CHECKING:
    from capmuster.rank.inputs.brief import Brief
    from capmuster.rank.shortlist import Shortlist


def assumptions(brief: Brief) -> list[tuple[str, str]]:
    """Name and value of everything that a reader must know about the job."""
    budgets = (
        ("area", brief.area),
        ("silicon area", brief.silicon_area),
        ("capacitor area", brief.capacitor_area),
    )
    area = ", ".join(
        f"{name} at most {format_quantity(value, 'mm2')}" for name, value in budgets if value is not None
    )
    use = "least acceptable output" if brief.use == "fixed-ratio" else "output that is held"
    by = f" by the {brief.regulation}" if brief.use == "regulated" and brief.counts_losses else ""
    rating = (
        "ideal voltages at the highest input"
        if brief.use == "fixed-ratio"
        else "bound on the swing while the output is held, at the highest input"
    )
    floor = brief.efficiency_floor
    return [
        ("job", brief.title),
        (
            "input",
            " / ".join(
                format_quantity(v, "V", 4)
                for v in (brief.input_minimum, brief.input_nominal, brief.input_maximum)
            )
            + " (least / nominal / highest)",
        ),
        ("use", f"{brief.use}, {use} {format_quantity(brief.required, 'V', 4)}{by}"),
        ("load", _load(brief)),
        ("objective", _objective(brief)),
        ("switching frequency", f"{_frequency(brief)}, {_duty(brief)}"),
        ("budgets", area or "area is free"),
        (
            "efficiency floor",
            "none" if floor is None else f"{format_quantity(floor, '1')} {_where_floor_holds(brief)}",
        ),
        ("ratios", "any that hold the output" if brief.ratios is None else ", ".join(map(str, brief.ratios))),
        (
            "parts",
            f"at most {brief.most_capacitors} flying capacitors"
            + ("" if brief.most_switches is None else f" and {brief.most_switches} switches"),
        ),
        ("technology", f"{brief.technology.name}: {brief.technology.title}"),
        ("element ratings", rating),
        ("output impedance", "blend sqrt(R_SSL^2 + R_FSL^2)"),
        *_how_counted(brief),
        (
            "gate drive",
            "all switches from the rails" if brief.drive == "rails" else "floating supplies allowed, counted",
        ),
        *_around(brief),
    ]


def _around(brief: Brief) -> list[tuple[str, str]]:
    """Tolerances, ripple and copies, as far as the brief has any."""
    found = []
    spread = brief.tolerance
    if spread is not None:
        parts = [
            f"{name} {format_quantity(value, '1')}"
            for name, value in (
                ("on-resistance", spread.resistance),
                ("capacitance density", spread.density),
                ("gate and output charge", spread.charge),
                ("each capacitor", spread.capacitance),
                ("each switch", spread.mismatch),
                ("load", spread.load),
            )
            if value
        ]
        degrees = f"{spread.temperature_low:g} to {spread.temperature_high:g} °C"
        found.append(("tolerance", f"±: {', '.join(parts) or 'none'}; {degrees}; {spread.trials} trials"))
    for name, ripple in (("output", brief.output_ripple), ("input", brief.input_ripple)):
        if ripple is not None:
            text = f"{format_quantity(ripple, 'V')} peak to peak at most"
            found.append((f"{name} ripple", text))
    if brief.copies > 1:
        found.append(("copies", f"{brief.copies} interleaved, in all as large as one"))
    return found


def _how_counted(brief: Brief) -> list[tuple[str, str]]:
    if not brief.counts_losses:
        return [
            ("efficiency", "conduction only: no gate drive, plate, leakage or controller loss"),
            ("areas", "least that use the whole droop budget at the least input; continuous, no part sizes"),
        ]
    return [
        ("efficiency", "all losses of the table, at full load; voltages without droop or ripple"),
        ("areas", "best for the objective within the droop budget at the least input; continuous"),
        (
            "classes",
            "by their prices; for the best candidates every class, stack and switch tree is considered"
            if can_be_exact(brief)
            else "by their prices, until nothing is gained; switches in chains",
        ),
    ]


_OBJECTIVES = {
    "conduction-area": "least area whose conduction meets the droop",
    "least-loss": "least loss within the area, all losses counted",
    "least-area": "least area that keeps the efficiency floor, all losses counted",
    "power-density": "greatest power density that keeps the efficiency floor, all losses counted, load free",
}


def _objective(brief: Brief) -> str:
    text = _OBJECTIVES[brief.objective]
    return text + (", mean over the load profile" if brief.profile else "")


def _frequency(brief: Brief) -> str:
    highest = format_quantity(brief.frequency, "Hz", 4)
    if brief.frequency_minimum is None:
        return highest
    return f"{format_quantity(brief.frequency_minimum, 'Hz', 4)} to {highest}"


def _duty(brief: Brief) -> str:
    return "duty free" if brief.duty is None else f"duty {format_quantity(brief.duty, '1')}"


def _load(brief: Brief) -> str:
    full = format_quantity(brief.current, "A", 4)
    if brief.objective == "power-density" and brief.current_least is not None:
        return f"{format_quantity(brief.current_least, 'A', 4)} to {full}"
    if not brief.profile:
        return full
    points = ", ".join(
        f"{format_quantity(point.share, '1')} "
        + ("asleep" if point.asleep else format_quantity(point.current, "A", 4))
        + ("" if point.volts is None else f" at {format_quantity(point.volts, 'V', 4)}")
        for point in brief.profile
    )
    return f"{full} at most; {points}"


def _where_floor_holds(brief: Brief) -> str:
    return "at the nominal input" if brief.objective == "power-density" else "at the worst input"


def verdict(shortlist: Shortlist) -> list[str]:
    """Say what the search covered, what it left out, and what the best candidate gains."""
    pool = shortlist.pool
    most = shortlist.brief.most_capacitors
    reach = f"complete up to {pool.complete_up_to} flying capacitors"
    if most > pool.complete_up_to:
        reach += f", family members from {pool.complete_up_to + 1} to {most}"
    lines = [
        f"Searched: {reach}. {pool.considered} converters hold the output, {len(pool)} meet the brief.",
    ]
    lines += [f"Left out: {count} {reason}." for reason, count in pool.left_out.items()]
    gain = shortlist.gain_over_family
    if not len(pool):
        lines.append("No converter meets the brief.")
    elif gain is None:
        lines.append("No family member meets the brief: what remains is outside the families.")
    elif shortlist.best_family_place == 1:
        lines.append("The best candidate is a family member.")
    else:
        place = shortlist.best_family_place
        share, what = format_quantity(1 / gain, "1"), _WHAT[shortlist.brief.objective]
        if shortlist.brief.objective == "power-density":
            share = format_quantity(gain, "1")
        lines.append(
            f"The best candidate has {share} of the {what} of the best family member, at place {place}."
        )
    lines += _certificate(shortlist)
    for one in shortlist.included:
        where = f"place {one.place} of {len(pool)}" if one.place else f"left out, {one.reason}"
        lines.append(f"Included {one.id} ({one.wiring}): {where}.")
    return lines


_WHAT = {
    "conduction-area": "area",
    "least-loss": "loss",
    "least-area": "area",
    "power-density": "power density",
}


def _certificate(shortlist: Shortlist) -> list[str]:
    """Say how far sizes and order are proven."""
    sized, pool = shortlist.pool.evaluation.sized, shortlist.pool
    if sized is None or not len(pool):
        return []
    lines = [
        f"Sizes: {int(sized.proven.sum())} of {len(pool)} optima proven to 1e-9 relative, for their classes."
    ]
    proof = shortlist.certificate
    if proof is None:
        return [
            *lines,
            "Order: classes and switch chains are local optima; no proof over all of them for this brief.",
        ]
    lines.append(
        f"Classes and switch trees: the best are proven for {proof.proven} of {proof.exact} candidates; "
        f"{proof.screened} others are kept out by a lower bound."
    )
    most = pool.complete_up_to
    if proof.holds:
        lines.append(
            f"Order: no other topology with up to {most} capacitors is better than place {proof.places}, "
            "whatever its classes and switch trees: proven."
        )
    else:
        lines.append(
            f"Order: {proof.open} topologies behind place {proof.places} could not be proven to belong there."
        )
    return lines
