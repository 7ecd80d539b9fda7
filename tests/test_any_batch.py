"""Scorers that take the batch with each call: from a family of mixed batches to agent and audit."""

from __future__ import annotations

import json
import math
from dataclasses import replace
from pathlib import Path

import numpy as np
import pytest
from ladder import CLOSED_FORM, QUADRATURE
from leaf_tables import table
from small_dataset import FAMILY, forgone, labelled

from distill.audit import audit
from distill.candidates import Candidates
from distill.cli import run
from distill.errors import InputError
from distill.fallback import closed_form_bounds
from distill.family import draw, load_family, parse_family
from distill.generate import add, generate
from distill.infer import infer
from distill.labelling import OWN_BATCH, Asked
from distill.metrics import ratio_over_trees
from distill.peers import (
    FIRST_ORDER,
    MOMENTS,
    ONE,
    SAMPLES,
    STATIC,
    THOMPSON,
    UCT,
    left_out,
    peers,
    timed_cases,
)
from distill.query import Query
from distill.runtime import Scorer
from distill.scorer_inputs import ANY_BATCH, LEAF_TABLE, VARIES
from distill.shift import measure_shifts
from distill.ship import ship
from distill.sources import Traces
from distill.timing import time_exact
from distill.traces import write_trees
from distill.train import train
from distill.tree import leaf_table
from distill.validate import validate
from distill.voc import price

MIXED = "{ choice = [1, 4, 32] }"
VALUE = {"horizon": "inf", "batch": VARIES}
OWN = Asked(horizon=math.inf, batch=OWN_BATCH)
CONFORMANCE = Path(__file__).parents[1] / "datasets" / "conformance"
PLAIN = CONFORMANCE / "leaf-table.onnx"


def family(batch: str = MIXED, more: str = ""):
    """The default family with a batch to each tree."""
    text = load_family(FAMILY).text
    return parse_family(text.replace("[budget]", f"[budget]\nbatch = {batch}\n{more}").encode())


@pytest.fixture(scope="module")
def shipped(tmp_path_factory) -> tuple[Path, Path]:
    """Dataset and scorer file."""
    folder = tmp_path_factory.mktemp("any_batch")
    generate(family(), folder / "data", trees=120, seed=7, asked=OWN)
    front = train(folder / "data", folder / "trained", recipes=["linear"], n_boot=20)
    assert front["value"] == VALUE
    assert set(front["exact"]) == {"dynamic VOC of each call's batch"}
    assert set(front["peers"]) == {FIRST_ORDER, ONE, STATIC, MOMENTS, SAMPLES, UCT, THOMPSON}
    assert front["break_even"]
    ship(folder / "trained", folder / "scorer.onnx")
    return folder / "data", folder / "scorer.onnx"


@pytest.fixture(scope="module")
def scorer(shipped) -> Scorer:
    return Scorer.load(shipped[1], strict=True)


# --- families and datasets -------------------------------------------------------------------------


def test_families_draw_whole_batches_where_they_say_so():
    assert {draw(family(), 0, i).batch for i in range(40)} == {1, 4, 32}
    some = [draw(family("{ log_uniform = [1, 64] }"), 0, i).batch for i in range(20)]
    assert all(type(k) is int and 1 <= k <= 64 for k in some)
    assert len(set(some)) > 5
    assert draw(load_family(FAMILY), 0, 0).batch is None
    for wrong in ("0", "1.5", "inf", "{ choice = [1, 2.5] }", "2e6", "{ normal = [4, 1] }"):
        with pytest.raises(InputError, match=r"budget\.batch"):
            family(wrong)


def test_labels_are_exact_at_each_trees_own_batch(shipped):
    rows, about = Candidates.read(shipped[0])
    assert about["value"] == VALUE
    assert about["input"] == ANY_BATCH.name
    manifest = json.loads((shipped[0] / "manifest.json").read_text())
    assert manifest["asked"]["batch"] == "the tree's"
    assert Asked.described(manifest["asked"]) == OWN
    assert "VOC of the tree's own batch" in (shipped[0] / "README.md").read_text()
    seen = set()
    for number, tree in zip(range(20), rows.trees(), strict=False):
        at = rows.tree == number
        assert np.all(rows.columns["batch_size"][at] == tree.batch)
        exact = price(tree, Query(math.inf, tree.batch, tree.remaining))
        np.testing.assert_allclose(rows.label[at], exact.voc, rtol=CLOSED_FORM, atol=0)
        assert np.all(rows.batch[at] == tree.batch)
        seen.add(tree.batch)
    assert seen == {1, 4, 32}
    assert not rows.is_rate


