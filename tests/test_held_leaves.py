"""Leaves kept between calls answer as a call with all arrays does, bit for bit."""

from __future__ import annotations

import time

import numpy as np
import pytest
from leaf_tables import table
from scorers import scorer_bytes

from distill.errors import InputError
from distill.runtime import Scorer

SCORER = Scorer.from_bytes(scorer_bytes("dense"))


@pytest.mark.parametrize("scorer", [SCORER, Scorer.closed_form()], ids=["file", "closed form"])
def test_a_search_of_updates_is_that_of_whole_calls(scorer):
    rng = np.random.default_rng(3)
    t = table(rng, 24, 5)
    held = scorer.hold(**t)
    for left in range(60, 0, -1):
        leaf = int(rng.integers(24))
        t["mean"][leaf] += rng.normal()
        t["var"][leaf] *= 0.8
        t["remaining"] = left
        held.update(leaf, mean=t["mean"][leaf], var=float(t["var"][leaf]))
        whole, kept = scorer.score(**t), held.score(remaining=left)
        for a, b in zip(whole, kept, strict=True):
            np.testing.assert_array_equal(a, b)
        assert held.pick(remaining=left) == scorer.pick(**t) == whole.pick


def test_other_calls_of_as_many_leaves_leave_held_ones_alone():
    rng = np.random.default_rng(4)
    one, other = table(rng, 9, 3), table(rng, 9, 3)
    held = SCORER.hold(**one)
    before = held.score(remaining=30).voc
    SCORER.score(**other)
    SCORER.hold(**other).update(0, mean=99.0)
    np.testing.assert_array_equal(held.score(remaining=30).voc, before)
    one["mean"][:] = 0  # the caller's arrays are his own
    np.testing.assert_array_equal(held.score(remaining=30).voc, before)


def test_what_is_invalid_is_flagged_or_refused_and_nothing_is_written():
    t = table(np.random.default_rng(5), 9, 3)
    held = SCORER.hold(**t)
    before = held.score(remaining=30).voc
    for leaf, values, message in (
        (9, {"mean": 1.0}, "leaf: must be from 0 to 8; got 9"),
        (-1, {"mean": 1.0}, "leaf: must be"),
        ([0, 1], {"mean": 1.0}, r"leaf: must be one whole number; got \[0, 1\]"),
        (np.array([0, 1]), {"mean": 1.0}, "leaf: must be one whole number"),
        (1.0, {"mean": 1.0}, "leaf: must be one whole number; got 1.0"),
        (True, {"mean": 1.0}, "leaf: must be one whole number; got True"),
        ("0", {"mean": 1.0}, "leaf: must be one whole number; got '0'"),
        (None, {"mean": 1.0}, "leaf: must be one whole number; got None"),
        (0, {"mean": None}, "mean: must hold numbers"),
        (0, {"mean": 1.0, "alpha": 2.0}, "alpha: must be among mean, var"),
        (0, {"mean": 1.0, "var": "1"}, "var: must hold numbers"),
        (0, {"mean": [1.0, 2.0]}, "mean: must be one number"),
    ):
        with pytest.raises(InputError, match=message):
            held.update(leaf, **values)
    np.testing.assert_array_equal(held.score(remaining=30).voc, before)
    for remaining in ("5", None, [1, 2]):
        with pytest.raises(InputError, match="remaining: must"):
            held.pick(remaining=remaining)
    for remaining in (-1, float("nan"), 10**400):
        assert not held.score(remaining=remaining).in_range.any()
    held.update(3, var=-1.0)
    got = held.score(remaining=30)
    assert not got.in_range.any()
    assert got.voc[3] == 0


@pytest.mark.parametrize("scorer", [SCORER, Scorer.closed_form()], ids=["file", "closed form"])
@pytest.mark.parametrize("deadline", ["soon", [0.0], True, float("nan"), float("inf"), -float("inf"), 1j])
def test_a_deadline_is_a_finite_time(scorer, deadline):
    t = table(np.random.default_rng(6), 9, 3)
    held = scorer.hold(**t)
    before = scorer.counters.decisions
    for call in (scorer.pick, scorer.score):
        with pytest.raises(InputError, match="deadline: must be a finite time of"):
            call(**t, deadline=deadline)
    with pytest.raises(InputError, match="deadline: must be"):
        held.pick(remaining=30, deadline=deadline)
    assert scorer.counters.decisions == before


def test_a_duration_is_late_and_a_time_to_come_is_not():
    t = table(np.random.default_rng(6), 9, 3)
    late = SCORER.counters.late
    SCORER.pick(**t, deadline=0.02)
    assert SCORER.counters.late == late + 1
    for far in (time.perf_counter() + 60, np.float64(time.perf_counter() + 60), 10**400):
        assert SCORER.score(**t, deadline=far).in_range.any()
    assert SCORER.counters.late == late + 1


def test_a_number_that_this_input_has_not_is_named():
    held = SCORER.hold(**table(np.random.default_rng(7), 9, 3))
    for call in (held.pick, held.score):
        with pytest.raises(InputError, match="horizon: is no number of a call of a leaf table"):
            call(remaining=30, horizon=4)
        with pytest.raises(InputError, match="mean: is no number of a call"):
            call(remaining=30, mean=[0.0])


@pytest.mark.parametrize("scorer", [SCORER, Scorer.closed_form()], ids=["file", "closed form"])
def test_no_leaves_are_told_by_their_shape(scorer):
    """NumPy takes [] for floats, which is no reason to speak of whole numbers."""
    none = {name: [] for name in ("mean", "var", "noise_var", "gain", "offset", "cost", "action")}
    for call in (scorer.pick, scorer.score, scorer.hold):
        with pytest.raises(InputError, match=r"mean: must have shape \(n,\), n from 1 to .*; got \(0,\)"):
            call(**none, remaining=5)
    with pytest.raises(InputError, match=r"mean: must have shape \(n,\), at least one leaf; got \(0,\)"):
        scorer.score(**none, remaining=5, tree=[])
    some = {**none, **{name: [1.0, 1.0] for name in none if name != "action"}}
    with pytest.raises(InputError, match=r"action: must have shape \(2,\), as 'mean'; got \(0,\)"):
        scorer.pick(**some, remaining=5)
