"""What the designer asks for: the rail, where to search, and what the converter may cost."""

from __future__ import annotations

from dataclasses import asdict, dataclass, fields, replace
from typing import TYPE_CHECKING, Literal

import numpy as np

from capmuster.enumerate.errors import CapmusterError
from capmuster.rank.inputs.brief_checks import brief_faults, exact_of
from capmuster.rank.inputs.conditions import LoadPoint, Tolerance
from capmuster.rank.inputs.faults import FaultsError, raise_faults
from capmuster.rank.inputs.technology import Technology, fingerprint, load_technology

if TYPE_CHECKING:
    from fractions import Fraction
    from pathlib import Path as FilePath

    from numpy.typing import ArrayLike, NDArray

    from capmuster.rank.inputs.brief_file import BriefFile
    from capmuster.rank.inputs.parts_request import PartsRequest

Objective = Literal["conduction-area", "least-loss", "least-area", "power-density"]
Regulation = Literal["frequency", "conductance"]
Drive = Literal["any", "rails"]
Use = Literal["fixed-ratio", "regulated"]

_ROUNDING = 1e-12  # relative: a droop budget this small is no more than the rounding of its two terms


@dataclass(frozen=True, slots=True)
class Brief:
    """One converter to be chosen.

    A brief is checked when it is made, by hand as from a file.

    Attributes
    ----------
    title
        One line for people.
    technology
        What it is built from.
    input_minimum, input_nominal, input_maximum
        Input voltage [V].
    use
        "fixed-ratio": the output follows the input and droops with the load; "regulated": it is held.
    required
        The least acceptable output in fixed-ratio use, the held one in regulated use [V]; negative for an
        inverting converter.
    current
        Load current [A].
    frequency
        Switching frequency [Hz].
    ratios
        Ratios V_out/V_in to search, or None for all that hold the output.
    most_capacitors
        Most flying capacitors [1].
    most_switches
        Most switches [1], or None for any number.
    area
        Most area for silicon and capacitors together [mm2], or None if it is free.
    silicon_area, capacitor_area
        Most area for switches and for capacitors apart [mm2]: both, or None if `area` holds or it is free.
    efficiency_floor
        Least efficiency at the worst input of the range [1], or None.
    name
        The name it was loaded by: the file's name without suffix.
    objective
        What is ranked by. "conduction-area": the least area whose conduction meets the droop at `frequency`.
        With all losses counted: "least-loss" at the nominal input, or over `profile`, within the area
        budgets; "least-area" that keeps the efficiency floor at every input; "power-density", the greatest
        one that keeps the floor at the nominal input, with the load free from `current_least` to `current`.
    frequency_minimum
        Lowest switching frequency [Hz], which makes `frequency` the highest one; None if it is fixed.
    duty
        Share of phase 1 [1], or None if it is free.
    regulation
        What holds the output in regulated use: the frequency, or the on-resistances at a fixed frequency.
    output_most
        In fixed-ratio use the highest output that is acceptable, at the highest input without load [V], or
        None.
    current_least
        Lowest load current, for "power-density" [A].
    profile
        The load over time, or empty for the full load all the time.
    drive
        "rails" leaves out converters with a switch whose gate no rail can drive.
    tolerance
        How far parts and conditions may be off, or None.
    output_ripple, input_ripple
        Peak-to-peak ripple that the capacitors at output and input must keep [V], or None.
    copies
        Interleaved copies that share the load.
    parts
        What is asked of discrete parts, or None.

    Raises
    ------
    CapmusterError
        If the values contradict each other or ask for what no converter can do: a line for each fault.
    """

    title: str
    technology: Technology
    input_minimum: float
    input_nominal: float
    input_maximum: float
    use: Use
    required: float
    current: float
    frequency: float
    ratios: tuple[Fraction, ...] | None = None
    most_capacitors: int = 4
    most_switches: int | None = None
    area: float | None = None
    silicon_area: float | None = None
    capacitor_area: float | None = None
    efficiency_floor: float | None = None
    name: str = ""
    objective: Objective = "conduction-area"
    frequency_minimum: float | None = None
    duty: float | None = 0.5
    regulation: Regulation = "frequency"
    output_most: float | None = None
    current_least: float | None = None
    profile: tuple[LoadPoint, ...] = ()
    drive: Drive = "any"
    tolerance: Tolerance | None = None
    output_ripple: float | None = None
    input_ripple: float | None = None
    copies: int = 1
    parts: PartsRequest | None = None

    def __post_init__(self) -> None:
        """Check the values against each other."""
        raise_faults(brief_faults(self))

    @property
    def sign(self) -> int:
        """1, or -1 for an inverting converter."""
        return 1 if self.required > 0 else -1

    @property
    def counts_losses(self) -> bool:
        """Whether the ranking counts all losses."""
        return self.objective != "conduction-area"

    @property
    def least_ratio(self) -> Fraction:
        """``|V_required| / V_in,min``, exact; a ratio must be above it in magnitude."""
        return exact_of(abs(self.required)) / exact_of(self.input_minimum)

    @property
    def fingerprint(self) -> str:
        """Twelve hexadecimal digits that change with any value, but not with the file's name or layout."""
        content = {one.name: getattr(self, one.name) for one in fields(self) if one.name != "name"}
        content["technology"] = self.technology.fingerprint
        content["profile"] = [asdict(point) for point in self.profile]
        content["tolerance"] = None if self.tolerance is None else asdict(self.tolerance)
        content["parts"] = None if self.parts is None else self.parts.content()
        content["ratios"] = None if self.ratios is None else [str(ratio) for ratio in self.ratios]
        return fingerprint(content)

    def holds(self, ratio: Fraction) -> bool:
        """Whether a converter of this ratio has any droop budget, decided exactly."""
        return ratio * self.sign > self.least_ratio

    def bears(self, ratio: Fraction) -> bool:
        """Whether the load bears the output of this ratio at the highest input, decided exactly."""
        if self.output_most is None:
            return True
        return ratio * self.sign * exact_of(self.input_maximum) <= exact_of(abs(self.output_most))

    def r_max(self, ratio: ArrayLike) -> NDArray[np.float64]:
        """Return the highest output impedance that meets the output at the least input.

        Parameters
        ----------
        ratio
            Ratios M = V_out/V_in [1]; any shape.

        Returns
        -------
        numpy.ndarray
            ``(|M| V_in,min - |V_required|) / I`` [ohm], in the shape of `ratio`. Where a ratio cannot hold
            the output it is 0 or negative; a ratio of the wrong sign counts as -|M|.
        """
        signed = np.asarray(ratio, dtype=np.float64) * self.sign
        budget = signed * self.input_minimum - abs(self.required)
        budget = np.where(np.abs(budget) <= _ROUNDING * abs(self.required), 0.0, budget)
        return np.asarray(budget / self.current)


