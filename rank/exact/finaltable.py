"""Finalists as a table: blend and exact side by side, and what use and start-up do to the elements."""

from __future__ import annotations

from typing import TYPE_CHECKING

import numpy as np

from capmuster.rank.files.columns import Column

if TYPE_CHECKING:
    from collections.abc import Sequence

    import pandas as pd

    from capmuster.rank.exact.finalist import Finalist, Overstress

_ROUNDING = 1e-9

COLUMNS = (
    Column("place", "place", "", "place in the shortlist, 1 is best"),
    Column("id", "id", "", "short id, derived from the wiring"),
    Column("given_area_mm2", "area by blend", "mm2", "area as the shortlist has sized it"),
    Column("exact_area_mm2", "area, exact", "mm2", "area that holds the output by the exact impedance"),
    Column("exact_place", "place, exact", "", "place by the exact area among these"),
    Column("slow_limit_ohm", "R_SSL", "ohm", "slow-switching limit at the exact area"),
    Column(
        "fast_limit_ohm",
        "R_FSL",
        "ohm",
        "fast-switching limit at the exact area, series resistances included",
    ),
    Column("blend_ohm", "R_out, blend", "ohm", "root of the limits' squares"),
    Column("loop_blend_ohm", "R_out, loop", "ohm", "R_SSL coth(R_SSL / R_FSL)"),
    Column("exact_ohm", "R_out, exact", "ohm", "exact output resistance, plate parasitics included"),
    Column("correction", "correction", "1", "exact over blend"),
    Column("ratio_shift", "ratio shift", "1", "no-load ratio over the ideal one less 1, by plate parasitics"),
    Column(
        "exact_fits",
        "fits, exact",
        "",
        "whether the shifted ratio leaves any droop budget and the exact area is within the brief's",
    ),
    Column("highest_ripple_V", "ripple", "V", "largest peak-to-peak voltage of a capacitor in use"),
    Column("inrush_A", "inrush", "A", "highest input current at start-up from empty capacitors"),
    Column(
        "start_up_stress", "start-up stress", "1", "highest start-up voltage over rating among the elements"
    ),
    Column("overstressed", "overstressed at start-up", "", "elements that start-up takes beyond their class"),
    Column("wiring", "wiring", "", "wiring code"),
)
"""Columns of `finalist_frame`, in their order."""

_IN_SHORTLIST = (
    "exact_area_mm2",
    "exact_place",
    "exact_ohm",
    "blend_ohm",
    "correction",
    "ratio_shift",
    "exact_fits",
    "highest_ripple_V",
    "inrush_A",
    "start_up_stress",
    "overstressed",
)
EXACT_COLUMNS = tuple(column for column in COLUMNS if column.name in _IN_SHORTLIST)
"""Those that a shortlist shows beside its own."""


def finalist_frame(best: Sequence[Finalist]) -> pd.DataFrame:
    """Write finalists as a table.

    Parameters
    ----------
    best
        The finalists, in the order of the shortlist.

    Returns
    -------
    pandas.DataFrame
        One row each, with the columns `COLUMNS`; their units are in ``attrs["units"]``.
    """
    import pandas as pd  # noqa: PLC0415 -- slow to import

    areas = np.array([one.area if one.holds else np.inf for one in best])
    values = {
        "place": np.arange(1, len(best) + 1),
        "id": [one.converter.id for one in best],
        "given_area_mm2": [one.given_area for one in best],
        "exact_area_mm2": np.where(np.isfinite(areas), areas, np.nan),
        "exact_place": np.argsort(np.argsort(areas, kind="stable"), kind="stable") + 1,
        "slow_limit_ohm": [float(one.impedance.slow[0]) for one in best],
        "fast_limit_ohm": [float(one.impedance.fast[0]) for one in best],
        "blend_ohm": [one.blended for one in best],
        "loop_blend_ohm": [one.loop_blended for one in best],
        "exact_ohm": [one.exact for one in best],
        "correction": [one.exact / one.blended for one in best],
        "ratio_shift": [one.ratio_shift for one in best],
        "exact_fits": [_fits(one) for one in best],
        "highest_ripple_V": [max(float(p.ripple.max()) for p in one.points) for one in best],
        "inrush_A": [one.inrush for one in best],
        "start_up_stress": [_stress(one) for one in best],
        "overstressed": [", ".join(_named(one.overstressed)) for one in best],
        "wiring": [one.converter.code for one in best],
    }
    frame = pd.DataFrame({column.name: values[column.name] for column in COLUMNS})
    frame.attrs["units"] = {column.name: column.unit for column in COLUMNS}
    return frame


def _fits(one: Finalist) -> bool:
    def area(*kinds: str) -> float:
        return sum(element.area for element in one.elements if element.kind in kinds)

    budgets = (
        (one.brief.area, area("capacitor", "switch")),
        (one.brief.capacitor_area, area("capacitor")),
        (one.brief.silicon_area, area("switch")),
    )
    return one.holds and all(most is None or used <= most * (1 + _ROUNDING) for most, used in budgets)


def _stress(one: Finalist) -> float:
    stands = np.array([element.rating for element in one.elements])
    return float((one.start_up_peaks / stands).max())


def _named(overstressed: Sequence[Overstress]) -> list[str]:
    return [f"{one.name} {one.voltage:.3g} V" for one in overstressed if one.when == "start-up"]
