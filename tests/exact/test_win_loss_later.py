"""Exact win/loss VOC below a choice above chance nodes: enumeration, quadrature, Monte Carlo, properties."""

from __future__ import annotations

import math
from pathlib import Path

import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st
from ladder import CLOSED_FORM, QUADRATURE, RELATIVE_TAIL, ROUNDINGS, STANDARD_ERRORS
from scipy import stats
from scipy.special import betainc
from win_loss_builders import change, later_choice, random_tree

from distill.errors import RefusedError
from distill.exact import win_loss_laws
from distill.exact.win_loss import price
from distill.exact.win_loss_groups import _groups, price_groups
from distill.exact.win_loss_later import Later
from distill.family import draw, parse_family
from distill.oracle import win_loss as oracle
from distill.query import Query, scale_of
from distill.record import from_record
from distill.tree import BeliefTree


@pytest.mark.parametrize("seed", range(10))
def test_agrees_with_joint_enumeration(seed):
    tree = later_choice(np.random.default_rng(seed), whole=seed % 2 == 0)
    h, k = 1 + seed % 3, 1 + seed % 4
    priced = price(tree, Query(horizon=h, batch=k))
    assert priced.value == pytest.approx([float(v) for v in oracle.value_now(tree, h)], rel=CLOSED_FORM)
    for i in range(tree.n_leaves):
        miss = abs(priced.voc[i] - oracle.voc(tree, h, i, k))
        assert miss <= CLOSED_FORM * scale_of(tree)
        assert miss <= priced.error[i]
    assert (priced.voc.max() > 0) == (seed != 7)


@pytest.mark.parametrize("seed", [207, 213, 421, 457])
def test_agrees_with_joint_enumeration_below_rewards_and_discounts(seed):
    tree = random_tree(np.random.default_rng(seed), depth=4)
    assert tree.n_leaves <= 6
    priced = price(tree, Query(horizon=1, batch=2))
    for i in range(tree.n_leaves):
        assert abs(priced.voc[i] - oracle.voc(tree, 1, i, 2)) <= CLOSED_FORM * scale_of(tree)


@pytest.mark.parametrize("seed", range(4))
def test_a_lattice_stands_in_for_many_atoms_within_its_error(seed, monkeypatch):
    tree = later_choice(np.random.default_rng(seed), whole=False)
    for h in (2, 150):
        exact = price(tree, Query(horizon=h, batch=3))
        with monkeypatch.context() as patch:
            patch.setattr(win_loss_laws, "_MOST_ATOMS", 0)
            rough = price(tree, Query(horizon=h, batch=3))
        assert np.all(np.abs(rough.voc - exact.voc) <= rough.error + exact.error)
        assert np.all(rough.error <= scale_of(tree) / 500)
        assert rough.error.max() > exact.error.max()


NODES, WEIGHTS = ((x + s) / 2 for x, s in zip(np.polynomial.legendre.leggauss(40), (1.0, 0.0), strict=True))


def smooth_values(tree: BeliefTree, held: list[tuple[float, float]]) -> np.ndarray:
    """E max(w p0 + (1 - w) p1, p2) and E p3 for whole exponents: the integrand is a polynomial."""
    (a0, b0), (a1, b1), (a2, b2), (a3, b3) = held
    w = tree.prob[3]
    x = w * NODES[:, None] + (1 - w) * NODES
    inner = x * betainc(a2, b2, x) + a2 / (a2 + b2) * (1 - betainc(a2 + 1, b2, x))
    law0, law1 = (WEIGHTS * stats.beta.pdf(NODES, a, b) for a, b in ((a0, b0), (a1, b1)))
    return np.array([law0 @ inner @ law1, a3 / (a3 + b3)])


