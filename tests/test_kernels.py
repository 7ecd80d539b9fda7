"""Compiled code on disk follows every file that it was made from."""

from __future__ import annotations

import subprocess
import sys
from pathlib import Path

import distill.kernels
from distill.kernels import stamp

CALLER = """
from distill.callee import (
    twice,
)
from distill.kernels import compiled

@compiled
def four_times(x: float) -> float:
    return twice(twice(x))
"""
CALLEE = """
from distill.kernels import compiled

@compiled
def twice(x: float) -> float:
    return {factor} * x
"""


def package(folder: Path, factor: str) -> Path:
    inside = folder / "distill"
    inside.mkdir(exist_ok=True)
    (inside / "__init__.py").touch()
    (inside / "kernels.py").write_text(Path(distill.kernels.__file__).read_text())
    (inside / "caller.py").write_text(CALLER)
    (inside / "callee.py").write_text(CALLEE.format(factor=factor))
    return folder


def run(folder: Path) -> list[str]:
    """What the caller answers, and how often its compiled code came from disk."""
    code = "from distill.caller import four_times as f; print(f(1.0), sum(f.stats.cache_hits.values()))"
    done = subprocess.run(
        [sys.executable, "-c", code], cwd=folder, capture_output=True, text=True, check=True, timeout=120
    )
    return done.stdout.split()[:2]


def test_a_change_in_a_file_that_a_kernel_calls_into_is_seen(tmp_path):
    assert run(package(tmp_path, "2.0")) == ["4.0", "0"]
    assert run(tmp_path) == ["4.0", "1"]  # kept on disk
    assert run(package(tmp_path, "3.0")) == ["9.0", "0"]  # caller.py has not changed


def test_stamp_reaches_indirect_imports():
    root = Path(distill.kernels.__file__).parent
    reached = {p.name for p in distill.kernels._reach(root / "exact/dynamic_flat.py")}
    assert {"dynamic_flat.py", "one_look.py", "action_grid.py", "numerics.py", "double_double.py"} <= reached
    assert "cli.py" not in reached
    assert stamp(root / "exact/dynamic_flat.py") != stamp(root / "exact/one_look.py")
