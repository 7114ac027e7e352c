"""Where the search for prices begins: every candidate lumped to one capacitor and one switch."""

from __future__ import annotations

from dataclasses import dataclass
from typing import TYPE_CHECKING

import numpy as np

from capmuster.rank.sizing.case import ABSENT
from capmuster.rank.sizing.task import Objective
from capmuster.rank.sizing.unknowns import LIMITS

if TYPE_CHECKING:
    from numpy.typing import NDArray

    from capmuster.rank.sizing.case import Case
    from capmuster.rank.sizing.elements import Kind

    Floats = NDArray[np.float64]

__all__ = ["first_guess", "unknown_names"]

_ROUNDS = 5
_STEEP = 0.75  # share of the hardest impedance that the fast limit may start with
_INACTIVE = -3.0  # of the logarithm of a price that may turn out to be nothing


@dataclass(frozen=True, slots=True)
class _Lumped:
    """One capacitor and one switch in place of all: Cauchy-Schwarz areas, mean cost per area."""

    slow: Floats
    series: Floats
    fast: Floats
    cycle_c: Floats
    cycle_s: Floats
    leakage_c: Floats
    leakage_s: Floats


def _lump(capacitors: Kind, switches: tuple[Kind, ...]) -> _Lumped:
    """Return the lumped candidate, at 50 % duty where that is free."""
    free = len(switches) > 1
    slow = np.zeros_like(capacitors.fast) if capacitors.slow is None else capacitors.slow
    root = np.sqrt(slow)
    sum_c = root.sum(0)
    # An element without slow part has no area in this estimate; its series resistance would count infinite.
    series = np.divide(capacitors.fast, root, out=np.zeros_like(root), where=root > 0.0).sum(0)
    roots = [np.sqrt(group.fast) for group in switches]
    sum_s = np.asarray(sum(part.sum(0) for part in roots))

    def mean(parts: list[Floats], weights: list[Floats], total: Floats) -> Floats:
        whole = [np.einsum("ib,ib->b", w, part) for w, part in zip(weights, parts, strict=True)]
        return np.asarray(sum(whole) / total)

    return _Lumped(
        slow=sum_c**2,
        series=sum_c * series * (4.0 if free else 1.0),
        fast=sum_s**2 * (2.0 if free else 1.0),
        cycle_c=mean([capacitors.cycle], [root], sum_c),
        cycle_s=mean([group.cycle for group in switches], roots, sum_s),
        leakage_c=mean([capacitors.leakage], [root], sum_c),
        leakage_s=mean([group.leakage for group in switches], roots, sum_s),
    )


def unknown_names(case: Case, *, duty_free: bool) -> tuple[str, ...]:
    """Return the unknowns that a task has, in an order that elimination can follow."""
    by_loss, by_density = case.objective is Objective.LOSS, case.objective is Objective.DENSITY
    there = {
        "angle": True,
        "steep": case.held,
        "rate": case.held,
        "log_f": case.held or bool(np.any(case.log_f_most > case.log_f_least)),
        "loss": not by_loss,
        "impedance": bool(np.any(case.impedance < ABSENT)),
        # The least area needs no budget on itself.
        "area": case.objective is not Objective.AREA and bool(np.any(case.area < ABSENT)),
        "area_c": bool(np.any(case.area_c < ABSENT)),
        "area_s": bool(np.any(case.area_s < ABSENT)),
        "duty": duty_free,
        "density": by_density and bool(np.any(case.conduction > 0.0)),
        "log_load": by_density or bool(np.any(case.log_load_most > case.log_load_least)),
    }
    return tuple(name for name, wanted in there.items() if wanted)


@dataclass(frozen=True, slots=True)
class _Guess:
    """The lumped candidate at its guessed areas; all (B,) float arrays, per ampere where the load is free.

    `cycling` is the loss in proportion to frequency, `loss` that and leakage, `tight` where the impedance
    limit decides the area, `full` where the area budget does.
    """

    log_f: Floats
    load: Floats
    area: Floats
    x: Floats
    y: Floats
    cycling: Floats
    loss: Floats
    tight: NDArray[np.bool_]
    full: NDArray[np.bool_]

    @property
    def impedance(self) -> Floats:
        """Output impedance."""
        return np.hypot(self.x, self.y)


