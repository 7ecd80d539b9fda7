"""Win/loss leaves below a choice that lies above chance nodes, h > 0; floor 2.

Such a group is worth a maximum of sums of maxima ... of independent leaves. Fix everything but leaf i, worth
y to the root: the group is worth  const + max(y, R)  for a random threshold R that the other leaves decide.
One pass up and one down give every R, by sums and products of distribution functions:

    up       value of a sum: convolution; of a maximum: product
    down     top: R = -inf;  child of a maximum: max(R, siblings);  part of a sum: R - the other parts

So leaf i competes as in a plain choice, T(y) = E (R - y)+ in the place of what its siblings add
(`win_loss_dynamic`, `win_loss_horizon`), and const follows from the group's value.

h finite and few atoms: exact. Else both passes run on lattices (`win_loss_laws`) of 1, 2 and 4 steps, and
for h infinite T and the value are extrapolated (Richardson). The next coarser lattices give a result that
differs by more than the error that is left, as long as each halving takes half of it away.
"""

from __future__ import annotations

import math
from collections.abc import Sequence
from dataclasses import dataclass, field, replace
from typing import Any, TypeVar

import numpy as np
from scipy.interpolate import CubicSpline

from distill.beta_numerics import beta_binomial_law
from distill.errors import RefusedError
from distill.exact.win_loss_laws import (
    Atoms,
    Lattice,
    TooManyAtomsError,
    atoms_on_lattice,
    beta_on_lattice,
    window,
)
from distill.tree import Floats, Ints

__all__ = ["NARROW", "Curve", "Later", "Shape", "curves"]

CELLS = 2**13  # of the finer lattice, over what the group is worth
_MAX_LEAVES = 2**11
_HEAVY = 0.01  # mass at one lattice point that halving the step may not show
_EPS = 2.0**-52
_L = TypeVar("_L", Atoms, Lattice)
NARROW = 1e3 * _EPS  # a support narrower than this share of where it lies is a sure value


@dataclass
class Shape:
    """Maxima and sums by turns, parents before children; node 0 is a maximum.

    parent : of every node. total : whether it is a sum. leaf : position among the group's leaves, or -1.
    """

    parent: list[int] = field(default_factory=list)
    total: list[bool] = field(default_factory=list)
    leaf: list[int] = field(default_factory=list)

    def add(self, parent: int, total: bool, leaf: int = -1) -> int:
        """A new node; its position."""
        self.parent.append(parent)
        self.total.append(total)
        self.leaf.append(leaf)
        return len(self.parent) - 1

    def children(self) -> list[list[int]]:
        """Of every node."""
        out: list[list[int]] = [[] for _ in self.parent]
        for c in range(1, len(self.parent)):
            out[self.parent[c]].append(c)
        return out

    def values(self, leaf: Floats) -> Floats:
        """Every node's value where the leaves are worth `leaf`."""
        children = self.children()
        out = np.zeros(len(self.parent))
        for v in reversed(range(len(self.parent))):
            if self.leaf[v] >= 0:
                out[v] = leaf[self.leaf[v]]
            else:
                parts = out[children[v]]
                out[v] = parts.sum() if self.total[v] else parts.max()
        return out


@dataclass(frozen=True, eq=False)
class Later:
    """A group with chance nodes below its first choice; columns as those of a `Group`, in units of the root.

    carries : leaves that carry what the whole group earns: one below every sum, all below a maximum.
    """

    action: int
    leaves: Ints
    a: Floats
    b: Floats
    low: Floats
    width: Floats
    carries: np.ndarray
    shape: Shape
    size: float
    sure: float = -math.inf

    def settled(self, shift: float) -> Later:
        """The group shifted."""
        return replace(self, low=self.low + shift * self.carries, size=self.size + abs(shift))

    def static(self) -> float:
        """Its value with every leaf at its mean."""
        return float(self.shape.values(self.low + self.width * (self.a / (self.a + self.b)))[0])


@dataclass(frozen=True, eq=False)
class Curve:
    """T(y) = E (R - y)+ of one leaf at ascending y, both (M,).

    ends : slopes of a spline through the values at either end, None where it is cut there; without them T is
    linear between the values. Beyond ends that are not cut the slopes are -1 and 0. error : bound on T's.
    """

    y: Floats
    T: Floats
    ends: tuple[float | None, float | None] | None
    error: float

    def at(self, y: Floats) -> Floats:
        """T at any y."""
        inner = np.clip(y, self.y[0], self.y[-1])
        if self.ends is None:
            out = np.interp(inner, self.y, self.T)
        else:
            ends = tuple("not-a-knot" if slope is None else (1, slope) for slope in self.ends)
            out = np.maximum(CubicSpline(self.y, self.T, bc_type=ends)(inner), 0.0)
        return np.asarray(out + np.maximum(self.y[0] - y, 0.0))


