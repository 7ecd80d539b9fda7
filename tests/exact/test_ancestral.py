"""Dependent leaves from ancestral effects: published maxima, closed forms, sampling, and what is refused."""

from __future__ import annotations

import json
import math
from pathlib import Path

import numpy as np
import pytest
from dense_trees import effects_tree, flat, nested_effects, two_level
from hypothesis import given, settings
from hypothesis import strategies as st
from ladder import CLOSED_FORM, PUBLISHED, QUADRATURE, RELATIVE_TAIL, SAMPLED_LABEL

from distill.errors import RefusedError
from distill.exact import dynamic_dense
from distill.exact.ancestral import METHOD, price
from distill.exact.ancestral_effects import find_effects
from distill.oracle import dense as oracle
from distill.query import Query, scale_of

ENTRIES = json.loads((Path(__file__).parents[1] / "data" / "published_dense.json").read_text())["entries"]


def posterior(tree, leaf, noise_var):
    """Covariance after one rollout at a leaf."""
    S = np.asarray(tree)
    S = S - np.outer(S[leaf], S[leaf]) / (S[leaf, leaf] + noise_var)
    return (S + S.T) / 2


def binary(depth):
    return ["leaf"] if depth == 0 else ["node", [[0, 1, binary(depth - 1)]] * 2]


def tree_of(entry):
    inputs = entry["inputs"]
    if "groups" in inputs:
        sg, sl = float(inputs["sg"]), float(inputs["sl"])
        return effects_tree(["node", [[0, sg, ["node", [[0, sl, ["leaf"]]] * g]] for g in inputs["groups"]]])
    if "depth" in inputs:
        return effects_tree(binary(inputs["depth"]))
    return effects_tree(inputs["tree"])


def small_effects_tree(entry):
    inputs = entry["inputs"]
    return entry["group"] == "tree_prior" and inputs.get("depth", 1) <= 6 and "obs" not in inputs


@pytest.mark.parametrize("entry", list(filter(small_effects_tree, ENTRIES)), ids=lambda e: e["id"])
def test_published_maxima_over_trees_of_effects(entry):
    """E max of all leaves, as V_inf of a root with one action; digits as given, at most 1e-9."""
    tree, text = tree_of(entry), entry["verified"]
    digits = len(text.split(".")[1])
    slack = max(PUBLISHED * 10.0**-digits, QUADRATURE * scale_of(tree) * 1e-3)
    assert abs(price(tree, Query()).value[0] - float(text)) <= slack


@pytest.mark.parametrize(
    "entry", [e for e in ENTRIES if e["id"].startswith("equicorr_")], ids=lambda e: e["id"]
)
def test_published_equicorrelated_maxima(entry):
    """Owen and Steck 1962: sqrt(1 - rho) E_n."""
    n, rho = entry["inputs"]["n"], float(entry["inputs"]["rho"])
    tree = two_level([[0.0] * n], np.full((n, n), rho) + (1 - rho) * np.eye(n))
    assert abs(price(tree, Query()).value[0] - float(entry["verified"])) <= QUADRATURE * 1e-2


def test_posterior_of_a_tree_of_effects():
    entry = next(e for e in ENTRIES if e["id"] == "tree_posterior_2x2")
    inputs = entry["inputs"]
    mean = inputs["root"][0] + np.array(inputs["leaf_mean"]).ravel()
    cov = inputs["root"][1] ** 2 + np.kron(np.eye(2), np.full((2, 2), inputs["group_sd"] ** 2))
    cov = cov + inputs["leaf_sd"] ** 2 * np.eye(4)
    noise = inputs["obs"]["noise_sd"] ** 2
    after = mean + cov[:, 0] / (cov[0, 0] + noise) * (inputs["obs"]["y"] - mean[0])
    tree = effects_tree(
        ["node", [[0, 1, ["node", [[0, 1, ["leaf"]]] * 2]]] * 2], mean=after, cov=posterior(cov, 0, noise)
    )
    assert abs(price(tree, Query()).value[0] - float(entry["verified"])) <= QUADRATURE * 1e-2


