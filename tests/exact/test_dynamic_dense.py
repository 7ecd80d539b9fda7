"""Sampled VOC with dependent leaves against closed forms: the error it states must cover the true one."""

from __future__ import annotations

import json
import math
from pathlib import Path

import numpy as np
import pytest
from dense_trees import flat, random_tree, two_level
from hypothesis import given, settings
from hypothesis import strategies as st
from ladder import CLOSED_FORM, QUADRATURE, RELATIVE_TAIL, SAMPLED_LABEL

from distill.errors import RefusedError
from distill.exact import ancestral, static_dense
from distill.exact.dynamic_dense import METHOD
from distill.exact.dynamic_dense import price as price_best
from distill.exact.dynamic_dense import sampled as price
from distill.oracle import dense as oracle
from distill.query import Query, scale_of
from distill.record import from_record

PUBLISHED = json.loads((Path(__file__).parents[1] / "data" / "published_dense.json").read_text())["entries"]


def random_groups(rng, most=3):
    return [rng.normal(size=rng.integers(1, most + 1)).tolist() for _ in range(rng.integers(2, 4))]


def random_covariance(rng, n, rank=None):
    factor = rng.normal(size=(n, rank or n + 1)) / math.sqrt(rank or n + 1)
    return factor @ factor.T


def held(got, leaf, want):
    """The statement that the tests are about: the truth within the bound."""
    return abs(got.voc[leaf] - want) <= got.error[leaf]


@pytest.mark.parametrize("h", [math.inf, 3.0, 0.2])
def test_closed_form_inside_quadrature_outside(h):
    rng = np.random.default_rng(21)
    seen = []
    for _ in range(6):
        groups = random_groups(rng)
        n = sum(map(len, groups))
        tree = two_level(groups, random_covariance(rng, n), rng.exponential(size=n) + 0.1)
        k = int(rng.integers(1, 20))
        got, scale = price(tree, Query(horizon=h, batch=k)), scale_of(tree)
        values = oracle.action_values(
            tree, tree.mean, oracle.resolved_covariance(tree.cov, tree.noise_var, h)
        )
        assert np.allclose(got.value, values, rtol=0, atol=SAMPLED_LABEL * scale)
        for leaf in rng.choice(n, 2, replace=False).tolist():
            want = oracle.voc(tree, leaf, k, h)
            assert held(got, leaf, want)
            assert got.error[leaf] <= SAMPLED_LABEL * scale
            seen.append(want / scale)
    assert sum(x > 0.01 for x in seen) >= 4


@pytest.mark.parametrize("h", [math.inf, 1.5])
def test_chance_nodes(h):
    rng = np.random.default_rng(22)
    checked = 0
    while checked < 8:
        tree = random_tree(rng, 9)
        if not tree.has_chance or np.linalg.matrix_rank(tree.cov) < tree.n_leaves:
            continue
        got = price(tree, Query(horizon=h, batch=3))
        leaf = int(np.argmax(got.voc))
        try:
            want = oracle.voc(tree, leaf, 3, h)
        except ValueError:  # a shape that the oracle does not cover
            continue
        assert held(got, leaf, want)
        checked += want > 1e-3 * scale_of(tree)


def test_nested_choices_against_plain_sampling():
    """Decision above chance above decision: no closed form, so nested Monte Carlo with its own error."""
    rng = np.random.default_rng(23)
    record = {
        "format": "belief-tree/1",
        "parent": [-1, 0, 0, 1, 1, 3, 3, 5, 5],
        "kind": ["decision", "decision", "leaf", "chance", "leaf", "decision", "leaf", "leaf", "leaf"],
        "prob": [None] * 5 + [0.6, 0.4, None, None],
        "mean": [None, None, 0.8, None, 0.0, None, 0.4, 0.1, 0.3],
        "cov": random_covariance(rng, 5).tolist(),
        "noise_var": [None, None, 1.0, None, 2.0, None, 0.5, 0.5, 1.0],
    }
    tree = from_record(record)
    got = price(tree, Query(batch=4))
    for leaf in (0, 3):
        want, se = oracle.monte_carlo_voc(tree, leaf, 4, math.inf, rng, 1000, 20_000)
        assert got.voc[leaf] > 0.02
        # The reference shares its inner draws over outcomes: their error, below 2 / sqrt(inner), is on top.
        assert abs(got.voc[leaf] - want) <= 4 * se + got.error[leaf] + 2 / math.sqrt(20_000)


