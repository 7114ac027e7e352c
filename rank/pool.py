"""The candidates of a brief: every converter that can hold the output, sized in batches."""

from __future__ import annotations

from collections import Counter
from dataclasses import dataclass, replace
from fractions import Fraction
from typing import TYPE_CHECKING, TypeAlias

import numpy as np

from capmuster.enumerate.census import CENSUS_REACH
from capmuster.enumerate.converters import ConverterTable, converters, table_of
from capmuster.enumerate.families import members
from capmuster.rank.evaluation import Evaluation, evaluate, worst_efficiency
from capmuster.rank.frontier import frontier
from capmuster.rank.scores.candidates import census_ratios
from capmuster.rank.scores.screened import Source, screened
from capmuster.rank.scores.switchtable import score
from capmuster.rank.scores.utilisation import refuse_degenerate
from capmuster.rank.structs import joined, rows_of

if TYPE_CHECKING:
    from collections.abc import Callable, Iterator, Sequence

    from numpy.typing import NDArray

    from capmuster.enumerate.wiring import Converter
    from capmuster.rank.inputs.brief import Brief
    from capmuster.rank.scores.switchtable import Scores

_I, _O = 1, 2
_UNCLEAN = "a switch is idle or blocks no voltage"
_TOO_MANY_SWITCHES = "more switches than allowed"
_NO_AREA = "no area within the budgets meets the droop"
_TOO_LARGE = "the area is above the budget"
_INEFFICIENT = "below the efficiency floor"
_NOT_HELD = "the ratio cannot hold the output"
_NOT_BORNE = "the output is above the highest that is acceptable"
_NOT_DRIVEN = "no rail can drive a gate"
_NO_SIZES = "no sizes within the limits meet the brief"


@dataclass(frozen=True, slots=True)
class Pool:
    """All candidates that meet a brief, best first, and why the others were left out.

    Attributes
    ----------
    tables
        Converters, one table per group.
    group, row
        Shape (N,): table, and row in it, of each candidate.
    ids
        Shape (N,): id of each candidate.
    capacitors
        Shape (N,): number of flying capacitors.
    evaluation
        Figures of each candidate.
    pareto
        Shape (N,): whether no candidate is as good in area, worst efficiency, capacitors, switches and
        highest blocking voltage, and better in one of them.
    complete_up_to
        Flying capacitors up to which every converter was considered; above it only family members were.
    considered
        Number of converters of the right sign that hold the output.
    left_out
        How many of these were left out, by reason.
    unsized, unsized_bounds
        Topologies that were left out because their classes have no sizes that meet the brief, in tables, and
        the bounds on their merits; see `Evaluation.bound`.
    refused
        Reason for each included converter that is no candidate, by its id.
    """

    tables: tuple[ConverterTable, ...]
    group: NDArray[np.intp]
    row: NDArray[np.intp]
    ids: NDArray[np.str_]
    capacitors: NDArray[np.int64]
    evaluation: Evaluation
    pareto: NDArray[np.bool_]
    complete_up_to: int
    considered: int
    left_out: dict[str, int]
    unsized: tuple[ConverterTable, ...]
    unsized_bounds: tuple[NDArray[np.float64], ...]
    refused: dict[str, str]

    def __len__(self) -> int:
        """Count the candidates that meet the brief."""
        return len(self.group)

    def converter(self, place: int) -> Converter:
        """Candidate at a place, counted from 0."""
        return self.tables[int(self.group[place])].converter(int(self.row[place]))

    def ratio(self, place: int) -> Fraction:
        """M of the candidate at a place."""
        return self.tables[int(self.group[place])].ratio(int(self.row[place]))

    def code(self, place: int) -> str:
        """Wiring code of the candidate at a place."""
        return self.tables[int(self.group[place])].code(int(self.row[place]))

    def in_order(self, order: NDArray[np.intp]) -> Pool:
        """Return the candidates in another order, their Pareto set marked anew."""
        figures, capacitors = rows_of(self.evaluation, order), self.capacitors[order]
        return replace(
            self,
            group=self.group[order],
            row=self.row[order],
            ids=self.ids[order],
            capacitors=capacitors,
            evaluation=figures,
            pareto=_pareto(figures, capacitors),
        )


def reordered(pool: Pool, merit: NDArray[np.float64]) -> NDArray[np.intp]:
    """Order the candidates of a pool by other merits, ties as ever: switches, capacitors, id."""
    return np.lexsort((pool.ids, pool.capacitors, pool.evaluation.switches, _tie_classes(merit)))


