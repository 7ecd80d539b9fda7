"""Static VOC (h = 0) with dependent leaves, on decision and chance trees; floor 2.

Observing the mean of k rollouts at leaf i moves the leaf means along a line: m' = m + t S e_i with
t ~ N(0, 1 / (S_ii + n_i / k)). Along it the root maximum is convex piecewise linear, so the expectation
is a finite sum (see `piecewise`). The line does not depend on k: its breakpoints are found once a leaf,
and any number of batches is then cheap. O(n log n) a candidate on a tree of n leaves.
"""

from __future__ import annotations

import numpy as np

from distill.errors import RefusedError
from distill.exact.best_batch import best_batch
from distill.exact.gaps import post_order
from distill.exact.piecewise import expected_rise, root_breakpoints
from distill.query import Priced, Query
from distill.tree import BeliefTree, Floats, Ints

__all__ = ["METHOD", "directions", "price"]

METHOD = "static dense, closed form"


def price(tree: BeliefTree, query: Query) -> Priced:
    """Static VOC or rate of every leaf of a Gaussian tree, with `cov` or without, any node kinds.

    Error bounds cover the rounding of every breakpoint; relative accuracy is kept where means, rewards
    and covariances are taken as exact. Where S_li exceeds sqrt(S_ii S_ll) by rounding it is cut to it, so
    a leaf of zero variance has VOC 0. Raises RefusedError for another horizon and for win/loss leaves.

    >>> from distill.record import from_record
    >>> t = from_record({"format": "belief-tree/1", "parent": [-1, 0, 0],
    ...     "kind": ["decision", "leaf", "leaf"], "mean": [None, 0, 0],
    ...     "cov": [[1, -1], [-1, 1]], "noise_var": [None, 3, 3]})
    >>> price(t, Query(horizon=0)).voc.round(6)  # m' = +-Z/2, and E|Z|/2 = 0.398942
    array([0.398942, 0.398942])
    """
    if tree.mean is None or tree.noise_var is None:
        raise RefusedError("static dense pricing is for Gaussian leaves; this tree has win/loss leaves")
    if query.horizon != 0:
        raise RefusedError(f"static dense pricing is for horizon 0, not {query.horizon:g}")
    cov = tree.cov
    if cov is None:
        assert tree.var is not None
        cov = np.diag(tree.var)
    program = post_order(tree)
    var, noise, n = np.diag(cov), tree.noise_var, tree.n_leaves
    most = query.remaining if query.rate else query.batch
    assert most is not None

    def sd_of_t(leaf: Ints, k: Ints | int) -> Floats:
        with np.errstate(divide="ignore"):  # only where n / k underflows, and then S_ii = 0: no breakpoints
            return np.asarray(1 / np.sqrt(var[leaf] + noise[leaf] / k))

    leaves = np.arange(n)
    start, point = root_breakpoints(
        program.kind,
        program.n_children,
        program.leaf,
        program.gap,
        program.gap_err,
        directions(cov) * program.gain,
        sd_of_t(leaves, max(most, 1)),
    )

    def voc_at(leaf: Ints, k: Ints | int) -> tuple[Floats, Floats]:
        voc, err = expected_rise(start, point, leaf, sd_of_t(leaf, k))
        return voc, err

    if query.rate:
        # As a function of the spread s of the posterior mean, VOC = E[h(s Z)] is convex.
        ratio = np.divide(noise, var, out=np.ones(n), where=var > 0)
        voc, batch, error = best_batch(voc_at, n, most, noise_ratio=ratio, rel_tol=1e-9)
    else:
        voc, error = voc_at(leaves, most)
        batch = np.full(n, most, dtype=np.int64)
    return Priced(voc, batch, program.value, error, METHOD)


def directions(cov: Floats) -> Floats:
    """Row i: the change of every leaf mean along leaf i's line; |S_li| at most sqrt(S_ii S_ll)."""
    sd = np.sqrt(np.maximum(np.diag(cov), 0))
    most = sd[:, None] * sd
    return np.where(np.abs(cov) > most * (1 + 1e-12), np.sign(cov) * most, cov)
