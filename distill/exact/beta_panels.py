"""Distribution functions of scaled betas on common panels; floor 2.

The leaves of one root action are worth Y_j = o_j + w_j p_j, p_j ~ Beta(a_j, b_j). Their axis is cut into
panels that every leaf's density fits: on each, density and distribution function are polynomials of degree
15 through 16 Gauss-Legendre nodes, to about 1e-13. Where a density is singular (an exponent below 12 that
is no whole number) the panels halve towards that end, and the last one takes the tail's power series.

Below a floor the best of any action's leaves but one lies with odds of e^-46 only, so no panels are laid
there: what is below matters by its mass alone.

A node is kept as (anchor, offset): offsets from the nearest end of a support are exact, however far from 0
the axis lies, so a density that blows up there keeps its digits.
"""

from __future__ import annotations

import math

import numpy as np

from distill.beta_numerics import beta_density, beta_divergence, beta_log_constant, lower_tail
from distill.numerics import compiled, gauss_legendre, legendre_antiderivative
from distill.tree import Floats

__all__ = [
    "N",
    "X",
    "W",
    "best_of_rest",
    "cut_panels",
    "distribution_functions",
    "expected_gain",
    "floor_of",
    "is_singular",
    "rates_at",
]

N = 16  # nodes a panel
X, W = gauss_legendre(N)
_FROM_LEFT = np.ascontiguousarray(legendre_antiderivative(N))
_FROM_RIGHT = np.ascontiguousarray(_FROM_LEFT[::-1, ::-1])

# Rows that give the four highest Legendre coefficients of the polynomial through 16 values.
_HIGHEST = np.array([(k + 0.5) * W * np.polynomial.legendre.Legendre.basis(k)(X) for k in range(N - 4, N)])

_SMOOTH_FROM = 12.0  # from this exponent on a density starts so flat that 16 nodes see no singularity
_NEVER = 46.0  # odds of exp(-this), 1e-20, count as none
_NEGLIGIBLE = 40.0  # a density is left alone where it is below exp(-this) of its peak
_CLOSE = 1e-3  # a mean this close to an end needs offsets from there
_MAX_PANELS = 100_000


@compiled
def is_singular(a: float) -> bool:
    """Whether p^(a - 1) needs panels that halve towards 0."""
    return a < _SMOOTH_FROM and a != math.floor(a)


@compiled
def rates_at(from_low: float, to_high: float, d: float, width: float) -> tuple[float, float]:
    """(p, q = 1 - p) at offset d from an anchor that lies from_low above a support's low end, to_high below
    its high end. Taken from the nearer end, where it is exact; the other follows, so that p + q = 1."""
    if abs(from_low) <= abs(to_high):
        p = (from_low + d) / width
        return p, 1.0 - p
    q = (to_high - d) / width
    return 1.0 - q, q


@compiled
def _smallest_panel(a: float, n: float) -> float:
    """Width of the last panel at a singular end: below it p^a is negligible or its series is quick."""
    return 2.0 ** -min(44.0, math.ceil(48.0 / a)) / max(n, 1.0)


