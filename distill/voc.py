"""Picks the exact method for a tree and prices it; floor 3.

belief, nodes                        h = 0                 h > 0
Gaussian, independent, decisions     static_independent    dynamic_flat
Gaussian, independent, chance        static_independent    dynamic_chance
Gaussian, `cov`                      static_dense          dynamic_dense
win/loss                             win_loss              win_loss
"""

from __future__ import annotations

import dataclasses
import importlib
import importlib.util
from collections.abc import Callable, Sequence
from typing import Final

import numpy as np

from distill.errors import RefusedError, ToleranceError
from distill.exact import static_independent
from distill.query import Priced, Query, scale_of
from distill.tree import BeliefTree

__all__ = ["price", "price_many"]

# Loaded when a tree first needs them; what is refused where the installation lacks one.
_LATER: Final = {
    "dynamic_flat": "independent leaves with horizon > 0 are",
    "static_dense": "leaves with 'cov' at horizon 0 are",
    "dynamic_chance": "chance nodes with horizon > 0 are",
    "dynamic_dense": "leaves with 'cov' at horizon > 0 are",
    "win_loss": "win/loss leaves are",
}


def price(tree: BeliefTree, query: Query) -> Priced:
    """Exact VOC (or rate) of every candidate of a tree, by the method that fits it.

    Raises RefusedError naming the case where no exact method covers it, and ToleranceError where the
    error bound of any leaf exceeds query.tolerance x scale.

    >>> from distill.record import from_record
    >>> t = from_record({"format": "belief-tree/1", "parent": [-1, 0, 0],
    ...     "kind": ["decision", "leaf", "leaf"], "mean": [None, 0, 0],
    ...     "var": [None, 1, 0], "noise_var": [None, 3, 1]})
    >>> priced = price(t, Query(horizon=0))
    >>> priced.voc.round(6), priced.method
    (array([0.199471, 0.      ]), 'static independent, closed form')
    """
    return _held(tree, query, _method(tree, query)(tree, query))


def price_many(trees: Sequence[BeliefTree], query: Query) -> list[Priced]:
    """`price` of every tree, in order; static trees of independent leaves go through one compiled call."""
    packed = [i for i, tree in enumerate(trees) if query.horizon == 0 and tree.var is not None]
    out: dict[int, Priced] = {}
    if packed:
        for i, priced in zip(
            packed, static_independent.price_many([trees[i] for i in packed], query), strict=True
        ):
            out[i] = _held(trees[i], query, priced)
    return [out[i] if i in out else price(tree, query) for i, tree in enumerate(trees)]


def _method(tree: BeliefTree, query: Query) -> Callable[[BeliefTree, Query], Priced]:
    static = query.horizon == 0
    if tree.mean is None:
        return _later("win_loss")
    if tree.cov is not None:
        return _later("static_dense" if static else "dynamic_dense")
    if static:
        return static_independent.price
    if tree.has_chance:
        return _later("dynamic_chance")
    return _later("dynamic_flat")


def _later(name: str) -> Callable[[BeliefTree, Query], Priced]:
    module = f"distill.exact.{name}"
    if importlib.util.find_spec(module) is None:
        raise RefusedError(f"{_LATER[name]} not priced exactly yet")
    function: Callable[[BeliefTree, Query], Priced] = importlib.import_module(module).price
    return function


def _held(tree: BeliefTree, query: Query, priced: Priced) -> Priced:
    """The answer, if its error bounds keep the tolerance; no label is -0.0."""
    priced = dataclasses.replace(priced, voc=priced.voc + 0.0)
    if query.tolerance is not None and len(priced.error):
        allowed = query.tolerance * scale_of(tree)
        worst = int(np.argmax(priced.error))
        if not priced.error[worst] <= allowed:
            raise ToleranceError(
                f"{priced.method}: the error bound {priced.error[worst]:.3g} of leaf {worst} exceeds the "
                f"tolerance {query.tolerance:g} of scale, {allowed:.3g} here"
            )
    return priced
