"""The plots of the shortlist page as SVG text, in the page's own colours and told apart without colour.

Points are links to rows of the table, so that they work without a script too.
"""

from __future__ import annotations

from html import escape
from typing import TYPE_CHECKING

import numpy as np

from capmuster.rank.drawing.metrics import text_width
from capmuster.rank.drawing.shapes import Box
from capmuster.rank.drawing.svg import number
from capmuster.rank.page.axes import Axis, engineering, linear_axis, log_axis

if TYPE_CHECKING:
    from collections.abc import Sequence

    from numpy.typing import NDArray

    from capmuster.rank.page.data import Candidate, ImpedanceCurve, LossBar, Population

SHADES = (1, 3, 10, 30, 100, 300, 1000)
"""Least count of each shade of the population plot."""

_TYPE = 11.0
_RADIUS = 4.5
_LOOKS = 12  # fills that tell terms apart, in the style sheet
_OTHERS_REACH, _OTHERS_BELOW = 2.0, 10.0  # factor of area, points of efficiency
_WIDE_RANGE = 8.0  # above this factor between largest and smallest, an axis is logarithmic


def area_efficiency_plot(
    candidates: Sequence[Candidate], others: NDArray[np.float64], efficiency_label: str
) -> str:
    """Plot efficiency over area: a link per candidate, the Pareto set filled and numbered.

    Others are dots as far as twice the largest area of the table and 10 points below its least efficiency:
    beyond, they would crowd out its points.
    """
    areas = [one.area for one in candidates]
    percent = [100.0 * one.efficiency for one in candidates]
    near = others[
        (others[:, 0] <= _OTHERS_REACH * max(areas)) & (100.0 * others[:, 1] >= min(percent) - _OTHERS_BELOW)
    ]
    all_areas = [*areas, *near[:, 0].tolist()]
    all_percent = [*percent, *(100.0 * near[:, 1]).tolist()]
    left, right, top, bottom = 52.0, 500.0, 26.0, 330.0
    if max(all_areas) / min(all_areas) > _WIDE_RANGE:
        x = log_axis(min(all_areas), max(all_areas), left, right)
    else:
        x = linear_axis(min(all_areas), max(all_areas), left, right)
    margin = 0.04 * (max(all_percent) - min(all_percent))  # points clear of the frame
    y = linear_axis(max(0.0, min(all_percent) - margin), min(100.0, max(all_percent) + margin), bottom, top)
    parts = [_open(520.0, 368.0, "Efficiency over area")]
    parts += _frame(x, y, ("area [mm²]", f"{efficiency_label} [%]"))
    dots = sorted({(round(x(a)), round(y(100.0 * share))) for a, share in near.tolist()})
    if dots:
        parts.append(_path("others", "".join(f"M{a} {b}h0" for a, b in dots)))
    spots = [(x(area), y(value)) for area, value in zip(areas, percent, strict=True)]
    texts = [
        f"{one.place}. {one.id}: {one.area:.4g} mm², {value:.1f} %"
        for one, value in zip(candidates, percent, strict=True)
    ]
    parts += _points(candidates, spots, texts)
    parts += _place_numbers(candidates, spots, Box(left, top, right, bottom))
    return "".join([*parts, "</svg>"])


def population_plot(population: Population, candidates: Sequence[Candidate]) -> str:
    """Plot both utilisations of all converters as shades, and of the candidates as links."""
    left, top, side = 52.0, 26.0, 304.0
    x = Axis(0.0, 100.0, left, left + side, (0.0, 20.0, 40.0, 60.0, 80.0, 100.0))
    y = Axis(0.0, 100.0, top + side, top, x.ticks)
    parts = [_open(520.0, 368.0, "Capacitor and switch utilisation of all converters")]
    parts += _frame(x, y, ("capacitor utilisation [%]", "switch utilisation [%]"))
    bins = len(population.counts)
    wide = side / bins
    shade_of = np.digitize(population.counts, SHADES)
    for shade in range(1, len(SHADES) + 1):
        cells = "".join(
            f"M{number(left + c * wide)} {number(top + side - (s + 1) * wide)}h{number(wide)}v{number(wide)}"
            f"h-{number(wide)}z"
            for c, s in np.argwhere(shade_of == shade).tolist()
        )
        if cells:
            parts.append(_path(f"shade s{shade}", cells))
    spots = [(x(100 * one.capacitor_utilisation), y(100 * one.switch_utilisation)) for one in candidates]
    texts = [
        f"{one.place}. {one.id}: capacitors {100 * one.capacitor_utilisation:.1f} %, "
        f"switches {100 * one.switch_utilisation:.1f} %"
        for one in candidates
    ]
    parts += _points(candidates, spots, texts)
    parts.append(_text(384.0, top + 9.0, "converters in a cell"))
    upper = [*(str(least - 1) for least in SHADES[1:]), ""]
    for k, (least, most) in enumerate(zip(SHADES, upper, strict=True)):
        high = top + 20.0 + 20.0 * k
        text = f"{least} to {most}" if most else f"{least} or more"
        parts.append(_path(f"shade s{k + 1}", f"M384 {number(high)}h14v14h-14z"))
        parts.append(_text(406.0, high + 11.0, text))
    return "".join([*parts, "</svg>"])


