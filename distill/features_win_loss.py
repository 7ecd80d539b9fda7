"""The features as one ONNX graph over the win/loss leaf table, one tree a call; floor 4.

Leaf i counts base + span p at the root, p ~ Beta(alpha, beta). As in `features`, a table gives every
action's expected maximum V and, of leaf i's siblings, mean mu and variance r^2 of their maximum; here the
table holds distribution functions of betas. C is the best other action's value.

One rollout often changes nothing, so the outcomes of few are looked at one by one (`Outcomes`). The start
value of the learner is

    max over k of 1, 2, 3, 4, 6, 8 of  sum over w of P(w | k) x what w wins change / k

and beyond 8 the normal form of `features`, where moves are many small steps. For h = 0, leaves are worth
their means and C is the best other leaf's; there every k up to 8 is looked at, in double precision. For
finite h the table holds betas with the mean and variance that the posterior mean then has.
"""

from __future__ import annotations

import math
from typing import Final, NamedTuple

import numpy as np
import onnx
from onnx import TensorProto

from distill.feature_nodes import LARGE, TINY, best_batch, finished, loss, moments, threshold_shift
from distill.onnx_nodes import Nodes
from distill.scorer_inputs import WIN_LOSS_TABLE
from distill.win_loss_nodes import Outcomes, beta_cdf

__all__ = ["FEATURE_NAMES", "FEW", "build_graph"]

FEATURE_NAMES: Final = (
    "threshold",  # t0 / s_k, cut at +-40, k the best batch of the normal form
    "sibling_help",  # -q(y) up to a constant factor: what the siblings take off the threshold, in theta
    "step",  # s_k / theta
    "resolved",  # s_k / s
    "small_or_many",  # log of the best value of up to 8 rollouts over that of more, cut at +-15
    "large_batch",  # log of the best batch of the normal form
    "trials",  # alpha + beta, cut at 60
    "odds",  # of the result that leads to the threshold
    "left",  # log of the rollouts left over the best batch of the normal form, cut at 3
)

_MOST: Final = 8  # rollouts whose every outcome may be looked at
FEW: Final = (1, 2, 3, 4, 6, _MOST)
_BELOW, _ABOVE = 7.0, 3.5  # the table spans the largest m - 7 s to the largest m + 3.5 s, within supports
_FAR: Final = 1e100  # spans; stands for no rival
_LEAST_SPREAD: Final = 1e-12  # of the span squared


class _Leaves(NamedTuple):
    """Names of values of the leaves as the root sees them, shape (1, n) or (n,)."""

    base: str
    span: str
    alpha: str
    beta: str
    total: str
    wins: str
    losses: str
    mean: str


class _Learned(NamedTuple):
    """Variance of p's posterior mean h rollouts later, and the beta that has it."""

    variance: str
    alpha: str
    beta: str


def build_graph(*, points: int = 16, horizon: float = math.inf, batch: int | None = None) -> onnx.ModelProto:
    """The feature graph of the win/loss leaf table.

    Inputs, shape (n,) unless said: alpha, beta, low, high, gain, offset, cost (double), action (int64, 0 to
    n - 1), remaining (double, scalar). Outputs as in FeatureMatrix; with rates, after FEATURE_NAMES the log
    of the value a rollout of each batch looked at, over the best of them, cut at -6. points : cells of the
    table. horizon, batch : of the value that is learned; None is the rate.
    """
    g = Nodes("f")
    leaves = _leaves(g)
    span, total = leaves.span, leaves.total
    v = g.at_least(g("Div", g("Mul", leaves.wins, leaves.losses), g("Add", total, g.double(1.0))), TINY)
    s = g("Sqrt", v)
    learned = _learned(g, leaves, v, horizon)
    best, over, own, spread2 = _static(g, leaves) if horizon == 0 else _tree(g, leaves, learned, points)

    # In units of the leaf's span: rival and mean over the siblings' mean, and their variance.
    c = g("Clip", g("Div", over, span), g.scalar(-_FAR), g.scalar(_FAR))
    mean = g("Div", own, span)
    r2 = g.at_least(g("Div", spread2, g("Mul", span, span)), _LEAST_SPREAD)  # rounding may leave it below 0
    theta = g("Sqrt", g("Add", learned.variance, r2))
    t0 = g("Sub", c, mean)
    if horizon == 0:
        slope, help_ = None, g("Mul", t0, g.double(0.0))
    else:
        shift, slope, help_ = threshold_shift(g, g("Div", c, theta), theta)
        t0 = g("Add", t0, shift)

    k, s_k = _steps(g, t0, s, total, batch)
    z = g("Clip", g("Div", t0, g.at_least(s_k, TINY)), g.scalar(-40.0), g.scalar(40.0))
    many = g.at_least(k, 1.0)
    unit = s_k if batch is not None else g("Div", s_k, many)
    value = g("Mul", unit if slope is None else g("Mul", unit, slope), loss(g, z))
    if batch is None:  # the normal form is for many small steps alone
        enough = g("Clip", g("Sub", "remaining", g.double(float(_MOST))), g.scalar(0.0), g.scalar(1.0))
        value = g("Mul", value, enough)
    batches = (min(batch, _MOST),) if batch is not None else FEW if horizon else tuple(range(1, _MOST + 1))
    outcomes = Outcomes(g, batches, horizon=horizon, whole=batch is not None)
    few, small, log_few, each = outcomes.values((leaves.wins, leaves.losses), total, mean, c, r2, best)
    ratio = g("Sub", log_few, g("Log", g.at_least(value, TINY)))
    ratio = g("Clip", ratio, g.scalar(-15.0), g.scalar(15.0))
    whole = k
    if batch is None:
        whole = g("Where", g("GreaterOrEqual", few, value), small, k)
        value = g("Max", few, value)
    elif batch <= _MOST:
        value = few

    rows = [z, help_, g("Div", s_k, theta), g("Div", s_k, s), ratio, g("Log", many)]
    left = g("Log", g("Div", g.at_least("remaining", 1.0), many))
    rows += [
        g("Clip", total, g.scalar(0.0), g.scalar(60.0)),
        g("Add", leaves.wins, g("Mul", best, g("Sub", leaves.losses, leaves.wins))),
        g("Clip", left, g.scalar(0.0), g.scalar(3.0)),
    ]
    names: tuple[str, ...] = FEATURE_NAMES
    features = g("Cast", g("Concat", *rows, axis=0), to=TensorProto.FLOAT)
    if batch is None:
        features = g("Concat", features, each, axis=0)
        names += tuple(f"batch_of_{k}" for k in batches)
    least = g("Min", g("Min", "alpha", "beta"), g("Sub", "high", "low"))
    g("And", g("Greater", least, g.double(0.0)), g("GreaterOrEqual", "action", g.whole(0)), out="valid")
    whole = g("Add", whole, g.double(0.5))
    unit, value, leaf_sd = (g("Mul", x, span) for x in (unit, value, s))
    return finished(g, WIN_LOSS_TABLE, names, features, unit, value, whole, leaf_sd)


