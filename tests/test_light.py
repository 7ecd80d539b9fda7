"""The light side: an agent needs numpy and onnxruntime, nothing else of ours or anyone's."""

from __future__ import annotations

import os
import subprocess
import sys
from pathlib import Path

import pytest
from scorers import scorer_bytes

ROOT = Path(__file__).parents[1]
HEAVY = (
    "gymnasium",
    "joblib",
    "matplotlib",
    "numba",
    "onnx",
    "pyarrow",
    "rich",
    "scipy",
    "skl2onnx",
    "sklearn",
)

AGENT = """
import sys
import numpy as np
from distill.runtime import Scorer

scorer = Scorer.load(sys.argv[1], strict=True)
n = 12
table = dict(mean=np.linspace(-1, 1, n), var=np.full(n, 0.5), noise_var=np.full(n, 2.0), gain=np.full(n, 0.9),
             offset=np.zeros(n), action=np.arange(n) % 3, cost=np.zeros(n), remaining=40)
scores = scorer.score(**table)
assert scores.pick == scorer.pick(**table) == int(np.argmax(scores.voc))
assert np.all(np.isfinite(scores.voc)) and scores.voc.max() > 0
print(" ".join(sorted({name.partition(".")[0] for name in sys.modules})))
"""


@pytest.fixture(scope="module")
def scorer_path(tmp_path_factory):
    path = tmp_path_factory.mktemp("scorer") / "scorer.onnx"
    path.write_bytes(scorer_bytes("boosting"))
    return path


def run_agent(python, path, cwd):
    env = {k: v for k, v in os.environ.items() if not k.startswith("PYTHON")}
    done = subprocess.run(
        [str(python), "-c", AGENT, str(path)], cwd=cwd, env=env, capture_output=True, text=True, check=False
    )
    assert done.returncode == 0, done.stderr
    return set(done.stdout.split())


def test_scoring_imports_nothing_heavy(scorer_path, tmp_path):
    assert not run_agent(sys.executable, scorer_path, tmp_path) & set(HEAVY)


def test_scoring_imports_only_the_light_files(scorer_path, tmp_path):
    code = AGENT.replace("print(", "print(*(m for m in sys.modules if m.startswith('distill.')));#")
    done = subprocess.run(
        [sys.executable, "-c", code, str(scorer_path)],
        cwd=tmp_path,
        capture_output=True,
        text=True,
        check=True,
    )
    light = {
        "answers",
        "closed_form",
        "errors",
        "fallback",
        "leaf_buffers",
        "normal_fits",
        "onnx_pruned",
        "onnx_reader",
    }
    light |= {
        "held_leaves",
        "record_rows",
        "runtime",
        "schema",
        "scorer_file",
        "scorer_inputs",
        "scorer_shapes",
    }
    assert {name.removeprefix("distill.") for name in done.stdout.split()} == light


def test_a_fresh_environment_with_numpy_and_onnxruntime_alone_scores(scorer_path, tmp_path):
    """Installs the package without extras and runs an agent from outside the checkout."""
    env = tmp_path / "light"
    subprocess.run([sys.executable, "-m", "venv", str(env)], check=True)
    python = env / "bin" / "python"
    subprocess.run(
        [str(python), "-m", "pip", "install", "--quiet", "--disable-pip-version-check", str(ROOT)], check=True
    )
    listed = subprocess.run(
        [str(python), "-m", "pip", "list", "--format=freeze"], capture_output=True, text=True, check=True
    )
    installed = {line.partition("==")[0].lower().replace("-", "_") for line in listed.stdout.split()}
    assert {"numpy", "onnxruntime", "voc_distill"} <= installed
    assert not installed & {*HEAVY, "scikit_learn"}
    assert not run_agent(python, scorer_path, tmp_path) & set(HEAVY)
    command = [str(env / "bin" / "voc-distill"), "price", "-"]
    refused = subprocess.run(command, input="", capture_output=True, text=True, check=False, cwd=tmp_path)
    assert refused.returncode == 2
    assert "train extra" in refused.stderr
    assert len(refused.stderr.splitlines()) == 1
