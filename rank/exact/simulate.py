"""Running a deck in ngspice, if it is installed."""

from __future__ import annotations

import re
import shutil
import subprocess
import tempfile
from dataclasses import dataclass
from pathlib import Path

from capmuster.enumerate.errors import CapmusterError
from capmuster.rank.exact.deck import EFFICIENCY, NO_LOAD, PEAK, RESISTANCE

HOW_TO_GET_IT = "ngspice is not installed; on Debian and Ubuntu: apt-get install ngspice"
LIMIT = 600.0
_MEASURE = re.compile(r"^\s*(\w+)\s*=\s*([-+.\deE]+)", re.MULTILINE)

_TROUBLE = re.compile(r"^.*(?:undefined|too small|singular|error).*$", re.MULTILINE | re.IGNORECASE)


@dataclass(frozen=True, slots=True)
class Simulation:
    """What the deck measured.

    Attributes
    ----------
    no_load_ratio
        No-load output voltage over input voltage.
    output_resistance
        Output resistance [ohm].
    efficiency
        Output power over input power of the loaded copy.
    switch_peaks
        Peak voltage of each switch while it blocks [V], in the order of the circuit.
    """

    no_load_ratio: float
    output_resistance: float
    efficiency: float
    switch_peaks: tuple[float, ...]


def ngspice_path() -> str | None:
    """Path of ngspice, or None without it."""
    return shutil.which("ngspice")


def simulate(deck: str) -> Simulation:
    """Run a deck in ngspice's batch mode and read its measures.

    Parameters
    ----------
    deck
        Text of the deck.

    Returns
    -------
    Simulation
        The measures.

    Raises
    ------
    CapmusterError
        ngspice is not installed, takes longer than ten minutes, or does not measure everything.
    """
    program = ngspice_path()
    if program is None:
        raise CapmusterError("no simulator", accepted=HOW_TO_GET_IT)
    with tempfile.TemporaryDirectory() as folder:
        file = Path(folder) / "deck.cir"
        file.write_text(deck, encoding="ascii")
        try:
            run = subprocess.run(  # noqa: S603 - our own deck, found by `which`
                [program, "-b", file.name],
                cwd=folder,
                capture_output=True,
                text=True,
                check=False,
                timeout=LIMIT,
            )
        except subprocess.TimeoutExpired as error:
            raise CapmusterError(f"ngspice takes longer than {LIMIT:g} s") from error
    # ngspice folds names to lower case.
    measures = {name.lower(): float(value) for name, value in _MEASURE.findall(run.stdout)}
    switches = re.findall(rf"^\.meas tran {PEAK}(\S+)", deck, re.MULTILINE)
    wanted = [NO_LOAD, RESISTANCE, EFFICIENCY, *(f"{PEAK}{switch}".lower() for switch in switches)]
    missing = [name for name in wanted if name not in measures]
    if missing:
        said = _TROUBLE.search(run.stderr + run.stdout)
        reason = said[0].strip() if said else "no reason given"
        raise CapmusterError(f"ngspice does not measure {', '.join(missing)}: {reason}")
    values = [measures[name] for name in wanted]
    return Simulation(values[0], values[1], values[2], tuple(values[3:]))
