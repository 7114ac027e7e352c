"""Finalists as rows: for tables, files and programs."""

from __future__ import annotations

from dataclasses import asdict, fields
from typing import TYPE_CHECKING, TypeAlias

from capmuster.enumerate.families import family_names
from capmuster.rank._version import __version__
from capmuster.rank.discrete.design import LossTerms
from capmuster.rank.discrete.problem import operating_input
from capmuster.rank.files.columns import Column
from capmuster.rank.inputs.parts import CapacitorPart
from capmuster.rank.inputs.quantity import format_quantity
from capmuster.rank.inputs.technology import fingerprint

if TYPE_CHECKING:
    import pandas as pd

    from capmuster.rank.discrete.design import Filling
    from capmuster.rank.discrete.finalists import Finalist, PartsShortlist
    from capmuster.rank.inputs.parts_request import PartsRequest
    from capmuster.rank.inputs.quantity import Unit

Row: TypeAlias = tuple[str | int | float | bool | None, ...]

TERMS = tuple(one.name for one in fields(LossTerms))
_MEANING = {
    "redistribution": "charge that moves between capacitors",
    "on_resistance": "on-resistance of the switches",
    "series_resistance": "series resistance of the capacitors",
    "held": "the output held below its ideal",
    "wiring": "wiring in series with the output",
    "gate": "gate drive",
    "output_charge": "output charge of the switches",
    "controller": "controller",
}

COLUMNS = (
    Column("place", "place", "", "place by what is made least, 1 is best"),
    Column("id", "id", "", "short id, derived from the wiring"),
    Column("ratio", "ratio", "", "M = V_out / V_in at no load"),
    Column("families", "families", "", "families that the converter belongs to"),
    Column("flying_capacitors", "capacitors", "", "flying capacitors"),
    Column("switches", "switches", "", "switches"),
    Column("parts", "parts", "", "capacitors and MOSFETs in all, drivers not counted"),
    Column("footprint_mm2", "footprint", "mm2", "of all parts and drivers"),
    Column("price_EUR", "price", "EUR", "of all parts and drivers"),
    Column("frequency_Hz", "frequency", "Hz", "switching frequency"),
    Column("loss_W", "loss", "W", "at full load and the input where losses count"),
    *(Column(f"loss_{term}_W", term.replace("_", " "), "W", f"loss by {_MEANING[term]}") for term in TERMS),
    Column("impedance_ohm", "R_out", "ohm", "output impedance there, wiring included"),
    Column("exact_impedance_ohm", "exact R_out", "ohm", "the same from the exact steady state, no blend"),
    Column("slow_limit_ohm", "R_SSL", "ohm", "slow-switching limit there"),
    Column("fast_limit_ohm", "R_FSL", "ohm", "fast-switching limit there"),
    Column("output_minimum_V", "V_out at V_in min", "V", "output at full load and the lowest input"),
    Column("efficiency_minimum", "efficiency at V_in min", "1", "all losses, full load, lowest input"),
    Column("efficiency_nominal", "efficiency at V_in nom", "1", "all losses, full load, nominal input"),
    Column("efficiency_maximum", "efficiency at V_in max", "1", "all losses, full load, highest input"),
    Column("highest_stress", "highest stress", "1", "highest voltage over derated rating"),
    Column("least", "least", "", "what is made least: loss [W], footprint [mm2] or price [EUR]"),
    Column("bound", "bound", "", "no choice of parts has less, by the integer solver; same unit"),
    Column("gap", "gap", "", "relative distance of the bound"),
    Column("proven", "proven", "", "whether the parts are proven best"),
    Column("continuous_bound", "continuous bound", "", "no choice has less, by relaxation; same unit"),
    Column("area_place", "place by area", "", "place by the least area for conduction"),
    Column("wiring", "wiring", "", "wiring code"),
)
"""Columns of a table with one row per finalist."""

