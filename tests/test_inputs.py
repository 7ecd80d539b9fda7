"""Each kind of input from labelled trees to decisions: train, ship, validate, guard and fallback."""

from __future__ import annotations

import json
import math
from pathlib import Path

import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st
from ladder import CLOSED_FORM, QUADRATURE

from distill.backup import backup_of
from distill.candidates import Candidates
from distill.cli import run
from distill.errors import InputError, ScorerFileError
from distill.fallback import closed_form_bounds, closed_form_values
from distill.family import draw, load_family
from distill.generate import generate
from distill.peers import timed_cases
from distill.query import Query
from distill.runtime import Scorer
from distill.scorer_inputs import KINDS, LEAF_TABLE, RECORD, WIN_LOSS_TABLE, kind_of
from distill.ship import ship
from distill.train import train
from distill.tree import leaf_table
from distill.validate import validate
from distill.voc import price

FAMILIES = Path(__file__).parents[1] / "datasets" / "families"
CONFORMANCE = {
    scorer.kind.name: scorer
    for path in sorted((FAMILIES.parent / "conformance").glob("*.onnx"))
    for scorer in [Scorer.load(path)]
}
CASES = {"on-time": WIN_LOSS_TABLE, "crossing-traffic": RECORD}


@pytest.fixture(scope="module", params=CASES)
def shipped(request, tmp_path_factory):
    """A family's name, its small dataset, and a scorer file trained on it."""
    folder = tmp_path_factory.mktemp("inputs")
    generate(load_family(FAMILIES / f"{request.param}.toml"), folder / "data", trees=75, seed=2)
    with pytest.MonkeyPatch.context() as patch:
        patch.setattr("distill.train._EXACT_SECONDS", 0.5)  # three calls of dear methods are enough here
        train(folder / "data", folder / "trained", recipes=["linear"], n_boot=20)
    ship(folder / "trained", folder / "scorer.onnx")
    return request.param, folder / "data", folder / "scorer.onnx"


def columns_of(tree):
    """The columns of a tree's kind."""
    if tree.has_chance or tree.cov is not None:
        return backup_of(tree).rows()
    table = leaf_table(tree)
    names = WIN_LOSS_TABLE.columns if tree.mean is None else LEAF_TABLE.columns
    return {name: getattr(table, name) for name in names}


def test_a_trained_file_beats_its_closed_form_and_says_what_it_reads(shipped):
    name, data, path = shipped
    scorer = Scorer.load(path, strict=True)
    assert scorer.kind is CASES[name]
    found = validate(scorer, data, n_boot=20)
    assert found["part"] == "held_out"
    own = found["accuracy"]["forgone_percent"]["value"]
    assert own < found["beside"]["static closed form"]["forgone_percent"]["value"]
    assert own < 0.3 * found["beside"]["random pick"]["forgone_percent"]["value"]


def test_one_call_equals_the_file_on_many_trees(shipped):
    _, data, path = shipped
    scorer, rows = Scorer.load(path), Candidates.read(data)[0]
    whole = scorer.score(**rows.columns, tree=rows.tree)
    for a, n in list(zip(rows.groups.starts, rows.groups.sizes, strict=True))[:10]:
        part = {k: x[a : a + n] for k, x in rows.columns.items()}
        part["remaining"] = float(part["remaining"][0])
        alone = scorer.score(**part)
        np.testing.assert_array_equal(alone.voc, whole.voc[a : a + n])
        assert scorer.pick(**part) == alone.pick
        assert np.all(alone.voc_high >= alone.voc)


def test_what_the_file_has_no_answer_for_goes_to_the_closed_form(shipped):
    name, _, path = shipped
    scorer = Scorer.load(path)
    tree = draw(load_family(FAMILIES / f"{name}.toml"), 9, 1)
    columns = columns_of(tree)
    plain = scorer.score(**columns, remaining=40)
    want, batch = closed_form_values(CASES[name], columns, 40.0)
    late = scorer.score(**columns, remaining=40, deadline=0.0)
    np.testing.assert_array_equal(late.voc, want)
    np.testing.assert_array_equal(late.batch, batch)
    assert scorer.counters.late == scorer.counters.fallback == 1
    first = CASES[name].floats[0]
    broken = {**columns, first: np.where(np.arange(len(want)) == 0, np.nan, columns[first])}
    bad = scorer.score(**broken, remaining=40)
    assert scorer.counters.invalid == 1
    assert not bad.in_range.any()
    assert bad.voc[0] == 0
    with pytest.raises(InputError, match=rf"{first}\[0\]"):
        Scorer.load(path, strict=True).score(**broken, remaining=40)
    np.testing.assert_array_equal(scorer.score(**columns, remaining=40).voc, plain.voc)


