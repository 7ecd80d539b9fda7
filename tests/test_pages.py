"""What the pages about data and other languages say is what the code does."""

from __future__ import annotations

import re
from pathlib import Path

import numpy as np
import onnxruntime as ort
import pytest
from ladder import CLOSED_FORM

from distill.cli import run
from distill.runtime import Scorer
from distill.scorer_inputs import KINDS
from distill.shards import read_candidates

ROOT = Path(__file__).parents[1]
LANGUAGES = (ROOT / "models" / "other-languages.md").read_text()
DATA = (ROOT / "datasets" / "README.md").read_text()


def test_the_inputs_of_each_kind_of_file_are_those_of_the_files() -> None:
    rows = dict(re.findall(r"^\| ([a-z/ ,]+) \| (`.*) \|$", LANGUAGES, flags=re.M))
    assert set(rows) == set(KINDS)
    for path in (ROOT / "datasets" / "conformance").glob("*.onnx"):
        kind = Scorer.load(path).kind
        assert kind is not None
        columns, action, numbers = rows.pop(kind.name).split(" | ")
        told = {name: ("tensor(double)", ["n"]) for name in re.findall(r"`(\w+)`", columns)}
        told |= {"action": ("tensor(int64)", ["n"])} if action == "yes" else {}
        told |= {name: ("tensor(double)", []) for name in re.findall(r"`(\w+)`", numbers)}
        session = ort.InferenceSession(path.read_bytes(), providers=["CPUExecutionProvider"])
        assert told == {x.name: (x.type, list(x.shape)) for x in session.get_inputs()}
    assert rows == {}


def test_the_command_of_the_data_page_makes_the_sample_again(
    tmp_path: Path, monkeypatch: pytest.MonkeyPatch, capsys: pytest.CaptureFixture[str]
) -> None:
    command = re.search(r"`voc-distill (generate --family datasets/sample[^`]*)`", DATA)
    assert command is not None
    words = command[1].split()
    monkeypatch.chdir(tmp_path)
    (tmp_path / "datasets").symlink_to(ROOT / "datasets")
    assert run([*words, "--workers", "1"]) == 0
    made, sample = (read_candidates(folder)["mean"] for folder in (words[-1], ROOT / "datasets" / "sample"))
    np.testing.assert_allclose(made, sample, rtol=CLOSED_FORM)
    capsys.readouterr()
