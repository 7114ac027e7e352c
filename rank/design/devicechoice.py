"""The class of every element together with the sizes, for many candidates at once.

Classes by least area per capacitance and conductance are a start; so are classes by least loss. From each
start the sizes give prices, the prices better classes (`capmuster.rank.design.classprices`), and these new
sizes, for as long as that helps. What results is a local optimum with exact bounds for its classes.
"""

from __future__ import annotations

from dataclasses import replace
from typing import TYPE_CHECKING

import numpy as np

from capmuster.rank.design.classprices import at_prices, differs
from capmuster.rank.design.gatedrive import rail_driven
from capmuster.rank.design.objectives import Sized, size_candidates
from capmuster.rank.sizing import Prices
from capmuster.rank.structs import placed, rows_of

if TYPE_CHECKING:
    from numpy.typing import NDArray

    from capmuster.rank.design.operation import Candidates

_ROUNDS = 4
_BETTER = 1e-9
_TINY = 1e-30  # [J/mm2]: a technology without plates has a price of area all the same


def choose_and_size(candidates: Candidates) -> tuple[Candidates, Sized]:
    """Choose classes and sizes for the objective of the brief.

    Parameters
    ----------
    candidates
        Candidates with classes by least area.

    Returns
    -------
    tuple of Candidates and Sized
        With ``drive = "rails"`` every working switch has a class that the rails can drive, where one exists;
        candidates without one have no sizes.
    """
    if not len(candidates.table):
        return candidates, size_candidates(candidates)
    brief = candidates.brief
    allowed = None
    if brief.drive == "rails":
        allowed = rail_driven(candidates.table, candidates.switches, brief)
        candidates = at_prices(candidates, _led(candidates, by_area=1.0, by_loss=0.0), allowed)
    best, sized = _improved(candidates, size_candidates(candidates), allowed)
    for by_area in (0.0, 1.0):
        other = at_prices(candidates, _led(candidates, by_area=by_area, by_loss=1.0), allowed)
        rows = np.flatnonzero(differs(candidates, other))
        if len(rows):
            part = other.take(rows)
            found = _improved(part, size_candidates(part), None if allowed is None else allowed[rows])
            best, sized = _better(best, sized, rows, *found)
    if allowed is not None:
        unable = ((candidates.switches.charges > 0) & ~allowed.any(axis=-1)).any(axis=1)
        sized = replace(sized, merit=np.where(unable, np.nan, sized.merit))
    return best, sized


def _led(candidates: Candidates, *, by_area: float, by_loss: float) -> Prices:
    """Prices for a first choice: of area, of loss at the highest frequency, or of both.

    An area of 1 mm2 counts as much as its loss per cycle does with the classes of least area.
    """
    model, f = candidates.model(candidates.brief.input_nominal), candidates.brief.frequency
    one = np.ones(len(candidates.table))
    areas = [by_area * f * np.maximum(part.mean(axis=1), _TINY) for part in (model.plate, model.gate)]
    # The price of the slow limit falls with f; series resistance counts beside it as in R_SSL at f.
    return Prices(one / f, one, one, one, areas[0], areas[1], by_loss * one, f * one)


def _improved(best: Candidates, sized: Sized, allowed: NDArray[np.bool_] | None) -> tuple[Candidates, Sized]:
    """Follow prices to better classes for as long as the merit falls."""
    open_ = np.flatnonzero(np.isfinite(sized.merit))
    for _ in range(_ROUNDS):
        if not len(open_):
            break
        now = best.take(open_)
        some = None if allowed is None else allowed[open_]
        there = at_prices(now, rows_of(sized.prices, open_), some)
        changed = np.flatnonzero(differs(now, there))
        if not len(changed):
            break
        open_, there = open_[changed], there.take(changed)
        found = size_candidates(there)
        falls = np.flatnonzero(_less(found.merit, sized.merit[open_]))
        best, sized = _better(best, sized, open_, there, found)
        open_ = open_[falls]
    return best, sized


def _less(new: NDArray[np.float64], old: NDArray[np.float64]) -> NDArray[np.bool_]:
    """Where a merit is better, or there was none."""
    return np.isfinite(new) & ~(new >= old - _BETTER * np.abs(old))


def _better(
    best: Candidates, sized: Sized, rows: NDArray[np.intp], part: Candidates, found: Sized
) -> tuple[Candidates, Sized]:
    """Put in what is better."""
    won = np.flatnonzero(_less(found.merit, sized.merit[rows]))
    if not len(won):
        return best, sized
    elements = placed(best.elements, rows[won], rows_of(part.elements, won))
    return replace(best, elements=elements), placed(sized, rows[won], rows_of(found, won))
