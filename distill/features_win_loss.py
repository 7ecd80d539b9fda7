"""The features as one ONNX graph over the win/loss leaf table, one tree a call; floor 4.

Leaf i counts base + span p at the root, p ~ Beta(alpha, beta). As in `features`, a table gives every
action's expected maximum V and, of leaf i's siblings, mean mu and variance r^2 of their maximum; here the
table holds distribution functions of betas, by Peizer and Pratt (1968).

k rollouts with w wins leave p' = (alpha + w) / (alpha + beta + k). With the siblings' maximum taken as
normal and the leaf by its moments, the action is then worth V' = mu + theta' f((base + span p' - mu) /
theta') (Clark 1961). C is the best other action's value. What w wins of k change is max(V' - C, 0), or
max(C - V', 0) for the best action: one rollout often changes nothing. The start value of the learner is

    max over k <= 8 of  sum over w of P(w | k) x that / k        (P beta-binomial: all 44 outcomes)

and beyond 8 the normal form of `features`, where moves are many small steps. For h = 0, V' is the leaf's
own mean and C the best other leaf's. For finite h the table holds betas with the mean and variance that the
posterior mean then has.
"""

from __future__ import annotations

import math
from typing import Final, NamedTuple

import numpy as np
import onnx
from onnx import TensorProto

from distill.feature_nodes import LARGE, TINY, best_batch, finished, loss, midpoints, moments, threshold_shift
from distill.onnx_nodes import Nodes
from distill.scorer_inputs import WIN_LOSS_TABLE
from distill.tree import Floats

__all__ = ["FEATURE_NAMES", "build_graph"]

FEATURE_NAMES: Final = (
    "threshold",  # t0 / s_k, cut at +-40, k the best batch of the normal form
    "sibling_help",  # -q(y) up to a constant factor: what the siblings take off the threshold, in theta
    "step",  # s_k / theta
    "resolved",  # s_k / s
    "small_or_many",  # log of the best value of up to 8 rollouts over that of more, cut at +-15
    "large_batch",  # log of the best batch of the normal form
    "run",  # length of a run of wins, or of losses, that reaches the threshold, cut at 40
    "trials",  # alpha + beta, cut at 60
    "odds",  # of the result that leads to the threshold
    "left",  # log of the rollouts left over the best batch of the normal form, cut at 3
)

_MOST: Final = 8  # rollouts whose every outcome is looked at
# With rates, log of the value a rollout of each batch up to 8 over the best of them, cut at -6.
_RATE_NAMES: Final = (*FEATURE_NAMES, *(f"batch_of_{k}" for k in range(1, _MOST + 1)))
_BELOW, _ABOVE = 7.0, 3.5  # the table spans the largest m - 7 s to the largest m + 3.5 s, within supports
_PHI_SLOPE: Final = 0.49999994  # Phi in [6e-8, 1 - 6e-8]: F / Phi stays finite in float32
_EDGE: Final = 1e-9  # shares of the support that count as 0 and 1
_LEAST_COUNT: Final = 0.05  # of alpha and beta, in the table
_FAR: Final = 1e100  # spans; stands for no rival
_LEAST_SPREAD: Final = 1e-12  # of the span squared
_LEAST_LOG: Final = -6.0
_LARGEST_LOG: Final = 20.0  # of x (1 - x) times a density; larger ones are rounding at 1e8 trials and more
_BLUNT: Final = 1e-6  # removes 0 / 0 where the deviance is 0
_FURTHEST: Final = 30.0  # standard deviations; f is 0 there in float32


class _Leaves(NamedTuple):
    """Names of values of the leaves as the root sees them, shape (n,)."""

    base: str
    span: str
    share: str
    total: str
    mean: str


