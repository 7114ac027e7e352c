"""What areas and frequency do to a candidate: the coefficients of its impedance and of its losses."""

from __future__ import annotations

import dataclasses
from dataclasses import dataclass
from typing import TYPE_CHECKING

import numpy as np

from capmuster.enumerate.errors import CapmusterError

if TYPE_CHECKING:
    from collections.abc import Sequence

    from numpy.typing import ArrayLike, NDArray

    Floats = NDArray[np.float64]

__all__ = ["Impedance", "LossModel", "Losses", "impedance", "losses", "mean_model"]

_CAPACITOR = ("alpha", "series", "plate", "leakage_c")
_SWITCH = ("beta", "gate", "output_charge", "leakage_s")
_WHOLE = ("controller", "cycle", "loop", "lead")


@dataclass(frozen=True, slots=True)
class LossModel:
    """N candidates of n capacitors and m switches each; smaller ones are padded with zeros.

    Parasitics and output charge depend on voltages, so a model belongs to one input voltage. An element with
    weight 0 (`alpha` or `beta`: idle, or padding) gets no area here; what its smallest device costs belongs
    into `cycle` and `controller`.

    Attributes
    ----------
    alpha : (N, n) float array
        ``a_c^2 / d``: multiplier squared over density [ohm Hz mm2].
    beta : (N, m) float array
        ``a_r^2 rho``: multiplier squared times specific on-resistance, without the duty factor [ohm mm2].
    phase : (N, m) int array
        Phase in which a switch is on, 1 or 2; any value for padding.
    series : (N, n) float array
        ``a_c^2 sigma``: multiplier squared times specific series resistance [ohm mm2].
    plate : (N, n) float array
        Plate parasitic ``kappa d dU^2``, dU the step of the plate between the phases [J/mm2].
    leakage_c : (N, n) float array
        Loss by leakage of a capacitor [W/mm2].
    gate : (N, m) float array
        Gate charge times drive voltage [J/mm2].
    output_charge : (N, m) float array
        ``q_oss(V) V`` at the blocking voltage [J/mm2].
    leakage_s : (N, m) float array
        Loss by leakage of a switch [W/mm2].
    controller : (N,) float array
        Power that the controller takes [W].
    cycle : (N,) float array
        Fixed energy per cycle [J].
    loop : (N,) float array
        Resistance of the wiring that the phase currents flow through, as it adds to the fast-switching limit
        [ohm].
    lead : (N,) float array
        Resistance of the wiring in series with the output [ohm].
    """

    alpha: Floats
    beta: Floats
    phase: NDArray[np.int8]
    series: Floats
    plate: Floats
    leakage_c: Floats
    gate: Floats
    output_charge: Floats
    leakage_s: Floats
    controller: Floats
    cycle: Floats
    loop: Floats
    lead: Floats

    @classmethod
    def build(
        cls,
        alpha: ArrayLike,
        beta: ArrayLike,
        phase: ArrayLike = 1,
        *,
        series: ArrayLike = 0.0,
        plate: ArrayLike = 0.0,
        leakage_c: ArrayLike = 0.0,
        gate: ArrayLike = 0.0,
        output_charge: ArrayLike = 0.0,
        leakage_s: ArrayLike = 0.0,
        controller: ArrayLike = 0.0,
        cycle: ArrayLike = 0.0,
        loop: ArrayLike = 0.0,
        lead: ArrayLike = 0.0,
    ) -> LossModel:
        """Return a model from arrays that broadcast to their shapes; what is not given is 0.

        Parameters
        ----------
        alpha, beta, phase, series, plate, leakage_c, gate, output_charge, leakage_s, controller, cycle, loop,
        lead
            As the attributes.

        Raises
        ------
        CapmusterError
            If a value is negative or not finite, or the shapes do not fit.
        """
        alpha = np.atleast_2d(np.asarray(alpha, dtype=np.float64))
        beta = np.atleast_2d(np.asarray(beta, dtype=np.float64))
        given = {
            "alpha": (alpha, alpha.shape),
            "beta": (beta, beta.shape),
            "series": (series, alpha.shape),
            "plate": (plate, alpha.shape),
            "leakage_c": (leakage_c, alpha.shape),
            "gate": (gate, beta.shape),
            "output_charge": (output_charge, beta.shape),
            "leakage_s": (leakage_s, beta.shape),
            "controller": (controller, alpha.shape[:1]),
            "cycle": (cycle, alpha.shape[:1]),
            "loop": (loop, alpha.shape[:1]),
            "lead": (lead, alpha.shape[:1]),
        }
        arrays = {name: _checked(name, value, shape) for name, (value, shape) in given.items()}
        if len(alpha) != len(beta):
            raise CapmusterError(f"alpha has {len(alpha)} candidates and beta has {len(beta)}")
        for name in ("alpha", "beta"):
            idle = np.flatnonzero(~(arrays[name] > 0.0).any(axis=1))
            if len(idle):
                raise CapmusterError(
                    f"{name} of candidate {idle[0]} is 0 throughout", accepted="one weight at least"
                )
        phases = np.broadcast_to(np.asarray(phase, dtype=np.int8), beta.shape)
        if np.any((beta > 0.0) & ~np.isin(phases, (1, 2))):
            raise CapmusterError("phase of a switch is neither 1 nor 2")
        return cls(phase=phases, **arrays)

    def __len__(self) -> int:
        """Return the number of candidates."""
        return len(self.alpha)

    def take(self, places: NDArray[np.intp] | slice) -> LossModel:
        """Return the candidates at these places only."""
        return LossModel(*(getattr(self, field.name)[places] for field in dataclasses.fields(self)))


