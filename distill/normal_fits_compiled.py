"""The short fits of `distill.normal_fits` as compiled functions of one number; floor 2.

Same fits, same starts, same steps: each differs from its namesake by roundings alone. To be called from
compiled kernels.
"""

# mypy: allow-untyped-calls
from __future__ import annotations

import math
from typing import Final

from distill.kernels import compiled
from distill.normal_fits import CDF_FIT, FAR, GAIN_FIT, LEAST, LOG_ROOT_2PI, NEWTON_STEPS, START

__all__ = ["cdf_ratio", "gain_ratio", "inverse_gain", "norm_cdf", "norm_cdf_pdf", "norm_pdf", "unit_gain"]

# Rows p, q, a, b of the sums of (a + b t) / (t^2 + p t + q).
_CP, _CQ, _CA, _CB = (tuple(row) for row in CDF_FIT.tolist())
_GP, _GQ, _GA, _GB = (tuple(row) for row in GAIN_FIT.tolist())
_A, _B, _C = (float(x) for x in START)
_STEPS: Final = int(NEWTON_STEPS)


@compiled
def cdf_ratio(t: float) -> float:
    """Phi(-t) / phi(t), t >= 0."""
    total: float = (_CA[0] + _CB[0] * t) / ((t + _CP[0]) * t + _CQ[0])
    total += (_CA[1] + _CB[1] * t) / ((t + _CP[1]) * t + _CQ[1])
    total += (_CA[2] + _CB[2] * t) / ((t + _CP[2]) * t + _CQ[2])
    return total


@compiled
def gain_ratio(t: float) -> float:
    """f(-t) / phi(t), t >= 0."""
    total: float = (_GA[0] + _GB[0] * t) / ((t + _GP[0]) * t + _GQ[0])
    total += (_GA[1] + _GB[1] * t) / ((t + _GP[1]) * t + _GQ[1])
    total += (_GA[2] + _GB[2] * t) / ((t + _GP[2]) * t + _GQ[2])
    return total


@compiled
def norm_pdf(x: float) -> float:
    """Density of the standard normal."""
    t = min(abs(x), FAR)
    return math.exp(-0.5 * (t * t) - LOG_ROOT_2PI)


@compiled
def norm_cdf_pdf(x: float) -> tuple[float, float]:
    """Phi(x) and phi(x)."""
    density = norm_pdf(x)
    tail = density * cdf_ratio(min(abs(x), FAR))
    return (1.0 - tail if x > 0 else tail), density


@compiled
def norm_cdf(x: float) -> float:
    """Phi(x).

    >>> round(norm_cdf(2.0), 6)
    0.97725
    """
    return norm_cdf_pdf(x)[0]


@compiled
def unit_gain(x: float) -> float:
    """f(x) = E max(x + Z, 0).

    >>> round(unit_gain(-1.0), 6)
    0.083315
    """
    return max(x, 0.0) + norm_pdf(x) * gain_ratio(min(abs(x), FAR))


@compiled
def inverse_gain(y: float) -> float:
    """x with f(x) = y, y >= 1e-300; smaller ones count as that.

    >>> round(unit_gain(inverse_gain(0.4)), 9)
    0.4
    """
    y = max(y, LEAST)
    v = -math.log(-math.expm1(-_B * y))
    x = y - _A * v / math.sqrt(v + _C)
    log_y = math.log(y)
    for _ in range(_STEPS):
        t = min(abs(x), FAR)
        g, m = max(gain_ratio(t), LEAST), cdf_ratio(t)
        if x < 0:
            log_f, slope = math.log(g) - 0.5 * t * t - LOG_ROOT_2PI, g / m
        else:
            p = norm_pdf(x)
            f = x + p * g
            log_f, slope = math.log(f), f / (1 - p * m)
        x = x - (log_f - log_y) * slope
    return x
