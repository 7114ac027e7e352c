"""What a shortlist page shows, in plain values: nothing here knows how it was computed."""

from __future__ import annotations

from dataclasses import dataclass
from typing import TYPE_CHECKING, Literal

if TYPE_CHECKING:
    import numpy as np
    from numpy.typing import NDArray

    from capmuster.rank.drawing.shapes import Drawing


@dataclass(frozen=True, slots=True)
class PageColumn:
    """A column of the table.

    Attributes
    ----------
    key
        Its name, unique.
    heading, unit
        What its header says; the unit may be empty.
    meaning
        One line for the reader.
    kind
        "text"; "name", which is not broken into lines; "number"; "share", a number from 0 to 100 with a bar;
        or "flag".
    shown
        Whether it is shown at first.
    """

    key: str
    heading: str
    unit: str
    meaning: str
    kind: Literal["text", "name", "number", "share", "flag"]
    shown: bool = True


@dataclass(frozen=True, slots=True)
class Cell:
    """A value as it is written, and what it is sorted and filtered by (None for the text itself)."""

    text: str
    value: float | None = None


@dataclass(frozen=True, slots=True)
class Listing:
    """A small table: headings with units, rows, and which columns are set flush right."""

    headings: tuple[str, ...]
    rows: tuple[tuple[str, ...], ...]
    right: tuple[bool, ...]


@dataclass(frozen=True, slots=True)
class LossBar:
    """Losses at one operating point, term by term [W]."""

    label: str
    terms: tuple[tuple[str, float], ...]

    @property
    def total(self) -> float:
        """Sum of all terms [W]."""
        return sum(value for _, value in self.terms)


@dataclass(frozen=True, slots=True)
class ImpedanceCurve:
    """Output impedance against frequency; arrays of shape (f,).

    Attributes
    ----------
    frequency
        Ascending [Hz].
    exact, slow, fast
        Exact impedance, slow- and fast-switching limit [ohm].
    chosen
        The frequency of the design [Hz].
    budget
        The impedance that the droop allows [ohm].
    """

    frequency: NDArray[np.float64]
    exact: NDArray[np.float64]
    slow: NDArray[np.float64]
    fast: NDArray[np.float64]
    chosen: float
    budget: float


@dataclass(frozen=True, slots=True)
class Candidate:
    """One row of the table, and what it folds out to.

    Attributes
    ----------
    id, place, wiring
        Id, place in the ranking, wiring code.
    cells
        One for each column.
    area, efficiency
        For the plot [mm2], [1].
    capacitor_utilisation, switch_utilisation
        For the plot [1].
    pareto, family
        Whether no candidate beats it; whether it belongs to a family.
    diagram
        Its potential diagram.
    elements
        Its capacitors and switches.
    losses
        Its losses, at one or more operating points with the same terms.
    curve
        Its output impedance, or None.
    """

    id: str
    place: int
    wiring: str
    cells: tuple[Cell, ...]
    area: float
    efficiency: float
    capacitor_utilisation: float
    switch_utilisation: float
    pareto: bool
    family: bool
    diagram: Drawing
    elements: Listing
    losses: tuple[LossBar, ...]
    curve: ImpedanceCurve | None


@dataclass(frozen=True, slots=True)
class Population:
    """How many of all enumerated converters have which utilisations.

    Attributes
    ----------
    counts
        Shape (b, b): converters by capacitor utilisation (rows) and switch utilisation, in b equal bins of
        (0, 1] each.
    description
        What they are, in a sentence.
    """

    counts: NDArray[np.int64]
    description: str


@dataclass(frozen=True, slots=True)
class PageData:
    """A shortlist page.

    Attributes
    ----------
    title
        The job in a line.
    cautions
        Dangers, in whole sentences; may be empty.
    assumptions
        Name and value of everything a reader must know about the job.
    findings
        What the search covered and what came of it, in sentences.
    columns, candidates
        The table.
    efficiency_label
        What efficiency the plot shows.
    others
        Shape (k, 2): area [mm2] and efficiency [1] of what meets the brief and is not in the table.
    population
        What the shortlist was chosen from.
    provenance
        Versions and fingerprints, name and value.
    """

    title: str
    cautions: tuple[str, ...]
    assumptions: tuple[tuple[str, str], ...]
    findings: tuple[str, ...]
    columns: tuple[PageColumn, ...]
    candidates: tuple[Candidate, ...]
    efficiency_label: str
    others: NDArray[np.float64]
    population: Population
    provenance: tuple[tuple[str, str], ...]


BINS = 50
"""Bins along each axis of a population."""
