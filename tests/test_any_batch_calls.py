"""Calls of a scorer that takes the batch with each: in the agent, held, without a file, recorded."""

from __future__ import annotations

import json
import math
import time
from pathlib import Path
from typing import Any

import numpy as np
import onnx
import pytest
from leaf_tables import table

from distill.closed_form import highest_rates, static_rates
from distill.errors import InputError, ScorerFileError
from distill.recorder import Recorder
from distill.runtime import Scorer
from distill.scorer_inputs import ANY_BATCH, KINDS
from distill.traces import read_trees

CONFORMANCE = Path(__file__).parents[1] / "datasets" / "conformance"
PLAIN = CONFORMANCE / "leaf-table.onnx"
FILE = CONFORMANCE / "any-batch.onnx"


@pytest.fixture(scope="module")
def scorer() -> Scorer:
    return Scorer.load(FILE, strict=True)


def one(seed: int = 0, batch_size: float = 4) -> dict[str, Any]:
    return {**table(np.random.default_rng(seed), 12, 3), "batch_size": batch_size}


def test_more_rollouts_are_worth_more(scorer):
    assert scorer.kind is ANY_BATCH is KINDS["leaf table, any batch"]
    t = one(8)
    best = [scorer.score(**{**t, "batch_size": k}).voc.max() for k in (1, 2, 4, 8, 16, 32)]
    assert np.all(np.diff(best) > 0)


def test_the_batch_decides_what_is_scored(scorer):
    t = one()
    values = {k: scorer.score(**{**t, "batch_size": k}) for k in (1, 4, 32)}
    assert values[1].voc.max() < values[4].voc.max() < values[32].voc.max()
    for k, got in values.items():
        assert np.all(got.batch == k)
        assert got.pick == int(np.argmax(got.voc - k * t["cost"]))
        assert scorer.pick(**{**t, "batch_size": k}) == got.pick
        for form in (float(k), np.float64(k), np.int32(k), np.array([k]), np.array(k)):
            np.testing.assert_array_equal(scorer.score(**{**t, "batch_size": form}).voc, got.voc)
            assert scorer.pick(**{**t, "batch_size": form}) == got.pick


def test_each_rollout_of_a_batch_has_its_cost(scorer):
    """As in the exact net value: a leaf that is dear a rollout loses to a cheap one as the batch grows."""
    t = one(batch_size=32)
    for answers in (scorer, Scorer.closed_form()):
        free = answers.score(**{**t, "cost": np.zeros(12)})
        order = np.argsort(free.voc)
        first, second = order[-1], order[-2]
        apart = (free.voc[first] - free.voc[second]) / 32
        for times, pick in ((0.9, first), (1.1, second)):
            cost = np.zeros(12)
            cost[first] = times * apart
            got = answers.score(**{**t, "cost": cost})
            assert got.pick == answers.pick(**{**t, "cost": cost}) == pick
            assert got.worth_it
        for times, worth_it in ((0.9, True), (1.1, False)):
            got = answers.score(**{**t, "cost": np.full(12, times * free.voc[first] / 32)})
            assert got.worth_it is worth_it


def test_the_batch_is_required_here_and_refused_elsewhere(scorer):
    t = one()
    without = {name: x for name, x in t.items() if name != "batch_size"}
    for call in (scorer.score, scorer.pick, scorer.hold):
        with pytest.raises(InputError, match="batch_size: is missing: a leaf table, any batch has it"):
            call(**without)
    with pytest.raises(InputError, match="batch_size: is missing"):
        scorer.score(**without, tree=np.zeros(12, dtype=int))
    for other in (Scorer.load(PLAIN), Scorer.load(CONFORMANCE / "any-horizon.onnx"), Scorer.closed_form()):
        for call in (other.score, other.pick):
            with pytest.raises(InputError, match="batch_size: is no column of a leaf table"):
                call(**t, horizon=4.0)
    with pytest.raises(InputError, match="horizon: is no column of a leaf table, any batch"):
        scorer.score(**t, horizon=4.0)
    for wrong in ("x", None, [1, 2], 1j, np.ones(12), True, 2**2000):
        with pytest.raises(InputError, match="batch_size: must"):
            scorer.score(**{**t, "batch_size": wrong})