@pytest.mark.parametrize("seed", range(12))
@pytest.mark.parametrize("k", [1, 6])
def test_dynamic_agrees_with_quadrature_of_polynomials(seed, k):
    tree = later_choice(np.random.default_rng(seed))
    priced = price(tree, Query(batch=k))
    held = list(zip(tree.alpha.tolist(), tree.beta.tolist(), strict=True))
    now = smooth_values(tree, held)
    assert priced.value == pytest.approx(now, rel=CLOSED_FORM)
    for i, (a, b) in enumerate(held):
        truth = 0.0
        for wins in range(k + 1):
            after = [*held[:i], (a + wins, b + k - wins), *held[i + 1 :]]
            odds = float(stats.betabinom.pmf(wins, k, a, b))
            truth += odds * (smooth_values(tree, after).max() - now.max())
        miss = abs(priced.voc[i] - truth)
        assert miss <= QUADRATURE * scale_of(tree)
        assert miss <= priced.error[i] + 10 * ROUNDINGS  # what the sum of differences above is good to
        assert priced.error[i] <= QUADRATURE * scale_of(tree)


@pytest.mark.parametrize("seed", [0, 1])
def test_deep_trees_agree_with_monte_carlo(seed):
    rng = np.random.default_rng(seed)
    tree = later_choice(rng, deep=True, whole=False)
    held = np.array([tree.alpha, tree.beta]).T
    priced = price(tree, Query())
    u = rng.uniform(size=(15_000, tree.n_leaves))
    at = stats.beta.ppf(u, *held.T)

    def values(x: np.ndarray) -> tuple[np.ndarray, float]:
        """Mean value of both actions, and the standard error of the worse."""
        value = np.zeros((tree.n_nodes, len(x)))
        value[tree.leaf_nodes] = (tree.low + (tree.high - tree.low) * x).T
        for v in range(tree.n_nodes - 1, 0, -1):
            children = np.flatnonzero(tree.parent == v)
            q = [tree.reward[c] + tree.discount[c] * value[c] for c in children]
            if v in (2, 6):
                value[v] = sum(tree.prob[c] * one for c, one in zip(children, q, strict=True))
            elif len(children):
                value[v] = np.max(q, axis=0)
        q = np.array([tree.reward[c] + tree.discount[c] * value[c] for c in tree.action_nodes])
        return q.mean(axis=1), float(q.std(axis=1).max() / math.sqrt(len(x)))

    now, spread = values(at)
    assert np.all(np.abs(priced.value - now) <= STANDARD_ERRORS * spread)
    for i, (a, b) in enumerate(held):
        truth = 0.0
        for wins in (0, 1):
            after = at.copy()
            after[:, i] = stats.beta.ppf(u[:, i], a + wins, b + 1 - wins)
            truth += (a if wins else b) / (a + b) * (values(after)[0].max() - now.max())
        assert abs(priced.voc[i] - truth) <= 2 * STANDARD_ERRORS * spread


def test_long_horizon_nears_the_dynamic_value():
    tree = later_choice(np.random.default_rng(2), deep=True)
    dynamic = price(tree, Query(batch=3))
    misses = [np.abs(price(tree, Query(horizon=h, batch=3)).voc - dynamic.voc).max() for h in (40, 400, 4000)]
    assert misses[0] < 1 / 40
    assert misses[1] < misses[0] / 5
    assert misses[2] < misses[1] / 5


@pytest.mark.parametrize("h", [2, math.inf])
def test_rate_is_the_largest_over_every_batch(h):
    tree = later_choice(np.random.default_rng(4), deep=True)
    rates = np.array([price(tree, Query(horizon=h, batch=k)).voc / k for k in range(1, 31)])
    priced = price(tree, Query(horizon=h, batch=None, remaining=30))
    assert priced.voc == pytest.approx(rates.max(axis=0), rel=RELATIVE_TAIL, abs=CLOSED_FORM)
    at = rates[priced.batch - 1, np.arange(tree.n_leaves)]
    assert at == pytest.approx(priced.voc, rel=RELATIVE_TAIL, abs=CLOSED_FORM)
    assert not price(tree, Query(horizon=h, batch=None, remaining=0)).batch.any()


