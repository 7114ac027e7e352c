"""Newton's method on the prices of a whole batch, until the two bounds of every candidate meet."""

from __future__ import annotations

import dataclasses
from dataclasses import dataclass
from typing import TYPE_CHECKING, Any

import numpy as np

from capmuster.rank.sizing.certificate import cannot_be_met, lower_bound, upper_bound
from capmuster.rank.sizing.dual import Dual, solve
from capmuster.rank.sizing.task import Objective
from capmuster.rank.sizing.unknowns import LIMITS

if TYPE_CHECKING:
    from numpy.typing import NDArray

    from capmuster.rank.sizing.certificate import Design
    from capmuster.rank.sizing.problem import Problem, Snapshot

    Floats = NDArray[np.float64]

__all__ = ["Found", "search"]

_NOTHING = -700.0  # logarithm of a price that is nothing
_LOWEST_PIN = -60.0
_PIN = -14.0  # below that a price whose limit is not reached is taken for nothing
_PIN_OF_DENSITY = -33.0  # the price of area may be what holds a load that hardly matters
_STEEPEST = 12.0  # logarithm of the steepest angle: the fast limit is all but the whole
_BEYOND = 3.0  # farthest that the unknown of a bounded scalar may go beyond its bounds
_HARDLY = 1e-6  # a step that is hardly one
_CLOSE = 0.01  # residual of the angle below which bounds may meet
_ROUNDING = 1e-9  # of a step
_BALLAST = 1e-10  # added to the slope of a limit by its price
_BALLAST_OF_LOAD = 1e-6  # added to the slope of the load's condition by the load
_IDLE = 0.02  # slope of a limit by the logarithm of its price, below which the price hardly matters
_FALL = 3.0  # how much farther such a price may fall than others step
_SHORTEST = 0.1  # step that the reach never falls below
_PROOFS = frozenset({5, 8, 12, 18, 27, 40, 60, 90, 140})  # rounds that ask whether the limits can be met


@dataclass(slots=True)
class Found:
    """What a search knows of B candidates.

    Attributes
    ----------
    lower, upper : (B,) float array
        Bounds on the objective. A lower bound of inf is a proof that the limits cannot be met.
    prices : (9 or 10, B) float array
        At the best design: slow price, fast price of the capacitors, area prices of capacitors and silicon,
        price of loss, frequency of the prices, load, share of phase 1, then the fast prices of each group of
        switches.
    frequency, scale_c, scale_s : (B,) float array
        Frequency of the best design, and the factors on the areas that answer its prices.
    rounds : (B,) int array
        Rounds that each candidate took.
    values : (d, B) float array
        Unknowns of the last round, where the bounds have not met.
    """

    lower: Floats
    upper: Floats
    prices: Floats
    frequency: Floats
    scale_c: Floats
    scale_s: Floats
    rounds: NDArray[np.int64]
    values: Floats

    @classmethod
    def nothing(cls, size: int, groups: int, unknowns: int) -> Found:
        """Return what is known before any search."""

        def unknown() -> Floats:
            return np.full(size, np.nan)

        return cls(
            lower=np.full(size, -np.inf),
            upper=np.full(size, np.inf),
            prices=np.full((8 + groups, size), np.nan),
            frequency=unknown(),
            scale_c=unknown(),
            scale_s=unknown(),
            rounds=np.zeros(size, dtype=np.int64),
            values=np.full((unknowns, size), np.nan),
        )

    def take(self, places: NDArray[np.intp] | slice) -> Found:
        """Return the candidates at these places only."""
        return Found(*(getattr(self, field.name)[..., places] for field in dataclasses.fields(self)))

    def settled(self, gap: float, places: NDArray[np.intp] | slice = slice(None)) -> NDArray[np.bool_]:
        """Return where the bounds meet to a relative gap, or are proven never to."""
        lower, upper = self.lower[places], self.upper[places]
        return (np.isfinite(upper) & (lower >= (1.0 - gap) * upper)) | np.isposinf(lower)

    def put(self, places: NDArray[np.intp], other: Found) -> None:
        """Take over what another search found for these candidates."""
        self.lower[places] = np.maximum(self.lower[places], other.lower)
        self.rounds[places] += other.rounds
        if len(other.values) == len(self.values):
            self.values[:, places] = other.values
        better = other.upper < self.upper[places]
        chosen = places[better]
        self.prices[:, chosen] = other.prices[:, better]
        for name in ("upper", "frequency", "scale_c", "scale_s"):
            getattr(self, name)[chosen] = getattr(other, name)[better]


