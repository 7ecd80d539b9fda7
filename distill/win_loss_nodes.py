"""Nodes of the win/loss features: distribution functions of betas, outcomes of few rollouts; floor 3.

Values are rows, shape (1, n), and tables have the leaves last: onnxruntime broadcasts a row over a table in
half the time of a column, and a number over a row in a quarter. Unit-free numbers are float32.
"""

from __future__ import annotations

import math
from typing import Final

import numpy as np
from onnx import TensorProto

from distill.feature_nodes import PHI_SLOPE, TINY, midpoints
from distill.onnx_nodes import Nodes
from distill.tree import Floats

__all__ = ["Outcomes", "beta_cdf"]

_LEAST_COUNT: Final = 0.05  # of alpha and beta, in the table
# Larger counts have the shape of these, at their own mean and variance: Phi moves by 1e-3 at most.
_LARGEST_COUNT: Final = 2000.0
_FURTHEST: Final = 1e6  # standard deviations, far outside every support
_EDGES: Final = (1e-30, 1 - 6e-8)  # shares of the support that count as 0 and 1
_BLUNT: Final = 2e-3  # of the deviance: above its rounding, below what moves Phi
_FAR: Final = 1e30  # spans; stands for no rival
_LEAST_SHARE: Final = 1e-30
_LEAST_TRIALS: Final = 1e-6
_LEAST_VALUE: Final = 1e-37
_LEAST_LOG: Final = -6.0
# What sums of `Outcomes` are made of: shares of wins and losses, i = 1 / (alpha + beta), x, c and r^2.
_ROWS: Final = "pqixcr"


def beta_cdf(g: Nodes, counts: tuple[str, str], z: str, points: int) -> str:
    """P(p <= x) of each leaf at its points, float32, shape (n, points).

    Within 5e-3 for counts from 1/2 up, within 2e-2 for smaller ones.

    counts : alpha and beta. z : both ends of its table in standard deviations from its mean,
    shape (2, n). One step of

        I_x(a, b) = I_x(a + 1, b + 1) + x^a (1 - x)^b / B(a, b) (b - (a + b) x) / (a b)

    (from Abramowitz and Stegun 1964, 26.5.15 and 26.5.16), then the normal approximation of Peizer and Pratt
    (1968): Phi of a signed root of the deviance D of S = a + 1/2 and T = b + 1/2 from x. With n = S + T,
    exp(-D) is also the density, by Stirling's series for Gamma(S + 1/2):

        x^(a+1) (1 - x)^(b+1) / B(a + 1, b + 1) = exp(-D) sqrt(x (1 - x) (n + 1/6 + n^2 / (12 S T)) / (2 pi))
    """
    one = g.single
    a, b = (
        g("Cast", g("Clip", x, g.scalar(_LEAST_COUNT), g.scalar(_LARGEST_COUNT)), to=TensorProto.FLOAT)
        for x in counts
    )
    t = g("Add", a, b)
    n = g("Add", t, one(1.0))
    mean = g("Div", a, t)
    rest = g("HardSigmoid", mean, alpha=-1.0, beta=1.0)
    variance = g("Div", g("Mul", mean, rest), n)
    z = g("Cast", g("Clip", z, g.scalar(-_FURTHEST), g.scalar(_FURTHEST)), to=TensorProto.FLOAT)
    ends = g("Add", g("Mul", g("Sqrt", variance), z), mean)
    at = midpoints(points)
    x = g("Gemm", one(np.stack([1 - at, at], axis=1)), ends)
    x = g("Clip", x, *(g.constant(np.array(edge, dtype=np.float32)) for edge in _EDGES))
    y = g("HardSigmoid", x, alpha=-1.0, beta=1.0)

    wins, losses = g("Add", a, one(0.5)), g("Add", b, one(0.5))
    p, q = g("Div", wins, n), g("Div", losses, n)
    log_x, log_y = g("Log", g("Div", x, p)), g("Log", g("Div", y, q))
    log_density = g("Add", g("Mul", wins, log_x), g("Mul", losses, log_y))
    apart = g("Sub", p, x)
    pq = g("Mul", p, q)
    near = g("Div", g("Mul", pq, one(2 * _BLUNT)), n)  # the root's limit where x meets p
    square = g("Add", g("Mul", apart, apart), near)
    root = g("Sqrt", g("Div", g("Sub", one(_BLUNT), log_density), square))
    start, slope = _peizer_pratt(g, a, b, n)
    normal = g("Erf", g("Mul", g("Sub", start, g("Mul", slope, x)), root))

    series = g("Div", one(1 / 12), pq)
    series = g("Add", series, g("Add", n, one(1 / 6)))
    size = g("Div", g("Sqrt", series), g("Mul", n, one(math.sqrt(math.pi / 2))))  # twice that of the step
    step = g("Mul", g("Exp", log_density), g("Mul", g("Sub", rest, x), size))
    step = g("Div", step, g("Sqrt", g("Mul", x, y)))
    twice = g("Clip", g("Sub", step, normal), *(g.constant(np.array(v, dtype=np.float32)) for v in (-1, 1)))
    phi = g("HardSigmoid", twice, alpha=PHI_SLOPE, beta=0.5)
    return g("Transpose", phi, perm=[1, 0])


