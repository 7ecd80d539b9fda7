"""What the README shows works as it is written."""

from __future__ import annotations

import json
import re
from pathlib import Path

import numpy as np
import pytest

from distill.cli import run
from distill.family import draw, load_family
from distill.record import parse_record, to_record
from distill.runtime import Scorer
from distill.sample_data import FAMILIES

ROOT = Path(__file__).parents[1]
README = (ROOT / "README.md").read_text()


def blocks(language):
    """Code blocks of one language."""
    return re.findall(rf"```{language}\n(.*?)```", README, flags=re.S)


def test_the_record_is_valid():
    (record,) = blocks("json")
    tree = parse_record(record)
    assert tree.n_leaves == 3
    assert tree.remaining == 60


def test_the_records_of_the_data_page_are_valid():
    page = (ROOT / "datasets" / "README.md").read_text()
    lines = re.findall(r"```json\n(.*?)```", page, flags=re.S)[0].splitlines()
    trees = [parse_record(line) for line in lines]
    assert [(tree.has_chance, tree.mean is None, tree.cov is not None) for tree in trees] == [
        (True, False, False),
        (False, True, False),
        (False, False, True),
    ]


def leaves():
    return {
        "mean": np.array([3.1, 2.4, 2.9]),
        "var": np.array([0.2, 1.1, 0.8]),
        "noise": np.full(3, 4.0),
        "gain": np.ones(3),
        "offset": np.zeros(3),
        "action": np.array([1, 0, 0]),
        "cost": np.zeros(3),
    }


def test_the_embedding_runs(monkeypatch):
    (code,) = (block for block in blocks("python") if "scorer.score" in block)
    monkeypatch.chdir(ROOT)
    scope = leaves()
    exec(code.replace("held.update(", "first = leaf\nheld.update("), scope)
    assert scope["first"] == scope["scores"].pick
    assert 0 <= scope["leaf"] < 3
    assert scope["scores"].voc.shape == (3,)


@pytest.mark.parametrize(("remaining", "who"), [(60, "scorer"), (59, "closed"), (1, "scorer")])
def test_the_hand_over_runs(remaining, who):
    """In turns while half a rollout a leaf is left, then the scorer alone."""
    (code,) = (block for block in blocks("python") if "Scorer.closed_form()" in block)
    scope = {**leaves(), "remaining": remaining, "Scorer": Scorer}
    scope["scorer"] = Scorer.load(ROOT / "models" / "cold-store.onnx")
    exec(code, scope)
    assert scope["chooser"] is scope[who]
    assert 0 <= scope["leaf"] < 3


def test_the_backup_runs(monkeypatch):
    (code,) = (block for block in blocks("python") if "Backup" in block)
    monkeypatch.chdir(ROOT)
    tree = draw(load_family(FAMILIES / "crossing-traffic.toml"), 0, 0)
    scope = {
        "line": json.dumps(to_record(tree)),
        "leaf": 0,
        "new_mean": float(tree.mean[0]),
        "new_var": float(tree.var[0]) / 2,
    }
    exec(code, scope)
    assert 0 <= scope["leaf"] < tree.n_leaves


def test_the_recorder_runs(monkeypatch, tmp_path):
    (code,) = (block for block in blocks("python") if "Recorder" in block)
    monkeypatch.chdir(tmp_path)
    ones = np.ones(3)
    scope = dict.fromkeys(("mean", "var", "noise", "gain", "offset", "cost"), ones)
    scope["action"] = np.array([1, 0, 0])
    exec(code.replace("sample=0.01", "sample=1"), scope)
    recorder = scope["recorder"]
    assert recorder.close()
    assert recorder.counters.written == 1


def test_the_commands_exist(capsys):
    named = set(re.findall(r"voc-distill ([a-z]+) ", "\n".join(blocks("bash"))))
    assert named >= {"tour", "price", "generate", "train", "ship", "validate"}
    for command in named:
        with pytest.raises(SystemExit) as done:
            run([command, "--help"])
        assert done.value.code == 0
    capsys.readouterr()


def test_pictures_and_files_it_points_to_exist():
    for target in re.findall(r"!\[.*?\]\((.*?)\)", README):
        assert (ROOT / target).is_file(), target
    for path in re.findall(r"`((?:datasets|models)/[\w./-]*)`", README):
        assert (ROOT / path).exists(), path
