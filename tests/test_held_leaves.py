"""Leaves kept between calls answer as a call with all arrays does, bit for bit."""

from __future__ import annotations

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
