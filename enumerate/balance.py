"""Exact charge balance and potentials of one converter, at any size.

Charge balance at the internal nodes of both phases, ``[D1; D2] q = 0``, fixes the charges up to a factor; the
same matrix transposed carries Kirchhoff's voltage law and fixes ratio and potentials. Elimination stays in
integers, so results are exact at any size.
"""

from __future__ import annotations

from dataclasses import dataclass
from fractions import Fraction
from math import gcd
from typing import TYPE_CHECKING, TypeAlias

from capmuster.enumerate.errors import IllPosedError

if TYPE_CHECKING:
    from collections.abc import Iterable, Sequence

Word: TypeAlias = tuple[int, int, int, int]
N_PORTS = 3
G, I, O = range(N_PORTS)  # noqa: E741 -- the ports' own letters


@dataclass(frozen=True, slots=True)
class Balance:
    """What the wiring alone fixes, exactly.

    Attributes
    ----------
    charges
        Charge that each capacitor takes into its plus plate in phase 1 and gives back in phase 2, as coprime
        integers, signed so that the input delivers charge.
    port_charges
        Charge per cycle that ports G, I, O send into the converter, in the same unit. They add up to zero.
    ratio
        M = V_out / V_in at no load.
    voltages
        Voltage of each capacitor per volt of input, plus plate to minus plate.
    potentials
        For each phase the potential of every vertex (G, I, O, then internal nodes) per volt of input.
    """

    charges: tuple[int, ...]
    port_charges: tuple[int, int, int]
    ratio: Fraction
    voltages: tuple[Fraction, ...]
    potentials: tuple[tuple[Fraction, ...], tuple[Fraction, ...]]

    @property
    def degenerate(self) -> bool:
        """Whether some capacitor holds no voltage."""
        return 0 in self.voltages


def analyse(words: Sequence[Word]) -> Balance:
    """Solve charge balance and potentials of a wiring over the ports G = 0, I = 1, O = 2.

    Raises
    ------
    IllPosedError
        When the wiring is no irreducible converter. The message says which capacitors are idle or redundant,
        which reach no port, or which voltages contradict or are left open.
    """
    nodes = [max(0, *(max(word[p : p + 2]) - N_PORTS + 1 for word in words)) for p in (0, 2)]
    internal, ports = _incidence(words, nodes)
    _refuse_floating_groups(words)
    charges = _null_space(internal, len(words))
    port_flow = [[_dot(port, q) for port in ports] for q in charges]
    _refuse_unless_irreducible(words, charges, port_flow)

    delivered, taken = port_flow[0][I], port_flow[0][O]
    scale = -1 if (delivered, taken) < (0, 0) else 1
    q = [scale * value for value in charges[0]]
    g = [scale * value for value in port_flow[0]]
    _refuse_useless_ports(g)

    # Unknowns: internal potentials of phases 1 and 2, then U_I and U_O with U_G = 0. One line per capacitor
    # says that its voltage is the same in both phases. As charge balance can be met, there is a solution.
    lines = [
        [internal[row][i] * (1 if row < nodes[0] else -1) for row in range(sum(nodes))]
        + [ports[I][i], ports[O][i]]
        for i in range(len(words))
    ]
    solutions = _null_space(lines, sum(nodes) + 2)
    _refuse_unless_shared(words, solutions, nodes)
    x = [Fraction(value, solutions[0][-2]) for value in solutions[0]]
    base = [Fraction(0), Fraction(1), x[-1]]
    first, second = tuple(base + x[: nodes[0]]), tuple(base + x[nodes[0] : nodes[0] + nodes[1]])
    return Balance(
        charges=tuple(q),
        port_charges=(g[G], g[I], g[O]),
        ratio=Fraction(-g[I], g[O]),
        voltages=tuple(first[word[0]] - first[word[1]] for word in words),
        potentials=(first, second),
    )


def _incidence(words: Sequence[Word], nodes: Sequence[int]) -> tuple[list[list[int]], list[list[int]]]:
    """Incidence at internal nodes (phase 1, then phase 2), and net port incidence (phase 1 minus phase 2)."""
    internal = [[0] * len(words) for _ in range(sum(nodes))]
    ports = [[0] * len(words) for _ in range(N_PORTS)]
    for i, word in enumerate(words):
        for column, vertex in enumerate(word):
            sign = 1 if column % 2 == 0 else -1
            phase = column // 2
            if vertex >= N_PORTS:
                internal[vertex - N_PORTS + phase * nodes[0]][i] += sign
            else:
                ports[vertex][i] += sign if phase == 0 else -sign
    return internal, ports