def loss_plot(bars: Sequence[LossBar]) -> str:
    """Plot losses term by term as stacked bars, one for each operating point."""
    terms = [name for name, _ in bars[0].terms]
    margin = max(text_width(bar.label, _TYPE) for bar in bars) + 10.0
    most = max(bar.total for bar in bars)
    x = linear_axis(0.0, most if most > 0 else 1.0, margin, 420.0, 5)
    height = 8.0 + 26.0 * len(bars)
    rows = (len(terms) + 1) // 2
    parts = [_open(480.0, height + 40.0 + 18.0 * rows, "Losses by term")]
    parts.append(_path("grid", "".join(f"M{number(x(v))} 4V{number(height)}" for v in x.ticks)))
    for k, bar in enumerate(bars):
        y, at = 8.0 + 26.0 * k, 0.0
        parts.append(_text(margin - 8.0, y + 13.0, bar.label, "end"))
        for t, (name, value) in enumerate(bar.terms):
            box = f"M{number(x(at))} {number(y)}H{number(x(at + value))}v18H{number(x(at))}z"
            parts.append(_path(f"term t{t % _LOOKS}", box, f"{name}: {engineering(value, 'W')}"))
            at += value
        parts.append(_text(x(at) + 5.0, y + 13.0, engineering(at, "W")))
    parts += [_text(x(value), height + 13.0, engineering(value, "W"), "middle") for value in x.ticks]
    for t, name in enumerate(terms):
        left, y = margin + 175.0 * (t // rows), height + 26.0 + 18.0 * (t % rows)
        parts.append(_path(f"term t{t % _LOOKS}", f"M{number(left)} {number(y)}h14v12h-14z"))
        parts.append(_text(left + 21.0, y + 10.0, name))
    return "".join([*parts, "</svg>"])


def impedance_plot(curve: ImpedanceCurve) -> str:
    """Plot the exact output impedance and both limits over frequency, with the design's point."""
    left, right, top, bottom = 62.0, 440.0, 64.0, 270.0
    x = log_axis(float(curve.frequency[0]), float(curve.frequency[-1]), left, right)
    y = log_axis(0.8 * float(curve.exact.min()), float(curve.exact.max()), bottom, top)
    parts = [_open(470.0, 306.0, "Output impedance over frequency")]
    parts += _frame(x, y, ("frequency", "R_out"), units=("Hz", "Ω"), name_height=top - 12.0)
    for kind, values in (("slow", curve.slow), ("fast", curve.fast), ("exact", curve.exact)):
        inside = values >= y.low
        spots = [
            f"{number(x(f))} {number(y(r))}"
            for f, r in zip(curve.frequency[inside].tolist(), values[inside].tolist(), strict=True)
        ]
        if kind != "exact":
            spots = [spots[0], spots[-1]]  # limits are straight
        parts.append(_path(f"curve {kind}", f"M{'L'.join(spots)}"))
    at, budget = number(x(curve.chosen)), number(y(curve.budget))
    parts.append(
        _path("aim", f"M{at} {number(bottom)}V{number(top)}M{number(left)} {budget}H{number(right)}")
    )
    legend = (
        ("curve exact", "exact"),
        ("curve slow", "slow limit R_SSL"),
        ("curve fast", "fast limit R_FSL"),
        ("aim", "design frequency, droop budget"),
    )
    for k, (kind, text) in enumerate(legend):
        across, high = 4.0 + 225.0 * (k % 2), 12.0 + 18.0 * (k // 2)
        parts.append(_path(kind, f"M{number(across)} {number(high)}h26"))
        parts.append(_text(across + 33.0, high + 4.0, text))
    return "".join([*parts, "</svg>"])


def _text(x: float, y: float, text: str, anchor: str = "", kind: str = "") -> str:
    side = f' text-anchor="{anchor}"' if anchor else ""
    named = f' class="{kind}"' if kind else ""
    return f'<text{named} x="{number(x)}" y="{number(y)}"{side}>{escape(text)}</text>'


def _path(kind: str, d: str, title: str = "") -> str:
    told = f"<title>{escape(title)}</title>" if title else ""
    return f'<path class="{kind}" d="{d}">{told}</path>' if told else f'<path class="{kind}" d="{d}"/>'


def _open(width: float, height: float, label: str) -> str:
    return (
        f'<svg class="plot" viewBox="0 0 {number(width)} {number(height)}" width="{number(width)}" '
        f'height="{number(height)}" role="group" aria-label="{escape(label)}">'
    )


def _frame(
    x: Axis,
    y: Axis,
    names: tuple[str, str],
    units: tuple[str, str] | None = None,
    name_height: float = 12.0,
) -> list[str]:
    """Grid, ticks and names of two axes; with units, ticks are written with prefixes."""
    grid = "".join(f"M{number(x(v))} {number(y.start)}V{number(y.end)}" for v in x.ticks)
    grid += "".join(f"M{number(x.start)} {number(y(v))}H{number(x.end)}" for v in y.ticks)
    corner = f"M{number(x.start)} {number(y.end)}V{number(y.start)}H{number(x.end)}"
    parts = [_path("grid", grid), _path("axis", corner)]
    for value in x.ticks:
        text = engineering(value, units[0]) if units else f"{value:g}"
        parts.append(_text(x(value), y.start + 16.0, text, "middle"))
    for value in y.ticks:
        text = engineering(value, units[1]) if units else f"{value:g}"
        parts.append(_text(x.start - 7.0, y(value) + 4.0, text, "end"))
    parts.append(_text(x.end, y.start + 33.0, names[0], "end", "name"))
    parts.append(_text(4.0, name_height, names[1], kind="name"))
    return parts


def _points(
    candidates: Sequence[Candidate], spots: Sequence[tuple[float, float]], texts: Sequence[str]
) -> list[str]:
    """Links to the candidates' rows, the best on top: squares are family members."""
    parts = ['<g class="points">']
    for candidate, (x, y), text in reversed(list(zip(candidates, spots, texts, strict=True))):
        kind = "point pareto" if candidate.pareto else "point"
        parts.append(
            f'<a class="{kind}" href="#c-{escape(candidate.id)}" data-id="{escape(candidate.id)}" '
            f'aria-label="{escape(text)}"><title>{escape(text)}</title>'
            f'<path d="{_marker(x, y, family=candidate.family)}"/></a>'
        )
    return [*parts, "</g>"]


def _marker(x: float, y: float, *, family: bool) -> str:
    """Outline of a point: a square for a family member, else a circle."""
    r, d = number(_RADIUS), number(2 * _RADIUS)
    if family:
        return f"M{number(x - _RADIUS)} {number(y - _RADIUS)}h{d}v{d}h-{d}z"
    return f"M{number(x - _RADIUS)} {number(y)}a{r} {r} 0 1 0 {d} 0a{r} {r} 0 1 0 -{d} 0z"


def _place_numbers(
    candidates: Sequence[Candidate], spots: Sequence[tuple[float, float]], inside: Box
) -> list[str]:
    """Write the places of the Pareto set beside their points, where that hides nothing."""
    taken = [Box(x - _RADIUS, y - _RADIUS, x + _RADIUS, y + _RADIUS) for x, y in spots]
    parts = ['<g class="places">']
    for candidate, (x, y) in zip(candidates, spots, strict=True):
        if not candidate.pareto:
            continue
        text = str(candidate.place)
        wide = text_width(text, _TYPE)
        gap = _RADIUS + 3.0
        for left, base in (
            (x - 0.5 * wide, y - gap - 1.0),
            (x - 0.5 * wide, y + gap + 9.0),
            (x + gap, y + 4.0),
            (x - gap - wide, y + 4.0),
        ):
            box = Box(left, base - 9.0, left + wide, base + 1.0)
            if inside.contains(box) and not any(box.overlaps(other) for other in taken):
                taken.append(box)
                parts.append(_text(left, base, text))
                break
    return [*parts, "</g>"]