@dataclass(slots=True)
class _State:
    """Candidates that are still under way."""

    problem: Problem
    values: Floats
    reach: Floats
    last: Floats
    pin: Floats
    places: NDArray[np.intp]

    def keep(self, going: NDArray[np.bool_]) -> None:
        """Go on with these candidates only."""
        chosen = np.flatnonzero(going)
        self.problem = self.problem.take(chosen)
        self.values, self.last = self.values[:, chosen], self.last[:, chosen]
        self.reach, self.pin, self.places = self.reach[chosen], self.pin[chosen], self.places[chosen]


def search(problem: Problem, values: Floats, gap: float, longest: float, most_rounds: int) -> Found:
    """Improve the prices of a batch until its bounds meet, or are shown never to.

    Parameters
    ----------
    problem : Problem
        Task of B candidates.
    values : (d, B) float array
        Unknowns to start from.
    gap : float
        Relative gap between the bounds to stop at [1].
    longest : float
        Longest step, in logarithms.
    most_rounds : int
        Rounds to give up after.

    Returns
    -------
    Found
    """
    size = values.shape[1]
    found = Found.nothing(size, len(problem.switches), len(values))
    pin = _PIN if problem.case.objective is not Objective.DENSITY else _PIN_OF_DENSITY
    state = _State(
        problem, values, np.full(size, longest), np.zeros_like(values), np.full(size, pin), np.arange(size)
    )
    with np.errstate(all="ignore"):
        for number in range(1, most_rounds + 1):
            rows, snapshot = state.problem.conditions(state.values)
            if number in _PROOFS:
                found.lower[state.places[cannot_be_met(state.problem, state.values)]] = np.inf
            if _any_close(state.problem, rows):
                low = lower_bound(state.problem, snapshot)
                if state.problem.case.objective is Objective.AREA:
                    low = np.where(low > state.problem.case.area * (1.0 + _ROUNDING), np.inf, low)
                _record(found, state.places, low, upper_bound(state.problem, snapshot), snapshot)
            found.rounds[state.places] += 1
            going = ~found.settled(gap, state.places)
            if not going.any():
                break
            _step(state, rows, longest)
            if np.count_nonzero(going) < 0.8 * len(going):
                state.keep(going)
    found.values[:, state.places] = state.values
    return found


def _any_close(problem: Problem, rows: list[Dual]) -> bool:
    """Return whether any candidate is near enough to its optimum for its bounds to be worth the work."""
    return bool(np.any(np.abs(rows[problem.names.index("angle")].value) < _CLOSE))


def _record(found: Found, places: NDArray[np.intp], low: Floats, design: Design, at: Snapshot) -> None:
    """Note the bounds, and the design of every candidate that has improved."""
    found.lower[places] = np.fmax(found.lower[places], low)
    better = design.value < found.upper[places]
    chosen = places[better]
    prices = (at.slow, at.fast_c, at.theta_c, at.theta_s, at.nu, at.f, at.current, at.duty_1, *at.fast_s)
    for k, price in enumerate(prices):
        found.prices[k, chosen] = price[better]
    found.upper[chosen] = design.value[better]
    found.frequency[chosen] = design.f[better]
    found.scale_c[chosen], found.scale_s[chosen] = design.scale_c[better], design.scale_s[better]


