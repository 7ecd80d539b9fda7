"""Values between the outcomes that are sampled: against closed forms, and against following every kink."""

from __future__ import annotations

import math

import numpy as np
import pytest
from dense_trees import random_tree, two_level
from ladder import BETWEEN_NODES, CLOSED_FORM

from distill.exact import dynamic_dense
from distill.exact.sampled_nodes import NODES, between_nodes
from distill.exact.sampled_outcome import _HEIGHT, _SWING, mean_over_outcomes
from distill.exact.sampled_rises import BINS, REACH
from distill.numerics import gain, norm_cdf
from distill.query import Query, scale_of

EDGES = np.linspace(-REACH, REACH, BINS + 1)


def with_scrambles(row):
    """As two scrambles and one action that agree."""
    return np.broadcast_to(row, (2, 1, len(row))).copy()


def test_a_line_is_carried_to_every_outcome():
    value, bend, spread, missed = between_nodes(with_scrambles(3 * NODES - 2))
    assert np.allclose(value, 3 * EDGES - 2, rtol=0, atol=20 * CLOSED_FORM)
    assert np.abs(bend).max() < 20 * CLOSED_FORM
    assert np.abs(spread).max() < 20 * CLOSED_FORM
    assert missed[0] < 20 * CLOSED_FORM


@pytest.mark.parametrize("at", [-1.3, 0.0, 0.4])
def test_a_smooth_maximum_between_outcomes(at):
    """E[max(z - at, X)] less the linear part: gain(z - at), with slopes Phi(z - at)."""
    value, bend, _, missed = between_nodes(with_scrambles(np.array([gain(z - at) for z in NODES])))
    off = np.abs(value[0, 0] - [gain(z - at) for z in EDGES]).max()
    assert off <= missed[0] <= BETWEEN_NODES
    turned = np.cumsum(bend[0, 0])[BINS // 2]
    assert turned == pytest.approx(norm_cdf(EDGES[BINS // 2 + 1] - at), abs=BETWEEN_NODES)


def test_what_is_missed_at_a_kink_is_within_what_is_said():
    """max(z - t, 0), the worst there is: in the mean, over any range of outcomes, and at any outcome."""
    density = np.exp(-EDGES * EDGES / 2) / math.sqrt(2 * math.pi) * (EDGES[1] - EDGES[0])
    for t in np.linspace(-2, 2, 401):
        value, bend, spread, missed = between_nodes(with_scrambles(np.maximum(NODES - t, 0.0)))
        in_mean = abs(mean_over_outcomes(value, bend, spread)[0, 0] - gain(-t))
        off = value[0, 0] - np.maximum(EDGES - t, 0.0)
        up_to = np.append(0.0, np.cumsum(off * density))
        assert in_mean <= _SWING * missed[0]
        assert in_mean + np.ptp(up_to) <= 2 * _SWING * missed[0]
        assert np.abs(off).max() <= _HEIGHT * missed[0]


def priced(tree, query, between):
    with pytest.MonkeyPatch.context() as change:
        change.setattr(dynamic_dense, "_BETWEEN", between)
        return dynamic_dense.sampled(tree, query)


@pytest.mark.parametrize(("h", "k"), [(math.inf, 1), (math.inf, 50), (2.0, 3), (0.1, 1000)])
def test_nodes_and_kinks_agree_within_the_bound_of_the_nodes(h, k):
    """Same samples, so what differs is interpolation alone; usually far less, and then no wider bound."""
    shares, wider = [], []
    for seed in (4, 7, 9):
        tree = random_tree(np.random.default_rng(seed), 9)
        query = Query(horizon=h, batch=k)
        nodes, kinks, usual = (priced(tree, query, x) for x in (math.inf, -1.0, dynamic_dense._BETWEEN))
        assert np.all(np.abs(nodes.voc - kinks.voc) <= nodes.error)
        assert np.all(np.abs(usual.voc - kinks.voc) <= 0.25 * usual.error)
        some = kinks.error > 0
        shares += (np.abs(usual.voc - kinks.voc)[some] / scale_of(tree)).tolist()
        wider += (usual.error[some] / kinks.error[some]).tolist()
    assert np.max(shares) < 1e-4
    assert np.max(shares) > 0
    assert np.max(wider) < 1.5


@pytest.mark.parametrize("h", [math.inf, 2.0])
def test_what_is_left_given_the_outcome_has_the_covariance_it_should(h):
    """With a unit matrix for samples, the samples' products are their covariance: R + c c^T - b b^T."""
    rng = np.random.default_rng(3)
    factor = rng.normal(size=(7, 5))
    tree = two_level([[0.0, 0.2, 0.1, 0.4], [0.1, 0.3, 0.0]], factor @ factor.T, rng.exponential(size=7))
    sampler = dynamic_dense._Sampler.of(tree, h, 8, 8)
    unit = np.eye(5)
    object.__setattr__(sampler, "normal", unit[:4])
    object.__setattr__(sampler, "xi", unit[4])
    for i in (1, 5):
        b = sampler.cov[i] / math.sqrt(sampler.cov[i, i] + tree.noise_var[i] / 3)
        c = sampler.left[i] / math.sqrt(sampler.left[i, i] + tree.noise_var[i] / 3)
        shift = sampler._share(b, c)
        for a, (own, inverse) in enumerate(sampler.inverse):
            L = np.linalg.pinv(inverse)
            left = L @ unit[: L.shape[1]] + np.outer(c[own], unit[4]) - np.outer(b[own], shift[a])
            want = sampler.R[np.ix_(own, own)] + np.outer(c[own], c[own]) - np.outer(b[own], b[own])
            assert np.allclose(left @ left.T, want, rtol=0, atol=CLOSED_FORM)


def test_what_64_leaves_are_priced_to():
    """Over trees, hard and easy, the median of four standard errors is within 4e-4 of scale."""
    rng = np.random.default_rng(7)
    errors = []
    for _ in range(4):
        loading = rng.normal(size=(64, 6)) / 3
        cov = loading @ loading.T + np.diag(rng.uniform(0.2, 1.0, 64))
        tree = two_level(rng.normal(0, 0.5, (8, 8)).tolist(), cov, rng.uniform(0.5, 4, 64))
        got = dynamic_dense.sampled(tree, Query())
        errors += (got.error / scale_of(tree)).tolist()
        assert got.voc.max() > 1e-3 * scale_of(tree)
    assert np.median(errors) <= 4e-4
