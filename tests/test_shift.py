"""Shifted families: one thing changed each, exact values of the tree as it is, scores of the tree as seen."""

from __future__ import annotations

import json
import tomllib
from pathlib import Path

import numpy as np
import pytest
from ladder import CLOSED_FORM, DRAWN_SHARE, EXACT, RELATIVE_TAIL
from scorers import scorer_bytes
from small_dataset import FAMILY

from distill import schema, voc
from distill.backup import backup_of
from distill.cli import run
from distill.errors import InputError
from distill.family import Family, draw, load_family, parse_family
from distill.query import Query
from distill.runtime import Scorer
from distill.scorer_inputs import LEAF_TABLE, RECORD, WIN_LOSS_TABLE, InputKind
from distill.sheet import shift_table
from distill.shift import drawn_candidates, input_of, measure_shifts, seen, trees_of
from distill.shifted_families import _toml, out_of_reach, shifted, shifts_of
from distill.tree import leaf_table

FAMILIES = FAMILY.parent
BASE, COINS, LOTTERIES, SHARED = (
    load_family(FAMILIES / f"{name}.toml")
    for name in ("cold-store", "on-time", "crossing-traffic", "shared-aisles")
)
RATE = {"horizon": "inf", "batch": None}
STATIC = {"horizon": 0.0, "batch": None}
QUICK = ("as given", "noise x4", "leaves x4", "chance nodes")
CONFORMANCE = {
    scorer.kind.name: scorer
    for path in sorted((FAMILIES.parent / "conformance").glob("*.onnx"))
    for scorer in [Scorer.load(path)]
}
SHAPES = {"leaves x4": {"shape.leaves"}, "one level deeper": {"shape.depth"}, "unit x1000": {"prior.scale"}}
NOISE = {"noise x4": {"noise.tree_sd"}, "noise /4": {"noise.tree_sd"}}
COUNTS = {
    "prior counts x4": {"prior.strength"},
    "prior counts /4": {"prior.strength"},
    "rollouts x4": {"budget.rollouts"},
    "rollouts /4": {"budget.rollouts"},
    "payoff ranges": {"prior.low", "prior.span"},
}
MEANS = {"wider means": {"prior.action", "prior.mean"}}
CHANCE = {"more chance nodes": {"chance.share"}, "fewer chance nodes": {"chance.share"}}


def changed(base: Family, name: str, kind: InputKind) -> set[str]:
    """Fields that a shift changes, as section.key."""
    old, new = tomllib.loads(base.text), tomllib.loads(shifted(base, name, kind).text)
    fields = {(s, k) for t in (old, new) for s, part in t.items() if isinstance(part, dict) for k in part}
    return {f"{s}.{k}" for s, k in fields if old.get(s, {}).get(k) != new.get(s, {}).get(k)}


@pytest.mark.parametrize(
    ("base", "kind", "expected"),
    [
        (
            BASE,
            LEAF_TABLE,
            SHAPES
            | NOISE
            | MEANS
            | {"chance nodes": {"chance.share"}, "correlation": {"correlation.shared"}},
        ),
        (COINS, WIN_LOSS_TABLE, SHAPES | COUNTS | {"chance nodes": {"chance.share"}}),
        (
            LOTTERIES,
            RECORD,
            SHAPES | NOISE | MEANS | CHANCE | {"correlation ignored": {"correlation.shared"}},
        ),
    ],
)
def test_each_shift_changes_one_thing(base: Family, kind: InputKind, expected: dict[str, set[str]]) -> None:
    assert out_of_reach(base, kind) == {}
    found = {name: changed(base, name, kind) for name in shifts_of(base, kind)}
    assert found == {"as given": set(), **expected}


def test_what_a_family_cannot_take_is_left_out_with_its_reason() -> None:
    gone = out_of_reach(SHARED, RECORD)
    assert gone["fewer chance nodes"] == "the family has no chance nodes"
    assert changed(SHARED, "correlation ignored", RECORD) == set()  # its own correlation is what is left out
    assert changed(SHARED, "more chance nodes", RECORD) == {"chance.share"}
    wide = parse_family(BASE.text.replace("leaves = [1, 12]", "leaves = [1, 5000]").encode())
    assert "must be at most" in out_of_reach(wide, LEAF_TABLE)["leaves x4"]
    certain = parse_family(LOTTERIES.text.replace("share = 0.5 ", "share = 1 ").encode())
    assert "all inner nodes" in out_of_reach(certain, RECORD)["more chance nodes"]


