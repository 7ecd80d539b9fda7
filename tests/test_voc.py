"""The dispatcher: which method prices what, tolerances, many trees at once."""

from __future__ import annotations

import math
from pathlib import Path

import numpy as np
import pytest
from builders import bush, chance_record, flat_record, win_loss_record
from flat_trees import deep_tree, mixed_bush

from distill import shards, voc
from distill.errors import RefusedError, ToleranceError
from distill.exact import dynamic_flat
from distill.query import Query, scale_of
from distill.record import from_record

SAMPLE = Path(__file__).parents[1] / "datasets" / "sample"


def price(tree, horizon=math.inf, batch=1, **more):
    return voc.price(tree, Query(horizon, batch, **more))


@pytest.mark.parametrize(
    ("record", "horizon", "method"),
    [
        (flat_record(), 0.0, "static independent, closed form"),
        (flat_record(), 2.0, "independent maximum, quadrature"),
        (flat_record(), math.inf, "independent maximum, quadrature"),
        (chance_record(), 0.0, "static independent, closed form"),
    ],
)
def test_names_the_method(record, horizon, method):
    assert price(from_record(record), horizon).method == method


@pytest.mark.parametrize(
    ("record", "horizon", "module"),
    [
        (chance_record(), math.inf, "dynamic_chance"),
        (flat_record(var=None, cov=np.eye(3).tolist()), 0.0, "static_dense"),
        (flat_record(var=None, cov=np.eye(3).tolist()), math.inf, "dynamic_dense"),
        (win_loss_record(), math.inf, "win_loss"),
        (win_loss_record(), 0.0, "win_loss"),
    ],
)
def test_sends_each_case_to_its_module_and_refuses_by_name_without_it(monkeypatch, record, horizon, module):
    tree = from_record(record)
    asked = []

    def find(name):
        asked.append(name)

    monkeypatch.setattr(voc.importlib.util, "find_spec", find)
    with pytest.raises(RefusedError, match="not priced exactly yet"):
        price(tree, horizon)
    assert asked == [f"distill.exact.{module}"]


def test_a_tolerance_is_kept_or_refused_by_name():
    tree = from_record(flat_record())
    bounds = price(tree, 3.0).error / scale_of(tree)
    assert np.array_equal(price(tree, 3.0, tolerance=float(bounds.max())).voc, price(tree, 3.0).voc)
    with pytest.raises(
        ToleranceError, match=r"independent maximum.*error bound .* of leaf \d exceeds .* of scale"
    ):
        price(tree, 3.0, tolerance=float(bounds.max()) / 2)
    with pytest.raises(ToleranceError, match="static independent"):
        voc.price_many([tree], Query(0.0, tolerance=1e-30))
    sure = bush([[0.0], [1.0]], [[0.0], [0.0]])  # scale 0: an error of 0 meets every tolerance
    assert price(sure, tolerance=1e-30).voc.tolist() == [0, 0]


def test_many_trees_come_back_in_order():
    rng = np.random.default_rng(0)
    trees = [deep_tree(rng, chance=i % 3 == 0) for i in range(9)]
    together = voc.price_many(trees, Query(0.0, 2))
    for tree, priced in zip(trees, together, strict=True):
        assert np.array_equal(priced.voc, price(tree, 0.0, 2).voc)
    rate = Query(0.0, None, 30)
    for tree, priced in zip(trees, voc.price_many(trees, rate), strict=True):
        alone = voc.price(tree, rate)
        assert np.array_equal(priced.voc, alone.voc)
        assert np.array_equal(priced.batch, alone.batch)
    flat = [mixed_bush(rng) for _ in range(3)]
    for tree, priced in zip(flat, voc.price_many(flat, Query()), strict=True):
        assert np.array_equal(priced.voc, price(tree).voc)


def test_no_label_is_minus_zero():
    """One leaf of this tree is worth less than the least positive number, from below."""
    tree = dict(shards.read_trees(SAMPLE))[9]
    assert np.signbit(dynamic_flat.price(tree, Query(math.inf, None, tree.remaining)).voc).any()
    assert not np.signbit(price(tree, math.inf, None, remaining=tree.remaining).voc).any()
