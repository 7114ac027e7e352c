"""The shortlist as CSV, JSON and Markdown."""

from __future__ import annotations

import json
import math
from dataclasses import asdict
from typing import TYPE_CHECKING

from capmuster.rank.files.summary import assumptions, verdict
from capmuster.rank.inputs.quantity import format_quantity

if TYPE_CHECKING:
    from collections.abc import Sequence

    from capmuster.rank.elements import Element
    from capmuster.rank.shortlist import Column, Shortlist

_UNITS = {"mm2": "mm²", "S/mm2": "S/mm²", "W/mm2": "W/mm²", "ohm": "Ω", "1": "%"}


def to_csv(shortlist: Shortlist, columns: Sequence[str] | None = None) -> bytes:
    """One row per candidate, with all columns or some; version and fingerprints in the last columns."""
    frame = shortlist.frame if columns is None else shortlist.frame[list(columns)]
    frame = frame.assign(**shortlist.provenance)
    return frame.to_csv(index=False, lineterminator="\n").encode()


def to_json(shortlist: Shortlist) -> bytes:
    """Everything: the job, the search, the table with its units, and each candidate's elements."""
    rows = [
        {
            str(name): None if isinstance(value, float) and math.isnan(value) else value
            for name, value in row.items()
        }
        for row in shortlist.frame.to_dict("records")
    ]
    for k, row in enumerate(rows):
        row["families"] = list(shortlist.families(k))
        row["elements"] = [{**asdict(element), "stress": element.stress} for element in shortlist.elements(k)]
    gain = shortlist.gain_over_family
    content = {
        "provenance": shortlist.provenance,
        "assumptions": dict(assumptions(shortlist.brief)),
        "cautions": shortlist.cautions,
        "search": {
            "complete_up_to": shortlist.pool.complete_up_to,
            "considered": shortlist.pool.considered,
            "candidates": len(shortlist.pool),
            "left_out": shortlist.pool.left_out,
            "best_family_place": shortlist.best_family_place,
            "gain_over_family": gain,
            "included": [asdict(one) for one in shortlist.included],
            "certificate": _certificate(shortlist),
        },
        "units": {column.name: column.unit for column in shortlist.columns},
        "candidates": rows,
    }
    return (json.dumps(content, ensure_ascii=False, indent=1) + "\n").encode()


def _certificate(shortlist: Shortlist) -> dict[str, int | bool] | None:
    """Put what is proven about the order in numbers; null where nothing is."""
    proof = shortlist.certificate
    return None if proof is None else {**asdict(proof), "holds": proof.holds}


def to_markdown(shortlist: Shortlist) -> bytes:
    """Read in a review: assumptions, verdict, the table, each candidate's elements, cautions."""
    lines = [f"# Shortlist: {_escaped(shortlist.brief.title)}", ""]
    lines += ["| assumption | value |", "|---|---|"]
    lines += [f"| {name} | {_escaped(value)} |" for name, value in assumptions(shortlist.brief)]
    lines += ["", *(f"- {_escaped(line)}" for line in verdict(shortlist)), ""]
    lines += [f"> **Caution.** {_escaped(text)}\n" for text in shortlist.cautions]
    shown = [c for c in shortlist.columns if c.name not in _NOT_IN_MARKDOWN]
    lines += [
        "| " + " | ".join(heading(c) for c in shown) + " |",
        "|" + "|".join("---" if c.name in _TEXTUAL else "---:" for c in shown) + "|",
    ]
    for row in shortlist.frame.to_dict("records"):
        lines.append("| " + " | ".join(_escaped(cell(c, row[c.name])) for c in shown) + " |")
    for k in range(len(shortlist)):
        lines += ["", f"## {k + 1}. {shortlist.pool.ids[k]}: `{shortlist.pool.code(k)}`", ""]
        lines += [
            (
                "| element | between | closed in | class | in series | area [mm²] | value | multiplier "
                "| must stand [V] | stress | source on / off [V] | gate supply |"
            ),
            "|---|---|---|---|---:|---:|---:|---:|---:|---:|---|---|",
        ]
        for e in shortlist.elements(k):
            value = format_quantity(e.value, "F" if e.kind == "capacitor" else "ohm")
            lines.append(
                f"| {e.name} | {e.nodes[0]}, {e.nodes[1]} | {f'phase {e.phase}' if e.phase else ''} "
                f"| {_escaped(e.device)} | {e.series} | {e.area:.4g} | {value} | {e.multiplier:.4g} "
                f"| {e.voltage:.4g} | {e.stress:.1%} | {_source(e)} | {e.supply} |"
            )
    lines += ["", "; ".join(f"{name} {value}" for name, value in shortlist.provenance.items()), ""]
    return "\n".join(lines).encode()


def _source(element: Element) -> str:
    return "" if element.source is None else " / ".join(f"{volts:.3g}" for volts in element.source)


_TEXTUAL = {"id", "ratio", "families", "wiring", "pareto", "exact_fits", "overstressed"}
_NOT_IN_MARKDOWN = {"wiring", "slow_limit_ohm", "fast_limit_ohm"}


def heading(column: Column) -> str:
    """Heading with its unit in brackets."""
    unit = _UNITS.get(column.unit, column.unit)
    return f"{column.heading} [{unit}]" if unit else column.heading


def cell(column: Column, value: object) -> str:
    """One value as text, in the unit of the heading."""
    if isinstance(value, bool):
        return "yes" if value else ""
    if column.unit == "1":
        return f"{round(100 * float(str(value)), 1) + 0.0:.1f}"  # no negative zero
    if isinstance(value, float):
        return f"{value:.4g}"
    return str(value)


def _escaped(text: str) -> str:
    """Text that stays text in Markdown."""
    for sign in "\\`*_[]<>|":
        text = text.replace(sign, f"\\{sign}")
    return " ".join(text.split())