def test_columns_of_another_kind_are_refused_by_name(shipped):
    name, _, path = shipped
    scorer = Scorer.load(path)
    tree = draw(load_family(FAMILIES / "cold-store.toml"), 0, 0)
    with pytest.raises(InputError, match=f"is missing: a {CASES[name].name} has it|is no column of a"):
        scorer.score(**columns_of(tree), remaining=10)
    own = columns_of(draw(load_family(FAMILIES / f"{name}.toml"), 0, 0))
    with pytest.raises(InputError, match="colour: is no column of a"):
        scorer.pick(**own, colour=own["cost"], remaining=10)
    with pytest.raises(InputError, match="cost: is missing"):
        scorer.pick(**{k: x for k, x in own.items() if k != "cost"}, remaining=10)


def test_a_file_with_another_kind_in_its_metadata_is_refused(shipped):
    import onnx
    from onnx import helper

    _, _, path = shipped
    model = onnx.load(path)
    kept = {p.key: p.value for p in model.metadata_props}
    for other, reason in (("leaf table", "input"), ("wish list", "'input': must be one of")):
        helper.set_model_props(model, {**kept, "input": other})
        with pytest.raises(ScorerFileError, match=reason):
            Scorer.from_bytes(model.SerializeToString())


def test_timed_decisions_have_the_columns_of_their_kind(shipped):
    _, data, path = shipped
    rows, about = Candidates.read(data)
    scorer = Scorer.load(path, strict=True)
    for case in timed_cases(rows, about["value"], 64, 0)[:3]:
        assert len(scorer.score(**case.columns, remaining=case.remaining).voc) == 64
        assert case.tree.n_leaves == 64


def test_the_sheet_states_scorer_backup_and_exact_side_by_side(shipped):
    name, _, path = shipped
    decision = json.loads(path.with_suffix(".json").read_text())["decision"]
    assert set(decision["exact"]) == {"dynamic VOC", "dynamic rate"}
    for key, times in decision["times_faster"].items():
        assert times == decision["exact"][key]["p50_us"] / decision["scorer"]["p50_us"] > 1
    page = path.with_suffix(".md").read_text()
    if name == "on-time":
        assert "backup" not in decision
        assert "backup" not in page
        return
    times = {"one path", "after one rollout", "after one rollout, compiled", "whole tree"}
    assert set(decision["backup"]) == times
    after = decision["backup"]["after one rollout"]["p50_us"]
    for key, times in decision["times_faster_with_backup"].items():
        both = decision["scorer"]["p50_us"] + after
        assert times == decision["exact"][key]["p50_us"] / both < decision["times_faster"][key]
    assert "| one path |" in page
    assert "| exact dynamic rate |" in page


def test_peers_of_every_input_are_validated_at_their_own_cost(shipped, capsys, tmp_path):
    name, data, path = shipped
    sheet = json.loads(path.with_suffix(".json").read_text())
    out = tmp_path / "figures.json"
    assert run(["validate", str(path), str(data), "--peers", "--out", str(out)]) == 0
    figures = json.loads(out.read_text())
    assert figures["peers_left_out"] == sheet["peers_left_out"] == {}
    assert set(figures["peers"]) == set(sheet["peers"])
    assert len(figures["peers"]) == (8 if name == "on-time" else 7)
    printed = capsys.readouterr().out
    for peer, m in figures["peers"].items():
        assert f"| {peer} | " in printed
        # The same trees: the same picks, but for rules that draw, which share one stream with samples.
        if peer not in ("Monte Carlo in equal time", "UCT", "Thompson sampling"):
            assert m["top1_percent"]["value"] == sheet["peers"][peer]["top1_percent"]["value"]
    assert run(["validate", str(path), "--peers", "--shift", "on-time"]) == 2
    assert "peers: must have a dataset" in capsys.readouterr().err


def test_another_kind_of_dataset_is_no_ground_for_validation(shipped, tmp_path):
    name, _, path = shipped
    other = "crossing-traffic" if name == "on-time" else "on-time"
    generate(load_family(FAMILIES / f"{other}.toml"), tmp_path / "data", trees=5)
    with pytest.raises(InputError, match=f"input: must be the scorer's, {CASES[name].name}"):
        validate(path, tmp_path / "data")