def test_ends_of_the_horizon_meet_the_other_cases():
    rng = np.random.default_rng(24)
    tree = random_tree(rng, 14)
    scale = scale_of(tree)
    static = static_dense.price(tree, Query(horizon=0, batch=2))
    short = price(tree, Query(horizon=1e-12, batch=2))
    assert np.all(
        np.abs(short.voc - static.voc) <= short.error + 10 * RELATIVE_TAIL * scale
    )  # sqrt(h): not yet 0
    late, never = price(tree, Query(horizon=1e12, batch=2)), price(tree, Query(batch=2))
    assert np.all(np.abs(late.voc - never.voc) <= RELATIVE_TAIL * scale)


def test_no_choice_below_the_actions_is_static_at_every_horizon():
    rng = np.random.default_rng(25)
    tree = flat(rng.normal(size=6), random_covariance(rng, 6), rng.exponential(size=6))
    static = static_dense.price(tree, Query(horizon=0, batch=3))
    for h in (math.inf, 2.0):
        got = price(tree, Query(horizon=h, batch=3))
        assert np.all(np.abs(got.voc - static.voc) <= got.error)
        assert np.all(got.error <= SAMPLED_LABEL / 4 * scale_of(tree))


def entries(prefix):
    return [e for e in PUBLISHED if e["id"].startswith(prefix)]


@pytest.mark.parametrize("entry", entries("equicorr_"), ids=lambda e: e["id"])
def test_published_equicorrelated_maxima(entry):
    """Owen and Steck 1962: E max = sqrt(1 - rho) E_n, as V_inf of one action."""
    n, rho = entry["inputs"]["n"], float(entry["inputs"]["rho"])
    tree = two_level([[0.0] * n], np.full((n, n), rho) + (1 - rho) * np.eye(n))
    assert abs(price(tree, Query()).value[0] - float(entry["verified"])) <= SAMPLED_LABEL / 4


@pytest.mark.parametrize("entry", entries("emax3_"), ids=lambda e: e["id"])
def test_published_maxima_of_three(entry):
    """Afonja 1972."""
    mean = [float(x) for x in entry["inputs"]["mu"]]
    cov = [[float(x) for x in row] for row in entry["inputs"]["Sigma"]]
    assert (
        abs(price(two_level([mean], cov), Query()).value[0] - float(entry["verified"])) <= SAMPLED_LABEL / 4
    )
    assert oracle.expected_max(np.array(mean), np.array(cov)) == pytest.approx(
        float(entry["verified"]), abs=CLOSED_FORM
    )


def test_one_action_and_no_variance():
    rng = np.random.default_rng(26)
    alone = two_level([rng.normal(size=4).tolist()], random_covariance(rng, 4))
    assert price(alone, Query(batch=5)).voc.tolist() == [0] * 4
    cov = np.zeros((4, 4))
    cov[0, 0] = 1.0
    tree = two_level([[0.0, -0.5], [0.05, 0.0]], cov)
    for h in (math.inf, 2.0):
        got = price(tree, Query(horizon=h))
        assert got.voc[1:].tolist() == [0, 0, 0]
        assert got.voc[0] > 0.05
    still = price(two_level([[0.0, 0.1], [0.05, 0.0]], np.zeros((4, 4))), Query())
    assert still.voc.tolist() == [0] * 4
    assert np.allclose(still.value, [0.1, 0.05], rtol=CLOSED_FORM, atol=0)


