"""What a rehearsal is held to, said once for its findings, tables and pictures."""

from __future__ import annotations

from typing import Final

__all__ = ["BEST", "LIMITS", "SAVED"]

BEST: Final = "best scorer"  # its decisions of either half are those of the scorer that did best on the other
# Group of rivals -> ratios of regret: what the best scorer is meant to reach, and what it must not exceed.
LIMITS: Final = {"sampling": (0.85, 1.1), "static": (0.95, 1.05), "exact": (1.0, 1.0)}
SAVED: Final = 0.3  # share of the rollouts that stopping early is meant to save
