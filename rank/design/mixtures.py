"""Fictitious candidates between others: nothing to build, but a source of prices for bounds."""

from __future__ import annotations

from dataclasses import dataclass, fields
from typing import TYPE_CHECKING

from capmuster.rank.sizing import LossModel

if TYPE_CHECKING:
    import numpy as np
    from numpy.typing import NDArray

    from capmuster.enumerate.converters import ConverterTable
    from capmuster.rank.design.operation import Candidates, Modelled
    from capmuster.rank.evaluation import Elements
    from capmuster.rank.inputs.brief import Brief
    from capmuster.rank.scores.switchtable import SwitchTable

    Floats = NDArray[np.float64]


@dataclass(frozen=True, slots=True)
class Blend:
    """N candidates whose coefficients are means of those of two others.

    Attributes
    ----------
    first, second
        The others: the same converters with other classes, or trees with as many switches in each phase.
    weight
        Weight of the second, shape (N,) [1].
    """

    first: Modelled
    second: Candidates
    weight: Floats

    @property
    def table(self) -> ConverterTable:
        """The converters."""
        return self.first.table

    @property
    def switches(self) -> SwitchTable:
        """Switches of the first."""
        return self.first.switches

    @property
    def elements(self) -> Elements:
        """Classes of the first."""
        return self.first.elements

    @property
    def brief(self) -> Brief:
        """The job."""
        return self.first.brief

    def model(self, volts: float) -> LossModel:
        """Mean coefficients at an input voltage [V]."""
        models = (self.first.model(volts), self.second.model(volts))
        values = []
        for one in fields(LossModel):
            old, new = (getattr(model, one.name) for model in models)
            if one.name == "phase":
                values.append(old)
            else:
                weight = self.weight if old.ndim == 1 else self.weight[:, None]
                values.append((1 - weight) * old + weight * new)
        return LossModel(*values)

    def ideal(self, volts: float) -> Floats:
        """Output without droop, its magnitude, shape (N,) [V]."""
        return self.first.ideal(volts)

    def take(self, rows: NDArray[np.intp]) -> Blend:
        """Return the chosen rows."""
        return Blend(self.first.take(rows), self.second.take(rows), self.weight[rows])
