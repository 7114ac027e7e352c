r"""Output impedance and efficiency of a converter against frequency and load, exact and by closed blends.

Blends join the limits `x = R_SSL` and `y = R_FSL`. For an irreducible converter without plate parasitics the
exact impedance is a sum of single loops, `x_k coth(x_k / y_k)` with `sum x_k = x` and `sum y_k = y` (see
`steadystate`), at any duty. The function `x coth(x/y)` is convex and homogeneous, so

.. math:: x \coth(x/y) \le R_{out} \le x + y

with equality on the left when all loops relax alike. The left bound holds for any circuit without dead time,
since charge takes the way of least loss: unlike a root of powers, it errs on one side only.

Seen over 940 seeded converters of the census, two to four capacitors, sized by the closed form of `areas`, at
seven quotients x/y from 1/4 to 4: error of the blend, root mean square and range.

============  =======================  =================================
blend         elements of one class    classes a factor e apart, 1 sigma
============  =======================  =================================
exponent 2    4.1 %, -4.4 to +8.8 %    3.4 %, -13.7 to +8.8 %
exponent 2.6  2.8 %, -11.8 to +2.2 %   4.7 %, -20.3 to +2.2 %
x coth(x/y)   2.4 %, -12.2 to 0 %      4.5 %, -20.3 to 0 %
============  =======================  =================================

`tests/test_rank_impedance.py` keeps this record.
"""

from __future__ import annotations

from dataclasses import dataclass, replace
from typing import TYPE_CHECKING

import numpy as np
import numpy.typing as npt
from scipy.optimize import brentq

from capmuster.enumerate.errors import CapmusterError
from capmuster.rank.exact.steadystate import SteadyState

if TYPE_CHECKING:
    from capmuster.rank.exact.circuit import Circuit
    from capmuster.rank.exact.relaxation import Array


@dataclass(frozen=True, slots=True)
class OutputImpedance:
    """A converter seen from its ports, averaged over the period; all arrays have shape (f,).

    Attributes
    ----------
    frequency
        Switching frequencies [Hz].
    resistance
        Exact output resistance [ohm].
    slow, fast
        The two limits, R_SSL and R_FSL [ohm], of the circuit without plate parasitics: at frequencies where
        those count the fast limit would otherwise be one in which plates work as flying capacitors.
    ratio
        No-load output voltage over input voltage. Without plate parasitics it is the ideal ratio.
    back_ratio
        Input current over output current, both drawn from the outside, beside the no-load current: minus the
        charge that the input gives for each that the output takes. Equals `ratio` without dead time.
    idle_conductance
        Input current at no load over input voltage [S]; 0 without plate parasitics.
    """

    frequency: Array
    resistance: Array
    slow: Array
    fast: Array
    ratio: Array
    back_ratio: Array
    idle_conductance: Array

    def output_voltage(self, input_voltage: float, output_current: float) -> Array:
        """Output voltage [V] at a load, shape (f,).

        Parameters
        ----------
        input_voltage
            Input voltage [V].
        output_current
            Mean current given to the output [A].
        """
        return self.ratio * input_voltage - self.resistance * output_current

    def input_current(self, input_voltage: float, output_current: float) -> Array:
        """Mean input current [A] at a load, shape (f,).

        Parameters
        ----------
        input_voltage
            Input voltage [V].
        output_current
            Mean current given to the output [A].
        """
        return self.idle_conductance * input_voltage + self.back_ratio * output_current

    def efficiency(self, input_voltage: float, output_current: float) -> Array:
        """Output power over input power at a load, shape (f,).

        The losses are conduction and the charging of plate parasitics; gate drive is not in the circuit.

        Parameters
        ----------
        input_voltage
            Input voltage [V].
        output_current
            Mean current given to the output [A].
        """
        power_in = input_voltage * self.input_current(input_voltage, output_current)
        return self.output_voltage(input_voltage, output_current) * output_current / power_in


