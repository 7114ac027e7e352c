"""SPICE decks of a converter that measure it by themselves in ngspice's batch mode.

One deck runs two copies of the converter from one clock into stiff outputs, copy A at the ideal output
voltage and copy B at the loaded one. Their mean output currents give output resistance and no-load ratio;
copy B gives efficiency and the peak voltage of each switch. Currents are integrated by the simulator itself,
in a capacitor of 1 F, and read in the middle of a phase, where nothing switches.

The integration method is Gear's: with the trapezoidal rule the step can collapse where a plate settles far
faster than a phase lasts.
"""

from __future__ import annotations

from dataclasses import dataclass
from typing import TYPE_CHECKING

from capmuster.enumerate.errors import CapmusterError

if TYPE_CHECKING:
    from collections.abc import Iterator

    from capmuster.enumerate.wiring import Converter
    from capmuster.rank.exact.circuit import Circuit
    from capmuster.rank.exact.steadystate import SteadyState
    from capmuster.rank.exact.subject import Subject

SETTLED = 1e-6
MOST_CYCLES = 5000
STEPS = 400
EDGE = 1e-6
OFF_RATIO = 1e9
NO_LOAD, RESISTANCE, EFFICIENCY, PEAK = "no_load_ratio", "output_resistance", "efficiency", "peak_"


@dataclass(frozen=True, slots=True)
class Bench:
    """What the deck applies, and for how long.

    Attributes
    ----------
    frequency
        Switching frequency [Hz].
    input_voltage
        Input voltage [V].
    output_voltage
        Voltage at which the loaded copy's output is held [V].
    settling_cycles
        Cycles before the measured one.
    """

    frequency: float
    input_voltage: float
    output_voltage: float
    settling_cycles: int


def bench_for(steady: SteadyState, frequency: float, input_voltage: float, output_voltage: float) -> Bench:
    """Prepare a bench that lasts until the start has faded.

    Parameters
    ----------
    steady
        The converter.
    frequency
        Switching frequency [Hz].
    input_voltage, output_voltage
        Port voltages of the loaded copy [V].

    Returns
    -------
    Bench
        The bench.

    Raises
    ------
    CapmusterError
        Settling takes more than 5,000 cycles, which a simulator should not be asked to step through.
    """
    cycles = steady.settling_cycles(frequency, SETTLED) + 2
    if cycles > MOST_CYCLES:
        raise CapmusterError(
            f"at {frequency:g} Hz the circuit takes {cycles} cycles to settle",
            accepted=f"a frequency at which it settles within {MOST_CYCLES}",
        )
    return Bench(frequency, input_voltage, output_voltage, cycles)


def subject_deck(subject: Subject) -> str:
    """Write the deck of a circuit at its operating point.

    Parameters
    ----------
    subject
        The circuit and its operating point.

    Returns
    -------
    str
        The deck.

    Raises
    ------
    CapmusterError
        Settling takes too many cycles.
    """
    output = subject.point().output_voltage
    bench = bench_for(subject.steady, subject.frequency, subject.input_voltage, output)
    return write_deck(subject.converter, subject.circuit, bench)


def write_deck(converter: Converter, circuit: Circuit, bench: Bench) -> str:
    """Write the deck.

    Parameters
    ----------
    converter
        The converter, for its ideal voltages and its comments.
    circuit
        Its circuit, as `circuit_of` builds it.
    bench
        The bench.

    Returns
    -------
    str
        The deck; the same arguments give the same bytes.
    """
    lines = [
        f"* Converter {converter.id}, ratio {converter.ratio}, wiring {converter.code}",
        "* Run it unchanged with: ngspice -b FILE",
        "*",
        *_subcircuit(converter, circuit),
        *_bench(converter, circuit, bench),
        ".end",
    ]
    return "\n".join(lines) + "\n"


def _name(converter: Converter) -> str:
    return f"conv_{converter.id}".replace("-", "_").lower()


def _node(name: str) -> str:
    """Spell a hard-wired node for SPICE, in which `+` and `-` are no letters."""
    return name.replace("+", "p").replace("-", "m") if len(name) > 1 else name