@pytest.mark.parametrize("rank", [1, 2])
def test_singular_covariance(rank):
    rng = np.random.default_rng(27 + rank)
    cov = random_covariance(rng, 6, rank)
    tree = two_level([[0.0, 0.3], [0.1, 0.2], [-0.1, 0.4]], cov, 0.5)
    got = price(tree, Query(batch=2))
    exact = two_level([[0.0, 0.3], [0.1, 0.2], [-0.1, 0.4]], cov + 1e-9 * np.eye(6), 0.5)
    for leaf in (0, 3, 5):
        assert abs(got.voc[leaf] - oracle.voc(exact, leaf, 2, math.inf)) <= got.error[leaf] + math.sqrt(1e-9)


def test_far_means_scale_and_repeatability():
    rng = np.random.default_rng(28)
    cov, noise = random_covariance(rng, 6), rng.exponential(size=6)
    groups = np.array([[0.0, 0.25], [0.125, 0.25], [-0.125, 0.5]])
    base = price(two_level(groups.tolist(), cov, noise), Query(horizon=4, batch=2))
    again = price(two_level(groups.tolist(), cov, noise), Query(horizon=4, batch=2))
    assert np.array_equal(base.voc, again.voc)
    far = price(two_level((groups + 2.0**40).tolist(), cov, noise), Query(horizon=4, batch=2))
    assert np.allclose(far.voc, base.voc, rtol=0, atol=CLOSED_FORM)
    large = price(two_level((groups * 1e12).tolist(), cov * 1e24, noise * 1e24), Query(horizon=4, batch=2))
    assert np.allclose(large.voc / 1e12, base.voc, rtol=0, atol=CLOSED_FORM)
    assert base.method == METHOD
    assert np.all(base.voc >= 0)
    assert np.all(base.error > 0)


def test_more_rollouts_are_worth_more():
    rng = np.random.default_rng(29)
    tree = two_level([[0.0, 0.2, 0.1], [0.1, 0.3]], random_covariance(rng, 5))
    last = np.zeros(5)
    for k in (1, 4, 20, 1000):
        got = price(tree, Query(horizon=2, batch=k))
        assert np.all(got.voc >= last - got.error)
        last = got.voc


def test_tolerance_buys_points():
    rng = np.random.default_rng(30)
    tree = two_level([[0.0, 0.2, 0.1], [0.1, 0.3]], random_covariance(rng, 5))
    loose = price(tree, Query(batch=3))
    tight = price(tree, Query(batch=3, tolerance=float(loose.error.max()) / 3 / scale_of(tree)))
    assert np.all(tight.error <= loose.error.max() / 3)
    for leaf in range(5):
        assert held(tight, leaf, oracle.voc(tree, leaf, 3, math.inf))


def test_rate_against_every_batch():
    rng = np.random.default_rng(31)
    tree = two_level([[0.0, 0.2], [0.1, 0.6]], random_covariance(rng, 4), 5.0)
    got = price(tree, Query(batch=None, remaining=12))
    every = [price(tree, Query(batch=k)) for k in range(1, 13)]
    rates = np.array([p.voc / k for k, p in enumerate(every, start=1)])
    assert np.all(got.voc >= rates.max(axis=0) * (1 - SAMPLED_LABEL / 4))
    assert np.all(np.abs(got.voc - rates.max(axis=0)) <= got.error)
    assert np.all((got.batch >= 1) & (got.batch <= 12))
    none = price(tree, Query(batch=None, remaining=0))
    assert none.voc.tolist() == [0] * 4
    assert none.batch.tolist() == [0] * 4


def test_static_and_win_loss_are_refused():
    with pytest.raises(RefusedError, match="horizons above 0"):
        price(flat([0.0, 1.0], np.eye(2)), Query(horizon=0))


