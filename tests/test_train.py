"""Training from a dataset to a front of scorer files: no leak, same bytes, honest figures, clear errors."""

from __future__ import annotations

import json
import math
import os
import subprocess
import sys
import xml.etree.ElementTree as ET
from dataclasses import replace
from pathlib import Path
from typing import Any

import numpy as np
import onnx
import pytest
from small_dataset import labelled

from distill import candidates
from distill import train as training
from distill.candidates import Candidates, split_by_tree
from distill.cli import run
from distill.errors import InputError
from distill.metrics import Groups
from distill.runtime import Scorer
from distill.sheet import FRONT_FILE
from distill.ship import choose, ship
from distill.train import RECIPES, _mark_front, _ranges, row_weights, train
from distill.validate import validate

TREES = 250
QUICK = ["linear", "boosting 25x8", "lean dense 16-16", "dense 32-32"]


@pytest.fixture(scope="module")
def dataset(tmp_path_factory: pytest.TempPathFactory) -> Path:
    return labelled(tmp_path_factory.mktemp("train") / "data", trees=TREES)


@pytest.fixture(scope="module")
def trained(dataset: Path) -> tuple[Path, dict[str, Any]]:
    folder = dataset.parent / "front"
    return folder, train(dataset, folder, seed=2, recipes=QUICK, n_boot=200)


def test_the_front_beats_the_closed_forms_on_held_out_trees(trained: tuple[Path, dict[str, Any]]) -> None:
    _, front = trained
    forgone = {e["recipe"]: e["held_out"]["forgone_percent"]["value"] for e in front["scorers"]}
    beside = {name: m["forgone_percent"]["value"] for name, m in front["beside"].items()}
    assert forgone["dense 32-32"] < beside["first-order closed form"]
    assert beside["first-order closed form"] < beside["static closed form"] < beside["random pick"]
    for entry in front["scorers"]:
        accuracy = entry["held_out"]
        assert accuracy["forgone_percent"]["low"] <= accuracy["forgone_percent"]["value"]
        assert accuracy["forgone_percent"]["value"] <= accuracy["forgone_percent"]["high"]
        assert accuracy["relative_forgone_percent"]["value"] < 5
        assert accuracy["in_range_percent"] > 95


def test_every_file_of_the_front_loads_and_is_the_one_measured(trained: tuple[Path, dict[str, Any]]) -> None:
    folder, front = trained
    assert [e["recipe"] for e in front["scorers"]] == QUICK
    for entry in front["scorers"]:
        scorer = Scorer.load(folder / entry["file"], strict=True)
        assert scorer.facts["about"]["recipe"] == entry["recipe"]
        assert scorer.facts["about"]["value"] == {"horizon": "inf", "batch": None}
        assert entry["bytes"] == (folder / entry["file"]).stat().st_size
        assert 0 < entry["latency"]["p50_us"] <= entry["latency"]["p99_us"]
    assert {p.name for p in folder.iterdir()} == {FRONT_FILE, *(e["file"] for e in front["scorers"])}


def test_front_json_is_what_train_returns(trained: tuple[Path, dict[str, Any]]) -> None:
    folder, front = trained
    written = json.loads((folder / FRONT_FILE).read_text(), parse_constant=pytest.fail)
    assert written == json.loads(json.dumps(front))
    parts = front["parts"]
    assert sum(p["trees"] for p in parts.values()) == TREES
    assert sum(p["candidates"] for p in parts.values()) == front["data"]["candidates"]
    assert front["exact"]["dynamic rate"]["p50_us"] > 0
    ways = (
        {e["recipe"] for e in front["scorers"] if e["on_front"]}
        | set(front["peers"])
        | {"exact dynamic rate"}
    )
    assert set(front["break_even"]["gain_percent"]) == ways
    assert "UCT" in ways
    assert front["data"]["source"] == "cold-store"


