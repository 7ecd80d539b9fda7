"""Static VOC with dependent leaves against policies in mpmath, adaptive quadrature and published values."""

from __future__ import annotations

import json
from fractions import Fraction
from pathlib import Path

import mpmath
import numpy as np
import pytest
from dense_trees import flat, random_tree
from hypothesis import given, settings
from hypothesis import strategies as st
from ladder import CLOSED_FORM, QUADRATURE, RELATIVE_TAIL

from distill.errors import RefusedError
from distill.exact.static_dense import METHOD, price
from distill.oracle import dense as oracle
from distill.query import Query, scale_of
from distill.record import from_record

PUBLISHED = json.loads((Path(__file__).parents[1] / "data" / "published_dense.json").read_text())["entries"]
TINY = 1e-300  # absolute slack where a quantity may underflow


def static(tree, k=1):
    return price(tree, Query(horizon=0, batch=k))


def rate(tree, remaining):
    return price(tree, Query(horizon=0, batch=None, remaining=remaining))


def number(text):
    return float(Fraction(str(text)))


@pytest.mark.parametrize(
    "entry",
    [e for e in PUBLISHED if e["group"] == "knowledge_gradient_correlated"],
    ids=lambda e: e["id"],
)
def test_published_knowledge_gradients(entry):
    inputs, want = entry["inputs"], number(entry["verified"])
    if "a" in inputs:  # lines a + b Z: a covariance of rank 1, one leaf of it observed without noise
        a, b = ([number(x) for x in inputs[key]] for key in "ab")
        tree = flat(a, np.outer(b, b), noise=1e-300)
        leaf = int(np.argmax(np.abs(b)))
    else:
        cov = [[number(x) for x in row] for row in inputs["Sigma"]]
        tree = flat([number(x) for x in inputs["mu"]], cov, [number(x) for x in inputs["lambda"]])
        leaf = inputs["x"]
    got = static(tree)
    assert abs(got.voc[leaf] - want) <= CLOSED_FORM * max(want, scale_of(tree))
    assert abs(got.voc[leaf] - want) <= got.error[leaf] + CLOSED_FORM * want


def test_policies_in_mpmath_on_random_trees_with_chance_nodes():
    """The true error lies within the bound, every time, and the bound is not far off."""
    rng = np.random.default_rng(11)
    wide = []
    for _ in range(60):
        tree = random_tree(rng, leaves=7)
        k = int(rng.integers(1, 30))
        got, scale = static(tree, k), scale_of(tree)
        for leaf in range(min(2, tree.n_leaves)):
            want = oracle.static_voc_policies(tree, leaf, k)
            miss = abs(float(got.voc[leaf] - want))
            assert miss <= CLOSED_FORM * scale
            assert miss <= got.error[leaf] + TINY
            if want > 0:
                wide.append(got.error[leaf] / max(miss, 1e-16 * float(want)))
    assert len(wide) > 50
    assert np.median(wide) < 100


def test_adaptive_quadrature_on_larger_trees():
    rng = np.random.default_rng(12)
    checked = 0
    for _ in range(12):
        tree = random_tree(rng, leaves=25)
        got = static(tree, 3)
        leaf = int(rng.integers(tree.n_leaves))
        assert abs(got.voc[leaf] - oracle.static_voc(tree, leaf, 3)) <= QUADRATURE * scale_of(tree)
        checked += got.voc[leaf] > 0
    assert checked >= 6


def test_tails_keep_relative_accuracy_down_to_1e_minus_300():
    rng = np.random.default_rng(13)
    decades = []
    for spread in (3, 6, 11, 20, 30, 36):
        for _ in range(4):
            A = rng.normal(size=(5, 5))
            cov = A @ A.T
            mean = rng.normal(size=5)
            reach = np.sqrt(np.max(np.diag(cov)))
            mean[rng.integers(5)] = mean.max() + spread * reach
            tree = flat(mean, cov, noise=float(rng.exponential()) + 0.1)
            got = static(tree)
            for leaf in range(5):
                want = oracle.static_voc_policies(tree, leaf, 1)
                if want < 1e-290:
                    continue
                decades.append(float(mpmath.log10(want / scale_of(tree))))
                assert abs(got.voc[leaf] / want - 1) <= RELATIVE_TAIL * 1e-4
                assert abs(got.voc[leaf] - want) <= got.error[leaf]
    assert min(decades) < -200
    assert sum(-40 < d < -10 for d in decades) >= 10


