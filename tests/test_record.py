"""Reading and writing `belief-tree/1`: what is accepted, and the one clear error for what is not."""

from __future__ import annotations

import json
import math

import numpy as np
import pytest
from builders import chance_record, flat_record, win_loss_record
from hypothesis import given, settings
from hypothesis import strategies as st

from distill.errors import InputError
from distill.record import from_record, parse_record, to_record

MALFORMED = {
    "no object": ([1, 2], "record: must be a JSON object"),
    "no format": (flat_record(format=None), "format: is missing"),
    "other format": (
        flat_record(format="belief-tree/2"),
        "format: must be 'belief-tree/1'; got 'belief-tree/2'",
    ),
    "unknown key": (flat_record(variance=[1]), "key 'variance': is not a key of belief-tree/1"),
    "no parent": (flat_record(parent=None), "parent: is missing"),
    "root only": (flat_record(parent=[-1]), "parent: must have a root and at least one action"),
    "no root": (flat_record(parent=[0, 0, 1, 1, 0]), r"parent\[0\]: must be -1"),
    "forward parent": (
        flat_record(parent=[-1, 0, 4, 1, 0]),
        r"parent\[2\]: must be an earlier node, 0 to 1; got 4",
    ),
    "cycle": (flat_record(parent=[-1, 2, 1, 1, 0]), r"parent\[1\]: must be an earlier node"),
    "own parent": (flat_record(parent=[-1, 1, 1, 1, 0]), r"parent\[1\]: must be an earlier node"),
    "second root": (
        flat_record(parent=[-1, -1, 1, 1, 0]),
        r"parent\[1\]: must be an earlier node, 0 to 0; got -1",
    ),
    "fractional parent": (
        flat_record(parent=[-1, 0.5, 1, 1, 0]),
        r"parent\[1\]: must be a whole number; got 0.5",
    ),
    "boolean parent": (
        flat_record(parent=[-1, False, 1, 1, 0]),
        r"parent\[1\]: must be a whole number; got false",
    ),
    "parent no array": (flat_record(parent="-1"), "parent: must be an array"),
    "short kind": (flat_record(kind=["decision"]), "kind: must have 5 entries, one a node; got 1"),
    "odd kind": (
        flat_record(kind=["decision", "max", "leaf", "leaf", "leaf"]),
        r"kind\[1\]: must be one of decision, chance, leaf; got 'max'",
    ),
    "kind no text": (
        flat_record(kind=["decision", [], "leaf", "leaf", "leaf"]),
        r"kind\[1\]: must be one of",
    ),
    "chance root": (
        flat_record(kind=["chance", "decision", "leaf", "leaf", "leaf"]),
        r"kind\[0\]: must be 'decision'",
    ),
    "leaf with child": (
        flat_record(kind=["decision", "leaf", "leaf", "leaf", "leaf"]),
        r"kind\[1\]: must not be 'leaf'",
    ),
    "childless node": (
        flat_record(kind=["decision", "decision", "leaf", "leaf", "decision"]),
        r"kind\[4\]: must be 'leaf': the node has no child",
    ),
    "root reward": (
        flat_record(reward=[1, 0, 0, 0, 0]),
        r"reward\[0\]: must be 0 or null at the root; got 1.0",
    ),
    "huge reward": (flat_record(reward=[0, 1e101, 0, 0, 0]), r"reward\[1\]: must be at most 1e\+100 in size"),
    "zero discount": (flat_record(discount=[1, 0, 1, 1, 1]), r"discount\[1\]: must be above 0 and at most 1"),
    "large discount": (
        flat_record(discount=[1, 1, 1, 1, 1.01]),
        r"discount\[4\]: must be above 0 and at most 1",
    ),
    "prob off chance": (
        flat_record(prob=[1, 0.5, 1, 1, 1]),
        r"prob\[1\]: must be 1 or null unless under a chance",
    ),
    "prob missing": (chance_record(prob=None), r"prob\[2\]: must be given under a chance node"),
    "prob sum": (
        chance_record(prob=[None, None, 0.25, 0.7, None]),
        "prob under node 1: must sum to 1 within 1e-9; got 0.95",
    ),
    "prob negative": (
        chance_record(prob=[None, None, -0.25, 1.25, None]),
        r"prob\[2\]: must be >= 0; got -0.25",
    ),
    "no mean": (flat_record(mean=None), "mean: is missing"),
    "no beliefs": (
        flat_record(mean=None, var=None, noise_var=None),
        "record: must have leaf columns mean, var, noise_var or alpha",
    ),
    "two beliefs": (flat_record(alpha=[None] * 2 + [1] * 3), "must not be mixed: one belief kind a tree"),
    "mean null": (flat_record(mean=[None, None, None, 0, 0]), r"mean\[2\]: must be given on a leaf"),
    "mean on node": (
        flat_record(mean=[None, 1, 0, 0, 0]),
        r"mean\[1\]: must be null: the node is no leaf; got 1",
    ),
    "mean text": (flat_record(mean=[None, None, "0", 0, 0]), r"mean\[2\]: must be a number; got '0'"),
    "mean huge": (
        flat_record(mean=[None, None, 10**400, 0, 0]),
        r"mean\[2\]: must be finite in double precision",
    ),
    "mean infinite": (flat_record(mean=[None, None, math.inf, 0, 0]), r"mean\[2\]: must be finite"),
    "mean nan": (flat_record(mean=[None, None, math.nan, 0, 0]), r"mean\[2\]: must be finite"),
    "negative var": (flat_record(var=[None, None, 1, -2, 1]), r"var\[3\]: must be >= 0; got -2.0"),
    "zero noise": (flat_record(noise_var=[None, None, 0, 1, 1]), r"noise_var\[2\]: must be > 0; got 0.0"),
    "negative cost": (flat_record(cost=[None, None, 0, -1, 0]), r"cost\[3\]: must be >= 0; got -1.0"),
    "var and cov": (flat_record(cov=np.eye(3).tolist()), "var: must not be given beside 'cov'"),
    "cov size": (flat_record(var=None, cov=[[1, 0], [0, 1]]), "cov: must be 3 rows of 3 numbers"),
    "cov asymmetric": (
        flat_record(var=None, cov=[[1, 0.5, 0], [0, 1, 0], [0, 0, 1]]),
        r"cov\[0\]\[1\]: must equal cov\[1\]\[0\] = 0.0; got 0.5",
    ),
    "cov indefinite": (
        flat_record(var=None, cov=[[1, 2, 0], [2, 1, 0], [0, 0, 1]]),
        "cov: must be positive semidefinite: no eigenvalue below 0; got -1",
    ),
    "cov negative": (
        flat_record(var=None, cov=[[1, 0, 0], [0, -1, 0], [0, 0, 1]]),
        r"cov\[1\]\[1\]: must be >= 0",
    ),
    "cov with win/loss": (win_loss_record(cov=[[1, 0], [0, 1]]), "must not be mixed"),
    "alpha zero": (win_loss_record(alpha=[None, 0, 1]), r"alpha\[1\]: must be > 0; got 0.0"),
    "high below low": (win_loss_record(high=[None, 1, -1]), r"high\[2\]: must be above 'low'; got -1.0"),
    "horizon negative": (flat_record(horizon=-1), "horizon: must be >= 0; got -1"),
    "horizon text": (flat_record(horizon="forever"), 'horizon: must be a number or "inf"'),
    "horizon fractional": (win_loss_record(horizon=1.5), "horizon: must be whole"),
    "batch zero": (flat_record(batch=0), r"batch: must be a whole number from 1 to 2\^53; got 0"),
    "remaining boolean": (flat_record(remaining=True), r"remaining: must be a whole number from 0 to 2\^53"),
    "id list": (flat_record(id=[1]), "id: must be text or a whole number"),
    "extra list": (flat_record(extra=[1]), "extra: must be an object"),
}