def output_impedance(circuit: Circuit | SteadyState, frequency: npt.ArrayLike) -> OutputImpedance:
    """Compute the exact output impedance of a converter.

    Parameters
    ----------
    circuit
        The converter, decomposed already or not.
    frequency
        Switching frequencies [Hz], shape (f,).

    Returns
    -------
    OutputImpedance
        Exact impedance, limits and ratio at each frequency.

    Raises
    ------
    CapmusterError
        A frequency is refused.
    IllPosedError
        The circuit leaves a voltage open.
    """
    steady = circuit if isinstance(circuit, SteadyState) else SteadyState.of(circuit)
    frequency = np.atleast_1d(np.asarray(frequency, dtype=float))
    charges = steady.charges(frequency)
    slow, fast = steady.bare.limit_charges(frequency)
    drawn = charges[:, 1, 1]
    ratio = -charges[:, 1, 0] / drawn
    back_ratio = -charges[:, 0, 1] / drawn
    idle = frequency * (charges[:, 0, 0] + charges[:, 0, 1] * ratio)
    # Without plates nothing is drawn at no load: what is left of the difference is rounding.
    scale = frequency * np.abs(charges[:, 0, 0])
    return OutputImpedance(
        frequency=frequency,
        resistance=1.0 / (frequency * drawn),
        slow=1.0 / (frequency * slow[:, 1, 1]),
        fast=1.0 / (frequency * fast[:, 1, 1]),
        ratio=ratio,
        back_ratio=back_ratio,
        idle_conductance=np.where(np.abs(idle) > 1e-12 * scale, idle, 0.0),
    )


def corner_frequency(circuit: Circuit | SteadyState) -> float:
    """Frequency at which both limits are equal [Hz].

    Parameters
    ----------
    circuit
        The converter; its dead time is taken as 0 here, since the fast limit alone ignores time.

    Returns
    -------
    float
        The corner.
    """
    steady = circuit if isinstance(circuit, SteadyState) else SteadyState.of(circuit)
    if steady.circuit.dead_time:
        steady = SteadyState.of(replace(steady.circuit, dead_time=0.0))
    one = output_impedance(steady, 1.0)
    return float(one.slow[0] / one.fast[0])


def blend(slow: npt.ArrayLike, fast: npt.ArrayLike, exponent: float = 2.0) -> Array:
    """Join the limits by a root of powers; exponent 2 is common practice.

    Parameters
    ----------
    slow, fast
        The limits [ohm], any shape.
    exponent
        Exponent of the powers.

    Returns
    -------
    Array
        ``(slow^p + fast^p)^(1/p)`` [ohm].
    """
    slow, fast = np.asarray(slow, dtype=float), np.asarray(fast, dtype=float)
    large = np.maximum(slow, fast)
    result: Array = large * ((slow / large) ** exponent + (fast / large) ** exponent) ** (1.0 / exponent)
    return result


def loop_blend(slow: npt.ArrayLike, fast: npt.ArrayLike) -> Array:
    """Join the limits as if all charge ran through one time constant.

    Parameters
    ----------
    slow, fast
        The limits [ohm], any shape.

    Returns
    -------
    Array
        ``slow coth(slow / fast)`` [ohm]: never above the exact impedance of an irreducible converter.
    """
    slow, fast = np.asarray(slow, dtype=float), np.asarray(fast, dtype=float)
    result: Array = slow / np.tanh(slow / fast)
    return result


def regulating_frequency(
    circuit: Circuit | SteadyState,
    input_voltage: float,
    output_voltage: float,
    output_current: float,
    *,
    lowest: float,
    highest: float,
) -> float:
    """Find the frequency at which a load holds the output where it is wanted.

    Parameters
    ----------
    circuit
        The converter.
    input_voltage, output_voltage
        Port voltages [V].
    output_current
        Load [A].
    lowest, highest
        Range of frequency [Hz].

    Returns
    -------
    float
        The frequency [Hz]; `lowest` if even there the output is higher in magnitude than wanted.

    Raises
    ------
    CapmusterError
        Even the highest frequency does not reach the output.
    """
    steady = circuit if isinstance(circuit, SteadyState) else SteadyState.of(circuit)
    sign = 1.0 if output_voltage > 0 else -1.0

    def surplus(logarithm: float) -> float:
        frequency = float(np.exp(logarithm))
        charge = steady.charges(frequency)[0, 1] * frequency
        reached = (-sign * output_current - charge[0] * input_voltage) / charge[1]
        return float(sign * (reached - output_voltage))

    low, high = float(np.log(lowest)), float(np.log(highest))
    if surplus(high) < 0:
        raise CapmusterError(
            f"{output_current:g} A at {output_voltage:g} V is out of reach up to {highest:g} Hz",
            accepted="more capacitance, less resistance or a higher frequency",
        )
    if surplus(low) >= 0:
        return lowest
    return float(np.exp(brentq(surplus, low, high, xtol=1e-12)))
