"""Potential diagrams: read back they are the wiring; nothing overlaps; the order is the best."""

from __future__ import annotations

from fractions import Fraction
from itertools import pairwise, permutations
from random import Random

import pytest
from drawn_wires import Joined, terminals
from hypothesis import given, settings
from hypothesis import strategies as st
from matplotlib import font_manager, ft2font
from strategies import census_converters

from capmuster.enumerate.converters import converters
from capmuster.enumerate.errors import CapmusterError
from capmuster.enumerate.families import dickson, fibonacci, members, series_parallel
from capmuster.enumerate.wiring import Converter, vertex_name
from capmuster.rank.drawing.metrics import ASCENT, DESCENT, text_width
from capmuster.rank.drawing.numbers import plain
from capmuster.rank.drawing.order import Rails, best_order, crossings, shared_order
from capmuster.rank.drawing.potential import potential_panels
from capmuster.rank.drawing.scale import fit_scale
from capmuster.rank.drawing.shapes import Box, Drawing, Label, Line, Symbol
from capmuster.rank.drawing.sheet import converter_sheet, potential_diagram

# Rails at one potential that no order keeps apart: they must be drawn in lanes.
LANES = "O-G/a-O O-a/I-a b-G/I-a b-a/I-a"
# A capacitor without voltage: such a converter is never listed, but a user may draw it.
FLAT = "I-O/a-b I-G/a-G I-G/b-G"


def _sample(count: int, seed: int = 6) -> list[Converter]:
    """Draw census converters of 1 to 4 capacitors, most of them large."""
    random = Random(seed)  # noqa: S311 -- a sample, the same on every run
    tables = [converters(n) for n in (1, 2, 3, 3, 4, 4, 4, 4)]
    chosen = [random.choice(tables) for _ in range(count)]
    return [table.converter(random.randrange(len(table))) for table in chosen]


def _read_back(panel: Drawing) -> dict[str, tuple[str, str]]:
    """Names of the upper and the lower rail of each capacitor."""
    joined = Joined(panel)
    names = {}
    for line in joined.lines:
        if line.stroke in ("port", "rail"):
            left, y = line.points[0]
            beside = [
                label
                for label in panel.labels
                if label.anchor == "end" and 0 < left - label.x < 6 and label.box.top < y < label.box.bottom
            ]
            assert len(beside) == 1
            names[joined.net_of(line)] = beside[0].text.split(" (")[0]
    found = {}
    for symbol in panel.symbols:
        if symbol.name.startswith("C"):
            upper, lower = terminals(symbol)
            found[symbol.name] = names[joined.net_at(upper)], names[joined.net_at(lower)]
    return found


def _expected(converter: Converter, phase: int) -> dict[str, tuple[str, str]]:
    return {
        f"C{i + 1}": (vertex_name(word[2 * phase]), vertex_name(word[2 * phase + 1]))
        for i, word in enumerate(converter.words)
    }


@settings(max_examples=60)
@given(census_converters())
def test_the_drawing_read_back_is_the_wiring(converter):
    panels = potential_panels(converter)
    for phase, panel in enumerate((panels.first, panels.second)):
        assert _read_back(panel) == _expected(converter, phase)


@pytest.mark.parametrize("code", [LANES, FLAT])
def test_rails_in_lanes_are_read_back_too(code):
    converter = Converter.parse(code)
    panels = potential_panels(converter)
    for phase, panel in enumerate((panels.first, panels.second)):
        # A capacitor without voltage has no upper side: compare its two rails as a pair.
        read = {name: set(pair) for name, pair in _read_back(panel).items()}
        assert read == {name: set(pair) for name, pair in _expected(converter, phase).items()}
        assert not panel.collisions()
    assert any("in brackets" in remark for remark in panels.remarks)


