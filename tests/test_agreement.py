"""Every exact method against every slow one that applies.

ROWS, trees of the families as a search would meet them: a row is a family, what is asked, the method that
must answer, the oracle, and the rung of the ladder. Half of the candidates checked are the best of their
tree, half are drawn at random.

SMALL, trees small enough for all slow references: a row is a case; each reference that the case names is one
test. Trees come late in a search too, with spreads small beside the gaps: there a VOC down to 1e-30 of scale
keeps its digits, and the order of tiny values is right.
"""

from __future__ import annotations

import math
from collections.abc import Callable
from dataclasses import dataclass, replace
from functools import cache
from typing import Any

import numpy as np
import pytest
from builders import bush
from chance_trees import build
from chance_trees import leaf as sketch
from dense_trees import two_level
from fine_references import static_voc, win_loss_voc
from ladder import ORACLE_GRID, QUADRATURE, RELATIVE_TAIL, STANDARD_ERRORS, UNSEEN_DRAWS
from mp_reference import dynamic_win_loss_voc, gaussian_voc
from win_loss_builders import arms

from distill import oracle, voc
from distill.family import draw, load_family
from distill.oracle import chance, dense, independent, win_loss
from distill.query import Query, scale_of
from distill.sample_data import FAMILIES
from distill.tree import BeliefTree

assert oracle is not None


@dataclass(frozen=True)
class Row:
    """family, query and how many trees of at most `leaves` leaves; the method's name must hold `method`."""

    family: str
    query: Query
    method: str
    reference: Callable[[BeliefTree, int, int, float], float]
    rung: float  # of scale
    trees: int
    leaves: int = 100


def _independent(tree, leaf, k, h):
    return independent.voc(tree, leaf, k, h)


def _chance(tree, leaf, k, h):
    return chance.voc(tree, leaf, k, h)


def _dense(tree, leaf, k, h):
    return dense.static_voc(tree, leaf, k) if h == 0 else dense.voc(tree, leaf, k, h)


def _win_loss(tree, leaf, k, h):
    return win_loss.voc(tree, h, leaf, k)


ROWS = {
    "static flat": Row("cold-store", Query(0.0), "static independent", _independent, QUADRATURE, 60, 20),
    "static chance": Row(
        "crossing-traffic", Query(0.0, 3), "static independent", _independent, QUADRATURE, 40, 12
    ),
    "dynamic flat": Row("cold-store", Query(), "independent maximum", _independent, QUADRATURE, 10),
    "dynamic flat, wide": Row(
        "wide-gaussian", Query(batch=5), "independent maximum", _independent, QUADRATURE, 8
    ),
    "horizon flat": Row("cold-store", Query(7.5, 4), "independent maximum", _independent, QUADRATURE, 5),
    "dynamic chance": Row("crossing-traffic", Query(), "chance", _chance, ORACLE_GRID, 8, 4),
    "horizon chance": Row("crossing-traffic", Query(5.0, 4), "chance", _chance, ORACLE_GRID, 8, 4),
    "static dense": Row("shared-aisles", Query(0.0, 2), "dense", _dense, QUADRATURE, 40, 8),
    "dynamic dense": Row("shared-aisles", Query(math.inf, 2), "dynamic", _dense, QUADRATURE, 8, 4),
    "horizon dense": Row("shared-aisles", Query(6.0, 2), "dynamic", _dense, QUADRATURE, 8, 4),
    "static win/loss": Row("on-time", Query(0.0, 6), "win/loss", _win_loss, QUADRATURE, 40, 8),
    "dynamic win/loss": Row("on-time", Query(math.inf, 4), "win/loss", _win_loss, QUADRATURE, 10, 5),
    "horizon win/loss": Row("on-time", Query(3.0, 2), "win/loss", _win_loss, QUADRATURE, 10, 4),
}


@cache
def _trees(family: str, count: int, leaves: int) -> tuple[BeliefTree, ...]:
    loaded = load_family(FAMILIES / f"{family}.toml")
    found: list[BeliefTree] = []
    index = 0
    while len(found) < count:
        tree = draw(loaded, seed=17, index=index)
        index += 1
        if 2 <= tree.n_leaves <= leaves and (tree.has_chance or family != "crossing-traffic"):
            found.append(tree)
    return tuple(found)


@pytest.mark.slow
def test_500_random_trees_agree_with_the_oracle():
    _check(replace(ROWS["dynamic flat"], trees=500))


@pytest.mark.parametrize("name", ROWS)
def test_method_agrees_with_the_oracle_within_its_own_bound(name):
    _check(ROWS[name])


