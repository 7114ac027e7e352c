"""How numbers are written in drawings."""

from __future__ import annotations

from typing import TYPE_CHECKING

if TYPE_CHECKING:
    from fractions import Fraction

_MOST_CHARACTERS = 7


def plain(value: Fraction) -> str:
    """Write a fraction exactly where that is short, or else with four figures and a mark of rounding."""
    text = str(value)
    if len(text) > _MOST_CHARACTERS:
        text = f"≈{float(value):.4g}"
    return text.replace("-", "\N{MINUS SIGN}")


def volts(value: Fraction, input_voltage: float) -> str:
    """Write a potential in volts, from its value per volt of input."""
    return f"{float(value) * input_voltage:.4g}".replace("-", "\N{MINUS SIGN}")