def build_graph(*, points: int = 16, horizon: float = math.inf, batch: int | None = None) -> onnx.ModelProto:
    """The feature graph of the win/loss leaf table.

    Inputs, shape (n,) unless said: alpha, beta, low, high, gain, offset, cost (double), action (int64, 0 to
    n - 1), remaining (double, scalar). Outputs as in FeatureMatrix. points : cells of the table. horizon,
    batch : of the value that is learned; None is the rate.
    """
    g = Nodes("f")
    leaves = _leaves(g)
    span, column = g("Reshape", leaves.span, g.whole(-1, 1)), g.whole(-1, 1)
    best, over, reach, spread2 = _tree(g, leaves, horizon, points)

    # In units of the leaf's span, columns: rival, support's low end and mean, over the siblings' mean.
    c, low, mean = (g("Div", g("Reshape", x, column), span) for x in (over, reach[0], reach[1]))
    c = g("Clip", c, g.scalar(-_FAR), g.scalar(_FAR))
    r2 = g("Div", g("Reshape", spread2, column), g("Mul", span, span))
    r2 = g("Max", r2, g.double(_LEAST_SPREAD))  # a table of steps may fall below 0
    share, total = g("Reshape", leaves.share, column), g("Reshape", leaves.total, column)
    theta = g("Sqrt", g("Add", _variance(g, share, total, horizon), r2))
    t0 = g("Sub", c, mean)
    if horizon == 0:
        slope, help_ = g.double(1.0), g("Mul", t0, g.double(0.0))
    else:
        shift, slope, help_ = threshold_shift(g, g("Div", c, theta), theta)
        t0 = g("Add", t0, shift)

    s = g("Sqrt", g("Div", g("Mul", share, g("Sub", g.double(1.0), share)), g("Add", total, g.double(1.0))))
    sign = g("Reshape", g("Where", best, g.double(-1.0), g.double(1.0)), column)
    k, s_k = _steps(g, t0, s, total, batch)
    z = g("Clip", g("Div", t0, g("Max", s_k, g.double(TINY))), g.scalar(-40.0), g.scalar(40.0))
    unit = s_k if batch is not None else g("Div", s_k, g("Max", k, g.double(1.0)))
    value = g("Mul", g("Mul", unit, slope), loss(g, z))
    few, small, each = _few(g, c, low, r2, sign, horizon, batch)
    if batch is None:  # the normal form is for many small steps alone
        enough = g("GreaterOrEqual", "remaining", g.double(_MOST + 1.0))
        value = g("Where", enough, value, g.double(0.0))
    log_few = _log(g, few)
    ratio = g("Clip", g("Sub", log_few, _log(g, value)), g.scalar(-15.0), g.scalar(15.0))
    whole = k
    if batch is None:
        whole = g("Where", g("GreaterOrEqual", few, value), small, k)
        value = g("Max", few, value)
    elif batch <= _MOST:
        value = few

    columns = [z, help_, g("Div", s_k, theta), g("Div", s_k, s), ratio, *_run(g, t0, k, share, total, sign)]
    if batch is None:
        columns.append(g("Clip", g("Sub", _log(g, each), log_few), g.scalar(_LEAST_LOG), g.scalar(0.0)))
    stacked = g("Transpose", g("Concat", *columns, axis=1), perm=[1, 0])
    valid = g("And", g("Greater", "alpha", g.double(0.0)), g("Greater", "beta", g.double(0.0)))
    valid = g("And", valid, g("Greater", "high", "low"))
    g("And", valid, g("GreaterOrEqual", "action", g.whole(0)), out="valid")
    whole = g("Add", whole, g.double(0.5))
    names = FEATURE_NAMES if batch is not None else _RATE_NAMES
    return finished(g, WIN_LOSS_TABLE, names, stacked, g("Mul", unit, span), g("Mul", value, span), whole)


def _log(g: Nodes, x: str) -> str:
    return g("Log", g("Max", x, g.double(TINY)))


def _leaves(g: Nodes) -> _Leaves:
    span = g("Max", g("Mul", g("Sub", "high", "low"), "gain"), g.double(TINY))
    base = g("Add", g("Mul", "low", "gain"), "offset")
    total = g("Add", "alpha", "beta")
    share = g("Div", "alpha", total)
    return _Leaves(base, span, share, total, g("Add", base, g("Mul", span, share)))


def _variance(g: Nodes, share: str, total: str, horizon: float) -> str:
    """Variance of p, or of its posterior mean h rollouts later."""
    v = g("Div", g("Mul", share, g("Sub", g.double(1.0), share)), g("Add", total, g.double(1.0)))
    if math.isinf(horizon) or horizon == 0:
        return v
    return g("Mul", v, g("Div", g.double(horizon), g("Add", total, g.double(horizon))))


