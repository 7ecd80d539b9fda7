"""Shifted families: one thing changed each, exact values of the tree as it is, scores of the tree as seen."""

from __future__ import annotations

import json
import tomllib
from pathlib import Path

import numpy as np
import pytest
from ladder import RELATIVE_TAIL
from scorers import scorer_bytes
from small_dataset import FAMILY

from distill import voc
from distill.cli import run
from distill.errors import InputError
from distill.family import draw, load_family, parse_family
from distill.query import Query
from distill.runtime import Scorer
from distill.scorer_inputs import WIN_LOSS_TABLE
from distill.sheet import shift_table
from distill.shift import SHIFTS, _toml, drawn_candidates, measure_shifts, seen, shifted
from distill.tree import leaf_table

BASE = load_family(FAMILY)
RATE = {"horizon": "inf", "batch": None}
QUICK = ("as trained", "noise x4", "leaves x4", "chance nodes")


def changed(name: str) -> set[str]:
    """Fields that a shift changes, as section.key."""
    old, new = tomllib.loads(BASE.text), tomllib.loads(shifted(BASE, name).text)
    fields = {(s, k) for t in (old, new) for s, part in t.items() if isinstance(part, dict) for k in part}
    return {f"{s}.{k}" for s, k in fields if old.get(s, {}).get(k) != new.get(s, {}).get(k)}


def test_each_shift_changes_one_thing() -> None:
    assert {name: changed(name) for name in SHIFTS} == {
        "as trained": set(),
        "noise x4": {"noise.tree_sd"},
        "noise /4": {"noise.tree_sd"},
        "leaves x4": {"shape.leaves"},
        "one level deeper": {"shape.depth"},
        "wider means": {"prior.action", "prior.mean"},
        "unit x1000": {"prior.scale"},
        "chance nodes": {"chance.share"},
        "correlation": {"correlation.shared"},
    }


def test_what_is_changed_is_changed_by_as_much_as_said() -> None:
    plain, noisy = (draw(shifted(BASE, name), 3, 5) for name in ("as trained", "noise x4"))
    np.testing.assert_allclose(noisy.noise_var, 16 * plain.noise_var, rtol=1e-12)
    many = [draw(shifted(BASE, "leaves x4"), 3, i).n_leaves for i in range(30)]
    few = [draw(BASE, 3, i).n_leaves for i in range(30)]
    assert 3 < np.sum(many) / np.sum(few) < 5
    large = draw(shifted(BASE, "unit x1000"), 3, 5)
    np.testing.assert_allclose(large.mean, 1000 * plain.mean, rtol=1e-9)


def test_texts_survive_the_way_through_toml() -> None:
    text = BASE.text.replace('name = "cold-store"', 'name = "a \\"quoted\\" \\\\ store"')
    parsed = tomllib.loads(text)
    parsed["description"] = "tab\there, umlaut \u00e4"
    assert tomllib.loads(_toml(parsed)) == parsed
    assert parse_family(_toml(parsed).encode()).fields == parse_family(text.encode()).fields


def test_values_are_those_of_the_tree_as_it_is_and_columns_those_of_the_tree_as_seen() -> None:
    family = shifted(BASE, "chance nodes")
    found, aside = drawn_candidates(family, trees=6, seed=2, value=RATE)
    assert aside == 0
    for i in range(6):
        tree = draw(family, 2, i)
        at = found.tree == i
        exact = voc.price(tree, Query(horizon=np.inf, batch=None, remaining=tree.remaining)).voc
        np.testing.assert_allclose(found.label[at], exact, rtol=RELATIVE_TAIL)
        np.testing.assert_array_equal(found.columns["gain"][at], leaf_table(seen(tree)).gain)
        np.testing.assert_array_equal(found.columns["mean"][at], tree.mean)
    assert any(draw(family, 2, i).has_chance for i in range(6))


def test_correlated_leaves_are_seen_with_their_own_variances() -> None:
    tree = draw(shifted(BASE, "correlation"), 1, 0)
    assert tree.cov is not None
    table = leaf_table(seen(tree))
    np.testing.assert_array_equal(table.var, np.diag(tree.cov))


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
        > found["as trained"]["first_order_forgone_percent"]
    )
    lines = shift_table(found)
    assert len(lines) == 2 + len(QUICK)
    assert all(line.count("|") == lines[0].count("|") for line in lines)


def test_what_cannot_be_shifted_is_named() -> None:
    with pytest.raises(InputError, match=r"shift: must be one of as trained, .*; got 'colder'"):
        shifted(BASE, "colder")
    other = Scorer.from_bytes(scorer_bytes("linear"))
    other.kind = WIN_LOSS_TABLE
    with pytest.raises(InputError, match="scorer: input: must be the leaf table for shifts"):
        measure_shifts(other, BASE, names=QUICK, trees=2)
    with pytest.raises(InputError, match="belief: must be gaussian"):
        drawn_candidates(load_family(FAMILY.parent / "on-time.toml"), trees=2, seed=0, value=RATE)


def test_the_command_prints_a_row_a_shift(
    tmp_path: Path, capsys: pytest.CaptureFixture[str], monkeypatch
) -> None:
    (tmp_path / "scorer.onnx").write_bytes(scorer_bytes("linear"))
    kept = {name: SHIFTS[name] for name in QUICK}
    monkeypatch.setattr(
        "distill.shift.measure_shifts.__kwdefaults__",
        {
            **measure_shifts.__kwdefaults__,
            "names": tuple(kept),
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
    assert set(json.loads(out.read_text())["shifts"]) == set(QUICK)
    assert run(call[:2]) == 2
    assert "--shift" in capsys.readouterr().err
