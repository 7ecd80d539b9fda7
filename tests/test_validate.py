"""A scorer file against labelled trees: the right trees, the right figures, the closed forms beside it."""

from __future__ import annotations

import json
from dataclasses import replace
from pathlib import Path
from typing import Any

import numpy as np
import pytest
from ladder import CLOSED_FORM, RELATIVE_TAIL
from small_dataset import FAMILY, labelled

from distill.candidates import Candidates, split_by_tree
from distill.errors import InputError
from distill.family import load_family
from distill.feature_graph import FeatureGraph
from distill.generate import Mix, Traces, generate
from distill.metrics import measure
from distill.query import Query
from distill.runtime import Scorer
from distill.shards import read_trees
from distill.train import train
from distill.validate import baselines, examine, sample_pairs, static_values, validate
from distill.voc import price


@pytest.fixture(scope="module")
def shipped(tmp_path_factory: pytest.TempPathFactory) -> tuple[Path, Path, dict[str, Any]]:
    folder = tmp_path_factory.mktemp("validate")
    dataset = labelled(folder / "data", trees=300)
    front = train(dataset, folder / "front", seed=4, recipes=["linear"], n_boot=200)
    return folder / "front" / "linear.onnx", dataset, front


def test_on_its_own_dataset_only_held_out_trees_count(shipped: tuple[Path, Path, dict[str, Any]]) -> None:
    file, dataset, front = shipped
    found = validate(file, dataset, n_boot=200, seed=4)
    assert found["part"] == "held_out"
    assert found["accuracy"]["trees"] == front["parts"]["held_out"]["trees"] < 300
    assert found["accuracy"] == front["scorers"][0]["held_out"]
    assert found["beside"] == front["beside"]
    json.dumps(found, allow_nan=False)


def test_more_trees_of_the_same_draw_do_not_bring_training_trees_back(
    shipped: tuple[Path, Path, dict[str, Any]], tmp_path: Path
) -> None:
    file, dataset, _ = shipped
    longer = labelled(tmp_path / "data", trees=400)  # trees 0 to 299 are those of training
    found = validate(file, longer, n_boot=2)
    fit = set(split_by_tree(Candidates.read(dataset)[0], 4).fit.tree.tolist())
    kept = set(split_by_tree(Candidates.read(longer)[0], 4).held_out.tree.tolist())
    assert found["part"] == "held_out"
    assert found["accuracy"]["trees"] == len(kept)
    assert not fit & kept


def test_a_mix_does_not_bring_training_trees_back(
    shipped: tuple[Path, Path, dict[str, Any]], tmp_path: Path
) -> None:
    file, dataset, _ = shipped
    fresh = Traces(
        "others", [tree for _, tree in read_trees(labelled(tmp_path / "others", trees=60, seed=9))]
    )
    mixed = tmp_path / "mixed"
    generate(Mix(load_family(FAMILY), fresh, 0.5), mixed, trees=100, seed=5)
    found = validate(file, mixed, n_boot=2)
    fit = set(split_by_tree(Candidates.read(dataset)[0], 4).fit.keys().tolist())
    kept = split_by_tree(Candidates.read(mixed)[0], 4).held_out
    assert fit & set(Candidates.read(mixed)[0].keys().tolist())
    assert found["part"] == "held_out"
    assert found["accuracy"]["trees"] == len(kept.groups.sizes)
    assert not fit & set(kept.keys().tolist())


def test_on_fresh_trees_all_count(shipped: tuple[Path, Path, dict[str, Any]], tmp_path: Path) -> None:
    file, _, _ = shipped
    found = validate(Scorer.load(file), labelled(tmp_path / "data", trees=60, seed=77), n_boot=50)
    assert found["part"] == "all"
    assert found["accuracy"]["trees"] == 60


def test_figures_are_those_of_picks_made_one_tree_at_a_time(
    shipped: tuple[Path, Path, dict[str, Any]], tmp_path: Path
) -> None:
    file, _, _ = shipped
    scorer = Scorer.load(file)
    dataset = labelled(tmp_path / "data", trees=50, seed=78)
    whole, _ = Candidates.read(dataset)
    lost = best = 0.0
    for a, n in zip(whole.groups.starts, whole.groups.sizes, strict=True):
        table = {name: x[a : a + n] for name, x in whole.columns.items()}
        table["cost"] = np.zeros(n)  # the figures rank by gross value
        pick = scorer.pick(**{**table, "remaining": table["remaining"][0]})
        lost += whole.label[a : a + n].max() - whole.label[a + pick]
        best += whole.label[a : a + n].max()
    found = examine(scorer, whole, prices=[0.01, 1.0], n_boot=2)
    assert found["forgone_percent"]["value"] == pytest.approx(100 * lost / best, rel=CLOSED_FORM)
    assert [e["price"] for e in found["stop_loss"]] == [0.01, 1.0]