@pytest.mark.parametrize("size", [math.nan, 0, -1, 2.5, 2**60, 2**53 + 2, math.inf, -math.inf, 1e-300])
def test_invalid_batches_are_flagged_as_invalid_budgets_are(scorer, size):
    t = one(batch_size=size)
    with pytest.raises(InputError, match=r"batch_size: must be a whole number from 1 to 2\^53"):
        scorer.score(**t)
    lenient = Scorer.load(FILE)
    for answers in (lenient, Scorer.closed_form()):
        got = answers.score(**t)
        assert not got.in_range.any()
        assert not got.voc.any()
        assert not got.worth_it
        assert (answers.counters.invalid, answers.counters.fallback) == (1, 1)
    np.testing.assert_array_equal(
        lenient.score(**{**t, "batch_size": 4, "remaining": math.nan}).voc, np.zeros(12)
    )
    want = lenient.score(**one()).voc  # nothing of the invalid call stays
    assert want.max() > 0
    np.testing.assert_array_equal(want, scorer.score(**one()).voc)


def test_many_trees_in_one_call_each_at_its_own_batch(scorer):
    parts = [one(seed, k) for seed, k in enumerate((1, 4, 32, 1))]
    whole: dict[str, Any] = {name: np.concatenate([p[name] for p in parts]) for name in ANY_BATCH.columns}
    whole |= {name: np.repeat([p[name] for p in parts], 12) for name in ANY_BATCH.scalars}
    number = np.repeat(np.arange(4), 12)
    got = scorer.score(**whole, tree=number)
    for i, part in enumerate(parts):
        alone = scorer.score(**part)
        np.testing.assert_array_equal(got.voc[12 * i : 12 * (i + 1)], alone.voc)
        assert got.pick[i] == alone.pick
    one_for_all = scorer.score(**{**whole, "batch_size": 4}, tree=number)
    np.testing.assert_array_equal(one_for_all.voc[:12], scorer.score(**{**parts[0], "batch_size": 4}).voc)
    with pytest.raises(InputError, match=r"batch_size: must have shape \(48,\)"):
        scorer.score(**{**whole, "batch_size": np.ones(3)}, tree=number)


@pytest.mark.parametrize("with_file", [True, False])
def test_held_leaves_take_another_batch_between_calls(scorer, with_file):
    scorer = scorer if with_file else Scorer.closed_form()
    t = one(3)
    held = scorer.hold(**t)
    for i, k in enumerate((4, 1, np.int64(32), 8.0)):
        held.change(batch_size=k)
        t["mean"][i] += 0.5
        held.update(i, mean=t["mean"][i])
        whole, kept = scorer.score(**{**t, "batch_size": k}), held.score(remaining=60)
        for a, b in zip(whole, kept, strict=True):
            np.testing.assert_array_equal(a, b)
        assert held.pick(remaining=60) == whole.pick
    with pytest.raises(InputError, match="horizon: is no number of a call of a leaf table, any batch"):
        held.change(horizon=1.0)
    for wrong in ("x", [1, 2], None):
        with pytest.raises(InputError, match="batch_size: must"):
            held.change(batch_size=wrong)
    np.testing.assert_array_equal(held.score(remaining=60).voc, whole.voc)
    held.change(batch_size=0)
    if with_file:  # strict
        with pytest.raises(InputError, match="batch_size: must be a whole number"):
            held.pick(remaining=60)
    else:
        assert not held.score(remaining=60).voc.any()
    held.change(batch_size=8)
    np.testing.assert_array_equal(held.score(remaining=60).voc, whole.voc)
    for k in (3, 5):  # with the call itself, and kept
        want = scorer.score(**{**t, "batch_size": k})
        np.testing.assert_array_equal(held.score(remaining=60, batch_size=k).voc, want.voc)
        assert held.pick(remaining=60) == held.pick(remaining=60, batch_size=k) == want.pick
    with pytest.raises(InputError, match="batch_size: is a number of a call, none of a leaf"):
        held.update(0, batch_size=2)
    with pytest.raises(InputError, match="batch_size: must"):
        held.pick(remaining=60, batch_size="2")
    with pytest.raises(InputError, match="batch_size: is no number of a call of a leaf table"):
        Scorer.load(PLAIN).hold(**table(np.random.default_rng(0), 4, 2)).change(batch_size=3)


