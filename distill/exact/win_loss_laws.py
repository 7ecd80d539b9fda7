"""Laws of win/loss values: sums, maxima and thresholds of independent ones; floor 2.

A law is a set of atoms, either at any places (`Atoms`, exact) or on a lattice k step, k whole (`Lattice`).
What lies between two lattice points goes to both so that its mean stays: then sums and maxima of lattice
laws are lattice laws again, nothing else is ever rounded, and

    E[g(law on the lattice)] >= E[g(law)]  for every convex g,

so expected maxima come out too large, by about step^2 / 8 times a density. Halving the step shows by how
much, but for mass that sits in single cells.
"""

from __future__ import annotations

import math
from collections.abc import Sequence
from dataclasses import dataclass

import numpy as np
from scipy.special import betainc, betainccinv, betaincinv

from distill.tree import Floats

__all__ = ["Atoms", "Lattice", "TooManyAtomsError", "atoms_on_lattice", "beta_on_lattice", "window"]

_EPS = 2.0**-52
_NEVER = 1e-19  # mass that may be moved: far below every stated error
_MOST_ATOMS = 2**15


class TooManyAtomsError(Exception):
    """An exact law would need more atoms than are kept; the lattice takes over."""


@dataclass(frozen=True, eq=False)
class Atoms:
    """P(X = at_m) = mass_m; `at` ascending; both (M,)."""

    at: Floats
    mass: Floats

    @classmethod
    def of(cls, at: Floats, mass: Floats) -> Atoms:
        """Sorted, atoms equal but for rounding made one."""
        order = np.argsort(at, kind="stable")
        at, mass = at[order], mass[order]
        apart = np.diff(at) > 4 * _EPS * max(abs(float(at[0])), abs(float(at[-1])))
        first = np.concatenate(([0], np.flatnonzero(apart) + 1))
        if len(first) > _MOST_ATOMS:
            raise TooManyAtomsError
        return cls(at[first], np.add.reduceat(mass, first))

    def plus(self, other: Atoms) -> Atoms:
        """X + Y."""
        if len(self.at) * len(other.at) > 16 * _MOST_ATOMS:
            raise TooManyAtomsError
        return Atoms.of((self.at[:, None] + other.at).ravel(), (self.mass[:, None] * other.mass).ravel())

    def negative(self) -> Atoms:
        """-X."""
        return Atoms(-self.at[::-1], self.mass[::-1])

    def clipped(self, low: float, high: float) -> Atoms:
        """min(max(X, low), high)."""
        return Atoms.of(np.clip(self.at, low, high), self.mass)

    @staticmethod
    def maxima(laws: Sequence[Atoms], leave_out: bool) -> list[Atoms]:
        """The largest of all, or for every law the largest of the others."""
        at = np.unique(np.concatenate([x.at for x in laws]))
        if len(at) > _MOST_ATOMS:
            raise TooManyAtomsError
        below = np.array(
            [np.append(0.0, np.cumsum(x.mass))[np.searchsorted(x.at, at, side="right")] for x in laws]
        )
        return [_kept(at, row) for row in _products(np.minimum(below, 1.0), leave_out)]

    def mean(self) -> float:
        """E X."""
        return float(self.at @ self.mass)


def _kept(at: Floats, below: Floats) -> Atoms:
    mass = np.diff(below, prepend=0.0)
    keep = mass > 0
    return Atoms(at[keep], mass[keep] / mass.sum())


