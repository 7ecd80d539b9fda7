"""Flattening and the tree's own properties."""

from __future__ import annotations

import numpy as np
import pytest
from builders import chance_record, flat_record
from ladder import CLOSED_FORM

from distill.errors import RefusedError
from distill.query import scale_of
from distill.record import from_record
from distill.tree import leaf_table


def test_leaf_table_by_hand():
    """Path totals worked by hand: 0.5 + 0.9 (-0.25 + 0.8 x) = 0.275 + 0.72 x for the second leaf."""
    table = leaf_table(from_record(flat_record()))
    np.testing.assert_allclose(table.gain, [0.9, 0.72, 1.0], rtol=CLOSED_FORM)
    np.testing.assert_allclose(table.offset, [0.5, 0.275, 0.0], rtol=CLOSED_FORM)
    assert table.action.tolist() == [0, 0, 1]


def test_leaf_table_refuses_what_it_cannot_hold():
    with pytest.raises(RefusedError, match="chance nodes"):
        leaf_table(from_record(chance_record()))
    with pytest.raises(RefusedError, match="'cov'"):
        leaf_table(from_record(flat_record(var=None, cov=np.eye(3).tolist())))


def test_scale_counts_discounts_and_probabilities():
    assert scale_of(from_record(flat_record())) == pytest.approx(0.72 * 2**0.5, rel=CLOSED_FORM)
    assert scale_of(from_record(chance_record())) == pytest.approx(0.75 * 2**0.5, rel=CLOSED_FORM)
    correlated = from_record(flat_record(var=None, cov=np.diag([1.0, 9.0, 1.0]).tolist()))
    assert scale_of(correlated) == pytest.approx(0.72 * 3, rel=CLOSED_FORM)
