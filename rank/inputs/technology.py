"""Device and capacitor classes of a technology, and the class that stands a voltage at least cost."""

from __future__ import annotations

import hashlib
import json
from dataclasses import asdict, dataclass, fields
from typing import TYPE_CHECKING, Literal, TypeVar

import numpy as np

if TYPE_CHECKING:
    from pathlib import Path

    from numpy.typing import ArrayLike, NDArray

    FloatArray = NDArray[np.float64]
    IntArray = NDArray[np.int64]

_ROUNDING = 1e-9  # relative: a voltage that is the rating but for rounding is the rating
_TIE = 1e-12  # relative: costs this close are equal


@dataclass(frozen=True, slots=True)
class CapacitorClass:
    """A kind of capacitor.

    Attributes
    ----------
    name
        Its name, unique in the technology.
    rating
        Highest voltage across it [V], before derating.
    density
        Capacitance per area, layout included [F/mm2].
    plate_fraction
        Parasitic capacitance of one plate to ground, as a share of the capacitance [1].
    plate
        Which plate has the parasitic: the one at the higher potential ("plus"), the other ("minus"), or the
        designer's choice ("either").
    series_resistance
        Series resistance times area [ohm mm2].
    leakage
        Leakage current per area at rated voltage [A/mm2].
    least_area
        Smallest capacitor that is made [mm2].
    """

    name: str
    rating: float
    density: float
    plate_fraction: float
    plate: Literal["plus", "minus", "either"]
    series_resistance: float
    leakage: float
    least_area: float


@dataclass(frozen=True, slots=True)
class SwitchClass:
    """A kind of switch.

    Attributes
    ----------
    name
        Its name, unique in the technology.
    polarity
        "nmos" or "pmos".
    rating
        Highest voltage that it blocks [V], before derating.
    resistance
        Specific on-resistance: resistance times area, layout included [ohm mm2].
    gate_charge
        Gate charge per area at the drive voltage [C/mm2].
    drive
        Gate drive voltage [V].
    output_charge
        Output charge per area at `output_charge_voltage` [C/mm2].
    output_charge_voltage
        Blocking voltage at which `output_charge` is given [V].
    output_charge_exponent
        How the output charge grows with voltage [1]: 1 for a linear capacitance, 0.5 for an abrupt junction.
    least_area
        Smallest device that is made [mm2].
    leakage
        Leakage current per area while it blocks its rated voltage [A/mm2].
    """

    name: str
    polarity: Literal["nmos", "pmos"]
    rating: float
    resistance: float
    gate_charge: float
    drive: float
    output_charge: float
    output_charge_voltage: float
    output_charge_exponent: float
    least_area: float
    leakage: float = 0.0

    def output_charge_at(self, voltage: ArrayLike) -> FloatArray:
        """Output charge per area [C/mm2] at blocking voltages [V], ``q_ref (V / V_ref)^m``; any shape."""
        relative = np.asarray(voltage, dtype=np.float64) / self.output_charge_voltage
        return np.asarray(self.output_charge * relative**self.output_charge_exponent)


@dataclass(frozen=True, slots=True)
class CapacitorColumns:
    """The capacitor classes as arrays, each of shape (classes,), in the order of the technology.

    `limit` is the derated rating [V]; the others are as in `CapacitorClass`.
    """

    limit: FloatArray
    rating: FloatArray
    density: FloatArray
    plate_fraction: FloatArray
    series_resistance: FloatArray
    leakage: FloatArray
    least_area: FloatArray


@dataclass(frozen=True, slots=True)
class SwitchColumns:
    """The switch classes as arrays, each of shape (classes,), in the order of the technology.

    `limit` is the derated rating [V]; the others are as in `SwitchClass`.
    """

    limit: FloatArray
    rating: FloatArray
    resistance: FloatArray
    gate_charge: FloatArray
    drive: FloatArray
    output_charge: FloatArray
    output_charge_voltage: FloatArray
    output_charge_exponent: FloatArray
    least_area: FloatArray
    leakage: FloatArray


