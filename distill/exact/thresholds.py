"""When does a leaf matter? The distribution of its threshold, for every leaf of a tree at once; floor 2.

Fix everything but leaf i. Its root action is worth  const + max(x_i, T_i)  for a random threshold T_i
that depends on the other leaves alone: below it some rival is taken, above it the action rises with x_i.
So the influence of the leaf is the distribution function of T_i, and one pass up and one pass down give
every threshold:

    up       value of a maximum: product of distribution functions; of a sum: convolution
    down     top of an action: T = -inf
             child c of a maximum: T_c = max(T, siblings)
             part c of a sum:      T_c = T - the other parts

Every T is independent of its node's own leaves, which makes these plain products and convolutions again.
"""

from __future__ import annotations

import math
from dataclasses import dataclass, field

import numpy as np

from distill.exact.distributions import REACH, WIDTH, Distribution, N, evaluate, shifted
from distill.exact.max_sum import Max, Normal, Sum
from distill.exact.panels import held, lay_out, resolved
from distill.exact.sums import remainders, total
from distill.numerics import compiled, norm_cdf
from distill.tree import Floats

__all__ = ["Threshold", "thresholds"]

# E |X - E X| <= spread: what is this narrow counts as sure, and its spread as an error.
_NARROW = 2e-12  # of the widest rival
_UNRESOLVED = 4e-15  # of where it lies


@dataclass(frozen=True)
class Threshold:
    """Leaf i is worth max(x_i + rest, T), rest the other leaves added to it: variance `rest_var`.

    `mean` is the mean of x_i + rest, on the axis of `T`.
    """

    T: Distribution
    mean: float
    rest_var: float


def thresholds(top: Max, var: Floats, resolution: float) -> tuple[float, float, dict[int, Threshold]]:
    """E of a maximum at the top of an action, its error bound, and the threshold of every leaf below it.

    var : variance that each leaf contributes to the root (W^2 times its variance), u^2.
    resolution : standard deviations below it count as 0, and as an error.
    """
    passes = _Passes(var, resolution)
    order: list[Max | Sum] = []
    stack: list[Max | Sum] = [top]
    while stack:
        node = stack.pop()
        order.append(node)
        stack.extend(
            node.maxima if isinstance(node, Sum) else (m for m in node.members if isinstance(m, Sum))
        )
    for node in reversed(order):
        passes.up(node)
    whole = passes.value[id(top)]
    passes.down_from(top)
    return top.shift + whole.mean, whole.error, passes.found


@dataclass
class _Passes:
    var: Floats
    resolution: float
    value: dict[int, Distribution] = field(default_factory=dict)
    found: dict[int, Threshold] = field(default_factory=dict)

    def up(self, node: Max | Sum) -> None:
        if isinstance(node, Max):
            self.value[id(node)] = _Rivals(node, self, None).maximum()
            return
        parts = [self.value[id(m)] for m in node.maxima]
        self.value[id(node)] = total(parts, self.sd(node.leaves))

    def down_from(self, top: Max) -> None:
        stack: list[tuple[Max | Sum, Distribution | None]] = [(top, None)]
        while stack:
            node, T = stack.pop()
            if isinstance(node, Max):
                for member, T_member in zip(node.members, _Rivals(node, self, T).others(), strict=True):
                    if isinstance(member, Normal):
                        self.record(member.leaves, T_member, member.shift)
                    else:
                        stack.append((member, shifted(T_member, -member.shift)))
                continue
            assert T is not None
            parts = [self.value[id(m)] for m in node.maxima]
            rest, whole = remainders(T, parts, self.sd(node.leaves), bool(node.leaves))
            if whole is not None:
                self.record(node.leaves, whole, 0.0)
            stack.extend(zip(node.maxima, rest, strict=True))

    def record(self, leaves: list[int], T: Distribution, mean: float) -> None:
        own = self.var[leaves]
        before = np.concatenate(([0.0], np.cumsum(own)[:-1]))
        after = np.concatenate((np.cumsum(own[::-1])[::-1][1:], [0.0]))
        for leaf, rest in zip(leaves, (before + after).tolist(), strict=True):
            self.found[leaf] = Threshold(T, mean, rest)

    def sd(self, leaves: list[int]) -> float:
        return math.sqrt(float(self.var[leaves].sum()))