def first_guess(
    case: Case, capacitors: Kind, switches: tuple[Kind, ...], names: tuple[str, ...]
) -> tuple[Floats, Floats]:
    """Return unknowns to start from, and the references of their prices.

    Parameters
    ----------
    case : Case
        The task.
    capacitors, switches : Kind, tuple of Kind
        Elements.
    names : tuple of str
        Unknowns.

    Returns
    -------
    values, reference : (d, B) float array
    """
    lumped = _lump(capacitors, switches)
    values = {name: np.full_like(lumped.slow, _INACTIVE) for name in LIMITS}
    values["duty"] = np.zeros_like(lumped.slow)
    reference = {name: np.ones_like(lumped.slow) for name in names}
    if case.held:
        _guess_held(case, lumped, values, reference)
    else:
        guess = _guess(case, lumped)
        values["log_f"], values["log_load"] = guess.log_f, np.log(guess.load)
        values["angle"] = np.log(guess.y / guess.x)
        prices = _loss_prices if case.objective is Objective.LOSS else _area_prices
        prices(case, guess, values, reference)
    for name in ("impedance", "area", "area_c", "area_s"):
        if name in names:
            # no price on a limit that is not there
            reference[name] = np.where(getattr(case, name) < ABSENT, reference[name], 0.0)
    return np.stack([values[name] for name in names]), np.stack([reference[name] for name in names])


def _guess(case: Case, lumped: _Lumped) -> _Guess:
    """Return areas and frequency of the lumped candidate, by a few rounds of balance."""
    K = case.conduction
    load = case.easiest_load(K * (case.lead + case.loop))
    limit = case.impedance - case.lead * load
    room = np.minimum(case.area, case.area_c + case.area_s) / load
    budget = np.maximum(case.budget - case.controller / load - K * case.lead * load, 1e-3 * case.budget)
    log_f = 0.5 * (case.log_f_least + case.log_f_most)
    for _ in range(_ROUNDS):
        f = np.exp(log_f)
        S, F = np.cbrt(np.hypot(lumped.slow / f, lumped.series)) ** 2, np.cbrt(lumped.fast) ** 2
        share = S / (S + F)
        cycling = f * (lumped.cycle_c * share + lumped.cycle_s * (1.0 - share))
        spend = cycling + lumped.leakage_c * share + lumped.leakage_s * (1.0 - share)
        x, y = lumped.slow / f / share, lumped.series / share + lumped.fast / (1.0 - share)
        r = np.hypot(x, y)
        needed = r / np.maximum(limit - case.loop * load, 0.1 * limit)
        if case.objective is Objective.LOSS:
            area = np.maximum(np.sqrt(K * r / spend), needed)
        else:
            root = np.sqrt(np.maximum(budget**2 - 4.0 * K * r * spend, 0.0))
            area = np.maximum(2.0 * K * r / (budget + root), needed)
        area = np.minimum(area, room)
        loss = spend * area + case.cycle * f / load
        tight = needed >= 0.999 * area
        # The right frequency balances what falls with it, the price of R times x^2 / R, against what grows.
        paid = K * r / area
        if case.objective is Objective.LOSS:
            paid = np.where(tight | (K == 0.0), np.maximum(loss, paid), paid)
        balance = np.sqrt(paid * np.square(x / r) / (cycling * area))
        if case.objective is Objective.LOSS:
            balance = np.where(needed > room, needed / room, balance)
        else:
            balance = np.where(K > 0.0, balance, np.sqrt(budget / loss))
        move = np.clip(np.log(balance), -3.0, 3.0)
        log_f = np.clip(log_f + move, case.log_f_least, case.log_f_most)
    return _Guess(log_f, load, area, x / area, y / area, cycling * area, loss, tight, area >= 0.999 * room)


def _loss_prices(case: Case, guess: _Guess, values: dict[str, Floats], reference: dict[str, Floats]) -> None:
    """Guess the prices for the least loss, from price of R x R = price of area x area + loss."""
    R = guess.impedance
    kappa = np.maximum(case.conduction, guess.loss / R)
    for name in ("area", "area_c", "area_s"):
        values[name] = np.where(guess.full, 0.0, _INACTIVE)
        reference[name] = np.maximum(kappa * R - guess.loss, 0.05 * kappa * R) / guess.area
    values["impedance"] = np.where(guess.tight | (case.conduction == 0.0), 0.0, _INACTIVE)
    reference["impedance"] = np.maximum(kappa - case.conduction, 0.3 * kappa)


