"""The job and the search in a few lines of text, the same in every table and file."""

from __future__ import annotations

from typing import TYPE_CHECKING

from capmuster.rank.quantity import format_quantity

if TYPE_CHECKING:
    from capmuster.rank.brief import Brief
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
        ("use", f"{brief.use}, {use} {format_quantity(brief.required, 'V', 4)}"),
        ("load", format_quantity(brief.current, "A", 4)),
        ("switching frequency", f"{format_quantity(brief.frequency, 'Hz', 4)}, duty 50 %"),
        ("budgets", area or "area is free"),
        (
            "efficiency floor",
            "none" if floor is None else f"{format_quantity(floor, '1')} at the worst input",
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
        ("efficiency", "conduction only: no gate drive, plate, leakage or controller loss"),
        ("areas", "least that use the whole droop budget at the least input; continuous, no part sizes"),
    ]


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
        lines.append(
            f"The best candidate takes {format_quantity(1 / gain, '1')} of the area of the best family member, "
            f"at place {shortlist.best_family_place}."
        )
    for one in shortlist.included:
        where = f"place {one.place} of {len(pool)}" if one.place else f"left out, {one.reason}"
        lines.append(f"Included {one.id} ({one.wiring}): {where}.")
    return lines
