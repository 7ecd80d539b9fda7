"""VOC of any batch at one leaf of a flat tree: spreads, horizon and error bound put together; floor 2."""

from __future__ import annotations

import math
from typing import NamedTuple

from distill.exact.one_look import rise, worth
from distill.exact.rest_of_action import Nodes, Rest
from distill.numerics import compiled, gain, norm_cdf, norm_pdf

__all__ = ["Looks", "later_sd", "voc_at"]

_EPS = 2.220446049250313e-16
_QUADRATURE = 4e-15  # relative; covers what 16-node panels leave, as held against 80-bit arithmetic in tests
_CUT_OFF = 4e-36  # of the unit: what normal tails beyond 12.5 standard deviations may hold


class Looks(NamedTuple):
    """What prices any batch at one leaf of variance v and rollout noise n, both in the leaf's own unit.

    gain : the leaf's gain over the tree's unit. h : horizon. best : whether its action is the best now.
    alone : nothing else in the action, so D(x) = x - c. rivals : whether another action exists.
    rho : spread of the leaf's later mean now. slack : bound on the error of D.
    """

    rest: Rest
    nodes: Nodes
    gain: float
    v: float
    n: float
    h: float
    mu: float
    rho: float
    c: float
    slack: float
    best: bool
    alone: bool
    rivals: bool


@compiled
def later_sd(gain_: float, v: float, n: float, h: float) -> float:
    """Spread of the leaf's posterior mean after h rollouts, at the root."""
    return gain_ * (v / math.sqrt(v + n / h))


@compiled
def voc_at(looks: Looks, k: float) -> tuple[float, float, float, float]:
    """VOC of k rollouts, its error bound, k dVOC/dk (infinite horizon only), and the crossing."""
    v = looks.v
    n = looks.n
    s = later_sd(looks.gain, v, n, k)
    left = v / (1.0 + k * (v / n))  # variance after the look
    if s == 0.0:
        return 0.0, 0.0, 0.0, looks.c
    growth = s * s / (1.0 + k * (v / n))  # k ds^2 / dk
    if looks.alone:
        if not looks.rivals:
            return 0.0, 0.0, 0.0, looks.c
        z = abs(looks.c - looks.mu) / s
        voc = s * gain(-z)
        error = voc * (3.0 + z * z) * 12.0 * _EPS + norm_cdf(-z) * looks.slack
        return voc, error, 0.5 * growth * norm_pdf(z) / s, looks.c
    if looks.h == math.inf:
        sigma = looks.gain * math.sqrt(left)
        tau = looks.rho
    else:
        sigma = looks.gain * (left / math.sqrt(left + n / looks.h))
        tau = math.hypot(s, sigma)
    voc = 0.0
    error = 0.0
    climb = 0.0
    y0 = looks.c
    if looks.rivals:
        one = worth(looks.rest, looks.nodes, looks.best, looks.mu, s, sigma, tau)
        voc = one.voc
        if voc > 0.0:
            error = one.beyond * (looks.slack + looks.rest.loose[1]) + 1.5 * _EPS * one.terms + _CUT_OFF
            error += (_relative(voc, s) + looks.rest.loose[0]) * voc
        elif (
            looks.best and looks.rest.kappa <= 0.0
        ):  # kept at 0 by a rest that beats the rival even without the leaf
            error = max(0.0, looks.slack + looks.rest.kappa)
        else:
            error = _CUT_OFF
        climb = one.slope * growth
        y0 = one.y0
    if looks.h < math.inf and (looks.best or not looks.rivals):
        tau = later_sd(looks.gain, v, n, looks.h + k)
        root_now = math.sqrt(v + n / looks.h)
        root_then = math.sqrt(v + n / (looks.h + k))
        steeper = 1e290  # of a spread now that underflows
        if root_now < math.inf:
            steeper = n / looks.h * (k / (looks.h + k)) / (root_now + root_then) / (looks.gain * v)
        more, terms = rise(looks.rest, looks.nodes, looks.mu, looks.rho, tau, steeper)
        voc += more
        off = 2.0 * _EPS + max(looks.rest.loose[0], looks.rest.loose[2])
        error += _relative(more, tau) * more + off * terms + _CUT_OFF
        error += _steepness(more, tau) * looks.slack * more
    return voc, error, climb, y0


@compiled
def _steepness(value: float, spread: float) -> float:
    """Relative change of a tail integral for each unit that its start is moved: about z / spread."""
    if value <= 0.0:
        return 0.0
    return (1.0 + math.sqrt(2.0 * max(0.0, math.log(spread) - math.log(value)))) / spread


@compiled
def _relative(value: float, spread: float) -> float:
    """Relative error of a tail integral: quadrature, and the rounding of spreads and distances.

    A tail value f(-z) moves by about z^2 times the relative error of z, and z^2 < 2 log(spread / value).
    """
    return _QUADRATURE + 8.0 * _EPS * max(0.0, math.log(spread) - math.log(value)) if value > 0.0 else 0.0
