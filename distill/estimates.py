"""Parameters with intervals from sums over independent groups, and samples as family fields.

A statistic is a function of column sums, so drawing the groups again with replacement is one product of
matrices. The group is whatever is independent: a decision, whose recorded stages are not. Floor 2.
"""

from __future__ import annotations

import math
from collections.abc import Callable, Mapping, Sequence
from dataclasses import dataclass
from typing import Any, Final

import numpy as np
from scipy import stats

from distill.tree import Floats

__all__ = [
    "LEVEL",
    "Estimated",
    "bootstrap",
    "field_text",
    "number_text",
    "proportion",
    "same_or_spread",
    "two_sample",
]

LEVEL: Final = 0.95  # coverage that every interval states
_MOST_CHOICES: Final = 64
_DRAWS: Final = 1000
_CHUNK: Final = 4_000_000  # numbers held at once
_LEAST_SPREAD: Final = 0.02  # of a logarithm: less is not worth a distribution


@dataclass(frozen=True)
class Estimated:
    """A parameter with its interval; NaN where the data do not say."""

    value: float
    low: float
    high: float

    def to_json(self) -> dict[str, float | None]:
        """Plain numbers; None for what is not known."""
        return {k: float(x) if math.isfinite(x) else None for k, x in vars(self).items()}


def bootstrap(
    columns: Mapping[str, Floats],
    statistic: Callable[[Mapping[str, Any]], Mapping[str, Any]],
    *,
    draws: int = _DRAWS,
    level: float = LEVEL,
    seed: int = 0,
) -> dict[str, Estimated]:
    """Parameters of column sums, with percentile intervals over groups drawn again with replacement.

    columns : name -> one number a group. statistic : sums by name (arrays of equal shape) -> parameters.
    Percentiles are widened for few groups as a t quantile is (Hesterberg 2015, section 5.4): coverage is
    near `level` from some fifty groups on, below it for fewer or very skew ones.

    >>> mean = bootstrap({"x": np.arange(100.0), "n": np.ones(100)}, lambda s: {"mean": s["x"] / s["n"]})
    >>> mean["mean"].value, mean["mean"].low < 49.5 < mean["mean"].high
    (49.5, True)
    """
    names = list(columns)
    table = np.stack([np.asarray(columns[name], dtype=float) for name in names], axis=1)
    n = len(table)
    rng = np.random.default_rng(seed)
    with np.errstate(divide="ignore", invalid="ignore", over="ignore"):
        whole = statistic(dict(zip(names, table.sum(axis=0), strict=True)))
        sums = _resampled(table, draws, rng)
        drawn = statistic({name: sums[:, j] for j, name in enumerate(names)})
    tail = float(stats.norm.cdf(math.sqrt(n / max(n - 1, 1)) * stats.t.ppf((1 - level) / 2, max(n - 1, 1))))
    out = {}
    for name, value in whole.items():
        usable = np.broadcast_to(drawn[name], draws)
        usable = usable[np.isfinite(usable)]
        few = n < 2 or len(usable) < draws / 2
        low, high = (math.nan, math.nan) if few else np.quantile(usable, [tail, 1 - tail])
        out[name] = Estimated(float(value), float(low), float(high))
    return out


def proportion(share: float, groups: int, level: float = LEVEL) -> Estimated:
    """A share of independent groups with its exact binomial interval (Clopper and Pearson 1934).

    Where groups hold several members that differ, it is wider than need be.

    >>> proportion(0.0, 100).high < 0.04
    True
    """
    x, n = share * groups, groups
    low = stats.beta.ppf((1 - level) / 2, x, n - x + 1) if x > 0 else 0.0
    high = stats.beta.ppf((1 + level) / 2, x + 1, n - x) if x < n else 1.0
    return Estimated(share, float(low), float(high))