def _leaves(g: Nodes) -> _Leaves:
    span = g.at_least(g("Mul", g("Sub", "high", "low"), "gain"), TINY)
    base = g("Add", g("Mul", "low", "gain"), "offset")
    alpha, beta = (g("Unsqueeze", x, g.whole(0)) for x in ("alpha", "beta"))
    total = g("Add", alpha, beta)
    wins, losses = g("Div", alpha, total), g("Div", beta, total)
    return _Leaves(base, span, alpha, beta, total, wins, losses, g("Add", base, g("Mul", span, wins)))


def _learned(g: Nodes, leaves: _Leaves, v: str, horizon: float) -> _Learned:
    if math.isinf(horizon) or horizon == 0:
        return _Learned(v, leaves.alpha, leaves.beta)
    one, h = g.double(1.0), g.double(horizon)
    later = g("Div", g("Add", leaves.total, h), h)
    trials = g("Sub", g("Mul", g("Add", leaves.total, one), later), one)
    return _Learned(g("Div", v, later), g("Mul", leaves.wins, trials), g("Mul", leaves.losses, trials))


def _tree(g: Nodes, leaves: _Leaves, learned: _Learned, points: int) -> tuple[str, str, str, str]:
    """1 where a leaf's action is the best, else 0; over its siblings' mean: rival and own mean; r^2."""
    s = g("Mul", g("Sqrt", learned.variance), leaves.span)
    ends = g("Add", g("Mul", s, g.double([[-_BELOW], [_ABOVE]])), leaves.mean)
    ends = g("Min", g("Max", ends, leaves.base), g("Add", leaves.base, leaves.span))
    both = g("Add", "action", g.constant(np.zeros((2, 1), dtype=np.int64)))
    ends = g("ScatterElements", g.at_most(ends, -LARGE), both, ends, axis=1, reduction="max")
    ends = g("Gather", ends, "action", axis=1)
    low, high = g.split(ends, 2, axis=0)
    z = g("Div", g("Sub", ends, leaves.mean), s)
    phi = beta_cdf(g, (learned.alpha, learned.beta), z, points)
    row = g("Unsqueeze", "action", g.whole(1))
    joint = g("ScatterND", g("HardSigmoid", phi, alpha=0.0, beta=1.0), row, phi, reduction="mul")
    joint = g("Gather", joint, "action")
    value, others, spread2 = moments(g, low, high, joint, g("Div", joint, phi), points)
    # By sums and products with the mask of the best action: Where takes three times as long.
    best = g("Equal", "action", g("Gather", "action", g("ArgMax", value, axis=1, keepdims=0)))
    best = g("Cast", best, to=TensorProto.DOUBLE)
    first = g("ReduceMax", value)
    second = g("ReduceMax", g("Sub", value, g("Mul", best, g.double(LARGE))))
    rival = g("Sub", first, g("Mul", best, g("Sub", first, second)))
    return best, g("Sub", rival, others), g("Sub", leaves.mean, others), spread2


def _static(g: Nodes, leaves: _Leaves) -> tuple[str, str, str, str]:
    """For h = 0 the rival of a leaf is the best other leaf; siblings do not count beside it."""
    m = leaves.mean
    column = g("Reshape", m, g.whole(-1, 1))
    first = g("Unsqueeze", g("ArgMax", column, axis=0, keepdims=0), g.whole(1))
    masked = g("ScatterND", column, first, g.double([[-LARGE]]), reduction="add")
    best = g("LessOrEqual", g("Reshape", masked, g.whole(-1)), g.double(-LARGE / 2))
    rival = g("Where", best, g("ReduceMax", masked), g("ReduceMax", m))
    nothing = g("Mul", m, g.double(0.0))
    return g("Cast", best, to=TensorProto.DOUBLE), nothing, g("Sub", m, rival), nothing


def _steps(g: Nodes, t0: str, s: str, total: str, batch: int | None) -> tuple[str, str]:
    """Best batch beyond the small ones for a threshold t0, or the given one, and the step s_k."""
    if batch is None:
        return best_batch(g, t0, s, total, least=_MOST + 1.0)
    k = g("Add", g("Mul", t0, g.double(0.0)), g.double(float(batch)))
    return k, g("Mul", s, g("Sqrt", g("Div", k, g("Add", k, total))))
