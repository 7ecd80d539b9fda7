"""Peers that read a tree: exact where they must be, unbiased where they sample, picks as the rules do."""

from __future__ import annotations

import math
from dataclasses import replace
from pathlib import Path

import mpmath as mp
import numpy as np
import pytest
from chance_trees import build, leaf
from ladder import CLOSED_FORM, CLOSED_FORM_RATE, EXACT, KINK_OF_NINE, SAMPLED_BEST, STANDARD_ERRORS
from leaf_tables import table

from distill.allocation import Search
from distill.backup import backup_of
from distill.family import draw, load_family
from distill.query import Query
from distill.table_peer_kernels import matched_on_table
from distill.timing import tree_of
from distill.tree_peer_kernels import NODES, SHARES, larger
from distill.tree_peers import MOMENTS, SAMPLES, Held, tree_peers
from distill.voc import price

FAMILIES = Path(__file__).parents[1] / "datasets" / "families"
RATE = {"horizon": "inf", "batch": None}
TWO = {"horizon": "inf", "batch": 2}


def held(tree, remaining: int = 50) -> Held:
    return Held.of(backup_of(tree).rows(), remaining, tree)


def sums():
    """Two lotteries over normals and a sure thing: all values are normal, so moments are all there is."""
    return build(
        ("mean", [(0.5, leaf(0.0, 2.0)), (0.5, leaf(0.4, 1.0))]),
        ("mean", [(0.25, leaf(0.1, 1.0, 0.5)), (0.75, ("edge", 0.1, 0.9, leaf(0.2, 0.5)))]),
        leaf(0.2, 0.0),
    )


def assert_samples_come_close(tree, exact, samples: int = 600, draws: int = 30) -> None:
    """The largest of estimates is biased by about one over the root of the samples; many show the rest."""
    peer, case = tree_peers(TWO, samples)[SAMPLES], held(tree)
    found = np.array([peer(case) for _ in range(draws)])
    spread = found.std(axis=0) / math.sqrt(draws)
    assert exact.max() > 1e-3
    slack = STANDARD_ERRORS * spread + SAMPLED_BEST * exact + CLOSED_FORM
    assert np.all(np.abs(found.mean(axis=0) - exact) <= slack)


def test_the_static_peers_are_the_exact_engine_and_the_first_order_reads_rows() -> None:
    for name in ("crossing-traffic", "shared-aisles", "on-time"):
        tree = draw(load_family(FAMILIES / f"{name}.toml"), 3, 2)
        ours = tree_peers(RATE, 4)
        one = ours["static VOC of one rollout"](held(tree))
        assert np.array_equal(one, price(tree, Query(0.0, 1, 50)).voc)
        rate = ours["static closed form"](held(tree))
        assert np.array_equal(rate, price(tree, Query(0.0, None, 50)).voc)
        first = ours["first-order closed form"](held(tree))
        assert first.shape == (tree.n_leaves,)
        assert np.all(first >= 0)


@pytest.mark.parametrize("name", [MOMENTS, SAMPLES])
def test_lotteries_of_normals_are_valued_as_they_are(name: str) -> None:
    tree = sums()
    exact = price(tree, Query(math.inf, 2)).voc
    large = exact > 0.05 * exact.max()
    assert large.sum() >= 3
    if name == MOMENTS:
        got = tree_peers(TWO, 4)[name](held(tree))
        np.testing.assert_allclose(got[large], exact[large], rtol=KINK_OF_NINE)
        assert got[list(tree.var).index(0)] == 0
        return
    assert_samples_come_close(tree, exact)


def test_moments_on_a_tree_of_leaf_tables_are_those_on_the_table() -> None:
    t = table(np.random.default_rng(4), 12, 6)
    t["action"] = np.repeat(np.arange(6), 2)
    flat = (
        t["gain"] * t["mean"] + t["offset"],
        t["gain"] ** 2 * t["var"],
        t["gain"] ** 2 * t["noise_var"],
        t["action"],
    )
    expected = matched_on_table(*flat, 50, 2, NODES, SHARES)
    got = tree_peers(TWO, 4)[MOMENTS](held(tree_of(t)))
    large = expected > 1e-6 * expected.max()
    assert large.sum() > 3
    np.testing.assert_allclose(got[large], expected[large], rtol=CLOSED_FORM_RATE)


