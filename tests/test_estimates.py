"""Intervals and fields against other implementations."""

from __future__ import annotations

import tomllib

import numpy as np
import pytest
from ladder import CLOSED_FORM, PUBLISHED, STANDARD_ERRORS
from scipy import stats

from distill.estimates import bootstrap, by_group, field_text, proportion, same_or_spread, two_sample


def test_the_distance_of_two_samples_is_scipys() -> None:
    rng = np.random.default_rng(0)
    for _ in range(30):
        a = rng.integers(0, 9, rng.integers(1, 40)) / 3
        b = rng.normal(size=rng.integers(1, 40)).round(1)
        expected = stats.ks_2samp(a, b, method="asymp").statistic
        assert two_sample(a, b) == pytest.approx(expected, rel=CLOSED_FORM)
    assert two_sample(np.array([np.nan]), np.array([np.nan])) == 0
    assert two_sample(np.array([np.nan]), np.array([1.0])) == 1


def test_shares_have_scipys_exact_interval() -> None:
    for x, n in ((0, 7), (3, 20), (20, 20), (500, 1000)):
        expected = stats.binomtest(x, n).proportion_ci(method="exact")
        found = proportion(x / n, n)
        assert (found.low, found.high) == pytest.approx((expected.low, expected.high), rel=CLOSED_FORM)


@pytest.mark.parametrize("n", [8, 60])
def test_intervals_of_a_mean_cover(n: int) -> None:
    """400 means of uniform numbers at 95 %: within what chance allows, for few groups too."""
    rng = np.random.default_rng(n)
    hits = 0
    for seed in range(400):
        columns = {"x": rng.random(n), "n": np.ones(n)}
        e = bootstrap(columns, lambda s: {"m": s["x"] / s["n"]}, draws=300, seed=seed)["m"]
        hits += e.low <= 0.5 <= e.high
    assert stats.binom.cdf(hits, 400, 0.95) > stats.norm.sf(STANDARD_ERRORS)
    assert stats.binom.sf(hits - 1, 400, 0.99) > stats.norm.sf(STANDARD_ERRORS)


def test_groups_are_what_is_drawn_again() -> None:
    """Copies of a group within it add nothing."""
    rng = np.random.default_rng(1)
    rows = [{"x": float(x), "n": 1.0} for x in rng.normal(size=50)]
    once = by_group(rows, range(50))
    thrice = by_group(rows * 3, [*range(50)] * 3)

    def mean(s):
        return {"m": s["x"] / s["n"]}

    a, b = (bootstrap(c, mean)["m"] for c in (once, thrice))
    assert (a.low, a.high) == pytest.approx((b.low, b.high), rel=CLOSED_FORM)


def test_one_group_has_no_interval() -> None:
    e = bootstrap({"x": np.ones(1), "n": np.ones(1)}, lambda s: {"m": s["x"] / s["n"]})["m"]
    assert e.value == 1
    assert e.to_json() == {"value": 1.0, "low": None, "high": None}


def test_fields_are_read_back_with_their_spread() -> None:
    rng = np.random.default_rng(2)
    wide = tomllib.loads(f"x = {field_text(np.exp(rng.uniform(0, 9, 500)))}")["x"]
    assert 0 <= np.log(wide["log_uniform"][0]) < 0.2
    assert 8.8 < np.log(wide["log_uniform"][1]) <= 9
    even = tomllib.loads(f"x = {field_text(rng.uniform(1, 2, 500))}")["x"]
    assert 1 <= even[0] < even[1] <= 2
    whole = tomllib.loads(f"x = {field_text([3, 3, 5], whole=True)}")["x"]
    assert whole == {"choice": [3, 5], "weights": [0.666667, 0.333333]}
    low, high = tomllib.loads(f"x = {same_or_spread(2.0, 0.5)}")["x"]["log_uniform"]
    assert np.log(high / low) / np.sqrt(12) == pytest.approx(0.5, rel=PUBLISHED * 1e-5)
    assert tomllib.loads(f"x = {same_or_spread(2.0, 0.0)}")["x"] == 2
