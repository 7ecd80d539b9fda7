"""The arrays of a call: which rows of them a scorer may use."""

from __future__ import annotations

import numpy as np
from hypothesis import given, settings
from hypothesis import strategies as st

from distill.leaf_buffers import LeafBuffers
from distill.scorer_inputs import KINDS

EDGES = (
    0.0,
    -0.0,
    5e-324,
    -5e-324,
    1.0,
    np.nextafter(1.0, 2.0),
    1e-9,
    1e100,
    -1e100,
    np.inf,
    -np.inf,
    np.nan,
)


@settings(deadline=None, max_examples=60, derandomize=True)
@given(st.sampled_from(list(KINDS)), st.integers(0, 2**32 - 1), st.booleans())
def test_usable_rows_are_those_that_keep_their_rules(name, seed, edges):
    """What looks at all rows at once says what looking at each rule says."""
    rng, kind, n = np.random.default_rng(seed), KINDS[name], 5
    buffers = LeafBuffers(n, kind, None, None)
    low, high = kind.limits
    inside = np.clip(rng.uniform(0.1, 0.9, (len(low), n)), low, high)
    if "high" in kind.floats:
        inside[kind.floats.index("high")] += 1
    arrays = dict(zip(kind.floats, inside, strict=True))
    arrays |= {"action": rng.integers(0, n, n)} if kind.has_action else {}
    if edges:
        spoilt = str(rng.choice(list(arrays)))
        own = [0, n - 1, n, -1, 2**62] if spoilt == "action" else EDGES
        arrays[spoilt][rng.integers(n)] = own[rng.integers(len(own))]
    buffers.fill_with_care(arrays, {"remaining": 10.0, "horizon": 4.0, "batch_size": 3.0})
    held = [ok for ok, _ in kind.rules(buffers.columns).values()]
    placed = (buffers.action >= 0) & (buffers.action < n)
    assert np.array_equal(buffers.usable(False), np.all([*held, placed], axis=0))
    assert edges or buffers.usable(False).all()