def test_labels_of_held_out_trees_do_not_touch_the_scorer(
    dataset: Path, tmp_path: Path, monkeypatch: pytest.MonkeyPatch
) -> None:
    whole, about = Candidates.read(dataset)
    split = split_by_tree(whole, 2)

    def trained_with(spoiled: Candidates, name: str) -> list[bytes]:
        rng = np.random.default_rng(0)
        label = whole.label.copy()
        at = np.isin(whole.tree, spoiled.tree)
        label[at] = rng.permutation(label[at]) * 100
        monkeypatch.setattr(
            candidates.Candidates, "read", classmethod(lambda *_: (replace(whole, label=label), about))
        )
        recipes = ["linear", "boosting 25x8"]
        front = train(dataset, tmp_path / name, seed=2, recipes=recipes, n_boot=2)
        return [(tmp_path / name / e["file"]).read_bytes() for e in front["scorers"]]

    nothing = trained_with(whole.of_trees(np.zeros(TREES, dtype=bool)), "clean")
    assert trained_with(split.held_out, "held-out") == nothing
    # The part that scorers are chosen on sets the upper bound, and nothing else.
    held_out = {**split.held_out.columns, "tree": split.held_out.tree}
    for with_choose, clean in zip(trained_with(split.choose, "choose"), nothing, strict=True):
        got, expected = (Scorer.from_bytes(data).score(**held_out) for data in (with_choose, clean))
        np.testing.assert_array_equal(got.voc, expected.voc)
        assert np.any(got.voc_high != expected.voc_high)
    assert all(a != b for a, b in zip(trained_with(split.fit, "fit"), nothing, strict=True))


def test_same_bytes_twice_whatever_the_threads(
    trained: tuple[Path, dict[str, Any]], dataset: Path, tmp_path: Path
) -> None:
    folder, front = trained
    program = (
        "import sys; from distill.train import train; "
        f"train(sys.argv[1], sys.argv[2], seed=2, recipes={QUICK!r}, n_boot=2)"
    )
    threads = "2" if os.environ.get("OMP_NUM_THREADS") == "1" else "1"  # other than in this process
    env = {**os.environ, "OMP_NUM_THREADS": threads, "OPENBLAS_NUM_THREADS": threads, "PYTHONHASHSEED": "1"}
    subprocess.run([sys.executable, "-c", program, dataset, tmp_path], check=True, env=env, timeout=300)
    for entry in front["scorers"]:
        assert (tmp_path / entry["file"]).read_bytes() == (folder / entry["file"]).read_bytes()


def test_another_seed_splits_anew_and_gives_another_file(
    trained: tuple[Path, dict[str, Any]], dataset: Path, tmp_path: Path
) -> None:
    folder, front = trained
    other = train(dataset, tmp_path / "front", seed=3, recipes=["linear"], n_boot=2)
    assert other["parts"] != front["parts"]
    assert (tmp_path / "front" / "linear.onnx").read_bytes() != (folder / "linear.onnx").read_bytes()


def test_the_command_names_the_scorer_for_a_time_and_draws_the_front(
    dataset: Path, tmp_path: Path, capsys: pytest.CaptureFixture[str], monkeypatch: pytest.MonkeyPatch
) -> None:
    few = {name: RECIPES[name] for name in ("linear", "boosting 25x8")}
    monkeypatch.setattr("distill.train.RECIPES", few)
    out = tmp_path / "front"
    call = ["train", str(dataset), "--out", str(out), "--latency", "900us", "--show"]
    assert run(call) == 0
    printed = capsys.readouterr().out
    front = json.loads((out / FRONT_FILE).read_text())
    entry, why = choose(front["scorers"], 900.0)
    assert why == "fastest of the most accurate within 900 us"
    assert f"{why}: {entry['recipe']}, {out / entry['file']}" in printed
    assert "forgone share, %" in printed
    assert f"scorers that read the {front['input']}\n" in printed
    parts = {name: part["trees"] for name, part in front["parts"].items()}
    share = round(100 * parts["choose"] / sum(parts.values()))
    assert (
        f"upper bounds calibrated and the front chosen on other {parts['choose']} trees ({share} %)"
        in printed
    )
    assert f"judged on {parts['held_out']} trees" in printed
    assert " a  " in printed
    assert ET.parse(out / "front.svg").getroot().tag.endswith("svg")
    with pytest.raises(InputError, match="latency: must be at least"):
        choose(front["scorers"], 0.01)


