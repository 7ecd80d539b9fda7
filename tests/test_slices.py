"""Slices, calibration and stop curves against sums worked out another way."""

from __future__ import annotations

import json
from dataclasses import replace

import numpy as np
import pytest
from ladder import CLOSED_FORM, EXACT
from small_dataset import labelled

from distill.candidates import Candidates
from distill.fallback import spreads
from distill.metrics import measure
from distill.shards import read_trees
from distill.slices import Scored, calibration, forgone_by_slice, stop_curve, tree_facts


@pytest.fixture(scope="module")
def whole(tmp_path_factory: pytest.TempPathFactory) -> Candidates:
    return Candidates.read(labelled(tmp_path_factory.mktemp("slices") / "data", trees=80))[0]


def noisy(whole: Candidates) -> Scored:
    """Scores that are off by a factor, and a bound that holds for about nine in ten."""
    factor = np.exp(0.3 * np.random.default_rng(3).normal(size=len(whole.label)))
    return Scored.of(whole, whole.label * factor, 1.4 * whole.label * factor)


def test_trees_are_sliced_by_what_they_are(whole: Candidates) -> None:
    facts = tree_facts(whole)
    assert set(facts) == {"leaves", "rollouts left", "noise", "gap", "depth", "visits"}
    for t, (_, tree) in enumerate(read_trees(whole.folder)):
        assert facts["leaves"][t] == tree.n_leaves
        assert facts["rollouts left"][t] == tree.remaining
        assert facts["visits"][t] == tree.count.sum()
        assert facts["noise"][t] == pytest.approx(np.median(tree.noise_var / tree.var), rel=CLOSED_FORM)
        assert 1 <= facts["depth"][t] <= 4
    assert set(tree_facts(replace(whole, folder=None))) == {"leaves", "rollouts left", "noise", "gap"}


def test_the_slices_of_one_kind_part_the_trees_and_add_up_to_the_whole(whole: Candidates) -> None:
    scored, facts = noisy(whole), tree_facts(whole)
    slices = forgone_by_slice(scored, facts, n_boot=5)
    json.dumps(slices, allow_nan=False)
    for name in facts:
        ours = [s for s in slices if s["by"] == name]
        assert 1 <= len(ours) <= 4
        assert sum(s["trees"] for s in ours) == 80
        assert sum(s["candidates"] for s in ours) == len(whole.tree)
        share = sum(s["covered_percent"] * s["candidates"] for s in ours) / len(whole.tree)
        assert share == pytest.approx(100 * np.mean(scored.exact <= scored.high), rel=CLOSED_FORM)
    few = next(s for s in slices if s["by"] == "leaves")
    trees = facts["leaves"] <= float(few["slice"].split(" to ")[1])
    part = whole.of_trees(trees)
    expected = measure(part.tree, part.label, scored.score[whole.groups.spread(trees)], n_boot=2)
    assert few["forgone_percent"]["value"] == pytest.approx(expected.forgone.value, rel=CLOSED_FORM)


def test_coverage_counts_all_candidates_and_those_worth_something(whole: Candidates) -> None:
    scored = noisy(whole)
    found = calibration(scored, forgone_by_slice(scored, tree_facts(whole), n_boot=2), n_boot=50)
    inside, alive = scored.exact <= scored.high, (scored.exact > 0) | (scored.score > 0)
    assert found["covered_percent"]["value"] == pytest.approx(100 * inside.mean(), rel=CLOSED_FORM)
    assert found["covered_live_percent"]["value"] == pytest.approx(
        100 * inside[alive].mean(), rel=CLOSED_FORM
    )
    assert (
        found["covered_percent"]["low"] < found["covered_percent"]["value"] < found["covered_percent"]["high"]
    )
    assert found["worst_slice"]["covered_percent"] <= found["covered_percent"]["value"]
    for one in found["bins"]:
        top = np.inf if one["to"] is None else one["to"]
        rows = (scored.score > one["from"]) & (scored.score <= top)
        assert one["candidates"] == rows.sum()
        assert one["mean_exact"] == pytest.approx(scored.exact[rows].mean(), rel=CLOSED_FORM)
    assert calibration(scored, n_boot=2)["worst_slice"] is None


def test_stop_curves_are_sums_over_trees_in_units_of_their_scale(whole: Candidates) -> None:
    scored = noisy(whole)
    prices = (1e-4, 0.02)
    lost = {price: [0.0, 0.0, 0.0] for price in prices}
    for tree in np.unique(whole.tree):
        rows = whole.tree == tree
        columns = {name: x[rows] for name, x in whole.columns.items()}
        scale = spreads(whole.kind, columns).max()
        exact, score = whole.label[rows] / scale, scored.score[rows]
        for price, sums in lost.items():
            pick = int(np.argmax(score))
            best, got = exact.max() - price, exact[pick] - price
            goes = score[pick] > price
            sums[0] += max(best, 0) if not goes else -got if best <= 0 else 0
            sums[1] += max(best, 0)
            sums[2] += -got if best <= 0 else 0
    for found in stop_curve(scored, prices=prices, n_boot=5):
        ours = (found["value"], found["stop_at_once"], found["go_on"])
        assert ours == pytest.approx(np.array(lost[found["price"]]) / 80, rel=CLOSED_FORM, abs=EXACT)
        assert found["value"] <= min(found["stop_at_once"], found["go_on"])


def test_values_of_several_rollouts_pay_for_all_of_them(whole: Candidates) -> None:
    several = replace(whole, is_rate=False, batch=np.full(len(whole.label), 4.0))
    one, four = (
        stop_curve(Scored.of(c, c.label), prices=[p], n_boot=2)[0]
        for c, p in ((whole, 0.04), (several, 0.01))
    )
    assert {**one, "price": 0} == {**four, "price": 0}
