"""Win/loss leaves: every value of computation that has an exact method here; floor 2.

A leaf is worth low + (high - low) p, p ~ Beta(alpha, beta); a rollout is one trial that wins with odds p.
"""

from __future__ import annotations

import math

from distill.errors import InputError
from distill.exact.win_loss_dynamic import price_dynamic
from distill.exact.win_loss_horizon import price_horizon
from distill.exact.win_loss_static import price_static
from distill.query import Priced, Query
from distill.tree import BeliefTree

__all__ = ["price"]


def price(tree: BeliefTree, query: Query) -> Priced:
    """VOC_h or RATE_h of every leaf of a win/loss tree.

    Any tree, h = 0, whole or infinite. Raises InputError for an h that is neither whole nor infinite,
    RefusedError by name for what no method here can do: too many leaves below one choice, too many outcomes.

    >>> from distill.record import from_record
    >>> t = from_record({"format": "belief-tree/1", "parent": [-1, 0, 0],
    ...     "kind": ["decision", "leaf", "leaf"], "alpha": [None, 1, 3], "beta": [None, 1, 2],
    ...     "low": [None, 0, 0], "high": [None, 1, 1]})
    >>> price(t, Query(horizon=0)).voc.round(6)  # 1/30: only a win of the first leaf changes the choice
    array([0.033333, 0.      ])
    """
    if query.horizon != math.inf and query.horizon != int(query.horizon):
        raise InputError("horizon", 'must be whole or "inf" for win/loss leaves', query.horizon)
    if query.horizon == 0:
        return price_static(tree, query)
    if query.horizon == math.inf:
        return price_dynamic(tree, query)
    return price_horizon(tree, query)
