"""Value of trials at win/loss leaves when h more follow at every leaf, h finite; floor 2.

After h more trials leaf j's posterior mean is low_j + width_j (a_j + s) / (n_j + h), s beta-binomial: a
group of leaves to choose from is worth V = E max of such atoms. With T(y) = E (best atom of the other
leaves - y)+, piecewise linear, and c the rival's value, x wins in k trials on a leaf make it worth c + g(x),

    g(x) = E[y - c + T(y)],  y = low + width (a + x + s) / (n + k + h),  s beta-binomial given x,

which rises in x. Action behind: VOC = sum of P(x) g(x)+. Action best: VOC = sum of P(x) g(x)- + rise,
where the rise E T(y after k + h) - E T(y after h) is what k more trials add even if the action is kept: a
sum over single trials of p T(up) + q T(down) - T(here) >= 0, taken of T or of U(y) = E (y - best)+,
whichever is smaller there (both bend alike). All sums have positive terms.
"""

from __future__ import annotations

import math

import numpy as np

from distill.beta_numerics import beta_binomial_law
from distill.errors import RefusedError
from distill.exact.best_batch import VocAt, best_batch
from distill.exact.win_loss_groups import Choice, Group, price_groups
from distill.exact.win_loss_later import NARROW, Curve, Later, curves
from distill.numerics import compiled
from distill.query import Priced, Query
from distill.tree import BeliefTree, Floats, Ints

__all__ = ["METHOD", "price_horizon"]

METHOD = "win/loss, finite horizon: sums over outcomes"

_MAX_NUMBERS = 2**26  # leaves x atoms of one action
_MAX_WORK = 2**27  # outcomes of the batch x outcomes of the horizon
_EVERY_BATCH = 200  # up to this many rollouts left the rate prices every batch
_STEPWISE = 512  # trials up to which the rise is summed trial by trial
_EPS = 2.0**-52


def price_horizon(tree: BeliefTree, query: Query) -> Priced:
    """VOC_h or RATE_h of every win/loss leaf, h >= 0 whole and finite, any tree.

    Exact sums; the error covers roundings, for a rate the certificate of the search, and below chance nodes
    that follow a choice the lattice where one is needed. Raises RefusedError where h or the batch needs too
    many outcomes.
    """
    h = int(query.horizon)
    last = query.remaining if query.batch is None else query.batch
    assert last is not None
    if (h + 1) * (last + h + 1) > _MAX_WORK:
        raise RefusedError(
            f"win/loss leaves at horizon {h}: {last} rollouts have too many outcomes to sum over"
        )

    def choice(group: Group | Later) -> Choice:
        return _Tables(group, h) if isinstance(group, Group) else _LaterTables(group, h)

    return price_groups(tree, query, choice, METHOD)


class _Tables:
    """A group's V h trials on, and T and U of every leaf at the atoms of all."""

    def __init__(self, group: Group, h: int) -> None:
        a, b, low, width = self.columns = group.a, group.b, group.low, group.width
        self.h, self.sure = h, group.sure
        if len(a) * len(a) * (h + 1) > _MAX_NUMBERS:
            raise RefusedError(
                f"win/loss leaves at horizon {h}: {len(a)} leaves to choose from need too many atoms"
            )
        self.tables = _tables(a, b, low, width, h, group.sure)
        mean = low + width * (a / (a + b))
        best = int(np.argmax(mean))
        self.value = float(mean[best]) + _expected_tail(
            a[best], b[best], low[best], width[best], h, best, *self.tables
        )
        # Four roundings of a mean, and the sum of the tail; `price_groups` adds those of the columns.
        sums = 2.0 * float(np.max(np.abs(mean))) + 4.0 * float(np.max(self.tables[2][:, 0], initial=0.0))
        self.error = _EPS * sums

    def price(self, rival: float, slack: float, query: Query) -> tuple[Floats, Ints, Floats]:
        """VOC (or rate), batch and error of every leaf; see `win_loss_groups.Choice`."""
        n = len(self.columns[0])
        last = query.remaining if query.batch is None else query.batch
        assert last is not None

        def voc_at(leaf: Ints, k: Ints) -> tuple[Floats, Floats]:
            return _price_pairs(
                leaf, k, *self.columns, self.h, self.value, rival, self.error + slack, *self.tables
            )

        return _best_batches(voc_at, n, query)