def _tree(g: Nodes, leaves: _Leaves, horizon: float, points: int) -> tuple[str, str, tuple[str, str], str]:
    """Is a leaf's action the best; over its siblings' mean: rival, support's low end and own mean; r^2."""
    if horizon == 0:
        return _static(g, leaves)
    v = _variance(g, leaves.share, leaves.total, horizon)
    s = g("Mul", g("Sqrt", g("Max", v, g.double(TINY))), leaves.span)
    row = g("Unsqueeze", "action", g.whole(1))
    low = g("Max", g("Sub", leaves.mean, g("Mul", s, g.double(_BELOW))), leaves.base)
    high = g("Min", g("Add", leaves.mean, g("Mul", s, g.double(_ABOVE))), g("Add", leaves.base, leaves.span))
    ends = g("Concat", g("Unsqueeze", low, g.whole(1)), g("Unsqueeze", high, g.whole(1)), axis=1)
    ends = g("ScatterND", g("Min", ends, g.double(-LARGE)), row, ends, reduction="max")
    ends = g("Gather", ends, "action")
    base, span = (g("Unsqueeze", x, g.whole(1)) for x in (leaves.base, leaves.span))
    t = midpoints(points)
    x = g("MatMul", g("Div", g("Sub", ends, base), span), g.double(np.stack([1 - t, t])))
    x = g("Clip", x, g.scalar(_EDGE), g.scalar(1 - _EDGE))
    phi = _beta_cdf(g, leaves.share, _trials(g, leaves.total, horizon), x)
    joint = g("ScatterND", g("Max", phi, g.single(1.0)), row, phi, reduction="mul")
    joint = g("Gather", joint, "action")
    bottom, top = g.split(g("Transpose", ends, perm=[1, 0]), 2, axis=0)
    value, others, spread2 = moments(g, bottom, top, joint, g("Div", joint, phi), points)
    best = g("Equal", "action", g("Gather", "action", g("ArgMax", value, axis=1, keepdims=0)))
    second = g("ReduceMax", g("Where", best, g.double(-LARGE), value))
    rival = g("Where", best, second, g("ReduceMax", value))
    return (
        best,
        g("Sub", rival, others),
        (g("Sub", leaves.base, others), g("Sub", leaves.mean, others)),
        spread2,
    )


def _static(g: Nodes, leaves: _Leaves) -> tuple[str, str, tuple[str, str], str]:
    """For h = 0 the rival of a leaf is the best other leaf; siblings do not count beside it."""
    m = leaves.mean
    column = g("Unsqueeze", m, g.whole(1))
    first = g("Unsqueeze", g("ArgMax", m, axis=0, keepdims=1), g.whole(1))
    masked = g("ScatterND", column, first, g.double([[-LARGE]]), reduction="add")
    best = g("LessOrEqual", masked, g.double(-LARGE / 2))
    rival = g("Reshape", g("Where", best, g("ReduceMax", masked), g("ReduceMax", m)), g.whole(-1))
    nothing = g("Mul", m, g.double(0.0))
    reach = (g("Sub", leaves.base, rival), g("Sub", m, rival))
    return g("Reshape", best, g.whole(-1)), nothing, reach, nothing


def _trials(g: Nodes, total: str, horizon: float) -> str:
    """alpha + beta of the beta with the mean and variance of the posterior mean h rollouts later."""
    if math.isinf(horizon):
        return total
    h = g.double(horizon)
    wider = g("Mul", g("Add", total, g.double(1.0)), g("Div", g("Add", total, h), h))
    return g("Sub", wider, g.double(1.0))


def _beta_cdf(g: Nodes, share: str, total: str, x: str) -> str:
    """P(p <= x) of each leaf at its points, float32, shape (n, points), within 5e-4.

    p ~ Beta(a, b), a = share total, b = (1 - share) total. Two steps of

        I_x(a, b) = I_x(a + 1, b + 1) + x^a (1 - x)^b / B(a, b) (b - (a + b) x) / (a b)

    (from Abramowitz and Stegun 1964, 26.5.15 and 26.5.16), then the normal approximation.
    """
    one = g.double(1.0)
    a = g("Max", g("Unsqueeze", g("Mul", share, total), g.whole(1)), g.double(_LEAST_COUNT))
    b = g("Unsqueeze", g("Mul", g("Sub", one, share), total), g.whole(1))
    b = g("Max", b, g.double(_LEAST_COUNT))
    t = g("Add", a, b)
    y = g("Sub", one, x)
    log_x, log_y, xy = g("Log", x), g("Log", y), g("Mul", x, y)
    ab = g("Mul", a, b)
    power = g("Add", g("Mul", a, log_x), g("Mul", b, log_y))
    first = g("Div", g("Sub", b, g("Mul", t, x)), ab)
    second = g("Sub", g("Add", b, one), g("Mul", g("Add", t, g.double(2.0)), x))
    ratio = g("Div", g("Mul", t, g("Add", t, one)), g("Mul", ab, g("Add", g("Add", ab, t), one)))
    second = g("Mul", g("Mul", xy, ratio), second)
    density = g("Exp", g("Min", g("Sub", power, _log_beta(g, a, b, t)), g.double(_LARGEST_LOG)))
    below = g("Mul", density, g("Add", first, second))
    whole = g("Add", _peizer_pratt(g, a, b, x, log_x, log_y, xy), g("Cast", below, to=TensorProto.FLOAT))
    least = 0.5 - _PHI_SLOPE
    return g("Min", g("Max", whole, g.single(least)), g.single(1 - least))