@dataclass(frozen=True, eq=False)
class Lattice:
    """P(X = (start + m) step) = mass_m, (M,); the step is known from the context."""

    start: int
    mass: Floats

    @property
    def end(self) -> int:
        """Position of the last atom."""
        return self.start + len(self.mass) - 1

    def plus(self, other: Lattice) -> Lattice:
        """X + Y, by fast Fourier transforms: absolute errors of a few roundings."""
        n = len(self.mass) + len(other.mass) - 1
        if min(len(self.mass), len(other.mass)) <= 32:
            mass = np.convolve(self.mass, other.mass)
        else:
            size = 1 << (n - 1).bit_length()
            product = np.fft.rfft(self.mass, size) * np.fft.rfft(other.mass, size)
            mass = np.maximum(np.fft.irfft(product, size)[:n], 0.0)
        return Lattice(self.start + other.start, mass).trimmed()

    def negative(self) -> Lattice:
        """-X."""
        return Lattice(-self.end, self.mass[::-1])

    def trimmed(self) -> Lattice:
        """Without ends that never happen."""
        left = int(np.searchsorted(np.cumsum(self.mass), _NEVER))
        right = int(np.searchsorted(np.cumsum(self.mass[::-1]), _NEVER))
        kept = self.mass[left : max(len(self.mass) - right, left + 1)]
        return Lattice(self.start + left, kept / kept.sum())

    def clipped(self, low: int, high: int) -> Lattice:
        """min(max(X, low), high), in steps."""
        first, last = min(max(self.start, low), high), min(max(self.end, low), high)
        mass = np.zeros(last - first + 1)
        np.add.at(mass, np.clip(np.arange(self.start, self.end + 1), first, last) - first, self.mass)
        return Lattice(first, mass)

    @staticmethod
    def maxima(laws: Sequence[Lattice], leave_out: bool) -> list[Lattice]:
        """The largest of all, or for every law the largest of the others."""
        first, last = min(x.start for x in laws), max(x.end for x in laws)
        below = np.zeros((len(laws), last - first + 1))
        for row, x in zip(below, laws, strict=True):
            row[x.start - first : x.end - first + 1] = np.cumsum(x.mass)
            row[x.end - first :] = 1.0
        rows = _products(np.minimum(below, 1.0), leave_out)
        return [Lattice(first, np.diff(row, prepend=0.0)).trimmed() for row in rows]

    def tail(self, first: int, last: int) -> Floats:
        """E (X - k)+ in steps, k = first ... last."""
        at = np.arange(self.start, self.end + 1)
        above = np.append(np.cumsum(self.mass[::-1])[::-1][1:], 0.0)  # P(X > k)
        inside = np.append(np.cumsum(above[::-1])[::-1], 0.0)  # sum of P(X > j), j >= k
        k = np.arange(first, last + 1)
        out = inside[np.clip(k - self.start, 0, len(self.mass))]
        return np.asarray(out + np.maximum(at[0] - k, 0))

    def mean(self) -> float:
        """E X, in steps."""
        return float(self.start + np.arange(len(self.mass)) @ self.mass)


def _products(below: Floats, leave_out: bool) -> list[Floats]:
    """Product of all rows, or for every row of all others."""
    if not leave_out:
        return [below.prod(axis=0)]
    ones = np.ones((1, below.shape[1]))
    before = np.cumprod(np.concatenate((ones, below[:-1])), axis=0)
    after = np.cumprod(np.concatenate((ones, below[:0:-1])), axis=0)[::-1]
    return list(before * after)


def window(a: float, b: float) -> tuple[float, float]:
    """Between these p lies all of Beta(a, b) but 1e-19 at either end.

    >>> window(1.0, 1.0)
    (0.0, 1.0)
    """
    low, high = float(betaincinv(a, b, _NEVER)), float(betainccinv(a, b, _NEVER))
    low = low if low > 1e-6 else 0.0  # also where it is no number
    return low, high if low < high < 1 - 1e-6 else 1.0


def beta_on_lattice(a: float, b: float, low: float, width: float, step: float) -> Lattice:
    """low + width p, p ~ Beta(a, b), on the lattice."""
    p_low, p_high = window(a, b)
    first = math.floor((low + width * p_low) / step)
    last = max(math.ceil((low + width * p_high) / step), first + 1)
    edges = np.arange(first, last + 1)
    p = np.clip((edges * step - low) / width, 0.0, 1.0)
    below, moment = betainc(a, b, p), betainc(a + 1.0, b, p) * (a / (a + b))
    below[-1], moment[-1], below[0], moment[0] = 1.0, a / (a + b), 0.0, 0.0
    return _spread(first, np.diff(below), low * np.diff(below) + width * np.diff(moment), step)


def atoms_on_lattice(law: Atoms, step: float) -> Lattice:
    """Each atom between two lattice points."""
    cell = np.floor(law.at / step).astype(np.int64)
    first = int(cell[0])
    mass, moment = np.zeros(int(cell[-1]) - first + 1), np.zeros(int(cell[-1]) - first + 1)
    np.add.at(mass, cell - first, law.mass)
    np.add.at(moment, cell - first, law.mass * law.at)
    return _spread(first, mass, moment, step)


def _spread(first: int, mass: Floats, moment: Floats, step: float) -> Lattice:
    """Mass and first moment of every cell, shared by its ends."""
    mass = np.maximum(mass, 0.0)
    up = np.clip(moment / step - mass * np.arange(first, first + len(mass)), 0.0, mass)
    out = np.append(mass - up, 0.0)
    out[1:] += up
    return Lattice(first, out).trimmed()