BAD_TEXT = {
    "empty": ("", "column 1: must be valid JSON"),
    "truncated": (json.dumps(flat_record())[:-20], "must be valid JSON"),
    "nan": (
        json.dumps(flat_record(mean=[None, None, math.nan, 0, 0])),
        r"^mean\[2\]: must be finite; got nan$",
    ),
    "infinity under a chance node": (
        json.dumps(chance_record()).replace("0.25", "-Infinity", 1),
        r"^prob\[\d\]: must be finite; got -inf$",
    ),
    "nan in a matrix": (
        json.dumps(flat_record(var=None, cov=[[1, 0, 0], [0, 1, math.nan], [0, math.nan, 1]])),
        r"^cov\[1\]\[2\]: must be finite; got nan$",
    ),
    "infinity in extra": (
        json.dumps(flat_record(extra={"a b": [0, {"c": math.inf}]})),
        r"^extra\.'a b'\[1\]\.c: must be finite; got inf$",
    ),
    "huge exponent in extra": (
        json.dumps(flat_record(extra={"a": 0.75})).replace("0.75", "1e999"),
        r"^extra\.a: must be finite; got inf$",
    ),
    "repeated key": (
        '{"format": "belief-tree/1", "format": "belief-tree/1"}',
        "key 'format': must not occur twice",
    ),
    "deep nesting": ("[" * 200_000, "must not be nested so deeply"),
    "long number": ('{"format": ' + "9" * 10_000 + "}", "must be valid JSON"),
    "not UTF-8": (b'{"format": "\xff\xfe"}', "must be UTF-8 text"),
    "huge exponent": (json.dumps(flat_record()).replace("0.4", "4e999"), r"mean\[3\]: must be finite"),
}