def test_rate_with_several_peaks():
    """The third leaf pays at once or only after hundreds of rollouts: 2.752e-4, 1.170e-4, 2.759e-4."""
    tree = flat(
        [-0.2, 0.066, 0.0665],
        [[12, -0.09, -0.7], [-0.09, 0.0116, 0.0115], [-0.7, 0.0115, 0.045]],
        [1, 5, 760],
    )
    for k, want in ((1, "2.752e-4"), (20, "1.170e-4"), (300, "2.759e-4")):
        assert f"{static(tree, k).voc[2] / k:.3e}".replace("e-04", "e-4") == want
    brute = np.array([static(tree, k).voc / k for k in range(1, 1001)])
    for remaining in (1, 2, 100, 229, 230, 1000):
        got = rate(tree, remaining)
        best = brute[:remaining].max(axis=0)
        assert np.all(np.abs(got.voc - best) <= got.error)
        assert np.all(got.error <= 2 * QUADRATURE * best)
        assert np.array_equal(got.batch, brute[:remaining].argmax(axis=0) + 1)
    assert rate(tree, 100).batch[2] == 1
    assert rate(tree, 1000).batch[2] == 230


def test_rate_against_every_batch_on_random_trees():
    rng = np.random.default_rng(14)
    for _ in range(40):
        tree = random_tree(rng, leaves=10)
        got = rate(tree, 120)
        brute = np.array([static(tree, k).voc / k for k in range(1, 121)])
        best = brute.max(axis=0)
        assert np.all(np.abs(got.voc - best) <= got.error)
        assert np.all(got.error <= 10 * QUADRATURE * np.maximum(best, CLOSED_FORM * scale_of(tree)) + TINY)
        at = brute[got.batch - 1, np.arange(tree.n_leaves)]
        assert np.allclose(at, got.voc, rtol=CLOSED_FORM, atol=0)


def test_independent_leaves_have_one_kink():
    """VOC = s f(-gap / s), s^2 = v^2 / (v + n / k): knowledge gradient (Frazier, Powell and Dayanik 2008)."""
    rng = np.random.default_rng(15)
    mean, var, noise = rng.normal(size=8), rng.exponential(size=8), rng.exponential(size=8)
    dense = static(flat(mean, np.diag(var), noise), 3)
    for i in range(8):
        s = mpmath.mpf(var[i]) / mpmath.sqrt(mpmath.mpf(var[i]) + mpmath.mpf(noise[i]) / 3)
        z = -abs(mpmath.mpf(mean[i]) - mpmath.mpf(np.max(np.delete(mean, i)))) / s
        want = s * (z * mpmath.ncdf(z) + mpmath.npdf(z))
        assert abs(dense.voc[i] - want) <= CLOSED_FORM * want + TINY
    diagonal = from_record(
        {
            "format": "belief-tree/1", "parent": [-1] + [0] * 8, "kind": ["decision"] + ["leaf"] * 8,
            "mean": [None, *mean.tolist()], "var": [None, *var.tolist()],
            "noise_var": [None, *noise.tolist()],
        }
    )  # fmt: skip
    assert np.array_equal(static(diagonal, 3).voc, dense.voc)


def test_dependence_between_actions_that_move_together_is_worthless():
    tree = flat([1.0, 0.0], [[1.0, 1.0], [1.0, 1.0]])
    assert static(tree, 10**9).voc.tolist() == [0, 0]
    assert static(tree, 10**9).error.tolist() == [0, 0]