class _Rivals:
    """What competes in a maximum: its floor, normals, sums, and the threshold from above if there is one."""

    def __init__(self, node: Max, passes: _Passes, T: Distribution | None) -> None:
        self.floor = node.floor
        members = node.members
        self.normal = [c for c, m in enumerate(members) if isinstance(m, Normal)]
        self.n_members = len(members)
        self.mu = np.array([members[c].shift for c in self.normal])
        self.sd = np.array([passes.sd(members[c].leaves) for c in self.normal])
        sums = [
            (c, shifted(passes.value[id(m)], m.shift)) for c, m in enumerate(members) if isinstance(m, Sum)
        ]
        if T is not None:
            sums.append((len(members), T))
        self.n = len(members) + (T is not None)
        place, self.spread, self.error = np.zeros(self.n), np.zeros(self.n), np.zeros(self.n)
        self.low, self.high = np.zeros(self.n), np.zeros(self.n)
        normal = np.array(self.normal, dtype=np.int64)
        place[normal], self.spread[normal] = self.mu, self.sd
        self.low[normal], self.high[normal] = self.mu - REACH * self.sd, self.mu + REACH * self.sd
        for c, d in sums:
            place[c], self.spread[c], self.error[c] = d.mean, d.spread, d.error
            self.low[c], self.high[c] = d.edges[0], d.edges[-1]
        # Sure, or too narrow to be told from it: a floor for the others.
        narrow = max(_NARROW * float(self.spread.max()), passes.resolution)
        is_sure = self.spread <= np.maximum(narrow, _UNRESOLVED * np.abs(place))
        self.sure = np.where(is_sure, place, -math.inf)
        self.error += np.where(is_sure, self.spread, 0.0)
        self.normal = normal[~is_sure[normal]].tolist()
        self.mu, self.sd = self.mu[~is_sure[normal]], self.sd[~is_sure[normal]]
        self.sums = [(c, d) for c, d in sums if not is_sure[c]]

    def maximum(self) -> Distribution:
        """The distribution of the largest."""
        floor = max(self.floor, float(self.sure.max()))
        low = max(float(self.low.max()), floor)
        high = max(float(self.high.max()), low)
        edges, hard = self._edges(low, high, [floor])

        def density(at: Floats) -> Floats:
            F, f = self._table(at)
            return _all_of(F, f)

        edges, hard, values = resolved(edges, hard, density)
        atom_at = self._atom_places(low, [floor])
        G, jump = self._jumps(atom_at, floor)
        mass = _jump_of_all(G, jump)
        return held(edges, hard, values[0], atom_at, mass, float(self.spread.max()), float(self.error.sum()))

    def others(self) -> list[Distribution]:
        """For each member, the distribution of the largest of the others."""
        floors = np.maximum(self.floor, _largest_other(self.sure))[: self.n_members]
        lows = np.maximum(_largest_other(self.low)[: self.n_members], floors)
        highs = np.maximum(_largest_other(self.high)[: self.n_members], lows)
        low, high = float(lows.min()), float(highs.max())
        unique_floors = np.unique(floors).tolist()
        edges, hard = self._edges(low, high, [*unique_floors])
        n_members = self.n_members

        def density(at: Floats) -> Floats:
            F, f = self._table(at)
            return _leave_one_out(F, f)[1][:n_members]

        edges, hard, values = resolved(edges, hard, density)
        places = self._atom_places(low, unique_floors)
        spreads = np.maximum(_largest_other(self.spread), 0.0)
        error = float(self.error.sum())
        out = []
        for c in range(self.n_members):
            # Panels that lie under the floor, or where nothing of the others is left.
            first = int(np.searchsorted(edges, floors[c])) if floors[c] >= low else 0
            last = max(int(np.searchsorted(edges, highs[c])), first)
            at, mass = places, places
            if len(places):
                G, jump = self._jumps(places, float(floors[c]))
                G[c], jump[c] = 1.0, 0.0
                mass = _jump_of_all(G, jump)
                carried = (mass > 0) & (places >= floors[c])
                at, mass = places[carried], mass[carried]
            out.append(
                held(
                    edges[first : last + 1],
                    hard[first : last + 1],
                    values[c, first * N : last * N],
                    at,
                    mass,
                    float(spreads[c]),
                    max(error - float(self.error[c]), 0.0),
                )
            )
        return out

    def _edges(self, low: float, high: float, floors: list[float]) -> tuple[Floats, np.ndarray]:
        breaks = np.concatenate([np.array(floors), *(d.edges[d.hard] for _, d in self.sums)])
        n = len(self.mu)
        panels = np.empty((n + sum(len(d.edges) - 1 for _, d in self.sums), 3))
        panels[:n, 0], panels[:n, 1] = self.mu - REACH * self.sd, self.mu + REACH * self.sd
        panels[:n, 2] = WIDTH * self.sd
        for _, d in self.sums:
            rows = panels[n : n + len(d.edges) - 1]
            rows[:, 0], rows[:, 1] = d.edges[:-1], d.edges[1:]
            rows[:, 2] = rows[:, 1] - rows[:, 0]
            n += len(rows)
        return lay_out(low, high, breaks, panels)

    def _table(self, at: Floats) -> tuple[Floats, Floats]:
        """Distribution function and density of every competitor at ascending points; (n, len(at)) each."""
        F, f = np.ones((self.n, len(at))), np.zeros((self.n, len(at)))
        _normals(np.array(self.normal, dtype=np.int64), self.mu, self.sd, at, F, f)
        for c, d in self.sums:
            F[c], f[c] = evaluate(d, at)
        return F, f

    def _atom_places(self, low: float, floors: list[float]) -> Floats:
        places = np.concatenate([np.array(floors), *(d.atom_at for _, d in self.sums)])
        places = places[places >= low]
        return np.unique(places) if len(places) else places

    def _jumps(self, at: Floats, floor: float) -> tuple[Floats, Floats]:
        """Distribution functions at points, and how much of it is a jump there; last row the floor."""
        if not len(at):
            return np.empty((self.n + 1, 0)), np.empty((self.n + 1, 0))
        F, _ = self._table(at)
        jump = np.zeros_like(F)
        for c, d in self.sums:
            for a, m in zip(d.atom_at, d.atom_mass, strict=True):
                jump[c, at == a] += m
        floor_row = (at >= floor).astype(float)
        floor_jump = (at == floor).astype(float)
        return np.vstack((F, floor_row)), np.vstack((jump, floor_jump))