def test_moments_do_not_depend_on_where_zero_is() -> None:
    """Means that a double holds to 2^-20 beside 2^30, and halves and quarters: no input is rounded."""

    def means(offset: float, on_table: bool):
        if on_table:
            m = offset + np.array([0.0, 0.25, 0.125, -1.5, 2.0**-20, 0.5])
            v, noise = np.array([1.0, 2.0, 0.5, 1.0, 1.0, 0.0]), np.ones(6)
            action = np.array([0, 0, 1, 1, 2, 2])
            return matched_on_table(m, v, noise, action, 50, 0, NODES, SHARES)
        some = ("max", [leaf(offset, 1.0), leaf(offset + 0.25, 2.0)])
        tree = build(
            ("mean", [(0.5, some), (0.5, leaf(offset + 0.5, 1.0))]),
            ("max", [("mean", [(0.75, leaf(offset + 0.5, 1.0)), (0.25, some)]), leaf(offset - 1.5, 0.5)]),
            leaf(offset + 0.375, 0.0),
        )
        return tree_peers(RATE, 4)[MOMENTS](held(tree))

    for on_table in (True, False):
        near = means(0.0, on_table)
        assert np.count_nonzero(near > 0.05) >= 3
        for offset in (2.0**30, -(2.0**30)):  # a billion standard deviations from 0
            np.testing.assert_allclose(means(offset, on_table), near, rtol=CLOSED_FORM)


def test_moments_follow_a_maximum_below_a_lottery() -> None:
    tree = build(
        ("mean", [(0.6, ("max", [leaf(0.0, 1.0), leaf(0.1, 2.0)])), (0.4, leaf(0.5, 1.0))]),
        ("max", [leaf(0.4, 0.5), leaf(0.3, 0.7)]),
    )
    exact = price(tree, Query(math.inf, 2)).voc
    got = tree_peers(TWO, 4)[MOMENTS](held(tree))
    assert int(np.argmax(got)) == int(np.argmax(exact))
    np.testing.assert_allclose(got, exact, rtol=KINK_OF_NINE)
    assert_samples_come_close(tree, exact)


def test_correlated_leaves_are_sampled_together() -> None:
    """One leaf an action: no later choice is left, so the dynamic value is the static one, exact."""
    tree = replace(
        build(leaf(0.0, 1.0), leaf(0.2, 1.0), leaf(0.1, 1.0)),
        var=None,
        cov=np.array([[1.0, 0.8, 0.0], [0.8, 1.5, 0.0], [0.0, 0.0, 0.5]]),
    )
    exact = price(tree, Query(0.0, 2)).voc
    assert_samples_come_close(tree, exact, 300)
    singular = replace(tree, cov=np.ones((3, 3)))  # all move as one: no rollout changes the choice
    assert np.all(tree_peers(TWO, 16)[SAMPLES](held(singular)) <= CLOSED_FORM)


def test_wins_are_sampled_as_wins() -> None:
    columns = {
        "alpha": [1.0, 1.0, 3.0],
        "beta": [1.0, 1.0, 2.0],
        "low": [0.0, -0.1, 0.1],
        "high": [1.0, 1.2, 0.9],
    }
    place = {"gain": [1.0, 1.0, 1.0], "offset": [0.0, 0.0, 0.0], "cost": [0.0, 0.0, 0.0]}
    t = {name: np.array(x) for name, x in {**columns, **place}.items()} | {"action": np.arange(3)}
    tree = tree_of(t)
    assert_samples_come_close(tree, price(tree, Query(math.inf, 2)).voc, 300)


