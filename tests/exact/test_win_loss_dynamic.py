"""Exact win/loss VOC, dynamic: published fractions, tails in fractions, the oracle, properties, extremes."""

from __future__ import annotations

import json
import math
from fractions import Fraction
from pathlib import Path

import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st
from ladder import CLOSED_FORM, QUADRATURE, RELATIVE_TAIL, ROUNDINGS
from win_loss_builders import arms, change, random_tree

from distill.exact.win_loss import price
from distill.oracle import win_loss as oracle
from distill.query import Query, scale_of
from distill.record import from_record
from distill.tree import BeliefTree

PUBLISHED = json.loads((Path(__file__).parents[1] / "data" / "published_win_loss.json").read_text())[
    "entries"
]
ONE = Query()


def leaves_of(entry: dict[str, object]) -> list[tuple[float, float]]:
    inputs = entry["inputs"]
    if "arms" in inputs:
        return [tuple(arm) for arm in inputs["arms"]]
    return [(inputs.get("a", 1), inputs.get("b", 1))] * inputs["k"]


@pytest.mark.parametrize(
    "entry", [pytest.param(e, id=e["id"]) for e in PUBLISHED if e["id"].startswith("emax")]
)
def test_published_expected_maximum(entry):
    value = price(arms(leaves_of(entry)), ONE).value[0]
    assert value == pytest.approx(float(Fraction(entry["exact"])), rel=CLOSED_FORM)


@pytest.mark.parametrize("entry", [e for e in PUBLISHED if e["id"].startswith("evpi")])
def test_published_perfect_information(entry):
    priced = price(arms([(1, 1)], [(1, 1, 0.25, 0.75)]), Query(batch=2**53))
    truth = float(Fraction(entry["exact"]))
    assert abs(priced.voc[0] - truth) <= priced.error[0] < RELATIVE_TAIL


def exact_voc(actions: list[list[tuple[int, int]]], action: int, leaf: int, k: int) -> Fraction:
    values = [oracle.expected_max_of_whole_betas(leaves) for leaves in actions]
    rival = max(v for i, v in enumerate(values) if i != action)
    a, b = actions[action][leaf]
    voc = Fraction(0)
    for x, odds in enumerate(oracle.beta_binomial(Fraction(a), Fraction(b), k)):
        leaves = [*actions[action]]
        leaves[leaf] = (a + x, b + k - x)
        voc += odds * (max(oracle.expected_max_of_whole_betas(leaves), rival) - max(values[action], rival))
    return voc


@pytest.mark.parametrize(
    ("actions", "k"),
    [
        ([[(1, 1), (1, 1)], [(1, 1), (1, 1)]], 1),
        ([[(2, 3), (3, 2), (1, 4)], [(4, 3), (1, 1)]], 5),
        ([[(1, 12), (1, 10)], [(12, 3), (2, 2)]], 12),
        ([[(15, 2), (1, 9)], [(2, 14), (1, 12)]], 20),
        ([[(1, 30), (1, 1)], [(25, 1)]], 24),
        ([[(1, 30), (1, 9)], [(30, 11)]], 90),
    ],
)
def test_agrees_with_fractions_relatively(actions, k):
    """Late in a search, too: VOC down to 1e-28 keeps its digits."""
    tree = arms(*actions)
    priced = price(tree, Query(batch=k))
    i = 0
    for action, leaves in enumerate(actions):
        for leaf in range(len(leaves)):
            truth = exact_voc(actions, action, leaf, k)
            assert abs(priced.voc[i] - truth) <= RELATIVE_TAIL * truth
            assert abs(priced.voc[i] - truth) <= priced.error[i]
            i += 1


