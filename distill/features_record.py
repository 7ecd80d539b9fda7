"""The features as one ONNX graph over record rows: chance nodes and correlation; floor 4.

A row says where a candidate's move makes another root action the best (`schema.RECORD_UNITS`); k rollouts
move by rho Z, rho^2 = k / (k + noise_ratio). The learner starts from

    slope rho f(-|crossing| / rho) / k    at its best k, plus the same of the other crossing,

right in its exponent however small it is, and sees how far the difference of the two actions is from a
straight line: its bend, its slope at present over that at the crossing, and the share of the largest slope.
"""

from __future__ import annotations

from typing import Final

import onnx

from distill.feature_nodes import TINY, best_batch, finished, loss
from distill.onnx_nodes import Nodes
from distill.scorer_inputs import RECORD

__all__ = ["FEATURE_NAMES", "build_graph"]

FEATURE_NAMES: Final = (
    "threshold",  # crossing / rho, cut at +-40
    "bend",  # of the difference at the crossing, a move of rho
    "slope_now",  # log(now), cut at 1e-6 and 1e6
    "slope_share",  # log(slope / spread), cut at 1e-6
    "resolved",  # rho: share of the leaf's standard deviation that the best batch reveals
    "other_side",  # share of the start value that the other crossing makes up
)
_BEND_LIMIT: Final = 30.0
_LEAST_SHARE, _MOST_SHARE = 1e-6, 1e6


def build_graph(*, batch: int | None = None) -> onnx.ModelProto:
    """The feature graph of record rows.

    Inputs, shape (n,): the columns of `schema.RECORD_UNITS` (double); remaining (double, scalar). Outputs as
    in FeatureMatrix. batch : of the value that is learned; None is the rate.
    """
    g = Nodes("f")
    row = {name: g("Unsqueeze", name, g.whole(0)) for name in RECORD.floats if name != "cost"}
    ratio = g("Max", row["noise_ratio"], g.double(0.0))
    one = g.double(1.0)
    if batch is None:
        k, rho = best_batch(g, row["crossing"], one, ratio)
    else:
        k = g("Add", g("Mul", row["crossing"], g.double(0.0)), g.double(float(batch)))
        rho = g("Sqrt", g("Div", k, g("Add", k, ratio)))
    floor = g("Max", rho, g.double(TINY))
    z, z_other = (_cut(g, g("Div", row[name], floor), 40.0) for name in ("crossing", "other_crossing"))
    a_rollout = rho if batch is not None else g("Div", rho, g("Max", k, one))
    unit = g("Mul", row["slope"], a_rollout)
    other = g("Mul", g("Mul", row["other_slope"], a_rollout), loss(g, z_other))
    start = g("Add", g("Mul", unit, loss(g, z)), other)

    share = g("Div", row["slope"], g("Max", row["spread"], g.double(TINY)))
    columns = (
        z,
        _cut(g, g("Mul", row["bend"], rho), _BEND_LIMIT),
        _log(g, row["now"]),
        _log(g, share),
        rho,
        g("Div", other, g("Max", start, g.double(TINY))),
    )
    valid = g("And", g("Greater", "noise_ratio", g.double(0.0)), g("GreaterOrEqual", "slope", g.double(0.0)))
    g("And", valid, g("GreaterOrEqual", "spread", g.double(0.0)), out="valid")
    rows = g("Concat", *columns, axis=0)
    return finished(g, RECORD, FEATURE_NAMES, rows, unit, start, g("Add", k, g.double(0.5)), "spread")


def _cut(g: Nodes, x: str, limit: float) -> str:
    return g("Clip", x, g.scalar(-limit), g.scalar(limit))


def _log(g: Nodes, x: str) -> str:
    return g("Log", g("Clip", x, g.scalar(_LEAST_SHARE), g.scalar(_MOST_SHARE)))