def _largest_other(x: Floats) -> Floats:
    """max over j != i of x_j, for every i; -inf where there is no other."""
    if len(x) < 2:
        return np.full(len(x), -math.inf)
    top = int(np.argmax(x))
    out = np.full(len(x), x[top])
    out[top] = np.delete(x, top).max()
    return out


@compiled
def _normals(rows: np.ndarray, mu: Floats, sd: Floats, at: Floats, F: Floats, f: Floats) -> None:
    for i in range(len(rows)):
        c = rows[i]
        for j in range(len(at)):
            z = (at[j] - mu[i]) / sd[i]
            if z < REACH:
                F[c, j] = norm_cdf(z)
                f[c, j] = 0.3989422804014327 * math.exp(-0.5 * z * z) / sd[i]


@compiled
def _all_of(F: Floats, f: Floats) -> Floats:
    """Density of the maximum, shape (1, len)."""
    out = np.empty((1, F.shape[1]))
    for j in range(F.shape[1]):
        P = 1.0
        p = 0.0
        for c in range(F.shape[0]):
            p = p * F[c, j] + P * f[c, j]
            P *= F[c, j]
        out[0, j] = p
    return out


@compiled
def _leave_one_out(F: Floats, f: Floats) -> tuple[Floats, Floats]:
    """Distribution function and density of the maximum of all but one, for each; no division."""
    n, m = F.shape
    G = np.empty((n, m))
    g = np.empty((n, m))
    for j in range(m):
        P = 1.0
        p = 0.0
        for c in range(n):
            G[c, j] = P
            g[c, j] = p
            p = p * F[c, j] + P * f[c, j]
            P *= F[c, j]
        P = 1.0
        p = 0.0
        for c in range(n - 1, -1, -1):
            g[c, j] = g[c, j] * P + G[c, j] * p
            G[c, j] *= P
            p = p * F[c, j] + P * f[c, j]
            P *= F[c, j]
    return G, g


@compiled
def _jump_of_all(F: Floats, jump: Floats) -> Floats:
    """Jump of the product of distribution functions, from each one's value and jump: no subtraction."""
    out = np.zeros(F.shape[1])
    for j in range(F.shape[1]):
        P = 1.0
        p = 0.0
        for c in range(F.shape[0]):
            p = p * F[c, j] + P * jump[c, j]  # before c: the full values; after it: what lies below
            P *= max(F[c, j] - jump[c, j], 0.0)
        out[j] = p
    return out
