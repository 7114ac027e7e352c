"""Which ratios some number of flying capacitors reaches.

Makowski and Maksimovic, "Performance limits of switched-capacitor DC-DC converters", IEEE PESC 1995: with n
flying capacitors the positive ratios are P/Q with P and Q from 1 to the Fibonacci number F(n + 1) of
1, 2, 3, 5, 8, ... The census adds that the inverting ones are -P/Q with P + Q up to the same number.
"""

from __future__ import annotations

from fractions import Fraction


def fibonacci_bound(n: int) -> int:
    """F(n + 1) = 2, 3, 5, 8, 13, ... for n = 1, 2, 3, 4, 5, ... flying capacitors."""
    previous, number = 1, 1
    for _ in range(n):
        previous, number = number, previous + number
    return number


def capacitors_needed(ratio: Fraction) -> int:
    """Least number of flying capacitors that reaches a ratio other than 0."""
    reach = _reach_needed(ratio)
    n = 1
    while fibonacci_bound(n) < reach:
        n += 1
    return n


def nearest_attainable(ratio: Fraction, n: int) -> tuple[Fraction, ...]:
    """Attainable ratios next to ``ratio`` on either side, of its sign, the nearer first.

    Parameters
    ----------
    ratio
        Any ratio other than 0. An attainable one is its own and only neighbour.
    n
        Most flying capacitors, at least 1.
    """
    bound = fibonacci_bound(n)
    if _reach_needed(ratio) <= bound:
        return (ratio,)
    wanted = abs(ratio)
    below, above = None, None
    for q in range(1, bound + 1):
        most = bound if ratio > 0 else bound - q
        p = min(int(wanted * q), most)
        if p >= 1 and (below is None or Fraction(p, q) > below):
            below = Fraction(p, q)
        if p + 1 <= most and (above is None or Fraction(p + 1, q) < above):
            above = Fraction(p + 1, q)
    sign = 1 if ratio > 0 else -1
    found = [value for value in (below, above) if value is not None]
    return tuple(sign * value for value in sorted(found, key=lambda value: (abs(value - wanted), value)))


def _reach_needed(ratio: Fraction) -> int:
    if ratio > 0:
        return max(ratio.numerator, ratio.denominator)
    return ratio.denominator - ratio.numerator