def test_uct_and_thompson_pick_as_the_allocation_rules_do() -> None:
    for name in ("crossing-traffic", "on-time", "shared-aisles"):
        tree = draw(load_family(FAMILIES / f"{name}.toml"), 3, 4)
        for peer, rule in (("UCT", "uct"), ("Thompson sampling", "thompson")):
            ours = tree_peers(RATE, 4, seed=6)[peer]
            rng, search = np.random.default_rng(6), Search(tree)
            for _ in range(20):
                assert int(np.argmax(ours(held(tree)))) == search.pick(rule, rng, remaining=50)


def test_a_tree_without_counts_counts_what_its_beliefs_are_worth() -> None:
    tree = build(leaf(0.0, 1.0, 9.0), leaf(0.0, 1.0, 2.0), leaf(0.0, 1.0, 5.0))
    assert tree.count is None
    case = held(tree)
    assert case.belief.visits.tolist() == [9, 2, 5]
    assert int(np.argmax(tree_peers(RATE, 4)["UCT"](case))) == 1


def test_one_action_and_nothing_left_are_worth_nothing() -> None:
    alone = build(("max", [leaf(0.0, 1.0), leaf(0.1, 1.0)]))
    for name in (MOMENTS, SAMPLES):
        assert not np.any(tree_peers(RATE, 8)[name](held(alone)))
        assert not np.any(tree_peers(RATE, 8)[name](held(sums(), remaining=0)))


def test_a_rate_is_that_of_the_best_batch_by_the_static_threshold() -> None:
    tree = sums()
    got = tree_peers(RATE, 4)[MOMENTS](held(tree))
    exact = price(tree, Query(math.inf, None, 50))
    assert int(np.argmax(got)) == int(np.argmax(exact.voc))
    one = tree_peers({"horizon": "inf", "batch": 1}, 4)[MOMENTS](held(tree))
    first = exact.batch == 1
    assert first.any()
    np.testing.assert_allclose(got[first], one[first], rtol=CLOSED_FORM)


def moments_by_integration(gap: float, upper: float, lower: float) -> tuple[mp.mpf, mp.mpf]:
    """Mean and variance of the larger of N(0, upper) and N(-gap, lower), integrated over its density."""
    with mp.workdps(30):
        s, r = mp.sqrt(upper), mp.sqrt(lower)

        def density(x: mp.mpf) -> mp.mpf:
            own = mp.npdf(x, 0, s) * mp.ncdf((x + gap) / r)
            return own + mp.npdf(x, -gap, r) * mp.ncdf(x / s)

        cuts = sorted({c + k * w for c, w in ((mp.mpf(0), s), (-mp.mpf(gap), r)) for k in range(-12, 13, 3)})
        first = mp.quad(lambda x: x * density(x), cuts)
        return first, mp.quad(lambda x: (x - first) ** 2 * density(x), cuts)


@pytest.mark.parametrize("variances", [(1.0, 1.0), (1.0, 0.01), (0.01, 1.0)])
@pytest.mark.parametrize("gap", [0.0, 0.5, 3.0, 6.0])
def test_the_larger_of_two_keeps_its_digits_far_from_0(gap: float, variances: tuple[float, float]) -> None:
    upper, lower = variances
    lift, var = moments_by_integration(gap, upper, lower)
    for offset in (0.0, 1e3, -1e3, 1e6, -1e6, 1e9):
        with mp.workdps(30):
            mean = float(mp.mpf(offset + gap) + lift)
        pair = ((offset + gap, upper), (offset, lower))
        for (m1, v1), (m2, v2) in (pair, pair[::-1]):
            got = larger(m1, v1, m2, v2)
            assert got[0] == pytest.approx(mean, rel=CLOSED_FORM, abs=CLOSED_FORM)
            assert got[1] == pytest.approx(float(var), rel=CLOSED_FORM, abs=EXACT)


def test_the_larger_of_two_far_apart_is_the_larger_alone() -> None:
    assert larger(1e150, 0.0, -1e150, 1e-323) == (1e150, 0.0)  # sds apart beyond the range of doubles
    assert larger(2.0, 0.0, 2.0, 0.0) == (2.0, 0.0)
    assert larger(0.0, 4.0, 100.0, 1.0) == (100.0, 1.0)