def gather(brief: Brief, include: Sequence[Converter] = ()) -> Pool:
    """Enumerate, size and order all candidates of a brief.

    Parameters
    ----------
    brief
        What is asked for.
    include
        Converters that are candidates whether or not the search would find them; they may have idle or
        equipotential switches.

    Raises
    ------
    IllPosedError
        When an included converter is degenerate.
    """
    for converter in include:
        refuse_degenerate(converter)
    reach = min(brief.most_capacitors, CENSUS_REACH)
    left_out: Counter[str] = Counter()
    refused: dict[str, str] = {}
    considered = 0
    fits: list[tuple[ConverterTable, Evaluation]] = []
    unsized: list[tuple[ConverterTable, NDArray[np.float64]]] = []
    for source in _sources(brief, reach, include):
        table, chosen = source.table, source.chosen
        holds = _where(table, brief.holds)
        considered += int(np.count_nonzero(holds)) + source.left_out.total()
        left_out.update(source.left_out)
        kept, figures, reasons, without = _judged(table.take(holds), brief, forgive_unclean=chosen)
        unsized.append(without)
        left_out.update(reasons)
        if len(kept):
            fits.append((kept, figures))
        elif chosen:
            refused[table.ids()[0]] = next(iter(reasons), _NOT_HELD)
    pool = _ordered(brief, fits, reach=reach, considered=considered, left_out=left_out, refused=refused)
    return replace(
        pool,
        unsized=tuple(one for one, _ in unsized),
        unsized_bounds=tuple(bounds for _, bounds in unsized),
    )


_Unsized: TypeAlias = "tuple[ConverterTable, NDArray[np.float64]]"


def _judged(
    table: ConverterTable, brief: Brief, *, forgive_unclean: bool
) -> tuple[ConverterTable, Evaluation, Counter[str], _Unsized]:
    """Size converters that hold the output.

    Returns those that meet the brief, why the others do not, and bounds on what those without sizes could
    reach.
    """
    reasons: Counter[str] = Counter()

    def keep(good: NDArray[np.bool_], reason: str) -> NDArray[np.bool_]:
        if not good.all():
            reasons[reason] = int(np.count_nonzero(~good))
        return good

    table = table.take(keep(_where(table, brief.bears), _NOT_BORNE))
    table = table.take(keep(_where(table, lambda ratio: _efficient(brief, ratio)), _INEFFICIENT))
    scores = score(table)
    table, scores = _both(table, scores, keep(scores.clean | forgive_unclean, _UNCLEAN))
    most_switches, most_area = brief.most_switches or np.inf, brief.area or np.inf
    table = table.take(keep(np.asarray(scores.switches <= most_switches), _TOO_MANY_SWITCHES))
    figures = evaluate(table, brief)
    sizeless = ~np.isfinite(figures.merit)
    bounds = np.zeros(len(table)) if figures.bound is None else figures.bound
    without = (table.take(sizeless), bounds[sizeless])
    checks: tuple[tuple[str, Callable[[Evaluation], NDArray[np.bool_]]], ...] = (
        (_NO_SIZES if brief.counts_losses else _NO_AREA, lambda f: np.isfinite(f.merit)),
        (_TOO_LARGE, lambda f: np.asarray(f.area <= most_area * (1 + _ROUNDING))),
        (_INEFFICIENT, lambda f: np.asarray(f.worst_efficiency >= efficiency_floor(brief))),
        (_NOT_DRIVEN, lambda f: np.asarray((f.floating_drives == 0) | (brief.drive == "any"))),
    )
    for reason, passes in checks:
        good = passes(figures)
        if not good.all():
            reasons[reason] += int(np.count_nonzero(~good))
        table, figures = table.take(good), rows_of(figures, good)
    return table, figures, reasons, without


def _both(table: ConverterTable, scores: Scores, rows: NDArray[np.bool_]) -> tuple[ConverterTable, Scores]:
    return table.take(rows), rows_of(scores, rows)


def efficiency_floor(brief: Brief) -> float:
    """Efficiency that the worst input must reach, or minus infinity."""
    if brief.efficiency_floor is None or brief.objective in ("conduction-area", "power-density"):
        return -np.inf
    return brief.efficiency_floor * (1 - _ROUNDING)


def _sources(brief: Brief, reach: int, include: Sequence[Converter]) -> Iterator[Source]:
    """Yield tables of distinct converters."""
    chosen = list(dict.fromkeys(include))
    ids = {converter.id for converter in chosen}
    for n in range(1, reach + 1):
        for ratio in brief.ratios or census_ratios(n):
            if any((converter.n, converter.ratio) == (n, ratio) for converter in chosen):
                table = converters(n, ratio)
                others = np.array([one not in ids for one in table.ids()], dtype=bool)
                yield Source(table.take(others), chosen=False, left_out=Counter())
            elif brief.holds(ratio):
                yield _screened(brief, n, ratio)
    beyond = {
        member.converter.id: member.converter
        for member in members(brief.most_capacitors)
        if member.converter.n > reach and (brief.ratios is None or member.converter.ratio in brief.ratios)
    }
    for n in range(reach + 1, brief.most_capacitors + 1):
        same_size = [one for one in beyond.values() if one.n == n and one.id not in ids]
        if same_size:
            yield Source(table_of(same_size), chosen=False, left_out=Counter())
    for converter in chosen:
        yield Source(table_of([converter]), chosen=True, left_out=Counter())