ELEMENT_COLUMNS = (
    Column("place", "place", "", "place of the converter"),
    Column("id", "id", "", "its id"),
    Column("kind", "kind", "", "capacitor or switch"),
    Column("name", "element", "", "its name"),
    Column("node_1", "from", "", "node; of a switch the positive one while it blocks"),
    Column("node_2", "to", "", "node"),
    Column("phase", "closed in phase", "", "phase in which a switch is closed"),
    Column("part", "part", "", "name of the part"),
    Column("case", "case", "", "its size or package"),
    Column("parallel", "in parallel", "", "strings in parallel"),
    Column("series", "in series", "", "parts in a string"),
    Column("capacitance_F", "capacitance", "F", "of all its parts, under bias, where losses count"),
    Column("on_resistance_ohm", "on-resistance", "ohm", "of all its parts, junctions warm"),
    Column("multiplier", "multiplier", "", "a_c or a_r"),
    Column("voltage_V", "must stand", "V", "highest voltage"),
    Column("rating_V", "stands", "V", "derated rating"),
    Column("stress", "stress", "1", "voltage over derated rating"),
    Column("footprint_mm2", "footprint", "mm2", "of its parts and its driver"),
    Column("price_EUR", "price", "EUR", "of its parts and its driver"),
)
"""Columns of a table with one row per capacitor and switch."""


def candidate_rows(found: PartsShortlist) -> list[Row]:
    """One row per finalist, with the columns `COLUMNS`."""
    most = max((one.converter.n for one in found.finalists), default=1)
    names = family_names(most)
    rows: list[Row] = []
    for place, one in enumerate(found.finalists, start=1):
        losses, at = one.operating.losses, one.conditions
        rows.append(
            (
                place,
                one.converter.id,
                str(one.converter.ratio),
                ", ".join(names.get(one.converter.id, ())),
                one.converter.n,
                len(one.fillings) - one.converter.n,
                one.parts,
                one.footprint,
                one.price,
                one.frequency,
                losses.total,
                *(float(getattr(losses, term)) for term in TERMS),
                one.operating.impedance,
                one.exact_impedance,
                one.operating.slow,
                one.operating.fast,
                at[0].output_voltage,
                *(condition.efficiency for condition in at),
                one.highest_stress,
                one.objective,
                one.bound,
                one.gap,
                one.proven,
                one.relaxed,
                one.area_place,
                one.converter.code,
            )
        )
    return rows


def element_rows(found: PartsShortlist) -> list[Row]:
    """One row per capacitor and switch of every finalist, with the columns `ELEMENT_COLUMNS`."""
    return [row for place, one in enumerate(found.finalists, start=1) for row in _elements(found, place, one)]


def _elements(found: PartsShortlist, place: int, finalist: Finalist) -> list[Row]:
    volts = operating_input(found.brief)
    return [
        (
            place,
            finalist.converter.id,
            one.slot.kind,
            one.slot.name,
            *one.slot.nodes,
            one.slot.phase,
            one.part.name,
            one.part.case,
            one.parallel,
            one.series,
            *_values(one, found.request, volts),
            float(one.slot.multiplier),
            one.slot.voltage,
            one.rating,
            one.stress,
            one.footprint,
            one.price,
        )
        for one in finalist.fillings
    ]


def _values(filling: Filling, request: PartsRequest, volts: float) -> tuple[float | None, float | None]:
    """Capacitance and on-resistance, one of them None."""
    value = filling.value(request, volts)
    return (value, None) if isinstance(filling.part, CapacitorPart) else (None, value)


def bill(found: PartsShortlist, finalist: Finalist) -> list[list[str]]:
    """Elements of a finalist for people, alike ones in one row; see `BILL_HEADER`."""
    alike: dict[tuple[str, ...], list[str]] = {}
    volts = operating_input(found.brief)
    for one in finalist.fillings:
        unit: Unit = "F" if isinstance(one.part, CapacitorPart) else "ohm"
        key = (
            one.part.name,
            str(one.parallel) + (f" x {one.series} in series" if one.series > 1 else ""),
            format_quantity(one.value(found.request, volts), unit),
            str(one.slot.multiplier),
            f"{one.slot.voltage:.4g}",
            f"{one.rating:.4g}",
            f"{100 * one.stress:.0f}",
            f"{one.footprint:.4g}",
            f"{one.price:.2f}",
        )
        alike.setdefault(key, []).append(one.slot.name)
    return [
        [" ".join(names), *key[:7], str(len(names)), *key[7:]]  # footprint and price are those of one element
        for key, names in alike.items()
    ]


# Shares are those of one element; the count says how many are alike.
BILL_HEADER = (
    "elements", "part", "in parallel", "value", "multiplier", "must stand [V]", "stands [V]", "stress [%]",
    "elements of it", "footprint each [mm²]", "price each [EUR]",
)  # fmt: skip