def test_sampled_pairs_are_candidates_with_both_their_values(
    shipped: tuple[Path, Path, dict[str, Any]], tmp_path: Path
) -> None:
    file, _, _ = shipped
    scorer = Scorer.load(file)
    whole, _ = Candidates.read(labelled(tmp_path / "data", trees=40, seed=6))
    least = 1e-6
    expected = []
    for tree in np.unique(whole.tree):
        rows = whole.tree == tree
        columns = {name: x[rows] for name, x in whole.columns.items()}
        scale = np.max(columns["gain"] * np.sqrt(columns["var"]))
        predicted = scorer.score(**columns, tree=whole.tree[rows]).voc / scale
        expected += zip(whole.label[rows] / scale, predicted, strict=True)
    large = [pair for pair in expected if max(pair) >= least]
    everything = sample_pairs(scorer, whole, limit=len(expected), least=least)
    assert everything["trees"] == 40
    assert everything["candidates"] == len(large) > 100
    assert everything["smaller"] == len(expected) - len(large) > 0
    got = list(zip(everything["exact"], everything["predicted"], strict=True))
    four_digits = [tuple(float(f"{x:.4g}") for x in pair) for pair in large]
    assert got == four_digits

    few = sample_pairs(scorer, whole, limit=20, least=least, seed=3)
    assert few == sample_pairs(scorer, whole, limit=20, least=least, seed=3)
    assert len(few["exact"]) == len(few["predicted"]) == 20
    assert set(zip(few["exact"], few["predicted"], strict=True)) <= set(four_digits)
    assert few["candidates"] <= everything["candidates"]
    json.dumps(few, allow_nan=False)


def test_static_values_are_the_exact_engines(tmp_path: Path) -> None:
    dataset = labelled(tmp_path / "data", trees=30)
    whole, _ = Candidates.read(dataset)
    expected = [
        price(tree, Query(horizon=0.0, batch=None, remaining=tree.remaining)).voc
        for _, tree in read_trees(dataset)
    ]
    # The tree is rebuilt flat, so rewards add up in another order.
    assert static_values(whole) == pytest.approx(np.concatenate(expected), rel=RELATIVE_TAIL, abs=0)


def test_closed_forms_are_measured_like_scorers(tmp_path: Path) -> None:
    whole, _ = Candidates.read(labelled(tmp_path / "data", trees=60))
    first = FeatureGraph().matrix({**whole.columns, "tree": whole.tree}).first_order
    beside = baselines(whole, first, n_boot=50, seed=1)
    assert (
        beside["first-order closed form"]
        == measure(whole.tree, whole.label, first, n_boot=50, seed=1).to_json()
    )
    assert set(beside) == {"static closed form", "first-order closed form", "random pick"}


def test_exact_labels_as_scores_lose_nothing(
    shipped: tuple[Path, Path, dict[str, Any]], tmp_path: Path, monkeypatch: pytest.MonkeyPatch
) -> None:
    file, _, _ = shipped
    whole, _ = Candidates.read(labelled(tmp_path / "data", trees=40, seed=79))
    scorer = Scorer.load(file)
    real = scorer.score

    def perfect(**columns: Any) -> Any:
        return real(**columns)._replace(voc=whole.label)

    monkeypatch.setattr(scorer, "score", perfect)
    found = examine(scorer, whole, prices=[0.1], n_boot=2)
    assert found["forgone_percent"]["value"] == 0
    assert found["stop_loss"][0]["value"] == 0
    assert found["stop_loss_percent"]["value"] == 0


def test_static_values_take_the_batch_of_the_label(tmp_path: Path) -> None:
    dataset = labelled(tmp_path / "data", trees=20, batch=3)
    whole, _ = Candidates.read(dataset)
    expected = [price(tree, Query(horizon=0.0, batch=3)).voc for _, tree in read_trees(dataset)]
    assert static_values(whole) == pytest.approx(np.concatenate(expected), rel=RELATIVE_TAIL, abs=0)


def test_a_dataset_without_worth_has_no_shares(
    shipped: tuple[Path, Path, dict[str, Any]], tmp_path: Path
) -> None:
    file, _, _ = shipped
    sure = [replace(t, var=np.zeros(t.n_leaves)) for _, t in read_trees(labelled(tmp_path / "a", trees=5))]
    generate(Traces("sure", sure), tmp_path / "b")
    found = validate(file, tmp_path / "b", n_boot=10)
    assert found["accuracy"]["forgone_percent"]["value"] is None
    assert found["accuracy"]["trees_with_best_zero"] == 5
    assert found["beside"]["random pick"]["forgone_percent"]["value"] is None
    json.dumps(found, allow_nan=False)


def test_a_dataset_of_another_value_is_refused(
    shipped: tuple[Path, Path, dict[str, Any]], tmp_path: Path
) -> None:
    file, _, _ = shipped
    static = labelled(tmp_path / "data", trees=30, horizon=0.0)
    with pytest.raises(InputError, match="value: must be the scorer's"):
        validate(file, static)
    with pytest.raises(InputError, match=r"value: must be the scorer's, .*inf"):
        validate(Scorer.closed_form(), static)