@dataclass(frozen=True, slots=True)
class Choice:
    """The class chosen for each of an array of elements; every array has the shape of the voltages asked for.

    Attributes
    ----------
    index
        Position of the class in the technology.
    series
        How many devices of it stand in series [1].
    cost
        What was made least: ``series^2 / density`` [mm2/F] for a capacitor, ``series^2 x resistance``
        [ohm mm2] for a switch, the area [mm2] for the smallest device.
    """

    index: IntArray
    series: IntArray
    cost: FloatArray


@dataclass(frozen=True, slots=True)
class Technology:
    """What converters are built from.

    Attributes
    ----------
    name
        The name it was loaded by: the file's name without suffix.
    title
        One line for people.
    kind
        "chip" or "board".
    capacitor_derating, switch_derating
        Share of its rating that an element may see [1].
    capacitors, switches
        The classes, at least one of each.
    controller_power
        Power of the controller [W].
    wiring_resistance
        Resistance of the wiring, in series with the output [ohm].
    sleep_power
        Power of the controller while the load sleeps [W]; None if it is the same.
    """

    name: str
    title: str
    kind: Literal["chip", "board"]
    capacitor_derating: float
    switch_derating: float
    capacitors: tuple[CapacitorClass, ...]
    switches: tuple[SwitchClass, ...]
    controller_power: float = 0.0
    wiring_resistance: float = 0.0
    sleep_power: float | None = None

    @property
    def fingerprint(self) -> str:
        """Twelve hexadecimal digits that change with any value, but not with the file's name or layout."""
        return fingerprint({name: value for name, value in asdict(self).items() if name != "name"})

    def capacitor_columns(self) -> CapacitorColumns:
        """Return the capacitor classes as arrays."""
        return _columns(CapacitorColumns, self.capacitors, self.capacitor_derating)

    def switch_columns(self) -> SwitchColumns:
        """Return the switch classes as arrays."""
        return _columns(SwitchColumns, self.switches, self.switch_derating)

    def capacitor_choice(self, voltage: ArrayLike) -> Choice:
        """Choose the capacitor class that takes the least area per capacitance.

        Parameters
        ----------
        voltage
            Highest voltage across each capacitor [V], not negative; any shape.

        Returns
        -------
        Choice
            Of every class with s = ceil(voltage / derated rating) in series, the one with the least
            ``s^2 / density`` [mm2/F]; of equal ones that with fewer in series, then the earlier one.
        """
        columns = self.capacitor_columns()
        return _least(voltage, columns.limit, 1 / columns.density, power=2)

    def switch_choice(self, voltage: ArrayLike) -> Choice:
        """Choose the switch class that takes the least area per conductance.

        Parameters
        ----------
        voltage
            Highest voltage that each switch blocks [V], not negative; any shape.

        Returns
        -------
        Choice
            Of every class with s = ceil(voltage / derated rating) in series, the one with the least
            ``s^2 x resistance`` [ohm mm2]; of equal ones that with fewer in series, then the earlier one.
        """
        columns = self.switch_columns()
        return _least(voltage, columns.limit, columns.resistance, power=2)

    def smallest_switch(self, voltage: ArrayLike) -> Choice:
        """Choose the smallest switch that blocks each voltage, for switches that carry no charge.

        Parameters
        ----------
        voltage
            Highest voltage that each switch blocks [V], not negative; any shape.

        Returns
        -------
        Choice
            Of every class with s = ceil(voltage / derated rating) in series, the one with the least
            ``s x least_area`` [mm2]; of equal ones that with fewer in series, then the earlier one.
        """
        columns = self.switch_columns()
        return _least(voltage, columns.limit, columns.least_area, power=1)


