"""Matrix products of a few dozen rows: a second thread only costs."""

from __future__ import annotations

from contextlib import contextmanager
from typing import TYPE_CHECKING

if TYPE_CHECKING:
    from collections.abc import Iterator


@contextmanager
def one_thread() -> Iterator[None]:
    """Keep the linear algebra library to one thread; work is split over processes instead."""
    from threadpoolctl import threadpool_limits  # type: ignore[import-untyped]  # noqa: PLC0415 -- seldom needed

    with threadpool_limits(1, user_api="blas"):
        yield
