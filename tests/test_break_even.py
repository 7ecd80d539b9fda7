"""What pays at what cost of a rollout, against a search over a grid."""

from __future__ import annotations

import numpy as np
import pytest
from ladder import CLOSED_FORM

from distill.break_even import COSTS, break_even
from distill.errors import InputError


@pytest.mark.parametrize("seed", range(20))
def test_the_best_way_at_every_cost_is_the_one_that_a_grid_finds(seed: int) -> None:
    rng = np.random.default_rng(seed)
    ways = {f"way {i}": (float(rng.uniform(0, 90)), float(10 ** rng.uniform(0, 4))) for i in range(6)}
    found = break_even(ways)
    best = found["best"]
    assert best[0]["from_us"] is None
    assert best[-1]["to_us"] is None
    assert [b["to_us"] for b in best[:-1]] == [b["from_us"] for b in best[1:]]
    for cost in 10 ** rng.uniform(-3, 9, 300):
        gains = {name: (100 - f) * cost / (cost + d) for name, (f, d) in ways.items()}
        top = max(gains.values())
        (at,) = (b["name"] for b in best if (b["from_us"] or 0) <= cost < (b["to_us"] or np.inf))
        assert gains[at] == pytest.approx(top, rel=CLOSED_FORM)


def test_two_ways_gain_the_same_where_one_takes_over_from_the_other() -> None:
    found = break_even({"scorer": (0.5, 50.0), "exact": (0.0, 5000.0), "slow and poor": (50.0, 9000.0)})
    assert [b["name"] for b in found["best"]] == ["scorer", "exact"]
    cost = found["best"][0]["to_us"]
    assert 99.5 * cost / (cost + 50) == pytest.approx(100 * cost / (cost + 5000), rel=CLOSED_FORM)
    assert found["costs_us"] == list(COSTS)
    assert found["gain_percent"]["exact"][0] == pytest.approx(100 * COSTS[0] / (COSTS[0] + 5000))


def test_equal_ways_and_a_single_one_have_no_end() -> None:
    assert break_even({"only": (3.0, 7.0)})["best"] == [{"name": "only", "from_us": None, "to_us": None}]
    twins = break_even({"a": (3.0, 7.0), "b": (3.0, 7.0)})["best"]
    assert len(twins) == 1


def test_what_is_no_way_is_named() -> None:
    for ways, word in (({}, "at least one"), ({"x": (101.0, 1.0)}, "x"), ({"x": (1.0, 0.0)}, "x")):
        with pytest.raises(InputError, match=word):
            break_even(ways)