def _null_space(matrix: Sequence[Sequence[int]], columns: int) -> list[list[int]]:
    """Integer basis of the null space, each vector coprime: elimination and back substitution in integers.

    Rows are kept coprime, so no entry exceeds a minor of the matrix. Rows without an entry in the pivot's
    column are left alone: of an incidence matrix those are nearly all.
    """
    rows = [list(row) for row in matrix]
    pivots: list[int] = []
    for column in range(columns):
        rank = len(pivots)
        chosen = next((r for r in range(rank, len(rows)) if rows[r][column]), None)
        if chosen is None:
            continue
        rows[rank], rows[chosen] = rows[chosen], rows[rank]
        pivot_row = rows[rank]
        pivot = pivot_row[column]
        for r in range(chosen + 1, len(rows)):
            factor = rows[r][column]
            if factor:
                reduced = [pivot * a - factor * b for a, b in zip(rows[r], pivot_row, strict=True)]
                divisor = gcd(*reduced) or 1
                rows[r] = [value // divisor for value in reduced]
        pivots.append(column)
    free = [column for column in range(columns) if column not in pivots]
    return [_back_substituted(rows, pivots, column, columns) for column in free]


def _back_substituted(
    rows: Sequence[Sequence[int]], pivots: Sequence[int], free: int, columns: int
) -> list[int]:
    """Null vector of an echelon form that has 1 in one free column and 0 in the others, made coprime."""
    vector = [0] * columns
    vector[free] = 1
    for row, column in zip(reversed(rows[: len(pivots)]), reversed(pivots), strict=True):
        rest = _dot(row, vector)
        pivot = row[column]
        if rest % pivot:
            factor = pivot // gcd(pivot, rest)
            vector = [factor * value for value in vector]
            rest *= factor
        vector[column] = -rest // pivot
    divisor = gcd(*vector)
    return [value // divisor for value in vector]


def _dot(left: Iterable[int], right: Iterable[int]) -> int:
    return sum(a * b for a, b in zip(left, right, strict=True))


def _named(indices: Sequence[int]) -> str:
    """List capacitors by name: C1, C2 and C3."""
    names = [f"C{i + 1}" for i in indices]
    return names[0] if len(names) == 1 else ", ".join(names[:-1]) + " and " + names[-1]


def _named_with(indices: Sequence[int], one: str, many: str) -> str:
    """List capacitors, followed by the verb that agrees with their number."""
    return f"{_named(indices)} {one if len(indices) == 1 else many}"


def _refuse_floating_groups(words: Sequence[Word]) -> None:
    """Refuse a group of capacitors that reaches no port: nothing defines its potential."""
    for phase in (0, 1):
        edges = [word[2 * phase : 2 * phase + 2] for word in words]
        reached = set(range(N_PORTS))
        grown = True
        while grown:
            touching = [edge for edge in edges if (edge[0] in reached) != (edge[1] in reached)]
            grown = bool(touching)
            reached.update(vertex for edge in touching for vertex in edge)
        afloat = [i for i, edge in enumerate(edges) if edge[0] not in reached]
        if afloat:
            raise IllPosedError(
                f"wiring: {_named_with(afloat, 'reaches', 'reach')} no port in phase {phase + 1}",
                accepted="wirings in which every group of capacitors touches a port in each phase",
            )


def _refuse_unless_irreducible(
    words: Sequence[Word], charges: list[list[int]], port_flow: list[list[int]]
) -> None:
    accepted = (
        "irreducible wirings, where charge balance fixes every capacitor's charge and none of them is zero"
    )
    if len(charges) > 1:
        circulating = _circulating(charges, port_flow)
        if circulating:
            raise IllPosedError(
                f"wiring: {_named_with(circulating, 'is', 'are')} redundant: charge balance leaves "
                f"{'its charge' if len(circulating) == 1 else 'their charges'} open",
                accepted=accepted,
            )
        clashing = [i for i in range(len(words)) if any(q[i] for q in charges)]
        raise IllPosedError(
            f"wiring: the voltages of {_named(clashing)} contradict: they ask for different ratios",
            accepted=accepted,
        )
    idle = [i for i in range(len(words)) if not charges or not charges[0][i]]
    if idle:
        raise IllPosedError(
            f"wiring: {_named_with(idle, 'is', 'are')} idle: charge balance lets no charge through",
            accepted=accepted,
        )


def _circulating(charges: list[list[int]], port_flow: list[list[int]]) -> list[int]:
    """List the capacitors on charges that can circulate without any port noticing."""
    combinations = _null_space([list(column) for column in zip(*port_flow, strict=True)], len(charges))
    loops = [[_dot(weights, column) for column in zip(*charges, strict=True)] for weights in combinations]
    return [i for i in range(len(charges[0])) if any(loop[i] for loop in loops)]


def _refuse_useless_ports(g: Sequence[int]) -> None:
    """Refuse a wiring that moves no charge from the input to the output."""
    accepted = "wirings that move charge from I to O"
    if not any(g):
        raise IllPosedError("wiring: no port delivers charge over a whole cycle", accepted=accepted)
    for port, name in ((I, "the input I delivers"), (O, "the output O takes")):
        if not g[port]:
            raise IllPosedError(f"wiring: {name} no charge over a whole cycle", accepted=accepted)


def _refuse_unless_shared(
    words: Sequence[Word], solutions: Sequence[Sequence[int]], nodes: Sequence[int]
) -> None:
    """Refuse capacitors that share a voltage which nothing divides, such as those of ``I-a/O-b a-G/b-G``."""
    if len(solutions) == 1:
        return
    # Of all solutions, those that leave the ports at zero.
    at_ports = [[solution[column] for solution in solutions] for column in (-2, -1)]
    free = _null_space(at_ports, len(solutions))
    moved = [[_dot(weights, column) for column in zip(*solutions, strict=True)] for weights in free]
    potentials = [[0] * N_PORTS + solution[: nodes[0]] for solution in moved]
    sharing = [i for i, word in enumerate(words) if any(u[word[0]] != u[word[1]] for u in potentials)]
    raise IllPosedError(
        f"wiring: the voltages of {_named(sharing)} are open: nothing divides the voltage that they share",
        accepted="wirings in which every capacitor's voltage follows from the input's",
    )