def test_ancestral_effects_are_priced_exactly_and_all_else_is_sampled():
    cov = np.kron(np.eye(2), np.full((3, 3), 0.4)) + 0.2 + 0.4 * np.eye(6)
    tree = two_level([[0.0, 0.2, 0.4], [0.1, 0.3, 0.2]], cov)
    exact, rough = price_best(tree, Query(batch=2)), price(tree, Query(batch=2))
    assert exact.method == ancestral.METHOD
    assert np.all(np.abs(exact.voc - rough.voc) <= rough.error)
    assert price_best(tree, Query(horizon=3, batch=2)).method == METHOD
    wild = two_level([[0.0, 0.2, 0.4], [0.1, 0.3, 0.2]], random_covariance(np.random.default_rng(0), 6))
    assert price_best(wild, Query(batch=2)).method == METHOD


@settings(deadline=None, max_examples=10, derandomize=True)
@given(
    seed=st.integers(0, 2**32),
    h=st.sampled_from([0.5, 8.0, math.inf]),
    k=st.integers(1, 50),
    up=st.floats(-1e3, 1e3),
    times=st.sampled_from([1e-6, 1e-3, 7.0, 1e6]),
)
def test_properties(seed, h, k, up, times):
    rng = np.random.default_rng(seed)
    groups = random_groups(rng)
    n = sum(map(len, groups))
    cov, noise = random_covariance(rng, n), 10 ** rng.uniform(-2, 2, size=n)
    sure = int(rng.integers(n))
    cov[sure] = cov[:, sure] = 0.0
    tree, query = two_level(groups, cov, noise), Query(horizon=h, batch=k)
    plain, scale = price(tree, query), scale_of(tree)
    for column in (plain.voc, plain.error):
        assert np.all(np.isfinite(column))
        assert np.all(column >= 0)
    assert plain.voc[sure] == 0
    for more in (k + 1, 2**53):
        richer = price(tree, Query(horizon=h, batch=more))
        assert np.all(richer.voc >= plain.voc - plain.error - richer.error)
    raised = price(two_level([[m + up for m in row] for row in groups], cov, noise), query)
    assert np.all(np.abs(raised.voc - plain.voc) <= 0.1 * QUADRATURE * scale)
    larger = price(
        two_level([[m * times for m in row] for row in groups], cov * times**2, noise * times**2), query
    )
    assert np.all(np.abs(larger.voc / times - plain.voc) <= QUADRATURE * scale)
    turn = np.arange(n)[::-1]  # other points meet other leaves: equal within both errors
    turned = price(two_level([row[::-1] for row in groups[::-1]], cov[turn][:, turn], noise[turn]), query)
    assert np.all(np.abs(turned.voc[turn] - plain.voc) <= turned.error[turn] + plain.error)
    drowned = price(two_level(groups, cov, 1e20), Query(batch=k))
    assert np.all(drowned.voc <= drowned.error + 10 * QUADRATURE * scale)
    alone = price(two_level([[m for row in groups for m in row]], cov, noise), Query(batch=k))
    assert not alone.voc.any()


@pytest.mark.slow
def test_the_bound_covers_the_truth_and_is_not_far_off():
    """Of 2,000 labels at most 2 outside, and the median bound below 100 times the true error."""
    rng = np.random.default_rng(32)
    outside, ratios = 0, []
    while len(ratios) < 2000:
        groups = random_groups(rng, most=2)
        n = sum(map(len, groups))
        tree = two_level(groups, random_covariance(rng, n), 10 ** rng.uniform(-1, 1, size=n))
        h, k = rng.choice([0.5, 3.0, math.inf]), int(rng.integers(1, 20))
        got = price(tree, Query(horizon=float(h), batch=k))
        for leaf in range(n):
            miss = abs(got.voc[leaf] - oracle.voc(tree, leaf, k, float(h)))
            outside += miss > got.error[leaf]
            ratios.append(got.error[leaf] / max(miss, 1e-12 * scale_of(tree)))
    assert outside <= 2
    assert np.median(ratios) < 100