class _LaterTables:
    """The same for a group with chance nodes below its choice: atoms, T and U for each leaf."""

    def __init__(self, group: Later, h: int) -> None:
        self.group, self.h = group, h
        self.value, self.error, self.curves = curves(group, h)
        self.tables = [_curve_tables(curve) for curve in self.curves]
        columns = zip(group.a, group.b, group.low, group.width, self.tables, strict=True)
        self.alone = [
            low + width * (a / (a + b)) + _expected_tail(a, b, low, width, h, 0, *tables)
            for a, b, low, width, tables in columns
        ]

    def price(self, rival: float, slack: float, query: Query) -> tuple[Floats, Ints, Floats]:
        """VOC (or rate), batch and error of every leaf; see `win_loss_groups.Choice`."""
        group, n = self.group, len(self.group.a)

        def voc_at(leaf: Ints, k: Ints) -> tuple[Floats, Floats]:
            voc, error = np.zeros(len(leaf)), np.zeros(len(leaf))
            for i in np.unique(leaf).tolist():
                rows, one = np.flatnonzero(leaf == i), slice(i, i + 1)
                if group.width[i] <= NARROW * abs(group.low[i]):
                    error[rows] = group.width[i]
                    continue
                off = self.error + self.curves[i].error
                rounding = off + slack + 8 * _EPS * float(self.tables[i][2][0, 0] + group.width[i])
                voc[rows], error[rows] = _price_pairs(
                    np.zeros(len(rows), dtype=np.int64), k[rows], group.a[one], group.b[one], group.low[one],
                    group.width[one], self.h, self.alone[i], self.alone[i] + (rival - self.value), rounding,
                    *self.tables[i],
                )  # fmt: skip
                error[rows] += 2 * self.curves[i].error  # of the rise
                if abs(self.value - rival) <= off + slack:  # which is best now is in doubt
                    error[rows] += off + slack
            return voc, error

        return _best_batches(voc_at, n, query)


def _curve_tables(curve: Curve) -> tuple[Floats, Floats, Floats, Floats]:
    """Atoms, P(R > y), T and U of one leaf, as `_tables` has them."""
    steps, falls = np.diff(curve.y), -np.diff(curve.T)
    more = np.append(np.clip(falls / steps, 0.0, 1.0), 0.0)
    lead = np.append(0.0, np.cumsum(steps * (1.0 - more[:-1])))
    return curve.y, more[None], curve.T[None], lead[None]


def _best_batches(voc_at: VocAt, n: int, query: Query) -> tuple[Floats, Ints, Floats]:
    """The batch asked for, or the best one of every leaf."""
    last = query.remaining if query.batch is None else query.batch
    assert last is not None
    if not query.rate:
        batch = np.full(n, last, dtype=np.int64)
        voc, error = voc_at(np.arange(n), batch)
        return voc, batch, error
    if last == 0 or last > _EVERY_BATCH:
        return best_batch(voc_at, n, last)
    every = np.arange(1, last + 1)
    rate, batch, error = np.zeros(n), np.ones(n, dtype=np.int64), np.zeros(n)
    for i in range(n):
        voc, err = voc_at(np.full(last, i), every)
        best = int(np.argmax(voc / every))
        rate[i], batch[i] = voc[best] / every[best], best + 1
        error[i] = np.max((voc + err) / every) - rate[i]
    return rate, batch, error


