"""Whole drawings of one converter: its potential diagram alone, or a sheet with all there is to see."""

from __future__ import annotations

from dataclasses import replace
from typing import TYPE_CHECKING

from capmuster.enumerate.errors import CapmusterError
from capmuster.rank.drawing.numbers import plain
from capmuster.rank.drawing.potential import potential_panels
from capmuster.rank.drawing.schematic import schematic
from capmuster.rank.drawing.shapes import Drawing, Label, together
from capmuster.rank.drawing.symbols import SMALL, TYPE

if TYPE_CHECKING:
    from collections.abc import Iterable, Sequence

    from capmuster.enumerate.wiring import Converter

MOST_DRAWN = 40
"""Most capacitors of a potential diagram."""
MOST_SCHEMATIC = 5
"""Most capacitors of a switch-level schematic."""

_MARGIN = 18.0
_BETWEEN = 44.0
_WIDEST = 1000.0  # panels that would be wider together stand one below the other
_LEAST_WIDTH = 460.0
_LINE = 15.0


def potential_diagram(converter: Converter, input_voltage: float | None = None) -> Drawing:
    """Draw the potential diagrams of both phases, side by side where the sheet is wide enough.

    Parameters
    ----------
    converter
        The converter.
    input_voltage
        Input voltage [V] for an axis in volts; without it the axis is per volt of input.

    Raises
    ------
    CapmusterError
        The converter has too many capacitors for a drawing.
    """
    if converter.n > MOST_DRAWN:
        raise CapmusterError(
            f"drawing: {converter.id} has {converter.n} capacitors", accepted=f"at most {MOST_DRAWN}"
        )
    panels = potential_panels(converter, input_voltage)
    first, second = panels.first, panels.second
    if first.width + _BETWEEN + second.width <= _WIDEST:
        second = second.moved(first.width + _BETWEEN, 0.0)
    else:
        second = second.moved(0.0, first.height + 0.5 * _BETWEEN)
    both = together([first, second], f"Potential diagram of {converter.id}")
    remarks = _text(panels.remarks, both.width, both.height + 14.0, SMALL)
    return _grown(both, remarks)


def converter_sheet(
    converter: Converter,
    *,
    input_voltage: float | None = None,
    title: str = "",
    families: Sequence[str] = (),
) -> Drawing:
    """Draw all there is to see of one converter.

    The sheet has a heading, the potential diagrams of both phases and, up to `MOST_SCHEMATIC` capacitors, the
    switch-level schematic.

    Parameters
    ----------
    converter
        The converter.
    input_voltage
        Input voltage [V] for potentials in volts; without it they are per volt of input.
    title
        A heading of the user's own; without it the id.
    families
        Names of families that the converter belongs to.

    Raises
    ------
    CapmusterError
        The converter has too many capacitors for a drawing.
    """
    potential = potential_diagram(converter, input_voltage)
    parts = [potential]
    if converter.n <= MOST_SCHEMATIC:
        parts.append(schematic(converter))
    width = max(_LEAST_WIDTH, *(part.width for part in parts))
    heading = [
        Label(0.0, 16.0, line, 16.0, bold=True) for line in _wrapped(title or converter.id, width, 16.0)
    ]
    heading = [label.moved(0.0, 20.0 * k) for k, label in enumerate(heading)]
    facts = [f"ratio {plain(converter.ratio)}", _counted(converter.n, "flying capacitor"), *families]
    if title:
        facts.insert(0, converter.id)
    below = heading[-1].y + 18.0
    heading += _text([" · ".join(facts), converter.code], width, below, TYPE)
    y = heading[-1].y + 24.0
    unit = "per volt of input" if input_voltage is None else f"in volts at {input_voltage:.4g} V input"
    key = (
        f"Vertical axis: potential {unit}. A capacitor is as tall as its voltage.",
        "Beside it: its charge per cycle over the output charge, and its direction.",
    )
    placed = []
    for part in parts:
        placed.append(part.moved(0.0, y))
        y = placed[-1].height
        if part is potential:
            notes = _text(key, width, y + 16.0, SMALL)
            placed.append(Drawing(0.0, notes[-1].y + 4.0, (), (), tuple(notes)))
            y = placed[-1].height + 30.0
    whole = together([Drawing(width, 0.0, (), (), tuple(heading)), *placed], title or converter.id)
    framed = whole.moved(_MARGIN, _MARGIN)
    return replace(framed, width=framed.width + _MARGIN, height=framed.height + _MARGIN)


def _counted(number: int, noun: str) -> str:
    return f"{number} {noun}" if number == 1 else f"{number} {noun}s"


def _grown(drawing: Drawing, labels: Sequence[Label]) -> Drawing:
    """Add lines of text, and the room that they take."""
    if not labels:
        return drawing
    return replace(
        drawing,
        width=max(drawing.width, *(label.box.right for label in labels)),
        height=max(drawing.height, *(label.box.bottom for label in labels)),
        labels=drawing.labels + tuple(labels),
    )


def _text(paragraphs: Iterable[str], width: float, top: float, size: float) -> list[Label]:
    """Set paragraphs below each other; ``top`` is the first baseline."""
    lines = [line for paragraph in paragraphs for line in _wrapped(paragraph, width, size)]
    return [Label(0.0, top + k * _LINE, line, size, tone="soft") for k, line in enumerate(lines)]


def _wrapped(text: str, width: float, size: float) -> list[str]:
    """Break a text into lines that fit, between words or inside a word that is longer than a line."""

    def fits(line: str) -> bool:
        return Label(0.0, 0.0, line, size, bold=True).width <= width

    lines = [""]
    for word in text.split():
        joined = f"{lines[-1]} {word}".strip()
        if fits(joined):
            lines[-1] = joined
            continue
        if lines[-1]:
            lines.append("")
        for character in word:
            if not fits(lines[-1] + character):
                lines.append("")
            lines[-1] += character
    return lines
