"""A pass over all cells of many capacitors, split into independent shards of skeletons.

Shards run under whichever joblib backend is active, on one machine or on many, in any order; what they
return is taken in their own order, so the result never depends on how the work was spread.
"""

from __future__ import annotations

from contextlib import contextmanager
from dataclasses import dataclass
from functools import partial
from typing import TYPE_CHECKING, TypeVar

from capmuster.enumerate.errors import CapmusterError
from capmuster.enumerate.skeletons import skeletons
from capmuster.enumerate.threads import one_thread
from capmuster.rank.scores.scoredcensus import Note

if TYPE_CHECKING:
    from collections.abc import Callable, Collection, Iterator

    from capmuster.enumerate.skeletons import SkeletonTable

_T = TypeVar("_T")
_SKELETONS_PER_SHARD = 512
_PATIENCE = 10  # [s] for a scheduler to answer


@dataclass(frozen=True, slots=True)
class Shard:
    """A run of skeletons.

    Attributes
    ----------
    number
        Which shard it is, from 0.
    first
        Number of its first skeleton in the whole list.
    table
        Its skeletons.
    """

    number: int
    first: int
    table: SkeletonTable


def shards(n: int) -> list[Shard]:
    """Split the skeletons of ``n`` capacitors into runs."""
    table = skeletons(n)
    return [
        Shard(number, first, table.take(slice(first, first + _SKELETONS_PER_SHARD)))
        for number, first in enumerate(range(0, len(table), _SKELETONS_PER_SHARD))
    ]


def run_shards(
    n: int,
    task: Callable[[Shard], _T],
    text: str,
    *,
    jobs: int | None,
    say: Callable[[Note], None],
    skip: Collection[int] = (),
) -> Iterator[tuple[int, _T]]:
    """Run a task on every shard and yield ``(number of the shard, what it returned)`` in order.

    Parameters
    ----------
    n
        Number of flying capacitors.
    task
        A module's function, or a partial of one.
    text
        What it is about, for people.
    jobs
        Processes; None for what the active joblib backend has by default.
    say
        Is told how far it is.
    skip
        Shards that are left out.
    """
    from joblib import Parallel, delayed  # type: ignore[import-untyped]  # noqa: PLC0415 -- slow to import

    every = shards(n)
    done = len(skip)
    say(Note(text, done, len(every)))
    run = delayed(partial(_alone, task))
    results = Parallel(n_jobs=jobs, return_as="generator", pre_dispatch="3*n_jobs")(
        run(shard) for shard in every if shard.number not in skip
    )
    for result in results:
        done += 1
        say(Note(text, done, len(every)))
        yield result


@contextmanager
def spread(scheduler: str | None) -> Iterator[None]:
    """Let shards run on the Dask cluster of a scheduler; without one, on this machine.

    Raises
    ------
    CapmusterError
        When Dask is not installed, or nothing answers at the address.
    """
    if scheduler is None:
        yield
        return
    from joblib import parallel_config  # noqa: PLC0415 -- slow to import

    try:
        from distributed import Client  # noqa: PLC0415 -- an optional extra
    except ImportError:
        raise CapmusterError(
            f"scheduler: '{scheduler}' needs Dask", accepted="an installation with capmuster[cluster]"
        ) from None
    try:
        client = Client(scheduler, timeout=_PATIENCE)  # type: ignore[no-untyped-call]
    except (OSError, ValueError) as error:
        raise CapmusterError(
            f"scheduler: nothing answers at '{scheduler}'", accepted="an address such as tcp://10.0.0.5:8786"
        ) from error
    with client, parallel_config(backend="dask"):
        yield


def _alone(task: Callable[[Shard], _T], shard: Shard) -> tuple[int, _T]:
    with one_thread():
        return shard.number, task(shard)