@compiled
def _tables(
    a: Floats, b: Floats, low: Floats, width: Floats, h: int, sure: float
) -> tuple[Floats, Floats, Floats, Floats]:
    """Atoms of all leaves, ascending, (M,), and for every leaf at them, (L, M): P(rest > y), T and U.

    P(rest > y) holds from its atom to the next. A sure value is one atom more, below which the rest never
    is; a leaf alone gets one atom at -inf, above which nothing is.
    """
    n_leaves = len(a)
    if n_leaves == 1 and sure == -math.inf:
        return np.array([-math.inf]), np.zeros((1, 1)), np.zeros((1, 1)), np.zeros((1, 1))
    count = n_leaves * (h + 1) + (sure > -math.inf)
    atom, owner, rank = np.empty(count), np.empty(count, dtype=np.int64), np.empty(count, dtype=np.int64)
    below, above = np.empty((n_leaves, h + 1)), np.empty((n_leaves, h + 1))
    for j in range(n_leaves):
        law = beta_binomial_law(a[j], b[j], h)
        below[j] = np.cumsum(law)
        passed = 0.0
        for s in range(h, -1, -1):
            above[j, s] = passed
            passed += law[s]
            m = j * (h + 1) + s
            atom[m], owner[m], rank[m] = low[j] + width[j] * ((a[j] + s) / (a[j] + b[j] + h)), j, s
    if sure > -math.inf:
        atom[-1], owner[-1] = sure, -1
    order = np.argsort(atom)
    atom = atom[order]
    now_below, now_above = np.zeros(n_leaves), np.ones(n_leaves)
    more, tail, lead = np.empty((n_leaves, count)), np.empty((n_leaves, count)), np.empty((n_leaves, count))
    less = np.empty(n_leaves)
    after_p, after_q = np.ones(n_leaves + 1), np.zeros(n_leaves + 1)
    if sure > -math.inf:
        after_p[-1], after_q[-1] = 0.0, 1.0
    for m in range(count):
        j, s = owner[order[m]], rank[order[m]]
        for i in range(n_leaves):
            lead[i, m] = 0.0 if m == 0 else lead[i, m - 1] + (atom[m] - atom[m - 1]) * less[i]
        if j < 0:
            after_p[-1], after_q[-1] = 1.0, 0.0
        else:
            now_below[j], now_above[j] = min(below[j, s], 1.0), above[j, s]
        for i in range(n_leaves - 1, -1, -1):
            after_p[i] = after_p[i + 1] * now_below[i]
            after_q[i] = after_q[i + 1] + after_p[i + 1] * now_above[i]
        before_p, before_q = 1.0, 0.0
        for i in range(n_leaves):
            less[i] = before_p * after_p[i + 1]
            more[i, m] = before_q + before_p * after_q[i + 1]
            before_q += before_p * now_above[i]
            before_p *= now_below[i]
    for i in range(n_leaves):
        tail[i, count - 1] = 0.0
        for m in range(count - 2, -1, -1):
            tail[i, m] = tail[i, m + 1] + (atom[m + 1] - atom[m]) * more[i, m]
    return atom, more, tail, lead


@compiled
def _read(y: Floats, atom: Floats, more: Floats, tail: Floats, lead: Floats) -> tuple[Floats, Floats, Ints]:
    """T and U of one leaf at ascending y, and the position of the last atom at or below each y."""
    t, u, at = np.empty(len(y)), np.empty(len(y)), np.empty(len(y), dtype=np.int64)
    m, last = -1, len(atom) - 1
    for z in range(len(y)):
        while m < last and atom[m + 1] <= y[z]:
            m += 1
        at[z] = m
        if m < 0:
            t[z], u[z] = tail[0] + (atom[0] - y[z]), 0.0
        elif m == last:
            t[z], u[z] = 0.0, lead[last] + (y[z] - atom[last])
        else:
            t[z] = tail[m + 1] + (atom[m + 1] - y[z]) * more[m]
            share = (y[z] - atom[m]) / (atom[m + 1] - atom[m])
            u[z] = lead[m] + share * (lead[m + 1] - lead[m])
    return t, u, at


@compiled
def _means(a: float, b: float, low: float, width: float, trials: int) -> Floats:
    """What the leaf is worth after 0 ... trials wins in as many trials."""
    y = np.empty(trials + 1)
    for z in range(trials + 1):
        y[z] = low + width * ((a + z) / (a + b + trials))
    return y


@compiled
def _expected_tail(
    a: float,
    b: float,
    low: float,
    width: float,
    h: int,
    leaf: int,
    atom: Floats,
    more: Floats,
    tail: Floats,
    lead: Floats,
) -> float:
    """E T(y) after h trials: what choosing later adds to the leaf's mean."""
    t, _, _ = _read(_means(a, b, low, width, h), atom, more[leaf], tail[leaf], lead[leaf])
    return float(np.sum(beta_binomial_law(a, b, h) * t))


