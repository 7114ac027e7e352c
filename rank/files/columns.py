"""The columns of a shortlist: names, headings, units, meanings."""

from __future__ import annotations

from dataclasses import dataclass, replace
from typing import TYPE_CHECKING

from capmuster.rank.design.losses import TERMS

if TYPE_CHECKING:
    from capmuster.rank.inputs.brief import Brief


@dataclass(frozen=True, slots=True)
class Column:
    """A column of the shortlist.

    Attributes
    ----------
    name
        Its name in tables for programs, unit included.
    heading
        Its heading for people.
    unit
        Its unit, or an empty text.
    meaning
        One line.
    """

    name: str
    heading: str
    unit: str
    meaning: str


COLUMNS = (
    Column("place", "place", "", "place by area efficiency, 1 is best"),
    Column("id", "id", "", "short id, derived from the wiring"),
    Column("ratio", "ratio", "", "M = V_out / V_in at no load"),
    Column("families", "families", "", "families that the converter belongs to"),
    Column("flying_capacitors", "capacitors", "", "flying capacitors"),
    Column("switches", "switches", "", "switches"),
    Column("area_mm2", "area", "mm2", "least area that meets the droop budget at the brief's frequency"),
    Column("capacitor_area_mm2", "capacitor area", "mm2", "share of the capacitors"),
    Column("silicon_area_mm2", "silicon area", "mm2", "share of the switches"),
    Column("conductance_per_area_S_per_mm2", "G / area", "S/mm2", "output conductance per area"),
    Column("impedance_ohm", "R_out", "ohm", "output impedance at that area, blend of both limits"),
    Column("slow_limit_ohm", "R_SSL", "ohm", "slow-switching limit at that area"),
    Column("fast_limit_ohm", "R_FSL", "ohm", "fast-switching limit at that area"),
    Column("droop_V", "droop", "V", "load current times R_out"),
    Column("efficiency_minimum", "efficiency at V_in min", "1", "conduction only, at the lowest input"),
    Column("efficiency_nominal", "efficiency at V_in nom", "1", "conduction only, at the nominal input"),
    Column("efficiency_maximum", "efficiency at V_in max", "1", "conduction only, at the highest input"),
    Column("ceiling_minimum", "ceiling at V_in min", "1", "V_required / (M V_in) at the lowest input"),
    Column("ceiling_nominal", "ceiling at V_in nom", "1", "V_required / (M V_in) at the nominal input"),
    Column("ceiling_maximum", "ceiling at V_in max", "1", "V_required / (M V_in) at the highest input"),
    Column("capacitor_utilisation", "capacitor utilisation", "1", "E / sum |q v| over capacitors"),
    Column("switch_utilisation", "switch utilisation", "1", "4 E / sum |q v| over switches"),
    Column(
        "output_evenness", "output evenness", "1", "1 when both phases feed the output alike, 0 when one does"
    ),
    Column("highest_capacitor_voltage_V", "highest capacitor voltage", "V", "worst case over the capacitors"),
    Column("highest_blocking_voltage_V", "highest blocking voltage", "V", "worst case over the switches"),
    Column(
        "floating_drives",
        "floating gate drives",
        "",
        "switches whose gates no level between the rails drives",
    ),
    Column("pareto", "Pareto", "", "no candidate beats it in area, efficiency, parts and blocking voltage"),
    Column("wiring", "wiring", "", "wiring code"),
)
"""Columns of every shortlist, in their order."""

_PLACES = {
    "least-loss": "place by loss, 1 is least",
    "least-area": "place by area, 1 is least",
    "power-density": "place by power density, 1 is greatest",
}

_WITH_LOSSES = {
    "area_mm2": "area of capacitors and switches as sized for the objective",
    "impedance_ohm": "what the output gives way per ampere at the nominal input, wiring included",
    "slow_limit_ohm": "slow-switching limit at the lowest input",
    "fast_limit_ohm": "fast-switching limit at the lowest input",
    "droop_V": "ideal output less output at the nominal input and full load",
    "efficiency_minimum": "all losses, at the lowest input and full load",
    "efficiency_nominal": "all losses, at the nominal input and full load",
    "efficiency_maximum": "all losses, at the highest input and full load",
}

LOSS_COLUMNS = (
    Column("frequency_Hz", "frequency", "Hz", "switching frequency at the nominal input and full load"),
    Column(
        "frequency_highest_Hz", "highest frequency", "Hz", "the same, at the lowest input where that differs"
    ),
    Column("duty_phase_1", "duty", "1", "share of phase 1"),
    Column("load_A", "load", "A", "full load"),
    Column("output_minimum_V", "output at V_in min", "V", "magnitude of the output, lowest input, full load"),
    Column("output_power_W", "output power", "W", "at the nominal input and full load"),
    Column("power_density_W_per_mm2", "power density", "W/mm2", "output power over area"),
    Column("loss_W", "loss", "W", "all terms at the nominal input and full load"),
    *(Column(term.name, f"loss: {term.heading}", "W", term.meaning) for term in TERMS),
    Column("bound_gap", "bound gap", "1", "how much better any other sizes could be, at most; same classes"),
)
"""Columns of a shortlist that counts losses."""

_PROFILE_COLUMNS = (
    Column("profile_loss_W", "mean loss", "W", "mean loss over the load profile"),
    Column("profile_efficiency", "mean efficiency", "1", "output energy over input energy of the profile"),
)


_SPREAD_COLUMNS = (
    Column(
        "efficiency_5pct", "efficiency, 5 % worst", "1", "worst input; 95 % of the random trials reach it"
    ),
    Column("droop_5pct_V", "droop, 5 % worst", "V", "lowest input; 95 % of the random trials keep within it"),
    Column("efficiency_corner", "efficiency, worst corner", "1", "worst input, worst of all corners"),
    Column("droop_corner_V", "droop, worst corner", "V", "lowest input, worst of all corners"),
    Column("output_holds", "output holds", "1", "share of the trials that give the required output"),
    Column("comes_first", "comes first", "1", "share of the trials in which it is the most efficient listed"),
)
_OUTPUT_CAPACITOR = Column(
    "output_capacitor_F",
    "output capacitor",
    "F",
    "least one that keeps the output ripple, full load, any input",
)
_INPUT_CAPACITOR = Column(
    "input_capacitor_F", "input capacitor", "F", "least one that keeps the input ripple, full load, any input"
)


def columns_of(brief: Brief) -> tuple[Column, ...]:
    """Columns of the shortlist of a brief, in their order."""
    common = list(COLUMNS)
    more: list[Column] = []
    if brief.counts_losses:
        changed = {**_WITH_LOSSES, "place": _PLACES[brief.objective]}
        if brief.profile:
            changed["place"] = "place by mean loss over the load profile, 1 is least"
        common = [replace(one, meaning=changed.get(one.name, one.meaning)) for one in COLUMNS]
        more += LOSS_COLUMNS
    if brief.profile:
        more += _PROFILE_COLUMNS
    if brief.tolerance is not None:
        more += _SPREAD_COLUMNS
    if brief.output_ripple is not None:
        more.append(_OUTPUT_CAPACITOR)
    if brief.input_ripple is not None:
        more.append(_INPUT_CAPACITOR)
    wiring = common.pop()
    return (*common, *more, wiring)
