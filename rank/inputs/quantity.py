"""Engineering quantities as people write them: ``10 uF``, ``2.5 mm2``, ``4.7k``, ``85 %``.

The field fixes the unit, the text may add a prefix; nothing is guessed. Prefixes are those of the SI, with
their case: ``m`` is milli and ``M`` is mega (not the SPICE habit, where both are milli); micro is ``u`` or
the Greek letter. A plain number is in the field's own unit. Areas are in mm2 throughout, and a quantity per
area is per mm2; ``um2`` and ``cm2`` are read too, so that ``2 fF/um2`` is 2 nF/mm2.
"""

from __future__ import annotations

import math
import re
from decimal import Decimal
from fractions import Fraction
from typing import Final, Literal, get_args

from capmuster.enumerate.errors import CapmusterError

Unit = Literal[
    "V",
    "A",
    "W",
    "Hz",
    "F",
    "C",
    "J",
    "s",
    "ohm",
    "mm2",
    "ohm mm2",
    "F/mm2",
    "C/mm2",
    "A/mm2",
    "degC",
    "EUR",
    "1",
]
"""Units a field can have; ``1`` is a plain number or a percentage."""

Sign = Literal["positive", "not negative", "any"]
"""Which signs a field allows: above 0, 0 as well, or negative too."""

_PREFIXES: Final = {
    "f": -15,
    "p": -12,
    "n": -9,
    "u": -6,
    "m": -3,
    "": 0,
    "k": 3,
    "M": 6,
    "G": 9,
    "T": 12,
}
_AREAS: Final = {"um2": -6, "mm2": 0, "cm2": 2}  # decimal exponent of the area in mm2
_EXAMPLES: Final[dict[str, str]] = {
    "V": "a voltage such as 3.3 V or 850 mV",
    "A": "a current such as 3 mA",
    "W": "a power such as 20 uW",
    "Hz": "a frequency such as 2 MHz",
    "F": "a capacitance such as 10 uF",
    "C": "a charge such as 15 nC",
    "J": "an energy such as 2 mJ",
    "s": "a time such as 5 ns",
    "ohm": "a resistance such as 4.7k or 20 mohm",
    "mm2": "an area such as 2.5 mm2",
    "ohm mm2": "a specific resistance such as 0.5 ohm mm2 or 98 mohm mm2",
    "F/mm2": "a density such as 1.5 nF/mm2",
    "C/mm2": "a charge per area such as 2.4 nC/mm2",
    "A/mm2": "a current per area such as 10 nA/mm2",
    "degC": "a temperature such as 85 degC",
    "EUR": "a price such as 12.50 EUR",
    "1": "a number such as 0.85 or 85 %",
}
_SIGNS: Final[dict[str, str]] = {"positive": "above 0", "not negative": "0 or above", "any": "of either sign"}

# One spelling for each symbol before anything is matched: micro and mu, the two ohm signs, square, dot.
_SPELLING: Final = str.maketrans(
    {
        "\N{MICRO SIGN}": "u",
        "\N{GREEK SMALL LETTER MU}": "u",
        "\N{OHM SIGN}": "ohm",
        "\N{GREEK CAPITAL LETTER OMEGA}": "ohm",
        "\N{SUPERSCRIPT TWO}": "2",
        "\N{MIDDLE DOT}": " ",
        "\N{DOT OPERATOR}": " ",
        "*": " ",
    }
)
# What follows the number is a unit, so it starts with no part of a number: "1,2 V" and "1.2.3 V" are refused.
_NUMBER: Final = re.compile(
    r"([+-]?(?:[0-9]{1,40}\.?[0-9]{0,40}|\.[0-9]{1,40})(?:[eE][+-]?[0-9]{1,4})?)\s*((?![0-9.,+\-eE]).*)",
    re.DOTALL,
)
_RATIO: Final = re.compile(r"([+-]?[0-9]{1,18})\s*(?:/\s*([+-]?[0-9]{1,18}))?|([+-]?[0-9]{0,9}\.[0-9]{1,18})")
_LONGEST: Final = 80  # characters of a value that a message repeats
_EXTREME: Final = 30  # a power of ten beyond +-30 is a slip of the keyboard, in any unit


