"""Imports point downward, and the light side stands on numpy and onnxruntime alone."""

from __future__ import annotations

import subprocess
import sys
from pathlib import Path

ROOT = Path(__file__).parents[1]
HEAVY = (
    "gymnasium", "joblib", "matplotlib", "numba", "onnx", "pyarrow", "rich", "scipy", "skl2onnx", "sklearn",
)  # fmt: skip


def test_import_contracts_hold():
    done = subprocess.run(
        [sys.executable, "-c", "from importlinter.cli import lint_imports_command as c; c()", "--no-cache"],
        cwd=ROOT,
        capture_output=True,
        text=True,
        check=False,
    )
    assert done.returncode == 0, done.stdout + done.stderr


def test_top_level_holds_nothing_else():
    fixed = {"README.md", "DEVELOPERS.md", "pyproject.toml", "distill", "datasets", "tests", "models"}
    git = subprocess.run(["git", "ls-files"], cwd=ROOT, capture_output=True, text=True, check=False)
    top = {line.partition("/")[0] for line in git.stdout.splitlines()}
    assert {name for name in top if not name.startswith(".")} <= fixed


def test_importing_the_package_imports_nothing_heavy():
    code = "import sys, distill, distill.record; print(sorted({m.partition('.')[0] for m in sys.modules}))"
    done = subprocess.run([sys.executable, "-c", code], capture_output=True, text=True, check=True)
    for heavy in HEAVY:
        assert f"'{heavy}'" not in done.stdout
