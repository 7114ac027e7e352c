"""The optimality conditions of a sizing task: one small system of equations per candidate.

Prices decide everything: the elements answer them in closed form (`elements`), so a task has as many unknowns
as it has prices and free scalars, whatever the number of elements.
"""

from __future__ import annotations

import dataclasses
from dataclasses import dataclass
from typing import TYPE_CHECKING

import numpy as np

from capmuster.rank.sizing.dual import Dual, combine, exp, log
from capmuster.rank.sizing.elements import Kind, KindPrices, KindResponse, respond
from capmuster.rank.sizing.sides import Blend, Held, Whole
from capmuster.rank.sizing.task import Objective
from capmuster.rank.sizing.unknowns import Unknowns, read

if TYPE_CHECKING:
    from numpy.typing import NDArray

    from capmuster.rank.sizing.case import Case

    Floats = NDArray[np.float64]

__all__ = ["Problem", "Snapshot"]

_PREFERENCE = 1e-12


@dataclass(frozen=True, slots=True)
class Snapshot:
    """What bounds and areas are computed from, at one set of unknowns.

    Attributes
    ----------
    slow, fast_c : (B,) float array
        Prices of ``sum slow_i / A_i`` and ``sum fast_i / A_i`` of the capacitors.
    fast_s : tuple of (B,) float array
        The latter for each group of switches.
    theta_c, theta_s, nu : (B,) float array
        Prices of capacitor area, of silicon area and of loss.
    f, current, duty_1 : (B,) float array
        Frequency [Hz], load current where it is free (else 1) [A], share of phase 1.
    capacitors, switches : KindResponse, tuple of KindResponse
        Responses of the elements.
    dual : (B,) float array
        The Lagrangian at its least over all areas.
    slope_f, slope_load, slope_duty : (B,) float array
        Its slope by log f, by log I and by the share of phase 1.
    falling : (B,) float array
        Share of the price of X that falls with frequency.
    density : (B,) float array
        Price of output power against area, where the load is free (else 0).
    """

    slow: Floats
    fast_c: Floats
    fast_s: tuple[Floats, ...]
    theta_c: Floats
    theta_s: Floats
    nu: Floats
    f: Floats
    current: Floats
    duty_1: Floats
    capacitors: KindResponse
    switches: tuple[KindResponse, ...]
    dual: Floats
    slope_f: Floats
    slope_load: Floats
    slope_duty: Floats
    falling: Floats
    density: Floats