@compiled
def _fits(a: float, b: float, p0: float, q0: float, p1: float, q1: float) -> bool:
    """Whether Beta(a, b) is a polynomial of degree 15 on [p0, p1], q = 1 - p, as far as it matters."""
    if p1 <= 0.0 or q0 <= 0.0:
        return True
    n = a + b
    width = p1 - p0
    if is_singular(a) and p0 >= 0.0 and width > max(p0, _smallest_panel(a, n)) * 1.001:
        return False
    if is_singular(b) and q1 >= 0.0 and width > max(q1, _smallest_panel(b, n)) * 1.001:
        return False
    # The point of the panel where the density is largest (where it has no mode: the mean).
    mode = (a - 1.0) / (n - 2.0) if a > 1.0 and b > 1.0 else a / n
    if (a > 1.0) != (b > 1.0):
        mode = 1.0 if a > 1.0 else 0.0
    p, q = mode, 1.0 - mode
    if p0 > mode:
        p, q = p0, q0
    elif p1 < mode:
        p, q = p1, q1
    if p0 < 0.0 or q1 < 0.0:  # a support ends inside: only where its density is negligible
        return (p > 0.0 and q > 0.0) and (p > mode or p < mode) and beta_divergence(a, b, p, q) > _NEGLIGIBLE
    fall = beta_divergence(a, b, p, q) if p > 0.0 and q > 0.0 else 0.0
    if fall > _NEGLIGIBLE:
        return True
    bend, slope = 0.0, 0.0
    if a > 1.0 and p > 0.0:
        bend += (a - 1.0) / (p * p)
        slope += (a - 1.0) / p
    if b > 1.0 and q > 0.0:
        bend += (b - 1.0) / (q * q)
        slope -= (b - 1.0) / q
    return width * width * bend <= 4.0 and width * abs(slope) <= 5.0 + fall


@compiled
def floor_of(a: Floats, b: Floats, low: Floats, width: Floats) -> float:
    """A value that the best leaf exceeds for sure (odds 1 - 1e-20), whichever one leaf is left out.

    P(Y_j < y) <= exp(-n KL(mu_j || p)) below the mean (Chernoff), so the sum of these exponents over all
    leaves but the largest must reach 46; or two supports begin above. Shape (L,) each; -inf for L = 1.
    """
    if len(a) < 2:
        return -math.inf
    order = np.sort(low)
    sure, top = order[-2], np.max(low + width)
    for _ in range(30):
        y = 0.5 * (sure + top)
        total, largest = 0.0, 0.0
        for j in range(len(a)):
            p = (y - low[j]) / width[j]
            if p * (a[j] + b[j]) < a[j]:
                exponent = beta_divergence(a[j], b[j], p, 1.0 - p) if p > 0.0 else math.inf
                total += min(exponent, _NEVER)
                largest = max(largest, min(exponent, _NEVER))
        if total - largest >= _NEVER:
            sure = y
        else:
            top = y
    return sure


@compiled
def cut_panels(
    a: Floats, b: Floats, low: Floats, width: Floats, floor: float
) -> tuple[Floats, Floats, Floats]:
    """Panels (anchor, left, right) of an action's axis, ascending: panel = anchor + [left, right].

    a, b : exponents of the leaves; low, width : Y_j = low_j + width_j p_j. All of shape (L,).
    Covers every support above the floor. Returns arrays of shape (P,); P = 0 where too many were needed.
    """
    n_leaves = len(a)
    top = np.max(low + width)
    ends = np.empty(2 * n_leaves)
    count = 0
    for j in range(n_leaves):
        n = a[j] + b[j]
        if (a[j] < _SMOOTH_FROM or a[j] < _CLOSE * n) and low[j] > floor:
            ends[count] = low[j]
            count += 1
        if (b[j] < _SMOOTH_FROM or b[j] < _CLOSE * n) and low[j] + width[j] > floor:
            ends[count] = low[j] + width[j]
            count += 1
    edges = np.append(ends[:count], np.array([floor, top]))
    edges = np.unique(edges)
    anchor, left, right = np.empty(_MAX_PANELS), np.empty(_MAX_PANELS), np.empty(_MAX_PANELS)
    stack = np.empty((2, 200))
    panels = 0
    for e in range(len(edges) - 1):
        span = edges[e + 1] - edges[e]
        for side in range(2):
            base = edges[e + side]
            depth = 0
            stack[0, 0], stack[1, 0] = (0.0, 0.5 * span) if side == 0 else (-0.5 * span, 0.0)
            while depth >= 0:
                d0, d1 = stack[0, depth], stack[1, depth]
                depth -= 1
                fits = True
                for j in range(n_leaves):
                    from_low, to_high = base - low[j], (low[j] + width[j]) - base
                    p0, q0 = rates_at(from_low, to_high, d0, width[j])
                    p1, q1 = rates_at(from_low, to_high, d1, width[j])
                    if not _fits(a[j], b[j], p0, q0, p1, q1):
                        fits = False
                        break
                middle = 0.5 * (d0 + d1)
                if fits or depth >= 197 or not d0 < middle < d1:
                    if panels == _MAX_PANELS:
                        return anchor[:0], left[:0], right[:0]
                    anchor[panels], left[panels], right[panels] = base, d0, d1
                    panels += 1
                else:
                    stack[0, depth + 1], stack[1, depth + 1] = middle, d1
                    stack[0, depth + 2], stack[1, depth + 2] = d0, middle
                    depth += 2
    return anchor[:panels].copy(), left[:panels].copy(), right[:panels].copy()


