"""Peak memory of the process that asks, for tests that start one of their own."""

from __future__ import annotations

from pathlib import Path


def peak_mb() -> float:
    """Largest resident size so far, MB. Not ru_maxrss, which a child takes over from what started it."""
    lines = Path("/proc/self/status").read_text().splitlines()
    return int(next(line for line in lines if line.startswith("VmHWM:")).split()[1]) / 1024