def _peizer_pratt(g: Nodes, a: str, b: str, n: str) -> tuple[str, str]:
    """d / sqrt(n^2 + n / 6) as start - slope x; their d, for S = a + 1/2, T = b + 1/2 and n = S + T."""
    one = g.single
    over_a, over_b = (g("Div", one(0.02), g("Add", count, one(1.0))) for count in (a, b))
    over_n = g("Div", one(0.02), g("Add", n, one(1.0)))
    start = g("Add", g("Add", a, over_a), g("Add", g("Mul", over_n, one(0.5)), one(2 / 3)))
    slope = g("Add", g("Add", g("Add", n, one(1 / 3)), over_n), g("Add", over_a, over_b))
    unit = g("Add", n, one(1 / 12))
    return g("Div", start, unit), g("Div", slope, unit)


class Outcomes:
    """What the outcomes of a few rollouts at a leaf are worth, in spans.

    k rollouts with w wins leave p' = (alpha + w) / (alpha + beta + k). With the siblings' maximum taken as
    normal and the leaf by its moments, the action is then worth V' = theta' f(x' / theta') over the siblings'
    mean (Clark 1961), x' the leaf's own mean over it. A win counts max(V' - c, 0), or max(c - V', 0) for the
    best action, and has the beta-binomial odds P(w | k).
    """

    def __init__(self, g: Nodes, batches: tuple[int, ...], *, horizon: float, whole: bool) -> None:
        """batches : the k looked at. whole : whether values are those of all k rollouts, not of each."""
        self.g = g
        self.batches = batches
        self.horizon = horizon
        self.whole = whole
        self.exact = horizon == 0  # nothing is approximated there, so double precision is worth its time
        pairs = [(k, w) for k in batches for w in range(k + 1)]
        self.k, self.w = (np.array(part, dtype=float) for part in zip(*pairs, strict=True))

    def real(self, value: Floats | float) -> str:
        """A constant of the precision in use."""
        return self.g.double(value) if self.exact else self.g.single(value)

    def at_least(self, value: str, least: float) -> str:
        """Add a Clip from below in the precision in use."""
        bound = np.array(least, dtype=np.float64 if self.exact else np.float32)
        return self.g("Clip", value, self.g.constant(bound))

    def values(
        self, shares: tuple[str, str], total: str, mean: str, rival: str, spread2: str, best: str
    ) -> tuple[str, str, str, str]:
        """Best value, double; its batch, shape (n,); log of the best, double; log of each over it, float32.

        shares : of wins and losses. total : alpha + beta. mean, rival : x and c above. spread2 : variance of
        the siblings' maximum. best : 1 where the leaf's action is the best, else 0, shape (n,).
        """
        g, real = self.g, self.real
        unit = g("Div", g.double(1.0), g.at_least(total, _LEAST_TRIALS))
        rows = g("Concat", *shares, unit, mean, rival, spread2, axis=0)
        rows = g("Clip", rows, g.scalar(-_FAR), g.scalar(_FAR))
        rows = rows if self.exact else g("Cast", rows, to=TensorProto.FLOAT)
        _, _, unit, _, c, r2 = g.split(rows, 6, axis=0)
        rows = g("Concat", rows, g("Mul", rows, unit), axis=0)
        gain = g("Sub", self._later_values(rows, unit, r2), c)
        sign = g(
            "Sub",
            real(1.0),
            g("Mul", best if self.exact else g("Cast", best, to=TensorProto.FLOAT), real(2.0)),
        )
        gain = g("Relu", g("Mul", gain, sign))
        k = np.array(self.batches, dtype=float)[:, None]
        values = g("Gemm", real((self.k == k) / (1.0 if self.whole else k)), g("Mul", self._odds(rows), gain))
        if not self.whole:
            allowed = g("LessOrEqual", g.double(k), "remaining")
            allowed = g("Cast", allowed, to=TensorProto.DOUBLE if self.exact else TensorProto.FLOAT)
            values = g("Mul", values, allowed)
        highest = g("ReduceMax", values, g.whole(0), keepdims=1)
        at = g("Gather", g.double(k.ravel()), g("ArgMax", values, axis=0, keepdims=0))
        log_best, logs = (
            g("Log", self.at_least(x, TINY if self.exact else _LEAST_VALUE)) for x in (highest, values)
        )
        each = self.at_least(g("Sub", logs, log_best), _LEAST_LOG)
        if self.exact:
            return highest, at, log_best, g("Cast", each, to=TensorProto.FLOAT)
        highest, log_best = (g("Cast", x, to=TensorProto.DOUBLE) for x in (highest, log_best))
        return highest, at, log_best, each

    def _sum(self, rows: str, constant: float = 0.0, **times: Floats | float) -> str:
        """A sum of rows for each outcome; `times` names a row, or a row in units of a trial (`_i`)."""
        factors = np.zeros((len(self.k), 2 * len(_ROWS)))
        for name, factor in times.items():
            factors[:, _ROWS.index(name[0]) + (len(_ROWS) if name.endswith("_i") else 0)] = factor
        extra = [] if constant == 0 else [self.real(np.full((len(self.k), 1), constant))]
        return self.g("Gemm", self.real(factors), rows, *extra)

    def _later_values(self, rows: str, unit: str, r2: str) -> str:
        """V' of each outcome; unit : i = 1 / (alpha + beta)."""
        g, real, k, wins = self.g, self.real, self.k, self.w
        losses = k - wins
        later = self._sum(rows, 1.0, i=k)  # trials after over before
        x = g("Div", self._sum(rows, x=1.0, x_i=k, q_i=wins, p_i=-losses), later)
        if self.exact:
            return x
        # 2 (v' + r^2), v' = p' q' / (alpha + beta + k + 1), for finite h times h / (alpha + beta + k + h).
        spread = g("Mul", self._sum(rows, p=1.0, i=wins), self._sum(rows, q_i=2.0, i_i=2.0 * losses))
        spread = g("Div", spread, g("Mul", g("Mul", later, later), g("Add", later, unit)))
        if math.isfinite(self.horizon):
            soon = g("Mul", unit, real(self.horizon))
            spread = g("Mul", spread, g("Div", soon, g("Add", later, soon)))
        theta = g("Sqrt", g("Add", spread, g("Add", r2, r2)))
        z = g("Div", x, theta)
        density = g("Exp", g("Sub", real(-math.log(2 * math.sqrt(math.pi))), g("Mul", z, z)))
        below = g("HardSigmoid", g("Erf", z), alpha=0.5, beta=0.5)
        return g("Add", g("Mul", x, below), g("Mul", theta, density))

    def _odds(self, rows: str) -> str:
        """P(w | k) of each outcome: rising products of p, q and 1 in steps of i."""
        g, real, most = self.g, self.real, max(self.batches)
        terms = np.zeros((3 * most, 2 * len(_ROWS)))
        terms[:most, _ROWS.index("p")] = terms[most : 2 * most, _ROWS.index("q")] = 1
        terms[:, _ROWS.index("i")] = np.tile(np.arange(most), 3)
        constant = np.repeat([[0.0], [0.0], [1.0]], most, axis=0)
        logs = g("Log", self.at_least(g("Gemm", real(terms), rows, real(constant)), _LEAST_SHARE))
        below = np.arange(most)
        k, w = self.k[:, None], self.w[:, None]
        taken = np.concatenate([below < w, below < k - w, -1.0 * (below < k)], axis=1)
        ways = np.log([[float(math.comb(int(k), int(w)))] for k, w in zip(self.k, self.w, strict=True)])
        return g("Exp", g("Gemm", real(taken), logs, real(ways)))