@dataclass(frozen=True, slots=True)
class Problem:
    """One task for B candidates.

    Attributes
    ----------
    case : Case
        The figures of the task.
    capacitors : Kind
        Capacitors.
    switches : tuple of Kind
        All switches, or those of either phase where the duty is free.
    names : tuple of str
        The unknowns, in the order of their equations.
    reference : (d, B) float array
        Scale of the unknowns that stand for a price.
    """

    case: Case
    capacitors: Kind
    switches: tuple[Kind, ...]
    names: tuple[str, ...]
    reference: Floats

    def take(self, places: NDArray[np.intp]) -> Problem:
        """Return the candidates at these places only."""
        return dataclasses.replace(
            self,
            case=self.case.take(places),
            capacitors=self.capacitors.take(places),
            switches=tuple(group.take(places) for group in self.switches),
            reference=self.reference[:, places],
        )

    def conditions(self, values: Floats, weight: float = 1.0) -> tuple[list[Dual], Snapshot]:
        """Return the residual of every optimality condition, and a snapshot for the bounds.

        Parameters
        ----------
        values : (d, B) float array
            Unknowns, in the order of `names`.
        weight : float, optional
            Weight of the objective: with 0 the Lagrangian is that of the limits alone.

        Returns
        -------
        residuals : list of Dual
            One per unknown, zero at the optimum.
        snapshot : Snapshot
        """
        case, u = self.case, read(self.case, self.names, values, self.reference, weight)
        sides = (Held if case.held else Blend)(case, u, weight)
        fast_c, fast_s = sides.log_fast, [sides.log_fast]
        if u.log_shares:
            fast_c = fast_c - u.log_shares[0] - u.log_shares[1]  # 1/D1 + 1/D2 = 1/(D1 D2)
            fast_s = [sides.log_fast - log_shares for log_shares in u.log_shares]
        leads = case.objective is Objective.LOSS and weight > 0.0
        capacitors = respond(
            self.capacitors, KindPrices(sides.log_slow, fast_c, u.theta_c, u.nu, u.log_f, leads)
        )
        switches = tuple(
            respond(group, KindPrices(sides.log_slow, log_fast, u.theta_s, u.nu, u.log_f, leads))
            for group, log_fast in zip(self.switches, fast_s, strict=True)
        )
        whole = _sum_up(case, u, capacitors, switches)
        rows = sides.rows(u, whole)
        self._limit_rows(u, sides, whole, rows)
        total = capacitors.total + sum(group.total for group in switches)
        up, down = _pulls_of_load(case, u, sides, whole)
        if "log_load" in self.names:
            # Without any fixed loss the density is the same at every load: a faint preference settles for the
            # most.
            faint = np.where(case.controller + case.cycle > 0.0, 0.0, _PREFERENCE) * total
            rows["log_load"] = log(up + 1e-16 * total) - log(down + faint) + u.beyond_load
        slope_duty = np.zeros_like(case.budget)
        if u.log_shares:
            by_phase = [capacitors.Y + group.Y for group in switches]
            rows["duty"] = u.free["duty"] - 0.5 * log(by_phase[0] / by_phase[1])
            first, second = (np.exp(log_shares.value) for log_shares in u.log_shares)
            slope_duty = by_phase[1].value / second**2 - by_phase[0].value / first**2
            slope_duty = slope_duty * np.exp(sides.log_fast.value)
        snapshot = Snapshot(
            slow=np.exp(sides.log_slow.value),
            fast_c=np.exp(fast_c.value),
            fast_s=tuple(np.exp(log_fast.value) for log_fast in fast_s),
            theta_c=u.theta_c.value,
            theta_s=u.theta_s.value,
            nu=u.nu.value,
            f=np.exp(u.log_f.value),
            current=np.ones_like(case.budget) * u.current.value,
            duty_1=np.exp(u.log_shares[0].value) if u.log_shares else np.full_like(case.budget, np.nan),
            capacitors=capacitors,
            switches=switches,
            dual=2.0 * total + self._offset(u, sides, weight),
            slope_f=u.nu.value * whole.cycling.value
            - sides.falling * np.exp(sides.log_slow.value) * whole.X.value,
            slope_load=np.zeros_like(case.budget) + up.value - down.value,
            slope_duty=slope_duty,
            falling=sides.falling,
            density=np.exp(u.free["density"].value) if "density" in u.free else np.zeros_like(case.budget),
        )
        return [rows[name] for name in self.names], snapshot

    def _limit_rows(self, u: Unknowns, sides: Blend | Held, whole: Whole, rows: dict[str, Dual]) -> None:
        """Add the conditions on areas, on the loss and on the density."""
        case, area = self.case, whole.area_c + whole.area_s
        for name, most, used in (
            ("area", case.area, area),
            ("area_c", case.area_c, whole.area_c),
            ("area_s", case.area_s, whole.area_s),
        ):
            if name in u.price:
                rows[name] = np.log(most) - log(used) - u.log_load
        droop = sides.droop(u, whole) if "loss" in u.price or "density" in u.free else Dual(0.0)
        if "loss" in u.price:
            budget = case.budget - case.conduction * case.lead * u.current - case.controller / u.current
            budget = Dual(np.maximum(budget.value, 1e-2 * case.budget), budget.slopes)
            rows["loss"] = log(budget) - log(case.conduction * droop + whole.loss)
        if "density" in u.free:
            output = case.ideal - case.lead * u.current - droop
            # Under the loss limit the output is at least efficiency x ideal; far from it, half of that will
            # do.
            least = 0.5 * case.ideal**2 / (case.ideal + case.budget)
            output = combine(
                np.maximum(output.value, least), (np.where(output.value > least, 1.0, 0.0), output)
            )
            rows["density"] = u.free["density"] - log(area) + log(output)

    def _offset(self, u: Unknowns, sides: Blend | Held, weight: float) -> Floats:
        """Return the Lagrangian less its part by the elements."""
        case, current, nu = self.case, u.current.value, u.nu.value
        offset = sides.offset + np.exp(sides.log_fast.value) * case.loop * current
        offset = offset + nu * case.cycle * np.exp(u.log_f.value) / current
        fixed = case.controller / current + case.conduction * case.lead * current
        if case.objective is Objective.LOSS:
            offset = offset + weight * fixed
        else:
            offset = offset - nu * (case.budget - fixed)
        for name, most in (("area", case.area), ("area_c", case.area_c), ("area_s", case.area_s)):
            if name in u.price:
                offset = offset - u.price[name].value * most / current
        if "density" in u.free:
            offset = offset - weight * np.exp(u.free["density"].value) * (case.ideal - case.lead * current)
        return np.asarray(offset)


def _sum_up(case: Case, u: Unknowns, capacitors: KindResponse, switches: tuple[KindResponse, ...]) -> Whole:
    """Return the sums over all elements."""
    Y_c, Y_s = capacitors.Y, [group.Y for group in switches]
    if u.log_shares:
        Y_c = Y_c * exp(-(u.log_shares[0] + u.log_shares[1]))
        Y_s = [Y * exp(-log_shares) for Y, log_shares in zip(Y_s, u.log_shares, strict=True)]
    y, area_s, cycling, loss = Y_c + case.loop * u.current, Dual(0.0), capacitors.cycling, capacitors.loss
    for Y, group in zip(Y_s, switches, strict=True):
        y, area_s = y + Y, area_s + group.area
        cycling, loss = cycling + group.cycling, loss + group.loss
    fixed = case.cycle * exp(u.log_f) / u.current
    return Whole(capacitors.X, y, capacitors.area, area_s, cycling + fixed, loss + fixed)


def _pulls_of_load(case: Case, u: Unknowns, sides: Blend | Held, whole: Whole) -> tuple[Dual, Dual]:
    """Return by how much the Lagrangian grows and falls with the logarithm of the free load."""
    if not u.log_load.slopes:
        return Dual(0.0), Dual(0.0)
    up = (exp(sides.log_fast) * case.loop + sides.lead_price * case.lead) * u.current
    for name, area in (
        ("area", whole.area_c + whole.area_s),
        ("area_c", whole.area_c),
        ("area_s", whole.area_s),
    ):
        if name in u.price:
            up = up + u.price[name] * area
    return up, u.nu * (case.controller + case.cycle * exp(u.log_f)) / u.current