def _subcircuit(converter: Converter, circuit: Circuit) -> Iterator[str]:
    """Write the converter itself: pins, parameters, elements."""
    from capmuster.rank.scores.switching import switch_network  # noqa: PLC0415 - a deck of a hand-made circuit has none

    network = switch_network(converter)
    nodes = [_node(name) for name in circuit.nodes]
    ground = nodes[circuit.ports[0]]
    values = [f"{c.name}={c.capacitance:.9g}" for c in circuit.capacitors]
    values += [f"R{c.name}={c.resistance:.9g}" for c in circuit.capacitors if c.resistance]
    values += [f"{p.name}P={p.capacitance:.9g}" for p in circuit.plates]
    values += [f"R{s.name}={s.resistance:.9g}" for s in circuit.switches]
    name = _name(converter)
    yield "* Pins: ground, input, output, and the gate signals of phase 1 and phase 2 (0 = off, 1 = on)."
    yield "* Values in F and ohm: Cn capacitance, RCn its series resistance, CnP its bottom plate to ground,"
    yield f"* RSn on-resistance (off: {OFF_RATIO:g} times that). VIN sets what the capacitors start from."
    yield f".subckt {name} G I O PHI1 PHI2"
    yield "+ params: VIN=1"
    yield from (f"+ {' '.join(values[start : start + 4])}" for start in range(0, len(values), 4))
    yield "*"
    yield "* Flying capacitors, plus plate first."
    for capacitor, voltage in zip(circuit.capacitors, converter.balance.voltages, strict=True):
        plus, minus = nodes[capacitor.plus], nodes[capacitor.minus]
        start = f"IC={{{float(voltage):.9g}*VIN}}"
        yield f"* {capacitor.name} holds {voltage} of the input voltage"
        if capacitor.resistance:
            inner = f"{capacitor.name}x"
            yield f"{capacitor.name} {plus} {inner} {{{capacitor.name}}} {start}"
            yield f"R{capacitor.name} {inner} {minus} {{R{capacitor.name}}}"
        else:
            yield f"{capacitor.name} {plus} {minus} {{{capacitor.name}}} {start}"
    if circuit.plates:
        yield "*"
        yield "* Bottom plates to ground."
        for plate in circuit.plates:
            potential = float(network.clusters[plate.node].potentials[0])
            start = f"IC={{{potential:.9g}*VIN}}"
            yield f"{plate.name}P {nodes[plate.node]} {ground} {{{plate.name}P}} {start}"
    yield "*"
    yield "* Switches: the first node is positive while the switch blocks (the drain of an n-channel device)."
    for switch, ideal in zip(circuit.switches, network.switches, strict=True):
        a, b = nodes[switch.a], nodes[switch.b]
        yield f"* {switch.name} conducts in phase {switch.phase}: {ideal.multiplier} of the output charge"
        yield f"* blocks in phase {3 - switch.phase}: {ideal.blocking_voltage} of the input voltage"
        yield f"{switch.name} {a} {b} PHI{switch.phase} {ground} m{switch.name}"
        ron = f"R{switch.name}"
        yield f".model m{switch.name} SW(RON={{{ron}}} ROFF={{{OFF_RATIO:g}*{ron}}} VT=0.5 VH=0)"
    yield f".ends {name}"


def _bench(converter: Converter, circuit: Circuit, bench: Bench) -> Iterator[str]:
    """Write sources, clock, integrators, run and measures."""
    name, ideal = _name(converter), float(converter.ratio) * bench.input_voltage
    yield "*"
    yield "* Bench: copy A at the ideal output voltage, copy B at the loaded one, outputs stiff."
    yield f".param TP={1 / bench.frequency:.12g} DUTY={circuit.duty:.12g} DEAD={circuit.dead_time:.12g}"
    yield f".param VIN={bench.input_voltage:.12g} VOA={ideal:.12g} VOB={bench.output_voltage:.12g}"
    yield f".param NSET={bench.settling_cycles} EDGE={{{EDGE:g}*TP}}"
    # An edge counts from its middle: each phase is as long as asked for.
    yield "VPHI1 phi1 0 PULSE(1 0 {DUTY*TP-DEAD} {EDGE} {EDGE} {(1-DUTY)*TP+DEAD-EDGE} {TP})"
    yield "VPHI2 phi2 0 PULSE(0 1 {DUTY*TP} {EDGE} {EDGE} {(1-DUTY)*TP-DEAD-EDGE} {TP})"
    for copy in "AB":
        yield f"VI{copy} in{copy} 0 {{VIN}}"
        yield f"VO{copy} out{copy} 0 {{VO{copy}}}"
        yield f"X{copy} 0 in{copy} out{copy} phi1 phi2 {name} VIN={{VIN}}"
    yield "* Charge into each output and out of the loaded copy's input, as the voltage of 1 F."
    for node, source, sign in (("qa", "VOA", 1), ("qb", "VOB", 1), ("qi", "VIB", -1)):
        yield f"F{node} 0 {node} {source} {sign}"
        yield f"C{node} {node} 0 1 IC=0"
    yield ".options reltol=1e-6 method=gear numdgt=8"
    yield f".tran {{TP/{STEPS}}} {{TP*(NSET+2)}} {{TP*(NSET-1)}} {{TP/{STEPS}}} uic"
    yield "*"
    yield "* One whole cycle, read from the middle of phase 1 to the middle of the next."
    for node in ("qa", "qb", "qi"):
        yield f".meas tran {node}1 FIND v({node}) AT={{TP*(NSET+DUTY/2)}}"
        yield f".meas tran {node}2 FIND v({node}) AT={{TP*(NSET+1+DUTY/2)}}"
    yield f".meas tran {RESISTANCE} PARAM='TP*(VOA-VOB)/((qb2-qb1)-(qa2-qa1))'"
    yield f".meas tran {NO_LOAD} PARAM='(VOA+{RESISTANCE}*(qa2-qa1)/TP)/VIN'"
    yield f".meas tran {EFFICIENCY} PARAM='VOB*(qb2-qb1)/(VIN*(qi2-qi1))'"
    yield "* Peak voltage of each switch while it blocks."
    for switch in circuit.switches:
        start, end = ("DUTY", "1") if switch.phase == 1 else ("0", "DUTY")
        across = f"abs(v({_probe(circuit, switch.a)})-v({_probe(circuit, switch.b)}))"
        yield (
            f".meas tran {PEAK}{switch.name} MAX par('{across}')"
            f" FROM={{TP*(NSET+{start})+0.75*EDGE}} TO={{TP*(NSET+{end})-DEAD+0.25*EDGE}}"
        )


def _probe(circuit: Circuit, node: int) -> str:
    """Name a node of the loaded copy from outside."""
    outside = dict(zip(circuit.ports, ("0", "inB", "outB"), strict=True))
    return outside.get(node, f"xb.{_node(circuit.nodes[node])}")