def _screened(brief: Brief, n: int, ratio: Fraction) -> Source:
    """Leave out what fails without its sizes, in the order in which `_judged` asks."""
    most_switches = brief.most_switches or np.inf
    return screened(
        n,
        ratio,
        [(_NOT_BORNE, brief.bears(ratio)), (_INEFFICIENT, _efficient(brief, ratio))],
        [
            (_UNCLEAN, lambda measures: measures.clean),
            (_TOO_MANY_SWITCHES, lambda measures: np.asarray(measures.switches <= most_switches)),
        ],
    )


def _where(table: ConverterTable, condition: Callable[[Fraction], bool]) -> NDArray[np.bool_]:
    """Where the exact ratio meets a condition, asked once per distinct ratio; shape (N,)."""
    pairs, row_of = np.unique(table.port_charges[:, [_I, _O]], axis=0, return_inverse=True)
    answers = np.array([condition(Fraction(-int(i), int(o))) for i, o in pairs.tolist()], dtype=bool)
    return np.asarray(answers[row_of.reshape(-1)]) if len(pairs) else np.zeros(0, dtype=bool)


def _efficient(brief: Brief, ratio: Fraction) -> bool:
    """Whether the ratio alone leaves the floor within reach."""
    if brief.efficiency_floor is None or (brief.counts_losses and brief.use == "fixed-ratio"):
        return True
    if brief.objective == "power-density":
        return abs(brief.required) > brief.efficiency_floor * float(abs(ratio)) * brief.input_nominal
    return bool(worst_efficiency(brief, np.array([float(ratio)]))[0] >= brief.efficiency_floor * (1 - 1e-12))


def _ordered(
    brief: Brief,
    fits: Sequence[tuple[ConverterTable, Evaluation]],
    *,
    reach: int,
    considered: int,
    left_out: Counter[str],
    refused: dict[str, str],
) -> Pool:
    figures = joined([one for _, one in fits] or [evaluate(converters(1).take(slice(0, 0)), brief)])
    tables = [table for table, _ in fits]
    sizes = [len(table) for table in tables]
    group = np.repeat(np.arange(len(tables)), sizes)
    row = np.concatenate([np.zeros(0, dtype=np.intp), *(np.arange(size) for size in sizes)])
    ids = np.array([one for table in tables for one in table.ids()], dtype=np.str_)
    capacitors = np.repeat(np.array([table.n for table in tables], dtype=np.int64), sizes)
    order = np.lexsort((ids, capacitors, figures.switches, _tie_classes(figures.merit)))
    figures = rows_of(figures, order)
    capacitors = capacitors[order]
    return Pool(
        tables=tuple(tables),
        group=group[order].astype(np.intp),
        row=row[order].astype(np.intp),
        ids=ids[order],
        capacitors=capacitors,
        evaluation=figures,
        pareto=_pareto(figures, capacitors),
        complete_up_to=reach,
        considered=considered,
        left_out=dict(left_out),
        unsized=(),
        unsized_bounds=(),
        refused=refused,
    )


def _pareto(figures: Evaluation, capacitors: NDArray[np.int64]) -> NDArray[np.bool_]:
    """Mark the candidates that no other one beats."""
    costs = (
        figures.area,
        -figures.worst_efficiency,
        capacitors.astype(np.float64),
        figures.switches.astype(np.float64),
        figures.highest_blocking_voltage,
    )
    return frontier(_rounded(np.stack(costs, axis=1)))


_TIE = 1e-9
_ROUNDING = 1e-9  # relative: a limit missed by no more than this is met


def _tie_classes(merit: NDArray[np.float64]) -> NDArray[np.int64]:
    """Give merits numbers in ascending order; merits within 1e-9 of the next lower one share a number."""
    order = np.argsort(merit, kind="stable")
    ascending = merit[order]
    steps = np.diff(ascending) > _TIE * np.abs(ascending[:-1])
    classes = np.zeros(len(merit), dtype=np.int64)
    classes[order] = np.concatenate([[0], np.cumsum(steps)])[: len(merit)]
    return classes


def _rounded(values: NDArray[np.float64]) -> NDArray[np.float64]:
    """Drop what rounding alone can make differ: keep 30 bits."""
    mantissa, exponent = np.frexp(values)
    return np.asarray(np.ldexp(np.round(np.ldexp(mantissa, 30)), exponent - 30))