def _area_prices(case: Case, guess: _Guess, values: dict[str, Floats], reference: dict[str, Floats]) -> None:
    """Guess the prices for the least area, from price of R x R = area + price of loss x loss."""
    R, K, area = guess.impedance, case.conduction, guess.area
    output = np.maximum(case.ideal - R, 0.1 * case.ideal)
    values["density"] = np.log(area / output)
    by_output = area / output * R if "density" in reference else 0.0
    by_fixed = np.maximum(area - by_output, 0.1 * area) / np.maximum(K * R - guess.loss, 0.05 * K * R)
    nu = np.where(K > 0.0, by_fixed, area / guess.loss)
    values["loss"] = np.where(guess.tight & (K > 0.0), _INACTIVE, 0.0)
    reference["loss"] = nu
    values["impedance"] = np.where(guess.tight, 0.0, _INACTIVE)
    reference["impedance"] = (area + nu * guess.loss) / R


def _guess_held(case: Case, lumped: _Lumped, values: dict[str, Floats], reference: dict[str, Floats]) -> None:
    """Guess unknowns and prices where the output is held by frequency.

    With three quarters of the hardest impedance by the fast limit the switches are fixed, and the mean
    frequency is X h: the loss of the capacitors does not depend on their area, that of the switches grows
    with X.
    """
    by_loss = case.objective is Objective.LOSS
    least, most = np.exp(case.log_load_least), np.exp(case.log_load_most)
    load = np.clip(0.3 * case.impedance / (case.lead + case.loop), least, most)
    limit = case.impedance - case.lead * load
    y = _STEEP * limit
    spread = (case.wanted - case.lead * load) ** 2 - y**2
    h, slope = (case.share / np.sqrt(spread)).sum(axis=0), (case.share * y / spread**1.5).sum(axis=0)
    area_s = lumped.fast / np.maximum(y - case.loop * load, 0.2 * y)
    per_cycle = lumped.cycle_s * area_s + case.cycle / load
    by_capacitors = h * lumped.slow * lumped.cycle_c
    most_X = 0.9 * np.exp(case.log_f_most) * np.sqrt(limit**2 - y**2)
    if by_loss:
        room = np.minimum(case.area, case.area_c + case.area_s) / load
        unlimited = np.sqrt(lumped.slow * h * per_cycle / lumped.leakage_c)
        area_c = np.minimum(unlimited, np.maximum(room - area_s, 0.3 * room))
        X = np.minimum(lumped.slow / area_c, most_X)
    else:
        budget = case.budget - case.controller / load - by_capacitors - lumped.leakage_s * area_s
        X = np.clip(budget / (h * per_cycle), 1e-3 * most_X, most_X)
    area_c = lumped.slow / X
    cycling = by_capacitors + X * h * per_cycle
    # price of X x X = rate of the frequency's cost = price of area x area + loss of the capacitors
    push = np.maximum(X * h * per_cycle - lumped.leakage_c * area_c, 0.1 * cycling)
    nu = np.ones_like(area_c) if by_loss else area_c / push
    theta = push / area_c if by_loss else np.ones_like(area_c)
    least_wanted = case.wanted.min(axis=0) - case.lead * load
    values["angle"] = np.log(y / np.sqrt(least_wanted**2 - y**2))
    values["steep"] = np.log(y * np.exp(case.log_f_most) / X)
    values["rate"], values["log_f"], values["log_load"] = np.log(cycling), np.log(X * h), np.log(load)
    by_switches = theta * area_s + nu * (X * h * lumped.cycle_s + lumped.leakage_s) * area_s
    rest = by_switches - nu * cycling * y * slope / h
    values["impedance"] = np.where(rest > 0.0, 0.0, _INACTIVE)
    reference["impedance"] = np.maximum(rest, 0.1 * by_switches) / (limit * _STEEP**2)
    if by_loss:
        for name in ("area", "area_c", "area_s"):
            values[name], reference[name] = np.zeros_like(X), theta
    else:
        values["loss"], reference["loss"] = np.zeros_like(X), nu