@settings(max_examples=60)
@given(census_converters())
def test_height_is_voltage_and_arrows_follow_the_charge(converter):
    balance = converter.balance
    panels = potential_panels(converter)
    per_volt = set()
    for phase, panel in enumerate((panels.first, panels.second)):
        leads: dict[float, list[float]] = {}
        for wire in panel.wires:
            if isinstance(wire, Line) and wire.stroke == "lead":
                leads.setdefault(wire.points[0][0], []).extend(y for _, y in wire.points)
        arrows = {s.name.removeprefix("arrow of "): s for s in panel.symbols if s.name.startswith("arrow")}
        for symbol in panel.symbols:
            if not symbol.name.startswith("C"):
                continue
            i = int(symbol.name[1:]) - 1
            (x, _), _ = terminals(symbol)
            tall = max(leads[x]) - min(leads[x])
            if not any(" (" in label.text for label in panel.labels):  # a rail in a lane is off its potential
                per_volt.add(round(tall / float(balance.voltages[i]), 6))
            # By definition charge q flows into the plus plate, which is up, in phase 1, and out in phase 2.
            tip_down = _points_down(arrows[symbol.name])
            assert tip_down == ((balance.charges[i] > 0) == (phase == 0))
    assert len(per_volt) <= 1


def _points_down(arrow: Symbol) -> bool:
    tail = next(mark for mark in arrow.marks if isinstance(mark, Line)).points[0][1]
    return arrow.box.bottom - tail > tail - arrow.box.top


def test_multipliers_of_the_ladder_and_the_fibonacci_converter():
    # Published charge multipliers (Seeman and Sanders 2008; Makowski and Maksimovic 1995): Fibonacci numbers
    # for the Fibonacci converter, 1 for every capacitor of the series-parallel one.
    texts = {label.text for label in potential_panels(fibonacci(5)).first.labels if label.tone == "accent"}
    assert texts == {"1", "2", "3", "5"}
    texts = {
        label.text for label in potential_panels(series_parallel(6)).first.labels if label.tone == "accent"
    }
    assert texts == {"1"}


def test_ports_give_and_take_what_the_ratio_says():
    # Charge conservation of a step-up by 4: the input gives 4 for 1 that the output takes.
    panels = potential_panels(series_parallel(4))
    texts = [label.text for panel in (panels.first, panels.second) for label in panel.labels]
    assert "input gives 3, output takes 0" in texts
    assert "input gives 1, output takes 1" in texts


def test_axis_in_volts():
    ticks = {label.text for label in potential_panels(dickson(2), 3.7).second.labels if label.tone == "soft"}
    assert {"7.4", "3.7", "0"} <= ticks


def test_no_two_labels_or_symbols_overlap():
    for member in members(6):
        assert not potential_diagram(member.converter).collisions(), member
    for converter in _sample(60):
        assert not potential_diagram(converter).collisions(), converter.code


@pytest.mark.long
def test_no_two_labels_or_symbols_overlap_in_all_families_and_200_of_the_census():
    for member in members(12):
        assert not potential_diagram(member.converter).collisions(), member
    for converter in _sample(200, seed=1):
        assert not converter_sheet(converter).collisions(), converter.code
        assert not converter_sheet(converter, input_voltage=48.0).collisions(), converter.code


@settings(max_examples=25)
@given(census_converters(least=2))
def test_the_order_has_the_fewest_crossings_of_all(converter):
    phases = [
        Rails.of([word[2 * p : 2 * p + 2] for word in converter.words], converter.balance.potentials[p])
        for p in (0, 1)
    ]
    for rails in phases:
        least = min(_slow_crossings(rails, order) for order in permutations(range(converter.n)))
        assert _slow_crossings(rails, best_order([rails])) == least
    first, second = shared_order(phases)
    assert crossings([phases[0]], first) == _slow_crossings(phases[0], best_order([phases[0]]))
    assert crossings([phases[1]], second) == _slow_crossings(phases[1], best_order([phases[1]]))


def _slow_crossings(rails: Rails, order: tuple[int, ...]) -> int:
    """Count crossings pair by pair, and rails that meet at one level column by column, three each."""
    spans = []
    for members_of in rails.members:
        columns = [k for k, c in enumerate(order) if members_of >> c & 1]
        spans.append(range(columns[0], columns[-1] + 1))
    count = 0
    for column, capacitor in enumerate(order):
        low, high = sorted(rails.levels[end] for end in rails.ends[capacitor])
        count += sum(
            column in span and low < level < high for span, level in zip(spans, rails.levels, strict=True)
        )
        covering = [level for span, level in zip(spans, rails.levels, strict=True) if column in span]
        count += 3 * sum(a == b for k, a in enumerate(covering) for b in covering[:k])
    return count


def test_order_of_a_long_converter_has_no_crossing():
    # A Dickson converter is drawn without crossing at 12 capacitors; above 12 the search is not exhaustive.
    rails = [
        Rails.of([word[2 * p : 2 * p + 2] for word in c.words], c.balance.potentials[p])
        for c in (dickson(13), dickson(16))
        for p in (0, 1)
    ]
    assert [crossings([one], best_order([one])) for one in rails] == [0, 0, 0, 0]