def show_value(value: object) -> str:
    """Return a value the way a message repeats it: in quotes if it was text, one line, not too long."""
    if isinstance(value, bool):
        return str(value).lower()
    if isinstance(value, dict):
        return "a table"
    if isinstance(value, list | tuple):
        return "a list"
    text = (
        repr(value) if isinstance(value, str) else str(value).replace("Infinity", "inf").replace("NaN", "nan")
    )
    return text if len(text) <= _LONGEST else f"{text[: _LONGEST - 3]}..."


def _exponent(text: str, unit: str) -> int | None:
    """Decimal exponent from a number followed by `text` to the field's unit; None if the unit is another."""
    text = " ".join(text.translate(_SPELLING).replace("^2", "2").split())
    if not text:
        return 0
    if unit == "1":
        return -2 if text == "%" else None
    if unit == "mm2":
        return _AREAS.get(text)
    base, slash, per = unit.partition("/")
    base, blank, times = base.partition(" ")
    name = "[Oo]hms?" if base == "ohm" else base
    if slash or blank:
        tail = rf" ?/ ?({'|'.join(_AREAS)})" if slash else rf" ({'|'.join(_AREAS)})"
        match = re.fullmatch(rf"([fpnumkMGT]?){name}{tail}", text)
        if not match:
            return None
        area = _AREAS[match[2]] - _AREAS[per or times]
        return _PREFIXES[match[1]] + (-area if slash else area)
    match = re.fullmatch(rf"([fpnumkMGT]?)(?:{name})?", text)
    return _PREFIXES[match[1]] if match else None


def _accepted(unit: Unit, sign: Sign, least: float | None, most: float | None) -> str:
    text = _EXAMPLES[unit]
    if unit != "1":
        text += f" (a plain number is in {unit})"
    low = _SIGNS[sign] if least is None else f"{format_quantity(least, unit)} or more"
    return f"{text}, {low}" if most is None else f"{text}, {low}, {format_quantity(most, unit)} at most"


def parse_quantity(
    value: object,
    unit: Unit,
    *,
    sign: Sign = "positive",
    least: float | None = None,
    most: float | None = None,
) -> Fraction:
    """Read a quantity exactly, in its field's unit.

    Parameters
    ----------
    value
        What stood in the file: text such as ``"10 uF"``, or a plain number [`unit`].
    unit
        The unit of the field.
    sign
        The signs allowed.
    least, most
        The range allowed [`unit`], both ends included; no limit if None.

    Returns
    -------
    fractions.Fraction
        The value [`unit`] without rounding: ``"0.1 V"`` is one tenth.

    Raises
    ------
    CapmusterError
        If it is no number, not finite, in another unit, or outside what is allowed. The message names the
        value and what is accepted; the caller knows the field.
    """
    accepted = _accepted(unit, sign, least, most)
    try:
        number = _number(value, unit)
        _check_range(number, sign, least, most)
    except _RefusedError as reason:
        raise CapmusterError(f"value {show_value(value)} {reason}", accepted=accepted) from None
    return number


class _RefusedError(Exception):
    """Why a value is refused, as the end of a sentence that starts with the value."""


def _number(value: object, unit: Unit) -> Fraction:
    """Exact number in the field's unit."""
    if isinstance(value, bool) or not isinstance(value, str | int | float | Decimal):
        raise _RefusedError("is not a quantity")
    if not isinstance(value, str):
        # The shortest decimal text of a float is what was meant: 1.2 is twelve tenths, not a binary fraction.
        decimal = Decimal(repr(value)) if isinstance(value, float) else Decimal(value)
        if not decimal.is_finite():
            raise _RefusedError("is not finite")
        if decimal and abs(decimal.adjusted()) > _EXTREME:
            raise _RefusedError("is out of range")
        return Fraction(decimal)
    match = _NUMBER.fullmatch(value.strip())
    if not match:
        infinite = value.strip().lower().lstrip("+-").startswith(("inf", "nan"))
        raise _RefusedError("is not finite" if infinite else "is not a number with a unit")
    exponent = _exponent(match[2], unit)
    if exponent is None:
        raise _RefusedError(f"has the wrong unit {show_value(match[2])}")
    return Fraction(match[1]) * Fraction(10) ** exponent


def _check_range(number: Fraction, sign: Sign, least: float | None, most: float | None) -> None:
    if number and not Fraction(1, 10**_EXTREME) <= abs(number) <= 10**_EXTREME:
        raise _RefusedError("is out of range")
    if number < 0 and sign != "any":
        raise _RefusedError("is negative")
    if number == 0 and sign == "positive":
        raise _RefusedError("is zero")
    if least is not None and number < Fraction(repr(float(least))):
        raise _RefusedError("is too small")
    if most is not None and number > Fraction(repr(float(most))):
        raise _RefusedError("is too large")


