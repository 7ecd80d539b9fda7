"""At what cost of one rollout each way to pick pays; floor 0.

A first-order account of search at equal time: an agent decides once a rollout (or once a batch, whose cost
then counts), a decision takes d, and its pick is worth the share 1 - f of the best. Per unit of time it gains

    (1 - f) c / (c + d)

of what an agent with free exact picks would, c the cost of the rollout. Dear rollouts favour accurate
picks, cheap ones fast picks.
"""

from __future__ import annotations

from collections.abc import Mapping
from typing import Any, Final

import numpy as np

from distill.errors import InputError

__all__ = ["COSTS", "break_even"]

COSTS: Final = tuple(float(f"{10 ** (e / 8):.4g}") for e in range(49))  # 1 us to 1 s


def break_even(ways: Mapping[str, tuple[float, float]]) -> dict[str, Any]:
    """Gain of each way over COSTS, in percent, and which is best where, as JSON values.

    ways : name -> (forgone share in percent, microseconds a decision). `best` : in order of cost; from and
    to are the exact costs where the next takes over, None where there is no end.

    >>> break_even({"fast": (20.0, 10.0), "exact": (0.0, 1000.0)})["best"]
    [{'name': 'fast', 'from_us': None, 'to_us': 3950.0}, {'name': 'exact', 'from_us': 3950.0, 'to_us': None}]
    """
    if not ways:
        raise InputError("ways", "must name at least one")
    for name, (forgone, us) in ways.items():
        if not 0 <= forgone <= 100 or not us > 0:
            raise InputError(f"ways: {name}", "must have 0 <= forgone <= 100 and a time above 0", forgone)
    costs = np.array(COSTS)
    curves = {name: (100 - f) * costs / (costs + d) for name, (f, d) in ways.items()}
    best: list[dict[str, Any]] = []
    here = 0.0
    # For c -> 0 the largest (1 - f) / d leads; on ties the more accurate.
    name = max(ways, key=lambda w: ((100 - ways[w][0]) / ways[w][1], -ways[w][0]))
    while True:
        f, d = ways[name]
        crossings = {}
        for other, (g, e) in ways.items():
            if g < f:  # only a more accurate way can take over as rollouts get dearer
                at = ((100 - f) * e - (100 - g) * d) / (f - g)
                if at > here or (at == here and e < d):
                    crossings[other] = at
        if not crossings:
            best.append({"name": name, "from_us": here or None, "to_us": None})
            break
        follower = min(crossings, key=lambda w: (crossings[w], ways[w][0]))
        best.append({"name": name, "from_us": here or None, "to_us": crossings[follower]})
        here, name = crossings[follower], follower
    return {"costs_us": list(COSTS), "gain_percent": {n: c.tolist() for n, c in curves.items()}, "best": best}