@pytest.mark.parametrize("k", [1, 1000, 2**53])
def test_one_leaf_one_action_and_zero_rows(k):
    one = flat([3.0], [[2.0]])
    assert static(one, k).voc.tolist() == [0]
    assert rate(one, k).voc.tolist() == [0]
    assert rate(one, k).batch.tolist() == [1]
    chain = from_record(
        {
            "format": "belief-tree/1", "parent": [-1, 0, 1, 2],
            "kind": ["decision", "decision", "chance", "leaf"],
            "prob": [None, None, None, 1.0], "mean": [None, None, None, 1.0], "cov": [[1.0]],
            "noise_var": [None, None, None, 1.0],
        }
    )  # fmt: skip
    assert static(chain, k).voc.tolist() == [0]
    cov = np.zeros((3, 3))
    cov[0, 0] = 1.0
    still = flat([0.0, 0.0, 0.5], cov)
    assert static(still, k).voc[1:].tolist() == [0, 0]
    assert static(still, k).voc[0] > 0.09
    # Covariance beside a zero variance can be rounding only.
    noisy = np.array([[1.0, 1e-10], [1e-10, 0.0]])
    assert static(flat([0.0, 0.0], noisy), k).voc[1] == 0


def test_values_at_1e12_with_rewards_and_discounts():
    """The gap is known to far below the values' own rounding; the bound says how well."""
    record = {
        "format": "belief-tree/1",
        "parent": [-1, 0, 0, 1, 1, 2, 2],
        "kind": ["decision", "decision", "decision", *["leaf"] * 4],
        "reward": [None, 1e12 * (1 - 0.9), 1.25e11, None, 0.25, None, None],
        "discount": [None, 0.9, 0.875, 1.0, 1.0, 1.0, 1.0],
        "mean": [None, None, None, 1e12, 1e12 + 0.5, 1e12 - 1.0, 1e12 + 0.75],
        "cov": (np.full((4, 4), 0.5) + 0.5 * np.eye(4)).tolist(),
        "noise_var": [None, None, None, 1.0, 2.0, 3.0, 4.0],
    }
    tree = from_record(record)
    got = static(tree, 2)
    for leaf in range(4):
        want = float(oracle.static_voc_policies(tree, leaf, 2))
        assert want > 1e-5
        assert abs(got.voc[leaf] - want) <= got.error[leaf]
    assert np.all(got.error <= RELATIVE_TAIL)


@pytest.mark.parametrize("shared", [1 - 1e-4, 1 - 1e-8, 1 - 1e-12, 1 - 1e-15, 1.0])
def test_nearly_singular_covariance(shared):
    cov = np.full((4, 4), shared) + (1 - shared) * np.eye(4)
    tree = flat([0.0, 1e-4, 2e-4, -1e-4], cov, noise=0.5)
    got = static(tree, 7)
    for leaf in range(4):
        want = oracle.static_voc_policies(tree, leaf, 7)
        assert abs(got.voc[leaf] - want) <= got.error[leaf] + TINY
    assert np.all(got.error <= CLOSED_FORM)


@pytest.mark.parametrize("unit", [1e-80, 1e-6, 1e6, 1e80])
def test_twelve_decades_of_scale_and_more(unit):
    rng = np.random.default_rng(16)
    A = rng.normal(size=(6, 6)) * 10.0 ** rng.uniform(-4, 0, size=(6, 1))
    cov, mean = A @ A.T, rng.normal(size=6)
    noise = 10.0 ** rng.uniform(-8, 8, size=6)
    small = static(flat(mean, cov, noise), 4)
    large = static(flat(mean * unit, cov * unit**2, noise * unit**2), 4)
    assert np.all(large.voc >= 0)
    assert np.allclose(large.voc / unit, small.voc, rtol=RELATIVE_TAIL, atol=TINY)
    assert np.all(np.isfinite(large.error))