def test_closed_form_after_rollouts_on_two_levels():
    rng = np.random.default_rng(41)
    seen = 0
    for _ in range(5):
        groups = rng.normal(size=(2, 3)).tolist()
        cov = np.kron(np.eye(2), np.full((3, 3), 0.5)) + 0.3 + np.diag(rng.uniform(0.3, 2, size=6))
        for leaf in rng.integers(6, size=3):
            cov = posterior(cov, leaf, 0.7)
        tree = two_level(groups, cov, rng.uniform(0.5, 2, size=6))
        k = int(rng.integers(1, 30))
        got = price(tree, Query(batch=k))
        assert got.method == METHOD
        for leaf in (0, 4):
            want = oracle.voc(tree, leaf, k, math.inf)
            oracle_off = QUADRATURE * 1e-2 * scale_of(tree)
            assert abs(got.voc[leaf] - want) <= got.error[leaf] + oracle_off
            seen += want > 0.01 * scale_of(tree)
    assert seen >= 3


@pytest.mark.parametrize("seed", range(4))
def test_deeper_trees_against_sampling(seed):
    rng = np.random.default_rng(50 + seed)
    tree = nested_effects(rng, depth=3, branching=(2, 3), rollouts=int(rng.integers(0, 6)))
    got, rough = price(tree, Query(batch=4)), dynamic_dense.sampled(tree, Query(batch=4))
    assert np.all(np.abs(got.voc - rough.voc) <= rough.error)
    assert np.all(got.error <= QUADRATURE * 10 * scale_of(tree))
    assert np.all(np.abs(got.value - rough.value) <= SAMPLED_LABEL * scale_of(tree))


def test_independent_leaves_are_effects_too():
    """One uncertain leaf over a sure one, against E max(N(0, 1), N(0, 1)) = 1 / sqrt(pi)."""
    tree = two_level([[0.3, -5.0], [0.0, 0.0]], np.diag([1.0, 0.0, 1.0, 1.0]), 1.0)
    got = price(tree, Query(batch=1))
    assert abs(got.value[1] - 1 / math.sqrt(math.pi)) <= QUADRATURE
    for leaf in (0, 2):
        assert abs(got.voc[leaf] - oracle_with_sure_leaf(tree, leaf)) <= QUADRATURE
    assert got.voc[1] == 0


def oracle_with_sure_leaf(tree, leaf):
    """The same tree without its sure leaf, which is 5 deviations too low to matter above 1e-7 in value."""
    cov = np.asarray(tree.cov).copy()
    cov[1, 1] = 1e-20
    almost = two_level([[0.3, -5.0], [0.0, 0.0]], cov, 1.0)
    return oracle.voc(almost, leaf, 1, math.inf)


def test_rate_against_every_batch():
    cov = np.kron(np.eye(2), np.full((2, 2), 0.4)) + 0.2 + 0.4 * np.eye(4)
    tree = two_level([[0.0, 0.2], [0.1, 0.7]], cov, [1.0, 20.0, 5.0, 2.0])
    got = price(tree, Query(batch=None, remaining=20))
    rates = np.array([price(tree, Query(batch=k)).voc / k for k in range(1, 21)])
    assert np.allclose(got.voc, rates.max(axis=0), rtol=RELATIVE_TAIL, atol=0)
    assert np.all(np.abs(got.voc - rates.max(axis=0)) <= got.error)
    assert np.all(rates[got.batch - 1, np.arange(4)] >= rates.max(axis=0) * (1 - RELATIVE_TAIL))


def test_shift_scale_and_rewards():
    cov = np.kron(np.eye(2), np.full((2, 2), 0.4)) + 0.2 + 0.4 * np.eye(4)
    groups = np.array([[0.0, 0.25], [0.125, 0.75]])
    base = price(two_level(groups.tolist(), cov), Query(batch=2))
    far = price(two_level((groups + 2.0**40).tolist(), cov), Query(batch=2))
    large = price(two_level((groups * 1e9).tolist(), cov * 1e18, 1e18), Query(batch=2))
    assert np.allclose(far.voc, base.voc, rtol=0, atol=CLOSED_FORM * 10)
    assert np.allclose(large.voc / 1e9, base.voc, rtol=0, atol=CLOSED_FORM * 10)
    edges = {"reward": [None, 0.5, 0, 0.25, 0, 0, 0], "discount": [None, 0.9, 0.8, 1.0, 0.7, 1.0, 0.5]}
    mixed = two_level(groups.tolist(), cov, **{k: reorder(v) for k, v in edges.items()})
    got = price(mixed, Query(batch=2))
    for leaf in range(4):
        assert abs(got.voc[leaf] - oracle.voc(mixed, leaf, 2, math.inf)) <= QUADRATURE