def random_bush(rng: np.random.Generator, kind: str) -> list[list[tuple[float, ...]]]:
    def leaf() -> tuple[float, ...]:
        if kind == "fresh":
            return tuple(rng.integers(1, 6, 2).tolist())
        if kind == "halves":
            return tuple((rng.integers(1, 8, 2) / 2).tolist())
        if kind == "searched":
            return tuple(rng.integers(1, 60, 2).tolist())
        a, b, low, width = *np.exp(rng.normal(0.5, 1.3, 2)), rng.normal() * 0.2, rng.uniform(0.5, 1.2)
        return (float(a), float(b), float(low), float(low + width))

    return [[leaf() for _ in range(rng.integers(1, 4))] for _ in range(rng.integers(2, 4))]


@pytest.mark.parametrize("kind", ["fresh", "halves", "searched", "odd"])
@pytest.mark.parametrize("seed", range(6))
def test_agrees_with_the_oracle(seed, kind):
    rng = np.random.default_rng([seed, len(kind)])
    tree = arms(*random_bush(rng, kind))
    k = int(rng.integers(1, 9))
    priced = price(tree, Query(batch=k))
    scale = scale_of(tree)
    assert priced.value == pytest.approx(
        [float(v) for v in oracle.value_now(tree, math.inf)], abs=QUADRATURE * scale
    )
    for i in range(tree.n_leaves):
        miss = abs(priced.voc[i] - oracle.voc(tree, math.inf, i, k))
        assert miss <= QUADRATURE * scale
        assert miss <= priced.error[i] + 10 * CLOSED_FORM  # what the oracle itself is good to


def test_agrees_with_the_oracle_below_rewards_and_discounts():
    for seed in range(6):
        tree = random_tree(np.random.default_rng(seed), chance=False)
        priced = price(tree, Query(batch=3))
        for i in range(tree.n_leaves):
            assert abs(priced.voc[i] - oracle.voc(tree, math.inf, i, 3)) <= QUADRATURE * scale_of(tree)


@pytest.mark.parametrize(
    ("leaves", "rival", "k"),
    [
        ([(2.0, 40.0), (3.0, 9.0)], (30.0, 20.0), 120),  # no outcome of 32 trials changes the choice
        ([(40.5, 2.5), (3.0, 9.0)], (20.0, 20.0), 120),
        ([(5e5, 5e5), (1.0, 3.0)], (5e5, 4.697e5), 3),  # a million trials behind it
        ([(0.02, 0.03), (0.5, 0.6)], (1.0, 1.2), 4),
    ],
)
def test_long_walks_and_far_ends_agree_with_the_oracle(leaves, rival, k):
    tree = arms(leaves, [rival])
    priced = price(tree, Query(batch=k))
    for i in range(2):
        truth = oracle.voc(tree, math.inf, i, k)
        assert abs(priced.voc[i] - truth) <= QUADRATURE * scale_of(tree)
    assert priced.voc.max() > 0


@pytest.mark.parametrize("kind", ["fresh", "halves", "searched", "odd"])
def test_rate_is_the_largest_over_every_batch(kind):
    for seed in range(3):
        tree = arms(*random_bush(np.random.default_rng([seed, 7]), kind))
        remaining = 60
        rates = np.array([price(tree, Query(batch=k)).voc / k for k in range(1, remaining + 1)])
        priced = price(tree, Query(batch=None, remaining=remaining))
        assert priced.voc == pytest.approx(rates.max(axis=0), rel=QUADRATURE, abs=0)
        at_batch = rates[priced.batch - 1, np.arange(tree.n_leaves)]
        assert at_batch == pytest.approx(priced.voc, rel=QUADRATURE, abs=0)
        assert np.all(priced.batch[priced.voc == 0] == 1)


def test_lone_leaves_are_worth_what_they_are_statically():
    """With one leaf an action there is nothing to choose later."""
    tree = arms([(3, 2)], [(2.5, 1)], [(1, 1)])
    for k in (1, 7):
        now, later = price(tree, Query(horizon=0, batch=k)), price(tree, Query(batch=k))
        assert later.voc == pytest.approx(now.voc, rel=CLOSED_FORM, abs=CLOSED_FORM)