def test_the_fastest_of_those_as_accurate_as_luck_can_tell_is_chosen() -> None:
    """The best has 0.10 with a standard error of 0.05."""

    def entry(name: str, us: float, loss: float, low: float, high: float) -> dict[str, Any]:
        share = {"value": loss, "low": low, "high": high}
        return {"recipe": name, "latency": {"p50_us": us}, "choose": {"forgone_percent": share}}

    front = [
        entry("slow", 400.0, 0.10, 0.002, 0.198),
        entry("quick", 60.0, 0.149, 0.1, 0.2),
        entry("quicker", 50.0, 0.151, 0.1, 0.2),
    ]
    assert choose(front)[0]["recipe"] == "quick"
    assert choose(front, 55.0)[0]["recipe"] == "quicker"
    assert choose(front[::-1])[0]["recipe"] == "quick"
    assert choose(front, name="slow") == (front[0], "by name")


def test_a_time_that_no_scorer_meets_is_said_and_costs_nothing(
    dataset: Path, tmp_path: Path, capsys: pytest.CaptureFixture[str], monkeypatch: pytest.MonkeyPatch
) -> None:
    monkeypatch.setattr("distill.train.RECIPES", {"linear": RECIPES["linear"]})
    assert run(["train", str(dataset), "--out", str(tmp_path), "--latency", "0.5us"]) == 0
    out, err = capsys.readouterr()
    assert "no scorer decides within 0.5 us; the fastest takes " in out.splitlines()[-1]
    assert "error" not in err
    # ship has nothing to ship then.
    assert run(["ship", str(tmp_path), "--out", str(tmp_path.parent / "no.onnx"), "--latency", "0.5us"]) == 2
    assert "latency: must be at least" in capsys.readouterr().err


def test_a_training_that_is_stopped_leaves_the_earlier_one_whole(
    dataset: Path, tmp_path: Path, monkeypatch: pytest.MonkeyPatch
) -> None:
    """Stopped after the first new file, which has the name of an old one."""
    recipes = ["linear", "boosting 25x8"]
    train(dataset, tmp_path, seed=2, recipes=["linear"], n_boot=2)
    before = {p.name: p.read_bytes() for p in tmp_path.iterdir()}
    real = training._fit_and_export

    def stopped(recipe: Any, *rest: Any) -> float:
        if recipe.name != "linear":
            raise KeyboardInterrupt
        return real(recipe, *rest)

    with monkeypatch.context() as change:
        change.setattr(training, "_fit_and_export", stopped)
        with pytest.raises(KeyboardInterrupt):
            train(dataset, tmp_path, seed=3, recipes=recipes, n_boot=2)
    assert {p.name: p.read_bytes() for p in tmp_path.iterdir()} == before
    ship(tmp_path, tmp_path.parent / "earlier.onnx")
    train(dataset, tmp_path, seed=3, recipes=["linear"], n_boot=2)  # a finished one replaces it
    after = {p.name: p.read_bytes() for p in tmp_path.iterdir()}
    assert set(after) == set(before)
    assert all(after[name] != before[name] for name in before)


def test_a_file_of_the_front_is_not_shipped_over(trained: tuple[Path, dict[str, Any]]) -> None:
    folder, front = trained
    before = {e["file"]: (folder / e["file"]).read_bytes() for e in front["scorers"]}
    for entry in front["scorers"]:
        with pytest.raises(InputError, match="out: must be another file than those of the front"):
            ship(folder, folder / entry["file"], scorer="linear")
    assert {name: (folder / name).read_bytes() for name in before} == before
    assert not (folder / "linear.json").exists()


