"""The same scorer file from Node: the same picks as from Python, on stored cases and on random trees."""

from __future__ import annotations

import json
import os
import re
import shutil
import subprocess
import tempfile
from pathlib import Path
from typing import Any

import numpy as np
import pytest
from ladder import ONNX_ELSEWHERE
from leaf_tables import table
from scorers import KINDS, scorer_bytes

from distill.runtime import Scorer
from distill.scorer_inputs import ANY_BATCH, ANY_HORIZON, InputKind

HERE = Path(__file__).parent / "node"
MODELS = sorted((Path(__file__).parents[1] / "models").glob("*.onnx"))
SHARE_BESIDE = 0.02  # of leaves: a feature that rounds otherwise may fall on the other side of a split


@pytest.fixture(scope="module")
def runner(tmp_path_factory: pytest.TempPathFactory) -> Path:
    """A folder with score.mjs and onnxruntime for Node, kept between runs."""
    node, npm = shutil.which("node"), shutil.which("npm")
    if node is None or npm is None:
        pytest.skip("no Node on this machine")
    wanted = (HERE / "package.json").read_text()
    version = json.loads(wanted)["dependencies"]["onnxruntime-web"]
    kept = Path(tempfile.gettempdir()) / f"voc-distill-node-{os.getuid()}-{version}"
    if not kept.is_dir():
        fresh = tmp_path_factory.mktemp("node")
        (fresh / "package.json").write_text(wanted)
        done = subprocess.run(
            [npm, "install", "--no-audit", "--no-fund", "--ignore-scripts", "--no-package-lock"],
            cwd=fresh, capture_output=True, text=True, timeout=240, check=False,
        )  # fmt: skip
        if done.returncode:
            pytest.skip(f"npm cannot install onnxruntime-web here: {done.stderr.strip()[-200:]}")
        try:
            fresh.rename(kept)
        except OSError:  # another run was faster
            kept = fresh
    shutil.copy(HERE / "score.mjs", kept / "score.mjs")
    return kept


def from_node(runner: Path, scorer: Path, cases: list[dict[str, Any]]) -> list[dict[str, Any]]:
    plain = [
        {name: x.tolist() if isinstance(x, np.ndarray) else x for name, x in case.items()} for case in cases
    ]
    (scorer.parent / "cases.json").write_text(json.dumps(plain))
    done = subprocess.run(
        ["node", "score.mjs", str(scorer), str(scorer.parent / "cases.json")],
        cwd=runner, capture_output=True, text=True, timeout=240, check=False,
    )  # fmt: skip
    assert done.returncode == 0, done.stderr[-2000:]
    return [json.loads(line) for line in done.stdout.splitlines()]


def assert_same_answers(scorer: Scorer, cases: list[dict[str, Any]], answers: list[dict[str, Any]]) -> None:
    assert len(answers) == len(cases) > 0
    beside = leaves = 0
    for case, got in zip(cases, answers, strict=True):
        want = scorer.score(**case)
        assert got["pick"] == [want.pick]
        assert got["worth_it"] == [want.worth_it]
        np.testing.assert_array_equal(got["batch"], want.batch)
        off = np.abs(np.array(got["voc"]) - want.voc) > ONNX_ELSEWHERE * want.voc
        beside, leaves = beside + int(off.sum()), leaves + len(off)
        if "voc_high" in got:
            assert np.all(np.array(got["voc_high"]) >= np.array(got["voc"]))
    assert beside <= SHARE_BESIDE * leaves


@pytest.mark.parametrize("model", MODELS, ids=[m.stem for m in MODELS])
def test_shipped_scorers_pick_alike_on_the_cases_stored_in_them(
    model: Path, runner: Path, tmp_path: Path
) -> None:
    scorer = Scorer.load(model)
    copy = Path(shutil.copy(model, tmp_path))
    cases = [case["inputs"] for case in scorer.facts["self_test"]]
    assert_same_answers(scorer, cases, from_node(runner, copy, cases))


def test_the_page_about_other_languages_shows_what_runs(runner: Path) -> None:
    """Its block for Node, run as it stands."""
    root = Path(__file__).parents[1]
    (code,) = re.findall(r"```js\n(.*?)```", (root / "models" / "other-languages.md").read_text(), flags=re.S)
    (runner / "page.mjs").write_text(code.replace("models/", f"{root}/models/"))
    done = subprocess.run(
        ["node", "page.mjs"], cwd=runner, capture_output=True, text=True, timeout=120, check=False
    )
    assert done.returncode == 0, done.stderr[-2000:]
    scorer = Scorer.load(root / "models" / "cold-store-fast.onnx")
    ones = np.ones(3)
    want = scorer.pick(
        mean=np.array([3.1, 2.4, 2.9]), var=np.array([0.2, 1.1, 0.8]), noise_var=4 * ones, gain=ones,
        offset=0 * ones, cost=0 * ones, action=np.array([1, 0, 0]), remaining=60,
    )  # fmt: skip
    assert done.stdout.split()[0] == str(want)


@pytest.mark.parametrize(
    ("kind", "file", "numbers"),
    [(ANY_HORIZON, "any-horizon.onnx", (0.0, 4.0, np.inf)), (ANY_BATCH, "any-batch.onnx", (1.0, 4.0, 32.0))],
    ids=["horizon", "batch"],
)
def test_a_file_for_any_number_picks_alike_at_each(
    kind: InputKind, file: str, numbers: tuple[float, ...], runner: Path, tmp_path: Path
) -> None:
    copy = Path(shutil.copy(Path(__file__).parents[1] / "datasets" / "conformance" / file, tmp_path))
    cases = [
        {**table(np.random.default_rng(i), 3 + i, 1 + i % 5, 5 + 9 * i), kind.varies[0]: np.array(x)}
        for i in range(12)
        for x in numbers
    ]
    told = [kind.to_json({name: np.asarray(x) for name, x in case.items()}) for case in cases]
    assert_same_answers(Scorer.load(copy), cases, from_node(runner, copy, told))


@pytest.mark.parametrize(
    "kind", ["dense", *(pytest.param(k, marks=pytest.mark.slow) for k in KINDS if k != "dense")]
)
def test_every_kind_of_learner_picks_alike_on_random_trees(kind: str, runner: Path, tmp_path: Path) -> None:
    data = scorer_bytes(kind)
    (tmp_path / "scorer.onnx").write_bytes(data)
    cases = [table(np.random.default_rng(i), 3 + i, 1 + i % 5, 5 + 9 * i) for i in range(60)]
    scorer = Scorer.from_bytes(data)
    cases = [case for case in cases if scorer.score(**case).in_range.all()]
    answers = from_node(runner, tmp_path / "scorer.onnx", cases)
    assert len(cases) > 20
    assert set(answers[0]) == {"voc", "batch", "voc_high", "in_range", "pick", "worth_it"}
    assert_same_answers(scorer, cases, answers)
