"""Decisions to time: the right size, the leaves of real trees, and the same for scorer and exact methods."""

from __future__ import annotations

from pathlib import Path

import numpy as np
import pytest
from ladder import CLOSED_FORM
from leaf_tables import rows

from distill import timing
from distill.allocation import Search
from distill.backup import backup_of
from distill.errors import InputError
from distill.family import draw, load_family
from distill.record import from_record, to_record
from distill.runtime import Scorer
from distill.scorer_inputs import RECORD
from distill.timing import decisions, time_backup, time_exact, time_scorer, tree_decisions
from distill.tree import leaf_table

FAMILIES = Path(__file__).parents[1] / "datasets" / "families"
TABLE = rows(np.random.default_rng(0), 30)


@pytest.mark.parametrize("n_leaves", [1, 2, 64, 500])
def test_decisions_have_the_leaves_asked_for_and_come_from_the_rows(n_leaves: int) -> None:
    known = set((TABLE["noise_var"] / TABLE["var"]).round(9).tolist())  # no unit changes it
    for case in decisions(TABLE, n_leaves, 5, seed=1):
        assert len(case.columns["mean"]) == n_leaves
        assert set((case.columns["noise_var"] / case.columns["var"]).round(9).tolist()) <= known
        assert case.remaining >= 1
        action = case.columns["action"]
        assert np.array_equal(np.unique(action), np.arange(action.max() + 1))


def test_the_tree_of_a_decision_flattens_to_its_arrays() -> None:
    for case in decisions(TABLE, 64, 3, seed=2):
        checked = from_record(to_record(case.tree))  # by every rule of a record
        table = leaf_table(checked)
        for name, column in case.columns.items():
            assert np.array_equal(getattr(table, name), column)


def test_each_tree_is_pooled_in_units_of_its_scale() -> None:
    moved = {**TABLE, "tree": TABLE["tree"]}
    factor = 2.0 ** np.random.default_rng(1).integers(-20, 20, 30)[TABLE["tree"]]
    for name in ("mean", "offset", "cost"):
        moved[name] = TABLE[name] * factor
    for name in ("var", "noise_var"):
        moved[name] = TABLE[name] * factor**2
    for a, b in zip(decisions(TABLE, 64, 5, 1), decisions(moved, 64, 5, 1), strict=True):
        for name, column in a.columns.items():
            assert np.array_equal(column, b.columns[name])  # powers of two round nothing


def test_same_seed_same_decisions() -> None:
    a, b, c = (decisions(TABLE, 20, 4, seed=s) for s in (3, 3, 4))
    assert all(np.array_equal(x.columns["mean"], y.columns["mean"]) for x, y in zip(a, b, strict=True))
    assert not all(np.array_equal(x.columns["mean"], y.columns["mean"]) for x, y in zip(a, c, strict=True))


def test_rows_without_remaining_rollouts_still_make_a_decision() -> None:
    spent = {**TABLE, "remaining": np.zeros(len(TABLE["tree"]))}
    assert {case.remaining for case in decisions(spent, 8, 3, seed=0)} == {1}


def test_percentiles_are_of_the_calls_and_in_microseconds(monkeypatch: pytest.MonkeyPatch) -> None:
    ticks = iter(np.cumsum([0] + [x for us in range(1, 102) for x in (us * 1000, 5)]).tolist())
    monkeypatch.setattr(timing.time, "perf_counter_ns", lambda: next(ticks))
    cases = decisions(TABLE, 4, 3, seed=0)
    got = timing._timed(lambda _: None, cases, calls=101, warm_up=7)
    assert (got.p50, got.p99, got.calls) == (51.0, 100.0, 101)
    assert got.to_json() == {"p50_us": 51.0, "p99_us": 100.0, "calls": 101}


def test_scorer_and_exact_methods_are_timed_on_the_same_cases() -> None:
    cases = decisions(TABLE, 16, 2, seed=5)
    fast = time_scorer(Scorer.closed_form(), cases, calls=30)
    one, rate = (time_exact(cases, batch=k, calls=4) for k in (1, None))
    assert 0 < fast.p50 <= fast.p99
    assert 0 < one.p50 <= one.p99
    assert 0 < rate.p50 <= rate.p99


def test_no_rows_make_no_decision() -> None:
    with pytest.raises(InputError, match="tree"):
        decisions({name: x[:0] for name, x in TABLE.items()}, 4, 1, seed=0)


def test_rows_of_leaf_tables_are_pooled_as_rows_and_records_as_trees() -> None:
    with pytest.raises(InputError, match="kind: must be a leaf table"):
        decisions(TABLE, 4, 1, seed=0, kind=RECORD)


@pytest.mark.parametrize("name", ["crossing-traffic", "on-time", "shared-aisles"])
def test_records_are_timed_on_the_trees_that_their_rows_come_from(name: str) -> None:
    family = load_family(FAMILIES / f"{name}.toml")
    cases = tree_decisions([draw(family, 1, i) for i in range(8)], 12, 3, 0, horizon=0.0)
    assert len({id(case) for case in cases}) == 3
    for case in cases:
        assert case.tree.n_leaves == 12
        expected = backup_of(case.tree, 0.0).rows()
        assert all(np.array_equal(expected[key], x) for key, x in case.columns.items())
    found = time_backup(cases, horizon=0.0, calls=12)
    path = "all beliefs" if name == "shared-aisles" else "one path"
    compiled = [] if name == "shared-aisles" else ["after one rollout, compiled"]
    assert list(found) == [path, "after one rollout", "whole tree", *compiled]
    assert all(0 < t.p50 <= t.p99 and t.calls == 12 for t in found.values())
    exact = time_exact(cases, horizon=0.0, calls=4)
    assert exact.calls == 4
    assert 0 < exact.p50 <= exact.p99


def test_a_belief_after_one_rollout_is_that_of_the_recorder() -> None:
    family = load_family(FAMILIES / "on-time.toml")
    coins = draw(family, 1, 0)
    assert timing._after_one(coins, 1) == {"alpha": coins.alpha[1] + 1, "beta": coins.beta[1]}
    normal = draw(load_family(FAMILIES / "crossing-traffic.toml"), 1, 0)
    search = Search(normal)
    search.observe(2, float(normal.mean[2]))
    after = search.tree()
    got = timing._after_one(normal, 2)
    assert got["var"] == pytest.approx(after.var[2], rel=CLOSED_FORM)
    assert got["mean"] == pytest.approx(after.mean[2], rel=CLOSED_FORM)


def test_a_slow_method_is_called_three_times_at_least_and_no_longer_than_allowed(
    monkeypatch: pytest.MonkeyPatch,
) -> None:
    second = 10**9
    ticks = iter(range(0, 10**13, second))
    monkeypatch.setattr(timing.time, "perf_counter_ns", lambda: next(ticks))
    cases = decisions(TABLE, 4, 3, seed=0)
    assert timing._timed(lambda _: None, cases, 20, warm_up=1, seconds=0.5).calls == 3
    assert timing._timed(lambda _: None, cases, 20, warm_up=1, seconds=6.5).calls == 7
    assert timing._timed(lambda _: None, cases, 5, warm_up=1).calls == 5
