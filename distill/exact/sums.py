"""Sums and differences of independent node values by characteristic functions; floor 2.

    phi_X(w) = E exp(i w (X - E X)),   phi_(X + Y) = phi_X phi_Y,   phi_(-X) = conj phi_X,
    f(z) = (1 + 2 sum over m >= 1 of Re phi(m d) exp(-i m d (z - mean))) / L,   d = 2 pi / L

The last line is the trapezoid rule on the inversion integral: exact for a density within a window of length
L, apart from frequencies left out. Those are followed until every product has faded to 1e-13. Products
fade fast where one factor is smooth (a normal fades like exp(-w^2 sd^2 / 2)); where atoms or jumps meet
atoms or jumps, or scales differ too much, they do not, and the convolution by panels takes over.

Absolute errors are a few roundings; the far tails of a sum, below 1e-13 of its peak, are lost in them.
"""

from __future__ import annotations

import math
from collections.abc import Sequence

import numpy as np
from numpy.typing import NDArray

from distill.exact.convolution import convolved, convolved_with_normal
from distill.exact.distributions import REACH, Distribution, N, chebyshev, reflected, shifted
from distill.exact.panels import held, resolved
from distill.numerics import compiled, gauss_legendre
from distill.tree import Floats

__all__ = ["remainders", "total"]

Complex = NDArray[np.complex128]

FADED = 1e-13  # what is left out is below it, and so is what interpolation lets through
_MAX_PHASE = 11.0  # half a panel times the frequency: 16 nodes integrate that to 1e-12
_NEGLIGIBLE = 1e-11  # a part this narrow beside another only adds its mean, and its spread as an error
_MAX_PIECES = 64  # that a panel may be cut into
_BLOCK = 32  # frequencies between looks
_MAX_FREQUENCIES = 1024
_EARLIEST_DOUBT = 128  # frequencies before a spectrum may be given up as too slow
_ROUNDING = 4e-15  # of the window, Wasserstein-1
_T, _W = gauss_legendre(N)
_PANEL_PHASE = 12.0  # panel width times the frequency above which less than 1e-5 is left


def total(parts: Sequence[Distribution], sd: float) -> Distribution:
    """The distribution of the sum of the parts + sd Z, all independent, Z standard normal, sd >= 0."""
    if len(parts) == 1 and sd <= _NEGLIGIBLE * parts[0].spread:
        return parts[0]._replace(error=parts[0].error + sd)
    spectra = _Spectra(parts, np.ones(len(parts)), sd)
    found = spectra.sums_of([np.arange(len(parts) + 1)])
    if found is not None:
        return found[0]
    if len(parts) == 1:
        return convolved_with_normal(parts[0], sd)
    half = len(parts) // 2
    # The normal smooths one half, which then smooths the sum.
    return _sum(total(parts[:half], sd), total(parts[half:], 0.0))


def remainders(
    T: Distribution, parts: Sequence[Distribution], sd: float, whole: bool
) -> tuple[list[Distribution], Distribution | None]:
    """T - sd Z - (all parts but j), for every j; and, if `whole`, T - all parts (without the normal)."""
    n = len(parts)
    if n == 1 and sd <= _NEGLIGIBLE * T.spread:
        return [T._replace(error=T.error + sd)], _sum(T, reflected(parts[0])) if whole else None
    wanted = [np.delete(np.arange(n + 2), j + 1) for j in range(n)]  # T, parts, the normal
    if whole:
        wanted.append(np.arange(n + 1))
    found = _Spectra([T, *parts], np.array([1.0] + [-1.0] * n), sd).sums_of(wanted)
    if found is not None:
        return found[:n], found[n] if whole else None
    all_but = _halves(total([T], sd), list(parts))
    return all_but, _sum(T, reflected(total(parts, 0.0))) if whole else None