def load_brief(name_or_path: str | FilePath) -> Brief:
    """Load a brief.

    Parameters
    ----------
    name_or_path
        Name of a shipped brief, or path of a TOML file (with its suffix).

    Returns
    -------
    Brief
        The brief, in SI units with areas in mm2.

    Raises
    ------
    CapmusterError
        If there is no such brief, or the file holds anything but a valid one: a line for each fault.
    """
    # pydantic is for those who read files.
    from capmuster.rank.inputs.brief_file import BriefFile  # noqa: PLC0415
    from capmuster.rank.inputs.tomlfile import load_model, locate  # noqa: PLC0415

    path = locate(name_or_path, "briefs", "brief", None)
    content, places = load_model(path, BriefFile, "brief")
    try:
        technology = load_technology(content.technology, beside=path.parent)
    except FaultsError:
        raise  # it names the technology's own file and lines
    except CapmusterError as error:
        place = error.place or places.place(("technology",))
        raise CapmusterError(f"technology: {error.problem}", accepted=error.accepted, place=place) from None
    parts = None
    if content.parts is not None:
        from capmuster.rank.inputs.parts_request import request_of  # noqa: PLC0415

        parts = request_of(content.parts, path.parent, places)
    try:
        return _brief(content, technology, path.stem, parts)
    except FaultsError as error:
        raise FaultsError(error.faults, places) from None


def _brief(content: BriefFile, technology: Technology, name: str, parts: PartsRequest | None) -> Brief:
    derating, design, search, output = content.derating, content.design, content.search, content.output
    if derating is not None:
        technology = replace(
            technology,
            capacitor_derating=derating.capacitor or technology.capacitor_derating,
            switch_derating=derating.switch or technology.switch_derating,
        )
    profile = [LoadPoint(one.share, one.current, one.input) for one in content.load.profile]
    return Brief(
        title=content.title,
        technology=technology,
        input_minimum=content.input.minimum,
        input_nominal=content.input.nominal,
        input_maximum=content.input.maximum,
        use=output.use,
        required=output.required,
        current=content.load.current,
        frequency=design.highest_frequency,
        ratios=search.ratios,
        most_capacitors=search.capacitors,
        most_switches=search.switches,
        area=design.area,
        silicon_area=design.silicon_area,
        capacitor_area=design.capacitor_area,
        efficiency_floor=design.efficiency,
        name=name,
        objective=design.objective,
        frequency_minimum=design.frequency_minimum,
        duty=None if design.duty == "free" else design.duty,
        regulation=output.regulation or "frequency",
        output_most=output.most,
        current_least=content.load.least,
        profile=tuple(profile),
        drive=search.drive,
        tolerance=None if content.tolerance is None else Tolerance(**content.tolerance.model_dump()),
        output_ripple=output.ripple,
        input_ripple=content.input.ripple,
        copies=design.copies,
        parts=parts,
    )