def _log_beta(g: Nodes, a: str, b: str, t: str) -> str:
    """log B(a, b), t = a + b: Stirling's series 8 further on, within 1e-8; columns."""
    terms = 8
    both = g("Concat", a, b, t, axis=1)
    rising = g.double(np.arange(float(terms)))
    logs = g("Log", g("Concat", *(g("Add", x, rising) for x in (a, b, t)), axis=1))
    below = g("MatMul", logs, g.double(np.repeat(np.diag([1.0, 1.0, -1.0]), terms, axis=0)))
    far = g("Add", both, g.double(float(terms)))
    inverse = g("Div", g.double(1.0), far)
    series = g(
        "Mul", inverse, g("Sub", g.double(1 / 12), g("Mul", g("Mul", inverse, inverse), g.double(1 / 360)))
    )
    main = g("Sub", g("Mul", g("Sub", far, g.double(0.5)), g("Log", far)), far)
    signed = g("Mul", g("Add", main, series), g.double([1.0, 1.0, -1.0]))
    total = g("MatMul", g("Sub", signed, below), g.double(np.ones((3, 1))))
    return g("Add", total, g.double(0.5 * math.log(2 * math.pi)))


def _peizer_pratt(g: Nodes, a: str, b: str, x: str, log_x: str, log_y: str, xy: str) -> str:
    """I_x(a + 2, b + 2), float32, by Peizer and Pratt (1968): Phi of a signed root of a deviance."""
    one = g.double(1.0)
    wins, losses = g("Add", a, g.double(1.5)), g("Add", b, g.double(1.5))
    n = g("Add", wins, losses)
    small = g.double(0.02)
    over_a, over_b = (g("Div", small, g("Add", z, g.double(0.5))) for z in (wins, losses))
    over_n = g("Div", small, g("Add", n, one))
    start = g("Add", g("Add", g("Add", wins, g.double(1 / 6)), over_a), g("Mul", over_n, g.double(0.5)))
    slope = g("Add", g("Add", g("Add", n, g.double(1 / 3)), g("Add", over_a, over_b)), over_n)
    d = g("Sub", start, g("Mul", slope, x))
    apart = g("Sub", wins, g("Mul", n, x))
    log_x = g("Sub", g("Log", g("Div", wins, n)), log_x)
    log_y = g("Sub", g("Log", g("Div", losses, n)), log_y)
    deviance = g("Add", g("Mul", wins, log_x), g("Mul", losses, log_y))
    blunt = g.double(_BLUNT)
    near = g("Div", blunt, g("Mul", g("Add", n, n), xy))
    deviance = g("Add", g("Max", deviance, g.double(0.0)), near)
    factor = g("Div", one, g("Add", one, g("Div", g.double(1 / 6), n)))  # 2 / (1 + 1 / 6 n), over 2 for Erf
    ratio = g("Div", g("Mul", deviance, factor), g("Add", g("Mul", apart, apart), blunt))
    z = g("Cast", g("Mul", d, g("Sqrt", ratio)), to=TensorProto.FLOAT)
    return g("Sub", g.single(0.5), g("Mul", g("Erf", z), g.single(0.5)))


def _steps(g: Nodes, t0: str, s: str, total: str, batch: int | None) -> tuple[str, str]:
    """Best batch beyond the small ones for a threshold t0, or the given one, and the step s_k; columns."""
    if batch is None:
        return best_batch(g, t0, s, total, least=_MOST + 1.0)
    k = g("Add", g("Mul", t0, g.double(0.0)), g.double(float(batch)))
    return k, g("Mul", s, g("Sqrt", g("Div", k, g("Add", k, total))))


