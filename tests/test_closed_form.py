"""The closed form that the runtime falls back to."""

from __future__ import annotations

import mpmath
import numpy as np
import pytest
from ladder import CLOSED_FORM_RATE, LOSS_FIT, RELATIVE_TAIL
from leaf_tables import table

from distill import voc
from distill.closed_form import LOSS_A, LOSS_B, LOSS_P, LOSS_Q, highest_rates, static_rates
from distill.query import Query
from distill.timing import tree_of


def columns(t):
    return {name: t[name] for name in ("mean", "var", "noise_var", "gain", "offset")}


@pytest.mark.parametrize("seed", range(8))
@pytest.mark.parametrize("noise", [0.01, 1.0, 100.0])
def test_rates_are_those_of_the_exact_static_rate(seed, noise):
    rng = np.random.default_rng(seed)
    t = table(rng, 30, 4, remaining=int(rng.integers(1, 2000)))
    t["noise_var"] *= noise
    exact = voc.price(tree_of(t), Query(horizon=0, batch=None, remaining=t["remaining"]))
    rate, batch = static_rates(**columns(t), remaining=t["remaining"])
    seen = exact.voc > 1e-30
    np.testing.assert_allclose(rate[seen], exact.voc[seen], rtol=CLOSED_FORM_RATE)
    assert np.all((batch >= 1) & (batch <= t["remaining"]))


def test_the_loss_fit_holds_from_zero_far_into_the_tail():
    mpmath.mp.dps = 60
    for z in [0, *np.geomspace(1e-6, 45, 300)]:
        x = mpmath.mpf(float(z))
        exact = 1 - x * mpmath.sqrt(mpmath.pi / 2) * mpmath.erfc(x / mpmath.sqrt(2)) * mpmath.exp(x * x / 2)
        terms = zip(LOSS_P, LOSS_Q, LOSS_A, LOSS_B, strict=True)
        fitted = sum((a + b * z) / (z * z + p * z + q) for p, q, a, b in terms)
        assert abs(fitted / float(exact) - 1) < LOSS_FIT


def test_nothing_is_worth_nothing():
    t = table(np.random.default_rng(0), 5, 2)
    assert np.all(static_rates(**columns(t), remaining=0)[0] == 0)
    assert np.all(static_rates(**{**columns(t), "var": np.zeros(5)}, remaining=9)[0] == 0)
    one = {name: x[:1] for name, x in columns(t).items()}
    assert static_rates(**one, remaining=9)[0].tolist() == [0]


def test_extremes_give_finite_numbers():
    rng = np.random.default_rng(1)
    for _ in range(300):
        t = table(rng, 6, 3)
        for name in ("mean", "var", "noise_var", "offset"):
            t[name] = t[name] * 10.0 ** rng.integers(-100, 100, 6)
        rate, batch = static_rates(**columns(t), remaining=2.0**53)
        assert np.all(np.isfinite(rate))
        assert np.all(rate >= 0)
        assert np.all(batch >= 1)


@pytest.mark.parametrize("horizon", [0.0, 0.5, 7.0, np.inf])
@pytest.mark.parametrize("seed", range(4))
def test_no_rate_of_any_horizon_exceeds_the_highest(seed, horizon):
    """Nor at a tie with a sure leaf, where a rollout is worth half of it."""
    rng = np.random.default_rng(seed)
    tables = [table(rng, n, 2, remaining=int(rng.integers(1, 50))) for n in (2, 3, 8)]
    tie = table(rng, 2, 2)
    tie.update(mean=np.zeros(2), offset=np.zeros(2), var=np.array([tie["var"][0], 0.0]))
    shares = []
    for t in (*tables, tie):
        priced = voc.price(tree_of(t), Query(horizon=horizon, batch=None, remaining=t["remaining"]))
        highest = highest_rates(t["var"], t["noise_var"], t["gain"])
        assert np.all(priced.voc - priced.error <= highest)
        shares.append(priced.voc[0] / highest[0])
    assert shares[-1] == pytest.approx(0.5, rel=RELATIVE_TAIL)


@pytest.mark.parametrize("batch", [1, 7, 1000])
def test_a_fixed_batch_has_the_exact_static_value_and_its_own_bound(batch):
    t = table(np.random.default_rng(batch), 30, 4)
    exact = voc.price(tree_of(t), Query(horizon=0, batch=batch))
    value, batches = static_rates(**columns(t), remaining=0, batch=batch)
    seen = exact.voc > 1e-30
    np.testing.assert_allclose(value[seen], exact.voc[seen], rtol=LOSS_FIT)
    assert np.all(batches == batch)
    dynamic = voc.price(tree_of(t), Query(horizon=np.inf, batch=batch)).voc
    assert np.all(dynamic <= highest_rates(t["var"], t["noise_var"], t["gain"], batch))
    alone, batches = static_rates(**{k: x[:1] for k, x in columns(t).items()}, remaining=0, batch=batch)
    assert (alone[0], batches[0]) == (0, batch)