def _check(row):
    rng = np.random.default_rng(3)
    covered = 0
    for tree in _trees(row.family, row.trees, row.leaves):
        priced = voc.price(tree, row.query)
        assert row.method in priced.method
        for leaf in {int(np.argmax(priced.voc)), int(rng.integers(tree.n_leaves))}:
            try:
                reference = row.reference(tree, leaf, row.query.batch, row.query.horizon)
            except ValueError as e:  # the dense oracle says what it does not cover
                assert "decision" in str(e) or "three" in str(e), e
                continue
            covered += 1
            allowed = priced.error[leaf] + row.rung * scale_of(tree)
            assert abs(priced.voc[leaf] - reference) <= allowed, (tree.id, leaf, priced.voc[leaf], reference)
    assert covered >= row.trees / 2


@pytest.mark.parametrize("horizon", [0.0, math.inf])
def test_rate_is_the_best_of_all_batches_of_the_oracle(horizon):
    for tree in _trees("cold-store", 4, 6):
        priced = voc.price(tree, Query(horizon, None, 12))
        leaf = int(np.argmax(priced.voc))
        rate, batch = independent.rate(tree, leaf, 12, horizon)
        assert abs(priced.voc[leaf] - rate) <= QUADRATURE * scale_of(tree)
        assert priced.batch[leaf] == batch


# ---------------------------------------------------------------- small trees, every slow reference

_NOTHING = 1e-30  # of scale: below it relative accuracy is not promised
_LAST_DIGITS = 1e-37  # of scale: what references of 40 digits leave of a difference that is 0


def _spreads(rng, n):
    """Variances; late in a search they are small beside gaps of about 1."""
    return rng.uniform(0.3, 2.0, n) * 10.0 ** rng.choice([0.0, -1.5, -2.3])


def _pairs(rng):
    """Two or three actions of one or two leaves."""
    sizes = rng.integers(1, 3, size=rng.integers(2, 4))
    sizes[0] = 2
    return bush(
        [rng.normal(size=n).tolist() for n in sizes],
        [_spreads(rng, n).tolist() for n in sizes],
        noise_var=float(rng.lognormal() * 10.0 ** rng.choice([0, -2])),
    )


def _lotteries(rng):
    """Two actions: odds of a choice or a leaf, and a choice."""

    def choice():
        m, v, n = rng.normal(size=2), _spreads(rng, 2), rng.lognormal(size=2)
        return ("max", [sketch(*map(float, one)) for one in zip(m, v, n, strict=True)])

    p = float(rng.uniform(0.2, 0.8))
    one = sketch(float(rng.normal()), float(_spreads(rng, 1)[0]))
    first = ("edge", float(rng.normal(scale=0.3)), 0.9, ("mean", [(p, choice()), (1 - p, one)]))
    return build(first, choice())


def _effects(rng):
    """Groups that share an effect, all share another."""
    cov = np.kron(np.eye(2), np.full((2, 2), rng.uniform(0.1, 0.6))) + rng.uniform(0.0, 0.4)
    cov = cov + np.diag(rng.uniform(0.4, 2, size=4))
    return two_level(rng.normal(scale=0.5, size=(2, 2)).tolist(), cov, rng.uniform(0.5, 4, size=4))


def _any_covariance(rng):
    factor = rng.normal(size=(4, 5)) / 2
    return two_level(rng.normal(scale=0.5, size=(2, 2)).tolist(), factor @ factor.T, rng.uniform(0.5, 4, 4))


def _trials(rng):
    return arms(
        *[[tuple(map(int, ab)) for ab in rng.integers(1, 9, (n, 2))] for n in (2, rng.integers(1, 3))]
    )


