"""Notes for a person while something takes long: lines on standard error, a bar where that is a terminal."""

from __future__ import annotations

import sys
from contextlib import contextmanager
from typing import TYPE_CHECKING

if TYPE_CHECKING:
    from collections.abc import Callable, Iterator

    from rich.progress import Progress, TaskID

    from capmuster.rank.scores.scoredcensus import Note


@contextmanager
def told() -> Iterator[Callable[[Note], None]]:
    """Give a function to tell notes to; a count becomes a progress bar on a terminal, else one line."""
    teller = _Teller()
    try:
        yield teller.tell
    finally:
        teller.close()


class _Teller:
    def __init__(self) -> None:
        self.begun: set[str] = set()
        self.bar: Progress | None = None
        self.task: TaskID | None = None

    def tell(self, note: Note) -> None:
        if note.text not in self.begun:
            self.begun.add(note.text)
            self.close()
            if note.total and sys.stderr.isatty():
                self.open(note)
            else:
                print(f"capmuster: {note.text}", file=sys.stderr)  # noqa: T201 -- this is what it is for
        if self.bar is not None and self.task is not None:
            self.bar.update(self.task, completed=note.done, total=note.total)

    def open(self, note: Note) -> None:
        from rich.console import Console  # noqa: PLC0415 -- only for a terminal
        from rich.progress import BarColumn, Progress, TextColumn, TimeRemainingColumn  # noqa: PLC0415

        self.bar = Progress(
            TextColumn("{task.description}"),
            BarColumn(),
            TextColumn("{task.percentage:>3.0f} %"),
            TimeRemainingColumn(),
            console=Console(stderr=True),
        )
        self.bar.start()
        self.task = self.bar.add_task(note.text, total=note.total)

    def close(self) -> None:
        if self.bar is not None:
            self.bar.stop()
            self.bar = None