@compiled
def distribution_functions(
    a: Floats,
    b: Floats,
    low: Floats,
    width: Floats,
    start: Floats,
    anchor: Floats,
    left: Floats,
    right: Floats,
) -> tuple[Floats, Floats, Floats]:
    """F_j and 1 - F_j at the nodes of every panel, shape (L, P, N), and how far F_j's total was off 1.

    start : F_j at the floor, (L,). F is summed up from the left and 1 - F from the right, so both keep
    their small values; both are then divided by their total, whose distance from 1 tells how well the
    panels fit the density.
    """
    n_leaves, panels = len(a), len(anchor)
    below, above = np.zeros((n_leaves, panels, N)), np.zeros((n_leaves, panels, N))
    defect = np.zeros(n_leaves)
    mass = np.empty(panels)
    density = np.empty(N)
    for j in range(n_leaves):
        log_c = beta_log_constant(a[j], b[j])
        n = a[j] + b[j]
        for s in range(panels):
            from_low, to_high = anchor[s] - low[j], (low[j] + width[j]) - anchor[s]
            half, middle = 0.5 * (right[s] - left[s]) / width[j], 0.5 * (left[s] + right[s])
            p0, q0 = rates_at(from_low, to_high, left[s], width[j])
            p1, q1 = rates_at(from_low, to_high, right[s], width[j])
            if p1 <= 0.0 or q0 <= 0.0:
                mass[s] = 0.0
                continue
            if p0 == 0.0 and is_singular(a[j]) and p1 * n < 1.0:
                mass[s] = lower_tail(a[j], b[j], p1)
                for r in range(N):
                    below[j, s, r] = lower_tail(a[j], b[j], half * (1.0 + X[r]))
                    above[j, s, r] = mass[s] - below[j, s, r]
                continue
            if q1 == 0.0 and is_singular(b[j]) and q0 * n < 1.0:
                mass[s] = lower_tail(b[j], a[j], q0)
                for r in range(N):
                    above[j, s, r] = lower_tail(b[j], a[j], half * (1.0 - X[r]))
                    below[j, s, r] = mass[s] - above[j, s, r]
                continue
            total = 0.0
            for r in range(N):
                p, q = rates_at(from_low, to_high, middle + half * width[j] * X[r], width[j])
                density[r] = beta_density(a[j], b[j], log_c, p, q) * half if p > 0.0 and q > 0.0 else 0.0
                total += W[r] * density[r]
            mass[s] = total
            if total == 0.0:
                continue
            for r in range(N):
                up, down = 0.0, 0.0
                for c in range(N):
                    up += _FROM_LEFT[r, c] * density[c]
                    down += _FROM_RIGHT[r, c] * density[c]
                below[j, s, r], above[j, s, r] = max(up, 0.0), max(down, 0.0)
        total = start[j] + np.sum(mass)
        defect[j] = abs(total - 1.0)
        if defect[j] > 0.5:  # nothing fits: the error says so
            total, defect[j] = 1.0, 2.0
        passed = start[j]
        for s in range(panels):
            for r in range(N):
                below[j, s, r] = (passed + below[j, s, r]) / total
            passed += mass[s]
        passed = 0.0
        for s in range(panels - 1, -1, -1):
            for r in range(N):
                above[j, s, r] = (passed + above[j, s, r]) / total
            passed += mass[s]
    return below, above, defect


