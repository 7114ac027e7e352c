"""Which ratios some number of flying capacitors reaches.

Makowski and Maksimovic, "Performance limits of switched-capacitor DC-DC converters", IEEE PESC 1995: with n
flying capacitors the positive ratios P/Q with P and Q from 1 to the Fibonacci number F(n + 1) of 1, 2, 3, 5,
8, ... can be reached. With the ports' roles exchanged that is -P/Q with P + Q up to the same number. Complete
enumeration finds exactly these up to n = 5; for n = 6 it finds three triples of port charges more (`BEYOND`),
so that from there on the number is only known to be enough.
"""

from __future__ import annotations

from fractions import Fraction

ENUMERATED = 6
"""Most flying capacitors whose ratios are known by complete enumeration."""
BEYOND = ((5, 19, 24), (7, 17, 24), (11, 13, 24))
"""Triples of port charges that six flying capacitors reach although the largest is above F(7) = 21."""


def fibonacci_bound(n: int) -> int:
    """F(n + 1) = 2, 3, 5, 8, 13, ... for n = 1, 2, 3, 4, 5, ... flying capacitors."""
    previous, number = 1, 1
    for _ in range(n):
        previous, number = number, previous + number
    return number


def capacitors_needed(ratio: Fraction) -> int:
    """Least number of flying capacitors known to reach a ratio other than 0; exact up to `ENUMERATED`."""
    n = 1
    while not _reached(ratio, n):
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
    if _reached(ratio, n):
        return (ratio,)
    wanted = abs(ratio)
    bound = fibonacci_bound(n)
    candidates: set[Fraction] = set()
    for q in range(1, bound + 1):
        most = bound if ratio > 0 else bound - q
        p = min(int(wanted * q), most)
        candidates |= {Fraction(k, q) for k in (p, p + 1) if 1 <= k <= most}
    if n >= ENUMERATED:
        for a, b, c in BEYOND:
            pairs = ((a, c), (b, c)) if ratio > 0 else ((a, b),)
            candidates |= {Fraction(p, q) for pair in pairs for p, q in (pair, pair[::-1])}
    sides = ([c for c in candidates if c < wanted], [c for c in candidates if c > wanted])
    found = [side for side in (max(sides[0], default=None), min(sides[1], default=None)) if side is not None]
    sign = 1 if ratio > 0 else -1
    return tuple(sign * value for value in sorted(found, key=lambda value: (abs(value - wanted), value)))


def _reached(ratio: Fraction, n: int) -> bool:
    p, q = abs(ratio.numerator), ratio.denominator
    if (max(p, q) if ratio > 0 else p + q) <= fibonacci_bound(n):
        return True
    other = abs(p - q) if ratio > 0 else p + q
    return n >= ENUMERATED and tuple(sorted((p, q, other))) in BEYOND