def settings(found: PartsShortlist) -> list[tuple[str, str]]:
    """Name and value of what a reader must know about the choice of parts."""
    r = found.request
    budgets = [f"footprint {format_quantity(r.footprint, 'mm2')}"] if r.footprint is not None else []
    budgets += [f"price {r.price:.2f} EUR"] if r.price is not None else []
    targets = [f"loss at most {format_quantity(r.loss, 'W')}"] if r.loss is not None else []
    targets += [f"efficiency at least {format_quantity(r.efficiency, '1', 4)}"] if r.efficiency else []
    volts = format_quantity(operating_input(found.brief), "V", 4)
    frequencies = ", ".join(format_quantity(f, "Hz", 4) for f in r.frequencies)
    shares = [format_quantity(one or 1.0, "1") for one in (r.capacitor_derating, r.switch_derating)]
    return [
        ("job", found.brief.title),
        ("made least", r.least),
        ("budgets", ", ".join(budgets) or "none"),
        ("targets", ", ".join(targets) or "none"),
        ("parts", f"{' and '.join(r.stock.names)}, drive {_drive(r.drive)}"),
        ("derating", f"capacitors to {shares[0]}, switches to {shares[1]} of the rating"),
        (
            "capacitance",
            f"{'lower end of the tolerance' if r.capacitance == 'least' else 'nominal'}, under bias",
        ),
        ("junctions at", f"{r.temperature:g} degC"),
        (
            "driver per switch",
            f"{format_quantity(r.driver_footprint, 'mm2')}, {r.driver_price:.2f} EUR",
        ),
        ("losses count at", f"{volts} and {format_quantity(found.brief.current, 'A', 4)}"),
        ("frequency", frequencies),
        ("output impedance", f"blend {found.blend.name}"),
    ]


def _drive(volts: float | None) -> str:
    return "as each part asks" if volts is None else f"up to {format_quantity(volts, 'V')}"


def document(found: PartsShortlist) -> dict[str, object]:
    """Everything, for JSON."""
    finalists = []
    for place, (row, one) in enumerate(zip(candidate_rows(found), found.finalists, strict=True), start=1):
        names = [column.name for column in ELEMENT_COLUMNS]
        elements = [dict(zip(names, line, strict=True)) for line in _elements(found, place, one)]
        conditions = [asdict(condition) for condition in one.conditions]
        values = dict(zip([column.name for column in COLUMNS], row, strict=True))
        finalists.append({**values, "conditions": conditions, "elements": elements})
    return {
        "provenance": provenance(found),
        "settings": dict(settings(found)),
        "certificate": found.certificate,
        "cautions": found.cautions,
        "search": {
            "candidates": found.candidates,
            "searched": found.searched,
            "exhaustive": found.exact,
            "left_out": found.left_out,
        },
        "units": {column.name: column.unit for column in (*COLUMNS, *ELEMENT_COLUMNS)},
        "finalists": finalists,
    }


def provenance(found: PartsShortlist) -> dict[str, str]:
    """Version and fingerprints of brief, technology, stock and all that was asked of the parts."""
    return {
        "capmuster_version": __version__,
        "brief_fingerprint": found.brief.fingerprint,
        "technology_fingerprint": found.brief.technology.fingerprint,
        "stock_fingerprint": found.request.stock.fingerprint,
        "request_fingerprint": fingerprint(found.request.content()),
    }


def frame(found: PartsShortlist) -> pd.DataFrame:
    """One row per finalist as a table, with the columns `COLUMNS`; units in ``attrs``."""
    return _frame(candidate_rows(found), COLUMNS, found)


def element_frame(found: PartsShortlist) -> pd.DataFrame:
    """One row per capacitor and switch as a table, with the columns `ELEMENT_COLUMNS`; units in ``attrs``."""
    return _frame(element_rows(found), ELEMENT_COLUMNS, found)


def _frame(rows: list[Row], columns: tuple[Column, ...], found: PartsShortlist) -> pd.DataFrame:
    import pandas as pd  # noqa: PLC0415 -- slow to import

    table = pd.DataFrame(rows, columns=[column.name for column in columns])
    table.attrs["units"] = {column.name: column.unit for column in columns}
    table.attrs.update(provenance(found))
    return table
