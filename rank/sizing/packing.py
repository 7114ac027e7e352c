"""From a loss model to the kernel's elements and back."""

from __future__ import annotations

from dataclasses import dataclass
from typing import TYPE_CHECKING

import numpy as np

from capmuster.rank.sizing.elements import Kind

if TYPE_CHECKING:
    from numpy.typing import NDArray

    from capmuster.rank.sizing.model import LossModel

    Floats = NDArray[np.float64]

__all__ = ["Packed", "pack"]


@dataclass(frozen=True, slots=True)
class Packed:
    """Elements of a block of candidates as the kernel takes them.

    Attributes
    ----------
    capacitors : Kind
        Capacitors.
    switches : tuple of Kind
        All switches where the duty is given, or those of either phase where it is free.
    columns : tuple of (B, k) int array or None
        Column of the model that each switch of a group comes from; None for all in order.
    """

    capacitors: Kind
    switches: tuple[Kind, ...]
    columns: tuple[NDArray[np.intp] | None, ...]

    def take(self, places: NDArray[np.intp]) -> Packed:
        """Return the candidates at these places only."""
        return Packed(
            self.capacitors.take(places),
            tuple(group.take(places) for group in self.switches),
            tuple(None if part is None else part[places] for part in self.columns),
        )

    def unpack_switches(self, parts: list[Floats], count: int) -> Floats:
        """Return figures of all switches in the model's order.

        Parameters
        ----------
        parts : list of (k, B) float array
            Figures of each group; 0 for padding.
        count : int
            Number of the model's columns.

        Returns
        -------
        (B, count) float array
        """
        whole = np.zeros((parts[0].shape[1], count))
        for part, columns in zip(parts, self.columns, strict=True):
            if columns is None:
                whole += part.T
            else:
                one = np.zeros_like(whole)
                np.put_along_axis(one, columns, part.T, axis=1)
                whole += one
        return whole


def pack(model: LossModel, duty: Floats | None) -> Packed:
    """Return the elements of a model.

    Parameters
    ----------
    model : LossModel
        B candidates.
    duty : (B,) float array or None
        Share of phase 1; None leaves it free.

    Returns
    -------
    Packed
    """
    cycle = model.gate + model.output_charge
    columns: tuple[NDArray[np.intp] | None, ...]
    if duty is None:
        series = model.series
        by_phase = [_columns_of(model, phase) for phase in (1, 2)]
        columns = tuple(by_phase)
        groups = tuple(
            _kind(
                None,
                np.take_along_axis(np.where(model.phase == phase, model.beta, 0.0), places, axis=1),
                np.take_along_axis(cycle, places, axis=1),
                np.take_along_axis(model.leakage_s, places, axis=1),
            )
            for phase, places in zip((1, 2), by_phase, strict=True)
        )
    else:
        D = duty[:, None]
        series = model.series / (D * (1.0 - D))
        columns = (None,)
        groups = (_kind(None, model.beta / np.where(model.phase == 1, D, 1.0 - D), cycle, model.leakage_s),)
    return Packed(_kind(model.alpha, series, model.plate, model.leakage_c), groups, columns)


def _columns_of(model: LossModel, phase: int) -> NDArray[np.intp]:
    """Return the columns of the switches of a phase, filled up with others."""
    there = (model.phase == phase) & (model.beta > 0.0)
    width = max(1, int(there.sum(axis=1).max()))
    return np.argsort(~there, axis=1, kind="stable")[:, :width]


def _kind(slow: Floats | None, fast: Floats, cycle: Floats, leakage: Floats) -> Kind:
    """Return elements first; those without weight leak, so that they cost something and get no area."""
    weight = fast if slow is None else slow
    return Kind(
        slow=None if slow is None else _rows(slow),
        fast=_rows(fast if slow is None else np.where(slow > 0.0, fast, 0.0)),
        cycle=_rows(cycle),
        leakage=_rows(np.where(weight > 0.0, leakage, 1.0)),
    )


def _rows(array: Floats) -> Floats:
    """Return the transpose, contiguous."""
    return np.ascontiguousarray(array.T)