def _checked(name: str, value: ArrayLike, shape: tuple[int, ...]) -> Floats:
    """Return a float array of the shape, finite and not negative."""
    array = np.asarray(value, dtype=np.float64)
    try:
        array = np.broadcast_to(array, shape)
    except ValueError as error:
        raise CapmusterError(f"{name} has shape {array.shape}", accepted=f"shape {shape}") from error
    if not np.all(np.isfinite(array)) or np.any(array < 0.0):
        raise CapmusterError(f"{name} has a value that is negative or not finite")
    return array


def mean_model(models: Sequence[LossModel], shares: ArrayLike) -> LossModel:
    """Return the model whose losses are the time means of several: for sizing over a load profile.

    Parameters
    ----------
    models : sequence of LossModel
        The candidates at each operating point; they differ in losses only.
    shares : (K,) array
        Share of the time of each point, in all at most 1: the rest of the time the converter is off [1].

    Returns
    -------
    LossModel
    """
    weights = np.asarray(shares, dtype=np.float64)
    mean = ("plate", "leakage_c", "gate", "output_charge", "leakage_s", "controller", "cycle")
    parts = {
        name: sum(w * getattr(model, name) for w, model in zip(weights, models, strict=True)) for name in mean
    }
    return dataclasses.replace(models[0], **parts)


@dataclass(frozen=True, slots=True)
class Impedance:
    """Output impedance of N candidates and what it is made of; all (N,) float arrays [ohm].

    Attributes
    ----------
    slow
        Slow-switching limit.
    switches, series, loop
        Parts of the fast-switching limit: on-resistances, series resistances of the capacitors, wiring.
    lead
        Wiring in series with the output.
    """

    slow: Floats
    switches: Floats
    series: Floats
    loop: Floats
    lead: Floats

    @property
    def fast(self) -> Floats:
        """Fast-switching limit."""
        return self.switches + self.series + self.loop

    @property
    def output(self) -> Floats:
        """Quadratic blend of both limits, and the wiring at the output."""
        return np.hypot(self.slow, self.fast) + self.lead


