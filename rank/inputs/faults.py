"""What is wrong with a file or an object, collected so that one error can list all of it."""

from __future__ import annotations

from dataclasses import dataclass, replace
from typing import TYPE_CHECKING

from capmuster.enumerate.errors import CapmusterError

if TYPE_CHECKING:
    from collections.abc import Iterable, Sequence

    from capmuster.rank.inputs.tomlplace import Path, Places


@dataclass(frozen=True, slots=True)
class Fault:
    """One thing that is wrong.

    Attributes
    ----------
    path
        Where: keys and list positions (from 0) from the top of the file.
    problem
        What is wrong.
    accepted
        What would have been accepted, if that can be said.
    named
        Whether `problem` names the last part of the path itself, as in "missing field 'minimum'".
    """

    path: Path
    problem: str
    accepted: str | None = None
    named: bool = False

    def error(self, places: Places | None = None) -> CapmusterError:
        """Return the fault as a one-line error, with its place where there is a file."""
        name = field_name(self.path[:-1] if self.named else self.path)
        return CapmusterError(
            f"{name}: {self.problem}" if name else self.problem,
            accepted=self.accepted,
            place=places.place(self.path) if places else None,
        )


def field_name(path: Path) -> str:
    """Name of a field for people: ``input.minimum``, ``capacitor 2: density`` (counted from 1)."""
    text = ""
    for part in path:
        if isinstance(part, int):
            text += f" {part + 1}"
        elif not text:
            text = part
        else:
            text += f"{': ' if text[-1].isdigit() else '.'}{part}"
    return text


class FaultsError(CapmusterError):
    """Everything that is wrong with a file or an object, a line each.

    Parameters
    ----------
    faults
        What is wrong; at least one.
    places
        The file they are about, if there is one.
    """

    def __init__(self, faults: Sequence[Fault], places: Places | None = None) -> None:
        self.faults = tuple(sorted(faults, key=lambda fault: places.line(fault.path) if places else 0))
        errors = [fault.error(places) for fault in self.faults]
        if len(errors) == 1:
            super().__init__(errors[0].problem, accepted=errors[0].accepted, place=errors[0].place)
        else:
            super().__init__("\n".join(map(str, errors)))

    def below(self, path: Path) -> list[Fault]:
        """Return the faults with `path` put before their own paths."""
        return [replace(fault, path=(*path, *fault.path)) for fault in self.faults]


def raise_faults(faults: Iterable[Fault]) -> None:
    """Raise one error that lists the faults; without faults, none.

    Parameters
    ----------
    faults
        What is wrong.

    Raises
    ------
    FaultsError
        If there is a fault.
    """
    listed = list(faults)
    if listed:
        raise FaultsError(listed)