def reorder(column):
    """Columns over root, both actions, four leaves, put in the node order of `two_level`."""
    root, a, b, *leaves = column
    return [root, a, *leaves[:2], b, *leaves[2:]]


def test_one_action_and_all_sure():
    alone = two_level([[0.0, 0.1, 0.2]], np.full((3, 3), 0.3) + np.eye(3))
    assert price(alone, Query(batch=5)).voc.tolist() == [0, 0, 0]
    sure = price(two_level([[0.0, 0.1], [0.05, 0.0]], np.zeros((4, 4))), Query())
    assert sure.voc.tolist() == [0] * 4
    assert sure.value.tolist() == [0.1, 0.05]


@settings(deadline=None, max_examples=12, derandomize=True)
@given(
    seed=st.integers(0, 2**32),
    k=st.integers(1, 50),
    up=st.floats(-1e3, 1e3),
    times=st.sampled_from([1e-9, 1e-3, 7.0, 1e9]),
)
def test_properties(seed, k, up, times):
    rng = np.random.default_rng(seed)
    sizes = rng.integers(1, 4, size=rng.integers(2, 4))
    n = int(sizes.sum())
    same = np.equal.outer(np.repeat(np.arange(len(sizes)), sizes), np.repeat(np.arange(len(sizes)), sizes))
    cov = same * rng.uniform(0, 0.5) + rng.uniform(0, 0.5) + np.diag(rng.uniform(0.2, 2, size=n))
    mean, noise = rng.normal(size=n), 10 ** rng.uniform(-2, 2, size=n)

    def tree(mean, cov, noise, sizes=sizes):
        return two_level([row.tolist() for row in np.split(mean, np.cumsum(sizes)[:-1])], cov, noise)

    plain, scale = price(tree(mean, cov, noise), Query(batch=k)), scale_of(tree(mean, cov, noise))
    for column in (plain.voc, plain.error):
        assert np.all(np.isfinite(column))
        assert np.all(column >= 0)
    for more in (k + 1, 2**53):
        richer = price(tree(mean, cov, noise), Query(batch=more))
        assert np.all(richer.voc >= plain.voc - plain.error - richer.error)
    raised = price(tree(mean + up, cov, noise), Query(batch=k))
    assert np.all(np.abs(raised.voc - plain.voc) <= QUADRATURE * scale)
    larger = price(tree(mean * times, cov * times**2, noise * times**2), Query(batch=k))
    assert np.all(np.abs(larger.voc / times - plain.voc) <= QUADRATURE * scale)
    turn = np.arange(n)[::-1]
    turned = price(tree(mean[turn], cov[turn][:, turn], noise[turn], sizes[::-1]), Query(batch=k))
    assert np.all(np.abs(turned.voc[turn] - plain.voc) <= QUADRATURE * scale)
    drowned = price(tree(mean, cov, np.full(n, 1e20)), Query(batch=k))
    assert np.all(drowned.voc <= 10 * QUADRATURE * scale)


@pytest.mark.parametrize("rollouts", [0, 1, 30])
def test_effects_are_found_after_any_rollouts(rollouts):
    rng = np.random.default_rng(60)
    for _ in range(20):
        tree = nested_effects(rng, depth=int(rng.integers(1, 5)), branching=(1, 3), rollouts=rollouts)
        effects = find_effects(tree, tree.cov)
        assert effects is not None
        assert np.all(np.abs(effects.rho) <= 1)
        variance = effects.loading**2 + effects.rest**2
        assert np.allclose(variance, np.diag(tree.cov), rtol=CLOSED_FORM, atol=0)


def test_other_covariances_are_refused():
    rng = np.random.default_rng(61)
    factor = rng.normal(size=(6, 7))
    with pytest.raises(RefusedError, match="does not come from effects"):
        price(two_level([[0.0] * 3, [0.0] * 3], factor @ factor.T), Query())
    near = np.full((3, 3), 1.0) + 1e-6 * np.eye(3)
    with pytest.raises(RefusedError, match="nearly sure"):
        price(
            two_level([[0.0] * 3, [0.0]], np.block([[near, np.zeros((3, 1))], [np.zeros((1, 3)), 1]])),
            Query(),
        )
    tree = flat([0.0, 1.0], np.eye(2))
    for query in (Query(horizon=0), Query(horizon=5)):
        with pytest.raises(RefusedError, match="h infinite"):
            price(tree, query)
    with pytest.raises(RefusedError, match="decisions"):
        price(two_level([[0.0, 1.0]], np.eye(2), kind="chance"), Query())