def impedance(
    model: LossModel, capacitors: ArrayLike, switches: ArrayLike, frequency: ArrayLike, duty: ArrayLike = 0.5
) -> Impedance:
    """Return the impedance of sized candidates.

    Parameters
    ----------
    model : LossModel
        Candidates.
    capacitors, switches : (N, n), (N, m) array
        Areas [mm2].
    frequency : (N,) array
        Switching frequency [Hz].
    duty : (N,) array, optional
        Share of phase 1 [1].

    Returns
    -------
    Impedance
    """
    D = np.asarray(duty, dtype=np.float64)
    by_phase = [_sum_over(np.where(model.phase == p, model.beta, 0.0), switches) for p in (1, 2)]
    return Impedance(
        slow=_sum_over(model.alpha, capacitors) / np.asarray(frequency, dtype=np.float64),
        switches=by_phase[0] / D + by_phase[1] / (1.0 - D),
        series=_sum_over(model.series, capacitors) / (D * (1.0 - D)),
        loop=model.loop,
        lead=model.lead,
    )


def _sum_over(weights: Floats, areas: ArrayLike) -> Floats:
    """Return the sum of weight over area; an element of no weight adds nothing."""
    areas = np.asarray(areas, dtype=np.float64)
    with np.errstate(divide="ignore", invalid="ignore"):
        return np.asarray(np.where(weights > 0.0, weights / areas, 0.0).sum(axis=1))


@dataclass(frozen=True, slots=True)
class Losses:
    """Loss of N candidates by term; all (N,) float arrays [W], none counted in another.

    Attributes
    ----------
    slow, switches, series, wiring
        Conduction: charge redistribution, on-resistances, series resistances of the capacitors, wiring. They
        are the shares of ``I^2 R_out`` by the blend, ``I^2 x^2 / R`` and ``I^2 y y_k / R``; all 0 where the
        output is held.
    held
        Where the output is held below its ideal: the whole droop times the current.
    plate, gate, output_charge
        Loss in proportion to frequency: plate parasitics, gate drive, output charge of the switches.
    cycle
        Fixed energy per cycle times frequency.
    leakage
        Leakage of capacitors and switches.
    controller
        Controller.
    """

    slow: Floats
    switches: Floats
    series: Floats
    wiring: Floats
    held: Floats
    plate: Floats
    gate: Floats
    output_charge: Floats
    cycle: Floats
    leakage: Floats
    controller: Floats

    @property
    def conduction(self) -> Floats:
        """All that grows with the load current [W]."""
        return self.slow + self.switches + self.series + self.wiring + self.held

    @property
    def total(self) -> Floats:
        """Sum of all terms [W]."""
        return self.conduction + self.fixed

    @property
    def fixed(self) -> Floats:
        """All that does not depend on the load current [W]."""
        return self.plate + self.gate + self.output_charge + self.cycle + self.leakage + self.controller


def losses(
    model: LossModel,
    capacitors: ArrayLike,
    switches: ArrayLike,
    frequency: ArrayLike,
    duty: ArrayLike = 0.5,
    *,
    mean_square_current: ArrayLike = 0.0,
    held: ArrayLike = 0.0,
) -> Losses:
    """Return the losses of sized candidates, term by term.

    Parameters
    ----------
    model, capacitors, switches, frequency, duty
        As in `impedance`.
    mean_square_current : (N,) array, optional
        Mean square of the load current where the output is not held [A2].
    held : (N,) array, optional
        Droop times current where the output is held [W].

    Returns
    -------
    Losses
    """
    f = np.asarray(frequency, dtype=np.float64)
    A, S = np.asarray(capacitors, dtype=np.float64), np.asarray(switches, dtype=np.float64)
    z = impedance(model, A, S, f, duty)
    blend = np.hypot(z.slow, z.fast)
    square = np.asarray(mean_square_current, dtype=np.float64)
    per_fast = square * z.fast / blend
    return Losses(
        slow=square * z.slow**2 / blend,
        switches=per_fast * z.switches,
        series=per_fast * z.series,
        wiring=per_fast * z.loop + square * z.lead,
        held=np.broadcast_to(np.asarray(held, dtype=np.float64), f.shape),
        plate=f * np.einsum("ij,ij->i", model.plate, A),
        gate=f * np.einsum("ij,ij->i", model.gate, S),
        output_charge=f * np.einsum("ij,ij->i", model.output_charge, S),
        cycle=f * model.cycle,
        leakage=np.einsum("ij,ij->i", model.leakage_c, A) + np.einsum("ij,ij->i", model.leakage_s, S),
        controller=np.broadcast_to(model.controller, f.shape),
    )