@given(
    st.lists(
        st.sets(st.fractions(-50, 400, max_denominator=30), min_size=2, max_size=9), min_size=2, max_size=2
    )
)
def test_scale_leaves_room_and_stretches_only_what_is_too_small(levels):
    rooms = [dict.fromkeys(sorted(phase), 40.0) for phase in levels]
    scale = fit_scale(rooms, 200.0, 600.0)
    assert list(scale.heights) == sorted(scale.heights)
    for phase in levels:
        for low, high in pairwise(sorted(phase)):
            drawn = scale.height(high) - scale.height(low)
            assert drawn >= 40.0 - 1e-6
            assert drawn >= scale.per_volt * float(high - low) - 1e-6
            assert scale.stretched(low, high) == (
                drawn > scale.per_volt * float(high - low) * (1 + 1e-6) + 1e-6
            )
    assert 199.999 <= scale.total <= max(600.0, 1.26 * 40.0 * sum(len(phase) for phase in levels))


def test_a_fibonacci_converter_says_that_its_axis_is_stretched():
    assert not potential_panels(fibonacci(5)).remarks
    panels = potential_panels(fibonacci(10))
    assert any("dashed" in remark for remark in panels.remarks)
    assert any(isinstance(wire, Line) and wire.stroke == "stretch" for wire in panels.first.wires)


def test_too_many_capacitors_are_refused():
    with pytest.raises(CapmusterError, match="41 capacitors"):
        potential_diagram(series_parallel(42))


@pytest.mark.parametrize("bold", [False, True])
def test_widths_of_text_are_those_of_the_face(bold):
    # DejaVu Sans as it comes with matplotlib, measured by FreeType.
    face = font_manager.FontProperties(family="DejaVu Sans", weight="bold" if bold else "normal")
    font = ft2font.FT2Font(font_manager.findfont(face))
    font.set_size(1000, 72)
    for text in (
        "C12",
        "\N{MINUS SIGN}13/21",
        "S10",
        "input gives 3/4, output takes 1",
        "≈0.2846",
        "Phase 1",
        "(µΩ·²°φη)",
    ):
        advances = 0.0
        for character in text:
            glyph = font.load_char(ord(character), flags=ft2font.LoadFlags.NO_HINTING)
            advances += glyph.linearHoriAdvance / 65536
            assert glyph.bbox[3] / 64 <= ASCENT * 1000 + 1
            assert -glyph.bbox[1] / 64 <= DESCENT * 1000 + 1
        assert text_width(text, 1000.0, bold=bold) == pytest.approx(advances, rel=2e-3)


def test_collisions_are_found():
    label, beside = Label(10.0, 20.0, "abc"), Label(10.0 + text_width("abc", 11.0) + 1.0, 20.0, "x")
    on_it = Label(12.0, 22.0, "y")
    line = Line(((0.0, 18.0), (50.0, 18.0)), "rail")
    far = Symbol("far", (Line(((90.0, 5.0), (110.0, 5.0)), "plate"),))

    def sheet(*labels: Label, wires=(), symbols=()) -> list[str]:
        return Drawing(100.0, 40.0, tuple(wires), tuple(symbols), labels).collisions()

    assert sheet(label, beside) == []
    assert sheet(label, on_it) == ["'abc' and 'y' overlap"]
    assert sheet(label, wires=[line]) == ["a wire runs through 'abc'"]
    assert sheet(symbols=[far]) == ["far is cut"]
    assert sheet(Label(-1.0, 20.0, "z")) == ["'z' is cut"]


def test_boxes():
    box = Box(0.0, 0.0, 2.0, 1.0)
    assert not box.overlaps(Box(2.0, 0.0, 3.0, 1.0))
    assert box.overlaps(Box(1.9, 0.5, 3.0, 1.0))
    assert box.contains(Box(0.5, 0.5, 1.0, 1.0))
    assert not box.contains(Box(0.5, 0.5, 1.0, 1.5))


def test_a_fraction_that_is_long_is_rounded_and_says_so():
    assert plain(Fraction(-3, 7)) == "\N{MINUS SIGN}3/7"
    assert plain(Fraction(12345, 67891)) == "≈0.1818"
