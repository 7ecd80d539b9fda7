"""VOC of one look at one leaf, as a one-dimensional integral over the curve of its action; floor 2.

After the look the leaf's posterior mean is y ~ N(mu, s^2); what it will be when the later decisions fall is
x = y + sigma t, so x ~ N(mu, tau^2), tau^2 = s^2 + sigma^2. With the curve D (see `rest_of_action`) the
action gains g(y) = E D(y + sigma t) on its best rival. g is convex and increasing and crosses 0 at most
once, at y0. Given x, y is normal too, so the outcome y integrates in closed form:

    action not best:  VOC = E[D(x); y > y0]  = integral D(x) phi_tau(x - mu) Phi(a(x)) dx
    action best:      VOC = -E[D(x); y < y0] + rise
    a(x) = (mu + (s / tau)^2 (x - mu) - y0) / (s sigma / tau)

An error e in y0 shifts the VOC only in second order. Where s is small against sigma, D's signs cancel and

    VOC = integral beyond y0 of g'(y) P(beyond y) dy,    g'(y) = E F(y + sigma t)

is used instead, all positive. `rise` = E V_after - V_now >= 0 is 0 for an infinite horizon; at a finite one
the leaf ends with more rollouts than it would have had, tau > rho, and

    rise = integral (S(mu) - S(x)) (Phi((x - mu) / rho) - Phi((x - mu) / tau)) dx,    S = 1 - F.
"""

from __future__ import annotations

import math
from typing import NamedTuple

import numpy as np

from distill.exact.action_grid import NODES, N
from distill.exact.rest_of_action import Nodes, Rest, gather, tail_at, value_at
from distill.numerics import compiled, gain, gauss_legendre, norm_cdf, norm_pdf

__all__ = ["Worth", "rise", "worth"]

_INV_SQRT_2PI = 0.3989422804014327
_FINE = 5.5  # longest piece, in standard deviations of the kernel on it
_FALL = 44.0  # a piece's half times the slope of log density at its middle is at most a quarter: 1e-15
_NARROW = 0.05  # s / sigma below which the all-positive form is used
_STEP = 1e-14  # sigma / tau below which the outcome leaves no doubt
_FAR = 76.0  # twice the log of what is cut off a normal tail, of the tail itself
_SLOPES = 12  # g' over a stretch of at most 0.9 sigma is a polynomial of degree 11 to 1e-13
_SLOPE_NODES, _SLOPE_WEIGHTS = gauss_legendre(_SLOPES)
_TO_SLOPES = np.linalg.inv(np.polynomial.chebyshev.chebvander(_SLOPE_NODES, _SLOPES - 1))
_OUTCOMES = 16
_OUTCOME_NODES, _OUTCOME_WEIGHTS = gauss_legendre(_OUTCOMES)


class Worth(NamedTuple):
    """VOC without the rise, sum of absolute terms behind it, P(y beyond y0), dVOC/ds^2 at fixed tau, y0."""

    voc: float
    terms: float
    beyond: float
    slope: float
    y0: float


@compiled
def worth(rest: Rest, nodes: Nodes, best: bool, mu: float, s: float, sigma: float, tau: float) -> Worth:
    """VOC of a look with spreads s, sigma, tau; without the `rise` where the action is best."""
    if rest.kappa <= 0.0 and best:  # no outcome changes the choice
        return Worth(0.0, 0.0, 0.0, 0.0, -math.inf)
    if sigma < _STEP * tau:
        sigma = 0.0
    if rest.kappa <= 0.0:
        y0 = -math.inf
        steep = 0.0
    else:
        y0, steep = _crossing(rest, nodes, s, sigma)
    side = -1.0 if best else 1.0
    z = side * (y0 - mu) / s
    beyond = norm_cdf(-z)
    slope = 0.5 * steep * norm_pdf(z) / s
    # The outcome farthest beyond y0 that matters.
    far = mu + side * s * math.sqrt(_FAR)
    if z > 0.0:
        far = y0 + side * s * _FAR / (z + math.sqrt(z * z + _FAR))
    if s < _NARROW * sigma and y0 > -math.inf:
        voc = _positive(rest, nodes, side, mu, s, sigma, y0, far)
        return Worth(voc, voc, beyond, slope, y0)
    voc, terms = _one_sum(rest, nodes, side, mu, s, sigma, tau, y0, far)
    return Worth(max(voc, 0.0), terms, beyond, slope, y0)


@compiled
def _window(rest: Rest) -> float:
    """Standard deviations of sigma that matter: more where F itself is steep and tiny."""
    return 13.5 if rest.from_left else 8.7