exponents = st.one_of(st.integers(1, 40).map(float), st.floats(0.05, 60))
bushes = st.lists(st.lists(st.tuples(exponents, exponents), min_size=1, max_size=3), min_size=1, max_size=3)


@settings(deadline=None, max_examples=60, derandomize=True)
@given(actions=bushes, k=st.integers(1, 40), up=st.floats(-1e3, 1e3), times=st.floats(1e-6, 1e6))
def test_dynamic_properties(actions, k, up, times):
    tree = arms(*actions)
    plain = price(tree, Query(batch=k))
    scale = scale_of(tree)
    assert np.all(plain.voc >= 0)
    assert np.all(np.isfinite(plain.voc))
    assert np.all(np.isfinite(plain.error))
    assert np.all(price(tree, Query(batch=k + 1)).voc >= plain.voc - plain.error)
    endless = price(tree, Query(batch=2**53))
    assert np.all(plain.voc <= endless.voc + endless.error + plain.error)
    if len(actions) == 1:
        assert np.all(plain.voc == 0)
    shifted = price(change(tree, low=tree.low + up, high=tree.high + up), Query(batch=k))
    assert np.all(np.abs(shifted.voc - plain.voc) <= shifted.error + plain.error + CLOSED_FORM * scale)
    scaled = price(change(tree, low=tree.low * times, high=tree.high * times), Query(batch=k))
    assert scaled.voc == pytest.approx(plain.voc * times, rel=RELATIVE_TAIL, abs=CLOSED_FORM * scale * times)
    turned = price(arms(*[leaves[::-1] for leaves in actions[::-1]]), Query(batch=k))
    assert turned.voc[::-1] == pytest.approx(plain.voc, rel=RELATIVE_TAIL, abs=CLOSED_FORM * scale)


def test_mirrored_leaves_swap_wins_and_losses():
    """p -> 1 - p turns the best of an action into the worst, so mirror a lone leaf against a lone leaf."""
    one = price(arms([(3.5, 1.2)], [(2, 2)]), Query(batch=5)).voc
    other = price(arms([(1.2, 3.5)], [(2, 2)]), Query(batch=5)).voc
    assert one == pytest.approx(other, rel=CLOSED_FORM)


def test_extremes_are_finite_and_bounded():
    tree = arms(
        [(1e6, 1e6), (1e-3, 1e-3), (0.5, 1e5)],
        [(1.0, 1e6, -1e12, 1e12), (5.0, 1.0, 0.0, 1e-12)],
        [(1e15, 1.0), (1e-300, 1.0), (2.0, 2.0, 0.5, 0.5 + 1e-15)],
    )
    for query in (ONE, Query(batch=1000), Query(batch=None, remaining=500)):
        priced = price(tree, query)
        assert np.all(np.isfinite(priced.voc))
        assert np.all(priced.voc >= 0)
        assert np.all(np.isfinite(priced.error))
        assert np.all(priced.error >= 0)


def test_endless_budget_is_certified():
    tree = arms([(1, 1), (2, 1)], [(2, 2), (3, 1)])
    endless, near = (price(tree, Query(batch=None, remaining=n)) for n in (2**53, 200))
    assert endless.voc == pytest.approx(near.voc, rel=CLOSED_FORM)
    assert np.all(endless.error <= CLOSED_FORM)


def fan(second: str, third: str) -> BeliefTree:
    """Two actions; the first a node with two children, each a node with two leaves; rewards, discounts."""
    none = [None] * 4
    return from_record(
        {
            "format": "belief-tree/1",
            "parent": [-1, 0, 1, 1, 2, 2, 3, 3, 0],
            "kind": ["decision", second, third, third, *["leaf"] * 5],
            "reward": [0, 0.2, 0.1, -0.1, 0, 0.05, 0, 0, 0.231],
            "discount": [1, 0.9, 0.95, 1, 1, 0.9, 1, 1, 1],
            "prob": [1, 1, *([0.3, 0.7] if second == "chance" else [1, 1]),
                     *([0.4, 0.6, 0.5, 0.5] if third == "chance" else [1] * 4), 1],
            "alpha": [*none, 1, 3, 2, 1.5, 3],
            "beta": [*none, 1, 2, 2, 0.5, 2],
            "low": [*none, 0, 0, 0, -0.2, 0],
            "high": [*none, 1, 1, 1, 1, 1],
        }
    )  # fmt: skip


