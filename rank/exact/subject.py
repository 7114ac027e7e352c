"""What a curve, a deck or a check is about: one circuit at one operating point, of a wiring or of a brief."""

from __future__ import annotations

from dataclasses import dataclass
from typing import TYPE_CHECKING

from capmuster.catalogs import find, names
from capmuster.enumerate.errors import CapmusterError
from capmuster.rank.exact.circuit import circuit_of
from capmuster.rank.exact.impedance import corner_frequency, output_impedance
from capmuster.rank.exact.steadystate import SteadyState

if TYPE_CHECKING:
    from capmuster.enumerate.wiring import Converter
    from capmuster.rank.exact.circuit import Circuit
    from capmuster.rank.exact.operating import OperatingPoint

DROOP = 0.1
"""Share of the no-load output that the load takes where none is given."""

UNEQUAL = (1.0, 1.5, 2.2, 3.3, 4.7, 6.8)
"""Preferred numbers (series E6): values that hide no fault behind a symmetry."""


@dataclass(frozen=True, slots=True)
class Subject:
    """A circuit at an operating point.

    Attributes
    ----------
    title
        What it is for, in words; empty for a wiring.
    converter, circuit, steady
        The converter, its circuit and all its steady states.
    frequency
        Switching frequency [Hz].
    input_voltage
        Input voltage [V].
    load
        Load current, its magnitude [A].
    """

    title: str
    converter: Converter
    circuit: Circuit
    steady: SteadyState
    frequency: float
    input_voltage: float
    load: float

    @property
    def output_current(self) -> float:
        """Current given to the output, negative for an inverting converter [A]."""
        return self.load if self.converter.ratio > 0 else -self.load

    def point(self) -> OperatingPoint:
        """Exact steady state at the operating point."""
        from capmuster.rank.exact.operating import operate  # noqa: PLC0415 - not every command needs it

        return operate(self.steady, self.frequency, self.input_voltage, output_current=self.output_current)


@dataclass(frozen=True, slots=True)
class Values:
    """Element values of a wiring, and where to operate; None where a default decides.

    Attributes
    ----------
    capacitances, resistances
        One value for all, or one for each [F], [ohm].
    series_resistances
        Of the capacitors [ohm].
    plate_fraction
        Bottom plate as a share of each capacitance [1].
    duty, dead_time
        See `Circuit`.
    frequency, input_voltage, load
        See `Subject`.
    """

    capacitances: tuple[float, ...] = ()
    resistances: tuple[float, ...] = ()
    series_resistances: tuple[float, ...] = ()
    plate_fraction: tuple[float, ...] = ()
    duty: float | None = None
    dead_time: float | None = None
    frequency: float | None = None
    input_voltage: float | None = None
    load: float | None = None

    @property
    def of_elements(self) -> bool:
        """Whether any value belongs to the circuit rather than to the operating point."""
        circuit = (self.capacitances, self.resistances, self.series_resistances, self.plate_fraction)
        return any(circuit) or self.duty is not None or self.dead_time is not None


def subjects(text: str, values: Values, *, top: int = 1, unequal: bool = False) -> tuple[Subject, ...]:
    """Find what a wiring, an id or a brief stands for.

    Parameters
    ----------
    text
        Wiring code, id, name of a shipped brief or path of a brief.
    values
        Values given; those of elements are for a wiring only.
    top
        How many finalists of a brief.
    unequal
        Whether a wiring without values gets unequal ones.

    Returns
    -------
    tuple of Subject
        One for a wiring, up to `top` for a brief, best first.

    Raises
    ------
    CapmusterError
        The text stands for nothing, a brief has no candidate, or a value is refused.
    """
    from capmuster.rank.lookup import find_converter  # noqa: PLC0415 - finds itself through the census

    if is_brief(text):
        if values.of_elements:
            raise CapmusterError(
                f"brief '{text}' sizes the elements itself",
                accepted="with a brief only frequency, input voltage and load",
            )
        return _of_brief(text, values, top)
    try:
        converter = find_converter(text)
    except CapmusterError:
        if "/" in text:
            raise
        raise CapmusterError(
            f"'{text}' is neither a converter nor a brief",
            accepted=f"a wiring code, an id, a TOML file, or one of {', '.join(names('briefs'))}",
        ) from None
    return (_of_converter(converter, values, unequal=unequal),)


def is_brief(text: str) -> bool:
    """Tell a brief from a wiring code or an id: a TOML file, or the name of a shipped one.

    Parameters
    ----------
    text
        What the user wrote.

    Returns
    -------
    bool
        Whether it is a brief.
    """
    return text.endswith(".toml") or find("briefs", text) is not None


def _of_converter(converter: Converter, values: Values, *, unequal: bool) -> Subject:
    from capmuster.rank.scores.switching import switch_network  # noqa: PLC0415 - counts the switches

    switches = len(switch_network(converter).switches)
    circuit = circuit_of(
        converter,
        _spread(values.capacitances, converter.n, 1e-6, unequal=unequal),
        _spread(values.resistances, switches, 0.1, unequal=unequal),
        series_resistances=_spread(values.series_resistances, converter.n, 0.0),
        plate_fraction=_spread(values.plate_fraction, converter.n, 0.0),
        duty=0.5 if values.duty is None else values.duty,
        dead_time=values.dead_time or 0.0,
    )
    steady = SteadyState.of(circuit)
    frequency = corner_frequency(circuit) if values.frequency is None else values.frequency
    volts = 1.0 if values.input_voltage is None else values.input_voltage
    load = values.load
    if load is None:
        found = output_impedance(steady, frequency)
        load = float(DROOP * abs(found.ratio[0]) * volts / found.resistance[0])
    return Subject("", converter, circuit, steady, frequency, volts, load)


def _spread(
    values: tuple[float, ...], count: int, default: float, *, unequal: bool = False
) -> float | list[float]:
    """One value for all, one for each, or defaults."""
    if len(values) == 1:
        return values[0]
    if values:
        return list(values)
    if unequal:
        return [default * UNEQUAL[i % len(UNEQUAL)] for i in range(count)]
    return default


def _of_brief(text: str, values: Values, top: int) -> tuple[Subject, ...]:
    from capmuster.rank.exact.finalist import finalists  # noqa: PLC0415
    from capmuster.rank.inputs.brief import load_brief  # noqa: PLC0415 - only briefs need the search
    from capmuster.rank.shortlist import shortlist  # noqa: PLC0415

    brief = load_brief(text)
    best = finalists(shortlist(brief, top=top))
    if len(best) < top:
        raise CapmusterError(
            f"brief '{text}' has {len(best)} candidates", accepted=f"a place up to {len(best)}"
        )
    return tuple(
        Subject(
            title=f"{brief.title}, place {place}",
            converter=one.converter,
            circuit=one.circuit,
            steady=SteadyState.of(one.circuit),
            frequency=one.frequency if values.frequency is None else values.frequency,
            input_voltage=brief.input_minimum if values.input_voltage is None else values.input_voltage,
            load=one.current if values.load is None else values.load,
        )
        for place, one in enumerate(best, start=1)
    )