@pytest.mark.parametrize("name", MALFORMED)
def test_malformed_record_names_key_rule_and_value(name):
    record, message = MALFORMED[name]
    with pytest.raises(InputError, match=message) as caught:
        from_record(record)
    assert "\n" not in str(caught.value)


@pytest.mark.parametrize("name", BAD_TEXT)
def test_malformed_text_is_one_input_error(name):
    text, message = BAD_TEXT[name]
    with pytest.raises(InputError, match=message) as caught:
        parse_record(text)
    assert len(str(caught.value)) < 300


def test_defaults_and_nulls():
    tree = from_record(flat_record(reward=None, discount=None))
    assert tree.reward.tolist() == [0] * 5
    assert tree.discount.tolist() == [1] * 5
    assert tree.prob.tolist() == [1] * 5
    assert tree.cost.tolist() == [0] * 3
    assert tree.horizon is None


def test_horizon_inf_and_scalars_are_kept():
    tree = from_record(flat_record(horizon="inf", batch=3, remaining=7, id="a", extra={"bay": [1]}))
    assert (tree.horizon, tree.batch, tree.remaining, tree.id, tree.extra) == (
        math.inf,
        3,
        7,
        "a",
        {"bay": [1]},
    )


def test_arrays_are_read_only():
    tree = from_record(flat_record())
    with pytest.raises(ValueError, match="read-only"):
        tree.mean[0] = 1.0


@pytest.mark.parametrize("make", [flat_record, chance_record, win_loss_record])
def test_round_trip_is_exact(make):
    record = make(id=7, remaining=10, horizon="inf", extra={"a": 1})
    tree = from_record(record)
    again = from_record(json.loads(json.dumps(to_record(tree))))
    for name, value in vars(tree).items():
        np.testing.assert_array_equal(getattr(again, name), value, err_msg=name)


def test_singular_covariance_is_accepted():
    ones = np.ones((3, 3)) * 2e-7
    tree = from_record(flat_record(var=None, cov=ones.tolist()))
    np.testing.assert_array_equal(tree.cov, ones)


_json = st.recursive(
    st.none() | st.booleans() | st.integers() | st.floats() | st.text(max_size=5),
    lambda inner: st.lists(inner, max_size=4),
    max_leaves=8,
)


@settings(max_examples=300, deadline=None, derandomize=True)
@given(st.sampled_from(sorted(set(flat_record()) | {"cov", "cost", "alpha", "horizon", "prob"})), _json)
def test_any_value_under_a_key_is_accepted_or_one_input_error(key, value):
    """No other exception, whatever stands in a record; what is accepted survives the round trip."""
    try:
        tree = from_record({**flat_record(), key: value})
    except InputError as e:
        assert "\n" not in str(e)
        return
    assert from_record(to_record(tree)).n_nodes == tree.n_nodes