@compiled
def _crossing(rest: Rest, nodes: Nodes, s: float, sigma: float) -> tuple[float, float]:
    """(y0, g'(y0)) with g(y0) = 0, to what can matter.

    Newton on log(g + kappa), which is concave and increasing: after at most one step the iterates climb
    to y0 from the left. A bracket catches a first step into a tail that underflows.
    """
    high = _first_gain(rest)
    low = -math.inf
    y = high
    steep = 0.0
    close = 1e-5 * min(s, sigma) if sigma > 0.0 else 1e-9 * s
    for _ in range(100):
        g, steep = _smoothed(rest, nodes, y, sigma)
        if g >= 0.0:
            high = min(high, y)
        else:
            low = max(low, y)
        total = g + rest.kappa
        if total <= 0.0 or steep <= 0.0:
            if y == high:  # F vanishes to rounding where D >= 0: the curve steps up here
                break
            y = 0.5 * (low + high)
            continue
        step = total / steep * math.log1p(g / rest.kappa)
        y -= step
        if abs(step) <= close:
            break
        if y <= low or y > high:
            y = 0.5 * (low + high)
            if y in (low, high):
                break
    return y, steep


@compiled
def _first_gain(rest: Rest) -> float:
    """A point where D >= 0, hence g >= 0, not far right of the first such."""
    n = len(rest.edges) - 1
    for p in range(n):
        half = 0.5 * (rest.edges[p + 1] - rest.edges[p])
        middle = 0.5 * (rest.edges[p + 1] + rest.edges[p])
        for j in range(N):
            x = middle + half * NODES[j]
            D = rest.area[p, j] - rest.kappa if rest.from_left else rest.area[p, j] + (x - rest.c)
            if D >= 0.0:
                return float(x)
    last = float(rest.edges[n])
    return max(last, last + (rest.kappa - rest.total)) if rest.from_left else max(last, rest.c)


@compiled
def _smoothed(rest: Rest, nodes: Nodes, y: float, sigma: float) -> tuple[float, float]:
    """g(y) = E D(y + sigma t) and its slope."""
    if sigma == 0.0:
        p = int(np.searchsorted(rest.edges, y, side="right")) - 1
        return value_at(rest, p, y)
    reach = _window(rest) * sigma
    fine = _FINE * sigma
    g = 0.0
    slope = 0.0
    for q in range(gather(rest, nodes, y - reach, y + reach, y - reach, y + reach, fine, fine, False)):
        t = (nodes.x[q] - y) / sigma
        kernel = nodes.w[q] * math.exp(-0.5 * t * t)
        g += kernel * nodes.D[q]
        slope += kernel * nodes.F[q]
    scale = _INV_SQRT_2PI / sigma
    return g * scale, slope * scale


@compiled
def _one_sum(
    rest: Rest,
    nodes: Nodes,
    side: float,
    mu: float,
    s: float,
    sigma: float,
    tau: float,
    y0: float,
    far: float,
) -> tuple[float, float]:
    """side E[D(x); y beyond y0], and the sum of its absolute terms."""
    reach = _window(rest) * sigma
    near = max(y0, mu - s * math.sqrt(_FAR)) if side > 0.0 else min(y0, mu + s * math.sqrt(_FAR))
    a = near - reach if side > 0.0 else far - reach
    b = far + reach if side > 0.0 else near + reach
    if y0 == -math.inf:
        fine_a = a
        fine_b = a
    else:
        # Phi(a(x)) turns at `turn`; where it is not 1 its product with the density has the scale of sigma.
        width = sigma * (tau / s)
        turn = mu + (tau / s) * (tau / s) * (y0 - mu)
        tail = 9.0 + max(side * (y0 - mu), 0.0) / s * (sigma / tau)
        fine_a = turn - width * (tail if side > 0.0 else 9.0)
        fine_b = turn + width * (9.0 if side > 0.0 else tail)
    total = 0.0
    terms = 0.0
    lean = (s / tau) * (s / tau)
    # Far out the density falls like exp(-z t): a piece spans no more of it than 16 nodes hold.
    z = min(max(side * (y0 - mu) / tau, 0.0), 40.0)  # beyond, nothing is left
    coarse = tau * min(_FINE, _FALL / (z + math.sqrt(z * z + _FALL)))
    for q in range(gather(rest, nodes, a, b, fine_a, fine_b, min(_FINE * sigma, coarse), coarse, False)):
        u = nodes.x[q] - mu
        t = u / tau
        ahead = side * (lean * u + (mu - y0))
        if sigma > 0.0:
            share = norm_cdf(ahead / (s * (sigma / tau)))
        else:
            share = 1.0 if ahead > 0.0 else 0.0
        one = nodes.w[q] * nodes.D[q] * (math.exp(-0.5 * t * t) * share)
        total += one
        terms += abs(one)
    scale = _INV_SQRT_2PI / tau
    return side * total * scale, terms * scale