def curves(group: Later, h: float) -> tuple[float, float, list[Curve]]:
    """Value of the group, its error bound, and the curve of every leaf."""
    if len(group.a) > _MAX_LEAVES:
        raise RefusedError(
            f"win/loss leaves with h > 0: {len(group.a)} leaves below one choice above chance nodes; "
            f"at most {_MAX_LEAVES} have an exact method"
        )
    if math.isinf(h):
        return _on_lattices(group, None)
    laws = [_outcomes(group, j, int(h)) for j in range(len(group.a))]
    try:
        return _by_atoms(group, laws)
    except TooManyAtomsError:
        return _on_lattices(group, laws)


def _outcomes(group: Later, j: int, h: int) -> Atoms:
    a, b, low, width = group.a[j], group.b[j], group.low[j], group.width[j]
    if width <= NARROW * abs(low):
        return Atoms(np.array([low + width * (a / (a + b))]), np.ones(1))
    return Atoms(low + width * ((a + np.arange(h + 1)) / (a + b + h)), beta_binomial_law(a, b, h))


def _by_atoms(group: Later, laws: list[Atoms]) -> tuple[float, float, list[Curve]]:
    low, high = group.shape.values(group.low), group.shape.values(group.low + group.width)
    top, thresholds = _passes(group.shape, laws, low.tolist(), high.tolist())
    error = 32 * _EPS * (group.size + float(group.width.max()))
    out = []
    for R in thresholds:
        above = np.append(np.cumsum(R.mass[::-1])[::-1][1:], 0.0)
        falls = np.append(np.diff(R.at) * above[:-1], 0.0)
        out.append(Curve(R.at, np.cumsum(falls[::-1])[::-1], None, error))
    return top.mean(), error, out