def _step(state: _State, rows: list[Dual], longest: float) -> None:
    """Take one step. Prices of limits that are not reached go to nothing, and stay there while slack."""
    names, values, size = state.problem.names, state.values, state.values.shape[1]
    prices = [k for k, name in enumerate(names) if name in LIMITS]
    slack = {k: rows[k].value >= 0.0 for k in prices}
    for k in prices:
        _fix(rows, k, (values[k] <= state.pin) & slack[k], np.zeros(size))
    # Elimination does not look for pivots. The load may enter its own condition only through the price of
    # area, and where every limit has a price the prices can grow together without effect.
    for k in (*prices, *((len(rows) - 1,) if "log_load" in names else ())):
        ballast = _BALLAST if k in prices else _BALLAST_OF_LOAD
        rows[k].slopes[k] = rows[k].slopes.get(k, 0.0) + ballast
    step = _within(rows, _allowed(state, rows, slack), size)
    others = np.max([np.abs(part) for k, part in enumerate(step) if k not in prices], axis=0)
    step *= state.reach / np.maximum(others, state.reach)

    clipped = np.clip(step, -longest, longest)
    turned = np.einsum("kb,kb->b", clipped, state.last) < 0.0
    shorter, longer = np.maximum(0.5 * state.reach, _SHORTEST), np.minimum(1.5 * state.reach, longest)
    state.reach, state.last = np.where(turned, shorter, longer), clipped
    freed = np.any([(values[k] <= _NOTHING) & ~slack[k] for k in prices], axis=0)
    state.values = values + step
    for k in prices:
        gone = (state.values[k] <= state.pin) & slack[k]
        state.values[k] = np.where(gone, _NOTHING, np.maximum(state.values[k], state.pin))
    # A price that was nothing too early gets more room below the next time.
    state.pin = np.maximum(state.pin - np.where(freed, 6.0, 0.0), _LOWEST_PIN)


def _allowed(
    state: _State, rows: list[Dual], slack: dict[int, NDArray[np.bool_]]
) -> dict[int, tuple[Floats, Floats]]:
    """Return the least and the most step of prices and bounded scalars."""
    names, case, values, reach = state.problem.names, state.problem.case, state.values, state.reach
    allowed = {}
    for k, is_slack in slack.items():
        # Among prices that hardly matter the equations cannot tell which should rise: each goes by its own
        # limit.
        idle = np.abs(rows[k].slopes[k]) < _IDLE
        least = np.where(idle, np.where(is_slack, -_FALL * reach, -_HARDLY), -reach)
        allowed[k] = (least, np.where(idle & is_slack, _HARDLY, reach))
    bounds: dict[str, tuple[Any, Any]] = {"log_load": (case.log_load_least, case.log_load_most)}
    if case.held:
        bounds["angle"] = (-_STEEPEST, _STEEPEST)
    else:
        bounds["log_f"] = (case.log_f_least, case.log_f_most)
    for name, (least, most) in bounds.items():
        if name in names:
            k = names.index(name)
            down, up = least - _BEYOND - values[k], most + _BEYOND - values[k]
            allowed[k] = (np.clip(down, -reach, -_HARDLY), np.clip(up, _HARDLY, reach))
    return allowed


def _within(rows: list[Dual], allowed: dict[int, tuple[Floats, Floats]], size: int) -> Floats:
    """Return the Newton step with some unknowns kept to what they may move.

    A price that hardly matters yet, or a scalar beyond its bounds, may ask for a step without measure. It
    gets the longest one allowed, the worst first, and the others the answer to that.
    """
    step = _newton(rows, size)
    for _ in allowed:
        over = [np.maximum(step[k] - most, least - step[k]) for k, (least, most) in allowed.items()]
        excess = np.stack(over)
        too_far = excess.max(axis=0) > _ROUNDING
        if not too_far.any():
            break
        worst = excess.argmax(axis=0)
        for place, (k, (least, most)) in enumerate(allowed.items()):
            _fix(rows, k, too_far & (worst == place), np.clip(step[k], least, most))
        step = _newton(rows, size)
    return step


def _fix(rows: list[Dual], k: int, where: NDArray[np.bool_], step: Floats) -> None:
    """Replace equation k by a given step of unknown k for some candidates."""
    if where.any():
        slopes = {j: np.where(where, 0.0, slope) for j, slope in rows[k].slopes.items()}
        slopes[k] = np.where(where, 1.0, slopes.get(k, 0.0))
        rows[k] = Dual(np.where(where, -step, rows[k].value), slopes)


def _newton(rows: list[Dual], size: int) -> Floats:
    """Return the Newton step, 0 where the system is singular."""
    step = np.stack([np.broadcast_to(part, size) for part in solve(rows)])
    return np.where(np.isfinite(step), step, 0.0)