def _resampled(table: Floats, draws: int, rng: np.random.Generator) -> Floats:
    """Column sums of `draws` samples of the rows with replacement, (draws, columns)."""
    n = len(table)
    out = np.empty((draws, table.shape[1]))
    step = max(1, _CHUNK // n)
    for start in range(0, draws, step):
        counts = rng.multinomial(n, np.full(n, 1 / n), min(step, draws - start)).astype(float)
        # Not BLAS: the same bits with any number of threads.
        out[start : start + step] = np.einsum("bn,nm->bm", counts, table)
    return out


def by_group(rows: Sequence[Mapping[str, float]], group: Sequence[int]) -> dict[str, Floats]:
    """Sums over groups, numbered from 0, of rows of equal keys: what `bootstrap` takes.

    >>> by_group([{"x": 1.0}, {"x": 2.0}, {"x": 4.0}], [0, 1, 0])["x"]
    array([5., 2.])
    """
    n = int(np.max(group)) + 1
    out = {}
    for name in rows[0]:
        sums = np.zeros(n)
        np.add.at(sums, np.asarray(group), np.array([row[name] for row in rows], dtype=float))
        out[name] = sums
    return out


def two_sample(a: Floats, b: Floats) -> float:
    """Largest difference of two empirical distribution functions (Kolmogorov-Smirnov distance), 0 to 1.

    >>> two_sample(np.array([1.0, 2.0]), np.array([3.0, 4.0]))
    1.0
    """
    a, b = np.sort(a[~np.isnan(a)]), np.sort(b[~np.isnan(b)])
    if len(a) == 0 or len(b) == 0:
        return 0.0 if len(a) == len(b) else 1.0
    at = np.concatenate([a, b])
    gap = np.searchsorted(a, at, side="right") / len(a) - np.searchsorted(b, at, side="right") / len(b)
    return float(np.max(np.abs(gap)))


# --- samples as fields of a family ----------------------------------------------------------------


def number_text(x: float, digits: int = 6) -> str:
    """A number as TOML has it, to so many digits.

    >>> number_text(0.123456789), number_text(3.0)
    ('0.123457', '3')
    """
    return f"{x:.{digits}g}"


def same_or_spread(typical: float, log_sd: Estimated | float) -> str:
    """A positive field: `typical` always, or log-uniform around it with this spread of its logarithm."""
    spread = log_sd.value if isinstance(log_sd, Estimated) else log_sd
    if not spread > _LEAST_SPREAD:
        return number_text(typical)
    half = math.sqrt(3.0) * spread
    ends = (typical * math.exp(-half), typical * math.exp(half))
    return f"{{ log_uniform = [{number_text(ends[0])}, {number_text(ends[1])}] }}"


def field_text(
    values: Sequence[float] | Floats, *, whole: bool = False, most: int = 8, digits: int = 6
) -> str:
    """Values seen directly as a field: one, a choice of few, or the likelier of uniform and log-uniform.

    digits : of each value.

    >>> field_text([2, 2, 3, 2], whole=True)
    '{ choice = [2, 3], weights = [0.75, 0.25] }'
    """
    x = np.asarray(values, dtype=float)
    distinct, times = np.unique(x, return_counts=True)
    if len(distinct) == 1:
        return number_text(distinct[0], digits)
    if len(distinct) > (_MOST_CHOICES if whole else most):
        return _range_text(x, whole, digits)
    numbers = ", ".join(number_text(v, digits) for v in distinct)
    weights = ", ".join(number_text(w) for w in times / len(x))
    return f"{{ choice = [{numbers}], weights = [{weights}] }}"


def _range_text(x: Floats, whole: bool, digits: int) -> str:
    """Uniform or log-uniform between the ends seen, whichever makes the sample likelier."""
    low, high = float(x.min()), float(x.max())
    ends = f"[{number_text(math.floor(low))}, {number_text(math.ceil(high))}]" if whole else None
    ends = ends or f"[{number_text(low, digits)}, {number_text(high, digits)}]"
    if low > 0 and np.mean(np.log(x)) + math.log(math.log(high / low)) < math.log(high - low):
        return f"{{ log_uniform = {ends} }}"
    return ends