@compiled
def _rises(
    a: float,
    b: float,
    low: float,
    width: float,
    h: int,
    most: int,
    atom: Floats,
    more: Floats,
    tail: Floats,
    lead: Floats,
) -> tuple[Floats, Floats]:
    """E T(y after h + k) - E T(y after h), k = 0 ... most, and its error."""
    out, error = np.zeros(most + 1), np.zeros(most + 1)
    odds = beta_binomial_law(a, b, h)
    t, u, _ = _read(_means(a, b, low, width, h), atom, more, tail, lead)
    for k in range(most):
        level = h + k
        n = a + b + level
        t_next, u_next, at = _read(_means(a, b, low, width, level + 1), atom, more, tail, lead)
        rise, noise = 0.0, 0.0
        ahead = np.zeros(level + 2)
        for z in range(level + 1):
            p, q = (a + z) / n, (b + (level - z)) / n
            if at[z + 1] > at[z]:  # between two atoms nothing bends
                if t[z] <= u[z]:
                    bend = p * t_next[z + 1] + q * t_next[z] - t[z]
                    size = t[z] + (t_next[z] - t_next[z + 1]) * (n + 1.0) * (1.0 + abs(low) / width)
                else:
                    bend = p * u_next[z + 1] + q * u_next[z] - u[z]
                    size = u[z] + (u_next[z + 1] - u_next[z]) * (n + 1.0) * (1.0 + abs(low) / width)
                rise += odds[z] * max(bend, 0.0)
                noise += odds[z] * size * 4.0 * _EPS
            ahead[z] += odds[z] * q
            ahead[z + 1] += odds[z] * p
        out[k + 1], error[k + 1] = out[k] + rise, error[k] + noise
        odds, t, u = ahead, t_next, u_next
    return out, error


@compiled
def _price_pairs(
    leaf: Ints,
    batch: Ints,
    a: Floats,
    b: Floats,
    low: Floats,
    width: Floats,
    h: int,
    value: float,
    rival: float,
    rounding: float,
    atom: Floats,
    more: Floats,
    tail: Floats,
    lead: Floats,
) -> tuple[Floats, Floats]:
    """VOC and its error of every pair (leaf, batch) of one action; pairs of one leaf side by side."""
    voc, error = np.empty(len(leaf)), np.empty(len(leaf))
    best = value >= rival
    rises, noise = np.zeros(1), np.zeros(1)
    known = -1
    for c in range(len(leaf)):
        i, k = leaf[c], batch[c]
        ai, bi, lo, wi = a[i], b[i], low[i], width[i]
        n = ai + bi
        y = _means(ai, bi, lo, wi, k + h)
        t, _, _ = _read(y, atom, more[i], tail[i], lead[i])
        gain, in_doubt = 0.0, 0.0
        sure = rounding + 0.5 * _EPS * wi * (1.0 + math.sqrt(k + h + 1.0))
        if rival > -math.inf:
            odds = beta_binomial_law(ai, bi, k)
            for m in range(k + 1):
                x = m if best else k - m
                later = beta_binomial_law(ai + x, bi + (k - x), h)
                g = 0.0
                for s in range(h + 1):
                    g += later[s] * ((y[x + s] - rival) + t[x + s])
                if (g >= 0.0) == best:
                    in_doubt += odds[x] * sure if abs(g) <= sure else 0.0
                    break
                gain += odds[x] * abs(g)
                in_doubt += odds[x] * sure
        error[c] = in_doubt
        if best and len(atom) > 1:
            if k > _STEPWISE:
                law, before = beta_binomial_law(ai, bi, k + h), beta_binomial_law(ai, bi, h)
                t0, _, _ = _read(_means(ai, bi, lo, wi, h), atom, more[i], tail[i], lead[i])
                gain += max(float(np.sum(law * t)) - float(np.sum(before * t0)), 0.0)
                error[c] += _EPS * tail[i, 0] * math.sqrt(n + k + h)
            else:
                if known != i or len(rises) <= k:
                    most = int(min(int(np.max(batch)), _STEPWISE))
                    rises, noise = _rises(ai, bi, lo, wi, h, most, atom, more[i], tail[i], lead[i])
                    known = i
                gain += rises[k]
                error[c] += noise[k]
        voc[c] = gain
        error[c] += gain * _EPS * (k + h + 6.0)
    return voc, error
