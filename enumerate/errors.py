"""The one error that a user sees: a field, its value, what is accepted, and where."""

from __future__ import annotations


class CapmusterError(ValueError):
    """A bad input, said in one line.

    Parameters
    ----------
    problem
        What is wrong, naming the field and the value that came.
    accepted
        What would have been accepted.
    place
        ``file:line`` where the input came from a file.
    """

    def __init__(self, problem: str, *, accepted: str | None = None, place: str | None = None) -> None:
        self.problem = problem
        self.accepted = accepted
        self.place = place
        super().__init__(str(self))

    def __str__(self) -> str:
        """``place: problem; accepted: ...`` with the parts that are known."""
        start = f"{self.place}: " if self.place else ""
        end = f"; accepted: {self.accepted}" if self.accepted else ""
        return f"{start}{self.problem}{end}"


class WiringError(CapmusterError):
    """A wiring code that cannot be read."""


class IllPosedError(CapmusterError):
    """A wiring that can be read and is no converter: the reason names the capacitors."""


def shortened(text: str, most: int = 40) -> str:
    """Cut what a user gave to a length that a message can quote, and escape what would break its line."""
    plain = "".join(c if c.isprintable() else c.encode("unicode_escape").decode() for c in text[: most + 1])
    return plain if len(plain) <= most else plain[: most - 3] + "..."