def test_what_is_changed_is_changed_by_as_much_as_said() -> None:
    plain, noisy = (draw(shifted(BASE, name, LEAF_TABLE), 3, 5) for name in ("as given", "noise x4"))
    np.testing.assert_allclose(noisy.noise_var, 16 * plain.noise_var, rtol=CLOSED_FORM)
    many = [draw(shifted(BASE, "leaves x4", LEAF_TABLE), 3, i).n_leaves for i in range(30)]
    few = [draw(BASE, 3, i).n_leaves for i in range(30)]
    assert 3 < np.sum(many) / np.sum(few) < 5
    large = draw(shifted(BASE, "unit x1000", LEAF_TABLE), 3, 5)
    np.testing.assert_allclose(large.mean, 1000 * plain.mean, rtol=CLOSED_FORM)


def test_coins_are_better_known_searched_longer_and_pay_otherwise() -> None:
    def drawn(name: str, n: int = 40) -> list:
        return [draw(shifted(COINS, name, WIN_LOSS_TABLE), 3, i) for i in range(n)]

    for name, strength in (("as given", 2), ("prior counts x4", 8), ("prior counts /4", 0.5)):
        for tree in drawn(name, 5):
            np.testing.assert_allclose(tree.alpha + tree.beta - tree.count, strength, rtol=CLOSED_FORM)
    spent = {name: np.mean([t.count.sum() + t.remaining for t in drawn(name)]) for name in COUNTS}
    assert 3 < spent["rollouts x4"] / spent["prior counts x4"] < 5
    assert 3 < spent["prior counts x4"] / spent["rollouts /4"] < 5
    lows = np.concatenate([t.low for t in drawn("payoff ranges")])
    spans = np.concatenate([t.high - t.low for t in drawn("payoff ranges")])
    assert -0.5 <= lows.min() < -0.4 < 0.4 < lows.max() <= 0.5
    assert 0.5 <= spans.min() < 0.6 < 1.8 < spans.max() <= 2
    share = {}
    for name in CHANCE:
        trees = [draw(shifted(LOTTERIES, name, RECORD), 3, i) for i in range(40)]
        inner = np.concatenate([t.kind[1:][t.kind[1:] != schema.LEAF] for t in trees])
        share[name] = np.mean(inner == schema.CHANCE)
    # From a half: a quarter as many decision nodes, a quarter as many chance nodes.
    assert share == pytest.approx({"more chance nodes": 0.875, "fewer chance nodes": 0.125}, abs=DRAWN_SHARE)


def test_texts_survive_the_way_through_toml() -> None:
    text = BASE.text.replace('name = "cold-store"', 'name = "a \\"quoted\\" \\\\ store"')
    parsed = tomllib.loads(text)
    parsed["description"] = "tab\there, umlaut \u00e4"
    assert tomllib.loads(_toml(parsed)) == parsed
    assert parse_family(_toml(parsed).encode()).fields == parse_family(text.encode()).fields


def test_values_are_those_of_the_tree_as_it_is_and_columns_those_of_the_tree_as_seen() -> None:
    for base, kind, name in ((BASE, LEAF_TABLE, "mean"), (COINS, WIN_LOSS_TABLE, "alpha")):
        family = shifted(base, "chance nodes", kind)
        found, aside = drawn_candidates(family, trees=6, seed=2, value=RATE, kind=kind)
        assert aside == 0
        for i in range(6):
            tree = draw(family, 2, i)
            at = found.tree == i
            exact = voc.price(tree, Query(horizon=np.inf, batch=None, remaining=tree.remaining)).voc
            np.testing.assert_allclose(found.label[at], exact, rtol=RELATIVE_TAIL)
            np.testing.assert_array_equal(found.columns["gain"][at], leaf_table(seen(tree)).gain)
            np.testing.assert_array_equal(found.columns[name][at], getattr(tree, name))
        assert any(draw(family, 2, i).has_chance for i in range(6))