def test_the_closed_form_answers_where_the_file_does_not():
    t = one(5, 7)
    names = ("mean", "var", "noise_var", "gain", "offset")
    value, batch = static_rates(**{name: t[name] for name in names}, remaining=60, batch=7)
    bound = highest_rates(t["var"], t["noise_var"], t["gain"], 7)
    late = Scorer.load(FILE).score(**t, deadline=time.perf_counter() - 1)
    without = Scorer.load("none.onnx", guard=True).score(**t)
    none_left = Scorer.closed_form().score(**{**t, "remaining": 0})
    for got in (late, without, none_left):
        np.testing.assert_array_equal(got.voc, value)
        np.testing.assert_array_equal(got.batch, batch)
        np.testing.assert_array_equal(got.voc_high, np.maximum(bound, value))
        assert np.all(got.batch == 7)


def test_inputs_of_a_call_survive_json():
    for k in (1, 8, 2**53):
        t = {name: np.asarray(x) for name, x in one(2, k).items()}
        told = ANY_BATCH.from_json(json.loads(json.dumps(ANY_BATCH.to_json(t))))
        for name, x in t.items():
            np.testing.assert_array_equal(told[name], x)
        a, b = (Scorer.closed_form().score(**inputs) for inputs in (t, told))
        np.testing.assert_array_equal(a.voc, b.voc)


@pytest.mark.parametrize(("source", "claim", "message"), [
    (FILE, "leaf table", "input 'batch_size': has no place"),
    (FILE, "leaf table, any horizon", "input 'batch_size': has no place"),
    (PLAIN, ANY_BATCH.name, "input 'batch_size': is missing"),
])  # fmt: skip
def test_a_file_with_other_inputs_than_it_claims_is_refused(source, claim, message):
    model = onnx.load_model_from_string(source.read_bytes())
    facts = {p.key: p.value for p in model.metadata_props}
    onnx.helper.set_model_props(model, {**facts, "input": claim})
    with pytest.raises(ScorerFileError, match=message):
        Scorer.from_bytes(model.SerializeToString())


def test_a_batch_per_leaf_or_of_another_type_is_refused():
    for element, shape in ((onnx.TensorProto.DOUBLE, ["n"]), (onnx.TensorProto.INT64, [])):
        model = onnx.load_model_from_string(FILE.read_bytes())
        (info,) = (i for i in model.graph.input if i.name == "batch_size")
        info.CopyFrom(onnx.helper.make_tensor_value_info("batch_size", element, shape))
        with pytest.raises(ScorerFileError, match="input 'batch_size': must have element type"):
            Scorer.from_bytes(model.SerializeToString())


def test_the_self_test_holds_batches_as_json(scorer):
    told = {case["inputs"]["batch_size"] for case in scorer.facts["self_test"]}
    assert len(told) > 1
    assert told <= {1.0, 4.0, 32.0}


def test_a_recorder_keeps_the_batch_of_each_call(tmp_path):
    with Recorder(tmp_path, strict=True) as recorder:
        for k in (1, 4.0, np.float64(7), np.int64(32), 2**53):
            recorder.see(**one(batch_size=k))
        recorder.strict = False
        for wrong in (0, math.nan, 2.5, 2**60, [1, 2], "x"):
            recorder.see(**one(batch_size=wrong))
    assert recorder.counters.invalid == 6
    trees = [tree for _, tree in read_trees(tmp_path / "trace-000001.jsonl.gz")]
    assert [tree.batch for tree in trees] == [1, 4, 7, 32, 2**53]