def _on_lattices(group: Later, laws: list[Atoms] | None) -> tuple[float, float, list[Curve]]:
    n = len(group.a)
    step = _span(group) / CELLS
    found = []
    # All lattices cut thresholds off at the same places.
    low_end = group.shape.values(np.floor(group.low / (4 * step))).astype(np.int64)
    high_end = group.shape.values(np.ceil((group.low + group.width) / (4 * step))).astype(np.int64)
    for times in (1, 2, 4):
        on = []
        for j in range(n):
            a, b, low, wide = group.a[j], group.b[j], group.low[j], group.width[j]
            if laws is not None:
                on.append(atoms_on_lattice(laws[j], times * step))
            elif wide <= NARROW * abs(low):
                sure = Atoms(np.array([low + wide * (a / (a + b))]), np.ones(1))
                on.append(atoms_on_lattice(sure, times * step))
            else:
                on.append(beta_on_lattice(a, b, low, wide, times * step))
        ends = ((x * (4 // times)).tolist() for x in (low_end, high_end))
        found.append((on, *_passes(group.shape, on, *ends)))
    rough = sum(_rough(x, R) for x, R in zip(found[0][0], found[0][2], strict=True)) * step
    rounding = 1e-13 * CELLS * step + 32 * _EPS * group.size
    value = [top.mean() * times * step for (_, top, _), times in zip(found, (1, 2, 4), strict=True)]
    best, before = value[0], value[1]
    if laws is None:
        best, before = value[0] - (value[1] - value[0]) / 3, value[1] - (value[2] - value[1]) / 3
    out = []
    for j, v in enumerate(v for v in range(len(low_end)) if group.shape.leaf[v] >= 0):
        R = [thresholds[j] for _, _, thresholds in found]
        out.append(_curve(R, int(low_end[v]), int(high_end[v]), step, laws is None, rough + rounding))
    return best, abs(best - before) + rough + rounding, out


def _curve(R: Sequence[Lattice], low: int, high: int, step: float, extrapolate: bool, error: float) -> Curve:
    """T from thresholds on lattices of 1, 2 and 4 steps, cut to low ... high (in units of 4).

    Extrapolated at every second point, and smooth between; or plain, linear, convex.
    """
    first = min(x.start * t // 4 for x, t in zip(R, (1, 2, 4), strict=True))
    last = max(-(-x.end * t // 4) for x, t in zip(R, (1, 2, 4), strict=True))
    ends = (None if first <= low else -1.0, None if last >= high else 0.0)
    first, last = max(first - 1, low), min(last + 1, high)
    fine, middle, coarse = (
        x.tail(first * 4 // t, last * 4 // t) * (t * step) for x, t in zip(R, (1, 2, 4), strict=True)
    )
    inner = R[0].mass[max(4 * low + 1 - R[0].start, 0) : max(4 * high - R[0].start, 0)]
    near = np.convolve(inner, np.ones(4)) if len(inner) else np.zeros(1)  # an atom that sums spread out
    error += 1.5 * step * float(near.max()) if near.max() > 2 * _HEAVY else 0.0
    excess = middle - fine[::2]
    if not extrapolate:
        y = np.arange(4.0 * first, 4.0 * last + 1) * step
        return Curve(np.asarray(y), fine, None, error + float(np.abs(excess).max()))
    y = np.arange(2.0 * first, 2.0 * last + 1) * (2 * step)
    curve = Curve(np.asarray(y), np.maximum(fine[::2] - excess / 3, 0.0), ends, 0.0)
    before = middle[::2] - (coarse - middle[::2]) / 3
    between = fine[1::2] - (excess[1:] + excess[:-1]) / 6
    error += float(np.abs(curve.T[::2] - before).max())
    error += float(np.abs(curve.at(0.5 * (y[1:] + y[:-1])) - between).max())
    return replace(curve, error=error)


def _rough(own: Lattice, R: Lattice) -> float:
    """What the spread of heavy points of a leaf may have added to an expected maximum, in steps."""
    passed = np.concatenate(([0.0], np.cumsum(R.mass)))
    out = 0.0
    for m in np.flatnonzero(own.mass > _HEAVY).tolist():
        at = own.start + m - R.start
        near = passed[np.clip(at + 3, 0, len(R.mass))] - passed[np.clip(at - 2, 0, len(R.mass))]
        out += 0.5 * float(own.mass[m] * near)
    return out


def _span(group: Later) -> float:
    """The range of what the group is worth, children of a maximum that never win left out."""
    n = len(group.a)
    ends = np.array([window(group.a[j], group.b[j]) for j in range(n)])
    low, high = group.low + group.width * ends[:, 0], group.low + group.width * ends[:, 1]
    low_end, high_end = group.shape.values(low), group.shape.values(high)
    span = np.zeros(len(low_end))
    children = group.shape.children()
    for v in reversed(range(len(span))):
        c = children[v]
        if group.shape.leaf[v] >= 0:
            span[v] = high_end[v] - low_end[v]
        elif group.shape.total[v]:
            span[v] = span[c].sum()
        else:
            alive = [x for x in c if high_end[x] >= low_end[v]]
            span[v] = max(float(span[alive].max()), high_end[v] - min(low_end[x] for x in alive))
    return max(float(span[0]), 1e3 * _EPS * group.size, 1e-300)


def _passes(shape: Shape, leaf: Sequence[_L], low: Sequence[Any], high: Sequence[Any]) -> tuple[_L, list[_L]]:
    """The law of node 0 and the threshold of every leaf, cut to the node's range `low` ... `high`."""
    children = shape.children()
    n = len(shape.parent)
    value: dict[int, _L] = {}
    for v in reversed(range(n)):
        parts = [value[c] for c in children[v]]
        if shape.leaf[v] >= 0:
            value[v] = leaf[shape.leaf[v]]
        elif shape.total[v]:
            value[v] = _sums(parts)[-1]
        else:
            value[v] = type(parts[0]).maxima(parts, False)[0]
    threshold: dict[int, _L] = {}
    for v in range(n):
        parts = [value[c] for c in children[v]]
        if not parts:
            continue
        if shape.total[v]:
            before, after = _sums(parts[:-1]), _sums(parts[:0:-1])[::-1]
            for m, c in enumerate(children[v]):
                sides = ([before[m - 1]] if m else []) + ([after[m]] if m < len(after) else [])
                R = threshold[v].plus(_sums(sides)[-1].negative())
                threshold[c] = R.clipped(low[c], high[c])
        else:
            rivals = parts + ([threshold[v]] if v else [])
            found = type(parts[0]).maxima(rivals, True)
            for c, R in zip(children[v], found, strict=False):
                threshold[c] = R.clipped(low[c], high[c])
    thresholds: list[_L] = [threshold[shape.leaf.index(j)] for j in range(len(leaf))]
    return value[0], thresholds


def _sums(parts: Sequence[_L]) -> list[_L]:
    """Running sums."""
    out = [parts[0]]
    for x in parts[1:]:
        out.append(out[-1].plus(x))
    return out