def test_the_command_asks_for_it_and_goes_on_where_it_stopped(tmp_path, capsys):
    (tmp_path / "f.toml").write_text(family().text)
    given = ["generate", "--family", str(tmp_path / "f.toml"), "--trees", "20", "--out", str(tmp_path / "d")]
    given += ["--workers", "1", "--value", "dynamic"]
    assert run([*given, "--batch", "tree"]) == 0
    before = {p.name: p.read_bytes() for p in (tmp_path / "d").iterdir()}
    assert run([*given, "--batch", "tree"]) == 0
    assert {p.name: p.read_bytes() for p in (tmp_path / "d").iterdir()} == before
    assert Candidates.read(tmp_path / "d")[1]["value"] == VALUE
    capsys.readouterr()
    assert run([*given, "--batch", "4"]) == 2
    assert "; got 4" in (err := capsys.readouterr().err)
    assert "asked.batch: must be " in err
    for wrong in ("leaf", "0", "2.5"):
        with pytest.raises(SystemExit):
            run([*given, "--batch", wrong])
    with pytest.raises(SystemExit):  # `price` takes each tree's own by itself
        run(["price", "x.json", "--batch", "tree"])
    with pytest.raises(InputError, match="batch: must be a whole number from 1"):
        Asked(batch="leaf")


def test_recorded_trees_bring_their_own_batch_and_are_added(tmp_path):
    trees = [draw(family(), 1, i) for i in range(12)]
    trees[0] = replace(trees[0], batch=None)  # states none: one by one
    generate(Traces("t", trees[:8]), tmp_path / "d", asked=OWN)
    add(Traces("t", trees), tmp_path / "d")
    rows, about = Candidates.read(tmp_path / "d")
    assert about["value"] == VALUE
    first = rows.columns["batch_size"][rows.groups.starts]
    assert first.tolist() == [float(tree.batch or 1) for tree in trees]


def test_one_batch_is_no_input_unless_asked_for(tmp_path):
    folder = labelled(tmp_path / "d", trees=10, batch=4)
    rows, about = Candidates.read(folder)
    assert "batch_size" not in rows.columns
    assert about["value"]["batch"] == 4
    rows, about = Candidates.read(folder, like=ANY_BATCH)
    assert np.all(rows.columns["batch_size"] == 4)
    assert about["value"] == VALUE
    rates = labelled(tmp_path / "r", trees=10)
    assert Candidates.read(rates, like=ANY_BATCH)[1]["value"]["batch"] is None


def test_what_a_scorer_cannot_take_is_refused_by_name(tmp_path):
    generate(family(more="horizon = { choice = [0, inf] }"), tmp_path / "both", trees=12,
             asked=Asked(batch=OWN_BATCH))  # fmt: skip
    with pytest.raises(InputError, match=r"horizon and batch: must not both differ from call to call"):
        Candidates.read(tmp_path / "both")
    wins = load_family(FAMILY.parent / "on-time.toml").text.replace("[budget]", f"[budget]\nbatch = {MIXED}")
    generate(parse_family(wins.encode()), tmp_path / "wins", trees=12, asked=Asked(0.0, OWN_BATCH))
    with pytest.raises(InputError, match="batch: must be one for the whole dataset"):
        Candidates.read(tmp_path / "wins")


def test_infer_writes_the_batches_that_records_state():
    trees = [draw(family(), 3, i) for i in range(15)]
    trees[0] = replace(trees[0], batch=None)
    assert infer(trees).family["budget.batch"].args == (1, 4, 32)


def test_no_exact_value_exceeds_the_bound():
    for i in range(15):
        tree = draw(family("{ log_uniform = [1, 1000] }"), 4, i)
        leaves = leaf_table(tree)
        columns = {name: getattr(leaves, name) for name in ANY_BATCH.floats}
        bound = closed_form_bounds(ANY_BATCH, columns, tree.batch)
        for horizon in (0.0, 3.0, math.inf):
            exact = price(tree, Query(horizon, tree.batch)).voc
            assert np.all(exact <= bound * (1 + QUADRATURE)), (i, horizon)


# --- measured --------------------------------------------------------------------------------------


def test_timed_decisions_and_peers_take_each_ones_own_batch(shipped, monkeypatch):
    rows, _ = Candidates.read(shipped[0])
    cases = timed_cases(rows, VALUE, 64, 0)
    assert {case.columns["batch_size"] for case in cases} == {1.0, 4.0, 32.0}
    asked = []
    monkeypatch.setattr("distill.timing.price", lambda _tree, query: asked.append(query))
    time_exact(cases, calls=len(cases))
    assert asked[1:] == [Query(math.inf, int(c.columns["batch_size"]), c.remaining) for c in cases]
    for case in cases[:5]:
        k = int(case.columns["batch_size"])
        fixed = {name: x for name, x in case.columns.items() if name != "batch_size"}
        ours, theirs = (
            peers(value, 4, 0, kind=kind)
            for value, kind in ((VALUE, ANY_BATCH), ({**VALUE, "batch": k}, LEAF_TABLE))
        )
        assert set(ours) == set(theirs)
        for name in (FIRST_ORDER, ONE, STATIC, MOMENTS, SAMPLES, UCT, THOMPSON):
            got, want = ours[name](case.columns, 9.0), theirs[name](fixed, 9.0)
            np.testing.assert_array_equal(got, want, err_msg=name)
    assert left_out(ANY_BATCH, VALUE) == {}
    assert set(left_out(ANY_BATCH, {"horizon": 0.0, "batch": VARIES})) == {STATIC, MOMENTS, SAMPLES}