def read_quantity(
    field: str,
    value: object,
    unit: Unit,
    *,
    sign: Sign = "positive",
    least: float | None = None,
    most: float | None = None,
    place: str | None = None,
) -> float:
    """Read a quantity as a float, with the field in the error message.

    Parameters
    ----------
    field
        The field's name for the message.
    value, unit, sign, least, most
        As in `parse_quantity`.
    place
        ``file:line`` if the value came from a file.

    Returns
    -------
    float
        The value [`unit`].

    Raises
    ------
    CapmusterError
        As `parse_quantity`, with the field named.
    """
    try:
        return float(parse_quantity(value, unit, sign=sign, least=least, most=most))
    except CapmusterError as error:
        raise CapmusterError(f"{field}: {error.problem}", accepted=error.accepted, place=place) from None


def parse_ratio(value: object) -> Fraction:
    """Read a conversion ratio V_out/V_in exactly: ``2/5``, ``-1``, ``0.4``.

    Parameters
    ----------
    value
        Text, or a whole or decimal number.

    Returns
    -------
    fractions.Fraction
        The ratio, never 0.

    Raises
    ------
    CapmusterError
        If it is 0, divides by 0, or is not a number.
    """
    accepted = "output over input as a fraction or number other than 0, such as 2/5, 3 or -1/2"
    shown = f"ratio {show_value(value)}"
    if isinstance(value, bool) or not isinstance(value, str | int | float | Decimal | Fraction):
        raise CapmusterError(f"{shown} is not a number", accepted=accepted)
    match = _RATIO.fullmatch(str(value).strip())
    if not match:
        hint = " (3:1 reads both ways)" if isinstance(value, str) and ":" in value else ""
        raise CapmusterError(f"{shown} is not a number{hint}", accepted=accepted)
    if match[2] and not int(match[2]):
        raise CapmusterError(f"{shown} divides by 0", accepted=accepted)
    ratio = Fraction(match[3]) if match[3] else Fraction(int(match[1]), int(match[2] or 1))
    if not ratio:
        raise CapmusterError(f"{shown} is 0", accepted=accepted)
    return ratio


def format_quantity(value: float, unit: Unit, digits: int = 3) -> str:
    """Write a quantity for a table: ``4.7 mΩ``, ``0.35 mm²``, ``85.2 %``.

    Parameters
    ----------
    value
        The value [`unit`].
    unit
        Its unit; areas keep mm2 and take no prefix, the unit ``1`` is written as a percentage.
    digits
        Significant digits; zeros at the end of the decimals are left out.

    Returns
    -------
    str
        The text, with ``n/a`` for not-a-number and ``∞`` for infinity; `parse_quantity` reads the others.
    """
    symbol = unit.replace("ohm", "\N{GREEK CAPITAL LETTER OMEGA}").replace("mm2", "mm\N{SUPERSCRIPT TWO}")
    if math.isnan(value):
        return "n/a"
    if math.isinf(value):
        return f"{'-' if value < 0 else ''}\N{INFINITY} {'%' if unit == '1' else symbol}"
    if unit == "1":
        return f"{_plain(value * 100, digits)} %"
    if unit == "mm2" or value == 0:
        return f"{_plain(value, digits)} {symbol}"
    # The exponent is taken after rounding, so that 999.96 becomes 1 k and not 1000.
    power = int(f"{value:.{digits - 1}e}".partition("e")[2])
    exponent = min(max(3 * (power // 3), min(_PREFIXES.values())), max(_PREFIXES.values()))
    prefix = next(name for name, size in _PREFIXES.items() if size == exponent)
    scaled = float(Fraction(repr(float(value))) / Fraction(10) ** exponent)
    return f"{_plain(scaled, digits)} {prefix.replace('u', chr(0xB5))}{symbol}"


def _plain(value: float, digits: int) -> str:
    """`digits` significant digits without an exponent where that stays short, and without idle zeros."""
    text = f"{value:.{digits}g}"
    if "e" not in text:
        return "0" if text == "-0" else text
    exponent = int(text.partition("e")[2])
    if -digits - 3 <= exponent <= digits + 3:
        return f"{Decimal(text):f}"
    return text


UNITS: Final[tuple[Unit, ...]] = get_args(Unit)
"""Every unit that a field can have."""