def _beta_integrals(tree, leaf, k, _horizon):
    rows = [(int(a), int(b)) for a, b in zip(tree.alpha, tree.beta, strict=True)]
    actions = [rows[:2], rows[2:]]
    return dynamic_win_loss_voc(actions, leaf // 2, leaf % 2 if leaf < 2 else leaf - 2, k)


_RUNS, _OUTCOMES = 16, 300  # of Monte Carlo


def _sampled(tree, leaf, k, h):
    """(mean, standard error) of plain nested sampling over independent runs."""
    each = [
        dense.monte_carlo_voc(tree, leaf, k, h, np.random.default_rng(run), outer=_OUTCOMES, inner=2000)[0]
        for run in range(_RUNS)
    ]
    return float(np.mean(each)), float(np.std(each, ddof=1) / math.sqrt(_RUNS))


MPMATH, LINES = "mpmath at 30 digits and more", "enumeration of lines and outcomes"
QUADRATURES, MONTE_CARLO = "adaptive quadrature", "Monte Carlo"
_LINES = {
    LINES: lambda tree, leaf, k, _: dense.static_voc_policies(tree, leaf, k),
    MPMATH: lambda tree, leaf, k, _: static_voc(tree, leaf, k),
    MONTE_CARLO: _sampled,
}
_SMOOTH = {MPMATH: gaussian_voc, MONTE_CARLO: _sampled}


@dataclass(frozen=True)
class Small:
    """relative : whether tiny values keep their digits too, as closed forms and quadrature do."""

    tree: Callable[[np.random.Generator], BeliefTree]
    query: Query
    method: str
    references: dict[str, Callable[..., Any]]
    relative: bool = True


SMALL = {
    "static flat": Small(_pairs, Query(0.0, 3), "static independent", {**_LINES, QUADRATURES: _independent}),
    "static chance": Small(_lotteries, Query(0.0, 2), "static independent", {**_LINES, QUADRATURES: _dense}),
    "static dense": Small(_effects, Query(0.0, 4), "static dense", {**_LINES, QUADRATURES: _dense}),
    "dynamic flat": Small(
        _pairs, Query(math.inf, 3), "independent maximum", {**_SMOOTH, QUADRATURES: _independent}
    ),
    "horizon flat": Small(
        _pairs, Query(4.0, 3), "independent maximum", {**_SMOOTH, QUADRATURES: _independent}
    ),
    "dynamic chance": Small(_lotteries, Query(math.inf, 2), "chance", {**_SMOOTH, QUADRATURES: _dense}),
    "horizon chance": Small(
        _lotteries, Query(4.0, 2), "chance", {**_SMOOTH, QUADRATURES: _dense}, relative=False
    ),
    "dynamic ancestral": Small(
        _effects, Query(math.inf, 2), "ancestral", {**_SMOOTH, QUADRATURES: _dense}, relative=False
    ),
    "dynamic dense": Small(
        _any_covariance, Query(math.inf, 2), "dynamic", {**_SMOOTH, QUADRATURES: _dense}, relative=False
    ),
    "horizon dense": Small(
        _any_covariance, Query(5.0, 2), "dynamic", {**_SMOOTH, QUADRATURES: _dense}, relative=False
    ),
    "static win/loss": Small(
        _trials, Query(0.0, 5), "win/loss", {LINES: lambda tree, leaf, k, _: win_loss_voc(tree, 0, k)[leaf]}
    ),
    "horizon win/loss": Small(
        _trials,
        Query(3.0, 2),
        "win/loss",
        {LINES: lambda tree, leaf, k, _: win_loss_voc(tree, 3, k)[leaf], QUADRATURES: _win_loss},
    ),
    "dynamic win/loss": Small(
        _trials, Query(math.inf, 4), "win/loss", {MPMATH: _beta_integrals, QUADRATURES: _win_loss}
    ),
}
_PAIRS = [(name, reference) for name, row in SMALL.items() for reference in row.references]


def _check_small(name, reference, trees):
    row, rng = SMALL[name], np.random.default_rng(23)
    k, h = row.query.batch, row.query.horizon
    tiny = checked = 0
    for _ in range(trees):
        tree = row.tree(rng)
        priced, scale = voc.price(tree, row.query), scale_of(tree)
        assert row.method in priced.method
        leaf = int(rng.integers(tree.n_leaves))
        truth, off = row.references[reference](tree, leaf, k, h), 0.0
        if reference == MONTE_CARLO:
            unseen = UNSEEN_DRAWS / (_RUNS * _OUTCOMES)  # late in a search no draw may change the choice
            truth, off = truth[0], STANDARD_ERRORS * truth[1] + unseen * scale
        elif reference == QUADRATURES:
            off = QUADRATURE * scale
        elif reference == MPMATH:
            off = _LAST_DIGITS * scale
        miss = float(abs(float(priced.voc[leaf]) - truth))
        assert miss <= priced.error[leaf] + off, (name, tree, leaf, float(truth))
        checked += 1
        if row.relative and off <= _NOTHING * scale and truth > _NOTHING * scale:
            assert miss <= RELATIVE_TAIL * truth
            tiny += truth < 1e-9 * scale
    return checked, tiny


# Seconds a label.
_SLOW = [("dynamic win/loss", MPMATH), ("dynamic ancestral", MPMATH)]
_SLOW += [(name, MPMATH) for name in SMALL if name.startswith("horizon")]


@pytest.mark.parametrize(("name", "reference"), [p for p in _PAIRS if p[1] != MONTE_CARLO and p not in _SLOW])
def test_small_trees_agree_with_every_slow_reference(name, reference):
    _check_small(name, reference, 1 if reference == MPMATH else 2)


@pytest.mark.slow
@pytest.mark.parametrize(("name", "reference"), _PAIRS)
def test_many_small_trees_agree_with_every_slow_reference(name, reference):
    many = {MPMATH: 40, LINES: 300, QUADRATURES: 40, MONTE_CARLO: 12}[reference]
    checked, tiny = _check_small(name, reference, many)
    assert checked == many
    if name in ("static flat", "static chance", "dynamic flat", "dynamic chance") and reference == MPMATH:
        assert tiny > 0
