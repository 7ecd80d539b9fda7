"""Decisions to time: the right size, the leaves of real trees, and the same for scorer and exact methods."""

from __future__ import annotations

import numpy as np
import pytest
from leaf_tables import rows

from distill import timing
from distill.errors import InputError
from distill.record import from_record, to_record
from distill.runtime import Scorer
from distill.timing import decisions, time_exact, time_scorer
from distill.tree import leaf_table

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