def test_records_see_chance_nodes_and_correlation_unless_that_is_left_out() -> None:
    family = shifted(LOTTERIES, "correlation ignored", RECORD)
    tree = draw(family, 1, 0)
    assert tree.cov is not None
    assert tree.has_chance
    assert seen(tree, RECORD) is tree
    blind = seen(tree, RECORD, blind=True)
    assert blind.cov is None
    assert blind.has_chance
    for is_blind, as_seen in ((False, tree), (True, blind)):
        found, _ = drawn_candidates(family, trees=1, seed=1, value=STATIC, kind=RECORD, blind=is_blind)
        exact = voc.price(tree, Query(horizon=0, batch=None, remaining=tree.remaining)).voc
        np.testing.assert_allclose(found.label, exact, rtol=RELATIVE_TAIL)
        np.testing.assert_array_equal(found.columns["slope"], backup_of(as_seen, 0.0).rows()["slope"])


def test_correlated_leaves_are_seen_with_their_own_variances_and_get_a_tenth_of_the_trees() -> None:
    tree = draw(shifted(BASE, "correlation", LEAF_TABLE), 1, 0)
    assert tree.cov is not None
    table = leaf_table(seen(tree))
    np.testing.assert_array_equal(table.var, np.diag(tree.cov))
    assert trees_of(BASE, "correlation", LEAF_TABLE, RATE, 300) == 30
    assert trees_of(BASE, "correlation", LEAF_TABLE, STATIC, 300) == 300
    assert trees_of(BASE, "noise x4", LEAF_TABLE, RATE, 300) == 300
    assert trees_of(SHARED, "noise x4", RECORD, RATE, 4) == 1


def test_an_input_reads_the_families_that_it_can() -> None:
    none = Scorer.closed_form()
    assert [input_of(none, f) for f in (BASE, COINS, LOTTERIES, SHARED)] == [
        LEAF_TABLE,
        WIN_LOSS_TABLE,
        RECORD,
        RECORD,
    ]
    record = CONFORMANCE["record"]
    assert all(input_of(record, f) is RECORD for f in (BASE, COINS, LOTTERIES, SHARED))
    for name, wrong, needed in (("leaf table", COINS, "gaussian"), ("win/loss leaf table", BASE, "win_loss")):
        with pytest.raises(InputError, match=f"belief: must be {needed} for this scorer"):
            input_of(CONFORMANCE[name], wrong)


@pytest.mark.parametrize(
    ("kind", "base", "names"),
    [
        (
            "win/loss leaf table",
            COINS,
            ("as given", "prior counts /4", "leaves x4", "payoff ranges", "chance nodes"),
        ),
        ("record", LOTTERIES, ("as given", "noise x4", "one level deeper", "fewer chance nodes")),
    ],
)
def test_every_input_says_what_is_lost_and_flagged(kind: str, base: Family, names: tuple[str, ...]) -> None:
    found = measure_shifts(CONFORMANCE[kind], base, names=names, trees=12, seed=3, n_boot=10)
    json.dumps(found, allow_nan=False)
    assert list(found) == list(names)
    for name, m in found.items():
        assert m["trees"] == 12
        assert m["changed"].startswith(shifts_of(base, input_of(CONFORMANCE[kind], base))[name].words)
        assert 0 <= m["flagged_trees_percent"] <= 100
        assert 0 < m["covered_percent"] <= 100
    assert len(shift_table(found)) == 2 + len(names)


def test_a_unit_changes_no_pick() -> None:
    for kind, base in (("win/loss leaf table", COINS), ("record", LOTTERIES)):
        scorer = CONFORMANCE[kind]
        found = measure_shifts(scorer, base, names=("as given", "unit x1000"), trees=15, seed=3, n_boot=2)
        a, b = found.values()
        assert a["forgone_percent"]["value"] == pytest.approx(
            b["forgone_percent"]["value"], rel=RELATIVE_TAIL, abs=EXACT
        )