@compiled
def _positive(
    rest: Rest, nodes: Nodes, side: float, mu: float, s: float, sigma: float, y0: float, far: float
) -> float:
    """Integral from y0 to `far` of g'(y) P(outcome beyond y); g' by a polynomial in y."""
    reach = _window(rest) * sigma
    half = 0.5 * (far - y0)
    middle = 0.5 * (far + y0)
    fine = _FINE * sigma
    a = min(y0, far) - reach
    b = max(y0, far) + reach
    slopes = np.zeros(_SLOPES)
    count = gather(rest, nodes, a, b, a, b, fine, fine, False)
    for k in range(_SLOPES):
        y = middle + half * _SLOPE_NODES[k]
        for q in range(count):
            t = (nodes.x[q] - y) / sigma
            slopes[k] += nodes.w[q] * math.exp(-0.5 * t * t) * nodes.F[q]
    coefficients = np.zeros(_SLOPES)
    for k in range(_SLOPES):
        for j in range(_SLOPES):
            coefficients[k] += _TO_SLOPES[k, j] * slopes[j]
    # y0 lies within 38 s of mu unless the two values are equal to rounding; then any split is within slack.
    pieces = int(min(max(2.0, math.ceil(abs(far - y0) / (4.5 * s))), 64.0))
    total = 0.0
    for piece in range(pieces):
        for j in range(_OUTCOMES):
            t = (2 * piece + 1 + _OUTCOME_NODES[j]) / pieces - 1.0
            before = t
            now = 1.0
            steep = 0.0
            for k in range(_SLOPES):
                steep += coefficients[k] * now
                before, now = now, 2.0 * t * now - before
            y = middle + half * t
            total += _OUTCOME_WEIGHTS[j] / pieces * steep * norm_cdf(-side * (y - mu) / s)
    return total * abs(half) * _INV_SQRT_2PI / sigma


@compiled
def rise(rest: Rest, nodes: Nodes, mu: float, rho: float, tau: float, steeper: float) -> tuple[float, float]:
    """E V_after - V_now of the leaf's own action, and the sum of the terms that its differences come from.

    steeper = 1 / rho - 1 / tau, taken without cancellation.
    """
    p = int(np.searchsorted(rest.edges, mu, side="right")) - 1
    _, F_mu = value_at(rest, p, mu)
    S_mu = tail_at(rest, p, mu)
    n = len(rest.edges) - 1
    low = rest.edges[0]
    high = rest.edges[n]
    total = 0.0
    if mu >= low:
        total += F_mu * _spread_gain(mu - low, rho, tau, steeper)
    if mu < high:
        total += S_mu * _spread_gain(high - mu, rho, tau, steeper)
    a = max(low, mu - 13.5 * tau)
    b = min(high, mu + 13.5 * tau)
    if not a < b:
        return total, total
    terms = total
    count = gather(rest, nodes, a, b, mu - 13.5 * rho, mu + 13.5 * rho, 4.0 * rho, _FINE * tau, True)
    for q in range(count):
        u = nodes.x[q] - mu
        mass = nodes.w[q] * _mass_between(abs(u), rho, tau, steeper)
        # The difference has the sign of -u, and so has the mass.
        up = F_mu - nodes.F[q] if F_mu < 0.5 else nodes.S[q] - S_mu
        total += mass * abs(up)
        terms += mass * (F_mu if F_mu < 0.5 else S_mu)
    return total, terms


@compiled
def _mass_between(u: float, rho: float, tau: float, steeper: float) -> float:
    """Phi(u / rho) - Phi(u / tau) for u >= 0, rho <= tau."""
    z = u / tau
    width = u * steeper
    if width * (1.0 + z) > 0.5:
        return norm_cdf(-z) - norm_cdf(-u / rho)
    total = 0.0
    for j in range(_SLOPES):
        total += 0.5 * _SLOPE_WEIGHTS[j] * norm_pdf(z + 0.5 * width * (1.0 + _SLOPE_NODES[j]))
    return width * total


@compiled
def _spread_gain(u: float, rho: float, tau: float, steeper: float) -> float:
    """tau f(-u / tau) - rho f(-u / rho) = integral of phi(u / t) dt from rho to tau."""
    if (tau - rho) * (1.0 + u / tau) > 0.5 * rho:
        return tau * gain(-u / tau) - rho * gain(-u / rho)
    # In w = 1 / t: integral of phi(u w) / w^2 dw over a width of `steeper`.
    total = 0.0
    for j in range(_SLOPES):
        w = 1.0 / tau + 0.5 * steeper * (1.0 + _SLOPE_NODES[j])
        total += 0.5 * _SLOPE_WEIGHTS[j] * norm_pdf(u * w) / (w * w)
    return steeper * total
