"""Win/loss labels against fractions in bulk: the error bounds hold, and are not far too wide; odd inputs."""

from __future__ import annotations

from fractions import Fraction
from functools import cache

import numpy as np
import pytest
from ladder import CLOSED_FORM
from win_loss_builders import arms

from distill.exact.win_loss import price
from distill.oracle import win_loss as oracle
from distill.query import Query

Leaves = tuple[tuple[int, int], ...]


@cache
def value_of(leaves: Leaves) -> Fraction:
    return oracle.expected_max_of_whole_betas(leaves)


def true_voc(actions: list[Leaves], action: int, leaf: int, k: int) -> Fraction:
    values = [value_of(tuple(sorted(leaves))) for leaves in actions]
    rival = max(v for i, v in enumerate(values) if i != action)
    a, b = actions[action][leaf]
    voc = Fraction(0)
    for x, odds in enumerate(oracle.beta_binomial(Fraction(a), Fraction(b), k)):
        leaves = list(actions[action])
        leaves[leaf] = (a + x, b + k - x)
        voc += odds * (max(value_of(tuple(sorted(leaves))), rival) - max(values[action], rival))
    return voc


def misses_and_bounds(labels: int, seed: int) -> tuple[list[Fraction], list[Fraction], list[Fraction]]:
    """|label - truth|, the bound, and the truth, of at least that many dynamic labels of small trees."""
    rng = np.random.default_rng(seed)
    misses: list[Fraction] = []
    bounds: list[Fraction] = []
    truths: list[Fraction] = []
    while len(misses) < labels:
        most = int(rng.choice([4, 8, 14]))
        actions = [
            tuple((int(a), int(b)) for a, b in rng.integers(1, most, (rng.integers(1, 4), 2)))
            for _ in range(2)
        ]
        k = int(rng.integers(1, 8))
        priced = price(arms(*map(list, actions)), Query(batch=k))
        i = 0
        for action, leaves in enumerate(actions):
            for leaf in range(len(leaves)):
                truth = true_voc(actions, action, leaf, k)
                misses.append(abs(Fraction(float(priced.voc[i])) - truth))
                bounds.append(Fraction(float(priced.error[i])))
                truths.append(truth)
                i += 1
    return misses, bounds, truths


@pytest.mark.parametrize("labels", [1_000, pytest.param(20_000, marks=pytest.mark.slow)])
def test_error_bounds_cover_the_errors_and_are_not_far_too_wide(labels):
    """At least 99.9 % covered; the median bound at most 100 times the error, where the VOC is not 0."""
    misses, bounds, truths = misses_and_bounds(labels, seed=labels)
    covered = sum(m <= b for m, b in zip(misses, bounds, strict=True))
    assert covered >= 0.999 * len(misses)
    widths = [float(b / m) for m, b, t in zip(misses, bounds, truths, strict=True) if t > 0 and m > 0]
    assert len(widths) > labels / 10
    assert np.median(widths) <= 100


def test_any_valid_numbers_give_finite_labels():
    """Exponents from 1e-300 to 1e15, supports apart by many orders, every horizon, batch and rate."""
    rng = np.random.default_rng(8)

    def leaf(scale: float) -> tuple[float, float, float, float]:
        reach = ((-8, 8), (-2, 3), (0, 1.3), (-300, 0), (0, 15))[rng.integers(5)]
        a, b = (10.0 ** rng.uniform(*reach, 2)).tolist()
        low = 0.0 if rng.random() < 0.5 else float(rng.normal() * scale * 10 ** rng.uniform(-3, 3))
        width = scale if low == 0.0 else scale * 10 ** rng.uniform(-8, 4)
        return a, b, low, max(low + width, float(np.nextafter(low, np.inf)))

    for trial in range(400):
        scale = 10 ** rng.uniform(-12, 12)
        tree = arms(*[[leaf(scale) for _ in range(rng.integers(1, 5))] for _ in range(rng.integers(1, 4))])
        k = int(10 ** rng.uniform(0, 2.5))
        horizon = (0.0, np.inf, np.inf, float(rng.integers(1, 12)))[rng.integers(4)]
        rate = trial % 3 == 0
        priced = price(tree, Query(horizon, None if rate else k, k if rate else None))
        assert np.all(np.isfinite(priced.value))
        for column in (priced.voc, priced.error):
            assert np.all(np.isfinite(column))
            assert np.all(column >= 0)


def test_a_thousand_leaves_of_one_action():
    """One leaf of many priced right: its worth does not depend on copies that are surely worse."""
    best = [(6.0, 2.0), (5.0, 3.0)]
    few = price(arms(best, [(7.0, 2.0)]), Query(batch=4))
    many = price(arms([*best, *[(1.0, 400.0)] * 1000], [(7.0, 2.0)]), Query(batch=4))
    assert few.voc[:2].min() > 0
    assert many.voc[:2] == pytest.approx(few.voc[:2], rel=CLOSED_FORM)
    assert many.voc[2:-1].max() < CLOSED_FORM