@given(seed=st.integers(0, 10**6))
@settings(deadline=None, max_examples=40, derandomize=True)
def test_what_must_hold(seed):
    rng = np.random.default_rng(seed)
    tree = random_tree(rng, leaves=12)
    scale = scale_of(tree)
    slack = CLOSED_FORM * scale
    base = static(tree, 2)
    assert base.method == METHOD
    assert np.all(base.voc >= 0)
    assert np.all(base.voc[np.diag(tree.cov) == 0] == 0)
    last = np.zeros(tree.n_leaves)
    for k in (1, 2, 5, 100, 2**53):
        voc = static(tree, k).voc
        assert np.all(voc >= last - slack)
        last = voc
    # Value of each action is the definition's own.
    assert np.allclose(base.value, oracle.action_worth(tree, tree.mean), rtol=CLOSED_FORM, atol=slack)


@given(seed=st.integers(0, 10**6), n=st.integers(1, 12))
@settings(deadline=None, max_examples=40, derandomize=True)
def test_relabelling_permutes_and_shifting_changes_nothing(seed, n):
    rng = np.random.default_rng(seed)
    factor = rng.normal(size=(n, int(rng.integers(1, n + 1))))
    mean, cov, noise, p = rng.normal(size=n), factor @ factor.T, rng.exponential(size=n), rng.permutation(n)
    tree = flat(mean, cov, noise)
    slack = CLOSED_FORM * scale_of(tree)
    base = static(tree, 2).voc
    moved = static(flat(mean[p], cov[np.ix_(p, p)], noise[p]), 2).voc
    assert np.allclose(moved, base[p], rtol=0, atol=slack)
    shifted = static(flat(mean, cov, noise, reward=[None] + [1024.0] * n), 2).voc
    assert np.allclose(shifted, base, rtol=0, atol=slack)


@pytest.mark.parametrize("n", [512, pytest.param(4096, marks=pytest.mark.slow)])
def test_many_leaves(n):
    rng = np.random.default_rng(17)
    factor = rng.normal(size=(n, 3))
    cov = factor @ factor.T
    tree = flat_unchecked(rng.normal(size=n), cov, np.ones(n))
    some = price(tree, Query(horizon=0, batch=1))
    assert np.all(some.voc >= 0)
    assert np.all(some.error <= 0.1 * QUADRATURE * scale_of(tree))
    mean, b = np.asarray(tree.mean), cov[:, 5] / np.sqrt(cov[5, 5] + 1)
    z = np.linspace(-12, 12, 200_001)
    top = np.max(mean[None, :] + z[::50, None] * b[None, :], axis=1)  # convex: chords bound it from above
    weight = np.exp(-(z[::50] ** 2) / 2) / np.sqrt(2 * np.pi) * (z[50] - z[0])
    coarse = float(np.sum(top * weight)) - mean.max()
    assert abs(some.voc[5] - coarse) < RELATIVE_TAIL * scale_of(tree)


def flat_unchecked(mean, cov, noise):
    from distill.tree import BeliefTree

    n = len(mean)
    parent = np.concatenate(([-1], np.zeros(n, dtype=np.int64)))
    kind = np.concatenate(([0], np.full(n, 2))).astype(np.int8)
    return BeliefTree(
        parent, kind, np.zeros(n + 1), np.ones(n + 1), np.ones(n + 1), mean=mean, noise_var=noise, cov=cov
    )


def test_other_horizons_and_beliefs_are_refused():
    tree = flat([0.0, 1.0], np.eye(2))
    with pytest.raises(RefusedError, match="horizon 0"):
        price(tree, Query())
    win_loss = from_record(
        {
            "format": "belief-tree/1", "parent": [-1, 0], "kind": ["decision", "leaf"],
            "alpha": [None, 1], "beta": [None, 1], "low": [None, 0], "high": [None, 1],
        }
    )  # fmt: skip
    with pytest.raises(RefusedError, match="win/loss"):
        price(win_loss, Query(horizon=0))
