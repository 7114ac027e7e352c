"""Find the converter that a wiring code or an id names."""

from __future__ import annotations

import re
from typing import TYPE_CHECKING

from capmuster.enumerate.errors import CapmusterError, IllPosedError
from capmuster.enumerate.identity import words_of_id
from capmuster.enumerate.wiring import Converter

if TYPE_CHECKING:
    from collections.abc import Iterable

_ACCEPTED = "a wiring code such as 'I-G/O-I', or an id as list and rank print it"
_AN_ID = re.compile(r"[0-9]+-[0-9a-z]+")
_LARGEST_FAMILY_MEMBER = 64


def find_converter(text: str) -> Converter:
    """Read a wiring code, or look up an id.

    An id of up to six capacitors holds the wiring itself; a longer one is looked up in the families.

    Raises
    ------
    CapmusterError
        When the text is neither, or names no converter.
    """
    text = text.strip()
    if "/" in text or not text:
        return Converter.parse(text)
    if not _AN_ID.fullmatch(text):
        raise CapmusterError(f"{text!r} is neither a wiring code nor an id", accepted=_ACCEPTED)
    words = words_of_id(text)
    unknown = CapmusterError(f"id '{text}' is unknown", accepted=_ACCEPTED)
    if words is None:
        found = next((one for one in _family_members(int(text.partition("-")[0])) if one.id == text), None)
        if found is None:
            raise CapmusterError(
                f"id '{text}' is no family member's; above six capacitors other ids cannot be looked up",
                accepted="a wiring code",
            )
        return found
    try:
        converter = Converter.of(words)
    except IllPosedError:
        raise unknown from None
    if converter.id != text:
        raise unknown
    return converter


def _family_members(n: int) -> Iterable[Converter]:
    from capmuster.enumerate.families import members  # noqa: PLC0415 -- only for large ids

    if n > _LARGEST_FAMILY_MEMBER:
        return ()
    return (member.converter for member in members(n, n))
