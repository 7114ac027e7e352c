"""Potential diagrams in text, for a terminal: rails in lines, capacitors in columns, heights not to scale."""

from __future__ import annotations

import sys
from fractions import Fraction
from shutil import get_terminal_size
from typing import TYPE_CHECKING

from capmuster.enumerate.wiring import CONVERTER_PORTS, N_PORTS, vertex_name
from capmuster.rank.drawing.numbers import plain
from capmuster.rank.drawing.potential import phases_in_order

if TYPE_CHECKING:
    from capmuster.enumerate.wiring import Converter
    from capmuster.rank.drawing.potential import Phase

_LINES = "─│┬┴╪↓↑\N{MINUS SIGN}≈·"
_ASCII = str.maketrans(_LINES, "-|++=v^-~.")
_BETWEEN = 4


def terminal_diagram(converter: Converter) -> str:
    """Write the potential diagrams for standard output: in its width, and in characters that it can show."""
    try:
        _LINES.encode(sys.stdout.encoding or "ascii")
        ascii_only = False
    except UnicodeEncodeError:
        ascii_only = True
    return text_diagram(converter, width=get_terminal_size().columns, ascii_only=ascii_only)


def text_diagram(converter: Converter, *, width: int = 80, ascii_only: bool = False) -> str:
    """Write the potential diagrams of both phases as text.

    Parameters
    ----------
    converter
        The converter.
    width
        Columns of the terminal; phases that fit stand side by side.
    ascii_only
        Whether to do without line-drawing characters.

    Returns
    -------
    str
        Lines without trailing blanks, joined by line feeds. Beside each capacitor stand its charge per unit
        of output charge and its direction.
    """
    blocks = [_block(converter, phase) for phase in phases_in_order(converter)]
    widths = [max(map(len, block)) for block in blocks]
    if sum(widths) + _BETWEEN <= width:
        height = max(map(len, blocks))
        first, second = ([*block, *[""] * (height - len(block))] for block in blocks)
        lines = [a.ljust(widths[0] + _BETWEEN) + b for a, b in zip(first, second, strict=True)]
    else:
        lines = [*blocks[0], "", *blocks[1]]
    text = "\n".join(line.rstrip() for line in lines)
    return text.translate(_ASCII) if ascii_only else text


def _block(converter: Converter, phase: Phase) -> list[str]:
    """One phase: a line for each rail, and one between each two of them."""
    balance = converter.balance
    potentials = balance.potentials[phase.number]
    rails = phase.rails
    heights = sorted(
        {(level, 0) for level in potentials} | set(zip(rails.levels, phase.lanes, strict=True)), reverse=True
    )
    output = abs(balance.port_charges[2])
    labels = []
    for i, q in enumerate(balance.charges):
        into_plus = (q > 0) == (phase.number == 0)
        labels.append(f"C{i + 1} {'↓' if into_plus else '↑'}{plain(Fraction(abs(q), output))}")
    names = [vertex_name(vertex) for vertex in rails.vertices]
    axis = max(len(plain(level)) for level in potentials)
    pitch = max(map(len, labels)) + 3 + max(map(len, names))
    left = axis + 4 + max(map(len, names))
    xs = [left + k * pitch for k in range(len(phase.order))]
    lines = [[" "] * (xs[-1] + pitch + 12) for _ in range(2 * len(heights) - 1)]

    def write(line: int, column: int, text: str) -> None:
        lines[line][column : column + len(text)] = text

    row = {height: 2 * k for k, height in enumerate(heights)}
    for (level, _), line in row.items():
        write(line, 0, plain(level).rjust(axis))
    rows = [row[rail] for rail in zip(rails.levels, phase.lanes, strict=True)]
    for rail, (first, last) in enumerate(phase.spans):
        write(rows[rail], xs[first] - 1 - len(names[rail]), names[rail] + "─" * (xs[last] - xs[first] + 3))
    for column, capacitor in enumerate(phase.order):
        top, bottom = sorted(rows[end] for end in rails.ends[capacitor])
        for line in range(top + 1, bottom):
            write(line, xs[column], "│")
        write(top, xs[column], "┬")
        write(bottom, xs[column], "┴")
        middle = (top + bottom) // 2
        middle += 1 - middle % 2
        write(middle, xs[column], f"╪ {labels[capacitor]}")
    for port in sorted(set(range(N_PORTS)) - set(rails.vertices)):
        line = row[potentials[port], 0]
        text = "".join(lines[line]).rstrip()
        write(line, len(text), f" · {CONVERTER_PORTS[port]} unused")
    return [f"Phase {phase.number + 1}", *("".join(line).rstrip() for line in lines)]