@settings(deadline=None, max_examples=25, derandomize=True)
@given(
    seed=st.integers(0, 10**6),
    h=st.sampled_from([1, 3, math.inf]),
    k=st.integers(1, 30),
    up=st.floats(-1e3, 1e3),
    times=st.sampled_from([1e-12, 1e-3, 7.0, 1e12]),
)
def test_properties(seed, h, k, up, times):
    tree = later_choice(np.random.default_rng(seed), whole=seed % 2 == 0)
    query = Query(horizon=h, batch=k)
    plain = price(tree, query)
    scale = scale_of(tree)
    for column in (plain.voc, plain.error):
        assert np.all(np.isfinite(column))
        assert np.all(column >= 0)
    more = price(tree, Query(horizon=h, batch=k + 1))
    assert np.all(more.voc >= plain.voc - plain.error - more.error)
    raised = price(change(tree, low=tree.low + up, high=tree.high + up), query)
    assert np.all(np.abs(raised.voc - plain.voc) <= raised.error + plain.error + CLOSED_FORM * scale)
    scaled = price(
        change(tree, low=tree.low * times, high=tree.high * times, reward=tree.reward * times), query
    )
    assert scaled.voc == pytest.approx(
        plain.voc * times, rel=RELATIVE_TAIL, abs=10 * CLOSED_FORM * scale * times
    )
    order = [1, 0, 2, 3]  # both leaves of the chance node trade places, and so do their odds
    prob = tree.prob.copy()
    prob[[3, 4]] = prob[[4, 3]]
    turned = price(change(tree, alpha=tree.alpha[order], beta=tree.beta[order], prob=prob), query)
    slack = turned.error + plain.error[order] + CLOSED_FORM * scale
    assert np.all(np.abs(turned.voc - plain.voc[order]) <= slack)


def test_extremes_are_finite_and_bounded():
    tree = later_choice(np.random.default_rng(0), deep=True)
    n = tree.n_leaves
    alpha = np.array([1e6, 1e-3, 0.5, 1.0, 1e15, 2.0, 1e-12, 3.0])[:n]
    beta = np.array([1e6, 1e-3, 1e5, 1e12, 1.0, 2.0, 1.0, 4.0])[:n]
    for high in (np.ones(n), 10.0 ** np.linspace(-12, 12, n)):
        wide = change(tree, alpha=alpha, beta=beta, high=high)
        for query in (Query(), Query(batch=1000), Query(batch=None, remaining=50), Query(horizon=3)):
            priced = price(wide, query)
            for column in (priced.voc, priced.error):
                assert np.all(np.isfinite(column))
                assert np.all(column >= 0)


def test_one_action_needs_no_look_ahead_unless_trials_end():
    tree = later_choice(np.random.default_rng(1))
    gone = change(tree, reward=np.where(np.arange(tree.n_nodes) == 6, -9.0, tree.reward))
    assert not price(gone, Query(batch=5)).voc.any()
    assert np.all(price(gone, Query(horizon=2, batch=5)).voc[:3] > 0)


def test_too_many_leaves_below_one_choice_are_refused_by_name():
    n = 2049
    columns = {
        name: [None, None, None] + [x] * n for name, x in (("alpha", 1), ("beta", 1), ("low", 0), ("high", 1))
    }
    tree = from_record(
        {
            "format": "belief-tree/1",
            "parent": [-1, 0, 1, 2, 2, *[1] * (n - 2)],
            "kind": ["decision", "decision", "chance", *["leaf"] * n],
            "prob": [None, None, None, 0.5, 0.5, *[None] * (n - 2)],
            **columns,
        }
    )
    with pytest.raises(RefusedError, match="2049 leaves below one choice above chance nodes"):
        price(tree, Query())


def test_families_draw_such_trees():
    path = Path(__file__).parents[2] / "datasets" / "families" / "on-time.toml"
    family = parse_family(path.read_bytes() + b"\n[chance]\nshare = 0.5\n", "on-time below chance nodes")
    trees = [draw(family, 1, i) for i in range(30)]
    nested = [t for t in trees if any(isinstance(g, Later) for g in _groups(t)[0])]
    assert len(nested) > 3
    for tree in nested:
        priced = price(tree, Query(batch=None, remaining=20))
        assert np.all(priced.voc >= 0)
        assert np.all(priced.error <= 1e-3 * scale_of(tree))


def test_nests_are_what_is_tested_here():
    found = []

    def look(group):
        found.append(isinstance(group, Later))
        raise RefusedError("seen")

    for seed in (0, 5):
        with pytest.raises(RefusedError, match="seen"):
            price_groups(later_choice(np.random.default_rng(seed)), Query(), look, "")
    assert all(found)