def test_validation_on_mixed_and_on_single_batches(shipped, tmp_path):
    data, path = shipped
    found = validate(path, data, n_boot=20)
    assert found["part"] == "held_out"
    assert {x["slice"] for x in found["accuracy"]["slices"] if x["by"] == "batch"} >= {"1", "32"}
    own = validate(path, labelled(tmp_path / "d", trees=60, seed=9, batch=8), n_boot=20)
    assert own["part"] == "all"
    assert own["accuracy"]["forgone_percent"]["value"] < 2
    assert (
        own["accuracy"]["forgone_percent"]["value"]
        < own["beside"]["static closed form"]["forgone_percent"]["value"]
    )
    for other in (PLAIN, CONFORMANCE / "any-horizon.onnx"):
        with pytest.raises(InputError, match="value: must be the scorer's"):
            validate(other, data)
    with pytest.raises(InputError, match="value: must be the scorer's"):
        validate(path, labelled(tmp_path / "rates", trees=10))
    assert "dynamic VOC of the batch that each call gives" in path.with_suffix(".md").read_text()


def test_audit_asks_each_recorded_tree_at_its_own_batch(shipped, tmp_path):
    trees = [draw(family(), 99, i) for i in range(60)]
    write_trees(tmp_path / "t.jsonl", trees)
    found = audit(shipped[1], [tmp_path / "t.jsonl"], trees=60, n_boot=20, family=family()).figures
    assert found["trees"]["judged"] == 60
    assert found["value"] == VALUE
    assert found["now"]["forgone_percent"]["value"] < 2
    assert not found["worse"]
    step = found["drift"]["columns"]["step"]
    assert step["meaning"].startswith("feature of the median leaf: ")
    assert not step["drifted"]


def test_shifts_keep_each_trees_batch(scorer):
    found = measure_shifts(scorer, family(), names=["as given", "noise x4"], trees=20, n_boot=10)
    assert set(found) == {"as given", "noise x4"}
    assert all(m["forgone_percent"]["value"] < 10 and m["aside"] == 0 for m in found.values())


@pytest.mark.slow
def test_one_file_is_nearly_as_good_at_each_batch_as_one_trained_for_it(tmp_path):
    """3,000 trees of three batches against 1,000 of each, three times, on the same 4,000 others of each.

    Judged as files of any horizon are, see there. Measured at k = 1, 4 and 32: files of mixed batches forgo
    0.042, 0.034 and 0.024 %, those of one 0.088, 0.069 and 0.049 %; the difference ends below 0: what trees
    of other batches teach serves all.
    """

    def trained(data: Path) -> Path:
        train(data, data / "trained", recipes=["boosting 100x31"], n_boot=20)
        return data / "trained" / "boosting-100x31.onnx"

    mixed = []
    for seed in (1, 11, 21):
        generate(family(), tmp_path / f"mixed-{seed}", trees=3000, seed=seed, asked=OWN)
        mixed.append(trained(tmp_path / f"mixed-{seed}"))
    for k in (1, 4, 32):
        own = [
            trained(labelled(tmp_path / f"{k}-{seed}", trees=1000, seed=seed, batch=k))
            for seed in (2, 12, 22)
        ]
        test = labelled(tmp_path / f"test-{k}", trees=4000, seed=3, batch=k)
        (ours, best), (theirs, _) = (
            np.mean([forgone(path, test) for path in paths], axis=0) for paths in (mixed, own)
        )
        more = ratio_over_trees(100 * (ours - theirs), best)
        assert more.high < 0.05, (k, more)


def test_each_rollout_of_a_fixed_batch_has_its_cost_too(tmp_path):
    """The file and the closed form that answers for it, as the exact net value: voc - 8 cost."""
    train(labelled(tmp_path / "d", trees=60, batch=8), tmp_path / "t", recipes=["linear"], n_boot=20)
    scorer = Scorer.load(tmp_path / "t" / "linear.onnx", strict=True)
    t = table(np.random.default_rng(3), 12, 3)
    for late in (None, 0.0):  # a deadline that has passed: the closed form answers
        free = scorer.score(**{**t, "cost": np.zeros(12)}, deadline=late)
        second, first = np.argsort(free.voc)[-2:]
        apart = (free.voc[first] - free.voc[second]) / 8
        for times, pick in ((0.9, first), (1.1, second)):
            cost = np.where(np.arange(12) == first, times * apart, 0.0)
            assert scorer.score(**{**t, "cost": cost}, deadline=late).pick == pick
            assert scorer.pick(**{**t, "cost": cost}, deadline=late) == pick
        for times, worth_it in ((0.9, True), (1.1, False)):
            dear = {**t, "cost": np.full(12, times * free.voc[first] / 8)}
            assert scorer.score(**dear, deadline=late).worth_it is worth_it