def test_a_folder_of_something_else_is_not_filled(
    dataset: Path, trained: tuple[Path, dict[str, Any]], tmp_path: Path, capsys: pytest.CaptureFixture[str]
) -> None:
    front, scorer = tmp_path / "mine", tmp_path / "shipped"
    for folder in (front, scorer):
        folder.mkdir()
    (front / FRONT_FILE).write_text('{"format": "weather/1"}')
    with pytest.raises(InputError, match=r"front\.json: format: must be 'voc-front/1'; choose another"):
        train(dataset, front, recipes=["linear"], n_boot=2)
    ship(trained[0], scorer / "linear.onnx", scorer="linear")
    with pytest.raises(InputError, match=r"linear\.onnx: must be an earlier training's to be replaced"):
        train(dataset, scorer, recipes=["linear"], n_boot=2)
    before = {p.name: p.read_bytes() for p in dataset.iterdir()}
    for out in (front, dataset):
        assert run(["train", str(dataset), "--out", str(out)]) == 2
        assert capsys.readouterr().err.count("\n") == 1
    assert {p.name: p.read_bytes() for p in dataset.iterdir()} == before
    assert (front / FRONT_FILE).read_text() == '{"format": "weather/1"}'
    assert [p.name for p in front.iterdir()] == [FRONT_FILE]


@pytest.mark.parametrize(
    ("horizon", "batch", "named"),
    [
        pytest.param(0.0, 3, {"static VOC of 3 rollouts"}, marks=pytest.mark.slow),
        (math.inf, 1, {"dynamic VOC"}),
        pytest.param(8.0, None, {"horizon 8 VOC", "horizon 8 rate"}, marks=pytest.mark.slow),
    ],
)
def test_other_values_than_the_dynamic_rate_are_learned_and_ship(
    tmp_path: Path, horizon: float, batch: int | None, named: set[str]
) -> None:
    dataset = labelled(tmp_path / "data", trees=150, horizon=horizon, batch=batch)
    front = train(dataset, tmp_path / "front", recipes=["linear"], n_boot=2)
    sheet = ship(tmp_path / "front", tmp_path / "scorer.onnx")
    assert set(front["exact"]) == set(sheet["decision"]["exact"]) == named
    shipped = Scorer.load(tmp_path / "scorer.onnx", strict=True)
    found = validate(shipped, dataset, n_boot=2)
    # About 20 trees, where a random pick forgoes 90 %; one tree of much worth can make up a forgone share.
    assert found["accuracy"]["relative_forgone_percent"]["value"] < 8
    assert found["beside"] == front["beside"]
    held_out = split_by_tree(Candidates.read(dataset)[0], 0).held_out
    got = shipped.score(**held_out.columns, tree=held_out.tree)
    close = held_out.label > 0.1 * held_out.groups.spread(held_out.groups.highest(held_out.label))
    assert np.median(np.abs(np.log(got.voc[close] / held_out.label[close]))) < 0.2
    if batch is not None:
        assert np.all(got.batch == batch)
        # The closed form, where the file has no answer, values as many rollouts.
        table = {name: x[:5] for name, x in held_out.columns.items()}
        late = shipped.score(**{**table, "remaining": 1}, deadline=0.0)
        assert np.all(late.batch == batch)


def test_rows_weigh_by_their_worth_within_their_tree_whatever_its_unit() -> None:
    groups = Groups.of([0, 0, 0, 1, 1, 2])
    label = np.array([1.0, 0.5, 0.0, 4e-30, 2e-30, 0.0])
    assert row_weights(groups, label) == pytest.approx([1.001, 0.251, 0.001, 1.001, 0.251, 0.001])


