"""Sums and products carried to about 32 digits, as pairs of doubles; floor 2.

A number is hi + lo with |lo| at most half a unit in the last place of hi. Used where small differences
of large totals decide: utilities may sit at 1e12 and differ by 1e-3. Error-free transformations after
Dekker (1971, Numer. Math. 18, 224-242) and Knuth (The Art of Computer Programming 2, 4.2.2).
"""

from __future__ import annotations

from distill.numerics import compiled

__all__ = ["add", "scale", "subtract"]

_SPLIT = 134217729.0  # 2^27 + 1 halves a 53-bit significand


@compiled
def _two_sum(a: float, b: float) -> tuple[float, float]:
    s = a + b
    t = s - a
    return s, (a - (s - t)) + (b - t)


@compiled
def add(a_hi: float, a_lo: float, b_hi: float, b_lo: float) -> tuple[float, float]:
    """(a_hi + a_lo) + (b_hi + b_lo); relative error below 2^-102 of the larger of |a| and |b|.

    >>> add(1e16, 0.0, 1.0, 0.0)
    (1e+16, 1.0)
    """
    s, e = _two_sum(a_hi, b_hi)
    e += a_lo + b_lo
    hi = s + e
    return hi, e - (hi - s)


@compiled
def subtract(a_hi: float, a_lo: float, b_hi: float, b_lo: float) -> float:
    """(a_hi + a_lo) - (b_hi + b_lo) as one double.

    >>> subtract(1e16, 1.0, 1e16, 0.25)
    0.75
    """
    hi, lo = add(a_hi, a_lo, -b_hi, -b_lo)
    return hi + lo


@compiled
def scale(a_hi: float, a_lo: float, c: float) -> tuple[float, float]:
    """(a_hi + a_lo) c; relative error below 2^-102. Needs |a|, |c| < 1e290.

    >>> hi, lo = scale(1e16, 1.0, 0.1)
    >>> hi, round(lo, 3)  # the double 0.1 is 5.55e-18 above one tenth
    (1000000000000000.1, 0.031)
    """
    p = a_hi * c
    t = _SPLIT * a_hi
    a1 = t - (t - a_hi)
    a2 = a_hi - a1
    t = _SPLIT * c
    c1 = t - (t - c)
    c2 = c - c1
    e = ((a1 * c1 - p) + a1 * c2 + a2 * c1) + a2 * c2
    e += a_lo * c
    hi = p + e
    return hi, e - (hi - p)