def _halves(T: Distribution, parts: list[Distribution]) -> list[Distribution]:
    """T - (all parts but j) by halving: each sum is used for every j on the other side."""
    if len(parts) == 1:
        return [T]
    left, right = parts[: len(parts) // 2], parts[len(parts) // 2 :]
    return [
        *_halves(_sum(T, reflected(total(right, 0.0))), left),
        *_halves(_sum(T, reflected(total(left, 0.0))), right),
    ]


def _sum(x: Distribution, y: Distribution) -> Distribution:
    """X + Y, whichever way works."""
    for sure, other in ((x, y), (y, x)):
        if len(sure.edges) == 1 or sure.spread <= _NEGLIGIBLE * other.spread:
            moved = shifted(other, sure.mean)
            width = sure.spread if len(sure.edges) > 1 else 0.0
            return moved._replace(error=moved.error + sure.error + width)
    found = _Spectra([x, y], np.ones(2), 0.0).sums_of([np.arange(2)])
    return convolved(x, y) if found is None else found[0]


class _Spectra:
    """Characteristic functions of several parts at common frequencies, as far as their products need.

    Parts count with a sign; a normal of mean 0 is the last row, after the parts.
    """

    def __init__(self, parts: Sequence[Distribution], signs: Floats, sd: float) -> None:
        self.parts, self.signs, self.sd = parts, signs, sd
        self.mean = np.append(signs * [p.mean for p in parts], 0.0)
        self.spread = np.array([*(p.spread for p in parts), sd])
        self.error = np.array([*(p.error for p in parts), 0.0])
        ends = np.array([*((p.edges[0], p.edges[-1]) for p in parts), (-REACH * sd, REACH * sd)])
        ends[:-1] *= signs[:, None]
        self.low, self.high = ends.min(axis=1), ends.max(axis=1)
        # Spectra of atoms and jumps fade like 1 / w at best.
        self.rough = np.array([*(bool(p.hard.any()) for p in parts), sd == 0.0])
        low, high = self.range(np.arange(len(parts) + 1))
        self.window = 1.05 * (high - low)

    def range(self, rows: NDArray[np.int64]) -> tuple[float, float]:
        """Where the sum of these rows lies, but for what REACH leaves out."""
        mean, reach = float(self.mean[rows].sum()), REACH * float(np.sqrt((self.spread[rows] ** 2).sum()))
        low = max(float(self.low[rows].sum()), mean - reach)
        return low, max(min(float(self.high[rows].sum()), mean + reach), low)

    def sums_of(self, wanted: Sequence[NDArray[np.int64]]) -> list[Distribution] | None:
        """The distribution of each sum of rows; None where some spectrum does not fade in time."""
        if not self.window > 0 or any(self.rough[rows].all() for rows in wanted):
            return None
        step = 2.0 * math.pi / self.window
        walks = [_Walk(p, step) for p in self.parts]
        widest = max(float(np.max(np.diff(p.edges), initial=0.0)) for p in self.parts)
        for count in range(_BLOCK, _MAX_FREQUENCIES + 1, _BLOCK):
            if count * step * widest > _MAX_PIECES * _MAX_PHASE:
                return None
            spectra = np.empty((len(walks) + 1, count), dtype=np.complex128)
            for r, walk in enumerate(walks):
                spectra[r] = walk.until(count) if self.signs[r] > 0 else walk.until(count).conj()
            spectra[-1] = np.exp(-0.5 * (step * self.sd * np.arange(1, count + 1)) ** 2)
            last = np.abs(spectra[:, -_BLOCK:])
            left = max(float(last[rows].prod(axis=0).max()) for rows in wanted)
            if left < FADED:
                return [self.inverted(spectra[rows].prod(axis=0), step, rows) for rows in wanted]
            # Even fading like a normal, exp(-w^2 sd^2 / 2), it would not be done at the last frequency.
            if count >= _EARLIEST_DOUBT and math.log(left) * (_MAX_FREQUENCIES / count) ** 2 > math.log(
                FADED
            ):
                return None
        return None

    def inverted(self, product: Complex, step: float, rows: NDArray[np.int64]) -> Distribution:
        """The distribution with this characteristic function."""
        low, high = self.range(rows)
        mean = float(self.mean[rows].sum())
        size = np.abs(product)
        live = np.flatnonzero(size > 1e-5)
        top = step * (live[-1] + 2 if len(live) else 1)
        n = min(max(math.ceil((high - low) * top / _PANEL_PHASE), 4), 256)
        edges = np.linspace(low, high, n + 1)
        faded = np.flatnonzero(size > 1e-2 * FADED)
        kept = product[: faded[-1] + 1 if len(faded) else 1]
        edges, hard, values = resolved(
            edges, np.zeros(n + 1, dtype=np.bool_), lambda at: _inverse(kept, step, at - mean)[None]
        )
        error = float(self.error[rows].sum()) + _ROUNDING * self.window
        spread = float(np.sqrt((self.spread[rows] ** 2).sum()))
        none = np.empty(0)
        return held(edges, hard, values[0], none, none, spread, error)


class _Walk:
    """phi of one distribution at step, 2 step, ...: turned from one frequency to the next."""

    def __init__(self, x: Distribution, step: float) -> None:
        self.x, self.step = x, step
        self.phi = np.zeros(_MAX_FREQUENCIES, dtype=np.complex128)
        self.count = 0
        self.faded = False
        self.half = float(np.max(np.diff(x.edges), initial=0.0)) / 2
        self.start(x.nodes, x.mass)

    def start(self, nodes: Floats, mass: Floats) -> None:
        at = np.concatenate((nodes, self.x.atom_at)) - self.x.mean
        mass = np.concatenate((mass, self.x.atom_mass))
        self.turn_re, self.turn_im = np.cos(self.step * at), np.sin(self.step * at)
        now = self.count * self.step * at
        self.re, self.im = mass * np.cos(now), mass * np.sin(now)

    def until(self, count: int) -> Complex:
        if not self.faded and count > self.count:
            top = count * self.step
            if top * self.half > _MAX_PHASE:
                self.half = 0.5 * _MAX_PHASE / top
                self.start(*_finer(self.x, 2.0 * self.half))
            block = self.phi[self.count : count]
            _turn(self.re, self.im, self.turn_re, self.turn_im, block)
            self.faded = bool(np.abs(block).max() < FADED)
        self.count = count
        return self.phi[:count]


@compiled
def _finer(x: Distribution, width: float) -> tuple[Floats, Floats]:
    """Quadrature of X's density on panels no wider than `width`."""
    P = len(x.edges) - 1
    pieces = np.empty(P, dtype=np.int64)
    for p in range(P):
        pieces[p] = math.ceil((x.edges[p + 1] - x.edges[p]) / width)
    nodes = np.empty(N * pieces.sum())
    mass = np.empty(len(nodes))
    n = 0
    for p in range(P):
        if pieces[p] == 1:
            nodes[n : n + N] = x.nodes[p * N : (p + 1) * N]
            mass[n : n + N] = x.mass[p * N : (p + 1) * N]
            n += N
            continue
        half = 0.5 / pieces[p]  # of the panel
        full = x.edges[p + 1] - x.edges[p]
        for q in range(pieces[p]):
            for i in range(N):
                u = (2 * q + 1 + _T[i]) * half
                nodes[n] = x.edges[p] + full * u
                mass[n] = _W[i] * half * full * chebyshev(x.density, p, N - 1, 2.0 * u - 1.0)
                n += 1
    return nodes, mass


@compiled
def _turn(re: Floats, im: Floats, turn_re: Floats, turn_im: Floats, out: Complex) -> None:
    n = len(re)
    for m in range(len(out)):
        a0 = a1 = b0 = b1 = 0.0
        for j in range(n - n % 2):
            r = re[j] * turn_re[j] - im[j] * turn_im[j]
            i = re[j] * turn_im[j] + im[j] * turn_re[j]
            re[j] = r
            im[j] = i
        for j in range(0, n - 1, 2):
            a0 += re[j]
            a1 += re[j + 1]
            b0 += im[j]
            b1 += im[j + 1]
        if n % 2 == 1:
            j = n - 1
            r = re[j] * turn_re[j] - im[j] * turn_im[j]
            im[j] = re[j] * turn_im[j] + im[j] * turn_re[j]
            re[j] = r
            a0 += re[j]
            b0 += im[j]
        out[m] = complex(a0 + a1, b0 + b1)


@compiled
def _inverse(phi: Complex, step: float, at: Floats) -> Floats:
    """Density at points relative to the mean, from phi at step, 2 step, ..."""
    n = len(at)
    out = np.full(n, 1.0)
    turn_re = np.cos(step * at)
    turn_im = -np.sin(step * at)
    re = np.ones(n)
    im = np.zeros(n)
    for m in range(len(phi)):
        a = 2.0 * phi[m].real
        b = 2.0 * phi[m].imag
        for j in range(n):
            r = re[j] * turn_re[j] - im[j] * turn_im[j]
            i = re[j] * turn_im[j] + im[j] * turn_re[j]
            re[j] = r
            im[j] = i
            out[j] += a * r - b * i
    scale = step / (2.0 * math.pi)
    for j in range(n):
        out[j] = max(out[j] * scale, 0.0)
    return out