def test_figures_say_what_is_lost_and_how_much_of_it_was_flagged() -> None:
    scorer = Scorer.from_bytes(scorer_bytes("dense"))
    found = measure_shifts(scorer, BASE, names=QUICK, trees=25, seed=3, n_boot=20)
    json.dumps(found, allow_nan=False)
    assert list(found) == list(QUICK)
    for m in found.values():
        assert m["trees"] == 25
        assert 0 <= m["flagged_trees_percent"] <= 100
        assert m["loss_flagged_percent"] is None or 0 <= m["loss_flagged_percent"] <= 100
    assert (
        found["chance nodes"]["forgone_percent"]["value"]
        > 5
        > found["as given"]["first_order_forgone_percent"]
    )
    lines = shift_table(found)
    assert len(lines) == 2 + len(QUICK)
    assert all(line.count("|") == lines[0].count("|") for line in lines)


def test_only_the_family_of_training_is_called_so() -> None:
    scorer = Scorer.from_bytes(scorer_bytes("linear"))

    def said(family: Family) -> str:
        found = measure_shifts(scorer, family, names=("as given",), trees=2, n_boot=2)
        return str(found["as given"]["changed"])

    assert said(BASE).endswith("which is not known to be that of training")
    scorer.facts["about"]["data"] = {"seed": 7, "drawn_from": [f"{BASE.content} 7"]}
    assert said(BASE).endswith("which is that of training")
    assert said(parse_family(BASE.text.encode() + b"# note\n")).endswith("which is that of training")
    noisier = shifted(BASE, "noise x4", LEAF_TABLE)
    assert said(noisier).endswith("which is not known to be that of training")


def test_what_cannot_be_shifted_is_named() -> None:
    with pytest.raises(InputError, match=r"shift: must be one of as given, .*; got 'colder'"):
        shifted(BASE, "colder", LEAF_TABLE)
    with pytest.raises(InputError, match="got 'noise x4'"):
        shifted(COINS, "noise x4", WIN_LOSS_TABLE)
    with pytest.raises(InputError, match="belief: must be gaussian"):
        measure_shifts(Scorer.from_bytes(scorer_bytes("linear")), COINS, trees=2)


def test_the_command_prints_a_row_a_shift(
    tmp_path: Path, capsys: pytest.CaptureFixture[str], monkeypatch
) -> None:
    (tmp_path / "scorer.onnx").write_bytes(scorer_bytes("linear"))
    monkeypatch.setattr(
        "distill.shift.measure_shifts.__kwdefaults__",
        {
            **measure_shifts.__kwdefaults__,
            "names": QUICK,
            "n_boot": 5,
        },
    )
    out = tmp_path / "figures.json"
    call = [
        "validate",
        str(tmp_path / "scorer.onnx"),
        "--shift",
        str(FAMILY),
        "--trees",
        "8",
        "--out",
        str(out),
    ]
    assert run(call) == 0
    printed = capsys.readouterr().out
    assert all(f"| {name} |" in printed for name in QUICK)
    for column in ("Forgone share", "Relative forgone", "First-order start", "Bound holds", "Trees flagged",
                   "Loss flagged"):  # fmt: skip
        assert f"{column.lower()}" in printed.partition("| --- ")[0].lower()  # in the table's head
        assert f"{column}: " in printed
    assert (
        "As given: nothing; fresh trees of the family, which is not known to be that of training." in printed
    )
    assert set(json.loads(out.read_text())["shifts"]) == set(QUICK)
    assert run(call[:2]) == 2
    assert "--shift" in capsys.readouterr().err


def test_a_family_of_the_wrong_belief_is_told_before_the_dataset_is_touched(
    tmp_path: Path, capsys: pytest.CaptureFixture[str], monkeypatch: pytest.MonkeyPatch
) -> None:
    (tmp_path / "scorer.onnx").write_bytes(scorer_bytes("linear"))
    begun: list[object] = []
    monkeypatch.setattr("distill.validate.validate", lambda *args, **_: begun.append(args) or {})
    call = ["validate", str(tmp_path / "scorer.onnx"), str(tmp_path / "data"), "--shift", "on-time"]
    assert run(call) == 2
    assert not begun
    said = capsys.readouterr()
    assert "on-time: belief: must be gaussian for this scorer; got 'win_loss'" in said.err
    assert not said.out