# --- closed forms ----------------------------------------------------------------------------------


@pytest.mark.parametrize("family", ["cold-store", "on-time", "crossing-traffic", "shared-aisles"])
def test_no_exact_rate_exceeds_the_bound_of_the_closed_form(family):
    for i in range(2 if family == "shared-aisles" else 15):
        tree = draw(load_family(FAMILIES / f"{family}.toml"), 4, i)
        columns = columns_of(tree)
        kind = kind_of(columns)
        for horizon in (0.0, math.inf):
            exact = price(tree, Query(horizon, None, tree.remaining)).voc
            assert np.all(exact <= closed_form_bounds(kind, columns) * (1 + QUADRATURE)), (i, horizon)


def test_closed_form_records_equal_the_static_rate_of_lines():
    """No rollout to come and every leaf an action: the crossing is all there is to a row."""
    tree = draw(load_family(FAMILIES / "cold-store.toml"), 1, 3)
    from distill.record import from_record

    n = tree.n_leaves
    flat = from_record(
        {
            "format": "belief-tree/1",
            "parent": [-1] + [0] * n,
            "kind": ["decision"] + ["leaf"] * n,
            "mean": [None, *tree.mean.tolist()],
            "var": [None, *tree.var.tolist()],
            "noise_var": [None, *tree.noise_var.tolist()],
        }
    )
    rows, table = backup_of(flat, 0.0).rows(), columns_of(flat)
    for left, batch in ((50.0, None), (0.0, None), (3.0, 4)):
        a, k = closed_form_values(RECORD, rows, left, batch)
        b, m = closed_form_values(LEAF_TABLE, table, left, batch)
        np.testing.assert_allclose(a, b, rtol=CLOSED_FORM, atol=CLOSED_FORM)
        np.testing.assert_array_equal(k[b > 1e-9], m[b > 1e-9])


def test_kinds_are_told_by_their_columns():
    for kind in KINDS.values():
        assert kind_of(kind.inputs) is kind
    assert kind_of(["mean", "var"]) is None
    with pytest.raises(InputError, match="columns: must be those of a leaf table or a"):
        Scorer.closed_form().score(mean=[0.0], remaining=1)
    got = Scorer.closed_form().score(**dict.fromkeys(RECORD.columns, np.array([0.5, 1.0])), remaining=5)
    assert got.pick == int(np.argmax(got.voc - np.array([0.5, 1.0])))


@settings(deadline=None, max_examples=60, derandomize=True)
@given(st.integers(0, 2**32 - 1), st.sampled_from(sorted(KINDS)))
def test_whatever_is_passed_is_answered_or_refused_by_name(seed, name):
    """Shapes, types, NaN, infinities, huge and negative numbers, for files and without one."""
    rng = np.random.default_rng(seed)
    kind, n = KINDS[name], int(rng.integers(1, 9))

    def column(which):
        odd = [math.nan, math.inf, -math.inf, -1.0, 0.0, 1e300, -1e300, 1e-320, 2.0**60]
        x = np.where(rng.random(n) < 0.3, rng.choice(odd, n), rng.gamma(1, 1, n))
        if which == "action":
            x = rng.integers(-1, n + 1, n)
        forms = [
            x,
            x.tolist(),
            x.astype(np.float32, copy=True) if which != "action" else x,
            x[:-1],
            x[None],
            "x",
            None,
        ]
        with np.errstate(over="ignore"):
            return forms[int(rng.choice(7, p=[0.7, 0.1, 0.1, 0.03, 0.03, 0.02, 0.02]))]

    with np.errstate(over="ignore"):
        columns = {which: column(which) for which in kind.columns}
        odd = [0, 4.0, math.inf, math.nan, -1, -math.inf, [1.0], np.float64(2), None, "x", 2**60, 2.5, [1, 2]]
        columns |= {which: odd[int(rng.integers(len(odd)))] for which in kind.varies}
    left = [5, 0, -1, math.nan, 1e300, 7.5, np.int64(3)][int(rng.integers(7))]
    for scorer in (CONFORMANCE[kind.name], Scorer.closed_form()):
        try:
            got = scorer.score(**columns, remaining=left)
        except InputError:
            continue
        assert np.all(np.isfinite(got.voc) & (got.voc >= 0) & np.isfinite(got.voc_high))
        assert 0 <= got.pick < n