def load_technology(name_or_path: str | Path, *, beside: Path | None = None) -> Technology:
    """Load a technology.

    Parameters
    ----------
    name_or_path
        Name of a shipped technology, or path of a TOML file (with its suffix).
    beside
        Folder that a relative path starts from; the working directory if None.

    Returns
    -------
    Technology
        The technology, in SI units with areas in mm2.

    Raises
    ------
    CapmusterError
        If there is no such technology, or the file holds anything but a valid one: a line for each fault.
    """
    # pydantic is for those who read files.
    from capmuster.rank.inputs.technology_file import TechnologyFile  # noqa: PLC0415
    from capmuster.rank.inputs.tomlfile import load_model, locate  # noqa: PLC0415

    path = locate(name_or_path, "technologies", "technology", beside)
    content, _ = load_model(path, TechnologyFile, "technology")
    return Technology(
        name=path.stem,
        title=content.title,
        kind=content.kind,
        capacitor_derating=content.derating.capacitor,
        switch_derating=content.derating.switch,
        capacitors=tuple(CapacitorClass(**table.model_dump()) for table in content.capacitor),
        switches=tuple(SwitchClass(**table.model_dump()) for table in content.switch),
        controller_power=content.overhead.controller_power,
        wiring_resistance=content.overhead.wiring_resistance,
        sleep_power=content.overhead.sleep_power,
    )


def fingerprint(content: object) -> str:
    """Twelve hexadecimal digits of the SHA-256 of some plain content, whatever the order of its keys."""
    text = json.dumps(content, sort_keys=True, separators=(",", ":"), allow_nan=False)
    return hashlib.sha256(text.encode()).hexdigest()[:12]


Columns = TypeVar("Columns", CapacitorColumns, SwitchColumns)


def _columns(
    kind: type[Columns], classes: tuple[CapacitorClass, ...] | tuple[SwitchClass, ...], derating: float
) -> Columns:
    names = [field.name for field in fields(kind) if field.name != "limit"]
    arrays = {name: np.array([getattr(one, name) for one in classes]) for name in names}
    return kind(limit=arrays["rating"] * derating, **arrays)


def _least(voltage: ArrayLike, limit: FloatArray, unit_cost: FloatArray, power: int) -> Choice:
    """Class with the least ``s^power x unit_cost`` for each voltage."""
    volts = np.asarray(voltage, dtype=np.float64)
    if not np.all((volts >= 0) & np.isfinite(volts)):
        raise ValueError("voltages must be finite and not negative")
    volts = volts * (1 - _ROUNDING)
    # The choice is constant between multiples of the limits: far fewer than the elements of a census.
    most = np.maximum(np.ceil(volts.max(initial=0.0) / limit), 1.0)
    if most.sum() >= volts.size:
        return _evaluate(volts, limit, unit_cost, power)
    steps = [one * np.arange(1, count + 1) for one, count in zip(limit, most, strict=True)]
    upper = np.unique(np.concatenate(steps))
    table = _evaluate(upper * (1 - _ROUNDING), limit, unit_cost, power)
    position = np.searchsorted(upper, volts)
    return Choice(index=table.index[position], series=table.series[position], cost=table.cost[position])


def _evaluate(volts: FloatArray, limit: FloatArray, unit_cost: FloatArray, power: int) -> Choice:
    """`_least` element by element."""
    index = np.zeros(volts.shape, dtype=np.int64)
    series = np.zeros(volts.shape)
    cost = np.full(volts.shape, np.inf)
    for position in range(len(limit)):
        count = np.maximum(np.ceil(volts / limit[position]), 1.0)
        price = count**power * unit_cost[position]
        better = (price < cost * (1 - _TIE)) | ((price <= cost * (1 + _TIE)) & (count < series))
        index[better] = position
        series = np.where(better, count, series)
        cost = np.where(better, price, cost)
    return Choice(index=index, series=series.astype(np.int64), cost=cost)