def test_chance_before_the_choice_adds_up_what_the_outcomes_are_worth():
    """V of the first action is the sum of two expected maxima: priced against a tree for each outcome."""
    tree = fan("chance", "decision")
    k = 3
    priced = price(tree, Query(batch=k))
    outcomes = []  # (alpha, beta, low, high) of both leaves of each outcome
    for weight, constant, leaves, rewards, discounts in (
        (0.9 * 0.3 * 0.95, 0.9 * 0.3 * 0.1, (0, 1), (0, 0.05), (1, 0.9)),
        (0.9 * 0.7, -0.9 * 0.7 * 0.1, (2, 3), (0, 0), (1, 1)),
    ):
        rows = []
        for i, r, g in zip(leaves, rewards, discounts, strict=True):
            low, high = (weight * (r + g * x) + constant for x in (tree.low[i], tree.high[i]))
            rows.append((float(tree.alpha[i]), float(tree.beta[i]), float(low), float(high)))
        outcomes.append(rows)
    values = [float(oracle.value_now(arms(rows), math.inf)[0]) for rows in outcomes]
    assert priced.value[0] == pytest.approx(0.2 + sum(values), abs=QUADRATURE)
    for o, rows in enumerate(outcomes):
        rival = float(priced.value[1]) - 0.2 - values[1 - o]
        stand_in = arms(rows, [(1.0, 1.0, rival - 1e-9, rival + 1e-9)])
        for j in range(2):
            truth = oracle.voc(stand_in, math.inf, j, k)
            assert abs(priced.voc[2 * o + j] - truth) <= 2 * QUADRATURE
    assert np.all(priced.voc[:4] > 0)


@pytest.mark.parametrize("h", [1, 2])
def test_chance_before_the_choice_at_finite_horizons(h):
    tree = fan("chance", "decision")
    priced = price(tree, Query(horizon=h, batch=2))
    assert priced.value == pytest.approx([float(v) for v in oracle.value_now(tree, h)], rel=CLOSED_FORM)
    for i in range(tree.n_leaves):
        miss = abs(priced.voc[i] - oracle.voc(tree, h, i, 2))
        assert miss <= CLOSED_FORM * scale_of(tree)
        assert miss <= priced.error[i]


def test_leaves_too_narrow_to_tell_from_sure_are_sure():
    """A floor under the others, and worth no trial; also one that lies above everything."""
    for sure in (0.2, 0.55, 3.0):
        narrow = (2.0, 3.0, sure, sure + 1e-14)
        plain = price(arms([(1.0, 1.0), (2.0, 1.0)], [(4, 1.5)]), Query(batch=4))
        tree = arms([(1.0, 1.0), narrow, (2.0, 1.0)], [(4, 1.5)])
        for query in (Query(batch=4), Query(horizon=3, batch=4)):
            priced = price(tree, query)
            assert priced.voc[1] <= priced.error[1] <= ROUNDINGS
            value = float(oracle.value_now(tree, query.horizon)[0])
            assert priced.value[0] == pytest.approx(value, rel=QUADRATURE)
            if sure == 3.0:
                assert np.all(priced.voc <= priced.error)
            for i in (0, 2):
                truth = oracle.voc(tree, query.horizon, i, 4)
                assert abs(priced.voc[i] - truth) <= QUADRATURE * scale_of(tree)
    assert plain.voc.max() > 0
