"""The features of the Gaussian leaf table at any horizon, one for all calls or each call's own; floor 4.

As `features` says it, with the horizon h a number of the call: 0, finite and infinite in one graph.

*Shares.* After h rollouts the mean M_h of a leaf has variance v / (1 + r / h), r = n / v: 0 at h = 0 and v at
infinity, and never 0 / 0, as r is above 0 and no longer infinite here. The table holds M_h.

*Siblings below the table.* For small h the table is narrow, and the siblings of an action's best leaf may
all lie below it. Their maximum is then that of the largest mean, and varies as it.

*Knowing better.* The action that is best also gains by being known better, by

    theta_k f(-d / theta_k) - theta_0 f(-d / theta_0) = integral of phi(d / theta) from theta_0 to theta_k

with d = m - mu, theta_0 and theta_k before and after k more rollouts; f(-x) = phi(x) / b(x) for x >= 0. The
smaller of its two bounds phi(d / theta_k) theta_k / b and phi(d / theta_k) (theta_k - theta_0) stands for it:
each is exact at one end, h = 0 and h to infinity. The siblings' maximum has a heavier right tail than a
normal of its moments: the leaf that leads its action gains at least what it gains beside any one sibling,
with theta^2 of these two alone. The larger of all this and the value of a change of choice is the start. At
h = 0 it is the static start, exact but for the fit of f; at infinity the dynamic one.

*No leaf is taken for one of another horizon.* Where knowing better decides, the value of a change of choice
may be too small by any factor; at infinity leaves that look the same have that value only, and a learner
would lend their ratios to the former. So the threshold is then the one that the start stands for, the z <= 0
of phi(z) = start / unit. A leaf whose siblings alone beat the rival changes no choice; its start is 0, and no
learner spends itself on its ratio.
"""

from __future__ import annotations

import math
from typing import Final

import onnx

from distill.errors import InputError
from distill.feature_nodes import LARGE, TINY, Start, loss_bottom, moments, normal_table, threshold_shift
from distill.onnx_nodes import Nodes
from distill.scorer_inputs import ANY_BATCH, ANY_HORIZON, BOTH_VARY, LEAF_TABLE, VARIES

__all__ = ["FEATURE_NAMES", "build_graph"]

FEATURE_NAMES: Final = (
    "threshold",  # t0 / s_k, cut at +-40: how far the leaf must rise to change the choice, or fall; see above
    "sibling_help",  # -q(y) up to a constant factor: what the siblings take off the threshold, in theta_0
    "step",  # s_k / theta_k
    "above_siblings",  # d / theta_k, cut at +-40
    "lead",  # of the action over its best rival, in theta_k, cut at +-40
    "known",  # theta_0 / theta_k: 0 at h = 0, 1 where h is infinite
)

_SURE: Final = 0.999  # mean of R over the table, from which the siblings lie below it


