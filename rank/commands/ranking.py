"""What the commands that start from a brief share."""

from __future__ import annotations

from typing import TYPE_CHECKING

if TYPE_CHECKING:
    from collections.abc import Sequence

    from capmuster.enumerate.wiring import Converter
    from capmuster.rank.shortlist import Shortlist


def ranked(brief: str, top: int, include: Sequence[str]) -> Shortlist:
    """Load a brief and rank its candidates.

    Raises
    ------
    CapmusterError
        When the brief, the number or an included wiring is refused.
    """
    from capmuster.enumerate.errors import CapmusterError  # noqa: PLC0415 -- nothing before it is needed
    from capmuster.rank.inputs.brief import load_brief  # noqa: PLC0415
    from capmuster.rank.lookup import find_converter  # noqa: PLC0415
    from capmuster.rank.shortlist import shortlist  # noqa: PLC0415

    def included(text: str) -> Converter:
        try:
            return find_converter(text)
        except CapmusterError as error:
            raise CapmusterError(f"include: {error.problem}", accepted=error.accepted) from None

    job = load_brief(brief)
    return shortlist(job, top=top, include=[included(text) for text in include])
