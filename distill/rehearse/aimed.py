"""What a rehearsal is held to, said once for its findings, tables and pictures."""

from __future__ import annotations

from typing import Final

__all__ = ["BEST", "FEWEST", "LIMITS", "SAVED", "TOO_FEW"]

BEST: Final = "best scorer"  # its decisions of either half are those of the scorer that did best on the other
# Group of rivals -> ratios of regret: what the best scorer is meant to reach, and what it must not exceed.
LIMITS: Final = {"sampling": (0.85, 1.1), "static": (0.95, 1.05), "exact": (1.0, 1.0)}
SAVED: Final = 0.3  # share of the rollouts that stopping early is meant to save

# Decisions of a cell below which nothing is claimed. Intervals of resampled decisions are too narrow where
# there are few: of ratios of known regrets, exponential on 1 to 10 in 10 decisions and 0 on the others, those
# of 20 decisions held the truth in 83 to 91 % of 1,500 trials, those of 40 in 92 to 93 %.
FEWEST: Final = 40
TOO_FEW: Final = "too few decisions to tell"