@compiled
def best_of_rest(below: Floats, above: Floats, left: Floats, right: Floats) -> tuple[Floats, Floats, Floats]:
    """What the other leaves add above y: T_i(y) = E (R_i - y)+, R_i the best leaf of the action but i.

    below, above : F_j and 1 - F_j from `distribution_functions`. T_i(y) is the integral of P(R_i > t) over
    t > y. Returns T at the nodes, (L, P, N), in the place of `above`; T at the panels' left ends and the
    last right end, (L, P + 1); and an error estimate of T, (L,), from the Legendre coefficients of the
    integrand: the last pair, and what it foretells of the first pair that the panel cannot hold.
    """
    n_leaves, panels = len(below), len(left)
    edge = np.zeros((n_leaves, panels + 1))
    error = np.zeros(n_leaves)
    after_p, after_q = np.empty((n_leaves + 1, N)), np.empty((n_leaves + 1, N))
    rest = np.empty(N)
    for s in range(panels - 1, -1, -1):
        half = 0.5 * (right[s] - left[s])
        # all leaves from j on: after_p product of F, after_q its complement, each without cancellation
        after_p[n_leaves], after_q[n_leaves] = 1.0, 0.0
        for j in range(n_leaves - 1, 0, -1):
            for r in range(N):
                after_p[j, r] = after_p[j + 1, r] * below[j, s, r]
                after_q[j, r] = after_q[j + 1, r] + after_p[j + 1, r] * above[j, s, r]
        before_p, before_q = np.ones(N), np.zeros(N)
        for j in range(n_leaves):
            total = 0.0
            high = np.zeros(4)
            for r in range(N):
                rest[r] = before_q[r] + before_p[r] * after_q[j + 1, r]
                total += W[r] * rest[r]
                for c in range(4):
                    high[c] += _HIGHEST[c, r] * rest[r]
                before_q[r] += before_p[r] * above[j, s, r]
                before_p[r] *= below[j, s, r]
            last, before = abs(high[2]) + abs(high[3]), abs(high[0]) + abs(high[1])
            error[j] += half / N * last * min(1.0, last / before if before > 0.0 else 1.0)
            for r in range(N):
                part = 0.0
                for c in range(N):
                    part += _FROM_RIGHT[r, c] * rest[c]
                above[j, s, r] = edge[j, s + 1] + half * part
            edge[j, s] = edge[j, s + 1] + half * total
    return above, edge, error


@compiled
def expected_gain(
    a: Floats,
    b: Floats,
    low: Floats,
    width: Floats,
    start: Floats,
    below: Floats,
    above: Floats,
    anchor: Floats,
    left: Floats,
    right: Floats,
    leaf: int,
) -> float:
    """E (R - Y)+ for Y = Y_leaf, R the best other leaf: integral of F_leaf P(R > t), a positive sum."""
    gain = 0.0
    p = ((anchor[0] + left[0]) - low[leaf]) / width[leaf]
    if p > 0.0 and start[leaf] > 0.0:  # below the floor R exceeds t for sure: E (floor - Y)+
        n = a[leaf] + b[leaf]
        q = 1.0 - p
        peak = 0.0
        if q > 0.0:
            peak = math.exp(beta_log_constant(a[leaf], b[leaf]) - beta_divergence(a[leaf], b[leaf], p, q)) / n
        gain += width[leaf] * max((p - a[leaf] / n) * start[leaf] + peak, 0.0)
    for s in range(len(left)):
        for r in range(N):
            product, rest = 1.0, 0.0
            for j in range(len(below)):
                if j != leaf:
                    rest += product * above[j, s, r]
                    product *= below[j, s, r]
            gain += 0.5 * (right[s] - left[s]) * W[r] * below[leaf, s, r] * rest
    return gain