def test_ranges_reach_a_twentieth_of_the_span_beyond_the_rows() -> None:
    x = np.array([[0.0, -10.0, 3.0], [1.0, 10.0, 3.0], [0.5, 0.0, 3.0]], dtype=np.float32)
    assert _ranges(x) == pytest.approx(np.array([[-0.05, 1.05], [-11.0, 11.0], [3.0, 3.0]], dtype=np.float32))


def test_the_front_holds_what_no_other_beats_in_both() -> None:
    def entry(us: float, loss: float) -> dict[str, Any]:
        return {"latency": {"p50_us": us}, "choose": {"forgone_percent": {"value": loss}}}

    front = [entry(10, 5.0), entry(20, 1.0), entry(30, 1.0), entry(40, 0.5), entry(15, 5.0), entry(40, 0.5)]
    _mark_front(front)
    assert [e["on_front"] for e in front] == [True, True, False, True, False, True]


def test_recipes_cover_the_three_learners() -> None:
    kinds = {type(r.make(0)).__name__ for r in RECIPES.values()}
    assert kinds == {"LinearLearner", "BoostingLearner", "DenseLearner"}
    assert len({r.file for r in RECIPES.values()}) == len(RECIPES)


def test_a_lean_recipe_is_trained_on_features_of_fewer_nodes(trained: tuple[Path, dict[str, Any]]) -> None:
    folder, front = trained
    files = {e["recipe"]: folder / e["file"] for e in front["scorers"]}
    lean, rich = (len(onnx.load(files[name]).graph.node) for name in ("lean dense 16-16", "dense 32-32"))
    assert lean == rich - 7
    shares = {e["recipe"]: e["held_out"]["forgone_percent"]["value"] for e in front["scorers"]}
    assert shares["lean dense 16-16"] < front["beside"]["static closed form"]["forgone_percent"]["value"] / 10


def test_values_without_lean_features_are_trained_without_them(
    tmp_path: Path, monkeypatch: pytest.MonkeyPatch
) -> None:
    folder = labelled(tmp_path / "data", trees=60, horizon=0.0)
    few = {name: RECIPES[name] for name in ("lean dense 16-16", "linear")}
    monkeypatch.setattr("distill.train.RECIPES", few)
    assert [e["recipe"] for e in train(folder, tmp_path / "front", n_boot=2)["scorers"]] == ["linear"]
    with pytest.raises(
        InputError, match="lean features: are those of dynamic values of a Gaussian leaf table"
    ):
        train(folder, tmp_path / "front", recipes=["lean dense 16-16"])


@pytest.mark.parametrize(
    ("recipes", "message"),
    [(["forest"], "recipes: must be among linear, .*; got 'forest'"), ([], "must name at least one")],
)
def test_unknown_recipes_are_named(dataset: Path, tmp_path: Path, recipes: list[str], message: str) -> None:
    with pytest.raises(InputError, match=message):
        train(dataset, tmp_path / "front", recipes=recipes)
    assert not (tmp_path / "front").exists()


def test_a_dataset_too_small_to_split_is_named(tmp_path: Path) -> None:
    with pytest.raises(InputError, match="trees enough for the part"):
        train(labelled(tmp_path / "data", trees=2), tmp_path / "front")
    assert not (tmp_path / "front").exists()


@pytest.mark.slow
def test_accuracy_on_the_default_family(tmp_path: Path) -> None:
    """8,000 trees: the figures that the project promises, on held-out trees."""
    front = train(labelled(tmp_path / "data", trees=8000, seed=1), tmp_path / "front")
    forgone = {e["recipe"]: e["held_out"]["forgone_percent"]["value"] for e in front["scorers"]}
    relative = {e["recipe"]: e["held_out"]["relative_forgone_percent"]["value"] for e in front["scorers"]}
    assert min(forgone.values()) <= 0.10
    assert min(x for name, x in forgone.items() if "boosting" in name) <= 0.25
    assert min(relative.values()) <= 1.0