def _few(
    g: Nodes, c: str, low: str, r2: str, sign: str, horizon: float, batch: int | None
) -> tuple[str, str, str]:
    """The best value a rollout of up to 8 rollouts, its batch, and the value of each batch."""
    batches = range(1, _MOST + 1) if batch is None else [min(batch, _MOST)]
    outcomes = [(k, w) for k in batches for w in range(k + 1)]
    ks, ws = (np.array(x, dtype=float) for x in zip(*outcomes, strict=True))
    alpha, beta = g("Unsqueeze", "alpha", g.whole(1)), g("Unsqueeze", "beta", g.whole(1))
    total = g("Add", alpha, beta)
    later = g("Add", total, g.double(ks))
    share = g("Div", g("Add", alpha, g.double(ws)), later)
    move = g("Add", share, low)
    if horizon != 0:
        theta = g("Sqrt", g("Add", _variance(g, share, later, horizon), r2))
        z = g("Clip", g("Div", move, theta), g.scalar(-_FURTHEST), g.scalar(_FURTHEST))
        z = g("Cast", z, to=TensorProto.FLOAT)
        below = g(
            "Mul", g("Add", g("Erf", g("Mul", z, g.single(math.sqrt(0.5)))), g.single(1.0)), g.single(0.5)
        )
        density = g(
            "Mul", g("Exp", g("Mul", g("Mul", z, z), g.single(-0.5))), g.single(1 / math.sqrt(2 * math.pi))
        )
        gain = g("Cast", g("Add", g("Mul", z, below), density), to=TensorProto.DOUBLE)
        move = g("Mul", theta, gain)
    lead = g("Max", g("Mul", sign, g("Sub", move, c)), g.double(0.0))

    rising = g.double(np.arange(float(_MOST)))
    logs = g("Log", g("Concat", *(g("Add", x, rising) for x in (alpha, beta, total)), axis=1))
    odds = g(
        "Exp", g("Add", g("MatMul", logs, g.double(_rising_terms(outcomes))), g.double(_log_ways(outcomes)))
    )
    a_rollout = np.array(
        [[(1 / k if batch is None else 1.0) * (k == j) for j in batches] for k, _ in outcomes]
    )
    values = g("MatMul", g("Mul", odds, lead), g.double(a_rollout))
    if batch is None:
        allowed = g("LessOrEqual", g.double(np.array(batches, dtype=float)), "remaining")
        values = g("Where", allowed, values, g.double(0.0))
    at = g("Cast", g("ArgMax", values, axis=1, keepdims=1), to=TensorProto.DOUBLE)
    return g("ReduceMax", values, g.whole(1), keepdims=1), g("Add", at, g.double(float(batches[0]))), values


def _rising_terms(outcomes: list[tuple[int, int]]) -> Floats:
    """Which logs of alpha + j, beta + j, alpha + beta + j make up log P(w | k), without binomials."""
    out = np.zeros((3 * _MOST, len(outcomes)))
    for i, (k, w) in enumerate(outcomes):
        out[:w, i] = 1
        out[_MOST : _MOST + k - w, i] = 1
        out[2 * _MOST : 2 * _MOST + k, i] = -1
    return out


def _log_ways(outcomes: list[tuple[int, int]]) -> Floats:
    return np.log([[float(math.comb(k, w)) for k, w in outcomes]])


def _run(g: Nodes, t0: str, k: str, share: str, total: str, sign: str) -> tuple[str, ...]:
    """The features from `large_batch` on; columns."""
    one = g.double(1.0)
    other = g("Sub", one, share)
    wins = g("Greater", sign, g.double(0.0))
    reach, odds = g("Where", wins, other, share), g("Where", wins, share, other)
    far = g("Abs", t0)
    # w wins alone move the mean by (1 - p) w / (total + w), losses by p w / (total + w).
    run = g("Div", g("Mul", total, far), g("Max", g("Sub", reach, far), g.double(1e-12)))
    many = g("Max", k, one)
    left = g("Clip", g("Log", g("Div", g("Max", "remaining", one), many)), g.scalar(0.0), g.scalar(3.0))
    return (g("Log", many), g("Min", run, g.double(40.0)), g("Min", total, g.double(60.0)), odds, left)