def build_graph(
    *, points: int = 16, batch: int | str | None = None, horizon: float | None = None
) -> onnx.ModelProto:
    """The feature graph of the Gaussian leaf table and a horizon, one tree a call.

    Inputs and outputs as for `features.build_graph`; with horizon None an input of its own brings it (double,
    scalar, from 0 to infinity). points : cells of the table. batch : of the value that is learned; None is
    the rate, VARIES that of each call, see `features.build_graph`. Raises InputError where both come with the
    call.
    """
    if horizon is None and batch == VARIES:
        raise InputError("horizon and batch", BOTH_VARY)
    g = Nodes("f")
    if horizon is None:
        h = g("Clip", "horizon", g.scalar(TINY), g.scalar(LARGE))
    else:
        h = g.double(min(max(horizon, TINY), LARGE))
    kind = ANY_HORIZON if horizon is None else ANY_BATCH if batch == VARIES else LEAF_TABLE
    m = g("Add", g("Mul", "gain", "mean"), "offset")
    v = g("Max", g("Mul", "var", g("Mul", "gain", "gain")), g.double(TINY))
    noise = g("Div", "noise_var", "var", out="noise_ratio")
    action = g("GreaterOrEqual", "action", g.whole(0))
    g("And", action, g("Greater", "noise_ratio", g.double(0.0)), out="valid")
    known = g.at_least(_learned(g, v, noise, h), TINY)
    (low, high, top), joint, rest = normal_table(g, m, g("Sqrt", known), points, tops=True)
    value, others, spread2 = moments(g, low, high, joint, rest, points)

    # The best other action; of the best action, the siblings that lie below the table.
    best = g("Equal", "action", g("Gather", "action", g("ArgMax", value, axis=1, keepdims=0)))
    second = g("ReduceMax", g("Where", best, g.double(-LARGE), value))
    rival = g("Where", best, second, g("ReduceMax", value))
    below = g("GreaterOrEqual", g("ReduceL1", rest, g.whole(1), keepdims=0), g.single(_SURE * points))
    sibling = g("Where", g("And", best, g("Greater", top, m)), m, g.double(-LARGE))
    below = g("And", best, below)
    largest = g("ReduceMax", sibling)
    own_spread = g("ReduceMax", g("Where", g("Equal", sibling, largest), known, g.double(0.0)))
    others = g("Where", below, largest, others)
    spread2 = g("Where", below, own_spread, spread2)

    theta2 = g("Add", spread2, known)
    theta = g("Sqrt", theta2)
    y = g("Div", g("Sub", rival, others), theta)
    shift, slope, help_ = threshold_shift(g, y, theta)
    above = g("Sub", m, others)
    alone = g("LessOrEqual", y, g.double(0.0))
    t0 = g("Where", alone, g("Sub", others, m), g("Add", g("Sub", rival, m), shift))
    start = Start(g, t0, g("Sqrt", v), noise, batch)

    later = g("Max", _learned(g, v, noise, g("Add", start.k, h)), known)
    theta_k = g("Sqrt", g("Add", spread2, later))
    above = start.cut(g("Div", above, theta_k))
    lead = start.cut(g("Div", g("Sub", value, rival), theta_k))
    beside = _leader_known_better(g, start, best, top, m, sibling, known, later)
    own = g("Max", _known_better(g, above, theta, theta_k), beside)
    if batch is None:
        own = g("Div", own, g.at_least(start.k, 1.0))
    own = g("Where", g("GreaterOrEqual", lead, g.double(0.0)), own, g.double(0.0))
    change = start.value(g("Where", alone, g.double(0.0), slope))
    z = g("Where", g("Greater", own, change), _stands_for(g, own, start.unit), start.z)
    columns = (
        z, help_, g("Div", start.s_k, theta_k), above, lead, g("Div", theta, theta_k),
    )  # fmt: skip
    return start.model(g("Max", change, own), columns, FEATURE_NAMES, kind)


def _learned(g: Nodes, v: str, noise: str, h: str) -> str:
    """Variance of M_h: v h / (r + h); shape of v, or of h."""
    return g("Mul", v, g("Div", h, g("Add", noise, h)))


def _known_better(g: Nodes, above: str, theta: str, theta_k: str) -> str:
    """What the best action gains by being known better; shape (1, n)."""
    bottom = loss_bottom(g, above)
    rise = g("Mul", g("Sub", theta_k, theta), g.double(1 / math.sqrt(2 * math.pi)))
    density = g("Exp", g("Mul", g("Mul", above, above), g.double(-0.5)))
    return g("Mul", density, g("Min", g("Div", theta_k, bottom), rise))


def _leader_known_better(
    g: Nodes, start: Start, best: str, top: str, m: str, sibling: str, known: str, later: str
) -> str:
    """The most that the leaf leading the best action gains beside one sibling; 0 for others; shape (1, n)."""
    leads, zero = g("And", best, g("Equal", m, top)), g.double(0.0)
    theta, theta_k = (
        g("Sqrt", g("Add", known, g("ReduceMax", g("Where", leads, x, zero)))) for x in (known, later)
    )
    highest = g("ReduceMax", g("Where", leads, m, g.double(-LARGE)))
    apart = start.cut(g("Div", g("Sub", highest, sibling), theta_k))
    return g("Where", leads, g("ReduceMax", _known_better(g, apart, theta, theta_k)), zero)


def _stands_for(g: Nodes, own: str, unit: str) -> str:
    """The z <= 0 with phi(z) = own / unit, 0 where that is beyond phi(0); shape (1, n)."""
    share = g("Mul", g("Div", own, g.at_least(unit, TINY)), g.double(math.sqrt(2 * math.pi)))
    log_share = g("Log", g("Clip", share, g.scalar(TINY), g.scalar(1.0)))
    return g("Sub", g.double(0.0), g("Sqrt", g("Mul", log_share, g.double(-2.0))))
